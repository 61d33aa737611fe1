/* check.h: the test harness. A test is a function; it passes when it made at least one check and none failed. */
#ifndef CHECK_INCLUDED
#define CHECK_INCLUDED

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "whorl_core.h"

static struct {
    const char *program, *test, *skip;
    long checks, bad;              /* in this test */
    long passed, failed, skipped;  /* tests */
} check_state;

static inline int check_report(int good, const char *file, int line, const char *what)
{
    check_state.checks++;
    if (good)
        return 1;
    if (check_state.bad++ < 20)
        printf("  %s:%d: %s: %s\n", file, line, check_state.test, what);
    return 0;
}

static inline int check_near(double got, double want, double tolerance, const char *file, int line, const char *what)
{
    double off = fabs(got - want);
    check_state.checks++;
    if (off <= tolerance)
        return 1;
    if (check_state.bad++ < 20)
        printf("  %s:%d: %s: %s is %.17g, expected %.17g +- %.1e (off by %.1e)\n", file, line, check_state.test, what, got,
               want, tolerance, off);
    return 0;
}

static inline int check_status(whorl_status got, whorl_status want, const whorl_host *host, const char *file, int line,
                               const char *what)
{
    check_state.checks++;
    if (got == want)
        return 1;
    if (check_state.bad++ < 20)
        printf("  %s:%d: %s: %s is %d (%s), expected %d (%s): %s\n", file, line, check_state.test, what, (int)got,
               whorl_status_text(got), (int)want, whorl_status_text(want), host->reason.text);
    return 0;
}

#define CHECK(condition) check_report((condition) ? 1 : 0, __FILE__, __LINE__, #condition)
/* |got - want| <= tolerance; false for NaN. `what` names the quantity (and the row of reference/ where there is one). */
#define CHECK_NEAR(got, want, tolerance, what) check_near(got, want, tolerance, __FILE__, __LINE__, what)
#define CHECK_STATUS(call, want, host) check_status(call, want, host, __FILE__, __LINE__, #call)
/* Leaves the test as skipped: say what is missing and which package brings it. */
#define CHECK_SKIP(why) do { check_state.skip = (why); return; } while (0)

static inline void check_run(const char *name, void (*test)(void))
{
    check_state.test = name;
    check_state.skip = NULL;
    check_state.checks = check_state.bad = 0;
    test();
    fflush(stdout);
    if (check_state.skip != NULL) {
        int forbidden = getenv("WHORL_NO_SKIP") != NULL;
        printf("%s %s/%s: %s\n", forbidden ? "FAILED (skipping is forbidden)" : "skipped", check_state.program, name,
               check_state.skip);
        if (forbidden)
            check_state.failed++;
        else
            check_state.skipped++;
    } else if (check_state.bad > 0 || check_state.checks == 0) {
        printf("FAILED %s/%s: %ld of %ld checks\n", check_state.program, name, check_state.bad, check_state.checks);
        check_state.failed++;
    } else {
        check_state.passed++;
    }
    fflush(stdout);
}

static inline void check_begin(const char *program) { check_state.program = program; }

static inline int check_end(void)
{
    printf("%s: %ld passed, %ld failed, %ld skipped\n", check_state.program, check_state.passed, check_state.failed,
           check_state.skipped);
    return check_state.failed != 0;
}

/*
 * A memory hook that counts and can fail: call number fail_at (from 1) fails; with for_good every later one too. Fills
 * memory with 0xA5 on take. Usage: host.take = check_take; host.give = check_give; host.memory_context = &memory;
 */
typedef struct check_memory {
    uint64_t calls, fail_at, live_blocks, live_bytes, most_bytes;
    int for_good;
} check_memory;

static inline void *check_take(void *context, size_t bytes)
{
    check_memory *memory = (check_memory *)context;
    void *block;
    memory->calls++;
    if (memory->fail_at != 0 &&
        (memory->calls == memory->fail_at || (memory->for_good && memory->calls > memory->fail_at)))
        return NULL;
    block = malloc(bytes);
    if (block == NULL)
        return NULL;
    memset(block, 0xA5, bytes);
    memory->live_blocks++;
    memory->live_bytes += bytes;
    if (memory->live_bytes > memory->most_bytes)
        memory->most_bytes = memory->live_bytes;
    return block;
}

static inline void check_give(void *context, void *block, size_t bytes)
{
    check_memory *memory = (check_memory *)context;
    memory->live_blocks--;
    memory->live_bytes -= bytes;
    free(block);
}

static inline whorl_host check_host(check_memory *memory)
{
    whorl_host host = whorl_host_default();
    memset(memory, 0, sizeof *memory);
    host.take = check_take;
    host.give = check_give;
    host.memory_context = memory;
    return host;
}

/*
 * Every allocation of a call failed in turn: `call` gets the host and the argument, must free whatever it makes, and
 * returns the status of the call under test (it may check that outputs are untouched). Runs once with no failure (must be
 * `good`), then fails allocation 1, 2, ... once and for good until the call succeeds again.
 */
typedef whorl_status (*check_call)(whorl_host *host, void *argument);
static inline void check_every_allocation(check_call call, void *argument, whorl_status good)
{
    int for_good;
    for (for_good = 0; for_good <= 1; for_good++) {
        uint64_t k;
        for (k = 1; k < 10000; k++) {
            check_memory memory;
            whorl_host host = check_host(&memory);
            whorl_status status;
            memory.fail_at = k;
            memory.for_good = for_good;
            status = call(&host, argument);
            CHECK(memory.live_blocks == 0 && memory.live_bytes == 0 && host.bytes_used == 0);
            if (memory.calls < k) {
                CHECK_STATUS(status, good, &host);
                break;
            }
            CHECK_STATUS(status, WHORL_NO_MEMORY, &host);
        }
        CHECK(k > 1); /* the call allocates at all */
    }
}

/* A poll hook that cancels at poll number cancel_at (from 1; 0: never) and counts. */
typedef struct check_polls {
    uint64_t calls, cancel_at;
} check_polls;
static inline int32_t check_poll(void *context, const whorl_progress *progress)
{
    check_polls *polls = (check_polls *)context;
    (void)progress;
    polls->calls++;
    return polls->cancel_at != 0 && polls->calls >= polls->cancel_at;
}
/* Every poll of a call cancelled in turn. */
static inline void check_every_poll(check_call call, void *argument, whorl_status good)
{
    uint64_t k;
    for (k = 1; k < 100000; k++) {
        check_memory memory;
        check_polls polls = {0, 0};
        whorl_host host = check_host(&memory);
        whorl_status status;
        polls.cancel_at = k;
        host.poll = check_poll;
        host.poll_context = &polls;
        status = call(&host, argument);
        CHECK(memory.live_blocks == 0 && host.bytes_used == 0);
        if (polls.calls < k) {
            CHECK_STATUS(status, good, &host);
            break;
        }
        CHECK_STATUS(status, WHORL_CANCELLED, &host);
    }
    CHECK(k > 1); /* the call polls at all */
}

#endif
