/*
 * test_failures.c: the complete list of public calls that can fail for want of memory or be stopped. For each call:
 * every allocation failed in turn, once and for good; every poll cancelled in turn; status, outputs as promised,
 * nothing leaked, and a retry with the same bits. Where the memory is announced: an arena of that size is enough, with
 * not one malloc; one byte less, in the arena or as limit, is refused. Prints a table of the calls.
 */
#include "check.h"
#include "dense_judge.h"
#include "whorl.h"

/* ---- counting malloc --------------------------------------------------------------------------------------------- */

/* volatile: compilers take it that malloc reads and writes no variable of the program */
static volatile int watching;             /* 1 while a call under test runs */
static volatile uint64_t watched_mallocs; /* calls of malloc and its like meanwhile */

static void watch_malloc(void) { watched_mallocs += watching ? 1 : 0; }

#if defined(__has_feature)
#if __has_feature(address_sanitizer) || __has_feature(memory_sanitizer)
#define WATCH_BY_HOOK 1
#endif
#if __has_feature(thread_sanitizer)
#define WATCH_BY_NOTHING 1
#endif
#endif
#if defined(__SANITIZE_ADDRESS__)
#define WATCH_BY_HOOK 1
#elif defined(__SANITIZE_THREAD__)
#define WATCH_BY_NOTHING 1
#endif

#if defined(WATCH_BY_HOOK)
extern int __sanitizer_install_malloc_and_free_hooks(void (*on_malloc)(const volatile void *, size_t),
                                                     void (*on_free)(const volatile void *));
static void hook_malloc(const volatile void *at, size_t bytes)
{
    (void)at;
    (void)bytes;
    watch_malloc();
}
static void hook_free(const volatile void *at) { (void)at; }
static int watch_begin(void) { return __sanitizer_install_malloc_and_free_hooks(hook_malloc, hook_free) > 0; }
#elif defined(__GLIBC__) && !defined(WATCH_BY_NOTHING)
/* The program's own malloc takes the place of the library's, for everything that is linked to it. */
extern void *__libc_malloc(size_t bytes);
extern void *__libc_calloc(size_t count, size_t bytes);
extern void *__libc_realloc(void *at, size_t bytes);
extern void __libc_free(void *at);
void *malloc(size_t bytes)
{
    watch_malloc();
    return __libc_malloc(bytes);
}
void *calloc(size_t count, size_t bytes)
{
    watch_malloc();
    return __libc_calloc(count, bytes);
}
void *realloc(void *at, size_t bytes)
{
    watch_malloc();
    return __libc_realloc(at, bytes);
}
void free(void *at) { __libc_free(at); }
static int watch_begin(void) { return 1; }
#else
static int watch_begin(void) { return 0; }
#endif

/* ---- calls under test -------------------------------------------------------------------------------------------- */

#define ANNOUNCED_NOTHING UINT64_MAX

/*
 * One run of one case. A case makes what it needs with a host of its own, sets `bytes` to what is announced for the
 * call, makes it with `host` as CALL(..) with call_end() behind, checks what is promised of the outputs, adds them to
 * the digest where it succeeded, frees everything with the host that made it, and returns the status.
 */
typedef struct attempt {
    whorl_host *host;
    uint64_t bytes;  /* announced for the call: exact, or a bound where `bound` is set */
    int bound;       /* 1: at least 0.8 of it is used; 2: it is enough */
    int adapts;      /* 1: a lower byte limit may lead to a leaner method instead of a refusal */
    uint64_t digest;
} attempt;

static whorl_status call_begin(void)
{
    watching = 1;
    return WHORL_OK;
}
static void call_end(void) { watching = 0; }
/* status = CALL(call) */
#define CALL(call) (call_begin(), call)

static void digest(attempt *a, const void *data, uint64_t bytes)
{
    const unsigned char *at = (const unsigned char *)data;
    uint64_t i;
    for (i = 0; i < bytes; i++)
        a->digest = (a->digest ^ at[i]) * UINT64_C(1099511628211); /* FNV-1a */
}

static void mark(void *data, uint64_t bytes) { memset(data, 0x5A, (size_t)bytes); }
static int is_marked(const void *data, uint64_t bytes)
{
    const unsigned char *at = (const unsigned char *)data;
    uint64_t i;
    for (i = 0; i < bytes; i++)
        if (at[i] != 0x5A)
            return 0;
    return 1;
}

/* Refused before anything was written? Otherwise (cancelled) big arrays are unspecified. */
static int refused(whorl_status status) { return status < 0 && status != WHORL_CANCELLED; }

typedef whorl_status (*case_function)(attempt *a);
typedef struct failure_case {
    const char *name;
    case_function run;
} failure_case;

/* ---- core -------------------------------------------------------------------------------------------------------- */

static whorl_status case_block_take(attempt *a)
{
    whorl_block block;
    whorl_status status;
    a->bytes = whorl_block_bytes(1000);
    status = CALL(whorl_block_take(a->host, 1000, &block));
    call_end();
    if (status != WHORL_OK)
        CHECK(block.start == NULL && block.bytes == 0);
    digest(a, &block.bytes, 8);
    whorl_block_give(a->host, &block);
    return status;
}

static whorl_status case_layout_take(attempt *a)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_status status;
    whorl_layout_carve(&layout, 77, 8);
    a->bytes = whorl_block_bytes(layout.bytes);
    status = CALL(whorl_layout_take(a->host, &layout, &block));
    call_end();
    digest(a, &block.bytes, 8);
    whorl_block_give(a->host, &block);
    return status;
}

static void count_block(void *argument, uint64_t block, int32_t worker)
{
    uint64_t *total = (uint64_t *)argument;
    (void)worker;
    *total += block + 1;
}

static whorl_status case_run(attempt *a)
{
    uint64_t total = 0;
    whorl_status status = CALL(whorl_run(a->host, count_block, &total, 20, UINT64_C(1) << 22));
    call_end();
    digest(a, &total, 8);
    return status;
}

static whorl_status case_poll(attempt *a)
{
    whorl_status status = CALL(whorl_poll(a->host));
    call_end();
    return status;
}

/* ---- sums -------------------------------------------------------------------------------------------------------- */

enum { MANY = 150000 };

/* Sorting many terms is polled. */
static whorl_status sort_terms(attempt *a, int which)
{
    whorl_term *terms = (whorl_term *)judge_memory(MANY, sizeof(whorl_term));
    whorl_sum sum, before;
    whorl_status status;
    int32_t site_to[64];
    uint64_t k;
    whorl_host own = whorl_host_default();
    for (k = 0; k < 64; k++)
        site_to[k] = (int32_t)(63 - k);
    for (k = 0; k < MANY; k++) {
        terms[k].x = whorl_random_bits(1, 1, k);
        terms[k].z = whorl_random_bits(1, 2, k);
        terms[k].re = whorl_random_normal(1, 3, k);
        terms[k].im = 0.0;
    }
    mark(&sum, sizeof sum);
    if (which > 0) {
        CHECK_STATUS(whorl_sum_from_terms(&own, 64, terms, MANY, &sum), WHORL_OK, &own);
        if (which == 1) { /* out of order again */
            whorl_term last = terms[MANY - 1];
            memmove(terms + 1, terms, (MANY - 1) * sizeof(whorl_term));
            terms[0] = last;
            for (k = 1; k + 1 < MANY; k += 2) {
                last = terms[k];
                terms[k] = terms[MANY - 1 - k];
                terms[MANY - 1 - k] = last;
            }
        }
    }
    before = sum;
    switch (which) {
    case 0: status = CALL(whorl_sum_from_terms(a->host, 64, terms, MANY, &sum)); break;
    case 1: status = CALL(whorl_sum_tidy(a->host, &sum)); break;
    case 2: status = CALL(whorl_sum_permute(a->host, &sum, site_to)); break;
    case 3: status = CALL(whorl_sum_embed(a->host, &sum, 64, site_to)); break;
    default: status = CALL(whorl_sum_rotate(a->host, &sum, UINT64_C(0x5555555555555555))); break;
    }
    call_end();
    if (status != WHORL_OK)
        CHECK(memcmp(&sum, &before, sizeof sum) == 0);
    else
        digest(a, sum.terms, sum.count * sizeof(whorl_term));
    free(terms);
    return status;
}
static whorl_status case_sum_from_terms(attempt *a) { return sort_terms(a, 0); }
static whorl_status case_sum_tidy(attempt *a) { return sort_terms(a, 1); }
static whorl_status case_sum_permute(attempt *a) { return sort_terms(a, 2); }
static whorl_status case_sum_embed(attempt *a) { return sort_terms(a, 3); }
static whorl_status case_sum_rotate(attempt *a) { return sort_terms(a, 4); }

/* Products: `which` 0 multiply, 1 commutator; small ones fail, large ones are polled. */
static whorl_status product(attempt *a, int which, uint64_t size)
{
    whorl_term *x = (whorl_term *)judge_memory(2 * size, sizeof(whorl_term));
    whorl_term *y = (whorl_term *)judge_memory(2 * size, sizeof(whorl_term));
    uint64_t room = size * size + 16, k;
    whorl_term *out = (whorl_term *)judge_memory(room, sizeof(whorl_term));
    whorl_sum left, right, result;
    whorl_status status;
    whorl_host own = whorl_host_default();
    for (k = 0; k < size; k++) {
        x[k].x = whorl_random_bits(2, 1, k) & 0xff;
        x[k].z = whorl_random_bits(2, 2, k) & 0xff;
        y[k].x = whorl_random_bits(2, 3, k) & 0xff;
        y[k].z = whorl_random_bits(2, 4, k) & 0xff;
        x[k].re = whorl_random_normal(2, 5, k);
        y[k].re = whorl_random_normal(2, 6, k);
    }
    CHECK_STATUS(whorl_sum_from_terms(&own, 8, x, size, &left), WHORL_OK, &own);
    CHECK_STATUS(whorl_sum_from_terms(&own, 8, y, size, &right), WHORL_OK, &own);
    mark(out, room * sizeof(whorl_term));
    mark(&result, sizeof result);
    a->bytes = whorl_sum_product_bytes(&left, &right, room);
    if (which == 0)
        status = CALL(whorl_sum_multiply(a->host, &left, &right, out, room, &result));
    else
        status = CALL(whorl_sum_commutator(a->host, &left, &right, out, room, &result));
    call_end();
    if (status != WHORL_OK)
        CHECK(is_marked(&result, sizeof result));
    if (refused(status))
        CHECK(is_marked(out, room * sizeof(whorl_term)));
    if (status == WHORL_OK)
        digest(a, result.terms, result.count * sizeof(whorl_term));
    free(x);
    free(y);
    free(out);
    return status;
}
static whorl_status case_sum_multiply(attempt *a) { return product(a, 0, 40); }
static whorl_status case_sum_commutator(attempt *a) { return product(a, 1, 40); }

/* ---- spaces ------------------------------------------------------------------------------------------------------ */

static const whorl_down_number two_numbers[2] = {{0x0ff0, 4}, {0xf00f, 3}};
static const whorl_pair ring_pairs[12] = {{0, 1}, {1, 2}, {2, 3}, {3, 4}, {4, 5}, {5, 6},
                                          {6, 7}, {7, 8}, {8, 9}, {9, 10}, {10, 11}, {11, 0}};
static const uint64_t listed[7] = {9, 1, 77, 3, 1023, 512, 40};

static whorl_space_desc space_desc(int which)
{
    whorl_space_desc desc = whorl_space_default();
    desc.sites = 16;
    switch (which) {
    case 0: desc.kind = WHORL_SPACE_ALL; break;
    case 1:
        desc.kind = WHORL_SPACE_DOWN;
        desc.numbers = two_numbers;
        desc.number_count = 2;
        break;
    case 2:
        desc.kind = WHORL_SPACE_PARITY;
        desc.parity = 1;
        break;
    case 3:
        desc.kind = WHORL_SPACE_BLOCKADE;
        desc.sites = 14; /* two of them free */
        desc.pairs = ring_pairs;
        desc.pair_count = 12;
        break;
    default:
        desc.kind = WHORL_SPACE_LIST;
        desc.states = listed;
        desc.state_count = 7;
        break;
    }
    return desc;
}

static void digest_space(attempt *a, const whorl_space *space)
{
    uint64_t index, state;
    for (index = 0; index < whorl_space_count(space) && index < 5000; index++) {
        state = whorl_space_at(space, index);
        digest(a, &state, 8);
    }
}

static whorl_status make_space(attempt *a, int which)
{
    whorl_space_desc desc = space_desc(which);
    whorl_host own = whorl_host_default();
    whorl_space *space = (whorl_space *)&own; /* must become NULL */
    whorl_status status;
    CHECK_STATUS(whorl_space_bytes(&own, &desc, &a->bytes), WHORL_OK, &own);
    status = CALL(whorl_space_make(a->host, &desc, &space));
    call_end();
    if (status != WHORL_OK)
        CHECK(space == NULL);
    else
        digest_space(a, space);
    whorl_space_free(a->host, space);
    return status;
}
static whorl_status case_space_all(attempt *a) { return make_space(a, 0); }
static whorl_status case_space_down(attempt *a) { return make_space(a, 1); }
static whorl_status case_space_parity(attempt *a) { return make_space(a, 2); }
static whorl_status case_space_blockade(attempt *a) { return make_space(a, 3); }
static whorl_status case_space_list(attempt *a) { return make_space(a, 4); }

static whorl_status case_space_make_all(attempt *a)
{
    whorl_space_desc desc = whorl_space_default();
    whorl_host own = whorl_host_default();
    whorl_space *space = (whorl_space *)&own;
    whorl_status status;
    desc.sites = 10;
    CHECK_STATUS(whorl_space_bytes(&own, &desc, &a->bytes), WHORL_OK, &own);
    status = CALL(whorl_space_make_all(a->host, 10, &space));
    call_end();
    if (status != WHORL_OK)
        CHECK(space == NULL);
    else
        digest_space(a, space);
    whorl_space_free(a->host, space);
    return status;
}
static whorl_status case_space_make_down(attempt *a)
{
    static const whorl_down_number five = {0, 5};
    whorl_space_desc desc = whorl_space_default();
    whorl_host own = whorl_host_default();
    whorl_space *space = (whorl_space *)&own;
    whorl_status status;
    desc.sites = 12;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = &five;
    desc.number_count = 1;
    CHECK_STATUS(whorl_space_bytes(&own, &desc, &a->bytes), WHORL_OK, &own);
    status = CALL(whorl_space_make_down(a->host, 12, 5, &space));
    call_end();
    if (status != WHORL_OK)
        CHECK(space == NULL);
    else
        digest_space(a, space);
    whorl_space_free(a->host, space);
    return status;
}

static whorl_status case_space_bytes(attempt *a)
{
    whorl_space_desc desc = space_desc(3);
    uint64_t bytes = 77;
    whorl_status status = CALL(whorl_space_bytes(a->host, &desc, &bytes));
    call_end();
    if (status != WHORL_OK)
        CHECK(bytes == 77);
    digest(a, &bytes, 8);
    return status;
}

static whorl_status case_space_string_trace(attempt *a)
{
    whorl_space_desc desc = space_desc(3);
    whorl_host own = whorl_host_default();
    whorl_space *space = NULL;
    whorl_status status;
    double trace = 0.5;
    CHECK_STATUS(whorl_space_make(&own, &desc, &space), WHORL_OK, &own);
    status = CALL(whorl_space_string_trace(a->host, space, 0x35, &trace));
    call_end();
    if (status != WHORL_OK)
        CHECK(trace == 0.5);
    digest(a, &trace, 8);
    whorl_space_free(&own, space);
    return status;
}

/* ---- maps and vectors -------------------------------------------------------------------------------------------- */

enum { LENGTH = 3000 };

/* A host's own map: twice the vector, with scratch that it takes and a poll. */
static whorl_status twice(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    whorl_block block;
    uint64_t i;
    whorl_status status = whorl_block_take(host, 100, &block);
    if (status != WHORL_OK)
        return status;
    status = whorl_poll(host);
    for (i = 0; status == WHORL_OK && i < map->rows * (uint64_t)count; i++)
        ((double *)y)[i] = 2.0 * ((const double *)x)[i];
    whorl_block_give(host, &block);
    return status;
}
static uint64_t twice_scratch(const whorl_host *host, const whorl_map *map, int32_t count)
{
    (void)host;
    (void)map;
    (void)count;
    return whorl_block_bytes(100);
}
static whorl_map some_map(void)
{
    whorl_map map = whorl_map_default();
    map.rows = map.columns = LENGTH;
    map.element = WHORL_REAL_DOUBLE;
    map.hermitian = 1;
    map.apply = twice;
    map.scratch = twice_scratch;
    return map;
}

enum { MAP_APPLY, MAP_STEP, MAP_RESIDUAL, DOT, NORM, ADD, BLEND, SCALE, COPY, RANDOM, PROJECT, COMBINE };
static whorl_status vector_call(attempt *a, int which)
{
    whorl_map map = some_map();
    double *x = judge_reals(2 * LENGTH), *y = judge_reals(4 * LENGTH), q[16], norm = 0.25;
    whorl_complex dots[4], two = {2.0, 0.0};
    whorl_status status = WHORL_OK;
    uint64_t i;
    for (i = 0; i < 2 * LENGTH; i++)
        x[i] = whorl_random_normal(3, 0, i);
    for (i = 0; i < 4 * LENGTH; i++)
        y[i] = whorl_random_normal(3, 1, i);
    for (i = 0; i < 16; i++)
        q[i] = whorl_random_normal(3, 2, i);
    for (i = 0; i < 4; i++)
        dots[i] = two;
    switch (which) {
    case MAP_APPLY:
        a->bytes = whorl_map_scratch(a->host, &map, 2);
        status = CALL(whorl_map_apply(a->host, &map, x, y, 2));
        break;
    case MAP_STEP:
        a->bytes = whorl_map_scratch(a->host, &map, 0);
        status = CALL(whorl_map_step(a->host, &map, 0.5, x, 0.25, y, dots));
        break;
    case MAP_RESIDUAL:
        a->bytes = whorl_map_scratch(a->host, &map, 1);
        status = CALL(whorl_map_residual(a->host, &map, 1.5, x, y, &norm));
        break;
    case DOT: status = CALL(whorl_vector_dot(a->host, WHORL_COMPLEX_DOUBLE, LENGTH, x, y, dots)); break;
    case NORM: status = CALL(whorl_vector_norm(a->host, WHORL_COMPLEX_DOUBLE, LENGTH, x, &norm)); break;
    case ADD: status = CALL(whorl_vector_add(a->host, WHORL_REAL_DOUBLE, LENGTH, two, x, y)); break;
    case BLEND: status = CALL(whorl_vector_blend(a->host, WHORL_REAL_DOUBLE, LENGTH, 2.0, x, 0.5, y, dots)); break;
    case SCALE: status = CALL(whorl_vector_scale(a->host, WHORL_REAL_DOUBLE, LENGTH, 1.5, y)); break;
    case COPY: status = CALL(whorl_vector_copy(a->host, WHORL_REAL_DOUBLE, LENGTH, x, y)); break;
    case RANDOM: status = CALL(whorl_vector_random(a->host, WHORL_REAL_DOUBLE, LENGTH, 5, 6, y)); break;
    case PROJECT: status = CALL(whorl_vector_project(a->host, WHORL_REAL_DOUBLE, LENGTH, 2, x, LENGTH, y, dots)); break;
    default: status = CALL(whorl_vector_combine(a->host, WHORL_REAL_DOUBLE, LENGTH, 4, 3, y, LENGTH, q)); break;
    }
    call_end();
    if (status != WHORL_OK && which != PROJECT)
        CHECK(norm == 0.25 && dots[0].re == 2.0 && dots[1].re == 2.0);
    digest(a, x, 2 * LENGTH * 8);
    digest(a, y, 4 * LENGTH * 8);
    digest(a, dots, sizeof dots);
    digest(a, &norm, 8);
    free(x);
    free(y);
    return status;
}
static whorl_status case_map_apply(attempt *a) { return vector_call(a, MAP_APPLY); }
static whorl_status case_map_step(attempt *a) { return vector_call(a, MAP_STEP); }
static whorl_status case_map_residual(attempt *a) { return vector_call(a, MAP_RESIDUAL); }
static whorl_status case_vector_dot(attempt *a) { return vector_call(a, DOT); }
static whorl_status case_vector_norm(attempt *a) { return vector_call(a, NORM); }
static whorl_status case_vector_add(attempt *a) { return vector_call(a, ADD); }
static whorl_status case_vector_blend(attempt *a) { return vector_call(a, BLEND); }
static whorl_status case_vector_scale(attempt *a) { return vector_call(a, SCALE); }
static whorl_status case_vector_copy(attempt *a) { return vector_call(a, COPY); }
static whorl_status case_vector_random(attempt *a) { return vector_call(a, RANDOM); }
static whorl_status case_vector_project(attempt *a) { return vector_call(a, PROJECT); }
static whorl_status case_vector_combine(attempt *a) { return vector_call(a, COMBINE); }

/* ---- dense ------------------------------------------------------------------------------------------------------- */

static whorl_status dense_call(attempt *a, int is_complex, int vectors)
{
    enum { N = 30 };
    double m[2 * N * N], values[N];
    uint64_t i, size = (is_complex ? 2 : 1) * N * N;
    whorl_status status;
    for (i = 0; i < size; i++)
        m[i] = whorl_random_normal(4, 0, i);
    mark(values, sizeof values);
    if (is_complex) {
        a->bytes = whorl_dense_hermitian_bytes(N, vectors);
        status = CALL(whorl_dense_hermitian(a->host, N, m, values, vectors));
    } else {
        a->bytes = whorl_dense_symmetric_bytes(N, vectors);
        status = CALL(whorl_dense_symmetric(a->host, N, m, values, vectors));
    }
    call_end();
    if (refused(status)) {
        CHECK(is_marked(values, sizeof values));
        for (i = 0; i < size && m[i] == whorl_random_normal(4, 0, i); i++) {
        }
        CHECK(i == size);
    }
    if (status == WHORL_OK) {
        digest(a, values, sizeof values);
        if (vectors)
            digest(a, m, size * 8);
    }
    return status;
}
static whorl_status case_dense_symmetric(attempt *a) { return dense_call(a, 0, 0); }
static whorl_status case_dense_symmetric_vectors(attempt *a) { return dense_call(a, 0, 1); }
static whorl_status case_dense_hermitian(attempt *a) { return dense_call(a, 1, 0); }
static whorl_status case_dense_hermitian_vectors(attempt *a) { return dense_call(a, 1, 1); }
static whorl_status case_dense_tridiagonal(attempt *a)
{
    double d[20], e[20];
    uint64_t i;
    whorl_status status;
    for (i = 0; i < 20; i++) {
        d[i] = whorl_random_normal(4, 1, i);
        e[i] = whorl_random_normal(4, 2, i);
    }
    status = CALL(whorl_dense_tridiagonal(a->host, 20, d, e, NULL, 0));
    call_end();
    if (status == WHORL_OK)
        digest(a, d, sizeof d);
    return status;
}

/* ---- lattices ---------------------------------------------------------------------------------------------------- */

static whorl_status case_lattice_make(attempt *a)
{
    whorl_lattice_desc desc = whorl_lattice_box(WHORL_LATTICE_KAGOME, 2, 3, 1);
    whorl_lattice *lattice = (whorl_lattice *)a;
    whorl_status status;
    double position[3];
    int32_t k;
    a->bytes = whorl_lattice_bytes();
    status = CALL(whorl_lattice_make(a->host, &desc, &lattice));
    call_end();
    if (status != WHORL_OK)
        CHECK(lattice == NULL);
    for (k = 0; status == WHORL_OK && k < whorl_lattice_sites(lattice); k++) {
        whorl_lattice_position(lattice, k, position);
        digest(a, position, sizeof position);
    }
    whorl_lattice_free(a->host, lattice);
    return status;
}

enum { DISTANCE, BONDS, BOND_COUNT, TRANSLATION, SYMMETRIES, SYMMETRY_COUNT, SYMMETRIES_BYTES };
static whorl_status lattice_call(attempt *a, int which)
{
    whorl_lattice_desc desc = whorl_lattice_box(WHORL_LATTICE_SQUARE, 4, 4, 1);
    whorl_lattice *lattice = NULL;
    whorl_host own = whorl_host_default();
    whorl_status status = WHORL_OK;
    static whorl_bond bonds[200];
    static int32_t permutations[16 * 400];
    uint64_t count = 77;
    double distance = 0.25;
    CHECK_STATUS(whorl_lattice_make(&own, &desc, &lattice), WHORL_OK, &own);
    mark(bonds, sizeof bonds);
    mark(permutations, sizeof permutations);
    switch (which) {
    case DISTANCE: status = CALL(whorl_lattice_distance(a->host, lattice, 40, &distance)); break;
    case BONDS: status = CALL(whorl_lattice_bonds(a->host, lattice, 9, 0, bonds, 200, &count)); break;
    case BOND_COUNT: status = CALL(whorl_lattice_bond_count(a->host, lattice, 9, 0, &count)); break;
    case TRANSLATION: status = CALL(whorl_lattice_translation(a->host, lattice, 1, permutations)); break;
    case SYMMETRIES:
        CHECK_STATUS(whorl_lattice_symmetries_bytes(&own, lattice, &a->bytes), WHORL_OK, &own);
        status = CALL(whorl_lattice_symmetries(a->host, lattice, permutations, NULL, 400, &count));
        break;
    case SYMMETRY_COUNT:
        CHECK_STATUS(whorl_lattice_symmetries_bytes(&own, lattice, &a->bytes), WHORL_OK, &own);
        status = CALL(whorl_lattice_symmetry_count(a->host, lattice, &count));
        break;
    default: status = CALL(whorl_lattice_symmetries_bytes(a->host, lattice, &count)); break;
    }
    call_end();
    if (status != WHORL_OK)
        CHECK(count == 77 && distance == 0.25);
    if (refused(status))
        CHECK(is_marked(bonds, sizeof bonds) && is_marked(permutations, sizeof permutations));
    digest(a, &count, 8);
    digest(a, &distance, 8);
    digest(a, permutations, sizeof permutations);
    if (which == BONDS && status == WHORL_OK)
        digest(a, bonds, count * sizeof *bonds);
    whorl_lattice_free(&own, lattice);
    return status;
}
static whorl_status case_lattice_distance(attempt *a) { return lattice_call(a, DISTANCE); }
static whorl_status case_lattice_bonds(attempt *a) { return lattice_call(a, BONDS); }
static whorl_status case_lattice_bond_count(attempt *a) { return lattice_call(a, BOND_COUNT); }
static whorl_status case_lattice_translation(attempt *a) { return lattice_call(a, TRANSLATION); }
static whorl_status case_lattice_symmetries(attempt *a) { return lattice_call(a, SYMMETRIES); }
static whorl_status case_lattice_symmetry_count(attempt *a) { return lattice_call(a, SYMMETRY_COUNT); }
static whorl_status case_lattice_symmetries_bytes(attempt *a) { return lattice_call(a, SYMMETRIES_BYTES); }

/* ---- text -------------------------------------------------------------------------------------------------------- */

static const char expression_text[] =
    "J*(S[0].S[1] + S[1].S[2] + S[2].S[0])^2 - h/(1 + J)*(Sz[0] + Sz[1]*X[2]) + 0.25*Y[1]";
enum { EXPRESSION_LENGTH = sizeof expression_text - 1 };
static const char *const parameters[2] = {"J", "h"};
static const double settings[2] = {1.25, 0.75};

enum { SUM_WRITE, SUM_READ, SUM_READ_BYTES };
static whorl_status text_call(attempt *a, int which)
{
    static const whorl_name_value names[2] = {{"J", 1.25}, {"h", 0.75}};
    whorl_term terms[64];
    whorl_sum sum;
    whorl_host own = whorl_host_default();
    whorl_status status;
    char text[4096];
    uint64_t number = 77;
    if (which == SUM_WRITE)
        CHECK_STATUS(whorl_sum_read(&own, expression_text, EXPRESSION_LENGTH, 3, names, 2, terms, 64, &sum),
                     WHORL_OK, &own);
    else {
        mark(terms, sizeof terms);
        mark(&sum, sizeof sum);
    }
    mark(text, sizeof text);
    if (which == SUM_WRITE) {
        status = CALL(whorl_sum_write(a->host, &sum, text, sizeof text, &number));
    } else if (which == SUM_READ) {
        CHECK_STATUS(whorl_sum_read_bytes(&own, expression_text, EXPRESSION_LENGTH, 3, names, 2, &a->bytes),
                     WHORL_OK, &own);
        status = CALL(whorl_sum_read(a->host, expression_text, EXPRESSION_LENGTH, 3, names, 2, terms, 64, &sum));
    } else {
        status = CALL(whorl_sum_read_bytes(a->host, expression_text, EXPRESSION_LENGTH, 3, names, 2, &number));
    }
    call_end();
    if (status != WHORL_OK) {
        CHECK(number == 77);
        if (which == SUM_READ)
            CHECK(is_marked(&sum, sizeof sum));
        if (refused(status) && which == SUM_READ)
            CHECK(is_marked(terms, sizeof terms));
        return status;
    }
    digest(a, text, sizeof text);
    digest(a, &number, 8);
    if (which == SUM_READ_BYTES) { /* it reads in order to tell, and takes no more than it tells */
        a->bytes = number;
        a->bound = 2;
    }
    if (which == SUM_READ)
        digest(a, sum.terms, sum.count * sizeof(whorl_term));
    return status;
}
static whorl_status case_sum_write(attempt *a) { return text_call(a, SUM_WRITE); }
static whorl_status case_sum_read(attempt *a) { return text_call(a, SUM_READ); }
static whorl_status case_sum_read_bytes(attempt *a) { return text_call(a, SUM_READ_BYTES); }

static void digest_expression(attempt *a, const whorl_expression *expression)
{
    uint64_t k;
    for (k = 0; k < whorl_expression_count(expression); k++) {
        const whorl_sum *sum = whorl_expression_sums(expression) + k;
        digest(a, sum->terms, sum->count * sizeof(whorl_term));
    }
}

static whorl_status case_expression_read(attempt *a)
{
    whorl_host own = whorl_host_default();
    whorl_expression *expression = (whorl_expression *)&own;
    whorl_status status;
    CHECK_STATUS(whorl_expression_bytes(&own, expression_text, EXPRESSION_LENGTH, 3, parameters, 2, &a->bytes),
                 WHORL_OK, &own);
    status = CALL(whorl_expression_read(a->host, expression_text, EXPRESSION_LENGTH, 3, parameters, 2,
                                        &expression));
    call_end();
    if (status != WHORL_OK)
        CHECK(expression == NULL);
    else
        digest_expression(a, expression);
    whorl_expression_free(a->host, expression);
    return status;
}

static whorl_status case_expression_bytes(attempt *a)
{
    uint64_t bytes = 77;
    whorl_status status = CALL(whorl_expression_bytes(a->host, expression_text, EXPRESSION_LENGTH, 3,
                                                      parameters, 2, &bytes));
    call_end();
    if (status != WHORL_OK) {
        CHECK(bytes == 77);
    } else { /* it reads in order to tell, and takes no more than it tells */
        a->bytes = bytes;
        a->bound = 2;
    }
    digest(a, &bytes, 8);
    return status;
}

enum { WEIGHTS, EXPRESSION_SUM, WEIGHT_WRITE };
static whorl_status expression_call(attempt *a, int which)
{
    whorl_host own = whorl_host_default();
    whorl_expression *expression = NULL;
    whorl_complex weights[16];
    whorl_term terms[64];
    whorl_sum sum;
    whorl_status status;
    char text[256];
    uint64_t used = 77;
    CHECK_STATUS(whorl_expression_read(&own, expression_text, EXPRESSION_LENGTH, 3, parameters, 2, &expression),
                 WHORL_OK, &own);
    mark(weights, sizeof weights);
    mark(terms, sizeof terms);
    mark(&sum, sizeof sum);
    mark(text, sizeof text);
    if (which == WEIGHTS) {
        a->bytes = whorl_expression_weights_bytes(expression);
        status = CALL(whorl_expression_weights(a->host, expression, settings, weights));
    } else if (which == EXPRESSION_SUM) {
        a->bytes = whorl_expression_weights_bytes(expression) +
                   whorl_block_bytes(whorl_expression_count(expression) * sizeof(whorl_complex));
        status = CALL(whorl_expression_sum(a->host, expression, settings, terms, 64, &sum));
    } else {
        status = CALL(whorl_expression_weight_write(a->host, expression, 1, text, sizeof text, &used));
    }
    call_end();
    if (status != WHORL_OK)
        CHECK(is_marked(&sum, sizeof sum) && is_marked(weights, sizeof weights) && used == 77);
    if (refused(status))
        CHECK(is_marked(terms, sizeof terms) && is_marked(text, sizeof text));
    digest(a, weights, sizeof weights);
    digest(a, text, sizeof text);
    if (status == WHORL_OK && which == EXPRESSION_SUM)
        digest(a, sum.terms, sum.count * sizeof(whorl_term));
    whorl_expression_free(&own, expression);
    return status;
}
static whorl_status case_expression_weights(attempt *a) { return expression_call(a, WEIGHTS); }
static whorl_status case_expression_sum(attempt *a) { return expression_call(a, EXPRESSION_SUM); }
static whorl_status case_expression_weight_write(attempt *a) { return expression_call(a, WEIGHT_WRITE); }

/* ---- models ------------------------------------------------------------------------------------------------------ */

static const char model_text[] =
    "title an invented ring\n"
    "cluster square by (2, 0) (0, 3)\n"
    "let J = 1.5\n"
    "let D = 0.2*J/(1 + J)\n"
    "let g = (2, 0, 0; 0, 2.1, 0; 0, 0, 2.2)\n"
    "pairs near: shell 1\n"
    "pairs table with K: 0-1 0.5 2-4 0.25\n"
    "draw dJ over near normal 0 0.1 seed 4\n"
    "sum over near: (J + dJ)*S[i].S[j] + (0, 0, D).(S[i] x S[j])\n"
    "sum over table: K*Z[i]*Z[j]\n"
    "sum over spins: 0.3*(0, 0, 1).g.S[i]\n"
    "add 0.125*X[0]*X[1]\n";
enum { MODEL_LENGTH = sizeof model_text - 1 };

static void digest_model(attempt *a, const whorl_model *model)
{
    uint64_t k;
    for (k = 0; k < whorl_model_sum_count(model); k++) {
        const whorl_sum *sum = whorl_model_sums(model) + k;
        digest(a, sum->terms, sum->count * sizeof(whorl_term));
    }
    digest(a, whorl_model_title(model), strlen(whorl_model_title(model)));
}

static whorl_status case_model_read(attempt *a)
{
    whorl_host own = whorl_host_default();
    whorl_model *model = (whorl_model *)&own;
    whorl_status status;
    CHECK_STATUS(whorl_model_bytes(&own, model_text, MODEL_LENGTH, 3, &a->bytes), WHORL_OK, &own);
    status = CALL(whorl_model_read(a->host, model_text, MODEL_LENGTH, 3, &model));
    call_end();
    if (status != WHORL_OK)
        CHECK(model == NULL);
    else
        digest_model(a, model);
    whorl_model_free(a->host, model);
    return status;
}

static whorl_status case_model_bytes(attempt *a)
{
    uint64_t bytes = 77;
    whorl_status status = CALL(whorl_model_bytes(a->host, model_text, MODEL_LENGTH, 3, &bytes));
    call_end();
    if (status != WHORL_OK) {
        CHECK(bytes == 77);
    } else { /* it reads in order to tell, and takes no more than it tells */
        a->bytes = bytes;
        a->bound = 2;
    }
    digest(a, &bytes, 8);
    return status;
}

enum { MODEL_VALUES, MODEL_WEIGHTS, MODEL_SUM, MODEL_WEIGHT_WRITE };
static whorl_status model_call(attempt *a, int which)
{
    whorl_host own = whorl_host_default();
    whorl_model *model = NULL;
    whorl_setting set = {0, 2.5};
    whorl_complex weights[64];
    whorl_term terms[256];
    whorl_sum sum;
    whorl_status status;
    char text[256];
    double values[8], given[8];
    uint64_t used = 77, count;
    CHECK_STATUS(whorl_model_read(&own, model_text, MODEL_LENGTH, 3, &model), WHORL_OK, &own);
    count = whorl_model_sum_count(model);
    CHECK(count <= 64 && whorl_model_term_count(model) <= 256 && whorl_model_parameter_count(model) <= 8);
    CHECK_STATUS(whorl_model_values(&own, model, NULL, 0, given), WHORL_OK, &own);
    mark(values, sizeof values);
    mark(weights, sizeof weights);
    mark(terms, sizeof terms);
    mark(&sum, sizeof sum);
    mark(text, sizeof text);
    switch (which) {
    case MODEL_VALUES:
        a->bytes = whorl_model_values_bytes(model);
        status = CALL(whorl_model_values(a->host, model, &set, 1, values));
        break;
    case MODEL_WEIGHTS:
        a->bytes = whorl_model_values_bytes(model);
        status = CALL(whorl_model_weights(a->host, model, given, weights));
        break;
    case MODEL_SUM:
        a->bytes = whorl_model_values_bytes(model) + whorl_block_bytes(count * sizeof(whorl_complex));
        status = CALL(whorl_model_sum(a->host, model, given, terms, 256, &sum));
        break;
    default: status = CALL(whorl_model_weight_write(a->host, model, 1, text, sizeof text, &used)); break;
    }
    call_end();
    if (status != WHORL_OK)
        CHECK(is_marked(values, sizeof values) && is_marked(weights, sizeof weights) && is_marked(&sum, sizeof sum) &&
              used == 77);
    if (refused(status))
        CHECK(is_marked(terms, sizeof terms) && is_marked(text, sizeof text));
    digest(a, values, sizeof values);
    digest(a, weights, sizeof weights);
    digest(a, text, sizeof text);
    if (status == WHORL_OK && which == MODEL_SUM)
        digest(a, sum.terms, sum.count * sizeof(whorl_term));
    whorl_model_free(&own, model);
    return status;
}
static whorl_status case_model_values(attempt *a) { return model_call(a, MODEL_VALUES); }
static whorl_status case_model_weights(attempt *a) { return model_call(a, MODEL_WEIGHTS); }
static whorl_status case_model_sum(attempt *a) { return model_call(a, MODEL_SUM); }
static whorl_status case_model_weight_write(attempt *a) { return model_call(a, MODEL_WEIGHT_WRITE); }

/* ---- actions ----------------------------------------------------------------------------------------------------- */

enum { CHAIN = 10, CHAIN_TERMS = 6 * CHAIN };

/* A Heisenberg ring and a field along z: two sums, so that weights can change. */
static void ring_sums(whorl_term *terms, whorl_sum sums[2])
{
    whorl_host own = whorl_host_default();
    const double up[3] = {0.0, 0.0, 1.0};
    uint64_t used = 0, field = 0;
    int32_t i;
    for (i = 0; i < CHAIN; i++)
        used += whorl_terms_exchange(terms + used, i, (i + 1) % CHAIN, 1.0 + 0.1 * i);
    for (i = 0; i < CHAIN; i++)
        field += whorl_terms_field(terms + used + field, i, up, NULL);
    CHECK_STATUS(whorl_sum_from_terms(&own, CHAIN, terms + used, field, sums + 1), WHORL_OK, &own);
    CHECK_STATUS(whorl_sum_from_terms(&own, CHAIN, terms, used, sums), WHORL_OK, &own);
}

/* Spaces of ten sites: all, five down, no two neighbours down. */
static whorl_space *ring_space(whorl_host *own, int which)
{
    whorl_space_desc desc = whorl_space_default();
    whorl_space *space = NULL;
    static const whorl_down_number half = {0, CHAIN / 2};
    desc.sites = CHAIN;
    if (which == 1) {
        desc.kind = WHORL_SPACE_DOWN;
        desc.numbers = &half;
        desc.number_count = 1;
    } else if (which == 2) {
        desc.kind = WHORL_SPACE_BLOCKADE;
        desc.pairs = ring_pairs;
        desc.pair_count = 9;
    }
    CHECK_STATUS(whorl_space_make(own, &desc, &space), WHORL_OK, own);
    return space;
}

enum { MAKE, BYTES, REWEIGHT, APPLY, STEP };
static whorl_status action_call(attempt *a, int which, int space_kind, whorl_element element)
{
    whorl_host own = whorl_host_default();
    whorl_term terms[CHAIN_TERMS];
    whorl_sum sums[2];
    whorl_space *space = ring_space(&own, space_kind);
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = (whorl_action *)&own;
    whorl_complex weights[2] = {{0.5, 0.0}, {2.0, 0.0}}, dots[2];
    whorl_host *maker = which == MAKE ? a->host : &own;
    whorl_status status;
    uint64_t n = whorl_space_count(space), bytes = 77, i;
    double *x = judge_reals(4 * n), *y = judge_reals(4 * n);
    whorl_map map;
    ring_sums(terms, sums);
    desc.sums = sums;
    desc.sum_count = 2;
    desc.source = space;
    desc.element = element;
    desc.mode = space_kind == 2 ? WHORL_ACTION_PROJECT : WHORL_ACTION_STRICT;
    for (i = 0; i < 4 * n; i++)
        x[i] = whorl_random_normal(8, 1, i);
    mark(dots, sizeof dots);
    if (which == BYTES) {
        status = CALL(whorl_action_bytes(a->host, &desc, &bytes));
        call_end();
        if (status != WHORL_OK)
            CHECK(bytes == 77);
        action = NULL;
        digest(a, &bytes, 8);
    } else {
        CHECK_STATUS(whorl_action_bytes(&own, &desc, &bytes), WHORL_OK, &own);
        if (which == MAKE)
            call_begin();
        status = whorl_action_make(maker, &desc, &action);
        call_end();
        if (status != WHORL_OK)
            CHECK(action == NULL);
    }
    if (which == MAKE)
        a->bytes = bytes;
    if (which == REWEIGHT) {
        status = CALL(whorl_action_reweight(a->host, action, weights));
        call_end();
    }
    if (which == APPLY || which == STEP) {
        map = whorl_action_map(action);
        a->bytes = whorl_map_scratch(a->host, &map, which == STEP ? 0 : 2);
        if (which == STEP)
            status = CALL(whorl_map_step(a->host, &map, 0.5, x, -0.25, y, dots));
        else
            status = CALL(whorl_map_apply(a->host, &map, x, y, 2));
        call_end();
        if (status != WHORL_OK)
            CHECK(is_marked(dots, sizeof dots));
        if (refused(status))
            for (i = 0; i < 4 * n; i++)
                CHECK(y[i] == 0.0);
    }
    if (action != NULL && (status == WHORL_OK || which == REWEIGHT)) { /* what it does now */
        double *image = judge_reals(4 * n);
        map = whorl_action_map(action);
        CHECK_STATUS(whorl_map_apply(&own, &map, x, image, 2), WHORL_OK, &own);
        if (status == WHORL_OK) {
            digest(a, image, 4 * n * 8);
            digest(a, y, 4 * n * 8);
            digest(a, dots, sizeof dots);
        }
        free(image);
    }
    whorl_action_free(maker, action);
    whorl_space_free(&own, space);
    free(x);
    free(y);
    return status;
}
static whorl_status case_action_all(attempt *a) { return action_call(a, MAKE, 0, WHORL_ELEMENT_DEFAULT); }
static whorl_status case_action_down(attempt *a) { return action_call(a, MAKE, 1, WHORL_COMPLEX_DOUBLE); }
static whorl_status case_action_blockade(attempt *a) { return action_call(a, MAKE, 2, WHORL_REAL_DOUBLE); }
static whorl_status case_action_bytes(attempt *a) { return action_call(a, BYTES, 1, WHORL_REAL_DOUBLE); }
static whorl_status case_action_reweight(attempt *a) { return action_call(a, REWEIGHT, 1, WHORL_REAL_DOUBLE); }
static whorl_status case_action_reweight_list(attempt *a) { return action_call(a, REWEIGHT, 2, WHORL_REAL_DOUBLE); }
static whorl_status case_action_apply_all(attempt *a) { return action_call(a, APPLY, 0, WHORL_COMPLEX_DOUBLE); }
static whorl_status case_action_apply_down(attempt *a) { return action_call(a, APPLY, 1, WHORL_REAL_DOUBLE); }
static whorl_status case_action_apply_float(attempt *a) { return action_call(a, APPLY, 1, WHORL_REAL_FLOAT); }
static whorl_status case_action_apply_blockade(attempt *a) { return action_call(a, APPLY, 2, WHORL_COMPLEX_DOUBLE); }
static whorl_status case_action_step_all(attempt *a) { return action_call(a, STEP, 0, WHORL_REAL_DOUBLE); }
static whorl_status case_action_step_down(attempt *a) { return action_call(a, STEP, 1, WHORL_COMPLEX_DOUBLE); }

/* ---- Lanczos ----------------------------------------------------------------------------------------------------- */

enum { SMALL = 6 };

/* A ring of six sites, three down: 20 states. */
typedef struct small_ring {
    whorl_term terms[6 * SMALL];
    whorl_sum sum;
    whorl_space *space;
    whorl_action *action;
    whorl_map map;
} small_ring;

static void ring_make(whorl_host *own, small_ring *ring)
{
    whorl_action_desc desc = whorl_action_default();
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < SMALL; i++)
        used += whorl_terms_exchange(ring->terms + used, i, (i + 1) % SMALL, 1.0 + 0.125 * i);
    CHECK_STATUS(whorl_sum_from_terms(own, SMALL, ring->terms, used, &ring->sum), WHORL_OK, own);
    CHECK_STATUS(whorl_space_make_down(own, SMALL, SMALL / 2, &ring->space), WHORL_OK, own);
    desc.sums = &ring->sum;
    desc.sum_count = 1;
    desc.source = ring->space;
    CHECK_STATUS(whorl_action_make(own, &desc, &ring->action), WHORL_OK, own);
    ring->map = whorl_action_map(ring->action);
}

static void ring_free(whorl_host *own, small_ring *ring)
{
    whorl_action_free(own, ring->action);
    whorl_space_free(own, ring->space);
}

static uint64_t lanczos_digest(const whorl_lanczos *solver, uint64_t n)
{
    attempt a;
    int32_t k;
    a.digest = 1;
    for (k = 0; k < whorl_lanczos_count(solver); k++) {
        double value = whorl_lanczos_value(solver, k), residual = whorl_lanczos_residual(solver, k);
        digest(&a, &value, 8);
        digest(&a, &residual, 8);
        digest(&a, whorl_lanczos_vector(solver, k), n * 8);
    }
    return a.digest;
}

enum { SOLVER_MAKE, SOLVE, SOLVE_LEAN, ADVANCE, SOLVER_BYTES, RESUME };
static whorl_status lanczos_call(attempt *a, int which)
{
    whorl_host own = whorl_host_default();
    small_ring ring;
    whorl_lanczos_desc want = whorl_lanczos_default();
    whorl_lanczos *solver = (whorl_lanczos *)&own, *saved = NULL;
    whorl_host *maker = which == ADVANCE ? &own : a->host;
    whorl_status status = WHORL_OK;
    uint64_t bytes = 77, state_bytes = 0, result = 0;
    static uint64_t good[6]; /* of the first good run */
    ring_make(&own, &ring);
    want.wanted = which == SOLVE_LEAN ? 1 : 2;
    want.lean = which == SOLVE_LEAN;
    want.window = which == SOLVE_LEAN ? 0 : 8;
    if (which == SOLVER_BYTES) {
        status = CALL(whorl_lanczos_bytes(a->host, &ring.map, &want, &bytes));
        call_end();
        if (status != WHORL_OK)
            CHECK(bytes == 77);
        digest(a, &bytes, 8);
        ring_free(&own, &ring);
        return status;
    }
    CHECK_STATUS(whorl_lanczos_bytes(&own, &ring.map, &want, &bytes), WHORL_OK, &own);
    if (which == RESUME) { /* half-way, then from its state */
        const void *state;
        CHECK_STATUS(whorl_lanczos_make(&own, &ring.map, &want, &saved), WHORL_OK, &own);
        CHECK_STATUS(whorl_lanczos_advance(&own, &ring.map, saved, 6), WHORL_UNFINISHED, &own);
        state = whorl_lanczos_state(saved, &state_bytes);
        status = CALL(whorl_lanczos_resume(a->host, &ring.map, state, state_bytes, &solver));
    } else {
        if (which != ADVANCE)
            call_begin();
        status = whorl_lanczos_make(maker, &ring.map, &want, &solver);
    }
    if (status != WHORL_OK)
        CHECK(solver == NULL);
    if (status == WHORL_OK && which != SOLVER_MAKE) {
        call_begin();
        status = whorl_lanczos_advance(a->host, &ring.map, solver, 0);
        call_end();
        if (status == WHORL_CANCELLED) { /* goes on to the same bits */
            whorl_poll_function poll = a->host->poll;
            a->host->poll = NULL;
            CHECK_STATUS(whorl_lanczos_advance(a->host, &ring.map, solver, 0), WHORL_OK, a->host);
            a->host->poll = poll;
            CHECK(lanczos_digest(solver, 20) == good[which]);
            a->host->reason.status = WHORL_CANCELLED;
        }
    }
    call_end();
    if (status == WHORL_OK) {
        result = lanczos_digest(solver, 20);
        if (good[which] == 0)
            good[which] = result;
        digest(a, &result, 8);
    }
    if (which == RESUME && status == WHORL_OK) {
        CHECK_STATUS(whorl_lanczos_advance(&own, &ring.map, saved, 0), WHORL_OK, &own);
        CHECK(lanczos_digest(saved, 20) == result);
    }
    a->bytes = bytes; /* of the whole solve */
    a->bound = which == SOLVER_MAKE || which == ADVANCE ? 2 : 0;
    a->adapts = 1;
    whorl_lanczos_free(maker, solver);
    whorl_lanczos_free(&own, saved);
    ring_free(&own, &ring);
    return status;
}
static whorl_status case_lanczos_make(attempt *a) { return lanczos_call(a, SOLVER_MAKE); }
static whorl_status case_lanczos_solve(attempt *a) { return lanczos_call(a, SOLVE); }
static whorl_status case_lanczos_lean(attempt *a) { return lanczos_call(a, SOLVE_LEAN); }
static whorl_status case_lanczos_advance(attempt *a) { return lanczos_call(a, ADVANCE); }
static whorl_status case_lanczos_bytes(attempt *a) { return lanczos_call(a, SOLVER_BYTES); }
static whorl_status case_lanczos_resume(attempt *a) { return lanczos_call(a, RESUME); }

/* ---- levels ------------------------------------------------------------------------------------------------------ */

static void digest_levels(attempt *a, const whorl_levels *levels)
{
    uint64_t sector, k;
    for (k = 0; k < whorl_levels_count(levels); k++) {
        whorl_level level = whorl_levels_at(levels, k);
        digest(a, &level.energy, 8);
        digest(a, &level.residual, 8);
        digest(a, &level.multiplicity, 8);
        digest(a, &level.twice_spin, 4);
        digest(a, level.sector, strlen(level.sector));
    }
    for (sector = 0; sector < whorl_levels_sector_count(levels); sector++)
        for (k = 0; whorl_levels_vector(levels, sector, k) != NULL; k++) {
            uint64_t bytes = whorl_element_bytes(whorl_levels_vector_element(levels, sector));
            digest(a, whorl_levels_vector(levels, sector, k),
                   bytes * whorl_space_count(whorl_levels_space(levels, sector)));
        }
}

enum { LEVELS_WHOLE, LEVELS_LANCZOS, LEVELS_VECTORS, LEVELS_COMPLEX, LEVELS_WEIGHTED, LEVELS_BYTES, LEVELS_HOLD };
static whorl_status levels_call(attempt *a, int which)
{
    whorl_host own = whorl_host_default();
    small_ring ring;
    whorl_levels_desc want = whorl_levels_default();
    whorl_levels *levels = (whorl_levels *)&own;
    whorl_complex weight = {0.5, 0.0};
    whorl_status status;
    uint64_t bytes = 77;
    double worst = 0.25;
    ring_make(&own, &ring);
    want.wanted = 2;
    want.whole = which == LEVELS_WHOLE;
    if (which == LEVELS_LANCZOS)
        want.dense = 8;
    want.vectors = which == LEVELS_VECTORS;
    if (which == LEVELS_COMPLEX)
        want.element = WHORL_COMPLEX_DOUBLE;
    if (which == LEVELS_BYTES) {
        status = CALL(whorl_levels_bytes(a->host, &ring.sum, &want, &bytes));
        call_end();
        if (status != WHORL_OK) {
            CHECK(bytes == 77);
        } else {
            a->bytes = bytes;
            a->bound = 2;
        }
        digest(a, &bytes, 8);
        ring_free(&own, &ring);
        return status;
    }
    if (which == LEVELS_HOLD) {
        CHECK_STATUS(whorl_levels_make(&own, &ring.sum, &want, &levels), WHORL_OK, &own);
        CHECK_STATUS(whorl_levels_bytes(&own, &ring.sum, &want, &a->bytes), WHORL_OK, &own);
        a->bound = 2;
        status = CALL(whorl_levels_hold_against(a->host, levels, &ring.sum, &worst));
        call_end();
        if (status != WHORL_OK)
            CHECK(worst == 0.25);
        digest(a, &worst, 8);
        whorl_levels_free(&own, levels);
        ring_free(&own, &ring);
        return status;
    }
    if (which == LEVELS_WEIGHTED) {
        CHECK_STATUS(whorl_levels_bytes_weighted(&own, &ring.sum, &weight, 1, &want, &a->bytes), WHORL_OK, &own);
        status = CALL(whorl_levels_make_weighted(a->host, &ring.sum, &weight, 1, &want, &levels));
    } else {
        CHECK_STATUS(whorl_levels_bytes(&own, &ring.sum, &want, &a->bytes), WHORL_OK, &own);
        status = CALL(whorl_levels_make(a->host, &ring.sum, &want, &levels));
    }
    call_end();
    a->bound = 1;
    a->adapts = 1;
    if (status != WHORL_OK)
        CHECK(levels == NULL);
    else
        digest_levels(a, levels);
    whorl_levels_free(a->host, levels);
    ring_free(&own, &ring);
    return status;
}
static whorl_status case_levels_whole(attempt *a) { return levels_call(a, LEVELS_WHOLE); }
static whorl_status case_levels_lanczos(attempt *a) { return levels_call(a, LEVELS_LANCZOS); }
static whorl_status case_levels_vectors(attempt *a) { return levels_call(a, LEVELS_VECTORS); }
static whorl_status case_levels_complex(attempt *a) { return levels_call(a, LEVELS_COMPLEX); }
static whorl_status case_levels_weighted(attempt *a) { return levels_call(a, LEVELS_WEIGHTED); }
static whorl_status case_levels_bytes(attempt *a) { return levels_call(a, LEVELS_BYTES); }
static whorl_status case_levels_hold(attempt *a) { return levels_call(a, LEVELS_HOLD); }

/* ---- the drill --------------------------------------------------------------------------------------------------- */

static const failure_case cases[] = {
    {"whorl_block_take", case_block_take},
    {"whorl_layout_take", case_layout_take},
    {"whorl_run", case_run},
    {"whorl_poll", case_poll},
    {"whorl_sum_from_terms", case_sum_from_terms},
    {"whorl_sum_tidy", case_sum_tidy},
    {"whorl_sum_permute", case_sum_permute},
    {"whorl_sum_embed", case_sum_embed},
    {"whorl_sum_rotate", case_sum_rotate},
    {"whorl_sum_multiply", case_sum_multiply},
    {"whorl_sum_commutator", case_sum_commutator},
    {"whorl_space_make (all)", case_space_all},
    {"whorl_space_make (down)", case_space_down},
    {"whorl_space_make (parity)", case_space_parity},
    {"whorl_space_make (blockade)", case_space_blockade},
    {"whorl_space_make (list)", case_space_list},
    {"whorl_space_make_all", case_space_make_all},
    {"whorl_space_make_down", case_space_make_down},
    {"whorl_space_bytes", case_space_bytes},
    {"whorl_space_string_trace", case_space_string_trace},
    {"whorl_map_apply", case_map_apply},
    {"whorl_map_step", case_map_step},
    {"whorl_map_residual", case_map_residual},
    {"whorl_vector_dot", case_vector_dot},
    {"whorl_vector_norm", case_vector_norm},
    {"whorl_vector_add", case_vector_add},
    {"whorl_vector_blend", case_vector_blend},
    {"whorl_vector_scale", case_vector_scale},
    {"whorl_vector_copy", case_vector_copy},
    {"whorl_vector_random", case_vector_random},
    {"whorl_vector_project", case_vector_project},
    {"whorl_vector_combine", case_vector_combine},
    {"whorl_dense_symmetric", case_dense_symmetric},
    {"whorl_dense_symmetric (vectors)", case_dense_symmetric_vectors},
    {"whorl_dense_hermitian", case_dense_hermitian},
    {"whorl_dense_hermitian (vectors)", case_dense_hermitian_vectors},
    {"whorl_dense_tridiagonal", case_dense_tridiagonal},
    {"whorl_lattice_make", case_lattice_make},
    {"whorl_lattice_distance", case_lattice_distance},
    {"whorl_lattice_bonds", case_lattice_bonds},
    {"whorl_lattice_bond_count", case_lattice_bond_count},
    {"whorl_lattice_translation", case_lattice_translation},
    {"whorl_lattice_symmetries", case_lattice_symmetries},
    {"whorl_lattice_symmetry_count", case_lattice_symmetry_count},
    {"whorl_lattice_symmetries_bytes", case_lattice_symmetries_bytes},
    {"whorl_sum_write", case_sum_write},
    {"whorl_sum_read", case_sum_read},
    {"whorl_sum_read_bytes", case_sum_read_bytes},
    {"whorl_expression_read", case_expression_read},
    {"whorl_expression_bytes", case_expression_bytes},
    {"whorl_expression_weights", case_expression_weights},
    {"whorl_expression_sum", case_expression_sum},
    {"whorl_expression_weight_write", case_expression_weight_write},
    {"whorl_model_read", case_model_read},
    {"whorl_model_bytes", case_model_bytes},
    {"whorl_model_values", case_model_values},
    {"whorl_model_weights", case_model_weights},
    {"whorl_model_sum", case_model_sum},
    {"whorl_model_weight_write", case_model_weight_write},
    {"whorl_action_make (all)", case_action_all},
    {"whorl_action_make (down, complex)", case_action_down},
    {"whorl_action_make (blockade)", case_action_blockade},
    {"whorl_action_bytes", case_action_bytes},
    {"whorl_action_reweight", case_action_reweight},
    {"whorl_action_reweight (blockade)", case_action_reweight_list},
    {"action: apply (all, complex)", case_action_apply_all},
    {"action: apply (down)", case_action_apply_down},
    {"action: apply (down, float)", case_action_apply_float},
    {"action: apply (blockade, complex)", case_action_apply_blockade},
    {"action: step (all)", case_action_step_all},
    {"action: step (down, complex)", case_action_step_down},
    {"whorl_lanczos_make", case_lanczos_make},
    {"whorl_lanczos_make, _advance", case_lanczos_solve},
    {"whorl_lanczos_make, _advance (lean)", case_lanczos_lean},
    {"whorl_lanczos_advance", case_lanczos_advance},
    {"whorl_lanczos_bytes", case_lanczos_bytes},
    {"whorl_lanczos_resume, _advance", case_lanczos_resume},
    {"whorl_levels_make (whole)", case_levels_whole},
    {"whorl_levels_make (Lanczos)", case_levels_lanczos},
    {"whorl_levels_make (vectors)", case_levels_vectors},
    {"whorl_levels_make (complex)", case_levels_complex},
    {"whorl_levels_make_weighted", case_levels_weighted},
    {"whorl_levels_bytes", case_levels_bytes},
    {"whorl_levels_hold_against", case_levels_hold},
};
#define CASES (sizeof cases / sizeof *cases)

static attempt try_case(const failure_case *c, whorl_host *host, whorl_status *status)
{
    attempt a;
    memset(&a, 0, sizeof a);
    a.host = host;
    a.bytes = ANNOUNCED_NOTHING;
    a.digest = UINT64_C(14695981039346656037);
    *status = c->run(&a);
    call_end();
    return a;
}

/* Says which call it was where a check of a drill failed. */
static int drill(int good, const char *name, const char *what)
{
    if (!CHECK(good))
        printf("    %s: %s\n", name, what);
    return good;
}

/* Every allocation failed in turn, once and for good; the number of allocations. */
static uint64_t drill_memory(const failure_case *c, uint64_t want)
{
    uint64_t k, allocations = 0;
    int for_good;
    for (for_good = 0; for_good <= 1; for_good++)
        for (k = 1; k < 100000; k++) {
            check_memory memory;
            whorl_host host = check_host(&memory);
            whorl_status status;
            attempt a;
            uint64_t calls;
            memory.fail_at = k;
            memory.for_good = for_good;
            a = try_case(c, &host, &status);
            calls = memory.calls;
            if (!drill(memory.live_blocks == 0 && host.bytes_used == 0, c->name, "memory is lost after a failure"))
                break;
            if (calls < k) {
                drill(status == WHORL_OK && a.digest == want, c->name, "no failure, yet another result");
                allocations = k - 1;
                break;
            }
            if (!drill(status == WHORL_NO_MEMORY && host.reason.status == status && host.reason.text[0] != 0, c->name,
                       "a failed allocation is not reported"))
                printf("    allocation %" PRIu64 ": status %d, %s\n", k, (int)status, host.reason.text);
            memory.fail_at = 0; /* a retry on the same host */
            a = try_case(c, &host, &status);
            drill(status == WHORL_OK && a.digest == want, c->name, "a retry after a failure gives another result");
            drill(memory.live_blocks == 0 && host.bytes_used == 0, c->name, "memory is lost after a retry");
        }
    return allocations;
}

/* Every poll cancelled in turn; the number of polls. */
static uint64_t drill_polls(const failure_case *c, uint64_t want)
{
    uint64_t k;
    for (k = 1; k < 100000; k++) {
        check_memory memory;
        check_polls polls = {0, 0};
        whorl_host host = check_host(&memory);
        whorl_status status;
        attempt a;
        polls.cancel_at = k;
        host.poll = check_poll;
        host.poll_context = &polls;
        a = try_case(c, &host, &status);
        if (!drill(memory.live_blocks == 0 && host.bytes_used == 0, c->name, "memory is lost after a cancel"))
            break;
        if (polls.calls < k) {
            drill(status == WHORL_OK && a.digest == want, c->name, "no cancel, yet another result");
            break;
        }
        if (!drill(status == WHORL_CANCELLED && polls.calls == k, c->name, "a cancel is not obeyed"))
            printf("    poll %" PRIu64 " of %" PRIu64 ": status %d\n", k, polls.calls, (int)status);
        polls.cancel_at = 0;
        a = try_case(c, &host, &status);
        drill(status == WHORL_OK && a.digest == want, c->name, "a retry after a cancel gives another result");
    }
    return k - 1;
}

/* An arena of the announced size is enough, without malloc; one byte less is not, nor a limit one byte lower. */
static void drill_announced(const failure_case *c, const attempt *first)
{
    const uint64_t want = first->digest, bytes = first->bytes;
    const int bound = first->bound;
    void *memory = judge_memory(bytes + 64, 1);
    char *base = (char *)memory + (64 - ((uintptr_t)memory & 63)) % 64;
    whorl_host host = whorl_host_default();
    whorl_arena arena;
    whorl_status status;
    attempt a;
    memset(base, 0xA5, (size_t)bytes);
    whorl_arena_make(&arena, base, bytes);
    whorl_arena_use(&arena, &host);
    watched_mallocs = 0;
    a = try_case(c, &host, &status);
    drill(status == WHORL_OK && a.digest == want, c->name, "an arena of the announced size is not enough");
    drill(watched_mallocs == 0, c->name, "malloc was called in spite of an arena");
    drill(arena.top == 0 && host.bytes_used == 0, c->name, "the arena is not given back");
    if (bound)
        drill(arena.peak <= bytes && (bound == 2 || arena.peak >= bytes / 5 * 4), c->name, "the bound is far off");
    else
        drill(arena.peak == bytes && host.bytes_peak == bytes, c->name, "the announced size is not the used one");
    if (status != WHORL_OK || (arena.peak != bytes && !bound))
        printf("    %s: status %d, announced %" PRIu64 ", used %" PRIu64 ": %s\n", c->name, (int)status, bytes,
               arena.peak, status == WHORL_OK ? "" : host.reason.text);
    if (bytes > 0 && !bound) {
        whorl_arena_make(&arena, base, bytes - 1);
        try_case(c, &host, &status);
        drill(status == WHORL_NO_MEMORY, c->name, "an arena of one byte less was enough");
        host = whorl_host_default();
        host.byte_limit = bytes - 1;
        try_case(c, &host, &status);
        drill(status == WHORL_OVER_LIMIT || (first->adapts && status == WHORL_OK && host.bytes_peak < bytes), c->name,
              "a limit of one byte less was enough");
        host.byte_limit = bytes;
        a = try_case(c, &host, &status);
        drill(status == WHORL_OK && a.digest == want, c->name, "a limit of the announced size is not enough");
    }
    free(memory);
}

static int can_watch;

static void test_calls(void)
{
    uint64_t i;
    printf("  %-36s %11s %8s %12s\n", "call", "allocations", "polls", "announced");
    for (i = 0; i < CASES; i++) {
        whorl_host host = whorl_host_default();
        whorl_status status;
        attempt a;
        uint64_t allocations, polls;
        watched_mallocs = 0;
        a = try_case(cases + i, &host, &status);
        if (!drill(status == WHORL_OK, cases[i].name, "fails without reason"))
            printf("    %s\n", host.reason.text);
        drill(!can_watch || watched_mallocs == host.takes, cases[i].name, "malloc is called past the memory hook");
        allocations = drill_memory(cases + i, a.digest);
        polls = drill_polls(cases + i, a.digest);
        if (a.bytes != ANNOUNCED_NOTHING)
            drill_announced(cases + i, &a);
        drill(allocations == 0 || a.bytes != ANNOUNCED_NOTHING, cases[i].name, "memory is taken but not announced");
        printf("  %-36s %11" PRIu64 " %8" PRIu64, cases[i].name, allocations, polls);
        if (a.bytes == ANNOUNCED_NOTHING)
            printf(" %12s\n", "none");
        else
            printf(" %12" PRIu64 "\n", a.bytes);
    }
}

static void test_no_malloc(void)
{
    void *volatile block;
    if (!can_watch)
        CHECK_SKIP("calls of malloc are not counted: build with glibc, or with an address sanitizer");
    watched_mallocs = 0;
    watching = 1;
    block = malloc(10); /* the counter counts */
    watching = 0;
    free(block);
    CHECK(watched_mallocs == 1);
}

int main(void)
{
    check_begin("test_failures");
    can_watch = watch_begin();
    check_run("no_malloc", test_no_malloc);
    check_run("calls", test_calls);
    return check_end();
}
