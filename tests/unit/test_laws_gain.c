/* Laws about the pattern of the gain, what is reported beside it, and repeatability. */
#include <check.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "design/local.h"
#include "design/scaling.h"
#include "independent.h"
#include "plants.h"
#include "problems.h"

static struct fg_arena arena;

static void release(void)
{
    fg_arena_release(&arena);
}

static double cost_of(const flatgain_result *result)
{
    return flatgain_result_cost(result, FLATGAIN_COST_GAIN);
}

/* dJ/dK[entry]: of steps from 1e-2 to 1e-7 of `size`, the estimate that agrees best with the one before. */
static double slope(const struct fg_plant *plant, const double *K, int entry, double size)
{
    double last = NAN, best = NAN, agreement = INFINITY;
    for (double step = 1e-2; step > 1e-8; step /= 10) {
        double now = independent_slope(plant, K, entry, step * size);
        if (fabs(now - last) < agreement) {
            agreement = fabs(now - last);
            best = now;
        }
        last = now;
    }
    return best;
}

/* Slope of J per natural unit of gain, relative to J: dJ/dK_ij (u_i / y_j) max(1, |K_ij| y_j / u_i) / J with
 * u_i, y_j the natural sizes of input i and output j, by differences of the independent cost. */
static double natural_slope(const struct fg_plant *plant, const struct fg_scaled *scaled, const double *K,
                            int entry)
{
    double unit = scaled->input[entry / plant->p] / scaled->output[entry % plant->p];
    double size = fmax(unit, fabs(K[entry]));
    return slope(plant, K, entry, size) * size / independent_cost(plant, K);
}

static struct fg_scaled scales_of(const struct fg_plant *plant)
{
    struct fg_pattern pattern = free_pattern(&arena, plant->m, plant->p);
    struct fg_benchmark benchmark;
    struct fg_scaled scaled;
    ck_assert_int_eq(fg_benchmark(plant, &arena, &benchmark, NULL), FLATGAIN_OK);
    ck_assert_int_eq(fg_scale(plant, &pattern, &benchmark, &arena, &scaled, NULL), FLATGAIN_OK);
    return scaled;
}

/* A random plant with m, p >= 2 that has a minimum; false when this trial has none. */
static bool plant_with_minimum(int trial, struct fg_plant *plant, flatgain_result **result)
{
    *plant = random_plant_of(&arena, trial % 2, 3 + trial % 4, 2, 2 + trial / 4 % 2);
    if (trial % 3 == 0)
        for (int i = 0; i < plant->p * plant->m; i++)
            plant->D.at[i] = 0.1 * random_normal();
    if (trial % 2 && trial % 5 < 3)
        for (int i = 0; i < plant->p; i++)
            FG_AT(plant->V, i, i) = 0.5;
    flatgain_problem *problem = plant_problem(plant, NULL);
    *result = tune(problem);
    flatgain_problem_free(problem);
    if (flatgain_result_outcome(*result) == FLATGAIN_TUNED && flatgain_result_residual(*result) < 1e-7)
        return true;
    flatgain_result_free(*result);
    fg_arena_release(&arena);
    return false;
}

/* Tied gains: the pattern is kept exactly, J is the cost of the same gain untied, the optimum is not below
 * the untied one, and the slope along every free parameter is zero (differences of independent cost). */
START_TEST(tied_gains)
{
    static const struct {
        const char *text; /* rows of the pattern for p = 2; a third column is "free" */
        int parameter[4]; /* of the entries: 0 fixed, +-1 the tied word a, 2.. free ones */
        double fixed[4];
    } pattern[] = {
        {"a free\n-a free", {1, 2, -1, 3}, {0, 0, 0, 0}},
        {"a free\nfree a", {1, 2, 3, 1}, {0, 0, 0, 0}},
        {"a 0\n0.05 a", {1, 0, 0, 1}, {0, 0, 0.05, 0}},
        {"a -a\na 0", {1, -1, 1, 0}, {0, 0, 0, 0}},
    };
    int compared = 0;
    random_seed(31);
    for (int trial = 0; trial < 240; trial++) {
        struct fg_plant plant;
        flatgain_result *untied;
        int which = trial % 4;
        if (!plant_with_minimum(trial, &plant, &untied))
            continue;
        int p = plant.p;
        char text[100];
        if (p == 2)
            snprintf(text, sizeof text, "%s", pattern[which].text);
        else {
            const char *second = strchr(pattern[which].text, '\n');
            snprintf(text, sizeof text, "%.*s free%s free", (int)(second - pattern[which].text),
                     pattern[which].text, second);
        }
        flatgain_problem *problem = plant_problem_tied(&plant, text);
        flatgain_result *tied = tune(problem);
        const double *K = flatgain_result_gain(tied);
        if (flatgain_result_outcome(tied) == FLATGAIN_TUNED && flatgain_result_residual(tied) < 1e-7) {
            struct fg_scaled scaled = scales_of(&plant);
            double a = NAN, along = 0, size = 0;
            for (int e = 0; e < 4; e++) {
                int at = e / 2 * p + e % 2, parameter = pattern[which].parameter[e];
                if (parameter == 0)
                    ck_assert_double_eq(K[at], pattern[which].fixed[e]);
                else if (abs(parameter) == 1) {
                    double unit = scaled.input[at / p] / scaled.output[at % p];
                    if (isnan(a))
                        a = K[at] * parameter;
                    ck_assert_msg(K[at] * parameter == a, "trial %d: %.17g tied to %.17g", trial, K[at], a);
                    along += parameter * slope(&plant, K, at, fmax(unit, fabs(K[at])));
                    size = fmax(size, fmax(unit, fabs(K[at])));
                } else {
                    ck_assert_double_lt(fabs(natural_slope(&plant, &scaled, K, at)), 1e-5);
                }
            }
            if (p == 3) {
                ck_assert_double_lt(fabs(natural_slope(&plant, &scaled, K, 2)), 1e-5);
                ck_assert_double_lt(fabs(natural_slope(&plant, &scaled, K, 5)), 1e-5);
            }
            ck_assert_msg(fabs(along) * size < 1e-5 * cost_of(tied), "trial %d: slope along a %g", trial,
                          along);
            ck_assert_double_eq_tol(independent_cost(&plant, K), cost_of(tied), 1e-9 * cost_of(tied));
            ck_assert_double_ge(cost_of(tied), cost_of(untied) * (1 - 1e-9));
            compared++;
        } else if (K && isfinite(cost_of(tied))) {
            ck_assert_double_ge(cost_of(tied), cost_of(untied) * (1 - 1e-9));
        }
        flatgain_result_free(tied);
        flatgain_result_free(untied);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 100);
}
END_TEST

/* Bounds that cut the free optimum off: gains inside, J not below the free optimum, and the conditions of
 * Karush, Kuhn and Tucker by differences: slope zero inside, not pointing inward at a bound. */
START_TEST(bounded_gains)
{
    int compared = 0, at_bound = 0;
    random_seed(32);
    for (int trial = 0; trial < 240; trial++) {
        struct fg_plant plant;
        flatgain_result *free_result;
        if (!plant_with_minimum(trial, &plant, &free_result))
            continue;
        int count = plant.m * plant.p;
        double lower[6], upper[6], best = cost_of(free_result);
        struct fg_scaled scaled = scales_of(&plant);
        for (int e = 0; e < count; e++) {
            double unit = scaled.input[e / plant.p] / scaled.output[e % plant.p];
            double centre = flatgain_result_gain(free_result)[e] + unit * 0.3 * random_normal();
            lower[e] = centre - unit * 0.3;
            upper[e] = e % 3 == 2 ? INFINITY : centre + unit * 0.3;
        }
        struct problem_extras extras = {.lower = lower, .upper = upper};
        flatgain_problem *problem = plant_problem(&plant, &extras);
        flatgain_result *result = tune(problem);
        const double *K = flatgain_result_gain(result);
        if (flatgain_result_outcome(result) == FLATGAIN_TUNED && flatgain_result_residual(result) < 1e-7) {
            cJSON *tree = result_tree(result);
            int held = 0;
            for (int e = 0; e < count; e++) {
                ck_assert_msg(K[e] >= lower[e] && K[e] <= upper[e], "trial %d: %g not in %g .. %g", trial,
                              K[e], lower[e], upper[e]);
                double inward = natural_slope(&plant, &scaled, K, e);
                if (K[e] == lower[e])
                    ck_assert_msg(inward >= -1e-5, "trial %d: slope %g at the lower bound", trial, inward);
                else if (K[e] == upper[e])
                    ck_assert_msg(inward <= 1e-5, "trial %d: slope %g at the upper bound", trial, inward);
                else
                    ck_assert_msg(fabs(inward) <= 1e-5, "trial %d: slope %g inside", trial, inward);
                held += K[e] == lower[e] || K[e] == upper[e];
            }
            ck_assert_double_eq_tol(tree_number(tree, "search/at_bound"), held, 0.1);
            ck_assert_double_eq_tol(independent_cost(&plant, K), cost_of(result), 1e-9 * cost_of(result));
            ck_assert_double_ge(cost_of(result), best * (1 - 1e-9));
            at_bound += held > 0;
            compared++;
            cJSON_Delete(tree);
        }
        flatgain_result_free(result);
        flatgain_result_free(free_result);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 100);
    ck_assert_int_ge(at_bound, 60);
}
END_TEST

/* The residual reported is max |slope per natural unit| max(1, |gain in natural units|) / J: recomputed by
 * differences, and small at a minimum. */
START_TEST(residual_is_the_slope)
{
    int compared = 0;
    random_seed(33);
    for (int trial = 0; trial < 300; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        flatgain_problem *problem = plant_problem(&plant, NULL);
        flatgain_result *result = tune(problem);
        double reported = flatgain_result_residual(result), largest = 0;
        bool redundant = plant.p > plant.n && fg_matrix_is_zero(plant.V);
        if (flatgain_result_outcome(result) == FLATGAIN_TUNED && !redundant) {
            struct fg_scaled scaled = scales_of(&plant);
            for (int e = 0; e < plant.m * plant.p; e++)
                largest =
                    fmax(largest, fabs(natural_slope(&plant, &scaled, flatgain_result_gain(result), e)));
            ck_assert_msg(fabs(largest - reported) <= 1e-4 + 1e-2 * reported,
                          "trial %d: %g reported, %g found", trial, reported, largest);
            compared++;
        }
        flatgain_result_free(result);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 200);
}
END_TEST

/* The same away from a minimum, where it is not small: descents cut off after one step, internal interface.
 */
START_TEST(residual_of_a_cut_descent)
{
    int compared = 0;
    random_seed(35);
    for (int trial = 0; trial < 200; trial++) {
        struct fg_plant plant;
        flatgain_result *result;
        if (!plant_with_minimum(trial, &plant, &result))
            continue;
        struct fg_scaled scaled = scales_of(&plant);
        struct fg_cost *cost = fg_cost_new(&scaled.plant, &scaled.pattern, &arena);
        struct fg_local *local = fg_local_new(scaled.pattern.count, &arena);
        struct fg_local_limits limits = {.iterations = 1};
        double theta[6], K[6];
        int m = plant.m, p = plant.p;
        for (int e = 0; e < m * p; e++)
            theta[e] =
                flatgain_result_gain(result)[e % m * p + e / m] * scaled.output[e / m] / scaled.input[e % m] +
                0.3 * random_normal();
        if (isfinite(fg_cost_at(cost, theta))) {
            struct fg_local_answer answer = fg_local_minimise(local, cost, &scaled.pattern, theta, &limits);
            double largest = 0;
            for (int e = 0; e < m * p; e++)
                K[e % m * p + e / m] = theta[e] * scaled.input[e % m] / scaled.output[e / m];
            for (int e = 0; e < m * p; e++)
                largest = fmax(largest, fabs(natural_slope(&plant, &scaled, K, e)));
            ck_assert_double_eq_tol(answer.J, independent_cost(&plant, K), 1e-9 * answer.J);
            ck_assert_msg(fabs(largest - answer.residual) <= 1e-3 * answer.residual + 1e-6,
                          "trial %d: %g reported, %g found", trial, answer.residual, largest);
            compared += answer.residual > 1e-2;
        }
        flatgain_result_free(result);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 50);
}
END_TEST

static char *json_with(const flatgain_problem *problem, int threads, uint64_t seed)
{
    flatgain_options options = flatgain_options_default();
    flatgain_result *result = NULL;
    char *text = NULL;
    options.threads = threads;
    options.seed = seed;
    ck_assert_int_eq(flatgain_tune(problem, &options, &result, NULL), FLATGAIN_OK);
    ck_assert_int_eq(flatgain_result_json(result, NULL, &text, NULL), FLATGAIN_OK);
    flatgain_result_free(result);
    return text;
}

/* The same seed gives the same bytes with 1, 2 and 5 threads; another seed gives other bytes. */
START_TEST(threads_do_not_matter)
{
    int differ = 0;
    random_seed(34);
    for (int trial = 0; trial < 40; trial++) {
        struct fg_plant plant = random_plant(&arena, 7 * trial);
        flatgain_problem *problem = plant_problem(&plant, NULL);
        char *one = json_with(problem, 1, (uint64_t)trial), *two = json_with(problem, 2, (uint64_t)trial);
        char *five = json_with(problem, 5, (uint64_t)trial), *other = json_with(problem, 2, 1000);
        ck_assert_msg(strcmp(one, two) == 0 && strcmp(one, five) == 0, "trial %d: threads change the result",
                      trial);
        differ += strcmp(one, other) != 0;
        flatgain_text_free(one);
        flatgain_text_free(two);
        flatgain_text_free(five);
        flatgain_text_free(other);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(differ, 30);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("laws of the gain");
    TCase *tests = tcase_create("laws of the gain");
    tcase_set_timeout(tests, 300);
    tcase_add_checked_fixture(tests, NULL, release);
    tcase_add_test(tests, tied_gains);
    tcase_add_test(tests, bounded_gains);
    tcase_add_test(tests, residual_is_the_slope);
    tcase_add_test(tests, residual_of_a_cut_descent);
    tcase_add_test(tests, threads_do_not_matter);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed ? EXIT_FAILURE : EXIT_SUCCESS;
}
