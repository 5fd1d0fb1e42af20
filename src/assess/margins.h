/* Margins of the loop u = -K y around a plant, one loop at a time and all together. */
#ifndef FG_ASSESS_MARGINS_H
#define FG_ASSESS_MARGINS_H

#include "assess/findings.h"
#include "plant/model.h"

struct fg_margins {
    struct fg_loop_margin *loop;             /* m */
    double peak_sensitivity, peak_frequency; /* largest singular value of (I + K G)^-1, G = plant */
};

/* K m x p. gain_up, gain_down: the factors on row i of K at which a pole reaches the stability boundary (or
 * leaves through infinity: continuous, D not 0; then without a frequency); factors beyond 1e8 either way
 * are no limit. phase_deg: the smallest turn of L_i, in either direction. Peaks carry a guarantee up to
 * 200 states (imaginary-axis eigenvalue test), they are not read off a grid only. A row of zeros is no
 * loop: gain 0 to INFINITY, phase INFINITY, peak 1. A loop that is not stable has NAN everywhere, with
 * FLATGAIN_OK; an ill-posed one is FLATGAIN_NUMERICAL. Memory from the arena. */
flatgain_status fg_margins(const struct fg_plant *plant, struct fg_matrix K, struct fg_arena *arena,
                           struct fg_margins *margins, flatgain_error *error);

#endif
