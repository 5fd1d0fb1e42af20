/* What must hold for every problem, however it was made; defaults. */
#include "problem/check.h"

#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"
#include "problem/pattern.h"

flatgain_status fg_check_fail(const struct fg_check *check, const char *key, const char *format, ...)
{
    char text[900];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    if (!check->where)
        return fg_fail(check->error, FLATGAIN_BAD_PROBLEM, "%s", text);
    struct fg_place place = fg_places_find(check->where, key);
    return fg_fail_at(check->error, FLATGAIN_BAD_PROBLEM, check->where->name, place.line, place.column, "%s",
                      text);
}

flatgain_status fg_check_warn(const struct fg_check *check, const char *key, const char *code,
                              const char *format, ...)
{
    struct fg_arena *arena = &check->problem->arena;
    char text[900];
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    struct fg_problem_warning *warning = fg_arena_get(arena, sizeof *warning);
    if (!warning)
        return fg_no_memory(check->error);
    warning->code = code;
    if (check->where) {
        struct fg_place place = fg_places_find(check->where, key);
        warning->line = place.line;
        warning->text =
            fg_arena_text(arena, "%.300s:%ld:%ld: %s", check->where->name, place.line, place.column, text);
    } else {
        warning->text = fg_arena_text(arena, "%s", text);
    }
    if (!warning->text)
        return fg_no_memory(check->error);
    struct fg_problem_warning **at = &check->problem->warnings;
    while (*at && (*at)->line <= warning->line)
        at = &(*at)->next;
    warning->next = *at;
    *at = warning;
    return FLATGAIN_OK;
}

/* ---- sizes ----------------------------------------------------------------------------------- */

/* 'n', 'm', 'p' -> the number and where it comes from. */
static int dimension(const struct flatgain_problem *problem, char letter)
{
    return letter == 'n' ? problem->n : letter == 'm' ? problem->m : problem->p;
}

static void describe(const struct flatgain_problem *problem, char letter, char *text, size_t size)
{
    int count = dimension(problem, letter);
    const char *plural = count == 1 ? "" : "s";
    if (letter == 'n')
        snprintf(text, size, "%d state%s from A", count, plural);
    else if (letter == 'm')
        snprintf(text, size, "%d input%s from the columns of B", count, plural);
    else
        snprintf(text, size, "%d output%s from the rows of C", count, plural);
}

flatgain_status fg_check_size(const struct fg_check *check, const char *key, const char *what,
                              struct fg_matrix M, char rows, char cols)
{
    int r = dimension(check->problem, rows), c = dimension(check->problem, cols);
    if (M.rows == r && M.cols == c)
        return FLATGAIN_OK;
    char from[60], also[80] = "";
    describe(check->problem, rows, from, sizeof from);
    if (cols != rows) {
        memcpy(also, ", ", 2);
        describe(check->problem, cols, also + 2, sizeof also - 2);
    }
    return fg_check_fail(
        check, key, "%s is %d x %d; expected %d x %d (%s%s)%s", what, M.rows, M.cols, r, c, from, also,
        M.rows == c && M.cols == r                       ? "; it looks transposed"
        : r == 1 && c == 1 && M.rows == 1 && M.cols == 2 ? "; a comma separates entries, the decimal mark "
                                                           "is a point"
                                                         : "");
}

static flatgain_status sizes(const struct fg_check *check)
{
    struct flatgain_problem *problem = check->problem;
    const struct {
        const char *key, *what;
        struct fg_matrix *matrix;
        char rows, cols;
        bool optional;
    } all[] = {
        {"plant.A", "A", &problem->A, 'n', 'n', false},
        {"plant.B", "B", &problem->B, 'n', 'm', false},
        {"plant.C", "C", &problem->C, 'p', 'n', false},
        {"plant.D", "D", &problem->D, 'p', 'm', true},
        {problem->reading == FG_START ? "start.X0" : "disturbance", problem->reading == FG_START ? "X0" : "W",
         &problem->W, 'n', 'n', false},
        {"noise.V", "V", &problem->V, 'p', 'p', true},
        {"weights.Q", "Q", &problem->Q, 'n', 'n', false},
        {"weights.R", "R", &problem->R, 'm', 'm', false},
        {"weights.N", "N", &problem->N, 'n', 'm', true},
    };
    for (size_t i = 0; i < sizeof all / sizeof *all; i++) {
        if (all[i].optional && !all[i].matrix->at) {
            *all[i].matrix = fg_matrix_new(&problem->arena, dimension(problem, all[i].rows),
                                           dimension(problem, all[i].cols));
            continue;
        }
        flatgain_status status =
            fg_check_size(check, all[i].key, all[i].what, *all[i].matrix, all[i].rows, all[i].cols);
        if (status != FLATGAIN_OK)
            return status;
        if (!fg_all_finite((size_t)all[i].matrix->rows * (size_t)all[i].matrix->cols, all[i].matrix->at))
            return fg_check_fail(check, all[i].key,
                                 "%s has an entry that is not a finite number; expected finite ones",
                                 all[i].what);
    }
    if (!problem->has_today)
        return problem->arena.failed ? fg_no_memory(check->error) : FLATGAIN_OK;
    flatgain_status status = fg_check_size(check, "gain.today", "today", problem->today, 'm', 'p');
    if (status == FLATGAIN_OK && !fg_all_finite((size_t)problem->m * (size_t)problem->p, problem->today.at))
        return fg_check_fail(check, "gain.today",
                             "today has an entry that is not a finite number; expected finite ones");
    return status;
}

/* ---- signals ---------------------------------------------------------------------------------- */

static void default_names(struct flatgain_problem *problem, struct fg_signal **signals, int count,
                          char letter)
{
    if (!*signals)
        *signals = fg_arena_get(&problem->arena, sizeof **signals * (size_t)count);
    for (int i = 0; *signals && i < count; i++) {
        if (!(*signals)[i].name)
            (*signals)[i].name = fg_arena_text(&problem->arena, "%c%d", letter, i + 1);
        if (!(*signals)[i].unit)
            (*signals)[i].unit = "";
    }
}

static flatgain_status lags(const struct fg_check *check)
{
    const struct flatgain_problem *problem = check->problem;
    for (int i = 0; i < problem->p; i++) {
        const struct fg_signal *output = &problem->outputs[i];
        char number[FG_NUMBER_SIZE];
        fg_number_round(output->lag, 6, number);
        if (!isfinite(output->lag) || output->lag < 0)
            return fg_check_fail(check, "noise.lag",
                                 "the lag of output %s is %s; expected a time constant of 0 or more",
                                 output->name, number);
        if (output->lag > 0 && problem->setting == FG_DISCRETE)
            return fg_check_fail(
                check, "noise.lag",
                "output %s has a lag in the discrete setting; expected none: a sensor filter "
                "belongs into the discrete matrices",
                output->name);
        if (output->lag > 0 || problem->setting == FG_DISCRETE)
            continue;
        for (int j = 0; j < problem->p; j++)
            if (FG_AT(problem->V, i, j) != 0 || FG_AT(problem->V, j, i) != 0)
                return fg_check_fail(
                    check, "noise.V",
                    "output %s has noise but no lag: in continuous time white noise that reaches the "
                    "actuator through a static gain has infinite variance; expected `lag: T` "
                    "under noise, T the time constant of each output's sensor filter (or the "
                    "discrete setting)",
                    output->name);
    }
    return FLATGAIN_OK;
}

/* ---- all -------------------------------------------------------------------------------------- */

static flatgain_status covariances(const struct fg_check *check)
{
    struct flatgain_problem *problem = check->problem;
    bool start = problem->reading == FG_START;
    const char *code = "covariance-projected";
    flatgain_status status = fg_check_semidefinite(check, start ? "start.X0" : "disturbance",
                                                   start ? "X0" : "W", code, problem->W);
    if (status == FLATGAIN_OK)
        status = fg_check_semidefinite(check, "noise.V", "V", code, problem->V);
    if (status == FLATGAIN_OK && start && !fg_matrix_is_zero(problem->V))
        status =
            fg_check_fail(check, "noise.V",
                          "noise is given together with start; expected one of them: the cost of a start "
                          "is read without noise");
    if (status == FLATGAIN_OK && fg_matrix_is_zero(problem->W))
        status = fg_check_warn(
            check, start ? "start.X0" : "disturbance", "no-disturbance", "%s is zero%s", start ? "X0" : "W",
            fg_matrix_is_zero(problem->V) ? ": nothing moves the plant, so every stabilising gain costs 0"
                                          : ": only the measurement noise moves the plant");
    return status;
}

static flatgain_status today(const struct fg_check *check)
{
    struct flatgain_problem *problem = check->problem;
    double *rows = fg_arena_doubles(&problem->arena, (size_t)problem->m * (size_t)problem->p);
    if (!rows)
        return fg_no_memory(check->error);
    fg_matrix_to_rows(problem->today, rows);
    problem->today_rows = rows;
    return fg_pattern_check_today(check);
}

flatgain_status fg_problem_check(struct flatgain_problem *problem, const struct fg_places *where,
                                 flatgain_error *error)
{
    const struct fg_check check = {problem, where, error};
    flatgain_status status = sizes(&check);
    if (status != FLATGAIN_OK)
        return status;
    default_names(problem, &problem->inputs, problem->m, 'u');
    default_names(problem, &problem->outputs, problem->p, 'y');
    default_names(problem, &problem->states, problem->n, 'x');
    if (!problem->title)
        problem->title = "";
    if (!problem->path)
        problem->path = "";
    if (!problem->time_unit || problem->setting == FG_DISCRETE)
        problem->time_unit = problem->setting == FG_DISCRETE ? "step" : "";
    if (problem->arena.failed)
        return fg_no_memory(error);
    if ((status = lags(&check)) != FLATGAIN_OK)
        return status;
    if ((status = fg_check_weights(&check)) != FLATGAIN_OK)
        return status;
    if ((status = covariances(&check)) != FLATGAIN_OK)
        return status;
    if (!problem->pattern.index &&
        (status = fg_pattern_build(&check, &(struct fg_pattern_request){0})) != FLATGAIN_OK)
        return status;
    if (problem->has_today && (status = today(&check)) != FLATGAIN_OK)
        return status;
    problem->hash = fg_problem_hash(problem);
    return FLATGAIN_OK;
}
