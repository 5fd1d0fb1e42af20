#include "independent.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"

/* F = (I + K D)^-1 K, column-major m x p; Acl = A - B F C. False when singular. */
static bool close_loop(const struct fg_plant *q, const double *K, struct fg_arena *arena, struct fg_matrix *F,
                       struct fg_matrix *Acl)
{
    int n = q->n, m = q->m, p = q->p, info = 0;
    struct fg_matrix M = fg_matrix_new(arena, m, m);
    int *pivots = fg_arena_ints(arena, m);
    *F = fg_matrix_new(arena, m, p);
    *Acl = fg_matrix_new(arena, n, n);
    for (int i = 0; i < m; i++)
        for (int j = 0; j < m; j++) {
            FG_AT(M, i, j) = i == j;
            for (int k = 0; k < p; k++)
                FG_AT(M, i, j) += K[i * p + k] * FG_AT(q->D, k, j);
        }
    for (int i = 0; i < m; i++)
        for (int k = 0; k < p; k++)
            FG_AT(*F, i, k) = K[i * p + k];
    dgesv_(&m, &p, M.at, &m, pivots, F->at, &m, &info);
    if (info != 0)
        return false;
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            FG_AT(*Acl, i, j) = FG_AT(q->A, i, j);
            for (int a = 0; a < m; a++)
                for (int b = 0; b < p; b++)
                    FG_AT(*Acl, i, j) -= FG_AT(q->B, i, a) * FG_AT(*F, a, b) * FG_AT(q->C, b, j);
        }
    return fg_all_finite((size_t)n * n, Acl->at);
}

static bool eigenvalues(struct fg_matrix A, struct fg_arena *arena, double *re, double *im)
{
    int n = A.rows, lwork = 10 * n + 10, info = 0, one = 1;
    double none = 0, *work = fg_arena_doubles(arena, (size_t)lwork);
    struct fg_matrix copy = fg_matrix_copy(arena, A);
    dgeev_("N", "N", &n, copy.at, &n, re, im, &none, &one, &none, &one, work, &lwork, &info, 1, 1);
    return info == 0;
}

static double slowest(bool discrete, int n, const double *re, const double *im)
{
    double worst = -INFINITY;
    for (int i = 0; i < n; i++)
        worst = fmax(worst, discrete ? hypot(re[i], im[i]) : re[i]);
    return worst;
}

/* X: A X + X A' + W = 0 or A X A' - X + W = 0, unknowns x_ij, i <= j. */
static bool covariance(bool discrete, struct fg_matrix A, struct fg_matrix W, struct fg_arena *arena,
                       struct fg_matrix *X)
{
    int n = A.rows, unknowns = n * (n + 1) / 2, one = 1, info = 0;
    struct fg_matrix M = fg_matrix_new(arena, unknowns, unknowns);
    double *x = fg_arena_doubles(arena, (size_t)unknowns);
    int *pivots = fg_arena_ints(arena, (size_t)unknowns);
#define PLACE(i, j) ((i) <= (j) ? (j) * ((j) + 1) / 2 + (i) : (i) * ((i) + 1) / 2 + (j))
    for (int i = 0; i < n; i++)
        for (int j = i; j < n; j++) {
            int row = PLACE(i, j);
            x[row] = -0.5 * (FG_AT(W, i, j) + FG_AT(W, j, i));
            if (discrete) {
                FG_AT(M, row, row) -= 1;
                for (int k = 0; k < n; k++)
                    for (int l = 0; l < n; l++)
                        FG_AT(M, row, PLACE(k, l)) += FG_AT(A, i, k) * FG_AT(A, j, l);
            } else {
                for (int k = 0; k < n; k++) {
                    FG_AT(M, row, PLACE(k, j)) += FG_AT(A, i, k);
                    FG_AT(M, row, PLACE(i, k)) += FG_AT(A, j, k);
                }
            }
        }
    dgesv_(&unknowns, &one, M.at, &unknowns, pivots, x, &unknowns, &info);
    *X = fg_matrix_new(arena, n, n);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            FG_AT(*X, i, j) = x[PLACE(i, j)];
#undef PLACE
    return info == 0;
}

static double cost(const struct fg_plant *q, const double *K, struct fg_arena *arena)
{
    int n = q->n, m = q->m, p = q->p;
    struct fg_matrix F, Acl, X;
    double *re = fg_arena_doubles(arena, n), *im = fg_arena_doubles(arena, n), J = 0;
    if (!close_loop(q, K, arena, &F, &Acl) || !eigenvalues(Acl, arena, re, im) ||
        !(slowest(q->discrete, n, re, im) < (q->discrete ? 1 : 0)))
        return INFINITY;
    struct fg_matrix Wcl = fg_matrix_copy(arena, q->W), BF = fg_matrix_new(arena, n, p);
    struct fg_matrix FC = fg_matrix_new(arena, m, n);
    for (int a = 0; a < m; a++)
        for (int b = 0; b < p; b++)
            for (int i = 0; i < n; i++) {
                FG_AT(BF, i, b) += FG_AT(q->B, i, a) * FG_AT(F, a, b);
                FG_AT(FC, a, i) += FG_AT(F, a, b) * FG_AT(q->C, b, i);
            }
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            for (int a = 0; a < p; a++)
                for (int b = 0; b < p; b++)
                    FG_AT(Wcl, i, j) += FG_AT(BF, i, a) * FG_AT(q->V, a, b) * FG_AT(BF, j, b);
    if (!covariance(q->discrete, Acl, Wcl, arena, &X))
        return INFINITY;
    /* E[x'Qx] - 2 E[x'N FC x] + E[(FC x)'R(FC x)] + tr(F'RF V) */
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++) {
            double weight = FG_AT(q->Q, i, j);
            for (int a = 0; a < m; a++) {
                weight -= 2 * FG_AT(q->N, i, a) * FG_AT(FC, a, j);
                for (int b = 0; b < m; b++)
                    weight += FG_AT(FC, a, i) * FG_AT(q->R, a, b) * FG_AT(FC, b, j);
            }
            J += weight * FG_AT(X, i, j);
        }
    for (int a = 0; a < m; a++)
        for (int b = 0; b < m; b++)
            for (int k = 0; k < p; k++)
                for (int l = 0; l < p; l++)
                    J += FG_AT(F, a, k) * FG_AT(q->R, a, b) * FG_AT(F, b, l) * FG_AT(q->V, k, l);
    return J;
}

double independent_cost(const struct fg_plant *plant, const double *K)
{
    struct fg_arena arena = {0};
    double J = cost(plant, K, &arena);
    fg_arena_release(&arena);
    return J;
}

bool independent_poles(const struct fg_plant *plant, const double *K, double *re, double *im, double *decay)
{
    struct fg_arena arena = {0};
    struct fg_matrix F, Acl;
    bool good = close_loop(plant, K, &arena, &F, &Acl) && eigenvalues(Acl, &arena, re, im);
    *decay = good ? slowest(plant->discrete, plant->n, re, im) : NAN;
    fg_arena_release(&arena);
    return good;
}

double independent_slope(const struct fg_plant *plant, const double *K, int entry, double h)
{
    double moved[400], J[4];
    static const double at[4] = {-2, -1, 1, 2};
    memcpy(moved, K, sizeof(double) * (size_t)(plant->m * plant->p));
    for (int k = 0; k < 4; k++) {
        moved[entry] = K[entry] + at[k] * h;
        J[k] = independent_cost(plant, moved);
    }
    return (J[0] - 8 * J[1] + 8 * J[2] - J[3]) / (12 * h);
}
