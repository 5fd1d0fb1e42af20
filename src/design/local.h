/* Local minimum of log J over the free gains: trust-region Newton with the exact Hessian (the subproblem
 * solved through the eigenvectors of the Hessian; More, Sorensen, SIAM J. Sci. Stat. Comput. 4 (1983)
 * 553), gains at a bound held there while the gradient pushes outward. Works in scaled parameters, where
 * 1 is a natural size (scaling.h). */
#ifndef FG_DESIGN_LOCAL_H
#define FG_DESIGN_LOCAL_H

#include <stdbool.h>

#include "design/cost.h"

enum fg_local_end {
    FG_LOCAL_MINIMUM,   /* residual below the tolerance, or J meets the bound */
    FG_LOCAL_BOUNDARY,  /* the stability margin stops it, J still falling */
    FG_LOCAL_UNBOUNDED, /* parameters beyond FG_PARAMETER_LIMIT, J still falling */
    FG_LOCAL_STALLED,   /* no progress, residual above the tolerance */
    FG_LOCAL_STOPPED    /* iteration limit or told to stop */
};

struct fg_local; /* workspace */

struct fg_local_answer {
    enum fg_local_end end;
    double J;
    double residual;          /* max_k |g_k| max(1, |theta_k|) / J over gains not held at a bound */
    double smallest, largest; /* eigenvalues of the Hessian on the free gains, divided by J */
    double newton;            /* length of the Newton step still to go, over directions that are not flat */
    int at_bound;
    long evaluations; /* of J */
};

struct fg_local_limits {
    int iterations;
    double negligible;        /* J at or below this counts as 0: a minimum, since J >= 0 */
    double bound;             /* no gain costs less (J_LQG), 0 when not known: a J that meets it is a minimum,
                                 also where the way there is too flat for the residual to fall */
    bool (*stop)(void *user); /* may be NULL: asked once per iteration */
    void *user;
};

struct fg_local *fg_local_new(int parameters, struct fg_arena *arena);

/* theta: in a start with finite J inside the bounds, out the best point found. */
struct fg_local_answer fg_local_minimise(struct fg_local *local, struct fg_cost *cost,
                                         const struct fg_pattern *pattern, double *theta,
                                         const struct fg_local_limits *limits);

#endif
