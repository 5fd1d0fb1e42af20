#include "problems.h"

#include <check.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

struct fg_plant case_plant(const struct case_data *data, bool benchmark, struct fg_arena *arena)
{
    int n = data->n, m = data->m, p = data->p;
    struct fg_plant q = {.discrete = data->discrete, .n = n, .m = m, .p = p};
    q.A = fg_matrix_from_rows(arena, n, n, data->A);
    q.B = fg_matrix_from_rows(arena, n, m, data->B);
    q.C = fg_matrix_from_rows(arena, p, n, data->C);
    q.D = data->D ? fg_matrix_from_rows(arena, p, m, data->D) : fg_matrix_new(arena, p, m);
    q.Q = fg_matrix_from_rows(arena, n, n, data->Q);
    q.R = fg_matrix_from_rows(arena, m, m, data->R);
    q.N = data->N ? fg_matrix_from_rows(arena, n, m, data->N) : fg_matrix_new(arena, n, m);
    q.W = fg_matrix_from_rows(arena, n, n, data->W);
    const double *V = benchmark && data->V_lqg ? data->V_lqg : data->V;
    q.V = V ? fg_matrix_from_rows(arena, p, p, V) : fg_matrix_new(arena, p, p);
    return q;
}

flatgain_problem *plant_problem(const struct fg_plant *q, const struct problem_extras *extras)
{
    static const struct problem_extras none;
    struct fg_arena arena = {0};
    const struct fg_matrix *from[] = {&q->A, &q->B, &q->C, &q->D, &q->Q, &q->R, &q->N, &q->W, &q->V};
    double *rows[9];
    for (int i = 0; i < 9; i++) {
        rows[i] = fg_arena_doubles(&arena, (size_t)from[i]->rows * from[i]->cols);
        fg_matrix_to_rows(*from[i], rows[i]);
    }
    if (!extras)
        extras = &none;
    flatgain_matrices matrices = {.discrete = q->discrete,
                                  .states = q->n,
                                  .inputs = q->m,
                                  .outputs = q->p,
                                  .A = rows[0],
                                  .B = rows[1],
                                  .C = rows[2],
                                  .D = rows[3],
                                  .Q = rows[4],
                                  .R = rows[5],
                                  .N = rows[6],
                                  .W = rows[7],
                                  .V = fg_matrix_is_zero(q->V) ? NULL : rows[8],
                                  .lag = extras->lag,
                                  .fixed = extras->fixed,
                                  .lower = extras->lower,
                                  .upper = extras->upper,
                                  .today = extras->today,
                                  .accept_percent = NAN};
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    ck_assert_msg(flatgain_problem_from_matrices(&matrices, &problem, &error) == FLATGAIN_OK, "%s",
                  error.text);
    fg_arena_release(&arena);
    return problem;
}

static void print_matrix(FILE *out, const char *key, struct fg_matrix a)
{
    fprintf(out, "  %s: [", key);
    for (int i = 0; i < a.rows; i++) {
        fprintf(out, "%s[", i ? ", " : "");
        for (int j = 0; j < a.cols; j++)
            fprintf(out, "%s%.17g", j ? ", " : "", FG_AT(a, i, j));
        fprintf(out, "]");
    }
    fprintf(out, "]\n");
}

flatgain_problem *plant_problem_tied(const struct fg_plant *q, const char *pattern)
{
    char *text = NULL;
    size_t length = 0;
    FILE *out = open_memstream(&text, &length);
    ck_assert_ptr_nonnull(out);
    fprintf(out, "setting: %s\nplant:\n", q->discrete ? "discrete" : "continuous");
    print_matrix(out, "A", q->A);
    print_matrix(out, "B", q->B);
    print_matrix(out, "C", q->C);
    print_matrix(out, "D", q->D);
    fprintf(out, "disturbance:\n");
    print_matrix(out, "W", q->W);
    if (!fg_matrix_is_zero(q->V)) {
        fprintf(out, "noise:\n");
        print_matrix(out, "V", q->V);
    }
    fprintf(out, "weights:\n");
    print_matrix(out, "Q", q->Q);
    print_matrix(out, "R", q->R);
    print_matrix(out, "N", q->N);
    fprintf(out, "gain:\n  pattern: |\n    ");
    for (const char *at = pattern; *at; at++)
        fprintf(out, *at == '\n' ? "\n    " : "%c", *at);
    fprintf(out, "\n");
    fclose(out);
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    ck_assert_msg(flatgain_problem_parse(text, length, "test", NULL, &problem, &error) == FLATGAIN_OK,
                  "%s\n%s", error.text, text);
    free(text);
    return problem;
}

flatgain_result *tune(const flatgain_problem *problem)
{
    flatgain_options options = flatgain_options_default();
    flatgain_error error = {0};
    flatgain_result *result = NULL;
    options.threads = 1;
    ck_assert_msg(flatgain_tune(problem, &options, &result, &error) == FLATGAIN_OK, "%s", error.text);
    return result;
}

flatgain_result *judge(const flatgain_problem *problem, const double *gain)
{
    flatgain_error error = {0};
    flatgain_result *result = NULL;
    ck_assert_msg(flatgain_judge(problem, gain, NULL, &result, &error) == FLATGAIN_OK, "%s", error.text);
    ck_assert_int_eq(flatgain_result_outcome(result), FLATGAIN_JUDGED);
    return result;
}

cJSON *result_tree(const flatgain_result *result)
{
    char *text = NULL;
    ck_assert_int_eq(flatgain_result_json(result, NULL, &text, NULL), FLATGAIN_OK);
    cJSON *tree = cJSON_Parse(text);
    ck_assert_ptr_nonnull(tree);
    flatgain_text_free(text);
    return tree;
}

const cJSON *tree_find(const cJSON *tree, const char *path)
{
    char key[64];
    while (tree && *path) {
        size_t length = strcspn(path, "/");
        snprintf(key, sizeof key, "%.*s", (int)length, path);
        tree = cJSON_IsArray(tree) ? cJSON_GetArrayItem(tree, atoi(key))
                                   : cJSON_GetObjectItemCaseSensitive(tree, key);
        path += length + (path[length] == '/');
    }
    return tree;
}

double tree_number(const cJSON *tree, const char *path)
{
    const cJSON *item = tree_find(tree, path);
    return cJSON_IsNumber(item) ? item->valuedouble : NAN;
}

bool has_warning(const flatgain_result *result, const char *code)
{
    cJSON *tree = result_tree(result), *one;
    bool found = false;
    cJSON_ArrayForEach(one, cJSON_GetObjectItemCaseSensitive(tree, "warnings"))
    {
        const char *text = cJSON_GetStringValue(cJSON_GetObjectItemCaseSensitive(one, "code"));
        found = found || (text && strcmp(text, code) == 0);
    }
    cJSON_Delete(tree);
    return found;
}
