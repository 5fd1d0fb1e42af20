/* YAML events -> a small tree that knows where everything stands. Strict: no anchors, aliases, tags,
 * duplicate keys or second documents, a limited depth and a limited number of entries, so that time and
 * memory stay in proportion to the file. */
#ifndef FG_PROBLEM_YAML_TREE_H
#define FG_PROBLEM_YAML_TREE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

#include "base/arena.h"
#include "base/status.h"

enum {
    FG_TREE_NODES_MAX = 2500000, /* entries in lists and maps together */
    FG_TREE_KEYS_MAX = 200,      /* keys of one map */
    FG_PROBLEM_DEPTH = 8,        /* of a problem file */
    FG_RESULT_DEPTH = 32         /* of a result file */
};

enum fg_node_kind { FG_NODE_SCALAR, FG_NODE_LIST, FG_NODE_MAP, FG_NODE_NULL /* the word null */ };
enum fg_node_style { FG_PLAIN, FG_PLAIN_LINES /* folded over lines */, FG_QUOTED, FG_LITERAL, FG_FOLDED };

struct fg_node {
    struct fg_node *next; /* sibling */
    union {
        struct fg_node *first; /* child of a list or map */
        const char *text;      /* of a scalar, NUL-terminated */
    };
    const char *key;       /* in a map; NULL in a list */
    uint32_t length;       /* bytes of text, or number of children */
    uint32_t line, column; /* from 1 */
    uint32_t key_line, key_column;
    uint8_t kind, style;
};

struct fg_tree {
    struct fg_arena arena;
    const char *name;   /* in messages */
    const char *source; /* the file; must outlive the tree */
    size_t source_length;
    struct fg_node *root;
    struct fg_node *slab; /* nodes not yet used */
    size_t slab_left, nodes;
    char *pool; /* bytes not yet used */
    size_t pool_left;
};

/* Fills *tree; release it with fg_tree_free whatever the status. `name` and `source` are kept. */
flatgain_status fg_tree_parse(struct fg_tree *tree, const char *name, const char *source, size_t length,
                              int depth_max, flatgain_error *error);
void fg_tree_free(struct fg_tree *tree);

/* The value of a key; NULL when it is not there or is `null`. */
struct fg_node *fg_tree_find(const struct fg_node *map, const char *key);

/* "text", "a list", "a map", "null": for messages. */
const char *fg_node_word(const struct fg_node *node);

#endif
