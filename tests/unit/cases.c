#include "cases.h"

#include <dirent.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const char *cases_folder(void)
{
    const char *folder = getenv("FLATGAIN_CASES");
    return folder && *folder ? folder : "tests/cases";
}

static char *read_whole(const char *path)
{
    FILE *file = fopen(path, "rb");
    if (!file)
        return NULL;
    fseek(file, 0, SEEK_END);
    long size = ftell(file);
    rewind(file);
    char *text = size < 0 ? NULL : malloc((size_t)size + 1);
    if (text && fread(text, 1, (size_t)size, file) != (size_t)size) {
        free(text);
        text = NULL;
    }
    if (text)
        text[size] = '\0';
    fclose(file);
    return text;
}

double *case_matrix(const cJSON *json, int *rows, int *cols)
{
    if (!cJSON_IsArray(json) || !cJSON_IsArray(json->child))
        return NULL;
    *rows = cJSON_GetArraySize(json);
    *cols = cJSON_GetArraySize(json->child);
    double *at = malloc(sizeof(double) * (size_t)(*rows * *cols + 1));
    size_t used = 0;
    for (const cJSON *row = json->child; at && row; row = row->next) {
        if (cJSON_GetArraySize(row) != *cols) {
            free(at);
            return NULL;
        }
        for (const cJSON *entry = row->child; entry; entry = entry->next)
            at[used++] = entry->valuedouble;
    }
    return at;
}

/* False when the key is there with another size than r x c. */
static bool take(const struct case_data *data, const char *key, int r, int c, double **at)
{
    const cJSON *json = cJSON_GetObjectItemCaseSensitive(data->root, key);
    int rows = 0, cols = 0;
    *at = case_matrix(json, &rows, &cols);
    return !*at || (rows == r && cols == c);
}

bool case_load(const char *name, struct case_data *out)
{
    *out = (struct case_data){0};
    char path[1024];
    snprintf(path, sizeof path, "%s/%s.json", cases_folder(), name);
    snprintf(out->name, sizeof out->name, "%s", name);
    char *text = read_whole(path);
    out->root = text ? cJSON_Parse(text) : NULL;
    free(text);
    if (!out->root) {
        fprintf(stderr, "cases: cannot read %s\n", path);
        return false;
    }
    const cJSON *setting = cJSON_GetObjectItemCaseSensitive(out->root, "setting");
    out->discrete = cJSON_IsString(setting) && strcmp(setting->valuestring, "discrete") == 0;
    int rows, cols;
    double *A = case_matrix(cJSON_GetObjectItemCaseSensitive(out->root, "A"), &out->n, &cols);
    double *B = case_matrix(cJSON_GetObjectItemCaseSensitive(out->root, "B"), &rows, &out->m);
    double *C = case_matrix(cJSON_GetObjectItemCaseSensitive(out->root, "C"), &out->p, &cols);
    free(A);
    free(B);
    free(C);
    int n = out->n, m = out->m, p = out->p;
    if (A && B && C && take(out, "A", n, n, &out->A) && take(out, "B", n, m, &out->B) &&
        take(out, "C", p, n, &out->C) && take(out, "D", p, m, &out->D) && take(out, "Q", n, n, &out->Q) &&
        take(out, "R", m, m, &out->R) && take(out, "N", n, m, &out->N) && take(out, "W", n, n, &out->W) &&
        take(out, "V", p, p, &out->V) && take(out, "V_lqg_only", p, p, &out->V_lqg))
        return true;
    fprintf(stderr, "cases: %s has no A, B, C or sizes that disagree\n", path);
    case_free(out);
    return false;
}

void case_free(struct case_data *data)
{
    double *all[] = {data->A, data->B, data->C, data->D, data->Q,
                     data->R, data->N, data->W, data->V, data->V_lqg};
    for (size_t i = 0; i < sizeof all / sizeof *all; i++)
        free(all[i]);
    cJSON_Delete(data->root);
    *data = (struct case_data){0};
}

flatgain_problem *case_problem(const struct case_data *data)
{
    if (!data->Q || !data->R || !data->W) {
        fprintf(stderr, "cases: %s has no Q, R or W\n", data->name);
        return NULL;
    }
    flatgain_matrices matrices = {
        .discrete = data->discrete,
        .states = data->n,
        .inputs = data->m,
        .outputs = data->p,
        .A = data->A,
        .B = data->B,
        .C = data->C,
        .D = data->D,
        .Q = data->Q,
        .R = data->R,
        .N = data->N,
        .W = data->W,
        .V = data->discrete ? data->V : NULL,
        .accept_percent = NAN,
    };
    flatgain_problem *problem = NULL;
    flatgain_error error = {0};
    if (flatgain_problem_from_matrices(&matrices, &problem, &error) != FLATGAIN_OK)
        fprintf(stderr, "cases: %s: %s\n", data->name, error.text);
    return problem;
}

static int is_case(const struct dirent *entry)
{
    size_t length = strlen(entry->d_name);
    return length > 5 && strcmp(entry->d_name + length - 5, ".json") == 0;
}

char **case_names(void)
{
    struct dirent **found = NULL;
    int count = scandir(cases_folder(), &found, is_case, alphasort);
    char **names = calloc((size_t)(count > 0 ? count : 0) + 1, sizeof *names);
    for (int i = 0; i < count; i++) {
        if (names)
            names[i] = strndup(found[i]->d_name, strlen(found[i]->d_name) - 5);
        free(found[i]);
    }
    free(found);
    return names;
}

void case_names_free(char **names)
{
    for (char **at = names; at && *at; at++)
        free(*at);
    free(names);
}

double case_number(const struct case_data *data, const char *section, const char *key)
{
    const cJSON *item = cJSON_GetObjectItemCaseSensitive(data->root, section);
    item = cJSON_GetObjectItemCaseSensitive(item, key);
    return cJSON_IsNumber(item) ? item->valuedouble : NAN;
}
