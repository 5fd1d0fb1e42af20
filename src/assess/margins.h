/* Margins of the loop u = -K y around a plant, one loop at a time and all together. */
#ifndef FG_ASSESS_MARGINS_H
#define FG_ASSESS_MARGINS_H

#include "assess/findings.h"
#include "plant/model.h"

struct fg_margins {
    struct fg_loop_margin *loop;             /* m */
    double peak_sensitivity, peak_frequency; /* largest singular value of (I + K G)^-1, G = plant */
};

/* K m x p, stabilising. Peaks carry a guarantee (imaginary-axis / unit-circle eigenvalue test), they
 * are not read off a grid only. Memory from the arena. */
flatgain_status fg_margins(const struct fg_plant *plant, struct fg_matrix K, struct fg_arena *arena,
                           struct fg_margins *margins, flatgain_error *error);

#endif
