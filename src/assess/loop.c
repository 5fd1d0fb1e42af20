#include "assess/loop.h"

#include <float.h>
#include <math.h>
#include <string.h>

#include "linalg/lapack.h"

bool fg_loop_eigenvalues(int n, double *a, double *re, double *im, struct fg_arena *scratch)
{
    int info = 0, one = 1, query = -1;
    double none[1], wanted = 0;
    if (n == 0)
        return true;
    if (!fg_all_finite((size_t)n * (size_t)n, a))
        return false;
    dgeev_("N", "N", &n, a, &n, re, im, none, &one, none, &one, &wanted, &query, &info, 1, 1);
    int room = (int)fmax(wanted, 4.0 * n);
    double *work = fg_arena_doubles(scratch, (size_t)room);
    if (!work)
        return false;
    dgeev_("N", "N", &n, a, &n, re, im, none, &one, none, &one, work, &room, &info, 1, 1);
    return info == 0 && fg_all_finite((size_t)n, re) && fg_all_finite((size_t)n, im);
}

/* A, B, C -> S^-1 A S, S^-1 B, C S with powers of two that even out the rows and columns of A. */
static void balance(struct fg_matrix A, struct fg_matrix B, struct fg_matrix C, double *scale)
{
    int n = A.rows, low, high, info;
    dgebal_("S", &n, A.at, &n, &low, &high, scale, &info, 1);
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < B.cols; j++)
            FG_AT(B, i, j) /= scale[i];
        for (int j = 0; j < C.rows; j++)
            FG_AT(C, j, i) *= scale[i];
    }
}

/* z = (1 + s)/(1 - s):  A -> (A + I)^-1 (A - I), B -> r (A + I)^-1 B, C -> r C (A + I)^-1,
 * D -> D - C (A + I)^-1 B, r = sqrt 2. A stable loop has no pole at z = -1. */
static bool to_half_plane(struct fg_matrix A, struct fg_matrix B, struct fg_matrix C, struct fg_matrix D,
                          struct fg_arena *scratch)
{
    int n = A.rows, m = B.cols, info = 0;
    struct fg_matrix lu = fg_matrix_copy(scratch, A), Ct = fg_matrix_transpose(scratch, C);
    int *pivots = fg_arena_ints(scratch, (size_t)n);
    if (scratch->failed)
        return false;
    for (int i = 0; i < n; i++) {
        FG_AT(lu, i, i) += 1;
        FG_AT(A, i, i) -= 1;
    }
    dgetrf_(&n, &n, lu.at, &n, pivots, &info);
    if (info != 0)
        return false;
    dgetrs_("N", &n, &n, lu.at, &n, pivots, A.at, &n, &info, 1);
    dgetrs_("N", &n, &m, lu.at, &n, pivots, B.at, &n, &info, 1);
    fg_multiply('N', 'N', -1, C, B, 1, D);
    dgetrs_("T", &n, &m, lu.at, &n, pivots, Ct.at, &n, &info, 1);
    for (int i = 0; i < n; i++)
        for (int j = 0; j < m; j++) {
            FG_AT(B, i, j) *= sqrt(2.0);
            FG_AT(C, j, i) = sqrt(2.0) * FG_AT(Ct, i, j);
        }
    return true;
}

/* A -> Q'A Q upper Hessenberg, B -> Q'B, C -> C Q. */
static bool to_hessenberg(struct fg_matrix A, struct fg_matrix B, struct fg_matrix C,
                          struct fg_arena *scratch)
{
    int n = A.rows, low = 1, room = 64 * n + 64, info = 0;
    if (n < 2)
        return true;
    struct fg_matrix Q = fg_matrix_new(scratch, n, n), B0 = fg_matrix_copy(scratch, B);
    struct fg_matrix C0 = fg_matrix_copy(scratch, C);
    double *tau = fg_arena_doubles(scratch, (size_t)n), *work = fg_arena_doubles(scratch, (size_t)room);
    if (scratch->failed)
        return false;
    dgehrd_(&n, &low, &n, A.at, &n, tau, work, &room, &info);
    memcpy(Q.at, A.at, (size_t)n * (size_t)n * sizeof(double));
    dorghr_(&n, &low, &n, Q.at, &n, tau, work, &room, &info);
    for (int j = 0; j < n; j++)
        for (int i = j + 2; i < n; i++)
            FG_AT(A, i, j) = 0;
    fg_multiply('T', 'N', 1, Q, B0, 0, B);
    fg_multiply('N', 'N', 1, C0, Q, 0, C);
    return true;
}

/* E = (I + K D)^-1 (m x m), F = E K (m x p); false when ill posed. */
static bool well_posed(struct fg_matrix K, struct fg_matrix D, struct fg_matrix E, struct fg_matrix F,
                       struct fg_arena *scratch)
{
    int m = K.rows, p = K.cols, info = 0;
    struct fg_matrix lu = fg_matrix_identity(scratch, m);
    int *pivots = fg_arena_ints(scratch, (size_t)m);
    if (scratch->failed)
        return false;
    fg_multiply('N', 'N', 1, K, D, 1, lu);
    memcpy(F.at, K.at, (size_t)m * (size_t)p * sizeof(double));
    for (int i = 0; i < m; i++)
        FG_AT(E, i, i) = 1;
    dgetrf_(&m, &m, lu.at, &m, pivots, &info);
    if (info != 0)
        return false;
    dgetrs_("N", &m, &p, lu.at, &m, pivots, F.at, &m, &info, 1);
    dgetrs_("N", &m, &m, lu.at, &m, pivots, E.at, &m, &info, 1);
    return true;
}

static bool find_poles(struct fg_loop *loop, struct fg_matrix A, struct fg_arena *scratch)
{
    struct fg_matrix copy = fg_matrix_copy(scratch, A);
    if (scratch->failed || !fg_loop_eigenvalues(loop->n, copy.at, loop->re, loop->im, scratch))
        return false;
    loop->stable = true;
    loop->slowest = INFINITY;
    loop->fastest = 0;
    for (int k = 0; k < loop->n; k++) {
        double size = hypot(loop->re[k], loop->im[k]);
        loop->stable = loop->stable && (loop->discrete ? size < 1 : loop->re[k] < 0);
        if (loop->discrete) { /* s = (z - 1) / (z + 1) */
            double complex z = loop->re[k] + I * loop->im[k], s = (z - 1) / (z + 1);
            loop->re[k] = creal(s);
            loop->im[k] = cimag(s);
            size = cabs(s);
        }
        loop->slowest = fmin(loop->slowest, size);
        loop->fastest = fmax(loop->fastest, size);
    }
    return true;
}

static void fill_rows(struct fg_loop *loop)
{
    size_t n = (size_t)loop->n, m = (size_t)loop->m;
    for (size_t i = 0; i < n; i++) {
        double *row = loop->rows + i * (n + m);
        for (size_t j = 0; j < n; j++)
            row[j] = -loop->A[i + j * n];
        for (size_t j = 0; j < m; j++)
            row[n + j] = loop->B[i + j * n];
    }
}

flatgain_status fg_loop_build(const struct fg_plant *plant, struct fg_matrix K, struct fg_arena *arena,
                              struct fg_loop *loop, flatgain_error *error)
{
    int n = plant->n, m = plant->m, p = plant->p;
    struct fg_arena scratch = {0};
    struct fg_matrix E = fg_matrix_new(&scratch, m, m), F = fg_matrix_new(&scratch, m, p);
    struct fg_matrix A = fg_matrix_copy(arena, plant->A), B = fg_matrix_new(arena, n, m);
    struct fg_matrix C = fg_matrix_new(arena, m, n), D = fg_matrix_new(arena, m, m);
    double *scale = fg_arena_doubles(&scratch, (size_t)n);
    *loop = (struct fg_loop){.n = n,
                             .m = m,
                             .discrete = plant->discrete,
                             .A = A.at,
                             .B = B.at,
                             .C = C.at,
                             .D = D.at,
                             .re = fg_arena_doubles(arena, (size_t)n),
                             .im = fg_arena_doubles(arena, (size_t)n),
                             .rows = fg_arena_doubles(arena, (size_t)n * (size_t)(n + m)),
                             .solve = fg_arena_doubles(arena, 2 * (size_t)n * (size_t)(n + m))};
    bool good = !scratch.failed && !arena->failed && well_posed(K, plant->D, E, F, &scratch);
    if (good) {
        fg_multiply('N', 'N', 1, F, plant->C, 0, C);
        fg_multiply('N', 'N', 1, F, plant->D, 0, D);
        fg_multiply('N', 'N', 1, plant->B, E, 0, B);
        fg_multiply('N', 'N', -1, plant->B, C, 1, A);
        good = fg_all_finite((size_t)n * (size_t)n, A.at) && fg_all_finite((size_t)n * (size_t)m, B.at) &&
               fg_all_finite((size_t)n * (size_t)m, C.at) && fg_all_finite((size_t)m * (size_t)m, D.at);
    }
    if (good) {
        balance(A, B, C, scale);
        good = find_poles(loop, A, &scratch);
    }
    if (good && loop->discrete && loop->stable) {
        good = to_half_plane(A, B, C, D, &scratch);
        if (good)
            balance(A, B, C, scale);
    }
    good = good && fg_all_finite((size_t)n * (size_t)n, A.at) && to_hessenberg(A, B, C, &scratch);
    if (good)
        fill_rows(loop);
    bool memory = scratch.failed || arena->failed;
    fg_arena_release(&scratch);
    if (memory)
        return fg_no_memory(error);
    return good ? FLATGAIN_OK
                : fg_fail(error, FLATGAIN_NUMERICAL, "the closed loop is ill posed or cannot be computed");
}

/* b -= f a for complex rows, from column `from` on. */
static void eliminate(int columns, int from, double fr, double fi, const double *restrict ar,
                      const double *restrict ai, double *restrict br, double *restrict bi)
{
    for (int j = from; j < columns; j++) {
        br[j] -= fr * ar[j] - fi * ai[j];
        bi[j] -= fr * ai[j] + fi * ar[j];
    }
}

/* (j w I - A) X = B by elimination with row exchanges; A is Hessenberg, so each step touches two rows.
 * Real and imaginary parts apart and row by row: the compiler's complex product checks for NaN. */
void fg_loop_evaluate(const struct fg_loop *loop, double w, double complex *T, double *noise)
{
    int n = loop->n, m = loop->m, width = n + m;
    size_t row = (size_t)width;
    double *re = loop->solve, *im = re + (size_t)n * row;
    for (int i = 0; i < m * m; i++)
        T[i] = loop->D[i];
    for (int i = 0; noise && i < m; i++)
        noise[i] = 10 * DBL_EPSILON * fabs(loop->D[i + i * m]);
    if (isinf(w))
        return;
    memset(im, 0, (size_t)n * row * sizeof(double));
    memcpy(re, loop->rows, (size_t)n * row * sizeof(double));
    for (int i = 0; i < n; i++)
        im[(size_t)i * (row + 1)] += w;
    for (int k = 0; k + 1 < n; k++) {
        double *ar = re + (size_t)k * row, *ai = im + (size_t)k * row, *br = ar + row, *bi = ai + row;
        if (hypot(br[k], bi[k]) > hypot(ar[k], ai[k]))
            for (int j = k; j < width; j++) {
                double keep = ar[j];
                ar[j] = br[j];
                br[j] = keep;
                keep = ai[j];
                ai[j] = bi[j];
                bi[j] = keep;
            }
        double size = ar[k] * ar[k] + ai[k] * ai[k];
        double fr = (br[k] * ar[k] + bi[k] * ai[k]) / size, fi = (bi[k] * ar[k] - br[k] * ai[k]) / size;
        if (fr != 0 || fi != 0)
            eliminate(width, k + 1, fr, fi, ar, ai, br, bi);
    }
    for (int k = n - 1; k >= 0; k--) {
        double *ar = re + (size_t)k * row, *ai = im + (size_t)k * row;
        double size = ar[k] * ar[k] + ai[k] * ai[k];
        for (int j = n; j < width; j++) {
            double xr = ar[j], xi = ai[j];
            for (int l = k + 1; l < n; l++) {
                double yr = re[(size_t)l * row + (size_t)j], yi = im[(size_t)l * row + (size_t)j];
                xr -= ar[l] * yr - ai[l] * yi;
                xi -= ar[l] * yi + ai[l] * yr;
            }
            ar[j] = (xr * ar[k] + xi * ai[k]) / size;
            ai[j] = (xi * ar[k] - xr * ai[k]) / size;
        }
    }
    for (int j = 0; j < m; j++)
        for (int i = 0; i < m; i++) {
            double sum_r = 0, sum_i = 0, sum_abs = fabs(loop->D[i + j * m]);
            for (int k = 0; k < n; k++) {
                double c = loop->C[(size_t)i + (size_t)k * (size_t)m];
                double xr = re[(size_t)k * row + (size_t)(n + j)], xi = im[(size_t)k * row + (size_t)(n + j)];
                sum_r += c * xr;
                sum_i += c * xi;
                sum_abs += fabs(c) * (fabs(xr) + fabs(xi));
            }
            T[i + j * m] += sum_r + I * sum_i;
            if (noise && i == j)
                noise[i] = 10 * DBL_EPSILON * sum_abs;
        }
}

double fg_loop_frequency(const struct fg_loop *loop, double w)
{
    if (loop->discrete)
        return 2 * atan(w);
    return isinf(w) ? NAN : w;
}
