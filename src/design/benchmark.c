/* LQR and LQG cost (design/benchmark.h), over stabilising controllers:
 *
 *   J_LQR = tr(S W),  J_LQG = tr(S W) + tr(E Sigma E'),  E'E = A'S + S A + Q (discrete A'S A - S + Q)
 *
 * S from the control problem (A, B, Q, R, N), Sigma from the filter problem (A', C', W, V): continuous its
 * solution, discrete the covariance after the newest reading. E'E = L'R L (L'(R + B'S B) L) where R permits,
 * and is right without it.
 *
 * A zero on the boundary (a mode that is neither damped nor seen by the weights, or neither damped nor
 * disturbed) leaves no stabilising solution. Every cost is then computed for A + delta I (discrete
 * rho A, rho B, rho^2 W with rho = 1 + delta), where J of each fixed controller is larger and falls with
 * delta, so that the limit for delta -> 0 is exactly the infimum over stabilising controllers. J is smooth
 * in delta down to 0 (the zeros move by delta), so it is extrapolated by Richardson's rule. */
#include "design/benchmark.h"

#include <math.h>
#include <string.h>

#include "base/status.h"
#include "design/limit_solution.h"
#include "linalg/lapack.h"
#include "linalg/riccati.h"

/* Relative decay below which an optimal loop counts as on the boundary: there rounding decides whether the
 * Riccati equation has a solution, so the limit is taken, unless no input moves the mode. */
static const double NEAR_BOUNDARY = 1e-9;

struct side {
    bool solved, trusted; /* trusted: not near the boundary */
    struct fg_limit_solution solution;
};

/* Control and filter problem of the plant with every mode moved outwards by delta. */
static struct fg_limit_problem control_problem(const struct fg_plant *plant, double delta,
                                               struct fg_arena *arena)
{
    struct fg_limit_problem p = {
        plant->discrete, fg_matrix_copy(arena, plant->A), fg_matrix_copy(arena, plant->B), plant->Q, plant->R,
        plant->N};
    if (arena->failed || delta == 0)
        return p;
    for (int i = 0; i < plant->n; i++)
        if (!plant->discrete)
            FG_AT(p.A, i, i) += delta;
    for (size_t i = 0; plant->discrete && i < (size_t)plant->n * plant->n; i++)
        p.A.at[i] *= 1 + delta;
    for (size_t i = 0; plant->discrete && i < (size_t)plant->n * plant->m; i++)
        p.B.at[i] *= 1 + delta;
    return p;
}

static struct fg_limit_problem filter_problem(const struct fg_plant *plant, double delta,
                                              struct fg_arena *arena)
{
    struct fg_limit_problem c = control_problem(plant, delta, arena), p = {.discrete = plant->discrete};
    if (arena->failed)
        return p;
    p.A = fg_matrix_transpose(arena, c.A);
    p.B = fg_matrix_transpose(arena, plant->C);
    p.Q = fg_matrix_copy(arena, plant->W);
    p.R = plant->V;
    p.N = fg_matrix_new(arena, plant->n, plant->p);
    for (size_t i = 0; !arena->failed && plant->discrete && i < (size_t)plant->n * plant->n; i++)
        p.Q.at[i] *= (1 + delta) * (1 + delta);
    return p;
}

static struct side solve_side(bool filter, const struct fg_plant *plant, double delta, struct fg_arena *arena)
{
    struct side side = {0};
    struct fg_limit_problem p = (filter ? filter_problem : control_problem)(plant, delta, arena);
    if (!arena->failed)
        side.solved = fg_limit_solve(&p, arena, &side.solution);
    side.trusted = side.solved && side.solution.decay > NEAR_BOUNDARY;

    return side;
}

/* tr(S W), and tr(E Sigma E') added to it where the filter is given. Each trace is >= 0 but for rounding. */
static double lqr_cost(const struct side *control, struct fg_matrix W)
{
    return fmax(0, fg_matrix_trace_of_product(control->solution.S, W));
}

static double lqg_cost(const struct side *control, const struct side *filter, struct fg_matrix W,
                       struct fg_arena *arena)
{
    struct fg_matrix E = control->solution.factor, Sigma = filter->solution.before;
    struct fg_matrix ES = fg_matrix_new(arena, E.rows, E.cols);
    if (arena->failed)
        return NAN;
    fg_multiply('N', 'N', 1, E, Sigma, 0, ES);
    double sum = 0;
    for (size_t i = 0; i < (size_t)E.rows * E.cols; i++)
        sum += ES.at[i] * E.at[i];
    return lqr_cost(control, W) + fmax(0, sum);
}

/* Richardson extrapolation of J(delta) to 0 as values for delta, delta / 4, ... come in. */
struct extrapolation {
    int count;
    bool ended;
    double row[16], first, last, delta_ratio; /* J of the largest and smallest delta, smallest / largest */
    double value, error;
};

/* Besides the extrapolated value the costs themselves must come down to it, about in proportion to delta:
 * otherwise the small deltas see something that the large ones did not. */
static bool settled(const struct extrapolation *x)
{
    double rounding = 1e-6 * fabs(x->value) + 1e-9 * x->last;
    return x->count > 3 && x->error <= rounding + 1e-12 * x->first &&
           fabs(x->last - x->value) <= 10 * x->delta_ratio * fabs(x->first - x->value) + rounding;
}

/* J is NAN where delta is so large that it makes an immovable mode unstable (the tableau starts again with
 * the next one) or so small that rounding hides it (the tableau ends). */
static void extrapolate(struct extrapolation *x, double J)
{
    double old[16], power = 1;
    if (x->ended)
        return;
    if (isnan(J)) {
        if (settled(x))
            x->ended = true;
        else
            *x = (struct extrapolation){0};
        return;
    }
    memcpy(old, x->row, sizeof old);
    x->row[0] = x->last = J;
    x->delta_ratio = x->count == 0 ? 1 : x->delta_ratio / 4;
    if (x->count == 0) {
        x->first = J;
        x->value = J;
        x->error = INFINITY;
    }
    for (int j = 1; j <= x->count && j < 16; j++) {
        power *= 4;
        x->row[j] = x->row[j - 1] + (x->row[j - 1] - old[j - 1]) / (power - 1);
        double error = fmax(fabs(x->row[j] - x->row[j - 1]), fabs(x->row[j] - old[j - 1]));
        if (error < x->error) {
            x->error = error;
            x->value = x->row[j];
        }
    }
    x->count++;
}

/* The limits delta -> 0 of both costs; NAN where it does not settle. */
static void boundary_limits(const struct fg_plant *plant, bool with_filter, double rate,
                            struct fg_arena *result, double *lqr, double *lqg)
{
    enum { VALUES = 14 };
    struct extrapolation r = {0}, g = {0};
    double delta = 0.1 * rate;
    *lqr = *lqg = NAN;
    for (int k = 0; k < VALUES && !result->failed; k++, delta /= 4) {
        struct fg_arena arena = {0};
        struct side control = solve_side(false, plant, delta, &arena), filter = {0};
        if (with_filter && control.solved)
            filter = solve_side(true, plant, delta, &arena);
        double scale = plant->discrete ? (1 + delta) * (1 + delta) : 1;
        struct fg_matrix W = fg_matrix_copy(&arena, plant->W);
        for (size_t i = 0; W.at && i < (size_t)plant->n * plant->n; i++)
            W.at[i] *= scale;
        if (!arena.failed) {
            extrapolate(&r, control.solved ? lqr_cost(&control, W) : NAN);
            extrapolate(&g, control.solved && filter.solved ? lqg_cost(&control, &filter, W, &arena) : NAN);
        }
        result->failed = result->failed || arena.failed;
        fg_arena_release(&arena);
    }
    if (settled(&r))
        *lqr = fmax(0, r.value);
    if (settled(&g))
        *lqg = fmax(0, g.value);
}

static double fastest_pole(const struct fg_plant *plant, struct fg_matrix L, struct fg_arena *arena)
{
    int n = plant->n, one = 1, info = 0, lwork = 4 * n + 4;
    struct fg_matrix Acl = fg_matrix_copy(arena, plant->A);
    double *re = fg_arena_doubles(arena, (size_t)n), *im = fg_arena_doubles(arena, (size_t)n);
    double *work = fg_arena_doubles(arena, (size_t)lwork), none = 0, fastest = 0;
    if (arena->failed || n == 0)
        return NAN;
    fg_multiply('N', 'N', -1, plant->B, L, 1, Acl);
    if (!fg_all_finite((size_t)n * n, Acl.at))
        return NAN;
    dgeev_("N", "N", &n, Acl.at, &n, re, im, &none, &one, &none, &one, work, &lwork, &info, 1, 1);
    for (int i = 0; info == 0 && i < n; i++)
        fastest = fmax(fastest, hypot(re[i], im[i]));
    return info == 0 ? fastest : NAN;
}

/* The gain of the problem with a small extra weight on every state and on the inputs, 1e-4 of what is
 * natural in balanced states: exists exactly when p is stabilisable. Used for starting points of the
 * search and to tell why a bound does not exist, never for a bound. */
static bool regular_gain(const struct fg_limit_problem *p, struct fg_arena *arena, struct fg_matrix *L)
{
    const double extra = 1e-4;
    int n = p->A.rows, m = p->B.cols;
    struct fg_arena scratch = {0};
    double *d = fg_arena_doubles(&scratch, (size_t)n);
    struct fg_matrix Q = fg_matrix_copy(&scratch, p->Q), R = fg_matrix_copy(&scratch, p->R);
    struct fg_matrix S = fg_matrix_new(&scratch, n, n);
    *L = fg_matrix_new(arena, m, n);
    bool good = !scratch.failed && !arena->failed, memory = false;
    if (good) {
        fg_limit_scaling(p->A, p->B, p->Q, d, &scratch);
        good = !scratch.failed;
    }
    if (good) {
        double largest = 0, size = 0;
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++) {
                double a = FG_AT(p->A, i, j) * d[i] / d[j];
                size += a * a;
                largest = fmax(largest, fabs(FG_AT(Q, i, j)) / d[i] / d[j]);
            }
        double rate = p->discrete || !(size > 0) ? 1 : sqrt(size / n);
        if (largest == 0)
            largest = 1;
        for (int i = 0; i < n; i++)
            FG_AT(Q, i, i) += extra * largest * d[i] * d[i];
        for (int j = 0; j < m; j++) {
            double length = 0;
            for (int i = 0; i < n; i++)
                length += FG_AT(p->B, i, j) * FG_AT(p->B, i, j) * d[i] * d[i];
            FG_AT(R, j, j) += length > 0 ? extra * largest * length / (rate * rate) : 1;
        }
        good = (p->discrete ? fg_riccati_discrete : fg_riccati_continuous)(p->A, p->B, Q, R, p->N, S, *L,
                                                                           &memory);
    }
    arena->failed = arena->failed || scratch.failed || memory;
    fg_arena_release(&scratch);
    return good;
}

static struct fg_bound bound(double cost, bool limit, const char *why)
{
    return (struct fg_bound){cost, limit ? FG_BOUND_LIMIT : FG_BOUND_ATTAINED, limit ? why : NULL};
}

static struct fg_bound no_bound(const char *why)
{
    return (struct fg_bound){NAN, FG_BOUND_NONE, why};
}

static const char FREE_INPUT[] = "an input costs nothing, so ever larger gains come ever closer to this cost";
static const char EXACT_OUTPUT[] =
    "an output has no noise, so ever faster controllers come ever closer to this cost and none reaches it";
static const char ON_BOUNDARY[] = "a mode on the stability boundary is not seen by the weights or not "
                                  "disturbed, so this cost is approached "
                                  "only as that mode is left undamped";
static const char NOT_STABILISABLE[] =
    "the inputs cannot stabilise every mode of the plant, at least not to working accuracy";
static const char NOT_DETECTABLE[] =
    "the outputs do not show every mode that is not stable by itself, at least not to working accuracy";
static const char NOT_SETTLED[] =
    "the Riccati equation has no stabilising solution and its limit could not be computed reliably";

flatgain_status fg_benchmark(const struct fg_plant *plant, struct fg_arena *arena,
                             struct fg_benchmark *benchmark, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct fg_matrix L = {0}, unused;
    *benchmark = (struct fg_benchmark){.fastest = NAN};
    struct side control = solve_side(false, plant, 0, &scratch), filter = {0};
    if (!scratch.failed)
        filter = solve_side(true, plant, 0, &scratch);
    bool stabilisable = control.solved, detectable = filter.solved;
    bool attained = control.trusted && control.solution.has_gain;
    if (!scratch.failed && attained) {
        L = control.solution.L;
    } else if (!scratch.failed) {
        struct fg_limit_problem p = control_problem(plant, 0, &scratch);
        benchmark->has_lqr_gain = !scratch.failed && regular_gain(&p, &scratch, &L);
        stabilisable = stabilisable || benchmark->has_lqr_gain;
    }
    if (!scratch.failed && !filter.solved) {
        struct fg_limit_problem p = filter_problem(plant, 0, &scratch);
        detectable = !scratch.failed && regular_gain(&p, &scratch, &unused);
    }
    benchmark->has_lqr_gain = benchmark->has_lqr_gain || attained;
    if (benchmark->has_lqr_gain && !scratch.failed) {
        benchmark->fastest = fastest_pole(plant, L, &scratch);
        benchmark->L = fg_matrix_copy(arena, L);
    }
    double limit_lqr = NAN, limit_lqg = NAN;
    bool boundary = stabilisable && (!control.trusted || (detectable && !filter.trusted));
    if (boundary && !scratch.failed) {
        double rate = plant->discrete ? 1 : benchmark->fastest;
        boundary_limits(plant, detectable, rate, &scratch, &limit_lqr, &limit_lqg);
    }
    if (scratch.failed || arena->failed) {
        fg_arena_release(&scratch);
        return fg_no_memory(error);
    }
    bool free_input = control.solution.reduced && (!plant->discrete || !control.solution.has_gain);
    bool quiet =
        fg_matrix_is_zero(plant->W) && fg_matrix_is_zero(plant->V); /* any stabilising law has J = 0 */
    bool exact_output = filter.solution.reduced && !plant->discrete && !quiet;
    if (!stabilisable)
        benchmark->lqr = benchmark->lqg = no_bound(NOT_STABILISABLE);
    else if (control.trusted)
        benchmark->lqr = bound(lqr_cost(&control, plant->W), free_input, FREE_INPUT);
    else if (isfinite(limit_lqr))
        benchmark->lqr = bound(limit_lqr, true, ON_BOUNDARY);
    else if (control.solved)
        benchmark->lqr = bound(lqr_cost(&control, plant->W), free_input, FREE_INPUT);
    else
        benchmark->lqr = no_bound(NOT_SETTLED);
    if (stabilisable && !detectable)
        benchmark->lqg = no_bound(NOT_DETECTABLE);
    else if (stabilisable && boundary && isfinite(limit_lqg))
        benchmark->lqg = bound(limit_lqg, true, ON_BOUNDARY);
    else if (stabilisable && control.solved && filter.solved)
        benchmark->lqg = bound(lqg_cost(&control, &filter, plant->W, &scratch), free_input || exact_output,
                               exact_output ? EXACT_OUTPUT : FREE_INPUT);
    else if (stabilisable)
        benchmark->lqg = no_bound(NOT_SETTLED);
    /* two extrapolations that should agree may differ by rounding */
    if (benchmark->lqg.kind != FG_BOUND_NONE && benchmark->lqr.kind != FG_BOUND_NONE)
        benchmark->lqg.cost = fmax(benchmark->lqg.cost, benchmark->lqr.cost);
    bool failed = scratch.failed;
    fg_arena_release(&scratch);
    return failed ? fg_no_memory(error) : FLATGAIN_OK;
}
