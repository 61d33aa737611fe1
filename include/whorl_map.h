/*
 * whorl_map.h 0.1.0: what a solver sees of an operator, and the vector work that solvers do.
 *
 * A map is a struct of sizes, an element type and a few functions: y = A x for one or several columns, and optionally a
 * fused step. Solvers know operators only through it, so a host can hand them its own matrix:
 *
 *     whorl_map map = whorl_map_default();
 *     map.rows = map.columns = n;  map.element = WHORL_REAL_DOUBLE;  map.hermitian = 1;
 *     map.context = &matrix;       map.apply = my_product;
 *     status = whorl_map_apply(&host, &map, x, y, 1);
 *
 * It does not know where operators come from (whorl_action.h) or how to find levels (whorl_lanczos.h).
 *
 * Vectors are plain arrays of one of the four element types; complex ones interleave re and im. They need the
 * alignment of their real type only; lengths and strides count elements. Several columns are contiguous, one after the
 * other.
 * Memory: the vector functions take none. Threads: they run on the host's, and give the same bits for any
 * number of them: work is cut into blocks by index, and sums are taken by the leaves and the tree of whorl_core.h.
 * Arithmetic is done in double for all element types; float results are rounded once when they are stored.
 * Errors: statuses of whorl_core.h with a reason. After WHORL_CANCELLED a vector that was being written is unspecified.
 */
#include "whorl_core.h"

#ifndef WHORL_MAP_INCLUDED
#define WHORL_MAP_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_map.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_MAP_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- maps -------------------------------------------------------------------------------------------------------- */

typedef struct whorl_map whorl_map;

/* y = A x for `count` columns: x has columns * count elements, y rows * count; they do not overlap. */
typedef whorl_status (*whorl_map_apply_function)(whorl_host *host, const whorl_map *map, const void *x, void *y,
                                                 int32_t count);
/* y = a A x + b y and the dots <x, y>, <y, y> of the new y; b = 0: y is not read. */
typedef whorl_status (*whorl_map_step_function)(whorl_host *host, const whorl_map *map, double a, const void *x,
                                                double b, void *y, whorl_complex dots[2]);
/* The bytes, as whorl_block_bytes counts them, that an apply of `count` columns takes at most; count 0: a step. */
typedef uint64_t (*whorl_map_scratch_function)(const whorl_host *host, const whorl_map *map, int32_t count);

struct whorl_map {
    uint64_t rows, columns; /* sizes of y and of x */
    whorl_element element;  /* of both; never WHORL_ELEMENT_DEFAULT */
    int32_t hermitian;      /* 1: A is known to be Hermitian (rows = columns) */
    double norm_bound;      /* an upper bound of ||A||, 0 where none is known */
    const void *context;    /* the map's own; solvers do not look into it */
    whorl_map_apply_function apply;
    whorl_map_step_function step;       /* NULL: composed from apply */
    whorl_map_scratch_function scratch; /* NULL: apply takes no memory */
};

/* All zero. Set rows, columns, element and apply, and what else is known. */
WHORL_API whorl_map whorl_map_default(void);

/*
 * Is it usable? Errors: WHORL_BAD_ARGUMENT (no apply, unknown element type, hermitian but not square, a norm bound
 * that is negative or not finite), WHORL_TOO_LARGE (a vector would exceed 2^62 bytes).
 */
WHORL_API whorl_status whorl_map_check(whorl_host *host, const whorl_map *map);

/*
 * y = A x. `count` >= 1 columns. Errors: as whorl_map_check; WHORL_BAD_ARGUMENT for a missing vector or count < 1;
 * whatever the map returns.
 */
WHORL_API whorl_status whorl_map_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count);

/*
 * y = a A x + b y, with dots[0] = <x, y> and dots[1] = <y, y> of the new y; b = 0: y is not read. Square maps only.
 * Where the map has no step of its own this takes one vector of scratch unless b = 0, and whorl_map_apply's. Errors:
 * as whorl_map_apply, WHORL_NOT_FINITE (a or b is not finite), WHORL_NO_MEMORY, WHORL_OVER_LIMIT.
 */
WHORL_API whorl_status whorl_map_step(whorl_host *host, const whorl_map *map, double a, const void *x, double b,
                                      void *y, whorl_complex dots[2]);

/* The bytes that whorl_map_apply takes from the host for `count` columns; count 0: those of whorl_map_step. */
WHORL_API uint64_t whorl_map_scratch(const whorl_host *host, const whorl_map *map, int32_t count);

/*
 * *norm = ||A x - value x||, computed explicitly; `image` is room for one vector and holds A x - value x afterwards. x
 * is taken as it is: normalise it first. Square maps only. Errors: as whorl_map_apply.
 */
WHORL_API whorl_status whorl_map_residual(whorl_host *host, const whorl_map *map, double value, const void *x,
                                          void *image, double *norm);

/* ---- vectors ----------------------------------------------------------------------------------------------------- */

/*
 * Common to all: the element type first, `n` counts elements, x and y may be NULL where n is 0 and do not overlap
 * unless they are the same vector. Cost O(n) a vector, no memory. Errors: WHORL_BAD_ARGUMENT (unknown element type,
 * missing vector, a negative count of columns, a stride below n), WHORL_CANCELLED; scalar outputs are then unchanged.
 */

/* *dot = <x, y> = sum conj(x_i) y_i: the bits of whorl_dot. */
WHORL_API whorl_status whorl_vector_dot(whorl_host *host, whorl_element element, uint64_t n, const void *x,
                                        const void *y, whorl_complex *dot);
/* *norm = sqrt(<x, x>). */
WHORL_API whorl_status whorl_vector_norm(whorl_host *host, whorl_element element, uint64_t n, const void *x,
                                         double *norm);
/* y += a x; a.im must be 0 for real elements (WHORL_BAD_ARGUMENT otherwise). */
WHORL_API whorl_status whorl_vector_add(whorl_host *host, whorl_element element, uint64_t n, whorl_complex a,
                                        const void *x, void *y);
/* y = a x + b y and, where dots is not NULL, dots[0] = <x, y>, dots[1] = <y, y> of the new y; b = 0: y is not read. */
WHORL_API whorl_status whorl_vector_blend(whorl_host *host, whorl_element element, uint64_t n, double a, const void *x,
                                          double b, void *y, whorl_complex *dots);
/* x = a x */
WHORL_API whorl_status whorl_vector_scale(whorl_host *host, whorl_element element, uint64_t n, double a, void *x);
/* y = x */
WHORL_API whorl_status whorl_vector_copy(whorl_host *host, whorl_element element, uint64_t n, const void *x, void *y);
/*
 * x_i = whorl_random_normal(seed, stream, i); complex elements take counters 2 i and 2 i + 1 for re and im. Not
 * normalised: <x, x> is about n, or 2 n.
 */
WHORL_API whorl_status whorl_vector_random(whorl_host *host, whorl_element element, uint64_t n, uint64_t seed,
                                           uint64_t stream, void *x);
/*
 * Classical Gram-Schmidt of w against the m >= 0 columns of v, column j at v + j * stride: overlaps[j] = <v_j, w> for
 * all of them first, then w -= v_j overlaps[j] in order of j. Memory traffic: v twice, w a little more than three
 * times.
 */
WHORL_API whorl_status whorl_vector_project(whorl_host *host, whorl_element element, uint64_t n, int32_t m,
                                            const void *v, uint64_t stride, void *w, whorl_complex *overlaps);
/*
 * The first k columns of v become V Q in place, for the m x k real matrix Q (column j at q + j * m), 0 <= k <= m; the
 * others stay. Element (i, j) adds v_il q_lj in order of l from 0. m is at most WHORL_VECTOR_MOST_COLUMNS.
 */
#define WHORL_VECTOR_MOST_COLUMNS 2048
WHORL_API whorl_status whorl_vector_combine(whorl_host *host, whorl_element element, uint64_t n, int32_t m, int32_t k,
                                            void *v, uint64_t stride, const double *q);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_MAP_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_MAP_IMPLEMENTED)
#define WHORL_MAP_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>targets --------------------------------------------------------------------------------------------------- */

/*
 * Kernels bound by arithmetic are ordinary C, compiled again for wider vectors as functions with a target attribute and
 * chosen at run time. Contraction is off, so the bits are the same.
 */
#if WHORLI_GNU && (defined(__x86_64__) || defined(__amd64__))
#define WHORLI_TARGETS 1
#ifdef __clang__
#define WHORLI_TARGET_AVX2 __attribute__((target("avx2")))
#define WHORLI_TARGET_AVX512 __attribute__((target("avx512f,avx512vl,avx512bw,avx512dq")))
#else /* the attribute makes GCC forget the pragma of the arithmetic where the host compiles for FMA: say it again */
#define WHORLI_TARGET_FIXED optimize("O3", "no-fast-math", "fp-contract=off")
#define WHORLI_TARGET_AVX2 __attribute__((target("avx2"), WHORLI_TARGET_FIXED))
#define WHORLI_TARGET_AVX512 \
    __attribute__((target("avx512f,avx512vl,avx512bw,avx512dq,prefer-vector-width=512"), WHORLI_TARGET_FIXED))
#endif
#else
#define WHORLI_TARGETS 0
#endif
#if WHORLI_GNU
#define WHORLI_BODY static inline __attribute__((always_inline))
#else
#define WHORLI_BODY static inline
#endif

/* 0: the vectors that the host compiled for; 1: AVX2; 2: AVX-512. */
static WHORLI_UNUSED int32_t whorli_target(void)
{
#if WHORLI_TARGETS
    if (__builtin_cpu_supports("avx512f") && __builtin_cpu_supports("avx512vl") && __builtin_cpu_supports("avx512bw") &&
        __builtin_cpu_supports("avx512dq"))
        return 2;
    if (__builtin_cpu_supports("avx2"))
        return 1;
#endif
    return 0;
}

/* ---- >>blocks ---------------------------------------------------------------------------------------------------- */

/* Vectors are cut into blocks of a power of two of leaves, at least 64, so that block sums are subtrees. */
#define WHORLI_VECTOR_BLOCK (64 * WHORL_LEAF)
#define WHORLI_VECTOR_MOST_BLOCKS 1024

static uint64_t whorli_vector_block(uint64_t n, uint64_t most_blocks)
{
    uint64_t block = WHORLI_VECTOR_BLOCK;
    while ((n + (block - 1)) / block > most_blocks)
        block *= 2;
    return block;
}

/* What the bodies of the vector functions share; each uses the fields that it needs. */
typedef struct whorli_vector_job {
    whorl_element element;
    uint64_t n, block; /* elements */
    uint64_t bytes;    /* of an element */
    uint64_t width;    /* reals of an element */
    const char *x;
    char *y;
    double a, b;
    whorl_complex c;
    uint64_t seed, stream;
    uint64_t stride; /* bytes */
    int32_t m, k;
    const double *q;
    const whorl_complex *overlaps;
    whorl_complex *parts;
    int32_t target;
} whorli_vector_job;

typedef struct whorli_vector_range {
    uint64_t first, count; /* elements */
} whorli_vector_range;

static whorli_vector_range whorli_vector_range_of(const whorli_vector_job *job, uint64_t block)
{
    whorli_vector_range range;
    range.first = block * job->block;
    range.count = job->n - range.first < job->block ? job->n - range.first : job->block;
    return range;
}

static whorl_status whorli_vector_begin(whorl_host *host, whorl_element element, uint64_t n, const void *x,
                                        const void *y, uint64_t most_blocks, whorli_vector_job *job)
{
    memset(job, 0, sizeof *job);
    job->element = element;
    job->n = n;
    job->bytes = whorl_element_bytes(element);
    job->width = whorl_element_is_complex(element) ? 2 : 1;
    job->block = whorli_vector_block(n, most_blocks);
    if (job->bytes == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the element type of a vector is none of the four: pass WHORL_REAL_DOUBLE or a sibling");
    if (n >= (UINT64_C(1) << 62) / 16)
        return whorl_fail(host, WHORL_TOO_LARGE, "a vector of 2^58 elements or more exceeds the address space");
    if (n > 0 && (x == NULL || y == NULL))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a vector is NULL: pass an array of n elements");
    job->x = (const char *)x;
    return WHORL_OK;
}

static whorl_status whorli_vector_run(whorl_host *host, whorl_body_function body, whorli_vector_job *job,
                                      uint64_t columns)
{
    uint64_t blocks = (job->n + (job->block - 1)) / job->block;
    return whorl_run(host, body, job, blocks, whorl_size_multiply(job->block, columns > 0 ? columns : 1));
}

/* `count` reals from `at` on as doubles: in place where they are, otherwise converted into buffer. */
static const double *whorli_vector_load(whorl_element element, const char *at, uint64_t count, double *buffer)
{
    uint64_t i;
    const float *from = (const float *)(const void *)at;
    if (!whorl_element_is_float(element))
        return (const double *)(const void *)at;
    for (i = 0; i < count; i++)
        buffer[i] = (double)from[i];
    return buffer;
}

static void whorli_vector_store(whorl_element element, const double *values, uint64_t count, char *at)
{
    uint64_t i;
    if (whorl_element_is_float(element)) {
        float *to = (float *)(void *)at;
        for (i = 0; i < count; i++)
            to[i] = (float)values[i];
    } else {
        memcpy(at, values, (size_t)(8 * count));
    }
}

/* ---- >>maps ------------------------------------------------------------------------------------------------------ */

whorl_map whorl_map_default(void)
{
    whorl_map map;
    memset(&map, 0, sizeof map);
    return map;
}

whorl_status whorl_map_check(whorl_host *host, const whorl_map *map)
{
    if (map == NULL || map->apply == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the map has no apply function: set it to one that computes y = A x");
    if (whorl_element_bytes(map->element) == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the element type of the map is none of the four: set it to WHORL_REAL_DOUBLE or a sibling");
    if (map->hermitian && map->rows != map->columns)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the map is marked Hermitian but not square: unset one or the other");
    if (!whorl_is_finite(map->norm_bound) || map->norm_bound < 0.0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the norm bound of the map must be finite and not negative");
    if (map->rows >= (UINT64_C(1) << 58) || map->columns >= (UINT64_C(1) << 58))
        return whorl_fail(host, WHORL_TOO_LARGE, "a vector of the map would exceed the address space");
    return WHORL_OK;
}

static whorl_status whorli_map_ready(whorl_host *host, const whorl_map *map, const void *x, const void *y,
                                     int32_t square)
{
    whorl_status status = whorl_map_check(host, map);
    if (status != WHORL_OK)
        return status;
    if (square && map->rows != map->columns)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "this call needs a map with as many rows as columns");
    if ((map->columns > 0 && x == NULL) || (map->rows > 0 && y == NULL))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a vector is NULL: pass arrays of the map's columns and rows");
    return WHORL_OK;
}

whorl_status whorl_map_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    whorl_status status = whorli_map_ready(host, map, x, y, 0);
    if (status != WHORL_OK)
        return status;
    if (count < 1)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a map is applied to at least one column");
    return map->apply(host, map, x, y, count);
}

whorl_status whorl_map_step(whorl_host *host, const whorl_map *map, double a, const void *x, double b, void *y,
                            whorl_complex dots[2])
{
    whorl_status status = whorli_map_ready(host, map, x, y, 1);
    whorl_complex found[2];
    whorl_block block;
    if (status != WHORL_OK)
        return status;
    if (!whorl_is_finite(a) || !whorl_is_finite(b))
        return whorl_fail(host, WHORL_NOT_FINITE, "the factors of a step must be finite");
    if (map->step != NULL)
        return map->step(host, map, a, x, b, y, dots);
    if (b == 0.0) {
        status = map->apply(host, map, x, y, 1);
        if (status == WHORL_OK)
            status = whorl_vector_scale(host, map->element, map->rows, a, y);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, map->element, map->rows, x, y, &found[0]);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, map->element, map->rows, y, y, &found[1]);
    } else {
        status = whorl_block_take(host, map->rows * whorl_element_bytes(map->element), &block);
        if (status != WHORL_OK)
            return status;
        status = map->apply(host, map, x, block.at, 1);
        if (status == WHORL_OK)
            status = whorl_vector_blend(host, map->element, map->rows, a, block.at, b, y, found);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, map->element, map->rows, x, y, &found[0]);
        whorl_block_give(host, &block);
    }
    if (status == WHORL_OK)
        memcpy(dots, found, sizeof found);
    return status;
}

uint64_t whorl_map_scratch(const whorl_host *host, const whorl_map *map, int32_t count)
{
    uint64_t inner;
    if (count > 0 || map->step != NULL)
        return map->scratch == NULL ? 0 : map->scratch(host, map, count);
    inner = map->scratch == NULL ? 0 : map->scratch(host, map, 1);
    return whorl_size_add(inner, whorl_block_bytes(whorl_size_multiply(map->rows, whorl_element_bytes(map->element))));
}

whorl_status whorl_map_residual(whorl_host *host, const whorl_map *map, double value, const void *x, void *image,
                                double *norm)
{
    whorl_status status = whorli_map_ready(host, map, x, image, 1);
    if (status != WHORL_OK)
        return status;
    status = map->apply(host, map, x, image, 1);
    if (status == WHORL_OK)
        status = whorl_vector_add(host, map->element, map->rows, whorl_complex_of(-value, 0.0), x, image);
    return status == WHORL_OK ? whorl_vector_norm(host, map->element, map->rows, image, norm) : status;
}

/* ---- >>dots ------------------------------------------------------------------------------------------------------ */

static whorl_complex whorli_vector_total(const whorl_complex *parts, uint64_t count, uint64_t stride)
{
    whorl_tree tree;
    uint64_t i;
    whorl_tree_clear(&tree);
    for (i = 0; i < count; i++)
        whorl_tree_add(&tree, parts[i * stride]);
    return whorl_tree_total(&tree);
}

static void whorli_vector_dot_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    (void)worker;
    job->parts[block] =
        whorl_dot(job->element, job->x + range.first * job->bytes, job->y + range.first * job->bytes, range.count);
}

whorl_status whorl_vector_dot(whorl_host *host, whorl_element element, uint64_t n, const void *x, const void *y,
                              whorl_complex *dot)
{
    whorl_complex parts[WHORLI_VECTOR_MOST_BLOCKS];
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, y, WHORLI_VECTOR_MOST_BLOCKS, &job);
    if (status != WHORL_OK)
        return status;
    job.y = (char *)(uintptr_t)y; /* read only */
    job.parts = parts;
    status = whorli_vector_run(host, whorli_vector_dot_body, &job, 1);
    if (status == WHORL_OK)
        *dot = whorli_vector_total(parts, (n + (job.block - 1)) / job.block, 1);
    return status;
}

whorl_status whorl_vector_norm(whorl_host *host, whorl_element element, uint64_t n, const void *x, double *norm)
{
    whorl_complex square;
    whorl_status status = whorl_vector_dot(host, element, n, x, x, &square);
    if (status == WHORL_OK)
        *norm = sqrt(square.re);
    return status;
}

/* ---- >>updates --------------------------------------------------------------------------------------------------- */

/* Reals handled at a time where a buffer of doubles is between: all in the first-level cache. */
#define WHORLI_VECTOR_CHUNK 512

static void whorli_vector_add_reals(double a, const double *x, double *y, uint64_t count)
{
    uint64_t i;
    for (i = 0; i < count; i++)
        y[i] += a * x[i];
}

static void whorli_vector_add_complex(whorl_complex a, const double *x, double *y, uint64_t reals)
{
    uint64_t i;
    for (i = 0; i < reals; i += 2) {
        double re = x[i], im = x[i + 1];
        y[i] += a.re * re - a.im * im;
        y[i + 1] += a.re * im + a.im * re;
    }
}

static void whorli_vector_add_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    uint64_t size = job->bytes / job->width, at = range.first * job->width, end = at + range.count * job->width;
    double xs[WHORLI_VECTOR_CHUNK], ys[WHORLI_VECTOR_CHUNK];
    (void)worker;
    for (; at < end; at += WHORLI_VECTOR_CHUNK) {
        uint64_t count = end - at < WHORLI_VECTOR_CHUNK ? end - at : WHORLI_VECTOR_CHUNK;
        const double *x = whorli_vector_load(job->element, job->x + at * size, count, xs);
        double *y = (double *)(uintptr_t)whorli_vector_load(job->element, job->y + at * size, count, ys);
        if (job->c.im == 0.0)
            whorli_vector_add_reals(job->c.re, x, y, count);
        else
            whorli_vector_add_complex(job->c, x, y, count);
        if (y == ys)
            whorli_vector_store(job->element, ys, count, job->y + at * size);
    }
}

whorl_status whorl_vector_add(whorl_host *host, whorl_element element, uint64_t n, whorl_complex a, const void *x,
                              void *y)
{
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, y, WHORL_NONE, &job);
    if (status != WHORL_OK)
        return status;
    if (job.width == 1 && a.im != 0.0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "a complex multiple of a real vector is not real: use complex elements");
    job.y = (char *)y;
    job.c = a;
    return whorli_vector_run(host, whorli_vector_add_body, &job, 1);
}

/* ys = a xs + b ys, stored, and the dots of leaves while they are in the cache. */
static void whorli_vector_blend_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    uint64_t size = job->bytes / job->width, at = range.first, end = range.first + range.count;
    double xs[2 * WHORL_LEAF], ys[2 * WHORL_LEAF];
    whorl_tree across, square;
    (void)worker;
    whorl_tree_clear(&across);
    whorl_tree_clear(&square);
    for (; at < end; at += WHORL_LEAF) {
        uint64_t count = end - at < WHORL_LEAF ? end - at : WHORL_LEAF, reals = count * job->width, i;
        const char *from = job->x + at * job->width * size;
        char *to = job->y + at * job->width * size;
        const double *x = whorli_vector_load(job->element, from, reals, xs);
        if (job->b == 0.0) {
            for (i = 0; i < reals; i++)
                ys[i] = job->a * x[i];
        } else {
            const double *y = whorli_vector_load(job->element, to, reals, ys);
            for (i = 0; i < reals; i++)
                ys[i] = job->a * x[i] + job->b * y[i];
        }
        whorli_vector_store(job->element, ys, reals, to);
        if (job->parts != NULL) {
            whorl_tree_add(&across, whorl_leaf_dot(job->element, from, to, count));
            whorl_tree_add(&square, whorl_leaf_dot(job->element, to, to, count));
        }
    }
    if (job->parts != NULL) {
        job->parts[2 * block] = whorl_tree_total(&across);
        job->parts[2 * block + 1] = whorl_tree_total(&square);
    }
}

whorl_status whorl_vector_blend(whorl_host *host, whorl_element element, uint64_t n, double a, const void *x, double b,
                                void *y, whorl_complex *dots)
{
    whorl_complex parts[WHORLI_VECTOR_MOST_BLOCKS];
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, y, WHORLI_VECTOR_MOST_BLOCKS / 2, &job);
    uint64_t blocks;
    if (status != WHORL_OK)
        return status;
    job.y = (char *)y;
    job.a = a;
    job.b = b;
    job.parts = dots == NULL ? NULL : parts;
    blocks = (n + (job.block - 1)) / job.block;
    status = whorli_vector_run(host, whorli_vector_blend_body, &job, 1);
    if (status == WHORL_OK && dots != NULL) {
        dots[0] = whorli_vector_total(parts, blocks, 2);
        dots[1] = whorli_vector_total(parts + 1, blocks, 2);
    }
    return status;
}

static void whorli_vector_scale_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    uint64_t reals = range.count * job->width, i;
    char *at = job->y + range.first * job->bytes;
    (void)worker;
    if (whorl_element_is_float(job->element)) {
        float *x = (float *)(void *)at;
        for (i = 0; i < reals; i++)
            x[i] = (float)(job->a * (double)x[i]);
    } else {
        double *x = (double *)(void *)at;
        for (i = 0; i < reals; i++)
            x[i] *= job->a;
    }
}

whorl_status whorl_vector_scale(whorl_host *host, whorl_element element, uint64_t n, double a, void *x)
{
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, x, WHORL_NONE, &job);
    if (status != WHORL_OK)
        return status;
    job.y = (char *)x;
    job.a = a;
    return whorli_vector_run(host, whorli_vector_scale_body, &job, 1);
}

static void whorli_vector_copy_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    (void)worker;
    memmove(job->y + range.first * job->bytes, job->x + range.first * job->bytes, (size_t)(range.count * job->bytes));
}

whorl_status whorl_vector_copy(whorl_host *host, whorl_element element, uint64_t n, const void *x, void *y)
{
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, y, WHORL_NONE, &job);
    if (status != WHORL_OK)
        return status;
    job.y = (char *)y;
    return whorli_vector_run(host, whorli_vector_copy_body, &job, 1);
}

static void whorli_vector_random_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    uint64_t i, first = range.first * job->width, end = first + range.count * job->width;
    (void)worker;
    for (i = first; i < end; i++) {
        double value = whorl_random_normal(job->seed, job->stream, i);
        if (whorl_element_is_float(job->element))
            ((float *)(void *)job->y)[i] = (float)value;
        else
            ((double *)(void *)job->y)[i] = value;
    }
}

whorl_status whorl_vector_random(whorl_host *host, whorl_element element, uint64_t n, uint64_t seed, uint64_t stream,
                                 void *x)
{
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, x, x, WHORL_NONE, &job);
    if (status != WHORL_OK)
        return status;
    job.y = (char *)x;
    job.seed = seed;
    job.stream = stream;
    return whorli_vector_run(host, whorli_vector_random_body, &job, 12);
}

/* ---- >>columns --------------------------------------------------------------------------------------------------- */

static whorl_status whorli_vector_columns(whorl_host *host, const whorli_vector_job *job, int32_t m, const void *v,
                                          uint64_t stride)
{
    if (m < 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a number of columns is negative");
    if (m > 0 && stride < job->n)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "columns overlap: the stride must be at least n elements");
    if (m > 0 && job->n > 0 && v == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the columns are NULL: pass an array of m columns");
    return WHORL_OK;
}

/* So many columns are dotted in one pass over w, in so many blocks: the sums are on the stack. */
#define WHORLI_PROJECT_COLUMNS 8
#define WHORLI_PROJECT_BLOCKS 256
/* Leaves of one column before the next one's turn: w stays in the first-level cache, v streams. */
#define WHORLI_PROJECT_LEAVES 8

static void whorli_vector_overlap_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    whorl_tree trees[WHORLI_PROJECT_COLUMNS];
    uint64_t at, end = range.first + range.count;
    int32_t j;
    (void)worker;
    for (j = 0; j < job->m; j++)
        whorl_tree_clear(&trees[j]);
    for (at = range.first; at < end; at += WHORLI_PROJECT_LEAVES * WHORL_LEAF)
        for (j = 0; j < job->m; j++) {
            const char *v = job->x + (uint64_t)j * job->stride;
            uint64_t leaf = at, stop = at + WHORLI_PROJECT_LEAVES * WHORL_LEAF;
            for (; leaf < stop && leaf < end; leaf += WHORL_LEAF)
                whorl_tree_add(&trees[j],
                               whorl_leaf_dot(job->element, v + leaf * job->bytes, job->y + leaf * job->bytes,
                                              end - leaf < WHORL_LEAF ? end - leaf : WHORL_LEAF));
        }
    for (j = 0; j < job->m; j++)
        job->parts[block * WHORLI_PROJECT_COLUMNS + (uint64_t)j] = whorl_tree_total(&trees[j]);
}

static whorl_status whorli_vector_overlaps(whorl_host *host, whorli_vector_job *job, int32_t m, const char *v,
                                           whorl_complex *overlaps)
{
    uint64_t blocks = (job->n + (job->block - 1)) / job->block;
    int32_t first, j;
    for (first = 0; first < m; first += WHORLI_PROJECT_COLUMNS) {
        whorl_status status;
        job->m = m - first < WHORLI_PROJECT_COLUMNS ? m - first : WHORLI_PROJECT_COLUMNS;
        job->x = v + (uint64_t)first * job->stride;
        status = whorli_vector_run(host, whorli_vector_overlap_body, job, (uint64_t)job->m);
        if (status != WHORL_OK)
            return status;
        for (j = 0; j < job->m; j++)
            overlaps[first + j] = whorli_vector_total(job->parts + j, blocks, WHORLI_PROJECT_COLUMNS);
    }
    return WHORL_OK;
}

/* w -= v_j o_j, four real columns at a time: each element subtracts them in order. */
static void whorli_vector_subtract_four(const double *const *v, const double *o, double *w, uint64_t count)
{
    const double *v0 = v[0], *v1 = v[1], *v2 = v[2], *v3 = v[3];
    double a = o[0], b = o[1], c = o[2], d = o[3];
    uint64_t i;
    for (i = 0; i < count; i++)
        w[i] = (((w[i] - a * v0[i]) - b * v1[i]) - c * v2[i]) - d * v3[i];
}

static void whorli_vector_subtract_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    uint64_t size = job->bytes / job->width, at = range.first * job->width, end = at + range.count * job->width;
    double w[WHORLI_VECTOR_CHUNK], buffer[4][WHORLI_VECTOR_CHUNK];
    (void)worker;
    for (; at < end; at += WHORLI_VECTOR_CHUNK) {
        uint64_t count = end - at < WHORLI_VECTOR_CHUNK ? end - at : WHORLI_VECTOR_CHUNK;
        const double *from = whorli_vector_load(job->element, job->y + at * size, count, w);
        int32_t j = 0, i;
        if (from != w)
            memcpy(w, from, (size_t)(8 * count));
        for (; job->width == 1 && j + 4 <= job->m; j += 4) {
            const double *v[4];
            double o[4];
            for (i = 0; i < 4; i++) {
                v[i] = whorli_vector_load(job->element, job->x + (uint64_t)(j + i) * job->stride + at * size, count,
                                          buffer[i]);
                o[i] = job->overlaps[j + i].re;
            }
            whorli_vector_subtract_four(v, o, w, count);
        }
        for (; j < job->m; j++) {
            const double *v =
                whorli_vector_load(job->element, job->x + (uint64_t)j * job->stride + at * size, count, buffer[0]);
            whorl_complex o = whorl_complex_of(-job->overlaps[j].re, -job->overlaps[j].im);
            if (job->width == 1)
                whorli_vector_add_reals(o.re, v, w, count);
            else
                whorli_vector_add_complex(o, v, w, count);
        }
        whorli_vector_store(job->element, w, count, job->y + at * size);
    }
}

whorl_status whorl_vector_project(whorl_host *host, whorl_element element, uint64_t n, int32_t m, const void *v,
                                  uint64_t stride, void *w, whorl_complex *overlaps)
{
    whorl_complex parts[WHORLI_PROJECT_COLUMNS * WHORLI_PROJECT_BLOCKS];
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, w, w, WHORLI_PROJECT_BLOCKS, &job);
    if (status == WHORL_OK)
        status = whorli_vector_columns(host, &job, m, v, stride);
    if (status != WHORL_OK)
        return status;
    job.y = (char *)w;
    job.stride = stride * job.bytes;
    job.parts = parts;
    status = whorli_vector_overlaps(host, &job, m, (const char *)v, overlaps);
    if (status != WHORL_OK)
        return status;
    job.x = (const char *)v;
    job.m = m;
    job.overlaps = overlaps;
    job.block = whorli_vector_block(n, WHORL_NONE);
    return whorli_vector_run(host, whorli_vector_subtract_body, &job, (uint64_t)m);
}

/* Rows times columns that are copied to the stack before they are overwritten, in doubles: 64 KB. */
#define WHORLI_COMBINE_ROOM 8192

/* out = sum_l rows_l q_l, l from 0, eight at a time; rows_l at rows + l * stride. */
WHORLI_BODY void whorli_combine_column(const double *WHORLI_RESTRICT rows, uint64_t stride, uint64_t count, int32_t m,
                                       const double *WHORLI_RESTRICT q, double *WHORLI_RESTRICT out)
{
    int32_t l = 0;
    uint64_t i;
    for (i = 0; i < count; i++)
        out[i] = 0.0;
    for (; l + 8 <= m; l += 8) {
        const double *r = rows + (uint64_t)l * stride, *f = q + l;
        for (i = 0; i < count; i++)
            out[i] = (((((((out[i] + f[0] * r[i]) + f[1] * r[i + stride]) + f[2] * r[i + 2 * stride]) +
                         f[3] * r[i + 3 * stride]) +
                        f[4] * r[i + 4 * stride]) +
                       f[5] * r[i + 5 * stride]) +
                      f[6] * r[i + 6 * stride]) +
                     f[7] * r[i + 7 * stride];
    }
    for (; l < m; l++) {
        const double *r = rows + (uint64_t)l * stride;
        for (i = 0; i < count; i++)
            out[i] += q[l] * r[i];
    }
}

typedef void (*whorli_combine_function)(const double *rows, uint64_t stride, uint64_t count, int32_t m, const double *q,
                                        double *out);
static void whorli_combine_plain(const double *rows, uint64_t stride, uint64_t count, int32_t m, const double *q,
                                 double *out)
{
    whorli_combine_column(rows, stride, count, m, q, out);
}
#if WHORLI_TARGETS
WHORLI_TARGET_AVX2 static void whorli_combine_avx2(const double *rows, uint64_t stride, uint64_t count, int32_t m,
                                                   const double *q, double *out)
{
    whorli_combine_column(rows, stride, count, m, q, out);
}
WHORLI_TARGET_AVX512 static void whorli_combine_avx512(const double *rows, uint64_t stride, uint64_t count, int32_t m,
                                                       const double *q, double *out)
{
    whorli_combine_column(rows, stride, count, m, q, out);
}
#endif

static whorli_combine_function whorli_combine_for(int32_t target)
{
#if WHORLI_TARGETS
    if (target == 2)
        return whorli_combine_avx512;
    if (target == 1)
        return whorli_combine_avx2;
#endif
    (void)target;
    return whorli_combine_plain;
}

static void whorli_vector_combine_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_vector_job *job = (const whorli_vector_job *)argument;
    whorli_vector_range range = whorli_vector_range_of(job, block);
    whorli_combine_function column = whorli_combine_for(job->target);
    uint64_t size = job->bytes / job->width, at = range.first * job->width, end = at + range.count * job->width;
    uint64_t most = WHORLI_COMBINE_ROOM / (uint64_t)job->m;
    double rows[WHORLI_COMBINE_ROOM], out[WHORLI_VECTOR_CHUNK];
    (void)worker;
    most = most > WHORLI_VECTOR_CHUNK ? WHORLI_VECTOR_CHUNK : most >= 8 ? most & ~UINT64_C(7) : most;
    for (; at < end; at += most) {
        uint64_t count = end - at < most ? end - at : most;
        int32_t j;
        for (j = 0; j < job->m; j++) {
            double *row = rows + (uint64_t)j * most;
            const double *from =
                whorli_vector_load(job->element, job->y + (uint64_t)j * job->stride + at * size, count, row);
            if (from != row)
                memcpy(row, from, (size_t)(8 * count));
        }
        for (j = 0; j < job->k; j++) {
            column(rows, most, count, job->m, job->q + (uint64_t)j * (uint64_t)job->m, out);
            whorli_vector_store(job->element, out, count, job->y + (uint64_t)j * job->stride + at * size);
        }
    }
}

whorl_status whorl_vector_combine(whorl_host *host, whorl_element element, uint64_t n, int32_t m, int32_t k, void *v,
                                  uint64_t stride, const double *q)
{
    whorli_vector_job job;
    whorl_status status = whorli_vector_begin(host, element, n, v, v, WHORL_NONE, &job);
    if (status == WHORL_OK)
        status = whorli_vector_columns(host, &job, m, v, stride);
    if (status != WHORL_OK)
        return status;
    if (k < 0 || k > m || m > WHORL_VECTOR_MOST_COLUMNS)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "combining needs 0 <= k <= m <= WHORL_VECTOR_MOST_COLUMNS");
    if (k == 0)
        return WHORL_OK;
    job.y = (char *)v;
    job.stride = stride * job.bytes;
    job.m = m;
    job.k = k;
    job.q = q;
    job.target = whorli_target();
    return whorli_vector_run(host, whorli_vector_combine_body, &job, (uint64_t)m);
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
