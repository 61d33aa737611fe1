/*
 * whorl_dense.h 0.1.0: whole spectra of small matrices, real symmetric and complex Hermitian, with or without vectors,
 * and the tridiagonal problem that Krylov methods end in.
 *
 * Matrices are full n x n arrays, column by column (element (r, c) at r + n c), complex ones interleaved; only the
 * lower triangle is read. Eigenvalues come ascending. Own code: reduction to tridiagonal form by reflections, then the
 * implicit QL iteration.
 *
 *     double a[9] = {2, -1, 0, 0, 2, -1, 0, 0, 2}, values[3];           (the lower triangle counts)
 *     if (whorl_dense_symmetric(&host, 3, a, values, 1) == WHORL_OK)
 *         use(values[0], a);                                           (2 - sqrt 2, its vector in a[0 .. 3))
 *
 * It does not: solve for some of the levels only (whorl_lanczos.h), nor non-symmetric or generalised problems.
 *
 * Accuracy: ||H v - l v|| and ||V'V - 1|| stay below a few n eps ||H|| and n eps; eigenvalues are right to n eps ||H||,
 * not each to its own last digit. Matrices are scaled by a power of two first, so any finite entries work.
 * Memory: one scratch block a call, announced by the _bytes functions; the vectors replace the matrix.
 * Cost: 4/3 n^3 multiplications and additions each for values (four times that for Hermitian matrices); vectors cost 5
 * to 8 times as much again.
 * Threads: large matrices are worked on by the host's threads; bits do not depend on their number. Values have the same
 * bits with and without vectors.
 * Errors: statuses of whorl_core.h. WHORL_BAD_ARGUMENT, WHORL_NOT_FINITE in the input, WHORL_TOO_LARGE,
 * WHORL_OVER_LIMIT and WHORL_NO_MEMORY have touched nothing; after WHORL_CANCELLED, WHORL_NO_CONVERGENCE, or
 * WHORL_NOT_FINITE for an eigenvalue the contents of matrix and values are unspecified.
 *
 * Option (where the implementation is compiled): WHORL_USE_LAPACK hands the matrices to dsyevd and zheevd; link a
 * LAPACK with 32-bit integers. That suspends, for these two calls: equal bits across builds, machines and threads, and
 * of values with and without vectors; a cancel in mid-work (polls stand before and after); the promise that an arena is
 * enough (a BLAS may take memory of its own); threads chosen by the host.
 *
 * Methods: A. S. Householder, J. ACM 5, 339 (1958); R. S. Martin, C. Reinsch, J. H. Wilkinson, Numer. Math. 11, 181
 * (1968); A. Dubrulle, R. S. Martin, J. H. Wilkinson, Numer. Math. 12, 377 (1968); the order of rotations in waves:
 * F. G. Van Zee, R. A. van de Geijn, G. Quintana-Orti, ACM Trans. Math. Softw. 40, 18 (2014).
 */
#include "whorl_core.h"

#ifndef WHORL_DENSE_INCLUDED
#define WHORL_DENSE_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_dense.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_DENSE_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- whole spectra ----------------------------------------------------------------------------------------------- */

/*
 * All eigenvalues of the real symmetric matrix a (n x n doubles, column by column, lower triangle read, all of it
 * overwritten), ascending in values[0 .. n). With vectors != 0, a becomes the orthonormal eigenvectors, column k to
 * values[k]; otherwise its contents are lost. Sign of a vector: its first component of at least half the largest
 * modulus is positive. n = 0 is legal.
 * Errors: WHORL_BAD_ARGUMENT (NULL), WHORL_NOT_FINITE (reason.index = r + n c of the entry; or an eigenvalue exceeds
 * the largest double), WHORL_TOO_LARGE, WHORL_OVER_LIMIT, WHORL_NO_MEMORY, WHORL_CANCELLED, WHORL_NO_CONVERGENCE.
 * Cost: O(n^3), see above.
 */
WHORL_API whorl_status whorl_dense_symmetric(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors);

/*
 * The same for a complex Hermitian matrix: a has n x n interleaved complex numbers (2 n n doubles); imaginary parts on
 * the diagonal are not read. The component named above is made real and positive.
 */
WHORL_API whorl_status whorl_dense_hermitian(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors);

/* The bytes that these two take from the host, exactly, for any number of threads; UINT64_MAX where n is too large. */
WHORL_API uint64_t whorl_dense_symmetric_bytes(uint64_t n, int32_t vectors);
WHORL_API uint64_t whorl_dense_hermitian_bytes(uint64_t n, int32_t vectors);

/* ---- tridiagonal ------------------------------------------------------------------------------------------------- */

/*
 * All eigenvalues of the symmetric tridiagonal matrix with diagonal[0 .. n) and off[0 .. n-1) beside it: ascending in
 * diagonal; off is destroyed. With z not NULL (m rows, n columns, column by column), z is multiplied from the right by
 * the eigenvectors: begin with the unit matrix to get them, with one row of it for their first components, with a basis
 * for vectors in the basis' space (complex ones: m counts real numbers). Takes no memory; signs as they come.
 * Errors: WHORL_BAD_ARGUMENT (NULL), WHORL_NOT_FINITE (reason.index: of diagonal, or n + that of off; nothing is
 * touched then), WHORL_CANCELLED, WHORL_NO_CONVERGENCE. Cost: some n^2 rotations of m rows, 30 n^2 operations
 * without z.
 */
WHORL_API whorl_status whorl_dense_tridiagonal(whorl_host *host, uint64_t n, double *diagonal, double *off, double *z,
                                               uint64_t m);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_DENSE_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_DENSE_IMPLEMENTED)
#define WHORL_DENSE_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>scaling --------------------------------------------------------------------------------------------------- */

/* 2^power, -1022 <= power <= 1023, from its bits. */
static double whorli_dense_power(int32_t power)
{
    uint64_t bits = (uint64_t)(power + 1023) << 52;
    double value;
    memcpy(&value, &bits, 8);
    return value;
}

/* The exponent of a finite value > 0: 2^e <= value < 2^(e+1). */
static int32_t whorli_dense_exponent(double value)
{
    uint64_t bits;
    int32_t shift = 0;
    if (value < whorli_dense_power(-1000)) {
        value *= whorli_dense_power(100);
        shift = 100;
    }
    memcpy(&bits, &value, 8);
    return (int32_t)((bits >> 52) & 0x7ff) - 1023 - shift;
}

/* x times 2^power in two steps, as 2^power itself may lie outside the doubles. */
static void whorli_dense_scale(double *x, uint64_t count, int32_t power)
{
    double first = whorli_dense_power(power / 2), second = whorli_dense_power(power - power / 2);
    uint64_t i;
    if (power == 0)
        return;
    for (i = 0; i < count; i++)
        x[i] = x[i] * first * second;
}

/* The largest modulus of x, taken together with `most`. */
static double whorli_dense_largest(const double *x, uint64_t count, double most)
{
    uint64_t i;
    for (i = 0; i < count; i++)
        if (fabs(x[i]) > most)
            most = fabs(x[i]);
    return most;
}

/* The index of the first entry that is NaN or infinite; WHORL_NONE if there is none. */
static uint64_t whorli_dense_wrong(const double *x, uint64_t count)
{
    uint64_t i;
    for (i = 0; i < count; i++)
        if (!whorl_is_finite(x[i]))
            return i;
    return WHORL_NONE;
}

static whorl_status whorli_dense_not_finite(whorl_host *host, uint64_t index, const char *words)
{
    whorl_fail(host, WHORL_NOT_FINITE, words);
    host->reason.index = index;
    return WHORL_NOT_FINITE;
}

/* Back to the caller's scale. An eigenvalue may exceed every entry by a factor n, and so the doubles. */
static whorl_status whorli_dense_unscale(whorl_host *host, double *values, uint64_t n, int32_t power)
{
    uint64_t wrong;
    whorli_dense_scale(values, n, power);
    wrong = whorli_dense_wrong(values, n);
    if (wrong == WHORL_NONE)
        return WHORL_OK;
    return whorli_dense_not_finite(host, wrong, "an eigenvalue exceeds the largest double: use a larger unit");
}

/* ---- >>rotations ------------------------------------------------------------------------------------------------- */

/*
 * The QL iteration rotates neighbouring columns of z: (z_j, z_j+1) becomes (c z_j - s z_j+1, s z_j + c z_j+1). A sweep
 * does so for a range of j in descending (order +1) or ascending (order -1) sequence. With `turns` the rotations of up
 * to WHORLI_DENSE_SWEEPS sweeps are kept and applied together, in an order that keeps each column in cache for many
 * rotations; elements see the same operations either way, so the bits are the same.
 */
#define WHORLI_DENSE_SWEEPS 48 /* kept before they are applied */
#define WHORLI_DENSE_WAVE 16   /* applied together: their columns stay in the first cache */
#define WHORLI_DENSE_ROWS 32   /* rows of a panel */
#define WHORLI_DENSE_PANELS 8  /* panels at work at one time, each with a buffer */

typedef struct whorli_dense_turns {
    whorl_host *host;
    double *z;       /* NULL: rotations go nowhere */
    uint64_t m, n;   /* rows and columns of z */
    double *turns;   /* NULL: applied at once; else c and s of column j in sweep p at 2 (p n + j) */
    double *buffers; /* WHORLI_DENSE_PANELS x WHORLI_DENSE_ROWS x n */
    uint64_t low[WHORLI_DENSE_SWEEPS], high[WHORLI_DENSE_SWEEPS]; /* range of j of a sweep */
    uint64_t count;
    int32_t order;
    uint64_t updates; /* since the last poll */
} whorli_dense_turns;

static void whorli_dense_rotate(uint64_t count, double *WHORLI_RESTRICT a, double *WHORLI_RESTRICT b, double c,
                                double s)
{
    uint64_t r;
    for (r = 0; r < count; r++) {
        double x = a[r], y = b[r];
        a[r] = c * x - s * y;
        b[r] = s * x + c * y;
    }
}

/*
 * Rotations in a panel that follow each other: the first on columns (x, x + step), the next on (x + step, x + 2 step),
 * with c and s in pairs. Four at a time keep the column between them in registers.
 */
static void whorli_dense_chain1(double *x, int64_t step, const double *turn)
{
    whorli_dense_rotate(WHORLI_DENSE_ROWS, x, x + step, turn[0], turn[1]);
}
static void whorli_dense_chain4(double *x, int64_t step, const double *turn)
{
    double *WHORLI_RESTRICT x0 = x;
    double *WHORLI_RESTRICT x1 = x + step;
    double *WHORLI_RESTRICT x2 = x + 2 * step;
    double *WHORLI_RESTRICT x3 = x + 3 * step;
    double *WHORLI_RESTRICT x4 = x + 4 * step;
    const double c0 = turn[0], s0 = turn[1], c1 = turn[2], s1 = turn[3];
    const double c2 = turn[4], s2 = turn[5], c3 = turn[6], s3 = turn[7];
    uint64_t r;
    for (r = 0; r < WHORLI_DENSE_ROWS; r++) {
        double p = x0[r], q = x1[r], carried = s0 * p + c0 * q;
        x0[r] = c0 * p - s0 * q;
        q = x2[r];
        x1[r] = c1 * carried - s1 * q;
        carried = s1 * carried + c1 * q;
        q = x3[r];
        x2[r] = c2 * carried - s2 * q;
        carried = s2 * carried + c2 * q;
        q = x4[r];
        x3[r] = c3 * carried - s3 * q;
        x4[r] = s3 * carried + c3 * q;
    }
}

/*
 * Sweeps first .. first + count - 1 on a panel that holds columns base, base + 1, ... Rotation j of sweep p needs
 * rotations j - 1, j, j + 1 of sweep p - 1 done before. In front f sweep p does column f + p (order +1, f descending)
 * or f - p (order -1, f ascending), p ascending: that is enough.
 */
static void whorli_dense_wave(const whorli_dense_turns *turns, uint64_t first, uint64_t count, uint64_t base,
                              double *panel)
{
    int64_t order = turns->order, from = 0, to = 0, front;
    uint64_t p;
    for (p = 0; p < count; p++) { /* fronts, counted along the order of the sweep: from >= front >= to */
        int64_t low = (int64_t)turns->low[first + p], high = (int64_t)turns->high[first + p];
        int64_t begin = (order > 0 ? high : -low) - (int64_t)p, end = (order > 0 ? low : -high) - (int64_t)p;
        from = p == 0 || begin > from ? begin : from;
        to = p == 0 || end < to ? end : to;
    }
    for (front = from; front >= to; front--) {
        double chain[2 * WHORLI_DENSE_WAVE];
        uint64_t length = 0, k;
        for (p = 0; p <= count; p++) {
            int64_t j = order * (front + (int64_t)p);
            if (p < count && j >= (int64_t)turns->low[first + p] && j <= (int64_t)turns->high[first + p]) {
                const double *turn = turns->turns + 2 * ((first + p) * turns->n + (uint64_t)j);
                chain[2 * length] = turn[0];
                chain[2 * length + 1] = order > 0 ? turn[1] : -turn[1]; /* seen from column j + 1 */
                length++;
                continue;
            }
            if (length != 0) { /* it began at p - length */
                int64_t column = order * (front + (int64_t)(p - length)) + (order > 0 ? 0 : 1) - (int64_t)base;
                double *x = panel + column * WHORLI_DENSE_ROWS;
                const int64_t step = order * WHORLI_DENSE_ROWS;
                for (k = 0; k + 4 <= length; k += 4)
                    whorli_dense_chain4(x + (int64_t)k * step, step, chain + 2 * k);
                for (; k < length; k++)
                    whorli_dense_chain1(x + (int64_t)k * step, step, chain + 2 * k);
            }
            length = 0;
        }
    }
}

/* Block b of a flush: panels b, b + WHORLI_DENSE_PANELS, ... of rows, each through its own buffer. */
static void whorli_dense_panels(void *argument, uint64_t block, int32_t worker)
{
    const whorli_dense_turns *turns = (const whorli_dense_turns *)argument;
    double *panel = turns->buffers + block * WHORLI_DENSE_ROWS * turns->n;
    uint64_t row, low = turns->low[0], high = turns->high[0], p, j, r;
    (void)worker;
    for (p = 1; p < turns->count; p++) {
        low = turns->low[p] < low ? turns->low[p] : low;
        high = turns->high[p] > high ? turns->high[p] : high;
    }
    for (row = block * WHORLI_DENSE_ROWS; row < turns->m; row += WHORLI_DENSE_PANELS * WHORLI_DENSE_ROWS) {
        uint64_t rows = turns->m - row < WHORLI_DENSE_ROWS ? turns->m - row : WHORLI_DENSE_ROWS;
        for (j = low; j <= high + 1; j++) {
            double *to = panel + (j - low) * WHORLI_DENSE_ROWS;
            memcpy(to, turns->z + j * turns->m + row, (size_t)rows * sizeof(double));
            for (r = rows; r < WHORLI_DENSE_ROWS; r++)
                to[r] = 0.0;
        }
        for (p = 0; p < turns->count; p += WHORLI_DENSE_WAVE) {
            uint64_t left = turns->count - p;
            whorli_dense_wave(turns, p, left < WHORLI_DENSE_WAVE ? left : WHORLI_DENSE_WAVE, low, panel);
        }
        for (j = low; j <= high + 1; j++)
            memcpy(turns->z + j * turns->m + row, panel + (j - low) * WHORLI_DENSE_ROWS, (size_t)rows * sizeof(double));
    }
}

/* Runs small work here and large work on the host's threads: by size, never by their number. */
#define WHORLI_DENSE_ALONE (UINT64_C(1) << 19) /* updates: some 0.2 ms, where threads begin to pay for their meeting */
static whorl_status whorli_dense_run(whorl_host *host, whorl_body_function body, void *argument, uint64_t blocks,
                                     uint64_t updates)
{
    uint64_t block;
    whorl_status status;
    if (blocks > 1 && whorl_size_multiply(blocks, updates) >= WHORLI_DENSE_ALONE)
        return whorl_run(host, body, argument, blocks, updates);
    status = whorl_poll(host);
    for (block = 0; status == WHORL_OK && block < blocks; block++)
        body(argument, block, 0);
    return status;
}

/* Applies the sweeps that were kept. */
static whorl_status whorli_dense_flush(whorli_dense_turns *turns)
{
    uint64_t panels = (turns->m + WHORLI_DENSE_ROWS - 1) / WHORLI_DENSE_ROWS;
    uint64_t blocks = panels < WHORLI_DENSE_PANELS ? panels : WHORLI_DENSE_PANELS, updates = 0, p;
    whorl_status status = WHORL_OK;
    if (turns->count != 0) {
        for (p = 0; p < turns->count; p++)
            updates += turns->high[p] - turns->low[p] + 1;
        updates *= (panels + blocks - 1) / blocks * WHORLI_DENSE_ROWS;
        status = whorli_dense_run(turns->host, whorli_dense_panels, turns, blocks, updates);
    }
    turns->count = 0;
    return status;
}

/* Where the next sweep, in this order, puts its rotations. */
static whorl_status whorli_dense_sweep_begin(whorli_dense_turns *turns, int32_t order)
{
    whorl_status status = WHORL_OK;
    if (turns->turns != NULL && (turns->count == WHORLI_DENSE_SWEEPS || turns->order != order))
        status = whorli_dense_flush(turns);
    turns->order = order;
    return status;
}

static void whorli_dense_turn(whorli_dense_turns *turns, uint64_t j, double c, double s)
{
    if (turns->turns != NULL) {
        double *turn = turns->turns + 2 * (turns->count * turns->n + j);
        turn[0] = c;
        turn[1] = s;
    } else if (turns->z != NULL) {
        whorli_dense_rotate(turns->m, turns->z + j * turns->m, turns->z + (j + 1) * turns->m, c, s);
    }
}

/* Ends a sweep over columns low .. high + 1; polls at least each 2^22 updates. */
static whorl_status whorli_dense_sweep_end(whorli_dense_turns *turns, uint64_t low, uint64_t high)
{
    if (turns->turns != NULL) {
        turns->low[turns->count] = low;
        turns->high[turns->count] = high;
        turns->count++;
        return WHORL_OK; /* the flush polls */
    }
    turns->updates += (high - low + 1) * ((turns->z == NULL ? 0 : turns->m) + 8);
    if (turns->updates < (UINT64_C(1) << 22))
        return WHORL_OK;
    turns->updates = 0;
    return whorl_poll(turns->host);
}

/* ---- >>tridiagonal ----------------------------------------------------------------------------------------------- */

/* sqrt(x^2 + y^2) where the squares may leave the doubles. */
static double whorli_dense_length(double x, double y)
{
    double large = fabs(x), small = fabs(y), ratio;
    if (large < small) {
        ratio = large;
        large = small;
        small = ratio;
    }
    if (large == 0.0)
        return 0.0;
    ratio = small / large;
    return large * sqrt(1.0 + ratio * ratio);
}

/* An off-diagonal element that may be taken as zero: below eps times the geometric mean of its neighbours. */
static int32_t whorli_dense_negligible(double d, double next, double e)
{
    const double eps2 = 1.2325951644078310e-32, least = 2.2250738585072014e-308;
    return e * e <= eps2 * fabs(d) * fabs(next) + least;
}

/* A block of the matrix seen from the end where its small elements are: position k is index first + order k. */
typedef struct whorli_dense_block {
    double *d, *e;   /* of position 0; e is between positions 0 and 1 */
    int64_t order;   /* +1 or -1: step of both */
    uint64_t column; /* the column of z pair (0, 1) */
} whorli_dense_block;

/* One implicit QL sweep over positions l .. m with Wilkinson's shift (Dubrulle, Martin and Wilkinson 1968). */
static whorl_status whorli_dense_sweep(whorli_dense_turns *turns, const whorli_dense_block *block, uint64_t l,
                                       uint64_t m)
{
    const int64_t step = block->order, top = step * (int64_t)l;
    double *d = block->d, *e = block->e;
    double g = (d[top + step] - d[top]) / (2.0 * e[top]), r = whorli_dense_length(g, 1.0), s = 1.0, c = 1.0, p = 0.0;
    uint64_t k, begin, end;
    whorl_status status = whorli_dense_sweep_begin(turns, block->order > 0 ? 1 : -1);
    if (status != WHORL_OK)
        return status;
    g = d[step * (int64_t)m] - d[top] + e[top] / (g + (g < 0.0 ? -r : r));
    for (k = m; k-- > l;) {
        const int64_t at = step * (int64_t)k;
        double f = s * e[at], b = c * e[at];
        if (f == 0.0) {
            c = 1.0;
            s = 0.0;
            r = g;
        } else {
            r = whorli_dense_length(f, g);
            s = f / r;
            c = g / r;
        }
        if (k + 1 != m)
            e[at + step] = r;
        g = d[at + step] - p;
        r = (d[at] - g) * s + 2.0 * c * b;
        p = s * r;
        d[at + step] = g + p;
        g = c * r - b;
        whorli_dense_turn(turns, (uint64_t)((int64_t)block->column + at), c, step > 0 ? s : -s);
    }
    d[top] -= p;
    e[top] = g;
    begin = (uint64_t)((int64_t)block->column + top);
    end = (uint64_t)((int64_t)block->column + step * (int64_t)(m - 1));
    return whorli_dense_sweep_end(turns, begin < end ? begin : end, begin < end ? end : begin);
}

/* Sweeps over indices first .. last, which are coupled, until they are not. */
static whorl_status whorli_dense_decouple(whorli_dense_turns *turns, double *diagonal, double *off, uint64_t first,
                                          uint64_t last, uint64_t *sweeps_left)
{
    whorli_dense_block block;
    uint64_t l = 0, m, end = last - first;
    int32_t up = fabs(diagonal[last]) < fabs(diagonal[first]);
    block.order = up ? -1 : 1;
    block.d = diagonal + (up ? last : first);
    block.column = up ? last - 1 : first;
    block.e = off + block.column;
    while (l < end) {
        whorl_status status;
        for (m = l; m < end; m++) {
            const int64_t at = block.order * (int64_t)m;
            if (whorli_dense_negligible(block.d[at], block.d[at + block.order], block.e[at])) {
                block.e[at] = 0.0;
                break;
            }
        }
        if (m == l) {
            l++;
            continue;
        }
        if ((*sweeps_left)-- == 0)
            return whorl_fail(turns->host, WHORL_NO_CONVERGENCE,
                              "the QL iteration did not converge: check by whorl_arithmetic() that doubles are IEEE");
        status = whorli_dense_sweep(turns, &block, l, m);
        if (status != WHORL_OK)
            return status;
    }
    return WHORL_OK;
}

/* Ascending, columns of z alike: each place gets the least of what is left, the first among equals. */
static void whorli_dense_sort(const whorli_dense_turns *turns, double *diagonal)
{
    uint64_t i, k, r;
    for (i = 0; i < turns->n; i++) {
        uint64_t least = i;
        double value;
        for (k = i + 1; k < turns->n; k++)
            if (diagonal[k] < diagonal[least])
                least = k;
        if (least == i)
            continue;
        value = diagonal[i];
        diagonal[i] = diagonal[least];
        diagonal[least] = value;
        if (turns->z != NULL) {
            double *a = turns->z + i * turns->m, *b = turns->z + least * turns->m;
            for (r = 0; r < turns->m; r++) {
                value = a[r];
                a[r] = b[r];
                b[r] = value;
            }
        }
    }
}

/* Eigenvalues of a tridiagonal matrix with largest entry near 1, ascending; z is turned along. */
static whorl_status whorli_dense_iterate(whorli_dense_turns *turns, double *diagonal, double *off)
{
    uint64_t first = 0, last, sweeps = whorl_size_multiply(turns->n, 60);
    whorl_status status = whorl_poll(turns->host);
    while (status == WHORL_OK && first < turns->n) {
        for (last = first; last + 1 < turns->n; last++)
            if (whorli_dense_negligible(diagonal[last], diagonal[last + 1], off[last])) {
                off[last] = 0.0;
                break;
            }
        if (last > first)
            status = whorli_dense_decouple(turns, diagonal, off, first, last, &sweeps);
        first = last + 1;
    }
    if (status == WHORL_OK && turns->turns != NULL)
        status = whorli_dense_flush(turns);
    if (status == WHORL_OK)
        whorli_dense_sort(turns, diagonal);
    return status;
}

whorl_status whorl_dense_tridiagonal(whorl_host *host, uint64_t n, double *diagonal, double *off, double *z, uint64_t m)
{
    whorli_dense_turns turns;
    uint64_t wrong, beside = n > 0 ? n - 1 : 0;
    double largest;
    int32_t power;
    whorl_status status;
    if ((n > 0 && diagonal == NULL) || (n > 1 && off == NULL))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "diagonal or off is NULL: give n and n - 1 numbers");
    wrong = whorli_dense_wrong(diagonal, n);
    if (wrong == WHORL_NONE) {
        wrong = whorli_dense_wrong(off, beside);
        wrong = wrong == WHORL_NONE ? wrong : wrong + n;
    }
    if (wrong != WHORL_NONE)
        return whorli_dense_not_finite(host, wrong, "an entry of the tridiagonal is NaN or infinite: see its index");
    memset(&turns, 0, sizeof turns);
    turns.host = host;
    turns.n = n;
    turns.m = m;
    turns.z = z;
    largest = whorli_dense_largest(off, beside, whorli_dense_largest(diagonal, n, 0.0));
    power = largest > 0.0 ? whorli_dense_exponent(largest) : 0;
    whorli_dense_scale(diagonal, n, -power);
    whorli_dense_scale(off, beside, -power);
    status = whorli_dense_iterate(&turns, diagonal, off);
    return status == WHORL_OK ? whorli_dense_unscale(host, diagonal, n, power) : status;
}

/* ---- >>vectors --------------------------------------------------------------------------------------------------- */

/*
 * One call at work. A column of a matrix is `rows` = n doubles (parts 1) or n real parts followed by n imaginary ones
 * (parts 2), so that all inner loops are loops over plain doubles; vectors likewise.
 */
typedef struct whorli_dense {
    uint64_t n, parts, rows;
    double *a;
    double *diagonal; /* the caller's values */
    double *u;        /* `rows`: the reflection at work, or room for a column */
#ifdef WHORL_USE_LAPACK
    double *room, *reals;
    int *integers, room_count, real_count, integer_count;
#else
    double *off;             /* n */
    double *factor;          /* tau of the reflections: n complex numbers */
    double *v, *w;           /* `rows` each: the last reflection and its partner */
    double *y;               /* `rows` for each strip */
    double *pack;            /* WHORLI_DENSE_PACK reflections */
    double *turns, *buffers; /* see whorli_dense_turns */
    uint64_t step;           /* the column that is reduced now */
    uint64_t pack_first, pack_count;
#endif
} whorli_dense;

/* Element r of a vector or column. */
static whorl_complex whorli_dense_get(const whorli_dense *work, const double *x, uint64_t r)
{
    return whorl_complex_of(x[r], work->parts == 1 ? 0.0 : x[work->n + r]);
}
static void whorli_dense_put(const whorli_dense *work, double *x, uint64_t r, whorl_complex value)
{
    x[r] = value.re;
    if (work->parts != 1)
        x[work->n + r] = value.im;
}

/* Columns from interleaved to parts one behind the other, and back (`apart` 0); `room` holds one column. */
static void whorli_dense_split(uint64_t n, double *a, double *room, int32_t apart)
{
    uint64_t c, r;
    for (c = 0; c < n; c++) {
        double *column = a + 2 * n * c;
        memcpy(room, column, (size_t)(2 * n) * sizeof(double));
        for (r = 0; r < n; r++)
            if (apart) {
                column[r] = room[2 * r];
                column[n + r] = room[2 * r + 1];
            } else {
                column[2 * r] = room[r];
                column[2 * r + 1] = room[n + r];
            }
    }
}

/* Makes the first component of at least half the largest modulus real and positive in every column. */
static void whorli_dense_phases(const whorli_dense *work)
{
    uint64_t c, r, part;
    for (c = 0; c < work->n; c++) {
        double *q = work->a + c * work->rows, most = 0.0, size = 0.0;
        whorl_complex x = {1.0, 0.0};
        for (r = 0; r < work->n; r++) {
            x = whorli_dense_get(work, q, r);
            size = x.re * x.re + x.im * x.im;
            most = size > most ? size : most;
        }
        for (r = 0; r < work->n; r++) {
            x = whorli_dense_get(work, q, r);
            size = x.re * x.re + x.im * x.im;
            if (size >= 0.25 * most)
                break;
        }
        if (work->parts == 1 || x.im == 0.0) {
            for (part = 0; x.re < 0.0 && part < work->rows; part++)
                q[part] = -q[part];
            continue;
        }
        size = sqrt(size);
        x = whorl_complex_of(x.re / size, -x.im / size);
        for (part = 0; part < work->n; part++)
            whorli_dense_put(work, q, part, whorl_complex_multiply(x, whorli_dense_get(work, q, part)));
        whorli_dense_put(work, q, r, whorl_complex_of(size, 0.0));
    }
}

#ifdef WHORL_USE_LAPACK

/* ---- >>LAPACK ---------------------------------------------------------------------------------------------------- */

extern void dsyevd_(const char *job, const char *half, const int *n, double *a, const int *stride, double *values,
                    double *room, const int *room_count, int *integers, const int *integer_count, int *info);
extern void zheevd_(const char *job, const char *half, const int *n, double *a, const int *stride, double *values,
                    double *room, const int *room_count, double *reals, const int *real_count, int *integers,
                    const int *integer_count, int *info);

/* The arrays of dsyevd (`room` counts doubles) and zheevd (complex numbers), as their manual pages say. */
static void whorli_dense_plan(whorl_layout *layout, whorli_dense *work, uint64_t n, uint64_t parts, int32_t vectors)
{
    uint64_t room, reals = 0, integers = vectors ? 3 + 5 * n : 1;
    memset(work, 0, sizeof *work);
    work->n = n;
    work->parts = parts;
    work->rows = parts * n;
    if (parts == 1)
        room = vectors ? 1 + 6 * n + 2 * n * n : 1 + 2 * n + 64 * n;
    else
        room = vectors ? 2 * n + n * n : 1 + n + 64 * n;
    if (parts == 2)
        reals = vectors ? 1 + 5 * n + 2 * n * n : n;
    if (n > 32000) { /* beyond the integers of this LAPACK */
        layout->bytes = UINT64_MAX;
        return;
    }
    work->room_count = (int)room;
    work->real_count = (int)reals;
    work->integer_count = (int)integers;
    work->u = (double *)whorl_layout_carve(layout, work->rows, sizeof(double));
    work->room = (double *)whorl_layout_carve(layout, room, parts * sizeof(double));
    work->reals = (double *)whorl_layout_carve(layout, reals, sizeof(double));
    work->integers = (int *)whorl_layout_carve(layout, integers, sizeof(int));
}

/* Everything between the scaling. */
static whorl_status whorli_dense_solve(whorl_host *host, whorli_dense *work, int32_t vectors)
{
    const int n = (int)work->n;
    int info = 0;
    whorl_status status = whorl_poll(host);
    if (status != WHORL_OK)
        return status;
    if (work->parts == 1)
        dsyevd_(vectors ? "V" : "N", "L", &n, work->a, &n, work->diagonal, work->room, &work->room_count,
                work->integers, &work->integer_count, &info);
    else
        zheevd_(vectors ? "V" : "N", "L", &n, work->a, &n, work->diagonal, work->room, &work->room_count, work->reals,
                &work->real_count, work->integers, &work->integer_count, &info);
    if (info != 0)
        return whorl_fail(host, WHORL_NO_CONVERGENCE, "LAPACK found no spectrum: compile without WHORL_USE_LAPACK");
    if (vectors) {
        if (work->parts != 1)
            whorli_dense_split(work->n, work->a, work->u, 1);
        whorli_dense_phases(work);
        if (work->parts != 1)
            whorli_dense_split(work->n, work->a, work->u, 0);
    }
    return whorl_poll(host);
}

#else /* own code */

/* ---- >>reduction ------------------------------------------------------------------------------------------------- */

/*
 * A = Q T Q^dagger by n - 1 reflections. One pass over the trailing columns applies the last reflection,
 * A -= v w^dagger + w v^dagger, and multiplies the next, y = A u. It goes by strips of columns, each with a y of its
 * own; the strips are added in order afterwards.
 */
#define WHORLI_DENSE_STRIP 64   /* columns */
#define WHORLI_DENSE_TILE 128   /* rows of some columns that stay in the first cache; a multiple of 8 */
#define WHORLI_DENSE_PACK 16    /* reflections that are applied to a column of Q at one go */
#define WHORLI_DENSE_COLUMNS 16 /* columns of Q in a block of work */

/* Measures or carves everything that a call takes. */
static void whorli_dense_plan(whorl_layout *layout, whorli_dense *work, uint64_t n, uint64_t parts, int32_t vectors)
{
    const uint64_t real = sizeof(double), rows = whorl_size_multiply(n, parts);
    const uint64_t strips = n / WHORLI_DENSE_STRIP + (n % WHORLI_DENSE_STRIP != 0);
    const uint64_t panels = rows / WHORLI_DENSE_ROWS + (rows % WHORLI_DENSE_ROWS != 0);
    const uint64_t buffers = panels < WHORLI_DENSE_PANELS ? panels : WHORLI_DENSE_PANELS;
    memset(work, 0, sizeof *work);
    work->n = n;
    work->parts = parts;
    work->rows = rows;
    work->off = (double *)whorl_layout_carve(layout, n, real);
    work->factor = (double *)whorl_layout_carve(layout, whorl_size_multiply(n, 2), real);
    work->u = (double *)whorl_layout_carve(layout, rows, real);
    work->v = (double *)whorl_layout_carve(layout, rows, real);
    work->w = (double *)whorl_layout_carve(layout, rows, real);
    work->y = (double *)whorl_layout_carve(layout, whorl_size_multiply(strips, rows), real);
    if (vectors == 0)
        return;
    work->pack = (double *)whorl_layout_carve(layout, whorl_size_multiply(rows, WHORLI_DENSE_PACK), real);
    work->turns = (double *)whorl_layout_carve(layout, whorl_size_multiply(n, 2 * WHORLI_DENSE_SWEEPS), real);
    work->buffers = (double *)whorl_layout_carve(layout, whorl_size_multiply(n, buffers * WHORLI_DENSE_ROWS), real);
}

/* Eight lanes that add products in turn, the first lane beginning; count goes on from a multiple of 8. */
static void whorli_dense_lanes(uint64_t count, const double *WHORLI_RESTRICT x, const double *WHORLI_RESTRICT y,
                               double *WHORLI_RESTRICT lanes)
{
    double sum[8];
    uint64_t r, l;
    for (l = 0; l < 8; l++)
        sum[l] = lanes[l];
    for (r = 0; r + 8 <= count; r += 8)
        for (l = 0; l < 8; l++)
            sum[l] += x[r + l] * y[r + l];
    for (l = 0; r + l < count; l++)
        sum[l] += x[r + l] * y[r + l];
    for (l = 0; l < 8; l++)
        lanes[l] = sum[l];
}

/*
 * The same for conj(x) y, x and y with their imaginary parts n further on: lanes 0 .. 7 for the real part, 8 .. 15
 * minus 16 .. 23 for the imaginary one. Four passes, as compilers make good code of each.
 */
static void whorli_dense_lanes_complex(uint64_t count, uint64_t n, const double *x, const double *y, double *lanes)
{
    whorli_dense_lanes(count, x, y, lanes);
    whorli_dense_lanes(count, x + n, y + n, lanes);
    whorli_dense_lanes(count, x, y + n, lanes + 8);
    whorli_dense_lanes(count, x + n, y, lanes + 16);
}

static double whorli_dense_lane_sum(const double *lanes)
{
    return ((lanes[0] + lanes[4]) + (lanes[2] + lanes[6])) + ((lanes[1] + lanes[5]) + (lanes[3] + lanes[7]));
}

/* <x, y> over rows first .. n - 1. */
static whorl_complex whorli_dense_dot(const whorli_dense *work, uint64_t first, const double *x, const double *y)
{
    double lanes[24];
    memset(lanes, 0, sizeof lanes);
    if (work->parts == 1)
        whorli_dense_lanes(work->n - first, x + first, y + first, lanes);
    else
        whorli_dense_lanes_complex(work->n - first, work->n, x + first, y + first, lanes);
    return whorl_complex_of(whorli_dense_lane_sum(lanes),
                            whorli_dense_lane_sum(lanes + 8) - whorli_dense_lane_sum(lanes + 16));
}

/* y += factor x over rows first .. n - 1. */
static void whorli_dense_add(const whorli_dense *work, uint64_t first, whorl_complex factor,
                             const double *WHORLI_RESTRICT x, double *WHORLI_RESTRICT y)
{
    const double *xi = x + work->n;
    double *yi = y + work->n;
    uint64_t r;
    if (work->parts == 1) {
        for (r = first; r < work->n; r++)
            y[r] += factor.re * x[r];
        return;
    }
    for (r = first; r < work->n; r++) {
        double re = x[r], im = xi[r];
        y[r] += factor.re * re - factor.im * im;
        yi[r] += factor.re * im + factor.im * re;
    }
}

/* What a pass needs of one column c: the elements c of v, w and u. */
typedef struct whorli_dense_heads {
    whorl_complex v, w, u;
} whorli_dense_heads;

/* One element: a - v_r conj(w_c) - w_r conj(v_c). */
static whorl_complex whorli_dense_updated(whorl_complex a, whorl_complex vr, whorl_complex wr,
                                          const whorli_dense_heads *c)
{
    a.re -= (vr.re * c->w.re + vr.im * c->w.im) + (wr.re * c->v.re + wr.im * c->v.im);
    a.im -= (vr.im * c->w.re - vr.re * c->w.im) + (wr.im * c->v.re - wr.re * c->v.im);
    return a;
}

/* The triangle on top of columns column .. end - 1, element by element: update, and both parts of y = A u. */
static void whorli_dense_corner(const whorli_dense *work, uint64_t column, uint64_t end,
                                const whorli_dense_heads *heads, double *y)
{
    uint64_t c, r;
    for (c = column; c < end; c++)
        for (r = c; r < end; r++) {
            double *a = work->a + c * work->rows;
            const whorli_dense_heads *head = heads + (c - column);
            whorl_complex x = whorli_dense_updated(whorli_dense_get(work, a, r), whorli_dense_get(work, work->v, r),
                                                   whorli_dense_get(work, work->w, r), head);
            whorl_complex to = whorli_dense_get(work, y, r), product;
            if (r == c)
                x.im = 0.0;
            whorli_dense_put(work, a, r, x);
            product = whorl_complex_multiply(x, head->u);
            whorli_dense_put(work, y, r, whorl_complex_of(to.re + product.re, to.im + product.im));
            if (r == c)
                continue;
            to = whorli_dense_get(work, y, c);
            product = whorl_complex_multiply(whorl_complex_of(x.re, -x.im), whorli_dense_get(work, work->u, r));
            whorli_dense_put(work, y, c, whorl_complex_of(to.re + product.re, to.im + product.im));
        }
}

/* A tile of four real columns: update, and y += A u from them. Pointers are to the tile's first row. */
static void whorli_dense_tile4(uint64_t count, uint64_t n, double *a, const double *WHORLI_RESTRICT v,
                               const double *WHORLI_RESTRICT w, double *WHORLI_RESTRICT y, const whorli_dense_heads *c)
{
    double *WHORLI_RESTRICT a0 = a;
    double *WHORLI_RESTRICT a1 = a + n;
    double *WHORLI_RESTRICT a2 = a + 2 * n;
    double *WHORLI_RESTRICT a3 = a + 3 * n;
    const double v0 = c[0].v.re, v1 = c[1].v.re, v2 = c[2].v.re, v3 = c[3].v.re;
    const double w0 = c[0].w.re, w1 = c[1].w.re, w2 = c[2].w.re, w3 = c[3].w.re;
    const double u0 = c[0].u.re, u1 = c[1].u.re, u2 = c[2].u.re, u3 = c[3].u.re;
    uint64_t r;
    for (r = 0; r < count; r++) {
        double x0 = a0[r] - (v[r] * w0 + w[r] * v0), x1 = a1[r] - (v[r] * w1 + w[r] * v1);
        double x2 = a2[r] - (v[r] * w2 + w[r] * v2), x3 = a3[r] - (v[r] * w3 + w[r] * v3);
        a0[r] = x0;
        a1[r] = x1;
        a2[r] = x2;
        a3[r] = x3;
        y[r] += (x0 * u0 + x1 * u1) + (x2 * u2 + x3 * u3);
    }
}

/* A tile of one real column. */
static void whorli_dense_tile1(uint64_t count, double *WHORLI_RESTRICT a, const double *WHORLI_RESTRICT v,
                               const double *WHORLI_RESTRICT w, double *WHORLI_RESTRICT y, const whorli_dense_heads *c)
{
    const double v0 = c->v.re, w0 = c->w.re, u0 = c->u.re;
    uint64_t r;
    for (r = 0; r < count; r++) {
        double x = a[r] - (v[r] * w0 + w[r] * v0);
        a[r] = x;
        y[r] += x * u0;
    }
}

/* A tile of one complex column; imaginary parts are n further on. */
static void whorli_dense_tile_complex(uint64_t count, uint64_t n, double *a, const double *v, const double *w,
                                      double *y, const whorli_dense_heads *c)
{
    double *WHORLI_RESTRICT ar = a;
    double *WHORLI_RESTRICT ai = a + n;
    double *WHORLI_RESTRICT yr = y;
    double *WHORLI_RESTRICT yi = y + n;
    const double *WHORLI_RESTRICT vr = v;
    const double *WHORLI_RESTRICT vi = v + n;
    const double *WHORLI_RESTRICT wr = w;
    const double *WHORLI_RESTRICT wi = w + n;
    const double v_re = c->v.re, v_im = c->v.im, w_re = c->w.re, w_im = c->w.im, u_re = c->u.re, u_im = c->u.im;
    uint64_t r;
    for (r = 0; r < count; r++) {
        double re = ar[r] - ((vr[r] * w_re + vi[r] * w_im) + (wr[r] * v_re + wi[r] * v_im));
        double im = ai[r] - ((vi[r] * w_re - vr[r] * w_im) + (wi[r] * v_re - wr[r] * v_im));
        ar[r] = re;
        ai[r] = im;
        yr[r] += re * u_re - im * u_im;
        yi[r] += re * u_im + im * u_re;
    }
}

/* `group` columns (4 real, or 1) from `column` on: all rows. */
static void whorli_dense_group(const whorli_dense *work, uint64_t column, uint64_t group, double *y)
{
    whorli_dense_heads heads[4];
    double lanes[32]; /* eight for each of four real columns, or 24 for a complex one */
    double *a = work->a + column * work->rows;
    uint64_t k, row;
    memset(lanes, 0, sizeof lanes);
    memset(heads, 0, sizeof heads);
    for (k = 0; k < group; k++) {
        heads[k].v = whorli_dense_get(work, work->v, column + k);
        heads[k].w = whorli_dense_get(work, work->w, column + k);
        heads[k].u = whorli_dense_get(work, work->u, column + k);
    }
    whorli_dense_corner(work, column, column + group, heads, y);
    for (row = column + group; row < work->n; row += WHORLI_DENSE_TILE) {
        uint64_t count = work->n - row < WHORLI_DENSE_TILE ? work->n - row : WHORLI_DENSE_TILE;
        if (work->parts != 1) {
            whorli_dense_tile_complex(count, work->n, a + row, work->v + row, work->w + row, y + row, heads);
            whorli_dense_lanes_complex(count, work->n, a + row, work->u + row, lanes);
            continue;
        }
        if (group == 4)
            whorli_dense_tile4(count, work->n, a + row, work->v + row, work->w + row, y + row, heads);
        else
            whorli_dense_tile1(count, a + row, work->v + row, work->w + row, y + row, heads);
        for (k = 0; k < group; k++)
            whorli_dense_lanes(count, a + k * work->n + row, work->u + row, lanes + 8 * k);
    }
    for (k = 0; k < group; k++)
        y[column + k] += whorli_dense_lane_sum(lanes + 8 * k);
    if (work->parts != 1)
        y[work->n + column] += whorli_dense_lane_sum(lanes + 8) - whorli_dense_lane_sum(lanes + 16);
}

/* Block b of a pass: what strip b has of the columns behind `step`. */
static void whorli_dense_strip(void *argument, uint64_t block, int32_t worker)
{
    const whorli_dense *work = (const whorli_dense *)argument;
    uint64_t strip = (work->step + 1) / WHORLI_DENSE_STRIP + block, column = strip * WHORLI_DENSE_STRIP;
    uint64_t end = column + WHORLI_DENSE_STRIP < work->n ? column + WHORLI_DENSE_STRIP : work->n, r, part;
    double *y = work->y + strip * work->rows;
    (void)worker;
    if (column < work->step + 1)
        column = work->step + 1;
    for (part = 0; part < work->parts; part++)
        for (r = column; r < work->n; r++)
            y[part * work->n + r] = 0.0;
    while (column < end) {
        uint64_t group = work->parts == 1 && column % 4 == 0 && end - column >= 4 ? 4 : 1;
        whorli_dense_group(work, column, group, y);
        column += group;
    }
}

/* Adds the strips' y, in order, into the first of them; returns it. */
static double *whorli_dense_strips_sum(const whorli_dense *work)
{
    uint64_t first = (work->step + 1) / WHORLI_DENSE_STRIP, strip, part, r;
    double *total = work->y + first * work->rows;
    for (strip = first + 1; strip * WHORLI_DENSE_STRIP < work->n; strip++)
        for (part = 0; part < work->parts; part++) {
            const double *from = work->y + strip * work->rows + part * work->n;
            double *to = total + part * work->n;
            for (r = strip * WHORLI_DENSE_STRIP; r < work->n; r++)
                to[r] += from[r];
        }
    return total;
}

/* Applies the last reflection to column `step`. */
static void whorli_dense_column(const whorli_dense *work)
{
    const uint64_t j = work->step;
    double *a = work->a + j * work->rows;
    whorl_complex v = whorli_dense_get(work, work->v, j), w = whorli_dense_get(work, work->w, j);
    whorli_dense_add(work, j, whorl_complex_of(-w.re, w.im), work->v, a);
    whorli_dense_add(work, j, whorl_complex_of(-v.re, v.im), work->w, a);
}

/*
 * The reflection I - tau u u^dagger, u_(j+1) = 1, whose adjoint takes column j below the diagonal to (off_j, 0, ...),
 * off_j real. The largest entry is near 1, so a rest of a square below 2^-900 may be dropped; above nothing underflows.
 */
static void whorli_dense_reflection(const whorli_dense *work)
{
    const uint64_t j = work->step;
    double *a = work->a + j * work->rows, beta;
    whorl_complex head = whorli_dense_get(work, a, j + 1), tau = {0.0, 0.0}, one = {1.0, 0.0}, scale;
    double rest = j + 2 < work->n ? whorli_dense_dot(work, j + 2, a, a).re : 0.0;
    uint64_t r, part;
    for (part = 0; part < work->parts; part++)
        for (r = j + 1; r < work->n; r++)
            work->u[part * work->n + r] = 0.0;
    work->off[j] = head.re;
    if (rest + head.im * head.im > whorli_dense_power(-900)) {
        double size;
        beta = sqrt(rest + (head.re * head.re + head.im * head.im));
        beta = head.re > 0.0 ? -beta : beta;
        tau = whorl_complex_of((beta - head.re) / beta, -head.im / beta);
        scale = whorl_complex_of(head.re - beta, -head.im); /* of its inverse, the conjugate */
        size = scale.re * scale.re + scale.im * scale.im;
        if (work->parts == 1)
            scale = whorl_complex_of(1.0 / scale.re, 0.0);
        else
            scale = whorl_complex_of(scale.re / size, scale.im / size);
        whorli_dense_add(work, j + 1, scale, a, work->u);
        work->off[j] = beta;
    }
    whorli_dense_put(work, work->u, j + 1, one);
    for (part = 0; part < work->parts; part++) {
        uint64_t from = part * work->n + j + 1;
        memcpy(a + from, work->u + from, (size_t)(work->n - j - 1) * sizeof(double));
    }
    work->factor[2 * j] = tau.re;
    work->factor[2 * j + 1] = tau.im;
}

/* Diagonal and off-diagonal of T; reflections stay below the diagonal of a. */
static whorl_status whorli_dense_reduce(whorl_host *host, whorli_dense *work)
{
    uint64_t j, r;
    for (r = 0; r < work->rows; r++)
        work->u[r] = work->v[r] = work->w[r] = 0.0;
    for (j = 0; j < work->n; j++) {
        uint64_t strips = (work->n - 1) / WHORLI_DENSE_STRIP - (j + 1) / WHORLI_DENSE_STRIP + 1;
        whorl_complex tau;
        double *y, square;
        whorl_status status;
        work->step = j;
        whorli_dense_column(work);
        work->diagonal[j] = work->a[j * work->rows + j];
        if (j + 1 == work->n)
            break;
        whorl_stage(host, "reduction to tridiagonal form", j, work->n);
        whorli_dense_reflection(work);
        status = whorli_dense_run(host, whorli_dense_strip, work, strips, WHORLI_DENSE_STRIP * (work->rows - j));
        if (status != WHORL_OK)
            return status;
        /* w = tau y - 1/2 |tau|^2 <u, y> u, <u, y> real; then (v, w) = (u, w) */
        y = whorli_dense_strips_sum(work);
        tau = whorl_complex_of(work->factor[2 * j], work->factor[2 * j + 1]);
        square = (tau.re * tau.re + tau.im * tau.im) * whorli_dense_dot(work, j + 1, work->u, y).re;
        for (r = 0; r < work->rows; r++)
            work->w[r] = 0.0;
        whorli_dense_add(work, j + 1, tau, y, work->w);
        whorli_dense_add(work, j + 1, whorl_complex_of(-0.5 * square, 0.0), work->u, work->w);
        y = work->v;
        work->v = work->u;
        work->u = y;
    }
    return WHORL_OK;
}

/* Block b of forming Q: some columns, each through all reflections of the pack, the last one first. */
static void whorli_dense_unfold(void *argument, uint64_t block, int32_t worker)
{
    const whorli_dense *work = (const whorli_dense *)argument;
    uint64_t column = work->pack_first + 1 + block * WHORLI_DENSE_COLUMNS, end = column + WHORLI_DENSE_COLUMNS, k;
    (void)worker;
    for (; column < end && column < work->n; column++) {
        double *q = work->a + column * work->rows;
        for (k = work->pack_count; k-- > 0;) {
            const double *u = work->pack + k * work->rows;
            uint64_t j = work->pack_first + k;
            whorl_complex tau = whorl_complex_of(-work->factor[2 * j], -work->factor[2 * j + 1]);
            if (tau.re != 0.0 || tau.im != 0.0)
                whorli_dense_add(work, j + 1, whorl_complex_multiply(tau, whorli_dense_dot(work, j + 1, u, q)), u, q);
        }
    }
}

/*
 * a becomes Q = H_0 H_1 ... H_(n-2), from the last reflection to the first: after H_j only rows and columns from j + 1
 * on are more than the unit matrix, while the reflections still to come stand in columns before them.
 */
static whorl_status whorli_dense_form(whorl_host *host, whorli_dense *work)
{
    uint64_t first, done = work->n - 1, column, r; /* columns above `done` are formed */
    for (;;) {
        whorl_status status;
        first = done < WHORLI_DENSE_PACK ? 0 : done - WHORLI_DENSE_PACK;
        work->pack_first = first;
        work->pack_count = done - first;
        memcpy(work->pack, work->a + first * work->rows, (size_t)(work->pack_count * work->rows) * sizeof(double));
        for (column = first == 0 ? 0 : first + 1; column <= done; column++) {
            double *q = work->a + column * work->rows;
            for (r = 0; r < work->rows; r++)
                q[r] = 0.0;
            q[column] = 1.0;
        }
        for (column = done + 1; column < work->n; column++) /* new rows of the unit matrix */
            for (r = first; r <= done; r++)
                whorli_dense_put(work, work->a + column * work->rows, r, whorl_complex_of(0.0, 0.0));
        if (work->pack_count == 0)
            return WHORL_OK;
        whorl_stage(host, "vectors from the reflections", work->n - done, work->n);
        status = whorli_dense_run(host, whorli_dense_unfold, work,
                                  (work->n - first - 1 + WHORLI_DENSE_COLUMNS - 1) / WHORLI_DENSE_COLUMNS,
                                  WHORLI_DENSE_COLUMNS * WHORLI_DENSE_PACK * (work->rows - first));
        if (status != WHORL_OK || first == 0)
            return status;
        done = first;
    }
}

/* T's eigenvalues, and a times its eigenvectors. */
static whorl_status whorli_dense_rotate_all(whorl_host *host, const whorli_dense *work, int32_t vectors)
{
    whorli_dense_turns turns;
    memset(&turns, 0, sizeof turns);
    turns.host = host;
    turns.n = work->n;
    turns.m = work->rows;
    turns.z = vectors ? work->a : NULL;
    turns.turns = work->turns;
    turns.buffers = work->buffers;
    whorl_stage(host, "QL iteration", 0, 0);
    return whorli_dense_iterate(&turns, work->diagonal, work->off);
}

/* Everything between the scaling. */
static whorl_status whorli_dense_solve(whorl_host *host, whorli_dense *work, int32_t vectors)
{
    whorl_status status;
    if (work->parts != 1)
        whorli_dense_split(work->n, work->a, work->u, 1);
    status = whorli_dense_reduce(host, work);
    if (status == WHORL_OK && vectors)
        status = whorli_dense_form(host, work);
    if (status == WHORL_OK)
        status = whorli_dense_rotate_all(host, work, vectors);
    if (status != WHORL_OK || !vectors)
        return status;
    whorli_dense_phases(work);
    if (work->parts != 1)
        whorli_dense_split(work->n, work->a, work->u, 0);
    return WHORL_OK;
}

#endif /* own code */

/* ---- >>spectra --------------------------------------------------------------------------------------------------- */

/* The largest modulus of the lower triangle in *most; the index of an entry that is not finite, or WHORL_NONE. */
static uint64_t whorli_dense_inspect(uint64_t n, uint64_t parts, const double *a, double *most)
{
    uint64_t c, wrong;
    *most = 0.0;
    for (c = 0; c < n; c++) {
        const double *column = a + parts * (n * c + c);
        wrong = whorl_is_finite(column[0]) ? whorli_dense_wrong(column + parts, parts * (n - c - 1)) : 0;
        if (wrong != WHORL_NONE)
            return n * c + c + (whorl_is_finite(column[0]) ? 1 + wrong / parts : 0);
        *most = whorli_dense_largest(column, 1, *most);
        *most = whorli_dense_largest(column + parts, parts * (n - c - 1), *most);
    }
    return WHORL_NONE;
}

/* The scratch of one call, in bytes of its block. */
static uint64_t whorli_dense_bytes(uint64_t n, uint64_t parts, int32_t vectors)
{
    whorl_layout layout = {NULL, 0};
    whorli_dense work;
    if (whorl_size_multiply(whorl_size_multiply(n, n), parts * sizeof(double)) >= (UINT64_C(1) << 62))
        return WHORL_NONE;
    whorli_dense_plan(&layout, &work, n, parts, vectors);
    return layout.bytes;
}

/* Real for parts 1, Hermitian for parts 2. */
static whorl_status whorli_dense_spectrum(whorl_host *host, uint64_t n, uint64_t parts, double *a, double *values,
                                          int32_t vectors)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorli_dense work;
    whorl_status status;
    double most;
    uint64_t wrong, c;
    int32_t power;
    if (n > 0 && (a == NULL || values == NULL))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the matrix or the array for its eigenvalues is NULL: give both");
    layout.bytes = whorli_dense_bytes(n, parts, vectors);
    if (layout.bytes == WHORL_NONE)
        return whorl_fail(host, WHORL_TOO_LARGE, "n is too large: the matrix exceeds memory or the integers of LAPACK");
    wrong = whorli_dense_inspect(n, parts, a, &most);
    if (wrong != WHORL_NONE)
        return whorli_dense_not_finite(host, wrong, "an entry of the matrix is NaN or infinite: see its index r + n c");
    if (n == 0)
        return WHORL_OK;
    status = whorl_layout_take(host, &layout, &block);
    if (status != WHORL_OK)
        return status;
    whorli_dense_plan(&layout, &work, n, parts, vectors);
    work.a = a;
    work.diagonal = values;
    power = most > 0.0 ? whorli_dense_exponent(most) : 0;
    for (c = 0; c < n; c++)
        whorli_dense_scale(a + parts * (n * c + c), parts * (n - c), -power);
    status = whorli_dense_solve(host, &work, vectors);
    if (status == WHORL_OK)
        status = whorli_dense_unscale(host, values, n, power);
    whorl_block_give(host, &block);
    return status;
}

whorl_status whorl_dense_symmetric(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors)
{
    return whorli_dense_spectrum(host, n, 1, a, values, vectors);
}

whorl_status whorl_dense_hermitian(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors)
{
    return whorli_dense_spectrum(host, n, 2, a, values, vectors);
}

uint64_t whorl_dense_symmetric_bytes(uint64_t n, int32_t vectors)
{
    return n == 0 ? 0 : whorl_block_bytes(whorli_dense_bytes(n, 1, vectors));
}

uint64_t whorl_dense_hermitian_bytes(uint64_t n, int32_t vectors)
{
    return n == 0 ? 0 : whorl_block_bytes(whorli_dense_bytes(n, 2, vectors));
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
