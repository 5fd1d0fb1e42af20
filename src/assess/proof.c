#include "assess/assembly.h"

#include <float.h>
#include <math.h>

#include "plant/fixed_modes.h"

/* A sum of products, with what its rounding may have lost: |error| <= lost. Exact when lost is 0. */
struct sum {
    double value, lost;
};

static void sum_add(struct sum *s, double x, double y)
{
    double product = x * y, low = fma(x, y, -product); /* x y = product + low exactly */
    double total = s->value + product, part = total - s->value;
    double rest = (s->value - (total - part)) + (product - part); /* Knuth's two-sum */
    s->value = total;
    s->lost += fabs(low) + fabs(rest);
}

/* Sum of the closed-loop poles when no allowed gain changes it.
 *
 *     sum of poles = tr(A - B K C) = tr A - sum_ij K_ij (C B)_ji        (D = 0)
 *
 * It is the same for every gain when each free parameter meets only zeros of C B that are zero without
 * rounding. Then a stable loop needs sum < 0 (continuous) or |sum| < n (discrete).
 * Returns false when the argument does not apply. */
static bool pole_sum_is_fixed(const struct fg_plant *plant, const struct fg_pattern *pattern,
                              struct sum *total)
{
    if (!fg_matrix_is_zero(plant->D))
        return false;
    *total = (struct sum){0, 0};
    for (int i = 0; i < plant->n; i++)
        sum_add(total, FG_AT(plant->A, i, i), 1);
    for (int j = 0; j < plant->p; j++)
        for (int i = 0; i < plant->m; i++) {
            struct sum cb = {0, 0};
            for (int k = 0; k < plant->n; k++)
                sum_add(&cb, FG_AT(plant->C, j, k), FG_AT(plant->B, k, i));
            int entry = i + j * plant->m;
            if (pattern->index[entry] >= 0) {
                if (cb.value != 0 || cb.lost != 0)
                    return false;
            } else {
                double fixed = pattern->fixed[entry];
                sum_add(total, -fixed, cb.value);
                total->lost += fabs(fixed) * cb.lost;
            }
        }
    /* the lost parts were themselves added with rounding */
    total->lost *= 1 + 16 * plant->n * DBL_EPSILON;
    return true;
}

static void prove_by_pole_sum(struct fg_assembly *a)
{
    const struct fg_plant *plant = &a->model.law;
    struct sum total;
    if (!pole_sum_is_fixed(plant, &a->problem->pattern, &total))
        return;
    bool discrete = plant->discrete;
    bool proved = discrete ? fabs(total.value) - total.lost >= plant->n : total.value - total.lost >= 0;
    if (!proved)
        return;
    struct fg_findings *f = a->findings;
    const char *sum = fg_words_number(a->arena, total.value, 6);
    const char *text =
        discrete
            ? fg_arena_text(a->arena,
                            "The sum of the %d closed-loop poles is %s whatever the gain; inside the unit "
                            "circle its modulus would be below %d. Measure something that the inputs "
                            "reach within one step, or use a dynamic controller.",
                            plant->n, sum, plant->n)
            : fg_arena_text(a->arena,
                            "The sum of the closed-loop poles is %s whatever the gain, and a stable loop "
                            "needs a negative sum. Measure a rate (something the inputs act on "
                            "directly), or use a dynamic controller.",
                            sum);
    f->proof.kind = "pole-sum";
    f->proof.text = text ? text : "";
    f->proof.sum = total.value;
}

/* What the plant needs so that this mode can be moved. */
static const char *cure_of_mode(const struct fg_assembly *a, const struct fg_fixed_mode *fixed)
{
    const struct fg_mode *same = NULL;
    double least = 1e-6 * hypot(fixed->re, fixed->im) + fixed->error;
    for (int k = 0; k < a->open.count; k++) {
        double away = hypot(a->open.mode[k].re - fixed->re, fabs(a->open.mode[k].im) - fixed->im);
        if (away <= least) {
            least = away;
            same = &a->open.mode[k];
        }
    }
    if (same && same->uncontrollable)
        return same->unobservable
                   ? "No input moves it and no output shows it: it needs another actuator and another "
                     "measurement"
                   : "No input moves it: it needs another actuator";
    if (same && same->unobservable)
        return "No output shows it: it needs another measurement";
    return a->restricted ? "It needs a freer pattern, another actuator or another measurement"
                         : "It needs another actuator or another measurement";
}

/* An unstable mode that no gain of the structure moves (Wang, Davison 1973). */
static flatgain_status prove_by_fixed_mode(struct fg_assembly *a, flatgain_error *error)
{
    struct fg_fixed_modes fixed = {0};
    flatgain_status status =
        fg_modes_fixed(&a->model.law, &a->problem->pattern, a->model.state_names, a->arena, &fixed, error);
    if (status != FLATGAIN_OK) /* no proof is no disaster; only memory is */
        return status == FLATGAIN_NO_MEMORY ? status : FLATGAIN_OK;
    for (int k = 0; k < fixed.count; k++) {
        const struct fg_fixed_mode *mode = &fixed.mode[k];
        if (!mode->unstable)
            continue;
        struct fg_findings *f = a->findings;
        const char *states = fg_arena_text(a->arena, "%s", mode->states);
        const char *name = fg_words_mode(a->arena, mode->re, mode->im, mode->states);
        const char *text =
            fg_arena_text(a->arena,
                          "The mode %s does not decay and no gain of this structure moves it; no dynamic "
                          "controller of the same structure does either. %s.",
                          name, cure_of_mode(a, mode));
        f->proof.kind = "fixed-mode";
        f->proof.text = text ? text : "";
        f->proof.re = mode->re;
        f->proof.im = mode->im;
        f->proof.states = states ? states : "";
        break;
    }
    return FLATGAIN_OK;
}

flatgain_status fg_prove(struct fg_assembly *a, flatgain_error *error)
{
    a->findings->proof.kind = NULL;
    a->findings->proof.text = a->findings->proof.states = "";
    a->findings->proof.re = a->findings->proof.im = a->findings->proof.sum = NAN;
    flatgain_status status = prove_by_fixed_mode(a, error);
    if (status == FLATGAIN_OK && !a->findings->proof.kind)
        prove_by_pole_sum(a);
    if (status == FLATGAIN_OK && a->arena->failed)
        status = fg_no_memory(error);
    return status;
}
