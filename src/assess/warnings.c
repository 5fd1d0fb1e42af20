#include "assess/assembly.h"

#include <math.h>
#include <string.h>

/* Common practice for a single loop: a phase margin of 30 degrees or more, room for twice the gain, and a
 * peak sensitivity of at most 2 (Astrom and Hagglund, Advanced PID Control, give 1.2 to 2.0). */
static const double LEAST_PHASE_DEG = 30;
static const double LEAST_GAIN_UP = 2;
static const double MOST_SENSITIVITY = 2;

/* A closed-loop mode that decays slower than this part of the fastest pole, and that the weights do not see
 * or no disturbance reaches, was left alone by the optimisation: the user should know. */
static const double SLOW_PART = 1e-3;

/* How many modes or gains one warning names. */
enum { MOST_NAMED = 3 };

static const char *or_empty(const char *text)
{
    return text ? text : "";
}

static double decay_of(const struct fg_assembly *a, const struct fg_mode *mode)
{
    return a->model.law.discrete ? 1 - hypot(mode->re, mode->im) : -mode->re;
}

/* "-0.1 (a), -0.2 (b) and 4 more": the modes for which the flags agree with `wanted`. */
static const char *list_modes(struct fg_assembly *a, const struct fg_modes *modes, const bool *wanted)
{
    const char *text = "";
    int total = 0, said = 0;
    for (int i = 0; i < modes->count; i++)
        total += wanted[i];
    for (int i = 0; i < modes->count && said < MOST_NAMED; i++)
        if (wanted[i]) {
            const struct fg_mode *mode = &modes->mode[i];
            text = or_empty(fg_arena_text(a->arena, "%s%s%s", text, said++ ? ", " : "",
                                          fg_words_mode(a->arena, mode->re, mode->im, mode->states)));
        }
    if (total > said)
        text = or_empty(fg_arena_text(a->arena, "%s and %d more", text, total - said));
    return text;
}

static void warn_hidden(struct fg_assembly *a)
{
    const struct fg_modes *modes = &a->open;
    if (a->findings->proof.kind) /* the proof says it */
        return;
    bool *stuck = fg_arena_get(a->arena, (size_t)modes->count + 1);
    bool *blind = fg_arena_get(a->arena, (size_t)modes->count + 1);
    if (!stuck || !blind)
        return;
    int stuck_count = 0, blind_count = 0;
    for (int i = 0; i < modes->count; i++) {
        bool lag = fg_is_sensor_lag(a, &modes->mode[i]);
        stuck[i] = modes->mode[i].uncontrollable && !lag;
        blind[i] = modes->mode[i].unobservable && !modes->mode[i].uncontrollable && !lag;
        stuck_count += stuck[i];
        blind_count += blind[i];
    }
    if (stuck_count > 0)
        fg_warn(a->findings, "hidden-mode",
                fg_arena_text(a->arena,
                              "No input moves the mode%s %s: no gain changes %s. To control %s, check B "
                              "or add an actuator.",
                              stuck_count > 1 ? "s" : "", list_modes(a, modes, stuck),
                              stuck_count > 1 ? "them" : "it", stuck_count > 1 ? "them" : "it"));
    if (blind_count > 0)
        fg_warn(a->findings, "hidden-mode",
                fg_arena_text(a->arena,
                              "No output shows the mode%s %s: no law on these measurements changes %s. "
                              "To control %s, check C or add a sensor.",
                              blind_count > 1 ? "s" : "", list_modes(a, modes, blind),
                              blind_count > 1 ? "them" : "it", blind_count > 1 ? "them" : "it"));
}

/* Slow closed-loop modes that J does not see or no disturbance reaches. */
static void warn_unseen(struct fg_assembly *a)
{
    const struct fg_modes *modes = &a->closed;
    if (!a->findings->has_gain || !a->findings->stable || a->findings->outcome == FLATGAIN_BOUNDARY)
        return;
    double fastest = 0;
    for (int i = 0; i < modes->count; i++)
        fastest = fmax(fastest, hypot(modes->mode[i].re, modes->mode[i].im));
    bool *unweighted = fg_arena_get(a->arena, (size_t)modes->count + 1);
    bool *undisturbed = fg_arena_get(a->arena, (size_t)modes->count + 1);
    if (!unweighted || !undisturbed)
        return;
    bool any_unweighted = false, any_undisturbed = false;
    for (int i = 0; i < modes->count; i++) {
        const struct fg_mode *mode = &modes->mode[i];
        bool slow = decay_of(a, mode) < SLOW_PART * (a->model.law.discrete ? 1 : fastest);
        unweighted[i] = slow && mode->unweighted;
        undisturbed[i] = slow && mode->undisturbed && !mode->unweighted;
        any_unweighted = any_unweighted || unweighted[i];
        any_undisturbed = any_undisturbed || undisturbed[i];
    }
    if (any_unweighted)
        fg_warn(a->findings, "unweighted-mode",
                fg_arena_text(a->arena,
                              "The weights do not see the slow mode %s, so nothing keeps it away "
                              "from instability. Give its states a weight in Q.",
                              list_modes(a, modes, unweighted)));
    if (any_undisturbed)
        fg_warn(a->findings, "undisturbed-mode",
                fg_arena_text(a->arena,
                              "No disturbance reaches the slow mode %s, so the cost does not care "
                              "how slow it is. Let a disturbance reach its states.",
                              list_modes(a, modes, undisturbed)));
}

static void warn_boundary(struct fg_assembly *a)
{
    if (a->findings->outcome != FLATGAIN_BOUNDARY || a->closed.count == 0)
        return;
    const struct fg_mode *mode = &a->closed.mode[0];
    const char *name = fg_words_mode(a->arena, mode->re, mode->im, mode->states);
    const char *who = mode->states[0] ? mode->states : "its states";
    const char *cure =
        mode->unweighted && !mode->undisturbed
            ? fg_arena_text(a->arena, "The weights do not see it: give %s a weight in Q.", who)
        : mode->undisturbed && !mode->unweighted
            ? fg_arena_text(a->arena, "No disturbance reaches it: let one reach %s, even a small one.", who)
            : fg_arena_text(a->arena, "Give %s a weight in Q and a disturbance, even small ones.", who);
    fg_warn(a->findings, "boundary",
            fg_arena_text(a->arena, "The cost falls as the mode %s drifts to the boundary of stability. %s",
                          name, or_empty(cure)));
}

bool fg_pattern_kept(const struct fg_assembly *a, const double *K, const char **text)
{
    const struct flatgain_problem *problem = a->problem;
    const struct fg_pattern *pattern = &problem->pattern;
    struct fg_arena *arena = a->arena;
    double *theta = fg_arena_doubles(arena, (size_t)pattern->count + 1);
    double *nearest = fg_arena_doubles(arena, (size_t)pattern->m * (size_t)pattern->p);
    *text = "";
    if (!theta || !nearest)
        return true;
    /* the nearest gain that keeps the pattern is the gain itself exactly when it keeps it */
    fg_pattern_parameters(pattern, K, theta);
    fg_pattern_gain(pattern, theta, nearest);
    for (int i = 0; i < pattern->m; i++)
        for (int j = 0; j < pattern->p; j++) {
            double is = K[i + j * pattern->m], should = nearest[i + j * pattern->m];
            if (fabs(is - should) <= 1e-9 * fmax(fabs(is), fabs(should)))
                continue;
            *text = or_empty(fg_arena_text(
                arena,
                "The judged gain does not keep the problem's pattern or bounds: %s from %s is %s, the "
                "nearest allowed value is %s.",
                problem->inputs[i].name, problem->outputs[j].name, fg_words_number(arena, is, 6),
                fg_words_number(arena, should, 6)));
            return false;
        }
    return true;
}

static void warn_bounds(struct fg_assembly *a)
{
    const struct fg_pattern *pattern = &a->problem->pattern;
    const struct fg_findings *f = a->findings;
    if (!f->has_gain || f->search.at_bound <= 0)
        return;
    const char *text = "";
    int said = 0, total = 0;
    for (int i = 0; i < pattern->m; i++)
        for (int j = 0; j < pattern->p; j++) {
            int entry = i + j * pattern->m, index = pattern->index[entry];
            if (index < 0)
                continue;
            double theta = f->K[entry] * pattern->sign[entry];
            double lower = pattern->lower[index], upper = pattern->upper[index];
            double room = 1e-9 * fabs(theta);
            if (theta > lower + room && theta < upper - room)
                continue;
            if (++total > MOST_NAMED)
                continue;
            text = or_empty(fg_arena_text(a->arena, "%s%s%s from %s = %s", text, said++ ? ", " : "",
                                          a->problem->inputs[i].name, a->problem->outputs[j].name,
                                          fg_words_number(a->arena, f->K[entry], 6)));
        }
    if (total == 0)
        return;
    if (total > said)
        text = or_empty(fg_arena_text(a->arena, "%s and %d more", text, total - said));
    fg_warn(
        a->findings, "gain-at-bound",
        fg_arena_text(a->arena,
                      "%s on a bound: %s. The bound costs something; the ladder says how much. Widen it if "
                      "the actuator allows.",
                      total == 1 ? "A gain sits" : "Gains sit", text));
}

/* "; 2 other loops are below that as well" */
static const char *others(struct fg_assembly *a, int flagged, const char *side)
{
    if (flagged < 2)
        return "";
    return or_empty(fg_arena_text(a->arena, "; %d other loop%s %s that as well", flagged - 1,
                                  flagged == 2 ? " is" : "s are", side));
}

/* One warning for each kind of margin: it names the worst loop and counts the others. */
static void warn_margins(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    const struct fg_loop_margin *phase = NULL, *gain = NULL, *drop = NULL, *peak = NULL;
    int phases = 0, gains = 0, drops = 0, peaks = 0;
    for (int i = 0; i < f->margins; i++) {
        const struct fg_loop_margin *loop = &f->margin[i];
        bool small_phase = loop->phase_deg < LEAST_PHASE_DEG, small_gain = loop->gain_up < LEAST_GAIN_UP;
        bool small_drop = loop->gain_down > 1 / LEAST_GAIN_UP;
        if (small_phase && (phases++ == 0 || loop->phase_deg < phase->phase_deg))
            phase = loop;
        if (small_gain && (gains++ == 0 || loop->gain_up < gain->gain_up))
            gain = loop;
        if (small_drop && (drops++ == 0 || loop->gain_down > drop->gain_down))
            drop = loop;
        /* a small margin in phase or gain says the same in words that more people know */
        if (!small_phase && !small_gain && !small_drop && loop->peak_sensitivity > MOST_SENSITIVITY &&
            (peaks++ == 0 || loop->peak_sensitivity > peak->peak_sensitivity))
            peak = loop;
    }
    if (phase)
        fg_warn(a->findings, "phase-margin",
                fg_arena_text(
                    a->arena,
                    "The loop at %s has a phase margin of only %s degrees (common practice: %g or more)%s. "
                    "Delays that the model leaves out may make it unstable. A larger weight in R for "
                    "this input usually helps.",
                    a->problem->inputs[phase->input].name, fg_words_number(a->arena, phase->phase_deg, 3),
                    LEAST_PHASE_DEG, others(a, phases, "below")));
    if (gain)
        fg_warn(a->findings, "gain-margin",
                fg_arena_text(a->arena,
                              "The loop at %s becomes unstable when its gain grows by a factor %s (common "
                              "practice: %g or more)%s. A larger weight in R for this input usually helps.",
                              a->problem->inputs[gain->input].name,
                              fg_words_number(a->arena, gain->gain_up, 3), LEAST_GAIN_UP,
                              others(a, gains, "below")));
    if (drop)
        fg_warn(
            a->findings, "gain-margin",
            fg_arena_text(a->arena,
                          "The loop at %s becomes unstable when its gain falls to %s of what it is (common "
                          "practice: %g or less)%s. A smaller weight in R for this input, or wider bounds, "
                          "usually help.",
                          a->problem->inputs[drop->input].name, fg_words_number(a->arena, drop->gain_down, 3),
                          1 / LEAST_GAIN_UP, others(a, drops, "above")));
    if (peak && peak->peak_frequency == 0)
        fg_warn(
            a->findings, "peak-sensitivity",
            fg_arena_text(a->arena,
                          "The loop at %s has a peak sensitivity of %s at low frequencies (common practice: "
                          "at most %g)%s: it makes slow disturbances larger.",
                          a->problem->inputs[peak->input].name,
                          fg_words_number(a->arena, peak->peak_sensitivity, 3), MOST_SENSITIVITY,
                          others(a, peaks, "above")));
    else if (peak)
        fg_warn(a->findings, "peak-sensitivity",
                fg_arena_text(
                    a->arena,
                    "The loop at %s has a peak sensitivity of %s (common practice: at most %g)%s: it is "
                    "touchy about errors of the model near %s rad per %s.",
                    a->problem->inputs[peak->input].name,
                    fg_words_number(a->arena, peak->peak_sensitivity, 3), MOST_SENSITIVITY,
                    others(a, peaks, "above"), fg_words_number(a->arena, peak->peak_frequency, 3),
                    a->model.law.discrete      ? "step"
                    : a->problem->time_unit[0] ? a->problem->time_unit
                                               : "time unit"));
}

static void warn_search(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    const struct fg_search_answer *s = &a->answer;
    bool finished = f->outcome == FLATGAIN_TUNED;
    if (finished && s->end == FG_SEARCH_STALLED)
        fg_warn(a->findings, "search-stalled",
                fg_arena_text(a->arena,
                              "The best start did not converge (residual %s). Raise --starts, or "
                              "check the scaling of weights and units.",
                              fg_words_number(a->arena, s->residual, 3)));
    if (a->problem->pattern.count == 0) /* nothing was searched */
        return;
    if (finished && s->end == FG_SEARCH_FLAT)
        fg_warn(a->findings, "flat-cost",
                "The cost does not depend on the gain: the outputs, inputs, weights and disturbances do not "
                "meet in any mode. Check C, Q and the disturbance.");
    else if (finished && !s->rule_satisfied && s->distinct == 0)
        fg_warn(
            a->findings, "starts-exhausted",
            fg_arena_text(a->arena,
                          "None of the %d starts converged by itself, so little is known about other "
                          "minima: a better gain may exist. Check the scaling of the weights, or bound the "
                          "gains.",
                          s->starts));
    else if (finished && !s->rule_satisfied)
        fg_warn(a->findings, "starts-exhausted",
                fg_arena_text(a->arena,
                              "The search ended before its stopping rule was met (%d distinct %s seen in %d "
                              "starts): a better gain may exist. Raise --starts.",
                              s->distinct, s->distinct == 1 ? "minimum" : "minima", s->starts));
}

/* J is zero to rounding when it is this part of what the weights and disturbances could make it. */
static const double ZERO_COST = 1e-13;

static bool is_zero_cost(const struct fg_assembly *a)
{
    if (a->findings->outcome != FLATGAIN_JUDGED)
        return a->answer.zero;
    double fastest = a->model.law.discrete ? 1 : a->benchmark.fastest, seen = 0, reached = 0;
    for (int i = 0; i < a->problem->n; i++) {
        seen = fmax(seen, FG_AT(a->problem->Q, i, i));
        reached = fmax(reached, FG_AT(a->problem->W, i, i));
    }
    if (!(reached > 0 && fabs(a->findings->cost) <= ZERO_COST * seen * reached / fastest))
        return false;
    /* that bound mixes the units of the states; a mode that is disturbed and weighted has a cost in any units
     */
    for (int i = 0; i < a->closed.count; i++)
        if (!a->closed.mode[i].unweighted && !a->closed.mode[i].undisturbed)
            return false;
    return true;
}

static void warn_zero(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    if (!f->has_gain || !f->stable || !is_zero_cost(a))
        return;
    fg_warn(
        a->findings, "zero-cost",
        "The cost is zero but for rounding: no disturbance reaches anything that the weights see, so nothing "
        "tells good gains from bad ones. Check Q and the disturbance.");
}

/* The search works in units of its own. J of its gain is computed once more from the user's matrices; the two
 * differ by less than 1e-4 on every model in tests/cases whose cost is not zero. */
static const double DOUBT = 0.01;

static void warn_doubt(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    if (!f->has_gain || !f->stable || f->outcome == FLATGAIN_JUDGED || is_zero_cost(a))
        return;
    double again = fg_cost_value(a->cost, f->K);
    if (fabs(again - f->cost) <= DOUBT * fabs(f->cost))
        return;
    a->doubtful = true;
    fg_warn(a->findings, "cost-uncertain",
            fg_arena_text(a->arena,
                          "Rounding decides in this problem: the search found the cost %s, but computed from "
                          "your matrices %s%s. Do not use the gain; choose units in which the entries of the "
                          "matrices come closer to 1.",
                          fg_words_number(a->arena, f->cost, 5),
                          isfinite(again) ? "it is " : "the loop does not even look stable",
                          isfinite(again) ? fg_words_number(a->arena, again, 5) : ""));
}

static void warn_disturbance(struct fg_assembly *a)
{
    if (!fg_matrix_is_zero(a->problem->W))
        return;
    fg_warn(a->findings, "no-disturbance",
            a->problem->reading == FG_START
                ? "The start X0 is zero, so the cost is zero for every stabilising gain. State X0."
                : "There is no disturbance, so the cost asks for nothing but quiet actuators. State the "
                  "disturbance (disturbance: G or W).");
}

static void warn_comparisons(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    if (a->problem->has_today && f->cost_today > f->cost_none)
        fg_warn(f, "today-worse-than-none",
                "By this cost the gain in use today is worse than no control at all. Check its sign "
                "convention (u = u0 - K (y - y0)) and the weights.");
    if (f->outcome == FLATGAIN_JUDGED && f->cost > f->cost_none)
        fg_warn(f, "worse-than-none",
                "By this cost the judged gain is worse than no control at all. Check its sign convention "
                "(u = u0 - K (y - y0)) and the weights.");
    const char *where;
    if (f->outcome == FLATGAIN_JUDGED && !fg_pattern_kept(a, f->K, &where))
        fg_warn(f, "pattern-not-kept", where);
    if (isnan(f->cost_lqg) && f->outcome != FLATGAIN_IMPOSSIBLE)
        fg_warn(f, "no-benchmark",
                fg_arena_text(a->arena, "There is no LQG benchmark, so the gap is unknown: %s.",
                              f->lqg_why ? f->lqg_why : "it could not be computed"));
}

void fg_warnings_fill(struct fg_assembly *a)
{
    warn_doubt(a);
    warn_boundary(a);
    warn_search(a);
    warn_bounds(a);
    warn_margins(a);
    warn_comparisons(a);
    warn_unseen(a);
    warn_hidden(a);
    warn_disturbance(a);
    warn_zero(a);
}
