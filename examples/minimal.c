/* The levels of a ring of twelve spins with J S_i.S_j, J = 1. Build: cc -I../include minimal.c -lm */
#define WHORL_IMPLEMENTATION
#include "whorl_levels.h"
#include <inttypes.h>
#include <stdio.h>

int main(void)
{
    enum { SITES = 12 };
    whorl_term terms[WHORL_EXCHANGE_TERMS * SITES];    /* J S_i.S_j is three Pauli strings */
    whorl_host host = whorl_host_default();            /* malloc, one thread, no limit */
    whorl_levels_desc want = whorl_levels_default();   /* four levels of every sector, to 1e-10 */
    whorl_levels *levels = NULL;
    whorl_sum sum;
    uint64_t used = 0, k;
    int32_t i;

    for (i = 0; i < SITES; i++)
        used += whorl_terms_exchange(terms + used, i, (i + 1) % SITES, 1.0);
    if (whorl_sum_from_terms(&host, SITES, terms, used, &sum) < 0 || whorl_levels_make(&host, &sum, &want, &levels) < 0)
        return fprintf(stderr, "%s\n", host.reason.text), 1;
    for (k = 0; k < whorl_levels_count(levels); k++) {
        whorl_level level = whorl_levels_at(levels, k);
        if (level.flags & WHORL_LEVEL_OPEN)            /* from here on the four levels of a sector do not tell all */
            break;
        printf("%16.12f +- %.0e  x%" PRIu64 "  S = %g  %s\n", level.energy, level.residual, level.multiplicity,
               0.5 * level.twice_spin, level.sector);
    }
    whorl_levels_free(&host, levels);
    return 0;
}
