/* Statuses and error texts: one place that fills a flatgain_error. */
#ifndef FG_BASE_STATUS_H
#define FG_BASE_STATUS_H

#include "flatgain.h"

/* Fills *error (may be NULL) with a status and a printf-like text, returns the status. */
flatgain_status fg_fail(flatgain_error *error, flatgain_status status, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* The same with a place: text becomes `name:line:column: ...`. */
flatgain_status fg_fail_at(flatgain_error *error, flatgain_status status, const char *name, long line,
                           long column, const char *format, ...) __attribute__((format(printf, 6, 7)));

/* "out of memory" with FLATGAIN_NO_MEMORY. */
flatgain_status fg_no_memory(flatgain_error *error);

#endif
