/* A growing text. An append that fails for lack of memory sets `failed` and keeps what is there. */
#ifndef FG_BASE_TEXT_H
#define FG_BASE_TEXT_H

#include <stdbool.h>
#include <stddef.h>

struct fg_text {
    char *at; /* NUL-terminated once anything was added, else NULL */
    size_t length, room;
    bool failed;
};

void fg_text_add(struct fg_text *text, const char *string);
void fg_text_add_bytes(struct fg_text *text, const char *bytes, size_t length);
void fg_text_format(struct fg_text *text, const char *format, ...) __attribute__((format(printf, 2, 3)));
void fg_text_free(struct fg_text *text);

#endif
