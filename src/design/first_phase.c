#include "design/first_phase.h"

#include <math.h>
#include <nlopt.h>
#include <string.h>

/* Returned outside the stable set, with a zero gradient: NLopt's line searches need a finite value there
 * (an infinite one makes L-BFGS fail on many plants; measured). Relative to J at the start. */
static const double OUTSIDE = 1e8;
enum { MEMORY_PAIRS = 10 };

struct objective {
    struct fg_cost *cost;
    const struct fg_local_limits *limits;
    nlopt_opt optimiser;
    double start;  /* J at the start: the objective is J / start, because NLopt's own gradient test is
                      absolute */
    double lowest; /* of J */
    double *best;  /* q */
    unsigned count;
    long evaluations;
};

static double evaluate(unsigned count, const double *theta, double *gradient, void *data)
{
    struct objective *o = data;
    o->evaluations++;
    if (o->limits->stop && o->limits->stop(o->limits->user))
        nlopt_force_stop(o->optimiser);
    double J = fg_cost_at(o->cost, theta);
    if (!isfinite(J) || J > OUTSIDE * o->start) {
        if (gradient)
            memset(gradient, 0, count * sizeof(double));
        return OUTSIDE;
    }
    if (J < o->lowest) {
        o->lowest = J;
        memcpy(o->best, theta, count * sizeof(double));
    }
    if (gradient) {
        fg_cost_gradient(o->cost, gradient);
        for (unsigned k = 0; k < count; k++)
            gradient[k] /= o->start;
    }
    return J / o->start;
}

bool fg_first_phase(struct fg_cost *cost, const struct fg_pattern *pattern, int most_evaluations,
                    const struct fg_local_limits *limits, double *theta, double *best, long *evaluations)
{
    unsigned q = (unsigned)pattern->count;
    struct objective objective = {.cost = cost, .limits = limits, .best = best, .count = q};
    objective.start = objective.lowest = fg_cost_at(cost, theta);
    if (!isfinite(objective.start) || objective.start <= 0)
        return true;
    memcpy(best, theta, q * sizeof(double));
    nlopt_opt optimiser = nlopt_create(NLOPT_LD_LBFGS, q);
    if (!optimiser)
        return false;
    objective.optimiser = optimiser;
    bool good = nlopt_set_min_objective(optimiser, evaluate, &objective) > 0 &&
                nlopt_set_lower_bounds(optimiser, pattern->lower) > 0 &&
                nlopt_set_upper_bounds(optimiser, pattern->upper) > 0 &&
                nlopt_set_vector_storage(optimiser, MEMORY_PAIRS) > 0 &&
                nlopt_set_ftol_rel(optimiser, 1e-4) > 0 && nlopt_set_xtol_rel(optimiser, 1e-6) > 0 &&
                nlopt_set_maxeval(optimiser, most_evaluations) > 0;
    if (good) {
        double value;
        nlopt_optimize(optimiser, theta, &value); /* its return code says little: our own best point counts */
        memcpy(theta, best, q * sizeof(double));
    }
    *evaluations += objective.evaluations;
    nlopt_destroy(optimiser);
    return good;
}
