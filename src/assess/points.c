#include "assess/points.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "linalg/lapack.h"

bool fg_probe_new(const struct fg_loop *loop, struct fg_arena *arena, struct fg_probe *probe)
{
    size_t m = (size_t)loop->m;
    *probe = (struct fg_probe){.loop = loop, .room = 8 * loop->m + 8};
    probe->T = fg_arena_get(arena, m * m * sizeof *probe->T);
    probe->work = fg_arena_get(arena, (size_t)probe->room * sizeof *probe->work);
    probe->noise = fg_arena_doubles(arena, m);
    probe->values = fg_arena_doubles(arena, m);
    probe->rwork = fg_arena_doubles(arena, 5 * m + 8);
    return !arena->failed;
}

/* sigma_max(I - T); T destroyed. */
static double largest_singular_value(struct fg_probe *probe)
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

struct fg_point fg_probe_at(struct fg_probe *probe, double w)
{
    struct fg_point point = {.w = w};
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

void fg_points_pole_frequencies(const struct fg_loop *loop, int per_decade, struct fg_frequencies *list)
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
    if (!(low > 0) || !isfinite(high))
        return;
    int steps = (int)ceil(log10(high / low) * per_decade);
    for (int k = 0; k <= steps; k++)
        fg_frequencies_add(list, low * pow(10, (double)k / per_decade));
}

void fg_points_midpoints(struct fg_frequencies *list)
{
    fg_frequencies_sort(list);
    int count = list->count;
    for (int k = 0; k + 1 < count; k++)
        fg_frequencies_add(list, 0.5 * (list->at[k] + list->at[k + 1]));
    if (count > 0)
        fg_frequencies_add(list, 2 * list->at[count - 1]);
    fg_frequencies_sort(list);
}

bool fg_points_evaluate(struct fg_probe *probe, const struct fg_frequencies *list, struct fg_arena *scratch,
                        struct fg_points *points)
{
    points->count = 0;
    points->at = fg_arena_get(scratch, (size_t)(list->count + 2) * sizeof *points->at);
    if (list->failed || !points->at)
        return false;
    points->at[points->count++] = fg_probe_at(probe, 0);
    for (int k = 0; k < list->count; k++)
        if (list->at[k] > 0)
            points->at[points->count++] = fg_probe_at(probe, list->at[k]);
    points->at[points->count++] = fg_probe_at(probe, INFINITY);
    return true;
}

bool fg_points_shared(struct fg_probe *probe, const struct fg_frequencies *list, struct fg_arena *scratch,
                      struct fg_points *shared)
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
            shared->at[(size_t)i * count + k] = (struct fg_point){w, t, probe->noise[i], cabs(1 - t)};
        }
        shared->at[(size_t)m * count + k] = (struct fg_point){.w = w, .peak = largest_singular_value(probe)};
    }
    return true;
}

static int by_frequency(const void *a, const void *b)
{
    double x = ((const struct fg_point *)a)->w, y = ((const struct fg_point *)b)->w;
    return (x > y) - (x < y);
}

bool fg_points_merge(const struct fg_points *shared, int i, const struct fg_points *own,
                     struct fg_arena *scratch, struct fg_points *points)
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
