/* Cost evaluations per local search: every start of the first two batches on every published and open case
 * with a minimum, from the stabilised start to the minimum. Counts, so noise-free. Usage: bench_evaluations
 */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "../unit/cases.h"
#include "design/benchmark.h"
#include "design/local.h"
#include "design/scaling.h"
#include "design/stabilise.h"
#include "design/starts.h"
#include "problem/problem.h"

static int by_size(const void *a, const void *b)
{
    return *(const int *)a - *(const int *)b;
}

enum { STARTS = 16, MOST = 4096 };

int main(void)
{
    static int counts[MOST], total;
    char **names = case_names();
    for (int c = 0; names && names[c]; c++) {
        struct case_data data;
        if (!case_load(names[c], &data) || !data.Q || !data.R || !data.W) /* riccati and response data */
            continue;
        flatgain_problem *problem = case_problem(&data);
        struct fg_arena arena = {0};
        struct fg_model model;
        struct fg_benchmark benchmark;
        struct fg_scaled scaled;
        flatgain_error error;
        int mine[STARTS], count = 0;
        if (problem && fg_model_build(problem, &arena, &model, &error) == FLATGAIN_OK &&
            fg_benchmark(&model.benchmark, &arena, &benchmark, &error) == FLATGAIN_OK &&
            fg_scale(&model.law, &problem->pattern, &benchmark, &arena, &scaled, &error) == FLATGAIN_OK) {
            struct fg_cost *cost = fg_cost_new(&scaled.plant, &scaled.pattern, &arena);
            struct fg_local *local = fg_local_new(scaled.pattern.count, &arena);
            struct fg_stabiliser *stabiliser = fg_stabiliser_new(&scaled.plant, &scaled.pattern, &arena);
            double *theta = fg_arena_doubles(&arena, (size_t)scaled.pattern.count), abscissa;
            struct fg_local_limits limits = {.iterations = 200};
            long other = 0;
            fg_cost_margin(cost, scaled.margin);
            for (int i = 0; i < STARTS; i++) {
                fg_start(&scaled, NULL, 1, i, theta);
                if (!isfinite(fg_cost_at(cost, theta)) &&
                    !fg_stabilise(stabiliser, theta, 2 * scaled.margin, i / 2 % 2 == 0, &limits, &abscissa,
                                  &other))
                    continue;
                struct fg_local_answer answer =
                    fg_local_minimise(local, cost, &scaled.pattern, theta, &limits);
                if (answer.end == FG_LOCAL_MINIMUM && total < MOST)
                    mine[count++] = counts[total++] = (int)answer.evaluations;
            }
        }
        if (count) {
            qsort(mine, (size_t)count, sizeof *mine, by_size);
            printf("%-40s n %3d gains %3d  minima reached %2d  median %3d  most %3d\n", names[c], data.n,
                   data.m * data.p, count, mine[count / 2], mine[count - 1]);
        }
        fg_arena_release(&arena);
        flatgain_problem_free(problem);
        case_free(&data);
    }
    qsort(counts, (size_t)total, sizeof *counts, by_size);
    if (total)
        printf("cost evaluations per local search: %d searches, quartiles %d %d %d, nine tenths below %d\n",
               total, counts[total / 4], counts[total / 2], counts[3 * total / 4], counts[total * 9 / 10]);
    case_names_free(names);
    return total == 0;
}
