/* Shared by the files that assemble findings; nothing outside src/assess includes this. */
#ifndef FG_ASSESS_ASSEMBLY_H
#define FG_ASSESS_ASSEMBLY_H

#include "assess/findings.h"
#include "design/benchmark.h"
#include "design/cost.h"
#include "design/search.h"
#include "plant/model.h"
#include "plant/modes.h"

/* What is known so far in one run. */
struct fg_assembly {
    const struct flatgain_problem *problem;
    struct fg_findings *findings;
    struct fg_arena *arena; /* of the findings */
    struct fg_model model;
    struct fg_benchmark benchmark;
    struct fg_pattern free; /* every gain free, no bounds */
    bool restricted;        /* the user's pattern fixes, ties or bounds something */
    struct fg_cost *cost;   /* evaluator with the free pattern */
    bool open_stable;
    bool ill_posed;                 /* I + K D is singular for the gain assessed */
    bool doubtful;                  /* the cost of the tuned gain is nothing but rounding */
    struct fg_modes open, closed;   /* open loop; closed loop with the gain (count 0: none) */
    struct fg_search_answer answer; /* tune only */
    bool has_unstructured;
    struct fg_search_answer unstructured; /* tune with a restricted pattern only */
};

/* ---- words (words.c); every text lives in the arena and is never NULL ---- */

/* `digits` significant digits. */
const char *fg_words_number(struct fg_arena *arena, double value, int digits);
/* "12.3 %". */
const char *fg_words_percent(struct fg_arena *arena, double percent);
/* "-0.3 (roll rate)" or "-0.3 +/- 2.1i (roll rate)". */
const char *fg_words_mode(struct fg_arena *arena, double re, double im, const char *states);
/* "a", "a and b", "a, b and c": the names for which chosen[i] is true, at most `most`, then "...". */
const char *fg_words_names(struct fg_arena *arena, const struct fg_signal *signal, int count,
                           const bool *chosen, int most);
/* Appends a warning; both texts must live as long as the findings. */
void fg_warn(struct fg_findings *findings, const char *code, const char *text);

/* ---- ladder.c ---- */

/* Rungs, prices, gap, captured; needs the costs in the findings and the unstructured answer. */
void fg_ladder_fill(struct fg_assembly *a);

/* ---- verdict.c ---- */

/* Verdict against `accept`, summary, exit status; needs everything else. */
void fg_verdict_fill(struct fg_assembly *a);
/* Outputs without noise in the continuous setting; true when there are any. chosen: p flags. */
bool fg_verdict_noise_free(const struct flatgain_problem *problem, bool *chosen);

/* ---- assemble.c ---- */

/* An open-loop mode of a sensor's filter, stable by construction: that the weights do not see it, or that two
 * equal filters behind one input cannot be moved apart, is no news. */
bool fg_is_sensor_lag(const struct fg_assembly *a, const struct fg_mode *mode);

/* ---- warnings.c ---- */

void fg_warnings_fill(struct fg_assembly *a);
/* True when K keeps the user's pattern and bounds; otherwise *text says where not. */
bool fg_pattern_kept(const struct fg_assembly *a, const double *K, const char **text);

/* ---- proof.c ---- */

/* Looks for a proof that no gain of the structure stabilises; fills findings->proof, kind NULL: none.
 * Only NO_MEMORY is an error. */
flatgain_status fg_prove(struct fg_assembly *a, flatgain_error *error);

#endif
