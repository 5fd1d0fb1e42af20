/* A scale for the states that the units cannot change: a least-squares fit of logarithms (Curtis, Reid, J.
 * Inst. Math. Appl. 10 (1972) 118), which follows any change of units exactly, then norm balancing, which is
 * blind to entries of rounding size. */
#include "design/limit_solution.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/riccati_parts.h"

/* Adds (log|entry| + sum of sign_k x_k)^2 to the normal equations M x = rhs. */
static void add_entry(struct fg_matrix M, double *rhs, double entry, int terms, const int *index,
                      const double *sign)
{
    if (entry == 0)
        return;
    double value = log(fabs(entry));
    for (int a = 0; a < terms; a++) {
        rhs[index[a]] -= sign[a] * value;
        for (int b = 0; b < terms; b++)
            FG_AT(M, index[a], index[b]) += sign[a] * sign[b];
    }
}

/* min over d, e, rate, size of the squares of
 *   log |A_ij| d_i / (d_j rate),   log |B_ij| d_i / (e_j rate),   log |Q_ij| / (d_i d_j size)
 * over the entries that are not 0. What they leave free (parts not connected) stays near 1. */
static void fit_logarithms(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, double *d,
                           struct fg_arena *scratch)
{
    const double ridge = 1e-6, most = 600; /* exp(600) is far beyond any unit, and finite when squared once */
    int n = A.rows, m = B.cols, count = n + m + 2, rate = n + m, size = rate + 1, one = 1, info = 0;
    struct fg_matrix M = fg_matrix_new(scratch, count, count);
    double *x = fg_arena_doubles(scratch, (size_t)count);
    if (scratch->failed)
        return;
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) {
            if (i == j)
                add_entry(M, x, FG_AT(A, i, j), 1, &rate, (double[]){-1});
            else
                add_entry(M, x, FG_AT(A, i, j), 3, (int[]){i, j, rate}, (double[]){1, -1, -1});
            if (i == j)
                add_entry(M, x, FG_AT(Q, i, j), 2, (int[]){i, size}, (double[]){-2, -1});
            else
                add_entry(M, x, FG_AT(Q, i, j), 3, (int[]){i, j, size}, (double[]){-1, -1, -1});
        }
    for (int j = 0; j < m; j++)
        for (int i = 0; i < n; i++)
            add_entry(M, x, FG_AT(B, i, j), 3, (int[]){i, n + j, rate}, (double[]){1, -1, -1});
    for (int i = 0; i < count; i++)
        FG_AT(M, i, i) += ridge;
    dpotrf_("U", &count, M.at, &count, &info, 1);
    if (info == 0)
        dpotrs_("U", &count, &one, M.at, &count, x, &count, &info, 1);
    for (int i = 0; i < n; i++)
        d[i] = info == 0 && fabs(x[i]) < most / 4 ? exp(x[i]) : 1;
}

void fg_limit_scaling(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, double *d,
                      struct fg_arena *scratch)
{
    enum { ROUNDS = 8 };
    int n = A.rows;
    struct fg_matrix unit = fg_matrix_copy(scratch, B), G = fg_matrix_new(scratch, n, n);
    struct fg_matrix weight = fg_matrix_copy(scratch, Q);
    double *before = fg_arena_doubles(scratch, (size_t)n);
    if (scratch->failed)
        return;
    fit_logarithms(A, B, Q, d, scratch);
    if (scratch->failed)
        return;
    for (int round = 0; round < ROUNDS; round++) {
        /* in the present scale: columns of B of the size of A, weights of the size of A */
        double size = 0, largest = 0;
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++) {
                double a = FG_AT(A, i, j) * d[i] / d[j];
                size += a * a;
                largest = fmax(largest, fabs(FG_AT(Q, i, j)) / d[i] / d[j]);
            }
        size = size > 0 ? sqrt(size / n) : 1;
        for (int j = 0; j < B.cols; j++) {
            double length = 0;
            for (int i = 0; i < n; i++)
                length += FG_AT(B, i, j) * FG_AT(B, i, j) * d[i] * d[i];
            for (int i = 0; i < n; i++)
                FG_AT(unit, i, j) = length > 0 ? FG_AT(B, i, j) * sqrt(size / length) : 0;
        }
        fg_multiply('N', 'T', 1, unit, unit, 0, G);
        for (size_t i = 0; i < (size_t)n * n; i++)
            weight.at[i] = largest > 0 ? Q.at[i] * (size / largest) : 0;
        memcpy(before, d, (size_t)n * sizeof *d);
        fg_riccati_balance(A, G, weight, d);
        if (memcmp(before, d, (size_t)n * sizeof *d) == 0)
            break;
    }
}
