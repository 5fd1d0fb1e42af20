/* Problem -> design model: what the search works on. Sensor lags are states here; the benchmark plant
 * keeps the unfiltered outputs (docs/method.md, "noise in continuous time"). */
#ifndef FG_PLANT_MODEL_H
#define FG_PLANT_MODEL_H

#include "problem/problem.h"

/* One linear plant with weights and noise:
 *   x+ or dx/dt = A x + B u + w,  y = C x + D u + v,  J = E[x'Qx + 2x'Nu + u'Ru],
 *   E w w' ~ W, E v v' ~ V. Shapes: A n x n, B n x m, C p x n, D p x m, Q n x n, R m x m, N n x m,
 *   W n x n, V p x p. */
struct fg_plant {
    bool discrete;
    int n, m, p;
    struct fg_matrix A, B, C, D, Q, R, N, W, V;
};

struct fg_model {
    struct fg_plant law;       /* what the static law sees; V is zero in the continuous setting */
    struct fg_plant benchmark; /* what LQG and LQR see: no sensor lags, V as given */
    const char **state_names;  /* law.n names, the lag states last */
};

/* Fills *model from the problem; memory from the arena. */
flatgain_status fg_model_build(const struct flatgain_problem *problem, struct fg_arena *arena,
                               struct fg_model *model, flatgain_error *error);

#endif
