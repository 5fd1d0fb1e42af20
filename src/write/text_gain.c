#include "write/text_parts.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"

enum {
    LONGEST_NAME = 24, /* of an output, as the head of a column */
    GAP = 2,
    DIGITS = 6
};

const char *fg_text_number(double value, int digits, bool exact, char *number)
{
    if (isnan(value))
        strcpy(number, "-");
    else if (exact && isfinite(value))
        fg_number_exact(value == 0 ? 0.0 : value, number);
    else
        fg_number_round(value, digits, number);
    return number;
}

struct mark {
    bool fixed, bound; /* fixed by the user; sits on a bound */
};

static struct mark mark_of(const struct fg_findings *f, int entry)
{
    const struct fg_pattern *pattern = &f->problem->pattern;
    struct mark mark = {false, false};
    if (f->outcome == FLATGAIN_JUDGED)
        return mark;
    int index = pattern->index[entry];
    if (index < 0) {
        mark.fixed = true;
        return mark;
    }
    double theta = f->K[entry] * pattern->sign[entry], room = 1e-9 * fabs(theta);
    mark.bound = theta <= pattern->lower[index] + room || theta >= pattern->upper[index] - room;
    return mark;
}

/* A number with its mark: "[0]" fixed, "5*" on a bound; unmarked numbers end in a blank where others have
 * a mark, so that digits stand below digits. */
static void cell(const struct fg_findings *f, int i, int j, bool exact, bool marked, char text[48])
{
    char number[FG_NUMBER_SIZE];
    int entry = i + j * f->problem->m;
    struct mark mark = mark_of(f, entry);
    fg_text_number(f->K[entry], DIGITS, exact, number);
    snprintf(text, 48, "%s%s%s", mark.fixed ? "[" : "", number,
             mark.fixed   ? "]"
             : mark.bound ? "*"
             : marked     ? " "
                          : "");
}

/* Which outputs have a column of their own in the piece that starts at `from`, and how wide each is. */
static int column_width(const struct fg_findings *f, int j, bool exact, bool marked)
{
    int width = fg_columns(f->problem->outputs[j].name) + marked;
    for (int i = 0; i < f->problem->m; i++) {
        char text[48];
        cell(f, i, j, exact, marked, text);
        if (fg_columns(text) > width)
            width = fg_columns(text);
    }
    return width + GAP;
}

static int longest_name(const struct fg_signal *signal, int count)
{
    int longest = 0;
    for (int k = 0; k < count; k++)
        if (fg_columns(signal[k].name) > longest)
            longest = fg_columns(signal[k].name);
    return longest;
}

static void as_table(const struct fg_page *page, const struct fg_findings *f, bool exact, bool marked)
{
    const struct flatgain_problem *problem = f->problem;
    int left = longest_name(problem->inputs, problem->m);
    if (left > LONGEST_NAME)
        left = LONGEST_NAME;
    for (int from = 0; from < problem->p;) {
        int to = from, used = 2 + left;
        while (to < problem->p) {
            int width = column_width(f, to, exact, marked);
            if (to > from && used + width > page->width)
                break;
            used += width;
            to++;
        }
        if (from > 0)
            fg_newline(page);
        fg_put_left(page, FG_PLAIN, "", 2 + left);
        for (int j = from; j < to; j++) {
            fg_put_right(page, FG_FAINT, problem->outputs[j].name,
                         column_width(f, j, exact, marked) - marked);
            if (marked && j + 1 < to)
                fg_put(page, FG_PLAIN, " ");
        }
        fg_newline(page);
        for (int i = 0; i < problem->m; i++) {
            fg_put(page, FG_PLAIN, "  ");
            fg_put_left(page, FG_FAINT, problem->inputs[i].name, left);
            for (int j = from; j < to; j++) {
                char text[48];
                bool last = j + 1 == to;
                cell(f, i, j, exact, marked, text);
                size_t length = strlen(text);
                int width = column_width(f, j, exact, marked);
                if (last && text[length - 1] == ' ') { /* no blanks at the end of a line */
                    text[length - 1] = '\0';
                    width--;
                }
                fg_put_right(page, FG_HEAD, text, width);
            }
            fg_newline(page);
        }
        from = to;
    }
}

/* One line per entry, for names that make no columns. */
static void as_list(const struct fg_page *page, const struct fg_findings *f, bool exact, bool marked)
{
    const struct flatgain_problem *problem = f->problem;
    int numbers = 0;
    char text[48];
    for (int i = 0; i < problem->m; i++)
        for (int j = 0; j < problem->p; j++) {
            cell(f, i, j, exact, marked, text);
            if (fg_columns(text) > numbers)
                numbers = fg_columns(text);
        }
    for (int i = 0; i < problem->m; i++) {
        fg_put(page, FG_PLAIN, "  ");
        fg_put_left(page, FG_FAINT, problem->inputs[i].name, page->width - 2);
        /* fg_put_left pads to the edge; the padding is cut again so that lines end in no blanks */
        while (page->out->length > 0 && !page->out->failed && page->out->at[page->out->length - 1] == ' ')
            page->out->at[--page->out->length] = '\0';
        fg_newline(page);
        for (int j = 0; j < problem->p; j++) {
            cell(f, i, j, exact, marked, text);
            size_t length = strlen(text);
            fg_put(page, FG_PLAIN, "  ");
            fg_put_right(page, FG_HEAD, text, numbers + GAP);
            if (text[length - 1] != ' ')
                fg_put(page, FG_PLAIN, marked ? " " : "  ");
            else
                fg_put(page, FG_PLAIN, " ");
            int room = page->width - numbers - GAP - 4;
            if (fg_columns(problem->outputs[j].name) > room)
                fg_put_left(page, FG_FAINT, problem->outputs[j].name, room);
            else
                fg_put(page, FG_FAINT, problem->outputs[j].name);
            fg_newline(page);
        }
    }
}

static int add_units(struct fg_text *text, const struct fg_signal *signal, int count, int said)
{
    for (int k = 0; k < count; k++) {
        if (!signal[k].unit[0])
            continue;
        fg_text_add(text, said++ ? ", " : "");
        fg_text_add(text, signal[k].name);
        fg_text_add(text, " ");
        fg_text_add(text, signal[k].unit);
    }
    return said;
}

/* The units that the user gave: an entry of K is in units of its input per unit of its output. */
static void put_units(const struct fg_page *page, const struct flatgain_problem *problem)
{
    struct fg_text text = {0};
    fg_text_add(&text, "in units of the input per unit of the output: ");
    int said = add_units(&text, problem->inputs, problem->m, 0);
    said = add_units(&text, problem->outputs, problem->p, said);
    if (text.failed)
        page->out->failed = true;
    else if (said > 0)
        fg_put_wrapped(page, FG_FAINT, "  ", text.at);
    fg_text_free(&text);
}

/* A filter made in the PLC has to be programmed with the gain. */
static void put_filters(const struct fg_page *page, const struct flatgain_problem *problem)
{
    char number[FG_NUMBER_SIZE], line[400];
    for (int j = 0; j < problem->p; j++) {
        const struct fg_signal *output = &problem->outputs[j];
        if (!output->lag_in_plc || !(output->lag > 0))
            continue;
        snprintf(line, sizeof line,
                 "Part of the law: filter %s in the PLC with a time constant of %s %s, as the model does.",
                 output->name, fg_text_number(output->lag, 6, false, number),
                 problem->time_unit[0] ? problem->time_unit : "time units");
        fg_put_wrapped(page, FG_CAUTION, "  ", line);
    }
}

void fg_text_gain(const struct fg_page *page, const struct fg_findings *f, bool exact)
{
    const struct flatgain_problem *problem = f->problem;
    bool any_fixed = false, any_bound = false, too_wide = false;
    for (int entry = 0; entry < problem->m * problem->p; entry++) {
        struct mark mark = mark_of(f, entry);
        any_fixed = any_fixed || mark.fixed;
        any_bound = any_bound || mark.bound;
    }
    bool marked = any_fixed || any_bound;
    int left = longest_name(problem->inputs, problem->m);
    if (left > LONGEST_NAME)
        left = LONGEST_NAME;
    for (int j = 0; j < problem->p; j++)
        if (fg_columns(problem->outputs[j].name) > LONGEST_NAME ||
            2 + left + column_width(f, j, exact, marked) > page->width)
            too_wide = true;
    fg_put_heading(page, "Gain K", "u = u0 - K (y - y0); rows: inputs, columns: outputs");
    if (too_wide)
        as_list(page, f, exact, marked);
    else
        as_table(page, f, exact, marked);
    if (marked)
        fg_put_wrapped(page, FG_FAINT, "  ",
                       any_fixed && any_bound ? "[ ] fixed by you, * on its bound"
                       : any_fixed            ? "[ ] fixed by you"
                                              : "* on its bound");
    put_units(page, problem);
    put_filters(page, problem);
}
