/* sqrt(J) against the H2 norm of the closed loop by SLICOT (AB13BD), and J and the poles against code that
 * shares nothing with the library, for random plants with N, D and, in the discrete setting, V. */
#include <check.h>
#include <math.h>
#include <stdlib.h>

#include "design/cost.h"
#include "independent.h"
#include "linalg/lapack.h"
#include "plants.h"
#include "problems.h"

double ab13bd_(const char *dico, const char *jobn, const int *n, const int *m, const int *p, double *a,
               const int *lda, double *b, const int *ldb, double *c, const int *ldc, double *d,
               const int *ldd, int *nq, const double *tol, double *dwork, const int *ldwork, int *iwarn,
               int *info, size_t, size_t);

static struct fg_arena arena;

static void release(void)
{
    fg_arena_release(&arena);
}

/* L with L L' = S, S > 0. */
static struct fg_matrix cholesky(struct fg_matrix S)
{
    int n = S.rows, info = 0;
    struct fg_matrix L = fg_matrix_copy(&arena, S);
    dpotrf_("L", &n, L.at, &n, &info, 1);
    ck_assert_int_eq(info, 0);
    for (int j = 0; j < n; j++)
        for (int i = 0; i < j; i++)
            FG_AT(L, i, j) = 0;
    return L;
}

/* F = (I + K D)^-1 K by dgesv. */
static struct fg_matrix output_gain(const struct fg_plant *q, const double *K)
{
    int m = q->m, p = q->p, info = 0, pivots[8];
    struct fg_matrix F = fg_matrix_from_rows(&arena, m, p, K), M = fg_matrix_identity(&arena, m);
    fg_multiply('N', 'N', 1, fg_matrix_copy(&arena, F), q->D, 1, M);
    dgesv_(&m, &p, M.at, &m, pivots, F.at, &m, &info);
    ck_assert_int_eq(info, 0);
    return F;
}

/* || z || for w = G n, v = Gv e, z = H [x; u]: states Acl, inputs [G, -B F Gv], outputs Hx - Hu F C, direct
 * term [0, -Hu F Gv]. */
static double norm_of_loop(const struct fg_plant *q, const double *K)
{
    int n = q->n, m = q->m, p = q->p, r = n + m, inputs = q->discrete ? n + p : n;
    struct fg_matrix F = output_gain(q, K), A = fg_matrix_copy(&arena, q->A), T = fg_matrix_new(&arena, m, n);
    struct fg_matrix weights = fg_matrix_new(&arena, r, r), G = cholesky(q->W),
                     BF = fg_matrix_new(&arena, n, p);
    fg_multiply('N', 'N', 1, F, q->C, 0, T); /* F C */
    fg_multiply('N', 'N', -1, q->B, T, 1, A);
    for (int i = 0; i < r; i++)
        for (int j = 0; j < r; j++)
            FG_AT(weights, i, j) = i < n && j < n ? FG_AT(q->Q, i, j)
                                   : i < n        ? FG_AT(q->N, i, j - n)
                                   : j < n        ? FG_AT(q->N, j, i - n)
                                                  : FG_AT(q->R, i - n, j - n);
    struct fg_matrix H = fg_matrix_transpose(&arena, cholesky(weights));
    struct fg_matrix Hx = fg_matrix_view(H.at, r, n), Hu = fg_matrix_view(H.at + (size_t)r * n, r, m);
    struct fg_matrix C = fg_matrix_copy(&arena, Hx), B = fg_matrix_new(&arena, n, inputs);
    struct fg_matrix D = fg_matrix_new(&arena, r, inputs);
    fg_multiply('N', 'N', -1, Hu, T, 1, C);
    for (int i = 0; i < n * n; i++)
        B.at[i] = G.at[i];
    if (q->discrete) {
        struct fg_matrix Gv = fg_matrix_is_zero(q->V) ? fg_matrix_new(&arena, p, p) : cholesky(q->V);
        struct fg_matrix FG = fg_matrix_new(&arena, m, p);
        fg_multiply('N', 'N', 1, F, Gv, 0, FG);
        fg_multiply('N', 'N', -1, q->B, FG, 0, BF);
        for (int i = 0; i < n * p; i++)
            B.at[n * n + i] = BF.at[i];
        fg_multiply('N', 'N', -1, Hu, FG, 0, fg_matrix_view(D.at + (size_t)r * n, r, p));
    }
    int order = 0, warning = 0, info = 0, ldwork = 20000;
    double tolerance = 0, *work = fg_arena_doubles(&arena, (size_t)ldwork);
    double norm = ab13bd_(q->discrete ? "D" : "C", "H", &n, &inputs, &r, A.at, &n, B.at, &n, C.at, &r, D.at,
                          &r, &order, &tolerance, work, &ldwork, &warning, &info, 1, 1);
    ck_assert_int_eq(info, 0);
    return norm;
}

/* Tuned and random gains of 90 plants. */
START_TEST(norm_of_the_loop)
{
    int compared = 0;
    random_seed(2);
    for (int trial = 0; trial < 90; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        flatgain_problem *problem = plant_problem(&plant, NULL);
        flatgain_result *result = tune(problem);
        const double *K = flatgain_result_gain(result);
        double J = flatgain_result_cost(result, FLATGAIN_COST_GAIN), near[9];
        if (K && isfinite(J)) {
            for (int e = 0; e < plant.m * plant.p; e++)
                near[e] = K[e] * (1 + 0.1 * random_uniform());
            double norm = norm_of_loop(&plant, K), other = independent_cost(&plant, near);
            ck_assert_msg(fabs(norm - sqrt(J)) <= 1e-8 * norm, "trial %d: norm %.12g, sqrt(J) %.12g", trial,
                          norm, sqrt(J));
            if (isfinite(other)) {
                flatgain_result *judged = judge(problem, near);
                double value = flatgain_result_cost(judged, FLATGAIN_COST_GAIN);
                norm = norm_of_loop(&plant, near);
                ck_assert_msg(fabs(norm - sqrt(value)) <= 1e-8 * norm, "trial %d: norm %.12g, %.12g", trial,
                              norm, sqrt(value));
                ck_assert_msg(fabs(other - value) <= 1e-8 * value, "trial %d: %.12g, %.12g", trial, other,
                              value);
                flatgain_result_free(judged);
            }
            compared++;
        }
        flatgain_result_free(result);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(compared, 70);
}
END_TEST

/* Any gain, stable or not: the same verdict on stability, the same cost and the same poles as the
 * independent code, which knows nothing of the library but the definition. */
START_TEST(any_gain)
{
    int stable = 0, unstable = 0;
    random_seed(3);
    for (int trial = 0; trial < 2000; trial++) {
        struct fg_plant plant = random_plant(&arena, trial);
        struct fg_pattern pattern = free_pattern(&arena, plant.m, plant.p);
        double rows[9], K[9], re[6], im[6], decay;
        for (int e = 0; e < plant.m * plant.p; e++)
            rows[e] = 0.3 * random_normal();
        for (int i = 0; i < plant.m; i++)
            for (int j = 0; j < plant.p; j++)
                K[i + j * plant.m] = rows[i * plant.p + j];
        struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
        ck_assert_ptr_nonnull(cost);
        double value = fg_cost_value(cost, K), expected = independent_cost(&plant, rows);
        ck_assert(independent_poles(&plant, rows, re, im, &decay));
        ck_assert_double_eq_tol(fg_cost_abscissa(cost), decay, 1e-8);
        if (isfinite(expected)) {
            ck_assert_msg(fabs(value - expected) <= 1e-7 * expected, "trial %d: %.12g, expected %.12g", trial,
                          value, expected);
            stable++;
        } else {
            ck_assert(isinf(value));
            unstable++;
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_ge(stable, 300);
    ck_assert_int_ge(unstable, 300);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("h2");
    TCase *tests = tcase_create("h2");
    tcase_set_timeout(tests, 60);
    tcase_add_checked_fixture(tests, NULL, release);
    tcase_add_test(tests, norm_of_the_loop);
    tcase_add_test(tests, any_gain);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed ? EXIT_FAILURE : EXIT_SUCCESS;
}
