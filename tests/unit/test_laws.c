/* Laws that hold whatever the plant: thousands of random ones in both settings, with N, D and (discrete) V.
 * Each law is derived in the comment of its test or in transforms.h. */
#include <check.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "design/benchmark.h"
#include "independent.h"
#include "plants.h"
#include "problems.h"
#include "transforms.h"

static struct fg_arena arena;

static void release(void)
{
    fg_arena_release(&arena);
}

struct outcome {
    flatgain_outcome outcome;
    double J, lqg, lqr, K[16];
    bool has_gain;
};

static struct outcome outcome_of(flatgain_result *result, int gains)
{
    struct outcome o = {flatgain_result_outcome(result),
                        flatgain_result_cost(result, FLATGAIN_COST_GAIN),
                        flatgain_result_cost(result, FLATGAIN_COST_LQG),
                        flatgain_result_cost(result, FLATGAIN_COST_LQR),
                        {0},
                        false};
    if (flatgain_result_gain(result)) {
        memcpy(o.K, flatgain_result_gain(result), sizeof(double) * (size_t)gains);
        o.has_gain = true;
    }
    flatgain_result_free(result);
    return o;
}

/* At most 24 starts: the laws do not need more, and hopeless plants cost less time. */
static struct outcome tuned(const struct fg_plant *plant)
{
    flatgain_problem *problem = plant_problem(plant, NULL);
    flatgain_options options = flatgain_options_default();
    flatgain_result *result = NULL;
    options.starts = 24;
    options.threads = 1;
    ck_assert_int_eq(flatgain_tune(problem, &options, &result, NULL), FLATGAIN_OK);
    struct outcome o = outcome_of(result, plant->m * plant->p);
    flatgain_problem_free(problem);
    return o;
}

static struct outcome judged(const struct fg_plant *plant, const double *K)
{
    flatgain_problem *problem = plant_problem(plant, NULL);
    struct outcome o = outcome_of(judge(problem, K), plant->m * plant->p);
    flatgain_problem_free(problem);
    return o;
}

/* More noise-free outputs than states: one of them is redundant and the best gain is not unique. */
static bool gain_is_unique(const struct fg_plant *plant)
{
    return plant->p <= plant->n || !fg_matrix_is_zero(plant->V);
}

/* Same outcome, J, benchmarks, and the gain `expected` to 1e-5 of its largest entry (trial 242 of the
 * similarities has curvature 6e-5 and J agreeing to 1e-11: rounding decides the sixth digit of its gain). */
static void ck_same(const struct fg_plant *plant, const struct outcome *a, const struct outcome *b,
                    const double *expected, const char *law, int trial)
{
    int gains = gain_is_unique(plant) ? plant->m * plant->p : 0;
    ck_assert_msg(a->outcome == b->outcome, "%s, trial %d: %s and %s", law, trial,
                  flatgain_outcome_name(a->outcome), flatgain_outcome_name(b->outcome));
    if (a->outcome != FLATGAIN_TUNED)
        return;
    ck_assert_msg(fabs(a->J - b->J) <= 1e-8 * a->J, "%s, trial %d: J %.12g and %.12g", law, trial, a->J,
                  b->J);
    ck_assert_msg(fabs(a->lqg - b->lqg) <= 1e-7 * a->lqg, "%s, trial %d: LQG %.12g and %.12g", law, trial,
                  a->lqg, b->lqg);
    double size = 0;
    for (int e = 0; e < gains; e++)
        size = fmax(size, fabs(expected[e]));
    for (int e = 0; e < gains; e++)
        ck_assert_msg(fabs(b->K[e] - expected[e]) <= 1e-5 * size, "%s, trial %d: K[%d] %.10g, expected %.10g",
                      law, trial, e, b->K[e], expected[e]);
}

/* J_LQR <= J_LQG <= J(K) for the tuned gain and for every stabilising one; no random gain is better than the
 * tuned one. */
START_TEST(order_of_costs)
{
    int stable = 0, found = 0;
    random_seed(11);
    for (int trial = 0; trial < 1200; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        double rounding = gain_is_unique(&plant) ? 1e-9 : 1e-6; /* a redundant output allows huge gains */
        struct outcome o = tuned(&plant);
        ck_assert_msg(o.lqr <= o.lqg * (1 + 1e-12), "trial %d: LQR %.15g, LQG %.15g", trial, o.lqr, o.lqg);
        ck_assert(o.outcome == FLATGAIN_TUNED || o.outcome == FLATGAIN_NOT_FOUND ||
                  o.outcome == FLATGAIN_IMPOSSIBLE || o.outcome == FLATGAIN_UNBOUNDED);
        if (o.outcome == FLATGAIN_TUNED) {
            found++;
            ck_assert_msg(o.lqg <= o.J * (1 + rounding), "trial %d: LQG %.12g, J %.12g", trial, o.lqg, o.J);
            ck_assert_double_eq_tol(independent_cost(&plant, o.K), o.J, 10 * rounding * o.J);
        }
        for (int k = 0; k < 20; k++) {
            double K[9];
            for (int e = 0; e < plant.m * plant.p; e++)
                K[e] = k % 2 && o.has_gain ? o.K[e] * (1 + 0.5 * random_normal()) : random_normal();
            double J = independent_cost(&plant, K);
            if (!isfinite(J))
                continue;
            stable++;
            ck_assert_msg(o.lqg <= J * (1 + rounding), "trial %d: LQG %.12g, random gain %.12g", trial, o.lqg,
                          J);
            ck_assert_msg(o.outcome == FLATGAIN_TUNED || o.outcome == FLATGAIN_UNBOUNDED,
                          "trial %d: a random gain stabilises, but: %s", trial,
                          flatgain_outcome_name(o.outcome));
            if (o.outcome == FLATGAIN_TUNED)
                ck_assert_msg(o.J <= J * (1 + rounding), "trial %d: tuned %.12g, random gain %.12g", trial,
                              o.J, J);
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(found, 900);
    ck_assert_int_ge(stable, 5000);
}
END_TEST

/* All states read without noise: the best static law is the LQR law. */
START_TEST(full_state)
{
    random_seed(12);
    for (int trial = 0; trial < 250; trial++) {
        int n = 2 + trial % 3, m = 1 + trial % 2;
        struct fg_plant plant = random_plant_of(&arena, trial % 2, n, m, n);
        plant.C = fg_matrix_identity(&arena, n);
        struct fg_benchmark b;
        ck_assert_int_eq(fg_benchmark(&plant, &arena, &b, NULL), FLATGAIN_OK);
        struct outcome o = tuned(&plant);
        ck_assert_int_eq(o.outcome, FLATGAIN_TUNED);
        ck_assert_double_eq_tol(o.J, o.lqr, 1e-9 * o.J);
        ck_assert_double_eq_tol(o.lqg, o.lqr, 1e-8 * o.J);
        double size = fg_matrix_max_abs(b.L);
        for (int i = 0; i < m; i++)
            for (int j = 0; j < n; j++)
                ck_assert_double_eq_tol(o.K[i * n + j], FG_AT(b.L, i, j), 1e-6 * size);
        fg_arena_release(&arena);
    }
}
END_TEST

/* The state basis is nobody's business: K and J stay. */
START_TEST(similarity)
{
    random_seed(13);
    for (int trial = 0; trial < 250; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        struct fg_plant other = plant_similar(&arena, &plant, random_transform(&arena, plant.n));
        struct outcome a = tuned(&plant), b = tuned(&other);
        ck_same(&plant, &a, &b, a.K, "similarity", trial);
        fg_arena_release(&arena);
    }
}
END_TEST

START_TEST(permutation)
{
    random_seed(14);
    for (int trial = 0; trial < 250; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        int x[6], u[3], y[3], p = plant.p;
        double expected[9];
        random_order(plant.n, x);
        random_order(plant.m, u);
        random_order(p, y);
        struct fg_plant other = plant_permuted(&arena, &plant, x, u, y);
        struct outcome a = tuned(&plant), b = tuned(&other);
        for (int i = 0; i < plant.m; i++)
            for (int j = 0; j < p; j++)
                expected[i * p + j] = a.K[u[i] * p + y[j]];
        ck_same(&plant, &a, &b, expected, "permutation", trial);
        fg_arena_release(&arena);
    }
}
END_TEST

/* Units of states, inputs and outputs and, in the continuous setting, of time, by up to 1e6 either way: the
 * same law. Compared in the first units. */
START_TEST(units)
{
    random_seed(15);
    for (int trial = 0; trial < 250; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        struct plant_units to = {.slow = pow(10, 6 * random_uniform())};
        for (int i = 0; i < 6; i++)
            to.x[i] = pow(10, 6 * random_uniform());
        for (int i = 0; i < 3; i++) {
            to.u[i] = pow(10, 6 * random_uniform());
            to.y[i] = pow(10, 6 * random_uniform());
        }
        struct fg_plant other = plant_units(&arena, &plant, &to);
        struct outcome a = tuned(&plant), b = tuned(&other);
        for (int i = 0; i < plant.m; i++)
            for (int j = 0; j < plant.p; j++)
                b.K[i * plant.p + j] *= to.y[j] / to.u[i];
        ck_same(&plant, &a, &b, a.K, "units", trial);
        fg_arena_release(&arena);
    }
}
END_TEST

/* Weights times c, or disturbance and noise times c: the same law at c times the cost. */
START_TEST(size_of_weights)
{
    random_seed(16);
    for (int trial = 0; trial < 200; trial++) {
        struct fg_plant plant = random_plant(&arena, trial), other = plant;
        double c = pow(10, 8 * random_uniform());
        struct fg_matrix *scaled[2][3] = {{&other.Q, &other.R, &other.N}, {&other.W, &other.V, &other.V}};
        for (int k = 0; k < 3 - trial % 2; k++) {
            struct fg_matrix *a = scaled[trial % 2][k];
            *a = fg_matrix_copy(&arena, *a);
            for (int i = 0; i < a->rows * a->cols; i++)
                a->at[i] *= c;
        }
        struct outcome a = tuned(&plant), b = tuned(&other);
        b.J /= c;
        b.lqg /= c;
        ck_same(&plant, &a, &b, a.K, "weights", trial);
        fg_arena_release(&arena);
    }
}
END_TEST

/* With D the law u = -K y is u = -F (C x + v): the plant without D with F has the same loop, hence the same
 * cost, and the benchmarks do not see D. The optimum with D is never below the one without; it is above only
 * where the best F is singular (K without limit) or the search misses it: 3 in 100 at most. */
START_TEST(feedthrough)
{
    random_seed(17);
    int compared = 0, missed = 0;
    for (int trial = 0; trial < 250; trial++) {
        struct fg_plant plant = random_plant(&arena, 3 * trial); /* every third one has D */
        struct fg_plant other = plant_without_D(&arena, &plant);
        struct outcome a = tuned(&plant), b = tuned(&other);
        double F[9];
        ck_assert_msg(fabs(a.lqg - b.lqg) <= 1e-12 * a.lqg, "trial %d: LQG", trial);
        if (a.outcome == FLATGAIN_TUNED && gain_is_unique(&plant)) {
            ck_assert(gain_without_D(&plant, a.K, F));
            struct outcome same = judged(&other, F);
            ck_assert_double_eq_tol(same.J, a.J, 1e-8 * a.J);
            ck_assert_double_le(b.J, a.J * (1 + 1e-8));
            if (a.J <= b.J * (1 + 1e-6))
                ck_same(&plant, &a, &b, F, "feedthrough", trial);
            else
                missed++;
            compared++;
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 150);
    ck_assert_msg(100 * missed <= 3 * compared, "%d of %d optima with D are above those without", missed,
                  compared);
}
END_TEST

/* Regression. With one input ||I + K D|| ||(I + K D)^-1|| is 1 however close to ill posed the loop is, so
 * these plants, which no gain stabilises, came out as tuned (one with J = 0) at 1 + k D = 1e-15, where
 * rounding puts the slower poles anywhere. No gain from 1e-7 to 1e7 of either sign stabilises them. */
START_TEST(ill_posed_with_one_input)
{
    random_seed(1);
    for (int trial = 0; trial <= 1218; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        if (trial == 138 || trial == 498 || trial == 1218) {
            struct outcome o = tuned(&plant);
            ck_assert_msg(o.outcome == FLATGAIN_NOT_FOUND || o.outcome == FLATGAIN_IMPOSSIBLE,
                          "trial %d: %s, J %g", trial, flatgain_outcome_name(o.outcome), o.J);
            for (double size = -7; size < 7; size += 0.001)
                for (int sign = -1; sign <= 1; sign += 2) {
                    double k = sign * pow(10, size);
                    ck_assert(isinf(independent_cost(&plant, &k)));
                }
            double near = -(1 + 1e-13) / plant.D.at[0];
            ck_assert(isnan(judged(&plant, &near).J));
        }
        fg_arena_release(&arena);
    }
}
END_TEST

/* The transposed problem (transforms.h): K' instead of K, the same J and, since the best controller is
 * transposed as well, the same LQG cost. Discrete with N = 0. */
START_TEST(dual_discrete)
{
    random_seed(18);
    for (int trial = 0; trial < 250; trial++) {
        struct fg_plant plant =
            random_plant_of(&arena, true, 2 + trial % 4, 1 + trial % 3, 1 + trial / 3 % 3);
        int m = plant.m, p = plant.p;
        plant.N = fg_matrix_new(&arena, plant.n, m);
        for (int i = 0; i < p * p; i++)
            plant.V.at[i] = i % (p + 1) == 0 ? 0.3 + 0.2 * random_uniform() : 0;
        for (int i = 0; i < p * m; i++)
            plant.D.at[i] = trial % 2 ? 0.2 * random_normal() : 0;
        struct fg_plant other = plant_dual(&arena, &plant);
        struct outcome a = tuned(&plant), b = tuned(&other);
        double expected[9];
        for (int i = 0; i < m; i++)
            for (int j = 0; j < p; j++)
                expected[j * m + i] = a.K[i * p + j];
        ck_same(&plant, &a, &b, expected, "dual", trial);
        fg_arena_release(&arena);
    }
}
END_TEST

/* Continuous with N = 0, R = 0, V = 0: the cost of every gain and the LQG limit, singular on both sides. */
START_TEST(dual_continuous)
{
    random_seed(19);
    int compared = 0;
    for (int trial = 0; trial < 200; trial++) {
        struct fg_plant plant =
            random_plant_of(&arena, false, 2 + trial % 4, 1 + trial % 3, 1 + trial / 3 % 3);
        int m = plant.m, p = plant.p;
        plant.N = fg_matrix_new(&arena, plant.n, m);
        plant.R = fg_matrix_new(&arena, m, m);
        struct fg_plant other = plant_dual(&arena, &plant);
        double K[9], transposed[9];
        for (int e = 0; e < m * p; e++)
            K[e] = 0.3 * random_normal();
        for (int i = 0; i < m; i++)
            for (int j = 0; j < p; j++)
                transposed[j * m + i] = K[i * p + j];
        struct outcome a = judged(&plant, K), b = judged(&other, transposed);
        ck_assert_int_eq(isfinite(a.J), isfinite(b.J));
        ck_assert_msg(fabs(a.lqg - b.lqg) <= 1e-7 * fmax(a.lqg, 1e-3), "trial %d: LQG %.12g, dual %.12g",
                      trial, a.lqg, b.lqg);
        if (isfinite(a.J)) {
            ck_assert_double_eq_tol(a.J, b.J, 1e-9 * a.J);
            ck_assert_double_le(a.lqg, a.J * (1 + 1e-9));
            compared++;
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 50);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("laws");
    TCase *tests = tcase_create("laws");
    tcase_set_timeout(tests, 300);
    tcase_add_checked_fixture(tests, NULL, release);
    tcase_add_test(tests, order_of_costs);
    tcase_add_test(tests, full_state);
    tcase_add_test(tests, similarity);
    tcase_add_test(tests, permutation);
    tcase_add_test(tests, units);
    tcase_add_test(tests, size_of_weights);
    tcase_add_test(tests, feedthrough);
    tcase_add_test(tests, ill_posed_with_one_input);
    tcase_add_test(tests, dual_discrete);
    tcase_add_test(tests, dual_continuous);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed ? EXIT_FAILURE : EXIT_SUCCESS;
}
