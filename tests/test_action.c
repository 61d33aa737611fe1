/* test_action.c: compiled sums against Kronecker matrices and products term by term. */
#include "check.h"
#include "dense_judge.h"
#include "whorl_action.h"

static const whorl_element elements[4] = {WHORL_REAL_DOUBLE, WHORL_COMPLEX_DOUBLE, WHORL_REAL_FLOAT,
                                          WHORL_COMPLEX_FLOAT};

/* ---- helpers ----------------------------------------------------------------------------------------------------- */

static whorl_host host_of(int32_t threads)
{
    whorl_host host = whorl_host_default();
    host.threads = threads;
    return host;
}

static uint64_t width_of(whorl_element element)
{
    return whorl_element_is_complex(element) ? 2 : 1;
}
static double get(whorl_element element, const void *v, uint64_t i)
{
    return whorl_element_is_float(element) ? (double)((const float *)v)[i] : ((const double *)v)[i];
}
static void put(whorl_element element, void *v, uint64_t i, double value)
{
    if (whorl_element_is_float(element))
        ((float *)v)[i] = (float)value;
    else
        ((double *)v)[i] = value;
}

/* `reals` numbers in -1 .. 1 that floats hold exactly, at an address `shift` reals off. */
static void *random_vector(whorl_element element, uint64_t reals, uint64_t seed, uint64_t shift, void **start)
{
    char *at;
    uint64_t i, size = whorl_element_is_float(element) ? 4 : 8;
    *start = judge_memory(reals + 8, 8);
    at = (char *)*start + shift * size;
    for (i = 0; i < reals; i++)
        put(element, at, i, (double)(float)(2 * whorl_random_uniform(seed, 99, i) - 1));
    return at;
}

static uint64_t *states_of(const whorl_space *space)
{
    uint64_t i, count = whorl_space_count(space), *states = (uint64_t *)judge_memory(count, 8);
    for (i = 0; i < count; i++)
        states[i] = whorl_space_at(space, i);
    return states;
}

static whorl_space *list_of(const whorl_space *space)
{
    whorl_host host = host_of(1);
    whorl_space_desc desc = whorl_space_default();
    whorl_space *list = NULL;
    uint64_t *states = states_of(space);
    desc.sites = whorl_space_sites(space);
    desc.kind = WHORL_SPACE_LIST;
    desc.states = states;
    desc.state_count = whorl_space_count(space);
    CHECK_STATUS(whorl_space_make(&host, &desc, &list), WHORL_OK, &host);
    free(states);
    return list;
}

static whorl_action *compile(const whorl_sum *sum, const whorl_space *source, const whorl_space *target,
                             whorl_action_mode mode, whorl_element element)
{
    whorl_host host = host_of(1);
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    uint64_t bytes = 0;
    desc.sums = sum;
    desc.sum_count = 1;
    desc.source = source;
    desc.target = target;
    desc.mode = mode;
    desc.element = element;
    CHECK_STATUS(whorl_action_bytes(&host, &desc, &bytes), WHORL_OK, &host);
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
    CHECK(host.bytes_used == bytes && host.bytes_peak == bytes);
    return action;
}

/* An action of compile() was taken from a host of its own. */
static void release(whorl_action *action)
{
    whorl_host host = host_of(1);
    host.bytes_used = UINT64_C(1) << 40;
    whorl_action_free(&host, action);
}

/* What leads out of the target is dropped, so it must be what the judge drops too: `dropped` tells how much that is. */
static double compare(const whorl_sum *sum, const whorl_space *source, const whorl_space *target,
                      const whorl_action *action, int32_t columns, const char *what)
{
    whorl_map map = whorl_action_map(action);
    whorl_element e = map.element;
    uint64_t w = width_of(e), n = map.columns, m = map.rows, i, *from = states_of(source), *to = states_of(target);
    void *x_start, *y_start;
    void *x = random_vector(e, w * n * (uint64_t)columns, 4, 0, &x_start);
    void *y = random_vector(e, w * m * (uint64_t)columns, 5, 0, &y_start);
    double *in = judge_reals(2 * n), *out = judge_reals(2 * m), worst = 0, dropped = 0;
    double unit = whorl_element_is_float(e) ? 6e-8 : 2.3e-16, bound = whorl_sum_norm_bound(sum);
    int32_t c, t;
    for (t = 1; t <= 2; t++) {
        whorl_host host = host_of(t);
        uint64_t k;
        host.bytes_peak = 0;
        for (k = 0; k < w * m * (uint64_t)columns; k++)
            put(e, y, k, NAN);
        CHECK_STATUS(whorl_map_apply(&host, &map, x, y, columns), WHORL_OK, &host);
        CHECK(host.bytes_peak == whorl_map_scratch(&host, &map, columns) && host.bytes_used == 0);
    }
    for (c = 0; c < columns; c++) {
        for (i = 0; i < n; i++) {
            in[2 * i] = get(e, x, w * ((uint64_t)c * n + i));
            in[2 * i + 1] = w == 2 ? get(e, x, w * ((uint64_t)c * n + i) + 1) : 0;
        }
        dropped = fmax(dropped, judge_product_between(sum, from, n, to, m, in, out));
        for (i = 0; i < m; i++) {
            double re = get(e, y, w * ((uint64_t)c * m + i)) - out[2 * i];
            double im = w == 2 ? get(e, y, w * ((uint64_t)c * m + i) + 1) - out[2 * i + 1] : out[2 * i + 1];
            if (!(fabs(re) <= worst))
                worst = fabs(re);
            if (!(fabs(im) <= worst))
                worst = fabs(im);
        }
    }
    CHECK_NEAR(worst, 0, unit * (bound + 1e-300) * (4 + (double)sum->count), what);
    free(x_start);
    free(y_start);
    free(in);
    free(out);
    free(from);
    free(to);
    return dropped;
}

/* The same states as a list: another kernel, the same bits; also for 1, 2, 4 threads and misaligned vectors. */
static void compare_bits(const whorl_sum *sum, const whorl_space *space, whorl_action_mode mode, whorl_element e,
                         int32_t columns)
{
    whorl_space *list = list_of(space);
    whorl_action *fast = compile(sum, space, NULL, mode, e), *slow = compile(sum, list, NULL, mode, e);
    whorl_map map = whorl_action_map(fast), other = whorl_action_map(slow);
    uint64_t w = width_of(e), reals = w * map.rows * (uint64_t)columns, bytes = reals * whorl_element_bytes(e) / w;
    void *start[4], *x = random_vector(e, reals, 6, 0, &start[0]), *y = random_vector(e, reals, 7, 0, &start[1]);
    void *shifted = random_vector(e, reals, 6, 1, &start[2]), *z = random_vector(e, reals, 7, 1, &start[3]);
    int32_t t;
    whorl_host host = host_of(1);
    CHECK_STATUS(whorl_map_apply(&host, &other, x, y, columns), WHORL_OK, &host);
    for (t = 1; t <= 4; t *= 2) {
        uint64_t i;
        host = host_of(t);
        for (i = 0; i < reals; i++)
            put(e, z, i, NAN);
        CHECK_STATUS(whorl_map_apply(&host, &map, t == 2 ? x : shifted, z, columns), WHORL_OK, &host);
        CHECK(memcmp(y, z, (size_t)bytes) == 0);
    }
    for (t = 0; t < 4; t++)
        free(start[t]);
    host = host_of(1);
    release(fast);
    release(slow);
    whorl_space_free(&host, list);
}

/* ---- spaces ------------------------------------------------------------------------------------------------------ */

static whorl_space *make_space(const whorl_space_desc *desc)
{
    whorl_host host = host_of(1);
    whorl_space *space = NULL;
    CHECK_STATUS(whorl_space_make(&host, desc, &space), WHORL_OK, &host);
    return space;
}

enum { SPACE_KINDS = 9 };

/* Some space of each kind on `sites` sites. */
static whorl_space *some_space(int which, int32_t sites)
{
    static whorl_down_number numbers[2];
    static whorl_pair pairs[64];
    static uint64_t states[256];
    whorl_space_desc desc = whorl_space_default();
    int32_t i;
    desc.sites = sites;
    switch (which) {
    case 0:
        desc.kind = WHORL_SPACE_ALL;
        break;
    case 1:
    case 2:
    case 3: /* half, one, none */
        desc.kind = WHORL_SPACE_DOWN;
        numbers[0].mask = 0;
        numbers[0].down = which == 1 ? sites / 2 : which == 2 ? 1 : 0;
        desc.numbers = numbers;
        desc.number_count = 1;
        break;
    case 4: /* two species, one site free where there are three */
        desc.kind = WHORL_SPACE_DOWN;
        numbers[0].mask = UINT64_C(0x5555555555555555) & whorl_bits_low(sites);
        numbers[0].down = whorl_bits_count(numbers[0].mask) / 2;
        numbers[1].mask = UINT64_C(0x2a2a2a2a2a2a2a2a) & whorl_bits_low(sites);
        numbers[1].down = (whorl_bits_count(numbers[1].mask) + 1) / 2;
        desc.numbers = numbers;
        desc.number_count = sites > 1 ? 2 : 1;
        break;
    case 5:
    case 6:
        desc.kind = WHORL_SPACE_PARITY;
        desc.parity = which - 5;
        break;
    case 7:
        desc.kind = WHORL_SPACE_BLOCKADE;
        for (i = 0; i + 1 < sites; i++) {
            pairs[i].i = i;
            pairs[i].j = i + 1;
        }
        desc.pairs = pairs;
        desc.pair_count = (uint64_t)(sites - 1);
        break;
    default:
        desc.kind = WHORL_SPACE_LIST;
        for (i = 0; i < 256 && i < 1 << sites; i++)
            if ((whorl_random_bits(12, 3, (uint64_t)i) & 3) != 0)
                states[desc.state_count++] = (uint64_t)i;
        desc.states = states;
    }
    return make_space(&desc);
}

/* ---- tests ------------------------------------------------------------------------------------------------------- */

/* Element by element against Kronecker products, P H P in every space. */
static void matrices(void)
{
    int32_t sites, kind, which;
    static whorl_term terms[64];
    for (sites = 1; sites <= 6; sites++)
        for (kind = 0; kind < 4; kind++)
            for (which = 0; which < SPACE_KINDS; which++) {
                whorl_sum sum = judge_random_sum((uint64_t)(sites + 100 * kind), sites, 12, kind, terms);
                whorl_space *space = some_space(which, sites);
                whorl_action *action = compile(&sum, space, NULL, WHORL_ACTION_PROJECT, WHORL_COMPLEX_DOUBLE);
                whorl_map map = whorl_action_map(action);
                uint64_t n = map.rows, i, j, size = UINT64_C(1) << sites;
                double *unit = judge_reals(2 * n * n), *got = judge_reals(2 * n * n), *want = judge_dense(&sum),
                       worst = 0;
                whorl_host host = host_of(1);
                for (i = 0; i < n; i++)
                    unit[2 * (i + n * i)] = 1;
                if (n > 0)
                    CHECK_STATUS(whorl_map_apply(&host, &map, unit, got, (int32_t)n), WHORL_OK, &host);
                for (j = 0; j < n; j++)
                    for (i = 0; i < n; i++) {
                        uint64_t at = whorl_space_at(space, i) + size * whorl_space_at(space, j);
                        worst = fmax(worst, fabs(got[2 * (i + n * j)] - want[2 * at]));
                        worst = fmax(worst, fabs(got[2 * (i + n * j) + 1] - want[2 * at + 1]));
                    }
                CHECK_NEAR(worst, 0, 4e-15 * (1 + whorl_sum_norm_bound(&sum)), "matrix element");
                CHECK(map.hermitian == whorl_sum_is_hermitian(&sum));
                CHECK(map.norm_bound >= whorl_sum_norm_bound(&sum) &&
                      map.norm_bound <= 1.0001 * whorl_sum_norm_bound(&sum));
                free(unit);
                free(got);
                free(want);
                release(action);
                whorl_space_free(&host, space);
            }
}

/* Every element type, 1 to 7 columns, sizes around the rows of the kernels. */
static void products(void)
{
    static const int32_t sizes[] = {1, 2, 3, 7, 11, 13};
    static whorl_term terms[128];
    int s, e, which, kind;
    for (s = 0; s < 6; s++)
        for (which = 0; which < SPACE_KINDS; which++)
            for (kind = 0; kind < 2; kind++)
                for (e = 0; e < 4; e++) {
                    int32_t sites = sizes[s], columns = 1 + (s + e + which) % 7;
                    int flags = JUDGE_HERMITIAN | (width_of(elements[e]) == 1 || kind ? JUDGE_REAL : 0);
                    whorl_sum sum = judge_random_sum((uint64_t)(31 * s + which), sites, 20, flags, terms);
                    whorl_space *space = some_space(which, sites);
                    whorl_action *action = compile(&sum, space, NULL, WHORL_ACTION_PROJECT, elements[e]);
                    whorl_host host = host_of(1);
                    if (whorl_space_count(space) > 0)
                        compare(&sum, space, space, action, columns, "product");
                    compare_bits(&sum, space, WHORL_ACTION_PROJECT, elements[e], columns > 3 ? 3 : columns);
                    release(action);
                    whorl_space_free(&host, space);
                }
}

/* Sums that keep the number of down spins pass in strict mode, and nothing is dropped. */
static void conserving(void)
{
    static const int32_t sizes[] = {2, 5, 10, 13, 15, 16};
    static whorl_term terms[256];
    int s, e, complex_sum;
    for (s = 0; s < 6; s++)
        for (complex_sum = 0; complex_sum < 2; complex_sum++)
            for (e = 0; e < 4; e++) {
                int32_t sites = sizes[s], down = (sites + e) / 2 % (sites + 1);
                whorl_host host = host_of(1);
                whorl_sum sum;
                whorl_space *space = NULL;
                whorl_action *action;
                if (complex_sum && width_of(elements[e]) == 1)
                    continue;
                sum = judge_random_sum((uint64_t)(7 + s), sites, 40,
                                       JUDGE_CONSERVING | JUDGE_HERMITIAN | (complex_sum ? 0 : JUDGE_REAL), terms);
                CHECK_STATUS(whorl_space_make_down(&host, sites, down, &space), WHORL_OK, &host);
                action = compile(&sum, space, NULL, WHORL_ACTION_STRICT, elements[e]);
                CHECK(compare(&sum, space, space, action, 1 + s, "conserving product") < 1e300);
                compare_bits(&sum, space, WHORL_ACTION_STRICT, elements[e], 1 + s % 3);
                release(action);
                whorl_space_free(&host, space);
            }
}

/* S^-_i and random sums from one number of down spins to the next, and back. */
static void between(void)
{
    enum { N = 9 };
    static whorl_term terms[64];
    whorl_host host = host_of(1);
    whorl_space *spaces[N + 1], *all = NULL;
    int32_t n, i;
    CHECK_STATUS(whorl_space_make_all(&host, N, &all), WHORL_OK, &host);
    for (n = 0; n <= N; n++)
        CHECK_STATUS(whorl_space_make_down(&host, N, n, &spaces[n]), WHORL_OK, &host);
    for (n = 0; n < N; n++) {
        uint64_t used = 0;
        whorl_sum sum;
        whorl_action *action = NULL;
        whorl_action_desc desc = whorl_action_default();
        for (i = 0; i < N; i++)
            used += whorl_terms_spin(terms + used, i, '-', 0.3 + i);
        CHECK_STATUS(whorl_sum_from_terms(&host, N, terms, used, &sum), WHORL_OK, &host);
        action = compile(&sum, spaces[n], spaces[n + 1], WHORL_ACTION_STRICT, WHORL_ELEMENT_DEFAULT);
        CHECK(whorl_action_map(action).element == WHORL_REAL_DOUBLE && !whorl_action_map(action).hermitian);
        CHECK(compare(&sum, spaces[n], spaces[n + 1], action, 2, "S^-") > 0 || n == 0); /* strings cancel in pairs */
        release(action);
        action = compile(&sum, spaces[n], all, WHORL_ACTION_STRICT, WHORL_COMPLEX_DOUBLE);
        compare(&sum, spaces[n], all, action, 2, "into all states");
        release(action);
        action = compile(&sum, all, spaces[n], WHORL_ACTION_PROJECT, WHORL_REAL_FLOAT);
        compare(&sum, all, spaces[n], action, 2, "out of all states");
        release(action);
        desc.sums = &sum;
        desc.sum_count = 1;
        desc.source = spaces[n];
        desc.target = spaces[n];
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_LEAVES_SPACE, &host);
        CHECK(action == NULL && host.bytes_used > 0);
        desc.source = all;
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_LEAVES_SPACE, &host);
    }
    for (n = 0; n <= N; n++)
        whorl_space_free(&host, spaces[n]);
    whorl_space_free(&host, all);
    CHECK(host.bytes_used == 0);
}

/* ---- refused ----------------------------------------------------------------------------------------------------- */

static whorl_status try_sum(whorl_host *host, const whorl_term *given, uint64_t count, int32_t sites,
                            const whorl_space *space)
{
    whorl_term terms[16];
    whorl_sum sum;
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    whorl_status status;
    memcpy(terms, given, (size_t)count * sizeof *terms);
    CHECK_STATUS(whorl_sum_from_terms(host, sites, terms, count, &sum), WHORL_OK, host);
    desc.sums = &sum;
    desc.sum_count = 1;
    desc.source = space;
    status = whorl_action_make(host, &desc, &action);
    CHECK((status == WHORL_OK) == (action != NULL));
    whorl_action_free(host, action);
    return status;
}

static void leaving(void)
{
    whorl_host host = host_of(1);
    whorl_term terms[16];
    whorl_space *half = NULL, *parity = some_space(5, 4), *blockade = some_space(7, 4), *species = some_space(4, 6);
    whorl_space *list;
    uint64_t used;
    CHECK_STATUS(whorl_space_make_down(&host, 4, 2, &half), WHORL_OK, &host);
    list = list_of(half);
    used = whorl_terms_exchange(terms, 1, 3, 1.0);
    CHECK_STATUS(try_sum(&host, terms, used, 4, half), WHORL_OK, &host);
    CHECK_STATUS(try_sum(&host, terms, used, 4, list), WHORL_OK, &host);
    CHECK_STATUS(try_sum(&host, terms, used, 4, parity), WHORL_OK, &host);
    CHECK_STATUS(try_sum(&host, terms, used, 4, blockade), WHORL_LEAVES_SPACE, &host);
    used = whorl_terms_exchange_xyz(terms, 1, 3, 1.0, 0.5, 0.0);
    CHECK_STATUS(try_sum(&host, terms, used, 4, half), WHORL_LEAVES_SPACE, &host);
    CHECK(strstr(host.reason.text, "sites 1,3") != NULL && strstr(host.reason.text, "0.25 X1 X3") != NULL &&
          strstr(host.reason.text, "0.125 Y1 Y3") != NULL);
    CHECK_STATUS(try_sum(&host, terms, used, 4, list), WHORL_LEAVES_SPACE, &host);
    CHECK(strstr(host.reason.text, "sites 1,3") != NULL);
    CHECK_STATUS(try_sum(&host, terms, used, 4, parity), WHORL_OK, &host);
    used = whorl_terms_string(terms, 4, 0, 2.5);
    CHECK_STATUS(try_sum(&host, terms, used, 4, half), WHORL_LEAVES_SPACE, &host);
    CHECK(strstr(host.reason.text, "site") != NULL && strstr(host.reason.text, "2.5 X2") != NULL);
    CHECK_STATUS(try_sum(&host, terms, used, 4, parity), WHORL_LEAVES_SPACE, &host);
    /* spin inversion keeps half filling although it flips every site */
    used = whorl_terms_string(terms, 15, 0, 1.0);
    CHECK_STATUS(try_sum(&host, terms, used, 4, half), WHORL_OK, &host);
    /* two species: hopping inside one is kept, between them not */
    used = whorl_terms_exchange(terms, 0, 2, 1.0);
    CHECK_STATUS(try_sum(&host, terms, used, 6, species), WHORL_OK, &host);
    used = whorl_terms_exchange(terms, 0, 1, 1.0);
    CHECK_STATUS(try_sum(&host, terms, used, 6, species), WHORL_LEAVES_SPACE, &host);
    /* X0 (1 - Z1 Z2 Z3 Z4): vanishes where an even number of down spins is fixed outside site 0: characters depend */
    {
        whorl_space_desc desc = whorl_space_default();
        whorl_down_number number;
        whorl_space *space;
        number.mask = 30;
        number.down = 2;
        desc.sites = 5;
        desc.kind = WHORL_SPACE_DOWN;
        desc.numbers = &number;
        desc.number_count = 1;
        space = make_space(&desc);
        used = whorl_terms_string(terms, 3, 0, 1.0);
        used += whorl_terms_string(terms + used, 3, 28, 1.0); /* X0 X1 (1 + Z2 Z3 Z4): leaves with two downs on 2..4 */
        CHECK_STATUS(try_sum(&host, terms, used, 5, space), WHORL_LEAVES_SPACE, &host);
        used = whorl_terms_string(terms, 6, 0, 1.0); /* X1 X2 (1 - Z1 Z2) (1 + ...) keeps two downs on sites 1..4 */
        used += whorl_terms_string(terms + used, 6, 6, 1.0);  /* X1 X2 + Y1 Y2 */
        used += whorl_terms_string(terms + used, 6, 24, 1.0); /* X1 X2 Z3 Z4: alone it leaves from 00 11 */
        CHECK_STATUS(try_sum(&host, terms, used, 5, space), WHORL_LEAVES_SPACE, &host);
        used = whorl_terms_string(terms, 6, 0, 1.0);
        used += whorl_terms_string(terms + used, 6, 24, -1.0); /* X1 X2 (1 - Z3 Z4): 0 where sites 1,2 are equal */
        CHECK_STATUS(try_sum(&host, terms, used, 5, space), WHORL_OK, &host);
        whorl_space_free(&host, space);
    }
    whorl_space_free(&host, half);
    whorl_space_free(&host, list);
    whorl_space_free(&host, parity);
    whorl_space_free(&host, blockade);
    whorl_space_free(&host, species);
}

/* Strict mode against the judge: it refuses exactly where the naive product drops something. */
static void judged(void)
{
    static whorl_term terms[64];
    int seed, which, refused = 0, passed = 0;
    for (seed = 0; seed < 60; seed++)
        for (which = 1; which < SPACE_KINDS; which++) {
            int32_t sites = 2 + seed % 5;
            whorl_host host = host_of(1);
            whorl_sum sum =
                judge_random_sum((uint64_t)seed, sites, 1 + (uint64_t)seed % 4, seed & 1 ? JUDGE_CONSERVING : 0, terms);
            whorl_space *space = some_space(which, sites);
            whorl_action_desc desc = whorl_action_default();
            whorl_action *action = NULL;
            uint64_t n = whorl_space_count(space), *states = states_of(space), i, j, t;
            int leaves = 0;
            whorl_status status;
            for (j = 0; j < n; j++) /* from state j by each flip, all its strings together */
                for (t = 0; t < sum.count; t = i) {
                    double re = 0, im = 0;
                    uint64_t out = states[j] ^ sum.terms[t].x;
                    for (i = t; i < sum.count && sum.terms[i].x == sum.terms[t].x; i++) {
                        int q;
                        judge_string_on(sum.terms[i].x, sum.terms[i].z, states[j], &q);
                        re += q == 0   ? sum.terms[i].re
                              : q == 1 ? -sum.terms[i].im
                              : q == 2 ? -sum.terms[i].re
                                       : sum.terms[i].im;
                        im += q == 0   ? sum.terms[i].im
                              : q == 1 ? sum.terms[i].re
                              : q == 2 ? -sum.terms[i].im
                                       : -sum.terms[i].re;
                    }
                    leaves |= judge_find(states, n, out) == WHORL_NONE && fabs(re) + fabs(im) > 1e-13;
                }
            desc.sums = &sum;
            desc.sum_count = 1;
            desc.source = space;
            status = whorl_action_make(&host, &desc, &action);
            CHECK_STATUS(status, leaves ? WHORL_LEAVES_SPACE : WHORL_OK, &host);
            refused += leaves;
            passed += !leaves;
            whorl_action_free(&host, action);
            whorl_space_free(&host, space);
            free(states);
        }
    CHECK(refused > 50 && passed > 50);
}

static void refused(void)
{
    whorl_host host = host_of(1);
    whorl_term terms[2], wrong[2] = {{1, 0, 1, 0}, {0, 1, 1, 0}};
    whorl_sum sum, untidy = {3, 2, NULL}, other = {4, 0, NULL};
    whorl_complex weight = {1, 0};
    whorl_space *space = NULL;
    whorl_action *action = (whorl_action *)&sum;
    whorl_action_desc desc = whorl_action_default();
    uint64_t used = whorl_terms_string(terms, 1, 0, 1.0), bytes = 77;
    CHECK_STATUS(whorl_sum_from_terms(&host, 3, terms, used, &sum), WHORL_OK, &host);
    CHECK_STATUS(whorl_space_make_all(&host, 3, &space), WHORL_OK, &host);
    desc.sums = &sum;
    desc.sum_count = 1;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    CHECK(action == NULL);
    desc.source = space;
    desc.element = 5;
    CHECK_STATUS(whorl_action_bytes(&host, &desc, &bytes), WHORL_BAD_ARGUMENT, &host);
    CHECK(bytes == 77);
    desc.element = 0;
    desc.mode = 2;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    desc.mode = 0;
    untidy.terms = wrong;
    desc.sums = &untidy;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    desc.sums = &other;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 0);
    desc.sums = NULL;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    desc.sums = &sum;
    desc.weights = &weight;
    weight.re = NAN;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_NOT_FINITE, &host);
    weight.re = 1;
    weight.im = 1;
    desc.element = WHORL_REAL_DOUBLE;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_BAD_ARGUMENT, &host);
    desc.element = 0;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
    CHECK(whorl_action_map(action).element == WHORL_COMPLEX_DOUBLE && !whorl_action_map(action).hermitian);
    whorl_action_free(&host, action);
    weight.im = 0;
    weight.re = 1e300;
    terms[0].re = 1e300;
    CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_NOT_FINITE, &host);
    whorl_space_free(&host, space);
    whorl_action_free(&host, NULL);
    CHECK(host.bytes_used == 0);
}

/* Several sums with weights: the bits of the sum added up beforehand where weights are exact, and of making it anew. */
static void weights(void)
{
    static whorl_term a[128], b[128], c[128];
    int32_t sites = 10, which, e;
    for (which = 0; which < 2; which++)
        for (e = 0; e < 2; e++) {
            whorl_host host = host_of(1);
            int flags = JUDGE_HERMITIAN | JUDGE_CONSERVING | (e == 0 ? JUDGE_REAL : 0);
            whorl_sum sums[3];
            whorl_complex first[3] = {{1, 0}, {0.5, 0}, {-2, 0}}, second[3] = {{0.3, 0}, {0, 0}, {1.7, 0}};
            whorl_complex bad[3] = {{0.3, 0}, {HUGE_VAL, 0}, {1.7, 0}};
            whorl_space *space = some_space(which, sites);
            whorl_action_desc desc = whorl_action_default();
            whorl_action *action = NULL, *fresh = NULL;
            whorl_map map, other;
            uint64_t n = whorl_space_count(space), w = width_of(elements[e]);
            void *start[3], *x = random_vector(elements[e], w * n, 1, 0, &start[0]);
            void *y = random_vector(elements[e], w * n, 2, 0, &start[1]),
                 *z = random_vector(elements[e], w * n, 3, 0, &start[2]);
            sums[0] = judge_random_sum(1, sites, 20, flags, a);
            sums[1] = judge_random_sum(2, sites, 20, flags, b);
            sums[2] = judge_random_sum(1, sites, 25, flags, c); /* shares strings with the first */
            desc.sums = sums;
            desc.sum_count = 3;
            desc.weights = first;
            desc.source = space;
            desc.element = elements[e];
            CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
            desc.weights = second;
            CHECK_STATUS(whorl_action_make(&host, &desc, &fresh), WHORL_OK, &host);
            map = whorl_action_map(action);
            other = whorl_action_map(fresh);
            CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 1), WHORL_OK, &host);
            CHECK_STATUS(whorl_action_reweight(&host, action, bad), WHORL_NOT_FINITE, &host);
            CHECK(host.reason.index == 1);
            CHECK_STATUS(whorl_map_apply(&host, &map, x, z, 1), WHORL_OK, &host);
            CHECK(memcmp(y, z, (size_t)(8 * w * n)) == 0); /* as it was */
            CHECK_STATUS(whorl_action_reweight(&host, action, second), WHORL_OK, &host);
            CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 1), WHORL_OK, &host);
            CHECK_STATUS(whorl_map_apply(&host, &other, x, z, 1), WHORL_OK, &host);
            CHECK(memcmp(y, z, (size_t)(8 * w * n)) == 0);
            CHECK(whorl_action_map(action).norm_bound == whorl_action_map(fresh).norm_bound);
            CHECK_STATUS(whorl_action_reweight(&host, action, first), WHORL_OK, &host);
            CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 1), WHORL_OK, &host);
            {
                static whorl_term sum_terms[512], more[512];
                whorl_sum half, whole;
                whorl_action *added;
                CHECK_STATUS(whorl_sum_add(&host, &sums[0], first[0], &sums[1], first[1], more, 512, &half), WHORL_OK,
                             &host);
                CHECK_STATUS(
                    whorl_sum_add(&host, &half, whorl_complex_of(1, 0), &sums[2], first[2], sum_terms, 512, &whole),
                    WHORL_OK, &host);
                added = compile(&whole, space, NULL, WHORL_ACTION_STRICT, elements[e]);
                other = whorl_action_map(added);
                CHECK_STATUS(whorl_map_apply(&host, &other, x, z, 1), WHORL_OK, &host);
                CHECK(memcmp(y, z, (size_t)(8 * w * n)) == 0);
                release(added);
            }
            whorl_action_free(&host, action);
            whorl_action_free(&host, fresh);
            whorl_space_free(&host, space);
            free(start[0]);
            free(start[1]);
            free(start[2]);
        }
}

/* No sum, an empty sum, a space without states, one site. */
static void edges(void)
{
    whorl_host host = host_of(1);
    whorl_sum empty = {2, 0, NULL};
    whorl_space_desc none = whorl_space_default();
    whorl_space *space = NULL, *nothing;
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    whorl_map map;
    double x[4] = {1, 2, 3, 4}, y[4] = {9, 9, 9, 9};
    int k;
    CHECK_STATUS(whorl_space_make_all(&host, 2, &space), WHORL_OK, &host);
    none.sites = 2;
    none.kind = WHORL_SPACE_LIST;
    nothing = make_space(&none);
    for (k = 0; k < 2; k++) {
        desc.sums = k == 0 ? NULL : &empty;
        desc.sum_count = (uint64_t)k;
        desc.source = space;
        desc.target = NULL;
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
        map = whorl_action_map(action);
        CHECK(map.element == WHORL_REAL_DOUBLE && map.hermitian && map.norm_bound == 0 && map.rows == 4);
        y[0] = y[3] = 9;
        CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 1), WHORL_OK, &host);
        CHECK(y[0] == 0 && y[1] == 0 && y[2] == 0 && y[3] == 0);
        whorl_action_free(&host, action);
        desc.source = nothing;
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
        map = whorl_action_map(action);
        CHECK_STATUS(whorl_map_apply(&host, &map, NULL, NULL, 1), WHORL_OK, &host);
        whorl_action_free(&host, action);
        desc.target = space;
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
        map = whorl_action_map(action);
        y[0] = y[3] = 9;
        CHECK_STATUS(whorl_map_apply(&host, &map, NULL, y, 1), WHORL_OK, &host);
        CHECK(y[0] == 0 && y[1] == 0 && y[2] == 0 && y[3] == 0);
        whorl_action_free(&host, action);
        desc.target = nothing;
        desc.source = space;
        CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
        map = whorl_action_map(action);
        CHECK_STATUS(whorl_map_apply(&host, &map, x, NULL, 1), WHORL_OK, &host);
        whorl_action_free(&host, action);
    }
    whorl_space_free(&host, space);
    {
        whorl_host its = host_of(1);
        whorl_space_free(&its, nothing);
    }
}

/* 63 and 64 sites: lists and few down spins, every flip up to all sites. */
static void many_sites(void)
{
    int32_t sites, e, which;
    for (sites = 62; sites <= 64; sites++)
        for (which = 0; which < 2; which++)
            for (e = 0; e < 4; e++) {
                whorl_host host = host_of(1);
                static whorl_term terms[64];
                static uint64_t states[512];
                whorl_space_desc desc = whorl_space_default();
                whorl_space *space = NULL;
                whorl_action *action;
                whorl_sum sum;
                uint64_t used = 0, i, all = whorl_bits_low(sites);
                if (which == 0) {
                    for (i = 0; i < 254; i += 2) {
                        states[i] = whorl_random_bits(1, 2, i) & (all >> 1);
                        states[i + 1] = all ^ states[i];
                    }
                    desc.sites = sites;
                    desc.kind = WHORL_SPACE_LIST;
                    desc.states = states;
                    desc.state_count = 254;
                    space = make_space(&desc);
                    used += whorl_terms_string(terms + used, all, 0, 1.25);
                    used += whorl_terms_string(terms + used, all, UINT64_C(3) << (sites - 2), 0.75);
                    used += whorl_terms_string(terms + used, 0, all, 0.5);
                } else {
                    CHECK_STATUS(whorl_space_make_down(&host, sites, 2, &space), WHORL_OK, &host);
                    for (i = 0; i < 10; i++)
                        used +=
                            whorl_terms_exchange(terms + used, (int32_t)(7 * i) % sites, sites - 1 - (int32_t)i, 0.3);
                    if (width_of(elements[e]) == 2) {
                        const double d[3] = {0, 0, 0.4};
                        used += whorl_terms_antisymmetric(terms + used, 0, sites - 1, d);
                    }
                }
                CHECK_STATUS(whorl_sum_from_terms(&host, sites, terms, used, &sum), WHORL_OK, &host);
                if (which == 0 && width_of(elements[e]) == 1 && !whorl_sum_is_real(&sum)) {
                    whorl_space_free(&host, space);
                    continue;
                }
                action = compile(&sum, space, NULL, WHORL_ACTION_STRICT, elements[e]);
                compare(&sum, space, space, action, 2, "many sites");
                release(action);
                whorl_space_free(&host, space);
            }
}

/* Flips with more strings than a table of factors holds: X_i sum_j c_j Z_j, X_i Y_j Z_k, and long diagonals. */
static void many_strings(void)
{
    static whorl_term terms[1024];
    static const int32_t sizes[] = {9, 12, 13};
    int s, e, which;
    for (s = 0; s < 3; s++)
        for (e = 0; e < 4; e++)
            for (which = 0; which < 6; which++) {
                whorl_host host = host_of(1);
                int32_t sites = sizes[s], i, j;
                uint64_t used = 0, k = 0;
                whorl_sum sum;
                whorl_space *space = some_space(which, sites);
                whorl_action *action;
                for (i = 0; i < sites; i += 3)
                    for (j = 0; j < sites; j++) {
                        uint64_t x = UINT64_C(1) << i, z = UINT64_C(1) << j;
                        double c = whorl_random_normal(8, 9, k++);
                        if (width_of(elements[e]) == 2 || i != j)
                            used += whorl_terms_string(terms + used, x, z, c);
                        used += whorl_terms_string(terms + used, 0, x ^ z ^ UINT64_C(5), 0.5 * c);
                        used += whorl_terms_string(terms + used, x ^ z, 0, 0.25 * c);
                        if (width_of(elements[e]) == 2)
                            used += whorl_terms_string(terms + used, x, z | x, 0.3 * c);
                    }
                CHECK_STATUS(whorl_sum_from_terms(&host, sites, terms, used, &sum), WHORL_OK, &host);
                action = compile(&sum, space, NULL, WHORL_ACTION_PROJECT, elements[e]);
                compare(&sum, space, space, action, 2, "many strings a flip");
                compare_bits(&sum, space, WHORL_ACTION_PROJECT, elements[e], 2);
                release(action);
                whorl_space_free(&host, space);
            }
}

/* The fused step and the composed one: the same bits, and the announced scratch. */
static void steps(void)
{
    static whorl_term terms[128];
    static const int32_t sizes[] = {3, 6, 10, 13, 15};
    int s, e, t, zero, which;
    for (s = 0; s < 5; s++)
        for (e = 0; e < 4; e++)
            for (which = 0; which < 2; which++) {
                int32_t sites = sizes[s];
                whorl_sum sum =
                    judge_random_sum(77 + (uint64_t)s, sites, 30,
                                     JUDGE_HERMITIAN | (width_of(elements[e]) == 1 ? JUDGE_REAL : 0), terms);
                whorl_space *space = some_space(which, sites);
                whorl_action *action = compile(&sum, space, NULL, WHORL_ACTION_PROJECT, elements[e]);
                whorl_map map = whorl_action_map(action), plain = map;
                uint64_t reals = map.rows * width_of(elements[e]), bytes = map.rows * whorl_element_bytes(elements[e]);
                void *start[3], *x = random_vector(elements[e], reals, 1, 0, &start[0]);
                plain.step = NULL;
                for (zero = 0; zero < 2; zero++)
                    for (t = 1; t <= 4; t *= 2) {
                        whorl_host host = host_of(t);
                        void *y = random_vector(elements[e], reals, 2, 1, &start[1]);
                        void *z = random_vector(elements[e], reals, 2, 0, &start[2]);
                        whorl_complex fused[2], composed[2];
                        double b = zero ? 0.0 : -0.375;
                        CHECK_STATUS(whorl_map_step(&host, &map, 1.5, x, b, y, fused), WHORL_OK, &host);
                        CHECK(host.bytes_peak <= whorl_map_scratch(&host, &map, 0) && host.bytes_used == 0);
                        CHECK_STATUS(whorl_map_step(&host, &plain, 1.5, x, b, z, composed), WHORL_OK, &host);
                        CHECK(memcmp(y, z, (size_t)bytes) == 0);
                        CHECK(memcmp(fused, composed, sizeof fused) == 0);
                        free(start[1]);
                        free(start[2]);
                    }
                free(start[0]);
                release(action);
                {
                    whorl_host its = host_of(1);
                    whorl_space_free(&its, space);
                }
            }
}

/* ---- contracts --------------------------------------------------------------------------------------------------- */

typedef struct work {
    const whorl_space *space;
    const whorl_sum *sum;
    whorl_element element;
    uint64_t takes, bytes;
} work;

static whorl_status make_and_apply(whorl_host *host, void *argument)
{
    work *job = (work *)argument;
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    whorl_status status;
    uint64_t used = host->bytes_used;
    desc.sums = job->sum;
    desc.sum_count = 1;
    desc.source = job->space;
    desc.element = job->element;
    status = whorl_action_make(host, &desc, &action);
    CHECK((status == WHORL_OK) == (action != NULL));
    if (status == WHORL_OK) {
        whorl_map map = whorl_action_map(action);
        double *x = judge_reals(2 * map.columns), *y = judge_reals(2 * map.rows);
        uint64_t kept = host->bytes_used;
        status = whorl_map_apply(host, &map, x, y, 2 - (int32_t)width_of(map.element) + 1);
        CHECK(host->bytes_used == kept);
        if (status == WHORL_OK)
            status = whorl_action_reweight(host, action, NULL);
        free(x);
        free(y);
    }
    whorl_action_free(host, action);
    CHECK(host->bytes_used == used);
    return status;
}

static void failures(void)
{
    static whorl_term terms[128];
    int which, e;
    for (which = 0; which < 8; which++)
        for (e = 0; e < 4; e++) {
            whorl_host host = host_of(1);
            int32_t sites = 13;
            whorl_sum sum = judge_random_sum(5, sites, 30, JUDGE_HERMITIAN | JUDGE_CONSERVING | JUDGE_REAL, terms);
            whorl_space *space = some_space(which == 4 || which == 7 ? 1 : which, sites);
            work job;
            job.space = space;
            job.sum = &sum;
            job.element = elements[e];
            check_every_allocation(make_and_apply, &job, WHORL_OK);
            check_every_poll(make_and_apply, &job, WHORL_OK);
            whorl_space_free(&host, space);
        }
}

/* An arena of the announced size; one byte less is refused. */
static void arena(void)
{
    static whorl_term terms[128];
    int which, e;
    for (which = 0; which < 2; which++)
        for (e = 0; e < 4; e++) {
            whorl_host host = host_of(1), plain = host_of(1);
            whorl_sum sum = judge_random_sum(5, 13, 30, JUDGE_HERMITIAN | JUDGE_CONSERVING | JUDGE_REAL, terms);
            whorl_space *space = some_space(which, 13);
            whorl_action_desc desc = whorl_action_default();
            whorl_action *action = NULL;
            whorl_arena arena_of;
            uint64_t bytes = 0, scratch;
            char *memory, *base;
            whorl_map map;
            double *x, *y;
            desc.sums = &sum;
            desc.sum_count = 1;
            desc.source = space;
            desc.element = elements[e];
            CHECK_STATUS(whorl_action_make(&plain, &desc, &action), WHORL_OK, &plain);
            map = whorl_action_map(action);
            CHECK_STATUS(whorl_action_bytes(&host, &desc, &bytes), WHORL_OK, &host);
            scratch = whorl_map_scratch(&host, &map, 2);
            whorl_action_free(&plain, action);
            memory = (char *)judge_memory(bytes + scratch + 64, 1);
            base = memory + (64 - (uintptr_t)memory % 64) % 64;
            whorl_arena_make(&arena_of, base, bytes - 1);
            whorl_arena_use(&arena_of, &host);
            CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_NO_MEMORY, &host);
            whorl_arena_make(&arena_of, base, bytes + scratch);
            CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OK, &host);
            map = whorl_action_map(action);
            x = judge_reals(4 * map.columns);
            y = judge_reals(4 * map.rows);
            CHECK_STATUS(whorl_map_apply(&host, &map, x, y, 2), WHORL_OK, &host);
            CHECK(arena_of.peak == bytes + scratch);
            whorl_action_free(&host, action);
            host.byte_limit = bytes - 1;
            CHECK_STATUS(whorl_action_make(&host, &desc, &action), WHORL_OVER_LIMIT, &host);
            free(x);
            free(y);
            free(memory);
            whorl_space_free(&plain, space);
        }
}

int main(void)
{
    check_begin("action");
    check_run("matrices", matrices);
    check_run("products", products);
    check_run("conserving", conserving);
    check_run("between", between);
    check_run("leaving", leaving);
    check_run("judged", judged);
    check_run("refused", refused);
    check_run("weights", weights);
    check_run("edges", edges);
    check_run("many_sites", many_sites);
    check_run("many_strings", many_strings);
    check_run("steps", steps);
    check_run("failures", failures);
    check_run("arena", arena);
    return check_end();
}
