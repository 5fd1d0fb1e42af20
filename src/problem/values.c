/* Single values and matrices of a problem file. */
#include <stdlib.h>
#include <stdio.h>
#include <string.h>

#include "problem/cells.h"
#include "problem/reader.h"
#include "problem/source.h"

static bool is_ascii(const char *text, size_t length)
{
    for (size_t i = 0; i < length; i++)
        if ((unsigned char)text[i] > 0x7f)
            return false;
    return true;
}

flatgain_status fg_read_text(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                             size_t longest, const char **text)
{
    if (node->kind != FG_NODE_SCALAR)
        return FG_READER_FAIL(reader, node, "%s is %s; expected a text", what, fg_node_word(node));
    size_t length = node->length;
    if (node->style == FG_LITERAL || node->style == FG_FOLDED)
        while (length > 0 && node->text[length - 1] == '\n')
            length--;
    if (length == 0)
        return FG_READER_FAIL(reader, node, "%s is empty; expected a text", what);
    if (length > longest)
        return FG_READER_FAIL(reader, node, "%s has %zu bytes%s; expected at most %zu", what, length,
                              is_ascii(node->text, length) ? "" : " (letters outside ASCII take 2 to 4)",
                              longest);
    for (size_t i = 0; i < length; i++) {
        unsigned char c = (unsigned char)node->text[i];
        bool high = c == 0xc2 && (unsigned char)node->text[i + 1] < 0xa0; /* U+0080 to U+009F */
        if (c < 0x20 || c == 0x7f || high)
            return FG_READER_FAIL(reader, node, "%s has a line break or control character; expected one line",
                                  what);
    }
    *text = fg_arena_text(&reader->problem->arena, "%.*s", (int)length, node->text);
    return *text ? FLATGAIN_OK : fg_no_memory(reader->error);
}

flatgain_status fg_read_number(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                               double *value)
{
    if (node->kind != FG_NODE_SCALAR || node->length == 0)
        return FG_READER_FAIL(reader, node, "%s is %s; expected a number", what, fg_node_word(node));
    struct fg_cells cells = {
        .what = what, .error = reader->error, .tree = reader->tree, .node = node, .single = true};
    struct fg_cell cell = {.text = node->text, .length = node->length, .node = node};
    return fg_cell_number(&cells, &cell, "", value);
}

/* {file: NAME} -> cells of that file. Places of a file that cannot be read are those of NAME. */
static flatgain_status open_file(const struct fg_reader *reader, const struct fg_node *map, const char *what,
                                 struct fg_cells *cells, char **owned)
{
    const struct fg_node *name = fg_tree_find(map, "file");
    for (const struct fg_node *node = map->first; node; node = node->next)
        if (strcmp(node->key, "file") != 0)
            return FG_READER_FAIL_KEY(reader, node, "unknown key in %s; expected only `file: NAME`, or rows",
                                      what);
    if (!name)
        return FG_READER_FAIL(reader, map, "%s is an empty map; expected rows of numbers or `file: NAME`",
                              what);
    const char *text;
    flatgain_status status = fg_read_text(reader, name, "the file name", 4000, &text);
    if (status != FLATGAIN_OK)
        return status;
    bool alone = *text == '/' || !*reader->folder;
    const char *path =
        fg_arena_text(&reader->problem->arena, "%s%s%s", alone ? "" : reader->folder,
                      alone || reader->folder[strlen(reader->folder) - 1] == '/' ? "" : "/", text);
    if (!path)
        return fg_no_memory(reader->error);
    char reason[FG_QUOTE_SIZE], quoted[FG_QUOTE_SIZE];
    size_t length;
    status = fg_source_read(path, owned, &length, reason);
    if (status == FLATGAIN_NO_MEMORY)
        return fg_no_memory(reader->error);
    if (status != FLATGAIN_OK)
        return fg_fail_at(reader->error, status, reader->tree->name, name->line, name->column,
                          "%s: cannot read %s: %s; expected a CSV or Matrix Market file, relative to the "
                          "problem file",
                          what, fg_quote(text, strlen(text), quoted), reason);
    const char *start = *owned;
    status = fg_source_check(path, &start, &length, reader->error);
    *cells = (struct fg_cells){
        .what = what, .error = reader->error, .name = path, .text = start, .length = length};
    return status;
}

flatgain_status fg_open_cells(const struct fg_reader *reader, const struct fg_node *node, const char *what,
                              struct fg_cells *cells, char **owned)
{
    *owned = NULL;
    if (node->kind == FG_NODE_MAP)
        return open_file(reader, node, what, cells, owned);
    if (node->kind == FG_NODE_SCALAR && node->length == 0)
        return FG_READER_FAIL(reader, node, "%s has no value; expected rows of numbers", what);
    *cells = (struct fg_cells){.what = what, .error = reader->error, .tree = reader->tree, .node = node};
    return FLATGAIN_OK;
}

flatgain_status fg_read_matrix(struct fg_reader *reader, const struct fg_node *node, const char *key,
                               const char *what, struct fg_matrix *matrix)
{
    struct fg_cells cells;
    char *owned;
    fg_places_set(&reader->places, key, node->line, node->column);
    flatgain_status status = fg_open_cells(reader, node, what, &cells, &owned);
    if (status == FLATGAIN_OK)
        status = fg_cells_matrix(&cells, &reader->problem->arena, matrix);
    free(owned);
    return status;
}
