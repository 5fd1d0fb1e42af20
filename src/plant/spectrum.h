/* Eigenvalues with left and right eigenvectors in coordinates that do not depend on the units of states,
 * inputs and outputs: the common ground of modes.c and fixed_modes.c. */
#ifndef FG_PLANT_SPECTRUM_H
#define FG_PLANT_SPECTRUM_H

#include <complex.h>

#include "plant/model.h"

/* x_i = state[i] z_i, u_j = input[j] (scaled u)_j, y_i = output[i] (scaled y)_i; all powers of two. */
struct fg_units {
    double *state, *input, *output; /* n, m, p */
};

/* Scales that bring the entries of A, B and C as close to one size as a change of units can. False when
 * memory is out; a plant with non-finite entries gets scales of 1. */
bool fg_units_find(const struct fg_plant *plant, struct fg_matrix A, struct fg_arena *arena,
                   struct fg_units *units);

/* entry (i, j) = a (i, j) * right[j] / left[i]; a NULL scale means 1. New matrix from the arena. */
struct fg_matrix fg_units_apply(struct fg_arena *arena, struct fg_matrix a, const double *left,
                                const double *right);

struct fg_spectrum {
    int n;
    double *re, *im;              /* n; a complex pair is two entries, im > 0 first */
    double complex *left, *right; /* n x n, column k: w_k' A = s_k w_k' and A v_k = s_k v_k, length 1 */
    double *condition;            /* n, 1 / |w_k' v_k| */
    double norm;                  /* Frobenius norm of A */
};

/* Of A (n x n, in scaled units). FLATGAIN_NUMERICAL when A is not finite or the iteration fails. */
flatgain_status fg_spectrum_compute(struct fg_matrix A, struct fg_arena *arena, struct fg_spectrum *spectrum,
                                    flatgain_error *error);

/* Bound on the rounding error of eigenvalue k. */
double fg_spectrum_error(const struct fg_spectrum *spectrum, int k);

/* Real, or a real double eigenvalue that rounding made a pair. */
bool fg_spectrum_is_real(const struct fg_spectrum *spectrum, int k);

/* Names of at most three states that take part in mode k with at least 30 % of the largest |w_i v_i|,
 * joined by ", "; what does not fit into `text` is left out. */
void fg_spectrum_states(const struct fg_spectrum *spectrum, int k, const char *const *names, size_t size,
                        char *text);

#endif
