#include "plant/spectrum.h"

#include <float.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "linalg/lapack.h"

/* A direct coupling below this part of a coupling through one state between, |a_ik||a_kj| / rate, is
 * rounding noise of a computed matrix and must not pull at the units. The comparison itself does not
 * depend on units. */
static const double NOISE_ENTRY = 1e-12;
/* Ties the scales of unconnected parts to 1; small against one connection. */
static const double TIE = 1e-8;

/* Least squares in the logarithms: each entry a_ij that is not noise says
 *     log|a_ij| - target + (scale of column j) - (scale of row i) = 0.
 * Its solution moves exactly with a change of units. Normal equations: a graph Laplacian. */
struct fit {
    int size;
    double *laplacian, *rhs;
};

/* max over the states k between of |left_ik||right_kj|; k = i (k = j) is no state between when not_i. */
static double indirect(struct fg_matrix left, struct fg_matrix right, int i, int j, bool not_i, bool not_j)
{
    double largest = 0;
    for (int k = 0; k < left.cols; k++)
        if (!(not_i && k == i) && !(not_j && k == j))
            largest = fmax(largest, fabs(FG_AT(left, i, k) * FG_AT(right, k, j)));
    return largest;
}

static void add_entry(struct fit *fit, double size, double target, int row, int col)
{
    size_t r = (size_t)row, c = (size_t)col, n = (size_t)fit->size;
    double b = log(size) - target;
    fit->laplacian[r + r * n] += 1;
    fit->laplacian[c + c * n] += 1;
    fit->laplacian[r + c * n] -= 1;
    fit->laplacian[c + r * n] -= 1;
    fit->rhs[c] -= b;
    fit->rhs[r] += b;
}

static void add_entries(struct fit *fit, const struct fg_plant *plant, struct fg_matrix A, double rate)
{
    int n = plant->n, m = plant->m, p = plant->p;
    double noise = NOISE_ENTRY / exp(rate);
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) {
            double size = fabs(FG_AT(A, i, j));
            if (i != j && size > noise * indirect(A, A, i, j, true, true))
                add_entry(fit, size, rate, i, j);
        }
    for (int j = 0; j < m; j++)
        for (int i = 0; i < n; i++) {
            double size = fabs(FG_AT(plant->B, i, j));
            if (size > noise * indirect(A, plant->B, i, j, true, false))
                add_entry(fit, size, 0, i, n + j);
        }
    for (int j = 0; j < n; j++)
        for (int i = 0; i < p; i++) {
            double size = fabs(FG_AT(plant->C, i, j));
            if (size > noise * indirect(plant->C, A, i, j, false, true))
                add_entry(fit, size, 0, n + m + i, j);
        }
}

/* Mean log|eigenvalue|: the rate that the entries of A are compared with, so that the time unit does
 * not matter either. 0 for a nilpotent A. */
static double typical_log_rate(struct fg_matrix A, struct fg_arena *scratch)
{
    int n = A.rows, info = 0, one = 1, room = 8 * n + 8;
    struct fg_matrix copy = fg_matrix_copy(scratch, A);
    double *wr = fg_arena_doubles(scratch, (size_t)n), *wi = fg_arena_doubles(scratch, (size_t)n);
    double *work = fg_arena_doubles(scratch, (size_t)room), none[1], largest = 0, sum = 0;
    int used = 0;
    if (scratch->failed)
        return 0;
    dgeev_("N", "N", &n, copy.at, &n, wr, wi, none, &one, none, &one, work, &room, &info, 1, 1);
    if (info != 0)
        return 0;
    for (int k = 0; k < n; k++)
        largest = fmax(largest, hypot(wr[k], wi[k]));
    for (int k = 0; k < n; k++) {
        double size = hypot(wr[k], wi[k]);
        if (size > 1e-10 * largest) {
            sum += log(size);
            used++;
        }
    }
    return used > 0 ? sum / used : 0;
}

bool fg_units_find(const struct fg_plant *plant, struct fg_matrix A, struct fg_arena *arena,
                   struct fg_units *units)
{
    int n = plant->n, m = plant->m, p = plant->p, size = n + m + p, one = 1, info = 0;
    struct fg_arena scratch = {0};
    struct fit fit = {.size = size,
                      .laplacian = fg_arena_doubles(&scratch, (size_t)size * (size_t)size),
                      .rhs = fg_arena_doubles(&scratch, (size_t)size)};
    double *scale = fg_arena_doubles(arena, (size_t)size);
    bool finite = fg_all_finite((size_t)n * (size_t)n, A.at) &&
                  fg_all_finite((size_t)n * (size_t)m, plant->B.at) &&
                  fg_all_finite((size_t)p * (size_t)n, plant->C.at);
    double rate = finite && !scratch.failed ? typical_log_rate(A, &scratch) : 0;
    bool enough = !scratch.failed && !arena->failed;
    if (enough) {
        for (int k = 0; k < size; k++)
            scale[k] = 1;
        *units = (struct fg_units){scale, scale + n, scale + n + m};
    }
    if (enough && finite) {
        add_entries(&fit, plant, A, rate);
        for (int k = 0; k < size; k++)
            fit.laplacian[(size_t)k * (size_t)(size + 1)] += TIE;
        dpotrf_("L", &size, fit.laplacian, &size, &info, 1);
        if (info == 0)
            dpotrs_("L", &size, &one, fit.laplacian, &size, fit.rhs, &size, &info, 1);
        if (info == 0)
            for (int k = 0; k < size; k++)
                scale[k] = exp2(fmax(-300, fmin(300, round(fit.rhs[k] / log(2.0)))));
    }
    fg_arena_release(&scratch);
    return enough;
}

struct fg_matrix fg_units_apply(struct fg_arena *arena, struct fg_matrix a, const double *left,
                                const double *right)
{
    struct fg_matrix scaled = fg_matrix_copy(arena, a);
    if (scaled.at)
        for (int j = 0; j < a.cols; j++)
            for (int i = 0; i < a.rows; i++)
                FG_AT(scaled, i, j) *= (right ? right[j] : 1) / (left ? left[i] : 1);
    return scaled;
}

/* Real and imaginary columns as dgeev packs them -> complex columns of length 1. */
static void unpack(int n, const double *im, const double *packed, double complex *out)
{
    size_t rows = (size_t)n;
    for (int k = 0; k < n; k++) {
        const double *a = packed + (size_t)k * rows;
        double complex *to = out + (size_t)k * rows;
        double sum = 0;
        for (size_t i = 0; i < rows; i++) {
            if (im[k] > 0)
                to[i] = a[i] + I * a[i + rows];
            else if (im[k] < 0)
                to[i] = (a - rows)[i] - I * a[i];
            else
                to[i] = a[i];
            sum += creal(to[i]) * creal(to[i]) + cimag(to[i]) * cimag(to[i]);
        }
        for (size_t i = 0; i < rows && sum > 0; i++)
            to[i] /= sqrt(sum);
    }
}

flatgain_status fg_spectrum_compute(struct fg_matrix A, struct fg_arena *arena, struct fg_spectrum *spectrum,
                                    flatgain_error *error)
{
    int n = A.rows, info = 0, room = 8 * n + 8 + 40 * n;
    size_t square = (size_t)n * (size_t)n;
    if (!fg_all_finite(square, A.at))
        return fg_fail(error, FLATGAIN_NUMERICAL, "the state matrix is not finite");
    struct fg_arena scratch = {0};
    struct fg_matrix copy = fg_matrix_copy(&scratch, A);
    double *vl = fg_arena_doubles(&scratch, square), *vr = fg_arena_doubles(&scratch, square);
    double *work = fg_arena_doubles(&scratch, (size_t)room);
    *spectrum = (struct fg_spectrum){.n = n,
                                     .re = fg_arena_doubles(arena, (size_t)n),
                                     .im = fg_arena_doubles(arena, (size_t)n),
                                     .left = fg_arena_get(arena, square * sizeof(double complex)),
                                     .right = fg_arena_get(arena, square * sizeof(double complex)),
                                     .condition = fg_arena_doubles(arena, (size_t)n)};
    flatgain_status status = FLATGAIN_OK;
    if (scratch.failed || arena->failed) {
        status = fg_no_memory(error);
    } else if (n > 0) {
        for (size_t i = 0; i < square; i++)
            spectrum->norm += A.at[i] * A.at[i];
        spectrum->norm = sqrt(spectrum->norm);
        dgeev_("V", "V", &n, copy.at, &n, spectrum->re, spectrum->im, vl, &n, vr, &n, work, &room, &info, 1,
               1);
        if (info != 0 || !fg_all_finite((size_t)n, spectrum->re) || !fg_all_finite((size_t)n, spectrum->im))
            status = fg_fail(error, FLATGAIN_NUMERICAL, "the eigenvalues could not be computed");
    }
    if (status == FLATGAIN_OK) {
        unpack(n, spectrum->im, vl, spectrum->left);
        unpack(n, spectrum->im, vr, spectrum->right);
        for (int k = 0; k < n; k++) {
            double complex product = 0;
            for (size_t i = 0; i < (size_t)n; i++)
                product += conj(spectrum->left[i + (size_t)k * (size_t)n]) *
                           spectrum->right[i + (size_t)k * (size_t)n];
            spectrum->condition[k] = 1 / fmax(cabs(product), DBL_EPSILON);
        }
    }
    fg_arena_release(&scratch);
    return status;
}

double fg_spectrum_error(const struct fg_spectrum *spectrum, int k)
{
    return 10 * DBL_EPSILON * spectrum->norm * spectrum->condition[k];
}

bool fg_spectrum_is_real(const struct fg_spectrum *spectrum, int k)
{
    return fabs(spectrum->im[k]) <= fg_spectrum_error(spectrum, k);
}

void fg_spectrum_states(const struct fg_spectrum *spectrum, int k, const char *const *names, size_t size,
                        char *text)
{
    enum { SHOWN = 3 };
    static const double PART = 0.3; /* of the largest participation */
    int n = spectrum->n, chosen[SHOWN] = {-1, -1, -1};
    const double complex *w = spectrum->left + (size_t)k * (size_t)n;
    const double complex *v = spectrum->right + (size_t)k * (size_t)n;
    double largest = 0;
    for (int i = 0; i < n; i++)
        largest = fmax(largest, cabs(w[i]) * cabs(v[i]));
    size_t used = 0;
    text[0] = 0;
    for (int c = 0; c < SHOWN; c++) {
        double best = 0;
        for (int i = 0; i < n; i++) {
            double part = cabs(w[i]) * cabs(v[i]);
            bool taken = i == chosen[0] || i == chosen[1] || i == chosen[2];
            /* a hair above, so that equal participations come in the order of the states */
            if (!taken && part >= PART * largest && part > best * (1 + 1e-9)) {
                best = part;
                chosen[c] = i;
            }
        }
        if (chosen[c] < 0)
            break;
        const char *separator = used > 0 ? ", " : "";
        size_t extra = strlen(names[chosen[c]]) + strlen(separator);
        if (used + extra + 1 > size)
            continue;
        snprintf(text + used, size - used, "%s%s", separator, names[chosen[c]]);
        used += extra;
    }
}
