/* J(K), its gradient and Hessian: against a Kronecker solve, finite differences, closed forms. */
#include <check.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "design/cost.h"
#include "linalg/lapack.h"
#include "plants.h"

/* Independent J: forms Acl, Qcl, Wcl with plain loops and solves the n^2 system with dgesv. */
static double J_by_kronecker(const struct fg_plant *P, const double *K)
{
    int n = P->n, m = P->m, p = P->p, N = n * n, one = 1, info, sm = m;
    double F[16] = {0}, M[16] = {0};
    int pivots[64];
    for (int i = 0; i < m; i++)
        for (int j = 0; j < m; j++) {
            M[i + j * m] = i == j;
            for (int k = 0; k < p; k++)
                M[i + j * m] += K[i + k * m] * FG_AT(P->D, k, j);
        }
    memcpy(F, K, (size_t)m * p * sizeof(double));
    dgesv_(&sm, &p, M, &sm, pivots, F, &sm, &info);
    ck_assert_int_eq(info, 0);
    double FC[64], A[64], Q[64], W[64], FV[16];
#define FOR(i, c) for (int i = 0; i < (c); i++)
    FOR(i, m) FOR(j, n)
    {
        FC[i + j * m] = 0;
        FOR(k, p) FC[i + j * m] += F[i + k * m] * FG_AT(P->C, k, j);
    }
    FOR(i, m) FOR(j, p)
    {
        FV[i + j * m] = 0;
        FOR(k, p) FV[i + j * m] += F[i + k * m] * FG_AT(P->V, k, j);
    }
    FOR(i, n) FOR(j, n)
    {
        double a = FG_AT(P->A, i, j), q = FG_AT(P->Q, i, j), w = FG_AT(P->W, i, j);
        FOR(k, m)
        {
            a -= FG_AT(P->B, i, k) * FC[k + j * m];
            q -= FG_AT(P->N, i, k) * FC[k + j * m] + FG_AT(P->N, j, k) * FC[k + i * m];
            FOR(l, m)
            {
                q += FC[k + i * m] * FG_AT(P->R, k, l) * FC[l + j * m];
                FOR(h, p) w += FG_AT(P->B, i, k) * FV[k + h * m] * F[l + h * m] * FG_AT(P->B, j, l);
            }
        }
        A[i + j * n] = a;
        Q[i + j * n] = q;
        W[i + j * n] = w;
    }
    double *big = calloc((size_t)N * N, sizeof(double)), x[64];
    int *piv = calloc((size_t)N, sizeof(int));
    FOR(i, n) FOR(j, n)
    {
        x[i + j * n] = -W[i + j * n];
        FOR(k, n) FOR(l, n)
        {
            double *e = &big[(i + j * n) + (size_t)(k + l * n) * N];
            *e = P->discrete ? A[i + k * n] * A[j + l * n] - (i == k && j == l)
                             : (j == l ? A[i + k * n] : 0) + (i == k ? A[j + l * n] : 0);
        }
    }
    dgesv_(&N, &one, big, &N, piv, x, &N, &info);
    ck_assert_int_eq(info, 0);
    double J = 0;
    FOR(i, n) FOR(j, n) J += Q[i + j * n] * x[j + i * n];
    if (P->discrete)
        FOR(i, m) FOR(j, m) FOR(k, p) J += F[i + k * m] * FG_AT(P->R, i, j) * FV[j + k * m];
#undef FOR
    free(big);
    free(piv);
    return J;
}

START_TEST(value_gradient_and_hessian)
{
    int usable = 0;
    for (int trial = 0; trial < 400; trial++) {
        struct fg_arena arena = {0};
        struct fg_plant plant = random_plant(&arena, trial);
        struct fg_pattern pattern = random_pattern(&arena, plant.m, plant.p, trial);
        struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
        int q = pattern.count;
        double theta[16], K[16], g[16], H[256], up[16], down[16];
        bool stable = false;
        for (int attempt = 0; attempt < 50 && !stable; attempt++) {
            for (int k = 0; k < q; k++)
                theta[k] = random_uniform();
            stable = isfinite(fg_cost_at(cost, theta));
        }
        if (stable && q > 0) {
            usable++;
            fg_pattern_gain(&pattern, theta, K);
            double J = fg_cost_at(cost, theta), direct = J_by_kronecker(&plant, K);
            ck_assert_double_eq_tol(J, direct, 1e-8 * direct);
            fg_cost_gradient(cost, g);
            fg_cost_hessian(cost, H);
            double gmax = 0, Hmax = 0;
            for (int k = 0; k < q; k++)
                gmax = fmax(gmax, fabs(g[k]));
            for (int k = 0; k < q * q; k++)
                Hmax = fmax(Hmax, fabs(H[k]));
            double h = 1e-5 * fmin(1, fmax(1e-2, gmax / (Hmax + 1e-300)));
            for (int k = 0; k < q; k++) {
                double keep = theta[k];
                theta[k] = keep + h;
                double Jup = fg_cost_at(cost, theta);
                fg_cost_gradient(cost, up);
                theta[k] = keep - h;
                double Jdown = fg_cost_at(cost, theta);
                fg_cost_gradient(cost, down);
                theta[k] = keep;
                if (!isfinite(Jup) || !isfinite(Jdown))
                    continue;
                ck_assert_double_eq_tol(g[k], (Jup - Jdown) / (2 * h), 1e-4 * (gmax + J));
                for (int l = 0; l < q; l++)
                    ck_assert_double_eq_tol(H[k + l * q], (up[l] - down[l]) / (2 * h),
                                            2e-4 * Hmax + 1e-6 * J);
            }
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_gt(usable, 250);
}
END_TEST

START_TEST(abscissa_and_its_gradient)
{
    int usable = 0;
    for (int trial = 0; trial < 200; trial++) {
        struct fg_arena arena = {0};
        struct fg_plant plant = random_plant(&arena, trial + 1000);
        struct fg_pattern pattern = random_pattern(&arena, plant.m, plant.p, trial);
        struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
        int q = pattern.count;
        double theta[16], g[16], h = 1e-7;
        for (int k = 0; k < q; k++)
            theta[k] = random_uniform();
        fg_cost_at(cost, theta);
        if (fg_cost_abscissa_gradient(cost, g)) {
            int agree = 0;
            for (int k = 0; k < q; k++) {
                double keep = theta[k];
                theta[k] = keep + h;
                fg_cost_at(cost, theta);
                double a = fg_cost_abscissa(cost);
                theta[k] = keep - h;
                fg_cost_at(cost, theta);
                a = (a - fg_cost_abscissa(cost)) / (2 * h);
                theta[k] = keep;
                agree += fabs(a - g[k]) < 1e-4 * (1 + fabs(g[k]));
            }
            usable += agree == q; /* not differentiable at a few */
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_gt(usable, 190);
}
END_TEST

START_TEST(closed_forms)
{
    /* Levine, Athans, IEEE TAC 15 (1970) 44: oscillator, velocity measured; J(k) = 1/k + 3k/2 (derived) */
    struct fg_arena arena = {0};
    struct fg_plant plant = empty_plant(&arena, false, 2, 1, 1);
    FG_AT(plant.A, 0, 1) = 1;
    FG_AT(plant.A, 1, 0) = -1;
    FG_AT(plant.B, 1, 0) = FG_AT(plant.C, 0, 1) = FG_AT(plant.Q, 0, 0) = FG_AT(plant.R, 0, 0) = 1;
    FG_AT(plant.W, 0, 0) = FG_AT(plant.W, 1, 1) = 1;
    struct fg_pattern pattern = free_pattern(&arena, 1, 1);
    struct fg_cost *cost = fg_cost_new(&plant, &pattern, &arena);
    for (double k = 0.1; k < 4; k += 0.37) {
        double g, H;
        ck_assert_double_eq_tol(fg_cost_at(cost, &k), 1 / k + 1.5 * k, 1e-12 * (1 / k + k));
        fg_cost_gradient(cost, &g);
        fg_cost_hessian(cost, &H);
        ck_assert_double_eq_tol(g, -1 / (k * k) + 1.5, 1e-10 / (k * k));
        ck_assert_double_eq_tol(H, 2 / (k * k * k), 1e-10 / (k * k * k));
    }
    double k = -0.1;
    ck_assert(isinf(fg_cost_at(cost, &k)));
    ck_assert_double_eq_tol(fg_cost_abscissa(cost), 0.05, 1e-14);
    k = NAN;
    ck_assert(isinf(fg_cost_at(cost, &k)));
    k = INFINITY;
    ck_assert(isinf(fg_cost_at(cost, &k)));
    fg_arena_release(&arena);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("cost");
    TCase *all = tcase_create("all");
    tcase_set_timeout(all, 60);
    tcase_add_test(all, value_gradient_and_hessian);
    tcase_add_test(all, abscissa_and_its_gradient);
    tcase_add_test(all, closed_forms);
    suite_add_tcase(suite, all);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
