/* The core: decimal text against the C library, known answers, naive loops, memory at its edges, runs and sums. */
#include "check.h"
#include "threads.h"

/* ---- helpers ----------------------------------------------------------------------------------------------------- */

/* The tests' own random bits, so that nothing is judged by itself: splitmix64 (Steele, Lea, Flood, OOPSLA 2014). */
static uint64_t random_state = 1;
static uint64_t random_word(void)
{
    uint64_t z = (random_state += UINT64_C(0x9e3779b97f4a7c15));
    z = (z ^ (z >> 30)) * UINT64_C(0xbf58476d1ce4e5b9);
    z = (z ^ (z >> 27)) * UINT64_C(0x94d049bb133111eb);
    return z ^ (z >> 31);
}
static uint64_t random_below(uint64_t n) { return random_word() % n; }
static double random_real(void) { return (double)(random_word() >> 11) * (2.0 / 9007199254740992.0) - 1.0; }

static double of_bits(uint64_t bits)
{
    double value;
    memcpy(&value, &bits, 8);
    return value;
}
static uint64_t bits_of(double value)
{
    uint64_t bits;
    memcpy(&bits, &value, 8);
    return bits;
}
static int same_complex(whorl_complex a, whorl_complex b)
{
    return bits_of(a.re) == bits_of(b.re) && bits_of(a.im) == bits_of(b.im);
}

/* Any double: random bits, denormals, and numbers of moderate size with long and short fractions. */
static double random_double(uint64_t kind)
{
    uint64_t bits = random_word();
    switch (kind % 4) {
    case 0: break;
    case 1: bits &= (UINT64_MAX >> random_below(52) >> 12) | UINT64_C(1) << 63; break;
    case 2: return random_real() * (double)(UINT64_C(1) << random_below(40));
    default: return (double)(int64_t)random_below(2000000) / (double)(UINT64_C(1) << random_below(20)) - 1000.0;
    }
    if ((bits >> 52 & 0x7ff) == 0x7ff)
        bits ^= UINT64_C(1) << 62;
    return of_bits(bits);
}

/* Reads text from an exact copy on the heap, so that reading past its length is seen by a memory checker. */
static uint64_t read_exactly(const char *text, uint64_t length, double *value)
{
    char *copy = (char *)malloc(length == 0 ? 1 : (size_t)length);
    uint64_t used;
    memcpy(copy, text, (size_t)length);
    used = whorl_real_read(copy, length, value);
    free(copy);
    return used;
}

static int reads_like_strtod(const char *text)
{
    char *end;
    double want = strtod(text, &end), got = 77.0;
    uint64_t used = read_exactly(text, strlen(text), &got);
    int good = used == (uint64_t)(end - text) && (used == 0 ? got == 77.0 : bits_of(got) == bits_of(want));
    if (!good)
        printf("  text \"%.60s\": %d bytes %.17g, C library %d bytes %.17g\n", text, (int)used, got,
               (int)(end - text), want);
    return good;
}

/* Digits from the first to the last that is not zero; *power of 0.digits 10^power. Returns how many. */
static int32_t digits_of(const char *text, char *digits, int32_t *power)
{
    int32_t count = 0, point = 0;
    *power = 0;
    for (; *text != '\0' && *text != 'e'; text++) {
        if (*text == '.') {
            point = 1;
        } else if (*text != '-') {
            if (count > 0 || *text != '0') {
                digits[count++] = *text;
                *power += !point;
            } else {
                *power -= point;
            }
        }
    }
    if (*text == 'e')
        *power += (int32_t)strtol(text + 1, NULL, 10);
    while (count > 0 && digits[count - 1] == '0')
        count--;
    digits[count] = '\0';
    return count;
}

/* The C library's d.ddde-05 as d.ddde-5. */
static void plain_exponent(char *text)
{
    char *e = strchr(text, 'e');
    int power;
    if (e == NULL)
        return;
    power = atoi(e + 1);
    snprintf(e + 1, 8, "%d", power);
}

/* ---- decimal text ------------------------------------------------------------------------------------------------ */

#define PATTERNS 200000

static void test_random_patterns(void)
{
    char want[400], got[400];
    long i, bad_read = 0, bad_trip = 0, bad_digits = 0, bad_fixed = 0;
    for (i = 0; i < PATTERNS; i++) {
        double value = random_double((uint64_t)i), back = 0.0;
        int32_t length;
        snprintf(want, sizeof want, "%.17g", value);
        bad_read += !reads_like_strtod(want) || bits_of(strtod(want, NULL)) != bits_of(value);
        length = whorl_real_write(value, got);
        bad_trip += length >= WHORL_REAL_TEXT || length != (int32_t)strlen(got) ||
                    whorl_real_read(got, (uint64_t)length, &back) != (uint64_t)length ||
                        bits_of(back) != bits_of(value) ||
                    bits_of(strtod(got, NULL)) != bits_of(value);
        if (i % 4 != 0 && i % 4 != 1) {
            snprintf(want, sizeof want, "%.6f", value);
            length = whorl_real_write_fixed(value, 6, got, sizeof got);
            bad_fixed += strcmp(got, want) != 0 || length != (int32_t)strlen(want);
        }
        if (i % 8 >= 4)
            continue;
        snprintf(want, sizeof want, "%.39e", value);
        bad_read += !reads_like_strtod(want);
        plain_exponent(want);
        length = whorl_real_write_digits(value, 40, got, sizeof got);
        bad_digits += strcmp(got, want) != 0 || length != (int32_t)strlen(want);
    }
    CHECK(bad_read == 0);
    CHECK(bad_trip == 0);
    CHECK(bad_digits == 0);
    CHECK(bad_fixed == 0);
}

/* Fewest digits: no text of one digit less reads back; the nearest of that many is taken where it reads back. */
static void test_shortest(void)
{
    char text[64], other[64], digits[64], nearest[64];
    long i, long_ones = 0, far_ones = 0, seen[20] = {0};
    for (i = 0; i < 40000; i++) {
        double value = random_double((uint64_t)i);
        int32_t count, power, other_power;
        uint64_t around;
        if (i % 7 == 0) /* powers of two, where the gap below is half the gap above */
            value = of_bits(random_below(0x7fe) << 52);
        if (i % 7 == 1) /* short decimals */
            value = strtod(text, (snprintf(text, sizeof text, "%de%d", (int)random_below(100000),
                                           (int)random_below(600) - 300), NULL));
        whorl_real_write(value, text);
        count = digits_of(text, digits, &power);
        if (count == 0) {
            far_ones += value != 0.0;
            continue;
        }
        if (count > 17) {
            long_ones++;
            continue;
        }
        seen[count]++;
        if (count > 1) {
            snprintf(other, sizeof other, "%.*e", (int)count - 2, value);
            long_ones += strtod(other, NULL) == value;
            /* and the two around the value: below a power of two the nearest may miss where the other one reads back */
            snprintf(other, sizeof other, "%.40e", value);
            digits_of(other, nearest, &other_power);
            nearest[count - 1] = '\0';
            around = (uint64_t)strtoull(nearest, NULL, 10);
            other_power -= (int32_t)strlen(nearest);
            snprintf(other, sizeof other, "%" PRIu64 "e%d", around, (int)other_power);
            long_ones += strtod(other, NULL) == fabs(value);
            snprintf(other, sizeof other, "%" PRIu64 "e%d", around + 1, (int)other_power);
            long_ones += strtod(other, NULL) == fabs(value);
        }
        snprintf(other, sizeof other, "%.*e", (int)count - 1, value);
        digits_of(other, nearest, &other_power);
        if (strtod(other, NULL) == value)
            far_ones += strcmp(digits, nearest) != 0 || power != other_power;
    }
    CHECK(long_ones == 0);
    CHECK(far_ones == 0);
    CHECK(seen[1] > 0 && seen[3] > 0 && seen[15] > 0 && seen[16] > 0 && seen[17] > 0);
}

static void test_hard_texts(void)
{
    /* the values from the C library; the ones that matter are published hard cases or stand at a boundary */
    static const char *const text[] = {
        "5e-324", "4.9406564584124654e-324", "2.4703282292062327e-324", "2.4703282292062328e-324",
        "7.4109846876186982e-324", "2.2250738585072011e-308", "2.2250738585072012e-308", "2.2250738585072014e-308",
        "1.7976931348623157e308", "1.7976931348623158e308", "1.7976931348623159e308",
        "179769313486231580793728971405301e276", "9007199254740993", "9007199254740992", "9007199254740994",
        "9007199254740995", "9007199254740993.00000000000000001", "0.1", "0.3", "1e400", "-1e400", "1e-400",
        "-1e-400", "0e99999999999", "0e-99999999999", "1e99999999999999999999999", "1e-99999999999999999999999",
        "00000000000000000000000000000000000000001.5", "0.000000000000000000000000000000012e31", "000.000", ".5",
        "5.", "5.e3", ".5e-3", "+", "-", ".", "+.", "-.e1", "e5", "E5", ".e5", "1e", "1e+", "1e-", "1E+x", "1ex", "",
        "-0", "+0", "-0.0", "-0e5", "+1.5", "-1.5E+2", "1.2.3", "1..2", "--1", "+-1", "1e5.5", "1e+05", "1e005",
        "12abc", "1,5", "123456789012345678901234567890", "8.5e22", "1e22", "1e23", "6.02214076e23",
        "1.00000000000000011102230246251565", "1.00000000000000011102230246251566",
        "1.00000000000000033306690738754696", "3.0e-309"};
    char digits[400];
    double value;
    int i;
    for (i = 0; i < (int)(sizeof text / sizeof text[0]); i++)
        CHECK(reads_like_strtod(text[i]));
    CHECK(whorl_real_read("5e-324", 6, &value) == 6 && bits_of(value) == 1);
    CHECK(whorl_real_read("1.7976931348623159e308", 22, &value) == 22 && bits_of(value) == UINT64_C(0x7ff) << 52);
    CHECK(whorl_real_read("9007199254740993", 16, &value) == 16 && value == 9007199254740992.0);
    CHECK(whorl_real_read("2.2250738585072011e-308", 23, &value) == 23 && bits_of(value) == (UINT64_C(1) << 52) - 1);
    CHECK(whorl_real_read("1e400", 5, &value) == 5 && bits_of(value) == UINT64_C(0x7ff) << 52);
    CHECK(whorl_real_read("-1e-400", 7, &value) == 7 && bits_of(value) == UINT64_C(1) << 63);
    CHECK(whorl_real_read("0e99999999999", 13, &value) == 13 && bits_of(value) == 0);
    CHECK(read_exactly("12345", 3, &value) == 3 && value == 123.0); /* no byte behind the length counts */
    CHECK(read_exactly("1e5", 2, &value) == 1 && value == 1.0);
    CHECK(read_exactly("1e+5", 3, &value) == 1 && value == 1.0);
    CHECK(read_exactly("-1", 1, &value) == 0);
    CHECK(read_exactly("1", 0, &value) == 0);
    CHECK(whorl_real_read(" 1", 2, &value) == 0 && whorl_real_read("inf", 3, &value) == 0);
    CHECK(whorl_real_read("nan", 3, &value) == 0 && whorl_real_read("0x10", 4, &value) == 1 && value == 0.0);
    for (i = -1074; i <= 1023; i++) { /* every power of two, and its neighbours */
        uint64_t bits = i < -1022 ? UINT64_C(1) << (i + 1074) : (uint64_t)(i + 1023) << 52, k;
        for (k = bits - 1; k != bits + 2; k++) {
            int32_t length = whorl_real_write(of_bits(k), digits);
            CHECK(whorl_real_read(digits, (uint64_t)length, &value) == (uint64_t)length && bits_of(value) == k);
            CHECK(bits_of(strtod(digits, NULL)) == k);
            snprintf(digits, sizeof digits, "%.30e", of_bits(k));
            CHECK(reads_like_strtod(digits));
        }
    }
}

static void test_random_texts(void)
{
    static const char letter[] = "0123456789.eE+-059.e";
    char text[64];
    long i, bad = 0, numbers = 0;
    for (i = 0; i < 60000; i++) {
        uint64_t length = random_below(14), k;
        double value;
        for (k = 0; k < length; k++)
            text[k] = letter[random_below(sizeof letter - 1)];
        text[length] = '\0';
        bad += !reads_like_strtod(text);
        numbers += whorl_real_read(text, length, &value) != 0;
    }
    CHECK(bad == 0);
    CHECK(numbers > 10000 && numbers < 60000);
    for (i = 0; i < 60000; i++) { /* up to 24 digits and any exponent */
        uint64_t length = 1 + random_below(24), k;
        for (k = 0; k < length; k++)
            text[k] = (char)('0' + (int)random_below(10));
        snprintf(text + length, sizeof text - length, "e%d", (int)random_below(700) - 360);
        bad += !reads_like_strtod(text);
    }
    CHECK(bad == 0);
}

/*
 * The digits of (2 m + 1) 2^(e-1), which is halfway between the doubles m 2^e and (m + 1) 2^e, by multiplying in base
 * 10^9: times 2, or times 5 and the power of ten e - 1.
 */
static int32_t halfway_digits(uint64_t m, int32_t e, char *digits)
{
    uint32_t limb[160] = {0};
    uint64_t odd = 2 * m + 1;
    int32_t count = 3, left = e - 1 < 0 ? 1 - e : e - 1, i, length = 0;
    limb[0] = (uint32_t)(odd % 1000000000);
    limb[1] = (uint32_t)(odd / 1000000000 % 1000000000);
    limb[2] = (uint32_t)(odd / 1000000000 / 1000000000);
    for (; left > 0; left--) {
        uint64_t carry = 0, factor = e - 1 < 0 ? 5 : 2;
        for (i = 0; i < count; i++) {
            carry += factor * limb[i];
            limb[i] = (uint32_t)(carry % 1000000000);
            carry /= 1000000000;
        }
        if (carry > 0)
            limb[count++] = (uint32_t)carry;
    }
    while (count > 1 && limb[count - 1] == 0)
        count--;
    length = sprintf(digits, "%" PRIu32, limb[count - 1]);
    for (i = count - 1; i-- > 0;)
        length += sprintf(digits + length, "%09" PRIu32, limb[i]);
    return length;
}

static uint64_t read_digits(const char *digits, int32_t power)
{
    char text[1300];
    double value = 0.0;
    int length = snprintf(text, sizeof text, "%se%d", digits, (int)power);
    CHECK(read_exactly(text, (uint64_t)length, &value) == (uint64_t)length);
    CHECK(bits_of(strtod(text, NULL)) == bits_of(value));
    return bits_of(value);
}

/* What halfway texts must read as is known from their making: to even; a little more, up; a little less, down. */
static void test_halfway(void)
{
    char digits[1300];
    int32_t i, longest = 0;
    for (i = 0; i < 1500; i++) {
        uint64_t bits = bits_of(random_double((uint64_t)i % 3)) & (UINT64_MAX >> 1);
        uint64_t field, m;
        int32_t e, power, length, k;
        if (i < 4) /* zero and the least, the last denormal, the greatest (halfway to infinity) */
            bits = i == 0 ? 0 : i == 1 ? 1 : i == 2 ? (UINT64_C(1) << 52) - 1 : (UINT64_C(0x7ff) << 52) - 1;
        field = bits >> 52;
        m = (bits & ((UINT64_C(1) << 52) - 1)) | (field == 0 ? 0 : UINT64_C(1) << 52);
        e = field == 0 ? -1074 : (int32_t)field - 1075;
        power = e - 1 < 0 ? e - 1 : 0;
        length = halfway_digits(m, e, digits);
        if (length > longest)
            longest = length;
        CHECK(read_digits(digits, power) == bits + (bits & 1));
        for (k = length; k < 1099; k++)
            digits[k] = '0';
        digits[1099] = '1'; /* digit 1100 decides */
        digits[1100] = '\0';
        CHECK(read_digits(digits, power - (1100 - length)) == bits + 1);
        for (k = length - 1; digits[k] == '0'; k--)
            digits[k] = '9';
        digits[k]--;
        for (k = length; k < 1100; k++)
            digits[k] = '9';
        CHECK(read_digits(digits, power - (1100 - length)) == bits);
    }
    CHECK(longest > 750);
}

static void test_writing(void)
{
    static const double tie[] = {0.5, 1.5, 2.5, 0.25, 0.375, 0.125, 1e22, 123456.5, 999.5, 9.5, 0.95, 1e-10, 0.0,
                                 5e-324,
                                 1.7976931348623157e308, 0.05, 0.005, 0.5e-6, 1048575.999999999};
    char got[500], want[500];
    int32_t i, n, sign;
    for (i = 0; i < (int32_t)(sizeof tie / sizeof tie[0]); i++)
        for (sign = 0; sign < 2; sign++)
            for (n = 0; n <= 40; n++) {
                double value = sign ? -tie[i] : tie[i];
                int length = snprintf(want, sizeof want, "%.*f", (int)n, value);
                CHECK(whorl_real_write_fixed(value, n, got, sizeof got) == length && strcmp(got, want) == 0);
                if (n == 0)
                    continue;
                snprintf(want, sizeof want, "%.*e", (int)n - 1, value);
                plain_exponent(want);
                CHECK(whorl_real_write_digits(value, n, got, sizeof got) == (int32_t)strlen(want) && strcmp(got,
                    want) == 0);
            }
    CHECK((whorl_real_write(0.1, got), strcmp(got, "0.1") == 0));
    CHECK((whorl_real_write(-0.0, got), strcmp(got, "-0") == 0));
    CHECK((whorl_real_write(100.0, got), strcmp(got, "100") == 0));
    CHECK((whorl_real_write(5e-324, got), strcmp(got, "5e-324") == 0));
    CHECK((whorl_real_write(-1.7976931348623157e308, got), strcmp(got, "-1.7976931348623157e308") == 0));
    CHECK((whorl_real_write(9007199254740993.0, got), strcmp(got, "9007199254740992") == 0));
    for (n = 0; n < 3; n++) { /* the three writers agree on what is not finite */
        double special = of_bits(UINT64_C(0x7ff) << 52 | (n == 0 ? UINT64_C(1) << 51 : n == 1 ? 0 : UINT64_C(1) << 63));
        const char *name = n == 0 ? "nan" : n == 1 ? "inf" : "-inf";
        CHECK(whorl_real_write(special, got) == (int32_t)strlen(name) && strcmp(got, name) == 0);
        CHECK((whorl_real_write_digits(special, 5, got, sizeof got), strcmp(got, name) == 0));
        CHECK((whorl_real_write_fixed(special, 5, got, sizeof got), strcmp(got, name) == 0));
    }
    for (n = 0; n <= 12; n++) { /* too little room: the start of the text, and the length it would have */
        memset(got, '#', sizeof got);
        CHECK(whorl_real_write_digits(-1234.5678, 5, n == 0 ? NULL : got, n) == 9); /* -1.2346e3 */
        CHECK(n == 0 || strncmp(got, "-1.2346e3", (size_t)(n < 10 ? n - 1 : 9)) == 0);
        CHECK(n == 0 || (got[n < 10 ? n - 1 : 9] == '\0' && got[n < 10 ? n : 10] == '#'));
    }
}

/* ---- text and failing -------------------------------------------------------------------------------------------- */

static void write_sample(whorl_text *text)
{
    whorl_text_add(text, "sites ");
    whorl_text_add_unsigned(text, UINT64_MAX);
    whorl_text_add_bytes(text, ", and", 2);
    whorl_text_add_signed(text, INT64_MIN);
    whorl_text_add(text, "");
    whorl_text_add_signed(text, -7);
    whorl_text_add_signed(text, INT64_MAX);
    whorl_text_add_unsigned(text, 0);
    whorl_text_add_real(text, -0.25);
}

static void test_text(void)
{
    static const char whole[] = "sites 18446744073709551615, -9223372036854775808-792233720368547758070-0.25";
    char buffer[128];
    uint64_t room, length = sizeof whole - 1;
    whorl_text text = whorl_text_over(NULL, 0);
    write_sample(&text);
    CHECK(text.used == length);
    for (room = 1; room < sizeof buffer; room++) {
        uint64_t fit = room - 1 < length ? room - 1 : length;
        memset(buffer, '#', sizeof buffer);
        text = whorl_text_over(buffer, room);
        CHECK(buffer[0] == '\0' && text.used == 0);
        write_sample(&text);
        CHECK(text.used == length);
        CHECK(memcmp(buffer, whole, (size_t)fit) == 0 && buffer[fit] == '\0');
        CHECK(buffer[room] == '#');
    }
}

static void test_failing(void)
{
    whorl_host host = whorl_host_default();
    char words[1000];
    int32_t i, j;
    for (i = -11; i <= 2; i++) { /* every status has its own text */
        const char *name = whorl_status_text(i);
        CHECK(name != NULL && name[0] != '\0' && strcmp(name, whorl_status_text(-99)) != 0);
        for (j = -11; j < i; j++)
            CHECK(strcmp(name, whorl_status_text(j)) != 0);
    }
    CHECK(whorl_status_text(-99) != NULL && whorl_status_text(3) != NULL);
    memset(words, 'w', sizeof words);
    words[sizeof words - 1] = '\0';
    host.reason.line = 3;
    host.reason.column = 4;
    host.reason.index = 5;
    CHECK(whorl_fail(&host, WHORL_BAD_TEXT, words) == WHORL_BAD_TEXT);
    CHECK(host.reason.status == WHORL_BAD_TEXT && strlen(host.reason.text) == sizeof host.reason.text - 1);
    CHECK(host.reason.line == 0 && host.reason.column == 0 && host.reason.index == WHORL_NONE);
    CHECK(whorl_fail(&host, WHORL_NO_ROOM, "short") == WHORL_NO_ROOM && strcmp(host.reason.text, "short") == 0);
}

/* ---- random numbers ---------------------------------------------------------------------------------------------- */

static int philox_is(uint64_t seed, uint64_t stream, uint64_t counter, uint32_t a, uint32_t b, uint32_t c, uint32_t d)
{
    whorl_random_block block = whorl_random_words(seed, stream, counter);
    return block.word[0] == a && block.word[1] == b && block.word[2] == c && block.word[3] == d &&
           whorl_random_bits(seed, stream, counter) == ((uint64_t)b << 32 | a);
}

/* Known answers of Philox 4x32-10 (Salmon, Moraes, Dror, Shaw, SC11, 2011; their vectors, from memory). */
static void test_philox(void)
{
    CHECK(philox_is(0, 0, 0, 0x6627e8d5u, 0xe169c58du, 0xbc57ac4cu, 0x9b00dbd8u));
    CHECK(philox_is(UINT64_MAX, UINT64_MAX, UINT64_MAX, 0x408f276du, 0x41c83b0eu, 0xa20bc7c6u, 0x6d5451fdu));
    CHECK(philox_is(UINT64_C(0x299f31d0a4093822), UINT64_C(0x0370734413198a2e), UINT64_C(0x85a308d3243f6a88),
                    0xd16cfe09u,
                    0x94fdccebu, 0x5001e420u, 0x24126ea1u));
}

/* Moments within five standard errors of their exact values. */
static void test_moments(void)
{
    const int64_t n = 100000;
    /* E u^k = 1/(k+1); sum of twelve uniforms: E x^2 = 1, x^4 = 2.9, by its cumulants 1, -1/10, 1/21, -1/20 */
    const double k6 = 12.0 / 252.0, k8 = -12.0 / 240.0, x6 = k6 + 15.0 * -0.1 + 15.0;
    const double x8 = k8 + 28.0 * k6 + 35.0 * 0.01 + 210.0 * -0.1 + 105.0;
    double u[4] = {0.0, 0.0, 0.0, 0.0}, x[4] = {0.0, 0.0, 0.0,
                                                0.0}, along = 0.0, across = 0.0, chi = 0.0, root = sqrt((double)n);
    double least = 1.0, most = 0.0;
    int64_t bin[64] = {0}, i, k;
    for (i = 0; i < n; i++) {
        double a = whorl_random_uniform(11, 22, (uint64_t)i), b = whorl_random_normal(11, 23,
            (uint64_t)i), pa = 1.0, pb = 1.0;
        double sum = 0.0;
        for (k = 0; k < 4; k++) {
            u[k] += pa *= a;
            x[k] += pb *= b;
        }
        along += (a - 0.5) * (whorl_random_uniform(11, 22, (uint64_t)i + 1) - 0.5);
        across += (a - 0.5) * (whorl_random_uniform(11, 24, (uint64_t)i) - 0.5);
        least = a < least ? a : least;
        most = a > most ? a : most;
        bin[(int)(a * 64.0)]++;
        if (i < 1000) { /* by their definitions */
            for (k = 0; k < 12; k++)
                sum += whorl_random_uniform(11, 23, (uint64_t)(12 * i + k));
            CHECK_NEAR(b, sum - 6.0, 1e-14, "normal from twelve uniforms");
            CHECK(a == (double)(whorl_random_bits(11, 22, (uint64_t)i) >> 11) / 9007199254740992.0);
        }
    }
    CHECK(least >= 0.0 && most < 1.0);
    for (k = 0; k < 4; k++) {
        double p = (double)(k + 1), spread = sqrt(1.0 / (2.0 * p + 1.0) - 1.0 / ((p + 1.0) * (p + 1.0)));
        CHECK_NEAR(u[k] / (double)n, 1.0 / (p + 1.0), 5.0 * spread / root, "moment of uniform numbers");
    }
    CHECK_NEAR(x[0] / (double)n, 0.0, 5.0 / root, "mean of normal numbers");
    CHECK_NEAR(x[1] / (double)n, 1.0, 5.0 * sqrt(1.9) / root, "variance of normal numbers");
    CHECK_NEAR(x[2] / (double)n, 0.0, 5.0 * sqrt(x6) / root, "third moment of normal numbers");
    CHECK_NEAR(x[3] / (double)n, 2.9, 5.0 * sqrt(x8 - 2.9 * 2.9) / root, "fourth moment of normal numbers");
    CHECK_NEAR(along / (double)n, 0.0, 5.0 / 12.0 / root, "correlation along counters");
    CHECK_NEAR(across / (double)n, 0.0, 5.0 / 12.0 / root, "correlation across streams");
    for (k = 0; k < 64; k++)
        chi += ((double)bin[k] - (double)n / 64.0) * ((double)bin[k] - (double)n / 64.0) / ((double)n / 64.0);
    CHECK_NEAR(chi, 63.0, 5.0 * sqrt(126.0), "chi square of 64 bins");
}

/* ---- sort -------------------------------------------------------------------------------------------------------- */

static size_t element_size;
static uint64_t comparisons;
static int order_bytes(const void *a, const void *b) { return memcmp(a, b, element_size); }
static int32_t count_order_bytes(const void *a, const void *b)
{
    comparisons++;
    return (int32_t)memcmp(a, b, element_size);
}
static int order_states(const void *a, const void *b)
{
    uint64_t left = *(const uint64_t *)a, right = *(const uint64_t *)b;
    return (left > right) - (left < right);
}

static uint64_t key_of(int shape, uint64_t i, uint64_t count)
{
    switch (shape) {
    case 0: return i;
    case 1: return count - i;
    case 2: return 42;
    case 3: return i < count / 2 ? i : count - i;
    case 4: return random_below(10);
    default: return random_word();
    }
}

static void test_sort(void)
{
    static const uint64_t counts[] = {0, 1, 2, 3, 4, 5, 7, 8, 100, 1000, 4096};
    static const size_t sizes[] = {1, 3, 8, 12, 63, 64};
    static uint64_t states[4097], want_states[4096];
    static unsigned char bytes[4096 * 64 + 1], want[4096 * 64];
    int shape, c, s;
    for (shape = 0; shape < 6; shape++)
        for (c = 0; c < 11; c++) {
            uint64_t count = counts[c], i, depth = 1;
            while (count >> depth != 0)
                depth++;
            for (i = 0; i < count; i++)
                want_states[i] = states[i] = key_of(shape, i, count);
            states[count] = 99;
            whorl_sort_states(states, count);
            qsort(want_states, (size_t)count, 8, order_states);
            CHECK(memcmp(states, want_states, 8 * (size_t)count) == 0 && states[count] == 99);
            for (s = 0; s < 6; s++) {
                size_t k, all = (size_t)count * sizes[s];
                element_size = sizes[s];
                for (i = 0; i < count; i++) {
                    uint64_t key = key_of(shape, i, count);
                    for (k = 0; k < element_size; k++) /* the highest byte first, so that memcmp orders like numbers */
                        bytes[i * element_size + k] = (unsigned char)(key >> 8 * ((element_size - 1 - k) % 8));
                }
                memcpy(want, bytes, all);
                bytes[all] = 99;
                comparisons = 0;
                whorl_sort(bytes, count, element_size, count_order_bytes);
                qsort(want, (size_t)count, element_size, order_bytes);
                CHECK(memcmp(bytes, want, all) == 0 && bytes[all] == 99);
                CHECK(comparisons <= 3 * count * depth);
            }
        }
}

/* ---- bits, binomials, sizes, numbers ----------------------------------------------------------------------------- */

static void check_bits(uint64_t word, uint64_t mask)
{
    int32_t count = 0, lowest = 64, highest = -1, bit, packed = 0;
    uint64_t gathered = 0, scattered = 0;
    for (bit = 0; bit < 64; bit++) {
        if ((word >> bit & 1) != 0) {
            count++;
            highest = bit;
            if (lowest == 64)
                lowest = bit;
        }
        if ((mask >> bit & 1) != 0) {
            gathered |= (word >> bit & 1) << packed;
            scattered |= (word >> packed & 1) << bit;
            packed++;
        }
    }
    CHECK(whorl_bits_count(word) == count);
    CHECK(whorl_bits_parity(word) == count % 2);
    CHECK(whorl_bits_lowest(word) == lowest);
    CHECK(whorl_bits_highest(word) == highest);
    CHECK(whorl_bits_gather(word, mask) == gathered);
    CHECK(whorl_bits_scatter(word, mask) == scattered);
    CHECK(whorl_bits_scatter(gathered, mask) == (word & mask));
    CHECK(whorl_bits_gather(scattered, mask) == (word & whorl_bits_low(packed)));
}

static void test_bits(void)
{
    static const uint64_t edge[] = {0, 1, UINT64_MAX, UINT64_C(1) << 63, UINT64_C(0x8000000000000001),
                                    UINT64_C(0xffffffff),
                                    UINT64_C(0xffffffff00000000), UINT64_C(0x5555555555555555), UINT64_MAX >> 1};
    uint64_t low = 0;
    int32_t i, j;
    for (i = 0; i < 9; i++)
        for (j = 0; j < 9; j++)
            check_bits(edge[i], edge[j]);
    for (i = 0; i < 20000; i++)
        check_bits(i % 2 == 0 ? random_word() : random_word() & random_word() & random_word(),
                   random_word() >> random_below(64));
    for (i = 0; i <= 64; i++) {
        CHECK(whorl_bits_low(i) == low);
        low = low << 1 | 1;
    }
}

static void test_binomials(void)
{
    uint64_t row[301] = {0}; /* Pascal's triangle; UINT64_MAX for what does not fit below it */
    int32_t n, k;
    row[0] = 1;
    for (n = 0; n <= 300; n++) {
        for (k = 0; k <= n; k++)
            CHECK(whorl_binomial(n, k) == row[k]);
        CHECK(whorl_binomial(n, -1) == 0 && whorl_binomial(n, n + 1) == 0);
        CHECK(n > 67 || row[n / 2] != UINT64_MAX);
        CHECK(n < 68 || row[n / 2] == UINT64_MAX);
        for (k = n < 300 ? n + 1 : 300; k > 0; k--)
            row[k] = row[k] > UINT64_MAX - row[k - 1] ? UINT64_MAX : row[k] + row[k - 1];
    }
    CHECK(whorl_binomial(64, 32) == UINT64_C(1832624140942590534)); /* common knowledge, OEIS A000984 */
    CHECK(whorl_binomial(INT32_MAX, 2) == UINT64_C(2147483647) * 1073741823);
    CHECK(whorl_binomial(INT32_MAX, 3) == UINT64_MAX && whorl_binomial(INT32_MAX, 1 << 30) == UINT64_MAX);
    CHECK(whorl_binomial(INT32_MAX, INT32_MAX - 1) == UINT64_C(2147483647) && whorl_binomial(INT32_MAX,
                                                                                             INT32_MAX) == 1);
    CHECK(whorl_binomial(-1, 0) == 0);
}

static void test_sizes(void)
{
    const uint64_t most = UINT64_MAX, half = UINT64_C(1) << 32;
    CHECK(whorl_size_multiply(0, most) == 0 && whorl_size_multiply(most, 0) == 0);
    CHECK(whorl_size_multiply(1, most) == most && whorl_size_multiply(2, most) == most);
    CHECK(whorl_size_multiply(half, half) == most && whorl_size_multiply(half, half - 1) == half * (half - 1));
    CHECK(whorl_size_multiply(most / 3, 3) == most / 3 * 3 && whorl_size_multiply(most / 3 + 1, 3) == most);
    CHECK(whorl_size_add(most, 0) == most && whorl_size_add(most, 1) == most && whorl_size_add(most, most) == most);
    CHECK(whorl_size_add(most - 5, 4) == most - 1 && whorl_size_add(half, half) == 2 * half);
}

static void test_numbers(void)
{
    const uint64_t infinite = UINT64_C(0x7ff) << 52, sign = UINT64_C(1) << 63;
    int32_t i;
    CHECK(whorl_arithmetic() == 0);
    for (i = 0; i < 52; i++)
        CHECK(!whorl_is_finite(of_bits(infinite | UINT64_C(1) << i)) &&
              !whorl_is_finite(of_bits(sign | infinite | UINT64_C(1) << i)));
    CHECK(!whorl_is_finite(of_bits(infinite)) && !whorl_is_finite(of_bits(sign | infinite)));
    CHECK(whorl_is_finite(of_bits(infinite - 1)) && whorl_is_finite(of_bits(sign | (infinite - 1))));
    CHECK(whorl_is_finite(0.0) && whorl_is_finite(-0.0) && whorl_is_finite(of_bits(1)) && whorl_is_finite(1.0));
    CHECK(whorl_element_bytes(WHORL_REAL_DOUBLE) == 8 && whorl_element_bytes(WHORL_COMPLEX_DOUBLE) == 16);
    CHECK(whorl_element_bytes(WHORL_REAL_FLOAT) == 4 && whorl_element_bytes(WHORL_COMPLEX_FLOAT) == 8);
    CHECK(whorl_element_bytes(0) == 0 && whorl_element_bytes(5) == 0 && whorl_element_bytes(-1) == 0);
    CHECK(same_complex(whorl_complex_multiply(whorl_complex_of(1.0, 2.0), whorl_complex_of(3.0, -5.0)),
                       whorl_complex_of(13.0, 1.0)));
}

/* ---- memory ------------------------------------------------------------------------------------------------------ */

typedef struct pieces {
    char *a;
    double *b;
    uint64_t *c;
    char *d;
} pieces;
static void lay_out(whorl_layout *layout, pieces *p, uint64_t n)
{
    p->a = (char *)whorl_layout_carve(layout, n, 1);
    p->b = (double *)whorl_layout_carve(layout, 3 * n, 8);
    p->c = (uint64_t *)whorl_layout_carve(layout, 0, 8);
    p->d = (char *)whorl_layout_carve(layout, n, 24);
}

static void test_layout(void)
{
    check_memory memory;
    whorl_host host = check_host(&memory);
    uint64_t n;
    for (n = 0; n < 200; n++) {
        whorl_layout layout = {NULL, 0};
        whorl_block block;
        pieces p;
        uint64_t measured;
        lay_out(&layout, &p, n);
        CHECK(p.a == NULL && p.b == NULL && p.c == NULL && p.d == NULL);
        measured = layout.bytes;
        CHECK(measured % 64 == 0 && measured >= 49 * n && measured < 49 * n + 3 * 64);
        CHECK_STATUS(whorl_layout_take(&host, &layout, &block), WHORL_OK, &host);
        CHECK(layout.bytes == 0 && layout.base == block.at && host.bytes_used == whorl_block_bytes(measured));
        lay_out(&layout, &p, n);
        CHECK(layout.bytes == measured);
        CHECK((((uintptr_t)p.a | (uintptr_t)p.b | (uintptr_t)p.c | (uintptr_t)p.d) & 63) == 0);
        CHECK((char *)p.b >= p.a + n && (char *)p.c >= (char *)(p.b + 3 * n) && p.d >= (char *)p.c);
        CHECK(p.d + 24 * n <= (char *)block.start + block.taken); /* the hook's block holds all of it */
        memset(p.a, 1, (size_t)n);
        memset(p.b, 2, (size_t)(24 * n));
        memset(p.d, 3, (size_t)(24 * n));
        CHECK(n == 0 || (p.a[n - 1] == 1 && p.d[24 * n - 1] == 3));
        whorl_block_give(&host, &block);
        CHECK(block.start == NULL && memory.live_blocks == 0 && host.bytes_used == 0);
    }
    {
        static const uint64_t count[] = {UINT64_C(1) << 61, UINT64_MAX, UINT64_MAX / 8, UINT64_MAX / 8 - 7};
        int k;
        for (k = 0; k < 4; k++) {
            whorl_layout layout = {NULL, 0};
            whorl_block block;
            whorl_layout_carve(&layout, 10, 8);
            whorl_layout_carve(&layout, count[k], 8);
            whorl_layout_carve(&layout, 10, 8);
            CHECK(layout.bytes == UINT64_MAX);
            memory.calls = 0;
            CHECK_STATUS(whorl_layout_take(&host, &layout, &block), WHORL_TOO_LARGE, &host);
            CHECK(block.start == NULL && memory.calls == 0);
        }
    }
}

static void test_limit(void)
{
    static const uint64_t payload[] = {0, 1, 63, 64, 65, 1000, 4096};
    int k;
    for (k = 0; k < 7; k++) {
        check_memory memory;
        whorl_host host = check_host(&memory);
        whorl_block first, second;
        uint64_t bytes = whorl_block_bytes(payload[k]);
        const char *figure;
        CHECK(bytes == (payload[k] + 63) / 64 * 64 + 64);
        CHECK_STATUS(whorl_block_take(&host, 100, &first), WHORL_OK, &host); /* some is in use already */
        CHECK(host.bytes_used == 192);
        host.byte_limit = 192 + bytes - 1;
        memory.calls = 0;
        CHECK_STATUS(whorl_block_take(&host, payload[k], &second), WHORL_OVER_LIMIT, &host);
        CHECK(second.start == NULL && second.bytes == 0 && memory.calls == 0 && host.bytes_used == 192);
        figure = strstr(host.reason.text, "at least ");
        CHECK(figure != NULL && host.reason.status == WHORL_OVER_LIMIT);
        host.byte_limit = figure == NULL ? 1 : (uint64_t)strtoull(figure + 9, NULL, 10);
        CHECK(host.byte_limit == 192 + bytes);
        CHECK_STATUS(whorl_block_take(&host, payload[k], &second), WHORL_OK, &host);
        if (second.start == NULL)
            return;
        CHECK(host.bytes_used == host.byte_limit && host.bytes_peak == host.byte_limit && host.takes == 2);
        CHECK(((uintptr_t)second.at & 63) == 0 && second.at >= (char *)second.start);
        CHECK(second.at + payload[k] <= (char *)second.start + second.taken);
        memset(second.at, 7, (size_t)payload[k]);
        whorl_block_give(&host, &first);
        whorl_block_give(&host, &first); /* twice is legal: the first made it zero */
        whorl_block_give(&host, &second);
        CHECK(host.bytes_used == 0 && memory.live_blocks == 0 && memory.live_bytes == 0);
        host.byte_limit = 1; /* a limit below what is in use */
        CHECK_STATUS(whorl_block_take(&host, payload[k], &second), WHORL_OVER_LIMIT, &host);
    }
}

static void test_huge(void)
{
    static const uint64_t payload[] = {UINT64_MAX, UINT64_MAX - 1, UINT64_MAX - 63, UINT64_MAX - 127, UINT64_MAX - 128,
                                       UINT64_C(1) << 63, UINT64_C(1) << 62};
    check_memory memory;
    whorl_host host = check_host(&memory);
    int k;
    for (k = 0; k < 7; k++) {
        whorl_block block;
        memset(&block, 0x5A, sizeof block);
        CHECK_STATUS(whorl_block_take(&host, payload[k], &block), WHORL_TOO_LARGE, &host);
        CHECK(block.start == NULL && block.at == NULL && block.bytes == 0 && memory.calls == 0 && host.bytes_used == 0);
    }
    CHECK(whorl_block_bytes(UINT64_MAX) == UINT64_MAX && whorl_block_bytes(UINT64_MAX - 63) == UINT64_MAX);
}

static whorl_status take_three(whorl_host *host, void *argument)
{
    whorl_block block[3] = {{NULL, 0, NULL, 0}, {NULL, 0, NULL, 0}, {NULL, 0, NULL, 0}};
    whorl_status status = WHORL_OK;
    int k;
    (void)argument;
    for (k = 0; k < 3 && status == WHORL_OK; k++) {
        status = whorl_block_take(host, 100, &block[k]);
        CHECK(status == WHORL_OK || (block[k].start == NULL && host->reason.text[0] != '\0'));
    }
    for (k = 0; k < 3; k++)
        whorl_block_give(host, &block[k]);
    return status;
}

static void test_allocations(void) { check_every_allocation(take_three, NULL, WHORL_OK); }

static void test_arena(void)
{
    static char memory[8192];
    char *base = memory + ((64 - ((uintptr_t)memory & 63)) & 63);
    static const int order[6][3] = {{0, 1, 2}, {0, 2, 1}, {1, 0, 2}, {1, 2, 0}, {2, 0, 1}, {2, 1, 0}};
    uint64_t size, shift;
    int k, i;
    for (size = 0; size <= 300; size += 25) {
        uint64_t announced = 3 * whorl_block_bytes(size);
        for (shift = 0; shift < 64; shift += 9)
            for (k = 0; k < 6; k++) {
                whorl_arena arena;
                whorl_host host = whorl_host_default();
                whorl_block block[3], more;
                char *highest = base + shift;
                /* an aligned base needs what is announced and no byte more; another one what aligning it costs */
                uint64_t room = announced + (shift == 0 ? 0 : 64 - shift);
                int round;
                whorl_arena_make(&arena, base + shift, room);
                whorl_arena_use(&arena, &host);
                for (round = 0; round < 2; round++) { /* the second time over what has been given back */
                    for (i = 0; i < 3; i++) {
                        CHECK_STATUS(whorl_block_take(&host, size, &block[i]), WHORL_OK, &host);
                        if (block[i].start == NULL)
                            return;
                        CHECK(((uintptr_t)block[i].at & 63) == 0 && block[i].at >= highest);
                        highest = block[i].at + size;
                        memset(block[i].at, 'a' + i, (size_t)size);
                    }
                    CHECK(highest <= base + shift + room);
                    CHECK_STATUS(whorl_block_take(&host, 0, &more), WHORL_NO_MEMORY, &host);
                    for (i = 0; i < 3; i++)
                        CHECK(size == 0 || (block[i].at[0] == 'a' + i && block[i].at[size - 1] == 'a' + i));
                    for (i = 0; i < 3; i++)
                        whorl_block_give(&host, &block[order[k][i]]);
                    CHECK(arena.top == 0 && arena.last == WHORL_NONE && host.bytes_used == 0 &&
                          arena.peak == announced);
                    highest = base + shift;
                }
                for (i = 0; i < 3; i++) /* the topmost given back alone is free again at once */
                    CHECK_STATUS(whorl_block_take(&host, size, &block[i]), WHORL_OK, &host);
                whorl_block_give(&host, &block[2]);
                CHECK_STATUS(whorl_block_take(&host, size, &block[2]), WHORL_OK, &host);
                whorl_arena_make(&arena, base + shift, room - 1); /* one byte less */
                host.bytes_used = 0;
                CHECK_STATUS(whorl_block_take(&host, size, &block[0]), WHORL_OK, &host);
                CHECK_STATUS(whorl_block_take(&host, size, &block[1]), WHORL_OK, &host);
                CHECK_STATUS(whorl_block_take(&host, size, &block[2]), WHORL_NO_MEMORY, &host);
                CHECK(block[2].start == NULL);
            }
    }
    for (k = 0; k < 3; k++) { /* no room at all */
        whorl_arena arena;
        whorl_host host = whorl_host_default();
        whorl_block block;
        whorl_arena_make(&arena, k == 0 ? NULL : base + 1, k == 0 ? 1000 : k == 1 ? 0 : 62);
        whorl_arena_use(&arena, &host);
        CHECK_STATUS(whorl_block_take(&host, 0, &block), WHORL_NO_MEMORY, &host);
    }
}

/* ---- runs -------------------------------------------------------------------------------------------------------- */

#define MOST_BLOCKS 1000
typedef struct run_record {
    pthread_mutex_t lock;
    int32_t workers;
    int ran[MOST_BLOCKS], busy[8];
    int wrong_worker, shared_worker;
    uint64_t done, done_at_poll, most_between, polls, cancel_at, updates;
    const char *stage;
} run_record;

static void run_body(void *argument, uint64_t block, int32_t worker)
{
    run_record *record = (run_record *)argument;
    volatile int spin = 0;
    pthread_mutex_lock(&record->lock);
    if (worker < 0 || worker >= record->workers)
        record->wrong_worker++;
    else
        record->shared_worker += record->busy[worker]++;
    record->ran[block]++;
    record->done++;
    pthread_mutex_unlock(&record->lock);
    while (spin < 200)
        spin = spin + 1;
    pthread_mutex_lock(&record->lock);
    if (worker >= 0 && worker < record->workers)
        record->busy[worker]--;
    pthread_mutex_unlock(&record->lock);
}

static int32_t run_poll(void *context, const whorl_progress *progress)
{
    run_record *record = (run_record *)context;
    uint64_t between = record->done - record->done_at_poll;
    record->done_at_poll = record->done;
    if (between > record->most_between)
        record->most_between = between;
    record->stage = progress->stage;
    return ++record->polls == record->cancel_at;
}

static void check_blocks(whorl_run_function run, int32_t threads, uint64_t blocks, uint64_t updates,
                         uint64_t cancel_at, int polled)
{
    static run_record record;
    const uint64_t most = UINT64_C(1) << 24, batch = updates > most ? 1 : most / (updates == 0 ? 1 : updates);
    whorl_host host = whorl_host_default();
    whorl_status status;
    uint64_t k, wrong = 0;
    memset(&record, 0, sizeof record);
    pthread_mutex_init(&record.lock, NULL);
    record.workers = threads;
    record.cancel_at = cancel_at;
    host.threads = threads;
    host.run = run;
    if (polled) {
        host.poll = run_poll;
        host.poll_context = &record;
    }
    whorl_stage(&host, "counting blocks", 0, blocks);
    status = whorl_run(&host, run_body, &record, blocks, updates);
    if (status == WHORL_OK) {
        for (k = 0; k < MOST_BLOCKS; k++)
            wrong += record.ran[k] != (k < blocks);
        CHECK(record.done == blocks && wrong == 0);
        CHECK(!polled || record.polls == (blocks + batch - 1) / batch);
    } else {
        CHECK(status == WHORL_CANCELLED && host.reason.status == WHORL_CANCELLED && host.reason.text[0] != '\0');
        CHECK(record.polls == cancel_at && record.done == (cancel_at - 1) * batch);
    }
    if (record.done - record.done_at_poll > record.most_between)
        record.most_between = record.done - record.done_at_poll;
    CHECK(record.wrong_worker == 0 && record.shared_worker == 0);
    CHECK(!polled || record.most_between <= batch);
    CHECK(!polled || blocks == 0 || (record.stage != NULL && strcmp(record.stage, "counting blocks") == 0));
    CHECK((cancel_at != 0) == (status == WHORL_CANCELLED));
    pthread_mutex_destroy(&record.lock);
}

static void test_run(void)
{
    static const uint64_t counts[] = {0, 1, 2, 3, 17, 1000};
    static const uint64_t updates[] = {0, 1, 1u << 20, 3000000, 1u << 24, (1u << 24) + 1, UINT64_MAX};
    int32_t threads;
    int c, u, hook;
    for (hook = 0; hook < 3; hook++)
        for (threads = 1; threads <= 4; threads++) {
            whorl_run_function run = hook == 0 ? whorl_run_openmp : hook == 1 ? check_pthread_run : NULL;
            for (c = 0; c < 6; c++) {
                check_blocks(run, threads, counts[c], 1, 0, 0);
                for (u = 0; u < 7; u++)
                    if (counts[c] < 1000 || u < 3)
                        check_blocks(run, threads, counts[c], updates[u], 0, 1);
            }
            for (u = 1; u <= 5; u++)
                check_blocks(run, threads, 50, 1u << 20, u < 5 ? (uint64_t)u : 0,
                             1); /* 50 blocks make 4 batches of 16 */
        }
}

static void test_workers(void)
{
    whorl_host host = whorl_host_default();
    static const int32_t threads[] = {INT32_MIN, -1, 0, 1, 2, 256, 257, INT32_MAX}, want[] = {1, 1, 1, 1, 2, 256, 256,
                                      256};
    int k;
    for (k = 0; k < 8; k++) {
        host.threads = threads[k];
        CHECK(whorl_workers(&host) == want[k]);
    }
    CHECK_STATUS(whorl_poll(&host), WHORL_OK, &host); /* no hook: never cancelled */
}

/* ---- sums -------------------------------------------------------------------------------------------------------- */

#define LONGEST 3000
static const uint64_t lengths[] = {0, 1, 2, 7, 8, 9, 127, 128, 129, 255, 256, 257, 1000, 1024, LONGEST};
#define LENGTHS ((int)(sizeof lengths / sizeof lengths[0]))

/* A vector of LONGEST elements of one type at `shift` reals behind a 64-aligned place, from the same numbers always. */
static void *fill_vector(char *room, whorl_element element, uint64_t shift, uint64_t seed)
{
    char *at = room + ((64 - ((uintptr_t)room & 63)) & 63);
    uint64_t i, reals = whorl_element_is_complex(element) ? 2 * LONGEST : LONGEST;
    random_state = seed;
    for (i = 0; i < reals; i++) {
        double value = random_real() * (double)(1u << random_below(12));
        if (whorl_element_is_float(element))
            ((float *)(void *)at)[shift + i] = (float)value;
        else
            ((double *)(void *)at)[shift + i] = value;
    }
    return at + shift * (whorl_element_is_float(element) ? 4 : 8);
}

static whorl_complex element_at(whorl_element element, const void *x, uint64_t i)
{
    switch (element) {
    case WHORL_REAL_DOUBLE: return whorl_complex_of(((const double *)x)[i], 0.0);
    case WHORL_COMPLEX_DOUBLE: return whorl_complex_of(((const double *)x)[2 * i], ((const double *)x)[2 * i + 1]);
    case WHORL_REAL_FLOAT: return whorl_complex_of((double)((const float *)x)[i], 0.0);
    default: return whorl_complex_of((double)((const float *)x)[2 * i], (double)((const float *)x)[2 * i + 1]);
    }
}

/* The documented tree, top down: split at the greatest power of two of leaves below their number. */
static whorl_complex tree_judge(const whorl_complex *leaf, uint64_t leaves)
{
    uint64_t half = 1;
    whorl_complex left, right;
    if (leaves == 1)
        return leaf[0];
    while (2 * half < leaves)
        half *= 2;
    left = tree_judge(leaf, half);
    right = tree_judge(leaf + half, leaves - half);
    return whorl_complex_of(left.re + right.re, left.im + right.im);
}

static void test_dot(void)
{
    static char x_room[16 * LONGEST + 256], y_room[16 * LONGEST + 256];
    whorl_element element;
    for (element = WHORL_REAL_DOUBLE; element <= WHORL_COMPLEX_FLOAT; element++) {
        uint64_t bytes = whorl_element_bytes(element), shift, block, i;
        whorl_complex kept[LENGTHS];
        int k;
        for (shift = 0; shift < 8; shift++) {
            const char *x = (const char *)fill_vector(x_room, element, shift, 5);
            const char *y = (const char *)fill_vector(y_room, element, (3 * shift + 1) % 8, 6);
            for (k = 0; k < LENGTHS; k++) {
                uint64_t n = lengths[k], leaves = (n + WHORL_LEAF - 1) / WHORL_LEAF, levels = 0;
                whorl_complex got = whorl_dot(element, x, y, n), leaf[LONGEST / WHORL_LEAF + 1];
                long double re = 0.0L, im = 0.0L, size_re = 0.0L, size_im = 0.0L;
                double unit = 1.0 / 9007199254740992.0;
                if (shift == 0)
                    kept[k] = got;
                CHECK(same_complex(got, kept[k])); /* any alignment */
                for (i = 0; i < n; i++) { /* conj(x) y */
                    whorl_complex a = element_at(element, x, i), b = element_at(element, y, i);
                    re += (long double)a.re * b.re + (long double)a.im * b.im;
                    im += (long double)a.re * b.im - (long double)a.im * b.re;
                    size_re += fabsl((long double)a.re * b.re) + fabsl((long double)a.im * b.im);
                    size_im += fabsl((long double)a.re * b.im) + fabsl((long double)a.im * b.re);
                }
                while ((UINT64_C(1) << levels) < leaves)
                    levels++;
                /* a term passes at most 2 roundings, 16 sums in its lane, 3 of lanes, the levels (Higham, ch. 4) */
                unit *= (double)(22 + levels);
                CHECK_NEAR(got.re, (double)re, unit * (double)size_re, "real part of the product");
                CHECK_NEAR(got.im, (double)im, unit * (double)size_im, "imaginary part of the product");
                CHECK(n > 0 || (got.re == 0.0 && got.im == 0.0));
                CHECK(whorl_element_is_complex(element) || got.im == 0.0);
                for (i = 0; i < leaves; i++)
                    leaf[i] = whorl_leaf_dot(element, x + i * WHORL_LEAF * bytes, y + i * WHORL_LEAF * bytes,
                                             n - i * WHORL_LEAF < WHORL_LEAF ? n - i * WHORL_LEAF : WHORL_LEAF);
                CHECK(leaves == 0 || same_complex(got, tree_judge(leaf, leaves)));
                for (block = WHORL_LEAF; block <= 2048; block *= 2) { /* blocks of 1, 2, 4, ... leaves combined */
                    whorl_tree tree;
                    whorl_tree_clear(&tree);
                    for (i = 0; i < n; i += block)
                        whorl_tree_add(&tree, whorl_dot(element, x + i * bytes, y + i * bytes,
                                                        n - i < block ? n - i : block));
                    CHECK(same_complex(whorl_tree_total(&tree), got));
                }
                if (n > 0) { /* <y, x> is the conjugate: same products, the imaginary ones negated */
                    whorl_complex turned = whorl_dot(element, y, x, n);
                    CHECK(turned.re == got.re && turned.im == -got.im);
                }
            }
        }
    }
    {
        const double i_unit[2] = {0.0, 1.0}, one[2] = {1.0, 0.0}; /* <i, 1> = -i, <1, i> = i */
        CHECK(whorl_dot(WHORL_COMPLEX_DOUBLE, i_unit, one, 1).im == -1.0 && whorl_dot(WHORL_COMPLEX_DOUBLE, one,
                                                                                      i_unit, 1).im == 1.0);
    }
}

/* Lanes of a leaf as documented, for a vector of doubles times ones. */
static whorl_complex leaf_judge(const double *x, uint64_t count)
{
    double lane[8] = {0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0};
    uint64_t i;
    for (i = 0; i < count; i++)
        lane[i % 8] += x[i];
    return whorl_complex_of(((lane[0] + lane[4]) + (lane[2] + lane[6])) + ((lane[1] + lane[5]) + (lane[3] + lane[7])),
                            0.0);
}

static void test_sum(void)
{
    static char room[16 * LONGEST + 256];
    static double ones[LONGEST];
    uint64_t shift, i;
    int k, trial, careless_differs = 0;
    double kept[LENGTHS];
    for (i = 0; i < LONGEST; i++)
        ones[i] = 1.0;
    for (shift = 0; shift < 8; shift++) {
        const double *x = (const double *)fill_vector(room, WHORL_REAL_DOUBLE, shift, 9);
        for (k = 0; k < LENGTHS; k++) {
            uint64_t n = lengths[k], leaves = (n + WHORL_LEAF - 1) / WHORL_LEAF;
            double got = whorl_sum_reals(x, n), size = 0.0;
            whorl_complex leaf[LONGEST / WHORL_LEAF + 1];
            long double sum = 0.0L;
            if (shift == 0)
                kept[k] = got;
            CHECK(bits_of(got) == bits_of(kept[k]));
            for (i = 0; i < n; i++) {
                sum += x[i];
                size += fabs(x[i]);
            }
            for (i = 0; i < leaves; i++)
                leaf[i] = leaf_judge(x + i * WHORL_LEAF,
                                     n - i * WHORL_LEAF < WHORL_LEAF ? n - i * WHORL_LEAF : WHORL_LEAF);
            CHECK_NEAR(got, (double)sum, 26.0 / 9007199254740992.0 * size, "sum of reals");
            CHECK(bits_of(got) == bits_of(leaves == 0 ? 0.0 : tree_judge(leaf, leaves).re));
            CHECK(bits_of(got) == bits_of(whorl_dot(WHORL_REAL_DOUBLE, x, ones, n).re));
        }
    }
    /* what the tree is for: adding up one running sum per worker gives other bits when the workers are others */
    for (trial = 0; trial < 100; trial++) {
        const double *x = (const double *)fill_vector(room, WHORL_REAL_DOUBLE, 0, (uint64_t)(1000 + trial));
        double careless[3];
        int workers;
        for (workers = 1; workers <= 3; workers++) {
            double part[3] = {0.0, 0.0, 0.0};
            for (i = 0; i < LONGEST; i++)
                part[i * (uint64_t)workers / LONGEST] += x[i];
            careless[workers - 1] = part[0] + part[1] + part[2];
        }
        careless_differs += careless[0] != careless[1] || careless[0] != careless[2];
        careless_differs += careless[0] != whorl_sum_reals(x, LONGEST);
    }
    CHECK(careless_differs > 0);
}

/* A tree counts up to many leaves, and each count is the documented tree. */
static void test_tree(void)
{
    static whorl_complex leaf[600];
    whorl_tree tree;
    uint64_t n;
    whorl_tree_clear(&tree);
    CHECK(same_complex(whorl_tree_total(&tree), whorl_complex_of(0.0, 0.0)));
    for (n = 0; n < 600; n++) {
        leaf[n] = whorl_complex_of(random_real(), random_real() * 1e3);
        whorl_tree_add(&tree, leaf[n]);
        CHECK(tree.count == n + 1 && same_complex(whorl_tree_total(&tree), tree_judge(leaf, n + 1)));
    }
}

int main(void)
{
    check_begin("test_core");
    check_run("random patterns", test_random_patterns);
    check_run("shortest", test_shortest);
    check_run("hard texts", test_hard_texts);
    check_run("random texts", test_random_texts);
    check_run("halfway", test_halfway);
    check_run("writing", test_writing);
    check_run("text", test_text);
    check_run("failing", test_failing);
    check_run("philox", test_philox);
    check_run("moments", test_moments);
    check_run("sort", test_sort);
    check_run("bits", test_bits);
    check_run("binomials", test_binomials);
    check_run("sizes", test_sizes);
    check_run("numbers", test_numbers);
    check_run("layout", test_layout);
    check_run("limit", test_limit);
    check_run("huge", test_huge);
    check_run("allocations", test_allocations);
    check_run("arena", test_arena);
    check_run("run", test_run);
    check_run("workers", test_workers);
    check_run("dot", test_dot);
    check_run("sum", test_sum);
    check_run("tree", test_tree);
    return check_end();
}
