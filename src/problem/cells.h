/* The entries of a matrix, whatever it was written as: a text block of rows, a list of rows, one row,
 * one number, or a file of rows. Entries go to a reader one by one with their place, so nothing but the
 * result is kept. */
#ifndef FG_PROBLEM_CELLS_H
#define FG_PROBLEM_CELLS_H

#include <stdbool.h>
#include <stddef.h>

#include "linalg/matrix.h"
#include "problem/yaml_tree.h"

struct fg_cell {
    const char *text; /* not NUL-terminated */
    size_t length;
    int row, col;               /* from 0 */
    const struct fg_node *node; /* when it is an entry of a list */
};

struct fg_cells {
    const char *what; /* "A": in messages */
    flatgain_error *error;
    const struct fg_tree *tree; /* the text is `node` of this tree ... */
    const struct fg_node *node;
    const char *name; /* ... or it is the file `name` */
    const char *text;
    size_t length;
    bool single;    /* one number, no matrix: messages name no row and column */
    int rows, cols; /* out: found so far */
};

typedef flatgain_status (*fg_cell_reader)(void *user, const struct fg_cells *cells,
                                          const struct fg_cell *cell);

/* Every entry in reading order. Errors: ragged rows, empty rows and entries, what is no matrix at all. */
flatgain_status fg_cells_read(struct fg_cells *cells, fg_cell_reader reader, void *user);

/* BAD_PROBLEM at the place of an entry; text becomes `WHAT row R, column C: ...`. */
flatgain_status fg_cells_fail(const struct fg_cells *cells, const struct fg_cell *cell, const char *format,
                              ...) __attribute__((format(printf, 3, 4)));

/* A finite number, or an error at its place. `also` names other words the caller takes, e.g.
 * " or none"; "" when there are none. */
flatgain_status fg_cell_number(const struct fg_cells *cells, const struct fg_cell *cell, const char *also,
                               double *value);

/* Numbers in reading order, growing. Free `at` with free(). */
struct fg_numbers {
    double *at;
    size_t count, room;
};
flatgain_status fg_numbers_add(struct fg_numbers *numbers, double value, flatgain_error *error);

/* A Matrix Market file: real, array or coordinate, general or symmetric (Boisvert, Pozo, Remington,
 * NISTIR 5935, 1996). */
bool fg_market_is(const char *text, size_t length);
flatgain_status fg_market_read(const char *what, const char *name, const char *text, size_t length,
                               struct fg_arena *arena, struct fg_matrix *matrix, flatgain_error *error);

/* A matrix of numbers from cells or from a Matrix Market file, into the arena. */
flatgain_status fg_cells_matrix(struct fg_cells *cells, struct fg_arena *arena, struct fg_matrix *matrix);

#endif
