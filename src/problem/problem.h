/* What the user asked for: plain data, checked, in the user's units. Made by the reader or from
 * matrices, never changed afterwards. Shapes: n states, m inputs, p outputs. */
#ifndef FG_PROBLEM_PROBLEM_H
#define FG_PROBLEM_PROBLEM_H

#include <stdatomic.h>
#include <stdbool.h>
#include <stdint.h>

#include "base/arena.h"
#include "base/status.h"
#include "linalg/matrix.h"

enum fg_setting { FG_CONTINUOUS, FG_DISCRETE };

/* How J is read: average in the steady state, or integral (sum) from a random start. */
enum fg_reading { FG_AVERAGE, FG_START };

/* Which entries of K the search may move. Entry (i, j) is fixed[i,j] + sign[i,j] * theta[index[i,j]],
 * where index -1 means "fixed at fixed[i,j]" and otherwise fixed[i,j] is 0. Tied entries share an index.
 * All m x p, column-major like every matrix here. */
struct fg_pattern {
    int m, p;
    int count;     /* q, number of free parameters theta */
    int *index;    /* m x p */
    double *sign;  /* m x p, +1 or -1; 0 where fixed */
    double *fixed; /* m x p */
    double *lower; /* q, -INFINITY = none */
    double *upper; /* q, INFINITY = none */
};

struct fg_signal {
    const char *name; /* never NULL: "u1", "y1", "x1" when the user gave none */
    const char *unit; /* "" when none */
    double lag;       /* outputs: time constant of the sensor filter, 0 = none */
    bool lag_in_plc;  /* outputs: the PLC does the filtering, so the law contains it */
};

struct fg_problem_warning {
    const char *code; /* short, stable: "weight-projected" */
    const char *text; /* with the place */
    long line;        /* in the problem file, 0 without one */
    struct fg_problem_warning *next;
};

struct flatgain_problem {
    struct fg_arena arena; /* owns everything below */
    atomic_int references;
    const char *title; /* "" when none */
    const char *path;  /* as given; "" from memory */
    enum fg_setting setting;
    enum fg_reading reading;
    const char *time_unit; /* "" when none; "step" in the discrete setting */
    int n, m, p;
    struct fg_matrix A, B, C, D;
    struct fg_matrix W;        /* n x n: disturbance, or E[x0 x0'] when reading is FG_START */
    struct fg_matrix V;        /* p x p, zero when none */
    struct fg_matrix Q, R, N;  /* N zero when none */
    struct fg_signal *inputs;  /* m */
    struct fg_signal *outputs; /* p */
    struct fg_signal *states;  /* n */
    bool named_inputs, named_outputs, named_states; /* the user gave names */
    struct fg_pattern pattern;
    bool has_today;
    struct fg_matrix today;              /* m x p */
    const double *today_rows;            /* the same, row-major, or NULL: for the public header */
    double accept_percent;               /* NAN = not stated */
    struct fg_problem_warning *warnings; /* in the order of the file */
    uint64_t hash; /* FNV-1a of the normalised numbers and names: changes with any of them */
};

/* Checks shared by both ways of making a problem, and fills in defaults: sizes agree, weights
 * [Q N; N' R], W, V symmetric and semidefinite (1e-4 relative: projected with a warning), continuous V
 * only with a lag, fixed values within bounds, hash. `where` gives the place of a key for messages. */
struct fg_places; /* reader's table of key -> line, column; NULL without a file */
flatgain_status fg_problem_check(struct flatgain_problem *problem, const struct fg_places *where,
                                 flatgain_error *error);

/* A new reference to an immutable problem; flatgain_problem_free gives it back. */
flatgain_problem *fg_problem_retain(const flatgain_problem *problem);

/* K (m x p) from parameters theta (q). */
void fg_pattern_gain(const struct fg_pattern *pattern, const double *theta, double *K);
/* theta (q) closest to K in the least-squares sense, clipped to the bounds. */
void fg_pattern_parameters(const struct fg_pattern *pattern, const double *K, double *theta);

#endif
