/* Levels in one call: against published values, LAPACK on Kronecker products, and every pair of routes. */
#include "check.h"
#include "dense_judge.h"
#include "reference.h"
#include "whorl_levels.h"

#define MOST_TERMS 4096

/* ---- sums -------------------------------------------------------------------------------------------------------- */

typedef struct model {
    whorl_term terms[MOST_TERMS];
    uint64_t used;
    whorl_sum sum;
} model;

static model *model_begin(void)
{
    model *m = (model *)malloc(sizeof *m);
    m->used = 0;
    return m;
}

static const whorl_sum *model_end(model *m, int32_t sites)
{
    whorl_host host = whorl_host_default();
    CHECK_STATUS(whorl_sum_from_terms(&host, sites, m->terms, m->used, &m->sum), WHORL_OK, &host);
    return &m->sum;
}

static void add_exchange(model *m, int32_t i, int32_t j, double coupling)
{
    m->used += whorl_terms_exchange(m->terms + m->used, i, j, coupling);
}

static void add_string(model *m, uint64_t x, uint64_t z, double c)
{
    m->used += whorl_terms_string(m->terms + m->used, x, z, c);
}

static void add_ring(model *m, int32_t sites, int32_t step, double coupling)
{
    int32_t i;
    for (i = 0; i < sites; i++)
        add_exchange(m, i, (i + step) % sites, coupling);
}

static double random_number(uint64_t stream, uint64_t counter)
{
    return whorl_random_uniform(20251, stream, counter) - 0.5;
}

static uint64_t bit(int32_t site)
{
    return UINT64_C(1) << site;
}

/* Random sums of every symmetry class. */
enum { CLASS_SPIN, CLASS_CHIRAL, CLASS_NUMBER, CLASS_NUMBER_COMPLEX, CLASS_FIELD, CLASS_PARITY, CLASS_GAUGE, CLASS_NONE,
       CLASS_DIAGONAL, CLASS_REVERSIBLE, CLASS_COUNT };

static void add_random(model *m, int32_t kind, int32_t sites, uint64_t seed)
{
    int32_t i, j;
    uint64_t at = 0;
    uint64_t stream = 1000 * seed + (uint64_t)kind;
#define NEXT random_number(stream, at++)
    for (i = 0; i < sites; i++)
        for (j = i + 1; j < sites; j++) {
            uint64_t both = bit(i) | bit(j);
            if (kind == CLASS_SPIN || kind == CLASS_CHIRAL || kind == CLASS_FIELD)
                add_exchange(m, i, j, NEXT);
            if (kind == CLASS_NUMBER || kind == CLASS_NUMBER_COMPLEX || kind == CLASS_REVERSIBLE) {
                double c = NEXT;
                add_string(m, both, 0, c);
                add_string(m, both, both, c);
                add_string(m, 0, both, NEXT);
            }
            if (kind == CLASS_NUMBER_COMPLEX || kind == CLASS_REVERSIBLE) { /* D (S_i x S_j)_z: XY - YX */
                double c = NEXT;
                add_string(m, both, bit(j), c);
                add_string(m, both, bit(i), -c);
            }
            if (kind == CLASS_PARITY) {
                add_string(m, both, 0, NEXT);
                add_string(m, both, both, NEXT);
                add_string(m, both, bit(i), NEXT);
                add_string(m, 0, both, NEXT);
            }
            if (kind == CLASS_GAUGE) { /* XY bonds alone: real after turning every second site */
                if (((i ^ j) & 1) != 0)
                    add_string(m, both, bit(i), NEXT), add_string(m, both, bit(j), NEXT);
                add_string(m, 0, both, NEXT);
            }
            if (kind == CLASS_NONE) {
                add_string(m, both, bit(i), NEXT);
                add_string(m, bit(i), bit(j), NEXT);
                add_string(m, 0, both, NEXT);
            }
            if (kind == CLASS_DIAGONAL)
                add_string(m, 0, both, NEXT);
        }
    for (i = 0; i < sites; i++) {
        if (kind == CLASS_NUMBER || kind == CLASS_NUMBER_COMPLEX || kind == CLASS_PARITY || kind == CLASS_DIAGONAL ||
            kind == CLASS_NONE)
            add_string(m, 0, bit(i), NEXT);
        if (kind == CLASS_NONE)
            add_string(m, bit(i), 0, NEXT), add_string(m, bit(i), bit(i), NEXT);
        if (kind == CLASS_FIELD) /* uniform and tilted: commutes with S^2 only */
            add_string(m, 0, bit(i), 0.375), add_string(m, bit(i), 0, 0.125);
        if (kind == CLASS_CHIRAL && i + 2 < sites) { /* S_i . (S_j x S_k): complex, SU(2) */
            static const int32_t even[3][3] = {{0, 1, 2}, {1, 2, 0}, {2, 0, 1}};
            double c = NEXT;
            int32_t p;
            for (p = 0; p < 3; p++) { /* X on even[p][0], Y on [1], Z on [2]; minus with Y and Z swapped */
                uint64_t a = bit(i + even[p][0]), b = bit(i + even[p][1]), d = bit(i + even[p][2]);
                add_string(m, a | b, b | d, c);
                add_string(m, a | d, d | b, -c);
            }
        }
    }
#undef NEXT
}

/* ---- the judge --------------------------------------------------------------------------------------------------- */

#ifdef HAVE_LAPACK
/* All eigenvalues of the Kronecker matrix, ascending, restricted to the states listed (NULL: all). The caller frees. */
static double *judge_values(const whorl_sum *sum, const uint64_t *states, uint64_t count)
{
    uint64_t r, c, full = UINT64_C(1) << sum->sites, n = states == NULL ? full : count;
    double *whole = judge_dense(sum), *part = judge_reals(2 * n * n), *values = judge_reals(n);
    for (c = 0; c < n; c++)
        for (r = 0; r < n; r++) {
            uint64_t t = states == NULL ? r : states[r], s = states == NULL ? c : states[c];
            memcpy(part + 2 * (r + c * n), whole + 2 * (t + s * full), 2 * sizeof(double));
        }
    CHECK(judge_lapack_hermitian(n, part, values, 0) == 0);
    free(whole);
    free(part);
    return values;
}
#endif

/* ---- reference rows ---------------------------------------------------------------------------------------------- */

typedef struct row {
    char id[64];
    double value, tolerance;
    uint64_t degeneracy; /* named in the quantity; 0 where it is not */
} row;

static void row_read(const reference_row *from, row *r)
{
    const char *degeneracy = strstr(from->field[REFERENCE_QUANTITY], "degeneracy ");
    snprintf(r->id, sizeof r->id, "%s", from->field[REFERENCE_ID]);
    r->value = strtod(from->field[REFERENCE_VALUE], NULL);
    r->tolerance = strtod(from->field[REFERENCE_TOLERANCE], NULL);
    r->degeneracy = degeneracy == NULL ? 0 : strtoull(degeneracy + 11, NULL, 10);
}

static int row_find(const char *table, const char *id, row *r)
{
    reference_row *from = (reference_row *)malloc(sizeof *from);
    int found = reference_find(table, id, from);
    if (found)
        row_read(from, r);
    free(from);
    CHECK(found);
    return found;
}

/* ---- helpers ----------------------------------------------------------------------------------------------------- */

static whorl_levels *solve(whorl_host *host, const whorl_sum *sum, const whorl_levels_desc *want)
{
    whorl_levels *levels = NULL;
    CHECK_STATUS(whorl_levels_make(host, sum, want, &levels), WHORL_OK, host);
    CHECK(levels != NULL);
    return levels;
}

static whorl_levels_desc want_whole(void)
{
    whorl_levels_desc want = whorl_levels_default();
    want.whole = 1;
    return want;
}

/* Level 0, 1, ... must be `energy`, `multiplicity` and, where twice_spin >= -1, have that S. */
static void check_level(const whorl_levels *levels, uint64_t k, double energy, double tolerance, uint64_t multiplicity,
                        int32_t twice_spin, const char *what)
{
    whorl_level level = whorl_levels_at(levels, k);
    CHECK_NEAR(level.energy, energy, tolerance, what);
    if (level.multiplicity != multiplicity)
        printf("  %s: level %d has multiplicity %" PRIu64 ", expected %" PRIu64 "\n", what, (int)k, level.multiplicity,
               multiplicity);
    CHECK(level.multiplicity == multiplicity);
    CHECK((level.flags & WHORL_LEVEL_OPEN) == 0);
    if (twice_spin >= -1)
        CHECK(level.twice_spin == twice_spin);
}

/* What every whole result must satisfy. */
static void check_whole(const whorl_levels *levels, int32_t sites)
{
    whorl_levels_checks checks = whorl_levels_checks_of(levels);
    uint64_t k, total = 0;
    int32_t number;
    CHECK(checks.all_sectors && checks.dimensions_add && checks.converged && checks.rechecked && checks.traces_hold);
    CHECK(checks.traced == whorl_levels_sector_count(levels));
    CHECK(checks.worst_trace <= 1.0);
    CHECK(checks.residual <= 1e-12 * (checks.norm_bound + 1e-300));
    for (k = 0; k < whorl_levels_count(levels); k++) {
        whorl_level level = whorl_levels_at(levels, k);
        uint64_t states = 0;
        total += level.multiplicity;
        CHECK((level.flags & WHORL_LEVEL_OPEN) == 0);
        if (whorl_levels_symmetry_of(levels).spin) { /* a multiplet is whole: states of spin S come in 2 S + 1 */
            for (number = 0; number <= sites; number++) {
                uint64_t count = whorl_levels_spin_states(levels, k, number);
                CHECK(count % (uint64_t)(number + 1) == 0);
                states += count;
            }
            CHECK(states == level.multiplicity);
        }
        if (whorl_levels_symmetry_of(levels).number) {
            for (states = 0, number = -sites; number <= sites; number++)
                states += whorl_levels_sz_states(levels, k, number);
            CHECK(states == level.multiplicity);
        }
    }
    CHECK(total == UINT64_C(1) << sites);
}

#ifdef HAVE_LAPACK
/* Levels with multiplicities against all eigenvalues. */
static void check_against(const whorl_levels *levels, const double *values, uint64_t count, double tolerance)
{
    uint64_t k, at = 0, i;
    for (k = 0; k < whorl_levels_count(levels); k++) {
        whorl_level level = whorl_levels_at(levels, k);
        if (at + level.multiplicity > count) {
            CHECK(at + level.multiplicity <= count);
            return;
        }
        for (i = 0; i < level.multiplicity; i++)
            CHECK_NEAR(values[at + i], level.energy, tolerance + level.spread, "level of a random sum");
        at += level.multiplicity;
        if (at < count) /* and the next eigenvalue is another level */
            CHECK(values[at] - values[at - 1] > 1e-9);
    }
    CHECK(at == count);
}
#endif

/* ---- published values -------------------------------------------------------------------------------------------- */

/* The bonds of a row's geometry, "name, N=4, bonds 0-1 0-2": the number of sites, or 0. */
static int32_t add_bonds(model *m, const char *geometry)
{
    const char *bonds = strstr(geometry, "bonds "), *sites = strstr(geometry, "N=");
    char *at;
    if (bonds == NULL || sites == NULL)
        return 0;
    for (at = (char *)bonds + 6; *at >= '0' && *at <= '9'; at += *at == ' ') {
        int32_t i = (int32_t)strtol(at, &at, 10), j = (int32_t)strtol(at + 1, &at, 10);
        add_exchange(m, i, j, 1.0);
    }
    return (int32_t)strtol(sites + 2, NULL, 10);
}

/* 09_molecular_magnets.tsv (vector coupling, Kambe 1950): levels and degeneracies; bonds are those of the row. */
static void test_molecules(void)
{
    static const struct {
        const char *name;
        int rows, whole;
    } molecules[] = {{"dimer", 2, 1},      {"triangle", 2, 1}, {"square", 4, 1},  {"tetrahedron", 3, 1},
                     {"star4", 4, 1},      {"bowtie", 7, 1},   {"hexagon", 12, 1}, {"trigonal_bipyramid", 5, 1},
                     {"octahedron", 6, 1}, {"cube", 12, 1},    {"icosahedron", 3, 0}};
    reference_row *from = (reference_row *)malloc(sizeof *from);
    size_t k;
    int level;
    for (k = 0; k < sizeof molecules / sizeof *molecules; k++) {
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = whorl_levels_default();
        whorl_levels *levels = NULL;
        model *m = model_begin();
        want.whole = molecules[k].whole;
        want.wanted = 10;
        for (level = 0; level < molecules[k].rows; level++) {
            char id[64];
            row r;
            int found;
            snprintf(id, sizeof id, "mol_%s_lev%d", molecules[k].name, level);
            found = reference_find("09_molecular_magnets.tsv", id, from);
            CHECK(found);
            if (found && levels == NULL) {
                int32_t sites = add_bonds(m, from->field[REFERENCE_GEOMETRY]);
                levels = solve(&host, model_end(m, sites), &want);
                if (levels != NULL && molecules[k].whole)
                    check_whole(levels, sites);
            }
            if (!found || levels == NULL)
                break;
            row_read(from, &r);
            check_level(levels, (uint64_t)level, r.value, r.tolerance, r.degeneracy, -2, id);
        }
        whorl_levels_free(&host, levels);
        free(m);
    }
    free(from);
}

/* 01_heisenberg_ring.tsv: ground state and lowest triplet (Bethe equations). */
static void test_rings(void)
{
    static const int32_t sizes[] = {4, 6, 8, 12, 16}, sectors[] = {-2, 0, 2};
    size_t k;
    for (k = 0; k < sizeof sizes / sizeof *sizes; k++) {
        int32_t sites = sizes[k];
        model *m = model_begin();
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = whorl_levels_default();
        whorl_levels *levels;
        whorl_ground ground;
        char id[64];
        row e0, gap;
        want.tolerance = 1e-12;
        if (sites == 16) { /* the sectors that matter */
            want.sectors = sectors;
            want.sector_count = 3;
        }
        add_ring(m, sites, 1, 1.0);
        levels = solve(&host, model_end(m, sites), &want);
        snprintf(id, sizeof id, "ring_E0_N%d", (int)sites);
        if (levels == NULL || !row_find("01_heisenberg_ring.tsv", id, &e0))
            return;
        check_level(levels, 0, e0.value, e0.tolerance, 1, 0, id);
        snprintf(id, sizeof id, "ring_tripgap_N%d", (int)sites);
        if (!row_find("01_heisenberg_ring.tsv", id, &gap))
            return;
        check_level(levels, 1, e0.value + gap.value, e0.tolerance + gap.tolerance, 3, 2, id);
        ground = whorl_levels_ground(levels);
        CHECK(ground.complete && ground.gap_known && ground.spin_good && ground.sz_good);
        CHECK(ground.least_spin == 0 && ground.most_spin == 0 && ground.least_sz == 0 && ground.most_sz == 0);
        CHECK_NEAR(ground.gap, gap.value, gap.tolerance, id);
        CHECK(strcmp(whorl_levels_at(levels, 1).sector, "S^z = 1 and -1") == 0);
        CHECK(strcmp(whorl_levels_at(levels, 0).sector, "S^z = 0") == 0);
        CHECK(whorl_levels_at(levels, 1).sectors == 2);
        CHECK(whorl_levels_symmetry_of(levels).spin && whorl_levels_symmetry_of(levels).inversion);
        CHECK(whorl_levels_checks_of(levels).all_sectors == (sites != 16) && whorl_levels_checks_of(levels).rechecked);
        whorl_levels_free(&host, levels);
        CHECK(host.bytes_used == 0);
        free(m);
    }
}

/* 04: Haldane-Shastry levels with their degeneracies, across S. */
static void test_inverse_square(void)
{
    static const int32_t sizes[] = {4, 6, 8};
    static const int rows[] = {4, 6, 6};
    const double pi = 3.14159265358979323846;
    size_t k;
    for (k = 0; k < 3; k++) {
        int32_t i, j, sites = sizes[k];
        int level;
        model *m = model_begin();
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = want_whole();
        whorl_levels *levels;
        char id[64];
        row r;
        for (i = 0; i < sites; i++)
            for (j = i + 1; j < sites; j++) {
                double d = sites / pi * fabs(sin(pi * (i - j) / sites));
                add_exchange(m, i, j, 1.0 / (d * d));
            }
        levels = solve(&host, model_end(m, sites), &want);
        if (levels == NULL)
            return;
        check_whole(levels, sites);
        snprintf(id, sizeof id, "hs_nlev_N%d", (int)sites);
        if (row_find("04_exact_dimer_and_longrange.tsv", id, &r))
            CHECK((double)whorl_levels_count(levels) == r.value);
        for (level = 0; level < rows[k]; level++) {
            snprintf(id, sizeof id, "hs_lev%d_N%d", level, (int)sites);
            if (row_find("04_exact_dimer_and_longrange.tsv", id, &r))
                check_level(levels, (uint64_t)level, r.value, r.tolerance, r.degeneracy, -2, id);
        }
        if (sites == 6) /* degeneracy 4 at level 1 is a triplet beside a singlet: motif rule, Haldane et al. 1992 */
            CHECK(whorl_levels_spin_states(levels, 1, 0) == 1 && whorl_levels_spin_states(levels, 1, 2) == 3 &&
                  (whorl_levels_at(levels, 1).flags & WHORL_LEVEL_MIXED) != 0 &&
                  whorl_levels_at(levels, 1).twice_spin == -1);
        whorl_levels_free(&host, levels);
        free(m);
    }
}

/* 04: all pairs equal: one level for every S, degeneracy (2S+1)[C(N, N/2-S) - C(N, N/2-S-1)] (Van Vleck, Kambe). */
static void test_complete_graph(void)
{
    static const int32_t sizes[] = {5, 6, 8};
    size_t k;
    for (k = 0; k < 3; k++) {
        int32_t i, j, twice, sites = sizes[k];
        model *m = model_begin();
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = want_whole();
        whorl_levels *levels;
        uint64_t level = 0;
        for (i = 0; i < sites; i++)
            for (j = i + 1; j < sites; j++)
                add_exchange(m, i, j, 1.0);
        levels = solve(&host, model_end(m, sites), &want);
        if (levels == NULL)
            return;
        check_whole(levels, sites);
        for (twice = sites & 1; twice <= sites; twice += 2, level++) {
            char id[64];
            row r;
            snprintf(id, sizeof id, "complete_N%d_S%d.%d", (int)sites, (int)twice / 2, (twice & 1) ? 5 : 0);
            if (row_find("04_exact_dimer_and_longrange.tsv", id, &r))
                check_level(levels, level, r.value, r.tolerance, r.degeneracy, twice, id);
        }
        CHECK(level == whorl_levels_count(levels));
        whorl_levels_free(&host, levels);
        free(m);
    }
}

/* 04: two dimer coverings of a ring at J2 = J1/2 (Majumdar and Ghosh), both singlets. */
static void test_dimerised_ring(void)
{
    static const int32_t sizes[] = {6, 8, 12};
    size_t k;
    for (k = 0; k < 3; k++) {
        model *m = model_begin();
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = whorl_levels_default();
        whorl_levels *levels;
        char id[64];
        row r;
        add_ring(m, sizes[k], 1, 1.0);
        add_ring(m, sizes[k], 2, 0.5);
        levels = solve(&host, model_end(m, sizes[k]), &want);
        if (levels == NULL)
            return;
        snprintf(id, sizeof id, "mg_ring_E0_N%d", (int)sizes[k]);
        if (row_find("04_exact_dimer_and_longrange.tsv", id, &r))
            check_level(levels, 0, r.value, r.tolerance + 1e-11, 2, 0, id);
        CHECK(whorl_levels_spin_states(levels, 0, 0) == 2);
        whorl_levels_free(&host, levels);
        free(m);
    }
}

/*
 * 03_transverse_ising_chain.tsv: written with zz couplings and an x field nothing of ours is conserved and the ground
 * level is the lower of the two parities; turned to xx and a z field, down-spin parity is conserved and gives both.
 */
static void test_transverse_field(void)
{
    static const char *fields[] = {"0.5", "1", "1.5", "2"};
    static const int32_t sizes[] = {4, 6, 7};
    size_t k, f;
    for (k = 0; k < 3; k++)
        for (f = 0; f < 4; f++) {
            model *straight = model_begin(), *turned = model_begin();
            whorl_host host = whorl_host_default();
            whorl_levels_desc want = want_whole();
            whorl_levels *a, *b;
            int32_t i, sites = sizes[k];
            double h = strtod(fields[f], NULL);
            char id[64];
            row even, odd;
            for (i = 0; i < sites; i++) {
                uint64_t both = bit(i) | bit((i + 1) % sites);
                add_string(straight, 0, both, -1.0);
                add_string(straight, bit(i), 0, -h);
                add_string(turned, both, 0, -1.0);
                add_string(turned, 0, bit(i), -h);
            }
            a = solve(&host, model_end(straight, sites), &want);
            b = solve(&host, model_end(turned, sites), &want);
            snprintf(id, sizeof id, "tfim_per_even_N%d_h%s", (int)sites, fields[f]);
            if (a == NULL || b == NULL || !row_find("03_transverse_ising_chain.tsv", id, &even))
                return;
            snprintf(id, sizeof id, "tfim_per_odd_N%d_h%s", (int)sites, fields[f]);
            if (!row_find("03_transverse_ising_chain.tsv", id, &odd))
                return;
            CHECK(whorl_levels_sector_count(a) == 1 && whorl_levels_sector_count(b) == 2);
            CHECK(strcmp(whorl_levels_sector_at(a, 0).label, "all states") == 0);
            CHECK(whorl_levels_sector_at(b, 0).parity == 0 && whorl_levels_sector_at(b, 1).parity == 1);
            CHECK(whorl_levels_ground(a).sz_good == 0 && whorl_levels_ground(a).least_sz == WHORL_NO_NUMBER);
            CHECK_NEAR(whorl_levels_ground(a).energy, even.value, even.tolerance + 1e-12, even.id);
            CHECK_NEAR(whorl_levels_pair_at(b, 0, 0).energy, even.value, even.tolerance + 1e-12, even.id);
            CHECK_NEAR(whorl_levels_pair_at(b, 1, 0).energy, odd.value, odd.tolerance + 1e-12, odd.id);
            check_whole(a, sites);
            check_whole(b, sites);
            whorl_levels_free(&host, a);
            whorl_levels_free(&host, b);
            free(straight);
            free(turned);
        }
}

/* A ferromagnetic ring: E = -N/4, N + 1 states of S = N/2 (common practice), by counting vectors of every sector. */
static void test_ferromagnet(void)
{
    static const int32_t sizes[] = {5, 8, 12};
    size_t k;
    for (k = 0; k < 3; k++) {
        int32_t number, sites = sizes[k];
        model *m = model_begin();
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = whorl_levels_default();
        whorl_levels *levels;
        whorl_ground ground;
        add_ring(m, sites, 1, -1.0);
        levels = solve(&host, model_end(m, sites), &want);
        if (levels == NULL)
            return;
        check_level(levels, 0, -0.25 * sites, 1e-11, (uint64_t)sites + 1, sites, "ferromagnetic ring");
        ground = whorl_levels_ground(levels);
        CHECK(ground.least_sz == -sites && ground.most_sz == sites && ground.most_spin == sites);
        for (number = -sites; number <= sites; number++)
            CHECK(whorl_levels_sz_states(levels, 0, number) == (((number ^ sites) & 1) == 0));
        /* one magnon: 1 - cos(2 pi / N) above (Bloch 1930) */
        CHECK_NEAR(ground.gap, 1.0 - cos(2.0 * 3.14159265358979323846 / sites), 1e-10, "magnon gap");
        whorl_levels_free(&host, levels);
        free(m);
    }
}

/* ---- random sums ------------------------------------------------------------------------------------------------- */

static void test_random_classes(void)
{
#ifndef HAVE_LAPACK
    CHECK_SKIP("needs LAPACK (Debian: liblapack-dev)");
#else
    static const int32_t number[CLASS_COUNT] = {1, 1, 1, 1, 0, 0, 0, 0, 1, 1};
    static const int32_t parity[CLASS_COUNT] = {1, 1, 1, 1, 0, 1, 1, 0, 1, 1};
    static const int32_t square[CLASS_COUNT] = {1, 1, 0, 0, 1, 0, 0, 0, 0, 0};
    static const int32_t real[CLASS_COUNT] = {1, 0, 1, 0, 1, 0, 1, 0, 1, 0};
    int32_t kind, sites;
    for (kind = 0; kind < CLASS_COUNT; kind++)
        for (sites = 3; sites <= 7; sites += 2) {
            model *m = model_begin();
            whorl_host host = whorl_host_default();
            whorl_levels_desc want = want_whole();
            whorl_levels *levels, *plain;
            whorl_levels_symmetry found;
            double *values;
            const whorl_sum *sum;
            uint64_t n = UINT64_C(1) << sites;
            add_random(m, kind, sites, (uint64_t)sites);
            sum = model_end(m, sites);
            values = judge_values(sum, NULL, 0);
            levels = solve(&host, sum, &want);
            if (levels == NULL)
                return;
            found = whorl_levels_symmetry_of(levels);
            CHECK(found.number == number[kind] && found.parity == parity[kind] && found.spin_square == square[kind]);
            CHECK(found.real == real[kind]);
            CHECK(found.spin == (kind == CLASS_SPIN || kind == CLASS_CHIRAL) && found.defect == 0.0);
            check_whole(levels, sites);
            check_against(levels, values, n, 1e-13 * whorl_sum_norm_bound(sum));
            CHECK(whorl_levels_sector_at(levels, 0).weight ==
                  (kind == CLASS_SPIN || kind == CLASS_CHIRAL || kind == CLASS_REVERSIBLE ? 2 : 1));
            CHECK(found.reversal == (kind == CLASS_SPIN || kind == CLASS_REVERSIBLE || kind == CLASS_GAUGE));
            want.plain = 1;
            plain = solve(&host, sum, &want);
            if (plain != NULL) {
                uint64_t k;
                CHECK(whorl_levels_sector_count(plain) == 1);
                check_whole(plain, sites);
                check_against(plain, values, n, 1e-13 * whorl_sum_norm_bound(sum));
                CHECK(whorl_levels_count(plain) == whorl_levels_count(levels));
                for (k = 0; k < whorl_levels_count(levels); k++) {
                    int32_t twice;
                    for (twice = -sites; twice <= sites; twice++)
                        CHECK(whorl_levels_spin_states(plain, k, twice) == whorl_levels_spin_states(levels, k, twice) &&
                              whorl_levels_sz_states(plain, k, twice) == whorl_levels_sz_states(levels, k, twice));
                    CHECK_NEAR(whorl_levels_at(plain, k).energy, whorl_levels_at(levels, k).energy,
                               1e-13 * whorl_sum_norm_bound(sum), "with and without sectors");
                }
            }
            whorl_levels_free(&host, plain);
            whorl_levels_free(&host, levels);
            CHECK(host.bytes_used == 0);
            free(values);
            free(m);
        }
#endif
}

/* Eigenvalues alone: the same levels, and S by counting as by S^2. */
static void test_values_only(void)
{
    int32_t kind, sites, twice;
    for (kind = 0; kind < CLASS_COUNT; kind++)
        for (sites = 6; sites <= 7; sites++) {
            model *m = model_begin();
            whorl_host host = whorl_host_default();
            whorl_levels_desc want = want_whole();
            whorl_levels *a, *b;
            uint64_t k;
            if (sites == 6)
                add_random(m, kind, sites, 31);
            else /* many degenerate multiplets */
                add_ring(m, sites, 1, 1.0), add_ring(m, sites, 2, 1.0), add_ring(m, sites, 3, 1.0 + 0.5 * (kind & 1));
            a = solve(&host, model_end(m, sites), &want);
            want.values_only = 1;
            b = solve(&host, &m->sum, &want);
            if (a == NULL || b == NULL)
                return;
            CHECK(!whorl_levels_sector_at(a, 0).bounded && whorl_levels_sector_at(b, 0).bounded);
            CHECK(whorl_levels_count(a) == whorl_levels_count(b) && whorl_levels_checks_of(b).traces_hold);
            for (k = 0; k < whorl_levels_count(a); k++) {
                whorl_level left = whorl_levels_at(a, k), right = whorl_levels_at(b, k);
                CHECK(left.multiplicity == right.multiplicity && left.sector_index == right.sector_index);
                CHECK(fabs(left.energy - right.energy) <= right.residual && left.residual <= right.residual);
                if (whorl_levels_symmetry_of(a).spin)
                    for (twice = 0; twice <= sites; twice++)
                        CHECK(whorl_levels_spin_states(a, k, twice) == whorl_levels_spin_states(b, k, twice));
                else
                    CHECK(right.twice_spin == -1);
            }
            whorl_levels_free(&host, a);
            whorl_levels_free(&host, b);
            free(m);
        }
}

/* The few of Lanczos are those of the whole spectrum, at both ends. */
static void test_few_against_whole(void)
{
    int32_t kind, end;
    for (kind = 0; kind < CLASS_COUNT; kind++)
        for (end = 0; end < 2; end++) {
            model *m = model_begin();
            whorl_host host = whorl_host_default();
            whorl_levels_desc want = want_whole();
            whorl_levels *whole, *few;
            const whorl_sum *sum;
            uint64_t s, k;
            double norm;
            add_random(m, kind, 8, 77);
            sum = model_end(m, 8);
            norm = whorl_sum_norm_bound(sum);
            want.end = end ? WHORL_HIGHEST : WHORL_LOWEST;
            whole = solve(&host, sum, &want);
            want.whole = 0;
            want.dense = 1;
            want.wanted = 3;
            few = solve(&host, sum, &want);
            if (whole == NULL || few == NULL)
                return;
            for (s = 0; s < whorl_levels_sector_count(few); s++) {
                whorl_level_sector facts = whorl_levels_sector_at(few, s);
                CHECK(facts.dimension == 1 || !facts.whole);
                CHECK(facts.converged && facts.rechecked);
                CHECK(facts.pairs == (facts.dimension < 3 ? facts.dimension : 3));
                for (k = 0; k < facts.pairs; k++) {
                    whorl_level_pair a = whorl_levels_pair_at(few, s, k), b = whorl_levels_pair_at(whole, s, k);
                    CHECK_NEAR(a.energy, b.energy, 1e-12 * norm, "few against whole");
                    CHECK(a.residual <= 1e-9 * norm);
                    if (a.twice_spin >= 0)
                        CHECK(a.twice_spin == b.twice_spin);
                }
            }
            CHECK_NEAR(whorl_levels_ground(few).energy, whorl_levels_ground(whole).energy, 1e-12 * norm, "ground");
            if (whorl_levels_ground(few).complete)
                CHECK(whorl_levels_ground(few).multiplicity == whorl_levels_ground(whole).multiplicity);
            whorl_levels_free(&host, whole);
            whorl_levels_free(&host, few);
            free(m);
        }
}

/* The vector of the sector with the other S^z: all spins flipped, and conjugated where only time reversal gives it. */
static void check_mirror(const whorl_levels *levels, const whorl_sum *sum, uint64_t sector, uint64_t k, const double *v)
{
    double sign = whorl_levels_symmetry_of(levels).inversion ? 1.0 : -1.0, *x, norm = whorl_sum_norm_bound(sum);
    uint64_t i, n = UINT64_C(1) << sum->sites;
    x = judge_reals(2 * n);
    for (i = 0; i < n; i++) {
        x[2 * (n - 1 - i)] = v[2 * i];
        x[2 * (n - 1 - i) + 1] = sign * v[2 * i + 1];
    }
    CHECK(judge_residual(sum, NULL, n, whorl_levels_pair_at(levels, sector, k).energy, x, 1) <= 2e-12 * norm);
    free(x);
}

/* Vectors: unit norm, orthogonal, and residuals by the naive product of the sum as it was given (through the gauge). */
static void test_vectors(void)
{
    int32_t kind, route;
    for (kind = 0; kind < CLASS_COUNT; kind++)
        for (route = 0; route < 2; route++) {
            enum { SITES = 6, STATES = 64 };
            model *m = model_begin();
            whorl_host host = whorl_host_default();
            whorl_levels_desc want = whorl_levels_default();
            whorl_levels *levels;
            double v[2][2 * STATES], y[2 * STATES];
            uint64_t s, k, i;
            want.vectors = 1;
            want.dense = route == 0 ? 0 : 1;
            want.tolerance = 1e-13;
            add_random(m, kind, SITES, 5);
            levels = solve(&host, model_end(m, SITES), &want);
            if (levels == NULL)
                return;
            if (kind == CLASS_GAUGE)
                CHECK(whorl_levels_symmetry_of(levels).gauge != 0);
            for (s = 0; s < whorl_levels_sector_count(levels); s++) {
                const whorl_space *space = whorl_levels_space(levels, s);
                uint64_t n = whorl_levels_sector_at(levels, s).dimension;
                int wide = whorl_element_is_complex(whorl_levels_vector_element(levels, s));
                CHECK(space != NULL && whorl_space_count(space) == n);
                for (k = 0; k < (n < 4 ? n : 4); k++) {
                    const double *from = (const double *)whorl_levels_vector(levels, s, k);
                    double *to = v[k & 1], norm = 0.0, off = 0.0, cross_re = 0.0, cross_im = 0.0;
                    memset(to, 0, sizeof v[0]);
                    CHECK(from != NULL);
                    for (i = 0; i < n && from != NULL; i++) {
                        uint64_t state = whorl_space_at(space, i);
                        to[2 * state] = wide ? from[2 * i] : from[i];
                        to[2 * state + 1] = wide ? from[2 * i + 1] : 0.0;
                    }
                    naive_product(&m->sum, NULL, STATES, to, y);
                    for (i = 0; i < STATES; i++) {
                        double e = whorl_levels_pair_at(levels, s, k).energy;
                        double re = y[2 * i] - e * to[2 * i], im = y[2 * i + 1] - e * to[2 * i + 1];
                        norm += to[2 * i] * to[2 * i] + to[2 * i + 1] * to[2 * i + 1];
                        off += re * re + im * im;
                        cross_re += v[0][2 * i] * v[1][2 * i] + v[0][2 * i + 1] * v[1][2 * i + 1];
                        cross_im += v[0][2 * i] * v[1][2 * i + 1] - v[0][2 * i + 1] * v[1][2 * i];
                    }
                    CHECK_NEAR(norm, 1.0, 1e-13, "norm of an eigenvector");
                    CHECK(sqrt(off) <= 2e-12 * whorl_sum_norm_bound(&m->sum));
                    CHECK(fabs(sqrt(off) - whorl_levels_pair_at(levels, s, k).residual) <=
                          1e-13 * whorl_sum_norm_bound(&m->sum));
                    if (k > 0)
                        CHECK(fabs(cross_re) + fabs(cross_im) < 1e-11);
                    if (whorl_levels_sector_at(levels, s).weight == 2)
                        check_mirror(levels, &m->sum, s, k, to);
                }
                CHECK(whorl_levels_vector(levels, s, n < 4 ? n : 4) == NULL);
            }
            CHECK(whorl_levels_vector(levels, s, 0) == NULL && whorl_levels_space(levels, s) == NULL);
            whorl_levels_free(&host, levels);
            CHECK(host.bytes_used == 0);
            free(m);
        }
}

/* ---- edges ------------------------------------------------------------------------------------------------------- */

static void test_smallest(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels_desc want = whorl_levels_default();
    whorl_levels *levels;
    model *m = model_begin();
    int32_t sites;
    for (sites = 1; sites <= 3; sites++) { /* an empty sum: one level at 0 */
        m->used = 0;
        levels = solve(&host, model_end(m, sites), NULL);
        check_whole(levels, sites);
        check_level(levels, 0, 0.0, 0.0, UINT64_C(1) << sites, sites == 1 ? 1 : -1, "empty sum");
        CHECK(!whorl_levels_ground(levels).gap_known && whorl_levels_ground(levels).complete);
        whorl_levels_free(&host, levels);
    }
    m->used = 0; /* one spin in a field -h S^z: levels -+ 1/4 for h = 1/2 */
    add_string(m, 0, 1, -0.25);
    levels = solve(&host, model_end(m, 1), &want);
    check_whole(levels, 1);
    check_level(levels, 0, -0.25, 0.0, 1, 1, "one spin, aligned");
    check_level(levels, 1, 0.25, 0.0, 1, 1, "one spin, opposite");
    CHECK(whorl_levels_at(levels, 0).twice_sz == 1 && whorl_levels_at(levels, 1).twice_sz == -1);
    CHECK(strcmp(whorl_levels_at(levels, 1).sector, "S^z = -1/2") == 0);
    whorl_levels_free(&host, levels);
    m->used = 0; /* one spin along x */
    add_string(m, 1, 0, 1.0);
    levels = solve(&host, model_end(m, 1), &want);
    check_whole(levels, 1);
    check_level(levels, 0, -1.0, 1e-15, 1, 1, "X");
    check_level(levels, 1, 1.0, 1e-15, 1, 1, "X");
    whorl_levels_free(&host, levels);
    m->used = 0; /* and along y, through the gauge */
    add_string(m, 1, 1, 1.0);
    levels = solve(&host, model_end(m, 1), &want);
    check_level(levels, 0, -1.0, 1e-15, 1, 1, "Y");
    CHECK(whorl_levels_symmetry_of(levels).real == 1 && whorl_levels_symmetry_of(levels).gauge == 1);
    whorl_levels_free(&host, levels);
    m->used = 0; /* a dimer: -3/4 once, 1/4 three times (row mol_dimer) */
    add_exchange(m, 0, 1, 1.0);
    levels = solve(&host, model_end(m, 2), &want);
    check_whole(levels, 2);
    check_level(levels, 0, -0.75, 1e-15, 1, 0, "dimer");
    check_level(levels, 1, 0.25, 1e-15, 3, 2, "dimer");
    CHECK(whorl_levels_at(levels, 2).multiplicity == 0 && whorl_levels_at(levels, 2).sector[0] == '\0');
    CHECK(whorl_levels_sector_at(levels, 99).dimension == 0 && whorl_levels_pair_at(levels, 99, 0).energy == 0.0);
    CHECK(whorl_levels_in_sector_at(levels, 0, 0).multiplicity == 1);
    whorl_levels_free(&host, levels);
    whorl_levels_free(&host, NULL);
    m->used = 0; /* a constant alone, large enough for Lanczos sectors: one level, found in every sector */
    add_string(m, 0, 0, 2.5);
    levels = solve(&host, model_end(m, 11), &want);
    CHECK(whorl_levels_count(levels) == 1);
    CHECK_NEAR(whorl_levels_at(levels, 0).energy, 2.5, 1e-14, "constant");
    CHECK((whorl_levels_at(levels, 0).flags & WHORL_LEVEL_OPEN) != 0 && !whorl_levels_ground(levels).complete);
    whorl_levels_free(&host, levels);
    free(m);
    CHECK(host.bytes_used == 0);
}

static void test_refusals(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels_desc want = whorl_levels_default();
    whorl_levels *levels = (whorl_levels *)&host;
    whorl_space *space = NULL;
    model *m = model_begin();
    const whorl_sum *sum;
    whorl_sum bad;
    whorl_complex weight = {0.0, 1.0};
    int32_t sectors[2] = {0, 3};
    uint64_t bytes = 7;
    add_ring(m, 4, 1, 1.0);
    sum = model_end(m, 4);
#define REFUSED(status_, text_) \
    do { \
        levels = (whorl_levels *)&host; \
        CHECK_STATUS(whorl_levels_make(&host, sum, &want, &levels), status_, &host); \
        CHECK(levels == NULL && strstr(host.reason.text, text_) != NULL && host.bytes_used == 0); \
        CHECK_STATUS(whorl_levels_bytes(&host, sum, &want, &bytes), status_, &host); \
        CHECK(bytes == 7 && host.bytes_used == 0); \
        want = whorl_levels_default(); \
    } while (0)
    want.wanted = -1;
    REFUSED(WHORL_BAD_ARGUMENT, "wanted");
    want.end = 2;
    REFUSED(WHORL_BAD_ARGUMENT, "end");
    want.tolerance = -1e-9;
    REFUSED(WHORL_BAD_ARGUMENT, "tolerance");
    want.element = WHORL_REAL_FLOAT;
    REFUSED(WHORL_BAD_ARGUMENT, "element");
    want.values_only = 1;
    REFUSED(WHORL_BAD_ARGUMENT, "values_only");
    want.sector_count = 1;
    REFUSED(WHORL_BAD_ARGUMENT, "sectors");
    want.sector_count = 2;
    want.sectors = sectors;
    REFUSED(WHORL_BAD_ARGUMENT, "no sector 3");
    want.mode = 5;
    REFUSED(WHORL_BAD_ARGUMENT, "mode");
    want.plain = 1;
    want.sector_count = 1;
    want.sectors = sectors;
    REFUSED(WHORL_BAD_ARGUMENT, "all states are one sector");
    CHECK_STATUS(whorl_space_make_all(&host, 5, &space), WHORL_OK, &host);
    want.space = space;
    levels = (whorl_levels *)&host;
    CHECK_STATUS(whorl_levels_make(&host, sum, &want, &levels), WHORL_BAD_ARGUMENT, &host);
    CHECK(levels == NULL && strstr(host.reason.text, "same number of sites") != NULL);
    whorl_space_free(&host, space);
    want = whorl_levels_default();
    bad = *sum; /* N = 65 */
    bad.sites = 65;
    CHECK(whorl_levels_make(&host, &bad, &want, &levels) < 0 && levels == NULL);
    CHECK_STATUS(whorl_levels_make_weighted(&host, sum, &weight, 1, &want, &levels), WHORL_NOT_HERMITIAN, &host);
    CHECK(levels == NULL && host.reason.index == 0 && strstr(host.reason.text, "Z0") != NULL);
    weight.im = strtod("nan", NULL);
    CHECK_STATUS(whorl_levels_make_weighted(&host, sum, &weight, 1, &want, &levels), WHORL_NOT_FINITE, &host);
    CHECK_STATUS(whorl_levels_make_weighted(&host, sum, NULL, 0, &want, &levels), WHORL_BAD_ARGUMENT, &host);
    m->used = 0; /* DM along z beside an in-plane one: nothing makes it real */
    add_random(m, CLASS_NONE, 4, 1);
    sum = model_end(m, 4);
    want.element = WHORL_REAL_DOUBLE;
    REFUSED(WHORL_BAD_ARGUMENT, "no gauge");
    m->used = 0; /* 64 sites without a conserved number */
    add_string(m, 1, 0, 1.0);
    sum = model_end(m, 64);
    REFUSED(WHORL_TOO_LARGE, "");
    CHECK(host.bytes_used == 0);
    free(m);
}

/* Chosen sectors, weights of chosen mirror images, 64 sites. */
static void test_selection(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels_desc want = whorl_levels_default();
    whorl_levels *levels;
    model *m = model_begin();
    int32_t sectors[3] = {-2, 0, 2}, i;
    add_ring(m, 6, 1, 1.0);
    want.sectors = sectors;
    want.sector_count = 1;
    levels = solve(&host, model_end(m, 6), &want);
    CHECK(whorl_levels_sector_count(levels) == 1 && whorl_levels_sector_at(levels, 0).weight == 1);
    CHECK(strcmp(whorl_levels_sector_at(levels, 0).label, "S^z = -1") == 0);
    CHECK(whorl_levels_sector_at(levels, 0).twice_sz == -2 && whorl_levels_at(levels, 0).twice_spin == 2);
    CHECK(!whorl_levels_checks_of(levels).all_sectors && whorl_levels_checks_of(levels).dimension == 15);
    whorl_levels_free(&host, levels);
    want.sector_count = 3;
    levels = solve(&host, &m->sum, &want);
    CHECK(whorl_levels_sector_count(levels) == 2 && whorl_levels_sector_at(levels, 0).weight == 2);
    CHECK(whorl_levels_checks_of(levels).dimension == 50);
    check_level(levels, 1, -2.8027756377319946 + 0.6847416489820998, 2e-11, 3, 2, "ring_tripgap_N6");
    whorl_levels_free(&host, levels);
    m->used = 0; /* 64 sites, one spin down: -J/2 + one magnon; E of the aligned ring is N/4 */
    add_ring(m, 64, 1, 1.0);
    sectors[0] = 64;
    sectors[1] = 62;
    want.sector_count = 2;
    levels = solve(&host, model_end(m, 64), &want);
    CHECK(whorl_levels_sector_count(levels) == 2);
    CHECK_NEAR(whorl_levels_pair_at(levels, 0, 0).energy, 16.0, 1e-12, "aligned ring of 64");
    CHECK_NEAR(whorl_levels_pair_at(levels, 1, 0).energy, 14.0, 1e-12, "one magnon at pi: N/4 - 2 (Bloch 1930)");
    CHECK(whorl_levels_pair_at(levels, 1, 0).twice_spin == 62);
    whorl_levels_free(&host, levels);
    m->used = 0; /* parity */
    for (i = 0; i < 5; i++)
        add_string(m, bit(i) | bit((i + 1) % 5), 0, 1.0), add_string(m, 0, bit(i), 0.3);
    sectors[0] = 1;
    want.sector_count = 1;
    levels = solve(&host, model_end(m, 5), &want);
    CHECK(whorl_levels_sector_count(levels) == 1 && whorl_levels_sector_at(levels, 0).parity == 1);
    CHECK(whorl_levels_sector_at(levels, 0).dimension == 16 && whorl_levels_sector_at(levels, 0).traced);
    whorl_levels_free(&host, levels);
    free(m);
    CHECK(host.bytes_used == 0);
}

/* A coupling that conserves S^z only to rounding has sectors still, and residuals bound the part left out. */
static void test_rounded_symmetry(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels *levels;
    model *m = model_begin();
    int32_t i;
    for (i = 0; i < 6; i++) {
        uint64_t both = bit(i) | bit((i + 1) % 6);
        add_string(m, both, 0, 0.1 + 0.2);
        add_string(m, both, both, 0.3);
        add_string(m, 0, both, 0.3);
    }
    CHECK(0.1 + 0.2 != 0.3);
    levels = solve(&host, model_end(m, 6), NULL);
    CHECK(whorl_levels_symmetry_of(levels).number && whorl_levels_symmetry_of(levels).spin);
    CHECK(whorl_levels_symmetry_of(levels).defect > 0.0 && whorl_levels_symmetry_of(levels).defect < 1e-14);
    CHECK_NEAR(whorl_levels_at(levels, 0).energy, 1.2 * -2.8027756377319946, 1e-13, "ring_E0_N6, scaled");
    CHECK(whorl_levels_at(levels, 0).residual >= whorl_levels_symmetry_of(levels).defect);
    CHECK(whorl_levels_checks_of(levels).traces_hold);
    whorl_levels_free(&host, levels);
    m->used = 0; /* a real anisotropy of 1e-12 is no rounding */
    for (i = 0; i < 6; i++) {
        uint64_t both = bit(i) | bit((i + 1) % 6);
        add_string(m, both, 0, 0.3 + 1e-12);
        add_string(m, both, both, 0.3);
    }
    levels = solve(&host, model_end(m, 6), NULL);
    CHECK(!whorl_levels_symmetry_of(levels).number && whorl_levels_symmetry_of(levels).parity);
    whorl_levels_free(&host, levels);
    free(m);
}

/* Solved in a given space: a blockade on a ring with X on every site, projected (P X P). */
static void test_given_space(void)
{
#ifndef HAVE_LAPACK
    CHECK_SKIP("needs LAPACK (Debian: liblapack-dev)");
#else
    enum { SITES = 8 };
    whorl_host host = whorl_host_default();
    whorl_levels_desc want = whorl_levels_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_pair pairs[SITES];
    whorl_space *space = NULL;
    whorl_levels *levels;
    model *m = model_begin();
    double *values;
    int32_t i;
    int route;
    for (i = 0; i < SITES; i++) {
        pairs[i].i = i;
        pairs[i].j = (i + 1) % SITES;
        add_string(m, bit(i), 0, 1.0);
        add_string(m, 0, bit(i), 0.1 * i);
    }
    model_end(m, SITES);
    desc.sites = SITES;
    desc.kind = WHORL_SPACE_BLOCKADE;
    desc.pairs = pairs;
    desc.pair_count = SITES;
    CHECK_STATUS(whorl_space_make(&host, &desc, &space), WHORL_OK, &host);
    if (space == NULL)
        return;
    want.space = space;
    CHECK_STATUS(whorl_levels_make(&host, &m->sum, &want, &levels), WHORL_LEAVES_SPACE, &host);
    CHECK(levels == NULL);
    values = judge_values(&m->sum, whorl_space_states(space), whorl_space_count(space));
    want.mode = WHORL_ACTION_PROJECT;
    for (route = 0; route < 3; route++) {
        uint64_t k;
        want.whole = route == 0;
        want.dense = route == 2 ? 1 : 0;
        levels = solve(&host, &m->sum, &want);
        if (levels == NULL)
            return;
        if (route == 0)
            check_against(levels, values, whorl_space_count(space), 1e-13 * whorl_sum_norm_bound(&m->sum));
        for (k = 0; k < 4; k++)
            CHECK_NEAR(whorl_levels_pair_at(levels, 0, k).energy, values[k], 1e-12 * whorl_sum_norm_bound(&m->sum),
                       "P H P");
        CHECK(whorl_levels_sector_count(levels) == 1 && whorl_levels_sector_at(levels, 0).traced == (route < 2));
        CHECK(whorl_levels_checks_of(levels).traces_hold && !whorl_levels_sector_at(levels, 0).square_traced);
        whorl_levels_free(&host, levels);
    }
    whorl_space_free(&host, space);
    free(values);
    free(m);
    CHECK(host.bytes_used == 0);
#endif
}

static void test_weighted_list(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels *a = NULL, *b;
    model *near = model_begin(), *far = model_begin(), *both = model_begin();
    whorl_sum list[2];
    whorl_complex weights[2] = {{1.5, 0.0}, {-0.25, 0.0}};
    uint64_t k;
    add_ring(near, 8, 1, 1.0);
    add_ring(far, 8, 2, 1.0);
    add_ring(both, 8, 1, 1.5);
    add_ring(both, 8, 2, -0.25);
    list[0] = *model_end(near, 8);
    list[1] = *model_end(far, 8);
    CHECK_STATUS(whorl_levels_make_weighted(&host, list, weights, 2, NULL, &a), WHORL_OK, &host);
    b = solve(&host, model_end(both, 8), NULL);
    if (a == NULL || b == NULL)
        return;
    CHECK(whorl_levels_count(a) == whorl_levels_count(b));
    for (k = 0; k < whorl_levels_count(a); k++)
        CHECK(whorl_levels_at(a, k).energy == whorl_levels_at(b, k).energy);
    whorl_levels_free(&host, a);
    whorl_levels_free(&host, b);
    list[1].sites = 9;
    CHECK_STATUS(whorl_levels_make_weighted(&host, list, weights, 2, NULL, &a), WHORL_BAD_ARGUMENT, &host);
    CHECK(a == NULL && host.reason.index == 1);
    free(near);
    free(far);
    free(both);
}

/* The trace check sees a sum that is wrong in one coupling, in the last of the digits that a level would show. */
static void test_planted_error(void)
{
    int32_t kind;
    for (kind = 0; kind < CLASS_COUNT; kind++) {
        whorl_host host = whorl_host_default();
        whorl_levels_desc want = want_whole();
        whorl_levels *levels;
        model *m = model_begin(), *wrong = model_begin();
        double worst = -1.0;
        add_random(m, kind, 6, 3);
        add_random(wrong, kind, 6, 3);
        wrong->terms[0].re += 1e-9;
        levels = solve(&host, model_end(m, 6), &want);
        if (levels == NULL)
            return;
        CHECK_STATUS(whorl_levels_hold_against(&host, levels, &m->sum, &worst), WHORL_OK, &host);
        CHECK(worst >= 0.0 && worst <= 1.0 && worst == whorl_levels_checks_of(levels).worst_trace);
        CHECK_STATUS(whorl_levels_hold_against(&host, levels, model_end(wrong, 6), &worst), WHORL_OK, &host);
        CHECK(worst > 1.0);
        worst = -1.0;
        m->sum.sites = 7;
        CHECK_STATUS(whorl_levels_hold_against(&host, levels, &m->sum, &worst), WHORL_BAD_ARGUMENT, &host);
        CHECK(worst == -1.0);
        whorl_levels_free(&host, levels);
        free(m);
        free(wrong);
        CHECK(host.bytes_used == 0);
    }
}

/* A list that is too short for a multiplet says so, and asking for too few products is not called converged. */
static void test_open_and_unconverged(void)
{
    whorl_host host = whorl_host_default();
    whorl_levels_desc want = whorl_levels_default();
    whorl_levels *levels = NULL;
    model *m = model_begin();
    add_ring(m, 12, 1, -1.0);
    want.wanted = 2;
    want.plain = 1; /* 13-fold ground level, of which two are found */
    levels = solve(&host, model_end(m, 12), &want);
    CHECK(whorl_levels_count(levels) == 1 && whorl_levels_at(levels, 0).multiplicity == 2);
    CHECK((whorl_levels_at(levels, 0).flags & WHORL_LEVEL_OPEN) != 0);
    CHECK(!whorl_levels_ground(levels).complete && !whorl_levels_ground(levels).gap_known);
    whorl_levels_free(&host, levels);
    want = whorl_levels_default();
    want.wanted = 14;
    want.plain = 1; /* all thirteen, and the next level */
    levels = solve(&host, &m->sum, &want);
    check_level(levels, 0, -3.0, 1e-11, 13, 12, "ferromagnetic ring without sectors");
    CHECK(whorl_levels_sz_states(levels, 0, -12) == 1 && whorl_levels_sz_states(levels, 0, 0) == 1);
    whorl_levels_free(&host, levels);
    want = whorl_levels_default();
    want.most_products = 5;
    levels = NULL;
    CHECK_STATUS(whorl_levels_make(&host, &m->sum, &want, &levels), WHORL_NOT_CONVERGED, &host);
    CHECK(levels != NULL && !whorl_levels_checks_of(levels).converged);
    if (levels != NULL) {
        CHECK(whorl_levels_at(levels, 0).multiplicity > 0);
        CHECK((whorl_levels_at(levels, 0).flags & WHORL_LEVEL_OPEN) != 0);
        CHECK(!whorl_levels_ground(levels).complete);
    }
    whorl_levels_free(&host, levels);
    CHECK(host.bytes_used == 0);
    free(m);
}

/* ---- memory, polls, threads -------------------------------------------------------------------------------------- */

typedef struct task {
    const whorl_sum *sum;
    whorl_levels_desc want;
} task;

static whorl_status call_make(whorl_host *host, void *argument)
{
    const task *t = (const task *)argument;
    whorl_levels *levels = (whorl_levels *)host;
    whorl_status status = whorl_levels_make(host, t->sum, &t->want, &levels);
    CHECK((status < 0) == (levels == NULL));
    whorl_levels_free(host, levels);
    return status;
}

static whorl_status call_bytes(whorl_host *host, void *argument)
{
    const task *t = (const task *)argument;
    uint64_t bytes = 12345;
    whorl_status status = whorl_levels_bytes(host, t->sum, &t->want, &bytes);
    CHECK((status < 0) == (bytes == 12345));
    return status;
}

/* Few, whole, with vectors, complex, plain. */
static int next_task(int which, model *m, task *t)
{
    t->want = whorl_levels_default();
    m->used = 0;
    add_random(m, which == 3 ? CLASS_NUMBER_COMPLEX : which == 4 ? CLASS_GAUGE : CLASS_SPIN, 6, 9);
    t->sum = model_end(m, 6);
    t->want.dense = which == 1 ? 0 : 4;
    t->want.whole = which == 2;
    t->want.vectors = which >= 2;
    t->want.plain = which == 5;
    return which < 6;
}

static void test_failing(void)
{
    model *m = model_begin();
    task t;
    int which;
    for (which = 0; next_task(which, m, &t); which++) {
        check_every_allocation(call_make, &t, WHORL_OK);
        check_every_allocation(call_bytes, &t, WHORL_OK);
        check_every_poll(call_make, &t, WHORL_OK);
        check_every_poll(call_bytes, &t, WHORL_OK);
    }
    free(m);
}

/*
 * The announced bytes are a bound of which 0.8 is used; they suffice as a limit and as an arena. A little less is
 * refused where all is solved whole; where Lanczos works its window gets narrower: the limit is kept, levels are the
 * same.
 */
static void test_announced(void)
{
    model *m = model_begin();
    task t;
    int which;
    for (which = 0; next_task(which, m, &t); which++) {
        check_memory memory;
        whorl_host host = check_host(&memory);
        whorl_levels *levels = NULL;
        uint64_t bytes = 0, peak;
        double energy;
        whorl_status status;
        CHECK_STATUS(whorl_levels_bytes(&host, t.sum, &t.want, &bytes), WHORL_OK, &host);
        CHECK(host.bytes_used == 0);
        host.bytes_peak = 0;
        CHECK_STATUS(whorl_levels_make(&host, t.sum, &t.want, &levels), WHORL_OK, &host);
        energy = whorl_levels_at(levels, 0).energy;
        whorl_levels_free(&host, levels);
        peak = host.bytes_peak;
        if (!(peak <= bytes && (double)peak >= 0.8 * (double)bytes))
            printf("  task %d: announced %" PRIu64 ", used %" PRIu64 "\n", which, bytes, peak);
        CHECK(peak <= bytes && (double)peak >= 0.8 * (double)bytes);
        host.byte_limit = bytes;
        CHECK_STATUS(whorl_levels_make(&host, t.sum, &t.want, &levels), WHORL_OK, &host);
        whorl_levels_free(&host, levels);
        host.byte_limit = bytes - 1;
        host.bytes_peak = 0;
        status = whorl_levels_make(&host, t.sum, &t.want, &levels);
        CHECK(status == WHORL_OVER_LIMIT || (status == WHORL_OK && which != 1 && which != 2));
        CHECK((status < 0) == (levels == NULL) && host.bytes_peak <= bytes - 1);
        if (levels != NULL)
            CHECK_NEAR(whorl_levels_at(levels, 0).energy, energy, 1e-9, "with a narrower window");
        whorl_levels_free(&host, levels);
        host.byte_limit = bytes / 4;
        CHECK_STATUS(whorl_levels_make(&host, t.sum, &t.want, &levels), WHORL_OVER_LIMIT, &host);
        CHECK(levels == NULL && host.bytes_used == 0 && memory.live_blocks == 0);
        CHECK(strstr(host.reason.text, "raise it to at least") != NULL);
        {
            whorl_host small = whorl_host_default();
            whorl_arena arena;
            char *room = (char *)malloc((size_t)bytes + 64);
            whorl_arena_make(&arena, room, bytes + ((64 - ((uintptr_t)room & 63)) & 63));
            whorl_arena_use(&arena, &small);
            CHECK_STATUS(whorl_levels_make(&small, t.sum, &t.want, &levels), WHORL_OK, &small);
            whorl_levels_free(&small, levels);
            CHECK(arena.top == 0);
            free(room);
        }
    }
    free(m);
}

/* Equal bits for any number of threads: energies, residuals and vectors of a sector of 12,870 states. */
static void test_threads(void)
{
    model *m = model_begin();
    whorl_levels_desc want = whorl_levels_default();
    whorl_host host = whorl_host_default();
    whorl_levels *one, *more;
    int32_t sector = 0, threads;
    uint64_t k;
    add_ring(m, 16, 1, 1.0);
    want.sectors = &sector;
    want.sector_count = 1;
    want.wanted = 2;
    want.vectors = 1;
    want.seed = 4;
    one = solve(&host, model_end(m, 16), &want);
    for (threads = 2; threads <= 4; threads += 2) {
        host.threads = threads;
        more = solve(&host, &m->sum, &want);
        if (one == NULL || more == NULL)
            return;
        for (k = 0; k < 2; k++) {
            whorl_level_pair a = whorl_levels_pair_at(one, 0, k), b = whorl_levels_pair_at(more, 0, k);
            CHECK(memcmp(&a, &b, sizeof a) == 0);
            CHECK(memcmp(whorl_levels_vector(one, 0, k), whorl_levels_vector(more, 0, k), 12870 * sizeof(double)) == 0);
        }
        whorl_levels_free(&host, more);
    }
    whorl_levels_free(&host, one);
    free(m);
}

int main(void)
{
    check_begin("test_levels");
    check_run("smallest", test_smallest);
    check_run("molecules", test_molecules);
    check_run("rings", test_rings);
    check_run("inverse square", test_inverse_square);
    check_run("complete graph", test_complete_graph);
    check_run("dimerised ring", test_dimerised_ring);
    check_run("transverse field", test_transverse_field);
    check_run("ferromagnet", test_ferromagnet);
    check_run("random classes", test_random_classes);
    check_run("values only", test_values_only);
    check_run("few against whole", test_few_against_whole);
    check_run("vectors", test_vectors);
    check_run("refusals", test_refusals);
    check_run("selection", test_selection);
    check_run("rounded symmetry", test_rounded_symmetry);
    check_run("given space", test_given_space);
    check_run("weighted list", test_weighted_list);
    check_run("planted error", test_planted_error);
    check_run("open and unconverged", test_open_and_unconverged);
    check_run("failing", test_failing);
    check_run("announced", test_announced);
    check_run("threads", test_threads);
    return check_end();
}
