/* Rows of tests/reference/ for molecules, mapped fermions and identities: 09, 16. */
#include "reference_solve.h"

static whorl_term terms[REF_TERMS];

/* ---- 09: molecules ------------------------------------------------------------------------------------------------ */

enum { MOST_LEVELS = 512 };

/* Distinct levels of a molecule, remembered while its rows follow each other. */
typedef struct molecule {
    char name[64];
    int32_t count;
    double energy[MOST_LEVELS];
    uint64_t times[MOST_LEVELS];
} molecule;

/* `name` is what stands before the comma in "dimer, N=2, bonds 0-1" */
static const molecule *molecule_of(const char *geometry)
{
    static molecule last;
    ref_bond bonds[64];
    char name[64];
    size_t length = strcspn(geometry, ",");
    const char *list = strstr(geometry, "bonds ");
    snprintf(name, sizeof name, "%.*s", (int)length, geometry);
    if (strcmp(last.name, name) != 0) {
        int32_t n = ref_integer(geometry, "N="), count = list == NULL ? 0 : ref_bonds(list + 6, bonds);
        whorl_sum sum = ref_sum(n, terms, ref_exchange(terms, 0, bonds, count, 1.0));
        double *values = ref_whole(&sum, 1);
        CHECK(count > 0);
        last.count = ref_distinct(values, UINT64_C(1) << n, 1e-8, MOST_LEVELS, last.energy, last.times);
        memcpy(last.name, name, sizeof name);
        free(values);
    }
    return &last;
}

static const char *molecule_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID], *quantity = row->field[REFERENCE_QUANTITY];
    const molecule *m;
    int32_t k;
    if (strstr(row->field[REFERENCE_GEOMETRY], "k_B T") != NULL)
        return ref_thermal;
    m = molecule_of(row->field[REFERENCE_GEOMETRY]);
    if (strstr(id, "_nlev") != NULL)
        return ref_check(row, m->count);
    k = ref_integer(quantity, "level ");
    if (!CHECK(k >= 0 && k < m->count))
        return NULL;
    CHECK_NEAR((double)m->times[k], ref_after(quantity, "degeneracy "), 0.0, id);
    return ref_check(row, m->energy[k]);
}

/* ---- 16: mapped fermions, collective spins, identities -------------------------------------------------------------- */

/* c_j^+ = S^+_j prod_{l < j} (-2 S^z_l): a fermion is a spin up (row id_jw). */
static whorl_sum creation(int32_t modes, int32_t j, whorl_term *place)
{
    whorl_term one[2], tail[1];
    whorl_sum raise = ref_sum(modes, one, whorl_terms_spin(one, j, '+', 1.0)), string, out = {0, 0, NULL};
    string = ref_sum(modes, tail, whorl_terms_string(tail, 0, whorl_bits_low(j), j % 2 ? -1.0 : 1.0));
    CHECK_STATUS(whorl_sum_multiply(&ref_host, &raise, &string, place, 2, &out), WHORL_OK, &ref_host);
    return out;
}

/* Adds w c_i^+ c_j to the terms. */
static uint64_t add_hop(int32_t modes, int32_t i, int32_t j, double w, uint64_t used)
{
    whorl_term to[2], from[2];
    whorl_sum create = creation(modes, i, to), destroy = creation(modes, j, from), out = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_adjoint(&ref_host, &destroy), WHORL_OK, &ref_host);
    CHECK_STATUS(whorl_sum_multiply(&ref_host, &create, &destroy, terms + used, 4, &out), WHORL_OK, &ref_host);
    CHECK_STATUS(whorl_sum_scale(&ref_host, &out, whorl_complex_of(w, 0.0)), WHORL_OK, &ref_host);
    return used + out.count;
}

/* -t sum over bonds and spins (c_i^+ c_j + h.c.) + U sum n_up n_down; modes 0 .. L-1 are up, L .. 2L-1 down electrons. */
static whorl_sum hopping(int32_t length, int ring, double u)
{
    uint64_t used = 0;
    int32_t i, spin, modes = 2 * length;
    for (spin = 0; spin < 2; spin++)
        for (i = 0; i < (ring ? length : length - 1); i++) {
            int32_t a = i + spin * length, b = (i + 1) % length + spin * length;
            used = add_hop(modes, a, b, -1.0, used);
            used = add_hop(modes, b, a, -1.0, used);
        }
    for (i = 0; i < length; i++) { /* n_up n_down = (S^z + 1/2)(S^z + 1/2) */
        used += whorl_terms_exchange_xyz(terms + used, i, i + length, 0.0, 0.0, u);
        used += whorl_terms_spin(terms + used, i, 'z', 0.5 * u);
        used += whorl_terms_spin(terms + used, i + length, 'z', 0.5 * u);
        used += whorl_terms_number(terms + used, 0.25 * u);
    }
    return ref_sum(modes, terms, used);
}

/* Two up and two down electrons on four sites: two conserved numbers. */
static whorl_space *four_electrons(void)
{
    whorl_down_number numbers[2];
    whorl_space_desc desc = whorl_space_default();
    whorl_space *space;
    numbers[0].mask = 0x0f;
    numbers[1].mask = 0xf0;
    numbers[0].down = numbers[1].down = 2;
    desc.sites = 8;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = numbers;
    desc.number_count = 2;
    space = ref_space(&desc);
    CHECK(whorl_space_count(space) == 36);
    return space;
}

static uint64_t add_total(int32_t n, char axis, whorl_term *place)
{
    uint64_t used = 0;
    int32_t i;
    for (i = 0; i < n; i++)
        used += whorl_terms_spin(place + used, i, axis, 1.0);
    return used;
}

/* -(2/N)(Sx^2 + gamma Sy^2) - 2 h Sz with total spins: squares by the algebra. */
static whorl_sum collective(int32_t n, double gamma, double h)
{
    whorl_term one[8], two[8], square_x[64], square_y[64], both[128], field[8];
    whorl_sum x = ref_sum(n, one, add_total(n, 'x', one)), y = ref_sum(n, two, add_total(n, 'y', two));
    whorl_sum z = ref_sum(n, field, add_total(n, 'z', field)), xx = {0, 0, NULL}, yy = xx, part = xx, out = xx;
    CHECK_STATUS(whorl_sum_multiply(&ref_host, &x, &x, square_x, 64, &xx), WHORL_OK, &ref_host);
    CHECK_STATUS(whorl_sum_multiply(&ref_host, &y, &y, square_y, 64, &yy), WHORL_OK, &ref_host);
    CHECK_STATUS(whorl_sum_add(&ref_host, &xx, whorl_complex_of(-2.0 / n, 0), &yy,
                               whorl_complex_of(-2.0 * gamma / n, 0), both, 128, &part),
                 WHORL_OK, &ref_host);
    CHECK_STATUS(whorl_sum_add(&ref_host, &part, whorl_complex_of(1.0, 0), &z, whorl_complex_of(-2.0 * h, 0), terms,
                               REF_TERMS, &out),
                 WHORL_OK, &ref_host);
    return out;
}

/* S_0.(S_1 x S_2) */
static whorl_sum chirality(void)
{
    static const char axes[] = "xyz";
    uint64_t used = 0;
    int a;
    for (a = 0; a < 3; a++) {
        whorl_term spin[1], cross[6];
        double d[3] = {0.0, 0.0, 0.0};
        whorl_sum one, two, out = {0, 0, NULL};
        d[a] = 1.0;
        one = ref_sum(3, spin, whorl_terms_spin(spin, 0, axes[a], 1.0));
        two = ref_sum(3, cross, whorl_terms_antisymmetric(cross, 1, 2, d));
        CHECK_STATUS(whorl_sum_multiply(&ref_host, &one, &two, terms + used, 6, &out), WHORL_OK, &ref_host);
        used += out.count;
    }
    return ref_sum(3, terms, used);
}

/* Z (B0 + B1) + X (B0 - B1) with B0 = -(Z + X)/sqrt 2, B1 = (X - Z)/sqrt 2: the settings that are best on the singlet. */
static whorl_sum bell_operator(void)
{
    const double s = 1.0 / sqrt(2.0);
    uint64_t used = 0;
    used += whorl_terms_string(terms + used, 0, 3, -s); /* Z0 B0 */
    used += whorl_terms_string(terms + used, 2, 1, -s);
    used += whorl_terms_string(terms + used, 2, 1, s); /* Z0 B1 */
    used += whorl_terms_string(terms + used, 0, 3, -s);
    used += whorl_terms_string(terms + used, 1, 2, -s); /* X0 B0 */
    used += whorl_terms_string(terms + used, 3, 0, -s);
    used += whorl_terms_string(terms + used, 3, 0, -s); /* -X0 B1 */
    used += whorl_terms_string(terms + used, 1, 2, s);
    return ref_sum(2, terms, used);
}

static const char *identity_row(const reference_row *row)
{
    const char *id = row->field[REFERENCE_ID], *model = row->field[REFERENCE_MODEL];
    whorl_sum sum;
    double *values, low[2];
    if (ref_begins(id, "hub2_")) {
        sum = hopping(2, 0, ref_after(model, "U="));
        return ref_check(row, ref_ground(&sum, ref_down(4, 2)));
    }
    if (ref_begins(id, "hub4_gc_")) {
        sum = hopping(4, 1, ref_after(id, "_U"));
        return ref_check(row, ref_ground(&sum, ref_all(8)));
    }
    if (ref_begins(id, "hub4_")) {
        sum = hopping(4, 1, ref_after(id, "_U"));
        return ref_check(row, ref_ground(&sum, four_electrons()));
    }
    if (ref_begins(id, "lmg_")) {
        int32_t n = ref_integer(row->field[REFERENCE_GEOMETRY], "N=");
        sum = collective(n, ref_after(model, "gamma="), ref_after(model, ", h="));
        return ref_check(row, ref_ground(&sum, ref_all(n)));
    }
    if (ref_begins(id, "central_dyn"))
        return "dynamics: needs whorl_evolve.h";
    if (ref_begins(id, "central_")) {
        int32_t bath = ref_begins(id, "central_deg_") ? ref_integer(id, "deg_") : ref_integer(id, "central_"), k;
        double energy[64];
        uint64_t times[64], used = 0;
        for (k = 1; k <= bath; k++)
            used += whorl_terms_exchange(terms + used, 0, k, 1.0);
        sum = ref_sum(bath + 1, terms, used);
        values = ref_whole(&sum, 1);
        ref_distinct(values, UINT64_C(1) << (bath + 1), 1e-8, 64, energy, times);
        /* the note: top level A n/4 */
        CHECK_NEAR(values[(UINT64_C(1) << (bath + 1)) - 1], 0.25 * bath, 1e-13, id);
        free(values);
        return ref_check(row, ref_begins(id, "central_deg_") ? (double)times[0] : energy[0]);
    }
    if (strcmp(id, "id_ss_ev") == 0) { /* -3/4 (x1), 1/4 (x3) */
        sum = ref_sum(2, terms, whorl_terms_exchange(terms, 0, 1, 1.0));
        values = ref_whole(&sum, 0);
        CHECK_NEAR(values[0], -0.75, 1e-15, id);
        CHECK(fabs(values[1] - 0.25) < 1e-15 && fabs(values[2] - 0.25) < 1e-15 && fabs(values[3] - 0.25) < 1e-15);
        free(values);
        return NULL;
    }
    if (strcmp(id, "id_chir") == 0 || strcmp(id, "chir_val") == 0) {
        int k;
        sum = chirality();
        values = ref_whole(&sum, 0);
        for (k = 0; k < 8; k++) /* -sqrt(3)/4 (x2), 0 (x4), sqrt(3)/4 (x2) */
            CHECK_NEAR(values[k], (k < 2 ? -1.0 : k < 6 ? 0.0 : 1.0) * sqrt(3.0) / 4.0, 1e-15, id);
        if (strcmp(id, "chir_val") == 0)
            ref_check(row, values[7]);
        free(values);
        return NULL;
    }
    if (strcmp(id, "chsh") == 0) {
        whorl_space *space = ref_all(2);
        double singlet[4] = {0.0, 0.0, 0.0, 0.0};
        singlet[1] = 1.0 / sqrt(2.0);
        singlet[2] = -singlet[1];
        sum = bell_operator();
        ref_check(row, ref_expectation(&sum, space, singlet));
        whorl_space_free(&ref_host, space);
        values = ref_whole(&sum, 0); /* no state does better */
        ref_check(row, values[3]);
        free(values);
        return NULL;
    }
    if (ref_begins(id, "dm_dimer_")) {
        double d[3] = {0.0, 0.0, 0.0};
        uint64_t used = whorl_terms_exchange(terms, 0, 1, 1.0);
        d[2] = ref_after(model, "D=");
        used += whorl_terms_antisymmetric(terms + used, 0, 1, d);
        sum = ref_sum(2, terms, used);
        values = ref_whole(&sum, 1);
        low[0] = values[0];
        /* the note: -J/4 + sqrt(J^2+D^2)/2, J/4 twice */
        CHECK_NEAR(values[1], 0.25, 1e-14, id);
        CHECK_NEAR(values[2], 0.25, 1e-14, id);
        CHECK_NEAR(values[3], -0.25 + 0.5 * sqrt(1.0 + d[2] * d[2]), 1e-14, id);
        free(values);
        return ref_check(row, low[0]);
    }
    if (strcmp(id, "xyz_dimer") == 0) { /* (Jz+Jx-Jy)/4; (Jz-Jx+Jy)/4; (-Jz+Jx+Jy)/4; (-Jz-Jx-Jy)/4 */
        const double jx = 0.375, jy = -1.25, jz = 0.75;
        double want[4];
        int k;
        want[0] = (jz + jx - jy) / 4.0;
        want[1] = (jz - jx + jy) / 4.0;
        want[2] = (-jz + jx + jy) / 4.0;
        want[3] = (-jz - jx - jy) / 4.0;
        qsort(want, 4, sizeof(double), ref_order);
        sum = ref_sum(2, terms, whorl_terms_exchange_xyz(terms, 0, 1, jx, jy, jz));
        values = ref_whole(&sum, 0);
        for (k = 0; k < 4; k++)
            CHECK_NEAR(values[k], want[k], 1e-15, id);
        free(values);
        return NULL;
    }
    if (strcmp(id, "id_euler") == 0)
        return "dynamics: needs whorl_evolve.h";
    if (ref_begins(id, "id_"))
        return "an identity of the algebra: checked in test_pauli.c";
    return "no public call gives it yet";
}

static void molecules(void)
{
    ref_table("09_molecular_magnets.tsv", molecule_row);
}
static void fermions_and_identities(void)
{
    ref_table("16_mappings_and_identities.tsv", identity_row);
}

int main(void)
{
    ref_host = whorl_host_default();
    check_begin("reference_molecules");
    check_run("molecules", molecules);
    check_run("fermions_and_identities", fermions_and_identities);
    return check_end();
}
