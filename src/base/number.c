#include "base/number.h"

#include <ctype.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* printf and strtod use the decimal mark of the process's locale; replacing it is enough for us,
 * since no other locale property reaches %g or strtod. */
static void mark_to_point(char *text)
{
    for (; *text; text++)
        if (*text == ',')
            *text = '.';
}

static double read_in_locale(char *text)
{
    double value = strtod(text, NULL);
    char probe[8];
    snprintf(probe, sizeof probe, "%.1f", 0.5);
    char *point = strchr(text, '.');
    if (probe[1] != '.' && point) {
        *point = probe[1];
        value = strtod(text, NULL);
        *point = '.';
    }
    return value;
}

void fg_number_exact(double value, char text[FG_NUMBER_SIZE])
{
    for (int digits = 15; digits <= 17; digits++) {
        snprintf(text, FG_NUMBER_SIZE, "%.*g", digits, value);
        mark_to_point(text);
        if (digits == 17 || read_in_locale(text) == value)
            break;
    }
}

void fg_number_round(double value, int digits, char text[FG_NUMBER_SIZE])
{
    if (isnan(value))
        snprintf(text, FG_NUMBER_SIZE, "nan");
    else if (isinf(value))
        snprintf(text, FG_NUMBER_SIZE, value > 0 ? "inf" : "-inf");
    else
        snprintf(text, FG_NUMBER_SIZE, "%.*g", digits, value == 0 ? 0.0 : value);
    mark_to_point(text);
}

void fg_number_percent(double percent, char text[FG_NUMBER_SIZE])
{
    double size = fabs(percent);
    if (size < 0.005)
        percent = 0;
    if (size >= 1e6)
        snprintf(text, FG_NUMBER_SIZE, percent > 0 ? "over 1 million" : "below -1 million");
    else if (size >= 1e4)
        snprintf(text, FG_NUMBER_SIZE, "%.0f", 100 * round(percent / 100));
    else
        fg_number_round(percent, size < 1 ? 2 : size < 1000 ? 3 : 4, text);
}

enum fg_number_fault fg_number_read(const char *text, size_t length, double *value)
{
    const char *at = text, *end = text + length;
    if (length > FG_NUMBER_LONGEST)
        return FG_NUMBER_NOT;
    size_t whole = 0, part = 0;
    if (at < end && (*at == '+' || *at == '-'))
        at++;
    for (; at < end && isdigit((unsigned char)*at); at++)
        whole++;
    if (at < end && *at == '.')
        for (at++; at < end && isdigit((unsigned char)*at); at++)
            part++;
    if (whole + part == 0)
        return FG_NUMBER_NOT;
    if (at < end && (*at == 'e' || *at == 'E')) {
        at++;
        if (at < end && (*at == '+' || *at == '-'))
            at++;
        size_t exponent = 0;
        for (; at < end && isdigit((unsigned char)*at); at++)
            exponent++;
        if (exponent == 0)
            return FG_NUMBER_NOT;
    }
    if (at != end)
        return FG_NUMBER_NOT;
    char copy[FG_NUMBER_LONGEST + 1];
    memcpy(copy, text, length);
    copy[length] = '\0';
    *value = read_in_locale(copy);
    return isfinite(*value) ? FG_NUMBER_OK : FG_NUMBER_TOO_LARGE;
}
