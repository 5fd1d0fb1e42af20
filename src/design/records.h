/* What each start came to, and what all of them say together. */
#ifndef FG_DESIGN_RECORDS_H
#define FG_DESIGN_RECORDS_H

#include "design/local.h"
#include "design/search.h"

struct fg_record {
    bool done, stabilised;
    double *theta; /* q, natural units */
    double abscissa;
    struct fg_local_answer local; /* when stabilised */
    long evaluations;
};

/* Distinct minima among the first `count` records, best first: their number; for each the start with the
 * smallest residual and how many starts reached it. *converged: starts that ended in a minimum. */
int fg_records_distinct(const struct fg_record *records, int count, double negligible, int *representative,
                        int *hits, int *converged);

/* Boender, Rinnooy Kan, Math. Program. 37 (1987) 59: with w distinct minima in n converged starts the
 * posterior mean of their number is w (n - 1) / (n - w - 2); INFINITY for n <= w + 2. */
double fg_expected_minima(int w, int n);

/* Index of the best record, -1 when no start was stabilised: lowest cost; within the tolerance of distinct
 * minima one that converged goes before one that did not. */
int fg_records_best(const struct fg_record *records, int count);

/* Index of the record closest to stability, -1 when there is none. */
int fg_records_least_unstable(const struct fg_record *records, int count);

int fg_records_stabilised(const struct fg_record *records, int count);

/* What the search came to, given its best record. */
enum fg_search_end fg_records_end(const struct fg_record *records, int count, int best);

#endif
