/* Sums of Pauli strings: against Kronecker matrices, published traces and identities, laws of the algebra, edges. */
#include <time.h>

#include "check.h"
#include "dense_judge.h"
#include "reference.h"
#include "whorl_pauli.h"

static whorl_host host;

static whorl_complex number(double re, double im)
{
    return whorl_complex_of(re, im);
}

/* Room for the results of small sums. */
enum { ROOM = 5000 };
static whorl_term arena[12][ROOM];

/* The sum's matrix equals `want` to within tol, element by element. */
static void check_matrix(const whorl_sum *sum, const double *want, double tol, const char *what)
{
    uint64_t n = UINT64_C(1) << sum->sites;
    double *got = judge_dense(sum);
    CHECK_NEAR(judge_distance(n, got, want), 0.0, tol, what);
    CHECK_STATUS(whorl_sum_check(&host, sum), WHORL_OK, &host);
    free(got);
}

static whorl_sum copy_of(const whorl_sum *sum, whorl_term *terms)
{
    whorl_sum copy = *sum;
    if (sum->count > 0)
        memcpy(terms, sum->terms, (size_t)sum->count * sizeof(whorl_term));
    copy.terms = terms;
    return copy;
}

static int same_sum(const whorl_sum *a, const whorl_sum *b)
{
    return a->sites == b->sites && a->count == b->count &&
           (a->count == 0 || memcmp(a->terms, b->terms, (size_t)a->count * sizeof(whorl_term)) == 0);
}

static whorl_sum made(int32_t sites, whorl_term *terms, uint64_t count)
{
    whorl_sum sum = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_from_terms(&host, sites, terms, count, &sum), WHORL_OK, &host);
    return sum;
}

/* A product or commutator that must succeed. */
static whorl_sum product(const whorl_sum *a, const whorl_sum *b, whorl_term *terms)
{
    whorl_sum out = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_multiply(&host, a, b, terms, ROOM, &out), WHORL_OK, &host);
    return out;
}
static whorl_sum commutator(const whorl_sum *a, const whorl_sum *b, whorl_term *terms)
{
    whorl_sum out = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_commutator(&host, a, b, terms, ROOM, &out), WHORL_OK, &host);
    return out;
}
static whorl_sum total(const whorl_sum *a, double wa, const whorl_sum *b, double wb, whorl_term *terms)
{
    whorl_sum out = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_add(&host, a, number(wa, 0), b, number(wb, 0), terms, ROOM, &out), WHORL_OK, &host);
    return out;
}

/* ---- published values -------------------------------------------------------------------------------------------- */

/* p or p/q, as the tables write exact rationals. */
static double rational(const char *text)
{
    char *end;
    double value = strtod(text, &end);
    return *end == '/' ? value / strtod(end + 1, NULL) : value;
}

typedef struct bond {
    int32_t i, j;
} bond;

static uint64_t ring_bonds(int32_t n, bond *bonds)
{
    int32_t i;
    for (i = 0; i < n; i++) {
        bonds[i].i = i;
        bonds[i].j = (i + 1) % n;
    }
    return (uint64_t)n;
}

static uint64_t complete_bonds(int32_t n, bond *bonds)
{
    uint64_t count = 0;
    int32_t i, j;
    for (i = 0; i < n; i++)
        for (j = i + 1; j < n; j++) {
            bonds[count].i = i;
            bonds[count++].j = j;
        }
    return count;
}

/* The nearest-neighbour bonds of a cluster as the table lists them: "coordinates | 0-1 0-4 ... | second neighbours". */
static uint64_t table_bonds(const char *id, bond *bonds)
{
    reference_row row;
    uint64_t count = 0;
    char *at, *end;
    if (!CHECK(reference_find("00_clusters.tsv", id, &row)))
        return 0;
    at = strchr(row.field[REFERENCE_VALUE], '|');
    for (at = at == NULL ? row.field[REFERENCE_VALUE] : at + 1;; at = end) {
        long i = strtol(at, &end, 10);
        if (end == at || *end != '-')
            return count;
        bonds[count].i = (int32_t)i;
        bonds[count++].j = (int32_t)strtol(end + 1, &end, 10);
    }
}

static whorl_sum exchange_of(int32_t sites, const bond *bonds, uint64_t count, whorl_term *terms)
{
    uint64_t b, used = 0;
    for (b = 0; b < count; b++)
        used += whorl_terms_exchange(terms + used, bonds[b].i, bonds[b].j, 1.0);
    return made(sites, terms, used);
}

/* 15_traces_series.tsv, rows tr_<cluster>_<power>: 2^-N Tr H^p; all coefficients are dyadic, so equality is exact. */
static void traces(void)
{
    static const struct {
        const char *name, *cluster;
        int32_t sites;
    } cases[] = {{"ring6", NULL, 6}, {"ring8", NULL, 8},     {"triangle", NULL, 3}, {"square4", NULL, 4},
                 {"tetra", NULL, 4}, {"tri12", "tri12", 12}, {"kag12", "kag12", 12}};
    static whorl_term square_terms[ROOM], cube_terms[70000];
    size_t c;
    for (c = 0; c < sizeof cases / sizeof cases[0]; c++) {
        bond bonds[64];
        uint64_t count = cases[c].cluster != NULL              ? table_bonds(cases[c].cluster, bonds)
                         : strcmp(cases[c].name, "tetra") == 0 ? complete_bonds(4, bonds)
                                                               : ring_bonds(cases[c].sites, bonds);
        whorl_sum h = exchange_of(cases[c].sites, bonds, count, arena[0]), square, cube = {0, 0, NULL};
        int power;
        square = product(&h, &h, square_terms);
        CHECK_STATUS(whorl_sum_multiply(&host, &square, &h, cube_terms, 70000, &cube), WHORL_OK, &host);
        for (power = 2; power <= 4; power++) {
            char id[64];
            reference_row row;
            double got = power == 2   ? whorl_sum_trace(&square).re
                         : power == 3 ? whorl_sum_trace(&cube).re
                                      : whorl_sum_square_trace(&square);
            snprintf(id, sizeof id, "tr_%s_%d", cases[c].name, power);
            if (CHECK(reference_find("15_traces_series.tsv", id, &row)))
                CHECK_NEAR(got, rational(row.field[REFERENCE_VALUE]), 0.0, id);
        }
        CHECK(whorl_sum_trace(&h).re == 0.0);
        /* 15_traces_series.tsv, row tr2_gen: 2^-N Tr H^2 = (3/16) sum J^2 over different pairs */
        CHECK(whorl_sum_square_trace(&h) == 3.0 / 16.0 * (double)count);
        /* row tr3_gen: 2^-N Tr H^3 = -(3/32) N_b + (9/32) N_tri; the number of triangles is counted here */
        {
            uint64_t a, b, d, triangles = 0;
            for (a = 0; a < count; a++)
                for (b = a + 1; b < count; b++)
                    for (d = b + 1; d < count; d++) {
                        uint64_t m = UINT64_C(1) << bonds[a].i | UINT64_C(1) << bonds[a].j, e, f;
                        e = UINT64_C(1) << bonds[b].i | UINT64_C(1) << bonds[b].j;
                        f = UINT64_C(1) << bonds[d].i | UINT64_C(1) << bonds[d].j;
                        triangles += (m ^ e ^ f) == 0 && whorl_bits_count(m | e | f) == 3;
                    }
            CHECK_NEAR(whorl_sum_trace(&cube).re, -3.0 / 32.0 * (double)count + 9.0 / 32.0 * (double)triangles, 0.0,
                       "tr3_gen");
        }
    }
}

/* 15_traces_series.tsv, rows tr2_xxz and trSz2. */
static void trace_formulas(void)
{
    const double jx = 0.75, jy = -1.5, jz = 2.25;
    uint64_t used = 0;
    int32_t i;
    whorl_sum h, sz, square;
    for (i = 0; i < 7; i++)
        used += whorl_terms_exchange_xyz(arena[0] + used, i, (i + 1) % 7, jx, jy, jz);
    h = made(7, arena[0], used);
    square = product(&h, &h, arena[1]);
    CHECK_NEAR(whorl_sum_trace(&square).re, 7.0 * (jx * jx + jy * jy + jz * jz) / 16.0, 0.0, "tr2_xxz");
    CHECK_NEAR(whorl_sum_square_trace(&h), 7.0 * (jx * jx + jy * jy + jz * jz) / 16.0, 0.0, "tr2_xxz by coefficients");
    for (used = 0, i = 0; i < 64; i++)
        used += whorl_terms_spin(arena[2] + used, i, 'z', 1.0);
    sz = made(64, arena[2], used);
    square = product(&sz, &sz, arena[3]);
    CHECK_NEAR(whorl_sum_trace(&square).re, 64.0 / 4.0, 0.0, "trSz2, N = 64");
}

/*
 * 16_mappings_and_identities.tsv, rows id_pauli_prod, id_pauli_tr, id_ss_sq, id_swap, id_cyc, id_jw: term by term,
 * exactly.
 */
static void identities(void)
{
    int a, b, c;
    whorl_sum left, right, out;
    uint64_t used;
    for (a = 0; a < 3; a++)
        for (b = 0; b < 3; b++) { /* sigma_a sigma_b = delta_ab + i eps_abc sigma_c */
            whorl_term one = {0, 0, 1.0, 0.0}, two = {0, 0, 1.0, 0.0}, got;
            one.x = a != 2;
            one.z = a != 0;
            two.x = b != 2;
            two.z = b != 0;
            got = whorl_term_multiply(one, two);
            c = 3 - a - b;
            if (a == b)
                CHECK(got.x == 0 && got.z == 0 && got.re == 1.0 && got.im == 0.0);
            else
                CHECK(got.x == (uint64_t)(c != 2) && got.z == (uint64_t)(c != 0) && got.re == 0.0 &&
                      got.im == ((b - a + 3) % 3 == 1 ? 1.0 : -1.0));
        }
    { /* 2^-N Tr PQ = 1 if P = Q else 0, all pairs of strings of three sites */
        uint64_t p, q;
        for (p = 0; p < 64; p++)
            for (q = 0; q < 64; q++) {
                left = made(3, arena[0], whorl_terms_string(arena[0], p & 7, p >> 3, 1.0));
                right = made(3, arena[1], whorl_terms_string(arena[1], q & 7, q >> 3, 1.0));
                out = product(&left, &right, arena[2]);
                CHECK(whorl_sum_trace(&out).re == (p == q ? 1.0 : 0.0) && whorl_sum_trace(&out).im == 0.0);
            }
    }
    { /* (s1.s2)^2 = 3 - 2 s1.s2 with s = 2 S */
        whorl_sum ss = made(2, arena[0], whorl_terms_exchange(arena[0], 0, 1, 4.0));
        whorl_sum three = made(2, arena[1], whorl_terms_number(arena[1], 3.0));
        out = product(&ss, &ss, arena[2]);
        right = total(&three, 1.0, &ss, -2.0, arena[3]);
        CHECK(same_sum(&out, &right));
    }
    { /* SWAP = (1 + s1.s2)/2 exchanges the spins: SWAP S1 SWAP = S2 for each component; SWAP^2 = 1 */
        whorl_sum swap, one, two, step, back;
        static const char axes[] = "xyz+-";
        used = whorl_terms_exchange(arena[0], 0, 1, 2.0);
        used += whorl_terms_number(arena[0] + used, 0.5);
        swap = made(2, arena[0], used);
        for (a = 0; a < 5; a++) {
            one = made(2, arena[1], whorl_terms_spin(arena[1], 0, axes[a], 1.0));
            two = made(2, arena[2], whorl_terms_spin(arena[2], 1, axes[a], 1.0));
            step = product(&swap, &one, arena[3]);
            back = product(&step, &swap, arena[4]);
            CHECK(same_sum(&back, &two));
        }
        one = made(2, arena[1], whorl_terms_number(arena[1], 1.0));
        back = product(&swap, &swap, arena[3]);
        CHECK(same_sum(&back, &one));
    }
    { /* P_123 + P_123^-1 = (1/2)(1 + s1.s2 + s2.s3 + s3.s1), P_123 = P_12 P_23 */
        whorl_sum p12, p23, forward, backward;
        used = whorl_terms_exchange(arena[0], 0, 1, 2.0);
        used += whorl_terms_number(arena[0] + used, 0.5);
        p12 = made(3, arena[0], used);
        used = whorl_terms_exchange(arena[1], 1, 2, 2.0);
        used += whorl_terms_number(arena[1] + used, 0.5);
        p23 = made(3, arena[1], used);
        forward = product(&p12, &p23, arena[2]);
        backward = product(&p23, &p12, arena[3]);
        out = total(&forward, 1.0, &backward, 1.0, arena[4]);
        used = whorl_terms_exchange(arena[5], 0, 1, 2.0);
        used += whorl_terms_exchange(arena[5] + used, 1, 2, 2.0);
        used += whorl_terms_exchange(arena[5] + used, 2, 0, 2.0);
        used += whorl_terms_number(arena[5] + used, 0.5);
        right = made(3, arena[5], used);
        CHECK(same_sum(&out, &right));
    }
    { /* Jordan-Wigner: c_j^+ = S^+_j prod_{l<j} (-2 S^z_l), as exp(i pi n) = -2 S^z: {c_i, c_j^+} = delta */
        int32_t i, j;
        whorl_sum one = made(5, arena[8], whorl_terms_number(arena[8], 1.0));
        for (i = 0; i < 5; i++)
            for (j = 0; j < 5; j++) {
                whorl_sum create = made(5, arena[0], whorl_terms_spin(arena[0], j, '+', 1.0));
                whorl_sum destroy = made(5, arena[1], whorl_terms_spin(arena[1], i, '-', 1.0));
                whorl_sum tail_j =
                    made(5, arena[2], whorl_terms_string(arena[2], 0, whorl_bits_low(j), j % 2 ? -1.0 : 1.0));
                whorl_sum tail_i =
                    made(5, arena[3], whorl_terms_string(arena[3], 0, whorl_bits_low(i), i % 2 ? -1.0 : 1.0));
                whorl_sum cj = product(&create, &tail_j, arena[4]), ci = product(&destroy, &tail_i, arena[5]);
                whorl_sum there = product(&ci, &cj, arena[6]), back = product(&cj, &ci, arena[7]);
                out = total(&there, 1.0, &back, 1.0, arena[9]);
                CHECK(i == j ? same_sum(&out, &one) : out.count == 0);
                back = product(&cj, &cj, arena[7]);
                CHECK(back.count == 0);
            }
    }
}

/* ---- constructors against explicit spin matrices ----------------------------------------------------------------- */

/* S^axis at a site of `sites`: sigma / 2 by Kronecker products. */
static double *spin_matrix(int32_t sites, int32_t site, int axis)
{
    uint64_t k, size = UINT64_C(2) << 2 * sites;
    double *m = judge_site(sites, site, axis == 0 ? judge_x : axis == 1 ? judge_y : judge_z);
    for (k = 0; k < size; k++)
        m[k] *= 0.5;
    return m;
}

/* out += w S_i^a S_j^b by dense matrices */
static void add_pair(int32_t sites, int32_t i, int a, int32_t j, int b, double w, double *out)
{
    uint64_t n = UINT64_C(1) << sites;
    double *left = spin_matrix(sites, i, a), *right = spin_matrix(sites, j, b), *both = judge_reals(2 * n * n);
    judge_multiply(n, left, right, both);
    judge_add(n, out, w, 0.0, both);
    free(left);
    free(right);
    free(both);
}

static void constructors(void)
{
    enum { N = 4, DIM = 16 };
    static const double matrix[9] = {0.3, -1.2, 0.7, 0.45, 2.1, -0.8, 1.9, 0.05, -0.6};
    static const double d[3] = {0.4, -0.9, 1.7}, h[3] = {0.2, -1.1, 0.6}, shift[3] = {1.5, -0.5, 2.0};
    static const double g[9] = {2.1, 0.1, -0.2, 0.05, 2.3, 0.3, -0.15, 0.25, 1.9};
    static const double other_g[9] = {1.8, -0.3, 0.4, 0.2, 2.6, 0.1, 0.35, -0.05, 2.2};
    double *want = judge_reals(2 * DIM * DIM), *one;
    int32_t i, j, a, b, c, e;
    whorl_sum sum;
    for (i = 0; i < N; i++) {
        static const char axes[] = "xyz";
        for (a = 0; a < 3; a++) {
            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            one = spin_matrix(N, i, a);
            judge_add(DIM, want, 1.25, 0.0, one);
            sum = made(N, arena[0], whorl_terms_spin(arena[0], i, axes[a], 1.25));
            check_matrix(&sum, want, 0.0, "c S^a");
            free(one);
        }
        one = judge_site(N, i, judge_raise); /* S^+ takes down to up: bit 1 to bit 0 */
        sum = made(N, arena[0], whorl_terms_spin(arena[0], i, '+', 1.0));
        check_matrix(&sum, one, 0.0, "S^+");
        free(one);
        one = judge_site(N, i, judge_lower);
        sum = made(N, arena[0], whorl_terms_spin(arena[0], i, '-', 1.0));
        check_matrix(&sum, one, 0.0, "S^-");
        free(one);

        memset(want, 0, 2 * DIM * DIM * sizeof(double)); /* -h.(g S) */
        for (a = 0; a < 3; a++)
            for (b = 0; b < 3; b++) {
                one = spin_matrix(N, i, b);
                judge_add(DIM, want, -h[a] * g[3 * a + b], 0.0, one);
                free(one);
            }
        sum = made(N, arena[0], whorl_terms_field(arena[0], i, h, g));
        check_matrix(&sum, want, 4e-16, "-h.(g S)");
        memset(want, 0, 2 * DIM * DIM * sizeof(double));
        for (a = 0; a < 3; a++) {
            one = spin_matrix(N, i, a);
            judge_add(DIM, want, -h[a], 0.0, one);
            free(one);
        }
        sum = made(N, arena[0], whorl_terms_field(arena[0], i, h, NULL));
        check_matrix(&sum, want, 0.0, "-h.S");

        for (j = 0; j < N; j++) { /* i == j too: products of the true matrices */
            uint64_t used;
            double r = sqrt(1.5 * 1.5 + 0.5 * 0.5 + 2.0 * 2.0);
            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            for (a = 0; a < 3; a++)
                add_pair(N, i, a, j, a, 1.7, want);
            sum = made(N, arena[0], whorl_terms_exchange(arena[0], i, j, 1.7));
            check_matrix(&sum, want, 3e-16, "J S_i.S_j");

            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            add_pair(N, i, 0, j, 0, 0.3, want);
            add_pair(N, i, 1, j, 1, -1.4, want);
            add_pair(N, i, 2, j, 2, 2.2, want);
            sum = made(N, arena[0], whorl_terms_exchange_xyz(arena[0], i, j, 0.3, -1.4, 2.2));
            check_matrix(&sum, want, 3e-16, "XYZ exchange");

            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            for (a = 0; a < 3; a++)
                for (b = 0; b < 3; b++)
                    add_pair(N, i, a, j, b, matrix[3 * a + b], want);
            used = whorl_terms_exchange_matrix(arena[0], i, j, matrix);
            CHECK(used <= WHORL_EXCHANGE_MATRIX_TERMS);
            sum = made(N, arena[0], used);
            check_matrix(&sum, want, 1e-15, "S_i^T J S_j");

            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            for (a = 0; a < 3; a++) { /* D_a (S_b S_c - S_c S_b), (a, b, c) cyclic */
                b = (a + 1) % 3;
                c = (a + 2) % 3;
                add_pair(N, i, b, j, c, d[a], want);
                add_pair(N, i, c, j, b, -d[a], want);
            }
            used = whorl_terms_antisymmetric(arena[0], i, j, d);
            CHECK(used <= WHORL_ANTISYMMETRIC_TERMS);
            sum = made(N, arena[0], used);
            check_matrix(&sum, want, 1e-15, "D.(S_i x S_j)");
            CHECK(whorl_sum_is_hermitian(&sum) == (i != j));

            memset(want, 0, 2 * DIM * DIM * sizeof(double));
            for (a = 0; a < 3; a++)
                for (b = 0; b < 3; b++)
                    for (c = 0; c < 3; c++)
                        for (e = 0; e < 3; e++)
                            add_pair(N, i, c, j, e,
                                     0.9 * g[3 * a + c] * other_g[3 * b + e] *
                                         ((a == b) / (r * r * r) - 3.0 * shift[a] * shift[b] / pow(r, 5.0)),
                                     want);
            used = whorl_terms_dipolar(arena[0], i, j, shift, g, other_g, 0.9);
            CHECK(used <= WHORL_DIPOLAR_TERMS);
            sum = made(N, arena[0], used);
            check_matrix(&sum, want, 3e-15, "dipolar coupling");
        }
    }
    { /* without tensors, along z: the textbook (Sx Sx + Sy Sy - 2 Sz Sz) / r^3 (common practice) */
        static const double up[3] = {0.0, 0.0, 2.0};
        sum = made(2, arena[0], whorl_terms_dipolar(arena[0], 0, 1, up, NULL, NULL, 8.0));
        CHECK(sum.count == 3);
        CHECK_NEAR(whorl_sum_coefficient(&sum, 3, 0).re, 0.25, 0.0, "XX of dipoles along z");
        CHECK_NEAR(whorl_sum_coefficient(&sum, 3, 3).re, 0.25, 0.0, "YY");
        CHECK_NEAR(whorl_sum_coefficient(&sum, 0, 3).re, -0.5, 0.0, "ZZ");
    }
    free(want);
}

/* What constructors write for sites outside 0 .. 63 and other nonsense is refused by its index. */
static void refused_terms(void)
{
    static const double ones[9] = {1, 1, 1, 1, 1, 1, 1, 1, 1}, nowhere[3] = {0, 0, 0};
    static const int32_t bad[] = {-1, 64, INT32_MIN, INT32_MAX};
    size_t k;
    int which;
    for (k = 0; k < 4; k++)
        for (which = 0; which < 12; which++) {
            whorl_sum sum = {7, 7, NULL};
            uint64_t used = whorl_terms_exchange(arena[0], 0, 1, 1.0), before = used;
            whorl_term *at = arena[0] + used;
            int32_t s = bad[k];
            switch (which) {
            case 0: used += whorl_terms_spin(at, s, 'x', 1.0); break;
            case 1: used += whorl_terms_exchange(at, s, 0, 1.0); break;
            case 2: used += whorl_terms_exchange(at, 0, s, 0.0); break;
            case 3: used += whorl_terms_exchange_xyz(at, s, s, 1.0, 1.0, 1.0); break;
            case 4: used += whorl_terms_exchange_matrix(at, s, 1, ones); break;
            case 5: used += whorl_terms_antisymmetric(at, 1, s, ones); break;
            case 6: used += whorl_terms_field(at, s, ones, NULL); break;
            case 7: used += whorl_terms_dipolar(at, 0, s, ones, ones, ones, 1.0); break;
            case 8: used += whorl_terms_spin(at, 0, 'w', 1.0); break;
            case 9: used += whorl_terms_dipolar(at, 0, 1, nowhere, NULL, NULL, 1.0); break;
            case 10:
                used += whorl_terms_exchange(at, 0, 1, (double)INFINITY);
                before += 0;
                break;
            default: used += whorl_terms_number(at, (double)NAN); break;
            }
            memset(arena[1], 0, sizeof arena[1]);
            memcpy(arena[1], arena[0], (size_t)used * sizeof(whorl_term));
            CHECK_STATUS(whorl_sum_from_terms(&host, 2, arena[0], used, &sum), WHORL_NOT_FINITE, &host);
            CHECK(host.reason.index == before);
            CHECK(sum.sites == 7 && sum.count == 7 && sum.terms == NULL);
            CHECK(memcmp(arena[0], arena[1], (size_t)used * sizeof(whorl_term)) == 0);
        }
}

/* ---- algebra against dense matrices ------------------------------------------------------------------------------ */

static void algebra_dense(void)
{
    int32_t sites;
    int kind;
    for (sites = 1; sites <= 6; sites++)
        for (kind = 0; kind <= 4; kind++) {
            uint64_t n = UINT64_C(1) << sites, k, seed = (uint64_t)(100 * sites + kind);
            whorl_sum a = judge_random_sum(seed, sites, 12, kind, arena[0]);
            whorl_sum b = judge_random_sum(seed + 50, sites, 9, kind, arena[1]), out;
            double *da = judge_dense(&a), *db = judge_dense(&b), *ab = judge_reals(2 * n * n),
                   *ba = judge_reals(2 * n * n);
            double *want = judge_reals(2 * n * n);
            whorl_complex trace;
            out = product(&a, &b, arena[2]);
            judge_multiply(n, da, db, ab);
            check_matrix(&out, ab, 1e-13, "A B");
            trace = judge_trace(n, ab);
            CHECK_NEAR(whorl_sum_trace(&out).re, trace.re / (double)n, 1e-13, "2^-N Tr AB");
            CHECK_NEAR(whorl_sum_trace(&out).im, trace.im / (double)n, 1e-13, "2^-N Tr AB");
            judge_multiply(n, db, da, ba);
            judge_add(n, ab, -1.0, 0.0, ba);
            out = commutator(&a, &b, arena[2]);
            check_matrix(&out, ab, 1e-13, "[A, B]");

            judge_add(n, want, 0.75, -0.5, da);
            judge_add(n, want, -1.5, 2.0, db);
            CHECK_STATUS(whorl_sum_add(&host, &a, number(0.75, -0.5), &b, number(-1.5, 2.0), arena[2], ROOM, &out),
                         WHORL_OK, &host);
            check_matrix(&out, want, 1e-14, "wa A + wb B");

            memset(want, 0, (size_t)(2 * n * n) * sizeof(double));
            judge_add(n, want, 0.25, 3.0, da);
            out = copy_of(&a, arena[2]);
            CHECK_STATUS(whorl_sum_scale(&host, &out, number(0.25, 3.0)), WHORL_OK, &host);
            check_matrix(&out, want, 1e-14, "w A");
            CHECK_STATUS(whorl_sum_scale(&host, &out, number(0.0, 0.0)), WHORL_OK, &host);
            CHECK(out.count == 0);

            judge_adjoint(n, da, want);
            out = copy_of(&a, arena[2]);
            CHECK_STATUS(whorl_sum_adjoint(&host, &out), WHORL_OK, &host);
            check_matrix(&out, want, 0.0, "A^dagger");
            CHECK(whorl_sum_is_hermitian(&a) == (judge_distance(n, da, want) == 0.0));
            judge_multiply(n, want, da, ab);
            trace = judge_trace(n, ab);
            CHECK_NEAR(whorl_sum_square_trace(&a), trace.re / (double)n, 1e-13, "2^-N Tr A^dagger A");
            { /* real and diagonal, from the matrix */
                int real = 1, diagonal = 1;
                for (k = 0; k < n * n; k++) {
                    real &= da[2 * k + 1] == 0.0;
                    diagonal &= k % n == k / n || (da[2 * k] == 0.0 && da[2 * k + 1] == 0.0);
                }
                if (whorl_sum_is_real(&a))
                    CHECK(real);
                if (kind & JUDGE_REAL)
                    CHECK(whorl_sum_is_real(&a));
                if (!real)
                    CHECK(!whorl_sum_is_real(&a));
                CHECK(whorl_sum_is_diagonal(&a) == diagonal);
            }
            free(da);
            free(db);
            free(ab);
            free(ba);
            free(want);
        }
}

/* Matrix of the site permutation: |s> to |s'> with bit site_to[i] of s' = bit i of s. */
static double *permutation_matrix(int32_t sites, const int32_t *site_to)
{
    uint64_t n = UINT64_C(1) << sites, s;
    double *m = judge_reals(2 * n * n);
    for (s = 0; s < n; s++) {
        uint64_t moved = 0;
        int32_t i;
        for (i = 0; i < sites; i++)
            if (s >> i & 1)
                moved |= UINT64_C(1) << site_to[i];
        m[2 * (moved + n * s)] = 1.0;
    }
    return m;
}

/* out = u a u^dagger */
static void sandwich(uint64_t n, const double *u, const double *a, double *out)
{
    double *step = judge_reals(2 * n * n), *back = judge_reals(2 * n * n);
    judge_multiply(n, u, a, step);
    judge_adjoint(n, u, back);
    judge_multiply(n, step, back, out);
    free(step);
    free(back);
}

static void transformations_dense(void)
{
    int32_t sites;
    for (sites = 1; sites <= 6; sites++) {
        uint64_t n = UINT64_C(1) << sites, s, trial;
        for (trial = 0; trial < 6; trial++) {
            uint64_t seed = (uint64_t)sites * 1000 + trial, x, z;
            whorl_sum a = judge_random_sum(seed, sites, 10, 0, arena[0]), out, p;
            double *da = judge_dense(&a), *u, *want = judge_reals(2 * n * n);
            int32_t site_to[8], i;
            for (i = 0; i < sites; i++)
                site_to[i] = i;
            for (i = sites - 1; i > 0; i--) {
                int32_t other = (int32_t)(whorl_random_bits(seed, 77, (uint64_t)i) % (uint64_t)(i + 1)),
                        held = site_to[i];
                site_to[i] = site_to[other];
                site_to[other] = held;
            }
            u = permutation_matrix(sites, site_to);
            sandwich(n, u, da, want);
            out = copy_of(&a, arena[1]);
            CHECK_STATUS(whorl_sum_permute(&host, &out, site_to), WHORL_OK, &host);
            check_matrix(&out, want, 0.0, "site permutation: U A U^dagger");
            free(u);

            x = whorl_random_bits(seed, 78, 0) & (n - 1);
            z = whorl_random_bits(seed, 78, 1) & (n - 1);
            p = made(sites, arena[2], whorl_terms_string(arena[2], x, z, 1.0));
            u = judge_dense(&p);
            sandwich(n, u, da, want);
            out = copy_of(&a, arena[1]);
            CHECK_STATUS(whorl_sum_conjugate(&host, &out, x, z), WHORL_OK, &host);
            check_matrix(&out, want, 1e-15, "P A P^-1");
            free(u);

            u = judge_reals(2 * n * n); /* D^dagger A D, D|s> = i^popcount(gauge & s)|s> */
            for (s = 0; s < n; s++) {
                int quarter = whorl_bits_count(z & s) & 3;
                u[2 * (s + n * s)] = quarter == 0 ? 1.0 : quarter == 2 ? -1.0 : 0.0;
                u[2 * (s + n * s) + 1] = quarter == 1 ? -1.0 : quarter == 3 ? 1.0 : 0.0; /* D^dagger */
            }
            sandwich(n, u, da, want);
            out = copy_of(&a, arena[1]);
            CHECK_STATUS(whorl_sum_rotate(&host, &out, z), WHORL_OK, &host);
            check_matrix(&out, want, 1e-15, "D^dagger A D");
            free(u);
            free(want);
            free(da);
        }
    }
}

/* Embedding: sites 0, 1, 2 of a cluster become sites 3, 0, 2 of four; the matrix is that of the terms written there. */
static void embedding(void)
{
    static const int32_t there[3] = {3, 0, 2}, again[3] = {3, 3, 2}, outside[3] = {3, 0, 4};
    uint64_t used = whorl_terms_exchange(arena[0], 0, 1, 1.0), to = whorl_terms_exchange(arena[1], 3, 0, 1.0);
    whorl_sum small, want, kept;
    used += whorl_terms_spin(arena[0] + used, 2, '+', 0.5);
    to += whorl_terms_spin(arena[1] + to, 2, '+', 0.5);
    small = made(3, arena[0], used);
    want = made(4, arena[1], to);
    kept = copy_of(&small, arena[2]);
    CHECK_STATUS(whorl_sum_embed(&host, &small, 4, again), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 1);
    CHECK_STATUS(whorl_sum_embed(&host, &small, 4, outside), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 2);
    CHECK_STATUS(whorl_sum_embed(&host, &small, 65, there), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_embed(&host, &small, 4, NULL), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_permute(&host, &small, there), WHORL_BAD_ARGUMENT, &host);
    CHECK(same_sum(&small, &kept));
    CHECK_STATUS(whorl_sum_embed(&host, &small, 4, there), WHORL_OK, &host);
    CHECK(same_sum(&small, &want));
    CHECK(whorl_sum_support(&small) == 0xd);
}

/* ---- laws -------------------------------------------------------------------------------------------------------- */

static void laws(void)
{
    static const int32_t sizes[] = {1, 2, 5, 20, 63, 64};
    size_t k;
    for (k = 0; k < sizeof sizes / sizeof sizes[0]; k++) {
        int32_t sites = sizes[k];
        whorl_sum a = judge_random_sum(11 + k, sites, 10, 0, arena[0]),
                  b = judge_random_sum(31 + k, sites, 11, 0, arena[1]);
        whorl_sum c = judge_random_sum(51 + k, sites, 9, 0, arena[2]), ab, bc, ca, one, two, three, out;
        double scale = whorl_sum_norm_bound(&a) * whorl_sum_norm_bound(&b) * whorl_sum_norm_bound(&c);
        /* Jacobi: [A, [B, C]] + [B, [C, A]] + [C, [A, B]] = 0 */
        bc = commutator(&b, &c, arena[3]);
        ca = commutator(&c, &a, arena[4]);
        ab = commutator(&a, &b, arena[5]);
        one = commutator(&a, &bc, arena[6]);
        two = commutator(&b, &ca, arena[7]);
        three = commutator(&c, &ab, arena[8]);
        out = total(&one, 1.0, &two, 1.0, arena[9]);
        out = total(&out, 1.0, &three, 1.0, arena[10]);
        CHECK_NEAR(whorl_sum_norm_bound(&out), 0.0, 1e-14 * scale, "Jacobi");
        /* A (B C) = (A B) C, and Tr ABC = Tr CAB */
        bc = product(&b, &c, arena[3]);
        ab = product(&a, &b, arena[5]);
        one = product(&a, &bc, arena[6]);
        two = product(&ab, &c, arena[7]);
        three = product(&c, &ab, arena[8]);
        CHECK_NEAR(whorl_sum_distance(&one, &two), 0.0, 1e-14 * scale, "associativity");
        CHECK_NEAR(whorl_sum_trace(&one).re, whorl_sum_trace(&three).re, 1e-14 * scale, "Tr ABC = Tr CAB");
        CHECK_NEAR(whorl_sum_trace(&one).im, whorl_sum_trace(&three).im, 1e-14 * scale, "Tr ABC = Tr CAB");
        /* (A B)^dagger = B^dagger A^dagger, bit for bit but for the order of additions */
        CHECK_STATUS(whorl_sum_adjoint(&host, &ab), WHORL_OK, &host);
        one = copy_of(&a, arena[6]);
        two = copy_of(&b, arena[7]);
        CHECK_STATUS(whorl_sum_adjoint(&host, &one), WHORL_OK, &host);
        CHECK_STATUS(whorl_sum_adjoint(&host, &two), WHORL_OK, &host);
        out = product(&two, &one, arena[9]);
        CHECK_NEAR(whorl_sum_distance(&ab, &out), 0.0, 1e-15 * scale, "(AB)^dagger = B^dagger A^dagger");
        /* A - A = 0, [A, A] = 0, distance 0 */
        out = total(&a, 1.0, &a, -1.0, arena[9]);
        CHECK(out.count == 0 && whorl_sum_distance(&a, &a) == 0.0);
        out = commutator(&a, &a, arena[9]);
        CHECK_NEAR(whorl_sum_norm_bound(&out), 0.0, 1e-15 * scale, "[A, A] = 0");
        /* (A + A^dagger) is Hermitian; adjoint twice is nothing */
        one = copy_of(&a, arena[6]);
        CHECK_STATUS(whorl_sum_adjoint(&host, &one), WHORL_OK, &host);
        out = total(&a, 1.0, &one, 1.0, arena[9]);
        CHECK(whorl_sum_is_hermitian(&out) && !whorl_sum_is_hermitian(&a));
        CHECK_STATUS(whorl_sum_adjoint(&host, &one), WHORL_OK, &host);
        CHECK(same_sum(&one, &a));
        /* bounds: |2^-N Tr A| <= sqrt(2^-N Tr A^dagger A) <= sum |c| */
        CHECK(whorl_sum_square_trace(&a) <= whorl_sum_norm_bound(&a) * whorl_sum_norm_bound(&a));
        /* four rotations of all sites by 90 degrees are nothing, two are the conjugation by Z..Z */
        one = copy_of(&a, arena[6]);
        two = copy_of(&a, arena[7]);
        CHECK_STATUS(whorl_sum_rotate(&host, &one, whorl_bits_low(sites)), WHORL_OK, &host);
        CHECK_STATUS(whorl_sum_rotate(&host, &one, whorl_bits_low(sites)), WHORL_OK, &host);
        CHECK_STATUS(whorl_sum_conjugate(&host, &two, 0, whorl_bits_low(sites)), WHORL_OK, &host);
        CHECK(same_sum(&one, &two));
        CHECK_STATUS(whorl_sum_conjugate(&host, &two, 0, whorl_bits_low(sites)), WHORL_OK, &host);
        CHECK(same_sum(&two, &a));
    }
}

/* [H, S^+] = 0 and [H, S^z] = 0 exactly for exchange of any couplings: no rounding is left over. */
static void exact_symmetry(void)
{
    uint64_t used = 0, up = 0;
    int32_t i, j;
    whorl_sum h, raise, out;
    for (i = 0; i < 12; i++) {
        for (j = i + 1; j < 12; j++)
            used +=
                whorl_terms_exchange(arena[0] + used, i, j, whorl_random_normal(5, 0, (uint64_t)(12 * i + j)) / 3.0);
        up += whorl_terms_spin(arena[1] + up, i, '+', 1.0);
    }
    h = made(12, arena[0], used);
    raise = made(12, arena[1], up);
    out = commutator(&h, &raise, arena[2]);
    CHECK(out.count == 0);
    h.terms[0].re *= 1.0 + 1e-15;
    out = commutator(&h, &raise, arena[2]);
    CHECK(out.count > 0);
}

/* ---- real gauge -------------------------------------------------------------------------------------------------- */

static void real_gauges(void)
{
    uint64_t gauge = 5, used = 0, trial;
    int32_t i;
    whorl_sum sum, out;
    /* a chain with D along z is made real by rotating every other bond's end: sum (XX + YY) + D (XY - YX) is not */
    static const double along_z[3] = {0.0, 0.0, 0.7}, along_y[3] = {0.0, 0.7, 0.0};
    for (i = 0; i + 1 < 8; i++)
        used += whorl_terms_antisymmetric(arena[0] + used, i, i + 1, along_z);
    sum = made(8, arena[0], used);
    CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
    CHECK(gauge != WHORL_NONE && gauge != 0);
    out = copy_of(&sum, arena[1]);
    CHECK_STATUS(whorl_sum_rotate(&host, &out, gauge), WHORL_OK, &host);
    CHECK(!whorl_sum_is_real(&sum) && whorl_sum_is_real(&out) && whorl_sum_is_hermitian(&out));
    for (i = 0; i + 1 < 8; i++)
        used += whorl_terms_exchange(arena[0] + sum.count + (uint64_t)(3 * i), i, i + 1, 1.0);
    sum = made(8, arena[0], sum.count + 21);
    CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
    CHECK(gauge == WHORL_NONE);
    /* D along y is real as it stands */
    used = whorl_terms_exchange(arena[0], 0, 1, 1.0);
    used += whorl_terms_antisymmetric(arena[0] + used, 0, 1, along_y);
    sum = made(2, arena[0], used);
    CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
    CHECK(gauge == 0 && whorl_sum_is_real(&sum));
    /* a real sum hidden behind a random rotation is found again, for sites up to 64; one term more in the way is not */
    for (trial = 0; trial < 60; trial++) {
        int32_t sites = 1 + (int32_t)(trial * 63 / 59);
        uint64_t hidden = whorl_random_bits(9, trial, 0) & whorl_bits_low(sites);
        sum = judge_random_sum(trial, sites, 20, JUDGE_REAL | (trial % 2 ? JUDGE_HERMITIAN : 0), arena[0]);
        CHECK_STATUS(whorl_sum_rotate(&host, &sum, hidden), WHORL_OK, &host);
        CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
        if (!CHECK(gauge != WHORL_NONE))
            continue;
        CHECK(whorl_sum_is_real(&sum) == (gauge == 0));
        CHECK_STATUS(whorl_sum_rotate(&host, &sum, gauge), WHORL_OK, &host);
        CHECK(whorl_sum_is_real(&sum));
        if (sum.count > 0 && (sum.terms[0].x != 0 || sum.terms[0].re != 0.0)) {
            sum.terms[0].im = sum.terms[0].re = 1.0;
            CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
            CHECK(gauge == WHORL_NONE);
        }
    }
    /* where none is reported none exists: all 2^N masks tried */
    for (trial = 0; trial < 200; trial++) {
        int32_t sites = 1 + (int32_t)(trial % 5);
        uint64_t g, some = WHORL_NONE;
        sum = judge_random_sum(900 + trial, sites, 2 + trial % 4, JUDGE_HERMITIAN, arena[0]);
        for (g = 0; g < UINT64_C(1) << sites && some == WHORL_NONE; g++) {
            out = copy_of(&sum, arena[1]);
            CHECK_STATUS(whorl_sum_rotate(&host, &out, g), WHORL_OK, &host);
            if (whorl_sum_is_real(&out))
                some = g;
        }
        CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &gauge), WHORL_OK, &host);
        CHECK((some == WHORL_NONE) == (gauge == WHORL_NONE));
    }
}

/* ---- tidying ----------------------------------------------------------------------------------------------------- */

static void order_independence(void)
{
    enum { COUNT = 400 };
    static whorl_term first[COUNT], again[COUNT];
    whorl_sum reference, sum;
    uint64_t k, trial;
    for (k = 0; k < COUNT; k++) { /* few strings, many repeats, rounding in every addition */
        first[k].x = whorl_random_bits(3, 0, k) & 3;
        first[k].z = whorl_random_bits(3, 1, k) & 3;
        first[k].re = whorl_random_normal(3, 2, k) * (k % 7 == 0 ? 1e10 : 1.0);
        first[k].im = k % 5 == 0 ? -0.0 : whorl_random_normal(3, 3, k);
    }
    memcpy(again, first, sizeof again);
    reference = made(2, again, COUNT);
    CHECK(reference.count == 16);
    for (trial = 0; trial < 50; trial++) {
        static whorl_term mixed[COUNT];
        memcpy(mixed, first, sizeof mixed);
        for (k = COUNT - 1; k > 0; k--) {
            uint64_t other = whorl_random_bits(4, trial, k) % (k + 1);
            whorl_term held = mixed[k];
            mixed[k] = mixed[other];
            mixed[other] = held;
        }
        sum = made(2, mixed, COUNT);
        CHECK(same_sum(&sum, &reference));
        CHECK_STATUS(whorl_sum_tidy(&host, &sum), WHORL_OK, &host); /* tidying twice is tidying once */
        CHECK(same_sum(&sum, &reference));
    }
}

static int string_order(const void *a, const void *b)
{
    const whorl_term *left = (const whorl_term *)a, *right = (const whorl_term *)b;
    if (left->x != right->x)
        return left->x < right->x ? -1 : 1;
    return (left->z > right->z) - (left->z < right->z);
}

/* The sort against the C library's, on orders that are hard for it. */
static void sort_patterns(void)
{
    enum { MOST = 3000 };
    static whorl_term terms[MOST], want[MOST];
    static const uint64_t sizes[] = {2, 3, 16, 17, 18, 33, 100, 1000, 2999, 3000};
    size_t s;
    int pattern;
    for (s = 0; s < sizeof sizes / sizeof sizes[0]; s++)
        for (pattern = 0; pattern < 8; pattern++) {
            uint64_t n = sizes[s], k;
            whorl_sum sum;
            for (k = 0; k < n; k++) { /* strings all different: the high bits make the pattern, the low ones count */
                uint64_t high = pattern == 0   ? k                                        /* ascending */
                                : pattern == 1 ? n - k                                    /* descending */
                                : pattern == 2 ? (k < n / 2 ? k : n - k)                  /* up and down */
                                : pattern == 3 ? (k < n / 2 ? n - k : k)                  /* down and up */
                                : pattern == 4 ? 0                                        /* constant */
                                : pattern == 5 ? k % 7                                    /* saw */
                                : pattern == 6 ? whorl_random_bits(1, s, k) & 1           /* two values */
                                               : whorl_random_bits(1, s, k) & 0xffffffff; /* random */
                terms[k].x = high;
                terms[k].z = pattern == 4 ? 5 : whorl_random_bits(2, s, k) & 0xffffff;
                terms[k].re = 1.0 + (double)k;
                terms[k].im = 0.0;
            }
            if (pattern == 4) { /* one string, merged: the sum of the integers is exact */
                sum = made(64, terms, n);
                CHECK(sum.count == 1 && sum.terms[0].re == (double)n * (double)(n + 1) / 2.0);
                continue;
            }
            memcpy(want, terms, sizeof want);
            qsort(want, (size_t)n, sizeof(whorl_term), string_order);
            for (k = 1; k < n && string_order(want + k - 1, want + k) < 0; k++)
                ;
            sum = made(64, terms, n);
            if (k == n) /* no string drawn twice */
                CHECK(sum.count == n && memcmp(terms, want, (size_t)n * sizeof(whorl_term)) == 0);
            CHECK_STATUS(whorl_sum_check(&host, &sum), WHORL_OK, &host);
        }
}

static void tidy_edges(void)
{
    whorl_sum sum = {0, 0, NULL};
    whorl_term two[2] = {{1, 0, 0.5, 0.0}, {1, 0, -0.5, 0.0}}, late;
    int32_t sites;
    uint64_t k;
    CHECK_STATUS(whorl_sum_from_terms(&host, 3, NULL, 0, &sum), WHORL_OK, &host);
    CHECK(sum.sites == 3 && sum.count == 0);
    CHECK(whorl_sum_trace(&sum).re == 0.0 && whorl_sum_square_trace(&sum) == 0.0 && whorl_sum_norm_bound(&sum) == 0.0);
    CHECK(whorl_sum_is_hermitian(&sum) && whorl_sum_is_real(&sum) && whorl_sum_is_diagonal(&sum));
    CHECK(whorl_sum_find(&sum, 0, 0) == WHORL_NONE && whorl_sum_support(&sum) == 0);
    CHECK_STATUS(whorl_sum_adjoint(&host, &sum), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_scale(&host, &sum, number(2, 0)), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_rotate(&host, &sum, 5), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_real_gauge(&host, &sum, &k), WHORL_OK, &host);
    CHECK(k == 0);
    CHECK_STATUS(whorl_sum_multiply(&host, &sum, &sum, NULL, 0, &sum), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_add(&host, &sum, number(1, 0), &sum, number(1, 0), NULL, 0, &sum), WHORL_OK, &host);
    CHECK(sum.count == 0 && sum.sites == 3);

    sum = made(1, two, 2);
    CHECK(sum.count == 0); /* cancels */
    for (sites = -1; sites <= 66; sites++) {
        int good = sites >= 1 && sites <= 64;
        uint64_t used = whorl_terms_number(arena[0], 1.0);
        CHECK_STATUS(whorl_sum_from_terms(&host, sites, arena[0], used, &sum), good ? WHORL_OK : WHORL_BAD_ARGUMENT,
                     &host);
    }
    for (sites = 1; sites <= 64; sites++) { /* the last site is in, the next one out */
        uint64_t used = whorl_terms_exchange(arena[0], 0, sites - 1, 1.0);
        CHECK_STATUS(whorl_sum_from_terms(&host, sites, arena[0], used, &sum), WHORL_OK, &host);
        if (sites == 64)
            continue;
        used = whorl_terms_number(arena[0], 1.0);
        used += whorl_terms_spin(arena[0] + used, sites, 'z', 1.0);
        CHECK_STATUS(whorl_sum_from_terms(&host, sites, arena[0], used, &sum), WHORL_BAD_ARGUMENT, &host);
        CHECK(host.reason.index == 1);
    }
    CHECK_STATUS(whorl_sum_from_terms(&host, 3, NULL, 4, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_from_terms(&host, 3, arena[0], 1, NULL), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_check(&host, NULL), WHORL_BAD_ARGUMENT, &host);

    /* untidy sums are refused with the index */
    k = whorl_terms_exchange(arena[0], 0, 1, 1.0);
    sum = made(2, arena[0], k);
    late = sum.terms[0];
    sum.terms[0] = sum.terms[1];
    sum.terms[1] = late;
    CHECK_STATUS(whorl_sum_check(&host, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 1);
    CHECK_STATUS(whorl_sum_adjoint(&host, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_tidy(&host, &sum), WHORL_OK, &host);
    sum.terms[2] = sum.terms[1];
    CHECK_STATUS(whorl_sum_check(&host, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 2);
    sum.terms[2].re = sum.terms[2].im = 0.0;
    sum.terms[2].x = 3;
    sum.terms[2].z = 3;
    CHECK_STATUS(whorl_sum_check(&host, &sum), WHORL_BAD_ARGUMENT, &host);
}

/* Infinity is never returned: sums of equal strings, scaling, adding and multiplying overflow with a status. */
static void overflow(void)
{
    whorl_term big[2] = {{1, 0, 1e308, 0.0}, {1, 0, 1e308, 0.0}}, left[1] = {{1, 0, 1e200, 1e200}},
               right[1] = {{0, 1, 1e200, 0}};
    whorl_sum sum = {9, 9, NULL}, a, b, out = {9, 9, NULL};
    CHECK_STATUS(whorl_sum_from_terms(&host, 1, big, 2, &sum), WHORL_NOT_FINITE, &host);
    CHECK(sum.sites == 9 && big[0].re == 1e308 && big[1].re == 1e308);
    a = made(1, left, 1);
    b = made(1, right, 1);
    CHECK_STATUS(whorl_sum_multiply(&host, &a, &b, arena[0], ROOM, &out), WHORL_NOT_FINITE, &host);
    CHECK_STATUS(whorl_sum_commutator(&host, &a, &b, arena[0], ROOM, &out), WHORL_NOT_FINITE, &host);
    CHECK_STATUS(whorl_sum_add(&host, &a, number(1e300, 0), &b, number(1, 0), arena[0], ROOM, &out), WHORL_NOT_FINITE,
                 &host);
    CHECK_STATUS(whorl_sum_add(&host, &a, number((double)NAN, 0), &b, number(1, 0), arena[0], ROOM, &out),
                 WHORL_NOT_FINITE, &host);
    CHECK_STATUS(whorl_sum_scale(&host, &a, number(1e300, 0)), WHORL_NOT_FINITE, &host);
    CHECK_STATUS(whorl_sum_scale(&host, &a, number(0, (double)INFINITY)), WHORL_NOT_FINITE, &host);
    CHECK(a.count == 1 && left[0].re == 1e200 && out.sites == 9);
    CHECK(whorl_sum_norm_bound(&a) > 1.414e200 && whorl_sum_norm_bound(&a) < 1.415e200);
    CHECK_STATUS(whorl_sum_scale(&host, &a, number(1e-300, 0)), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_scale(&host, &a, number(1e-300, 0)), WHORL_OK, &host);
    CHECK(a.count == 0); /* underflow to zero drops the term */
}

/* ---- room, overlap, memory --------------------------------------------------------------------------------------- */

static void room_and_overlap(void)
{
    whorl_sum a = judge_random_sum(1, 6, 20, 0, arena[0]), b = judge_random_sum(2, 6, 20, 0, arena[1]);
    whorl_sum out = {9, 9, NULL}, full, other = judge_random_sum(2, 7, 20, 0, arena[2]);
    uint64_t need;
    int which;
    for (which = 0; which < 3; which++) {
        whorl_status status;
        uint64_t room;
        for (room = 0; room < 3; room++) {
            memset(arena[3], 0x5a, sizeof arena[3]);
            status = which == 0 ? whorl_sum_multiply(&host, &a, &b, room ? arena[3] : NULL, room, &out)
                     : which == 1
                         ? whorl_sum_commutator(&host, &a, &b, room ? arena[3] : NULL, room, &out)
                         : whorl_sum_add(&host, &a, number(1, 0), &b, number(1, 0), room ? arena[3] : NULL, room, &out);
            CHECK_STATUS(status, WHORL_NO_ROOM, &host);
            CHECK(out.sites == 9 && out.terms == NULL && ((unsigned char *)arena[3])[0] == 0x5a);
        }
        need = host.reason.index;
        memset(&full, 0, sizeof full);
        status = which == 0   ? whorl_sum_multiply(&host, &a, &b, arena[3], need, &full)
                 : which == 1 ? whorl_sum_commutator(&host, &a, &b, arena[3], need, &full)
                              : whorl_sum_add(&host, &a, number(1, 0), &b, number(1, 0), arena[3], need, &full);
        CHECK_STATUS(status, WHORL_OK, &host);
        CHECK(full.count == need && full.terms == arena[3]);
        status = which == 0   ? whorl_sum_multiply(&host, &a, &b, arena[4], need - 1, &out)
                 : which == 1 ? whorl_sum_commutator(&host, &a, &b, arena[4], need - 1, &out)
                              : whorl_sum_add(&host, &a, number(1, 0), &b, number(1, 0), arena[4], need - 1, &out);
        CHECK_STATUS(status, WHORL_NO_ROOM, &host);
        /* overlap at either end, and unequal sites */
        status = which == 0   ? whorl_sum_multiply(&host, &a, &b, arena[0] + a.count - 1, ROOM, &out)
                 : which == 1 ? whorl_sum_commutator(&host, &b, &a, arena[0], ROOM, &out)
                              : whorl_sum_add(&host, &a, number(1, 0), &b, number(1, 0), b.terms + 1, 1, &out);
        CHECK_STATUS(status, WHORL_BAD_ARGUMENT, &host);
        status = which == 0   ? whorl_sum_multiply(&host, &a, &other, arena[4], ROOM, &out)
                 : which == 1 ? whorl_sum_commutator(&host, &a, &other, arena[4], ROOM, &out)
                              : whorl_sum_add(&host, &a, number(1, 0), &other, number(1, 0), arena[4], ROOM, &out);
        CHECK_STATUS(status, WHORL_BAD_ARGUMENT, &host);
        CHECK(out.sites == 9 && out.count == 9);
    }
    { /* the structs may be the same: a = a b */
        whorl_sum same = a;
        CHECK_STATUS(whorl_sum_multiply(&host, &same, &b, arena[4], ROOM, &same), WHORL_OK, &host);
        full = product(&a, &b, arena[5]);
        CHECK(same_sum(&same, &full));
    }
}

/* Masks beyond the sites are refused. */
static void mask_arguments(void)
{
    whorl_sum a = judge_random_sum(1, 6, 20, 0, arena[0]), kept = copy_of(&a, arena[1]);
    uint64_t gauge = 3;
    CHECK_STATUS(whorl_sum_conjugate(&host, &a, 64, 0), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_conjugate(&host, &a, 0, UINT64_C(1) << 63), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_rotate(&host, &a, 65), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_real_gauge(&host, &a, NULL), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_multiply(&host, &a, &a, arena[2], ROOM, NULL), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_multiply(&host, &a, &a, NULL, ROOM, &a), WHORL_BAD_ARGUMENT, &host);
    a.terms[0].re = (double)NAN;
    CHECK_STATUS(whorl_sum_real_gauge(&host, &a, &gauge), WHORL_NOT_FINITE, &host);
    CHECK(host.reason.index == 0 && gauge == 3);
    a.terms[0] = kept.terms[0];
    CHECK(same_sum(&a, &kept));
}

typedef struct failing {
    whorl_sum a, b;
    int commutator;
} failing;

static whorl_status failing_product(whorl_host *fail_host, void *argument)
{
    failing *f = (failing *)argument;
    whorl_sum out = {9, 9, NULL};
    whorl_status status;
    memset(arena[3], 0x5a, 64);
    status = f->commutator ? whorl_sum_commutator(fail_host, &f->a, &f->b, arena[3], ROOM, &out)
                           : whorl_sum_multiply(fail_host, &f->a, &f->b, arena[3], ROOM, &out);
    if (status == WHORL_NO_MEMORY)
        CHECK(((unsigned char *)arena[3])[0] == 0x5a);
    if (status != WHORL_OK)
        CHECK(out.sites == 9 && out.count == 9 && out.terms == NULL);
    return status;
}

static void failures(void)
{
    failing f;
    whorl_host limited = whorl_host_default();
    whorl_sum out = {0, 0, NULL};
    uint64_t announced;
    f.a = judge_random_sum(1, 9, 30, 0, arena[0]);
    f.b = judge_random_sum(2, 9, 30, 0, arena[1]);
    for (f.commutator = 0; f.commutator < 2; f.commutator++) {
        check_every_allocation(failing_product, &f, WHORL_OK);
        check_every_poll(failing_product, &f, WHORL_OK);
    }
    announced = whorl_sum_product_bytes(&f.a, &f.b, ROOM);
    limited.byte_limit = announced;
    CHECK_STATUS(whorl_sum_multiply(&limited, &f.a, &f.b, arena[3], ROOM, &out), WHORL_OK, &limited);
    CHECK(limited.bytes_peak == announced && limited.bytes_used == 0);
    limited.byte_limit = announced - 1;
    CHECK_STATUS(whorl_sum_multiply(&limited, &f.a, &f.b, arena[3], ROOM, &out), WHORL_OVER_LIMIT, &limited);
    { /* an arena of just that size */
        whorl_arena arena_memory;
        whorl_host lean = whorl_host_default();
        char *memory = (char *)malloc((size_t)announced + 64);
        whorl_arena_make(&arena_memory, memory + ((64 - ((uintptr_t)memory & 63)) & 63), announced);
        whorl_arena_use(&arena_memory, &lean);
        CHECK_STATUS(whorl_sum_multiply(&lean, &f.a, &f.b, arena[3], ROOM, &out), WHORL_OK, &lean);
        free(memory);
    }
}

/* ---- many terms -------------------------------------------------------------------------------------------------- */

static double seconds(void)
{
    return (double)clock() / CLOCKS_PER_SEC;
}

static void million_terms(void)
{
    const uint64_t count = 1000000;
    whorl_term *terms = (whorl_term *)judge_memory(count, sizeof(whorl_term));
    whorl_sum sum = {0, 0, NULL};
    uint64_t k;
    double start, middle, end;
    for (k = 0; k < count; k++) {
        terms[k].x = whorl_random_bits(1, 0, k) & UINT64_C(0xff000000000000ff);
        terms[k].z = whorl_random_bits(1, 1, k) & 15;
        terms[k].re = whorl_random_normal(1, 2, k);
        terms[k].im = 0.0;
    }
    start = seconds();
    CHECK_STATUS(whorl_sum_from_terms(&host, 64, terms, count, &sum), WHORL_OK, &host);
    middle = seconds();
    CHECK(sum.count > 600000 && sum.count < count);
    CHECK_STATUS(whorl_sum_check(&host, &sum), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_tidy(&host, &sum), WHORL_OK, &host);
    end = seconds();
    printf("  tidy of 10^6 terms: %.2f s, again %.3f s\n", middle - start, end - middle);
    for (k = 0; k < sum.count; k += 997)
        CHECK(whorl_sum_find(&sum, sum.terms[k].x, sum.terms[k].z) == k);
    free(terms);
}

/* A commutator of two sums of 2000 terms: more pairs than the table holds strings; the classes give the same bits. */
static void many_products(void)
{
    enum { COUNT = 1700 };
    whorl_term *ta = (whorl_term *)judge_memory(COUNT, sizeof(whorl_term)),
               *tb = (whorl_term *)judge_memory(COUNT, sizeof(whorl_term));
    whorl_term *wide, *lean, *again;
    whorl_sum a = {0, 0, NULL}, b = {0, 0, NULL}, out = {0, 0, NULL}, split = {0, 0, NULL};
    const uint64_t pairs = (uint64_t)COUNT * COUNT;
    uint64_t k, need;
    double start, middle;
    for (k = 0; k < COUNT; k++) {
        ta[k] = tb[k] = (whorl_term){0, 0, 0.0, 0.0};
        ta[k].x = whorl_random_bits(2, 0, k) >> 1; /* random strings of 63 sites: nearly all products differ */
        ta[k].z = whorl_random_bits(2, 1, k) >> 1;
        tb[k].x = whorl_random_bits(2, 2, k) >> 1;
        tb[k].z = whorl_random_bits(2, 3, k) >> 1;
        ta[k].re = whorl_random_normal(2, 4, k);
        tb[k].re = whorl_random_normal(2, 5, k);
    }
    a = made(63, ta, COUNT);
    b = made(63, tb, COUNT);
    wide = (whorl_term *)judge_memory(pairs, sizeof(whorl_term));
    start = seconds();
    CHECK_STATUS(whorl_sum_commutator(&host, &a, &b, wide, pairs, &out), WHORL_OK, &host);
    middle = seconds();
    CHECK(out.count > 1 << 20);
    CHECK_STATUS(whorl_sum_commutator(&host, &a, &b, NULL, 0, &split), WHORL_NO_ROOM, &host);
    need = host.reason.index;
    CHECK(need == out.count);
    printf("  commutator with %lu terms of 2.9 10^6 pairs: %.2f s; asking for the room: %.2f s\n", (unsigned long)need,
           middle - start, seconds() - middle);
    lean = (whorl_term *)judge_memory(need, sizeof(whorl_term));
    again = (whorl_term *)judge_memory(need, sizeof(whorl_term));
    CHECK_STATUS(whorl_sum_commutator(&host, &a, &b, lean, need, &split), WHORL_OK, &host);
    CHECK(same_sum(&split, &out));
    free(again);
    free(lean);
    free(wide);
    free(ta);
    free(tb);
}

/* A product whose strings do not fit the table of 2^20 but mostly cancel: (A B - B A)(..) in few terms of room. */
static void classes_write(void)
{
    enum { COUNT = 1200 };
    whorl_term *ta = (whorl_term *)judge_memory(2 * COUNT, sizeof(whorl_term)),
               *tb = (whorl_term *)judge_memory(COUNT, sizeof(whorl_term));
    whorl_sum a, b, out = {0, 0, NULL}, want = {0, 0, NULL};
    whorl_term *room = (whorl_term *)judge_memory(8, sizeof(whorl_term));
    uint64_t k;
    /* A = (1 + Z_63) C, B = (1 - Z_63) D + X_63-free part: all products of the first cancel to zero, one term stays */
    for (k = 0; k < COUNT; k++) {
        ta[k].x = whorl_random_bits(6, 0, k) >> 1;
        ta[k].z = whorl_random_bits(6, 1, k) >> 1;
        ta[k].re = 1.0;
        ta[COUNT + k] = ta[k];
        ta[COUNT + k].z |= UINT64_C(1) << 63;
    }
    for (k = 0; k < COUNT / 2; k++) {
        tb[2 * k].x = whorl_random_bits(6, 2, k) >> 1;
        tb[2 * k].z = whorl_random_bits(6, 3, k) >> 1;
        tb[2 * k].re = 1.0;
        tb[2 * k + 1] = tb[2 * k];
        tb[2 * k + 1].z |= UINT64_C(1) << 63;
        tb[2 * k + 1].re = -1.0;
    }
    a = made(64, ta, 2 * COUNT);
    b = made(64, tb, COUNT);
    CHECK_STATUS(whorl_sum_multiply(&host, &a, &b, room, 8, &out), WHORL_OK, &host);
    CHECK(out.count == 0);
    /* B without its first term: that term's products with A stay, 2 COUNT of them; more than 8, exactly counted */
    b.terms[0] = b.terms[1];
    b.terms++;
    b.count--;
    CHECK_STATUS(whorl_sum_multiply(&host, &a, &b, room, 8, &out), WHORL_NO_ROOM, &host);
    CHECK(host.reason.index == 2 * COUNT);
    {
        whorl_term *many = (whorl_term *)judge_memory(2 * COUNT, sizeof(whorl_term)),
                   *one = (whorl_term *)judge_memory(2 * COUNT, sizeof(whorl_term));
        whorl_sum lone = b;
        uint64_t at;
        CHECK_STATUS(whorl_sum_multiply(&host, &a, &b, many, 2 * COUNT, &out), WHORL_OK, &host);
        CHECK_STATUS(whorl_sum_check(&host, &out), WHORL_OK, &host);
        /* the partner of the term that was taken away */
        for (at = 0; at < b.count; at++) {
            uint64_t other = whorl_sum_find(&b, b.terms[at].x, b.terms[at].z ^ UINT64_C(1) << 63);
            if (other == WHORL_NONE)
                break;
        }
        lone.terms = b.terms + at;
        lone.count = 1;
        CHECK_STATUS(whorl_sum_multiply(&host, &a, &lone, one, 2 * COUNT, &want), WHORL_OK, &host);
        CHECK(same_sum(&out, &want));
        free(many);
        free(one);
    }
    free(room);
    free(ta);
    free(tb);
}

/* Tidying and products of many terms can be cancelled, and nothing is lost: tidying again gives the same bits. */
static void cancelled_sort(void)
{
    const uint64_t count = 600000;
    whorl_term *terms = (whorl_term *)judge_memory(count, sizeof(whorl_term)),
               *whole = (whorl_term *)judge_memory(count, sizeof(whorl_term));
    whorl_sum want, sum;
    check_polls polls = {0, 0};
    uint64_t k;
    for (k = 0; k < count; k++) {
        terms[k].x = whorl_random_bits(8, 0, k);
        terms[k].z = whorl_random_bits(8, 1, k);
        terms[k].re = 1.0;
    }
    memcpy(whole, terms, (size_t)count * sizeof(whorl_term));
    want = made(64, whole, count);
    for (k = 1; k < 100; k++) {
        whorl_host stop = whorl_host_default();
        whorl_status status;
        stop.poll = check_poll;
        stop.poll_context = &polls;
        polls.calls = 0;
        polls.cancel_at = k;
        sum.count = 77;
        status = whorl_sum_from_terms(&stop, 64, terms, count, &sum);
        if (status == WHORL_OK)
            break;
        CHECK_STATUS(status, WHORL_CANCELLED, &stop);
        CHECK(sum.count == 77);
    }
    CHECK(k > 1);
    CHECK(same_sum(&sum, &want));
    free(terms);
    free(whole);
}

int main(void)
{
    host = whorl_host_default();
    check_begin("pauli");
    check_run("traces_reference", traces);
    check_run("trace_formulas_reference", trace_formulas);
    check_run("identities_reference", identities);
    check_run("constructors", constructors);
    check_run("refused_terms", refused_terms);
    check_run("algebra_dense", algebra_dense);
    check_run("transformations_dense", transformations_dense);
    check_run("embedding", embedding);
    check_run("laws", laws);
    check_run("exact_symmetry", exact_symmetry);
    check_run("real_gauges", real_gauges);
    check_run("order_independence", order_independence);
    check_run("sort_patterns", sort_patterns);
    check_run("tidy_edges", tidy_edges);
    check_run("overflow", overflow);
    check_run("room_and_overlap", room_and_overlap);
    check_run("mask_arguments", mask_arguments);
    check_run("failures", failures);
    check_run("million_terms", million_terms);
    check_run("many_products", many_products);
    check_run("classes_write", classes_write);
    check_run("cancelled_sort", cancelled_sort);
    return check_end();
}
