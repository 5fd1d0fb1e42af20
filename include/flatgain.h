/* flatgain: one fixed gain matrix from measurements to actuators.
 *
 * The law is  u = u0 - K (y - y0),  in deviations  u = -K y,  K with m rows (inputs) and p columns
 * (outputs), for the plant
 *
 *     continuous   dx/dt  = A x    + B u    + w        y    = C x    + D u    + v
 *     discrete     x[k+1] = A x[k] + B u[k] + w[k]     y[k] = C x[k] + D u[k] + v[k]
 *
 * and the cost  J = E[x'Qx + 2x'Nu + u'Ru]  in the steady state. Units: everything in the user's own
 * units; time in the plant's time unit (continuous) or in steps (discrete).
 *
 * Every matrix that crosses this header is dense and ROW-major: element (i, j) of an r x c matrix is
 * at[i * c + j]. The library is silent: it prints nothing, never exits, touches no signal handler, no
 * locale and no environment. Different threads may use different handles at the same time; a problem is
 * immutable after it is made, so threads may share it.
 *
 * Gains move machines that can hurt people: commission with limits in place, keep interlocks
 * independent of the law, and follow local codes and licensed practice first. */
#ifndef FLATGAIN_H
#define FLATGAIN_H

#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#if defined(__GNUC__)
#define FLATGAIN_API __attribute__((visibility("default")))
#else
#define FLATGAIN_API
#endif

#define FLATGAIN_VERSION "0.1.0"

/* Did the call work? An outcome such as "no gain found" is not an error: see flatgain_outcome. */
typedef enum flatgain_status {
    FLATGAIN_OK = 0,
    FLATGAIN_NO_MEMORY,    /* an allocation failed; nothing was changed */
    FLATGAIN_BAD_ARGUMENT, /* misuse of this interface, a wrong option value */
    FLATGAIN_BAD_PROBLEM,  /* the problem is wrong: the error text names place, finding, expectation */
    FLATGAIN_CANNOT_READ,  /* a file cannot be opened or read */
    FLATGAIN_CANNOT_WRITE, /* a file cannot be created, written or flushed */
    FLATGAIN_NUMERICAL,    /* a factorisation failed on finite data */
    FLATGAIN_INTERNAL      /* a bug in flatgain */
} flatgain_status;

/* What came out. */
typedef enum flatgain_outcome {
    FLATGAIN_TUNED = 0,  /* a stabilising gain that is a local minimum of J, the best found */
    FLATGAIN_JUDGED,     /* a given gain was assessed, nothing was optimised */
    FLATGAIN_INSPECTED,  /* the problem was checked, nothing was optimised */
    FLATGAIN_NOT_FOUND,  /* no stabilising gain was found; this is not a proof that none exists */
    FLATGAIN_IMPOSSIBLE, /* proved: no gain of the given structure stabilises */
    FLATGAIN_BOUNDARY,   /* J keeps falling towards the stability boundary: no minimum exists */
    FLATGAIN_UNBOUNDED,  /* J keeps falling as the gain grows without limit */
    FLATGAIN_INTERRUPTED /* stopped by the caller: the best gain so far */
} flatgain_outcome;

typedef struct flatgain_error {
    flatgain_status status;
    long line;   /* in the problem file, from 1; 0 where there is no place */
    long column; /* from 1 */
    char text[1000];
} flatgain_error;

typedef struct flatgain_problem flatgain_problem; /* immutable, counted references */
typedef struct flatgain_result flatgain_result;   /* keeps its problem alive */

/* The word used in files and messages ("tuned", "not-found", ...; "no memory", ...); never NULL. */
FLATGAIN_API const char *flatgain_outcome_name(flatgain_outcome outcome);
FLATGAIN_API const char *flatgain_status_name(flatgain_status status);
FLATGAIN_API const char *flatgain_version(void);

/* ---- problems -------------------------------------------------------------------------------- */

/* Reads a problem file (YAML, hence also JSON; every key is in docs/problem-file.md).
 *   path     of the file; matrices named inside it are read relative to its folder
 *   problem  out; NULL on error
 *   error    out, may be NULL; text is `PATH:LINE:COLUMN: what is wrong; what is expected`
 * Errors: CANNOT_READ, BAD_PROBLEM, NO_MEMORY. */
FLATGAIN_API flatgain_status flatgain_problem_read(const char *path, flatgain_problem **problem,
                                                   flatgain_error *error);

/* The same from memory: `length` bytes at `text`, called `name` in messages; matrices named inside it
 * are read relative to `folder` (NULL: the current one). */
FLATGAIN_API flatgain_status flatgain_problem_parse(const char *text, size_t length, const char *name,
                                                    const char *folder, flatgain_problem **problem,
                                                    flatgain_error *error);

/* A problem from matrices in memory. NULL pointers mean "absent": D, N, V zero; pattern all free. */
typedef struct flatgain_matrices {
    int discrete;          /* 0 continuous, 1 discrete */
    int start;             /* 0: W is the disturbance; 1: W is E[x0 x0'] of a random start, no noise */
    int states;            /* n >= 1 */
    int inputs;            /* m >= 1 */
    int outputs;           /* p >= 1 */
    const double *A;       /* n x n */
    const double *B;       /* n x m */
    const double *C;       /* p x n */
    const double *D;       /* p x m */
    const double *Q;       /* n x n, with R and N: [Q N; N' R] >= 0 */
    const double *R;       /* m x m */
    const double *N;       /* n x m */
    const double *W;       /* n x n >= 0 */
    const double *V;       /* p x p >= 0: per step (discrete), intensity (continuous: needs lag) */
    const double *lag;     /* p, time constant of each output's sensor filter, 0 = none (continuous) */
    const double *fixed;   /* m x p, NAN = free, a number = fixed there */
    const double *lower;   /* m x p, -INFINITY = none */
    const double *upper;   /* m x p, INFINITY = none */
    const double *today;   /* m x p, the gain in use now */
    double accept_percent; /* accepted gap to LQG in percent, NAN = not stated */
} flatgain_matrices;

FLATGAIN_API flatgain_status flatgain_problem_from_matrices(const flatgain_matrices *matrices,
                                                            flatgain_problem **problem,
                                                            flatgain_error *error);
FLATGAIN_API void flatgain_problem_free(flatgain_problem *problem);
FLATGAIN_API int flatgain_problem_inputs(const flatgain_problem *problem);        /* m */
FLATGAIN_API int flatgain_problem_outputs(const flatgain_problem *problem);       /* p */
FLATGAIN_API int flatgain_problem_states(const flatgain_problem *problem);        /* n, without sensor lags */
FLATGAIN_API const char *flatgain_problem_title(const flatgain_problem *problem); /* "" when none */
/* The gain in use now, m x p row-major, or NULL. */
FLATGAIN_API const double *flatgain_problem_today(const flatgain_problem *problem);

/* Reads a gain for a problem from a CSV or Matrix Market file (m rows of p) or from a result file.
 *   gain  out, m x p row-major, m * p numbers */
FLATGAIN_API flatgain_status flatgain_gain_read(const char *path, const flatgain_problem *problem,
                                                double *gain, flatgain_error *error);

/* ---- work ------------------------------------------------------------------------------------ */

typedef struct flatgain_progress {
    int starts_done;
    int starts_max;
    int minima;  /* distinct local minima so far */
    double best; /* lowest cost so far, INFINITY before the first */
} flatgain_progress;

typedef struct flatgain_options {
    int starts;    /* at most so many starts; default 96 */
    uint64_t seed; /* of the random starts; default 1. The same seed gives the same bytes */
    int threads;   /* 0: one per processor. The answer does not depend on it */
    /* Called from the thread that called flatgain_tune, between batches; may be NULL. A return value
     * other than 0 stops the search: the best gain so far is the result (FLATGAIN_INTERRUPTED). */
    int (*progress)(const flatgain_progress *progress, void *user);
    void *user;
} flatgain_options;

FLATGAIN_API flatgain_options flatgain_options_default(void);

/* Finds the gain: stabilising starts, local minima of J, the best of them, benchmarks and margins.
 *   options  NULL means the defaults
 *   result   out; NULL on error. "Not found" and the like are results, not errors.
 * Source of the method: docs/method.md. */
FLATGAIN_API flatgain_status flatgain_tune(const flatgain_problem *problem, const flatgain_options *options,
                                           flatgain_result **result, flatgain_error *error);

/* Assesses a gain in hand: gain is m x p row-major. */
FLATGAIN_API flatgain_status flatgain_judge(const flatgain_problem *problem, const double *gain,
                                            const flatgain_options *options, flatgain_result **result,
                                            flatgain_error *error);

/* Checks and explains the problem. */
FLATGAIN_API flatgain_status flatgain_inspect(const flatgain_problem *problem,
                                              const flatgain_options *options, flatgain_result **result,
                                              flatgain_error *error);

FLATGAIN_API void flatgain_result_free(flatgain_result *result);

/* ---- results --------------------------------------------------------------------------------- */

FLATGAIN_API flatgain_outcome flatgain_result_outcome(const flatgain_result *result);
/* The exit status the command line gives this result (docs/exit-status.md). */
FLATGAIN_API int flatgain_result_exit_status(const flatgain_result *result);
/* K, m x p row-major, or NULL when there is none. Lives as long as the result. */
FLATGAIN_API const double *flatgain_result_gain(const flatgain_result *result);

typedef enum flatgain_cost {
    FLATGAIN_COST_GAIN = 0, /* J of the gain of this result */
    FLATGAIN_COST_NONE,     /* no control, u = u0 */
    FLATGAIN_COST_TODAY,    /* the gain in use now */
    FLATGAIN_COST_LQG,      /* best causal linear controller on the same measurements */
    FLATGAIN_COST_LQR       /* every state known */
} flatgain_cost;
/* NAN where the cost does not exist (unstable, not given, not computable). */
FLATGAIN_API double flatgain_result_cost(const flatgain_result *result, flatgain_cost which);
/* 100 (J(K) - J_LQG) / J_LQG, NAN where it does not exist. */
FLATGAIN_API double flatgain_result_gap_percent(const flatgain_result *result);
/* 1 when some real controller reaches J_LQG, 0 when it is only a limit. */
FLATGAIN_API int flatgain_result_lqg_attained(const flatgain_result *result);
/* max |scaled, bound-projected gradient| of J at the gain, relative to J; NAN when not tuned. */
FLATGAIN_API double flatgain_result_residual(const flatgain_result *result);

typedef struct flatgain_style {
    int color;   /* 1: terminal colours */
    int verbose; /* 1: everything; 0: what is needed; -1: the gain and the cost only */
    int timing;  /* 1: seconds spent (JSON and text) */
    int width;   /* columns; 0: 80 */
} flatgain_style;

/* The result as text for people, or as one JSON object (docs/result-format.md) with a final newline.
 *   text    out, NUL-terminated, to be freed with flatgain_text_free
 *   length  out, without the NUL; may be NULL */
FLATGAIN_API flatgain_status flatgain_result_text(const flatgain_result *result, const flatgain_style *style,
                                                  char **text, size_t *length);
FLATGAIN_API flatgain_status flatgain_result_json(const flatgain_result *result, const flatgain_style *style,
                                                  char **text, size_t *length);
FLATGAIN_API void flatgain_text_free(char *text);

#ifdef __cplusplus
}
#endif
#endif
