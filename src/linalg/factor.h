/* Factors of semidefinite matrices. */
#ifndef FG_LINALG_FACTOR_H
#define FG_LINALG_FACTOR_H

#include "linalg/matrix.h"

/* S = H'H for symmetric semidefinite S (n x n): H has as many rows as S has rank (0 rows for S = 0).
 * The rank is decided after scaling S to unit diagonal, so units do not matter; an indefinite part of
 * rounding size is dropped. H.at is NULL when memory is out. Cholesky with pivoting (LAPACK dpstrf). */
struct fg_matrix fg_factor(struct fg_arena *arena, struct fg_matrix S);

/* The same with the rank decided at `tolerance` times the unit diagonal instead of LAPACK's n eps. */
struct fg_matrix fg_factor_at(struct fg_arena *arena, struct fg_matrix S, double tolerance);

#endif
