/*
 * Products and fused steps of compiled sums, each beside a triad over vectors of the same length and type. Rows: full_*
 * are all states, sz0_* half filling; _random has a random coupling on every bond; _t1 runs on one thread; _block4 takes
 * four columns at once, and its peer is the product of one. A word behind the thread count picks the rows whose names
 * contain it.
 */
#include "bench.h"

enum { MOST_TERMS = 4096 };

static int threads = 1;
static const char *wanted = "";

typedef struct model {
    int32_t sites;
    uint64_t used;
    whorl_term terms[MOST_TERMS];
    whorl_sum sum;
} model;

static double draw(uint64_t k)
{
    return 0.5 + whorl_random_uniform(2026, 7, k);
}

static void add_bond(model *m, int32_t i, int32_t j, int random)
{
    m->used += whorl_terms_exchange(m->terms + m->used, i, j, random ? draw(m->used) : 1.0);
}

static void ring(model *m, int32_t sites, int random)
{
    int32_t i;
    m->sites = sites;
    for (i = 0; i < sites; i++)
        add_bond(m, i, (i + 1) % sites, random);
}

/* 4 x 6 torus: two bonds a site. */
static void square(model *m, int random)
{
    int32_t x, y;
    m->sites = 24;
    for (y = 0; y < 6; y++)
        for (x = 0; x < 4; x++) {
            add_bond(m, 4 * y + x, 4 * y + (x + 1) % 4, random);
            add_bond(m, 4 * y + x, 4 * ((y + 1) % 6) + x, random);
        }
}

static void shuffle(int32_t *order, int32_t sites, uint64_t seed)
{
    int32_t i;
    for (i = 0; i < sites; i++)
        order[i] = i;
    for (i = sites - 1; i > 0; i--) {
        int32_t j = (int32_t)(whorl_random_bits(seed, 1, (uint64_t)i) % (uint64_t)(i + 1)), t = order[i];
        order[i] = order[j];
        order[j] = t;
    }
}

static void shuffled_ring(model *m, int32_t sites)
{
    int32_t order[64], i;
    shuffle(order, sites, 3);
    m->sites = sites;
    for (i = 0; i < sites; i++)
        add_bond(m, order[i], order[(i + 1) % sites], 1);
}

/* A random 3-regular graph: stubs paired at random until no loop and no double bond is left. */
static void graph(model *m, int32_t sites)
{
    int32_t stubs[128], i, j, good = 0;
    uint64_t seed = 1;
    m->sites = sites;
    for (; !good; seed++) {
        good = 1;
        shuffle(stubs, 3 * sites, seed);
        for (i = 0; i < 3 * sites; i += 2) {
            good = good && stubs[i] / 3 != stubs[i + 1] / 3;
            for (j = 0; j < i; j += 2)
                good = good && !((stubs[i] / 3 == stubs[j] / 3 && stubs[i + 1] / 3 == stubs[j + 1] / 3) ||
                                 (stubs[i] / 3 == stubs[j + 1] / 3 && stubs[i + 1] / 3 == stubs[j] / 3));
        }
    }
    for (i = 0; i < 3 * sites; i += 2)
        add_bond(m, stubs[i] / 3, stubs[i + 1] / 3, 1);
}

static void xyz_ring(model *m, int32_t sites)
{
    int32_t i;
    m->sites = sites;
    for (i = 0; i < sites; i++) {
        double h[3];
        uint64_t k = 100 * (uint64_t)i;
        h[0] = draw(k), h[1] = draw(k + 1), h[2] = draw(k + 2);
        m->used += whorl_terms_exchange_xyz(m->terms + m->used, i, (i + 1) % sites, draw(k + 3), draw(k + 4), draw(k + 5));
        m->used += whorl_terms_field(m->terms + m->used, i, h, NULL);
    }
}

static void dm_ring(model *m, int32_t sites)
{
    int32_t i;
    const double d[3] = {0.0, 0.0, 0.3};
    m->sites = sites;
    for (i = 0; i < sites; i++) {
        add_bond(m, i, (i + 1) % sites, 0);
        m->used += whorl_terms_antisymmetric(m->terms + m->used, i, (i + 1) % sites, d);
    }
}

static void ising(model *m, int32_t sites)
{
    int32_t i, j;
    m->sites = sites;
    for (i = 0; i < sites; i++) {
        m->used += whorl_terms_string(m->terms + m->used, UINT64_C(1) << i, 0, draw(m->used));
        for (j = 0; j < i; j++)
            m->used += whorl_terms_string(m->terms + m->used, 0, UINT64_C(1) << i | UINT64_C(1) << j, draw(m->used));
    }
}

/* Real strings on three or four random sites. */
static void strings(model *m, int32_t sites, uint64_t count)
{
    uint64_t k = 0;
    m->sites = sites;
    while (m->used < count) {
        uint64_t x = 0, z = 0;
        int32_t body = 3 + (int32_t)(whorl_random_bits(5, 1, k++) & 1);
        while (body > 0) {
            uint64_t bit = UINT64_C(1) << whorl_random_bits(5, 1, k++) % (uint64_t)sites, kind = whorl_random_bits(5, 1, k++) % 3;
            if (((x | z) & bit) != 0)
                continue;
            x |= kind != 2 ? bit : 0;
            z |= kind != 0 ? bit : 0;
            body--;
        }
        if ((whorl_bits_count(x & z) & 1) == 0)
            m->used += whorl_terms_string(m->terms + m->used, x, z, draw(k++));
    }
}

/* ---- rows -------------------------------------------------------------------------------------------------------- */

typedef struct product {
    whorl_host host;
    whorl_map map;
    const void *x;
    void *y;
    int32_t columns;
    whorl_complex dots[2];
} product;

static void product_run(void *argument)
{
    product *work = (product *)argument;
    bench_must(&work->host, whorl_map_apply(&work->host, &work->map, work->x, work->y, work->columns));
}

static void step_run(void *argument)
{
    product *work = (product *)argument;
    bench_must(&work->host, whorl_map_step(&work->host, &work->map, 1.0, work->x, -0.5, work->y, work->dots));
}

static whorl_status fill(double *x, uint64_t n)
{
    uint64_t i;
    for (i = 0; i < n; i++)
        x[i] = (double)(i * 2654435761u % 1000003) * 1e-6 - 0.4;
    return WHORL_OK;
}

static int named(const char *figure)
{
    return strstr(figure, wanted) != NULL;
}

/* The rows of one model in one space: the product, on one thread too, the step and four columns where asked for. */
enum { ROW_T1 = 1, ROW_STEP = 2, ROW_BLOCK4 = 4, ROW_CSR = 8 };
static void rows(const char *figure, model *m, int32_t down, int rounds, int what)
{
    whorl_host host = whorl_host_default();
    whorl_space *space = NULL;
    whorl_action *action = NULL;
    whorl_action_desc desc = whorl_action_default();
    char name[96];
    product work;
    uint64_t reals, columns = (what & ROW_BLOCK4) != 0 ? 4 : 1;
    bench_triad triad, triad1;
    host.threads = threads;
    bench_must(&host, whorl_sum_from_terms(&host, m->sites, m->terms, m->used, &m->sum));
    bench_must(&host, down < 0 ? whorl_space_make_all(&host, m->sites, &space)
                               : whorl_space_make_down(&host, m->sites, down, &space));
    desc.sums = &m->sum;
    desc.sum_count = 1;
    desc.source = space;
    bench_must(&host, whorl_action_make(&host, &desc, &action));
    work.host = host;
    work.map = whorl_action_map(action);
    work.columns = 1;
    reals = work.map.rows * (work.map.element == WHORL_COMPLEX_DOUBLE ? 2 : 1);
    triad = bench_triad_make(reals, threads);
    triad1 = triad;
    triad1.threads = 1;
    work.x = bench_memory(8 * reals * columns);
    work.y = bench_memory(8 * reals * columns);
    bench_must(&host, fill((double *)(uintptr_t)work.x, reals * columns));
    bench_must(&host, whorl_vector_copy(&host, WHORL_REAL_DOUBLE, reals * columns, work.x, work.y));
    bench_row(figure, "triad", bench_compare(product_run, &work, bench_triad_run, &triad, rounds, 0.02),
              whorl_action_kernel(action));
    if (what & ROW_T1) {
        work.host.threads = 1;
        snprintf(name, sizeof name, "%s_t1", figure);
        bench_row(name, "triad on one thread", bench_compare(product_run, &work, bench_triad_run, &triad1, rounds, 0.02),
                  whorl_action_kernel(action));
        work.host.threads = threads;
    }
    if (what & ROW_STEP) {
        snprintf(name, sizeof name, "step_%s", figure);
        bench_row(name, "triad", bench_compare(step_run, &work, bench_triad_run, &triad, rounds, 0.02),
                  whorl_action_kernel(action));
    }
    if (what & ROW_BLOCK4) {
        product four = work;
        four.columns = 4;
        snprintf(name, sizeof name, "%s_block4", figure);
        bench_row(name, "one column", bench_compare(product_run, &four, product_run, &work, rounds, 0.02),
                  whorl_action_kernel(action));
    }
    free((void *)(uintptr_t)work.x);
    free(work.y);
    bench_triad_free(&triad);
    whorl_action_free(&host, action);
    whorl_space_free(&host, space);
}

/* N = 10, new weights and a product, on one core: microseconds. */
static void small(void)
{
    static model m;
    whorl_host host = whorl_host_default();
    whorl_space *space = NULL;
    whorl_action *action = NULL;
    whorl_action_desc desc = whorl_action_default();
    product work;
    static double x[1024], y[1024];
    uint64_t k;
    double start;
    ising(&m, 10);
    bench_must(&host, whorl_sum_from_terms(&host, 10, m.terms, m.used, &m.sum));
    bench_must(&host, whorl_space_make_all(&host, 10, &space));
    desc.sums = &m.sum;
    desc.sum_count = 1;
    desc.source = space;
    start = bench_now();
    for (k = 0; k < 100; k++) {
        bench_must(&host, whorl_action_make(&host, &desc, &action));
        if (k < 99)
            whorl_action_free(&host, action);
    }
    printf("small10_make%s\t%.4g\tus\t-\t0\t0\t0\t0\t%s\n", BENCH_SUFFIX, 1e4 * (bench_now() - start),
           whorl_action_kernel(action));
    start = bench_now();
    for (k = 0; k < 100; k++)
        bench_must(&host, whorl_action_reweight(&host, action, NULL));
    printf("small10_reweight%s\t%.4g\tus\t-\t0\t0\t0\t0\t-\n", BENCH_SUFFIX, 1e4 * (bench_now() - start));
    work.host = host;
    work.map = whorl_action_map(action);
    work.columns = 1;
    for (k = 0; k < 1024; k++)
        x[k] = draw(k);
    work.x = x;
    work.y = y;
    start = bench_now();
    for (k = 0; k < 1000; k++)
        product_run(&work);
    printf("small10_product%s\t%.4g\tus\t-\t0\t0\t0\t0\t-\n", BENCH_SUFFIX, 1e3 * (bench_now() - start));
    whorl_action_free(&host, action);
    whorl_space_free(&host, space);
}

int main(int argc, char **argv)
{
    int quick = argc > 1 && strcmp(argv[1], "quick") == 0, big = argc > 1 && strcmp(argv[1], "big") == 0;
    int rounds = quick ? 3 : 7;
    static model m;
    threads = argc > 2 ? atoi(argv[2]) : 1;
    wanted = argc > 3 ? argv[3] : "";
    bench_header();
#define ROW(figure, build, down, what) \
    do { \
        if (named(figure)) { \
            memset(&m, 0, sizeof m); \
            build; \
            rows(figure, &m, down, rounds, what); \
        } \
    } while (0)
    if (quick) {
        ROW("full_ring20", ring(&m, 20, 0), -1, ROW_STEP);
        ROW("sz0_ring20", ring(&m, 20, 0), 10, ROW_BLOCK4);
        ROW("full_dm20", dm_ring(&m, 20), -1, 0);
        if (named("small10"))
            small();
        return 0;
    }
    if (big) {
        ROW("sz0_ring28", ring(&m, 28, 0), 14, ROW_T1);
        ROW("sz0_ring30", ring(&m, 30, 0), 15, 0);
        return 0;
    }
    ROW("full_ring24", ring(&m, 24, 0), -1, ROW_T1 | ROW_STEP | ROW_BLOCK4);
    ROW("full_ring24_random", ring(&m, 24, 1), -1, 0);
    ROW("full_ring24_shuffled", shuffled_ring(&m, 24), -1, 0);
    ROW("full_ring26", ring(&m, 26, 0), -1, ROW_T1 | ROW_STEP);
    ROW("full_xyz24", xyz_ring(&m, 24), -1, 0);
    ROW("full_dm24", dm_ring(&m, 24), -1, 0);
    ROW("full_graph24", graph(&m, 24), -1, 0);
    ROW("full_ising22", ising(&m, 22), -1, 0);
    ROW("full_square24", square(&m, 0), -1, 0);
    ROW("full_square24_random", square(&m, 1), -1, 0);
    ROW("sz0_ring24", ring(&m, 24, 0), 12, ROW_T1 | ROW_STEP | ROW_BLOCK4);
    ROW("sz0_ring24_random", ring(&m, 24, 1), 12, 0);
    ROW("sz0_ring26", ring(&m, 26, 0), 13, ROW_T1);
    ROW("sz0_ring28", ring(&m, 28, 0), 14, 0);
    ROW("sz0_square24", square(&m, 0), 12, 0);
    ROW("strings18", strings(&m, 18, 500), -1, 0);
    ROW("strings20", strings(&m, 20, 500), -1, ROW_BLOCK4);
    if (named("small10"))
        small();
    return 0;
}
