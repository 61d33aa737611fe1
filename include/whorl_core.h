/*
 * whorl_core.h 0.1.0: the host and everything that the other headers stand on.
 *
 * Whorl is header-only C99 (also C++17). In exactly one source file of your program write
 *
 *     #define WHORL_IMPLEMENTATION
 *     #include "whorl_levels.h"          (or any other header of the library)
 *
 * and include the headers without the define everywhere else. To keep a private copy inside one source file, define
 * WHORL_STATIC instead: every function becomes static there and nothing clashes with another copy in the program.
 *
 * This header owns: statuses and the reason of a failure; the host (memory hook, byte limit, parallel-run hook, poll
 * hook); the arena; layouts that are measured and carved by one function; checked size arithmetic; bit tricks; exact
 * decimal text of doubles; a sort; counter-based random numbers; reproducible sums; a probe of the arithmetic.
 *
 * It does not: print, read files, keep global state, abort, set errno, or depend on the locale.
 *
 * Options (define before including):
 *     WHORL_PORTABLE     use no compiler extension at all (builtins, vector types, target attributes): same bits, slower
 *
 * Memory: nothing is allocated but through the host's memory hook. Threads: one thread at a time uses one host.
 * Errors: 0 is good; positive is usable but incomplete; negative is a failure that left the outputs untouched.
 */
#ifndef WHORL_CORE_INCLUDED
#define WHORL_CORE_INCLUDED

#define WHORL_VERSION_MAJOR 0
#define WHORL_VERSION_MINOR 1
#define WHORL_VERSION_PATCH 0
#define WHORL_VERSION_TEXT "0.1.0"
#define WHORL_VERSION 100          /* major * 10000 + minor * 100 + patch */
#define WHORL_CORE_VERSION 100

#include <stddef.h>
#include <stdint.h>

#if defined(WHORL_STATIC) && !defined(WHORL_IMPLEMENTATION)
#define WHORL_IMPLEMENTATION
#endif

#if (defined(__GNUC__) || defined(__clang__)) && !defined(WHORL_PORTABLE)
#define WHORLI_GNU 1
#else
#define WHORLI_GNU 0
#endif

/* The builtin is an instruction on these; elsewhere it would be a call into the compiler's own library. */
#if WHORLI_GNU && (defined(__POPCNT__) || defined(__aarch64__) || defined(_ARCH_PWR7))
#define WHORLI_POPCOUNT 1
#else
#define WHORLI_POPCOUNT 0
#endif

#if defined(__GNUC__) || defined(__clang__)
#define WHORLI_UNUSED __attribute__((unused))
#else
#define WHORLI_UNUSED
#endif

#ifdef WHORL_STATIC
#define WHORL_API static WHORLI_UNUSED
#else
#define WHORL_API extern
#endif

#if WHORLI_GNU
#define WHORLI_RESTRICT __restrict__
#else
#define WHORLI_RESTRICT
#endif

/*
 * Fixed arithmetic under the host's flags: no contraction, no reassociation. Helpers and implementations stand between
 * these two. whorl_arithmetic() tells at run time whether it held. Known not to hold: GCC 12 in C with -ffast-math or
 * -Ofast together with -mfma or an -march that has it (-Ofast alone holds); no order of the two pragmas below mends it.
 */
#if defined(__clang__)
#define WHORLI_ARITHMETIC_BEGIN _Pragma("float_control(precise, on, push)") _Pragma("clang fp contract(off)")
#define WHORLI_ARITHMETIC_END _Pragma("float_control(pop)")
#elif defined(__GNUC__) && (defined(__x86_64__) || defined(__i386__))
/*
 * GCC 12 turns a pair (a b - c d, a d + b c) into one fused fmaddsub whatever fp-contract says; so these instructions
 * are hidden from it. The target must stand first: after the optimize pragma it is lost under -ffast-math.
 */
#define WHORLI_ARITHMETIC_BEGIN \
    _Pragma("GCC push_options") _Pragma("GCC target(\"no-fma\", \"no-fma4\", \"no-avx512f\")") \
    _Pragma("GCC optimize(\"O3\", \"no-fast-math\", \"fp-contract=off\")")
#define WHORLI_ARITHMETIC_END _Pragma("GCC pop_options")
#elif defined(__GNUC__)
#define WHORLI_ARITHMETIC_BEGIN \
    _Pragma("GCC push_options") _Pragma("GCC optimize(\"O3\", \"no-fast-math\", \"fp-contract=off\")")
#define WHORLI_ARITHMETIC_END _Pragma("GCC pop_options")
#else
#define WHORLI_ARITHMETIC_BEGIN
#define WHORLI_ARITHMETIC_END
#endif

#ifdef __cplusplus
#define WHORLI_C_BEGIN extern "C" {
#define WHORLI_C_END }
#else
#define WHORLI_C_BEGIN
#define WHORLI_C_END
#endif

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- statuses ------------------------------------------------------------------------------------------------------ */

/* What a call returns. 0 good, positive usable but incomplete, negative failed. */
typedef int32_t whorl_status;
enum {
    WHORL_OK = 0,
    WHORL_UNFINISHED = 1,       /* the budget of an _advance call is used up: call it again to go on */
    WHORL_NOT_CONVERGED = 2,    /* the work ended at its limit; what converged is there, the rest carries its residual */
    WHORL_BAD_ARGUMENT = -1,    /* an argument is outside its stated range */
    WHORL_NO_MEMORY = -2,       /* the memory hook returned NULL */
    WHORL_OVER_LIMIT = -3,      /* the byte limit is too low: the reason says what would be enough */
    WHORL_TOO_LARGE = -4,       /* a size or count overflows 64 bits, the address space, or the 64 sites */
    WHORL_CANCELLED = -5,       /* the poll hook asked to stop */
    WHORL_NOT_FINITE = -6,      /* a number is NaN or infinite, or became so */
    WHORL_BAD_TEXT = -7,        /* text could not be read: the reason has line, column and advice */
    WHORL_NO_ROOM = -8,         /* the caller's array is too short: the reason says how long it must be */
    WHORL_LEAVES_SPACE = -9,    /* an operator leads out of the space: the reason names the flip and its terms */
    WHORL_NOT_HERMITIAN = -10,  /* an operator had to be Hermitian and is not */
    WHORL_NO_CONVERGENCE = -11  /* an iteration that always converges in exact arithmetic did not */
};

/* A name of the status in a few words, static text, never NULL. */
WHORL_API const char *whorl_status_text(whorl_status status);

#define WHORL_NONE UINT64_MAX /* no index, no state, no such thing */

/* ---- the host ------------------------------------------------------------------------------------------------------ */

/* Why the last failing call failed. */
typedef struct whorl_reason {
    whorl_status status;
    int32_t line;    /* of a text, from 1; 0 where there is none */
    int32_t column;  /* of a text, from 1, in bytes; 0 where there is none */
    uint64_t index;  /* of the offending element of an array; WHORL_NONE where there is none */
    char text[320];  /* one sentence that says what to change; ends with NUL */
} whorl_reason;

/* How far long work has come; handed to the poll hook. */
typedef struct whorl_progress {
    const char *stage; /* static text, a few words */
    uint64_t done;     /* of total; for solvers without a known end, products so far */
    uint64_t total;    /* 0 when it is not known */
} whorl_progress;

/* Memory hook: take returns at least `bytes` bytes aligned to 8, or NULL; give gets the same size back. */
typedef void *(*whorl_take_function)(void *context, size_t bytes);
typedef void (*whorl_give_function)(void *context, void *block, size_t bytes);

/* One block of work. Results depend on `block` only; `worker` (0 .. workers-1) picks scratch memory. */
typedef void (*whorl_body_function)(void *argument, uint64_t block, int32_t worker);

/*
 * Parallel-run hook: call body(argument, b, w) once for every b in 0 .. blocks-1, in any order, on at most `workers`
 * threads with worker numbers w below `workers`, no two bodies at one time with the same w; return when all are done.
 */
typedef void (*whorl_run_function)(void *context, whorl_body_function body, void *argument, uint64_t blocks,
                                   int32_t workers);

/* Poll hook: called by the calling thread during long work. Nonzero asks to stop: the call returns WHORL_CANCELLED. */
typedef int32_t (*whorl_poll_function)(void *context, const whorl_progress *progress);

/*
 * What the library needs from its host. First argument of every call that can fail; one thread at a time uses one host.
 * Fill it with whorl_host_default() and change fields at will between calls.
 */
typedef struct whorl_host {
    whorl_take_function take;
    whorl_give_function give;
    void *memory_context;
    uint64_t byte_limit;  /* no call lets bytes_used grow past it; 0: no limit */
    uint64_t bytes_used;  /* taken and not yet given back */
    uint64_t bytes_peak;  /* the most that bytes_used has been; set it to bytes_used to measure anew */
    uint64_t takes;       /* how often the memory hook was asked */
    int32_t threads;      /* workers at most; 1: the run hook is never entered */
    whorl_run_function run;
    void *run_context;
    whorl_poll_function poll;  /* NULL: never polled */
    void *poll_context;
    whorl_progress progress;   /* written by long work */
    whorl_reason reason;       /* written by the call that failed */
} whorl_host;

/* malloc and free, no limit, one thread, no polling. The run hook is whorl_run_openmp. */
WHORL_API whorl_host whorl_host_default(void);

/*
 * The run hook that uses OpenMP where the file with the implementation was compiled with it, and one thread otherwise.
 * Its workers pick blocks one at a time.
 */
WHORL_API void whorl_run_openmp(void *context, whorl_body_function body, void *argument, uint64_t blocks,
                                int32_t workers);

/* ---- text into a fixed buffer ---------------------------------------------------------------------------------------- */

/*
 * A writer into the caller's buffer. `used` counts the bytes that the whole text has, without the NUL; at most room - 1
 * of them are stored, always with a NUL behind (room >= 1). room = 0 with at = NULL measures.
 */
typedef struct whorl_text {
    char *at;
    uint64_t room;
    uint64_t used;
} whorl_text;

WHORL_API whorl_text whorl_text_over(char *at, uint64_t room);
WHORL_API void whorl_text_add(whorl_text *text, const char *words);
WHORL_API void whorl_text_add_bytes(whorl_text *text, const char *bytes, uint64_t count);
WHORL_API void whorl_text_add_unsigned(whorl_text *text, uint64_t value);
WHORL_API void whorl_text_add_signed(whorl_text *text, int64_t value);
/* The shortest decimal text that reads back as the same double (see whorl_real_write). */
WHORL_API void whorl_text_add_real(whorl_text *text, double value);

/*
 * Exact decimal text of a double, by integer arithmetic: independent of locale, C library and rounding mode.
 * whorl_real_write stores the shortest digits that read back as the same bits, at most WHORL_REAL_TEXT bytes with the NUL;
 * returns the length without it. Form: -?digits, digits.digits, or d.ddde-dd; "nan", "inf", "-inf" for the rest.
 * whorl_real_write_digits stores exactly `digits` (1 .. 40) significant digits, correctly rounded to nearest even, in
 * scientific form.  whorl_real_write_fixed stores `decimals` (0 .. 40) digits behind the point, correctly rounded.
 * whorl_real_read reads an unsigned or signed decimal number ([+-]? digits [. digits] [e [+-]? digits], at least one
 * digit) at the start of text[0 .. length), correctly rounded to nearest even; returns the bytes read, 0 if there is no
 * number there. Overflow reads as infinity (the caller decides), underflow as denormals or zero.
 */
#define WHORL_REAL_TEXT 32
WHORL_API int32_t whorl_real_write(double value, char *text);
WHORL_API int32_t whorl_real_write_digits(double value, int32_t digits, char *text, int32_t room);
WHORL_API int32_t whorl_real_write_fixed(double value, int32_t decimals, char *text, int32_t room);
WHORL_API uint64_t whorl_real_read(const char *text, uint64_t length, double *value);

/* ---- failing --------------------------------------------------------------------------------------------------------- */

/* Sets the host's reason and returns status. */
WHORL_API whorl_status whorl_fail(whorl_host *host, whorl_status status, const char *words);
/* Starts a reason that is built piece by piece: returns a writer over reason.text. The caller returns the status. */
WHORL_API whorl_text whorl_fail_begin(whorl_host *host, whorl_status status);

/* ---- checked sizes --------------------------------------------------------------------------------------------------- */

/* a * b and a + b, or UINT64_MAX where they overflow. UINT64_MAX stays itself, so chains need one check at the end. */
static inline uint64_t whorl_size_multiply(uint64_t a, uint64_t b)
{
    return (a != 0 && b > UINT64_MAX / a) ? UINT64_MAX : a * b;
}
static inline uint64_t whorl_size_add(uint64_t a, uint64_t b)
{
    return b > UINT64_MAX - a ? UINT64_MAX : a + b;
}
/* n choose k exactly, or UINT64_MAX where it does not fit below it; 0 for k < 0 or k > n. Cost O(k). */
WHORL_API uint64_t whorl_binomial(int32_t n, int32_t k);

/* ---- memory ---------------------------------------------------------------------------------------------------------- */

/* One block taken from the host. `start` and `taken` are what the memory hook knows; `at` is 64-aligned. */
typedef struct whorl_block {
    void *start;
    size_t taken;
    char *at;
    uint64_t bytes; /* announced size: what counts against byte_limit and what an arena spends on it */
} whorl_block;

/* The announced size of a block that holds `payload` bytes: rounded up to 64, plus 64. UINT64_MAX on overflow. */
WHORL_API uint64_t whorl_block_bytes(uint64_t payload);
/*
 * Takes a block for `payload` bytes, 64-aligned, contents undefined. Errors: WHORL_TOO_LARGE, WHORL_OVER_LIMIT,
 * WHORL_NO_MEMORY; the block is then zero.
 */
WHORL_API whorl_status whorl_block_take(whorl_host *host, uint64_t payload, whorl_block *block);
/* Gives it back; legal on a zero block. */
WHORL_API void whorl_block_give(whorl_host *host, whorl_block *block);

/*
 * Measured and carved: one function asks for its pieces twice, first with base == NULL to add up the bytes, then over a
 * block of exactly that size, so that the announced size cannot drift from the used one. Each piece is 64-aligned.
 */
typedef struct whorl_layout {
    char *base;     /* NULL while measuring */
    uint64_t bytes; /* so far; UINT64_MAX after an overflow */
} whorl_layout;
/* The next piece: count elements of `size` bytes. NULL while measuring. */
WHORL_API void *whorl_layout_carve(whorl_layout *layout, uint64_t count, uint64_t size);
/* After measuring: takes the block and rewinds the layout over it. Errors as whorl_block_take. */
WHORL_API whorl_status whorl_layout_take(whorl_host *host, whorl_layout *layout, whorl_block *block);

/*
 * An arena: memory of the caller that serves a host instead of malloc. Give it whole to whorl_arena_use. Announced sizes
 * hold for a base that is 64-aligned. Blocks may be given back in any order; space is reused once everything above it
 * has been given back.
 */
typedef struct whorl_arena {
    char *base;
    uint64_t room;
    uint64_t top;  /* bytes in use from base */
    uint64_t last; /* offset of the topmost block, WHORL_NONE when empty */
    uint64_t peak; /* the highest top so far */
} whorl_arena;
WHORL_API void whorl_arena_make(whorl_arena *arena, void *memory, uint64_t bytes);
/* Sets take, give and memory_context of the host to this arena, which must outlive every object made with it. */
WHORL_API void whorl_arena_use(whorl_arena *arena, whorl_host *host);

/* ---- work ------------------------------------------------------------------------------------------------------------ */

/* Tells the poll hook what runs now. `stage` must be static text. */
WHORL_API void whorl_stage(whorl_host *host, const char *stage, uint64_t done, uint64_t total);
/* Polls once. WHORL_OK, or WHORL_CANCELLED with its reason. */
WHORL_API whorl_status whorl_poll(whorl_host *host);
/*
 * Runs body(argument, b, w) for b = 0 .. blocks-1, on the host's threads where threads > 1, and polls between batches of
 * at most 2^24 element updates (`updates` is how many one block does; at least 1). Errors: WHORL_CANCELLED.
 */
WHORL_API whorl_status whorl_run(whorl_host *host, whorl_body_function body, void *argument, uint64_t blocks,
                                 uint64_t updates);
/* Workers a call may use: host->threads, at least 1 and at most WHORL_MOST_WORKERS. */
#define WHORL_MOST_WORKERS 256
WHORL_API int32_t whorl_workers(const whorl_host *host);

/* ---- bits ------------------------------------------------------------------------------------------------------------ */

/* Number of set bits. */
static inline int32_t whorl_bits_count(uint64_t word)
{
#if WHORLI_POPCOUNT
    return (int32_t)__builtin_popcountll((unsigned long long)word);
#else
    word -= (word >> 1) & UINT64_C(0x5555555555555555);
    word = (word & UINT64_C(0x3333333333333333)) + ((word >> 2) & UINT64_C(0x3333333333333333));
    word = (word + (word >> 4)) & UINT64_C(0x0f0f0f0f0f0f0f0f);
    return (int32_t)((word * UINT64_C(0x0101010101010101)) >> 56);
#endif
}
/* Number of set bits modulo 2. */
static inline int32_t whorl_bits_parity(uint64_t word)
{
#if WHORLI_POPCOUNT
    return (int32_t)__builtin_popcountll((unsigned long long)word) & 1;
#elif WHORLI_GNU && (defined(__x86_64__) || defined(__i386__))
    return (int32_t)__builtin_parityll((unsigned long long)word); /* the parity flag */
#else
    word ^= word >> 32;
    word ^= word >> 16;
    word ^= word >> 8;
    word ^= word >> 4;
    return (int32_t)((UINT64_C(0x6996) >> (word & 15)) & 1);
#endif
}
/* Index of the lowest set bit; 64 for 0. */
static inline int32_t whorl_bits_lowest(uint64_t word)
{
#if WHORLI_GNU
    return word == 0 ? 64 : (int32_t)__builtin_ctzll((unsigned long long)word);
#else
    return word == 0 ? 64 : whorl_bits_count((word & (0 - word)) - 1);
#endif
}
/* Index of the highest set bit; -1 for 0. */
static inline int32_t whorl_bits_highest(uint64_t word)
{
#if WHORLI_GNU
    return word == 0 ? -1 : 63 - (int32_t)__builtin_clzll((unsigned long long)word);
#else
    word |= word >> 1;
    word |= word >> 2;
    word |= word >> 4;
    word |= word >> 8;
    word |= word >> 16;
    word |= word >> 32;
    return whorl_bits_count(word) - 1;
#endif
}
/* A mask of the `count` lowest bits, 0 <= count <= 64. */
static inline uint64_t whorl_bits_low(int32_t count)
{
    return count >= 64 ? UINT64_MAX : (UINT64_C(1) << count) - 1;
}
/* The bits of word under mask, packed to the low end in order; and its inverse, spread to the places of mask. */
WHORL_API uint64_t whorl_bits_gather(uint64_t word, uint64_t mask);
WHORL_API uint64_t whorl_bits_scatter(uint64_t word, uint64_t mask);

/* ---- numbers --------------------------------------------------------------------------------------------------------- */

/* A complex scalar by value. Arrays of complex numbers are plain doubles or floats: re, im, re, im, ... */
typedef struct whorl_complex {
    double re, im;
} whorl_complex;

static inline whorl_complex whorl_complex_of(double re, double im)
{
    whorl_complex c;
    c.re = re;
    c.im = im;
    return c;
}
static inline whorl_complex whorl_complex_multiply(whorl_complex a, whorl_complex b)
{
    return whorl_complex_of(a.re * b.re - a.im * b.im, a.re * b.im + a.im * b.re);
}

/* The four element types of vectors. 0 means: the library chooses, and says what it chose. */
typedef int32_t whorl_element;
enum {
    WHORL_ELEMENT_DEFAULT = 0,
    WHORL_REAL_DOUBLE = 1,
    WHORL_COMPLEX_DOUBLE = 2,
    WHORL_REAL_FLOAT = 3,
    WHORL_COMPLEX_FLOAT = 4
};
static inline int32_t whorl_element_is_complex(whorl_element element)
{
    return element == WHORL_COMPLEX_DOUBLE || element == WHORL_COMPLEX_FLOAT;
}
static inline int32_t whorl_element_is_float(whorl_element element)
{
    return element == WHORL_REAL_FLOAT || element == WHORL_COMPLEX_FLOAT;
}
/* Bytes of one element: 8, 16, 4, 8; 0 for anything else. */
static inline uint64_t whorl_element_bytes(whorl_element element)
{
    return element == WHORL_REAL_DOUBLE ? 8 : element == WHORL_COMPLEX_DOUBLE ? 16
         : element == WHORL_REAL_FLOAT ? 4 : element == WHORL_COMPLEX_FLOAT ? 8 : 0;
}

/* 1 if value is neither NaN nor infinite, by its exponent bits: right under any compiler flag. */
WHORL_API int32_t whorl_is_finite(double value);

/*
 * What the arithmetic of this build does, found by computing: 0 if it is IEEE 754 double with every operation rounded
 * once. The promise of equal bits is for builds where this returns 0.
 */
enum {
    WHORL_ARITHMETIC_CONTRACTS = 1,      /* a*b + c is fused */
    WHORL_ARITHMETIC_REASSOCIATES = 2,   /* (a + b) + c is reordered */
    WHORL_ARITHMETIC_FLUSHES = 4,        /* denormals become zero */
    WHORL_ARITHMETIC_EXTENDS = 8         /* intermediate results carry excess precision (x87) */
};
WHORL_API int32_t whorl_arithmetic(void);

/* ---- sort ------------------------------------------------------------------------------------------------------------ */

/* Negative, zero or positive as *a comes before, with or after *b. */
typedef int32_t (*whorl_order_function)(const void *a, const void *b);
/* Sorts count elements of `size` bytes (1 .. 64) in place, O(count log count) worst case, no memory; not stable. */
WHORL_API void whorl_sort(void *base, uint64_t count, uint64_t size, whorl_order_function order);
/* Sorts integers ascending, in place. */
WHORL_API void whorl_sort_states(uint64_t *states, uint64_t count);

/* ---- random numbers -------------------------------------------------------------------------------------------------- */

/*
 * Counter-based random numbers: Philox 4x32 with ten rounds (Salmon, Moraes, Dror and Shaw, SC11, 2011). Key = seed (low
 * word first), counter words = counter low, counter high, stream low, stream high. A number is a pure function of
 * (seed, stream, counter): results that use it name all three, and no state is kept.
 */
typedef struct whorl_random_block {
    uint32_t word[4];
} whorl_random_block;
WHORL_API whorl_random_block whorl_random_words(uint64_t seed, uint64_t stream, uint64_t counter);
/* 64 random bits: words 0 (low) and 1 (high) of the block. */
WHORL_API uint64_t whorl_random_bits(uint64_t seed, uint64_t stream, uint64_t counter);
/* Uniform in [0, 1): the top 53 of the 64 bits, times 2^-53. */
WHORL_API double whorl_random_uniform(uint64_t seed, uint64_t stream, uint64_t counter);
/*
 * Mean 0, variance 1, close to normal, and the same bits everywhere because it uses no libm: the sum of twelve uniform
 * numbers (counters 12 c .. 12 c + 11) minus six. Tails end at 6 sigma. Serves start vectors and disorder alike.
 */
WHORL_API double whorl_random_normal(uint64_t seed, uint64_t stream, uint64_t counter);

/* ---- reproducible sums ----------------------------------------------------------------------------------------------- */

/*
 * Sums of products with bits that depend on the numbers and their indices only. Leaves of 128 elements; in a leaf, lane
 * j = index mod 8 adds its products in order; the lanes are added ((0+4)+(2+6)) + ((1+5)+(3+7)); leaves are added by the
 * pairwise tree of a binary counter (equal sizes combine, left operand first; at the end the remaining subtrees combine from the right).
 * A part that starts at a multiple of a power of two of leaves and is that long is a subtree, so blocks may be added
 * by different threads and combined by whorl_tree_add with the same bits.
 */
#define WHORL_LEAF 128
typedef struct whorl_tree {
    whorl_complex part[64];
    uint64_t count;
} whorl_tree;
static inline void whorl_tree_clear(whorl_tree *tree)
{
    tree->count = 0;
}
/* Adds the next leaf (or equal-sized subtree), in order of index. */
WHORL_API void whorl_tree_add(whorl_tree *tree, whorl_complex leaf);
WHORL_API whorl_complex whorl_tree_total(const whorl_tree *tree);

/*
 * <x, y> = sum over i of conj(x_i) y_i for `count` elements of one type, accumulated in double, on one thread. The first
 * is a leaf (count <= 128); the second a whole vector by the tree. For float elements products are taken in double.
 */
WHORL_API whorl_complex whorl_leaf_dot(whorl_element element, const void *x, const void *y, uint64_t count);
WHORL_API whorl_complex whorl_dot(whorl_element element, const void *x, const void *y, uint64_t count);
/* The sum of count doubles by the same leaves and tree. */
WHORL_API double whorl_sum_reals(const double *x, uint64_t count);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_CORE_INCLUDED */

/* ==== implementation ================================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_CORE_IMPLEMENTED)
#define WHORL_CORE_IMPLEMENTED

#include <stdlib.h>
#include <string.h>
#ifdef _OPENMP
#include <omp.h>
#endif

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>status -------------------------------------------------------------------------------------------------------- */

const char *whorl_status_text(whorl_status status)
{
    switch (status) {
    case WHORL_OK: return "good";
    case WHORL_UNFINISHED: return "not finished: advance again";
    case WHORL_NOT_CONVERGED: return "not converged";
    case WHORL_BAD_ARGUMENT: return "bad argument";
    case WHORL_NO_MEMORY: return "out of memory";
    case WHORL_OVER_LIMIT: return "over the byte limit";
    case WHORL_TOO_LARGE: return "too large";
    case WHORL_CANCELLED: return "cancelled";
    case WHORL_NOT_FINITE: return "not a finite number";
    case WHORL_BAD_TEXT: return "text not understood";
    case WHORL_NO_ROOM: return "array too short";
    case WHORL_LEAVES_SPACE: return "operator leaves the space";
    case WHORL_NOT_HERMITIAN: return "not Hermitian";
    case WHORL_NO_CONVERGENCE: return "iteration failed";
    default: return "unknown status";
    }
}

whorl_text whorl_fail_begin(whorl_host *host, whorl_status status)
{
    host->reason.status = status;
    host->reason.line = 0;
    host->reason.column = 0;
    host->reason.index = WHORL_NONE;
    return whorl_text_over(host->reason.text, sizeof host->reason.text);
}

whorl_status whorl_fail(whorl_host *host, whorl_status status, const char *words)
{
    whorl_text text = whorl_fail_begin(host, status);
    whorl_text_add(&text, words);
    return status;
}

/* ---- >>text ---------------------------------------------------------------------------------------------------------- */

whorl_text whorl_text_over(char *at, uint64_t room)
{
    whorl_text text;
    text.at = at;
    text.room = room;
    text.used = 0;
    if (room > 0)
        at[0] = '\0';
    return text;
}

void whorl_text_add_bytes(whorl_text *text, const char *bytes, uint64_t count)
{
    uint64_t fit = 0;
    if (text->room > text->used + 1)
        fit = text->room - 1 - text->used;
    if (fit > count)
        fit = count;
    if (fit > 0) {
        char *end = text->at + text->used;
        memcpy(end, bytes, (size_t)fit); /* a loop through text->at lost bytes under clang 14 -O2 */
        end[fit] = '\0';
    }
    text->used += count;
}

void whorl_text_add(whorl_text *text, const char *words)
{
    whorl_text_add_bytes(text, words, (uint64_t)strlen(words));
}

void whorl_text_add_unsigned(whorl_text *text, uint64_t value)
{
    char digits[20];
    int32_t at = 20;
    do {
        digits[--at] = (char)('0' + (int)(value % 10));
        value /= 10;
    } while (value != 0);
    whorl_text_add_bytes(text, digits + at, (uint64_t)(20 - at));
}

void whorl_text_add_signed(whorl_text *text, int64_t value)
{
    if (value < 0)
        whorl_text_add_bytes(text, "-", 1);
    whorl_text_add_unsigned(text, value < 0 ? 0 - (uint64_t)value : (uint64_t)value);
}

void whorl_text_add_real(whorl_text *text, double value)
{
    char digits[WHORL_REAL_TEXT];
    whorl_text_add_bytes(text, digits, (uint64_t)whorl_real_write(value, digits));
}

/* ---- >>sizes --------------------------------------------------------------------------------------------------------- */

uint64_t whorl_binomial(int32_t n, int32_t k)
{
    uint64_t value = 1;
    int32_t i;
    if (k < 0 || k > n)
        return 0;
    if (k > n - k)
        k = n - k;
    for (i = 1; i <= k; i++) {
        /* value * (n - k + i) / i is exact; split so that the product overflows only where the result does */
        uint64_t factor = (uint64_t)(n - k + i), divisor = (uint64_t)i;
        uint64_t whole = value / divisor, rest = value % divisor;
        value = whorl_size_add(whorl_size_multiply(whole, factor), rest * factor / divisor);
        if (value == UINT64_MAX)
            return value;
    }
    return value;
}

/* ---- >>memory -------------------------------------------------------------------------------------------------------- */

/*
 * The hook promises alignment 8 only, so a block asks for 56 bytes more than its payload and aligns inside. The arena puts
 * a header of 8 bytes in front of what it returns: 8 + payload + 56 = payload + 64 is what each block costs there.
 */
#define WHORLI_BLOCK_SLACK 56

uint64_t whorl_block_bytes(uint64_t payload)
{
    uint64_t rounded = whorl_size_add(payload, 63);
    return rounded == UINT64_MAX ? rounded : whorl_size_add(rounded & ~UINT64_C(63), 64);
}

whorl_status whorl_block_take(whorl_host *host, uint64_t payload, whorl_block *block)
{
    uint64_t bytes = whorl_block_bytes(payload), free_bytes;
    size_t request;
    void *start;
    memset(block, 0, sizeof *block);
    if (bytes >= (UINT64_C(1) << 62) || bytes - 8 > (uint64_t)SIZE_MAX / 2)
        return whorl_fail(host, WHORL_TOO_LARGE, "the memory asked for exceeds the address space: ask for less at a time");
    free_bytes = host->byte_limit > host->bytes_used ? host->byte_limit - host->bytes_used : 0;
    if (host->byte_limit != 0 && bytes > free_bytes) {
        whorl_text text = whorl_fail_begin(host, WHORL_OVER_LIMIT);
        whorl_text_add(&text, "the byte limit of ");
        whorl_text_add_unsigned(&text, host->byte_limit);
        whorl_text_add(&text, " is too low: raise it to at least ");
        whorl_text_add_unsigned(&text, host->bytes_used + bytes);
        return WHORL_OVER_LIMIT;
    }
    request = (size_t)(bytes - 64 + WHORLI_BLOCK_SLACK);
    host->takes++;
    start = host->take(host->memory_context, request);
    if (start == NULL) {
        whorl_text text = whorl_fail_begin(host, WHORL_NO_MEMORY);
        whorl_text_add(&text, "the memory hook gave no block of ");
        whorl_text_add_unsigned(&text, bytes);
        whorl_text_add(&text, " bytes: free memory or make the problem smaller");
        return WHORL_NO_MEMORY;
    }
    block->start = start;
    block->taken = request;
    block->at = (char *)start + ((64 - ((uintptr_t)start & 63)) & 63);
    block->bytes = bytes;
    host->bytes_used += bytes;
    if (host->bytes_used > host->bytes_peak)
        host->bytes_peak = host->bytes_used;
    return WHORL_OK;
}

void whorl_block_give(whorl_host *host, whorl_block *block)
{
    if (block->start == NULL)
        return;
    host->give(host->memory_context, block->start, block->taken);
    host->bytes_used -= block->bytes;
    memset(block, 0, sizeof *block);
}

void *whorl_layout_carve(whorl_layout *layout, uint64_t count, uint64_t size)
{
    char *piece = layout->base == NULL ? NULL : layout->base + layout->bytes;
    uint64_t bytes = whorl_size_add(whorl_size_multiply(count, size), 63);
    layout->bytes = bytes == UINT64_MAX ? bytes : whorl_size_add(layout->bytes, bytes & ~UINT64_C(63));
    return piece;
}

whorl_status whorl_layout_take(whorl_host *host, whorl_layout *layout, whorl_block *block)
{
    whorl_status status = whorl_block_take(host, layout->bytes, block);
    layout->base = block->at;
    layout->bytes = 0;
    return status;
}

static void *whorli_malloc_take(void *context, size_t bytes)
{
    (void)context;
    return malloc(bytes);
}

static void whorli_malloc_give(void *context, void *block, size_t bytes)
{
    (void)context;
    (void)bytes;
    free(block);
}

/* Each block: an 8-byte header (offset of the block below, times 2, plus 1 when given back), then the memory. */
static void *whorli_arena_take(void *context, size_t bytes)
{
    whorl_arena *arena = (whorl_arena *)context;
    uint64_t header, cost = ((uint64_t)bytes + 8 + 63) & ~UINT64_C(63);
    if (bytes > SIZE_MAX - 128 || cost > arena->room - arena->top)
        return NULL;
    header = arena->last == WHORL_NONE ? (WHORL_NONE << 1) : arena->last << 1;
    memcpy(arena->base + arena->top, &header, 8);
    arena->last = arena->top;
    arena->top += cost;
    if (arena->top > arena->peak)
        arena->peak = arena->top;
    return arena->base + arena->last + 8;
}

static void whorli_arena_give(void *context, void *block, size_t bytes)
{
    whorl_arena *arena = (whorl_arena *)context;
    char *place = (char *)block - 8;
    uint64_t header;
    (void)bytes;
    memcpy(&header, place, 8);
    header |= 1;
    memcpy(place, &header, 8);
    while (arena->last != WHORL_NONE) {
        memcpy(&header, arena->base + arena->last, 8);
        if ((header & 1) == 0)
            break;
        arena->top = arena->last;
        arena->last = (header >> 1) == (WHORL_NONE >> 1) ? WHORL_NONE : header >> 1;
    }
}

void whorl_arena_make(whorl_arena *arena, void *memory, uint64_t bytes)
{
    uint64_t shift = memory == NULL ? 0 : (64 - ((uintptr_t)memory & 63)) & 63;
    arena->base = (char *)memory + shift;
    arena->room = memory == NULL || bytes < shift ? 0 : bytes - shift;
    arena->top = 0;
    arena->last = WHORL_NONE;
    arena->peak = 0;
}

void whorl_arena_use(whorl_arena *arena, whorl_host *host)
{
    host->take = whorli_arena_take;
    host->give = whorli_arena_give;
    host->memory_context = arena;
}

/* ---- >>host ---------------------------------------------------------------------------------------------------------- */

whorl_host whorl_host_default(void)
{
    whorl_host host;
    memset(&host, 0, sizeof host);
    host.take = whorli_malloc_take;
    host.give = whorli_malloc_give;
    host.threads = 1;
    host.run = whorl_run_openmp;
    host.progress.stage = "idle";
    host.reason.index = WHORL_NONE;
    return host;
}

void whorl_run_openmp(void *context, whorl_body_function body, void *argument, uint64_t blocks, int32_t workers)
{
    (void)context;
#ifdef _OPENMP
    if (workers > 1) {
        int64_t block, last = (int64_t)blocks;
#pragma omp parallel for schedule(dynamic, 1) num_threads(workers)
        for (block = 0; block < last; block++)
            body(argument, (uint64_t)block, (int32_t)omp_get_thread_num());
        return;
    }
#endif
    {
        uint64_t block;
        (void)workers;
        for (block = 0; block < blocks; block++)
            body(argument, block, 0);
    }
}

void whorl_stage(whorl_host *host, const char *stage, uint64_t done, uint64_t total)
{
    host->progress.stage = stage;
    host->progress.done = done;
    host->progress.total = total;
}

whorl_status whorl_poll(whorl_host *host)
{
    if (host->poll == NULL || host->poll(host->poll_context, &host->progress) == 0)
        return WHORL_OK;
    return whorl_fail(host, WHORL_CANCELLED, "stopped because the poll hook asked for it");
}

int32_t whorl_workers(const whorl_host *host)
{
    if (host->threads < 1)
        return 1;
    return host->threads > WHORL_MOST_WORKERS ? WHORL_MOST_WORKERS : host->threads;
}

/* A window of the blocks, so that polling can stand between batches. */
typedef struct whorli_batch {
    whorl_body_function body;
    void *argument;
    uint64_t first;
} whorli_batch;

static void whorli_batch_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_batch *batch = (const whorli_batch *)argument;
    batch->body(batch->argument, batch->first + block, worker);
}

whorl_status whorl_run(whorl_host *host, whorl_body_function body, void *argument, uint64_t blocks, uint64_t updates)
{
    const uint64_t most = UINT64_C(1) << 24;
    uint64_t first, batch = updates == 0 ? most : most / updates;
    int32_t workers = whorl_workers(host);
    if (batch == 0)
        batch = 1;
    if (host->poll == NULL)
        batch = blocks;
    for (first = 0; first < blocks; first += batch) {
        uint64_t count = blocks - first < batch ? blocks - first : batch;
        whorl_status status = whorl_poll(host);
        if (status != WHORL_OK)
            return status;
        if (workers > 1 && count > 1 && host->run != NULL) {
            whorli_batch window;
            window.body = body;
            window.argument = argument;
            window.first = first;
            host->run(host->run_context, whorli_batch_body, &window, count, workers);
        } else {
            uint64_t b;
            for (b = 0; b < count; b++)
                body(argument, first + b, 0);
        }
    }
    return WHORL_OK;
}

/* ---- >>bits ---------------------------------------------------------------------------------------------------------- */

uint64_t whorl_bits_gather(uint64_t word, uint64_t mask)
{
    uint64_t packed = 0, place = 1;
    for (; mask != 0; mask &= mask - 1, place <<= 1)
        if ((word & mask & (0 - mask)) != 0)
            packed |= place;
    return packed;
}

uint64_t whorl_bits_scatter(uint64_t word, uint64_t mask)
{
    uint64_t spread = 0;
    for (; mask != 0; mask &= mask - 1, word >>= 1)
        if ((word & 1) != 0)
            spread |= mask & (0 - mask);
    return spread;
}

/* ---- >>sort ---------------------------------------------------------------------------------------------------------- */

/* Heapsort: in place, no bad case. Elements move through a buffer of one element. */
static void whorli_sift(char *base, uint64_t root, uint64_t count, uint64_t size, whorl_order_function order)
{
    char held[64];
    memcpy(held, base + root * size, (size_t)size);
    for (;;) {
        uint64_t child = 2 * root + 1;
        if (child >= count)
            break;
        if (child + 1 < count && order(base + child * size, base + (child + 1) * size) < 0)
            child++;
        if (order(held, base + child * size) >= 0)
            break;
        memcpy(base + root * size, base + child * size, (size_t)size);
        root = child;
    }
    memcpy(base + root * size, held, (size_t)size);
}

void whorl_sort(void *base, uint64_t count, uint64_t size, whorl_order_function order)
{
    char *at = (char *)base;
    uint64_t i;
    if (count < 2 || size == 0 || size > 64)
        return;
    for (i = count / 2; i-- > 0;)
        whorli_sift(at, i, count, size, order);
    for (i = count; i-- > 1;) {
        char held[64];
        memcpy(held, at, (size_t)size);
        memcpy(at, at + i * size, (size_t)size);
        memcpy(at + i * size, held, (size_t)size);
        whorli_sift(at, 0, i, size, order);
    }
}

static int32_t whorli_order_states(const void *a, const void *b)
{
    uint64_t left, right;
    memcpy(&left, a, 8);
    memcpy(&right, b, 8);
    return (left > right) - (left < right);
}

void whorl_sort_states(uint64_t *states, uint64_t count)
{
    whorl_sort(states, count, 8, whorli_order_states);
}

/* ---- >>random -------------------------------------------------------------------------------------------------------- */

whorl_random_block whorl_random_words(uint64_t seed, uint64_t stream, uint64_t counter)
{
    whorl_random_block block;
    uint32_t key0 = (uint32_t)seed, key1 = (uint32_t)(seed >> 32);
    uint32_t a = (uint32_t)counter, b = (uint32_t)(counter >> 32);
    uint32_t c = (uint32_t)stream, d = (uint32_t)(stream >> 32);
    int32_t round;
    for (round = 0; round < 10; round++) {
        uint64_t product0 = (uint64_t)UINT32_C(0xD2511F53) * a;
        uint64_t product1 = (uint64_t)UINT32_C(0xCD9E8D57) * c;
        a = (uint32_t)(product1 >> 32) ^ b ^ key0;
        b = (uint32_t)product1;
        c = (uint32_t)(product0 >> 32) ^ d ^ key1;
        d = (uint32_t)product0;
        key0 += UINT32_C(0x9E3779B9);
        key1 += UINT32_C(0xBB67AE85);
    }
    block.word[0] = a;
    block.word[1] = b;
    block.word[2] = c;
    block.word[3] = d;
    return block;
}

uint64_t whorl_random_bits(uint64_t seed, uint64_t stream, uint64_t counter)
{
    whorl_random_block block = whorl_random_words(seed, stream, counter);
    return block.word[0] | (uint64_t)block.word[1] << 32;
}

double whorl_random_uniform(uint64_t seed, uint64_t stream, uint64_t counter)
{
    return (double)(whorl_random_bits(seed, stream, counter) >> 11) * (1.0 / 9007199254740992.0);
}

double whorl_random_normal(uint64_t seed, uint64_t stream, uint64_t counter)
{
    double total = 0.0;
    uint64_t i;
    for (i = 0; i < 12; i++)
        total += whorl_random_uniform(seed, stream, 12 * counter + i);
    return total - 6.0;
}

/* ---- >>numbers ------------------------------------------------------------------------------------------------------- */

int32_t whorl_is_finite(double value)
{
    uint64_t bits;
    memcpy(&bits, &value, 8);
    return ((bits >> 52) & 0x7ff) != 0x7ff;
}

/* ---- >>sums ---------------------------------------------------------------------------------------------------------- */

static whorl_complex whorli_complex_add(whorl_complex a, whorl_complex b)
{
    return whorl_complex_of(a.re + b.re, a.im + b.im);
}

void whorl_tree_add(whorl_tree *tree, whorl_complex leaf)
{
    uint64_t level = 0, ones = tree->count;
    for (; (ones & 1) != 0; ones >>= 1)
        leaf = whorli_complex_add(tree->part[level++], leaf);
    tree->part[level] = leaf;
    tree->count++;
}

whorl_complex whorl_tree_total(const whorl_tree *tree)
{
    whorl_complex total = {0.0, 0.0};
    uint64_t level, ones = tree->count;
    int32_t started = 0;
    for (level = 0; ones != 0; level++, ones >>= 1)
        if ((ones & 1) != 0) {
            total = started ? whorli_complex_add(tree->part[level], total) : tree->part[level];
            started = 1;
        }
    return total;
}

/* ---- >>decimal ------------------------------------------------------------------------------------------------------- */

/*
 * A double is m 2^e with integers m < 2^53 and e. Written out exactly it is an integer in base 10^9 times a power of ten:
 * m 2^e for e >= 0, and m 5^-e times 10^e below. 767 digits do for every double.
 */
#define WHORLI_DECIMAL_LIMBS 90
typedef struct whorli_decimal {
    char digit[WHORLI_DECIMAL_LIMBS * 9 + 1]; /* '0'..'9', first one not '0' (but for zero: count 0) */
    int32_t count;
    int32_t point; /* value = 0.d1 d2 d3 ... times 10^point */
} whorli_decimal;

static uint64_t whorli_real_bits(double value)
{
    uint64_t bits;
    memcpy(&bits, &value, 8);
    return bits;
}

static double whorli_real_of_bits(uint64_t bits)
{
    double value;
    memcpy(&value, &bits, 8);
    return value;
}

/* limbs[0 .. count) *= factor < 2^31, base 10^9, least significant first; returns the new count. */
static int32_t whorli_limbs_multiply(uint32_t *limbs, int32_t count, uint32_t factor)
{
    uint64_t carry = 0;
    int32_t i;
    for (i = 0; i < count; i++) {
        carry += (uint64_t)limbs[i] * factor;
        limbs[i] = (uint32_t)(carry % 1000000000u);
        carry /= 1000000000u;
    }
    for (; carry != 0; carry /= 1000000000u)
        limbs[count++] = (uint32_t)(carry % 1000000000u);
    return count;
}

/* All digits of a finite value, its sign left out. */
static void whorli_decimal_of(double value, whorli_decimal *decimal)
{
    uint32_t limbs[WHORLI_DECIMAL_LIMBS];
    uint64_t bits = whorli_real_bits(value), m = bits & ((UINT64_C(1) << 52) - 1);
    int32_t e = (int32_t)((bits >> 52) & 0x7ff), count = 0, left, i, at = 0;
    if (e == 0)
        e = 1;
    else
        m |= UINT64_C(1) << 52;
    e -= 1075;
    decimal->count = 0;
    decimal->point = 0;
    if (m == 0)
        return;
    while ((m & 1) == 0) { /* fewer digits to make */
        m >>= 1;
        e++;
    }
    for (; m != 0; m /= 1000000000u)
        limbs[count++] = (uint32_t)(m % 1000000000u);
    for (left = e; left > 0; left -= 30)
        count = whorli_limbs_multiply(limbs, count, UINT32_C(1) << (left < 30 ? left : 30));
    for (left = -e; left > 0; left -= 12) {
        uint32_t five = 1;
        for (i = 0; i < 12 && i < left; i++)
            five *= 5;
        count = whorli_limbs_multiply(limbs, count, five);
    }
    for (i = count; i-- > 0;) {
        uint32_t limb = limbs[i];
        int32_t k;
        for (k = 8; k >= 0; k--) {
            decimal->digit[at + k] = (char)('0' + (int)(limb % 10));
            limb /= 10;
        }
        at += 9;
    }
    for (i = 0; decimal->digit[i] == '0'; i++)
        ;
    memmove(decimal->digit, decimal->digit + i, (size_t)(at - i));
    decimal->count = at - i;
    decimal->point = decimal->count + (e < 0 ? e : 0);
}

/* The decimal cut to `keep` digits (0 or more), rounded to nearest, ties to even; trailing zeros are not kept. */
static void whorli_decimal_round(whorli_decimal *decimal, int32_t keep)
{
    int32_t up = 0, i;
    if (keep < decimal->count) {
        up = decimal->digit[keep] > '5';
        if (decimal->digit[keep] == '5') {
            for (i = keep + 1; i < decimal->count && decimal->digit[i] == '0'; i++)
                ;
            up = i < decimal->count || (keep > 0 && ((decimal->digit[keep - 1] - '0') & 1) != 0);
        }
        decimal->count = keep;
    }
    if (up) {
        for (i = keep; i > 0 && decimal->digit[i - 1] == '9'; i--)
            ;
        if (i <= 0) {
            decimal->digit[0] = '1';
            decimal->count = 1;
            decimal->point++;
        } else {
            decimal->digit[i - 1]++;
            decimal->count = i;
        }
    }
    while (decimal->count > 0 && decimal->digit[decimal->count - 1] == '0')
        decimal->count--;
}

/* Scientific text d.ddde-dd with `digits` digits, zeros behind the ones there are. */
static void whorli_text_scientific(whorl_text *text, const whorli_decimal *decimal, int32_t digits)
{
    int32_t i;
    for (i = 0; i < digits; i++) {
        if (i == 1)
            whorl_text_add_bytes(text, ".", 1);
        whorl_text_add_bytes(text, i < decimal->count ? decimal->digit + i : "0", 1);
    }
    whorl_text_add_bytes(text, "e", 1);
    whorl_text_add_signed(text, decimal->count == 0 ? 0 : decimal->point - 1);
}

/* Plain text with `decimals` digits behind the point. */
static void whorli_text_plain(whorl_text *text, const whorli_decimal *decimal, int32_t decimals)
{
    int32_t i;
    if (decimal->point <= 0)
        whorl_text_add_bytes(text, "0", 1);
    for (i = 0; i < decimal->point; i++)
        whorl_text_add_bytes(text, i < decimal->count ? decimal->digit + i : "0", 1);
    if (decimals > 0)
        whorl_text_add_bytes(text, ".", 1);
    for (i = decimal->point; i < decimal->point + decimals; i++)
        whorl_text_add_bytes(text, i >= 0 && i < decimal->count ? decimal->digit + i : "0", 1);
}

/* Sign, or the whole text of what is not finite: then 1. */
static int32_t whorli_text_special(whorl_text *text, double value)
{
    uint64_t bits = whorli_real_bits(value);
    if (!whorl_is_finite(value) && (bits & ((UINT64_C(1) << 52) - 1)) != 0) {
        whorl_text_add(text, "nan");
        return 1;
    }
    if (bits >> 63 != 0)
        whorl_text_add(text, "-");
    if (!whorl_is_finite(value)) {
        whorl_text_add(text, "inf");
        return 1;
    }
    return 0;
}

/* Whether 0.d1 d2 ... 10^point reads as the finite value of these bits (without sign). */
static int32_t whorli_decimal_reads(const whorli_decimal *decimal, uint64_t bits)
{
    char text[48];
    double back = 0.0;
    whorl_text writer = whorl_text_over(text, sizeof text);
    whorli_text_scientific(&writer, decimal, decimal->count);
    return whorl_real_read(text, writer.used, &back) == writer.used && whorli_real_bits(back) == bits;
}

/* The neighbour of a rounded decimal on the other side of the exact value: one unit in digit `keep` up or down. */
static void whorli_decimal_other(const whorli_decimal *exact, whorli_decimal *rounded, int32_t keep)
{
    whorli_decimal cut = *exact;
    int32_t i;
    if (keep >= exact->count)
        return;
    cut.count = keep; /* cut towards zero */
    while (cut.count > 0 && cut.digit[cut.count - 1] == '0')
        cut.count--;
    if (rounded->count != cut.count || rounded->point != cut.point ||
        memcmp(rounded->digit, cut.digit, (size_t)cut.count) != 0) {
        *rounded = cut;
        return;
    }
    cut.count = keep;
    memcpy(cut.digit, exact->digit, (size_t)keep);
    for (i = keep; i > 0 && cut.digit[i - 1] == '9'; i--)
        ;
    if (i == 0) {
        cut.digit[0] = '1';
        cut.count = 1;
        cut.point++;
    } else {
        cut.digit[i - 1]++;
        cut.count = i;
    }
    *rounded = cut;
}

/*
 * The fewest digits that read back as the value. A decimal of up to 15 digits survives the way through a normal double, so
 * if any does, rounding to 15 digits finds it; beyond, and for denormals, each length is tried, both neighbours.
 */
static void whorli_decimal_shortest(double value, whorli_decimal *decimal)
{
    uint64_t bits = whorli_real_bits(value) & (UINT64_MAX >> 1);
    whorli_decimal exact;
    int32_t digits;
    whorli_decimal_of(value, &exact);
    *decimal = exact;
    if (exact.count == 0)
        return;
    for (digits = bits >> 52 == 0 ? 1 : 15; digits < 17; digits++) {
        *decimal = exact;
        whorli_decimal_round(decimal, digits);
        if (whorli_decimal_reads(decimal, bits))
            return;
        if (bits >> 52 != 0 && digits < 16)
            continue;
        whorli_decimal_other(&exact, decimal, digits);
        if (decimal->count > 0 && whorli_decimal_reads(decimal, bits))
            return;
    }
    *decimal = exact;
    whorli_decimal_round(decimal, 17);
}

int32_t whorl_real_write(double value, char *text)
{
    whorl_text writer = whorl_text_over(text, WHORL_REAL_TEXT);
    whorli_decimal decimal;
    if (whorli_text_special(&writer, value))
        return (int32_t)writer.used;
    whorli_decimal_shortest(value, &decimal);
    if (decimal.point < -4 || decimal.point > 17)
        whorli_text_scientific(&writer, &decimal, decimal.count);
    else
        whorli_text_plain(&writer, &decimal, decimal.count > decimal.point ? decimal.count - decimal.point : 0);
    return (int32_t)writer.used;
}

int32_t whorl_real_write_digits(double value, int32_t digits, char *text, int32_t room)
{
    whorl_text writer = whorl_text_over(text, room > 0 ? (uint64_t)room : 0);
    whorli_decimal decimal;
    digits = digits < 1 ? 1 : digits > 40 ? 40 : digits;
    if (whorli_text_special(&writer, value))
        return (int32_t)writer.used;
    whorli_decimal_of(value, &decimal);
    whorli_decimal_round(&decimal, digits);
    whorli_text_scientific(&writer, &decimal, digits);
    return (int32_t)writer.used;
}

int32_t whorl_real_write_fixed(double value, int32_t decimals, char *text, int32_t room)
{
    whorl_text writer = whorl_text_over(text, room > 0 ? (uint64_t)room : 0);
    whorli_decimal decimal;
    decimals = decimals < 0 ? 0 : decimals > 40 ? 40 : decimals;
    if (whorli_text_special(&writer, value))
        return (int32_t)writer.used;
    whorli_decimal_of(value, &decimal);
    if (decimal.point + decimals < 0)
        decimal.count = 0;
    else
        whorli_decimal_round(&decimal, decimal.point + decimals);
    if (decimal.count == 0)
        decimal.point = 0;
    whorli_text_plain(&writer, &decimal, decimals);
    return (int32_t)writer.used;
}

/*
 * Reading. First in 64-bit fractions with a counted error: that decides nearly always. Where a halfway point lies within
 * the error, the decimal is compared with it exactly, in integers of base 2^32.
 */
#define WHORLI_READ_DIGITS 780 /* more than the 767 that a halfway point can have; what follows is one sticky digit */
#define WHORLI_BIG_LIMBS 180
typedef struct whorli_big {
    uint32_t limb[WHORLI_BIG_LIMBS];
    int32_t count;
} whorli_big;

static void whorli_big_multiply_add(whorli_big *big, uint32_t factor, uint32_t addend)
{
    uint64_t carry = addend;
    int32_t i;
    for (i = 0; i < big->count; i++) {
        carry += (uint64_t)big->limb[i] * factor;
        big->limb[i] = (uint32_t)carry;
        carry >>= 32;
    }
    if (carry != 0)
        big->limb[big->count++] = (uint32_t)carry;
}

static void whorli_big_power(whorli_big *big, uint32_t base, int32_t exponent, int32_t most)
{
    for (; exponent > 0; exponent -= most) {
        uint32_t factor = 1;
        int32_t i;
        for (i = 0; i < most && i < exponent; i++)
            factor *= base;
        whorli_big_multiply_add(big, factor, 0);
    }
}

static void whorli_big_shift(whorli_big *big, int32_t bits)
{
    int32_t limbs = bits / 32, i;
    whorli_big_multiply_add(big, UINT32_C(1) << (bits % 32), 0);
    if (limbs == 0 || big->count == 0)
        return;
    for (i = big->count; i-- > 0;)
        big->limb[i + limbs] = big->limb[i];
    for (i = 0; i < limbs; i++)
        big->limb[i] = 0;
    big->count += limbs;
}

static int32_t whorli_big_compare(const whorli_big *a, const whorli_big *b)
{
    int32_t i;
    if (a->count != b->count)
        return a->count < b->count ? -1 : 1;
    for (i = a->count; i-- > 0;)
        if (a->limb[i] != b->limb[i])
            return a->limb[i] < b->limb[i] ? -1 : 1;
    return 0;
}

/* Sign of digits * 10^exponent - half * 2^power, exactly. */
static int32_t whorli_compare_halfway(const char *digits, int32_t count, int32_t exponent, uint64_t half, int32_t power)
{
    whorli_big decimal, binary;
    int32_t i;
    decimal.count = binary.count = 0;
    for (i = 0; i < count; i++)
        whorli_big_multiply_add(&decimal, 10, (uint32_t)(digits[i] - '0'));
    binary.limb[0] = (uint32_t)half;
    binary.limb[1] = (uint32_t)(half >> 32);
    binary.count = half >> 32 != 0 ? 2 : 1;
    whorli_big_power(exponent >= 0 ? &decimal : &binary, 5, exponent >= 0 ? exponent : -exponent, 13);
    power -= exponent; /* 10^exponent = 5^exponent 2^exponent */
    whorli_big_shift(power >= 0 ? &binary : &decimal, power >= 0 ? power : -power);
    return whorli_big_compare(&decimal, &binary);
}

/* m 2^e with m in [2^63, 2^64); the true value is within `error` units of m. */
typedef struct whorli_fraction {
    uint64_t m;
    int32_t e;
    uint64_t error;
} whorli_fraction;

static whorli_fraction whorli_fraction_of(uint64_t m)
{
    whorli_fraction f;
    int32_t shift = 63 - whorl_bits_highest(m);
    f.m = m << shift;
    f.e = -shift;
    f.error = 0;
    return f;
}

/* The product rounded down; each factor's error counts once (m <= 2^64), and cutting 1, doubled by the last shift. */
static whorli_fraction whorli_fraction_multiply(whorli_fraction a, whorli_fraction b)
{
    uint64_t a1 = a.m >> 32, a0 = a.m & UINT32_MAX, b1 = b.m >> 32, b0 = b.m & UINT32_MAX;
    uint64_t low = a0 * b0, mid = a1 * b0 + (low >> 32), cross = a0 * b1 + (mid & UINT32_MAX);
    whorli_fraction product;
    product.m = a1 * b1 + (mid >> 32) + (cross >> 32);
    product.e = a.e + b.e + 64;
    product.error = a.error + b.error + 1;
    if (product.m >> 63 == 0) {
        product.m = product.m << 1 | ((cross >> 31) & 1);
        product.e--;
        product.error = 2 * product.error;
    }
    return product;
}

/* 1 / f: 2^127 / m by long division, bit by bit. */
static whorli_fraction whorli_fraction_inverse(whorli_fraction f)
{
    whorli_fraction inverse;
    uint64_t rest = UINT64_C(1) << 63, quotient = 0;
    int32_t i;
    if (f.m == rest) {
        inverse = f;
        inverse.e = -126 - f.e;
        inverse.error = 2 * f.error;
        return inverse;
    }
    for (i = 0; i < 64; i++) { /* rest < m before each step */
        uint64_t top = rest >> 63;
        rest <<= 1;
        quotient <<= 1;
        if (top != 0 || rest >= f.m) {
            rest -= f.m;
            quotient |= 1;
        }
    }
    inverse.m = quotient;
    inverse.e = -127 - f.e;
    inverse.error = 4 * f.error + 1;
    return inverse;
}

/* 10^exponent for 0 <= exponent < 512: exact up to 10^27. */
static whorli_fraction whorli_fraction_power(int32_t exponent)
{
    whorli_fraction power = whorli_fraction_of(1), square;
    int32_t i, rest = exponent % 27;
    uint64_t five = 1;
    for (i = 0; i < rest; i++)
        five *= 5;
    power = whorli_fraction_of(five);
    power.e += rest;
    five = 1;
    for (i = 0; i < 27; i++)
        five *= 5;
    square = whorli_fraction_of(five);
    square.e += 27;
    for (i = exponent / 27; i != 0; i >>= 1) {
        if ((i & 1) != 0)
            power = whorli_fraction_multiply(power, square);
        square = whorli_fraction_multiply(square, square);
    }
    return power;
}

/* digits[0 .. count) 10^exponent, first digit not zero, as the bits of the nearest double. */
static uint64_t whorli_real_nearest(const char *digits, int32_t count, int32_t exponent)
{
    uint64_t lead = 0, below, half, unit, low, mantissa;
    whorli_fraction f, power;
    int32_t i, used = count < 19 ? count : 19, drop, up;
    if (count + exponent > 310)
        return UINT64_C(0x7ff) << 52;
    if (count + exponent < -326)
        return 0;
    for (i = 0; i < used; i++)
        lead = 10 * lead + (uint64_t)(digits[i] - '0');
    f = whorli_fraction_of(lead);
    if (used < count)
        f.error = UINT64_C(1) << (f.e < 0 ? -f.e : 0); /* less than one unit of lead was cut off */
    i = exponent + count - used;
    power = whorli_fraction_power(i < 0 ? -i : i);
    if (i < 0)
        power = whorli_fraction_inverse(power);
    if (i != 0)
        f = whorli_fraction_multiply(f, power);
    /* the value is f.m 2^f.e; the double keeps all but `drop` of the 64 bits */
    drop = 11;
    if (f.e + drop < -1074)
        drop = -1074 - f.e;
    if (drop > 64)
        return 0; /* below half of the smallest, also with the error */
    unit = drop >= 64 ? 0 : UINT64_C(1) << drop;
    low = drop >= 64 ? f.m : f.m & (unit - 1);
    mantissa = drop >= 64 ? 0 : f.m >> drop;
    half = UINT64_C(1) << (drop - 1);
    below = low > half ? low - half : half - low;
    if (f.error != 0 ? below > f.error : below != 0) {
        up = low > half;
    } else if (f.error == 0) {
        up = (int32_t)(mantissa & 1);
    } else {
        /* halfway is (2 mantissa + 1) 2^(e + drop - 1) */
        int32_t sign = whorli_compare_halfway(digits, count, exponent, 2 * mantissa + 1, f.e + drop - 1);
        up = sign > 0 || (sign == 0 && (mantissa & 1) != 0);
    }
    mantissa += (uint64_t)up;
    if (mantissa == 0)
        return 0;
    i = f.e + drop; /* mantissa 2^i, mantissa <= 2^53 */
    if (mantissa >> 53 != 0) {
        mantissa >>= 1;
        i++;
    }
    if (mantissa >> 52 == 0)
        return mantissa; /* denormal: i = -1074 */
    if (i + 1075 >= 0x7ff)
        return UINT64_C(0x7ff) << 52;
    return (uint64_t)(i + 1075) << 52 | (mantissa & ((UINT64_C(1) << 52) - 1));
}

uint64_t whorl_real_read(const char *text, uint64_t length, double *value)
{
    char digits[WHORLI_READ_DIGITS + 1];
    int32_t count = 0, seen = 0, sticky = 0;
    int64_t exponent = 0;
    uint64_t at = 0, negative = 0, bits = 0;
    int32_t point = 0;
    if (at < length && (text[at] == '+' || text[at] == '-'))
        negative = text[at++] == '-';
    for (; at < length; at++) {
        if (text[at] == '.' && !point) {
            point = 1;
            continue;
        }
        if (text[at] < '0' || text[at] > '9')
            break;
        seen = 1;
        if (count == 0 && text[at] == '0') {
            exponent -= point; /* leading zeros */
        } else if (count < WHORLI_READ_DIGITS) {
            digits[count++] = text[at];
            exponent -= point;
        } else {
            sticky |= text[at] != '0';
            exponent += !point;
        }
    }
    if (!seen)
        return 0;
    if (at < length && (text[at] == 'e' || text[at] == 'E')) {
        uint64_t ahead = at + 1;
        int64_t written = 0, sign = 1;
        if (ahead < length && (text[ahead] == '+' || text[ahead] == '-'))
            sign = text[ahead++] == '-' ? -1 : 1;
        if (ahead < length && text[ahead] >= '0' && text[ahead] <= '9') {
            for (; ahead < length && text[ahead] >= '0' && text[ahead] <= '9'; ahead++)
                if (written < (INT64_C(1) << 58))
                    written = 10 * written + (text[ahead] - '0');
            exponent += sign * written;
            at = ahead;
        }
    }
    if (count > 0) {
        if (sticky)
            digits[count++] = '1', exponent--;
        else
            for (; digits[count - 1] == '0'; count--)
                exponent++;
        if (exponent > 400)
            bits = UINT64_C(0x7ff) << 52;
        else if (exponent + count >= -400)
            bits = whorli_real_nearest(digits, count, (int32_t)exponent);
    }
    *value = whorli_real_of_bits(bits | negative << 63);
    return at;
}

/* ---- >>arithmetic ---------------------------------------------------------------------------------------------------- */

int32_t whorl_arithmetic(void)
{
    /* values that a compiler cannot fold; each formula has one result under IEEE 754 and another one otherwise */
    volatile double one = 1.0, tiny = 1.0 / 9007199254740992.0, epsilon = 2.0 * tiny, least = 2.2250738585072014e-308;
    volatile double big = 1e300, ten = 10.0;
    double a = one + 1024.0 * 1024.0 * 32.0 * epsilon, sum, back, quotient; /* 1 + 2^-27: its square does not fit 53 bits */
    int32_t flags = 0, i;
    double vector[8], total = 0.0, x[16], y[16], product[16];
    sum = a * a - (one + 2.0 * (a - one));
    if (sum != 0.0)
        flags |= WHORL_ARITHMETIC_CONTRACTS;
    for (i = 0; i < 8; i++) { /* pairs of products: some compilers fuse these although they keep single ones apart */
        x[2 * i] = y[2 * i] = a;
        x[2 * i + 1] = one;
        y[2 * i + 1] = one + 2.0 * (a - one);
    }
    for (i = 0; i < 8; i++) {
        product[2 * i] = x[2 * i] * y[2 * i] - x[2 * i + 1] * y[2 * i + 1];
        product[2 * i + 1] = x[2 * i] * y[2 * i + 1] + x[2 * i + 1] * y[2 * i];
    }
    for (i = 0; i < 8; i++)
        if (product[2 * i] != 0.0)
            flags |= WHORL_ARITHMETIC_CONTRACTS;
    back = (one + tiny) - one; /* tiny vanishes in the first sum */
    if (back != 0.0)
        flags |= WHORL_ARITHMETIC_REASSOCIATES;
    for (i = 0; i < 8; i++)
        vector[i] = i % 2 == 0 ? one : (i == 7 ? -4.0 * one : tiny * (double)i);
    for (i = 0; i < 8; i++)
        total += vector[i]; /* from left to right every tiny one is lost or kept in one way only */
    {
        volatile double left = 0.0;
        for (i = 0; i < 8; i++)
            left = left + vector[i];
        if (left != total)
            flags |= WHORL_ARITHMETIC_REASSOCIATES;
    }
    quotient = least / 4.0;
    {
        volatile double small = least, divided;
        divided = small / 4.0;
        if (divided == 0.0 || quotient * 4.0 != least)
            flags |= WHORL_ARITHMETIC_FLUSHES;
    }
    back = big * ten * 1e10; /* 1e311 overflows where doubles are doubles */
    if (whorl_is_finite(back * 1e-20))
        flags |= WHORL_ARITHMETIC_EXTENDS;
    return flags;
}

/* ---- >>dot ----------------------------------------------------------------------------------------------------------- */

static double whorli_lanes_total(const double *lane)
{
    return ((lane[0] + lane[4]) + (lane[2] + lane[6])) + ((lane[1] + lane[5]) + (lane[3] + lane[7]));
}

/* Doubles of a leaf that are not there count as zeros: the last group of eight is filled up. */
static void whorli_leaf_load(whorl_element element, const void *from, uint64_t count, double *to)
{
    uint64_t i, reals = whorl_element_is_complex(element) ? 2 * count : count;
    if (whorl_element_is_float(element)) {
        const float *at = (const float *)from;
        for (i = 0; i < reals; i++)
            to[i] = (double)at[i];
    } else {
        memcpy(to, from, (size_t)(8 * reals));
    }
}

/* Products in order of the index, lane = index mod 8; `count` may end inside a group of eight. */
static double whorli_leaf_real(const double *x, const double *y, uint64_t count)
{
    double lane[8] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0};
    uint64_t i, j;
    for (i = 0; i + 8 <= count; i += 8)
        for (j = 0; j < 8; j++)
            lane[j] += x[i + j] * y[i + j];
    for (j = 0; i + j < count; j++)
        lane[j] += x[i + j] * y[i + j];
    return whorli_lanes_total(lane);
}

static whorl_complex whorli_leaf_complex(const double *x, const double *y, uint64_t count)
{
    double re[8] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0}, im[8] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0};
    uint64_t i, j;
    for (i = 0; i < count; i += 8)
        for (j = 0; j < 8 && i + j < count; j++) {
            const double *a = x + 2 * (i + j), *b = y + 2 * (i + j);
            re[j] += a[0] * b[0] + a[1] * b[1];
            im[j] += a[0] * b[1] - a[1] * b[0];
        }
    return whorl_complex_of(whorli_lanes_total(re), whorli_lanes_total(im));
}

whorl_complex whorl_leaf_dot(whorl_element element, const void *x, const void *y, uint64_t count)
{
    double a[2 * WHORL_LEAF], b[2 * WHORL_LEAF];
    if (count > WHORL_LEAF)
        count = WHORL_LEAF;
    if (element == WHORL_REAL_DOUBLE)
        return whorl_complex_of(whorli_leaf_real((const double *)x, (const double *)y, count), 0.0);
    if (element == WHORL_COMPLEX_DOUBLE)
        return whorli_leaf_complex((const double *)x, (const double *)y, count);
    whorli_leaf_load(element, x, count, a);
    whorli_leaf_load(element, y, count, b);
    if (element == WHORL_REAL_FLOAT)
        return whorl_complex_of(whorli_leaf_real(a, b, count), 0.0);
    return whorli_leaf_complex(a, b, count);
}

whorl_complex whorl_dot(whorl_element element, const void *x, const void *y, uint64_t count)
{
    whorl_tree tree;
    uint64_t i, bytes = whorl_element_bytes(element);
    whorl_tree_clear(&tree);
    for (i = 0; i < count; i += WHORL_LEAF) {
        uint64_t left = count - i;
        whorl_tree_add(&tree, whorl_leaf_dot(element, (const char *)x + i * bytes, (const char *)y + i * bytes,
                                             left < WHORL_LEAF ? left : WHORL_LEAF));
    }
    return whorl_tree_total(&tree);
}

double whorl_sum_reals(const double *x, uint64_t count)
{
    whorl_tree tree;
    uint64_t i, j, k;
    whorl_tree_clear(&tree);
    for (i = 0; i < count; i += WHORL_LEAF) {
        double lane[8] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0};
        uint64_t end = count - i < WHORL_LEAF ? count - i : WHORL_LEAF;
        for (j = 0; j < end; j += 8)
            for (k = 0; k < 8 && j + k < end; k++)
                lane[k] += x[i + j + k];
        whorl_tree_add(&tree, whorl_complex_of(whorli_lanes_total(lane), 0.0));
    }
    return whorl_tree_total(&tree).re;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
