#include "cli/messages.h"

#include <stdarg.h>
#include <stdio.h>

void cli_complain(const char *format, ...)
{
    va_list arguments;
    va_start(arguments, format);
    fputs("flatgain: ", stderr);
    vfprintf(stderr, format, arguments);
    fputc('\n', stderr);
    va_end(arguments);
}

static const char PROGRAM[] =
    "usage: flatgain COMMAND FILE [options]\n"
    "\n"
    "Finds one fixed gain matrix from measurements to actuators, u = u0 - K (y - y0),\n"
    "and says how far it is from the best any controller could do.\n"
    "\n"
    "  tune FILE...           find the gain and report\n"
    "  judge FILE --gain G    assess a gain in hand; nothing is optimised\n"
    "  inspect FILE...        check and explain the problem; nothing is optimised\n"
    "\n"
    "  flatgain COMMAND --help    options and an example\n"
    "  flatgain --version\n"
    "\n"
    "A FILE is a problem in YAML or JSON; - is standard input.\n"
    "\n"
    "A gain moves machines that can hurt people: commission with limits in place,\n"
    "keep interlocks independent of the law, follow local codes and licensed practice.\n";

#define OUTPUT_HELP                                                                                          \
    "  --json          one JSON object on standard output, nothing else\n"                                   \
    "  --out DIR       also write DIR/result.json (several files: a subfolder for each)\n"                   \
    "  --force         overwrite a result that is there already\n"                                           \
    "  --quiet         the result in brief, no progress\n"                                                   \
    "  --verbose       everything: all poles, all minima, every digit\n"                                     \
    "  --color WHEN    auto (default), always or never; NO_COLOR is respected\n"

static const char TUNE[] =
    "usage: flatgain tune FILE... [options]\n"
    "\n"
    "Finds the gain with the lowest cost that the pattern and the bounds allow, and\n"
    "reports it with its place between no control and the best possible controller.\n"
    "Several files: one JSON object a line with --json; the exit status is the largest.\n"
    "\n"
    "  --starts N      at most N starts of the search, 1 to 100000 (default 96)\n"
    "  --seed N        seed of the random starts (default 1); same seed, same bytes\n"
    "  --threads N     worker threads; 0 (default) is one per processor. The answer\n"
    "                  does not depend on it\n"
    "  --timing        report the seconds spent\n" OUTPUT_HELP "\n"
    "Interrupt once (Ctrl-C) for the best gain so far, twice to end at once.\n"
    "\n"
    "Example: flatgain tune dryer.yaml --out dryer-result\n";

static const char JUDGE[] =
    "usage: flatgain judge FILE --gain G [options]\n"
    "\n"
    "Reports cost, poles, place on the ladder and margins of a gain in hand.\n"
    "An unstable gain, or one outside the pattern or bounds, gives exit status 1.\n"
    "\n"
    "  --gain G        a CSV file (a row for each input), a result file, or the word\n"
    "                  today for the gain in the problem file\n"
    "  --timing        report the seconds spent\n" OUTPUT_HELP "\n"
    "Example: flatgain judge dryer.yaml --gain today\n";

static const char INSPECT[] =
    "usage: flatgain inspect FILE... [options]\n"
    "\n"
    "Reads and checks the problem: poles without control, modes that inputs, outputs,\n"
    "weights or disturbances do not reach, benchmarks, and whether a stabilising gain\n"
    "is impossible.\n"
    "\n"
    "  --timing        report the seconds spent\n" OUTPUT_HELP "\n"
    "Example: flatgain inspect dryer.yaml\n";

const char *cli_help(enum cli_command command)
{
    switch (command) {
    case CLI_TUNE:
        return TUNE;
    case CLI_JUDGE:
        return JUDGE;
    case CLI_INSPECT:
        return INSPECT;
    case CLI_NO_COMMAND:
        break;
    }
    return PROGRAM;
}
