/* Row i of K times g = 1 + kappa puts a pole at s where 1 + kappa T_ii(s) = 0. So
 *
 *   gain_up    1 - 1 / min T_ii(j w)   over w with T_ii real and negative
 *   gain_down  1 - 1 / max T_ii(j w)   over w with T_ii real and above 1
 *   phase      min |arg(-L_i)|         over w with Re T_ii = 1/2, which is |L_i| = 1;  L = T / (1 - T)
 *   peak       max |1 - T_ii|          and, for all inputs together, max sigma_max(I - T)
 *
 * The frequencies come from eigenvalue problems (crossings.c) and are polished on T itself. Peaks: a level
 * 1e-7 above the best value found is tested for crossings until there are none (Bruinsma, Steinbuch,
 * Systems & Control Letters 14 (1990) 287), which proves the peak to that accuracy.
 *
 * Past LARGE states the eigenvalue problems (order 2 n, several per loop) would take minutes. There the
 * frequencies come from a grid laid through the poles of the closed loop and 40 points a decade, polished
 * in the same way: accurate where it looks, but without the proof. */
#include "assess/margins.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "assess/crossings.h"
#include "assess/loop.h"
#include "linalg/lapack.h"

enum { LARGE = 200, PER_DECADE = 40, LEVEL_ROUNDS = 30, POLISH = 100, REFINED_PEAKS = 12 };
/* A loop gain may rise by 160 dB or fall by as much: no limit that matters, and about where rounding in T
 * would start to invent one. */
static const double NO_LIMIT = 1e8;
static const double PEAK_TOLERANCE = 1e-7;
/* |Im T| below this part of |T| may be a touching of the real axis without a change of sign. It is one
 * when it grows at least a thousandfold within a thousandth of w: T that only tends to a real value, at
 * low or high frequency, does not. */
static const double TOUCH = 1e-9, TOUCH_GROWTH = 1e3, TOUCH_STEP = 1e-3;

struct point {
    double w;
    double complex t;   /* T_ii */
    double noise, peak; /* peak: |1 - T_ii|, or sigma_max(I - T) when all inputs are meant */
};

struct points {
    int count;
    struct point *at; /* ascending in w; 0 first, INFINITY last */
};

/* What an evaluation needs: loop i, or all inputs when i < 0. */
struct probe {
    const struct fg_loop *loop;
    int i;
    double complex *T, *work; /* m x m, workspace of zgesvd */
    double *noise, *values, *rwork;
    int room;
};

static bool probe_new(const struct fg_loop *loop, struct fg_arena *arena, struct probe *probe)
{
    size_t m = (size_t)loop->m;
    *probe = (struct probe){.loop = loop, .room = 8 * loop->m + 8};
    probe->T = fg_arena_get(arena, m * m * sizeof *probe->T);
    probe->work = fg_arena_get(arena, (size_t)probe->room * sizeof *probe->work);
    probe->noise = fg_arena_doubles(arena, m);
    probe->values = fg_arena_doubles(arena, m);
    probe->rwork = fg_arena_doubles(arena, 5 * m + 8);
    return !arena->failed;
}

/* sigma_max(I - T); T destroyed. */
static double largest_singular_value(struct probe *probe)
{
    int m = probe->loop->m, one = 1, info = 0;
    double none[2];
    for (int k = 0; k < m * m; k++) {
        probe->T[k] = (k % (m + 1) == 0) - probe->T[k];
        if (!isfinite(creal(probe->T[k])) || !isfinite(cimag(probe->T[k])))
            return NAN;
    }
    if (m == 1)
        return cabs(probe->T[0]);
    zgesvd_("N", "N", &m, &m, (double *)probe->T, &m, probe->values, none, &one, none, &one,
            (double *)probe->work, &probe->room, probe->rwork, &info, 1, 1);
    return info == 0 ? probe->values[0] : NAN;
}

static struct point evaluate(struct probe *probe, double w)
{
    struct point point = {.w = w};
    int m = probe->loop->m, i = probe->i;
    fg_loop_evaluate(probe->loop, w, probe->T, probe->noise);
    if (i < 0) {
        point.peak = largest_singular_value(probe);
    } else {
        point.t = probe->T[i + i * m];
        point.noise = probe->noise[i];
        point.peak = cabs(1 - point.t);
    }
    return point;
}

/* Frequencies where the poles make things happen. */
static void add_pole_frequencies(const struct fg_loop *loop, struct fg_frequencies *list)
{
    for (int k = 0; k < loop->n; k++) {
        double re = fabs(loop->re[k]), im = fabs(loop->im[k]);
        fg_frequencies_add(list, hypot(re, im));
        fg_frequencies_add(list, im);
        fg_frequencies_add(list, im + re);
        if (im > re)
            fg_frequencies_add(list, im - re);
    }
    double low = fmax(loop->slowest, 1e-14 * loop->fastest) / 1e3, high = loop->fastest * 1e2;
    int per_decade = loop->n > LARGE ? PER_DECADE : 4, steps = 0;
    if (!(low > 0) || !isfinite(high))
        return;
    steps = (int)ceil(log10(high / low) * per_decade);
    for (int k = 0; k <= steps; k++)
        fg_frequencies_add(list, low * pow(10, (double)k / per_decade));
}

static void add_midpoints(struct fg_frequencies *list)
{
    int count = list->count;
    for (int k = 0; k + 1 < count; k++)
        fg_frequencies_add(list, 0.5 * (list->at[k] + list->at[k + 1]));
    if (count > 0)
        fg_frequencies_add(list, 2 * list->at[count - 1]);
    fg_frequencies_sort(list);
}

/* Evaluates the list, framed by 0 and INFINITY. */
static bool evaluate_all(struct probe *probe, const struct fg_frequencies *list, struct fg_arena *scratch,
                         struct points *points)
{
    points->count = 0;
    points->at = fg_arena_get(scratch, (size_t)(list->count + 2) * sizeof *points->at);
    if (list->failed || !points->at)
        return false;
    points->at[points->count++] = evaluate(probe, 0);
    for (int k = 0; k < list->count; k++)
        if (list->at[k] > 0)
            points->at[points->count++] = evaluate(probe, list->at[k]);
    points->at[points->count++] = evaluate(probe, INFINITY);
    return true;
}

/* Points of all loops at the shared frequencies: loop i at [i * count], all inputs at [m * count]. One
 * elimination serves them all. */
static bool evaluate_shared(struct probe *probe, const struct fg_frequencies *list, struct fg_arena *scratch,
                            struct points *shared)
{
    int m = probe->loop->m;
    size_t count = (size_t)list->count + 2;
    shared->count = (int)count;
    shared->at = fg_arena_get(scratch, count * ((size_t)m + 1) * sizeof *shared->at);
    if (list->failed || !shared->at)
        return false;
    for (size_t k = 0; k < count; k++) {
        double w = k == 0 ? 0 : k == count - 1 ? INFINITY : list->at[k - 1];
        fg_loop_evaluate(probe->loop, w, probe->T, probe->noise);
        for (int i = 0; i < m; i++) {
            double complex t = probe->T[i + i * m];
            shared->at[(size_t)i * count + k] = (struct point){w, t, probe->noise[i], cabs(1 - t)};
        }
        shared->at[(size_t)m * count + k] = (struct point){.w = w, .peak = largest_singular_value(probe)};
    }
    return true;
}

static int by_frequency(const void *a, const void *b)
{
    double x = ((const struct point *)a)->w, y = ((const struct point *)b)->w;
    return (x > y) - (x < y);
}

/* The shared points of one loop together with its own. */
static bool merge_points(const struct points *shared, int i, const struct points *own,
                         struct fg_arena *scratch, struct points *points)
{
    points->count = shared->count + own->count;
    points->at = fg_arena_get(scratch, (size_t)points->count * sizeof *points->at);
    if (!points->at)
        return false;
    memcpy(points->at, shared->at + (size_t)i * (size_t)shared->count,
           (size_t)shared->count * sizeof *points->at);
    memcpy(points->at + shared->count, own->at, (size_t)own->count * sizeof *points->at);
    qsort(points->at, (size_t)points->count, sizeof *points->at, by_frequency);
    return true;
}

static double imaginary_part(const struct point *point)
{
    return cimag(point->t);
}

static double above_half(const struct point *point)
{
    return creal(point->t) - 0.5;
}

/* The point between a and b where f changes sign: regula falsi (Illinois), with bisection when it is slow. */
static struct point polish(struct probe *probe, double (*f)(const struct point *), struct point a,
                           struct point b)
{
    double fa = f(&a), fb = f(&b);
    for (int k = 0; k < POLISH && fa != 0 && fb != 0 && b.w - a.w > 4e-16 * b.w; k++) {
        double w = k % 4 == 3 ? 0.5 * (a.w + b.w) : (a.w * fb - b.w * fa) / (fb - fa);
        if (!(w > a.w && w < b.w))
            w = 0.5 * (a.w + b.w);
        if (!(w > a.w && w < b.w))
            break;
        struct point c = evaluate(probe, w);
        double fc = f(&c);
        if (!isfinite(fc))
            break;
        if ((fc < 0) == (fa < 0)) {
            a = c;
            fa = fc;
            fb /= 2;
        } else {
            b = c;
            fb = fc;
            fa /= 2;
        }
    }
    return fabs(f(&a)) < fabs(f(&b)) ? a : b;
}

static bool touches(struct probe *probe, double (*f)(const struct point *), const struct point *point)
{
    double here = fabs(f(point));
    if (here > TOUCH * cabs(point->t))
        return false;
    if (point->w == 0 || isinf(point->w))
        return true;
    struct point below = evaluate(probe, point->w * (1 - TOUCH_STEP));
    struct point above = evaluate(probe, point->w * (1 + TOUCH_STEP));
    return fabs(f(&below)) > TOUCH_GROWTH * here && fabs(f(&above)) > TOUCH_GROWTH * here;
}

/* T real at this point: what it means for the gain factor. */
static void note_gain(const struct fg_loop *loop, const struct point *point, struct fg_loop_margin *margin)
{
    double t = creal(point->t), factor = 1 - 1 / t;
    if (!(fabs(t) > point->noise))
        return;
    if (t < 0 && factor < margin->gain_up && factor < NO_LIMIT) {
        margin->gain_up = factor;
        margin->gain_up_frequency = fg_loop_frequency(loop, point->w);
    }
    if (t > 1 && factor > margin->gain_down && factor > 1 / NO_LIMIT) {
        margin->gain_down = factor;
        margin->gain_down_frequency = fg_loop_frequency(loop, point->w);
    }
}

/* |L| = 1 at this point. */
static void note_phase(const struct fg_loop *loop, const struct point *point, struct fg_loop_margin *margin)
{
    static const double DEGREES = 180 / 3.14159265358979323846;
    double phase = fabs(carg(-point->t / (1 - point->t))) * DEGREES;
    if (phase < margin->phase_deg) {
        margin->phase_deg = phase;
        margin->phase_frequency = fg_loop_frequency(loop, point->w);
    }
}

static void gain_and_phase(struct probe *probe, const struct points *points, struct fg_loop_margin *margin)
{
    const struct fg_loop *loop = probe->loop;
    for (int k = 0; k < points->count; k++) {
        struct point a = points->at[k];
        if (!isfinite(creal(a.t)) || !isfinite(cimag(a.t)))
            continue;
        if (touches(probe, imaginary_part, &a))
            note_gain(loop, &a, margin);
        if (touches(probe, above_half, &a))
            note_phase(loop, &a, margin);
        if (k + 1 == points->count || isinf(points->at[k + 1].w) || points->at[k + 1].w == a.w)
            continue;
        struct point b = points->at[k + 1];
        if (imaginary_part(&a) * imaginary_part(&b) < 0) {
            struct point c = polish(probe, imaginary_part, a, b);
            note_gain(loop, &c, margin);
        }
        if (above_half(&a) * above_half(&b) < 0) {
            struct point c = polish(probe, above_half, a, b);
            note_phase(loop, &c, margin);
        }
    }
}

/* Golden-section search for the largest peak between low and high. */
static struct point climb(struct probe *probe, double low, double high, struct point best)
{
    static const double GOLDEN = 0.61803398874989484820;
    struct point a = evaluate(probe, high - GOLDEN * (high - low));
    struct point b = evaluate(probe, low + GOLDEN * (high - low));
    for (int k = 0; k < 60 && high - low > 1e-9 * high; k++) {
        if (a.peak > b.peak) {
            high = b.w;
            b = a;
            a = evaluate(probe, high - GOLDEN * (high - low));
        } else {
            low = a.w;
            a = b;
            b = evaluate(probe, low + GOLDEN * (high - low));
        }
    }
    if (a.peak > best.peak)
        best = a;
    return b.peak > best.peak ? b : best;
}

/* Largest peak over the points, each promising local maximum climbed. */
static struct point best_of(struct probe *probe, const struct points *points, struct point best)
{
    double least = 0;
    int climbed = 0;
    for (int k = 0; k < points->count; k++) {
        if (points->at[k].peak > best.peak)
            best = points->at[k];
    }
    least = 0.9 * best.peak;
    for (int k = 1; k + 1 < points->count && climbed < REFINED_PEAKS; k++) {
        const struct point *p = &points->at[k];
        if (isinf(p[1].w) || p->peak < least || p->peak < p[-1].peak || p->peak < p[1].peak)
            continue;
        best = climb(probe, p[-1].w, p[1].w, best);
        climbed++;
    }
    return best;
}

static flatgain_status find_peak(struct probe *probe, const struct points *start, double *peak,
                                 double *frequency)
{
    const struct fg_loop *loop = probe->loop;
    struct point best = best_of(probe, start, start->at[start->count - 1]);
    bool failed = false;
    for (int round = 0; loop->n <= LARGE && round < LEVEL_ROUNDS && !failed; round++) {
        struct fg_frequencies list = {0};
        struct fg_arena scratch = {0};
        struct points points = {0};
        double before = best.peak, level = before * (1 + PEAK_TOLERANCE);
        bool tested = fg_crossings_level(loop, probe->i, level, &list);
        if (tested && list.count > 0) {
            fg_frequencies_sort(&list);
            add_midpoints(&list);
            if (evaluate_all(probe, &list, &scratch, &points))
                best = best_of(probe, &points, best);
        }
        failed = list.failed || scratch.failed;
        fg_frequencies_free(&list);
        fg_arena_release(&scratch);
        if (!(best.peak > level))
            break;
    }
    *peak = best.peak;
    *frequency = fg_loop_frequency(loop, best.w);
    return failed ? FLATGAIN_NO_MEMORY : FLATGAIN_OK;
}

static const struct fg_loop_margin NO_LOOP = {.gain_down = 0,
                                              .gain_up = INFINITY,
                                              .phase_deg = INFINITY,
                                              .phase_frequency = NAN,
                                              .gain_up_frequency = NAN,
                                              .gain_down_frequency = NAN,
                                              .peak_sensitivity = 1,
                                              .peak_frequency = NAN};

static flatgain_status one_loop(struct probe *probe, const struct points *shared,
                                struct fg_loop_margin *margin)
{
    struct fg_arena scratch = {0};
    struct fg_frequencies list = {0};
    struct points own = {0}, points = {0};
    flatgain_status status = FLATGAIN_NO_MEMORY;
    if (probe->loop->n <= LARGE) {
        fg_crossings_real(probe->loop, probe->i, &list);
        fg_crossings_unit(probe->loop, probe->i, &list);
    }
    fg_frequencies_sort(&list);
    add_midpoints(&list);
    if (evaluate_all(probe, &list, &scratch, &own) &&
        merge_points(shared, probe->i, &own, &scratch, &points)) {
        gain_and_phase(probe, &points, margin);
        status = find_peak(probe, &points, &margin->peak_sensitivity, &margin->peak_frequency);
    }
    fg_frequencies_free(&list);
    fg_arena_release(&scratch);
    return status;
}

static bool row_is_zero(struct fg_matrix K, int i)
{
    for (int j = 0; j < K.cols; j++)
        if (FG_AT(K, i, j) != 0)
            return false;
    return true;
}

/* An unstable loop has no margins. */
static void no_margins(int m, struct fg_margins *margins)
{
    for (int i = 0; i < m; i++)
        margins->loop[i] = (struct fg_loop_margin){i, NAN, NAN, NAN, NAN, NAN, NAN, NAN, NAN};
}

flatgain_status fg_margins(const struct fg_plant *plant, struct fg_matrix K, struct fg_arena *arena,
                           struct fg_margins *margins, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct fg_loop loop;
    struct probe probe;
    struct points shared = {0};
    struct fg_frequencies base = {0};
    *margins = (struct fg_margins){.peak_sensitivity = NAN, .peak_frequency = NAN};
    margins->loop = fg_arena_get(arena, (size_t)plant->m * sizeof *margins->loop);
    if (!margins->loop)
        return fg_no_memory(error);
    no_margins(plant->m, margins);
    flatgain_status status = fg_loop_build(plant, K, &scratch, &loop, error);
    if (status != FLATGAIN_OK || !loop.stable) {
        fg_arena_release(&scratch);
        return status;
    }
    bool memory = probe_new(&loop, &scratch, &probe);
    if (memory) {
        add_pole_frequencies(&loop, &base);
        fg_frequencies_sort(&base);
        add_midpoints(&base);
        memory = evaluate_shared(&probe, &base, &scratch, &shared);
    }
    for (int i = 0; memory && i < plant->m; i++) {
        margins->loop[i] = NO_LOOP;
        margins->loop[i].input = i;
        probe.i = i;
        if (!row_is_zero(K, i))
            memory = one_loop(&probe, &shared, &margins->loop[i]) == FLATGAIN_OK;
    }
    if (memory && plant->m == 1) {
        margins->peak_sensitivity = margins->loop[0].peak_sensitivity;
        margins->peak_frequency = margins->loop[0].peak_frequency;
    } else if (memory) {
        struct points all = {shared.count, shared.at + (size_t)plant->m * (size_t)shared.count};
        probe.i = -1;
        memory = find_peak(&probe, &all, &margins->peak_sensitivity, &margins->peak_frequency) == FLATGAIN_OK;
    }
    fg_frequencies_free(&base);
    fg_arena_release(&scratch);
    return memory ? FLATGAIN_OK : fg_no_memory(error);
}
