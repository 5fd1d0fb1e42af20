#include "assess/assembly.h"

#include <math.h>
#include <string.h>

enum { MOST_RUNGS = 7 };

/* A benchmark smaller than this part of the costs above it is zero to rounding: the trace formulas lose
 * about half the digits when everything cancels. Percentages of it mean nothing. */
static const double ZERO_TO_ROUNDING = 1e-9;

/* A static gain this close to a limit has reached it: costs agree to about ten digits. */
static const double REACHED = 1e-8;

/* J_LQR <= J_LQG <= J(K) may be missed by this much, relative, before it is called a fault. */
static const double ORDER_TOLERANCE = 1e-6;

/* 100 (cost - base) / base; NAN when one of them does not exist or the base is zero to rounding. */
static double percent_above(double cost, double base, double scale)
{
    if (!isfinite(cost) || !isfinite(base) || base <= ZERO_TO_ROUNDING * fmax(scale, cost))
        return NAN;
    double percent = 100 * (cost - base) / base;
    /* a difference within the order tolerance and of the wrong sign is rounding, not a gain */
    return percent < 0 && percent > -100 * ORDER_TOLERANCE ? 0 : percent;
}

static void add(struct fg_findings *f, const char *key, const char *label, double cost, const char *note)
{
    f->ladder[f->rungs++] = (struct fg_rung){.key = key,
                                             .label = label,
                                             .cost = isfinite(cost) ? cost : NAN,
                                             .above_lqg_percent = NAN,
                                             .price_percent = NAN,
                                             .price = "",
                                             .note = note ? note : ""};
}

/* What the step from a rung to the next one that has a cost is called. */
static const char *price_name(const struct fg_rung *from, const struct fg_rung *to)
{
    bool to_lqr = strcmp(to->key, "lqr") == 0, to_lqg = strcmp(to->key, "lqg") == 0;
    if (strcmp(from->key, "lqg") == 0)
        return "price of not measuring every state";
    if (to_lqr)
        return "price of a static law on these measurements";
    if (strcmp(from->key, "none") == 0)
        return "price of no control";
    if (strcmp(from->key, "today") == 0)
        return to_lqg ? "price of today's gain against any linear controller"
                      : "price of keeping today's gain";
    if (strcmp(from->key, "judged") == 0)
        return "price of this gain against any linear controller";
    if (strcmp(from->key, "tuned") == 0 && !to_lqg)
        return "price of the structure and bounds";
    return "price of staying static";
}

/* A limit that some static gain reaches is attained after all: with noise-free measurements of every state,
 * for instance, the best gain is the LQR gain. */
static void settle_limits(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    double best =
        fmin(isfinite(f->cost) ? f->cost : INFINITY, isfinite(f->cost_today) ? f->cost_today : INFINITY);
    if (a->has_unstructured && a->unstructured.end == FG_SEARCH_MINIMUM)
        best = fmin(best, a->unstructured.cost);
    bool final = f->outcome == FLATGAIN_TUNED || f->outcome == FLATGAIN_JUDGED;
    if (!f->lqg_attained && final && best <= f->cost_lqg + REACHED * fabs(f->cost_lqg) && f->cost_lqg > 0) {
        f->lqg_attained = true;
        f->lqg_why = "a limit in general, but a static gain reaches it here";
    }
}

static const char *bound_note(const char *why, bool attained, double cost)
{
    if (isnan(cost))
        return why ? why : "could not be computed";
    if (!attained)
        return "a limit: no real controller reaches it";
    return "";
}

static const char *end_note(enum fg_search_end end)
{
    switch (end) {
    case FG_SEARCH_BOUNDARY:
        return "runs to the stability boundary";
    case FG_SEARCH_UNBOUNDED:
        return "the gain grows without limit";
    case FG_SEARCH_NOT_FOUND:
        return "none found";
    case FG_SEARCH_STALLED:
        return "the search stalled";
    case FG_SEARCH_MINIMUM:
    case FG_SEARCH_FLAT:
        break;
    }
    return "";
}

/* The judged gain is the one in use: one rung says it. */
static bool is_today(const struct fg_assembly *a)
{
    const struct fg_findings *f = a->findings;
    if (f->outcome != FLATGAIN_JUDGED || !a->problem->has_today)
        return false;
    for (int k = 0; k < a->problem->m * a->problem->p; k++)
        if (f->K[k] != a->problem->today.at[k])
            return false;
    return true;
}

static void add_rungs(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    add(f, "none", "no control", f->cost_none, isnan(f->cost_none) ? "unstable" : "");
    bool judged_today = is_today(a);
    if (a->problem->has_today && !judged_today)
        add(f, "today", "gain in use today", f->cost_today, isnan(f->cost_today) ? "unstable" : "");
    if (f->outcome == FLATGAIN_JUDGED)
        add(f, "judged", judged_today ? "judged gain, in use today" : "judged gain", f->cost,
            f->stable ? "" : "unstable");
    else if (f->has_gain)
        add(f, "tuned", a->restricted ? "tuned gain, within your limits" : "tuned gain", f->cost,
            end_note(a->answer.end));
    if (a->has_unstructured) {
        const struct fg_search_answer *free = &a->unstructured;
        double cost = free->cost;
        /* the restricted gain is one of the unrestricted ones, so it bounds their best from above */
        if (f->has_gain && f->stable && !(cost <= f->cost))
            cost = f->cost;
        add(f, "unstructured", "best static gain, no limits", cost, end_note(free->end));
    }
    add(f, "lqg", "any linear controller (LQG)", f->cost_lqg,
        bound_note(f->lqg_why, f->lqg_attained, f->cost_lqg));
    add(f, "lqr", "every state known (LQR)", f->cost_lqr,
        bound_note(f->lqr_why, f->lqr_attained, f->cost_lqr));
}

static void check_order(struct fg_findings *f)
{
    bool broken = f->cost_lqr > f->cost_lqg + ORDER_TOLERANCE * fabs(f->cost_lqg);
    for (int i = 0; i < f->rungs; i++) {
        double cost = f->ladder[i].cost;
        bool above = strcmp(f->ladder[i].key, "lqg") != 0 && strcmp(f->ladder[i].key, "lqr") != 0;
        if (above && (cost < f->cost_lqg - ORDER_TOLERANCE * fabs(f->cost_lqg) ||
                      cost < f->cost_lqr - ORDER_TOLERANCE * fabs(f->cost_lqr)))
            broken = true;
    }
    if (broken)
        fg_warn(f, "ladder-order",
                "The costs break J_LQR <= J_LQG <= J(K), which always holds: at least one of them is "
                "numerically wrong. Check the units and the conditioning of the model (inspect) before you "
                "use any of these numbers.");
}

void fg_ladder_fill(struct fg_assembly *a)
{
    struct fg_findings *f = a->findings;
    f->gap_percent = f->captured_percent = NAN;
    f->ladder = fg_arena_get(a->arena, MOST_RUNGS * sizeof *f->ladder);
    if (!f->ladder)
        return;
    settle_limits(a);
    add_rungs(a);
    double scale = 0;
    for (int i = 0; i < f->rungs; i++)
        if (isfinite(f->ladder[i].cost))
            scale = fmax(scale, fabs(f->ladder[i].cost));
    /* "no control" may be huge and must not make an honest benchmark look like zero */
    double gain_scale = isfinite(f->cost) ? fabs(f->cost) : scale;
    for (int i = 0; i < f->rungs; i++) {
        struct fg_rung *rung = &f->ladder[i], *next = NULL;
        if (strcmp(rung->key, "lqr") != 0)
            rung->above_lqg_percent = percent_above(rung->cost, f->cost_lqg, gain_scale);
        for (int k = i + 1; k < f->rungs && !next; k++)
            if (isfinite(f->ladder[k].cost))
                next = &f->ladder[k];
        if (next && isfinite(rung->cost)) {
            rung->price_percent = percent_above(rung->cost, next->cost, gain_scale);
            rung->price = price_name(rung, next);
        }
    }
    if (isfinite(f->cost)) {
        f->gap_percent = percent_above(f->cost, f->cost_lqg, gain_scale);
        double room = f->cost_none - f->cost_lqg;
        if (isfinite(room) && room > ZERO_TO_ROUNDING * fabs(f->cost_none))
            f->captured_percent = 100 * (f->cost_none - f->cost) / room;
    }
    check_order(f);
}
