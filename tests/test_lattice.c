/* Clusters: the reference clusters as graphs, bonds and windings against positions, permutations, bad input. */
#include "check.h"
#include "reference.h"
#include "whorl_lattice.h"

enum { MOST = 64, ROOM = 4096, MOST_MOVES = 4096 };

static whorl_bond bonds[ROOM], others[ROOM];
static int32_t moves[MOST_MOVES * MOST];
static whorl_lattice_move motions[MOST_MOVES];

static whorl_lattice *make(whorl_host *host, const whorl_lattice_desc *desc)
{
    whorl_lattice *lattice = NULL;
    CHECK_STATUS(whorl_lattice_make(host, desc, &lattice), WHORL_OK, host);
    return lattice;
}

static whorl_lattice_desc plane(whorl_lattice_kind kind, int32_t x0, int32_t y0, int32_t x1, int32_t y1)
{
    whorl_lattice_desc desc = whorl_lattice_default();
    desc.kind = kind;
    desc.spanning[0] = x0;
    desc.spanning[1] = y0;
    desc.spanning[3] = x1;
    desc.spanning[4] = y1;
    return desc;
}

static uint64_t bonds_of(whorl_host *host, const whorl_lattice *lattice, int32_t shell, int32_t merge)
{
    uint64_t count = 0, counted = 1;
    CHECK_STATUS(whorl_lattice_bonds(host, lattice, shell, merge, bonds, ROOM, &count), WHORL_OK, host);
    CHECK_STATUS(whorl_lattice_bond_count(host, lattice, shell, merge, &counted), WHORL_OK, host);
    CHECK(count == counted);
    return count;
}

static uint64_t permutations_of(whorl_host *host, const whorl_lattice *lattice)
{
    uint64_t count = 0, counted = 1;
    CHECK_STATUS(whorl_lattice_symmetries(host, lattice, moves, motions, MOST_MOVES, &count), WHORL_OK, host);
    CHECK_STATUS(whorl_lattice_symmetry_count(host, lattice, &counted), WHORL_OK, host);
    CHECK(count == counted);
    return count;
}

/* How many bonds lead between two sites, in either direction. */
typedef struct graph {
    int32_t between[MOST][MOST];
} graph;

static void add_bond(graph *g, int32_t i, int32_t j)
{
    g->between[i][j]++;
    if (i != j)
        g->between[j][i]++;
}

static void graph_of(graph *g, const whorl_bond *from, uint64_t count)
{
    uint64_t k;
    memset(g, 0, sizeof *g);
    for (k = 0; k < count; k++)
        add_bond(g, from[k].i, from[k].j);
}

/* ---- the clusters of reference/00_clusters.tsv ------------------------------------------------------------------- */

/* Integer points of reference/README.md to cells and places here. */
static int32_t cell_of_point(whorl_lattice_kind kind, int32_t m, int32_t n, int32_t cell[3])
{
    int32_t place = 0;
    cell[0] = m;
    cell[1] = n;
    cell[2] = 0;
    if (kind == WHORL_LATTICE_KAGOME) { /* half units, (even, even) left out there and (odd, odd) here */
        m--;
        n--;
        place = (m & 1) != 0 ? 1 : (n & 1) != 0 ? 2 : 0;
        cell[0] = (m - (m & 1)) / 2;
        cell[1] = (n - (n & 1)) / 2;
    }
    if (kind == WHORL_LATTICE_HONEYCOMB) { /* primitive vectors (1, 1) and (-1, 2), places at (0, 0) and (0, 1) */
        n--;
        place = (m - n) % 3 != 0;
        n -= place;
        CHECK((m - n) % 3 == 0);
        cell[0] = (2 * m + n) / 3;
        cell[1] = (n - m) / 3;
    }
    return place;
}

static void cell_of_vector(whorl_lattice_kind kind, int32_t m, int32_t n, int32_t *x, int32_t *y)
{
    *x = kind == WHORL_LATTICE_KAGOME ? m / 2 : kind == WHORL_LATTICE_HONEYCOMB ? (2 * m + n) / 3 : m;
    *y = kind == WHORL_LATTICE_KAGOME ? n / 2 : kind == WHORL_LATTICE_HONEYCOMB ? (n - m) / 3 : n;
}

static void check_row(whorl_host *host, const char *id)
{
    reference_row row;
    whorl_lattice_desc desc;
    whorl_lattice *lattice;
    whorl_lattice_kind kind;
    int a, b, c, d, used, sites = 0, bond_count = 0, symmetries = 0, site_of[MOST], seen[MOST] = {0}, shell = 0;
    int32_t cell[3], x0, y0, x1, y1;
    const char *at;
    graph want, got;
    uint64_t count;
    if (!CHECK(reference_find("00_clusters.tsv", id, &row)))
        return;
    kind = whorl_lattice_kind_named(row.field[REFERENCE_MODEL], strlen(row.field[REFERENCE_MODEL]));
    CHECK(kind != 0);
    CHECK(sscanf(row.field[REFERENCE_GEOMETRY], "T1=(%d, %d), T2=(%d, %d)", &a, &b, &c, &d) == 4);
    cell_of_vector(kind, a, b, &x0, &y0);
    cell_of_vector(kind, c, d, &x1, &y1);
    desc = plane(kind, x0, y0, x1, y1);
    lattice = make(host, &desc);
    CHECK(sscanf(row.field[REFERENCE_NOTE], "N=%d, %d bonds, %d lattice", &sites, &bond_count, &symmetries) == 3);
    CHECK(whorl_lattice_sites(lattice) == sites);
    sites = 0;
    for (at = row.field[REFERENCE_VALUE]; sscanf(at, " (%d,%d)%n", &a, &b, &used) == 2; at += used) {
        int32_t place = cell_of_point(kind, a, b, cell);
        site_of[sites] = whorl_lattice_site(lattice, cell, place, NULL);
        CHECK(site_of[sites] >= 0 && site_of[sites] < whorl_lattice_sites(lattice) && seen[site_of[sites]]++ == 0);
        sites++;
    }
    CHECK(sites == whorl_lattice_sites(lattice));
    while (sscanf(at, " |%n", &used) == 0 && *at != '\0') {
        memset(&want, 0, sizeof want);
        at = strchr(at, '|') + 1;
        for (; sscanf(at, " %d-%d%n", &a, &b, &used) == 2; at += used)
            add_bond(&want, site_of[a], site_of[b]);
        count = bonds_of(host, lattice, ++shell, 0);
        graph_of(&got, bonds, count);
        CHECK(memcmp(&want, &got, sizeof want) == 0);
        if (shell == 1)
            CHECK((int)count == bond_count);
    }
    CHECK(shell == (kind == WHORL_LATTICE_SQUARE ? 2 : 1));
    CHECK((int)permutations_of(host, lattice) == symmetries);
    whorl_lattice_free(host, lattice);
}

static void test_reference_clusters(void)
{
    static const char *const ids[13] = {"sq8",   "sq16",  "sq18",   "sq26",  "sq36", "tri12", "tri16",
                                        "tri21", "kag12", "kag18b", "kag21", "hon6", "hon18b"};
    whorl_host host = whorl_host_default();
    int k;
    for (k = 0; k < 13; k++)
        check_row(&host, ids[k]);
    CHECK(host.bytes_used == 0);
}

/*
 * Orders of groups, and dimensions of fully symmetric blocks at S^z = 0 by Burnside's lemma from the cycles of all
 * permutations (rows blk_ of 13_counting.tsv, closed form): a fixed configuration is constant on cycles;
 * followed by spin inversion it alternates along them.
 */
static void check_blocks(whorl_host *host, const char *name, whorl_lattice_desc desc)
{
    whorl_lattice *lattice = make(host, &desc);
    int32_t sites = whorl_lattice_sites(lattice), i, n;
    uint64_t count = permutations_of(host, lattice), k, fixed = 0, inverted = 0;
    char id[64];
    double value = -1.0, tolerance = -1.0;
    for (k = 0; k < count; k++) {
        uint64_t ways[MOST + 1] = {1}, alternating = 1, visited = 0;
        for (i = 0; i < sites; i++) {
            int32_t length = 0, at;
            for (at = i; (visited >> at & 1) == 0; at = moves[k * (uint64_t)sites + (uint64_t)at], length++)
                visited |= UINT64_C(1) << at;
            for (n = sites; length > 0 && n >= length; n--)
                ways[n] += ways[n - length];
            alternating *= length == 0 ? 1 : length % 2 == 0 ? 2 : 0;
        }
        fixed += ways[sites / 2];
        inverted += alternating;
    }
    snprintf(id, sizeof id, "blk_%s_g", name);
    CHECK(reference_value("13_counting.tsv", id, &value, &tolerance));
    CHECK_NEAR((double)count, value, tolerance, id);
    snprintf(id, sizeof id, "blk_%s_k0", name);
    CHECK(reference_value("13_counting.tsv", id, &value, &tolerance));
    CHECK(fixed % count == 0);
    CHECK_NEAR((double)(fixed / count), value, tolerance, id);
    snprintf(id, sizeof id, "blk_%s_inv", name);
    CHECK(reference_value("13_counting.tsv", id, &value, &tolerance));
    CHECK((fixed + inverted) % (2 * count) == 0);
    CHECK_NEAR((double)((fixed + inverted) / (2 * count)), value, tolerance, id);
    whorl_lattice_free(host, lattice);
}

static void test_reference_blocks(void)
{
    whorl_host host = whorl_host_default();
    check_blocks(&host, "square16", plane(WHORL_LATTICE_SQUARE, 4, 0, 0, 4));
    check_blocks(&host, "square18", plane(WHORL_LATTICE_SQUARE, 3, 3, 3, -3));
    check_blocks(&host, "square26", plane(WHORL_LATTICE_SQUARE, 5, 1, -1, 5));
    check_blocks(&host, "square36", plane(WHORL_LATTICE_SQUARE, 6, 0, 0, 6));
    check_blocks(&host, "tri12", plane(WHORL_LATTICE_TRIANGULAR, 2, 2, -2, 4));
    check_blocks(&host, "tri36", plane(WHORL_LATTICE_TRIANGULAR, 6, 0, 0, 6));
    check_blocks(&host, "kag36", plane(WHORL_LATTICE_KAGOME, 2, 2, -2, 4));
}

/* ---- every cluster: bonds against positions, permutations against bonds ------------------------------------------ */

static double distance_of(const double v[3])
{
    return sqrt(v[0] * v[0] + v[1] * v[1] + v[2] * v[2]);
}

static void check_bonds(whorl_host *host, const whorl_lattice *lattice, const whorl_lattice_desc *desc, int32_t shell)
{
    uint64_t count = bonds_of(host, lattice, shell, 0), k, merged, stood = 0;
    double length = -1.0, spanning[3][3];
    int32_t r, c, types = 0, bad = 0, open = 0, dimension = whorl_lattice_dimension(lattice);
    graph all, once;
    CHECK_STATUS(whorl_lattice_distance(host, lattice, shell, &length), WHORL_OK, host);
    for (r = 0; r < dimension; r++) {
        whorl_lattice_spanning(lattice, r, spanning[r]);
        open += desc->open[r];
    }
    for (k = 0; k < count; k++) {
        const whorl_bond *bond = &bonds[k];
        double from[3], to[3], off = 0.0;
        whorl_lattice_position(lattice, bond->i, from);
        whorl_lattice_position(lattice, bond->j, to);
        for (c = 0; c < 3; c++) {
            double gap = from[c] + bond->displacement[c] - to[c];
            for (r = 0; r < dimension; r++)
                gap -= bond->winding[r] * spanning[r][c];
            off += fabs(gap);
        }
        bad += !(off < 1e-10 * (1.0 + length)) || !(fabs(distance_of(bond->displacement) - length) < 1e-6 * length);
        bad += bond->shell != shell || bond->repeats != 1;
        bad += k > 0 && bond->type != bonds[k - 1].type && bond->type < bonds[k - 1].type;
        for (r = 0; r < 3; r++)
            bad += r < dimension ? desc->open[r] && bond->winding[r] != 0 : bond->winding[r] != 0;
        types = bond->type + 1 > types ? bond->type + 1 : types;
    }
    CHECK(bad == 0);
    if (open == 0)
        CHECK(count == (uint64_t)(types * whorl_lattice_cells(lattice)));
    graph_of(&all, bonds, count);
    merged = bonds_of(host, lattice, shell, 1);
    memset(&once, 0, sizeof once);
    for (k = 0; k < merged; k++) {
        stood += (uint64_t)bonds[k].repeats;
        once.between[bonds[k].i][bonds[k].j] += bonds[k].repeats;
        if (bonds[k].i != bonds[k].j)
            once.between[bonds[k].j][bonds[k].i] += bonds[k].repeats;
    }
    CHECK(stood == count && memcmp(&all, &once, sizeof all) == 0);
}

/* A group of permutations that map every shell to itself, in ascending order, with the translations among them. */
static void check_permutations(whorl_host *host, const whorl_lattice *lattice, uint64_t want)
{
    int32_t sites = whorl_lattice_sites(lattice), i, j, r, shell, translation[MOST];
    uint64_t count = permutations_of(host, lattice), k, bad = 0;
    size_t bytes = (size_t)sites * sizeof moves[0];
    if (want != 0 && !CHECK(count == want))
        printf("  %d permutations, expected %d\n", (int)count, (int)want);
    for (i = 0; i < sites; i++)
        bad += moves[i] != i;
    for (k = 0; k < count; k++) {
        uint64_t hit = 0;
        const int32_t *move = moves + k * (uint64_t)sites;
        for (i = 0; i < sites; i++)
            hit |= UINT64_C(1) << move[i];
        bad += hit != whorl_bits_low(sites);
        for (i = 0; k > 0 && i < sites && move[i] == move[i - sites]; i++)
            ;
        bad += k > 0 && (i == sites || move[i] < move[i - sites]);
    }
    CHECK(bad == 0);
    for (shell = 1; shell <= 3; shell++) {
        graph g;
        graph_of(&g, bonds, bonds_of(host, lattice, shell, 0));
        for (k = 0; k < count; k++) {
            const int32_t *move = moves + k * (uint64_t)sites;
            for (i = 0; i < sites; i++)
                for (j = 0; j < sites; j++)
                    bad += g.between[i][j] != g.between[move[i]][move[j]];
        }
    }
    CHECK(bad == 0);
    for (k = 0; k < count; k += 1 + count / 37) { /* closed: products are found by search in the ascending list */
        uint64_t other;
        for (other = 0; other < count; other += 1 + count / 41) {
            int32_t product[MOST];
            uint64_t from = 0, to = count;
            for (i = 0; i < sites; i++)
                product[i] = moves[other * (uint64_t)sites + (uint64_t)moves[k * (uint64_t)sites + (uint64_t)i]];
            while (to - from > 1) {
                uint64_t middle = (from + to) / 2;
                const int32_t *move = moves + middle * (uint64_t)sites;
                for (i = 0; i < sites && move[i] == product[i]; i++)
                    ;
                if (i == sites || move[i] < product[i])
                    from = middle;
                else
                    to = middle;
            }
            bad += memcmp(product, moves + from * (uint64_t)sites, bytes) != 0;
        }
    }
    CHECK(bad == 0);
    for (r = 0; r < whorl_lattice_dimension(lattice); r++)
        if (whorl_lattice_translation(host, lattice, r, translation) == WHORL_OK) {
            for (k = 0; k < count; k++)
                if (memcmp(translation, moves + k * (uint64_t)sites, bytes) == 0)
                    break;
            CHECK(k < count);
        }
}

static void check_cluster(whorl_host *host, const whorl_lattice_desc *desc, int32_t sites, uint64_t permutations)
{
    whorl_lattice *lattice = make(host, desc);
    int32_t shell, site, cell[3], winding[3], place;
    if (lattice == NULL)
        return;
    CHECK(whorl_lattice_sites(lattice) == sites);
    for (site = 0; site < sites; site++) {
        place = whorl_lattice_cell(lattice, site, cell);
        CHECK(whorl_lattice_site(lattice, cell, place, winding) == site);
        CHECK(winding[0] == 0 && winding[1] == 0 && winding[2] == 0);
    }
    for (shell = 1; shell <= 4; shell++)
        check_bonds(host, lattice, desc, shell);
    check_permutations(host, lattice, permutations);
    whorl_lattice_free(host, lattice);
}

static whorl_lattice_desc opened(whorl_lattice_desc desc, int32_t a, int32_t b, int32_t c)
{
    desc.open[0] = a;
    desc.open[1] = b;
    desc.open[2] = c;
    return desc;
}

/* Orders of the groups of boxes: translations times point operations that fit (common practice). */
static void test_clusters(void)
{
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc;
    int32_t n;
    for (n = 1; n <= 64; n++) {
        desc = whorl_lattice_box(WHORL_LATTICE_CHAIN, n, 1, 1);
        check_cluster(&host, &desc, n, n < 3 ? (uint64_t)n : (uint64_t)n * 2);
        desc = opened(desc, 1, 0, 0);
        check_cluster(&host, &desc, n, n == 1 ? 1 : 2);
    }
    desc = whorl_lattice_box(WHORL_LATTICE_LADDER, 7, 1, 1);
    check_cluster(&host, &desc, 14, 28);
    desc = opened(desc, 1, 0, 0);
    check_cluster(&host, &desc, 14, 4);
    desc = whorl_lattice_box(WHORL_LATTICE_SQUARE, 4, 6, 1);
    check_cluster(&host, &desc, 24, 24 * 4);
    desc = opened(desc, 1, 0, 0);
    check_cluster(&host, &desc, 24, 2 * 12);
    desc = opened(desc, 1, 1, 0);
    check_cluster(&host, &desc, 24, 4);
    desc = opened(whorl_lattice_box(WHORL_LATTICE_SQUARE, 5, 5, 1), 1, 1, 0);
    check_cluster(&host, &desc, 25, 8);
    desc = plane(WHORL_LATTICE_SQUARE, -3, 1, 1, 3); /* negative determinant */
    check_cluster(&host, &desc, 10, 40);
    desc = plane(WHORL_LATTICE_SQUARE, 10, 0, 3, 1); /* the same lattice of points, other vectors */
    check_cluster(&host, &desc, 10, 40);
    desc = plane(WHORL_LATTICE_SQUARE, 40, 1, -1, 0); /* one cell more would do: a ring of one in one direction */
    check_cluster(&host, &desc, 1, 1);
    desc = plane(WHORL_LATTICE_TRIANGULAR, 3, 3, -3, 6);
    check_cluster(&host, &desc, 27, 27 * 12);
    desc = opened(plane(WHORL_LATTICE_TRIANGULAR, 4, 0, 0, 4), 1, 1, 0);
    check_cluster(&host, &desc, 16, 4); /* a rhombus */
    desc = opened(plane(WHORL_LATTICE_TRIANGULAR, 6, 0, -1, 2), 0, 1, 0);
    check_cluster(&host, &desc, 12, 24); /* a zigzag tube */
    desc = plane(WHORL_LATTICE_HONEYCOMB, 2, 2, -2, 4);
    check_cluster(&host, &desc, 24, 12 * 12);
    desc = opened(plane(WHORL_LATTICE_HONEYCOMB, 3, 0, 0, 2), 1, 1, 0);
    check_cluster(&host, &desc, 12, 2);
    desc = plane(WHORL_LATTICE_KAGOME, 3, 0, 0, 3);
    check_cluster(&host, &desc, 27, 9 * 12);
    desc = whorl_lattice_box(WHORL_LATTICE_CUBIC, 3, 3, 3);
    check_cluster(&host, &desc, 27, 27 * 48);
    desc = opened(desc, 1, 1, 1);
    check_cluster(&host, &desc, 27, 48);
    desc = opened(desc, 1, 0, 1);
    check_cluster(&host, &desc, 27, 3 * 16);
    desc = whorl_lattice_box(WHORL_LATTICE_CUBIC, 4, 4, 4);
    check_cluster(&host, &desc, 64, 64 * 48);
    desc = whorl_lattice_box(WHORL_LATTICE_CUBIC, 2, 3, 4);
    check_cluster(&host, &desc, 24, 0);
    CHECK(host.bytes_used == 0);
}

/* Neighbours of a site by shell (textbook coordination numbers) on clusters large enough to hold them. */
static void test_coordination(void)
{
    static const struct { whorl_lattice_kind kind; int32_t sites, neighbours[4]; } rows[] = {
        {WHORL_LATTICE_CHAIN, 12, {2, 2, 2, 2}},        {WHORL_LATTICE_LADDER, 24, {3, 2, 2, 2}},
        {WHORL_LATTICE_SQUARE, 64, {4, 4, 4, 8}},       {WHORL_LATTICE_TRIANGULAR, 64, {6, 6, 6, 12}},
        {WHORL_LATTICE_HONEYCOMB, 54, {3, 6, 3, 6}},    {WHORL_LATTICE_KAGOME, 48, {4, 4, 6, 8}},
        {WHORL_LATTICE_CUBIC, 64, {6, 12, 8, 6}}};
    static const double squares[7][4] = {{1, 4, 9, 16}, {1, 2, 4, 5}, {1, 2, 4, 5}, {1, 3, 4, 7}, {1, 3, 4, 7},
                                         {1, 3, 4, 7},  {1, 2, 3, 4}};
    whorl_host host = whorl_host_default();
    size_t row;
    for (row = 0; row < sizeof rows / sizeof rows[0]; row++) {
        whorl_lattice_desc desc;
        whorl_lattice *lattice;
        int32_t shell, i;
        CHECK_STATUS(whorl_lattice_usual(&host, rows[row].kind, rows[row].sites, &desc), WHORL_OK, &host);
        desc.length = 1.5;
        lattice = make(&host, &desc);
        for (shell = 1; shell <= 4; shell++) {
            double distance = 0.0;
            uint64_t count = bonds_of(&host, lattice, shell, 0), k;
            int32_t degree[MOST] = {0};
            for (k = 0; k < count; k++) {
                degree[bonds[k].i]++;
                degree[bonds[k].j]++;
            }
            for (i = 0; i < rows[row].sites; i++)
                CHECK(degree[i] == rows[row].neighbours[shell - 1]);
            CHECK_STATUS(whorl_lattice_distance(&host, lattice, shell, &distance), WHORL_OK, &host);
            CHECK_NEAR(distance, 1.5 * sqrt(squares[row][shell - 1]), 1e-14, "distance of a shell");
        }
        whorl_lattice_free(&host, lattice);
    }
}

/* The table of bond types in the header: directions in degrees. */
static void test_types(void)
{
    static const struct { whorl_lattice_kind kind; int32_t types; double degrees[6]; } rows[] = {
        {WHORL_LATTICE_CHAIN, 1, {0}},
        {WHORL_LATTICE_LADDER, 3, {0, 90, 0}},
        {WHORL_LATTICE_SQUARE, 2, {0, 90}},
        {WHORL_LATTICE_TRIANGULAR, 3, {0, 60, 120}},
        {WHORL_LATTICE_HONEYCOMB, 3, {30, 270, 150}},
        {WHORL_LATTICE_KAGOME, 6, {0, 180, 60, 240, 300, 120}}};
    whorl_host host = whorl_host_default();
    size_t row;
    for (row = 0; row < sizeof rows / sizeof rows[0]; row++) {
        whorl_lattice_desc desc = whorl_lattice_box(rows[row].kind, 3, 3, 1);
        whorl_lattice *lattice = make(&host, &desc);
        uint64_t count = bonds_of(&host, lattice, 1, 0), k;
        CHECK(count == (uint64_t)(rows[row].types * whorl_lattice_cells(lattice)));
        for (k = 0; k < count; k++) {
            double angle = rows[row].degrees[bonds[k].type] * 3.14159265358979324 / 180.0;
            CHECK_NEAR(bonds[k].displacement[0], cos(angle), 1e-14, "x of a nearest-neighbour bond");
            CHECK_NEAR(bonds[k].displacement[1], sin(angle), 1e-14, "y of a nearest-neighbour bond");
        }
        whorl_lattice_free(&host, lattice);
    }
    { /* kagome: types 0, 2, 5 close a triangle within one cell, types 1, 3, 4 one across cells */
        whorl_lattice_desc desc = whorl_lattice_box(WHORL_LATTICE_KAGOME, 3, 3, 1);
        whorl_lattice *lattice = make(&host, &desc);
        uint64_t count = bonds_of(&host, lattice, 1, 0), k;
        for (k = 0; k < count; k++) {
            int up = bonds[k].type == 0 || bonds[k].type == 2 || bonds[k].type == 5;
            CHECK((bonds[k].i / 3 == bonds[k].j / 3) == up);
        }
        whorl_lattice_free(&host, lattice);
    }
}

/* ---- edges ------------------------------------------------------------------------------------------------------- */

static void test_small_rings(void)
{
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc = whorl_lattice_box(WHORL_LATTICE_CHAIN, 2, 1, 1);
    whorl_lattice *lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 2); /* a ring of two has two bonds (design: repeats kept) */
    CHECK(bonds[0].i == 0 && bonds[0].j == 1 && bonds[0].winding[0] == 0);
    CHECK(bonds[1].i == 1 && bonds[1].j == 0 && bonds[1].winding[0] == 1);
    CHECK(bonds_of(&host, lattice, 1, 1) == 1 && bonds[0].repeats == 2);
    CHECK(bonds_of(&host, lattice, 2, 0) == 2 && bonds[0].i == bonds[0].j && bonds[0].winding[0] == 1);
    whorl_lattice_free(&host, lattice);
    desc = opened(desc, 1, 0, 0);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 1 && bonds_of(&host, lattice, 2, 0) == 0);
    whorl_lattice_free(&host, lattice);
    desc = whorl_lattice_box(WHORL_LATTICE_CHAIN, 1, 1, 1);
    lattice = make(&host, &desc); /* a ring of one has a bond to its own image, said by i == j */
    CHECK(bonds_of(&host, lattice, 1, 0) == 1 && bonds[0].i == 0 && bonds[0].j == 0 && bonds[0].winding[0] == 1);
    whorl_lattice_free(&host, lattice);
    desc = whorl_lattice_box(WHORL_LATTICE_SQUARE, 2, 2, 1);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 8 && bonds_of(&host, lattice, 1, 1) == 4);
    CHECK(bonds_of(&host, lattice, 2, 0) == 8 && bonds_of(&host, lattice, 2, 1) == 2 && bonds[0].repeats == 4);
    whorl_lattice_free(&host, lattice);
}

static void test_edges(void)
{
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc = opened(whorl_lattice_box(WHORL_LATTICE_SQUARE, 5, 4, 1), 1, 1, 0);
    whorl_lattice *lattice = make(&host, &desc);
    uint64_t count, k;
    int32_t turns = 0, site;
    CHECK(bonds_of(&host, lattice, 1, 0) == 4 * 4 + 5 * 3 && bonds_of(&host, lattice, 2, 0) == 2 * 4 * 3);
    for (site = 0; site < 20; site++) { /* numbering: x fastest */
        double position[3];
        whorl_lattice_position(lattice, site, position);
        CHECK(position[0] == site % 5 && position[1] == (site - site % 5) / 5 && position[2] == 0.0);
    }
    whorl_lattice_free(&host, lattice);
    desc = opened(desc, 0, 1, 0);
    lattice = make(&host, &desc); /* a tube: around x, open along y */
    count = bonds_of(&host, lattice, 1, 0);
    CHECK(count == 5 * 4 + 5 * 3);
    for (k = 0; k < count; k++) {
        turns += bonds[k].winding[0];
        CHECK(bonds[k].winding[0] == (bonds[k].type == 0 && bonds[k].i % 5 == 4));
    }
    CHECK(turns == 4); /* one bond a row carries the twist */
    whorl_lattice_free(&host, lattice);
    desc = opened(whorl_lattice_box(WHORL_LATTICE_LADDER, 6, 1, 1), 1, 0, 0);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 2 * 5 + 6);
    whorl_lattice_free(&host, lattice);
    desc = opened(whorl_lattice_box(WHORL_LATTICE_CUBIC, 2, 3, 4), 1, 1, 1);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 1 * 12 + 2 * 8 + 3 * 6);
    whorl_lattice_free(&host, lattice);
}

/* Along any closed way of a periodic cluster the displacements add up to the windings times the spanning vectors. */
static void test_twists(void)
{
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc = plane(WHORL_LATTICE_TRIANGULAR, 4, 1, -1, 5);
    whorl_lattice *lattice = make(&host, &desc);
    uint64_t count = bonds_of(&host, lattice, 1, 0), k, step;
    double away[3] = {0.0, 0.0, 0.0}, t0[3], t1[3];
    int32_t at = 0, winding[2] = {0, 0}, closed = 0;
    whorl_lattice_spanning(lattice, 0, t0);
    whorl_lattice_spanning(lattice, 1, t1);
    for (step = 0; step < 20000; step++) {
        int32_t forth;
        k = whorl_random_bits(8, 1, step) % count;
        forth = bonds[k].i == at ? 1 : bonds[k].j == at ? -1 : 0;
        away[0] += forth * bonds[k].displacement[0];
        away[1] += forth * bonds[k].displacement[1];
        winding[0] += forth * bonds[k].winding[0];
        winding[1] += forth * bonds[k].winding[1];
        at = forth == 1 ? bonds[k].j : forth == -1 ? bonds[k].i : at;
        if (forth != 0 && at == 0) {
            closed++;
            CHECK_NEAR(away[0], winding[0] * t0[0] + winding[1] * t1[0], 1e-10, "x of a closed way");
            CHECK_NEAR(away[1], winding[0] * t0[1] + winding[1] * t1[1], 1e-10, "y of a closed way");
        }
    }
    CHECK(closed > 10);
    whorl_lattice_free(&host, lattice);
}

/* ---- the caller's unit cell -------------------------------------------------------------------------------------- */

static whorl_lattice_desc user_cell(int32_t dimension, const double *primitive, const double *basis, int32_t count)
{
    whorl_lattice_desc desc = whorl_lattice_default();
    desc.kind = WHORL_LATTICE_CELL;
    desc.dimension = dimension;
    memcpy(desc.primitive, primitive, 9 * sizeof(double));
    desc.basis = basis;
    desc.basis_count = count;
    return desc;
}

static void check_same_bonds(whorl_host *host, const whorl_lattice_desc *a, const whorl_lattice_desc *b)
{
    whorl_lattice *first = make(host, a), *second = make(host, b);
    int32_t shell;
    for (shell = 1; shell <= 5; shell++) {
        uint64_t count = bonds_of(host, first, shell, 0), k, bad = 0;
        memcpy(others, bonds, count * sizeof bonds[0]);
        CHECK(bonds_of(host, second, shell, 0) == count);
        for (k = 0; k < count; k++) {
            bad += bonds[k].i != others[k].i || bonds[k].j != others[k].j || bonds[k].type != others[k].type;
            bad += memcmp(bonds[k].winding, others[k].winding, sizeof bonds[k].winding) != 0;
            bad += !(fabs(bonds[k].displacement[0] - others[k].displacement[0]) < 1e-5);
        }
        CHECK(bad == 0);
    }
    CHECK(permutations_of(host, first) == permutations_of(host, second));
    whorl_lattice_free(host, first);
    whorl_lattice_free(host, second);
}

static void test_user_cell(void)
{
    static const double kagome_vectors[9] = {2, 0, 0, 1, 1.7320508, 0}; /* eight digits are enough */
    static const double kagome_basis[9] = {0, 0, 0, 1, 0, 0, 0.5, 0.8660254, 0};
    static const double skew[9] = {1, 0, 0, 3, 1, 0};
    static const double origin[3] = {0.3, -0.7, 2.0};
    static const double dimer_vector[9] = {0, 0, 2.5};
    static const double dimer_basis[6] = {0, 0, 0, 0, 0, 1};
    static const double tube_vector[9] = {1, 0, 0};
    static const double tube_basis[12] = {0, 1, 1, 0, -1, 1, 0, -1, -1, 0, 1, -1}; /* four legs, square cross-section */
    static const double twist_basis[12] = {0, 1, 1, 0.25, -1, 1, 0.5, -1, -1, 0.75, 1, -1}; /* a screw: no reflection */
    static const double bcc_vectors[9] = {-1, 1, 1, 1, -1, 1, 1, 1, -1};
    double hexagon[18];
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc, named;
    whorl_lattice *lattice;
    int32_t k;
    desc = user_cell(2, kagome_vectors, kagome_basis, 3);
    memcpy(desc.spanning, plane(0, 2, 1, -1, 3).spanning, sizeof desc.spanning);
    named = plane(WHORL_LATTICE_KAGOME, 2, 1, -1, 3);
    check_same_bonds(&host, &desc, &named);
    check_cluster(&host, &desc, 21, 42);
    desc = user_cell(2, skew, origin, 1); /* the square lattice by long vectors: (4, 0), (0, 4) are (4, 0), (-12, 4) */
    memcpy(desc.spanning, plane(0, 4, 0, -12, 4).spanning, sizeof desc.spanning);
    check_cluster(&host, &desc, 16, 128);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 32 && bonds_of(&host, lattice, 2, 0) == 32);
    whorl_lattice_free(&host, lattice);
    desc = user_cell(1, dimer_vector, dimer_basis, 2); /* dimers along z: shells at 1, 1.5, 2.5 */
    desc.spanning[0] = 6;
    check_cluster(&host, &desc, 12, 12);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 6 && bonds[0].displacement[2] == 1.0);
    CHECK(bonds_of(&host, lattice, 2, 0) == 6 && bonds[0].displacement[2] == -1.5);
    CHECK(bonds_of(&host, lattice, 3, 0) == 12 && bonds[0].displacement[2] == 2.5);
    whorl_lattice_free(&host, lattice);
    desc = user_cell(1, tube_vector, tube_basis, 4);
    desc.spanning[0] = 5;
    check_cluster(&host, &desc, 20, 5 * 2 * 8);
    desc.basis = twist_basis; /* screw by a quarter: translations, screws and half-turns across */
    check_cluster(&host, &desc, 20, 5 * 4 * 2);
    desc = user_cell(3, bcc_vectors, origin, 1); /* 8 and 6 neighbours */
    desc.spanning[0] = desc.spanning[4] = desc.spanning[8] = 3;
    check_cluster(&host, &desc, 27, 27 * 48);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 27 * 4 && bonds_of(&host, lattice, 2, 0) == 27 * 3);
    whorl_lattice_free(&host, lattice);
    for (k = 0; k < 6; k++) { /* a molecule: one open cell */
        hexagon[3 * k] = cos(k * 3.14159265358979324 / 3.0);
        hexagon[3 * k + 1] = sin(k * 3.14159265358979324 / 3.0);
        hexagon[3 * k + 2] = 0.0;
    }
    desc = opened(user_cell(1, dimer_vector, hexagon, 6), 1, 0, 0);
    check_cluster(&host, &desc, 6, 12);
    lattice = make(&host, &desc);
    CHECK(bonds_of(&host, lattice, 1, 0) == 6 && bonds_of(&host, lattice, 2, 0) == 6);
    whorl_lattice_free(&host, lattice);
    CHECK(host.bytes_used == 0);
}

/* ---- the catalogue ----------------------------------------------------------------------------------------------- */

/* Sizes in common use, with all rotations of the lattice: 4 or 6 times the cells, twice that with reflections. */
static void test_usual(void)
{
    static const int32_t square[] = {4, 8, 10, 16, 18, 20, 26, 32, 34, 36, 40, 50, 52, 58, 64};
    static const int32_t triangular[] = {3, 4, 7, 9, 12, 13, 16, 19, 21, 25, 27, 28, 31, 36, 39, 48, 64};
    static const int32_t kagome[] = {12, 21, 27, 36, 39, 48};
    static const int32_t honeycomb[] = {6, 8, 14, 18, 24, 26, 32, 38, 42, 54};
    static const int32_t cubic[] = {1, 2, 4, 8, 16, 27, 32, 54, 64};
    static const struct { whorl_lattice_kind kind; const int32_t *sizes; size_t count; int32_t fold; } rows[] = {
        {WHORL_LATTICE_SQUARE, square, sizeof square / 4, 4},
        {WHORL_LATTICE_TRIANGULAR, triangular, sizeof triangular / 4, 6},
        {WHORL_LATTICE_KAGOME, kagome, sizeof kagome / 4, 6},
        {WHORL_LATTICE_HONEYCOMB, honeycomb, sizeof honeycomb / 4, 6},
        {WHORL_LATTICE_CUBIC, cubic, sizeof cubic / 4, 48}};
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc;
    size_t row, k;
    int32_t kind, sites;
    for (row = 0; row < sizeof rows / sizeof rows[0]; row++)
        for (k = 0; k < rows[row].count; k++) {
            whorl_lattice *lattice;
            uint64_t count, order;
            CHECK_STATUS(whorl_lattice_usual(&host, rows[row].kind, rows[row].sizes[k], &desc), WHORL_OK, &host);
            lattice = make(&host, &desc);
            CHECK(whorl_lattice_sites(lattice) == rows[row].sizes[k]);
            if (rows[row].sizes[k] > 9) { /* smaller ones have motions that move no site differently */
                order = (uint64_t)(rows[row].fold * whorl_lattice_cells(lattice));
                count = permutations_of(&host, lattice);
                if (!CHECK(count == order || count == 2 * order || rows[row].kind == WHORL_LATTICE_CUBIC))
                    printf("  %s %d: %d permutations\n", whorl_lattice_kind_name(rows[row].kind),
                           (int)rows[row].sizes[k], (int)count);
            }
            whorl_lattice_free(&host, lattice);
        }
    for (kind = WHORL_LATTICE_CHAIN; kind <= WHORL_LATTICE_CUBIC; kind++)
        for (sites = -1; sites <= 70; sites++) {
            whorl_lattice_desc kept;
            whorl_lattice *lattice;
            memset(&desc, 7, sizeof desc);
            kept = desc;
            if (whorl_lattice_usual(&host, kind, sites, &desc) != WHORL_OK) {
                CHECK(memcmp(&kept, &desc, sizeof desc) == 0 && strstr(host.reason.text, "take") != NULL);
                continue;
            }
            lattice = make(&host, &desc);
            CHECK(whorl_lattice_sites(lattice) == sites);
            whorl_lattice_free(&host, lattice);
        }
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_SQUARE, 22, &desc), WHORL_BAD_ARGUMENT, &host);
    CHECK(strstr(host.reason.text, "take 20 or 25") != NULL);
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_KAGOME, 65, &desc), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_CELL, 8, &desc), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_KAGOME, 18, &desc), WHORL_OK, &host);
    CHECK(desc.spanning[0] == 3 && desc.spanning[4] == 2); /* kag18b of the reference */
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_KAGOME, 24, &desc), WHORL_OK, &host);
    check_cluster(&host, &desc, 24, 32);
    CHECK_STATUS(whorl_lattice_usual(&host, WHORL_LATTICE_SQUARE, 50, &desc), WHORL_OK, &host);
    CHECK(desc.spanning[0] == 5 && desc.spanning[1] == 5); /* with reflections, not (7, 1) */
    for (kind = 1; kind <= 8; kind++) {
        const char *name = whorl_lattice_kind_name(kind);
        CHECK(name[0] != '\0' && whorl_lattice_kind_named(name, strlen(name)) == kind);
    }
    CHECK(whorl_lattice_kind_name(0)[0] == '\0' && whorl_lattice_kind_name(9)[0] == '\0');
    CHECK(whorl_lattice_kind_named("squares", 7) == 0 && whorl_lattice_kind_named("squares", 6) == 3);
}

/* ---- bad input --------------------------------------------------------------------------------------------------- */

static void check_refused(const whorl_lattice_desc *desc, whorl_status want, const char *words)
{
    check_memory memory;
    whorl_host host = check_host(&memory);
    whorl_lattice *lattice = (whorl_lattice *)&memory;
    CHECK_STATUS(whorl_lattice_make(&host, desc, &lattice), want, &host);
    CHECK(lattice == NULL && memory.live_blocks == 0 && host.reason.status == want);
    if (!CHECK(strstr(host.reason.text, words) != NULL))
        printf("  reason is \"%s\", expected \"%s\"\n", host.reason.text, words);
}

static void test_bad_input(void)
{
    static const double vectors[9] = {1, 0, 0, 0.5, 1, 0, 2, 2, 0};
    double basis[6] = {0, 0, 0, 1.5, 1, 0}, huge = 1e300 * 1e300, numbers[65 * 3] = {0};
    whorl_host host = whorl_host_default();
    whorl_lattice_desc desc = whorl_lattice_default();
    whorl_lattice *lattice;
    uint64_t count = 5;
    double distance = 5.0;
    int32_t permutation[MOST] = {9};
    check_refused(&desc, WHORL_BAD_ARGUMENT, "kind");
    desc.kind = 9;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "kind");
    desc = plane(WHORL_LATTICE_SQUARE, 2, 4, 1, 2);
    check_refused(&desc, WHORL_BAD_ARGUMENT, "spanning vectors are not linearly independent");
    desc = plane(WHORL_LATTICE_SQUARE, 5000, 4, 1, 2);
    check_refused(&desc, WHORL_BAD_ARGUMENT, "4096");
    desc = plane(WHORL_LATTICE_SQUARE, 5, 0, 0, 13);
    check_refused(&desc, WHORL_TOO_LARGE, "65 sites");
    desc = whorl_lattice_box(WHORL_LATTICE_CUBIC, 4096, 4096, 4096);
    check_refused(&desc, WHORL_TOO_LARGE, "68719476736 sites");
    desc = opened(plane(WHORL_LATTICE_SQUARE, 3, 0, 0, 3), 0, 2, 0);
    check_refused(&desc, WHORL_BAD_ARGUMENT, "open");
    desc = opened(desc, 0, 0, 9); /* beyond the dimension: not read */
    desc.length = -1.0;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "length");
    desc.length = huge;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "length");
    desc.length = huge - huge;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "length");
    desc.length = 1e200;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "unit of length");
    desc.length = 1e-200;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "unit of length");
    desc = user_cell(0, vectors, basis, 2);
    check_refused(&desc, WHORL_BAD_ARGUMENT, "dimension 1, 2 or 3");
    desc.dimension = 3; /* three vectors in a plane */
    check_refused(&desc, WHORL_BAD_ARGUMENT, "primitive vectors are not linearly independent");
    desc.dimension = 2;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "basis sites 0 and 1");
    desc.primitive[4] = 0.005; /* (1, 0), (0.5, 0.005) */
    check_refused(&desc, WHORL_BAD_ARGUMENT, "similar length");
    desc.primitive[4] = 1.0;
    basis[3] = huge;
    check_refused(&desc, WHORL_NOT_FINITE, "basis site 1");
    basis[3] = 1e9;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "one cell");
    desc.primitive[4] = huge - huge;
    check_refused(&desc, WHORL_NOT_FINITE, "primitive");
    desc.basis = NULL;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "basis");
    desc.basis = numbers;
    desc.basis_count = 0;
    check_refused(&desc, WHORL_BAD_ARGUMENT, "basis");
    desc.basis_count = 65;
    check_refused(&desc, WHORL_TOO_LARGE, "64 sites");
    desc = opened(whorl_lattice_box(WHORL_LATTICE_SQUARE, 4, 4, 1), 1, 0, 0);
    lattice = make(&host, &desc);
    CHECK_STATUS(whorl_lattice_bonds(&host, lattice, 0, 0, bonds, ROOM, &count), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lattice_distance(&host, lattice, 101, &distance), WHORL_BAD_ARGUMENT, &host);
    bonds[0].i = -7;
    CHECK_STATUS(whorl_lattice_bonds(&host, lattice, 1, 0, bonds, 27, &count), WHORL_NO_ROOM, &host);
    CHECK(strstr(host.reason.text, "28 bonds") != NULL && bonds[0].i == -7 && count == 5 && distance == 5.0);
    CHECK_STATUS(whorl_lattice_bonds(&host, lattice, 1, 0, bonds, 28, &count), WHORL_OK, &host);
    CHECK_STATUS(whorl_lattice_translation(&host, lattice, 0, permutation), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lattice_translation(&host, lattice, 2, permutation), WHORL_BAD_ARGUMENT, &host);
    CHECK_STATUS(whorl_lattice_translation(&host, lattice, -1, permutation), WHORL_BAD_ARGUMENT, &host);
    CHECK(permutation[0] == 9);
    CHECK_STATUS(whorl_lattice_translation(&host, lattice, 1, permutation), WHORL_OK, &host);
    CHECK(permutation[0] == 4 && permutation[15] == 3);
    count = 5;
    moves[0] = -7;
    CHECK_STATUS(whorl_lattice_symmetries(&host, lattice, moves, NULL, 15, &count), WHORL_NO_ROOM, &host);
    CHECK(strstr(host.reason.text, "16 site permutations") != NULL && moves[0] == -7 && count == 5);
    CHECK_STATUS(whorl_lattice_symmetries(&host, lattice, moves, NULL, 16, &count), WHORL_OK, &host);
    CHECK(count == 16 && moves[0] == 0);
    whorl_lattice_free(&host, lattice);
    whorl_lattice_free(&host, NULL);
    CHECK(host.bytes_used == 0);
}

/* ---- memory and cancelling --------------------------------------------------------------------------------------- */

static whorl_status whole_work(whorl_host *host, void *argument)
{
    const whorl_lattice_desc *desc = (const whorl_lattice_desc *)argument;
    whorl_lattice *lattice = (whorl_lattice *)argument;
    uint64_t count = 99;
    whorl_status status = whorl_lattice_make(host, desc, &lattice);
    CHECK((lattice == NULL) == (status != WHORL_OK));
    if (status == WHORL_OK)
        status = whorl_lattice_bonds(host, lattice, 5, 0, bonds, ROOM, &count);
    CHECK(status == WHORL_OK || count == 99);
    if (status == WHORL_OK) {
        moves[0] = -7;
        count = 99;
        status = whorl_lattice_symmetries(host, lattice, moves, motions, MOST_MOVES, &count);
        CHECK(status == WHORL_OK || (moves[0] == -7 && count == 99));
    }
    whorl_lattice_free(host, lattice);
    return status;
}

static void test_memory(void)
{
    whorl_lattice_desc desc = plane(WHORL_LATTICE_KAGOME, 2, 2, -2, 4);
    whorl_host host = whorl_host_default();
    whorl_lattice *lattice = NULL;
    whorl_arena arena;
    uint64_t scratch = 0, bytes = whorl_lattice_bytes(), count = 0;
    char *memory, *room;
    check_every_allocation(whole_work, &desc, WHORL_OK);
    check_every_poll(whole_work, &desc, WHORL_OK);
    lattice = make(&host, &desc);
    CHECK_STATUS(whorl_lattice_symmetries_bytes(&host, lattice, &scratch), WHORL_OK, &host);
    whorl_lattice_free(&host, lattice);
    memory = (char *)malloc((size_t)(bytes + scratch) + 64);
    room = memory + ((64 - ((uintptr_t)memory & 63)) & 63);
    whorl_arena_make(&arena, room, bytes + scratch);
    whorl_arena_use(&arena, &host);
    lattice = make(&host, &desc);
    CHECK(arena.top == bytes && host.bytes_used == bytes);
    CHECK_STATUS(whorl_lattice_symmetries(&host, lattice, moves, NULL, MOST_MOVES, &count), WHORL_OK, &host);
    CHECK(count == 144 && arena.peak == bytes + scratch);
    whorl_lattice_free(&host, lattice);
    whorl_arena_make(&arena, room, bytes - 1);
    CHECK_STATUS(whorl_lattice_make(&host, &desc, &lattice), WHORL_NO_MEMORY, &host);
    whorl_arena_make(&arena, room, bytes + scratch - 1);
    lattice = make(&host, &desc);
    CHECK_STATUS(whorl_lattice_symmetry_count(&host, lattice, &count), WHORL_NO_MEMORY, &host);
    whorl_lattice_free(&host, lattice);
    free(memory);
}

int main(void)
{
    check_begin("test_lattice");
    check_run("reference clusters", test_reference_clusters);
    check_run("reference blocks", test_reference_blocks);
    check_run("clusters", test_clusters);
    check_run("coordination", test_coordination);
    check_run("types", test_types);
    check_run("small rings", test_small_rings);
    check_run("edges", test_edges);
    check_run("twists", test_twists);
    check_run("user cell", test_user_cell);
    check_run("usual", test_usual);
    check_run("bad input", test_bad_input);
    check_run("memory", test_memory);
    return check_end();
}
