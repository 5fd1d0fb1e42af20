#include "design/local.h"

#include <math.h>
#include <string.h>

#include "design/local_internal.h"
#include "linalg/lapack.h"

/* Relative sizes, all without unit. TOLERANCE: at a Newton step that converges quadratically the next
 * residual would be of the order of its square. LIMIT: a million times the natural size of a gain. */
static const double TOLERANCE = 1e-10, ACCEPTABLE = 1e-6, LIMIT = 1e6, TINY_RADIUS = 1e-11;
/* A Newton step this small, relative, changes no digit that matters; where curvature is weak the residual
 * alone would end the search with fewer digits of the gain. */
static const double SMALL_STEP = 1e-9, FLAT_DIRECTION = 1e-10;
static const double MEETS_BOUND = 1e-8; /* relative */
static const double NOISE = 1e-12;      /* relative rounding error of J that steps are judged with */

struct fg_local *fg_local_new(int q, struct fg_arena *arena)
{
    struct fg_local *l = fg_arena_get(arena, sizeof *l);
    if (!l)
        return NULL;
    l->q = q;
    l->lwork = 40 * q + 64;
    double **vectors[] = {&l->gradient, &l->step, &l->trial,   &l->best,
                          &l->values,   &l->rhs,  &l->reduced, &l->trial_gradient};
    for (size_t i = 0; i < sizeof vectors / sizeof *vectors; i++)
        *vectors[i] = fg_arena_doubles(arena, q);
    l->hessian = fg_arena_doubles(arena, (size_t)q * q);
    l->vectors = fg_arena_doubles(arena, (size_t)q * q);
    l->work = fg_arena_doubles(arena, (size_t)l->lwork);
    l->free = fg_arena_ints(arena, q);
    l->held = fg_arena_ints(arena, q);
    return arena->failed ? NULL : l;
}

/* A gain is held when it sits on a bound and the gradient pushes it outward. */
static bool pushes_outward(const struct fg_pattern *pattern, const double *theta, const double *gradient,
                           int k)
{
    return (theta[k] <= pattern->lower[k] && gradient[k] >= 0) ||
           (theta[k] >= pattern->upper[k] && gradient[k] <= 0);
}

/* gradient: of log J */
static double residual_of(const struct fg_local *l, const struct fg_pattern *pattern, const double *theta,
                          const double *gradient)
{
    double worst = 0;
    for (int k = 0; k < l->q; k++)
        if (!pushes_outward(pattern, theta, gradient, k))
            worst = fmax(worst, fabs(gradient[k]) * fmax(1, fabs(theta[k])));
    return worst;
}

/* Eigenvectors of the Hessian on the `count` free gains; false when LAPACK fails. */
static bool decompose(struct fg_local *l, int count)
{
    int info = 0;
    for (int c = 0; c < count; c++)
        for (int r = 0; r < count; r++)
            l->vectors[r + (size_t)c * count] = l->hessian[l->free[r] + (size_t)l->free[c] * l->q];
    if (count == 0)
        return true;
    if (!fg_all_finite((size_t)count * count, l->vectors))
        return false;
    dsyev_("V", "U", &count, l->vectors, &count, l->values, l->work, &l->lwork, &info, 1, 1);
    return info == 0;
}

static double length_at(const struct fg_local *l, int count, double lambda)
{
    double sum = 0;
    for (int i = 0; i < count; i++) {
        double c = l->rhs[i] / (l->values[i] + lambda);
        sum += c * c;
    }
    return sqrt(sum);
}

/* Minimiser of reduced's + s'Hs/2 with |s| <= radius on the decomposed gains, into step (by free). */
static void subproblem(struct fg_local *l, int count, double radius)
{
    if (count == 0)
        return;
    double size = fmax(fabs(l->values[0]), fabs(l->values[count - 1])), gsize = 0;
    for (int i = 0; i < count; i++) { /* rhs = -V' reduced */
        l->rhs[i] = 0;
        for (int r = 0; r < count; r++)
            l->rhs[i] -= l->vectors[r + (size_t)i * count] * l->reduced[r];
        gsize += l->rhs[i] * l->rhs[i];
    }
    gsize = sqrt(gsize);
    double tiny = 1e-14 * size + 1e-300, lowest = l->values[0], lambda = 0, along = 0;
    if (lowest <= tiny || length_at(l, count, 0) > radius) {
        double low = fmax(0, -lowest) + tiny, high = low + gsize / radius + tiny;
        if (length_at(l, count, low) < radius) { /* hard case: the gradient misses the lowest direction */
            lambda = low;
            double have = length_at(l, count, low);
            along = lowest < -tiny ? sqrt(fmax(0, radius * radius - have * have)) : 0;
        } else {
            for (int i = 0; i < 80 && high - low > 1e-12 * high; i++) {
                /* |s(lambda)| falls: bisection; a radius met to 0.1 % is met */
                double have = length_at(l, count, lambda = 0.5 * (low + high));
                if (have > radius)
                    low = lambda;
                else
                    high = lambda;
                if (fabs(have - radius) < 1e-3 * radius)
                    break;
            }
        }
    }
    for (int r = 0; r < count; r++) {
        double sum = 0;
        for (int i = 0; i < count; i++)
            sum += l->vectors[r + (size_t)i * count] * l->rhs[i] / (l->values[i] + lambda);
        l->step[l->free[r]] = sum + along * l->vectors[r] * (l->rhs[0] < 0 ? -1 : 1);
    }
}

/* Step inside the bounds: gains that would leave are put on their bound and the rest is solved again. */
static bool find_step(struct fg_local *l, const struct fg_pattern *pattern, const double *theta,
                      double radius, bool decomposed)
{
    int q = l->q;
    memset(l->step, 0, (size_t)q * sizeof(double));
    for (int k = 0; k < q; k++)
        l->held[k] = pushes_outward(pattern, theta, l->gradient, k);
    for (int round = 0; round <= q; round++) {
        int count = 0;
        for (int k = 0; k < q; k++)
            if (!l->held[k])
                l->free[count++] = k;
        if (!(round == 0 && decomposed) && !decompose(l, count))
            return false;
        for (int r = 0; r < count; r++) {
            l->reduced[r] = l->gradient[l->free[r]];
            for (int k = 0; k < q; k++)
                if (l->held[k])
                    l->reduced[r] += l->hessian[l->free[r] + (size_t)k * q] * l->step[k];
        }
        subproblem(l, count, radius);
        bool changed = false;
        for (int r = 0; r < count; r++) {
            int k = l->free[r];
            double target = theta[k] + l->step[k];
            if (target < pattern->lower[k] || target > pattern->upper[k]) {
                l->step[k] = (target < pattern->lower[k] ? pattern->lower[k] : pattern->upper[k]) - theta[k];
                l->held[k] = 1;
                changed = true;
            }
        }
        if (!changed)
            return true;
    }
    return true;
}

static double predicted(const struct fg_local *l)
{
    double sum = 0;
    for (int k = 0; k < l->q; k++) {
        double Hs = 0;
        for (int j = 0; j < l->q; j++)
            Hs += l->hessian[k + (size_t)j * l->q] * l->step[j];
        sum += l->step[k] * (l->gradient[k] + 0.5 * Hs);
    }
    return -sum;
}

static double norm(int count, const double *x)
{
    double sum = 0;
    for (int i = 0; i < count; i++)
        sum += x[i] * x[i];
    return sqrt(sum);
}

/* Gradient and Hessian of log J: the same minima, but where J blows up towards the stability boundary, like
 * 1 / distance, a Newton step on log J doubles the distance and one on J only grows it by half. */
static void log_derivatives(struct fg_local *l, struct fg_cost *cost, double J)
{
    int q = l->q;
    fg_cost_gradient(cost, l->gradient);
    fg_cost_hessian(cost, l->hessian);
    for (int k = 0; k < q; k++)
        l->gradient[k] /= J;
    for (int j = 0; j < q; j++)
        for (int k = 0; k < q; k++)
            l->hessian[k + (size_t)j * q] =
                l->hessian[k + (size_t)j * q] / J - l->gradient[k] * l->gradient[j];
}

bool fg_local_look(struct fg_local *l, struct fg_cost *cost, const struct fg_pattern *pattern,
                   const double *theta, struct fg_local_answer *answer)
{
    int count = 0;
    log_derivatives(l, cost, answer->J);
    answer->residual = residual_of(l, pattern, theta, l->gradient);
    for (int k = 0; k < l->q; k++)
        if (!pushes_outward(pattern, theta, l->gradient, k))
            l->free[count++] = k;
    answer->at_bound = l->q - count;
    if (!decompose(l, count))
        return false;
    answer->smallest = count ? l->values[0] : 0;
    answer->largest = count ? fmax(fabs(l->values[0]), fabs(l->values[count - 1])) : 0;
    answer->newton = 0;
    for (int i = 0; i < count; i++) {
        double along = 0;
        for (int r = 0; r < count; r++)
            along += l->vectors[r + (size_t)i * count] * l->gradient[l->free[r]];
        if (l->values[i] > FLAT_DIRECTION * answer->largest)
            answer->newton = hypot(answer->newton, along / l->values[i]);
    }
    return true;
}

static struct fg_local_answer descend(struct fg_local *l, struct fg_cost *cost,
                                      const struct fg_pattern *pattern, double *theta,
                                      const struct fg_local_limits *limits)
{
    int q = l->q;
    struct fg_local_answer answer = {.end = FG_LOCAL_STOPPED, .J = fg_cost_at(cost, theta), .evaluations = 1};
    if (!isfinite(answer.J)) {
        answer.end = FG_LOCAL_STALLED;
        return answer;
    }
    double radius = fmax(1, norm(q, theta));
    double blocked = INFINITY; /* length of the last step that left the stable set */
    bool fresh = true;
    for (int iteration = 0;; iteration++) {
        if (fresh) {
            if (answer.J <= limits->negligible) {
                answer.end = FG_LOCAL_MINIMUM;
                answer.residual = answer.smallest = answer.largest = 0;
                return answer;
            }
            if (!fg_local_look(l, cost, pattern, theta, &answer)) {
                answer.end = FG_LOCAL_STALLED;
                return answer;
            }
            if (answer.residual <= TOLERANCE && answer.smallest >= -ACCEPTABLE &&
                answer.newton <= SMALL_STEP * fmax(1, norm(q, theta))) {
                answer.end = FG_LOCAL_MINIMUM;
                return answer;
            }
            double farthest = 0, outward = 0;
            for (int k = 0; k < q; k++) {
                farthest = fmax(farthest, fabs(theta[k]));
                outward -= theta[k] * l->gradient[k];
            }
            if (farthest > LIMIT && outward > 0) {
                answer.end = FG_LOCAL_UNBOUNDED;
                return answer;
            }
        }
        if (iteration >= limits->iterations || (limits->stop && limits->stop(limits->user)))
            return answer;
        if (!find_step(l, pattern, theta, radius, fresh)) {
            answer.end = FG_LOCAL_STALLED;
            return answer;
        }
        fresh = false;
        double expected = predicted(l), size = norm(q, l->step);
        if (!(size > TINY_RADIUS * fmax(1, norm(q, theta))) || !(expected > 0)) {
            answer.end = answer.residual <= ACCEPTABLE                     ? FG_LOCAL_MINIMUM
                         : blocked <= ACCEPTABLE * fmax(1, norm(q, theta)) ? FG_LOCAL_BOUNDARY
                                                                           : FG_LOCAL_STALLED;
            return answer;
        }
        for (int k = 0; k < q; k++)
            l->trial[k] = fmin(fmax(theta[k] + l->step[k], pattern->lower[k]), pattern->upper[k]);
        double J = fg_cost_at(cost, l->trial);
        answer.evaluations++;
        double gain = log(answer.J / J), ratio = isfinite(J) ? gain / expected : -1;
        bool accept = ratio > 1e-4;
        if (isfinite(J) && expected < NOISE) {
            /* J cannot judge any more: the gradient does */
            fg_cost_gradient(cost, l->trial_gradient);
            for (int k = 0; k < q; k++)
                l->trial_gradient[k] /= J;
            double residual = residual_of(l, pattern, l->trial, l->trial_gradient);
            accept = residual < 0.5 * answer.residual && fabs(gain) <= 10 * NOISE;
            if (!accept) {
                fg_cost_at(cost, theta);
                answer.end = answer.residual <= ACCEPTABLE ? FG_LOCAL_MINIMUM : FG_LOCAL_STALLED;
                return answer;
            }
            ratio = 1;
        }
        if (!isfinite(J))
            blocked = size;
        if (accept) {
            memcpy(theta, l->trial, (size_t)q * sizeof(double));
            answer.J = J;
            fresh = true;
        }
        if (ratio < 0.25)
            radius = 0.25 * size;
        else if (ratio > 0.75 && size > 0.9 * radius)
            radius *= isfinite(blocked) ? 2 : 3; /* carefully once the boundary was met */
    }
}

struct fg_local_answer fg_local_minimise(struct fg_local *l, struct fg_cost *cost,
                                         const struct fg_pattern *pattern, double *theta,
                                         const struct fg_local_limits *limits)
{
    struct fg_local_answer answer = descend(l, cost, pattern, theta, limits);
    bool stuck = answer.end == FG_LOCAL_STALLED || answer.end == FG_LOCAL_STOPPED;
    if (stuck && fabs(answer.J - limits->bound) <= MEETS_BOUND * limits->bound)
        answer.end = FG_LOCAL_MINIMUM;
    return answer;
}
