/* How close to the stability boundary the search may go. */
#ifndef FG_DESIGN_MARGIN_H
#define FG_DESIGN_MARGIN_H

#include "design/cost.h"
#include "design/scaling.h"

/* Lowers scaled->margin where it would shut out what must stay in:
 *   - a plant that is stable without control, and today's gain, where they decay more slowly
 *   - modes that no gain of the pattern moves
 * today_theta (natural units) may be NULL; `plant` is in the user's units; `cost` an evaluator of
 * scaled->plant with margin 0; theta (q) is scratch. NO_MEMORY or OK. */
flatgain_status fg_settle_margin(const struct fg_plant *plant, const struct fg_pattern *pattern,
                                 struct fg_scaled *scaled, struct fg_cost *cost, const double *today_theta,
                                 double *theta, flatgain_error *error);

#endif
