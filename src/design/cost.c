#include "design/cost.h"

#include <math.h>
#include <string.h>

#include "design/cost_internal.h"
#include "linalg/factor.h"
#include "linalg/lapack.h"
#include "linalg/lyapunov.h"

/* tr(|(I + K D)^-1| (I + |K| |D|)) above this: the loop is (nearly) ill posed and J counts as infinite. It
 * measures what cancels in I + K D (with one input the norm of it times the norm of its inverse is always 1)
 * and does not depend on units. Beyond it the last digits of K decide where the slower poles are. */
static const double ILL_POSED = 1e8;

static int never(const double *re, const double *im)
{
    (void)re;
    (void)im;
    return 0;
}

static void list_entries(struct fg_cost *cost, struct fg_arena *arena)
{
    const struct fg_pattern *pattern = cost->pattern;
    int entries = cost->m * cost->p, q = pattern->count, filled = 0;
    cost->first = fg_arena_ints(arena, (size_t)q + 1);
    cost->entry = fg_arena_ints(arena, (size_t)entries);
    if (arena->failed)
        return;
    for (int k = 0; k < q; k++) {
        cost->first[k] = filled;
        for (int e = 0; e < entries; e++)
            if (pattern->index[e] == k)
                cost->entry[filled++] = e;
    }
    cost->first[q] = filled;
}

/* [Q N; N' R] = [Hx Hu]'[Hx Hu] */
static void factor_weights(struct fg_cost *cost, const struct fg_plant *plant, struct fg_arena *arena)
{
    int n = cost->n, m = cost->m;
    struct fg_arena scratch = {0};
    struct fg_matrix S = fg_matrix_new(&scratch, n + m, n + m), H = {0};
    if (!scratch.failed) {
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++)
                FG_AT(S, i, j) = FG_AT(plant->Q, i, j);
        for (int j = 0; j < m; j++) {
            for (int i = 0; i < n; i++)
                FG_AT(S, i, n + j) = FG_AT(S, n + j, i) = FG_AT(plant->N, i, j);
            for (int i = 0; i < m; i++)
                FG_AT(S, n + i, n + j) = FG_AT(plant->R, i, j);
        }
        H = fg_factor(&scratch, S);
    }
    cost->Hx = fg_matrix_new(arena, H.rows, n);
    cost->Hu = fg_matrix_new(arena, H.rows, m);
    if (!scratch.failed && !arena->failed)
        for (int i = 0; i < H.rows; i++) {
            for (int j = 0; j < n; j++)
                FG_AT(cost->Hx, i, j) = FG_AT(H, i, j);
            for (int j = 0; j < m; j++)
                FG_AT(cost->Hu, i, j) = FG_AT(H, i, n + j);
        }
    arena->failed = arena->failed || scratch.failed;
    fg_arena_release(&scratch);
}

struct fg_cost *fg_cost_new(const struct fg_plant *plant, const struct fg_pattern *pattern,
                            struct fg_arena *arena)
{
    struct fg_cost *c = fg_arena_get(arena, sizeof *c);
    if (!c)
        return NULL;
    int n = plant->n, m = plant->m, p = plant->p;
    c->plant = plant;
    c->pattern = pattern;
    c->n = n, c->m = m, c->p = p;
    c->discrete = plant->discrete;
    c->has_D = !fg_matrix_is_zero(plant->D);
    c->has_V = !fg_matrix_is_zero(plant->V);
    c->shift = plant->discrete ? 1 : 0;
    list_entries(c, arena);
    factor_weights(c, plant, arena);
    struct fg_matrix factor = fg_factor(arena, plant->W);
    c->Gw = factor.at ? fg_matrix_transpose(arena, factor) : factor;
    factor = fg_factor(arena, plant->V);
    c->Gv = factor.at ? fg_matrix_transpose(arena, factor) : factor;
    int r = c->Hx.rows, g = c->Gw.cols, gv = c->has_V ? c->Gv.cols : 0;

    struct {
        struct fg_matrix *matrix;
        int rows, cols;
    } shapes[] = {
        {&c->a, m, m},          {&c->d, p, p},          {&c->F, m, p},  {&c->T, n, n},   {&c->Z, n, n},
        {&c->Trev, n, n},       {&c->Bs, n, m},         {&c->Cs, p, n}, {&c->Hcl, r, n}, {&c->Gcl, n, g + gv},
        {&c->Qcl, n, n},        {&c->X, n, n},          {&c->P, n, n},  {&c->BF, n, p},  {&c->FC, m, n},
        {&c->HuF, r, p},        {&c->FGv, m, gv},       {&c->BP, m, n}, {&c->M, m, n},   {&c->Ct, p, n},
        {&c->XC, n, p},         {&c->MX, m, n},         {&c->Rt, m, m}, {&c->FV, m, p},  {&c->G, m, p},
        {&c->scratch_mp, m, p}, {&c->scratch_mm, m, m}, {&c->Bt, n, m}, {&c->Y, n, n},   {&c->Rr, p, n},
        {&c->X1, p, p},         {&c->V1, p, p},         {&c->R1, m, m}, {&c->R2, m, m},  {&c->VF, p, m},
        {&c->Da, p, m},         {&c->dXC, n, p},        {&c->Vs, p, p},
    };
    for (size_t i = 0; i < sizeof shapes / sizeof *shapes; i++)
        *shapes[i].matrix = fg_matrix_new(arena, shapes[i].rows, shapes[i].cols);
    c->K = fg_arena_doubles(arena, (size_t)m * p);
    c->wr = fg_arena_doubles(arena, n);
    c->wi = fg_arena_doubles(arena, n);
    c->Hfull = fg_arena_doubles(arena, (size_t)pattern->count * m * p);
    c->lyapunov_work = fg_arena_doubles(arena, fg_lyapunov_work(n));
    c->pivots = fg_arena_ints(arena, (size_t)m);
    c->select = fg_arena_ints(arena, (size_t)n);
    c->eigenvectors = fg_arena_doubles(arena, 7 * (size_t)n);
    int query = -1, info = 0, none = 0;
    double size = 0;
    dgees_("V", "N", never, &n, NULL, &n, &none, NULL, NULL, NULL, &n, &size, &query, NULL, &info, 1, 1);
    c->schur_lwork = (int)size > 3 * n ? (int)size : 3 * n + 1;
    c->schur_work = fg_arena_doubles(arena, (size_t)c->schur_lwork);
    return arena->failed ? NULL : c;
}

void fg_cost_margin(struct fg_cost *cost, double margin)
{
    cost->margin = margin;
}

bool fg_cost_is_discrete(const struct fg_cost *cost)
{
    return cost->discrete;
}

void fg_cost_shift(struct fg_cost *cost, double shift)
{
    cost->shift = shift;
}

/* a = (I + K D)^-1, F = a K, d = I - D F = (I + D K)^-1; false when (nearly) ill posed. */
static bool close_algebraic_loop(struct fg_cost *c)
{
    int m = c->m, p = c->p;
    struct fg_matrix K = {m, p, c->K};
    if (!c->has_D) {
        memcpy(c->F.at, c->K, (size_t)m * p * sizeof(double));
        return true;
    }
    struct fg_matrix LU = c->scratch_mm;
    fg_multiply('N', 'N', 1, K, c->plant->D, 0, LU);
    for (int i = 0; i < m; i++) {
        FG_AT(LU, i, i) += 1;
        for (int j = 0; j < m; j++)
            FG_AT(c->a, i, j) = i == j;
    }
    if (!fg_solve(LU, c->pivots, c->a))
        return false;
    double cancelled = 0;
    for (int i = 0; i < m; i++)
        for (int j = 0; j < m; j++) {
            double terms = i == j;
            for (int k = 0; k < p; k++)
                terms += fabs(FG_AT(K, j, k) * FG_AT(c->plant->D, k, i));
            cancelled += fabs(FG_AT(c->a, i, j)) * terms;
        }
    if (!(cancelled < ILL_POSED * m))
        return false;
    fg_multiply('N', 'N', 1, c->a, K, 0, c->F);
    fg_multiply('N', 'N', -1, c->plant->D, c->F, 0, c->d);
    for (int i = 0; i < p; i++)
        FG_AT(c->d, i, i) += 1;
    return true;
}

/* Schur form of the closed loop; false when it is not stable enough (abscissa is set all the same). */
static bool close_loop(struct fg_cost *c)
{
    int n = c->n, info = 0, sdim = 0;
    c->abscissa = NAN;
    if (!fg_all_finite((size_t)c->m * c->p, c->K) || !close_algebraic_loop(c))
        return false;
    fg_multiply('N', 'N', 1, c->F, c->plant->C, 0, c->FC);
    memcpy(c->T.at, c->plant->A.at, (size_t)n * n * sizeof(double));
    fg_multiply('N', 'N', -1, c->plant->B, c->FC, 1, c->T);
    if (c->discrete && c->shift != 1)
        for (size_t i = 0; i < (size_t)n * n; i++)
            c->T.at[i] /= c->shift;
    if (!c->discrete && c->shift != 0)
        for (int i = 0; i < n; i++)
            FG_AT(c->T, i, i) -= c->shift;
    if (!fg_all_finite((size_t)n * n, c->T.at)) /* a NaN can make dgees loop for ever */
        return false;
    dgees_("V", "N", never, &n, c->T.at, &n, &sdim, c->wr, c->wi, c->Z.at, &n, c->schur_work, &c->schur_lwork,
           NULL, &info, 1, 1);
    if (info != 0)
        return false;
    double worst = -INFINITY;
    bool good = true;
    for (int i = 0; i < n; i++) {
        double size = c->discrete ? hypot(c->wr[i], c->wi[i]) : c->wr[i];
        good = good && size < (c->discrete ? 1 - c->margin : -c->margin); /* false for NaN */
        worst = size > worst || isnan(size) ? size : worst;
    }
    c->abscissa = c->discrete ? worst * c->shift : worst + c->shift;
    return good;
}

static double sum_of_products(struct fg_matrix a, struct fg_matrix b)
{
    double sum = 0;
    size_t count = (size_t)a.rows * (size_t)a.cols;
    for (size_t i = 0; i < count; i++)
        sum += a.at[i] * b.at[i];
    return sum;
}

/* J = tr(Qcl X) [+ tr(F'R F V)], all in the Schur basis. */
static double evaluate(struct fg_cost *c)
{
    c->has_P = false;
    c->J = INFINITY;
    if (!close_loop(c))
        return INFINITY;
    double per_shift = c->discrete ? 1 / c->shift : 1;
    fg_multiply('T', 'N', per_shift, c->Z, c->plant->B, 0, c->Bs);
    fg_multiply('N', 'N', 1, c->plant->C, c->Z, 0, c->Cs);
    /* z = Hcl x with Hcl = Hx - Hu F C, so Qcl = Hcl'Hcl needs no cancellation */
    fg_multiply('N', 'N', 1, c->Hx, c->Z, 0, c->Hcl);
    fg_multiply('N', 'N', 1, c->Hu, c->F, 0, c->HuF);
    fg_multiply('N', 'N', -1, c->HuF, c->Cs, 1, c->Hcl);
    fg_multiply('T', 'N', 1, c->Hcl, c->Hcl, 0, c->Qcl);
    /* Wcl = Gcl Gcl', Gcl = [Gw, -B F Gv] */
    struct fg_matrix Gw = {c->n, c->Gw.cols, c->Gcl.at};
    fg_multiply('T', 'N', 1, c->Z, c->Gw, 0, Gw);
    double direct = 0; /* the noise that the law passes to u at once: discrete only */
    if (c->has_V) {
        struct fg_matrix Gv = {c->n, c->Gv.cols, c->Gcl.at + (size_t)c->n * c->Gw.cols};
        fg_multiply('N', 'N', 1, c->F, c->Gv, 0, c->FGv);
        fg_multiply('N', 'N', -1, c->Bs, c->FGv, 0, Gv);
        if (c->discrete) {
            fg_multiply('N', 'N', 1, c->F, c->plant->V, 0, c->FV);
            fg_multiply('N', 'N', 1, c->plant->R, c->F, 0, c->scratch_mp);
            direct = sum_of_products(c->scratch_mp, c->FV);
        }
    }
    fg_multiply('N', 'T', 1, c->Gcl, c->Gcl, 0, c->X);
    fg_lyapunov_schur(c->discrete, c->n, c->T.at, c->X.at, c->lyapunov_work);
    double J = sum_of_products(c->Qcl, c->X) + direct;
    if (!isfinite(J) || J < 0)
        return INFINITY;
    c->J = J;
    return J;
}

bool fg_cost_is_posed(struct fg_cost *cost, const double *K)
{
    cost->has_P = false;
    memcpy(cost->K, K, (size_t)cost->m * cost->p * sizeof(double));
    return fg_all_finite((size_t)cost->m * cost->p, K) && close_algebraic_loop(cost);
}

double fg_cost_value(struct fg_cost *cost, const double *K)
{
    if (K != cost->K)
        memcpy(cost->K, K, (size_t)cost->m * cost->p * sizeof(double));
    return evaluate(cost);
}

double fg_cost_at(struct fg_cost *cost, const double *theta)
{
    fg_pattern_gain(cost->pattern, theta, cost->K);
    return evaluate(cost);
}

double fg_cost_abscissa(const struct fg_cost *cost)
{
    return cost->abscissa;
}

void fg_cost_poles(const struct fg_cost *cost, const double **re, const double **im)
{
    *re = cost->wr;
    *im = cost->wi;
}

void fg_cost_need_P(struct fg_cost *c)
{
    if (c->has_P)
        return;
    memcpy(c->P.at, c->Qcl.at, (size_t)c->n * c->n * sizeof(double));
    fg_lyapunov_reversed(c->n, c->T.at, c->Trev.at);
    fg_lyapunov_schur_dual(c->discrete, c->n, c->Trev.at, c->P.at, c->lyapunov_work);
    /* M = R F C - N' - B'P (discrete: B'P A with the closed-loop A) = -Hu'Hcl - B'P [T] */
    fg_multiply('T', 'N', 1, c->Bs, c->P, 0, c->BP);
    fg_multiply('T', 'N', -1, c->Hu, c->Hcl, 0, c->M);
    if (c->discrete)
        fg_multiply('N', 'N', -1, c->BP, c->T, 1, c->M);
    else
        for (size_t i = 0; i < (size_t)c->m * c->n; i++)
            c->M.at[i] -= c->BP.at[i];
    /* Rt = B'P B [+ R] */
    fg_multiply('N', 'N', 1, c->BP, c->Bs, 0, c->Rt);
    if (c->discrete)
        for (int i = 0; i < c->m * c->m; i++)
            c->Rt.at[i] += c->plant->R.at[i];
    fg_multiply('N', 'T', 1, c->X, c->Cs, 0, c->XC);
    /* dJ/dF = 2 (M X C' + Rt F V), dJ/dK = a' (dJ/dF) d' */
    fg_multiply('N', 'N', 2, c->M, c->XC, 0, c->G);
    if (c->has_V) {
        fg_multiply('N', 'N', 1, c->F, c->plant->V, 0, c->FV);
        fg_multiply('N', 'N', 2, c->Rt, c->FV, 1, c->G);
    }
    if (c->has_D) {
        fg_multiply('T', 'N', 1, c->a, c->G, 0, c->scratch_mp);
        fg_multiply('N', 'T', 1, c->scratch_mp, c->d, 0, c->G);
    }
    c->has_P = true;
}

void fg_cost_gradient(struct fg_cost *cost, double *gradient)
{
    fg_cost_need_P(cost);
    for (int k = 0; k < cost->pattern->count; k++) {
        double sum = 0;
        for (int e = cost->first[k]; e < cost->first[k + 1]; e++)
            sum += cost->pattern->sign[cost->entry[e]] * cost->G.at[cost->entry[e]];
        gradient[k] = sum;
    }
}
