/* The way to a minimum that a direct descent does not reach: J with weights and disturbance that see every
 * mode a little, Q + mu q I and W + mu I in natural units, is smooth up to the stability boundary and
 * grows there; its minima for mu = 1e-1, 1e-2, ... lead to the infimum of J along a smooth path. */
#ifndef FG_DESIGN_CONTINUATION_H
#define FG_DESIGN_CONTINUATION_H

#include "design/local.h"
#include "design/scaling.h"

/* theta in: stabilising, in natural units; out: the end of the path, when its J is lower (else
 * unchanged). *answer in and out as from fg_local_minimise for J itself; evaluations are added.
 * NO_MEMORY or OK. */
flatgain_status fg_continue_to_infimum(const struct fg_scaled *scaled, struct fg_cost *cost,
                                       struct fg_local *local, const struct fg_local_limits *limits,
                                       double *theta, struct fg_local_answer *answer);

/* Natural size of J: the cost of every state and input at its natural size. */
double fg_natural_cost(const struct fg_scaled *scaled);

#endif
