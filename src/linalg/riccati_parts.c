#include "linalg/riccati_parts.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/lyapunov.h"

static double power_of_two(double value)
{
    int exponent = 0;
    frexp(value, &exponent);
    if (exponent > 400)
        exponent = 400;
    if (exponent < -400)
        exponent = -400;
    return ldexp(1, exponent);
}

void fg_riccati_balance(struct fg_matrix A, struct fg_matrix G, struct fg_matrix Q, double *d)
{
    enum { SWEEPS = 100 };
    /* Entries of rounding size must not drive the scale: the diagonal counts on both sides (as in LAPACK's
     * dgebal since 3.5), and so does this part of the largest entry. */
    const double negligible = 1e-10;
    int n = A.rows;
    for (int sweep = 0; sweep < SWEEPS; sweep++) {
        bool moved = false;
        double largest = 0;
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++)
                largest = fmax(largest, fabs(FG_AT(A, i, j)) * d[i] / d[j]);
        for (int i = 0; i < n; i++) {
            double least = negligible * largest, row = 0, column = 0;
            for (int j = 0; j < n; j++) {
                double up = FG_AT(A, i, j) * d[i] / d[j], gain = FG_AT(G, i, j) * d[i] * d[j];
                double down = FG_AT(A, j, i) * d[j] / d[i], weight = FG_AT(Q, i, j) / (d[i] * d[j]);
                row += up * up + gain * gain;
                column += down * down + weight * weight;
            }
            row += row > 0 ? least * least : 0;
            column += column > 0 ? least * least : 0;
            if (!(row > 0) || !(column > 0) || !isfinite(row) || !isfinite(column))
                continue;
            /* The exact factor is (column / row)^(1/4) when the terms linear in d rule and half that in
             * the logarithm when G_ii and Q_ii do; the smaller step converges in both cases. */
            double step = pow(column / row, 0.125);
            if (step > 1.1 || step < 1 / 1.1) {
                d[i] *= step;
                moved = true;
            }
        }
        if (!moved)
            break;
    }
    for (int i = 0; i < n; i++)
        d[i] = power_of_two(d[i]);
}

bool fg_riccati_uncross(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                        struct fg_matrix N, struct fg_matrix An, struct fg_matrix Qn, struct fg_matrix G)
{
    int n = A.rows, m = B.cols, info = 0;
    double one = 1;
    dpotrf_("U", &m, R.at, &m, &info, 1);
    if (info != 0)
        return false;
    dtrsm_("R", "U", "N", "N", &n, &m, &one, R.at, &m, B.at, &n, 1, 1, 1, 1);
    dtrsm_("R", "U", "N", "N", &n, &m, &one, R.at, &m, N.at, &n, 1, 1, 1, 1);
    memcpy(An.at, A.at, (size_t)n * n * sizeof(double));
    memcpy(Qn.at, Q.at, (size_t)n * n * sizeof(double));
    fg_multiply('N', 'T', -1, B, N, 1, An);
    fg_multiply('N', 'T', -1, N, N, 1, Qn);
    fg_multiply('N', 'T', 1, B, B, 0, G);
    return fg_all_finite((size_t)n * n, An.at) && fg_all_finite((size_t)n * n, Qn.at) &&
           fg_all_finite((size_t)n * n, G.at);
}

struct fg_riccati_scaled fg_riccati_scale(struct fg_arena *arena, struct fg_matrix A, struct fg_matrix B,
                                          struct fg_matrix Q, struct fg_matrix R, struct fg_matrix N)
{
    int n = A.rows, m = B.cols;
    struct fg_riccati_scaled s = {fg_matrix_copy(arena, A),          fg_matrix_copy(arena, B),
                                  fg_matrix_copy(arena, Q),          fg_matrix_copy(arena, R),
                                  fg_matrix_copy(arena, N),          fg_arena_doubles(arena, (size_t)n),
                                  fg_arena_doubles(arena, (size_t)m)};
    struct fg_matrix G = fg_matrix_new(arena, n, n);
    if (arena->failed)
        return s;
    for (int i = 0; i < n; i++)
        s.d[i] = 1;
    for (int j = 0; j < m; j++) {
        double sum = 0;
        for (int i = 0; i < n; i++)
            sum += FG_AT(B, i, j) * FG_AT(B, i, j);
        s.e[j] = FG_AT(R, j, j) > 0 ? sqrt(FG_AT(R, j, j)) : sum > 0 ? sqrt(sum) : 1;
        for (int i = 0; i < n; i++) {
            FG_AT(s.B, i, j) /= s.e[j];
            FG_AT(s.N, i, j) /= s.e[j];
        }
    }
    for (int j = 0; j < m; j++)
        for (int i = 0; i < m; i++)
            FG_AT(s.R, i, j) = FG_AT(R, i, j) / s.e[i] / s.e[j];
    fg_multiply('N', 'T', 1, s.B, s.B, 0, G);
    fg_riccati_balance(A, G, Q, s.d);
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) {
            FG_AT(s.A, i, j) = FG_AT(A, i, j) * (s.d[i] / s.d[j]);
            FG_AT(s.Q, i, j) = FG_AT(Q, i, j) / s.d[i] / s.d[j];
        }
    for (int j = 0; j < m; j++)
        for (int i = 0; i < n; i++) {
            FG_AT(s.B, i, j) *= s.d[i];
            FG_AT(s.N, i, j) /= s.d[i];
        }
    return s;
}

static int left_half_plane(const double *re, const double *im)
{
    (void)im;
    return *re < 0;
}

bool fg_hamiltonian_solution(struct fg_arena *arena, struct fg_matrix H, struct fg_matrix S)
{
    int n2 = H.rows, n = n2 / 2, info = 0, count = 0, lwork = -1;
    double best = 0, *re = fg_arena_doubles(arena, n2), *im = fg_arena_doubles(arena, n2);
    int *flags = fg_arena_ints(arena, n2), *pivot = fg_arena_ints(arena, n);
    struct fg_matrix Z = fg_matrix_new(arena, n2, n2), U = fg_matrix_new(arena, n, n);
    if (arena->failed || !fg_all_finite((size_t)n2 * n2, H.at))
        return false;
    dgees_("V", "S", left_half_plane, &n2, H.at, &n2, &count, re, im, Z.at, &n2, &best, &lwork, flags, &info,
           1, 1);
    lwork = (int)best;
    double *work = fg_arena_doubles(arena, (size_t)lwork);
    if (!work)
        return false;
    dgees_("V", "S", left_half_plane, &n2, H.at, &n2, &count, re, im, Z.at, &n2, work, &lwork, flags, &info,
           1, 1);
    if ((info != 0 && info != n2 + 2) || count != n) /* n2 + 2: moved across 0 by rounding, judged later */
        return false;
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) { /* U1' S' = U2' */
            FG_AT(U, j, i) = FG_AT(Z, i, j);
            FG_AT(S, j, i) = FG_AT(Z, n + i, j);
        }
    dgesv_(&n, &n, U.at, &n, pivot, S.at, &n, &info);
    if (info != 0 || !fg_all_finite((size_t)n * n, S.at))
        return false;
    fg_matrix_symmetrise(S);
    return true;
}

/* L = M^-1 (B'S + N') with M = R, or M = R + B'S B and L = M^-1 (B'S A + N'). SB n x m and M m x m scratch.
 */
static bool gain(bool discrete, struct fg_riccati_scaled p, struct fg_matrix S, struct fg_matrix SB,
                 struct fg_matrix M, struct fg_matrix L)
{
    int n = p.A.rows, m = p.B.cols, info = 0;
    fg_multiply('N', 'N', 1, S, p.B, 0, SB);
    memcpy(M.at, p.R.at, (size_t)m * m * sizeof(double));
    for (int i = 0; i < m; i++)
        for (int j = 0; j < n; j++)
            FG_AT(L, i, j) = FG_AT(p.N, j, i) + (discrete ? 0 : FG_AT(SB, j, i));
    if (discrete) {
        fg_multiply('T', 'N', 1, p.B, SB, 1, M);
        fg_multiply('T', 'N', 1, SB, p.A, 1, L);
    }
    if (!fg_all_finite((size_t)m * m, M.at) || !fg_all_finite((size_t)m * n, L.at))
        return false;
    dpotrf_("U", &m, M.at, &m, &info, 1);
    if (info == 0)
        dpotrs_("U", &m, &n, M.at, &m, L.at, &m, &info, 1);
    return info == 0;
}

/* Largest |a - b|_ij / sqrt(b_ii b_jj), with diagonals below 1e-14 of the largest raised to that. */
static double relative_change(struct fg_matrix a, struct fg_matrix b)
{
    double top = 0, worst = 0;
    for (int i = 0; i < b.rows; i++)
        top = fmax(top, fabs(FG_AT(b, i, i)));
    if (top == 0)
        return fg_matrix_max_abs(a) > 0 ? INFINITY : 0;
    for (int j = 0; j < b.rows; j++)
        for (int i = 0; i < b.rows; i++) {
            double si = fmax(FG_AT(b, i, i), 1e-14 * top), sj = fmax(FG_AT(b, j, j), 1e-14 * top);
            worst = fmax(worst, fabs(FG_AT(a, i, j) - FG_AT(b, i, j)) / sqrt(si) / sqrt(sj));
        }
    return worst;
}

static double absolute_change(struct fg_matrix a, struct fg_matrix b)
{
    double worst = 0;
    for (size_t i = 0; i < (size_t)a.rows * a.cols; i++)
        worst = fmax(worst, fabs(a.at[i] - b.at[i]));
    return worst;
}

bool fg_riccati_refine(bool discrete, struct fg_arena *arena, struct fg_riccati_scaled p, struct fg_matrix S,
                       struct fg_matrix L)
{
    enum { STEPS = 60 };
    const double enough = 1e-15; /* relative change at which nothing more can be gained */
    const double settled = 1e-5; /* a relative change that stops falling above this is not convergence ... */
    /* ... unless S is nothing but rounding (its true value 0) beside what Q costs in one time constant, or
     * what still moves is rounding beside the largest entries of S */
    const double nearly = 1e-2, beside = 1e-10;
    double zero = 1e-8 * fg_matrix_max_abs(p.Q) / (discrete ? 1 : fmax(fg_matrix_max_abs(p.A), 1e-300));
    int n = p.A.rows, m = p.B.cols;
    struct fg_matrix SB = fg_matrix_new(arena, n, m), M = fg_matrix_new(arena, m, m);
    struct fg_matrix RL = fg_matrix_new(arena, m, n), Qcl = fg_matrix_new(arena, n, n);
    struct fg_matrix Acl = fg_matrix_new(arena, n, n), next = fg_matrix_new(arena, n, n);
    if (arena->failed)
        return false;
    double last = INFINITY, last_absolute = INFINITY; /* the smallest changes so far */
    for (int step = 0; step < STEPS; step++) {
        if (!gain(discrete, p, S, SB, M, L))
            return false;
        memcpy(Qcl.at, p.Q.at, (size_t)n * n * sizeof(double));
        fg_multiply('N', 'N', 1, p.R, L, 0, RL);
        fg_multiply('T', 'N', 1, L, RL, 1, Qcl);
        fg_multiply('N', 'N', -1, p.N, L, 1, Qcl);
        fg_multiply('T', 'T', -1, L, p.N, 1, Qcl);
        fg_matrix_symmetrise(Qcl);
        for (int j = 0; j < n; j++) /* Acl' = (A - B L)' */
            for (int i = 0; i < n; i++)
                FG_AT(Acl, j, i) = FG_AT(p.A, i, j);
        fg_multiply('T', 'T', -1, L, p.B, 1, Acl);
        bool memory = false;
        if (!fg_lyapunov(discrete, Acl, Qcl, next, &memory)) {
            arena->failed = arena->failed || memory;
            return false;
        }
        double moved = relative_change(S, next), absolute = absolute_change(S, next);
        bool stands = step > 0 && moved >= 0.9 * last,
             stands_still = stands && absolute >= 0.9 * last_absolute;
        bool rounding = absolute < zero || (moved < nearly && absolute < beside * fg_matrix_max_abs(next));
        if ((stands && moved < settled) || (stands_still && rounding))
            return gain(discrete, p, S, SB, M, L);
        memcpy(S.at, next.at, (size_t)n * n * sizeof(double));
        if (moved <= enough)
            return gain(discrete, p, S, SB, M, L);
        last = fmin(last, moved);
        last_absolute = fmin(last_absolute, absolute);
    }
    return false;
}

void fg_riccati_unscale(struct fg_riccati_scaled p, struct fg_matrix S, struct fg_matrix L)
{
    int n = S.rows, m = L.rows;
    for (int j = 0; j < n; j++) {
        for (int i = 0; i < n; i++)
            FG_AT(S, i, j) = FG_AT(S, i, j) * p.d[i] * p.d[j];
        for (int i = 0; i < m; i++)
            FG_AT(L, i, j) = FG_AT(L, i, j) * p.d[j] / p.e[i];
    }
}
