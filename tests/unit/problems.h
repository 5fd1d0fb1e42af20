/* Plants of the tests as problems of the public interface, and results looked into. */
#ifndef FG_TESTS_PROBLEMS_H
#define FG_TESTS_PROBLEMS_H

#include <cjson/cJSON.h>

#include "cases.h"
#include "plant/model.h"

/* The plant of a case as it stands (V_lqg_only as V where `benchmark`, else V). Memory from the arena. */
struct fg_plant case_plant(const struct case_data *data, bool benchmark, struct fg_arena *arena);

/* The problem of a plant; fixed, lower, upper, today (m x p) and lag (p) row-major or NULL. Fails the test
 * when the library refuses it. */
struct problem_extras {
    const double *fixed, *lower, *upper, *today, *lag;
};
flatgain_problem *plant_problem(const struct fg_plant *plant, const struct problem_extras *extras);

/* The same through a problem file with the pattern as text, rows divided by newlines: "a free\n-a 0". */
flatgain_problem *plant_problem_tied(const struct fg_plant *plant, const char *pattern);

/* flatgain_tune with one thread and the defaults; flatgain_judge. Fail the test on an error. */
flatgain_result *tune(const flatgain_problem *problem);
flatgain_result *judge(const flatgain_problem *problem, const double *gain);

/* The result as JSON, to be freed with cJSON_Delete. */
cJSON *result_tree(const flatgain_result *result);
/* A number by path "search/minima/0/cost"; NAN when it is null or missing. */
double tree_number(const cJSON *tree, const char *path);
const cJSON *tree_find(const cJSON *tree, const char *path);
/* The result has a warning with this code. */
bool has_warning(const flatgain_result *result, const char *code);

#endif
