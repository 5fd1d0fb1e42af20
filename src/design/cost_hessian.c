/* The exact Hessian of J. For a direction E of K let E~ = a E d (the change of F). With
 *
 *   S = C'E~'M + M'E~ C,   M = R F C - N' - B'P [A]
 *   Y = -B E~ (C X [A'] - V F'B') + (.)'            ([.] discrete only, A closed loop)
 *   dX from the Lyapunov equation of X with right-hand side Y,
 *
 *   d2J[E1, E2] = tr(dX1 S2) + tr(dX2 S1) + 2 tr(E1~'R E2~ C X C') + 2 tr(E1~'B'P B E2~ V)
 *                 [discrete: + 2 tr(E1~'B'P B E2~ C X C') + 2 tr(E1~'R E2~ V)]
 *                 - <dJ/dK, E2 D a E1 + E1 D a E2>
 *
 * so one Lyapunov solve on the Schur form at hand serves one direction. Derived in docs/method.md eq. 13 to
 * 16, checked against finite differences in tests/unit/test_cost.c. */
#include <string.h>

#include "design/cost_internal.h"
#include "linalg/lyapunov.h"

/* Y = sum over the entries (i, j) of parameter k of -sign (b_i r_j' + r_j b_i') */
static void right_hand_side(struct fg_cost *c, int k)
{
    int n = c->n, m = c->m, p = c->p;
    double *Y = c->Y.at;
    memset(Y, 0, (size_t)n * n * sizeof(double));
    for (int e = c->first[k]; e < c->first[k + 1]; e++) {
        int i = c->entry[e] % m, j = c->entry[e] / m;
        double sign = c->pattern->sign[c->entry[e]];
        const double *b = c->Bt.at + (size_t)i * n, *r = c->Rr.at + j;
        for (int col = 0; col < n; col++) {
            double rc = sign * r[(size_t)col * p], bc = sign * b[col];
            double *y = Y + (size_t)col * n;
            for (int row = 0; row < n; row++)
                y[row] -= b[row] * rc + r[(size_t)row * p] * bc;
        }
    }
}

static void constants(struct fg_cost *c)
{
    if (c->has_D) {
        fg_multiply('N', 'N', 1, c->Bs, c->a, 0, c->Bt);
        fg_multiply('N', 'N', 1, c->d, c->Cs, 0, c->Ct);
        fg_multiply('N', 'N', 1, c->plant->D, c->a, 0, c->Da);
        fg_multiply('T', 'N', 1, c->a, c->M, 0, c->MX); /* M in the coordinates of K */
    } else {
        memcpy(c->Bt.at, c->Bs.at, (size_t)c->n * c->m * sizeof(double));
        memcpy(c->Ct.at, c->Cs.at, (size_t)c->p * c->n * sizeof(double));
        memcpy(c->MX.at, c->M.at, (size_t)c->m * c->n * sizeof(double));
    }
    /* X1 = C~ X C~', Rr = C~ X [T'] - d V F' Bs' */
    fg_multiply('N', 'T', 1, c->X, c->Ct, 0, c->XC);
    fg_multiply('N', 'N', 1, c->Ct, c->XC, 0, c->X1);
    if (c->discrete)
        fg_multiply('T', 'T', 1, c->XC, c->T, 0, c->Rr);
    else
        for (int j = 0; j < c->n; j++)
            for (int i = 0; i < c->p; i++)
                FG_AT(c->Rr, i, j) = FG_AT(c->XC, j, i);
    if (c->has_V) {
        fg_multiply('N', 'T', 1, c->plant->V, c->F, 0, c->VF);
        memcpy(c->V1.at, c->plant->V.at, (size_t)c->p * c->p * sizeof(double));
        if (c->has_D) {
            struct fg_matrix keep = fg_matrix_view(c->scratch_mp.at, c->p, c->m);
            fg_multiply('N', 'N', 1, c->d, c->VF, 0, keep);
            memcpy(c->VF.at, keep.at, (size_t)c->p * c->m * sizeof(double));
            fg_multiply('N', 'N', 1, c->d, c->plant->V, 0, c->Vs);
            fg_multiply('N', 'T', 1, c->Vs, c->d, 0, c->V1);
        }
        fg_multiply('N', 'T', -1, c->VF, c->Bs, 1, c->Rr);
    }
    /* R1 meets X1, R2 meets V1: continuous R and B'P B, discrete both their sum (Rt is B'P B [+ R]) */
    memcpy(c->R2.at, c->Rt.at, (size_t)c->m * c->m * sizeof(double));
    memcpy(c->R1.at, c->discrete ? c->Rt.at : c->plant->R.at, (size_t)c->m * c->m * sizeof(double));
    if (c->has_D)
        for (int twice = 0; twice < 2; twice++) {
            struct fg_matrix R = twice ? c->R2 : c->R1;
            fg_multiply('T', 'N', 1, c->a, R, 0, c->scratch_mm);
            fg_multiply('N', 'N', 1, c->scratch_mm, c->a, 0, R);
        }
}

/* The part of H[k][l] that needs no Lyapunov solve. */
static double direct_part(const struct fg_cost *c, int k, int l)
{
    double sum = 0;
    for (int e = c->first[k]; e < c->first[k + 1]; e++)
        for (int f = c->first[l]; f < c->first[l + 1]; f++) {
            int i = c->entry[e] % c->m, j = c->entry[e] / c->m;
            int h = c->entry[f] % c->m, g = c->entry[f] / c->m;
            double value = 2 * FG_AT(c->R1, i, h) * FG_AT(c->X1, j, g);
            if (c->has_V)
                value += 2 * FG_AT(c->R2, i, h) * FG_AT(c->V1, j, g);
            if (c->has_D)
                value -= FG_AT(c->G, h, j) * FG_AT(c->Da, g, i) + FG_AT(c->G, i, g) * FG_AT(c->Da, j, h);
            sum += c->pattern->sign[c->entry[e]] * c->pattern->sign[c->entry[f]] * value;
        }
    return sum;
}

void fg_cost_hessian(struct fg_cost *c, double *hessian)
{
    int q = c->pattern->count, mp = c->m * c->p;
    fg_cost_need_P(c);
    constants(c);
    for (int k = 0; k < q; k++) {
        right_hand_side(c, k);
        fg_lyapunov_schur(c->discrete, c->n, c->T.at, c->Y.at, c->lyapunov_work);
        fg_multiply('N', 'T', 1, c->Y, c->Ct, 0, c->dXC);
        struct fg_matrix U = {c->m, c->p, c->Hfull + (size_t)k * mp};
        fg_multiply('N', 'N', 2, c->MX, c->dXC, 0, U); /* <E2, U> = tr(dX S2) */
    }
    for (int k = 0; k < q; k++)
        for (int l = 0; l <= k; l++) {
            double sum = direct_part(c, k, l);
            for (int f = c->first[l]; f < c->first[l + 1]; f++)
                sum += c->pattern->sign[c->entry[f]] * c->Hfull[(size_t)k * mp + c->entry[f]];
            for (int e = c->first[k]; e < c->first[k + 1]; e++)
                sum += c->pattern->sign[c->entry[e]] * c->Hfull[(size_t)l * mp + c->entry[e]];
            hessian[k + (size_t)l * q] = hessian[l + (size_t)k * q] = sum;
        }
}
