#include "problem/places.h"

#include <string.h>

static const struct fg_place *exact(const struct fg_places *places, const char *key, size_t length)
{
    for (int i = 0; i < places->count; i++)
        if (strlen(places->at[i].key) == length && memcmp(places->at[i].key, key, length) == 0)
            return &places->at[i];
    return NULL;
}

void fg_places_set(struct fg_places *places, const char *key, long line, long column)
{
    struct fg_place place = {key, line, column};
    for (int i = 0; i < places->count; i++)
        if (strcmp(places->at[i].key, key) == 0) {
            places->at[i] = place;
            return;
        }
    if (places->count < FG_PLACES_MAX)
        places->at[places->count++] = place;
}

struct fg_place fg_places_find(const struct fg_places *places, const char *key)
{
    const struct fg_place *found = exact(places, key, strlen(key));
    const char *point = strchr(key, '.');
    if (!found && point)
        found = exact(places, key, (size_t)(point - key));
    return found ? *found : (struct fg_place){key, 1, 1};
}
