/* A'S + S A - (S B + N) R^-1 (B'S + N') + Q = 0 (linalg/riccati.h).
 *
 * Scaled so that R has a unit diagonal and H = [An -G; -Qn -An'] is balanced, then the ordered real Schur
 * form of H (Laub, IEEE TAC 24 (1979) 913), then Newton steps on the equation as given, which remove what
 * scaling, R^-1 and the Schur form lost. */
#include "linalg/riccati.h"

#include "linalg/riccati_parts.h"

/* H = [An -G; -Qn -An'] and from it S; in scaled variables. */
static bool first_solution(struct fg_arena *arena, struct fg_riccati_scaled p, struct fg_matrix S)
{
    int n = p.A.rows;
    struct fg_matrix B = fg_matrix_copy(arena, p.B), N = fg_matrix_copy(arena, p.N);
    struct fg_matrix R = fg_matrix_copy(arena, p.R), H = fg_matrix_new(arena, 2 * n, 2 * n);
    struct fg_matrix An = fg_matrix_new(arena, n, n), Qn = fg_matrix_new(arena, n, n);
    struct fg_matrix G = fg_matrix_new(arena, n, n);
    if (arena->failed || !fg_riccati_uncross(p.A, B, p.Q, R, N, An, Qn, G))
        return false;
    for (int j = 0; j < n; j++)
        for (int i = 0; i < n; i++) {
            FG_AT(H, i, j) = FG_AT(An, i, j);
            FG_AT(H, i, n + j) = -FG_AT(G, i, j);
            FG_AT(H, n + i, j) = -FG_AT(Qn, i, j);
            FG_AT(H, n + i, n + j) = -FG_AT(An, j, i);
        }
    return fg_hamiltonian_solution(arena, H, S);
}

bool fg_riccati_continuous(struct fg_matrix A, struct fg_matrix B, struct fg_matrix Q, struct fg_matrix R,
                           struct fg_matrix N, struct fg_matrix S, struct fg_matrix L, bool *failed_memory)
{
    struct fg_arena arena = {0};
    *failed_memory = false;
    if (A.rows == 0)
        return true;
    struct fg_riccati_scaled p = fg_riccati_scale(&arena, A, B, Q, R, N);
    bool good = !arena.failed && first_solution(&arena, p, S) && fg_riccati_refine(false, &arena, p, S, L);
    if (good)
        fg_riccati_unscale(p, S, L);
    *failed_memory = arena.failed;
    fg_arena_release(&arena);
    return good;
}
