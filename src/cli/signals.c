#include "cli/signals.h"

#include <signal.h>
#include <stdatomic.h>
#include <string.h>
#include <unistd.h>

#include "cli/options.h"

static volatile sig_atomic_t caught, is_graceful;
static const char *_Atomic temporary; /* lock-free on every platform that has POSIX threads */

/* Calls only unlink and _exit, which are async-signal-safe. */
static void handle(int signal)
{
    if (is_graceful && !caught) {
        caught = signal;
        return;
    }
    const char *path = atomic_load(&temporary);
    if (path)
        unlink(path);
    _exit(CLI_INTERRUPTED + signal);
}

void cli_signals_start(bool graceful)
{
    struct sigaction action;
    memset(&action, 0, sizeof action);
    is_graceful = graceful;
    action.sa_handler = handle;
    action.sa_flags = SA_RESTART;
    sigemptyset(&action.sa_mask);
    /* a parent that ignores SIGINT (nohup, background jobs of a shell) means it */
    struct sigaction before;
    if (sigaction(SIGINT, NULL, &before) == 0 && before.sa_handler != SIG_IGN)
        sigaction(SIGINT, &action, NULL);
    sigaction(SIGTERM, &action, NULL);
    action.sa_handler = SIG_IGN;
    sigaction(SIGPIPE, &action, NULL);
}

int cli_signals_caught(void)
{
    return caught;
}

void cli_signals_protect(const char *path)
{
    atomic_store(&temporary, path);
}
