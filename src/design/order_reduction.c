/* One level of the order reduction, with the cost written as |z|^2, z = Hx x + Hu u:
 *
 *   inputs   u = Z [u0; u1], Hu Z = [0 U1] with U1 orthonormal: u0 is free, u1 costs |u1|^2
 *   states   T = [T1 T2] orthogonal, T1 spanning the columns of B0 = B Z0
 *
 * continuous: u0 moves T1'x at once and at no cost, so T1'x is an input of the rest and S = T2 S2 T2':
 *     state T2'x, inputs v = (T1'x, u1),  A2 = T2'A T2,  B2 = [T2'A T1, T2'B1],  z = Hx T2 (.) + [Hx T1, U1]
 * v discrete: with u1 = w1 - U1'Hx x, Ad = A - B1 U1'Hx, Hd = (I - U1 U1')Hx, the state after the input, xi =
 * Ad x + B1 w1 + B0 u0, has T1'xi free. The cost before the input is T2 S2 T2', S = Ad' (that) Ad + Hd'Hd:
 *     state zeta = T2'Ad x, inputs v = (T1'xi, w1),  xi = T2 zeta + T1 v1 + T2 T2'B1 w1,
 *     zeta+ = T2'Ad xi,  z = Hd xi + U1 w1
 * Both fall in order and the same step applies again, until no input is free: then the Riccati equation is
 * regular. On the way back |E_x x + E_u u|^2, the cost lost by not using the best input, is carried along.
 * T is kept as r reflectors. */
#include "design/order_reduction.h"

#include <float.h>
#include <math.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/lyapunov.h"
#include "linalg/riccati.h"

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

static double norm(size_t count, const double *at)
{
    double sum = 0;
    for (size_t i = 0; i < count; i++)
        sum += at[i] * at[i];
    return sqrt(sum);
}

/* a = U diag(s) Vt with Vt complete; a is overwritten, U rows x min. */
static bool singular_values(struct fg_arena *arena, struct fg_matrix a, struct fg_matrix *U, double **s,
                            struct fg_matrix *Vt)
{
    int rows = a.rows, cols = a.cols, least = rows < cols ? rows : cols, info = 0;
    int lwork = 8 * (rows + cols) + 64, ldu = rows > 0 ? rows : 1;
    *U = fg_matrix_new(arena, rows, least);
    *Vt = fg_matrix_identity(arena, cols);
    *s = fg_arena_doubles(arena, (size_t)least);
    double *work = fg_arena_doubles(arena, (size_t)lwork);
    if (arena->failed || !fg_all_finite((size_t)rows * cols, a.at))
        return false;
    if (least > 0)
        dgesvd_("S", "A", &rows, &cols, a.at, &ldu, *s, U->at, &ldu, Vt->at, &cols, work, &lwork, &info, 1,
                1);
    return info == 0;
}

/* a <- T'a, T a ('L') or a T, a T' ('R'), T from the reflectors of the level. */
static bool rotate(struct fg_arena *scratch, const struct fg_level *level, const char *side,
                   const char *trans, struct fg_matrix a)
{
    int info = 0, lda = a.rows, ldt = level->n, lwork = 32 * (a.rows + a.cols) + 64;
    if (a.rows == 0 || a.cols == 0 || level->r == 0)
        return true;
    double *work = fg_arena_doubles(scratch, (size_t)lwork);
    if (!work)
        return false;
    dormqr_(side, trans, &a.rows, &a.cols, &level->r, level->reflectors.at, &ldt, level->tau, a.at, &lda,
            work, &lwork, &info, 1, 1);
    return info == 0;
}

/* Z, its inverse, B Z and U1 of a level. Free inputs come first. */
static bool split_inputs(struct fg_stage *s, struct fg_level *level, struct fg_arena *keep,
                         struct fg_split *split)
{
    int n = s->A.rows, m = s->B.cols, rows = s->Hx.rows, rank = 0;
    double *e = fg_arena_doubles(&s->arena, (size_t)m), *sv;
    struct fg_matrix scaled = fg_matrix_new(&s->arena, rows, m), U, Vt;
    double noise = 4 * DBL_EPSILON; /* relative, of the null space of Hu */
    if (s->arena.failed)
        return false;
    for (int j = 0; j < m; j++) {
        double *h = s->Hu.at + (size_t)j * rows, *b = s->B.at + (size_t)j * n;
        double weight = norm((size_t)rows, h), reach = norm((size_t)n, b);
        if (weight <= s->floor_Hu)
            weight = 0;
        if (reach <= s->floor_B) {
            reach = 0;
            memset(b, 0, (size_t)n * sizeof *b);
        }
        e[j] = weight > 0 ? weight : reach > 0 ? reach : 1;
        for (int i = 0; i < rows; i++)
            FG_AT(scaled, i, j) = weight > 0 ? h[i] / e[j] : 0;
        if (weight > 0)
            noise = fmax(noise, s->floor_Hu / weight);
    }
    if (!singular_values(&s->arena, scaled, &U, &sv, &Vt))
        return false;
    for (int k = 0; k < U.cols; k++)
        rank += sv[k] > fmax(FG_RANK_TOLERANCE, noise);
    level->n = n;
    level->m = m;
    level->m1 = rank;
    level->m0 = m - rank;
    level->Zi = fg_matrix_new(keep, m, m);
    split->Z = fg_matrix_new(&s->arena, m, m);
    split->BZ = fg_matrix_new(&s->arena, n, m);
    split->U1 = block(&s->arena, U, 0, 0, rows, rank);
    if (keep->failed || s->arena.failed)
        return false;
    for (int k = 0; k < m; k++) { /* row k of Vt is column `to` of Z */
        int to = k < rank ? level->m0 + k : k - rank;
        double size = k < rank ? sv[k] : 1;
        for (int j = 0; j < m; j++) {
            FG_AT(split->Z, j, to) = FG_AT(Vt, k, j) / e[j] / size;
            FG_AT(level->Zi, to, j) = FG_AT(Vt, k, j) * e[j] * size;
        }
    }
    fg_multiply('N', 'N', 1, s->B, split->Z, 0, split->BZ);
    /* A combination of columns that cancels leaves rounding: measured against what was added. */
    split->noise = 4 * DBL_EPSILON;
    for (int k = 0; k < level->m0; k++) {
        double added = 0, rounding = 0;
        for (int j = 0; j < m; j++) {
            added += fabs(FG_AT(split->Z, j, k)) * norm((size_t)n, s->B.at + (size_t)j * n);
            rounding += fabs(FG_AT(split->Z, j, k)) * s->floor_B;
        }
        rounding += noise * added;
        double *b = split->BZ.at + (size_t)k * n, length = norm((size_t)n, b);
        if (length <= FG_RANK_TOLERANCE * added + rounding)
            memset(b, 0, (size_t)n * sizeof *b);
        else
            split->noise = fmax(split->noise, rounding / length);
    }
    return true;
}

/* Reflectors whose first r columns span B0: r is its rank with columns of unit length. */
static bool span_inputs(struct fg_stage *s, struct fg_level *level, struct fg_arena *keep,
                        struct fg_matrix B0, double noise)
{
    int n = level->n, info = 0, lwork = 64 * n + 64;
    struct fg_matrix unit = fg_matrix_copy(&s->arena, B0), U, Vt;
    double *sv, *work = fg_arena_doubles(&s->arena, (size_t)lwork);
    if (s->arena.failed)
        return false;
    for (int j = 0; j < B0.cols; j++) {
        double length = norm((size_t)n, unit.at + (size_t)j * n);
        for (int i = 0; i < n && length > 0; i++)
            FG_AT(unit, i, j) /= length;
    }
    if (!singular_values(&s->arena, unit, &U, &sv, &Vt))
        return false;
    level->r = 0;
    for (int k = 0; k < U.cols; k++)
        level->r += sv[k] > fmax(FG_RANK_TOLERANCE, noise);
    level->turn = level->r > 0 ? 16 * DBL_EPSILON * sqrt(n) + noise / sv[level->r - 1] : 0;
    level->reflectors = block(keep, U, 0, 0, n, level->r);
    level->tau = fg_arena_doubles(keep, (size_t)level->r);
    if (keep->failed)
        return false;
    if (level->r > 0)
        dgeqrf_(&n, &level->r, level->reflectors.at, &n, level->tau, work, &lwork, &info);
    return info == 0;
}

bool fg_stage_split(struct fg_stage *s, struct fg_level *level, struct fg_arena *keep, struct fg_split *split)
{
    return split_inputs(s, level, keep, split) &&
           span_inputs(s, level, keep, columns(split->BZ, 0, level->m0), split->noise);
}

bool fg_stage_reduce(bool discrete, struct fg_stage *s, struct fg_level *level, struct fg_arena *keep,
                     const struct fg_split *split, struct fg_stage *next)
{
    struct fg_matrix BZ = split->BZ, U1 = split->U1;
    int n = level->n, r = level->r, m1 = level->m1, n2 = n - r, rows = s->Hx.rows;
    struct fg_matrix B0 = columns(BZ, 0, level->m0), B1 = columns(BZ, level->m0, m1);
    double large_A = norm((size_t)n * n, s->A.at), large_H = norm((size_t)rows * n, s->Hx.at);
    if (discrete) {
        level->N1 = fg_matrix_new(keep, m1, n);
        if (keep->failed)
            return false;
        fg_multiply('T', 'N', 1, U1, s->Hx, 0, level->N1);
        fg_multiply('N', 'N', -1, B1, level->N1, 1, s->A);
        fg_multiply('N', 'N', -1, U1, level->N1, 1, s->Hx);
        level->Ad = fg_matrix_copy(keep, s->A);
        level->Hd = fg_matrix_copy(keep, s->Hx);
    }
    struct fg_matrix TB0 = fg_matrix_copy(&s->arena, B0), TB1 = fg_matrix_copy(&s->arena, B1);
    if (keep->failed || s->arena.failed || !rotate(&s->arena, level, "L", "T", s->A) ||
        !rotate(&s->arena, level, "R", "N", s->A) || !rotate(&s->arena, level, "R", "N", s->Hx) ||
        !rotate(&s->arena, level, "L", "T", TB0) || !rotate(&s->arena, level, "L", "T", TB1))
        return false;
    next->A = block(&next->arena, s->A, r, r, n2, n2);
    next->B = fg_matrix_new(&next->arena, n2, r + m1);
    next->Hx = block(&next->arena, s->Hx, 0, r, rows, n2);
    next->Hu = fg_matrix_new(&next->arena, rows, r + m1);
    struct fg_matrix low = block(&s->arena, TB1, r, 0, n2, m1);
    if (discrete) {
        level->T1B1 = block(keep, TB1, 0, 0, r, m1);
        level->T1B0 = block(keep, TB0, 0, 0, r, level->m0);
    }
    if (keep->failed || s->arena.failed || next->arena.failed)
        return false;
    for (int j = 0; j < r; j++) {
        for (int i = 0; i < n2; i++)
            FG_AT(next->B, i, j) = FG_AT(s->A, r + i, j);
        for (int i = 0; i < rows; i++)
            FG_AT(next->Hu, i, j) = FG_AT(s->Hx, i, j);
    }
    struct fg_matrix NB = columns(next->B, r, m1), NH = columns(next->Hu, r, m1);
    memcpy(NH.at, U1.at, (size_t)rows * m1 * sizeof(double));
    if (discrete) {
        fg_multiply('N', 'N', 1, next->A, low, 0, NB);
        fg_multiply('N', 'N', 1, next->Hx, low, 1, NH);
    } else {
        memcpy(NB.at, low.at, (size_t)n2 * m1 * sizeof(double));
    }
    next->floor_B = fmax(level->turn * large_A, s->floor_B);
    next->floor_Hu = fmax(level->turn * large_H, s->floor_Hu);
    return true;
}

/* Distance of the slowest eigenvalue of A (overwritten) from the boundary over the largest |eigenvalue|. */
static double relative_decay(bool discrete, struct fg_arena *arena, struct fg_matrix A)
{
    int n = A.rows, one = 1, info = 0, lwork = 4 * n + 4;
    double *re = fg_arena_doubles(arena, (size_t)n), *im = fg_arena_doubles(arena, (size_t)n);
    double *work = fg_arena_doubles(arena, (size_t)lwork), none = 0, slowest = INFINITY, fastest = 0;
    if (n == 0)
        return INFINITY;
    if (arena->failed || !fg_all_finite((size_t)n * n, A.at))
        return NAN;
    dgeev_("N", "N", &n, A.at, &n, re, im, &none, &one, &none, &one, work, &lwork, &info, 1, 1);
    for (int i = 0; i < n; i++) {
        double size = hypot(re[i], im[i]);
        slowest = fmin(slowest, discrete ? 1 - size : -re[i]);
        fastest = fmax(fastest, size);
    }
    return info != 0 ? NAN : discrete ? slowest : slowest / fastest;
}

bool fg_stage_finish(bool discrete, struct fg_stage *s, const struct fg_level *level, struct fg_arena *keep,
                     const struct fg_split *split, struct fg_stage_answer *a, struct fg_matrix *L1,
                     double *decay)
{
    struct fg_matrix BZ = split->BZ, U1 = split->U1;
    const double on_the_boundary = 1e-13;
    int n = level->n, m1 = level->m1, m = level->m, info = 0;
    bool memory = false;
    struct fg_matrix B1 = columns(BZ, level->m0, m1), Acl = fg_matrix_copy(&s->arena, s->A);
    struct fg_matrix Q = fg_matrix_new(&s->arena, n, n), N = fg_matrix_new(&s->arena, n, m1);
    struct fg_matrix R = fg_matrix_identity(&s->arena, m1);
    a->S = fg_matrix_new(keep, n, n);
    a->Ex = fg_matrix_new(keep, m1, n);
    a->Eu = fg_matrix_new(keep, m1, m);
    *L1 = fg_matrix_new(keep, m1, n);
    if (keep->failed || s->arena.failed)
        return false;
    fg_multiply('T', 'N', 1, s->Hx, s->Hx, 0, Q);
    fg_multiply('T', 'N', 1, s->Hx, U1, 0, N);
    bool good;
    if (m1 == 0) {
        struct fg_matrix At = fg_matrix_transpose(&s->arena, s->A);
        good = !s->arena.failed && fg_lyapunov(discrete, At, Q, a->S, &memory);
    } else {
        good =
            (discrete ? fg_riccati_discrete : fg_riccati_continuous)(s->A, B1, Q, R, N, a->S, *L1, &memory);
    }
    keep->failed = keep->failed || memory;
    if (!good)
        return false;
    fg_multiply('N', 'N', -1, B1, *L1, 1, Acl);
    *decay = relative_decay(discrete, &s->arena, Acl);
    if (!(*decay > on_the_boundary))
        return false;
    a->before = a->S;
    struct fg_matrix Eu1 = R; /* U of R + B'S B = U'U */
    if (discrete && n > 0) {
        struct fg_matrix SB = fg_matrix_new(&s->arena, n, m1), G = fg_matrix_new(&s->arena, m1, n);
        struct fg_matrix close = fg_matrix_identity(&s->arena, n), M = fg_matrix_new(&s->arena, n, n);
        a->before = fg_matrix_new(keep, n, n);
        if (keep->failed || s->arena.failed)
            return false;
        fg_multiply('N', 'N', 1, a->S, B1, 0, SB);
        fg_multiply('T', 'N', 1, B1, SB, 1, Eu1);
        if (m1 > 0)
            dpotrf_("U", &m1, Eu1.at, &m1, &info, 1);
        if (info != 0)
            return false;
        for (int j = 0; j < m1; j++) {
            for (int i = j + 1; i < m1; i++)
                FG_AT(Eu1, i, j) = 0;
            for (int i = 0; i < n; i++)
                FG_AT(G, j, i) = FG_AT(SB, i, j);
        }
        /* before = (I - B G)'S(I - B G) + G'G with G = (I + B'S B)^-1 B'S: a sum of semidefinite terms */
        if (m1 > 0)
            dpotrs_("U", &m1, &n, Eu1.at, &m1, G.at, &m1, &info, 1);
        fg_multiply('N', 'N', -1, B1, G, 1, close);
        fg_multiply('N', 'N', 1, a->S, close, 0, M);
        fg_multiply('T', 'N', 1, close, M, 0, a->before);
        fg_multiply('T', 'N', 1, G, G, 1, a->before);
        fg_matrix_symmetrise(a->before);
    }
    struct fg_matrix Z1 = block(&s->arena, level->Zi, level->m0, 0, m1, m);
    if (s->arena.failed)
        return false;
    fg_multiply('N', 'N', 1, Eu1, *L1, 0, a->Ex);
    fg_multiply('N', 'N', 1, Eu1, Z1, 0, a->Eu);
    return true;
}

bool fg_stage_back(bool discrete, const struct fg_level *level, struct fg_arena *keep,
                   struct fg_stage_answer *a)
{
    int n = level->n, r = level->r, m0 = level->m0, m1 = level->m1, n2 = n - r, k = a->Ex.rows;
    struct fg_arena scratch = {0};
    struct fg_matrix S = fg_matrix_new(keep, n, n), F = fg_matrix_new(keep, k, n), E0 = {0};
    struct fg_matrix Ev = columns(a->Eu, 0, r), E1 = columns(a->Eu, r, m1);
    struct fg_matrix Eu = fg_matrix_new(keep, k, level->m), E = fg_matrix_new(&scratch, k, level->m);
    bool good = !keep->failed && !scratch.failed;
    for (int j = 0; good && j < n2; j++) {
        for (int i = 0; i < n2; i++)
            FG_AT(S, r + i, r + j) = FG_AT(a->S, i, j);
        for (int i = 0; i < k; i++)
            FG_AT(F, i, r + j) = FG_AT(a->Ex, i, j);
    }
    if (good && k > 0 && r > 0)
        memcpy(F.at, Ev.at, (size_t)k * r * sizeof(double));
    good = good && rotate(&scratch, level, "L", "N", S) && rotate(&scratch, level, "R", "T", S) &&
           rotate(&scratch, level, "R", "T", F);
    if (good) {
        E0 = columns(E, 0, m0);
        memcpy(columns(E, m0, m1).at, E1.at, (size_t)k * m1 * sizeof(double));
        a->before = a->S = S;
        a->Ex = F;
    }
    if (good && discrete) {
        struct fg_matrix full = fg_matrix_new(keep, n, n), Ex = fg_matrix_new(keep, k, n);
        struct fg_matrix M = fg_matrix_new(&scratch, n, n), rest = columns(E, m0, m1);
        good = !keep->failed && !scratch.failed;
        if (good) {
            fg_multiply('N', 'N', 1, S, level->Ad, 0, M);
            fg_multiply('T', 'N', 1, level->Ad, M, 0, full);
            fg_multiply('T', 'N', 1, level->Hd, level->Hd, 1, full);
            fg_matrix_symmetrise(full);
            fg_multiply('N', 'N', 1, Ev, level->T1B1, 1, rest);
            fg_multiply('N', 'N', 1, Ev, level->T1B0, 0, E0);
            fg_multiply('N', 'N', 1, F, level->Ad, 0, Ex);
            fg_multiply('N', 'N', 1, rest, level->N1, 1, Ex);
            a->S = full;
            a->Ex = Ex;
        }
    }
    if (good) {
        fg_multiply('N', 'N', 1, E, level->Zi, 0, Eu);
        a->Eu = Eu;
    }
    keep->failed = keep->failed || scratch.failed;
    fg_arena_release(&scratch);
    return good;
}
