#include "write/write.h"

#include <float.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"
#include "write/layout.h"
#include "write/text_parts.h"

enum {
    NARROWEST = 40,
    FEW_POLES = 6, /* lines of poles without --verbose */
    DAMPING = 9,   /* columns of the table of poles */
    FALL = 15
};

static const char *time_unit(const struct flatgain_problem *problem)
{
    if (problem->setting == FG_DISCRETE)
        return "step";
    return problem->time_unit[0] ? problem->time_unit : "time unit";
}

static enum fg_ink outcome_ink(const struct fg_findings *f)
{
    return f->exit_status == 0 ? FG_GOOD : f->exit_status <= 1 || !f->complete ? FG_CAUTION : FG_BAD;
}

static void put_title(const struct fg_page *page, const struct fg_findings *f)
{
    const struct flatgain_problem *problem = f->problem;
    char sizes[120];
    if (problem->title[0])
        fg_put_wrapped(page, FG_HEAD, "", problem->title);
    snprintf(sizes, sizeof sizes, "%s, %d state%s, %d input%s, %d output%s",
             problem->setting == FG_DISCRETE ? "discrete" : "continuous", problem->n,
             problem->n == 1 ? "" : "s", problem->m, problem->m == 1 ? "" : "s", problem->p,
             problem->p == 1 ? "" : "s");
    if (f->order > problem->n)
        snprintf(sizes + strlen(sizes), sizeof sizes - strlen(sizes), ", %d sensor lag%s",
                 f->order - problem->n, f->order - problem->n == 1 ? "" : "s");
    fg_put_wrapped(page, FG_FAINT, "", sizes);
    fg_newline(page);
    fg_put_wrapped(page, outcome_ink(f), "", f->summary);
    if (f->verdict_text[0]) {
        fg_newline(page);
        fg_put_wrapped(page,
                       f->verdict == FG_VERDICT_ACCEPTED  ? FG_GOOD
                       : f->verdict == FG_VERDICT_REFUSED ? FG_BAD
                                                          : FG_CAUTION,
                       "", f->verdict_text);
    }
}

/* The time a mode takes to fall to 37 %: -1 / Re s, or -1 / ln|z| steps. */
static double decay_time(const struct flatgain_problem *problem, const struct fg_pole *pole)
{
    return problem->setting == FG_DISCRETE ? -1 / log(pole->speed) : -1 / pole->re;
}

/* A list "a, b, c" in `room` columns: as many whole names as fit, the first one cut if it must be. */
static void put_whole_names(const struct fg_page *page, const char *names, int room)
{
    char part[256];
    snprintf(part, sizeof part, "%s", names);
    while (fg_columns(part) > room) {
        char *comma = strrchr(part, ',');
        if (!comma) {
            fg_put_left(page, FG_FAINT, part, room < 1 ? 1 : room);
            return;
        }
        *comma = '\0';
    }
    fg_put(page, FG_FAINT, part);
}

static const char *pole_text(const struct fg_pole *pole, char text[2 * FG_NUMBER_SIZE + 16])
{
    char re[FG_NUMBER_SIZE], im[FG_NUMBER_SIZE];
    fg_number_round(pole->re, 5, re);
    fg_number_round(pole->im, 5, im);
    snprintf(text, 2 * FG_NUMBER_SIZE + 16, pole->im > 0 ? "%s +/- %si" : "%s", re, im);
    return text;
}

/* Columns of the longest pole that is shown, at least those of the head. */
static int pole_columns(const struct fg_findings *f, const struct fg_pole *poles, bool all)
{
    char text[2 * FG_NUMBER_SIZE + 16];
    int columns = 4;
    for (int k = 0, lines = 0; k < f->order && (all || lines < FEW_POLES); k++) {
        if (poles[k].im < 0)
            continue;
        lines++;
        int needed = fg_columns(pole_text(&poles[k], text));
        columns = needed > columns ? needed : columns;
    }
    return columns;
}

static void put_poles(const struct fg_page *page, const struct fg_findings *f, const char *name,
                      const struct fg_pole *poles, bool all)
{
    if (!poles)
        return;
    bool discrete = f->problem->setting == FG_DISCRETE;
    char remark[80], number[FG_NUMBER_SIZE], text[2 * FG_NUMBER_SIZE + 16];
    int lines = 0, left = 0, width = pole_columns(f, poles, all);
    for (int k = 0; k < f->order; k++)
        left += poles[k].im >= 0;
    snprintf(remark, sizeof remark, "slowest first%s",
             !all && left > FEW_POLES ? "; --verbose shows all" : "");
    fg_put_heading(page, name, remark);
    snprintf(text, sizeof text, "falls to 37 %%");
    fg_put_left(page, FG_FAINT, "  pole", 2 + width);
    fg_put_right(page, FG_FAINT, discrete ? "radius" : "damping", DAMPING);
    fg_put_right(page, FG_FAINT, text, FALL);
    int room = page->width - 2 - width - DAMPING - FALL - 2; /* for the states */
    if (room >= 6)
        fg_put(page, FG_FAINT, "  states");
    fg_newline(page);
    for (int k = 0; k < f->order; k++) {
        const struct fg_pole *pole = &poles[k];
        if (pole->im < 0) /* the other one of a pair */
            continue;
        if (!all && lines == FEW_POLES) {
            snprintf(text, sizeof text, "  and %d faster", left - lines);
            fg_put(page, FG_FAINT, text);
            fg_newline(page);
            break;
        }
        lines++;
        bool stable = discrete ? pole->speed < 1 : pole->re < 0;
        fg_put(page, FG_PLAIN, "  ");
        fg_put_left(page, stable ? FG_PLAIN : FG_BAD, pole_text(pole, text), width);
        fg_put_right(page, FG_PLAIN, fg_text_number(discrete ? pole->speed : pole->damping, 3, false, number),
                     DAMPING);
        if (stable)
            snprintf(text, sizeof text, "%s %s",
                     fg_text_number(pole->speed == 0 ? 0 : decay_time(f->problem, pole), 3, false, number),
                     discrete ? "steps" : f->problem->time_unit);
        else
            snprintf(text, sizeof text, (discrete ? pole->speed == 1 : pole->re == 0) ? "stays" : "grows");
        size_t length = strlen(text);
        if (text[length - 1] == ' ')
            text[length - 1] = '\0';
        fg_put_right(page, stable ? FG_PLAIN : FG_BAD, text, FALL);
        if (pole->states && pole->states[0] && room >= 6) {
            fg_put(page, FG_PLAIN, "  ");
            put_whole_names(page, pole->states, room);
        }
        fg_newline(page);
    }
}

static const char *factor(double value, char number[FG_NUMBER_SIZE])
{
    if (isinf(value))
        return "any";
    return fg_text_number(value, 3, false, number);
}

static void put_margins(const struct fg_page *page, const struct fg_findings *f)
{
    if (f->margins == 0)
        return;
    char number[FG_NUMBER_SIZE], low[FG_NUMBER_SIZE], line[200];
    int name = 8;
    for (int k = 0; k < f->margins; k++) {
        int columns = fg_columns(f->problem->inputs[f->margin[k].input].name);
        if (columns > name)
            name = columns;
    }
    if (name > page->width - 2 - 22 - 12 - 12)
        name = page->width - 2 - 22 - 12 - 12;
    fg_put_heading(page, "Margins", "the loop at one input, the others closed");
    fg_put_left(page, FG_FAINT, "  loop", 2 + name);
    fg_put_right(page, FG_FAINT, "gain factor", 22);
    fg_put_right(page, FG_FAINT, "phase", 12);
    fg_put_right(page, FG_FAINT, "peak sens.", 12);
    fg_newline(page);
    for (int k = 0; k < f->margins; k++) {
        const struct fg_loop_margin *loop = &f->margin[k];
        fg_put(page, FG_PLAIN, "  ");
        fg_put_left(page, FG_PLAIN, f->problem->inputs[loop->input].name, name);
        snprintf(line, sizeof line, "%s to %s", fg_text_number(loop->gain_down, 3, false, low),
                 factor(loop->gain_up, number));
        fg_put_right(page, FG_PLAIN, line, 22);
        if (isinf(loop->phase_deg))
            snprintf(line, sizeof line, "any");
        else
            snprintf(line, sizeof line, "%s deg", fg_text_number(loop->phase_deg, 3, false, number));
        fg_put_right(page, FG_PLAIN, line, 12);
        fg_put_right(page, FG_PLAIN, fg_text_number(loop->peak_sensitivity, 3, false, number), 12);
        fg_newline(page);
    }
    if (isnan(f->peak_sensitivity))
        return;
    snprintf(line, sizeof line, "all loops together: peak sensitivity %s",
             fg_text_number(f->peak_sensitivity, 3, false, number));
    /* a peak of 1 is no peak; NAN: it is at infinite frequency */
    if (f->peak_frequency == 0 && f->peak_sensitivity > 1.005)
        snprintf(line + strlen(line), sizeof line - strlen(line), " at low frequencies");
    else if (!isnan(f->peak_frequency) && f->peak_sensitivity > 1.005)
        snprintf(line + strlen(line), sizeof line - strlen(line), " at %s rad per %s",
                 fg_text_number(f->peak_frequency, 3, false, low), time_unit(f->problem));
    fg_put_wrapped(page, FG_FAINT, "  ", line);
}

static void put_hidden(const struct fg_page *page, const struct fg_findings *f)
{
    if (f->hidden == 0)
        return;
    char re[FG_NUMBER_SIZE], im[FG_NUMBER_SIZE], line[512];
    fg_put_heading(page, "Hidden modes", "open loop");
    for (int k = 0; k < f->hidden; k++) {
        const struct fg_hidden_mode *mode = &f->hidden_modes[k];
        fg_number_round(mode->re, 5, re);
        fg_number_round(fabs(mode->im), 5, im);
        snprintf(line, sizeof line, "%s%s%s%s%s%s%s:%s%s%s%s%s", re, mode->im != 0 ? " +/- " : "",
                 mode->im != 0 ? im : "", mode->im != 0 ? "i" : "",
                 mode->states && mode->states[0] ? " (" : "", mode->states ? mode->states : "",
                 mode->states && mode->states[0] ? ")" : "", mode->unstable ? " unstable;" : "",
                 mode->uncontrollable ? " no input moves it;" : "",
                 mode->unobservable ? " no output shows it;" : "",
                 mode->unweighted ? " the weights do not see it;" : "",
                 mode->undisturbed ? " no disturbance reaches it;" : "");
        line[strlen(line) - 1] = '\0';
        fg_put_wrapped(page, mode->unstable ? FG_BAD : FG_PLAIN, "  ", line);
    }
}

static void put_search(const struct fg_page *page, const struct fg_findings *f, const flatgain_style *style)
{
    if (f->search.starts == 0)
        return;
    char number[FG_NUMBER_SIZE], other[FG_NUMBER_SIZE], line[400];
    fg_put_heading(page, "Search", "");
    snprintf(line, sizeof line, "%d start%s (%d stabilised), %d distinct %s, %ld evaluations%s",
             f->search.starts, f->search.starts == 1 ? "" : "s", f->search.stabilised, f->search.distinct,
             f->search.distinct == 1 ? "minimum" : "minima", f->search.evaluations,
             f->search.rule_satisfied ? "; stopping rule met" : "");
    fg_put_wrapped(page, FG_PLAIN, "  ", line);
    bool at_minimum = f->outcome != FLATGAIN_BOUNDARY && f->outcome != FLATGAIN_UNBOUNDED;
    if (!isnan(f->search.residual) && at_minimum) {
        snprintf(line, sizeof line, "residual gradient %s, smallest curvature %s, relative to the cost",
                 fg_text_number(f->search.residual, 2, false, number),
                 fg_text_number(f->search.smallest_curvature, 2, false, other));
        fg_put_wrapped(page, FG_PLAIN, "  ", line);
    }
    int shown = style->verbose > 0 ? f->search.distinct : f->search.distinct > 3 ? 3 : f->search.distinct;
    for (int k = 0; k < shown && f->search.distinct > 1 && f->search.minima; k++) {
        snprintf(line, sizeof line, "minimum %s reached from %d start%s",
                 fg_text_number(f->search.minima[k].cost, 7, false, number), f->search.minima[k].hits,
                 f->search.minima[k].hits == 1 ? "" : "s");
        fg_put_wrapped(page, FG_FAINT, "  ", line);
    }
    if (style->timing && !isnan(f->search.seconds)) {
        snprintf(line, sizeof line, "%s seconds", fg_text_number(f->search.seconds, 3, false, number));
        fg_put_wrapped(page, FG_PLAIN, "  ", line);
    }
}

static void put_condition(const struct fg_page *page, const struct fg_findings *f)
{
    if (isnan(f->condition))
        return;
    char number[FG_NUMBER_SIZE], line[160];
    if (f->condition > 1 / DBL_EPSILON)
        snprintf(line, sizeof line,
                 "Condition of the open-loop modes: defective (modes share an eigenvector).");
    else
        snprintf(line, sizeof line, "Condition of the open-loop modes: %s%s",
                 fg_text_number(f->condition, 3, false, number),
                 f->condition > 1e8 ? " (nearly defective: poles are sensitive to the last digits of A)"
                                    : "");
    fg_newline(page);
    fg_put_wrapped(page, FG_PLAIN, "", line);
}

static void put_warnings(const struct fg_page *page, const struct fg_findings *f)
{
    if (!f->warnings)
        return;
    fg_put_heading(page, "Look at", "");
    for (const struct fg_finding_warning *w = f->warnings; w; w = w->next)
        fg_put_wrapped(page, FG_CAUTION, "  - ", w->text);
}

static void put_cautions(const struct fg_page *page)
{
    fg_newline(page);
    fg_put_wrapped(page, FG_FAINT, "",
                   "A gain moves machines that can hurt people: commission with limits in place, keep "
                   "interlocks independent of the law, follow local codes and licensed practice.");
}

/* --quiet: the gain, one row a line, and the line that decides the exit status. */
static void put_quiet(const struct fg_page *page, const struct fg_findings *f)
{
    char number[FG_NUMBER_SIZE];
    for (int i = 0; f->has_gain && i < f->problem->m; i++) {
        for (int j = 0; j < f->problem->p; j++) {
            if (j > 0)
                fg_put(page, FG_PLAIN, ",");
            fg_put(page, FG_PLAIN, fg_text_number(f->K[i + j * f->problem->m], 17, true, number));
        }
        fg_newline(page);
    }
    fg_put(page, FG_PLAIN, "# ");
    fg_put(page, FG_PLAIN, flatgain_outcome_name(f->outcome));
    if (!isnan(f->cost)) {
        fg_put(page, FG_PLAIN, ", cost ");
        fg_put(page, FG_PLAIN, fg_text_number(f->cost, 17, true, number));
    } else if (f->has_gain && !f->stable) {
        fg_put(page, FG_PLAIN, ", unstable");
    }
    if (!isnan(f->gap_percent)) {
        fg_put(page, FG_PLAIN, ", above LQG ");
        fg_number_percent(f->gap_percent, number);
        fg_put(page, FG_PLAIN, number);
        fg_put(page, FG_PLAIN, " %");
    }
    if (f->verdict != FG_VERDICT_NONE)
        fg_put(page, FG_PLAIN,
               f->verdict == FG_VERDICT_ACCEPTED  ? ", accepted"
               : f->verdict == FG_VERDICT_REFUSED ? ", refused"
                                                  : ", cannot tell");
    fg_newline(page);
}

void fg_write_text(const struct fg_findings *f, const flatgain_style *style, struct fg_text *text)
{
    struct fg_page page = {text, style->width == 0 ? 80 : style->width, style->color != 0};
    if (page.width < NARROWEST)
        page.width = NARROWEST;
    if (style->verbose < 0) {
        put_quiet(&page, f);
        return;
    }
    bool everything = style->verbose > 0, no_gain = !f->has_gain;
    put_title(&page, f);
    if (f->has_gain)
        fg_text_gain(&page, f, everything);
    fg_text_ladder(&page, f, everything);
    put_poles(&page, f, "Closed-loop poles", f->poles, everything);
    if (no_gain || everything)
        put_poles(&page, f, "Poles without control", f->open_poles, everything || no_gain);
    put_margins(&page, f);
    if (no_gain || everything) {
        put_hidden(&page, f);
        put_condition(&page, f);
    }
    put_search(&page, f, style);
    put_warnings(&page, f);
    if (f->has_gain)
        put_cautions(&page);
}
