#include "problem/yaml_tree.h"

#include <stdio.h>
#include <string.h>
#include <yaml.h>

#include "problem/source.h"

enum { SLAB = 1024, POOL = 65536, DEPTH_CEILING = 64 };

struct builder {
    struct fg_tree *tree;
    flatgain_error *error;
    int depth, depth_max;
    struct fg_node *open[DEPTH_CEILING]; /* lists and maps being filled */
    struct fg_node *last[DEPTH_CEILING]; /* their newest child */
    const char *key;                     /* read, value still to come */
    yaml_mark_t key_mark;
    int documents;
};

static flatgain_status fail(const struct builder *builder, yaml_mark_t mark, const char *text)
{
    return fg_fail_at(builder->error, FLATGAIN_BAD_PROBLEM, builder->tree->name, (long)mark.line + 1,
                      (long)mark.column + 1, "%s", text);
}

/* ---- memory ----------------------------------------------------------------------------------- */

static struct fg_node *new_node(struct fg_tree *tree)
{
    if (tree->slab_left == 0) {
        tree->slab = fg_arena_get(&tree->arena, SLAB * sizeof *tree->slab);
        tree->slab_left = tree->slab ? SLAB : 0;
    }
    if (!tree->slab)
        return NULL;
    tree->slab_left--;
    tree->nodes++;
    return tree->slab++;
}

/* A copy with a NUL; arena pieces would cost 64 bytes for every number. */
static const char *keep_text(struct fg_tree *tree, const char *text, size_t length)
{
    if (length + 1 > POOL / 4) {
        char *own = fg_arena_get(&tree->arena, length + 1);
        if (own)
            memcpy(own, text, length);
        return own;
    }
    if (tree->pool_left < length + 1) {
        tree->pool = fg_arena_get(&tree->arena, POOL);
        tree->pool_left = tree->pool ? POOL : 0;
    }
    if (!tree->pool)
        return NULL;
    char *copy = tree->pool;
    memcpy(copy, text, length);
    tree->pool += length + 1;
    tree->pool_left -= length + 1;
    return copy;
}

/* ---- errors of libyaml ------------------------------------------------------------------------ */

static bool tab_there(const struct fg_tree *tree, yaml_mark_t mark)
{
    size_t length;
    const char *line = fg_source_line(tree->source, tree->source_length, (long)mark.line + 1, &length);
    for (size_t i = 0; i < length && (line[i] == ' ' || line[i] == '\t'); i++)
        if (line[i] == '\t')
            return true;
    return false;
}

/* libyaml often notices a mistake on the line after it, so the context's line is told as well. */
static flatgain_status syntax_error(const struct builder *builder, const yaml_parser_t *parser)
{
    const struct fg_tree *tree = builder->tree;
    if (parser->error == YAML_MEMORY_ERROR || parser->error == YAML_NO_ERROR)
        return fg_no_memory(builder->error);
    if (parser->error == YAML_READER_ERROR) {
        long line, column;
        fg_source_place(tree->source, tree->source_length, parser->problem_offset, &line, &column);
        return fg_fail_at(builder->error, FLATGAIN_BAD_PROBLEM, tree->name, line, column,
                          "%s, so this is not plain text; expected a YAML or JSON file in UTF-8",
                          parser->problem);
    }
    const char *problem = parser->problem ? parser->problem : "syntax error";
    if (strstr(problem, "cannot start any token") && tab_there(tree, parser->problem_mark))
        return fail(builder, parser->problem_mark, "a tab in the indentation; expected blanks");
    if (strstr(problem, "mapping values are not allowed"))
        return fail(builder, parser->problem_mark,
                    "not valid YAML: a colon inside a value; expected quotes around a text with a colon, and "
                    "keys of a section that begin in the same column");
    char text[420], context[200] = "";
    if (parser->context)
        snprintf(context, sizeof context, " %.100s that starts at line %zu, column %zu", parser->context,
                 parser->context_mark.line + 1, parser->context_mark.column + 1);
    /* a row or key that begins left of, or right of, its neighbours ends the block too early */
    bool indentation = strstr(problem, "did not find expected key") && parser->context &&
                       strstr(parser->context, "block mapping");
    snprintf(text, sizeof text, "not valid YAML: %.150s%s; expected %s", problem, context,
             indentation ? "the same indentation for all rows of a block and for all keys of a section"
                         : "something else here or just before");
    return fail(builder, parser->problem_mark, text);
}

/* ---- building --------------------------------------------------------------------------------- */

static flatgain_status duplicate(const struct builder *builder, const struct fg_node *map,
                                 const struct fg_node *node)
{
    for (const struct fg_node *other = map->first; other; other = other->next)
        if (strcmp(other->key, node->key) == 0) {
            char text[200], quoted[FG_QUOTE_SIZE];
            snprintf(text, sizeof text, "duplicate key %s; expected it once, and line %lu has it already",
                     fg_quote(node->key, strlen(node->key), quoted), (unsigned long)other->key_line);
            return fail(builder, builder->key_mark, text);
        }
    return FLATGAIN_OK;
}

/* Hangs a new node into the innermost open list or map. */
static flatgain_status attach(struct builder *builder, struct fg_node *node)
{
    struct fg_tree *tree = builder->tree;
    if (builder->depth == 0) {
        tree->root = node;
        return FLATGAIN_OK;
    }
    struct fg_node *parent = builder->open[builder->depth - 1];
    if (parent->kind == FG_NODE_MAP) {
        node->key = builder->key;
        node->key_line = (uint32_t)builder->key_mark.line + 1;
        node->key_column = (uint32_t)builder->key_mark.column + 1;
        builder->key = NULL;
        flatgain_status status = duplicate(builder, parent, node);
        if (status != FLATGAIN_OK)
            return status;
        if (parent->length >= FG_TREE_KEYS_MAX)
            return fail(builder, builder->key_mark,
                        "more than 200 keys in one map; expected the known ones only");
    }
    struct fg_node *last = builder->last[builder->depth - 1];
    if (last)
        last->next = node;
    else
        parent->first = node;
    builder->last[builder->depth - 1] = node;
    parent->length++;
    return FLATGAIN_OK;
}

static bool wants_key(const struct builder *builder)
{
    return builder->depth > 0 && builder->open[builder->depth - 1]->kind == FG_NODE_MAP && !builder->key;
}

static flatgain_status node_for(struct builder *builder, const yaml_event_t *event, enum fg_node_kind kind,
                                struct fg_node **node)
{
    if (builder->tree->nodes >= FG_TREE_NODES_MAX)
        return fail(builder, event->start_mark,
                    "more than 2500000 entries; expected large matrices as text blocks or files");
    *node = new_node(builder->tree);
    if (!*node)
        return fg_no_memory(builder->error);
    (*node)->kind = (uint8_t)kind;
    (*node)->line = (uint32_t)event->start_mark.line + 1;
    (*node)->column = (uint32_t)event->start_mark.column + 1;
    return FLATGAIN_OK;
}

static flatgain_status open_node(struct builder *builder, const yaml_event_t *event, enum fg_node_kind kind)
{
    if (wants_key(builder))
        return fail(builder, event->start_mark, "a list or map as a key; expected a word");
    if (builder->depth >= builder->depth_max) {
        char text[100];
        snprintf(text, sizeof text, "nested more than %d deep; expected a flatter file", builder->depth_max);
        return fail(builder, event->start_mark, text);
    }
    struct fg_node *node;
    flatgain_status status = node_for(builder, event, kind, &node);
    if (status == FLATGAIN_OK)
        status = attach(builder, node);
    if (status != FLATGAIN_OK)
        return status;
    builder->open[builder->depth] = node;
    builder->last[builder->depth] = NULL;
    builder->depth++;
    return FLATGAIN_OK;
}

static flatgain_status take_key(struct builder *builder, const yaml_event_t *event)
{
    const char *text = (const char *)event->data.scalar.value;
    size_t length = event->data.scalar.length;
    if (length == 0 || length > 100 || strlen(text) != length)
        return fail(builder, event->start_mark, "a key that is empty or very long; expected a word");
    builder->key = keep_text(builder->tree, text, length);
    builder->key_mark = event->start_mark;
    return builder->key ? FLATGAIN_OK : fg_no_memory(builder->error);
}

static enum fg_node_style style_of(const yaml_event_t *event)
{
    switch (event->data.scalar.style) {
    case YAML_LITERAL_SCALAR_STYLE:
        return FG_LITERAL;
    case YAML_FOLDED_SCALAR_STYLE:
        return FG_FOLDED;
    case YAML_SINGLE_QUOTED_SCALAR_STYLE:
    case YAML_DOUBLE_QUOTED_SCALAR_STYLE:
        return FG_QUOTED;
    default:
        return event->end_mark.line > event->start_mark.line ? FG_PLAIN_LINES : FG_PLAIN;
    }
}

static flatgain_status take_scalar(struct builder *builder, const yaml_event_t *event)
{
    if (wants_key(builder))
        return take_key(builder, event);
    enum fg_node_style style = style_of(event);
    const char *text = (const char *)event->data.scalar.value;
    bool null = style == FG_PLAIN && strcmp(text, "null") == 0;
    struct fg_node *node;
    flatgain_status status = node_for(builder, event, null ? FG_NODE_NULL : FG_NODE_SCALAR, &node);
    if (status != FLATGAIN_OK)
        return status;
    node->style = (uint8_t)style;
    node->length = (uint32_t)event->data.scalar.length;
    node->text = keep_text(builder->tree, text, event->data.scalar.length);
    return node->text ? attach(builder, node) : fg_no_memory(builder->error);
}

static flatgain_status no_extras(const struct builder *builder, const yaml_event_t *event)
{
    const yaml_char_t *anchor = NULL, *tag = NULL;
    if (event->type == YAML_ALIAS_EVENT)
        return fail(builder, event->start_mark,
                    "an alias (*); expected the value itself, aliases are not supported");
    if (event->type == YAML_SCALAR_EVENT) {
        anchor = event->data.scalar.anchor;
        tag = event->data.scalar.tag;
    } else if (event->type == YAML_SEQUENCE_START_EVENT) {
        anchor = event->data.sequence_start.anchor;
        tag = event->data.sequence_start.tag;
    } else if (event->type == YAML_MAPPING_START_EVENT) {
        anchor = event->data.mapping_start.anchor;
        tag = event->data.mapping_start.tag;
    }
    if (anchor)
        return fail(builder, event->start_mark,
                    "an anchor (&); expected the value alone, anchors are not supported");
    if (tag)
        return fail(builder, event->start_mark,
                    "a tag (!); expected the value alone, tags are not supported");
    return FLATGAIN_OK;
}

static flatgain_status take_event(struct builder *builder, const yaml_event_t *event)
{
    flatgain_status status = no_extras(builder, event);
    if (status != FLATGAIN_OK)
        return status;
    switch (event->type) {
    case YAML_DOCUMENT_START_EVENT:
        if (builder->documents++ > 0)
            return fail(builder, event->start_mark,
                        "a second document (---); expected one problem in a file");
        return FLATGAIN_OK;
    case YAML_SCALAR_EVENT:
        return take_scalar(builder, event);
    case YAML_SEQUENCE_START_EVENT:
        return open_node(builder, event, FG_NODE_LIST);
    case YAML_MAPPING_START_EVENT:
        return open_node(builder, event, FG_NODE_MAP);
    case YAML_SEQUENCE_END_EVENT:
    case YAML_MAPPING_END_EVENT:
        builder->depth--;
        return FLATGAIN_OK;
    default:
        return FLATGAIN_OK;
    }
}

flatgain_status fg_tree_parse(struct fg_tree *tree, const char *name, const char *source, size_t length,
                              int depth_max, flatgain_error *error)
{
    *tree = (struct fg_tree){.name = name};
    flatgain_status status = fg_source_check(name, &source, &length, error);
    if (status != FLATGAIN_OK)
        return status;
    tree->source = source;
    tree->source_length = length;
    struct builder builder = {.tree = tree, .error = error};
    builder.depth_max = depth_max < DEPTH_CEILING ? depth_max : DEPTH_CEILING;
    yaml_parser_t parser;
    if (!yaml_parser_initialize(&parser)) /* it cleans up after itself */
        return fg_no_memory(error);
    yaml_parser_set_input_string(&parser, (const unsigned char *)source, length);
    yaml_parser_set_encoding(&parser, YAML_UTF8_ENCODING);
    bool more = true;
    while (status == FLATGAIN_OK && more) {
        yaml_event_t event;
        if (!yaml_parser_parse(&parser, &event)) {
            status = syntax_error(&builder, &parser);
            break;
        }
        status = take_event(&builder, &event);
        more = event.type != YAML_STREAM_END_EVENT;
        yaml_event_delete(&event);
    }
    yaml_parser_delete(&parser);
    if (status == FLATGAIN_OK && !tree->root)
        status = fg_fail_at(error, FLATGAIN_BAD_PROBLEM, name, 1, 1,
                            "the file is empty; expected keys and values");
    return status;
}

void fg_tree_free(struct fg_tree *tree)
{
    fg_arena_release(&tree->arena);
}

struct fg_node *fg_tree_find(const struct fg_node *map, const char *key)
{
    if (!map || map->kind != FG_NODE_MAP)
        return NULL;
    for (struct fg_node *node = map->first; node; node = node->next)
        if (strcmp(node->key, key) == 0)
            return node->kind == FG_NODE_NULL ? NULL : node;
    return NULL;
}

const char *fg_node_word(const struct fg_node *node)
{
    switch (node->kind) {
    case FG_NODE_LIST:
        return "a list";
    case FG_NODE_MAP:
        return "a map";
    case FG_NODE_NULL:
        return "null";
    default:
        return node->length == 0 && node->style == FG_PLAIN ? "nothing" : "text";
    }
}
