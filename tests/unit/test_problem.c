/* Problems from matrices: semidefiniteness whatever the units, projection, patterns, hash, misuse.
 * Expected values are derived beside each check. Run from the root of the repository. */
#include <check.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "cases.h"
#include "problem/problem.h"

/* Two states, one input, two outputs, all weights and covariances regular. */
struct small {
    double A[4], B[2], C[4], D[2], Q[4], R[1], N[2], W[4], V[4], lag[2], fixed[2], lower[2], upper[2],
        today[2];
    flatgain_matrices matrices;
};

static void small_new(struct small *s)
{
    *s = (struct small){.A = {0.5, 0.1, 0, 0.7},
                        .B = {1, 0.5},
                        .C = {1, 0, 0, 1},
                        .Q = {2, 0.5, 0.5, 1},
                        .R = {1},
                        .N = {0.1, 0.2},
                        .W = {1, 0.2, 0.2, 1},
                        .V = {0.1, 0, 0, 0.2},
                        .fixed = {NAN, NAN},
                        .lower = {-INFINITY, -INFINITY},
                        .upper = {INFINITY, INFINITY}};
    s->matrices = (flatgain_matrices){.discrete = 1,
                                      .states = 2,
                                      .inputs = 1,
                                      .outputs = 2,
                                      .A = s->A,
                                      .B = s->B,
                                      .C = s->C,
                                      .D = s->D,
                                      .Q = s->Q,
                                      .R = s->R,
                                      .N = s->N,
                                      .W = s->W,
                                      .V = s->V,
                                      .lag = s->lag,
                                      .fixed = s->fixed,
                                      .lower = s->lower,
                                      .upper = s->upper,
                                      .today = s->today,
                                      .accept_percent = 5};
}

static flatgain_problem *make(const struct small *s, flatgain_error *error)
{
    flatgain_problem *problem = NULL;
    flatgain_problem_from_matrices(&s->matrices, &problem, error);
    return problem;
}

static uint64_t hash_of(const struct small *s)
{
    flatgain_error error = {0};
    flatgain_problem *problem = make(s, &error);
    ck_assert_msg(problem != NULL, "%s", error.text);
    uint64_t hash = problem->hash;
    flatgain_problem_free(problem);
    return hash;
}

static void must_fail(const struct small *s, flatgain_status status, const char *text)
{
    flatgain_error error = {0};
    ck_assert_ptr_null(make(s, &error));
    ck_assert_int_eq(error.status, status);
    ck_assert_msg(strncmp(error.text, text, strlen(text)) == 0, "found %s", error.text);
}

START_TEST(hash_sees_every_number_but_not_the_sign_of_zero)
{
    struct small s;
    small_new(&s);
    uint64_t before = hash_of(&s);
    double *numbers[] = {s.A, s.A + 1, s.B, s.C + 3, s.D + 1, s.Q, s.R, s.N + 1, s.W + 3, s.V, s.today + 1};
    for (size_t i = 0; i < sizeof numbers / sizeof *numbers; i++) {
        double kept = *numbers[i];
        *numbers[i] = kept + 1e-9;
        ck_assert_msg(hash_of(&s) != before, "number %zu", i);
        *numbers[i] = kept;
    }
    double *others[] = {s.fixed, s.lower, s.upper + 1, &s.matrices.accept_percent};
    for (size_t i = 0; i < sizeof others / sizeof *others; i++) {
        double kept = *others[i];
        *others[i] = 0.5;
        ck_assert_msg(hash_of(&s) != before, "other %zu", i);
        *others[i] = kept;
    }
    s.A[2] = -0.0;
    s.today[0] = -0.0;
    ck_assert(hash_of(&s) == before);
    s.matrices.discrete = 0;
    s.matrices.V = NULL;
    ck_assert(hash_of(&s) != before);
}
END_TEST

/* [1 c; c 1] has eigenvalues 1 - c, 1 + c, so c = 1 + e is indefinite by e / 2 relative. In other units
 * it is [s^2 cs; cs 1]: the verdict must be the same for every s. */
START_TEST(verdict_on_weights_does_not_depend_on_units)
{
    for (int power = -6; power <= 6; power += 3) {
        double unit = pow(10, power);
        const struct {
            double excess;
            int warnings;
        } all[] = {{-1e-3, 0}, {0, 0}, {1e-14, 0}, {1e-6, 1}, {1e-4, 1}, {1e-3, -1}, {1, -1}};
        for (size_t i = 0; i < sizeof all / sizeof *all; i++) {
            struct small s;
            small_new(&s);
            double c = (1 + all[i].excess) * unit;
            memcpy(s.Q, (double[]){unit * unit, c, c, 1}, sizeof s.Q);
            s.matrices.N = NULL;
            if (all[i].warnings < 0) {
                must_fail(&s, FLATGAIN_BAD_PROBLEM, "Q has the negative eigenvalue -");
                continue;
            }
            flatgain_error error = {0};
            flatgain_problem *problem = make(&s, &error);
            ck_assert_msg(problem != NULL, "%s", error.text);
            ck_assert_int_eq(problem->warnings != NULL, all[i].warnings);
            if (problem->warnings) {
                ck_assert_str_eq(problem->warnings->code, "weight-projected");
                /* nearest: eigenvalue 1 - c to 0 leaves (1 + c) / 2 [1 1; 1 1] in scaled units */
                double expected = (1 + c / unit) / 2;
                ck_assert_double_eq_tol(problem->Q.at[0] / unit / unit, expected, 1e-12);
                ck_assert_double_eq_tol(problem->Q.at[1] / unit, expected, 1e-12);
                ck_assert_double_eq_tol(problem->Q.at[3], expected, 1e-12);
            }
            flatgain_problem_free(problem);
        }
    }
}
END_TEST

START_TEST(wrong_matrices_are_named)
{
    struct small s;
    small_new(&s);
    s.Q[1] = 0.6;
    must_fail(&s, FLATGAIN_BAD_PROBLEM,
              "Q is not symmetric: row 1, column 2 is 0.6 but row 2, column 1 is 0.5");
    small_new(&s);
    s.N[0] = 1.5; /* 1.5^2 > Q11 R = 2 */
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "[Q N; N' R]");
    small_new(&s);
    s.V[0] = -1;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "V has the negative eigenvalue -1 ");
    small_new(&s);
    s.B[1] = NAN;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "B has an entry that is not a finite number");
    small_new(&s);
    s.today[0] = INFINITY;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "today has an entry that is not a finite number");
    small_new(&s);
    s.lag[1] = 1;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "output y2 has a lag in the discrete setting");
    small_new(&s);
    s.matrices.discrete = 0;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "output y1 has noise but no lag");
    s.lag[0] = s.lag[1] = 0.5;
    hash_of(&s); /* with lags it is right */
    s.lag[1] = NAN;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "the lag of output y2 is nan");
    small_new(&s);
    s.matrices.start = 1;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "noise is given together with start");
    small_new(&s);
    s.lower[1] = NAN;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "lower bound of row 1, column 2 is nan");
    small_new(&s);
    s.fixed[0] = 2;
    s.upper[0] = 1;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "row 1, column 1 is fixed at 2, above its upper bound 1");
    small_new(&s);
    s.fixed[0] = INFINITY;
    must_fail(&s, FLATGAIN_BAD_PROBLEM, "fixed gain in row 1, column 1 is not finite");
}
END_TEST

START_TEST(misuse_is_told)
{
    struct small s;
    small_new(&s);
    s.matrices.states = 0;
    must_fail(&s, FLATGAIN_BAD_ARGUMENT, "0 states");
    small_new(&s);
    s.matrices.inputs = 1000000000;
    must_fail(&s, FLATGAIN_BAD_ARGUMENT, "1000000000 states, inputs or outputs");
    small_new(&s);
    s.matrices.W = NULL;
    must_fail(&s, FLATGAIN_BAD_ARGUMENT, "W is NULL");
    small_new(&s);
    s.matrices.accept_percent = -1;
    must_fail(&s, FLATGAIN_BAD_ARGUMENT, "accept_percent");
}
END_TEST

/* A bound met from both sides fixes the entry; no free gain at all is allowed. */
START_TEST(pinned_and_fixed_gains_leave_the_search)
{
    struct small s;
    small_new(&s);
    s.lower[0] = s.upper[0] = 3;
    flatgain_error error = {0};
    flatgain_problem *problem = make(&s, &error);
    ck_assert_ptr_nonnull(problem);
    ck_assert_int_eq(problem->pattern.count, 1);
    ck_assert_int_eq(problem->pattern.index[0], -1);
    ck_assert_int_eq(problem->pattern.index[1], 0);
    ck_assert(problem->pattern.fixed[0] == 3);
    ck_assert_str_eq(problem->warnings->code, "today-outside"); /* today is 0 there */
    flatgain_problem_free(problem);
    s.fixed[1] = 0;
    s.today[0] = 3;
    problem = make(&s, &error);
    ck_assert_int_eq(problem->pattern.count, 0);
    ck_assert_ptr_null(problem->warnings);
    double K[2];
    fg_pattern_gain(&problem->pattern, NULL, K);
    ck_assert(K[0] == 3 && K[1] == 0);
    flatgain_problem_free(problem);
}
END_TEST

/* All published and open cases with weights are taken; only the normal-acceleration system, whose Q is
 * printed with rounding, is projected (-1.5e-5 relative, see its notes). */
START_TEST(every_published_case_is_a_problem)
{
    char **names = case_names();
    int count = 0;
    for (char **name = names; *name; name++) {
        struct case_data data;
        if (!case_load(*name, &data))
            continue;
        if (data.Q && data.R && data.W) {
            flatgain_problem *problem = case_problem(&data);
            ck_assert_msg(problem != NULL, "%s", *name);
            bool rounded = strcmp(*name, "f16_normal_acceleration_cas") == 0;
            ck_assert_msg((problem->warnings != NULL) == rounded, "%s", *name);
            flatgain_problem_free(problem);
            count++;
        }
        case_free(&data);
    }
    case_names_free(names);
    ck_assert_int_ge(count, 80);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("problem");
    TCase *tests = tcase_create("problem");
    tcase_add_test(tests, hash_sees_every_number_but_not_the_sign_of_zero);
    tcase_add_test(tests, verdict_on_weights_does_not_depend_on_units);
    tcase_add_test(tests, wrong_matrices_are_named);
    tcase_add_test(tests, misuse_is_told);
    tcase_add_test(tests, pinned_and_fixed_gains_leave_the_search);
    tcase_add_test(tests, every_published_case_is_a_problem);
    tcase_set_timeout(tests, 30);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
