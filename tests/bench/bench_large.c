/* Large orders through the public interface: wall time, peak memory and growth of the whole of `tune`
 * (search, benchmarks, modes, margins). m = p = 3. Each order in a process of its own, so that the memory is
 * its own. Usage: bench_large ORDER... */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <sys/resource.h>
#include <sys/wait.h>
#include <time.h>
#include <unistd.h>

#include "random_problem.h"

static double now(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static int tune(int n)
{
    flatgain_problem *problem = random_problem(n);
    flatgain_result *result;
    flatgain_error error;
    if (!problem)
        return 1;
    if (flatgain_tune(problem, NULL, &result, &error) != FLATGAIN_OK) {
        fprintf(stderr, "%s\n", error.text);
        return 1;
    }
    printf("%6d  %-8s J %.10g, %.3g %% above LQG", n, flatgain_outcome_name(flatgain_result_outcome(result)),
           flatgain_result_cost(result, FLATGAIN_COST_GAIN), flatgain_result_gap_percent(result));
    fflush(stdout);
    flatgain_result_free(result);
    flatgain_problem_free(problem);
    return 0;
}

int main(int argc, char **argv)
{
    double before = NAN;
    for (int a = 1; a < argc; a++) {
        double start = now();
        pid_t child = fork();
        if (child == 0)
            _exit(tune(atoi(argv[a])));
        int status;
        struct rusage usage;
        if (child < 0 || wait4(child, &status, 0, &usage) < 0 || status != 0)
            return 1;
        double seconds = now() - start;
        printf("  %8.2f s  %7.1f MiB", seconds, (double)usage.ru_maxrss / 1024);
        if (a > 1)
            printf("  %.2f times the line before", seconds / before);
        printf("\n");
        fflush(stdout);
        before = seconds;
    }
    return 0;
}
