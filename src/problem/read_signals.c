/* The section `signals` (names, units, sensor lags) and `noise.lag`. */
#include <stdio.h>
#include <string.h>

#include "problem/cells.h"
#include "problem/reader.h"
#include "problem/source.h"

enum { NAME_MAX_BYTES = 60, UNIT_MAX_BYTES = 30 };

static flatgain_status read_output(struct fg_reader *reader, const struct fg_node *map,
                                   struct fg_signal *signal)
{
    const struct fg_node *lag = fg_tree_find(map, "lag"), *filter = fg_tree_find(map, "filter");
    flatgain_status status = FLATGAIN_OK;
    if (lag) {
        status = fg_read_number(reader, lag, "lag", &signal->lag);
        if (status == FLATGAIN_OK && signal->lag < 0)
            return FG_READER_FAIL(reader, lag, "lag is negative; expected a time constant of 0 or more");
        if (status == FLATGAIN_OK && reader->problem->setting == FG_DISCRETE)
            return FG_READER_FAIL_KEY(
                reader, lag,
                "lag in the discrete setting; expected none: a sensor filter belongs into "
                "the discrete matrices");
    }
    if (status != FLATGAIN_OK || !filter)
        return status;
    const char *word = filter->kind == FG_NODE_SCALAR ? filter->text : "";
    signal->lag_in_plc = strcmp(word, "plc") == 0;
    if (!signal->lag_in_plc && strcmp(word, "transmitter") != 0)
        return FG_READER_FAIL(reader, filter, "filter is neither transmitter nor plc; expected one of them");
    return FLATGAIN_OK;
}

static flatgain_status read_signal(struct fg_reader *reader, const struct fg_node *node, const char *kind,
                                   struct fg_signal *signal)
{
    if (node->kind != FG_NODE_MAP)
        return fg_read_text(reader, node, "the name", NAME_MAX_BYTES, &signal->name);
    const struct fg_node *name = fg_tree_find(node, "name"), *unit = fg_tree_find(node, "unit");
    flatgain_status status = fg_keys_check(reader, node, kind);
    if (status == FLATGAIN_OK && name)
        status = fg_read_text(reader, name, "name", NAME_MAX_BYTES, &signal->name);
    if (status == FLATGAIN_OK && unit)
        status = fg_read_text(reader, unit, "unit", UNIT_MAX_BYTES, &signal->unit);
    if (status == FLATGAIN_OK && strcmp(kind, "outputs") == 0)
        status = read_output(reader, node, signal);
    return status;
}

static flatgain_status unique(struct fg_reader *reader, const struct fg_node *node,
                              const struct fg_signal *signals, int index)
{
    for (int i = 0; i < index && signals[index].name; i++)
        if (signals[i].name && strcmp(signals[i].name, signals[index].name) == 0) {
            char quoted[FG_QUOTE_SIZE];
            return FG_READER_FAIL(reader, node, "the name %s is used for entry %d already; expected another",
                                  fg_quote(signals[i].name, strlen(signals[i].name), quoted), i + 1);
        }
    return FLATGAIN_OK;
}

static flatgain_status read_list(struct fg_reader *reader, const struct fg_node *list, const char *kind,
                                 int count, const char *from, struct fg_signal **signals, bool *named)
{
    if (list->kind != FG_NODE_LIST)
        return FG_READER_FAIL(reader, list, "%s is %s; expected a list of names or of maps", kind,
                              fg_node_word(list));
    if ((long)list->length != count)
        return FG_READER_FAIL(reader, list, "%s has %lu entr%s; expected %d (%s)", kind,
                              (unsigned long)list->length, list->length == 1 ? "y" : "ies", count, from);
    if (!*signals)
        *signals = fg_arena_get(&reader->problem->arena, sizeof **signals * (size_t)count);
    if (!*signals)
        return fg_no_memory(reader->error);
    int index = 0;
    for (const struct fg_node *node = list->first; node; node = node->next, index++) {
        flatgain_status status = read_signal(reader, node, kind, &(*signals)[index]);
        if (status == FLATGAIN_OK)
            status = unique(reader, node, *signals, index);
        if (status != FLATGAIN_OK)
            return status;
        *named = *named || (*signals)[index].name;
    }
    return FLATGAIN_OK;
}

/* noise.lag: one number for every output, or one row. */
static flatgain_status read_noise_lag(struct fg_reader *reader, const struct fg_node *node,
                                      const struct fg_node *outputs)
{
    struct flatgain_problem *problem = reader->problem;
    struct fg_matrix lag;
    flatgain_status status = fg_read_matrix(reader, node, "noise.lag", "lag", &lag);
    if (status != FLATGAIN_OK)
        return status;
    bool single = lag.rows == 1 && lag.cols == 1;
    if (!single && (lag.rows != 1 || lag.cols != problem->p))
        return FG_READER_FAIL(reader, node,
                              "lag is %d x %d; expected one number, or one row of %d (outputs, from C)",
                              lag.rows, lag.cols, problem->p);
    const struct fg_node *output = outputs ? outputs->first : NULL;
    for (int i = 0; i < problem->p; i++) {
        if (output && fg_tree_find(output, "lag"))
            return FG_READER_FAIL(reader, node,
                                  "lag is given here and for output %d in signals; expected it in one place",
                                  i + 1);
        problem->outputs[i].lag = lag.at[single ? 0 : i];
        output = output ? output->next : NULL;
    }
    return FLATGAIN_OK;
}

/* `filter` says who does the filtering, so there must be some. */
static flatgain_status filters(struct fg_reader *reader, const struct fg_node *outputs)
{
    int index = 0;
    for (const struct fg_node *node = outputs ? outputs->first : NULL; node; node = node->next, index++) {
        const struct fg_node *filter = fg_tree_find(node, "filter");
        if (filter && !(reader->problem->outputs[index].lag != 0))
            return FG_READER_FAIL_KEY(reader, filter, "filter without a lag; expected `lag: T` as well");
    }
    return FLATGAIN_OK;
}

flatgain_status fg_read_signals(struct fg_reader *reader, const struct fg_node *signals,
                                const struct fg_node *lag)
{
    struct flatgain_problem *problem = reader->problem;
    const struct fg_node *outputs = fg_tree_find(signals, "outputs"),
                         *inputs = fg_tree_find(signals, "inputs"), *states = fg_tree_find(signals, "states");
    flatgain_status status = signals ? fg_keys_check(reader, signals, "signals") : FLATGAIN_OK;
    problem->outputs = fg_arena_get(&problem->arena, sizeof *problem->outputs * (size_t)problem->p);
    if (status == FLATGAIN_OK && !problem->outputs)
        status = fg_no_memory(reader->error);
    if (status == FLATGAIN_OK && inputs)
        status = read_list(reader, inputs, "inputs", problem->m, "the columns of B", &problem->inputs,
                           &problem->named_inputs);
    if (status == FLATGAIN_OK && outputs)
        status = read_list(reader, outputs, "outputs", problem->p, "the rows of C", &problem->outputs,
                           &problem->named_outputs);
    if (status == FLATGAIN_OK && states)
        status = read_list(reader, states, "states", problem->n, "the rows of A", &problem->states,
                           &problem->named_states);
    if (status == FLATGAIN_OK && lag)
        status = read_noise_lag(reader, lag, outputs);
    if (status == FLATGAIN_OK)
        status = filters(reader, outputs);
    if (status == FLATGAIN_OK && outputs && !lag)
        fg_places_set(&reader->places, "noise.lag", outputs->line, outputs->column);
    return status;
}
