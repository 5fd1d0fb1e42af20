/* Gradient of the spectral abscissa (radius). For a simple pole s with left and right eigenvectors
 * u^H A = s u^H, A v = s v:  ds = u^H dA v / (u^H v),  dA = -B a dK d C, so
 *
 *   d alpha / dK_ij = -Re[ (u^H B a e_i)(e_j' d C v) / (u^H v) ]     (radius: times conj(s) / |s|)
 *
 * Source: e.g. Burke, Lewis, Overton, LAA 351 (2002) 117. */
#include <complex.h>
#include <math.h>

#include "design/cost_internal.h"
#include "linalg/lapack.h"

static int rightmost(const struct fg_cost *c)
{
    int best = 0;
    double most = -INFINITY;
    for (int i = 0; i < c->n; i++) {
        double size = c->discrete ? hypot(c->wr[i], c->wi[i]) : c->wr[i];
        if (size > most) {
            most = size;
            best = i;
        }
    }
    return best;
}

bool fg_cost_abscissa_gradient(struct fg_cost *c, double *gradient)
{
    int n = c->n, m = c->m, p = c->p, k = rightmost(c), two = 2, found = 0, info = 0;
    if (isnan(c->abscissa))
        return false;
    bool pair = c->wi[k] != 0;
    int *select = c->select;
    double *left = c->eigenvectors, *right = left + 2 * n, *work = right + 2 * n;
    for (int i = 0; i < n; i++)
        select[i] = i == k || (pair && i == k + (c->wi[k] > 0 ? 1 : -1));
    int lwork = 3 * n;
    dtrevc3_("B", "S", select, &n, c->T.at, &n, left, &n, right, &n, &two, &found, work, &lwork, &info, 1, 1);
    if (info != 0 || found != (pair ? 2 : 1))
        return false;
    fg_multiply('T', 'N', 1, c->Z, c->plant->B, 0, c->Bs);
    fg_multiply('N', 'N', 1, c->plant->C, c->Z, 0, c->Cs);
    struct fg_matrix B = c->Bs, C = c->Cs;
    if (c->has_D) {
        fg_multiply('N', 'N', 1, c->Bs, c->a, 0, c->Bt);
        fg_multiply('N', 'N', 1, c->d, c->Cs, 0, c->Ct);
        B = c->Bt;
        C = c->Ct;
    }
    double complex uv = 0;
    for (int i = 0; i < n; i++) {
        double complex u = left[i] + (pair ? I * left[n + i] : 0),
                       v = right[i] + (pair ? I * right[n + i] : 0);
        uv += conj(u) * v;
    }
    double wi = pair ? fabs(c->wi[k]) : 0; /* the vectors belong to the member with positive imaginary part */
    double complex pole = c->wr[k] + I * wi,
                   turn = c->discrete && cabs(pole) > 0 ? conj(pole) / cabs(pole) : 1;
    double *row = c->scratch_mp.at;
    if (cabs(uv) == 0)
        return false;
    for (int i = 0; i < m; i++) {
        double complex b = 0;
        for (int h = 0; h < n; h++)
            b += (left[h] - (pair ? I * left[n + h] : 0)) * FG_AT(B, h, i);
        for (int j = 0; j < p; j++) {
            double complex v = 0;
            for (int h = 0; h < n; h++)
                v += FG_AT(C, j, h) * (right[h] + (pair ? I * right[n + h] : 0));
            row[i + j * m] = -creal(turn * b * v / uv);
        }
    }
    for (int q = 0; q < c->pattern->count; q++) {
        gradient[q] = 0;
        for (int e = c->first[q]; e < c->first[q + 1]; e++)
            gradient[q] += c->pattern->sign[c->entry[e]] * row[c->entry[e]];
    }
    return true;
}
