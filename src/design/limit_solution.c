#include "design/limit_solution.h"

#include <math.h>
#include <string.h>

#include "design/order_reduction.h"
#include "linalg/factor.h"
#include "linalg/lapack.h"

static struct fg_matrix columns(struct fg_matrix a, int first, int count)
{
    return (struct fg_matrix){a.rows, count, a.at ? a.at + (size_t)first * a.rows : NULL};
}

static struct fg_matrix block(struct fg_arena *arena, struct fg_matrix a, int row, int col, int rows,
                              int cols)
{
    struct fg_matrix c = fg_matrix_new(arena, rows, cols);
    for (int j = 0; c.at && j < cols; j++)
        for (int i = 0; i < rows; i++)
            FG_AT(c, i, j) = FG_AT(a, row + i, col + j);
    return c;
}

/* [Hx Hu] with [Hx Hu]'[Hx Hu] = [Q N; N' R], in states scaled by d. */
static bool first_stage(const struct fg_limit_problem *p, const double *d, struct fg_stage *s)
{
    int n = p->A.rows, m = p->B.cols;
    struct fg_matrix M = fg_matrix_new(&s->arena, n + m, n + m);
    s->A = fg_matrix_copy(&s->arena, p->A);
    s->B = fg_matrix_copy(&s->arena, p->B);
    if (s->arena.failed)
        return false;
    for (int j = 0; j < n + m; j++)
        for (int i = 0; i < n + m; i++) {
            if (i < n && j < n) {
                FG_AT(s->A, i, j) *= d[i] / d[j];
                FG_AT(M, i, j) = FG_AT(p->Q, i, j) / d[i] / d[j];
            } else if (i < n) {
                FG_AT(s->B, i, j - n) *= d[i];
                FG_AT(M, i, j) = FG_AT(M, j, i) = FG_AT(p->N, i, j - n) / d[i];
            } else if (j >= n) {
                FG_AT(M, i, j) = FG_AT(p->R, i - n, j - n);
            }
        }
    if (!fg_all_finite((size_t)(n + m) * (n + m), M.at) || !fg_all_finite((size_t)n * n, s->A.at))
        return false;
    /* A covariance of lower rank that was converted to other units is so only to rounding, and rounding of
     * 1e-16 would be a factor of 1e-8, far from nothing. */
    const double lower_rank = 1e-13;
    struct fg_matrix H = fg_factor_at(&s->arena, M, lower_rank);
    if (!H.at)
        return false;
    s->Hx = block(&s->arena, H, 0, 0, H.rows, n);
    s->Hu = block(&s->arena, H, 0, n, H.rows, m);
    return !s->arena.failed;
}

/* L with (Eu'Eu) L = Eu'Ex; false when Eu'Eu is singular. */
static bool gain_from_factors(const struct fg_stage_answer *a, struct fg_arena *arena, struct fg_matrix *L)
{
    int m = a->Eu.cols, n = a->Ex.cols, info = 0;
    *L = fg_matrix_new(arena, m, n);
    struct fg_matrix M = fg_matrix_new(arena, m, m);
    if (arena->failed)
        return false;
    fg_multiply('T', 'N', 1, a->Eu, a->Ex, 0, *L);
    fg_multiply('T', 'N', 1, a->Eu, a->Eu, 0, M);
    if (m == 0)
        return true;
    double *size = fg_arena_doubles(arena, (size_t)m);
    if (arena->failed)
        return false;
    for (int i = 0; i < m; i++)
        size[i] = FG_AT(M, i, i);
    dpotrf_("U", &m, M.at, &m, &info, 1);
    for (int i = 0; info == 0 && i < m; i++)
        if (!(FG_AT(M, i, i) * FG_AT(M, i, i) > FG_RANK_TOLERANCE * size[i]))
            info = 1;
    if (info == 0)
        dpotrs_("U", &m, &n, M.at, &m, L->at, &m, &info, 1);
    return info == 0;
}

bool fg_limit_solve(const struct fg_limit_problem *p, struct fg_arena *arena,
                    struct fg_limit_solution *solution)
{
    int n = p->A.rows, m = p->B.cols;
    struct fg_stage stages[2] = {{.floor_B = 0}, {.floor_B = 0}}, *s = &stages[0], *next = &stages[1];
    struct fg_arena keep = {0};
    struct fg_level *level = NULL;
    struct fg_stage_answer a = {0};
    struct fg_matrix L1 = {0};
    struct fg_split split = {0};
    double *d = fg_arena_doubles(&keep, (size_t)n);
    *solution = (struct fg_limit_solution){.decay = NAN};
    bool good = !keep.failed, done = false;
    if (good) {
        fg_limit_scaling(p->A, p->B, p->Q, d, &s->arena);
        good = !s->arena.failed && first_stage(p, d, s);
    }
    while (good && !done) {
        struct fg_level *inner = fg_arena_get(&keep, sizeof *inner);
        good = inner && fg_stage_split(s, inner, &keep, &split);
        if (!good)
            break;
        inner->outer = level;
        level = inner;
        if (level->r == 0) {
            good = fg_stage_finish(p->discrete, s, level, &keep, &split, &a, &L1, &solution->decay);
            done = true;
        } else {
            good = fg_stage_reduce(p->discrete, s, level, &keep, &split, next);
            solution->reduced = true;
            if (good) { /* otherwise it may hold the reason of failure */
                fg_arena_release(&s->arena);
                struct fg_stage *other = s;
                s = next;
                next = other;
            }
        }
    }
    for (struct fg_level *at = good ? level->outer : NULL; good && at; at = at->outer)
        good = fg_stage_back(p->discrete, at, &keep, &a);
    if (good && !solution->reduced) { /* u = Z [u0; u1], u1 = -L1 x, u0 = 0 */
        solution->L = fg_matrix_new(&keep, m, n);
        good = !keep.failed;
        solution->has_gain = good;
        if (good)
            fg_multiply('N', 'N', 1, columns(split.Z, level->m0, level->m1), L1, 0, solution->L);
    } else if (good && p->discrete) {
        solution->has_gain = gain_from_factors(&a, &keep, &solution->L);
        good = !keep.failed;
    }
    if (good) {
        solution->S = fg_matrix_copy(arena, a.S);
        solution->before = fg_matrix_copy(arena, a.before);
        solution->factor = fg_matrix_copy(arena, a.Ex);
        if (solution->has_gain)
            solution->L = fg_matrix_copy(arena, solution->L);
        good = !arena->failed;
    }
    for (int j = 0; good && j < n; j++) {
        for (int i = 0; i < n; i++) {
            FG_AT(solution->S, i, j) *= d[i] * d[j];
            FG_AT(solution->before, i, j) *= d[i] * d[j];
        }
        for (int i = 0; i < solution->factor.rows; i++)
            FG_AT(solution->factor, i, j) *= d[j];
        for (int i = 0; solution->has_gain && i < m; i++)
            FG_AT(solution->L, i, j) *= d[j];
    }
    arena->failed = arena->failed || keep.failed || stages[0].arena.failed || stages[1].arena.failed;
    fg_arena_release(&stages[0].arena);
    fg_arena_release(&stages[1].arena);
    fg_arena_release(&keep);
    return good;
}
