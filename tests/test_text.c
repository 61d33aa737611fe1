/* test_text.c: expressions against sums made by constructors, exact round trips, errors and their places. */
#include "check.h"
#include "whorl_text.h"

#include <locale.h>

enum { ROOM = 4096 };

/* ---- helpers ----------------------------------------------------------------------------------------------------- */

static const whorl_name_value known[4] = {{"J", 1.25}, {"D", -0.375}, {"gap", 3.0}, {"a_1", 0.1}};

static whorl_status read_text(whorl_host *host, const char *text, int32_t sites, whorl_term *terms, whorl_sum *sum)
{
    return whorl_sum_read(host, text, strlen(text), sites, known, 4, terms, ROOM, sum);
}

/* The text must be this list of terms, coefficient by coefficient up to `tolerance`. */
static void check_is(const char *text, int32_t sites, whorl_term *terms, uint64_t count, double tolerance)
{
    static whorl_term room[ROOM];
    whorl_host host = whorl_host_default();
    whorl_sum want, got;
    if (!CHECK_STATUS(whorl_sum_from_terms(&host, sites, terms, count, &want), WHORL_OK, &host) ||
        !CHECK_STATUS(read_text(&host, text, sites, room, &got), WHORL_OK, &host))
        return;
    CHECK(whorl_sum_check(&host, &got) == WHORL_OK && got.sites == sites);
    CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, tolerance, text);
    CHECK(host.bytes_used == 0);
}

/* The text must be this number times the identity. */
static void check_number(const char *text, double re, double im)
{
    whorl_term terms[8];
    whorl_host host = whorl_host_default();
    whorl_sum sum;
    whorl_complex c;
    if (!CHECK_STATUS(read_text(&host, text, 1, terms, &sum), WHORL_OK, &host))
        return;
    c = whorl_sum_trace(&sum);
    CHECK_NEAR(c.re, re, 0.0, text);
    CHECK_NEAR(c.im, im, 0.0, text);
    CHECK(sum.count == (re != 0.0 || im != 0.0));
}

/* ---- grammar ----------------------------------------------------------------------------------------------------- */

static void test_numbers(void)
{
    check_number("0", 0.0, 0.0);
    check_number("1.5", 1.5, 0.0);
    check_number(".5", 0.5, 0.0);
    check_number("5.", 5.0, 0.0);
    check_number("2e3", 2000.0, 0.0);
    check_number("2E-3", 0.002, 0.0);
    check_number("0.1 + 0.2", 0.1 + 0.2, 0.0); /* as the machine adds, not 0.3 */
    check_number("0.1 + 0.2 + 0.3", 0.1 + 0.2 + 0.3, 0.0);
    check_number("0.3 + (0.2 + 0.1)", 0.3 + (0.2 + 0.1), 0.0);
    check_number("2/3", 2.0 / 3.0, 0.0);
    check_number("1/3*3", 1.0 / 3.0 * 3.0, 0.0);
    check_number("12/2/3", 2.0, 0.0);
    check_number("1 - 2 - 3", -4.0, 0.0);
    check_number("1 - (2 - 3)", 2.0, 0.0);
    check_number("2 + 3*4", 14.0, 0.0);
    check_number("(2 + 3)*4", 20.0, 0.0);
    check_number("-2^2", -4.0, 0.0);
    check_number("(-2)^2", 4.0, 0.0);
    check_number("2^3^2", 512.0, 0.0);
    check_number("2^-2", 0.25, 0.0);
    check_number("2*-3", -6.0, 0.0);
    check_number("--3 + +2", 5.0, 0.0);
    check_number("2^-1*4", 2.0, 0.0);
    check_number("9^0.5", 3.0, 0.0);
    check_number("4^-1.5", 0.125, 0.0);
    check_number("0^0", 1.0, 0.0);
    check_number("sqrt(2)", sqrt(2.0), 0.0);
    check_number("sqrt(0)", 0.0, 0.0);
    check_number("i*i", -1.0, 0.0);
    check_number("(1 + 2*i)*(3 - i)", 5.0, 5.0);
    check_number("1/i", 0.0, -1.0);
    check_number("(3 + 4*i)/(3 + 4*i)", 1.0, 0.0);
    check_number("(1 + i)^8", 16.0, 0.0);
    check_number("(1 + i)^-2", 0.0, -0.5);
    check_number("J + D", 1.25 - 0.375, 0.0);
    check_number("a_1*gap", 0.1 * 3.0, 0.0);
    check_number("(1, 2, 3).(4, 5, 6)", 32.0, 0.0);
    check_number("((1, 2, 3) x (4, 5, 6)).(1, 0, 0)", -3.0, 0.0);
    check_number("(1, 2, 3).(4, 5, 6) x (1, 0, 1)", 5.0 + 4.0 - 15.0, 0.0); /* x binds tighter than . */
    check_number("(1, 0, 0).(1, 2, 3; 4, 5, 6; 7, 8, 9).(0, 0, 1)", 3.0, 0.0);
    check_number("(1,2,3).((1,2,3;4,5,6;7,8,9).(2*(0,1,0)))", 2.0 * (2.0 + 10.0 + 24.0), 0.0);
    check_number("(0,1,0).((1,2,3;4,5,6;7,8,9).(1,0,0;0,0,1;0,1,0)).(0,0,1)", 5.0, 0.0);
    check_number("((1,2,3) - (1,1,1)/2).(2,0,0)", 1.0, 0.0);
    check_number("(1,0,0).((1,2,3;4,5,6;7,8,9) - 2*(0,1,0;0,0,0;0,0,0)).(0,1,0)", 0.0, 0.0);
    check_number("# nothing but\n  2 # two\n\t*\r\n 3\n", 6.0, 0.0);
    check_number("1e-400", 0.0, 0.0);
    check_number("4.9406564584124654e-324", 4.9406564584124654e-324, 0.0);
    check_number("1.7976931348623157e308", 1.7976931348623157e308, 0.0);
}

/* Powers that are neither whole nor half against the C library, which is good to about one unit in the last place. */
static void test_powers(void)
{
    whorl_host host = whorl_host_default();
    uint64_t k;
    for (k = 0; k < 2000; k++) {
        double x = 10.0 * whorl_random_uniform(3, 0, k), y = 8.0 * whorl_random_normal(3, 1, k), want = pow(x, y);
        whorl_name_value names[2];
        whorl_term term;
        whorl_sum sum;
        names[0].name = "a";
        names[0].value = x;
        names[1].name = "b";
        names[1].value = y;
        if (CHECK_STATUS(whorl_sum_read(&host, "a^b", 3, 1, names, 2, &term, 1, &sum), WHORL_OK, &host))
            CHECK_NEAR(whorl_sum_trace(&sum).re, want, 4.5e-16 * want, "power");
    }
    check_number("1^0.3", 1.0, 0.0);
    check_number("0^0.3", 0.0, 0.0);
    check_number("2^-2000", 0.0, 0.0);
    check_number("1^1e300", 1.0, 0.0);
}

static void test_spins(void)
{
    static const char *const text[] = {"X[5]", "Y[5]", "Z[5]", "Sx[5]", "Sy[5]", "Sz[5]", "S+[5]", "S-[5]"};
    static const char axes[] = "xyzxyz+-";
    int32_t k;
    whorl_term terms[32];
    uint64_t used;
    for (k = 0; k < 8; k++) {
        used = whorl_terms_spin(terms, 5, axes[k], k < 3 ? 2.0 : 1.0);
        check_is(text[k], 6, terms, used, 0.0);
    }
    used = whorl_terms_spin(terms, 63, '+', 1.0);
    check_is("S+[63]", 64, terms, used, 0.0);
    used = whorl_terms_string(terms, 1, UINT64_C(1) << 63, 3.0);
    check_is("3*X[0]*Z[63]", 64, terms, used, 0.0);
    used = whorl_terms_number(terms, 0.5);
    used += whorl_terms_string(terms + used, 0, 1, 0.5);
    check_is("S+[0]*S-[0]", 1, terms, used, 0.0); /* bit 0 is spin up: S+ S- projects on it */
    used = whorl_terms_number(terms, 0.75);
    check_is("S[3].S[3]", 4, terms, used, 0.0);
    used = whorl_terms_spin(terms, 2, 'z', 1.0); /* Sx Sy - Sy Sx = i Sz */
    terms[0].im = terms[0].re;
    terms[0].re = 0.0;
    check_is("Sx[2]*Sy[2] - Sy[2]*Sx[2]", 3, terms, used, 0.0);
    used = whorl_terms_number(terms, 1.0);
    check_is("X[0]^2*Y[0]^0*Z[0]^4", 1, terms, used, 0.0);
    check_is("S+[0]^2", 1, terms, 0, 0.0);
    check_is("X[0] - X[0]", 1, terms, 0, 0.0);
}

static void test_couplings(void)
{
    static const double matrix[9] = {1.0, 0.25, -0.5, 2.0, 3.0, 0.125, -1.0, 0.75, 0.5};
    static const double d[3] = {0.5, -0.25, 2.0}, h[3] = {1.0, 0.5, -2.0};
    static const double along[3] = {1.5, -2.0, 0.75};
    whorl_term terms[64];
    uint64_t used = whorl_terms_exchange(terms, 1, 4, 1.25);
    check_is("J*S[1].S[4]", 5, terms, used, 0.0);
    check_is("0.5*J*(S+[1]*S-[4] + S-[1]*S+[4]) + J*Sz[1]*Sz[4]", 5, terms, used, 0.0);
    check_is("J/4*(X[1]*X[4] + Y[1]*Y[4] + Z[1]*Z[4])", 5, terms, used, 0.0);
    used = whorl_terms_exchange_matrix(terms, 2, 0, matrix);
    check_is("S[2].(1, 0.25, -0.5; 2, 3, 0.125; -1, 0.75, 0.5).S[0]", 3, terms, used, 0.0);
    used = whorl_terms_antisymmetric(terms, 2, 1, d);
    check_is("(0.5, -0.25, 2).(S[2] x S[1])", 3, terms, used, 0.0);
    check_is("(0.5, -0.25, 2).S[2] x S[1]", 3, terms, used, 0.0);
    check_is("-(0.5, -0.25, 2).S[1] x S[2]", 3, terms, used, 0.0);
    used = whorl_terms_field(terms, 3, h, matrix);
    check_is("-(1, 0.5, -2).(1, 0.25, -0.5; 2, 3, 0.125; -1, 0.75, 0.5).S[3]", 4, terms, used, 0.0);
    used = whorl_terms_dipolar(terms, 0, 1, along, NULL, NULL, 0.625);
    check_is("0.625*(S[0].S[1] - 3*(S[0].(1.5, -2, 0.75))*(S[1].(1.5, -2, 0.75))/(1.5^2 + 2^2 + 0.75^2))"
             "/(1.5^2 + 2^2 + 0.75^2)^1.5", 2, terms, used, 4e-16);
    used = whorl_terms_exchange(terms, 0, 1, 1.0);
    used += whorl_terms_exchange(terms + used, 0, 2, 1.0);
    used += whorl_terms_exchange(terms + used, 3, 1, 1.0);
    used += whorl_terms_exchange(terms + used, 3, 2, 1.0);
    check_is("(S[0] + S[3]).(S[1] + S[2])", 4, terms, used, 0.0);
    used = whorl_terms_string(terms, 0, 7, 1.0);
    check_is("Z[0]*Z[1]*Z[2]", 3, terms, used, 0.0);
}

/* Products of long sums against the algebra of whorl_pauli.h. */
static void test_products(void)
{
    static whorl_term a[64], b[64], room[ROOM], got_room[ROOM];
    static const char *const text = "(X[0] + 0.5*Y[1]*Z[2] - Z[3] + S+[1])*(Sx[0]*Sx[1] + i*Y[3] - 2*Z[0]*Z[2] + 0.25)";
    whorl_host host = whorl_host_default();
    whorl_sum left, right, want, got;
    CHECK_STATUS(read_text(&host, "X[0] + 0.5*Y[1]*Z[2] - Z[3] + S+[1]", 4, room, &want), WHORL_OK, &host);
    memcpy(a, want.terms, (size_t)want.count * sizeof *a);
    CHECK_STATUS(whorl_sum_from_terms(&host, 4, a, want.count, &left), WHORL_OK, &host);
    CHECK_STATUS(read_text(&host, "Sx[0]*Sx[1] + i*Y[3] - 2*Z[0]*Z[2] + 0.25", 4, room, &want), WHORL_OK, &host);
    memcpy(b, want.terms, (size_t)want.count * sizeof *b);
    CHECK_STATUS(whorl_sum_from_terms(&host, 4, b, want.count, &right), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_multiply(&host, &left, &right, room, ROOM, &want), WHORL_OK, &host);
    CHECK_STATUS(read_text(&host, text, 4, got_room, &got), WHORL_OK, &host);
    CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, 1e-15, "product");
    CHECK_STATUS(read_text(&host, "(X[0] + Z[0] + Y[1])^5", 4, room, &want), WHORL_OK, &host);
    CHECK_STATUS(read_text(&host, "(X[0] + Z[0] + Y[1])*(X[0] + Z[0] + Y[1])^4", 4, got_room, &got), WHORL_OK, &host);
    CHECK(want.count > 2);
    CHECK_NEAR(whorl_sum_distance(&want, &got), 0.0, 1e-13, "fifth power");
}

/* ---- round trips ------------------------------------------------------------------------------------------------- */

static double random_coefficient(uint64_t seed, uint64_t counter)
{
    uint64_t bits = whorl_random_bits(seed, 1, counter);
    double value;
    switch (bits & 7) {
    case 0: return 0.0;
    case 1: return (double)(bits >> 60) - 7.5;
    case 2: return whorl_random_normal(seed, 2, counter);
    default: break;
    }
    memcpy(&value, &bits, 8); /* any double at all: denormals, huge ones */
    return whorl_is_finite(value) ? value / 4.0 : 1.0;
}

static void test_round_trip(void)
{
    static whorl_term terms[300], back_room[300];
    static char text[200000];
    whorl_host host = whorl_host_default();
    uint64_t seed;
    for (seed = 0; seed < 300; seed++) {
        int32_t sites = 1 + (int32_t)(seed % 64);
        uint64_t count = seed, k, used = 0, asked = 0, inside = whorl_bits_low(sites);
        whorl_sum sum, back;
        for (k = 0; k < count; k++) {
            terms[k].x = whorl_random_bits(seed, 3, 2 * k) & inside;
            terms[k].z = whorl_random_bits(seed, 3, 2 * k + 1) & inside;
            terms[k].re = random_coefficient(seed, 2 * k);
            terms[k].im = random_coefficient(seed, 2 * k + 1);
        }
        if (whorl_sum_from_terms(&host, sites, terms, count, &sum) != WHORL_OK)
            continue; /* equal strings that overflow */
        CHECK_STATUS(whorl_sum_write(&host, &sum, NULL, 0, &asked), WHORL_NO_ROOM, &host);
        asked = host.reason.index;
        CHECK(asked <= sizeof text);
        CHECK_STATUS(whorl_sum_write(&host, &sum, text, asked - 1, &used), WHORL_NO_ROOM, &host);
        CHECK_STATUS(whorl_sum_write(&host, &sum, text, asked, &used), WHORL_OK, &host);
        CHECK(used + 1 == asked && strlen(text) == used);
        CHECK_STATUS(whorl_sum_read(&host, text, used, sites, NULL, 0, back_room, sum.count, &back), WHORL_OK, &host);
        CHECK(back.sites == sites && back.count == sum.count);
        CHECK(back.count == 0 || memcmp(back.terms, sum.terms, (size_t)sum.count * sizeof *terms) == 0);
    }
}

static void test_written_form(void)
{
    whorl_term terms[8];
    whorl_host host = whorl_host_default();
    whorl_sum sum;
    char text[200];
    uint64_t used = 0;
    CHECK_STATUS(read_text(&host, "-Y[1]*Z[0] + (2 - 3*i)*X[2] - 0.75 + i*Z[1]", 3, terms, &sum), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_write(&host, &sum, text, sizeof text, &used), WHORL_OK, &host);
    CHECK(strcmp(text, "-0.75 + 1*i*Z[1] - 1*Z[0]*Y[1] + (2 - 3*i)*X[2]") == 0);
    sum.count = 0;
    CHECK_STATUS(whorl_sum_write(&host, &sum, text, sizeof text, &used), WHORL_OK, &host);
    CHECK(strcmp(text, "0") == 0 && used == 1);
}

/* ---- parameters -------------------------------------------------------------------------------------------------- */

static const char *const symbols[3] = {"J", "D", "h"};

/* Read with symbols and then valued, and read with numbers: the same operator up to rounding. */
static void check_symbolic(const char *text, double tolerance)
{
    static whorl_term numeric_room[ROOM], symbolic_room[ROOM];
    static const double values[4][3] = {{1.0, 0.5, 0.25}, {-2.5, 0.3, 7.0}, {0.1, 3.0, 0.9}, {1e-3, -0.7, 1e3}};
    whorl_host host = whorl_host_default();
    whorl_expression *expression = NULL;
    whorl_name_value names[3];
    int32_t v, k;
    if (!CHECK_STATUS(whorl_expression_read(&host, text, strlen(text), 5, symbols, 3, &expression), WHORL_OK, &host))
        return;
    for (v = 0; v < 4; v++) {
        whorl_sum numeric, symbolic;
        for (k = 0; k < 3; k++) {
            names[k].name = symbols[k];
            names[k].value = values[v][k];
        }
        CHECK_STATUS(whorl_sum_read(&host, text, strlen(text), 5, names, 3, numeric_room, ROOM, &numeric), WHORL_OK,
                     &host);
        CHECK_STATUS(whorl_expression_sum(&host, expression, values[v], symbolic_room, ROOM, &symbolic), WHORL_OK,
                     &host);
        CHECK_NEAR(whorl_sum_distance(&numeric, &symbolic), 0.0, tolerance * (1.0 + whorl_sum_norm_bound(&numeric)),
                   text);
    }
    CHECK(whorl_expression_count(expression) >= 1);
    whorl_expression_free(&host, expression);
    CHECK(host.bytes_used == 0);
}

static void test_symbolic(void)
{
    check_symbolic("J*S[0].S[1]", 0.0);
    check_symbolic("J*(S[0].S[1] + D*S[1].S[2]) - h*(Sz[0] + Sz[1])", 1e-15);
    check_symbolic("(J + D)^3*X[0] + (J - h)*(J + h)*Z[1]", 1e-13);
    check_symbolic("J/D*X[0] + X[1]/(1 + h^2) + Z[0]*D/(J*J)", 1e-14);
    check_symbolic("1/(J + 1/(D + 4*i))*X[0]*Y[1]", 1e-14);
    check_symbolic("sqrt(J^2 + D^2 + h^2)*X[0] + (1 + J^2)^1.5*Y[0] + (1 + h^2)^-0.5*Z[0]", 1e-14);
    check_symbolic("S[0].(J, D, 0; -D, J, 0; 0, 0, h).S[1] + (h, 0, J).(S[2] x S[3])", 1e-15);
    check_symbolic("(X[0] + J*Z[1])^4", 1e-13);
    check_symbolic("(1 + J^2)^h*X[0] + (2 + D)^-(J*J)*Y[1] + 2^D*Z[0]/(1 + 3^(h/100))", 1e-14);
    check_symbolic("J", 0.0);
    check_symbolic("3 + X[2]", 0.0);
    check_symbolic("(J*X[0] + D*Y[1])*(h*Z[0] - i*J)", 1e-14);
}

static void test_weights(void)
{
    const char *text = "J*X[0] + 2*J*Y[0] + J^2*Z[0] + 5*Z[1] + D/(1 + h)*X[1] + sqrt(J + 1)^3*Y[1]";
    static const double values[3] = {3.0, 0.5, 1.0};
    static const char *const names[5] = {"1", "J", "J^2", "D*(1 + h)^-1", "sqrt(1 + J)^3"};
    static const double want[5] = {1.0, 3.0, 9.0, 0.25, 8.0};
    static const uint64_t terms[5] = {1, 2, 1, 1, 1};
    double bad[3] = {3.0, 0.5, -1.0};
    whorl_host host = whorl_host_default();
    whorl_expression *expression = NULL;
    whorl_complex weights[5];
    uint64_t k, j, seen = 0, used = 0, total = 0;
    char written[60];
    if (!CHECK_STATUS(whorl_expression_read(&host, text, strlen(text), 2, symbols, 3, &expression), WHORL_OK, &host))
        return;
    CHECK(whorl_expression_count(expression) == 5);
    CHECK_STATUS(whorl_expression_weights(&host, expression, values, weights), WHORL_OK, &host);
    for (k = 0; k < 5; k++) {
        CHECK_STATUS(whorl_expression_weight_write(&host, expression, k, written, sizeof written, &used), WHORL_OK,
                     &host);
        for (j = 0; j < 5; j++)
            if (strcmp(written, names[j]) == 0) {
                seen |= UINT64_C(1) << j;
                CHECK_NEAR(weights[k].re, want[j], 1e-15 * want[j], names[j]);
                CHECK(weights[k].im == 0.0 && whorl_expression_sums(expression)[k].count == terms[j]);
            }
        total += whorl_expression_sums(expression)[k].count;
        CHECK(whorl_sum_check(&host, whorl_expression_sums(expression) + k) == WHORL_OK);
    }
    CHECK(seen == 31 && total == whorl_expression_term_count(expression));
    CHECK_STATUS(whorl_expression_weight_write(&host, expression, 5, written, sizeof written, &used),
                 WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_expression_weight_write(&host, expression, 0, written, 1, &used), WHORL_NO_ROOM, &host);
    weights[0] = whorl_complex_of(77.0, 77.0);
    CHECK_STATUS(whorl_expression_weights(&host, expression, bad, weights), WHORL_NOT_FINITE, &host); /* 1 + h = 0 */
    CHECK(host.reason.line == 1 && host.reason.column == 42 && strstr(host.reason.text, "zero") != NULL);
    CHECK(weights[0].re == 77.0);
    bad[2] = 1.0;
    bad[0] = -2.0;
    CHECK_STATUS(whorl_expression_weights(&host, expression, bad, weights), WHORL_NOT_FINITE, &host);
    CHECK(strstr(host.reason.text, "root of a negative number") != NULL && host.reason.column == 58);
    bad[0] = HUGE_VAL;
    CHECK_STATUS(whorl_expression_weights(&host, expression, bad, weights), WHORL_NOT_FINITE, &host);
    CHECK(host.reason.index == 0);
    bad[0] = 1e200;
    CHECK_STATUS(whorl_expression_weights(&host, expression, bad, weights), WHORL_NOT_FINITE, &host);
    whorl_expression_free(&host, expression);
    whorl_expression_free(&host, NULL);
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
        {"", WHORL_BAD_TEXT, 1, 1, "the text ends"},
        {"  # only this", WHORL_BAD_TEXT, 1, 1, "expected a factor"},
        {"1 +", WHORL_BAD_TEXT, 1, 4, "the text ends"},
        {"1 + * 2", WHORL_BAD_TEXT, 1, 5, "found `*`"},
        {"(1 + 2", WHORL_BAD_TEXT, 1, 7, "closing `)`"},
        {"1 + 2)", WHORL_BAD_TEXT, 1, 6, "or the end"},
        {"2J", WHORL_BAD_TEXT, 1, 2, "write `*`"},
        {"X[0] X[1]", WHORL_BAD_TEXT, 1, 6, "write `*`"},
        {"X[0]*\n  (Y[1] Z[2])", WHORL_BAD_TEXT, 2, 9, "an operator is missing before `Z`"},
        {"X[4]", WHORL_BAD_TEXT, 1, 3, "the sites are 0 .. 3"},
        {"X[99999999999999999999999]", WHORL_BAD_TEXT, 1, 3, "a site"},
        {"X[-1]", WHORL_BAD_TEXT, 1, 3, "a site"},
        {"X[1.0]", WHORL_BAD_TEXT, 1, 3, "a site"},
        {"X[J]", WHORL_BAD_TEXT, 1, 3, "a site"},
        {"X[i]", WHORL_BAD_TEXT, 1, 3, "sum over"},
        {"X 0", WHORL_BAD_TEXT, 1, 3, "`[`"},
        {"X[0", WHORL_BAD_TEXT, 1, 4, "`]`"},
        {"S*2", WHORL_BAD_TEXT, 1, 2, "`[`"},
        {"1 + gpa", WHORL_BAD_TEXT, 1, 5, "`gap`"},
        {"Sk[0]", WHORL_BAD_TEXT, 1, 1, "did you mean `S"},
        {"something", WHORL_BAD_TEXT, 1, 1, "unknown name"},
        {"\n\n   1/0", WHORL_BAD_TEXT, 3, 5, "division by zero"},
        {"1/(J - 1.25)", WHORL_BAD_TEXT, 1, 2, "division by zero"},
        {"0^-1", WHORL_BAD_TEXT, 1, 2, "negative power of zero"},
        {"1/X[0]", WHORL_BAD_TEXT, 1, 2, "cannot be divided"},
        {"S[0]*S[1]", WHORL_BAD_TEXT, 1, 5, "scalar product"},
        {"X[0].X[1]", WHORL_BAD_TEXT, 1, 5, "no scalar product"},
        {"X[0] x X[1]", WHORL_BAD_TEXT, 1, 6, "no vector product"},
        {"1 + S[0]", WHORL_BAD_TEXT, 1, 3, "cannot be added"},
        {"X[0] - (1, 2, 3)", WHORL_BAD_TEXT, 1, 6, "cannot be subtracted"},
        {"S[0]^2", WHORL_BAD_TEXT, 1, 5, "cannot be joined"},
        {"X[0]^-1", WHORL_BAD_TEXT, 1, 5, "whole powers"},
        {"X[0]^0.5", WHORL_BAD_TEXT, 1, 5, "whole powers"},
        {"2^2000", WHORL_NOT_FINITE, 1, 2, "too large"},
        {"2^i", WHORL_BAD_TEXT, 1, 2, "exponents are real"},
        {"(-2)^0.3", WHORL_BAD_TEXT, 1, 5, "only positive"},
        {"0^-0.3", WHORL_BAD_TEXT, 1, 2, "power of zero"},
        {"X[0]^2000", WHORL_BAD_TEXT, 1, 5, "from 0 to 1024"},
        {"S[0]", WHORL_BAD_TEXT, 1, 1, "is a vector of operators"},
        {"(1, 0, 0; 0, 1, 0; 0, 0, 1)", WHORL_BAD_TEXT, 1, 1, "is a matrix"},
        {"(1, 2).S[0]", WHORL_BAD_TEXT, 1, 6, "three components"},
        {"(1, 2, 3, 4).S[0]", WHORL_BAD_TEXT, 1, 9, "three components"},
        {"(1, 2; 3, 4)", WHORL_BAD_TEXT, 1, 6, "three rows"},
        {"(1, 2, 3; 4, 5, 6)", WHORL_BAD_TEXT, 1, 18, "three rows"},
        {"(1, 2, 3; 4, 5, 6, 7; 1, 2, 3)", WHORL_BAD_TEXT, 1, 18, "end it with `;`"},
        {"(1, 2, 3; 4, 5, 6; 7, 8, 9; 1, 1, 1)", WHORL_BAD_TEXT, 1, 27, "three rows"},
        {"(X[0], 0, 0; 0, 1, 0; 0, 0, 1).S[1]", WHORL_BAD_TEXT, 1, 1, "are numbers"},
        {"(S[0], 1, 2).S[1]", WHORL_BAD_TEXT, 1, 1, "numbers or operators"},
        {"()", WHORL_BAD_TEXT, 1, 2, "expected a factor"},
        {"sqrt 2", WHORL_BAD_TEXT, 1, 6, "`(` behind sqrt"},
        {"sqrt(1, 2, 3)", WHORL_BAD_TEXT, 1, 7, "one number"},
        {"sqrt(X[0])", WHORL_BAD_TEXT, 1, 1, "takes a number"},
        {"sqrt(-1)", WHORL_BAD_TEXT, 1, 1, "root"},
        {"x", WHORL_BAD_TEXT, 1, 1, "vector product"},
        {"r", WHORL_BAD_TEXT, 1, 1, "sum over"},
        {"1 ! 2", WHORL_BAD_TEXT, 1, 3, "found `!`"},
        {"1 + \xc3\xa4", WHORL_BAD_TEXT, 1, 5, "found `?`"},
        {"1, 2", WHORL_BAD_TEXT, 1, 2, "found `,`"},
        {"\xef\xbb\xbfX[9]", WHORL_BAD_TEXT, 1, 6, "0 .. 3"},
        {"1e999", WHORL_NOT_FINITE, 1, 1, "too large"},
        {"1e300*\n1e300", WHORL_NOT_FINITE, 1, 6, "too large"},
        {"1e308 + 1e308", WHORL_NOT_FINITE, 1, 7, "too large"},
        {"1e300*X[0]*1e300", WHORL_NOT_FINITE, 1, 11, "too large"},
        {"10^400", WHORL_NOT_FINITE, 1, 3, "too large"},
    };
    whorl_term terms[16];
    size_t k;
    for (k = 0; k < sizeof wrong / sizeof *wrong; k++) {
        whorl_host host = whorl_host_default();
        whorl_sum sum = {7, 7, NULL};
        const char *text = wrong[k].text;
        whorl_status status = whorl_sum_read(&host, text, strlen(text), 4, known, 4, terms, 16, &sum);
        int good = status == wrong[k].status && host.reason.status == status && host.reason.line == wrong[k].line &&
                   host.reason.column == wrong[k].column && strstr(host.reason.text, wrong[k].phrase) != NULL &&
                   sum.sites == 7 && host.bytes_used == 0;
        CHECK(good);
        if (!good)
            printf("    `%s`: %d at %d:%d: %s\n", text, (int)status, (int)host.reason.line, (int)host.reason.column,
                   host.reason.text);
    }
}

static void test_arguments(void)
{
    static const char *const reserved[1] = {"Sx"}, *const twice[3] = {"a", "b", "a"}, *const odd[1] = {"3a"};
    static const char *const empty[2] = {"a", ""}, *const null[1] = {NULL};
    const whorl_name_value infinite[2] = {{"a", 1.0}, {"b", HUGE_VAL}};
    whorl_host host = whorl_host_default();
    whorl_expression *expression = (whorl_expression *)&host;
    whorl_term terms[4];
    whorl_sum sum = {0, 0, NULL};
    CHECK_STATUS(whorl_sum_read(&host, "1", 1, 0, NULL, 0, terms, 4, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_read(&host, "1", 1, 65, NULL, 0, terms, 4, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_read(&host, NULL, 1, 4, NULL, 0, terms, 4, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_read(&host, NULL, 0, 4, NULL, 0, terms, 4, &sum), WHORL_BAD_TEXT, &host);
    CHECK_STATUS(whorl_sum_read(&host, "1", 1, 4, NULL, 1, terms, 4, &sum), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_sum_read(&host, "a", 1, 4, infinite, 2, terms, 4, &sum), WHORL_NOT_FINITE, &host);
    CHECK(host.reason.index == 1);
    CHECK_STATUS(whorl_sum_read(&host, "S[0].S[1]", 9, 4, NULL, 0, terms, 2, &sum), WHORL_NO_ROOM, &host);
    CHECK(host.reason.index == 3 && sum.sites == 0);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, reserved, 1, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK(expression == NULL && host.reason.index == 0);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, twice, 3, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 2);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, odd, 1, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, empty, 2, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.reason.index == 1);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, null, 1, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_expression_read(&host, "1", 1, 4, NULL, 1, &expression), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.bytes_used == 0);
}

/* ---- size -------------------------------------------------------------------------------------------------------- */

static char *repeated(const char *begin, const char *middle, const char *inner, const char *end, uint64_t times)
{
    size_t a = strlen(middle), b = strlen(end), at = strlen(begin);
    char *text = (char *)malloc(at + (a + b) * (size_t)times + strlen(inner) + 1);
    uint64_t k;
    memcpy(text, begin, at);
    for (k = 0; k < times; k++, at += a)
        memcpy(text + at, middle, a);
    memcpy(text + at, inner, strlen(inner));
    at += strlen(inner);
    for (k = 0; k < times; k++, at += b)
        memcpy(text + at, end, b);
    text[at] = '\0';
    return text;
}

static void test_depth(void)
{
    static const struct {
        const char *middle, *inner, *end;
        double re;
    } deep[] = {{"(", "2", ")", 2.0}, {"-(", "2", ")", 2.0}, {"-", "2", "", 2.0}, {"sqrt(", "1", ")", 1.0},
                {"1*(1+0*", "3", ")", 1.0}, {"1^(", "1", ")", 1.0}, {"1^", "1", "", 1.0}, {"0+(", "5", ")", 5.0}};
    size_t k;
    for (k = 0; k < sizeof deep / sizeof *deep; k++) {
        char *text = repeated("", deep[k].middle, deep[k].inner, deep[k].end, 100000);
        whorl_host host = whorl_host_default();
        whorl_term terms[2];
        whorl_sum sum;
        if (CHECK_STATUS(whorl_sum_read(&host, text, strlen(text), 2, NULL, 0, terms, 2, &sum), WHORL_OK, &host))
            CHECK_NEAR(whorl_sum_trace(&sum).re, deep[k].re, 0.0, deep[k].middle);
        free(text);
    }
}

/* 2 * 10^5 terms written and read: the bits; and a text with as many open parentheses as bytes. */
static void test_size(void)
{
    enum { MANY = 200000 };
    whorl_host host = whorl_host_default();
    whorl_term *terms = (whorl_term *)malloc(MANY * sizeof *terms), *back = (whorl_term *)malloc(MANY * sizeof *terms);
    whorl_sum sum, again;
    uint64_t k, used = 0;
    char *text;
    for (k = 0; k < MANY; k++) {
        uint64_t a = whorl_random_bits(5, 0, k);
        whorl_terms_string(terms + k, UINT64_C(1) << (a & 63) | UINT64_C(1) << (a >> 6 & 63),
                           UINT64_C(1) << (a >> 12 & 63) | UINT64_C(1) << (a >> 18 & 63), whorl_random_normal(5, 1, k));
    }
    CHECK_STATUS(whorl_sum_from_terms(&host, 64, terms, MANY, &sum), WHORL_OK, &host);
    CHECK(sum.count > MANY / 2);
    CHECK_STATUS(whorl_sum_write(&host, &sum, NULL, 0, &used), WHORL_NO_ROOM, &host);
    k = host.reason.index;
    text = (char *)malloc((size_t)k);
    CHECK_STATUS(whorl_sum_write(&host, &sum, text, k, &used), WHORL_OK, &host);
    CHECK_STATUS(whorl_sum_read(&host, text, used, 64, NULL, 0, back, MANY, &again), WHORL_OK, &host);
    CHECK(again.count == sum.count && memcmp(back, terms, (size_t)sum.count * sizeof *terms) == 0);
    memset(text, '(', (size_t)used);
    CHECK_STATUS(whorl_sum_read(&host, text, used, 64, NULL, 0, back, MANY, &again), WHORL_BAD_TEXT, &host);
    CHECK(host.reason.column == (int32_t)used + 1);
    CHECK(host.bytes_used == 0);
    free(text);
    free(back);
    free(terms);
}

/* ---- memory, cancelling, locale ---------------------------------------------------------------------------------- */

static const char busy[] = "J*(S[0].S[1] + S[1].S[2])/(1 + D) + sqrt(J + 2)*(X[0] + Y[1] + Z[2] + h*D*X[1]*X[2])^3"
                           " - h*(1, 0, 2).(1, 2, 3; 4, 5, 6; J, 8, 9).(S[0] x S[2]) + 1/(J + D + h + 5)*Z[0]";

static whorl_status call_read(whorl_host *host, void *argument)
{
    static const whorl_name_value names[3] = {{"J", 1.0}, {"D", 2.0}, {"h", 3.0}};
    whorl_term terms[256];
    whorl_sum sum = {9, 9, NULL};
    whorl_status status = whorl_sum_read(host, busy, sizeof busy - 1, 3, names, 3, terms, 256, &sum);
    (void)argument;
    CHECK(status == WHORL_OK ? sum.sites == 3 && sum.count > 10 : sum.sites == 9 && sum.count == 9);
    return status;
}

static whorl_status call_expression(whorl_host *host, void *argument)
{
    whorl_expression *expression = (whorl_expression *)host;
    whorl_term terms[512];
    whorl_sum sum = {9, 9, NULL};
    const double values[3] = {1.0, 2.0, 3.0};
    whorl_status status = whorl_expression_read(host, busy, sizeof busy - 1, 3, symbols, 3, &expression);
    (void)argument;
    CHECK((status == WHORL_OK) == (expression != NULL));
    if (status == WHORL_OK)
        status = whorl_expression_sum(host, expression, values, terms, 512, &sum);
    CHECK(status == WHORL_OK ? sum.sites == 3 : sum.sites == 9);
    whorl_expression_free(host, expression);
    return status;
}

static void test_failures(void)
{
    check_every_allocation(call_read, NULL, WHORL_OK);
    check_every_allocation(call_expression, NULL, WHORL_OK);
    check_every_poll(call_read, NULL, WHORL_OK);
    check_every_poll(call_expression, NULL, WHORL_OK);
}

static void *no_memory(void *context, size_t bytes)
{
    (void)bytes;
    ++*(int *)context;
    return NULL;
}

/* What is announced is what is used; an arena of that size does, one byte less is refused. */
static void test_announced(void)
{
    whorl_host host = whorl_host_default();
    whorl_expression *expression = NULL;
    whorl_complex *weights;
    uint64_t bytes = 0, scratch;
    const double values[3] = {1.0, 2.0, 3.0};
    whorl_arena arena;
    char *memory, *base;
    int asked = 0;
    CHECK_STATUS(whorl_expression_bytes(&host, busy, sizeof busy - 1, 3, symbols, 3, &bytes), WHORL_OK, &host);
    host.bytes_peak = 0;
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_OK, &host);
    CHECK(host.bytes_peak == bytes);
    weights = (whorl_complex *)calloc((size_t)whorl_expression_count(expression), sizeof *weights);
    scratch = host.bytes_used;
    host.bytes_peak = scratch;
    CHECK_STATUS(whorl_expression_weights(&host, expression, values, weights), WHORL_OK, &host);
    CHECK(host.bytes_peak - scratch == whorl_expression_weights_bytes(expression));
    whorl_expression_free(&host, expression);
    free(weights);
    memory = (char *)malloc((size_t)bytes + 64);
    base = memory + (64 - ((uintptr_t)memory & 63)) % 64;
    whorl_arena_make(&arena, base, bytes);
    whorl_arena_use(&arena, &host);
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_OK, &host);
    whorl_expression_free(&host, expression);
    whorl_arena_make(&arena, base, bytes - 1);
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_NO_MEMORY,
                 &host);
    CHECK(expression == NULL && host.bytes_used == 0);
    host = whorl_host_default();
    host.byte_limit = bytes - 1;
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_OVER_LIMIT,
                 &host);
    host.byte_limit = bytes;
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_OK, &host);
    whorl_expression_free(&host, expression);
    host.byte_limit = 0;
    host.take = no_memory;
    host.memory_context = &asked;
    CHECK_STATUS(whorl_expression_read(&host, busy, sizeof busy - 1, 3, symbols, 3, &expression), WHORL_NO_MEMORY,
                 &host);
    CHECK(asked == 1);
    free(memory);
}

static void test_locale(void)
{
    static const char *const locales[] = {"de_DE.UTF-8", "de_DE.utf8", "fr_FR.UTF-8", "C"};
    whorl_term terms[2];
    whorl_host host = whorl_host_default();
    whorl_sum sum;
    char text[100];
    uint64_t used = 0;
    size_t k;
    for (k = 0; k < 4 && setlocale(LC_ALL, locales[k]) == NULL; k++)
        ;
    CHECK_STATUS(read_text(&host, "1.5*X[0]", 1, terms, &sum), WHORL_OK, &host);
    CHECK(sum.count == 1 && sum.terms[0].re == 1.5);
    CHECK_STATUS(whorl_sum_write(&host, &sum, text, sizeof text, &used), WHORL_OK, &host);
    CHECK(strcmp(text, "1.5*X[0]") == 0);
    setlocale(LC_ALL, "C");
}

int main(void)
{
    check_begin("text");
    check_run("numbers", test_numbers);
    check_run("powers", test_powers);
    check_run("spins", test_spins);
    check_run("couplings", test_couplings);
    check_run("products", test_products);
    check_run("round_trip", test_round_trip);
    check_run("written_form", test_written_form);
    check_run("symbolic", test_symbolic);
    check_run("weights", test_weights);
    check_run("errors", test_errors);
    check_run("arguments", test_arguments);
    check_run("depth", test_depth);
    check_run("size", test_size);
    check_run("failures", test_failures);
    check_run("announced", test_announced);
    check_run("locale", test_locale);
    return check_end();
}
