/*
 * whorl_space.h 0.1.0: bit-string bases. Which states there are, in which order, and the way both ways between a state
 * and its index.
 *
 * A state of N sites is a uint64_t: bit i is site i, 0 up and 1 down. A space is one of: all states; a fixed number of
 * down spins on each of some disjoint site masks (one mask of all sites is a fixed magnetisation, two masks are two
 * conserved species, sites in no mask are free); a fixed parity of the number of down spins; no two neighbours down
 * along given pairs (blockade); a list of states. Operators are compiled between spaces by whorl_action.h.
 *
 *     whorl_space *space = NULL;
 *     if (whorl_space_make_down(&host, 24, 12, &space) == WHORL_OK) {
 *         uint64_t index = whorl_space_find(space, 0x555555);              (WHORL_NONE where it is no member)
 *         whorl_space_free(&host, space);
 *     }
 *
 * It does not know symmetry sectors, operators or vectors.
 *
 * Order: states ascend as integers, with one exception: several masks, or one mask with free sites, on more than
 * WHORL_SPACE_SPLIT_SITES sites (see whorl_space_find).
 * Memory: a space is one block, announced by whorl_space_bytes; the making takes no scratch. All states and parity take
 * some 3 KB, fixed numbers tables of O(2^(N/2)) (17 MB at most), blockade and lists 8 to 12 bytes a state.
 * Threads: a space never changes after it was made and may be shared between threads and hosts.
 * Errors: statuses of whorl_core.h with a reason; a failing call leaves NULL and keeps nothing.
 * Method of the two-table index: H. Q. Lin, Phys. Rev. B 42, 6561 (1990).
 */
#include "whorl_core.h"

#ifndef WHORL_SPACE_INCLUDED
#define WHORL_SPACE_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_space.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_SPACE_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- what a space is --------------------------------------------------------------------------------------------- */

typedef int32_t whorl_space_kind;
enum {
    WHORL_SPACE_ALL = 1,      /* all 2^N states, N <= 62 */
    WHORL_SPACE_DOWN = 2,     /* a fixed number of down spins on each of some disjoint masks */
    WHORL_SPACE_PARITY = 3,   /* an even or odd number of down spins on a mask, N <= 63 */
    WHORL_SPACE_BLOCKADE = 4, /* no pair with both sites down; the states are stored */
    WHORL_SPACE_LIST = 5      /* the states given */
};

#define WHORL_MOST_SITES 64
/* Fixed numbers up to this many sites are indexed by two tables over the halves of the sites; above by binomials. */
#define WHORL_SPACE_SPLIT_SITES 40
/* Most states of a blockade: they are stored, 8 bytes each. */
#define WHORL_SPACE_MOST_STORED (UINT64_C(1) << 36)

/* So many down spins among the sites of a mask. */
typedef struct whorl_down_number {
    uint64_t mask; /* 0: all sites */
    int32_t down;  /* 0 .. number of sites in the mask */
} whorl_down_number;

typedef struct whorl_pair {
    int32_t i, j;
} whorl_pair;

/* Everything that makes a space; only the fields of its kind are read. Arrays are the caller's and copied. */
typedef struct whorl_space_desc {
    int32_t sites;                    /* 1 .. 64; no default */
    whorl_space_kind kind;            /* 0: WHORL_SPACE_ALL */
    const whorl_down_number *numbers; /* DOWN: disjoint masks, in any order; sites in no mask are free */
    int32_t number_count;             /* DOWN: at least 1 */
    int32_t parity;                   /* PARITY: 0 even, 1 odd number of down spins */
    uint64_t parity_mask;             /* PARITY: the sites that count; 0: all */
    const whorl_pair *pairs;          /* BLOCKADE: may repeat, i != j */
    uint64_t pair_count;              /* BLOCKADE: 0 gives all states, stored */
    const uint64_t *states;           /* LIST: in any order, none twice */
    uint64_t state_count;             /* LIST: 0 gives the space of dimension zero */
} whorl_space_desc;

typedef struct whorl_space whorl_space;

/* All zero: every field at its default; set `sites` and what the kind needs. */
WHORL_API whorl_space_desc whorl_space_default(void);

/*
 * The bytes that whorl_space_make takes from the host, exactly. Takes no memory. A blockade is counted state by state,
 * 4096 at a time, polled; everything else costs O(sites + arrays).
 * Errors: as whorl_space_make, but for those of memory and for repeated states.
 */
WHORL_API whorl_status whorl_space_bytes(whorl_host *host, const whorl_space_desc *desc, uint64_t *bytes);

/*
 * Makes the space; the caller frees it with whorl_space_free. Cost: O(2^(N/2)) for fixed numbers, O(states) for a
 * blockade, O(states * sites) for a list in disorder, O(1) otherwise.
 * Errors: WHORL_BAD_ARGUMENT (with the offending element's index), WHORL_TOO_LARGE (2^63 states and more, or a blockade
 * of more than WHORL_SPACE_MOST_STORED), WHORL_OVER_LIMIT, WHORL_NO_MEMORY, WHORL_CANCELLED; *space is then NULL.
 */
WHORL_API whorl_status whorl_space_make(whorl_host *host, const whorl_space_desc *desc, whorl_space **space);
/* The two common ones: all states of `sites` (1 .. 62); `down` of `sites` (1 .. 64) down: S^z = sites/2 - down. */
WHORL_API whorl_status whorl_space_make_all(whorl_host *host, int32_t sites, whorl_space **space);
WHORL_API whorl_status whorl_space_make_down(whorl_host *host, int32_t sites, int32_t down, whorl_space **space);
/* Gives the memory back to the host; NULL is legal. */
WHORL_API void whorl_space_free(whorl_host *host, whorl_space *space);

/* ---- states and indices ------------------------------------------------------------------------------------------ */

WHORL_API int32_t whorl_space_sites(const whorl_space *space);
/* The dimension, below 2^63; may be 0 for a list. */
WHORL_API uint64_t whorl_space_count(const whorl_space *space);
WHORL_API whorl_space_kind whorl_space_kind_of(const whorl_space *space);

/*
 * The state at an index; WHORL_NONE from whorl_space_count on. (Of 64 sites the state with all down is the same word:
 * tell them apart by the index.) Cost: O(1) for all states, parity and stored ones, O(N/2) steps for fixed numbers up
 * to WHORL_SPACE_SPLIT_SITES sites, O(N) above.
 */
WHORL_API uint64_t whorl_space_at(const whorl_space *space, uint64_t index);

/*
 * The index of a state; WHORL_NONE where the state is no member (bits beyond the sites included).
 * Cost: O(1) for all states, parity, and fixed numbers up to WHORL_SPACE_SPLIT_SITES sites (two look-ups: index =
 * A[high half] + B[low half]); O(down spins) for fixed numbers above; a look-up and a short binary search in lists and
 * blockades. Above WHORL_SPACE_SPLIT_SITES sites the index of several numbers is a number of mixed radix: the least
 * significant digit counts the free sites, then follow the masks in order of their lowest sites; within a digit
 * configurations ascend. A single mask of all sites ascends always.
 */
WHORL_API uint64_t whorl_space_find(const whorl_space *space, uint64_t state);
/* 1 if the state is a member, otherwise 0: as whorl_space_find, without the look-up where the kind permits. */
WHORL_API int32_t whorl_space_has(const whorl_space *space, uint64_t state);

/*
 * The state at index + 1, given that `state` is the one at `index`; WHORL_NONE past the end. The cheap way to walk
 * through a space: a few operations a step. Start a walk (or a block of one) with whorl_space_at.
 */
WHORL_API uint64_t whorl_space_next(const whorl_space *space, uint64_t index, uint64_t state);

/* ---- what defines it --------------------------------------------------------------------------------------------- */

/* 1 if both hold the same states in the same order and are of one kind; cost O(states) for lists. */
WHORL_API int32_t whorl_space_same(const whorl_space *a, const whorl_space *b);

/* DOWN: how many masks (0 for other kinds), and each of them, in order of their lowest sites; 0 masks spelt out. */
WHORL_API int32_t whorl_space_number_count(const whorl_space *space);
WHORL_API whorl_down_number whorl_space_number_at(const whorl_space *space, int32_t k);
/* Sites that no mask, no parity and no pair restricts; 0 for lists. */
WHORL_API uint64_t whorl_space_free_sites(const whorl_space *space);
/* PARITY: the mask (0 for other kinds) and the parity, 0 or 1. */
WHORL_API uint64_t whorl_space_parity_mask(const whorl_space *space);
WHORL_API int32_t whorl_space_parity(const whorl_space *space);
/* BLOCKADE: the sites that may not be down beside `site` (0 for other kinds). */
WHORL_API uint64_t whorl_space_neighbours(const whorl_space *space, int32_t site);
/* BLOCKADE and LIST: the stored states, ascending, owned by the space; NULL for other kinds. */
WHORL_API const uint64_t *whorl_space_states(const whorl_space *space);

/*
 * The trace of the Pauli string Z^z over the space: sum over its states of (-1)^popcount(z & s), an integer, rounded
 * once to double; z = 0 gives the dimension. Bits of z beyond the sites act on nothing. All states: 2^N or 0. Fixed
 * numbers: the product over the masks of Krawtchouk polynomials K_w(n) = sum_j (-1)^j C(w, j) C(M - w, n - j) with
 * w = |z & mask| of M sites (NIST Digital Library of Mathematical Functions, 18.19), and 0 or a power of two for free
 * sites. Parity: half of 2^N where z is 0, (-1)^parity times it where z is the mask. Blockade, lists: summed, polled.
 * Errors: WHORL_CANCELLED; *trace is then unchanged.
 */
WHORL_API whorl_status whorl_space_string_trace(whorl_host *host, const whorl_space *space, uint64_t z, double *trace);

/* Writes a short label: "S^z = 1/2", "2 of 5 and 1 of 3 down", "even number down", "all states", ... */
WHORL_API void whorl_space_describe(const whorl_space *space, whorl_text *text);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_SPACE_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_SPACE_IMPLEMENTED)
#define WHORL_SPACE_IMPLEMENTED

#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/*
 * One block: this struct, then its tables. Headers on higher floors read it in their implementation and never write.
 * A new kind adds its fields here and one case to each switch on `kind`: check, carve, fill, at, find, has, next, same,
 * trace, describe.
 */
struct whorl_space {
    whorl_block block;
    whorl_space_kind kind;
    int32_t sites;
    uint64_t all;   /* mask of all sites */
    uint64_t count; /* dimension */

    /* DOWN */
    int32_t number_count;
    int32_t ascending;                             /* one mask of all sites: successor by bit tricks */
    whorl_down_number numbers[WHORL_MOST_SITES];   /* disjoint, in order of their lowest sites */
    uint64_t choices[WHORL_MOST_SITES];            /* configurations of each mask: binomials */
    uint64_t free_sites;

    /* DOWN, sites <= WHORL_SPACE_SPLIT_SITES: low half and high half of the sites. The class of a low half is its tuple
       of numbers of down spins in the masks, as a number of mixed radix with these strides. */
    int32_t low_sites;
    int32_t high_sites;
    uint32_t stride[WHORL_MOST_SITES];
    int32_t low_room[WHORL_MOST_SITES];            /* sites of each mask in the low half */
    uint64_t classes;
    uint64_t *rank_high;   /* [2^high_sites + 1]: the states below the first one of this high half; last: count */
    uint32_t *rank_low;    /* [2^low_sites]: how many smaller low halves are in its class */
    uint32_t *lows;        /* [2^low_sites]: low halves by class, ascending in each */
    uint32_t *class_start; /* [classes + 1]: where each class starts in `lows` */

    /* DOWN, more sites */
    uint64_t *binomials; /* [65 * 65]: n choose k at 65 n + k */

    /* PARITY */
    uint64_t parity_mask;
    int32_t parity;
    int32_t parity_bit; /* lowest site of the mask: decided by the others */

    /* BLOCKADE and LIST */
    uint64_t *states;  /* [count], ascending */
    uint64_t *buckets; /* [2^bucket_bits + 1]: first state with these top bits */
    int32_t bucket_bits;
    int32_t bucket_shift;
    uint64_t neighbours[WHORL_MOST_SITES];
};

/* ---- >>check ----------------------------------------------------------------------------------------------------- */

/* Starts "WORDS element INDEX" as a reason about one element of an array. */
static whorl_text whorli_space_blame(whorl_host *host, const char *array, uint64_t index)
{
    whorl_text text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
    host->reason.index = index;
    whorl_text_add(&text, array);
    whorl_text_add(&text, "[");
    whorl_text_add_unsigned(&text, index);
    whorl_text_add(&text, "]");
    return text;
}

static whorl_status whorli_space_too_large(whorl_host *host)
{
    return whorl_fail(host, WHORL_TOO_LARGE,
                      "the space has 2^63 states or more: fix the number of down spins, or list states");
}

static whorl_status whorli_space_check_numbers(whorl_host *host, const whorl_space_desc *desc, whorl_space *plan)
{
    uint64_t used = 0;
    int32_t k, at;
    if (desc->number_count < 1 || desc->numbers == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "a space of fixed numbers needs at least one mask with its number of down spins");
    plan->count = 1;
    for (k = 0; k < desc->number_count; k++) {
        whorl_down_number number = desc->numbers[k];
        int32_t size;
        if (number.mask == 0)
            number.mask = plan->all;
        size = whorl_bits_count(number.mask);
        if ((number.mask & ~plan->all) != 0) {
            whorl_text text = whorli_space_blame(host, "numbers", (uint64_t)k);
            whorl_text_add(&text, " has a mask with sites beyond the last: keep to bits 0 .. sites - 1");
            return WHORL_BAD_ARGUMENT;
        }
        if ((number.mask & used) != 0) {
            whorl_text text = whorli_space_blame(host, "numbers", (uint64_t)k);
            whorl_text_add(&text, " has site ");
            whorl_text_add_signed(&text, whorl_bits_lowest(number.mask & used));
            whorl_text_add(&text, " in common with an earlier mask: masks must be disjoint");
            return WHORL_BAD_ARGUMENT;
        }
        if (number.down < 0 || number.down > size) {
            whorl_text text = whorli_space_blame(host, "numbers", (uint64_t)k);
            whorl_text_add(&text, " asks for ");
            whorl_text_add_signed(&text, number.down);
            whorl_text_add(&text, " down spins on ");
            whorl_text_add_signed(&text, size);
            whorl_text_add(&text, " sites: ask for 0 to as many as there are sites");
            return WHORL_BAD_ARGUMENT;
        }
        used |= number.mask;
        for (at = plan->number_count++; at > 0; at--) {
            if (whorl_bits_lowest(plan->numbers[at - 1].mask) < whorl_bits_lowest(number.mask))
                break;
            plan->numbers[at] = plan->numbers[at - 1];
        }
        plan->numbers[at] = number;
    }
    plan->free_sites = plan->all & ~used;
    plan->ascending = plan->number_count == 1 && plan->free_sites == 0;
    for (k = 0; k < plan->number_count; k++) {
        plan->choices[k] = whorl_binomial(whorl_bits_count(plan->numbers[k].mask), plan->numbers[k].down);
        plan->count = whorl_size_multiply(plan->count, plan->choices[k]);
    }
    k = whorl_bits_count(plan->free_sites);
    plan->count = k > 62 ? UINT64_MAX : whorl_size_multiply(plan->count, UINT64_C(1) << k);
    if (plan->count >> 63 != 0)
        return whorli_space_too_large(host);
    if (plan->sites <= WHORL_SPACE_SPLIT_SITES) {
        plan->low_sites = plan->sites / 2;
        plan->high_sites = plan->sites - plan->low_sites;
        plan->classes = 1;
        for (k = 0; k < plan->number_count; k++) {
            plan->stride[k] = (uint32_t)plan->classes;
            plan->low_room[k] = whorl_bits_count(plan->numbers[k].mask & whorl_bits_low(plan->low_sites));
            plan->classes *= (uint64_t)plan->low_room[k] + 1;
        }
    }
    return WHORL_OK;
}

static whorl_status whorli_space_check_parity(whorl_host *host, const whorl_space_desc *desc, whorl_space *plan)
{
    plan->parity_mask = desc->parity_mask == 0 ? plan->all : desc->parity_mask;
    plan->parity = desc->parity;
    if ((plan->parity_mask & ~plan->all) != 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "parity_mask has sites beyond the last: keep to bits 0 .. sites - 1");
    if (plan->parity != 0 && plan->parity != 1)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "parity must be 0 (even) or 1 (odd number of down spins)");
    if (plan->sites > 63)
        return whorli_space_too_large(host);
    plan->parity_bit = whorl_bits_lowest(plan->parity_mask);
    plan->free_sites = plan->all & ~plan->parity_mask;
    plan->count = UINT64_C(1) << (plan->sites - 1);
    return WHORL_OK;
}

/*
 * The next larger word that keeps the blockade, bits below `from` left alone (zero): the lowest site that is up and has
 * no down neighbour above it goes down, everything below goes up. WHORL_NONE where there is none.
 */
static uint64_t whorli_space_blockade_next(const uint64_t *neighbours, uint64_t state, int32_t from, uint64_t all)
{
    uint64_t candidates = all & ~state & ~whorl_bits_low(from);
    for (; candidates != 0; candidates &= candidates - 1) {
        int32_t site = whorl_bits_lowest(candidates);
        uint64_t above = state & ~whorl_bits_low(site);
        if ((neighbours[site] & above) == 0)
            return above | UINT64_C(1) << site;
    }
    return WHORL_NONE;
}

/*
 * Counts the states of a blockade. For each configuration of the sites from 12 on, the free ones of the lowest 12 sites
 * are a subset, and the number of configurations within each of the 2^12 subsets stands in a table (8 KB of stack):
 * ways[m] = ways[m without its top site t] + ways[m without t and its neighbours].
 */
#define WHORLI_SPACE_TABLE_SITES 12
static whorl_status whorli_space_count_blockade(whorl_host *host, whorl_space *plan)
{
    uint16_t ways[1 << WHORLI_SPACE_TABLE_SITES];
    int32_t low = plan->sites < WHORLI_SPACE_TABLE_SITES ? plan->sites : WHORLI_SPACE_TABLE_SITES;
    uint64_t subset, high = 0, steps = 0, low_mask = whorl_bits_low(low);
    ways[0] = 1;
    for (subset = 1; subset <= low_mask; subset++) {
        int32_t top = whorl_bits_highest(subset);
        uint64_t rest = subset & ~(UINT64_C(1) << top);
        ways[subset] = (uint16_t)(ways[rest] + ways[rest & ~plan->neighbours[top]]);
    }
    plan->count = 0;
    do {
        uint64_t blocked = 0, sites = high;
        for (; sites != 0; sites &= sites - 1)
            blocked |= plan->neighbours[whorl_bits_lowest(sites)];
        if ((steps++ & 0xfffff) == 0) {
            whorl_status status;
            whorl_stage(host, "counting the states of a blockade", plan->count, 0);
            status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
        }
        plan->count += ways[low_mask & ~blocked];
        if (plan->count > WHORL_SPACE_MOST_STORED)
            return whorl_fail(host, WHORL_TOO_LARGE,
                              "the blockade leaves more than 2^36 states to be stored: add pairs or take fewer sites");
        high = whorli_space_blockade_next(plan->neighbours, high, low, plan->all);
    } while (high != WHORL_NONE);
    return WHORL_OK;
}

static whorl_status whorli_space_check_blockade(whorl_host *host, const whorl_space_desc *desc, whorl_space *plan)
{
    uint64_t k;
    if (desc->pair_count > 0 && desc->pairs == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "pairs is NULL although pair_count is not 0");
    plan->free_sites = plan->all;
    for (k = 0; k < desc->pair_count; k++) {
        int32_t i = desc->pairs[k].i, j = desc->pairs[k].j;
        if (i < 0 || j < 0 || i >= plan->sites || j >= plan->sites || i == j) {
            whorl_text text = whorli_space_blame(host, "pairs", k);
            whorl_text_add(&text, " is (");
            whorl_text_add_signed(&text, i);
            whorl_text_add(&text, ", ");
            whorl_text_add_signed(&text, j);
            whorl_text_add(&text, "): a pair is two different sites from 0 .. ");
            whorl_text_add_signed(&text, plan->sites - 1);
            return WHORL_BAD_ARGUMENT;
        }
        plan->neighbours[i] |= UINT64_C(1) << j;
        plan->neighbours[j] |= UINT64_C(1) << i;
        plan->free_sites &= ~(UINT64_C(1) << i | UINT64_C(1) << j);
    }
    return whorli_space_count_blockade(host, plan);
}

static whorl_status whorli_space_check_list(whorl_host *host, const whorl_space_desc *desc, whorl_space *plan)
{
    uint64_t k;
    if (desc->state_count > 0 && desc->states == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "states is NULL although state_count is not 0");
    for (k = 0; k < desc->state_count; k++)
        if ((desc->states[k] & ~plan->all) != 0) {
            whorl_text text = whorli_space_blame(host, "states", k);
            whorl_text_add(&text, " has bits beyond the last site: keep to bits 0 .. sites - 1");
            return WHORL_BAD_ARGUMENT;
        }
    plan->count = desc->state_count;
    return WHORL_OK;
}

/* Checks a description and fills in everything but the tables. */
static whorl_status whorli_space_check(whorl_host *host, const whorl_space_desc *desc, whorl_space *plan)
{
    whorl_status status = WHORL_OK;
    memset(plan, 0, sizeof *plan);
    if (desc->sites < 1 || desc->sites > WHORL_MOST_SITES) {
        whorl_text text;
        status = desc->sites < 1 ? WHORL_BAD_ARGUMENT : WHORL_TOO_LARGE;
        text = whorl_fail_begin(host, status);
        whorl_text_add(&text, "a space of ");
        whorl_text_add_signed(&text, desc->sites);
        whorl_text_add(&text, " sites was asked for: take 1 to 64");
        return status;
    }
    plan->kind = desc->kind == 0 ? WHORL_SPACE_ALL : desc->kind;
    plan->sites = desc->sites;
    plan->all = whorl_bits_low(desc->sites);
    switch (plan->kind) {
    case WHORL_SPACE_ALL:
        if (plan->sites > 62)
            return whorli_space_too_large(host);
        plan->count = UINT64_C(1) << plan->sites;
        plan->free_sites = plan->all;
        return WHORL_OK;
    case WHORL_SPACE_DOWN: return whorli_space_check_numbers(host, desc, plan);
    case WHORL_SPACE_PARITY: return whorli_space_check_parity(host, desc, plan);
    case WHORL_SPACE_BLOCKADE: status = whorli_space_check_blockade(host, desc, plan); break;
    case WHORL_SPACE_LIST: status = whorli_space_check_list(host, desc, plan); break;
    default:
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "kind is none of the WHORL_SPACE_ constants");
    }
    /* stored states: some four states a bucket if they were spread evenly */
    plan->bucket_bits = whorl_bits_highest(plan->count) < 2 ? 0 : whorl_bits_highest(plan->count) - 2;
    return status;
}

/* ---- >>make ------------------------------------------------------------------------------------------------------ */

/* Measures or carves: the struct, then the tables of its kind, whose places go into *plan. */
static whorl_space *whorli_space_carve(whorl_layout *layout, whorl_space *plan)
{
    whorl_space *space = (whorl_space *)whorl_layout_carve(layout, 1, sizeof *space);
    if (plan->kind == WHORL_SPACE_DOWN && plan->sites <= WHORL_SPACE_SPLIT_SITES) {
        uint64_t lows = UINT64_C(1) << plan->low_sites, highs = UINT64_C(1) << plan->high_sites;
        plan->rank_high = (uint64_t *)whorl_layout_carve(layout, highs + 1, 8);
        plan->rank_low = (uint32_t *)whorl_layout_carve(layout, lows, 4);
        plan->lows = (uint32_t *)whorl_layout_carve(layout, lows, 4);
        plan->class_start = (uint32_t *)whorl_layout_carve(layout, plan->classes + 1, 4);
    } else if (plan->kind == WHORL_SPACE_DOWN) {
        plan->binomials = (uint64_t *)whorl_layout_carve(layout, 65 * 65, 8);
    } else if (plan->kind == WHORL_SPACE_BLOCKADE || plan->kind == WHORL_SPACE_LIST) {
        plan->states = (uint64_t *)whorl_layout_carve(layout, plan->count, 8);
        plan->buckets = (uint64_t *)whorl_layout_carve(layout, (UINT64_C(1) << plan->bucket_bits) + 1, 8);
    }
    return space;
}

/* The class of a low half. */
static uint64_t whorli_space_class_of(const whorl_space *space, uint64_t low)
{
    uint64_t class_index = 0;
    int32_t k;
    for (k = 0; k < space->number_count; k++)
        class_index += (uint64_t)whorl_bits_count(low & space->numbers[k].mask) * space->stride[k];
    return class_index;
}

/* The class of the low halves that complete a high half; WHORL_NONE where none does. */
static uint64_t whorli_space_class_for(const whorl_space *space, uint64_t high)
{
    uint64_t class_index = 0, state = high << space->low_sites;
    int32_t k;
    for (k = 0; k < space->number_count; k++) {
        int32_t need = space->numbers[k].down - whorl_bits_count(state & space->numbers[k].mask);
        if (need < 0 || need > space->low_room[k])
            return WHORL_NONE;
        class_index += (uint64_t)need * space->stride[k];
    }
    return class_index;
}

static void whorli_space_fill_split(whorl_space *space)
{
    uint64_t lows = UINT64_C(1) << space->low_sites, highs = UINT64_C(1) << space->high_sites;
    uint64_t low, high, c, place, total = 0;
    uint32_t *start = space->class_start;
    memset(start, 0, (size_t)(space->classes + 1) * sizeof *start);
    for (low = 0; low < lows; low++)
        start[whorli_space_class_of(space, low) + 1]++;
    for (c = 0; c < space->classes; c++)
        start[c + 1] += start[c];
    for (low = 0; low < lows; low++)
        space->lows[start[whorli_space_class_of(space, low)]++] = (uint32_t)low;
    for (c = space->classes; c > 0; c--) /* each start has moved to the next class's: move back */
        start[c] = start[c - 1];
    start[0] = 0;
    for (c = 0; c < space->classes; c++)
        for (place = start[c]; place < start[c + 1]; place++)
            space->rank_low[space->lows[place]] = (uint32_t)(place - start[c]);
    for (high = 0; high < highs; high++) {
        space->rank_high[high] = total;
        c = whorli_space_class_for(space, high);
        if (c != WHORL_NONE)
            total += start[c + 1] - start[c];
    }
    space->rank_high[highs] = total;
}

static void whorli_space_fill_binomials(whorl_space *space)
{
    int32_t n, k;
    for (n = 0; n <= 64; n++)
        for (k = 0; k <= 64; k++)
            space->binomials[65 * n + k] = whorl_binomial(n, k);
}

static whorl_status whorli_space_fill_blockade(whorl_host *host, whorl_space *space)
{
    uint64_t index, state = 0;
    for (index = 0; index < space->count; index++) {
        if ((index & 0xfffff) == 0) {
            whorl_status status;
            whorl_stage(host, "listing the states of a blockade", index, space->count);
            status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
        }
        space->states[index] = state;
        state = whorli_space_blockade_next(space->neighbours, state, 0, space->all);
    }
    return WHORL_OK;
}

/*
 * Sorts ascending in place by exchange on one bit at a time from the top, ranges still to do on a stack; polled. A
 * range splits into that with bit 0, done next, and that with bit 1, which waits: at most one waits for each bit.
 */
typedef struct whorli_space_range {
    uint64_t from, to;
    int32_t bit;
} whorli_space_range;

static whorl_status whorli_space_sort(whorl_host *host, uint64_t *states, uint64_t count, int32_t sites)
{
    whorli_space_range stack[WHORL_MOST_SITES + 1];
    uint64_t work = UINT64_C(1) << 20;
    int32_t depth = 1;
    stack[0].from = 0;
    stack[0].to = count;
    stack[0].bit = sites - 1;
    while (depth > 0) {
        whorli_space_range range = stack[--depth];
        uint64_t left = range.from, right = range.to;
        if (range.bit < 0 || right - left < 2)
            continue;
        while (left < right) {
            uint64_t state = states[left];
            if (++work > UINT64_C(1) << 20) {
                whorl_status status;
                work = 0;
                whorl_stage(host, "sorting listed states", range.from, count);
                status = whorl_poll(host);
                if (status != WHORL_OK)
                    return status;
            }
            if ((state >> range.bit & 1) == 0) {
                left++;
            } else {
                states[left] = states[--right];
                states[right] = state;
            }
        }
        stack[depth].from = left;
        stack[depth].to = range.to;
        stack[depth++].bit = range.bit - 1;
        stack[depth].from = range.from;
        stack[depth].to = left;
        stack[depth++].bit = range.bit - 1;
    }
    return WHORL_OK;
}

/* The place where a repeated state stands for the second time in the caller's list. */
static whorl_status whorli_space_blame_repeat(whorl_host *host, const whorl_space_desc *desc, uint64_t state)
{
    uint64_t k, seen = 0;
    whorl_text text;
    for (k = 0; k < desc->state_count; k++)
        if (desc->states[k] == state && seen++ == 1)
            break;
    text = whorli_space_blame(host, "states", k);
    whorl_text_add(&text, " repeats the state ");
    whorl_text_add_unsigned(&text, state);
    whorl_text_add(&text, ": list each state once");
    return WHORL_BAD_ARGUMENT;
}

static whorl_status whorli_space_fill_list(whorl_host *host, const whorl_space_desc *desc, whorl_space *space)
{
    uint64_t k, falls = 0;
    whorl_status status;
    for (k = 0; k < space->count; k++) {
        space->states[k] = desc->states[k];
        falls += k > 0 && space->states[k] < space->states[k - 1];
    }
    status = falls == 0 ? whorl_poll(host) : whorli_space_sort(host, space->states, space->count, space->sites);
    if (status != WHORL_OK)
        return status;
    for (k = 1; k < space->count; k++)
        if (space->states[k] == space->states[k - 1])
            return whorli_space_blame_repeat(host, desc, space->states[k]);
    return WHORL_OK;
}

/* Buckets by the top bits of what the largest state needs. */
static void whorli_space_fill_buckets(whorl_space *space)
{
    uint64_t k, bucket = 0, buckets = UINT64_C(1) << space->bucket_bits;
    int32_t width = space->count == 0 ? 0 : whorl_bits_highest(space->states[space->count - 1]) + 1;
    space->bucket_shift = width > space->bucket_bits ? width - space->bucket_bits : 0;
    for (k = 0; k < space->count; k++) {
        /* 64 sites in one bucket: a shift by 64 is not defined */
        uint64_t mine = space->bucket_shift > 63 ? 0 : space->states[k] >> space->bucket_shift;
        for (; bucket <= mine; bucket++)
            space->buckets[bucket] = k;
    }
    for (; bucket <= buckets; bucket++)
        space->buckets[bucket] = space->count;
}

static whorl_status whorli_space_fill(whorl_host *host, const whorl_space_desc *desc, whorl_space *space)
{
    whorl_status status = WHORL_OK;
    switch (space->kind) {
    case WHORL_SPACE_DOWN:
        whorl_stage(host, "tabulating a space of fixed numbers", 0, 1);
        status = whorl_poll(host);
        if (status == WHORL_OK && space->sites <= WHORL_SPACE_SPLIT_SITES)
            whorli_space_fill_split(space);
        else if (status == WHORL_OK)
            whorli_space_fill_binomials(space);
        return status;
    case WHORL_SPACE_BLOCKADE: status = whorli_space_fill_blockade(host, space); break;
    case WHORL_SPACE_LIST: status = whorli_space_fill_list(host, desc, space); break;
    default: return WHORL_OK;
    }
    if (status == WHORL_OK)
        whorli_space_fill_buckets(space);
    return status;
}

whorl_space_desc whorl_space_default(void)
{
    whorl_space_desc desc;
    memset(&desc, 0, sizeof desc);
    return desc;
}

whorl_status whorl_space_bytes(whorl_host *host, const whorl_space_desc *desc, uint64_t *bytes)
{
    whorl_space plan;
    whorl_layout layout = {NULL, 0};
    whorl_status status = whorli_space_check(host, desc, &plan);
    if (status != WHORL_OK)
        return status;
    (void)whorli_space_carve(&layout, &plan);
    *bytes = whorl_block_bytes(layout.bytes);
    return WHORL_OK;
}

whorl_status whorl_space_make(whorl_host *host, const whorl_space_desc *desc, whorl_space **space)
{
    whorl_space plan, *made;
    whorl_layout layout = {NULL, 0};
    whorl_status status;
    *space = NULL;
    status = whorli_space_check(host, desc, &plan);
    if (status != WHORL_OK)
        return status;
    (void)whorli_space_carve(&layout, &plan);
    status = whorl_layout_take(host, &layout, &plan.block);
    if (status != WHORL_OK)
        return status;
    made = whorli_space_carve(&layout, &plan);
    *made = plan;
    status = whorli_space_fill(host, desc, made);
    if (status != WHORL_OK) {
        whorl_block_give(host, &plan.block);
        return status;
    }
    *space = made;
    return WHORL_OK;
}

whorl_status whorl_space_make_all(whorl_host *host, int32_t sites, whorl_space **space)
{
    whorl_space_desc desc = whorl_space_default();
    desc.sites = sites;
    return whorl_space_make(host, &desc, space);
}

whorl_status whorl_space_make_down(whorl_host *host, int32_t sites, int32_t down, whorl_space **space)
{
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number number;
    number.mask = 0;
    number.down = down;
    desc.sites = sites;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = &number;
    desc.number_count = 1;
    return whorl_space_make(host, &desc, space);
}

void whorl_space_free(whorl_host *host, whorl_space *space)
{
    whorl_block block;
    if (space == NULL)
        return;
    block = space->block; /* the struct lies in the block that is given back */
    whorl_block_give(host, &block);
}

/* ---- >>fixed numbers --------------------------------------------------------------------------------------------- */

static uint64_t whorli_space_split_at(const whorl_space *space, uint64_t index)
{
    uint64_t high = 0, step;
    /* the last high half that starts at or before the index */
    for (step = UINT64_C(1) << (space->high_sites - 1); step > 0; step >>= 1)
        if (space->rank_high[high + step] <= index)
            high += step;
    return high << space->low_sites |
           space->lows[space->class_start[whorli_space_class_for(space, high)] + (index - space->rank_high[high])];
}

/* Place of a mask's configuration among those with as many down spins, ascending: the sum over its down spins, the j-th
   from below at place p of the mask, of p choose j (the combinatorial number system; Knuth, vol. 4A, 7.2.1.3). */
static uint64_t whorli_space_rank(const whorl_space *space, uint64_t state, uint64_t mask)
{
    uint64_t down = state & mask, rank = 0;
    int32_t j = 1;
    for (; down != 0; down &= down - 1, j++)
        rank += space->binomials[65 * whorl_bits_count(mask & ((down & (0 - down)) - 1)) + j];
    return rank;
}

static uint64_t whorli_space_unrank(const whorl_space *space, uint64_t rank, uint64_t mask, int32_t down)
{
    uint64_t packed = 0;
    int32_t place = whorl_bits_count(mask);
    for (; down > 0; down--) {
        do
            place--;
        while (space->binomials[65 * place + down] > rank);
        rank -= space->binomials[65 * place + down];
        packed |= UINT64_C(1) << place;
    }
    return whorl_bits_scatter(packed, mask);
}

static uint64_t whorli_space_radix_find(const whorl_space *space, uint64_t state)
{
    uint64_t index = 0;
    int32_t k;
    for (k = space->number_count - 1; k >= 0; k--)
        index = index * space->choices[k] + whorli_space_rank(space, state, space->numbers[k].mask);
    if (space->free_sites != 0) /* never more than 62 of them */
        index = index << whorl_bits_count(space->free_sites) | whorl_bits_gather(state, space->free_sites);
    return index;
}

static uint64_t whorli_space_radix_at(const whorl_space *space, uint64_t index)
{
    uint64_t state = whorl_bits_scatter(index, space->free_sites);
    int32_t k;
    index >>= whorl_bits_count(space->free_sites);
    for (k = 0; k < space->number_count; k++) {
        state |= whorli_space_unrank(space, index % space->choices[k], space->numbers[k].mask, space->numbers[k].down);
        index /= space->choices[k];
    }
    return state;
}

/* The next larger word with as many bits (Gosper's rule; Beeler, Gosper and Schroeppel, HAKMEM, 1972, item 175). */
static uint64_t whorli_space_same_count_next(uint64_t word)
{
    uint64_t carried = word + (word & (0 - word));
    return (((carried ^ word) >> 2) >> whorl_bits_lowest(word)) | carried;
}

static uint64_t whorli_space_down_next(const whorl_space *space, uint64_t index, uint64_t state)
{
    if (space->ascending)
        return whorli_space_same_count_next(state);
    if (space->sites <= WHORL_SPACE_SPLIT_SITES) {
        uint64_t high = state >> space->low_sites;
        if (index + 1 < space->rank_high[high + 1]) {
            uint64_t low = state & whorl_bits_low(space->low_sites);
            return high << space->low_sites |
                   space->lows[space->class_start[whorli_space_class_of(space, low)] + space->rank_low[low] + 1];
        }
        return whorli_space_split_at(space, index + 1);
    }
    if ((~state & space->free_sites) != 0) /* count up within the free sites */
        return (((state | ~space->free_sites) + 1) & space->free_sites) | (state & ~space->free_sites);
    return whorli_space_radix_at(space, index + 1);
}

static int32_t whorli_space_down_has(const whorl_space *space, uint64_t state)
{
    int32_t k;
    for (k = 0; k < space->number_count; k++)
        if (whorl_bits_count(state & space->numbers[k].mask) != space->numbers[k].down)
            return 0;
    return 1;
}

/* ---- >>stored states --------------------------------------------------------------------------------------------- */

static uint64_t whorli_space_stored_find(const whorl_space *space, uint64_t state)
{
    uint64_t bucket = space->bucket_shift > 63 ? 0 : state >> space->bucket_shift, from, to;
    if (bucket >> space->bucket_bits != 0)
        return WHORL_NONE;
    from = space->buckets[bucket];
    to = space->buckets[bucket + 1];
    while (from < to) {
        uint64_t middle = from + (to - from) / 2;
        if (space->states[middle] < state)
            from = middle + 1;
        else
            to = middle;
    }
    return from < space->count && space->states[from] == state ? from : WHORL_NONE;
}

static int32_t whorli_space_blockade_has(const whorl_space *space, uint64_t state)
{
    uint64_t down = state;
    for (; down != 0; down &= down - 1)
        if ((space->neighbours[whorl_bits_lowest(down)] & state) != 0)
            return 0;
    return 1;
}

/* ---- >>states and indices ---------------------------------------------------------------------------------------- */

int32_t whorl_space_sites(const whorl_space *space)
{
    return space->sites;
}

uint64_t whorl_space_count(const whorl_space *space)
{
    return space->count;
}

whorl_space_kind whorl_space_kind_of(const whorl_space *space)
{
    return space->kind;
}

/* Parity: all sites but the lowest of the mask are free and count; that one follows from them. States then ascend. */
static uint64_t whorli_space_parity_at(const whorl_space *space, uint64_t index)
{
    uint64_t below = whorl_bits_low(space->parity_bit);
    uint64_t state = (index & ~below) << 1 | (index & below);
    int32_t odd = whorl_bits_parity(state & space->parity_mask) ^ space->parity;
    return state | (uint64_t)odd << space->parity_bit;
}

uint64_t whorl_space_at(const whorl_space *space, uint64_t index)
{
    if (index >= space->count)
        return WHORL_NONE;
    switch (space->kind) {
    case WHORL_SPACE_ALL: return index;
    case WHORL_SPACE_DOWN:
        return space->sites <= WHORL_SPACE_SPLIT_SITES ? whorli_space_split_at(space, index)
                                                       : whorli_space_radix_at(space, index);
    case WHORL_SPACE_PARITY: return whorli_space_parity_at(space, index);
    default: return space->states[index];
    }
}

uint64_t whorl_space_find(const whorl_space *space, uint64_t state)
{
    if ((state & ~space->all) != 0)
        return WHORL_NONE;
    switch (space->kind) {
    case WHORL_SPACE_ALL: return state;
    case WHORL_SPACE_DOWN:
        if (!whorli_space_down_has(space, state))
            return WHORL_NONE;
        if (space->sites > WHORL_SPACE_SPLIT_SITES)
            return whorli_space_radix_find(space, state);
        return space->rank_high[state >> space->low_sites] +
               space->rank_low[state & whorl_bits_low(space->low_sites)];
    case WHORL_SPACE_PARITY:
        if (whorl_bits_parity(state & space->parity_mask) != space->parity)
            return WHORL_NONE;
        return (state >> 1 & ~whorl_bits_low(space->parity_bit)) | (state & whorl_bits_low(space->parity_bit));
    default: return whorli_space_stored_find(space, state);
    }
}

int32_t whorl_space_has(const whorl_space *space, uint64_t state)
{
    if ((state & ~space->all) != 0)
        return 0;
    switch (space->kind) {
    case WHORL_SPACE_ALL: return 1;
    case WHORL_SPACE_DOWN: return whorli_space_down_has(space, state);
    case WHORL_SPACE_PARITY: return whorl_bits_parity(state & space->parity_mask) == space->parity;
    case WHORL_SPACE_BLOCKADE: return whorli_space_blockade_has(space, state);
    default: return whorli_space_stored_find(space, state) != WHORL_NONE;
    }
}

uint64_t whorl_space_next(const whorl_space *space, uint64_t index, uint64_t state)
{
    if (index >= space->count || index + 1 == space->count)
        return WHORL_NONE;
    switch (space->kind) {
    case WHORL_SPACE_ALL: return index + 1;
    case WHORL_SPACE_DOWN: return whorli_space_down_next(space, index, state);
    case WHORL_SPACE_PARITY: return whorli_space_parity_at(space, index + 1);
    default: return space->states[index + 1];
    }
}

/* ---- >>definition ------------------------------------------------------------------------------------------------ */

int32_t whorl_space_same(const whorl_space *a, const whorl_space *b)
{
    int32_t k;
    if (a == b)
        return 1;
    if (a->kind != b->kind || a->sites != b->sites || a->count != b->count)
        return 0;
    switch (a->kind) {
    case WHORL_SPACE_ALL: return 1;
    case WHORL_SPACE_DOWN:
        if (a->number_count != b->number_count)
            return 0;
        for (k = 0; k < a->number_count; k++)
            if (a->numbers[k].mask != b->numbers[k].mask || a->numbers[k].down != b->numbers[k].down)
                return 0;
        return 1;
    case WHORL_SPACE_PARITY: return a->parity_mask == b->parity_mask && a->parity == b->parity;
    case WHORL_SPACE_BLOCKADE: return memcmp(a->neighbours, b->neighbours, sizeof a->neighbours) == 0;
    default: return a->count == 0 || memcmp(a->states, b->states, (size_t)a->count * 8) == 0;
    }
}

int32_t whorl_space_number_count(const whorl_space *space)
{
    return space->number_count;
}

whorl_down_number whorl_space_number_at(const whorl_space *space, int32_t k)
{
    whorl_down_number none = {0, 0};
    return k >= 0 && k < space->number_count ? space->numbers[k] : none;
}

uint64_t whorl_space_free_sites(const whorl_space *space)
{
    return space->free_sites;
}

uint64_t whorl_space_parity_mask(const whorl_space *space)
{
    return space->parity_mask;
}

int32_t whorl_space_parity(const whorl_space *space)
{
    return space->parity;
}

uint64_t whorl_space_neighbours(const whorl_space *space, int32_t site)
{
    return site >= 0 && site < space->sites ? space->neighbours[site] : 0;
}

const uint64_t *whorl_space_states(const whorl_space *space)
{
    return space->states;
}

/* ---- >>traces ---------------------------------------------------------------------------------------------------- */

/* The sum of absolute values is size choose down, below 2^63: exact. */
static int64_t whorli_space_krawtchouk(int32_t size, int32_t down, int32_t weight)
{
    int64_t total = 0;
    int32_t j;
    for (j = 0; j <= weight && j <= down; j++) {
        uint64_t left = whorl_binomial(weight, j), right = whorl_binomial(size - weight, down - j);
        int64_t term = (int64_t)(left * right);
        total += (j & 1) != 0 ? -term : term;
    }
    return total;
}

static int64_t whorli_space_down_trace(const whorl_space *space, uint64_t z)
{
    int64_t trace = 1;
    int32_t k;
    if ((z & space->free_sites) != 0)
        return 0;
    for (k = 0; k < space->number_count; k++)
        trace *= whorli_space_krawtchouk(whorl_bits_count(space->numbers[k].mask), space->numbers[k].down,
                                         whorl_bits_count(z & space->numbers[k].mask));
    return trace * ((int64_t)1 << whorl_bits_count(space->free_sites));
}

static whorl_status whorli_space_stored_trace(whorl_host *host, const whorl_space *space, uint64_t z, int64_t *trace)
{
    uint64_t k, odd = 0;
    for (k = 0; k < space->count; k++) {
        if ((k & 0xffffff) == 0) {
            whorl_status status;
            whorl_stage(host, "tracing a string over stored states", k, space->count);
            status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
        }
        odd += (uint64_t)whorl_bits_parity(space->states[k] & z);
    }
    *trace = (int64_t)space->count - 2 * (int64_t)odd;
    return WHORL_OK;
}

whorl_status whorl_space_string_trace(whorl_host *host, const whorl_space *space, uint64_t z, double *trace)
{
    int64_t sum = 0;
    whorl_status status = WHORL_OK;
    z &= space->all;
    switch (space->kind) {
    case WHORL_SPACE_ALL: sum = z == 0 ? (int64_t)space->count : 0; break;
    case WHORL_SPACE_DOWN: sum = whorli_space_down_trace(space, z); break;
    case WHORL_SPACE_PARITY:
        if (z == 0)
            sum = (int64_t)space->count;
        else if (z == space->parity_mask)
            sum = space->parity ? -(int64_t)space->count : (int64_t)space->count;
        break;
    default: status = whorli_space_stored_trace(host, space, z, &sum); break;
    }
    if (status == WHORL_OK)
        *trace = (double)sum;
    return status;
}

/* ---- >>describe -------------------------------------------------------------------------------------------------- */

static void whorli_space_describe_number(const whorl_space *space, whorl_text *text)
{
    int32_t k;
    if (space->ascending) {
        int32_t twice = space->sites - 2 * space->numbers[0].down;
        whorl_text_add(text, "S^z = ");
        whorl_text_add_signed(text, (twice & 1) != 0 ? twice : twice / 2);
        whorl_text_add(text, (twice & 1) != 0 ? "/2" : "");
        return;
    }
    for (k = 0; k < space->number_count; k++) {
        whorl_text_add(text, k == 0 ? "" : k + 1 == space->number_count ? " and " : ", ");
        whorl_text_add_signed(text, space->numbers[k].down);
        whorl_text_add(text, " of ");
        whorl_text_add_signed(text, whorl_bits_count(space->numbers[k].mask));
    }
    whorl_text_add(text, " down");
    if (space->free_sites != 0) {
        whorl_text_add(text, ", ");
        whorl_text_add_signed(text, whorl_bits_count(space->free_sites));
        whorl_text_add(text, " free");
    }
}

void whorl_space_describe(const whorl_space *space, whorl_text *text)
{
    switch (space->kind) {
    case WHORL_SPACE_ALL: whorl_text_add(text, "all states"); return;
    case WHORL_SPACE_DOWN: whorli_space_describe_number(space, text); return;
    case WHORL_SPACE_PARITY:
        whorl_text_add(text, space->parity ? "odd number" : "even number");
        if (space->parity_mask != space->all) {
            whorl_text_add(text, " of ");
            whorl_text_add_signed(text, whorl_bits_count(space->parity_mask));
        }
        whorl_text_add(text, " down");
        return;
    case WHORL_SPACE_BLOCKADE: whorl_text_add(text, "blockade, "); break;
    default: whorl_text_add(text, "list, "); break;
    }
    whorl_text_add_unsigned(text, space->count);
    whorl_text_add(text, space->count == 1 ? " state" : " states");
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
