/* An empty problem with one reference: everything zero, accept not stated. NULL when memory is out. */
#ifndef FG_PROBLEM_MAKE_H
#define FG_PROBLEM_MAKE_H

#include "problem/problem.h"

struct flatgain_problem *fg_problem_new(void);

#endif
