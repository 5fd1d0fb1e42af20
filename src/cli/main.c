#include <dlfcn.h>
#include <stdio.h>
#include <string.h>

#include "cli/commands.h"
#include "cli/files.h"
#include "cli/messages.h"
#include "cli/options.h"
#include "cli/signals.h"
#include "flatgain.h"

/* The search has its own threads; those of OpenBLAS on top make it many times slower. Other BLAS
 * libraries do not have the function, hence the look-up at run time. */
static void quiet_blas(void)
{
    void (*set_threads)(int) = NULL;
    void *symbol = dlsym(RTLD_DEFAULT, "openblas_set_num_threads");
    memcpy(&set_threads, &symbol, sizeof set_threads); /* ISO C has no cast from object to function */
    if (set_threads)
        set_threads(1);
}

int main(int argc, char **argv)
{
    struct cli_options options;
    bool no_output = cli_files_fill_streams();
    int status = cli_options_read(argc, argv, &options);
    if (status != CLI_OK)
        return status;
    cli_signals_start(options.command == CLI_TUNE && !options.help && !options.version);
    if (no_output) {
        cli_complain("standard output is closed");
        return CLI_CANNOT_WRITE;
    }
    if (options.help) {
        const char *help = cli_help(options.command);
        return cli_files_print(help, strlen(help));
    }
    if (options.version) {
        char line[64];
        int length = snprintf(line, sizeof line, "flatgain %s\n", flatgain_version());
        return cli_files_print(line, (size_t)length);
    }
    quiet_blas();
    return cli_run(&options);
}
