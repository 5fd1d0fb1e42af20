#include "design/finish.h"

#include <math.h>
#include <string.h>

#include "design/continuation.h"
#include "design/shortest.h"

/* The second, smaller margin relative to the first. */
static const double THINNER = 1e-3;
/* A residual as good as any: what Newton's method leaves where J is flat along some direction. */
static const double GOOD = 1e-8;
/* In natural units, and relative to J. */
static const double ROUNDING = 1e-12;
/* J below the bound by more than this part is rounding at the edge of stability, not a gain. */
static const double BELOW_BOUND = 1e-6;

static flatgain_status inside_the_margin(const struct fg_scaled *scaled, struct fg_cost *cost,
                                         struct fg_local *local, const struct fg_local_limits *limits,
                                         struct fg_record *record)
{
    struct fg_arena scratch = {0};
    size_t q = (size_t)scaled->pattern.count;
    double *theta = fg_arena_doubles(&scratch, q);
    if (scratch.failed)
        return FLATGAIN_NO_MEMORY;
    memcpy(theta, record->theta, q * sizeof(double));
    fg_cost_margin(cost, THINNER * scaled->margin);
    struct fg_local_answer answer = fg_local_minimise(local, cost, &scaled->pattern, theta, limits);
    record->evaluations += answer.evaluations;
    if (answer.end == FG_LOCAL_MINIMUM && answer.smallest > 0 &&
        answer.J >= limits->bound * (1 - BELOW_BOUND)) {
        record->local = answer;
        memcpy(record->theta, theta, q * sizeof(double));
    } else {
        fg_cost_margin(cost, scaled->margin);
    }
    fg_arena_release(&scratch);
    return FLATGAIN_OK;
}

/* The shortest gain of the same cost, minimised once more; kept only when it is as good a minimum. */
static flatgain_status shortest(const struct fg_scaled *scaled, struct fg_cost *cost, struct fg_local *local,
                                const struct fg_local_limits *limits, struct fg_record *record)
{
    struct fg_arena scratch = {0};
    size_t q = (size_t)scaled->pattern.count;
    double *theta = fg_arena_doubles(&scratch, q);
    if (scratch.failed)
        return FLATGAIN_NO_MEMORY;
    memcpy(theta, record->theta, q * sizeof(double));
    struct fg_local_answer answer = record->local;
    fg_shorten(local, cost, &scaled->pattern, limits, theta, &answer);
    record->evaluations += answer.evaluations - record->local.evaluations;
    if (memcmp(theta, record->theta, q * sizeof(double)) != 0) {
        answer = fg_local_minimise(local, cost, &scaled->pattern, theta, limits);
        record->evaluations += answer.evaluations;
        if (answer.end == FG_LOCAL_MINIMUM && answer.residual <= fmax(GOOD, record->local.residual)) {
            memcpy(record->theta, theta, q * sizeof(double));
            record->local = answer;
        }
    }
    fg_arena_release(&scratch);
    return FLATGAIN_OK;
}

/* A gain of rounding size beside the natural one is a 0 that the search could not hit. */
static void clear_rounding(const struct fg_scaled *scaled, struct fg_cost *cost, double negligible,
                           struct fg_record *record)
{
    const struct fg_pattern *pattern = &scaled->pattern;
    for (int k = 0; k < pattern->count; k++) {
        double keep = record->theta[k];
        if (keep == 0 || fabs(keep) > ROUNDING || pattern->lower[k] > 0 || pattern->upper[k] < 0)
            continue;
        record->theta[k] = 0;
        record->evaluations++;
        if (!(fg_cost_at(cost, record->theta) <= fmax(record->local.J * (1 + ROUNDING), negligible)))
            record->theta[k] = keep;
    }
}

flatgain_status fg_finish(const struct fg_scaled *scaled, struct fg_cost *cost, struct fg_local *local,
                          const struct fg_local_limits *limits, struct fg_record *record)
{
    flatgain_status status = FLATGAIN_OK;
    long before = record->local.evaluations;
    if (record->local.end != FG_LOCAL_MINIMUM)
        status = fg_continue_to_infimum(scaled, cost, local, limits, record->theta, &record->local);
    record->evaluations += record->local.evaluations - before;
    if (status == FLATGAIN_OK && record->local.end == FG_LOCAL_BOUNDARY)
        status = inside_the_margin(scaled, cost, local, limits, record);
    if (status == FLATGAIN_OK && record->local.end == FG_LOCAL_MINIMUM)
        status = shortest(scaled, cost, local, limits, record);
    if (status == FLATGAIN_OK && record->local.end == FG_LOCAL_MINIMUM)
        clear_rounding(scaled, cost, limits->negligible, record);
    fg_cost_at(cost, record->theta);
    record->abscissa = fg_cost_abscissa(cost);
    return status;
}
