#include "linalg/lyapunov.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"

/* Both equations, and the Sylvester equations the recursion needs, are one form:
 *
 *   continuous  A X + X B' + C = 0         discrete  A X B' - X + C = 0
 *
 * A m x m, B n x n upper quasi-triangular, C m x n, X over C. The dual equations are turned into it by
 * reversing rows and columns: with J the exchange matrix, J T'J is again upper quasi-triangular. */

enum {
    LEAF = 24,  /* orders up to this go to the plain kernel; measured best of 12, 16, 24, 32, 48 */
    SIDE = LEAF /* scratch of the kernel */
};

/* Solves the k x k system M z = r (k <= 4, row-major M) by elimination with full row pivoting. */
static void solve_small(int k, double *M, double *r)
{
    for (int c = 0; c < k; c++) {
        int best = c;
        for (int i = c + 1; i < k; i++)
            if (fabs(M[i * k + c]) > fabs(M[best * k + c]))
                best = i;
        if (best != c) {
            for (int j = c; j < k; j++) {
                double keep = M[c * k + j];
                M[c * k + j] = M[best * k + j];
                M[best * k + j] = keep;
            }
            double keep = r[c];
            r[c] = r[best];
            r[best] = keep;
        }
        double pivot = 1 / M[c * k + c];
        for (int i = c + 1; i < k; i++) {
            double factor = M[i * k + c] * pivot;
            for (int j = c + 1; j < k; j++)
                M[i * k + j] -= factor * M[c * k + j];
            r[i] -= factor * r[c];
        }
    }
    for (int c = k - 1; c >= 0; c--) {
        for (int j = c + 1; j < k; j++)
            r[c] -= M[c * k + j] * r[j];
        r[c] /= M[c * k + c];
    }
}

/* Real solution of s y1 - d y2 = t1, d y1 + s y2 = t2: no cancellation in the denominator. */
static void rotate_back(double s, double d, double *t1, double *t2)
{
    double scale = 1 / (s * s + d * d), y1 = (s * *t1 + d * *t2) * scale;
    *t2 = (s * *t2 - d * *t1) * scale;
    *t1 = y1;
}

/* Balanced pairs have |b0| and |c0| within this factor squared; the closed form below is for those. */
static const double BALANCED = 4;

/* The same by elimination, for pairs that are nearly real and defective: there S is so far from the identity
 * that the closed form would lose digits. */
static void solve_unbalanced_pairs(bool discrete, const double *a, int lda, const double *b, int ldb,
                                   double *r)
{
    double M[16] = {0};
    for (int j = 0; j < 2; j++)
        for (int i = 0; i < 2; i++) {
            double *row = M + (j * 2 + i) * 4;
            for (int l = 0; l < 2; l++)
                for (int h = 0; h < 2; h++) {
                    double ab = a[i + h * lda] * b[j + l * ldb];
                    double sum = (j == l ? a[i + h * lda] : 0) + (i == h ? b[j + l * ldb] : 0);
                    row[l * 2 + h] = discrete ? ab - (i == h && j == l) : sum;
                }
        }
    solve_small(4, M, r);
}

/* Two complex pairs. dgees leaves a = [a0 b0; c0 a0] with b0 c0 < 0, that is a = S (a0 I + w J) S^-1 with
 * S = diag(1, sqrt(-c0 / b0)), w = b0 sqrt(-c0 / b0), J = [0 1; -1 0]. In Y = Sa^-1 x Sb^-1 the equation is
 *
 *   (a0 + b0) Y + wa J Y - wb Y J = T       or      (a0 I + wa J) Y (b0 I - wb J) - Y = T,
 *
 * which falls apart into span{I, J}, where Y commutes with J, and span{[1 0; 0 -1], [0 1; 1 0]}, where it
 * anticommutes: two rotations with scaling. */
static void solve_pairs(bool discrete, const double *a, int lda, const double *b, int ldb, double *r)
{
    double sa = sqrt(-a[1] / a[lda]), sb = sqrt(-b[1] / b[ldb]);
    if (!(fmax(sa, sb) < BALANCED && fmin(sa, sb) > 1 / BALANCED)) {
        solve_unbalanced_pairs(discrete, a, lda, b, ldb, r);
        return;
    }
    double wa = a[lda] * sa, wb = b[ldb] * sb, a0 = a[0], b0 = b[0];
    double T11 = r[0], T21 = r[1] / sa, T12 = r[2] / sb, T22 = r[3] / (sa * sb);
    double t1 = 0.5 * (T11 + T22), t2 = 0.5 * (T12 - T21), t3 = 0.5 * (T11 - T22), t4 = 0.5 * (T12 + T21);
    if (discrete) {
        rotate_back(a0 * b0 + wa * wb - 1, wa * b0 - a0 * wb, &t1, &t2);
        rotate_back(a0 * b0 - wa * wb - 1, -(wa * b0 + a0 * wb), &t3, &t4);
    } else {
        rotate_back(a0 + b0, wa - wb, &t1, &t2);
        rotate_back(a0 + b0, -(wa + wb), &t3, &t4);
    }
    r[0] = t1 + t3;
    r[1] = (t4 - t2) * sa;
    r[2] = (t4 + t2) * sb;
    r[3] = (t1 - t3) * (sa * sb);
}

/* One diagonal block pair: a x + x b' = r or a x b' - x = r, a p x p, b q x q, p and q 1 or 2, x over r
 * (r column-major p x q). */
static void solve_blocks(bool discrete, int p, int q, const double *a, int lda, const double *b, int ldb,
                         double *r)
{
    if (p == 2 && q == 2) {
        solve_pairs(discrete, a, lda, b, ldb, r);
    } else if (p * q == 2) {
        /* [d e; f d] with e f < 0: the determinant d^2 - e f is a sum of squares, so Cramer's rule loses
         * nothing */
        const double *two = p == 2 ? a : b;
        int ld = p == 2 ? lda : ldb;
        double one = p == 2 ? b[0] : a[0], factor = discrete ? one : 1, shift = discrete ? -1 : one;
        double d = factor * two[0] + shift, e = factor * two[ld], f = factor * two[1];
        double scale = 1 / (d * d - e * f), r0 = r[0];
        r[0] = (r0 * d - e * r[1]) * scale;
        r[1] = (d * r[1] - f * r0) * scale;
    } else {
        r[0] /= discrete ? a[0] * b[0] - 1 : a[0] + b[0];
    }
}

static int block_before(const double *T, int ld, int end) /* size of the diagonal block that ends at `end` */
{
    return end >= 2 && T[(end - 1) + (size_t)(end - 2) * ld] != 0 ? 2 : 1;
}

/* y(0..rows) -= x(0..rows) * factor */
static inline void subtract(int rows, double *restrict y, const double *restrict x, double factor)
{
    for (int i = 0; i < rows; i++)
        y[i] -= factor * x[i];
}

/* The kernel for m, n <= LEAF. `symmetric` says A = B, C = C': then only the upper half is solved and
 * mirrored. Column blocks from the last to the first, row blocks from the last to the first. */
static void leaf(bool discrete, bool symmetric, int m, int n, const double *A, int lda, const double *B,
                 int ldb, double *C, int ldc)
{
    double r[2 * SIDE], y[2 * SIDE];
    for (int end = n; end > 0;) {
        int q = block_before(B, ldb, end), j = end - q;
        int top = symmetric ? end : m; /* rows from `top` on are known by symmetry */
        for (int c = 0; c < q; c++) {
            double *rc = r + c * SIDE, *yc = y + c * SIDE;
            const double *Cc = C + (size_t)(j + c) * ldc;
            for (int i = 0; i < top; i++)
                rc[i] = -Cc[i];
            if (discrete)
                memset(yc, 0, (size_t)m * sizeof(double));
            for (int k = end; k < n; k++) {
                double factor = B[(j + c) + (size_t)k * ldb];
                if (discrete)
                    subtract(m, yc, C + (size_t)k * ldc, -factor);
                else
                    subtract(top, rc, C + (size_t)k * ldc, factor);
            }
        }
        for (int l = top; l < m; l++) { /* known rows, symmetric case only */
            for (int c = 0; c < q; c++) {
                double z = C[l + (size_t)(j + c) * ldc];
                if (discrete) {
                    z = y[c * SIDE + l];
                    for (int h = 0; h < q; h++)
                        z += C[l + (size_t)(j + h) * ldc] * B[(j + c) + (size_t)(j + h) * ldb];
                }
                subtract(top, r + c * SIDE, A + (size_t)l * lda, z);
            }
        }
        for (int stop = top; stop > 0;) {
            int p = block_before(A, lda, stop), i = stop - p;
            double x[4];
            for (int c = 0; c < q; c++)
                for (int h = 0; h < p; h++) {
                    double value = r[c * SIDE + i + h];
                    if (discrete)
                        for (int g = 0; g < p; g++)
                            value -= A[(i + h) + (size_t)(i + g) * lda] * y[c * SIDE + i + g];
                    x[c * p + h] = value;
                }
            solve_blocks(discrete, p, q, A + i + (size_t)i * lda, lda, B + j + (size_t)j * ldb, ldb, x);
            for (int c = 0; c < q; c++)
                for (int h = 0; h < p; h++) {
                    C[(i + h) + (size_t)(j + c) * ldc] = x[c * p + h];
                    double z = x[c * p + h];
                    if (discrete) {
                        z = y[c * SIDE + i + h];
                        for (int l = 0; l < q; l++)
                            z += x[l * p + h] * B[(j + c) + (size_t)(j + l) * ldb];
                    }
                    subtract(i, r + c * SIDE, A + (size_t)(i + h) * lda, z);
                }
            stop = i;
        }
        if (symmetric)
            for (int c = 0; c < q; c++)
                for (int i = 0; i < j; i++)
                    C[(j + c) + (size_t)i * ldc] = C[i + (size_t)(j + c) * ldc];
        end = j;
    }
}

static void gemm(char ta, char tb, int m, int n, int k, double alpha, const double *a, int lda,
                 const double *b, int ldb, double beta, double *c, int ldc)
{
    dgemm_(&ta, &tb, &m, &n, &k, &alpha, a, &lda, b, &ldb, &beta, c, &ldc, 1, 1);
}

/* Where to cut an order-n quasi-triangular matrix in two without cutting a 2 x 2 block. */
static int cut(const double *T, int ld, int n)
{
    int half = n / 2;
    return T[half + (size_t)(half - 1) * ld] != 0 ? half + 1 : half;
}

/* work: m x n doubles, discrete only. */
static void sylvester(bool discrete, int m, int n, const double *A, int lda, const double *B, int ldb,
                      double *C, int ldc, double *work)
{
    if (m <= LEAF && n <= LEAF) {
        leaf(discrete, false, m, n, A, lda, B, ldb, C, ldc);
    } else if (m >= n) {
        int h = cut(A, lda, m);
        const double *A12 = A + (size_t)h * lda, *A22 = A12 + h;
        sylvester(discrete, m - h, n, A22, lda, B, ldb, C + h, ldc, work);
        if (discrete) { /* C1 += A12 X2 B' */
            gemm('N', 'T', m - h, n, n, 1, C + h, ldc, B, ldb, 0, work, m - h);
            gemm('N', 'N', h, n, m - h, 1, A12, lda, work, m - h, 1, C, ldc);
        } else { /* C1 += A12 X2 */
            gemm('N', 'N', h, n, m - h, 1, A12, lda, C + h, ldc, 1, C, ldc);
        }
        sylvester(discrete, h, n, A, lda, B, ldb, C, ldc, work);
    } else {
        int h = cut(B, ldb, n);
        const double *B12 = B + (size_t)h * ldb, *B22 = B12 + h;
        double *C2 = C + (size_t)h * ldc;
        sylvester(discrete, m, n - h, A, lda, B22, ldb, C2, ldc, work);
        if (discrete) { /* C1 += A X2 B12' */
            gemm('N', 'T', m, h, n - h, 1, C2, ldc, B12, ldb, 0, work, m);
            gemm('N', 'N', m, h, m, 1, A, lda, work, m, 1, C, ldc);
        } else { /* C1 += X2 B12' */
            gemm('N', 'T', m, h, n - h, 1, C2, ldc, B12, ldb, 1, C, ldc);
        }
        sylvester(discrete, m, h, A, lda, B, ldb, C, ldc, work);
    }
}

static void lyapunov(bool discrete, int n, const double *T, int ldt, double *C, int ldc, double *work)
{
    if (n <= LEAF) {
        leaf(discrete, true, n, n, T, ldt, T, ldt, C, ldc);
        return;
    }
    int h = cut(T, ldt, n), g = n - h;
    const double *T12 = T + (size_t)h * ldt, *T22 = T12 + h;
    double *C12 = C + (size_t)h * ldc, *C22 = C12 + h;
    lyapunov(discrete, g, T22, ldt, C22, ldc, work);
    if (discrete) {
        /* C12 += T12 X22 T22';  C11 += T11 X12 T12' + (.)' + T12 X22 T12' */
        gemm('N', 'N', h, g, g, 1, T12, ldt, C22, ldc, 0, work, h); /* T12 X22 */
        gemm('N', 'T', h, g, g, 1, work, h, T22, ldt, 1, C12, ldc);
        double *half = work + (size_t)h * g; /* scratch of the solve, then T11 X12 + T12 X22 / 2 */
        sylvester(true, h, g, T, ldt, T22, ldt, C12, ldc, half);
        gemm('N', 'N', h, g, h, 1, T, ldt, C12, ldc, 0.5, work, h);
        gemm('N', 'T', h, h, g, 1, work, h, T12, ldt, 1, C, ldc);
        gemm('N', 'T', h, h, g, 1, T12, ldt, work, h, 1, C, ldc);
    } else {
        gemm('N', 'N', h, g, g, 1, T12, ldt, C22, ldc, 1, C12, ldc);
        sylvester(false, h, g, T, ldt, T22, ldt, C12, ldc, work);
        gemm('N', 'T', h, h, g, 1, T12, ldt, C12, ldc, 1, C, ldc);
        gemm('N', 'T', h, h, g, 1, C12, ldc, T12, ldt, 1, C, ldc);
    }
    lyapunov(discrete, h, T, ldt, C, ldc, work);
    for (int j = 0; j < h; j++)
        for (int i = 0; i < g; i++)
            C[(h + i) + (size_t)j * ldc] = C12[j + (size_t)i * ldc];
}

size_t fg_lyapunov_work(int n)
{
    return 2 * (size_t)n * (size_t)n + 1;
}

void fg_lyapunov_schur(bool discrete, int n, const double *T, double *C, double *work)
{
    lyapunov(discrete, n, T, n, C, n, work);
}

static void reverse(size_t count, double *at)
{
    for (size_t i = 0, k = count; i + 1 < k; i++) {
        k--;
        double keep = at[i];
        at[i] = at[k];
        at[k] = keep;
    }
}

void fg_lyapunov_reversed(int n, const double *T, double *reversed)
{
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++)
            reversed[i + (size_t)j * n] = T[(n - 1 - j) + (size_t)(n - 1 - i) * n];
}

void fg_lyapunov_schur_dual(bool discrete, int n, const double *reversed, double *C, double *work)
{
    reverse((size_t)n * n, C);
    lyapunov(discrete, n, reversed, n, C, n, work);
    reverse((size_t)n * n, C);
}

static int never(const double *re, const double *im)
{
    (void)re;
    (void)im;
    return 0;
}

bool fg_lyapunov(bool discrete, struct fg_matrix A, struct fg_matrix C, struct fg_matrix X,
                 bool *failed_memory)
{
    int n = A.rows, lwork = 8 * n + 64, info = 0, sdim = 0;
    *failed_memory = false;
    if (n == 0)
        return true;
    if (!fg_all_finite((size_t)n * n, A.at) || !fg_all_finite((size_t)n * n, C.at))
        return false;
    struct fg_arena arena = {0};
    struct fg_matrix T = fg_matrix_copy(&arena, A), Z = fg_matrix_new(&arena, n, n);
    struct fg_matrix S = fg_matrix_new(&arena, n, n), M = fg_matrix_new(&arena, n, n);
    double *wr = fg_arena_doubles(&arena, n), *wi = fg_arena_doubles(&arena, n);
    double *work = fg_arena_doubles(&arena, fg_lyapunov_work(n) + (size_t)lwork);
    bool good = !arena.failed;
    *failed_memory = arena.failed;
    if (good) {
        dgees_("V", "N", never, &n, T.at, &n, &sdim, wr, wi, Z.at, &n, work, &lwork, &sdim, &info, 1, 1);
        good = info == 0;
        for (int i = 0; good && i < n; i++)
            good = discrete ? hypot(wr[i], wi[i]) < 1 : wr[i] < 0;
    }
    if (good) {
        fg_multiply('T', 'N', 1, Z, C, 0, M);
        fg_multiply('N', 'N', 1, M, Z, 0, S);
        fg_matrix_symmetrise(S);
        fg_lyapunov_schur(discrete, n, T.at, S.at, work);
        fg_multiply('N', 'N', 1, Z, S, 0, M);
        fg_multiply('N', 'T', 1, M, Z, 0, X);
        fg_matrix_symmetrise(X);
        good = fg_all_finite((size_t)n * n, X.at);
    }
    fg_arena_release(&arena);
    return good;
}
