/*
 * Whole solves: from couplings to verified levels, against a CSR matrix and ARPACK on the same two threads, and small
 * problems against their own products.
 */
#include "peer_csr.h"

static int threads;

static whorl_sum ring_sum(int32_t sites, whorl_term *terms)
{
    whorl_host host = whorl_host_default();
    whorl_sum sum;
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < sites; i++)
        used += whorl_terms_exchange(terms + used, i, (i + 1) % sites, 1.0);
    bench_must(&host, whorl_sum_from_terms(&host, sites, terms, used, &sum));
    return sum;
}

/* ---- four levels of a ring at S^z = 0 -------------------------------------------------------------------------------- */

typedef struct ring_solve {
    int32_t sites;
    double values[4];
    uint64_t products;
} ring_solve;

static void ring_whorl(void *argument)
{
    ring_solve *work = (ring_solve *)argument;
    whorl_host host = whorl_host_default();
    whorl_term terms[3 * 64];
    whorl_sum sum = ring_sum(work->sites, terms);
    whorl_space *space = NULL;
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    whorl_lanczos *solver = NULL;
    whorl_map map;
    int32_t k;
    host.threads = threads;
    bench_must(&host, whorl_space_make_down(&host, work->sites, work->sites / 2, &space));
    desc.sums = &sum;
    desc.sum_count = 1;
    desc.source = space;
    bench_must(&host, whorl_action_make(&host, &desc, &action));
    map = whorl_action_map(action);
    bench_must(&host, whorl_lanczos_make(&host, &map, NULL, &solver));
    bench_must(&host, whorl_lanczos_advance(&host, &map, solver, 0));
    for (k = 0; k < 4; k++)
        work->values[k] = whorl_lanczos_value(solver, k);
    work->products = whorl_lanczos_products(solver);
    whorl_lanczos_free(&host, solver);
    whorl_action_free(&host, action);
    whorl_space_free(&host, space);
}

typedef struct product_work {
    whorl_host host;
    whorl_map map;
    double *x, *y;
} product_work;

static void product_run(void *argument)
{
    product_work *work = (product_work *)argument;
    bench_must(&work->host, whorl_map_apply(&work->host, &work->map, work->x, work->y, 1));
}

#ifdef HAVE_ARPACK
static void ring_arpack(void *argument)
{
    ring_solve *work = (ring_solve *)argument;
    whorl_host host = whorl_host_default();
    whorl_term terms[3 * 64];
    whorl_sum sum = ring_sum(work->sites, terms);
    whorl_space *space = NULL;
    peer_csr csr;
    bench_must(&host, whorl_space_make_down(&host, work->sites, work->sites / 2, &space));
    csr = peer_csr_make(&sum, space, threads);
    work->products = (uint64_t)peer_arpack_lowest(&csr, 4, 1e-10, work->values);
    peer_csr_free(&csr);
    whorl_space_free(&host, space);
}
#endif

static void bench_ring(int32_t sites, int rounds)
{
    ring_solve whorl = {0, {0.0, 0.0, 0.0, 0.0}, 0};
    whorl_host host = whorl_host_default();
    whorl_term terms[3 * 64];
    whorl_sum sum = ring_sum(sites, terms);
    whorl_space *space = NULL;
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    product_work product;
    bench_result result;
    char figure[64], note[160];
    uint64_t n;
    whorl.sites = sites;
#ifdef HAVE_ARPACK
    {
        ring_solve arpack = whorl;
        double off = 0.0;
        int k;
        result = bench_compare(ring_whorl, &whorl, ring_arpack, &arpack, rounds, 0.0);
        for (k = 0; k < 4; k++)
            off = fmax(off, fabs(whorl.values[k] - arpack.values[k]));
        sprintf(figure, "solve_ring%d", (int)sites);
        sprintf(note, "products %llu against %llu, values agree to %.1e", (unsigned long long)whorl.products,
                (unsigned long long)arpack.products, off);
        bench_row(figure, "CSR+ARPACK", result, note);
    }
#endif
    /* against the sum of its own products */
    bench_must(&host, whorl_space_make_down(&host, sites, sites / 2, &space));
    desc.sums = &sum;
    desc.sum_count = 1;
    desc.source = space;
    bench_must(&host, whorl_action_make(&host, &desc, &action));
    n = whorl_space_count(space);
    product.host = host;
    product.host.threads = threads;
    product.map = whorl_action_map(action);
    product.x = (double *)bench_memory(8 * n);
    product.y = (double *)bench_memory(8 * n);
    bench_must(&host, whorl_vector_random(&host, WHORL_REAL_DOUBLE, n, 1, 1, product.x));
    result = bench_compare(ring_whorl, &whorl, product_run, &product, rounds, 0.0);
    result.peer *= (double)whorl.products;
    result.ratio /= (double)whorl.products;
    result.low /= (double)whorl.products;
    result.high /= (double)whorl.products;
    sprintf(figure, "solve_ring%d_products", (int)sites);
    sprintf(note, "%llu products", (unsigned long long)whorl.products);
    bench_row(figure, "its products", result, note);
    free(product.x);
    free(product.y);
    whorl_action_free(&host, action);
    whorl_space_free(&host, space);
}

/* ---- ten spins between two shots -------------------------------------------------------------------------------------- */

typedef struct small_work {
    whorl_term terms[3][64];
    whorl_sum sums[2];
    char *memory;
    uint64_t room, products;
    whorl_host host;
    whorl_arena arena;
    whorl_space *space;
    whorl_action *action;
    double shot;
} small_work;

enum { SMALL_SITES = 10 };

static void small_sums(small_work *work)
{
    whorl_host host = whorl_host_default();
    uint64_t used = 0;
    int32_t i, j;
    for (i = 0; i < SMALL_SITES; i++)
        for (j = i + 1; j < SMALL_SITES; j++)
            used += whorl_terms_string(work->terms[0] + used, 0, UINT64_C(1) << i | UINT64_C(1) << j,
                                       whorl_random_normal(3, 0, (uint64_t)(10 * i + j)));
    bench_must(&host, whorl_sum_from_terms(&host, SMALL_SITES, work->terms[0], used, &work->sums[0]));
    used = 0;
    for (i = 0; i < SMALL_SITES; i++)
        used += whorl_terms_string(work->terms[1] + used, UINT64_C(1) << i, 0, -1.0);
    bench_must(&host, whorl_sum_from_terms(&host, SMALL_SITES, work->terms[1], used, &work->sums[1]));
}

static void small_levels(small_work *work)
{
    whorl_lanczos_desc want = whorl_lanczos_default();
    whorl_lanczos *solver = NULL;
    whorl_map map = whorl_action_map(work->action);
    want.wanted = 2;
    bench_must(&work->host, whorl_lanczos_make(&work->host, &map, &want, &solver));
    bench_must(&work->host, whorl_lanczos_advance(&work->host, &map, solver, 0));
    work->products = whorl_lanczos_products(solver);
    whorl_lanczos_free(&work->host, solver);
}

static void small_compile(small_work *work)
{
    whorl_complex weights[2] = {{1.0, 0.0}, {1.0, 0.0}};
    whorl_action_desc desc = whorl_action_default();
    small_sums(work);
    bench_must(&work->host, whorl_space_make_all(&work->host, SMALL_SITES, &work->space));
    desc.sums = work->sums;
    desc.sum_count = 2;
    desc.weights = weights;
    desc.source = work->space;
    bench_must(&work->host, whorl_action_make(&work->host, &desc, &work->action));
}

static void small_first(void *argument)
{
    small_work *work = (small_work *)argument;
    small_compile(work);
    small_levels(work);
    whorl_action_free(&work->host, work->action);
    whorl_space_free(&work->host, work->space);
}

static void small_repeat(void *argument)
{
    small_work *work = (small_work *)argument;
    whorl_complex weights[2] = {{1.0, 0.0}, {1.0, 0.0}};
    work->shot += 0.01;
    weights[1].re = 1.0 + 0.1 * work->shot / (1.0 + work->shot);
    bench_must(&work->host, whorl_action_reweight(&work->host, work->action, weights));
    small_levels(work);
}

static void bench_small(void)
{
    static small_work work;
    bench_triad triad = bench_triad_make(1 << SMALL_SITES, 1);
    char note[64];
    bench_result result;
    work.room = 1 << 22;
    work.memory = (char *)bench_memory(work.room);
    work.host = whorl_host_default();
    whorl_arena_make(&work.arena, work.memory, work.room);
    whorl_arena_use(&work.arena, &work.host);
    result = bench_compare(small_first, &work, bench_triad_run, &triad, 15, 0.005);
    sprintf(note, "%llu products, one thread, arena of %llu bytes used", (unsigned long long)work.products,
            (unsigned long long)work.arena.peak);
    bench_row("small10_first", "triad", result, note);
    small_compile(&work);
    result = bench_compare(small_repeat, &work, bench_triad_run, &triad, 15, 0.005);
    sprintf(note, "%llu products, one thread, new weights", (unsigned long long)work.products);
    bench_row("small10_repeat", "triad", result, note);
    bench_triad_free(&triad);
}

int main(int argc, char **argv)
{
    const char *size = argc > 1 ? argv[1] : "quick";
    threads = argc > 2 ? atoi(argv[2]) : 1;
    if (strcmp(size, "big") == 0)
        return 0;
    bench_header();
    bench_small();
    bench_ring(strcmp(size, "quick") == 0 ? 16 : 22, 3);
    return 0;
}
