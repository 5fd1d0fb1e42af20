#include <math.h>
#include <stdlib.h>
#include <time.h>

#include "api/result.h"
#include "assess/assemble.h"
#include "linalg/matrix.h"

enum { DEFAULT_STARTS = 96, MOST_STARTS = 100000, MOST_THREADS = 256 };

flatgain_options flatgain_options_default(void)
{
    return (flatgain_options){.starts = DEFAULT_STARTS, .seed = 1};
}

static flatgain_status check_options(const flatgain_options *options, flatgain_error *error)
{
    if (options->starts < 1 || options->starts > MOST_STARTS)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "starts is %d; expected 1 to %d", options->starts,
                       MOST_STARTS);
    if (options->threads < 0 || options->threads > MOST_THREADS)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "threads is %d; expected 0 (one per processor) to %d",
                       options->threads, MOST_THREADS);
    return FLATGAIN_OK;
}

/* The problem is shared by reference: a result keeps it alive. */
static flatgain_result *new_result(const flatgain_problem *problem)
{
    flatgain_result *result = calloc(1, sizeof *result);
    if (result)
        result->problem = fg_problem_retain(problem);
    return result;
}

void flatgain_result_free(flatgain_result *result)
{
    if (!result)
        return;
    fg_arena_release(&result->findings.arena);
    flatgain_problem_free(result->problem);
    free(result);
}

static double seconds_now(void)
{
    struct timespec now;
    clock_gettime(CLOCK_MONOTONIC, &now);
    return (double)now.tv_sec + 1e-9 * (double)now.tv_nsec;
}

enum job { TUNE, JUDGE, INSPECT };

static flatgain_status run(enum job job, const flatgain_problem *problem, const double *gain,
                           const flatgain_options *options, flatgain_result **result, flatgain_error *error)
{
    if (error)
        *error = (flatgain_error){0};
    if (!result)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "result is NULL; expected a place for it");
    *result = NULL;
    if (!problem)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "problem is NULL");
    flatgain_options defaults = flatgain_options_default();
    if (!options)
        options = &defaults;
    flatgain_status status = check_options(options, error);
    if (status != FLATGAIN_OK)
        return status;
    if (job == JUDGE && (!gain || !fg_all_finite((size_t)problem->m * (size_t)problem->p, gain)))
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "the gain to judge is missing or not finite");
    flatgain_result *made = new_result(problem);
    if (!made)
        return fg_no_memory(error);
    double start = seconds_now();
    if (job == TUNE)
        status = fg_assemble_tune(problem, options, &made->findings, error);
    else if (job == JUDGE)
        status = fg_assemble_judge(problem, gain, &made->findings, error);
    else
        status = fg_assemble_inspect(problem, &made->findings, error);
    made->findings.search.seconds = seconds_now() - start;
    if (status != FLATGAIN_OK) {
        flatgain_result_free(made);
        return status;
    }
    *result = made;
    return FLATGAIN_OK;
}

flatgain_status flatgain_tune(const flatgain_problem *problem, const flatgain_options *options,
                              flatgain_result **result, flatgain_error *error)
{
    return run(TUNE, problem, NULL, options, result, error);
}

flatgain_status flatgain_judge(const flatgain_problem *problem, const double *gain,
                               const flatgain_options *options, flatgain_result **result,
                               flatgain_error *error)
{
    return run(JUDGE, problem, gain, options, result, error);
}

flatgain_status flatgain_inspect(const flatgain_problem *problem, const flatgain_options *options,
                                 flatgain_result **result, flatgain_error *error)
{
    return run(INSPECT, problem, NULL, options, result, error);
}
