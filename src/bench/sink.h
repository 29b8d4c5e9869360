/* Where the simulated gauge's lines go: a pseudo-terminal, a FIFO, a unix socket, standard output.
 *
 * All waiting ends early, with -EINTR, when stop_fd becomes readable.
 */
#pragma once

#include <stddef.h>

enum sink_kind { SINK_STDOUT, SINK_PTY, SINK_FIFO, SINK_SOCKET };

struct sink;

/* "stdout", "pty", "fifo" or "socket"; -1 = none of them. */
int sink_kind_of(const char *word);

/* Creates the far end at path: a symbolic link to the pseudo-terminal, the FIFO, the listening
 * socket. Only a pty can do without a path. A leftover of the same kind at path is replaced; for
 * anything else there, -EEXIST. 0 or -errno. */
int sink_new(struct sink **ret, enum sink_kind kind, const char *path, int stop_fd);

/* Removes what it put at the path. */
void sink_free(struct sink *sink);
void sink_free_p(struct sink **sink);

/* What a gauge opens: the path, or the pseudo-terminal's own name. */
const char *sink_name(const struct sink *sink);

/* Waits until a reader is there. 0 or -errno. */
int sink_wait(struct sink *sink);

/* Writes all of it, however long the reader takes. 0; -EPIPE when the reader went (sink_wait waits
 * for the next); other -errno. What the reader sends is thrown away. */
int sink_write(struct sink *sink, const void *data, size_t length);
