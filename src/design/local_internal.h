/* The workspace that local.c and shortest.c share. */
#ifndef FG_DESIGN_LOCAL_INTERNAL_H
#define FG_DESIGN_LOCAL_INTERNAL_H

#include "design/local.h"

struct fg_local {
    int q;
    double *gradient, *hessian, *step, *trial, *best;
    double *vectors, *values, *rhs, *reduced, *work; /* of the free gains */
    double *trial_gradient;
    int *free, *held;
    int lwork;
};

/* Derivatives of log J at theta, which costs J there, and the eigenvectors of the Hessian on the gains not
 * held at a bound (listed in free, their number is q - answer->at_bound). Fills residual, smallest, largest,
 * at_bound of the answer. false: LAPACK failed. */
bool fg_local_look(struct fg_local *local, struct fg_cost *cost, const struct fg_pattern *pattern,
                   const double *theta, struct fg_local_answer *answer);

#endif
