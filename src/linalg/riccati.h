/* Algebraic Riccati equations, for regular problems (R > 0, a stabilising solution exists).
 *
 *   continuous  A'S + S A - (S B + N) R^-1 (B'S + N') + Q = 0
 *   discrete    A'S A - S - (A'S B + N)(R + B'S B)^-1 (B'S A + N') + Q = 0
 *
 * A n x n, B n x m, Q n x n symmetric, R m x m symmetric, N n x m; S n x n out, symmetric, the
 * stabilising solution; L m x n out, u = -L x, L = R^-1 (B'S + N') or (R + B'S B)^-1 (B'S A + N').
 * R may be indefinite-free only: R > 0 (continuous); discrete also singular R as long as
 * R + B'S B > 0. Returns false when no stabilising solution could be computed. Scratch memory comes
 * from an arena of its own; *failed_memory tells the two kinds of false apart. */
#ifndef FG_LINALG_RICCATI_H
#define FG_LINALG_RICCATI_H

#include "linalg/matrix.h"

bool fg_riccati_continuous(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                           struct fg_matrix N, struct fg_matrix S, struct fg_matrix L, bool *failed_memory);
bool fg_riccati_discrete(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                         struct fg_matrix N, struct fg_matrix S, struct fg_matrix L, bool *failed_memory);

#endif
