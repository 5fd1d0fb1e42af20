#include "assess/assembly.h"

#include <math.h>
#include <string.h>

#include "base/number.h"
#include "base/text.h"

static const char *keep(struct fg_arena *arena, const char *text)
{
    const char *copy = fg_arena_text(arena, "%s", text);
    return copy ? copy : "";
}

const char *fg_words_number(struct fg_arena *arena, double value, int digits)
{
    char number[FG_NUMBER_SIZE];
    fg_number_round(value, digits, number);
    return keep(arena, number);
}

const char *fg_words_percent(struct fg_arena *arena, double percent)
{
    char number[FG_NUMBER_SIZE];
    fg_number_percent(percent, number);
    const char *text = fg_arena_text(arena, "%s %%", number);
    return text ? text : "";
}

const char *fg_words_mode(struct fg_arena *arena, double re, double im, const char *states)
{
    char real[FG_NUMBER_SIZE], imaginary[FG_NUMBER_SIZE];
    fg_number_round(re, 4, real);
    fg_number_round(fabs(im), 4, imaginary);
    bool named = states && states[0];
    const char *text =
        fg_arena_text(arena, "%s%s%s%s%s%s%s", real, im != 0 ? " +/- " : "", im != 0 ? imaginary : "",
                      im != 0 ? "i" : "", named ? " (" : "", named ? states : "", named ? ")" : "");
    return text ? text : "";
}

const char *fg_words_names(struct fg_arena *arena, const struct fg_signal *signal, int count,
                           const bool *chosen, int most)
{
    int total = 0, said = 0;
    for (int i = 0; i < count; i++)
        total += chosen[i];
    const char *text = "";
    for (int i = 0; i < count && said < most; i++) {
        if (!chosen[i])
            continue;
        said++;
        const char *join = said == 1 ? "" : said == total ? " and " : ", ";
        text = fg_arena_text(arena, "%s%s%s", text, join, signal[i].name);
        if (!text)
            return "";
    }
    if (said < total) {
        text = fg_arena_text(arena, "%s and %d more", text, total - said);
        if (!text)
            return "";
    }
    return text;
}

void fg_warn(struct fg_findings *findings, const char *code, const char *text)
{
    struct fg_finding_warning *warning = fg_arena_get(&findings->arena, sizeof *warning);
    if (!warning)
        return;
    *warning = (struct fg_finding_warning){code, text ? text : "", NULL};
    struct fg_finding_warning **end = &findings->warnings;
    while (*end)
        end = &(*end)->next;
    *end = warning;
}
