/* From what the user wrote about each entry of K to the free parameters of the search. */
#ifndef FG_PROBLEM_PATTERN_H
#define FG_PROBLEM_PATTERN_H

#include "problem/check.h"

enum fg_entry_kind { FG_ENTRY_FREE, FG_ENTRY_FIXED, FG_ENTRY_TIED };

struct fg_pattern_entry {
    enum fg_entry_kind kind;
    double value; /* fixed there */
    double sign;  /* tied: +1 or -1 */
    int word;     /* tied: which word, from 0 */
};

/* Row-major m x p as in the file; NULL: all free, no bounds. */
struct fg_pattern_request {
    const struct fg_pattern_entry *entries;
    const char *const *words; /* `word_count` words, for messages */
    int word_count;
    const double *lower; /* -INFINITY = none */
    const double *upper; /* INFINITY = none */
};

/* Fills problem->pattern. A tied gain takes the intersection of its bounds, sign included. A parameter
 * whose bounds meet is fixed there. Errors: a fixed value outside its bounds, bounds that leave nothing. */
flatgain_status fg_pattern_build(const struct fg_check *check, const struct fg_pattern_request *request);

/* Warns when the gain in use today breaks the pattern or the bounds. */
flatgain_status fg_pattern_check_today(const struct fg_check *check);

#endif
