#include "design/continuation.h"

#include <math.h>
#include <string.h>

static const double FIRST = 1e-1, LAST = 1e-13, FACTOR = 0.1;

double fg_natural_cost(const struct fg_scaled *scaled)
{
    double sum = 0;
    for (int i = 0; i < scaled->plant.n; i++)
        sum += FG_AT(scaled->plant.Q, i, i);
    for (int i = 0; i < scaled->plant.m; i++)
        sum += FG_AT(scaled->plant.R, i, i);
    return sum;
}

/* One station of the path: theta moves to the minimum for this mu; false when memory is out. */
static bool station(const struct fg_scaled *scaled, double mu, struct fg_local *local,
                    const struct fg_local_limits *limits, double *theta, long *evaluations)
{
    struct fg_arena scratch = {0};
    struct fg_plant plant = scaled->plant;
    plant.Q = fg_matrix_copy(&scratch, plant.Q);
    plant.W = fg_matrix_copy(&scratch, plant.W);
    struct fg_cost *cost = NULL;
    if (!scratch.failed) {
        double weight = fg_natural_cost(scaled) / plant.n;
        for (int i = 0; i < plant.n; i++) {
            FG_AT(plant.Q, i, i) += mu * (weight > 0 ? weight : 1);
            FG_AT(plant.W, i, i) += mu;
        }
        cost = fg_cost_new(&plant, &scaled->pattern, &scratch);
    }
    if (cost) {
        fg_cost_margin(cost, scaled->margin);
        *evaluations += fg_local_minimise(local, cost, &scaled->pattern, theta, limits).evaluations;
    }
    fg_arena_release(&scratch);
    return cost != NULL;
}

flatgain_status fg_continue_to_infimum(const struct fg_scaled *scaled, struct fg_cost *cost,
                                       struct fg_local *local, const struct fg_local_limits *limits,
                                       double *theta, struct fg_local_answer *answer)
{
    struct fg_arena scratch = {0};
    size_t q = (size_t)scaled->pattern.count;
    double *path = fg_arena_doubles(&scratch, q);
    if (scratch.failed)
        return FLATGAIN_NO_MEMORY;
    memcpy(path, theta, q * sizeof(double));
    for (double mu = FIRST; mu > LAST; mu *= FACTOR) {
        if (limits->stop && limits->stop(limits->user))
            break;
        if (!station(scaled, mu, local, limits, path, &answer->evaluations)) {
            fg_arena_release(&scratch);
            return FLATGAIN_NO_MEMORY;
        }
    }
    struct fg_local_answer end = fg_local_minimise(local, cost, &scaled->pattern, path, limits);
    answer->evaluations += end.evaluations;
    if (end.J < answer->J || (end.end == FG_LOCAL_MINIMUM && end.J <= answer->J * (1 + 1e-9))) {
        end.evaluations = answer->evaluations;
        *answer = end;
        memcpy(theta, path, q * sizeof(double));
    }
    fg_arena_release(&scratch);
    return FLATGAIN_OK;
}
