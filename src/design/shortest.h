/* Where J is flat along some directions (outputs that say the same, a controller state in any units), every
 * gain along them costs the same: take the shortest. */
#ifndef FG_DESIGN_SHORTEST_H
#define FG_DESIGN_SHORTEST_H

#include "design/local.h"

/* theta in and out: a minimum with *answer; moved along flat directions towards 0 while J stays the same
 * and the loop decays nearly as fast as before. evaluations are added to. */
void fg_shorten(struct fg_local *local, struct fg_cost *cost, const struct fg_pattern *pattern,
                const struct fg_local_limits *limits, double *theta, struct fg_local_answer *answer);

#endif
