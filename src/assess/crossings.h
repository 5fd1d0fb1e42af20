/* Frequencies at which a loop can cross a level, from eigenvalue problems rather than from a grid. */
#ifndef FG_ASSESS_CROSSINGS_H
#define FG_ASSESS_CROSSINGS_H

#include "assess/loop.h"

/* A list of frequencies that grows; entries >= 0 and finite. */
struct fg_frequencies {
    int count, room;
    double *at;
    bool failed; /* memory is out */
};
void fg_frequencies_add(struct fg_frequencies *list, double w);
void fg_frequencies_sort(struct fg_frequencies *list); /* ascending, equal ones once */
void fg_frequencies_free(struct fg_frequencies *list);

/* Adds every w with Im T_ii(j w) = 0: the loop gain is real there, so a change of gain alone can bring a
 * pole to j w. The list may hold others besides (eigenvalues near the axis); none is missing but by
 * rounding. */
void fg_crossings_real(const struct fg_loop *loop, int i, struct fg_frequencies *list);

/* Adds every w with Re T_ii(j w) = 1/2, which is |L_i| = 1 because L = T / (1 - T). */
void fg_crossings_unit(const struct fg_loop *loop, int i, struct fg_frequencies *list);

/* Adds every w at which `level` is a singular value of S(j w) (i < 0), or equals |S_ii(j w)|. `level` must
 * be above its value at infinity. False when that is not so or the eigenvalues cannot be computed. */
bool fg_crossings_level(const struct fg_loop *loop, int i, double level, struct fg_frequencies *list);

#endif
