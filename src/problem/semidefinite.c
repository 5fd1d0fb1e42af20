/* Symmetric and semidefinite up to rounding: judged in units of the matrix's own diagonal. */
#include "problem/check.h"

#include <math.h>

#include "base/number.h"
#include "linalg/lapack.h"

/* Relative size, after scaling to unit diagonal, of what counts as rounding by the person who typed the
 * matrix (four digits are common in publications) ... */
static const double PROJECT_LIMIT = 1e-4;
/* ... and of what counts as rounding by the computer that made it, which is not worth a warning. */
static const double SILENT_LIMIT = 1e-12;

/* s_i = sqrt(M_ii). A diagonal of zero has no scale of its own and takes the largest one; so does a
 * negative one that is only a rounding error (SILENT_LIMIT of the largest). */
static void own_scales(struct fg_matrix M, double *scale)
{
    double largest = 0;
    for (int i = 0; i < M.rows; i++)
        largest = fmax(largest, FG_AT(M, i, i));
    if (largest == 0)
        largest = fg_matrix_max_abs(M);
    for (int i = 0; i < M.rows; i++) {
        double d = FG_AT(M, i, i);
        bool own = d > 0 || d < -SILENT_LIMIT * largest;
        scale[i] = sqrt(own ? fabs(d) : largest);
        if (scale[i] == 0)
            scale[i] = 1;
    }
}

static flatgain_status symmetric(const struct fg_check *check, const char *key, const char *what,
                                 const char *code, struct fg_matrix M, const double *scale)
{
    double worst = 0;
    int row = 0, col = 0;
    for (int j = 0; j < M.cols; j++)
        for (int i = 0; i < j; i++) {
            double difference =
                fabs(FG_AT(M, i, j) / scale[i] / scale[j] - FG_AT(M, j, i) / scale[i] / scale[j]);
            if (difference > worst) {
                worst = difference;
                row = i;
                col = j;
            }
        }
    if (worst > SILENT_LIMIT) {
        char above[FG_NUMBER_SIZE], below[FG_NUMBER_SIZE];
        fg_number_round(FG_AT(M, row, col), 12, above);
        fg_number_round(FG_AT(M, col, row), 12, below);
        if (worst > PROJECT_LIMIT)
            return fg_check_fail(check, key,
                                 "%s is not symmetric: row %d, column %d is %s but row %d, column %d is %s; "
                                 "expected equal numbers there",
                                 what, row + 1, col + 1, above, col + 1, row + 1, below);
        flatgain_status status =
            fg_check_warn(check, key, code,
                          "%s is not quite symmetric (row %d, column %d is %s, row %d, column %d is %s); "
                          "the mean of both is used",
                          what, row + 1, col + 1, above, col + 1, row + 1, below);
        if (status != FLATGAIN_OK)
            return status;
    }
    fg_matrix_symmetrise(M);
    return FLATGAIN_OK;
}

/* Eigenvalues, ascending, of the symmetric M; vectors over M when asked for. */
static bool eigen(char job, struct fg_matrix M, double *values, struct fg_arena *scratch)
{
    int info = 0, ask = -1, room;
    double best = 0;
    if (!fg_all_finite((size_t)M.rows * (size_t)M.rows, M.at))
        return false;
    dsyev_(&job, "U", &M.rows, M.at, &M.rows, values, &best, &ask, &info, 1, 1);
    room = (int)best;
    double *work = fg_arena_doubles(scratch, (size_t)room);
    if (!work)
        return false;
    dsyev_(&job, "U", &M.rows, M.at, &M.rows, values, work, &room, &info, 1, 1);
    return info == 0 && fg_all_finite((size_t)M.rows, values);
}

/* S_ij = M_ij / (s_i s_j) */
static void scaled(struct fg_matrix M, const double *scale, struct fg_matrix S)
{
    for (int j = 0; j < M.cols; j++)
        for (int i = 0; i < M.rows; i++)
            FG_AT(S, i, j) = FG_AT(M, i, j) / scale[i] / scale[j];
}

/* Positive definite once SILENT_LIMIT is added to the diagonal? Much cheaper than the eigenvalues. */
static bool factorises(struct fg_matrix S)
{
    int info = 0;
    if (!fg_all_finite((size_t)S.rows * (size_t)S.rows, S.at))
        return false;
    for (int i = 0; i < S.rows; i++)
        FG_AT(S, i, i) += SILENT_LIMIT;
    dpotrf_("U", &S.rows, S.at, &S.rows, &info, 1);
    return info == 0;
}

static flatgain_status indefinite(const struct fg_check *check, const char *key, const char *what,
                                  struct fg_matrix M, struct fg_arena *scratch)
{
    struct fg_matrix V = fg_matrix_copy(scratch, M);
    double *values = fg_arena_doubles(scratch, (size_t)M.rows);
    if (scratch->failed)
        return fg_no_memory(check->error);
    if (!eigen('V', V, values, scratch) || values[0] >= 0)
        return scratch->failed
                   ? fg_no_memory(check->error)
                   : fg_check_fail(check, key, "%s is indefinite; expected no negative eigenvalue", what);
    int row = 0;
    for (int i = 1; i < M.rows; i++)
        if (fabs(FG_AT(V, i, 0)) > fabs(FG_AT(V, row, 0)))
            row = i;
    char low[FG_NUMBER_SIZE], high[FG_NUMBER_SIZE];
    fg_number_round(values[0], 6, low);
    fg_number_round(values[M.rows - 1], 6, high);
    if (M.rows == 1)
        return fg_check_fail(check, key, "%s is negative (%s); expected 0 or more", what, low);
    return fg_check_fail(check, key,
                         "%s has the negative eigenvalue %s (the largest is %s), mostly along row %d; "
                         "expected none below zero",
                         what, low, high, row + 1);
}

/* M += sum over negative lambda of |lambda| (s v)(s v)' with S v = lambda v. Rows of zeros stay zero. */
static void project(struct fg_matrix M, const double *scale, struct fg_matrix V, const double *values)
{
    int n = M.rows;
    for (int k = 0; k < n && values[k] < 0; k++)
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++)
                FG_AT(M, i, j) += -values[k] * scale[i] * FG_AT(V, i, k) * scale[j] * FG_AT(V, j, k);
}

static bool row_is_zero(struct fg_matrix M, int row)
{
    for (int j = 0; j < M.cols; j++)
        if (FG_AT(M, row, j) != 0)
            return false;
    return true;
}

static void clear_row(struct fg_matrix M, int row)
{
    for (int j = 0; j < M.cols; j++)
        FG_AT(M, row, j) = FG_AT(M, j, row) = 0;
}

/* The second half of fg_check_semidefinite, M being symmetric. */
static flatgain_status semidefinite(const struct fg_check *check, const char *key, const char *what,
                                    const char *code, struct fg_matrix M, const double *scale,
                                    struct fg_arena *scratch)
{
    struct fg_matrix S = fg_matrix_new(scratch, M.rows, M.rows);
    double *values = fg_arena_doubles(scratch, (size_t)M.rows);
    double *zero = fg_arena_doubles(scratch, (size_t)M.rows);
    if (scratch->failed)
        return fg_no_memory(check->error);
    scaled(M, scale, S);
    if (factorises(S))
        return FLATGAIN_OK;
    scaled(M, scale, S);
    if (!eigen('V', S, values, scratch))
        return scratch->failed ? fg_no_memory(check->error) : indefinite(check, key, what, M, scratch);
    double largest = fmax(values[M.rows - 1], -values[0]);
    if (values[0] >= -SILENT_LIMIT * largest)
        return FLATGAIN_OK;
    if (values[0] < -PROJECT_LIMIT * largest)
        return indefinite(check, key, what, M, scratch);
    for (int i = 0; i < M.rows; i++)
        zero[i] = row_is_zero(M, i);
    project(M, scale, S, values);
    for (int i = 0; i < M.rows; i++)
        if (zero[i] != 0)
            clear_row(M, i);
    char low[FG_NUMBER_SIZE];
    fg_number_round(values[0] / largest, 3, low);
    return fg_check_warn(check, key, code,
                         "%s is slightly indefinite (an eigenvalue of %s relative to the largest, on unit "
                         "diagonal); the nearest semidefinite matrix is used",
                         what, low);
}

flatgain_status fg_check_semidefinite(const struct fg_check *check, const char *key, const char *what,
                                      const char *code, struct fg_matrix M)
{
    struct fg_arena scratch = {0};
    double *scale = fg_arena_doubles(&scratch, (size_t)M.rows);
    flatgain_status status = scratch.failed ? fg_no_memory(check->error) : FLATGAIN_OK;
    if (status == FLATGAIN_OK) {
        own_scales(M, scale);
        status = symmetric(check, key, what, code, M, scale);
    }
    if (status == FLATGAIN_OK)
        status = semidefinite(check, key, what, code, M, scale, &scratch);
    fg_arena_release(&scratch);
    return status;
}

/* M (n+m square) <- [Q N; N' R], or back when `back`. */
static void join(struct flatgain_problem *problem, struct fg_matrix M, bool back)
{
    int n = problem->n;
    for (int j = 0; j < M.cols; j++)
        for (int i = 0; i < M.rows; i++) {
            double *at = &FG_AT(M, i, j);
            double *part = i < n && j < n ? &FG_AT(problem->Q, i, j)
                           : i < n        ? &FG_AT(problem->N, i, j - n)
                           : j < n        ? &FG_AT(problem->N, j, i - n)
                                          : &FG_AT(problem->R, i - n, j - n);
            if (back)
                *part = *at;
            else
                *at = *part;
        }
}

flatgain_status fg_check_weights(const struct fg_check *check)
{
    struct flatgain_problem *problem = check->problem;
    const char *code = "weight-projected";
    flatgain_status status = fg_check_semidefinite(check, "weights.Q", "Q", code, problem->Q);
    if (status == FLATGAIN_OK)
        status = fg_check_semidefinite(check, "weights.R", "R", code, problem->R);
    if (status != FLATGAIN_OK || fg_matrix_is_zero(problem->N))
        return status;
    struct fg_arena scratch = {0};
    struct fg_matrix M = fg_matrix_new(&scratch, problem->n + problem->m, problem->n + problem->m);
    if (scratch.failed) {
        status = fg_no_memory(check->error);
    } else {
        join(problem, M, false);
        status =
            fg_check_semidefinite(check, "weights.N",
                                  "[Q N; N' R] (rows of the states, then of the inputs; Q and R alone are "
                                  "right, so N is too large for them)",
                                  code, M);
        join(problem, M, true);
    }
    fg_arena_release(&scratch);
    return status;
}
