#include "assess/crossings.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "linalg/lapack.h"

/* Rounding moves eigenvalues off the imaginary axis, double ones by sqrt(1e-16) of their size and more in
 * badly conditioned loops. Those inside this wedge are taken for crossings; the caller evaluates each. */
static const double WEDGE = 0.05;
/* Zeros are computed around a real point sigma and lose digits as |s| / sigma or sigma / |s| grows. Loops
 * whose poles spread wider get a further sigma for each such factor. */
static const double SPREAD = 1e5;

void fg_frequencies_add(struct fg_frequencies *list, double w)
{
    if (!(w >= 0) || isinf(w) || list->failed)
        return;
    if (list->count == list->room) {
        int room = list->room > 0 ? 2 * list->room : 64;
        double *at = realloc(list->at, (size_t)room * sizeof *at);
        if (!at) {
            list->failed = true;
            return;
        }
        list->at = at;
        list->room = room;
    }
    list->at[list->count++] = w;
}

static int ascending(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

void fg_frequencies_sort(struct fg_frequencies *list)
{
    int kept = 0;
    if (list->count > 0)
        qsort(list->at, (size_t)list->count, sizeof *list->at, ascending);
    for (int k = 0; k < list->count; k++)
        if (kept == 0 || list->at[k] > list->at[kept - 1] * (1 + 4 * DBL_EPSILON))
            list->at[kept++] = list->at[k];
    list->count = kept;
}

void fg_frequencies_free(struct fg_frequencies *list)
{
    free(list->at);
    *list = (struct fg_frequencies){0};
}

static void add_if_imaginary(struct fg_frequencies *list, double complex s)
{
    if (fabs(creal(s)) <= WEDGE * cabs(s))
        fg_frequencies_add(list, fabs(cimag(s)));
}

/* What zeros_around needs at one sigma. */
struct resolvent {
    double sigma;
    struct fg_matrix plus, minus; /* (sigma I - A)^-1, (sigma I + A)^-1 */
};

static bool invert_shifted(const struct fg_loop *loop, double sigma, double sign, struct fg_matrix inverse,
                           struct fg_arena *scratch)
{
    int n = loop->n, info = 0;
    struct fg_matrix lu = fg_matrix_new(scratch, n, n);
    int *pivots = fg_arena_ints(scratch, (size_t)n);
    if (scratch->failed)
        return false;
    for (size_t i = 0; i < (size_t)n * (size_t)n; i++) {
        lu.at[i] = -sign * loop->A[i];
        inverse.at[i] = 0;
    }
    for (int i = 0; i < n; i++) {
        FG_AT(lu, i, i) += sigma;
        FG_AT(inverse, i, i) = 1;
    }
    dgetrf_(&n, &n, lu.at, &n, pivots, &info);
    if (info != 0)
        return false;
    dgetrs_("N", &n, &n, lu.at, &n, pivots, inverse.at, &n, &info, 1);
    return fg_all_finite((size_t)n * (size_t)n, inverse.at);
}

/* Zeros s of  G(s) = c (s I - M)^-1 b + d0  with  M = diag(A, -A), b = [b_i; b_i], c = [c_i, sign c_i]:
 *   sign = +1, d0 = 0           G = T_ii(s) - T_ii(-s)       (twice j Im T on the axis)
 *   sign = -1, d0 = 2 d_ii - 1  G = T_ii(s) + T_ii(-s) - 1   (twice Re T - 1/2)
 * With z = 1 / (s - sigma), P = (sigma I - M)^-1, x = P b, y = c P and g = G(sigma):
 *   G = g - y (z I + P)^-1 x, so its zeros are the eigenvalues z of -P + x y / g,
 * an ordinary eigenvalue problem whatever the order of the zeros at infinity (they sit at z = 0). */
static bool zeros_around(const struct fg_loop *loop, int i, int sign, const struct resolvent *at,
                         struct fg_frequencies *list, struct fg_arena *scratch)
{
    int n = loop->n, size = 2 * n;
    struct fg_matrix Z = fg_matrix_new(scratch, size, size);
    double *x = fg_arena_doubles(scratch, (size_t)size), *y = fg_arena_doubles(scratch, (size_t)size);
    double *re = fg_arena_doubles(scratch, (size_t)size), *im = fg_arena_doubles(scratch, (size_t)size);
    if (scratch->failed)
        return false;
    const double *b = loop->B + (size_t)i * (size_t)n;
    double g = sign > 0 ? 0 : 2 * loop->D[i + i * loop->m] - 1, largest = fabs(g);
    for (int k = 0; k < n; k++)
        for (int l = 0; l < n; l++) {
            double c = loop->C[(size_t)i + (size_t)l * (size_t)loop->m];
            FG_AT(Z, l, k) = -FG_AT(at->plus, l, k);
            FG_AT(Z, n + l, n + k) = -FG_AT(at->minus, l, k);
            x[l] += FG_AT(at->plus, l, k) * b[k];
            x[n + l] += FG_AT(at->minus, l, k) * b[k];
            y[k] += c * FG_AT(at->plus, l, k);
            y[n + k] += sign * c * FG_AT(at->minus, l, k);
        }
    for (int l = 0; l < n; l++) {
        double c = loop->C[(size_t)i + (size_t)l * (size_t)loop->m];
        g += c * x[l] + sign * c * x[n + l];
        largest = fmax(largest, fmax(fabs(c * x[l]), fabs(c * x[n + l])));
    }
    if (!(fabs(g) > 100 * DBL_EPSILON * largest))
        return false; /* sigma is a zero itself */
    for (int k = 0; k < size; k++)
        for (int l = 0; l < size; l++)
            FG_AT(Z, l, k) += x[l] * y[k] / g;
    if (!fg_loop_eigenvalues(size, Z.at, re, im, scratch))
        return false;
    for (int k = 0; k < size; k++) {
        double complex z = re[k] + I * im[k];
        if (z != 0)
            add_if_imaginary(list, at->sigma + 1 / z);
    }
    return true;
}

/* A real point near `wanted` that is well away from the mirror images -pole of the poles. */
static double clear_point(const struct fg_loop *loop, double wanted)
{
    static const double FACTOR[] = {1, 1.37, 0.73, 1.9, 0.52};
    double best = wanted, best_distance = -1;
    for (size_t f = 0; f < sizeof FACTOR / sizeof *FACTOR; f++) {
        double sigma = wanted * FACTOR[f], distance = INFINITY;
        for (int k = 0; k < loop->n; k++) {
            double apart = hypot(sigma + loop->re[k], loop->im[k]);
            distance = fmin(distance, apart / (sigma + hypot(loop->re[k], loop->im[k])));
        }
        if (distance > best_distance) {
            best_distance = distance;
            best = sigma;
        }
    }
    return best;
}

static void add_zeros(const struct fg_loop *loop, int i, int sign, struct fg_frequencies *list)
{
    static const double AGAIN[] = {1, 1.13, 0.89}; /* when sigma hits a zero of G */
    double low = fmax(loop->slowest, 1e-14 * loop->fastest), high = loop->fastest;
    if (!(high > 0))
        return;
    int points = 1 + (int)floor(log(high / low) / log(SPREAD));
    for (int k = 0; k < points; k++) {
        double wanted = low * pow(high / low, (k + 0.5) / points);
        bool done = false;
        for (size_t again = 0; again < sizeof AGAIN / sizeof *AGAIN && !done; again++) {
            struct fg_arena scratch = {0};
            struct resolvent at = {.sigma = clear_point(loop, wanted * AGAIN[again]),
                                   .plus = fg_matrix_new(&scratch, loop->n, loop->n),
                                   .minus = fg_matrix_new(&scratch, loop->n, loop->n)};
            done = !scratch.failed && invert_shifted(loop, at.sigma, 1, at.plus, &scratch) &&
                   invert_shifted(loop, at.sigma, -1, at.minus, &scratch) &&
                   zeros_around(loop, i, sign, &at, list, &scratch);
            list->failed = list->failed || scratch.failed;
            fg_arena_release(&scratch);
        }
    }
}

void fg_crossings_real(const struct fg_loop *loop, int i, struct fg_frequencies *list)
{
    add_zeros(loop, i, 1, list);
}

void fg_crossings_unit(const struct fg_loop *loop, int i, struct fg_frequencies *list)
{
    add_zeros(loop, i, -1, list);
}

/* S = Ds - C (s I - A)^-1 B with Ds = I - D. `level` is a singular value of S(j w) when j w is an
 * eigenvalue of the Hamiltonian matrix (Boyd, Balakrishnan, Systems & Control Letters 15 (1990) 1)
 *
 *   [ A + B R^-1 Ds'Cs        B R^-1 B'             ]      R = level^2 I - Ds'Ds,  Cs = -C
 *   [ -Cs'(I + Ds R^-1 Ds')Cs   -(A + B R^-1 Ds'Cs)' ]
 *
 * whose two off-diagonal blocks are brought to one size by scaling. */
bool fg_crossings_level(const struct fg_loop *loop, int i, double level, struct fg_frequencies *list)
{
    int n = loop->n, m = loop->m, k = i < 0 ? m : 1, first = i < 0 ? 0 : i, size = 2 * n, info = 0;
    struct fg_arena scratch = {0};
    struct fg_matrix A = {n, n, loop->A}, B = {n, k, loop->B + (size_t)first * (size_t)n};
    struct fg_matrix C = fg_matrix_new(&scratch, k, n), Ds = fg_matrix_new(&scratch, k, k);
    struct fg_matrix R = fg_matrix_new(&scratch, k, k), RB = fg_matrix_transpose(&scratch, B);
    struct fg_matrix RDC = fg_matrix_new(&scratch, k, n), F = fg_matrix_copy(&scratch, A);
    struct fg_matrix G = fg_matrix_new(&scratch, n, n), M = fg_matrix_new(&scratch, n, n);
    struct fg_matrix H = fg_matrix_new(&scratch, size, size);
    double *re = fg_arena_doubles(&scratch, (size_t)size), *im = fg_arena_doubles(&scratch, (size_t)size);
    bool good = !scratch.failed;
    if (good) {
        for (int a = 0; a < k; a++) {
            for (int j = 0; j < n; j++)
                FG_AT(C, a, j) = -loop->C[(size_t)(first + a) + (size_t)j * (size_t)m];
            for (int b = 0; b < k; b++)
                FG_AT(Ds, a, b) = (a == b) - loop->D[first + a + (first + b) * m];
            FG_AT(R, a, a) = level * level;
        }
        fg_multiply('T', 'N', -1, Ds, Ds, 1, R);
        dpotrf_("L", &k, R.at, &k, &info, 1);
        good = info == 0;
    }
    if (good) {
        fg_multiply('T', 'N', 1, Ds, C, 0, RDC);
        dpotrs_("L", &k, &n, R.at, &k, RDC.at, &k, &info, 1);
        dpotrs_("L", &k, &n, R.at, &k, RB.at, &k, &info, 1);
        fg_multiply('N', 'N', 1, B, RDC, 1, F); /* A + B R^-1 Ds'C */
        fg_multiply('N', 'N', 1, B, RB, 0, G);  /* B R^-1 B' */
        fg_multiply('T', 'N', 1, C, C, 0, M);   /* C'C + C'Ds R^-1 Ds'C */
        struct fg_matrix DC = fg_matrix_new(&scratch, k, n);
        good = !scratch.failed;
        if (good) {
            fg_multiply('T', 'N', 1, Ds, C, 0, DC);
            fg_multiply('T', 'N', 1, DC, RDC, 1, M);
            double g = fg_matrix_max_abs(G), c = fg_matrix_max_abs(M);
            double t = g > 0 && c > 0 ? exp2(round(log2(c / g) / 2)) : 1; /* t^2 g about c */
            for (int b = 0; b < n; b++)
                for (int a = 0; a < n; a++) {
                    FG_AT(H, a, b) = FG_AT(F, a, b);
                    FG_AT(H, a, n + b) = t * FG_AT(G, a, b);
                    FG_AT(H, n + a, b) = -FG_AT(M, a, b) / t;
                    FG_AT(H, n + a, n + b) = -FG_AT(F, b, a);
                }
            good = fg_loop_eigenvalues(size, H.at, re, im, &scratch);
        }
    }
    for (int e = 0; good && e < size; e++)
        add_if_imaginary(list, re[e] + I * im[e]);
    list->failed = list->failed || scratch.failed;
    fg_arena_release(&scratch);
    return good;
}
