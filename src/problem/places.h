/* Where each key of a problem file stands, so that checks made later can still point at it. */
#ifndef FG_PROBLEM_PLACES_H
#define FG_PROBLEM_PLACES_H

enum { FG_PLACES_MAX = 48 };

struct fg_place {
    const char *key; /* a literal such as "weights.Q" */
    long line, column;
};

struct fg_places {
    const char *name; /* the file, as in messages */
    int count;
    struct fg_place at[FG_PLACES_MAX];
};

/* Notes (or moves) the place of a key. */
void fg_places_set(struct fg_places *places, const char *key, long line, long column);

/* The place of a key, else of the key that contains it ("weights.N": "weights"), else 1:1. */
struct fg_place fg_places_find(const struct fg_places *places, const char *key);

#endif
