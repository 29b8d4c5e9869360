/* The status file: replaced by rename at every report, so that a reader sees a whole object or the
 * one before. Not flushed to a disk: it lies in /run.
 *
 * An error is told and the caller goes on; the next write starts afresh, so it works again once the
 * disk has room or the directory is back. While it fails, the file last written stays.
 */
#pragma once

#include <stddef.h>

struct statusfile;

/* The directory need not be there yet. Returns 0, -ENOMEM, -EINVAL (no file name in path) or
 * -ENAMETOOLONG. */
int statusfile_new(struct statusfile **ret, const char *path);

/* Puts data and a newline in place, mode 0644 whatever the umask was at the first write: four
 * system calls (six where umask or a default ACL takes of the mode), no heap. Returns 0 or -errno.
 */
int statusfile_write(struct statusfile *file, const char *data, size_t length);

/* Leaves the file where it is. Returns NULL. */
struct statusfile *statusfile_free(struct statusfile *file);
void statusfile_free_p(struct statusfile **file);
