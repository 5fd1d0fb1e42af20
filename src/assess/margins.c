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

#include "assess/points.h"

enum {
    LARGE = 200,
    PER_DECADE = 40,
    FEW_PER_DECADE = 4,
    LEVEL_ROUNDS = 30,
    POLISH = 100,
    REFINED_PEAKS = 12
};
/* A loop gain may rise by 160 dB or fall by as much: no limit that matters, and about where rounding in T
 * would start to invent one. */
static const double NO_LIMIT = 1e8;
static const double PEAK_TOLERANCE = 1e-7;
/* |Im T| below this part of |T| may be a touching of the real axis without a change of sign. It is one
 * when it grows at least a thousandfold within a thousandth of w: T that only tends to a real value, at
 * low or high frequency, does not. */
static const double TOUCH = 1e-9, TOUCH_GROWTH = 1e3, TOUCH_STEP = 1e-3;

static double imaginary_part(const struct fg_point *point)
{
    return cimag(point->t);
}

static double above_half(const struct fg_point *point)
{
    return creal(point->t) - 0.5;
}

/* The point between a and b where f changes sign: regula falsi (Illinois), with bisection when it is slow. */
static struct fg_point polish(struct fg_probe *probe, double (*f)(const struct fg_point *), struct fg_point a,
                              struct fg_point b)
{
    double fa = f(&a), fb = f(&b);
    for (int k = 0; k < POLISH && fa != 0 && fb != 0 && b.w - a.w > 4e-16 * b.w; k++) {
        double w = k % 4 == 3 ? 0.5 * (a.w + b.w) : (a.w * fb - b.w * fa) / (fb - fa);
        if (!(w > a.w && w < b.w))
            w = 0.5 * (a.w + b.w);
        if (!(w > a.w && w < b.w))
            break;
        struct fg_point c = fg_probe_at(probe, w);
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

static bool touches(struct fg_probe *probe, double (*f)(const struct fg_point *),
                    const struct fg_point *point)
{
    double here = fabs(f(point));
    if (here > TOUCH * cabs(point->t))
        return false;
    if (point->w == 0 || isinf(point->w))
        return true;
    struct fg_point below = fg_probe_at(probe, point->w * (1 - TOUCH_STEP));
    struct fg_point above = fg_probe_at(probe, point->w * (1 + TOUCH_STEP));
    return fabs(f(&below)) > TOUCH_GROWTH * here && fabs(f(&above)) > TOUCH_GROWTH * here;
}

/* T real at this point: what it means for the gain factor. */
static void note_gain(const struct fg_loop *loop, const struct fg_point *point, struct fg_loop_margin *margin)
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
static void note_phase(const struct fg_loop *loop, const struct fg_point *point,
                       struct fg_loop_margin *margin)
{
    static const double DEGREES = 180 / 3.14159265358979323846;
    double phase = fabs(carg(-point->t / (1 - point->t))) * DEGREES;
    if (phase < margin->phase_deg) {
        margin->phase_deg = phase;
        margin->phase_frequency = fg_loop_frequency(loop, point->w);
    }
}

static void gain_and_phase(struct fg_probe *probe, const struct fg_points *points,
                           struct fg_loop_margin *margin)
{
    const struct fg_loop *loop = probe->loop;
    for (int k = 0; k < points->count; k++) {
        struct fg_point a = points->at[k];
        if (!isfinite(creal(a.t)) || !isfinite(cimag(a.t)))
            continue;
        if (touches(probe, imaginary_part, &a))
            note_gain(loop, &a, margin);
        if (touches(probe, above_half, &a))
            note_phase(loop, &a, margin);
        if (k + 1 == points->count || isinf(points->at[k + 1].w) || points->at[k + 1].w == a.w)
            continue;
        struct fg_point b = points->at[k + 1];
        if (imaginary_part(&a) * imaginary_part(&b) < 0) {
            struct fg_point c = polish(probe, imaginary_part, a, b);
            note_gain(loop, &c, margin);
        }
        if (above_half(&a) * above_half(&b) < 0) {
            struct fg_point c = polish(probe, above_half, a, b);
            note_phase(loop, &c, margin);
        }
    }
}

/* Golden-section search for the largest peak between low and high. */
static struct fg_point climb(struct fg_probe *probe, double low, double high, struct fg_point best)
{
    static const double GOLDEN = 0.61803398874989484820;
    struct fg_point a = fg_probe_at(probe, high - GOLDEN * (high - low));
    struct fg_point b = fg_probe_at(probe, low + GOLDEN * (high - low));
    for (int k = 0; k < 60 && high - low > 1e-9 * high; k++) {
        if (a.peak > b.peak) {
            high = b.w;
            b = a;
            a = fg_probe_at(probe, high - GOLDEN * (high - low));
        } else {
            low = a.w;
            a = b;
            b = fg_probe_at(probe, low + GOLDEN * (high - low));
        }
    }
    if (a.peak > best.peak)
        best = a;
    return b.peak > best.peak ? b : best;
}

/* Largest peak over the points, each promising local maximum climbed. */
static struct fg_point best_of(struct fg_probe *probe, const struct fg_points *points, struct fg_point best)
{
    double least = 0;
    int climbed = 0;
    for (int k = 0; k < points->count; k++) {
        if (points->at[k].peak > best.peak)
            best = points->at[k];
    }
    least = 0.9 * best.peak;
    for (int k = 1; k + 1 < points->count && climbed < REFINED_PEAKS; k++) {
        const struct fg_point *p = &points->at[k];
        if (isinf(p[1].w) || p->peak < least || p->peak < p[-1].peak || p->peak < p[1].peak)
            continue;
        best = climb(probe, p[-1].w, p[1].w, best);
        climbed++;
    }
    return best;
}

static flatgain_status find_peak(struct fg_probe *probe, const struct fg_points *start, double *peak,
                                 double *frequency)
{
    const struct fg_loop *loop = probe->loop;
    struct fg_point best = best_of(probe, start, start->at[start->count - 1]);
    bool failed = false;
    for (int round = 0; loop->n <= LARGE && round < LEVEL_ROUNDS && !failed; round++) {
        struct fg_frequencies list = {0};
        struct fg_arena scratch = {0};
        struct fg_points points = {0};
        double before = best.peak, level = before * (1 + PEAK_TOLERANCE);
        bool tested = fg_crossings_level(loop, probe->i, level, &list);
        if (tested && list.count > 0) {
            fg_points_midpoints(&list);
            if (fg_points_evaluate(probe, &list, &scratch, &points))
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

static flatgain_status one_loop(struct fg_probe *probe, const struct fg_points *shared,
                                struct fg_loop_margin *margin)
{
    struct fg_arena scratch = {0};
    struct fg_frequencies list = {0};
    struct fg_points own = {0}, points = {0};
    flatgain_status status = FLATGAIN_NO_MEMORY;
    if (probe->loop->n <= LARGE) {
        fg_crossings_real(probe->loop, probe->i, &list);
        fg_crossings_unit(probe->loop, probe->i, &list);
    }
    fg_points_midpoints(&list);
    if (fg_points_evaluate(probe, &list, &scratch, &own) &&
        fg_points_merge(shared, probe->i, &own, &scratch, &points)) {
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
    struct fg_probe probe;
    struct fg_points shared = {0};
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
    bool memory = fg_probe_new(&loop, &scratch, &probe);
    if (memory) {
        fg_points_pole_frequencies(&loop, loop.n > LARGE ? PER_DECADE : FEW_PER_DECADE, &base);
        fg_points_midpoints(&base);
        memory = fg_points_shared(&probe, &base, &scratch, &shared);
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
        struct fg_points all = {shared.count, shared.at + (size_t)plant->m * (size_t)shared.count};
        probe.i = -1;
        memory = find_peak(&probe, &all, &margins->peak_sensitivity, &margins->peak_frequency) == FLATGAIN_OK;
    }
    fg_frequencies_free(&base);
    fg_arena_release(&scratch);
    return memory ? FLATGAIN_OK : fg_no_memory(error);
}
