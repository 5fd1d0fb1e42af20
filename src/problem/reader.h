/* What the parts of the problem reader share. */
#ifndef FG_PROBLEM_READER_H
#define FG_PROBLEM_READER_H

#include "problem/check.h"
#include "problem/yaml_tree.h"

struct fg_reader {
    struct flatgain_problem *problem;
    const struct fg_tree *tree;
    const char *folder; /* of matrix files; "" is the current one */
    flatgain_error *error;
    struct fg_places places;
    struct fg_check check; /* problem, places, error: for checks made on the way */
};

/* BAD_PROBLEM at the value, or at the key, of a node. */
#define FG_READER_FAIL(reader, node, ...)                                                                    \
    fg_fail_at((reader)->error, FLATGAIN_BAD_PROBLEM, (reader)->tree->name, (long)(node)->line,              \
               (long)(node)->column, __VA_ARGS__)
#define FG_READER_FAIL_KEY(reader, node, ...)                                                                \
    fg_fail_at((reader)->error, FLATGAIN_BAD_PROBLEM, (reader)->tree->name, (long)(node)->key_line,          \
               (long)(node)->key_column, __VA_ARGS__)

/* The node is a map with known keys only. `section` is "" for the file itself, else "plant", ...
 * An unknown key is answered with the nearest known one. */
flatgain_status fg_keys_check(const struct fg_reader *reader, const struct fg_node *map, const char *section);

/* Edits (insert, delete, replace, swap neighbours) between two words, upper and lower case being equal. */
int fg_word_distance(const char *a, const char *b);

/* A text of one line of at most `longest` bytes without control characters, kept by the problem. */
flatgain_status fg_read_text(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                             size_t longest, const char **text);
/* A finite number written plainly. */
flatgain_status fg_read_number(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                               double *value);
/* A matrix of numbers; notes the place of `key`. */
flatgain_status fg_read_matrix(struct fg_reader *reader, const struct fg_node *node, const char *key,
                               const char *what, struct fg_matrix *matrix);

struct fg_cells;
/* Opens {file: NAME} or the node itself as cells. *owned is the file's text, to be freed. */
flatgain_status fg_open_cells(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                              struct fg_cells *cells, char **owned);

/* The sections `gain` and `signals` with `noise.lag`; n, m, p are known. */
flatgain_status fg_read_gain(struct fg_reader *reader, const struct fg_node *gain);
flatgain_status fg_read_signals(struct fg_reader *reader, const struct fg_node *signals,
                                const struct fg_node *lag);

#endif
