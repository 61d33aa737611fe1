/* test_model.c: model texts against sums built by hand, parameters, disorder, errors and their places, failures. */
#include "check.h"
#include "whorl_model.h"

enum { ROOM = 8192 };

/* ---- helpers ----------------------------------------------------------------------------------------------------- */

static whorl_model *read_model(whorl_host *host, const char *text, uint64_t realisation)
{
    whorl_model *model = NULL;
    if (!CHECK_STATUS(whorl_model_read(host, text, strlen(text), realisation, &model), WHORL_OK, host))
        printf("    at %d:%d of\n%s\n", (int)host->reason.line, (int)host->reason.column, text);
    return model;
}

/* All of H with the values of the text, or with one of them set. */
static int value_model(whorl_host *host, const whorl_model *model, const char *name, double value, whorl_term *terms,
                       whorl_sum *sum)
{
    double values[64];
    whorl_setting set;
    set.parameter = name == NULL ? 0 : whorl_model_parameter_find(host, model, name, strlen(name));
    set.value = value;
    return CHECK(set.parameter >= 0) &&
           CHECK_STATUS(whorl_model_values(host, model, &set, name != NULL, values), WHORL_OK, host) &&
           CHECK_STATUS(whorl_model_sum(host, model, values, terms, ROOM, sum), WHORL_OK, host);
}

/* The model must be this list of terms. */
static void check_model(const char *text, int32_t sites, whorl_term *terms, uint64_t count, double tolerance)
{
    static whorl_term room[ROOM];
    whorl_host host = whorl_host_default();
    whorl_model *model = read_model(&host, text, 0);
    whorl_sum want, got;
    if (model == NULL)
        return;
    CHECK_STATUS(whorl_sum_from_terms(&host, sites, terms, count, &want), WHORL_OK, &host);
    CHECK(whorl_model_sites(model) == sites);
    if (value_model(&host, model, NULL, 0.0, room, &got)) {
        CHECK(got.sites == sites && whorl_sum_check(&host, &got) == WHORL_OK);
        CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, tolerance * (1.0 + whorl_sum_norm_bound(&want)), text);
    }
    whorl_model_free(&host, model);
    CHECK(host.bytes_used == 0);
}

/* ---- features ---------------------------------------------------------------------------------------------------- */

static void test_pairs(void)
{
    whorl_term terms[256];
    uint64_t used = 0;
    int32_t k;
    for (k = 0; k < 6; k++)
        used += whorl_terms_exchange(terms + used, k, (k + 1) % 6, 1.5);
    check_model("spins 6\nlet J = 1.5\npairs ring: 0-1-2-3-4-5-0\nsum over ring: J*S[i].S[j]\n", 6, terms, used, 0.0);
    check_model("spins 6\npairs ring: 0-1 1-2-3\n  3-4 4-5\n# comment\n\n\t5-0\nsum over ring: 1.5*S[i].S[j]", 6, terms,
                used, 0.0);
    check_model("spins 6\r\npairs ring with J:\r\n 0-1 1 1-2 2 2-3 1.5\r\n 3-4 1.5 4-5 -1.5e0 5-0 +1.5\r\n"
                "sum over ring: J*S[i].S[j]\r\nadd 0.5*S[0].S[1] - 0.5*S[1].S[2] + 3*S[4].S[5]\r\n", 6, terms, used,
                0.0);
    used = 0; /* the same pair twice adds; order counts for the vector product */
    for (k = 0; k < 2; k++)
        used += whorl_terms_exchange(terms + used, 0, 1, 0.5);
    {
        const double d[3] = {0.25, 0.0, -1.0}, e[3] = {-0.5, 1.0, 2.0};
        used += whorl_terms_antisymmetric(terms + used, 1, 0, d);
        used += whorl_terms_antisymmetric(terms + used, 2, 1, e);
    }
    check_model("spins 3\npairs p: 0-1 1-0\nsum over p: 0.5*S[i].S[j]\n"
                "pairs q with Dx, Dy, Dz: 1-0 0.25 0 -1 2-1 -0.5 1 2\nsum over q: (Dx, Dy, Dz).(S[i] x S[j])\n",
                3, terms, used, 0.0);
    used = 0; /* all pairs, an exchange matrix from parameters */
    {
        const double m[9] = {1.0, 0.5, 0.0, -0.5, 1.0, 0.0, 0.0, 0.0, 2.0};
        for (k = 0; k < 3; k++)
            used += whorl_terms_exchange_matrix(terms + used, k == 2 ? 1 : 0, k == 0 ? 1 : 2, m);
    }
    check_model("spins 3\nlet J = 1\nlet D = J/2\nlet M = (J, D, 0; -D, J, 0; 0, 0, 2*J)\npairs p: all\n"
                "sum over p: S[i].M.S[j]\n", 3, terms, used, 0.0);
    check_model("spins 64\nadd 0\n", 64, terms, 0, 0.0);
    check_model("spins 1\n", 1, terms, 0, 0.0);
    used = whorl_terms_number(terms, 2.5);
    check_model("spins 64\nadd 2.5", 64, terms, used, 0.0);
}

static void test_fields(void)
{
    static const double h[3] = {0.5, 0.0, 1.0}, g[9] = {2.0, 0.1, 0.0, 0.1, 2.0, 0.0, 0.0, 0.0, 2.25};
    whorl_term terms[128];
    uint64_t used = 0;
    int32_t k;
    for (k = 0; k < 4; k++)
        used += whorl_terms_field(terms + used, k, h, g);
    check_model("spins 4\nlet B = 0.5\nlet h = (B, 0, 2*B)\nlet g = (2, 0.1, 0; 0.1, 2, 0; 0, 0, 2.25)\n"
                "sum over spins: -h.g.S[i]\n", 4, terms, used, 1e-16);
    used = whorl_terms_string(terms, 0, 2, 0.25);
    used += whorl_terms_string(terms + used, 0, 8, -1.5);
    used += whorl_terms_string(terms + used, 1, 0, -0.5);
    used += whorl_terms_string(terms + used, 4, 0, -0.5);
    check_model("spins 4\ngroup odd with h: 1 0.25\n  3 -1.5\ngroup even: 0 2\nsum over odd: h*Z[i]\n"
                "sum over even: -0.5*X[i]", 4, terms, used, 0.0);
}

static void test_places(void)
{
    static const double at[3][3] = {{0.0, 0.0, 0.0}, {1.5, 0.0, 0.0}, {0.0, 2.0, 0.5}};
    static const double g[9] = {2.0, 0.0, 0.0, 0.0, 2.1, 0.0, 0.1, 0.0, 2.2};
    static const char *const places = "spins 3\nplace 0 (0, 0, 0)  1 (3/2, 0, 0)\n  2 (0, sqrt(4), 0.5)\n";
    whorl_term terms[128];
    char text[600];
    uint64_t used = 0;
    int32_t i, j, c;
    for (i = 0; i < 3; i++)
        for (j = i + 1; j < 3; j++) {
            double d[3];
            for (c = 0; c < 3; c++)
                d[c] = at[j][c] - at[i][c];
            used += whorl_terms_dipolar(terms + used, i, j, d, g, g, 0.75);
        }
    sprintf(text, "%slet g = (2, 0, 0; 0, 2.1, 0; 0.1, 0, 2.2)\npairs every: all\nsum over every:\n"
                  "  0.75*((g.S[i]).(g.S[j]) - 3*(n.g.S[i])*(n.g.S[j]))/r^3\n", places);
    check_model(text, 3, terms, used, 1e-15);
    used = whorl_terms_string(terms, 0, 3, 2.0 / (1.5 * 1.5 * 1.5 * 1.5 * 1.5 * 1.5));
    sprintf(text, "%spairs near: within 1.5\nlet C = 2\nsum over near: C/r^6*Z[i]*Z[j]\n", places);
    check_model(text, 3, terms, used, 1e-16);
    used = whorl_terms_string(terms, 3, 0, 2.0 * pow(1.5, -2.75)); /* an exponent to be swept */
    sprintf(text, "%spairs near: within 1.5\nlet p = 2.75\nsum over near: 2/r^p*X[i]*X[j]\n", places);
    check_model(text, 3, terms, used, 1e-15);
    used = 0; /* a field gradient: d is the position in a sum over sites */
    for (i = 0; i < 3; i++)
        used += whorl_terms_field(terms + used, i, at[i], NULL);
    sprintf(text, "%ssum over spins: -d.S[i]\n", places);
    check_model(text, 3, terms, used, 0.0);
    {
        whorl_host host = whorl_host_default();
        whorl_model *model = read_model(&host, text, 0);
        double position[3];
        CHECK(model != NULL && whorl_model_position(model, 2, position) && position[1] == 2.0 && position[2] == 0.5);
        CHECK(model == NULL || !whorl_model_position(model, 3, position));
        whorl_model_free(&host, model);
        model = read_model(&host, "spins 2\nplace 0 (0,0,0)\n", 0);
        CHECK(model != NULL && !whorl_model_position(model, 0, position));
        whorl_model_free(&host, model);
    }
}

/* Clusters: the bonds of whorl_lattice.h, one by one, with their displacements. */
static void check_cluster(const whorl_lattice_desc *desc, int32_t first, int32_t last, int32_t type, const char *text)
{
    static whorl_bond bonds[1024];
    static whorl_term terms[ROOM];
    whorl_host host = whorl_host_default();
    whorl_lattice *lattice = NULL;
    uint64_t count = 0, used = 0, k;
    int32_t shell, sites;
    if (!CHECK_STATUS(whorl_lattice_make(&host, desc, &lattice), WHORL_OK, &host))
        return;
    for (shell = first; shell <= last; shell++) {
        CHECK_STATUS(whorl_lattice_bonds(&host, lattice, shell, 0, bonds, 1024, &count), WHORL_OK, &host);
        for (k = 0; k < count; k++)
            if (type < 0 || bonds[k].type == type) {
                used += whorl_terms_exchange(terms + used, bonds[k].i, bonds[k].j, 0.5);
                used += whorl_terms_antisymmetric(terms + used, bonds[k].i, bonds[k].j, bonds[k].displacement);
            }
    }
    sites = whorl_lattice_sites(lattice);
    whorl_lattice_free(&host, lattice);
    CHECK(used > 0);
    check_model(text, sites, terms, used, 1e-15);
}

static void test_clusters(void)
{
    static const double basis[6] = {0.0, 0.0, 0.0, 0.5, 0.5, 0.0};
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc;
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_SQUARE, 10, &desc), WHORL_OK, &host);
    check_cluster(&desc, 1, 1, -1, "cluster square 10\npairs p: shell 1\n"
                                   "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    check_cluster(&desc, 1, 3, -1, "cluster square 10\npairs p: shell 1 to 3\n"
                                   "sum over p: 0.5*S[i].S[j] + r*n.(S[i] x S[j])\n");
    check_cluster(&desc, 1, 1, 1, "cluster square by (3, 1) (-1, 3)\npairs p: shell 1 type 1\n"
                                  "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_KAGOME, 12, &desc), WHORL_OK, &host);
    desc.length = 2.5;
    check_cluster(&desc, 1, 1, -1, "cluster kagome 12 spacing 2.5\npairs p: shell 1\n"
                                   "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    desc = whorl_lattice_box(WHORL_LATTICE_SQUARE, 4, 3, 1);
    desc.open[0] = 1;
    check_cluster(&desc, 1, 2, -1, "cluster square by (4, 0) (0, 3) open 1\npairs p: shell 1 to 2\n"
                                   "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    desc = whorl_lattice_box(WHORL_LATTICE_CHAIN, 7, 1, 1);
    desc.open[0] = 1;
    check_cluster(&desc, 1, 2, -1, "cluster chain 7 open\npairs p: within 2\n"
                                   "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    desc = whorl_lattice_box(WHORL_LATTICE_CUBIC, 2, 2, 2);
    check_cluster(&desc, 1, 1, -1, "cluster cubic by (2, 0, 0) (0, 2, 0) (0, 0, 2)\npairs p: shell 1\n"
                                   "sum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
    desc = whorl_lattice_default();
    desc.kind = WHORL_LATTICE_CELL;
    desc.dimension = 2;
    desc.primitive[0] = 1.0;
    desc.primitive[4] = 1.25;
    desc.basis = basis;
    desc.basis_count = 2;
    desc.spanning[0] = 3;
    desc.spanning[4] = 2;
    check_cluster(&desc, 1, 2, -1, "cluster cell (1, 0, 0) (0, 5/4, 0) with (0, 0, 0) (1/2, 0.5, 0) by (3, 0) (0, 2)\n"
                                   "pairs p: shell 1 to 2\nsum over p: 0.5*S[i].S[j] + d.(S[i] x S[j])\n");
}

/* ---- parameters -------------------------------------------------------------------------------------------------- */

static const char chained[] = "title  Knobs and knobs  # not this\nspins 2\nlet J = 2\nlet D = 0.25*J\n"
                              "let E = D^2 + 1/J\nlet v = (0, D, E)\nadd J*S[0].S[1] + v.S[0] + E/(1 + J)*X[1]\n";

static void test_parameters(void)
{
    static whorl_term room[ROOM];
    whorl_host host = whorl_host_default();
    whorl_model *model = read_model(&host, chained, 0);
    static const struct {
        const char *name;
        double value, j, d, e;
    } cases[4] = {{NULL, 0.0, 2.0, 0.5, 0.75}, {"J", 4.0, 4.0, 1.0, 1.25}, {"D", 3.0, 2.0, 3.0, 9.5},
                  {"E", -1.0, 2.0, 0.5, -1.0}};
    whorl_setting set[2] = {{0, 1.0}, {1, 5.0}};
    double values[3] = {7.0, 7.0, 7.0};
    uint64_t before;
    size_t k;
    if (model == NULL)
        return;
    CHECK(strcmp(whorl_model_title(model), "Knobs and knobs") == 0 && whorl_model_draws(model) == 0);
    CHECK(whorl_model_parameter_count(model) == 3 && strcmp(whorl_model_parameter_name(model, 2), "E") == 0);
    CHECK(whorl_model_parameter_name(model, 3)[0] == '\0' && whorl_model_parameter_name(model, -1)[0] == '\0');
    for (k = 0; k < 4; k++) {
        whorl_term terms[16];
        whorl_sum want, got;
        const double field[3] = {0.0, -cases[k].d, -cases[k].e};
        uint64_t used = whorl_terms_exchange(terms, 0, 1, cases[k].j);
        used += whorl_terms_field(terms + used, 0, field, NULL);
        used += whorl_terms_string(terms + used, 2, 0, cases[k].e / (1.0 + cases[k].j));
        CHECK_STATUS(whorl_sum_from_terms(&host, 2, terms, used, &want), WHORL_OK, &host);
        if (value_model(&host, model, cases[k].name, cases[k].value, room, &got))
            CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, 1e-14, "parameters");
    }
    CHECK(whorl_model_parameter_find(&host, model, "JJ", 2) == -1 && strstr(host.reason.text, "`J`") != NULL);
    CHECK(whorl_model_parameter_find(&host, model, "temperature", 11) == -1);
    CHECK(strstr(host.reason.text, "it has J, D, E") != NULL);
    CHECK_STATUS(whorl_model_values(&host, model, set, 2, values), WHORL_OK, &host);
    CHECK(values[0] == 1.0 && values[1] == 5.0 && values[2] == 26.0);
    values[0] = 7.0;
    set[1].parameter = 3;
    CHECK_STATUS(whorl_model_values(&host, model, set, 2, values), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 1 && values[0] == 7.0);
    set[0].value = HUGE_VAL;
    CHECK_STATUS(whorl_model_values(&host, model, set, 1, values), WHORL_NOT_FINITE, &host);
    set[0].value = 0.0;
    CHECK_STATUS(whorl_model_values(&host, model, set, 1, values), WHORL_NOT_FINITE, &host); /* 1/J */
    CHECK(strstr(host.reason.text, "`J`") != NULL && values[0] == 7.0);
    before = host.bytes_used;
    host.bytes_peak = before;
    CHECK_STATUS(whorl_model_values(&host, model, NULL, 0, values), WHORL_OK, &host);
    CHECK(host.bytes_peak - before == whorl_model_values_bytes(model));
    whorl_model_free(&host, model);
    whorl_model_free(&host, NULL);
    CHECK(host.bytes_used == 0);
}

/* ---- disorder ---------------------------------------------------------------------------------------------------- */

static void test_draws(void)
{
    static whorl_term room[ROOM];
    static const char text[] = "spins 5\nlet W = 1.5\npairs ring with J: 0-1 1  1-2 2  2-3 3  3-4 4  4-0 5\n"
                               "draw u over ring uniform -1 to 3 seed 7\ndraw g over spins normal 0.5 2 seed 8\n"
                               "draw s over ring signs seed 9\n"
                               "sum over ring: s*(J + W*u)*Z[i]*Z[j]\nsum over spins: W*g*X[i]\n";
    whorl_host host = whorl_host_default();
    uint64_t r;
    for (r = 0; r < 4; r++) {
        whorl_model *model = read_model(&host, text, r);
        whorl_term terms[16];
        whorl_sum want, got;
        uint64_t used = 0, k;
        if (model == NULL)
            return;
        for (k = 0; k < 5; k++) {
            double sign = whorl_random_bits(9, r, k) >> 63 ? -1.0 : 1.0;
            used += whorl_terms_string(terms + used, 0, UINT64_C(1) << k | UINT64_C(1) << (k + 1) % 5,
                                       sign * ((double)(k + 1) + 1.5 * (-1.0 + 4.0 * whorl_random_uniform(7, r, k))));
            used += whorl_terms_string(terms + used, UINT64_C(1) << k, 0,
                                       1.5 * (0.5 + 2.0 * whorl_random_normal(8, r, k)));
        }
        CHECK_STATUS(whorl_sum_from_terms(&host, 5, terms, used, &want), WHORL_OK, &host);
        CHECK(whorl_model_draws(model) == 3 && whorl_model_sum_count(model) == 2); /* 1 and W */
        if (value_model(&host, model, NULL, 0.0, room, &got))
            CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, 1e-14, "draws");
        whorl_model_free(&host, model);
    }
}

/* ---- errors ------------------------------------------------------------------------------------------------------ */

static void test_errors(void)
{
    static const struct {
        const char *text;
        whorl_status status;
        int32_t line, column;
        const char *phrase;
    } wrong[] = {
        {"", WHORL_BAD_TEXT, 1, 1, "no spins"},
        {"# nothing\n\n", WHORL_BAD_TEXT, 3, 1, "no spins"},
        {"spins 65\n", WHORL_TOO_LARGE, 1, 7, "1 to 64"},
        {"spins 0\n", WHORL_BAD_TEXT, 1, 7, "too few"},
        {"spins\n", WHORL_BAD_TEXT, 1, 6, "number of spins"},
        {"spins -3\n", WHORL_BAD_TEXT, 1, 7, "number of spins"},
        {"spins 4 5\n", WHORL_BAD_TEXT, 1, 9, "end of the statement"},
        {"spins 4\nspins 4\n", WHORL_BAD_TEXT, 2, 7, "known already"},
        {" spins 4\n", WHORL_BAD_TEXT, 1, 2, "left edge"},
        {"spin 4\n", WHORL_BAD_TEXT, 1, 1, "`spins`"},
        {"spins 4\nhamiltonian X[0]\n", WHORL_BAD_TEXT, 2, 1, "begins no statement"},
        {"spins 4\n  let J = 1\n", WHORL_BAD_TEXT, 2, 3, "begin this one at the left edge"},
        {"spins 4\nlet J 1\n", WHORL_BAD_TEXT, 2, 7, "`=`"},
        {"spins 4\nlet J =\nadd X[0]\n", WHORL_BAD_TEXT, 2, 8, "statement ends"},
        {"spins 4\nlet J = 1\nlet J = 2\n", WHORL_BAD_TEXT, 3, 5, "in use"},
        {"spins 4\nlet r = 1\n", WHORL_BAD_TEXT, 2, 5, "meaning of its own"},
        {"spins 4\nlet _a = 1\n", WHORL_BAD_TEXT, 2, 5, "a name"},
        {"spins 4\nlet J = 2*i\n", WHORL_BAD_TEXT, 2, 9, "real number"},
        {"spins 4\nlet A = X[0]\n", WHORL_BAD_TEXT, 2, 9, "numbers, vectors"},
        {"spins 4\nlet J = K\n", WHORL_BAD_TEXT, 2, 9, "unknown name"},
        {"spins 4\nlet Jnear = 1\nadd Jnaer*X[0]\n", WHORL_BAD_TEXT, 3, 5, "`Jnear`"},
        {"let J = 1\nadd J*X[0]\nspins 4\n", WHORL_BAD_TEXT, 2, 5, "not known yet"},
        {"spins 4\nadd X[4]\n", WHORL_BAD_TEXT, 2, 7, "0 .. 3"},
        {"spins 4\nadd S[0]\n", WHORL_BAD_TEXT, 2, 5, "a vector of operators"},
        {"spins 4\nadd X[0] let\n", WHORL_BAD_TEXT, 2, 10, "an operator is missing"},
        {"spins 4\nadd X[i]\n", WHORL_BAD_TEXT, 2, 7, "sum over"},
        {"spins 4\npairs p: 0-4\n", WHORL_BAD_TEXT, 2, 12, "0 .. 3"},
        {"spins 4\npairs p: 0-0\n", WHORL_BAD_TEXT, 2, 12, "two different sites"},
        {"spins 4\npairs p: 0 1\n", WHORL_BAD_TEXT, 2, 12, "second site"},
        {"spins 4\npairs p:\n", WHORL_BAD_TEXT, 2, 9, "pairs such as 0-1"},
        {"spins 4\npairs p 0-1\n", WHORL_BAD_TEXT, 2, 9, "`:`"},
        {"spins 4\npairs : 0-1\n", WHORL_BAD_TEXT, 2, 7, "a name for the pairs"},
        {"spins 4\npairs p with J: 0-1 1 1-2\n", WHORL_BAD_TEXT, 2, 26, "a number for each name"},
        {"spins 4\npairs p with J: 0-1 1 2\n", WHORL_BAD_TEXT, 2, 24, "second site"},
        {"spins 4\npairs p with J, J: 0-1 1 2\n", WHORL_BAD_TEXT, 2, 17, "two columns"},
        {"spins 4\npairs p with J: all\n", WHORL_BAD_TEXT, 2, 17, "written out"},
        {"spins 4\npairs p: shell 1\n", WHORL_BAD_TEXT, 2, 10, "`cluster`"},
        {"spins 4\npairs p: within 1\n", WHORL_BAD_TEXT, 2, 10, "positions"},
        {"cluster square 16\npairs p: within 1\n", WHORL_BAD_TEXT, 2, 10, "`shell`"},
        {"cluster square 16\npairs p: shell 0\n", WHORL_BAD_TEXT, 2, 16, "1 to 100"},
        {"cluster square 16\npairs p: shell 1 type 9\n", WHORL_BAD_TEXT, 2, 16, "no such bonds"},
        {"cluster square 15\n", WHORL_BAD_TEXT, 1, 16, "16"},
        {"cluster square 65\n", WHORL_TOO_LARGE, 1, 16, "too many"},
        {"cluster squae 16\n", WHORL_BAD_TEXT, 1, 9, "`square`"},
        {"cluster square by (4, 0)\n", WHORL_BAD_TEXT, 1, 25, "spanning vector"},
        {"cluster square by (4, 0) (8, 0)\n", WHORL_BAD_TEXT, 1, 9, "spanning"},
        {"cluster square 16 open 3\n", WHORL_BAD_TEXT, 1, 24, "spanning vector"},
        {"cluster square 16 spacing 0\n", WHORL_BAD_TEXT, 1, 27, "above 0"},
        {"cluster square 16\nplace 0 (0, 0, 0)\n", WHORL_BAD_TEXT, 2, 1, "leave `place` out"},
        {"spins 2\nplace 0 (0, 0)\n", WHORL_BAD_TEXT, 2, 14, "three components"},
        {"spins 2\nlet a = 1\nplace 0 (a, 0, 0)\n", WHORL_BAD_TEXT, 3, 9, "cannot depend"},
        {"spins 2\nplace 0 (0, 0, 0) 0 (1, 0, 0)\n", WHORL_BAD_TEXT, 2, 19, "already"},
        {"spins 2\nplace 0 (0,0,0) 1 (0,0,0)\npairs p: all\nsum over p: n.S[i]\n", WHORL_BAD_TEXT, 4, 13, "pair 0-1"},
        {"spins 2\nplace 0 (0,0,0) 1 (0,0,0)\npairs p: all\nsum over p: Z[i]/r\n", WHORL_BAD_TEXT, 4, 17, "pair 0-1"},
        {"spins 2\npairs p: all\nsum over p: Z[i]/r\n", WHORL_BAD_TEXT, 3, 18, "positions"},
        {"spins 2\npairs p: all\nsum over p Z[i]\n", WHORL_BAD_TEXT, 3, 12, "`:`"},
        {"spins 2\npairs pair: all\nsum over piar: Z[i]\n", WHORL_BAD_TEXT, 3, 10, "`pair`"},
        {"spins 2\nsum over spins: Z[j]\n", WHORL_BAD_TEXT, 2, 19, "only i"},
        {"sum over spins: Z[i]\n", WHORL_BAD_TEXT, 1, 10, "not known yet"},
        {"spins 2\nsum spins: Z[i]\n", WHORL_BAD_TEXT, 2, 5, "`over`"},
        {"spins 2\ndraw u over spins gaussian seed 1\n", WHORL_BAD_TEXT, 2, 19, "a distribution"},
        {"spins 2\ndraw u over spins signs\n", WHORL_BAD_TEXT, 2, 24, "`seed`"},
        {"spins 2\ndraw u over spins uniform 0 1 seed 1\n", WHORL_BAD_TEXT, 2, 29, "`to`"},
        {"spins 2\ndraw u over spins signs seed 1\ndraw v over spins signs seed 1\n", WHORL_BAD_TEXT, 3, 30,
         "this seed"},
        {"spins 2\npairs p: all\ndraw u over p signs seed 1\nadd u*X[0]\n", WHORL_BAD_TEXT, 4, 5, "another list"},
        {"spins 2\npairs p with J: 0-1 2\nlet J = 1\nsum over p: J*X[i]\n", WHORL_BAD_TEXT, 4, 5, "rename"},
        {"spins 2\npairs p: all\nadd p\n", WHORL_BAD_TEXT, 3, 5, "names a list"},
        {"spins 2\ntitle a\ntitle b\n", WHORL_BAD_TEXT, 3, 1, "already"},
        {"spins 2\npairs p with J: 0-1 1e999\n", WHORL_NOT_FINITE, 2, 21, "too large"},
        {"spins 2\npairs p with J: 0-1 1e300\nsum over p: J*X[i]*1e10\n", WHORL_NOT_FINITE, 3, 19, "pair 0-1"},
    };
    size_t k;
    for (k = 0; k < sizeof wrong / sizeof *wrong; k++) {
        whorl_host host = whorl_host_default();
        whorl_model *model = (whorl_model *)&host;
        const char *text = wrong[k].text;
        whorl_status status = whorl_model_read(&host, text, strlen(text), 0, &model);
        int good = status == wrong[k].status && host.reason.line == wrong[k].line &&
                   host.reason.column == wrong[k].column &&
                   strstr(host.reason.text, wrong[k].phrase) != NULL && model == NULL && host.bytes_used == 0;
        CHECK(good);
        if (!good)
            printf("    `%s`: %d at %d:%d: %s\n", text, (int)status, (int)host.reason.line, (int)host.reason.column,
                   host.reason.text);
    }
}

/* ---- size -------------------------------------------------------------------------------------------------------- */

static void test_size(void)
{
    enum { LINES = 100000 };
    char *text = (char *)malloc(64 * LINES), *at = text;
    whorl_host host = whorl_host_default();
    whorl_model *model;
    whorl_term *terms = (whorl_term *)malloc(4 * LINES * sizeof *terms), *room;
    whorl_sum want, got;
    double values[2];
    uint64_t used = 0, k;
    at += sprintf(at, "spins 60\nlet s = 0.5\npairs many with J, K:\n");
    for (k = 0; k < LINES; k++) {
        int32_t i = (int32_t)(whorl_random_bits(1, 0, k) % 60), j = (int32_t)(whorl_random_bits(1, 1, k) % 59);
        double coupling = (double)(int64_t)(whorl_random_bits(1, 2, k) % 2000) / 8.0 - 125.0;
        j += j >= i;
        at += sprintf(at, "  %d-%d %.3f %.1f\n", (int)i, (int)j, coupling, (double)(k % 5));
        used += whorl_terms_exchange(terms + used, i, j, 0.5 * coupling);
        used += whorl_terms_string(terms + used, 0, UINT64_C(1) << i, (double)(k % 5));
    }
    sprintf(at, "sum over many: s*J*S[i].S[j] + K*Z[i]\n");
    CHECK_STATUS(whorl_sum_from_terms(&host, 60, terms, used, &want), WHORL_OK, &host);
    model = read_model(&host, text, 0);
    if (model != NULL) {
        room = (whorl_term *)malloc((size_t)whorl_model_term_count(model) * sizeof *room);
        CHECK_STATUS(whorl_model_values(&host, model, NULL, 0, values), WHORL_OK, &host);
        CHECK_STATUS(whorl_model_sum(&host, model, values, room, whorl_model_term_count(model) - 1, &got),
                     WHORL_NO_ROOM, &host);
        CHECK(host.reason.index == whorl_model_term_count(model));
        CHECK_STATUS(whorl_model_sum(&host, model, values, room, whorl_model_term_count(model), &got), WHORL_OK, &host);
        CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, 0.0, "10^5 couplings: all are multiples of 1/16, so exact");
        free(room);
    }
    whorl_model_free(&host, model);
    CHECK(host.bytes_used == 0);
    free(terms);
    free(text);
}

/* ---- the shipped files and the README ---------------------------------------------------------------------------- */

static void test_shipped(void)
{
    static const char *const names[3] = {"../examples/ring_magnet.whorl", "../examples/glass_register.whorl",
                                         "../examples/frustrated_plane.whorl"};
    static char text[100000];
    size_t k;
    for (k = 0; k < 3; k++) {
        FILE *file = fopen(names[k], "rb");
        whorl_host host = whorl_host_default();
        whorl_model *model = NULL;
        static whorl_term room[ROOM];
        whorl_sum sum;
        size_t length;
        if (!CHECK(file != NULL)) /* programs run in tests/ */
            continue;
        length = fread(text, 1, sizeof text - 1, file);
        fclose(file);
        text[length] = '\0';
        model = read_model(&host, text, 0);
        if (model == NULL)
            continue;
        CHECK(whorl_model_title(model)[0] != '\0' && whorl_model_parameter_count(model) > 0);
        if (value_model(&host, model, NULL, 0.0, room, &sum))
            CHECK(sum.count > 0 && whorl_sum_is_hermitian(&sum));
        whorl_model_free(&host, model);
    }
}

/* ---- memory and cancelling --------------------------------------------------------------------------------------- */

static const char busy[] =
    "title All of it\ncluster square 16\nlet J = 1\nlet D = 0.1/(J + 1)\nlet g = (2, 0, 0; 0, 2, D; 0, 0, 2)\n"
    "pairs near: shell 1\npairs far with K: 0-5 1 1-6 2 2-7 3\ngroup some with h: 1 1 2 2\n"
    "draw u over near uniform 0 to 1 seed 1\ndraw v over some signs seed 2\n"
    "sum over near: J*(1 + D*u)*S[i].S[j] + D*d.(S[i] x S[j])\nsum over far: K*S[i].g.S[j]/(1 + J^2)\n"
    "sum over some: v*h*X[i]\nadd (Z[0] + J*Z[1])^3\n";

static whorl_status call_read(whorl_host *host, void *argument)
{
    whorl_model *model = (whorl_model *)host;
    whorl_status status = whorl_model_read(host, busy, sizeof busy - 1, 3, &model);
    static whorl_term terms[ROOM];
    double values[4] = {9.0, 9.0, 9.0, 9.0};
    (void)argument;
    CHECK((status == WHORL_OK) == (model != NULL));
    if (status == WHORL_OK) {
        whorl_sum sum = {9, 9, NULL};
        status = whorl_model_values(host, model, NULL, 0, values);
        CHECK(status == WHORL_OK ? values[0] == 1.0 : values[0] == 9.0);
        if (status == WHORL_OK)
            status = whorl_model_sum(host, model, values, terms, ROOM, &sum);
        CHECK(status == WHORL_OK ? sum.sites == 16 : sum.sites == 9);
    }
    whorl_model_free(host, model);
    return status;
}

static void test_failures(void)
{
    check_every_allocation(call_read, NULL, WHORL_OK);
    check_every_poll(call_read, NULL, WHORL_OK);
}

static void test_announced(void)
{
    whorl_host host = whorl_host_default();
    whorl_model *model = NULL;
    uint64_t bytes = 0;
    whorl_arena arena;
    char *memory, *base;
    CHECK_STATUS(whorl_model_bytes(&host, busy, sizeof busy - 1, 3, &bytes), WHORL_OK, &host);
    CHECK(host.bytes_used == 0);
    host.bytes_peak = 0;
    CHECK_STATUS(whorl_model_read(&host, busy, sizeof busy - 1, 3, &model), WHORL_OK, &host);
    CHECK(host.bytes_peak == bytes);
    whorl_model_free(&host, model);
    memory = (char *)malloc((size_t)bytes + 64);
    base = memory + (64 - ((uintptr_t)memory & 63)) % 64;
    whorl_arena_make(&arena, base, bytes);
    whorl_arena_use(&arena, &host);
    CHECK_STATUS(whorl_model_read(&host, busy, sizeof busy - 1, 3, &model), WHORL_OK, &host);
    whorl_model_free(&host, model);
    whorl_arena_make(&arena, base, bytes - 1);
    CHECK_STATUS(whorl_model_read(&host, busy, sizeof busy - 1, 3, &model), WHORL_NO_MEMORY, &host);
    CHECK(model == NULL && host.bytes_used == 0);
    host = whorl_host_default();
    host.byte_limit = bytes - 1;
    CHECK_STATUS(whorl_model_read(&host, busy, sizeof busy - 1, 3, &model), WHORL_OVER_LIMIT, &host);
    host.byte_limit = bytes;
    CHECK_STATUS(whorl_model_read(&host, busy, sizeof busy - 1, 3, &model), WHORL_OK, &host);
    whorl_model_free(&host, model);
    CHECK(host.bytes_used == 0);
    free(memory);
}

int main(void)
{
    check_begin("model");
    check_run("pairs", test_pairs);
    check_run("fields", test_fields);
    check_run("places", test_places);
    check_run("clusters", test_clusters);
    check_run("parameters", test_parameters);
    check_run("draws", test_draws);
    check_run("errors", test_errors);
    check_run("size", test_size);
    check_run("shipped", test_shipped);
    check_run("failures", test_failures);
    check_run("announced", test_announced);
    return check_end();
}
