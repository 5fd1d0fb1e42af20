#include "design/stabilise.h"

#include <math.h>
#include <string.h>

/* Weight on the gains in the shifted problem: small against the unit weight on the states, so that the
 * gains are free to move, but not zero, so that they do not run away. */
static const double SHIFT_EFFORT = 0.2;
static const double TIGHTEST = 1e-4; /* smallest distance of the shift from the abscissa, relative */
enum { SHIFT_ROUNDS = 60, SHIFT_STEPS = 10, DIRECT_STEPS = 120, LINE_STEPS = 30 };

struct fg_stabiliser {
    struct fg_plant plant;
    const struct fg_pattern *pattern;
    struct fg_cost *cost;
    struct fg_local *local;
    double *trial, *gradient, *new_gradient, *direction, *inverse, *best, *Hy; /* q; inverse q x q */
};

struct fg_stabiliser *fg_stabiliser_new(const struct fg_plant *plant, const struct fg_pattern *pattern,
                                        struct fg_arena *arena)
{
    struct fg_stabiliser *s = fg_arena_get(arena, sizeof *s);
    if (!s)
        return NULL;
    size_t q = (size_t)pattern->count;
    s->plant = *plant;
    s->pattern = pattern;
    s->plant.Q = fg_matrix_identity(arena, plant->n);
    s->plant.W = fg_matrix_identity(arena, plant->n);
    s->plant.R = fg_matrix_identity(arena, plant->m);
    s->plant.N = fg_matrix_new(arena, plant->n, plant->m);
    s->plant.V = fg_matrix_new(arena, plant->p, plant->p);
    if (arena->failed)
        return NULL;
    for (int i = 0; i < plant->m; i++)
        FG_AT(s->plant.R, i, i) = SHIFT_EFFORT;
    s->cost = fg_cost_new(&s->plant, pattern, arena);
    s->local = fg_local_new(pattern->count, arena);
    double **vectors[] = {&s->trial, &s->gradient, &s->new_gradient, &s->direction, &s->best, &s->Hy};
    for (size_t i = 0; i < sizeof vectors / sizeof *vectors; i++)
        *vectors[i] = fg_arena_doubles(arena, q);
    s->inverse = fg_arena_doubles(arena, q * q);
    return arena->failed ? NULL : s;
}

static bool enough(const struct fg_stabiliser *s, double abscissa, double margin)
{
    return abscissa < (s->plant.discrete ? 1 - margin : -margin);
}

static double abscissa_at(struct fg_stabiliser *s, const double *theta, long *evaluations)
{
    ++*evaluations;
    fg_cost_shift(s->cost, s->plant.discrete ? 1 : 0);
    fg_cost_at(s->cost, theta);
    double a = fg_cost_abscissa(s->cost);
    return isnan(a) ? INFINITY : a;
}

static bool told_to_stop(const struct fg_local_limits *limits)
{
    return limits->stop && limits->stop(limits->user);
}

static bool by_shift(struct fg_stabiliser *s, double *theta, double margin,
                     const struct fg_local_limits *limits, double *abscissa, long *evaluations)
{
    double a = *abscissa, distance = 0.3;
    size_t size = (size_t)s->pattern->count * sizeof(double);
    struct fg_local_limits few = {.iterations = SHIFT_STEPS, .stop = limits->stop, .user = limits->user};
    for (int round = 0; round < SHIFT_ROUNDS && distance > TIGHTEST && !told_to_stop(limits); round++) {
        double step =
            distance * fmax(s->plant.discrete ? 0.1 : 1e-2, s->plant.discrete ? fabs(a - 1) : fabs(a));
        memcpy(s->best, theta, size);
        fg_cost_shift(s->cost, a + step);
        struct fg_local_answer answer = fg_local_minimise(s->local, s->cost, s->pattern, theta, &few);
        *evaluations += answer.evaluations;
        double now = abscissa_at(s, theta, evaluations);
        if (!(now < a)) {
            memcpy(theta, s->best, size);
            distance *= 0.25;
            continue;
        }
        if (a - now < 0.1 * step)
            distance *= 0.5;
        *abscissa = a = now;
        if (enough(s, a, margin))
            return true;
    }
    return false;
}

/* Weak Wolfe line search by bisection (Lewis, Overton 2013, alg. 2.6); false when no step was found. */
static bool line_search(struct fg_stabiliser *s, double *theta, double margin, double *value,
                        long *evaluations)
{
    int q = s->pattern->count;
    double slope = 0, low = 0, high = INFINITY, t = 1;
    for (int k = 0; k < q; k++)
        slope += s->gradient[k] * s->direction[k];
    for (int step = 0; step < LINE_STEPS; step++) {
        for (int k = 0; k < q; k++)
            s->trial[k] =
                fmin(fmax(theta[k] + t * s->direction[k], s->pattern->lower[k]), s->pattern->upper[k]);
        double now = abscissa_at(s, s->trial, evaluations);
        if (!(now < *value + 1e-4 * t * slope)) {
            high = t;
        } else {
            if (!fg_cost_abscissa_gradient(s->cost, s->new_gradient))
                return false;
            double new_slope = 0;
            for (int k = 0; k < q; k++)
                new_slope += s->new_gradient[k] * s->direction[k];
            /* a stabilising step ends the search: where the abscissa falls for ever, the next doubling would
             * only lead to a huge gain */
            if (new_slope >= 0.5 * slope || step == LINE_STEPS - 1 || enough(s, now, margin)) {
                *value = now;
                return true;
            }
            low = t;
        }
        t = isfinite(high) ? 0.5 * (low + high) : 2 * t;
    }
    if (low == 0)
        return false;
    for (int k = 0; k < q; k++)
        s->trial[k] =
            fmin(fmax(theta[k] + low * s->direction[k], s->pattern->lower[k]), s->pattern->upper[k]);
    *value = abscissa_at(s, s->trial, evaluations);
    return fg_cost_abscissa_gradient(s->cost, s->new_gradient);
}

static void reset_inverse(struct fg_stabiliser *s)
{
    int q = s->pattern->count;
    memset(s->inverse, 0, (size_t)q * q * sizeof(double));
    for (int k = 0; k < q; k++)
        s->inverse[k + (size_t)k * q] = 1;
}

/* BFGS update of the inverse Hessian with step d = trial - theta and y = new gradient - gradient. */
static void update_inverse(struct fg_stabiliser *s, const double *theta)
{
    int q = s->pattern->count;
    double dy = 0, yHy = 0;
    for (int k = 0; k < q; k++) {
        s->Hy[k] = 0;
        for (int j = 0; j < q; j++)
            s->Hy[k] += s->inverse[k + (size_t)j * q] * (s->new_gradient[j] - s->gradient[j]);
        dy += (s->trial[k] - theta[k]) * (s->new_gradient[k] - s->gradient[k]);
    }
    if (!(dy > 0))
        return;
    for (int k = 0; k < q; k++)
        yHy += s->Hy[k] * (s->new_gradient[k] - s->gradient[k]);
    for (int j = 0; j < q; j++)
        for (int k = 0; k < q; k++) {
            double dk = s->trial[k] - theta[k], dj = s->trial[j] - theta[j];
            s->inverse[k + (size_t)j * q] +=
                (1 + yHy / dy) * dk * dj / dy - (dk * s->Hy[j] + s->Hy[k] * dj) / dy;
        }
}

static bool directly(struct fg_stabiliser *s, double *theta, double margin,
                     const struct fg_local_limits *limits, double *abscissa, long *evaluations)
{
    int q = s->pattern->count;
    double value = abscissa_at(s, theta, evaluations);
    if (!isfinite(value) || !fg_cost_abscissa_gradient(s->cost, s->gradient))
        return false;
    reset_inverse(s);
    bool steepest = true;
    for (int iteration = 0; iteration < DIRECT_STEPS && !told_to_stop(limits); iteration++) {
        double slope = 0;
        for (int k = 0; k < q; k++) {
            s->direction[k] = 0;
            for (int j = 0; j < q; j++)
                s->direction[k] -= s->inverse[k + (size_t)j * q] * s->gradient[j];
            slope += s->direction[k] * s->gradient[k];
        }
        double before = value;
        if (!(slope < 0) || !line_search(s, theta, margin, &value, evaluations)) {
            if (steepest)
                break;
            reset_inverse(s);
            steepest = true;
            continue;
        }
        update_inverse(s, theta);
        memcpy(theta, s->trial, (size_t)q * sizeof(double));
        memcpy(s->gradient, s->new_gradient, (size_t)q * sizeof(double));
        *abscissa = value;
        if (enough(s, value, margin))
            return true;
        if (before - value < 1e-9 * fabs(before) + 1e-12 && steepest)
            break;
        steepest = false;
    }
    return false;
}

bool fg_stabilise(struct fg_stabiliser *s, double *theta, double margin, bool shift_first,
                  const struct fg_local_limits *limits, double *abscissa, long *evaluations)
{
    *abscissa = abscissa_at(s, theta, evaluations);
    if (!isfinite(*abscissa))
        return false;
    for (int turn = 0; turn < 4; turn++) {
        if (enough(s, *abscissa, margin))
            return true;
        if ((turn % 2 == 0) == shift_first)
            by_shift(s, theta, margin, limits, abscissa, evaluations);
        else
            directly(s, theta, margin, limits, abscissa, evaluations);
    }
    return enough(s, *abscissa, margin);
}
