#include "write/layout.h"

#include <string.h>

static const char *const INK[] = {"", "\033[1m", "\033[32m", "\033[31m", "\033[33m", "\033[2m"};

static bool continues(char byte)
{
    return ((unsigned char)byte & 0xC0) == 0x80;
}

int fg_columns(const char *text)
{
    int columns = 0;
    for (; *text; text++)
        columns += !continues(*text);
    return columns;
}

/* Bytes of the first `columns` code points. */
static size_t bytes_of(const char *text, int columns)
{
    size_t at = 0;
    while (text[at]) {
        if (!continues(text[at]) && columns-- == 0)
            break;
        at++;
    }
    return at;
}

static void put_bytes(const struct fg_page *page, enum fg_ink ink, const char *text, size_t length)
{
    bool inked = page->color && ink != FG_PLAIN && length > 0;
    if (inked)
        fg_text_add(page->out, INK[ink]);
    fg_text_add_bytes(page->out, text, length);
    if (inked)
        fg_text_add(page->out, "\033[0m");
}

void fg_put(const struct fg_page *page, enum fg_ink ink, const char *text)
{
    put_bytes(page, ink, text, strlen(text));
}

void fg_newline(const struct fg_page *page)
{
    fg_text_add(page->out, "\n");
}

static void blanks(const struct fg_page *page, int count)
{
    while (count-- > 0)
        fg_text_add(page->out, " ");
}

/* Puts at most `columns` columns and returns how many were used. */
static int put_cut(const struct fg_page *page, enum fg_ink ink, const char *text, int columns)
{
    int needed = fg_columns(text);
    if (needed <= columns) {
        fg_put(page, ink, text);
        return needed;
    }
    put_bytes(page, ink, text, bytes_of(text, columns - 1));
    fg_put(page, ink, "~");
    return columns;
}

void fg_put_left(const struct fg_page *page, enum fg_ink ink, const char *text, int columns)
{
    blanks(page, columns - put_cut(page, ink, text, columns));
}

void fg_put_right(const struct fg_page *page, enum fg_ink ink, const char *text, int columns)
{
    blanks(page, columns - fg_columns(text));
    put_cut(page, ink, text, columns);
}

void fg_put_wrapped(const struct fg_page *page, enum fg_ink ink, const char *first, const char *text)
{
    int indent = fg_columns(first), used = indent;
    bool empty = true; /* the line holds no word yet */
    fg_put(page, ink, first);
    while (*text) {
        if (*text == ' ' || *text == '\n' || *text == '\t') {
            text++;
            continue;
        }
        size_t length = strcspn(text, " \n\t");
        int columns = 0;
        for (size_t k = 0; k < length; k++)
            columns += !continues(text[k]);
        if (!empty && used + 1 + columns > page->width) {
            fg_newline(page);
            blanks(page, indent);
            used = indent;
            empty = true;
        }
        int room = page->width - used - !empty;
        if (room < 1)
            room = 1;
        if (columns > room) {
            length = bytes_of(text, room);
            columns = room;
        }
        if (!empty) {
            fg_text_add(page->out, " ");
            used++;
        }
        put_bytes(page, ink, text, length);
        used += columns;
        text += length;
        empty = false;
        if (*text && *text != ' ' && *text != '\n' && *text != '\t') { /* a broken word goes on below */
            fg_newline(page);
            blanks(page, indent);
            used = indent;
            empty = true;
        }
    }
    fg_newline(page);
}

void fg_put_heading(const struct fg_page *page, const char *name, const char *rest)
{
    fg_newline(page);
    fg_put(page, FG_HEAD, name);
    if (rest[0]) {
        fg_text_add(page->out, "   ");
        put_cut(page, FG_FAINT, rest, page->width - fg_columns(name) - 3);
    }
    fg_newline(page);
}
