#include "cli/commands.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/ioctl.h>
#include <unistd.h>

#include "cli/files.h"
#include "cli/messages.h"
#include "cli/signals.h"
#include "flatgain.h"

enum { NARROWEST = 60, WIDEST = 100 };

static int status_of(flatgain_status status)
{
    switch (status) {
    case FLATGAIN_OK:
        return CLI_OK;
    case FLATGAIN_BAD_ARGUMENT:
        return CLI_USAGE;
    case FLATGAIN_BAD_PROBLEM:
        return CLI_BAD_PROBLEM;
    case FLATGAIN_CANNOT_READ:
        return CLI_CANNOT_READ;
    case FLATGAIN_CANNOT_WRITE:
        return CLI_CANNOT_WRITE;
    case FLATGAIN_NUMERICAL:
        return CLI_NUMERICAL;
    case FLATGAIN_NO_MEMORY:
    case FLATGAIN_INTERNAL:
        break;
    }
    return CLI_INTERNAL;
}

static int complain_of(const flatgain_error *error)
{
    cli_complain("%s", error->text[0] ? error->text : flatgain_status_name(error->status));
    return status_of(error->status);
}

static int worst(int a, int b)
{
    return a > b ? a : b;
}

/* ---- progress -------------------------------------------------------------------------------- */

struct progress_line {
    bool shown;    /* standard error is a terminal and nobody asked for quiet */
    char now[120]; /* what stands there */
};

static void erase(struct progress_line *line)
{
    if (line->now[0])
        fprintf(stderr, "\r%*s\r", (int)strlen(line->now), "");
    line->now[0] = '\0';
}

static int on_progress(const flatgain_progress *progress, void *user)
{
    struct progress_line *line = user;
    char text[sizeof line->now];
    if (!line->shown)
        return cli_signals_caught() != 0;
    if (isfinite(progress->best))
        snprintf(text, sizeof text, "%d of at most %d starts, %d minim%s, best cost %.6g",
                 progress->starts_done, progress->starts_max, progress->minima,
                 progress->minima == 1 ? "um" : "a", progress->best);
    else if (progress->starts_done > 0)
        snprintf(text, sizeof text, "%d of at most %d starts, nothing stabilised yet", progress->starts_done,
                 progress->starts_max);
    else
        snprintf(text, sizeof text, "searching, at most %d starts", progress->starts_max);
    if (strcmp(text, line->now) != 0) {
        erase(line);
        snprintf(line->now, sizeof line->now, "%s", text);
        fputs(text, stderr);
        fflush(stderr);
    }
    return cli_signals_caught() != 0;
}

/* ---- one file -------------------------------------------------------------------------------- */

static int read_problem(const char *file, flatgain_problem **problem)
{
    flatgain_error error = {0};
    if (strcmp(file, "-") != 0) {
        if (flatgain_problem_read(file, problem, &error) != FLATGAIN_OK)
            return complain_of(&error);
        return CLI_OK;
    }
    size_t length = 0;
    char *text = cli_files_read_input(&length);
    if (!text) {
        cli_complain("cannot read standard input: %s", strerror(errno));
        return CLI_CANNOT_READ;
    }
    flatgain_status status = flatgain_problem_parse(text, length, "standard input", NULL, problem, &error);
    free(text);
    return status == FLATGAIN_OK ? CLI_OK : complain_of(&error);
}

static int judge(const char *gain_word, const flatgain_problem *problem, flatgain_result **result,
                 flatgain_error *error)
{
    if (strcmp(gain_word, "today") == 0) {
        const double *today = flatgain_problem_today(problem);
        if (!today) {
            cli_complain("--gain today, but the problem states no gain in use (gain: today)");
            return CLI_USAGE;
        }
        flatgain_status status = flatgain_judge(problem, today, NULL, result, error);
        return status == FLATGAIN_OK ? CLI_OK : complain_of(error);
    }
    size_t count = (size_t)flatgain_problem_inputs(problem) * (size_t)flatgain_problem_outputs(problem);
    double *gain = malloc(count * sizeof *gain);
    if (!gain) {
        cli_complain("out of memory");
        return CLI_INTERNAL;
    }
    flatgain_status status = flatgain_gain_read(gain_word, problem, gain, error);
    if (status == FLATGAIN_OK)
        status = flatgain_judge(problem, gain, NULL, result, error);
    free(gain);
    return status == FLATGAIN_OK ? CLI_OK : complain_of(error);
}

static int work(const struct cli_options *options, const flatgain_problem *problem, flatgain_result **result)
{
    flatgain_error error = {0};
    if (options->command == CLI_JUDGE)
        return judge(options->gain, problem, result, &error);
    flatgain_status status;
    if (options->command == CLI_INSPECT) {
        status = flatgain_inspect(problem, NULL, result, &error);
    } else {
        struct progress_line line = {.shown = !options->quiet && isatty(STDERR_FILENO)};
        flatgain_options how = flatgain_options_default();
        how.starts = options->starts;
        how.seed = options->seed;
        how.threads = options->threads;
        how.progress = on_progress;
        how.user = &line;
        status = flatgain_tune(problem, &how, result, &error);
        erase(&line);
    }
    return status == FLATGAIN_OK ? CLI_OK : complain_of(&error);
}

static bool wants_color(const struct cli_options *options)
{
    if (options->color != CLI_COLOR_AUTO)
        return options->color == CLI_COLOR_ALWAYS;
    const char *no = getenv("NO_COLOR"), *terminal = getenv("TERM");
    return isatty(STDOUT_FILENO) && !(no && no[0]) && terminal && strcmp(terminal, "dumb") != 0;
}

static flatgain_style style_of(const struct cli_options *options)
{
    flatgain_style style = {.color = wants_color(options), .timing = options->timing};
    style.verbose = options->verbose ? 1 : options->quiet ? -1 : 0;
    struct winsize window;
    if (isatty(STDOUT_FILENO) && ioctl(STDOUT_FILENO, TIOCGWINSZ, &window) == 0 && window.ws_col > 0) {
        style.width = window.ws_col;
        if (style.width < NARROWEST)
            style.width = NARROWEST;
        if (style.width > WIDEST)
            style.width = WIDEST;
    }
    return style;
}

/* A printed object on one line: line ends and indentation go, which never occur inside a JSON string. */
static size_t join_lines(char *text, size_t length)
{
    size_t to = 0;
    for (size_t at = 0; at < length; at++) {
        if (text[at] != '\n') {
            text[to++] = text[at];
            continue;
        }
        while (at + 1 < length && text[at + 1] == ' ')
            at++;
    }
    text[to++] = '\n'; /* there was at least one line end, so there is room */
    return to;
}

static int print_result(const struct cli_options *options, const flatgain_result *result)
{
    flatgain_style style = style_of(options);
    char *text = NULL;
    size_t length = 0;
    flatgain_status status = options->json ? flatgain_result_json(result, &style, &text, &length)
                                           : flatgain_result_text(result, &style, &text, &length);
    if (status != FLATGAIN_OK) {
        cli_complain("%s", flatgain_status_name(status));
        return status_of(status);
    }
    if (options->json && options->file_count > 1)
        length = join_lines(text, length);
    int done = cli_files_print(text, length);
    flatgain_text_free(text);
    return done;
}

static int save_result(const struct cli_options *options, const flatgain_result *result, const char *path)
{
    flatgain_style style = style_of(options);
    char *text = NULL;
    size_t length = 0;
    flatgain_status status = flatgain_result_json(result, &style, &text, &length);
    if (status != FLATGAIN_OK) {
        cli_complain("%s", flatgain_status_name(status));
        return status_of(status);
    }
    int done = cli_files_write(path, text, length, options->force);
    flatgain_text_free(text);
    return done;
}

/* Runs one file; `path` is where its result.json goes, NULL: nowhere. */
static int run_file(const struct cli_options *options, const char *file, const char *path)
{
    flatgain_problem *problem = NULL;
    flatgain_result *result = NULL;
    int status = read_problem(file, &problem);
    /* before the search: an hour of work must not end in "exists" */
    if (status == CLI_OK && path)
        status = cli_files_check_free(path, options->force);
    if (status == CLI_OK)
        status = work(options, problem, &result);
    if (status == CLI_OK) {
        status = flatgain_result_exit_status(result);
        if (flatgain_result_outcome(result) == FLATGAIN_INTERRUPTED)
            status = CLI_INTERRUPTED + cli_signals_caught();
        status = worst(status, print_result(options, result));
        if (path)
            status = worst(status, save_result(options, result, path));
    }
    flatgain_result_free(result);
    flatgain_problem_free(problem);
    return status;
}

/* ---- all files ------------------------------------------------------------------------------- */

/* "dir/dryer.yaml" -> "dryer"; "-" -> "standard-input". Never "." or "..". */
static void stem_of(const char *file, char *stem, size_t size)
{
    const char *slash = strrchr(file, '/'), *name = slash ? slash + 1 : file;
    if (strcmp(file, "-") == 0)
        name = "standard-input";
    snprintf(stem, size, "%s%.200s", name[0] == '.' ? "_" : "", name);
    char *point = strrchr(stem, '.');
    if (point && point != stem)
        *point = '\0';
}

enum { SUBFOLDER = 240 };

/* A subfolder for each file: its stem, with -2, -3 ... when an earlier file has taken it. */
static char (*name_subfolders(const struct cli_options *options))[SUBFOLDER]
{
    char(*names)[SUBFOLDER] = calloc((size_t)options->file_count, sizeof *names);
    for (int at = 0; names && at < options->file_count; at++) {
        char stem[SUBFOLDER - 16];
        stem_of(options->files[at], stem, sizeof stem);
        snprintf(names[at], SUBFOLDER, "%s", stem);
        int number = 1;
        for (int k = 0; k < at; k++)
            if (strcmp(names[k], names[at]) == 0) {
                snprintf(names[at], SUBFOLDER, "%s-%d", stem, ++number);
                k = -1; /* the new name has to be free as well */
            }
    }
    return names;
}

/* The path of result.json in a subfolder ("": none) of --out, the folders made; NULL after a complaint. */
static char *result_path(const struct cli_options *options, const char *name)
{
    size_t room = strlen(options->out) + strlen(name) + 32;
    char *path = malloc(room);
    if (!path) {
        cli_complain("out of memory");
        return NULL;
    }
    int used = snprintf(path, room, "%s%s%s", options->out, name[0] ? "/" : "", name);
    if (cli_files_make_folder(path) != CLI_OK) {
        free(path);
        return NULL;
    }
    snprintf(path + used, room - (size_t)used, "/result.json");
    return path;
}

int cli_run(const struct cli_options *options)
{
    int status = CLI_OK;
    char(*subfolders)[SUBFOLDER] = name_subfolders(options);
    if (!subfolders) {
        cli_complain("out of memory");
        return CLI_INTERNAL;
    }
    for (int k = 0; k < options->file_count && cli_signals_caught() == 0; k++) {
        const char *file = options->files[k];
        char *path = NULL;
        if (options->out && !(path = result_path(options, options->file_count > 1 ? subfolders[k] : ""))) {
            status = worst(status, CLI_CANNOT_CREATE);
            continue;
        }
        /* text of several files needs to say which is which; JSON is told apart by its lines */
        if (options->file_count > 1 && !options->json) {
            char head[400];
            int length = snprintf(head, sizeof head, "%s%s==> %.350s\n", k > 0 ? "\n" : "",
                                  options->quiet ? "# " : "", file);
            status = worst(status, cli_files_print(head, (size_t)length));
        }
        status = worst(status, run_file(options, file, path));
        free(path);
    }
    free(subfolders);
    if (cli_signals_caught() != 0)
        status = worst(status, CLI_INTERRUPTED + cli_signals_caught());
    return status;
}
