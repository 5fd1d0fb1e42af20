/* The linear-quadratic problem when some inputs cost nothing (R singular): its cost is the limit of
 * R + eps I as eps falls to 0, found exactly by reducing the order, never with a small fictitious weight
 * (Bryson, Johansen, IEEE TAC 10 (1965) 4, in its dual form; docs/method.md eq. 38, 39). The filter with
 * noise-free outputs is the same problem for (A', C', W, V). */
#ifndef FG_DESIGN_LIMIT_SOLUTION_H
#define FG_DESIGN_LIMIT_SOLUTION_H

#include "linalg/matrix.h"

struct fg_limit_problem {
    bool discrete;
    struct fg_matrix A, B, Q, R, N; /* n x n, n x m, n x n, m x m, n x m; [Q N; N' R] semidefinite */
};

struct fg_limit_solution {
    struct fg_matrix S;      /* n x n, optimal cost x'S x */
    struct fg_matrix before; /* discrete, n x n: cost of a state before the input acts on it,
                              * min over u of (x + B u)'S(x + B u) + u'R u; for a filter the covariance after
                              * the newest reading. Continuous: S */
    struct fg_matrix factor; /* E, k x n: E'E = A'S + S A + Q (discrete A'S A - S + Q): what the cost
                              * rises by when the input is not applied. k <= m */
    bool reduced;            /* some inputs were free and acted: the order was reduced */
    bool has_gain;           /* L is the optimal gain (always when not reduced) */
    struct fg_matrix L;      /* m x n, u = -L x */
    double decay;            /* distance of the slowest pole from the boundary over the largest |pole|
                              * (discrete: 1 - radius) of the loop that remained; INFINITY when order 0 */
};

/* The stabilising solution, for the limit of R as above. Results from `arena`. False when there is none
 * (not stabilisable, or a zero on the boundary) or memory is out: then arena->failed. */
bool fg_limit_solve(const struct fg_limit_problem *problem, struct fg_arena *arena,
                    struct fg_limit_solution *solution);

/* d (n), powers of two: x~ = diag(d) x evens out the rows and columns of A together with the directions of
 * B and the weights Q. It does not depend on the units of states, inputs, time or cost. */
void fg_limit_scaling(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, double *d,
                      struct fg_arena *scratch);

#endif
