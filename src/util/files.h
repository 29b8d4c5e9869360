/* Whole files: read with a bound, replaced by rename. All return 0 or -errno. */
#pragma once

#include <stdbool.h>
#include <stddef.h>
#include <sys/types.h>

/* Reads the whole file; *ret_text is NUL-ended and the caller's to free. -EFBIG when it is longer
 * than most bytes, -EISDIR, -ENOENT, ... as the system says. A FIFO without a writer reads as
 * empty; a pipe with one is read to its end. */
int files_read(const char *path, size_t most, char **ret_text, size_t *ret_length);

/* Writes path.new and renames it over path; mode is set whatever the umask. durable: fsync of file
 * and directory, for what must survive a power cut; not for /run. Leaves no path.new behind, and
 * takes away one that a killed writer left. One writer a path. */
int files_replace(const char *path, const void *data, size_t length, mode_t mode, bool durable);
