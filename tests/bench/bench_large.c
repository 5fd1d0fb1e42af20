/* Large orders through the public interface: wall time, peak memory and growth per doubling of the whole of
 * `tune` (search, benchmarks, modes, margins). m = p = 3. Usage: bench_large [ORDER...] */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <sys/resource.h>
#include <time.h>

#include "../unit/plants.h"
#include "flatgain.h"

static double now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

int main(int argc, char **argv)
{
    double before = NAN;
    printf("%6s %9s %10s %8s %7s %12s\n", "n", "seconds", "MiB", "growth", "starts", "outcome");
    for (int a = 1; a < (argc > 1 ? argc : 4); a++) {
        static const int orders[] = {0, 100, 200, 400};
        int n = argc > 1 ? atoi(argv[a]) : orders[a];
        struct fg_arena arena = {0};
        random_seed((unsigned long long)n);
        struct fg_plant plant = random_plant_of(&arena, false, n, 3, 3);
        for (int i = 0; i < n; i++)
            FG_AT(plant.A, i, i) -= 0.33; /* a few unstable poles are left */
        double *rows[8];
        struct fg_matrix *from[] = {&plant.A, &plant.B, &plant.C, &plant.Q, &plant.R, &plant.N, &plant.W};
        for (int k = 0; k < 7; k++) {
            rows[k] = malloc((size_t)from[k]->rows * (size_t)from[k]->cols * sizeof(double));
            fg_matrix_to_rows(*from[k], rows[k]);
        }
        flatgain_matrices matrices = {.states = n,
                                      .inputs = 3,
                                      .outputs = 3,
                                      .A = rows[0],
                                      .B = rows[1],
                                      .C = rows[2],
                                      .Q = rows[3],
                                      .R = rows[4],
                                      .N = rows[5],
                                      .W = rows[6],
                                      .accept_percent = NAN};
        flatgain_problem *problem;
        flatgain_result *result;
        flatgain_error error;
        if (flatgain_problem_from_matrices(&matrices, &problem, &error) != FLATGAIN_OK) {
            fprintf(stderr, "%s\n", error.text);
            return 1;
        }
        double start = now();
        if (flatgain_tune(problem, NULL, &result, &error) != FLATGAIN_OK) {
            fprintf(stderr, "%s\n", error.text);
            return 1;
        }
        double seconds = now() - start;
        struct rusage usage;
        getrusage(RUSAGE_SELF, &usage);
        printf("%6d %9.2f %10.1f %8.2f %7s %12s J %.10g gap %.3g %%\n", n, seconds,
               (double)usage.ru_maxrss / 1024, seconds / before, "",
               flatgain_outcome_name(flatgain_result_outcome(result)),
               flatgain_result_cost(result, FLATGAIN_COST_GAIN), flatgain_result_gap_percent(result));
        fflush(stdout);
        before = seconds;
        flatgain_result_free(result);
        flatgain_problem_free(problem);
        for (int k = 0; k < 7; k++)
            free(rows[k]);
        fg_arena_release(&arena);
    }
    return 0;
}
