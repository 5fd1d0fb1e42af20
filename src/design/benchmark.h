/* LQR and LQG cost: the lower rungs of the ladder, exact also for noise-free outputs and free inputs. */
#ifndef FG_DESIGN_BENCHMARK_H
#define FG_DESIGN_BENCHMARK_H

#include "plant/model.h"

enum fg_bound_kind {
    FG_BOUND_NONE,     /* does not exist or could not be computed: cost is NAN, why says so */
    FG_BOUND_ATTAINED, /* some controller reaches it */
    FG_BOUND_LIMIT     /* an infimum only: noise-free continuous outputs, free inputs, zeros on the axis */
};

struct fg_bound {
    double cost;
    enum fg_bound_kind kind;
    const char *why; /* one sentence, NULL when nothing is to be said */
};

struct fg_benchmark {
    struct fg_bound lqr, lqg;
    bool has_lqr_gain;  /* true whenever the plant can be stabilised */
    struct fg_matrix L; /* m x n: LQR gain u = -L x on the plant given, where it is attained; where it is not,
                         * that of slightly larger weights: stabilising, good for starting points only */
    double fastest;     /* largest |pole| of A - B L; NAN when there is none */
};

/* Computes both bounds for one plant. Memory for the result from `arena`. Only NO_MEMORY is an error;
 * a bound that does not exist is FG_BOUND_NONE. */
flatgain_status fg_benchmark(const struct fg_plant *plant, struct fg_arena *arena,
                             struct fg_benchmark *benchmark, flatgain_error *error);

#endif
