/* What must hold for every result, however strange the problem was. */
#ifndef TESTS_SANE_H
#define TESTS_SANE_H

#include "flatgain.h"

/* Fails the running test unless: the gain is finite; every cost is finite or NAN; the JSON parses and the
 * text is there, in every style; the outcome, the gain and the costs agree with each other; and, for a gain
 * that was tuned, judging it again gives the same cost. `what` is told when something fails. */
void check_result(const flatgain_problem *problem, const flatgain_result *result, const char *what);

/* Tunes with few starts, judges `gain` (NULL: zeros) and inspects, and checks all three results. A call may
 * end in FLATGAIN_NUMERICAL with a text; nothing else is an answer to finite data. Returns how many results
 * there were. Frees nothing that it was given. */
int work_with(const flatgain_problem *problem, const double *gain, const char *what);

#endif
