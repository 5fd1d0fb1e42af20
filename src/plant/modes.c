/* Mode s of A with left null space W of A - s I and right null space V (dimension r > 1 for repeated
 * eigenvalues):
 *
 *   uncontrollable  rank W'B < r      unobservable  rank C V < r
 *   undisturbed     rank W'W0 W < r   unweighted    rank V'Q V < r     (W0: disturbance covariance)
 *
 * which is the rank test of [A - s I, B] and its relatives (Popov, Belevitch, Hautus) carried out in the
 * null space, where it does not depend on how fast the other modes are. [Q N; N' R] >= 0 makes N' vanish
 * where Q does, so Q alone decides at u = 0. Everything is done in the coordinates of fg_units_find and
 * with each column of B divided by its natural size, so units do not change a verdict. */
#include "plant/modes.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "linalg/lapack.h"
#include "plant/spectrum.h"

/* W'b below this part of sum |w_i||b_i| counts as zero: rounding in a plant that went through a change of
 * basis with condition 1e6 stays below, physical couplings are above. */
static const double HIDDEN = 1e-9;
/* The same for w'W0 w, which is quadratic in w and loses half of the digits. */
static const double HIDDEN_SQUARED = 1e-12;
/* Rounding leaves entries of w that should be 0 at 1e-16; the natural size of W'b is not taken below this
 * part of |b| (of sqrt(max diagonal) for covariances), or noise would be compared with noise. */
static const double FLOOR = 1e-4, FLOOR_SQUARED = 1e-6;
/* Eigenvalues of one multiple eigenvalue: not further apart than the rounding error of each (the smaller
 * one, or a Jordan block would swallow simple neighbours), and never more than this part of |A|. */
static const double WIDEST_CLUSTER = 1e-4;
/* Null spaces of repeated eigenvalues need a singular value decomposition each; past order 100 only this
 * many are done, the others use the eigenvectors alone. */
enum { MANY_STATES = 100, DECOMPOSITIONS = 20 };

struct system {
    struct fg_matrix A, B, Ct, Q, W; /* scaled; Ct = C' */
    struct fg_spectrum spectrum;
};

/* Null spaces of A - s I; columns orthonormal (length 1 when r = 1). */
struct null_space {
    int r;
    double complex *left, *right; /* n x r */
};

/* Singular values of a complex a x b matrix (destroyed), descending; false when the iteration failed or an
 * entry is not finite (X'F X overflows for weights of 1e300). */
static bool singular_values(struct fg_arena *scratch, int a, int b, double complex *at, double *values)
{
    int one = 1, info = 0, small = a < b ? a : b, room = 3 * (a + b) + 8;
    double complex *work = fg_arena_get(scratch, (size_t)room * sizeof *work), none[1];
    double *rwork = fg_arena_doubles(scratch, 5 * (size_t)small + 8);
    if (scratch->failed || !fg_all_finite(2 * (size_t)a * (size_t)b, (const double *)at))
        return false;
    zgesvd_("N", "N", &a, &b, (double *)at, &a, values, (double *)none, &one, (double *)none, &one,
            (double *)work, &room, rwork, &info, 1, 1);
    return info == 0;
}

/* r - rank(X'F), X n x r, F n x k real; each column of X'F relative to its natural size. */
static int hidden_from(struct fg_arena *scratch, int n, int r, const double complex *X, struct fg_matrix F)
{
    int used = 0;
    double complex *M = fg_arena_get(scratch, (size_t)r * (size_t)(F.cols + 1) * sizeof *M);
    double *values = fg_arena_doubles(scratch, (size_t)(r + F.cols + 1));
    if (scratch->failed)
        return 0;
    for (int j = 0; j < F.cols; j++) {
        double norm = 0, natural = 0;
        for (int i = 0; i < n; i++)
            norm = hypot(norm, FG_AT(F, i, j));
        if (norm == 0)
            continue;
        for (int k = 0; k < r; k++) {
            double complex sum = 0;
            double size = 0;
            for (int i = 0; i < n; i++) {
                double complex x = X[(size_t)i + (size_t)k * (size_t)n];
                sum += conj(x) * FG_AT(F, i, j);
                size += cabs(x) * fabs(FG_AT(F, i, j));
            }
            M[k + used * r] = sum;
            natural = fmax(natural, size);
        }
        natural = fmax(natural, FLOOR * norm);
        for (int k = 0; k < r; k++)
            M[k + used * r] /= natural;
        used++;
    }
    int small = r < used ? r : used, rank = 0;
    if (small == 0)
        return r;
    if (!singular_values(scratch, r, used, M, values))
        return 0;
    while (rank < small && values[rank] > HIDDEN)
        rank++;
    return r - rank;
}

/* r - rank(X'F X), F n x n symmetric >= 0. */
static int hidden_from_square(struct fg_arena *scratch, int n, int r, const double complex *X,
                              struct fg_matrix F)
{
    double complex *M = fg_arena_get(scratch, (size_t)r * (size_t)r * sizeof *M);
    double complex *FX = fg_arena_get(scratch, (size_t)n * sizeof *FX);
    double *values = fg_arena_doubles(scratch, (size_t)r);
    double natural = 0, largest = 0;
    int rank = 0;
    if (scratch->failed)
        return 0;
    for (int i = 0; i < n; i++)
        largest = fmax(largest, sqrt(fmax(0, FG_AT(F, i, i))));
    if (largest == 0)
        return r;
    for (int k = 0; k < r; k++) {
        double size = 0;
        for (int i = 0; i < n; i++) {
            FX[i] = 0;
            for (int j = 0; j < n; j++)
                FX[i] += FG_AT(F, i, j) * X[(size_t)j + (size_t)k * (size_t)n];
            size += cabs(X[(size_t)i + (size_t)k * (size_t)n]) * sqrt(fmax(0, FG_AT(F, i, i)));
        }
        natural = fmax(natural, size);
        for (int l = 0; l < r; l++) {
            M[l + k * r] = 0;
            for (int i = 0; i < n; i++)
                M[l + k * r] += conj(X[(size_t)i + (size_t)l * (size_t)n]) * FX[i];
        }
    }
    natural = fmax(natural, FLOOR_SQUARED * largest);
    if (!singular_values(scratch, r, r, M, values))
        return 0;
    while (rank < r && values[rank] > HIDDEN_SQUARED * natural * natural)
        rank++;
    return r - rank;
}

/* Members of the multiple eigenvalue that k belongs to (single linkage), by index into the spectrum. */
static int find_cluster(const struct fg_spectrum *spectrum, int k, int *member, bool *in)
{
    int n = spectrum->n, count = 0;
    memset(in, 0, (size_t)n * sizeof *in);
    member[count++] = k;
    in[k] = true;
    for (int next = 0; next < count; next++)
        for (int j = 0; j < n; j++) {
            int i = member[next];
            double apart = hypot(spectrum->re[i] - spectrum->re[j], spectrum->im[i] - spectrum->im[j]);
            double error = fmin(fg_spectrum_error(spectrum, i), fg_spectrum_error(spectrum, j));
            if (!in[j] && apart <= 10 * error && apart <= WIDEST_CLUSTER * spectrum->norm) {
                in[j] = true;
                member[count++] = j;
            }
        }
    return count;
}

/* Null spaces at the mean of the cluster: singular values no larger than its width (a Jordan block of
 * size 2 that rounding split by d has one singular value d^2 and no other small one). */
static bool null_space_of_cluster(struct fg_arena *scratch, const struct system *system, int count,
                                  const int *member, struct null_space *space)
{
    const struct fg_spectrum *spectrum = &system->spectrum;
    int n = spectrum->n, info = 0, room = 8 * n + 8;
    size_t order = (size_t)n;
    double complex mean = 0;
    double width = 0;
    for (int c = 0; c < count; c++)
        mean += (spectrum->re[member[c]] + I * spectrum->im[member[c]]) / count;
    for (int c = 0; c < count; c++)
        width = fmax(width, cabs(spectrum->re[member[c]] + I * spectrum->im[member[c]] - mean));
    if (width > WIDEST_CLUSTER * spectrum->norm)
        return false;
    double complex *M = fg_arena_get(scratch, order * order * sizeof *M);
    double complex *left = fg_arena_get(scratch, order * order * sizeof *left);
    double complex *right = fg_arena_get(scratch, order * order * sizeof *right); /* V', rows */
    double complex *work = fg_arena_get(scratch, (size_t)room * sizeof *work);
    double *rwork = fg_arena_doubles(scratch, 5 * order + 8), *values = fg_arena_doubles(scratch, order);
    if (scratch->failed)
        return false;
    for (size_t i = 0; i < order * order; i++)
        M[i] = system->A.at[i];
    for (size_t i = 0; i < order; i++)
        M[i * (order + 1)] -= mean;
    zgesvd_("A", "A", &n, &n, (double *)M, &n, values, (double *)left, &n, (double *)right, &n,
            (double *)work, &room, rwork, &info, 1, 1);
    if (info != 0)
        return false;
    int r = 1;
    while (r < count && values[n - 1 - r] <= 10 * width + 1e-11 * spectrum->norm)
        r++;
    space->r = r;
    space->left = left + (order - (size_t)r) * order;
    space->right = M; /* columns: conjugated rows of V' */
    for (int k = 0; k < r; k++)
        for (size_t i = 0; i < order; i++)
            M[i + (size_t)k * order] = conj(right[(order - (size_t)r + (size_t)k) + i * order]);
    return true;
}

static double slowness(bool discrete, const struct fg_spectrum *spectrum, int k)
{
    return discrete ? hypot(spectrum->re[k], spectrum->im[k]) : spectrum->re[k];
}

/* Indices of the modes (one per complex pair), slowest first; equal ones by |im|, then as found. */
static int sort_modes(bool discrete, const struct fg_spectrum *spectrum, int *order)
{
    int count = 0;
    for (int k = 0; k < spectrum->n; k++) {
        if (spectrum->im[k] < 0 && !fg_spectrum_is_real(spectrum, k))
            continue;
        double key = slowness(discrete, spectrum, k);
        int at = count++;
        for (; at > 0; at--) {
            double other = slowness(discrete, spectrum, order[at - 1]);
            if (!(key > other || (key == other && spectrum->im[k] < spectrum->im[order[at - 1]])))
                break;
            order[at] = order[at - 1];
        }
        order[at] = k;
    }
    return count;
}

/* Condition of the matrix of unit eigenvectors; (Re v, Im v) stand for a pair, which changes nothing. */
static double basis_condition(struct fg_arena *scratch, const struct fg_spectrum *spectrum)
{
    size_t n = (size_t)spectrum->n;
    double complex *M = fg_arena_get(scratch, n * n * sizeof *M);
    double *values = fg_arena_doubles(scratch, n);
    if (n == 0 || scratch->failed)
        return 1;
    memcpy(M, spectrum->right, n * n * sizeof *M);
    if (!singular_values(scratch, spectrum->n, spectrum->n, M, values))
        return NAN;
    return values[0] / fmax(values[n - 1], DBL_MIN);
}

static bool scale_system(const struct fg_plant *plant, struct fg_matrix A, struct fg_arena *scratch,
                         struct system *system)
{
    struct fg_units units;
    if (!fg_units_find(plant, A, scratch, &units))
        return false;
    double *inverse = fg_arena_doubles(scratch, (size_t)plant->n);
    if (!inverse)
        return false;
    for (int i = 0; i < plant->n; i++)
        inverse[i] = 1 / units.state[i];
    system->A = fg_units_apply(scratch, A, units.state, units.state);
    system->B = fg_units_apply(scratch, plant->B, units.state, units.input);
    system->Ct = fg_matrix_transpose(scratch, fg_units_apply(scratch, plant->C, units.output, units.state));
    system->Q = fg_units_apply(scratch, plant->Q, inverse, units.state);
    system->W = fg_units_apply(scratch, plant->W, units.state, inverse);
    return !scratch->failed;
}

/* Flags of the modes list[0..count) (one multiple eigenvalue): as many as are hidden, the first ones. */
static void judge_modes(struct fg_arena *scratch, const struct system *system, const struct null_space *space,
                        int count, struct fg_mode *const *list)
{
    int n = system->spectrum.n;
    int uncontrollable = hidden_from(scratch, n, space->r, space->left, system->B);
    int unobservable = hidden_from(scratch, n, space->r, space->right, system->Ct);
    int unweighted = hidden_from_square(scratch, n, space->r, space->right, system->Q);
    int undisturbed = hidden_from_square(scratch, n, space->r, space->left, system->W);
    for (int c = 0; c < count; c++) {
        list[c]->uncontrollable = c < uncontrollable;
        list[c]->unobservable = c < unobservable;
        list[c]->unweighted = c < unweighted;
        list[c]->undisturbed = c < undisturbed;
    }
}

flatgain_status fg_modes(const struct fg_plant *plant, struct fg_matrix A, const char *const *state_names,
                         struct fg_arena *arena, struct fg_modes *modes, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct system system;
    int n = plant->n, decompositions = 0;
    *modes = (struct fg_modes){0};
    int *order = fg_arena_ints(&scratch, (size_t)n), *member = fg_arena_ints(&scratch, (size_t)n);
    bool *done = fg_arena_get(&scratch, (size_t)n), *in = fg_arena_get(&scratch, (size_t)n);
    struct fg_mode **list = fg_arena_get(&scratch, (size_t)n * sizeof *list);
    struct fg_mode *mode = fg_arena_get(arena, (size_t)n * sizeof *mode);
    if (scratch.failed || arena->failed || !scale_system(plant, A, &scratch, &system)) {
        fg_arena_release(&scratch);
        return fg_no_memory(error);
    }
    const struct fg_spectrum *spectrum = &system.spectrum;
    flatgain_status status = fg_spectrum_compute(system.A, &scratch, &system.spectrum, error);
    int count = status == FLATGAIN_OK ? sort_modes(plant->discrete, spectrum, order) : 0;
    for (int k = 0; k < count; k++) {
        mode[k].re = spectrum->re[order[k]];
        mode[k].im = fg_spectrum_is_real(spectrum, order[k]) ? 0 : spectrum->im[order[k]];
        fg_spectrum_states(spectrum, order[k], state_names, sizeof mode[k].states, mode[k].states);
    }
    for (int k = 0; k < count; k++) {
        struct fg_arena space_memory = {0};
        size_t at = (size_t)order[k] * (size_t)n;
        struct null_space space = {1, spectrum->left + at, spectrum->right + at};
        if (done[k])
            continue;
        int size = find_cluster(spectrum, order[k], member, in), listed = 0;
        if (size > 1 && (n <= MANY_STATES || decompositions++ < DECOMPOSITIONS) &&
            null_space_of_cluster(&space_memory, &system, size, member, &space)) {
            for (int l = 0; l < count; l++)
                if (in[order[l]] && !done[l]) {
                    done[l] = true;
                    list[listed++] = &mode[l];
                }
        } else {
            list[listed++] = &mode[k];
        }
        judge_modes(&space_memory, &system, &space, listed, list);
        scratch.failed = scratch.failed || space_memory.failed;
        fg_arena_release(&space_memory);
    }
    if (status == FLATGAIN_OK)
        modes->condition = basis_condition(&scratch, spectrum);
    if (status == FLATGAIN_OK && scratch.failed)
        status = fg_no_memory(error);
    if (status == FLATGAIN_OK) {
        modes->count = count;
        modes->mode = mode;
    }
    fg_arena_release(&scratch);
    return status;
}
