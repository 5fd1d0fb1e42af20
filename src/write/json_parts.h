/* Pieces of JSON on top of cJSON, shared by the JSON writers.
 *
 * cJSON compares with a tolerance when it chooses between 15 and 17 digits, so its own numbers can be one
 * unit off in the last place; and it turns NaN into null silently. Here numbers are raw text that reads
 * back exactly, and what is not finite is null on purpose. */
#ifndef FG_WRITE_JSON_PARTS_H
#define FG_WRITE_JSON_PARTS_H

#include <cjson/cJSON.h>
#include <stdbool.h>

#include "assess/findings.h"

/* Collects failures: after the last call `failed` tells whether memory ran out anywhere. */
struct fg_json {
    bool failed;
};

cJSON *fg_json_object(struct fg_json *json, cJSON *parent, const char *key); /* parent NULL: the root */
cJSON *fg_json_array(struct fg_json *json, cJSON *parent, const char *key);  /* key NULL: into an array */
void fg_json_number(struct fg_json *json, cJSON *parent, const char *key, double value);
void fg_json_whole(struct fg_json *json, cJSON *parent, const char *key, long long value);
void fg_json_text(struct fg_json *json, cJSON *parent, const char *key, const char *value); /* NULL: null */
void fg_json_flag(struct fg_json *json, cJSON *parent, const char *key, bool value);
void fg_json_null(struct fg_json *json, cJSON *parent, const char *key);
/* A list of rows; what is not finite becomes null. */
void fg_json_rows(struct fg_json *json, cJSON *parent, const char *key, struct fg_matrix matrix);

/* The normalised problem. */
void fg_json_problem(struct fg_json *json, cJSON *root, const struct flatgain_problem *problem);

#endif
