/* Files, folders and standard output: nothing half-written, no failure unnoticed. */
#ifndef CLI_FILES_H
#define CLI_FILES_H

#include <stdbool.h>
#include <stddef.h>

/* Standard streams that the caller closed are opened on /dev/null, so that no file of ours gets their
 * number. Returns true when standard output was closed. */
bool cli_files_fill_streams(void);

/* All of standard input. Returns NULL on failure (errno set). */
char *cli_files_read_input(size_t *length);

/* Writes to standard output and flushes. A closed pipe is no news to the user and passes quietly; all
 * other failures are told. Returns CLI_OK or CLI_CANNOT_WRITE. */
int cli_files_print(const char *text, size_t length);

/* Makes a folder and the ones above it. Complains; CLI_OK or CLI_CANNOT_CREATE. */
int cli_files_make_folder(const char *path);

/* Complains and returns CLI_CANNOT_CREATE when something is at the path and force is false. */
int cli_files_check_free(const char *path, bool force);

/* Writes path in one step: a temporary file in the same folder, flushed to disk, then renamed (or, without
 * force, linked, which fails when the path exists). Complains; CLI_OK, CLI_CANNOT_CREATE, CLI_CANNOT_WRITE.
 */
int cli_files_write(const char *path, const char *text, size_t length, bool force);

#endif
