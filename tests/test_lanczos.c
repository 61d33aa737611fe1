/* whorl_lanczos.h on maps with known spectra: diagonal matrices, torus Laplacians, random matrices. */
#include "check.h"
#include "threads.h"
#include "whorl.h"

/* ---- maps with known spectra ------------------------------------------------------------------------------------------ */

typedef struct known_map {
    const double *diagonal; /* values */
    int side;               /* of the torus */
    const double *matrix;   /* dense, column by column */
} known_map;

/* diag(values), on any element type */
static whorl_status diagonal_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    const known_map *known = (const known_map *)map->context;
    uint64_t i, width = whorl_element_is_complex(map->element) ? 2 : 1, reals = map->rows * width * (uint64_t)count;
    (void)host;
    for (i = 0; i < reals; i++) {
        double value = known->diagonal[i / width % map->rows];
        if (whorl_element_is_float(map->element))
            ((float *)y)[i] = (float)(value * (double)((const float *)x)[i]);
        else
            ((double *)y)[i] = value * ((const double *)x)[i];
    }
    return WHORL_OK;
}

/* 4 - (sum of neighbours) on a square torus: values 4 - 2 cos kx - 2 cos ky */
static whorl_status torus_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    const known_map *known = (const known_map *)map->context;
    const double *in = (const double *)x;
    double *out = (double *)y;
    int i, j, n = known->side;
    (void)host;
    (void)count;
    for (i = 0; i < n; i++)
        for (j = 0; j < n; j++)
            out[i * n + j] = 4.0 * in[i * n + j] - in[(i + 1) % n * n + j] - in[(i + n - 1) % n * n + j] -
                             in[i * n + (j + 1) % n] - in[i * n + (j + n - 1) % n];
    return WHORL_OK;
}

static whorl_status matrix_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    const known_map *known = (const known_map *)map->context;
    uint64_t i, j, n = map->rows;
    const double *a = known->matrix, *in = (const double *)x;
    double *out = (double *)y;
    (void)host;
    (void)count;
    if (map->element == WHORL_REAL_DOUBLE) {
        memset(out, 0, (size_t)(8 * n));
        for (j = 0; j < n; j++)
            for (i = 0; i < n; i++)
                out[i] += a[j * n + i] * in[j];
        return WHORL_OK;
    }
    memset(out, 0, (size_t)(16 * n));
    for (j = 0; j < n; j++)
        for (i = 0; i < n; i++) {
            const double *c = a + 2 * (j * n + i);
            out[2 * i] += c[0] * in[2 * j] - c[1] * in[2 * j + 1];
            out[2 * i + 1] += c[0] * in[2 * j + 1] + c[1] * in[2 * j];
        }
    return WHORL_OK;
}

static whorl_map make_map(const known_map *known, uint64_t n, whorl_element element, whorl_map_apply_function apply)
{
    whorl_map map = whorl_map_default();
    map.rows = map.columns = n;
    map.element = element;
    map.hermitian = 1;
    map.context = known;
    map.apply = apply;
    return map;
}

/* ---- what every solve must satisfy ------------------------------------------------------------------------------------ */

/* Residuals by the map's own function, unit norms, orthogonality, order; `slack` times the tolerance. */
static void check_pairs(const whorl_map *map, const whorl_lanczos *solver, double tolerance, int highest)
{
    whorl_host host = whorl_host_default();
    uint64_t n = map->rows;
    int32_t k, j, count = whorl_lanczos_count(solver);
    double norm = whorl_lanczos_norm(solver), rounding = whorl_element_is_float(map->element) ? 1e-6 : 1e-13;
    void *image = calloc((size_t)n + 1, 16);
    for (k = 0; k < count; k++) {
        double residual = -1.0, value = whorl_lanczos_value(solver, k);
        const void *v = whorl_lanczos_vector(solver, k);
        CHECK_STATUS(whorl_map_residual(&host, map, value, v, image, &residual), WHORL_OK, &host);
        CHECK(residual <= (tolerance + rounding) * norm + 1e-300);
        CHECK_NEAR(residual, whorl_lanczos_residual(solver, k), rounding * norm, "reported residual");
        if (k > 0)
            CHECK(highest ? value <= whorl_lanczos_value(solver, k - 1) : value >= whorl_lanczos_value(solver, k - 1));
        for (j = 0; j <= k; j++) {
            whorl_complex dot = whorl_dot(map->element, whorl_lanczos_vector(solver, j), v, n);
            CHECK_NEAR(dot.re, j == k ? 1.0 : 0.0, 30.0 * rounding, "orthonormal, re");
            CHECK_NEAR(dot.im, 0.0, 30.0 * rounding, "orthonormal, im");
        }
    }
    free(image);
}

static whorl_lanczos *solve(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc)
{
    whorl_lanczos *solver = NULL;
    CHECK_STATUS(whorl_lanczos_make(host, map, desc, &solver), WHORL_OK, host);
    CHECK_STATUS(whorl_lanczos_advance(host, map, solver, 0), WHORL_OK, host);
    check_pairs(map, solver, desc->tolerance == 0.0 ? 1e-10 : desc->tolerance, desc->end == WHORL_HIGHEST);
    return solver;
}

static int compare_reals(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

/* ---- tests ------------------------------------------------------------------------------------------------------------ */

static void small_dimensions(void)
{
    static const double values[8] = {3.0, -1.0, 2.0, -1.0, 7.0, 0.0, 2.0, -5.0};
    uint64_t n;
    int32_t wanted;
    whorl_element element;
    for (element = WHORL_REAL_DOUBLE; element <= WHORL_COMPLEX_FLOAT; element++)
        for (n = 0; n <= 8; n++)
            for (wanted = 1; wanted <= 9; wanted += 4) {
                known_map known = {values, 0, NULL};
                whorl_map map = make_map(&known, n, element, diagonal_apply);
                whorl_host host = whorl_host_default();
                whorl_lanczos_desc desc = whorl_lanczos_default();
                whorl_lanczos *solver;
                double sorted[8];
                int32_t k, count = (uint64_t)wanted < n ? wanted : (int32_t)n;
                desc.wanted = wanted;
                desc.tolerance = whorl_element_is_float(element) ? 1e-5 : 0.0;
                memcpy(sorted, values, sizeof values);
                qsort(sorted, (size_t)n, sizeof *sorted, compare_reals);
                solver = solve(&host, &map, &desc);
                CHECK(whorl_lanczos_count(solver) == count);
                CHECK(whorl_lanczos_checked(solver) == 1);
                CHECK(whorl_lanczos_cut(solver) ==
                      (count > 0 && (uint64_t)count < n && sorted[count] == sorted[count - 1]));
                for (k = 0; k < count; k++)
                    CHECK_NEAR(whorl_lanczos_value(solver, k), sorted[k],
                               whorl_element_is_float(element) ? 1e-4 : 1e-12, "level of a small matrix");
                CHECK(whorl_lanczos_vector(solver, count) == NULL && whorl_lanczos_vector(solver, -1) == NULL);
                whorl_lanczos_free(&host, solver);
                CHECK(host.bytes_used == 0);
            }
}

/* A tenfold level is reported ten times when ten are asked for, and seen to be cut when four are. */
static void multiplets(void)
{
    double *values = (double *)malloc(2000 * sizeof *values);
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 2000, WHORL_REAL_DOUBLE, diagonal_apply);
    static const int32_t wanted[5] = {1, 4, 10, 11, 25};
    int i, w;
    for (i = 0; i < 2000; i++)
        values[i * 7 % 2000] = (double)(i / 10) * 0.5 - 3.0;
    for (w = 0; w < 10; w++) {
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver;
        int32_t k;
        desc.wanted = wanted[w % 5];
        desc.end = w < 5 ? WHORL_LOWEST : WHORL_HIGHEST;
        solver = solve(&host, &map, &desc);
        CHECK(whorl_lanczos_count(solver) == desc.wanted && whorl_lanczos_checked(solver) == 1);
        CHECK(whorl_lanczos_cut(solver) == (desc.wanted % 10 != 0));
        for (k = 0; k < desc.wanted; k++)
            CHECK_NEAR(whorl_lanczos_value(solver, k), w < 5 ? (double)(k / 10) * 0.5 - 3.0 : 96.5 - (double)(k / 10) * 0.5,
                       1e-10, "tenfold level");
        whorl_lanczos_free(&host, solver);
    }
    free(values);
}

static void torus(void)
{
    enum { SIDE = 40 };
    double *values = (double *)malloc(SIDE * SIDE * sizeof *values), pi = 3.14159265358979323846;
    known_map known = {NULL, SIDE, NULL};
    whorl_map map = make_map(&known, SIDE * SIDE, WHORL_REAL_DOUBLE, torus_apply);
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver;
    int i, j;
    for (i = 0; i < SIDE; i++)
        for (j = 0; j < SIDE; j++)
            values[i * SIDE + j] = 4.0 - 2.0 * cos(2.0 * pi * i / SIDE) - 2.0 * cos(2.0 * pi * j / SIDE);
    qsort(values, SIDE * SIDE, sizeof *values, compare_reals);
    desc.wanted = 9; /* 1 + 4 + 4 */
    solver = solve(&host, &map, &desc);
    for (i = 0; i < 9; i++)
        CHECK_NEAR(whorl_lanczos_value(solver, i), values[i], 1e-9, "4 - 2 cos kx - 2 cos ky (common practice)");
    CHECK(whorl_lanczos_checked(solver) == 1 && whorl_lanczos_cut(solver) == 0);
    whorl_lanczos_free(&host, solver);
    free(values);
}

/* Close pairs, and scales that differ by 10^12. */
static void hard_spectra(void)
{
    double values[500];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 500, WHORL_REAL_DOUBLE, diagonal_apply);
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver;
    int i;
    for (i = 0; i < 500; i++)
        values[i] = i < 4 ? 1e-6 * i : 1.0 + 0.01 * i;
    solver = solve(&host, &map, &desc);
    for (i = 0; i < 4; i++)
        CHECK_NEAR(whorl_lanczos_value(solver, i), 1e-6 * i, 1e-9, "levels 1e-6 apart");
    CHECK(whorl_lanczos_cut(solver) == 0);
    whorl_lanczos_free(&host, solver);
    for (i = 0; i < 500; i++)
        values[i] = (i % 2 == 0 ? 1.0 : -1.0) * pow(10.0, -12.0 * i / 499.0) * 1e140;
    desc.end = WHORL_HIGHEST;
    desc.wanted = 3;
    solver = solve(&host, &map, &desc);
    for (i = 0; i < 3; i++)
        CHECK_NEAR(whorl_lanczos_value(solver, i) / 1e140, values[2 * i] / 1e140, 1e-9, "levels of a huge matrix");
    whorl_lanczos_free(&host, solver);
}

/* Zero, identity and a projector: the Krylov space ends at once. */
static void few_distinct(void)
{
    double values[300];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 300, WHORL_COMPLEX_DOUBLE, diagonal_apply);
    int kind, i;
    for (kind = 0; kind < 3; kind++) {
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver;
        for (i = 0; i < 300; i++)
            values[i] = kind == 2 ? (i % 60 == 0 ? -1.0 : 0.0) : (double)kind;
        desc.wanted = 7;
        solver = solve(&host, &map, &desc);
        CHECK(whorl_lanczos_count(solver) == 7 && whorl_lanczos_checked(solver) && whorl_lanczos_cut(solver));
        for (i = 0; i < 7; i++)
            CHECK_NEAR(whorl_lanczos_value(solver, i), kind == 2 ? (i < 5 ? -1.0 : 0.0) : (double)kind, 1e-13,
                       "zero, identity, projector");
        whorl_lanczos_free(&host, solver);
    }
}

/* A start vector without the lowest level: only the fresh start can find it. */
static void hidden_level(void)
{
    double values[400], start[400];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 400, WHORL_REAL_DOUBLE, diagonal_apply);
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver;
    int i, unchecked;
    for (i = 0; i < 400; i++) {
        values[i] = 0.1 * i;
        start[i] = i == 0 || i == 2 ? 0.0 : 1.0;
    }
    desc.start = start;
    desc.wanted = 3;
    for (unchecked = 0; unchecked <= 1; unchecked++) {
        desc.unchecked = unchecked;
        solver = solve(&host, &map, &desc);
        CHECK(whorl_lanczos_checked(solver) == !unchecked);
        for (i = 0; i < 3 && !unchecked; i++)
            CHECK_NEAR(whorl_lanczos_value(solver, i), 0.1 * i, 1e-9, "level found by the fresh start");
        if (unchecked)
            CHECK(whorl_lanczos_value(solver, 0) > 0.05);
        whorl_lanczos_free(&host, solver);
    }
}

/*
 * Doublets 0.2 % of the norm apart, a list that ends inside one. While the check's lowest vector is a mixture of the listed
 * level and the next, its value looks like one beyond the list: with these seeds a residual of 1e-3 of the norm is too
 * early to say that nothing is left.
 */
static void check_of_mixtures(void)
{
    static const uint64_t seeds[6] = {0, 41, 63, 79, 236, 300};
    double values[400];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 400, WHORL_REAL_DOUBLE, diagonal_apply);
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    int i, k;
    for (i = 0; i < 40; i++)
        values[i] = i < 2 ? -1.0 : values[i - 2] + 0.002;
    for (i = 40; i < 400; i++)
        values[i] = -0.96 + 1.96 * (i - 39) / 360.0;
    desc.wanted = 5;
    for (i = 0; i < 6; i++) {
        whorl_lanczos *solver;
        desc.seed = seeds[i];
        solver = solve(&host, &map, &desc);
        CHECK(whorl_lanczos_checked(solver) && whorl_lanczos_cut(solver));
        for (k = 0; k < 5; k++)
            CHECK_NEAR(whorl_lanczos_value(solver, k), values[k], 1e-9, "close doublets");
        whorl_lanczos_free(&host, solver);
    }
}

/* Random real and complex matrices against the dense solver; the tightest tolerance against LAPACK's measures. */
static void random_matrices(void)
{
    int is_complex;
    for (is_complex = 0; is_complex <= 1; is_complex++) {
        uint64_t n = 150, width = is_complex ? 2 : 1, i, j;
        double *a = (double *)malloc(n * n * width * sizeof *a), *b = (double *)malloc(n * n * width * sizeof *a), values[150];
        known_map known = {NULL, 0, a};
        whorl_map map = make_map(&known, n, is_complex ? WHORL_COMPLEX_DOUBLE : WHORL_REAL_DOUBLE, matrix_apply);
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver;
        double norm, limit;
        for (j = 0; j < n; j++)
            for (i = 0; i <= j; i++) {
                double re = whorl_random_normal(5, 0, j * n + i), im = i == j ? 0.0 : whorl_random_normal(5, 1, j * n + i);
                a[width * (j * n + i)] = a[width * (i * n + j)] = re;
                if (is_complex) {
                    a[2 * (j * n + i) + 1] = -im;
                    a[2 * (i * n + j) + 1] = im;
                }
            }
        memcpy(b, a, n * n * width * sizeof *a);
        CHECK_STATUS(is_complex ? whorl_dense_hermitian(&host, n, b, values, 0) : whorl_dense_symmetric(&host, n, b, values, 0),
                     WHORL_OK, &host);
        norm = fabs(values[0]) > fabs(values[n - 1]) ? fabs(values[0]) : fabs(values[n - 1]);
        desc.tolerance = WHORL_LANCZOS_LEAST_TOLERANCE;
        desc.wanted = 6;
        solver = solve(&host, &map, &desc);
        limit = 30.0 * (double)n * 2.220446049250313e-16; /* LAPACK's test ratio */
        for (i = 0; i < 6; i++) {
            CHECK_NEAR(whorl_lanczos_value(solver, (int32_t)i), values[i], 1e-12 * norm, "dense solver");
            CHECK(whorl_lanczos_residual(solver, (int32_t)i) <= limit * norm);
        }
        whorl_lanczos_free(&host, solver);
        free(a);
        free(b);
    }
}

/* The settled part of a state: what a next step reads. */
static uint64_t state_digest(const whorl_lanczos *solver)
{
    uint64_t bytes = 0, digest = 0, i;
    const unsigned char *state = (const unsigned char *)whorl_lanczos_state(solver, &bytes);
    for (i = 0; i < 256; i++) /* numbers and counts; columns beyond them may hold scratch */
        digest = (digest ^ state[i]) * UINT64_C(0x9E3779B97F4A7C15) + (digest >> 29);
    return digest;
}

/* The torus with every element of y rounded to float: no vector has a residual of 1e-10 of the norm. */
static whorl_status rounded_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    whorl_status status = torus_apply(host, map, x, y, count);
    uint64_t i;
    for (i = 0; i < map->rows; i++)
        ((double *)y)[i] = (double)(float)((double *)y)[i];
    return status;
}

/* What the recurrence promises and a product does not confirm is not accepted; a tolerance above the errors is met. */
static void inexact_products(void)
{
    enum { SIDE = 20 };
    known_map known = {NULL, SIDE, NULL};
    whorl_map map = make_map(&known, SIDE * SIDE, WHORL_REAL_DOUBLE, rounded_apply);
    uint64_t digest[2] = {0, 0};
    int cancelling, i;
    for (cancelling = 0; cancelling <= 1; cancelling++) {
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver = NULL;
        check_polls polls = {0, 0};
        whorl_status status;
        desc.wanted = 2;
        desc.end = WHORL_HIGHEST;
        desc.most_products = 600;
        CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
        host.poll = cancelling ? check_poll : NULL;
        host.poll_context = &polls;
        i = 0;
        do { /* cancelled at every place where a call can be */
            polls.calls = 0;
            polls.cancel_at = cancelling ? (uint64_t)(2 + i++ % 101) : 0;
            status = whorl_lanczos_advance(&host, &map, solver, 0);
        } while (status == WHORL_CANCELLED && i < 100000);
        CHECK_STATUS(status, WHORL_NOT_CONVERGED, &host);
        CHECK(whorl_lanczos_count(solver) == 0 && whorl_lanczos_checked(solver) == 0);
        digest[cancelling] = state_digest(solver);
        whorl_lanczos_free(&host, solver);
        desc.tolerance = 1e-6;
        desc.most_products = 0;
        host.poll = NULL;
        CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
        CHECK_STATUS(whorl_lanczos_advance(&host, &map, solver, 0), WHORL_OK, &host);
        CHECK_NEAR(whorl_lanczos_value(solver, 0), 8.0, 1e-7, "4 + 2 + 2 (common practice)");
        whorl_lanczos_free(&host, solver);
    }
    CHECK(digest[0] == digest[1]);
}

static void lean_form(void)
{
    double values[3000];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 3000, WHORL_REAL_DOUBLE, diagonal_apply);
    int i, is_float;
    for (i = 0; i < 3000; i++)
        values[i] = sqrt((double)i) - 20.0;
    for (is_float = 0; is_float <= 1; is_float++) {
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver;
        uint64_t full = 0, lean = 0;
        map.element = is_float ? WHORL_REAL_FLOAT : WHORL_REAL_DOUBLE;
        desc.wanted = 1;
        desc.tolerance = is_float ? 1e-5 : 0.0;
        CHECK_STATUS(whorl_lanczos_bytes(&host, &map, &desc, &full), WHORL_OK, &host);
        desc.lean = 1;
        CHECK_STATUS(whorl_lanczos_bytes(&host, &map, &desc, &lean), WHORL_OK, &host);
        solver = solve(&host, &map, &desc);
        CHECK(whorl_lanczos_is_lean(solver) && whorl_lanczos_checked(solver) == 0 && whorl_lanczos_count(solver) == 1);
        CHECK_NEAR(whorl_lanczos_value(solver, 0), -20.0, is_float ? 1e-4 : 1e-9, "lowest by the lean form");
        whorl_lanczos_free(&host, solver);
        desc.wanted = 2;
        CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_BAD_ARGUMENT, &host);
        CHECK(solver == NULL);
    }
}

/* The byte limit shrinks the window, then turns to the lean form, then refuses with a figure that is enough. */
static void byte_limits(void)
{
    double *values = (double *)malloc(100000 * sizeof *values);
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 20000, WHORL_REAL_DOUBLE, diagonal_apply);
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver = NULL;
    uint64_t bytes = 0;
    int i;
    for (i = 0; i < 100000; i++)
        values[i] = sqrt((double)i);
    desc.wanted = 2;
    host.byte_limit = 2200000; /* 13 vectors */
    CHECK_STATUS(whorl_lanczos_bytes(&host, &map, &desc, &bytes), WHORL_OK, &host);
    CHECK(bytes <= host.byte_limit);
    solver = solve(&host, &map, &desc);
    CHECK(whorl_lanczos_window(solver) < 24 && !whorl_lanczos_is_lean(solver));
    CHECK(host.bytes_peak == bytes);
    CHECK_NEAR(whorl_lanczos_value(solver, 1), 1.0, 1e-8, "with a small window");
    whorl_lanczos_free(&host, solver);
    host.byte_limit = 700000;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OVER_LIMIT, &host);
    CHECK(solver == NULL && strstr(host.reason.text, "raise it to at least ") != NULL);
    host.byte_limit = strtoull(strstr(host.reason.text, "at least ") + 9, NULL, 10);
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
    whorl_lanczos_free(&host, solver);
    host.byte_limit--;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OVER_LIMIT, &host);
    map.rows = map.columns = 100000;
    host.byte_limit = 4500000; /* five vectors */
    desc.wanted = 1;
    desc.tolerance = 1e-6;
    host.bytes_peak = 0;
    CHECK_STATUS(whorl_lanczos_bytes(&host, &map, &desc, &bytes), WHORL_OK, &host);
    solver = solve(&host, &map, &desc);
    CHECK(whorl_lanczos_is_lean(solver) && host.bytes_peak == bytes);
    whorl_lanczos_free(&host, solver);
    free(values);
}

/* ---- same bits -------------------------------------------------------------------------------------------------------- */

static uint64_t bits_of(const whorl_map *map, const whorl_lanczos *solver)
{
    uint64_t digest = whorl_lanczos_products(solver), i, words = map->rows * whorl_element_bytes(map->element) / 4;
    int32_t k;
    for (k = 0; k < whorl_lanczos_count(solver); k++) {
        const char *v = (const char *)whorl_lanczos_vector(solver, k);
        double value = whorl_lanczos_value(solver, k);
        uint64_t bits;
        memcpy(&bits, &value, 8);
        digest = (digest ^ bits) * UINT64_C(0x9E3779B97F4A7C15);
        for (i = 0; i < words; i++) {
            uint32_t word;
            memcpy(&word, v + 4 * i, 4);
            digest = (digest ^ word) * UINT64_C(0x9E3779B97F4A7C15) + (digest >> 31);
        }
    }
    return digest;
}

/* In steps of any size, through checkpoints, on any number of threads and either hook: one result. */
static void same_bits(void)
{
    double *values = (double *)malloc(11000 * sizeof *values);
    known_map known = {values, 0, NULL};
    int lean, i, way;
    for (i = 0; i < 11000; i++)
        values[i] = sqrt((double)(i / 2));
    for (lean = 0; lean <= 1; lean++) {
        whorl_map map = make_map(&known, lean ? 11000 : 10001, lean ? WHORL_REAL_DOUBLE : WHORL_COMPLEX_DOUBLE, diagonal_apply);
        uint64_t first = 0;
        for (way = 0; way < 6; way++) {
            whorl_host host = whorl_host_default();
            whorl_lanczos_desc desc = whorl_lanczos_default();
            whorl_lanczos *solver = NULL;
            whorl_status status;
            uint64_t rounds = 0;
            desc.lean = lean;
            desc.wanted = lean ? 1 : 3;
            desc.tolerance = 1e-7;
            host.threads = way < 2 ? 1 : way;
            if (way == 5)
                host.run = check_pthread_run;
            CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
            do {
                status = whorl_lanczos_advance(&host, &map, solver, way == 0 ? 0 : (uint64_t)way);
                if (way == 1 && ++rounds % 5 == 0) { /* through a checkpoint */
                    uint64_t bytes = 0;
                    const void *state = whorl_lanczos_state(solver, &bytes);
                    void *copy = malloc((size_t)bytes);
                    memcpy(copy, state, (size_t)bytes);
                    whorl_lanczos_free(&host, solver);
                    CHECK_STATUS(whorl_lanczos_resume(&host, &map, copy, bytes, &solver), WHORL_OK, &host);
                    free(copy);
                }
            } while (status == WHORL_UNFINISHED);
            CHECK_STATUS(status, WHORL_OK, &host);
            if (way == 0)
                first = bits_of(&map, solver);
            else
                CHECK(bits_of(&map, solver) == first);
            whorl_lanczos_free(&host, solver);
        }
    }
    free(values);
}

/* Cancelled at every poll and called again: the same bits. */
static void cancel_and_go_on(void)
{
    double *values = (double *)malloc(3000 * sizeof *values);
    known_map known = {values, 0, NULL};
    int lean, i;
    for (i = 0; i < 3000; i++)
        values[i] = sqrt((double)(i / 2));
    for (lean = 0; lean <= 1; lean++) {
        whorl_map map = make_map(&known, 3000, WHORL_REAL_DOUBLE, diagonal_apply);
        uint64_t first = 0, cancelled = 0;
        int way;
        for (way = 0; way < 2; way++) {
            whorl_host host = whorl_host_default();
            whorl_lanczos_desc desc = whorl_lanczos_default();
            whorl_lanczos *solver = NULL;
            check_polls polls = {0, 0};
            whorl_status status;
            desc.lean = lean;
            desc.wanted = lean ? 1 : 2;
            desc.tolerance = 1e-6;
            CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
            host.poll = check_poll;
            host.poll_context = &polls;
            do {
                polls.calls = 0;
                polls.cancel_at = way == 0 ? 0 : 3 + cancelled % 40;
                status = whorl_lanczos_advance(&host, &map, solver, 0);
                cancelled += status == WHORL_CANCELLED;
            } while (status == WHORL_CANCELLED && cancelled < 100000);
            CHECK_STATUS(status, WHORL_OK, &host);
            if (way == 0)
                first = bits_of(&map, solver);
            else
                CHECK(bits_of(&map, solver) == first && cancelled > 20);
            whorl_lanczos_free(&host, solver);
        }
    }
    free(values);
}

/* A state with any one of its leading bytes changed is refused or can be advanced without harm. */
static void damaged_states(void)
{
    double values[300];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 300, WHORL_REAL_DOUBLE, diagonal_apply);
    int i, lean;
    for (i = 0; i < 300; i++)
        values[i] = sqrt((double)i);
    for (lean = 0; lean <= 1; lean++) {
        whorl_host host = whorl_host_default();
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *solver = NULL, *other = NULL;
        uint64_t bytes = 0, at, refused = 0;
        const void *state;
        unsigned char *copy;
        desc.lean = lean;
        desc.wanted = 1;
        CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
        CHECK_STATUS(whorl_lanczos_advance(&host, &map, solver, 31), WHORL_UNFINISHED, &host);
        state = whorl_lanczos_state(solver, &bytes);
        copy = (unsigned char *)malloc((size_t)bytes);
        for (at = 0; at < 256; at++) {
            memcpy(copy, state, (size_t)bytes);
            copy[at] ^= 0x5A;
            other = NULL;
            if (whorl_lanczos_resume(&host, &map, copy, bytes, &other) == WHORL_OK) {
                whorl_status status = whorl_lanczos_advance(&host, &map, other, 300);
                CHECK(status == WHORL_OK || status == WHORL_UNFINISHED || status == WHORL_NOT_CONVERGED ||
                      status == WHORL_NOT_FINITE);
            } else {
                CHECK(other == NULL);
                refused++;
            }
            whorl_lanczos_free(&host, other);
        }
        CHECK(refused > 100); /* sizes, places and counts are most of it */
        CHECK_STATUS(whorl_lanczos_resume(&host, &map, copy, bytes - 1, &other), WHORL_BAD_ARGUMENT, &host);
        free(copy);
        whorl_lanczos_free(&host, solver);
    }
}

/* ---- failures --------------------------------------------------------------------------------------------------------- */

static whorl_status solve_once(whorl_host *host, void *argument)
{
    const whorl_map *map = (const whorl_map *)argument;
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver = NULL;
    whorl_status status = whorl_lanczos_make(host, map, &desc, &solver);
    if (status == WHORL_OK)
        status = whorl_lanczos_advance(host, map, solver, 0);
    else
        CHECK(solver == NULL);
    whorl_lanczos_free(host, solver);
    return status;
}

static void failures(void)
{
    double values[700];
    known_map known = {values, 0, NULL};
    whorl_map map = make_map(&known, 700, WHORL_REAL_DOUBLE, diagonal_apply), other = map;
    whorl_host host = whorl_host_default();
    whorl_lanczos_desc desc = whorl_lanczos_default();
    whorl_lanczos *solver = (whorl_lanczos *)values;
    uint64_t bytes = 0;
    void *memory;
    int i, one_less;
    for (i = 0; i < 700; i++)
        values[i] = sqrt((double)(i / 2));
    check_every_allocation(solve_once, &map, WHORL_OK);
    check_every_poll(solve_once, &map, WHORL_OK);

    other.hermitian = 0;
    CHECK_STATUS(whorl_lanczos_make(&host, &other, NULL, &solver), WHORL_NOT_HERMITIAN, &host);
    CHECK(solver == NULL);
    desc.wanted = -1;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_BAD_ARGUMENT, &host);
    desc = whorl_lanczos_default();
    desc.window = WHORL_VECTOR_MOST_COLUMNS + 1;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_BAD_ARGUMENT, &host);
    desc = whorl_lanczos_default();
    desc.tolerance = -1.0;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_BAD_ARGUMENT, &host);
    desc.tolerance = NAN;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_BAD_ARGUMENT, &host);
    desc = whorl_lanczos_default();
    other = map;
    other.rows = other.columns = UINT64_C(1) << 61;
    CHECK(whorl_lanczos_make(&host, &other, &desc, &solver) == WHORL_TOO_LARGE && solver == NULL);

    /* most_products: what was accepted is there */
    desc.most_products = 40;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &desc, &solver), WHORL_OK, &host);
    CHECK_STATUS(whorl_lanczos_advance(&host, &map, solver, 0), WHORL_NOT_CONVERGED, &host);
    CHECK(whorl_lanczos_count(solver) < 4 && whorl_lanczos_checked(solver) == 0);
    other = map;
    other.rows = other.columns = 600;
    CHECK_STATUS(whorl_lanczos_advance(&host, &other, solver, 0), WHORL_BAD_ARGUMENT, &host);
    whorl_lanczos_free(&host, solver);
    CHECK_STATUS(whorl_lanczos_resume(&host, &map, values, sizeof values, &solver), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lanczos_resume(&host, &map, values, 3, &solver), WHORL_BAD_ARGUMENT, &host);

    /* NaN and overflow inside a product */
    for (i = 0; i < 2; i++) {
        values[350] = i == 0 ? NAN : 1e308;
        CHECK_STATUS(solve_once(&host, &map), WHORL_NOT_FINITE, &host);
    }
    values[350] = values[351] = sqrt(175.0);

    /* an arena of the announced size serves a whole solve; one byte less does not */
    CHECK_STATUS(whorl_lanczos_bytes(&host, &map, NULL, &bytes), WHORL_OK, &host);
    memory = malloc((size_t)bytes + 64);
    for (one_less = 0; one_less <= 1; one_less++) {
        whorl_host small = whorl_host_default();
        whorl_arena arena;
        char *base = (char *)memory + ((64 - ((uintptr_t)memory & 63)) & 63);
        whorl_arena_make(&arena, base, bytes - (uint64_t)one_less);
        whorl_arena_use(&arena, &small);
        CHECK_STATUS(solve_once(&small, &map), one_less ? WHORL_NO_MEMORY : WHORL_OK, &small);
        CHECK(arena.top == 0);
    }
    free(memory);
}

int main(void)
{
    check_begin("lanczos");
    check_run("small_dimensions", small_dimensions);
    check_run("multiplets", multiplets);
    check_run("torus", torus);
    check_run("hard_spectra", hard_spectra);
    check_run("few_distinct", few_distinct);
    check_run("hidden_level", hidden_level);
    check_run("check_of_mixtures", check_of_mixtures);
    check_run("random_matrices", random_matrices);
    check_run("inexact_products", inexact_products);
    check_run("lean_form", lean_form);
    check_run("byte_limits", byte_limits);
    check_run("same_bits", same_bits);
    check_run("cancel_and_go_on", cancel_and_go_on);
    check_run("damaged_states", damaged_states);
    check_run("failures", failures);
    return check_end();
}
