/* Plants at the edges of the definition: everything fixed, nothing to pay, nothing to measure, Jordan blocks,
 * more inputs and outputs than states, duplicated outputs, wide spreads. Each result is checked for sanity
 * (sane.h) and, where it is known, against its closed form beside the test. */
#include <check.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "flatgain.h"
#include "sane.h"

static flatgain_matrices blank(int discrete, int n, int m, int p)
{
    return (flatgain_matrices){
        .discrete = discrete, .states = n, .inputs = m, .outputs = p, .accept_percent = NAN};
}

static flatgain_problem *make(const flatgain_matrices *matrices)
{
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    flatgain_status status = flatgain_problem_from_matrices(matrices, &problem, &error);
    ck_assert_msg(status == FLATGAIN_OK, "%s", error.text);
    return problem;
}

static flatgain_result *tuned(const flatgain_problem *problem)
{
    flatgain_options options = flatgain_options_default();
    flatgain_result *result = NULL;
    flatgain_error error = {0};
    options.threads = 1;
    flatgain_status status = flatgain_tune(problem, &options, &result, &error);
    ck_assert_msg(status == FLATGAIN_OK, "%s", error.text);
    check_result(problem, result, "tuned");
    return result;
}

/* Everything tuned, judged at zero and inspected; then tuned alone, with this outcome. */
static flatgain_result *expect(const flatgain_matrices *matrices, flatgain_outcome outcome, const char *what)
{
    flatgain_problem *problem = make(matrices);
    ck_assert_int_eq(work_with(problem, NULL, what), 3);
    flatgain_result *result = tuned(problem);
    flatgain_outcome found = flatgain_result_outcome(result);
    ck_assert_msg(found == outcome, "%s: outcome %s", what, flatgain_outcome_name(found));
    flatgain_problem_free(problem);
    return result;
}

static void check_cost(flatgain_result *result, flatgain_cost which, double J)
{
    ck_assert_double_eq_tol(flatgain_result_cost(result, which), J, 1e-8 * fmax(1, fabs(J)));
}

static const double zero[64], one[1] = {1}, two[1] = {2}, I2[] = {1, 0, 0, 1},
                              I3[] = {1, 0, 0, 0, 1, 0, 0, 0, 1};

/* dx/dt = a x + u + w, u = -K x: X = W / (2 (K - a)), J = (Q + R K^2) X. */
START_TEST(everything_fixed)
{
    static const double stable[] = {3}, unstable[] = {0.5};
    flatgain_matrices matrices = blank(0, 1, 1, 1);
    matrices.A = matrices.B = matrices.C = matrices.Q = matrices.R = matrices.W = one;
    matrices.fixed = stable;
    flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "fixed at a stable gain");
    check_cost(result, FLATGAIN_COST_GAIN, (1 + 3.0 * 3) / (2 * (3 - 1)));
    ck_assert_double_eq(flatgain_result_gain(result)[0], 3);
    flatgain_result_free(result);
    matrices.fixed = unstable;
    result = expect(&matrices, FLATGAIN_IMPOSSIBLE, "fixed at an unstable gain");
    flatgain_result_free(result);
    /* bounds that meet fix the gain as well */
    matrices.fixed = NULL;
    matrices.lower = matrices.upper = two;
    result = expect(&matrices, FLATGAIN_TUNED, "bounds that meet");
    check_cost(result, FLATGAIN_COST_GAIN, (1 + 2.0 * 2) / (2 * (2 - 1)));
    flatgain_result_free(result);
}
END_TEST

START_TEST(contradictory_bounds)
{
    static const double low[] = {1, 5, 0, 0}, high[] = {2, 4, 1, 1}, fixed[] = {NAN, NAN, 3, NAN};
    flatgain_matrices matrices = blank(1, 2, 2, 2);
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    matrices.A = matrices.B = matrices.C = matrices.Q = matrices.R = matrices.W = I2;
    matrices.lower = low;
    matrices.upper = high;
    ck_assert_int_eq(flatgain_problem_from_matrices(&matrices, &problem, &error), FLATGAIN_BAD_PROBLEM);
    ck_assert_msg(strstr(error.text, "row 1, column 2") != NULL, "%s", error.text);
    matrices.lower = zero;
    matrices.fixed = fixed; /* 3 above its bound 1 */
    ck_assert_int_eq(flatgain_problem_from_matrices(&matrices, &problem, &error), FLATGAIN_BAD_PROBLEM);
    ck_assert_msg(strstr(error.text, "row 2, column 1") != NULL, "%s", error.text);
    ck_assert_ptr_null(problem);
}
END_TEST

/* Bounds that leave out every stabilising gain (K > 1). */
START_TEST(bounds_without_stability)
{
    static const double high[] = {0.9};
    flatgain_matrices matrices = blank(0, 1, 1, 1);
    matrices.A = matrices.B = matrices.C = matrices.Q = matrices.R = matrices.W = one;
    matrices.upper = high;
    flatgain_problem *problem = make(&matrices);
    work_with(problem, NULL, "bounded");
    flatgain_result *result = tuned(problem);
    flatgain_outcome outcome = flatgain_result_outcome(result);
    ck_assert(outcome == FLATGAIN_NOT_FOUND || outcome == FLATGAIN_IMPOSSIBLE);
    flatgain_result_free(result);
    flatgain_problem_free(problem);
}
END_TEST

/* No cost at all, no disturbance at all: J = 0 for every stabilising gain. */
START_TEST(nothing_to_pay)
{
    static const double A[] = {-1, 0.2, 0, -2};
    for (int which = 0; which < 4; which++) {
        flatgain_matrices matrices = blank(which % 2, 2, 1, 1);
        static const double B[] = {1, 1}, C[] = {1, 0}, half[] = {0.5, 0.1, 0, 0.3};
        matrices.A = which % 2 ? half : A;
        matrices.B = B;
        matrices.C = C;
        matrices.Q = which < 2 ? zero : I2;
        matrices.R = which < 2 ? zero : one;
        matrices.W = which < 2 ? I2 : zero;
        flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "nothing to pay");
        check_cost(result, FLATGAIN_COST_GAIN, 0);
        check_cost(result, FLATGAIN_COST_NONE, 0);
        ck_assert(isnan(flatgain_result_gap_percent(result)));
        flatgain_result_free(result);
    }
}
END_TEST

/* Nothing measured (C = 0) or moved (B = 0): J is that of the open loop. dx/dt = -x + w: X = 1/2. */
START_TEST(nothing_to_do)
{
    static const double minus[] = {-1};
    for (int which = 0; which < 2; which++) {
        flatgain_matrices matrices = blank(0, 1, 1, 1);
        matrices.A = minus;
        matrices.B = which ? zero : one;
        matrices.C = which ? one : zero;
        matrices.Q = matrices.R = matrices.W = one;
        flatgain_problem *problem = make(&matrices);
        work_with(problem, NULL, "nothing to do");
        flatgain_result *result = tuned(problem);
        check_cost(result, FLATGAIN_COST_GAIN, 0.5);
        check_cost(result, FLATGAIN_COST_NONE, 0.5);
        flatgain_result_free(result);
        flatgain_problem_free(problem);
        matrices.A = one;
        flatgain_result_free(expect(&matrices, FLATGAIN_IMPOSSIBLE, "unstable and out of reach"));
    }
}
END_TEST

/* A = 0 with everything measured: S solves S S = I for Q = R = B = I, so K = I and J = tr(S W) = n. */
START_TEST(zero_dynamics)
{
    flatgain_matrices matrices = blank(0, 3, 3, 3);
    matrices.A = zero;
    matrices.B = matrices.C = matrices.Q = matrices.R = matrices.W = I3;
    flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "A = 0");
    check_cost(result, FLATGAIN_COST_GAIN, 3);
    check_cost(result, FLATGAIN_COST_LQR, 3);
    flatgain_result_free(result);
    /* discrete: nothing is left to control, J = tr(Q W) */
    matrices.discrete = 1;
    result = expect(&matrices, FLATGAIN_TUNED, "discrete A = 0");
    check_cost(result, FLATGAIN_COST_GAIN, 3);
    flatgain_result_free(result);
}
END_TEST

/* Jordan blocks, at -1 and at 0 (three integrators, all states measured: static is LQR). */
START_TEST(jordan_blocks)
{
    static const double stable[] = {-1, 1, 0, 0, -1, 1, 0, 0, -1}, nilpotent[] = {0, 1, 0, 0, 0, 1, 0, 0, 0};
    static const double B[] = {0, 0, 1}, first[] = {1, 0, 0};
    flatgain_matrices matrices = blank(0, 3, 1, 1);
    matrices.A = stable;
    matrices.B = B;
    matrices.C = first;
    matrices.Q = matrices.W = I3;
    matrices.R = one;
    flatgain_result_free(expect(&matrices, FLATGAIN_TUNED, "Jordan block at -1"));
    matrices.A = nilpotent;
    matrices.outputs = 3;
    matrices.C = I3;
    flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "three integrators");
    double J = flatgain_result_cost(result, FLATGAIN_COST_LQR);
    check_cost(result, FLATGAIN_COST_GAIN, J);
    flatgain_result_free(result);
    matrices.discrete = 1; /* a delay chain of three: dead-beat without control */
    result = expect(&matrices, FLATGAIN_TUNED, "discrete delay chain");
    check_cost(result, FLATGAIN_COST_GAIN, flatgain_result_cost(result, FLATGAIN_COST_LQR));
    flatgain_result_free(result);
}
END_TEST

/* An unstable mode that no input moves is a proof; a stable one is none. */
START_TEST(uncontrollable)
{
    static const double unstable[] = {-1, 0, 0, 0.5}, stable[] = {-1, 0, 0, -0.5}, B[] = {1, 0}, C[] = {1, 1};
    flatgain_matrices matrices = blank(0, 2, 1, 1);
    matrices.A = unstable;
    matrices.B = B;
    matrices.C = C;
    matrices.Q = matrices.W = I2;
    matrices.R = one;
    flatgain_result_free(expect(&matrices, FLATGAIN_IMPOSSIBLE, "uncontrollable and unstable"));
    matrices.A = stable;
    flatgain_result_free(expect(&matrices, FLATGAIN_TUNED, "uncontrollable and stable"));
}
END_TEST

/* One state, three equal inputs, two equal outputs: u_i = -k x with k = sum of the row, all equal. With Q = W
 * = 1, R = I, B = [1 1 1]: S = (a + sqrt(a^2 + 3)) / 3, J = S for a = 1: S = 1. */
START_TEST(more_signals_than_states)
{
    static const double B[] = {1, 1, 1}, C[] = {1, 1};
    flatgain_matrices matrices = blank(0, 1, 3, 2);
    matrices.A = one;
    matrices.B = B;
    matrices.C = C;
    matrices.Q = matrices.W = one;
    matrices.R = I3;
    flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "three inputs, two outputs, one state");
    check_cost(result, FLATGAIN_COST_GAIN, 1);
    check_cost(result, FLATGAIN_COST_LQR, 1);
    check_cost(result, FLATGAIN_COST_LQG, 1);
    const double *K = flatgain_result_gain(result);
    for (int i = 0; i < 3; i++)
        ck_assert_double_eq_tol(K[2 * i] + K[2 * i + 1], 1, 1e-5);
    flatgain_result_free(result);
}
END_TEST

/* The same output twice, the second time in other units: the cost of having it once. */
START_TEST(duplicated_outputs)
{
    static const double A[] = {-0.2, 1, -0.5, 0.1}, B[] = {0, 1}, once[] = {1, 0.5},
                        twice[] = {1, 0.5, 1e4, 5e3};
    double J[2], lqg[2];
    for (int copies = 1; copies <= 2; copies++) {
        flatgain_matrices matrices = blank(0, 2, 1, copies);
        matrices.A = A;
        matrices.B = B;
        matrices.C = copies == 1 ? once : twice;
        matrices.Q = matrices.W = I2;
        matrices.R = one;
        flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "duplicated outputs");
        J[copies - 1] = flatgain_result_cost(result, FLATGAIN_COST_GAIN);
        lqg[copies - 1] = flatgain_result_cost(result, FLATGAIN_COST_LQG);
        flatgain_result_free(result);
    }
    ck_assert_double_eq_tol(J[1], J[0], 1e-7 * J[0]);
    ck_assert_double_eq_tol(lqg[1], lqg[0], 1e-7 * lqg[0]);
}
END_TEST

/* Time constants from 1e-4 to 1e4 and states in units 1e8 apart; all measured, so static is LQR. */
START_TEST(wide_spread)
{
    static const double A[] = {-1e4, 0, 0, 0, -1, 0, 0, 0, 1e-4},
                        coupled[] = {-1, 1e8, 0, 1e-8, -2, 1e4, 0, 1e-4, 0.5};
    static const double B[] = {1e4, 1, 1};
    for (int which = 0; which < 2; which++) {
        flatgain_matrices matrices = blank(0, 3, 1, 3);
        matrices.A = which ? coupled : A;
        matrices.B = B;
        matrices.C = matrices.Q = matrices.W = I3;
        matrices.R = one;
        flatgain_result *result =
            expect(&matrices, FLATGAIN_TUNED, which ? "coupled, 1e8" : "time constants");
        double lqr = flatgain_result_cost(result, FLATGAIN_COST_LQR);
        ck_assert_double_eq_tol(flatgain_result_cost(result, FLATGAIN_COST_GAIN), lqr, 1e-5 * lqr);
        flatgain_result_free(result);
    }
}
END_TEST

/* A start from X0 = 0, with noise-free everything; and the start reading of a scalar: sum of (Q + R K^2)
 * a^(2k) X0 has its minimum at the LQR value S X0. a = 1, B = Q = R = 1: S = (1 + sqrt 5) / 2. */
START_TEST(starts)
{
    flatgain_matrices matrices = blank(1, 1, 1, 1);
    matrices.start = 1;
    matrices.A = matrices.B = matrices.C = matrices.Q = matrices.R = matrices.W = one;
    flatgain_result *result = expect(&matrices, FLATGAIN_TUNED, "a start");
    check_cost(result, FLATGAIN_COST_GAIN, (1 + sqrt(5)) / 2);
    flatgain_result_free(result);
    matrices.W = zero;
    flatgain_problem *problem = make(&matrices);
    work_with(problem, NULL, "X0 = 0");
    flatgain_problem_free(problem);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("degenerate");
    TCase *tests = tcase_create("degenerate");
    tcase_set_timeout(tests, 60);
    tcase_add_test(tests, everything_fixed);
    tcase_add_test(tests, contradictory_bounds);
    tcase_add_test(tests, bounds_without_stability);
    tcase_add_test(tests, nothing_to_pay);
    tcase_add_test(tests, nothing_to_do);
    tcase_add_test(tests, zero_dynamics);
    tcase_add_test(tests, jordan_blocks);
    tcase_add_test(tests, uncontrollable);
    tcase_add_test(tests, more_signals_than_states);
    tcase_add_test(tests, duplicated_outputs);
    tcase_add_test(tests, wide_spread);
    tcase_add_test(tests, starts);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
