/*
 * whorl_text.h 0.1.0: operators as text: expressions to sums of Pauli strings and back, named parameters kept symbolic.
 *
 * An expression is what one writes on paper: 0.5*(S+[0]*S-[1] + S-[0]*S+[1]), J*S[0].S[1] + D.(S[0] x S[1]), -h*X[3].
 *
 *     static const char *const names[2] = {"J", "h"};
 *     const char *text = "J*(S[0].S[1] + S[1].S[2]) - h*(Sz[0] + Sz[1] + Sz[2])";
 *     const double values[2] = {1.0, 0.25};
 *     whorl_status status = whorl_expression_read(&host, text, strlen(text), 3, names, 2, &expression);
 *     if (status == WHORL_OK) status = whorl_expression_weights(&host, expression, values, weights);
 *
 * gives H = sum_k f_k H_k: sums H_k free of parameters (whorl_expression_sums) and weights f_k that can be computed
 * anew for other values, as whorl_action.h takes them. It reads no files; model texts are the job of whorl_model.h.
 *
 * Grammar (EBNF). Blanks, line ends and comments from # to the end of the line may stand between words.
 *
 *     expression = product { ( "+" | "-" ) product } ;
 *     product    = signed { ( "*" | "/" ) signed } ;
 *     signed     = { "+" | "-" } dotted ;
 *     dotted     = crossed { "." crossed } ;                   the scalar product
 *     crossed    = powered { "x" powered } ;                   the vector product
 *     powered    = factor [ "^" signed ] ;                     from the right: 2^3^2 = 2^9
 *     factor     = number | name | "i" | spin | "(" expression ")" | "sqrt" "(" expression ")" | vector | matrix ;
 *     spin       = ( "X" | "Y" | "Z" | "Sx" | "Sy" | "Sz" | "S+" | "S-" | "S" ) "[" site "]" ;
 *     vector     = "(" expression "," expression "," expression ")" ;
 *     matrix     = "(" row ";" row ";" row ")" ;               row = expression "," expression "," expression
 *     number     = ( digits [ "." [ digits ] ] | "." digits ) [ ( "e" | "E" ) [ "+" | "-" ] digits ] ;
 *     name       = letter { letter | digit | "_" } ;           not one of the words below
 *     site       = digits ;                                    0 .. sites-1
 *
 * X, Y, Z are Pauli matrices; Sx, Sy, Sz, S+, S- are spin operators (S = sigma/2); S[k] is the vector (Sx, Sy, Sz) at
 * site k; i is the imaginary unit. From loose to tight: + and -; * and /; a sign; the scalar product; the vector
 * product; powers. So D.S[0] x S[1] is the triple product, -2^2 is -4, and 1/2*X[0] is half of X[0]. No product sign
 * may be left out. Numbers and operators multiply each other and vectors, numbers also matrices; the scalar product
 * joins vectors and matrices; vectors and matrices add among themselves. S[0].M.S[1] is sum_ab S_a M_ab S_b. Only
 * numbers divide, also those that contain parameters: J/(1 + a) is fine. Words that cannot name parameters: i j r n d x
 * sqrt and the spins.
 * Operators have whole powers from 0 on; numbers have any real power, of a negative base whole ones: r^-a is fine.
 *
 * Numbers are doubles; constants are computed from left to right as written, so that 0.1 + 0.2 is what C makes of it.
 * Texts are limited to 2^31 - 1 bytes; nesting is limited by memory only.
 *
 * Memory: reading takes one block of scratch and one for the object (whorl_expression_bytes tells both together).
 * Where the scratch was guessed too small it is given back, and reading starts again with more.
 * Threads: none are used; expressions never change after they were made. Errors: WHORL_BAD_TEXT with line, column, what
 * was expected and what to change; outputs are untouched.
 * References: E. W. Dijkstra, "Making a translator for ALGOL 60", MC report 35/61 (1961): the operator stack.
 */
#include "whorl_core.h"
#include "whorl_pauli.h"

#ifndef WHORL_TEXT_INCLUDED
#define WHORL_TEXT_INCLUDED

#if WHORL_CORE_VERSION != 100 || WHORL_PAULI_VERSION != 100
#error "whorl_text.h 0.1.0 needs whorl_core.h and whorl_pauli.h 0.1.0: take all headers from one release"
#endif
#define WHORL_TEXT_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

#define WHORL_MOST_PARAMETERS 4096 /* of one expression or model */
#define WHORL_MOST_SUMS 4096       /* different weights f_k of one expression or model */

/* ---- sums -------------------------------------------------------------------------------------------------------- */

/* A named number of an expression. */
typedef struct whorl_name_value {
    const char *name;
    double value;
} whorl_name_value;

/*
 * The sum as text that whorl_sum_read reads back as the same bits: 0.25*X[0]*X[1] - 0.5*Y[2] + (1 - 2*i)*Z[0], broken
 * into indented lines, "0" for the empty sum. Writes at most room bytes with the NUL behind, and *used, the length
 * without the NUL. Cost O(n), no memory.
 * Errors: WHORL_NO_ROOM (reason.index is the room that would do; nothing is written, so room 0 with text NULL asks),
 * and those of whorl_sum_check.
 */
WHORL_API whorl_status whorl_sum_write(whorl_host *host, const whorl_sum *sum, char *text, uint64_t room,
                                       uint64_t *used);

/*
 * Reads an expression of numbers and the given names into the caller's array of `room` terms; *out views the tidy sum.
 * Cost: O(n log n) for n words and terms, and what products in the text ask for; scratch as whorl_sum_read_bytes tells.
 * Errors: WHORL_BAD_TEXT; WHORL_NOT_FINITE (a value, number or result is not finite); WHORL_BAD_ARGUMENT (sites
 * outside 1 .. 64, a name that is none or stands there twice: its index); WHORL_NO_ROOM (reason.index is the number of
 * terms: nothing is written); WHORL_TOO_LARGE; WHORL_OVER_LIMIT; WHORL_NO_MEMORY; WHORL_CANCELLED.
 */
WHORL_API whorl_status whorl_sum_read(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                      const whorl_name_value *names, uint64_t name_count, whorl_term *terms,
                                      uint64_t room, whorl_sum *out);
/* The scratch of that call, exactly; found by reading. Errors as there. */
WHORL_API whorl_status whorl_sum_read_bytes(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                            const whorl_name_value *names, uint64_t name_count, uint64_t *bytes);

/* ---- expressions with parameters --------------------------------------------------------------------------------- */

typedef struct whorl_expression whorl_expression;

/*
 * Reads an expression in which names[k] is parameter k, a real number that is not yet known. The caller frees the
 * result with whorl_expression_free. Names and text are not needed afterwards.
 * Errors: as whorl_sum_read without WHORL_NO_ROOM; WHORL_TOO_LARGE also for more than WHORL_MOST_PARAMETERS names or
 * WHORL_MOST_SUMS different weights. *expression is then NULL.
 */
WHORL_API whorl_status whorl_expression_read(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                             const char *const *names, uint64_t name_count,
                                             whorl_expression **expression);
/* The memory of that call, object and scratch together, exactly; found by reading. Errors as there. */
WHORL_API whorl_status whorl_expression_bytes(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                              const char *const *names, uint64_t name_count, uint64_t *bytes);
/* NULL is legal. */
WHORL_API void whorl_expression_free(whorl_host *host, whorl_expression *expression);

/* The number of sums H_k, and the array of them (tidy, not empty, owned by the expression). */
WHORL_API uint64_t whorl_expression_count(const whorl_expression *expression);
WHORL_API const whorl_sum *whorl_expression_sums(const whorl_expression *expression);
/* The terms of all H_k together. */
WHORL_API uint64_t whorl_expression_term_count(const whorl_expression *expression);
/*
 * The weights f_k (one for each sum) at these values of the parameters, one for each name. Cost O(size of the weights);
 * scratch as whorl_expression_weights_bytes tells.
 * Errors: WHORL_NOT_FINITE (a value is not finite: its index; a division by zero, the root of a negative number, an
 * overflow), WHORL_OVER_LIMIT, WHORL_NO_MEMORY; weights are then untouched.
 */
WHORL_API whorl_status whorl_expression_weights(whorl_host *host, const whorl_expression *expression,
                                                const double *values, whorl_complex *weights);
WHORL_API uint64_t whorl_expression_weights_bytes(const whorl_expression *expression);
/*
 * H = sum_k f_k H_k as one tidy sum in the caller's terms; room of whorl_expression_term_count always does and is asked
 * for. Errors: WHORL_NO_ROOM (reason.index is the room asked for), those of the weights, WHORL_CANCELLED (terms are
 * then unspecified).
 */
WHORL_API whorl_status whorl_expression_sum(whorl_host *host, const whorl_expression *expression, const double *values,
                                            whorl_term *terms, uint64_t room, whorl_sum *out);
/*
 * The weight f_k as text in the same grammar: J^2*h, J*(1 + a)^-1; "1" for the part without parameters. As
 * whorl_sum_write; WHORL_BAD_ARGUMENT for k from the count on.
 */
WHORL_API whorl_status whorl_expression_weight_write(whorl_host *host, const whorl_expression *expression, uint64_t k,
                                                     char *text, uint64_t room, uint64_t *used);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_TEXT_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_TEXT_IMPLEMENTED)
#define WHORL_TEXT_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- >>words ----------------------------------------------------------------------------------------------------- */

enum { WHORLI_WORD_END, WHORLI_WORD_STOP, WHORLI_WORD_NUMBER, WHORLI_WORD_NAME, WHORLI_WORD_MARK };

/* Reads a text word by word. The current word is text[start .. end). */
typedef struct whorli_reader {
    whorl_host *host;
    const char *text;
    uint64_t length;
    int32_t lines;     /* 1: a line that begins at the left edge begins a new statement (WHORLI_WORD_STOP) */
    int32_t kind;
    uint64_t start, end;
    uint64_t before;   /* where the word before this one ended */
    double number;     /* of a number */
    int64_t whole;     /* the same where it is written with digits only (up to 18), else -1 */
    uint64_t words;    /* read so far */
} whorli_reader;

static whorli_reader whorli_reader_of(whorl_host *host, const char *text, uint64_t length, int32_t lines)
{
    whorli_reader reader;
    memset(&reader, 0, sizeof reader);
    reader.host = host;
    reader.text = text;
    reader.length = length;
    reader.lines = lines;
    if (length >= 3 && memcmp(text, "\xef\xbb\xbf", 3) == 0)
        reader.end = 3; /* a byte order mark */
    reader.before = reader.start = reader.end;
    return reader;
}

/* Starts a failure at a place of the text. */
static whorl_text whorli_reader_fail(whorli_reader *reader, whorl_status status, uint64_t at)
{
    whorl_text text = whorl_fail_begin(reader->host, status);
    uint64_t k, line = 1, line_start = 0;
    for (k = 0; k < at && k < reader->length; k++)
        if (reader->text[k] == '\n') {
            line++;
            line_start = k + 1;
        }
    reader->host->reason.line = (int32_t)line;
    reader->host->reason.column = (int32_t)(at - line_start + 1);
    return text;
}

static whorl_status whorli_reader_refuse(whorli_reader *reader, uint64_t at, const char *words)
{
    whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, at);
    whorl_text_add(&text, words);
    return WHORL_BAD_TEXT;
}

static int32_t whorli_is_letter(char c)
{
    return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') || c == '_';
}

static int32_t whorli_is_digit(char c)
{
    return c >= '0' && c <= '9';
}

/* Goes to the next word; over blanks and comments. */
static whorl_status whorli_reader_next(whorli_reader *reader)
{
    const char *text = reader->text;
    uint64_t at = reader->end, length = reader->length;
    reader->before = reader->end;
    reader->words++;
    for (; at < length; at++) {
        if (text[at] == '#')
            while (at + 1 < length && text[at + 1] != '\n')
                at++;
        else if (text[at] == '\n' && reader->lines && at + 1 < length && text[at + 1] != ' ' && text[at + 1] != '\t' &&
                 text[at + 1] != '\r' && text[at + 1] != '\n' && text[at + 1] != '#') {
            reader->kind = WHORLI_WORD_STOP;
            reader->start = reader->end = at + 1;
            return WHORL_OK;
        } else if (text[at] != ' ' && text[at] != '\t' && text[at] != '\r' && text[at] != '\n')
            break;
    }
    reader->start = at;
    reader->kind = WHORLI_WORD_END;
    if (at == length) {
        reader->end = at;
        return WHORL_OK;
    }
    if (whorli_is_digit(text[at]) || (text[at] == '.' && at + 1 < length && whorli_is_digit(text[at + 1]))) {
        uint64_t k;
        reader->kind = WHORLI_WORD_NUMBER;
        reader->end = at + whorl_real_read(text + at, length - at, &reader->number);
        reader->whole = 0;
        for (k = at; k < reader->end; k++)
            reader->whole = whorli_is_digit(text[k]) && reader->whole >= 0 && k - at < 18
                                ? 10 * reader->whole + (text[k] - '0') : -1;
        if (!whorl_is_finite(reader->number)) {
            whorl_text why = whorli_reader_fail(reader, WHORL_NOT_FINITE, at);
            whorl_text_add(&why, "this number is too large for a double: keep it below 1.8e308");
            return WHORL_NOT_FINITE;
        }
        return WHORL_OK;
    }
    reader->kind = whorli_is_letter(text[at]) ? WHORLI_WORD_NAME : WHORLI_WORD_MARK;
    at++;
    if (reader->kind == WHORLI_WORD_NAME)
        while (at < length && (whorli_is_letter(text[at]) || whorli_is_digit(text[at])))
            at++;
    if (at == reader->start + 1 && text[at - 1] == 'S' && at + 1 < length && (text[at] == '+' || text[at] == '-') &&
        text[at + 1] == '[')
        at++; /* S+ and S- are words */
    reader->end = at;
    return WHORL_OK;
}

static int32_t whorli_reader_at_end(const whorli_reader *reader)
{
    return reader->kind == WHORLI_WORD_END || reader->kind == WHORLI_WORD_STOP;
}

static int32_t whorli_reader_is(const whorli_reader *reader, const char *word)
{
    uint64_t length = (uint64_t)strlen(word);
    return !whorli_reader_at_end(reader) && reader->kind != WHORLI_WORD_NUMBER &&
           reader->end - reader->start == length && memcmp(reader->text + reader->start, word, (size_t)length) == 0;
}

/* Adds up to 24 bytes of a text in quotes, what cannot be printed as a question mark. */
static void whorli_quote(whorl_text *to, const char *text, uint64_t length)
{
    uint64_t k;
    whorl_text_add(to, "`");
    for (k = 0; k < length && k < 24; k++) {
        char c = text[k];
        if (c < ' ' || c > '~')
            c = '?';
        whorl_text_add_bytes(to, &c, 1);
    }
    whorl_text_add(to, length > 24 ? "...`" : "`");
}

/* What stands at the current word; and the place to blame for it. */
static void whorli_reader_found(const whorli_reader *reader, whorl_text *to)
{
    if (reader->kind == WHORLI_WORD_END)
        whorl_text_add(to, "the text ends");
    else if (reader->kind == WHORLI_WORD_STOP)
        whorl_text_add(to, "the statement ends (a line that goes on begins with a blank)");
    else {
        whorl_text_add(to, "found ");
        whorli_quote(to, reader->text + reader->start, reader->end - reader->start);
    }
}

static uint64_t whorli_reader_place(const whorli_reader *reader)
{
    return whorli_reader_at_end(reader) ? reader->before : reader->start;
}

/* "expected <words>, but ..." at the current word. */
static whorl_status whorli_reader_expected(whorli_reader *reader, const char *words)
{
    whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, whorli_reader_place(reader));
    whorl_text_add(&text, "expected ");
    whorl_text_add(&text, words);
    whorl_text_add(&text, ", but ");
    whorli_reader_found(reader, &text);
    return WHORL_BAD_TEXT;
}

/* Steps over a word that must stand here. */
static whorl_status whorli_reader_take(whorli_reader *reader, const char *word, const char *what)
{
    return whorli_reader_is(reader, word) ? whorli_reader_next(reader) : whorli_reader_expected(reader, what);
}

/*
 * Letters to be changed, added, left out or swapped with their neighbour to turn one word into the other; 99 for long
 * words. (Damerau, Commun. ACM 7, 171 (1964))
 */
static int32_t whorli_word_distance(const char *a, uint64_t a_length, const char *b, uint64_t b_length)
{
    int32_t rows[3][33];
    uint64_t i, j;
    if (a_length > 32 || b_length > 32)
        return 99;
    for (j = 0; j <= b_length; j++)
        rows[0][j] = (int32_t)j;
    for (i = 1; i <= a_length; i++) {
        const int32_t *last = rows[(i - 1) % 3], *before = rows[(i + 1) % 3];
        int32_t *row = rows[i % 3];
        row[0] = (int32_t)i;
        for (j = 1; j <= b_length; j++) {
            int32_t best = last[j - 1] + (a[i - 1] != b[j - 1]);
            if (last[j] + 1 < best)
                best = last[j] + 1;
            if (row[j - 1] + 1 < best)
                best = row[j - 1] + 1;
            if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1] && before[j - 2] + 1 < best)
                best = before[j - 2] + 1;
            row[j] = best;
        }
    }
    return rows[a_length % 3][b_length];
}

/* Keeps the word nearest to a given one. */
typedef struct whorli_nearest {
    const char *wanted, *found;
    uint64_t wanted_length, found_length;
    int32_t distance;
} whorli_nearest;

static whorli_nearest whorli_nearest_to(const char *text, uint64_t length)
{
    whorli_nearest nearest;
    nearest.wanted = text;
    nearest.wanted_length = length;
    nearest.found = NULL;
    nearest.found_length = 0;
    nearest.distance = length < 3 ? 2 : 2 + (int32_t)(length > 32 ? 0 : length / 4); /* closer than this */
    return nearest;
}

static void whorli_nearest_try(whorli_nearest *nearest, const char *word, uint64_t length)
{
    int32_t distance = whorli_word_distance(nearest->wanted, nearest->wanted_length, word, length);
    if (distance < nearest->distance) {
        nearest->distance = distance;
        nearest->found = word;
        nearest->found_length = length;
    }
}

static void whorli_nearest_add(const whorli_nearest *nearest, whorl_text *to)
{
    if (nearest->found == NULL)
        return;
    whorl_text_add(to, " (did you mean ");
    whorli_quote(to, nearest->found, nearest->found_length);
    whorl_text_add(to, "?)");
}

/* ---- >>loom ------------------------------------------------------------------------------------------------------ */

/*
 * The loom turns expressions into entries: complex coefficient times weight times Pauli string. A weight is a monomial,
 * a product of powers of atoms; an atom is a parameter, or one over a polynomial, the root of one, or a power with
 * another one as exponent. Numbers
 * and operators are both lists of entries ("slices"), those of numbers with the string 1, each weight once; a vector is
 * three slices, a matrix nine. Slices lie on a stack, so adding two operators is free: they are neighbours already.
 */
typedef struct whorli_entry {
    uint64_t x, z;
    double re, im;
    uint32_t weight, spare;
} whorli_entry;

typedef struct whorli_factor {
    uint32_t atom;
    int32_t power;
} whorli_factor;

/* A range of an array. */
typedef struct whorli_range {
    uint32_t first, count;
} whorli_range;

/* A term of a polynomial in the atoms. */
typedef struct whorli_part {
    double re, im;
    uint32_t weight, spare;
} whorli_part;

enum { WHORLI_ATOM_PARAMETER, WHORLI_ATOM_INVERSE, WHORLI_ATOM_ROOT, WHORLI_ATOM_POWER };
typedef struct whorli_atom {
    int32_t kind;
    uint32_t parameter;
    whorli_range base;     /* the polynomial */
    whorli_range exponent; /* another one, of a power */
    int32_t line, column;
} whorli_atom;

typedef struct whorli_parameter {
    const char *name; /* in the text; of a finished object, in its block and with NUL behind */
    uint64_t length;
    whorli_range formula; /* polynomial in earlier ones; only models have it */
    uint32_t atom, weight;
} whorli_parameter;

enum { WHORLI_NUMBER, WHORLI_OPERATOR, WHORLI_VECTOR, WHORLI_SPIN_VECTOR, WHORLI_MATRIX };
typedef struct whorli_value { /* a named vector or matrix */
    int32_t kind;
    whorli_range slice[9];
} whorli_value;

enum { WHORLI_IS_PARAMETER, WHORLI_IS_VALUE, WHORLI_IS_LIST, WHORLI_IS_DRAW, WHORLI_IS_ELEMENT };
typedef struct whorli_name {
    const char *text;
    uint64_t length;
    int32_t role, kind;
    uint32_t index;
} whorli_name;

/* One step of a compiled expression. */
typedef struct whorli_step {
    double number;
    uint32_t at, argument;
    uint8_t does, left, right, spare;
} whorli_step;

/* An operator or parenthesis that waits for its right side. */
typedef struct whorli_waiting {
    uint32_t at;
    uint8_t does, level, rows, columns;
} whorli_waiting;

/* A list of pairs or sites that a model sums over, and a column of random numbers; see whorl_model.h. */
typedef struct whorli_list {
    int32_t is_pairs, far;   /* far: displacements are known */
    uint64_t first, count;   /* in `pairs`; sites are pairs with j = i */
    uint64_t numbers;        /* where its table begins: count rows of columns, then count displacements if far */
    uint32_t column, columns; /* names of the table */
    uint64_t at;
} whorli_list;

enum { WHORLI_DRAW_UNIFORM, WHORLI_DRAW_NORMAL, WHORLI_DRAW_SIGNS };
typedef struct whorli_draw {
    const char *name;
    uint64_t length;
    uint32_t list;
    int32_t kind;
    double a, b;
    uint64_t seed;
} whorli_draw;

typedef struct whorli_pair {
    int32_t i, j;
} whorli_pair;

/* The arrays of the scratch block; each may turn out too short. */
enum {
    WHORLI_ROOM_ENTRY,
    WHORLI_ROOM_STEP,
    WHORLI_ROOM_WAITING,
    WHORLI_ROOM_KIND,
    WHORLI_ROOM_EDGE,
    WHORLI_ROOM_MONOMIAL,
    WHORLI_ROOM_FACTOR,
    WHORLI_ROOM_ATOM,
    WHORLI_ROOM_PART,
    WHORLI_ROOM_PARAMETER,
    WHORLI_ROOM_VALUE,
    WHORLI_ROOM_NAME,
    WHORLI_ROOM_LIST,
    WHORLI_ROOM_DRAW,
    WHORLI_ROOM_COLUMN,
    WHORLI_ROOM_PAIR,
    WHORLI_ROOM_DOUBLE,
    WHORLI_ROOMS
};
#define WHORLI_AGAIN 1000              /* private status: a room was too short */
#define WHORLI_MOST_FACTORS 64         /* different atoms of one weight */
#define WHORLI_MOST_POWER 1048576      /* of an atom in a weight */
#define WHORLI_MOST_EXPONENT 1024      /* behind ^ */
#define WHORLI_LOCALS 24               /* names that only hold inside one statement */

typedef struct whorli_loom {
    whorl_host *host;
    whorli_reader *reader;
    whorl_block scratch;
    uint64_t room[WHORLI_ROOMS];
    int32_t too_short;
    uint64_t wanted;
    int32_t sites;          /* 0: not yet known */
    const whorl_name_value *constant; /* parameters that are numbers at once; NULL: they stay symbols */

    whorli_entry *entry;
    uint64_t entries;
    uint64_t *edge; /* where slice k begins */
    uint64_t depth; /* slices */
    whorli_step *step;
    uint64_t steps;
    whorli_waiting *waiting;
    uint64_t waits;
    uint8_t *kind; /* of the values on the stack, while compiling */
    uint64_t kinds, width, most_width;
    whorli_range *monomial;
    uint32_t *monomial_slots, *atom_slots, *name_slots;
    uint64_t monomials;
    whorli_factor *factor;
    uint64_t factors;
    whorli_atom *atom;
    uint64_t atoms;
    whorli_part *part;
    uint64_t parts;
    whorli_parameter *parameter;
    uint64_t parameters;
    whorli_value *value;
    uint64_t values;
    whorli_name *name;
    uint64_t names;
    whorli_list *list;
    uint64_t lists;
    whorli_draw *draw;
    uint64_t draws;
    whorli_range *column; /* names, in the text */
    uint64_t columns;
    whorli_pair *pair;
    uint64_t pairs;
    double *doubles;
    uint64_t doubles_used;
    whorl_term *term; /* as many as entries: where sums are gathered */
    uint64_t *tally;  /* by weight: where its terms end */
    uint64_t *gathered; /* by weight: how many terms are left */

    whorli_name local[WHORLI_LOCALS];
    int32_t locals;
    int32_t site[2];              /* what i and j stand for; -1 outside of a sum over a list */
    int32_t site_names;           /* 0, 1: i, 2: i and j */
    double element[WHORLI_LOCALS * 3]; /* numbers of the current pair or site */
    uint64_t at;                  /* of the step that runs */
    uint64_t since_poll;
} whorli_loom;

static uint64_t whorli_slots(uint64_t room)
{
    uint64_t slots = 16;
    while (slots < UINT64_C(1) << 60 && slots / 2 < room)
        slots *= 2;
    return slots;
}

static void whorli_loom_layout(whorl_layout *layout, whorli_loom *loom)
{
    const uint64_t *room = loom->room;
    loom->entry = (whorli_entry *)whorl_layout_carve(layout, room[WHORLI_ROOM_ENTRY], sizeof(whorli_entry));
    loom->term = (whorl_term *)whorl_layout_carve(layout, room[WHORLI_ROOM_ENTRY], sizeof(whorl_term));
    loom->step = (whorli_step *)whorl_layout_carve(layout, room[WHORLI_ROOM_STEP], sizeof(whorli_step));
    loom->waiting = (whorli_waiting *)whorl_layout_carve(layout, room[WHORLI_ROOM_WAITING], sizeof(whorli_waiting));
    loom->kind = (uint8_t *)whorl_layout_carve(layout, room[WHORLI_ROOM_KIND], 1);
    loom->edge = (uint64_t *)whorl_layout_carve(layout, room[WHORLI_ROOM_EDGE], sizeof(uint64_t));
    loom->monomial = (whorli_range *)whorl_layout_carve(layout, room[WHORLI_ROOM_MONOMIAL], sizeof(whorli_range));
    loom->tally = (uint64_t *)whorl_layout_carve(layout, room[WHORLI_ROOM_MONOMIAL], sizeof(uint64_t));
    loom->gathered = (uint64_t *)whorl_layout_carve(layout, room[WHORLI_ROOM_MONOMIAL], sizeof(uint64_t));
    loom->factor = (whorli_factor *)whorl_layout_carve(layout, room[WHORLI_ROOM_FACTOR], sizeof(whorli_factor));
    loom->atom = (whorli_atom *)whorl_layout_carve(layout, room[WHORLI_ROOM_ATOM], sizeof(whorli_atom));
    loom->part = (whorli_part *)whorl_layout_carve(layout, room[WHORLI_ROOM_PART], sizeof(whorli_part));
    loom->parameter = (whorli_parameter *)whorl_layout_carve(layout, room[WHORLI_ROOM_PARAMETER],
                                                             sizeof(whorli_parameter));
    loom->value = (whorli_value *)whorl_layout_carve(layout, room[WHORLI_ROOM_VALUE], sizeof(whorli_value));
    loom->name = (whorli_name *)whorl_layout_carve(layout, room[WHORLI_ROOM_NAME], sizeof(whorli_name));
    loom->list = (whorli_list *)whorl_layout_carve(layout, room[WHORLI_ROOM_LIST], sizeof(whorli_list));
    loom->draw = (whorli_draw *)whorl_layout_carve(layout, room[WHORLI_ROOM_DRAW], sizeof(whorli_draw));
    loom->column = (whorli_range *)whorl_layout_carve(layout, room[WHORLI_ROOM_COLUMN], sizeof(whorli_range));
    loom->pair = (whorli_pair *)whorl_layout_carve(layout, room[WHORLI_ROOM_PAIR], sizeof(whorli_pair));
    loom->doubles = (double *)whorl_layout_carve(layout, room[WHORLI_ROOM_DOUBLE], sizeof(double));
    loom->monomial_slots = (uint32_t *)whorl_layout_carve(layout, whorli_slots(room[WHORLI_ROOM_MONOMIAL]), 4);
    loom->atom_slots = (uint32_t *)whorl_layout_carve(layout, whorli_slots(room[WHORLI_ROOM_ATOM]), 4);
    loom->name_slots = (uint32_t *)whorl_layout_carve(layout, whorli_slots(room[WHORLI_ROOM_NAME]), 4);
}

/* Rooms for a text of so many bytes; what was guessed too small grows later. */
static void whorli_loom_begin(whorli_loom *loom, whorl_host *host, whorli_reader *reader)
{
    int32_t k;
    memset(loom, 0, sizeof *loom);
    loom->host = host;
    loom->reader = reader;
    for (k = 0; k < WHORLI_ROOMS; k++)
        loom->room[k] = 16;
    loom->room[WHORLI_ROOM_ENTRY] = loom->room[WHORLI_ROOM_STEP] = 64;
}

static void whorli_loom_end(whorli_loom *loom)
{
    whorl_block_give(loom->host, &loom->scratch);
}

/* Takes the scratch block and empties everything. */
static whorl_status whorli_loom_start(whorli_loom *loom)
{
    whorl_layout layout = {NULL, 0};
    whorl_status status;
    whorli_loom_layout(&layout, loom);
    status = whorl_layout_take(loom->host, &layout, &loom->scratch);
    if (status != WHORL_OK)
        return status;
    whorli_loom_layout(&layout, loom);
    memset(loom->monomial_slots, 0, (size_t)(4 * whorli_slots(loom->room[WHORLI_ROOM_MONOMIAL])));
    memset(loom->atom_slots, 0, (size_t)(4 * whorli_slots(loom->room[WHORLI_ROOM_ATOM])));
    memset(loom->name_slots, 0, (size_t)(4 * whorli_slots(loom->room[WHORLI_ROOM_NAME])));
    loom->entries = loom->depth = loom->steps = loom->waits = loom->kinds = loom->width = loom->most_width = 0;
    loom->factors = loom->atoms = loom->parts = loom->parameters = loom->values = loom->names = 0;
    loom->lists = loom->draws = loom->columns = loom->pairs = loom->doubles_used = 0;
    loom->monomials = 1; /* weight 0 is 1 */
    loom->monomial[0].first = loom->monomial[0].count = 0;
    loom->locals = loom->site_names = 0;
    loom->site[0] = loom->site[1] = -1;
    loom->at = 0;
    loom->since_poll = 0;
    return WHORL_OK;
}

/* WHORL_OK where so many elements fit; otherwise everything has to start again with more room. */
static whorl_status whorli_loom_need(whorli_loom *loom, int32_t room, uint64_t count)
{
    if (count <= loom->room[room])
        return WHORL_OK;
    loom->too_short = room;
    loom->wanted = count;
    return WHORLI_AGAIN;
}

/* After WHORLI_AGAIN: gives the scratch back and enlarges the room that was too short. */
static whorl_status whorli_loom_grow(whorli_loom *loom)
{
    uint64_t *room = loom->room + loom->too_short;
    const uint64_t most = UINT64_C(1) << 31; /* indices have 32 bits, and memory ends */
    whorli_loom_end(loom);
    if (loom->wanted >= most)
        return whorl_fail(loom->host, WHORL_TOO_LARGE,
                          "the expression has more than 2^31 terms: multiply out less, or use whorl_pauli.h");
    *room = 2 * *room > loom->wanted ? 2 * *room : loom->wanted;
    return WHORL_OK;
}

static whorl_status whorli_loom_poll(whorli_loom *loom, uint64_t work)
{
    loom->since_poll += work;
    if (loom->since_poll < 65536)
        return WHORL_OK;
    loom->since_poll = 0;
    whorl_stage(loom->host, "reading text", loom->reader->start, loom->reader->length);
    return whorl_poll(loom->host);
}

/* Fails at the step that runs; in a sum over a list it says for which pair or site. */
static whorl_status whorli_loom_refuse(whorli_loom *loom, whorl_status status, const char *words)
{
    whorl_text text = whorli_reader_fail(loom->reader, status, loom->at);
    whorl_text_add(&text, words);
    if (loom->site_names > 0) {
        whorl_text_add(&text, loom->site_names == 2 ? " (for the pair " : " (for site ");
        whorl_text_add_signed(&text, loom->site[0]);
        if (loom->site_names == 2) {
            whorl_text_add(&text, "-");
            whorl_text_add_signed(&text, loom->site[1]);
        }
        whorl_text_add(&text, ")");
    }
    return status;
}

/* ---- >>weights --------------------------------------------------------------------------------------------------- */

static uint64_t whorli_mix(uint64_t hash, uint64_t word)
{
    hash = (hash ^ word) * UINT64_C(0x9e3779b97f4a7c15);
    return hash ^ (hash >> 29);
}

static uint64_t whorli_factors_hash(const whorli_factor *factors, uint32_t count)
{
    uint64_t hash = count;
    uint32_t k;
    for (k = 0; k < count; k++)
        hash = whorli_mix(hash, (uint64_t)factors[k].atom << 32 | (uint32_t)factors[k].power);
    return hash;
}

/* The number of a monomial; it gets one if it is new. */
static whorl_status whorli_loom_monomial(whorli_loom *loom, const whorli_factor *factors, uint32_t count,
                                         uint32_t *weight)
{
    uint64_t mask = whorli_slots(loom->room[WHORLI_ROOM_MONOMIAL]) - 1;
    uint64_t at = whorli_factors_hash(factors, count) & mask;
    whorli_range *made;
    if (count == 0) {
        *weight = 0;
        return WHORL_OK;
    }
    for (; loom->monomial_slots[at] != 0; at = (at + 1) & mask) {
        const whorli_range *known = loom->monomial + loom->monomial_slots[at];
        if (known->count == count && memcmp(loom->factor + known->first, factors, count * sizeof *factors) == 0) {
            *weight = loom->monomial_slots[at];
            return WHORL_OK;
        }
    }
    if (whorli_loom_need(loom, WHORLI_ROOM_MONOMIAL, loom->monomials + 1) != WHORL_OK ||
        whorli_loom_need(loom, WHORLI_ROOM_FACTOR, loom->factors + count) != WHORL_OK)
        return WHORLI_AGAIN;
    made = loom->monomial + loom->monomials;
    made->first = (uint32_t)loom->factors;
    made->count = count;
    memcpy(loom->factor + loom->factors, factors, count * sizeof *factors);
    loom->factors += count;
    *weight = loom->monomial_slots[at] = (uint32_t)loom->monomials++;
    return WHORL_OK;
}

/* The product of two weights: factors are sorted by atom. */
static whorl_status whorli_loom_weigh(whorli_loom *loom, uint32_t a, uint32_t b, uint32_t *weight)
{
    whorli_factor merged[2 * WHORLI_MOST_FACTORS];
    whorli_range one = loom->monomial[a], two = loom->monomial[b];
    const whorli_factor *p = loom->factor + one.first, *q = loom->factor + two.first;
    uint32_t i = 0, j = 0, count = 0;
    if (a == 0 || b == 0) {
        *weight = a + b;
        return WHORL_OK;
    }
    while (i < one.count || j < two.count) {
        whorli_factor next;
        if (j == two.count || (i < one.count && p[i].atom < q[j].atom)) {
            next = p[i++];
        } else if (i == one.count || q[j].atom < p[i].atom) {
            next = q[j++];
        } else {
            next = p[i++];
            next.power += q[j++].power;
        }
        if (next.power > WHORLI_MOST_POWER || next.power < -WHORLI_MOST_POWER)
            return whorli_loom_refuse(loom, WHORL_TOO_LARGE, "a parameter has too high a power: keep it below 2^20");
        if (next.power != 0)
            merged[count++] = next;
    }
    if (count > WHORLI_MOST_FACTORS)
        return whorli_loom_refuse(loom, WHORL_TOO_LARGE,
                                  "more than 64 different parameters are multiplied here: combine some with let");
    return whorli_loom_monomial(loom, merged, count, weight);
}

static whorl_status whorli_loom_weight_power(whorli_loom *loom, uint32_t a, int32_t power, uint32_t *weight)
{
    whorli_factor raised[WHORLI_MOST_FACTORS];
    whorli_range one = loom->monomial[a];
    uint32_t k;
    for (k = 0; k < one.count; k++) {
        int64_t high = (int64_t)loom->factor[one.first + k].power * power;
        if (high > WHORLI_MOST_POWER || high < -WHORLI_MOST_POWER)
            return whorli_loom_refuse(loom, WHORL_TOO_LARGE, "a parameter has too high a power: keep it below 2^20");
        raised[k].atom = loom->factor[one.first + k].atom;
        raised[k].power = (int32_t)high;
    }
    return whorli_loom_monomial(loom, raised, power == 0 ? 0 : one.count, weight);
}

static int32_t whorli_part_order(const void *a, const void *b)
{
    const whorli_part *left = (const whorli_part *)a, *right = (const whorli_part *)b;
    return (left->weight > right->weight) - (left->weight < right->weight);
}

/* Keeps slice k, a number, as a polynomial. */
static whorl_status whorli_loom_keep(whorli_loom *loom, uint64_t k, whorli_range *kept)
{
    uint64_t from = loom->edge[k], to = k + 1 < loom->depth ? loom->edge[k + 1] : loom->entries;
    if (whorli_loom_need(loom, WHORLI_ROOM_PART, loom->parts + (to - from)) != WHORL_OK)
        return WHORLI_AGAIN;
    kept->first = (uint32_t)loom->parts;
    kept->count = (uint32_t)(to - from);
    for (; from < to; from++) {
        whorli_part *part = loom->part + loom->parts++;
        part->re = loom->entry[from].re + 0.0; /* one kind of zero only */
        part->im = loom->entry[from].im + 0.0;
        part->weight = loom->entry[from].weight;
        part->spare = 0;
    }
    whorl_sort(loom->part + kept->first, kept->count, sizeof(whorli_part), whorli_part_order);
    return WHORL_OK;
}

static uint64_t whorli_parts_hash(const whorli_loom *loom, whorli_range range, uint64_t hash)
{
    uint32_t k;
    for (k = 0; k < range.count; k++) {
        const whorli_part *part = loom->part + range.first + k;
        uint64_t bits[2];
        memcpy(bits, &part->re, 8);
        memcpy(bits + 1, &part->im, 8);
        hash = whorli_mix(whorli_mix(whorli_mix(hash, bits[0]), bits[1]), part->weight);
    }
    return whorli_mix(hash, range.count);
}

static int32_t whorli_same_parts(const whorli_loom *loom, whorli_range a, whorli_range b)
{
    return a.count == b.count &&
           (a.count == 0 || memcmp(loom->part + a.first, loom->part + b.first, a.count * sizeof(whorli_part)) == 0);
}

/*
 * The weight of an atom made of the polynomial on top of the stack (of a power: of the two on top, base and exponent);
 * the same atom where it is known.
 */
static whorl_status whorli_loom_atom(whorli_loom *loom, int32_t kind, uint32_t *weight)
{
    uint64_t mask = whorli_slots(loom->room[WHORLI_ROOM_ATOM]) - 1, at, parts = loom->parts;
    whorli_range base, exponent = {0, 0};
    whorli_factor factor;
    whorl_status status = whorli_loom_keep(loom, loom->depth - (kind == WHORLI_ATOM_POWER ? 2 : 1), &base);
    if (status == WHORL_OK && kind == WHORLI_ATOM_POWER)
        status = whorli_loom_keep(loom, loom->depth - 1, &exponent);
    if (status != WHORL_OK)
        return status;
    at = whorli_parts_hash(loom, exponent, whorli_parts_hash(loom, base, (uint64_t)kind)) & mask;
    factor.power = 1;
    for (; loom->atom_slots[at] != 0; at = (at + 1) & mask) {
        const whorli_atom *known = loom->atom + (loom->atom_slots[at] - 1);
        if (known->kind == kind && whorli_same_parts(loom, known->base, base) &&
            whorli_same_parts(loom, known->exponent, exponent)) {
            loom->parts = parts;
            factor.atom = loom->atom_slots[at] - 1;
            return whorli_loom_monomial(loom, &factor, 1, weight);
        }
    }
    if (whorli_loom_need(loom, WHORLI_ROOM_ATOM, loom->atoms + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    memset(loom->atom + loom->atoms, 0, sizeof(whorli_atom));
    loom->atom[loom->atoms].kind = kind;
    loom->atom[loom->atoms].base = base;
    loom->atom[loom->atoms].exponent = exponent;
    loom->atom[loom->atoms].line = (int32_t)loom->at; /* becomes line and column in the end */
    factor.atom = (uint32_t)loom->atoms++;
    loom->atom_slots[at] = (uint32_t)loom->atoms;
    return whorli_loom_monomial(loom, &factor, 1, weight);
}

/* ---- >>names ----------------------------------------------------------------------------------------------------- */

/* Tables hold letters, not pointers: those would need relocation and lie in writable memory. */
static const char whorli_reserved[16][5] WHORLI_UNUSED = {"i", "j", "r", "n",  "d",  "x",  "sqrt", "X",
                                                          "Y", "Z", "S", "Sx", "Sy", "Sz", "S+",   "S-"};

static int32_t whorli_is_reserved(const char *text, uint64_t length)
{
    int32_t k;
    for (k = 0; k < 16; k++)
        if (strlen(whorli_reserved[k]) == length && memcmp(whorli_reserved[k], text, (size_t)length) == 0)
            return 1;
    return 0;
}

static uint64_t whorli_name_hash(const char *text, uint64_t length)
{
    uint64_t k, hash = length;
    for (k = 0; k < length; k++)
        hash = whorli_mix(hash, (unsigned char)text[k]);
    return hash;
}

static const whorli_name *whorli_loom_find(const whorli_loom *loom, const char *text, uint64_t length)
{
    uint64_t mask = whorli_slots(loom->room[WHORLI_ROOM_NAME]) - 1, at = whorli_name_hash(text, length) & mask;
    int32_t k;
    for (k = 0; k < loom->locals; k++)
        if (loom->local[k].length == length && memcmp(loom->local[k].text, text, (size_t)length) == 0)
            return loom->local + k;
    for (; loom->name_slots[at] != 0; at = (at + 1) & mask) {
        const whorli_name *name = loom->name + (loom->name_slots[at] - 1);
        if (name->length == length && memcmp(name->text, text, (size_t)length) == 0)
            return name;
    }
    return NULL;
}

/* The caller has made sure that the name is new. */
static whorl_status whorli_loom_name(whorli_loom *loom, const char *text, uint64_t length, int32_t role, int32_t kind,
                                     uint64_t index)
{
    uint64_t mask = whorli_slots(loom->room[WHORLI_ROOM_NAME]) - 1, at = whorli_name_hash(text, length) & mask;
    whorli_name *name;
    if (whorli_loom_need(loom, WHORLI_ROOM_NAME, loom->names + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    while (loom->name_slots[at] != 0)
        at = (at + 1) & mask;
    name = loom->name + loom->names++;
    name->text = text;
    name->length = length;
    name->role = role;
    name->kind = kind;
    name->index = (uint32_t)index;
    loom->name_slots[at] = (uint32_t)loom->names;
    return WHORL_OK;
}

/* Adds a parameter with its atom and weight; its formula is set by the caller. */
static whorl_status whorli_loom_parameter(whorli_loom *loom, const char *text, uint64_t length, whorli_range formula)
{
    whorli_parameter *parameter;
    whorli_factor factor;
    whorl_status status;
    if (loom->parameters == WHORL_MOST_PARAMETERS)
        return whorl_fail(loom->host, WHORL_TOO_LARGE, "there are more than 4096 parameters: put numbers into a table");
    if (whorli_loom_need(loom, WHORLI_ROOM_PARAMETER, loom->parameters + 1) != WHORL_OK ||
        whorli_loom_need(loom, WHORLI_ROOM_ATOM, loom->atoms + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    parameter = loom->parameter + loom->parameters;
    parameter->name = text;
    parameter->length = length;
    parameter->formula = formula;
    parameter->atom = factor.atom = (uint32_t)loom->atoms;
    factor.power = 1;
    memset(loom->atom + loom->atoms, 0, sizeof(whorli_atom));
    loom->atom[loom->atoms].kind = WHORLI_ATOM_PARAMETER;
    loom->atom[loom->atoms++].parameter = (uint32_t)loom->parameters;
    status = whorli_loom_monomial(loom, &factor, 1, &parameter->weight);
    if (status == WHORL_OK)
        status = whorli_loom_name(loom, text, length, WHORLI_IS_PARAMETER, WHORLI_NUMBER, loom->parameters);
    loom->parameters++;
    return status;
}

/* ---- >>compile --------------------------------------------------------------------------------------------------- */

enum {
    WHORLI_DO_NUMBER,
    WHORLI_DO_I,
    WHORLI_DO_PARAMETER,
    WHORLI_DO_VALUE,
    WHORLI_DO_ELEMENT,
    WHORLI_DO_SPIN,
    WHORLI_DO_NEGATE,
    WHORLI_DO_ADD,
    WHORLI_DO_SUBTRACT,
    WHORLI_DO_MULTIPLY,
    WHORLI_DO_DIVIDE,
    WHORLI_DO_DOT,
    WHORLI_DO_CROSS,
    WHORLI_DO_POWER,
    WHORLI_DO_ROOT,
    WHORLI_DO_GROUP /* on the waiting stack only: a parenthesis; and sqrt( as WHORLI_DO_ROOT with level 0 */
};
/* Argument of WHORLI_DO_SPIN: site, then which spin, then 1 where the site is i (0) or j (1). */
#define WHORLI_SPIN_NAMED 0x10000u

static uint32_t whorli_kind_width(int32_t kind)
{
    return kind == WHORLI_MATRIX ? 9 : kind == WHORLI_VECTOR || kind == WHORLI_SPIN_VECTOR ? 3 : 1;
}

static const char *whorli_kind_name(int32_t kind)
{
    switch (kind) {
    case WHORLI_NUMBER: return "a number";
    case WHORLI_OPERATOR: return "an operator";
    case WHORLI_VECTOR: return "a vector";
    case WHORLI_SPIN_VECTOR: return "a vector of operators";
    default: return "a matrix";
    }
}

static whorl_status whorli_compile_step(whorli_loom *loom, int32_t does, uint64_t at, uint32_t argument, double number)
{
    whorli_step *step;
    if (whorli_loom_need(loom, WHORLI_ROOM_STEP, loom->steps + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    step = loom->step + loom->steps++;
    step->does = (uint8_t)does;
    step->at = (uint32_t)at;
    step->argument = argument;
    step->number = number;
    step->left = step->right = step->spare = 0;
    return WHORL_OK;
}

static whorl_status whorli_compile_push(whorli_loom *loom, int32_t kind)
{
    if (whorli_loom_need(loom, WHORLI_ROOM_KIND, loom->kinds + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    loom->kind[loom->kinds++] = (uint8_t)kind;
    loom->width += whorli_kind_width(kind);
    if (loom->width > loom->most_width)
        loom->most_width = loom->width;
    return WHORL_OK;
}

static int32_t whorli_compile_pop(whorli_loom *loom)
{
    int32_t kind = loom->kind[--loom->kinds];
    loom->width -= whorli_kind_width(kind);
    return kind;
}

static whorl_status whorli_compile_operand(whorli_loom *loom, int32_t does, uint64_t at, uint32_t argument,
                                           double number, int32_t kind)
{
    whorl_status status = whorli_compile_step(loom, does, at, argument, number);
    if (status == WHORL_OK)
        loom->step[loom->steps - 1].left = (uint8_t)kind;
    return status == WHORL_OK ? whorli_compile_push(loom, kind) : status;
}

static int32_t whorli_is_vector(int32_t kind)
{
    return kind == WHORLI_VECTOR || kind == WHORLI_SPIN_VECTOR;
}

/* What an operator makes of two kinds; -1 where it cannot. */
static int32_t whorli_kind_of(int32_t does, int32_t left, int32_t right)
{
    int32_t spins = left == WHORLI_OPERATOR || left == WHORLI_SPIN_VECTOR || right == WHORLI_OPERATOR ||
                    right == WHORLI_SPIN_VECTOR;
    int32_t scalar_left = left == WHORLI_NUMBER || left == WHORLI_OPERATOR;
    int32_t scalar_right = right == WHORLI_NUMBER || right == WHORLI_OPERATOR;
    int32_t scalar = spins ? WHORLI_OPERATOR : WHORLI_NUMBER, vector = spins ? WHORLI_SPIN_VECTOR : WHORLI_VECTOR;
    switch (does) {
    case WHORLI_DO_ADD:
    case WHORLI_DO_SUBTRACT:
        if (scalar_left && scalar_right)
            return scalar;
        if (whorli_is_vector(left) && whorli_is_vector(right))
            return vector;
        return left == WHORLI_MATRIX && right == WHORLI_MATRIX ? WHORLI_MATRIX : -1;
    case WHORLI_DO_MULTIPLY:
        if (scalar_left && scalar_right)
            return scalar;
        if ((scalar_left && whorli_is_vector(right)) || (whorli_is_vector(left) && scalar_right))
            return vector;
        return (left == WHORLI_NUMBER && right == WHORLI_MATRIX) || (left == WHORLI_MATRIX && right == WHORLI_NUMBER)
                   ? WHORLI_MATRIX : -1;
    case WHORLI_DO_DIVIDE: return right == WHORLI_NUMBER ? left : -1;
    case WHORLI_DO_DOT:
        if (whorli_is_vector(left) && whorli_is_vector(right))
            return scalar;
        if ((left == WHORLI_MATRIX && whorli_is_vector(right)) || (whorli_is_vector(left) && right == WHORLI_MATRIX))
            return vector;
        return left == WHORLI_MATRIX && right == WHORLI_MATRIX ? WHORLI_MATRIX : -1;
    case WHORLI_DO_CROSS: return whorli_is_vector(left) && whorli_is_vector(right) ? vector : -1;
    case WHORLI_DO_POWER: return scalar_left && right == WHORLI_NUMBER ? left : -1;
    default: return -1;
    }
}

static whorl_status whorli_compile_misfit(whorli_loom *loom, int32_t does, uint64_t at, int32_t left, int32_t right)
{
    static const char advice[7][112] = {
        "cannot be added: make both numbers, operators, vectors or matrices",
        "cannot be subtracted: make both numbers, operators, vectors or matrices",
        "cannot be multiplied by `*`: write `.` for the scalar product, ` x ` for the vector product",
        "cannot be divided: only numbers may stand behind `/`",
        "have no scalar product: `.` joins vectors and matrices; write `*` for the product of numbers and operators",
        "have no vector product: `x` joins two vectors",
        "cannot be joined by `^`: numbers and operators may be raised to whole powers"};
    whorl_text text = whorli_reader_fail(loom->reader, WHORL_BAD_TEXT, at);
    whorl_text_add(&text, whorli_kind_name(left));
    whorl_text_add(&text, " and ");
    whorl_text_add(&text, whorli_kind_name(right));
    whorl_text_add(&text, " ");
    whorl_text_add(&text, advice[does - WHORLI_DO_ADD]);
    return WHORL_BAD_TEXT;
}

/* The topmost waiting operator gets its operands. */
static whorl_status whorli_compile_apply(whorli_loom *loom)
{
    whorli_waiting waiting = loom->waiting[--loom->waits];
    int32_t right = whorli_compile_pop(loom), left = right, kind = right;
    whorl_status status;
    if (waiting.does != WHORLI_DO_NEGATE) {
        left = whorli_compile_pop(loom);
        kind = whorli_kind_of(waiting.does, left, right);
        if (kind < 0)
            return whorli_compile_misfit(loom, waiting.does, waiting.at, left, right);
    }
    status = whorli_compile_step(loom, waiting.does, waiting.at, 0, 0.0);
    if (status != WHORL_OK)
        return status;
    loom->step[loom->steps - 1].left = (uint8_t)left;
    loom->step[loom->steps - 1].right = (uint8_t)right;
    return whorli_compile_push(loom, kind);
}

static int32_t whorli_waiting_is_open(const whorli_waiting *waiting)
{
    return waiting->level == 0;
}

/* Everything that binds at least as tightly as `level` (tighter, for an operator from the right) is applied. */
static whorl_status whorli_compile_settle(whorli_loom *loom, int32_t level, int32_t from_right)
{
    whorl_status status = WHORL_OK;
    while (status == WHORL_OK && loom->waits > 0 && !whorli_waiting_is_open(loom->waiting + loom->waits - 1) &&
           loom->waiting[loom->waits - 1].level >= level + from_right)
        status = whorli_compile_apply(loom);
    return status;
}

static whorl_status whorli_compile_wait(whorli_loom *loom, int32_t does, int32_t level, uint64_t at)
{
    whorli_waiting *waiting;
    if (whorli_loom_need(loom, WHORLI_ROOM_WAITING, loom->waits + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    waiting = loom->waiting + loom->waits++;
    waiting->at = (uint32_t)at;
    waiting->does = (uint8_t)does;
    waiting->level = (uint8_t)level;
    waiting->rows = waiting->columns = 0;
    return WHORL_OK;
}

static whorl_status whorli_compile_no_site(whorli_loom *loom, int64_t site, uint64_t at)
{
    whorl_text text = whorli_reader_fail(loom->reader, WHORL_BAD_TEXT, at);
    if (loom->sites == 0) {
        whorl_text_add(&text, "the number of spins is not known yet: put a `spins` or `cluster` statement above");
        return WHORL_BAD_TEXT;
    }
    whorl_text_add(&text, "site ");
    whorl_text_add_signed(&text, site);
    whorl_text_add(&text, " is outside: the sites are 0 .. ");
    whorl_text_add_signed(&text, loom->sites - 1);
    return WHORL_BAD_TEXT;
}

/* A spin operator; the reader is at its letter. */
static whorl_status whorli_compile_spin(whorli_loom *loom, uint32_t which)
{
    whorli_reader *reader = loom->reader;
    uint64_t at = reader->start;
    uint32_t site = 0;
    whorl_status status = whorli_reader_next(reader);
    if (status == WHORL_OK)
        status = whorli_reader_take(reader, "[", "`[` and a site, as in Sz[0]");
    if (status != WHORL_OK)
        return status;
    if (reader->kind == WHORLI_WORD_NUMBER) {
        if (reader->whole < 0)
            return whorli_reader_expected(reader, "a site, a whole number from 0 on");
        if (reader->whole >= loom->sites)
            return whorli_compile_no_site(loom, reader->whole, reader->start);
        site = (uint32_t)reader->whole;
    } else if (loom->site_names > 0 && whorli_reader_is(reader, "i")) {
        site = WHORLI_SPIN_NAMED;
    } else if (loom->site_names > 1 && whorli_reader_is(reader, "j")) {
        site = WHORLI_SPIN_NAMED | 1;
    } else if (whorli_reader_is(reader, "i") || whorli_reader_is(reader, "j")) {
        return whorli_reader_refuse(reader, reader->start, loom->site_names > 0
                                    ? "j is the second site of a pair: in a sum over sites there is only i"
                                    : "i and j are sites only in a `sum over` a list: write the number of the site");
    } else {
        return whorli_reader_expected(reader, loom->site_names > 1 ? "a site: a number, i or j"
                                            : loom->site_names > 0 ? "a site: a number or i"
                                                                   : "a site, a whole number from 0 on");
    }
    status = whorli_reader_next(reader);
    if (status == WHORL_OK)
        status = whorli_reader_take(reader, "]", "`]` behind the site");
    if (status != WHORL_OK)
        return status;
    return whorli_compile_operand(loom, WHORLI_DO_SPIN, at, site | which << 8, 0.0,
                                  which == 8 ? WHORLI_SPIN_VECTOR : WHORLI_OPERATOR);
}

static whorl_status whorli_compile_unknown(whorli_loom *loom)
{
    whorli_reader *reader = loom->reader;
    const char *word = reader->text + reader->start;
    uint64_t length = reader->end - reader->start, k;
    whorli_nearest nearest = whorli_nearest_to(word, length);
    whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
    whorl_text_add(&text, "unknown name ");
    whorli_quote(&text, word, length);
    for (k = 0; k < (uint64_t)loom->locals; k++)
        whorli_nearest_try(&nearest, loom->local[k].text, loom->local[k].length);
    for (k = 0; k < loom->names; k++)
        if (loom->name[k].role == WHORLI_IS_PARAMETER || loom->name[k].role == WHORLI_IS_VALUE)
            whorli_nearest_try(&nearest, loom->name[k].text, loom->name[k].length);
    for (k = 5; k < 16; k++)
        whorli_nearest_try(&nearest, whorli_reserved[k], (uint64_t)strlen(whorli_reserved[k]));
    if (nearest.found == NULL)
        whorl_text_add(&text, reader->lines ? ": define it above with `let`, or correct its spelling"
                                            : ": give it a value, or correct its spelling");
    whorli_nearest_add(&nearest, &text);
    return WHORL_BAD_TEXT;
}

/* A name where a factor is expected. */
static whorl_status whorli_compile_name(whorli_loom *loom)
{
    static const char spins[9][3] = {"X", "Y", "Z", "Sx", "Sy", "Sz", "S+", "S-", "S"};
    whorli_reader *reader = loom->reader;
    const whorli_name *name;
    uint64_t at = reader->start;
    whorl_status status;
    uint32_t k;
    for (k = 0; k < 9; k++)
        if (whorli_reader_is(reader, spins[k]))
            return whorli_compile_spin(loom, k);
    if (whorli_reader_is(reader, "sqrt")) {
        status = whorli_reader_next(reader);
        if (status == WHORL_OK)
            status = whorli_reader_take(reader, "(", "`(` behind sqrt");
        return status == WHORL_OK ? whorli_compile_wait(loom, WHORLI_DO_ROOT, 0, at) : status;
    }
    if (whorli_reader_is(reader, "i")) {
        status = whorli_compile_operand(loom, WHORLI_DO_I, at, 0, 0.0, WHORLI_NUMBER);
        return status == WHORL_OK ? whorli_reader_next(reader) : status;
    }
    name = whorli_loom_find(loom, reader->text + at, reader->end - at);
    if (name == NULL && reader->end - at == 1 && (reader->text[at] == 'r' || reader->text[at] == 'n' ||
                                                  reader->text[at] == 'd'))
        return whorli_reader_refuse(reader, at, loom->site_names > 0
                                    ? "r, n and d need positions: put `place` above, or in a periodic cluster take "
                                      "the pairs by `shell`"
                                    : "r, n and d are the distance, direction and displacement of a pair: use them "
                                      "in `sum over`");
    if (name == NULL && whorli_reader_is(reader, "x"))
        return whorli_reader_refuse(reader, at, "x is the vector product and stands between two vectors");
    if (name == NULL)
        return whorli_compile_unknown(loom);
    if (name->role == WHORLI_IS_DRAW)
        return whorli_reader_refuse(reader, at, "this random number belongs to another list: sum over that");
    if (name->role == WHORLI_IS_LIST)
        return whorli_reader_refuse(reader, at, "this names a list: use it as `sum over NAME: ...`");
    status = whorli_compile_operand(loom, name->role == WHORLI_IS_PARAMETER ? WHORLI_DO_PARAMETER
                                          : name->role == WHORLI_IS_VALUE ? WHORLI_DO_VALUE : WHORLI_DO_ELEMENT,
                                    at, name->index, 0.0, name->kind);
    return status == WHORL_OK ? whorli_reader_next(reader) : status;
}

/* One word where a factor is expected; *factor becomes 1 when it was one. */
static whorl_status whorli_compile_factor(whorli_loom *loom, int32_t *factor)
{
    whorli_reader *reader = loom->reader;
    whorl_status status;
    *factor = 0;
    if (reader->kind == WHORLI_WORD_NUMBER) {
        *factor = 1;
        status = whorli_compile_operand(loom, WHORLI_DO_NUMBER, reader->start, 0, reader->number, WHORLI_NUMBER);
    } else if (reader->kind == WHORLI_WORD_NAME) {
        uint64_t waits = loom->waits;
        status = whorli_compile_name(loom);
        *factor = loom->waits == waits; /* not behind sqrt( */
        return status;
    } else if (whorli_reader_is(reader, "(")) {
        status = whorli_compile_wait(loom, WHORLI_DO_GROUP, 0, reader->start);
    } else if (whorli_reader_is(reader, "-")) {
        status = whorli_compile_wait(loom, WHORLI_DO_NEGATE, 3, reader->start);
    } else if (whorli_reader_is(reader, "+")) {
        status = WHORL_OK;
    } else {
        return whorli_reader_expected(reader, "a factor (a number, a name, a spin like Sz[0], or a parenthesis)");
    }
    return status == WHORL_OK ? whorli_reader_next(reader) : status;
}

static whorl_status whorli_compile_separator(whorli_loom *loom, int32_t semicolon)
{
    whorli_reader *reader = loom->reader;
    whorli_waiting *group;
    whorl_status status = whorli_compile_settle(loom, 1, 0);
    if (status != WHORL_OK)
        return status;
    group = loom->waiting + loom->waits - 1;
    if (group->does == WHORLI_DO_ROOT)
        return whorli_reader_refuse(reader, reader->start, "sqrt takes one number");
    if (semicolon && (group->columns != 2 || group->rows == 2))
        return whorli_reader_refuse(reader, reader->start, "a matrix has three rows of three: (a, b, c; d, e, f; g, h, "
                                                           "k)");
    if (!semicolon && group->columns == 2)
        return whorli_reader_refuse(reader, reader->start, group->rows > 0
                                    ? "a row of a matrix has three numbers: end it with `;`"
                                    : "a vector has three components: (x, y, z)");
    group->columns = semicolon ? 0 : (uint8_t)(group->columns + 1);
    group->rows = (uint8_t)(group->rows + semicolon);
    return whorli_reader_next(reader);
}

/* The closing parenthesis: of a group, a vector, a matrix or a root. */
static whorl_status whorli_compile_close(whorli_loom *loom)
{
    whorli_reader *reader = loom->reader;
    whorl_status status = whorli_compile_settle(loom, 1, 0);
    whorli_waiting group;
    int32_t k, numbers = 1, scalars = 1, count;
    if (status != WHORL_OK)
        return status;
    group = loom->waiting[--loom->waits];
    if (group.does == WHORLI_DO_ROOT) {
        if (loom->kind[loom->kinds - 1] != WHORLI_NUMBER)
            return whorli_reader_refuse(reader, group.at, "sqrt takes a number");
        status = whorli_compile_step(loom, WHORLI_DO_ROOT, group.at, 0, 0.0);
    } else if (group.columns > 0 || group.rows > 0) {
        if (group.columns != 2 || group.rows == 1)
            return whorli_reader_refuse(reader, reader->start, group.rows == 0
                                        ? "a vector has three components: (x, y, z)"
                                        : "a matrix has three rows of three: (a, b, c; d, e, f; g, h, k)");
        count = group.rows > 0 ? 9 : 3;
        for (k = 0; k < count; k++) {
            int32_t kind = whorli_compile_pop(loom);
            numbers &= kind == WHORLI_NUMBER;
            scalars &= kind == WHORLI_NUMBER || kind == WHORLI_OPERATOR;
        }
        if (!scalars)
            return whorli_reader_refuse(reader, group.at, "the components of a vector are numbers or operators");
        if (count == 9 && !numbers)
            return whorli_reader_refuse(reader, group.at, "the elements of a matrix are numbers");
        status = whorli_compile_push(loom, count == 9 ? WHORLI_MATRIX : numbers ? WHORLI_VECTOR : WHORLI_SPIN_VECTOR);
    }
    return status == WHORL_OK ? whorli_reader_next(reader) : status;
}

/* One word where an operator is expected. *done where the expression ends here. */
static whorl_status whorli_compile_operator(whorli_loom *loom, int32_t *factor, int32_t *done)
{
    static const struct {
        char word[2];
        uint8_t does, level, from_right;
    } signs[7] = {{"+", WHORLI_DO_ADD, 1, 0},    {"-", WHORLI_DO_SUBTRACT, 1, 0}, {"*", WHORLI_DO_MULTIPLY, 2, 0},
                  {"/", WHORLI_DO_DIVIDE, 2, 0}, {".", WHORLI_DO_DOT, 4, 0},      {"x", WHORLI_DO_CROSS, 5, 0},
                  {"^", WHORLI_DO_POWER, 6, 1}};
    whorli_reader *reader = loom->reader;
    uint64_t k, open = 0;
    whorl_status status;
    for (k = 0; k < 7; k++)
        if (whorli_reader_is(reader, signs[k].word)) {
            uint64_t at = reader->start;
            *factor = 0;
            status = whorli_compile_settle(loom, signs[k].level, signs[k].from_right);
            if (status == WHORL_OK)
                status = whorli_compile_wait(loom, signs[k].does, signs[k].level, at);
            return status == WHORL_OK ? whorli_reader_next(reader) : status;
        }
    for (k = loom->waits; k > 0 && open == 0; k--)
        if (whorli_waiting_is_open(loom->waiting + k - 1))
            open = k;
    if (open > 0 && whorli_reader_is(reader, ")"))
        return whorli_compile_close(loom);
    if (open > 0 && (whorli_reader_is(reader, ",") || whorli_reader_is(reader, ";"))) {
        *factor = 0;
        return whorli_compile_separator(loom, whorli_reader_is(reader, ";"));
    }
    if (reader->kind == WHORLI_WORD_NUMBER || reader->kind == WHORLI_WORD_NAME || whorli_reader_is(reader, "(")) {
        whorl_text text = whorli_reader_fail(reader, WHORL_BAD_TEXT, reader->start);
        whorl_text_add(&text, "an operator is missing before ");
        whorli_quote(&text, reader->text + reader->start, reader->end - reader->start);
        whorl_text_add(&text, ": write `*` between factors");
        return WHORL_BAD_TEXT;
    }
    if (open > 0)
        return whorli_reader_expected(reader, "an operator or the closing `)`");
    *done = 1;
    return whorli_compile_settle(loom, 0, 0);
}

/*
 * Compiles the expression that begins at the current word; the reader then is at the word behind it. *kind tells what
 * it is. in_parenthesis: the expression is one parenthesis and ends with it.
 */
static whorl_status whorli_compile(whorli_loom *loom, int32_t in_parenthesis, int32_t *kind)
{
    int32_t factor = 0, done = 0;
    whorl_status status = WHORL_OK;
    loom->steps = loom->waits = loom->kinds = loom->width = loom->most_width = 0;
    if (in_parenthesis && !whorli_reader_is(loom->reader, "("))
        return whorli_reader_expected(loom->reader, "a vector in parentheses");
    while (status == WHORL_OK && !done) {
        status = factor ? whorli_compile_operator(loom, &factor, &done) : whorli_compile_factor(loom, &factor);
        if (status == WHORL_OK)
            status = whorli_loom_poll(loom, 1);
        done |= in_parenthesis && loom->waits == 0 && factor;
    }
    if (status == WHORL_OK)
        *kind = loom->kind[0];
    return status;
}

/* ---- >>run ------------------------------------------------------------------------------------------------------- */

/* Opens an empty slice on top. */
static whorl_status whorli_slice_open(whorli_loom *loom)
{
    if (whorli_loom_need(loom, WHORLI_ROOM_EDGE, loom->depth + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    loom->edge[loom->depth++] = loom->entries;
    return WHORL_OK;
}

static whorl_status whorli_slice_add(whorli_loom *loom, uint64_t x, uint64_t z, double re, double im, uint32_t weight)
{
    whorli_entry *entry;
    if (whorli_loom_need(loom, WHORLI_ROOM_ENTRY, loom->entries + 1) != WHORL_OK)
        return WHORLI_AGAIN;
    entry = loom->entry + loom->entries++;
    entry->x = x;
    entry->z = z;
    entry->re = re;
    entry->im = im;
    entry->weight = weight;
    entry->spare = 0;
    return WHORL_OK;
}

static whorl_status whorli_slice_number(whorli_loom *loom, double re, double im)
{
    whorl_status status = whorli_slice_open(loom);
    if (status != WHORL_OK || (re == 0.0 && im == 0.0))
        return status;
    return whorli_slice_add(loom, 0, 0, re, im, 0);
}

static uint64_t whorli_slice_end(const whorli_loom *loom, uint64_t k)
{
    return k + 1 < loom->depth ? loom->edge[k + 1] : loom->entries;
}

static uint64_t whorli_slice_count(const whorli_loom *loom, uint64_t k)
{
    return whorli_slice_end(loom, k) - loom->edge[k];
}

/* Drops `drop` slices that lie under the topmost `keep`. */
static void whorli_slice_collapse(whorli_loom *loom, uint64_t drop, uint64_t keep)
{
    uint64_t under = loom->depth - keep - drop, k;
    uint64_t from = keep > 0 ? loom->edge[loom->depth - keep] : loom->entries, to = loom->edge[under];
    memmove(loom->entry + to, loom->entry + from, (size_t)((loom->entries - from) * sizeof(whorli_entry)));
    for (k = 0; k < keep; k++)
        loom->edge[under + k] = loom->edge[under + drop + k] - (from - to);
    loom->entries -= from - to;
    loom->depth -= drop;
}

static int32_t whorli_same_entry(const whorli_entry *a, const whorli_entry *b)
{
    return a->weight == b->weight && a->x == b->x && a->z == b->z;
}

static int32_t whorli_entry_order(const void *left, const void *right)
{
    const whorli_entry *a = (const whorli_entry *)left, *b = (const whorli_entry *)right;
    uint64_t bits_a[2], bits_b[2];
    if (a->weight != b->weight)
        return a->weight < b->weight ? -1 : 1;
    if (a->x != b->x)
        return a->x < b->x ? -1 : 1;
    if (a->z != b->z)
        return a->z < b->z ? -1 : 1;
    memcpy(bits_a, &a->re, 8);
    memcpy(bits_a + 1, &a->im, 8);
    memcpy(bits_b, &b->re, 8);
    memcpy(bits_b + 1, &b->im, 8);
    if (bits_a[0] != bits_b[0])
        return bits_a[0] < bits_b[0] ? -1 : 1;
    return (bits_a[1] > bits_b[1]) - (bits_a[1] < bits_b[1]);
}

static whorl_status whorli_overflowed(whorli_loom *loom)
{
    return whorli_loom_refuse(loom, WHORL_NOT_FINITE, "the result is too large for a double: scale the numbers down");
}

/* Brings equal entries of the topmost slice together and drops zeros: in order of appearance where they are few. */
static whorl_status whorli_slice_merge(whorli_loom *loom)
{
    const uint64_t few = 24;
    whorli_entry *entry = loom->entry + loom->edge[loom->depth - 1];
    uint64_t count = loom->entries - loom->edge[loom->depth - 1], kept = 0, i, k, at;
    if (count > few)
        whorl_sort(entry, count, sizeof *entry, whorli_entry_order);
    for (i = 0; i < count; i++) {
        at = kept;
        if (count > few)
            at = kept > 0 && whorli_same_entry(entry + kept - 1, entry + i) ? kept - 1 : kept;
        else
            for (k = 0; k < kept && at == kept; k++)
                if (whorli_same_entry(entry + k, entry + i))
                    at = k;
        if (at == kept) {
            entry[kept++] = entry[i];
        } else {
            entry[at].re += entry[i].re;
            entry[at].im += entry[i].im;
        }
    }
    for (i = 0, count = kept, kept = 0; i < count; i++) {
        if (!whorl_is_finite(entry[i].re) || !whorl_is_finite(entry[i].im))
            return whorli_overflowed(loom);
        if (entry[i].re != 0.0 || entry[i].im != 0.0)
            entry[kept++] = entry[i];
    }
    loom->entries = loom->edge[loom->depth - 1] + kept;
    return whorli_loom_poll(loom, count);
}

/* The product of two entries on top of the stack. */
static whorl_status whorli_entry_multiply(whorli_loom *loom, const whorli_entry *a, const whorli_entry *b, double sign)
{
    whorl_term left, right, product;
    uint32_t weight;
    whorl_status status = whorli_loom_weigh(loom, a->weight, b->weight, &weight);
    if (status != WHORL_OK)
        return status;
    left.x = a->x;
    left.z = a->z;
    left.re = sign * a->re;
    left.im = sign * a->im;
    right.x = b->x;
    right.z = b->z;
    right.re = b->re;
    right.im = b->im;
    product = whorl_term_multiply(left, right);
    if (!whorl_is_finite(product.re) || !whorl_is_finite(product.im))
        return whorli_overflowed(loom);
    return whorli_slice_add(loom, product.x, product.z, product.re, product.im, weight);
}

/* Adds sign times the product of slices a and b to the topmost slice, which is neither. */
static whorl_status whorli_slice_times(whorli_loom *loom, uint64_t a, uint64_t b, double sign)
{
    uint64_t a_end = whorli_slice_end(loom, a), b_end = whorli_slice_end(loom, b), i, j;
    whorl_status status = whorli_loom_need(loom, WHORLI_ROOM_ENTRY,
                                           whorl_size_add(loom->entries, whorl_size_multiply(a_end - loom->edge[a],
                                                                                             b_end - loom->edge[b])));
    for (i = loom->edge[a]; status == WHORL_OK && i < a_end; i++) {
        for (j = loom->edge[b]; status == WHORL_OK && j < b_end; j++)
            status = whorli_entry_multiply(loom, loom->entry + i, loom->entry + j, sign);
        if (status == WHORL_OK)
            status = whorli_loom_poll(loom, b_end - loom->edge[b]);
    }
    return status;
}

static whorl_status whorli_run_spin(whorli_loom *loom, uint32_t argument)
{
    uint32_t which = argument >> 8 & 0xff, site = argument & 0xff;
    uint64_t bit;
    whorl_status status;
    if (argument & WHORLI_SPIN_NAMED)
        site = (uint32_t)loom->site[site];
    bit = UINT64_C(1) << site;
    if (which == 8) { /* the vector S */
        uint32_t k;
        for (k = 0; k < 3; k++) {
            status = whorli_run_spin(loom, site | (3 + k) << 8);
            if (status != WHORL_OK)
                return status;
        }
        return WHORL_OK;
    }
    status = whorli_slice_open(loom);
    if (status == WHORL_OK && which < 6)
        return whorli_slice_add(loom, which % 3 == 2 ? 0 : bit, which % 3 == 0 ? 0 : bit, which < 3 ? 1.0 : 0.5, 0.0,
                                0);
    if (status == WHORL_OK) /* S+ = Sx + i Sy, S- = Sx - i Sy */
        status = whorli_slice_add(loom, bit, 0, 0.5, 0.0, 0);
    if (status == WHORL_OK)
        status = whorli_slice_add(loom, bit, bit, 0.0, which == 6 ? 0.5 : -0.5, 0);
    return status;
}

static whorl_status whorli_run_polynomial(whorli_loom *loom, whorli_range range)
{
    whorl_status status = whorli_slice_open(loom);
    uint32_t k;
    for (k = 0; status == WHORL_OK && k < range.count; k++) {
        const whorli_part *part = loom->part + range.first + k;
        status = whorli_slice_add(loom, 0, 0, part->re, part->im, part->weight);
    }
    return status;
}

static whorl_status whorli_run_operand(whorli_loom *loom, const whorli_step *step)
{
    uint32_t k, width = whorli_kind_width(step->left);
    whorl_status status = WHORL_OK;
    switch (step->does) {
    case WHORLI_DO_NUMBER: return whorli_slice_number(loom, step->number, 0.0);
    case WHORLI_DO_I: return whorli_slice_number(loom, 0.0, 1.0);
    case WHORLI_DO_SPIN: return whorli_run_spin(loom, step->argument);
    case WHORLI_DO_PARAMETER:
        if (loom->constant != NULL)
            return whorli_slice_number(loom, loom->constant[step->argument].value, 0.0);
        status = whorli_slice_open(loom);
        if (status == WHORL_OK)
            status = whorli_slice_add(loom, 0, 0, 1.0, 0.0, loom->parameter[step->argument].weight);
        return status;
    case WHORLI_DO_VALUE:
        for (k = 0; status == WHORL_OK && k < width; k++)
            status = whorli_run_polynomial(loom, loom->value[step->argument].slice[k]);
        return status;
    default:
        for (k = 0; status == WHORL_OK && k < width; k++)
            status = whorli_slice_number(loom, loom->element[step->argument + k], 0.0);
        return status;
    }
}

static void whorli_run_negate(whorli_loom *loom, uint64_t slices)
{
    uint64_t k;
    for (k = loom->edge[loom->depth - slices]; k < loom->entries; k++) {
        loom->entry[k].re = -loom->entry[k].re;
        loom->entry[k].im = -loom->entry[k].im;
    }
}

/* Adds a copy of slice k to the topmost one. */
static whorl_status whorli_slice_append(whorli_loom *loom, uint64_t k)
{
    uint64_t from = loom->edge[k], count = whorli_slice_count(loom, k);
    if (whorli_loom_need(loom, WHORLI_ROOM_ENTRY, loom->entries + count) != WHORL_OK)
        return WHORLI_AGAIN;
    memmove(loom->entry + loom->entries, loom->entry + from, (size_t)(count * sizeof(whorli_entry)));
    loom->entries += count;
    return WHORL_OK;
}

static whorl_status whorli_run_add(whorli_loom *loom, const whorli_step *step)
{
    uint64_t width = whorli_kind_width(step->left), k, left;
    whorl_status status = WHORL_OK;
    if (width == 1) {
        loom->depth--; /* neighbours become one */
        return step->left == WHORLI_NUMBER && step->right == WHORLI_NUMBER ? whorli_slice_merge(loom) : WHORL_OK;
    }
    left = loom->depth - 2 * width;
    for (k = 0; status == WHORL_OK && k < width; k++) {
        status = whorli_slice_open(loom);
        if (status == WHORL_OK)
            status = whorli_slice_append(loom, left + k);
        if (status == WHORL_OK)
            status = whorli_slice_append(loom, left + width + k);
        if (status == WHORL_OK)
            status = whorli_slice_merge(loom);
    }
    if (status == WHORL_OK)
        whorli_slice_collapse(loom, 2 * width, width);
    return status;
}

static whorl_status whorli_run_multiply(whorli_loom *loom, const whorli_step *step)
{
    uint64_t left_width = whorli_kind_width(step->left), right_width = whorli_kind_width(step->right);
    uint64_t width = left_width > right_width ? left_width : right_width;
    uint64_t left = loom->depth - left_width - right_width, right = left + left_width, k;
    whorl_status status = WHORL_OK;
    for (k = 0; status == WHORL_OK && k < width; k++) {
        uint64_t a = left + (left_width > 1 ? k : 0), b = right + (right_width > 1 ? k : 0);
        int32_t merge = (whorli_slice_count(loom, a) > 1 && whorli_slice_count(loom, b) > 1) ||
                        (step->left != WHORLI_OPERATOR && step->right != WHORLI_OPERATOR); /* numbers are kept short */
        status = whorli_slice_open(loom);
        if (status == WHORL_OK)
            status = whorli_slice_times(loom, a, b, 1.0);
        if (status == WHORL_OK && merge)
            status = whorli_slice_merge(loom);
    }
    if (status == WHORL_OK)
        whorli_slice_collapse(loom, left_width + right_width, width);
    return status;
}

/* sum over c of left(a, c) right(c, b), for vectors and matrices alike. */
static whorl_status whorli_run_dot(whorli_loom *loom, const whorli_step *step)
{
    uint64_t left_width = whorli_kind_width(step->left), right_width = whorli_kind_width(step->right);
    uint64_t left = loom->depth - left_width - right_width, right = left + left_width;
    uint64_t rows = left_width / 3, columns = right_width / 3, a, b, c;
    whorl_status status = WHORL_OK;
    for (a = 0; a < rows; a++)
        for (b = 0; status == WHORL_OK && b < columns; b++) {
            status = whorli_slice_open(loom);
            for (c = 0; status == WHORL_OK && c < 3; c++)
                status = whorli_slice_times(loom, left + 3 * a + c, right + columns * c + b, 1.0);
            if (status == WHORL_OK)
                status = whorli_slice_merge(loom);
        }
    if (status == WHORL_OK)
        whorli_slice_collapse(loom, left_width + right_width, rows * columns);
    return status;
}

static whorl_status whorli_run_cross(whorli_loom *loom)
{
    uint64_t left = loom->depth - 6, right = left + 3, a;
    whorl_status status = WHORL_OK;
    for (a = 0; status == WHORL_OK && a < 3; a++) {
        uint64_t next = (a + 1) % 3, last = (a + 2) % 3;
        status = whorli_slice_open(loom);
        if (status == WHORL_OK)
            status = whorli_slice_times(loom, left + next, right + last, 1.0);
        if (status == WHORL_OK)
            status = whorli_slice_times(loom, left + last, right + next, -1.0);
        if (status == WHORL_OK)
            status = whorli_slice_merge(loom);
    }
    if (status == WHORL_OK)
        whorli_slice_collapse(loom, 6, 3);
    return status;
}

/*
 * x^y for real x > 0 in twofold precision (Dekker, Numer. Math. 18, 224 (1971)): exp(y log x) with the logarithm from
 * the series of the inverse hyperbolic tangent and the exponential from its own. No libm, so the same bits everywhere;
 * the result is within one unit in the last place.
 */
typedef struct whorli_twin {
    double hi, lo;
} whorli_twin;

static whorli_twin whorli_twin_sum(double a, double b)
{
    whorli_twin s;
    double part;
    s.hi = a + b;
    part = s.hi - a;
    s.lo = (a - (s.hi - part)) + (b - part);
    return s;
}

static whorli_twin whorli_twin_product(double a, double b)
{
    const double split = 134217729.0; /* 2^27 + 1 */
    double a_part = split * a, b_part = split * b;
    double a_hi = a_part - (a_part - a), b_hi = b_part - (b_part - b), a_lo = a - a_hi, b_lo = b - b_hi;
    whorli_twin p;
    p.hi = a * b;
    p.lo = ((a_hi * b_hi - p.hi) + a_hi * b_lo + a_lo * b_hi) + a_lo * b_lo;
    return p;
}

static whorli_twin whorli_twin_add(whorli_twin a, whorli_twin b)
{
    whorli_twin s = whorli_twin_sum(a.hi, b.hi);
    return whorli_twin_sum(s.hi, s.lo + (a.lo + b.lo));
}

static whorli_twin whorli_twin_multiply(whorli_twin a, whorli_twin b)
{
    whorli_twin p = whorli_twin_product(a.hi, b.hi);
    return whorli_twin_sum(p.hi, p.lo + (a.hi * b.lo + a.lo * b.hi));
}

static whorli_twin whorli_twin_divide(whorli_twin a, whorli_twin b)
{
    double quotient = a.hi / b.hi;
    whorli_twin p = whorli_twin_product(quotient, b.hi);
    return whorli_twin_sum(quotient, (((a.hi - p.hi) - p.lo) + (a.lo - quotient * b.lo)) / b.hi);
}

static whorli_twin whorli_twin_of(double value)
{
    whorli_twin twin;
    twin.hi = value;
    twin.lo = 0.0;
    return twin;
}

/* value times 2^power, in two steps so that no factor overflows */
static double whorli_scale_two(double value, int32_t power)
{
    int32_t halves[2], k;
    halves[0] = power / 2;
    halves[1] = power - power / 2;
    for (k = 0; k < 2; k++) {
        uint64_t bits = (uint64_t)(1023 + halves[k]) << 52;
        double factor;
        memcpy(&factor, &bits, 8);
        value *= factor;
    }
    return value;
}

static whorli_twin whorli_log_two(void)
{
    whorli_twin two;
    two.hi = 0.69314718055994529;
    two.lo = 2.3190468138462996e-17;
    return two;
}

static whorli_twin whorli_twin_log(double x)
{
    uint64_t bits;
    int32_t exponent = 0, k;
    whorli_twin t, square, sum = whorli_twin_of(0.0);
    if (x < 1e-300) {
        x *= 18014398509481984.0; /* 2^54: no denormals */
        exponent = -54;
    }
    memcpy(&bits, &x, 8);
    exponent += (int32_t)(bits >> 52) - 1023;
    bits = (bits & ((UINT64_C(1) << 52) - 1)) | UINT64_C(1023) << 52;
    memcpy(&x, &bits, 8);
    if (x > 1.4142135623730951) {
        x *= 0.5;
        exponent++;
    }
    t = whorli_twin_divide(whorli_twin_of(x - 1.0), whorli_twin_sum(x, 1.0));
    square = whorli_twin_multiply(t, t);
    for (k = 22; k >= 0; k--) /* log x = 2 (t + t^3/3 + t^5/5 + ...), |t| < 0.172 */
        sum = whorli_twin_add(whorli_twin_multiply(sum, square),
                              whorli_twin_divide(whorli_twin_of(2.0), whorli_twin_of(2.0 * k + 1.0)));
    return whorli_twin_add(whorli_twin_multiply(whorli_twin_of((double)exponent), whorli_log_two()),
                           whorli_twin_multiply(sum, t));
}

static double whorli_real_power(double x, double y)
{
    whorli_twin log = whorli_twin_log(x), rest, sum = whorli_twin_of(1.0);
    double rough = y * log.hi, turns;
    int32_t k;
    if (log.hi == 0.0) /* otherwise |y| < 746 / 2^-53 below */
        return 1.0;
    if (!(rough < 710.0)) /* above the largest double: infinity, which the caller refuses */
        return whorli_scale_two(whorli_scale_two(1.0, 1023), 1023);
    if (rough < -746.0)
        return 0.0;
    rest = whorli_twin_multiply(whorli_twin_of(y), log);
    turns = floor(rest.hi / whorli_log_two().hi + 0.5);
    rest = whorli_twin_add(rest, whorli_twin_multiply(whorli_twin_of(-turns), whorli_log_two()));
    for (k = 26; k >= 1; k--) /* exp r = 1 + r/1 (1 + r/2 (1 + ...)), |r| < 0.35 */
        sum = whorli_twin_add(whorli_twin_of(1.0), whorli_twin_divide(whorli_twin_multiply(sum, rest),
                                                                      whorli_twin_of((double)k)));
    return whorli_scale_two(sum.hi + sum.lo, (int32_t)turns);
}

static whorl_complex whorli_complex_divide(whorl_complex a, whorl_complex b)
{
    double scale = fabs(b.re) > fabs(b.im) ? fabs(b.re) : fabs(b.im), re = b.re / scale, im = b.im / scale, square;
    if (b.im == 0.0)
        return whorl_complex_of(a.re / b.re, a.im / b.re);
    square = re * re + im * im;
    return whorl_complex_of((a.re * re + a.im * im) / square / scale, (a.im * re - a.re * im) / square / scale);
}

/* Replaces the topmost slice, a polynomial, by an atom made of it, raised to a power. */
static whorl_status whorli_run_atom(whorli_loom *loom, int32_t kind, int32_t power)
{
    uint32_t weight;
    whorl_status status = whorli_loom_atom(loom, kind, &weight);
    if (status == WHORL_OK && power != 1)
        status = whorli_loom_weight_power(loom, weight, power, &weight);
    loom->entries = loom->edge[loom->depth - 1];
    return status == WHORL_OK ? whorli_slice_add(loom, 0, 0, 1.0, 0.0, weight) : status;
}

static whorl_status whorli_run_divide(whorli_loom *loom, const whorli_step *step)
{
    uint64_t k, divisor = loom->depth - 1;
    whorli_entry by;
    whorl_status status;
    if (whorli_slice_count(loom, divisor) == 0)
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "division by zero: what stands behind `/` must not be 0");
    if (whorli_slice_count(loom, divisor) > 1) {
        whorli_step times = *step;
        status = whorli_run_atom(loom, WHORLI_ATOM_INVERSE, 1);
        return status == WHORL_OK ? whorli_run_multiply(loom, &times) : status;
    }
    by = loom->entry[loom->edge[divisor]];
    status = whorli_loom_weight_power(loom, by.weight, -1, &by.weight);
    loom->depth--;
    loom->entries--;
    for (k = loom->edge[loom->depth - whorli_kind_width(step->left)]; status == WHORL_OK && k < loom->entries; k++) {
        whorli_entry *entry = loom->entry + k;
        whorl_complex c = whorli_complex_divide(whorl_complex_of(entry->re, entry->im), whorl_complex_of(by.re, by.im));
        if (!whorl_is_finite(c.re) || !whorl_is_finite(c.im))
            return whorli_overflowed(loom);
        entry->re = c.re;
        entry->im = c.im;
        status = whorli_loom_weigh(loom, entry->weight, by.weight, &entry->weight);
    }
    return status == WHORL_OK && step->left == WHORLI_NUMBER ? whorli_slice_merge(loom) : status;
}

static whorl_complex whorli_complex_power(whorl_complex base, uint32_t power)
{
    whorl_complex result = whorl_complex_of(1.0, 0.0);
    for (; power > 0; power >>= 1) {
        if (power & 1)
            result = whorl_complex_multiply(result, base);
        if (power > 1)
            base = whorl_complex_multiply(base, base);
    }
    return result;
}

static whorl_status whorli_run_root(whorli_loom *loom)
{
    uint64_t count = whorli_slice_count(loom, loom->depth - 1);
    whorli_entry *top = loom->entry + loom->edge[loom->depth - 1];
    if (count == 0)
        return WHORL_OK;
    if (count > 1 || top->weight != 0)
        return whorli_run_atom(loom, WHORLI_ATOM_ROOT, 1);
    if (top->im != 0.0 || top->re < 0.0)
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "the root needs a real number from 0 on: write i*sqrt(...)");
    top->re = sqrt(top->re);
    return WHORL_OK;
}

/* A single number with its weight. */
static whorl_status whorli_run_power_single(whorli_loom *loom, int32_t power)
{
    whorli_entry *top = loom->entry + loom->edge[loom->depth - 1];
    uint32_t modulus = (uint32_t)(power < 0 ? -power : power);
    whorl_complex c = whorli_complex_power(whorl_complex_of(top->re, top->im), modulus);
    whorl_status status = whorli_loom_weight_power(loom, top->weight, power, &top->weight);
    if (power < 0 && c.re == 0.0 && c.im == 0.0)
        return whorli_loom_refuse(loom, WHORL_NOT_FINITE, "this power is too large for a double: scale the numbers");
    if (power < 0)
        c = whorli_complex_divide(whorl_complex_of(1.0, 0.0), c);
    top->re = c.re;
    top->im = c.im;
    return status == WHORL_OK ? whorli_slice_merge(loom) : status;
}

static whorl_status whorli_run_power_many(whorli_loom *loom, int32_t power)
{
    uint64_t base = loom->depth - 1;
    int32_t k;
    whorl_status status = whorli_slice_open(loom);
    if (status == WHORL_OK)
        status = whorli_slice_add(loom, 0, 0, 1.0, 0.0, 0);
    for (k = 0; status == WHORL_OK && k < power; k++) {
        status = whorli_slice_open(loom);
        if (status == WHORL_OK)
            status = whorli_slice_times(loom, base + 1, base, 1.0);
        if (status == WHORL_OK)
            status = whorli_slice_merge(loom);
        if (status == WHORL_OK)
            whorli_slice_collapse(loom, 1, 1);
    }
    if (status == WHORL_OK)
        whorli_slice_collapse(loom, 1, 1);
    return status;
}

/* Base and exponent are the two slices on top; either has parameters, or the exponent is neither whole nor half. */
static whorl_status whorli_run_power_real(whorli_loom *loom, int32_t constant, double exponent)
{
    uint64_t base = loom->depth - 2, count = whorli_slice_count(loom, base);
    whorli_entry *entry = loom->entry + loom->edge[base];
    uint32_t weight = 0;
    double value = 1.0;
    whorl_status status = WHORL_OK;
    if (count == 0 && !(constant && exponent > 0.0))
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "a power of zero: make sure that the base is not 0");
    if (count == 1 && entry->weight == 0 && constant) {
        if (entry->im != 0.0 || entry->re < 0.0)
            return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "only positive numbers have powers that are not whole");
        value = whorli_real_power(entry->re, exponent);
        if (!whorl_is_finite(value))
            return whorli_overflowed(loom);
    } else if (count > 0) {
        status = whorli_loom_atom(loom, WHORLI_ATOM_POWER, &weight);
    }
    loom->entries = loom->edge[base];
    loom->depth--;
    if (status != WHORL_OK || count == 0 || value == 0.0)
        return status;
    return whorli_slice_add(loom, 0, 0, value, 0.0, weight);
}

static whorl_status whorli_run_power(whorli_loom *loom, const whorli_step *step)
{
    uint64_t top = loom->depth - 1, count = whorli_slice_count(loom, top);
    const whorli_entry *exponent = loom->entry + loom->edge[top];
    int32_t constant = count == 0 || (count == 1 && exponent->weight == 0), power;
    double value = count == 0 || !constant ? 0.0 : exponent->re;
    whorl_status status;
    if (count == 1 && exponent->im != 0.0)
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "exponents are real numbers: leave i out");
    if (step->left == WHORLI_OPERATOR &&
        (!constant || value < 0.0 || value > WHORLI_MOST_EXPONENT || value != floor(value)))
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "operators have whole powers from 0 to 1024 only");
    if (!constant || value > WHORLI_MOST_EXPONENT || value < -WHORLI_MOST_EXPONENT || 2.0 * value != floor(2.0 * value))
        return whorli_run_power_real(loom, constant, value);
    loom->entries = loom->edge[top];
    loom->depth--;
    if (value != floor(value)) {
        status = whorli_run_root(loom);
        if (status != WHORL_OK)
            return status;
        value *= 2.0;
    }
    power = (int32_t)value;
    count = whorli_slice_count(loom, loom->depth - 1);
    if (count == 0 && power < 0)
        return whorli_loom_refuse(loom, WHORL_BAD_TEXT, "a negative power of zero: make sure that the base is not 0");
    if (count == 1 && step->left == WHORLI_NUMBER)
        return whorli_run_power_single(loom, power);
    if (power < 0)
        return whorli_run_atom(loom, WHORLI_ATOM_INVERSE, -power);
    return whorli_run_power_many(loom, power);
}

/* Runs the compiled expression: its value comes on top of the stack. */
static whorl_status whorli_run(whorli_loom *loom)
{
    whorl_status status = whorli_loom_need(loom, WHORLI_ROOM_EDGE, loom->depth + loom->most_width + 16);
    uint64_t k;
    for (k = 0; status == WHORL_OK && k < loom->steps; k++) {
        const whorli_step *step = loom->step + k;
        loom->at = step->at;
        switch (step->does) {
        case WHORLI_DO_NEGATE: whorli_run_negate(loom, whorli_kind_width(step->left)); break;
        case WHORLI_DO_SUBTRACT:
            whorli_run_negate(loom, whorli_kind_width(step->right));
            status = whorli_run_add(loom, step);
            break;
        case WHORLI_DO_ADD: status = whorli_run_add(loom, step); break;
        case WHORLI_DO_MULTIPLY: status = whorli_run_multiply(loom, step); break;
        case WHORLI_DO_DIVIDE: status = whorli_run_divide(loom, step); break;
        case WHORLI_DO_DOT: status = whorli_run_dot(loom, step); break;
        case WHORLI_DO_CROSS: status = whorli_run_cross(loom); break;
        case WHORLI_DO_POWER: status = whorli_run_power(loom, step); break;
        case WHORLI_DO_ROOT: status = whorli_run_root(loom); break;
        default: status = whorli_run_operand(loom, step); break;
        }
        if (status == WHORL_OK)
            status = whorli_loom_poll(loom, 1);
    }
    return status;
}

/* ---- >>gather ---------------------------------------------------------------------------------------------------- */

/* The whole stack becomes terms, grouped by weight and tidy: loom->tally and loom->gathered. */
static whorl_status whorli_gather(whorli_loom *loom)
{
    uint64_t k, first = 0, total = 0;
    whorl_status status = whorl_poll(loom->host);
    memset(loom->tally, 0, (size_t)(loom->monomials * sizeof(uint64_t)));
    for (k = 0; k < loom->entries; k++)
        loom->tally[loom->entry[k].weight]++;
    for (k = 0; k < loom->monomials; k++) { /* counts become beginnings, and while terms are laid down, ends */
        uint64_t count = loom->tally[k];
        loom->tally[k] = total;
        total += count;
    }
    for (k = 0; k < loom->entries; k++) {
        const whorli_entry *entry = loom->entry + k;
        whorl_term *term = loom->term + loom->tally[entry->weight]++;
        term->x = entry->x;
        term->z = entry->z;
        term->re = entry->re;
        term->im = entry->im;
    }
    for (k = 0; status == WHORL_OK && k < loom->monomials; k++) {
        whorl_sum sum;
        loom->gathered[k] = 0;
        if (loom->tally[k] > first) {
            status = whorl_sum_from_terms(loom->host, loom->sites, loom->term + first, loom->tally[k] - first, &sum);
            if (status == WHORL_OK)
                loom->gathered[k] = sum.count;
        }
        first = loom->tally[k];
    }
    return status;
}

static const whorl_term *whorli_gathered_terms(const whorli_loom *loom, uint64_t weight)
{
    return loom->term + (weight == 0 ? 0 : loom->tally[weight - 1]);
}

/* ---- >>objects --------------------------------------------------------------------------------------------------- */

struct whorl_expression {
    whorl_block block;
    int32_t sites;
    uint64_t sum_count, term_count;
    whorl_sum *sums;
    whorl_term *terms;
    uint32_t *sum_weight;
    whorli_range *monomial;
    whorli_factor *factor;
    whorli_atom *atom;
    whorli_part *part;
    whorli_parameter *parameter;
    char *names;
    uint64_t monomials, factors, atoms, parts, parameters, name_bytes;
};

static void whorli_expression_measure(whorl_expression *e, const whorli_loom *loom)
{
    uint64_t k;
    memset(e, 0, sizeof *e);
    for (k = 0; k < loom->monomials; k++) {
        e->sum_count += loom->gathered[k] > 0;
        e->term_count += loom->gathered[k];
    }
    e->sites = loom->sites;
    e->monomials = loom->monomials;
    e->factors = loom->factors;
    e->atoms = loom->atoms;
    e->parts = loom->parts;
    e->parameters = loom->parameters;
    for (k = 0; k < loom->parameters; k++)
        e->name_bytes += loom->parameter[k].length + 1;
}

static void whorli_expression_layout(whorl_layout *layout, whorl_expression *e)
{
    e->sums = (whorl_sum *)whorl_layout_carve(layout, e->sum_count, sizeof(whorl_sum));
    e->terms = (whorl_term *)whorl_layout_carve(layout, e->term_count, sizeof(whorl_term));
    e->sum_weight = (uint32_t *)whorl_layout_carve(layout, e->sum_count, 4);
    e->monomial = (whorli_range *)whorl_layout_carve(layout, e->monomials, sizeof(whorli_range));
    e->factor = (whorli_factor *)whorl_layout_carve(layout, e->factors, sizeof(whorli_factor));
    e->atom = (whorli_atom *)whorl_layout_carve(layout, e->atoms, sizeof(whorli_atom));
    e->part = (whorli_part *)whorl_layout_carve(layout, e->parts, sizeof(whorli_part));
    e->parameter = (whorli_parameter *)whorl_layout_carve(layout, e->parameters, sizeof(whorli_parameter));
    e->names = (char *)whorl_layout_carve(layout, e->name_bytes, 1);
}

static void whorli_copy(void *to, const void *from, uint64_t count, uint64_t size)
{
    if (count > 0)
        memcpy(to, from, (size_t)(count * size));
}

/* Line and column of every atom: the places are sorted by nature, so one walk through the text does. */
static void whorli_expression_places(whorl_expression *e, const whorli_reader *reader)
{
    uint64_t k, at = 0, line = 1, line_start = 0;
    for (k = 0; k < e->atoms; k++) {
        uint64_t place = (uint64_t)e->atom[k].line;
        if (place < at) {
            at = line_start = 0;
            line = 1;
        }
        for (; at < place; at++)
            if (reader->text[at] == '\n') {
                line++;
                line_start = at + 1;
            }
        e->atom[k].line = (int32_t)line;
        e->atom[k].column = (int32_t)(place - line_start + 1);
    }
}

static void whorli_expression_fill(whorl_expression *e, const whorli_loom *loom)
{
    uint64_t k, terms = 0, sums = 0, chars = 0;
    for (k = 0; k < loom->monomials; k++)
        if (loom->gathered[k] > 0) {
            whorl_sum *sum = e->sums + sums;
            sum->sites = loom->sites;
            sum->count = loom->gathered[k];
            sum->terms = e->terms + terms;
            memcpy(sum->terms, whorli_gathered_terms(loom, k), (size_t)(sum->count * sizeof(whorl_term)));
            e->sum_weight[sums++] = (uint32_t)k;
            terms += sum->count;
        }
    whorli_copy(e->monomial, loom->monomial, e->monomials, sizeof(whorli_range));
    whorli_copy(e->factor, loom->factor, e->factors, sizeof(whorli_factor));
    whorli_copy(e->atom, loom->atom, e->atoms, sizeof(whorli_atom));
    whorli_copy(e->part, loom->part, e->parts, sizeof(whorli_part));
    whorli_copy(e->parameter, loom->parameter, e->parameters, sizeof(whorli_parameter));
    for (k = 0; k < e->parameters; k++) {
        whorli_parameter *parameter = e->parameter + k;
        memcpy(e->names + chars, parameter->name, (size_t)parameter->length);
        parameter->name = e->names + chars;
        chars += parameter->length;
        e->names[chars++] = '\0';
    }
    whorli_expression_places(e, loom->reader);
}

/* Too many different weights would make the sums useless as a list. */
static whorl_status whorli_expression_check(whorli_loom *loom, const whorl_expression *e)
{
    if (e->sum_count <= WHORL_MOST_SUMS)
        return WHORL_OK;
    return whorl_fail(loom->host, WHORL_TOO_LARGE,
                      "there are more than 4096 different products of parameters: give fewer terms their own");
}

/* ---- >>values ---------------------------------------------------------------------------------------------------- */

/* Scratch for the values of atoms. */
typedef struct whorli_valuer {
    whorl_host *host;
    const whorl_expression *e;
    double *values; /* of the parameters */
    uint8_t *given; /* of each parameter: its value is set, its formula is not used */
    whorl_complex *atom;
    uint8_t *needed; /* of each atom */
} whorli_valuer;

static void whorli_valuer_layout(whorl_layout *layout, whorli_valuer *valuer)
{
    valuer->values = (double *)whorl_layout_carve(layout, valuer->e->parameters, sizeof(double));
    valuer->given = (uint8_t *)whorl_layout_carve(layout, valuer->e->parameters, 1);
    valuer->atom = (whorl_complex *)whorl_layout_carve(layout, valuer->e->atoms, sizeof(whorl_complex));
    valuer->needed = (uint8_t *)whorl_layout_carve(layout, valuer->e->atoms, 1);
}

static void whorli_valuer_need_weight(whorli_valuer *valuer, uint32_t weight)
{
    whorli_range range = valuer->e->monomial[weight];
    uint32_t k;
    for (k = 0; k < range.count; k++)
        valuer->needed[valuer->e->factor[range.first + k].atom] = 1;
}

static void whorli_valuer_need(whorli_valuer *valuer, whorli_range polynomial)
{
    uint32_t k;
    for (k = 0; k < polynomial.count; k++)
        whorli_valuer_need_weight(valuer, valuer->e->part[polynomial.first + k].weight);
}

static int32_t whorli_valuer_follows(const whorli_valuer *valuer, const whorli_atom *atom)
{
    return atom->kind == WHORLI_ATOM_PARAMETER && !valuer->given[atom->parameter];
}

/* The value of a monomial; *zero becomes the atom that stands in a denominator and is 0, or stays. */
static whorl_complex whorli_valuer_weight(const whorli_valuer *valuer, uint32_t weight, uint32_t *zero)
{
    whorli_range range = valuer->e->monomial[weight];
    whorl_complex value = whorl_complex_of(1.0, 0.0);
    uint32_t k;
    for (k = 0; k < range.count; k++) {
        whorli_factor factor = valuer->e->factor[range.first + k];
        uint32_t modulus = (uint32_t)(factor.power < 0 ? -factor.power : factor.power);
        whorl_complex c = whorli_complex_power(valuer->atom[factor.atom], modulus);
        if (factor.power < 0 && c.re == 0.0 && c.im == 0.0)
            *zero = factor.atom;
        value = factor.power < 0 ? whorli_complex_divide(value, c) : whorl_complex_multiply(value, c);
    }
    return value;
}

static whorl_complex whorli_valuer_polynomial(const whorli_valuer *valuer, whorli_range polynomial, uint32_t *zero)
{
    whorl_complex value = whorl_complex_of(0.0, 0.0);
    uint32_t k;
    for (k = 0; k < polynomial.count; k++) {
        const whorli_part *part = valuer->e->part + polynomial.first + k;
        whorl_complex term = whorl_complex_multiply(whorl_complex_of(part->re, part->im),
                                                    whorli_valuer_weight(valuer, part->weight, zero));
        value.re += term.re;
        value.im += term.im;
    }
    return value;
}

static whorl_status whorli_valuer_fail(whorli_valuer *valuer, const whorli_atom *atom, const char *words)
{
    whorl_text text = whorl_fail_begin(valuer->host, WHORL_NOT_FINITE);
    if (atom != NULL && atom->kind != WHORLI_ATOM_PARAMETER) {
        valuer->host->reason.line = atom->line;
        valuer->host->reason.column = atom->column;
    }
    whorl_text_add(&text, words);
    if (atom != NULL && atom->kind == WHORLI_ATOM_PARAMETER) {
        const whorli_parameter *parameter = valuer->e->parameter + atom->parameter;
        whorl_text_add(&text, " (parameter ");
        whorli_quote(&text, parameter->name, parameter->length);
        whorl_text_add(&text, ")");
    }
    return WHORL_NOT_FINITE;
}

static whorl_status whorli_valuer_check(whorli_valuer *valuer, whorl_complex value, uint32_t zero,
                                        const whorli_atom *atom)
{
    if (zero != UINT32_MAX)
        return whorli_valuer_fail(valuer, valuer->e->atom + zero,
                                  "at these values of the parameters something is divided by zero: change them");
    if (!whorl_is_finite(value.re) || !whorl_is_finite(value.im))
        return whorli_valuer_fail(valuer, atom,
                                  "at these values of the parameters a number is too large for a double: change them");
    return WHORL_OK;
}

/* base to the power of a polynomial: by products where that is whole, of a positive base otherwise. */
static whorl_status whorli_valuer_power(whorli_valuer *valuer, const whorli_atom *atom, whorl_complex *base)
{
    uint32_t zero = UINT32_MAX;
    whorl_complex exponent = whorli_valuer_polynomial(valuer, atom->exponent, &zero);
    whorl_status status = whorli_valuer_check(valuer, exponent, zero, atom);
    int32_t whole = exponent.re == floor(exponent.re) && fabs(exponent.re) <= WHORLI_MOST_EXPONENT;
    int32_t nothing = base->re == 0.0 && base->im == 0.0;
    if (status != WHORL_OK)
        return status;
    if (exponent.im != 0.0 || (!whole && (base->im != 0.0 || base->re < 0.0)) || (nothing && exponent.re <= 0.0))
        return whorli_valuer_fail(valuer, atom, "at these values of the parameters this power is not defined");
    if (whole) {
        *base = whorli_complex_power(*base, (uint32_t)fabs(exponent.re));
        if (exponent.re < 0.0)
            *base = whorli_complex_divide(whorl_complex_of(1.0, 0.0), *base);
    } else if (!nothing) {
        *base = whorl_complex_of(whorli_real_power(base->re, exponent.re), 0.0);
    }
    return whorli_valuer_check(valuer, *base, UINT32_MAX, atom);
}

static whorl_status whorli_valuer_atom(whorli_valuer *valuer, uint64_t k)
{
    const whorli_atom *atom = valuer->e->atom + k;
    uint32_t zero = UINT32_MAX;
    whorl_complex value;
    whorl_status status;
    if (atom->kind == WHORLI_ATOM_PARAMETER) {
        double *to = valuer->values + atom->parameter;
        if (whorli_valuer_follows(valuer, atom)) {
            value = whorli_valuer_polynomial(valuer, valuer->e->parameter[atom->parameter].formula, &zero);
            status = whorli_valuer_check(valuer, value, zero, atom);
            if (status == WHORL_OK && value.im != 0.0)
                status = whorli_valuer_fail(valuer, atom, "the value of a parameter must be real, without i");
            if (status != WHORL_OK)
                return status;
            *to = value.re;
        }
        valuer->atom[k] = whorl_complex_of(*to, 0.0);
        return WHORL_OK;
    }
    value = whorli_valuer_polynomial(valuer, atom->base, &zero);
    status = whorli_valuer_check(valuer, value, zero, atom);
    if (status == WHORL_OK && atom->kind == WHORLI_ATOM_POWER)
        status = whorli_valuer_power(valuer, atom, &value);
    if (status != WHORL_OK)
        return status;
    if (atom->kind == WHORLI_ATOM_POWER) {
        valuer->atom[k] = value;
        return WHORL_OK;
    }
    if (atom->kind == WHORLI_ATOM_INVERSE) {
        if (value.re == 0.0 && value.im == 0.0)
            return whorli_valuer_fail(valuer, atom, "at these values of the parameters this is a division by zero");
        value = whorli_complex_divide(whorl_complex_of(1.0, 0.0), value);
    } else {
        if (value.im != 0.0 || value.re < 0.0)
            return whorli_valuer_fail(valuer, atom,
                                      "at these values of the parameters this is the root of a negative number");
        value.re = sqrt(value.re);
    }
    valuer->atom[k] = value;
    return whorli_valuer_check(valuer, value, UINT32_MAX, atom);
}

/* All atoms that are marked as needed, and what they need. Atoms are made of earlier ones only. */
static whorl_status whorli_valuer_run(whorli_valuer *valuer)
{
    uint64_t k;
    whorl_status status = WHORL_OK;
    for (k = valuer->e->atoms; k-- > 0;)
        if (valuer->needed[k]) {
            const whorli_atom *atom = valuer->e->atom + k;
            if (atom->kind != WHORLI_ATOM_PARAMETER) {
                whorli_valuer_need(valuer, atom->base);
                whorli_valuer_need(valuer, atom->exponent);
            } else if (whorli_valuer_follows(valuer, atom))
                whorli_valuer_need(valuer, valuer->e->parameter[atom->parameter].formula);
        }
    for (k = 0; status == WHORL_OK && k < valuer->e->atoms; k++)
        if (valuer->needed[k])
            status = whorli_valuer_atom(valuer, k);
    return status;
}

static whorl_status whorli_valuer_take(whorli_valuer *valuer, whorl_host *host, const whorl_expression *e,
                                       whorl_block *block)
{
    whorl_layout layout = {NULL, 0};
    whorl_status status;
    memset(valuer, 0, sizeof *valuer);
    valuer->host = host;
    valuer->e = e;
    whorli_valuer_layout(&layout, valuer);
    status = whorl_layout_take(host, &layout, block);
    if (status != WHORL_OK)
        return status;
    whorli_valuer_layout(&layout, valuer);
    if (e->atoms > 0)
        memset(valuer->needed, 0, (size_t)e->atoms);
    return WHORL_OK;
}

static whorl_status whorli_values_finite(whorl_host *host, const double *values, uint64_t count)
{
    uint64_t k;
    for (k = 0; k < count; k++)
        if (!whorl_is_finite(values[k])) {
            whorl_status status = whorl_fail(host, WHORL_NOT_FINITE,
                                             "the value of a parameter is NaN or infinite: pass finite values");
            host->reason.index = k;
            return status;
        }
    return WHORL_OK;
}

uint64_t whorl_expression_weights_bytes(const whorl_expression *e)
{
    whorl_layout layout = {NULL, 0};
    whorli_valuer valuer;
    memset(&valuer, 0, sizeof valuer);
    valuer.e = e;
    whorli_valuer_layout(&layout, &valuer);
    return whorl_block_bytes(layout.bytes);
}

whorl_status whorl_expression_weights(whorl_host *host, const whorl_expression *e, const double *values,
                                      whorl_complex *weights)
{
    whorli_valuer valuer;
    whorl_block block;
    uint64_t k;
    uint32_t zero = UINT32_MAX;
    whorl_status status = whorli_values_finite(host, values, e->parameters);
    int32_t pass;
    if (status != WHORL_OK)
        return status;
    status = whorli_valuer_take(&valuer, host, e, &block);
    if (status != WHORL_OK)
        return status;
    whorli_copy(valuer.values, values, e->parameters, sizeof(double));
    if (e->parameters > 0)
        memset(valuer.given, 1, (size_t)e->parameters);
    for (k = 0; k < e->sum_count; k++)
        whorli_valuer_need_weight(&valuer, e->sum_weight[k]);
    status = whorli_valuer_run(&valuer);
    for (pass = 0; pass < 2; pass++) /* checked before the first is written */
        for (k = 0; status == WHORL_OK && k < e->sum_count; k++) {
            whorl_complex value = whorli_valuer_weight(&valuer, e->sum_weight[k], &zero);
            if (pass == 0)
                status = whorli_valuer_check(&valuer, value, zero, NULL);
            else
                weights[k] = value;
        }
    whorl_block_give(host, &block);
    return status;
}

/* ---- >>reading --------------------------------------------------------------------------------------------------- */

static whorl_status whorli_names_check(whorl_host *host, const whorli_loom *loom, const char *name, uint64_t index)
{
    uint64_t length = name == NULL ? 0 : (uint64_t)strlen(name), k;
    int32_t good = length > 0 && whorli_is_letter(name[0]) && name[0] != '_';
    whorl_text text;
    for (k = 0; good && k < length; k++)
        good = whorli_is_letter(name[k]) || whorli_is_digit(name[k]);
    if (good && !whorli_is_reserved(name, length) && whorli_loom_find(loom, name, length) == NULL)
        return WHORL_OK;
    text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
    host->reason.index = index;
    if (name != NULL)
        whorli_quote(&text, name, length);
    whorl_text_add(&text, name == NULL ? "a name is NULL: pass names that begin with a letter"
                        : !good ? " is no name: begin with a letter and go on with letters, digits and _"
                        : whorli_is_reserved(name, length) ? " has a meaning of its own: choose another name"
                                                           : " names two parameters: choose another name for one");
    return WHORL_BAD_ARGUMENT;
}

static whorl_status whorli_name_values_check(whorl_host *host, const whorl_name_value *names, uint64_t count)
{
    uint64_t k;
    if (count > 0 && names == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the array of names is NULL: pass one, or a count of 0");
    for (k = 0; k < count; k++) {
        whorl_status status = whorli_values_finite(host, &names[k].value, 1);
        if (status != WHORL_OK) {
            host->reason.index = k;
            return status;
        }
    }
    return WHORL_OK;
}

static whorl_status whorli_text_valid(whorl_host *host, const char *text, uint64_t length, int32_t sites)
{
    if (text == NULL && length > 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the text is NULL: pass one, or a length of 0");
    if (length > INT32_MAX)
        return whorl_fail(host, WHORL_TOO_LARGE, "the text is longer than 2^31 - 1 bytes: split it into several sums");
    return whorli_sites_valid(host, sites);
}

/* One try with the present rooms: the whole text is one expression. */
static whorl_status whorli_expression_try(whorli_loom *loom, const char *const *names, const whorl_name_value *pairs,
                                          uint64_t name_count)
{
    whorli_range none = {0, 0};
    whorl_status status = whorli_loom_start(loom);
    int32_t kind = WHORLI_NUMBER;
    uint64_t k;
    for (k = 0; status == WHORL_OK && k < name_count; k++) {
        const char *name = names != NULL ? names[k] : pairs[k].name;
        status = whorli_names_check(loom->host, loom, name, k);
        if (status == WHORL_OK && pairs != NULL) /* numbers at once: no symbol is needed */
            status = whorli_loom_name(loom, name, (uint64_t)strlen(name), WHORLI_IS_PARAMETER, WHORLI_NUMBER, k);
        else if (status == WHORL_OK)
            status = whorli_loom_parameter(loom, name, (uint64_t)strlen(name), none);
    }
    if (status == WHORL_OK)
        status = whorli_reader_next(loom->reader);
    if (status == WHORL_OK)
        status = whorli_compile(loom, 0, &kind);
    if (status == WHORL_OK && loom->reader->kind != WHORLI_WORD_END)
        status = whorli_reader_expected(loom->reader, "an operator (+ - * / . x ^) or the end");
    if (status == WHORL_OK && kind != WHORLI_NUMBER && kind != WHORLI_OPERATOR) {
        whorl_text text = whorli_reader_fail(loom->reader, WHORL_BAD_TEXT, 0);
        whorl_text_add(&text, "the expression is ");
        whorl_text_add(&text, whorli_kind_name(kind));
        whorl_text_add(&text, ": an operator or a number is wanted, such as a scalar product");
        status = WHORL_BAD_TEXT;
    }
    if (status == WHORL_OK)
        status = whorli_run(loom);
    return status == WHORL_OK ? whorli_gather(loom) : status;
}

/* Reads into the loom, whose scratch is kept when it is good. */
static whorl_status whorli_expression_weave(whorl_host *host, whorli_loom *loom, whorli_reader *reader,
                                            const char *text, uint64_t length, int32_t sites, const char *const *names,
                                            const whorl_name_value *pairs, uint64_t name_count)
{
    whorl_status status = whorli_text_valid(host, text, length, sites);
    if (status != WHORL_OK)
        return status;
    whorl_stage(host, "reading text", 0, length);
    whorli_loom_begin(loom, host, reader);
    loom->room[WHORLI_ROOM_STEP] += length / 4;
    loom->room[WHORLI_ROOM_ENTRY] += length / 8;
    loom->sites = sites;
    loom->constant = pairs;
    do {
        *reader = whorli_reader_of(host, text, length, 0);
        status = whorli_expression_try(loom, names, pairs, name_count);
        if (status == WHORLI_AGAIN) {
            status = whorli_loom_grow(loom);
            status = status == WHORL_OK ? WHORLI_AGAIN : status;
        }
    } while (status == WHORLI_AGAIN);
    if (status != WHORL_OK)
        whorli_loom_end(loom);
    return status;
}

whorl_status whorl_sum_read(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                            const whorl_name_value *names, uint64_t name_count, whorl_term *terms, uint64_t room,
                            whorl_sum *out)
{
    whorli_loom loom;
    whorli_reader reader;
    whorl_status status = whorli_name_values_check(host, names, name_count);
    uint64_t count;
    if (status == WHORL_OK)
        status = whorli_expression_weave(host, &loom, &reader, text, length, sites, NULL, names, name_count);
    if (status != WHORL_OK)
        return status;
    count = loom.gathered[0];
    if (count > room) {
        status = whorli_no_room(host, room, count);
    } else {
        whorli_copy(terms, whorli_gathered_terms(&loom, 0), count, sizeof(whorl_term));
        whorli_sum_set(out, sites, terms, count);
    }
    whorli_loom_end(&loom);
    return status;
}

whorl_status whorl_sum_read_bytes(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                  const whorl_name_value *names, uint64_t name_count, uint64_t *bytes)
{
    whorli_loom loom;
    whorli_reader reader;
    whorl_status status = whorli_name_values_check(host, names, name_count);
    if (status == WHORL_OK)
        status = whorli_expression_weave(host, &loom, &reader, text, length, sites, NULL, names, name_count);
    if (status != WHORL_OK)
        return status;
    *bytes = loom.scratch.bytes;
    whorli_loom_end(&loom);
    return WHORL_OK;
}

static void whorli_expression_object(whorl_layout *layout, whorl_expression *plan, whorl_expression **e)
{
    *e = (whorl_expression *)whorl_layout_carve(layout, 1, sizeof(whorl_expression));
    whorli_expression_layout(layout, plan);
}

/* Reads; then makes the object, or only tells what it would take. */
static whorl_status whorli_expression_make(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                           const char *const *names, uint64_t name_count, whorl_expression **expression,
                                           uint64_t *bytes)
{
    whorl_layout layout = {NULL, 0};
    whorl_expression plan, *made;
    whorl_block block;
    whorli_loom loom;
    whorli_reader reader;
    whorl_status status;
    if (name_count > 0 && names == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the array of names is NULL: pass one, or a count of 0");
    status = whorli_expression_weave(host, &loom, &reader, text, length, sites, names, NULL, name_count);
    if (status != WHORL_OK)
        return status;
    whorli_expression_measure(&plan, &loom);
    whorli_expression_object(&layout, &plan, &made);
    status = whorli_expression_check(&loom, &plan);
    if (bytes != NULL)
        *bytes = whorl_size_add(loom.scratch.bytes, whorl_block_bytes(layout.bytes));
    else if (status == WHORL_OK)
        status = whorl_layout_take(host, &layout, &block);
    if (status == WHORL_OK && bytes == NULL) {
        whorli_expression_object(&layout, &plan, &made);
        plan.block = block;
        *made = plan;
        whorli_expression_fill(made, &loom);
        *expression = made;
    }
    whorli_loom_end(&loom);
    return status;
}

whorl_status whorl_expression_read(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                   const char *const *names, uint64_t name_count, whorl_expression **expression)
{
    *expression = NULL;
    return whorli_expression_make(host, text, length, sites, names, name_count, expression, NULL);
}

whorl_status whorl_expression_bytes(whorl_host *host, const char *text, uint64_t length, int32_t sites,
                                    const char *const *names, uint64_t name_count, uint64_t *bytes)
{
    uint64_t told = 0;
    whorl_status status = whorli_expression_make(host, text, length, sites, names, name_count, NULL, &told);
    if (status == WHORL_OK)
        *bytes = told;
    return status;
}

void whorl_expression_free(whorl_host *host, whorl_expression *expression)
{
    whorl_block block;
    if (expression == NULL)
        return;
    block = expression->block;
    whorl_block_give(host, &block);
}

uint64_t whorl_expression_count(const whorl_expression *expression)
{
    return expression->sum_count;
}

const whorl_sum *whorl_expression_sums(const whorl_expression *expression)
{
    return expression->sums;
}

uint64_t whorl_expression_term_count(const whorl_expression *expression)
{
    return expression->term_count;
}

/* sum_k f_k H_k for weights known already. */
static whorl_status whorli_expression_combine(whorl_host *host, const whorl_expression *e, const whorl_complex *weights,
                                              whorl_term *terms, whorl_sum *out)
{
    uint64_t k, i, count = 0;
    for (k = 0; k < e->sum_count; k++)
        for (i = 0; i < e->sums[k].count; i++) {
            const whorl_term *from = e->sums[k].terms + i;
            whorl_complex c = whorl_complex_multiply(weights[k], whorl_complex_of(from->re, from->im));
            terms[count].x = from->x;
            terms[count].z = from->z;
            terms[count].re = c.re;
            terms[count++].im = c.im;
        }
    return whorl_sum_from_terms(host, e->sites, terms, count, out);
}

whorl_status whorl_expression_sum(whorl_host *host, const whorl_expression *e, const double *values, whorl_term *terms,
                                  uint64_t room, whorl_sum *out)
{
    whorl_block block;
    whorl_status status;
    if (room < e->term_count)
        return whorli_no_room(host, room, e->term_count);
    status = whorl_block_take(host, e->sum_count * sizeof(whorl_complex), &block);
    if (status != WHORL_OK)
        return status;
    status = whorl_expression_weights(host, e, values, (whorl_complex *)(void *)block.at);
    if (status == WHORL_OK)
        status = whorli_expression_combine(host, e, (const whorl_complex *)(const void *)block.at, terms, out);
    whorl_block_give(host, &block);
    return status;
}

/* ---- >>writing --------------------------------------------------------------------------------------------------- */

/* A complex number as a factor: 2, (1 + 2*i), 2*i; its sign has been written where `sign` is -1. */
static void whorli_write_number(whorl_text *to, double re, double im, double sign)
{
    if (im == 0.0) {
        whorl_text_add_real(to, sign * re);
    } else if (re == 0.0) {
        whorl_text_add_real(to, sign * im);
        whorl_text_add(to, "*i");
    } else {
        whorl_text_add(to, "(");
        whorl_text_add_real(to, re);
        whorl_text_add(to, im < 0.0 ? " - " : " + ");
        whorl_text_add_real(to, fabs(im));
        whorl_text_add(to, "*i)");
    }
}

static int32_t whorli_is_negative(double re, double im)
{
    return (im == 0.0 && re < 0.0) || (re == 0.0 && im < 0.0);
}

static void whorli_write_term(whorl_text *to, const whorl_term *term)
{
    uint64_t sites = term->x | term->z;
    double sign = whorli_is_negative(term->re, term->im) ? -1.0 : 1.0;
    int32_t site;
    whorli_write_number(to, term->re, term->im, sign);
    for (site = 0; site < 64; site++)
        if (sites >> site & 1) {
            whorl_text_add(to, (term->x >> site & 1) == 0 ? "*Z[" : (term->z >> site & 1) ? "*Y[" : "*X[");
            whorl_text_add_signed(to, site);
            whorl_text_add(to, "]");
        }
}

static void whorli_write_sum(whorl_text *to, const whorl_sum *sum)
{
    uint64_t k, line = to->used;
    if (sum->count == 0)
        whorl_text_add(to, "0");
    for (k = 0; k < sum->count; k++) {
        int32_t negative = whorli_is_negative(sum->terms[k].re, sum->terms[k].im);
        if (k > 0 && to->used - line > 80) {
            whorl_text_add(to, "\n   ");
            line = to->used;
        }
        whorl_text_add(to, k == 0 ? (negative ? "-" : "") : negative ? " - " : " + ");
        whorli_write_term(to, sum->terms + k);
    }
}

/* Where room does not do. */
static whorl_status whorli_text_room(whorl_host *host, const whorl_text *measured, uint64_t room)
{
    whorl_text text;
    if (measured->used < room)
        return WHORL_OK;
    text = whorl_fail_begin(host, WHORL_NO_ROOM);
    host->reason.index = measured->used + 1;
    whorl_text_add(&text, "the text needs ");
    whorl_text_add_unsigned(&text, measured->used + 1);
    whorl_text_add(&text, " bytes with the NUL, the buffer has ");
    whorl_text_add_unsigned(&text, room);
    whorl_text_add(&text, ": make it longer");
    return WHORL_NO_ROOM;
}

whorl_status whorl_sum_write(whorl_host *host, const whorl_sum *sum, char *text, uint64_t room, uint64_t *used)
{
    whorl_text to = whorl_text_over(NULL, 0);
    whorl_status status = whorl_sum_check(host, sum);
    if (status != WHORL_OK)
        return status;
    whorli_write_sum(&to, sum);
    status = whorli_text_room(host, &to, room);
    if (status != WHORL_OK)
        return status;
    to = whorl_text_over(text, room);
    whorli_write_sum(&to, sum);
    *used = to.used;
    return WHORL_OK;
}

/*
 * Weights are nested (an atom holds a polynomial of weights); they are written with a stack of what is still to come in
 * a walk that never goes deeper than WHORLI_MOST_NESTING; deeper ones appear as "...".
 */
#define WHORLI_MOST_NESTING 16
typedef struct whorli_writing {
    whorli_range monomial; /* factors still to be written */
    whorli_range rest;     /* parts of the polynomial still to be written behind them */
    whorli_range exponent; /* and then those of its exponent */
    int32_t is_power;
    int32_t power;         /* of the atom that this polynomial is */
    int32_t wrote;         /* something of this polynomial, or of this monomial (in `began`) */
    int32_t began;
} whorli_writing;

static void whorli_write_power(whorl_text *to, int32_t power)
{
    if (power == 1)
        return;
    whorl_text_add(to, "^");
    whorl_text_add_signed(to, power);
}

/* The next part of a polynomial: its number; its factors come later. */
static void whorli_write_part(whorl_text *to, const whorl_expression *e, whorli_writing *now)
{
    const whorli_part *part = e->part + now->rest.first++;
    int32_t negative = whorli_is_negative(part->re, part->im);
    double sign = negative ? -1.0 : 1.0;
    now->rest.count--;
    now->monomial = e->monomial[part->weight];
    whorl_text_add(to, !now->wrote ? (negative ? "-" : "") : negative ? " - " : " + ");
    now->wrote = 1;
    now->began = !(sign * part->re == 1.0 && part->im == 0.0 && now->monomial.count > 0);
    if (now->began)
        whorli_write_number(to, part->re, part->im, sign);
}

static void whorli_write_weight(whorl_text *to, const whorl_expression *e, uint32_t weight)
{
    whorli_writing stack[WHORLI_MOST_NESTING], *now;
    int32_t depth = 1;
    memset(stack, 0, sizeof stack);
    stack[0].monomial = e->monomial[weight];
    if (weight == 0)
        whorl_text_add(to, "1");
    while (depth > 0) {
        now = stack + depth - 1;
        if (now->monomial.count > 0) {
            whorli_factor factor = e->factor[now->monomial.first++];
            const whorli_atom *atom = e->atom + factor.atom;
            now->monomial.count--;
            if (now->began)
                whorl_text_add(to, "*");
            now->began = 1;
            if (atom->kind == WHORLI_ATOM_PARAMETER) {
                whorl_text_add_bytes(to, e->parameter[atom->parameter].name, e->parameter[atom->parameter].length);
                whorli_write_power(to, factor.power);
            } else if (depth == WHORLI_MOST_NESTING) {
                whorl_text_add(to, "...");
            } else {
                whorl_text_add(to, atom->kind == WHORLI_ATOM_ROOT ? "sqrt("
                                 : atom->kind == WHORLI_ATOM_POWER ? "((" : "(");
                now++;
                depth++;
                memset(now, 0, sizeof *now);
                now->power = atom->kind == WHORLI_ATOM_INVERSE ? -factor.power : factor.power;
                now->rest = atom->base;
                now->exponent = atom->exponent;
                now->is_power = atom->kind == WHORLI_ATOM_POWER;
            }
        } else if (now->rest.count > 0) {
            whorli_write_part(to, e, now);
        } else if (now->is_power == 1) {
            whorl_text_add(to, ")^(");
            now->is_power = 2;
            now->rest = now->exponent;
            now->wrote = 0;
        } else {
            if (--depth > 0) {
                whorl_text_add(to, now->is_power ? "))" : ")");
                whorli_write_power(to, now->power);
            }
        }
    }
}

whorl_status whorl_expression_weight_write(whorl_host *host, const whorl_expression *e, uint64_t k, char *text,
                                           uint64_t room, uint64_t *used)
{
    whorl_text to = whorl_text_over(NULL, 0);
    whorl_status status;
    if (k >= e->sum_count)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "there are fewer weights: ask whorl_expression_count");
    whorli_write_weight(&to, e, e->sum_weight[k]);
    status = whorli_text_room(host, &to, room);
    if (status != WHORL_OK)
        return status;
    to = whorl_text_over(text, room);
    whorli_write_weight(&to, e, e->sum_weight[k]);
    *used = to.used;
    return WHORL_OK;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
