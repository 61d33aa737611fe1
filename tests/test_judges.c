/*
 * test_judges.c: the way from a sum to its levels against general-purpose libraries and against products that share no
 * code with it: LAPACK on all levels, ARPACK on the lowest, Kronecker matrices, residuals by the product term by term.
 */
#include "check.h"
#include "dense_judge.h"
#include "whorl.h"

static const double eps = 1.1102230246251565e-16; /* 2^-53, LAPACK's eps */

static const int kinds[4] = {JUDGE_HERMITIAN | JUDGE_REAL, JUDGE_HERMITIAN,
                             JUDGE_HERMITIAN | JUDGE_REAL | JUDGE_CONSERVING, JUDGE_HERMITIAN | JUDGE_CONSERVING};
static const char *const kind_name[4] = {"real", "complex", "conserving real", "conserving complex"};

static double worst_ratio; /* of residuals of Lanczos vectors to eps times the lowest level */

static double largest(double a, double b) { return fabs(a) > fabs(b) ? fabs(a) : fabs(b); }

/* The library's way to a dense matrix: the map applied to all unit vectors at one go. 1 or 2 doubles an element. */
static double *matrix_of_map(whorl_host *host, const whorl_map *map)
{
    uint64_t n = map->columns, parts = whorl_element_is_complex(map->element) ? 2 : 1, k;
    double *unit = judge_reals(parts * n * n), *matrix = judge_reals(parts * n * n);
    for (k = 0; k < n; k++)
        unit[parts * (k + n * k)] = 1.0;
    CHECK_STATUS(whorl_map_apply(host, map, unit, matrix, (int32_t)n), WHORL_OK, host);
    free(unit);
    return matrix;
}

/* max_k ||A v_k - l_k v_k|| by the naive product. */
static double worst_residual(const whorl_sum *sum, const uint64_t *states, uint64_t n, uint64_t count,
                             const double *levels, const double *v, int is_complex)
{
    double worst = 0.0;
    uint64_t k;
    for (k = 0; k < count; k++) {
        double residual = judge_residual(sum, states, n, levels[k], v + (is_complex ? 2 : 1) * n * k, is_complex);
        if (!(residual <= worst))
            worst = residual;
    }
    return worst;
}

/* max |<v_k, v_l> - delta_kl| */
static double worst_overlap(uint64_t n, uint64_t count, const double *v, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, k, l, r;
    double worst = 0.0;
    for (k = 0; k < count; k++)
        for (l = 0; l <= k; l++) {
            const double *x = v + parts * n * k, *y = v + parts * n * l;
            double re = k == l ? -1.0 : 0.0, im = 0.0;
            for (r = 0; r < parts * n; r++)
                re += x[r] * y[r];
            for (r = 0; r < n && is_complex; r++)
                im += x[2 * r] * y[2 * r + 1] - x[2 * r + 1] * y[2 * r];
            if (!(sqrt(re * re + im * im) <= worst))
                worst = sqrt(re * re + im * im);
        }
    return worst;
}

/* ---- LAPACK on all levels ---------------------------------------------------------------------------------------- */

/* The part of a Kronecker matrix between the states of a list, as the library's element type has it. */
static double *part_of(const double *whole, int32_t sites, const uint64_t *states, uint64_t n, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, size = UINT64_C(1) << sites, r, c, part;
    double *matrix = judge_reals(parts * n * n);
    for (c = 0; c < n; c++)
        for (r = 0; r < n; r++)
            for (part = 0; part < parts; part++)
                matrix[parts * (r + n * c) + part] =
                    whole[2 * ((states == NULL ? r : states[r]) + size * (states == NULL ? c : states[c])) + part];
    return matrix;
}

/* One sum in one space: the map's matrix against Kronecker products, its levels against LAPACK's levels of these. */
static void judge_space(const whorl_sum *sum, const double *whole, const whorl_space *space, const uint64_t *states,
                        const char *name)
{
    whorl_host host = whorl_host_default();
    whorl_action_desc want = whorl_action_default();
    whorl_action *action = NULL;
    whorl_map map;
    uint64_t n = whorl_space_count(space), parts, k;
    double *mine, *judge, *levels = judge_reals(n), *others = judge_reals(n), bound = whorl_sum_norm_bound(sum), norm;
    int is_complex;
    want.sums = sum;
    want.sum_count = 1;
    want.source = space;
    CHECK_STATUS(whorl_action_make(&host, &want, &action), WHORL_OK, &host);
    if (action == NULL)
        return;
    map = whorl_action_map(action);
    is_complex = whorl_element_is_complex(map.element);
    parts = is_complex ? 2 : 1;
    CHECK(map.columns == n && map.rows == n && is_complex == !whorl_sum_is_real(sum));
    mine = matrix_of_map(&host, &map);
    judge = part_of(whole, sum->sites, states, n, is_complex);
    for (k = 0; k < parts * n * n; k++)
        if (!(fabs(mine[k] - judge[k]) <= 1e-14 * bound)) {
            CHECK_NEAR(mine[k], judge[k], 1e-14 * bound, name);
            break;
        }
    if (is_complex)
        CHECK_STATUS(whorl_dense_hermitian(&host, n, mine, levels, n <= 130), WHORL_OK, &host);
    else
        CHECK_STATUS(whorl_dense_symmetric(&host, n, mine, levels, n <= 130), WHORL_OK, &host);
    norm = largest(levels[0], levels[n - 1]);
    if (n <= 130 && norm > 0.0) { /* vectors: LAPACK's ratios, by the naive product */
        double residual = worst_residual(sum, states, n, n, levels, mine, is_complex);
        CHECK_NEAR(residual / ((double)n * eps * norm), 0.0, 30.0, name);
        CHECK_NEAR(worst_overlap(n, n, mine, is_complex) / ((double)n * eps), 0.0, 30.0, name);
    }
#ifdef HAVE_LAPACK
    if (is_complex)
        CHECK(judge_lapack_hermitian(n, judge, others, 0) == 0);
    else
        CHECK(judge_lapack_symmetric(n, judge, others, 0) == 0);
    norm = largest(others[0], others[n - 1]);
    for (k = 0; k < n; k++)
        CHECK_NEAR(levels[k], others[k], 1e-12 * norm, name);
#endif
    whorl_action_free(&host, action);
    free(mine);
    free(judge);
    free(levels);
    free(others);
}

static void judge_sum(uint64_t seed, int32_t sites, int kind)
{
    whorl_term *terms = (whorl_term *)judge_memory(80, sizeof(whorl_term));
    whorl_sum sum = judge_random_sum(seed, sites, (uint64_t)(2 * sites + 6), kinds[kind], terms);
    double *whole = judge_dense(&sum);
    whorl_host host = whorl_host_default();
    whorl_space *space = NULL;
    char name[80];
    int32_t down;
    snprintf(name, sizeof name, "%s sum of %d sites, seed %d", kind_name[kind], (int)sites, (int)seed);
    if (sites <= 8 || kind == 0 || (sites == 9 && kind == 1)) {
        CHECK_STATUS(whorl_space_make_all(&host, sites, &space), WHORL_OK, &host);
        judge_space(&sum, whole, space, NULL, name);
        whorl_space_free(&host, space);
    }
    for (down = 0; (kinds[kind] & JUDGE_CONSERVING) && down <= sites; down++) {
        uint64_t count, *states = judge_states_down(sites, down, &count);
        space = NULL;
        CHECK_STATUS(whorl_space_make_down(&host, sites, down, &space), WHORL_OK, &host);
        CHECK(whorl_space_count(space) == count);
        judge_space(&sum, whole, space, states, name);
        whorl_space_free(&host, space);
        free(states);
    }
    free(whole);
    free(terms);
}

static void test_all_levels(void)
{
    int32_t sites;
    int kind;
    for (sites = 1; sites <= 10; sites++)
        for (kind = 0; kind < 4; kind++)
            judge_sum((uint64_t)(100 * kind + sites), sites, kind);
#ifndef HAVE_LAPACK
    CHECK_SKIP("levels are not compared with LAPACK: install liblapack-dev");
#endif
}

#ifdef HAVE_ARPACK

/* ---- the naive product, tabulated -------------------------------------------------------------------------------- */

/* Column j of the matrix: rows and values at first[j] .. first[j + 1] - 1, written down term by term, site by site. */
typedef struct table {
    uint64_t count, *first, *row;
    double *value;
} table;

static table table_make(const whorl_sum *sum, const uint64_t *states, uint64_t count)
{
    table made;
    uint64_t *target = (uint64_t *)judge_memory(sum->count, sizeof(uint64_t)), j, t, k, used = 0;
    double *part = judge_reals(2 * sum->count), leaves = 0.0;
    made.count = count;
    made.first = (uint64_t *)judge_memory(count + 1, sizeof(uint64_t));
    made.row = (uint64_t *)judge_memory(count * sum->count, sizeof(uint64_t));
    made.value = judge_reals(2 * count * sum->count);
    for (j = 0; j < count; j++) {
        uint64_t distinct = 0;
        for (t = 0; t < sum->count; t++) {
            const whorl_term *term = sum->terms + t;
            int quarter;
            uint64_t state = judge_string_on(term->x, term->z, states == NULL ? j : states[j], &quarter);
            double re = quarter == 0 ? term->re : quarter == 1 ? -term->im : quarter == 2 ? -term->re : term->im;
            double im = quarter == 0 ? term->im : quarter == 1 ? term->re : quarter == 2 ? -term->im : -term->re;
            for (k = 0; k < distinct && target[k] != state; k++) {
            }
            if (k == distinct) {
                target[distinct++] = state;
                part[2 * k] = part[2 * k + 1] = 0.0;
            }
            part[2 * k] += re;
            part[2 * k + 1] += im;
        }
        made.first[j] = used;
        for (k = 0; k < distinct; k++) {
            uint64_t row = judge_find(states, count, target[k]);
            if (row == WHORL_NONE) { /* what leaves the space has to cancel */
                leaves = largest(leaves, largest(part[2 * k], part[2 * k + 1]));
            } else if (part[2 * k] != 0.0 || part[2 * k + 1] != 0.0) {
                made.row[used] = row;
                made.value[2 * used] = part[2 * k];
                made.value[2 * used + 1] = part[2 * k + 1];
                used++;
            }
        }
    }
    made.first[count] = used;
    CHECK_NEAR(leaves, 0.0, 1e-15, "elements that leave the space");
    free(target);
    free(part);
    return made;
}

static void table_free(table *t)
{
    free(t->first);
    free(t->row);
    free(t->value);
}

/* y = A x, of 1 or 2 doubles an element */
static void table_product(const table *t, const double *x, double *y, int parts)
{
    uint64_t j, k;
    memset(y, 0, (size_t)(t->count * (uint64_t)parts) * sizeof(double));
    for (j = 0; j < t->count; j++)
        for (k = t->first[j]; k < t->first[j + 1]; k++)
            if (parts == 1) {
                y[t->row[k]] += t->value[2 * k] * x[j];
            } else {
                y[2 * t->row[k]] += t->value[2 * k] * x[2 * j] - t->value[2 * k + 1] * x[2 * j + 1];
                y[2 * t->row[k] + 1] += t->value[2 * k] * x[2 * j + 1] + t->value[2 * k + 1] * x[2 * j];
            }
}

/* ---- ARPACK on the lowest levels --------------------------------------------------------------------------------- */

extern void dsaupd_(int *step, const char *metric, const int *n, const char *which, const int *wanted,
                    const double *tolerance, double *start, const int *columns, double *v, const int *stride,
                    int *options, int *places, double *work, double *small, const int *small_room, int *info);
extern void dseupd_(const int *vectors, const char *form, int *select, double *levels, double *z, const int *z_stride,
                    const double *shift, const char *metric, const int *n, const char *which, const int *wanted,
                    const double *tolerance, double *start, const int *columns, double *v, const int *stride,
                    int *options, int *places, double *work, double *small, const int *small_room, int *info);
extern void znaupd_(int *step, const char *metric, const int *n, const char *which, const int *wanted,
                    const double *tolerance, double *start, const int *columns, double *v, const int *stride,
                    int *options, int *places, double *work, double *small, const int *small_room, double *reals,
                    int *info);
extern void zneupd_(const int *vectors, const char *form, int *select, double *levels, double *z, const int *z_stride,
                    const double *shift, double *work2, const char *metric, const int *n, const char *which,
                    const int *wanted, const double *tolerance, double *start, const int *columns, double *v,
                    const int *stride, int *options, int *places, double *work, double *small, const int *small_room,
                    double *reals, int *info);

/* The `wanted` lowest levels, ascending, by ARPACK over the naive product. */
static void arpack_lowest(const whorl_sum *sum, const uint64_t *states, uint64_t count, int wanted, double *levels)
{
    int is_complex = !whorl_sum_is_real(sum), parts = is_complex ? 2 : 1, n = (int)count;
    int columns = 6 * wanted + 20 < n ? 6 * wanted + 20 : n, step = 0, info = 1, options[11] = {1, 0, 3000, 1, 0, 0, 1};
    int places[14] = {0}, vectors = 0, k;
    int small_room = is_complex ? 3 * columns * columns + 5 * columns : columns * (columns + 8);
    int *select = (int *)judge_memory((uint64_t)columns, sizeof(int));
    double tolerance = 0.0, shift[2] = {0.0, 0.0};
    double *start = judge_reals((uint64_t)parts * count), *v = judge_reals((uint64_t)(parts * columns) * count);
    double *work = judge_reals((uint64_t)(3 * parts) * count), *small = judge_reals((uint64_t)(parts * small_room));
    double *reals = judge_reals((uint64_t)columns), *work2 = judge_reals(4 * (uint64_t)columns);
    double *found = judge_reals((uint64_t)(parts * (wanted + 1)));
    table a = table_make(sum, states, count);
    uint64_t i;
    for (i = 0; i < (uint64_t)parts * count; i++)
        start[i] = whorl_random_normal(99, 0, i);
    for (;;) {
        if (is_complex)
            znaupd_(&step, "I", &n, "SR", &wanted, &tolerance, start, &columns, v, &n, options, places, work, small,
                    &small_room, reals, &info);
        else
            dsaupd_(&step, "I", &n, "SA", &wanted, &tolerance, start, &columns, v, &n, options, places, work, small,
                    &small_room, &info);
        if (step != 1 && step != -1)
            break;
        table_product(&a, work + (uint64_t)parts * ((uint64_t)places[0] - 1),
                      work + (uint64_t)parts * ((uint64_t)places[1] - 1), parts);
    }
    CHECK(info == 0 && options[4] >= wanted);
    if (is_complex)
        zneupd_(&vectors, "A", select, found, v, &n, shift, work2, "I", &n, "SR", &wanted, &tolerance, start, &columns,
                v, &n, options, places, work, small, &small_room, reals, &info);
    else
        dseupd_(&vectors, "A", select, found, v, &n, shift, "I", &n, "SA", &wanted, &tolerance, start, &columns, v, &n,
                options, places, work, small, &small_room, &info);
    CHECK(info == 0);
    for (k = 0; k < wanted; k++) { /* sorted by insertion */
        double level = found[parts * k];
        int at = k;
        for (; at > 0 && levels[at - 1] > level; at--)
            levels[at] = levels[at - 1];
        levels[at] = level;
    }
    free(select);
    free(start);
    free(v);
    free(work);
    free(small);
    free(reals);
    free(work2);
    free(found);
    table_free(&a);
}
#endif

typedef struct cluster {
    const char *name;
    int32_t sites, down; /* down -1: all states */
    int twist;           /* complex: D vectors along z and a field along y */
    int wanted;
} cluster;

/* A ring of an anisotropic exchange with second neighbours and a field that varies, so that no level is degenerate. */
static whorl_sum cluster_sum(const cluster *c, whorl_term *terms)
{
    whorl_host host = whorl_host_default();
    whorl_sum sum = {0, 0, NULL};
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < c->sites; i++) {
        double jitter = whorl_random_uniform(5, (uint64_t)c->sites, (uint64_t)i);
        int32_t next = (i + 1) % c->sites, second = (i + 2) % c->sites;
        double field[3] = {0.0, 0.0, 0.0}, d[3] = {0.0, 0.0, 0.3};
        used += whorl_terms_exchange_xyz(terms + used, i, next, 1.0, 1.0, 0.7 + 0.2 * jitter);
        used += whorl_terms_exchange(terms + used, i, second, 0.15 + 0.1 * jitter);
        field[2] = 0.4 * (jitter - 0.5);
        if (c->down < 0)
            field[0] = 0.3 + 0.2 * jitter;
        if (c->twist) {
            used += whorl_terms_antisymmetric(terms + used, i, next, d);
            if (c->down < 0)
                field[1] = 0.25;
        }
        used += whorl_terms_field(terms + used, i, field, NULL);
    }
    if (whorl_sum_from_terms(&host, c->sites, terms, used, &sum) != WHORL_OK) {
        printf("no sum: %s\n", host.reason.text);
        exit(3);
    }
    return sum;
}

static const cluster clusters[] = {
    {"14 sites, all states", 14, -1, 0, 4},
    {"14 sites, all states, complex", 14, -1, 1, 3},
    {"15 sites, 7 down, complex", 15, 7, 1, 3},
    {"16 sites, 8 down", 16, 8, 0, 4},
    {"17 sites, 6 down", 17, 6, 0, 3},
    {"18 sites, 6 down", 18, 6, 0, 3},
};

/*
 * The lowest levels by the library: every vector judged by the naive product, every level by ARPACK. At the tightest
 * tolerance also LAPACK's ratios.
 */
static void judge_cluster(const cluster *c, double tolerance)
{
    whorl_term *terms = (whorl_term *)judge_memory(400, sizeof(whorl_term));
    whorl_sum sum = cluster_sum(c, terms);
    whorl_host host = whorl_host_default();
    whorl_space *space = NULL;
    whorl_action *action = NULL;
    whorl_lanczos *solver = NULL;
    whorl_action_desc compile = whorl_action_default();
    whorl_lanczos_desc want = whorl_lanczos_default();
    uint64_t *states = NULL, n, k, wanted = (uint64_t)c->wanted, parts;
    double levels[16] = {0.0}, norm, *vectors, promised = tolerance > 0.0 ? tolerance : WHORL_LANCZOS_TOLERANCE;
    int is_complex = !whorl_sum_is_real(&sum);
    whorl_map map;
    if (c->down < 0)
        CHECK_STATUS(whorl_space_make_all(&host, c->sites, &space), WHORL_OK, &host);
    else
        CHECK_STATUS(whorl_space_make_down(&host, c->sites, c->down, &space), WHORL_OK, &host);
    n = whorl_space_count(space);
    if (c->down >= 0)
        states = judge_states_down(c->sites, c->down, &n);
    CHECK(n == whorl_space_count(space));
    compile.sums = &sum;
    compile.sum_count = 1;
    compile.source = space;
    CHECK_STATUS(whorl_action_make(&host, &compile, &action), WHORL_OK, &host);
    map = whorl_action_map(action);
    CHECK(is_complex == whorl_element_is_complex(map.element));
    want.wanted = c->wanted;
    want.tolerance = tolerance;
    CHECK_STATUS(whorl_lanczos_make(&host, &map, &want, &solver), WHORL_OK, &host);
    CHECK_STATUS(whorl_lanczos_advance(&host, &map, solver, 0), WHORL_OK, &host);
    CHECK(whorl_lanczos_count(solver) == c->wanted && whorl_lanczos_checked(solver));
    parts = is_complex ? 2 : 1;
    vectors = judge_reals(parts * n * wanted);
    for (k = 0; k < wanted; k++) {
        levels[k] = whorl_lanczos_value(solver, (int32_t)k);
        memcpy(vectors + parts * n * k, whorl_lanczos_vector(solver, (int32_t)k), (size_t)(parts * n) * sizeof(double));
    }
    norm = fabs(levels[0]); /* at most ||H||: stricter */
    for (k = 0; k < wanted; k++) {
        double residual = judge_residual(&sum, states, n, levels[k], vectors + parts * n * k, is_complex);
        CHECK_NEAR(residual, 0.0, promised * norm, c->name);
        CHECK_NEAR(whorl_lanczos_residual(solver, (int32_t)k), residual, 1e-14 * norm, c->name); /* its own error */
        if (tolerance > 0.0) {
            CHECK_NEAR(residual / ((double)n * eps * norm), 0.0, 30.0, c->name);
            worst_ratio = largest(worst_ratio, residual / (norm * eps));
        }
    }
    CHECK_NEAR(worst_overlap(n, wanted, vectors, is_complex) / ((double)n * eps), 0.0, 30.0, c->name);
#ifdef HAVE_ARPACK
    {
        double judge[16];
        arpack_lowest(&sum, states, n, c->wanted, judge);
        for (k = 0; k < wanted; k++)
            CHECK_NEAR(levels[k], judge[k], 1e-12 * norm, c->name);
    }
#endif
    free(vectors);
    free(states);
    free(terms);
    whorl_lanczos_free(&host, solver);
    whorl_action_free(&host, action);
    whorl_space_free(&host, space);
}

static void test_lowest_levels(void)
{
    uint64_t i;
    for (i = 0; i < sizeof clusters / sizeof *clusters; i++)
        judge_cluster(clusters + i, WHORL_LANCZOS_LEAST_TOLERANCE);
    judge_cluster(clusters, 0.0);
    printf("  lanczos: largest ||H v - l v|| %.1f eps |lowest level| (30 n allowed)\n", worst_ratio);
#ifndef HAVE_ARPACK
    CHECK_SKIP("lowest levels are not compared with ARPACK: install libarpack2-dev");
#endif
}

int main(void)
{
    check_begin("test_judges");
    check_run("all_levels", test_all_levels);
    check_run("lowest_levels", test_lowest_levels);
    return check_end();
}
