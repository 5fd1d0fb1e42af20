/* Everything a run found out, as plain data: the only thing the writers see. A number that does not
 * exist is NAN; nothing here is infinite except gain margins (INFINITY = no limit). */
#ifndef FG_ASSESS_FINDINGS_H
#define FG_ASSESS_FINDINGS_H

#include "problem/problem.h"

struct fg_pole {
    double re, im;
    double damping;     /* -re/|s| of the (equivalent) continuous pole, NAN for a pole at the origin */
    double speed;       /* |pole| (rad per time unit) continuous, modulus |z| discrete */
    const char *states; /* names of the states that take part most, "" when not computed */
};

struct fg_rung {
    const char *key;   /* "none" "today" "rounded" "tuned" "judged" "unstructured" "lqg" "lqr" */
    const char *label; /* "no control" ... in words */
    double cost;       /* NAN: does not exist (unstable) */
    double above_lqg_percent;
    double price_percent; /* what the step to the next rung down costs: 100 (J - J_next) / J_next */
    const char *price;    /* "price of staying static" ..., "" */
    const char *note;     /* "" or e.g. "unstable", "a limit: no real controller reaches it" */
};

struct fg_loop_margin { /* the loop broken at one input, all the others closed */
    int input;
    double gain_down; /* factor in (0,1): the loop gain may fall to this; 0 = to zero */
    double gain_up;   /* factor > 1; INFINITY = no limit */
    double phase_deg; /* INFINITY = no crossing */
    double phase_frequency;
    double gain_up_frequency, gain_down_frequency; /* rad per time unit (discrete: rad per step), NAN none */
    double peak_sensitivity;                       /* max |1/(1+L)| of this loop */
    double peak_frequency;
};

struct fg_hidden_mode {
    double re, im;
    bool uncontrollable, unobservable; /* no input moves it / no output shows it */
    bool unweighted, undisturbed;      /* J does not see it / no disturbance reaches it */
    bool unstable;
    const char *states; /* names of the states that take part most */
};

struct fg_minimum {
    double cost;
    int hits;
    double *K; /* m x p column-major */
};

struct fg_finding_warning {
    const char *code, *text; /* text says what to do next */
    struct fg_finding_warning *next;
};

enum fg_verdict {
    FG_VERDICT_NONE,       /* no accept stated, or no gain */
    FG_VERDICT_ACCEPTED,   /* gap within accept: static is good enough, proved */
    FG_VERDICT_REFUSED,    /* gap above accept and LQG is attained */
    FG_VERDICT_CANNOT_TELL /* gap above accept but the bound is only a limit */
};

struct fg_findings {
    struct fg_arena arena;
    const struct flatgain_problem *problem;
    flatgain_outcome outcome;
    int exit_status;
    const char *summary; /* one or two sentences: what came out and what to do */
    bool complete;       /* false: interrupted */

    bool has_gain;
    bool stable;    /* of the loop with K */
    double *K;      /* m x p column-major */
    double *K_rows; /* the same row-major for the public header */

    double cost, cost_none, cost_today, cost_lqg, cost_lqr;
    bool lqg_attained, lqr_attained; /* meaningful when the cost exists */
    const char *lqg_why, *lqr_why;   /* NULL or one sentence */
    double gap_percent, captured_percent;
    enum fg_verdict verdict;
    const char *verdict_text; /* "" when none */

    int rungs;
    struct fg_rung *ladder;

    int order;             /* number of poles: states with the sensor lags */
    struct fg_pole *poles; /* closed loop with K; NULL without gain */
    struct fg_pole *open_poles;
    double radius;   /* discrete: spectral radius closed loop, else NAN */
    double abscissa; /* continuous: largest real part closed loop, else NAN */

    int margins; /* m, or 0 when not computed */
    struct fg_loop_margin *margin;
    double peak_sensitivity; /* max sigma of (I + K G)^-1 at the inputs, all loops; NAN none */
    double peak_frequency;

    int hidden;
    struct fg_hidden_mode *hidden_modes;
    double condition; /* of the scaled open-loop A eigenvector basis; NAN not computed */

    struct {
        int starts, stabilised, distinct;
        struct fg_minimum *minima; /* distinct, best first */
        long evaluations;          /* of J with or without derivatives, all starts */
        double residual;           /* scaled, bound-projected gradient relative to J */
        double smallest_curvature; /* smallest eigenvalue of the scaled Hessian on free directions / J */
        int at_bound;              /* gains sitting on a bound */
        bool rule_satisfied;       /* stopping rule met (false: ran out of starts) */
        double expected_minima;    /* Boender, Rinnooy Kan estimate of the number of minima */
        double least_unstable;     /* not found: largest real part (radius) of the closest loop, else NAN */
        double seconds;            /* wall clock; written only with timing */
        uint64_t seed;
    } search;

    struct {              /* outcome "impossible" */
        const char *kind; /* "fixed-mode" ...; NULL when none */
        const char *text;
        double re, im;      /* "fixed-mode": the mode that no gain moves, im >= 0; else NAN */
        const char *states; /* "fixed-mode": names of the states in it; else "" */
        double sum;         /* "pole-sum": the sum of the closed-loop poles; else NAN */
    } proof;

    struct fg_finding_warning *warnings; /* problem warnings first */
};

#endif
