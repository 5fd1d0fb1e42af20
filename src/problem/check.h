/* Checks of a problem and how they speak: an error or a warning at the place of a key. */
#ifndef FG_PROBLEM_CHECK_H
#define FG_PROBLEM_CHECK_H

#include "problem/places.h"
#include "problem/problem.h"

/* No matrix has more entries: 2000 x 2000. Beyond it a typing mistake is likelier than a plant, and one
 * evaluation of the cost takes minutes. */
enum { FG_ENTRIES_MAX = 4000000 };

struct fg_check {
    struct flatgain_problem *problem;
    const struct fg_places *where; /* NULL: no file */
    flatgain_error *error;
};

/* FLATGAIN_BAD_PROBLEM at the place of `key`. */
flatgain_status fg_check_fail(const struct fg_check *check, const char *key, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* Adds a warning to the problem. OK or NO_MEMORY. */
flatgain_status fg_check_warn(const struct fg_check *check, const char *key, const char *code,
                              const char *format, ...) __attribute__((format(printf, 4, 5)));

/* M = M' >= 0, M n x n, called `what` in messages.
 * Units must not matter, so M is judged after scaling to unit diagonal. Asymmetric or indefinite by
 * less than 1e-4 relative: M is replaced by its projection (symmetric part, negative eigenvalues set to
 * zero) with a warning of the given code. By more: BAD_PROBLEM naming the worst pair of entries or the
 * negative eigenvalue. Differences of the size of rounding errors are set right without a word. */
flatgain_status fg_check_semidefinite(const struct fg_check *check, const char *key, const char *what,
                                      const char *code, struct fg_matrix M);

/* M has the sizes named by the letters: n states, m inputs, p outputs. */
flatgain_status fg_check_size(const struct fg_check *check, const char *key, const char *what,
                              struct fg_matrix M, char rows, char cols);

/* [Q N; N' R] >= 0, the same way; N is judged with Q and R. */
flatgain_status fg_check_weights(const struct fg_check *check);

/* FNV-1a, 64 bits, of everything that matters to the answer. */
uint64_t fg_problem_hash(const struct flatgain_problem *problem);

#endif
