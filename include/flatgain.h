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
 * locale and no environment. Different threads may use different handles at the same time; a problem and a
 * result are immutable after they are made, so threads may share them, until one frees its own.
 *
 * The search has threads of its own. A BLAS that starts threads, too, makes it many times slower: with
 * OpenBLAS call openblas_set_num_threads(1) once, or set OPENBLAS_NUM_THREADS=1 before the program starts. A
 * library must not do that for you.
 *
 * Every function that can fail returns a flatgain_status, sets its output to NULL then, and fills *error when
 * `error` is not NULL (on success *error says nothing). Pointers are not NULL unless it says so; NULL is a
 * FLATGAIN_BAD_ARGUMENT. Questions to a NULL problem or result have the answer of "nothing there": 0, "",
 * NULL, NAN, FLATGAIN_NOT_FOUND, exit status 70. How to build with the library: docs/library.md.
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
    FLATGAIN_CANNOT_WRITE, /* a file cannot be created, written or flushed (the command line only) */
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
 * Errors: CANNOT_READ (the file, or a matrix file it names), BAD_PROBLEM, NO_MEMORY, BAD_ARGUMENT. */
FLATGAIN_API flatgain_status flatgain_problem_read(const char *path, flatgain_problem **problem,
                                                   flatgain_error *error);

/* The same from memory: `length` bytes at `text` (no NUL needed), called `name` in messages (NULL:
 * "problem"); matrices named inside it are read relative to `folder` (NULL: the current one). */
FLATGAIN_API flatgain_status flatgain_problem_parse(const char *text, size_t length, const char *name,
                                                    const char *folder, flatgain_problem **problem,
                                                    flatgain_error *error);

/* Matrices in memory, row-major, in the user's own units. A, B, C, Q, R and W must be there; NULL elsewhere
 * means "absent": D, N, V zero, no lag, every gain free and without bounds, no gain in use. At most 2000
 * states, inputs or outputs. [Q N; N' R], W and V are symmetric and have no negative eigenvalue; off by less
 * than 1e-4, relative, they are projected with a warning in the result, beyond that they are errors. */
typedef struct flatgain_matrices {
    int discrete;      /* 0 continuous, 1 discrete */
    int start;         /* 0: W is the disturbance; 1: W is E[x0 x0'] of a random start, no noise */
    int states;        /* n >= 1 */
    int inputs;        /* m >= 1 */
    int outputs;       /* p >= 1 */
    const double *A;   /* n x n, per time unit (continuous) */
    const double *B;   /* n x m, state per input, per time unit (continuous) */
    const double *C;   /* p x n, output per state */
    const double *D;   /* p x m, output per input */
    const double *Q;   /* n x n, with R and N: [Q N; N' R] >= 0 */
    const double *R;   /* m x m */
    const double *N;   /* n x m */
    const double *W;   /* n x n >= 0, state squared: per step, or per time unit (continuous) */
    const double *V;   /* p x p >= 0, output squared: per step, or times time unit (continuous: needs lag) */
    const double *lag; /* p, time constant of each output's sensor filter, 0 = none (continuous only) */
    const double *fixed;   /* m x p, input per output; NAN = free, a number = fixed there */
    const double *lower;   /* m x p, -INFINITY = none */
    const double *upper;   /* m x p, INFINITY = none */
    const double *today;   /* m x p, the gain in use now */
    double accept_percent; /* accepted gap to LQG in percent, NAN = not stated */
} flatgain_matrices;

/* Makes a problem of copies of them.
 *   problem  out; NULL on error; to be freed with flatgain_problem_free
 * Errors: BAD_ARGUMENT (sizes, a missing matrix, accept_percent), BAD_PROBLEM (the text names the matrix),
 * NO_MEMORY. */
FLATGAIN_API flatgain_status flatgain_problem_from_matrices(const flatgain_matrices *matrices,
                                                            flatgain_problem **problem,
                                                            flatgain_error *error);

/* Gives the handle back; results made from the problem stay valid. NULL does nothing. */
FLATGAIN_API void flatgain_problem_free(flatgain_problem *problem);
FLATGAIN_API int flatgain_problem_inputs(const flatgain_problem *problem);  /* m */
FLATGAIN_API int flatgain_problem_outputs(const flatgain_problem *problem); /* p */
FLATGAIN_API int flatgain_problem_states(const flatgain_problem *problem);  /* n, without sensor lags */
/* What was given; both live as long as the problem. The title is "" when there is none; the gain in use now
 * is m x p row-major, or NULL. */
FLATGAIN_API const char *flatgain_problem_title(const flatgain_problem *problem);
FLATGAIN_API const double *flatgain_problem_today(const flatgain_problem *problem);

/* Reads a gain for a problem from a CSV or Matrix Market file (m rows of p) or from a result file.
 *   gain  out, m x p row-major, m * p numbers, input per output; as it was on error
 * Errors: CANNOT_READ, BAD_PROBLEM (with the place), NO_MEMORY, BAD_ARGUMENT. */
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
    int starts;    /* at most so many starts, 1 to 100000; default 96 */
    uint64_t seed; /* of the random starts; default 1. The same seed gives the same bytes */
    int threads;   /* up to 256; 0, the default: one per processor. The answer does not depend on it */
    /* Called often, also within local searches, from the thread that called flatgain_tune and no other; may
     * be NULL. A return value other than 0 stops the search: the best gain so far is the result
     * (FLATGAIN_INTERRUPTED). */
    int (*progress)(const flatgain_progress *progress, void *user);
    void *user;
} flatgain_options;

FLATGAIN_API flatgain_options flatgain_options_default(void);

/* Finds the gain: K = argmin J(K) over the gains of the given pattern and bounds that stabilise the plant;
 * many starts, local minima, the best of them. With it the benchmarks and the margins of the loops.
 *   options  NULL means the defaults
 *   result   out; NULL on error; to be freed. "Not found" and the like are results, not errors
 * Errors: BAD_ARGUMENT (an option out of its range), NUMERICAL, NO_MEMORY.
 * Source of the method, with equations and references: docs/method.md. */
FLATGAIN_API flatgain_status flatgain_tune(const flatgain_problem *problem, const flatgain_options *options,
                                           flatgain_result **result, flatgain_error *error);

/* Assesses a gain in hand: J, poles, margins and benchmarks; whether it stabilises is a result.
 *   gain     m x p row-major, finite, input per output; it may break the pattern and the bounds (a warning)
 *   options  NULL means the defaults; none of them matters here
 * Errors: as flatgain_tune. */
FLATGAIN_API flatgain_status flatgain_judge(const flatgain_problem *problem, const double *gain,
                                            const flatgain_options *options, flatgain_result **result,
                                            flatgain_error *error);

/* Checks and explains the problem: open-loop poles, hidden modes, benchmarks, a proof when no gain
 * stabilises.
 *   options  NULL means the defaults; none of them matters here
 * Errors: as flatgain_tune. */
FLATGAIN_API flatgain_status flatgain_inspect(const flatgain_problem *problem,
                                              const flatgain_options *options, flatgain_result **result,
                                              flatgain_error *error);

/* NULL does nothing. */
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
/* In the units of x'Qx: per step or as the average over time; with a start, summed over steps or integrated
 * over time. NAN where the cost does not exist (unstable, not given, not computable). For every problem
 * J_LQR <= J_LQG <= J(K). Formulas and sources: docs/method.md. */
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

/* The result as text for people, or as one JSON object (docs/result-format.md) with a final newline; UTF-8,
 * numbers with a point whatever the locale, in JSON so exact that they read back as they were.
 *   style   NULL: all zeros; JSON minds `timing` only
 *   text    out, NUL-terminated, NULL on error; to be freed with flatgain_text_free
 *   length  out, without the NUL; may be NULL
 * Errors: NO_MEMORY, BAD_ARGUMENT. */
FLATGAIN_API flatgain_status flatgain_result_text(const flatgain_result *result, const flatgain_style *style,
                                                  char **text, size_t *length);
FLATGAIN_API flatgain_status flatgain_result_json(const flatgain_result *result, const flatgain_style *style,
                                                  char **text, size_t *length);
/* NULL does nothing. */
FLATGAIN_API void flatgain_text_free(char *text);

#ifdef __cplusplus
}
#endif
#endif
