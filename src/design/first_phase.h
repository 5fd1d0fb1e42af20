/* First phase of a local search with many free gains: NLopt's L-BFGS with the analytic gradient brings
 * the cost down before the exact Hessian, whose price grows with the number of gains, finishes. */
#ifndef FG_DESIGN_FIRST_PHASE_H
#define FG_DESIGN_FIRST_PHASE_H

#include "design/local.h"

/* From this many free gains on the first phase pays (measured: docs/speed.md, tests/bench/bench_local.c). */
enum { FG_FIRST_PHASE_FROM = 80 };

/* theta in: finite J inside the bounds; out: the best point met. Returns false when NLopt could not be set
 * up for lack of memory. evaluations is added to. */
bool fg_first_phase(struct fg_cost *cost, const struct fg_pattern *pattern, int most_evaluations,
                    const struct fg_local_limits *limits, double *theta, double *best, long *evaluations);

#endif
