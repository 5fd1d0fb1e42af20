/* The published and open test cases in tests/cases/, read with cJSON. */
#ifndef FG_TESTS_CASES_H
#define FG_TESTS_CASES_H

#include <cjson/cJSON.h>
#include <stdbool.h>

#include "flatgain.h"

struct case_data {
    char name[64];
    bool discrete;
    int n, m, p;
    /* Row-major as in flatgain.h; NULL where the case has none (null or missing). */
    double *A;     /* n x n */
    double *B;     /* n x m */
    double *C;     /* p x n */
    double *D;     /* p x m */
    double *Q;     /* n x n */
    double *R;     /* m x m */
    double *N;     /* n x m */
    double *W;     /* n x n */
    double *V;     /* p x p */
    double *V_lqg; /* p x p, "V_lqg_only": noise of the LQG benchmark alone */
    cJSON *root;   /* everything, for published and known values */
};

/* Reads tests/cases/NAME.json: NAME without folder or suffix. The folder is $FLATGAIN_CASES, else
 * tests/cases below the current directory. False, with a line on stderr, when the file cannot be read or
 * has no A, B, C (raw response models). Free with case_free. */
bool case_load(const char *name, struct case_data *out);
void case_free(struct case_data *data);

/* The problem of a case through flatgain_problem_from_matrices, NULL with a line on stderr when that
 * fails or Q, R or W is missing. A continuous V is left out: it would need a sensor lag. */
flatgain_problem *case_problem(const struct case_data *data);

/* Every case name in the folder, sorted, NULL at the end; free with case_names_free. */
char **case_names(void);
void case_names_free(char **names);

/* A number below known, published, ... by path, e.g. case_number(&data, "known", "best_J"); NAN if absent. */
double case_number(const struct case_data *data, const char *section, const char *key);

/* A matrix (list of rows) given as JSON: row-major, malloc'd, sizes out; NULL when it is not one. */
double *case_matrix(const cJSON *json, int *rows, int *cols);

#endif
