/* Local search: cost evaluations and time of the trust-region Newton method alone, of NLopt's L-BFGS as a
 * first phase and Newton as finish, and of NLopt's L-BFGS and SLSQP alone (stopped at 1e-10 relative).
 * Random plants, from random stabilising gains; medians. Usage: bench_local */
#include <math.h>
#include <nlopt.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "../unit/plants.h"
#include "design/first_phase.h"
#include "design/local.h"

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

static double median(int count, double *values)
{
    qsort(values, (size_t)count, sizeof *values, by_size);
    return count ? values[count / 2] : NAN;
}

static long calls;
static double objective(unsigned count, const double *theta, double *gradient, void *data)
{
    static double start;
    calls++;
    double J = fg_cost_at(data, theta);
    if (calls == 1)
        start = J;
    if (!isfinite(J)) {
        if (gradient)
            memset(gradient, 0, count * sizeof(double));
        return 1e8;
    }
    if (gradient) {
        fg_cost_gradient(data, gradient);
        for (unsigned k = 0; k < count; k++)
            gradient[k] /= start;
    }
    return J / start;
}

enum { WAYS = 4, PLANTS = 15 };
static const char *ways[WAYS] = {"Newton", "L-BFGS then Newton", "L-BFGS alone", "SLSQP alone"};

int main(void)
{
    static const int shapes[][3] = {{4, 2, 2},  {10, 2, 3},   {20, 3, 3}, {20, 5, 6},
                                    {30, 8, 8}, {20, 10, 10}, {50, 3, 3}, {40, 12, 12}};
    setvbuf(stdout, NULL, _IOLBF, 0);
    printf("%4s %4s  %-20s %8s %10s %8s\n", "n", "q", "way", "costs", "ms", "solved");
    for (size_t s = 0; s < sizeof shapes / sizeof *shapes; s++) {
        double costs[WAYS][PLANTS], ms[WAYS][PLANTS];
        int solved[WAYS] = {0}, plants = 0;
        int n = shapes[s][0], m = shapes[s][1], p = shapes[s][2], q = m * p;
        random_seed(1000 + s);
        while (plants < PLANTS) {
            struct fg_arena arena = {0};
            struct fg_plant plant = random_plant_of(&arena, false, n, m, p);
            for (int i = 0; i < n; i++) /* stable or nearly so without control */
                FG_AT(plant.A, i, i) -= 0.4;
            struct fg_pattern pattern = free_pattern(&arena, m, p);
            struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
            struct fg_local *local = fg_local_new(q, &arena);
            double *start = fg_arena_doubles(&arena, q), *theta = fg_arena_doubles(&arena, q),
                   *best = fg_arena_doubles(&arena, q);
            fg_cost_margin(cost, 1e-6);
            bool stable = false;
            for (int attempt = 0; attempt < 30 && !stable; attempt++) {
                for (int k = 0; k < q; k++)
                    start[k] = 0.3 * random_normal() / sqrt(n);
                stable = isfinite(fg_cost_at(cost, start));
            }
            if (stable) {
                double lowest = INFINITY, ends[WAYS];
                for (int w = 0; w < WAYS; w++) {
                    struct fg_local_limits limits = {.iterations = 200};
                    long evaluations = 0;
                    memcpy(theta, start, (size_t)q * sizeof(double));
                    double begin = now();
                    if (w == 1)
                        fg_first_phase(cost, &pattern, 10 * q, &limits, theta, best, &evaluations);
                    if (w < 2) {
                        struct fg_local_answer answer =
                            fg_local_minimise(local, cost, &pattern, theta, &limits);
                        evaluations += answer.evaluations;
                        ends[w] = answer.end == FG_LOCAL_MINIMUM ? answer.J : INFINITY;
                    } else {
                        nlopt_opt optimiser =
                            nlopt_create(w == 2 ? NLOPT_LD_LBFGS : NLOPT_LD_SLSQP, (unsigned)q);
                        double value;
                        calls = 0;
                        nlopt_set_min_objective(optimiser, objective, cost);
                        nlopt_set_vector_storage(optimiser, 10);
                        nlopt_set_ftol_rel(optimiser, 1e-12);
                        nlopt_set_xtol_rel(optimiser, 1e-10);
                        nlopt_set_maxeval(optimiser, 2000);
                        nlopt_optimize(optimiser, theta, &value);
                        ends[w] = fg_cost_at(cost, theta);
                        evaluations = calls;
                        nlopt_destroy(optimiser);
                    }
                    costs[w][plants] = (double)evaluations;
                    ms[w][plants] = 1e3 * (now() - begin);
                    lowest = fmin(lowest, ends[w]);
                }
                for (int w = 0; w < WAYS; w++)
                    solved[w] += ends[w] <= lowest * (1 + 1e-8);
                plants++;
            }
            fg_arena_release(&arena);
        }
        for (int w = 0; w < WAYS; w++)
            printf("%4d %4d  %-20s %8.0f %10.2f %5d/%d\n", n, q, ways[w], median(PLANTS, costs[w]),
                   median(PLANTS, ms[w]), solved[w], PLANTS);
    }
    return 0;
}
