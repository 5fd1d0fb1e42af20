/* Steps of the order reduction behind design/limit_solution.h. */
#ifndef FG_DESIGN_ORDER_REDUCTION_H
#define FG_DESIGN_ORDER_REDUCTION_H

#include "linalg/matrix.h"

/* Singular values of unit columns below this count as 0: far above rounding, far below what plants have. */
#define FG_RANK_TOLERANCE 1e-11

/* A problem on the way: cost |Hx x + Hu u|^2. */
struct fg_stage {
    struct fg_arena arena; /* of A, B, Hx, Hu */
    struct fg_matrix A, B, Hx, Hu;
    double floor_B, floor_Hu; /* columns with a smaller norm are rounding */
};

/* What the way back needs of one level. */
struct fg_level {
    struct fg_level *outer;
    int n, m, r, m0, m1;
    struct fg_matrix reflectors; /* n x r, and tau */
    double *tau;
    double turn;           /* by how much T1 may be off for rounding */
    struct fg_matrix Zi;   /* m x m: [u0; u1] = Zi u */
    struct fg_matrix Ad;   /* discrete: n x n */
    struct fg_matrix Hd;   /* discrete: rows x n */
    struct fg_matrix N1;   /* discrete: m1 x n, U1'Hx */
    struct fg_matrix T1B1; /* discrete: r x m1 */
    struct fg_matrix T1B0; /* discrete: r x m0 */
};

/* The solution of a stage: S and `before` as in limit_solution.h, |Ex x + Eu u|^2 the cost lost by u. */
struct fg_stage_answer {
    struct fg_matrix S, before, Ex, Eu;
};

/* What the inputs of a stage split into; of the stage's arena. */
struct fg_split {
    struct fg_matrix Z, BZ; /* m x m, n x m: [u0; u1] = Z^-1 u, B Z = [B0 B1] */
    struct fg_matrix U1;    /* rows x m1, orthonormal, Hu Z = [0 U1] */
    double noise;           /* relative rounding of the columns of B0 */
};

/* Splits the inputs and finds the rank r of B0; r = 0: nothing is left to reduce. `keep` holds what the way
 * back needs. These return false when memory is out (then an arena says failed) or LAPACK fails. */
bool fg_stage_split(struct fg_stage *stage, struct fg_level *level, struct fg_arena *keep,
                    struct fg_split *split);
/* r > 0: the problem of order n - r into `next`, whose arena is empty. */
bool fg_stage_reduce(bool discrete, struct fg_stage *stage, struct fg_level *level, struct fg_arena *keep,
                     const struct fg_split *split, struct fg_stage *next);
/* r = 0: the regular equation. L1 m1 x n: u1 = -L1 x; decay as in limit_solution.h. False also when there
 * is no stabilising solution. */
bool fg_stage_finish(bool discrete, struct fg_stage *stage, const struct fg_level *level,
                     struct fg_arena *keep, const struct fg_split *split, struct fg_stage_answer *answer,
                     struct fg_matrix *L1, double *decay);
/* The answer of the reduced problem becomes that of this level. */
bool fg_stage_back(bool discrete, const struct fg_level *level, struct fg_arena *keep,
                   struct fg_stage_answer *answer);

#endif
