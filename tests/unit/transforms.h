/* The same plant seen otherwise: what must leave the law or the cost unchanged. */
#ifndef FG_TESTS_TRANSFORMS_H
#define FG_TESTS_TRANSFORMS_H

#include "plant/model.h"

/* x~ = T x: A~ = T A T^-1, B~ = T B, C~ = C T^-1, Q~ = T^-T Q T^-1, N~ = T^-T N, W~ = T W T'. */
struct fg_plant plant_similar(struct fg_arena *arena, const struct fg_plant *plant, struct fg_matrix T);

/* Other units: x~_i = x[i] x_i, u~_i = u[i] u_i, y~_j = y[j] y_j, t~ = t / slow (continuous). Then
 * K~_ij = K_ij u[i] / y[j] and J~ = J. */
struct plant_units {
    double x[32], u[8], y[8], slow;
};
struct fg_plant plant_units(struct fg_arena *arena, const struct fg_plant *plant,
                            const struct plant_units *to);

/* State, input and output `to` of the new plant are number x[to], u[to], y[to] of the old one. */
struct fg_plant plant_permuted(struct fg_arena *arena, const struct fg_plant *plant, const int *x,
                               const int *u, const int *y);

/* D removed: J(K) of the plant is J~(F), F = (I + K D)^-1 K (m x p row-major both). */
struct fg_plant plant_without_D(struct fg_arena *arena, const struct fg_plant *plant);
bool gain_without_D(const struct fg_plant *plant, const double *K, double *F);

/* (A', C', B', D'; W, V; Q, R): J~(K') = J(K) when N = 0; continuous also R = 0 (its V must be 0). With
 * Acl~ = Acl', Qcl~ = Wcl, Wcl~ = Qcl: tr(P~ Wcl~) = tr(X Qcl) = tr(P Wcl), tr(F~'R~F~V~) = tr(F V F'R). */
struct fg_plant plant_dual(struct fg_arena *arena, const struct fg_plant *plant);

/* I + 0.3 random, well conditioned for the orders of the tests. */
struct fg_matrix random_transform(struct fg_arena *arena, int n);
/* A random order of 0 .. count - 1. */
void random_order(int count, int *order);

#endif
