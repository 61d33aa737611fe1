/* Figures of the floor: the reproducible dot product and the decimal text of doubles, against a triad and the C library. */
#include "bench.h"

typedef struct dot_work {
    const double *x, *y;
    uint64_t count;
    double sink;
} dot_work;

static void dot_run(void *argument)
{
    dot_work *work = (dot_work *)argument;
    work->sink += whorl_dot(WHORL_REAL_DOUBLE, work->x, work->y, work->count).re;
}

typedef struct text_work {
    double values[1024];
    uint64_t length;
} text_work;

static void text_whorl(void *argument)
{
    text_work *work = (text_work *)argument;
    int i;
    for (i = 0; i < 1024; i++) {
        char text[WHORL_REAL_TEXT];
        double back = 0.0;
        work->length += (uint64_t)whorl_real_write(work->values[i], text);
        whorl_real_read(text, (uint64_t)strlen(text), &back);
    }
}

static void text_library(void *argument)
{
    text_work *work = (text_work *)argument;
    int i;
    for (i = 0; i < 1024; i++) {
        char text[64];
        work->length += (uint64_t)snprintf(text, sizeof text, "%.17g", work->values[i]);
        work->length += strtod(text, NULL) > 0.0;
    }
}

int main(int argc, char **argv)
{
    int quick = argc > 1 && strcmp(argv[1], "quick") == 0, i;
    uint64_t count = quick ? UINT64_C(1) << 20 : UINT64_C(1) << 24;
    bench_triad triad = bench_triad_make(count, 1);
    dot_work dot;
    static text_work text;
    if (argc > 1 && strcmp(argv[1], "big") == 0)
        return 0;
    bench_header();
    dot.x = triad.b;
    dot.y = triad.c;
    dot.count = count;
    dot.sink = 0.0;
    bench_row("dot_t1", "triad", bench_compare(dot_run, &dot, bench_triad_run, &triad, 9, 0.02), "one thread");
    for (i = 0; i < 1024; i++)
        text.values[i] = whorl_random_normal(1, 2, (uint64_t)i);
    bench_row("real_text", "printf17+strtod", bench_compare(text_whorl, &text, text_library, &text, 9, 0.02),
              "1024 numbers written and read back");
    bench_triad_free(&triad);
    return 0;
}
