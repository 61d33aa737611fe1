/*
 * whorl_lattice.h 0.1.0: clusters of sites cut from a lattice: positions, bonds by neighbour shell, site permutations.
 *
 * A cluster is given by integer spanning vectors: two points are one site where they differ by a combination of them.
 * Along each spanning vector the edges are periodic or open. Every bond tells how often it winds around each spanning
 * vector, so that phases and rotations for twisted edges can be attached, and of which type it is, so that
 * bond-dependent couplings and Dzyaloshinskii-Moriya vectors can be written.
 *
 *     whorl_lattice_desc desc;                                             (the usual square of 18 sites)
 *     if (whorl_lattice_usual(&host, WHORL_LATTICE_SQUARE, 18, &desc) == WHORL_OK &&
 *         whorl_lattice_make(&host, &desc, &lattice) == WHORL_OK &&
 *         whorl_lattice_bonds(&host, lattice, 1, 0, bonds, ROOM, &count) == WHORL_OK)
 *         for (k = 0; k < count; k++) used += whorl_terms_exchange(terms + used, bonds[k].i, bonds[k].j, 1.0);
 *
 * It does not make operators, and knows nothing of momenta or characters.
 *
 * Conventions: spanning vectors and cells count in the primitive vectors below (length: the nearest-neighbour distance,
 * 1 unless the description says otherwise); all wrapping is integer arithmetic.
 *
 *     lattice       primitive vectors                 sites of a cell               bond types of shell 1
 *     chain         (1, 0)                            0                             0: along x
 *     ladder        (1, 0)                            0, (0, 1)                     0, 2: legs, 1: rung
 *     square        (1, 0), (0, 1)                    0                             0: along x, 1: along y
 *     triangular    (1, 0), (1/2, sqrt(3)/2)          0                             0, 1, 2: at 0, 60, 120 degrees
 *     honeycomb     sqrt(3) times the triangular      0, a third of their sum       0, 1, 2: at 30, 270, 150 degrees
 *     kagome        twice the triangular              0, half of each               0, 2, 5: triangles pointing up,
 *                                                                                   1, 3, 4: triangles pointing down
 *     cubic         (1, 0, 0), (0, 1, 0), (0, 0, 1)   0                             0, 1, 2: along x, y, z
 *
 * Numbering: site = (sites of a cell) * cell + place in the cell; cells are ordered by their fraction along the last
 * spanning vector, then the one before it, and so on (so a 4 x 4 square has site = x + 4 y). Cell 0 is the origin.
 *
 * Memory: a lattice is one block of fixed size; bonds and permutations go into arrays of the caller.
 * Threads: a lattice never changes after it was made. Errors: statuses of whorl_core.h with a reason.
 */
#include "whorl_core.h"

#ifndef WHORL_LATTICE_INCLUDED
#define WHORL_LATTICE_INCLUDED

#if WHORL_CORE_VERSION != 100
#error "whorl_lattice.h 0.1.0 needs whorl_core.h 0.1.0: take all headers from one release"
#endif
#define WHORL_LATTICE_VERSION 100

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

/* ---- what a cluster is ------------------------------------------------------------------------------------------- */

typedef int32_t whorl_lattice_kind;
enum {
    WHORL_LATTICE_CHAIN = 1,
    WHORL_LATTICE_LADDER = 2,
    WHORL_LATTICE_SQUARE = 3,
    WHORL_LATTICE_TRIANGULAR = 4,
    WHORL_LATTICE_HONEYCOMB = 5,
    WHORL_LATTICE_KAGOME = 6,
    WHORL_LATTICE_CUBIC = 7,
    WHORL_LATTICE_CELL = 8 /* the caller's unit cell */
};

#define WHORL_LATTICE_MOST_SITES 64
#define WHORL_LATTICE_MOST_SHELL 100   /* neighbour shells that may be asked for */
#define WHORL_LATTICE_MOST_STRIDE 4096 /* components of spanning vectors, at most */
/* Distances and positions that agree to this relative accuracy are equal. */
#define WHORL_LATTICE_TOLERANCE 1e-6

typedef struct whorl_lattice_desc {
    whorl_lattice_kind kind; /* no default */
    int32_t spanning[9];     /* row r: spanning vector r in primitive vectors; d rows and columns are read */
    int32_t open[3];         /* 1: open edges along spanning vector r (no bond winds around it); 0: periodic */
    double length;           /* nearest-neighbour distance of the named lattices; 0: 1 */
    /* WHORL_LATTICE_CELL only; any unit of length */
    int32_t dimension;       /* d, 1 .. 3: number of primitive vectors; the named lattices know theirs */
    double primitive[9];     /* row r: primitive vector r as (x, y, z), linearly independent */
    const double *basis;     /* positions of the sites of a cell, (x, y, z) each; copied */
    int32_t basis_count;     /* at least 1 */
} whorl_lattice_desc;

/* An oriented bond from site i to site j: position_i + displacement = position_j + sum over r of winding_r T_r. */
typedef struct whorl_bond {
    int32_t i, j;           /* equal only where the cluster is so small that a bond ends on an image of its own site */
    int32_t type;           /* which bond of the unit cell's shell */
    int32_t shell;          /* 1: nearest neighbours of the infinite lattice */
    int32_t repeats;        /* how many bonds of the lattice it stands for: 1 unless merged */
    int32_t winding[3];     /* how often it crosses each spanning vector's edge, with sign */
    double displacement[3]; /* from i to j along the bond, real space */
} whorl_bond;

/* A motion of the lattice in cells: (cell, place) goes to (cell * linear + shift + ..., another place). */
typedef struct whorl_lattice_move {
    int32_t linear[9]; /* row r: where primitive vector r goes, in primitive vectors */
    int32_t shift[3];  /* cell where site 0 goes */
} whorl_lattice_move;

typedef struct whorl_lattice whorl_lattice;

/* All zero but for one spanning vector each of length 1: set `kind` and `spanning`. */
WHORL_API whorl_lattice_desc whorl_lattice_default(void);
/* A box of a x b x c cells along the primitive vectors, periodic; extents beyond the dimension are ignored. */
WHORL_API whorl_lattice_desc whorl_lattice_box(whorl_lattice_kind kind, int32_t a, int32_t b, int32_t c);

/*
 * The usual cluster of so many sites: chains of any length; ladders of any even number of sites; squares of
 * l^2 + m^2 sites, spanned by (l, m), (-m, l), with all rotations by 90 degrees; triangular, honeycomb and kagome
 * clusters of l^2 + l m + m^2 cells, spanned by (l, m), (-m, l + m), with all rotations by 60 degrees; of several such
 * the one with reflections, else the one with the smallest m; further the kagome clusters of 18 and 24 sites; cubic
 * clusters spanned by L times the primitive vectors of the simple, face-centred or body-centred cubic lattice. Common
 * practice.
 * Errors: WHORL_BAD_ARGUMENT where there is none (the reason names the nearest sizes); *desc is then untouched.
 */
WHORL_API whorl_status whorl_lattice_usual(whorl_host *host, whorl_lattice_kind kind, int32_t sites,
                                           whorl_lattice_desc *desc);

/* "chain" .. "cubic", "cell"; "" for anything else. And back: 0 for an unknown name. */
WHORL_API const char *whorl_lattice_kind_name(whorl_lattice_kind kind);
WHORL_API whorl_lattice_kind whorl_lattice_kind_named(const char *name, uint64_t length);

/* The bytes that whorl_lattice_make takes: the same for every lattice. */
WHORL_API uint64_t whorl_lattice_bytes(void);
/*
 * Makes the cluster; the caller frees it with whorl_lattice_free. Cost O(sites^2).
 * Errors: WHORL_BAD_ARGUMENT (unknown kind, dependent spanning or primitive vectors, a cell a hundred times longer than
 * wide, two basis sites in one place), WHORL_TOO_LARGE (more than 64 sites), WHORL_NOT_FINITE, WHORL_OVER_LIMIT,
 * WHORL_NO_MEMORY; *lattice is then NULL.
 */
WHORL_API whorl_status whorl_lattice_make(whorl_host *host, const whorl_lattice_desc *desc, whorl_lattice **lattice);
WHORL_API void whorl_lattice_free(whorl_host *host, whorl_lattice *lattice);

/* ---- sites ------------------------------------------------------------------------------------------------------- */

WHORL_API int32_t whorl_lattice_sites(const whorl_lattice *lattice);
WHORL_API int32_t whorl_lattice_cells(const whorl_lattice *lattice);
WHORL_API int32_t whorl_lattice_dimension(const whorl_lattice *lattice);
/* The position of a site (0 .. sites-1) in real space: its cell lies within the parallelepiped that they span. */
WHORL_API void whorl_lattice_position(const whorl_lattice *lattice, int32_t site, double position[3]);
/* The cell of a site, in primitive vectors; returns its place in the cell. */
WHORL_API int32_t whorl_lattice_cell(const whorl_lattice *lattice, int32_t site, int32_t cell[3]);
/* The site in a place of any cell of the infinite lattice, and how often that cell winds around (may be NULL). */
WHORL_API int32_t whorl_lattice_site(const whorl_lattice *lattice, const int32_t cell[3], int32_t place,
                                     int32_t winding[3]);
/* Spanning vector r (0 .. dimension-1) in real space. */
WHORL_API void whorl_lattice_spanning(const whorl_lattice *lattice, int32_t r, double vector[3]);

/* ---- bonds ------------------------------------------------------------------------------------------------------- */

/*
 * The distance of a neighbour shell of the infinite lattice (1: nearest). Cost grows as shell^(1 + 2/d).
 * Errors: WHORL_BAD_ARGUMENT for a shell outside 1 .. WHORL_LATTICE_MOST_SHELL, WHORL_CANCELLED.
 */
WHORL_API whorl_status whorl_lattice_distance(whorl_host *host, const whorl_lattice *lattice, int32_t shell,
                                              double *distance);
/*
 * The bonds of a neighbour shell: every cell contributes each bond of the infinite lattice once, less those across open
 * edges. Small clusters have repeats (a ring of two has two bonds between the same sites) and bonds from a site to an
 * image of itself, i == j (a ring of one has one); merge != 0 keeps the first bond of each pair of sites and counts
 * the others in its `repeats`.
 * Types: a bond leads from the earlier place in the cell to the later one, and between equal places to the cell whose
 * last nonzero coordinate is positive; types are numbered by the first place, then the second, then cells in
 * descending order of (first, second, third coordinate). Bonds are ordered by type, then by cell.
 * Writes at most `room` of them and *count. Errors: WHORL_NO_ROOM (the reason says the need; nothing is written),
 * and those of whorl_lattice_distance.
 */
WHORL_API whorl_status whorl_lattice_bonds(whorl_host *host, const whorl_lattice *lattice, int32_t shell, int32_t merge,
                                           whorl_bond *bonds, uint64_t room, uint64_t *count);
/* How many bonds whorl_lattice_bonds would write. Errors: those of whorl_lattice_distance. */
WHORL_API whorl_status whorl_lattice_bond_count(whorl_host *host, const whorl_lattice *lattice, int32_t shell,
                                                int32_t merge, uint64_t *count);

/* ---- permutations ------------------------------------------------------------------------------------------------ */

/*
 * The translation by primitive vector r: site i goes to permutation[i] (`sites` numbers). Those of all r generate
 * the translations of a periodic cluster.
 * Errors: WHORL_BAD_ARGUMENT for r outside 0 .. dimension-1 and where it leads across an open edge.
 */
WHORL_API whorl_status whorl_lattice_translation(whorl_host *host, const whorl_lattice *lattice, int32_t r,
                                                 int32_t *permutation);
/*
 * All distinct site permutations that come from motions of the infinite lattice (translations, rotations, reflections
 * and their products, found from the unit cell alone) that map the cluster to itself, open edges included. They form a
 * group and map bonds of every shell to bonds of that shell. Site i goes to permutations[sites * k + i]; in ascending
 * order, the identity first. moves may be NULL, otherwise gets for each a motion that makes it (on small clusters
 * there may be several). Writes *count. Takes scratch, announced by whorl_lattice_symmetries_bytes.
 * Errors: WHORL_NO_ROOM (the reason says how many there are; nothing is written), WHORL_OVER_LIMIT, WHORL_NO_MEMORY,
 * WHORL_CANCELLED.
 */
WHORL_API whorl_status whorl_lattice_symmetries(whorl_host *host, const whorl_lattice *lattice, int32_t *permutations,
                                                whorl_lattice_move *moves, uint64_t room, uint64_t *count);
/* How many there are; and the bytes that both calls take while they work. Errors: as above, without WHORL_NO_ROOM. */
WHORL_API whorl_status whorl_lattice_symmetry_count(whorl_host *host, const whorl_lattice *lattice, uint64_t *count);
WHORL_API whorl_status whorl_lattice_symmetries_bytes(whorl_host *host, const whorl_lattice *lattice, uint64_t *bytes);

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* WHORL_LATTICE_INCLUDED */

/* ==== implementation ============================================================================================== */
#if defined(WHORL_IMPLEMENTATION) && !defined(WHORL_LATTICE_IMPLEMENTED)
#define WHORL_LATTICE_IMPLEMENTED

#include <math.h>
#include <string.h>

WHORLI_C_BEGIN
WHORLI_ARITHMETIC_BEGIN

struct whorl_lattice {
    whorl_block block;
    int32_t dimension, sites, cells, places;
    int32_t open[3];
    double primitive[3][3];                    /* rows; zero beyond the dimension */
    double inverse_gram[3][3];                 /* of the primitive vectors; identity beyond the dimension */
    double basis[WHORL_LATTICE_MOST_SITES][3];
    double fraction[WHORL_LATTICE_MOST_SITES][3]; /* basis positions in primitive vectors (their part in the span) */
    int64_t spanning[3][3];                    /* rows; unit vectors beyond the dimension */
    int64_t cofactor[3][3];                    /* cell . cofactor = volume times fractions along the spanning vectors */
    int64_t volume;                            /* |determinant| = cells */
    int32_t cell[WHORL_LATTICE_MOST_SITES][3];
};

/* ---- >>vectors --------------------------------------------------------------------------------------------------- */

static double whorli_lattice_dot(const double a[3], const double b[3])
{
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
}

/* vector = from + cell . primitive vectors */
static void whorli_lattice_place(const whorl_lattice *lattice, const double from[3], const int32_t cell[3],
                                 double vector[3])
{
    int32_t c, r;
    for (c = 0; c < 3; c++) {
        vector[c] = from[c];
        for (r = 0; r < lattice->dimension; r++)
            vector[c] += (double)cell[r] * lattice->primitive[r][c];
    }
}

/* Signed minors of the transpose: m . cofactor = determinant times the identity. Returns the determinant. */
static int64_t whorli_lattice_cofactor(int64_t m[3][3], int64_t cofactor[3][3])
{
    int32_t i, j;
    for (i = 0; i < 3; i++)
        for (j = 0; j < 3; j++) {
            int32_t a = (i + 1) % 3, b = (i + 2) % 3, c = (j + 1) % 3, d = (j + 2) % 3;
            cofactor[j][i] = m[a][c] * m[b][d] - m[a][d] * m[b][c];
        }
    return m[0][0] * cofactor[0][0] + m[0][1] * cofactor[1][0] + m[0][2] * cofactor[2][0];
}

/* Fractions along the spanning vectors, times the volume. */
static void whorli_lattice_fractions(const whorl_lattice *lattice, const int64_t cell[3], int64_t fraction[3])
{
    int32_t r;
    for (r = 0; r < 3; r++)
        fraction[r] = cell[0] * lattice->cofactor[0][r] + cell[1] * lattice->cofactor[1][r] +
                      cell[2] * lattice->cofactor[2][r];
}

/* Brings a cell into the parallelepiped of the spanning vectors: cell = inside + winding . spanning. */
static void whorli_lattice_wrap(const whorl_lattice *lattice, const int64_t cell[3], int32_t inside[3],
                                int32_t winding[3])
{
    int64_t fraction[3];
    int32_t r, c;
    whorli_lattice_fractions(lattice, cell, fraction);
    for (r = 0; r < 3; r++) { /* division rounded down */
        int64_t quotient = fraction[r] / lattice->volume;
        winding[r] = (int32_t)(quotient - (fraction[r] % lattice->volume < 0));
    }
    for (c = 0; c < 3; c++)
        inside[c] = (int32_t)(cell[c] - winding[0] * lattice->spanning[0][c] - winding[1] * lattice->spanning[1][c] -
                              winding[2] * lattice->spanning[2][c]);
}

static int32_t whorli_lattice_cell_index(const whorl_lattice *lattice, const int32_t inside[3])
{
    int32_t k;
    for (k = 0; k < lattice->cells; k++)
        if (lattice->cell[k][0] == inside[0] && lattice->cell[k][1] == inside[1] && lattice->cell[k][2] == inside[2])
            return k;
    return -1;
}

/* ---- >>descriptions ---------------------------------------------------------------------------------------------- */

/* arrays, not pointers: these would need relocation, and with it a writable section */
static const char whorli_lattice_names[8][12] WHORLI_UNUSED = {"chain",     "ladder", "square", "triangular",
                                                               "honeycomb", "kagome", "cubic",  "cell"};

const char *whorl_lattice_kind_name(whorl_lattice_kind kind)
{
    return kind >= 1 && kind <= 8 ? whorli_lattice_names[kind - 1] : "";
}

whorl_lattice_kind whorl_lattice_kind_named(const char *name, uint64_t length)
{
    int32_t k;
    for (k = 0; k < 8; k++)
        if (strlen(whorli_lattice_names[k]) == length && memcmp(whorli_lattice_names[k], name, (size_t)length) == 0)
            return k + 1;
    return 0;
}

/* Dimension and sites of a cell; 0 for what is none of the named lattices. */
static int32_t whorli_lattice_named_dimension(whorl_lattice_kind kind)
{
    switch (kind) {
    case WHORL_LATTICE_CHAIN:
    case WHORL_LATTICE_LADDER: return 1;
    case WHORL_LATTICE_SQUARE:
    case WHORL_LATTICE_TRIANGULAR:
    case WHORL_LATTICE_HONEYCOMB:
    case WHORL_LATTICE_KAGOME: return 2;
    case WHORL_LATTICE_CUBIC: return 3;
    default: return 0;
    }
}

static int32_t whorli_lattice_named_places(whorl_lattice_kind kind)
{
    return kind == WHORL_LATTICE_KAGOME ? 3 : kind == WHORL_LATTICE_LADDER || kind == WHORL_LATTICE_HONEYCOMB ? 2 : 1;
}

whorl_lattice_desc whorl_lattice_default(void)
{
    whorl_lattice_desc desc;
    memset(&desc, 0, sizeof desc);
    desc.spanning[0] = desc.spanning[4] = desc.spanning[8] = 1;
    return desc;
}

whorl_lattice_desc whorl_lattice_box(whorl_lattice_kind kind, int32_t a, int32_t b, int32_t c)
{
    whorl_lattice_desc desc = whorl_lattice_default();
    desc.kind = kind;
    desc.spanning[0] = a;
    desc.spanning[4] = b;
    desc.spanning[8] = c;
    return desc;
}

static int32_t whorli_lattice_span(whorl_lattice_desc *desc, int32_t x0, int32_t y0, int32_t x1, int32_t y1)
{
    desc->spanning[0] = x0;
    desc->spanning[1] = y0;
    desc->spanning[3] = x1;
    desc->spanning[4] = y1;
    return 1;
}

/* l^2 + m^2 or l^2 + l m + m^2 cells, l >= m: with reflections (m = 0 or m = l) if there are, or the smallest m. */
static int32_t whorli_lattice_usual_plane(int32_t cells, int32_t square, whorl_lattice_desc *desc)
{
    int32_t l, m, best = -1, best_l = 0;
    for (m = 0; m <= 8; m++)
        for (l = m; l <= 8; l++)
            if (l > 0 && l * l + m * m + (square ? 0 : l * m) == cells && (best < 0 || (m == l && best != 0))) {
                best = m;
                best_l = l;
            }
    if (best < 0)
        return 0;
    return whorli_lattice_span(desc, best_l, best, -best, square ? best_l : best_l + best);
}

static int32_t whorli_lattice_usual_cubic(int32_t cells, whorl_lattice_desc *desc)
{
    static const int8_t shapes[3][9] = {
        {1, 0, 0, 0, 1, 0, 0, 0, 1}, {0, 1, 1, 1, 0, 1, 1, 1, 0}, {-1, 1, 1, 1, -1, 1, 1, 1, -1}};
    static const int32_t volumes[3] = {1, 2, 4};
    int32_t shape, l, k;
    for (shape = 0; shape < 3; shape++)
        for (l = 1; l <= 4; l++)
            if (volumes[shape] * l * l * l == cells) {
                for (k = 0; k < 9; k++)
                    desc->spanning[k] = l * shapes[shape][k];
                return 1;
            }
    return 0;
}

static int32_t whorli_lattice_usual_fill(whorl_lattice_kind kind, int32_t sites, whorl_lattice_desc *desc)
{
    int32_t places = whorli_lattice_named_places(kind), cells = sites / places;
    *desc = whorl_lattice_box(kind, cells, 1, 1);
    if (sites < 1 || sites > WHORL_LATTICE_MOST_SITES || cells * places != sites)
        return 0;
    switch (kind) {
    case WHORL_LATTICE_CHAIN:
    case WHORL_LATTICE_LADDER: return 1;
    case WHORL_LATTICE_SQUARE: return whorli_lattice_usual_plane(cells, 1, desc);
    case WHORL_LATTICE_TRIANGULAR:
    case WHORL_LATTICE_HONEYCOMB: return whorli_lattice_usual_plane(cells, 0, desc);
    case WHORL_LATTICE_KAGOME:
        if (cells == 6)
            return whorli_lattice_span(desc, 3, 0, 0, 2);
        if (cells == 8)
            return whorli_lattice_span(desc, 1, 2, -3, 2); /* of all with 8 cells the longest way round */
        return whorli_lattice_usual_plane(cells, 0, desc);
    default: return whorli_lattice_usual_cubic(cells, desc);
    }
}

whorl_status whorl_lattice_usual(whorl_host *host, whorl_lattice_kind kind, int32_t sites, whorl_lattice_desc *desc)
{
    whorl_lattice_desc found;
    whorl_text text;
    int32_t below, above;
    if (whorli_lattice_named_dimension(kind) == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "usual clusters are known of the named lattices, chain to cubic");
    if (whorli_lattice_usual_fill(kind, sites, &found)) {
        *desc = found;
        return WHORL_OK;
    }
    below = sites > WHORL_LATTICE_MOST_SITES ? WHORL_LATTICE_MOST_SITES : sites;
    above = sites < 1 ? 1 : sites;
    while (below > 0 && !whorli_lattice_usual_fill(kind, below, &found))
        below--;
    while (above <= WHORL_LATTICE_MOST_SITES && !whorli_lattice_usual_fill(kind, above, &found))
        above++;
    text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
    whorl_text_add(&text, "there is no usual ");
    whorl_text_add(&text, whorl_lattice_kind_name(kind));
    whorl_text_add(&text, " cluster of ");
    whorl_text_add_signed(&text, sites);
    whorl_text_add(&text, " sites: take");
    if (below > 0) {
        whorl_text_add(&text, " ");
        whorl_text_add_signed(&text, below);
    }
    if (above <= WHORL_LATTICE_MOST_SITES) {
        whorl_text_add(&text, below > 0 ? " or " : " ");
        whorl_text_add_signed(&text, above);
    }
    whorl_text_add(&text, ", or give spanning vectors");
    return WHORL_BAD_ARGUMENT;
}

/* ---- >>make ------------------------------------------------------------------------------------------------------ */

static void whorli_lattice_set(double vector[3], double x, double y, double z)
{
    vector[0] = x;
    vector[1] = y;
    vector[2] = z;
}

/* Primitive vectors and basis of the named lattices, nearest neighbours at distance a. */
static void whorli_lattice_named(whorl_lattice *lattice, whorl_lattice_kind kind, double a)
{
    const double root = 1.7320508075688772; /* sqrt(3) */
    double b = kind == WHORL_LATTICE_HONEYCOMB ? a * root : kind == WHORL_LATTICE_KAGOME ? 2.0 * a : a;
    int32_t oblique = kind == WHORL_LATTICE_TRIANGULAR || kind == WHORL_LATTICE_HONEYCOMB ||
                      kind == WHORL_LATTICE_KAGOME;
    lattice->dimension = whorli_lattice_named_dimension(kind);
    lattice->places = whorli_lattice_named_places(kind);
    whorli_lattice_set(lattice->primitive[0], b, 0.0, 0.0);
    if (lattice->dimension > 1 && oblique)
        whorli_lattice_set(lattice->primitive[1], 0.5 * b, 0.5 * root * b, 0.0);
    else if (lattice->dimension > 1)
        whorli_lattice_set(lattice->primitive[1], 0.0, b, 0.0);
    if (lattice->dimension > 2)
        whorli_lattice_set(lattice->primitive[2], 0.0, 0.0, b);
    if (kind == WHORL_LATTICE_LADDER)
        whorli_lattice_set(lattice->basis[1], 0.0, a, 0.0);
    if (kind == WHORL_LATTICE_HONEYCOMB)
        whorli_lattice_set(lattice->basis[1], 0.5 * root * a, 0.5 * a, 0.0);
    if (kind == WHORL_LATTICE_KAGOME) {
        whorli_lattice_set(lattice->basis[1], a, 0.0, 0.0);
        whorli_lattice_set(lattice->basis[2], 0.5 * a, 0.5 * root * a, 0.0);
    }
}

static whorl_status whorli_lattice_users(whorl_host *host, whorl_lattice *lattice, const whorl_lattice_desc *desc)
{
    int32_t k, c;
    if (desc->dimension < 1 || desc->dimension > 3)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a unit cell needs dimension 1, 2 or 3");
    if (desc->basis_count < 1 || desc->basis == NULL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "a unit cell needs the positions of at least one site in basis");
    if (desc->basis_count > WHORL_LATTICE_MOST_SITES)
        return whorl_fail(host, WHORL_TOO_LARGE, "a unit cell may have at most 64 sites");
    lattice->dimension = desc->dimension;
    lattice->places = desc->basis_count;
    for (k = 0; k < desc->dimension; k++)
        for (c = 0; c < 3; c++)
            lattice->primitive[k][c] = desc->primitive[3 * k + c];
    for (k = 0; k < desc->basis_count; k++)
        for (c = 0; c < 3; c++)
            lattice->basis[k][c] = desc->basis[3 * k + c];
    for (k = 0; k < desc->dimension; k++)
        for (c = 0; c < 3; c++)
            if (!whorl_is_finite(lattice->primitive[k][c]))
                return whorl_fail(host, WHORL_NOT_FINITE, "a primitive vector is not finite");
    for (k = 0; k < desc->basis_count; k++)
        for (c = 0; c < 3; c++)
            if (!whorl_is_finite(lattice->basis[k][c])) {
                whorl_text text = whorl_fail_begin(host, WHORL_NOT_FINITE);
                host->reason.index = (uint64_t)k;
                whorl_text_add(&text, "the position of basis site ");
                whorl_text_add_signed(&text, k);
                whorl_text_add(&text, " is not finite");
                return WHORL_NOT_FINITE;
            }
    return WHORL_OK;
}

/* The inverse of the matrix of inner products, padded with the identity, and the basis in primitive vectors. */
static whorl_status whorli_lattice_measure(whorl_host *host, whorl_lattice *lattice)
{
    double gram[3][3], determinant, scale = 1.0;
    int32_t i, j, k;
    for (i = 0; i < 3; i++)
        for (j = 0; j < 3; j++)
            gram[i][j] = i < lattice->dimension && j < lattice->dimension
                             ? whorli_lattice_dot(lattice->primitive[i], lattice->primitive[j])
                             : (double)(i == j);
    for (i = 0; i < 3; i++)
        scale *= gram[i][i];
    for (i = 0; i < 3; i++)
        for (j = 0; j < 3; j++) {
            int32_t a = (i + 1) % 3, b = (i + 2) % 3, c = (j + 1) % 3, d = (j + 2) % 3;
            lattice->inverse_gram[j][i] = gram[a][c] * gram[b][d] - gram[a][d] * gram[b][c];
        }
    determinant = gram[0][0] * lattice->inverse_gram[0][0] + gram[0][1] * lattice->inverse_gram[1][0] +
                  gram[0][2] * lattice->inverse_gram[2][0];
    if (!whorl_is_finite(scale) || !(scale > 0.0))
        return whorl_fail(host, WHORL_BAD_ARGUMENT,
                          "a primitive vector is zero or of extreme size: take another unit of length");
    if (!(determinant > scale * 1e-10))
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the primitive vectors are not linearly independent");
    for (i = 0; i < 3; i++)
        for (j = 0; j < 3; j++)
            lattice->inverse_gram[i][j] /= determinant;
    for (i = 0; i < lattice->dimension; i++) /* the walks over neighbours would take for ever */
        for (j = 0; j < lattice->dimension; j++)
            if (!(gram[j][j] * lattice->inverse_gram[i][i] <= 1e4))
                return whorl_fail(host, WHORL_BAD_ARGUMENT, "the unit cell is more than a hundred times longer than wide: "
                                                            "choose primitive vectors of similar length");
    for (k = 0; k < lattice->places; k++)
        for (i = 0; i < lattice->dimension; i++) {
            lattice->fraction[k][i] = 0.0;
            for (j = 0; j < lattice->dimension; j++)
                lattice->fraction[k][i] += lattice->inverse_gram[i][j] *
                                           whorli_lattice_dot(lattice->primitive[j], lattice->basis[k]);
        }
    return WHORL_OK;
}

/* No two basis sites in one place, nor at places that differ by a primitive vector. */
static whorl_status whorli_lattice_check_basis(whorl_host *host, const whorl_lattice *lattice)
{
    double shortest = whorli_lattice_dot(lattice->primitive[0], lattice->primitive[0]);
    int32_t a, b, r;
    for (r = 1; r < lattice->dimension; r++) {
        double square = whorli_lattice_dot(lattice->primitive[r], lattice->primitive[r]);
        shortest = square < shortest ? square : shortest;
    }
    for (a = 0; a < lattice->places; a++)
        for (b = a + 1; b < lattice->places; b++) {
            int32_t cell[3] = {0, 0, 0};
            double away[3];
            for (r = 0; r < lattice->dimension; r++) {
                double apart = floor(lattice->fraction[a][r] - lattice->fraction[b][r] + 0.5);
                if (fabs(apart) > 1e6)
                    return whorl_fail(host, WHORL_BAD_ARGUMENT,
                                      "basis sites are more than a million cells apart: bring them into one cell");
                cell[r] = (int32_t)apart;
            }
            whorli_lattice_place(lattice, lattice->basis[b], cell, away);
            for (r = 0; r < 3; r++)
                away[r] -= lattice->basis[a][r];
            if (whorli_lattice_dot(away, away) <= shortest * WHORL_LATTICE_TOLERANCE * WHORL_LATTICE_TOLERANCE) {
                whorl_text text = whorl_fail_begin(host, WHORL_BAD_ARGUMENT);
                host->reason.index = (uint64_t)b;
                whorl_text_add(&text, "basis sites ");
                whorl_text_add_signed(&text, a);
                whorl_text_add(&text, " and ");
                whorl_text_add_signed(&text, b);
                whorl_text_add(&text, " lie in one place (up to primitive vectors): give each place once");
                return WHORL_BAD_ARGUMENT;
            }
        }
    return WHORL_OK;
}

static whorl_status whorli_lattice_check_spanning(whorl_host *host, whorl_lattice *lattice,
                                                  const whorl_lattice_desc *desc)
{
    int32_t r, c;
    for (r = 0; r < 3; r++)
        for (c = 0; c < 3; c++) {
            int32_t component = desc->spanning[3 * r + c];
            if (r >= lattice->dimension || c >= lattice->dimension) {
                lattice->spanning[r][c] = r == c;
                continue;
            }
            if (component < -WHORL_LATTICE_MOST_STRIDE || component > WHORL_LATTICE_MOST_STRIDE)
                return whorl_fail(host, WHORL_BAD_ARGUMENT,
                                  "components of spanning vectors must lie within -4096 .. 4096");
            lattice->spanning[r][c] = component;
        }
    for (r = 0; r < lattice->dimension; r++) {
        if (desc->open[r] != 0 && desc->open[r] != 1)
            return whorl_fail(host, WHORL_BAD_ARGUMENT, "open must be 0 (periodic) or 1 for each spanning vector");
        lattice->open[r] = desc->open[r];
    }
    lattice->volume = whorli_lattice_cofactor(lattice->spanning, lattice->cofactor);
    if (lattice->volume == 0)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "the spanning vectors are not linearly independent");
    if (lattice->volume < 0) {
        lattice->volume = -lattice->volume;
        for (r = 0; r < 3; r++)
            for (c = 0; c < 3; c++)
                lattice->cofactor[r][c] = -lattice->cofactor[r][c];
    }
    if (lattice->volume > WHORL_LATTICE_MOST_SITES / lattice->places) {
        whorl_text text = whorl_fail_begin(host, WHORL_TOO_LARGE);
        whorl_text_add(&text, "the cluster would have ");
        whorl_text_add_signed(&text, lattice->volume * lattice->places);
        whorl_text_add(&text, " sites: take shorter spanning vectors, for at most 64");
        return WHORL_TOO_LARGE;
    }
    return WHORL_OK;
}

/* 1 if cell a comes before cell b. */
static int32_t whorli_lattice_before(const whorl_lattice *lattice, const int32_t a[3], const int32_t b[3])
{
    int64_t left[3], right[3], fractions[2][3];
    int32_t r;
    for (r = 0; r < 3; r++) {
        left[r] = a[r];
        right[r] = b[r];
    }
    whorli_lattice_fractions(lattice, left, fractions[0]);
    whorli_lattice_fractions(lattice, right, fractions[1]);
    for (r = 2; r >= 0; r--)
        if (fractions[0][r] != fractions[1][r])
            return fractions[0][r] < fractions[1][r];
    return 0;
}

/* All cells: from the origin by primitive vectors until nothing new comes, then in order. */
static void whorli_lattice_fill_cells(whorl_lattice *lattice)
{
    int32_t at, r, k;
    lattice->cells = 1;
    for (at = 0; at < lattice->cells; at++)
        for (r = 0; r < lattice->dimension; r++) {
            int64_t step[3];
            int32_t inside[3], winding[3];
            for (k = 0; k < 3; k++)
                step[k] = lattice->cell[at][k] + (k == r);
            whorli_lattice_wrap(lattice, step, inside, winding);
            if (whorli_lattice_cell_index(lattice, inside) < 0)
                memcpy(lattice->cell[lattice->cells++], inside, sizeof inside);
        }
    for (at = 1; at < lattice->cells; at++) {
        int32_t held[3];
        memcpy(held, lattice->cell[at], sizeof held);
        for (k = at; k > 0 && whorli_lattice_before(lattice, held, lattice->cell[k - 1]); k--)
            memcpy(lattice->cell[k], lattice->cell[k - 1], sizeof held);
        memcpy(lattice->cell[k], held, sizeof held);
    }
    lattice->sites = lattice->cells * lattice->places;
}

static whorl_status whorli_lattice_check(whorl_host *host, const whorl_lattice_desc *desc, whorl_lattice *plan)
{
    whorl_status status = WHORL_OK;
    memset(plan, 0, sizeof *plan);
    if (desc->kind == WHORL_LATTICE_CELL) {
        status = whorli_lattice_users(host, plan, desc);
    } else if (whorli_lattice_named_dimension(desc->kind) != 0) {
        if (!whorl_is_finite(desc->length) || desc->length < 0.0)
            return whorl_fail(host, WHORL_BAD_ARGUMENT,
                              "length must be a positive nearest-neighbour distance, or 0 for 1");
        whorli_lattice_named(plan, desc->kind, desc->length == 0.0 ? 1.0 : desc->length);
    } else {
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "kind is none of the WHORL_LATTICE_ constants");
    }
    if (status == WHORL_OK)
        status = whorli_lattice_check_spanning(host, plan, desc);
    if (status == WHORL_OK)
        status = whorli_lattice_measure(host, plan);
    if (status == WHORL_OK)
        status = whorli_lattice_check_basis(host, plan);
    if (status == WHORL_OK)
        whorli_lattice_fill_cells(plan);
    return status;
}

uint64_t whorl_lattice_bytes(void)
{
    whorl_layout layout = {NULL, 0};
    (void)whorl_layout_carve(&layout, 1, sizeof(whorl_lattice));
    return whorl_block_bytes(layout.bytes);
}

whorl_status whorl_lattice_make(whorl_host *host, const whorl_lattice_desc *desc, whorl_lattice **lattice)
{
    whorl_lattice plan;
    whorl_layout layout = {NULL, 0};
    whorl_status status;
    *lattice = NULL;
    status = whorli_lattice_check(host, desc, &plan);
    if (status != WHORL_OK)
        return status;
    (void)whorl_layout_carve(&layout, 1, sizeof plan);
    status = whorl_layout_take(host, &layout, &plan.block);
    if (status != WHORL_OK)
        return status;
    *lattice = (whorl_lattice *)whorl_layout_carve(&layout, 1, sizeof plan);
    **lattice = plan;
    return WHORL_OK;
}

void whorl_lattice_free(whorl_host *host, whorl_lattice *lattice)
{
    whorl_block block;
    if (lattice == NULL)
        return;
    block = lattice->block; /* the struct lies in the block that is given back */
    whorl_block_give(host, &block);
}

/* ---- >>sites ----------------------------------------------------------------------------------------------------- */

int32_t whorl_lattice_sites(const whorl_lattice *lattice)
{
    return lattice->sites;
}

int32_t whorl_lattice_cells(const whorl_lattice *lattice)
{
    return lattice->cells;
}

int32_t whorl_lattice_dimension(const whorl_lattice *lattice)
{
    return lattice->dimension;
}

void whorl_lattice_position(const whorl_lattice *lattice, int32_t site, double position[3])
{
    if (site < 0 || site >= lattice->sites)
        whorli_lattice_set(position, 0.0, 0.0, 0.0);
    else
        whorli_lattice_place(lattice, lattice->basis[site % lattice->places], lattice->cell[site / lattice->places],
                             position);
}

int32_t whorl_lattice_cell(const whorl_lattice *lattice, int32_t site, int32_t cell[3])
{
    cell[0] = cell[1] = cell[2] = 0;
    if (site < 0 || site >= lattice->sites)
        return -1;
    memcpy(cell, lattice->cell[site / lattice->places], 3 * sizeof cell[0]);
    return site % lattice->places;
}

int32_t whorl_lattice_site(const whorl_lattice *lattice, const int32_t cell[3], int32_t place, int32_t winding[3])
{
    int64_t wide[3] = {0, 0, 0};
    int32_t inside[3], turns[3], r;
    if (place < 0 || place >= lattice->places)
        return -1;
    for (r = 0; r < lattice->dimension; r++)
        wide[r] = cell[r];
    whorli_lattice_wrap(lattice, wide, inside, turns);
    if (winding != NULL)
        memcpy(winding, turns, sizeof turns);
    return whorli_lattice_cell_index(lattice, inside) * lattice->places + place;
}

void whorl_lattice_spanning(const whorl_lattice *lattice, int32_t r, double vector[3])
{
    double origin[3] = {0.0, 0.0, 0.0};
    int32_t cell[3], c;
    whorli_lattice_set(vector, 0.0, 0.0, 0.0);
    if (r < 0 || r >= lattice->dimension)
        return;
    for (c = 0; c < 3; c++)
        cell[c] = (int32_t)lattice->spanning[r][c];
    whorli_lattice_place(lattice, origin, cell, vector);
}

/* ---- >>bonds ----------------------------------------------------------------------------------------------------- */

/*
 * A walk over all vectors of the infinite lattice from place a to place b no longer than a radius: cells from high to
 * low within bounds. A vector v has |fraction_r| <= |v| |reciprocal vector r|, and that length squared is the diagonal
 * element of the inverse Gram matrix.
 */
typedef struct whorli_lattice_walk {
    int32_t a, b;
    int32_t low[3], high[3], cell[3];
    int32_t done;
} whorli_lattice_walk;

static void whorli_lattice_walk_begin(const whorl_lattice *lattice, int32_t a, int32_t b, double radius,
                                      whorli_lattice_walk *walk)
{
    int32_t r;
    memset(walk, 0, sizeof *walk);
    walk->a = a;
    walk->b = b;
    for (r = 0; r < lattice->dimension; r++) {
        double reach = radius * sqrt(lattice->inverse_gram[r][r]) + 1e-3;
        double from = lattice->fraction[a][r] - lattice->fraction[b][r];
        walk->low[r] = (int32_t)floor(from - reach);
        walk->high[r] = (int32_t)floor(from + reach) + 1;
        walk->cell[r] = walk->high[r];
    }
}

static void whorli_lattice_walk_next(const whorl_lattice *lattice, whorli_lattice_walk *walk)
{
    int32_t r;
    for (r = lattice->dimension - 1; r >= 0; r--) {
        if (--walk->cell[r] >= walk->low[r])
            return;
        walk->cell[r] = walk->high[r];
    }
    walk->done = 1;
}

static void whorli_lattice_walk_vector(const whorl_lattice *lattice, const whorli_lattice_walk *walk, double vector[3])
{
    int32_t c;
    whorli_lattice_place(lattice, lattice->basis[walk->b], walk->cell, vector);
    for (c = 0; c < 3; c++)
        vector[c] -= lattice->basis[walk->a][c];
}

/* Of two opposite vectors between equal places, the one whose last nonzero coordinate is positive. */
static int32_t whorli_lattice_walk_forward(const whorli_lattice_walk *walk)
{
    int32_t r;
    if (walk->a != walk->b)
        return 1;
    for (r = 2; r >= 0; r--)
        if (walk->cell[r] != 0)
            return walk->cell[r] > 0;
    return 0;
}

/* The smallest squared distance above `above`; a multiple of the first primitive vector bounds it. */
static double whorli_lattice_next_square(const whorl_lattice *lattice, double above)
{
    double length = sqrt(whorli_lattice_dot(lattice->primitive[0], lattice->primitive[0]));
    double radius = (floor(sqrt(above) / length) + 2.0) * length, best = radius * radius;
    int32_t a, b;
    for (a = 0; a < lattice->places; a++)
        for (b = a; b < lattice->places; b++) {
            whorli_lattice_walk walk;
            for (whorli_lattice_walk_begin(lattice, a, b, radius, &walk); !walk.done;
                 whorli_lattice_walk_next(lattice, &walk)) {
                double vector[3], square;
                whorli_lattice_walk_vector(lattice, &walk, vector);
                square = whorli_lattice_dot(vector, vector);
                if (whorli_lattice_walk_forward(&walk) && square > above && square < best)
                    best = square;
            }
        }
    return best;
}

whorl_status whorl_lattice_distance(whorl_host *host, const whorl_lattice *lattice, int32_t shell, double *distance)
{
    const double wider = 1.0 + 2.0 * WHORL_LATTICE_TOLERANCE;
    double square = 0.0;
    int32_t k;
    if (shell < 1 || shell > WHORL_LATTICE_MOST_SHELL)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "neighbour shells are counted from 1, nearest, to 100");
    for (k = 0; k < shell; k++) {
        whorl_status status;
        whorl_stage(host, "looking for neighbour shells", (uint64_t)k, (uint64_t)shell);
        status = whorl_poll(host);
        if (status != WHORL_OK)
            return status;
        square = whorli_lattice_next_square(lattice, square * wider);
    }
    *distance = sqrt(square);
    return WHORL_OK;
}

/* Pairs of sites that have a bond already, for merging: bit j of seen[i]; and where that bond stands. */
typedef struct whorli_lattice_sink {
    whorl_bond *bonds; /* NULL: only count */
    uint64_t count;
    int32_t merge;
    uint64_t seen[WHORL_LATTICE_MOST_SITES];
} whorli_lattice_sink;

static void whorli_lattice_sink_add(whorli_lattice_sink *sink, const whorl_bond *bond)
{
    if (sink->merge) {
        int32_t low = bond->i < bond->j ? bond->i : bond->j, high = bond->i + bond->j - low;
        if ((sink->seen[low] >> high & 1) != 0) {
            uint64_t k;
            for (k = 0; sink->bonds != NULL && k < sink->count; k++)
                if ((sink->bonds[k].i == low && sink->bonds[k].j == high) ||
                    (sink->bonds[k].i == high && sink->bonds[k].j == low))
                    sink->bonds[k].repeats++;
            return;
        }
        sink->seen[low] |= UINT64_C(1) << high;
    }
    if (sink->bonds != NULL)
        sink->bonds[sink->count] = *bond;
    sink->count++;
}

/* One bond type from every cell. */
static void whorli_lattice_sink_type(const whorl_lattice *lattice, const whorli_lattice_walk *walk, whorl_bond *bond,
                                     whorli_lattice_sink *sink)
{
    int32_t at, r;
    for (at = 0; at < lattice->cells; at++) {
        int64_t end[3];
        int32_t inside[3], crosses = 0;
        for (r = 0; r < 3; r++)
            end[r] = (int64_t)lattice->cell[at][r] + walk->cell[r];
        whorli_lattice_wrap(lattice, end, inside, bond->winding);
        for (r = 0; r < 3; r++)
            crosses |= lattice->open[r] && bond->winding[r] != 0;
        if (crosses)
            continue;
        bond->i = at * lattice->places + walk->a;
        bond->j = whorli_lattice_cell_index(lattice, inside) * lattice->places + walk->b;
        whorli_lattice_sink_add(sink, bond);
    }
}

static void whorli_lattice_sink_shell(const whorl_lattice *lattice, int32_t shell, double distance,
                                      whorli_lattice_sink *sink)
{
    const double slack = 2.0 * WHORL_LATTICE_TOLERANCE * distance * distance;
    whorl_bond bond;
    int32_t a, b;
    memset(&bond, 0, sizeof bond);
    bond.shell = shell;
    bond.repeats = 1;
    for (a = 0; a < lattice->places; a++)
        for (b = a; b < lattice->places; b++) {
            whorli_lattice_walk walk;
            for (whorli_lattice_walk_begin(lattice, a, b, distance * (1.0 + WHORL_LATTICE_TOLERANCE), &walk);
                 !walk.done; whorli_lattice_walk_next(lattice, &walk)) {
                double square;
                whorli_lattice_walk_vector(lattice, &walk, bond.displacement);
                square = whorli_lattice_dot(bond.displacement, bond.displacement);
                if (whorli_lattice_walk_forward(&walk) && fabs(square - distance * distance) <= slack) {
                    whorli_lattice_sink_type(lattice, &walk, &bond, sink);
                    bond.type++;
                }
            }
        }
}

whorl_status whorl_lattice_bond_count(whorl_host *host, const whorl_lattice *lattice, int32_t shell, int32_t merge,
                                      uint64_t *count)
{
    whorli_lattice_sink sink;
    double distance;
    whorl_status status = whorl_lattice_distance(host, lattice, shell, &distance);
    if (status != WHORL_OK)
        return status;
    memset(&sink, 0, sizeof sink);
    sink.merge = merge != 0;
    whorli_lattice_sink_shell(lattice, shell, distance, &sink);
    *count = sink.count;
    return WHORL_OK;
}

whorl_status whorl_lattice_bonds(whorl_host *host, const whorl_lattice *lattice, int32_t shell, int32_t merge,
                                 whorl_bond *bonds, uint64_t room, uint64_t *count)
{
    whorli_lattice_sink sink;
    double distance;
    whorl_status status = whorl_lattice_distance(host, lattice, shell, &distance);
    if (status != WHORL_OK)
        return status;
    memset(&sink, 0, sizeof sink);
    sink.merge = merge != 0;
    whorli_lattice_sink_shell(lattice, shell, distance, &sink);
    if (sink.count > room) {
        whorl_text text = whorl_fail_begin(host, WHORL_NO_ROOM);
        whorl_text_add(&text, "the shell has ");
        whorl_text_add_unsigned(&text, sink.count);
        whorl_text_add(&text, " bonds: give an array of so many");
        return WHORL_NO_ROOM;
    }
    memset(&sink, 0, sizeof sink);
    sink.merge = merge != 0;
    sink.bonds = bonds;
    if (room > 0)
        whorli_lattice_sink_shell(lattice, shell, distance, &sink);
    *count = sink.count;
    return WHORL_OK;
}

/* ---- >>permutations ---------------------------------------------------------------------------------------------- */

whorl_status whorl_lattice_translation(whorl_host *host, const whorl_lattice *lattice, int32_t r, int32_t *permutation)
{
    int64_t step[3] = {0, 0, 0}, fraction[3];
    int32_t site, k;
    if (r < 0 || r >= lattice->dimension)
        return whorl_fail(host, WHORL_BAD_ARGUMENT, "primitive vectors are numbered from 0 to the dimension less one");
    step[r] = 1;
    whorli_lattice_fractions(lattice, step, fraction);
    for (k = 0; k < lattice->dimension; k++)
        if (lattice->open[k] && fraction[k] != 0)
            return whorl_fail(host, WHORL_BAD_ARGUMENT,
                              "this translation leads across an open edge: only periodic directions have translations");
    for (site = 0; site < lattice->sites; site++) {
        int32_t cell[3], place = whorl_lattice_cell(lattice, site, cell);
        cell[r]++;
        permutation[site] = whorl_lattice_site(lattice, cell, place, NULL);
    }
    return WHORL_OK;
}

/* A motion of the infinite lattice with the place-0 site of cell 0 staying in cell 0. */
typedef struct whorli_lattice_motion {
    int32_t linear[3][3];
    int32_t image[WHORL_LATTICE_MOST_SITES];     /* place a goes to place image[a], ... */
    int32_t offset[WHORL_LATTICE_MOST_SITES][3]; /* ... this many cells on */
    double vector[WHORL_LATTICE_MOST_SITES][3];  /* from the image of place 0 to that of place a */
} whorli_lattice_motion;

typedef struct whorli_lattice_found {
    uint8_t to[WHORL_LATTICE_MOST_SITES];
    whorl_lattice_move move;
} whorli_lattice_found;

/* Where motions go: counted, and where there is room kept in ascending order, none twice. */
typedef struct whorli_lattice_moves {
    whorli_lattice_found *found; /* NULL: only count */
    uint32_t *order;
    uint64_t count, tried;
} whorli_lattice_moves;

static void whorli_lattice_keep(whorli_lattice_moves *moves, const whorli_lattice_found *found, int32_t sites)
{
    uint64_t from = 0, to = moves->count, k;
    moves->tried++;
    if (moves->found == NULL)
        return;
    while (from < to) {
        uint64_t middle = from + (to - from) / 2;
        int order = memcmp(moves->found[moves->order[middle]].to, found->to, (size_t)sites);
        if (order == 0)
            return;
        if (order < 0)
            from = middle + 1;
        else
            to = middle;
    }
    for (k = moves->count; k > from; k--)
        moves->order[k] = moves->order[k - 1];
    moves->order[from] = (uint32_t)moves->count;
    moves->found[moves->count++] = *found;
}

/* The motion followed by each translation: which of them map the cluster to itself, without crossing open edges? */
static void whorli_lattice_try(const whorl_lattice *lattice, const whorli_lattice_motion *motion,
                               whorli_lattice_moves *moves)
{
    int32_t shift, site, r, c;
    for (shift = 0; shift < lattice->cells; shift++) {
        whorli_lattice_found found;
        int32_t good = 1;
        memset(&found, 0, sizeof found);
        for (site = 0; site < lattice->sites && good; site++) {
            const int32_t *cell = lattice->cell[site / lattice->places];
            int32_t place = site % lattice->places, inside[3], winding[3];
            int64_t end[3];
            for (c = 0; c < 3; c++) {
                end[c] = (int64_t)motion->offset[place][c] + lattice->cell[shift][c];
                for (r = 0; r < 3; r++)
                    end[c] += (int64_t)cell[r] * motion->linear[r][c];
            }
            whorli_lattice_wrap(lattice, end, inside, winding);
            for (r = 0; r < 3; r++)
                good &= !(lattice->open[r] && winding[r] != 0);
            found.to[site] = (uint8_t)(whorli_lattice_cell_index(lattice, inside) * lattice->places +
                                       motion->image[place]);
        }
        if (!good)
            continue;
        memcpy(found.move.linear, motion->linear, sizeof found.move.linear);
        memcpy(found.move.shift, lattice->cell[shift], sizeof found.move.shift);
        whorli_lattice_keep(moves, &found, lattice->sites);
    }
}

/* 1 if place a may go to place b: a whole number of cells on, and all inner products with earlier places as before. */
static int32_t whorli_lattice_fits(const whorl_lattice *lattice, whorli_lattice_motion *motion, int32_t a, int32_t b)
{
    const double slack = 4.0 * WHORL_LATTICE_TOLERANCE;
    int32_t origin = motion->image[0], r, s, c;
    double before[3], scale;
    motion->image[a] = b;
    for (r = 0; r < lattice->dimension; r++) {
        double cells = lattice->fraction[origin][r] - lattice->fraction[b][r];
        for (s = 0; s < lattice->dimension; s++)
            cells += (lattice->fraction[a][s] - lattice->fraction[0][s]) * (double)motion->linear[s][r];
        motion->offset[a][r] = (int32_t)floor(cells + 0.5);
        if (fabs(cells - floor(cells + 0.5)) > slack)
            return 0;
    }
    whorli_lattice_place(lattice, lattice->basis[b], motion->offset[a], motion->vector[a]);
    for (c = 0; c < 3; c++) {
        motion->vector[a][c] -= lattice->basis[origin][c];
        before[c] = lattice->basis[a][c] - lattice->basis[0][c];
    }
    scale = whorli_lattice_dot(lattice->primitive[0], lattice->primitive[0]) + whorli_lattice_dot(before, before);
    for (s = 0; s <= a; s++) {
        double other[3];
        for (c = 0; c < 3; c++)
            other[c] = lattice->basis[s][c] - lattice->basis[0][c];
        if (s < a && motion->image[s] == b)
            return 0;
        if (fabs(whorli_lattice_dot(motion->vector[a], motion->vector[s]) - whorli_lattice_dot(before, other)) >
            slack * (scale + whorli_lattice_dot(other, other)))
            return 0;
    }
    return 1;
}

/* All ways to send the places of a cell to places, for a given linear part: backtracking without recursion. */
static void whorli_lattice_try_linear(const whorl_lattice *lattice, whorli_lattice_motion *motion,
                                      whorli_lattice_moves *moves)
{
    int32_t choice[WHORL_LATTICE_MOST_SITES + 1], depth = 0;
    choice[0] = 0;
    memset(motion->offset, 0, sizeof motion->offset);
    while (depth >= 0) {
        if (depth == lattice->places) {
            whorli_lattice_try(lattice, motion, moves);
            depth--;
        } else if (choice[depth] == lattice->places) {
            depth--;
        } else {
            int32_t place = choice[depth]++;
            if (depth == 0)
                motion->image[0] = place;
            if (whorli_lattice_fits(lattice, motion, depth, place))
                choice[++depth] = 0;
        }
    }
}

/* 1 if the linear part maps the periodic spanning vectors to combinations of themselves. */
static int32_t whorli_lattice_keeps_spanning(const whorl_lattice *lattice, int32_t linear[3][3])
{
    int32_t k, r, c;
    for (k = 0; k < lattice->dimension; k++) {
        int64_t image[3] = {0, 0, 0}, fraction[3];
        if (lattice->open[k])
            continue;
        for (c = 0; c < 3; c++)
            for (r = 0; r < 3; r++)
                image[c] += lattice->spanning[k][r] * linear[r][c];
        whorli_lattice_fractions(lattice, image, fraction);
        for (r = 0; r < 3; r++)
            if (fraction[r] % lattice->volume != 0 || (lattice->open[r] && fraction[r] != 0))
                return 0;
    }
    return 1;
}

/* 1 if row r of the linear part has the inner products of primitive vector r with those before it. */
static int32_t whorli_lattice_row_fits(const whorl_lattice *lattice, int32_t linear[3][3], int32_t r)
{
    double origin[3] = {0.0, 0.0, 0.0}, mine[3], other[3], want, sizes;
    int32_t s;
    whorli_lattice_place(lattice, origin, linear[r], mine);
    for (s = 0; s <= r; s++) {
        whorli_lattice_place(lattice, origin, linear[s], other);
        want = whorli_lattice_dot(lattice->primitive[r], lattice->primitive[s]);
        sizes = whorli_lattice_dot(lattice->primitive[r], lattice->primitive[r]) *
                whorli_lattice_dot(lattice->primitive[s], lattice->primitive[s]);
        if (fabs(whorli_lattice_dot(mine, other) - want) > 4.0 * WHORL_LATTICE_TOLERANCE * sqrt(sizes))
            return 0;
    }
    return 1;
}

/* Every linear part: images of the primitive vectors, row by row, that keep lengths and angles. */
static whorl_status whorli_lattice_try_all(whorl_host *host, const whorl_lattice *lattice, whorli_lattice_moves *moves)
{
    whorli_lattice_motion motion;
    whorli_lattice_walk walk[3];
    int32_t row = 0;
    moves->count = moves->tried = 0;
    memset(&motion, 0, sizeof motion);
    motion.linear[0][0] = motion.linear[1][1] = motion.linear[2][2] = 1;
    whorli_lattice_walk_begin(lattice, 0, 0, sqrt(whorli_lattice_dot(lattice->primitive[0], lattice->primitive[0])),
                              &walk[0]);
    while (row >= 0) {
        if (walk[row].done) {
            row--;
            continue;
        }
        memcpy(motion.linear[row], walk[row].cell, sizeof walk[row].cell);
        whorli_lattice_walk_next(lattice, &walk[row]);
        if (!whorli_lattice_row_fits(lattice, motion.linear, row))
            continue;
        if (row + 1 < lattice->dimension) {
            const double *next = lattice->primitive[++row];
            whorli_lattice_walk_begin(lattice, 0, 0, sqrt(whorli_lattice_dot(next, next)), &walk[row]);
        } else if (whorli_lattice_keeps_spanning(lattice, motion.linear)) {
            whorl_status status;
            whorl_stage(host, "looking for site permutations", moves->tried, 0);
            status = whorl_poll(host);
            if (status != WHORL_OK)
                return status;
            whorli_lattice_try_linear(lattice, &motion, moves);
        }
    }
    return WHORL_OK;
}

static void whorli_lattice_carve_moves(whorl_layout *layout, uint64_t tried, whorli_lattice_moves *moves)
{
    moves->found = (whorli_lattice_found *)whorl_layout_carve(layout, tried, sizeof *moves->found);
    moves->order = (uint32_t *)whorl_layout_carve(layout, tried, sizeof *moves->order);
}

/* Counts, takes the scratch, and collects; the caller gives the block back on success. */
static whorl_status whorli_lattice_collect(whorl_host *host, const whorl_lattice *lattice, whorli_lattice_moves *moves,
                                           whorl_block *block)
{
    whorl_layout layout = {NULL, 0};
    whorl_status status;
    uint64_t tried;
    memset(moves, 0, sizeof *moves);
    status = whorli_lattice_try_all(host, lattice, moves);
    if (status != WHORL_OK)
        return status;
    tried = moves->tried;
    whorli_lattice_carve_moves(&layout, tried, moves);
    status = whorl_layout_take(host, &layout, block);
    if (status != WHORL_OK)
        return status;
    whorli_lattice_carve_moves(&layout, tried, moves);
    status = whorli_lattice_try_all(host, lattice, moves);
    if (status != WHORL_OK)
        whorl_block_give(host, block);
    return status;
}

whorl_status whorl_lattice_symmetries_bytes(whorl_host *host, const whorl_lattice *lattice, uint64_t *bytes)
{
    whorl_layout layout = {NULL, 0};
    whorli_lattice_moves moves;
    whorl_status status;
    memset(&moves, 0, sizeof moves);
    status = whorli_lattice_try_all(host, lattice, &moves);
    if (status != WHORL_OK)
        return status;
    whorli_lattice_carve_moves(&layout, moves.tried, &moves);
    *bytes = whorl_block_bytes(layout.bytes);
    return WHORL_OK;
}

whorl_status whorl_lattice_symmetry_count(whorl_host *host, const whorl_lattice *lattice, uint64_t *count)
{
    whorli_lattice_moves moves;
    whorl_block block;
    whorl_status status = whorli_lattice_collect(host, lattice, &moves, &block);
    if (status != WHORL_OK)
        return status;
    *count = moves.count;
    whorl_block_give(host, &block);
    return WHORL_OK;
}

whorl_status whorl_lattice_symmetries(whorl_host *host, const whorl_lattice *lattice, int32_t *permutations,
                                      whorl_lattice_move *moves, uint64_t room, uint64_t *count)
{
    whorli_lattice_moves all;
    whorl_block block;
    uint64_t k;
    int32_t site;
    whorl_status status = whorli_lattice_collect(host, lattice, &all, &block);
    if (status != WHORL_OK)
        return status;
    if (all.count > room) {
        whorl_text text = whorl_fail_begin(host, WHORL_NO_ROOM);
        whorl_text_add(&text, "the cluster has ");
        whorl_text_add_unsigned(&text, all.count);
        whorl_text_add(&text, " site permutations: give room for so many");
        status = WHORL_NO_ROOM;
    } else {
        for (k = 0; k < all.count; k++) {
            const whorli_lattice_found *found = &all.found[all.order[k]];
            for (site = 0; site < lattice->sites; site++)
                permutations[(uint64_t)lattice->sites * k + (uint64_t)site] = found->to[site];
            if (moves != NULL)
                moves[k] = found->move;
        }
        *count = all.count;
    }
    whorl_block_give(host, &block);
    return status;
}

WHORLI_ARITHMETIC_END
WHORLI_C_END
#endif /* implementation */
