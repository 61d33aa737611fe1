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

/* Parities of so many independent masks give the factor of a simple flip, from a table. */
#define WHORLI_SIMPLE_RANK 7

typedef struct whorli_action_flip {
    uint64_t x, odd;
    uint64_t first_low, low_count;             /* terms without a high part */
    uint64_t first_character, character_count; /* the others */
    int32_t rank;                              /* independent parities of its z masks; -1: more than the simple rank */
    uint32_t list;                             /* in a split space: its number among the flips with lists */
    uint64_t basis[WHORLI_SIMPLE_RANK];
    uint64_t first_value; /* factor = values[first_value + parities of t with the basis] */
} whorli_action_flip;

/* See >>split. */
typedef struct whorli_split_near {
    uint16_t to, value;
} whorli_split_near;
typedef struct whorli_split_pair {
    uint16_t row, from;
} whorli_split_pair;
typedef struct whorli_split_pairs {
    uint32_t first, count; /* of the pairs */
    uint32_t from_class, pattern;
    uint32_t runs; /* 0: pairs; otherwise so many runs of them, two entries each: the first pair, and the length - 1 */
} whorli_split_pairs;

typedef struct whorli_split {
    int32_t used; /* the space and the structure permit it */
    int32_t fits; /* and so do the weighted terms */
    int32_t low_sites, high_sites;
    uint64_t lows, highs; /* 2^low_sites, 2^high_sites */
    uint64_t classes, longest;
    uint64_t group_rows, group_room, group_count;
    uint64_t near_room, list_room;  /* entries; flips with lists */
    uint64_t pairs_room, pair_room; /* lists and entries of a flip with lists */
    uint64_t list_count, most_values;
    uint64_t near_values; /* values of near flips come first */
    int32_t has_odd;
    uint64_t first_far;                  /* flips from here on change the high part */
    uint64_t *start;                     /* [highs]: index of the row's first state */
    uint32_t *need;                      /* [highs]: class of the row's low parts; UINT32_MAX: no such row */
    uint32_t *order;                     /* [highs]: rows by class, ascending in each */
    uint32_t *class_row;                 /* [classes + 1]: where each class starts there */
    uint32_t *low;                       /* [lows]: low parts by class, ascending in each */
    uint32_t *class_low;                 /* [classes + 1] */
    uint32_t *class_of;                  /* [lows] */
    uint32_t *rank;                      /* [lows]: place in its class */
    uint32_t *group_class, *group_first; /* [group_room]: class and first row, in `order`, of each group of rows */
    double *diagonal;                    /* [lows]: as `low`: the part of the diagonal without high parts */
    uint64_t *signs;      /* [lows]: as `low`: bit j: the parity with the low part of the diagonal's character j */
    uint32_t *near_start; /* [lows + 1]: as `low` */
    whorli_split_near *near_flips; /* [near_room] */
    uint32_t *directory;           /* [list_room * (classes + 1)]: where each class starts in `lists` */
    whorli_split_pairs *lists;     /* [list_room * pairs_room] */
    whorli_split_pair *pairs;      /* [list_room * pair_room] */
} whorli_split;

/* See >>runs. */
typedef struct whorli_runs {
    int32_t used;
    int32_t bits, run_bits, row_bits; /* of reals: a vector, a run, a row of one high part */
    struct whorli_run_flip *flips;    /* as the action's */
    double *lane_values;              /* [values][8] */
    uint8_t *zeros;                   /* [values]: 1 where all eight vanish */
    double *diagonal;                 /* [row]: the part of the diagonal without high parts */
    uint64_t *signs;                  /* [row / 8]: bit j: the parity with the diagonal's character j */
} whorli_runs;

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
    double *values;            /* factors of simple flips */
    uint64_t value_room;
    whorli_split split;
    whorli_runs runs;
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

/*
 * Sites in the low part: rows of the kernels are as long as the low parts are many. Eight rows are worked on at a time,
 * so small systems keep three sites for the high part.
 */
static int32_t whorli_action_cut(int32_t sites)
{
    return sites <= 3 ? sites : sites <= 15 ? sites - 3 : sites <= 24 ? 12 : sites / 2;
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

/*
 * Values of simple flips: 2^rank each, rank at most the number of strings. With several sums strings of one flip may
 * meet: then 2^r / r a string.
 */
static uint64_t whorli_action_value_room(const whorl_action_desc *desc, uint64_t entries)
{
    uint64_t room = 0, i = 0;
    if (desc->sum_count != 1)
        return whorl_size_multiply(entries, (UINT64_C(1) << WHORLI_SIMPLE_RANK) / WHORLI_SIMPLE_RANK + 1);
    while (i < desc->sums->count) {
        uint64_t x = desc->sums->terms[i].x, strings = 0;
        for (; i < desc->sums->count && desc->sums->terms[i].x == x; i++)
            strings++;
        room += UINT64_C(1) << (strings < WHORLI_SIMPLE_RANK ? strings : WHORLI_SIMPLE_RANK);
    }
    return room;
}

/* 1 if an earlier sum of the list has this flip. */
static int32_t whorli_action_seen(const whorl_action_desc *desc, uint64_t k, uint64_t x)
{
    uint64_t j;
    for (j = 0; j < k; j++) {
        uint64_t low = 0, high = desc->sums[j].count;
        while (low < high) {
            uint64_t middle = low + (high - low) / 2;
            if (desc->sums[j].terms[middle].x < x)
                low = middle + 1;
            else
                high = middle;
        }
        if (low < desc->sums[j].count && desc->sums[j].terms[low].x == x)
            return 1;
    }
    return 0;
}

static void whorli_split_plan(const whorl_action_desc *desc, whorl_action *plan);
static void whorli_split_carve(whorl_layout *layout, whorl_action *plan);
static void whorli_split_fill_space(whorl_action *action);
static void whorli_split_fill_terms(whorl_action *action);
static void whorli_runs_plan(whorl_action *plan);
static void whorli_runs_carve(whorl_layout *layout, whorl_action *plan);
static void whorli_runs_fill_terms(whorl_action *action);

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
    plan->value_room = whorli_action_value_room(desc, plan->entry_count) * (uint64_t)plan->width;
    whorli_split_plan(desc, plan);
    whorli_runs_plan(plan);
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
    plan->values = (double *)whorl_layout_carve(layout, plan->value_room, sizeof *plan->values);
    whorli_split_carve(layout, plan);
    whorli_runs_carve(layout, plan);
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

/* Parities of t with the basis of a simple flip: the place in its table. */
static uint64_t whorli_action_pattern(const whorli_action_flip *flip, uint64_t t)
{
    uint64_t pattern = 0;
    int32_t k;
    for (k = 0; k < flip->rank; k++)
        pattern |= (uint64_t)whorl_bits_parity(flip->basis[k] & t) << k;
    return pattern;
}

/*
 * The basis of the z masks of a flip, in echelon form: each mask has a leading bit that no other has, so that a t with
 * a wanted pattern is the sum of the leading bits wanted.
 */
static void whorli_action_fill_basis(const whorl_action *action, whorli_action_flip *flip, uint64_t end)
{
    uint64_t i;
    flip->rank = 0;
    for (i = flip->first_low; i < end; i++) {
        uint64_t z = action->terms[i].low | action->terms[i].high, lead;
        int32_t k;
        for (k = 0; k < flip->rank; k++)
            if ((z >> whorl_bits_highest(flip->basis[k]) & 1) != 0)
                z ^= flip->basis[k];
        if (z == 0)
            continue;
        if (flip->rank == WHORLI_SIMPLE_RANK) {
            flip->rank = -1;
            return;
        }
        lead = UINT64_C(1) << whorl_bits_highest(z);
        for (k = 0; k < flip->rank; k++)
            if ((flip->basis[k] & lead) != 0)
                flip->basis[k] ^= z;
        flip->basis[flip->rank++] = z;
    }
}

static void whorli_action_fill_values(whorl_action *action)
{
    uint64_t g, p, used = 0;
    int32_t k;
    for (g = 0; g < action->flip_count; g++) {
        whorli_action_flip *flip = action->flips + g;
        uint64_t end = g + 1 < action->flip_count ? flip[1].first_low : action->term_count;
        whorli_action_fill_basis(action, flip, end);
        flip->first_value = used;
        for (p = 0; flip->rank >= 0 && p < UINT64_C(1) << flip->rank; p++) {
            uint64_t t = 0;
            for (k = 0; k < flip->rank; k++)
                if ((p >> k & 1) != 0)
                    t |= UINT64_C(1) << whorl_bits_highest(flip->basis[k]);
            action->values[used++] = whorli_action_flip_factor(action, flip, t);
        }
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
    whorli_action_fill_values(action);
    if (action->split.used)
        whorli_split_fill_terms(action);
    if (action->runs.used && action->split.fits)
        whorli_runs_fill_terms(action);
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
    if (made->split.used)
        whorli_split_fill_space(made);
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
        double f = flip->rank < 0 ? whorli_action_flip_factor(action, flip, t)
                                  : action->values[flip->first_value + whorli_action_pattern(flip, t)];
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

/* ---- >>split -----------------------------------------------------------------------------------------------------
 *
 * All states, parities and fixed numbers of up to 32 sites, source equal to target. The low part of a state has a
 * class: nothing, a parity, the numbers of down spins in its share of each mask. A row is a high part with all low
 * parts of the one class that it needs: contiguous in the vector. Rows of one class have equal shape, so eight of them
 * (four complex) are packed as lanes, and everything that keeps the high part, the near flips, goes through one list of
 * neighbours for the class, one vector operation an entry. Flips that change the high part, the far ones, follow row by
 * row: a whole row where they keep the low part and the factor, otherwise lists of pairs shared by all rows of the
 * class.
 */

#define WHORLI_LANES 8
#define WHORLI_SPLIT_SITES 32
#define WHORLI_SPLIT_CLASSES 4096
#define WHORLI_SPLIT_CHARACTERS 64
/* Tables may take so much more than a vector does. */
#define WHORLI_SPLIT_ROOM (UINT64_C(1) << 26)

static uint64_t whorli_split_classes(const whorl_action *plan)
{
    const whorl_space *space = plan->source;
    uint64_t low = whorl_bits_low(plan->cut), classes = 1;
    int32_t k;
    if (whorl_space_kind_of(space) == WHORL_SPACE_ALL)
        return 1;
    if (whorl_space_kind_of(space) == WHORL_SPACE_PARITY)
        return 2;
    if (whorl_space_kind_of(space) != WHORL_SPACE_DOWN)
        return 0;
    for (k = 0; k < whorl_space_number_count(space) && classes <= WHORLI_SPLIT_CLASSES; k++)
        classes *= (uint64_t)whorl_bits_count(whorl_space_number_at(space, k).mask & low) + 1;
    return classes <= WHORLI_SPLIT_CLASSES ? classes : 0;
}

static uint64_t whorli_split_class(const whorl_action *action, uint64_t low)
{
    const whorl_space *space = action->source;
    uint64_t inside = whorl_bits_low(action->cut), key = 0;
    int32_t k;
    if (whorl_space_kind_of(space) == WHORL_SPACE_PARITY)
        return (uint64_t)whorl_bits_parity(low & whorl_space_parity_mask(space));
    for (k = whorl_space_number_count(space); k-- > 0;) {
        uint64_t mask = whorl_space_number_at(space, k).mask & inside;
        key = key * ((uint64_t)whorl_bits_count(mask) + 1) + (uint64_t)whorl_bits_count(low & mask);
    }
    return key;
}

/* The class that a high part (in its place) needs; UINT32_MAX: none. */
static uint32_t whorli_split_need(const whorl_action *action, uint64_t high)
{
    const whorl_space *space = action->source;
    uint64_t inside = whorl_bits_low(action->cut), key = 0;
    int32_t k;
    if (whorl_space_kind_of(space) == WHORL_SPACE_PARITY)
        return (uint32_t)(whorl_space_parity(space) ^ whorl_bits_parity(high & whorl_space_parity_mask(space)));
    for (k = whorl_space_number_count(space); k-- > 0;) {
        whorl_down_number number = whorl_space_number_at(space, k);
        int32_t room = whorl_bits_count(number.mask & inside),
                rest = number.down - whorl_bits_count(number.mask & high);
        if (rest < 0 || rest > room)
            return UINT32_MAX;
        key = key * ((uint64_t)room + 1) + (uint64_t)rest;
    }
    return (uint32_t)key;
}

/* Double elements of all states: the kernel of runs needs no lists. */
static int32_t whorli_runs_suit(const whorl_action *plan)
{
    return whorl_space_kind_of(plan->source) == WHORL_SPACE_ALL && !whorl_element_is_float(plan->element) &&
           plan->cut + plan->width - 1 >= 3; /* rows of whole vectors */
}

/* Counts what the tables need, flip by flip of the structure, and decides whether the space is split. */
static void whorli_split_plan(const whorl_action_desc *desc, whorl_action *plan)
{
    whorli_split *split = &plan->split;
    uint64_t k, i, low = whorl_bits_low(plan->cut), width = (uint64_t)plan->width, bytes;
    split->classes = whorli_split_classes(plan);
    if (!plan->same_space || plan->sites > WHORLI_SPLIT_SITES || split->classes == 0)
        return;
    split->low_sites = plan->cut;
    split->high_sites = plan->sites - plan->cut;
    split->lows = UINT64_C(1) << split->low_sites;
    split->highs = UINT64_C(1) << split->high_sites;
    split->group_rows = WHORLI_LANES / width;
    split->group_room = split->highs / split->group_rows + split->classes + 1;
    split->pairs_room = ((uint64_t)split->low_sites + 1) * split->classes << WHORLI_SIMPLE_RANK;
    split->pairs_room = split->pairs_room < split->lows ? split->pairs_room : split->lows;
    split->pair_room = split->lows + split->lows / 4; /* runs of pairs are at most an eighth, two entries each */
    for (k = 0; k < desc->sum_count; k++)
        for (i = 0; i < desc->sums[k].count;) {
            const whorl_term *terms = desc->sums[k].terms;
            uint64_t x = terms[i].x, z = 0;
            for (; i < desc->sums[k].count && terms[i].x == x; i++)
                z |= terms[i].z;
            if (desc->sum_count <= 64 && whorli_action_seen(desc, k, x) && ((z & low) == 0 || (x & low) != 0))
                continue;
            if ((x & ~low) == 0)
                split->near_room += split->lows * (x == 0 ? width - 1 : width);
            else if (((x | z) & low) != 0)
                split->list_room += width;
        }
    if (whorli_runs_suit(plan))
        split->near_room = split->list_room = 0;
    bytes =
        4 * split->near_room + split->list_room * (4 * split->pair_room + 20 * split->pairs_room + 4 * split->classes);
    split->used =
        bytes <= WHORLI_SPLIT_ROOM + 2 * whorl_space_count(plan->source) * whorl_element_bytes(plan->element) &&
        split->near_room < UINT32_MAX && split->list_room * split->pair_room < UINT32_MAX;
}

static void whorli_split_carve(whorl_layout *layout, whorl_action *plan)
{
    whorli_split *split = &plan->split;
    uint64_t lows = split->lows, highs = split->highs, classes = split->classes;
    if (!split->used)
        return;
    split->start = (uint64_t *)whorl_layout_carve(layout, highs, sizeof *split->start);
    split->need = (uint32_t *)whorl_layout_carve(layout, highs, sizeof *split->need);
    split->order = (uint32_t *)whorl_layout_carve(layout, highs, sizeof *split->order);
    split->class_row = (uint32_t *)whorl_layout_carve(layout, classes + 1, sizeof *split->class_row);
    split->low = (uint32_t *)whorl_layout_carve(layout, lows, sizeof *split->low);
    split->class_low = (uint32_t *)whorl_layout_carve(layout, classes + 1, sizeof *split->class_low);
    split->class_of = (uint32_t *)whorl_layout_carve(layout, lows, sizeof *split->class_of);
    split->rank = (uint32_t *)whorl_layout_carve(layout, lows, sizeof *split->rank);
    split->group_class = (uint32_t *)whorl_layout_carve(layout, split->group_room, sizeof *split->group_class);
    split->group_first = (uint32_t *)whorl_layout_carve(layout, split->group_room, sizeof *split->group_first);
    split->diagonal = (double *)whorl_layout_carve(layout, lows, sizeof *split->diagonal);
    split->signs = (uint64_t *)whorl_layout_carve(layout, lows, sizeof *split->signs);
    split->near_start = (uint32_t *)whorl_layout_carve(layout, lows + 1, sizeof *split->near_start);
    split->near_flips = (whorli_split_near *)whorl_layout_carve(layout, split->near_room, sizeof *split->near_flips);
    split->directory =
        (uint32_t *)whorl_layout_carve(layout, split->list_room * (classes + 1), sizeof *split->directory);
    split->lists =
        (whorli_split_pairs *)whorl_layout_carve(layout, split->list_room * split->pairs_room, sizeof *split->lists);
    split->pairs =
        (whorli_split_pair *)whorl_layout_carve(layout, split->list_room * split->pair_room, sizeof *split->pairs);
}

/* Counting sort: `of` gives the class of each of n things; first[c] becomes where class c starts in `sorted`. */
static void whorli_split_sort(const uint32_t *of, uint64_t n, uint64_t classes, uint32_t *first, uint32_t *sorted)
{
    uint64_t i, c;
    memset(first, 0, (size_t)(classes + 1) * sizeof *first);
    for (i = 0; i < n; i++)
        if (of[i] != UINT32_MAX)
            first[of[i] + 1]++;
    for (c = 0; c < classes; c++)
        first[c + 1] += first[c];
    for (i = 0; i < n; i++)
        if (of[i] != UINT32_MAX)
            sorted[first[of[i]]++] = (uint32_t)i;
    for (c = classes; c > 0; c--)
        first[c] = first[c - 1];
    first[0] = 0;
}

/* What depends on the space alone. */
static void whorli_split_fill_space(whorl_action *action)
{
    whorli_split *split = &action->split;
    uint64_t i, c, at = 0, index = 0;
    for (i = 0; i < split->lows; i++)
        split->class_of[i] = (uint32_t)whorli_split_class(action, i);
    for (i = 0; i < split->highs; i++)
        split->need[i] = whorli_split_need(action, i << split->low_sites);
    whorli_split_sort(split->class_of, split->lows, split->classes, split->class_low, split->low);
    whorli_split_sort(split->need, split->highs, split->classes, split->class_row, split->order);
    split->longest = 0;
    for (c = 0; c < split->classes; c++) {
        uint64_t length = split->class_low[c + 1] - split->class_low[c];
        for (i = 0; i < length; i++)
            split->rank[split->low[split->class_low[c] + i]] = (uint32_t)i;
        if (split->class_row[c + 1] > split->class_row[c] && length > split->longest)
            split->longest = length;
        for (i = split->class_row[c]; i < split->class_row[c + 1]; i += split->group_rows) {
            split->group_class[at] = (uint32_t)c;
            split->group_first[at++] = (uint32_t)i;
        }
    }
    split->group_count = at;
    for (i = 0; i < split->highs; i++) {
        split->start[i] = index;
        if (split->need[i] != UINT32_MAX)
            index += split->class_low[split->need[i] + 1] - split->class_low[split->need[i]];
    }
}

static int32_t whorli_split_basis_in(const whorli_action_flip *flip, uint64_t mask)
{
    int32_t k;
    for (k = 0; k < flip->rank; k++)
        if ((flip->basis[k] & mask) != 0)
            return 1;
    return 0;
}

/* The even diagonal, which may be of any rank; NULL where there is none. */
static const whorli_action_flip *whorli_action_diagonal(const whorl_action *action)
{
    return action->flip_count > 0 && action->flips[0].x == 0 && action->flips[0].odd == 0 ? action->flips : NULL;
}

static void whorli_split_fill_diagonal(whorl_action *action)
{
    whorli_split *split = &action->split;
    const whorli_action_flip *flip = whorli_action_diagonal(action);
    uint64_t i, j;
    if (flip == NULL)
        return;
    memset(split->diagonal, 0, (size_t)split->lows * sizeof *split->diagonal);
    for (j = flip->first_low; j < flip->first_low + flip->low_count; j++) {
        double d = action->terms[j].d;
        uint64_t z = action->terms[j].low;
        for (i = 0; i < split->lows; i++)
            split->diagonal[i] += whorl_bits_parity(z & split->low[i]) ? -d : d;
    }
    for (i = 0; i < split->lows; i++) {
        uint64_t signs = 0;
        for (j = 0; j < flip->character_count; j++) {
            uint64_t low = action->characters[flip->first_character + j].low;
            signs |= (uint64_t)whorl_bits_parity(low & split->low[i]) << j;
        }
        split->signs[i] = signs;
    }
}

/* Neighbours of each low part within its class, in order of the flips. */
static void whorli_split_fill_near(whorl_action *action)
{
    whorli_split *split = &action->split;
    uint64_t i, g, used = 0, high = ~whorl_bits_low(action->cut);
    uint64_t first = whorli_action_diagonal(action) != NULL ? 1 : 0;
    for (i = 0; i < split->lows; i++) {
        uint64_t low = split->low[i], c = split->class_of[low];
        uint64_t length = split->class_low[c + 1] - split->class_low[c];
        split->near_start[i] = (uint32_t)used;
        for (g = first; g < split->first_far; g++) {
            const whorli_action_flip *flip = action->flips + g;
            uint64_t other = low ^ flip->x, value = flip->first_value + whorli_action_pattern(flip, low);
            if (split->class_of[other] != c || (action->values[value] == 0.0 && !whorli_split_basis_in(flip, high)))
                continue;
            split->near_flips[used].to = (uint16_t)(split->rank[other] + (flip->odd ? length : 0));
            split->near_flips[used++].value = (uint16_t)value;
        }
    }
    split->near_start[i] = (uint32_t)used;
}

/* Where the pairs of a list are consecutive in long runs, writes the runs to `free` on; returns the entries written. */
static uint32_t whorli_split_find_runs(whorli_split_pairs *list, whorli_split_pair *pairs, uint32_t free_at)
{
    const whorli_split_pair *at = pairs + list->first;
    whorli_split_pair *to = pairs + free_at;
    uint32_t i, runs = 0;
    for (i = 0; i < list->count; i++)
        runs += i == 0 || at[i].row != at[i - 1].row + 1 || at[i].from != at[i - 1].from + 1;
    list->runs = 8 * runs <= list->count ? runs : 0;
    if (list->runs == 0)
        return 0;
    for (i = 0; i < list->count; i++) {
        if (i == 0 || at[i].row != at[i - 1].row + 1 || at[i].from != at[i - 1].from + 1) {
            *to++ = at[i];
            to->row = to->from = 0;
            to++;
        } else {
            to[-1].row++;
        }
    }
    list->first = free_at;
    return 2 * runs;
}

/*
 * The pairs of a far flip: for each class, lists of equal class on the other side and equal pattern of the low part, in
 * order of the low parts.
 */
static void whorli_split_fill_list(whorl_action *action, const whorli_action_flip *flip)
{
    whorli_split *split = &action->split;
    uint64_t change = flip->x & whorl_bits_low(action->cut), c, i, j;
    uint32_t *directory = split->directory + flip->list * (split->classes + 1);
    whorli_split_pairs *lists = split->lists + flip->list * split->pairs_room;
    whorli_split_pair *pairs = split->pairs + flip->list * split->pair_room;
    uint32_t list_count = 0, at = 0;
    for (c = 0; c < split->classes; c++) {
        uint64_t begin = split->class_low[c], end = split->class_low[c + 1];
        directory[c] = list_count;
        for (i = begin; i < end; i++) { /* which lists there are, and how long */
            uint64_t low = split->low[i];
            uint32_t from = split->class_of[low ^ change], pattern = (uint32_t)whorli_action_pattern(flip, low);
            for (j = directory[c]; j < list_count; j++)
                if (lists[j].from_class == from && lists[j].pattern == pattern)
                    break;
            if (j == list_count) {
                lists[j].from_class = from;
                lists[j].pattern = pattern;
                lists[j].count = 0;
                list_count++;
            }
            lists[j].count++;
        }
        for (j = directory[c]; j < list_count; j++) {
            lists[j].first = at;
            at += lists[j].count;
            lists[j].count = 0;
        }
        for (i = begin; i < end; i++) {
            uint64_t low = split->low[i];
            uint32_t from = split->class_of[low ^ change], pattern = (uint32_t)whorli_action_pattern(flip, low);
            whorli_split_pair *pair;
            for (j = directory[c]; lists[j].from_class != from || lists[j].pattern != pattern; j++)
                continue;
            pair = pairs + lists[j].first + lists[j].count++;
            pair->row = (uint16_t)(i - begin);
            pair->from = (uint16_t)split->rank[low ^ change];
        }
    }
    directory[c] = list_count;
    for (j = 0; j < list_count; j++)
        at += whorli_split_find_runs(lists + j, pairs, at);
}

/* What depends on the weighted terms. */
static void whorli_split_fill_terms(whorl_action *action)
{
    whorli_split *split = &action->split;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t g, low = whorl_bits_low(action->cut);
    split->fits = diagonal == NULL || diagonal->character_count <= WHORLI_SPLIT_CHARACTERS;
    split->fits = split->fits && (action->runs.used || split->longest * (uint64_t)action->width <= 65536);
    split->first_far = action->flip_count;
    split->list_count = split->near_values = 0;
    split->has_odd = 0;
    for (g = diagonal != NULL ? 1 : 0; g < action->flip_count; g++) {
        whorli_action_flip *flip = action->flips + g;
        flip->list = UINT32_MAX;
        if (flip->rank < 0 && !action->runs.used) {
            split->fits = 0;
            return;
        }
        if ((flip->x & ~low) == 0) {
            split->near_values = flip->first_value + (flip->rank < 0 ? 0 : UINT64_C(1) << flip->rank);
            split->has_odd |= flip->odd != 0;
            continue;
        }
        if (split->first_far > g)
            split->first_far = g;
        if (!action->runs.used && ((flip->x & low) != 0 || whorli_split_basis_in(flip, low))) {
            if (split->list_count == split->list_room) {
                split->fits = 0;
                return;
            }
            flip->list = (uint32_t)split->list_count++;
        }
    }
    if (split->near_values > 65536 && !action->runs.used)
        split->fits = 0;
    if (!split->fits)
        return;
    whorli_split_fill_diagonal(action);
    if (action->runs.used)
        return;
    whorli_split_fill_near(action);
    for (g = split->first_far; g < action->flip_count; g++)
        if (action->flips[g].list != UINT32_MAX)
            whorli_split_fill_list(action, action->flips + g);
}

/* ---- >>split kernels --------------------------------------------------------------------------------------------- */

/* Eight rows of a class and what acts on them; x has the lanes interleaved: element i of lane l at 8 i + l. */
typedef struct whorli_split_rows {
    uint64_t length;                  /* of a row, elements */
    uint64_t width;                   /* lanes a row */
    uint64_t count;                   /* rows in use; the other lanes repeat the first */
    const double *from[WHORLI_LANES]; /* the rows of x, where they are doubles */
    double *to[WHORLI_LANES];         /* and of y */
    double *x;                        /* packed; for odd flips a second copy follows with re and im exchanged */
    const double *factors;            /* [values][8] */
    const uint32_t *near_start;       /* [length + 1] */
    const whorli_split_near *near_flips;
    const double *diagonal;   /* [length], NULL: none */
    const uint64_t *signs;    /* [length] */
    const double *characters; /* [count][sign][8] */
    uint64_t character_count;
} whorli_split_rows;

/* to[c][r] = from[r][c], eight by eight. */
WHORLI_BODY void whorli_transpose_plain(const double *const *from, double *const *to)
{
    uint64_t r, c;
    for (r = 0; r < WHORLI_LANES; r++)
        for (c = 0; c < WHORLI_LANES; c++)
            to[c][r] = from[r][c];
}

#if WHORLI_TARGETS && defined(__has_builtin)
#if __has_builtin(__builtin_shufflevector)
#define WHORLI_SHUFFLES 1
#endif
#endif
#ifndef WHORLI_SHUFFLES
#define WHORLI_SHUFFLES 0
#endif

#if WHORLI_SHUFFLES
typedef double whorli_double4 __attribute__((vector_size(32)));
typedef double whorli_double8 __attribute__((vector_size(64)));

WHORLI_TARGET_AVX512 static inline __attribute__((always_inline)) void
whorli_transpose_avx512(const double *const *from, double *const *to)
{
    whorli_double8 a[8], b[8];
    int32_t i;
    for (i = 0; i < 8; i++)
        memcpy(&a[i], from[i], sizeof a[i]);
    for (i = 0; i < 8; i += 2) {
        b[i] = __builtin_shufflevector(a[i], a[i + 1], 0, 8, 2, 10, 4, 12, 6, 14);
        b[i + 1] = __builtin_shufflevector(a[i], a[i + 1], 1, 9, 3, 11, 5, 13, 7, 15);
    }
    for (i = 0; i < 8; i++) {
        int32_t j = (i & 4) + (i & 1);
        a[i] = (i & 2) == 0 ? __builtin_shufflevector(b[j], b[j + 2], 0, 1, 8, 9, 4, 5, 12, 13)
                            : __builtin_shufflevector(b[j], b[j + 2], 2, 3, 10, 11, 6, 7, 14, 15);
    }
    for (i = 0; i < 4; i++) {
        b[i] = __builtin_shufflevector(a[i], a[i + 4], 0, 1, 2, 3, 8, 9, 10, 11);
        b[i + 4] = __builtin_shufflevector(a[i], a[i + 4], 4, 5, 6, 7, 12, 13, 14, 15);
    }
    for (i = 0; i < 8; i++)
        memcpy(to[i], &b[i], sizeof b[i]);
}

WHORLI_TARGET_AVX2 static inline __attribute__((always_inline)) void whorli_transpose_avx2(const double *const *from,
                                                                                           double *const *to)
{
    int32_t r, c, i;
    for (r = 0; r < 8; r += 4)
        for (c = 0; c < 8; c += 4) {
            whorli_double4 a[4], b[4];
            for (i = 0; i < 4; i++)
                memcpy(&a[i], from[r + i] + c, sizeof a[i]);
            for (i = 0; i < 4; i += 2) {
                b[i] = __builtin_shufflevector(a[i], a[i + 1], 0, 4, 2, 6);
                b[i + 1] = __builtin_shufflevector(a[i], a[i + 1], 1, 5, 3, 7);
            }
            for (i = 0; i < 2; i++) {
                a[i] = __builtin_shufflevector(b[i], b[i + 2], 0, 1, 4, 5);
                a[i + 2] = __builtin_shufflevector(b[i], b[i + 2], 2, 3, 6, 7);
            }
            for (i = 0; i < 4; i++)
                memcpy(to[c + i] + r, &a[i], sizeof a[i]);
        }
}
#endif

typedef void (*whorli_transpose_function)(const double *const *from, double *const *to);

/* Rows to lanes, eight elements at a time. */
WHORLI_BODY void whorli_split_pack_rows(const whorli_split_rows *rows, whorli_transpose_function transpose)
{
    uint64_t i = 0, s, k;
    for (; rows->width == 1 && i + WHORLI_LANES <= rows->length; i += WHORLI_LANES) {
        const double *from[WHORLI_LANES];
        double *to[WHORLI_LANES];
        for (s = 0; s < WHORLI_LANES; s++) {
            from[s] = rows->from[s] + i;
            to[s] = rows->x + (i + s) * WHORLI_LANES;
        }
        transpose(from, to);
    }
    for (; i < rows->length; i++)
        for (s = 0; s < WHORLI_LANES / rows->width; s++)
            for (k = 0; k < rows->width; k++)
                rows->x[i * WHORLI_LANES + s * rows->width + k] = rows->from[s][i * rows->width + k];
}

WHORLI_BODY void whorli_split_near_element(const whorli_split_rows *rows, uint64_t i, double *WHORLI_RESTRICT y)
{
    double sum[WHORLI_LANES] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0};
    uint64_t j, l;
    if (rows->diagonal != NULL) {
        double f[WHORLI_LANES];
        uint64_t signs = rows->signs[i];
        for (l = 0; l < WHORLI_LANES; l++)
            f[l] = rows->diagonal[i];
        for (j = 0; j < rows->character_count; j++, signs >>= 1) {
            const double *e = rows->characters + (2 * j + (signs & 1)) * WHORLI_LANES;
            for (l = 0; l < WHORLI_LANES; l++)
                f[l] += e[l];
        }
        for (l = 0; l < WHORLI_LANES; l++)
            sum[l] += f[l] * rows->x[i * WHORLI_LANES + l];
    }
    for (j = rows->near_start[i]; j < rows->near_start[i + 1]; j++) {
        const double *x = rows->x + (uint64_t)rows->near_flips[j].to * WHORLI_LANES;
        const double *f = rows->factors + (uint64_t)rows->near_flips[j].value * WHORLI_LANES;
        for (l = 0; l < WHORLI_LANES; l++)
            sum[l] += f[l] * x[l];
    }
    for (l = 0; l < WHORLI_LANES; l++)
        y[l] = sum[l];
}

/* Eight elements of eight lanes, then from lanes to rows. */
WHORLI_BODY void whorli_split_near_rows(const whorli_split_rows *rows, whorli_transpose_function transpose)
{
    double block[WHORLI_LANES * WHORLI_LANES];
    uint64_t i, s, k, e;
    for (i = 0; i < rows->length; i += WHORLI_LANES) {
        uint64_t count = rows->length - i < WHORLI_LANES ? rows->length - i : WHORLI_LANES;
        for (e = 0; e < count; e++)
            whorli_split_near_element(rows, i + e, block + e * WHORLI_LANES);
        if (rows->width == 1 && rows->count == WHORLI_LANES && count == WHORLI_LANES) {
            const double *from[WHORLI_LANES];
            double *to[WHORLI_LANES];
            for (s = 0; s < WHORLI_LANES; s++) {
                from[s] = block + s * WHORLI_LANES;
                to[s] = rows->to[s] + i;
            }
            transpose(from, to);
        } else {
            for (e = 0; e < count; e++)
                for (s = 0; s < rows->count; s++)
                    for (k = 0; k < rows->width; k++)
                        rows->to[s][(i + e) * rows->width + k] = block[e * WHORLI_LANES + s * rows->width + k];
        }
    }
}

/* y += f[0] x[0] + ... + f[count - 1] x[count - 1], one after the other; count 1 .. 4. */
WHORLI_BODY void whorli_split_far_rows(double *WHORLI_RESTRICT y, const double *const *x, const double *f,
                                       int32_t count, uint64_t reals)
{
    const double *a = x[0], *b = x[count > 1 ? 1 : 0], *c = x[count > 2 ? 2 : 0], *d = x[count > 3 ? 3 : 0];
    double p = f[0], q = f[count > 1 ? 1 : 0], r = f[count > 2 ? 2 : 0], s = f[count > 3 ? 3 : 0];
    uint64_t i;
    switch (count) {
    case 1:
        for (i = 0; i < reals; i++)
            y[i] += p * a[i];
        break;
    case 2:
        for (i = 0; i < reals; i++)
            y[i] = (y[i] + p * a[i]) + q * b[i];
        break;
    case 3:
        for (i = 0; i < reals; i++)
            y[i] = ((y[i] + p * a[i]) + q * b[i]) + r * c[i];
        break;
    default:
        for (i = 0; i < reals; i++)
            y[i] = (((y[i] + p * a[i]) + q * b[i]) + r * c[i]) + s * d[i];
    }
}

typedef void (*whorli_split_rows_function)(const whorli_split_rows *rows);
typedef void (*whorli_split_far_function)(double *y, const double *const *x, const double *f, int32_t count,
                                          uint64_t reals);
static void whorli_split_pack_plain(const whorli_split_rows *rows)
{
    whorli_split_pack_rows(rows, whorli_transpose_plain);
}
static void whorli_split_near_plain(const whorli_split_rows *rows)
{
    whorli_split_near_rows(rows, whorli_transpose_plain);
}
static void whorli_split_far_plain(double *y, const double *const *x, const double *f, int32_t count, uint64_t reals)
{
    whorli_split_far_rows(y, x, f, count, reals);
}
#if WHORLI_TARGETS
#if !WHORLI_SHUFFLES
#define whorli_transpose_avx2 whorli_transpose_plain
#define whorli_transpose_avx512 whorli_transpose_plain
#endif
WHORLI_TARGET_AVX2 static void whorli_split_pack_avx2(const whorli_split_rows *rows)
{
    whorli_split_pack_rows(rows, whorli_transpose_avx2);
}
WHORLI_TARGET_AVX2 static void whorli_split_near_avx2(const whorli_split_rows *rows)
{
    whorli_split_near_rows(rows, whorli_transpose_avx2);
}
WHORLI_TARGET_AVX2 static void whorli_split_far_avx2(double *y, const double *const *x, const double *f, int32_t count,
                                                     uint64_t reals)
{
    whorli_split_far_rows(y, x, f, count, reals);
}
WHORLI_TARGET_AVX512 static void whorli_split_pack_avx512(const whorli_split_rows *rows)
{
    whorli_split_pack_rows(rows, whorli_transpose_avx512);
}
WHORLI_TARGET_AVX512 static void whorli_split_near_avx512(const whorli_split_rows *rows)
{
    whorli_split_near_rows(rows, whorli_transpose_avx512);
}
WHORLI_TARGET_AVX512 static void whorli_split_far_avx512(double *y, const double *const *x, const double *f,
                                                         int32_t count, uint64_t reals)
{
    whorli_split_far_rows(y, x, f, count, reals);
}
#endif

/* The odd flip of a whole row: re from im, im from re with the sign turned. */
static void whorli_split_far_odd(double *WHORLI_RESTRICT y, const double *x, double f, uint64_t reals)
{
    uint64_t i;
    for (i = 0; i < reals; i += 2) {
        y[i] += f * x[i + 1];
        y[i + 1] += -f * x[i];
    }
}

static void whorli_split_far_pairs(double *WHORLI_RESTRICT y, const double *x, double f, const whorli_split_pair *pairs,
                                   uint64_t count, int32_t width, uint64_t odd)
{
    uint64_t i;
    if (width == 1) {
        for (i = 0; i < count; i++)
            y[pairs[i].row] += f * x[pairs[i].from];
    } else if (odd == 0) {
        for (i = 0; i < count; i++) {
            double *to = y + 2 * (uint64_t)pairs[i].row;
            const double *from = x + 2 * (uint64_t)pairs[i].from;
            to[0] += f * from[0];
            to[1] += f * from[1];
        }
    } else {
        for (i = 0; i < count; i++) {
            double *to = y + 2 * (uint64_t)pairs[i].row;
            const double *from = x + 2 * (uint64_t)pairs[i].from;
            to[0] += f * from[1];
            to[1] += -f * from[0];
        }
    }
}

/* ---- >>split product --------------------------------------------------------------------------------------------- */

/* Of all workers; each has its share of each piece. */
typedef struct whorli_split_scratch {
    double *x, *factors, *characters, *rows, *sources;
    uint64_t x_share, factor_share, character_share, row_share, source_share;
} whorli_split_scratch;

typedef struct whorli_split_job {
    const whorli_action_job *job;
    whorli_split_scratch scratch;
    whorli_split_rows_function pack_rows, near_rows;
    whorli_split_far_function far_rows;
} whorli_split_job;

static void whorli_split_carve_scratch(whorl_layout *layout, const whorl_action *action, int32_t workers,
                                       whorli_split_scratch *scratch)
{
    const whorli_split *split = &action->split;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t all = (uint64_t)workers, packed = split->longest * WHORLI_LANES;
    int32_t converts = whorl_element_is_float(action->element);
    scratch->x_share = packed * (split->has_odd ? 2 : 1);
    scratch->factor_share = (split->near_values + 1) * WHORLI_LANES;
    scratch->character_share = (diagonal == NULL ? 0 : diagonal->character_count) * 2 * WHORLI_LANES;
    scratch->row_share = converts ? packed : 0;
    scratch->source_share = converts ? 4 * split->longest * (uint64_t)action->width : 0;
    scratch->x = (double *)whorl_layout_carve(layout, all * scratch->x_share, sizeof(double));
    scratch->factors = (double *)whorl_layout_carve(layout, all * scratch->factor_share, sizeof(double));
    scratch->characters = (double *)whorl_layout_carve(layout, all * scratch->character_share, sizeof(double));
    scratch->rows = (double *)whorl_layout_carve(layout, all * scratch->row_share, sizeof(double));
    scratch->sources = (double *)whorl_layout_carve(layout, all * scratch->source_share, sizeof(double));
}

/* One chunk: up to eight lanes. Slot s (a row of a column) is lane s, or lanes 2 s and 2 s + 1. */
typedef struct whorli_split_chunk {
    uint64_t count;  /* slots in use */
    uint64_t length; /* of a row, elements */
    uint64_t class_number;
    uint64_t high[WHORLI_LANES]; /* high part, in its place */
    uint64_t column[WHORLI_LANES];
} whorli_split_chunk;

/* The rows of x and y as doubles: where they are, or in scratch. */
static void whorli_split_place(const whorli_split_job *job, const whorli_split_chunk *chunk, int32_t worker,
                               whorli_split_rows *rows)
{
    const whorl_action *action = job->job->action;
    const whorli_split *split = &action->split;
    uint64_t width = (uint64_t)action->width, bytes = whorl_element_bytes(action->element), s;
    double *spare = job->scratch.rows + (uint64_t)worker * job->scratch.row_share;
    rows->length = chunk->length;
    rows->width = width;
    rows->count = chunk->count;
    for (s = 0; s < WHORLI_LANES / width; s++) {
        uint64_t used = s < chunk->count ? s : 0, start = split->start[chunk->high[used] >> split->low_sites];
        const char *x = job->job->x + (chunk->column[used] * job->job->columns_of_x + start) * bytes;
        char *y = job->job->y + (chunk->column[used] * job->job->rows + start) * bytes;
        if (whorl_element_is_float(action->element)) {
            rows->to[s] = spare + s * chunk->length * width;
            rows->from[s] = whorli_vector_load(action->element, x, chunk->length * width, rows->to[s]);
        } else {
            rows->from[s] = (const double *)(const void *)x;
            rows->to[s] = (double *)(void *)y;
        }
    }
}

/* Factors of the near flips and of the diagonal's characters for the high parts of the lanes. */
static void whorli_split_fill_factors(const whorli_split_job *job, const whorli_split_chunk *chunk, double *factors,
                                      double *characters)
{
    const whorl_action *action = job->job->action;
    const whorli_split *split = &action->split;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t g, p, l, j, width = (uint64_t)action->width;
    for (g = diagonal != NULL ? 1 : 0; g < split->first_far; g++) {
        const whorli_action_flip *flip = action->flips + g;
        for (l = 0; l < WHORLI_LANES; l++) {
            uint64_t s = l / width < chunk->count ? l / width : 0, turned = whorli_action_pattern(flip, chunk->high[s]);
            for (p = 0; p < UINT64_C(1) << flip->rank; p++) {
                double f = action->values[flip->first_value + (p ^ turned)];
                factors[(flip->first_value + p) * WHORLI_LANES + l] = flip->odd && (l & 1) != 0 ? -f : f;
            }
        }
    }
    for (j = 0; diagonal != NULL && j < diagonal->character_count; j++) {
        const whorli_action_character *character = action->characters + diagonal->first_character + j;
        for (l = 0; l < WHORLI_LANES; l++) {
            uint64_t s = l / width < chunk->count ? l / width : 0, i;
            double e = 0.0;
            for (i = character->first; i < character->first + character->count; i++)
                e += whorl_bits_parity(action->terms[i].high & chunk->high[s]) ? -action->terms[i].d
                                                                               : action->terms[i].d;
            characters[2 * j * WHORLI_LANES + l] = e;
            characters[(2 * j + 1) * WHORLI_LANES + l] = -e;
        }
    }
}

static void whorli_split_far_list(const whorli_split_job *job, double *y, const double *x, double f,
                                  const whorli_split_pairs *list, const whorli_split_pair *pairs, uint64_t odd)
{
    int32_t width = job->job->action->width;
    uint32_t i;
    if (list->runs == 0)
        whorli_split_far_pairs(y, x, f, pairs, list->count, width, odd);
    for (i = 0; i < list->runs; i++) {
        double *to = y + (uint64_t)width * pairs[2 * i].row;
        const double *from = x + (uint64_t)width * pairs[2 * i].from;
        uint64_t reals = (uint64_t)width * (UINT64_C(1) + pairs[2 * i + 1].row);
        if (odd)
            whorli_split_far_odd(to, from, f, reals);
        else
            job->far_rows(to, &from, &f, 1, reals);
    }
}

/* Far flips of one slot, onto its row of doubles. */
static void whorli_split_far(const whorli_split_job *job, const whorli_split_chunk *chunk, uint64_t s, double *y,
                             double *sources)
{
    const whorl_action *action = job->job->action;
    const whorli_split *split = &action->split;
    uint64_t width = (uint64_t)action->width, bytes = whorl_element_bytes(action->element), g;
    uint64_t outside = ~whorl_bits_low(action->cut);
    const double *x[4] = {NULL, NULL, NULL, NULL};
    double f[4] = {0.0, 0.0, 0.0, 0.0};
    int32_t waiting = 0;
    for (g = split->first_far; g < action->flip_count; g++) {
        const whorli_action_flip *flip = action->flips + g;
        uint64_t high = chunk->high[s] ^ (flip->x & outside), place = high >> split->low_sites, reals, at;
        uint32_t need = split->need[place];
        const double *values = action->values + flip->first_value;
        uint64_t turned = whorli_action_pattern(flip, chunk->high[s]);
        double *buffer = sources + (uint64_t)waiting * split->longest * width;
        if (need == UINT32_MAX || (flip->list == UINT32_MAX && (need != chunk->class_number || values[turned] == 0.0)))
            continue;
        reals = width * (split->class_low[need + 1] - split->class_low[need]);
        at = chunk->column[s] * job->job->columns_of_x + split->start[place];
        if (flip->list == UINT32_MAX && flip->odd == 0) { /* a whole row: wait for company */
            x[waiting] = whorli_vector_load(action->element, job->job->x + at * bytes, reals, buffer);
            f[waiting++] = values[turned];
            if (waiting == 4) {
                job->far_rows(y, x, f, 4, reals);
                waiting = 0;
            }
            continue;
        }
        if (waiting > 0)
            job->far_rows(y, x, f, waiting, width * chunk->length);
        waiting = 0;
        if (flip->list == UINT32_MAX) {
            whorli_split_far_odd(y, whorli_vector_load(action->element, job->job->x + at * bytes, reals, sources),
                                 values[turned], reals);
        } else {
            const uint32_t *directory = split->directory + flip->list * (split->classes + 1) + chunk->class_number;
            const whorli_split_pairs *list = split->lists + flip->list * split->pairs_room;
            const whorli_split_pairs *end = list + directory[1];
            const double *from = NULL;
            for (list += directory[0]; list < end; list++) {
                double factor = values[list->pattern ^ turned];
                if (list->from_class != need || factor == 0.0)
                    continue;
                if (from == NULL)
                    from = whorli_vector_load(action->element, job->job->x + at * bytes, reals, sources);
                whorli_split_far_list(job, y, from, factor, list,
                                      split->pairs + flip->list * split->pair_room + list->first, flip->odd);
            }
        }
    }
    if (waiting > 0)
        job->far_rows(y, x, f, waiting, width * chunk->length);
}

static void whorli_split_do_chunk(const whorli_split_job *job, const whorli_split_chunk *chunk, int32_t worker)
{
    const whorl_action *action = job->job->action;
    const whorli_split *split = &action->split;
    const whorli_split_scratch *scratch = &job->scratch;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t w = (uint64_t)worker, first = split->class_low[chunk->class_number], s, i;
    double *factors = scratch->factors + w * scratch->factor_share;
    double *characters = scratch->characters + w * scratch->character_share;
    whorli_split_rows rows;
    whorli_split_place(job, chunk, worker, &rows);
    rows.x = scratch->x + w * scratch->x_share;
    job->pack_rows(&rows);
    if (split->has_odd)
        for (i = 0; i < chunk->length * WHORLI_LANES; i++)
            rows.x[chunk->length * WHORLI_LANES + i] = rows.x[i ^ 1];
    whorli_split_fill_factors(job, chunk, factors, characters);
    rows.factors = factors;
    rows.near_start = split->near_start + first;
    rows.near_flips = split->near_flips;
    rows.diagonal = diagonal == NULL ? NULL : split->diagonal + first;
    rows.signs = split->signs + first;
    rows.characters = characters;
    rows.character_count = diagonal == NULL ? 0 : diagonal->character_count;
    job->near_rows(&rows);
    for (s = 0; s < chunk->count; s++) {
        uint64_t at = chunk->column[s] * job->job->rows + split->start[chunk->high[s] >> split->low_sites];
        whorli_split_far(job, chunk, s, rows.to[s], scratch->sources + w * scratch->source_share);
        if (whorl_element_is_float(action->element))
            whorli_vector_store(action->element, rows.to[s], rows.width * chunk->length,
                                job->job->y + at * whorl_element_bytes(action->element));
    }
}

static void whorli_split_body(void *argument, uint64_t block, int32_t worker)
{
    const whorli_split_job *job = (const whorli_split_job *)argument;
    const whorli_split *split = &job->job->action->split;
    uint64_t c = split->group_class[block], first = split->group_first[block], left = split->class_row[c + 1] - first;
    uint64_t rows = left < split->group_rows ? left : split->group_rows, columns = (uint64_t)job->job->count, q;
    whorli_split_chunk chunk;
    chunk.class_number = c;
    chunk.length = split->class_low[c + 1] - split->class_low[c];
    chunk.count = 0;
    for (q = 0; q < rows * columns; q++) { /* columns of a partly filled group share the lanes */
        chunk.high[chunk.count] = (uint64_t)split->order[first + q % rows] << split->low_sites;
        chunk.column[chunk.count++] = q / rows;
        if (chunk.count == split->group_rows || q + 1 == rows * columns) {
            whorli_split_do_chunk(job, &chunk, worker);
            chunk.count = 0;
        }
    }
}

static whorl_status whorli_split_apply(whorl_host *host, const whorli_action_job *given)
{
    const whorl_action *action = given->action;
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_status status;
    whorli_split_job job;
    int32_t workers = whorl_workers(host);
    uint64_t updates = action->split.longest * WHORLI_LANES * (action->flip_count + 1);
    if (given->rows == 0)
        return WHORL_OK;
    whorli_split_carve_scratch(&layout, action, workers, &job.scratch);
    status = whorl_layout_take(host, &layout, &block);
    if (status != WHORL_OK)
        return status;
    whorli_split_carve_scratch(&layout, action, workers, &job.scratch);
    job.job = given;
    job.pack_rows = whorli_split_pack_plain;
    job.near_rows = whorli_split_near_plain;
    job.far_rows = whorli_split_far_plain;
#if WHORLI_TARGETS
    if (whorli_target() == 2) {
        job.pack_rows = whorli_split_pack_avx512;
        job.near_rows = whorli_split_near_avx512;
        job.far_rows = whorli_split_far_avx512;
    } else if (whorli_target() == 1) {
        job.pack_rows = whorli_split_pack_avx2;
        job.near_rows = whorli_split_near_avx2;
        job.far_rows = whorli_split_far_avx2;
    }
#endif
    status = whorl_run(host, whorli_split_body, &job, action->split.group_count,
                       whorl_size_multiply(updates, (uint64_t)given->count));
    whorl_block_give(host, &block);
    return status;
}

/* ---- >>runs ------------------------------------------------------------------------------------------------------
 *
 * All states, double elements. A vector of N sites, N + 1 bits for complex elements (bit 0: re or im), is cut into runs
 * of 2^11 reals: 256 vectors of eight lanes. One run of y stays in the first-level cache while the flips are added to
 * it one after the other; each reads one run of x, with vectors and lanes permuted by the middle and lowest bits of its
 * mask. Where the factor does not depend on the lane only the vectors are visited on which it does not vanish: half of
 * them for an exchange.
 */

#define WHORLI_RUN_BITS 11
#define WHORLI_RUN_VECTORS 256

typedef struct whorli_run_flip {
    uint64_t high;          /* the run of x is that of y with these bits flipped */
    uint32_t middle, lanes; /* flips of the vector and of the lane */
    int32_t whole;          /* one factor for all of a run, in place: may wait for company */
    int32_t plain;          /* the factor does not depend on the lane, lanes stay */
    int32_t rank;
    uint64_t basis[WHORLI_SIMPLE_RANK];
    uint64_t first_value;
    uint8_t order[WHORLI_RUN_VECTORS];   /* vectors by pattern of the middle bits */
    uint8_t pattern[WHORLI_RUN_VECTORS]; /* that pattern */
} whorli_run_flip;

static void whorli_runs_plan(whorl_action *plan)
{
    int32_t bits = plan->sites + plan->width - 1;
    plan->runs.used = plan->split.used && whorli_runs_suit(plan);
    plan->runs.bits = bits;
    plan->runs.run_bits = bits < WHORLI_RUN_BITS ? bits : WHORLI_RUN_BITS;
    plan->runs.row_bits = plan->cut + plan->width - 1;
}

static void whorli_runs_carve(whorl_layout *layout, whorl_action *plan)
{
    whorli_runs *runs = &plan->runs;
    uint64_t row = UINT64_C(1) << runs->row_bits, flips = whorl_size_multiply(plan->entry_count, (uint64_t)plan->width);
    if (!runs->used)
        return;
    runs->flips = (whorli_run_flip *)whorl_layout_carve(layout, flips, sizeof *runs->flips);
    runs->lane_values =
        (double *)whorl_layout_carve(layout, whorl_size_multiply(plan->value_room, WHORLI_LANES), sizeof(double));
    runs->zeros = (uint8_t *)whorl_layout_carve(layout, plan->value_room, 1);
    runs->diagonal = (double *)whorl_layout_carve(layout, row < WHORLI_LANES ? WHORLI_LANES : row, sizeof(double));
    runs->signs = (uint64_t *)whorl_layout_carve(layout, row, sizeof(uint64_t));
}

static void whorli_runs_fill_flip(const whorl_action *action, const whorli_action_flip *flip, whorli_run_flip *to)
{
    const whorli_runs *runs = &action->runs;
    int32_t shift = action->width - 1, k;
    uint64_t x = flip->x << shift | flip->odd, run = whorl_bits_low(runs->run_bits), v, p, used = 0, l;
    uint64_t vectors = UINT64_C(1) << (runs->run_bits - 3), basis = 0;
    memset(to, 0, sizeof *to);
    to->high = x & ~run;
    to->middle = (uint32_t)((x & run) >> 3);
    to->lanes = (uint32_t)(x & 7);
    to->rank = flip->rank;
    to->first_value = flip->first_value;
    for (k = 0; k < flip->rank; k++) {
        to->basis[k] = flip->basis[k] << shift;
        basis |= to->basis[k];
    }
    to->plain = flip->rank >= 0 && to->lanes == 0 && (basis & 7) == 0;
    to->whole = to->plain && to->middle == 0 && (basis & run) == 0;
    for (v = 0; flip->rank < 0 && v < vectors; v++) /* factors of its own for each vector: whorli_runs_factors */
        to->order[v] = to->pattern[v] = (uint8_t)v;
    for (p = 0; flip->rank >= 0 && p < UINT64_C(1) << flip->rank; p++) {
        int32_t zero = 1;
        for (l = 0; l < WHORLI_LANES; l++) {
            double f = action->values[flip->first_value + (p ^ whorli_action_pattern(flip, l >> shift))];
            runs->lane_values[(flip->first_value + p) * WHORLI_LANES + l] = flip->odd && (l & 1) != 0 ? -f : f;
            zero = zero && f == 0.0;
        }
        runs->zeros[flip->first_value + p] = (uint8_t)zero;
        for (v = 0; v < vectors; v++)
            if (whorli_action_pattern(flip, (v << 3) >> shift) == p) {
                to->pattern[used] = (uint8_t)p;
                to->order[used++] = (uint8_t)v;
            }
    }
}

/* What depends on the weighted terms; after the split has found that they fit. */
static void whorli_runs_fill_terms(whorl_action *action)
{
    whorli_runs *runs = &action->runs;
    const whorli_split *split = &action->split;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t g, i, shift = (uint64_t)action->width - 1, row = UINT64_C(1) << runs->row_bits;
    for (g = diagonal == NULL ? 0 : 1; g < action->flip_count; g++)
        whorli_runs_fill_flip(action, action->flips + g, runs->flips + g);
    for (i = 0; diagonal != NULL && i < row; i++) {
        runs->diagonal[i] = split->diagonal[i >> shift];
        if ((i & 7) == 0)
            runs->signs[i >> 3] = split->signs[i >> shift];
    }
}

/*
 * The four loops, in plain C and with vector types of exactly the machine's width. `first` counts vectors of a row.
 *     diagonal: y = 0 + f x for `count` vectors
 *     lanes:    y_v += f x_(v ^ middle) with a vector of factors, lanes exchanged
 *     plain:    the same with one factor a pattern, lanes in place, nothing where it vanishes
 *     whole:    y += f[0] x[0] + ... up to four runs, one after the other
 */
typedef struct whorli_runs_loops {
    void (*diagonal)(const whorli_runs *runs, uint64_t first, uint64_t count, const double *characters,
                     uint64_t character_count, const double *x, double *y);
    void (*lanes)(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned, const double *values,
                  const uint8_t *zeros, const double *x, double *y);
    void (*plain)(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned, const double *values, const double *x,
                  double *y);
    void (*whole)(double *y, const double *const *x, const double *f, int32_t count, uint64_t reals);
} whorli_runs_loops;

static void whorli_runs_diagonal_plain(const whorli_runs *runs, uint64_t first, uint64_t count,
                                       const double *characters, uint64_t character_count, const double *x, double *y)
{
    uint64_t v, l, j;
    for (v = 0; v < count; v++) {
        double f[WHORLI_LANES];
        uint64_t signs = runs->signs[first + v];
        for (l = 0; l < WHORLI_LANES; l++)
            f[l] = runs->diagonal[(first + v) * WHORLI_LANES + l];
        for (j = 0; j < character_count; j++, signs >>= 1) {
            const double *e = characters + (2 * j + (signs & 1)) * WHORLI_LANES;
            for (l = 0; l < WHORLI_LANES; l++)
                f[l] += e[l];
        }
        for (l = 0; l < WHORLI_LANES; l++)
            y[v * WHORLI_LANES + l] = 0.0 + f[l] * x[v * WHORLI_LANES + l];
    }
}

static void whorli_runs_lanes_plain(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned,
                                    const double *values, const uint8_t *zeros, const double *x, double *y)
{
    uint64_t i, l, lanes = flip->lanes;
    for (i = 0; i < vectors; i++) {
        uint64_t v = flip->order[i];
        const double *f = values + (flip->pattern[i] ^ turned) * WHORLI_LANES;
        const double *from = x + (v ^ flip->middle) * WHORLI_LANES;
        double *to = y + v * WHORLI_LANES, turn[WHORLI_LANES];
        if (zeros[flip->pattern[i] ^ turned])
            continue;
        for (l = 0; l < WHORLI_LANES; l++)
            turn[l] = from[l ^ lanes];
        for (l = 0; l < WHORLI_LANES; l++)
            to[l] += f[l] * turn[l];
    }
}

static void whorli_runs_plain_plain(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned,
                                    const double *values, const double *WHORLI_RESTRICT x, double *WHORLI_RESTRICT y)
{
    uint64_t i = 0, l;
    while (i < vectors) {
        uint64_t pattern = flip->pattern[i];
        double f = values[pattern ^ turned];
        for (; i < vectors && flip->pattern[i] == pattern; i++) {
            const double *from = x + (uint64_t)(flip->order[i] ^ flip->middle) * WHORLI_LANES;
            double *to = y + (uint64_t)flip->order[i] * WHORLI_LANES;
            if (f != 0.0)
                for (l = 0; l < WHORLI_LANES; l++)
                    to[l] += f * from[l];
        }
    }
}

#if WHORLI_SHUFFLES

WHORLI_TARGET_AVX2 static inline __attribute__((always_inline)) whorli_double4 whorli_load_avx2(const double *from)
{
    whorli_double4 a;
    memcpy(&a, from, sizeof a);
    return a;
}

/* Lanes exchanged within one vector: lane l takes l ^ lanes. */
WHORLI_TARGET_AVX2 static inline __attribute__((always_inline)) whorli_double4
whorli_exchange_avx2(whorli_double4 a, const uint64_t lanes)
{
    switch (lanes) {
    case 1:
        return __builtin_shufflevector(a, a, 1, 0, 3, 2);
    case 2:
        return __builtin_shufflevector(a, a, 2, 3, 0, 1);
    case 3:
        return __builtin_shufflevector(a, a, 3, 2, 1, 0);
    default:
        return a;
    }
}

WHORLI_TARGET_AVX2 static inline __attribute__((always_inline)) void
whorli_runs_exchanged_avx2(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned, const double *values,
                           const uint8_t *zeros, const double *x, double *y, const uint64_t lanes)
{
    uint64_t i;
    for (i = 0; i < vectors; i++) {
        uint64_t v = flip->order[i], part;
        if (zeros[flip->pattern[i] ^ turned])
            continue;
        const double *f = values + (flip->pattern[i] ^ turned) * WHORLI_LANES;
        const double *from = x + (v ^ flip->middle) * WHORLI_LANES;
        double *to = y + v * WHORLI_LANES;
        for (part = 0; part < 2; part++) {
            whorli_double4 a = whorli_load_avx2(from + 4 * (part ^ (lanes / 4)));
            whorli_double4 sum =
                whorli_load_avx2(to + 4 * part) + whorli_load_avx2(f + 4 * part) * whorli_exchange_avx2(a, lanes % 4);
            memcpy(to + 4 * part, &sum, sizeof sum);
        }
    }
}

WHORLI_TARGET_AVX2 static void whorli_runs_lanes_avx2(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned,
                                                      const double *values, const uint8_t *zeros, const double *x,
                                                      double *y)
{
    switch (flip->lanes) {
    case 0:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 0);
        break;
    case 1:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 1);
        break;
    case 2:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 2);
        break;
    case 3:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 3);
        break;
    case 4:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 4);
        break;
    case 5:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 5);
        break;
    case 6:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 6);
        break;
    default:
        whorli_runs_exchanged_avx2(flip, vectors, turned, values, zeros, x, y, 7);
        break;
    }
}

WHORLI_TARGET_AVX2 static void whorli_runs_plain_avx2(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned,
                                                      const double *values, const double *x, double *y)
{
    uint64_t i = 0, part;
    while (i < vectors) {
        uint64_t pattern = flip->pattern[i];
        double value = values[pattern ^ turned];
        whorli_double4 f = {0.0};
        if (value == 0.0) {
            while (i < vectors && flip->pattern[i] == pattern)
                i++;
            continue;
        }
        f = f + value;
        for (; i < vectors && flip->pattern[i] == pattern; i++) {
            const double *from = x + (uint64_t)(flip->order[i] ^ flip->middle) * WHORLI_LANES;
            double *to = y + (uint64_t)flip->order[i] * WHORLI_LANES;
            for (part = 0; part < 8; part += 4) {
                whorli_double4 sum = whorli_load_avx2(to + part) + f * whorli_load_avx2(from + part);
                memcpy(to + part, &sum, sizeof sum);
            }
        }
    }
}

WHORLI_TARGET_AVX2 static void whorli_runs_diagonal_avx2(const whorli_runs *runs, uint64_t first, uint64_t count,
                                                         const double *characters, uint64_t character_count,
                                                         const double *x, double *y)
{
    uint64_t v, j, part;
    for (v = 0; v < count; v++)
        for (part = 0; part < 8; part += 4) {
            whorli_double4 f = whorli_load_avx2(runs->diagonal + (first + v) * WHORLI_LANES + part), zero = {0.0};
            uint64_t signs = runs->signs[first + v];
            for (j = 0; j < character_count; j++, signs >>= 1)
                f += whorli_load_avx2(characters + (2 * j + (signs & 1)) * WHORLI_LANES + part);
            f = zero + f * whorli_load_avx2(x + v * WHORLI_LANES + part);
            memcpy(y + v * WHORLI_LANES + part, &f, sizeof f);
        }
}

WHORLI_TARGET_AVX512 static inline __attribute__((always_inline)) whorli_double8 whorli_load_avx512(const double *from)
{
    whorli_double8 a;
    memcpy(&a, from, sizeof a);
    return a;
}

/* Lanes exchanged within one vector: lane l takes l ^ lanes. */
WHORLI_TARGET_AVX512 static inline __attribute__((always_inline)) whorli_double8
whorli_exchange_avx512(whorli_double8 a, const uint64_t lanes)
{
    switch (lanes) {
    case 1:
        return __builtin_shufflevector(a, a, 1, 0, 3, 2, 5, 4, 7, 6);
    case 2:
        return __builtin_shufflevector(a, a, 2, 3, 0, 1, 6, 7, 4, 5);
    case 3:
        return __builtin_shufflevector(a, a, 3, 2, 1, 0, 7, 6, 5, 4);
    case 4:
        return __builtin_shufflevector(a, a, 4, 5, 6, 7, 0, 1, 2, 3);
    case 5:
        return __builtin_shufflevector(a, a, 5, 4, 7, 6, 1, 0, 3, 2);
    case 6:
        return __builtin_shufflevector(a, a, 6, 7, 4, 5, 2, 3, 0, 1);
    case 7:
        return __builtin_shufflevector(a, a, 7, 6, 5, 4, 3, 2, 1, 0);
    default:
        return a;
    }
}

WHORLI_TARGET_AVX512 static inline __attribute__((always_inline)) void
whorli_runs_exchanged_avx512(const whorli_run_flip *flip, uint64_t vectors, uint64_t turned, const double *values,
                             const uint8_t *zeros, const double *x, double *y, const uint64_t lanes)
{
    uint64_t i;
    for (i = 0; i < vectors; i++) {
        uint64_t v = flip->order[i], part;
        if (zeros[flip->pattern[i] ^ turned])
            continue;
        const double *f = values + (flip->pattern[i] ^ turned) * WHORLI_LANES;
        const double *from = x + (v ^ flip->middle) * WHORLI_LANES;
        double *to = y + v * WHORLI_LANES;
        for (part = 0; part < 1; part++) {
            whorli_double8 a = whorli_load_avx512(from + 8 * (part ^ (lanes / 8)));
            whorli_double8 sum = whorli_load_avx512(to + 8 * part) +
                                 whorli_load_avx512(f + 8 * part) * whorli_exchange_avx512(a, lanes % 8);
            memcpy(to + 8 * part, &sum, sizeof sum);
        }
    }
}

WHORLI_TARGET_AVX512 static void whorli_runs_lanes_avx512(const whorli_run_flip *flip, uint64_t vectors,
                                                          uint64_t turned, const double *values, const uint8_t *zeros,
                                                          const double *x, double *y)
{
    switch (flip->lanes) {
    case 0:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 0);
        break;
    case 1:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 1);
        break;
    case 2:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 2);
        break;
    case 3:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 3);
        break;
    case 4:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 4);
        break;
    case 5:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 5);
        break;
    case 6:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 6);
        break;
    default:
        whorli_runs_exchanged_avx512(flip, vectors, turned, values, zeros, x, y, 7);
        break;
    }
}

WHORLI_TARGET_AVX512 static void whorli_runs_plain_avx512(const whorli_run_flip *flip, uint64_t vectors,
                                                          uint64_t turned, const double *values, const double *x,
                                                          double *y)
{
    uint64_t i = 0, part;
    while (i < vectors) {
        uint64_t pattern = flip->pattern[i];
        double value = values[pattern ^ turned];
        whorli_double8 f = {0.0};
        if (value == 0.0) {
            while (i < vectors && flip->pattern[i] == pattern)
                i++;
            continue;
        }
        f = f + value;
        for (; i < vectors && flip->pattern[i] == pattern; i++) {
            const double *from = x + (uint64_t)(flip->order[i] ^ flip->middle) * WHORLI_LANES;
            double *to = y + (uint64_t)flip->order[i] * WHORLI_LANES;
            for (part = 0; part < 8; part += 8) {
                whorli_double8 sum = whorli_load_avx512(to + part) + f * whorli_load_avx512(from + part);
                memcpy(to + part, &sum, sizeof sum);
            }
        }
    }
}

WHORLI_TARGET_AVX512 static void whorli_runs_diagonal_avx512(const whorli_runs *runs, uint64_t first, uint64_t count,
                                                             const double *characters, uint64_t character_count,
                                                             const double *x, double *y)
{
    uint64_t v, j, part;
    for (v = 0; v < count; v++)
        for (part = 0; part < 8; part += 8) {
            whorli_double8 f = whorli_load_avx512(runs->diagonal + (first + v) * WHORLI_LANES + part), zero = {0.0};
            uint64_t signs = runs->signs[first + v];
            for (j = 0; j < character_count; j++, signs >>= 1)
                f += whorli_load_avx512(characters + (2 * j + (signs & 1)) * WHORLI_LANES + part);
            f = zero + f * whorli_load_avx512(x + v * WHORLI_LANES + part);
            memcpy(y + v * WHORLI_LANES + part, &f, sizeof f);
        }
}
#endif

static whorli_runs_loops whorli_runs_choose(void)
{
    whorli_runs_loops loops;
    loops.diagonal = whorli_runs_diagonal_plain;
    loops.lanes = whorli_runs_lanes_plain;
    loops.plain = whorli_runs_plain_plain;
    loops.whole = whorli_split_far_plain;
#if WHORLI_SHUFFLES
    if (whorli_target() == 2) {
        loops.diagonal = whorli_runs_diagonal_avx512;
        loops.lanes = whorli_runs_lanes_avx512;
        loops.plain = whorli_runs_plain_avx512;
        loops.whole = whorli_split_far_avx512;
    } else if (whorli_target() == 1) {
        loops.diagonal = whorli_runs_diagonal_avx2;
        loops.lanes = whorli_runs_lanes_avx2;
        loops.plain = whorli_runs_plain_avx2;
        loops.whole = whorli_split_far_avx2;
    }
#endif
    return loops;
}

typedef struct whorli_runs_job {
    const whorl_action *action;
    const double *x;
    double *y;
    uint64_t block_bits; /* reals of a block of work */
    uint64_t reals;      /* of a column */
    int32_t count;
    int32_t step; /* y = a A x + b y, and dots of it */
    double a, b;
    whorl_complex *parts;
    whorli_runs_loops loops;
} whorli_runs_job;

/* Factors of a flip that is not simple, for all lanes of the run at `base`. */
static void whorli_runs_factors(const whorl_action *action, const whorli_action_flip *flip, uint64_t base, double *f)
{
    const whorli_runs *runs = &action->runs;
    uint64_t shift = (uint64_t)action->width - 1, run = UINT64_C(1) << runs->run_bits,
             row = UINT64_C(1) << runs->row_bits;
    uint64_t part = row < run ? row : run, i, k, v, l, j;
    for (i = 0; i < run; i += part) {
        uint64_t low = ((base + i) & (row - 1)) >> shift, high = (base + i) >> shift;
        for (v = 0; v < part; v++)
            f[i + v] = 0.0;
        for (k = 0; k < flip->low_count + flip->character_count; k++) {
            uint64_t z;
            double e = 0.0, lane[WHORLI_LANES];
            if (k < flip->low_count) {
                z = action->terms[flip->first_low + k].low;
                e = action->terms[flip->first_low + k].d;
            } else {
                const whorli_action_character *character =
                    action->characters + flip->first_character + (k - flip->low_count);
                z = character->low;
                for (j = character->first; j < character->first + character->count; j++)
                    e += whorl_bits_parity(action->terms[j].high & high) ? -action->terms[j].d : action->terms[j].d;
            }
            for (l = 0; l < WHORLI_LANES; l++)
                lane[l] = whorl_bits_parity(z & (l >> shift)) ? -e : e;
            for (v = 0; v < part; v += WHORLI_LANES) {
                double sign = whorl_bits_parity(z & (low + (v >> shift))) ? -1.0 : 1.0;
                for (l = 0; l < WHORLI_LANES; l++)
                    f[i + v + l] += sign * lane[l];
            }
        }
    }
    for (i = 1; flip->odd && i < run; i += 2)
        f[i] = -f[i];
}

/* The flips of one run, whole runs up to four at a time. */
static void whorli_runs_flips(const whorl_action *action, const whorli_runs_loops *loops, uint64_t base,
                              const double *x, double *y)
{
    const whorli_runs *runs = &action->runs;
    uint64_t g = whorli_action_diagonal(action) == NULL ? 0 : 1, reals = UINT64_C(1) << runs->run_bits;
    uint64_t vectors = reals >> 3;
    static const uint8_t never[WHORLI_RUN_VECTORS] = {0};
    const double *waiting[4] = {NULL, NULL, NULL, NULL};
    double f[4] = {0.0, 0.0, 0.0, 0.0}, factors[1 << WHORLI_RUN_BITS];
    int32_t count = 0, k;
    for (; g < action->flip_count; g++) {
        const whorli_run_flip *flip = runs->flips + g;
        const double *from = x + (base ^ flip->high), *values = action->values + flip->first_value;
        uint64_t turned = 0;
        for (k = 0; k < flip->rank; k++)
            turned |= (uint64_t)whorl_bits_parity(flip->basis[k] & base) << k;
        if (flip->whole) {
            if (values[turned] == 0.0)
                continue;
            waiting[count] = from;
            f[count++] = values[turned];
            if (count == 4) {
                loops->whole(y, waiting, f, 4, reals);
                count = 0;
            }
            continue;
        }
        if (count > 0)
            loops->whole(y, waiting, f, count, reals);
        count = 0;
        if (flip->rank < 0) {
            whorli_runs_factors(action, action->flips + g, base, factors);
            loops->lanes(flip, vectors, 0, factors, never, from, y);
        } else if (flip->plain) {
            loops->plain(flip, vectors, turned, values, from, y);
        } else {
            loops->lanes(flip, vectors, turned, runs->lane_values + flip->first_value * WHORLI_LANES,
                         runs->zeros + flip->first_value, from, y);
        }
    }
    if (count > 0)
        loops->whole(y, waiting, f, count, reals);
}

/* Characters of the diagonal for the row that holds `base`: for each lane, with both signs of the rest of the low part.
 */
static void whorli_runs_characters(const whorl_action *action, uint64_t base, double *characters)
{
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t j, i, l, shift = (uint64_t)action->width - 1, high = base >> shift;
    for (j = 0; j < diagonal->character_count; j++) {
        const whorli_action_character *character = action->characters + diagonal->first_character + j;
        double e = 0.0;
        for (i = character->first; i < character->first + character->count; i++)
            e += whorl_bits_parity(action->terms[i].high & high) ? -action->terms[i].d : action->terms[i].d;
        for (l = 0; l < WHORLI_LANES; l++) {
            double lane = whorl_bits_parity(character->low & (l >> shift)) ? -e : e;
            characters[2 * j * WHORLI_LANES + l] = lane;
            characters[(2 * j + 1) * WHORLI_LANES + l] = -lane;
        }
    }
}

/* Leaves of a block and their sums: blocks are powers of two of leaves, or the whole vector. */
static void whorli_runs_dots(const whorli_runs_job *job, uint64_t base, uint64_t reals, uint64_t block)
{
    whorl_element element = job->action->element;
    uint64_t leaf = WHORL_LEAF * (uint64_t)job->action->width, i, width = (uint64_t)job->action->width;
    whorl_tree across, square;
    whorl_tree_clear(&across);
    whorl_tree_clear(&square);
    for (i = 0; i < reals; i += leaf) {
        uint64_t count = (reals - i < leaf ? reals - i : leaf) / width;
        whorl_tree_add(&across, whorl_leaf_dot(element, job->x + base + i, job->y + base + i, count));
        whorl_tree_add(&square, whorl_leaf_dot(element, job->y + base + i, job->y + base + i, count));
    }
    job->parts[2 * block] = whorl_tree_total(&across);
    job->parts[2 * block + 1] = whorl_tree_total(&square);
}

static void whorli_runs_block(void *argument, uint64_t block, int32_t worker)
{
    const whorli_runs_job *job = (const whorli_runs_job *)argument;
    const whorl_action *action = job->action;
    const whorli_runs *runs = &action->runs;
    const whorli_action_flip *diagonal = whorli_action_diagonal(action);
    uint64_t run = UINT64_C(1) << runs->run_bits, row = UINT64_C(1) << runs->row_bits,
             size = UINT64_C(1) << job->block_bits;
    uint64_t base, i, part = row < run ? row : run;
    double characters[2 * WHORLI_SPLIT_CHARACTERS * WHORLI_LANES], sums[1 << WHORLI_RUN_BITS];
    int32_t c;
    (void)worker;
    for (c = 0; c < job->count; c++) {
        const double *x = job->x + (uint64_t)c * job->reals;
        double *y = job->y + (uint64_t)c * job->reals;
        for (base = block * size; base < (block + 1) * size; base += run) {
            double *to = job->step ? sums : y + base;
            for (i = 0; i < run; i += part) {
                if (diagonal == NULL) {
                    uint64_t k;
                    for (k = 0; k < part; k++)
                        to[i + k] = 0.0;
                    continue;
                }
                if (((base + i) & (row - 1)) == 0)
                    whorli_runs_characters(action, base + i, characters);
                job->loops.diagonal(runs, ((base + i) & (row - 1)) >> 3, part >> 3, characters,
                                    diagonal->character_count, x + base + i, to + i);
            }
            whorli_runs_flips(action, &job->loops, base, x, to);
            if (job->step && job->b == 0.0)
                for (i = 0; i < run; i++)
                    y[base + i] = job->a * sums[i];
            else if (job->step)
                for (i = 0; i < run; i++)
                    y[base + i] = job->a * sums[i] + job->b * y[base + i];
        }
    }
    if (job->step)
        whorli_runs_dots(job, block * size, size, block);
}

/* A block is at least a row, so that its characters are computed once. */
static int32_t whorli_runs_block_bits(const whorl_action *action)
{
    const whorli_runs *runs = &action->runs;
    int32_t bits = runs->row_bits > 13 ? runs->row_bits : 13;
    return bits < runs->bits ? bits : runs->bits;
}

static whorl_status whorli_runs_run(whorl_host *host, whorli_runs_job *job)
{
    const whorl_action *action = job->action;
    job->loops = whorli_runs_choose();
    job->block_bits = (uint64_t)whorli_runs_block_bits(action);
    job->reals = UINT64_C(1) << action->runs.bits;
    return whorl_run(host, whorli_runs_block, job, job->reals >> job->block_bits,
                     whorl_size_multiply((action->flip_count + 1) << job->block_bits, (uint64_t)job->count));
}

static whorl_status whorli_runs_apply(whorl_host *host, const whorli_action_job *given)
{
    whorli_runs_job job;
    memset(&job, 0, sizeof job);
    job.action = given->action;
    job.x = (const double *)(const void *)given->x;
    job.y = (double *)(void *)given->y;
    job.count = given->count;
    return whorli_runs_run(host, &job);
}

static uint64_t whorli_runs_parts_bytes(const whorl_action *action)
{
    return (UINT64_C(2) << (action->runs.bits - whorli_runs_block_bits(action))) * sizeof(whorl_complex);
}

static whorl_status whorli_runs_step(whorl_host *host, const whorl_map *map, double a, const void *x, double b, void *y,
                                     whorl_complex dots[2])
{
    const whorl_action *action = (const whorl_action *)map->context;
    whorl_block block;
    whorli_runs_job job;
    whorl_status status = whorl_block_take(host, whorli_runs_parts_bytes(action), &block);
    if (status != WHORL_OK)
        return status;
    memset(&job, 0, sizeof job);
    job.action = action;
    job.x = (const double *)x;
    job.y = (double *)y;
    job.count = 1;
    job.step = 1;
    job.a = a;
    job.b = b;
    job.parts = (whorl_complex *)(void *)block.at;
    status = whorli_runs_run(host, &job);
    if (status == WHORL_OK) {
        uint64_t blocks = job.reals >> job.block_bits;
        dots[0] = whorli_vector_total(job.parts, blocks, 2);
        dots[1] = whorli_vector_total(job.parts + 1, blocks, 2);
    }
    whorl_block_give(host, &block);
    return status;
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
    if (action->runs.used && action->split.fits)
        return whorli_runs_apply(host, &job);
    if (action->split.used && action->split.fits)
        return whorli_split_apply(host, &job);
    job.block = 1024;
    return whorl_run(host, whorli_any_body, &job, (job.rows + (job.block - 1)) / job.block,
                     whorl_size_multiply(job.block * (action->flip_count + 1), (uint64_t)count));
}

static uint64_t whorli_action_scratch(const whorl_host *host, const whorl_map *map, int32_t count)
{
    const whorl_action *action = (const whorl_action *)map->context;
    whorl_layout layout = {NULL, 0};
    whorli_split_scratch scratch;
    if (action->runs.used && action->split.fits)
        return count == 0 ? whorl_block_bytes(whorli_runs_parts_bytes(action)) : 0;
    if (!action->split.used || !action->split.fits || map->rows == 0)
        return 0;
    whorli_split_carve_scratch(&layout, action, whorl_workers(host), &scratch);
    return whorl_block_bytes(layout.bytes);
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
    map.scratch = whorli_action_scratch;
    if (action->runs.used && action->split.fits)
        map.step = whorli_runs_step;
    return map;
}

const char *whorl_action_kernel(const whorl_action *action)
{
    if (!action->split.used || !action->split.fits)
        return "state by state";
    return action->runs.used ? "runs" : "rows of eight";
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
