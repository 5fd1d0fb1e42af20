#include "assess/assemble.h"

#include <math.h>
#include <string.h>

#include "assess/assembly.h"
#include "assess/margins.h"
#include "linalg/factor.h"

/* ---- before any gain ------------------------------------------------------------------------- */

static bool is_restricted(const struct fg_pattern *pattern)
{
    if (pattern->count != pattern->m * pattern->p)
        return true;
    for (int k = 0; k < pattern->count; k++)
        if (isfinite(pattern->lower[k]) || isfinite(pattern->upper[k]))
            return true;
    return false;
}

static void make_free_pattern(struct fg_assembly *a)
{
    int m = a->problem->m, p = a->problem->p, count = m * p;
    struct fg_pattern *free = &a->free;
    *free = (struct fg_pattern){.m = m, .p = p, .count = count};
    free->index = fg_arena_ints(a->arena, (size_t)count);
    free->sign = fg_arena_doubles(a->arena, (size_t)count);
    free->fixed = fg_arena_doubles(a->arena, (size_t)count);
    free->lower = fg_arena_doubles(a->arena, (size_t)count);
    free->upper = fg_arena_doubles(a->arena, (size_t)count);
    if (a->arena->failed)
        return;
    for (int k = 0; k < count; k++) {
        free->index[k] = k;
        free->sign[k] = 1;
        free->lower[k] = -INFINITY;
        free->upper[k] = INFINITY;
    }
}

static void set_missing(struct fg_findings *f)
{
    f->complete = true;
    f->cost = f->cost_none = f->cost_today = f->cost_lqg = f->cost_lqr = NAN;
    f->gap_percent = f->captured_percent = NAN;
    f->verdict_text = f->summary = "";
    f->radius = f->abscissa = f->condition = NAN;
    f->peak_sensitivity = f->peak_frequency = NAN;
    f->search.residual = f->search.smallest_curvature = f->search.expected_minima = NAN;
    f->search.least_unstable = f->search.seconds = NAN;
    f->proof.text = f->proof.states = "";
    f->proof.re = f->proof.im = f->proof.sum = NAN;
}

static double finite_or_nan(double value)
{
    return isfinite(value) ? value : NAN;
}

/* One entry for each pole: a pair of the modes gives two. `order` poles come out. */
static struct fg_pole *poles_from(struct fg_assembly *a, const struct fg_modes *modes)
{
    struct fg_pole *poles = fg_arena_get(a->arena, (size_t)a->model.law.n * sizeof *poles);
    if (!poles)
        return NULL;
    bool discrete = a->model.law.discrete;
    int count = 0;
    for (int k = 0; k < modes->count; k++) {
        const struct fg_mode *mode = &modes->mode[k];
        double re = mode->re, im = fabs(mode->im), modulus = hypot(re, im);
        double decay = discrete ? -log(modulus) : -re; /* of the equivalent continuous pole ln z */
        double turn = discrete ? atan2(im, re) : im;
        double size = hypot(decay, turn);
        struct fg_pole pole = {.re = re, .im = im, .speed = modulus, .states = mode->states};
        pole.damping = size > 0 && isfinite(size) ? decay / size : NAN;
        for (int side = 0; side < (im != 0 ? 2 : 1) && count < a->model.law.n; side++) {
            pole.im = side ? -im : im;
            poles[count++] = pole;
        }
    }
    return count == a->model.law.n ? poles : NULL;
}

/* Model, benchmarks, open loop, costs without control and with today's gain. */
static flatgain_status begin(struct fg_assembly *a, const struct flatgain_problem *problem,
                             struct fg_findings *f, flatgain_error *error)
{
    *a = (struct fg_assembly){.problem = problem, .findings = f, .arena = &f->arena};
    f->problem = problem;
    set_missing(f);
    for (const struct fg_problem_warning *w = problem->warnings; w; w = w->next)
        fg_warn(f, w->code, w->text);
    flatgain_status status = fg_model_build(problem, a->arena, &a->model, error);
    if (status == FLATGAIN_OK)
        status = fg_benchmark(&a->model.benchmark, a->arena, &a->benchmark, error);
    if (status != FLATGAIN_OK)
        return status;
    f->order = a->model.law.n;
    f->cost_lqg = a->benchmark.lqg.kind == FG_BOUND_NONE ? NAN : finite_or_nan(a->benchmark.lqg.cost);
    f->cost_lqr = a->benchmark.lqr.kind == FG_BOUND_NONE ? NAN : finite_or_nan(a->benchmark.lqr.cost);
    f->lqg_attained = a->benchmark.lqg.kind == FG_BOUND_ATTAINED;
    f->lqr_attained = a->benchmark.lqr.kind == FG_BOUND_ATTAINED;
    f->lqg_why = a->benchmark.lqg.why;
    f->lqr_why = a->benchmark.lqr.why;

    make_free_pattern(a);
    a->restricted = is_restricted(&problem->pattern);
    struct fg_matrix none = fg_matrix_new(a->arena, problem->m, problem->p);
    if (a->arena->failed || !(a->cost = fg_cost_new(&a->model.law, &a->free, a->arena)))
        return fg_no_memory(error);
    double cost = fg_cost_value(a->cost, none.at);
    a->open_stable = isfinite(cost);
    f->cost_none = finite_or_nan(cost);
    if (problem->has_today)
        f->cost_today = finite_or_nan(fg_cost_value(a->cost, problem->today.at));

    status = fg_modes(&a->model.law, a->model.law.A, a->model.state_names, a->arena, &a->open, error);
    if (status == FLATGAIN_NO_MEMORY)
        return status;
    if (status != FLATGAIN_OK)
        a->open = (struct fg_modes){.condition = NAN};
    f->condition = a->open.condition;
    f->open_poles = poles_from(a, &a->open);
    return a->arena->failed ? fg_no_memory(error) : FLATGAIN_OK;
}

bool fg_is_sensor_lag(const struct fg_assembly *a, const struct fg_mode *mode)
{
    if (mode->im != 0)
        return false;
    int state = a->problem->n; /* the filters are the last states, in the order of the outputs */
    for (int i = 0; i < a->problem->p; i++) {
        double lag = a->problem->outputs[i].lag;
        if (!(lag > 0))
            continue;
        const char *name = a->model.state_names[state++];
        if (fabs(mode->re * lag + 1) < 1e-6 && strncmp(mode->states, name, strlen(name)) == 0)
            return true;
    }
    return false;
}

static void list_hidden(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    f->hidden_modes = fg_arena_get(a->arena, (size_t)(a->open.count + 1) * sizeof *f->hidden_modes);
    if (!f->hidden_modes)
        return;
    for (int k = 0; k < a->open.count; k++) {
        const struct fg_mode *mode = &a->open.mode[k];
        if (!mode->uncontrollable && !mode->unobservable && !mode->unweighted && !mode->undisturbed)
            continue;
        if (fg_is_sensor_lag(a, mode))
            continue;
        double size = hypot(mode->re, mode->im);
        f->hidden_modes[f->hidden++] =
            (struct fg_hidden_mode){mode->re,
                                    mode->im,
                                    mode->uncontrollable,
                                    mode->unobservable,
                                    mode->unweighted,
                                    mode->undisturbed,
                                    a->model.law.discrete ? !(size < 1) : !(mode->re < 0),
                                    mode->states};
    }
}

/* ---- with a gain ----------------------------------------------------------------------------- */

/* Acl = A - B F C, F = (I + K D)^-1 K. False when I + K D is singular to working precision. */
static bool close_loop(struct fg_assembly *a, const double *K, struct fg_matrix Acl)
{
    const struct fg_plant *plant = &a->model.law;
    int m = plant->m, p = plant->p;
    struct fg_matrix gain = {m, p, (double *)K};
    struct fg_matrix F = fg_matrix_copy(a->arena, gain);
    struct fg_matrix I = fg_matrix_identity(a->arena, m);
    struct fg_matrix BF = fg_matrix_new(a->arena, plant->n, p);
    int *pivots = fg_arena_ints(a->arena, (size_t)m);
    if (a->arena->failed)
        return false;
    if (!fg_matrix_is_zero(plant->D)) {
        fg_multiply('N', 'N', 1, gain, plant->D, 1, I);
        if (!fg_all_finite((size_t)m * (size_t)m, I.at))
            return false;
        if (!fg_solve(I, pivots, F) || !fg_all_finite((size_t)m * (size_t)p, F.at))
            return false;
    }
    memcpy(Acl.at, plant->A.at, (size_t)plant->n * (size_t)plant->n * sizeof(double));
    fg_multiply('N', 'N', 1, plant->B, F, 0, BF);
    fg_multiply('N', 'N', -1, BF, plant->C, 1, Acl);
    return fg_all_finite((size_t)plant->n * (size_t)plant->n, Acl.at);
}

/* Closed-loop modes with K into a->closed; count 0 when there are none. */
static flatgain_status find_closed_modes(struct fg_assembly *a, const double *K, flatgain_error *error)
{
    struct fg_matrix Acl = fg_matrix_new(a->arena, a->model.law.n, a->model.law.n);
    if (!Acl.at)
        return fg_no_memory(error);
    a->closed = (struct fg_modes){.condition = NAN};
    if (!close_loop(a, K, Acl)) {
        a->ill_posed = true;
        return a->arena->failed ? fg_no_memory(error) : FLATGAIN_OK;
    }
    flatgain_status status = fg_modes(&a->model.law, Acl, a->model.state_names, a->arena, &a->closed, error);
    if (status == FLATGAIN_NO_MEMORY)
        return status;
    if (status != FLATGAIN_OK)
        a->closed = (struct fg_modes){.condition = NAN};
    return FLATGAIN_OK;
}

/* A peak far below the slowest pole is one at frequency 0, found at the edge of the grid. */
static void settle_low_peaks(struct fg_findings *f)
{
    const double low = 1e-4;
    double slowest = INFINITY;
    for (int k = 0; k < f->order && f->poles; k++) {
        double radius = f->poles[k].speed, decay = log(radius);
        bool discrete = f->problem->setting == FG_DISCRETE;
        slowest = fmin(slowest, discrete ? hypot(decay, atan2(f->poles[k].im, f->poles[k].re)) : radius);
    }
    if (!isfinite(slowest))
        return;
    for (int i = 0; i < f->margins; i++)
        if (f->margin[i].peak_frequency < low * slowest)
            f->margin[i].peak_frequency = 0;
    if (f->peak_frequency < low * slowest)
        f->peak_frequency = 0;
}

/* Gain, its poles and, when it stabilises, its margins. K is m x p column-major, cost INFINITY when
 * unstable. */
static flatgain_status assess_gain(struct fg_assembly *a, const double *K, double cost, flatgain_error *error)
{
    struct fg_findings *f = a->findings;
    int m = a->problem->m, p = a->problem->p;
    struct fg_matrix gain = fg_matrix_copy(a->arena, (struct fg_matrix){m, p, (double *)K});
    f->K = gain.at;
    f->K_rows = fg_arena_doubles(a->arena, (size_t)m * (size_t)p);
    if (a->arena->failed)
        return fg_no_memory(error);
    for (int k = 0; k < m * p; k++)
        gain.at[k] += 0.0; /* no negative zeros leave here */
    fg_matrix_to_rows(gain, f->K_rows);
    f->has_gain = true;
    f->stable = isfinite(cost);
    f->cost = finite_or_nan(cost);
    flatgain_status status = find_closed_modes(a, K, error);
    if (status != FLATGAIN_OK)
        return status;
    f->poles = poles_from(a, &a->closed);
    if (f->poles && a->model.law.discrete) {
        f->radius = 0;
        for (int k = 0; k < f->order; k++)
            f->radius = fmax(f->radius, f->poles[k].speed);
    } else if (f->poles) {
        f->abscissa = -INFINITY;
        for (int k = 0; k < f->order; k++)
            f->abscissa = fmax(f->abscissa, f->poles[k].re);
    }
    if (!f->stable)
        return FLATGAIN_OK;
    struct fg_margins margins = {0};
    status = fg_margins(&a->model.law, gain, a->arena, &margins, error);
    if (status == FLATGAIN_NO_MEMORY)
        return status;
    if (status != FLATGAIN_OK) {
        fg_warn(f, "no-margins", "The margins of the loops could not be computed.");
        return FLATGAIN_OK;
    }
    f->margins = m;
    f->margin = margins.loop;
    f->peak_sensitivity = finite_or_nan(margins.peak_sensitivity);
    f->peak_frequency = finite_or_nan(margins.peak_frequency);
    settle_low_peaks(f);
    return FLATGAIN_OK;
}

static flatgain_status finish(struct fg_assembly *a, flatgain_error *error)
{
    list_hidden(a);
    fg_ladder_fill(a);
    fg_warnings_fill(a);
    fg_verdict_fill(a);
    return a->arena->failed ? fg_no_memory(error) : FLATGAIN_OK;
}

/* ---- tune ------------------------------------------------------------------------------------ */

static flatgain_outcome outcome_of(const struct fg_search_answer *answer)
{
    switch (answer->end) {
    case FG_SEARCH_BOUNDARY:
        return FLATGAIN_BOUNDARY;
    case FG_SEARCH_UNBOUNDED:
        return FLATGAIN_UNBOUNDED;
    case FG_SEARCH_NOT_FOUND:
        return FLATGAIN_NOT_FOUND;
    case FG_SEARCH_MINIMUM:
    case FG_SEARCH_FLAT:
    case FG_SEARCH_STALLED:
        break;
    }
    return FLATGAIN_TUNED;
}

/* The search works in units of its own and comes back with the last digit rounded. Here K gets the pattern
 * exactly: fixed and tied entries as written, nothing beyond a bound, and on it what is there but for
 * rounding. */
static void snap_to_pattern(struct fg_assembly *a, double *K)
{
    const struct fg_pattern *pattern = &a->problem->pattern;
    const double rounding = 1e-12;
    double *theta = fg_arena_doubles(a->arena, (size_t)pattern->count + 1);
    if (!theta)
        return;
    fg_pattern_parameters(pattern, K, theta);
    for (int k = 0; k < pattern->count; k++) {
        double lower = pattern->lower[k], upper = pattern->upper[k];
        if (isfinite(lower) && fabs(theta[k] - lower) <= rounding * fabs(lower))
            theta[k] = lower;
        if (isfinite(upper) && fabs(theta[k] - upper) <= rounding * fabs(upper))
            theta[k] = upper;
    }
    fg_pattern_gain(pattern, theta, K);
}

static void copy_search(struct fg_assembly *a, uint64_t seed)
{
    struct fg_findings *f = a->findings;
    const struct fg_search_answer *s = &a->answer;
    f->search.starts = s->starts;
    f->search.stabilised = s->stabilised;
    f->search.distinct = s->distinct;
    f->search.evaluations = s->evaluations;
    f->search.residual = finite_or_nan(s->residual);
    f->search.smallest_curvature = finite_or_nan(s->smallest_curvature);
    f->search.at_bound = s->at_bound;
    f->search.rule_satisfied = s->rule_satisfied;
    f->search.expected_minima = finite_or_nan(s->expected_minima);
    f->search.seed = seed;
    if (!isfinite(s->cost))
        f->search.least_unstable = finite_or_nan(s->abscissa);
    f->search.minima = fg_arena_get(a->arena, (size_t)(s->distinct + 1) * sizeof *f->search.minima);
    if (f->search.minima)
        for (int k = 0; k < s->distinct; k++) {
            if (a->restricted)
                snap_to_pattern(a, s->minima[k].K);
            f->search.minima[k] = (struct fg_minimum){s->minima[k].cost, s->minima[k].hits, s->minima[k].K};
        }
}

/* While the second search runs, the user's callback keeps hearing about the first one, whose best cost is
 * the one that counts. */
struct relay {
    const flatgain_options *options;
    flatgain_progress first;
};

static int pass_on(const flatgain_progress *ignored, void *user)
{
    const struct relay *relay = user;
    (void)ignored;
    return relay->options->progress(&relay->first, relay->options->user);
}

static flatgain_status search(struct fg_assembly *a, const flatgain_options *options, flatgain_error *error)
{
    struct fg_search_request request = {
        .plant = &a->model.law,
        .pattern = &a->problem->pattern,
        .benchmark = &a->benchmark,
        .today = a->problem->has_today ? &a->problem->today : NULL,
        .starts = options->starts,
        .seed = options->seed,
        .threads = options->threads,
        .progress = options->progress,
        .user = options->user,
    };
    flatgain_status status = fg_search(&request, a->arena, &a->answer, error);
    if (status != FLATGAIN_OK || !a->restricted || a->answer.interrupted)
        return status;
    /* What the user's limits cost: the same search without them. The gain just found is a start, so that
     * the answer cannot be worse. */
    const struct fg_search_answer *first = &a->answer;
    struct fg_matrix found = {a->problem->m, a->problem->p, first->K};
    struct relay relay = {options, {first->starts, options->starts, first->distinct, first->cost}};
    request.pattern = &a->free;
    request.today = isfinite(first->cost) ? &found : request.today;
    if (options->progress) {
        request.progress = pass_on;
        request.user = &relay;
    }
    status = fg_search(&request, a->arena, &a->unstructured, error);
    a->has_unstructured = status == FLATGAIN_OK && !a->unstructured.interrupted;
    return status;
}

flatgain_status fg_assemble_tune(const struct flatgain_problem *problem, const flatgain_options *options,
                                 struct fg_findings *f, flatgain_error *error)
{
    struct fg_assembly a;
    flatgain_status status = begin(&a, problem, f, error);
    if (status == FLATGAIN_OK)
        status = fg_prove(&a, error);
    if (status != FLATGAIN_OK)
        return status;
    f->search.seed = options->seed;
    if (f->proof.kind) {
        f->outcome = FLATGAIN_IMPOSSIBLE;
        return finish(&a, error);
    }
    status = search(&a, options, error);
    if (status != FLATGAIN_OK)
        return status;
    bool stopped = a.answer.interrupted || a.unstructured.interrupted;
    f->complete = !stopped;
    f->outcome = stopped ? FLATGAIN_INTERRUPTED : outcome_of(&a.answer);
    copy_search(&a, options->seed);
    bool found = a.answer.end != FG_SEARCH_NOT_FOUND && isfinite(a.answer.cost);
    if (found && a.restricted)
        snap_to_pattern(&a, a.answer.K);
    status = found        ? assess_gain(&a, a.answer.K, a.answer.cost, error)
             : a.answer.K ? find_closed_modes(&a, a.answer.K, error)
                          : FLATGAIN_OK;
    return status == FLATGAIN_OK ? finish(&a, error) : status;
}

/* ---- judge, inspect -------------------------------------------------------------------------- */

flatgain_status fg_assemble_judge(const struct flatgain_problem *problem, const double *gain,
                                  struct fg_findings *f, flatgain_error *error)
{
    struct fg_assembly a;
    flatgain_status status = begin(&a, problem, f, error);
    if (status != FLATGAIN_OK)
        return status;
    f->outcome = FLATGAIN_JUDGED;
    struct fg_matrix K = fg_matrix_from_rows(a.arena, problem->m, problem->p, gain);
    if (!K.at)
        return fg_no_memory(error);
    status = assess_gain(&a, K.at, fg_cost_value(a.cost, K.at), error);
    return status == FLATGAIN_OK ? finish(&a, error) : status;
}

flatgain_status fg_assemble_inspect(const struct flatgain_problem *problem, struct fg_findings *f,
                                    flatgain_error *error)
{
    struct fg_assembly a;
    flatgain_status status = begin(&a, problem, f, error);
    if (status == FLATGAIN_OK)
        status = fg_prove(&a, error);
    if (status != FLATGAIN_OK)
        return status;
    f->outcome = f->proof.kind ? FLATGAIN_IMPOSSIBLE : FLATGAIN_INSPECTED;
    return finish(&a, error);
}
