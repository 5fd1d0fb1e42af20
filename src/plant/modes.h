/* Poles of a plant, the states that take part in them, and modes that inputs, outputs, weights or
 * disturbances cannot touch. */
#ifndef FG_PLANT_MODES_H
#define FG_PLANT_MODES_H

#include "plant/model.h"

struct fg_mode {
    double re, im; /* complex pairs appear once, im >= 0 */
    bool uncontrollable, unobservable, unweighted, undisturbed;
    char states[120]; /* e.g. "roll rate, yaw rate": states with the largest participation */
};

struct fg_modes {
    int count;
    struct fg_mode *mode; /* slowest decay first */
    double condition;     /* of the scaled eigenvector basis; large = nearly defective */
};

/* Modes of `plant` with A replaced by `A` (n x n: open or closed loop matrix). A mode is
 * "uncontrollable" when min singular value of [A - s I, B] is negligible after scaling (PBH test),
 * "unobservable" with C, "unweighted" with a factor of [Q N; N' R], "undisturbed" with W. */
flatgain_status fg_modes(const struct fg_plant *plant, struct fg_matrix A, const char *const *state_names,
                         struct fg_arena *arena, struct fg_modes *modes, flatgain_error *error);

#endif
