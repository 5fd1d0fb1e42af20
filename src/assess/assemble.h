/* A run from problem to findings: model, benchmark, search or given gain, margins, modes, words. */
#ifndef FG_ASSESS_ASSEMBLE_H
#define FG_ASSESS_ASSEMBLE_H

#include "assess/findings.h"

/* Each fills *findings (zeroed by the caller); its arena owns everything, also after an error, so the
 * caller releases findings->arena in every case. The problem must outlive the findings.
 * Errors: NO_MEMORY, NUMERICAL. Outcomes such as "not found" are findings, not errors. */
flatgain_status fg_assemble_tune(const struct flatgain_problem *problem, const flatgain_options *options,
                                 struct fg_findings *findings, flatgain_error *error);
/* gain: m x p row-major, finite. */
flatgain_status fg_assemble_judge(const struct flatgain_problem *problem, const double *gain,
                                  struct fg_findings *findings, flatgain_error *error);
flatgain_status fg_assemble_inspect(const struct flatgain_problem *problem, struct fg_findings *findings,
                                    flatgain_error *error);

#endif
