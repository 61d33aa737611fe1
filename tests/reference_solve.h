/*
 * reference_solve.h: spectra for the rows of tests/reference/, by public calls of the library only, and the book-keeping
 * of which rows are checked. A program hands each row of a table to a function that checks it (returns NULL) or says why
 * it does not (returns the reason).
 */
#ifndef REFERENCE_SOLVE_INCLUDED
#define REFERENCE_SOLVE_INCLUDED

#include "check.h"
#include "dense_judge.h"
#include "reference.h"
#include "whorl_action.h"
#include "whorl_dense.h"
#include "whorl_lanczos.h"
#include "whorl_map.h"
#include "whorl_pauli.h"
#include "whorl_space.h"

enum { REF_TERMS = 4096, REF_DENSE = 300, REF_LEVELS = 64 };

static whorl_host ref_host;

/* ---- rows ------------------------------------------------------------------------------------------------------- */

typedef const char *(*ref_judge)(const reference_row *row);

static const char *const ref_thermal = "thermodynamics: needs whorl_thermal.h";
static const char *const ref_infinite = "infinite lattice: no finite cluster gives it";
static const char *const ref_large = "too many states for a test of seconds";

/* The number behind a mark in a text; NaN where the mark is absent. */
static inline double ref_after(const char *text, const char *mark)
{
    const char *at = strstr(text, mark);
    return at == NULL ? (double)NAN : strtod(at + strlen(mark), NULL);
}

static inline int32_t ref_integer(const char *text, const char *mark)
{
    double value = ref_after(text, mark);
    return value >= 0.0 && value < 1e6 ? (int32_t)value : -1;
}

static inline int ref_begins(const char *text, const char *beginning)
{
    return strncmp(text, beginning, strlen(beginning)) == 0;
}

/* Checks a number against the row, to the row's tolerance; the row's id and source name the check. */
static inline const char *ref_check(const reference_row *row, double got)
{
    char name[512];
    snprintf(name, sizeof name, "%s (%s)", row->field[REFERENCE_ID], row->field[REFERENCE_SOURCE]);
    CHECK_NEAR(got, strtod(row->field[REFERENCE_VALUE], NULL), strtod(row->field[REFERENCE_TOLERANCE], NULL), name);
    return NULL;
}

/* Hands every row of the table to the judge; prints how many were checked, and the others with their reasons. */
static inline void ref_table(const char *table, ref_judge judge)
{
    static char id[400][96];
    static const char *why[400];
    const char *directory = getenv("WHORL_REFERENCE");
    static reference_row row;
    char path[1024];
    int count = 0, checked = 0, k, j;
    FILE *file;
    snprintf(path, sizeof path, "%s/%s", directory != NULL ? directory : "reference", table);
    file = fopen(path, "r");
    if (!CHECK(file != NULL))
        return;
    while (fgets(row.text, (int)sizeof row.text, file) != NULL && count < 400) {
        size_t length = strcspn(row.text, "\t");
        if (length > 0 && length < 95 && strncmp(row.text, "id\t", 3) != 0) {
            memcpy(id[count], row.text, length);
            id[count++][length] = '\0';
        }
    }
    fclose(file);
    CHECK(count > 0 && count < 400);
    for (k = 0; k < count; k++) {
        why[k] = "the row could not be read";
        if (CHECK(reference_find(table, id[k], &row)))
            why[k] = judge(&row);
        checked += why[k] == NULL;
    }
    printf("  %s: %d of %d rows checked\n", table, checked, count);
    for (k = 0; k < count; k++) { /* the others, together by reason */
        int others = 0;
        if (why[k] == NULL)
            continue;
        printf("    not: %s", id[k]);
        for (j = k + 1; j < count; j++)
            if (why[j] != NULL && strcmp(why[j], why[k]) == 0) {
                if (others++ < 6)
                    printf(" %s", id[j]);
                why[j] = NULL;
            }
        if (others > 6)
            printf(" and %d more", others - 6);
        printf(": %s\n", why[k]);
    }
}

/* ---- spaces and spectra ----------------------------------------------------------------------------------------- */

static inline whorl_space *ref_space(const whorl_space_desc *desc)
{
    whorl_space *space = NULL;
    CHECK_STATUS(whorl_space_make(&ref_host, desc, &space), WHORL_OK, &ref_host);
    return space;
}

static inline whorl_space *ref_down(int32_t sites, int32_t down)
{
    whorl_space *space = NULL;
    CHECK_STATUS(whorl_space_make_down(&ref_host, sites, down, &space), WHORL_OK, &ref_host);
    return space;
}

static inline whorl_space *ref_all(int32_t sites)
{
    whorl_space *space = NULL;
    CHECK_STATUS(whorl_space_make_all(&ref_host, sites, &space), WHORL_OK, &ref_host);
    return space;
}

static inline whorl_space *ref_parity(int32_t sites, int32_t parity)
{
    whorl_space_desc desc = whorl_space_default();
    desc.sites = sites;
    desc.kind = WHORL_SPACE_PARITY;
    desc.parity = parity;
    return ref_space(&desc);
}

static inline whorl_action *ref_action(const whorl_sum *sum, const whorl_space *space)
{
    whorl_action_desc desc = whorl_action_default();
    whorl_action *action = NULL;
    desc.sums = sum;
    desc.sum_count = 1;
    desc.source = space;
    CHECK_STATUS(whorl_action_make(&ref_host, &desc, &action), WHORL_OK, &ref_host);
    return action;
}

/* All eigenvalues of a map, ascending, by its dense matrix (columns are products with unit vectors). */
static inline void ref_dense(const whorl_map *map, double *values, double *vector)
{
    uint64_t n = map->rows, i, width = whorl_element_is_complex(map->element) ? 2 : 1;
    double *unit = judge_reals(width * n * n), *matrix = judge_reals(width * n * n);
    for (i = 0; i < n; i++)
        unit[width * (i + n * i)] = 1.0;
    CHECK_STATUS(whorl_map_apply(&ref_host, map, unit, matrix, (int32_t)n), WHORL_OK, &ref_host);
    if (width == 2)
        CHECK_STATUS(whorl_dense_hermitian(&ref_host, n, matrix, values, vector != NULL), WHORL_OK, &ref_host);
    else
        CHECK_STATUS(whorl_dense_symmetric(&ref_host, n, matrix, values, vector != NULL), WHORL_OK, &ref_host);
    if (vector != NULL)
        memcpy(vector, matrix, (size_t)(width * n) * sizeof(double));
    free(unit);
    free(matrix);
}

/* Residual of an eigenpair by the product term by term, where that is cheap; relative to the bound of the norm. */
static inline void ref_residual(const whorl_sum *sum, const whorl_space *space, const whorl_map *map, double value,
                                const double *vector)
{
    uint64_t n = map->rows, k, *states;
    double residual;
    if (n * sum->count > 1000000)
        return;
    states = (uint64_t *)judge_memory(n, sizeof(uint64_t));
    for (k = 0; k < n; k++)
        states[k] = whorl_space_at(space, k);
    for (k = 1; k < n && states[k - 1] < states[k]; k++)
        ;
    if (k >= n) { /* the judge searches ascending lists */
        residual = judge_residual(sum, states, n, value, vector, whorl_element_is_complex(map->element));
        CHECK_NEAR(residual, 0.0, 2e-10 * whorl_sum_norm_bound(sum), "residual by the product term by term");
    }
    free(states);
}

/*
 * The `wanted` lowest levels, each as often as it occurs, and where `vector` is not NULL the lowest eigenvector in memory
 * that the caller frees. Returns how many there are. The space is given back.
 */
static inline int32_t ref_lowest(const whorl_sum *sum, whorl_space *space, int32_t wanted, double *values,
                                 double **vector)
{
    whorl_action *action = ref_action(sum, space);
    whorl_map map;
    uint64_t n, width;
    int32_t k, found = 0;
    if (action == NULL) {
        whorl_space_free(&ref_host, space);
        return 0;
    }
    map = whorl_action_map(action);
    n = map.rows;
    width = whorl_element_is_complex(map.element) ? 2 : 1;
    if (vector != NULL)
        *vector = judge_reals(width * n);
    if (n <= REF_DENSE) {
        double *all = judge_reals(n);
        ref_dense(&map, all, vector == NULL ? NULL : *vector);
        for (found = 0; found < wanted && (uint64_t)found < n; found++)
            values[found] = all[found];
        free(all);
    } else {
        whorl_lanczos_desc desc = whorl_lanczos_default();
        whorl_lanczos *lanczos = NULL;
        desc.wanted = wanted;
        desc.end = WHORL_LOWEST;
        CHECK_STATUS(whorl_lanczos_make(&ref_host, &map, &desc, &lanczos), WHORL_OK, &ref_host);
        CHECK_STATUS(whorl_lanczos_advance(&ref_host, &map, lanczos, 0), WHORL_OK, &ref_host);
        for (k = 0; lanczos != NULL && k < (int32_t)whorl_lanczos_count(lanczos) && k < wanted; k++) {
            values[found++] = whorl_lanczos_value(lanczos, k);
            ref_residual(sum, space, &map, values[k], (const double *)whorl_lanczos_vector(lanczos, k));
        }
        CHECK(found == wanted);
        if (vector != NULL && found > 0)
            memcpy(*vector, whorl_lanczos_vector(lanczos, 0), (size_t)(width * n) * sizeof(double));
        whorl_lanczos_free(&ref_host, lanczos);
    }
    whorl_action_free(&ref_host, action);
    whorl_space_free(&ref_host, space);
    return found;
}

/* The lowest level. */
static inline double ref_ground(const whorl_sum *sum, whorl_space *space)
{
    double value = (double)NAN;
    ref_lowest(sum, space, 1, &value, NULL);
    return value;
}

/* <v|O|v> for a real vector of unit norm and an operator with a real matrix. */
static inline double ref_expectation(const whorl_sum *sum, const whorl_space *space, const double *vector)
{
    whorl_action *action = ref_action(sum, space);
    whorl_complex dot = {0.0, 0.0};
    if (action != NULL) {
        whorl_map map = whorl_action_map(action);
        double *image = judge_reals(map.rows);
        CHECK(map.element == WHORL_REAL_DOUBLE);
        CHECK_STATUS(whorl_map_apply(&ref_host, &map, vector, image, 1), WHORL_OK, &ref_host);
        CHECK_STATUS(whorl_vector_dot(&ref_host, WHORL_REAL_DOUBLE, map.rows, vector, image, &dot), WHORL_OK,
                     &ref_host);
        free(image);
    }
    whorl_action_free(&ref_host, action);
    return dot.re;
}

static inline int ref_order(const void *a, const void *b)
{
    double left, right;
    memcpy(&left, a, sizeof left);
    memcpy(&right, b, sizeof right);
    return (left > right) - (left < right);
}

/* All 2^sites levels, ascending: sector by sector where the number of down spins is conserved. Free them. */
static inline double *ref_whole(const whorl_sum *sum, int conserving)
{
    int32_t sites = sum->sites, down;
    uint64_t n = UINT64_C(1) << sites, at = 0;
    double *values = judge_reals(n);
    for (down = 0; down <= (conserving ? sites : 0); down++) {
        whorl_space *space = conserving ? ref_down(sites, down) : ref_all(sites);
        whorl_action *action = ref_action(sum, space);
        if (action != NULL) {
            whorl_map map = whorl_action_map(action);
            ref_dense(&map, values + at, NULL);
            at += map.rows;
        }
        whorl_action_free(&ref_host, action);
        whorl_space_free(&ref_host, space);
    }
    CHECK(at == n);
    qsort(values, (size_t)n, sizeof(double), ref_order);
    return values;
}

/* Distinct levels of an ascending list: the energies (means) and how often each occurs; returns how many. */
static inline int32_t ref_distinct(const double *values, uint64_t n, double apart, int32_t most, double *energy,
                                   uint64_t *times)
{
    int32_t levels = 0;
    uint64_t i, first;
    for (i = 0; i < n; levels++) {
        double total = 0.0;
        for (first = i; i < n && (i == first || values[i] - values[i - 1] <= apart); i++)
            total += values[i];
        if (levels < most) {
            energy[levels] = total / (double)(i - first);
            times[levels] = i - first;
        }
    }
    return levels;
}

/* ---- sums ------------------------------------------------------------------------------------------------------- */

static inline whorl_sum ref_sum(int32_t sites, whorl_term *terms, uint64_t count)
{
    whorl_sum sum = {0, 0, NULL};
    CHECK(count <= REF_TERMS);
    CHECK_STATUS(whorl_sum_from_terms(&ref_host, sites, terms, count, &sum), WHORL_OK, &ref_host);
    return sum;
}

typedef struct ref_bond {
    int32_t i, j;
} ref_bond;

/* Bonds written as "0-1 0-4 ..." from the start of a text on; returns how many (at most 256). */
static inline int32_t ref_bonds(const char *text, ref_bond *bonds)
{
    int32_t count = 0;
    char *end;
    for (; count < 256; text = end) {
        long i = strtol(text, &end, 10);
        if (end == text || *end != '-')
            break;
        bonds[count].i = (int32_t)i;
        bonds[count++].j = (int32_t)strtol(end + 1, &end, 10);
    }
    return count;
}

/* Adds J S_i.S_j over bonds to the terms; returns the new number of terms. */
static inline uint64_t ref_exchange(whorl_term *terms, uint64_t used, const ref_bond *bonds, int32_t count,
                                    double coupling)
{
    int32_t b;
    for (b = 0; b < count; b++)
        used += whorl_terms_exchange(terms + used, bonds[b].i, bonds[b].j, coupling);
    return used;
}

#endif
