/* A dense column-major matrix: element (i, j) is at[i + j * rows]. */
#ifndef FG_LINALG_MATRIX_H
#define FG_LINALG_MATRIX_H

#include <stdbool.h>
#include <stddef.h>

#include "base/arena.h"

struct fg_matrix {
    int rows, cols;
    double *at;
};

#define FG_AT(matrix, i, j) ((matrix).at[(size_t)(i) + (size_t)(j) * (size_t)(matrix).rows])

/* A zero matrix from the arena (at is NULL and arena->failed set when memory is out). */
struct fg_matrix fg_matrix_new(struct fg_arena *arena, int rows, int cols);
struct fg_matrix fg_matrix_copy(struct fg_arena *arena, struct fg_matrix a);
struct fg_matrix fg_matrix_transpose(struct fg_arena *arena, struct fg_matrix a);
struct fg_matrix fg_matrix_identity(struct fg_arena *arena, int n);
/* From / to the row-major arrays of the public header. */
struct fg_matrix fg_matrix_from_rows(struct fg_arena *arena, int rows, int cols, const double *rowmajor);
void fg_matrix_to_rows(struct fg_matrix a, double *rowmajor);

/* Memory in hand seen as a matrix. */
static inline struct fg_matrix fg_matrix_view(double *at, int rows, int cols)
{
    return (struct fg_matrix){rows, cols, at};
}

/* C = alpha op(A) op(B) + beta C, op = transpose where the character is 'T', as it is for 'N'. */
void fg_multiply(char ta, char tb, double alpha, struct fg_matrix a, struct fg_matrix b, double beta,
                 struct fg_matrix c);

bool fg_all_finite(size_t count, const double *at);
bool fg_matrix_is_zero(struct fg_matrix a);
double fg_matrix_max_abs(struct fg_matrix a);
double fg_matrix_trace_of_product(struct fg_matrix a, struct fg_matrix b); /* tr(A B), A r x c, B c x r */
void fg_matrix_symmetrise(struct fg_matrix a);                             /* A = (A + A') / 2 */

#endif
