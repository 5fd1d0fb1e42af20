/* Values of the closed loop at frequencies on the stability boundary: one by one, and all loops at the
 * shared ones. */
#ifndef FG_ASSESS_POINTS_H
#define FG_ASSESS_POINTS_H

#include "assess/crossings.h"
#include "assess/loop.h"

struct fg_point {
    double w;
    double complex t;   /* T_ii */
    double noise, peak; /* peak: |1 - T_ii|, or sigma_max(I - T) when all inputs are meant */
};

struct fg_points {
    int count;
    struct fg_point *at; /* ascending in w; 0 first, INFINITY last */
};

/* What an evaluation needs: loop i, or all inputs when i < 0. */
struct fg_probe {
    const struct fg_loop *loop;
    int i;
    double complex *T, *work; /* m x m, workspace of zgesvd */
    double *noise, *values, *rwork;
    int room;
};

/* Memory from the arena; false when there is none. */
bool fg_probe_new(const struct fg_loop *loop, struct fg_arena *arena, struct fg_probe *probe);
struct fg_point fg_probe_at(struct fg_probe *probe, double w);

/* Frequencies where the poles make things happen, and `per_decade` points a decade around them. */
void fg_points_pole_frequencies(const struct fg_loop *loop, int per_decade, struct fg_frequencies *list);
/* Sorts the list and puts a frequency between any two, and one above all. */
void fg_points_midpoints(struct fg_frequencies *list);

/* At the frequencies of the list, framed by 0 and INFINITY. */
bool fg_points_evaluate(struct fg_probe *probe, const struct fg_frequencies *list, struct fg_arena *arena,
                        struct fg_points *points);
/* The same for all loops with one elimination each: loop i from at[i * count], all inputs from
 * at[m * count]. */
bool fg_points_shared(struct fg_probe *probe, const struct fg_frequencies *list, struct fg_arena *arena,
                      struct fg_points *shared);
/* The shared points of loop i together with its own. */
bool fg_points_merge(const struct fg_points *shared, int i, const struct fg_points *own,
                     struct fg_arena *arena, struct fg_points *points);

#endif
