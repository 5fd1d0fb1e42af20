/* Modes, hidden modes and fixed modes. Sources: constructed plants with a known answer, the open cases,
 * Wang and Davison, IEEE TAC 18 (1973) 473 for fixed modes of decentralised laws. */
#include <check.h>
#include <complex.h>
#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include "cases.h"
#include "linalg/lapack.h"
#include "plant/fixed_modes.h"
#include "plant/modes.h"

static uint64_t state = 1;

static double uniform(void) /* (-1, 1) */
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (double)(state >> 11) * 0x1p-52 - 1;
}

static double normal(void)
{
    double sum = 0;
    for (int k = 0; k < 12; k++)
        sum += uniform();
    return sum / 2;
}

static struct fg_arena arena;
static const char *NAMES[] = {"x1",  "x2",  "x3",  "x4",  "x5",  "x6",  "x7",  "x8",  "x9",  "x10",
                              "x11", "x12", "x13", "x14", "x15", "x16", "x17", "x18", "x19", "x20"};

static void release(void)
{
    fg_arena_release(&arena);
}

static struct fg_plant new_plant(bool discrete, int n, int m, int p)
{
    return (struct fg_plant){discrete,
                             n,
                             m,
                             p,
                             fg_matrix_new(&arena, n, n),
                             fg_matrix_new(&arena, n, m),
                             fg_matrix_new(&arena, p, n),
                             fg_matrix_new(&arena, p, m),
                             fg_matrix_identity(&arena, n),
                             fg_matrix_identity(&arena, m),
                             fg_matrix_new(&arena, n, m),
                             fg_matrix_identity(&arena, n),
                             fg_matrix_new(&arena, p, p)};
}

static void fill(struct fg_matrix a)
{
    for (int i = 0; i < a.rows * a.cols; i++)
        a.at[i] = normal();
}

/* x -> T x with x_new = T x: A -> T A T^-1, B -> T B, C -> C T^-1, Q -> T^-T Q T^-1, W -> T W T'. */
static struct fg_plant changed(struct fg_plant plant, struct fg_matrix T)
{
    int n = plant.n, info = 0;
    struct fg_matrix inverse = fg_matrix_identity(&arena, n), lu = fg_matrix_copy(&arena, T);
    int *pivots = fg_arena_ints(&arena, (size_t)n);
    dgesv_(&n, &n, lu.at, &n, pivots, inverse.at, &n, &info);
    ck_assert_int_eq(info, 0);
    struct fg_plant out = new_plant(plant.discrete, n, plant.m, plant.p);
    struct fg_matrix work = fg_matrix_new(&arena, n, n);
    fg_multiply('N', 'N', 1, T, plant.A, 0, work);
    fg_multiply('N', 'N', 1, work, inverse, 0, out.A);
    fg_multiply('N', 'N', 1, T, plant.B, 0, out.B);
    fg_multiply('N', 'N', 1, plant.C, inverse, 0, out.C);
    fg_multiply('T', 'N', 1, inverse, plant.Q, 0, work);
    fg_multiply('N', 'N', 1, work, inverse, 0, out.Q);
    fg_multiply('N', 'N', 1, T, plant.W, 0, work);
    fg_multiply('N', 'T', 1, work, T, 0, out.W);
    out.D = plant.D;
    return out;
}

static struct fg_matrix random_units(int n)
{
    struct fg_matrix T = fg_matrix_new(&arena, n, n);
    for (int i = 0; i < n; i++)
        FG_AT(T, i, i) = pow(10, 6 * uniform());
    return T;
}

/* Other units for states, inputs and outputs, factors 1e-6 to 1e6. */
static struct fg_plant other_units(struct fg_plant plant)
{
    struct fg_plant out = changed(plant, random_units(plant.n));
    out.D = fg_matrix_copy(&arena, plant.D);
    for (int j = 0; j < plant.m; j++) {
        double factor = pow(10, 6 * uniform());
        for (int i = 0; i < plant.n; i++)
            FG_AT(out.B, i, j) *= factor;
        for (int i = 0; i < plant.p; i++)
            FG_AT(out.D, i, j) *= factor;
    }
    for (int i = 0; i < plant.p; i++) {
        double factor = pow(10, 6 * uniform());
        for (int j = 0; j < plant.n; j++)
            FG_AT(out.C, i, j) *= factor;
        for (int j = 0; j < plant.m; j++)
            FG_AT(out.D, i, j) *= factor;
    }
    return out;
}

static struct fg_modes modes_of(const struct fg_plant *plant)
{
    struct fg_modes modes;
    flatgain_error error;
    ck_assert_int_eq(fg_modes(plant, plant->A, NAMES, &arena, &modes, &error), FLATGAIN_OK);
    return modes;
}

static const struct fg_mode *mode_near(const struct fg_modes *modes, double re, double im)
{
    const struct fg_mode *best = &modes->mode[0];
    for (int k = 1; k < modes->count; k++)
        if (hypot(modes->mode[k].re - re, modes->mode[k].im - im) < hypot(best->re - re, best->im - im))
            best = &modes->mode[k];
    return best;
}

static struct fg_pattern full_pattern(int m, int p)
{
    struct fg_pattern pattern = {.m = m, .p = p, .count = m * p};
    size_t size = (size_t)(m * p);
    pattern.index = fg_arena_ints(&arena, size);
    pattern.sign = fg_arena_doubles(&arena, size);
    pattern.fixed = fg_arena_doubles(&arena, size);
    pattern.lower = fg_arena_doubles(&arena, size);
    pattern.upper = fg_arena_doubles(&arena, size);
    for (int k = 0; k < m * p; k++) {
        pattern.index[k] = k;
        pattern.sign[k] = 1;
        pattern.lower[k] = -INFINITY;
        pattern.upper[k] = INFINITY;
    }
    return pattern;
}

static struct fg_pattern diagonal_pattern(int m)
{
    struct fg_pattern pattern = full_pattern(m, m);
    pattern.count = m;
    for (int j = 0; j < m; j++)
        for (int i = 0; i < m; i++) {
            pattern.index[i + j * m] = i == j ? i : -1;
            pattern.sign[i + j * m] = i == j;
        }
    return pattern;
}

static struct fg_fixed_modes fixed_of(const struct fg_plant *plant, const struct fg_pattern *pattern)
{
    struct fg_fixed_modes fixed;
    flatgain_error error;
    ck_assert_int_eq(fg_modes_fixed(plant, pattern, NAMES, &arena, &fixed, &error), FLATGAIN_OK);
    return fixed;
}

static struct fg_plant plant_of_case(const char *name)
{
    struct case_data data;
    ck_assert(case_load(name, &data));
    struct fg_plant plant = new_plant(data.discrete, data.n, data.m, data.p);
    plant.A = fg_matrix_from_rows(&arena, data.n, data.n, data.A);
    plant.B = fg_matrix_from_rows(&arena, data.n, data.m, data.B);
    plant.C = fg_matrix_from_rows(&arena, data.p, data.n, data.C);
    if (data.D)
        plant.D = fg_matrix_from_rows(&arena, data.p, data.m, data.D);
    if (data.Q)
        plant.Q = fg_matrix_from_rows(&arena, data.n, data.n, data.Q);
    if (data.W)
        plant.W = fg_matrix_from_rows(&arena, data.n, data.n, data.W);
    case_free(&data);
    return plant;
}

START_TEST(sorts_slowest_first)
{
    struct fg_plant plant = new_plant(false, 4, 1, 1);
    double a[] = {-3, 0, 0, 0, 0, -1, 2, 0, 0, -2, -1, 0, 0, 0, 0, 0.5};
    plant.A = fg_matrix_from_rows(&arena, 4, 4, a);
    struct fg_modes modes = modes_of(&plant);
    ck_assert_int_eq(modes.count, 3); /* eigenvalues 0.5, -1 +- 2i, -3 by inspection */
    ck_assert_double_eq_tol(modes.mode[0].re, 0.5, 1e-12);
    ck_assert_double_eq_tol(modes.mode[1].re, -1, 1e-12);
    ck_assert_double_eq_tol(modes.mode[1].im, 2, 1e-12);
    ck_assert_double_eq_tol(modes.mode[2].re, -3, 1e-12);
    ck_assert_str_eq(modes.mode[0].states, "x4");
    ck_assert_str_eq(modes.mode[1].states, "x2, x3");
    ck_assert_str_eq(modes.mode[2].states, "x1");
    ck_assert_double_eq_tol(modes.condition, 1, 1e-9); /* normal matrix */
    plant.discrete = true;
    modes = modes_of(&plant);
    ck_assert_double_eq_tol(modes.mode[0].re, -3, 1e-12); /* |z| = 3, sqrt 5, 0.5 */
    ck_assert_double_eq_tol(modes.mode[2].re, 0.5, 1e-12);
    release();
}
END_TEST

/* Block-diagonal plant in modal coordinates, one mode cut off from the input, the output, the weight or
 * the disturbance, then a random change of basis and of units: the flags belong to that mode only. */
START_TEST(finds_hidden_modes)
{
    for (int trial = 0; trial < 200; trial++) {
        int n = 3 + trial % 8, m = 1 + trial % 3, p = 1 + trial % 2, hidden = trial % n, kind = trial % 5;
        struct fg_plant plant = new_plant(trial % 2, n, m, p);
        for (int i = 0; i < n; i++)
            FG_AT(plant.A, i, i) = -0.3 * (i + 1) + 0.1 * uniform();
        fill(plant.B);
        fill(plant.C);
        struct fg_matrix q = fg_matrix_new(&arena, n, 2), w = fg_matrix_new(&arena, n, 2);
        fill(q);
        fill(w);
        for (int j = 0; j < m; j++)
            if (kind == 1)
                FG_AT(plant.B, hidden, j) = 0;
        for (int i = 0; i < p; i++)
            if (kind == 2)
                FG_AT(plant.C, i, hidden) = 0;
        for (int j = 0; j < 2; j++) {
            if (kind == 3)
                FG_AT(q, hidden, j) = 0;
            if (kind == 4)
                FG_AT(w, hidden, j) = 0;
        }
        fg_multiply('N', 'T', 1, q, q, 0, plant.Q);
        fg_multiply('N', 'T', 1, w, w, 0, plant.W);
        double pole = FG_AT(plant.A, hidden, hidden);
        struct fg_matrix T = fg_matrix_new(&arena, n, n);
        fill(T);
        struct fg_plant mixed = other_units(changed(plant, T));
        struct fg_modes modes = modes_of(&mixed);
        ck_assert_int_eq(modes.count, n);
        for (int k = 0; k < n; k++) {
            const struct fg_mode *mode = &modes.mode[k];
            bool it = mode == mode_near(&modes, pole, 0);
            ck_assert_msg(mode->uncontrollable == (it && kind == 1) &&
                              mode->unobservable == (it && kind == 2) &&
                              mode->unweighted == (it && kind == 3) && mode->undisturbed == (it && kind == 4),
                          "trial %d kind %d mode %d of %d: %d %d %d %d", trial, kind, k, n,
                          mode->uncontrollable, mode->unobservable, mode->unweighted, mode->undisturbed);
        }
        /* the same verdict through the gains: full structure, fixed exactly when hidden from u or y */
        struct fg_pattern pattern = full_pattern(m, p);
        struct fg_fixed_modes fixed = fixed_of(&mixed, &pattern);
        ck_assert_msg(fixed.count == (kind == 1 || kind == 2), "trial %d kind %d: %d fixed", trial, kind,
                      fixed.count);
        if (fixed.count == 1)
            ck_assert_double_eq_tol(fixed.mode[0].re, pole, 1e-6);
        release();
    }
}
END_TEST

/* Two equal poles without coupling and one input: one combination cannot be reached; with coupling (a
 * Jordan block) reached from its end, both can. */
START_TEST(repeated_poles)
{
    for (int trial = 0; trial < 60; trial++) {
        struct fg_plant plant = new_plant(false, 4, 1, 1);
        bool chained = trial % 2;
        FG_AT(plant.A, 0, 0) = FG_AT(plant.A, 1, 1) = -1;
        FG_AT(plant.A, 0, 1) = chained;
        FG_AT(plant.A, 2, 2) = -2;
        FG_AT(plant.A, 3, 3) = -0.4;
        fill(plant.B);
        fill(plant.C);
        struct fg_matrix T = fg_matrix_new(&arena, 4, 4);
        fill(T);
        struct fg_plant mixed = other_units(changed(plant, T));
        struct fg_modes modes = modes_of(&mixed);
        int uncontrollable = 0, unobservable = 0;
        for (int k = 0; k < modes.count; k++) {
            uncontrollable += modes.mode[k].uncontrollable;
            unobservable += modes.mode[k].unobservable;
        }
        ck_assert_msg(uncontrollable == !chained && unobservable == !chained, "trial %d: %d %d", trial,
                      uncontrollable, unobservable);
        release();
    }
}
END_TEST

/* The flags of the open models do not change with units. */
START_TEST(units_do_not_matter)
{
    char **names = case_names();
    int tried = 0;
    for (int c = 0; names[c]; c++) {
        struct case_data data;
        if (!case_load(names[c], &data))
            continue;
        int n = data.n;
        case_free(&data);
        if (n > 20)
            continue;
        struct fg_plant plant = plant_of_case(names[c]);
        struct fg_modes modes = modes_of(&plant);
        for (int again = 0; again < 3; again++) {
            struct fg_plant units = other_units(plant);
            struct fg_modes other = modes_of(&units);
            int flags[4] = {0}, flags_other[4] = {0};
            for (int k = 0; k < modes.count; k++) {
                flags[0] += modes.mode[k].uncontrollable;
                flags[1] += modes.mode[k].unobservable;
                flags[2] += modes.mode[k].unweighted;
                flags[3] += modes.mode[k].undisturbed;
            }
            for (int k = 0; k < other.count; k++) {
                flags_other[0] += other.mode[k].uncontrollable;
                flags_other[1] += other.mode[k].unobservable;
                flags_other[2] += other.mode[k].unweighted;
                flags_other[3] += other.mode[k].undisturbed;
            }
            /* carex_2_6: Q = V diag(1e-6, 1, 1e6) V, the weight on one mode is 1e-12 of the largest: exactly
             * where a weight stops being told from rounding; only the other flags are compared. */
            bool weights = strcmp(names[c], "carex_2_6") != 0;
            for (int f = 0; f < (weights ? 4 : 2); f++)
                ck_assert_msg(flags[f] == flags_other[f], "%s flag %d: %d and %d", names[c], f, flags[f],
                              flags_other[f]);
            struct fg_pattern pattern = full_pattern(plant.m, plant.p);
            ck_assert_msg(fixed_of(&plant, &pattern).count == fixed_of(&units, &pattern).count, "%s",
                          names[c]);
            if (modes.condition < 1e8) /* a defective matrix has none, only rounding noise */
                ck_assert_msg(fabs(log10(modes.condition / other.condition)) < 1, "%s: %g and %g", names[c],
                              modes.condition, other.condition);
        }
        tried++;
        release();
    }
    case_names_free(names);
    ck_assert_int_gt(tried, 40);
}
END_TEST

START_TEST(hidden_unstable_mode)
{
    /* A = [-1 1; 0 0.5], B = [1; 0]: u does not reach x2 (published proof in the case file) */
    struct fg_plant plant = plant_of_case("nosof_hidden_unstable_mode");
    struct fg_modes modes = modes_of(&plant);
    ck_assert_double_eq_tol(modes.mode[0].re, 0.5, 1e-12);
    ck_assert(modes.mode[0].uncontrollable && !modes.mode[0].unobservable);
    ck_assert(!modes.mode[1].uncontrollable && !modes.mode[1].unobservable);
    ck_assert_str_eq(modes.mode[0].states, "x2");
    struct fg_pattern pattern = full_pattern(1, 2);
    struct fg_fixed_modes fixed = fixed_of(&plant, &pattern);
    ck_assert_int_eq(fixed.count, 1);
    ck_assert_double_eq_tol(fixed.mode[0].re, 0.5, 1e-12);
    ck_assert(fixed.mode[0].unstable);
    ck_assert_str_eq(fixed.mode[0].states, "x2");
    release();
}
END_TEST

START_TEST(immovable_slow_mode_of_TF2)
{
    /* the open model TF2 has a stable pole at -1e-5 that no gain can move */
    struct fg_plant plant = plant_of_case("TF2");
    struct fg_pattern pattern = full_pattern(plant.m, plant.p);
    struct fg_fixed_modes fixed = fixed_of(&plant, &pattern);
    ck_assert_int_ge(fixed.count, 1);
    bool found = false;
    for (int k = 0; k < fixed.count; k++)
        found = found || (fabs(fixed.mode[k].re + 1e-5) < 1e-9 && !fixed.mode[k].unstable);
    ck_assert(found);
    release();
}
END_TEST

/* Constructed after Wang and Davison: mode x3 is reached by u1 only through x1's channel and seen by y2
 * only: its transfer enters k12 alone. With B = [e1 e2 ...] such that x3 is driven by u1 and measured by
 * y2 alone, and channels 1 and 2 otherwise separate, Acl for K = diag(k1, k2) is block triangular with
 * the pole of x3 on the diagonal; k21 ... k12 closes the loop and moves it. */
START_TEST(decentralised_fixed_mode)
{
    for (int trial = 0; trial < 60; trial++) {
        struct fg_plant plant = new_plant(false, 3, 2, 2);
        double pole = trial % 2 ? 0.7 : -0.2;
        FG_AT(plant.A, 0, 0) = -1 + 0.3 * uniform();
        FG_AT(plant.A, 1, 1) = -2 + 0.3 * uniform();
        FG_AT(plant.A, 2, 2) = pole;
        FG_AT(plant.B, 0, 0) = FG_AT(plant.B, 1, 1) = 1;
        FG_AT(plant.B, 2, 0) = 1; /* u1 drives x3 */
        FG_AT(plant.C, 0, 0) = FG_AT(plant.C, 1, 1) = 1;
        FG_AT(plant.C, 1, 2) = 1; /* y2 shows x3 */
        struct fg_matrix T = fg_matrix_new(&arena, 3, 3);
        fill(T);
        struct fg_plant mixed = other_units(changed(plant, T));
        struct fg_modes modes = modes_of(&mixed);
        for (int k = 0; k < 3; k++)
            ck_assert(!modes.mode[k].uncontrollable && !modes.mode[k].unobservable);
        struct fg_pattern diagonal = diagonal_pattern(2), full = full_pattern(2, 2);
        struct fg_fixed_modes fixed = fixed_of(&mixed, &diagonal);
        ck_assert_msg(fixed.count == 1, "trial %d: %d", trial, fixed.count);
        ck_assert_double_eq_tol(fixed.mode[0].re, pole, 1e-8);
        ck_assert_int_eq(fixed.mode[0].unstable, pole > 0);
        ck_assert_int_eq(fixed_of(&mixed, &full).count, 0);
        /* a fixed entry k12 (the only path from y2 to u1) sets it free again: it moves with k11, k22 */
        FG_AT(mixed.A, 0, 0) *= 1;
        diagonal.fixed[0 + 1 * 2] = 0.5;
        if (trial < 30) {
            struct fg_plant plain = changed(plant, T);
            ck_assert_int_eq(fixed_of(&plain, &diagonal).count, 0);
        }
        release();
    }
}
END_TEST

/* K = theta [1 -1] on two identical outputs: the two entries cancel and nothing moves; [1 1] moves. */
START_TEST(tied_gains_that_cancel)
{
    struct fg_plant plant = new_plant(false, 2, 1, 2);
    double a[] = {-1, 1, 0, 0.5}, b[] = {0.3, 1}, c[] = {1, 2, 1, 2};
    plant.A = fg_matrix_from_rows(&arena, 2, 2, a);
    plant.B = fg_matrix_from_rows(&arena, 2, 1, b);
    plant.C = fg_matrix_from_rows(&arena, 2, 2, c);
    struct fg_pattern pattern = full_pattern(1, 2);
    pattern.count = 1;
    pattern.index[1] = 0;
    pattern.sign[1] = -1;
    ck_assert_int_eq(fixed_of(&plant, &pattern).count, 2);
    pattern.sign[1] = 1;
    ck_assert_int_eq(fixed_of(&plant, &pattern).count, 0);
    pattern.lower[0] = pattern.upper[0] = 2; /* bounds without room */
    ck_assert_int_eq(fixed_of(&plant, &pattern).count, 2);
    release();
}
END_TEST

START_TEST(no_false_fixed_modes)
{
    for (int trial = 0; trial < 200; trial++) {
        int n = 2 + trial % 12, m = 1 + trial % 3;
        struct fg_plant plant = new_plant(trial % 2, n, m, m);
        fill(plant.A);
        fill(plant.B);
        fill(plant.C);
        if (trial % 3 == 0)
            fill(plant.D);
        if (trial % 5 == 0) /* hard to move: one state barely reached and barely seen */
            for (int j = 0; j < m; j++)
                FG_AT(plant.B, 0, j) = FG_AT(plant.C, j, 0) = 0;
        struct fg_plant mixed = other_units(plant);
        struct fg_pattern full = full_pattern(m, m), diagonal = diagonal_pattern(m);
        ck_assert_msg(fixed_of(&mixed, &full).count == 0, "trial %d", trial);
        ck_assert_msg(fixed_of(&mixed, &diagonal).count == 0, "trial %d", trial);
        release();
    }
    /* dx1/dt = x1 + 1e-6 (x2 + u), y sees x1 with 1e-6 only: hard to move, not fixed */
    struct fg_plant plant = new_plant(false, 2, 1, 1);
    double a[] = {1, 1e-6, 0, -1}, b[] = {1e-6, 1}, c[] = {1e-6, 1};
    plant.A = fg_matrix_from_rows(&arena, 2, 2, a);
    plant.B = fg_matrix_from_rows(&arena, 2, 1, b);
    plant.C = fg_matrix_from_rows(&arena, 1, 2, c);
    struct fg_pattern full = full_pattern(1, 1);
    ck_assert_int_eq(fixed_of(&plant, &full).count, 0);
    release();
}
END_TEST

START_TEST(refuses_non_finite)
{
    struct fg_plant plant = new_plant(false, 2, 1, 1);
    struct fg_modes modes;
    struct fg_fixed_modes fixed;
    struct fg_pattern full = full_pattern(1, 1);
    flatgain_error error;
    FG_AT(plant.A, 1, 0) = NAN;
    ck_assert_int_eq(fg_modes(&plant, plant.A, NAMES, &arena, &modes, &error), FLATGAIN_NUMERICAL);
    ck_assert_int_eq(fg_modes_fixed(&plant, &full, NAMES, &arena, &fixed, &error), FLATGAIN_NUMERICAL);
    release();
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("modes");
    TCase *tests = tcase_create("modes");
    tcase_set_timeout(tests, 60);
    tcase_add_test(tests, sorts_slowest_first);
    tcase_add_test(tests, finds_hidden_modes);
    tcase_add_test(tests, repeated_poles);
    tcase_add_test(tests, units_do_not_matter);
    tcase_add_test(tests, hidden_unstable_mode);
    tcase_add_test(tests, immovable_slow_mode_of_TF2);
    tcase_add_test(tests, decentralised_fixed_mode);
    tcase_add_test(tests, tied_gains_that_cancel);
    tcase_add_test(tests, no_false_fixed_modes);
    tcase_add_test(tests, refuses_non_finite);
    suite_add_tcase(suite, tests);
    SRunner *runner = srunner_create(suite);
    srunner_run_all(runner, CK_NORMAL);
    int failed = srunner_ntests_failed(runner);
    srunner_free(runner);
    return failed != 0;
}
