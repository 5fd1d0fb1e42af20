/* Factors of matrices: Cholesky of semidefinite ones, LU. */
#ifndef FG_LINALG_FACTOR_H
#define FG_LINALG_FACTOR_H

#include "linalg/matrix.h"

/* S = H'H for symmetric semidefinite S (n x n): H has as many rows as S has rank (0 rows for S = 0).
 * The rank is decided after scaling S to unit diagonal, so units do not matter; an indefinite part of
 * rounding size is dropped. H.at is NULL when memory is out. Cholesky with pivoting (LAPACK dpstrf). */
struct fg_matrix fg_factor(struct fg_arena *arena, struct fg_matrix S);

/* The same with the rank decided at `tolerance` times the unit diagonal instead of LAPACK's n eps. */
struct fg_matrix fg_factor_at(struct fg_arena *arena, struct fg_matrix S, double tolerance);

/* B = A^-1 B for A n x n (its LU factors afterwards) and B n x k; pivots n. False when A is singular.
 * LAPACK's dgetrf, then dtrsm, instead of dgesv: OpenBLAS 0.3.21 hands every dgesv and dgetrs, even of 2 x 2,
 * to its thread pool unless the program has set it to one thread. Measured: 6 to 12 us instead of 0.4 alone,
 * and 300 times slower when six threads call it at once. */
bool fg_solve(struct fg_matrix A, int *pivots, struct fg_matrix B);

#endif
