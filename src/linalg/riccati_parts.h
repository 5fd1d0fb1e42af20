/* What the continuous and the discrete Riccati solver share. */
#ifndef FG_LINALG_RICCATI_PARTS_H
#define FG_LINALG_RICCATI_PARTS_H

#include "linalg/matrix.h"

/* The problem in balanced states x~ = diag(d) x and inputs u~ = E u with diag(E R E) = 1:
 *   A~ = d A / d,  B~ = d B / E,  Q~ = Q / (d d'),  R~ = R / (E E'),  N~ = N / (d E'),  S = d S~ d'.
 * d holds powers of two, so S~ and S are the same digits. */
struct fg_riccati_scaled {
    struct fg_matrix A, B, Q, R, N;
    double *d; /* n */
    double *e; /* m, diagonal of E */
};

/* E_j = sqrt(R_jj) where that is positive, otherwise what gives column j of B norm 1 (1 for B_j = 0). */
struct fg_riccati_scaled fg_riccati_scale(struct fg_arena *arena, struct fg_matrix A, struct fg_matrix B,
                                          struct fg_matrix Q, struct fg_matrix R, struct fg_matrix N);

/* Removes the cross term, with R = U'U: An = A - B R^-1 N', Qn = Q - N R^-1 N', G = B R^-1 B'.
 * B, N are overwritten with B U^-1, N U^-1 and R with U. False when R is not positive definite. */
bool fg_riccati_uncross(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                        struct fg_matrix N, struct fg_matrix An, struct fg_matrix Qn, struct fg_matrix G);

/* Balances H = [A -G; -Q -A'] by diag(d, 1/d): after it the rows and columns of H have like norms.
 * d is the product of earlier scaling (given) and this one, powers of two. */
void fg_riccati_balance(struct fg_matrix A, struct fg_matrix G, struct fg_matrix Q, double *d);

/* S = U2 U1^-1, where [U1; U2] spans the invariant subspace of H (2n x 2n, overwritten) that belongs to
 * the eigenvalues with negative real part (Laub, IEEE TAC 24 (1979) 913). False when they are not n,
 * or U1 is singular. */
bool fg_hamiltonian_solution(struct fg_arena *arena, struct fg_matrix H, struct fg_matrix S);

/* Newton's method (Kleinman, IEEE TAC 13 (1968) 114; Hewer, IEEE TAC 16 (1971) 382) from S, which must
 * give a stable loop: S_new solves the Lyapunov equation of u = -L x with L from S, and decreases
 * monotonically to the stabilising solution, so no step control is needed. Stops when the change no longer
 * falls. S (n x n) in and out, L (m x n) out, both in scaled variables. False: the loop of S is not stable,
 * or the iteration does not settle. */
bool fg_riccati_refine(bool discrete, struct fg_arena *arena, struct fg_riccati_scaled p, struct fg_matrix S,
                       struct fg_matrix L);

/* S = d S~ d', L = E^-1 L~ d. */
void fg_riccati_unscale(struct fg_riccati_scaled p, struct fg_matrix S, struct fg_matrix L);

#endif
