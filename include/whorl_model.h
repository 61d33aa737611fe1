/*
 * whorl_model.h 0.1.0: a model of interacting spins as text: spins, parameters, pairs, lattices, disorder to sums.
 *
 *     # a ring of four ions with an exchange that follows a knob
 *     spins 4
 *     let J = 12.5
 *     let D = 0.1*J
 *     pairs ring: 0-1-2-3-0
 *     sum over ring: J*S[i].S[j] + (0, 0, D).(S[i] x S[j])
 *
 * A model becomes H = sum_k f_k H_k with sums H_k free of parameters and weights f_k that follow the parameters:
 *
 *     status = whorl_model_read(&host, text, length, 0, &model);
 *     status = whorl_model_values(&host, model, NULL, 0, values);                 (as the text defines them)
 *     status = whorl_model_weights(&host, model, values, weights);                (for whorl_action_reweight)
 *     status = whorl_model_sum(&host, model, values, terms, room, &sum);          (or all of it as one sum)
 *
 * It reads no files: the caller brings the text into memory.
 *
 * The text. A line that begins at the left edge begins a statement; lines that begin with a blank go on with it; #
 * begins a comment. Names are defined before they are used. Expressions are those of whorl_text.h.
 *
 *     model     = { statement } ;
 *     statement = "title" words to the end of the line
 *               | "spins" whole                                       1 .. 64
 *               | "let" name "=" expression                           a number: a parameter; or a vector or matrix
 *               | "cluster" lattice ( whole | "by" cells { cells } ) { edges }
 *               | "place" { whole vector }                            positions of sites
 *               | "pairs" name [ "with" names ] ":" pairs
 *               | "group" name [ "with" names ] ":" { whole { number } }
 *               | "draw" name "over" list ( "uniform" number "to" number | "normal" number number | "signs" )
 *                        "seed" whole
 *               | "sum" "over" list ":" expression                    with S[i], S[j] and the numbers of the list
 *               | "add" expression ;
 *     lattice   = "chain" | "ladder" | "square" | "triangular" | "honeycomb" | "kagome" | "cubic"
 *               | "cell" vector { vector } "with" vector { vector } ; primitive vectors, then sites of the cell
 *     cells     = "(" whole { "," whole } ")" ;                       a spanning vector in primitive vectors
 *     edges     = "open" { whole } | "spacing" number ;               which spanning vectors, from 1; all
 *     pairs     = { whole "-" whole { "-" whole } }                   a walk gives a pair for each step
 *               | { whole "-" whole number { number } }               with a table: one number for each name
 *               | "shell" whole [ "to" whole ] [ "type" whole { whole } ]
 *               | "all" | "within" number ;
 *     list      = the name of pairs or of a group, or "spins" for all sites ;
 *
 * In a sum over pairs, S[i] and S[j] are the two sites, r their distance, d the displacement from i to j, n = d/r its
 * direction, and the names of the list's table and draws are numbers. In a sum over sites there is S[i], and d is the
 * position. For pairs by shell, d is the bond of the lattice, around the edge where it is periodic; in a periodic
 * cluster other pairs have no d. `all` are all pairs i < j, `within` those not farther apart than this.
 * Random numbers are those of whorl_core.h at (seed, stream = realisation, counter = place in the list).
 *
 * Memory: reading takes a block of scratch, one for a lattice where there is one, and one for the object
 * (whorl_model_bytes tells them together). Threads: none are used; models never change after they were made.
 * Errors: WHORL_BAD_TEXT and others with line, column, what was expected and what to change.
 */
#include "whorl_core.h"
#include "whorl_pauli.h"
#include "whorl_lattice.h"
#include "whorl_text.h"

#ifndef WHORL_MODEL_INCLUDED
#define WHORL_MODEL_INCLUDED

#if WHORL_CORE_VERSION != 100 || WHORL_LATTICE_VERSION != 100 || WHORL_TEXT_VERSION != 100
#error "whorl_model.h 0.1.0 needs whorl_core.h, whorl_lattice.h and whorl_text.h 0.1.0: take all from one release"
#endif
#define WHORL_MODEL_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

typedef struct whorl_model whorl_model;

/* A parameter that gets another value than the one it has in the text. */
typedef struct whorl_setting {
    int32_t parameter; /* 0 .. count-1 */
    double value;
} whorl_setting;

/*
 * Reads a model; `realisation` numbers the disorder (the stream of the random numbers), and makes no difference where
 * whorl_model_draws is 0. The caller frees the model with whorl_model_free; the text is not needed afterwards.
 * Cost: O(n log n) for n words and terms; each expression of a sum over a list is computed once for each element.
 * Errors: WHORL_BAD_TEXT, WHORL_NOT_FINITE (with line and column); WHORL_TOO_LARGE (more than 64 spins, 2^31 - 1 bytes,
 * WHORL_MOST_PARAMETERS, WHORL_MOST_SUMS); WHORL_BAD_ARGUMENT (no text); WHORL_OVER_LIMIT; WHORL_NO_MEMORY;
 * WHORL_CANCELLED. *model is then NULL.
 */
WHORL_API whorl_status whorl_model_read(whorl_host *host, const char *text, uint64_t length, uint64_t realisation,
                                        whorl_model **model);
/* The memory of that call, object and scratch together, exactly; found by reading. Errors as there. */
WHORL_API whorl_status whorl_model_bytes(whorl_host *host, const char *text, uint64_t length, uint64_t realisation,
                                         uint64_t *bytes);
/* NULL is legal. */
WHORL_API void whorl_model_free(whorl_host *host, whorl_model *model);

/* The words of the title statement, "" where there is none; owned by the model. */
WHORL_API const char *whorl_model_title(const whorl_model *model);
WHORL_API int32_t whorl_model_sites(const whorl_model *model);
/* How many draw statements there are: with none, all realisations are one. */
WHORL_API int32_t whorl_model_draws(const whorl_model *model);
/* 1 and the position of a site where the text tells it, else 0. */
WHORL_API int32_t whorl_model_position(const whorl_model *model, int32_t site, double position[3]);

/* Parameters are the numbers of let statements, in the order of the text. */
WHORL_API int32_t whorl_model_parameter_count(const whorl_model *model);
/* "" outside of 0 .. count-1. */
WHORL_API const char *whorl_model_parameter_name(const whorl_model *model, int32_t parameter);
/* Its number; -1 where there is none of this name: the host's reason then names the nearest. */
WHORL_API int32_t whorl_model_parameter_find(whorl_host *host, const whorl_model *model, const char *name,
                                             uint64_t length);
/*
 * The values of all parameters: those in set[0 .. count) as told (the last one counts), the others as the text defines
 * them, from those before them. Scratch as whorl_model_values_bytes tells.
 * Errors: WHORL_BAD_ARGUMENT (no such parameter: the index in `set`), WHORL_NOT_FINITE (a value is not finite; a
 * division by zero, a root of a negative number), WHORL_OVER_LIMIT, WHORL_NO_MEMORY; values are then untouched.
 */
WHORL_API whorl_status whorl_model_values(whorl_host *host, const whorl_model *model, const whorl_setting *set,
                                          uint64_t count, double *values);
WHORL_API uint64_t whorl_model_values_bytes(const whorl_model *model);

/* The sums H_k (tidy, owned by the model), and the terms of all of them together. */
WHORL_API uint64_t whorl_model_sum_count(const whorl_model *model);
WHORL_API const whorl_sum *whorl_model_sums(const whorl_model *model);
WHORL_API uint64_t whorl_model_term_count(const whorl_model *model);
/* The weights f_k at these values: whorl_expression_weights, _sum and _weight_write for a model, with their errors. */
WHORL_API whorl_status whorl_model_weights(whorl_host *host, const whorl_model *model, const double *values,
                                           whorl_complex *weights);
WHORL_API whorl_status whorl_model_sum(whorl_host *host, const whorl_model *model, const double *values,
                                       whorl_term *terms, uint64_t room, whorl_sum *out);
WHORL_API whorl_status whorl_model_weight_write(whorl_host *host, const whorl_model *model, uint64_t k, char *text,
                                                uint64_t room, uint64_t *used);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_MODEL_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_MODEL_IMPLEMENTED)
#define WHORL_MODEL_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* What reading knows beside the loom. */
typedef struct whorli_draft {
    whorli_loom loom;
    whorli_reader reader;
    whorl_lattice *lattice;
    uint64_t realisation;
    uint64_t title, title_length;
    int32_t titled;
    uint64_t placed;    /* sites whose position is known */
    int32_t periodic;   /* the lattice has a periodic edge: positions alone do not tell displacements */
    double position[64][3];
} whorli_draft;

#define WHORLI_MOST_COLUMNS 9
#define WHORLI_MOST_DRAWS 8 /* over one list */

/* ---- >>statements ------------------------------------------------------------------------------------------------ */

static const char whorli_statements[10][8] WHORLI_UNUSED = {"title", "spins", "let",  "cluster", "place",
                                                            "pairs", "group", "draw", "sum",     "add"};

static whorl_status whorli_draft_need_sites(whorli_draft *draft, uint64_t at)
{
    if (draft->loom.sites > 0)
        return WHORL_OK;
    return whorli_reader_refuse(&draft->reader, at,
                                "the number of spins is not known yet: put a `spins` or `cluster` statement above");
}

/* Nothing may follow. */
static whorl_status whorli_draft_finish(whorli_draft *draft, const char *expected)
{
    whorli_reader *reader = &draft->reader;
    uint64_t k, at = reader->start;
    if (whorli_reader_at_end(reader))
        return WHORL_OK;
    while (at > 0 && (reader->text[at - 1] == ' ' || reader->text[at - 1] == '\t'))
        at--;
    for (k = 0; k < 10 && at > 0 && reader->text[at - 1] == '\n'; k++)
        if (whorli_reader_is(reader, whorli_statements[k]))
            return whorli_reader_refuse(reader, reader->start,
                                        "a line that begins with a blank goes on with the statement above: "
                                        "begin this one at the left edge");
    return whorli_reader_expected(reader, expected);
}

/* A name that is not in use yet. */
static whorl_status whorli_draft_new_name(whorli_draft *draft, const char *expected, const char **name,
                                          uint64_t *length)
{
    whorli_reader *reader = &draft->reader;
    whorl_text text;
    *name = reader->text + reader->start;
    *length = reader->end - reader->start;
    if (reader->kind != WHORLI_WORD_NAME || **name == '_')
        return whorli_reader_expected(reader, expected);
    if (!whorli_is_reserved(*name, *length) && whorli_loom_find(&draft->loom, *name, *length) == NULL)
        return whorli_reader_next(reader);
    text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
    whorli_quote(&text, *name, *length);
    whorl_text_add(&text, whorli_is_reserved(*name, *length) ? " has a meaning of its own in expressions"
                                                             : " is in use already");
    whorl_text_add(&text, ": choose another name");
    return WHORL_BAD_TEXT;
}

/* A whole number from `least` to `most`; the reader is behind it afterwards. */
static whorl_status whorli_draft_whole(whorli_draft *draft, const char *expected, int64_t most, int64_t *value)
{
    whorli_reader *reader = &draft->reader;
    if (reader->kind != WHORLI_WORD_NUMBER || reader->whole < 0 || reader->whole > most)
        return whorli_reader_expected(reader, expected);
    *value = reader->whole;
    return whorli_reader_next(reader);
}

static whorl_status whorli_draft_site(whorli_draft *draft, int32_t *site)
{
    whorli_reader *reader = &draft->reader;
    if (reader->kind != WHORLI_WORD_NUMBER || reader->whole < 0)
        return whorli_reader_expected(reader, "a site, a whole number from 0 on");
    if (reader->whole >= draft->loom.sites)
        return whorli_compile_no_site(&draft->loom, reader->whole, reader->start);
    *site = (int32_t)reader->whole;
    return whorli_reader_next(reader);
}

/* A number with a sign. */
static whorl_status whorli_draft_number(whorli_draft *draft, const char *expected, double *value)
{
    whorli_reader *reader = &draft->reader;
    int32_t negative = whorli_reader_is(reader, "-");
    whorl_status status = negative || whorli_reader_is(reader, "+") ? whorli_reader_next(reader) : WHORL_OK;
    if (status != WHORL_OK)
        return status;
    if (reader->kind != WHORLI_WORD_NUMBER)
        return whorli_reader_expected(reader, expected);
    *value = negative ? -reader->number : reader->number;
    return whorli_reader_next(reader);
}

/* The number in slice k without parameters; 0 where it has some. */
static int32_t whorli_loom_constant(const whorli_loom *loom, uint64_t k, double *value)
{
    const whorli_entry *entry = loom->entry + loom->edge[k];
    uint64_t count = whorli_slice_count(loom, k);
    *value = count == 0 ? 0.0 : entry->re;
    return count == 0 || (count == 1 && entry->weight == 0 && entry->im == 0.0);
}

/* A vector of plain numbers in parentheses. */
static whorl_status whorli_draft_vector(whorli_draft *draft, double vector[3])
{
    whorli_loom *loom = &draft->loom;
    uint64_t at = draft->reader.start, k;
    int32_t kind = WHORLI_NUMBER, constant = 1;
    whorl_status status = whorli_compile(loom, 1, &kind);
    if (status == WHORL_OK && kind != WHORLI_VECTOR)
        return whorli_reader_refuse(&draft->reader, at, "expected a vector of three numbers: (x, y, z)");
    if (status == WHORL_OK)
        status = whorli_run(loom);
    if (status != WHORL_OK)
        return status;
    for (k = 0; k < 3; k++)
        constant &= whorli_loom_constant(loom, loom->depth - 3 + k, vector + k);
    loom->entries = loom->edge[loom->depth - 3];
    loom->depth -= 3;
    return constant ? WHORL_OK
                    : whorli_reader_refuse(&draft->reader, at,
                                           "positions cannot depend on parameters: write numbers, scale r in the sum");
}

/* title words to the end of the line */
static whorl_status whorli_draft_title(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    const char *text = reader->text;
    uint64_t at = reader->end, stop;
    if (draft->titled)
        return whorli_reader_refuse(reader, reader->start, "there is a title already: leave one of them out");
    while (at < reader->length && (text[at] == ' ' || text[at] == '\t'))
        at++;
    for (stop = at; stop < reader->length && text[stop] != '\n' && text[stop] != '#';)
        stop++;
    draft->titled = 1;
    draft->title = at;
    reader->end = stop;
    while (stop > at && (text[stop - 1] == ' ' || text[stop - 1] == '\t' || text[stop - 1] == '\r'))
        stop--;
    draft->title_length = stop - at;
    return whorli_reader_next(reader);
}

static whorl_status whorli_draft_set_sites(whorli_draft *draft, int64_t sites, uint64_t at)
{
    whorl_text text;
    if (draft->loom.sites > 0)
        return whorli_reader_refuse(&draft->reader, at, "the number of spins is known already: leave this out");
    if (sites >= 1 && sites <= 64) {
        draft->loom.sites = (int32_t)sites;
        draft->loom.list[0].count = (uint64_t)sites;
        return WHORL_OK;
    }
    text = whorli_reader_fail(&draft->reader, sites > 64 ? WHORL_TOO_LARGE : WHORL_BAD_TEXT, at);
    whorl_text_add(&text, "a model has 1 to 64 spins: ");
    whorl_text_add_signed(&text, sites);
    whorl_text_add(&text, sites > 64 ? " are too many" : " are too few");
    return sites > 64 ? WHORL_TOO_LARGE : WHORL_BAD_TEXT;
}

/* spins whole */
static whorl_status whorli_draft_spins(whorli_draft *draft)
{
    int64_t sites = 0;
    uint64_t at;
    whorl_status status = whorli_reader_next(&draft->reader);
    at = draft->reader.start;
    if (status == WHORL_OK)
        status = whorli_draft_whole(draft, "the number of spins, 1 to 64", INT64_MAX, &sites);
    return status == WHORL_OK ? whorli_draft_set_sites(draft, sites, at) : status;
}

/* let name = expression */
static whorl_status whorli_draft_let(whorli_draft *draft)
{
    whorli_loom *loom = &draft->loom;
    const char *name = NULL;
    uint64_t length = 0, at, k, width;
    int32_t kind = WHORLI_NUMBER;
    whorli_value value;
    double ignored;
    whorl_status status = whorli_reader_next(&draft->reader);
    if (status == WHORL_OK)
        status = whorli_draft_new_name(draft, "a name behind `let`", &name, &length);
    if (status == WHORL_OK)
        status = whorli_reader_take(&draft->reader, "=", "`=` behind the name");
    at = draft->reader.start;
    if (status == WHORL_OK)
        status = whorli_compile(loom, 0, &kind);
    if (status == WHORL_OK)
        status = whorli_draft_finish(draft, "an operator (+ - * / . x ^) or the end of the statement");
    if (status == WHORL_OK && (kind == WHORLI_OPERATOR || kind == WHORLI_SPIN_VECTOR))
        return whorli_reader_refuse(&draft->reader, at,
                                    "`let` names numbers, vectors and matrices: operators belong into `add`");
    if (status == WHORL_OK)
        status = whorli_run(loom);
    memset(&value, 0, sizeof value);
    value.kind = kind;
    width = whorli_kind_width(kind);
    for (k = 0; status == WHORL_OK && k < width; k++)
        status = whorli_loom_keep(loom, loom->depth - width + k, value.slice + k);
    if (status != WHORL_OK)
        return status;
    if (kind == WHORLI_NUMBER && value.slice[0].count == 1 && loom->part[value.slice[0].first].weight == 0 &&
        !whorli_loom_constant(loom, loom->depth - 1, &ignored))
        return whorli_reader_refuse(&draft->reader, at, "a parameter is a real number: put i where it is used");
    loom->entries = loom->edge[loom->depth - width];
    loom->depth -= width;
    if (kind == WHORLI_NUMBER)
        return whorli_loom_parameter(loom, name, length, value.slice[0]);
    if (whorli_loom_need(loom, WHORLI_ROOM_VALUE, loom->values + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    loom->value[loom->values] = value;
    return whorli_loom_name(loom, name, length, WHORLI_IS_VALUE, kind, loom->values++);
}

/* add expression */
static whorl_status whorli_draft_scalar(whorli_draft *draft)
{
    int32_t kind = WHORLI_NUMBER;
    uint64_t at = draft->reader.start;
    whorl_status status = whorli_compile(&draft->loom, 0, &kind);
    whorl_text text;
    if (status == WHORL_OK)
        status = whorli_draft_finish(draft, "an operator (+ - * / . x ^) or the end of the statement");
    if (status != WHORL_OK || kind == WHORLI_NUMBER || kind == WHORLI_OPERATOR)
        return status;
    text = whorli_reader_fail(&draft->reader, WHORL_BAD_TEXT, at);
    whorl_text_add(&text, "this is ");
    whorl_text_add(&text, whorli_kind_name(kind));
    whorl_text_add(&text, ": an operator or a number is wanted, such as a scalar product");
    return WHORL_BAD_TEXT;
}

/* What ran joins the total, which is the lowest slice. */
static whorl_status whorli_draft_total(whorli_draft *draft)
{
    whorl_status status = whorli_run(&draft->loom);
    if (status == WHORL_OK)
        draft->loom.depth--;
    return status;
}

static whorl_status whorli_draft_add(whorli_draft *draft)
{
    whorl_status status = whorli_reader_next(&draft->reader);
    if (status == WHORL_OK)
        status = whorli_draft_need_sites(draft, draft->reader.start);
    if (status == WHORL_OK)
        status = whorli_draft_scalar(draft);
    return status == WHORL_OK ? whorli_draft_total(draft) : status;
}

/* ---- >>places ---------------------------------------------------------------------------------------------------- */

/* place { site vector } */
static whorl_status whorli_draft_place(whorli_draft *draft)
{
    uint64_t at = draft->reader.start;
    whorl_status status = whorli_reader_next(&draft->reader);
    if (status == WHORL_OK)
        status = whorli_draft_need_sites(draft, at);
    if (status == WHORL_OK && draft->lattice != NULL)
        return whorli_reader_refuse(&draft->reader, at, "the cluster tells the positions already: leave `place` out");
    while (status == WHORL_OK && !whorli_reader_at_end(&draft->reader)) {
        int32_t site = 0;
        uint64_t where = draft->reader.start;
        if (draft->reader.kind != WHORLI_WORD_NUMBER)
            return whorli_draft_finish(draft, "a site and its position, or the end of the statement");
        status = whorli_draft_site(draft, &site);
        if (status == WHORL_OK && (draft->placed >> site & 1))
            return whorli_reader_refuse(&draft->reader, where, "this site has a position already: leave one out");
        if (status == WHORL_OK)
            status = whorli_draft_vector(draft, draft->position[site]);
        if (status == WHORL_OK)
            draft->placed |= UINT64_C(1) << site;
    }
    return status;
}

/* A spanning vector: whole numbers in parentheses, as many as the lattice has dimensions. */
static whorl_status whorli_draft_cells(whorli_draft *draft, int32_t dimension, int32_t row[3])
{
    int32_t k;
    whorl_status status = whorli_reader_take(&draft->reader, "(", "a spanning vector such as (4, 0)");
    for (k = 0; status == WHORL_OK && k < dimension; k++) {
        int32_t negative = whorli_reader_is(&draft->reader, "-");
        int64_t value = 0;
        if (negative)
            status = whorli_reader_next(&draft->reader);
        if (status == WHORL_OK)
            status = whorli_draft_whole(draft, "a whole number of cells, at most 4096", 4096, &value);
        row[k] = (int32_t)(negative ? -value : value);
        if (status == WHORL_OK && k + 1 < dimension)
            status = whorli_reader_take(&draft->reader, ",", "`,`: one number of cells for each dimension");
    }
    return status == WHORL_OK ? whorli_reader_take(&draft->reader, ")", "`)` behind the spanning vector") : status;
}

/* open { whole } | spacing number, in any order */
static whorl_status whorli_draft_edges(whorli_draft *draft, int32_t dimension, whorl_lattice_desc *desc)
{
    whorl_status status = WHORL_OK;
    while (status == WHORL_OK && !whorli_reader_at_end(&draft->reader)) {
        int64_t which = 0;
        if (whorli_reader_is(&draft->reader, "open")) {
            status = whorli_reader_next(&draft->reader);
            if (status == WHORL_OK && draft->reader.kind != WHORLI_WORD_NUMBER)
                desc->open[0] = desc->open[1] = desc->open[2] = 1;
            while (status == WHORL_OK && draft->reader.kind == WHORLI_WORD_NUMBER) {
                if (draft->reader.whole == 0)
                    return whorli_reader_expected(&draft->reader, "the number of a spanning vector, from 1 on");
                status = whorli_draft_whole(draft, "the number of a spanning vector, from 1 on", dimension, &which);
                if (status == WHORL_OK)
                    desc->open[which - 1] = 1;
            }
        } else if (desc->kind != WHORL_LATTICE_CELL && whorli_reader_is(&draft->reader, "spacing")) {
            uint64_t at;
            status = whorli_reader_next(&draft->reader);
            at = draft->reader.start;
            if (status == WHORL_OK)
                status = whorli_draft_number(draft, "the distance of nearest neighbours", &desc->length);
            if (status == WHORL_OK && !(desc->length > 0.0))
                return whorli_reader_refuse(&draft->reader, at, "the spacing must be above 0");
        } else {
            return whorli_draft_finish(draft, "`open`, `spacing` or the end of the statement");
        }
    }
    return status;
}

/* Vectors in parentheses, at most `most`, three numbers each. */
static whorl_status whorli_draft_vectors(whorli_draft *draft, int32_t most, double *vectors, int32_t *count)
{
    whorl_status status = WHORL_OK;
    *count = 0;
    while (status == WHORL_OK && (whorli_reader_is(&draft->reader, "(") || *count == 0)) {
        if (*count == most)
            return whorli_reader_refuse(&draft->reader, draft->reader.start,
                                        most == 3 ? "there are at most three primitive vectors: leave this one out"
                                                  : "a cell has at most 64 sites: leave some out");
        status = whorli_draft_vector(draft, vectors + 3 * (*count)++);
    }
    return status;
}

/* The lattice complained: its reason gets a place in the text. */
static whorl_status whorli_draft_blame(whorli_draft *draft, whorl_status status, uint64_t at)
{
    whorl_reason reason = draft->loom.host->reason;
    if (status != WHORL_BAD_ARGUMENT && status != WHORL_TOO_LARGE && status != WHORL_NOT_FINITE)
        return status;
    if (status == WHORL_BAD_ARGUMENT)
        status = WHORL_BAD_TEXT;
    whorli_reader_fail(&draft->reader, status, at);
    memcpy(draft->loom.host->reason.text, reason.text, sizeof reason.text);
    return status;
}

static whorl_status whorli_draft_lattice(whorli_draft *draft, const whorl_lattice_desc *desc, uint64_t at)
{
    int32_t r, site;
    whorl_status status = whorl_lattice_make(draft->loom.host, desc, &draft->lattice);
    if (status != WHORL_OK)
        return whorli_draft_blame(draft, status, at);
    status = whorli_draft_set_sites(draft, whorl_lattice_sites(draft->lattice), at);
    if (status != WHORL_OK)
        return status;
    for (r = 0; r < whorl_lattice_dimension(draft->lattice); r++)
        draft->periodic |= !desc->open[r];
    for (site = 0; site < draft->loom.sites; site++)
        whorl_lattice_position(draft->lattice, site, draft->position[site]);
    draft->placed = whorl_bits_low(draft->loom.sites);
    return WHORL_OK;
}

static whorl_status whorli_draft_no_lattice(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    const char *word = reader->text + reader->start;
    whorli_nearest nearest = whorli_nearest_to(word, reader->end - reader->start);
    whorl_text text;
    int32_t k;
    if (reader->kind != WHORLI_WORD_NAME)
        return whorli_reader_expected(reader, "a lattice: chain, ladder, square, triangular, honeycomb, kagome, cubic "
                                              "or cell");
    for (k = 1; k <= WHORL_LATTICE_CELL; k++)
        whorli_nearest_try(&nearest, whorl_lattice_kind_name(k), (uint64_t)strlen(whorl_lattice_kind_name(k)));
    text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
    whorl_text_add(&text, "unknown lattice ");
    whorli_quote(&text, word, reader->end - reader->start);
    if (nearest.found == NULL)
        whorl_text_add(&text, ": there are chain, ladder, square, triangular, honeycomb, kagome, cubic and cell");
    whorli_nearest_add(&nearest, &text);
    return WHORL_BAD_TEXT;
}

/* cluster lattice ( whole | by cells ) { edges } */
static whorl_status whorli_draft_cluster(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    whorl_lattice_desc desc = whorl_lattice_default();
    double basis[3 * 64];
    int32_t dimension, k, count = 0;
    uint64_t at = reader->start, kind_at;
    whorl_status status = whorli_reader_next(reader);
    if (status == WHORL_OK && draft->loom.sites > 0)
        return whorli_reader_refuse(reader, at, "the number of spins is known already: a cluster brings its own");
    kind_at = reader->start;
    if (status == WHORL_OK && reader->kind == WHORLI_WORD_NAME)
        desc.kind = whorl_lattice_kind_named(reader->text + reader->start, reader->end - reader->start);
    if (status == WHORL_OK && desc.kind == 0)
        return whorli_draft_no_lattice(draft);
    if (status == WHORL_OK)
        status = whorli_reader_next(reader);
    dimension = desc.kind <= WHORL_LATTICE_LADDER ? 1 : desc.kind == WHORL_LATTICE_CUBIC ? 3 : 2;
    if (status == WHORL_OK && desc.kind == WHORL_LATTICE_CELL) {
        status = whorli_draft_vectors(draft, 3, desc.primitive, &dimension);
        if (status == WHORL_OK)
            status = whorli_reader_take(reader, "with", "`with` and the positions of the sites of a cell");
        if (status == WHORL_OK)
            status = whorli_draft_vectors(draft, 64, basis, &count);
        desc.dimension = dimension;
        desc.basis = basis;
        desc.basis_count = count;
    }
    if (status == WHORL_OK && desc.kind != WHORL_LATTICE_CELL && reader->kind == WHORLI_WORD_NUMBER) {
        int64_t sites = 0;
        kind_at = reader->start;
        status = whorli_draft_whole(draft, "the number of sites, 1 to 64", 1000000, &sites);
        if (status == WHORL_OK && sites > 64)
            return whorli_draft_set_sites(draft, sites, kind_at);
        if (status == WHORL_OK) {
            whorl_lattice_kind kind = desc.kind;
            status = whorl_lattice_usual(draft->loom.host, kind, (int32_t)sites, &desc);
            if (status != WHORL_OK)
                return whorli_draft_blame(draft, status, kind_at);
        }
    } else if (status == WHORL_OK) {
        status = whorli_reader_take(reader, "by", desc.kind == WHORL_LATTICE_CELL
                                                      ? "`by` and the spanning vectors"
                                                      : "a number of sites, or `by` and the spanning vectors");
        for (k = 0; status == WHORL_OK && k < dimension; k++)
            status = whorli_draft_cells(draft, dimension, desc.spanning + 3 * k);
    }
    if (status == WHORL_OK)
        status = whorli_draft_edges(draft, dimension, &desc);
    return status == WHORL_OK ? whorli_draft_lattice(draft, &desc, kind_at) : status;
}

/* ---- >>lists ----------------------------------------------------------------------------------------------------- */

static whorl_status whorli_draft_pair(whorli_draft *draft, int32_t i, int32_t j)
{
    whorli_loom *loom = &draft->loom;
    if (whorli_loom_need(loom, WHORLI_ROOM_PAIR, loom->pairs + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    loom->pair[loom->pairs].i = i;
    loom->pair[loom->pairs++].j = j;
    loom->list[loom->lists - 1].count++;
    return whorli_loom_poll(loom, 1);
}

static whorl_status whorli_draft_double(whorli_draft *draft, double value)
{
    whorli_loom *loom = &draft->loom;
    if (whorli_loom_need(loom, WHORLI_ROOM_DOUBLE, loom->doubles_used + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    loom->doubles[loom->doubles_used++] = value;
    return WHORL_OK;
}

/* The numbers of one row of the table. */
static whorl_status whorli_draft_row(whorli_draft *draft)
{
    const whorli_list *list = draft->loom.list + draft->loom.lists - 1;
    uint32_t k;
    whorl_status status = WHORL_OK;
    for (k = 0; status == WHORL_OK && k < list->columns; k++) {
        double value = 0.0;
        status = whorli_draft_number(draft, "a number for each name behind `with`", &value);
        if (status == WHORL_OK)
            status = whorli_draft_double(draft, value);
    }
    return status;
}

/* [ with name {, name} ] : */
static whorl_status whorli_draft_with(whorli_draft *draft)
{
    whorli_loom *loom = &draft->loom;
    whorli_reader *reader = &draft->reader;
    whorl_status status;
    int32_t more = whorli_reader_is(reader, "with");
    if (!more)
        return whorli_reader_take(reader, ":", "`with` and the names of a table, or `:`");
    while (more) {
        whorli_list *list = loom->list + loom->lists - 1;
        const char *name = NULL;
        uint64_t length = 0, at, k;
        status = whorli_reader_next(reader);
        at = reader->start;
        if (status == WHORL_OK)
            status = whorli_draft_new_name(draft, "the name of a column of the table", &name, &length);
        if (status != WHORL_OK)
            return status;
        for (k = 0; k < list->columns; k++)
            if (loom->column[list->column + k].count == length &&
                memcmp(reader->text + loom->column[list->column + k].first, name, (size_t)length) == 0)
                return whorli_reader_refuse(reader, at, "two columns have this name: choose another one");
        if (list->columns == WHORLI_MOST_COLUMNS)
            return whorli_reader_refuse(reader, at, "a table has at most 9 columns: split the list");
        if (whorli_loom_need(loom, WHORLI_ROOM_COLUMN, loom->columns + 1) != WHORL_OK)
            return WHORLI_AGAIN;
        loom->column[loom->columns].first = (uint32_t)at;
        loom->column[loom->columns++].count = (uint32_t)length;
        list->columns++;
        more = whorli_reader_is(reader, ",");
    }
    return whorli_reader_take(reader, ":", "`,` and another name, or `:`");
}

/* name [ with ... ] : -- a new list, still empty */
static whorl_status whorli_draft_list(whorli_draft *draft, int32_t is_pairs)
{
    whorli_loom *loom = &draft->loom;
    whorli_list *list;
    const char *name = NULL;
    uint64_t length = 0, at = draft->reader.start;
    whorl_status status = whorli_reader_next(&draft->reader);
    if (status == WHORL_OK)
        status = whorli_draft_need_sites(draft, at);
    if (status == WHORL_OK)
        status = whorli_draft_new_name(draft, is_pairs ? "a name for the pairs" : "a name for the group", &name,
                                       &length);
    if (status == WHORL_OK)
        status = whorli_loom_need(loom, WHORLI_ROOM_LIST, loom->lists + 1);
    if (status == WHORL_OK)
        status = whorli_loom_name(loom, name, length, WHORLI_IS_LIST, WHORLI_NUMBER, loom->lists);
    if (status != WHORL_OK)
        return status;
    list = loom->list + loom->lists++;
    memset(list, 0, sizeof *list);
    list->is_pairs = is_pairs;
    list->first = loom->pairs;
    list->numbers = loom->doubles_used;
    list->column = (uint32_t)loom->columns;
    return whorli_draft_with(draft);
}

static whorl_status whorli_draft_bonds_of(whorli_draft *draft, uint64_t types, const whorl_bond *bonds, uint64_t count)
{
    uint64_t k;
    int32_t c;
    whorl_status status = WHORL_OK;
    for (k = 0; status == WHORL_OK && k < count; k++) {
        if (bonds[k].type < 64 && (types >> bonds[k].type & 1) == 0)
            continue;
        status = whorli_draft_pair(draft, bonds[k].i, bonds[k].j);
        for (c = 0; status == WHORL_OK && c < 3; c++)
            status = whorli_draft_double(draft, bonds[k].displacement[c]);
    }
    return status;
}

static whorl_status whorli_draft_bonds(whorli_draft *draft, int32_t shell, uint64_t types)
{
    whorl_host *host = draft->loom.host;
    whorl_block block;
    uint64_t count = 0;
    whorl_status status = whorl_lattice_bond_count(host, draft->lattice, shell, 0, &count);
    if (status == WHORL_OK)
        status = whorl_block_take(host, count * sizeof(whorl_bond), &block);
    if (status != WHORL_OK)
        return status;
    status = whorl_lattice_bonds(host, draft->lattice, shell, 0, (whorl_bond *)(void *)block.at, count, &count);
    if (status == WHORL_OK)
        status = whorli_draft_bonds_of(draft, types, (const whorl_bond *)(const void *)block.at, count);
    whorl_block_give(host, &block);
    return status;
}

/* shell whole [ to whole ] [ type whole { whole } ] */
static whorl_status whorli_draft_shell(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    int64_t shell = 0, last, type = 0;
    uint64_t types = UINT64_MAX, at = reader->start, shell_at;
    whorl_status status = whorli_reader_next(reader);
    if (status == WHORL_OK && draft->lattice == NULL)
        return whorli_reader_refuse(reader, at, "shells need a lattice: put `cluster` above, or list the pairs");
    shell_at = reader->start;
    if (status == WHORL_OK && reader->kind == WHORLI_WORD_NUMBER && reader->whole == 0)
        return whorli_reader_expected(reader, "a neighbour shell, 1 to 100");
    if (status == WHORL_OK)
        status = whorli_draft_whole(draft, "a neighbour shell, 1 to 100", WHORL_LATTICE_MOST_SHELL, &shell);
    last = shell;
    if (status == WHORL_OK && whorli_reader_is(reader, "to")) {
        status = whorli_reader_next(reader);
        if (status == WHORL_OK)
            status = whorli_draft_whole(draft, "the last neighbour shell, 1 to 100", WHORL_LATTICE_MOST_SHELL, &last);
    }
    if (status == WHORL_OK && whorli_reader_is(reader, "type")) {
        types = 0;
        status = whorli_reader_next(reader);
        while (status == WHORL_OK && (types == 0 || !whorli_reader_at_end(reader))) {
            status = whorli_draft_whole(draft, "the type of a bond, 0 to 63", 63, &type);
            types |= UINT64_C(1) << type;
        }
    }
    if (status == WHORL_OK)
        status = whorli_draft_finish(draft, "`to`, `type` or the end of the statement");
    draft->loom.list[draft->loom.lists - 1].far = 1;
    for (; status == WHORL_OK && shell <= last; shell++) {
        status = whorli_draft_bonds(draft, (int32_t)shell, types);
        if (status != WHORL_OK && status != WHORLI_AGAIN)
            status = whorli_draft_blame(draft, status, shell_at);
    }
    if (status == WHORL_OK && draft->loom.list[draft->loom.lists - 1].count == 0)
        return whorli_reader_refuse(reader, shell_at, "the cluster has no such bonds: take another shell or type");
    return status;
}

static whorl_status whorli_draft_need_places(whorli_draft *draft, uint64_t at)
{
    if (draft->placed != whorl_bits_low(draft->loom.sites))
        return whorli_reader_refuse(&draft->reader, at,
                                    "distances need the positions of all sites: put `place` or `cluster` above");
    if (draft->periodic)
        return whorli_reader_refuse(&draft->reader, at,
                                    "distances in a periodic cluster depend on the way around: use `shell`");
    return WHORL_OK;
}

/* all | within number */
static whorl_status whorli_draft_every(whorli_draft *draft, int32_t within)
{
    double most = 0.0;
    uint64_t at = draft->reader.start;
    int32_t i, j;
    whorl_status status = whorli_reader_next(&draft->reader);
    if (status == WHORL_OK && within)
        status = whorli_draft_need_places(draft, at);
    if (status == WHORL_OK && within)
        status = whorli_draft_number(draft, "the largest distance", &most);
    if (status == WHORL_OK)
        status = whorli_draft_finish(draft, "the end of the statement");
    for (i = 0; i < draft->loom.sites; i++)
        for (j = i + 1; status == WHORL_OK && j < draft->loom.sites; j++) {
            const double *a = draft->position[i], *b = draft->position[j];
            double x = b[0] - a[0], y = b[1] - a[1], z = b[2] - a[2];
            if (!within || sqrt(x * x + y * y + z * z) <= most * (1.0 + WHORL_LATTICE_TOLERANCE))
                status = whorli_draft_pair(draft, i, j);
        }
    return status;
}

/* site - site { - site } or site - site number { number }, again and again */
static whorl_status whorli_draft_written(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    uint32_t columns = draft->loom.list[draft->loom.lists - 1].columns;
    whorl_status status = WHORL_OK;
    while (status == WHORL_OK && !whorli_reader_at_end(reader)) {
        int32_t i = 0, j = 0, more = 1;
        if (reader->kind != WHORLI_WORD_NUMBER)
            return whorli_draft_finish(draft, "a pair of sites such as 0-1");
        status = whorli_draft_site(draft, &i);
        while (status == WHORL_OK && more) {
            uint64_t at;
            status = whorli_reader_take(reader, "-", "`-` and the second site of the pair");
            at = reader->start;
            if (status == WHORL_OK)
                status = whorli_draft_site(draft, &j);
            if (status == WHORL_OK && i == j)
                return whorli_reader_refuse(reader, at, "a pair joins two different sites: correct one of them");
            if (status == WHORL_OK)
                status = whorli_draft_pair(draft, i, j);
            i = j;
            more = columns == 0 && whorli_reader_is(reader, "-");
        }
        if (status == WHORL_OK)
            status = whorli_draft_row(draft);
    }
    return status;
}

static whorl_status whorli_draft_pairs(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    whorl_status status = whorli_draft_list(draft, 1);
    int32_t named = whorli_reader_is(reader, "shell") || whorli_reader_is(reader, "all") ||
                    whorli_reader_is(reader, "within");
    if (status != WHORL_OK)
        return status;
    if (named && draft->loom.list[draft->loom.lists - 1].columns > 0)
        return whorli_reader_refuse(reader, reader->start, "a table needs its pairs written out, with their numbers");
    if (whorli_reader_at_end(reader))
        return whorli_reader_expected(reader, "pairs such as 0-1, or `shell`, `all` or `within`");
    if (whorli_reader_is(reader, "shell"))
        return whorli_draft_shell(draft);
    return named ? whorli_draft_every(draft, whorli_reader_is(reader, "within")) : whorli_draft_written(draft);
}

/* group name [ with ... ] : site { number } ... */
static whorl_status whorli_draft_group(whorli_draft *draft)
{
    whorl_status status = whorli_draft_list(draft, 0);
    if (status == WHORL_OK && whorli_reader_at_end(&draft->reader))
        return whorli_reader_expected(&draft->reader, "the sites of the group");
    while (status == WHORL_OK && !whorli_reader_at_end(&draft->reader)) {
        int32_t site = 0;
        if (draft->reader.kind != WHORLI_WORD_NUMBER)
            return whorli_draft_finish(draft, "a site, a whole number from 0 on");
        status = whorli_draft_site(draft, &site);
        if (status == WHORL_OK)
            status = whorli_draft_pair(draft, site, site);
        if (status == WHORL_OK)
            status = whorli_draft_row(draft);
    }
    return status;
}

/* over list */
static whorl_status whorli_draft_over(whorli_draft *draft, uint32_t *list)
{
    whorli_reader *reader = &draft->reader;
    whorli_loom *loom = &draft->loom;
    const whorli_name *name = NULL;
    whorl_status status = whorli_reader_take(reader, "over", "`over` and the name of a list");
    if (status != WHORL_OK)
        return status;
    if (reader->kind != WHORLI_WORD_NAME)
        return whorli_reader_expected(reader, "the name of a list, or `spins`");
    name = whorli_loom_find(loom, reader->text + reader->start, reader->end - reader->start);
    if (name == NULL || name->role != WHORLI_IS_LIST) {
        whorli_nearest nearest = whorli_nearest_to(reader->text + reader->start, reader->end - reader->start);
        whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
        uint64_t k;
        whorli_quote(&text, reader->text + reader->start, reader->end - reader->start);
        whorl_text_add(&text, " is no list: give the name of a `pairs` or `group` statement above, or `spins`");
        for (k = 0; k < loom->names; k++)
            if (loom->name[k].role == WHORLI_IS_LIST)
                whorli_nearest_try(&nearest, loom->name[k].text, loom->name[k].length);
        whorli_nearest_add(&nearest, &text);
        return WHORL_BAD_TEXT;
    }
    *list = name->index;
    if (*list == 0 && loom->sites == 0)
        return whorli_draft_need_sites(draft, reader->start);
    return whorli_reader_next(reader);
}

/* draw name over list uniform a to b | normal mean width | signs seed whole */
static whorl_status whorli_draft_draw(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    whorli_loom *loom = &draft->loom;
    whorli_draw draw;
    int64_t seed = 0;
    uint64_t k, over = 0, at;
    whorl_status status = whorli_reader_next(reader);
    memset(&draw, 0, sizeof draw);
    if (status == WHORL_OK)
        status = whorli_draft_new_name(draft, "a name for the random number", &draw.name, &draw.length);
    if (status == WHORL_OK)
        status = whorli_draft_over(draft, &draw.list);
    if (status != WHORL_OK)
        return status;
    if (whorli_reader_is(reader, "uniform")) {
        status = whorli_reader_next(reader);
        if (status == WHORL_OK)
            status = whorli_draft_number(draft, "the lower end", &draw.a);
        if (status == WHORL_OK)
            status = whorli_reader_take(reader, "to", "`to` and the upper end");
        if (status == WHORL_OK)
            status = whorli_draft_number(draft, "the upper end", &draw.b);
    } else if (whorli_reader_is(reader, "normal")) {
        draw.kind = WHORLI_DRAW_NORMAL;
        status = whorli_reader_next(reader);
        if (status == WHORL_OK)
            status = whorli_draft_number(draft, "the mean", &draw.a);
        if (status == WHORL_OK)
            status = whorli_draft_number(draft, "the standard deviation", &draw.b);
    } else if (whorli_reader_is(reader, "signs")) {
        draw.kind = WHORLI_DRAW_SIGNS;
        status = whorli_reader_next(reader);
    } else {
        return whorli_reader_expected(reader, "a distribution: uniform -1 to 1, normal 0 1, or signs");
    }
    if (status == WHORL_OK)
        status = whorli_reader_take(reader, "seed", "`seed` and a whole number");
    at = reader->start;
    if (status == WHORL_OK)
        status = whorli_draft_whole(draft, "a seed, a whole number below 10^18", INT64_MAX, &seed);
    if (status == WHORL_OK)
        status = whorli_draft_finish(draft, "the end of the statement");
    draw.seed = (uint64_t)seed;
    for (k = 0; status == WHORL_OK && k < loom->draws; k++) {
        if (loom->draw[k].seed == draw.seed)
            return whorli_reader_refuse(reader, at, "another draw has this seed and the same numbers: choose another");
        over += loom->draw[k].list == draw.list;
    }
    if (status == WHORL_OK && over == WHORLI_MOST_DRAWS)
        return whorli_reader_refuse(reader, at, "there are at most 8 draws over one list: copy the list");
    if (status == WHORL_OK)
        status = whorli_loom_need(loom, WHORLI_ROOM_DRAW, loom->draws + 1);
    if (status != WHORL_OK)
        return status;
    loom->draw[loom->draws] = draw;
    return whorli_loom_name(loom, draw.name, draw.length, WHORLI_IS_DRAW, WHORLI_NUMBER, loom->draws++);
}

/* ---- >>sums over lists ------------------------------------------------------------------------------------------- */

/* A name that holds in one statement only: a number or vector of the current pair or site. */
static void whorli_loom_local(whorli_loom *loom, const char *text, uint64_t length, int32_t kind, uint32_t index)
{
    whorli_name *name = loom->local + loom->locals++;
    name->text = text;
    name->length = length;
    name->role = WHORLI_IS_ELEMENT;
    name->kind = kind;
    name->index = index;
}

/* What an element of a list brings along: places in loom->element. */
typedef struct whorli_bound {
    const whorli_list *list;
    uint32_t draw[WHORLI_MOST_DRAWS];
    uint32_t draws;
    int32_t far;         /* r, n, d are known */
    uint32_t distance;   /* where they are */
    int32_t uses_direction;
} whorli_bound;

/* The names of the list get places in loom->element. */
static whorl_status whorli_draft_bind(whorli_draft *draft, uint32_t number, uint64_t at, whorli_bound *bound)
{
    whorli_loom *loom = &draft->loom;
    uint32_t k, place = 0;
    memset(bound, 0, sizeof *bound);
    bound->list = loom->list + number;
    loom->locals = 0;
    for (k = 0; k < bound->list->columns; k++) {
        whorli_range column = loom->column[bound->list->column + k];
        if (whorli_loom_find(loom, draft->reader.text + column.first, column.count) != NULL) {
            whorl_text text = whorli_reader_fail(&draft->reader, WHORL_BAD_TEXT, at);
            whorli_quote(&text, draft->reader.text + column.first, column.count);
            whorl_text_add(&text, " is a column of this list and was defined again below it: rename one of them");
            return WHORL_BAD_TEXT;
        }
        whorli_loom_local(loom, draft->reader.text + column.first, column.count, WHORLI_NUMBER, place++);
    }
    for (k = 0; k < loom->draws; k++)
        if (loom->draw[k].list == number) {
            bound->draw[bound->draws++] = k;
            whorli_loom_local(loom, loom->draw[k].name, loom->draw[k].length, WHORLI_NUMBER, place++);
        }
    bound->far = bound->list->far || (draft->placed == whorl_bits_low(loom->sites) &&
                                      !(draft->periodic && bound->list->is_pairs));
    bound->distance = place;
    if (bound->far) {
        whorli_loom_local(loom, "r", 1, WHORLI_NUMBER, place);
        whorli_loom_local(loom, "d", 1, WHORLI_VECTOR, place + 1);
        whorli_loom_local(loom, "n", 1, WHORLI_VECTOR, place + 4);
    }
    loom->site_names = bound->list->is_pairs ? 2 : 1;
    return WHORL_OK;
}

static double whorli_draw_value(const whorli_draw *draw, uint64_t realisation, uint64_t counter)
{
    switch (draw->kind) {
    case WHORLI_DRAW_UNIFORM:
        return draw->a + (draw->b - draw->a) * whorl_random_uniform(draw->seed, realisation, counter);
    case WHORLI_DRAW_NORMAL: return draw->a + draw->b * whorl_random_normal(draw->seed, realisation, counter);
    default: return whorl_random_bits(draw->seed, realisation, counter) >> 63 ? -1.0 : 1.0;
    }
}

/* Sets the sites and numbers of element k of the list. */
static whorl_status whorli_draft_element(whorli_draft *draft, const whorli_bound *bound, uint64_t k)
{
    whorli_loom *loom = &draft->loom;
    const whorli_list *list = bound->list;
    double *element = loom->element, *d;
    uint32_t c;
    int32_t sites_are_pairs = list != loom->list; /* list 0 is all sites, in order */
    loom->site[0] = sites_are_pairs ? loom->pair[list->first + k].i : (int32_t)k;
    loom->site[1] = sites_are_pairs ? loom->pair[list->first + k].j : (int32_t)k;
    for (c = 0; c < list->columns; c++)
        *element++ = loom->doubles[list->numbers + k * list->columns + c];
    for (c = 0; c < bound->draws; c++)
        *element++ = whorli_draw_value(loom->draw + bound->draw[c], draft->realisation, k);
    if (!bound->far)
        return WHORL_OK;
    d = element + 1;
    for (c = 0; c < 3; c++)
        d[c] = list->far ? loom->doubles[list->numbers + 3 * k + c]
             : list->is_pairs ? draft->position[loom->site[1]][c] - draft->position[loom->site[0]][c]
                              : draft->position[loom->site[0]][c];
    element[0] = sqrt(d[0] * d[0] + d[1] * d[1] + d[2] * d[2]);
    if (!whorl_is_finite(element[0]))
        return whorli_loom_refuse(loom, WHORL_NOT_FINITE, "a distance is too large for a double: scale the positions");
    if (element[0] == 0.0 && bound->uses_direction)
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "the direction n is not defined where the distance is 0");
    for (c = 0; c < 3; c++)
        element[4 + c] = element[0] == 0.0 ? 0.0 : d[c] / element[0];
    return WHORL_OK;
}

/* sum over list : expression */
static whorl_status whorli_draft_sum(whorli_draft *draft)
{
    whorli_loom *loom = &draft->loom;
    whorli_bound bound;
    uint32_t number = 0;
    uint64_t k, at;
    whorl_status status = whorli_reader_next(&draft->reader);
    at = draft->reader.start;
    if (status == WHORL_OK)
        status = whorli_draft_over(draft, &number);
    if (status == WHORL_OK)
        status = whorli_reader_take(&draft->reader, ":", "`:` and an expression");
    if (status == WHORL_OK)
        status = whorli_draft_bind(draft, number, at, &bound);
    if (status == WHORL_OK)
        status = whorli_draft_scalar(draft);
    for (k = 0; status == WHORL_OK && k < loom->steps; k++)
        if (loom->step[k].does == WHORLI_DO_ELEMENT && bound.far && loom->step[k].argument == bound.distance + 4) {
            bound.uses_direction = 1;
            loom->at = loom->step[k].at;
        }
    for (k = 0; status == WHORL_OK && k < bound.list->count; k++) {
        status = whorli_draft_element(draft, &bound, k);
        if (status == WHORL_OK)
            status = whorli_draft_total(draft);
    }
    loom->locals = loom->site_names = 0;
    return status;
}

/* ---- >>reading a model ------------------------------------------------------------------------------------------- */

static whorl_status whorli_draft_unknown(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    const char *word = reader->text + reader->start;
    whorli_nearest nearest = whorli_nearest_to(word, reader->end - reader->start);
    whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
    int32_t k;
    for (k = 0; k < 10; k++)
        whorli_nearest_try(&nearest, whorli_statements[k], (uint64_t)strlen(whorli_statements[k]));
    whorli_quote(&text, word, reader->end - reader->start);
    whorl_text_add(&text, " begins no statement");
    if (nearest.found == NULL)
        whorl_text_add(&text, ": there are title, spins, let, cluster, place, pairs, group, draw, sum over and add; "
                              "lines that go on begin with a blank");
    whorli_nearest_add(&nearest, &text);
    return WHORL_BAD_TEXT;
}

static whorl_status whorli_draft_statement(whorli_draft *draft)
{
    whorli_reader *reader = &draft->reader;
    whorl_status status;
    if (reader->start > 0 && reader->text[reader->start - 1] != '\n' &&
        !(reader->start == 3 && reader->text[0] == '\xef'))
        return whorli_reader_refuse(reader, reader->start, "a statement begins at the left edge: take the blanks away");
    if (whorli_reader_is(reader, "sum"))
        return whorli_draft_sum(draft);
    if (whorli_reader_is(reader, "add"))
        return whorli_draft_add(draft);
    if (whorli_reader_is(reader, "let"))
        return whorli_draft_let(draft);
    if (whorli_reader_is(reader, "pairs"))
        return whorli_draft_pairs(draft);
    if (whorli_reader_is(reader, "group"))
        return whorli_draft_group(draft);
    if (whorli_reader_is(reader, "draw"))
        return whorli_draft_draw(draft);
    if (whorli_reader_is(reader, "place"))
        return whorli_draft_place(draft);
    if (whorli_reader_is(reader, "cluster"))
        return whorli_draft_cluster(draft);
    status = whorli_reader_is(reader, "spins") ? whorli_draft_spins(draft)
           : whorli_reader_is(reader, "title") ? whorli_draft_title(draft) : whorli_draft_unknown(draft);
    return status == WHORL_OK ? whorli_draft_finish(draft, "the end of the statement") : status;
}

/* One try with the present rooms. */
static whorl_status whorli_draft_try(whorli_draft *draft)
{
    whorli_loom *loom = &draft->loom;
    whorl_status status = whorli_loom_start(loom);
    loom->sites = 0;
    draft->placed = 0;
    draft->titled = draft->periodic = 0;
    draft->title_length = 0;
    if (status == WHORL_OK)
        status = whorli_loom_name(loom, "spins", 5, WHORLI_IS_LIST, WHORLI_NUMBER, 0);
    if (status == WHORL_OK) {
        memset(loom->list, 0, sizeof *loom->list);
        loom->lists = 1;
        status = whorli_slice_open(loom); /* the total */
    }
    if (status == WHORL_OK)
        status = whorli_reader_next(&draft->reader);
    while (status == WHORL_OK && draft->reader.kind != WHORLI_WORD_END) {
        if (draft->reader.kind == WHORLI_WORD_STOP)
            status = whorli_reader_next(&draft->reader);
        if (status == WHORL_OK)
            status = whorli_draft_statement(draft);
        if (status == WHORL_OK)
            status = whorli_loom_poll(loom, 1);
    }
    if (status == WHORL_OK && loom->sites == 0)
        return whorli_reader_refuse(&draft->reader, draft->reader.length,
                                    "the model has no spins: begin with `spins` and their number, or with `cluster`");
    return status == WHORL_OK ? whorli_gather(loom) : status;
}

static whorl_status whorli_draft_weave(whorli_draft *draft, whorl_host *host, const char *text, uint64_t length,
                                       uint64_t realisation)
{
    whorl_status status = whorli_text_valid(host, text, length, 1);
    if (status != WHORL_OK)
        return status;
    memset(draft, 0, sizeof *draft);
    whorl_stage(host, "reading text", 0, length);
    whorli_loom_begin(&draft->loom, host, &draft->reader);
    draft->loom.room[WHORLI_ROOM_ENTRY] += length / 6; /* three terms for each line of a long list */
    draft->loom.room[WHORLI_ROOM_PAIR] += length / 16;
    draft->loom.room[WHORLI_ROOM_DOUBLE] += length / 16;
    draft->realisation = realisation;
    do {
        draft->reader = whorli_reader_of(host, text, length, 1);
        status = whorli_draft_try(draft);
        whorl_lattice_free(host, draft->lattice);
        draft->lattice = NULL;
        if (status == WHORLI_AGAIN) {
            status = whorli_loom_grow(&draft->loom);
            status = status == WHORL_OK ? WHORLI_AGAIN : status;
        }
    } while (status == WHORLI_AGAIN);
    if (status != WHORL_OK)
        whorli_loom_end(&draft->loom);
    return status;
}

/* ---- >>models ---------------------------------------------------------------------------------------------------- */

struct whorl_model {
    whorl_expression e; /* its block is the model's */
    char *title;
    int32_t draws, placed;
    double *position;
};

static void whorli_model_layout(whorl_layout *layout, whorl_model *plan, uint64_t title_length, whorl_model **model)
{
    *model = (whorl_model *)whorl_layout_carve(layout, 1, sizeof(whorl_model));
    whorli_expression_layout(layout, &plan->e);
    plan->title = (char *)whorl_layout_carve(layout, title_length + 1, 1);
    plan->position = (double *)whorl_layout_carve(layout, plan->placed ? 3 * (uint64_t)plan->e.sites : 0,
                                                  sizeof(double));
}

/* Reads; then makes the object, or only tells what it would take. */
static whorl_status whorli_model_make(whorl_host *host, const char *text, uint64_t length, uint64_t realisation,
                                      whorl_model **model, uint64_t *object_bytes)
{
    whorl_layout layout = {NULL, 0};
    whorli_draft draft;
    whorl_model plan, *made;
    whorl_block block;
    int32_t k;
    whorl_status status = whorli_draft_weave(&draft, host, text, length, realisation);
    if (status != WHORL_OK)
        return status;
    memset(&plan, 0, sizeof plan);
    whorli_expression_measure(&plan.e, &draft.loom);
    plan.draws = (int32_t)draft.loom.draws;
    plan.placed = draft.placed == whorl_bits_low(draft.loom.sites);
    whorli_model_layout(&layout, &plan, draft.title_length, &made);
    status = whorli_expression_check(&draft.loom, &plan.e);
    if (status == WHORL_OK && object_bytes != NULL)
        *object_bytes = draft.loom.scratch.bytes + whorl_block_bytes(layout.bytes);
    if (status == WHORL_OK && object_bytes == NULL) {
        status = whorl_layout_take(host, &layout, &block);
        if (status == WHORL_OK) {
            whorli_model_layout(&layout, &plan, draft.title_length, &made);
            plan.e.block = block;
            *made = plan;
            whorli_expression_fill(&made->e, &draft.loom);
            if (draft.title_length > 0)
                memcpy(made->title, text + draft.title, (size_t)draft.title_length);
            made->title[draft.title_length] = '\0';
            for (k = 0; plan.placed && k < plan.e.sites; k++)
                memcpy(made->position + 3 * k, draft.position[k], sizeof draft.position[k]);
            *model = made;
        }
    }
    whorli_loom_end(&draft.loom);
    return status;
}

whorl_status whorl_model_read(whorl_host *host, const char *text, uint64_t length, uint64_t realisation,
                              whorl_model **model)
{
    *model = NULL;
    return whorli_model_make(host, text, length, realisation, model, NULL);
}

whorl_status whorl_model_bytes(whorl_host *host, const char *text, uint64_t length, uint64_t realisation,
                               uint64_t *bytes)
{
    uint64_t before = host->bytes_used, peak = host->bytes_peak, object = 0, most;
    whorl_status status;
    host->bytes_peak = before;
    status = whorli_model_make(host, text, length, realisation, NULL, &object);
    most = host->bytes_peak - before;
    if (host->bytes_peak < peak)
        host->bytes_peak = peak;
    if (status == WHORL_OK)
        *bytes = object > most ? object : most;
    return status;
}

void whorl_model_free(whorl_host *host, whorl_model *model)
{
    if (model != NULL)
        whorl_expression_free(host, &model->e);
}

const char *whorl_model_title(const whorl_model *model)
{
    return model->title;
}

int32_t whorl_model_sites(const whorl_model *model)
{
    return model->e.sites;
}

int32_t whorl_model_draws(const whorl_model *model)
{
    return model->draws;
}

int32_t whorl_model_position(const whorl_model *model, int32_t site, double position[3])
{
    if (!model->placed || site < 0 || site >= model->e.sites)
        return 0;
    memcpy(position, model->position + 3 * site, 3 * sizeof(double));
    return 1;
}

int32_t whorl_model_parameter_count(const whorl_model *model)
{
    return (int32_t)model->e.parameters;
}

const char *whorl_model_parameter_name(const whorl_model *model, int32_t parameter)
{
    if (parameter < 0 || (uint64_t)parameter >= model->e.parameters)
        return "";
    return model->e.parameter[parameter].name;
}

int32_t whorl_model_parameter_find(whorl_host *host, const whorl_model *model, const char *name, uint64_t length)
{
    whorli_nearest nearest = whorli_nearest_to(name, length);
    whorl_text text;
    uint64_t k;
    for (k = 0; k < model->e.parameters; k++) {
        const whorli_parameter *parameter = model->e.parameter + k;
        if (parameter->length == length && memcmp(parameter->name, name, (size_t)length) == 0)
            return (int32_t)k;
        whorli_nearest_try(&nearest, parameter->name, parameter->length);
    }
    text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
    whorl_text_add(&text, "the model has no parameter ");
    whorli_quote(&text, name, length);
    if (nearest.found == NULL) {
        whorl_text_add(&text, model->e.parameters == 0 ? ", nor any other" : "; it has");
        for (k = 0; k < model->e.parameters && k < 12; k++) {
            whorl_text_add(&text, k == 0 ? " " : ", ");
            whorl_text_add_bytes(&text, model->e.parameter[k].name, model->e.parameter[k].length);
        }
        whorl_text_add(&text, model->e.parameters > 12 ? ", ..." : "");
    }
    whorli_nearest_add(&nearest, &text);
    return -1;
}

uint64_t whorl_model_values_bytes(const whorl_model *model)
{
    return whorl_expression_weights_bytes(&model->e);
}

whorl_status whorl_model_values(whorl_host *host, const whorl_model *model, const whorl_setting *set, uint64_t count,
                                double *values)
{
    whorli_valuer valuer;
    whorl_block block;
    uint64_t k;
    whorl_status status = WHORL_OK;
    for (k = 0; status == WHORL_OK && k < count; k++) {
        if (set[k].parameter < 0 || (uint64_t)set[k].parameter >= model->e.parameters)
            status = whorl_fail(host, WHORL_BAD_ARGUMENT,
                                "the model has no such parameter: take its number from whorl_model_parameter_find");
        else
            status = whorli_values_finite(host, &set[k].value, 1);
        if (status != WHORL_OK)
            host->reason.index = k;
    }
    if (status == WHORL_OK)
        status = whorli_valuer_take(&valuer, host, &model->e, &block);
    if (status != WHORL_OK)
        return status;
    for (k = 0; k < model->e.parameters; k++) {
        valuer.given[k] = 0;
        valuer.needed[model->e.parameter[k].atom] = 1;
    }
    for (k = 0; k < count; k++) {
        valuer.given[set[k].parameter] = 1;
        valuer.values[set[k].parameter] = set[k].value;
    }
    status = whorli_valuer_run(&valuer);
    if (status == WHORL_OK)
        whorli_copy(values, valuer.values, model->e.parameters, sizeof(double));
    whorl_block_give(host, &block);
    return status;
}

uint64_t whorl_model_sum_count(const whorl_model *model)
{
    return model->e.sum_count;
}

const whorl_sum *whorl_model_sums(const whorl_model *model)
{
    return model->e.sums;
}

uint64_t whorl_model_term_count(const whorl_model *model)
{
    return model->e.term_count;
}

whorl_status whorl_model_weights(whorl_host *host, const whorl_model *model, const double *values,
                                 whorl_complex *weights)
{
    return whorl_expression_weights(host, &model->e, values, weights);
}

whorl_status whorl_model_sum(whorl_host *host, const whorl_model *model, const double *values, whorl_term *terms,
                             uint64_t room, whorl_sum *out)
{
    return whorl_expression_sum(host, &model->e, values, terms, room, out);
}

whorl_status whorl_model_weight_write(whorl_host *host, const whorl_model *model, uint64_t k, char *text, uint64_t room,
                                      uint64_t *used)
{
    return whorl_expression_weight_write(host, &model->e, k, text, room, used);
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
