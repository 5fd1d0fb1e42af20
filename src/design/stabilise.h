/* From any gain to a stabilising one, by minimising the spectral abscissa (radius), two ways in turn
 * (docs/method.md, "Starting"):
 *   shift    A is shifted by s just above the abscissa, the smooth LQ cost of the shifted plant with unit
 *            weights is lowered a few Newton steps, s follows (smoothed spectral abscissa; Vanbiervliet
 *            et al., SIAM J. Optim. 20 (2009) 156)
 *   direct   BFGS with a weak Wolfe line search on the abscissa itself (Lewis, Overton, Math. Program.
 *            141 (2013) 135)
 * Works in scaled parameters (scaling.h). */
#ifndef FG_DESIGN_STABILISE_H
#define FG_DESIGN_STABILISE_H

#include "design/cost.h"
#include "design/local.h"

struct fg_stabiliser;

/* The plant (in natural units) and pattern must outlive it. NULL when memory is out. */
struct fg_stabiliser *fg_stabiliser_new(const struct fg_plant *plant, const struct fg_pattern *pattern,
                                        struct fg_arena *arena);

/* theta in: any gain within the bounds; out: the least abscissa found. Returns true when the loop decays
 * faster than `margin`. shift_first: which way is tried first. *abscissa and *evaluations are outputs
 * (evaluations is added to). */
bool fg_stabilise(struct fg_stabiliser *stabiliser, double *theta, double margin, bool shift_first,
                  const struct fg_local_limits *limits, double *abscissa, long *evaluations);

#endif
