/* Every longer text the command line shows, and the one way to complain. */
#ifndef CLI_MESSAGES_H
#define CLI_MESSAGES_H

#include "cli/options.h"

/* `flatgain: ...` and a newline on stderr. */
void cli_complain(const char *format, ...) __attribute__((format(printf, 1, 2)));

/* The help of a command, or of the program (CLI_NO_COMMAND). */
const char *cli_help(enum cli_command command);

#endif
