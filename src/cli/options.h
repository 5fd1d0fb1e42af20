/* The command line as data. */
#ifndef CLI_OPTIONS_H
#define CLI_OPTIONS_H

#include <stdbool.h>
#include <stdint.h>

enum cli_command { CLI_NO_COMMAND, CLI_TUNE, CLI_JUDGE, CLI_INSPECT };

enum cli_color { CLI_COLOR_AUTO, CLI_COLOR_ALWAYS, CLI_COLOR_NEVER };

/* Exit statuses of the command line (docs/exit-status.md); 0, 1, 3 and 4 come from results. */
enum cli_status {
    CLI_OK = 0,
    CLI_USAGE = 2,
    CLI_NUMERICAL = 5,
    CLI_BAD_PROBLEM = 65,
    CLI_CANNOT_READ = 66,
    CLI_INTERNAL = 70,
    CLI_CANNOT_CREATE = 73,
    CLI_CANNOT_WRITE = 74,
    CLI_INTERRUPTED = 128 /* plus the number of the signal */
};

struct cli_options {
    enum cli_command command;
    char **files; /* points into argv */
    int file_count;
    const char *out;  /* folder, NULL: none */
    const char *gain; /* NULL: not given */
    int starts, threads;
    uint64_t seed;
    enum cli_color color;
    bool json, timing, quiet, verbose, force, help, version;
};

/* Reads argv; complains and returns CLI_USAGE when it is wrong. argv is reordered: files first. */
int cli_options_read(int argc, char **argv, struct cli_options *options);

#endif
