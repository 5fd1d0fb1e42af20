/* Which keys exist, and what to say about one that does not. */
#include <stdio.h>
#include <string.h>

#include "problem/reader.h"
#include "problem/source.h"

enum { WORD_MAX = 40 };

struct section {
    const char *name;
    const char *known[16];
    const char *later[8]; /* in the format, not in this version */
};

static const struct section SECTIONS[] = {
    {"",
     {"title", "setting", "time", "plant", "disturbance", "noise", "start", "weights", "gain", "signals",
      "accept"},
     {"responses", "tolerated", "integral", "uncertainty", "require", "points"}},
    {"time", {"unit"}, {"scan", "latency"}},
    {"plant", {"A", "B", "C", "D"}, {0}},
    {"disturbance", {"G", "intensity", "W"}, {"rms", "correlation"}},
    {"noise", {"V", "lag"}, {"rms"}},
    {"start", {"X0"}, {0}},
    {"weights", {"Q", "R", "N"}, {0}},
    {"gain", {"pattern", "lower", "upper", "today"}, {0}},
    {"signals", {"inputs", "outputs", "states"}, {0}},
    {"inputs", {"name", "unit"}, {"rest", "range", "noise", "resolution"}},
    {"outputs", {"name", "unit", "lag", "filter"}, {"rest", "range", "noise", "resolution"}},
    {"states", {"name", "unit"}, {"rest", "range"}},
};
enum { SECTION_COUNT = sizeof SECTIONS / sizeof *SECTIONS, KNOWN_MAX = 16, LATER_MAX = 8 };

static int lower(int c)
{
    return c >= 'A' && c <= 'Z' ? c - 'A' + 'a' : c;
}

static int least(int a, int b, int c)
{
    int two = a < b ? a : b;
    return two < c ? two : c;
}

int fg_word_distance(const char *a, const char *b)
{
    int rows = (int)strlen(a), cols = (int)strlen(b);
    int d[WORD_MAX + 1][WORD_MAX + 1];
    if (rows > WORD_MAX || cols > WORD_MAX)
        return WORD_MAX;
    for (int i = 0; i <= rows; i++)
        for (int j = 0; j <= cols; j++) {
            if (i == 0 || j == 0) {
                d[i][j] = i + j;
                continue;
            }
            int differ = lower(a[i - 1]) != lower(b[j - 1]);
            d[i][j] = least(d[i - 1][j] + 1, d[i][j - 1] + 1, d[i - 1][j - 1] + differ);
            if (i > 1 && j > 1 && lower(a[i - 1]) == lower(b[j - 2]) && lower(a[i - 2]) == lower(b[j - 1]) &&
                d[i - 2][j - 2] + 1 < d[i][j])
                d[i][j] = d[i - 2][j - 2] + 1;
        }
    return d[rows][cols];
}

/* A word is near when at most a third of the letters of the longer one are wrong. */
static const char *nearest(const struct section *section, const char *key)
{
    const char *best = NULL;
    int lowest = WORD_MAX;
    for (int i = 0; i < KNOWN_MAX && section->known[i]; i++) {
        int distance = fg_word_distance(section->known[i], key);
        size_t a = strlen(section->known[i]), b = strlen(key);
        int allowed = ((int)(a > b ? a : b) + 1) / 3;
        if (distance <= allowed && distance < lowest) {
            lowest = distance;
            best = section->known[i];
        }
    }
    return best;
}

static bool listed(const char *const *words, int count, const char *key)
{
    for (int i = 0; i < count && words[i]; i++)
        if (strcmp(words[i], key) == 0)
            return true;
    return false;
}

/* The section of the file that has exactly this key. */
static const struct section *home_of(const char *key)
{
    for (int s = 1; s < SECTION_COUNT; s++)
        if (listed(SECTIONS[s].known, KNOWN_MAX, key))
            return &SECTIONS[s];
    return NULL;
}

static flatgain_status unknown(const struct fg_reader *reader, const struct section *section,
                               const struct fg_node *node)
{
    char quoted[FG_QUOTE_SIZE], in[40] = "", all[200] = "";
    fg_quote(node->key, strlen(node->key), quoted);
    if (*section->name)
        snprintf(in, sizeof in, " in %s", section->name);
    if (listed(section->later, LATER_MAX, node->key))
        return FG_READER_FAIL_KEY(
            reader, node, "%s%s is not available in this version; expected a file without it", quoted, in);
    const char *near = nearest(section, node->key);
    if (near)
        return FG_READER_FAIL_KEY(reader, node, "unknown key %s%s; expected perhaps %s", quoted, in, near);
    const struct section *home = home_of(node->key);
    if (home && home != section && !*section->name)
        return FG_READER_FAIL_KEY(reader, node, "unknown key %s here; expected it inside %s", quoted,
                                  home->name);
    for (int i = 0; i < KNOWN_MAX && section->known[i]; i++) {
        size_t used = strlen(all);
        snprintf(all + used, sizeof all - used, "%s%s", i ? ", " : "", section->known[i]);
    }
    return FG_READER_FAIL_KEY(reader, node, "unknown key %s%s; expected one of: %s", quoted, in, all);
}

flatgain_status fg_keys_check(const struct fg_reader *reader, const struct fg_node *map, const char *name)
{
    const struct section *section = SECTIONS;
    while (strcmp(section->name, name) != 0)
        section++;
    if (map->kind != FG_NODE_MAP)
        return FG_READER_FAIL(reader, map, "%s is %s; expected keys and values, such as `%s: ...`",
                              *name ? name : "the file", fg_node_word(map), section->known[0]);
    if (!map->first)
        return FG_READER_FAIL(reader, map, "%s is an empty map; expected keys and values, such as `%s: ...`",
                              *name ? name : "the file", section->known[0]);
    for (const struct fg_node *node = map->first; node; node = node->next)
        if (!listed(section->known, KNOWN_MAX, node->key))
            return unknown(reader, section, node);
    return FLATGAIN_OK;
}
