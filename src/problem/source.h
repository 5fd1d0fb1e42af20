/* Bytes of a file as they came: reading them, finding lines in them, quoting them. */
#ifndef FG_PROBLEM_SOURCE_H
#define FG_PROBLEM_SOURCE_H

#include <stddef.h>

#include "base/status.h"

/* Larger files are refused. */
#define FG_SOURCE_MAX ((size_t)50 * 1024 * 1024)

enum { FG_QUOTE_SIZE = 64 };

/* The whole file, to be freed with free(). On CANNOT_READ `reason` says why ("No such file ..."). */
flatgain_status fg_source_read(const char *path, char **text, size_t *length, char reason[FG_QUOTE_SIZE]);

/* Refuses what is not UTF-8 text at first sight (UTF-16, zero bytes, too large) and steps over a UTF-8
 * byte order mark. */
flatgain_status fg_source_check(const char *name, const char **text, size_t *length, flatgain_error *error);

/* Line `line` (from 1) without its end; 0 bytes when there is none. Ends: LF, CR LF, CR. */
const char *fg_source_line(const char *text, size_t length, long line, size_t *line_length);

/* Line and column (from 1, in characters) of a byte. */
void fg_source_place(const char *text, size_t length, size_t offset, long *line, long *column);

/* "text" in double quotes, shortened, control characters and broken UTF-8 replaced. Returns `quoted`. */
const char *fg_quote(const char *text, size_t length, char quoted[FG_QUOTE_SIZE]);

#endif
