#include "assess/assembly.h"

#include <math.h>
#include <string.h>

/* Two costs that agree to this, in percent, are equal but for rounding: `accept: 0` asks for no more. */
static const double ROUNDING_PERCENT = 1e-6;

static const char *or_empty(const char *text)
{
    return text ? text : "";
}

bool fg_verdict_noise_free(const struct flatgain_problem *problem, bool *chosen)
{
    bool any = false;
    for (int i = 0; i < problem->p; i++) {
        chosen[i] = problem->setting == FG_CONTINUOUS && FG_AT(problem->V, i, i) == 0;
        any = any || chosen[i];
    }
    return any;
}

/* What to state so that the bound becomes one that a real controller reaches. */
static const char *cure_for_limit(struct fg_assembly *a)
{
    const struct flatgain_problem *problem = a->problem;
    bool *chosen = fg_arena_get(a->arena, (size_t)(problem->p + problem->m) * sizeof *chosen);
    if (!chosen)
        return "";
    if (problem->reading == FG_START)
        return "describe the disturbance and the sensors' noise (disturbance, noise, lag) instead of a start";
    if (fg_verdict_noise_free(problem, chosen)) {
        bool all = true;
        for (int i = 0; i < problem->p; i++)
            all = all && chosen[i];
        if (all)
            return "state the sensors' noise (noise and lag); no output has any now";
        const char *names = fg_words_names(a->arena, problem->outputs, problem->p, chosen, 6);
        return or_empty(
            fg_arena_text(a->arena, "state the noise (noise and lag) of the outputs without any: %s", names));
    }
    bool any = false;
    bool *inputs = chosen + problem->p;
    for (int j = 0; j < problem->m; j++) {
        inputs[j] = FG_AT(problem->R, j, j) == 0;
        any = any || inputs[j];
    }
    if (any) {
        const char *names = fg_words_names(a->arena, problem->inputs, problem->m, inputs, 6);
        return or_empty(
            fg_arena_text(a->arena, "give every input a weight in R; without one now: %s", names));
    }
    return "state the sensors' noise and a weight for every input";
}

/* How far a rung is above LQG, in percent; NAN when there is no such rung or number. */
static double above_lqg(const struct fg_findings *f, const char *key)
{
    for (int k = 0; k < f->rungs; k++)
        if (strcmp(f->ladder[k].key, key) == 0)
            return f->ladder[k].above_lqg_percent;
    return NAN;
}

/* What the user has already may be good enough as well: then nothing needs to change. */
static const char *as_well(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    double accept = a->problem->accept_percent;
    double today = f->outcome == FLATGAIN_JUDGED ? NAN : above_lqg(f, "today");
    double none = above_lqg(f, "none");
    if (none <= accept)
        return or_empty(fg_arena_text(a->arena,
                                      " So is no control at all, %s above: the plant may not need this gain.",
                                      fg_words_percent(a->arena, none)));
    if (today <= accept)
        return or_empty(fg_arena_text(a->arena, " So is the gain in use today, %s above: it may stay.",
                                      fg_words_percent(a->arena, today)));
    return "";
}

/* What to change when this gain is not good enough. */
static const char *refusal_advice(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    if (f->outcome == FLATGAIN_JUDGED)
        return " Tuning may find a better gain.";
    double free = above_lqg(f, "unstructured");
    if (free <= a->problem->accept_percent)
        return or_empty(fg_arena_text(
            a->arena,
            " Without your pattern and bounds a static gain would be good enough (%s above): free more "
            "gains or widen the bounds.",
            fg_words_percent(a->arena, free)));
    if (!isnan(free))
        return or_empty(
            fg_arena_text(a->arena,
                          " Even without your pattern and bounds the gap is %s: measure more, or use a "
                          "dynamic controller.",
                          fg_words_percent(a->arena, free)));
    return " Measure more, or use a dynamic controller.";
}

static void judge_gap(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    double accept = a->problem->accept_percent;
    f->verdict = FG_VERDICT_NONE;
    f->verdict_text = "";
    if (!f->has_gain || !f->stable || isnan(f->cost) || isnan(accept))
        return;
    const char *asked = fg_words_percent(a->arena, accept);
    if (isnan(f->gap_percent)) {
        f->verdict = FG_VERDICT_CANNOT_TELL;
        if (isnan(f->cost_lqg))
            f->verdict_text = or_empty(fg_arena_text(
                a->arena, "Cannot tell whether the gap is within %s: there is no benchmark.", asked));
        else
            f->verdict_text =
                or_empty(fg_arena_text(a->arena,
                                       "Cannot tell whether the gap is within %s: the benchmark is zero. For "
                                       "one that can tell, %s.",
                                       asked, cure_for_limit(a)));
        return;
    }
    const char *gap = fg_words_percent(a->arena, f->gap_percent);
    bool accepted = f->gap_percent <= accept + ROUNDING_PERCENT;
    if (!accepted && strcmp(gap, asked) == 0) /* "10 % above, 10 % accepted" would puzzle */
        gap = or_empty(fg_arena_text(a->arena, "%s %%", fg_words_number(a->arena, f->gap_percent, 6)));
    if (accepted) {
        f->verdict = FG_VERDICT_ACCEPTED;
        f->verdict_text = or_empty(
            fg_arena_text(a->arena,
                          "Good enough, and proved: %s above the best that any linear controller can "
                          "do on these measurements, %s accepted.%s",
                          gap, asked, as_well(a)));
    } else if (f->lqg_attained) {
        f->verdict = FG_VERDICT_REFUSED;
        f->verdict_text = or_empty(
            fg_arena_text(a->arena,
                          "Not good enough: %s above what a dynamic controller on the same measurements "
                          "reaches, %s accepted.%s",
                          gap, asked, refusal_advice(a)));
    } else {
        f->verdict = FG_VERDICT_CANNOT_TELL;
        f->verdict_text = or_empty(
            fg_arena_text(a->arena,
                          "Cannot tell whether static is good enough (%s accepted): the gap is measured to a "
                          "limit that no real controller reaches. For a bound that can tell, %s.",
                          asked, cure_for_limit(a)));
    }
}

/* ", 12.3 % above the best any linear controller can do" */
static const char *gap_phrase(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    if (isnan(f->gap_percent) || f->verdict != FG_VERDICT_NONE) /* the verdict says it */
        return "";
    const char *gap = fg_words_percent(a->arena, f->gap_percent);
    if (strcmp(gap, "0 %") == 0)
        return ", as good as any linear controller on the same measurements";
    if (f->lqg_attained)
        return or_empty(
            fg_arena_text(a->arena, ", %s above the best linear controller on the same measurements", gap));
    /* a small gap proves something even to a limit; a large one does not, so it is not quoted */
    if (f->gap_percent <= 10)
        return or_empty(
            fg_arena_text(a->arena, ", within %s of a limit that no linear controller can beat", gap));
    return "";
}

static const char *not_found_summary(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    const struct fg_search_answer *s = &a->answer;
    bool discrete = a->problem->setting == FG_DISCRETE;
    double fastest = discrete ? 1 : 0;
    for (int k = 0; k < a->closed.count; k++)
        fastest = fmax(fastest, hypot(a->closed.mode[k].re, a->closed.mode[k].im));
    /* a double pole on the boundary is only known to the root of the rounding */
    double at_edge = 1e-6 * fastest;
    bool edge = a->closed.count > 0 && fabs(s->abscissa - (discrete ? 1 : 0)) <= 1e-3 * at_edge;
    const char *near =
        edge ? "the loop at the edge of stability"
             : or_empty(fg_arena_text(a->arena, "%s %s",
                                      discrete ? "a spectral radius of" : "a largest real part of",
                                      fg_words_number(a->arena, s->abscissa, 4)));
    const char *mode = "";
    if (a->closed.count > 0) {
        const struct fg_mode *worst = &a->closed.mode[0];
        double re = fabs(worst->re) <= at_edge ? 0 : worst->re,
               im = fabs(worst->im) <= at_edge ? 0 : worst->im;
        mode = fg_words_mode(a->arena, re, im, worst->states);
        mode = or_empty(fg_arena_text(a->arena, " What does not decay there is the mode %s.", mode));
    }
    const char *wider = "";
    if (a->has_unstructured && isfinite(a->unstructured.cost))
        wider =
            or_empty(fg_arena_text(a->arena,
                                   " Without your pattern and bounds a stabilising gain exists (cost %s): "
                                   "free more gains or widen the bounds.",
                                   fg_words_number(a->arena, a->unstructured.cost, 6)));
    return or_empty(fg_arena_text(
        a->arena,
        "No stabilising gain was found in %d starts. This is not a proof that none exists. The "
        "closest gain left %s.%s%s%s",
        f->search.starts, near, mode, wider,
        wider[0] ? "" : " Try more starts (--starts), another measurement, or a dynamic controller."));
}

static const char *unstable_summary(struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    double worst = a->model.law.discrete ? f->radius - 1 : f->abscissa;
    if (a->ill_posed)
        return "Do not use this gain. The loop is ill posed with it: I + K D is singular.";
    if (worst < 0)
        return "Do not use this gain. The loop with it is too close to ill posed or to instability for its "
               "cost to be computed.";
    const char *mode = "";
    if (a->closed.count > 0)
        mode = or_empty(fg_arena_text(
            a->arena, ": the mode %s does not decay",
            fg_words_mode(a->arena, a->closed.mode[0].re, a->closed.mode[0].im, a->closed.mode[0].states)));
    return or_empty(fg_arena_text(a->arena, "Do not use this gain. The loop is unstable with it%s.", mode));
}

static const char *summarise(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    const char *cost = isnan(f->cost) ? "" : fg_words_number(a->arena, f->cost, 6);
    if (f->outcome == FLATGAIN_TUNED && a->answer.zero)
        cost = "0 but for rounding";
    switch (f->outcome) {
    case FLATGAIN_TUNED:
        if (a->answer.end == FG_SEARCH_STALLED)
            return or_empty(fg_arena_text(
                a->arena,
                "Found a stabilising gain of cost %s, but the search stalled before it reached a "
                "minimum: a better gain is likely.",
                cost));
        if (a->problem->pattern.count == 0)
            return or_empty(fg_arena_text(
                a->arena,
                "You fixed every gain, so nothing was searched: this gain stabilises, its cost is %s%s.",
                cost, gap_phrase(a)));
        if (a->answer.end == FG_SEARCH_FLAT)
            return or_empty(fg_arena_text(a->arena,
                                          "The cost is %s whatever the gain: any stabilising gain is as good "
                                          "as this one.",
                                          cost));
        return or_empty(
            fg_arena_text(a->arena, "Found a stabilising gain of cost %s%s.", cost, gap_phrase(a)));
    case FLATGAIN_JUDGED:
        if (!f->stable) {
            return unstable_summary(a);
        }
        return or_empty(
            fg_arena_text(a->arena, "The gain stabilises the plant; its cost is %s%s.", cost, gap_phrase(a)));
    case FLATGAIN_INSPECTED:
        return or_empty(fg_arena_text(
            a->arena, "The problem is complete and consistent; the plant is %s without control.",
            a->open_stable ? "stable" : "not stable"));
    case FLATGAIN_NOT_FOUND:
        return not_found_summary(a);
    case FLATGAIN_IMPOSSIBLE:
        return or_empty(fg_arena_text(a->arena, "Proved: no gain of this structure stabilises the plant. %s",
                                      or_empty(f->proof.text)));
    case FLATGAIN_BOUNDARY:
        return or_empty(fg_arena_text(
            a->arena,
            "There is no best gain: the cost keeps falling towards the boundary of stability. The "
            "gain shown is where the search stopped (cost %s); do not use it before the weights "
            "or disturbances are corrected.",
            cost));
    case FLATGAIN_UNBOUNDED:
        return or_empty(fg_arena_text(
            a->arena,
            "There is no best gain: the cost keeps falling as the gain grows without limit. The "
            "gain shown is where the search stopped (cost %s). Give every input a weight in R, or "
            "bound the gains.",
            cost));
    case FLATGAIN_INTERRUPTED:
        if (f->has_gain)
            return or_empty(
                fg_arena_text(a->arena,
                              "Interrupted after %d starts: the best gain so far, of cost %s. A full run may "
                              "find a better one.",
                              f->search.starts, cost));
        return or_empty(fg_arena_text(a->arena,
                                      "Interrupted after %d starts, before a stabilising gain was "
                                      "found.",
                                      f->search.starts));
    }
    return "";
}

static int exit_status(const struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    switch (f->outcome) {
    case FLATGAIN_INSPECTED:
        return 0;
    case FLATGAIN_NOT_FOUND:
        return 3;
    case FLATGAIN_IMPOSSIBLE:
        return 4;
    case FLATGAIN_BOUNDARY:
    case FLATGAIN_UNBOUNDED:
        return 1;
    case FLATGAIN_INTERRUPTED:
        return 130;
    case FLATGAIN_TUNED:
    case FLATGAIN_JUDGED:
        break;
    }
    if (a->doubtful)
        return 5;
    const char *where;
    bool missed = !f->stable || f->verdict == FG_VERDICT_REFUSED || f->verdict == FG_VERDICT_CANNOT_TELL;
    if (f->outcome == FLATGAIN_TUNED && a->answer.end == FG_SEARCH_STALLED)
        missed = true;
    if (f->outcome == FLATGAIN_JUDGED && !fg_pattern_kept(a, f->K, &where))
        missed = true;
    return missed;
}

void fg_verdict_fill(struct fg_assembly *a)
{
    judge_gap(a);
    a->findings->summary = summarise(a);
    a->findings->exit_status = exit_status(a);
}
