/* Problems from matrices in memory, and the life of a problem. */
#include <math.h>
#include <stdlib.h>

#include "problem/check.h"
#include "problem/make.h"
#include "problem/pattern.h"

struct flatgain_problem *fg_problem_new(void)
{
    struct flatgain_problem *problem = calloc(1, sizeof *problem);
    if (problem) {
        atomic_init(&problem->references, 1);
        problem->accept_percent = NAN;
    }
    return problem;
}

flatgain_problem *fg_problem_retain(const flatgain_problem *problem)
{
    flatgain_problem *held = (flatgain_problem *)problem; /* the count is not part of the value */
    atomic_fetch_add_explicit(&held->references, 1, memory_order_relaxed);
    return held;
}

void flatgain_problem_free(flatgain_problem *problem)
{
    if (!problem || atomic_fetch_sub_explicit(&problem->references, 1, memory_order_acq_rel) != 1)
        return;
    struct fg_arena arena = problem->arena;
    fg_arena_release(&arena);
    free(problem);
}

static flatgain_status misuse(const flatgain_matrices *given, flatgain_error *error)
{
    flatgain_status bad = FLATGAIN_BAD_ARGUMENT;
    long long n = given->states, m = given->inputs, p = given->outputs;
    if (n < 1 || m < 1 || p < 1)
        return fg_fail(error, bad, "%lld states, %lld inputs, %lld outputs; expected at least one of each", n,
                       m, p);
    long long largest = n > m ? n : m;
    largest = p > largest ? p : largest;
    if (largest * largest > FG_ENTRIES_MAX)
        return fg_fail(error, bad, "%lld states, inputs or outputs; expected at most 2000", largest);
    const double *needed[] = {given->A, given->B, given->C, given->Q, given->R, given->W};
    for (int i = 0; i < 6; i++)
        if (!needed[i])
            return fg_fail(error, bad, "%c is NULL; expected a matrix (only D, N, V may be absent)",
                           "ABCQRW"[i]);
    if (given->accept_percent < 0 || isinf(given->accept_percent))
        return fg_fail(error, bad, "accept_percent is not a percentage of 0 or more; expected one, or NAN");
    return FLATGAIN_OK;
}

static struct fg_matrix take(struct flatgain_problem *problem, int rows, int cols, const double *at)
{
    if (!at)
        return (struct fg_matrix){0};
    return fg_matrix_from_rows(&problem->arena, rows, cols, at);
}

static flatgain_status take_pattern(const struct fg_check *check, const flatgain_matrices *given)
{
    struct fg_arena scratch = {0};
    size_t count = (size_t)given->inputs * (size_t)given->outputs;
    struct fg_pattern_entry *entries = fg_arena_get(&scratch, count * sizeof *entries);
    struct fg_pattern_request request = {.lower = given->lower, .upper = given->upper};
    flatgain_status status = FLATGAIN_OK;
    if (!entries)
        status = fg_no_memory(check->error);
    for (size_t e = 0; status == FLATGAIN_OK && given->fixed && e < count; e++) {
        double value = given->fixed[e];
        if (isinf(value))
            status =
                fg_check_fail(check, "gain.pattern",
                              "fixed gain in row %zu, column %zu is not finite; expected a number or NAN",
                              e / (size_t)given->outputs + 1, e % (size_t)given->outputs + 1);
        entries[e].kind = isnan(value) ? FG_ENTRY_FREE : FG_ENTRY_FIXED;
        entries[e].value = value;
    }
    request.entries = given->fixed ? entries : NULL;
    if (status == FLATGAIN_OK)
        status = fg_pattern_build(check, &request);
    fg_arena_release(&scratch);
    return status;
}

static flatgain_status fill(struct flatgain_problem *problem, const flatgain_matrices *given,
                            flatgain_error *error)
{
    int n = problem->n = given->states, m = problem->m = given->inputs, p = problem->p = given->outputs;
    problem->setting = given->discrete ? FG_DISCRETE : FG_CONTINUOUS;
    problem->reading = given->start ? FG_START : FG_AVERAGE;
    problem->A = take(problem, n, n, given->A);
    problem->B = take(problem, n, m, given->B);
    problem->C = take(problem, p, n, given->C);
    problem->D = take(problem, p, m, given->D);
    problem->Q = take(problem, n, n, given->Q);
    problem->R = take(problem, m, m, given->R);
    problem->N = take(problem, n, m, given->N);
    problem->W = take(problem, n, n, given->W);
    problem->V = take(problem, p, p, given->V);
    problem->has_today = given->today != NULL;
    problem->today = take(problem, m, p, given->today);
    problem->accept_percent = given->accept_percent;
    problem->outputs = fg_arena_get(&problem->arena, sizeof *problem->outputs * (size_t)p);
    if (problem->arena.failed)
        return fg_no_memory(error);
    for (int i = 0; given->lag && i < p; i++)
        problem->outputs[i].lag = given->lag[i];
    const struct fg_check check = {problem, NULL, error};
    flatgain_status status = take_pattern(&check, given);
    return status == FLATGAIN_OK ? fg_problem_check(problem, NULL, error) : status;
}

flatgain_status flatgain_problem_from_matrices(const flatgain_matrices *matrices, flatgain_problem **problem,
                                               flatgain_error *error)
{
    if (problem)
        *problem = NULL;
    if (!problem || !matrices)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "matrices or problem is NULL; expected both");
    flatgain_status status = misuse(matrices, error);
    if (status != FLATGAIN_OK)
        return status;
    struct flatgain_problem *made = fg_problem_new();
    if (!made)
        return fg_no_memory(error);
    status = fill(made, matrices, error);
    if (status != FLATGAIN_OK) {
        flatgain_problem_free(made);
        return status;
    }
    *problem = made;
    return FLATGAIN_OK;
}

int flatgain_problem_inputs(const flatgain_problem *problem)
{
    return problem ? problem->m : 0;
}

int flatgain_problem_outputs(const flatgain_problem *problem)
{
    return problem ? problem->p : 0;
}

int flatgain_problem_states(const flatgain_problem *problem)
{
    return problem ? problem->n : 0;
}

const char *flatgain_problem_title(const flatgain_problem *problem)
{
    return problem ? problem->title : "";
}

const double *flatgain_problem_today(const flatgain_problem *problem)
{
    return problem ? problem->today_rows : NULL;
}
