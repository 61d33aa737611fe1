/*
 * fuzz_model.c: any bytes as a model text; what is read must be valid, and survives being written and read again.
 *
 *     clang -g -O2 -fsanitize=fuzzer,address,undefined -fno-sanitize-recover=undefined -I../include fuzz_model.c -lm
 *     ./a.out -max_total_time=60 -max_len=512 corpus         (seeds: examples/ and the texts in test_model.c)
 *
 * With -DFUZZ_REPLAY it is a plain program that runs the files named on its command line.
 */
#define WHORL_IMPLEMENTATION
#include "whorl_model.h"

#include <stdio.h>
#include <stdlib.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static int32_t patience(void *context, const whorl_progress *progress)
{
    (void)progress;
    return ++*(int32_t *)context > 50; /* powers of long sums take their time */
}

static void demand(int good)
{
    if (!good)
        abort();
}

/* Written and read again it must be the same sum. */
static void round_trip(whorl_host *host, const whorl_sum *sum)
{
    whorl_term *terms = (whorl_term *)malloc((size_t)(sum->count + 1) * sizeof *terms);
    uint64_t room, used = 0;
    char *text;
    whorl_sum back;
    demand(whorl_sum_check(host, sum) == WHORL_OK);
    demand(whorl_sum_write(host, sum, NULL, 0, &used) == WHORL_NO_ROOM);
    room = host->reason.index;
    text = (char *)malloc((size_t)room);
    demand(whorl_sum_write(host, sum, text, room, &used) == WHORL_OK && used + 1 == room);
    if (whorl_sum_read(host, text, used, sum->sites, NULL, 0, terms, sum->count, &back) != WHORL_CANCELLED)
        demand(back.count == sum->count &&
               (sum->count == 0 || memcmp(back.terms, sum->terms, (size_t)sum->count * sizeof *terms) == 0));
    free(text);
    free(terms);
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    whorl_host host = whorl_host_default();
    whorl_model *model = NULL;
    int32_t polls = 0;
    whorl_status status;
    host.byte_limit = 64 << 20;
    host.poll = patience;
    host.poll_context = &polls;
    status = whorl_model_read(&host, (const char *)data, size, 0, &model);
    demand((status == WHORL_OK) == (model != NULL));
    demand(status != WHORL_BAD_TEXT || (host.reason.line > 0 && host.reason.column > 0 && host.reason.text[0] != '\0'));
    if (model != NULL) {
        uint64_t k, count = whorl_model_sum_count(model);
        double *values = (double *)calloc((size_t)whorl_model_parameter_count(model) + 1, sizeof *values);
        whorl_complex *weights = (whorl_complex *)calloc((size_t)count + 1, sizeof *weights);
        if (whorl_model_values(&host, model, NULL, 0, values) == WHORL_OK &&
            whorl_model_weights(&host, model, values, weights) == WHORL_OK)
            for (k = 0; k < count; k++)
                demand(whorl_is_finite(weights[k].re) && whorl_is_finite(weights[k].im));
        for (k = 0; k < count && k < 4; k++)
            round_trip(&host, whorl_model_sums(model) + k);
        free(values);
        free(weights);
    }
    whorl_model_free(&host, model);
    demand(host.bytes_used == 0);
    return 0;
}

#ifdef FUZZ_REPLAY
int main(int count, char **name)
{
    static char bytes[1 << 20];
    int k;
    for (k = 1; k < count; k++) {
        FILE *file = fopen(name[k], "rb");
        size_t size;
        if (file == NULL)
            return 1;
        size = fread(bytes, 1, sizeof bytes, file);
        fclose(file);
        LLVMFuzzerTestOneInput((const uint8_t *)bytes, size);
    }
    printf("fuzz_model: %d texts replayed\n", count - 1);
    return 0;
}
#endif
