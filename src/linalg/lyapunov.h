/* Lyapunov equations from one real Schur form A = Z T Z' (docs/method.md eq. 5 to 8).
 *
 *   continuous  T X + X T' + C = 0     and its dual   T'X + X T + C = 0
 *   discrete    T X T' - X + C = 0     and its dual   T'X T - X + C = 0
 *
 * T n x n upper quasi-triangular as dgees leaves it; C n x n symmetric on entry, X on exit.
 * Recursive and blocked (Jonsson, Kagstrom, ACM TOMS 28 (2002) 392); the symmetric half is computed
 * once. Nothing is allocated: work is given. */
#ifndef FG_LINALG_LYAPUNOV_H
#define FG_LINALG_LYAPUNOV_H

#include <stdbool.h>
#include <stddef.h>

#include "linalg/matrix.h"

/* Doubles of scratch for order n. */
size_t fg_lyapunov_work(int n);

/* X over C, as above. The result need not be finite when two eigenvalues of T add up to 0 (continuous)
 * or multiply to 1 (discrete): the caller tests stability first. */
void fg_lyapunov_schur(bool discrete, int n, const double *T, double *C, double *work);
/* The dual equation; `reversed` is T with rows and columns reversed and transposed, made once per T. */
void fg_lyapunov_reversed(int n, const double *T, double *reversed);
void fg_lyapunov_schur_dual(bool discrete, int n, const double *reversed, double *C, double *work);

/* Convenience for cold code: solves A X + X A' + C = 0 (or A X A' - X + C = 0) for general A.
 * Returns false when A has an eigenvalue not strictly stable or the solution is not finite.
 * *failed_memory as in riccati.h. */
bool fg_lyapunov(bool discrete, struct fg_matrix A, struct fg_matrix C, struct fg_matrix X,
                 bool *failed_memory);

#endif
