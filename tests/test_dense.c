/* test_dense.c: whole spectra against LAPACK, closed forms and LAPACK's own measures of a good answer. */
#include "check.h"
#include "dense_judge.h"
#include "whorl_dense.h"

static const double eps = 1.1102230246251565e-16; /* 2^-53, LAPACK's eps */

/* ---- matrices ---------------------------------------------------------------------------------------------------- */

/* Full Hermitian matrices, interleaved; the real ones have zero imaginary parts. */
enum {
    RANDOM, GRADED_DOWN, GRADED_UP, FEW_LEVELS, DIAGONAL, RANK_ONE, SIGNS, WILKINSON, HUGE_ENTRIES, TINY_ENTRIES,
    ZERO, BLOCKS, WIDE_RANGE, FAMILIES
};
static const char *const family_name[FAMILIES] = {"random", "graded down", "graded up", "few levels", "diagonal",
    "rank one", "signs", "Wilkinson", "entries near 1e300", "entries near 1e-300", "zero", "blocks",
    "entries from 1e-200 to 1"};

static double draw(uint64_t stream, uint64_t counter) { return whorl_random_normal(7, stream, counter); }

static void put(uint64_t n, double *a, uint64_t r, uint64_t c, double re, double im)
{
    a[2 * (r + n * c)] = re;
    a[2 * (r + n * c) + 1] = r == c ? 0.0 : im;
    a[2 * (c + n * r)] = re;
    a[2 * (c + n * r) + 1] = r == c ? 0.0 : -im;
}

/* a -> R a R, R = 1 - 2 x x' with a random unit vector x: mixes everything, keeps the levels. */
static void reflect(uint64_t n, double *a, uint64_t stream, int is_complex)
{
    double *x = judge_reals(2 * n), norm = 0.0;
    uint64_t r, c, side;
    for (r = 0; r < 2 * n; r++) {
        x[r] = (r & 1) && !is_complex ? 0.0 : draw(stream, r);
        norm += x[r] * x[r];
    }
    for (side = 0; side < 2; side++) { /* from the left, then the adjoint again */
        for (c = 0; c < n; c++) {
            double re = 0.0, im = 0.0, *column = a + 2 * n * c;
            for (r = 0; r < n; r++) {
                re += x[2 * r] * column[2 * r] + x[2 * r + 1] * column[2 * r + 1];
                im += x[2 * r] * column[2 * r + 1] - x[2 * r + 1] * column[2 * r];
            }
            re *= 2.0 / norm;
            im *= 2.0 / norm;
            for (r = 0; r < n; r++) {
                column[2 * r] -= re * x[2 * r] - im * x[2 * r + 1];
                column[2 * r + 1] -= re * x[2 * r + 1] + im * x[2 * r];
            }
        }
        for (c = 0; c < n; c++) /* adjoint in place */
            for (r = 0; r <= c; r++) {
                double re = a[2 * (r + n * c)], im = a[2 * (r + n * c) + 1];
                a[2 * (r + n * c)] = a[2 * (c + n * r)];
                a[2 * (r + n * c) + 1] = -a[2 * (c + n * r) + 1];
                a[2 * (c + n * r)] = re;
                a[2 * (c + n * r) + 1] = -im;
            }
    }
    for (c = 0; c < n; c++) /* Hermitian to the last bit */
        for (r = c; r < n; r++)
            put(n, a, r, c, a[2 * (r + n * c)], a[2 * (r + n * c) + 1]);
    free(x);
}

static double power_of_ten(int p)
{
    double value = 1.0;
    for (; p > 0; p--)
        value *= 10.0;
    for (; p < 0; p++)
        value /= 10.0;
    return value;
}

static double *family(int kind, uint64_t n, int is_complex)
{
    double *a = judge_reals(2 * n * n);
    uint64_t r, c, k = 0;
    for (c = 0; c < n; c++)
        for (r = c; r < n; r++, k++) {
            double re = draw(1, 2 * k), im = is_complex ? draw(1, 2 * k + 1) : 0.0, factor = 1.0;
            double position = (double)(r + c) / (double)(n > 1 ? n - 1 : 1); /* 0 .. 2 */
            switch (kind) {
            case GRADED_DOWN: factor = power_of_ten(-(int)(10.0 * position)); break;
            case GRADED_UP: factor = power_of_ten(-20 + (int)(10.0 * position)); break;
            case FEW_LEVELS: re = r == c ? (double)(r % 3) : 0.0; im = 0.0; break;
            case DIAGONAL: re = r == c ? (double)(r * 7 % 5) - 2.0 : 0.0; im = 0.0; break;
            case RANK_ONE: {
                double x = draw(2, 2 * r), xi = is_complex ? draw(2, 2 * r + 1) : 0.0;
                double y = draw(2, 2 * c), yi = is_complex ? draw(2, 2 * c + 1) : 0.0;
                re = x * y + xi * yi;
                im = xi * y - x * yi;
                break;
            }
            case SIGNS: /* Sylvester's matrix, where n is a power of two: all levels +-sqrt n */
                re = whorl_bits_parity(r & c) ? -1.0 : 1.0;
                im = 0.0;
                break;
            case WILKINSON: /* |i - middle| on the diagonal, ones beside it: pairs of levels that nearly agree */
                re = r == c ? fabs((double)r - 0.5 * (double)(n - 1)) : r == c + 1 ? 1.0 : 0.0;
                im = 0.0;
                break;
            case HUGE_ENTRIES: factor = power_of_ten(300); break;
            case TINY_ENTRIES: factor = power_of_ten(-300); break;
            case ZERO: factor = 0.0; break;
            case BLOCKS: factor = r / 3 == c / 3 ? 1.0 : 0.0; break;
            case WIDE_RANGE: factor = power_of_ten(-(int)(whorl_random_uniform(3, 1, k) * 200.0)); break;
            default: break;
            }
            put(n, a, r, c, re * factor, im * factor);
        }
    if (kind == FEW_LEVELS)
        for (k = 0; k < 3; k++)
            reflect(n, a, 10 + k, is_complex);
    if ((kind == SIGNS || kind == WILKINSON) && is_complex) /* a gauge: phases of modulus 1 */
        for (c = 0; c < n; c++)
            for (r = c + 1; r < n; r++) {
                static const double turn[3][2] = {{0.6, 0.8}, {0.0, 1.0}, {-0.8, 0.6}};
                const double *x = turn[r % 3], *y = turn[c % 3];
                double re = a[2 * (r + n * c)];
                put(n, a, r, c, re * (x[0] * y[0] + x[1] * y[1]), re * (x[1] * y[0] - x[0] * y[1]));
            }
    return a;
}

/* What the library is given: the lower triangle, with NaN in everything that it must not read. */
static double *lower(uint64_t n, const double *a, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, r, c, part;
    double *b = judge_reals(parts * n * n);
    for (c = 0; c < n; c++)
        for (r = 0; r < n; r++)
            for (part = 0; part < parts; part++)
                if (r < c || (r == c && part == 1))
                    b[parts * (r + n * c) + part] = (double)NAN;
                else
                    b[parts * (r + n * c) + part] = a[2 * (r + n * c) + part];
    return b;
}

static whorl_status spectrum(whorl_host *host, uint64_t n, double *a, double *values, int vectors, int is_complex)
{
    return is_complex ? whorl_dense_hermitian(host, n, a, values, vectors)
                      : whorl_dense_symmetric(host, n, a, values, vectors);
}

/* max_k ||A v_k - l_k v_k|| / (n eps ||A||), computed on A / ||A||; norm is the largest modulus of a level. */
static double residual_ratio(uint64_t n, const double *a, const double *v, const double *values, int is_complex,
                             double norm)
{
    uint64_t parts = is_complex ? 2 : 1, k, r, c;
    double worst = 0.0, *y = judge_reals(2 * n);
    for (k = 0; k < n; k++) {
        double square = 0.0;
        for (r = 0; r < 2 * n; r++)
            y[r] = 0.0;
        for (c = 0; c < n; c++) {
            double re = v[parts * (c + n * k)], im = is_complex ? v[2 * (c + n * k) + 1] : 0.0;
            const double *column = a + 2 * n * c;
            for (r = 0; r < n; r++) {
                double are = column[2 * r] / norm, aim = column[2 * r + 1] / norm;
                y[2 * r] += are * re - aim * im;
                y[2 * r + 1] += are * im + aim * re;
            }
        }
        for (r = 0; r < n; r++) {
            double re = y[2 * r] - values[k] / norm * v[parts * (r + n * k)];
            double im = y[2 * r + 1] - (is_complex ? values[k] / norm * v[2 * (r + n * k) + 1] : 0.0);
            square += re * re + im * im;
        }
        if (!(sqrt(square) <= worst))
            worst = sqrt(square);
    }
    free(y);
    return worst / ((double)n * eps);
}

/* max ||V'V - 1||_max / (n eps) */
static double orthogonality_ratio(uint64_t n, const double *v, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, k, l, r;
    double worst = 0.0;
    for (k = 0; k < n; k++)
        for (l = 0; l <= k; l++) {
            const double *x = v + parts * n * k, *y = v + parts * n * l;
            double re = k == l ? -1.0 : 0.0, im = 0.0;
            for (r = 0; r < n; r++)
                if (is_complex) {
                    re += x[2 * r] * y[2 * r] + x[2 * r + 1] * y[2 * r + 1];
                    im += x[2 * r] * y[2 * r + 1] - x[2 * r + 1] * y[2 * r];
                } else {
                    re += x[r] * y[r];
                }
            if (!(sqrt(re * re + im * im) <= worst))
                worst = sqrt(re * re + im * im);
        }
    return worst / ((double)n * eps);
}

/* ---- tests ------------------------------------------------------------------------------------------------------- */

static double worst_residual, worst_orthogonality;

/* One matrix: ratios, order, traces, sign convention, values alone; and LAPACK where it is there. */
static void judge_one_matrix(int kind, uint64_t n, int is_complex)
{
    whorl_host host = whorl_host_default();
    double *a = family(kind, n, is_complex), *v = lower(n, a, is_complex), *b = lower(n, a, is_complex);
    double *values = judge_reals(n), *alone = judge_reals(n);
    double norm, ratio, trace = 0.0, square = 0.0, sum = 0.0, sums = 0.0;
    uint64_t parts = is_complex ? 2 : 1, k, r, c;
    char what[96];
    snprintf(what, sizeof what, "%s, n = %" PRIu64 ", %s", family_name[kind], n, is_complex ? "complex" : "real");
    CHECK_STATUS(spectrum(&host, n, v, values, 1, is_complex), WHORL_OK, &host);
    CHECK_STATUS(spectrum(&host, n, b, alone, 0, is_complex), WHORL_OK, &host);
    CHECK(host.bytes_used == 0);
    CHECK(memcmp(values, alone, (size_t)n * sizeof(double)) == 0); /* promised by whorl_dense.h */
    norm = fabs(values[0]) > fabs(values[n - 1]) ? fabs(values[0]) : fabs(values[n - 1]);
    norm = norm > 0.0 ? norm : 1.0;
    for (k = 1; k < n; k++)
        CHECK(values[k - 1] <= values[k]);
    ratio = residual_ratio(n, a, v, values, is_complex, norm);
    CHECK_NEAR(ratio, 0.0, 30.0, what);
    worst_residual = ratio > worst_residual ? ratio : worst_residual;
    ratio = orthogonality_ratio(n, v, is_complex);
    CHECK_NEAR(ratio, 0.0, 30.0, what);
    worst_orthogonality = ratio > worst_orthogonality ? ratio : worst_orthogonality;
    for (c = 0; c < n; c++) { /* Tr A and Tr A^2 */
        trace += a[2 * (c + n * c)] / norm;
        for (r = 0; r < 2 * n; r++)
            square += a[2 * n * c + r] / norm * (a[2 * n * c + r] / norm);
        sum += values[c] / norm;
        sums += values[c] / norm * (values[c] / norm);
    }
    CHECK_NEAR(sum, trace, 1e-13 * (double)n, what);
    CHECK_NEAR(sums, square, 1e-13 * (double)n, what);
    for (k = 0; k < n; k++) { /* the first component of at least half the largest modulus is real and positive */
        double most = 0.0, *x = v + parts * n * k;
        for (r = 0; r < n; r++) {
            double size = is_complex ? sqrt(x[2 * r] * x[2 * r] + x[2 * r + 1] * x[2 * r + 1]) : fabs(x[r]);
            most = size > most ? size : most;
        }
        for (r = 0; r < n; r++) {
            double re = x[parts * r], im = is_complex ? x[2 * r + 1] : 0.0, size = sqrt(re * re + im * im);
            if (fabs(size - 0.5 * most) < 1e-12)
                break; /* rounding decides */
            if (size > 0.5 * most) {
                CHECK(re > 0.0 && im == 0.0);
                break;
            }
        }
    }
#ifdef HAVE_LAPACK
    {
        double *judge = judge_reals(2 * n * n), *levels = judge_reals(n);
        for (k = 0; k < n * n; k++)
            for (r = 0; r < parts; r++)
                judge[parts * k + r] = a[2 * k + r];
        if (is_complex)
            CHECK(judge_lapack_hermitian(n, judge, levels, 0) == 0);
        else
            CHECK(judge_lapack_symmetric(n, judge, levels, 0) == 0);
        for (k = 0; k < n; k++)
            CHECK_NEAR(values[k] / norm, levels[k] / norm, 1e-13, what);
        free(judge);
        free(levels);
    }
#endif
    free(a);
    free(v);
    free(b);
    free(values);
    free(alone);
}

/* Ratios as in LAPACK's own tests (LAPACK Working Note 41): both at most 30. */
static void test_matrices(void)
{
    static const uint64_t sizes[] = {1, 2, 3, 4, 8, 17, 64, 65, 100};
    uint64_t i;
    int kind, is_complex;
    for (is_complex = 0; is_complex <= 1; is_complex++) {
        for (kind = 0; kind < FAMILIES; kind++)
            for (i = 0; i < sizeof sizes / sizeof *sizes; i++)
                judge_one_matrix(kind, sizes[i], is_complex);
        judge_one_matrix(RANDOM, 200, is_complex);
        judge_one_matrix(FEW_LEVELS, 200, is_complex);
        judge_one_matrix(SIGNS, 128, is_complex);
    }
    judge_one_matrix(RANDOM, 500, 0);
    printf("  dense: largest residual ratio %.2f, largest orthogonality ratio %.2f (30 allowed)\n", worst_residual,
           worst_orthogonality);
}

static void test_lapack(void)
{
#ifdef HAVE_LAPACK
    judge_one_matrix(RANDOM, 33, 0);
    judge_one_matrix(RANDOM, 33, 1);
#else
    CHECK_SKIP("spectra are not compared with LAPACK: install liblapack-dev");
#endif
}

/* Levels of matrices with known spectra. */
static void test_closed_forms(void)
{
    static const uint64_t sizes[] = {1, 2, 3, 10, 64, 121};
    const double pi = 3.14159265358979323846;
    uint64_t i, k;
    for (i = 0; i < sizeof sizes / sizeof *sizes; i++) {
        uint64_t n = sizes[i];
        whorl_host host = whorl_host_default();
        double *d = judge_reals(n), *e = judge_reals(n), *a = judge_reals(2 * n * n), *values = judge_reals(n);
        double size = (double)n;
        /* 2, -1: 2 - 2 cos(k pi / (n + 1)) (common practice) */
        for (k = 0; k < n; k++) {
            d[k] = 2.0;
            e[k] = -1.0;
            a[k + n * k] = 2.0;
            if (k + 1 < n)
                a[k + 1 + n * k] = -1.0;
        }
        CHECK_STATUS(whorl_dense_tridiagonal(&host, n, d, e, NULL, 0), WHORL_OK, &host);
        CHECK_STATUS(whorl_dense_symmetric(&host, n, a, values, 1), WHORL_OK, &host);
        for (k = 0; k < n; k++) {
            double angle = (double)(k + 1) * pi / (size + 1.0), level = 2.0 - 2.0 * cos(angle), norm = 0.0, scale;
            uint64_t r;
            CHECK_NEAR(d[k], level, 4e-16 * (size + 8.0), "2, -1 matrix, tridiagonal");
            CHECK_NEAR(values[k], level, 4e-16 * (size + 8.0), "2, -1 matrix, dense");
            for (r = 0; r < n; r++)
                norm += sin(angle * (double)(r + 1)) * sin(angle * (double)(r + 1));
            scale = 0.0; /* overlap with the sine mode: 1 up to sign */
            for (r = 0; r < n; r++)
                scale += sin(angle * (double)(r + 1)) / sqrt(norm) * a[r + n * k];
            CHECK_NEAR(fabs(scale), 1.0, 1e-12, "vector of the 2, -1 matrix");
        }
        /* Clement's matrix: off-diagonal sqrt(k (n - k)), levels -(n-1), -(n-3), .. n-1 (P. A. Clement, SIAM Rev. 1, 50
           (1959)): the matrix of 2 S^x of a spin (n-1)/2 */
        for (k = 0; k < n; k++) {
            d[k] = 0.0;
            e[k] = sqrt((double)(k + 1) * (double)(n - k - 1));
        }
        CHECK_STATUS(whorl_dense_tridiagonal(&host, n, d, e, NULL, 0), WHORL_OK, &host);
        for (k = 0; k < n; k++)
            CHECK_NEAR(d[k], 2.0 * (double)k - (size - 1.0), 1e-15 * size * (size + 4.0), "Clement matrix");
        /* all ones off the diagonal: n - 1 once, -1 otherwise (common practice) */
        for (k = 0; k < n * n; k++)
            a[k] = k % (n + 1) == 0 ? 0.0 : 1.0;
        CHECK_STATUS(whorl_dense_symmetric(&host, n, a, values, 0), WHORL_OK, &host);
        for (k = 0; k < n; k++)
            CHECK_NEAR(values[k], k + 1 == n ? size - 1.0 : -1.0, 1e-15 * size * (size + 4.0), "complete graph");
        /* a ring with a flux: 2 cos((2 pi k + flux) / n) (common practice) */
        if (n >= 3) {
            double flux = 0.7, *want = judge_reals(n);
            memset(a, 0, (size_t)(2 * n * n) * sizeof(double));
            for (k = 0; k + 1 < n; k++)
                a[2 * (k + 1 + n * k)] = 1.0;
            a[2 * (n - 1)] += cos(flux);
            a[2 * (n - 1) + 1] += sin(flux);
            CHECK_STATUS(whorl_dense_hermitian(&host, n, a, values, 1), WHORL_OK, &host);
            for (k = 0; k < n; k++) { /* sorted by insertion */
                double level = 2.0 * cos((2.0 * pi * (double)k + flux) / size);
                uint64_t at = k;
                for (; at > 0 && want[at - 1] > level; at--)
                    want[at] = want[at - 1];
                want[at] = level;
            }
            for (k = 0; k < n; k++)
                CHECK_NEAR(values[k], want[k], 1e-15 * (size + 8.0), "ring with flux");
            free(want);
        }
        free(d);
        free(e);
        free(a);
        free(values);
    }
    {   /* Wilkinson's W21+: largest level 10.746 194 182 903 4, the next nearly the same (J. H. Wilkinson, Algebraic
           Eigenvalue Problem, 1965, p. 309; from memory) */
        whorl_host host = whorl_host_default();
        double d[21], e[20];
        for (k = 0; k < 21; k++)
            d[k] = fabs((double)k - 10.0);
        for (k = 0; k < 20; k++)
            e[k] = 1.0;
        CHECK_STATUS(whorl_dense_tridiagonal(&host, 21, d, e, NULL, 0), WHORL_OK, &host);
        CHECK_NEAR(d[20], 10.7461941829034, 1e-13, "W21+");
        CHECK(d[20] - d[19] < 1e-13 && d[0] < -1.0);
    }
}

/* The accumulating forms of the tridiagonal solver agree with each other. */
static void test_tridiagonal(void)
{
    enum { N = 60 };
    static double d[N], e[N], z[N * N], first[N], lent[3 * N], values[N], basis[3 * N], off[N];
    whorl_host host = whorl_host_default();
    uint64_t k, r, i;
    double norm;
    int scale;
    for (scale = -320; scale <= 300; scale += 310) {
        double worst = 0.0;
        memset(z, 0, sizeof z);
        for (k = 0; k < N; k++) {
            values[k] = d[k] = draw(4, k) * power_of_ten(scale);
            off[k] = e[k] = draw(5, k) * power_of_ten(scale);
            z[k + N * k] = 1.0;
            first[k] = k == 0 ? 1.0 : 0.0;
        }
        CHECK_STATUS(whorl_dense_tridiagonal(&host, N, values, off, z, N), WHORL_OK, &host);
        norm = fabs(values[0]) > values[N - 1] ? fabs(values[0]) : values[N - 1];
        for (k = 0; k < N; k++) {
            double square = 0.0;
            for (r = 0; r < N; r++) {
                double y = (d[r] / norm - values[k] / norm) * z[r + N * k];
                y += r > 0 ? e[r - 1] / norm * z[r - 1 + N * k] : 0.0;
                y += r + 1 < N ? e[r] / norm * z[r + 1 + N * k] : 0.0;
                square += y * y;
            }
            worst = sqrt(square) > worst ? sqrt(square) : worst;
        }
        if (scale > -310) { /* denormal entries have no digits to lose */
            CHECK_NEAR(worst / (N * eps), 0.0, 30.0, "residual ratio");
        }
        CHECK_NEAR(orthogonality_ratio(N, z, 0), 0.0, 30.0, "orthogonality ratio");
    }
    for (i = 0; i < 3 * N; i++)
        basis[i] = lent[i] = draw(6, i);
    memcpy(values, d, sizeof d);
    memcpy(off, e, sizeof e);
    CHECK_STATUS(whorl_dense_tridiagonal(&host, N, values, off, first, 1), WHORL_OK, &host);
    memcpy(off, e, sizeof e);
    memcpy(values, d, sizeof d);
    CHECK_STATUS(whorl_dense_tridiagonal(&host, N, values, off, lent, 3), WHORL_OK, &host);
    memcpy(off, e, sizeof e);
    memcpy(values, d, sizeof d);
    CHECK_STATUS(whorl_dense_tridiagonal(&host, N, values, off, NULL, 0), WHORL_OK, &host);
    for (k = 0; k < N; k++) {
        CHECK(first[k] == z[N * k]); /* one row of the unit matrix: one row of the vectors, the same bits */
        for (r = 0; r < 3; r++) {
            double want = 0.0;
            for (i = 0; i < N; i++)
                want += basis[r + 3 * i] * z[i + N * k];
            CHECK_NEAR(lent[r + 3 * k], want, 1e-13, "rows turned along");
        }
    }
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 0, NULL, NULL, NULL, 0), WHORL_OK, &host);
    d[0] = -3.0;
    z[0] = 5.0;
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 1, d, NULL, z, 1), WHORL_OK, &host);
    CHECK(d[0] == -3.0 && z[0] == 5.0);
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 2, NULL, e, NULL, 0), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 2, d, NULL, NULL, 0), WHORL_BAD_ARGUMENT, &host);
    CHECK(host.takes == 0);
    d[0] = 1.0;
    d[1] = (double)NAN;
    e[0] = 2.0;
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 2, d, e, NULL, 0), WHORL_NOT_FINITE, &host);
    CHECK(host.reason.index == 1 && d[0] == 1.0 && e[0] == 2.0);
    d[1] = 3.0;
    e[0] = (double)INFINITY;
    CHECK_STATUS(whorl_dense_tridiagonal(&host, 2, d, e, NULL, 0), WHORL_NOT_FINITE, &host);
    CHECK(host.reason.index == 2 && d[0] == 1.0 && d[1] == 3.0);
}

/* A run hook that goes through the blocks backwards, with changing workers, and counts: order must not matter. */
static void run_backwards(void *context, whorl_body_function body, void *argument, uint64_t blocks, int32_t workers)
{
    uint64_t block;
    (*(uint64_t *)context)++;
    for (block = blocks; block-- > 0;)
        body(argument, block, (int32_t)(block % (uint64_t)workers));
}

/* Same bits with 1, 2 and 4 threads, blocks in another order, and a matrix that is misaligned by 8 bytes. */
static void same_bits(uint64_t n, int vectors, int is_complex)
{
    uint64_t parts = is_complex ? 2 : 1, size = parts * n * n, variant;
    double *a = family(RANDOM, n, is_complex), *first = lower(n, a, is_complex), *again = judge_reals(size + 9);
    double *values = judge_reals(n), *others = judge_reals(n + 1);
    whorl_host host = whorl_host_default();
    CHECK_STATUS(spectrum(&host, n, first, values, vectors, is_complex), WHORL_OK, &host);
    for (variant = 0; variant < 4; variant++) {
        double *at = again + (64 - ((uintptr_t)again & 63)) / 8 % 8 + 1, *given = lower(n, a, is_complex);
        uint64_t entered = 0;
        host = whorl_host_default();
        host.threads = variant == 0 ? 1 : variant == 1 ? 2 : 4;
        if (variant == 3) {
            host.run = run_backwards;
            host.run_context = &entered;
        }
        memcpy(at, given, (size_t)size * sizeof(double));
        CHECK_STATUS(spectrum(&host, n, at, others + 1, vectors, is_complex), WHORL_OK, &host);
        CHECK(memcmp(values, others + 1, (size_t)n * sizeof(double)) == 0);
        if (vectors)
            CHECK(memcmp(first, at, (size_t)size * sizeof(double)) == 0);
        if (variant == 3)
            CHECK(n < 200 || entered > 0); /* large work is shared at all */
        free(given);
    }
    free(a);
    free(first);
    free(again);
    free(values);
    free(others);
}
static void test_same_bits(void)
{
    same_bits(60, 1, 0);
    same_bits(60, 1, 1);
    same_bits(780, 0, 0);
    same_bits(300, 1, 0);
    same_bits(560, 0, 1);
    same_bits(200, 1, 1);
}

/* What is refused, and that nothing was touched. */
static void test_refusals(void)
{
    enum { N = 9 };
    whorl_host host = whorl_host_default();
    double a[2 * N * N], copy[2 * N * N], values[N], kept[N];
    uint64_t r, c, i;
    int is_complex, part;
    CHECK_STATUS(whorl_dense_symmetric(&host, 0, NULL, NULL, 1), WHORL_OK, &host);
    CHECK_STATUS(whorl_dense_hermitian(&host, 0, NULL, NULL, 0), WHORL_OK, &host);
    CHECK(host.takes == 0 && whorl_dense_symmetric_bytes(0, 1) == 0 && whorl_dense_hermitian_bytes(0, 0) == 0);
    CHECK_STATUS(whorl_dense_symmetric(&host, 2, NULL, values, 1), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_dense_hermitian(&host, 2, a, NULL, 1), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_dense_symmetric(&host, UINT64_C(1) << 40, a, values, 1), WHORL_TOO_LARGE, &host);
    CHECK_STATUS(whorl_dense_hermitian(&host, UINT64_MAX, a, values, 0), WHORL_TOO_LARGE, &host);
    CHECK(whorl_dense_symmetric_bytes(UINT64_C(1) << 40, 1) == UINT64_MAX);
    for (i = 0; i < 2 * N * N; i++)
        copy[i] = a[i] = draw(8, i);
    for (i = 0; i < N; i++)
        kept[i] = values[i] = draw(9, i);
    for (is_complex = 0; is_complex <= 1; is_complex++)
        for (c = 0; c < N; c++)
            for (r = c; r < N; r++)
                for (part = 0; part <= (is_complex && r != c); part++) {
                    i = (is_complex ? 2 : 1) * (r + N * c) + (uint64_t)part;
                    copy[i] = a[i] = (r + c) % 2 ? (double)NAN : -(double)INFINITY;
                    CHECK_STATUS(spectrum(&host, N, a, values, 1, is_complex), WHORL_NOT_FINITE, &host);
                    CHECK(host.reason.index == r + N * c);
                    CHECK(memcmp(a, copy, sizeof a) == 0 && memcmp(values, kept, sizeof kept) == 0);
                    copy[i] = a[i] = 1.0;
                }
    host.byte_limit = whorl_dense_symmetric_bytes(N, 1) - 1;
    CHECK_STATUS(whorl_dense_symmetric(&host, N, a, values, 1), WHORL_OVER_LIMIT, &host);
    CHECK(memcmp(a, copy, sizeof a) == 0 && memcmp(values, kept, sizeof kept) == 0);
    host.byte_limit++;
    CHECK_STATUS(whorl_dense_symmetric(&host, N, a, values, 1), WHORL_OK, &host);
    host.byte_limit = 0;
    a[0] = a[1] = a[3] = 1.5e308; /* level 3e308 */
    CHECK_STATUS(whorl_dense_symmetric(&host, 2, a, values, 0), WHORL_NOT_FINITE, &host);
    a[0] = a[1] = a[3] = 5e-324; /* levels 0 and 1e-323: denormal, exact */
    CHECK_STATUS(whorl_dense_symmetric(&host, 2, a, values, 1), WHORL_OK, &host);
    CHECK(values[0] == 0.0 && values[1] == 1e-323);
    CHECK_NEAR(a[2], 0.70710678118654752, 1e-15, "vector of a denormal matrix");
}

/* ---- memory and polls -------------------------------------------------------------------------------------------- */

typedef struct job {
    int vectors, is_complex;
    double values[40]; /* of the first good run */
    int have;
} job;

static whorl_status run_job(whorl_host *host, void *argument)
{
    enum { N = 40 };
    job *work = (job *)argument;
    double *a = family(RANDOM, N, work->is_complex), *b = lower(N, a, work->is_complex), values[N], kept[N];
    double *copy = lower(N, a, work->is_complex);
    whorl_status status;
    uint64_t k;
    for (k = 0; k < N; k++)
        kept[k] = values[k] = (double)k;
    status = spectrum(host, N, b, values, work->vectors, work->is_complex);
    if (status == WHORL_NO_MEMORY) {
        CHECK(memcmp(values, kept, sizeof kept) == 0);
        CHECK(memcmp(b, copy, (size_t)(N * N * (work->is_complex ? 2 : 1)) * sizeof(double)) == 0);
    }
    if (status == WHORL_OK) { /* a retry gives the same bits */
        if (work->have)
            CHECK(memcmp(values, work->values, sizeof values) == 0);
        memcpy(work->values, values, sizeof values);
        work->have = 1;
    }
    free(a);
    free(b);
    free(copy);
    return status;
}

static whorl_status run_tridiagonal(whorl_host *host, void *argument)
{
    double d[3] = {1.0, 2.0, 3.0}, e[2] = {1.0, 1.0};
    (void)argument;
    return whorl_dense_tridiagonal(host, 3, d, e, NULL, 0);
}

static void test_failures(void)
{
    int k;
    for (k = 0; k < 4; k++) {
        job work;
        memset(&work, 0, sizeof work);
        work.vectors = k & 1;
        work.is_complex = k >> 1;
        check_every_allocation(run_job, &work, WHORL_OK);
        check_every_poll(run_job, &work, WHORL_OK);
    }
    check_every_poll(run_tridiagonal, NULL, WHORL_OK);
}

static void test_announced(void)
{
    static const uint64_t sizes[] = {1, 2, 33, 64, 65, 130};
    uint64_t i;
    int k, threads;
    for (i = 0; i < sizeof sizes / sizeof *sizes; i++)
        for (k = 0; k < 4; k++)
            for (threads = 1; threads <= 4; threads += 3) {
                uint64_t n = sizes[i];
                uint64_t bytes = k >> 1 ? whorl_dense_hermitian_bytes(n, k & 1) : whorl_dense_symmetric_bytes(n, k & 1);
                double *a = family(RANDOM, n, k >> 1), *b = lower(n, a, k >> 1), *values = judge_reals(n);
                void *memory = malloc((size_t)bytes + 64);
                char *base = (char *)memory + (64 - ((uintptr_t)memory & 63)) % 64;
                whorl_host host = whorl_host_default();
                whorl_arena arena;
                if (memory == NULL)
                    exit(3);
                host.threads = threads;
                whorl_arena_make(&arena, base, bytes - 1);
                whorl_arena_use(&arena, &host);
                CHECK_STATUS(spectrum(&host, n, b, values, k & 1, k >> 1), WHORL_NO_MEMORY, &host);
                whorl_arena_make(&arena, base, bytes);
                CHECK_STATUS(spectrum(&host, n, b, values, k & 1, k >> 1), WHORL_OK, &host);
                CHECK(arena.peak == bytes && arena.top == 0 && host.bytes_peak == bytes && host.takes == 2);
                free(a);
                free(b);
                free(values);
                free(memory);
            }
}

int main(void)
{
    check_begin("test_dense");
    check_run("matrices", test_matrices);
    check_run("lapack", test_lapack);
    check_run("closed_forms", test_closed_forms);
    check_run("tridiagonal", test_tridiagonal);
    check_run("same_bits", test_same_bits);
    check_run("refusals", test_refusals);
    check_run("failures", test_failures);
    check_run("announced", test_announced);
    return check_end();
}
