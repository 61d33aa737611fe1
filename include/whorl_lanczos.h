/*
 * whorl_lanczos.h 0.1.0: a few eigenpairs at the lower or upper end of any Hermitian map.
 *
 *     whorl_lanczos_desc want = whorl_lanczos_default();          four lowest pairs, residual 1e-10 of the norm
 *     whorl_lanczos *solver;
 *     status = whorl_lanczos_make(&host, &map, &want, &solver);
 *     status = whorl_lanczos_advance(&host, &map, solver, 0);     to the end; or a budget of products at a time
 *     for k < whorl_lanczos_count(solver): whorl_lanczos_value(solver, k), _residual(solver, k), _vector(solver, k)
 *     whorl_lanczos_free(&host, solver);
 *
 * Method: thick-restart Lanczos (Wu and Simon, SIAM J. Matrix Anal. Appl. 22, 602 (2000)) with partial
 * reorthogonalisation (Simon, Math. Comp. 42, 115 (1984)): a recurrence follows the overlaps of the basis vectors, and
 * before they exceed a hundredth of the tolerance a vector and the next one are orthogonalised against the whole basis,
 * a second time where the first took much away. Accepted vectors are taken out of every new one. So no copy of a level
 * appears that is not there. A pair is accepted when ||A v - value v||, computed by a product made for it, is at most
 * tolerance times the norm estimate (the largest ||A v|| and |Ritz value| seen: a lower bound of ||A||, so the test
 * errs on the strict side). Accepted vectors are kept out of all later work.
 *
 * A Krylov space shows each degenerate level once. So when all wanted pairs are there, fresh random starts in the
 * complement of what was found follow, until one finds nothing beyond the list; what they find goes into it.
 * Multiplicity is thus counted in vectors. That the last start found nothing is a probabilistic check, not a proof, and
 * whorl_lanczos_checked tells that it was made.
 *
 * The lean form keeps three vectors and goes through the recurrence twice (Cullum and Willoughby, Lanczos Algorithms,
 * Birkhaeuser 1985): one pair only, no view of multiplicity, no check.
 *
 * It does not: interior eigenvalues, non-Hermitian maps, preconditioning.
 *
 * Memory: the solver is one block without pointers into itself; one call of advance takes one more block at a time.
 * Threads: those of the host; results do not depend on their number. A cancelled advance can be called again and goes
 * on to the same bits.
 */
#include "whorl_core.h"
#include "whorl_dense.h"
#include "whorl_map.h"

#ifndef WHORL_LANCZOS_INCLUDED
#define WHORL_LANCZOS_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_lanczos.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_LANCZOS_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

typedef int32_t whorl_end;
enum { WHORL_LOWEST = 0, WHORL_HIGHEST = 1 };

#define WHORL_LANCZOS_WANTED 4
#define WHORL_LANCZOS_TOLERANCE 1e-10
#define WHORL_LANCZOS_LEAST_TOLERANCE 1e-13      /* of double elements; smaller ones count as this */
#define WHORL_LANCZOS_LEAST_TOLERANCE_FLOAT 4e-6 /* of float elements */
#define WHORL_LANCZOS_MOST_PRODUCTS 100000
#define WHORL_LANCZOS_MOST_WANTED 1000

/* What to find. Every field at 0 is its default. */
typedef struct whorl_lanczos_desc {
    int32_t wanted;         /* pairs, 1 .. WHORL_LANCZOS_MOST_WANTED; 0: WHORL_LANCZOS_WANTED. Never more than rows */
    whorl_end end;          /* WHORL_LOWEST or WHORL_HIGHEST */
    double tolerance;       /* residual relative to the norm estimate; 0: WHORL_LANCZOS_TOLERANCE */
    uint64_t seed;          /* of the random starts: stream r of whorl_random_normal is start number r */
    int32_t window;         /* basis vectors between restarts; 0: chosen (fewer under a byte limit) */
    int32_t lean;           /* not 0: the lean form; wanted must be 0 or 1 */
    int32_t unchecked;      /* not 0: no fresh start once the wanted pairs are found */
    uint64_t most_products; /* 0: WHORL_LANCZOS_MOST_PRODUCTS */
    const void *start;      /* the first start vector, `rows` elements, not zero; NULL: random. Read by make only */
} whorl_lanczos_desc;

typedef struct whorl_lanczos whorl_lanczos;

/* All zero: four lowest pairs to 1e-10. */
WHORL_API whorl_lanczos_desc whorl_lanczos_default(void);

/*
 * The bytes that a solve takes from the host, exactly: the solver and the largest block that advance takes beside it.
 * Under a byte limit the window is made smaller until the solve fits, then one wanted pair is found by the lean form;
 * this is decided here and in make alike, from desc, map and the room under the limit. Takes nothing. Errors: as make.
 */
WHORL_API whorl_status whorl_lanczos_bytes(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc,
                                           uint64_t *bytes);
/*
 * Makes a solver; nothing is applied yet. desc NULL: defaults. The caller frees it with whorl_lanczos_free. Errors,
 * *solver is then NULL: WHORL_BAD_ARGUMENT, WHORL_NOT_HERMITIAN (map->hermitian is not set), WHORL_NOT_FINITE (start),
 * WHORL_TOO_LARGE, WHORL_OVER_LIMIT (says what would be enough), WHORL_NO_MEMORY, WHORL_CANCELLED.
 */
WHORL_API whorl_status whorl_lanczos_make(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc,
                                          whorl_lanczos **solver);
/*
 * Goes on for about `products` products (0: to the end). Cost of one: the product, and from 2 n (wanted + 8) to 2 n
 * (window + wanted) multiplications for orthogonality, as the drift demands. Returns WHORL_OK when done,
 * WHORL_UNFINISHED when the budget is used up, WHORL_NOT_CONVERGED when most_products is reached (what was accepted is
 * there). Errors: WHORL_BAD_ARGUMENT (another map than that of make), WHORL_NOT_FINITE (a product gave NaN, infinity,
 * or numbers beyond 1e150, whose squares overflow), WHORL_CANCELLED (call again: the same bits), those of the map,
 * those of memory.
 */
WHORL_API whorl_status whorl_lanczos_advance(whorl_host *host, const whorl_map *map, whorl_lanczos *solver,
                                             uint64_t products);
/* Gives the memory back; NULL is legal. */
WHORL_API void whorl_lanczos_free(whorl_host *host, whorl_lanczos *solver);

/* Accepted pairs so far; after WHORL_OK min(wanted, rows). */
WHORL_API int32_t whorl_lanczos_count(const whorl_lanczos *solver);
/* Pair k = 0 .. count-1, from the outermost inwards: its value, ||A v - value v|| as computed, and its unit vector. */
WHORL_API double whorl_lanczos_value(const whorl_lanczos *solver, int32_t k);
WHORL_API double whorl_lanczos_residual(const whorl_lanczos *solver, int32_t k);
WHORL_API const void *whorl_lanczos_vector(const whorl_lanczos *solver, int32_t k);
/* Products A v so far, all purposes. */
WHORL_API uint64_t whorl_lanczos_products(const whorl_lanczos *solver);
/* The norm estimate. */
WHORL_API double whorl_lanczos_norm(const whorl_lanczos *solver);
/* 1: a fresh random start found nothing beyond the list, or the list is all there is. */
WHORL_API int32_t whorl_lanczos_checked(const whorl_lanczos *solver);
/* 1: the check met a further vector of the innermost listed level: the list ends inside a multiplet. */
WHORL_API int32_t whorl_lanczos_cut(const whorl_lanczos *solver);
/* 1: the lean form runs. */
WHORL_API int32_t whorl_lanczos_is_lean(const whorl_lanczos *solver);
/* Basis vectors between restarts. */
WHORL_API int32_t whorl_lanczos_window(const whorl_lanczos *solver);

/*
 * The whole state: *bytes bytes owned by the solver, good until it advances or is freed. A copy is a checkpoint, for
 * the same machine type. whorl_lanczos_resume makes a solver from a copy: going on gives the same bits as if nothing
 * had happened. Errors: WHORL_BAD_ARGUMENT (not a state, or of another map), those of memory.
 */
WHORL_API const void *whorl_lanczos_state(const whorl_lanczos *solver, uint64_t *bytes);
WHORL_API whorl_status whorl_lanczos_resume(whorl_host *host, const whorl_map *map, const void *state, uint64_t bytes,
                                            whorl_lanczos **solver);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_LANCZOS_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_LANCZOS_IMPLEMENTED)
#define WHORL_LANCZOS_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>state ----------------------------------------------------------------------------------------------------- */

enum {
    WHORLI_LANCZOS_START = 0, /* a new Krylov space, or a new cycle of the lean form */
    WHORLI_LANCZOS_GROW,      /* one more basis vector; lean: first pass */
    WHORLI_LANCZOS_CHECK,     /* look at the Ritz pairs */
    WHORLI_LANCZOS_VERIFY,    /* products for the residuals of converged ones */
    WHORLI_LANCZOS_SUM,       /* lean: second pass */
    WHORLI_LANCZOS_DONE
};
#define WHORLI_LANCZOS_MAGIC UINT64_C(0x77686f726c6c7a31)
#define WHORLI_LANCZOS_DRIFT 1e-2 /* of the tolerance: overlaps that basis vectors may have */
#define WHORLI_LEAN_STEPS 300 /* of the lean form between its two passes */

/*
 * Everything that a resumed run needs, without pointers: places are byte offsets from this struct. Columns: `wanted`
 * places for accepted vectors, filled from the right end, then the basis, so that both are contiguous; window + 1 of
 * these. Values are those of sign * A, so that the wanted end is always the lowest.
 */
typedef struct whorli_lanczos_state {
    uint64_t magic, bytes, n, seed, most_products, products, run;
    uint64_t column_bytes;
    uint64_t at_value, at_residual, at_order, at_projected, at_rotation, at_ritz, at_drift, at_columns;
    double tolerance, sign, norm, beta;
    double drift_limit; /* loss of orthogonality at which a vector is cleaned against the whole basis; 0: always */
    double strict; /* of the tolerance: what the recurrence must promise before a product is spent on a residual */
    whorl_element element;
    int32_t wanted, window, lean, unchecked, given_start;
    int32_t phase, accepted;
    int32_t filled;    /* basis vectors that have been multiplied; the next one follows them unless beta is 0 */
    int32_t base;      /* of them, those that the last restart left */
    int32_t fresh;     /* this space was begun with a full list */
    int32_t gained;    /* pairs accepted from this space */
    int32_t verify;    /* leading Ritz vectors accepted since the last restart */
    int32_t shown;     /* Ritz values of the last look */
    int32_t exhausted; /* basis and accepted vectors span everything */
    int32_t checked, cut;
    int32_t clean;     /* the next vector is cleaned at any drift: two in a row, as the recurrence has two terms */
    int32_t polished;  /* leading Ritz vectors made orthonormal to working accuracy */
    int32_t refuted;   /* a product did not confirm Ritz vector number `verify` */
    int32_t again;     /* the next space begins with column 0 of the basis */
    int32_t step;      /* lean: of either pass */
} whorli_lanczos_state;

struct whorl_lanczos {
    whorl_block block;
    whorli_lanczos_state *state;
};

typedef struct whorli_lanczos_parts {
    whorl_lanczos *solver;
    whorli_lanczos_state *state;
    double *value, *residual, *projected, *rotation, *ritz, *drift;
    int32_t *order;
    char *columns;
} whorli_lanczos_parts;

static double *whorli_lanczos_reals(const whorli_lanczos_state *s, uint64_t at)
{
    return (double *)(void *)((char *)(uintptr_t)s + at);
}

/* Column j of all: accepted ones end at `wanted`. */
static void *whorli_lanczos_column(const whorli_lanczos_state *s, int32_t j)
{
    return (char *)(uintptr_t)s + s->at_columns + (uint64_t)j * s->column_bytes;
}

static void *whorli_lanczos_basis(const whorli_lanczos_state *s, int32_t j)
{
    return whorli_lanczos_column(s, s->wanted + j);
}

static uint64_t whorli_lanczos_stride(const whorli_lanczos_state *s)
{
    return s->column_bytes / whorl_element_bytes(s->element);
}

/* One function measures and carves the solver. The lean form has three columns and a matrix over its steps. */
static void whorli_lanczos_carve(whorl_layout *layout, const whorli_lanczos_state *plan, whorli_lanczos_parts *parts)
{
    uint64_t wanted = (uint64_t)plan->wanted, m = (uint64_t)(plan->lean ? WHORLI_LEAN_STEPS : plan->window);
    uint64_t columns = plan->lean ? 3 : wanted + m + 1;
    parts->solver = (whorl_lanczos *)whorl_layout_carve(layout, 1, sizeof(whorl_lanczos));
    parts->state = (whorli_lanczos_state *)whorl_layout_carve(layout, 1, sizeof(whorli_lanczos_state));
    parts->value = (double *)whorl_layout_carve(layout, wanted, 8);
    parts->residual = (double *)whorl_layout_carve(layout, wanted, 8);
    parts->order = (int32_t *)whorl_layout_carve(layout, wanted, 4);
    parts->projected = (double *)whorl_layout_carve(layout, plan->lean ? 2 * m : m * m, 8);
    parts->rotation = (double *)whorl_layout_carve(layout, m * m, 8);
    parts->ritz = (double *)whorl_layout_carve(layout, 2 * m, 8);
    parts->drift = (double *)whorl_layout_carve(layout, plan->lean ? 0 : 3 * m, 8);
    parts->columns = (char *)whorl_layout_carve(layout, columns, plan->column_bytes);
}

/* What one call inside advance takes beside the solver. */
static uint64_t whorli_lanczos_scratch(const whorl_host *host, const whorl_map *map, const whorli_lanczos_state *plan)
{
    /* a step that overwrites its target is an apply where the map has none of its own */
    uint64_t product = whorl_map_scratch(host, map, plan->lean || map->step != NULL ? 0 : 1);
    uint64_t dense = plan->lean ? 0 : whorl_dense_symmetric_bytes((uint64_t)plan->window, 1);
    return dense > product ? dense : product;
}

static uint64_t whorli_lanczos_total(const whorl_host *host, const whorl_map *map, const whorli_lanczos_state *plan)
{
    whorli_lanczos_parts parts;
    whorl_layout layout = {NULL, 0};
    whorli_lanczos_carve(&layout, plan, &parts);
    return whorl_size_add(whorl_block_bytes(layout.bytes), whorli_lanczos_scratch(host, map, plan));
}

/* ---- >>plan ------------------------------------------------------------------------------------------------------ */

whorl_lanczos_desc whorl_lanczos_default(void)
{
    whorl_lanczos_desc desc;
    memset(&desc, 0, sizeof desc);
    return desc;
}

static whorl_status whorli_lanczos_check(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc)
{
    whorl_status status = whorl_map_check(host, map);
    if (status != WHORL_OK)
        return status;
    if (!map->hermitian)
        return whorl_fail(host, WHORL_NOT_HERMITIAN,
                          "the solver needs a Hermitian map: set map.hermitian if it is one");
    if (desc->wanted < 0 || desc->wanted > WHORL_LANCZOS_MOST_WANTED)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "ask for 1 to 1000 pairs, or take the whole spectrum");
    if (desc->end != WHORL_LOWEST && desc->end != WHORL_HIGHEST)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "end must be WHORL_LOWEST or WHORL_HIGHEST");
    if (!whorl_is_finite(desc->tolerance) || desc->tolerance < 0.0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the tolerance must be a number above 0, or 0 for the default");
    if (desc->window < 0 || desc->window > WHORL_VECTOR_MOST_COLUMNS)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the window must be 0 (chosen) or up to 2048 vectors");
    if (desc->lean && desc->wanted > 1)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the lean form finds one pair: ask for one, or leave lean at 0");
    return WHORL_OK;
}

/* Fills the plan; the choice of window and form is made here, before any allocation. */
static whorl_status whorli_lanczos_plan(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc,
                                        whorli_lanczos_state *plan)
{
    uint64_t n = map->rows, room, least, reals;
    int32_t is_float = whorl_element_is_float(map->element), smallest;
    whorl_status status = whorli_lanczos_check(host, map, desc);
    double floor_tolerance = is_float ? WHORL_LANCZOS_LEAST_TOLERANCE_FLOAT : WHORL_LANCZOS_LEAST_TOLERANCE;
    if (status != WHORL_OK)
        return status;
    memset(plan, 0, sizeof *plan);
    plan->magic = WHORLI_LANCZOS_MAGIC;
    plan->n = n;
    plan->element = map->element;
    plan->seed = desc->seed;
    plan->most_products = desc->most_products == 0 ? WHORL_LANCZOS_MOST_PRODUCTS : desc->most_products;
    plan->tolerance = desc->tolerance == 0.0 ? WHORL_LANCZOS_TOLERANCE : desc->tolerance;
    if (plan->tolerance < floor_tolerance)
        plan->tolerance = floor_tolerance;
    plan->sign = desc->end == WHORL_LOWEST ? 1.0 : -1.0;
    plan->unchecked = desc->unchecked != 0;
    plan->wanted = desc->wanted == 0 ? (desc->lean ? 1 : WHORL_LANCZOS_WANTED) : desc->wanted;
    if ((uint64_t)plan->wanted > n)
        plan->wanted = (int32_t)n;
    /* what accepted vectors lack couples to all later ones: together no more than a quarter of the tolerance */
    plan->strict = 0.25 / sqrt((double)(plan->wanted > 0 ? plan->wanted : 1));
    if (!is_float)
        plan->drift_limit = WHORLI_LANCZOS_DRIFT * plan->tolerance;
    reals = whorl_size_multiply(n, whorl_element_bytes(map->element));
    if (reals >= (UINT64_C(1) << 62))
        return whorl_fail(host, WHORL_TOO_LARGE, "a vector exceeds the address space: solve a smaller space");
    plan->column_bytes = (reals + 63) & ~UINT64_C(63);
    plan->window = desc->window != 0 ? desc->window : 2 * plan->wanted + 24;
    smallest = plan->wanted + 4;
    if (plan->window < smallest)
        plan->window = smallest;
    if ((uint64_t)plan->window > n)
        plan->window = n > 0 ? (int32_t)n : 1;
    plan->lean = desc->lean != 0 && n > 0;
    if (host->byte_limit == 0 || n == 0)
        return WHORL_OK;
    room = host->byte_limit > host->bytes_used ? host->byte_limit - host->bytes_used : 0;
    while (!plan->lean && whorli_lanczos_total(host, map, plan) > room && plan->window > smallest)
        plan->window--;
    if (!plan->lean && plan->wanted == 1 && whorli_lanczos_total(host, map, plan) > room)
        plan->lean = 1;
    least = whorli_lanczos_total(host, map, plan);
    if (least > room) {
        whorl_text text = whorl_fail_begin(host, WHORL_OVER_LIMIT);
        whorl_text_add(&text, "the byte limit of ");
        whorl_text_add_unsigned(&text, host->byte_limit);
        whorl_text_add(&text, " is too low for this solve: raise it to at least ");
        whorl_text_add_unsigned(&text, whorl_size_add(host->bytes_used, least));
        return WHORL_OVER_LIMIT;
    }
    return WHORL_OK;
}

whorl_status whorl_lanczos_bytes(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc,
                                 uint64_t *bytes)
{
    whorl_lanczos_desc defaults = whorl_lanczos_default();
    whorli_lanczos_state plan;
    whorl_status status = whorli_lanczos_plan(host, map, desc == NULL ? &defaults : desc, &plan);
    uint64_t total;
    if (status != WHORL_OK)
        return status;
    total = whorli_lanczos_total(host, map, &plan);
    if (total == UINT64_MAX)
        return whorl_fail(host, WHORL_TOO_LARGE, "the vectors exceed the address space: ask for fewer pairs");
    *bytes = total;
    return WHORL_OK;
}

/* ---- >>make ------------------------------------------------------------------------------------------------------ */

static whorl_status whorli_lanczos_take(whorl_host *host, const whorli_lanczos_state *plan, whorli_lanczos_parts *parts)
{
    whorl_layout layout = {NULL, 0};
    whorl_block block;
    whorl_status status;
    whorli_lanczos_state *s;
    whorli_lanczos_carve(&layout, plan, parts);
    status = whorl_layout_take(host, &layout, &block);
    if (status != WHORL_OK)
        return status;
    whorli_lanczos_carve(&layout, plan, parts);
    memset(block.at, 0, (size_t)(parts->columns - block.at));
    parts->solver->block = block;
    parts->solver->state = s = parts->state;
    *s = *plan;
    s->bytes = layout.bytes - (uint64_t)((char *)s - block.at);
    s->at_value = (uint64_t)((char *)parts->value - (char *)s);
    s->at_residual = (uint64_t)((char *)parts->residual - (char *)s);
    s->at_order = (uint64_t)((char *)parts->order - (char *)s);
    s->at_projected = (uint64_t)((char *)parts->projected - (char *)s);
    s->at_rotation = (uint64_t)((char *)parts->rotation - (char *)s);
    s->at_ritz = (uint64_t)((char *)parts->ritz - (char *)s);
    s->at_drift = (uint64_t)((char *)parts->drift - (char *)s);
    s->at_columns = (uint64_t)(parts->columns - (char *)s);
    return WHORL_OK;
}

whorl_status whorl_lanczos_make(whorl_host *host, const whorl_map *map, const whorl_lanczos_desc *desc,
                                whorl_lanczos **solver)
{
    whorl_lanczos_desc defaults = whorl_lanczos_default();
    whorli_lanczos_parts parts;
    whorli_lanczos_state plan;
    whorl_status status;
    *solver = NULL;
    if (desc == NULL)
        desc = &defaults;
    status = whorli_lanczos_plan(host, map, desc, &plan);
    if (status != WHORL_OK)
        return status;
    if (plan.n > 0 && desc->start != NULL) {
        whorl_complex square = {0.0, 0.0};
        status = whorl_vector_dot(host, map->element, plan.n, desc->start, desc->start, &square);
        if (status == WHORL_OK && !whorl_is_finite(square.re))
            status = whorl_fail(host, WHORL_NOT_FINITE, "the start vector has no finite norm: correct it");
        if (status == WHORL_OK && !(square.re > 0.0))
            status = whorl_fail(host, WHORL_BAD_ARGUMENT, "the start vector is zero: pass another, or NULL for random");
        if (status != WHORL_OK)
            return status;
    }
    status = whorli_lanczos_take(host, &plan, &parts);
    if (status != WHORL_OK)
        return status;
    if (plan.n > 0 && desc->start != NULL) {
        parts.state->given_start = 1;
        status =
            whorl_vector_copy(host, map->element, plan.n, desc->start,
                              plan.lean ? whorli_lanczos_column(parts.state, 2) : whorli_lanczos_basis(parts.state, 0));
        if (status != WHORL_OK) {
            whorl_lanczos_free(host, parts.solver);
            return status;
        }
    }
    if (plan.n == 0) {
        parts.state->phase = WHORLI_LANCZOS_DONE;
        parts.state->checked = 1;
    }
    *solver = parts.solver;
    return WHORL_OK;
}

void whorl_lanczos_free(whorl_host *host, whorl_lanczos *solver)
{
    whorl_block block;
    if (solver == NULL)
        return;
    block = solver->block;
    whorl_block_give(host, &block);
}

const void *whorl_lanczos_state(const whorl_lanczos *solver, uint64_t *bytes)
{
    *bytes = solver->state->bytes;
    return solver->state;
}

/* Can every count of a state be used as an index? */
static int32_t whorli_lanczos_is_sound(const whorli_lanczos_state *s)
{
    int32_t steps = s->lean ? WHORLI_LEAN_STEPS : s->window;
    return s->wanted >= 0 && s->wanted <= WHORL_LANCZOS_MOST_WANTED && (uint64_t)s->wanted <= s->n && s->window >= 1 &&
           s->window <= WHORL_VECTOR_MOST_COLUMNS && (!s->lean || s->wanted == 1) &&
           s->column_bytes == ((s->n * whorl_element_bytes(s->element) + 63) & ~UINT64_C(63)) &&
           s->phase >= WHORLI_LANCZOS_START && s->phase <= WHORLI_LANCZOS_DONE &&
           (s->lean || s->phase != WHORLI_LANCZOS_SUM) && s->accepted >= 0 && s->accepted <= s->wanted &&
           s->filled >= 0 && s->filled <= steps && s->base >= 0 && s->base <= s->filled && s->verify >= 0 &&
           s->verify <= s->filled && s->polished >= 0 && s->shown >= 0 && s->shown <= steps && s->step >= 0 &&
           s->step <= steps && (s->phase != WHORLI_LANCZOS_GROW || (s->lean ? s->step : s->filled) < steps) &&
           (s->phase != WHORLI_LANCZOS_CHECK || s->filled > 0) &&
           (s->phase != WHORLI_LANCZOS_VERIFY || s->lean || s->filled < s->window || !(s->beta > 0.0));
}

/* Is the order of the accepted pairs one of their places? */
static int32_t whorli_lanczos_is_listed(const whorli_lanczos_state *s)
{
    const int32_t *order = (const int32_t *)(const void *)((const char *)s + s->at_order);
    int32_t k, j;
    for (k = 0; k < s->accepted; k++) {
        if (order[k] < s->wanted - s->accepted || order[k] >= s->wanted)
            return 0;
        for (j = 0; j < k; j++)
            if (order[j] == order[k])
                return 0;
    }
    return 1;
}

whorl_status whorl_lanczos_resume(whorl_host *host, const whorl_map *map, const void *state, uint64_t bytes,
                                  whorl_lanczos **solver)
{
    whorli_lanczos_state plan, made;
    whorli_lanczos_parts parts;
    whorl_status status = whorl_map_check(host, map);
    *solver = NULL;
    if (status != WHORL_OK)
        return status;
    if (state == NULL || bytes < sizeof plan)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "this is no state of the solver: pass a copy of whorl_lanczos_state");
    memcpy(&plan, state, sizeof plan);
    if (plan.magic != WHORLI_LANCZOS_MAGIC || plan.bytes != bytes)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "this is no state of the solver: pass a copy of whorl_lanczos_state");
    if (plan.n != map->rows || plan.element != map->element || !map->hermitian)
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "the state belongs to another map: resume with the one it was made for");
    if (!whorli_lanczos_is_sound(&plan))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the state is damaged: pass a copy of whorl_lanczos_state");
    status = whorli_lanczos_take(host, &plan, &parts);
    if (status != WHORL_OK)
        return status;
    made = *parts.state;
    if (made.bytes == bytes)
        memcpy(parts.state, state, (size_t)bytes);
    if (made.bytes != bytes || made.at_value != plan.at_value || made.at_residual != plan.at_residual ||
        made.at_order != plan.at_order || made.at_projected != plan.at_projected ||
        made.at_rotation != plan.at_rotation || made.at_ritz != plan.at_ritz || made.at_drift != plan.at_drift ||
        made.at_columns != plan.at_columns || !whorli_lanczos_is_listed(parts.state)) {
        whorl_lanczos_free(host, parts.solver);
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the state is damaged: pass a copy of whorl_lanczos_state");
    }
    *solver = parts.solver;
    return WHORL_OK;
}

/* ---- >>results --------------------------------------------------------------------------------------------------- */

static int32_t whorli_lanczos_place(const whorl_lanczos *solver, int32_t k)
{
    const whorli_lanczos_state *s = solver->state;
    const int32_t *order = (const int32_t *)(const void *)((const char *)s + s->at_order);
    return k < 0 || k >= s->accepted ? -1 : order[k];
}

int32_t whorl_lanczos_count(const whorl_lanczos *solver)
{
    return solver->state->accepted;
}

double whorl_lanczos_value(const whorl_lanczos *solver, int32_t k)
{
    int32_t place = whorli_lanczos_place(solver, k);
    return place < 0 ? 0.0 : solver->state->sign * whorli_lanczos_reals(solver->state, solver->state->at_value)[place];
}

double whorl_lanczos_residual(const whorl_lanczos *solver, int32_t k)
{
    int32_t place = whorli_lanczos_place(solver, k);
    return place < 0 ? 0.0 : whorli_lanczos_reals(solver->state, solver->state->at_residual)[place];
}

const void *whorl_lanczos_vector(const whorl_lanczos *solver, int32_t k)
{
    int32_t place = whorli_lanczos_place(solver, k);
    if (place < 0)
        return NULL;
    return solver->state->lean ? whorli_lanczos_column(solver->state, 2) : whorli_lanczos_column(solver->state, place);
}

uint64_t whorl_lanczos_products(const whorl_lanczos *solver)
{
    return solver->state->products;
}

double whorl_lanczos_norm(const whorl_lanczos *solver)
{
    return solver->state->norm;
}

int32_t whorl_lanczos_checked(const whorl_lanczos *solver)
{
    return solver->state->checked;
}

int32_t whorl_lanczos_cut(const whorl_lanczos *solver)
{
    return solver->state->cut;
}

int32_t whorl_lanczos_is_lean(const whorl_lanczos *solver)
{
    return solver->state->lean;
}

int32_t whorl_lanczos_window(const whorl_lanczos *solver)
{
    return solver->state->window;
}

/* ---- >>cancel ---------------------------------------------------------------------------------------------------- */

/*
 * Work that changes the state in place cannot stop in the middle. While it runs, polls go on, and a wish to stop is
 * remembered and granted at its end.
 */
typedef struct whorli_deferral {
    whorl_poll_function poll;
    void *context;
    int32_t asked;
} whorli_deferral;

static int32_t whorli_deferred_poll(void *context, const whorl_progress *progress)
{
    whorli_deferral *deferral = (whorli_deferral *)context;
    if (!deferral->asked && deferral->poll(deferral->context, progress) != 0)
        deferral->asked = 1;
    return 0;
}

static void whorli_defer(whorl_host *host, whorli_deferral *deferral)
{
    deferral->poll = host->poll;
    deferral->context = host->poll_context;
    deferral->asked = 0;
    if (host->poll != NULL) {
        host->poll = whorli_deferred_poll;
        host->poll_context = deferral;
    }
}

/* Back to the host's own hook; a good status becomes WHORL_CANCELLED if it was asked for. */
static whorl_status whorli_defer_end(whorl_host *host, const whorli_deferral *deferral, whorl_status status)
{
    host->poll = deferral->poll;
    host->poll_context = deferral->context;
    if (status == WHORL_OK && deferral->asked)
        return whorl_fail(host, WHORL_CANCELLED, "stopped because the poll hook asked for it");
    return status;
}

/* ---- >>grow ------------------------------------------------------------------------------------------------------ */

/* w := w / ||w|| after orthogonalising it twice against the accepted vectors; *norm is that of what was left. */
static whorl_status whorli_lanczos_begin_vector(whorl_host *host, whorli_lanczos_state *s, void *w, double *norm)
{
    whorl_complex overlaps[WHORL_LANCZOS_MOST_WANTED], square = {0.0, 0.0};
    uint64_t stride = whorli_lanczos_stride(s);
    int32_t pass;
    for (pass = 0; pass < 3; pass++) {
        whorl_status status = WHORL_OK;
        if (s->accepted > 0)
            status = whorl_vector_project(host, s->element, s->n, s->accepted,
                                          whorli_lanczos_column(s, s->wanted - s->accepted), stride, w, overlaps);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, s->element, s->n, w, w, &square);
        if (status != WHORL_OK)
            return status;
        *norm = sqrt(square.re);
        if (!(*norm > 0.0) || !whorl_is_finite(*norm))
            return WHORL_OK;
        status = whorl_vector_scale(host, s->element, s->n, 1.0 / *norm, w);
        if (status != WHORL_OK)
            return status;
    }
    return WHORL_OK;
}

/* A new Krylov space: from the given vector, or from random numbers of stream `run`. */
static whorl_status whorli_lanczos_start(whorl_host *host, whorli_lanczos_state *s)
{
    void *first = whorli_lanczos_basis(s, 0);
    double norm = 0.0;
    whorl_status status = WHORL_OK;
    if (!(s->run == 0 && s->given_start) && !s->again)
        status = whorl_vector_random(host, s->element, s->n, s->seed, s->run, first);
    if (status == WHORL_OK)
        status = whorli_lanczos_begin_vector(host, s, first, &norm);
    if (status != WHORL_OK)
        return status;
    if (!s->again)
        s->run++;
    s->fresh = s->accepted == s->wanted && !s->again;
    s->again = 0;
    if (!(norm > 0.0)) /* a start inside what was found: take the next one */
        return WHORL_OK;
    memset(whorli_lanczos_reals(s, s->at_projected), 0, (size_t)(8 * (uint64_t)s->window * (uint64_t)s->window));
    s->filled = s->base = 0;
    s->beta = 0.0;
    s->gained = 0;
    s->exhausted = 0;
    s->clean = 0;
    s->phase = WHORLI_LANCZOS_GROW;
    return WHORL_OK;
}

/* Takes w out of the span of basis vectors first .. last - 1 and the accepted ones where asked; *taken = sum
 * |overlap|^2. */
static whorl_status whorli_lanczos_clean(whorl_host *host, whorli_lanczos_state *s, int32_t first, int32_t last,
                                         void *w, double *taken)
{
    whorl_complex overlaps[64];
    uint64_t stride = whorli_lanczos_stride(s);
    int32_t at, k;
    *taken = 0.0;
    for (at = first; at < last; at += 64) { /* in portions, so that overlaps fit here */
        int32_t count = last - at < 64 ? last - at : 64;
        whorl_status status =
            whorl_vector_project(host, s->element, s->n, count, whorli_lanczos_column(s, at), stride, w, overlaps);
        if (status != WHORL_OK)
            return status;
        for (k = 0; k < count; k++)
            *taken += overlaps[k].re * overlaps[k].re + overlaps[k].im * overlaps[k].im;
    }
    return WHORL_OK;
}

/*
 * The drift of a basis vector is what the recurrence says of its overlaps with the earlier ones (Simon, Math. Comp. 42,
 * 115 (1984)): rows previous, current and next of the drift array. For basis vectors k < base, kept by a restart,
 * the projected matrix couples to vector `base` only, by the arrow. Writes the next row and returns its largest entry.
 */
static double whorli_lanczos_drift(const whorli_lanczos_state *s, double alpha, double beta, double norm)
{
    const double *projected = whorli_lanczos_reals(s, s->at_projected);
    const double *previous = whorli_lanczos_reals(s, s->at_drift), *current = previous + s->window;
    double *next = whorli_lanczos_reals(s, s->at_drift) + 2 * (uint64_t)s->window;
    double noise = 4.0 * 2.220446049250313e-16 * norm, largest = noise / beta, arrow = 0.0, back;
    uint64_t m = (uint64_t)s->window, j = (uint64_t)s->filled, base = (uint64_t)s->base, k;
    if (j <= base)
        return largest;
    back = projected[(j - 1) * m + j];
    for (k = 0; k < base; k++)
        arrow += projected[k * m + base] * current[k];
    for (k = 0; k + 1 < j; k++) {
        double w = (projected[k * m + k] - alpha) * current[k] - back * previous[k];
        if (k < base)
            w += projected[k * m + base] * current[base];
        else
            w += projected[k * m + k + 1] * current[k + 1] +
                 (k == base ? arrow : projected[(k - 1) * m + k] * current[k - 1]);
        next[k] = (w + (w < 0.0 ? -noise : noise)) / beta;
        if (fabs(next[k]) > largest)
            largest = fabs(next[k]);
    }
    next[j - 1] = noise / beta;
    return largest;
}

/* Moves the rows of the drift on; `cleaned`: the new vector is orthogonal to all up to rounding. */
static void whorli_lanczos_drift_on(whorli_lanczos_state *s, int32_t cleaned, double beta)
{
    uint64_t m = (uint64_t)s->window, j = (uint64_t)s->filled, k;
    double *rows = whorli_lanczos_reals(s, s->at_drift), noise = 4.0 * 2.220446049250313e-16 * s->norm / beta;
    memcpy(rows, rows + m, (size_t)(8 * m));
    memcpy(rows + m, rows + 2 * m, (size_t)(8 * m));
    for (k = 0; cleaned && k < j; k++)
        rows[m + k] = noise;
    rows[j] = 1.0;
    if (j + 1 < m)
        rows[m + j + 1] = 1.0;
    rows[m + j] = noise;
}

/*
 * Orthogonalises w = A v_j: against its two predecessors and what was accepted always; against the whole basis after a
 * restart (the arrow), before the next one, and where the drift asks for it. *beta is the norm left.
 */
static whorl_status whorli_lanczos_orthogonalise(whorl_host *host, whorli_lanczos_state *s, void *w, double alpha,
                                                 double norm, double *beta, int32_t *all)
{
    int32_t j = s->filled, first = s->wanted - s->accepted, last = s->wanted + j + 1, pass;
    whorl_complex square = {0.0, 0.0};
    double taken = 0.0;
    whorl_status status = whorli_lanczos_clean(host, s, j > 0 ? last - 2 : last - 1, last, w, &taken);
    *all = j == s->base || s->clean || j + 1 == s->window || !(s->drift_limit > 0.0);
    if (!*all) {
        if (status == WHORL_OK)
            status = whorli_lanczos_clean(host, s, first, s->wanted, w, &taken);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, s->element, s->n, w, w, &square);
        if (status != WHORL_OK)
            return status;
        *beta = sqrt(square.re);
        if (*beta > 1e-6 * norm && whorli_lanczos_drift(s, alpha, *beta, norm) <= s->drift_limit)
            return WHORL_OK;
        *all = 2; /* and the one after it */
    }
    for (pass = 0; pass < 3 && status == WHORL_OK; pass++) {
        status = whorli_lanczos_clean(host, s, first, last, w, &taken);
        if (status == WHORL_OK)
            status = whorl_vector_dot(host, s->element, s->n, w, w, &square);
        if (square.re > taken && (pass > 0 || j > s->base || j == 0)) /* little was taken: orthogonal to rounding */
            break;
    }
    *beta = square.re > taken ? sqrt(square.re) : 0.0;
    return status;
}

/* One product and the next basis vector. Nothing of the state changes before all of it is done. */
static whorl_status whorli_lanczos_grow(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    int32_t j = s->filled, all = 0, exhausted;
    void *v = whorli_lanczos_basis(s, j), *w = whorli_lanczos_basis(s, j + 1);
    double *projected = whorli_lanczos_reals(s, s->at_projected), beta = 0.0, largest;
    whorl_complex dots[2] = {{0.0, 0.0}, {0.0, 0.0}};
    whorl_status status = whorl_map_step(host, map, s->sign, v, 0.0, w, dots);
    if (status != WHORL_OK)
        return status;
    if (!whorl_is_finite(dots[0].re) || !whorl_is_finite(dots[1].re))
        return whorl_fail(host, WHORL_NOT_FINITE,
                          "a product gave NaN, infinity or overflow: check or scale the couplings");
    largest = sqrt(dots[1].re) > s->norm ? sqrt(dots[1].re) : s->norm;
    status = whorli_lanczos_orthogonalise(host, s, w, dots[0].re, largest, &beta, &all);
    if (status != WHORL_OK)
        return status;
    /* exhausted by dimension, or what is left is rounding */
    exhausted = (uint64_t)j + 1 + (uint64_t)s->accepted >= s->n;
    if (exhausted || beta <= (whorl_element_is_float(s->element) ? 1e-6 : 1e-14) * largest)
        beta = 0.0;
    else
        status = whorl_vector_scale(host, s->element, s->n, 1.0 / beta, w);
    if (status != WHORL_OK)
        return status;
    projected[(uint64_t)j * (uint64_t)s->window + (uint64_t)j] = dots[0].re;
    if (j + 1 < s->window)
        projected[(uint64_t)j * (uint64_t)s->window + (uint64_t)j + 1] = beta;
    s->norm = largest;
    if (beta > 0.0)
        whorli_lanczos_drift_on(s, all != 0, beta);
    s->clean = all == 2;
    s->beta = beta;
    s->filled = j + 1;
    s->exhausted = exhausted;
    s->products++;
    s->phase = WHORLI_LANCZOS_CHECK;
    return WHORL_OK;
}

/* ---- >>restart --------------------------------------------------------------------------------------------------- */

/* Eigenpairs of the projected matrix (lower triangle, column by column) into ritz and rotation. */
static whorl_status whorli_lanczos_ritz(whorl_host *host, whorli_lanczos_state *s)
{
    const double *projected = whorli_lanczos_reals(s, s->at_projected);
    double *rotation = whorli_lanczos_reals(s, s->at_rotation), *ritz = whorli_lanczos_reals(s, s->at_ritz);
    uint64_t i, j, n = (uint64_t)s->filled, m = (uint64_t)s->window;
    for (j = 0; j < n; j++)
        for (i = 0; i < n; i++)
            rotation[j * n + i] = i >= j ? projected[j * m + i] : 0.0;
    return whorl_dense_symmetric(host, n, rotation, ritz, 1);
}

/* The residual of Ritz pair i as the recurrence tells it. */
static double whorli_lanczos_estimate(const whorli_lanczos_state *s, int32_t i)
{
    const double *rotation = whorli_lanczos_reals(s, s->at_rotation);
    return fabs(s->beta * rotation[(uint64_t)i * (uint64_t)s->filled + (uint64_t)s->filled - 1]);
}

/* The innermost accepted value; a further pair counts only below it. */
static double whorli_lanczos_threshold(const whorli_lanczos_state *s)
{
    const int32_t *order = (const int32_t *)(const void *)((const char *)s + s->at_order);
    return whorli_lanczos_reals(s, s->at_value)[order[s->accepted - 1]];
}

/* Is Ritz value number i (with i better ones before it) one for the list? */
static int32_t whorli_lanczos_belongs(const whorli_lanczos_state *s, int32_t i, double value)
{
    const int32_t *order = (const int32_t *)(const void *)((const char *)s + s->at_order);
    int32_t rank = s->wanted - 1 - i; /* accepted value that it would push out */
    if (s->accepted + i < s->wanted)
        return 1;
    if (rank < 0)
        return 0;
    return value < whorli_lanczos_reals(s, s->at_value)[order[rank]] - 2.0 * s->tolerance * s->norm;
}

/* After a rotation of the basis the next vector's drift is bounded by what it was before, whatever the combination. */
static void whorli_lanczos_drift_kept(whorli_lanczos_state *s)
{
    double *rows = whorli_lanczos_reals(s, s->at_drift), sum = 0.0;
    uint64_t m = (uint64_t)s->window, k;
    for (k = 0; k < (uint64_t)s->filled; k++)
        sum += rows[m + k] * rows[m + k];
    sum = sqrt(sum);
    for (k = 0; k < m; k++)
        rows[m + k] = sum;
}

/*
 * Thick restart: the first `keep` Ritz vectors become the basis, the next vector follows them, and the projected matrix
 * is their values with an arrow of couplings to it.
 */
static whorl_status whorli_lanczos_restart(whorl_host *host, whorli_lanczos_state *s, int32_t keep)
{
    double *projected = whorli_lanczos_reals(s, s->at_projected), *ritz = whorli_lanczos_reals(s, s->at_ritz);
    const double *rotation = whorli_lanczos_reals(s, s->at_rotation);
    uint64_t m = (uint64_t)s->window;
    int32_t j;
    whorli_deferral deferral;
    whorl_status status;
    whorli_defer(host, &deferral);
    status = whorl_vector_combine(host, s->element, s->n, s->filled, keep, whorli_lanczos_basis(s, 0),
                                  whorli_lanczos_stride(s), rotation);
    if (status == WHORL_OK && s->beta > 0.0)
        status = whorl_vector_copy(host, s->element, s->n, whorli_lanczos_basis(s, s->filled),
                                   whorli_lanczos_basis(s, keep));
    if (status == WHORL_OK) {
        memset(projected, 0, (size_t)(8 * m * m));
        for (j = 0; j < keep; j++) {
            projected[(uint64_t)j * m + (uint64_t)j] = ritz[j];
            if (keep < s->window)
                projected[(uint64_t)j * m + (uint64_t)keep] =
                    s->beta * rotation[(uint64_t)j * (uint64_t)s->filled + (uint64_t)s->filled - 1];
        }
        whorli_lanczos_drift_kept(s);
        s->shown = s->filled;
        s->filled = s->base = keep;
        s->verify = s->polished = s->refuted = 0;
        s->phase = WHORLI_LANCZOS_VERIFY;
    }
    return whorli_defer_end(host, &deferral, status);
}

/* ---- >>accept ---------------------------------------------------------------------------------------------------- */

/* Puts a verified pair into the list, in the place of the innermost one if it is full. */
static whorl_status whorli_lanczos_accept(whorl_host *host, whorli_lanczos_state *s, const void *x, double value,
                                          double residual)
{
    int32_t *order = (int32_t *)(void *)((char *)s + s->at_order), place, k;
    double *values = whorli_lanczos_reals(s, s->at_value);
    int32_t count = s->accepted < s->wanted ? s->accepted : s->wanted - 1;
    whorl_status status;
    place = s->accepted < s->wanted ? s->wanted - 1 - s->accepted : order[s->wanted - 1];
    status = whorl_vector_copy(host, s->element, s->n, x, whorli_lanczos_column(s, place));
    if (status != WHORL_OK)
        return status;
    values[place] = value;
    whorli_lanczos_reals(s, s->at_residual)[place] = residual;
    for (k = count; k > 0 && values[order[k - 1]] > value; k--)
        order[k] = order[k - 1];
    order[k] = place;
    s->accepted = count + 1;
    s->gained++;
    return WHORL_OK;
}

/* The basis without its first `count` vectors: the last ones move into their places, then the next vector. */
static whorl_status whorli_lanczos_drop(whorl_host *host, whorli_lanczos_state *s, int32_t count)
{
    double *projected = whorli_lanczos_reals(s, s->at_projected);
    uint64_t m = (uint64_t)s->window;
    int32_t left = s->filled - count, i;
    whorl_status status = WHORL_OK;
    for (i = 0; i < count && i < left && status == WHORL_OK; i++) {
        int32_t from = s->filled - 1 - i;
        status = whorl_vector_copy(host, s->element, s->n, whorli_lanczos_basis(s, from), whorli_lanczos_basis(s, i));
        projected[(uint64_t)i * m + (uint64_t)i] = projected[(uint64_t)from * m + (uint64_t)from];
        if (s->filled < s->window)
            projected[(uint64_t)i * m + (uint64_t)s->filled] = projected[(uint64_t)from * m + (uint64_t)s->filled];
    }
    if (status == WHORL_OK && s->beta > 0.0 && left < s->filled)
        status = whorl_vector_copy(host, s->element, s->n, whorli_lanczos_basis(s, s->filled),
                                   whorli_lanczos_basis(s, left));
    for (i = 0; i < left; i++) { /* the arrow moves with the next vector */
        double coupling = s->filled < s->window ? projected[(uint64_t)i * m + (uint64_t)s->filled] : 0.0;
        if (s->filled < s->window && left != s->filled)
            projected[(uint64_t)i * m + (uint64_t)s->filled] = 0.0;
        projected[(uint64_t)i * m + (uint64_t)left] = coupling;
    }
    for (i = left; i < s->filled; i++)
        memset(projected + (uint64_t)i * m, 0, (size_t)(8 * m));
    s->filled = s->base = left;
    return status;
}

/* The residual of Ritz pair i after a restart, as the recurrence tells it. */
static double whorli_lanczos_arrow(const whorli_lanczos_state *s, int32_t i)
{
    const double *projected = whorli_lanczos_reals(s, s->at_projected);
    return s->beta > 0.0 ? fabs(projected[(uint64_t)i * (uint64_t)s->window + (uint64_t)s->filled]) : 0.0;
}

/* One product for Ritz vector number `verify`: accepted if its residual is small enough, refuted otherwise. */
static whorl_status whorli_lanczos_verify_one(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    void *x = whorli_lanczos_basis(s, s->verify), *image = whorli_lanczos_basis(s, s->filled + (s->beta > 0.0));
    whorl_complex dots[2] = {{0.0, 0.0}, {0.0, 0.0}}, square = {0.0, 0.0};
    whorli_deferral deferral;
    double residual = 0.0;
    whorl_status status;
    if (s->polished <= s->verify) { /* changes x, so it is done once */
        whorli_defer(host, &deferral);
        status = whorli_lanczos_begin_vector(host, s, x, &residual);
        s->polished = s->verify + 1;
        status = whorli_defer_end(host, &deferral, status);
        if (status != WHORL_OK)
            return status;
    }
    status = whorl_map_step(host, map, s->sign, x, 0.0, image, dots);
    if (status == WHORL_OK)
        status = whorl_vector_add(host, s->element, s->n, whorl_complex_of(-dots[0].re, 0.0), x, image);
    if (status == WHORL_OK)
        status = whorl_vector_dot(host, s->element, s->n, image, image, &square);
    if (status != WHORL_OK)
        return status;
    residual = sqrt(square.re);
    if (!whorl_is_finite(residual))
        return whorl_fail(host, WHORL_NOT_FINITE,
                          "a product gave NaN, infinity or overflow: check or scale the couplings");
    whorli_defer(host, &deferral);
    if (residual <= s->tolerance * s->norm) {
        status = whorli_lanczos_accept(host, s, x, dots[0].re, residual);
        if (status == WHORL_OK)
            s->verify++;
    } else {
        if (s->drift_limit > 0.0) { /* perhaps the drift was too large: begin again from here, without it */
            status = whorl_vector_copy(host, s->element, s->n, x, whorli_lanczos_basis(s, 0));
            s->drift_limit = 0.0;
            s->again = 1;
        }
        s->strict *= 0.25; /* the recurrence promised too much: ask more of it */
        s->refuted = 1;
    }
    if (status == WHORL_OK)
        s->products++;
    return whorli_defer_end(host, &deferral, status);
}

static void whorli_lanczos_finish(whorli_lanczos_state *s, int32_t checked)
{
    s->checked = checked;
    s->phase = WHORLI_LANCZOS_DONE;
}

/* Does a Ritz value that was left behind equal the innermost accepted one? */
static int32_t whorli_lanczos_is_cut(const whorli_lanczos_state *s, int32_t first)
{
    const double *ritz = whorli_lanczos_reals(s, s->at_ritz);
    return first < s->shown && ritz[first] <= whorli_lanczos_threshold(s) + 2.0 * s->tolerance * s->norm;
}

/* Verifies leading Ritz vectors while they belong to the list and look converged; then goes on, or starts afresh. */
static whorl_status whorli_lanczos_verify(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    const double *projected = whorli_lanczos_reals(s, s->at_projected);
    whorli_deferral deferral;
    whorl_status status;
    int32_t i = s->verify;
    if (!s->refuted && i < s->filled && whorli_lanczos_arrow(s, i) <= s->strict * s->tolerance * s->norm &&
        whorli_lanczos_belongs(s, 0, projected[(uint64_t)i * (uint64_t)s->window + (uint64_t)i])) {
        return whorli_lanczos_verify_one(host, map, s); /* still in this phase: the next one follows */
    }
    if (s->accepted == s->wanted && s->exhausted && !s->refuted) {
        s->cut = whorli_lanczos_is_cut(s, s->verify);
        whorli_lanczos_finish(s, 1);
        return WHORL_OK;
    }
    if (s->accepted == s->wanted && s->unchecked) {
        whorli_lanczos_finish(s, 0);
        return WHORL_OK;
    }
    if (s->again || !(s->beta > 0.0) || (s->accepted == s->wanted && !s->fresh)) {
        s->phase = WHORLI_LANCZOS_START;
        return WHORL_OK;
    }
    whorli_defer(host, &deferral);
    status = whorli_lanczos_drop(host, s, s->verify);
    s->verify = 0;
    s->phase = WHORLI_LANCZOS_GROW;
    return whorli_defer_end(host, &deferral, status);
}

/* How often to look: the eigenproblem of the window is small beside a product in a large space only. */
static int32_t whorli_lanczos_is_due(const whorli_lanczos_state *s)
{
    int32_t interval = s->n >= 65536 ? 4 : s->n >= 4096 ? 8 : 12;
    if (interval < s->window / 8)
        interval = s->window / 8;
    return s->filled == s->window || !(s->beta > 0.0) || (s->filled - s->base) % interval == 0;
}

/*
 * The space shows nothing below the list: is that the end? Not while its lowest Ritz vector may still hide a lower
 * level: one that makes up a part w of it leaves a residual of at least sqrt(w (1 - w)) times the distance between the
 * two. A residual of 1/256 of the distance to the list keeps w below 1/65000.
 */
static int32_t whorli_lanczos_verdict(whorli_lanczos_state *s)
{
    const double *ritz = whorli_lanczos_reals(s, s->at_ritz);
    double residual = whorli_lanczos_estimate(s, 0), margin = 2.0 * s->tolerance * s->norm;
    if (residual > s->tolerance * s->norm && 256.0 * residual > ritz[0] - whorli_lanczos_threshold(s) - margin)
        return 0;
    if (s->fresh && s->gained == 0) {
        s->shown = s->filled;
        s->cut = whorli_lanczos_is_cut(s, 0);
        whorli_lanczos_finish(s, 1);
    } else {
        s->phase = WHORLI_LANCZOS_START;
    }
    return 1;
}

static whorl_status whorli_lanczos_look(whorl_host *host, whorli_lanczos_state *s)
{
    const double *ritz = whorli_lanczos_reals(s, s->at_ritz);
    int32_t need = 0, converged = 0, keep;
    whorl_status status;
    if (!whorli_lanczos_is_due(s)) {
        s->phase = WHORLI_LANCZOS_GROW;
        return WHORL_OK;
    }
    status = whorli_lanczos_ritz(host, s);
    if (status != WHORL_OK)
        return status;
    if (fabs(ritz[0]) > s->norm)
        s->norm = fabs(ritz[0]);
    if (fabs(ritz[s->filled - 1]) > s->norm)
        s->norm = fabs(ritz[s->filled - 1]);
    while (need < s->filled && whorli_lanczos_belongs(s, need, ritz[need]))
        need++;
    while (converged < need && whorli_lanczos_estimate(s, converged) <= s->strict * s->tolerance * s->norm)
        converged++;
    if (need == 0 && whorli_lanczos_verdict(s))
        return WHORL_OK;
    if (s->filled < s->window && s->beta > 0.0 && (need == 0 || converged < need)) {
        s->phase = WHORLI_LANCZOS_GROW;
        return WHORL_OK;
    }
    keep = s->beta > 0.0 ? need + (s->window - need) / 2 : need;
    if (s->beta > 0.0 && keep > s->window - 1)
        keep = s->window - 1;
    if (keep > s->filled)
        keep = s->filled;
    return whorli_lanczos_restart(host, s, keep);
}

static whorl_status whorli_lanczos_begin(whorl_host *host, whorli_lanczos_state *s)
{
    whorli_deferral deferral;
    whorl_status status;
    if ((uint64_t)s->accepted >= s->n) {
        whorli_lanczos_finish(s, 1);
        return WHORL_OK;
    }
    whorli_defer(host, &deferral);
    status = whorli_lanczos_start(host, s);
    return whorli_defer_end(host, &deferral, status);
}

/* ---- >>lean ------------------------------------------------------------------------------------------------------ */

/* Columns: 0 and 1 take turns as the last two Lanczos vectors; 2 is the start and then the result. */
static double *whorli_lean_alpha(const whorli_lanczos_state *s)
{
    return whorli_lanczos_reals(s, s->at_projected);
}

static double *whorli_lean_beta(const whorli_lanczos_state *s)
{
    return whorli_lean_alpha(s) + WHORLI_LEAN_STEPS;
}

/* x := start of a cycle, of unit norm; both passes begin with a copy. */
static whorl_status whorli_lean_start(whorl_host *host, whorli_lanczos_state *s)
{
    void *x = whorli_lanczos_column(s, 2);
    double norm = 0.0;
    whorl_status status = WHORL_OK;
    if (s->run == 0 && !s->given_start)
        status = whorl_vector_random(host, s->element, s->n, s->seed, 0, x);
    if (status == WHORL_OK)
        status = whorl_vector_norm(host, s->element, s->n, x, &norm);
    if (status == WHORL_OK)
        status = whorl_vector_scale(host, s->element, s->n, 1.0 / norm, x);
    if (status == WHORL_OK)
        status = whorl_vector_copy(host, s->element, s->n, x, whorli_lanczos_column(s, 0));
    if (status != WHORL_OK)
        return status;
    s->run++;
    s->step = s->filled = 0;
    s->phase = WHORLI_LANCZOS_GROW;
    return WHORL_OK;
}

/* One step of the three-term recurrence; alpha and beta are written in the first pass, and come out equal in the
 * second. */
static whorl_status whorli_lean_step(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    int32_t j = s->step;
    void *v = whorli_lanczos_column(s, j & 1), *w = whorli_lanczos_column(s, 1 - (j & 1));
    double *alpha = whorli_lean_alpha(s), *beta = whorli_lean_beta(s), norm = 0.0;
    whorl_complex dots[2] = {{0.0, 0.0}, {0.0, 0.0}};
    whorl_status status = whorl_map_step(host, map, s->sign, v, j > 0 ? -beta[j - 1] : 0.0, w, dots);
    if (status != WHORL_OK)
        return status;
    if (!whorl_is_finite(dots[0].re) || !whorl_is_finite(dots[1].re))
        return whorl_fail(host, WHORL_NOT_FINITE,
                          "a product gave NaN, infinity or overflow: check or scale the couplings");
    status = whorl_vector_add(host, s->element, s->n, whorl_complex_of(-dots[0].re, 0.0), v, w);
    if (status == WHORL_OK)
        status = whorl_vector_norm(host, s->element, s->n, w, &norm);
    if (status != WHORL_OK)
        return status;
    if (norm <= (whorl_element_is_float(s->element) ? 1e-6 : 1e-14) * (fabs(dots[0].re) + s->norm))
        norm = 0.0;
    else
        status = whorl_vector_scale(host, s->element, s->n, 1.0 / norm, w);
    alpha[j] = dots[0].re;
    beta[j] = norm;
    if (sqrt(dots[0].re * dots[0].re + norm * norm) > s->norm)
        s->norm = sqrt(dots[0].re * dots[0].re + norm * norm);
    s->step++;
    s->products++;
    return status;
}

/* Eigenvectors of the tridiagonal matrix of `steps` steps: all of them, or their last components only. */
static whorl_status whorli_lean_ritz(whorl_host *host, whorli_lanczos_state *s, int32_t steps, int32_t whole)
{
    double *z = whorli_lanczos_reals(s, s->at_rotation), *ritz = whorli_lanczos_reals(s, s->at_ritz);
    uint64_t n = (uint64_t)steps, rows = whole ? n : 1, i;
    memcpy(ritz, whorli_lean_alpha(s), (size_t)(8 * n));
    memcpy(ritz + WHORLI_LEAN_STEPS, whorli_lean_beta(s), (size_t)(8 * n));
    memset(z, 0, (size_t)(8 * rows * n));
    if (!whole)
        z[n - 1] = 1.0;
    for (i = 0; whole && i < n; i++)
        z[i * n + i] = 1.0;
    return whorl_dense_tridiagonal(host, n, ritz, ritz + WHORLI_LEAN_STEPS, z, rows);
}

/* After a step of the first pass: go on, or turn to the second. */
static whorl_status whorli_lean_look(whorl_host *host, whorli_lanczos_state *s)
{
    const double *z = whorli_lanczos_reals(s, s->at_rotation);
    double beta = whorli_lean_beta(s)[s->step - 1];
    int32_t last = s->step == WHORLI_LEAN_STEPS || !(beta > 0.0);
    whorl_status status;
    s->phase = WHORLI_LANCZOS_GROW;
    if (!last && s->step % 10 != 0)
        return WHORL_OK;
    status = whorli_lean_ritz(host, s, s->step, 0);
    if (status != WHORL_OK || !(last || fabs(beta * z[0]) <= s->strict * s->tolerance * s->norm))
        return status;
    status = whorli_lean_ritz(host, s, s->step, 1);
    if (status == WHORL_OK)
        status = whorl_vector_copy(host, s->element, s->n, whorli_lanczos_column(s, 2), whorli_lanczos_column(s, 0));
    if (status == WHORL_OK)
        status = whorl_vector_scale(host, s->element, s->n, z[0], whorli_lanczos_column(s, 2));
    s->filled = s->step;
    s->step = 0;
    s->phase = WHORLI_LANCZOS_SUM;
    return status;
}

/* The second pass: x += z_j v_j. The last vector needs no product; then the residual. */
static whorl_status whorli_lean_sum(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    const double *z = whorli_lanczos_reals(s, s->at_rotation);
    if (s->step + 1 < s->filled) {
        whorl_status status = whorli_lean_step(host, map, s);
        if (status == WHORL_OK)
            status = whorl_vector_add(host, s->element, s->n, whorl_complex_of(z[s->step], 0.0),
                                      whorli_lanczos_column(s, s->step & 1), whorli_lanczos_column(s, 2));
        return status;
    }
    s->phase = WHORLI_LANCZOS_VERIFY;
    return WHORL_OK;
}

static whorl_status whorli_lean_verify(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    void *x = whorli_lanczos_column(s, 2), *image = whorli_lanczos_column(s, 0);
    whorl_complex dots[2] = {{0.0, 0.0}, {0.0, 0.0}};
    double norm = 0.0, residual = 0.0;
    whorl_status status = whorl_vector_norm(host, s->element, s->n, x, &norm);
    if (status == WHORL_OK)
        status = whorl_vector_scale(host, s->element, s->n, 1.0 / norm, x);
    if (status == WHORL_OK)
        status = whorl_map_step(host, map, s->sign, x, 0.0, image, dots);
    if (status == WHORL_OK)
        status = whorl_vector_add(host, s->element, s->n, whorl_complex_of(-dots[0].re, 0.0), x, image);
    if (status == WHORL_OK)
        status = whorl_vector_norm(host, s->element, s->n, image, &residual);
    if (status != WHORL_OK)
        return status;
    s->products++;
    whorli_lanczos_reals(s, s->at_value)[0] = dots[0].re;
    whorli_lanczos_reals(s, s->at_residual)[0] = residual;
    if (residual <= s->tolerance * s->norm) {
        s->accepted = 1;
        whorli_lanczos_finish(s, s->n == 1);
        return WHORL_OK;
    }
    if (s->filled < WHORLI_LEAN_STEPS)
        s->strict *= 0.25;
    s->phase = WHORLI_LANCZOS_START; /* again from here */
    return WHORL_OK;
}

/* Its steps change vectors in place, so a wish to stop is granted after each of them. */
static whorl_status whorli_lean_advance(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    whorli_deferral deferral;
    whorl_status status = WHORL_OK;
    whorli_defer(host, &deferral);
    if (s->phase == WHORLI_LANCZOS_START)
        status = whorli_lean_start(host, s);
    else if (s->phase == WHORLI_LANCZOS_GROW) {
        status = whorli_lean_step(host, map, s);
        if (status == WHORL_OK)
            status = whorli_lean_look(host, s);
    } else if (s->phase == WHORLI_LANCZOS_SUM)
        status = whorli_lean_sum(host, map, s);
    else
        status = whorli_lean_verify(host, map, s);
    return whorli_defer_end(host, &deferral, status);
}

/* ---- >>advance --------------------------------------------------------------------------------------------------- */

static whorl_status whorli_lanczos_advance_one(whorl_host *host, const whorl_map *map, whorli_lanczos_state *s)
{
    if (s->lean)
        return whorli_lean_advance(host, map, s);
    switch (s->phase) {
    case WHORLI_LANCZOS_START: return whorli_lanczos_begin(host, s);
    case WHORLI_LANCZOS_GROW: return whorli_lanczos_grow(host, map, s);
    case WHORLI_LANCZOS_CHECK: return whorli_lanczos_look(host, s);
    default: return whorli_lanczos_verify(host, map, s);
    }
}

whorl_status whorl_lanczos_advance(whorl_host *host, const whorl_map *map, whorl_lanczos *solver, uint64_t products)
{
    whorli_lanczos_state *s = solver->state;
    uint64_t begin = s->products;
    whorl_status status = whorl_map_check(host, map);
    if (status != WHORL_OK)
        return status;
    if (map->rows != s->n || map->element != s->element || !map->hermitian)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "advance with the map that the solver was made for");
    while (s->phase != WHORLI_LANCZOS_DONE) {
        if (s->products >= s->most_products)
            return WHORL_NOT_CONVERGED;
        if (products != 0 && s->products - begin >= products)
            return WHORL_UNFINISHED;
        whorl_stage(host, "Lanczos", s->products, 0);
        status = whorl_poll(host);
        if (status == WHORL_OK)
            status = whorli_lanczos_advance_one(host, map, s);
        if (status != WHORL_OK)
            return status;
    }
    return WHORL_OK;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
