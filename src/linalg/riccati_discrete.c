/* A'S A - S - (A'S B + N)(R + B'S B)^-1 (B'S A + N') + Q = 0 (linalg/riccati.h).
 *
 * With R = U'U and the cross term removed, S belongs to the eigenvalues |z| < 1 of the pencil
 *     M - z L,   M = [An 0; -Qn I],   L = [I G; 0 An'],
 * and s = (z - 1)/(z + 1) maps them to the negative eigenvalues of the Hamiltonian matrix
 *     H = (M + L)^-1 (M - L),
 * also where A is singular (z = 0 and infinity become -1 and 1). No eigenvalue is at z = -1 when a
 * stabilising solution exists. Newton steps on the equation as given remove what this lost.
 *
 * R singular or nearly so: S = c I + S^ and the same equation for S^ with
 *     Q^ = Q + c (A'A - I),  R^ = R + c B'B,  N^ = N + c A'B. */
#include "linalg/riccati.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/riccati_parts.h"

static double smallest_over_largest(struct fg_arena *arena, struct fg_matrix R)
{
    int m = R.rows, info = 0, lwork = 4 * m + 4;
    struct fg_matrix copy = fg_matrix_copy(arena, R);
    double *w = fg_arena_doubles(arena, m), *work = fg_arena_doubles(arena, lwork);
    if (arena->failed || !fg_all_finite((size_t)m * m, copy.at))
        return 0;
    dsyev_("N", "U", &m, copy.at, &m, w, work, &lwork, &info, 1, 1);
    return info == 0 && w[m - 1] > 0 ? w[0] / w[m - 1] : 0;
}

static bool first_solution(struct fg_arena *arena, struct fg_riccati_scaled p, struct fg_matrix S)
{
    const double well_conditioned = 1e-8; /* R below this is used with the shift */
    int n = p.A.rows, n2 = 2 * n, info = 0;
    struct fg_matrix B = fg_matrix_copy(arena, p.B), N = fg_matrix_copy(arena, p.N);
    struct fg_matrix R = fg_matrix_copy(arena, p.R), Q = fg_matrix_copy(arena, p.Q);
    struct fg_matrix H = fg_matrix_new(arena, n2, n2), left = fg_matrix_new(arena, n2, n2);
    struct fg_matrix An = fg_matrix_new(arena, n, n), Qn = fg_matrix_new(arena, n, n);
    struct fg_matrix G = fg_matrix_new(arena, n, n);
    int *pivot = fg_arena_ints(arena, n2);
    if (arena->failed)
        return false;
    double c = 0;
    if (smallest_over_largest(arena, R) < well_conditioned) {
        c = fg_matrix_max_abs(Q);
        if (c == 0)
            c = 1;
        fg_multiply('T', 'N', c, p.A, p.A, 1, Q);
        fg_multiply('T', 'N', c, p.B, p.B, 1, R);
        fg_multiply('T', 'N', c, p.A, p.B, 1, N);
        for (int i = 0; i < n; i++)
            FG_AT(Q, i, i) -= c;
    }
    if (arena->failed || !fg_riccati_uncross(p.A, B, Q, R, N, An, Qn, G))
        return false;
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) {
            double one = i == j ? 1 : 0;
            FG_AT(left, i, j) = FG_AT(An, i, j) + one;
            FG_AT(left, i, n + j) = FG_AT(G, i, j);
            FG_AT(left, n + i, j) = -FG_AT(Qn, i, j);
            FG_AT(left, n + i, n + j) = FG_AT(An, j, i) + one;
            FG_AT(H, i, j) = FG_AT(An, i, j) - one;
            FG_AT(H, i, n + j) = -FG_AT(G, i, j);
            FG_AT(H, n + i, j) = -FG_AT(Qn, i, j);
            FG_AT(H, n + i, n + j) = one - FG_AT(An, j, i);
        }
    dgesv_(&n2, &n2, left.at, &n2, pivot, H.at, &n2, &info);
    if (info != 0 || !fg_hamiltonian_solution(arena, H, S))
        return false;
    for (int i = 0; i < n; i++)
        FG_AT(S, i, i) += c;
    return true;
}

bool fg_riccati_discrete(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                         struct fg_matrix N, struct fg_matrix S, struct fg_matrix L, bool *failed_memory)
{
    struct fg_arena arena = {0};
    *failed_memory = false;
    if (A.rows == 0)
        return true;
    struct fg_riccati_scaled p = fg_riccati_scale(&arena, A, B, Q, R, N);
    bool good = !arena.failed && first_solution(&arena, p, S) && fg_riccati_refine(true, &arena, p, S, L);
    if (good)
        fg_riccati_unscale(p, S, L);
    *failed_memory = arena.failed;
    fg_arena_release(&arena);
    return good;
}
