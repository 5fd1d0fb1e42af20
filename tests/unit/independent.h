/* J(K), its poles and its slope straight from the definition, by code that shares nothing with src/ but
 * LAPACK's dgesv and dgeev: the Lyapunov equation as one linear system in the entries of X. For n <= 25. */
#ifndef FG_TESTS_INDEPENDENT_H
#define FG_TESTS_INDEPENDENT_H

#include "plant/model.h"

/* J of K (m x p, row-major); INFINITY when the loop is unstable or ill posed. A continuous plant must have
 * V = 0 (with V the cost is infinite). */
double independent_cost(const struct fg_plant *plant, const double *K);

/* Poles of the loop with K: n each. False when ill posed. *decay: largest real part (discrete: radius). */
bool independent_poles(const struct fg_plant *plant, const double *K, double *re, double *im, double *decay);

/* dJ/dK[entry] (row-major entry) by fourth-order central differences with step h. */
double independent_slope(const struct fg_plant *plant, const double *K, int entry, double h);

#endif
