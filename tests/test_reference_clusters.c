/* Rows of tests/reference/ for dimer and long-range models and for clusters in two dimensions: 04, 05, 06, 07. */
#include "reference_solve.h"

static whorl_term terms[REF_TERMS];

/* Whole spectra of conserving sums, as distinct levels; the last one is remembered, as its rows stand together. */
typedef struct level_list {
    char key[96];
    int32_t count;
    double energy[512];
    uint64_t times[512];
} level_list;

static const level_list *levels_of(const char *key, const whorl_sum *sum)
{
    static level_list last;
    if (strcmp(last.key, key) != 0) {
        double *values = ref_whole(sum, 1);
        last.count = ref_distinct(values, UINT64_C(1) << sum->sites, 1e-8, 512, last.energy, last.times);
        snprintf(last.key, sizeof last.key, "%s", key);
        free(values);
    }
    return &last;
}

/* ---- 04: dimer models and long range ---------------------------------------------------------------------------- */

/* J1 to the next, J2 to the next but one; ring or open. */
static whorl_sum next_nearest(int32_t n, int ring, double j2)
{
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < n - !ring; i++)
        used += whorl_terms_exchange(terms + used, i, (i + 1) % n, 1.0);
    for (i = 0; i < n - 2 * !ring; i++)
        used += whorl_terms_exchange(terms + used, i, (i + 2) % n, j2);
    return ref_sum(n, terms, used);
}

static whorl_sum sawtooth(int32_t n)
{
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < n; i += 2) {
        used += whorl_terms_exchange(terms + used, i, i + 1, 1.0);
        used += whorl_terms_exchange(terms + used, i + 1, (i + 2) % n, 1.0);
        used += whorl_terms_exchange(terms + used, i, (i + 2) % n, 1.0);
    }
    return ref_sum(n, terms, used);
}

/* All pairs, J / d^2 with the chord distance d, or 1. */
static whorl_sum all_pairs(int32_t n, int chord)
{
    const double pi = 3.14159265358979323846;
    uint64_t used = 0;
    int32_t i, j;
    for (i = 0; i < n; i++)
        for (j = i + 1; j < n; j++) {
            double d = n / pi * sin(pi * (j - i) / n);
            used += whorl_terms_exchange(terms + used, i, j, chord ? 1.0 / (d * d) : 1.0);
        }
    return ref_sum(n, terms, used);
}

static int32_t torus_site(int32_t length, int32_t x, int32_t y)
{
    return x % length + length * (y % length);
}

/* The orthogonal-dimer lattice on the L x L torus, as row ss_* tells; dimers lists its strong bonds. */
static whorl_sum orthogonal_dimers(int32_t length, double weak, ref_bond *dimers)
{
    uint64_t used = 0;
    int32_t x, y, count = 0, d;
    for (y = 0; y < length; y++)
        for (x = 0; x < length; x++) {
            used += whorl_terms_exchange(terms + used, torus_site(length, x, y), torus_site(length, x + 1, y), weak);
            used += whorl_terms_exchange(terms + used, torus_site(length, x, y), torus_site(length, x, y + 1), weak);
            if (x % 2 == 0 && y % 2 == 0) {
                dimers[count].i = torus_site(length, x, y);
                dimers[count++].j = torus_site(length, x + 1, y + 1);
            }
            if (x % 2 == 1 && y % 2 == 1) {
                dimers[count].i = torus_site(length, x + 1, y);
                dimers[count++].j = torus_site(length, x, y + 1);
            }
        }
    for (d = 0; d < count; d++)
        used += whorl_terms_exchange(terms + used, dimers[d].i, dimers[d].j, 1.0);
    return ref_sum(length * length, terms, used);
}

/* The product of singlets over the dimers, in the space of S^z = 0, is an eigenvector with energy -3 N / 8: any Jp. */
static void dimer_product(double weak, double energy)
{
    ref_bond dimers[16];
    whorl_sum sum = orthogonal_dimers(4, weak, dimers);
    whorl_space *space = ref_down(16, 8);
    whorl_action *action = ref_action(sum.count > 0 ? &sum : NULL, space);
    uint64_t n = whorl_space_count(space), choice, k;
    double *vector = judge_reals(n), *image = judge_reals(n), square = 0.0;
    whorl_map map;
    for (choice = 0; choice < 256; choice++) { /* (up down - down up) / sqrt 2 on each of eight dimers */
        uint64_t state = 0;
        int32_t d, sign = 1;
        for (d = 0; d < 8; d++) {
            int second = (int)(choice >> d & 1);
            state |= UINT64_C(1) << (second ? dimers[d].i : dimers[d].j);
            sign = second ? -sign : sign;
        }
        vector[whorl_space_find(space, state)] = sign / 16.0;
    }
    map = whorl_action_map(action);
    CHECK_STATUS(whorl_map_apply(&ref_host, &map, vector, image, 1), WHORL_OK, &ref_host);
    for (k = 0; k < n; k++)
        square += (image[k] - energy * vector[k]) * (image[k] - energy * vector[k]);
    CHECK_NEAR(sqrt(square), 0.0, 1e-13, "ss_dimer_eps: H v = -(3/8) N J v");
    free(vector);
    free(image);
    whorl_action_free(&ref_host, action);
    whorl_space_free(&ref_host, space);
}

/* "degeneracy 12" in a quantity */
static void check_times(const reference_row *row, uint64_t times)
{
    CHECK_NEAR((double)times, ref_after(row->field[REFERENCE_QUANTITY], "degeneracy "), 0.0, row->field[REFERENCE_ID]);
}

static const char *dimer_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID], *model = row->field[REFERENCE_MODEL];
    int32_t n = ref_integer(row->field[REFERENCE_GEOMETRY], "N=");
    double low[4];
    whorl_sum sum;
    ref_bond dimers[16];
    if (ref_begins(id, "mg_ring_deg")) {
        static const int32_t sizes[] = {6, 8, 12, 14};
        int k;
        for (k = 0; k < 4; k++) { /* at S^z = 0 every level shows; at S^z = 1 none as low */
            sum = next_nearest(sizes[k], 1, 0.5);
            ref_lowest(&sum, ref_down(sizes[k], sizes[k] / 2), 3, low, NULL);
            ref_check(row, (fabs(low[1] - low[0]) < 1e-9) + (fabs(low[2] - low[0]) < 1e-9) + 1.0);
            CHECK(ref_ground(&sum, ref_down(sizes[k], sizes[k] / 2 - 1)) > low[0] + 0.1);
        }
        return NULL;
    }
    if (ref_begins(id, "mg_")) {
        sum = next_nearest(n, strstr(id, "open") == NULL, 0.5);
        ref_lowest(&sum, ref_down(n, n / 2), 3, low, NULL);
        if (ref_begins(id, "mg_open"))
            CHECK(low[1] > low[0] + 1e-3);
        return ref_check(row, ref_begins(id, "mg_gap") ? low[2] - low[0] : low[0]);
    }
    if (ref_begins(id, "j1j2_ring")) {
        sum = next_nearest(n, 1, ref_after(id, "J2_"));
        return ref_check(row, ref_ground(&sum, ref_down(n, n / 2)));
    }
    if (ref_begins(id, "saw_E0")) {
        sum = sawtooth(n);
        ref_lowest(&sum, ref_down(n, n / 2), 3, low, NULL);
        CHECK_NEAR(low[2], ref_after(row->field[REFERENCE_NOTE], "third level at "), 1e-9, id);
        CHECK_NEAR(low[1], low[0], 1e-12, id);
        return ref_check(row, low[0]);
    }
    if (ref_begins(id, "hs_E0")) {
        sum = all_pairs(n, 1);
        return ref_check(row, ref_ground(&sum, ref_down(n, n / 2)));
    }
    if (ref_begins(id, "hs_") || ref_begins(id, "complete_")) {
        const level_list *list;
        char key[32];
        int32_t k;
        snprintf(key, sizeof key, "%c%d", id[0], (int)n);
        sum = all_pairs(n, ref_begins(id, "hs_"));
        list = levels_of(key, &sum);
        if (ref_begins(id, "hs_nlev"))
            return ref_check(row, list->count);
        k = ref_begins(id, "hs_") ? ref_integer(id, "lev") : (int32_t)(ref_after(id, "_S") - 0.5 * (n % 2));
        if (!CHECK(k >= 0 && k < list->count))
            return NULL;
        check_times(row, list->times[k]);
        return ref_check(row, list->energy[k]);
    }
    if (ref_begins(id, "ss_E0")) {
        sum = orthogonal_dimers(4, ref_after(model, "Jp="), dimers);
        return ref_check(row, ref_ground(&sum, ref_down(16, 8)));
    }
    if (ref_begins(id, "ss_dimer_eps")) {
        dimer_product(0.3, -6.0);
        dimer_product(1.7, -6.0);
        return NULL;
    }
    return "no public call gives it yet";
}

/* ---- 05, 06: clusters by the table of clusters -------------------------------------------------------------------- */

typedef struct cluster {
    int32_t sites, near_count, second_count, x[64], y[64];
    ref_bond near_bonds[256], second[256];
} cluster;

static int cluster_find(const char *name, cluster *found)
{
    static reference_row row;
    char *at, *bar;
    memset(found, 0, sizeof *found);
    if (!CHECK(reference_find("00_clusters.tsv", name, &row)))
        return 0;
    for (at = row.field[REFERENCE_VALUE]; *at == '('; at += strspn(at, " ")) {
        found->x[found->sites] = (int32_t)strtol(at + 1, &at, 10);
        found->y[found->sites++] = (int32_t)strtol(at + 1, &at, 10);
        at++;
    }
    bar = strchr(row.field[REFERENCE_VALUE], '|');
    if (!CHECK(bar != NULL))
        return 0;
    found->near_count = ref_bonds(bar + 1, found->near_bonds);
    bar = strchr(bar + 1, '|');
    if (bar != NULL)
        found->second_count = ref_bonds(bar + 1, found->second);
    return CHECK(found->sites > 0 && found->near_count > 0);
}

static whorl_sum cluster_sum(const cluster *c, double j2)
{
    uint64_t used = ref_exchange(terms, 0, c->near_bonds, c->near_count, 1.0);
    if (j2 != 0.0)
        used = ref_exchange(terms, used, c->second, c->second_count, j2);
    return ref_sum(c->sites, terms, used);
}

/* Lowest level at S^z = above, or 1/2 more for odd numbers of sites; remembered. */
static double cluster_level(const char *name, const cluster *c, int32_t above)
{
    static struct {
        char name[16];
        int32_t above;
        double level;
    } seen[128];
    static int count;
    int k;
    whorl_sum sum;
    for (k = 0; k < count; k++)
        if (strcmp(seen[k].name, name) == 0 && seen[k].above == above)
            return seen[k].level;
    sum = cluster_sum(c, 0.0);
    k = count < 127 ? count++ : 127;
    snprintf(seen[k].name, sizeof seen[k].name, "%s", name);
    seen[k].above = above;
    return seen[k].level = ref_ground(&sum, ref_down(c->sites, c->sites / 2 - above));
}

/* sum_j eps_j <S_0.S_j> in the ground state, eps by the parity of x + y relative to site 0 */
static double structure_factor(const cluster *c)
{
    whorl_sum sum = cluster_sum(c, 0.0), pairs;
    double value, *vector, got;
    whorl_space *space;
    uint64_t used = 0;
    int32_t j;
    ref_lowest(&sum, ref_down(c->sites, c->sites / 2), 1, &value, &vector);
    for (j = 0; j < c->sites; j++)
        used +=
            whorl_terms_exchange(terms + used, 0, j, ((c->x[j] + c->y[j] - c->x[0] - c->y[0]) & 1) != 0 ? -1.0 : 1.0);
    pairs = ref_sum(c->sites, terms, used);
    space = ref_down(c->sites, c->sites / 2);
    got = ref_expectation(&pairs, space, vector);
    whorl_space_free(&ref_host, space);
    free(vector);
    return got;
}

static const char *square_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID];
    int32_t n = ref_integer(row->field[REFERENCE_GEOMETRY], "N=");
    static cluster c;
    char name[16];
    whorl_sum sum;
    double ground;
    if (n > 18)
        return ref_large;
    snprintf(name, sizeof name, "sq%d", (int)n);
    if (!cluster_find(name, &c))
        return NULL;
    if (ref_begins(id, "j1j2_")) {
        sum = cluster_sum(&c, ref_after(id, "4x4_"));
        return ref_check(row, ref_ground(&sum, ref_down(16, 8)));
    }
    if (ref_begins(id, "xxz_")) {
        uint64_t used = 0;
        int32_t b;
        for (b = 0; b < c.near_count; b++)
            used += whorl_terms_exchange_xyz(terms + used, c.near_bonds[b].i, c.near_bonds[b].j, 1.0, 1.0,
                                             ref_after(id, "4x4_"));
        sum = ref_sum(16, terms, used);
        return ref_check(row, ref_ground(&sum, ref_down(16, 8)));
    }
    if (ref_begins(id, "sq_Spp_"))
        return ref_check(row, structure_factor(&c));
    if (ref_begins(id, "sq_trip_")) /* the lowest level at S^z = 1 */
        return ref_check(row, cluster_level(name, &c, 1));
    ground = cluster_level(name, &c, 0);
    if (ref_begins(id, "sq_E0_"))
        return ref_check(row, ground);
    if (ref_begins(id, "sq_e_"))
        return ref_check(row, ground / n);
    return "no public call gives it yet";
}

static const char *frustrated_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID], *quantity = strchr(id, '_');
    int32_t n = ref_integer(row->field[REFERENCE_GEOMETRY], "N=");
    static cluster c;
    char name[16];
    double ground;
    if (n > 21)
        return ref_large;
    snprintf(name, sizeof name, "%.*s", (int)(quantity - id), id);
    if (!cluster_find(name, &c))
        return NULL;
    ground = cluster_level(name, &c, 0);
    if (strcmp(quantity, "_E0") == 0)
        return ref_check(row, ground);
    if (strcmp(quantity, "_e_site") == 0)
        return ref_check(row, ground / n);
    if (strcmp(quantity, "_e_bond") == 0)
        return ref_check(row, ground / c.near_count);
    if (strcmp(quantity, "_gap01") == 0) {
        /* S of the two lowest levels: 0 for the ground level, 1 for the other, as the levels at S^z = 1 and 2 tell */
        double one = cluster_level(name, &c, 1);
        CHECK(one > ground + 1e-6 && cluster_level(name, &c, 2) > one + 1e-6);
        return ref_check(row, one - ground);
    }
    return "no public call gives it yet";
}

/* ---- 07: the honeycomb with bond-dependent coupling --------------------------------------------------------------- */

static int32_t cell_site(int32_t l1, int32_t l2, int32_t r1, int32_t r2, int32_t b)
{
    return 2 * ((r1 + l1) % l1 + l1 * ((r2 + l2) % l2)) + b;
}

static whorl_sum bond_dependent(int32_t l1, int32_t l2, double jz)
{
    uint64_t used = 0;
    int32_t r1, r2;
    for (r2 = 0; r2 < l2; r2++)
        for (r1 = 0; r1 < l1; r1++) {
            uint64_t a = UINT64_C(1) << cell_site(l1, l2, r1, r2, 0);
            uint64_t z = a | UINT64_C(1) << cell_site(l1, l2, r1, r2, 1);
            uint64_t x = a | UINT64_C(1) << cell_site(l1, l2, r1 - 1, r2, 1);
            uint64_t y = a | UINT64_C(1) << cell_site(l1, l2, r1, r2 - 1, 1);
            used += whorl_terms_string(terms + used, 0, z, -jz);
            used += whorl_terms_string(terms + used, x, 0, -1.0);
            used += whorl_terms_string(terms + used, y, y, -1.0);
        }
    return ref_sum(2 * l1 * l2, terms, used);
}

/*
 * The hexagon of cell r: A(r), B(r), and around. W_p = product over its six sites of the Pauli matrix of the bond that
 * points out. With the bonds of row kit_*: A(r)-B(r) is z, A(r)-B(r1-1, r2) is x, A(r)-B(r1, r2-1) is y. Walking
 * z, x, y, z, x, y: B(r) -x- A(r1+1, r2) -y- B(r1+1, r2-1) -z- A(r1+1, r2-1) -x- B(r1, r2-1) -y- A(r) -z- B(r).
 * Outward bonds: y at B(r), z at A(r1+1, r2), x at B(r1+1, r2-1), y at A(r1+1, r2-1), z at B(r1, r2-1), x at A(r).
 */
static whorl_sum hexagon(int32_t l1, int32_t l2, int32_t r1, int32_t r2, whorl_term *place)
{
    static const char axes[] = "yzxyzx";
    int32_t site[6], k;
    whorl_sum sum;
    site[0] = cell_site(l1, l2, r1, r2, 1);
    site[1] = cell_site(l1, l2, r1 + 1, r2, 0);
    site[2] = cell_site(l1, l2, r1 + 1, r2 - 1, 1);
    site[3] = cell_site(l1, l2, r1 + 1, r2 - 1, 0);
    site[4] = cell_site(l1, l2, r1, r2 - 1, 1);
    site[5] = cell_site(l1, l2, r1, r2, 0);
    sum = ref_sum(2 * l1 * l2, place, whorl_terms_number(place, 1.0));
    for (k = 0; k < 6; k++) { /* as a product of six operators: sites may coincide on a small torus */
        whorl_term one[1], next[4];
        whorl_sum factor, out = {0, 0, NULL};
        uint64_t used = whorl_terms_spin(one, site[k], axes[k], 2.0);
        factor = ref_sum(2 * l1 * l2, one, used);
        CHECK_STATUS(whorl_sum_multiply(&ref_host, &sum, &factor, next, 4, &out), WHORL_OK, &ref_host);
        CHECK(out.count == 1);
        place[0] = next[0];
        sum = ref_sum(2 * l1 * l2, place, 1);
    }
    return sum;
}

static void plaquettes(int32_t l1, int32_t l2)
{
    static whorl_term place[16][1], work[256];
    whorl_sum h = bond_dependent(l1, l2, 1.3), w[16], out = {0, 0, NULL}, all;
    whorl_term total[1], next[4];
    int32_t count = 0, r1, r2, p, q;
    for (r2 = 0; r2 < l2; r2++)
        for (r1 = 0; r1 < l1; r1++, count++)
            w[count] = hexagon(l1, l2, r1, r2, place[count]);
    all = ref_sum(2 * l1 * l2, total, whorl_terms_number(total, 1.0));
    for (p = 0; p < count; p++) {
        CHECK_STATUS(whorl_sum_commutator(&ref_host, &h, &w[p], work, 256, &out), WHORL_OK, &ref_host);
        CHECK(out.count == 0); /* [H, W_p] = 0 */
        for (q = 0; q < count; q++) {
            CHECK_STATUS(whorl_sum_commutator(&ref_host, &w[p], &w[q], work, 256, &out), WHORL_OK, &ref_host);
            CHECK(out.count == 0); /* [W_p, W_q] = 0 */
        }
        CHECK_STATUS(whorl_sum_multiply(&ref_host, &w[p], &w[p], work, 256, &out), WHORL_OK, &ref_host);
        CHECK(out.count == 1 && whorl_sum_trace(&out).re == 1.0 && whorl_sum_trace(&out).im == 0.0); /* W_p^2 = 1 */
        CHECK_STATUS(whorl_sum_multiply(&ref_host, &all, &w[p], next, 4, &out), WHORL_OK, &ref_host);
        total[0] = next[0];
        all = ref_sum(2 * l1 * l2, total, 1);
    }
    CHECK(all.count == 1 && whorl_sum_trace(&all).re == 1.0 && whorl_sum_trace(&all).im == 0.0); /* product is 1 */
}

static const char *honeycomb_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID];
    int32_t l1 = ref_integer(id, "_E0_"), l2 = ref_integer(id, "x"), parity;
    double low[2][6], lowest;
    int32_t wanted = ref_begins(id, "kit_deg_") ? 6 : 1, k, times = 0;
    whorl_sum sum;
    if (ref_begins(id, "kit_deg_"))
        l1 = ref_integer(id, "_deg_");
    if (ref_begins(id, "kit_plaq")) {
        plaquettes(2, 2);
        plaquettes(3, 2);
        plaquettes(2, 3);
        plaquettes(4, 4);
        return NULL;
    }
    if (ref_begins(id, "kit_einf") || ref_begins(id, "kit_gap"))
        return ref_infinite;
    if (ref_begins(id, "kit_vf"))
        return "a sum over free modes of a torus of 72 sites and more, not a level of a spin cluster that fits";
    if (ref_begins(id, "kit_nbonds"))
        return "a count of bonds and fluxes that no public call makes";
    sum = bond_dependent(l1, l2, strstr(id, "Jz2") != NULL ? 2.0 : 1.0);
    for (parity = 0; parity < 2; parity++) /* XX and YY flip two spins: the parity of down spins is conserved */
        ref_lowest(&sum, ref_parity(2 * l1 * l2, parity), wanted, low[parity], NULL);
    lowest = low[0][0] < low[1][0] ? low[0][0] : low[1][0];
    if (wanted == 1)
        return ref_check(row, lowest);
    for (parity = 0; parity < 2; parity++)
        for (k = 0; k < wanted; k++)
            times += low[parity][k] - lowest < 1e-7; /* the row's own criterion */
    return ref_check(row, times);
}

static void dimers_and_long_range(void)
{
    ref_table("04_exact_dimer_and_longrange.tsv", dimer_row);
}
static void square_lattice(void)
{
    ref_table("05_square_lattice.tsv", square_row);
}
static void frustrated_lattices(void)
{
    ref_table("06_triangular_kagome_honeycomb.tsv", frustrated_row);
}
static void honeycomb(void)
{
    ref_table("07_kitaev_honeycomb.tsv", honeycomb_row);
}

int main(void)
{
    ref_host = whorl_host_default();
    check_begin("reference_clusters");
    check_run("dimers_and_long_range", dimers_and_long_range);
    check_run("square_lattice", square_lattice);
    check_run("frustrated_lattices", frustrated_lattices);
    check_run("honeycomb", honeycomb);
    return check_end();
}
