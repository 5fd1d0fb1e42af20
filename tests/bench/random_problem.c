#include "random_problem.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "../unit/plants.h"

flatgain_problem *random_problem(int n)
{
    struct fg_arena arena = {0};
    random_seed((unsigned long long)n);
    struct fg_plant plant = random_plant_of(&arena, false, n, 3, 3);
    for (int i = 0; i < n; i++)
        FG_AT(plant.A, i, i) -= 0.33; /* a few unstable poles are left */
    double *rows[7];
    struct fg_matrix from[] = {plant.A, plant.B, plant.C, plant.Q, plant.R, plant.N, plant.W};
    for (int k = 0; k < 7; k++) {
        rows[k] = malloc((size_t)from[k].rows * (size_t)from[k].cols * sizeof(double));
        fg_matrix_to_rows(from[k], rows[k]);
    }
    flatgain_matrices matrices = {
        .states = n, .inputs = 3, .outputs = 3, .A = rows[0], .B = rows[1], .C = rows[2]};
    matrices.Q = rows[3];
    matrices.R = rows[4];
    matrices.N = rows[5];
    matrices.W = rows[6];
    matrices.accept_percent = NAN;
    flatgain_problem *problem = NULL;
    flatgain_error error;
    if (flatgain_problem_from_matrices(&matrices, &problem, &error) != FLATGAIN_OK)
        fprintf(stderr, "%s\n", error.text);
    for (int k = 0; k < 7; k++)
        free(rows[k]);
    fg_arena_release(&arena);
    return problem;
}
