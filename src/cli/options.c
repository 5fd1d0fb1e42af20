#include "cli/options.h"

#include <errno.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

#include "cli/messages.h"
#include "flatgain.h"

enum option_name {
    O_JSON,
    O_OUT,
    O_GAIN,
    O_STARTS,
    O_SEED,
    O_THREADS,
    O_TIMING,
    O_QUIET,
    O_VERBOSE,
    O_FORCE,
    O_COLOR,
    O_HELP,
    O_VERSION,
    O_COUNT
};

enum { FOR_TUNE = 1 << CLI_TUNE, FOR_JUDGE = 1 << CLI_JUDGE, FOR_INSPECT = 1 << CLI_INSPECT, FOR_ALL = 14 };

static const struct option {
    const char *name;
    bool takes_value;
    int commands;
} OPTIONS[O_COUNT] = {
    [O_JSON] = {"--json", false, FOR_ALL},       [O_OUT] = {"--out", true, FOR_ALL},
    [O_GAIN] = {"--gain", true, FOR_JUDGE},      [O_STARTS] = {"--starts", true, FOR_TUNE},
    [O_SEED] = {"--seed", true, FOR_TUNE},       [O_THREADS] = {"--threads", true, FOR_TUNE},
    [O_TIMING] = {"--timing", false, FOR_ALL},   [O_QUIET] = {"--quiet", false, FOR_ALL},
    [O_VERBOSE] = {"--verbose", false, FOR_ALL}, [O_FORCE] = {"--force", false, FOR_ALL},
    [O_COLOR] = {"--color", true, FOR_ALL},      [O_HELP] = {"--help", false, FOR_ALL},
    [O_VERSION] = {"--version", false, FOR_ALL},
};

static const char *const COMMANDS[] = {NULL, "tune", "judge", "inspect"};
enum { COMMAND_COUNT = sizeof COMMANDS / sizeof COMMANDS[0] };

/* Words that will be commands one day. */
static const char *const LATER[] = {"code", "points", "fit", "compare", "frontier"};

/* Edits (insert, delete, replace one character) that turn a into b; both cut at 31 characters. */
static int edits(const char *a, const char *b)
{
    int row[32];
    int na = (int)strnlen(a, 31), nb = (int)strnlen(b, 31);
    for (int j = 0; j <= nb; j++)
        row[j] = j;
    for (int i = 1; i <= na; i++) {
        int diagonal = row[0];
        row[0] = i;
        for (int j = 1; j <= nb; j++) {
            int keep = diagonal + (a[i - 1] != b[j - 1]);
            diagonal = row[j];
            int best = row[j] < row[j - 1] ? row[j] + 1 : row[j - 1] + 1;
            row[j] = keep < best ? keep : best;
        }
    }
    return row[nb];
}

/* The nearest word, or NULL when none is near enough to be meant. */
static const char *nearest(const char *word, const char *const *words, int count)
{
    const char *best = NULL;
    int least = (int)strlen(word) / 2 + 1;
    for (int k = 0; k < count; k++) {
        int distance = words[k] ? edits(word, words[k]) : least + 1;
        if (distance < least) {
            least = distance;
            best = words[k];
        }
    }
    return best;
}

static int unknown_option(const char *given)
{
    const char *names[O_COUNT];
    for (int k = 0; k < O_COUNT; k++)
        names[k] = OPTIONS[k].name;
    char name[64];
    size_t length = strcspn(given, "=");
    if (length > sizeof name - 1)
        length = sizeof name - 1;
    memcpy(name, given, length);
    name[length] = '\0';
    const char *near = nearest(name, names, O_COUNT);
    if (near)
        cli_complain("unknown option %s; the nearest is %s", name, near);
    else
        cli_complain("unknown option %s; flatgain COMMAND --help lists them", name);
    return CLI_USAGE;
}

static int read_command(const char *word, enum cli_command *command)
{
    for (int k = 1; k < COMMAND_COUNT; k++)
        if (strcmp(word, COMMANDS[k]) == 0) {
            *command = (enum cli_command)k;
            return CLI_OK;
        }
    for (size_t k = 0; k < sizeof LATER / sizeof LATER[0]; k++)
        if (strcmp(word, LATER[k]) == 0) {
            cli_complain("%s is not available in this version; tune, judge and inspect are", word);
            return CLI_USAGE;
        }
    const char *near = nearest(word, COMMANDS, COMMAND_COUNT);
    if (strcmp(word, "help") == 0 || strcmp(word, "version") == 0)
        cli_complain("unknown command %s; flatgain --%s is what you want", word, word);
    else if (access(word, F_OK) == 0)
        cli_complain("a file without a command; expected flatgain tune %s (or judge, inspect)", word);
    else if (near)
        cli_complain("unknown command %s; the nearest is %s", word, near);
    else
        cli_complain("unknown command %s; expected tune, judge or inspect", word);
    return CLI_USAGE;
}

/* A whole number of digits only, at most `most`. */
static int read_whole(const char *name, const char *value, uint64_t least, uint64_t most, uint64_t *number)
{
    char *end = NULL;
    errno = 0;
    bool digits = value[0] && strspn(value, "0123456789") == strlen(value);
    unsigned long long read = digits ? strtoull(value, &end, 10) : 0;
    if (!digits || errno != 0 || read < least || read > most) {
        cli_complain("%s %s; expected a whole number from %llu to %llu", name, value[0] ? value : "''",
                     (unsigned long long)least, (unsigned long long)most);
        return CLI_USAGE;
    }
    *number = read;
    return CLI_OK;
}

static int set(struct cli_options *options, int name, const char *value)
{
    uint64_t number = 0;
    int status = CLI_OK;
    switch (name) {
    case O_JSON:
        options->json = true;
        break;
    case O_OUT:
        options->out = value;
        if (!value[0]) {
            cli_complain("--out ''; expected a folder");
            return CLI_USAGE;
        }
        break;
    case O_GAIN:
        options->gain = value;
        break;
    case O_STARTS:
        status = read_whole("--starts", value, 1, 100000, &number);
        options->starts = (int)number;
        break;
    case O_SEED:
        status = read_whole("--seed", value, 0, UINT64_MAX, &options->seed);
        break;
    case O_THREADS:
        status = read_whole("--threads", value, 0, 256, &number);
        options->threads = (int)number;
        break;
    case O_TIMING:
        options->timing = true;
        break;
    case O_QUIET:
        options->quiet = true;
        break;
    case O_VERBOSE:
        options->verbose = true;
        break;
    case O_FORCE:
        options->force = true;
        break;
    case O_COLOR:
        if (strcmp(value, "auto") == 0)
            options->color = CLI_COLOR_AUTO;
        else if (strcmp(value, "always") == 0)
            options->color = CLI_COLOR_ALWAYS;
        else if (strcmp(value, "never") == 0)
            options->color = CLI_COLOR_NEVER;
        else {
            cli_complain("--color %s; expected auto, always or never", value);
            status = CLI_USAGE;
        }
        break;
    case O_HELP:
        options->help = true;
        break;
    case O_VERSION:
        options->version = true;
        break;
    default:
        break;
    }
    return status;
}

/* One argument that starts with "--"; *at moves past a separate value. */
static int read_option(int argc, char **argv, int *at, struct cli_options *options, int *given)
{
    const char *argument = argv[*at];
    size_t length = strcspn(argument, "=");
    for (int k = 0; k < O_COUNT; k++) {
        const struct option *option = &OPTIONS[k];
        if (strlen(option->name) != length || strncmp(option->name, argument, length) != 0)
            continue;
        const char *value = argument[length] == '=' ? argument + length + 1 : NULL;
        if (!option->takes_value && value) {
            cli_complain("%s takes no value; found %s", option->name, argument);
            return CLI_USAGE;
        }
        if (option->takes_value && !value) {
            if (*at + 1 >= argc) {
                cli_complain("%s needs a value", option->name);
                return CLI_USAGE;
            }
            value = argv[++*at];
        }
        if ((k == O_OUT || k == O_GAIN) && (*given & 1 << k)) { /* one of the two would be lost */
            cli_complain("%s is given twice; expected it once", option->name);
            return CLI_USAGE;
        }
        *given |= 1 << k;
        return set(options, k, value ? value : "");
    }
    return unknown_option(argument);
}

static int check(const struct cli_options *options, int given)
{
    for (int k = 0; k < O_COUNT; k++)
        if ((given & 1 << k) && !(OPTIONS[k].commands & 1 << options->command)) {
            cli_complain("%s has no meaning for %s", OPTIONS[k].name, COMMANDS[options->command]);
            return CLI_USAGE;
        }
    if (options->quiet && options->verbose) {
        cli_complain("--quiet and --verbose exclude each other");
        return CLI_USAGE;
    }
    if (options->file_count == 0) {
        cli_complain("%s needs a problem file (- is standard input)", COMMANDS[options->command]);
        return CLI_USAGE;
    }
    if (options->command == CLI_JUDGE && options->file_count != 1) {
        cli_complain("judge takes one problem file; found %d", options->file_count);
        return CLI_USAGE;
    }
    if (options->command == CLI_JUDGE && !options->gain) {
        cli_complain("judge needs --gain G: a CSV file, a result file, or today");
        return CLI_USAGE;
    }
    int inputs = 0;
    for (int k = 0; k < options->file_count; k++)
        inputs += strcmp(options->files[k], "-") == 0;
    if (inputs > 1) {
        cli_complain("- can be given only once");
        return CLI_USAGE;
    }
    return CLI_OK;
}

int cli_options_read(int argc, char **argv, struct cli_options *options)
{
    flatgain_options defaults = flatgain_options_default();
    *options = (struct cli_options){
        .starts = defaults.starts, .threads = defaults.threads, .seed = defaults.seed, .files = argv + 1};
    int given = 0, words = 0;
    bool ended = false;
    for (int at = 1; at < argc; at++) {
        char *argument = argv[at];
        int status = CLI_OK;
        if (!ended && strcmp(argument, "--") == 0)
            ended = true;
        else if (!ended && strcmp(argument, "-h") == 0)
            options->help = true;
        else if (!ended && argument[0] == '-' && argument[1])
            status = read_option(argc, argv, &at, options, &given);
        else if (words++ == 0)
            status = read_command(argument, &options->command);
        else
            options->files[options->file_count++] = argument;
        if (status != CLI_OK)
            return status;
    }
    if (options->help || options->version)
        return CLI_OK;
    if (options->command == CLI_NO_COMMAND) {
        cli_complain("expected a command: tune, judge or inspect; flatgain --help explains");
        return CLI_USAGE;
    }
    return check(options, given);
}
