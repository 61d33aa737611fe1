/*
 * dense_judge.h: what the fast code is held against in tests. It shares only the types of whorl_pauli.h with the
 * library: matrices are built by Kronecker products of explicit 2 x 2 matrices, products are taken term by term and site
 * by site.
 *
 * Complex matrices and vectors are interleaved doubles; matrices are n x n, column-major: element (r, c) at
 * m[2 * (r + n * c)]. Site 0 is the least significant bit of a row or column number.
 */
#ifndef DENSE_JUDGE_INCLUDED
#define DENSE_JUDGE_INCLUDED

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "whorl_core.h"
#include "whorl_pauli.h"

#define JUDGE_MOST_SITES 10

/* Tests stop where memory is missing: no result would be honest. */
static inline void *judge_memory(uint64_t count, uint64_t size)
{
    void *memory = calloc((size_t)(count > 0 ? count : 1), (size_t)size);
    if (memory == NULL) {
        printf("the test is out of memory\n");
        exit(3);
    }
    return memory;
}
static inline double *judge_reals(uint64_t count)
{
    return (double *)judge_memory(count, sizeof(double));
}

/* ---- dense matrices ---------------------------------------------------------------------------------------------- */

/* 2 x 2 matrices, row by row, re and im: rows and columns are bit 0 (up), bit 1 (down). */
static const double judge_one[8] = {1, 0, 0, 0, 0, 0, 1, 0};
static const double judge_x[8] = {0, 0, 1, 0, 1, 0, 0, 0};
static const double judge_y[8] = {0, 0, 0, -1, 0, 1, 0, 0};
static const double judge_z[8] = {1, 0, 0, 0, 0, 0, -1, 0};
static const double judge_raise[8] = {0, 0, 1, 0, 0, 0, 0, 0}; /* S^+ = |up><down| */
static const double judge_lower[8] = {0, 0, 0, 0, 1, 0, 0, 0}; /* S^- = |down><up| */

/*
 * The Kronecker product factor[sites-1] x ... x factor[1] x factor[0] into out, 4^sites complex numbers. Grows site by
 * site: out = factor[k] x (what there is), in an array of its own each time.
 */
static inline void judge_kronecker(int32_t sites, const double *const *factor, double *out)
{
    uint64_t n = 1;
    double *now = judge_reals(2);
    int32_t k;
    now[0] = 1.0;
    for (k = 0; k < sites; k++, n *= 2) {
        double *grown = judge_reals(8 * n * n);
        uint64_t r, c, i, j;
        for (r = 0; r < 2; r++)
            for (c = 0; c < 2; c++) {
                double re = factor[k][4 * r + 2 * c], im = factor[k][4 * r + 2 * c + 1];
                for (j = 0; j < n; j++)
                    for (i = 0; i < n; i++) {
                        const double *from = now + 2 * (i + n * j);
                        double *to = grown + 2 * (r * n + i + 2 * n * (c * n + j));
                        to[0] = re * from[0] - im * from[1];
                        to[1] = re * from[1] + im * from[0];
                    }
            }
        free(now);
        now = grown;
    }
    memcpy(out, now, (size_t)(2 * n * n) * sizeof(double));
    free(now);
}

/* The matrix of a one-site operator; free it. */
static inline double *judge_site(int32_t sites, int32_t site, const double *one_site)
{
    const double *factor[64];
    double *out = judge_reals(UINT64_C(2) << 2 * sites);
    int32_t k;
    for (k = 0; k < sites; k++)
        factor[k] = k == site ? one_site : judge_one;
    judge_kronecker(sites, factor, out);
    return out;
}

/* The matrix of a sum of at most JUDGE_MOST_SITES sites; free it. */
static inline double *judge_dense(const whorl_sum *sum)
{
    uint64_t size = UINT64_C(1) << 2 * sum->sites, t, i;
    double *total = judge_reals(2 * size), *one = judge_reals(2 * size);
    for (t = 0; t < sum->count; t++) {
        const whorl_term *term = sum->terms + t;
        const double *factor[64];
        int32_t k;
        for (k = 0; k < sum->sites; k++) {
            int flips = (int)(term->x >> k & 1), signs = (int)(term->z >> k & 1);
            factor[k] = flips ? (signs ? judge_y : judge_x) : (signs ? judge_z : judge_one);
        }
        judge_kronecker(sum->sites, factor, one);
        for (i = 0; i < size; i++) {
            total[2 * i] += term->re * one[2 * i] - term->im * one[2 * i + 1];
            total[2 * i + 1] += term->re * one[2 * i + 1] + term->im * one[2 * i];
        }
    }
    free(one);
    return total;
}

/* out = a b */
static inline void judge_multiply(uint64_t n, const double *a, const double *b, double *out)
{
    uint64_t i, j, k;
    memset(out, 0, (size_t)(2 * n * n) * sizeof(double));
    for (j = 0; j < n; j++)
        for (k = 0; k < n; k++) {
            double re = b[2 * (k + n * j)], im = b[2 * (k + n * j) + 1];
            if (re == 0.0 && im == 0.0)
                continue;
            for (i = 0; i < n; i++) {
                const double *from = a + 2 * (i + n * k);
                out[2 * (i + n * j)] += from[0] * re - from[1] * im;
                out[2 * (i + n * j) + 1] += from[0] * im + from[1] * re;
            }
        }
}

/* a += (re + i im) b */
static inline void judge_add(uint64_t n, double *a, double re, double im, const double *b)
{
    uint64_t i;
    for (i = 0; i < n * n; i++) {
        a[2 * i] += re * b[2 * i] - im * b[2 * i + 1];
        a[2 * i + 1] += re * b[2 * i + 1] + im * b[2 * i];
    }
}

/* out = a^dagger */
static inline void judge_adjoint(uint64_t n, const double *a, double *out)
{
    uint64_t i, j;
    for (j = 0; j < n; j++)
        for (i = 0; i < n; i++) {
            out[2 * (i + n * j)] = a[2 * (j + n * i)];
            out[2 * (i + n * j) + 1] = -a[2 * (j + n * i) + 1];
        }
}

/* The largest difference of two elements, in modulus of re or im. */
static inline double judge_distance(uint64_t n, const double *a, const double *b)
{
    double most = 0.0;
    uint64_t i;
    for (i = 0; i < 2 * n * n; i++) {
        double off = fabs(a[i] - b[i]);
        if (!(off <= most))
            most = off;
    }
    return most;
}

static inline whorl_complex judge_trace(uint64_t n, const double *a)
{
    whorl_complex trace = {0.0, 0.0};
    uint64_t i;
    for (i = 0; i < n; i++) {
        trace.re += a[2 * (i + n * i)];
        trace.im += a[2 * (i + n * i) + 1];
    }
    return trace;
}

/* ---- products term by term --------------------------------------------------------------------------------------- */

/* The index of a state in a list that ascends; states NULL: all, and the index is the state. WHORL_NONE if absent. */
static inline uint64_t judge_find(const uint64_t *states, uint64_t count, uint64_t state)
{
    uint64_t low = 0, high = count;
    if (states == NULL)
        return state < count ? state : WHORL_NONE;
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (states[middle] < state)
            low = middle + 1;
        else
            high = middle;
    }
    return low < count && states[low] == state ? low : WHORL_NONE;
}

/* P|state> = i^quarter |result>, factor by factor: X|0> = |1>, X|1> = |0>, Y|0> = i|1>, Y|1> = -i|0>, Z|1> = -|1>. */
static inline uint64_t judge_string_on(uint64_t x, uint64_t z, uint64_t state, int *quarter)
{
    uint64_t mask;
    int turns = 0;
    for (mask = x | z; mask != 0; mask &= mask - 1) {
        uint64_t bit = mask & (0 - mask);
        int down = (state & bit) != 0, flips = (x & bit) != 0, signs = (z & bit) != 0;
        if (flips && signs)
            turns += down ? 3 : 1;
        else if (signs)
            turns += down ? 2 : 0;
        if (flips)
            state ^= bit;
    }
    *quarter = turns & 3;
    return state;
}

/*
 * y = A x, complex, from the states `from` to the states `to` (each ascending, NULL: all states below the count). What
 * leads out of `to` is dropped; returns the largest re or im of one dropped contribution, 0 where nothing was.
 */
static inline double judge_product_between(const whorl_sum *sum, const uint64_t *from, uint64_t from_count,
                                           const uint64_t *to, uint64_t to_count, const double *x, double *y)
{
    double dropped = 0.0;
    uint64_t j, t;
    memset(y, 0, (size_t)(2 * to_count) * sizeof(double));
    for (j = 0; j < from_count; j++)
        for (t = 0; t < sum->count; t++) {
            const whorl_term *term = sum->terms + t;
            int quarter;
            uint64_t state = judge_string_on(term->x, term->z, from == NULL ? j : from[j], &quarter);
            uint64_t row = judge_find(to, to_count, state);
            double re = term->re * x[2 * j] - term->im * x[2 * j + 1];
            double im = term->re * x[2 * j + 1] + term->im * x[2 * j];
            double turned_re = quarter == 0 ? re : quarter == 1 ? -im : quarter == 2 ? -re : im;
            double turned_im = quarter == 0 ? im : quarter == 1 ? re : quarter == 2 ? -im : -re;
            if (row == WHORL_NONE) {
                if (fabs(re) > dropped)
                    dropped = fabs(re);
                if (fabs(im) > dropped)
                    dropped = fabs(im);
                continue;
            }
            y[2 * row] += turned_re;
            y[2 * row + 1] += turned_im;
        }
    return dropped;
}

/* y = A x within one list of states. */
static inline double naive_product(const whorl_sum *sum, const uint64_t *states, uint64_t count, const double *x,
                                   double *y)
{
    return judge_product_between(sum, states, count, states, count, x, y);
}

/* ||A v - value v|| by the naive product; v complex, or real with is_complex = 0. */
static inline double judge_residual(const whorl_sum *sum, const uint64_t *states, uint64_t count, double value,
                                    const double *v, int is_complex)
{
    double *x = judge_reals(2 * count), *y = judge_reals(2 * count), square = 0.0;
    uint64_t i;
    for (i = 0; i < count; i++) {
        x[2 * i] = is_complex ? v[2 * i] : v[i];
        x[2 * i + 1] = is_complex ? v[2 * i + 1] : 0.0;
    }
    naive_product(sum, states, count, x, y);
    for (i = 0; i < 2 * count; i++)
        square += (y[i] - value * x[i]) * (y[i] - value * x[i]);
    free(x);
    free(y);
    return sqrt(square);
}

/* The states with `down` down spins among `sites`, ascending, by looking at every integer; free them. sites <= 26. */
static inline uint64_t *judge_states_down(int32_t sites, int32_t down, uint64_t *count)
{
    uint64_t state, *states = (uint64_t *)judge_memory(whorl_binomial(sites, down), sizeof(uint64_t));
    *count = 0;
    for (state = 0; state < UINT64_C(1) << sites; state++) {
        int32_t k, ones = 0;
        for (k = 0; k < sites; k++)
            ones += (int32_t)(state >> k & 1);
        if (ones == down)
            states[(*count)++] = state;
    }
    return states;
}

/* ---- LAPACK ------------------------------------------------------------------------------------------------------ */

#ifdef HAVE_LAPACK
extern void dsyev_(const char *job, const char *half, const int *n, double *a, const int *stride, double *values,
                   double *work, const int *room, int *info);
extern void zheev_(const char *job, const char *half, const int *n, double *a, const int *stride, double *values,
                   double *work, const int *room, double *reals, int *info);

/* Eigenvalues ascending of a symmetric matrix (n x n, column-major), which becomes the eigenvectors; 0 is success. */
static inline int judge_lapack_symmetric(uint64_t n, double *a, double *values, int vectors)
{
    int order = (int)n, room = order * (order > 34 ? 34 : order + 3) + 64, info = 0;
    double *work = judge_reals((uint64_t)room);
    dsyev_(vectors ? "V" : "N", "L", &order, a, &order, values, work, &room, &info);
    free(work);
    return info;
}

/* The same for a Hermitian matrix, interleaved. */
static inline int judge_lapack_hermitian(uint64_t n, double *a, double *values, int vectors)
{
    int order = (int)n, room = order * (order > 34 ? 34 : order + 3) + 64, info = 0;
    double *work = judge_reals(2 * (uint64_t)room), *reals = judge_reals(3 * n);
    zheev_(vectors ? "V" : "N", "L", &order, a, &order, values, work, &room, reals, &info);
    free(work);
    free(reals);
    return info;
}
#endif

/* ---- random sums ------------------------------------------------------------------------------------------------- */

enum {
    JUDGE_HERMITIAN = 1, /* real coefficients */
    JUDGE_REAL = 2,      /* a real matrix */
    JUDGE_CONSERVING = 4 /* keeps the number of down spins: pairs XX + YY and XY - YX, times Z strings, and Z strings */
};

/* Writes a random sum of about `count` terms (at most 2 count are written) and tidies it; the same for the same seed. */
static inline whorl_sum judge_random_sum(uint64_t seed, int32_t sites, uint64_t count, int kind, whorl_term *terms)
{
    whorl_host host = whorl_host_default();
    whorl_sum sum = {0, 0, NULL};
    uint64_t k, used = 0, draw = 0, inside = whorl_bits_low(sites);
    for (k = 0; k < count; k++) {
        uint64_t z = whorl_random_bits(seed, 1, draw++) & inside, x = whorl_random_bits(seed, 1, draw++) & inside;
        uint64_t choice = whorl_random_bits(seed, 1, draw++);
        double re = whorl_random_normal(seed, 2, 2 * k);
        double im = (kind & JUDGE_HERMITIAN) ? 0.0 : whorl_random_normal(seed, 2, 2 * k + 1);
        if ((choice & 3) != 0) /* three in four: few sites */
            x &= whorl_random_bits(seed, 1, draw) & whorl_random_bits(seed, 3, draw);
        if ((choice & 12) != 0)
            z &= whorl_random_bits(seed, 4, draw) & whorl_random_bits(seed, 5, draw);
        draw++;
        if (kind & JUDGE_CONSERVING) {
            int32_t i = (int32_t)(choice >> 8) & 0x7fff, j = (int32_t)(choice >> 24) & 0x7fff;
            uint64_t a = UINT64_C(1) << i % sites, b = UINT64_C(1) << j % sites, rest = z & ~(a | b);
            if (kind & JUDGE_REAL)
                im = 0.0;
            if (a == b || (choice & 48) == 0) {
                terms[used].x = 0;
                terms[used].z = z;
                terms[used].re = re;
                terms[used++].im = im;
                continue;
            }
            terms[used].x = terms[used + 1].x = a | b;
            if ((choice & 64) != 0 || (kind & JUDGE_REAL)) { /* X_a X_b + Y_a Y_b */
                terms[used].z = rest;
                terms[used + 1].z = rest | a | b;
                terms[used + 1].re = terms[used].re = re;
                terms[used + 1].im = terms[used].im = im;
            } else { /* X_a Y_b - Y_a X_b */
                terms[used].z = rest | b;
                terms[used + 1].z = rest | a;
                terms[used].re = re;
                terms[used].im = im;
                terms[used + 1].re = -re;
                terms[used + 1].im = -im;
            }
            used += 2;
            continue;
        }
        if (kind & JUDGE_REAL) {
            int odd = whorl_bits_count(x & z) & 1;
            if (odd && (kind & JUDGE_HERMITIAN)) { /* one Y fewer */
                z ^= x & z & (0 - (x & z));
                odd = 0;
            }
            im = odd ? re : 0.0;
            re = odd ? 0.0 : re;
        }
        terms[used].x = x;
        terms[used].z = z;
        terms[used].re = re;
        terms[used++].im = im;
    }
    if (whorl_sum_from_terms(&host, sites, terms, used, &sum) != WHORL_OK) {
        printf("no random sum: %s\n", host.reason.text);
        exit(3);
    }
    return sum;
}

#endif
