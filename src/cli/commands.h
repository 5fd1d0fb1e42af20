/* What tune, judge and inspect do with their files. */
#ifndef CLI_COMMANDS_H
#define CLI_COMMANDS_H

#include "cli/options.h"

/* Runs the command on every file; returns the exit status (the largest of all files). */
int cli_run(const struct cli_options *options);

#endif
