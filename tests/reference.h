/* reference.h: rows of the tables of published values in tests/reference/, by their id. */
#ifndef REFERENCE_INCLUDED
#define REFERENCE_INCLUDED

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { REFERENCE_ID, REFERENCE_MODEL, REFERENCE_GEOMETRY, REFERENCE_QUANTITY, REFERENCE_VALUE, REFERENCE_TOLERANCE,
       REFERENCE_STATUS, REFERENCE_SOURCE, REFERENCE_NOTE, REFERENCE_FIELDS };

typedef struct reference_row {
    char text[16384];
    char *field[REFERENCE_FIELDS];
} reference_row;

/*
 * Finds the row of a table ("13_counting.tsv") by its id; 1 if it is there. Tables are looked for in the directory
 * named by WHORL_REFERENCE, by default reference/ beside the tests.
 */
static inline int reference_find(const char *table, const char *id, reference_row *row)
{
    const char *directory = getenv("WHORL_REFERENCE");
    char path[1024];
    size_t length = strlen(id);
    int found = 0, k;
    FILE *file;
    snprintf(path, sizeof path, "%s/%s", directory != NULL ? directory : "reference", table);
    file = fopen(path, "r");
    if (file == NULL) {
        printf("  cannot open %s: run in tests/ or set WHORL_REFERENCE\n", path);
        return 0;
    }
    while (!found && fgets(row->text, (int)sizeof row->text, file) != NULL)
        found = strncmp(row->text, id, length) == 0 && row->text[length] == '\t';
    fclose(file);
    if (!found) {
        printf("  no row %s in %s\n", id, path);
        return 0;
    }
    row->text[strcspn(row->text, "\r\n")] = '\0';
    row->field[0] = row->text;
    for (k = 1; k < REFERENCE_FIELDS; k++) {
        row->field[k] = strchr(row->field[k - 1], '\t');
        if (row->field[k] == NULL) {
            printf("  row %s of %s is short\n", id, path);
            return 0;
        }
        *row->field[k]++ = '\0';
    }
    return 1;
}

/* The value and the tolerance of a row with a single number; 1 if it is there. */
static inline int reference_value(const char *table, const char *id, double *value, double *tolerance)
{
    reference_row row;
    if (!reference_find(table, id, &row))
        return 0;
    *value = strtod(row.field[REFERENCE_VALUE], NULL);
    *tolerance = strtod(row.field[REFERENCE_TOLERANCE], NULL);
    return 1;
}

#endif
