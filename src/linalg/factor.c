#include "linalg/factor.h"

#include <math.h>

#include "linalg/lapack.h"

struct fg_matrix fg_factor(struct fg_arena *arena, struct fg_matrix S)
{
    return fg_factor_at(arena, S, -1); /* LAPACK's own: n * eps * largest diagonal */
}

struct fg_matrix fg_factor_at(struct fg_arena *arena, struct fg_matrix S, double tolerance)
{
    int n = S.rows, rank = 0, info = 0;
    struct fg_arena scratch = {0};
    struct fg_matrix U = fg_matrix_new(&scratch, n, n), H = {0, n, NULL};
    double *scale = fg_arena_doubles(&scratch, n), *work = fg_arena_doubles(&scratch, 2 * (size_t)n);
    int *pivot = fg_arena_ints(&scratch, n);
    if (scratch.failed) {
        fg_arena_release(&scratch);
        arena->failed = true;
        return H;
    }
    for (int i = 0; i < n; i++)
        scale[i] = FG_AT(S, i, i) > 0 ? sqrt(FG_AT(S, i, i)) : 0;
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++)
            FG_AT(U, i, j) = scale[i] > 0 && scale[j] > 0 ? FG_AT(S, i, j) / (scale[i] * scale[j]) : 0;
    if (n > 0 && fg_matrix_max_abs(U) > 0) {
        dpstrf_("U", &n, U.at, &n, pivot, &rank, &tolerance, work, &info, 1);
    }
    H = fg_matrix_new(arena, rank, n);
    if (H.at) /* P'SP = U'U: column j of U belongs to entry pivot[j] - 1 */
        for (int j = 0; j < n; j++)
            for (int i = 0; i < rank && i <= j; i++)
                FG_AT(H, i, pivot[j] - 1) = FG_AT(U, i, j) * scale[pivot[j] - 1];
    fg_arena_release(&scratch);
    return H;
}

bool fg_solve(struct fg_matrix A, int *pivots, struct fg_matrix B)
{
    const double one = 1;
    int n = A.rows, k = B.cols, info = 0;
    dgetrf_(&n, &n, A.at, &n, pivots, &info);
    if (info != 0)
        return false;
    for (int i = 0; i < n; i++) /* pivots count from 1 */
        for (int j = 0; j < k && pivots[i] != i + 1; j++) {
            double held = FG_AT(B, i, j);
            FG_AT(B, i, j) = FG_AT(B, pivots[i] - 1, j);
            FG_AT(B, pivots[i] - 1, j) = held;
        }
    dtrsm_("L", "L", "N", "U", &n, &k, &one, A.at, &n, B.at, &n, 1, 1, 1, 1);
    dtrsm_("L", "U", "N", "N", &n, &k, &one, A.at, &n, B.at, &n, 1, 1, 1, 1);
    return true;
}
