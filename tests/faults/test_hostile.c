/* Numbers and arguments made to hurt: NaN, infinities, the ends of the range of doubles, wrong sizes, NULL.
 * Nothing hangs (LAPACK's dgees never returns on a NaN, hence the time-outs), nothing crashes, every refusal
 * names the place. Source of the expectations: the contract in flatgain.h. */
#include <check.h>
#include <float.h>
#include <limits.h>
#include <stdbool.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "flatgain.h"
#include "sane.h"

/* A healthy problem (made up), n = 3, m = 2, p = 2; a test spoils one entry. */
enum { NX = 3, NU = 2, NY = 2, SLOTS = 15 };
struct plant {
    double at[SLOTS][9];
    flatgain_matrices matrices;
};
static const struct slot {
    const char *name; /* in error texts */
    int rows, cols;
    double value[9];
} slots[SLOTS] = {
    {"A", NX, NX, {-1, 0.5, 0, 0.2, 0.1, 0.3, 0, -0.4, -0.7}},
    {"B", NX, NU, {1, 0, 0.5, 0.2, 0, 1}},
    {"C", NY, NX, {1, 0, 0.3, 0, 1, 0}},
    {"D", NY, NU, {0, 0.1, 0.05, 0}},
    {"Q", NX, NX, {1, 0.1, 0, 0.1, 2, 0, 0, 0, 1}},
    {"R", NU, NU, {1, 0.1, 0.1, 1}},
    {"N", NX, NU, {0.1, 0, 0, 0.1, 0, 0}},
    {"W", NX, NX, {1, 0.1, 0, 0.1, 1, 0, 0, 0, 0.5}},
    {"V", NY, NY, {0.1, 0.01, 0.01, 0.2}},
    {"lag", NY, 1, {0.1, 0.2}},
    {"fixed", NU, NY, {NAN, 0.1, NAN, NAN}},
    {"lower", NU, NY, {-10, -10, -INFINITY, -10}},
    {"upper", NU, NY, {10, 10, 10, INFINITY}},
    {"today", NU, NY, {0.2, 0.1, 0, 0.3}},
    {"accept_percent", 1, 1, {10}},
};
enum { SLOT_V = 8, SLOT_LAG, SLOT_FIXED, SLOT_LOWER, SLOT_UPPER, SLOT_TODAY, SLOT_ACCEPT };

static void healthy(struct plant *plant, bool discrete)
{
    for (int s = 0; s < SLOTS; s++)
        memcpy(plant->at[s], slots[s].value, sizeof slots[s].value);
    double(*at)[9] = plant->at;
    plant->matrices =
        (flatgain_matrices){discrete, 0,     NX,    NU,    NY,    at[0],  at[1],  at[2],  at[3],  at[4],
                            at[5],    at[6], at[7], at[8], at[9], at[10], at[11], at[12], at[13], *at[14]};
    if (discrete)
        plant->matrices.lag = NULL;
}

static const double nasty[] = {NAN, INFINITY, -INFINITY, 1e300, -1e300, 1e-300, DBL_MIN / 4, 0, DBL_MAX};
enum { NASTY = sizeof nasty / sizeof *nasty };

/* A NaN or an infinity has a meaning in three places only. */
static bool may_be_accepted(int slot, double value)
{
    return isfinite(value) || (slot == SLOT_FIXED && isnan(value)) || (slot == SLOT_LOWER && value < 0) ||
           (slot == SLOT_UPPER && value > 0) || (slot == SLOT_ACCEPT && isnan(value));
}

/* Loop index: slot, setting. */
START_TEST(spoilt_entries)
{
    int slot = _i / 2, accepted = 0, refused = 0;
    bool discrete = _i % 2;
    for (int entry = 0; entry < slots[slot].rows * slots[slot].cols; entry++)
        for (int k = 0; k < NASTY; k++) {
            struct plant plant;
            healthy(&plant, discrete);
            plant.at[slot][entry] = nasty[k];
            plant.matrices.accept_percent = *plant.at[SLOT_ACCEPT];
            flatgain_problem *problem = NULL;
            flatgain_error error = {0};
            char what[200];
            snprintf(what, sizeof what, "%s, %s entry %d is %g", discrete ? "discrete" : "continuous",
                     slots[slot].name, entry, nasty[k]);
            flatgain_status status = flatgain_problem_from_matrices(&plant.matrices, &problem, &error);
            if (status == FLATGAIN_OK) {
                bool unused = discrete && slot == SLOT_LAG;
                ck_assert_msg(unused || may_be_accepted(slot, nasty[k]), "%s: accepted", what);
                work_with(problem, NULL, what);
                flatgain_problem_free(problem);
                accepted++;
                continue;
            }
            ck_assert_msg(!problem, "%s: a problem in spite of the error", what);
            ck_assert_msg(status == FLATGAIN_BAD_PROBLEM ||
                              (slot == SLOT_ACCEPT && status == FLATGAIN_BAD_ARGUMENT),
                          "%s: %s", what, error.text);
            ck_assert_int_eq(error.status, status);
            ck_assert_msg(strstr(error.text, "; expected") != NULL, "%s: %s", what, error.text);
            ck_assert_msg(strstr(error.text, slots[slot].name) != NULL || slot == SLOT_LAG,
                          "%s is not named: %s", what, error.text);
            refused++;
        }
    ck_assert_int_gt(accepted, 0);
    ck_assert(refused > 0 || (discrete && slot == SLOT_LAG));
}
END_TEST

/* Whole matrices at the ends of the range, and gains likewise. */
START_TEST(spoilt_matrices)
{
    for (int slot = 0; slot < SLOT_V; slot++)
        for (int k = 3; k < NASTY; k++) {
            struct plant plant;
            char what[100];
            flatgain_problem *problem = NULL;
            flatgain_error error = {0};
            healthy(&plant, _i);
            for (int e = 0; e < slots[slot].rows * slots[slot].cols; e++)
                plant.at[slot][e] *= nasty[k];
            snprintf(what, sizeof what, "%s: %s times %g", _i ? "discrete" : "continuous", slots[slot].name,
                     nasty[k]);
            flatgain_status status = flatgain_problem_from_matrices(&plant.matrices, &problem, &error);
            if (status == FLATGAIN_OK)
                work_with(problem, NULL, what);
            else
                ck_assert_msg(status == FLATGAIN_BAD_PROBLEM && strstr(error.text, "; expected"), "%s: %s",
                              what, error.text);
            flatgain_problem_free(problem);
        }
}
END_TEST

START_TEST(spoilt_gains)
{
    struct plant plant;
    flatgain_problem *problem;
    healthy(&plant, _i);
    ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, &problem, NULL), FLATGAIN_OK);
    for (int entry = 0; entry < NU * NY; entry++)
        for (int k = 0; k < NASTY; k++) {
            double gain[NU * NY] = {0.2, 0.1, 0, 0.3};
            flatgain_result *result = NULL;
            flatgain_error error = {0};
            char what[100];
            gain[entry] = nasty[k];
            snprintf(what, sizeof what, "gain %d is %g", entry, nasty[k]);
            flatgain_status status = flatgain_judge(problem, gain, NULL, &result, &error);
            if (!isfinite(nasty[k])) {
                ck_assert_int_eq(status, FLATGAIN_BAD_ARGUMENT);
                ck_assert_ptr_null(result);
                ck_assert_ptr_nonnull(strstr(error.text, "gain"));
                continue;
            }
            ck_assert_msg(status == FLATGAIN_OK || status == FLATGAIN_NUMERICAL, "%s: %s", what, error.text);
            if (result)
                check_result(problem, result, what);
            flatgain_result_free(result);
        }
    flatgain_problem_free(problem);
}
END_TEST

/* I + K D singular, within rounding, for K = [0 -20; -10 0]: no loop exists. */
START_TEST(ill_posed_loop)
{
    static const double gain[] = {0, -20, -10, 0};
    struct plant plant;
    flatgain_problem *problem;
    flatgain_result *result;
    healthy(&plant, _i);
    plant.matrices.fixed = NULL;
    ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, &problem, NULL), FLATGAIN_OK);
    ck_assert_int_eq(flatgain_judge(problem, gain, NULL, &result, NULL), FLATGAIN_OK);
    check_result(problem, result, "ill posed");
    ck_assert(isnan(flatgain_result_cost(result, FLATGAIN_COST_GAIN)));
    ck_assert_int_eq(flatgain_result_exit_status(result), 1);
    flatgain_result_free(result);
    flatgain_problem_free(problem);
}
END_TEST

/* ---- arguments -------------------------------------------------------------------------------- */

START_TEST(sizes)
{
    static const int bad[] = {0, -1, INT_MIN, INT_MAX, 2001, 46341, 65536};
    for (int which = 0; which < 3; which++)
        for (size_t k = 0; k < sizeof bad / sizeof *bad; k++) {
            struct plant plant;
            flatgain_problem *problem = NULL;
            flatgain_error error = {0};
            healthy(&plant, 0);
            *(which == 0   ? &plant.matrices.states
              : which == 1 ? &plant.matrices.inputs
                           : &plant.matrices.outputs) = bad[k];
            ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, &problem, &error),
                             FLATGAIN_BAD_ARGUMENT);
            ck_assert_ptr_null(problem);
            ck_assert_ptr_nonnull(strstr(error.text, "states"));
        }
}
END_TEST

START_TEST(options)
{
    static const int starts[] = {0, -1, INT_MIN, INT_MAX, 8, 8, 8},
                     threads[] = {1, 1, 1, 1, -1, INT_MAX, INT_MIN};
    struct plant plant;
    flatgain_problem *problem;
    healthy(&plant, 0);
    ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, &problem, NULL), FLATGAIN_OK);
    for (int k = 0; k < 7; k++) {
        flatgain_options how = flatgain_options_default();
        flatgain_result *result = NULL;
        flatgain_error error = {0};
        how.starts = starts[k];
        how.threads = threads[k];
        ck_assert_int_eq(flatgain_tune(problem, &how, &result, &error), FLATGAIN_BAD_ARGUMENT);
        ck_assert_ptr_null(result);
        ck_assert_ptr_nonnull(strstr(error.text, k < 4 ? "starts" : "threads"));
    }
    flatgain_options how = {.starts = 8, .seed = UINT64_MAX, .threads = 256};
    flatgain_result *result;
    ck_assert_int_eq(flatgain_tune(problem, &how, &result, NULL), FLATGAIN_OK);
    static const int widths[] = {INT_MIN, -1, 1, 10, 100000, INT_MAX};
    for (int k = 0; k < 6; k++)
        for (int json = 0; json < 2; json++) {
            const flatgain_style style = {
                .color = -7, .verbose = k % 2 ? 99 : -99, .timing = 5, .width = widths[k]};
            char *text = NULL;
            size_t length;
            ck_assert_int_eq(
                (json ? flatgain_result_json : flatgain_result_text)(result, &style, &text, &length),
                FLATGAIN_OK);
            ck_assert(length > 0 && length < 1000000);
            flatgain_text_free(text);
        }
    flatgain_result_free(result);
    flatgain_problem_free(problem);
}
END_TEST

static void *somewhere = &somewhere; /* what a failed call must overwrite with NULL */

/* Each matrix missing, then each of the other pointers of the whole interface. */
START_TEST(missing_pointers)
{
    struct plant plant;
    flatgain_problem *problem = NULL, *other;
    flatgain_result *result = NULL;
    flatgain_error error = {0};
    for (int k = 0; k < 14; k++) {
        healthy(&plant, 0);
        const double **at[] = {&plant.matrices.A,     &plant.matrices.B,     &plant.matrices.C,
                               &plant.matrices.Q,     &plant.matrices.R,     &plant.matrices.W,
                               &plant.matrices.D,     &plant.matrices.N,     &plant.matrices.V,
                               &plant.matrices.fixed, &plant.matrices.lower, &plant.matrices.upper,
                               &plant.matrices.today, &plant.matrices.lag};
        *at[k] = NULL;
        flatgain_status status = flatgain_problem_from_matrices(&plant.matrices, &problem, &error);
        ck_assert_int_eq(status, k < 6    ? FLATGAIN_BAD_ARGUMENT
                                 : k < 13 ? FLATGAIN_OK
                                          : FLATGAIN_BAD_PROBLEM); /* continuous noise needs the lag */
        ck_assert((problem != NULL) == (status == FLATGAIN_OK));
        flatgain_problem_free(problem);
    }
    healthy(&plant, 0);
    double gain[NU * NY] = {0};
    char *text;
    const flatgain_status bad = FLATGAIN_BAD_ARGUMENT;
    other = somewhere;
    ck_assert_int_eq(flatgain_problem_from_matrices(NULL, &other, &error), bad);
    ck_assert_ptr_null(other);
    ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, NULL, &error), bad);
    ck_assert_int_eq(flatgain_problem_from_matrices(NULL, NULL, NULL), bad);
    other = somewhere;
    ck_assert_int_eq(flatgain_problem_parse(NULL, 5, NULL, NULL, &other, &error), bad);
    ck_assert_ptr_null(other);
    ck_assert_int_eq(flatgain_problem_parse("a", 1, NULL, NULL, NULL, &error), bad);
    ck_assert_int_eq(flatgain_problem_parse(NULL, 0, NULL, NULL, &other, NULL), FLATGAIN_BAD_PROBLEM);
    other = somewhere;
    ck_assert_int_eq(flatgain_problem_read(NULL, &other, &error), bad);
    ck_assert_ptr_null(other);
    ck_assert_int_eq(flatgain_problem_read("x", NULL, &error), bad);
    ck_assert_int_eq(flatgain_problem_read("", &other, NULL), FLATGAIN_CANNOT_READ);
    ck_assert_ptr_null(other);
    ck_assert_int_eq(flatgain_problem_from_matrices(&plant.matrices, &problem, NULL), FLATGAIN_OK);
    ck_assert_int_eq(flatgain_gain_read(NULL, problem, gain, NULL), bad);
    ck_assert_int_eq(flatgain_gain_read("x", NULL, gain, NULL), bad);
    ck_assert_int_eq(flatgain_gain_read("x", problem, NULL, NULL), bad);
    ck_assert_int_eq(flatgain_gain_read("/nonexistent", problem, gain, NULL), FLATGAIN_CANNOT_READ);
    ck_assert_int_eq(flatgain_tune(NULL, NULL, &result, NULL), bad);
    ck_assert_int_eq(flatgain_tune(problem, NULL, NULL, NULL), bad);
    ck_assert_int_eq(flatgain_judge(NULL, gain, NULL, &result, NULL), bad);
    ck_assert_int_eq(flatgain_judge(problem, NULL, NULL, &result, NULL), bad);
    ck_assert_int_eq(flatgain_judge(problem, gain, NULL, NULL, NULL), bad);
    ck_assert_int_eq(flatgain_inspect(NULL, NULL, &result, NULL), bad);
    ck_assert_int_eq(flatgain_inspect(problem, NULL, NULL, NULL), bad);
    ck_assert_int_eq(flatgain_inspect(problem, NULL, &result, NULL), FLATGAIN_OK);
    text = somewhere;
    ck_assert_int_eq(flatgain_result_text(NULL, NULL, &text, NULL), bad);
    ck_assert_ptr_null(text);
    ck_assert_int_eq(flatgain_result_text(result, NULL, NULL, NULL), bad);
    text = somewhere;
    ck_assert_int_eq(flatgain_result_json(NULL, NULL, &text, NULL), bad);
    ck_assert_ptr_null(text);
    ck_assert_int_eq(flatgain_result_json(result, NULL, NULL, NULL), bad);
    flatgain_problem_free(problem);
    check_result(problem, result, "a result keeps its problem alive");
    flatgain_result_free(result);
}
END_TEST

/* What is asked of NULL has the answer of "nothing there", see flatgain.h. */
START_TEST(questions_to_null)
{
    flatgain_problem_free(NULL);
    flatgain_result_free(NULL);
    flatgain_text_free(NULL);
    ck_assert_int_eq(flatgain_problem_inputs(NULL), 0);
    ck_assert_int_eq(flatgain_problem_outputs(NULL), 0);
    ck_assert_int_eq(flatgain_problem_states(NULL), 0);
    ck_assert_str_eq(flatgain_problem_title(NULL), "");
    ck_assert_ptr_null(flatgain_problem_today(NULL));
    ck_assert_int_eq(flatgain_result_outcome(NULL), FLATGAIN_NOT_FOUND);
    ck_assert_int_eq(flatgain_result_exit_status(NULL), 70);
    ck_assert_ptr_null(flatgain_result_gain(NULL));
    ck_assert(isnan(flatgain_result_cost(NULL, FLATGAIN_COST_GAIN)));
    ck_assert(isnan(flatgain_result_gap_percent(NULL)));
    ck_assert_int_eq(flatgain_result_lqg_attained(NULL), 0);
    ck_assert(isnan(flatgain_result_residual(NULL)));
    for (int k = -1; k < 20; k++) {
        ck_assert(flatgain_status_name((flatgain_status)k)[0] != '\0');
        ck_assert(flatgain_outcome_name((flatgain_outcome)k)[0] != '\0');
        ck_assert(isnan(flatgain_result_cost(NULL, (flatgain_cost)k)));
    }
    ck_assert_str_eq(flatgain_version(), FLATGAIN_VERSION);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("hostile");
    TCase *tests = tcase_create("hostile");
    tcase_set_timeout(tests, 60);
    tcase_add_loop_test(tests, spoilt_entries, 0, 2 * SLOTS);
    tcase_add_loop_test(tests, spoilt_matrices, 0, 2);
    tcase_add_loop_test(tests, spoilt_gains, 0, 2);
    tcase_add_loop_test(tests, ill_posed_loop, 0, 2);
    tcase_add_test(tests, sizes);
    tcase_add_test(tests, options);
    tcase_add_test(tests, missing_pointers);
    tcase_add_test(tests, questions_to_null);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
