/*
 * solve.c: levels of a model file. A thin shell over whorl_model.h and whorl_levels.h: arguments in, tables out.
 *
 *     cc -O3 -fopenmp -I../include solve.c -o solve -lm        (without -fopenmp: one thread)
 *     ./solve ring_magnet.whorl
 *     ./solve --help
 *
 * Exit status: 0 good, 1 something failed or did not converge (what converged is printed), 2 wrong use or a mistake in
 * the model file.
 */
#define _POSIX_C_SOURCE 200112L
#define WHORL_IMPLEMENTATION
#include "whorl_levels.h"
#include "whorl_model.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#if defined(__unix__) || defined(__APPLE__)
#include <unistd.h>
#define HAVE_TERMINAL 1
#else
#define HAVE_TERMINAL 0
#endif

enum { GOOD = 0, FAILED = 1, WRONG_USE = 2, MOST_SETTINGS = 64, MOST_SECTORS = 128 };

typedef struct setting {
    const char *name;
    uint64_t length;
    double value;
} setting;

typedef struct options {
    const char *file;
    whorl_levels_desc want;
    int32_t sectors[MOST_SECTORS];
    uint64_t byte_limit;
    int32_t threads;
    int table;
    setting set[MOST_SETTINGS];
    int settings;
    setting sweep; /* name and first value */
    double sweep_last;
    uint64_t sweep_points; /* 0: no sweep */
    uint64_t realisations, first_realisation;
    int averaged; /* --realisations was given */
} options;

static const char usage[] =
    "usage: solve [options] MODEL\n"
    "\n"
    "  --levels K             eigenpairs of each sector (default 4)\n"
    "  --whole                whole spectra of all sectors, with the exact traces as a check\n"
    "  --highest              from the top instead of the bottom\n"
    "  --sector M             only S^z = M (0, 1, 3/2, -1/2 ...), may be given again; where only the parity of the\n"
    "                         number of down spins is conserved: even or odd\n"
    "  --no-sectors           use no conserved number\n"
    "  --set NAME=VALUE       another value for a parameter of the model, may be given again\n"
    "  --sweep NAME=A:B:N     N values of a parameter from A to B: ground level and gap of each\n"
    "  --realisation R        draw the disorder number R (default 0)\n"
    "  --realisations N       draw N disorders, from --realisation on: mean and standard error\n"
    "  --tolerance T          residual relative to the norm (default 1e-10)\n"
    "  --seed S               of the solver's start vectors (default 0)\n"
    "  --memory BYTES         most memory; K, M, G behind the number are powers of 1024\n"
    "  --threads N            threads (default 1; results do not depend on it)\n"
    "  --table                tab-separated output for other programs\n"
    "  --help                 this text\n";

/* ---- >>arguments ----------------------------------------------------------------------------------------------------- */

static int wrong(const char *option, const char *advice)
{
    fprintf(stderr, "solve: %s: %s (see --help)\n", option, advice);
    return WRONG_USE;
}

static int read_real(const char *text, uint64_t length, double *value)
{
    return length > 0 && whorl_real_read(text, length, value) == length && whorl_is_finite(*value);
}

static int read_count(const char *text, uint64_t most, uint64_t *value)
{
    uint64_t total = 0;
    if (*text == '\0')
        return 0;
    for (; *text != '\0'; text++) {
        uint64_t digit = (uint64_t)(*text - '0');
        if (*text < '0' || *text > '9' || total > (most - digit) / 10)
            return 0;
        total = 10 * total + digit;
    }
    *value = total;
    return 1;
}

static int read_bytes(const char *text, uint64_t *value)
{
    double number = 0.0;
    uint64_t length = (uint64_t)strlen(text), used = whorl_real_read(text, length, &number);
    double unit = 1.0;
    if (used == 0 || used + 1 < length)
        return 0;
    if (used + 1 == length) {
        switch (text[used]) {
        case 'K': unit = 1024.0; break;
        case 'M': unit = 1024.0 * 1024.0; break;
        case 'G': unit = 1024.0 * 1024.0 * 1024.0; break;
        default: return 0;
        }
    }
    number *= unit;
    if (!(number >= 1.0 && number < 9.0e18))
        return 0;
    *value = (uint64_t)number;
    return 1;
}

/* "0", "3/2", "-1", "1.5" as 2 S^z; "even" and "odd" as parities. */
static int read_sector(const char *text, int32_t *sector)
{
    uint64_t length = (uint64_t)strlen(text);
    double value = 0.0;
    if (strcmp(text, "even") == 0 || strcmp(text, "odd") == 0) {
        *sector = text[0] == 'o';
        return 1;
    }
    if (length > 2 && strcmp(text + length - 2, "/2") == 0)
        length -= 2;
    if (!read_real(text, length, &value))
        return 0;
    if (length == (uint64_t)strlen(text))
        value *= 2.0;
    if (value < -64.0 || value > 64.0 || value != floor(value))
        return 0;
    *sector = (int32_t)value;
    return 1;
}

static int read_setting(const char *text, setting *to)
{
    const char *equals = strchr(text, '=');
    if (equals == NULL || equals == text)
        return 0;
    to->name = text;
    to->length = (uint64_t)(equals - text);
    return read_real(equals + 1, (uint64_t)strlen(equals + 1), &to->value);
}

static int read_sweep(const char *text, options *o)
{
    const char *equals = strchr(text, '='), *colon, *second;
    if (equals == NULL || equals == text || (colon = strchr(equals, ':')) == NULL || (second = strchr(colon + 1, ':')) == NULL)
        return 0;
    o->sweep.name = text;
    o->sweep.length = (uint64_t)(equals - text);
    return read_real(equals + 1, (uint64_t)(colon - equals - 1), &o->sweep.value) &&
           read_real(colon + 1, (uint64_t)(second - colon - 1), &o->sweep_last) &&
           read_count(second + 1, 1000000, &o->sweep_points) && o->sweep_points >= 1;
}

/* Options without a value. 1 if it was one. */
static int take_flag(const char *name, options *o)
{
    if (strcmp(name, "--whole") == 0)
        o->want.whole = 1;
    else if (strcmp(name, "--highest") == 0)
        o->want.end = WHORL_HIGHEST;
    else if (strcmp(name, "--no-sectors") == 0)
        o->want.plain = 1;
    else if (strcmp(name, "--table") == 0)
        o->table = 1;
    else
        return 0;
    return 1;
}

/* Options with a value: 0, or WRONG_USE after its message. */
static int take_option(const char *name, const char *value, options *o)
{
    uint64_t number = 0;
    if (strcmp(name, "--levels") == 0) {
        if (!read_count(value, 1000000, &number) || number == 0)
            return wrong(name, "give a number of levels from 1 on");
        o->want.wanted = (int32_t)number;
    } else if (strcmp(name, "--sector") == 0) {
        if (o->want.sector_count == MOST_SECTORS || !read_sector(value, &o->sectors[o->want.sector_count]))
            return wrong(name, "give S^z as 0, 1, 3/2, -1/2, or even or odd");
        o->want.sector_count++;
        o->want.sectors = o->sectors;
    } else if (strcmp(name, "--set") == 0) {
        if (o->settings == MOST_SETTINGS || !read_setting(value, &o->set[o->settings]))
            return wrong(name, "write NAME=VALUE, for instance J=1.5");
        o->settings++;
    } else if (strcmp(name, "--sweep") == 0) {
        if (!read_sweep(value, o))
            return wrong(name, "write NAME=FROM:TO:POINTS, for instance h=0:2:21");
    } else if (strcmp(name, "--realisation") == 0) {
        if (!read_count(value, UINT64_MAX / 4, &o->first_realisation))
            return wrong(name, "give the number of a realisation, 0 or more");
    } else if (strcmp(name, "--realisations") == 0) {
        if (!read_count(value, 100000000, &o->realisations) || o->realisations == 0)
            return wrong(name, "give how many, from 1 on");
        o->averaged = 1;
    } else if (strcmp(name, "--tolerance") == 0) {
        if (!read_real(value, (uint64_t)strlen(value), &o->want.tolerance) || o->want.tolerance <= 0.0)
            return wrong(name, "give a number above 0, for instance 1e-10");
    } else if (strcmp(name, "--seed") == 0) {
        if (!read_count(value, UINT64_MAX / 2, &o->want.seed))
            return wrong(name, "give a whole number, 0 or more");
    } else if (strcmp(name, "--memory") == 0) {
        if (!read_bytes(value, &o->byte_limit))
            return wrong(name, "give bytes, for instance 500M or 4G");
    } else if (strcmp(name, "--threads") == 0) {
        if (!read_count(value, WHORL_MOST_WORKERS, &number) || number == 0)
            return wrong(name, "give a number of threads from 1 to 256");
        o->threads = (int32_t)number;
    } else {
        return wrong(name, "no such option");
    }
    return GOOD;
}

static int take_value(const char *name)
{
    static const char *const names[] = {"--levels", "--sector", "--set", "--sweep", "--realisation", "--realisations",
                                        "--tolerance", "--seed", "--memory", "--threads"};
    size_t i;
    for (i = 0; i < sizeof names / sizeof *names; i++)
        if (strcmp(name, names[i]) == 0)
            return 1;
    return 0;
}

static int read_arguments(int count, char **argument, options *o)
{
    int i, code;
    memset(o, 0, sizeof *o);
    o->want = whorl_levels_default();
    o->threads = 1;
    o->realisations = 1;
    for (i = 1; i < count; i++) {
        const char *name = argument[i];
        if (name[0] != '-' || name[1] == '\0') {
            if (o->file != NULL)
                return wrong(name, "one model file at a time");
            o->file = name;
        } else if (take_value(name)) {
            if (i + 1 == count)
                return wrong(name, "needs a value behind it");
            if ((code = take_option(name, argument[++i], o)) != GOOD)
                return code;
        } else if (!take_flag(name, o)) {
            return wrong(name, "no such option");
        }
    }
    if (o->file == NULL) {
        fprintf(stderr, "solve: name a model file\n\n%s", usage);
        return WRONG_USE;
    }
    if (o->sweep_points > 0 && o->averaged)
        return wrong("--sweep", "sweep or average over realisations, not both at once");
    return GOOD;
}

/* ---- >>progress ------------------------------------------------------------------------------------------------------ */

/* A line on the terminal that overwrites itself; nothing at all in a pipe. */
static int32_t show_progress(void *context, const whorl_progress *progress)
{
    int *width = (int *)context;
    static const char bar[] = "####################";
    if (progress->total > 0) {
        double part = (double)progress->done / (double)progress->total;
        int marks = (int)(20.0 * (part < 1.0 ? part : 1.0));
        *width = fprintf(stderr, "\r[%-20.*s] %s", marks, bar, progress->stage) > 0;
    } else {
        *width = fprintf(stderr, "\r%s: %llu products  ", progress->stage, (unsigned long long)progress->done) > 0;
    }
    fflush(stderr);
    return 0;
}

static void clear_progress(int shown)
{
    if (shown)
        fprintf(stderr, "\r%-70s\r", "");
}

/* ---- >>tables -------------------------------------------------------------------------------------------------------- */

static const char *half(int32_t twice, char *room)
{
    if (twice % 2 == 0)
        sprintf(room, "%d", (int)(twice / 2));
    else
        sprintf(room, "%d/2", (int)twice);
    return room;
}

static const char *spin_text(const whorl_level *level, char *room)
{
    if ((level->flags & WHORL_LEVEL_MIXED) != 0)
        return "mixed";
    return level->twice_spin < 0 ? "-" : half(level->twice_spin, room);
}

static void print_symmetry(const whorl_levels *levels)
{
    whorl_levels_symmetry s = whorl_levels_symmetry_of(levels);
    printf("symmetry    %s", s.number ? "[H, S^z] = 0" : s.parity ? "parity of the number of down spins" : "no conserved number");
    if (s.spin)
        printf("; [H, S] = 0: total spin");
    else if (s.spin_square == 1)
        printf("; [H, S^2] = 0");
    if (s.inversion)
        printf("; spin inversion");
    if (s.reversal)
        printf("; time reversal");
    printf("; %s arithmetic%s\n", s.real ? "real" : "complex", s.gauge != 0 ? " after turning spins about z" : "");
    if (s.defect > 0.0)
        printf("            conserved up to rounding: %.1e, included in the residuals\n", s.defect);
}

static void print_sectors(const whorl_levels *levels)
{
    uint64_t s, k;
    char spin[16];
    printf("\n%-22s %12s  %22s  %9s  %6s  %s\n", "sector", "dimension", "level", "residual", "states", "S");
    for (s = 0; s < whorl_levels_sector_count(levels); s++) {
        whorl_level_sector sector = whorl_levels_sector_at(levels, s);
        for (k = 0; k < sector.levels; k++) {
            whorl_level level = whorl_levels_in_sector_at(levels, s, k);
            if (k == 0)
                printf("%-22s %12llu", sector.label, (unsigned long long)sector.dimension);
            else
                printf("%-22s %12s", "", "");
            printf("  %22.12f  %9.1e  %5llu%c  %s\n", level.energy, level.residual, (unsigned long long)level.multiplicity,
                   (level.flags & WHORL_LEVEL_OPEN) != 0 ? '+' : ' ', spin_text(&level, spin));
        }
        if (!sector.converged)
            printf("%-22s %12s  not all converged: %llu of the wanted eigenpairs after %llu products\n", "", "",
                   (unsigned long long)sector.pairs, (unsigned long long)sector.products);
    }
    printf("(states: counted vectors in the sector; + where the list ends inside the level)\n");
}

static void print_counts(const whorl_levels *levels, const char *title, int32_t least, int32_t most, int spin)
{
    int32_t twice;
    char room[16];
    printf("  %-10s", title);
    for (twice = least; twice <= most; twice++) {
        uint64_t states = spin ? whorl_levels_spin_states(levels, 0, twice) : whorl_levels_sz_states(levels, 0, twice);
        if (states == 0)
            continue;
        if (spin)
            printf(" %g (S = %s)", 0.25 * (double)twice * (double)(twice + 2), half(twice, room));
        else
            printf(" %s", half(twice, room));
        printf(" x%llu", (unsigned long long)states);
    }
    printf("\n");
}

static void print_ground(const whorl_levels *levels, int highest)
{
    whorl_ground ground = whorl_levels_ground(levels);
    printf("\n%s %.12f  residual %.1e, %llu state%s%s\n", highest ? "highest level" : "ground level ", ground.energy,
           ground.residual, (unsigned long long)ground.multiplicity, ground.multiplicity == 1 ? "" : "s",
           ground.complete ? "" : " or more: ask for more levels");
    if (ground.spin_good && ground.least_spin >= 0)
        print_counts(levels, "S^2", ground.least_spin, ground.most_spin, 1);
    if (ground.sz_good)
        print_counts(levels, "S^z", ground.least_sz, ground.most_sz, 0);
    if (ground.gap_known)
        printf("gap           %.12f  to the next level\n", ground.gap);
    else
        printf("gap           not known: ask for more levels\n");
}

static void print_checks(const whorl_levels *levels, int32_t sites)
{
    whorl_levels_checks c = whorl_levels_checks_of(levels);
    printf("\nchecks        ");
    if (c.all_sectors)
        printf("dimensions add up to %llu, %s 2^%d\n", (unsigned long long)c.dimension,
               c.dimensions_add ? "which is" : "WHICH IS NOT", (int)sites);
    else
        printf("only chosen sectors were solved (dimension %llu in all)\n", (unsigned long long)c.dimension);
    if (c.traced > 0)
        printf("              means of E and E^2 in %llu sectors against exact traces: %s (worst at %.2f of the bound)\n",
               (unsigned long long)c.traced, c.traces_hold ? "hold" : "DO NOT HOLD", c.worst_trace);
    printf("              %s\n", c.rechecked ? "fresh random starts found nothing that was missed (a probabilistic check)"
                                           : "some sector could not be checked for missed levels");
    printf("              largest residual %.1e; levels closer than %.1e count as one\n", c.residual, c.merge_tolerance);
}

static void print_table(const whorl_levels *levels)
{
    uint64_t s, k;
    printf("sector\tdimension\tweight\tlevel\tenergy\tresidual\tstates\ttwice_S\tflags\n");
    for (s = 0; s < whorl_levels_sector_count(levels); s++) {
        whorl_level_sector sector = whorl_levels_sector_at(levels, s);
        for (k = 0; k < sector.levels; k++) {
            whorl_level level = whorl_levels_in_sector_at(levels, s, k);
            printf("%s\t%llu\t%llu\t%llu\t%.17g\t%.3g\t%llu\t%d\t%u\n", sector.label, (unsigned long long)sector.dimension,
                   (unsigned long long)sector.weight, (unsigned long long)k, level.energy, level.residual,
                   (unsigned long long)level.multiplicity, (int)level.twice_spin, (unsigned)level.flags);
        }
    }
}

/* ---- >>one point ----------------------------------------------------------------------------------------------------- */

/* A model with the values of its parameters at one point of a sweep or one realisation. */
typedef struct point {
    whorl_model *model;
    double *values;
    whorl_complex *weights;
} point;

static void point_free(whorl_host *host, point *at)
{
    free(at->values);
    free(at->weights);
    whorl_model_free(host, at->model);
    memset(at, 0, sizeof *at);
}

/* What is wrong, with the place in the file where there is one. */
static int complain(const whorl_host *host, const options *o, whorl_status status)
{
    const whorl_reason *reason = &host->reason;
    if (reason->line > 0)
        fprintf(stderr, "%s:%d:%d: %s\n", o->file, (int)reason->line, (int)reason->column, reason->text);
    else
        fprintf(stderr, "solve: %s: %s\n", whorl_status_text(status), reason->text);
    return reason->line > 0 || status == WHORL_BAD_TEXT || status == WHORL_BAD_ARGUMENT || status == WHORL_NOT_HERMITIAN
               ? WRONG_USE
               : FAILED;
}

/* The settings of the command line, and the swept parameter last, as numbers of parameters. */
static whorl_status find_settings(whorl_host *host, const whorl_model *model, const options *o, double swept,
                                  whorl_setting *set, uint64_t *count)
{
    int k, all = o->settings + (o->sweep_points > 0);
    for (k = 0; k < all; k++) {
        const setting *s = k < o->settings ? &o->set[k] : &o->sweep;
        set[k].parameter = whorl_model_parameter_find(host, model, s->name, s->length);
        set[k].value = k < o->settings ? s->value : swept;
        if (set[k].parameter < 0)
            return WHORL_BAD_ARGUMENT;
    }
    *count = (uint64_t)all;
    return WHORL_OK;
}

static whorl_status point_make(whorl_host *host, const options *o, const char *text, uint64_t length, uint64_t realisation,
                               double swept, point *at)
{
    whorl_setting set[MOST_SETTINGS + 1];
    uint64_t count = 0;
    whorl_status status;
    memset(at, 0, sizeof *at);
    status = whorl_model_read(host, text, length, realisation, &at->model);
    if (status == WHORL_OK)
        status = find_settings(host, at->model, o, swept, set, &count);
    if (status == WHORL_OK) {
        at->values = (double *)malloc(((size_t)whorl_model_parameter_count(at->model) + 1) * sizeof *at->values);
        at->weights = (whorl_complex *)malloc(((size_t)whorl_model_sum_count(at->model) + 1) * sizeof *at->weights);
        if (at->values == NULL || at->weights == NULL)
            status = whorl_fail(host, WHORL_NO_MEMORY, "no memory for the parameters");
    }
    if (status == WHORL_OK)
        status = whorl_model_values(host, at->model, set, count, at->values);
    if (status == WHORL_OK)
        status = whorl_model_weights(host, at->model, at->values, at->weights);
    if (status != WHORL_OK)
        point_free(host, at);
    return status;
}

static whorl_status point_solve(whorl_host *host, const options *o, const point *at, whorl_levels **levels)
{
    whorl_sum nothing;
    memset(&nothing, 0, sizeof nothing);
    nothing.sites = whorl_model_sites(at->model);
    if (whorl_model_sum_count(at->model) == 0) /* a model without sums: the operator zero */
        return whorl_levels_make(host, &nothing, &o->want, levels);
    return whorl_levels_make_weighted(host, whorl_model_sums(at->model), at->weights, whorl_model_sum_count(at->model),
                                      &o->want, levels);
}

static void print_model(const options *o, const point *at)
{
    int32_t k, count = whorl_model_parameter_count(at->model);
    printf("model       %s%s%s\n", o->file, whorl_model_title(at->model)[0] != '\0' ? ": " : "", whorl_model_title(at->model));
    printf("spins       %d, %llu terms\n", (int)whorl_model_sites(at->model),
           (unsigned long long)whorl_model_term_count(at->model));
    for (k = 0; k < count; k++)
        printf("%s%s = %.12g", k == 0 ? "parameters  " : ", ", whorl_model_parameter_name(at->model, k), at->values[k]);
    if (count > 0)
        printf("\n");
    if (whorl_model_draws(at->model) > 0)
        printf("disorder    realisation %llu\n", (unsigned long long)o->first_realisation);
}

static int solve_once(whorl_host *host, const options *o, const char *text, uint64_t length, const int *shown)
{
    whorl_levels *levels = NULL;
    point at;
    whorl_status status = point_make(host, o, text, length, o->first_realisation, 0.0, &at);
    if (status != WHORL_OK)
        return complain(host, o, status);
    status = point_solve(host, o, &at, &levels);
    clear_progress(*shown);
    if (status < 0) {
        int code = complain(host, o, status);
        point_free(host, &at);
        return code;
    }
    if (o->table) {
        print_table(levels);
    } else {
        print_model(o, &at);
        print_symmetry(levels);
        print_sectors(levels);
        print_ground(levels, o->want.end == WHORL_HIGHEST);
        print_checks(levels, whorl_model_sites(at.model));
    }
    whorl_levels_free(host, levels);
    point_free(host, &at);
    if (status != WHORL_OK)
        fprintf(stderr, "solve: not all wanted levels converged: loosen --tolerance or ask for fewer levels\n");
    return status == WHORL_OK ? GOOD : FAILED;
}

/* ---- >>sweeps and disorder ------------------------------------------------------------------------------------------- */

/* The ground level at one point. */
static whorl_status ground_of(whorl_host *host, const options *o, const char *text, uint64_t length, uint64_t realisation,
                              double swept, whorl_ground *ground)
{
    whorl_levels *levels = NULL;
    point at;
    whorl_status status = point_make(host, o, text, length, realisation, swept, &at);
    if (status != WHORL_OK)
        return status;
    status = point_solve(host, o, &at, &levels);
    if (status >= 0)
        *ground = whorl_levels_ground(levels);
    whorl_levels_free(host, levels);
    point_free(host, &at);
    return status;
}

static void print_row(const options *o, const char *first, const whorl_ground *ground)
{
    char spin[16] = "-", gap[40] = "-";
    if (ground->spin_good && ground->least_spin >= 0 && ground->least_spin == ground->most_spin)
        half(ground->least_spin, spin);
    if (ground->gap_known)
        sprintf(gap, o->table ? "%.17g" : "%.12f", ground->gap);
    if (o->table)
        printf("%s\t%.17g\t%.3g\t%llu\t%s\t%s\n", first, ground->energy, ground->residual,
               (unsigned long long)ground->multiplicity, gap, spin);
    else
        printf("%-18s %20.12f  %9.1e  %6llu%c %18s  %s\n", first, ground->energy, ground->residual,
               (unsigned long long)ground->multiplicity, ground->complete ? ' ' : '+', gap, spin);
}

static void print_row_titles(const options *o, const char *first)
{
    if (o->table)
        printf("%s\tenergy\tresidual\tstates\tgap\tS\n", first);
    else
        printf("%-18s %20s  %9s  %6s  %18s  %s\n", first, "ground level", "residual", "states", "gap", "S");
}

static int sweep(whorl_host *host, const options *o, const char *text, uint64_t length, const int *shown)
{
    uint64_t k;
    int code = GOOD;
    char first[64];
    sprintf(first, "%.*s", (int)(o->sweep.length < 40 ? o->sweep.length : 40), o->sweep.name);
    print_row_titles(o, first);
    for (k = 0; k < o->sweep_points; k++) {
        double part = o->sweep_points > 1 ? (double)k / (double)(o->sweep_points - 1) : 0.0;
        double value = o->sweep.value + (o->sweep_last - o->sweep.value) * part;
        whorl_ground ground;
        whorl_status status = ground_of(host, o, text, length, o->first_realisation, value, &ground);
        clear_progress(*shown);
        if (status < 0)
            return complain(host, o, status);
        if (status != WHORL_OK)
            code = FAILED;
        whorl_real_write(value, first);
        print_row(o, first, &ground);
        fflush(stdout);
    }
    return code;
}

/* Mean and standard error of the mean of `count` numbers. */
static void print_mean(const options *o, const char *name, const double *values, uint64_t count)
{
    double mean = whorl_sum_reals(values, count) / (double)count, square = 0.0, error = 0.0;
    uint64_t k;
    for (k = 0; k < count; k++)
        square += (values[k] - mean) * (values[k] - mean);
    if (count > 1)
        error = sqrt(square / (double)(count - 1) / (double)count);
    if (o->table)
        printf("mean\t%s\t%.17g\t%.17g\t%llu\n", name, mean, error, (unsigned long long)count);
    else if (count > 1)
        printf("mean %-13s %20.12f  +- %.2e (standard error of %llu)\n", name, mean, error, (unsigned long long)count);
}

static int average(whorl_host *host, const options *o, const char *text, uint64_t length, const int *shown)
{
    double *energy = (double *)malloc((size_t)o->realisations * sizeof *energy);
    double *gap = (double *)malloc((size_t)o->realisations * sizeof *gap);
    uint64_t k, gaps = 0;
    int code = GOOD;
    if (energy == NULL || gap == NULL) {
        fprintf(stderr, "solve: no memory for so many realisations\n");
        code = FAILED;
    } else {
        print_row_titles(o, "realisation");
    }
    for (k = 0; k < o->realisations && code == GOOD; k++) {
        whorl_ground ground;
        char first[24];
        whorl_status status = ground_of(host, o, text, length, o->first_realisation + k, 0.0, &ground);
        clear_progress(*shown);
        if (status < 0) {
            code = complain(host, o, status);
            break;
        }
        if (status != WHORL_OK)
            code = FAILED;
        energy[k] = ground.energy;
        if (ground.gap_known)
            gap[gaps++] = ground.gap;
        sprintf(first, "%llu", (unsigned long long)(o->first_realisation + k));
        print_row(o, first, &ground);
        fflush(stdout);
    }
    if (code == GOOD) {
        print_mean(o, "ground", energy, o->realisations);
        if (gaps > 0)
            print_mean(o, "gap", gap, gaps);
    }
    free(energy);
    free(gap);
    return code;
}

/* ---- >>main ---------------------------------------------------------------------------------------------------------- */

/* The whole file, which the caller frees; NULL after a message. */
static char *read_file(const char *name, uint64_t *length)
{
    FILE *file = fopen(name, "rb");
    size_t room = 1 << 16, used = 0, got;
    char *text = file == NULL ? NULL : (char *)malloc(room), *more;
    while (text != NULL && (got = fread(text + used, 1, room - used, file)) > 0) {
        used += got;
        if (used < room)
            continue;
        room *= 2;
        more = (char *)realloc(text, room);
        if (more == NULL)
            free(text);
        text = more;
    }
    if (file == NULL || text == NULL || ferror(file)) {
        fprintf(stderr, "solve: %s: cannot be read\n", name);
        free(text);
        text = NULL;
    }
    if (file != NULL)
        fclose(file);
    *length = used;
    return text;
}

int main(int count, char **argument)
{
    whorl_host host = whorl_host_default();
    options o;
    uint64_t length = 0;
    int code, shown = 0, i;
    char *text;
    for (i = 1; i < count; i++)
        if (strcmp(argument[i], "--help") == 0) {
            fputs(usage, stdout);
            return GOOD;
        }
    code = read_arguments(count, argument, &o);
    if (code != GOOD)
        return code;
    text = read_file(o.file, &length);
    if (text == NULL)
        return WRONG_USE;
    host.byte_limit = o.byte_limit;
    host.threads = o.threads;
#if HAVE_TERMINAL
    if (isatty(2)) {
        host.poll = show_progress;
        host.poll_context = &shown;
    }
#endif
    if (o.sweep_points > 0)
        code = sweep(&host, &o, text, length, &shown);
    else if (o.averaged)
        code = average(&host, &o, text, length, &shown);
    else
        code = solve_once(&host, &o, text, length, &shown);
    free(text);
    return code;
}
