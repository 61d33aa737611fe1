/* test_map.c: maps of the host, and the vector work of solvers against sums in long double. */
#include "check.h"
#include "whorl_map.h"

static const whorl_element elements[4] = {WHORL_REAL_DOUBLE, WHORL_COMPLEX_DOUBLE, WHORL_REAL_FLOAT,
                                          WHORL_COMPLEX_FLOAT};
static const uint64_t lengths[] = {0, 1, 7, 127, 128, 129, 1000, 8191, 8192, 8193, 24577, 100003};
#define LENGTHS (sizeof lengths / sizeof *lengths)

/* An array of reals at an address that is 8 (or 4) bytes off what malloc gives. */
typedef struct vector {
    void *start;
    char *at;
    whorl_element element;
    uint64_t reals;
} vector;

static double get(const vector *v, uint64_t i)
{
    return whorl_element_is_float(v->element) ? (double)((const float *)(void *)v->at)[i]
                                              : ((const double *)(void *)v->at)[i];
}
static void put(vector *v, uint64_t i, double value)
{
    if (whorl_element_is_float(v->element))
        ((float *)(void *)v->at)[i] = (float)value;
    else
        ((double *)(void *)v->at)[i] = value;
}
static vector make(whorl_element element, uint64_t n, uint64_t shift, uint64_t seed)
{
    vector v;
    uint64_t i;
    v.element = element;
    v.reals = n * (whorl_element_is_complex(element) ? 2 : 1);
    v.start = malloc((size_t)(8 * v.reals + 64));
    v.at = (char *)v.start + shift * (whorl_element_is_float(element) ? 4 : 8);
    for (i = 0; i < v.reals; i++)
        put(&v, i, 2.0 * whorl_random_uniform(seed, 0, i) - 1.0);
    return v;
}
static uint64_t size_of(const vector *v)
{
    return v->reals * (whorl_element_is_float(v->element) ? 4 : 8);
}
static int same(const vector *a, const vector *b)
{
    return memcmp(a->at, b->at, (size_t)size_of(a)) == 0;
}

static whorl_host host_of(int32_t threads)
{
    whorl_host host = whorl_host_default();
    host.threads = threads;
    return host;
}

static void dots(void)
{
    uint64_t l;
    int e, t;
    for (e = 0; e < 4; e++)
        for (l = 0; l < LENGTHS; l++) {
            uint64_t n = lengths[l], i, w = whorl_element_is_complex(elements[e]) ? 2 : 1;
            vector x = make(elements[e], n, 0, 1), y = make(elements[e], n, 1, 2), z = make(elements[e], n, 1, 1);
            long double re = 0, im = 0, size = 0;
            whorl_complex want = whorl_dot(elements[e], x.at, y.at, n), dot, off;
            for (i = 0; i < n; i++) {
                long double a = get(&x, w * i), b = w == 2 ? get(&x, 2 * i + 1) : 0;
                long double c = get(&y, w * i), d = w == 2 ? get(&y, 2 * i + 1) : 0;
                re += a * c + b * d;
                im += a * d - b * c;
                size += fabsl(a * c) + fabsl(b * d) + fabsl(a * d) + fabsl(b * c);
            }
            for (t = 1; t <= 4; t *= 2) {
                whorl_host host = host_of(t);
                dot = whorl_complex_of(9, 9);
                CHECK_STATUS(whorl_vector_dot(&host, elements[e], n, x.at, y.at, &dot), WHORL_OK, &host);
                CHECK(memcmp(&dot, &want, sizeof dot) == 0);
                CHECK_STATUS(whorl_vector_dot(&host, elements[e], n, z.at, y.at, &off), WHORL_OK, &host);
                CHECK(memcmp(&off, &want, sizeof off) == 0); /* misaligned: the same bits */
                CHECK_NEAR(dot.re, (double)re, 60 * 2.3e-16 * (double)size, "real part of a dot");
                CHECK_NEAR(dot.im, (double)im, 60 * 2.3e-16 * (double)size, "imaginary part of a dot");
                CHECK_STATUS(whorl_vector_norm(&host, elements[e], n, x.at, &dot.re), WHORL_OK, &host);
                CHECK_NEAR(dot.re * dot.re, whorl_dot(elements[e], x.at, x.at, n).re, 1e-15 * (double)(w * n), "norm");
            }
            free(x.start);
            free(y.start);
            free(z.start);
        }
}

static void updates(void)
{
    uint64_t l;
    int e, t;
    for (e = 0; e < 4; e++)
        for (l = 0; l < LENGTHS; l++) {
            uint64_t n = lengths[l], i, w = whorl_element_is_complex(elements[e]) ? 2 : 1;
            double unit = whorl_element_is_float(elements[e]) ? 6e-8 : 1.2e-16;
            whorl_complex a = whorl_complex_of(0.7, w == 2 ? -0.4 : 0.0);
            vector first[4];
            for (t = 0; t < 4; t++) {
                whorl_host host = host_of(t == 3 ? 1 : 1 << t);
                vector x = make(elements[e], n, t == 3, 3), y = make(elements[e], n, t == 3, 4),
                       z = make(elements[e], n, 0, 4);
                whorl_complex two[2], again[2];
                double worst = 0;
                CHECK_STATUS(whorl_vector_add(&host, elements[e], n, a, x.at, y.at), WHORL_OK, &host);
                for (i = 0; i < n; i++) {
                    double xr = get(&x, w * i), xi = w == 2 ? get(&x, 2 * i + 1) : 0;
                    worst = fmax(worst, fabs(get(&y, w * i) - (get(&z, w * i) + a.re * xr - a.im * xi)));
                    if (w == 2)
                        worst = fmax(worst, fabs(get(&y, 2 * i + 1) - (get(&z, 2 * i + 1) + a.re * xi + a.im * xr)));
                }
                CHECK_NEAR(worst, 0, 4 * unit * 3, "y += a x");
                CHECK_STATUS(whorl_vector_blend(&host, elements[e], n, 0.3, x.at, -1.5, y.at, two), WHORL_OK, &host);
                CHECK_STATUS(whorl_vector_dot(&host, elements[e], n, x.at, y.at, &again[0]), WHORL_OK, &host);
                CHECK_STATUS(whorl_vector_dot(&host, elements[e], n, y.at, y.at, &again[1]), WHORL_OK, &host);
                CHECK(memcmp(two, again, sizeof two) == 0);
                CHECK_STATUS(whorl_vector_scale(&host, elements[e], n, 3.25, y.at), WHORL_OK, &host);
                worst = 0;
                for (i = 0; i < n; i++) { /* y = 3.25 (0.3 x - 1.5 (z + a x)) */
                    double xr = get(&x, w * i), xi = w == 2 ? get(&x, 2 * i + 1) : 0;
                    double want = 3.25 * (0.3 * xr - 1.5 * (get(&z, w * i) + a.re * xr - a.im * xi));
                    worst = fmax(worst, fabs(get(&y, w * i) - want));
                }
                CHECK_NEAR(worst, 0, 100 * unit, "blend and scale");
                CHECK_STATUS(whorl_vector_copy(&host, elements[e], n, y.at, z.at), WHORL_OK, &host);
                CHECK(same(&y, &z));
                CHECK_STATUS(whorl_vector_blend(&host, elements[e], n, 2.0, x.at, 0.0, z.at, NULL), WHORL_OK, &host);
                for (i = 0, worst = 0; i < z.reals; i++)
                    worst = fmax(worst, fabs(get(&z, i) - 2 * get(&x, i)));
                CHECK(worst == 0);
                first[t] = y;
                CHECK(t == 0 || same(&first[0], &y)); /* threads, alignment */
                free(x.start);
                free(z.start);
            }
            for (t = 0; t < 4; t++)
                free(first[t].start);
        }
}

static void random_numbers(void)
{
    int e, t;
    for (e = 0; e < 4; e++) {
        uint64_t n = 20001, i;
        vector a = make(elements[e], n, 0, 0), b = make(elements[e], n, 1, 0);
        double mean = 0, square = 0;
        for (t = 1; t <= 2; t++) {
            whorl_host host = host_of(t);
            CHECK_STATUS(whorl_vector_random(&host, elements[e], n, 5, 6, t == 1 ? a.at : b.at), WHORL_OK, &host);
        }
        CHECK(same(&a, &b));
        for (i = 0; i < a.reals; i++) {
            mean += get(&a, i);
            square += get(&a, i) * get(&a, i);
        }
        CHECK_NEAR(mean / (double)a.reals, 0, 5 / sqrt((double)a.reals), "mean, five standard errors");
        CHECK_NEAR(square / (double)a.reals, 1, 5 * sqrt(2.0 / (double)a.reals), "variance, five standard errors");
        CHECK(get(&a, 77) == (whorl_element_is_float(elements[e]) ? (double)(float)whorl_random_normal(5, 6, 77)
                                                                  : whorl_random_normal(5, 6, 77)));
        free(a.start);
        free(b.start);
    }
}

static void project(void)
{
    static const uint64_t sizes[] = {0, 1, 129, 1000, 20000};
    static const int32_t columns[] = {0, 1, 3, 4, 8, 9, 21};
    int e, s, c, t;
    for (e = 0; e < 4; e++)
        for (s = 0; s < 5; s++)
            for (c = 0; c < 7; c++) {
                uint64_t n = sizes[s], stride = n + 3, i, w = whorl_element_is_complex(elements[e]) ? 2 : 1;
                int32_t m = columns[c], j;
                vector v = make(elements[e], stride * (uint64_t)m + 1, 0, 7), one = make(elements[e], n, 0, 8);
                double unit = whorl_element_is_float(elements[e]) ? 6e-8 : 1.2e-16, worst = 0;
                whorl_complex overlaps[3][21];
                vector result[3];
                for (t = 0; t < 3; t++) {
                    whorl_host host = host_of(1 << t);
                    result[t] = make(elements[e], n, (uint64_t)(t == 1), 8);
                    memset(overlaps[t], 0, sizeof overlaps[t]);
                    CHECK_STATUS(
                        whorl_vector_project(&host, elements[e], n, m, v.at, stride, result[t].at, overlaps[t]),
                        WHORL_OK, &host);
                    CHECK(same(&result[0], &result[t]) && memcmp(overlaps[0], overlaps[t], sizeof overlaps[0]) == 0);
                }
                for (j = 0; j < m; j++) {
                    const char *column = v.at + (uint64_t)j * stride * whorl_element_bytes(elements[e]);
                    whorl_complex dot = whorl_dot(elements[e], column, one.at, n);
                    CHECK(memcmp(&dot, &overlaps[0][j], sizeof dot) == 0);
                }
                for (i = 0; i < n; i++) {
                    long double re = get(&one, w * i), im = w == 2 ? get(&one, 2 * i + 1) : 0, size = 1;
                    for (j = 0; j < m; j++) {
                        uint64_t at = w * ((uint64_t)j * stride + i);
                        long double a = get(&v, at), b = w == 2 ? get(&v, at + 1) : 0;
                        re -= a * overlaps[0][j].re - b * overlaps[0][j].im;
                        im -= a * overlaps[0][j].im + b * overlaps[0][j].re;
                        size += fabs(overlaps[0][j].re) + fabs(overlaps[0][j].im);
                    }
                    worst = fmax(worst, fabs(get(&result[0], w * i) - (double)re) / (double)size);
                    if (w == 2)
                        worst = fmax(worst, fabs(get(&result[0], w * i + 1) - (double)im) / (double)size);
                }
                CHECK_NEAR(worst, 0, 30 * unit, "w minus its projection");
                for (t = 0; t < 3; t++)
                    free(result[t].start);
                free(v.start);
                free(one.start);
            }
}

static void combine(void)
{
    static const uint64_t sizes[] = {0, 1, 129, 1000, 20000};
    static const int32_t columns[] = {1, 4, 9, 40, 300};
    int e, s, c, t;
    for (e = 0; e < 4; e++)
        for (s = 0; s < 5; s++)
            for (c = 0; c < 5; c++) {
                uint64_t n = sizes[s], stride = n + 1, i;
                int32_t m = columns[c], k = m > 10 ? 11 : (m + 1) / 2, j, l;
                vector old = make(elements[e], stride * (uint64_t)m, 0, 9), result[2];
                vector q = make(WHORL_REAL_DOUBLE, (uint64_t)(m * k), 0, 10);
                uint64_t w = whorl_element_is_complex(elements[e]) ? 2 : 1;
                double unit = whorl_element_is_float(elements[e]) ? 6e-8 : 1.2e-16, worst = 0;
                if (n * (uint64_t)m > 1000000) {
                    free(old.start);
                    free(q.start);
                    continue;
                }
                for (t = 0; t < 2; t++) {
                    whorl_host host = host_of(1 + 3 * t);
                    result[t] = make(elements[e], stride * (uint64_t)m, (uint64_t)t, 9);
                    CHECK_STATUS(whorl_vector_combine(&host, elements[e], n, m, k, result[t].at, stride,
                                                      (const double *)(void *)q.at),
                                 WHORL_OK, &host);
                    CHECK(same(&result[0], &result[t]));
                }
                for (j = 0; j < m; j++)
                    for (i = 0; i < w * stride; i++) {
                        uint64_t at = (uint64_t)j * stride * w + i;
                        double want = get(&old, at);
                        if (j < k && i < w * n) { /* the same order: the same bits, in double */
                            for (want = 0, l = 0; l < m; l++)
                                want += get(&old, (uint64_t)l * stride * w + i) * get(&q, (uint64_t)(j * m + l));
                        }
                        worst = fmax(worst, fabs(get(&result[0], at) - want) / (1 + fabs(want)));
                    }
                CHECK_NEAR(worst, 0, unit * (whorl_element_is_float(elements[e]) ? 1 : 40), "columns combined");
                for (t = 0; t < 2; t++)
                    free(result[t].start);
                free(old.start);
                free(q.start);
            }
}

/* ---- maps -------------------------------------------------------------------------------------------------------- */

/* A dense matrix of the host, column-major, behind a map. */
static whorl_status dense_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    const double *a = (const double *)map->context;
    uint64_t r, c;
    int32_t k;
    (void)host;
    for (k = 0; k < count; k++)
        for (r = 0; r < map->rows; r++) {
            double sum = 0;
            for (c = 0; c < map->columns; c++)
                sum += a[r + c * map->rows] * ((const double *)x)[(uint64_t)k * map->columns + c];
            ((double *)y)[(uint64_t)k * map->rows + r] = sum;
        }
    return WHORL_OK;
}

static whorl_map dense_map(const double *a, uint64_t rows, uint64_t columns)
{
    whorl_map map = whorl_map_default();
    map.rows = rows;
    map.columns = columns;
    map.element = WHORL_REAL_DOUBLE;
    map.context = a;
    map.apply = dense_apply;
    return map;
}

static void maps(void)
{
    enum { N = 5 };
    double a[N * N], x[N], y[N], z[N], norm;
    whorl_host host = host_of(1);
    whorl_map map = dense_map(a, N, N), broken;
    whorl_complex two[2] = {{7, 7}, {7, 7}};
    check_memory memory;
    int i, j;
    for (i = 0; i < N * N; i++)
        a[i] = whorl_random_normal(1, 1, (uint64_t)i);
    for (i = 0; i < N; i++)
        x[i] = whorl_random_normal(1, 2, (uint64_t)i);
    CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 1), WHORL_OK, &host);
    for (i = 0; i < N; i++)
        z[i] = y[i];
    CHECK_STATUS(whorl_map_residual(&host, &map, 0.5, x, z, &norm), WHORL_OK, &host);
    for (i = 0; i < N; i++)
        CHECK_NEAR(z[i], y[i] - 0.5 * x[i], 1e-15, "A x - value x");
    CHECK_NEAR(norm * norm, whorl_dot(WHORL_REAL_DOUBLE, z, z, N).re, 1e-13, "its norm");
    host = check_host(&memory);
    for (j = 0; j < 2; j++) {
        double b = j == 0 ? 0.0 : -0.7;
        uint64_t announced = whorl_map_scratch(&host, &map, 0);
        for (i = 0; i < N; i++)
            z[i] = x[i] * x[i];
        host.bytes_peak = 0;
        CHECK_STATUS(whorl_map_step(&host, &map, 1.25, x, b, z, two), WHORL_OK, &host);
        CHECK(host.bytes_peak == (b == 0.0 ? 0 : announced));
        for (i = 0; i < N; i++)
            CHECK_NEAR(z[i], 1.25 * y[i] + b * x[i] * x[i], 1e-14, "a A x + b y");
        CHECK(two[0].re == whorl_dot(WHORL_REAL_DOUBLE, x, z, N).re &&
              two[1].re == whorl_dot(WHORL_REAL_DOUBLE, z, z, N).re);
    }
    memory.fail_at = memory.calls + 1;
    CHECK_STATUS(whorl_map_step(&host, &map, 1.0, x, 1.0, z, two), WHORL_NO_MEMORY, &host);
    CHECK(memory.live_blocks == 0);
    /* what is refused */
    CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 0), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_map_apply(&host, &map, NULL, y, 1), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_map_apply(&host, &map, x, NULL, 1), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_map_step(&host, &map, HUGE_VAL, x, 0, y, two), WHORL_NOT_FINITE, &host);
    broken = whorl_map_default();
    CHECK_STATUS(whorl_map_check(&host, &broken), WHORL_BAD_ARGUMENT, &host);
    broken = map;
    broken.element = 9;
    CHECK_STATUS(whorl_map_check(&host, &broken), WHORL_BAD_ARGUMENT, &host);
    broken = map;
    broken.hermitian = 1;
    broken.rows = 3;
    CHECK_STATUS(whorl_map_check(&host, &broken), WHORL_BAD_ARGUMENT, &host);
    broken = map;
    broken.norm_bound = HUGE_VAL;
    CHECK_STATUS(whorl_map_check(&host, &broken), WHORL_BAD_ARGUMENT, &host);
    broken = map;
    broken.rows = UINT64_C(1) << 60;
    CHECK_STATUS(whorl_map_check(&host, &broken), WHORL_TOO_LARGE, &host);
    broken = dense_map(a, 3, 5);
    CHECK_STATUS(whorl_map_apply(&host, &broken, x, y, 1), WHORL_OK, &host);
    CHECK_STATUS(whorl_map_step(&host, &broken, 1, x, 0, y, two), WHORL_BAD_ARGUMENT, &host);
}

static void refused(void)
{
    whorl_host host = host_of(1);
    double x[8] = {0}, y[8] = {0};
    whorl_complex dot = {3, 4};
    CHECK_STATUS(whorl_vector_dot(&host, 0, 4, x, y, &dot), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_dot(&host, WHORL_REAL_DOUBLE, 4, NULL, y, &dot), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_dot(&host, WHORL_REAL_DOUBLE, UINT64_C(1) << 60, x, y, &dot), WHORL_TOO_LARGE, &host);
    CHECK(dot.re == 3 && dot.im == 4);
    CHECK_STATUS(whorl_vector_dot(&host, WHORL_REAL_DOUBLE, 0, NULL, NULL, &dot), WHORL_OK, &host);
    CHECK(dot.re == 0 && dot.im == 0);
    CHECK_STATUS(whorl_vector_add(&host, WHORL_REAL_DOUBLE, 4, whorl_complex_of(1, 1), x, y), WHORL_BAD_ARGUMENT,
                 &host);
    CHECK_STATUS(whorl_vector_project(&host, WHORL_REAL_DOUBLE, 4, -1, x, 4, y, &dot), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_project(&host, WHORL_REAL_DOUBLE, 4, 2, x, 3, y, &dot), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_project(&host, WHORL_REAL_DOUBLE, 4, 2, NULL, 4, y, &dot), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_combine(&host, WHORL_REAL_DOUBLE, 4, 2, 3, x, 4, y), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_vector_combine(&host, WHORL_REAL_DOUBLE, 4, 5000, 3, x, 4, y), WHORL_BAD_ARGUMENT, &host);
}

/* Every vector function once, on lengths that take several blocks. */
static whorl_status all_of_them(whorl_host *host, void *argument)
{
    enum { N = 30000, M = 3 };
    static double v[M * N], w[N];
    const double q[M * M] = {1, 0, 0, 0, 1, 0, 0, 0, 1};
    whorl_complex dots_of[M] = {{1, 2}, {1, 2}, {1, 2}};
    double norm = -1;
    whorl_status status = whorl_vector_random(host, WHORL_REAL_DOUBLE, M * N, 1, 2, v);
    (void)argument;
    if (status == WHORL_OK)
        status = whorl_vector_copy(host, WHORL_REAL_DOUBLE, N, v, w);
    if (status == WHORL_OK)
        status = whorl_vector_scale(host, WHORL_REAL_DOUBLE, N, 1e-3, w);
    if (status == WHORL_OK)
        status = whorl_vector_add(host, WHORL_REAL_DOUBLE, N, whorl_complex_of(1e-3, 0), v, w);
    if (status == WHORL_OK) {
        status = whorl_vector_norm(host, WHORL_REAL_DOUBLE, N, w, &norm);
        CHECK(status == WHORL_OK || norm == -1);
    }
    if (status == WHORL_OK) {
        status = whorl_vector_blend(host, WHORL_REAL_DOUBLE, N, 1, v, 1, w, dots_of);
        CHECK(status == WHORL_OK || dots_of[0].im == 2);
    }
    if (status == WHORL_OK)
        status = whorl_vector_project(host, WHORL_REAL_DOUBLE, N, M, v, N, w, dots_of);
    if (status == WHORL_OK)
        status = whorl_vector_combine(host, WHORL_REAL_DOUBLE, N, M, M, v, N, q);
    return status;
}

static void cancelled(void)
{
    check_every_poll(all_of_them, NULL, WHORL_OK);
}

int main(void)
{
    check_begin("map");
    check_run("dots", dots);
    check_run("updates", updates);
    check_run("random_numbers", random_numbers);
    check_run("project", project);
    check_run("combine", combine);
    check_run("maps", maps);
    check_run("refused", refused);
    check_run("cancelled", cancelled);
    return check_end();
}
