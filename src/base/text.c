#include "base/text.h"

#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static bool reserve(struct fg_text *text, size_t more)
{
    if (text->failed)
        return false;
    if (text->room - text->length > more)
        return true;
    size_t room = text->room ? text->room : 256;
    while (room - text->length <= more)
        room *= 2;
    char *at = realloc(text->at, room);
    if (!at) {
        text->failed = true;
        return false;
    }
    text->at = at;
    text->room = room;
    return true;
}

void fg_text_add_bytes(struct fg_text *text, const char *bytes, size_t length)
{
    if (!reserve(text, length))
        return;
    memcpy(text->at + text->length, bytes, length);
    text->length += length;
    text->at[text->length] = '\0';
}

void fg_text_add(struct fg_text *text, const char *string)
{
    fg_text_add_bytes(text, string, strlen(string));
}

void fg_text_format(struct fg_text *text, const char *format, ...)
{
    va_list arguments, again;
    va_start(arguments, format);
    va_copy(again, arguments);
    int length = vsnprintf(NULL, 0, format, arguments);
    if (length >= 0 && reserve(text, (size_t)length)) {
        vsnprintf(text->at + text->length, (size_t)length + 1, format, again);
        text->length += (size_t)length;
    }
    va_end(again);
    va_end(arguments);
}

void fg_text_free(struct fg_text *text)
{
    free(text->at);
    *text = (struct fg_text){0};
}
