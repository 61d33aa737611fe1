/*
 * whorl_action.h 0.1.0: sums of Pauli strings compiled between two spaces into a map: the product y = A x without a
 * stored matrix.
 *
 *     whorl_action_desc desc = whorl_action_default();
 *     whorl_action *action = NULL;
 *     desc.sums = &sum;  desc.sum_count = 1;  desc.source = space;
 *     if (whorl_action_make(&host, &desc, &action) == WHORL_OK) {
 *         whorl_map map = whorl_action_map(action);
 *         status = whorl_map_apply(&host, &map, x, y, 1);
 *         whorl_action_free(&host, action);
 *     }
 *
 * A = sum over k of weight_k sum_k. The strings and their places (the structure) are compiled once; new weights are
 * taken by whorl_action_reweight, which costs little and gives the bits that a new compilation would. It does not store
 * the matrix, and does not look for a rotation that makes it real (whorl_sum_real_gauge).
 *
 * Bits: y_t adds f_g(t) x_s, s = t ^ flip_g, over the flips g in ascending order, whatever the space, the kernel, the
 * tile or the number of threads. See >>compile for the exact rule. They are promised for finite x.
 * Memory: one block an action, announced by whorl_action_bytes; spaces are borrowed and must outlive it, sums are
 * copied. What an apply takes is announced by whorl_map_scratch. Threads: the host's. An action changes in reweighting
 * only. Errors: statuses of whorl_core.h with a reason. Vectors are unspecified after WHORL_CANCELLED.
 */
#include "whorl_core.h"
#include "whorl_map.h"
#include "whorl_pauli.h"
#include "whorl_space.h"

#ifndef WHORL_ACTION_INCLUDED
#define WHORL_ACTION_INCLUDED

#if WHORL_CORE_VERSION != 100 || WHORL_MAP_VERSION != 100 || WHORL_PAULI_VERSION != 100 || WHORL_SPACE_VERSION != 100
#error "whorl_action.h 0.1.0 needs its siblings at 0.1.0: take all headers from one release"
#endif
#define WHORL_ACTION_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* What becomes of a state that the operator leads out of the target space. */
typedef int32_t whorl_action_mode;
enum {
    WHORL_ACTION_STRICT = 0, /* the operator is refused */
    WHORL_ACTION_PROJECT = 1 /* it is dropped: P A P' with the projectors of target and source */
};

typedef struct whorl_action_desc {
    const whorl_sum *sums;        /* tidy, of as many sites as the spaces */
    uint64_t sum_count;           /* 0: the operator zero */
    const whorl_complex *weights; /* one a sum; NULL: all 1 */
    const whorl_space *source;    /* of x; no default */
    const whorl_space *target;    /* of y; NULL: the source */
    whorl_action_mode mode;       /* default WHORL_ACTION_STRICT */
    whorl_element element;        /* default: real double where all sums and weights are real, else complex double */
} whorl_action_desc;

typedef struct whorl_action whorl_action;

/* All zero: set sums, sum_count and source. */
WHORL_API whorl_action_desc whorl_action_default(void);

/*
 * The bytes that whorl_action_make takes, exactly. Cost O(terms), no memory.
 * Errors: as whorl_action_make, but for those of memory and WHORL_LEAVES_SPACE.
 */
WHORL_API whorl_status whorl_action_bytes(whorl_host *host, const whorl_action_desc *desc, uint64_t *bytes);

/*
 * Compiles. In strict mode the weighted operator must lead every state of the source into the target, judged flip by
 * flip: X_i X_j + Y_i Y_j keeps S^z though neither string does. What a flip leads out must vanish up to 16 eps times
 * the sum of its |coefficients|, and is dropped. Cost: O(n log n) for n terms, and for the judging O(2^sites flipped) a
 * flip in spaces of fixed numbers; a scan of the source's states in lists and blockades. Errors: WHORL_BAD_ARGUMENT (no
 * source; a sum that is not tidy or has another number of sites; a real element type for an operator that is not real;
 * unknown mode or element), WHORL_NOT_FINITE (a weight or a weighted coefficient), WHORL_LEAVES_SPACE (the reason names
 * the flip, its terms and a state), WHORL_TOO_LARGE, WHORL_OVER_LIMIT, WHORL_NO_MEMORY, WHORL_CANCELLED; *action is
 * then NULL.
 */
WHORL_API whorl_status whorl_action_make(whorl_host *host, const whorl_action_desc *desc, whorl_action **action);
/* Gives the memory back; NULL is legal. */
WHORL_API void whorl_action_free(whorl_host *host, whorl_action *action);

/*
 * New weights, one a sum (NULL: all 1), on the same structure: the same bits as making it anew. It is judged again with
 * the new weights. Takes no memory. No map of this action may be at work meanwhile.
 * Errors, all with the action as it was: as whorl_action_make; complex weights for real elements are
 * WHORL_BAD_ARGUMENT.
 */
WHORL_API whorl_status whorl_action_reweight(whorl_host *host, whorl_action *action, const whorl_complex *weights);

/* The map, by value; valid while the action lives (norm_bound and hermitian: until it is reweighted). */
WHORL_API whorl_map whorl_action_map(const whorl_action *action);

/* Which kernel runs, in a few words, static text: for benches and tests. */
WHORL_API const char *whorl_action_kernel(const whorl_action *action);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_ACTION_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_ACTION_IMPLEMENTED)
#define WHORL_ACTION_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>compile ---------------------------------------------------------------------------------------------------
 *
 * Gather form. P|s> = i^p (-1)^popcount(z & s) |s ^ x> with p = popcount(x & z); seen from the output t = s ^ x the
 * sign is (-1)^p (-1)^popcount(z & t), so a term contributes d (-1)^popcount(z & t) x_s to y_t with d = (-i)^p c,
 * exactly.
 *
 * Complex elements are one bit more. d = a + i b acts on (re, im) as a real operator: a on each of the two, -b from im
 * to re and b from re to im. So the terms are real ones, of even flips (component kept) and odd flips (component
 * changed; their d is -b, and the sign turns for the component im). Every kernel is real, a real operator on complex
 * vectors multiplies no zeros, and neither does an imaginary one.
 *
 * The rule of the bits. Terms of one flip are a factor f(t). The lowest `cut` sites are the low part of t, the others
 * the high part; the cut depends on the number of sites alone. With sums taken from left to right, starting at zero: f
 * = (sum of +-d over terms whose z has no high part, ascending z)
 *         + for each low part of the other terms, ascending: +-(sum of +-d over its terms, ascending z),
 * where the inner sign is that of the high part of z and t, the outer that of the low part. Then
 *     y_t = 0 + f_1 x_(t ^ x1) + f_2 x_(t ^ x2) + ...   over the flips by (x, odd), accumulated in double, rounded
 * once. A kernel may skip what is exactly zero, compute factors once for many t, and share them, but not reorder.
 */

/* One term of one of the sums. */
typedef struct whorli_action_entry {
    uint64_t x, z;
    double re, im; /* d = (-i)^popcount(x & z) c */
    uint64_t sum;
} whorli_action_entry;

/* One string: its entries are those from `first` on with the same masks. */
typedef struct whorli_action_string {
    uint64_t x, z;
    uint64_t first, count;
    double re, im;           /* weighted d */
    double next_re, next_im; /* while new weights are judged */
} whorli_action_string;

/* One weighted term as the kernels see it. */
typedef struct whorli_action_real_term {
    uint64_t x, odd;    /* flip */
    uint64_t low, high; /* parts of z */
    double d;
} whorli_action_real_term;

/* A low part of z with the terms that share it. */
typedef struct whorli_action_character {
    uint64_t low;
    uint64_t first, count; /* of the terms */
} whorli_action_character;

typedef struct whorli_action_flip {
    uint64_t x, odd;
    uint64_t first_low, low_count;             /* terms without a high part */
    uint64_t first_character, character_count; /* the others */
} whorli_action_flip;

struct whorl_action {
    whorl_block block;
    const whorl_space *source, *target;
    int32_t sites, square, same_space;
    whorl_action_mode mode;
    whorl_element element;
    int32_t width; /* reals an element: 2 for complex ones */
    int32_t cut;   /* sites of the low part */
    int32_t hermitian, real;
    double norm_bound;
    uint64_t sum_count, entry_count, string_count;
    uint64_t term_count, character_count, flip_count;
    whorli_action_entry *entries;   /* by x, z, sum */
    whorli_action_string *strings;  /* by x, z */
    whorli_action_real_term *terms; /* by x, odd, without a high part first, low, high */
    whorli_action_character *characters;
    whorli_action_flip *flips; /* by x, odd */
};

static int32_t whorli_action_entry_order(const void *left, const void *right)
{
    const whorli_action_entry *a = (const whorli_action_entry *)left, *b = (const whorli_action_entry *)right;
    if (a->x != b->x)
        return a->x < b->x ? -1 : 1;
    if (a->z != b->z)
        return a->z < b->z ? -1 : 1;
    return a->sum < b->sum ? -1 : a->sum > b->sum;
}

static int32_t whorli_action_real_term_order(const void *left, const void *right)
{
    const whorli_action_real_term *a = (const whorli_action_real_term *)left,
                                  *b = (const whorli_action_real_term *)right;
    if (a->x != b->x)
        return a->x < b->x ? -1 : 1;
    if (a->odd != b->odd)
        return a->odd < b->odd ? -1 : 1;
    if ((a->high != 0) != (b->high != 0))
        return a->high != 0 ? 1 : -1;
    if (a->low != b->low)
        return a->low < b->low ? -1 : 1;
    return a->high < b->high ? -1 : a->high > b->high;
}

/* Sites in the low part: rows of the kernels are as long as the low parts are many. */
static int32_t whorli_action_cut(int32_t sites)
{
    return sites <= 12 ? sites : sites <= 24 ? 12 : sites / 2;
}

/* (-i)^quarter (re + i im) */
static whorl_complex whorli_action_turn(double re, double im, int32_t quarter)
{
    switch (quarter & 3) {
    case 1:
        return whorl_complex_of(im, -re);
    case 2:
        return whorl_complex_of(-re, -im);
    case 3:
        return whorl_complex_of(-im, re);
    default:
        return whorl_complex_of(re, im);
    }
}

/* Fills what is known before anything is allocated: sizes, modes, element type. */
static whorl_status whorli_action_plan(whorl_host *host, const whorl_action_desc *desc, whorl_action *plan)
{
    uint64_t k, i;
    memset(plan, 0, sizeof *plan);
    if (desc->source == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "an action needs a source space: set desc.source");
    plan->source = desc->source;
    plan->target = desc->target == NULL ? desc->source : desc->target;
    plan->sites = whorl_space_sites(plan->source);
    plan->mode = desc->mode;
    plan->sum_count = desc->sum_count;
    plan->real = 1;
    if (whorl_space_sites(plan->target) != plan->sites)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "source and target of an action must have the same number of sites");
    if (desc->mode != WHORL_ACTION_STRICT && desc->mode != WHORL_ACTION_PROJECT)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the mode of an action is WHORL_ACTION_STRICT or WHORL_ACTION_PROJECT");
    if (desc->element != WHORL_ELEMENT_DEFAULT && whorl_element_bytes(desc->element) == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the element type of an action is none of the four");
    if (desc->sum_count > 0 && desc->sums == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "desc.sums is NULL: pass an array of sum_count sums");
    plan->same_space = plan->source == plan->target || whorl_space_same(plan->source, plan->target);
    for (k = 0; k < desc->sum_count; k++) {
        whorl_status status = whorl_sum_check(host, desc->sums + k);
        if (status != WHORL_OK)
            return status;
        if (desc->sums[k].sites != plan->sites) {
            whorl_text text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
            host->reason.index = k;
            whorl_text_add(&text, "sums[");
            whorl_text_add_unsigned(&text, k);
            whorl_text_add(&text, "] has ");
            whorl_text_add_signed(&text, desc->sums[k].sites);
            whorl_text_add(&text, " sites and the space ");
            whorl_text_add_signed(&text, plan->sites);
            whorl_text_add(&text, ": make them equal");
            return WHORL_BAD_ARGUMENT;
        }
        plan->entry_count = whorl_size_add(plan->entry_count, desc->sums[k].count);
        for (i = 0; i < desc->sums[k].count; i++) {
            const whorl_term *term = desc->sums[k].terms + i;
            double off = (whorl_bits_count(term->x & term->z) & 1) != 0 ? term->re : term->im;
            plan->real = plan->real && off == 0.0;
        }
        if (desc->weights != NULL && desc->weights[k].im != 0.0)
            plan->real = 0;
    }
    plan->element = desc->element != WHORL_ELEMENT_DEFAULT ? desc->element
                    : plan->real                           ? WHORL_REAL_DOUBLE
                                                           : WHORL_COMPLEX_DOUBLE;
    if (!plan->real && !whorl_element_is_complex(plan->element))
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the operator is not real: choose complex elements, or rotate it with whorl_sum_real_gauge");
    plan->width = whorl_element_is_complex(plan->element) ? 2 : 1;
    plan->cut = whorli_action_cut(plan->sites);
    return WHORL_OK;
}

static whorl_action *whorli_action_carve(whorl_layout *layout, whorl_action *plan)
{
    uint64_t n = plan->entry_count, reals = whorl_size_multiply(n, (uint64_t)plan->width);
    whorl_action *action = (whorl_action *)whorl_layout_carve(layout, 1, sizeof *action);
    plan->entries = (whorli_action_entry *)whorl_layout_carve(layout, n, sizeof *plan->entries);
    plan->strings = (whorli_action_string *)whorl_layout_carve(layout, n, sizeof *plan->strings);
    plan->terms = (whorli_action_real_term *)whorl_layout_carve(layout, reals, sizeof *plan->terms);
    plan->characters = (whorli_action_character *)whorl_layout_carve(layout, reals, sizeof *plan->characters);
    plan->flips = (whorli_action_flip *)whorl_layout_carve(layout, reals, sizeof *plan->flips);
    return action;
}

static void whorli_action_fill_strings(const whorl_action_desc *desc, whorl_action *action)
{
    uint64_t k, i, at = 0, sorted = 1;
    for (k = 0; k < desc->sum_count; k++)
        for (i = 0; i < desc->sums[k].count; i++) {
            const whorl_term *term = desc->sums[k].terms + i;
            whorl_complex d = whorli_action_turn(term->re, term->im, whorl_bits_count(term->x & term->z));
            whorli_action_entry *entry = action->entries + at++;
            entry->x = term->x;
            entry->z = term->z;
            entry->re = d.re;
            entry->im = d.im;
            entry->sum = k;
            sorted = sorted && (at < 2 || whorli_action_entry_order(entry - 1, entry) < 0);
        }
    if (!sorted)
        whorl_sort(action->entries, at, sizeof *action->entries, whorli_action_entry_order);
    action->string_count = 0;
    for (i = 0; i < at; i++) {
        const whorli_action_entry *entry = action->entries + i;
        whorli_action_string *string = action->strings + action->string_count;
        if (i == 0 || string[-1].x != entry->x || string[-1].z != entry->z) {
            memset(string, 0, sizeof *string);
            string->x = entry->x;
            string->z = entry->z;
            string->first = i;
            action->string_count++;
            string++;
        }
        string[-1].count++;
    }
}

/* next = sum of weight d, in order of the sums. */
static whorl_status whorli_action_weigh(whorl_host *host, whorl_action *action, const whorl_complex *weights)
{
    uint64_t i, j;
    for (i = 0; weights != NULL && i < action->sum_count; i++) {
        if (!whorl_is_finite(weights[i].re) || !whorl_is_finite(weights[i].im)) {
            whorl_status status =
                whorl_fail(host, WHORL_NOT_FINITE, "a weight is NaN or infinite: pass finite weights");
            host->reason.index = i;
            return status;
        }
        if (action->width == 1 && weights[i].im != 0.0) {
            whorl_status status = whorl_fail(host, WHORL_BAD_ARGUMENT,
                                             "a weight is not real, but the elements are: choose complex elements");
            host->reason.index = i;
            return status;
        }
    }
    for (i = 0; i < action->string_count; i++) {
        whorli_action_string *string = action->strings + i;
        whorl_complex d = {0.0, 0.0};
        for (j = string->first; j < string->first + string->count; j++) {
            const whorli_action_entry *entry = action->entries + j;
            whorl_complex w = weights == NULL ? whorl_complex_of(1.0, 0.0) : weights[entry->sum];
            d.re += w.re * entry->re - w.im * entry->im;
            d.im += w.re * entry->im + w.im * entry->re;
        }
        if (!whorl_is_finite(d.re) || !whorl_is_finite(d.im) || !whorl_is_finite(fabs(d.re) + fabs(d.im)))
            return whorl_fail(host, WHORL_NOT_FINITE, "weighted coefficients overflow: scale the sums or the weights");
        string->next_re = d.re;
        string->next_im = d.im;
    }
    return WHORL_OK;
}

/* ---- >>judge ----------------------------------------------------------------------------------------------------- */

/* f of the strings first .. end - 1, which share a flip, at the output t; and the sum of |d|. */
static whorl_complex whorli_strings_factor(const whorl_action *action, uint64_t first, uint64_t end, uint64_t t)
{
    whorl_complex f = {0.0, 0.0};
    for (; first < end; first++) {
        const whorli_action_string *string = action->strings + first;
        double sign = whorl_bits_parity(string->z & t) ? -1.0 : 1.0;
        f.re += sign * string->next_re;
        f.im += sign * string->next_im;
    }
    return f;
}

static double whorli_strings_tolerance(const whorl_action *action, uint64_t first, uint64_t end)
{
    double sum = 0.0;
    for (; first < end; first++)
        sum += fabs(action->strings[first].next_re) + fabs(action->strings[first].next_im);
    return 16.0 * 2.220446049250313e-16 * sum;
}

static int32_t whorli_complex_above(whorl_complex f, double tolerance)
{
    return fabs(f.re) > tolerance || fabs(f.im) > tolerance;
}

static void whorli_action_add_string(whorl_text *text, const whorli_action_string *string)
{
    whorl_complex c =
        whorli_action_turn(string->next_re, string->next_im, 4 - (whorl_bits_count(string->x & string->z) & 3));
    uint64_t mask = string->x | string->z;
    whorl_text_add_real(text, c.im == 0.0 ? c.re : c.re == 0.0 ? c.im : c.re);
    if (c.im != 0.0) {
        if (c.re != 0.0) {
            whorl_text_add(text, c.im < 0.0 ? " - " : " + ");
            whorl_text_add_real(text, fabs(c.im));
        }
        whorl_text_add(text, " i");
    }
    for (; mask != 0; mask &= mask - 1) {
        int32_t site = whorl_bits_lowest(mask);
        uint64_t bit = UINT64_C(1) << site;
        whorl_text_add(text, (string->x & bit) == 0 ? " Z" : (string->z & bit) == 0 ? " X" : " Y");
        whorl_text_add_signed(text, site);
    }
}

static whorl_status whorli_action_refuse(whorl_host *host, const whorl_action *action, uint64_t first, uint64_t end,
                                         uint64_t state)
{
    whorl_text text = whorl_fail_begin(host, WHORL_LEAVES_SPACE);
    uint64_t x = action->strings[first].x, mask, shown;
    int32_t site;
    host->reason.index = first;
    whorl_text_add(&text, x == 0 ? "the diagonal" : "the flip of sites");
    for (mask = x; mask != 0; mask &= mask - 1) {
        whorl_text_add(&text, mask == x ? " " : ",");
        whorl_text_add_signed(&text, whorl_bits_lowest(mask));
    }
    whorl_text_add(&text, " leads out of the target space, from state ");
    for (site = 0; site < action->sites; site++)
        whorl_text_add(&text, (state >> site & 1) != 0 ? "1" : "0");
    whorl_text_add(&text, ": complete its terms ");
    for (shown = first; shown < end && shown < first + 4; shown++) {
        if (shown > first)
            whorl_text_add(&text, "; ");
        whorli_action_add_string(&text, action->strings + shown);
    }
    if (shown < end)
        whorl_text_add(&text, "; ...");
    whorl_text_add(&text, ", or choose another target or WHORL_ACTION_PROJECT");
    return WHORL_LEAVES_SPACE;
}

/* Every state of the source: exact for every kind of space. */
static whorl_status whorli_action_scan(whorl_host *host, const whorl_action *action, uint64_t first, uint64_t end)
{
    uint64_t x = action->strings[first].x, i, count = whorl_space_count(action->source), state = 0;
    double tolerance = whorli_strings_tolerance(action, first, end);
    for (i = 0; i < count; i++) {
        state = i == 0 ? whorl_space_at(action->source, 0) : whorl_space_next(action->source, i - 1, state);
        if (!whorl_space_has(action->target, state ^ x) &&
            whorli_complex_above(whorli_strings_factor(action, first, end, state ^ x), tolerance))
            return whorli_action_refuse(host, action, first, end, state);
        if ((i & 0xfffff) == 0xfffff) {
            whorl_status status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
        }
    }
    return WHORL_OK;
}

/* Most patterns of flipped bits times terms that are looked at before the states are scanned instead. */
#define WHORLI_JUDGE_WORK (UINT64_C(1) << 22)

/*
 * Fixed numbers, the same masks in source and target: a state leaves by the number of its down spins among the flipped
 * sites of each mask, so by its pattern on the flipped sites alone. 1 if this pattern does.
 */
static int32_t whorli_pattern_leaves(const whorl_action *action, uint64_t x, uint64_t pattern)
{
    int32_t k, count = whorl_space_number_count(action->source), leaves = 0;
    for (k = 0; k < count; k++) {
        whorl_down_number from = whorl_space_number_at(action->source, k),
                          to = whorl_space_number_at(action->target, k);
        int32_t flipped = whorl_bits_count(x & from.mask), down = whorl_bits_count(pattern & from.mask);
        int32_t rest = from.down - down; /* on the sites of the mask that are not flipped */
        if (rest < 0 || rest > whorl_bits_count(from.mask & ~x))
            return 0; /* no state of the source has this pattern */
        leaves |= from.down + flipped - 2 * down != to.down;
    }
    return leaves;
}

static int32_t whorli_same_masks(const whorl_space *a, const whorl_space *b)
{
    int32_t k, count = whorl_space_number_count(a);
    if (whorl_space_kind_of(a) != WHORL_SPACE_DOWN || whorl_space_kind_of(b) != WHORL_SPACE_DOWN ||
        count != whorl_space_number_count(b))
        return 0;
    for (k = 0; k < count; k++)
        if (whorl_space_number_at(a, k).mask != whorl_space_number_at(b, k).mask)
            return 0;
    return 1;
}

/*
 * Enough for fixed numbers, not necessary: for every pattern of the flipped bits that leaves, the coefficient of each
 * character of the other bits vanishes. 1: no state leaves with a factor; 0: not known, scan.
 */
static int32_t whorli_patterns_vanish(const whorl_action *action, uint64_t first, uint64_t end)
{
    uint64_t x = action->strings[first].x, pattern = 0, i, j;
    double tolerance = whorli_strings_tolerance(action, first, end);
    int32_t bits = whorl_bits_count(x);
    if (bits >= 22 || ((end - first) * (end - first)) << bits > WHORLI_JUDGE_WORK)
        return 0;
    do { /* all subsets of x */
        if (whorli_pattern_leaves(action, x, pattern))
            for (i = first; i < end; i++) {
                uint64_t outside = action->strings[i].z & ~x;
                whorl_complex sum = {0.0, 0.0};
                for (j = first; j < end; j++) {
                    const whorli_action_string *string = action->strings + j;
                    double sign = whorl_bits_parity(string->z & (pattern ^ x) & x) ? -1.0 : 1.0;
                    if ((string->z & ~x) != outside)
                        continue;
                    sum.re += sign * string->next_re;
                    sum.im += sign * string->next_im;
                }
                if (whorli_complex_above(sum, tolerance))
                    return 0;
            }
        pattern = (pattern - x) & x;
    } while (pattern != 0);
    return 1;
}

/* 1 if no state of the source leaves by this flip, whatever the factor; by the definitions of the spaces. */
static int32_t whorli_flip_stays(const whorl_action *action, uint64_t x)
{
    const whorl_space *source = action->source, *target = action->target;
    int32_t k;
    if (whorl_space_kind_of(target) == WHORL_SPACE_ALL || whorl_space_count(source) == 0)
        return 1;
    if (x == 0 && action->same_space)
        return 1;
    if (whorl_space_kind_of(source) == WHORL_SPACE_PARITY && whorl_space_kind_of(target) == WHORL_SPACE_PARITY &&
        whorl_space_parity_mask(source) == whorl_space_parity_mask(target))
        return (whorl_space_parity(source) ^ whorl_bits_parity(x & whorl_space_parity_mask(source))) ==
               whorl_space_parity(target);
    if (!whorli_same_masks(source, target))
        return 0;
    for (k = 0; k < whorl_space_number_count(source); k++) {
        whorl_down_number from = whorl_space_number_at(source, k);
        int32_t flipped = whorl_bits_count(x & from.mask), rest = whorl_bits_count(from.mask & ~x);
        int32_t least = from.down > rest ? from.down - rest : 0, most = from.down < flipped ? from.down : flipped;
        if (least != most || from.down + flipped - 2 * least != whorl_space_number_at(target, k).down)
            return 0;
    }
    return 1;
}

static whorl_status whorli_action_judge(whorl_host *host, const whorl_action *action)
{
    uint64_t first, end;
    int32_t numbers = whorli_same_masks(action->source, action->target);
    if (action->mode == WHORL_ACTION_PROJECT)
        return WHORL_OK;
    for (first = 0; first < action->string_count; first = end) {
        whorl_status status = WHORL_OK;
        for (end = first + 1; end < action->string_count && action->strings[end].x == action->strings[first].x; end++)
            continue;
        if (whorli_flip_stays(action, action->strings[first].x) ||
            (numbers && whorli_patterns_vanish(action, first, end)))
            continue;
        status = whorl_poll(host);
        if (status == WHORL_OK)
            status = whorli_action_scan(host, action, first, end);
        if (status != WHORL_OK)
            return status;
    }
    return WHORL_OK;
}

/* ---- >>weights --------------------------------------------------------------------------------------------------- */

static void whorli_action_add_term(whorl_action *action, const whorli_action_string *string, uint64_t odd, double d)
{
    whorli_action_real_term *term = action->terms + action->term_count;
    if (d == 0.0)
        return;
    term->x = string->x;
    term->odd = odd;
    term->low = string->z & whorl_bits_low(action->cut);
    term->high = string->z & ~whorl_bits_low(action->cut);
    term->d = d;
    action->term_count++;
}

/* The kernels' view of the weighted strings. Cannot fail. */
static void whorli_action_fill_terms(whorl_action *action)
{
    uint64_t i, sorted = 1;
    whorli_action_flip *flip = NULL;
    whorli_action_character *character = NULL;
    action->term_count = 0;
    for (i = 0; i < action->string_count; i++) {
        const whorli_action_string *string = action->strings + i;
        whorli_action_add_term(action, string, 0, string->re);
        if (action->width == 2)
            whorli_action_add_term(action, string, 1, -string->im);
    }
    for (i = 1; i < action->term_count && sorted; i++)
        sorted = whorli_action_real_term_order(action->terms + i - 1, action->terms + i) < 0;
    if (!sorted)
        whorl_sort(action->terms, action->term_count, sizeof *action->terms, whorli_action_real_term_order);
    action->flip_count = action->character_count = 0;
    for (i = 0; i < action->term_count; i++) {
        const whorli_action_real_term *term = action->terms + i;
        int32_t fresh = i == 0 || term->x != term[-1].x || term->odd != term[-1].odd;
        if (fresh) {
            flip = action->flips + action->flip_count++;
            flip->x = term->x;
            flip->odd = term->odd;
            flip->first_low = i;
            flip->low_count = 0;
            flip->first_character = action->character_count;
            flip->character_count = 0;
        }
        if (term->high == 0) {
            flip->low_count++;
            continue;
        }
        if (fresh || flip->character_count == 0 || character->low != term->low) {
            character = action->characters + action->character_count++;
            character->low = term->low;
            character->first = i;
            character->count = 0;
            flip->character_count++;
        }
        character->count++;
    }
}

/* Takes the judged weights over. */
static void whorli_action_settle(whorl_action *action)
{
    uint64_t i;
    action->hermitian = action->same_space;
    action->norm_bound = 0.0;
    for (i = 0; i < action->string_count; i++) {
        whorli_action_string *string = action->strings + i;
        double re = string->next_re, im = string->next_im;
        int32_t odd = whorl_bits_count(string->x & string->z) & 1;
        string->re = re;
        string->im = im;
        action->norm_bound += re == 0.0 || im == 0.0 ? fabs(re) + fabs(im) : sqrt(re * re + im * im);
        action->hermitian = action->hermitian && (odd ? re : im) == 0.0;
    }
    if (!whorl_is_finite(action->norm_bound))
        action->norm_bound = 0.0;
    action->norm_bound *= 1.0 + 1e-12; /* rounding of the sum */
    whorli_action_fill_terms(action);
}

whorl_status whorl_action_reweight(whorl_host *host, whorl_action *action, const whorl_complex *weights)
{
    whorl_status status = whorli_action_weigh(host, action, weights);
    if (status == WHORL_OK)
        status = whorli_action_judge(host, action);
    if (status == WHORL_OK)
        whorli_action_settle(action);
    return status;
}

/* ---- >>make ------------------------------------------------------------------------------------------------------ */

whorl_action_desc whorl_action_default(void)
{
    whorl_action_desc desc;
    memset(&desc, 0, sizeof desc);
    return desc;
}

whorl_status whorl_action_bytes(whorl_host *host, const whorl_action_desc *desc, uint64_t *bytes)
{
    whorl_action plan;
    whorl_layout layout = {NULL, 0};
    whorl_status status = whorli_action_plan(host, desc, &plan);
    if (status != WHORL_OK)
        return status;
    whorli_action_carve(&layout, &plan);
    *bytes = whorl_block_bytes(layout.bytes);
    return WHORL_OK;
}

whorl_status whorl_action_make(whorl_host *host, const whorl_action_desc *desc, whorl_action **action)
{
    whorl_action plan, *made;
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_status status;
    *action = NULL;
    status = whorli_action_plan(host, desc, &plan);
    if (status != WHORL_OK)
        return status;
    whorli_action_carve(&layout, &plan);
    status = whorl_layout_take(host, &layout, &block);
    if (status != WHORL_OK)
        return status;
    made = whorli_action_carve(&layout, &plan);
    plan.block = block;
    *made = plan;
    whorli_action_fill_strings(desc, made);
    status = whorl_action_reweight(host, made, desc->weights);
    if (status == WHORL_OK)
        *action = made;
    else
        whorl_block_give(host, &block);
    return status;
}

void whorl_action_free(whorl_host *host, whorl_action *action)
{
    whorl_block block;
    if (action == NULL)
        return;
    block = action->block;
    whorl_block_give(host, &block);
}

/* ---- >>any space ------------------------------------------------------------------------------------------------- */

typedef struct whorli_action_job {
    const whorl_action *action;
    const char *x;
    char *y;
    uint64_t columns_of_x, rows; /* elements a column */
    uint64_t block;              /* rows a block */
    int32_t count;               /* columns */
} whorli_action_job;

/* f of a flip at the output t, by the rule. */
static double whorli_action_flip_factor(const whorl_action *action, const whorli_action_flip *flip, uint64_t t)
{
    double f = 0.0;
    uint64_t i, j;
    for (i = flip->first_low; i < flip->first_low + flip->low_count; i++)
        f += whorl_bits_parity(action->terms[i].low & t) ? -action->terms[i].d : action->terms[i].d;
    for (i = flip->first_character; i < flip->first_character + flip->character_count; i++) {
        const whorli_action_character *character = action->characters + i;
        double e = 0.0;
        for (j = character->first; j < character->first + character->count; j++)
            e += whorl_bits_parity(action->terms[j].high & t) ? -action->terms[j].d : action->terms[j].d;
        f += whorl_bits_parity(character->low & t) ? -e : e;
    }
    return f;
}

static double whorli_real_at(whorl_element element, const char *vector, uint64_t i)
{
    return whorl_element_is_float(element) ? (double)((const float *)(const void *)vector)[i]
                                           : ((const double *)(const void *)vector)[i];
}

static void whorli_real_put(whorl_element element, char *vector, uint64_t i, double value)
{
    if (whorl_element_is_float(element))
        ((float *)(void *)vector)[i] = (float)value;
    else
        ((double *)(void *)vector)[i] = value;
}

#define WHORLI_ANY_COLUMNS 8

/* The row of state t of up to eight columns: accumulates in sums[column * width + component]. */
static void whorli_any_row(const whorli_action_job *job, uint64_t row, uint64_t t, int32_t first, int32_t count,
                           double *sums)
{
    const whorl_action *action = job->action;
    uint64_t g, last = 0, index = WHORL_NONE, width = (uint64_t)action->width;
    int32_t c, known = 0;
    memset(sums, 0, (size_t)count * (size_t)width * sizeof *sums);
    for (g = 0; g < action->flip_count; g++) {
        const whorli_action_flip *flip = action->flips + g;
        double f = whorli_action_flip_factor(action, flip, t);
        if (f == 0.0)
            continue;
        if (!known || flip->x != last) {
            known = 1;
            last = flip->x;
            index = last == 0 && action->same_space ? row : whorl_space_find(action->source, t ^ last);
        }
        if (index == WHORL_NONE)
            continue;
        for (c = 0; c < count; c++) {
            uint64_t at = ((uint64_t)(first + c) * job->columns_of_x + index) * width;
            double *sum = sums + (uint64_t)c * width;
            sum[0] += f * whorli_real_at(action->element, job->x, at + flip->odd);
            if (width == 2)
                sum[1] += (flip->odd ? -f : f) * whorli_real_at(action->element, job->x, at + 1 - flip->odd);
        }
    }
}

static void whorli_any_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_action_job *job = (const whorli_action_job *)argument;
    const whorl_action *action = job->action;
    uint64_t row = block * job->block, end = row + job->block < job->rows ? row + job->block : job->rows;
    uint64_t t = whorl_space_at(action->target, row);
    double sums[2 * WHORLI_ANY_COLUMNS];
    (void)worker;
    for (; row < end; row++) {
        int32_t first, c, b;
        for (first = 0; first < job->count; first += WHORLI_ANY_COLUMNS) {
            int32_t count = job->count - first < WHORLI_ANY_COLUMNS ? job->count - first : WHORLI_ANY_COLUMNS;
            whorli_any_row(job, row, t, first, count, sums);
            for (c = 0; c < count; c++)
                for (b = 0; b < action->width; b++)
                    whorli_real_put(action->element, job->y,
                                    ((uint64_t)(first + c) * job->rows + row) * (uint64_t)action->width + (uint64_t)b,
                                    sums[c * action->width + b]);
        }
        t = whorl_space_next(action->target, row, t);
    }
}

/* ---- >>map ------------------------------------------------------------------------------------------------------- */

static whorl_status whorli_action_apply(whorl_host *host, const whorl_map *map, const void *x, void *y, int32_t count)
{
    const whorl_action *action = (const whorl_action *)map->context;
    whorli_action_job job;
    job.action = action;
    job.x = (const char *)x;
    job.y = (char *)y;
    job.columns_of_x = map->columns;
    job.rows = map->rows;
    job.count = count;
    job.block = 1024;
    return whorl_run(host, whorli_any_body, &job, (job.rows + (job.block - 1)) / job.block,
                     whorl_size_multiply(job.block * (action->flip_count + 1), (uint64_t)count));
}

whorl_map whorl_action_map(const whorl_action *action)
{
    whorl_map map = whorl_map_default();
    map.rows = whorl_space_count(action->target);
    map.columns = whorl_space_count(action->source);
    map.element = action->element;
    map.hermitian = action->hermitian;
    map.norm_bound = action->norm_bound;
    map.context = action;
    map.apply = whorli_action_apply;
    return map;
}

const char *whorl_action_kernel(const whorl_action *action)
{
    (void)action;
    return "state by state";
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
