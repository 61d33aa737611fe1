/* Bases: both directions against brute force, published counts, traces, bad input, memory and cancelling. */
#include "check.h"
#include "reference.h"
#include "whorl_space.h"

/* ---- the judge: membership by the definition --------------------------------------------------------------------- */

static int32_t count_down(uint64_t state, uint64_t mask)
{
    int32_t bit, down = 0;
    for (bit = 0; bit < 64; bit++)
        down += (mask >> bit & 1) != 0 && (state >> bit & 1) != 0;
    return down;
}

static uint64_t all_sites(int32_t sites)
{
    return sites == 64 ? UINT64_MAX : (UINT64_C(1) << sites) - 1;
}

static int is_member(const whorl_space_desc *desc, uint64_t state)
{
    uint64_t all = all_sites(desc->sites), k;
    int32_t n;
    if ((state & ~all) != 0)
        return 0;
    switch (desc->kind) {
    case WHORL_SPACE_DOWN:
        for (n = 0; n < desc->number_count; n++)
            if (count_down(state, desc->numbers[n].mask == 0 ? all : desc->numbers[n].mask) != desc->numbers[n].down)
                return 0;
        return 1;
    case WHORL_SPACE_PARITY:
        return count_down(state, desc->parity_mask == 0 ? all : desc->parity_mask) % 2 == desc->parity;
    case WHORL_SPACE_BLOCKADE:
        for (k = 0; k < desc->pair_count; k++)
            if ((state >> desc->pairs[k].i & 1) != 0 && (state >> desc->pairs[k].j & 1) != 0)
                return 0;
        return 1;
    case WHORL_SPACE_LIST:
        for (k = 0; k < desc->state_count; k++)
            if (desc->states[k] == state)
                return 1;
        return 0;
    default: return 1;
    }
}

static uint64_t random_below(uint64_t *counter, uint64_t bound)
{
    return whorl_random_bits(20250, 7, (*counter)++) % bound;
}

static whorl_space *make(whorl_host *host, const whorl_space_desc *desc)
{
    whorl_space *space = NULL;
    CHECK_STATUS(whorl_space_make(host, desc, &space), WHORL_OK, host);
    return space;
}

/* All 2^N words against the definition: order, both directions, walks, traces of some strings. */
static void check_exhaustively(whorl_host *host, const whorl_space_desc *desc)
{
    static char members[1 << 14];
    whorl_space *space = make(host, desc);
    uint64_t words = UINT64_C(1) << desc->sites, word, index = 0, last = 0, z, bad = 0;
    if (space == NULL)
        return;
    for (word = 0; word < words; word++) {
        int member = members[word] = (char)is_member(desc, word);
        bad += whorl_space_has(space, word) != member;
        bad += whorl_space_find(space, word) != (member ? index : WHORL_NONE);
        if (!member)
            continue;
        bad += whorl_space_at(space, index) != word;
        bad += index > 0 && whorl_space_next(space, index - 1, last) != word;
        last = word;
        index++;
    }
    CHECK(bad == 0);
    CHECK(whorl_space_count(space) == index && whorl_space_sites(space) == desc->sites);
    CHECK(whorl_space_at(space, index) == WHORL_NONE && whorl_space_at(space, WHORL_NONE) == WHORL_NONE);
    CHECK(index == 0 || whorl_space_next(space, index - 1, last) == WHORL_NONE);
    CHECK(whorl_space_find(space, words) == WHORL_NONE && !whorl_space_has(space, words));
    CHECK(whorl_space_find(space, WHORL_NONE) == WHORL_NONE && !whorl_space_has(space, WHORL_NONE));
    bad = 0;
    for (z = 0; z < words; z += 1 + words / 11) {
        double trace = -0.5;
        int64_t sum = 0;
        for (word = 0; word < words; word++)
            if (members[word])
                sum += whorl_bits_parity(word & z) == 0 ? 1 : -1;
        bad += whorl_space_string_trace(host, space, z, &trace) != WHORL_OK || trace != (double)sum;
    }
    CHECK(bad == 0);
    whorl_space_free(host, space);
}

/* Spaces too large to try all words: every index or `tries` random ones, and random words. */
static void check_at_random(whorl_host *host, const whorl_space_desc *desc, uint64_t tries, int ascending)
{
    whorl_space *space = make(host, desc);
    uint64_t count, t, counter = 0, bad = 0, disorder = 0;
    if (space == NULL)
        return;
    count = whorl_space_count(space);
    for (t = 0; t < tries && t < count; t++) {
        uint64_t index = count <= tries ? t : random_below(&counter, count), state = whorl_space_at(space, index);
        uint64_t other = whorl_random_bits(1, 2, t) & all_sites(desc->sites);
        bad += !is_member(desc, state) || whorl_space_find(space, state) != index || !whorl_space_has(space, state);
        bad += whorl_space_next(space, index, state) != whorl_space_at(space, index + 1);
        disorder += index + 1 < count && whorl_space_at(space, index + 1) <= state;
        if (is_member(desc, other))
            bad += whorl_space_at(space, whorl_space_find(space, other)) != other;
        else
            bad += whorl_space_find(space, other) != WHORL_NONE || whorl_space_has(space, other);
    }
    CHECK(t > 0);
    CHECK(bad == 0);
    CHECK(disorder == 0 || !ascending);
    CHECK(whorl_space_find(space, whorl_space_at(space, count - 1)) == count - 1);
    whorl_space_free(host, space);
}

/* ---- both directions --------------------------------------------------------------------------------------------- */

static void test_all_states(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_space *space = NULL;
    for (desc.sites = 1; desc.sites <= 14; desc.sites++)
        check_exhaustively(&host, &desc); /* kind 0 is all states */
    CHECK_STATUS(whorl_space_make_all(&host, 62, &space), WHORL_OK, &host);
    CHECK(whorl_space_count(space) == UINT64_C(1) << 62 && whorl_space_kind_of(space) == WHORL_SPACE_ALL);
    CHECK(whorl_space_find(space, all_sites(62)) == all_sites(62));
    CHECK(whorl_space_find(space, all_sites(63)) == WHORL_NONE);
    CHECK(whorl_space_free_sites(space) == all_sites(62));
    whorl_space_free(&host, space);
}

static void test_one_number(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number number = {0, 0};
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = &number;
    desc.number_count = 1;
    for (desc.sites = 1; desc.sites <= 14; desc.sites++)
        for (number.down = 0; number.down <= desc.sites; number.down++)
            check_exhaustively(&host, &desc);
    for (desc.sites = 15; desc.sites <= 64; desc.sites++) { /* both sides of the split at 40 sites, whole spaces */
        static const int32_t downs[3] = {0, 1, 2};
        int32_t k;
        for (k = 0; k < 3; k++) {
            number.down = downs[k];
            check_at_random(&host, &desc, 3000, 1);
            number.down = desc.sites - downs[k];
            check_at_random(&host, &desc, 3000, 1);
        }
        number.down = desc.sites / 2;
        if (desc.sites % 7 == 0 || desc.sites > 62 || desc.sites == 40 || desc.sites == 41)
            check_at_random(&host, &desc, 20000, 1);
    }
}

/* Labels every site with one of `groups` masks or none, and asks for random numbers. */
static int32_t random_numbers(uint64_t *counter, int32_t sites, uint64_t groups, uint64_t free_share,
                              whorl_down_number *numbers)
{
    uint64_t masks[8] = {0, 0, 0, 0, 0, 0, 0, 0}, g;
    int32_t site, used = 0;
    for (site = 0; site < sites; site++) {
        g = random_below(counter, groups + free_share);
        if (g < groups)
            masks[g] |= UINT64_C(1) << site;
    }
    for (g = 0; g < groups; g++)
        if (masks[g] != 0) {
            numbers[used].mask = masks[g];
            numbers[used].down = (int32_t)random_below(counter, (uint64_t)count_down(masks[g], masks[g]) + 1);
            used++;
        }
    return used;
}

static void test_several_numbers(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number numbers[8];
    uint64_t counter = 1000, groups;
    int32_t round;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = numbers;
    for (desc.sites = 1; desc.sites <= 14; desc.sites++)
        for (groups = 1; groups <= 5; groups++)
            for (round = 0; round < 6; round++) {
                desc.number_count = random_numbers(&counter, desc.sites, groups, (uint64_t)round % 3, numbers);
                if (desc.number_count > 0)
                    check_exhaustively(&host, &desc);
            }
    for (round = 0; round < 60; round++) { /* two tables: states ascend whatever the masks are */
        desc.sites = 20 + round % 21;
        desc.number_count = random_numbers(&counter, desc.sites, 1 + (uint64_t)round % 4, (uint64_t)round % 2, numbers);
        check_at_random(&host, &desc, 4000, 1);
    }
}

/* Above 40 sites several masks index by a number of mixed radix, in the documented order. */
static void test_mixed_radix(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number numbers[3];
    whorl_space *space;
    uint64_t counter = 5000, i, j, f, index = 0, bad = 0;
    int32_t round;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = numbers;
    desc.sites = 44;
    /* masks given in disorder: sites 40-43 with one down, sites 2-39 with two; sites 0 and 1 free */
    numbers[0].mask = UINT64_C(15) << 40;
    numbers[0].down = 1;
    numbers[1].mask = all_sites(40) & ~UINT64_C(3);
    numbers[1].down = 2;
    desc.number_count = 2;
    space = make(&host, &desc);
    CHECK(whorl_space_count(space) == 4 * 703 * 4);
    CHECK(whorl_space_number_at(space, 0).down == 2 && whorl_space_number_at(space, 1).down == 1);
    for (i = 40; i < 44; i++) { /* contiguous masks in order: ascending, so this is the order by hand */
        uint64_t a, b, one = 1;
        for (b = 3; b < 40; b++)
            for (a = 2; a < b; a++)
                for (f = 0; f < 4; f++)
                    bad += whorl_space_find(space, one << i | one << b | one << a | f) != index++;
    }
    CHECK(bad == 0 && index == whorl_space_count(space));
    whorl_space_free(&host, space);
    check_at_random(&host, &desc, 20000, 1);
    for (round = 0; round < 40; round++) {
        desc.sites = 41 + round % 24;
        desc.number_count = 2;
        numbers[0].mask = all_sites(desc.sites) & UINT64_C(0x5555555555555555);
        numbers[1].mask = numbers[0].mask << 1 & all_sites(desc.sites);
        if (round % 2 != 0)
            numbers[1].mask &= ~UINT64_C(0xff0); /* some sites free */
        j = (uint64_t)round % 3;
        numbers[0].down = (int32_t)j + 1;
        numbers[1].down = 2 + (int32_t)random_below(&counter, 3);
        check_at_random(&host, &desc, 3000, 0);
    }
}

static void test_parity(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    uint64_t counter = 0;
    int32_t round;
    desc.kind = WHORL_SPACE_PARITY;
    for (desc.sites = 1; desc.sites <= 14; desc.sites++)
        for (desc.parity = 0; desc.parity <= 1; desc.parity++) {
            desc.parity_mask = 0;
            check_exhaustively(&host, &desc);
            for (round = 0; round < 5; round++) {
                desc.parity_mask = 1 + random_below(&counter, all_sites(desc.sites));
                check_exhaustively(&host, &desc);
            }
        }
    desc.sites = 63;
    for (round = 0; round < 4; round++) {
        desc.parity = round % 2;
        desc.parity_mask = round < 2 ? 0 : UINT64_C(0x20f0000000000100) << (round - 2);
        check_at_random(&host, &desc, 20000, 1);
    }
}

static void test_blockade(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_pair pairs[300];
    uint64_t counter = 77;
    int32_t round;
    desc.kind = WHORL_SPACE_BLOCKADE;
    desc.pairs = pairs;
    for (desc.sites = 1; desc.sites <= 14; desc.sites++)
        for (round = 0; round < 12; round++) {
            uint64_t want = desc.sites == 1 ? 0 : random_below(&counter, 3 * (uint64_t)desc.sites);
            for (desc.pair_count = 0; desc.pair_count < want; desc.pair_count++) {
                int32_t i = (int32_t)random_below(&counter, (uint64_t)desc.sites);
                int32_t j = (int32_t)random_below(&counter, (uint64_t)desc.sites - 1);
                pairs[desc.pair_count].i = i;
                pairs[desc.pair_count].j = j + (j >= i);
            }
            check_exhaustively(&host, &desc);
        }
    desc.sites = 24;
    desc.pair_count = 0;
    for (round = 0; round < 24; round++)
        pairs[desc.pair_count++] = (whorl_pair){round, (round + 5) % 24};
    check_at_random(&host, &desc, UINT64_C(1) << 22, 1);
}

/* 63 and 64 sites in four complete blocks of 16: a state has at most one down in each. */
static void test_blockade_of_64(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    static whorl_pair pairs[2016];
    desc.kind = WHORL_SPACE_BLOCKADE;
    desc.pairs = pairs;
    for (desc.sites = 63; desc.sites <= 64; desc.sites++) {
        whorl_space *space;
        uint64_t want = 1;
        int32_t i, j, width = 16;
        desc.pair_count = 0;
        for (i = 0; i < desc.sites; i++)
            for (j = i + 1; j < desc.sites; j++)
                if (i / width == j / width)
                    pairs[desc.pair_count++] = (whorl_pair){i, j};
        for (i = 0; i < desc.sites; i += width)
            want *= (uint64_t)(desc.sites - i < width ? desc.sites - i : width) + 1;
        space = make(&host, &desc);
        CHECK(whorl_space_count(space) == want); /* 17^4 = 83521 for 64 sites */
        CHECK(whorl_space_neighbours(space, 0) == 0xfffe && whorl_space_neighbours(space, desc.sites) == 0);
        CHECK(whorl_space_states(space) != NULL && whorl_space_states(space)[0] == 0);
        whorl_space_free(&host, space);
        check_at_random(&host, &desc, UINT64_C(1) << 18, 1);
    }
}

static void test_list(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    static uint64_t states[20000];
    uint64_t counter = 0, k;
    int32_t round;
    desc.kind = WHORL_SPACE_LIST;
    desc.states = states;
    for (desc.sites = 1; desc.sites <= 12; desc.sites++)
        for (round = 0; round < 8; round++) { /* a random subset in random order */
            uint64_t word;
            desc.state_count = 0;
            for (word = 0; word <= all_sites(desc.sites); word++)
                if (random_below(&counter, 8) <= (uint64_t)round) {
                    uint64_t place = random_below(&counter, desc.state_count + 1);
                    states[desc.state_count++] = states[place];
                    states[place] = word;
                }
            check_exhaustively(&host, &desc);
        }
    for (desc.sites = 63; desc.sites <= 64; desc.sites++) { /* spread, clustered, and single */
        desc.state_count = 400;
        for (k = 0; k < desc.state_count; k++)
            states[k] = whorl_random_bits(3, 4, k) & all_sites(desc.sites);
        check_at_random(&host, &desc, 400, 1);
        for (k = 0; k < desc.state_count; k++)
            states[k] = all_sites(desc.sites) - (k * 7919) % 1000;
        check_at_random(&host, &desc, 400, 1);
        desc.state_count = 1;
        check_at_random(&host, &desc, 1, 1);
    }
    /* of 64 sites, all down is the word WHORL_NONE: told apart by the index */
    desc.sites = 64;
    desc.state_count = 2;
    states[0] = UINT64_MAX;
    states[1] = 5;
    {
        whorl_space *space = make(&host, &desc);
        CHECK(whorl_space_find(space, UINT64_MAX) == 1 && whorl_space_has(space, UINT64_MAX) == 1);
        CHECK(whorl_space_at(space, 0) == 5 && whorl_space_at(space, 1) == UINT64_MAX);
        whorl_space_free(&host, space);
    }
}

static void test_zero_dimension(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_space *space, *other;
    double trace = 3.0;
    uint64_t bytes = 0;
    desc.kind = WHORL_SPACE_LIST;
    for (desc.sites = 1; desc.sites <= 64; desc.sites += 63) {
        CHECK_STATUS(whorl_space_bytes(&host, &desc, &bytes), WHORL_OK, &host);
        space = make(&host, &desc);
        other = make(&host, &desc);
        CHECK(whorl_space_count(space) == 0 && whorl_space_at(space, 0) == WHORL_NONE);
        CHECK(whorl_space_find(space, 0) == WHORL_NONE && whorl_space_find(space, 1) == WHORL_NONE);
        CHECK(whorl_space_find(space, UINT64_MAX) == WHORL_NONE && !whorl_space_has(space, 0));
        CHECK(whorl_space_next(space, 0, 0) == WHORL_NONE && whorl_space_next(space, WHORL_NONE, 0) == WHORL_NONE);
        CHECK_STATUS(whorl_space_string_trace(&host, space, 1, &trace), WHORL_OK, &host);
        CHECK(trace == 0.0 && whorl_space_same(space, other));
        whorl_space_free(&host, space);
        whorl_space_free(&host, other);
    }
    whorl_space_free(&host, NULL);
    CHECK(host.bytes_used == 0);
}

/* ---- published counts -------------------------------------------------------------------------------------------- */

/* On-Line Encyclopedia of Integer Sequences A000045 (Fibonacci, open chain), A000032 (Lucas, ring). */
static void test_fibonacci_lucas(void)
{
    static const int32_t sizes[8] = {4, 6, 8, 12, 16, 20, 30, 32};
    whorl_host host = whorl_host_default();
    int32_t k, ring, i;
    for (k = 0; k < 8; k++)
        for (ring = 0; ring <= 1; ring++) {
            whorl_space_desc desc = whorl_space_default();
            whorl_pair pairs[32];
            whorl_space *space;
            char id[32];
            double value = -1.0, tolerance = -1.0;
            desc.sites = sizes[k];
            desc.kind = WHORL_SPACE_BLOCKADE;
            desc.pairs = pairs;
            desc.pair_count = (uint64_t)(sizes[k] - 1 + ring);
            for (i = 0; i < sizes[k]; i++)
                pairs[i] = (whorl_pair){i, (i + 1) % sizes[k]};
            snprintf(id, sizeof id, "%s_%d", ring ? "luc" : "fib", (int)sizes[k]);
            CHECK(reference_value("13_counting.tsv", id, &value, &tolerance));
            space = make(&host, &desc);
            CHECK_NEAR((double)whorl_space_count(space), value, tolerance, id);
            whorl_space_free(&host, space);
        }
}

static void test_binomials(void)
{
    static const int32_t sizes[5] = {16, 20, 24, 32, 36};
    whorl_host host = whorl_host_default();
    int32_t k;
    for (k = 0; k < 5; k++) {
        whorl_space *space = NULL;
        char id[32];
        double value = -1.0, tolerance = -1.0;
        snprintf(id, sizeof id, "sz0_%d", (int)sizes[k]);
        CHECK(reference_value("13_counting.tsv", id, &value, &tolerance));
        CHECK_STATUS(whorl_space_make_down(&host, sizes[k], sizes[k] / 2, &space), WHORL_OK, &host);
        CHECK_NEAR((double)whorl_space_count(space), value, tolerance, id);
        whorl_space_free(&host, space);
    }
    { /* 64 choose 32, the largest of all (from memory) */
        whorl_space *space = NULL;
        CHECK_STATUS(whorl_space_make_down(&host, 64, 32, &space), WHORL_OK, &host);
        CHECK(whorl_space_count(space) == UINT64_C(1832624140942590534));
        CHECK(whorl_space_at(space, 0) == UINT32_MAX && whorl_space_find(space, UINT32_MAX) == 0);
        CHECK(whorl_space_at(space, UINT64_C(1832624140942590533)) == UINT64_C(0xffffffff00000000));
        whorl_space_free(&host, space);
    }
}

/* Spaces of magnetisation make up all states: Pascal's triangle row by row, and multiplets of spin S = differences. */
static void test_multiplets(void)
{
    static const struct { const char *id; int32_t sites, down; } rows[] = {
        {"mult_8_0", 8, 4}, {"mult_8_2", 8, 3}, {"mult_12_0", 12, 6}, {"mult_16_0", 16, 8}, {"mult_20_0", 20, 10},
        {"mult_36_0", 36, 18}, {"mult_9_1", 9, 4}};
    whorl_host host = whorl_host_default();
    size_t k;
    for (k = 0; k < sizeof rows / sizeof rows[0]; k++) {
        whorl_space *lower = NULL, *higher = NULL; /* S^z = S and S + 1 */
        double value = -1.0, tolerance = -1.0;
        CHECK(reference_value("13_counting.tsv", rows[k].id, &value, &tolerance));
        CHECK_STATUS(whorl_space_make_down(&host, rows[k].sites, rows[k].down, &lower), WHORL_OK, &host);
        CHECK_STATUS(whorl_space_make_down(&host, rows[k].sites, rows[k].down - 1, &higher), WHORL_OK, &host);
        CHECK_NEAR((double)(whorl_space_count(lower) - whorl_space_count(higher)), value, tolerance, rows[k].id);
        whorl_space_free(&host, lower);
        whorl_space_free(&host, higher);
    }
}

/* ---- traces at sizes beyond brute force -------------------------------------------------------------------------- */

static double trace_of(whorl_host *host, const whorl_space *space, uint64_t z)
{
    double trace = -0.5;
    CHECK_STATUS(whorl_space_string_trace(host, space, z, &trace), WHORL_OK, host);
    return trace;
}

static void test_large_traces(void)
{
    whorl_host host = whorl_host_default();
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number numbers[2] = {{UINT64_C(0xffffffff), 3}, {UINT64_C(0xffff00000000), 2}};
    whorl_space *space = NULL;
    int32_t w;
    CHECK_STATUS(whorl_space_make_down(&host, 64, 3, &space), WHORL_OK, &host);
    /* generating function (1 - t)^w (1 + t)^(64 - w) at t^3, DLMF 18.23: with few down spins a sum over them by hand */
    for (w = 0; w <= 64; w++) {
        double even = 64.0 - w, odd = w;
        double three = (even * (even - 1) * (even - 2) - odd * (odd - 1) * (odd - 2)) / 6.0 +
                       even * odd * (odd - 1) / 2.0 - odd * even * (even - 1) / 2.0;
        CHECK_NEAR(trace_of(&host, space, whorl_bits_low(w)), three, 0.0, "trace over 3 of 64 down");
    }
    whorl_space_free(&host, space);
    desc.sites = 50;
    desc.kind = WHORL_SPACE_DOWN;
    desc.numbers = numbers;
    desc.number_count = 2;
    space = make(&host, &desc);
    /* 4960 x 120 x 4 states; Z of one site of the first mask: (32 - 6) / 32 of them */
    CHECK_NEAR(trace_of(&host, space, 0), 4960.0 * 120.0 * 4.0, 0.0, "dimension");
    CHECK_NEAR(trace_of(&host, space, 1), 4960.0 * 120.0 * 4.0 * 26.0 / 32.0, 0.0, "Z_0");
    CHECK_NEAR(trace_of(&host, space, UINT64_C(1) << 49), 0.0, 0.0, "Z of a free site");
    whorl_space_free(&host, space);
    CHECK_STATUS(whorl_space_make_down(&host, 64, 32, &space), WHORL_OK, &host);
    CHECK_NEAR(trace_of(&host, space, UINT64_MAX), 1832624140942590534.0, 0.0, "all sites: (-1)^32");
    CHECK_NEAR(trace_of(&host, space, 1), 0.0, 0.0, "Z_0 at S^z = 0");
    CHECK_NEAR(trace_of(&host, space, 3), -1832624140942590534.0 / 63.0, 512.0, "Z_0 Z_1 at S^z = 0: -1/(N-1)");
    whorl_space_free(&host, space);
}

/* ---- definitions ------------------------------------------------------------------------------------------------- */

static void check_label(const whorl_space *space, const char *want)
{
    char label[200];
    whorl_text text = whorl_text_over(label, sizeof label);
    whorl_space_describe(space, &text);
    if (!CHECK(strcmp(label, want) == 0))
        printf("  label is \"%s\", expected \"%s\"\n", label, want);
}

static void test_same_and_describe(void)
{
    whorl_host host = whorl_host_default();
    whorl_pair pairs[3] = {{0, 1}, {1, 2}, {1, 0}}, fewer[2] = {{2, 1}, {0, 1}};
    whorl_down_number numbers[2] = {{0x1f, 2}, {0xe0, 1}}, swapped[2] = {{0xe0, 1}, {0x1f, 2}};
    uint64_t states[3] = {9, 1, 4}, sorted[3] = {1, 4, 9}, others[3] = {1, 4, 8};
    static const char *const labels[] = {"all states", "S^z = 0", "S^z = -1/2", "2 of 5 and 1 of 3 down",
                                         "2 of 5 and 1 of 3 down, 2 free", "even number down", "odd number of 2 down",
                                         "blockade, 5 states", "list, 3 states", "1 of 8 down, 1 free",
                                         "list, 1 state"};
    whorl_space_desc descs[11], twin;
    whorl_space *spaces[11];
    whorl_down_number eight = {0xff, 1};
    int32_t a, b;
    for (a = 0; a < 11; a++)
        descs[a] = whorl_space_default();
    descs[0].sites = 8;
    descs[3].kind = descs[4].kind = WHORL_SPACE_DOWN;
    descs[3].numbers = descs[4].numbers = numbers;
    descs[3].number_count = descs[4].number_count = 2;
    descs[3].sites = 8;
    descs[4].sites = 10;
    descs[5].sites = descs[6].sites = 8;
    descs[5].kind = descs[6].kind = WHORL_SPACE_PARITY;
    descs[6].parity = 1;
    descs[6].parity_mask = 6;
    descs[7].sites = 3;
    descs[7].kind = WHORL_SPACE_BLOCKADE;
    descs[7].pairs = pairs;
    descs[7].pair_count = 3;
    descs[8].sites = descs[10].sites = 4;
    descs[8].kind = descs[10].kind = WHORL_SPACE_LIST;
    descs[8].states = descs[10].states = states;
    descs[8].state_count = 3;
    descs[10].state_count = 1;
    descs[9].sites = 9;
    descs[9].kind = WHORL_SPACE_DOWN;
    descs[9].numbers = &eight;
    descs[9].number_count = 1;
    for (a = 0; a < 11; a++) {
        if (a == 1 || a == 2)
            CHECK_STATUS(whorl_space_make_down(&host, a == 1 ? 8 : 9, a == 1 ? 4 : 5, &spaces[a]), WHORL_OK, &host);
        else
            spaces[a] = make(&host, &descs[a]);
        check_label(spaces[a], labels[a]);
    }
    for (a = 0; a < 11; a++)
        for (b = 0; b < 11; b++)
            CHECK(whorl_space_same(spaces[a], spaces[b]) == (a == b));
    for (a = 3; a <= 8; a++) { /* the same said differently */
        whorl_space *space;
        twin = descs[a];
        twin.numbers = swapped;
        twin.pairs = fewer;
        twin.pair_count = 2;
        twin.states = sorted;
        twin.parity_mask = twin.parity_mask == 0 ? 0xff : twin.parity_mask;
        space = make(&host, &twin);
        CHECK(whorl_space_same(spaces[a], space) == 1);
        whorl_space_free(&host, space);
        twin.states = others;
        twin.parity ^= 1;
        twin.pair_count = 1;
        swapped[0].down = 2;
        space = make(&host, &twin);
        CHECK(whorl_space_same(spaces[a], space) == 0);
        swapped[0].down = 1;
        whorl_space_free(&host, space);
    }
    CHECK(whorl_space_number_count(spaces[4]) == 2 && whorl_space_number_at(spaces[4], 1).mask == 0xe0);
    CHECK(whorl_space_number_at(spaces[4], 2).mask == 0 && whorl_space_number_at(spaces[4], -1).down == 0);
    CHECK(whorl_space_number_at(spaces[1], 0).mask == 0xff && whorl_space_free_sites(spaces[1]) == 0);
    CHECK(whorl_space_free_sites(spaces[4]) == 0x300 && whorl_space_free_sites(spaces[6]) == 0xf9);
    CHECK(whorl_space_parity_mask(spaces[6]) == 6 && whorl_space_parity(spaces[6]) == 1);
    CHECK(whorl_space_parity_mask(spaces[0]) == 0 && whorl_space_number_count(spaces[0]) == 0);
    CHECK(whorl_space_neighbours(spaces[7], 1) == 5 && whorl_space_neighbours(spaces[0], 1) == 0);
    CHECK(whorl_space_states(spaces[8])[2] == 9 && whorl_space_states(spaces[1]) == NULL);
    for (a = 0; a < 11; a++)
        whorl_space_free(&host, spaces[a]);
    CHECK(host.bytes_used == 0);
}

/* ---- bad input --------------------------------------------------------------------------------------------------- */

static void check_refused(const whorl_space_desc *desc, whorl_status want, uint64_t index, const char *words)
{
    check_memory memory;
    whorl_host host = check_host(&memory);
    uint64_t bytes = 77;
    whorl_space *space = (whorl_space *)&memory;
    CHECK_STATUS(whorl_space_make(&host, desc, &space), want, &host);
    CHECK(space == NULL && memory.live_blocks == 0);
    CHECK(host.reason.status == want && host.reason.index == index);
    if (!CHECK(strstr(host.reason.text, words) != NULL))
        printf("  reason is \"%s\", expected \"%s\"\n", host.reason.text, words);
    if (strstr(words, "repeats") == NULL) {
        CHECK_STATUS(whorl_space_bytes(&host, desc, &bytes), want, &host);
        CHECK(bytes == 77);
    }
}

static void test_bad_input(void)
{
    whorl_space_desc desc = whorl_space_default();
    whorl_down_number numbers[2] = {{3, 1}, {6, 1}};
    whorl_pair pairs[2] = {{0, 1}, {2, 2}};
    uint64_t states[4] = {5, 3, 1, 3};
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "0 sites");
    desc.sites = -4;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "-4 sites");
    desc.sites = 65;
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "65 sites");
    desc.sites = 63;
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "2^63");
    desc.kind = 9;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "kind");
    desc.kind = -1;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "kind");
    desc.kind = WHORL_SPACE_PARITY;
    desc.sites = 64;
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "2^63");
    desc.sites = 4;
    desc.parity = 2;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "parity must be 0");
    desc.parity = 0;
    desc.parity_mask = 0x10;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "beyond the last");
    desc.kind = WHORL_SPACE_DOWN;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "at least one mask");
    desc.numbers = numbers;
    desc.number_count = 2;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "site 1 in common");
    numbers[1].mask = 0x14;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "beyond the last");
    numbers[1].mask = 0xc;
    numbers[1].down = 3;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "3 down spins on 2 sites");
    numbers[1].down = -1;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "-1 down spins");
    numbers[1].mask = 0; /* all sites: in common with the first */
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "in common");
    desc.sites = 64; /* 2 x 2^62 states */
    numbers[0].mask = 3;
    desc.number_count = 1;
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "2^63");
    numbers[0].mask = 1; /* 2^63 states */
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "2^63");
    desc.sites = 4;
    desc.kind = WHORL_SPACE_BLOCKADE;
    desc.pair_count = 2;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "pairs is NULL");
    desc.pairs = pairs;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "(2, 2)");
    pairs[1].j = 4;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "0 .. 3");
    pairs[1].j = -1;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "(2, -1)");
    desc.pair_count = 1;
    desc.sites = 40; /* 3/4 of 2^40 states, to be stored */
    check_refused(&desc, WHORL_TOO_LARGE, WHORL_NONE, "2^36");
    desc.sites = 4;
    desc.kind = WHORL_SPACE_LIST;
    desc.state_count = 4;
    check_refused(&desc, WHORL_BAD_ARGUMENT, WHORL_NONE, "states is NULL");
    desc.states = states;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 3, "repeats the state 3");
    states[3] = 1; /* the smallest twice, and in an ascending list */
    check_refused(&desc, WHORL_BAD_ARGUMENT, 3, "repeats the state 1");
    states[0] = states[1] = 0;
    desc.state_count = 2;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 1, "repeats the state 0");
    desc.state_count = 4;
    states[3] = 16;
    check_refused(&desc, WHORL_BAD_ARGUMENT, 3, "beyond the last");
}

/* ---- memory and cancelling --------------------------------------------------------------------------------------- */

typedef struct sample {
    whorl_space_desc desc;
    whorl_pair pairs[30];
    whorl_down_number numbers[2];
    uint64_t states[3000];
} sample;

enum { SAMPLES = 6 };

/* One description of each sort of object; they point into the samples. */
static void fill_samples(sample *samples)
{
    int32_t k, i;
    for (k = 0; k < SAMPLES; k++) {
        sample *s = &samples[k];
        s->desc = whorl_space_default();
        s->desc.sites = k == 2 ? 60 : 24;
        s->desc.numbers = s->numbers;
        s->desc.number_count = 2;
        s->numbers[0] = (whorl_down_number){0xfff, 3};
        s->numbers[1] = (whorl_down_number){0x1ff000, 2};
        s->desc.pairs = s->pairs;
        s->desc.pair_count = 23;
        for (i = 0; i < 23; i++)
            s->pairs[i] = (whorl_pair){i, i + 1};
        s->desc.states = s->states;
        s->desc.state_count = 3000;
        for (i = 0; i < 3000; i++)
            s->states[i] = (uint64_t)(i * 7919) % 65536;
    }
    samples[0].desc.kind = WHORL_SPACE_ALL;
    samples[1].desc.kind = WHORL_SPACE_DOWN;
    samples[2].desc.kind = WHORL_SPACE_DOWN;
    samples[2].desc.number_count = 1;
    samples[2].numbers[0] = (whorl_down_number){0, 3};
    samples[3].desc.kind = WHORL_SPACE_PARITY;
    samples[4].desc.kind = WHORL_SPACE_BLOCKADE;
    samples[5].desc.kind = WHORL_SPACE_LIST;
}

static sample samples[SAMPLES];

static whorl_status make_and_free(whorl_host *host, void *argument)
{
    const whorl_space_desc *desc = (const whorl_space_desc *)argument;
    whorl_space *space = (whorl_space *)argument;
    whorl_status status = whorl_space_make(host, desc, &space);
    CHECK((space == NULL) == (status != WHORL_OK));
    whorl_space_free(host, space);
    return status;
}

static whorl_status measure(whorl_host *host, void *argument)
{
    uint64_t bytes = 12345;
    whorl_status status = whorl_space_bytes(host, (const whorl_space_desc *)argument, &bytes);
    CHECK(status == WHORL_OK ? bytes > 64 : bytes == 12345);
    return status;
}

static whorl_status trace_stored(whorl_host *host, void *argument)
{
    whorl_poll_function poll = host->poll;
    whorl_space *space = NULL;
    double trace = 0.5;
    whorl_status status;
    host->poll = NULL; /* only the trace is under test */
    CHECK_STATUS(whorl_space_make(host, (const whorl_space_desc *)argument, &space), WHORL_OK, host);
    host->poll = poll;
    status = whorl_space_string_trace(host, space, 5, &trace);
    CHECK((trace == 0.5) == (status != WHORL_OK));
    whorl_space_free(host, space);
    return status;
}

static void test_allocations(void)
{
    int32_t k;
    fill_samples(samples);
    for (k = 0; k < SAMPLES; k++)
        check_every_allocation(make_and_free, &samples[k].desc, WHORL_OK);
}

static void test_polls(void)
{
    int32_t k;
    fill_samples(samples);
    for (k = 0; k < SAMPLES; k++)
        if (samples[k].desc.kind != WHORL_SPACE_ALL && samples[k].desc.kind != WHORL_SPACE_PARITY)
            check_every_poll(make_and_free, &samples[k].desc, WHORL_OK);
    check_every_poll(measure, &samples[4].desc, WHORL_OK);
    check_every_poll(trace_stored, &samples[4].desc, WHORL_OK);
    check_every_poll(trace_stored, &samples[5].desc, WHORL_OK);
}

static void test_announced(void)
{
    int32_t k;
    fill_samples(samples);
    for (k = 0; k < SAMPLES; k++) {
        whorl_host host = whorl_host_default();
        check_memory memory;
        whorl_arena arena;
        whorl_space *space = NULL;
        uint64_t bytes = 0;
        char *memory_of_arena, *room;
        CHECK_STATUS(whorl_space_bytes(&host, &samples[k].desc, &bytes), WHORL_OK, &host);
        CHECK(host.takes == 0);
        memory_of_arena = (char *)malloc((size_t)bytes + 64);
        room = memory_of_arena + ((64 - ((uintptr_t)memory_of_arena & 63)) & 63);
        whorl_arena_make(&arena, room, bytes);
        whorl_arena_use(&arena, &host);
        CHECK_STATUS(whorl_space_make(&host, &samples[k].desc, &space), WHORL_OK, &host);
        CHECK(host.bytes_used == bytes && arena.top == bytes && host.takes == 1);
        whorl_space_free(&host, space);
        CHECK(host.bytes_used == 0 && arena.top == 0);
        whorl_arena_make(&arena, room, bytes - 1);
        CHECK_STATUS(whorl_space_make(&host, &samples[k].desc, &space), WHORL_NO_MEMORY, &host);
        free(memory_of_arena);
        host = check_host(&memory);
        host.byte_limit = bytes;
        CHECK_STATUS(whorl_space_make(&host, &samples[k].desc, &space), WHORL_OK, &host);
        whorl_space_free(&host, space);
        host.byte_limit = bytes - 1;
        CHECK_STATUS(whorl_space_make(&host, &samples[k].desc, &space), WHORL_OVER_LIMIT, &host);
        CHECK(space == NULL && memory.live_blocks == 0);
    }
}

int main(void)
{
    check_begin("test_space");
    check_run("all states", test_all_states);
    check_run("one number", test_one_number);
    check_run("several numbers", test_several_numbers);
    check_run("mixed radix", test_mixed_radix);
    check_run("parity", test_parity);
    check_run("blockade", test_blockade);
    check_run("blockade of 64", test_blockade_of_64);
    check_run("list", test_list);
    check_run("zero dimension", test_zero_dimension);
    check_run("fibonacci and lucas", test_fibonacci_lucas);
    check_run("binomials", test_binomials);
    check_run("multiplets", test_multiplets);
    check_run("large traces", test_large_traces);
    check_run("same and describe", test_same_and_describe);
    check_run("bad input", test_bad_input);
    check_run("allocations", test_allocations);
    check_run("polls", test_polls);
    check_run("announced", test_announced);
    return check_end();
}
