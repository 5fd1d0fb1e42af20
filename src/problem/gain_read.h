/* A gain from memory: what flatgain_gain_read does once the file is read. `gain` m x p row-major. */
#ifndef FG_PROBLEM_GAIN_READ_H
#define FG_PROBLEM_GAIN_READ_H

#include "problem/problem.h"

flatgain_status fg_gain_parse(const char *text, size_t length, const char *name,
                              const struct flatgain_problem *problem, double *gain, flatgain_error *error);

#endif
