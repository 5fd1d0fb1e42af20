/* Times one problem file. Prints: J and median seconds of one local search from K = 0 (the start of the
 * script in script_tuner.py), cost evaluations of it, then J and median seconds of the whole of
 * flatgain_tune (all starts, benchmarks, margins). Usage: bench_tune FILE [THREADS] */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "design/benchmark.h"
#include "design/local.h"
#include "design/scaling.h"
#include "flatgain.h"
#include "problem/problem.h"

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

enum { RUNS = 7 };

int main(int argc, char **argv)
{
    flatgain_problem *problem;
    flatgain_error error;
    if (argc < 2 || flatgain_problem_read(argv[1], &problem, &error) != FLATGAIN_OK) {
        fprintf(stderr, "%s\n", argc < 2 ? "usage: bench_tune FILE [THREADS]" : error.text);
        return 1;
    }
    double local_s[RUNS], tune_s[RUNS], J = NAN, tuned = NAN;
    long evaluations = 0;
    for (int r = 0; r < RUNS; r++) {
        struct fg_arena arena = {0};
        struct fg_model model;
        struct fg_benchmark benchmark;
        struct fg_scaled scaled;
        if (fg_model_build(problem, &arena, &model, &error) ||
            fg_benchmark(&model.benchmark, &arena, &benchmark, &error) ||
            fg_scale(&model.law, &problem->pattern, &benchmark, &arena, &scaled, &error))
            return 1;
        struct fg_cost *cost = fg_cost_new(&scaled.plant, &scaled.pattern, &arena);
        struct fg_local *local = fg_local_new(scaled.pattern.count, &arena);
        double *theta = fg_arena_doubles(&arena, (size_t)scaled.pattern.count);
        fg_cost_margin(cost, scaled.margin);
        struct fg_local_limits limits = {.iterations = 200};
        double start = now();
        struct fg_local_answer answer = fg_local_minimise(local, cost, &scaled.pattern, theta, &limits);
        local_s[r] = now() - start;
        J = answer.J;
        evaluations = answer.evaluations;
        fg_arena_release(&arena);

        flatgain_options options = flatgain_options_default();
        options.threads = argc > 2 ? atoi(argv[2]) : 0;
        flatgain_result *result;
        start = now();
        if (flatgain_tune(problem, &options, &result, &error) != FLATGAIN_OK)
            return 1;
        tune_s[r] = now() - start;
        tuned = flatgain_result_cost(result, FLATGAIN_COST_GAIN);
        flatgain_result_free(result);
    }
    qsort(local_s, RUNS, sizeof *local_s, by_size);
    qsort(tune_s, RUNS, sizeof *tune_s, by_size);
    printf("%.17g %.6g %ld %.17g %.6g\n", J, local_s[RUNS / 2], evaluations, tuned, tune_s[RUNS / 2]);
    flatgain_problem_free(problem);
    return 0;
}
