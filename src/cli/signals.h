/* SIGINT and SIGTERM. */
#ifndef CLI_SIGNALS_H
#define CLI_SIGNALS_H

#include <stdbool.h>

/* Installs the handler and ignores SIGPIPE (a write then fails with EPIPE). Graceful: the first signal only
 * sets a flag and the second ends the process; otherwise the first ends it. A temporary file that is being
 * written is removed in both cases. */
void cli_signals_start(bool graceful);
/* The signal that came, 0: none. */
int cli_signals_caught(void);
/* The path to remove when the process is ended by a signal; NULL: none. */
void cli_signals_protect(const char *path);

#endif
