/* Cost with gradient against its floor: one dgees and two dtrsyl of the same size. Ratios of medians in
 * one run. Usage: bench_cost */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "design/cost.h"
#include "linalg/lapack.h"
#include "../unit/plants.h"

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
    return values[count / 2];
}

static int never(const double *a, const double *b)
{
    (void)a;
    (void)b;
    return 0;
}

int main(void)
{
    static const int orders[] = {4, 6, 10, 20, 30, 50, 100, 200, 400};
    printf("cost with gradient against one dgees and two dtrsyl (medians, one thread)\n");
    printf("%6s %10s %14s %14s %7s %14s %14s %10s\n", "n", "setting", "floor us", "cost+grad us", "ratio",
           "cost us", "Hessian us", "dgees us");
    for (size_t k = 0; k < sizeof orders / sizeof *orders; k++)
        for (int discrete = 0; discrete < 2; discrete++) {
            struct fg_arena arena = {0};
            int n = orders[k], m = n < 10 ? 2 : 3, p = m, q = m * p;
            random_seed((unsigned long long)n);
            struct fg_plant plant = random_plant_of(&arena, discrete, n, m, p);
            for (int i = 0; i < n; i++) /* stable without control, so that every evaluation counts */
                FG_AT(plant.A, i, i) -= discrete ? 0 : 1;
            if (discrete)
                for (int i = 0; i < n * n; i++)
                    plant.A.at[i] *= 0.7;
            struct fg_pattern pattern = free_pattern(&arena, m, p);
            struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
            double theta[9] = {0}, gradient[9], hessian[81];
            int lwork = 20 * n, info, sdim, one = 1,
                runs = n <= 20    ? 2001
                       : n <= 100 ? 201
                       : n <= 200 ? 21
                                  : 5;
            struct fg_matrix T = fg_matrix_new(&arena, n, n), Z = fg_matrix_new(&arena, n, n),
                             X = fg_matrix_new(&arena, n, n);
            double *wr = fg_arena_doubles(&arena, n), *wi = fg_arena_doubles(&arena, n),
                   *work = fg_arena_doubles(&arena, (size_t)lwork);
            double *floor_s = malloc((size_t)runs * sizeof(double)),
                   *ours = malloc((size_t)runs * sizeof(double));
            double *value = malloc((size_t)runs * sizeof(double)),
                   *second = malloc((size_t)runs * sizeof(double)), scale;
            double *schur = malloc((size_t)runs * sizeof(double));
            for (int r = 0; r < runs; r++) {
                for (int i = 0; i < q; i++)
                    theta[i] = 1e-3 * random_uniform();
                double start = now();
                double J = fg_cost_at(cost, theta);
                double middle = now();
                fg_cost_gradient(cost, gradient);
                double end = now();
                fg_cost_hessian(cost, hessian);
                double last = now();
                ours[r] = end - start;
                value[r] = middle - start;
                second[r] = last - end;
                if (!isfinite(J)) {
                    fprintf(stderr, "n = %d: not stable\n", n);
                    return 1;
                }
                memcpy(T.at, plant.A.at, (size_t)n * n * sizeof(double));
                memcpy(X.at, plant.W.at, (size_t)n * n * sizeof(double));
                start = now();
                dgees_("V", "N", never, &n, T.at, &n, &sdim, wr, wi, Z.at, &n, work, &lwork, NULL, &info, 1,
                       1);
                schur[r] = now() - start;
                dtrsyl_("N", "T", &one, &n, &n, T.at, &n, T.at, &n, X.at, &n, &scale, &info, 1, 1);
                dtrsyl_("T", "N", &one, &n, &n, T.at, &n, T.at, &n, X.at, &n, &scale, &info, 1, 1);
                floor_s[r] = now() - start;
            }
            double f = median(runs, floor_s), c = median(runs, ours);
            printf("%6d %10s %14.1f %14.1f %7.2f %14.1f %14.1f %10.1f\n", n,
                   discrete ? "discrete" : "continuous", 1e6 * f, 1e6 * c, c / f, 1e6 * median(runs, value),
                   1e6 * median(runs, second), 1e6 * median(runs, schur));
            free(floor_s);
            free(ours);
            free(value);
            free(second);
            free(schur);
            fg_arena_release(&arena);
        }
    return 0;
}
