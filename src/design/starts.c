#include "design/starts.h"

#include <math.h>
#include <string.h>

#include "base/random.h"
#include "linalg/lapack.h"
#include "linalg/lyapunov.h"
#include "linalg/riccati.h"

/* Orders above this use perturbed copies of one projected LQR gain: a Riccati equation of order 2 n for
 * every start would cost more than the search itself. */
enum { LARGE_ORDER = 120 };

static void random_gain(const struct fg_pattern *pattern, struct fg_random *random, double *theta)
{
    double size = pow(10, -1.5 + 2.5 * fg_random_uniform(random));
    for (int k = 0; k < pattern->count; k++)
        theta[k] = fmin(fmax(size * fg_random_normal(random), pattern->lower[k]), pattern->upper[k]);
}

/* K = L X C~' (C~ X C~')^+, C~ = C - D L: the gain whose input is closest to -L x in the mean square over
 * the LQR loop's state covariance X (Kosut, IEEE TAC 15 (1970) 557). */
static bool project(const struct fg_plant *plant, struct fg_matrix L, struct fg_matrix W,
                    struct fg_arena *scratch, double *K)
{
    int n = plant->n, m = plant->m, p = plant->p, info = 0, lwork = 40 * p + 64;
    bool memory = false;
    struct fg_matrix A = fg_matrix_copy(scratch, plant->A), C = fg_matrix_copy(scratch, plant->C);
    struct fg_matrix X = fg_matrix_new(scratch, n, n), XC = fg_matrix_new(scratch, n, p);
    struct fg_matrix Y = fg_matrix_new(scratch, p, p), LXC = fg_matrix_new(scratch, m, p);
    struct fg_matrix T = fg_matrix_new(scratch, m, p), gain = fg_matrix_view(K, m, p);
    double *values = fg_arena_doubles(scratch, p), *work = fg_arena_doubles(scratch, (size_t)lwork);
    if (scratch->failed)
        return false;
    fg_multiply('N', 'N', -1, plant->B, L, 1, A);
    fg_multiply('N', 'N', -1, plant->D, L, 1, C);
    if (!fg_lyapunov(plant->discrete, A, W, X, &memory)) {
        scratch->failed = scratch->failed || memory;
        return false;
    }
    fg_multiply('N', 'T', 1, X, C, 0, XC);
    fg_multiply('N', 'N', 1, C, XC, 0, Y);
    for (int j = 0; j < p * p; j++)
        Y.at[j] += plant->V.at[j];
    fg_multiply('N', 'N', 1, L, XC, 0, LXC);
    if (!fg_all_finite((size_t)p * p, Y.at))
        return false;
    dsyev_("V", "U", &p, Y.at, &p, values, work, &lwork, &info, 1, 1);
    if (info != 0)
        return false;
    fg_multiply('N', 'N', 1, LXC, Y, 0, T);
    for (int j = 0; j < p; j++)
        for (int i = 0; i < m; i++)
            FG_AT(T, i, j) *= values[j] > 1e-10 * values[p - 1] ? 1 / values[j] : 0;
    fg_multiply('N', 'T', 1, T, Y, 0, gain);
    return fg_all_finite((size_t)m * p, K);
}

/* LQR with weights drawn over four decades, in natural units. */
static bool random_lqr(const struct fg_plant *plant, struct fg_random *random, struct fg_arena *scratch,
                       struct fg_matrix L)
{
    int n = plant->n, m = plant->m;
    bool memory = false;
    struct fg_matrix Q = fg_matrix_new(scratch, n, n), R = fg_matrix_new(scratch, m, m);
    struct fg_matrix N = fg_matrix_new(scratch, n, m), S = fg_matrix_new(scratch, n, n);
    if (scratch->failed)
        return false;
    for (int i = 0; i < n; i++)
        FG_AT(Q, i, i) = pow(10, fg_random_normal(random));
    for (int i = 0; i < m; i++)
        FG_AT(R, i, i) = pow(10, 4 * fg_random_uniform(random) - 2);
    bool good = plant->discrete ? fg_riccati_discrete(plant->A, plant->B, Q, R, N, S, L, &memory)
                                : fg_riccati_continuous(plant->A, plant->B, Q, R, N, S, L, &memory);
    scratch->failed = scratch->failed || memory;
    return good;
}

static bool projected_gain(const struct fg_scaled *scaled, bool own_weights, struct fg_random *random,
                           struct fg_arena *scratch, double *theta)
{
    const struct fg_plant *plant = &scaled->plant;
    int n = plant->n, m = plant->m, p = plant->p;
    double *K = fg_arena_doubles(scratch, (size_t)m * p);
    struct fg_matrix L = fg_matrix_new(scratch, m, n), W = fg_matrix_copy(scratch, plant->W);
    if (scratch->failed)
        return false;
    bool large = n > LARGE_ORDER;
    if (own_weights || large) {
        if (!scaled->has_L)
            return false;
        memcpy(L.at, scaled->L.at, (size_t)m * n * sizeof(double));
    } else {
        if (!random_lqr(plant, random, scratch, L))
            return false;
        for (int i = 0; i < n; i++) /* a little of everything, so that every state takes part */
            FG_AT(W, i, i) += pow(10, 2 * fg_random_uniform(random) - 2);
    }
    if (!project(plant, L, W, scratch, K))
        return false;
    if (!own_weights && large)
        for (int e = 0; e < m * p; e++)
            K[e] *= exp(fg_random_normal(random));
    fg_pattern_parameters(&scaled->pattern, K, theta);
    return true;
}

flatgain_status fg_start(const struct fg_scaled *scaled, const double *today_theta, uint64_t seed, int index,
                         double *theta)
{
    const struct fg_pattern *pattern = &scaled->pattern;
    struct fg_random random = fg_random_stream(seed, (uint64_t)index);
    if (index == 0) {
        for (int k = 0; k < pattern->count; k++)
            theta[k] = fmin(fmax(0, pattern->lower[k]), pattern->upper[k]);
        return FLATGAIN_OK;
    }
    if (index == 1 && today_theta) {
        memcpy(theta, today_theta, (size_t)pattern->count * sizeof(double));
        return FLATGAIN_OK;
    }
    struct fg_arena scratch = {0};
    bool projected = index % 2 == 0 || index == 1;
    if (!projected ||
        !projected_gain(scaled, index <= 2 && (index == 1 || today_theta), &random, &scratch, theta))
        random_gain(pattern, &random, theta);
    bool failed = scratch.failed;
    fg_arena_release(&scratch);
    return failed ? FLATGAIN_NO_MEMORY : FLATGAIN_OK;
}
