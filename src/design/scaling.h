/* Natural units, so that the same plant in other units gives the same law. The units are the standard
 * deviations of states, inputs and outputs in the LQR loop and the fastest pole of that loop as unit of
 * rate: they change with the user's units exactly as they should. In scaled parameters a gain of size 1
 * is a natural size. J is not scaled. docs/method.md eq. 18. */
#ifndef FG_DESIGN_SCALING_H
#define FG_DESIGN_SCALING_H

#include "design/benchmark.h"

struct fg_scaled {
    struct fg_plant plant;     /* in natural units */
    struct fg_pattern pattern; /* sign carries the ratio of units, bounds are those of theta / unit */
    double *input, *output;    /* m, p: natural size of u_i and y_j in the user's units */
    double rate;               /* natural rate: rad per time unit; discrete 1 */
    double margin;             /* decay margin of the search in natural units ("Decay margin" there) */
    bool has_L;
    struct fg_matrix L; /* m x n LQR gain in natural units */
};

/* Memory of the result from `arena`. Errors: NO_MEMORY. */
flatgain_status fg_scale(const struct fg_plant *plant, const struct fg_pattern *pattern,
                         const struct fg_benchmark *benchmark, struct fg_arena *arena,
                         struct fg_scaled *scaled, flatgain_error *error);

/* Gains in natural units from and to the user's (m x p column-major; may be the same array). */
void fg_scaled_from_user(const struct fg_scaled *scaled, const double *user, double *natural);
void fg_scaled_to_user(const struct fg_scaled *scaled, const double *natural, double *user);

#endif
