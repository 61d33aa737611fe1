/*
 * digest.c: some two hundred results, each as a 64-bit digest of its bits. tests/samebits builds and runs this for many
 * compilers, flags, targets, thread counts and hooks, and compares the lines.
 *
 *     digest [--threads N] [--pthread] [--misaligned] [--unordered]
 *
 * --unordered plants a reduction whose order depends on the number of threads: the comparison must catch it.
 */
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "whorl.h"
#ifdef DIGEST_PTHREAD
#include "threads.h"
#endif
#include "dense_judge.h"

static whorl_host host;
static int misaligned, unordered, results;

/* ---- digests: of values, not of bytes, so that byte order does not matter --------------------------------------------- */

static uint64_t mix(uint64_t digest, uint64_t word)
{
    digest = (digest ^ word) * UINT64_C(0x9E3779B97F4A7C15);
    return digest ^ (digest >> 29);
}

static void print_digest(const char *name, int number, uint64_t digest)
{
    printf("%s %d %016" PRIx64 "\n", name, number, digest);
    results++;
}

static uint64_t digest_doubles(const double *values, uint64_t count)
{
    uint64_t digest = 1, i, bits;
    for (i = 0; i < count; i++) {
        memcpy(&bits, &values[i], 8);
        digest = mix(digest, bits);
    }
    return digest;
}

static uint64_t digest_vector(whorl_element element, const void *x, uint64_t count)
{
    uint64_t i, reals = whorl_element_is_complex(element) ? 2 * count : count, digest = 2;
    if (!whorl_element_is_float(element))
        return digest_doubles((const double *)x, reals);
    for (i = 0; i < reals; i++) {
        uint32_t bits;
        memcpy(&bits, (const char *)x + 4 * i, 4);
        digest = mix(digest, bits);
    }
    return digest;
}

static uint64_t digest_sum(const whorl_sum *sum)
{
    uint64_t digest = (uint64_t)sum->sites, i;
    for (i = 0; i < sum->count; i++) {
        digest = mix(mix(digest, sum->terms[i].x), sum->terms[i].z);
        digest = mix(digest, digest_doubles(&sum->terms[i].re, 1));
        digest = mix(digest, digest_doubles(&sum->terms[i].im, 1));
    }
    return digest;
}

/* A vector that may be off its natural alignment to 16 bytes and more by 8. */
static void *vector_memory(uint64_t bytes)
{
    char *block = (char *)judge_memory(bytes + 64, 1);
    block += (64 - ((uintptr_t)block & 63)) & 63; /* never given back: the program ends soon */
    return block + (misaligned ? 8 : 0);
}

static void must(whorl_status status)
{
    if (status < 0) {
        printf("failed: %s: %s\n", whorl_status_text(status), host.reason.text);
        exit(1);
    }
}

/* ---- core ------------------------------------------------------------------------------------------------------------ */

typedef struct careless {
    const double *x;
    double partial[64];
} careless;

/* What the library never does: one running sum a worker, over whatever blocks it happened to get. */
static void careless_body(void *argument, uint64_t block, int32_t worker)
{
    careless *work = (careless *)argument;
    uint64_t i;
    for (i = 0; i < 100; i++)
        work->partial[worker % 64] += work->x[100 * block + i];
}

static void digest_core(void)
{
    uint64_t digest = 3, i;
    double values[1000], back;
    careless work;
    int k;
    for (i = 0; i < 1000; i++)
        values[i] = whorl_random_normal(11, 1, i);
    print_digest("normal", 0, digest_doubles(values, 1000));
    for (k = 0; k < 4; k++) {
        for (i = 0; i < 1000; i++) {
            char text[WHORL_REAL_TEXT];
            uint64_t bits = whorl_random_bits(12, (uint64_t)k, i);
            int32_t length, j;
            memcpy(&back, &bits, 8);
            if (k < 2)
                back = values[i] * (k == 0 ? 1.0 : 1e-7);
            length = whorl_real_write(back, text);
            for (j = 0; j < length; j++)
                digest = mix(digest, (uint64_t)(unsigned char)text[j]);
            if (whorl_is_finite(back) && (whorl_real_read(text, (uint64_t)length, &back) != (uint64_t)length))
                digest = 0;
            if (whorl_is_finite(back))
                digest = mix(digest, digest_doubles(&back, 1));
        }
        print_digest("text", k, digest);
    }
    for (k = 0; k < 6; k++) {
        static const uint64_t count[6] = {1, 7, 128, 129, 777, 1000};
        back = whorl_sum_reals(values, count[k]);
        print_digest("sum", k, digest_doubles(&back, 1));
    }
    memset(&work, 0, sizeof work);
    work.x = values;
    if (unordered) {
        must(whorl_run(&host, careless_body, &work, 10, 100));
        for (k = 63; k >= 0; k--)
            work.partial[0] += k > 0 ? work.partial[k] : 0.0;
    } else {
        work.partial[0] = whorl_sum_reals(values, 1000);
    }
    print_digest("planted", 0, digest_doubles(work.partial, 1));
}

/* ---- sums and spaces ------------------------------------------------------------------------------------------------- */

static void digest_pauli(void)
{
    int k;
    for (k = 0; k < 8; k++) {
        static const int kinds[4] = {0, JUDGE_HERMITIAN, JUDGE_HERMITIAN | JUDGE_REAL, JUDGE_CONSERVING};
        int32_t sites = k < 4 ? 9 : 64, i, to[64];
        whorl_term *a_terms = (whorl_term *)judge_memory(200, sizeof(whorl_term));
        whorl_term *b_terms = (whorl_term *)judge_memory(200, sizeof(whorl_term));
        whorl_term *terms = (whorl_term *)judge_memory(20000, sizeof(whorl_term));
        whorl_sum a = judge_random_sum(100 + (uint64_t)k, sites, 60, kinds[k & 3], a_terms), out;
        whorl_sum b = judge_random_sum(200 + (uint64_t)k, sites, 50, kinds[k & 3], b_terms);
        double norms[3];
        must(whorl_sum_multiply(&host, &a, &b, terms, 20000, &out));
        print_digest("multiply", k, digest_sum(&out));
        must(whorl_sum_commutator(&host, &a, &b, terms, 20000, &out));
        print_digest("commutator", k, digest_sum(&out));
        must(whorl_sum_add(&host, &a, whorl_complex_of(0.3, 0.1), &b, whorl_complex_of(-1.7, 2.0), terms, 20000, &out));
        for (i = 0; i < sites; i++)
            to[i] = (7 * i + 3) % sites;
        if (sites == 9)
            for (i = 0; i < sites; i++)
                to[i] = sites - 1 - i;
        must(whorl_sum_permute(&host, &out, to));
        must(whorl_sum_rotate(&host, &out, UINT64_C(0x155)));
        print_digest("add_permute_rotate", k, digest_sum(&out));
        norms[0] = whorl_sum_norm_bound(&out);
        norms[1] = whorl_sum_square_trace(&out);
        norms[2] = whorl_sum_distance(&a, &b);
        print_digest("norms", k, digest_doubles(norms, 3));
        free(a_terms);
        free(b_terms);
        free(terms);
    }
}

#define SPACES 7
/* Spaces of at least 10^4 states, one or two of each kind. */
static whorl_space *make_space(int k)
{
    static whorl_pair pairs[20];
    static whorl_down_number numbers[2];
    static uint64_t states[12000];
    whorl_space_desc desc = whorl_space_default();
    whorl_space *space = NULL;
    int32_t i;
    desc.sites = 16;
    switch (k) {
    case 0:
        desc.sites = 14;
        desc.kind = WHORL_SPACE_ALL;
        break;
    case 1:
    case 2:
        numbers[0].mask = k == 1 ? 0 : 0xff;
        numbers[0].down = k == 1 ? 8 : 3;
        desc.kind = WHORL_SPACE_DOWN;
        desc.numbers = numbers;
        desc.number_count = 1;
        break;
    case 3:
        numbers[0].mask = 0x2aaaa;
        numbers[0].down = 4;
        numbers[1].mask = 0x15555;
        numbers[1].down = 5;
        desc.sites = 18;
        desc.kind = WHORL_SPACE_DOWN;
        desc.numbers = numbers;
        desc.number_count = 2;
        break;
    case 4:
        desc.sites = 15;
        desc.kind = WHORL_SPACE_PARITY;
        desc.parity = 1;
        break;
    case 5:
        desc.sites = 20;
        desc.kind = WHORL_SPACE_BLOCKADE;
        for (i = 0; i < 20; i++) {
            pairs[i].i = i;
            pairs[i].j = (i + 1) % 20;
        }
        desc.pairs = pairs;
        desc.pair_count = 20;
        break;
    default:
        desc.sites = 63;
        desc.kind = WHORL_SPACE_LIST;
        for (i = 0; i < 12000; i++)
            states[i] = (whorl_random_bits(5, 5, (uint64_t)i) & (UINT64_MAX >> 17)) << 14 | (uint64_t)i;
        desc.states = states;
        desc.state_count = 12000;
        break;
    }
    must(whorl_space_make(&host, &desc, &space));
    return space;
}

static void digest_space(void)
{
    int k;
    for (k = 0; k < SPACES; k++) {
        whorl_space *space = make_space(k);
        uint64_t digest = whorl_space_count(space), i;
        for (i = 0; i < whorl_space_count(space); i += 7) {
            uint64_t state = whorl_space_at(space, i);
            digest = mix(mix(digest, state), whorl_space_find(space, state));
            digest = mix(digest, whorl_space_find(space, state ^ 5));
        }
        print_digest("space", k, digest);
        whorl_space_free(&host, space);
    }
}

/* ---- dense ----------------------------------------------------------------------------------------------------------- */

static void digest_dense(void)
{
    static const uint64_t sizes[5] = {1, 2, 13, 64, 110};
    int k;
    for (k = 0; k < 5; k++) {
        uint64_t n = sizes[k], i;
        double *a = (double *)vector_memory(16 * n * n), *values = (double *)vector_memory(8 * n);
        must(whorl_vector_random(&host, WHORL_REAL_DOUBLE, n * n, 7, 7, a));
        must(whorl_dense_symmetric(&host, n, a, values, 1));
        print_digest("symmetric_values", k, digest_doubles(values, n));
        print_digest("symmetric_vectors", k, digest_doubles(a, n * n));
        must(whorl_vector_random(&host, WHORL_REAL_DOUBLE, n * n, 7, 8, a));
        must(whorl_dense_symmetric(&host, n, a, values, 0));
        print_digest("symmetric_only", k, digest_doubles(values, n));
        must(whorl_vector_random(&host, WHORL_COMPLEX_DOUBLE, n * n, 7, 9, a));
        must(whorl_dense_hermitian(&host, n, a, values, 1));
        print_digest("hermitian_values", k, digest_doubles(values, n));
        print_digest("hermitian_vectors", k, digest_doubles(a, 2 * n * n));
        for (i = 0; i < n; i++) {
            values[i] = whorl_random_normal(3, 3, i);
            a[i] = whorl_random_normal(3, 4, i);
        }
        must(whorl_dense_tridiagonal(&host, n, values, a, NULL, 0));
        print_digest("tridiagonal", k, digest_doubles(values, n));
    }
}

/* ---- vectors --------------------------------------------------------------------------------------------------------- */

static void digest_vectors(void)
{
    int32_t element;
    for (element = WHORL_REAL_DOUBLE; element <= WHORL_COMPLEX_FLOAT; element++) {
        uint64_t n = 20011, bytes = whorl_element_bytes(element);
        int32_t j, m = 11;
        double *q = (double *)vector_memory(8 * 11 * 11);
        char *v = (char *)vector_memory(n * bytes * 11);
        void *w = vector_memory(n * bytes);
        whorl_complex overlaps[11], dot = {0.0, 0.0};
        for (j = 0; j < m; j++)
            must(whorl_vector_random(&host, element, n, 21, (uint64_t)j, v + (uint64_t)j * n * bytes));
        must(whorl_vector_random(&host, element, n, 22, 0, w));
        must(whorl_vector_dot(&host, element, n, v, w, &dot));
        print_digest("dot", element, digest_doubles(&dot.re, 1) ^ digest_doubles(&dot.im, 1));
        must(whorl_vector_add(&host, element, n, whorl_complex_of(0.7, element == 2 || element == 4 ? -0.2 : 0.0), v, w));
        must(whorl_vector_scale(&host, element, n, 1.0 / 3.0, w));
        print_digest("add_scale", element, digest_vector(element, w, n));
        for (j = 0; j < m; j++)
            must(whorl_vector_scale(&host, element, n, 0.01, v + (uint64_t)j * n * bytes));
        must(whorl_vector_project(&host, element, n, m, v, n, w, overlaps));
        print_digest("project", element, digest_vector(element, w, n));
        for (j = 0; j < m * m; j++)
            q[j] = whorl_random_normal(23, 0, (uint64_t)j);
        must(whorl_vector_combine(&host, element, n, m, 7, v, n, q));
        print_digest("combine", element, digest_vector(element, v, n * 11));
    }
}

/* ---- products -------------------------------------------------------------------------------------------------------- */

/* A Hermitian sum that stays in the space: couplings that keep the numbers, or anything where everything is allowed. */
static whorl_sum make_sum(int space, int is_complex, const whorl_space *in, whorl_term *terms)
{
    int32_t sites = whorl_space_sites(in), i;
    uint64_t used = 0;
    whorl_sum sum;
    for (i = 0; i < sites; i++) {
        double c = whorl_random_normal(31, (uint64_t)space, (uint64_t)i), vector[3] = {0.0, 0.0, 0.7 * c};
        /* pairs on one mask of the two, and on both sides of every split */
        int32_t j = (i + (space == 3 ? 2 : i % 3 + 1)) % sites;
        used += whorl_terms_exchange_xyz(terms + used, i, j, c, space == 0 ? 0.3 * c : c, 1.1 - c);
        if (is_complex)
            used += whorl_terms_antisymmetric(terms + used, i, j, vector);
        used += whorl_terms_spin(terms + used, i, 'z', 0.2 * c);
        if (space == 0 || space == 5)
            used += whorl_terms_spin(terms + used, i, 'x', c);
    }
    must(whorl_sum_from_terms(&host, sites, terms, used, &sum));
    return sum;
}

static void digest_products(void)
{
    int k, is_complex;
    for (k = 0; k < SPACES; k++)
        for (is_complex = 0; is_complex <= 1; is_complex++) {
            whorl_space *space = make_space(k);
            whorl_term *terms = (whorl_term *)judge_memory(4000, sizeof(whorl_term));
            whorl_sum sum = make_sum(k, is_complex, space, terms);
            int32_t element;
            for (element = WHORL_REAL_DOUBLE; element <= WHORL_COMPLEX_FLOAT; element++) {
                uint64_t n = whorl_space_count(space), bytes = whorl_element_bytes(element);
                whorl_action_desc desc = whorl_action_default();
                whorl_action *action = NULL;
                whorl_complex dots[2];
                whorl_map map;
                void *x, *y;
                double parts[4];
                if (is_complex && !whorl_element_is_complex(element))
                    continue;
                desc.sums = &sum;
                desc.sum_count = 1;
                desc.source = space;
                desc.mode = WHORL_ACTION_PROJECT;
                desc.element = element;
                must(whorl_action_make(&host, &desc, &action));
                map = whorl_action_map(action);
                x = vector_memory(3 * n * bytes);
                y = vector_memory(3 * n * bytes);
                must(whorl_vector_random(&host, element, 3 * n, 41, 1, x));
                must(whorl_map_apply(&host, &map, x, y, 3));
                print_digest(is_complex ? "product_complex" : "product_real", 10 * k + element, digest_vector(element, y, 3 * n));
                must(whorl_map_step(&host, &map, 0.7, x, -0.3, y, dots));
                parts[0] = dots[0].re;
                parts[1] = dots[0].im;
                parts[2] = dots[1].re;
                parts[3] = dots[1].im;
                print_digest(is_complex ? "step_complex" : "step_real", 10 * k + element,
                             digest_vector(element, y, n) ^ digest_doubles(parts, 4));
                whorl_action_free(&host, action);
            }
            free(terms);
            whorl_space_free(&host, space);
        }
}

/* ---- solvers --------------------------------------------------------------------------------------------------------- */

static void digest_solvers(void)
{
    int k, lean;
    for (k = 1; k < 6; k += 2)
        for (lean = 0; lean <= 1; lean++) {
            whorl_space *space = make_space(k);
            whorl_term *terms = (whorl_term *)judge_memory(4000, sizeof(whorl_term));
            whorl_sum sum = make_sum(k, 0, space, terms);
            whorl_action_desc desc = whorl_action_default();
            whorl_lanczos_desc want = whorl_lanczos_default();
            whorl_action *action = NULL;
            whorl_lanczos *solver = NULL;
            whorl_map map;
            int32_t j;
            desc.sums = &sum;
            desc.sum_count = 1;
            desc.source = space;
            desc.mode = WHORL_ACTION_PROJECT;
            must(whorl_action_make(&host, &desc, &action));
            map = whorl_action_map(action);
            map.hermitian = 1;
            want.wanted = lean ? 1 : 2;
            want.lean = lean;
            want.tolerance = 1e-5;
            must(whorl_lanczos_make(&host, &map, &want, &solver));
            must(whorl_lanczos_advance(&host, &map, solver, 0));
            for (j = 0; j < whorl_lanczos_count(solver); j++) {
                double value = whorl_lanczos_value(solver, j);
                print_digest(lean ? "lean_value" : "lanczos_value", 10 * k + j, digest_doubles(&value, 1));
                print_digest(lean ? "lean_vector" : "lanczos_vector", 10 * k + j,
                             digest_vector(map.element, whorl_lanczos_vector(solver, j), map.rows));
            }
            whorl_lanczos_free(&host, solver);
            whorl_action_free(&host, action);
            free(terms);
            whorl_space_free(&host, space);
        }
}

static void digest_levels(void)
{
    static const char model[] = "spins 11\nlet J = 1.3\nlet D = 0.21*J\n"
                                "pairs ring: 0-1-2-3-4-5-6-7-8-9-10-0\n"
                                "sum over ring: J*S[i].S[j] + (0.1*D, 0, D).(S[i] x S[j])\n";
    whorl_model *read = NULL;
    whorl_levels *levels = NULL;
    whorl_levels_desc want = whorl_levels_default();
    double values[8];
    whorl_complex weights[64];
    uint64_t k, digest = 5;
    must(whorl_model_read(&host, model, sizeof model - 1, 0, &read));
    must(whorl_model_values(&host, read, NULL, 0, values));
    must(whorl_model_weights(&host, read, values, weights));
    for (k = 0; k < whorl_model_sum_count(read); k++)
        digest = mix(digest, digest_sum(&whorl_model_sums(read)[k]));
    print_digest("model", 0, digest);
    want.tolerance = 1e-8;
    must(whorl_levels_make_weighted(&host, whorl_model_sums(read), weights, whorl_model_sum_count(read), &want, &levels));
    for (k = 0; k < whorl_levels_count(levels) && k < 8; k++) {
        whorl_level level = whorl_levels_at(levels, k);
        print_digest("level", (int)k, digest_doubles(&level.energy, 1) ^ digest_doubles(&level.residual, 1));
    }
    whorl_levels_free(&host, levels);
    whorl_model_free(&host, read);
}

int main(int count, char **argument)
{
    int i;
    host = whorl_host_default();
    for (i = 1; i < count; i++) {
        if (strcmp(argument[i], "--threads") == 0 && i + 1 < count)
            host.threads = atoi(argument[++i]);
        else if (strcmp(argument[i], "--misaligned") == 0)
            misaligned = 1;
        else if (strcmp(argument[i], "--unordered") == 0)
            unordered = 1;
#ifdef DIGEST_PTHREAD
        else if (strcmp(argument[i], "--pthread") == 0)
            host.run = check_pthread_run;
#endif
        else {
            printf("unknown argument %s\n", argument[i]);
            return 1;
        }
    }
    digest_core();
    digest_pauli();
    digest_space();
    digest_dense();
    digest_vectors();
    digest_products();
    digest_solvers();
    digest_levels();
    return results == 0;
}
