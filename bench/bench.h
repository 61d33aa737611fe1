/*
 * bench.h: how figures are measured here. A figure is never a time alone: the work and its peer (a triad over vectors of
 * the same length, or a general-purpose library at the same job) are timed in turns in one run, and the median of the
 * ratios of the rounds is the figure, with its minimum and maximum. Rows are tab-separated:
 *
 *     figure  value  unit  peer  peer_value  ratio  low  high  note
 *
 * value and peer_value are medians in `unit`; ratio = value / peer_value as the median over rounds; a row whose name ends
 * in _host comes from a build with plain -O2.
 */
#ifndef BENCH_INCLUDED
#define BENCH_INCLUDED

#ifndef _POSIX_C_SOURCE
#define _POSIX_C_SOURCE 200112L
#endif
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "whorl.h"

#ifndef BENCH_SUFFIX
#define BENCH_SUFFIX ""
#endif

#define BENCH_MOST_ROUNDS 64

static inline double bench_now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static inline int bench_order(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static inline double bench_median(const double *values, int count)
{
    double sorted[BENCH_MOST_ROUNDS];
    memcpy(sorted, values, (size_t)count * sizeof *values);
    qsort(sorted, (size_t)count, sizeof *sorted, bench_order);
    return count % 2 ? sorted[count / 2] : 0.5 * (sorted[count / 2 - 1] + sorted[count / 2]);
}

typedef void (*bench_body)(void *argument);

typedef struct bench_result {
    double value, peer, ratio, low, high; /* seconds a call, and ratios */
} bench_result;

/* Seconds of one call, repeated inside until at least `least` seconds have passed. */
static inline double bench_once(bench_body body, void *argument, double least)
{
    double start = bench_now(), elapsed;
    int calls = 0;
    do {
        body(argument);
        calls++;
        elapsed = bench_now() - start;
    } while (elapsed < least);
    return elapsed / calls;
}

/* Work and peer in turns. Both are called once beforehand, so that pages are touched and tables are warm. */
static inline bench_result bench_compare(bench_body body, void *argument, bench_body peer, void *peer_argument,
                                         int rounds, double least)
{
    double value[BENCH_MOST_ROUNDS], other[BENCH_MOST_ROUNDS], ratio[BENCH_MOST_ROUNDS];
    bench_result result;
    int r;
    if (rounds > BENCH_MOST_ROUNDS)
        rounds = BENCH_MOST_ROUNDS;
    body(argument);
    peer(peer_argument);
    for (r = 0; r < rounds; r++) {
        value[r] = bench_once(body, argument, least);
        other[r] = bench_once(peer, peer_argument, least);
        ratio[r] = value[r] / other[r];
    }
    result.value = bench_median(value, rounds);
    result.peer = bench_median(other, rounds);
    result.ratio = bench_median(ratio, rounds);
    result.low = result.high = ratio[0];
    for (r = 1; r < rounds; r++) {
        result.low = ratio[r] < result.low ? ratio[r] : result.low;
        result.high = ratio[r] > result.high ? ratio[r] : result.high;
    }
    return result;
}

static inline void bench_header(void)
{
    printf("figure\tvalue\tunit\tpeer\tpeer_value\tratio\tlow\thigh\tnote\n");
}

/* One row; times are printed in milliseconds. */
static inline void bench_row(const char *figure, const char *peer, bench_result result, const char *note)
{
    printf("%s%s\t%.4g\tms\t%s\t%.4g\t%.3f\t%.3f\t%.3f\t%s\n", figure, BENCH_SUFFIX, 1e3 * result.value, peer,
           1e3 * result.peer, result.ratio, result.low, result.high, note);
    fflush(stdout);
}

/* ---- the triad a = b + s c over `reals` doubles (2 n for n complex elements), on `threads` threads --------------------- */

typedef struct bench_triad {
    double *a, *b, *c;
    uint64_t reals;
    int threads;
} bench_triad;

static inline void bench_triad_run(void *argument)
{
    const bench_triad *triad = (const bench_triad *)argument;
    double *a = triad->a;
    const double *b = triad->b, *c = triad->c;
    int64_t i, n = (int64_t)triad->reals;
#ifdef _OPENMP
#pragma omp parallel for simd schedule(static) num_threads(triad->threads)
#endif
    for (i = 0; i < n; i++)
        a[i] = b[i] + 0.5 * c[i];
}

static inline void *bench_memory(uint64_t bytes)
{
    void *block = NULL;
    if (posix_memalign(&block, 64, (size_t)bytes + 64) != 0 || block == NULL) {
        fprintf(stderr, "bench: no memory for %.0f MB\n", 1e-6 * (double)bytes);
        exit(1);
    }
    return block;
}

static inline bench_triad bench_triad_make(uint64_t reals, int threads)
{
    bench_triad triad;
    int64_t i, n = (int64_t)reals;
    triad.a = (double *)bench_memory(8 * reals);
    triad.b = (double *)bench_memory(8 * reals);
    triad.c = (double *)bench_memory(8 * reals);
    triad.reals = reals;
    triad.threads = threads;
#ifdef _OPENMP
#pragma omp parallel for schedule(static) num_threads(threads)
#endif
    for (i = 0; i < n; i++)
        triad.a[i] = 0.0, triad.b[i] = 1.0, triad.c[i] = 2.0;
    return triad;
}

static inline void bench_triad_free(bench_triad *triad)
{
    free(triad->a);
    free(triad->b);
    free(triad->c);
}

/* Ends the bench when the library refuses: a bench has no use for half a figure. */
static inline void bench_must(whorl_host *host, whorl_status status)
{
    if (status >= 0)
        return;
    fprintf(stderr, "bench: %s: %s\n", whorl_status_text(status), host->reason.text);
    exit(1);
}

#endif
