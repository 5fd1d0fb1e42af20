#include "write/text_parts.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"

enum { LABEL = 34, COST = 12, ABOVE = 13, LONGEST_BAR = 40 };

/* Bars are proportional to the cost as long as the largest is at most so many times the smallest; beyond
 * that they would all but one be empty, and grow with the logarithm instead. */
static const double MOST_LINEAR = 20;

struct scale {
    double low, high; /* smallest and largest positive cost */
    bool logarithmic;
    int room; /* columns for the longest bar */
};

static struct scale scale_of(const struct fg_page *page, const struct fg_findings *f)
{
    struct scale scale = {INFINITY, 0, false, page->width - LABEL - COST - ABOVE - 2};
    for (int k = 0; k < f->rungs; k++)
        if (f->ladder[k].cost > 0) {
            scale.low = fmin(scale.low, f->ladder[k].cost);
            scale.high = fmax(scale.high, f->ladder[k].cost);
        }
    if (scale.room > LONGEST_BAR)
        scale.room = LONGEST_BAR;
    scale.logarithmic = scale.high > MOST_LINEAR * scale.low;
    return scale;
}

static int bar_length(const struct scale *scale, double cost)
{
    if (!(cost > 0) || scale->room < 4)
        return 0;
    double part =
        scale->logarithmic ? log(cost / scale->low) / log(scale->high / scale->low) : cost / scale->high;
    int length =
        scale->logarithmic ? 1 + (int)lround(part * (scale->room - 1)) : (int)lround(part * scale->room);
    return length < 1 ? 1 : length;
}

static void put_percent(const struct fg_page *page, double percent)
{
    char number[FG_NUMBER_SIZE], text[FG_NUMBER_SIZE + 4];
    if (isnan(percent)) {
        fg_put_right(page, FG_FAINT, "-", ABOVE);
        return;
    }
    fg_number_percent(percent, number);
    snprintf(text, sizeof text, "%s%s %%", percent >= 0.005 && percent < 1e6 ? "+" : "", number);
    fg_put_right(page, FG_PLAIN, text, ABOVE);
}

static void put_price(const struct fg_page *page, const struct fg_rung *rung)
{
    if (isnan(rung->price_percent) || !rung->price[0])
        return;
    char number[FG_NUMBER_SIZE], line[160];
    fg_number_percent(rung->price_percent, number);
    snprintf(line, sizeof line, "%s: %s %%", rung->price, number);
    fg_put_wrapped(page, FG_FAINT, "      ", line);
}

void fg_text_ladder(const struct fg_page *page, const struct fg_findings *f, bool exact)
{
    struct scale scale = scale_of(page, f);
    bool own;
    fg_put_heading(page, "Ladder of costs",
                   f->problem->reading == FG_START ? "J of a random start, over all time"
                                                   : "J, the average of x'Qx + 2x'Nu + u'Ru");
    fg_put_left(page, FG_FAINT, "", LABEL);
    fg_put_right(page, FG_FAINT, "cost", COST);
    fg_put_right(page, FG_FAINT, "above LQG", ABOVE);
    if (scale.logarithmic && scale.room >= 16)
        fg_put(page, FG_FAINT, "  (bars: log)");
    fg_newline(page);
    for (int k = 0; k < f->rungs; k++) {
        const struct fg_rung *rung = &f->ladder[k];
        char number[FG_NUMBER_SIZE];
        own = strcmp(rung->key, "tuned") == 0 || strcmp(rung->key, "judged") == 0;
        enum fg_ink ink = own ? FG_HEAD : FG_PLAIN;
        fg_put(page, FG_PLAIN, own ? "> " : "  ");
        fg_put_left(page, ink, rung->label, LABEL - 2);
        if (isnan(rung->cost)) {
            bool unstable = strcmp(rung->note, "unstable") == 0;
            fg_put_right(page, unstable ? FG_BAD : FG_FAINT, unstable ? "unstable" : "-", COST);
            if (!unstable && rung->note[0]) {
                fg_newline(page);
                fg_put_wrapped(page, FG_FAINT, "      ", rung->note);
                continue;
            }
            fg_newline(page);
            continue;
        }
        /* exact costs do not fit the column; they are listed with --verbose at the end */
        fg_put_right(page, ink, fg_text_number(rung->cost, 7, false, number), COST);
        put_percent(page, rung->above_lqg_percent);
        int length = bar_length(&scale, rung->cost);
        if (length > 0)
            fg_put(page, FG_PLAIN, "  ");
        for (int bar = 0; bar < length; bar++)
            fg_put(page, FG_PLAIN, "=");
        fg_newline(page);
        if (rung->note[0])
            fg_put_wrapped(page, FG_FAINT, "      ", rung->note);
        const char *why = strcmp(rung->key, "lqg") == 0   ? f->lqg_why
                          : strcmp(rung->key, "lqr") == 0 ? f->lqr_why
                                                          : NULL;
        if (exact && why)
            fg_put_wrapped(page, FG_FAINT, "      ", why);
        put_price(page, rung);
    }
    bool final = f->outcome != FLATGAIN_BOUNDARY && f->outcome != FLATGAIN_UNBOUNDED;
    if (!isnan(f->captured_percent) && f->has_gain && final) {
        char number[FG_NUMBER_SIZE], line[160];
        fg_number_round(f->captured_percent, 3, number);
        snprintf(line, sizeof line,
                 "This gain gets %s %% of all that control can gain on these measurements.", number);
        fg_put_wrapped(page, FG_PLAIN, "  ", line);
    }
    if (exact && !isnan(f->cost)) {
        char number[FG_NUMBER_SIZE], line[80];
        snprintf(line, sizeof line, "cost in full: %s", fg_text_number(f->cost, 17, true, number));
        fg_put_wrapped(page, FG_FAINT, "  ", line);
    }
}
