#include "plants.h"

#include <math.h>

#include "linalg/lapack.h"

static unsigned long long state = 0x9e3779b97f4a7c15ULL;

void random_seed(unsigned long long seed)
{
    state = seed * 2862933555777941757ULL + 3037000493ULL;
    for (int i = 0; i < 8; i++)
        random_uniform();
}

double random_uniform(void)
{
    state ^= state << 13;
    state ^= state >> 7;
    state ^= state << 17;
    return (double)(state >> 11) / 4503599627370496.0 - 1;
}

double random_normal(void)
{
    double sum = 0; /* twelve uniform numbers: close enough to normal for a test plant */
    for (int i = 0; i < 12; i++)
        sum += random_uniform();
    return sum / 2;
}

static void fill(struct fg_matrix a, double size)
{
    for (int i = 0; i < a.rows * a.cols; i++)
        a.at[i] = size * random_normal();
}

struct fg_plant empty_plant(struct fg_arena *arena, bool discrete, int n, int m, int p)
{
    struct fg_plant plant = {.discrete = discrete, .n = n, .m = m, .p = p};
    plant.A = fg_matrix_new(arena, n, n);
    plant.B = fg_matrix_new(arena, n, m);
    plant.C = fg_matrix_new(arena, p, n);
    plant.D = fg_matrix_new(arena, p, m);
    plant.Q = fg_matrix_new(arena, n, n);
    plant.R = fg_matrix_new(arena, m, m);
    plant.N = fg_matrix_new(arena, n, m);
    plant.W = fg_matrix_new(arena, n, n);
    plant.V = fg_matrix_new(arena, p, p);
    return plant;
}

struct fg_plant random_plant_of(struct fg_arena *arena, bool discrete, int n, int m, int p)
{
    struct fg_plant plant = empty_plant(arena, discrete, n, m, p);
    struct fg_arena scratch = {0};
    fill(plant.A, 1 / sqrt(n));
    fill(plant.B, 1);
    fill(plant.C, 1);
    if (discrete)
        for (int i = 0; i < n * n; i++)
            plant.A.at[i] *= 0.9;
    else
        for (int i = 0; i < n; i++)
            FG_AT(plant.A, i, i) -= 0.7;
    struct fg_matrix H = fg_matrix_new(&scratch, n + m, n + m), S = fg_matrix_new(&scratch, n + m, n + m);
    fill(H, 1);
    fg_multiply('T', 'N', 1, H, H, 0, S);
    for (int j = 0; j < n + m; j++)
        for (int i = 0; i < n + m; i++) {
            double value = FG_AT(S, i, j);
            if (i < n && j < n)
                FG_AT(plant.Q, i, j) = value;
            else if (i >= n && j >= n)
                FG_AT(plant.R, i - n, j - n) = value;
            else if (i < n)
                FG_AT(plant.N, i, j - n) = value;
        }
    struct fg_matrix G = fg_matrix_new(&scratch, n, n);
    fill(G, 1);
    fg_multiply('N', 'T', 1, G, G, 0, plant.W);
    fg_arena_release(&scratch);
    return plant;
}

struct fg_plant random_plant(struct fg_arena *arena, int trial)
{
    int n = 2 + trial % 5, m = 1 + (trial / 5) % 3, p = 1 + (trial / 15) % 3;
    struct fg_plant plant = random_plant_of(arena, trial % 2, n, m, p);
    if (trial % 3 == 0)
        fill(plant.D, 0.2);
    if (plant.discrete && trial % 4 == 1) {
        struct fg_arena scratch = {0};
        struct fg_matrix G = fg_matrix_new(&scratch, p, p);
        fill(G, 0.5);
        fg_multiply('N', 'T', 1, G, G, 0, plant.V);
        fg_arena_release(&scratch);
    }
    return plant;
}

struct fg_pattern free_pattern(struct fg_arena *arena, int m, int p)
{
    int count = m * p;
    struct fg_pattern pattern = {.m = m, .p = p, .count = count};
    pattern.index = fg_arena_ints(arena, count);
    pattern.sign = fg_arena_doubles(arena, count);
    pattern.fixed = fg_arena_doubles(arena, count);
    pattern.lower = fg_arena_doubles(arena, count);
    pattern.upper = fg_arena_doubles(arena, count);
    for (int e = 0; e < count; e++) {
        pattern.index[e] = e;
        pattern.sign[e] = 1;
        pattern.lower[e] = -INFINITY;
        pattern.upper[e] = INFINITY;
    }
    return pattern;
}

struct fg_pattern random_pattern(struct fg_arena *arena, int m, int p, int trial)
{
    struct fg_pattern pattern = free_pattern(arena, m, p);
    if (trial % 4 < 2 || m * p < 2)
        return pattern;
    /* entry 0 fixed; from three entries on, the last one is minus the second */
    pattern.index[0] = -1;
    pattern.sign[0] = 0;
    pattern.fixed[0] = 0.1 * random_uniform();
    for (int e = 1; e < m * p; e++)
        pattern.index[e] = e - 1;
    pattern.count = m * p - 1;
    if (m * p >= 3) {
        pattern.index[m * p - 1] = 0;
        pattern.sign[m * p - 1] = -1;
        pattern.count--;
    }
    return pattern;
}
