/* Modes that no gain of a given pattern moves (decentralised fixed modes; Wang, Davison, IEEE TAC 18
 * (1973) 473). An unstable one proves that no static gain, and no dynamic controller, of that structure
 * stabilises. */
#ifndef FG_PLANT_FIXED_MODES_H
#define FG_PLANT_FIXED_MODES_H

#include "plant/model.h"

struct fg_fixed_mode {
    double re, im; /* complex pairs appear once, im >= 0 */
    double error;  /* bound on the rounding error of the eigenvalue */
    bool unstable; /* re >= -error (continuous), |z| >= 1 - error (discrete) */
    char states[120];
};

struct fg_fixed_modes {
    int count;
    struct fg_fixed_mode *mode; /* slowest decay first */
};

/* Eigenvalues of Acl(K) = A - B (I + K D)^-1 K C that are the same for every K of `pattern` (free, tied,
 * fixed entries; bounds that leave no room fix a parameter, other bounds do not matter because Acl is
 * rational in K). They are those that do not move at several random gains: the derivative with respect to
 * every free parameter is negligible beside its natural size there, and the value is the same. With every
 * entry free on its own the rank tests of fg_modes must agree. Memory from the arena. */
flatgain_status fg_modes_fixed(const struct fg_plant *plant, const struct fg_pattern *pattern,
                               const char *const *state_names, struct fg_arena *arena,
                               struct fg_fixed_modes *fixed, flatgain_error *error);

#endif
