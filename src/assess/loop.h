/* The closed loop u = -K y seen at the plant inputs, ready for many evaluations on the stability boundary.
 *
 *   T(s) = K G (I + K G)^-1 = F D + F C (s I - Acl)^-1 B (I + K D)^-1,   S = I - T = (I + K G)^-1
 *   F = (I + K D)^-1 K,  Acl = A - B F C
 *
 * Loop i, broken at input i with all the others closed, has 1 / (1 + L_i) = S_ii. Working with T, S of the
 * stable closed loop keeps every loop well posed, whatever the feedthrough D does when a loop is open.
 * A discrete loop is mapped to the s-plane first, z = (1 + s) / (1 - s), which is exact: the unit circle
 * becomes the imaginary axis and the angle theta (rad per step) the frequency tan(theta / 2). */
#ifndef FG_ASSESS_LOOP_H
#define FG_ASSESS_LOOP_H

#include <complex.h>

#include "plant/model.h"

struct fg_loop {
    int n, m;
    bool discrete;
    double *A;               /* n x n upper Hessenberg, balanced */
    double *B, *C, *D;       /* n x m, m x n, m x m of T */
    double *re, *im;         /* n poles, in the s-plane */
    double slowest, fastest; /* smallest and largest |pole| */
    bool stable;
    double *rows;  /* n x (n + m) row-major: [-A B], what every evaluation starts from */
    double *solve; /* scratch of fg_loop_evaluate */
};

/* FLATGAIN_NUMERICAL when the loop is ill posed or not finite. */
flatgain_status fg_loop_build(const struct fg_plant *plant, struct fg_matrix K, struct fg_arena *arena,
                              struct fg_loop *loop, flatgain_error *error);

/* T(j w), m x m column-major, w >= 0 or INFINITY. noise (m, NULL: not wanted): what rounding may have done
 * to the diagonal entries of T. */
void fg_loop_evaluate(const struct fg_loop *loop, double w, double complex *T, double *noise);

/* The frequency in the user's sense: w itself (INFINITY -> NAN, "none"), or the angle per step. */
double fg_loop_frequency(const struct fg_loop *loop, double w);

/* Eigenvalues of a general n x n matrix (destroyed); false when not finite, not converged or no memory. */
bool fg_loop_eigenvalues(int n, double *a, double *re, double *im, struct fg_arena *scratch);

#endif
