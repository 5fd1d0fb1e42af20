/* A gain in hand: rows of numbers (CSV), Matrix Market, or the gain of a result file. JSON is read by the
 * YAML reader, which is strict, bounded and knows places. */
#include "problem/gain_read.h"

#include <stdlib.h>
#include <string.h>

#include "problem/cells.h"
#include "problem/source.h"

static flatgain_status fail(const struct fg_tree *tree, const struct fg_node *node, flatgain_error *error,
                            const char *text)
{
    return fg_fail_at(error, FLATGAIN_BAD_PROBLEM, tree->name, node->line, node->column, "%s", text);
}

/* {"format": "flatgain-result", "gain": {"K": [[...], ...]}} */
static flatgain_status from_result(const struct fg_tree *tree, struct fg_arena *arena, struct fg_matrix *K,
                                   flatgain_error *error)
{
    const struct fg_node *root = tree->root, *format = fg_tree_find(root, "format");
    if (root->kind != FG_NODE_MAP || !format || format->kind != FG_NODE_SCALAR ||
        strcmp(format->text, "flatgain-result") != 0)
        return fail(tree, format ? format : root, error,
                    "not a result file; expected \"format\": \"flatgain-result\", or rows of numbers");
    const struct fg_node *gain = fg_tree_find(root, "gain");
    if (!gain)
        return fail(tree, root, error,
                    "the result has no gain (none was found); expected a result with a gain");
    const struct fg_node *rows = fg_tree_find(gain, "K");
    if (!rows || rows->kind != FG_NODE_LIST)
        return fail(tree, gain, error, "the gain of the result has no matrix K; expected rows of numbers");
    struct fg_cells cells = {.what = "K", .error = error, .tree = tree, .node = rows};
    return fg_cells_matrix(&cells, arena, K);
}

static flatgain_status read_any(const char *text, size_t length, const char *name, struct fg_arena *arena,
                                struct fg_matrix *K, flatgain_error *error)
{
    flatgain_status status = fg_source_check(name, &text, &length, error);
    if (status != FLATGAIN_OK)
        return status;
    size_t start = 0;
    while (start < length && memchr(" \t\r\n", text[start], 4))
        start++;
    if (start < length && text[start] == '{') {
        struct fg_tree tree;
        status = fg_tree_parse(&tree, name, text, length, FG_RESULT_DEPTH, error);
        if (status == FLATGAIN_OK)
            status = from_result(&tree, arena, K, error);
        fg_tree_free(&tree);
        return status;
    }
    struct fg_cells cells = {.what = "gain", .error = error, .name = name, .text = text, .length = length};
    return fg_cells_matrix(&cells, arena, K);
}

flatgain_status fg_gain_parse(const char *text, size_t length, const char *name,
                              const struct flatgain_problem *problem, double *gain, flatgain_error *error)
{
    struct fg_arena arena = {0};
    struct fg_matrix K = {0};
    flatgain_status status = read_any(text, length, name, &arena, &K, error);
    if (status == FLATGAIN_OK && (K.rows != problem->m || K.cols != problem->p))
        status = fg_fail_at(error, FLATGAIN_BAD_PROBLEM, name, 1, 1,
                            "the gain is %d x %d; expected %d x %d (%d inputs, %d outputs of the problem)%s",
                            K.rows, K.cols, problem->m, problem->p, problem->m, problem->p,
                            K.rows == problem->p && K.cols == problem->m ? "; it looks transposed" : "");
    if (status == FLATGAIN_OK)
        fg_matrix_to_rows(K, gain);
    fg_arena_release(&arena);
    return status;
}

flatgain_status flatgain_gain_read(const char *path, const flatgain_problem *problem, double *gain,
                                   flatgain_error *error)
{
    if (!path || !problem || !gain)
        return fg_fail(error, FLATGAIN_BAD_ARGUMENT, "path, problem or gain is NULL; expected all three");
    char reason[FG_QUOTE_SIZE], *text;
    size_t length;
    flatgain_status status = fg_source_read(path, &text, &length, reason);
    if (status == FLATGAIN_NO_MEMORY)
        return fg_no_memory(error);
    if (status != FLATGAIN_OK)
        return fg_fail(error, status,
                       "%.300s: cannot read: %s; expected a gain (CSV, Matrix Market or result file)", path,
                       reason);
    status = fg_gain_parse(text, length, path, problem, gain, error);
    free(text);
    return status;
}
