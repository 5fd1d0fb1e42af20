#include "design/scaling.h"

#include <math.h>
#include <string.h>

#include "linalg/lapack.h"
#include "linalg/lyapunov.h"

/* The decay margin relative to the fastest pole of the LQR loop, and the part of the slowest pole of that
 * loop that it stays below when a real law attains LQR: what the best law needs must be allowed. */
static const double MARGIN = 1e-6, LQR_PART = 0.1;
/* Share of an input-driven loop in the covariance that gives the units: enough to give a unit to states
 * that the disturbance does not reach. */
static const double INPUT_SHARE = 1e-2;
/* Part of J below which the use of an input is rounding. */
static const double IDLE = 1e-12;

static double or_one(double x)
{
    return isfinite(x) && x > 0 ? x : 1;
}

/* Eigenvalue of largest modulus of A, in the discrete setting of A - I; *slowest: the least decay. */
static double fastest_rate(struct fg_matrix A, bool discrete, struct fg_arena *scratch, double *slowest)
{
    int n = A.rows, info = 0, lwork = 8 * n + 64;
    struct fg_matrix T = fg_matrix_copy(scratch, A);
    double *wr = fg_arena_doubles(scratch, n), *wi = fg_arena_doubles(scratch, n);
    double *work = fg_arena_doubles(scratch, (size_t)lwork), fastest = 0;
    int one = 1;
    if (scratch->failed || !fg_all_finite((size_t)n * n, A.at))
        return 0;
    dgeev_("N", "N", &n, T.at, &n, wr, wi, NULL, &one, NULL, &one, work, &lwork, &info, 1, 1);
    *slowest = INFINITY;
    for (int i = 0; info == 0 && i < n; i++) {
        fastest = fmax(fastest, hypot(wr[i] - (discrete ? 1 : 0), wi[i]));
        *slowest = fmin(*slowest, discrete ? 1 - hypot(wr[i], wi[i]) : -wr[i]);
    }
    return fastest;
}

struct units {
    double *state, *input, *output;
    double rate, fastest, slowest; /* slowest: decay of the LQR loop where it is attained, else INFINITY */
};

/* Diagonal of M X M', M r x n. */
static void variances(struct fg_matrix M, struct fg_matrix X, struct fg_arena *scratch, double *diagonal)
{
    struct fg_matrix MX = fg_matrix_new(scratch, M.rows, M.cols);
    if (!MX.at)
        return;
    fg_multiply('N', 'N', 1, M, X, 0, MX);
    for (int i = 0; i < M.rows; i++) {
        diagonal[i] = 0;
        for (int j = 0; j < M.cols; j++)
            diagonal[i] += FG_AT(MX, i, j) * FG_AT(M, i, j);
    }
}

/* u[i], variance of input i in the LQR loop A - B L, for inputs the loop does not really use: what comes
 * out there is rounding. An input is idle when white noise of that size on it would cost less than IDLE of
 * J: (R_ii + b_i'P b_i / rate) u_i^2, P the value of a state in that loop. It gets the size at which it
 * would cost as much as the whole loop, or 1 when it is free. false when there is no P. */
static bool size_idle_inputs(const struct fg_plant *plant, struct fg_matrix L, struct fg_matrix Acl,
                             double rate, struct fg_arena *scratch, double *u)
{
    int n = plant->n, m = plant->m;
    bool memory = false;
    struct fg_matrix Qcl = fg_matrix_copy(scratch, plant->Q), At = fg_matrix_transpose(scratch, Acl);
    struct fg_matrix RL = fg_matrix_new(scratch, m, n), P = fg_matrix_new(scratch, n, n);
    struct fg_matrix PB = fg_matrix_new(scratch, n, m);
    if (scratch->failed)
        return false;
    fg_multiply('N', 'N', 1, plant->R, L, 0, RL);
    for (int j = 0; j < n; j++) /* L'R L - N L - (N L)' = L'(R L - N') - N L */
        for (int i = 0; i < m; i++)
            FG_AT(RL, i, j) -= FG_AT(plant->N, j, i);
    fg_multiply('T', 'N', 1, L, RL, 1, Qcl);
    fg_multiply('N', 'N', -1, plant->N, L, 1, Qcl);
    fg_matrix_symmetrise(Qcl);
    if (!fg_lyapunov(plant->discrete, At, Qcl, P, &memory)) {
        scratch->failed = scratch->failed || memory;
        return false;
    }
    double J = fabs(fg_matrix_trace_of_product(P, plant->W));
    fg_multiply('N', 'N', 1, P, plant->B, 0, PB);
    for (int i = 0; i < m; i++) {
        double price = FG_AT(plant->R, i, i);
        for (int j = 0; j < n; j++)
            price += FG_AT(plant->B, j, i) * FG_AT(PB, j, i) / rate;
        if (!(price * u[i] > IDLE * J))
            u[i] = FG_AT(plant->R, i, i) > 0 && J > 0 ? J / FG_AT(plant->R, i, i) : 1;
    }
    return true;
}

/* Standard deviations in the LQR loop; false when there is no such loop. */
static bool units_from_loop(const struct fg_plant *plant, const struct fg_benchmark *benchmark,
                            struct fg_arena *scratch, struct units *units)
{
    int n = plant->n, m = plant->m, p = plant->p;
    bool memory = false;
    double slowest = INFINITY;
    if (!benchmark->has_lqr_gain)
        return false;
    struct fg_matrix A = fg_matrix_copy(scratch, plant->A), X = fg_matrix_new(scratch, n, n);
    struct fg_matrix W = fg_matrix_copy(scratch, plant->W), Cl = fg_matrix_copy(scratch, plant->C);
    double *u = fg_arena_doubles(scratch, m), *y = fg_arena_doubles(scratch, p);
    if (scratch->failed)
        return false;
    fg_multiply('N', 'N', -1, plant->B, benchmark->L, 1, A);
    fg_multiply('N', 'N', -1, plant->D, benchmark->L, 1, Cl); /* y = (C - D L) x + v */
    units->fastest = fastest_rate(A, plant->discrete, scratch, &slowest);
    if (benchmark->lqr.kind == FG_BOUND_ATTAINED && slowest > 0)
        units->slowest = slowest;
    units->rate = plant->discrete ? 1 : or_one(units->fastest);
    if (!fg_lyapunov(plant->discrete, A, W, X, &memory)) {
        scratch->failed = scratch->failed || memory;
        return false;
    }
    variances(benchmark->L, X, scratch, u);
    if (!size_idle_inputs(plant, benchmark->L, A, units->rate, scratch, u))
        return false;
    /* add a loop driven from the inputs, so that every controllable state and output has a unit */
    for (int i = 0; i < n; i++)
        for (int j = 0; j < n; j++)
            for (int k = 0; k < m; k++)
                FG_AT(W, i, j) +=
                    INPUT_SHARE * FG_AT(plant->B, i, k) * u[k] * FG_AT(plant->B, j, k) / units->rate;
    if (!fg_lyapunov(plant->discrete, A, W, X, &memory)) {
        scratch->failed = scratch->failed || memory;
        return false;
    }
    variances(Cl, X, scratch, y);
    for (int i = 0; i < n; i++)
        units->state[i] = or_one(sqrt(FG_AT(X, i, i)));
    for (int i = 0; i < m; i++)
        units->input[i] = or_one(sqrt(u[i]));
    for (int j = 0; j < p; j++)
        units->output[j] = or_one(sqrt(y[j] + FG_AT(plant->V, j, j)));
    return !scratch->failed;
}

/* Without an LQR loop: balance A, then unit columns of B and rows of C. */
static void units_from_matrices(const struct fg_plant *plant, struct fg_arena *scratch, struct units *units)
{
    int n = plant->n, low, high, info;
    struct fg_matrix A = fg_matrix_copy(scratch, plant->A);
    if (scratch->failed)
        return;
    dgebal_("S", &n, A.at, &n, &low, &high, units->state, &info, 1);
    double slowest;
    units->fastest = fastest_rate(plant->A, plant->discrete, scratch, &slowest);
    units->rate = plant->discrete ? 1 : or_one(units->fastest);
    for (int k = 0; k < plant->m; k++) {
        double size = 0;
        for (int i = 0; i < n; i++)
            size = hypot(size, FG_AT(plant->B, i, k) / units->state[i]);
        units->input[k] = or_one(units->rate / size);
    }
    for (int j = 0; j < plant->p; j++) {
        double size = 0;
        for (int i = 0; i < n; i++)
            size = hypot(size, FG_AT(plant->C, j, i) * units->state[i]);
        units->output[j] = or_one(size);
    }
}

/* M(i, j) *= row[i]^a * column[j]^b * factor, a and b +1, -1 */
static void rescale(struct fg_matrix M, const double *row, int a, const double *column, int b, double factor)
{
    for (int j = 0; j < M.cols; j++)
        for (int i = 0; i < M.rows; i++)
            FG_AT(M, i, j) *= (a > 0 ? row[i] : 1 / row[i]) * (b > 0 ? column[j] : 1 / column[j]) * factor;
}

static void scale_plant(const struct fg_plant *plant, const struct units *units, struct fg_arena *arena,
                        struct fg_plant *out)
{
    *out = *plant;
    struct fg_matrix *matrices[] = {&out->A, &out->B, &out->C, &out->D, &out->Q,
                                    &out->R, &out->N, &out->W, &out->V};
    for (size_t i = 0; i < sizeof matrices / sizeof *matrices; i++)
        *matrices[i] = fg_matrix_copy(arena, *matrices[i]);
    if (arena->failed)
        return;
    const double *x = units->state, *u = units->input, *y = units->output;
    double slow = 1 / units->rate;
    rescale(out->A, x, -1, x, 1, slow);
    rescale(out->B, x, -1, u, 1, slow);
    rescale(out->C, y, -1, x, 1, 1);
    rescale(out->D, y, -1, u, 1, 1);
    rescale(out->Q, x, 1, x, 1, 1);
    rescale(out->R, u, 1, u, 1, 1);
    rescale(out->N, x, 1, u, 1, 1);
    rescale(out->W, x, -1, x, -1, slow);
    rescale(out->V, y, -1, y, -1, 1);
}

static void scale_pattern(const struct fg_pattern *pattern, struct fg_scaled *scaled, struct fg_arena *arena)
{
    int m = pattern->m, p = pattern->p, q = pattern->count;
    struct fg_pattern *out = &scaled->pattern;
    *out = *pattern;
    out->sign = fg_arena_doubles(arena, (size_t)m * p);
    out->fixed = fg_arena_doubles(arena, (size_t)m * p);
    out->lower = fg_arena_doubles(arena, (size_t)q);
    out->upper = fg_arena_doubles(arena, (size_t)q);
    if (arena->failed)
        return;
    for (int k = 0; k < q; k++) {
        double logs = 0; /* unit of theta_k: geometric mean over its entries */
        int entries = 0;
        for (int e = 0; e < m * p; e++)
            if (pattern->index[e] == k) {
                logs += log(scaled->input[e % m] / scaled->output[e / m]);
                entries++;
            }
        double unit = exp(logs / (entries ? entries : 1));
        out->lower[k] = pattern->lower[k] / unit;
        out->upper[k] = pattern->upper[k] / unit;
        for (int e = 0; e < m * p; e++)
            if (pattern->index[e] == k)
                out->sign[e] = pattern->sign[e] * unit * scaled->output[e / m] / scaled->input[e % m];
    }
    fg_scaled_from_user(scaled, pattern->fixed, out->fixed);
}

flatgain_status fg_scale(const struct fg_plant *plant, const struct fg_pattern *pattern,
                         const struct fg_benchmark *benchmark, struct fg_arena *arena,
                         struct fg_scaled *scaled, flatgain_error *error)
{
    struct fg_arena scratch = {0};
    struct units units = {fg_arena_doubles(arena, (size_t)plant->n),
                          fg_arena_doubles(arena, (size_t)plant->m),
                          fg_arena_doubles(arena, (size_t)plant->p),
                          1,
                          1,
                          INFINITY};
    *scaled = (struct fg_scaled){.input = units.input, .output = units.output};
    if (!arena->failed && !units_from_loop(plant, benchmark, &scratch, &units) && !scratch.failed)
        units_from_matrices(plant, &scratch, &units);
    scaled->rate = units.rate;
    /* the margin is a rate; in the discrete setting the fastest pole of the loop less 1 stands for it */
    scaled->margin = MARGIN * (plant->discrete ? fmin(1, or_one(units.fastest)) : 1);
    scaled->margin = fmin(scaled->margin, LQR_PART * units.slowest / units.rate);
    if (!arena->failed && !scratch.failed) {
        scale_plant(plant, &units, arena, &scaled->plant);
        scale_pattern(pattern, scaled, arena);
        if (benchmark->has_lqr_gain) {
            scaled->L = fg_matrix_copy(arena, benchmark->L);
            if (!arena->failed)
                rescale(scaled->L, units.input, -1, units.state, 1, 1);
            scaled->has_L = true;
        }
    }
    bool failed = arena->failed || scratch.failed;
    fg_arena_release(&scratch);
    return failed ? fg_no_memory(error) : FLATGAIN_OK;
}

void fg_scaled_from_user(const struct fg_scaled *s, const double *user, double *natural)
{
    int m = s->pattern.m, p = s->pattern.p;
    for (int e = 0; e < m * p; e++)
        natural[e] = user[e] * (s->output[e / m] / s->input[e % m]);
}

void fg_scaled_to_user(const struct fg_scaled *s, const double *natural, double *user)
{
    int m = s->pattern.m, p = s->pattern.p;
    for (int e = 0; e < m * p; e++)
        user[e] = natural[e] * (s->input[e % m] / s->output[e / m]);
}
