#include "design/margin.h"

#include <math.h>

#include "design/starts.h"
#include "plant/fixed_modes.h"

/* A decay that must stay in is let in with room: the margin is this part of it. */
static const double ROOM = 0.5;
/* A law in use that decays more slowly than this, in natural units, is marginal but for rounding. */
static const double MARGINAL = 1e-10;

static double decay_of(bool discrete, double re, double im)
{
    return discrete ? 1 - hypot(re, im) : -re;
}

/* A law in use is where the user already is: the search may go there. */
static void let_in(struct fg_scaled *scaled, struct fg_cost *cost, const double *theta)
{
    if (!isfinite(fg_cost_at(cost, theta)))
        return;
    double abscissa = fg_cost_abscissa(cost), decay = scaled->plant.discrete ? 1 - abscissa : -abscissa;
    if (decay > MARGINAL)
        scaled->margin = fmin(scaled->margin, ROOM * decay);
}

/* Fixed modes are poles at every gain, also at the last point evaluated: the costly look for them is taken
 * only when one of those is slow. */
static flatgain_status exempt_fixed_modes(const struct fg_plant *plant, const struct fg_pattern *pattern,
                                          struct fg_scaled *scaled, const struct fg_cost *cost,
                                          flatgain_error *error)
{
    const double *re, *im;
    bool slow = false;
    if (isnan(fg_cost_abscissa(cost)))
        return FLATGAIN_OK;
    fg_cost_poles(cost, &re, &im);
    for (int i = 0; i < plant->n; i++) {
        double decay = decay_of(plant->discrete, re[i], im[i]);
        slow = slow || (decay > 0 && decay < 2 * scaled->margin);
    }
    if (!slow)
        return FLATGAIN_OK;
    struct fg_arena scratch = {0};
    struct fg_fixed_modes fixed = {0};
    const char **names = fg_arena_get(&scratch, (size_t)plant->n * sizeof *names);
    for (int i = 0; names && i < plant->n; i++)
        names[i] = "";
    flatgain_status status =
        names ? fg_modes_fixed(plant, pattern, names, &scratch, &fixed, error) : fg_no_memory(error);
    for (int k = 0; status == FLATGAIN_OK && k < fixed.count; k++) {
        double decay = decay_of(plant->discrete, fixed.mode[k].re, fixed.mode[k].im);
        if (decay > 0 && !fixed.mode[k].unstable)
            scaled->margin = fmin(scaled->margin, ROOM * decay / scaled->rate);
    }
    fg_arena_release(&scratch);
    return status == FLATGAIN_NO_MEMORY ? status : FLATGAIN_OK;
}

flatgain_status fg_settle_margin(const struct fg_plant *plant, const struct fg_pattern *pattern,
                                 struct fg_scaled *scaled, struct fg_cost *cost, const double *today_theta,
                                 double *theta, flatgain_error *error)
{
    if (today_theta)
        let_in(scaled, cost, today_theta);
    if (fg_start(scaled, NULL, 0, 0, theta) != FLATGAIN_OK)
        return fg_no_memory(error);
    let_in(scaled, cost, theta);
    return exempt_fixed_modes(plant, pattern, scaled, cost, error);
}
