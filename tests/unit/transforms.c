#include "transforms.h"

#include "linalg/lapack.h"
#include "plants.h"

/* M := M S^-1 (right) by solving S' Z = M'. */
static struct fg_matrix right_divide(struct fg_arena *arena, struct fg_matrix M, struct fg_matrix S)
{
    int n = S.rows, count = M.rows, info = 0, *pivots = fg_arena_ints(arena, (size_t)n);
    struct fg_matrix St = fg_matrix_transpose(arena, S), Z = fg_matrix_transpose(arena, M);
    dgesv_(&n, &count, St.at, &n, pivots, Z.at, &n, &info);
    return fg_matrix_transpose(arena, Z);
}

static struct fg_matrix times(struct fg_arena *arena, char ta, struct fg_matrix a, char tb,
                              struct fg_matrix b)
{
    struct fg_matrix c = fg_matrix_new(arena, ta == 'T' ? a.cols : a.rows, tb == 'T' ? b.rows : b.cols);
    fg_multiply(ta, tb, 1, a, b, 0, c);
    return c;
}

struct fg_plant plant_similar(struct fg_arena *arena, const struct fg_plant *q, struct fg_matrix T)
{
    struct fg_plant r = *q;
    r.A = right_divide(arena, times(arena, 'N', T, 'N', q->A), T);
    r.B = times(arena, 'N', T, 'N', q->B);
    r.C = right_divide(arena, q->C, T);
    r.W = times(arena, 'N', times(arena, 'N', T, 'N', q->W), 'T', T);
    struct fg_matrix QT = right_divide(arena, q->Q, T);
    r.Q = right_divide(arena, fg_matrix_transpose(arena, QT), T);
    r.N = fg_matrix_transpose(arena, right_divide(arena, fg_matrix_transpose(arena, q->N), T));
    fg_matrix_symmetrise(r.Q);
    fg_matrix_symmetrise(r.W);
    return r;
}

struct fg_plant plant_units(struct fg_arena *arena, const struct fg_plant *q, const struct plant_units *to)
{
    int n = q->n, m = q->m, p = q->p;
    double slow = q->discrete ? 1 : to->slow;
    struct fg_plant r = empty_plant(arena, q->discrete, n, m, p);
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++) {
            FG_AT(r.A, i, j) = FG_AT(q->A, i, j) * to->x[i] / to->x[j] * slow;
            FG_AT(r.Q, i, j) = FG_AT(q->Q, i, j) / to->x[i] / to->x[j];
            FG_AT(r.W, i, j) = FG_AT(q->W, i, j) * to->x[i] * to->x[j] * slow;
        }
        for (int j = 0; j < m; j++) {
            FG_AT(r.B, i, j) = FG_AT(q->B, i, j) * to->x[i] / to->u[j] * slow;
            FG_AT(r.N, i, j) = FG_AT(q->N, i, j) / to->x[i] / to->u[j];
        }
        for (int j = 0; j < p; j++)
            FG_AT(r.C, j, i) = FG_AT(q->C, j, i) * to->y[j] / to->x[i];
    }
    for (int i = 0; i < m; i++) {
        for (int j = 0; j < m; j++)
            FG_AT(r.R, i, j) = FG_AT(q->R, i, j) / to->u[i] / to->u[j];
        for (int j = 0; j < p; j++)
            FG_AT(r.D, j, i) = FG_AT(q->D, j, i) * to->y[j] / to->u[i];
    }
    for (int i = 0; i < p; i++)
        for (int j = 0; j < p; j++)
            FG_AT(r.V, i, j) = FG_AT(q->V, i, j) * to->y[i] * to->y[j];
    return r;
}

static struct fg_matrix pick(struct fg_arena *arena, struct fg_matrix a, const int *rows, const int *cols)
{
    struct fg_matrix b = fg_matrix_new(arena, a.rows, a.cols);
    for (int i = 0; i < a.rows; i++)
        for (int j = 0; j < a.cols; j++)
            FG_AT(b, i, j) = FG_AT(a, rows[i], cols[j]);
    return b;
}

struct fg_plant plant_permuted(struct fg_arena *arena, const struct fg_plant *q, const int *x, const int *u,
                               const int *y)
{
    struct fg_plant r = *q;
    r.A = pick(arena, q->A, x, x);
    r.B = pick(arena, q->B, x, u);
    r.C = pick(arena, q->C, y, x);
    r.D = pick(arena, q->D, y, u);
    r.Q = pick(arena, q->Q, x, x);
    r.R = pick(arena, q->R, u, u);
    r.N = pick(arena, q->N, x, u);
    r.W = pick(arena, q->W, x, x);
    r.V = pick(arena, q->V, y, y);
    return r;
}

struct fg_plant plant_without_D(struct fg_arena *arena, const struct fg_plant *q)
{
    struct fg_plant r = *q;
    r.D = fg_matrix_new(arena, q->p, q->m);
    return r;
}

bool gain_without_D(const struct fg_plant *q, const double *K, double *F)
{
    int m = q->m, p = q->p, info = 0, pivots[8];
    struct fg_arena arena = {0};
    struct fg_matrix gain = fg_matrix_from_rows(&arena, m, p, K), M = fg_matrix_identity(&arena, m);
    fg_multiply('N', 'N', 1, gain, q->D, 1, M);
    dgesv_(&m, &p, M.at, &m, pivots, gain.at, &m, &info);
    fg_matrix_to_rows(gain, F);
    fg_arena_release(&arena);
    return info == 0;
}

struct fg_plant plant_dual(struct fg_arena *arena, const struct fg_plant *q)
{
    struct fg_plant r = {.discrete = q->discrete, .n = q->n, .m = q->p, .p = q->m};
    r.A = fg_matrix_transpose(arena, q->A);
    r.B = fg_matrix_transpose(arena, q->C);
    r.C = fg_matrix_transpose(arena, q->B);
    r.D = fg_matrix_transpose(arena, q->D);
    r.Q = q->W;
    r.R = q->V;
    r.N = fg_matrix_new(arena, q->n, q->p);
    r.W = q->Q;
    r.V = q->R;
    return r;
}

struct fg_matrix random_transform(struct fg_arena *arena, int n)
{
    struct fg_matrix T = fg_matrix_identity(arena, n);
    for (int i = 0; i < n * n; i++)
        T.at[i] += 0.3 * random_uniform();
    return T;
}

void random_order(int count, int *order)
{
    for (int i = 0; i < count; i++)
        order[i] = i;
    for (int i = count - 1; i > 0; i--) {
        int j = (int)((random_uniform() + 1) / 2 * (i + 1)), keep = order[i];
        j = j > i ? i : j;
        order[i] = order[j];
        order[j] = keep;
    }
}
