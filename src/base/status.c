#include "base/status.h"

#include <stdarg.h>
#include <stdio.h>
#include <string.h>

static void fill(flatgain_error *error, flatgain_status status, long line, long column, const char *prefix,
                 const char *format, va_list arguments)
{
    if (!error)
        return;
    error->status = status;
    error->line = line;
    error->column = column;
    snprintf(error->text, sizeof error->text, "%s", prefix);
    size_t used = strlen(error->text);
    vsnprintf(error->text + used, sizeof error->text - used, format, arguments);
}

flatgain_status fg_fail(flatgain_error *error, flatgain_status status, const char *format, ...)
{
    va_list arguments;
    va_start(arguments, format);
    fill(error, status, 0, 0, "", format, arguments);
    va_end(arguments);
    return status;
}

flatgain_status fg_fail_at(flatgain_error *error, flatgain_status status, const char *name, long line,
                           long column, const char *format, ...)
{
    char prefix[400];
    snprintf(prefix, sizeof prefix, "%.300s:%ld:%ld: ", name, line, column);
    va_list arguments;
    va_start(arguments, format);
    fill(error, status, line, column, prefix, format, arguments);
    va_end(arguments);
    return status;
}

flatgain_status fg_no_memory(flatgain_error *error)
{
    return fg_fail(error, FLATGAIN_NO_MEMORY, "out of memory");
}

const char *flatgain_status_name(flatgain_status status)
{
    switch (status) {
    case FLATGAIN_OK:
        return "ok";
    case FLATGAIN_NO_MEMORY:
        return "no memory";
    case FLATGAIN_BAD_ARGUMENT:
        return "bad argument";
    case FLATGAIN_BAD_PROBLEM:
        return "bad problem";
    case FLATGAIN_CANNOT_READ:
        return "cannot read";
    case FLATGAIN_CANNOT_WRITE:
        return "cannot write";
    case FLATGAIN_NUMERICAL:
        return "numerical failure";
    case FLATGAIN_INTERNAL:
        break;
    }
    return "internal error";
}

const char *flatgain_outcome_name(flatgain_outcome outcome)
{
    switch (outcome) {
    case FLATGAIN_TUNED:
        return "tuned";
    case FLATGAIN_JUDGED:
        return "judged";
    case FLATGAIN_INSPECTED:
        return "inspected";
    case FLATGAIN_NOT_FOUND:
        return "not-found";
    case FLATGAIN_IMPOSSIBLE:
        return "impossible";
    case FLATGAIN_BOUNDARY:
        return "boundary";
    case FLATGAIN_UNBOUNDED:
        return "unbounded";
    case FLATGAIN_INTERRUPTED:
        break;
    }
    return "interrupted";
}

const char *flatgain_version(void)
{
    return FLATGAIN_VERSION;
}
