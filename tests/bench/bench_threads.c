/* Two threads against one: wall time of flatgain_tune, alternating in one run, medians. Usage:
 * bench_threads FILE... or random:ORDER... */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "random_problem.h"

static double now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static int by_size(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

enum { RUNS = 9 };

int main(int argc, char **argv)
{
    for (int a = 1; a < argc; a++) {
        flatgain_problem *problem = NULL;
        flatgain_error error = {.text = "no problem"};
        if (strncmp(argv[a], "random:", 7) == 0)
            problem = random_problem(atoi(argv[a] + 7));
        else
            flatgain_problem_read(argv[a], &problem, &error);
        if (!problem) {
            fprintf(stderr, "%s\n", error.text);
            return 1;
        }
        double seconds[2][RUNS], ratio[RUNS];
        for (int r = 0; r < RUNS; r++) {
            for (int threads = 1; threads <= 2; threads++) {
                flatgain_options options = flatgain_options_default();
                options.threads = threads;
                flatgain_result *result;
                double start = now();
                if (flatgain_tune(problem, &options, &result, &error) != FLATGAIN_OK)
                    return 1;
                seconds[threads - 1][r] = now() - start;
                flatgain_result_free(result);
            }
            ratio[r] = seconds[0][r] / seconds[1][r];
        }
        for (int t = 0; t < 2; t++)
            qsort(seconds[t], RUNS, sizeof(double), by_size);
        qsort(ratio, RUNS, sizeof(double), by_size);
        printf("%-40s one thread %9.2f ms, two %9.2f ms, ratio %.2f (%.2f to %.2f)\n", argv[a],
               1e3 * seconds[0][RUNS / 2], 1e3 * seconds[1][RUNS / 2], ratio[RUNS / 2], ratio[0],
               ratio[RUNS - 1]);
        flatgain_problem_free(problem);
    }
    return 0;
}
