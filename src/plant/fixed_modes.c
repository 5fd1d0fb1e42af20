/* A mode s(K) of Acl(K) with left and right eigenvectors w, v moves with the entry (i, j) of K by
 *
 *     ds/dK_ij = -(w'Bk e_i)(e_j'Ck v) / w'v,   Bk = B (I + K D)^-1,  Ck = (I - D F) C,  F = (I + K D)^-1 K
 *
 * and s is algebraic in K, so a derivative that vanishes at random gains vanishes everywhere. For an entry
 * on its own one of the two factors must vanish; each is compared with its own natural size, so that a
 * mode that two small factors make hard to move is not called fixed. Entries tied to one parameter can
 * also cancel each other. */
#include "plant/fixed_modes.h"

#include <float.h>
#include <math.h>
#include <stdint.h>
#include <string.h>

#include "linalg/lapack.h"
#include "plant/modes.h"
#include "plant/spectrum.h"

enum { TRIALS = 4, ATTEMPTS = 10 };
/* A factor below this part of its natural size is zero; see HIDDEN and FLOOR in modes.c. */
static const double NEGLIGIBLE = 1e-9, FLOOR = 1e-4;
/* Random gains that make I + K D worse conditioned than this are drawn again. */
static const double WORST_POSED = 1e-6;

struct work {
    const struct fg_pattern *pattern;
    struct fg_units units;
    struct fg_matrix A, B, C, D;   /* scaled plant */
    struct fg_matrix K, F, Bk, Ck; /* scaled: K m x p, F m x p, Bk n x m, Ck p x n */
    struct fg_matrix Acl, posed, DF;
    double rate;                   /* typical |pole|: the size of a gain that matters */
    double *part_b, *part_c;       /* m, p: |w'Bk e_i| and |e_j'Ck v| relative to their natural sizes */
    double complex *wb, *cv;       /* m, p: the values */
    double *natural_b, *natural_c; /* m, p: the natural sizes */
    int *pivots;
    double *condition_work;
    int *condition_ints;
};

/* Uniform in (-1, 1); splitmix64. The same gains every time, so that runs repeat. */
static double next_random(uint64_t *state)
{
    uint64_t z = (*state += 0x9e3779b97f4a7c15u);
    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9u;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebu;
    z ^= z >> 31;
    return (double)(z >> 11) * 0x1p-52 - 1;
}

/* Entry (i, j) of K in scaled units per unit of its parameter. */
static double entry_scale(const struct work *work, int i, int j)
{
    return work->units.output[j] / work->units.input[i];
}

/* K = fixed entries + random parameters of the size that moves poles by their own magnitude. */
static void random_gain(struct work *work, double *theta, uint64_t *state)
{
    const struct fg_pattern *pattern = work->pattern;
    int m = pattern->m, p = pattern->p;
    for (int k = 0; k < pattern->count; k++)
        theta[k] = 0;
    for (int j = 0; j < p; j++)
        for (int i = 0; i < m; i++) {
            int k = pattern->index[i + j * m];
            if (k >= 0)
                theta[k] = hypot(theta[k], entry_scale(work, i, j));
        }
    for (int k = 0; k < pattern->count; k++) {
        double size = work->rate * exp2(2 * next_random(state)) / fmax(theta[k], DBL_MIN);
        double sign = next_random(state) < 0 ? -1 : 1;
        theta[k] = pattern->lower[k] < pattern->upper[k] ? sign * size : pattern->lower[k];
    }
    for (int j = 0; j < p; j++)
        for (int i = 0; i < m; i++) {
            int at = i + j * m, k = pattern->index[at];
            double value = k < 0 ? pattern->fixed[at] : pattern->sign[at] * theta[k];
            FG_AT(work->K, i, j) = value * entry_scale(work, i, j);
        }
}

/* posed = I + K D, F = posed^-1 K, Bk = B posed^-1, Ck = C - D F C, Acl = A - B F C; false when the loop
 * is nearly ill posed. */
static bool close_loop(struct work *work)
{
    int m = work->K.rows, p = work->K.cols, n = work->A.rows, info = 0;
    double norm = 0, rcond = 1;
    fg_multiply('N', 'N', 1, work->K, work->D, 0, work->posed);
    for (int i = 0; i < m; i++)
        FG_AT(work->posed, i, i) += 1;
    for (int j = 0; j < m; j++) {
        double sum = 0;
        for (int i = 0; i < m; i++)
            sum += fabs(FG_AT(work->posed, i, j));
        norm = fmax(norm, sum);
    }
    dgetrf_(&m, &m, work->posed.at, &m, work->pivots, &info);
    if (info == 0)
        dgecon_("1", &m, work->posed.at, &m, &norm, &rcond, work->condition_work, work->condition_ints, &info,
                1);
    if (info != 0 || !(rcond > WORST_POSED))
        return false;
    memcpy(work->F.at, work->K.at, (size_t)m * (size_t)p * sizeof(double));
    dgetrs_("N", &m, &p, work->posed.at, &m, work->pivots, work->F.at, &m, &info, 1);
    /* Bk = B - Bk K D with Bk K = B F, so Bk = B (I - F D) */
    memcpy(work->Bk.at, work->B.at, (size_t)n * (size_t)m * sizeof(double));
    memcpy(work->Ck.at, work->C.at, (size_t)p * (size_t)n * sizeof(double));
    memcpy(work->Acl.at, work->A.at, (size_t)n * (size_t)n * sizeof(double));
    struct fg_matrix FD = {m, m, work->posed.at};
    fg_multiply('N', 'N', 1, work->F, work->D, 0, FD);
    fg_multiply('N', 'N', -1, work->B, FD, 1, work->Bk);
    fg_multiply('N', 'N', 1, work->D, work->F, 0, work->DF);
    fg_multiply('N', 'N', -1, work->DF, work->C, 1, work->Ck);
    struct fg_matrix BF = {n, p, work->condition_work};
    fg_multiply('N', 'N', 1, work->B, work->F, 0, BF);
    fg_multiply('N', 'N', -1, BF, work->C, 1, work->Acl);
    return true;
}

/* x'f and its size relative to max(sum |x_i||f_i|, FLOOR |f|); `step` apart in memory. */
static double complex factor(int n, const double complex *x, const double *f, int step, bool conjugate,
                             double *natural, double *part)
{
    double complex sum = 0;
    double size = 0, norm = 0;
    for (int i = 0; i < n; i++) {
        double entry = f[(size_t)i * (size_t)step];
        sum += (conjugate ? conj(x[i]) : x[i]) * entry;
        size += cabs(x[i]) * fabs(entry);
        norm = hypot(norm, entry);
    }
    *natural = fmax(size, FLOOR * norm);
    *part = *natural > 0 ? cabs(sum) / *natural : 0;
    return sum;
}

/* Does some free parameter move mode k of the closed loop? */
static bool moves(struct work *work, const struct fg_spectrum *spectrum, int k, double complex *sum,
                  double *size)
{
    const struct fg_pattern *pattern = work->pattern;
    int n = spectrum->n, m = pattern->m, p = pattern->p;
    const double complex *w = spectrum->left + (size_t)k * (size_t)n;
    const double complex *v = spectrum->right + (size_t)k * (size_t)n;
    for (int i = 0; i < m; i++)
        work->wb[i] =
            factor(n, w, work->Bk.at + (size_t)i * (size_t)n, 1, true, &work->natural_b[i], &work->part_b[i]);
    for (int j = 0; j < p; j++)
        work->cv[j] = factor(n, v, work->Ck.at + j, p, false, &work->natural_c[j], &work->part_c[j]);
    for (int l = 0; l < pattern->count; l++) {
        sum[l] = 0;
        size[l] = 0;
    }
    for (int j = 0; j < p; j++)
        for (int i = 0; i < m; i++) {
            int at = i + j * m, l = pattern->index[at];
            if (l < 0 || !(pattern->lower[l] < pattern->upper[l]))
                continue;
            if (work->part_b[i] <= NEGLIGIBLE || work->part_c[j] <= NEGLIGIBLE)
                continue;
            double complex term = work->wb[i] * work->cv[j] * entry_scale(work, i, j) * pattern->sign[at];
            sum[l] += term;
            size[l] += cabs(term);
        }
    for (int l = 0; l < pattern->count; l++)
        if (cabs(sum[l]) > NEGLIGIBLE * size[l])
            return true;
    return false;
}

static bool every_entry_free(const struct fg_pattern *pattern)
{
    for (int at = 0; at < pattern->m * pattern->p; at++)
        if (pattern->index[at] < 0 ||
            !(pattern->lower[pattern->index[at]] < pattern->upper[pattern->index[at]]))
            return false;
    return pattern->count == pattern->m * pattern->p;
}

/* One entry per complex pair. */
static bool listed(const struct fg_spectrum *spectrum, int k)
{
    return spectrum->im[k] >= 0 || fg_spectrum_is_real(spectrum, k);
}

static bool near(double re, double im, double error, const struct fg_fixed_mode *mode)
{
    double apart = hypot(re - mode->re, im - mode->im);
    return apart <= 100 * (error + mode->error) + 1e-12 * hypot(re, im);
}

/* Keeps the candidates that trial t leaves in place (the first trial makes them). A candidate's value is
 * that of the trial with the smallest error bound. */
static int keep_unmoved(struct work *work, const struct fg_spectrum *spectrum, bool first, int count,
                        struct fg_fixed_mode *mode, const char *const *names, bool *used, double complex *sum,
                        double *size)
{
    int kept = 0;
    memset(used, 0, (size_t)spectrum->n);
    for (int c = 0; c < (first ? spectrum->n : count); c++) {
        int k = c;
        if (!first) {
            int best = -1;
            for (int j = 0; j < spectrum->n; j++)
                if (!used[j] && listed(spectrum, j) &&
                    near(spectrum->re[j], spectrum->im[j], fg_spectrum_error(spectrum, j), &mode[c]) &&
                    (best < 0 || hypot(spectrum->re[j] - mode[c].re, spectrum->im[j] - mode[c].im) <
                                     hypot(spectrum->re[best] - mode[c].re, spectrum->im[best] - mode[c].im)))
                    best = j;
            k = best;
        }
        if (k < 0 || !listed(spectrum, k) || moves(work, spectrum, k, sum, size))
            continue;
        used[k] = true;
        struct fg_fixed_mode now = mode[c < count ? c : 0];
        if (first || fg_spectrum_error(spectrum, k) < now.error) {
            now.re = spectrum->re[k];
            now.im = fg_spectrum_is_real(spectrum, k) ? 0 : spectrum->im[k];
            now.error = fg_spectrum_error(spectrum, k);
            fg_spectrum_states(spectrum, k, names, sizeof now.states, now.states);
        }
        mode[kept++] = now;
    }
    return kept;
}

/* With every entry free only uncontrollable and unobservable modes are fixed. */
static flatgain_status confirm_by_rank(const struct fg_plant *plant, const char *const *names,
                                       struct fg_arena *scratch, int *count, struct fg_fixed_mode *mode,
                                       flatgain_error *error)
{
    struct fg_modes open;
    flatgain_status status = fg_modes(plant, plant->A, names, scratch, &open, error);
    int kept = 0;
    for (int c = 0; status == FLATGAIN_OK && c < *count; c++) {
        bool hidden = false;
        for (int k = 0; k < open.count; k++) {
            double apart = hypot(open.mode[k].re - mode[c].re, open.mode[k].im - mode[c].im);
            if ((open.mode[k].uncontrollable || open.mode[k].unobservable) &&
                apart <= 1e3 * mode[c].error + 1e-6 * hypot(mode[c].re, mode[c].im))
                hidden = true;
        }
        if (hidden)
            mode[kept++] = mode[c];
    }
    *count = kept;
    return status;
}

static bool prepare(const struct fg_plant *plant, const struct fg_pattern *pattern, struct fg_arena *scratch,
                    struct work *work)
{
    int n = plant->n, m = plant->m, p = plant->p;
    memset(work, 0, sizeof *work);
    work->pattern = pattern;
    if (!fg_units_find(plant, plant->A, scratch, &work->units))
        return false;
    const struct fg_units *units = &work->units;
    work->A = fg_units_apply(scratch, plant->A, units->state, units->state);
    work->B = fg_units_apply(scratch, plant->B, units->state, units->input);
    work->C = fg_units_apply(scratch, plant->C, units->output, units->state);
    work->D = fg_units_apply(scratch, plant->D, units->output, units->input);
    work->K = fg_matrix_new(scratch, m, p);
    work->F = fg_matrix_new(scratch, m, p);
    work->Bk = fg_matrix_new(scratch, n, m);
    work->Ck = fg_matrix_new(scratch, p, n);
    work->Acl = fg_matrix_new(scratch, n, n);
    work->posed = fg_matrix_new(scratch, m, m);
    work->DF = fg_matrix_new(scratch, p, p);
    work->part_b = fg_arena_doubles(scratch, (size_t)m);
    work->part_c = fg_arena_doubles(scratch, (size_t)p);
    work->natural_b = fg_arena_doubles(scratch, (size_t)m);
    work->natural_c = fg_arena_doubles(scratch, (size_t)p);
    work->wb = fg_arena_get(scratch, (size_t)m * sizeof *work->wb);
    work->cv = fg_arena_get(scratch, (size_t)p * sizeof *work->cv);
    work->pivots = fg_arena_ints(scratch, (size_t)m);
    work->condition_work = fg_arena_doubles(scratch, 4 * (size_t)m + (size_t)n * (size_t)p);
    work->condition_ints = fg_arena_ints(scratch, (size_t)m);
    return !scratch->failed;
}

/* Geometric mean of the open-loop |poles| that are not rounding; 1 when all are zero. */
static double typical_rate(const struct fg_spectrum *spectrum)
{
    double largest = 0, sum = 0;
    int used = 0;
    for (int k = 0; k < spectrum->n; k++)
        largest = fmax(largest, hypot(spectrum->re[k], spectrum->im[k]));
    for (int k = 0; k < spectrum->n; k++) {
        double size = hypot(spectrum->re[k], spectrum->im[k]);
        if (size > 1e-10 * largest) {
            sum += log(size);
            used++;
        }
    }
    return used > 0 && isfinite(sum) ? exp(sum / used) : 1;
}

static void finish(bool discrete, int count, struct fg_fixed_mode *mode)
{
    for (int c = 0; c < count; c++) {
        double measure = discrete ? hypot(mode[c].re, mode[c].im) - 1 : mode[c].re;
        mode[c].unstable = measure >= -mode[c].error;
    }
    for (int c = 1; c < count; c++) /* slowest first */
        for (int at = c; at > 0; at--) {
            struct fg_fixed_mode *a = &mode[at - 1], *b = &mode[at];
            double key_a = discrete ? hypot(a->re, a->im) : a->re,
                   key_b = discrete ? hypot(b->re, b->im) : b->re;
            if (key_b <= key_a)
                break;
            struct fg_fixed_mode keep = *a;
            *a = *b;
            *b = keep;
        }
}

flatgain_status fg_modes_fixed(const struct fg_plant *plant, const struct fg_pattern *pattern,
                               const char *const *state_names, struct fg_arena *arena,
                               struct fg_fixed_modes *fixed, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct work work;
    size_t n = (size_t)plant->n, q = (size_t)pattern->count;
    int count = 0;
    uint64_t random = 20;
    *fixed = (struct fg_fixed_modes){0};
    struct fg_fixed_mode *mode = fg_arena_get(arena, n * sizeof *mode);
    double *theta = fg_arena_doubles(&scratch, q), *size = fg_arena_doubles(&scratch, q);
    double complex *sum = fg_arena_get(&scratch, q * sizeof *sum);
    bool *used = fg_arena_get(&scratch, n);
    if (scratch.failed || arena->failed || !prepare(plant, pattern, &scratch, &work)) {
        fg_arena_release(&scratch);
        return fg_no_memory(error);
    }
    struct fg_spectrum spectrum;
    flatgain_status status = fg_spectrum_compute(work.A, &scratch, &spectrum, error);
    if (status == FLATGAIN_OK)
        work.rate = typical_rate(&spectrum);
    for (int trial = 0; status == FLATGAIN_OK && trial < TRIALS && (trial == 0 || count > 0); trial++) {
        struct fg_arena trial_memory = {0};
        bool posed = false;
        for (int attempt = 0; attempt < ATTEMPTS && !posed; attempt++) {
            random_gain(&work, theta, &random);
            posed = close_loop(&work);
        }
        if (posed) {
            status = fg_spectrum_compute(work.Acl, &trial_memory, &spectrum, error);
            if (status == FLATGAIN_OK)
                count = keep_unmoved(&work, &spectrum, trial == 0, count, mode, state_names, used, sum, size);
        } else {
            count = 0; /* ill posed whatever the gain: nothing is claimed */
        }
        fg_arena_release(&trial_memory);
    }
    if (status == FLATGAIN_OK && count > 0 && every_entry_free(pattern))
        status = confirm_by_rank(plant, state_names, &scratch, &count, mode, error);
    if (status == FLATGAIN_OK) {
        finish(plant->discrete, count, mode);
        fixed->count = count;
        fixed->mode = mode;
    }
    fg_arena_release(&scratch);
    return status;
}
