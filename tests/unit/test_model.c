/* Sensor lags as states: against a second coding of the same equations, and against a cost derived by hand.
 */
#include <check.h>
#include <math.h>
#include <string.h>

#include "flatgain.h"
#include "linalg/lapack.h"
#include "plant/model.h"
#include "plants.h"

static struct fg_arena arena;

static void random_symmetric(int n, double *a) /* G G' */
{
    double g[36];
    for (int i = 0; i < n * n; i++)
        g[i] = random_normal();
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            a[i * n + j] = 0;
            for (int k = 0; k < n; k++)
                a[i * n + j] += g[i * n + k] * g[j * n + k];
        }
}

static flatgain_problem *problem_of(const flatgain_matrices *matrices)
{
    flatgain_problem *problem = NULL;
    flatgain_error error;
    flatgain_status status = flatgain_problem_from_matrices(matrices, &problem, &error);
    ck_assert_msg(status == FLATGAIN_OK, "%s", error.text);
    return problem;
}

static struct fg_model model_of(const flatgain_problem *problem)
{
    struct fg_model model;
    flatgain_error error;
    ck_assert_int_eq(fg_model_build(problem, &arena, &model, &error), FLATGAIN_OK);
    return model;
}

static void same(struct fg_matrix a, struct fg_matrix b, const char *what)
{
    ck_assert_int_eq(a.rows, b.rows);
    ck_assert_int_eq(a.cols, b.cols);
    for (int i = 0; i < a.rows * a.cols; i++)
        ck_assert_msg(fabs(a.at[i] - b.at[i]) <= 1e-14 * (1 + fabs(b.at[i])), "%s entry %d: %g and %g", what,
                      i, a.at[i], b.at[i]);
}

/* Written as block products instead of entries: with E the rows of the identity that belong to lagged
 * outputs, T = diag(tau) and P = I - E'E,
 *   A = [A 0; T^-1 E C, -T^-1], B = [B; T^-1 E D], C = [P C, E'], D = P D,
 *   W = diag(W, T^-1 E V E' T^-1). */
START_TEST(lags_against_block_products)
{
    for (int trial = 0; trial < 60; trial++) {
        int n = 1 + trial % 5, m = 1 + trial % 3, p = 1 + trial % 4, lagged = 0;
        bool start = trial % 5 == 4;
        double A[25], B[15], C[20], D[12], Q[25], R[9], W[25], V[16] = {0}, lag[4];
        double noise[16];
        for (int i = 0; i < n * n; i++)
            A[i] = random_normal();
        for (int i = 0; i < n * m; i++)
            B[i] = random_normal();
        for (int i = 0; i < n * p; i++)
            C[i] = random_normal();
        for (int i = 0; i < m * p; i++)
            D[i] = random_normal();
        random_symmetric(n, Q);
        random_symmetric(m, R);
        random_symmetric(n, W);
        random_symmetric(p, noise);
        for (int i = 0; i < p; i++) {
            lag[i] = (trial + i) % 2 ? 0.1 + fabs(random_normal()) : 0;
            lagged += lag[i] > 0;
        }
        for (int i = 0; i < p && !start; i++)
            for (int j = 0; j < p; j++)
                V[i * p + j] = lag[i] > 0 && lag[j] > 0 ? noise[i * p + j] : 0;
        flatgain_matrices matrices = {.states = n,
                                      .start = start,
                                      .inputs = m,
                                      .outputs = p,
                                      .A = A,
                                      .B = B,
                                      .C = C,
                                      .D = D,
                                      .Q = Q,
                                      .R = R,
                                      .W = W,
                                      .V = start ? NULL : V,
                                      .lag = lag,
                                      .accept_percent = NAN};
        flatgain_problem *problem = problem_of(&matrices);
        struct fg_model model = model_of(problem);
        struct fg_plant expected = empty_plant(&arena, false, n + lagged, m, p);
        struct fg_matrix E = fg_matrix_new(&arena, lagged, p), TE = fg_matrix_new(&arena, lagged, p);
        struct fg_matrix P = fg_matrix_identity(&arena, p), Cm = fg_matrix_from_rows(&arena, p, n, C);
        struct fg_matrix Dm = fg_matrix_from_rows(&arena, p, m, D), Vm = fg_matrix_from_rows(&arena, p, p, V);
        struct fg_matrix TEC = fg_matrix_new(&arena, lagged, n), TED = fg_matrix_new(&arena, lagged, m);
        struct fg_matrix PC = fg_matrix_new(&arena, p, n), TEV = fg_matrix_new(&arena, lagged, p);
        struct fg_matrix filter_noise = fg_matrix_new(&arena, lagged, lagged);
        for (int i = 0, k = 0; i < p; i++)
            if (lag[i] > 0) {
                FG_AT(E, k, i) = 1;
                FG_AT(TE, k, i) = 1 / lag[i];
                FG_AT(expected.A, n + k, n + k) = -1 / lag[i];
                k++;
            }
        fg_multiply('T', 'N', -1, E, E, 1, P);
        fg_multiply('N', 'N', 1, TE, Cm, 0, TEC);
        fg_multiply('N', 'N', 1, TE, Dm, 0, TED);
        fg_multiply('N', 'N', 1, P, Cm, 0, PC);
        fg_multiply('N', 'N', 1, P, Dm, 0, expected.D);
        fg_multiply('N', 'N', 1, TE, Vm, 0, TEV);
        fg_multiply('N', 'T', 1, TEV, TE, 0, filter_noise);
        for (int j = 0; j < n; j++) {
            for (int i = 0; i < n; i++) {
                FG_AT(expected.A, i, j) = A[i * n + j];
                FG_AT(expected.Q, i, j) = Q[i * n + j];
                FG_AT(expected.W, i, j) = W[i * n + j];
            }
            for (int k = 0; k < lagged; k++)
                FG_AT(expected.A, n + k, j) = FG_AT(TEC, k, j);
            for (int i = 0; i < p; i++)
                FG_AT(expected.C, i, j) = FG_AT(PC, i, j);
        }
        for (int j = 0; j < m; j++) {
            for (int i = 0; i < n; i++)
                FG_AT(expected.B, i, j) = B[i * m + j];
            for (int k = 0; k < lagged; k++)
                FG_AT(expected.B, n + k, j) = FG_AT(TED, k, j);
        }
        for (int k = 0; k < lagged; k++) {
            for (int i = 0; i < p; i++)
                FG_AT(expected.C, i, n + k) = FG_AT(E, k, i);
            for (int l = 0; l < lagged; l++)
                FG_AT(expected.W, n + k, n + l) = FG_AT(filter_noise, k, l);
        }
        ck_assert_int_eq(model.law.n, n + lagged);
        same(model.law.A, expected.A, "A");
        same(model.law.B, expected.B, "B");
        same(model.law.C, expected.C, "C");
        same(model.law.D, expected.D, "D");
        same(model.law.Q, expected.Q, "Q");
        same(model.law.N, expected.N, "N");
        same(model.law.W, expected.W, "W");
        ck_assert(fg_matrix_is_zero(model.law.V));
        ck_assert_int_eq(model.benchmark.n, n);
        same(model.benchmark.C, Cm, "benchmark C");
        same(model.benchmark.D, Dm, "benchmark D");
        same(model.benchmark.V, Vm, "benchmark V");
        for (int k = 0; k < n + lagged; k++)
            ck_assert(strncmp(model.state_names[k], k < n ? "x" : "filtered y", k < n ? 1 : 10) == 0);
        flatgain_problem_free(problem);
        fg_arena_release(&arena);
    }
}
END_TEST

START_TEST(discrete_stays_as_it_is)
{
    double one = 1, half = 0.5, noise = 0.2;
    flatgain_matrices matrices = {.discrete = 1,
                                  .states = 1,
                                  .inputs = 1,
                                  .outputs = 1,
                                  .A = &half,
                                  .B = &one,
                                  .C = &one,
                                  .Q = &one,
                                  .R = &one,
                                  .W = &one,
                                  .V = &noise,
                                  .accept_percent = NAN};
    flatgain_problem *problem = problem_of(&matrices);
    struct fg_model model = model_of(problem);
    ck_assert(model.law.discrete && model.benchmark.discrete);
    ck_assert_int_eq(model.law.n, 1);
    ck_assert_double_eq(model.law.V.at[0], 0.2);
    ck_assert_double_eq(model.benchmark.V.at[0], 0.2);
    ck_assert_str_eq(model.state_names[0], "x1");
    flatgain_problem_free(problem);
    fg_arena_release(&arena);
}
END_TEST

/* tr(Qcl X) with Acl X + X Acl' + Wcl = 0 solved as one linear system of order n^2. */
static double kronecker_cost(const struct fg_plant *plant, double k)
{
    int n = plant->n, size = n * n, one = 1, info = 0, pivots[16];
    double M[256] = {0}, rhs[16], Acl[16], Qcl[16], cost = 0;
    ck_assert_int_le(size, 16);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            Acl[i + j * n] = FG_AT(plant->A, i, j) - FG_AT(plant->B, i, 0) * k * FG_AT(plant->C, 0, j);
            Qcl[i + j * n] = FG_AT(plant->Q, i, j) +
                             FG_AT(plant->C, 0, i) * k * plant->R.at[0] * k * FG_AT(plant->C, 0, j);
        }
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            int row = i + j * n;
            rhs[row] = -FG_AT(plant->W, i, j);
            for (int l = 0; l < n; l++) {
                M[row + (l + j * n) * size] += Acl[i + l * n];
                M[row + (i + l * n) * size] += Acl[j + l * n];
            }
        }
    dgesv_(&size, &one, M, &size, pivots, rhs, &size, &info);
    ck_assert_int_eq(info, 0);
    for (int i = 0; i < size; i++)
        cost += Qcl[i] * rhs[i];
    return cost;
}

/* dx/dt = u + w, tau df/dt = x + v - f, u = -K f, J = E[x^2 + r u^2]. With a = E x^2, b = E x f, c = E f^2:
 *   0 = -2 K b + W
 *   0 = -K c + (a - b) / tau
 *   0 = 2 (b - c) / tau + V / tau^2
 * so b = W / (2 K), c = b + V / (2 tau), a = b + tau K c, and J = a + r K^2 c. */
START_TEST(cost_with_a_lag_by_hand)
{
    static const double TAU[] = {0.05, 0.4, 2}, GAIN[] = {0.2, 1, 3};
    for (int t = 0; t < 3; t++)
        for (int g = 0; g < 3; g++) {
            double zero = 0, one = 1, q = 1, r = 0.7, W = 1.3, V = 0.4, tau = TAU[t], K = GAIN[g];
            flatgain_matrices matrices = {.states = 1,
                                          .inputs = 1,
                                          .outputs = 1,
                                          .A = &zero,
                                          .B = &one,
                                          .C = &one,
                                          .Q = &q,
                                          .R = &r,
                                          .W = &W,
                                          .V = &V,
                                          .lag = &tau,
                                          .accept_percent = NAN};
            flatgain_problem *problem = problem_of(&matrices);
            struct fg_model model = model_of(problem);
            double b = W / (2 * K), c = b + V / (2 * tau), a = b + tau * K * c, J = a + r * K * K * c;
            ck_assert_double_eq_tol(kronecker_cost(&model.law, K), J, 1e-12 * J);
            flatgain_problem_free(problem);
            fg_arena_release(&arena);
        }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("model");
    TCase *tests = tcase_create("model");
    tcase_add_test(tests, lags_against_block_products);
    tcase_add_test(tests, discrete_stays_as_it_is);
    tcase_add_test(tests, cost_with_a_lag_by_hand);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
