#include "cli/files.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

#include "cli/messages.h"
#include "cli/options.h"
#include "cli/signals.h"

bool cli_files_fill_streams(void)
{
    bool closed = fcntl(STDOUT_FILENO, F_GETFD) == -1 && errno == EBADF;
    int fd;
    do
        fd = open("/dev/null", O_RDWR);
    while (fd >= 0 && fd <= STDERR_FILENO);
    if (fd > STDERR_FILENO)
        close(fd);
    return closed;
}

char *cli_files_read_input(size_t *length)
{
    size_t room = 65536, used = 0;
    char *text = malloc(room);
    while (text) {
        ssize_t got = read(STDIN_FILENO, text + used, room - used);
        if (got < 0 && errno == EINTR)
            continue;
        if (got < 0) {
            free(text);
            return NULL;
        }
        if (got == 0)
            break;
        used += (size_t)got;
        if (used < room)
            continue;
        room *= 2;
        char *more = realloc(text, room);
        if (!more)
            free(text);
        text = more;
    }
    *length = used;
    return text;
}

static int write_all(int fd, const char *text, size_t length)
{
    while (length > 0) {
        ssize_t done = write(fd, text, length);
        if (done < 0 && errno == EINTR)
            continue;
        if (done < 0)
            return -1;
        text += done;
        length -= (size_t)done;
    }
    return 0;
}

int cli_files_print(const char *text, size_t length)
{
    if (write_all(STDOUT_FILENO, text, length) == 0)
        return CLI_OK;
    if (errno != EPIPE)
        cli_complain("cannot write to standard output: %s", strerror(errno));
    return CLI_CANNOT_WRITE;
}

int cli_files_make_folder(const char *path)
{
    char *copy = strdup(path);
    if (!copy) {
        cli_complain("out of memory");
        return CLI_INTERNAL;
    }
    int status = CLI_OK;
    for (char *at = copy + 1; status == CLI_OK; at++) {
        if (*at != '/' && *at != '\0')
            continue;
        bool last = *at == '\0';
        *at = '\0';
        struct stat found;
        bool is_there = stat(copy, &found) == 0;
        if ((is_there && !S_ISDIR(found.st_mode)) ||
            (!is_there && mkdir(copy, 0777) != 0 && errno != EEXIST)) {
            cli_complain("cannot create folder %s: %s", copy,
                         is_there ? "there is a file of that name" : strerror(errno));
            status = CLI_CANNOT_CREATE;
        }
        if (last)
            break;
        *at = '/';
    }
    free(copy);
    return status;
}

static int complain_exists(const char *path)
{
    cli_complain("%s exists; --force overwrites it", path);
    return CLI_CANNOT_CREATE;
}

int cli_files_check_free(const char *path, bool force)
{
    struct stat found;
    if (lstat(path, &found) != 0)
        return CLI_OK;
    if (S_ISDIR(found.st_mode)) {
        cli_complain("cannot create %s: there is a folder of that name", path);
        return CLI_CANNOT_CREATE;
    }
    return force ? CLI_OK : complain_exists(path);
}

/* The temporary file becomes the final one. */
static int put_in_place(const char *temporary, const char *path, bool force)
{
    if (force)
        return rename(temporary, path);
    if (link(temporary, path) == 0)
        return unlink(temporary);
    if (errno == EEXIST)
        return -1;
    /* a file system without links: a check first is the best there is */
    struct stat found;
    if (lstat(path, &found) == 0) {
        errno = EEXIST;
        return -1;
    }
    return rename(temporary, path);
}

int cli_files_write(const char *path, const char *text, size_t length, bool force)
{
    size_t room = strlen(path) + 16;
    char *temporary = malloc(room);
    if (!temporary) {
        cli_complain("out of memory");
        return CLI_INTERNAL;
    }
    snprintf(temporary, room, "%s.XXXXXX", path);
    int fd = mkstemp(temporary);
    if (fd < 0) {
        cli_complain("cannot create %s: %s", path, strerror(errno));
        free(temporary);
        return CLI_CANNOT_CREATE;
    }
    cli_signals_protect(temporary);
    mode_t mask = umask(0);
    umask(mask);
    bool failed = write_all(fd, text, length) != 0 || fchmod(fd, 0666 & ~mask) != 0 || fsync(fd) != 0;
    int reason = errno;
    if (close(fd) != 0 && !failed) {
        failed = true;
        reason = errno;
    }
    if (!failed && put_in_place(temporary, path, force) != 0) {
        failed = true;
        reason = errno;
    }
    if (failed)
        unlink(temporary);
    cli_signals_protect(NULL);
    free(temporary);
    if (!failed)
        return CLI_OK;
    if (reason == EEXIST)
        return complain_exists(path);
    cli_complain("cannot write %s: %s", path, strerror(reason));
    return CLI_CANNOT_WRITE;
}
