/* What is done to the best start once the multi-start is over. */
#ifndef FG_DESIGN_FINISH_H
#define FG_DESIGN_FINISH_H

#include "design/local.h"
#include "design/records.h"
#include "design/scaling.h"

/* A start that did not reach a minimum is led along the path of continuation.h; one that still ends at the
 * decay margin is tried once with a far smaller margin, since a minimum may lie between the margin and the
 * boundary; a minimum that is flat along some directions is moved to its shortest gain.
 * cost and local are those of scaled->plant. NO_MEMORY or OK. */
flatgain_status fg_finish(const struct fg_scaled *scaled, struct fg_cost *cost, struct fg_local *local,
                          const struct fg_local_limits *limits, struct fg_record *record);

#endif
