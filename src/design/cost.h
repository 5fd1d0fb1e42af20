/* J(K) with gradient and Hessian in the free gains, from one real Schur form (docs/method.md eq. 4 to 16).
 * After fg_cost_new nothing is allocated. One evaluator per thread; the plant is shared and constant. */
#ifndef FG_DESIGN_COST_H
#define FG_DESIGN_COST_H

#include "plant/model.h"

struct fg_cost; /* opaque */

/* An evaluator for `plant` with the gains of `pattern`; both must outlive it. Memory from the arena;
 * NULL when memory is out. */
struct fg_cost *fg_cost_new(const struct fg_plant *plant, const struct fg_pattern *pattern,
                            struct fg_arena *arena);

/* Stability asked for: continuous Re < -margin, discrete |z| < 1 - margin. Default 0. */
void fg_cost_margin(struct fg_cost *cost, double margin);

bool fg_cost_is_discrete(const struct fg_cost *cost);
/* Whether the loop u = -K (C x + D u) is well posed, stable or not. Overwrites the point. */
bool fg_cost_is_posed(struct fg_cost *cost, const double *K);

/* Evaluates a shifted plant instead: continuous A - shift I, discrete A / shift and B / shift. Default
 * 0 and 1. fg_cost_abscissa stays that of the plant itself; fg_cost_poles are those of the shifted one. */
void fg_cost_shift(struct fg_cost *cost, double shift);

/* J of K (m x p column-major); INFINITY when the loop is not stable, ill posed or not finite. */
double fg_cost_value(struct fg_cost *cost, const double *K);
/* The same for parameters theta (q). */
double fg_cost_at(struct fg_cost *cost, const double *theta);

/* Derivatives at the point of the last fg_cost_value / fg_cost_at that returned a finite J. */
void fg_cost_gradient(struct fg_cost *cost, double *gradient); /* q */
void fg_cost_hessian(struct fg_cost *cost, double *hessian);   /* q x q, symmetric */

/* Of the last point, also an unstable one: largest real part (radius in the discrete setting), and the
 * closed-loop poles. NAN when ill posed. */
double fg_cost_abscissa(const struct fg_cost *cost);
/* Its gradient in theta (q) at the last point, stable or not, where it is differentiable (one of the
 * rightmost poles is taken where several meet). false: no eigenvector could be computed. */
bool fg_cost_abscissa_gradient(struct fg_cost *cost, double *gradient);
void fg_cost_poles(const struct fg_cost *cost, const double **re, const double **im);

#endif
