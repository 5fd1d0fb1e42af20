#include "problem/cells.h"

#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

#include "base/number.h"
#include "problem/check.h"
#include "problem/source.h"

/* ---- places ----------------------------------------------------------------------------------- */

/* Place of byte `offset` of a literal block: its row is a line of the file, and what the line has more
 * than the row is the indentation. */
static void literal_place(const struct fg_cells *cells, size_t offset, long *line, long *column)
{
    long row, col;
    size_t here, there;
    fg_source_place(cells->text, cells->length, offset, &row, &col);
    fg_source_line(cells->text, cells->length, row, &here);
    *line = (long)cells->node->line + row;
    fg_source_line(cells->tree->source, cells->tree->source_length, *line, &there);
    *column = col + (there > here ? (long)(there - here) : 0);
}

static void cell_place(const struct fg_cells *cells, const struct fg_cell *cell, long *line, long *column)
{
    size_t offset = cell->node ? 0 : (size_t)(cell->text - cells->text);
    if (cell->node) {
        *line = cell->node->line;
        *column = cell->node->column;
    } else if (!cells->node) {
        fg_source_place(cells->text, cells->length, offset, line, column);
    } else if (cells->node->style == FG_LITERAL) {
        literal_place(cells, offset, line, column);
    } else {
        *line = cells->node->line;
        *column = cells->node->column + (cells->node->style == FG_PLAIN ? (long)offset : 0);
    }
}

static const char *cells_name(const struct fg_cells *cells)
{
    return cells->node ? cells->tree->name : cells->name;
}

flatgain_status fg_cells_fail(const struct fg_cells *cells, const struct fg_cell *cell, const char *format,
                              ...)
{
    char text[700];
    long line, column;
    va_list arguments;
    va_start(arguments, format);
    vsnprintf(text, sizeof text, format, arguments);
    va_end(arguments);
    cell_place(cells, cell, &line, &column);
    if (cells->single)
        return fg_fail_at(cells->error, FLATGAIN_BAD_PROBLEM, cells_name(cells), line, column, "%s: %s",
                          cells->what, text);
    return fg_fail_at(cells->error, FLATGAIN_BAD_PROBLEM, cells_name(cells), line, column,
                      "%s row %d, column %d: %s", cells->what, cell->row + 1, cell->col + 1, text);
}

/* An error about the whole. */
static flatgain_status fail_whole(const struct fg_cells *cells, const char *text)
{
    long line = cells->node ? cells->node->line : 1, column = cells->node ? cells->node->column : 1;
    return fg_fail_at(cells->error, FLATGAIN_BAD_PROBLEM, cells_name(cells), line, column, "%s %s",
                      cells->what, text);
}

/* ---- numbers ---------------------------------------------------------------------------------- */

static bool looks_infinite(const char *text, size_t length)
{
    static const char *const words[] = {"inf", "infinity", "nan", ".inf", ".nan", "null", "na"};
    if (length > 0 && (*text == '-' || *text == '+')) {
        text++;
        length--;
    }
    for (size_t i = 0; i < sizeof words / sizeof *words; i++)
        if (strlen(words[i]) == length && strncasecmp(words[i], text, length) == 0)
            return true;
    return false;
}

flatgain_status fg_cell_number(const struct fg_cells *cells, const struct fg_cell *cell, const char *also,
                               double *value)
{
    char quoted[FG_QUOTE_SIZE];
    fg_quote(cell->text, cell->length, quoted);
    if (cell->length > 300)
        return fg_cells_fail(cells, cell, "%s has %zu characters; expected a number%s", quoted, cell->length,
                             also);
    enum fg_number_fault fault = fg_number_read(cell->text, cell->length, value);
    if (fault == FG_NUMBER_TOO_LARGE)
        return fg_cells_fail(cells, cell, "%s is too large; expected a number below 1.8e308", quoted);
    if (fault == FG_NUMBER_OK && cell->node && cell->node->style != FG_PLAIN)
        return fg_cells_fail(cells, cell, "%s is quoted text; expected a number without quotes", quoted);
    if (fault == FG_NUMBER_OK)
        return FLATGAIN_OK;
    if (looks_infinite(cell->text, cell->length))
        return fg_cells_fail(cells, cell, "%s is not a finite number; expected one%s", quoted, also);
    if (cell->length > 0 && cell->text[cell->length - 1] == '%')
        return fg_cells_fail(cells, cell, "%s is not a number; expected it without the %% sign", quoted);
    if (memchr(cell->text, ';', cell->length))
        return fg_cells_fail(cells, cell,
                             "%s is not a number; expected rows on lines of their own, entries separated by "
                             "blanks or commas, and a decimal point",
                             quoted);
    if (memchr(cell->text, ' ', cell->length))
        return fg_cells_fail(
            cells, cell,
            "%s is not a number; expected entries separated by blanks or by commas, not by both "
            "in one row, and a decimal point",
            quoted);
    return fg_cells_fail(cells, cell, "%s is not a number; expected one such as -0.5 or 1e-3%s", quoted,
                         also);
}

flatgain_status fg_numbers_add(struct fg_numbers *numbers, double value, flatgain_error *error)
{
    if (numbers->count == numbers->room) {
        size_t room = numbers->room ? 2 * numbers->room : 64;
        double *at = realloc(numbers->at, room * sizeof *at);
        if (!at)
            return fg_no_memory(error);
        numbers->at = at;
        numbers->room = room;
    }
    numbers->at[numbers->count++] = value;
    return FLATGAIN_OK;
}

static flatgain_status add_number(void *user, const struct fg_cells *cells, const struct fg_cell *cell)
{
    double value;
    flatgain_status status = fg_cell_number(cells, cell, "", &value);
    return status == FLATGAIN_OK ? fg_numbers_add(user, value, cells->error) : status;
}

flatgain_status fg_cells_matrix(struct fg_cells *cells, struct fg_arena *arena, struct fg_matrix *matrix)
{
    if (!cells->node && fg_market_is(cells->text, cells->length))
        return fg_market_read(cells->what, cells->name, cells->text, cells->length, arena, matrix,
                              cells->error);
    struct fg_numbers numbers = {0};
    flatgain_status status = fg_cells_read(cells, add_number, &numbers);
    if (status == FLATGAIN_OK) {
        *matrix = fg_matrix_from_rows(arena, cells->rows, cells->cols, numbers.at);
        if (!matrix->at)
            status = fg_no_memory(cells->error);
    }
    free(numbers.at);
    return status;
}

/* ---- rows ------------------------------------------------------------------------------------- */

static flatgain_status give(struct fg_cells *cells, fg_cell_reader reader, void *user,
                            const struct fg_cell *cell)
{
    if (cell->row > 0 && cell->col >= cells->cols)
        return fg_cells_fail(cells, cell, "one entry too many; expected %d in the row, as in row 1",
                             cells->cols);
    if ((double)(cell->row + 1) * (cell->row ? cells->cols : cell->col + 1) > FG_ENTRIES_MAX)
        return fg_cells_fail(cells, cell, "more than %d entries; expected a smaller matrix",
                             (int)FG_ENTRIES_MAX);
    return reader(user, cells, cell);
}

/* The row is over with `last` its last entry. */
static flatgain_status end_row(struct fg_cells *cells, const struct fg_cell *last)
{
    int found = last->col + 1;
    if (last->row == 0)
        cells->cols = found;
    else if (found < cells->cols)
        return fg_cells_fail(cells, last, "the row ends after %d entr%s; expected %d, as in row 1", found,
                             found == 1 ? "y" : "ies", cells->cols);
    cells->rows = last->row + 1;
    return FLATGAIN_OK;
}

static bool is_blank(char c)
{
    return c == ' ' || c == '\t';
}

/* One line that is not empty: entries between commas, or between blanks when there is no comma. */
static flatgain_status split_row(struct fg_cells *cells, const char *at, const char *end,
                                 fg_cell_reader reader, void *user)
{
    bool commas = memchr(at, ',', (size_t)(end - at)) != NULL;
    struct fg_cell cell = {.row = cells->rows, .col = -1};
    while (at <= end) {
        while (at < end && is_blank(*at))
            at++;
        if (!commas && at == end)
            break;
        const char *stop = at;
        while (stop < end && (commas ? *stop != ',' : !is_blank(*stop)))
            stop++;
        const char *next = stop + 1;
        while (stop > at && is_blank(stop[-1]))
            stop--;
        cell.text = at;
        cell.length = (size_t)(stop - at);
        cell.col++;
        if (cell.length == 0)
            return fg_cells_fail(cells, &cell, "an empty entry between commas; expected a number");
        flatgain_status status = give(cells, reader, user, &cell);
        if (status != FLATGAIN_OK)
            return status;
        at = next;
    }
    return end_row(cells, &cell);
}

static flatgain_status split_text(struct fg_cells *cells, fg_cell_reader reader, void *user)
{
    const char *at = cells->text, *end = at + cells->length;
    while (at < end) {
        const char *stop = at;
        while (stop < end && *stop != '\n' && *stop != '\r')
            stop++;
        const char *next = stop + 1;
        const char *hash = memchr(at, '#', (size_t)(stop - at));
        if (hash)
            stop = hash; /* the rest of the line is a comment */
        while (stop > at && is_blank(stop[-1]))
            stop--;
        const char *first = at;
        while (first < stop && is_blank(*first))
            first++;
        if (first < stop) {
            flatgain_status status = split_row(cells, at, stop, reader, user);
            if (status != FLATGAIN_OK)
                return status;
        }
        at = next;
    }
    return cells->rows ? FLATGAIN_OK : fail_whole(cells, "is empty; expected rows of numbers");
}

/* ---- lists ------------------------------------------------------------------------------------ */

static flatgain_status list_row(struct fg_cells *cells, const struct fg_node *row, fg_cell_reader reader,
                                void *user)
{
    struct fg_cell cell = {.row = cells->rows, .col = -1};
    for (const struct fg_node *node = row->first; node; node = node->next) {
        cell = (struct fg_cell){node->text, node->length, cells->rows, cell.col + 1, node};
        if (node->kind != FG_NODE_SCALAR) {
            cell.text = "";
            return fg_cells_fail(cells, &cell, "%s where an entry belongs; expected a number",
                                 fg_node_word(node));
        }
        if (node->length == 0)
            return fg_cells_fail(cells, &cell, "an empty entry; expected a number");
        flatgain_status status = give(cells, reader, user, &cell);
        if (status != FLATGAIN_OK)
            return status;
    }
    if (cell.col < 0) {
        cell = (struct fg_cell){"", 0, cells->rows, 0, row};
        return fg_cells_fail(cells, &cell, "an empty row; expected numbers");
    }
    return end_row(cells, &cell);
}

static flatgain_status list_rows(struct fg_cells *cells, fg_cell_reader reader, void *user)
{
    const struct fg_node *list = cells->node;
    if (!list->first)
        return fail_whole(cells, "is an empty list; expected rows of numbers");
    if (list->first->kind != FG_NODE_LIST)
        return list_row(cells, list, reader, user); /* [1, 2, 3] is one row */
    for (const struct fg_node *row = list->first; row; row = row->next) {
        if (row->kind != FG_NODE_LIST) {
            struct fg_cell cell = {"", 0, cells->rows, 0, row};
            return fg_cells_fail(cells, &cell, "%s where a row belongs; expected a list as in row 1",
                                 fg_node_word(row));
        }
        flatgain_status status = list_row(cells, row, reader, user);
        if (status != FLATGAIN_OK)
            return status;
    }
    return FLATGAIN_OK;
}

flatgain_status fg_cells_read(struct fg_cells *cells, fg_cell_reader reader, void *user)
{
    cells->rows = cells->cols = 0;
    const struct fg_node *node = cells->node;
    if (!node)
        return split_text(cells, reader, user);
    if (node->kind == FG_NODE_LIST)
        return list_rows(cells, reader, user);
    if (node->kind != FG_NODE_SCALAR)
        return fail_whole(cells, "is a map; expected a text block of rows, a list of rows, or file: NAME");
    if (node->style == FG_FOLDED)
        return fail_whole(cells, "is a folded block (>) whose rows run together; expected a block with |");
    if (node->style == FG_PLAIN_LINES)
        return fail_whole(cells,
                          "runs over several lines without a mark; expected | after the key, then the rows");
    cells->text = node->text;
    cells->length = node->length;
    return split_text(cells, reader, user);
}
