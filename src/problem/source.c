#include "problem/source.h"

#include <errno.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

static flatgain_status refuse(char reason[FG_QUOTE_SIZE], const char *why)
{
    snprintf(reason, FG_QUOTE_SIZE, "%s", why);
    return FLATGAIN_CANNOT_READ;
}

static flatgain_status refuse_errno(char reason[FG_QUOTE_SIZE], int number)
{
    char buffer[FG_QUOTE_SIZE];
    return refuse(reason, strerror_r(number, buffer, sizeof buffer));
}

/* Reads to the end, however long the file says it is: it may be a pipe. */
static flatgain_status read_stream(FILE *file, char **text, size_t *length, char reason[FG_QUOTE_SIZE])
{
    size_t room = 65536, used = 0;
    char *at = malloc(room + 1);
    while (at) {
        errno = 0;
        size_t got = fread(at + used, 1, room - used, file);
        used += got;
        if (used > FG_SOURCE_MAX || got == 0)
            break;
        if (used == room) {
            char *more = realloc(at, 2 * room + 1);
            if (!more) {
                free(at);
                return FLATGAIN_NO_MEMORY;
            }
            at = more;
            room *= 2;
        }
    }
    if (!at)
        return FLATGAIN_NO_MEMORY;
    if (used > FG_SOURCE_MAX || ferror(file)) {
        free(at);
        return used > FG_SOURCE_MAX ? refuse(reason, "larger than 50 MB") : refuse_errno(reason, errno);
    }
    at[used] = '\0';
    *text = at;
    *length = used;
    return FLATGAIN_OK;
}

flatgain_status fg_source_read(const char *path, char **text, size_t *length, char reason[FG_QUOTE_SIZE])
{
    *text = NULL;
    *length = 0;
    FILE *file = fopen(path, "rbe");
    if (!file)
        return errno == ENOMEM ? FLATGAIN_NO_MEMORY : refuse_errno(reason, errno);
    struct stat facts;
    flatgain_status status = FLATGAIN_OK;
    if (fstat(fileno(file), &facts) == 0) {
        if (S_ISDIR(facts.st_mode))
            status = refuse(reason, "it is a folder");
        else if (S_ISREG(facts.st_mode) && facts.st_size > (off_t)FG_SOURCE_MAX)
            status = refuse(reason, "larger than 50 MB");
    }
    if (status == FLATGAIN_OK)
        status = read_stream(file, text, length, reason);
    fclose(file);
    return status;
}

flatgain_status fg_source_check(const char *name, const char **text, size_t *length, flatgain_error *error)
{
    const unsigned char *at = (const unsigned char *)*text;
    if (*length > FG_SOURCE_MAX)
        return fg_fail_at(error, FLATGAIN_BAD_PROBLEM, name, 1, 1,
                          "larger than 50 MB; expected a smaller file");
    if (*length >= 2 && ((at[0] == 0xff && at[1] == 0xfe) || (at[0] == 0xfe && at[1] == 0xff)))
        return fg_fail_at(error, FLATGAIN_BAD_PROBLEM, name, 1, 1, "the file is UTF-16; expected UTF-8 text");
    const char *zero = *length ? memchr(*text, 0, *length) : NULL;
    if (zero) {
        long line, column;
        fg_source_place(*text, *length, (size_t)(zero - *text), &line, &column);
        return fg_fail_at(error, FLATGAIN_BAD_PROBLEM, name, line, column,
                          "a zero byte: the file is binary or UTF-16; expected UTF-8 text");
    }
    if (*length >= 3 && at[0] == 0xef && at[1] == 0xbb && at[2] == 0xbf) {
        *text += 3;
        *length -= 3;
    }
    return FLATGAIN_OK;
}

/* One past the line end at `at`, or `at` when there is none. */
static size_t past_end(const char *text, size_t length, size_t at)
{
    if (at < length && text[at] == '\r')
        return at + 1 < length && text[at + 1] == '\n' ? at + 2 : at + 1;
    return at < length && text[at] == '\n' ? at + 1 : at;
}

const char *fg_source_line(const char *text, size_t length, long line, size_t *line_length)
{
    size_t start = 0, at = 0;
    for (long current = 1; at < length; current++) {
        start = at;
        while (at < length && text[at] != '\n' && text[at] != '\r')
            at++;
        if (current == line) {
            *line_length = at - start;
            return text + start;
        }
        at = past_end(text, length, at);
    }
    *line_length = 0;
    return text + length;
}

void fg_source_place(const char *text, size_t length, size_t offset, long *line, long *column)
{
    size_t start = 0;
    *line = 1;
    for (size_t at = 0; at < offset && at < length;) {
        size_t next = past_end(text, length, at);
        if (next > at && next <= offset) {
            (*line)++;
            start = next;
        }
        at = next > at ? next : at + 1;
    }
    *column = 1;
    for (size_t at = start; at < offset && at < length; at++)
        *column += ((unsigned char)text[at] & 0xc0) != 0x80;
}

/* Bytes of the UTF-8 character at `at`, 0 when it is broken. */
static size_t character(const unsigned char *at, size_t left)
{
    size_t size = *at < 0x80                  ? 1
                  : *at >= 0xc2 && *at < 0xe0 ? 2
                  : *at >= 0xe0 && *at < 0xf0 ? 3
                  : *at >= 0xf0 && *at < 0xf5 ? 4
                                              : 0;
    if (size == 0 || size > left)
        return 0;
    for (size_t i = 1; i < size; i++)
        if ((at[i] & 0xc0) != 0x80)
            return 0;
    return size;
}

const char *fg_quote(const char *text, size_t length, char quoted[FG_QUOTE_SIZE])
{
    size_t used = 0, at = 0;
    quoted[used++] = '"';
    while (at < length && used < 44) {
        unsigned char byte = (unsigned char)text[at];
        size_t size = character((const unsigned char *)text + at, length - at);
        bool plain =
            size > 0 && byte >= 0x20 && byte != 0x7f && !(byte == 0xc2 && (unsigned char)text[at + 1] < 0xa0);
        if (plain)
            memcpy(quoted + used, text + at, size);
        else
            quoted[used] = '?';
        used += plain ? size : 1;
        at += size > 0 ? size : 1;
    }
    memcpy(quoted + used, at < length ? "...\"" : "\"", at < length ? 5 : 2);
    return quoted;
}
