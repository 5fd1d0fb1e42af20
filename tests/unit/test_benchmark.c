/* LQR and LQG cost: published and independently computed values, the closed loop with the controller built,
 * the SLICOT library, unit changes, and the order reduction against its own equation. */
#include <check.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "cases.h"
#include "design/benchmark.h"
#include "design/limit_solution.h"
#include "linalg/lapack.h"
#include "linalg/lyapunov.h"
#include "linalg/riccati.h"

/* SLICOT AB13BD: H2 norm of (A, B, C, D); A, B, C, D are overwritten. */
double ab13bd_(const char *dico, const char *jobn, const int *n, const int *m, const int *p, double *a,
               const int *lda, double *b, const int *ldb, double *c, const int *ldc, double *d,
               const int *ldd, int *nq, const double *tol, double *dwork, const int *ldwork, int *iwarn,
               int *info, size_t, size_t);

static struct fg_arena arena;

static void release(void)
{
    fg_arena_release(&arena);
}

static unsigned long long state = 88172645463325252ULL;
static double uniform(void) /* xorshift64, in (-1, 1) */
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (double)(state >> 11) / 4503599627370496.0 - 1;
}

static struct fg_matrix random_matrix(int rows, int cols)
{
    struct fg_matrix a = fg_matrix_new(&arena, rows, cols);
    for (int i = 0; i < rows * cols; i++)
        a.at[i] = uniform();
    return a;
}

static struct fg_matrix rows_matrix(int rows, int cols, const double *at)
{
    return fg_matrix_from_rows(&arena, rows, cols, at);
}

/* F F' with F n x rank. */
static struct fg_matrix semidefinite(int n, int rank)
{
    struct fg_matrix F = random_matrix(n, rank), S = fg_matrix_new(&arena, n, n);
    fg_multiply('N', 'T', 1, F, F, 0, S);
    return S;
}

static struct fg_plant empty_plant(bool discrete, int n, int m, int p)
{
    struct fg_plant plant = {.discrete = discrete, .n = n, .m = m, .p = p};
    plant.A = fg_matrix_new(&arena, n, n);
    plant.B = fg_matrix_new(&arena, n, m);
    plant.C = fg_matrix_new(&arena, p, n);
    plant.D = fg_matrix_new(&arena, p, m);
    plant.Q = fg_matrix_new(&arena, n, n);
    plant.R = fg_matrix_new(&arena, m, m);
    plant.N = fg_matrix_new(&arena, n, m);
    plant.W = fg_matrix_new(&arena, n, n);
    plant.V = fg_matrix_new(&arena, p, p);
    return plant;
}

/* Random plant, [Q N; N' R] of rank `weights`, W of rank `disturbances`, V of rank `noises`. */
static struct fg_plant random_plant(bool discrete, int n, int m, int p, int weights, int disturbances,
                                    int noises)
{
    struct fg_plant plant = empty_plant(discrete, n, m, p);
    plant.A = random_matrix(n, n);
    plant.B = random_matrix(n, m);
    plant.C = random_matrix(p, n);
    plant.D = random_matrix(p, m);
    plant.W = semidefinite(n, disturbances);
    plant.V = semidefinite(p, noises);
    struct fg_matrix M = semidefinite(n + m, weights);
    for (int j = 0; j < n + m; j++)
        for (int i = 0; i < n + m; i++) {
            if (i < n && j < n)
                FG_AT(plant.Q, i, j) = FG_AT(M, i, j);
            else if (i < n)
                FG_AT(plant.N, i, j - n) = FG_AT(M, i, j);
            else if (j >= n)
                FG_AT(plant.R, i - n, j - n) = FG_AT(M, i, j);
        }
    return plant;
}

static struct fg_benchmark benchmark(const struct fg_plant *plant)
{
    struct fg_benchmark b;
    ck_assert_int_eq(fg_benchmark(plant, &arena, &b, NULL), FLATGAIN_OK);
    return b;
}

static struct fg_plant plant_of(const struct case_data *data)
{
    struct fg_plant plant = empty_plant(data->discrete, data->n, data->m, data->p);
    plant.A = rows_matrix(data->n, data->n, data->A);
    plant.B = rows_matrix(data->n, data->m, data->B);
    plant.C = rows_matrix(data->p, data->n, data->C);
    plant.D = rows_matrix(data->p, data->m, data->D);
    plant.Q = rows_matrix(data->n, data->n, data->Q);
    plant.R = rows_matrix(data->m, data->m, data->R);
    plant.N = rows_matrix(data->n, data->m, data->N);
    plant.W = rows_matrix(data->n, data->n, data->W);
    plant.V = rows_matrix(data->p, data->p, data->V_lqg ? data->V_lqg : data->V);
    return plant;
}

static struct fg_benchmark benchmark_of(const char *name)
{
    struct case_data data;
    ck_assert(case_load(name, &data));
    struct fg_plant plant = plant_of(&data);
    struct fg_benchmark b = benchmark(&plant);
    case_free(&data);
    return b;
}

/* Spectral abscissa, or radius. */
static double slowest(bool discrete, struct fg_matrix A)
{
    int n = A.rows, lwork = 8 * n, info = 0, one = 1;
    struct fg_matrix copy = fg_matrix_copy(&arena, A);
    double *re = fg_arena_doubles(&arena, n), *im = fg_arena_doubles(&arena, n), none = 0, worst = -INFINITY;
    double *work = fg_arena_doubles(&arena, lwork);
    dgeev_("N", "N", &n, copy.at, &n, re, im, &none, &one, &none, &one, work, &lwork, &info, 1, 1);
    ck_assert_int_eq(info, 0);
    for (int i = 0; i < n; i++)
        worst = fmax(worst, discrete ? hypot(re[i], im[i]) : re[i]);
    return worst;
}

static void ck_gain_stabilises(const struct fg_plant *plant, const struct fg_benchmark *b)
{
    ck_assert(b->has_lqr_gain);
    struct fg_matrix Acl = fg_matrix_copy(&arena, plant->A);
    fg_multiply('N', 'N', -1, plant->B, b->L, 1, Acl);
    ck_assert_double_lt(slowest(plant->discrete, Acl), plant->discrete ? 1 : 0);
    ck_assert(b->fastest > 0 || plant->discrete);
}

/* Every open model with lqr and lqg known: Leibfritz, COMPleib (2004), values computed independently in
 * another language by the same kind of reduction with other numerics. Where the best static cost is known
 * too, it may not be below the benchmark. */
START_TEST(known_cases)
{
    char **names = case_names();
    int known = 0;
    for (char **name = names; *name; name++) {
        if (strcmp(*name, "wood_berry") == 0 || strcmp(*name, "vinante_luyben") == 0 ||
            strcmp(*name, "quadruple_tank_physical") == 0)
            continue; /* no state model */
        struct case_data data;
        ck_assert(case_load(*name, &data));
        double lqr = case_number(&data, "known", "lqr"), lqg = case_number(&data, "known", "lqg");
        double best = case_number(&data, "known", "best_J");
        if (data.Q && data.R && data.W && (isfinite(lqr) || isfinite(best))) {
            struct fg_plant plant = plant_of(&data);
            struct fg_benchmark b = benchmark(&plant);
            double zero = 1e-9 * fg_matrix_max_abs(plant.Q) * fg_matrix_max_abs(plant.W);
            if (isfinite(lqr)) {
                known++;
                ck_assert_msg(fabs(b.lqr.cost - lqr) <= 1e-6 * lqr + zero, "%s: lqr %.12g, not %.12g", *name,
                              b.lqr.cost, lqr);
                ck_assert_msg(fabs(b.lqg.cost - lqg) <= 1e-6 * lqg + zero, "%s: lqg %.12g, not %.12g", *name,
                              b.lqg.cost, lqg);
                ck_assert_msg(b.lqg.kind == FG_BOUND_LIMIT, "%s: lqg is not a limit", *name);
            }
            ck_assert_msg(b.lqr.cost <= b.lqg.cost, "%s: lqr above lqg", *name);
            if (isfinite(best))
                ck_assert_msg(b.lqg.cost <= best * (1 + 1e-7), "%s: lqg %.12g above the static %.12g", *name,
                              b.lqg.cost, best);
            ck_gain_stabilises(&plant, &b);
        }
        case_free(&data);
        fg_arena_release(&arena);
    }
    case_names_free(names);
    ck_assert_int_ge(known, 44);
}
END_TEST

/* Values of one case each. Zeros on the imaginary axis: computed independently with A + delta I to the
 * digits given. Servo: Kwakernaak, Sivan, Linear Optimal Control Systems (1972), examples 3.8, 4.4, gains
 * and cost recomputed independently. zheng: Zheng, Tang, Li, LQG landscape, example 8, published. Discrete
 * scalar: the DARE solved by hand, P = (5.21 + sqrt(47.1441)) / 2, LQG with V = 1 computed independently.
 * nosof_*, scalar_lq, tanks: textbook plants, values from SciPy beside the case. */
static const struct {
    const char *name;
    double lqr, lqg, tolerance; /* NAN: not checked */
    enum fg_bound_kind lqg_kind;
} values[] = {
    {"CM1", NAN, 0.830, 1e-3, FG_BOUND_LIMIT},
    {"DLR1", NAN, 0, 1e-9, FG_BOUND_LIMIT},
    {"NN16", NAN, 0.0542, 1e-3, FG_BOUND_LIMIT},
    {"TMD", NAN, 1.566, 1e-3, FG_BOUND_LIMIT},
    {"AC18", NAN, 173.04423875, 1e-10, FG_BOUND_LIMIT},
    {"zheng_lqg_example8", 8.8, 11, 1e-12, FG_BOUND_ATTAINED},
    {"kwakernaak_sivan_position_servo_lqg", 4.752010279227047e-05, 9.077886841469298e-05, 1e-10,
     FG_BOUND_ATTAINED},
    {"kwakernaak_sivan_position_servo_state", 0.11023993821843386, 0.11023993821843386, 1e-10,
     FG_BOUND_LIMIT},
    {"discrete_scalar_unstable", 6.038078064944054, 6.038078064944054, 1e-12, FG_BOUND_ATTAINED},
    {"discrete_double_integrator_position", 60.6377314671026, 168.42208560280562, 1e-10, FG_BOUND_ATTAINED},
    {"nosof_double_integrator", 3.4641016151377544, 13.85640646055101, 1e-10, FG_BOUND_ATTAINED},
    {"nosof_parity_interlacing", 7.2915026221291885, 1147.9851069483436, 1e-10, FG_BOUND_ATTAINED},
    {"scalar_lq", 0.7982735495102029, 15.708098346445633, 1e-10, FG_BOUND_ATTAINED},
    {"quadruple_tank_minphase", 15.364171368406925, 15.995499101402451, 1e-10, FG_BOUND_ATTAINED},
    {"nosof_hidden_unstable_mode", NAN, NAN, 0, FG_BOUND_NONE},
};

START_TEST(single_values)
{
    struct fg_benchmark b = benchmark_of(values[_i].name);
    const char *name = values[_i].name;
    double lqr = values[_i].lqr, lqg = values[_i].lqg, tolerance = values[_i].tolerance;
    if (isfinite(lqr))
        ck_assert_msg(fabs(b.lqr.cost - lqr) <= tolerance * lqr, "%s: lqr %.12g", name, b.lqr.cost);
    if (isfinite(lqg))
        ck_assert_msg(fabs(b.lqg.cost - lqg) <= tolerance * fmax(lqg, lqg == 0), "%s: lqg %.12g", name,
                      b.lqg.cost);
    ck_assert_int_eq(b.lqg.kind, values[_i].lqg_kind);
    ck_assert((b.lqg.kind == FG_BOUND_ATTAINED) == (b.lqg.why == NULL));
}
END_TEST

START_TEST(discrete_scalar_with_noise)
{
    struct case_data data;
    ck_assert(case_load("discrete_scalar_unstable", &data));
    struct fg_plant plant = plant_of(&data);
    plant.V.at[0] = 1;
    struct fg_benchmark b = benchmark(&plant);
    ck_assert_double_eq_tol(b.lqg.cost, 10.046335993355786, 1e-10);
    ck_assert_double_eq_tol(b.L.at[0], 0.9437073317673206, 1e-12);
    case_free(&data);
}
END_TEST

/* Noise-free filter, derived by hand: A = [0 1; -2 -3], C = [1 -1], W = diag(0, 1) has its zero at s = 1 and
 * Sigma = (1/18) [1 1; 1 1]; the chain A = [0 1 0; 0 0 1; -1 -2 -1.5], C = [1 0 0], W = diag(0, 0, 1) has
 * none and Sigma = 0, exactly. */
START_TEST(exact_limits)
{
    struct fg_matrix A = rows_matrix(2, 2, (double[]){0, -2, 1, -3}),
                     B = rows_matrix(2, 1, (double[]){1, -1});
    struct fg_matrix W = rows_matrix(2, 2, (double[]){0, 0, 0, 1});
    struct fg_limit_problem p = {false, A, B, W, fg_matrix_new(&arena, 1, 1), fg_matrix_new(&arena, 2, 1)};
    struct fg_limit_solution s;
    ck_assert(fg_limit_solve(&p, &arena, &s));
    ck_assert(s.reduced);
    for (int i = 0; i < 4; i++)
        ck_assert_double_eq_tol(s.S.at[i], 1.0 / 18, 1e-14);
    p.A = rows_matrix(3, 3, (double[]){0, 0, -1, 1, 0, -2, 0, 1, -1.5});
    p.B = rows_matrix(3, 1, (double[]){1, 0, 0});
    p.Q = rows_matrix(3, 3, (double[]){0, 0, 0, 0, 0, 0, 0, 0, 1});
    p.N = fg_matrix_new(&arena, 3, 1);
    ck_assert(fg_limit_solve(&p, &arena, &s));
    ck_assert_double_le(fg_matrix_max_abs(s.S), 1e-15);
}
END_TEST

/* The same two through a whole benchmark, in the dual form: R = 0. J_LQR = tr(S W) with W = I: 2/18. */
START_TEST(free_input)
{
    struct fg_plant plant = empty_plant(false, 2, 1, 1);
    plant.A = rows_matrix(2, 2, (double[]){0, -2, 1, -3});
    plant.B = rows_matrix(2, 1, (double[]){1, -1});
    plant.C = rows_matrix(1, 2, (double[]){1, 0});
    plant.Q = rows_matrix(2, 2, (double[]){0, 0, 0, 1});
    plant.W = fg_matrix_identity(&arena, 2);
    plant.V = fg_matrix_identity(&arena, 1);
    struct fg_benchmark b = benchmark(&plant);
    ck_assert_int_eq(b.lqr.kind, FG_BOUND_LIMIT);
    ck_assert_ptr_nonnull(b.lqr.why);
    ck_assert_double_eq_tol(b.lqr.cost, 1.0 / 9, 1e-13);
    ck_assert_int_eq(b.lqg.kind, FG_BOUND_LIMIT);
    ck_gain_stabilises(&plant, &b);
}
END_TEST

/* The problem with R + eps I from above: costs fall to the limit. [Q N; N' R] of low rank, both settings. */
START_TEST(limit_is_approached_from_above)
{
    bool discrete = _i == 1;
    for (int trial = 0; trial < 20; trial++) {
        int n = 3 + trial % 3, m = 2;
        struct fg_plant plant = random_plant(discrete, n, m, 2, 1 + trial % 2, n, 2);
        struct fg_benchmark b = benchmark(&plant);
        ck_assert(isfinite(b.lqr.cost) && isfinite(b.lqg.cost));
        ck_gain_stabilises(&plant, &b);
        double last_lqr = INFINITY, last_lqg = INFINITY, first_lqr = NAN, first_lqg = NAN;
        for (double eps = 1e-2; eps > 1e-9; eps /= 100) {
            struct fg_plant more = plant;
            more.R = fg_matrix_copy(&arena, plant.R);
            for (int i = 0; i < m; i++)
                FG_AT(more.R, i, i) += eps;
            struct fg_benchmark c = benchmark(&more);
            ck_assert_double_ge(c.lqr.cost, b.lqr.cost * (1 - 1e-7) - 1e-9);
            ck_assert_double_ge(c.lqg.cost, b.lqg.cost * (1 - 1e-7) - 1e-9);
            ck_assert_double_le(c.lqr.cost, last_lqr);
            ck_assert_double_le(c.lqg.cost, last_lqg);
            last_lqr = c.lqr.cost;
            last_lqg = c.lqg.cost;
            first_lqr = isnan(first_lqr) ? last_lqr : first_lqr;
            first_lqg = isnan(first_lqg) ? last_lqg : first_lqg;
        }
        /* slow in the continuous setting, like eps^(1/2) or eps^(1/4): the reason for the reduction */
        ck_assert_msg(last_lqr - b.lqr.cost <= 0.2 * (first_lqr - b.lqr.cost) + 1e-9,
                      "trial %d: %g, limit %g", trial, last_lqr, b.lqr.cost);
        ck_assert_msg(last_lqg - b.lqg.cost <= 0.2 * (first_lqg - b.lqg.cost) + 1e-9,
                      "trial %d: %g, limit %g", trial, last_lqg, b.lqg.cost);
        fg_arena_release(&arena);
    }
}
END_TEST

/* E'E = A'S + S A + Q (discrete A'S A - S + Q) from raw data, S and it semidefinite, for reduced problems. */
START_TEST(factor_is_the_residual)
{
    bool discrete = _i == 1;
    for (int trial = 0; trial < 30; trial++) {
        int n = 2 + trial % 5, m = 1 + trial % 3;
        struct fg_plant plant = random_plant(discrete, n, m, 1, 1 + trial % (m + 1), 1, 1);
        struct fg_limit_problem p = {discrete, plant.A, plant.B, plant.Q, plant.R, plant.N};
        struct fg_limit_solution s;
        ck_assert_msg(fg_limit_solve(&p, &arena, &s), "trial %d is not solved", trial);
        ck_assert_int_le(s.factor.rows, m);
        struct fg_matrix M = fg_matrix_copy(&arena, plant.Q), SA = fg_matrix_new(&arena, n, n);
        fg_multiply('N', 'N', 1, s.S, plant.A, 0, SA);
        for (int j = 0; j < n; j++)
            for (int i = 0; i < n; i++)
                FG_AT(M, i, j) += discrete ? -FG_AT(s.S, i, j) : FG_AT(SA, i, j) + FG_AT(SA, j, i);
        if (discrete)
            fg_multiply('T', 'N', 1, plant.A, SA, 1, M);
        fg_multiply('T', 'N', -1, s.factor, s.factor, 1, M);
        double size = fg_matrix_max_abs(s.S) + fg_matrix_max_abs(plant.Q);
        ck_assert_msg(fg_matrix_max_abs(M) < 1e-9 * size, "trial %d: residual %g of %g", trial,
                      fg_matrix_max_abs(M), size);
        fg_arena_release(&arena);
    }
}
END_TEST

/* [A -B; ...] of the loop with the LQG controller, from noise [w; v] (white, unit, through factors given) to
 * z = Hx x + Hu u. */
struct loop {
    struct fg_matrix A, B, C, D;
};

static void put(struct fg_matrix into, int row, int col, double factor, struct fg_matrix a)
{
    for (int j = 0; j < a.cols; j++)
        for (int i = 0; i < a.rows; i++)
            FG_AT(into, row + i, col + j) += factor * FG_AT(a, i, j);
}

static struct fg_matrix product(struct fg_matrix a, struct fg_matrix b)
{
    struct fg_matrix c = fg_matrix_new(&arena, a.rows, b.cols);
    fg_multiply('N', 'N', 1, a, b, 0, c);
    return c;
}

/* Lower Cholesky factor of a positive definite matrix. */
static struct fg_matrix root(struct fg_matrix a)
{
    struct fg_matrix r = fg_matrix_copy(&arena, a);
    int n = a.rows, info = 0;
    dpotrf_("L", &n, r.at, &n, &info, 1);
    ck_assert_int_eq(info, 0);
    for (int j = 0; j < n; j++)
        for (int i = 0; i < j; i++)
            FG_AT(r, i, j) = 0;
    return r;
}

/* The LQG controller built from two Riccati solutions: continuous an observer on y - D u, discrete the form
 * with the newest reading, xf = xp + K (y - D u - C xp), u = -L xf, xp+ = A xf + B u. */
static struct loop lqg_loop(const struct fg_plant *q)
{
    int n = q->n, m = q->m, p = q->p;
    struct fg_matrix S = fg_matrix_new(&arena, n, n), L = fg_matrix_new(&arena, m, n);
    struct fg_matrix P = fg_matrix_new(&arena, n, n), Kt = fg_matrix_new(&arena, p, n);
    struct fg_matrix At = fg_matrix_transpose(&arena, q->A), Ct = fg_matrix_transpose(&arena, q->C);
    struct fg_matrix none = fg_matrix_new(&arena, n, p), one = fg_matrix_identity(&arena, n);
    bool memory = false;
    if (q->discrete) {
        ck_assert(fg_riccati_discrete(q->A, q->B, q->Q, q->R, q->N, S, L, &memory));
        ck_assert(fg_riccati_discrete(At, Ct, q->W, q->V, none, P, Kt, &memory));
        /* filter gain P C'(C P C' + V)^-1, not the predictor's A times it */
        struct fg_matrix M = fg_matrix_copy(&arena, q->V), CP = product(q->C, P);
        int pivot[8], info = 0;
        put(M, 0, 0, 1, product(CP, Ct));
        dgesv_(&p, &n, M.at, &p, pivot, CP.at, &p, &info);
        ck_assert_int_eq(info, 0);
        Kt = CP;
    } else {
        ck_assert(fg_riccati_continuous(q->A, q->B, q->Q, q->R, q->N, S, L, &memory));
        ck_assert(fg_riccati_continuous(At, Ct, q->W, q->V, none, P, Kt, &memory));
    }
    struct fg_matrix K = fg_matrix_transpose(&arena, Kt), KC = product(K, q->C), BL = product(q->B, L);
    struct fg_matrix KV = product(K, root(q->V)), M = fg_matrix_new(&arena, n + m, n + m);
    put(M, 0, 0, 1, q->Q);
    put(M, 0, n, 1, q->N);
    put(M, n, 0, 1, fg_matrix_transpose(&arena, q->N));
    put(M, n, n, 1, q->R);
    struct fg_matrix H = fg_matrix_transpose(&arena, root(M)), Hx = fg_matrix_new(&arena, n + m, n);
    struct fg_matrix HuL = fg_matrix_new(&arena, n + m, n), Hu = fg_matrix_new(&arena, n + m, m);
    memcpy(Hx.at, H.at, (size_t)(n + m) * n * sizeof(double));
    memcpy(Hu.at, H.at + (size_t)(n + m) * n, (size_t)(n + m) * m * sizeof(double));
    HuL = product(Hu, L);
    struct loop c = {fg_matrix_new(&arena, 2 * n, 2 * n), fg_matrix_new(&arena, 2 * n, n + p),
                     fg_matrix_new(&arena, n + m, 2 * n), fg_matrix_new(&arena, n + m, n + p)};
    put(c.A, 0, 0, 1, q->A);
    put(c.B, 0, 0, 1, root(q->W));
    put(c.C, 0, 0, 1, Hx);
    if (!q->discrete) {
        put(c.A, 0, n, -1, BL);
        put(c.A, n, 0, 1, KC);
        put(c.A, n, n, 1, q->A);
        put(c.A, n, n, -1, BL);
        put(c.A, n, n, -1, KC);
        put(c.B, n, n, 1, KV);
        put(c.C, 0, n, -1, HuL);
        return c;
    }
    struct fg_matrix F = fg_matrix_copy(&arena, one), ABL = fg_matrix_copy(&arena, q->A);
    put(F, 0, 0, -1, KC); /* xf = F xp + K C x + K v */
    put(ABL, 0, 0, -1, BL);
    put(c.A, 0, 0, -1, product(BL, KC));
    put(c.A, 0, n, -1, product(BL, F));
    put(c.A, n, 0, 1, product(ABL, KC));
    put(c.A, n, n, 1, product(ABL, F));
    put(c.B, 0, n, -1, product(BL, KV));
    put(c.B, n, n, 1, product(ABL, KV));
    put(c.C, 0, 0, -1, product(HuL, KC));
    put(c.C, 0, n, -1, product(HuL, F));
    put(c.D, 0, n, -1, product(HuL, KV));
    return c;
}

/* Three ways to the LQG cost: the trace formula, tr(C X C' + D D') with X from the Lyapunov equation of the
 * loop, and the squared H2 norm of the loop by SLICOT. */
START_TEST(lqg_three_ways)
{
    bool discrete = _i == 1;
    for (int trial = 0; trial < 20; trial++) {
        int n = 1 + trial % 6, m = 1 + trial % 3, p = 1 + trial % 2;
        struct fg_plant plant = random_plant(discrete, n, m, p, n + m, n, p);
        for (int i = 0; i < n; i++) { /* away from singular, so that tolerances can be tight */
            FG_AT(plant.W, i, i) += 0.1;
            FG_AT(plant.Q, i, i) += 0.1;
        }
        for (int i = 0; i < m; i++)
            FG_AT(plant.R, i, i) += 0.1;
        for (int i = 0; i < p; i++)
            FG_AT(plant.V, i, i) += 0.1;
        struct fg_benchmark b = benchmark(&plant);
        ck_assert_int_eq(b.lqg.kind, FG_BOUND_ATTAINED);
        struct loop c = lqg_loop(&plant);
        int n2 = 2 * n, inputs = n + p, outputs = n + m;
        struct fg_matrix X = fg_matrix_new(&arena, n2, n2), BB = fg_matrix_new(&arena, n2, n2);
        bool memory = false;
        fg_multiply('N', 'T', 1, c.B, c.B, 0, BB);
        ck_assert(fg_lyapunov(discrete, c.A, BB, X, &memory));
        struct fg_matrix CX = product(c.C, X);
        double J = 0;
        for (int i = 0; i < outputs * n2; i++)
            J += CX.at[i] * c.C.at[i];
        for (int i = 0; i < outputs * inputs; i++)
            J += c.D.at[i] * c.D.at[i];
        ck_assert_msg(fabs(J - b.lqg.cost) < 1e-9 * J, "trial %d: loop %.12g, formula %.12g", trial, J,
                      b.lqg.cost);
        int order = 0, warning = 0, info = 0, ldwork = 4000;
        double tolerance = 0, *work = fg_arena_doubles(&arena, (size_t)ldwork);
        double norm =
            ab13bd_(discrete ? "D" : "C", "H", &n2, &inputs, &outputs, c.A.at, &n2, c.B.at, &n2, c.C.at,
                    &outputs, c.D.at, &outputs, &order, &tolerance, work, &ldwork, &warning, &info, 1, 1);
        ck_assert_int_eq(info, 0);
        ck_assert_msg(fabs(norm * norm - b.lqg.cost) < 1e-8 * J, "trial %d: SLICOT %.12g, formula %.12g",
                      trial, norm * norm, b.lqg.cost);
        fg_arena_release(&arena);
    }
}
END_TEST

/* Cost of the static law u = -K (y - D u), NAN when not stable. */
static double static_cost(const struct fg_plant *q, struct fg_matrix F)
{
    int n = q->n;
    struct fg_matrix FC = product(F, q->C), BF = product(q->B, F), Acl = fg_matrix_copy(&arena, q->A);
    struct fg_matrix Wcl = fg_matrix_copy(&arena, q->W), X = fg_matrix_new(&arena, n, n);
    bool memory = false;
    put(Acl, 0, 0, -1, product(q->B, FC));
    fg_multiply('N', 'T', 1, product(BF, q->V), BF, 1, Wcl);
    if (!fg_lyapunov(q->discrete, Acl, Wcl, X, &memory))
        return NAN;
    struct fg_matrix Qcl = fg_matrix_copy(&arena, q->Q), NFC = product(q->N, FC);
    put(Qcl, 0, 0, -1, NFC);
    put(Qcl, 0, 0, -1, fg_matrix_transpose(&arena, NFC));
    fg_multiply('T', 'N', 1, FC, product(q->R, FC), 1, Qcl);
    double J = fg_matrix_trace_of_product(Qcl, X);
    struct fg_matrix RF = product(q->R, F), FV = product(F, q->V);
    for (int i = 0; i < F.rows * F.cols; i++)
        J += RF.at[i] * FV.at[i];
    return J;
}

/* J_LQR <= J_LQG <= J(K), with singular weights and noises of every rank (continuous: V = 0 in both, since
 * the static law needs it). */
START_TEST(nothing_is_below_the_bounds)
{
    bool discrete = _i == 1;
    int compared = 0;
    for (int trial = 0; trial < 150; trial++) {
        int n = 2 + trial % 4, m = 1 + trial % 2, p = 1 + (trial / 2) % 3;
        struct fg_plant plant = random_plant(discrete, n, m, p, 1 + trial % (n + m), 1 + trial % n,
                                             discrete ? trial % (p + 1) : 0);
        for (int i = 0; i < n; i++)
            FG_AT(plant.A, i, i) -= discrete ? 0 : 0.7;
        struct fg_benchmark b = benchmark(&plant);
        ck_assert_msg(b.lqr.cost <= b.lqg.cost, "trial %d: lqr %g, lqg %g", trial, b.lqr.cost, b.lqg.cost);
        for (int k = 0; k < 10; k++) {
            double J = static_cost(&plant, random_matrix(m, p));
            if (!isnan(J)) {
                compared++;
                ck_assert_msg(b.lqg.cost <= J * (1 + 1e-9), "trial %d: lqg %g, static %g", trial, b.lqg.cost,
                              J);
            }
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_gt(compared, 200);
}
END_TEST

/* The plant in other units: x~ = d x, u~ = e u, y~ = g y, t~ = t / tau, cost times c. */
static struct fg_plant other_units(const struct fg_plant *q, double range)
{
    int n = q->n, m = q->m, p = q->p;
    struct fg_plant r = empty_plant(q->discrete, n, m, p);
    double d[8], e[8], g[8], tau = q->discrete ? 1 : pow(10, range * uniform());
    for (int i = 0; i < 8; i++) {
        d[i] = pow(10, range * uniform());
        e[i] = pow(10, range * uniform());
        g[i] = pow(10, range * uniform());
    }
    for (int i = 0; i < n; i++) {
        for (int j = 0; j < n; j++) {
            FG_AT(r.A, i, j) = FG_AT(q->A, i, j) * d[i] / d[j] * tau;
            FG_AT(r.Q, i, j) = FG_AT(q->Q, i, j) / d[i] / d[j];
            FG_AT(r.W, i, j) = FG_AT(q->W, i, j) * d[i] * d[j] * tau;
        }
        for (int j = 0; j < m; j++) {
            FG_AT(r.B, i, j) = FG_AT(q->B, i, j) * d[i] / e[j] * tau;
            FG_AT(r.N, i, j) = FG_AT(q->N, i, j) / d[i] / e[j];
        }
        for (int j = 0; j < p; j++)
            FG_AT(r.C, j, i) = FG_AT(q->C, j, i) * g[j] / d[i];
    }
    for (int i = 0; i < m; i++)
        for (int j = 0; j < m; j++)
            FG_AT(r.R, i, j) = FG_AT(q->R, i, j) / e[i] / e[j];
    for (int i = 0; i < p; i++)
        for (int j = 0; j < p; j++)
            FG_AT(r.V, i, j) = FG_AT(q->V, i, j) * g[i] * g[j] / tau;
    return r;
}

static void ck_same_in_other_units(const struct fg_plant *plant, double range, const char *what)
{
    struct fg_benchmark b = benchmark(plant);
    ck_assert_msg(isfinite(b.lqg.cost), "%s: no cost", what);
    ck_assert_msg(b.lqr.cost <= b.lqg.cost, "%s: lqr %g above lqg %g", what, b.lqr.cost, b.lqg.cost);
    for (int again = 0; again < 2; again++) {
        struct fg_plant other = other_units(plant, range);
        struct fg_benchmark c = benchmark(&other);
        ck_assert_msg(fabs(c.lqr.cost - b.lqr.cost) <= 1e-8 * b.lqr.cost + 1e-13, "%s: lqr %.12g, %.12g",
                      what, b.lqr.cost, c.lqr.cost);
        ck_assert_msg(fabs(c.lqg.cost - b.lqg.cost) <= 1e-8 * b.lqg.cost + 1e-13, "%s: lqg %.12g, %.12g",
                      what, b.lqg.cost, c.lqg.cost);
        ck_assert_int_eq(b.lqr.kind, c.lqr.kind);
        ck_assert_int_eq(b.lqg.kind, c.lqg.kind);
    }
}

/* 60 random plants with V singular (rank 0 or 1 less than p), R regular or singular; units 1e-4 to 1e4. */
START_TEST(units_do_not_matter)
{
    bool discrete = _i == 1;
    for (int trial = 0; trial < 60; trial++) {
        int n = 2 + trial % 6, m = 1 + trial % 3, p = 1 + (trial / 3) % 3;
        int weights = trial % 4 == 0 ? n : n + m;
        struct fg_plant plant = random_plant(discrete, n, m, p, weights, n - trial % 2, trial % p);
        char what[40];
        snprintf(what, sizeof what, "trial %d", trial);
        ck_same_in_other_units(&plant, 4, what);
        fg_arena_release(&arena);
    }
}
END_TEST

/* Sparse plants whose disturbance reaches only some states, some with hidden unstable modes (no bound): here
 * rank decisions on raw numbers, and a balance that rounding could drive, gave wrong costs. */
START_TEST(sparse_plants_in_other_units)
{
    bool discrete = _i == 1;
    int compared = 0;
    for (int trial = 0; trial < 300; trial++) {
        int n = 2 + trial % 7, m = 1 + trial % 3, p = 1 + (trial / 3) % 3;
        struct fg_plant plant =
            random_plant(discrete, n, m, p, trial % 4 == 0 ? n : n + m, 1 + trial % n, trial % (p + 1));
        for (int i = 0; i < n * n; i++)
            plant.A.at[i] *= uniform() < 0.4 ? 0 : 1;
        for (int i = 0; i < n * m; i++)
            plant.B.at[i] *= uniform() < 0.4 ? 0 : 1;
        for (int i = 0; i < n * p; i++)
            plant.C.at[i] *= uniform() < 0.4 ? 0 : 1;
        for (int k = 0; k < n; k++) {
            FG_AT(plant.A, k, k) -= discrete ? 0 : 0.5;
            bool quiet = uniform() < -0.2;
            for (int i = 0; i < n && quiet; i++)
                FG_AT(plant.W, i, k) = FG_AT(plant.W, k, i) = 0;
        }
        struct fg_benchmark b = benchmark(&plant);
        if (b.lqg.kind == FG_BOUND_NONE) {
            ck_assert(strstr(b.lqg.why, "inputs") || strstr(b.lqg.why, "outputs"));
        } else {
            struct fg_plant other = other_units(&plant, 4);
            struct fg_benchmark c = benchmark(&other);
            double zero = 1e-12 * fg_matrix_max_abs(plant.Q);
            ck_assert_msg(fabs(c.lqr.cost - b.lqr.cost) <= 1e-7 * b.lqr.cost + zero,
                          "trial %d: lqr %.12g, %.12g", trial, b.lqr.cost, c.lqr.cost);
            ck_assert_msg(fabs(c.lqg.cost - b.lqg.cost) <= 1e-7 * b.lqg.cost + zero,
                          "trial %d: lqg %.12g, %.12g", trial, b.lqg.cost, c.lqg.cost);
            ck_assert_int_eq(b.lqg.kind, c.lqg.kind);
            compared++;
        }
        fg_arena_release(&arena);
    }
    ck_assert_int_gt(compared, 200);
}
END_TEST

/* Published models in units changed by up to 1e6 either way. */
START_TEST(published_in_other_units)
{
    static const char *const names[] = {"AC4",  "AC15", "AC17", "AC18",
                                        "REA1", "NN17", "HE1",  "MFP",
                                        "TG1",  "NN12", "FS",   "discrete_double_integrator_position"};
    for (size_t i = 0; i < sizeof names / sizeof *names; i++) {
        struct case_data data;
        ck_assert(case_load(names[i], &data));
        struct fg_plant plant = plant_of(&data);
        if (data.n <= 8)
            ck_same_in_other_units(&plant, 6, names[i]);
        case_free(&data);
        fg_arena_release(&arena);
    }
}
END_TEST

static struct fg_benchmark scalar(bool discrete, double a, double b, double c, double q, double r, double w,
                                  double v)
{
    struct fg_plant plant = empty_plant(discrete, 1, 1, 1);
    plant.A.at[0] = a;
    plant.B.at[0] = b;
    plant.C.at[0] = c;
    plant.Q.at[0] = q;
    plant.R.at[0] = r;
    plant.W.at[0] = w;
    plant.V.at[0] = v;
    return benchmark(&plant);
}

/* First-order plants by hand. a unweighted and unstable: S = 2 a r / b^2, or (a^2 - 1) r / b^2. a marginal
 * and unweighted: 0, not attained. Undisturbed and unstable, noisy: Sigma = 2 a v / c^2 = 2. */
START_TEST(hidden_modes)
{
    struct fg_benchmark b = scalar(false, 1, 1, 1, 0, 1, 1, 1);
    ck_assert_double_eq_tol(b.lqr.cost, 2, 1e-12);
    ck_assert_int_eq(b.lqr.kind, FG_BOUND_ATTAINED);
    b = scalar(true, 2, 1, 1, 0, 1, 1, 1);
    ck_assert_double_eq_tol(b.lqr.cost, 3, 1e-12);
    for (int discrete = 0; discrete < 2; discrete++) {
        b = scalar(discrete, discrete, 1, 1, 0, 1, 1, 1);
        ck_assert_int_eq(b.lqr.kind, FG_BOUND_LIMIT);
        ck_assert_int_eq(b.lqg.kind, FG_BOUND_LIMIT);
        ck_assert_double_eq_tol(b.lqr.cost, 0, 1e-12);
        ck_assert_double_eq_tol(b.lqg.cost, 0, 1e-12);
        ck_assert(b.has_lqr_gain && b.L.at[0] > 0);
    }
    /* dx/dt = x + u, Q = R = 1: S = 1 + sqrt(2), L = S; W = 0, V = 1: Sigma = 2, J = 2 S^2 */
    b = scalar(false, 1, 1, 1, 1, 1, 0, 1);
    ck_assert_double_eq_tol(b.lqr.cost, 0, 1e-14);
    ck_assert_double_eq_tol(b.lqg.cost, 2 * (3 + 2 * sqrt(2)), 1e-11);
    ck_assert_int_eq(b.lqg.kind, FG_BOUND_ATTAINED);
    /* nothing disturbs, nothing is noisy: every stabilising law has cost 0 */
    b = scalar(false, 1, 1, 1, 1, 1, 0, 0);
    ck_assert_double_eq_tol(b.lqg.cost, 0, 1e-14);
    ck_assert_int_eq(b.lqg.kind, FG_BOUND_ATTAINED);
    /* not weighted and stable, not disturbed and stable, not measured and stable: 0, 0 and J_none = 1/2 */
    b = scalar(false, -1, 1, 1, 0, 1, 1, 1);
    ck_assert_double_eq_tol(b.lqg.cost, 0, 1e-14);
    b = scalar(false, -1, 1, 1, 1, 1, 0, 1);
    ck_assert_double_eq_tol(b.lqg.cost, 0, 1e-14);
    b = scalar(false, -1, 1, 0, 1, 1, 1, 0);
    ck_assert_double_eq_tol(b.lqg.cost, 0.5, 1e-13);
    ck_assert_int_eq(b.lqg.kind, FG_BOUND_ATTAINED);
    b = scalar(true, 0.5, 1, 0, 1, 1, 1, 0);
    ck_assert_double_eq_tol(b.lqg.cost, 4.0 / 3, 1e-13);
}
END_TEST

/* No bound: the sentence says which half fails. */
START_TEST(bounds_that_do_not_exist)
{
    for (int discrete = 0; discrete < 2; discrete++) {
        double unstable = discrete ? 1.5 : 0.5, marginal = discrete ? 1 : 0;
        struct fg_benchmark b = scalar(discrete, unstable, 0, 1, 1, 1, 1, 1);
        ck_assert_int_eq(b.lqr.kind, FG_BOUND_NONE);
        ck_assert_int_eq(b.lqg.kind, FG_BOUND_NONE);
        ck_assert(isnan(b.lqr.cost) && isnan(b.lqg.cost) && !b.has_lqr_gain);
        ck_assert_ptr_nonnull(strstr(b.lqr.why, "inputs"));
        b = scalar(discrete, marginal, 0, 1, 1, 1, 1, 1);
        ck_assert_int_eq(b.lqr.kind, FG_BOUND_NONE);
        b = scalar(discrete, unstable, 1, 0, 1, 1, 1, 1);
        ck_assert_int_eq(b.lqr.kind, FG_BOUND_ATTAINED);
        ck_assert_int_eq(b.lqg.kind, FG_BOUND_NONE);
        ck_assert(isnan(b.lqg.cost));
        ck_assert_ptr_nonnull(strstr(b.lqg.why, "outputs"));
        b = scalar(discrete, marginal, 1, 0, 1, 1, 1, 0);
        ck_assert_int_eq(b.lqg.kind, FG_BOUND_NONE);
        b = scalar(discrete, NAN, 1, 1, 1, 1, 1, 1);
        ck_assert_int_eq(b.lqr.kind, FG_BOUND_NONE);
    }
}
END_TEST

/* A stable mode that nothing moves may be much slower than the rest (as in the published TF2): the cost is
 * that of the rest plus its own, both by hand: 1 + sqrt(2) for dx/dt = x + u, and q w / (2 * 1e-5). */
START_TEST(immovable_slow_mode)
{
    struct fg_plant plant = empty_plant(false, 2, 1, 1);
    plant.A = rows_matrix(2, 2, (double[]){1, 0, 0, -1e-5});
    plant.B = rows_matrix(2, 1, (double[]){1, 0});
    plant.C = rows_matrix(1, 2, (double[]){1, 0});
    plant.Q = fg_matrix_identity(&arena, 2);
    plant.R = fg_matrix_identity(&arena, 1);
    plant.W = fg_matrix_identity(&arena, 2);
    struct fg_benchmark b = benchmark(&plant);
    ck_assert_double_eq_tol(b.lqr.cost, 1 + sqrt(2) + 5e4, 1e-7);
    ck_assert_double_eq_tol(b.lqg.cost, 1 + sqrt(2) + 5e4, 1e-7);
}
END_TEST

/* Discrete, V singular. A second copy of a noise-free output adds nothing. An output that can be predicted
 * exactly (a state the disturbance does not reach) leaves C Sp C' + V singular. */
START_TEST(discrete_singular_innovation)
{
    struct fg_plant plant = random_plant(true, 3, 1, 1, 4, 3, 0), twice = plant;
    twice.p = 2;
    twice.C = fg_matrix_new(&arena, 2, 3);
    twice.D = fg_matrix_new(&arena, 2, 1);
    twice.V = fg_matrix_new(&arena, 2, 2);
    put(twice.C, 0, 0, 1, plant.C);
    put(twice.C, 1, 0, 3, plant.C);
    struct fg_benchmark b = benchmark(&plant), c = benchmark(&twice);
    ck_assert_int_eq(c.lqg.kind, FG_BOUND_ATTAINED);
    ck_assert_double_eq_tol(b.lqg.cost, c.lqg.cost, 1e-11 * b.lqg.cost);
    FG_AT(twice.V, 1, 1) = 0.1; /* the copy is noisy: still nothing new */
    c = benchmark(&twice);
    ck_assert_double_eq_tol(b.lqg.cost, c.lqg.cost, 1e-11 * b.lqg.cost);
    /* x2 = the last x1, both measured: x2 is known before it is read */
    plant = empty_plant(true, 2, 1, 2);
    plant.A = rows_matrix(2, 2, (double[]){1.2, 0, 1, 0});
    plant.B = rows_matrix(2, 1, (double[]){1, 0});
    plant.C = fg_matrix_identity(&arena, 2);
    plant.Q = plant.R = fg_matrix_identity(&arena, 2);
    plant.R = fg_matrix_identity(&arena, 1);
    plant.W = rows_matrix(2, 2, (double[]){1, 0, 0, 0});
    b = benchmark(&plant); /* every state is read without noise: the LQR cost */
    ck_assert_double_eq_tol(b.lqg.cost, b.lqr.cost, 1e-12);
    ck_assert_int_eq(b.lqg.kind, FG_BOUND_ATTAINED);
    /* only the delayed state is read: x1 is known up to the newest disturbance, Sf = diag(1, 0), and
     * J = tr(S W) + L1 (R + B'S B) L1 */
    plant.p = 1;
    plant.C = rows_matrix(1, 2, (double[]){0, 1});
    plant.D = fg_matrix_new(&arena, 1, 1);
    plant.V = fg_matrix_new(&arena, 1, 1);
    b = benchmark(&plant);
    /* scalar DARE with weight 1 + 1 on x1 (x2 repeats it): S = s on x1, s = 2 + 1.44 s / (1 + s) */
    double s = (2.44 + sqrt(2.44 * 2.44 + 8)) / 2, l = 1.2 * s / (1 + s);
    ck_assert_double_eq_tol(b.lqr.cost, s, 1e-12);
    ck_assert_double_eq_tol(b.lqg.cost, s + l * l * (1 + s), 1e-12);
}
END_TEST

/* D does not enter. */
START_TEST(feedthrough_changes_nothing)
{
    for (int discrete = 0; discrete < 2; discrete++) {
        struct fg_plant plant = random_plant(discrete, 4, 2, 2, 6, 4, 2);
        struct fg_benchmark b = benchmark(&plant);
        plant.D = fg_matrix_new(&arena, 2, 2);
        struct fg_benchmark c = benchmark(&plant);
        ck_assert(b.lqr.cost == c.lqr.cost && b.lqg.cost == c.lqg.cost);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("benchmark");
    TCase *tests = tcase_create("benchmark");
    tcase_set_timeout(tests, 60);
    tcase_add_checked_fixture(tests, NULL, release);
    tcase_add_test(tests, known_cases);
    tcase_add_loop_test(tests, single_values, 0, sizeof values / sizeof *values);
    tcase_add_test(tests, discrete_scalar_with_noise);
    tcase_add_test(tests, exact_limits);
    tcase_add_test(tests, free_input);
    tcase_add_loop_test(tests, limit_is_approached_from_above, 0, 2);
    tcase_add_loop_test(tests, factor_is_the_residual, 0, 2);
    tcase_add_loop_test(tests, lqg_three_ways, 0, 2);
    tcase_add_loop_test(tests, nothing_is_below_the_bounds, 0, 2);
    tcase_add_loop_test(tests, units_do_not_matter, 0, 2);
    tcase_add_loop_test(tests, sparse_plants_in_other_units, 0, 2);
    tcase_add_test(tests, published_in_other_units);
    tcase_add_test(tests, hidden_modes);
    tcase_add_test(tests, bounds_that_do_not_exist);
    tcase_add_test(tests, immovable_slow_mode);
    tcase_add_test(tests, discrete_singular_innovation);
    tcase_add_test(tests, feedthrough_changes_nothing);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_ENV);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed ? EXIT_FAILURE : EXIT_SUCCESS;
}
