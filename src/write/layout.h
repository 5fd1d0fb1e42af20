/* Text for a terminal: widths in code points, wrapped paragraphs, styles. */
#ifndef FG_WRITE_LAYOUT_H
#define FG_WRITE_LAYOUT_H

#include "base/text.h"

enum fg_ink { FG_PLAIN, FG_HEAD, FG_GOOD, FG_BAD, FG_CAUTION, FG_FAINT };

struct fg_page {
    struct fg_text *out;
    int width;  /* columns */
    bool color; /* terminal colours */
};

/* Code points in a UTF-8 text: what a column is here. (Wide and combining characters count one.) */
int fg_columns(const char *text);

/* Appends text in an ink; plain when the page has no colours. */
void fg_put(const struct fg_page *page, enum fg_ink ink, const char *text);
void fg_newline(const struct fg_page *page);
/* `columns` columns: the text, cut with "~" when it is longer, padded on the right / left. */
void fg_put_left(const struct fg_page *page, enum fg_ink ink, const char *text, int columns);
void fg_put_right(const struct fg_page *page, enum fg_ink ink, const char *text, int columns);
/* A paragraph wrapped at the page's width: `first` starts it, the other lines get as many blanks. A word
 * longer than the line is broken. */
void fg_put_wrapped(const struct fg_page *page, enum fg_ink ink, const char *first, const char *text);
/* An empty line, then the name of a section and a remark beside it ("" for none). */
void fg_put_heading(const struct fg_page *page, const char *name, const char *rest);

#endif
