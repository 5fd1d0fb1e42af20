#include "api/result.h"

#include <math.h>
#include <stdlib.h>

#include "write/write.h"

enum { INTERNAL_ERROR = 70 }; /* docs/exit-status.md: what a missing result is told as */

flatgain_outcome flatgain_result_outcome(const flatgain_result *result)
{
    return result ? result->findings.outcome : FLATGAIN_NOT_FOUND;
}

int flatgain_result_exit_status(const flatgain_result *result)
{
    return result ? result->findings.exit_status : INTERNAL_ERROR;
}

const double *flatgain_result_gain(const flatgain_result *result)
{
    return result && result->findings.has_gain ? result->findings.K_rows : NULL;
}

double flatgain_result_cost(const flatgain_result *result, flatgain_cost which)
{
    if (!result)
        return NAN;
    const struct fg_findings *f = &result->findings;
    switch (which) {
    case FLATGAIN_COST_GAIN:
        return f->cost;
    case FLATGAIN_COST_NONE:
        return f->cost_none;
    case FLATGAIN_COST_TODAY:
        return f->cost_today;
    case FLATGAIN_COST_LQG:
        return f->cost_lqg;
    case FLATGAIN_COST_LQR:
        return f->cost_lqr;
    }
    return NAN;
}

double flatgain_result_gap_percent(const flatgain_result *result)
{
    return result ? result->findings.gap_percent : NAN;
}

int flatgain_result_lqg_attained(const flatgain_result *result)
{
    return result && result->findings.lqg_attained;
}

double flatgain_result_residual(const flatgain_result *result)
{
    return result ? result->findings.search.residual : NAN;
}

static flatgain_status give(struct fg_text *made, char **text, size_t *length)
{
    if (made->failed || !made->at) {
        fg_text_free(made);
        return FLATGAIN_NO_MEMORY;
    }
    *text = made->at;
    if (length)
        *length = made->length;
    return FLATGAIN_OK;
}

flatgain_status flatgain_result_text(const flatgain_result *result, const flatgain_style *style, char **text,
                                     size_t *length)
{
    struct fg_text made = {0};
    flatgain_style plain = {0};
    if (text)
        *text = NULL;
    if (!result || !text)
        return FLATGAIN_BAD_ARGUMENT;
    fg_write_text(&result->findings, style ? style : &plain, &made);
    return give(&made, text, length);
}

flatgain_status flatgain_result_json(const flatgain_result *result, const flatgain_style *style, char **text,
                                     size_t *length)
{
    struct fg_text made = {0};
    flatgain_style plain = {0};
    if (text)
        *text = NULL;
    if (!result || !text)
        return FLATGAIN_BAD_ARGUMENT;
    if (!fg_write_json(&result->findings, style ? style : &plain, &made))
        made.failed = true;
    return give(&made, text, length);
}

void flatgain_text_free(char *text)
{
    free(text);
}
