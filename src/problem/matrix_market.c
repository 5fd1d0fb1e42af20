/* Matrix Market exchange format (Boisvert, Pozo, Remington, NISTIR 5935, 1996): real or integer, array or
 * coordinate, general or symmetric. Numbers may be spread over lines as they like. */
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

#include "base/number.h"
#include "problem/cells.h"
#include "problem/check.h"
#include "problem/source.h"

static const char BANNER[] = "%%MatrixMarket";

struct market {
    const char *what, *name, *text;
    size_t length, at; /* next byte */
    size_t token;      /* start of the newest token */
    flatgain_error *error;
    bool coordinate, symmetric;
    long rows, cols, entries;
};

static flatgain_status fail(const struct market *market, size_t offset, const char *text)
{
    long line, column;
    fg_source_place(market->text, market->length, offset, &line, &column);
    return fg_fail_at(market->error, FLATGAIN_BAD_PROBLEM, market->name, line, column, "%s: %s", market->what,
                      text);
}

bool fg_market_is(const char *text, size_t length)
{
    return length >= sizeof BANNER - 1 && strncasecmp(text, BANNER, sizeof BANNER - 1) == 0;
}

static bool is_space(char c)
{
    return c == ' ' || c == '\t' || c == '\n' || c == '\r';
}

/* The next word; length 0 at the end of the file. */
static size_t next_token(struct market *market)
{
    while (market->at < market->length && is_space(market->text[market->at]))
        market->at++;
    market->token = market->at;
    while (market->at < market->length && !is_space(market->text[market->at]))
        market->at++;
    return market->at - market->token;
}

static bool token_is(const struct market *market, const char *word)
{
    size_t length = market->at - market->token;
    return strlen(word) == length && strncasecmp(market->text + market->token, word, length) == 0;
}

/* %%MatrixMarket matrix coordinate real general */
static flatgain_status banner(struct market *market)
{
    next_token(market);
    next_token(market);
    if (!token_is(market, "matrix"))
        return fail(market, market->token, "not a matrix; expected %%MatrixMarket matrix");
    next_token(market);
    market->coordinate = token_is(market, "coordinate");
    if (!market->coordinate && !token_is(market, "array"))
        return fail(market, market->token, "unknown storage; expected array or coordinate");
    next_token(market);
    if (!token_is(market, "real") && !token_is(market, "integer"))
        return fail(market, market->token, "not a matrix of real numbers; expected real or integer");
    next_token(market);
    market->symmetric = token_is(market, "symmetric");
    if (!market->symmetric && !token_is(market, "general"))
        return fail(market, market->token, "unknown symmetry; expected general or symmetric");
    while (market->at < market->length) { /* comments */
        while (market->at < market->length && is_space(market->text[market->at]))
            market->at++;
        if (market->at == market->length || market->text[market->at] != '%')
            break;
        while (market->at < market->length && market->text[market->at] != '\n' &&
               market->text[market->at] != '\r')
            market->at++;
    }
    return FLATGAIN_OK;
}

static flatgain_status whole_number(struct market *market, long low, long high, long *value)
{
    size_t length = next_token(market);
    double read;
    char text[100];
    if (length == 0)
        return fail(market, market->token, "the file ends too early; expected a whole number");
    if (length > 20 || fg_number_read(market->text + market->token, length, &read) != FG_NUMBER_OK ||
        read != floor(read) || read < (double)low || read > (double)high) {
        snprintf(text, sizeof text, "not a size or index; expected a whole number from %ld to %ld", low,
                 high);
        return fail(market, market->token, text);
    }
    *value = (long)read;
    return FLATGAIN_OK;
}

static flatgain_status size_line(struct market *market)
{
    flatgain_status status = whole_number(market, 1, FG_ENTRIES_MAX, &market->rows);
    if (status == FLATGAIN_OK)
        status = whole_number(market, 1, FG_ENTRIES_MAX, &market->cols);
    if (status != FLATGAIN_OK)
        return status;
    if ((double)market->rows * (double)market->cols > FG_ENTRIES_MAX)
        return fail(market, market->token, "more than 4000000 entries; expected a smaller matrix");
    if (market->symmetric && market->rows != market->cols)
        return fail(market, market->token, "symmetric but not square; expected as many rows as columns");
    return market->coordinate ? whole_number(market, 0, market->rows * market->cols, &market->entries)
                              : FLATGAIN_OK;
}

static flatgain_status number(struct market *market, double *value)
{
    size_t length = next_token(market);
    if (length == 0)
        return fail(market, market->token, "the file ends too early; expected a number");
    struct fg_cell cell = {.text = market->text + market->token, .length = length};
    char quoted[FG_QUOTE_SIZE], text[160];
    enum fg_number_fault fault = length > 300 ? FG_NUMBER_NOT : fg_number_read(cell.text, length, value);
    if (fault == FG_NUMBER_OK)
        return FLATGAIN_OK;
    snprintf(text, sizeof text, "%s is %s; expected a finite number", fg_quote(cell.text, length, quoted),
             fault == FG_NUMBER_TOO_LARGE ? "too large" : "not a number");
    return fail(market, market->token, text);
}

/* Column by column; of a symmetric matrix the lower triangle only. */
static flatgain_status array(struct market *market, struct fg_matrix M)
{
    for (int j = 0; j < M.cols; j++)
        for (int i = market->symmetric ? j : 0; i < M.rows; i++) {
            flatgain_status status = number(market, &FG_AT(M, i, j));
            if (status != FLATGAIN_OK)
                return status;
            if (market->symmetric)
                FG_AT(M, j, i) = FG_AT(M, i, j);
        }
    return FLATGAIN_OK;
}

static flatgain_status coordinate(struct market *market, struct fg_matrix M)
{
    size_t count = (size_t)M.rows * (size_t)M.cols;
    for (size_t e = 0; e < count; e++)
        M.at[e] = NAN; /* not given yet: finds entries that are given twice */
    for (long k = 0; k < market->entries; k++) {
        long i, j;
        double value;
        flatgain_status status = whole_number(market, 1, M.rows, &i);
        size_t start = market->token;
        if (status == FLATGAIN_OK)
            status = whole_number(market, 1, M.cols, &j);
        if (status == FLATGAIN_OK)
            status = number(market, &value);
        if (status != FLATGAIN_OK)
            return status;
        if (market->symmetric && j > i)
            return fail(market, start,
                        "above the diagonal of a symmetric matrix; expected the lower triangle only");
        if (!isnan(FG_AT(M, i - 1, j - 1)))
            return fail(market, start, "this entry is given twice; expected it once");
        FG_AT(M, i - 1, j - 1) = value;
        if (market->symmetric)
            FG_AT(M, j - 1, i - 1) = value;
    }
    for (size_t e = 0; e < count; e++)
        if (isnan(M.at[e]))
            M.at[e] = 0;
    return FLATGAIN_OK;
}

flatgain_status fg_market_read(const char *what, const char *name, const char *text, size_t length,
                               struct fg_arena *arena, struct fg_matrix *matrix, flatgain_error *error)
{
    struct market market = {.what = what, .name = name, .text = text, .length = length, .error = error};
    flatgain_status status = banner(&market);
    if (status == FLATGAIN_OK)
        status = size_line(&market);
    if (status != FLATGAIN_OK)
        return status;
    *matrix = fg_matrix_new(arena, (int)market.rows, (int)market.cols);
    if (!matrix->at)
        return fg_no_memory(error);
    status = market.coordinate ? coordinate(&market, *matrix) : array(&market, *matrix);
    if (status == FLATGAIN_OK && next_token(&market) > 0)
        status =
            fail(&market, market.token, "more numbers than the size line says; expected the end of the file");
    return status;
}
