#include "write/json_parts.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#include "base/number.h"

/* Hands the item to its parent; frees it when that fails. Returns the item or NULL. */
static cJSON *adopt(struct fg_json *json, cJSON *parent, const char *key, cJSON *item)
{
    if (!item || !parent) {
        if (!item)
            json->failed = true;
        return item;
    }
    cJSON_bool done = key ? cJSON_AddItemToObject(parent, key, item) : cJSON_AddItemToArray(parent, item);
    if (!done) {
        cJSON_Delete(item);
        json->failed = true;
        return NULL;
    }
    return item;
}

cJSON *fg_json_object(struct fg_json *json, cJSON *parent, const char *key)
{
    return json->failed ? NULL : adopt(json, parent, key, cJSON_CreateObject());
}

cJSON *fg_json_array(struct fg_json *json, cJSON *parent, const char *key)
{
    return json->failed ? NULL : adopt(json, parent, key, cJSON_CreateArray());
}

void fg_json_null(struct fg_json *json, cJSON *parent, const char *key)
{
    if (!json->failed)
        adopt(json, parent, key, cJSON_CreateNull());
}

void fg_json_number(struct fg_json *json, cJSON *parent, const char *key, double value)
{
    char number[FG_NUMBER_SIZE];
    if (!isfinite(value)) {
        fg_json_null(json, parent, key);
        return;
    }
    fg_number_exact(value == 0 ? 0.0 : value, number); /* -0 is written as 0 */
    if (!json->failed)
        adopt(json, parent, key, cJSON_CreateRaw(number));
}

void fg_json_whole(struct fg_json *json, cJSON *parent, const char *key, long long value)
{
    char number[FG_NUMBER_SIZE];
    snprintf(number, sizeof number, "%lld", value);
    if (!json->failed)
        adopt(json, parent, key, cJSON_CreateRaw(number));
}

void fg_json_text(struct fg_json *json, cJSON *parent, const char *key, const char *value)
{
    if (!value)
        fg_json_null(json, parent, key);
    else if (!json->failed)
        adopt(json, parent, key, cJSON_CreateString(value));
}

void fg_json_flag(struct fg_json *json, cJSON *parent, const char *key, bool value)
{
    if (!json->failed)
        adopt(json, parent, key, cJSON_CreateBool(value));
}

void fg_json_rows(struct fg_json *json, cJSON *parent, const char *key, struct fg_matrix matrix)
{
    cJSON *rows = fg_json_array(json, parent, key);
    for (int i = 0; i < matrix.rows && !json->failed; i++) {
        cJSON *row = fg_json_array(json, rows, NULL);
        for (int j = 0; j < matrix.cols && !json->failed; j++)
            fg_json_number(json, row, NULL, FG_AT(matrix, i, j));
    }
}

static void write_signals(struct fg_json *json, cJSON *parent, const char *key,
                          const struct fg_signal *signal, int count, bool output)
{
    cJSON *list = fg_json_array(json, parent, key);
    for (int k = 0; k < count && !json->failed; k++) {
        cJSON *one = fg_json_object(json, list, NULL);
        fg_json_text(json, one, "name", signal[k].name);
        fg_json_text(json, one, "unit", signal[k].unit);
        if (output) {
            fg_json_number(json, one, "lag", signal[k].lag);
            fg_json_flag(json, one, "lag_in_plc", signal[k].lag_in_plc);
        }
    }
}

/* Pattern as it is written in a problem file: "free", a number, or a word; equal words are tied and a minus
 * sign means the negative. Bounds as seen by each entry. */
static void write_pattern(struct fg_json *json, cJSON *parent, const struct fg_pattern *pattern)
{
    cJSON *rows = fg_json_array(json, parent, "pattern");
    cJSON *lower = fg_json_array(json, parent, "lower"), *upper = fg_json_array(json, parent, "upper");
    for (int i = 0; i < pattern->m && !json->failed; i++) {
        cJSON *row = fg_json_array(json, rows, NULL);
        cJSON *low = fg_json_array(json, lower, NULL), *high = fg_json_array(json, upper, NULL);
        for (int j = 0; j < pattern->p && !json->failed; j++) {
            int entry = i + j * pattern->m, index = pattern->index[entry];
            if (index < 0) {
                fg_json_number(json, row, NULL, pattern->fixed[entry]);
                fg_json_null(json, low, NULL);
                fg_json_null(json, high, NULL);
                continue;
            }
            int users = 0;
            for (int k = 0; k < pattern->m * pattern->p; k++)
                users += pattern->index[k] == index;
            bool negative = pattern->sign[entry] < 0;
            char word[32];
            snprintf(word, sizeof word, "%stied%d", negative ? "-" : "", index + 1);
            fg_json_text(json, row, NULL, users == 1 && !negative ? "free" : word);
            fg_json_number(json, low, NULL, negative ? -pattern->upper[index] : pattern->lower[index]);
            fg_json_number(json, high, NULL, negative ? -pattern->lower[index] : pattern->upper[index]);
        }
    }
}

void fg_json_problem(struct fg_json *json, cJSON *root, const struct flatgain_problem *problem)
{
    cJSON *object = fg_json_object(json, root, "problem");
    char hash[24];
    snprintf(hash, sizeof hash, "%016llx", (unsigned long long)problem->hash);
    fg_json_text(json, object, "hash", hash);
    fg_json_text(json, object, "title", problem->title);
    fg_json_text(json, object, "setting", problem->setting == FG_DISCRETE ? "discrete" : "continuous");
    fg_json_text(json, object, "reading", problem->reading == FG_START ? "start" : "average");
    fg_json_text(json, object, "time_unit", problem->time_unit);
    fg_json_whole(json, object, "states", problem->n);
    fg_json_whole(json, object, "inputs", problem->m);
    fg_json_whole(json, object, "outputs", problem->p);
    cJSON *signals = fg_json_object(json, object, "signals");
    write_signals(json, signals, "inputs", problem->inputs, problem->m, false);
    write_signals(json, signals, "outputs", problem->outputs, problem->p, true);
    write_signals(json, signals, "states", problem->states, problem->n, false);
    cJSON *plant = fg_json_object(json, object, "plant");
    fg_json_rows(json, plant, "A", problem->A);
    fg_json_rows(json, plant, "B", problem->B);
    fg_json_rows(json, plant, "C", problem->C);
    fg_json_rows(json, plant, "D", problem->D);
    if (problem->reading == FG_START) {
        cJSON *start = fg_json_object(json, object, "start");
        fg_json_rows(json, start, "X0", problem->W);
    } else {
        cJSON *disturbance = fg_json_object(json, object, "disturbance");
        fg_json_rows(json, disturbance, "W", problem->W);
        cJSON *noise = fg_json_object(json, object, "noise");
        fg_json_rows(json, noise, "V", problem->V);
    }
    cJSON *weights = fg_json_object(json, object, "weights");
    fg_json_rows(json, weights, "Q", problem->Q);
    fg_json_rows(json, weights, "R", problem->R);
    fg_json_rows(json, weights, "N", problem->N);
    cJSON *gain = fg_json_object(json, object, "gain");
    write_pattern(json, gain, &problem->pattern);
    if (problem->has_today)
        fg_json_rows(json, gain, "today", problem->today);
    else
        fg_json_null(json, gain, "today");
    fg_json_number(json, object, "accept", problem->accept_percent);
}
