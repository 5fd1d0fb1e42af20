/* A random continuous plant with n states, 3 inputs and 3 outputs and a few unstable poles, as a problem. */
#ifndef TESTS_RANDOM_PROBLEM_H
#define TESTS_RANDOM_PROBLEM_H

#include "flatgain.h"

flatgain_problem *random_problem(int n); /* NULL with a line on stderr on failure */

#endif
