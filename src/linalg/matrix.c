#include "linalg/matrix.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"

struct fg_matrix fg_matrix_new(struct fg_arena *arena, int rows, int cols)
{
    return (struct fg_matrix){rows, cols, fg_arena_doubles(arena, (size_t)rows * (size_t)cols)};
}

struct fg_matrix fg_matrix_copy(struct fg_arena *arena, struct fg_matrix a)
{
    struct fg_matrix c = fg_matrix_new(arena, a.rows, a.cols);
    size_t count = (size_t)a.rows * (size_t)a.cols;
    if (c.at && a.at && count)
        memcpy(c.at, a.at, count * sizeof(double));
    return c;
}

struct fg_matrix fg_matrix_transpose(struct fg_arena *arena, struct fg_matrix a)
{
    struct fg_matrix c = fg_matrix_new(arena, a.cols, a.rows);
    if (c.at && a.at)
        for (int j = 0; j < a.cols; j++)
            for (int i = 0; i < a.rows; i++)
                FG_AT(c, j, i) = FG_AT(a, i, j);
    return c;
}

struct fg_matrix fg_matrix_identity(struct fg_arena *arena, int n)
{
    struct fg_matrix c = fg_matrix_new(arena, n, n);
    if (c.at)
        for (int i = 0; i < n; i++)
            FG_AT(c, i, i) = 1;
    return c;
}

struct fg_matrix fg_matrix_from_rows(struct fg_arena *arena, int rows, int cols, const double *rowmajor)
{
    struct fg_matrix c = fg_matrix_new(arena, rows, cols);
    if (c.at && rowmajor)
        for (int i = 0; i < rows; i++)
            for (int j = 0; j < cols; j++)
                FG_AT(c, i, j) = rowmajor[(size_t)i * (size_t)cols + (size_t)j];
    return c;
}

void fg_matrix_to_rows(struct fg_matrix a, double *rowmajor)
{
    for (int i = 0; i < a.rows; i++)
        for (int j = 0; j < a.cols; j++)
            rowmajor[(size_t)i * (size_t)a.cols + (size_t)j] = FG_AT(a, i, j);
}

/* Products below this many multiplications are done by plain loops: a dgemm call costs about 900
 * instructions before the first of them (and, in OpenBLAS, a lock that threads share). Measured on n = 4
 * to 12. */
enum { SMALL_PRODUCT = 400 };

/* The same for small matrices; a(i, k) = a.at[i * ai + k * ak], b alike. */
static void multiply_small(int inner, double alpha, const double *a, size_t ai, size_t ak, const double *b,
                           size_t bk, size_t bj, double beta, struct fg_matrix c)
{
    for (int j = 0; j < c.cols; j++) {
        double *to = c.at + (size_t)j * (size_t)c.rows;
        for (int i = 0; i < c.rows; i++)
            to[i] = beta == 0 ? 0 : beta * to[i];
        for (int k = 0; k < inner; k++) {
            double factor = alpha * b[(size_t)k * bk + (size_t)j * bj];
            const double *from = a + (size_t)k * ak;
            for (int i = 0; i < c.rows; i++)
                to[i] += factor * from[(size_t)i * ai];
        }
    }
}

void fg_multiply(char ta, char tb, double alpha, struct fg_matrix a, struct fg_matrix b, double beta,
                 struct fg_matrix c)
{
    int inner = ta == 'N' ? a.cols : a.rows;
    int lda = a.rows > 0 ? a.rows : 1, ldb = b.rows > 0 ? b.rows : 1, ldc = c.rows > 0 ? c.rows : 1;
    if (c.rows == 0 || c.cols == 0)
        return;
    if ((double)c.rows * c.cols * inner < SMALL_PRODUCT)
        multiply_small(inner, alpha, a.at, ta == 'N' ? 1 : (size_t)lda, ta == 'N' ? (size_t)lda : 1, b.at,
                       tb == 'N' ? 1 : (size_t)ldb, tb == 'N' ? (size_t)ldb : 1, beta, c);
    else
        dgemm_(&ta, &tb, &c.rows, &c.cols, &inner, &alpha, a.at, &lda, b.at, &ldb, &beta, c.at, &ldc, 1, 1);
}

bool fg_all_finite(size_t count, const double *at)
{
    double sum = 0; /* 0 * x is NaN exactly when x is not finite: one branch for the whole array */
    for (size_t i = 0; i < count; i++)
        sum += 0 * at[i];
    return sum == 0;
}

bool fg_matrix_is_zero(struct fg_matrix a)
{
    return fg_matrix_max_abs(a) == 0;
}

double fg_matrix_max_abs(struct fg_matrix a)
{
    double largest = 0;
    for (size_t i = 0; i < (size_t)a.rows * (size_t)a.cols; i++)
        largest = fmax(largest, fabs(a.at[i]));
    return largest;
}

double fg_matrix_trace_of_product(struct fg_matrix a, struct fg_matrix b)
{
    double sum = 0;
    for (int i = 0; i < a.rows; i++)
        for (int j = 0; j < a.cols; j++)
            sum += FG_AT(a, i, j) * FG_AT(b, j, i);
    return sum;
}

void fg_matrix_symmetrise(struct fg_matrix a)
{
    for (int j = 0; j < a.cols; j++)
        for (int i = 0; i < j; i++) {
            double mean = 0.5 * (FG_AT(a, i, j) + FG_AT(a, j, i));
            FG_AT(a, i, j) = FG_AT(a, j, i) = mean;
        }
}
