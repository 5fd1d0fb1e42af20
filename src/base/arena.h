/* Memory that is taken piece by piece and given back at once. Take all, test once, free once:
 *
 *     struct fg_arena arena = {0};
 *     double *a = fg_arena_get(&arena, bytes), *b = fg_arena_get(&arena, bytes);
 *     if (arena.failed) { fg_arena_release(&arena); return fg_no_memory(error); }
 *
 * An arena belongs to one thread at a time. */
#ifndef FG_BASE_ARENA_H
#define FG_BASE_ARENA_H

#include <stdbool.h>
#include <stddef.h>

struct fg_arena {
    struct fg_block *first;
    bool failed; /* some request failed; stays set */
};

/* `bytes` zeroed bytes, aligned to 64; NULL when memory is out (then arena->failed is set).
 * Zero bytes give a valid pointer. */
void *fg_arena_get(struct fg_arena *arena, size_t bytes);

/* `count` zeroed doubles / ints. */
double *fg_arena_doubles(struct fg_arena *arena, size_t count);
int *fg_arena_ints(struct fg_arena *arena, size_t count);

/* A formatted string; NULL when memory is out. */
char *fg_arena_text(struct fg_arena *arena, const char *format, ...) __attribute__((format(printf, 2, 3)));

/* Frees everything; the arena can be used again. */
void fg_arena_release(struct fg_arena *arena);

#endif
