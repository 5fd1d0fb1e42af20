/* The section `gain`: pattern, lower, upper, today. */
#include <ctype.h>
#include <math.h>
#include <stdlib.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"
#include "problem/cells.h"
#include "problem/pattern.h"
#include "problem/reader.h"
#include "problem/source.h"

/* More different words than this in a pattern are no ties; the limit keeps their look-up quick. */
enum { WORDS_MAX = 1000, WORD_LENGTH = 40 };

struct pattern_reading {
    const struct fg_reader *reader;
    struct fg_pattern_entry *entries; /* room for m x p, row-major */
    const char **words;
    int word_count;
    struct fg_arena *scratch;
};

/* Refuses what lies outside m x p at once, so that the arrays below need no more room. */
static flatgain_status inside(const struct fg_reader *reader, const struct fg_cells *cells,
                              const struct fg_cell *cell)
{
    const struct flatgain_problem *problem = reader->problem;
    if (cell->row < problem->m && cell->col < problem->p)
        return FLATGAIN_OK;
    return fg_cells_fail(cells, cell, "outside the gain; expected %d x %d (inputs: %d, outputs: %d)",
                         problem->m, problem->p, problem->m, problem->p);
}

/* Letters, digits and _, not starting with a digit, perhaps after one minus. */
static bool is_word(const char *text, size_t length)
{
    if (length > 0 && *text == '-') {
        text++;
        length--;
    }
    if (length == 0 || length > WORD_LENGTH || isdigit((unsigned char)*text))
        return false;
    for (size_t i = 0; i < length; i++) {
        unsigned char c = (unsigned char)text[i];
        if (!((c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z') || (c >= '0' && c <= '9') || c == '_'))
            return false;
    }
    return true;
}

static flatgain_status tie(struct pattern_reading *reading, const struct fg_cells *cells,
                           const struct fg_cell *cell, const char *word, struct fg_pattern_entry *entry)
{
    entry->kind = FG_ENTRY_TIED;
    for (entry->word = 0; entry->word < reading->word_count; entry->word++)
        if (strcmp(reading->words[entry->word], word) == 0)
            return FLATGAIN_OK;
    if (entry->word == WORDS_MAX)
        return fg_cells_fail(cells, cell, "more than %d different words; expected words that tie entries",
                             WORDS_MAX);
    reading->words[entry->word] = fg_arena_text(reading->scratch, "%s", word);
    if (!reading->words[entry->word])
        return fg_no_memory(cells->error);
    reading->word_count++;
    return FLATGAIN_OK;
}

static flatgain_status read_pattern_cell(void *user, const struct fg_cells *cells, const struct fg_cell *cell)
{
    struct pattern_reading *reading = user;
    const struct flatgain_problem *problem = reading->reader->problem;
    flatgain_status status = inside(reading->reader, cells, cell);
    if (status != FLATGAIN_OK)
        return status;
    struct fg_pattern_entry *entry =
        &reading->entries[(size_t)cell->row * (size_t)problem->p + (size_t)cell->col];
    *entry = (struct fg_pattern_entry){FG_ENTRY_FREE, 0, 1, 0};
    if (!is_word(cell->text, cell->length)) {
        entry->kind = FG_ENTRY_FIXED;
        return fg_cell_number(cells, cell, ", free, or a word that ties entries", &entry->value);
    }
    char word[WORD_LENGTH + 1], quoted[FG_QUOTE_SIZE];
    size_t minus = *cell->text == '-';
    memcpy(word, cell->text + minus, cell->length - minus);
    word[cell->length - minus] = '\0';
    entry->sign = minus ? -1 : 1;
    if (strcmp(word, "free") == 0 && !minus)
        return FLATGAIN_OK;
    fg_quote(cell->text, cell->length, quoted);
    if (strcmp(word, "free") == 0)
        return fg_cells_fail(cells, cell,
                             "-free has no meaning, a free entry takes either sign; expected free");
    if (fg_word_distance(word, "free") <= 1) /* "Free" twice would tie two gains unseen */
        return fg_cells_fail(cells, cell, "%s is too close to free; expected free, or another word", quoted);
    if (fg_word_distance(word, "none") == 0 || fg_word_distance(word, "inf") == 0 ||
        fg_word_distance(word, "nan") == 0 || fg_word_distance(word, "null") == 0)
        return fg_cells_fail(cells, cell, "%s is no pattern word; expected free, a number, or another word",
                             quoted);
    return tie(reading, cells, cell, word, entry);
}

/* free alone stands for every entry. */
static bool spread_free(struct pattern_reading *reading, const struct fg_cells *cells, size_t count)
{
    if (cells->rows != 1 || cells->cols != 1 || reading->entries[0].kind != FG_ENTRY_FREE)
        return false;
    for (size_t e = 1; e < count; e++)
        reading->entries[e] = reading->entries[0];
    return true;
}

static flatgain_status size_of(const struct fg_reader *reader, const struct fg_node *node,
                               const struct fg_cells *cells)
{
    const struct flatgain_problem *problem = reader->problem;
    if (cells->rows == problem->m && cells->cols == problem->p)
        return FLATGAIN_OK;
    return FG_READER_FAIL(
        reader, node, "%s is %d x %d; expected %d x %d (inputs, from B: %d; outputs, from C: %d)",
        cells->what, cells->rows, cells->cols, problem->m, problem->p, problem->m, problem->p);
}

static flatgain_status no_market(const struct fg_reader *reader, const struct fg_node *node,
                                 const struct fg_cells *cells)
{
    if (cells->node || !fg_market_is(cells->text, cells->length))
        return FLATGAIN_OK;
    return FG_READER_FAIL(reader, node, "%s is a Matrix Market file; expected rows of words or numbers (CSV)",
                          cells->what);
}

static flatgain_status read_pattern(struct fg_reader *reader, const struct fg_node *node,
                                    struct pattern_reading *reading, size_t count)
{
    struct fg_cells cells;
    char *owned;
    flatgain_status status = fg_open_cells(reader, node, "pattern", &cells, &owned);
    if (status == FLATGAIN_OK)
        status = no_market(reader, node, &cells);
    if (status == FLATGAIN_OK)
        status = fg_cells_read(&cells, read_pattern_cell, reading);
    if (status == FLATGAIN_OK && !spread_free(reading, &cells, count))
        status = size_of(reader, node, &cells);
    free(owned);
    return status;
}

struct bound_reading {
    const struct fg_reader *reader;
    double none; /* -INFINITY or INFINITY */
    double *at;  /* m x p, row-major */
};

static flatgain_status read_bound_cell(void *user, const struct fg_cells *cells, const struct fg_cell *cell)
{
    struct bound_reading *reading = user;
    flatgain_status status = inside(reading->reader, cells, cell);
    if (status != FLATGAIN_OK)
        return status;
    double *value = &reading->at[(size_t)cell->row * (size_t)reading->reader->problem->p + (size_t)cell->col];
    *value = reading->none;
    if (cell->length == 4 && memcmp(cell->text, "none", 4) == 0)
        return FLATGAIN_OK;
    return fg_cell_number(cells, cell, " or none", value);
}

static flatgain_status read_bound(struct fg_reader *reader, const struct fg_node *node, const char *what,
                                  double none, double *at, size_t count)
{
    struct bound_reading reading = {reader, none, at};
    struct fg_cells cells;
    char *owned;
    flatgain_status status = fg_open_cells(reader, node, what, &cells, &owned);
    if (status == FLATGAIN_OK)
        status = no_market(reader, node, &cells);
    if (status == FLATGAIN_OK)
        status = fg_cells_read(&cells, read_bound_cell, &reading);
    if (status == FLATGAIN_OK && cells.rows == 1 && cells.cols == 1)
        for (size_t e = 1; e < count; e++)
            at[e] = at[0];
    else if (status == FLATGAIN_OK)
        status = size_of(reader, node, &cells);
    free(owned);
    return status;
}

static flatgain_status read_parts(struct fg_reader *reader, const struct fg_node *gain,
                                  struct fg_arena *scratch)
{
    struct flatgain_problem *problem = reader->problem;
    size_t count = (size_t)problem->m * (size_t)problem->p;
    const struct fg_node *pattern = fg_tree_find(gain, "pattern"), *low = fg_tree_find(gain, "lower"),
                         *high = fg_tree_find(gain, "upper"), *today = fg_tree_find(gain, "today");
    struct pattern_reading reading = {.reader = reader, .scratch = scratch};
    reading.entries = fg_arena_get(scratch, count * sizeof *reading.entries);
    reading.words = fg_arena_get(scratch, WORDS_MAX * sizeof *reading.words);
    double *lower = fg_arena_doubles(scratch, count), *upper = fg_arena_doubles(scratch, count);
    if (scratch->failed)
        return fg_no_memory(reader->error);
    flatgain_status status = FLATGAIN_OK;
    if (pattern) {
        fg_places_set(&reader->places, "gain.pattern", pattern->line, pattern->column);
        status = read_pattern(reader, pattern, &reading, count);
    }
    if (status == FLATGAIN_OK && low) {
        fg_places_set(&reader->places, "gain.lower", low->line, low->column);
        status = read_bound(reader, low, "lower", -INFINITY, lower, count);
    }
    if (status == FLATGAIN_OK && high) {
        fg_places_set(&reader->places, "gain.upper", high->line, high->column);
        status = read_bound(reader, high, "upper", INFINITY, upper, count);
    }
    if (status == FLATGAIN_OK && today) {
        problem->has_today = true;
        status = fg_read_matrix(reader, today, "gain.today", "today", &problem->today);
    }
    if (status != FLATGAIN_OK)
        return status;
    const struct fg_pattern_request request = {.entries = pattern ? reading.entries : NULL,
                                               .words = reading.words,
                                               .word_count = reading.word_count,
                                               .lower = low ? lower : NULL,
                                               .upper = high ? upper : NULL};
    return fg_pattern_build(&reader->check, &request);
}

flatgain_status fg_read_gain(struct fg_reader *reader, const struct fg_node *gain)
{
    struct fg_arena scratch = {0};
    flatgain_status status = fg_keys_check(reader, gain, "gain");
    if (status == FLATGAIN_OK)
        status = read_parts(reader, gain, &scratch);
    fg_arena_release(&scratch);
    return status;
}
