#include "design/shortest.h"

#include <math.h>
#include <string.h>

#include "design/local_internal.h"

/* Curvature below this part of the largest is flat; J may rise by this part; decay may fall to this part. */
static const double FLAT_PART = 1e-8, SAME = 1e-10, KEEP_DECAY = 0.9;
enum { ROUNDS = 12, HALVINGS = 5 };

/* The step to the point closest to 0 along the flat directions; its length. */
static double flat_step(struct fg_local *l, const double *theta, int count)
{
    double length = 0;
    memset(l->step, 0, (size_t)l->q * sizeof(double));
    for (int i = 0; i < count; i++) {
        if (fabs(l->values[i]) > FLAT_PART * fabs(l->values[count - 1]))
            continue;
        const double *v = l->vectors + (size_t)i * count;
        double along = 0;
        for (int r = 0; r < count; r++)
            along += v[r] * theta[l->free[r]];
        for (int r = 0; r < count; r++)
            l->step[l->free[r]] -= along * v[r];
        length += along * along;
    }
    return sqrt(length);
}

static double decay_now(const struct fg_cost *cost, bool discrete)
{
    double abscissa = fg_cost_abscissa(cost);
    return discrete ? 1 - abscissa : -abscissa;
}

void fg_shorten(struct fg_local *l, struct fg_cost *cost, const struct fg_pattern *pattern,
                const struct fg_local_limits *limits, double *theta, struct fg_local_answer *answer)
{
    int q = l->q;
    bool discrete = fg_cost_is_discrete(cost);
    fg_cost_at(cost, theta);
    double decay = decay_now(cost, discrete);
    for (int round = 0; round < ROUNDS; round++) {
        fg_cost_at(cost, theta);
        answer->evaluations++;
        if (!(answer->J > limits->negligible) || !fg_local_look(l, cost, pattern, theta, answer))
            break;
        double size = 0;
        for (int k = 0; k < q; k++)
            size = hypot(size, theta[k]);
        double length = flat_step(l, theta, q - answer->at_bound);
        if (!(length > 1e-6 * size))
            break;
        bool moved = false;
        double part = 1;
        for (int halving = 0; halving < HALVINGS && !moved; halving++, part *= 0.5) {
            for (int k = 0; k < q; k++)
                l->best[k] = fmin(fmax(theta[k] + part * l->step[k], pattern->lower[k]), pattern->upper[k]);
            double J = fg_cost_at(cost, l->best);
            answer->evaluations++;
            moved = J <= answer->J * (1 + SAME) && decay_now(cost, discrete) >= KEEP_DECAY * decay;
        }
        if (!moved)
            break;
        memcpy(theta, l->best, (size_t)q * sizeof(double));
        answer->J = fg_cost_at(cost, theta);
    }
    fg_cost_at(cost, theta);
    if (answer->J > limits->negligible)
        fg_local_look(l, cost, pattern, theta, answer);
}
