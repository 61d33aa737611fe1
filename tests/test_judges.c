/*
 * test_judges.c: the way from a sum to its levels against general-purpose libraries and against products that share no
 * code with it: LAPACK on all levels, ARPACK on the lowest, Kronecker matrices, residuals by the product term by term.
 */
#include "check.h"
#include "dense_judge.h"
#include "whorl.h"

static const double eps = 1.1102230246251565e-16; /* 2^-53, LAPACK's eps */

static const int kinds[4] = {JUDGE_HERMITIAN | JUDGE_REAL, JUDGE_HERMITIAN,
                             JUDGE_HERMITIAN | JUDGE_REAL | JUDGE_CONSERVING, JUDGE_HERMITIAN | JUDGE_CONSERVING};
static const char *const kind_name[4] = {"real", "complex", "conserving real", "conserving complex"};

static double largest(double a, double b) { return fabs(a) > fabs(b) ? fabs(a) : fabs(b); }

/* The library's way to a dense matrix: the map applied to all unit vectors at one go. 1 or 2 doubles an element. */
static double *matrix_of_map(whorl_host *host, const whorl_map *map)
{
    uint64_t n = map->columns, parts = whorl_element_is_complex(map->element) ? 2 : 1, k;
    double *unit = judge_reals(parts * n * n), *matrix = judge_reals(parts * n * n);
    for (k = 0; k < n; k++)
        unit[parts * (k + n * k)] = 1.0;
    CHECK_STATUS(whorl_map_apply(host, map, unit, matrix, (int32_t)n), WHORL_OK, host);
    free(unit);
    return matrix;
}

/* max_k ||A v_k - l_k v_k|| by the naive product. */
static double worst_residual(const whorl_sum *sum, const uint64_t *states, uint64_t n, uint64_t count,
                             const double *levels, const double *v, int is_complex)
{
    double worst = 0.0;
    uint64_t k;
    for (k = 0; k < count; k++) {
        double residual = judge_residual(sum, states, n, levels[k], v + (is_complex ? 2 : 1) * n * k, is_complex);
        if (!(residual <= worst))
            worst = residual;
    }
    return worst;
}

/* max |<v_k, v_l> - delta_kl| */
static double worst_overlap(uint64_t n, uint64_t count, const double *v, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, k, l, r;
    double worst = 0.0;
    for (k = 0; k < count; k++)
        for (l = 0; l <= k; l++) {
            const double *x = v + parts * n * k, *y = v + parts * n * l;
            double re = k == l ? -1.0 : 0.0, im = 0.0;
            for (r = 0; r < parts * n; r++)
                re += x[r] * y[r];
            for (r = 0; r < n && is_complex; r++)
                im += x[2 * r] * y[2 * r + 1] - x[2 * r + 1] * y[2 * r];
            if (!(sqrt(re * re + im * im) <= worst))
                worst = sqrt(re * re + im * im);
        }
    return worst;
}

/* ---- LAPACK on all levels ---------------------------------------------------------------------------------------- */

/* The part of a Kronecker matrix between the states of a list, as the library's element type has it. */
static double *part_of(const double *whole, int32_t sites, const uint64_t *states, uint64_t n, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, size = UINT64_C(1) << sites, r, c, part;
    double *matrix = judge_reals(parts * n * n);
    for (c = 0; c < n; c++)
        for (r = 0; r < n; r++)
            for (part = 0; part < parts; part++)
                matrix[parts * (r + n * c) + part] =
                    whole[2 * ((states == NULL ? r : states[r]) + size * (states == NULL ? c : states[c])) + part];
    return matrix;
}

/* One sum in one space: the map's matrix against Kronecker products, its levels against LAPACK's levels of these. */
static void judge_space(const whorl_sum *sum, const double *whole, const whorl_space *space, const uint64_t *states,
                        const char *name)
{
    whorl_host host = whorl_host_default();
    whorl_action_desc want = whorl_action_default();
    whorl_action *action = NULL;
    whorl_map map;
    uint64_t n = whorl_space_count(space), parts, k;
    double *mine, *judge, *levels = judge_reals(n), *others = judge_reals(n), bound = whorl_sum_norm_bound(sum), norm;
    int is_complex;
    want.sums = sum;
    want.sum_count = 1;
    want.source = space;
    CHECK_STATUS(whorl_action_make(&host, &want, &action), WHORL_OK, &host);
    if (action == NULL)
        return;
    map = whorl_action_map(action);
    is_complex = whorl_element_is_complex(map.element);
    parts = is_complex ? 2 : 1;
    CHECK(map.columns == n && map.rows == n && is_complex == !whorl_sum_is_real(sum));
    mine = matrix_of_map(&host, &map);
    judge = part_of(whole, sum->sites, states, n, is_complex);
    for (k = 0; k < parts * n * n; k++)
        if (!(fabs(mine[k] - judge[k]) <= 1e-14 * bound)) {
            CHECK_NEAR(mine[k], judge[k], 1e-14 * bound, name);
            break;
        }
    if (is_complex)
        CHECK_STATUS(whorl_dense_hermitian(&host, n, mine, levels, n <= 130), WHORL_OK, &host);
    else
        CHECK_STATUS(whorl_dense_symmetric(&host, n, mine, levels, n <= 130), WHORL_OK, &host);
    norm = largest(levels[0], levels[n - 1]);
    if (n <= 130 && norm > 0.0) { /* vectors: LAPACK's ratios, by the naive product */
        double residual = worst_residual(sum, states, n, n, levels, mine, is_complex);
        CHECK_NEAR(residual / ((double)n * eps * norm), 0.0, 30.0, name);
        CHECK_NEAR(worst_overlap(n, n, mine, is_complex) / ((double)n * eps), 0.0, 30.0, name);
    }
#ifdef HAVE_LAPACK
    if (is_complex)
        CHECK(judge_lapack_hermitian(n, judge, others, 0) == 0);
    else
        CHECK(judge_lapack_symmetric(n, judge, others, 0) == 0);
    norm = largest(others[0], others[n - 1]);
    for (k = 0; k < n; k++)
        CHECK_NEAR(levels[k], others[k], 1e-12 * norm, name);
#endif
    whorl_action_free(&host, action);
    free(mine);
    free(judge);
    free(levels);
    free(others);
}

static void judge_sum(uint64_t seed, int32_t sites, int kind)
{
    whorl_term *terms = (whorl_term *)judge_memory(80, sizeof(whorl_term));
    whorl_sum sum = judge_random_sum(seed, sites, (uint64_t)(2 * sites + 6), kinds[kind], terms);
    double *whole = judge_dense(&sum);
    whorl_host host = whorl_host_default();
    whorl_space *space = NULL;
    char name[80];
    int32_t down;
    snprintf(name, sizeof name, "%s sum of %d sites, seed %d", kind_name[kind], (int)sites, (int)seed);
    if (sites <= 8 || kind == 0 || (sites == 9 && kind == 1)) {
        CHECK_STATUS(whorl_space_make_all(&host, sites, &space), WHORL_OK, &host);
        judge_space(&sum, whole, space, NULL, name);
        whorl_space_free(&host, space);
    }
    for (down = 0; (kinds[kind] & JUDGE_CONSERVING) && down <= sites; down++) {
        uint64_t count, *states = judge_states_down(sites, down, &count);
        space = NULL;
        CHECK_STATUS(whorl_space_make_down(&host, sites, down, &space), WHORL_OK, &host);
        CHECK(whorl_space_count(space) == count);
        judge_space(&sum, whole, space, states, name);
        whorl_space_free(&host, space);
        free(states);
    }
    free(whole);
    free(terms);
}

static void test_all_levels(void)
{
    int32_t sites;
    int kind;
    for (sites = 1; sites <= 10; sites++)
        for (kind = 0; kind < 4; kind++)
            judge_sum((uint64_t)(100 * kind + sites), sites, kind);
#ifndef HAVE_LAPACK
    CHECK_SKIP("levels are not compared with LAPACK: install liblapack-dev");
#endif
}

int main(void)
{
    check_begin("test_judges");
    check_run("all_levels", test_all_levels);
    return check_end();
}
