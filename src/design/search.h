/* The search for the best gain: starts, stabilisation, local minima, the best of them. */
#ifndef FG_DESIGN_SEARCH_H
#define FG_DESIGN_SEARCH_H

#include "design/benchmark.h"
#include "plant/model.h"

struct fg_search_request {
    const struct fg_plant *plant; /* model.law */
    const struct fg_pattern *pattern;
    const struct fg_benchmark *benchmark; /* LQR gain and fastest pole, for starts, scales, margin */
    const struct fg_matrix *today;        /* m x p or NULL: also a start */
    int starts;                           /* at most */
    uint64_t seed;
    int threads; /* 0: one per processor */
    int (*progress)(const flatgain_progress *, void *);
    void *user;
};

enum fg_search_end {
    FG_SEARCH_MINIMUM,   /* the best start ended in a local minimum (residual, curvature say how well) */
    FG_SEARCH_BOUNDARY,  /* the best start runs to the stability boundary */
    FG_SEARCH_UNBOUNDED, /* the best start runs to infinite gain */
    FG_SEARCH_FLAT,      /* J does not depend on the gain: any stabilising gain is as good */
    FG_SEARCH_STALLED,   /* stabilised, but the local search did not converge */
    FG_SEARCH_NOT_FOUND  /* no start was stabilised: K and cost are those of the least unstable gain */
};

struct fg_search_minimum {
    double cost;
    int hits;
    double *K; /* m x p column-major */
};

struct fg_search_answer {
    enum fg_search_end end;
    bool interrupted;
    double *K;       /* m x p column-major, user units */
    double cost;     /* INFINITY when not stable */
    double abscissa; /* least unstable: largest real part (discrete: radius) of the loop with K */
    bool zero;       /* the cost is 0 but for rounding, beside its natural size */
    double residual, smallest_curvature;
    int at_bound;
    int starts, stabilised, distinct;
    struct fg_search_minimum *minima; /* best first */
    long evaluations;
    bool rule_satisfied;
    double expected_minima;
    double decay_margin; /* the search never went closer to the boundary than this (user's time unit) */
};

/* Chooses the coordinates: F = (I + K D)^-1 K where D is not zero and every gain is free, else K. */
flatgain_status fg_search(const struct fg_search_request *request, struct fg_arena *arena,
                          struct fg_search_answer *answer, flatgain_error *error);

/* The search in the coordinates of the plant given. */
flatgain_status fg_search_as_given(const struct fg_search_request *request, struct fg_arena *arena,
                                   struct fg_search_answer *answer, flatgain_error *error);

#endif
