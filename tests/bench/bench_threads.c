/* Two threads against one: wall time of flatgain_tune, alternating in one run, medians, and beside it what
 * the machine gives two threads at all: the same number of Schur forms (dgees, n = 50) by one thread and by
 * two. Usage: bench_threads FILE... or random:ORDER... */
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "linalg/lapack.h"
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

enum { RUNS = 9, ORDER = 50, FORMS = 40 };

static int never(const double *a, const double *b)
{
    (void)a;
    (void)b;
    return 0;
}

static void *schur_forms(void *count)
{
    int n = ORDER, lwork = 40 * ORDER, info, none;
    size_t size = ORDER * ORDER;
    double *A = malloc(size * sizeof(double)), *T = malloc(size * sizeof(double));
    double *Z = malloc(size * sizeof(double)), *w = malloc(2 * ORDER * sizeof(double));
    double *work = malloc((size_t)lwork * sizeof(double));
    unsigned state = 1;
    for (size_t i = 0; i < size; i++)
        A[i] = (double)((state = state * 1103515245u + 12345u) >> 16) / 65536 - 0.5;
    for (int k = 0; k < *(int *)count; k++) {
        memcpy(T, A, size * sizeof(double));
        dgees_("V", "N", never, &n, T, &n, &none, w, w + n, Z, &n, work, &lwork, NULL, &info, 1, 1);
    }
    free(A);
    free(T);
    free(Z);
    free(w);
    free(work);
    return NULL;
}

/* Seconds of FORMS Schur forms on one thread over those of half of them on each of two. */
static double what_two_threads_give(void)
{
    int all = FORMS, half = FORMS / 2;
    pthread_t other;
    double start = now();
    schur_forms(&all);
    double one = now() - start;
    start = now();
    pthread_create(&other, NULL, schur_forms, &half);
    schur_forms(&half);
    pthread_join(other, NULL);
    return one / (now() - start);
}

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
        double seconds[2][RUNS], ratio[RUNS], given[RUNS], share[RUNS];
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
            given[r] = what_two_threads_give();
            share[r] = ratio[r] / given[r];
        }
        for (int t = 0; t < 2; t++)
            qsort(seconds[t], RUNS, sizeof(double), by_size);
        qsort(ratio, RUNS, sizeof(double), by_size);
        qsort(given, RUNS, sizeof(double), by_size);
        qsort(share, RUNS, sizeof(double), by_size);
        const char *name = strrchr(argv[a], '/');
        printf("%-28s one thread %8.2f ms, two %8.2f ms, ratio %.2f (machine %.2f, share of it %.2f)\n",
               name ? name + 1 : argv[a], 1e3 * seconds[0][RUNS / 2], 1e3 * seconds[1][RUNS / 2],
               ratio[RUNS / 2], given[RUNS / 2], share[RUNS / 2]);
        flatgain_problem_free(problem);
    }
    return 0;
}
