/* What flatgain_result is: findings, and the problem they are about. */
#ifndef FG_API_RESULT_H
#define FG_API_RESULT_H

#include "assess/findings.h"

struct flatgain_result {
    struct flatgain_problem *problem; /* one reference is held */
    struct fg_findings findings;
};

#endif
