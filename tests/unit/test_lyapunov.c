/* Lyapunov equations against a Kronecker solve (independent code), published exact solutions, residuals. */
#include <check.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/lyapunov.h"

static unsigned long long state = 88172645463325252ULL;
static double uniform(void) /* xorshift64, in (-1, 1) */
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (double)(state >> 11) / 4503599627370496.0 - 1;
}

/* A random stable matrix: shifted (continuous) or divided by its row-sum norm (discrete). */
static struct fg_matrix stable(struct fg_arena *arena, int n, bool discrete)
{
    struct fg_matrix A = fg_matrix_new(arena, n, n);
    for (int i = 0; i < n * n; i++)
        A.at[i] = uniform();
    double bound = 0;
    for (int i = 0; i < n; i++) {
        double sum = 0;
        for (int j = 0; j < n; j++)
            sum += fabs(FG_AT(A, i, j));
        bound = fmax(bound, sum);
    }
    if (discrete)
        for (int i = 0; i < n * n; i++)
            A.at[i] *= 0.97 / bound;
    else
        for (int i = 0; i < n; i++)
            FG_AT(A, i, i) -= bound + 0.01;
    return A;
}

static struct fg_matrix symmetric(struct fg_arena *arena, int n)
{
    struct fg_matrix C = fg_matrix_new(arena, n, n);
    for (int j = 0; j < n; j++)
        for (int i = 0; i <= j; i++)
            FG_AT(C, i, j) = FG_AT(C, j, i) = uniform();
    return C;
}

/* Largest residual of A X + X A' + C or A X A' - X + C, by plain loops. */
static double residual(bool discrete, struct fg_matrix A, struct fg_matrix C, struct fg_matrix X)
{
    int n = A.rows;
    double worst = 0;
    double *AX = calloc((size_t)n * n, sizeof(double));
    for (int i = 0; i < n; i++)
        for (int k = 0; k < n; k++)
            for (int j = 0; j < n; j++)
                AX[i * n + j] += FG_AT(A, i, k) * FG_AT(X, k, j);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            double r = FG_AT(C, i, j);
            if (discrete) {
                r -= FG_AT(X, i, j);
                for (int k = 0; k < n; k++)
                    r += AX[i * n + k] * FG_AT(A, j, k);
            } else {
                r += AX[i * n + j] + AX[j * n + i];
            }
            worst = fmax(worst, fabs(r));
        }
    free(AX);
    return worst;
}

/* X by dgesv on the n^2 system: no Schur form, no recursion. */
static void kronecker(bool discrete, struct fg_matrix A, struct fg_matrix C, double *x)
{
    int n = A.rows, N = n * n, one = 1, info;
    double *M = calloc((size_t)N * N, sizeof(double));
    int *pivots = calloc((size_t)N, sizeof(int));
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            int row = i + j * n;
            x[row] = -FG_AT(C, i, j);
            for (int k = 0; k < n; k++)
                for (int l = 0; l < n; l++) {
                    double *m = &M[row + (size_t)(k + l * n) * N];
                    if (discrete)
                        *m = FG_AT(A, i, k) * FG_AT(A, j, l) - (i == k && j == l);
                    else
                        *m = (j == l ? FG_AT(A, i, k) : 0) + (i == k ? FG_AT(A, j, l) : 0);
                }
        }
    dgesv_(&N, &one, M, &N, pivots, x, &N, &info);
    ck_assert_int_eq(info, 0);
    free(M);
    free(pivots);
}

START_TEST(against_kronecker)
{
    for (int discrete = 0; discrete < 2; discrete++)
        for (int n = 1; n <= 8; n++)
            for (int trial = 0; trial < 20; trial++) {
                struct fg_arena arena = {0};
                struct fg_matrix A = stable(&arena, n, discrete), C = symmetric(&arena, n);
                struct fg_matrix X = fg_matrix_new(&arena, n, n);
                bool memory;
                ck_assert(fg_lyapunov(discrete, A, C, X, &memory));
                double x[64];
                kronecker(discrete, A, C, x);
                double size = fg_matrix_max_abs(X);
                for (int i = 0; i < n * n; i++)
                    ck_assert_double_eq_tol(X.at[i], x[i], 1e-10 * (1 + size));
                fg_arena_release(&arena);
            }
}
END_TEST

START_TEST(large_orders_solve_their_equation)
{
    static const int orders[] = {23, 24, 25, 26, 47, 64, 97, 150};
    for (int discrete = 0; discrete < 2; discrete++)
        for (size_t k = 0; k < sizeof orders / sizeof *orders; k++) {
            struct fg_arena arena = {0};
            int n = orders[k];
            struct fg_matrix A = stable(&arena, n, discrete), C = symmetric(&arena, n);
            struct fg_matrix X = fg_matrix_new(&arena, n, n);
            bool memory;
            ck_assert(fg_lyapunov(discrete, A, C, X, &memory));
            ck_assert_double_lt(residual(discrete, A, C, X),
                                1e-12 * n * (1 + fg_matrix_max_abs(A)) * (1 + fg_matrix_max_abs(X)));
            fg_arena_release(&arena);
        }
}
END_TEST

START_TEST(dual_solves_the_transposed_equation)
{
    static const int orders[] = {1, 2, 3, 7, 24, 31, 60};
    for (int discrete = 0; discrete < 2; discrete++)
        for (size_t k = 0; k < sizeof orders / sizeof *orders; k++) {
            struct fg_arena arena = {0};
            int n = orders[k], info, sdim, lwork = 20 * n + 64;
            struct fg_matrix A = stable(&arena, n, discrete), C = symmetric(&arena, n);
            double *wr = fg_arena_doubles(&arena, n), *wi = fg_arena_doubles(&arena, n);
            double *work = fg_arena_doubles(&arena, fg_lyapunov_work(n) + (size_t)lwork);
            struct fg_matrix R = fg_matrix_new(&arena, n, n), X = fg_matrix_copy(&arena, C);
            dgees_("N", "N", NULL, &n, A.at, &n, &sdim, wr, wi, NULL, &n, work, &lwork, NULL, &info, 1, 1);
            ck_assert_int_eq(info, 0); /* A is now its own Schur form T; take T itself as the matrix */
            for (int j = 0; j < n; j++)
                for (int i = j + 2; i < n; i++)
                    FG_AT(A, i, j) = 0;
            fg_lyapunov_reversed(n, A.at, R.at);
            fg_lyapunov_schur_dual(discrete, n, R.at, X.at, work);
            struct fg_matrix At = fg_matrix_transpose(&arena, A);
            ck_assert_double_lt(residual(discrete, At, C, X),
                                1e-12 * n * (1 + fg_matrix_max_abs(A)) * (1 + fg_matrix_max_abs(X)));
            fg_arena_release(&arena);
        }
}
END_TEST

/* Complex pairs that are nearly real and defective, [r b; -e r] with b e -> 0, in every combination: the
 * coordinates in which a pair is a rotation are far from these, and digits could be lost on the way. */
START_TEST(nearly_defective_pairs)
{
    for (int discrete = 0; discrete < 2; discrete++)
        for (double e = 1; e > 1e-17; e *= 0.1)
            for (double f = 1; f > 1e-17; f *= 1e-2) {
                struct fg_arena arena = {0};
                struct fg_matrix T = fg_matrix_new(&arena, 4, 4), C = symmetric(&arena, 4);
                double centre = discrete ? 0.3 : -1, x[16];
                for (int i = 0; i < 4; i++)
                    FG_AT(T, i, i) = centre;
                FG_AT(T, 0, 1) = 0.5;
                FG_AT(T, 1, 0) = -0.5 * e;
                FG_AT(T, 2, 3) = -0.5 * f;
                FG_AT(T, 3, 2) = 0.5;
                FG_AT(T, 0, 2) = FG_AT(T, 1, 3) = 0.4;
                kronecker(discrete, T, C, x);
                struct fg_matrix X = fg_matrix_copy(&arena, C);
                double *work = fg_arena_doubles(&arena, fg_lyapunov_work(4));
                fg_lyapunov_schur(discrete, 4, T.at, X.at, work);
                for (int i = 0; i < 16; i++)
                    ck_assert_double_eq_tol(X.at[i], x[i], 1e-13 * (1 + fg_matrix_max_abs(X)));
                fg_arena_release(&arena);
            }
}
END_TEST

START_TEST(unstable_and_not_finite_are_refused)
{
    struct fg_arena arena = {0};
    struct fg_matrix A = fg_matrix_identity(&arena, 2), C = fg_matrix_identity(&arena, 2);
    struct fg_matrix X = fg_matrix_new(&arena, 2, 2);
    bool memory;
    ck_assert(!fg_lyapunov(false, A, C, X, &memory) && !memory);
    ck_assert(!fg_lyapunov(true, A, C, X, &memory) && !memory);
    A.at[0] = NAN;
    ck_assert(!fg_lyapunov(false, A, C, X, &memory));
    A.at[0] = INFINITY;
    ck_assert(!fg_lyapunov(true, A, C, X, &memory));
    fg_arena_release(&arena);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("lyapunov");
    TCase *all = tcase_create("all");
    tcase_add_test(all, against_kronecker);
    tcase_add_test(all, large_orders_solve_their_equation);
    tcase_add_test(all, dual_solves_the_transposed_equation);
    tcase_add_test(all, nearly_defective_pairs);
    tcase_add_test(all, unstable_and_not_finite_are_refused);
    suite_add_tcase(suite, all);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
