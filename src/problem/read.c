/* Problem file -> problem. Sections are read in the order of what depends on what, not of the file. */
#include <stdlib.h>
#include <stdio.h>
#include <string.h>

#include "problem/make.h"
#include "problem/reader.h"
#include "problem/source.h"

/* The value of a key that must be there. */
static flatgain_status need(const struct fg_reader *reader, const struct fg_node *map, const char *section,
                            const char *key, const char *expected, struct fg_node **value)
{
    *value = fg_tree_find(map, key);
    if (*value)
        return FLATGAIN_OK;
    return FG_READER_FAIL(reader, map, "%s has no %s; expected %s", *section ? section : "the file", key,
                          expected);
}

static flatgain_status read_setting(struct fg_reader *reader, const struct fg_node *root)
{
    struct fg_node *node;
    flatgain_status status =
        need(reader, root, "", "setting", "`setting: continuous` or `setting: discrete`", &node);
    if (status != FLATGAIN_OK)
        return status;
    const char *word = node->kind == FG_NODE_SCALAR ? node->text : "";
    if (strcmp(word, "sampled") == 0)
        return FG_READER_FAIL(reader, node,
                              "the sampled setting is not available in this version; expected continuous or "
                              "discrete (a model already discretised at the scan time)");
    reader->problem->setting = strcmp(word, "discrete") == 0 ? FG_DISCRETE : FG_CONTINUOUS;
    if (reader->problem->setting == FG_CONTINUOUS && strcmp(word, "continuous") != 0) {
        char quoted[FG_QUOTE_SIZE];
        return FG_READER_FAIL(reader, node, "unknown setting %s; expected continuous or discrete",
                              fg_quote(word, strlen(word), quoted));
    }
    return FLATGAIN_OK;
}

static flatgain_status read_time(struct fg_reader *reader, const struct fg_node *time)
{
    flatgain_status status = fg_keys_check(reader, time, "time");
    const struct fg_node *unit = fg_tree_find(time, "unit");
    if (status != FLATGAIN_OK || !unit)
        return status;
    status = fg_read_text(reader, unit, "unit", 30, &reader->problem->time_unit);
    if (status != FLATGAIN_OK || reader->problem->setting != FG_DISCRETE)
        return status;
    fg_places_set(&reader->places, "time.unit", unit->line, unit->column);
    return fg_check_warn(&reader->check, "time.unit", "time-unit-ignored",
                         "the time unit is ignored: in the discrete setting time counts steps");
}

static flatgain_status read_plant(struct fg_reader *reader, const struct fg_node *root)
{
    struct flatgain_problem *problem = reader->problem;
    struct fg_node *plant, *node;
    flatgain_status status = need(reader, root, "", "plant", "`plant:` with A, B and C", &plant);
    if (status == FLATGAIN_OK)
        status = fg_keys_check(reader, plant, "plant");
    if (status == FLATGAIN_OK)
        status = need(reader, plant, "plant", "A", "A, how the states move (n x n)", &node);
    if (status == FLATGAIN_OK)
        status = fg_read_matrix(reader, node, "plant.A", "A", &problem->A);
    if (status == FLATGAIN_OK && problem->A.rows != problem->A.cols)
        return FG_READER_FAIL(reader, node, "A is %d x %d; expected as many rows as columns", problem->A.rows,
                              problem->A.cols);
    if (status == FLATGAIN_OK)
        status = need(reader, plant, "plant", "B", "B, how the inputs move the states (n x m)", &node);
    if (status == FLATGAIN_OK)
        status = fg_read_matrix(reader, node, "plant.B", "B", &problem->B);
    if (status == FLATGAIN_OK && problem->B.rows != problem->A.rows)
        return FG_READER_FAIL(reader, node, "B is %d x %d; expected %d rows, as A has%s", problem->B.rows,
                              problem->B.cols, problem->A.rows,
                              problem->B.cols == problem->A.rows ? "; it looks transposed" : "");
    if (status == FLATGAIN_OK)
        status =
            need(reader, plant, "plant", "C", "C, how the outputs follow from the states (p x n)", &node);
    if (status == FLATGAIN_OK)
        status = fg_read_matrix(reader, node, "plant.C", "C", &problem->C);
    if (status == FLATGAIN_OK && problem->C.cols != problem->A.rows)
        return FG_READER_FAIL(reader, node, "C is %d x %d; expected %d columns, as A has%s", problem->C.rows,
                              problem->C.cols, problem->A.rows,
                              problem->C.rows == problem->A.rows ? "; it looks transposed" : "");
    if (status == FLATGAIN_OK && (node = fg_tree_find(plant, "D")))
        status = fg_read_matrix(reader, node, "plant.D", "D", &problem->D);
    problem->n = problem->A.rows;
    problem->m = problem->B.cols;
    problem->p = problem->C.rows;
    return status;
}

/* ---- what moves the plant --------------------------------------------------------------------- */

/* W += G S G', S = 1 when there is no intensity. G n x q, S q x q. */
static flatgain_status add_shaped(struct fg_reader *reader, const struct fg_node *shape,
                                  const struct fg_node *intensity)
{
    struct flatgain_problem *problem = reader->problem;
    struct fg_matrix G, S, GS;
    flatgain_status status = fg_read_matrix(reader, shape, "disturbance.G", "G", &G);
    if (status != FLATGAIN_OK)
        return status;
    if (G.rows != problem->n)
        return FG_READER_FAIL(reader, shape, "G is %d x %d; expected %d rows, as A has%s", G.rows, G.cols,
                              problem->n, G.cols == problem->n ? "; it looks transposed" : "");
    if (intensity) {
        status = fg_read_matrix(reader, intensity, "disturbance.intensity", "intensity", &S);
        if (status == FLATGAIN_OK && (S.rows != G.cols || S.cols != G.cols))
            return FG_READER_FAIL(reader, intensity,
                                  "intensity is %d x %d; expected %d x %d, the columns of G", S.rows, S.cols,
                                  G.cols, G.cols);
        if (status == FLATGAIN_OK)
            status = fg_check_semidefinite(&reader->check, "disturbance.intensity", "intensity",
                                           "covariance-projected", S);
        if (status != FLATGAIN_OK)
            return status;
    } else {
        S = fg_matrix_identity(&problem->arena, G.cols);
    }
    GS = fg_matrix_new(&problem->arena, G.rows, G.cols);
    if (problem->arena.failed)
        return fg_no_memory(reader->error);
    fg_multiply('N', 'N', 1, G, S, 0, GS);
    fg_multiply('N', 'T', 1, GS, G, 1, problem->W);
    fg_matrix_symmetrise(problem->W); /* rounding of the product must not look like a typing mistake */
    return FLATGAIN_OK;
}

/* W += the matrix given. */
static flatgain_status add_covariance(struct fg_reader *reader, const struct fg_node *node)
{
    struct flatgain_problem *problem = reader->problem;
    struct fg_matrix W;
    flatgain_status status = fg_read_matrix(reader, node, "disturbance.W", "W", &W);
    if (status == FLATGAIN_OK)
        status = fg_check_size(&reader->check, "disturbance.W", "W", W, 'n', 'n');
    if (status == FLATGAIN_OK)
        status = fg_check_semidefinite(&reader->check, "disturbance.W", "W", "covariance-projected", W);
    if (status != FLATGAIN_OK)
        return status;
    for (size_t e = 0; e < (size_t)W.rows * (size_t)W.cols; e++)
        problem->W.at[e] += W.at[e];
    return FLATGAIN_OK;
}

static flatgain_status read_one_disturbance(struct fg_reader *reader, const struct fg_node *map)
{
    flatgain_status status = fg_keys_check(reader, map, "disturbance");
    if (status != FLATGAIN_OK)
        return status;
    const struct fg_node *G = fg_tree_find(map, "G"), *W = fg_tree_find(map, "W"),
                         *intensity = fg_tree_find(map, "intensity");
    if (W && (G || intensity))
        return FG_READER_FAIL_KEY(reader, W, "W together with %s; expected W alone, or G with intensity",
                                  G ? "G" : "intensity");
    if (!W && !G)
        return FG_READER_FAIL(reader, map, "disturbance has neither G nor W; expected one of them");
    return W ? add_covariance(reader, W) : add_shaped(reader, G, intensity);
}

static flatgain_status read_disturbance(struct fg_reader *reader, const struct fg_node *node)
{
    struct flatgain_problem *problem = reader->problem;
    problem->reading = FG_AVERAGE;
    problem->W = fg_matrix_new(&problem->arena, problem->n, problem->n);
    if (!problem->W.at)
        return fg_no_memory(reader->error);
    fg_places_set(&reader->places, "disturbance", node->line, node->column);
    if (node->kind != FG_NODE_LIST)
        return read_one_disturbance(reader, node);
    if (!node->first)
        return FG_READER_FAIL(reader, node,
                              "disturbance is an empty list; expected maps with W, or G and intensity");
    flatgain_status status = FLATGAIN_OK;
    for (const struct fg_node *map = node->first; map && status == FLATGAIN_OK; map = map->next)
        status = read_one_disturbance(reader, map);
    return status;
}

static flatgain_status read_start(struct fg_reader *reader, const struct fg_node *start,
                                  const struct fg_node *root)
{
    static const char *const others[] = {"disturbance", "noise"};
    struct fg_node *node;
    for (int i = 0; i < 2; i++)
        if ((node = fg_tree_find(root, others[i])))
            return FG_READER_FAIL_KEY(reader, node,
                                      "%s together with start; expected one of them: a start is read without "
                                      "disturbance and noise%s",
                                      others[i], i ? " (a sensor lag alone goes to signals.outputs)" : "");
    reader->problem->reading = FG_START;
    flatgain_status status = fg_keys_check(reader, start, "start");
    if (status == FLATGAIN_OK)
        status = need(reader, start, "start", "X0", "X0, the mean of x x' at the start (n x n)", &node);
    return status == FLATGAIN_OK ? fg_read_matrix(reader, node, "start.X0", "X0", &reader->problem->W)
                                 : status;
}

static flatgain_status read_noise(struct fg_reader *reader, const struct fg_node *noise,
                                  const struct fg_node **lag)
{
    flatgain_status status = fg_keys_check(reader, noise, "noise");
    const struct fg_node *V = fg_tree_find(noise, "V");
    *lag = fg_tree_find(noise, "lag");
    if (status == FLATGAIN_OK && *lag && reader->problem->setting == FG_DISCRETE)
        return FG_READER_FAIL_KEY(
            reader, *lag,
            "lag in the discrete setting; expected none: a sensor filter belongs into the "
            "discrete matrices");
    return status == FLATGAIN_OK && V ? fg_read_matrix(reader, V, "noise.V", "V", &reader->problem->V)
                                      : status;
}

static flatgain_status read_movers(struct fg_reader *reader, const struct fg_node *root)
{
    const struct fg_node *disturbance = fg_tree_find(root, "disturbance"),
                         *start = fg_tree_find(root, "start"), *noise = fg_tree_find(root, "noise"),
                         *signals = fg_tree_find(root, "signals"), *lag = NULL;
    flatgain_status status;
    if (start)
        status = read_start(reader, start, root);
    else if (disturbance)
        status = read_disturbance(reader, disturbance);
    else
        return FG_READER_FAIL(
            reader, root,
            "neither disturbance nor start; expected `disturbance:` with W (n x n), or G with "
            "intensity, for the average cost, or `start:` with X0 for the cost of a start");
    if (status == FLATGAIN_OK && noise)
        status = read_noise(reader, noise, &lag);
    return status == FLATGAIN_OK ? fg_read_signals(reader, signals, lag) : status;
}

/* ---- the rest --------------------------------------------------------------------------------- */

static flatgain_status read_weights(struct fg_reader *reader, const struct fg_node *root)
{
    struct flatgain_problem *problem = reader->problem;
    struct fg_node *weights, *node;
    flatgain_status status = need(reader, root, "", "weights", "`weights:` with Q and R", &weights);
    if (status == FLATGAIN_OK)
        status = fg_keys_check(reader, weights, "weights");
    if (status == FLATGAIN_OK)
        status = need(reader, weights, "weights", "Q", "Q, the weight of the states (n x n)", &node);
    if (status == FLATGAIN_OK)
        status = fg_read_matrix(reader, node, "weights.Q", "Q", &problem->Q);
    if (status == FLATGAIN_OK)
        status = need(reader, weights, "weights", "R", "R, the weight of the inputs (m x m)", &node);
    if (status == FLATGAIN_OK)
        status = fg_read_matrix(reader, node, "weights.R", "R", &problem->R);
    if (status == FLATGAIN_OK && (node = fg_tree_find(weights, "N")))
        status = fg_read_matrix(reader, node, "weights.N", "N", &problem->N);
    return status;
}

static flatgain_status read_accept(struct fg_reader *reader, const struct fg_node *node)
{
    flatgain_status status = fg_read_number(reader, node, "accept", &reader->problem->accept_percent);
    if (status == FLATGAIN_OK && reader->problem->accept_percent < 0)
        return FG_READER_FAIL(reader, node, "accept is negative; expected a percentage of 0 or more");
    return status;
}

static flatgain_status read_all(struct fg_reader *reader, const struct fg_node *root)
{
    struct fg_node *node;
    flatgain_status status = fg_keys_check(reader, root, "");
    if (status == FLATGAIN_OK)
        status = read_setting(reader, root);
    if (status == FLATGAIN_OK && (node = fg_tree_find(root, "title")))
        status = fg_read_text(reader, node, "title", 300, &reader->problem->title);
    if (status == FLATGAIN_OK && (node = fg_tree_find(root, "time")))
        status = read_time(reader, node);
    if (status == FLATGAIN_OK)
        status = read_plant(reader, root);
    if (status == FLATGAIN_OK)
        status = read_movers(reader, root);
    if (status == FLATGAIN_OK)
        status = read_weights(reader, root);
    if (status == FLATGAIN_OK && (node = fg_tree_find(root, "gain")))
        status = fg_read_gain(reader, node);
    if (status == FLATGAIN_OK && (node = fg_tree_find(root, "accept")))
        status = read_accept(reader, node);
    return status == FLATGAIN_OK ? fg_problem_check(reader->problem, &reader->places, reader->error) : status;
}

static flatgain_status parse(const char *text, size_t length, const char *name, const char *folder,
                             struct flatgain_problem *problem, flatgain_error *error)
{
    struct fg_tree tree;
    flatgain_status status = fg_tree_parse(&tree, name, text, length, FG_PROBLEM_DEPTH, error);
    if (status == FLATGAIN_OK) {
        struct fg_reader reader = {.problem = problem, .tree = &tree, .folder = folder, .error = error};
        reader.places.name = name;
        reader.check = (struct fg_check){problem, &reader.places, error};
        status = read_all(&reader, tree.root);
    }
    fg_tree_free(&tree);
    return status;
}

flatgain_status flatgain_problem_parse(const char *text, size_t length, const char *name, const char *folder,
                                       flatgain_problem **problem, flatgain_error *error)
{
    if (problem)
        *problem = NULL;
    if (!problem || (!text && length))
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "text or problem is NULL; expected both");
    struct flatgain_problem *made = fg_problem_new();
    if (!made)
        return fg_no_memory(error);
    made->path = fg_arena_text(&made->arena, "%s", name ? name : "");
    flatgain_status status = made->path ? parse(text ? text : "", length, name && *name ? name : "problem",
                                                folder ? folder : "", made, error)
                                        : fg_no_memory(error);
    if (status != FLATGAIN_OK) {
        flatgain_problem_free(made);
        return status;
    }
    *problem = made;
    return FLATGAIN_OK;
}

flatgain_status flatgain_problem_read(const char *path, flatgain_problem **problem, flatgain_error *error)
{
    if (problem)
        *problem = NULL;
    if (!path || !problem)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "path or problem is NULL; expected both");
    char reason[FG_QUOTE_SIZE], *text;
    size_t length;
    flatgain_status status = fg_source_read(path, &text, &length, reason);
    if (status == FLATGAIN_NO_MEMORY)
        return fg_no_memory(error);
    if (status != FLATGAIN_OK)
        return fg_fail(error, status, "%.300s: cannot read: %s; expected a problem file", path, reason);
    const char *slash = strrchr(path, '/');
    char *folder = slash ? strndup(path, (size_t)(slash - path) + 1) : NULL;
    if (slash && !folder)
        status = fg_no_memory(error);
    else
        status = flatgain_problem_parse(text, length, path, folder, problem, error);
    free(folder);
    free(text);
    return status;
}
