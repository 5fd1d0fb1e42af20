/* Law plant of the continuous setting with sensor lags, for the outputs i that have a lag tau_i > 0:
 *
 *     d/dt [x ; f] = [ A      0    ] [x ; f] + [ B     ] u + [ w      ]     f_i: filtered output
 *                    [ C_i/t  -1/t ]           [ D_i/t ]     [ v_i/t  ]     t = tau_i
 *     y_i = f_i        (outputs without a lag keep C_i x + D_i u)
 *
 * White noise through a static gain would give u infinite variance, so V reaches the law only through
 * the filters: cov of the filter noise is V_ij / (tau_i tau_j), independent of w. Weights see x and u
 * only: Q and N are padded with zeros. A dynamic controller can undo the filter, so the benchmark is the
 * plant without lags and with V as given.
 *
 * Start reading: W is X0 = E[x0 x0'], the filters start at rest (f = 0 in deviations), so the block of
 * X0 that belongs to them is 0; there is no noise. */
#include "plant/model.h"

#include <string.h>

static bool has_lag(const struct flatgain_problem *problem, int output)
{
    return problem->setting == FG_CONTINUOUS && problem->outputs[output].lag > 0;
}

static void copy_block(struct fg_matrix from, struct fg_matrix to)
{
    for (int j = 0; j < from.cols; j++)
        memcpy(&FG_AT(to, 0, j), &FG_AT(from, 0, j), (size_t)from.rows * sizeof(double));
}

/* The problem as it stands. Matrices are shared with the problem, which outlives the model. */
static struct fg_plant plain_plant(const struct flatgain_problem *problem)
{
    return (struct fg_plant){.discrete = problem->setting == FG_DISCRETE,
                             .n = problem->n,
                             .m = problem->m,
                             .p = problem->p,
                             .A = problem->A,
                             .B = problem->B,
                             .C = problem->C,
                             .D = problem->D,
                             .Q = problem->Q,
                             .R = problem->R,
                             .N = problem->N,
                             .W = problem->W,
                             .V = problem->V};
}

/* Fills the rows and columns of the filter states; state n + k belongs to output filtered[k]. */
static void append_filters(const struct flatgain_problem *problem, int count, const int *filtered,
                           struct fg_plant *law)
{
    int n = problem->n;
    for (int k = 0; k < count; k++) {
        int i = filtered[k];
        double tau = problem->outputs[i].lag;
        for (int j = 0; j < n; j++) {
            FG_AT(law->A, n + k, j) = FG_AT(problem->C, i, j) / tau;
            FG_AT(law->C, i, j) = 0;
        }
        FG_AT(law->A, n + k, n + k) = -1 / tau;
        FG_AT(law->C, i, n + k) = 1;
        for (int j = 0; j < problem->m; j++) {
            FG_AT(law->B, n + k, j) = FG_AT(problem->D, i, j) / tau;
            FG_AT(law->D, i, j) = 0;
        }
        if (problem->reading == FG_START)
            continue;
        for (int l = 0; l < count; l++)
            FG_AT(law->W, n + k, n + l) =
                FG_AT(problem->V, i, filtered[l]) / (tau * problem->outputs[filtered[l]].lag);
    }
}

/* Noise that would reach a static gain directly: the reader refuses it with its place, this is the last
 * line of defence for problems made in another way. */
static flatgain_status check_noise(const struct flatgain_problem *problem, flatgain_error *error)
{
    if (problem->setting != FG_CONTINUOUS || problem->reading == FG_START)
        return FLATGAIN_OK; /* a start has no noise: its V is not used */
    for (int i = 0; i < problem->p; i++)
        for (int j = 0; j < problem->p; j++)
            if (FG_AT(problem->V, i, j) != 0 && !(has_lag(problem, i) && has_lag(problem, j)))
                return fg_fail(error, FLATGAIN_BAD_PROBLEM,
                               "output %s has noise but no lag: in continuous time white noise through a "
                               "static gain gives the input infinite variance; give the output a lag",
                               problem->outputs[has_lag(problem, i) ? j : i].name);
    return FLATGAIN_OK;
}

flatgain_status fg_model_build(const struct flatgain_problem *problem, struct fg_arena *arena,
                               struct fg_model *model, flatgain_error *error)
{
    int n = problem->n, m = problem->m, p = problem->p, count = 0;
    flatgain_status status = check_noise(problem, error);
    if (status != FLATGAIN_OK)
        return status;
    int *filtered = fg_arena_ints(arena, (size_t)p);
    if (!filtered)
        return fg_no_memory(error);
    for (int i = 0; i < p; i++)
        if (has_lag(problem, i))
            filtered[count++] = i;

    int order = n + count;
    memset(model, 0, sizeof *model);
    model->benchmark = plain_plant(problem);
    if (problem->reading == FG_START)
        model->benchmark.V = fg_matrix_new(arena, p, p);
    model->law = model->benchmark;
    model->state_names = fg_arena_get(arena, (size_t)order * sizeof *model->state_names);
    if (count > 0) {
        struct fg_plant *law = &model->law;
        law->n = order;
        law->A = fg_matrix_new(arena, order, order);
        law->B = fg_matrix_new(arena, order, m);
        law->C = fg_matrix_new(arena, p, order);
        law->D = fg_matrix_copy(arena, problem->D);
        law->Q = fg_matrix_new(arena, order, order);
        law->N = fg_matrix_new(arena, order, m);
        law->W = fg_matrix_new(arena, order, order);
        law->V = fg_matrix_new(arena, p, p);
    }
    if (arena->failed)
        return fg_no_memory(error);
    for (int i = 0; i < n; i++)
        model->state_names[i] = problem->states[i].name;
    for (int k = 0; k < count; k++)
        model->state_names[n + k] = fg_arena_text(arena, "filtered %s", problem->outputs[filtered[k]].name);
    if (count > 0) {
        copy_block(problem->A, model->law.A);
        copy_block(problem->B, model->law.B);
        copy_block(problem->C, model->law.C);
        copy_block(problem->Q, model->law.Q);
        copy_block(problem->N, model->law.N);
        copy_block(problem->W, model->law.W);
        append_filters(problem, count, filtered, &model->law);
    }
    return arena->failed ? fg_no_memory(error) : FLATGAIN_OK;
}
