#include "sane.h"

#include <cjson/cJSON.h>
#include <check.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { MOST = 64 };

/* LAPACK calls this when it is given a wrong size or a NaN; its own one prints, and in the reference library
 * it ends the process. No call of ours may come to that. */
void xerbla_(const char *name, const int *info, size_t length);

void xerbla_(const char *name, const int *info, size_t length)
{
    ck_abort_msg("LAPACK's %.*s refuses argument %d", (int)length, name, *info);
}

static void check_texts(const flatgain_result *result, const char *what)
{
    for (int verbose = -1; verbose <= 1; verbose++) {
        const flatgain_style style = {.color = verbose > 0, .verbose = verbose, .timing = 1, .width = 40};
        char *text;
        size_t length;
        ck_assert_int_eq(flatgain_result_text(result, &style, &text, &length), FLATGAIN_OK);
        ck_assert_msg(length > 0 && strlen(text) == length && text[length - 1] == '\n', "%s", what);
        flatgain_text_free(text);
        ck_assert_int_eq(flatgain_result_json(result, &style, &text, &length), FLATGAIN_OK);
        ck_assert_uint_eq(strlen(text), length);
        cJSON *json = cJSON_ParseWithOpts(text, NULL, 1);
        ck_assert_msg(json != NULL, "%s: the JSON does not parse", what);
        const cJSON *outcome = cJSON_GetObjectItem(json, "outcome");
        ck_assert_msg(cJSON_IsString(outcome), "%s: no outcome", what);
        ck_assert_str_eq(outcome->valuestring, flatgain_outcome_name(flatgain_result_outcome(result)));
        cJSON_Delete(json);
        flatgain_text_free(text);
    }
}

static void check_numbers(const flatgain_problem *problem, const flatgain_result *result, const char *what)
{
    const double *gain = flatgain_result_gain(result);
    int count = flatgain_problem_inputs(problem) * flatgain_problem_outputs(problem);
    for (int i = 0; gain && i < count; i++)
        ck_assert_msg(isfinite(gain[i]), "%s: entry %d of the gain is %g", what, i, gain[i]);
    double cost[5];
    for (int k = 0; k < 5; k++) {
        cost[k] = flatgain_result_cost(result, (flatgain_cost)k);
        ck_assert_msg(!isinf(cost[k]) && !(cost[k] < 0), "%s: cost %d is %g", what, k, cost[k]);
    }
    ck_assert_msg(!isinf(flatgain_result_gap_percent(result)), "%s: the gap is infinite", what);
    ck_assert_msg(!(flatgain_result_residual(result) < 0) && !isinf(flatgain_result_residual(result)),
                  "%s: residual %g", what, flatgain_result_residual(result));
    if (!gain)
        ck_assert_msg(isnan(cost[FLATGAIN_COST_GAIN]), "%s: a cost without a gain", what);
    int exit_status = flatgain_result_exit_status(result);
    ck_assert_msg(exit_status == 0 || exit_status == 1 || (exit_status >= 3 && exit_status <= 5),
                  "%s: exit status %d", what, exit_status); /* docs/exit-status.md */
}

/* A gain that is given as tuned has its cost also when it is judged alone, or the result says that it has
 * not: numbers of 1e300 may leave nothing but rounding. */
static void check_again(const flatgain_problem *problem, const flatgain_result *result, const char *what)
{
    double cost = flatgain_result_cost(result, FLATGAIN_COST_GAIN);
    flatgain_result *again;
    char *text;
    ck_assert_msg(flatgain_result_gain(result) && isfinite(cost), "%s: tuned without gain or cost", what);
    flatgain_status status = flatgain_judge(problem, flatgain_result_gain(result), NULL, &again, NULL);
    ck_assert_msg(status == FLATGAIN_OK, "%s: the tuned gain cannot be judged", what);
    double judged = flatgain_result_cost(again, FLATGAIN_COST_GAIN);
    flatgain_result_free(again);
    if (fabs(judged - cost) <= 0.01 * fabs(cost))
        return;
    ck_assert_int_eq(flatgain_result_json(result, NULL, &text, NULL), FLATGAIN_OK);
    ck_assert_msg(strstr(text, "\"cost-uncertain\"") || strstr(text, "\"zero-cost\""),
                  "%s: tuned %.9g, judged %.9g, and no warning", what, cost, judged);
    if (strstr(text, "\"cost-uncertain\""))
        ck_assert_int_eq(flatgain_result_exit_status(result), 5);
    flatgain_text_free(text);
}

void check_result(const flatgain_problem *problem, const flatgain_result *result, const char *what)
{
    check_texts(result, what);
    check_numbers(problem, result, what);
    if (flatgain_result_outcome(result) == FLATGAIN_TUNED)
        check_again(problem, result, what);
}

static int end(const flatgain_problem *problem, flatgain_status status, const flatgain_error *error,
               flatgain_result *result, const char *what)
{
    ck_assert_msg(status == FLATGAIN_OK || status == FLATGAIN_NUMERICAL, "%s: %s, %s", what,
                  flatgain_status_name(status), error->text);
    ck_assert((result != NULL) == (status == FLATGAIN_OK));
    if (!result) {
        ck_assert_msg(error->status == status && error->text[0], "%s: no error text", what);
        return 0;
    }
    check_result(problem, result, what);
    flatgain_result_free(result);
    return 1;
}

int work_with(const flatgain_problem *problem, const double *gain, const char *what)
{
    static const double zeros[MOST];
    flatgain_options options = flatgain_options_default();
    flatgain_result *result;
    flatgain_error error = {0};
    char text[300];
    int made = 0;
    ck_assert_int_le(flatgain_problem_inputs(problem) * flatgain_problem_outputs(problem), MOST);
    options.starts = 8;
    options.threads = 1;
    snprintf(text, sizeof text, "%.250s, tune", what);
    flatgain_status status = flatgain_tune(problem, &options, &result, &error);
    made += end(problem, status, &error, result, text);
    snprintf(text, sizeof text, "%.250s, judge", what);
    status = flatgain_judge(problem, gain ? gain : zeros, NULL, &result, &error);
    made += end(problem, status, &error, result, text);
    snprintf(text, sizeof text, "%.250s, inspect", what);
    status = flatgain_inspect(problem, NULL, &result, &error);
    made += end(problem, status, &error, result, text);
    return made;
}
