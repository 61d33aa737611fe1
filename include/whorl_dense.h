/*
 * whorl_dense.h 0.1.0: whole spectra of small matrices, real symmetric and complex Hermitian, with or without vectors, and
 * the tridiagonal problem that Krylov methods end in.
 *
 * Matrices are full n x n arrays, column by column (element (r, c) at r + n c), complex ones interleaved; only the lower
 * triangle is read. Eigenvalues come ascending. Own code: reduction to tridiagonal form by reflections, then the implicit
 * QL iteration.
 *
 *     double a[9] = {2, -1, 0, 0, 2, -1, 0, 0, 2}, values[3];              (lower triangle of 2, -1 Toeplitz)
 *     if (whorl_dense_symmetric(&host, 3, a, values, 1) == WHORL_OK)
 *         use(values[0], a);                                              (2 - sqrt 2, and its vector in a[0..2])
 *
 * It does not: solve for some of the levels only (whorl_lanczos.h), nor non-symmetric or generalised problems.
 *
 * Accuracy: ||H v - l v|| and ||V'V - 1|| stay below a few n eps ||H|| and n eps; eigenvalues are right to n eps ||H||, not
 * each to its own last digit. Matrices are scaled by a power of two first, so any finite entries work.
 * Memory: one scratch block a call, announced by the _bytes functions; the vectors replace the matrix. 4/3 n^3
 * multiplications and as many additions for values (four times that for Hermitian matrices), some 5 n^3 for vectors.
 * Threads: work is spread over the host's threads; bits do not depend on their number. With and without vectors the values
 * have the same bits.
 * Errors: statuses of whorl_core.h; what leaves with WHORL_BAD_ARGUMENT, WHORL_NOT_FINITE (in the input), WHORL_TOO_LARGE,
 * WHORL_OVER_LIMIT or WHORL_NO_MEMORY has touched nothing; after WHORL_CANCELLED and WHORL_NO_CONVERGENCE the contents of
 * matrix and values are unspecified.
 * Options (where the implementation is compiled): WHORL_USE_LAPACK hands the matrices to dsyevd and zheevd (link LAPACK with 32-bit
 * integers). That suspends four promises for these two calls: bits equal across builds, threads and machines; a cancel in mid-work
 * (polled only before and after); no malloc but the host's (a BLAS may take its own); the choice of threads by the host.
 * Methods: A. S. Householder, J. ACM 5, 339 (1958); R. S. Martin, C. Reinsch, J. H. Wilkinson, Numer. Math. 11, 181 (1968);
 * A. Dubrulle, R. S. Martin, J. H. Wilkinson, Numer. Math. 12, 377 (1968); the order of rotations in waves: F. G. Van Zee,
 * R. A. van de Geijn, G. Quintana-Orti, ACM Trans. Math. Softw. 40, 18 (2014).
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

/* ---- whole spectra --------------------------------------------------------------------------------------------------- */

/*
 * All eigenvalues of the real symmetric matrix a (n x n doubles, column by column, lower triangle read, all of it
 * overwritten), ascending in values[0 .. n). With vectors != 0, a becomes the orthonormal eigenvectors, column k to
 * values[k]; otherwise its contents are lost. Sign of a vector: its first component of at least half the largest modulus is
 * positive. n = 0 is legal.
 * Errors: WHORL_BAD_ARGUMENT (NULL), WHORL_NOT_FINITE (reason.index = r + n c of the entry; or an eigenvalue exceeds
 * the largest double), WHORL_TOO_LARGE, WHORL_OVER_LIMIT, WHORL_NO_MEMORY, WHORL_CANCELLED, WHORL_NO_CONVERGENCE.
 * Cost: O(n^3), see above.
 */
WHORL_API whorl_status whorl_dense_symmetric(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors);

/*
 * The same for a complex Hermitian matrix: a has n x n interleaved complex numbers (2 n n doubles); imaginary parts on the
 * diagonal are not read. The component named above is made real and positive.
 */
WHORL_API whorl_status whorl_dense_hermitian(whorl_host *host, uint64_t n, double *a, double *values, int32_t vectors);

/* The bytes that the two calls take from the host, exactly, for any number of threads; UINT64_MAX where n is too large. */
WHORL_API uint64_t whorl_dense_symmetric_bytes(uint64_t n, int32_t vectors);
WHORL_API uint64_t whorl_dense_hermitian_bytes(uint64_t n, int32_t vectors);

/* ---- tridiagonal ----------------------------------------------------------------------------------------------------- */

/*
 * All eigenvalues of the symmetric tridiagonal matrix with diagonal[0 .. n) and off[0 .. n-1) beside it: ascending in
 * diagonal; off is destroyed. With z not NULL (m rows, n columns, column by column), z is multiplied from the right by the
 * eigenvectors: begin with the unit matrix to get them, with one row of it for their first components, with a basis for
 * vectors in the basis' space (complex ones: m counts real numbers). Takes no memory.
 * Errors: WHORL_BAD_ARGUMENT (NULL), WHORL_NOT_FINITE (reason.index: of diagonal, or n + that of off; nothing is touched
 * then), WHORL_CANCELLED, WHORL_NO_CONVERGENCE. Cost: about 3/4 n^2 rotations of m rows, 20 n^2 operations without z.
 */
WHORL_API whorl_status whorl_dense_tridiagonal(whorl_host *host, uint64_t n, double *diagonal, double *off, double *z,
                                               uint64_t m);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_DENSE_INCLUDED */

/* ==== implementation ================================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_DENSE_IMPLEMENTED)
#define WHORL_DENSE_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>scaling ------------------------------------------------------------------------------------------------------- */

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
    return whorli_dense_not_finite(host, wrong, "an eigenvalue exceeds the largest double: choose a larger unit of energy");
}

/* ---- >>rotations ----------------------------------------------------------------------------------------------------- */

/*
 * The QL iteration rotates neighbouring columns of z: (z_j, z_j+1) becomes (c z_j - s z_j+1, s z_j + c z_j+1), a sweep does
 * so for a range of j in descending (order +1) or ascending (order -1) sequence. With `turns` the rotations of up to
 * WHORLI_DENSE_SWEEPS sweeps are kept and applied together, in an order that keeps each column in cache for many
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

static void whorli_dense_rotate(uint64_t count, double *WHORLI_RESTRICT a, double *WHORLI_RESTRICT b, double c, double s)
{
    uint64_t r;
    for (r = 0; r < count; r++) {
        double x = a[r], y = b[r];
        a[r] = c * x - s * y;
        b[r] = s * x + c * y;
    }
}

/* The same for a panel's column of fixed length, the second column following the first. */
static void whorli_dense_rotate_panel(double *a, double c, double s)
{
    double *WHORLI_RESTRICT x = a;
    double *WHORLI_RESTRICT y = a + WHORLI_DENSE_ROWS;
    uint64_t r;
    for (r = 0; r < WHORLI_DENSE_ROWS; r++) {
        double p = x[r], q = y[r];
        x[r] = c * p - s * q;
        y[r] = s * p + c * q;
    }
}

/*
 * Sweeps first .. first + count - 1 on a panel that holds columns base, base + 1, ... Rotation j of sweep p needs
 * rotations j - 1, j, j + 1 of sweep p - 1 done before. In front f sweep p does column f + p (order +1, f descending)
 * or f - p (order -1, f ascending), p ascending: that is enough.
 */
static void whorli_dense_wave(const whorli_dense_turns *turns, uint64_t first, uint64_t count, uint64_t base, double *panel)
{
    int64_t order = turns->order, from = 0, to = 0, front;
    uint64_t p;
    for (p = 0; p < count; p++) { /* fronts, counted along the order of the sweep: from >= front >= to */
        int64_t low = (int64_t)turns->low[first + p], high = (int64_t)turns->high[first + p];
        int64_t begin = (order > 0 ? high : -low) - (int64_t)p, end = (order > 0 ? low : -high) - (int64_t)p;
        from = p == 0 || begin > from ? begin : from;
        to = p == 0 || end < to ? end : to;
    }
    for (front = from; front >= to; front--)
        for (p = 0; p < count; p++) {
            int64_t j = order * (front + (int64_t)p);
            if (j >= (int64_t)turns->low[first + p] && j <= (int64_t)turns->high[first + p]) {
                const double *turn = turns->turns + 2 * ((first + p) * turns->n + (uint64_t)j);
                whorli_dense_rotate_panel(panel + ((uint64_t)j - base) * WHORLI_DENSE_ROWS, turn[0], turn[1]);
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
        for (p = 0; p < turns->count; p += WHORLI_DENSE_WAVE)
            whorli_dense_wave(turns, p, turns->count - p < WHORLI_DENSE_WAVE ? turns->count - p : WHORLI_DENSE_WAVE, low,
                              panel);
        for (j = low; j <= high + 1; j++)
            memcpy(turns->z + j * turns->m + row, panel + (j - low) * WHORLI_DENSE_ROWS, (size_t)rows * sizeof(double));
    }
}

/* Runs small work here and large work on the host's threads: by size, never by their number. */
static whorl_status whorli_dense_run(whorl_host *host, whorl_body_function body, void *argument, uint64_t blocks,
                                     uint64_t updates)
{
    uint64_t block;
    whorl_status status;
    if (blocks > 1 && whorl_size_multiply(blocks, updates) >= (UINT64_C(1) << 15))
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

/* ---- >>tridiagonal --------------------------------------------------------------------------------------------------- */

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
static whorl_status whorli_dense_sweep(whorli_dense_turns *turns, const whorli_dense_block *block, uint64_t l, uint64_t m)
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
                              "the QL iteration did not converge: check that the arithmetic is IEEE double (whorl_arithmetic)");
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
        return whorli_dense_not_finite(host, wrong, "the tridiagonal matrix has an entry that is NaN or infinite: see its index");
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

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
