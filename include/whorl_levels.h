/*
 * whorl_levels.h 0.1.0: the whole way in one call: a sum of Pauli strings in, verified levels out.
 *
 *     whorl_levels_desc want = whorl_levels_default();       four eigenpairs of every sector, residual 1e-10
 *     whorl_levels *levels;
 *     status = whorl_levels_make(&host, &sum, &want, &levels);
 *     whorl_level lowest = whorl_levels_at(levels, 0);       energy, residual, multiplicity, S, sector
 *     whorl_levels_free(&host, levels);
 *
 * The method, step by step:
 *   1. Symmetry is found in the Pauli algebra, never from numbers of a spectrum: [H, S^z] = 0 (then sectors are the
 *      numbers of down spins), else down-spin parity Z..Z (two sectors), else all states at once. Spin inversion X..X
 *      and time reversal serve for one thing only: S^z = m and -m are solved once, with weight 2, and the label says
 *      so. [H, S^+] = 0 and [H, S^2] = 0 tell whether a level has a total spin.
 *   2. The sum is made real by a diagonal gauge where there is one.
 *   3. Sector by sector: a small sector is diagonalised whole, from a matrix that is built term by term; of a large one
 *      the outermost eigenpairs come from thick-restart Lanczos, with a fresh random start as a check that none is
 *      missing. Every residual ||Hv - Ev|| is computed with the compiled product, so that for small sectors the two
 *      routes judge each other.
 *   4. S^2 (and S^z where it is good but not used) is diagonalised inside each degenerate level of a sector; a label is
 *      given only if the level is closed under the operator, otherwise it stays unknown. Without eigenvectors S follows
 *      from counting: a level has as many multiplets of spin S as states with S^z = S more than with S^z = S + 1.
 *   5. Eigenpairs of all sectors closer than the merging tolerance are one level; its multiplicity is the number of
 *      vectors found, times the weights of their sectors. A level that a list may have cut off is marked open.
 *   6. Checks: dimensions add up to 2^N; the means of E and of E^2 over each sector that was solved whole are held
 *      against exact traces.
 *
 * It does not: use site permutations or momentum, compute anything at a temperature, print, or find out more about
 * interior levels than the whole spectrum of a sector tells.
 *
 * Memory: the result is one block plus, where eigenvectors are kept, one space a sector; work is taken and given back
 * sector by sector. whorl_levels_bytes announces the peak. Threads: those of the host. Errors: see whorl_levels_make.
 *
 * References: Lin, Phys. Rev. B 42, 6561 (1990) (sectors of fixed magnetisation); Wu and Simon, SIAM J. Matrix Anal.
 * Appl. 22, 602 (2000) (thick restart); NIST Digital Library of Mathematical Functions, 18.19 (Krawtchouk polynomials:
 * traces of Z strings in a sector).
 */
#include "whorl_core.h"
#include "whorl_pauli.h"
#include "whorl_space.h"
#include "whorl_map.h"
#include "whorl_dense.h"
#include "whorl_lanczos.h"
#include "whorl_action.h"

#ifndef WHORL_LEVELS_INCLUDED
#define WHORL_LEVELS_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_levels.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_LEVELS_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- what is wanted ---------------------------------------------------------------------------------------------- */

#define WHORL_LEVELS_WANTED 4          /* eigenpairs a sector, where the desc says 0 */
#define WHORL_LEVELS_DENSE 256         /* dimension up to which a sector is diagonalised whole, where the desc says 0 */
#define WHORL_LEVELS_SECTOR_TEXT 64    /* room of a label, with its NUL */
#define WHORL_LEVELS_MOST_RESOLVED 256 /* states of one degenerate level of a sector in which S^2 is diagonalised */

/* The value of twice_sz and parity where there is no such number. */
#define WHORL_NO_NUMBER INT32_MIN

/* What to compute. Every field at 0 is its default. */
typedef struct whorl_levels_desc {
    int32_t wanted;          /* outermost eigenpairs of each sector (by Lanczos at most 1000); 0: WHORL_LEVELS_WANTED */
    whorl_end end;           /* WHORL_LOWEST or WHORL_HIGHEST */
    int32_t whole;           /* not 0: every eigenpair of every sector (dense: 8 D^2 bytes, time D^3) */
    double tolerance;        /* of Lanczos: residual relative to an estimate of ||H||; 0: 1e-10 */
    uint64_t seed;           /* of its start vectors */
    uint64_t most_products;  /* of each sector; 0: the solver's own limit */
    uint64_t dense;          /* dimension up to which a sector is diagonalised whole; 0: WHORL_LEVELS_DENSE */
    whorl_element element;   /* 0: real double where the sum can be made real, else complex double */
    int32_t vectors;         /* not 0: keep eigenvectors, for whorl_levels_vector */
    int32_t values_only;     /* with `whole`: eigenvalues alone, four times faster; residuals are bounds then */
    int32_t plain;           /* not 0: use no conserved number; all states are one sector */
    int32_t no_labels;       /* not 0: spare the products with S^2 and S^z: twice_spin is unknown everywhere */
    const int32_t *sectors;  /* only these: values of 2 S^z, or parities 0 and 1 where parity is all there is */
    int32_t sector_count;    /* 0 with sectors NULL: all */
    const whorl_space *space; /* solve in this space alone, looking for no sectors; NULL: all states */
    whorl_action_mode mode;   /* of `space`: WHORL_ACTION_PROJECT solves P H P in a constrained space */
} whorl_levels_desc;

/* All zero: four lowest eigenpairs of every sector. */
WHORL_API whorl_levels_desc whorl_levels_default(void);

/* ---- making ------------------------------------------------------------------------------------------------------ */

typedef struct whorl_levels whorl_levels;

/*
 * Solves a Hermitian sum. desc may be NULL: defaults. The sum, desc and its arrays are only read; desc->space must
 * outlive the result. The caller frees *levels with whorl_levels_free on the same host.
 * Returns WHORL_OK; WHORL_NOT_CONVERGED (positive, *levels is made: what converged is in it, the rest of its list is
 * missing and the sector says so); or fails with *levels = NULL: WHORL_BAD_ARGUMENT (desc, the sum, a sector that does
 * not exist), WHORL_NOT_HERMITIAN (the reason names the term), WHORL_NOT_FINITE, WHORL_LEAVES_SPACE (desc->space
 * without WHORL_ACTION_PROJECT), WHORL_TOO_LARGE, WHORL_OVER_LIMIT (says what would be enough), WHORL_NO_MEMORY,
 * WHORL_CANCELLED, WHORL_NO_CONVERGENCE. Cost: about 10 D^3 operations for a sector of dimension D solved whole, some
 * 10 to 100 products an eigenpair otherwise.
 */
WHORL_API whorl_status whorl_levels_make(whorl_host *host, const whorl_sum *sum, const whorl_levels_desc *desc,
                                         whorl_levels **levels);
/*
 * The same for H = sum over k of weights[k] sums[k], sum_count >= 1 sums over the same sites; weights NULL: all 1. Only
 * the whole has to be Hermitian.
 */
WHORL_API whorl_status whorl_levels_make_weighted(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                                  uint64_t sum_count, const whorl_levels_desc *desc,
                                                  whorl_levels **levels);
/*
 * The most memory that the calls above have in use at one time, result included: exact, or a bound of which at least
 * 0.8 is used. Takes memory itself, but none for vectors and matrices: it compiles sector after sector. Errors:
 * as they.
 */
WHORL_API whorl_status whorl_levels_bytes(whorl_host *host, const whorl_sum *sum, const whorl_levels_desc *desc,
                                          uint64_t *bytes);
WHORL_API whorl_status whorl_levels_bytes_weighted(whorl_host *host, const whorl_sum *sums,
                                                   const whorl_complex *weights, uint64_t sum_count,
                                                   const whorl_levels_desc *desc, uint64_t *bytes);
/* Gives everything back; NULL is legal. */
WHORL_API void whorl_levels_free(whorl_host *host, whorl_levels *levels);

/* ---- levels ------------------------------------------------------------------------------------------------------ */

/* Flags of a level. */
enum {
    WHORL_LEVEL_OPEN = 1,   /* the list of some sector ends at or before it: it may have more states */
    WHORL_LEVEL_MIXED = 2   /* its states do not all have one S: see whorl_levels_spin_states */
};

/* Eigenpairs that agree within the merging tolerance. */
typedef struct whorl_level {
    double energy;         /* of its outermost eigenpair */
    double spread;         /* from there to its innermost one, >= 0 */
    double residual;       /* the largest ||Hv - Ev|| of its eigenpairs: a true eigenvalue lies that close to each */
    uint64_t multiplicity; /* states counted, weights of sectors included */
    const char *sector;    /* label of the first sector that has it: for S^z the largest; lives as long as the result */
    uint64_t sector_index; /* of that sector */
    uint64_t sectors;      /* how many of the solved sectors have it */
    int32_t twice_spin;    /* 2 S where H commutes with S^2 and all its states agree, else -1 */
    int32_t twice_sz;      /* 2 S^z where it is good and all its states agree, else WHORL_NO_NUMBER */
    uint32_t flags;
} whorl_level;

/* Levels of all solved sectors, merged, from the outermost inwards. An index past the end gives a level of zeros. */
WHORL_API uint64_t whorl_levels_count(const whorl_levels *levels);
WHORL_API whorl_level whorl_levels_at(const whorl_levels *levels, uint64_t level);
/* How many states of a level have this S, or this S^z; 0 where unknown. Cost: the number of its eigenpairs. */
WHORL_API uint64_t whorl_levels_spin_states(const whorl_levels *levels, uint64_t level, int32_t twice_spin);
WHORL_API uint64_t whorl_levels_sz_states(const whorl_levels *levels, uint64_t level, int32_t twice_sz);

/* The outermost level of all solved sectors. */
typedef struct whorl_ground {
    double energy;
    double residual;
    uint64_t multiplicity;
    int32_t complete;    /* 1: every state of the level was counted (as far as a fresh random start can tell) */
    int32_t gap_known;   /* 1: the next level is known */
    double gap;          /* distance to the next level, >= 0; 0 where it is not known */
    int32_t spin_good; /* 1: H commutes with S^2, and whorl_levels_spin_states(levels, 0, 2 S) counts its eigenvalues */
    int32_t sz_good;   /* 1: H commutes with S^z, and whorl_levels_sz_states(levels, 0, 2 S^z) counts its eigenvalues */
    int32_t least_spin, most_spin; /* smallest and largest 2 S in it; -1 where unknown */
    int32_t least_sz, most_sz;     /* smallest and largest 2 S^z in it; WHORL_NO_NUMBER where not good */
} whorl_ground;
WHORL_API whorl_ground whorl_levels_ground(const whorl_levels *levels);

/* ---- sectors ----------------------------------------------------------------------------------------------------- */

typedef struct whorl_level_sector {
    const char *label;      /* "S^z = 3/2 and -3/2", "even number down", "all states"; lives as long as the result */
    uint64_t dimension;
    uint64_t weight;        /* how many equivalent sectors it stands for: 1 or 2 */
    int32_t twice_sz;       /* 2 S^z >= 0 where weight is 2; WHORL_NO_NUMBER where S^z is not the sector's number */
    int32_t parity;         /* 0 even, 1 odd; WHORL_NO_NUMBER where parity is not the sector's number */
    uint64_t pairs;         /* eigenpairs listed, from the outermost inwards */
    uint64_t levels;        /* levels among them */
    uint64_t products;      /* products H v used */
    int32_t whole;          /* 1: diagonalised whole; 0: Lanczos */
    int32_t converged;      /* 1: as many eigenpairs as wanted */
    int32_t rechecked;      /* 1: nothing further out is missing: solved whole, or a fresh random start found nothing */
    int32_t lean;           /* 1: the byte limit left room for the outermost pair alone, without seeing multiplicity */
    int32_t bounded;        /* 1: residuals are no measurements but the bound 4 D eps norm_bound (values_only) */
    whorl_element element;  /* of the arithmetic */
    double residual;        /* the largest of its list */
    double tolerance;       /* eigenpairs closer than this were taken as degenerate when S was found */
    int32_t traced;         /* 1: the next three are set (sectors solved whole) */
    int32_t square_traced;  /* 1: the three after them are set too */
    double trace, trace_exact, trace_bound;    /* mean of E; (1/D) Tr H by algebra; what may lie between them */
    double square, square_exact, square_bound; /* the same for E^2 and H^2 */
} whorl_level_sector;

/* One eigenpair of a sector. */
typedef struct whorl_level_pair {
    double energy;
    double residual;    /* ||Hv - Ev||, computed with the compiled product (or a bound), plus the symmetry defect */
    int32_t twice_spin; /* 2 S; -1 where unknown */
    int32_t twice_sz;   /* 2 S^z (the one >= 0 in a sector of weight 2); WHORL_NO_NUMBER where not good */
} whorl_level_pair;

/* Sectors in order of increasing number of down spins: the largest S^z first. Past the end: zeros. */
WHORL_API uint64_t whorl_levels_sector_count(const whorl_levels *levels);
WHORL_API whorl_level_sector whorl_levels_sector_at(const whorl_levels *levels, uint64_t sector);
/* Level k = 0 .. sector.levels-1 of one sector: multiplicity within it, without its weight. Past the end: zeros. */
WHORL_API whorl_level whorl_levels_in_sector_at(const whorl_levels *levels, uint64_t sector, uint64_t k);
/* Eigenpair k = 0 .. sector.pairs-1 of one sector. Past the end: zeros. */
WHORL_API whorl_level_pair whorl_levels_pair_at(const whorl_levels *levels, uint64_t sector, uint64_t k);

/*
 * The eigenvector of eigenpair k of a sector, unit norm, in the original basis (no gauge), over the states of
 * whorl_levels_space(levels, sector), elements of type whorl_levels_vector_element: owned by the result. NULL where
 * desc.vectors was not set, or k is past the end or past `wanted`. For the sector -m of a pair of weight 2 flip all
 * spins, and take the complex conjugate where time reversal holds without spin inversion. A vector of a degenerate
 * level need not have the S of its eigenpair: the level as a whole does.
 */
WHORL_API const void *whorl_levels_vector(const whorl_levels *levels, uint64_t sector, uint64_t k);
WHORL_API whorl_element whorl_levels_vector_element(const whorl_levels *levels, uint64_t sector);
WHORL_API const whorl_space *whorl_levels_space(const whorl_levels *levels, uint64_t sector);

/* ---- what was found and checked ---------------------------------------------------------------------------------- */

typedef struct whorl_levels_symmetry {
    int32_t number;      /* 1: [H, S^z] = 0 to 16 eps max|c|, term by term */
    int32_t parity;      /* 1: [H, Z..Z] = 0 exactly */
    int32_t inversion;   /* 1: [H, X..X] = 0 exactly */
    int32_t reversal;    /* 1: invariant under time reversal, exactly: every string acts on an even number of sites */
    int32_t spin;        /* 1: SU(2): [H, S^+] = 0 to 16 eps max|c| */
    int32_t spin_square; /* 1: [H, S^2] = 0, likewise; -1: too many terms to tell */
    int32_t real;        /* 1: real, perhaps after the gauge */
    uint64_t gauge;      /* sites whose spin axes were turned about z by 90 degrees to make it real */
    double defect;       /* bound on ||H - its average over rotations about z||: left out, included in residuals */
} whorl_levels_symmetry;
WHORL_API whorl_levels_symmetry whorl_levels_symmetry_of(const whorl_levels *levels);

typedef struct whorl_levels_checks {
    int32_t all_sectors;       /* 1: every sector was solved, none left out by desc.sectors */
    int32_t dimensions_add; /* 1: sum of dimension * weight over the solved sectors is 2^N (in a given space: its D) */
    uint64_t dimension;        /* that sum, modulo 2^64 */
    int32_t converged;         /* 1: every sector has as many eigenpairs as wanted */
    int32_t rechecked;         /* 1: no sector has reason to believe that one is missing */
    uint64_t traced;           /* sectors whose means were held against exact traces */
    int32_t traces_hold;       /* 1: all of them within their bounds (also if there was none) */
    double worst_trace;        /* the largest |mean - trace| / bound */
    double residual;           /* the largest of all eigenpairs */
    double merge_tolerance;    /* eigenpairs closer than this are one level: 4 residual + 16 eps norm_bound */
    double norm_bound;         /* sum of |coefficient|, bounds ||H|| */
} whorl_levels_checks;
WHORL_API whorl_levels_checks whorl_levels_checks_of(const whorl_levels *levels);

/*
 * Holds the means of E and E^2 of every sector that was solved whole against the exact traces of `sum` instead of those
 * of the sum that was solved: a test of the check, and a way to see that two sums differ. Not for a given space.
 * Writes the largest |mean - trace| / bound to *worst: above 1 the spectra do not belong to this sum.
 * Errors: WHORL_BAD_ARGUMENT (the sum, its sites, a given space), those of making a space; *worst is then unchanged.
 */
WHORL_API whorl_status whorl_levels_hold_against(whorl_host *host, const whorl_levels *levels, const whorl_sum *sum,
                                                 double *worst);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_LEVELS_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_LEVELS_IMPLEMENTED)
#define WHORL_LEVELS_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

#define WHORLI_LEVELS_EPS 2.220446049250313e-16
#define WHORLI_LEVELS_COLUMNS 8                       /* columns of one product when residuals are computed */
#define WHORLI_LEVELS_PRODUCTS (UINT64_C(1) << 28)    /* pairs of strings multiplied at most for one Tr H^2 */
#define WHORLI_LEVELS_PAIRS (UINT64_C(1) << 24)       /* pairs of strings looked at for [H, S^2] */
#define WHORLI_LEVELS_SQUARE_ROOM (UINT64_C(1) << 20) /* strings of that commutator */

/* A sector: what is planned, then what was found. */
typedef struct whorli_level_sector {
    whorl_level_sector facts; /* label is set on the way out */
    char label[WHORL_LEVELS_SECTOR_TEXT];
    int32_t down;             /* number of down spins; -1 where it is not the sector's number */
    int32_t own;              /* 1: `space` was made here and is given back with the result */
    int32_t horizon_known;    /* 0: nothing can lie beyond the list */
    int32_t horizon_beyond;   /* 1: none is missing at the horizon itself, only beyond */
    double horizon;           /* outward energy from which on states may be missing in the list */
    uint64_t room, first;     /* its stretch of the array of pairs */
    uint64_t vector_room;     /* columns kept */
    uint64_t vector_at;       /* offset in bytes */
    const whorl_space *space; /* kept with the vectors */
    whorl_space *made;
} whorli_level_sector;

typedef struct whorli_level_place {
    double outward; /* energy, with its sign changed where the highest are wanted */
    uint64_t pair, sector;
} whorli_level_place;

struct whorl_levels {
    whorl_block block;
    int32_t sites;
    int32_t highest;
    int32_t given;
    whorl_levels_symmetry symmetry;
    whorl_levels_checks checks;
    uint64_t sector_count, pair_room, level_count;
    whorli_level_sector *sectors;
    whorl_level_pair *pairs;     /* of each sector from its `first` on */
    uint64_t *sector_starts;     /* where the levels of each sector begin, likewise */
    whorli_level_place *places;  /* all pairs in outward order */
    uint64_t *starts;            /* where the merged levels begin in it; level_count + 1 of them */
    char *vectors;
};

/* What a call knows before it takes memory for results. */
typedef struct whorli_levels_plan {
    whorl_block block;
    whorl_levels_desc want;  /* defaults filled in */
    whorl_sum sum;           /* merged, tidy, after the gauge */
    whorl_sum spin_square;   /* S^2 */
    whorl_sum spin_z;        /* S^z */
    whorl_levels_symmetry symmetry;
    double norm;
    whorl_element element;
    whorl_action_mode mode;
    int32_t label_spin, label_sz;
    uint64_t sector_count;
    whorli_level_sector *sectors;
    int32_t measuring;
    uint64_t base, pending, peak; /* bytes in use before; bytes that a real run would hold besides; the most */
    uint64_t seen;           /* the highest host->bytes_peak */
} whorli_levels_plan;

/* ---- >>asking ---------------------------------------------------------------------------------------------------- */

whorl_levels_desc whorl_levels_default(void)
{
    whorl_levels_desc desc;
    memset(&desc, 0, sizeof desc);
    return desc;
}

static whorl_status whorli_levels_check_desc(whorl_host *host, const whorl_levels_desc *want, int32_t sites)
{
    if (want->wanted < 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "desc.wanted is negative: give the number of eigenpairs, or 0 for 4");
    if (want->end != WHORL_LOWEST && want->end != WHORL_HIGHEST)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "desc.end must be WHORL_LOWEST or WHORL_HIGHEST");
    if (!whorl_is_finite(want->tolerance) || want->tolerance < 0.0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "desc.tolerance must be a number >= 0; 0 stands for 1e-10");
    if (want->element < WHORL_ELEMENT_DEFAULT || want->element > WHORL_COMPLEX_DOUBLE)
        return whorl_fail(
            host, WHORL_BAD_ARGUMENT,
            "desc.element must be WHORL_REAL_DOUBLE, WHORL_COMPLEX_DOUBLE or 0: levels are found in double");
    if (want->values_only != 0 && (want->whole == 0 || want->vectors != 0))
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "desc.values_only goes with desc.whole and without desc.vectors: set or clear them");
    if (want->sector_count < 0 || (want->sector_count > 0 && want->sectors == NULL))
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "desc.sectors must hold desc.sector_count numbers, or be NULL with 0");
    if (want->space != NULL && whorl_space_sites(want->space) != sites)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "desc.space and the sum must have the same number of sites");
    if (want->mode != WHORL_ACTION_STRICT && want->mode != WHORL_ACTION_PROJECT)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "desc.mode must be WHORL_ACTION_STRICT or WHORL_ACTION_PROJECT");
    return WHORL_OK;
}

static whorl_status whorli_levels_check_sums(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                             uint64_t count, uint64_t *terms)
{
    uint64_t k;
    if (sums == NULL || count == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "give at least one sum");
    for (*terms = 0, k = 0; k < count; k++) {
        whorl_status status = whorl_sum_check(host, sums + k);
        if (status != WHORL_OK)
            return status;
        if (sums[k].sites != sums[0].sites) {
            status = whorl_fail(host, WHORL_BAD_ARGUMENT, "all sums must have the same number of sites");
        } else if (weights != NULL && (!whorl_is_finite(weights[k].re) || !whorl_is_finite(weights[k].im))) {
            status = whorl_fail(host, WHORL_NOT_FINITE, "a weight is not a finite number");
        }
        if (status != WHORL_OK) {
            host->reason.index = k;
            return status;
        }
        *terms = whorl_size_add(*terms, sums[k].count);
    }
    return WHORL_OK;
}

/* "X0 Y3", or "1". */
static void whorli_levels_name_string(whorl_text *text, const whorl_term *term)
{
    uint64_t sites = term->x | term->z;
    if (sites == 0)
        whorl_text_add(text, "1");
    for (; sites != 0; sites &= sites - 1) {
        uint64_t site = sites & (0 - sites);
        whorl_text_add(text, (term->x & site) == 0 ? "Z" : (term->z & site) == 0 ? "X" : "Y");
        whorl_text_add_signed(text, whorl_bits_lowest(site));
        if ((sites & (sites - 1)) != 0)
            whorl_text_add(text, " ");
    }
}

/* Names the first term with an imaginary coefficient, if there is one. */
static whorl_status whorli_levels_check_hermitian(whorl_host *host, const whorl_sum *sum)
{
    uint64_t k;
    for (k = 0; k < sum->count; k++) {
        if (sum->terms[k].im != 0.0) {
            whorl_text text = whorl_fail_begin(host, WHORL_NOT_HERMITIAN);
            host->reason.index = k;
            whorl_text_add(&text, "the coefficient of ");
            whorli_levels_name_string(&text, sum->terms + k);
            whorl_text_add(&text, " has the imaginary part ");
            whorl_text_add_real(&text, sum->terms[k].im);
            whorl_text_add(&text, ": add the adjoint, so that the sum becomes Hermitian");
            return WHORL_NOT_HERMITIAN;
        }
    }
    return WHORL_OK;
}

/* ---- >>symmetry -------------------------------------------------------------------------------------------------- */

static int32_t whorli_levels_compare(uint64_t a, uint64_t b)
{
    return (a > b) - (a < b);
}

static int32_t whorli_levels_order_strings(const void *left, const void *right)
{
    const whorl_term *a = (const whorl_term *)left, *b = (const whorl_term *)right;
    int32_t order = whorli_levels_compare(a->x, b->x);
    return order != 0 ? order : whorli_levels_compare(a->z, b->z);
}

static int32_t whorli_levels_order_supports(const void *left, const void *right)
{
    const whorl_term *a = (const whorl_term *)left, *b = (const whorl_term *)right;
    int32_t order = whorli_levels_compare(a->x | a->z, b->x | b->z);
    return order != 0 ? order : whorli_levels_order_strings(left, right);
}

/* Adds equal strings up; returns the sum of the squares, and the largest |coefficient| so far in *most. */
static double whorli_levels_add_up(whorl_term *list, uint64_t count, double *most)
{
    double squares = 0.0;
    uint64_t i = 0;
    whorl_sort(list, count, sizeof *list, whorli_levels_order_strings);
    while (i < count) {
        double total = list[i].re;
        uint64_t j = i + 1;
        for (; j < count && list[j].x == list[i].x && list[j].z == list[i].z; j++)
            total += list[j].re;
        squares += total * total;
        if (fabs(total) > *most)
            *most = fabs(total);
        i = j;
    }
    return squares;
}

/*
 * The strings of [P, sum_i A_i] / 2i for A = Z (axis 'z') or X: for each site where they anticommute, P A_i / i, which
 * turns X into -Y, Y into X (by Z) and Z into Y, Y into -Z (by X). The support of P stays.
 */
static uint64_t whorli_levels_turn(const whorl_term *term, char axis, whorl_term *list)
{
    uint64_t sites = axis == 'z' ? term->x : term->z, count = 0;
    for (; sites != 0; sites &= sites - 1, count++) {
        uint64_t site = sites & (0 - sites);
        int32_t y = (term->x & term->z & site) != 0;
        list[count] = *term;
        if (axis == 'z')
            list[count].z ^= site;
        else
            list[count].x ^= site;
        if (y == (axis != 'z'))
            list[count].re = -term->re;
    }
    return count;
}

/* Where the terms of the same support as number `first` end, and how many strings their commutators have at most. */
static uint64_t whorli_levels_support_end(const whorl_term *terms, uint64_t count, uint64_t first, uint64_t *strings)
{
    uint64_t support = terms[first].x | terms[first].z, end = first;
    while (end < count && (terms[end].x | terms[end].z) == support)
        end++;
    *strings = whorl_size_multiply(end - first, (uint64_t)whorl_bits_count(support));
    return end;
}

/*
 * [H, sum_i A_i / 2] from terms sorted by support: returns its largest |coefficient|. *defect bounds, for A = Z, the
 * operator norm of the part of H that changes S^z: that part has charges |q| >= 1, so support by support its Frobenius
 * norm is at most that of the commutator, and an operator on w sites has at most 2^(w/2) times its normalised one.
 */
static double whorli_levels_commutator(const whorl_term *terms, uint64_t count, char axis, whorl_term *list,
                                       double *defect)
{
    uint64_t first = 0;
    double most = 0.0;
    *defect = 0.0;
    while (first < count) {
        uint64_t strings, end = whorli_levels_support_end(terms, count, first, &strings), used = 0;
        int32_t weight = whorl_bits_count(terms[first].x | terms[first].z);
        double norm;
        for (; first < end; first++)
            used += whorli_levels_turn(terms + first, axis, list + used);
        norm = sqrt(whorli_levels_add_up(list, used, &most));
        for (; weight > 0; weight--)
            norm *= 1.4142135623730951;
        *defect += norm;
    }
    return most;
}

static int32_t whorli_levels_anticommute(const whorl_term *a, const whorl_term *b)
{
    return whorl_bits_parity(a->x & b->z) ^ whorl_bits_parity(a->z & b->x);
}

/* How many strings [a, b] has before equal ones are added; stops counting at `most`. */
static uint64_t whorli_levels_bracket_count(const whorl_sum *a, const whorl_sum *b, uint64_t most)
{
    uint64_t i, j, count = 0;
    for (i = 0; i < a->count && count < most; i++)
        for (j = 0; j < b->count; j++)
            count += (uint64_t)whorli_levels_anticommute(a->terms + i, b->terms + j);
    return count;
}

/* The largest |coefficient| of [a, b] / 2i for real coefficients. */
static double whorli_levels_bracket(const whorl_sum *a, const whorl_sum *b, whorl_term *list)
{
    uint64_t i, j, count = 0;
    double most = 0.0;
    for (i = 0; i < a->count; i++)
        for (j = 0; j < b->count; j++) {
            const whorl_term *p = a->terms + i, *q = b->terms + j;
            whorl_term *r = list + count;
            int32_t quarter;
            if (!whorli_levels_anticommute(p, q))
                continue;
            /* P Q = i^quarter R, an odd power */
            r->x = p->x ^ q->x;
            r->z = p->z ^ q->z;
            quarter = whorl_bits_count(p->x & p->z) + whorl_bits_count(q->x & q->z) +
                      2 * whorl_bits_count(p->z & q->x) - whorl_bits_count(r->x & r->z);
            r->re = (quarter & 3) == 1 ? p->re * q->re : -(p->re * q->re);
            count++;
        }
    (void)whorli_levels_add_up(list, count, &most);
    return most;
}

/* What is exact: parity, inversion, time reversal (it turns each Pauli matrix round); and the largest |coefficient|. */
static double whorli_levels_simple_symmetry(const whorl_sum *sum, whorl_levels_symmetry *found)
{
    double largest = 0.0;
    uint64_t k;
    found->parity = found->inversion = found->reversal = 1;
    for (k = 0; k < sum->count; k++) {
        const whorl_term *term = sum->terms + k;
        if (whorl_bits_parity(term->x))
            found->parity = 0;
        if (whorl_bits_parity(term->z))
            found->inversion = 0;
        if ((whorl_bits_count(term->x | term->z) & 1) != 0)
            found->reversal = 0;
        if (fabs(term->re) > largest)
            largest = fabs(term->re);
    }
    return largest;
}

/*
 * Fills in the symmetry but for the gauge. One block: the terms by support, and the strings of one commutator (those of
 * one support at a time; for [H, S^2] all of them, where they are not too many).
 */
static whorl_status whorli_levels_find_symmetry(whorl_host *host, whorli_levels_plan *plan)
{
    const whorl_sum *sum = &plan->sum;
    whorl_levels_symmetry *found = &plan->symmetry;
    double largest = whorli_levels_simple_symmetry(sum, found), small = 16.0 * WHORLI_LEVELS_EPS * largest, ignored;
    uint64_t first, strings, room = 0, square_room = 0;
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_term *by_support = NULL, *list = NULL;
    whorl_status status;
    int32_t pass;
    if (whorl_size_multiply(sum->count, plan->spin_square.count) <= WHORLI_LEVELS_PAIRS)
        square_room = whorli_levels_bracket_count(sum, &plan->spin_square, WHORLI_LEVELS_SQUARE_ROOM);
    else
        square_room = UINT64_MAX;
    room = square_room < WHORLI_LEVELS_SQUARE_ROOM ? square_room : 0;
    for (first = 0; first < sum->count; first++) {
        /* a bound that needs no sorting yet: all terms of one weight w could share a support, 4^w of them at most */
        uint64_t weight = (uint64_t)whorl_bits_count(sum->terms[first].x | sum->terms[first].z);
        uint64_t alike = weight < 16 ? UINT64_C(1) << (2 * weight) : UINT64_MAX;
        strings = whorl_size_multiply(alike < sum->count ? alike : sum->count, weight);
        if (strings > room)
            room = strings;
    }
    for (pass = 0; pass < 2; pass++) {
        by_support = (whorl_term *)whorl_layout_carve(&layout, sum->count, sizeof(whorl_term));
        list = (whorl_term *)whorl_layout_carve(&layout, room, sizeof(whorl_term));
        if (pass == 0 && (status = whorl_layout_take(host, &layout, &block)) != WHORL_OK)
            return status;
    }
    plan->peak = host->bytes_used - plan->base;
    if (sum->count > 0)
        memcpy(by_support, sum->terms, (size_t)sum->count * sizeof(whorl_term));
    whorl_sort(by_support, sum->count, sizeof(whorl_term), whorli_levels_order_supports);
    found->number = whorli_levels_commutator(by_support, sum->count, 'z', list, &found->defect) <= small;
    found->spin = found->number && whorli_levels_commutator(by_support, sum->count, 'x', list, &ignored) <= small;
    found->defect = found->number ? found->defect : 0.0;
    found->spin_square = found->spin ? 1 : -1;
    if (!found->spin && square_room < WHORLI_LEVELS_SQUARE_ROOM)
        found->spin_square = whorli_levels_bracket(sum, &plan->spin_square, list) <= small;
    whorl_block_give(host, &block);
    return whorl_poll(host);
}

/*
 * Chooses the element type, turning the sum real where a gauge can do it and it leaves S^2 as it is: S^2 is invariant
 * under a rotation of all sites, and where S^2 is not wanted the gauge is free.
 */
static whorl_status whorli_levels_choose_element(whorl_host *host, whorli_levels_plan *plan)
{
    int32_t real = whorl_sum_is_real(&plan->sum);
    plan->element = plan->want.element == WHORL_COMPLEX_DOUBLE ? WHORL_COMPLEX_DOUBLE : WHORL_REAL_DOUBLE;
    plan->symmetry.real = real;
    if (!real) {
        uint64_t gauge;
        whorl_status status = whorl_sum_real_gauge(host, &plan->sum, &gauge);
        if (status != WHORL_OK)
            return status;
        plan->symmetry.real = gauge != WHORL_NONE;
        if (gauge != WHORL_NONE && plan->element == WHORL_REAL_DOUBLE &&
            (!plan->label_spin || gauge == whorl_bits_low(plan->sum.sites))) {
            plan->symmetry.gauge = gauge;
            return whorl_sum_rotate(host, &plan->sum, gauge);
        }
        if (plan->want.element == WHORL_REAL_DOUBLE && gauge == WHORL_NONE)
            return whorl_fail(host, WHORL_BAD_ARGUMENT,
                              "no gauge makes the sum real: set desc.element to WHORL_COMPLEX_DOUBLE or 0");
        if (plan->want.element == WHORL_REAL_DOUBLE)
            return whorl_fail(
                host, WHORL_BAD_ARGUMENT,
                "the gauge that makes the sum real would hide S: set desc.no_labels, or desc.element to 0");
        plan->element = WHORL_COMPLEX_DOUBLE;
    }
    return WHORL_OK;
}

/* ---- >>sectors --------------------------------------------------------------------------------------------------- */

static int32_t whorli_levels_selected(const whorl_levels_desc *want, int32_t number)
{
    int32_t k;
    if (want->sector_count == 0)
        return 1;
    for (k = 0; k < want->sector_count; k++)
        if (want->sectors[k] == number)
            return 1;
    return 0;
}

static whorl_status whorli_levels_check_selection(whorl_host *host, const whorli_levels_plan *plan)
{
    const whorl_levels_desc *want = &plan->want;
    int32_t k, sites = plan->sum.sites, by_number = plan->symmetry.number && !want->plain && want->space == NULL;
    int32_t by_parity = !by_number && plan->symmetry.parity && !want->plain && want->space == NULL;
    for (k = 0; k < want->sector_count; k++) {
        int32_t number = want->sectors[k];
        int32_t good = by_number ? number >= -sites && number <= sites && ((number ^ sites) & 1) == 0
                                 : by_parity && (number == 0 || number == 1);
        if (!good) {
            whorl_text text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
            host->reason.index = (uint64_t)k;
            whorl_text_add(&text, "there is no sector ");
            whorl_text_add_signed(&text, number);
            whorl_text_add(&text, by_number ? ": give values of 2 S^z from -N to N in steps of 2"
                                  : by_parity ? ": give 0 for an even, 1 for an odd number of down spins"
                                              : ": all states are one sector here, so leave desc.sectors NULL");
            return WHORL_BAD_ARGUMENT;
        }
    }
    return WHORL_OK;
}

/* Adds a sector to the plan. */
static whorli_level_sector *whorli_levels_add_sector(whorli_levels_plan *plan, uint64_t dimension, uint64_t weight)
{
    const whorl_levels_desc *want = &plan->want;
    whorli_level_sector *sector = plan->sectors + plan->sector_count++;
    uint64_t wanted = (uint64_t)want->wanted < dimension ? (uint64_t)want->wanted : dimension;
    memset(sector, 0, sizeof *sector);
    sector->down = -1;
    sector->facts.dimension = dimension;
    sector->facts.weight = weight;
    sector->facts.twice_sz = sector->facts.parity = WHORL_NO_NUMBER;
    sector->facts.whole = want->whole != 0 || dimension <= want->dense;
    sector->facts.element = plan->element;
    sector->room = sector->facts.whole ? dimension : wanted;
    sector->vector_room = want->vectors == 0 ? 0 : want->whole != 0 ? dimension : wanted;
    return sector;
}

static void whorli_levels_plan_numbers(whorli_levels_plan *plan)
{
    int32_t down, sites = plan->sum.sites;
    for (down = 0; down <= sites; down++) {
        int32_t twice_sz = sites - 2 * down;
        int32_t mirrored = (plan->symmetry.inversion || plan->symmetry.reversal) && twice_sz != 0 &&
                           whorli_levels_selected(&plan->want, -twice_sz);
        whorli_level_sector *sector;
        if (!whorli_levels_selected(&plan->want, twice_sz) || (mirrored && twice_sz < 0))
            continue;
        sector = whorli_levels_add_sector(plan, whorl_binomial(sites, down), mirrored ? 2 : 1);
        sector->down = down;
        sector->facts.twice_sz = twice_sz;
    }
}

static void whorli_levels_plan_parities(whorli_levels_plan *plan)
{
    int32_t parity;
    for (parity = 0; parity < 2; parity++)
        if (whorli_levels_selected(&plan->want, parity))
            whorli_levels_add_sector(plan, UINT64_C(1) << (plan->sum.sites - 1), 1)->facts.parity = parity;
}

static whorl_status whorli_levels_plan_sectors(whorl_host *host, whorli_levels_plan *plan)
{
    const whorl_levels_desc *want = &plan->want;
    int32_t sites = plan->sum.sites;
    uint64_t k, bytes = 0, pairs = 0;
    whorl_status status = whorli_levels_check_selection(host, plan);
    if (status != WHORL_OK)
        return status;
    if (!plan->symmetry.number || want->plain != 0 || want->space != NULL)
        plan->symmetry.defect = 0.0; /* nothing is left out */
    plan->mode = plan->symmetry.defect > 0.0 ? WHORL_ACTION_PROJECT : WHORL_ACTION_STRICT;
    if (want->space != NULL) {
        plan->mode = want->mode;
        (void)whorli_levels_add_sector(plan, whorl_space_count(want->space), 1);
    } else if (plan->symmetry.number && want->plain == 0) {
        whorli_levels_plan_numbers(plan);
    } else if (plan->symmetry.parity && want->plain == 0) {
        whorli_levels_plan_parities(plan);
    } else {
        (void)whorli_levels_add_sector(plan, sites > 63 ? UINT64_MAX : UINT64_C(1) << sites, 1);
    }
    for (k = 0; k < plan->sector_count; k++) {
        whorli_level_sector *sector = plan->sectors + k;
        uint64_t element = plan->symmetry.gauge != 0 ? 16 : whorl_element_bytes(plan->element);
        sector->first = pairs;
        sector->vector_at = bytes;
        pairs = whorl_size_add(pairs, sector->room);
        bytes = whorl_size_add(bytes, whorl_size_multiply(whorl_size_multiply(sector->facts.dimension, element),
                                                          sector->vector_room));
    }
    return pairs == UINT64_MAX || bytes == UINT64_MAX
               ? whorl_fail(host, WHORL_TOO_LARGE,
                            "the results asked for exceed the address space: ask for fewer levels")
               : WHORL_OK;
}

/* ---- >>planning -------------------------------------------------------------------------------------------------- */

static uint64_t whorli_levels_spin_terms(int32_t sites)
{
    return (uint64_t)(3 * sites * (sites - 1) / 2 + 1);
}

/* S^2 = 3N/4 + 2 sum over pairs of S_i.S_j, and S^z. */
static whorl_status whorli_levels_spin_sums(whorl_host *host, whorli_levels_plan *plan, int32_t sites,
                                            whorl_term *square, whorl_term *z)
{
    uint64_t used = whorl_terms_number(square, 0.75 * sites), count = 0;
    whorl_status status;
    int32_t i, j;
    for (i = 0; i < sites; i++) {
        count += whorl_terms_string(z + count, 0, UINT64_C(1) << i, 0.5);
        for (j = i + 1; j < sites; j++)
            used += whorl_terms_exchange(square + used, i, j, 2.0);
    }
    status = whorl_sum_from_terms(host, sites, square, used, &plan->spin_square);
    return status != WHORL_OK ? status : whorl_sum_from_terms(host, sites, z, count, &plan->spin_z);
}

static whorl_status whorli_levels_merge_sums(whorl_host *host, whorli_levels_plan *plan, const whorl_sum *sums,
                                             const whorl_complex *weights, uint64_t count, whorl_term *terms)
{
    uint64_t k, i, used = 0;
    whorl_status status;
    for (k = 0; k < count; k++)
        for (i = 0; i < sums[k].count; i++) {
            whorl_term term = sums[k].terms[i];
            if (weights != NULL) {
                whorl_complex c = whorl_complex_multiply(weights[k], whorl_complex_of(term.re, term.im));
                term.re = c.re;
                term.im = c.im;
            }
            terms[used++] = term;
        }
    status = whorl_sum_from_terms(host, sums[0].sites, terms, used, &plan->sum);
    return status != WHORL_OK ? status : whorli_levels_check_hermitian(host, &plan->sum);
}

static whorl_status whorli_levels_fill_plan(whorl_host *host, whorli_levels_plan *plan)
{
    const whorl_levels_desc *want = &plan->want;
    whorl_status status;
    plan->norm = whorl_sum_norm_bound(&plan->sum);
    if (!whorl_is_finite(plan->norm))
        return whorl_fail(host, WHORL_NOT_FINITE,
                          "the coefficients are so large that their sum overflows: scale them down");
    if ((status = whorli_levels_find_symmetry(host, plan)) != WHORL_OK)
        return status;
    if (want->no_labels == 0 && want->values_only == 0) {
        plan->label_spin = plan->symmetry.spin_square == 1 && want->space == NULL;
        plan->label_sz = plan->symmetry.number && (want->space != NULL || want->plain != 0);
    }
    if ((status = whorli_levels_choose_element(host, plan)) != WHORL_OK)
        return status;
    return whorli_levels_plan_sectors(host, plan);
}

/* Checks everything, takes the block of the plan, and fills it. On failure the block is given back. */
static whorl_status whorli_levels_make_plan(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                            uint64_t count, const whorl_levels_desc *desc, whorli_levels_plan *plan)
{
    whorl_layout layout = {NULL, 0};
    whorl_term *terms = NULL, *square = NULL, *z = NULL;
    uint64_t total = 0;
    whorl_status status = whorli_levels_check_sums(host, sums, weights, count, &total);
    int32_t pass;
    memset(plan, 0, sizeof *plan);
    plan->base = host->bytes_used;
    plan->want = desc == NULL ? whorl_levels_default() : *desc;
    plan->want.wanted = plan->want.wanted == 0 ? WHORL_LEVELS_WANTED : plan->want.wanted;
    plan->want.dense = plan->want.dense == 0 ? WHORL_LEVELS_DENSE : plan->want.dense;
    if (status == WHORL_OK)
        status = whorli_levels_check_desc(host, &plan->want, sums[0].sites);
    if (status != WHORL_OK)
        return status;
    for (pass = 0; pass < 2; pass++) {
        terms = (whorl_term *)whorl_layout_carve(&layout, total, sizeof *terms);
        square = (whorl_term *)whorl_layout_carve(&layout, whorli_levels_spin_terms(sums[0].sites), sizeof *terms);
        z = (whorl_term *)whorl_layout_carve(&layout, (uint64_t)sums[0].sites, sizeof *terms);
        plan->sectors = (whorli_level_sector *)whorl_layout_carve(&layout, (uint64_t)sums[0].sites + 1,
                                                                  sizeof *plan->sectors);
        if (pass == 0 && (status = whorl_layout_take(host, &layout, &plan->block)) != WHORL_OK)
            return status;
    }
    status = whorli_levels_merge_sums(host, plan, sums, weights, count, terms);
    if (status == WHORL_OK)
        status = whorli_levels_spin_sums(host, plan, sums[0].sites, square, z);
    if (status == WHORL_OK)
        status = whorli_levels_fill_plan(host, plan);
    if (status != WHORL_OK)
        whorl_block_give(host, &plan->block);
    return status;
}

/* ---- >>measuring ------------------------------------------------------------------------------------------------- */

/*
 * While measuring, the same objects are made as in a real run but for results, matrices and vectors: those are
 * announced as `extra` here, and what a real run would still hold from before as plan->pending.
 */
static void whorli_levels_note(whorl_host *host, whorli_levels_plan *plan, uint64_t extra)
{
    uint64_t held = whorl_size_add(host->bytes_used - plan->base, plan->pending);
    uint64_t most = whorl_size_add(host->bytes_peak - plan->base, plan->pending);
    extra = whorl_size_add(held, extra);
    if (host->bytes_peak > plan->seen)
        plan->seen = host->bytes_peak;
    if (most > plan->peak)
        plan->peak = most;
    if (extra > plan->peak)
        plan->peak = extra;
    host->bytes_peak = host->bytes_used;
}

/* ---- >>columns --------------------------------------------------------------------------------------------------- */

/* Eigenvectors of a sector, wherever they are: columns of a matrix (ascending), or in a solver (outermost first). */
typedef struct whorli_levels_columns {
    const char *matrix;
    const whorl_lanczos *lanczos;
    uint64_t dimension;
    whorl_element element;
    int32_t reversed;
} whorli_levels_columns;

static whorli_levels_columns whorli_levels_no_columns(const whorli_levels_plan *plan, const whorli_level_sector *sector)
{
    whorli_levels_columns columns;
    memset(&columns, 0, sizeof columns);
    columns.dimension = sector->facts.dimension;
    columns.element = plan->element;
    columns.reversed = plan->want.end == WHORL_HIGHEST;
    return columns;
}

static const void *whorli_levels_column(const whorli_levels_columns *columns, uint64_t k)
{
    if (columns->matrix == NULL)
        return whorl_lanczos_vector(columns->lanczos, (int32_t)k);
    if (columns->reversed)
        k = columns->dimension - 1 - k;
    return columns->matrix + k * columns->dimension * whorl_element_bytes(columns->element);
}

/* y -= energy v, and the norm of what is left. */
static double whorli_levels_residual(const whorli_levels_columns *columns, double energy, const void *v, void *y)
{
    uint64_t i, reals = columns->dimension * (whorl_element_is_complex(columns->element) ? 2 : 1);
    const double *from = (const double *)v;
    double *to = (double *)y;
    for (i = 0; i < reals; i++)
        to[i] -= energy * from[i];
    return sqrt(whorl_dot(columns->element, y, y, columns->dimension).re);
}

/* Copies a vector to the results, back through the gauge: v(s) becomes i^popcount(gauge & s) v(s). */
static void whorli_levels_keep_vector(const whorli_levels_plan *plan, const whorl_space *space,
                                      const whorli_levels_columns *columns, const void *v, void *to)
{
    uint64_t i, state, gauge = plan->symmetry.gauge;
    const double *real = (const double *)v;
    double *out = (double *)to;
    if (gauge == 0) {
        memcpy(to, v, (size_t)(columns->dimension * whorl_element_bytes(columns->element)));
        return;
    }
    state = whorl_space_at(space, 0);
    for (i = 0; i < columns->dimension; state = whorl_space_next(space, i, state), i++) {
        int32_t quarter = whorl_bits_count(gauge & state) & 3;
        double value = quarter < 2 ? real[i] : -real[i];
        out[2 * i] = (quarter & 1) == 0 ? value : 0.0;
        out[2 * i + 1] = (quarter & 1) != 0 ? value : 0.0;
    }
}

/* ---- >>labels ---------------------------------------------------------------------------------------------------- */

static whorl_status whorli_levels_operator(whorl_host *host, const whorl_sum *sum, const whorl_space *space,
                                           whorl_action_mode mode, whorl_element element, whorl_action **action)
{
    whorl_action_desc desc = whorl_action_default();
    desc.sums = sum;
    desc.sum_count = 1;
    desc.source = space;
    desc.mode = mode;
    desc.element = element;
    return whorl_action_make(host, &desc, action);
}

/* Work for one label: the operator inside one degenerate level, its eigenvalues, and one vector. */
typedef struct whorli_levels_label_work {
    double *inside, *values;
    void *image;
} whorli_levels_label_work;

static void whorli_levels_label_layout(whorl_layout *layout, const whorli_levels_columns *columns, uint64_t most,
                                       whorli_levels_label_work *work)
{
    work->inside = (double *)whorl_layout_carve(layout, most * most, whorl_element_bytes(columns->element));
    work->values = (double *)whorl_layout_carve(layout, most, sizeof(double));
    work->image = whorl_layout_carve(layout, columns->dimension, whorl_element_bytes(columns->element));
}

static uint64_t whorli_levels_dense_bytes(whorl_element element, uint64_t n, int32_t vectors)
{
    return whorl_element_is_complex(element) ? whorl_dense_hermitian_bytes(n, vectors)
                                             : whorl_dense_symmetric_bytes(n, vectors);
}

static whorl_status whorli_levels_small_values(whorl_host *host, whorl_element element, uint64_t n, double *a,
                                               double *values)
{
    return whorl_element_is_complex(element) ? whorl_dense_hermitian(host, n, a, values, 0)
                                             : whorl_dense_symmetric(host, n, a, values, 0);
}

/*
 * Eigenvalues of the operator inside the span of eigenvectors first .. first + count - 1. *leak is the largest squared
 * norm by which one of them is led out of the span.
 */
static whorl_status whorli_levels_resolve(whorl_host *host, const whorl_map *map, const whorli_levels_columns *columns,
                                          uint64_t first, uint64_t count, const whorli_levels_label_work *work,
                                          double *leak)
{
    uint64_t i, j, n = columns->dimension, width = whorl_element_is_complex(columns->element) ? 2 : 1;
    whorl_status status;
    *leak = 0.0;
    for (j = 0; j < count; j++) {
        whorl_complex c;
        double out = 0.0;
        status = whorl_map_apply(host, map, whorli_levels_column(columns, first + j), work->image, 1);
        if (status == WHORL_OK)
            status = whorl_vector_norm(host, columns->element, n, work->image, &out);
        for (out *= out, i = 0; i < count && status == WHORL_OK; i++) {
            const void *v = whorli_levels_column(columns, first + i);
            double *at = work->inside + width * (i + j * count);
            status = whorl_vector_dot(host, columns->element, n, v, work->image, &c);
            if (status != WHORL_OK)
                break;
            out -= c.re * c.re + c.im * c.im;
            at[0] = c.re;
            if (width == 2)
                at[1] = c.im;
        }
        if (status != WHORL_OK)
            return status;
        if (out > *leak)
            *leak = out;
    }
    return whorli_levels_small_values(host, columns->element, count, work->inside, work->values);
}

/* 2 S from S (S + 1), or 2 S^z from S^z, of so many spins; `unknown` where the value is no eigenvalue. */
static int32_t whorli_levels_number(double value, int32_t spin, int32_t sites, int32_t unknown)
{
    double twice = spin ? sqrt(1.0 + 4.0 * (value > -0.25 ? value : -0.25)) - 1.0 : 2.0 * value;
    double whole = floor(twice + 0.5), exact = spin ? whole * (whole + 2.0) / 4.0 : whole / 2.0;
    int32_t number;
    if (!(whole >= (spin ? 0.0 : -(double)sites) && whole <= (double)sites) || fabs(value - exact) > 0.01)
        return unknown;
    number = (int32_t)whole;
    return ((number ^ sites) & 1) == 0 ? number : unknown;
}

/* Where the level that begins with pair `first` ends: neighbours within the tolerance. */
static uint64_t whorli_levels_end(const whorl_level_pair *pairs, uint64_t count, uint64_t first, double tolerance)
{
    uint64_t end = first + 1;
    while (end < count && fabs(pairs[end].energy - pairs[end - 1].energy) <= tolerance)
        end++;
    return end;
}

/* Writes twice_spin (or twice_sz) of every pair of a sector. A level of too many states is resolved state by state. */
static whorl_status whorli_levels_label_pairs(whorl_host *host, const whorli_levels_plan *plan, const whorl_map *map,
                                              const whorli_levels_columns *columns, whorl_level_pair *pairs,
                                              const whorl_level_sector *facts, int32_t spin,
                                              const whorli_levels_label_work *work, uint64_t most)
{
    uint64_t first = 0, k;
    while (first < facts->pairs) {
        uint64_t end = whorli_levels_end(pairs, facts->pairs, first, facts->tolerance);
        for (; first < end;) {
            uint64_t part = end - first <= most ? end - first : 1;
            double leak;
            whorl_status status = whorli_levels_resolve(host, map, columns, first, part, work, &leak);
            if (status == WHORL_OK)
                status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
            for (k = 0; k < part; k++) {
                int32_t unknown = spin ? -1 : WHORL_NO_NUMBER;
                int32_t number =
                    leak <= 1e-4 ? whorli_levels_number(work->values[k], spin, plan->sum.sites, unknown) : unknown;
                if (spin)
                    pairs[first + k].twice_spin = number;
                else
                    pairs[first + k].twice_sz = number;
            }
            first += part;
        }
    }
    return WHORL_OK;
}

/* What labels the pairs of one sector: the compiled operators, and the bytes that using them takes. */
typedef struct whorli_levels_labeller {
    whorl_action *spin_square, *spin_z; /* NULL where not wanted */
    uint64_t most;                      /* states of a level at most */
    uint64_t bytes;
} whorli_levels_labeller;

static void whorli_levels_labeller_free(whorl_host *host, whorli_levels_labeller *labeller)
{
    whorl_action_free(host, labeller->spin_z);
    whorl_action_free(host, labeller->spin_square);
}

/* Scratch of one product with an operator of the labeller. */
static uint64_t whorli_levels_product_bytes(const whorl_host *host, const whorl_action *action)
{
    whorl_map map;
    if (action == NULL)
        return 0;
    map = whorl_action_map(action);
    return whorl_map_scratch(host, &map, 1);
}

static whorl_status whorli_levels_labeller_make(whorl_host *host, const whorli_levels_plan *plan,
                                                const whorl_space *space, const whorli_levels_columns *columns,
                                                uint64_t room, whorli_levels_labeller *labeller)
{
    whorl_layout layout = {NULL, 0};
    whorli_levels_label_work work;
    whorl_status status = WHORL_OK;
    uint64_t parts[3], k;
    memset(labeller, 0, sizeof *labeller);
    if (plan->label_spin)
        status = whorli_levels_operator(host, &plan->spin_square, space, WHORL_ACTION_STRICT, columns->element,
                                        &labeller->spin_square);
    if (status == WHORL_OK && plan->label_sz)
        status = whorli_levels_operator(host, &plan->spin_z, space, WHORL_ACTION_STRICT, columns->element,
                                        &labeller->spin_z);
    if (status != WHORL_OK) {
        whorli_levels_labeller_free(host, labeller);
        return status;
    }
    if (labeller->spin_square == NULL && labeller->spin_z == NULL)
        return WHORL_OK;
    labeller->most = room < WHORL_LEVELS_MOST_RESOLVED ? room : WHORL_LEVELS_MOST_RESOLVED;
    whorli_levels_label_layout(&layout, columns, labeller->most, &work);
    parts[0] = whorli_levels_dense_bytes(columns->element, labeller->most, 0);
    parts[1] = whorli_levels_product_bytes(host, labeller->spin_square);
    parts[2] = whorli_levels_product_bytes(host, labeller->spin_z);
    for (k = 0; k < 3; k++)
        labeller->bytes = parts[k] > labeller->bytes ? parts[k] : labeller->bytes;
    labeller->bytes = whorl_size_add(labeller->bytes, whorl_block_bytes(layout.bytes));
    return WHORL_OK;
}

/* Labels the pairs of a sector. */
static whorl_status whorli_levels_labels(whorl_host *host, const whorli_levels_plan *plan,
                                         const whorli_levels_labeller *labeller, const whorli_levels_columns *columns,
                                         const whorl_level_sector *facts, whorl_level_pair *pairs)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorli_levels_label_work work;
    whorl_status status;
    whorl_map map;
    if (labeller->most == 0)
        return WHORL_OK;
    whorli_levels_label_layout(&layout, columns, labeller->most, &work);
    if ((status = whorl_layout_take(host, &layout, &block)) != WHORL_OK)
        return status;
    whorli_levels_label_layout(&layout, columns, labeller->most, &work);
    if (labeller->spin_square != NULL) {
        map = whorl_action_map(labeller->spin_square);
        status = whorli_levels_label_pairs(host, plan, &map, columns, pairs, facts, 1, &work, labeller->most);
    }
    if (status == WHORL_OK && labeller->spin_z != NULL) {
        map = whorl_action_map(labeller->spin_z);
        status = whorli_levels_label_pairs(host, plan, &map, columns, pairs, facts, 0, &work, labeller->most);
    }
    whorl_block_give(host, &block);
    return status;
}

/* ---- >>traces ---------------------------------------------------------------------------------------------------- */

/* Traces of Z strings over a space; for one number of all sites they depend on the weight alone and are tabulated. */
typedef struct whorli_levels_strings {
    const whorl_space *space;
    int32_t tabulated;
    double by_weight[65];
} whorli_levels_strings;

static whorl_status whorli_levels_strings_begin(whorl_host *host, const whorl_space *space,
                                                whorli_levels_strings *strings)
{
    int32_t weight, sites = whorl_space_sites(space);
    strings->space = space;
    strings->tabulated = whorl_space_number_count(space) == 1 &&
                         whorl_space_number_at(space, 0).mask == whorl_bits_low(sites);
    for (weight = 0; strings->tabulated && weight <= sites; weight++) {
        whorl_status status =
            whorl_space_string_trace(host, space, whorl_bits_low(weight), strings->by_weight + weight);
        if (status != WHORL_OK)
            return status;
    }
    return WHORL_OK;
}

static whorl_status whorli_levels_string(whorl_host *host, const whorli_levels_strings *strings, uint64_t z,
                                         double *trace)
{
    if (!strings->tabulated)
        return whorl_space_string_trace(host, strings->space, z, trace);
    *trace = strings->by_weight[whorl_bits_count(z)];
    return WHORL_OK;
}

static uint64_t whorli_levels_flip_end(const whorl_sum *sum, uint64_t first)
{
    uint64_t end = first;
    while (end < sum->count && sum->terms[end].x == sum->terms[first].x)
        end++;
    return end;
}

/* How many products Tr H^2 takes: pairs of strings with one flip, times the states where strings are summed. */
static uint64_t whorli_levels_square_cost(const whorl_sum *sum, const whorl_space *space)
{
    uint64_t first = 0, cost = 0;
    while (first < sum->count) {
        uint64_t end = whorli_levels_flip_end(sum, first);
        cost = whorl_size_add(cost, whorl_size_multiply(end - first, end - first));
        first = end;
    }
    return whorl_space_states(space) == NULL ? cost : whorl_size_multiply(cost, whorl_space_count(space));
}

/*
 * Tr H^2 over a space that H maps to itself. Only products of strings with the same flip are diagonal:
 * P_k P_l = i^(y_l - y_k) Z^(z_k ^ z_l) with y = popcount(x & z), and odd powers cancel between (k, l) and (l, k).
 */
static whorl_status whorli_levels_square_trace(whorl_host *host, const whorl_sum *sum,
                                               const whorli_levels_strings *strings, double *square)
{
    double total = 0.0, string;
    uint64_t first, k, l, polled = 0;
    for (first = 0; first < sum->count; first = whorli_levels_flip_end(sum, first)) {
        uint64_t end = whorli_levels_flip_end(sum, first);
        for (k = first; k < end; k++) {
            const whorl_term *p = sum->terms + k;
            double row = 0.0;
            for (l = first; l < end; l++) {
                const whorl_term *q = sum->terms + l;
                int32_t quarter = (whorl_bits_count(q->x & q->z) - whorl_bits_count(p->x & p->z)) & 3;
                whorl_status status;
                if ((quarter & 1) != 0)
                    continue;
                if ((status = whorli_levels_string(host, strings, p->z ^ q->z, &string)) != WHORL_OK)
                    return status;
                row += quarter == 0 ? q->re * string : -(q->re * string);
            }
            total += p->re * row;
            polled += end - first;
            if (polled >> 22 != 0) {
                whorl_status status = whorl_poll(host);
                if (status != WHORL_OK)
                    return status;
                polled = 0;
            }
        }
    }
    *square = total;
    return WHORL_OK;
}

/* Tr H / D and, where `squared` asks for it and it is affordable, Tr H^2 / D; *squared tells. */
static whorl_status whorli_levels_exact_traces(whorl_host *host, const whorl_sum *sum, const whorl_space *space,
                                               double *trace, double *square, int32_t *squared)
{
    whorli_levels_strings strings;
    double dimension = (double)whorl_space_count(space), total = 0.0, string = 0.0;
    uint64_t k;
    whorl_status status = whorli_levels_strings_begin(host, space, &strings);
    for (k = 0; k < sum->count && sum->terms[k].x == 0 && status == WHORL_OK; k++) {
        status = whorli_levels_string(host, &strings, sum->terms[k].z, &string);
        total += sum->terms[k].re * string;
    }
    *trace = total / dimension;
    *square = 0.0;
    *squared = *squared && whorli_levels_square_cost(sum, space) <= WHORLI_LEVELS_PRODUCTS;
    if (status == WHORL_OK && *squared) {
        status = whorli_levels_square_trace(host, sum, &strings, square);
        *square /= dimension;
    }
    return status;
}

/*
 * Holds the values of a whole sector against the traces. Each computed value lies within about the residual of a true
 * one; the mean of D of them and the traces themselves round by some eps ||H||.
 */
static whorl_status whorli_levels_trace_sector(whorl_host *host, const whorli_levels_plan *plan,
                                               const whorl_space *space, const double *values,
                                               whorl_level_sector *facts)
{
    double n = (double)facts->dimension, each;
    whorl_status status;
    facts->square_traced = plan->want.space == NULL || plan->mode == WHORL_ACTION_STRICT;
    status = whorli_levels_exact_traces(host, &plan->sum, space, &facts->trace_exact, &facts->square_exact,
                                        &facts->square_traced);
    if (status != WHORL_OK)
        return status;
    each = facts->residual + plan->symmetry.defect + (64.0 + sqrt(n)) * WHORLI_LEVELS_EPS * plan->norm;
    facts->traced = 1;
    facts->trace = whorl_sum_reals(values, facts->dimension) / n;
    facts->square = whorl_dot(WHORL_REAL_DOUBLE, values, values, facts->dimension).re / n;
    facts->trace_bound = each;
    facts->square_bound = 2.0 * plan->norm * each;
    return WHORL_OK;
}

/* ---- >>whole sectors --------------------------------------------------------------------------------------------- */

typedef struct whorli_levels_whole_work {
    double *matrix, *values;
    void *image;
} whorli_levels_whole_work;

static void whorli_levels_whole_layout(whorl_layout *layout, const whorli_levels_columns *columns,
                                       whorli_levels_whole_work *work)
{
    uint64_t n = columns->dimension, bytes = whorl_element_bytes(columns->element);
    work->matrix = (double *)whorl_layout_carve(layout, whorl_size_multiply(n, n), bytes);
    work->values = (double *)whorl_layout_carve(layout, n, sizeof(double));
    work->image = whorl_layout_carve(layout, whorl_size_multiply(n, WHORLI_LEVELS_COLUMNS), bytes);
}

/* <t|P|s> for t = s ^ x is i^popcount(x & z) (-1)^popcount(z & s): the amplitude of one flip group. */
static whorl_complex whorli_levels_amplitude(const whorl_sum *sum, uint64_t first, uint64_t end, uint64_t state)
{
    whorl_complex total = {0.0, 0.0};
    for (; first < end; first++) {
        const whorl_term *term = sum->terms + first;
        int32_t quarter = (whorl_bits_count(term->x & term->z) + 2 * whorl_bits_parity(term->z & state)) & 3;
        double c = quarter < 2 ? term->re : -term->re;
        if ((quarter & 1) == 0)
            total.re += c;
        else
            total.im += c;
    }
    return total;
}

/* The matrix, term by term and with no use of the compiled product: its lower triangle, column by column. */
static whorl_status whorli_levels_matrix(whorl_host *host, const whorl_sum *sum, const whorl_space *space,
                                         const whorli_levels_columns *columns, double *matrix)
{
    uint64_t n = columns->dimension, width = whorl_element_is_complex(columns->element) ? 2 : 1;
    uint64_t column, first, end, polled = 0, state = whorl_space_at(space, 0);
    for (column = 0; column < n; state = whorl_space_next(space, column, state), column++) {
        double *at = matrix + width * n * column;
        memset(at, 0, (size_t)(width * n) * sizeof *at);
        for (first = 0; first < sum->count; first = end) {
            whorl_complex c;
            uint64_t row = whorl_space_find(space, state ^ sum->terms[first].x);
            end = whorli_levels_flip_end(sum, first);
            if (row == WHORL_NONE || row < column)
                continue;
            c = whorli_levels_amplitude(sum, first, end, state);
            at[width * row] = c.re;
            if (width == 2)
                at[2 * row + 1] = c.im;
        }
        polled += n + sum->count;
        if (polled >> 22 != 0 || column == 0) {
            whorl_status status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
            polled = 0;
        }
    }
    return WHORL_OK;
}

/* Residuals of the listed pairs, with the compiled product. */
static whorl_status whorli_levels_whole_residuals(whorl_host *host, const whorli_levels_plan *plan,
                                                  const whorl_map *map, const whorli_levels_columns *columns,
                                                  void *image, whorl_level_sector *facts, whorl_level_pair *pairs)
{
    uint64_t k, j, n = columns->dimension, bytes = whorl_element_bytes(columns->element);
    for (k = 0; k < facts->pairs; k += WHORLI_LEVELS_COLUMNS) {
        uint64_t count = facts->pairs - k < WHORLI_LEVELS_COLUMNS ? facts->pairs - k : WHORLI_LEVELS_COLUMNS;
        /* reversed, pair k + count - 1 is the first of these columns in memory */
        const void *from = whorli_levels_column(columns, columns->reversed ? k + count - 1 : k);
        whorl_status status = whorl_map_apply(host, map, from, image, (int32_t)count);
        if (status == WHORL_OK)
            status = whorl_poll(host);
        if (status != WHORL_OK)
            return status;
        for (j = 0; j < count; j++) {
            char *y = (char *)image + n * bytes * (columns->reversed ? count - 1 - j : j);
            whorl_level_pair *pair = pairs + k + j;
            pair->residual = whorli_levels_residual(columns, pair->energy, whorli_levels_column(columns, k + j), y) +
                             plan->symmetry.defect;
            if (pair->residual > facts->residual)
                facts->residual = pair->residual;
        }
        facts->products += count;
    }
    return WHORL_OK;
}

static double whorli_levels_tolerance(const whorli_levels_plan *plan, double residual)
{
    return 4.0 * residual + 16.0 * WHORLI_LEVELS_EPS * plan->norm;
}

/* Fills in one pair; S^z is the sector's, if it has one. */
static void whorli_levels_set_pair(whorl_level_pair *pair, double energy, double residual,
                                   const whorl_level_sector *facts)
{
    pair->energy = energy;
    pair->residual = residual;
    pair->twice_spin = -1;
    pair->twice_sz = facts->twice_sz;
}

/* Lists `wanted` pairs and the rest of the level in which the list ends, by a width that needs no residuals. */
static void whorli_levels_whole_list(const whorli_levels_plan *plan, const whorli_levels_columns *columns,
                                     const double *values, uint64_t wanted, whorli_level_sector *sector,
                                     whorl_level_pair *pairs)
{
    uint64_t k, n = columns->dimension;
    double close = 64.0 * (1.0 + sqrt((double)n)) * WHORLI_LEVELS_EPS * plan->norm, last = 0.0;
    for (k = 0; k < n; k++) {
        double value = values[columns->reversed ? n - 1 - k : k];
        if (k >= wanted && fabs(value - last) > close)
            break;
        whorli_levels_set_pair(pairs + k, value, 0.0, &sector->facts);
        last = value;
    }
    sector->facts.pairs = k;
    sector->facts.converged = sector->facts.rechecked = 1;
    sector->horizon_known = k < n;
    if (k < n)
        sector->horizon = columns->reversed ? -values[n - 1 - k] : values[k];
}

/* What stands for residuals where there are no vectors: a bound on the backward error of the dense solver. */
static void whorli_levels_whole_bounds(const whorli_levels_plan *plan, whorl_level_sector *facts,
                                       whorl_level_pair *pairs)
{
    uint64_t k;
    facts->bounded = 1;
    facts->residual = 4.0 * (double)facts->dimension * WHORLI_LEVELS_EPS * plan->norm + plan->symmetry.defect;
    for (k = 0; k < facts->pairs; k++)
        pairs[k].residual = facts->residual;
}

static whorl_status whorli_levels_whole_solve(whorl_host *host, whorli_levels_plan *plan, const whorl_map *map,
                                              const whorl_space *space, const whorli_levels_labeller *labeller,
                                              whorli_levels_columns *columns, const whorli_levels_whole_work *work,
                                              whorli_level_sector *sector, whorl_levels *levels)
{
    uint64_t k, n = columns->dimension, wanted = plan->want.whole != 0 ? n : (uint64_t)plan->want.wanted;
    whorl_level_pair *pairs = levels->pairs + sector->first;
    int32_t complex_type = whorl_element_is_complex(columns->element), vectors = plan->want.values_only == 0;
    uint64_t kept = n * (levels->symmetry.gauge != 0 ? 16 : whorl_element_bytes(columns->element));
    whorl_status status = whorli_levels_matrix(host, &plan->sum, space, columns, work->matrix);
    if (status == WHORL_OK)
        status = complex_type ? whorl_dense_hermitian(host, n, work->matrix, work->values, vectors)
                              : whorl_dense_symmetric(host, n, work->matrix, work->values, vectors);
    if (status != WHORL_OK)
        return status;
    columns->matrix = (const char *)work->matrix;
    whorli_levels_whole_list(plan, columns, work->values, wanted, sector, pairs);
    if (vectors)
        status = whorli_levels_whole_residuals(host, plan, map, columns, work->image, &sector->facts, pairs);
    else
        whorli_levels_whole_bounds(plan, &sector->facts, pairs);
    sector->facts.tolerance = whorli_levels_tolerance(plan, sector->facts.residual);
    if (status == WHORL_OK)
        status = whorli_levels_trace_sector(host, plan, space, work->values, &sector->facts);
    if (status == WHORL_OK)
        status = whorli_levels_labels(host, plan, labeller, columns, &sector->facts, pairs);
    for (k = 0; k < sector->vector_room && k < sector->facts.pairs && status == WHORL_OK; k++)
        whorli_levels_keep_vector(plan, space, columns, whorli_levels_column(columns, k),
                                  levels->vectors + sector->vector_at + k * kept);
    return status;
}

static whorl_status whorli_levels_whole(whorl_host *host, whorli_levels_plan *plan, const whorl_map *map,
                                        const whorl_space *space, whorli_level_sector *sector, whorl_levels *levels)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorli_levels_whole_work work;
    whorli_levels_columns columns = whorli_levels_no_columns(plan, sector);
    whorli_levels_labeller labeller;
    whorl_status status = whorli_levels_labeller_make(host, plan, space, &columns, sector->room, &labeller);
    if (status != WHORL_OK)
        return status;
    whorli_levels_whole_layout(&layout, &columns, &work);
    if (plan->measuring) {
        uint64_t held = whorl_block_bytes(layout.bytes);
        uint64_t product = whorl_map_scratch(host, map, WHORLI_LEVELS_COLUMNS);
        uint64_t dense = whorli_levels_dense_bytes(columns.element, columns.dimension, plan->want.values_only == 0);
        whorli_levels_note(host, plan, whorl_size_add(held, dense));
        whorli_levels_note(host, plan, whorl_size_add(held, product));
        whorli_levels_note(host, plan, whorl_size_add(held, labeller.bytes));
    } else if ((status = whorl_layout_take(host, &layout, &block)) == WHORL_OK) {
        whorli_levels_whole_layout(&layout, &columns, &work);
        status = whorli_levels_whole_solve(host, plan, map, space, &labeller, &columns, &work, sector, levels);
        whorl_block_give(host, &block);
    }
    whorli_levels_labeller_free(host, &labeller);
    return status;
}

/* ---- >>a few of a sector ----------------------------------------------------------------------------------------- */

static whorl_lanczos_desc whorli_levels_few_desc(const whorli_levels_plan *plan, const whorli_level_sector *sector)
{
    whorl_lanczos_desc desc = whorl_lanczos_default();
    desc.wanted = (int32_t)sector->room;
    desc.end = plan->want.end;
    desc.tolerance = plan->want.tolerance;
    desc.seed = plan->want.seed;
    desc.most_products = plan->want.most_products;
    return desc;
}

/*
 * What converged, the outermost first. States may be missing beyond the last energy, and at it unless the fresh start
 * has met no further vector of that level.
 */
static void whorli_levels_few_list(const whorli_levels_plan *plan, const whorl_lanczos *lanczos,
                                   whorli_level_sector *sector, whorl_level_pair *pairs)
{
    whorl_level_sector *facts = &sector->facts;
    uint64_t k, count = (uint64_t)whorl_lanczos_count(lanczos);
    count = count < sector->room ? count : sector->room;
    for (k = 0; k < count; k++) {
        double residual = whorl_lanczos_residual(lanczos, (int32_t)k) + plan->symmetry.defect;
        whorli_levels_set_pair(pairs + k, whorl_lanczos_value(lanczos, (int32_t)k), residual, facts);
        if (residual > facts->residual)
            facts->residual = residual;
    }
    facts->pairs = count;
    facts->products = whorl_lanczos_products(lanczos);
    facts->lean = whorl_lanczos_is_lean(lanczos);
    facts->converged = count == sector->room;
    facts->rechecked = whorl_lanczos_checked(lanczos) != 0;
    facts->tolerance = whorli_levels_tolerance(plan, facts->residual);
    sector->horizon_known = count < facts->dimension;
    sector->horizon_beyond = facts->converged && facts->rechecked && !whorl_lanczos_cut(lanczos);
    sector->horizon = count == 0                          ? -2.0 * plan->norm
                      : plan->want.end == WHORL_HIGHEST ? -pairs[count - 1].energy
                                                        : pairs[count - 1].energy;
}

static whorl_status whorli_levels_few_solve(whorl_host *host, const whorli_levels_plan *plan, const whorl_map *map,
                                            const whorl_space *space, const whorli_levels_labeller *labeller,
                                            whorl_lanczos *lanczos, whorli_level_sector *sector, whorl_levels *levels)
{
    whorli_levels_columns columns = whorli_levels_no_columns(plan, sector);
    whorl_level_pair *pairs = levels->pairs + sector->first;
    uint64_t k, n = sector->facts.dimension;
    uint64_t kept = n * (levels->symmetry.gauge != 0 ? 16 : whorl_element_bytes(plan->element));
    whorl_status status, solved;
    do
        solved = whorl_lanczos_advance(host, map, lanczos, 0);
    while (solved == WHORL_UNFINISHED);
    if (solved < 0)
        return solved;
    columns.lanczos = lanczos;
    whorli_levels_few_list(plan, lanczos, sector, pairs);
    status = whorli_levels_labels(host, plan, labeller, &columns, &sector->facts, pairs);
    for (k = 0; k < sector->vector_room && k < sector->facts.pairs && status == WHORL_OK; k++)
        whorli_levels_keep_vector(plan, space, &columns, whorli_levels_column(&columns, k),
                                  levels->vectors + sector->vector_at + k * kept);
    return status;
}

/*
 * The solver chooses its window by the room under the byte limit, so what the labels will take beside it (and, while
 * measuring, what a real run would hold) is set aside while it chooses.
 */
static whorl_status whorli_levels_few_begin(whorl_host *host, const whorli_levels_plan *plan, const whorl_map *map,
                                            const whorli_level_sector *sector, uint64_t aside, uint64_t *bytes,
                                            whorl_lanczos **lanczos)
{
    whorl_lanczos_desc desc = whorli_levels_few_desc(plan, sector);
    uint64_t limit = host->byte_limit, used = host->bytes_used;
    whorl_status status;
    if (limit != 0)
        host->byte_limit = limit > aside ? limit - aside : 1;
    host->bytes_used = whorl_size_add(used, plan->pending);
    status = plan->measuring ? whorl_lanczos_bytes(host, map, &desc, bytes)
                             : whorl_lanczos_make(host, map, &desc, lanczos);
    host->byte_limit = limit;
    if (plan->measuring)
        host->bytes_used = used;
    return status;
}

static whorl_status whorli_levels_few(whorl_host *host, whorli_levels_plan *plan, const whorl_map *map,
                                      const whorl_space *space, whorli_level_sector *sector, whorl_levels *levels)
{
    whorli_levels_columns columns = whorli_levels_no_columns(plan, sector);
    whorli_levels_labeller labeller;
    whorl_lanczos *lanczos = NULL;
    uint64_t bytes = 0;
    whorl_status status = whorli_levels_labeller_make(host, plan, space, &columns, sector->room, &labeller);
    if (status != WHORL_OK)
        return status;
    status = whorli_levels_few_begin(host, plan, map, sector, labeller.bytes, &bytes, &lanczos);
    if (status == WHORL_OK && plan->measuring) {
        whorli_levels_note(host, plan, whorl_size_add(bytes, labeller.bytes));
    } else if (status == WHORL_OK) {
        status = whorli_levels_few_solve(host, plan, map, space, &labeller, lanczos, sector, levels);
        whorl_lanczos_free(host, lanczos);
    }
    whorli_levels_labeller_free(host, &labeller);
    return status;
}

/* ---- >>one sector ------------------------------------------------------------------------------------------------ */

static whorl_status whorli_levels_make_space(whorl_host *host, int32_t sites, const whorli_level_sector *sector,
                                             whorl_space **space)
{
    whorl_space_desc desc = whorl_space_default();
    if (sector->down >= 0)
        return whorl_space_make_down(host, sites, sector->down, space);
    desc.sites = sites;
    desc.kind = sector->facts.parity == WHORL_NO_NUMBER ? WHORL_SPACE_ALL : WHORL_SPACE_PARITY;
    desc.parity = sector->facts.parity == 1;
    return whorl_space_make(host, &desc, space);
}

static void whorli_levels_write_label(whorli_level_sector *sector, const whorl_space *space)
{
    whorl_text text = whorl_text_over(sector->label, sizeof sector->label);
    int32_t twice = sector->facts.twice_sz;
    whorl_space_describe(space, &text);
    if (sector->facts.weight != 2)
        return;
    whorl_text_add(&text, " and ");
    whorl_text_add_signed(&text, (twice & 1) != 0 ? -twice : -twice / 2);
    if ((twice & 1) != 0)
        whorl_text_add(&text, "/2");
}

/* Compiles and solves in a space; while measuring, announces instead. */
static whorl_status whorli_levels_solve_space(whorl_host *host, whorli_levels_plan *plan, const whorl_space *space,
                                              whorli_level_sector *sector, whorl_levels *levels)
{
    whorl_action *action;
    whorl_map map;
    whorl_status status = whorli_levels_operator(host, &plan->sum, space, plan->mode, plan->element, &action);
    if (status != WHORL_OK)
        return status;
    map = whorl_action_map(action);
    status = sector->facts.whole ? whorli_levels_whole(host, plan, &map, space, sector, levels)
                                 : whorli_levels_few(host, plan, &map, space, sector, levels);
    whorl_action_free(host, action);
    return status;
}

static whorl_status whorli_levels_solve_sector(whorl_host *host, whorli_levels_plan *plan, whorli_level_sector *sector,
                                               whorl_levels *levels)
{
    const whorl_space *given = plan->want.space;
    whorl_space *made = NULL;
    whorl_status status = WHORL_OK;
    if (given == NULL)
        status = whorli_levels_make_space(host, plan->sum.sites, sector, &made);
    if (status != WHORL_OK)
        return status;
    whorli_levels_write_label(sector, given != NULL ? given : made);
    if (sector->facts.dimension > 0)
        status = whorli_levels_solve_space(host, plan, given != NULL ? given : made, sector, levels);
    else
        sector->facts.converged = sector->facts.rechecked = 1;
    if (plan->measuring && plan->want.vectors != 0) {
        uint64_t before = host->bytes_used;
        whorl_space_free(host, made);
        plan->pending = whorl_size_add(plan->pending, before - host->bytes_used);
    } else if (!plan->measuring && status >= 0 && plan->want.vectors != 0) {
        sector->space = given != NULL ? given : made;
        sector->made = made;
    } else {
        whorl_space_free(host, made);
    }
    return status;
}

/* ---- >>merging --------------------------------------------------------------------------------------------------- */

static int32_t whorli_levels_order_places(const void *left, const void *right)
{
    const whorli_level_place *a = (const whorli_level_place *)left, *b = (const whorli_level_place *)right;
    if (a->outward != b->outward)
        return a->outward < b->outward ? -1 : 1;
    return whorli_levels_compare(a->pair, b->pair);
}

/* All pairs in outward order, cut where neighbours differ by more than the merging tolerance. */
static void whorli_levels_merge(whorl_levels *levels)
{
    uint64_t s, k, count = 0;
    for (s = 0; s < levels->sector_count; s++) {
        const whorli_level_sector *sector = levels->sectors + s;
        for (k = 0; k < sector->facts.pairs; k++) {
            whorli_level_place *place = levels->places + count++;
            place->pair = sector->first + k;
            place->sector = s;
            place->outward = levels->highest ? -levels->pairs[place->pair].energy : levels->pairs[place->pair].energy;
        }
    }
    whorl_sort(levels->places, count, sizeof *levels->places, whorli_levels_order_places);
    for (k = 0; k < count; k++)
        if (k == 0 || levels->places[k].outward - levels->places[k - 1].outward > levels->checks.merge_tolerance)
            levels->starts[levels->level_count++] = k;
    levels->starts[levels->level_count] = count;
}

static void whorli_levels_cut_sector(const whorl_levels *levels, whorli_level_sector *sector)
{
    uint64_t first = 0;
    while (first < sector->facts.pairs) {
        levels->sector_starts[sector->first + sector->facts.levels++] = first;
        first = whorli_levels_end(levels->pairs + sector->first, sector->facts.pairs, first,
                                  levels->checks.merge_tolerance);
    }
}

/* Gives S to the pairs of one level in one sector, in ascending order: `multiplets` of each S >= |S^z|. */
static int32_t whorli_levels_give_spins(whorl_levels *levels, uint64_t level, uint64_t s, int32_t least,
                                        const uint64_t *multiplets)
{
    uint64_t k, left = 0;
    int32_t twice = least - 2;
    for (k = levels->starts[level]; k < levels->starts[level + 1]; k++) {
        if (levels->places[k].sector != s)
            continue;
        while (left == 0 && twice < levels->sites)
            left = multiplets[twice += 2];
        if (left-- == 0)
            return 0;
        levels->pairs[levels->places[k].pair].twice_spin = twice;
    }
    return 1;
}

/*
 * S of one level by counting, under SU(2): the states with S^z = m are one of every multiplet with S >= m, so that
 * what a sector has more than the one before (sectors come in order of falling S^z) are multiplets with S = m.
 */
static void whorli_levels_count_spins(whorl_levels *levels, uint64_t level)
{
    uint64_t s, k, multiplets[WHORL_MOST_SITES + 1], before = 0;
    int32_t next = levels->sites;
    memset(multiplets, 0, sizeof multiplets);
    for (s = 0; s < levels->sector_count; s++) {
        int32_t twice = levels->sectors[s].facts.twice_sz;
        uint64_t count = 0;
        for (k = levels->starts[level]; k < levels->starts[level + 1]; k++)
            count += levels->places[k].sector == s;
        if (twice >= 0) {
            if (twice != next || count < before)
                return;
            multiplets[twice] = count - before;
            before = count;
            next -= 2;
        }
        if (!whorli_levels_give_spins(levels, level, s, twice < 0 ? -twice : twice, multiplets))
            return;
    }
}

/* How the mean of a sector compares with its bound. */
static double whorli_levels_trace_ratio(const whorl_level_sector *facts)
{
    double ratio = 0.0, second;
    if (facts->traced && facts->trace != facts->trace_exact)
        ratio = fabs(facts->trace - facts->trace_exact) / facts->trace_bound;
    if (facts->square_traced && facts->square != facts->square_exact) {
        second = fabs(facts->square - facts->square_exact) / facts->square_bound;
        ratio = second > ratio ? second : ratio;
    }
    return ratio;
}

static void whorli_levels_check_dimensions(const whorl_levels *levels, whorl_levels_checks *checks)
{
    uint64_t s, carries = 0, total = 0;
    for (s = 0; s < levels->sector_count; s++) {
        uint64_t part = levels->sectors[s].facts.dimension * levels->sectors[s].facts.weight; /* at most 2^64 - 1 */
        carries += part > UINT64_MAX - total;
        total += part;
    }
    checks->dimension = total;
    checks->dimensions_add = levels->given ? 1
                             : levels->sites == 64 ? carries == 1 && total == 0
                                                   : carries == 0 && total == UINT64_C(1) << levels->sites;
}

static void whorli_levels_finish(const whorli_levels_plan *plan, whorl_levels *levels)
{
    whorl_levels_checks *checks = &levels->checks;
    uint64_t s;
    whorli_levels_check_dimensions(levels, checks);
    checks->all_sectors = checks->dimensions_add;
    checks->converged = checks->rechecked = checks->traces_hold = 1;
    checks->norm_bound = plan->norm;
    for (s = 0; s < levels->sector_count; s++) {
        const whorl_level_sector *facts = &levels->sectors[s].facts;
        double ratio = whorli_levels_trace_ratio(facts);
        checks->converged &= facts->converged;
        checks->rechecked &= facts->rechecked;
        checks->traced += (uint64_t)facts->traced;
        checks->traces_hold &= ratio <= 1.0;
        checks->worst_trace = ratio > checks->worst_trace ? ratio : checks->worst_trace;
        checks->residual = facts->residual > checks->residual ? facts->residual : checks->residual;
    }
    checks->merge_tolerance = whorli_levels_tolerance(plan, checks->residual);
    for (s = 0; s < levels->sector_count; s++)
        whorli_levels_cut_sector(levels, levels->sectors + s);
    whorli_levels_merge(levels);
    if (plan->want.values_only != 0 && plan->want.no_labels == 0 && plan->symmetry.spin && levels->sectors->down >= 0)
        for (s = 0; s < levels->level_count; s++)
            whorli_levels_count_spins(levels, s);
}

/* ---- >>the call -------------------------------------------------------------------------------------------------- */

static void whorli_levels_layout(whorl_layout *layout, const whorli_levels_plan *plan, whorl_levels **levels,
                                 whorl_levels *at)
{
    const whorli_level_sector *last = plan->sectors + (plan->sector_count - 1);
    uint64_t element = plan->symmetry.gauge != 0 ? 16 : whorl_element_bytes(plan->element);
    uint64_t pairs = last->first + last->room;
    uint64_t bytes = last->vector_at + last->facts.dimension * element * last->vector_room;
    *levels = (whorl_levels *)whorl_layout_carve(layout, 1, sizeof **levels);
    at->sector_count = plan->sector_count;
    at->pair_room = pairs;
    at->sectors = (whorli_level_sector *)whorl_layout_carve(layout, plan->sector_count, sizeof *at->sectors);
    at->pairs = (whorl_level_pair *)whorl_layout_carve(layout, pairs, sizeof *at->pairs);
    at->sector_starts = (uint64_t *)whorl_layout_carve(layout, pairs, sizeof *at->sector_starts);
    at->places = (whorli_level_place *)whorl_layout_carve(layout, pairs, sizeof *at->places);
    at->starts = (uint64_t *)whorl_layout_carve(layout, whorl_size_add(pairs, 1), sizeof *at->starts);
    at->vectors = (char *)whorl_layout_carve(layout, bytes, 1);
}

/* Takes the result block and writes what the plan knows. */
static whorl_status whorli_levels_begin(whorl_host *host, const whorli_levels_plan *plan, whorl_levels **levels)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_levels at;
    whorl_status status;
    memset(&at, 0, sizeof at);
    whorli_levels_layout(&layout, plan, levels, &at);
    if ((status = whorl_layout_take(host, &layout, &block)) != WHORL_OK)
        return status;
    whorli_levels_layout(&layout, plan, levels, &at);
    at.block = block;
    at.sites = plan->sum.sites;
    at.highest = plan->want.end == WHORL_HIGHEST;
    at.given = plan->want.space != NULL;
    at.symmetry = plan->symmetry;
    memcpy(at.sectors, plan->sectors, (size_t)plan->sector_count * sizeof *at.sectors);
    memcpy(*levels, &at, sizeof at);
    return WHORL_OK;
}

static whorl_status whorli_levels_solve(whorl_host *host, whorli_levels_plan *plan, whorl_levels *levels)
{
    whorl_status status = WHORL_OK;
    uint64_t s;
    for (s = 0; s < plan->sector_count && status == WHORL_OK; s++) {
        whorl_stage(host, "levels: sectors", s, plan->sector_count);
        if ((status = whorl_poll(host)) == WHORL_OK)
            status = whorli_levels_solve_sector(host, plan, levels->sectors + s, levels);
    }
    if (status == WHORL_OK) {
        whorli_levels_finish(plan, levels);
        status = levels->checks.converged ? WHORL_OK : WHORL_NOT_CONVERGED;
    }
    return status;
}

static whorl_status whorli_levels_measure(whorl_host *host, whorli_levels_plan *plan)
{
    whorl_layout layout = {NULL, 0};
    whorl_levels *ignored, at;
    whorl_status status = WHORL_OK;
    uint64_t s, before = host->bytes_peak;
    memset(&at, 0, sizeof at);
    whorli_levels_layout(&layout, plan, &ignored, &at);
    plan->measuring = 1;
    host->bytes_peak = host->bytes_used;
    plan->pending = whorl_block_bytes(layout.bytes);
    whorli_levels_note(host, plan, 0);
    for (s = 0; s < plan->sector_count && status == WHORL_OK; s++) {
        if ((status = whorl_poll(host)) == WHORL_OK)
            status = whorli_levels_solve_sector(host, plan, plan->sectors + s, NULL);
        whorli_levels_note(host, plan, 0);
    }
    host->bytes_peak = plan->seen > before ? plan->seen : before;
    plan->measuring = 0;
    plan->pending = 0;
    return status;
}

static whorl_status whorli_levels_over_limit(whorl_host *host, const whorli_levels_plan *plan)
{
    whorl_text text = whorl_fail_begin(host, WHORL_OVER_LIMIT);
    whorl_text_add(&text, "the byte limit of ");
    whorl_text_add_unsigned(&text, host->byte_limit);
    whorl_text_add(&text, " is too low for these levels: raise it to at least ");
    whorl_text_add_unsigned(&text, whorl_size_add(plan->base, plan->peak));
    return WHORL_OVER_LIMIT;
}

/* Makes levels, or announces where bytes is not NULL. With a byte limit the announcement comes first, and decides. */
static whorl_status whorli_levels_run(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                      uint64_t count, const whorl_levels_desc *desc, whorl_levels **levels,
                                      uint64_t *bytes)
{
    whorli_levels_plan plan;
    whorl_levels *made = NULL;
    whorl_status status = whorli_levels_make_plan(host, sums, weights, count, desc, &plan);
    if (status != WHORL_OK)
        return status;
    if (bytes != NULL || host->byte_limit != 0)
        status = whorli_levels_measure(host, &plan);
    if (status == WHORL_OK && bytes != NULL) {
        *bytes = plan.peak;
    } else if (status == WHORL_OK && host->byte_limit != 0 && whorl_size_add(plan.base, plan.peak) > host->byte_limit) {
        status = whorli_levels_over_limit(host, &plan);
    } else if (status == WHORL_OK) {
        status = whorli_levels_begin(host, &plan, &made);
        if (status == WHORL_OK)
            status = whorli_levels_solve(host, &plan, made);
        if (status < 0) {
            whorl_levels_free(host, made);
            made = NULL;
        }
        *levels = made;
    }
    whorl_block_give(host, &plan.block);
    return status;
}

whorl_status whorl_levels_make_weighted(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                        uint64_t sum_count, const whorl_levels_desc *desc, whorl_levels **levels)
{
    *levels = NULL;
    return whorli_levels_run(host, sums, weights, sum_count, desc, levels, NULL);
}

whorl_status whorl_levels_make(whorl_host *host, const whorl_sum *sum, const whorl_levels_desc *desc,
                               whorl_levels **levels)
{
    return whorl_levels_make_weighted(host, sum, NULL, 1, desc, levels);
}

whorl_status whorl_levels_bytes_weighted(whorl_host *host, const whorl_sum *sums, const whorl_complex *weights,
                                         uint64_t sum_count, const whorl_levels_desc *desc, uint64_t *bytes)
{
    return whorli_levels_run(host, sums, weights, sum_count, desc, NULL, bytes);
}

whorl_status whorl_levels_bytes(whorl_host *host, const whorl_sum *sum, const whorl_levels_desc *desc, uint64_t *bytes)
{
    return whorl_levels_bytes_weighted(host, sum, NULL, 1, desc, bytes);
}

void whorl_levels_free(whorl_host *host, whorl_levels *levels)
{
    whorl_block block;
    uint64_t s;
    if (levels == NULL)
        return;
    for (s = levels->sector_count; s-- > 0;)
        whorl_space_free(host, levels->sectors[s].made);
    block = levels->block;
    whorl_block_give(host, &block);
}

/* ---- >>reading --------------------------------------------------------------------------------------------------- */

/* A level is built by adding its pairs one after the other, from the outermost inwards. */
static void whorli_level_add(const whorl_levels *levels, whorl_level *level, uint64_t pair_index, uint64_t s,
                             uint64_t weight)
{
    const whorl_level_pair *pair = levels->pairs + pair_index;
    int32_t mirrored = weight == 2 && pair->twice_sz != 0;
    if (level->multiplicity == 0) {
        level->energy = pair->energy;
        level->twice_spin = pair->twice_spin;
        level->twice_sz = mirrored ? WHORL_NO_NUMBER : pair->twice_sz;
        level->sector_index = s;
    }
    if (level->twice_spin != pair->twice_spin) {
        level->twice_spin = -1;
        level->flags |= WHORL_LEVEL_MIXED;
    }
    if (level->twice_sz != pair->twice_sz)
        level->twice_sz = WHORL_NO_NUMBER;
    if (s < level->sector_index)
        level->sector_index = s;
    level->multiplicity += weight;
    level->spread = fabs(pair->energy - level->energy);
    if (pair->residual > level->residual)
        level->residual = pair->residual;
}

/* Whether the list of a sector may lack states of a level whose innermost energy is this. */
static int32_t whorli_level_cut(const whorl_levels *levels, const whorli_level_sector *sector, double energy)
{
    double outward = levels->highest ? -energy : energy, close = levels->checks.merge_tolerance;
    if (!sector->horizon_known)
        return 0;
    return sector->horizon_beyond ? outward - close > sector->horizon : outward + close >= sector->horizon;
}

static whorl_level whorli_level_none(void)
{
    whorl_level level;
    memset(&level, 0, sizeof level);
    level.sector = "";
    return level;
}

static double whorli_level_inner(const whorl_levels *levels, const whorl_level *level)
{
    return levels->highest ? level->energy - level->spread : level->energy + level->spread;
}

uint64_t whorl_levels_count(const whorl_levels *levels)
{
    return levels->level_count;
}

/* How many sectors the pairs first .. end - 1 in outward order come from. */
static uint64_t whorli_level_sectors(const whorl_levels *levels, uint64_t first, uint64_t end)
{
    uint64_t s, k, count = 0;
    for (s = 0; s < levels->sector_count; s++)
        for (k = first; k < end; k++)
            if (levels->places[k].sector == s) {
                count++;
                break;
            }
    return count;
}

/* Under SU(2) the states of spin S in a level are full multiplets: if they are not, some were missed. */
static int32_t whorli_level_breaks_multiplet(const whorl_levels *levels, uint64_t level)
{
    int32_t twice;
    if (!levels->symmetry.spin || !levels->checks.all_sectors)
        return 0;
    for (twice = 1; twice <= levels->sites; twice++)
        if (whorl_levels_spin_states(levels, level, twice) % (uint64_t)(twice + 1) != 0)
            return 1;
    return 0;
}

whorl_level whorl_levels_at(const whorl_levels *levels, uint64_t level)
{
    whorl_level all = whorli_level_none();
    uint64_t k, s;
    if (level >= levels->level_count)
        return all;
    for (k = levels->starts[level]; k < levels->starts[level + 1]; k++) {
        const whorli_level_place *place = levels->places + k;
        whorli_level_add(levels, &all, place->pair, place->sector, levels->sectors[place->sector].facts.weight);
    }
    all.sector = levels->sectors[all.sector_index].label;
    all.sectors = whorli_level_sectors(levels, levels->starts[level], levels->starts[level + 1]);
    for (s = 0; s < levels->sector_count; s++)
        if (whorli_level_cut(levels, levels->sectors + s, whorli_level_inner(levels, &all)))
            all.flags |= WHORL_LEVEL_OPEN;
    if (whorli_level_breaks_multiplet(levels, level))
        all.flags |= WHORL_LEVEL_OPEN;
    return all;
}

uint64_t whorl_levels_spin_states(const whorl_levels *levels, uint64_t level, int32_t twice_spin)
{
    uint64_t k, count = 0;
    if (level >= levels->level_count || twice_spin < 0)
        return 0;
    for (k = levels->starts[level]; k < levels->starts[level + 1]; k++)
        if (levels->pairs[levels->places[k].pair].twice_spin == twice_spin)
            count += levels->sectors[levels->places[k].sector].facts.weight;
    return count;
}

uint64_t whorl_levels_sz_states(const whorl_levels *levels, uint64_t level, int32_t twice_sz)
{
    uint64_t k, count = 0;
    if (level >= levels->level_count || twice_sz == WHORL_NO_NUMBER)
        return 0;
    for (k = levels->starts[level]; k < levels->starts[level + 1]; k++) {
        int32_t number = levels->pairs[levels->places[k].pair].twice_sz;
        int32_t mirrored = levels->sectors[levels->places[k].sector].facts.weight == 2;
        count += number == twice_sz || (mirrored && number != WHORL_NO_NUMBER && number == -twice_sz);
    }
    return count;
}

/* Smallest and largest numbers among the states of the ground level. */
static void whorli_levels_ground_numbers(const whorl_levels *levels, whorl_ground *ground)
{
    int32_t number;
    ground->least_spin = ground->most_spin = -1;
    ground->least_sz = ground->most_sz = WHORL_NO_NUMBER;
    for (number = 0; number <= levels->sites; number++)
        if (whorl_levels_spin_states(levels, 0, number) > 0) {
            ground->least_spin = ground->least_spin < 0 ? number : ground->least_spin;
            ground->most_spin = number;
        }
    for (number = -levels->sites; number <= levels->sites; number++)
        if (whorl_levels_sz_states(levels, 0, number) > 0) {
            ground->least_sz = ground->least_sz == WHORL_NO_NUMBER ? number : ground->least_sz;
            ground->most_sz = number;
        }
}

/*
 * The next level is the next of the list, or a value beyond the list of a sector that was solved whole; it is known if
 * no list ends before it.
 */
static void whorli_levels_ground_gap(const whorl_levels *levels, whorl_ground *ground)
{
    double outward = levels->highest ? -ground->energy : ground->energy, next = 0.0;
    int32_t known = levels->level_count > 1;
    uint64_t s;
    if (!ground->complete)
        return;
    if (known)
        next = levels->places[levels->starts[1]].outward;
    for (s = 0; s < levels->sector_count; s++) {
        const whorli_level_sector *sector = levels->sectors + s;
        if (sector->horizon_known && sector->facts.whole && (!known || sector->horizon < next)) {
            next = sector->horizon;
            known = 1;
        }
    }
    for (s = 0; s < levels->sector_count; s++)
        if (levels->sectors[s].horizon_known && levels->sectors[s].horizon < next - levels->checks.merge_tolerance)
            known = 0;
    ground->gap_known = known;
    ground->gap = known ? next - outward : 0.0;
}

whorl_ground whorl_levels_ground(const whorl_levels *levels)
{
    whorl_level lowest = whorl_levels_at(levels, 0);
    whorl_ground ground;
    memset(&ground, 0, sizeof ground);
    ground.energy = lowest.energy;
    ground.residual = lowest.residual;
    ground.multiplicity = lowest.multiplicity;
    ground.complete =
        lowest.multiplicity > 0 && (lowest.flags & WHORL_LEVEL_OPEN) == 0 && levels->checks.rechecked != 0;
    ground.spin_good = levels->symmetry.spin_square == 1;
    ground.sz_good = levels->symmetry.number;
    whorli_levels_ground_numbers(levels, &ground);
    whorli_levels_ground_gap(levels, &ground);
    return ground;
}

uint64_t whorl_levels_sector_count(const whorl_levels *levels)
{
    return levels->sector_count;
}

whorl_level_sector whorl_levels_sector_at(const whorl_levels *levels, uint64_t sector)
{
    whorl_level_sector facts;
    memset(&facts, 0, sizeof facts);
    facts.label = "";
    if (sector < levels->sector_count) {
        facts = levels->sectors[sector].facts;
        facts.label = levels->sectors[sector].label;
    }
    return facts;
}

whorl_level whorl_levels_in_sector_at(const whorl_levels *levels, uint64_t sector, uint64_t k)
{
    whorl_level level = whorli_level_none();
    const whorli_level_sector *from;
    uint64_t pair, end;
    if (sector >= levels->sector_count || k >= levels->sectors[sector].facts.levels)
        return level;
    from = levels->sectors + sector;
    end = k + 1 < from->facts.levels ? levels->sector_starts[from->first + k + 1] : from->facts.pairs;
    for (pair = levels->sector_starts[from->first + k]; pair < end; pair++)
        whorli_level_add(levels, &level, from->first + pair, sector, 1);
    level.sector = from->label;
    level.sectors = 1;
    if (whorli_level_cut(levels, from, whorli_level_inner(levels, &level)))
        level.flags |= WHORL_LEVEL_OPEN;
    return level;
}

whorl_level_pair whorl_levels_pair_at(const whorl_levels *levels, uint64_t sector, uint64_t k)
{
    whorl_level_pair none;
    memset(&none, 0, sizeof none);
    if (sector >= levels->sector_count || k >= levels->sectors[sector].facts.pairs)
        return none;
    return levels->pairs[levels->sectors[sector].first + k];
}

const void *whorl_levels_vector(const whorl_levels *levels, uint64_t sector, uint64_t k)
{
    const whorli_level_sector *from;
    if (sector >= levels->sector_count)
        return NULL;
    from = levels->sectors + sector;
    if (k >= from->vector_room || k >= from->facts.pairs)
        return NULL;
    return levels->vectors + from->vector_at +
           k * from->facts.dimension * whorl_element_bytes(whorl_levels_vector_element(levels, sector));
}

whorl_element whorl_levels_vector_element(const whorl_levels *levels, uint64_t sector)
{
    if (sector >= levels->sector_count)
        return WHORL_ELEMENT_DEFAULT;
    return levels->symmetry.gauge != 0 ? WHORL_COMPLEX_DOUBLE : levels->sectors[sector].facts.element;
}

const whorl_space *whorl_levels_space(const whorl_levels *levels, uint64_t sector)
{
    return sector < levels->sector_count ? levels->sectors[sector].space : NULL;
}

whorl_levels_symmetry whorl_levels_symmetry_of(const whorl_levels *levels)
{
    return levels->symmetry;
}

whorl_levels_checks whorl_levels_checks_of(const whorl_levels *levels)
{
    return levels->checks;
}

static whorl_status whorli_levels_hold_sector(whorl_host *host, const whorl_levels *levels, const whorl_sum *sum,
                                              const whorli_level_sector *sector, double *worst)
{
    whorl_level_sector facts = sector->facts;
    whorl_space *space;
    whorl_status status = whorli_levels_make_space(host, levels->sites, sector, &space);
    double ratio;
    if (status != WHORL_OK)
        return status;
    status =
        whorli_levels_exact_traces(host, sum, space, &facts.trace_exact, &facts.square_exact, &facts.square_traced);
    whorl_space_free(host, space);
    ratio = whorli_levels_trace_ratio(&facts);
    if (ratio > *worst)
        *worst = ratio;
    return status;
}

whorl_status whorl_levels_hold_against(whorl_host *host, const whorl_levels *levels, const whorl_sum *sum,
                                       double *worst)
{
    double most = 0.0;
    uint64_t s;
    whorl_status status = whorl_sum_check(host, sum);
    if (status == WHORL_OK)
        status = whorli_levels_check_hermitian(host, sum);
    if (status != WHORL_OK)
        return status;
    if (sum->sites != levels->sites || levels->given)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "give a sum over the same sites, and levels that were not found in a given space");
    for (s = 0; s < levels->sector_count && status == WHORL_OK; s++)
        if (levels->sectors[s].facts.traced)
            status = whorli_levels_hold_sector(host, levels, sum, levels->sectors + s, &most);
    if (status == WHORL_OK)
        *worst = most;
    return status;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
