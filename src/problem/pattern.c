/* K(i,j) = fixed(i,j) + sign(i,j) theta(index(i,j)) */
#include "problem/pattern.h"

#include <math.h>

#include "base/number.h"

static const char *number(double value, char text[FG_NUMBER_SIZE])
{
    fg_number_round(value, 12, text);
    return text;
}

/* lower <= upper, and the fixed value between them, for every entry. */
static flatgain_status entry_bounds(const struct fg_check *check, const struct fg_pattern_request *request,
                                    int row, int col, double low, double high)
{
    char a[FG_NUMBER_SIZE], b[FG_NUMBER_SIZE];
    const struct flatgain_problem *problem = check->problem;
    size_t at = (size_t)row * (size_t)problem->p + (size_t)col;
    if (!(low < INFINITY))
        return fg_check_fail(check, "gain.lower",
                             "lower bound of row %d, column %d is %s; expected a number or none", row + 1,
                             col + 1, number(low, a));
    if (!(high > -INFINITY))
        return fg_check_fail(check, "gain.upper",
                             "upper bound of row %d, column %d is %s; expected a number or none", row + 1,
                             col + 1, number(high, a));
    if (low > high)
        return fg_check_fail(
            check, "gain.lower",
            "lower bound %s of row %d, column %d is above its upper bound %s; expected lower <= upper",
            number(low, a), row + 1, col + 1, number(high, b));
    if (!request->entries || request->entries[at].kind != FG_ENTRY_FIXED)
        return FLATGAIN_OK;
    double value = request->entries[at].value;
    if (value < low)
        return fg_check_fail(
            check, "gain.pattern",
            "row %d, column %d is fixed at %s, below its lower bound %s; expected a value within "
            "its bounds",
            row + 1, col + 1, number(value, a), number(low, b));
    if (value > high)
        return fg_check_fail(
            check, "gain.pattern",
            "row %d, column %d is fixed at %s, above its upper bound %s; expected a value within "
            "its bounds",
            row + 1, col + 1, number(value, a), number(high, b));
    return FLATGAIN_OK;
}

static bool allocate(struct fg_pattern *pattern, struct fg_arena *arena)
{
    size_t entries = (size_t)pattern->m * (size_t)pattern->p;
    pattern->index = fg_arena_ints(arena, entries);
    pattern->sign = fg_arena_doubles(arena, entries);
    pattern->fixed = fg_arena_doubles(arena, entries);
    pattern->lower = fg_arena_doubles(arena, entries);
    pattern->upper = fg_arena_doubles(arena, entries);
    return !arena->failed;
}

/* One parameter for every free entry and every word, in the order of reading (by rows). */
static void number_parameters(struct fg_pattern *pattern, const struct fg_pattern_request *request,
                              int *word_index)
{
    for (int i = 0; i < pattern->m; i++)
        for (int j = 0; j < pattern->p; j++) {
            size_t to = (size_t)i + (size_t)j * (size_t)pattern->m;
            size_t from = (size_t)i * (size_t)pattern->p + (size_t)j;
            struct fg_pattern_entry entry = {FG_ENTRY_FREE, 0, 1, 0};
            if (request->entries)
                entry = request->entries[from];
            pattern->index[to] = -1;
            if (entry.kind == FG_ENTRY_FIXED) {
                pattern->fixed[to] = entry.value == 0 ? 0.0 : entry.value;
                continue;
            }
            int fresh = pattern->count;
            if (entry.kind == FG_ENTRY_TIED) {
                if (word_index[entry.word] < 0)
                    word_index[entry.word] = pattern->count++;
                fresh = word_index[entry.word];
            } else {
                pattern->count++;
            }
            pattern->index[to] = fresh;
            pattern->sign[to] = entry.kind == FG_ENTRY_TIED ? entry.sign : 1;
        }
}

static flatgain_status bound_parameters(const struct fg_check *check,
                                        const struct fg_pattern_request *request)
{
    struct fg_pattern *pattern = &check->problem->pattern;
    for (int k = 0; k < pattern->count; k++) {
        pattern->lower[k] = -INFINITY;
        pattern->upper[k] = INFINITY;
    }
    for (int i = 0; i < pattern->m; i++)
        for (int j = 0; j < pattern->p; j++) {
            size_t at = (size_t)i + (size_t)j * (size_t)pattern->m;
            size_t from = (size_t)i * (size_t)pattern->p + (size_t)j;
            double low = request->lower ? request->lower[from] : -INFINITY;
            double high = request->upper ? request->upper[from] : INFINITY;
            flatgain_status status = entry_bounds(check, request, i, j, low, high);
            if (status != FLATGAIN_OK)
                return status;
            int k = pattern->index[at];
            if (k < 0)
                continue;
            pattern->lower[k] = fmax(pattern->lower[k], pattern->sign[at] > 0 ? low : -high);
            pattern->upper[k] = fmin(pattern->upper[k], pattern->sign[at] > 0 ? high : -low);
        }
    return FLATGAIN_OK;
}

static flatgain_status tied_bounds(const struct fg_check *check, const struct fg_pattern_request *request,
                                   const int *word_index)
{
    const struct fg_pattern *pattern = &check->problem->pattern;
    for (int w = 0; w < request->word_count; w++) {
        int k = word_index[w];
        if (k >= 0 && pattern->lower[k] > pattern->upper[k]) {
            char a[FG_NUMBER_SIZE], b[FG_NUMBER_SIZE];
            return fg_check_fail(
                check, "gain.pattern",
                "the bounds of the entries tied as %s leave no value (at least %s, at most %s, sign "
                "included); expected bounds that overlap",
                request->words[w], number(pattern->lower[k], a), number(pattern->upper[k], b));
        }
    }
    return FLATGAIN_OK;
}

/* Parameters whose bounds meet leave the search: an optimiser works badly on equal bounds. */
static void drop_pinned(struct fg_pattern *pattern)
{
    size_t entries = (size_t)pattern->m * (size_t)pattern->p;
    for (int k = pattern->count - 1; k >= 0; k--) {
        if (pattern->lower[k] < pattern->upper[k])
            continue;
        for (size_t e = 0; e < entries; e++) {
            if (pattern->index[e] == k) {
                double value = pattern->sign[e] * pattern->lower[k];
                pattern->index[e] = -1;
                pattern->sign[e] = 0;
                pattern->fixed[e] = value == 0 ? 0.0 : value;
            } else if (pattern->index[e] > k) {
                pattern->index[e]--;
            }
        }
        pattern->count--;
        for (int l = k; l < pattern->count; l++) {
            pattern->lower[l] = pattern->lower[l + 1];
            pattern->upper[l] = pattern->upper[l + 1];
        }
    }
}

flatgain_status fg_pattern_build(const struct fg_check *check, const struct fg_pattern_request *request)
{
    struct flatgain_problem *problem = check->problem;
    struct fg_pattern *pattern = &problem->pattern;
    *pattern = (struct fg_pattern){.m = problem->m, .p = problem->p};
    struct fg_arena scratch = {0};
    int *word_index = fg_arena_ints(&scratch, (size_t)request->word_count);
    flatgain_status status = FLATGAIN_OK;
    if (scratch.failed || !allocate(pattern, &problem->arena)) {
        status = fg_no_memory(check->error);
    } else {
        for (int w = 0; w < request->word_count; w++)
            word_index[w] = -1;
        number_parameters(pattern, request, word_index);
        status = bound_parameters(check, request);
        if (status == FLATGAIN_OK)
            status = tied_bounds(check, request, word_index);
        if (status == FLATGAIN_OK)
            drop_pinned(pattern);
    }
    fg_arena_release(&scratch);
    return status;
}

void fg_pattern_gain(const struct fg_pattern *pattern, const double *theta, double *K)
{
    size_t entries = (size_t)pattern->m * (size_t)pattern->p;
    for (size_t e = 0; e < entries; e++)
        K[e] = pattern->index[e] < 0 ? pattern->fixed[e] : pattern->sign[e] * theta[pattern->index[e]];
}

/* theta(k) = mean over its entries of sign K, the least-squares answer since every sign is +1 or -1. */
void fg_pattern_parameters(const struct fg_pattern *pattern, const double *K, double *theta)
{
    size_t entries = (size_t)pattern->m * (size_t)pattern->p;
    for (int k = 0; k < pattern->count; k++) {
        double sum = 0;
        int count = 0;
        for (size_t e = 0; e < entries; e++)
            if (pattern->index[e] == k) {
                sum += pattern->sign[e] * K[e];
                count++;
            }
        theta[k] = fmin(fmax(count ? sum / count : 0, pattern->lower[k]), pattern->upper[k]);
    }
}

/* Typed gains are rounded, so a relative difference of this size is not a broken tie. */
static const double TODAY_LIMIT = 1e-6;

flatgain_status fg_pattern_check_today(const struct fg_check *check)
{
    const struct flatgain_problem *problem = check->problem;
    const struct fg_pattern *pattern = &problem->pattern;
    struct fg_arena scratch = {0};
    double *theta = fg_arena_doubles(&scratch, (size_t)pattern->count);
    double *K = fg_arena_doubles(&scratch, (size_t)pattern->m * (size_t)pattern->p);
    flatgain_status status = scratch.failed ? fg_no_memory(check->error) : FLATGAIN_OK;
    if (status == FLATGAIN_OK) {
        fg_pattern_parameters(pattern, problem->today.at, theta);
        fg_pattern_gain(pattern, theta, K);
    }
    for (int i = 0; status == FLATGAIN_OK && i < pattern->m; i++)
        for (int j = 0; j < pattern->p; j++) {
            double used = FG_AT(problem->today, i, j),
                   allowed = K[(size_t)i + (size_t)j * (size_t)pattern->m];
            if (fabs(used - allowed) <= TODAY_LIMIT * fmax(fabs(used), fabs(allowed)))
                continue;
            char a[FG_NUMBER_SIZE], b[FG_NUMBER_SIZE];
            status =
                fg_check_warn(check, "gain.today", "today-outside",
                              "today's gain does not keep the pattern and bounds: row %d, column %d is %s, "
                              "the nearest allowed value is %s",
                              i + 1, j + 1, number(used, a), number(allowed, b));
            i = pattern->m; /* one warning is enough */
            break;
        }
    fg_arena_release(&scratch);
    return status;
}
