/*
 * whorl_pauli.h 0.1.0: operators of up to 64 spins 1/2 as sums of Pauli strings, and their algebra.
 *
 * A term is a complex coefficient times a Pauli string; a string is a pair of masks (x, z) and stands for
 * i^popcount(x & z) X^x Z^z, so that it is Hermitian and x & z marks the sites with Y = iXZ. A sum is an array of terms
 * that the caller owns. Sums are kept tidy: ascending by (x, z), no string twice, no zero coefficient.
 *
 *     whorl_term terms[3 * 8];                                  a ring of eight spins
 *     whorl_sum ring;
 *     uint64_t used = 0;
 *     for (int32_t i = 0; i < 8; i++) used += whorl_terms_exchange(terms + used, i, (i + 1) % 8, 1.0);
 *     whorl_status status = whorl_sum_from_terms(&host, 8, terms, used, &ring);
 *
 * It does not know states, vectors or text: see whorl_space.h, whorl_action.h, whorl_text.h.
 *
 * Conventions: site i is bit i of the masks. Bit 0 of a state is spin up, Z|0> = +|0>. S = (X, Y, Z)/2; S^- takes bit 0
 * to bit 1 and S^+ bit 1 to bit 0. On a basis state P|s> = i^popcount(x & z) (-1)^popcount(z & s) |s ^ x>.
 * Signs: +J S_i.S_j (J > 0 antiferromagnetic), S_i^T J S_j with the row index on i, +D.(S_i x S_j), -h.(g S).
 *
 * Memory: term arrays are the caller's. Only products take scratch (whorl_sum_product_bytes); nothing is kept.
 * Threads: none are used. Long calls poll the host.
 * Errors: a failed call leaves *out and the sum's fields as they were. Arguments are checked before writing.
 * References: D. Gottesman, arXiv:quant-ph/9705052 (1997), strings as pairs of bit vectors; T. Moriya, Phys. Rev. 120,
 * 91 (1960), antisymmetric exchange.
 */
#include "whorl_core.h"

#ifndef WHORL_PAULI_INCLUDED
#define WHORL_PAULI_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_pauli.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_PAULI_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- terms and sums ---------------------------------------------------------------------------------------------- */

/* (re + i im) i^popcount(x & z) X^x Z^z */
typedef struct whorl_term {
    uint64_t x, z;
    double re, im;
} whorl_term;

/* A view of the caller's terms. Every call below expects it tidy, but for whorl_sum_tidy, which makes it so. */
typedef struct whorl_sum {
    int32_t sites; /* 1 .. 64 */
    uint64_t count;
    whorl_term *terms; /* may be NULL where count is 0: the operator zero */
} whorl_sum;

/*
 * Makes a sum of terms: checks them, tidies them in place, and lets *sum view what is left of them. Equal strings are
 * added in an order of their coefficients' bits, so that the result does not depend on the order of the input.
 * Cost: O(n) for terms in order, otherwise O(n log n); no memory.
 * Errors, all but the last with the terms untouched: WHORL_BAD_ARGUMENT (sites outside 1 .. 64; a term on a site from
 * `sites` on, its index in the reason), WHORL_NOT_FINITE (a coefficient is NaN or infinite: its index in the reason.
 * The constructors below write NaN where they were given a site outside 0 .. 63 or an unknown axis; also where equal
 * strings add up to infinity: the terms are then reordered, none is lost), WHORL_CANCELLED (terms reordered).
 */
WHORL_API whorl_status whorl_sum_from_terms(whorl_host *host, int32_t sites, whorl_term *terms, uint64_t count,
                                            whorl_sum *sum);
/* The same for a sum whose terms were changed by hand. */
WHORL_API whorl_status whorl_sum_tidy(whorl_host *host, whorl_sum *sum);
/*
 * Is it valid and tidy? Cost O(n), no memory.
 * Errors: WHORL_BAD_ARGUMENT, WHORL_NOT_FINITE, with the index of the first offending term.
 */
WHORL_API whorl_status whorl_sum_check(whorl_host *host, const whorl_sum *sum);

/* The index of a string in a tidy sum, WHORL_NONE where it is absent; O(log n). */
WHORL_API uint64_t whorl_sum_find(const whorl_sum *sum, uint64_t x, uint64_t z);
/* The coefficient of a string, 0 where it is absent; O(log n). */
WHORL_API whorl_complex whorl_sum_coefficient(const whorl_sum *sum, uint64_t x, uint64_t z);
/* The sites on which it acts, as a mask; O(n). */
WHORL_API uint64_t whorl_sum_support(const whorl_sum *sum);

/* ---- constructors of terms --------------------------------------------------------------------------------------- */

/*
 * Each writes its terms from `terms` on and returns how many: at most the number that the macro tells. They cannot
 * fail: a site outside 0 .. 63 or an unknown axis gives a term with coefficient NaN, which whorl_sum_from_terms refuses
 * by its index. Zero coefficients are written too; tidying drops them. Equal sites i = j give the operator that the
 * formula means (S_i.S_i = 3/4, S x S = i S), which need not be Hermitian.
 */
#define WHORL_STRING_TERMS 1
#define WHORL_NUMBER_TERMS 1
#define WHORL_SPIN_TERMS 2
#define WHORL_EXCHANGE_TERMS 3
#define WHORL_EXCHANGE_MATRIX_TERMS 9
#define WHORL_ANTISYMMETRIC_TERMS 6
#define WHORL_FIELD_TERMS 3
#define WHORL_DIPOLAR_TERMS 9

/* c times the Pauli string (x, z): X on the sites of x & ~z, Y on x & z, Z on z & ~x. */
WHORL_API uint64_t whorl_terms_string(whorl_term *terms, uint64_t x, uint64_t z, double c);
/* c times the identity. */
WHORL_API uint64_t whorl_terms_number(whorl_term *terms, double c);
/* c S^axis at a site, axis 'x', 'y', 'z', '+' (raises S^z: bit 1 to bit 0) or '-' (bit 0 to bit 1). */
WHORL_API uint64_t whorl_terms_spin(whorl_term *terms, int32_t site, char axis, double c);
/* J S_i.S_j */
WHORL_API uint64_t whorl_terms_exchange(whorl_term *terms, int32_t i, int32_t j, double coupling);
/* jx Sx_i Sx_j + jy Sy_i Sy_j + jz Sz_i Sz_j */
WHORL_API uint64_t whorl_terms_exchange_xyz(whorl_term *terms, int32_t i, int32_t j, double jx, double jy, double jz);
/* S_i^T J S_j, J row by row: matrix[3 a + b] couples component a of S_i to component b of S_j. */
WHORL_API uint64_t whorl_terms_exchange_matrix(whorl_term *terms, int32_t i, int32_t j, const double matrix[9]);
/* D.(S_i x S_j), antisymmetric (Dzyaloshinskii-Moriya) exchange of the ordered pair. */
WHORL_API uint64_t whorl_terms_antisymmetric(whorl_term *terms, int32_t i, int32_t j, const double d[3]);
/* -h.(g S) at a site; g row by row, (g S)_a = sum_b g[3 a + b] S_b; NULL: the identity. */
WHORL_API uint64_t whorl_terms_field(whorl_term *terms, int32_t site, const double h[3], const double g[9]);
/*
 * strength (m_i.m_j - 3 (m_i.n)(m_j.n)) / r^3 with m = g S as above, r = |displacement|, n = displacement / r: magnetic
 * dipoles at a distance. strength carries the units: mu_0 mu_B^2 / (4 pi) is 0.62295 K for r in angstrom (from the
 * CODATA 2018 constants). A displacement of zero length is refused like a bad site.
 */
WHORL_API uint64_t whorl_terms_dipolar(whorl_term *terms, int32_t i, int32_t j, const double displacement[3],
                                       const double gi[9], const double gj[9], double strength);

/* ---- algebra ----------------------------------------------------------------------------------------------------- */

/* The product of two terms, the power of i exactly. */
WHORL_API whorl_term whorl_term_multiply(whorl_term a, whorl_term b);
/* 1 if the strings commute, 0 if they anticommute. */
static inline int32_t whorl_strings_commute(uint64_t ax, uint64_t az, uint64_t bx, uint64_t bz)
{
    return 1 - whorl_bits_parity((ax & bz) ^ (az & bx));
}

/*
 * Results go into the caller's `terms` of `room` elements, and *out views them. `terms` may not overlap the terms of a
 * or b; a, b and out may be the same structs. Where the room does not do, WHORL_NO_ROOM: reason.index is the number of
 * terms of the result, nothing is written (so room 0 with terms NULL asks for the number).
 * Errors common to the three: WHORL_BAD_ARGUMENT (a or b not tidy, unequal numbers of sites, overlap),
 * WHORL_NOT_FINITE (a weight is not finite; a coefficient overflows), WHORL_NO_ROOM.
 */

/* wa A + wb B. Cost O(n + m), no memory. */
WHORL_API whorl_status whorl_sum_add(whorl_host *host, const whorl_sum *a, whorl_complex wa, const whorl_sum *b,
                                     whorl_complex wb, whorl_term *terms, uint64_t room, whorl_sum *out);
/*
 * A B, and A B - B A. For each string of the result the products are added in order of the terms of A, then of B.
 * Cost: O(n m) for pairs of terms (pairs that commute are skipped in a commutator), O(k log k) for the k terms of the
 * result, and scratch as whorl_sum_product_bytes tells, for c = min(n m, 4^sites, max(room, 2^20)) strings. Where more
 * than c occur, all pairs are gone through again in classes of strings, twice. Room for the result makes it fast.
 * Further errors: WHORL_NO_MEMORY, WHORL_OVER_LIMIT, WHORL_TOO_LARGE, WHORL_CANCELLED (terms then unspecified).
 */
WHORL_API whorl_status whorl_sum_multiply(whorl_host *host, const whorl_sum *a, const whorl_sum *b, whorl_term *terms,
                                          uint64_t room, whorl_sum *out);
WHORL_API whorl_status whorl_sum_commutator(whorl_host *host, const whorl_sum *a, const whorl_sum *b, whorl_term *terms,
                                            uint64_t room, whorl_sum *out);
/* The scratch that one of the two takes, exactly; UINT64_MAX where it overflows. */
WHORL_API uint64_t whorl_sum_product_bytes(const whorl_sum *a, const whorl_sum *b, uint64_t room);

/* w A, in place. Cost O(n). Errors: WHORL_BAD_ARGUMENT, WHORL_NOT_FINITE (w is not, or a coefficient overflows). */
WHORL_API whorl_status whorl_sum_scale(whorl_host *host, whorl_sum *sum, whorl_complex w);
/* The adjoint, in place. Cost O(n). Errors: WHORL_BAD_ARGUMENT, WHORL_NOT_FINITE as whorl_sum_check. */
WHORL_API whorl_status whorl_sum_adjoint(whorl_host *host, whorl_sum *sum);
/*
 * Site i becomes site site_to[i] of `sites` sites (1 .. 64), in place; site_to has sum->sites entries, all different.
 * Renumbers the sites, or embeds a cluster in a larger one. Cost O(n (sites + log n)), no memory.
 * Errors: WHORL_BAD_ARGUMENT with the index of the offending entry of site_to, or as whorl_sum_check; WHORL_CANCELLED
 * (the terms are then those of the result, out of order: tidy them).
 */
WHORL_API whorl_status whorl_sum_embed(whorl_host *host, whorl_sum *sum, int32_t sites, const int32_t *site_to);
/* The same with as many sites as before: a permutation. */
WHORL_API whorl_status whorl_sum_permute(whorl_host *host, whorl_sum *sum, const int32_t *site_to);
/* P A P^-1 with the Pauli string P = (x, z), in place: strings that anticommute with P change sign. Cost O(n). */
WHORL_API whorl_status whorl_sum_conjugate(whorl_host *host, whorl_sum *sum, uint64_t x, uint64_t z);
/*
 * D^dagger A D with D|s> = i^popcount(gauge & s)|s>, in place: on the sites of the mask X becomes -Y, Y becomes X, Z
 * stays (S^+ becomes i S^+, S^- becomes -i S^-). If v is an eigenvector of the result, D v is one of A.
 * Cost O(n log n). Errors: WHORL_BAD_ARGUMENT (gauge has sites beyond the sum's), or as whorl_sum_check;
 * WHORL_CANCELLED as for embedding.
 */
WHORL_API whorl_status whorl_sum_rotate(whorl_host *host, whorl_sum *sum, uint64_t gauge);
/*
 * A mask for whorl_sum_rotate that makes the matrix real, 0 where it is real already, WHORL_NONE where there is none.
 * A linear system over GF(2), one equation a term. (Of 64 sites, where only the mask of all of them would do, none is
 * reported.) Cost O(64 n), no memory. Errors: as whorl_sum_check.
 */
WHORL_API whorl_status whorl_sum_real_gauge(whorl_host *host, const whorl_sum *sum, uint64_t *gauge);

/* ---- what a sum is ----------------------------------------------------------------------------------------------- */

/* 2^-N Tr A: the coefficient of the identity. */
WHORL_API whorl_complex whorl_sum_trace(const whorl_sum *sum);
/* 2^-N Tr A^dagger A = sum |c|^2: the square of the normalised Frobenius norm. O(n) */
WHORL_API double whorl_sum_square_trace(const whorl_sum *sum);
/* sum |c|: an upper bound of the operator norm (no eigenvalue is larger in modulus); never below max |c|. O(n) */
WHORL_API double whorl_sum_norm_bound(const whorl_sum *sum);
/* sum |c_A - c_B| over all strings: an upper bound of ||A - B||, 0 only where A = B; both tidy. O(n + m) */
WHORL_API double whorl_sum_distance(const whorl_sum *a, const whorl_sum *b);
/* 1 or 0, exactly. Hermitian: all coefficients real. Real: the matrix is. Diagonal: no string flips. O(n) */
WHORL_API int32_t whorl_sum_is_hermitian(const whorl_sum *sum);
WHORL_API int32_t whorl_sum_is_real(const whorl_sum *sum);
WHORL_API int32_t whorl_sum_is_diagonal(const whorl_sum *sum);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_PAULI_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_PAULI_IMPLEMENTED)
#define WHORL_PAULI_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>order ----------------------------------------------------------------------------------------------------- */

static int32_t whorli_string_order(const whorl_term *a, const whorl_term *b)
{
    if (a->x != b->x)
        return a->x < b->x ? -1 : 1;
    return (a->z > b->z) - (a->z < b->z);
}

static int32_t whorli_bits_order(double a, double b)
{
    uint64_t left, right;
    memcpy(&left, &a, 8);
    memcpy(&right, &b, 8);
    return (left > right) - (left < right);
}

/* A total order: terms that tie have the same bits. */
static int32_t whorli_term_order(const whorl_term *a, const whorl_term *b)
{
    int32_t order = whorli_string_order(a, b);
    if (order == 0)
        order = whorli_bits_order(a->re, b->re);
    return order != 0 ? order : whorli_bits_order(a->im, b->im);
}

static void whorli_terms_sift(whorl_term *terms, uint64_t root, uint64_t count)
{
    whorl_term held = terms[root];
    for (;;) {
        uint64_t child = 2 * root + 1;
        if (child >= count)
            break;
        if (child + 1 < count && whorli_term_order(terms + child, terms + child + 1) < 0)
            child++;
        if (whorli_term_order(&held, terms + child) >= 0)
            break;
        terms[root] = terms[child];
        root = child;
    }
    terms[root] = held;
}

static void whorli_terms_heapsort(whorl_term *terms, uint64_t count)
{
    uint64_t i;
    for (i = count / 2; i-- > 0;)
        whorli_terms_sift(terms, i, count);
    for (i = count; i-- > 1;) {
        whorl_term last = terms[i];
        terms[i] = terms[0];
        terms[0] = last;
        whorli_terms_sift(terms, 0, i);
    }
}

static void whorli_terms_insertion(whorl_term *terms, uint64_t count)
{
    uint64_t i, j;
    for (i = 1; i < count; i++) {
        whorl_term held = terms[i];
        for (j = i; j > 0 && whorli_term_order(&held, terms + j - 1) < 0; j--)
            terms[j] = terms[j - 1];
        terms[j] = held;
    }
}

static const whorl_term *whorli_term_median(const whorl_term *a, const whorl_term *b, const whorl_term *c)
{
    if (whorli_term_order(a, b) > 0) {
        const whorl_term *held = a;
        a = b;
        b = held;
    }
    return whorli_term_order(b, c) <= 0 ? b : whorli_term_order(a, c) <= 0 ? c : a;
}

/* Splits three terms or more: before *low none is above the pivot, from *high on none is below; between, the pivot. */
static void whorli_terms_split(whorl_term *terms, uint64_t count, uint64_t *low, uint64_t *high)
{
    const whorl_term pivot = *whorli_term_median(terms, terms + count / 2, terms + count - 1);
    uint64_t i = 0, j = count; /* terms[j - 1] is looked at: j never passes below 0 */
    for (;;) {
        while (whorli_term_order(terms + i, &pivot) < 0)
            i++;
        while (whorli_term_order(&pivot, terms + j - 1) < 0)
            j--;
        if (i < j) {
            whorl_term held = terms[i];
            terms[i++] = terms[j - 1];
            terms[--j] = held;
        }
        if (i >= j)
            break;
    }
    *low = j;
    *high = i;
}

/* A piece still to be sorted, and how many splits it may see before heapsort takes it over. */
typedef struct whorli_piece {
    uint64_t first, count;
    int32_t splits;
} whorli_piece;

/*
 * Sorts in place in O(n log n) at worst: quicksort with the longer part kept for later (so 64 pieces do), heapsort
 * where splits go wrong, insertion for short pieces. The terms are a permutation of the input whenever it stops. Terms
 * in order are left alone.
 */
static whorl_status whorli_terms_sort(whorl_host *host, whorl_term *terms, uint64_t count)
{
    whorli_piece kept[64], piece;
    int32_t kept_count = 0;
    uint64_t i = 1, since_poll = 0;
    while (i < count && whorli_term_order(terms + i - 1, terms + i) <= 0)
        i++;
    if (i >= count)
        return WHORL_OK;
    piece.first = 0;
    piece.count = count;
    piece.splits = 2 * whorl_bits_highest(count);
    for (;;) {
        while (piece.count > 16 && piece.splits > 0) {
            uint64_t low, high;
            whorli_terms_split(terms + piece.first, piece.count, &low, &high);
            since_poll += piece.count;
            kept[kept_count] = piece;
            kept[kept_count].splits = --piece.splits;
            if (low > piece.count - high) {
                kept[kept_count++].count = low;
                piece.first += high;
                piece.count -= high;
            } else {
                kept[kept_count].first += high;
                kept[kept_count++].count -= high;
                piece.count = low;
            }
        }
        if (piece.count > 16)
            whorli_terms_heapsort(terms + piece.first, piece.count);
        else
            whorli_terms_insertion(terms + piece.first, piece.count);
        if (kept_count == 0)
            return WHORL_OK;
        piece = kept[--kept_count];
        if (since_poll >= UINT64_C(1) << 21) {
            whorl_stage(host, "sorting terms", piece.first, count);
            if (whorl_poll(host) != WHORL_OK)
                return WHORL_CANCELLED;
            since_poll = 0;
        }
    }
}

/* ---- >>checks ---------------------------------------------------------------------------------------------------- */

static whorl_text whorli_term_fail(whorl_host *host, whorl_status status, uint64_t index)
{
    whorl_text text = whorl_fail_begin(host, status);
    host->reason.index = index;
    whorl_text_add(&text, "term ");
    whorl_text_add_unsigned(&text, index);
    return text;
}

static int32_t whorli_term_finite(const whorl_term *term)
{
    return whorl_is_finite(term->re) && whorl_is_finite(term->im);
}

static whorl_status whorli_sites_valid(whorl_host *host, int32_t sites)
{
    whorl_text text;
    if (sites >= 1 && sites <= 64)
        return WHORL_OK;
    text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
    whorl_text_add(&text, "a sum has 1 to 64 sites, not ");
    whorl_text_add_signed(&text, sites);
    return WHORL_BAD_ARGUMENT;
}

/* Sites, masks and coefficients; tidiness is another matter. */
static whorl_status whorli_sum_valid(whorl_host *host, const whorl_sum *sum)
{
    uint64_t i, inside;
    if (sum == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the sum is NULL: pass one made by whorl_sum_from_terms");
    if (whorli_sites_valid(host, sum->sites) != WHORL_OK)
        return WHORL_BAD_ARGUMENT;
    if (sum->count > 0 && sum->terms == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the array of terms is NULL: pass one, or a count of 0");
    inside = whorl_bits_low(sum->sites);
    for (i = 0; i < sum->count; i++) {
        const whorl_term *term = sum->terms + i;
        if (!whorli_term_finite(term)) {
            whorl_text text = whorli_term_fail(host, WHORL_NOT_FINITE, i);
            whorl_text_add(&text, " has a coefficient that is NaN or infinite: correct the coupling, or the site or "
                                  "axis that its constructor was given (sites are 0 .. 63)");
            return WHORL_NOT_FINITE;
        }
        if (((term->x | term->z) & ~inside) != 0) {
            whorl_text text = whorli_term_fail(host, WHORL_BAD_ARGUMENT, i);
            whorl_text_add(&text, " acts on site ");
            whorl_text_add_signed(&text, whorl_bits_highest(term->x | term->z));
            whorl_text_add(&text, ", but the sites are 0 .. ");
            whorl_text_add_signed(&text, sum->sites - 1);
            return WHORL_BAD_ARGUMENT;
        }
    }
    return WHORL_OK;
}

whorl_status whorl_sum_check(whorl_host *host, const whorl_sum *sum)
{
    whorl_status status = whorli_sum_valid(host, sum);
    uint64_t i;
    for (i = 0; status == WHORL_OK && i < sum->count; i++) {
        const whorl_term *term = sum->terms + i;
        if ((term->re == 0.0 && term->im == 0.0) || (i > 0 && whorli_string_order(term - 1, term) >= 0)) {
            whorl_text text = whorli_term_fail(host, WHORL_BAD_ARGUMENT, i);
            whorl_text_add(&text, " is zero or out of order: tidy the sum with whorl_sum_tidy first");
            return WHORL_BAD_ARGUMENT;
        }
    }
    return status;
}

/* ---- >>tidy ------------------------------------------------------------------------------------------------------ */

/* Adds up the equal strings from terms[at] on; returns the index behind them. */
static uint64_t whorli_equal_total(const whorl_term *terms, uint64_t at, uint64_t count, whorl_term *total)
{
    *total = terms[at];
    for (at++; at < count && whorli_string_order(terms + at, total) == 0; at++) {
        total->re += terms[at].re;
        total->im += terms[at].im;
    }
    return at;
}

static whorl_status whorli_overflow(whorl_host *host)
{
    return whorl_fail(host, WHORL_NOT_FINITE, "a coefficient of the result overflows: scale the operators down");
}

whorl_status whorl_sum_tidy(whorl_host *host, whorl_sum *sum)
{
    whorl_status status = whorli_sum_valid(host, sum);
    whorl_term *terms, total;
    uint64_t i, kept = 0;
    if (status != WHORL_OK)
        return status;
    terms = sum->terms;
    for (i = 0; i < sum->count; i++) { /* -0 + 0 = +0: one kind of zero only */
        terms[i].re += 0.0;
        terms[i].im += 0.0;
    }
    status = whorli_terms_sort(host, terms, sum->count);
    for (i = 0; status == WHORL_OK && i < sum->count;) {
        i = whorli_equal_total(terms, i, sum->count, &total);
        if (!whorli_term_finite(&total))
            status = whorli_overflow(host);
    }
    if (status != WHORL_OK)
        return status;
    for (i = 0; i < sum->count;) {
        i = whorli_equal_total(terms, i, sum->count, &total);
        if (total.re != 0.0 || total.im != 0.0)
            terms[kept++] = total;
    }
    sum->count = kept;
    return WHORL_OK;
}

whorl_status whorl_sum_from_terms(whorl_host *host, int32_t sites, whorl_term *terms, uint64_t count, whorl_sum *sum)
{
    whorl_sum made;
    whorl_status status;
    if (sum == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "there is nowhere to put the sum: pass the address of a whorl_sum");
    made.sites = sites;
    made.count = count;
    made.terms = terms;
    status = whorl_sum_tidy(host, &made);
    if (status == WHORL_OK)
        *sum = made;
    return status;
}

uint64_t whorl_sum_find(const whorl_sum *sum, uint64_t x, uint64_t z)
{
    uint64_t low = 0, high = sum->count;
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        const whorl_term *term = sum->terms + middle;
        if (term->x < x || (term->x == x && term->z < z))
            low = middle + 1;
        else
            high = middle;
    }
    return low < sum->count && sum->terms[low].x == x && sum->terms[low].z == z ? low : WHORL_NONE;
}

whorl_complex whorl_sum_coefficient(const whorl_sum *sum, uint64_t x, uint64_t z)
{
    uint64_t at = whorl_sum_find(sum, x, z);
    return at == WHORL_NONE ? whorl_complex_of(0.0, 0.0) : whorl_complex_of(sum->terms[at].re, sum->terms[at].im);
}

uint64_t whorl_sum_support(const whorl_sum *sum)
{
    uint64_t i, mask = 0;
    for (i = 0; i < sum->count; i++)
        mask |= sum->terms[i].x | sum->terms[i].z;
    return mask;
}

/* ---- >>constructors ---------------------------------------------------------------------------------------------- */

static whorl_term whorli_term_of(uint64_t x, uint64_t z, double re, double im)
{
    whorl_term term;
    term.x = x;
    term.z = z;
    term.re = re;
    term.im = im;
    return term;
}

/* What a constructor writes where it was given nonsense: the identity times NaN. */
static uint64_t whorli_terms_refused(whorl_term *terms)
{
    const uint64_t bits = UINT64_C(0x7ff8000000000000);
    double nan;
    memcpy(&nan, &bits, 8);
    terms[0] = whorli_term_of(0, 0, nan, 0.0);
    return 1;
}

static int32_t whorli_is_site(int32_t site)
{
    return site >= 0 && site < 64;
}

/* sigma^axis at a site (axis 0, 1, 2 for x, y, z) times a number. */
static whorl_term whorli_sigma(int32_t site, int32_t axis, double re, double im)
{
    uint64_t bit = UINT64_C(1) << site;
    return whorli_term_of(axis == 2 ? 0 : bit, axis == 0 ? 0 : bit, re, im);
}

uint64_t whorl_terms_string(whorl_term *terms, uint64_t x, uint64_t z, double c)
{
    terms[0] = whorli_term_of(x, z, c, 0.0);
    return 1;
}

uint64_t whorl_terms_number(whorl_term *terms, double c)
{
    return whorl_terms_string(terms, 0, 0, c);
}

uint64_t whorl_terms_spin(whorl_term *terms, int32_t site, char axis, double c)
{
    if (!whorli_is_site(site))
        return whorli_terms_refused(terms);
    switch (axis) {
    case 'x': terms[0] = whorli_sigma(site, 0, 0.5 * c, 0.0); return 1;
    case 'y': terms[0] = whorli_sigma(site, 1, 0.5 * c, 0.0); return 1;
    case 'z': terms[0] = whorli_sigma(site, 2, 0.5 * c, 0.0); return 1;
    case '+': /* S^+ = Sx + i Sy, S^- = Sx - i Sy */
    case '-':
        terms[0] = whorli_sigma(site, 0, 0.5 * c, 0.0);
        terms[1] = whorli_sigma(site, 1, 0.0, axis == '+' ? 0.5 * c : -0.5 * c);
        return 2;
    default: return whorli_terms_refused(terms);
    }
}

uint64_t whorl_terms_exchange(whorl_term *terms, int32_t i, int32_t j, double coupling)
{
    return whorl_terms_exchange_xyz(terms, i, j, coupling, coupling, coupling);
}

uint64_t whorl_terms_exchange_xyz(whorl_term *terms, int32_t i, int32_t j, double jx, double jy, double jz)
{
    uint64_t pair;
    if (!whorli_is_site(i) || !whorli_is_site(j))
        return whorli_terms_refused(terms);
    if (i == j) /* Sx Sx = 1/4 */
        return whorl_terms_number(terms, 0.25 * jx + 0.25 * jy + 0.25 * jz);
    pair = UINT64_C(1) << i | UINT64_C(1) << j;
    terms[0] = whorli_term_of(pair, 0, 0.25 * jx, 0.0);
    terms[1] = whorli_term_of(pair, pair, 0.25 * jy, 0.0);
    terms[2] = whorli_term_of(0, pair, 0.25 * jz, 0.0);
    return 3;
}

uint64_t whorl_terms_exchange_matrix(whorl_term *terms, int32_t i, int32_t j, const double matrix[9])
{
    int32_t a, b;
    if (!whorli_is_site(i) || !whorli_is_site(j))
        return whorli_terms_refused(terms);
    if (i == j) { /* S_a S_b = delta_ab / 4 + (i/2) eps_abc S_c */
        whorl_terms_number(terms, 0.25 * matrix[0] + 0.25 * matrix[4] + 0.25 * matrix[8]);
        for (a = 0; a < 3; a++) {
            int32_t next = (a + 1) % 3, last = (a + 2) % 3;
            terms[1 + a] = whorli_sigma(i, a, 0.0, 0.25 * matrix[3 * next + last] - 0.25 * matrix[3 * last + next]);
        }
        return 4;
    }
    for (a = 0; a < 3; a++)
        for (b = 0; b < 3; b++) {
            whorl_term left = whorli_sigma(i, a, 0.25 * matrix[3 * a + b], 0.0), right = whorli_sigma(j, b, 1.0, 0.0);
            terms[3 * a + b] = whorli_term_of(left.x | right.x, left.z | right.z, left.re, 0.0);
        }
    return 9;
}

uint64_t whorl_terms_antisymmetric(whorl_term *terms, int32_t i, int32_t j, const double d[3])
{
    int32_t a;
    if (!whorli_is_site(i) || !whorli_is_site(j))
        return whorli_terms_refused(terms);
    for (a = 0; a < 3; a++) { /* component a of S_i x S_j is S_next S_last - S_last S_next; of S x S it is i S_a */
        int32_t next = (a + 1) % 3, last = (a + 2) % 3;
        if (i == j) {
            terms[a] = whorli_sigma(i, a, 0.0, 0.5 * d[a]);
        } else {
            whorl_term one = whorli_sigma(i, next, 1.0, 0.0), two = whorli_sigma(i, last, 1.0, 0.0);
            whorl_term to_one = whorli_sigma(j, last, 1.0, 0.0), to_two = whorli_sigma(j, next, 1.0, 0.0);
            terms[2 * a] = whorli_term_of(one.x | to_one.x, one.z | to_one.z, 0.25 * d[a], 0.0);
            terms[2 * a + 1] = whorli_term_of(two.x | to_two.x, two.z | to_two.z, -0.25 * d[a], 0.0);
        }
    }
    return i == j ? 3 : 6;
}

uint64_t whorl_terms_field(whorl_term *terms, int32_t site, const double h[3], const double g[9])
{
    int32_t a;
    if (!whorli_is_site(site))
        return whorli_terms_refused(terms);
    for (a = 0; a < 3; a++) {
        double along = g == NULL ? h[a] : h[0] * g[a] + h[1] * g[3 + a] + h[2] * g[6 + a];
        terms[a] = whorli_sigma(site, a, -0.5 * along, 0.0);
    }
    return 3;
}

/* out = left^T middle, all 3 x 3 row by row; left NULL is the identity. */
static void whorli_transposed_product(const double *left, const double middle[9], double out[9])
{
    int32_t a, b;
    for (a = 0; a < 3; a++)
        for (b = 0; b < 3; b++)
            out[3 * a + b] = left == NULL
                                 ? middle[3 * a + b]
                                 : left[a] * middle[b] + left[3 + a] * middle[3 + b] + left[6 + a] * middle[6 + b];
}

uint64_t whorl_terms_dipolar(whorl_term *terms, int32_t i, int32_t j, const double displacement[3], const double gi[9],
                             const double gj[9], double strength)
{
    double square = displacement[0] * displacement[0] + displacement[1] * displacement[1] +
                    displacement[2] * displacement[2];
    double length = sqrt(square), scale, matrix[9], half[9], turned[9];
    int32_t a, b;
    if (!whorl_is_finite(square) || square == 0.0)
        return whorli_terms_refused(terms);
    scale = strength / (square * length);
    for (a = 0; a < 3; a++)
        for (b = 0; b < 3; b++)
            matrix[3 * a + b] = scale * ((a == b ? 1.0 : 0.0) -
                                         3.0 * (displacement[a] / length) * (displacement[b] / length));
    /* J = gi^T T gj = gi^T (gj^T T)^T, as T is symmetric */
    whorli_transposed_product(gj, matrix, half);
    for (a = 0; a < 3; a++)
        for (b = 0; b < 3; b++)
            turned[3 * a + b] = half[3 * b + a];
    whorli_transposed_product(gi, turned, matrix);
    return whorl_terms_exchange_matrix(terms, i, j, matrix);
}

/* ---- >>sums ------------------------------------------------------------------------------------------------------ */

static int32_t whorli_terms_overlap(const whorl_term *terms, uint64_t room, const whorl_sum *sum)
{
    uint64_t here = (uint64_t)(uintptr_t)terms, there = (uint64_t)(uintptr_t)sum->terms;
    if (room == 0 || sum->count == 0)
        return 0;
    return here < there ? (there - here) / sizeof(whorl_term) < room : (here - there) / sizeof(whorl_term) < sum->count;
}

static whorl_status whorli_operands_check(whorl_host *host, const whorl_sum *a, const whorl_sum *b,
                                          const whorl_term *terms, uint64_t room, const whorl_sum *out)
{
    whorl_status status = whorl_sum_check(host, a);
    if (status == WHORL_OK)
        status = whorl_sum_check(host, b);
    if (status != WHORL_OK)
        return status;
    if (a->sites != b->sites)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the sums have different numbers of sites: bring them to one with whorl_sum_embed");
    if (out == NULL || (terms == NULL && room > 0))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the result has no place: pass an array of terms and a whorl_sum");
    if (whorli_terms_overlap(terms, room, a) || whorli_terms_overlap(terms, room, b))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the result overlaps an operand: give it an array of its own");
    return WHORL_OK;
}

static whorl_status whorli_no_room(whorl_host *host, uint64_t room, uint64_t need)
{
    whorl_text text = whorl_fail_begin(host, WHORL_NO_ROOM);
    host->reason.index = need;
    whorl_text_add(&text, "the result has ");
    whorl_text_add_unsigned(&text, need);
    whorl_text_add(&text, " terms, the array has room for ");
    whorl_text_add_unsigned(&text, room);
    whorl_text_add(&text, ": make it longer");
    return WHORL_NO_ROOM;
}

static void whorli_sum_set(whorl_sum *out, int32_t sites, whorl_term *terms, uint64_t count)
{
    out->sites = sites;
    out->terms = terms;
    out->count = count;
}

/* re + i im += w times the term; -0 becomes +0 on the way. */
static void whorli_term_add(whorl_term *to, whorl_complex w, const whorl_term *term)
{
    whorl_complex c = whorl_complex_multiply(w, whorl_complex_of(term->re, term->im));
    to->x = term->x;
    to->z = term->z;
    to->re += c.re;
    to->im += c.im;
}

/* Merges wa A + wb B into terms (NULL: counts only). The number of terms, or WHORL_NONE after an overflow. */
static uint64_t whorli_merge(const whorl_sum *a, whorl_complex wa, const whorl_sum *b, whorl_complex wb,
                             whorl_term *terms)
{
    uint64_t i = 0, j = 0, count = 0;
    while (i < a->count || j < b->count) {
        whorl_term merged = whorli_term_of(0, 0, 0.0, 0.0);
        int32_t order = i == a->count ? 1 : j == b->count ? -1 : whorli_string_order(a->terms + i, b->terms + j);
        if (order <= 0)
            whorli_term_add(&merged, wa, a->terms + i++);
        if (order >= 0)
            whorli_term_add(&merged, wb, b->terms + j++);
        if (!whorli_term_finite(&merged))
            return WHORL_NONE;
        if (merged.re == 0.0 && merged.im == 0.0)
            continue;
        if (terms != NULL)
            terms[count] = merged;
        count++;
    }
    return count;
}

whorl_status whorl_sum_add(whorl_host *host, const whorl_sum *a, whorl_complex wa, const whorl_sum *b, whorl_complex wb,
                           whorl_term *terms, uint64_t room, whorl_sum *out)
{
    whorl_status status = whorli_operands_check(host, a, b, terms, room, out);
    uint64_t count;
    if (status != WHORL_OK)
        return status;
    if (!whorl_is_finite(wa.re) || !whorl_is_finite(wa.im) || !whorl_is_finite(wb.re) || !whorl_is_finite(wb.im))
        return whorl_fail(host, WHORL_NOT_FINITE, "a weight is NaN or infinite: pass finite weights");
    count = whorli_merge(a, wa, b, wb, NULL);
    if (count == WHORL_NONE)
        return whorli_overflow(host);
    if (count > room)
        return whorli_no_room(host, room, count);
    whorli_merge(a, wa, b, wb, terms);
    whorli_sum_set(out, a->sites, terms, count);
    return WHORL_OK;
}

whorl_status whorl_sum_scale(whorl_host *host, whorl_sum *sum, whorl_complex w)
{
    whorl_status status = whorl_sum_check(host, sum);
    uint64_t i, kept = 0;
    if (status != WHORL_OK)
        return status;
    if (!whorl_is_finite(w.re) || !whorl_is_finite(w.im))
        return whorl_fail(host, WHORL_NOT_FINITE, "the factor is NaN or infinite: pass a finite one");
    for (i = 0; i < sum->count; i++) {
        whorl_term scaled = whorli_term_of(0, 0, 0.0, 0.0);
        whorli_term_add(&scaled, w, sum->terms + i);
        if (!whorli_term_finite(&scaled))
            return whorli_overflow(host);
    }
    for (i = 0; i < sum->count; i++) {
        whorl_term scaled = whorli_term_of(0, 0, 0.0, 0.0);
        whorli_term_add(&scaled, w, sum->terms + i);
        if (scaled.re != 0.0 || scaled.im != 0.0)
            sum->terms[kept++] = scaled;
    }
    sum->count = kept;
    return WHORL_OK;
}

whorl_status whorl_sum_adjoint(whorl_host *host, whorl_sum *sum)
{
    whorl_status status = whorl_sum_check(host, sum);
    uint64_t i;
    if (status != WHORL_OK)
        return status;
    for (i = 0; i < sum->count; i++)
        sum->terms[i].im = 0.0 - sum->terms[i].im;
    return WHORL_OK;
}

/* ---- >>products -------------------------------------------------------------------------------------------------- */

whorl_term whorl_term_multiply(whorl_term a, whorl_term b)
{
    whorl_complex c = whorl_complex_multiply(whorl_complex_of(a.re, a.im), whorl_complex_of(b.re, b.im));
    uint64_t x = a.x ^ b.x, z = a.z ^ b.z;
    /* Z^z X^x = (-1)^popcount(z & x) X^x Z^z; what is left over the factor i^popcount of the product is a power of i */
    int32_t quarter = whorl_bits_count(a.x & a.z) + whorl_bits_count(b.x & b.z) + 2 * whorl_bits_count(a.z & b.x) -
                      whorl_bits_count(x & z);
    switch (quarter & 3) {
    case 0: return whorli_term_of(x, z, c.re, c.im);
    case 1: return whorli_term_of(x, z, -c.im, c.re);
    case 2: return whorli_term_of(x, z, -c.re, -c.im);
    default: return whorli_term_of(x, z, c.im, -c.re);
    }
}

/*
 * Products of all pairs, gathered by string in a hash table of at most `capacity` strings. Where more occur the strings
 * are split by the top bits of their hash into 2^class_bits classes, one table after the other.
 */
typedef struct whorli_product {
    const whorl_sum *a, *b;
    int32_t commutator;
    int32_t class_bits;
    uint64_t capacity, slot_count; /* slots: a power of two */
    uint64_t count;                /* strings in the table now; capacity + 1: too many */
    whorl_term *found;
    uint64_t *slots; /* index in `found` plus 1; 0 is empty */
} whorli_product;

static void whorli_product_plan(whorli_product *product, const whorl_sum *a, const whorl_sum *b, uint64_t room)
{
    const uint64_t ample = UINT64_C(1) << 20;
    uint64_t capacity = room > ample ? room : ample, pairs = whorl_size_multiply(a->count, b->count);
    memset(product, 0, sizeof *product);
    product->a = a;
    product->b = b;
    if (capacity > pairs)
        capacity = pairs;
    if (a->sites >= 0 && a->sites < 32 && capacity > UINT64_C(1) << 2 * a->sites)
        capacity = UINT64_C(1) << 2 * a->sites;
    product->capacity = capacity;
    product->slot_count = 4;
    while (product->slot_count < UINT64_C(1) << 62 && product->slot_count / 2 < capacity)
        product->slot_count *= 2;
}

static void whorli_product_layout(whorl_layout *layout, whorli_product *product)
{
    product->found = (whorl_term *)whorl_layout_carve(layout, product->capacity, sizeof(whorl_term));
    product->slots = (uint64_t *)whorl_layout_carve(layout, product->slot_count, sizeof(uint64_t));
}

uint64_t whorl_sum_product_bytes(const whorl_sum *a, const whorl_sum *b, uint64_t room)
{
    whorl_layout layout = {NULL, 0};
    whorli_product product;
    whorli_product_plan(&product, a, b, room);
    whorli_product_layout(&layout, &product);
    return whorl_block_bytes(layout.bytes);
}

/* Mixes both masks into 64 bits (multiplication and folding; any good mixing does, results do not depend on it). */
static uint64_t whorli_string_hash(uint64_t x, uint64_t z)
{
    uint64_t h = x * UINT64_C(0x9e3779b97f4a7c15) + z;
    h = (h ^ (h >> 32)) * UINT64_C(0xd6e8feb86659fd93);
    h = (h ^ (h >> 32)) * UINT64_C(0xd6e8feb86659fd93);
    return h ^ (h >> 32);
}

/* Adds the product of a pair to its string. */
static void whorli_product_add(whorli_product *product, uint64_t class_now, const whorl_term *a, const whorl_term *b)
{
    uint64_t hash = whorli_string_hash(a->x ^ b->x, a->z ^ b->z), at = hash & (product->slot_count - 1);
    whorl_term term, *found;
    if (product->class_bits > 0 && hash >> (64 - product->class_bits) != class_now)
        return;
    term = whorl_term_multiply(*a, *b);
    if (product->commutator) {
        term.re *= 2.0;
        term.im *= 2.0;
    }
    for (; product->slots[at] != 0; at = (at + 1) & (product->slot_count - 1)) {
        found = product->found + (product->slots[at] - 1);
        if (found->x == term.x && found->z == term.z) {
            found->re += term.re;
            found->im += term.im;
            return;
        }
    }
    if (product->count == product->capacity) {
        product->count = product->capacity + 1;
        return;
    }
    term.re += 0.0;
    term.im += 0.0;
    product->found[product->count++] = term;
    product->slots[at] = product->count;
}

/* Fills the table with the strings of one class; stops early where they are too many. Drops zeros. */
static whorl_status whorli_product_fill(whorl_host *host, whorli_product *product, uint64_t class_now)
{
    const whorl_sum *a = product->a, *b = product->b;
    uint64_t i, j, kept = 0, since_poll = 0;
    memset(product->slots, 0, (size_t)(product->slot_count * sizeof(uint64_t)));
    product->count = 0;
    for (i = 0; i < a->count; i++)
        for (j = 0; j < b->count; j++) {
            if (since_poll++ == 0) {
                whorl_stage(host, "multiplying sums", i, a->count);
                if (whorl_poll(host) != WHORL_OK)
                    return WHORL_CANCELLED;
            }
            since_poll &= (UINT64_C(1) << 22) - 1;
            if (!product->commutator ||
                !whorl_strings_commute(a->terms[i].x, a->terms[i].z, b->terms[j].x, b->terms[j].z))
                whorli_product_add(product, class_now, a->terms + i, b->terms + j);
            if (product->count > product->capacity)
                return WHORL_OK;
        }
    for (i = 0; i < product->count; i++) {
        if (!whorli_term_finite(product->found + i))
            return whorli_overflow(host);
        if (product->found[i].re != 0.0 || product->found[i].im != 0.0)
            product->found[kept++] = product->found[i];
    }
    product->count = kept;
    return WHORL_OK;
}

/* Counts the terms of the result, with as many classes as it takes; the table keeps the last class. */
static whorl_status whorli_product_count(whorl_host *host, whorli_product *product, uint64_t *total)
{
    uint64_t class_now;
    *total = 0;
    for (class_now = 0; class_now < UINT64_C(1) << product->class_bits; class_now++) {
        whorl_status status = whorli_product_fill(host, product, class_now);
        if (status != WHORL_OK)
            return status;
        if (product->count > product->capacity) {
            product->class_bits++;
            class_now = WHORL_NONE; /* all over again, from class 0 */
            *total = 0;
            continue;
        }
        *total += product->count;
    }
    return WHORL_OK;
}

static whorl_status whorli_product_write(whorl_host *host, whorli_product *product, whorl_term *terms, uint64_t total)
{
    uint64_t class_now, used = 0;
    for (class_now = 0; class_now < UINT64_C(1) << product->class_bits; class_now++) {
        whorl_status status = product->class_bits == 0 ? WHORL_OK : whorli_product_fill(host, product, class_now);
        if (status != WHORL_OK)
            return status;
        if (product->count > 0)
            memcpy(terms + used, product->found, (size_t)(product->count * sizeof(whorl_term)));
        used += product->count;
    }
    return whorli_terms_sort(host, terms, total);
}

static whorl_status whorli_product_run(whorl_host *host, const whorl_sum *a, const whorl_sum *b, int32_t commutator,
                                       whorl_term *terms, uint64_t room, whorl_sum *out)
{
    whorl_status status = whorli_operands_check(host, a, b, terms, room, out);
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorli_product product;
    uint64_t total = 0;
    if (status != WHORL_OK)
        return status;
    whorli_product_plan(&product, a, b, room);
    product.commutator = commutator;
    whorli_product_layout(&layout, &product);
    status = whorl_layout_take(host, &layout, &block);
    if (status != WHORL_OK)
        return status;
    whorli_product_layout(&layout, &product);
    status = whorli_product_count(host, &product, &total);
    if (status == WHORL_OK && total > room)
        status = whorli_no_room(host, room, total);
    if (status == WHORL_OK)
        status = whorli_product_write(host, &product, terms, total);
    if (status == WHORL_OK)
        whorli_sum_set(out, a->sites, terms, total);
    whorl_block_give(host, &block);
    return status;
}

whorl_status whorl_sum_multiply(whorl_host *host, const whorl_sum *a, const whorl_sum *b, whorl_term *terms,
                                uint64_t room, whorl_sum *out)
{
    return whorli_product_run(host, a, b, 0, terms, room, out);
}

whorl_status whorl_sum_commutator(whorl_host *host, const whorl_sum *a, const whorl_sum *b, whorl_term *terms,
                                  uint64_t room, whorl_sum *out)
{
    return whorli_product_run(host, a, b, 1, terms, room, out);
}

/* ---- >>transformations ------------------------------------------------------------------------------------------- */

static uint64_t whorli_mask_moved(uint64_t mask, const int32_t *site_to)
{
    uint64_t moved = 0;
    for (; mask != 0; mask &= mask - 1)
        moved |= UINT64_C(1) << site_to[whorl_bits_lowest(mask)];
    return moved;
}

static whorl_status whorli_site_to_check(whorl_host *host, int32_t from_sites, int32_t sites, const int32_t *site_to)
{
    uint64_t seen = 0;
    int32_t i;
    if (site_to == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "site_to is NULL: pass one new site for every site");
    for (i = 0; i < from_sites; i++) {
        whorl_text text;
        if (site_to[i] >= 0 && site_to[i] < sites && (seen >> site_to[i] & 1) == 0) {
            seen |= UINT64_C(1) << site_to[i];
            continue;
        }
        text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
        host->reason.index = (uint64_t)i;
        whorl_text_add(&text, "site_to sends site ");
        whorl_text_add_signed(&text, i);
        whorl_text_add(&text, " to ");
        whorl_text_add_signed(&text, site_to[i]);
        whorl_text_add(&text, ": the new sites must be different and in 0 .. ");
        whorl_text_add_signed(&text, sites - 1);
        return WHORL_BAD_ARGUMENT;
    }
    return WHORL_OK;
}

whorl_status whorl_sum_embed(whorl_host *host, whorl_sum *sum, int32_t sites, const int32_t *site_to)
{
    whorl_status status = whorl_sum_check(host, sum);
    uint64_t i;
    if (status == WHORL_OK)
        status = whorli_sites_valid(host, sites);
    if (status == WHORL_OK)
        status = whorli_site_to_check(host, sum->sites, sites, site_to);
    if (status != WHORL_OK)
        return status;
    for (i = 0; i < sum->count; i++) {
        sum->terms[i].x = whorli_mask_moved(sum->terms[i].x, site_to);
        sum->terms[i].z = whorli_mask_moved(sum->terms[i].z, site_to);
    }
    sum->sites = sites;
    return whorli_terms_sort(host, sum->terms, sum->count);
}

whorl_status whorl_sum_permute(whorl_host *host, whorl_sum *sum, const int32_t *site_to)
{
    return whorl_sum_embed(host, sum, sum == NULL ? 0 : sum->sites, site_to);
}

static void whorli_term_negate(whorl_term *term)
{
    term->re = 0.0 - term->re;
    term->im = 0.0 - term->im;
}

/* A mask argument must lie on the sites of the sum. */
static whorl_status whorli_mask_check(whorl_host *host, const whorl_sum *sum, uint64_t mask)
{
    if ((mask & ~whorl_bits_low(sum->sites)) == 0)
        return WHORL_OK;
    return whorl_fail(host, WHORL_BAD_ARGUMENT, "a mask has sites beyond those of the sum: clear its high bits");
}

whorl_status whorl_sum_conjugate(whorl_host *host, whorl_sum *sum, uint64_t x, uint64_t z)
{
    whorl_status status = whorl_sum_check(host, sum);
    uint64_t i;
    if (status == WHORL_OK)
        status = whorli_mask_check(host, sum, x | z);
    if (status != WHORL_OK)
        return status;
    for (i = 0; i < sum->count; i++)
        if (!whorl_strings_commute(x, z, sum->terms[i].x, sum->terms[i].z))
            whorli_term_negate(sum->terms + i);
    return WHORL_OK;
}

whorl_status whorl_sum_rotate(whorl_host *host, whorl_sum *sum, uint64_t gauge)
{
    whorl_status status = whorl_sum_check(host, sum);
    uint64_t i;
    if (status == WHORL_OK)
        status = whorli_mask_check(host, sum, gauge);
    if (status != WHORL_OK)
        return status;
    for (i = 0; i < sum->count; i++) { /* D^dagger X D = -Y, D^dagger Y D = X */
        whorl_term *term = sum->terms + i;
        if (whorl_bits_parity(term->x & ~term->z & gauge) != 0)
            whorli_term_negate(term);
        term->z ^= term->x & gauge;
    }
    return whorli_terms_sort(host, sum->terms, sum->count);
}

/* 1 if the term's matrix is imaginary: i^popcount(x & z) c is. */
static int32_t whorli_term_imaginary(const whorl_term *term)
{
    return whorl_bits_parity(term->x & term->z) ^ (term->re == 0.0);
}

whorl_status whorl_sum_real_gauge(whorl_host *host, const whorl_sum *sum, uint64_t *gauge)
{
    uint64_t rows[64], right[64], solution = 0, i; /* rows[k]: an equation whose highest unknown is site k */
    whorl_status status = whorl_sum_check(host, sum);
    int32_t k;
    if (status == WHORL_OK && gauge == NULL)
        status = whorl_fail(host, WHORL_BAD_ARGUMENT, "there is nowhere to put the mask: pass the address of one");
    if (status != WHORL_OK)
        return status;
    memset(rows, 0, sizeof rows);
    memset(right, 0, sizeof right);
    for (i = 0; i < sum->count; i++) { /* parity(x & gauge) = 1 where the term is imaginary */
        const whorl_term *term = sum->terms + i;
        uint64_t row = term->x, side = (uint64_t)whorli_term_imaginary(term);
        while (row != 0 && rows[whorl_bits_highest(row)] != 0) {
            k = whorl_bits_highest(row);
            row ^= rows[k];
            side ^= right[k];
        }
        if ((term->re != 0.0 && term->im != 0.0) || (row == 0 && side != 0)) {
            *gauge = WHORL_NONE;
            return WHORL_OK;
        }
        if (row != 0) {
            rows[whorl_bits_highest(row)] = row;
            right[whorl_bits_highest(row)] = side;
        }
    }
    for (k = 0; k < 64; k++) /* unknowns without an equation stay 0 */
        if (rows[k] != 0 && ((uint64_t)whorl_bits_parity(rows[k] & solution) ^ right[k]) != 0)
            solution |= UINT64_C(1) << k;
    *gauge = solution;
    return WHORL_OK;
}

/* ---- >>properties ------------------------------------------------------------------------------------------------ */

whorl_complex whorl_sum_trace(const whorl_sum *sum)
{
    return whorl_sum_coefficient(sum, 0, 0);
}

/* |re + i im| without overflow on the way; exact for real and imaginary numbers. */
static double whorli_modulus(double re, double im)
{
    double large = fabs(re), small = fabs(im), ratio;
    if (large < small) {
        ratio = large;
        large = small;
        small = ratio;
    }
    if (small == 0.0)
        return large;
    ratio = small / large;
    return large * sqrt(1.0 + ratio * ratio);
}

static double whorli_term_square(const whorl_term *term)
{
    return term->re * term->re + term->im * term->im;
}

static double whorli_term_modulus(const whorl_term *term)
{
    return whorli_modulus(term->re, term->im);
}

/* Adds a number of each term, leaf by leaf. */
static double whorli_terms_total(const whorl_sum *sum, double (*number)(const whorl_term *))
{
    whorl_tree tree;
    uint64_t i, first;
    whorl_tree_clear(&tree);
    for (first = 0; first < sum->count; first += WHORL_LEAF) {
        whorl_complex leaf = {0.0, 0.0};
        for (i = first; i < sum->count && i < first + WHORL_LEAF; i++)
            leaf.re += number(sum->terms + i);
        whorl_tree_add(&tree, leaf);
    }
    return whorl_tree_total(&tree).re;
}

double whorl_sum_square_trace(const whorl_sum *sum)
{
    return whorli_terms_total(sum, whorli_term_square);
}

double whorl_sum_norm_bound(const whorl_sum *sum)
{
    return whorli_terms_total(sum, whorli_term_modulus);
}

double whorl_sum_distance(const whorl_sum *a, const whorl_sum *b)
{
    double total = 0.0;
    uint64_t i = 0, j = 0;
    while (i < a->count || j < b->count) {
        int32_t order = i == a->count ? 1 : j == b->count ? -1 : whorli_string_order(a->terms + i, b->terms + j);
        double re = 0.0, im = 0.0;
        if (order <= 0) {
            re = a->terms[i].re;
            im = a->terms[i++].im;
        }
        if (order >= 0) {
            re -= b->terms[j].re;
            im -= b->terms[j++].im;
        }
        total += whorli_modulus(re, im);
    }
    return total;
}

int32_t whorl_sum_is_hermitian(const whorl_sum *sum)
{
    uint64_t i;
    for (i = 0; i < sum->count; i++)
        if (sum->terms[i].im != 0.0)
            return 0;
    return 1;
}

int32_t whorl_sum_is_real(const whorl_sum *sum)
{
    uint64_t i;
    for (i = 0; i < sum->count; i++) {
        const whorl_term *term = sum->terms + i;
        if ((whorl_bits_parity(term->x & term->z) != 0 ? term->re : term->im) != 0.0)
            return 0;
    }
    return 1;
}

int32_t whorl_sum_is_diagonal(const whorl_sum *sum)
{
    uint64_t i;
    for (i = 0; i < sum->count; i++)
        if (sum->terms[i].x != 0)
            return 0;
    return 1;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
