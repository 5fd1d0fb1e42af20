/* What cost.c and cost_hessian.c share. Notation of docs/method.md; the suffix s means "in the Schur
 * basis of the closed loop" (Bs = Z'B, Cs = C Z, ...). */
#ifndef FG_DESIGN_COST_INTERNAL_H
#define FG_DESIGN_COST_INTERNAL_H

#include "design/cost.h"

struct fg_cost {
    const struct fg_plant *plant;
    const struct fg_pattern *pattern;
    int n, m, p;
    bool discrete, has_D, has_V;
    double margin; /* decay asked for */
    double shift;  /* continuous: A - shift I; discrete: A / shift, B / shift */

    /* constant: [Q N; N' R] = [Hx Hu]'[Hx Hu], W = Gw Gw', V = Gv Gv' */
    struct fg_matrix Hx, Hu, Gw, Gv;

    /* the point */
    bool has_P;
    double J, abscissa;
    double *K;                /* m x p */
    struct fg_matrix a, d, F; /* (I + K D)^-1 m x m, (I + D K)^-1 p x p, a K m x p */
    double *wr, *wi;
    struct fg_matrix T, Z, Trev;
    struct fg_matrix Bs, Cs, Hcl, Gcl, Qcl, X, P;
    struct fg_matrix BF, FC, HuF, FGv; /* n x p, m x n, r x p, m x gv */

    /* derivatives */
    struct fg_matrix BP, M, Ct, XC, MX, Rt, FV, G, scratch_mp, scratch_mm;
    struct fg_matrix Bt, Y, Rr, X1, V1, R1, R2, VF, Da, dXC, Vs;
    double *Hfull;      /* U of every parameter: q x (m p) */
    int *first, *entry; /* entries of parameter k: entry[first[k]] .. entry[first[k+1] - 1], as i + j m */

    double *schur_work, *lyapunov_work;
    int schur_lwork;
    int *pivots;
    int *select;          /* n */
    double *eigenvectors; /* 2 left, 2 right, 3 of scratch: 7 n */
};

/* P at the point, if it is not there yet. */
void fg_cost_need_P(struct fg_cost *cost);

#endif
