#include "base/arena.h"

#include <stdarg.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* Small pieces share blocks of this size. Fault tests set it to 1: then every piece is an allocation of its
 * own, so that each can fail and an address sanitizer sees where each ends. */
#ifndef FG_ARENA_BLOCK
#define FG_ARENA_BLOCK 16384
#endif
enum { ALIGNMENT = 64, BLOCK = FG_ARENA_BLOCK };

struct fg_block {
    struct fg_block *next;
    size_t size, used; /* of the payload */
    char *payload;     /* aligned */
};

static struct fg_block *new_block(size_t size)
{
    struct fg_block *block = calloc(1, sizeof *block + size + ALIGNMENT);
    if (!block)
        return NULL;
    uintptr_t start = (uintptr_t)(block + 1);
    block->payload = (char *)((start + ALIGNMENT - 1) & ~(uintptr_t)(ALIGNMENT - 1));
    block->size = size;
    return block;
}

void *fg_arena_get(struct fg_arena *arena, size_t bytes)
{
    if (bytes > SIZE_MAX / 2) {
        arena->failed = true;
        return NULL;
    }
    bytes = bytes ? (bytes + ALIGNMENT - 1) & ~(size_t)(ALIGNMENT - 1) : ALIGNMENT;
    struct fg_block *block = arena->first;
    if (!block || block->size - block->used < bytes) {
        block = new_block(bytes > BLOCK ? bytes : BLOCK);
        if (!block) {
            arena->failed = true;
            return NULL;
        }
        /* a block that is full at once goes second, so that the half-empty first one stays in use */
        if (bytes > BLOCK && arena->first) {
            block->next = arena->first->next;
            arena->first->next = block;
        } else {
            block->next = arena->first;
            arena->first = block;
        }
    }
    void *piece = block->payload + block->used;
    block->used += bytes;
    return piece;
}

double *fg_arena_doubles(struct fg_arena *arena, size_t count)
{
    if (count > SIZE_MAX / 16) {
        arena->failed = true;
        return NULL;
    }
    return fg_arena_get(arena, count * sizeof(double));
}

int *fg_arena_ints(struct fg_arena *arena, size_t count)
{
    if (count > SIZE_MAX / 16) {
        arena->failed = true;
        return NULL;
    }
    return fg_arena_get(arena, count * sizeof(int));
}

char *fg_arena_text(struct fg_arena *arena, const char *format, ...)
{
    va_list arguments, again;
    va_start(arguments, format);
    va_copy(again, arguments);
    int length = vsnprintf(NULL, 0, format, arguments);
    char *text = length < 0 ? NULL : fg_arena_get(arena, (size_t)length + 1);
    if (text)
        vsnprintf(text, (size_t)length + 1, format, again);
    va_end(again);
    va_end(arguments);
    return text;
}

void fg_arena_release(struct fg_arena *arena)
{
    struct fg_block *block = arena->first;
    while (block) {
        struct fg_block *next = block->next;
        free(block);
        block = next;
    }
    arena->first = NULL;
    arena->failed = false;
}
