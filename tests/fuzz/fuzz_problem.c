/* Fuzzing of the problem reader: any bytes give a problem or one error text, never a crash or a leak.
 * Whatever was read must be finite, named, and within its bounds. fuzz_gain.c is built the same way:
 *
 *     clang -g -O1 -std=c11 -D_GNU_SOURCE -fsanitize=fuzzer,address,undefined -fno-sanitize-recover=all \
 *         -Iinclude -Isrc tests/fuzz/fuzz_problem.c src/problem/[a-z]*.c src/base/[a-z]*.c
 * src/linalg/matrix.c \
 *         $(pkg-config --cflags --libs lapack blas yaml-0.1) -lm -lpthread -o build/fuzz_problem
 *     mkdir -p build/found
 *     build/fuzz_problem -max_total_time=240 -max_len=1500 build/found tests/fuzz/corpus/problem */
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "problem/problem.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static void need(bool right)
{
    if (!right)
        abort();
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size)
{
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    flatgain_status status =
        flatgain_problem_parse((const char *)data, size, "f", "/nonexistent", &problem, &error);
    if (status != FLATGAIN_OK) {
        need(!problem && (status == FLATGAIN_BAD_PROBLEM || status == FLATGAIN_CANNOT_READ));
        need(error.status == status && strncmp(error.text, "f:", 2) == 0 && strstr(error.text, "; expected"));
        need(error.line > 0 && error.column > 0 && !strchr(error.text, '\n'));
        return 0;
    }
    const struct fg_pattern *pattern = &problem->pattern;
    const struct fg_matrix all[] = {problem->A, problem->B, problem->C, problem->D, problem->W,
                                    problem->V, problem->Q, problem->R, problem->N};
    for (size_t i = 0; i < sizeof all / sizeof *all; i++)
        need(fg_all_finite((size_t)all[i].rows * (size_t)all[i].cols, all[i].at));
    for (int k = 0; k < pattern->count; k++)
        need(pattern->lower[k] < pattern->upper[k]);
    for (int e = 0; e < pattern->m * pattern->p; e++)
        need(pattern->index[e] >= -1 && pattern->index[e] < pattern->count);
    for (int i = 0; i < problem->p; i++)
        need(problem->outputs[i].name && problem->outputs[i].unit && problem->outputs[i].lag >= 0);
    flatgain_problem_free(problem);
    return 0;
}
