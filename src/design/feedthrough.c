/* Plants with D whose gains are all free: the search is for F = (I + K D)^-1 K of the same plant without D,
 * which has the same J. In K the set of well-posed loops falls apart at det(I + K D) = 0, and a minimum on
 * the far side can only be reached through infinity; in F there is no such wall. K = F (I - D F)^-1. */
#include <math.h>
#include <string.h>

#include "design/cost.h"
#include "design/search.h"
#include "linalg/lapack.h"

static bool all_free(const struct fg_pattern *pattern)
{
    if (pattern->count != pattern->m * pattern->p)
        return false;
    for (int k = 0; k < pattern->count; k++)
        if (isfinite(pattern->lower[k]) || isfinite(pattern->upper[k]) || pattern->index[k] < 0 ||
            pattern->fixed[k] != 0)
            return false;
    return true;
}

/* out = (I + sign G D)^-1 G = G (I + sign D G)^-1; false when singular. */
static bool through(struct fg_matrix G, struct fg_matrix D, double sign, struct fg_arena *scratch,
                    double *out)
{
    int m = G.rows, p = G.cols, info = 0;
    struct fg_matrix M = fg_matrix_identity(scratch, m);
    int *pivots = fg_arena_ints(scratch, (size_t)m);
    if (scratch->failed)
        return false;
    fg_multiply('N', 'N', sign, G, D, 1, M);
    memmove(out, G.at, (size_t)m * p * sizeof(double));
    if (!fg_all_finite((size_t)m * m, M.at))
        return false;
    dgesv_(&m, &p, M.at, &m, pivots, out, &m, &info);
    return info == 0 && fg_all_finite((size_t)m * p, out);
}

/* K of the law F, over F. When I - D F is (nearly) singular there is no such gain: then F is drawn back until
 * there is, and the answer says that the best gain would be infinite. */
static bool to_gain(struct fg_cost *check, struct fg_matrix F, struct fg_matrix D, struct fg_arena *scratch)
{
    struct fg_matrix drawn = fg_matrix_copy(scratch, F);
    double *K = fg_arena_doubles(scratch, (size_t)F.rows * F.cols);
    if (scratch->failed)
        return false;
    bool exact = through(F, D, -1, scratch, K) && fg_cost_is_posed(check, K);
    bool good = exact;
    for (double back = 1e-9; !good && !scratch->failed && back < 0.5; back *= 10) {
        for (int e = 0; e < F.rows * F.cols; e++)
            drawn.at[e] = (1 - back) * F.at[e];
        good = through(drawn, D, -1, scratch, K) && fg_cost_is_posed(check, K);
    }
    if (good)
        memcpy(F.at, K, (size_t)F.rows * F.cols * sizeof(double));
    return exact;
}

flatgain_status fg_search(const struct fg_search_request *request, struct fg_arena *arena,
                          struct fg_search_answer *answer, flatgain_error *error)
{
    const struct fg_plant *plant = request->plant;
    if (fg_matrix_is_zero(plant->D) || !all_free(request->pattern))
        return fg_search_as_given(request, arena, answer, error);
    struct fg_arena scratch = {0};
    struct fg_plant straight = *plant;
    struct fg_search_request inner = *request;
    int m = plant->m, p = plant->p;
    straight.D = fg_matrix_new(&scratch, p, m);
    inner.plant = &straight;
    struct fg_matrix today = fg_matrix_new(&scratch, m, p);
    struct fg_cost *check = scratch.failed ? NULL : fg_cost_new(plant, request->pattern, &scratch);
    if (!check) {
        fg_arena_release(&scratch);
        return fg_no_memory(error);
    }
    if (request->today)
        inner.today = through(*request->today, plant->D, 1, &scratch, today.at) ? &today : NULL;
    flatgain_status status = fg_search_as_given(&inner, arena, answer, error);
    if (status == FLATGAIN_OK && answer->K && isfinite(answer->cost) &&
        !to_gain(check, fg_matrix_view(answer->K, m, p), plant->D, &scratch)) {
        answer->end = FG_SEARCH_UNBOUNDED;
        answer->residual = answer->smallest_curvature = NAN;
        double cost = fg_cost_value(check, answer->K);
        answer->cost = isfinite(cost) ? cost : answer->cost;
    } else if (status == FLATGAIN_OK && answer->K && !isfinite(answer->cost)) {
        through(fg_matrix_view(answer->K, m, p), plant->D, -1, &scratch, today.at);
        if (fg_all_finite((size_t)m * p, today.at))
            memcpy(answer->K, today.at, (size_t)m * p * sizeof(double));
    }
    for (int k = 0; status == FLATGAIN_OK && k < answer->distinct; k++)
        to_gain(check, fg_matrix_view(answer->minima[k].K, m, p), plant->D, &scratch);
    if (scratch.failed)
        status = fg_no_memory(error);
    fg_arena_release(&scratch);
    return status;
}
