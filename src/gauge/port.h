/* What the kinds of gauge share: an opened file descriptor, how a tty is set up to wake us once a
 * line, and the words for what went wrong while opening.
 */
#pragma once

#include "gauge/gauge.h"

enum { PORT_NODE_MAX = 128, PORT_REASON_MAX = 768 };

struct port {
    int fd;
    char node[PORT_NODE_MAX];
    bool mid_line; /* we may have come in the middle of a line */
    bool socket;
    bool fifo;
    char reason[PORT_REASON_MAX]; /* after a failure: sentences for people */
};

/* A kind of gauge. open returns 0, -errno or an enum gauge_error, and then reason is set; with an
 * error nothing stays open. check looks at the config only: 0 or an enum gauge_error, with reason.
 */
struct port_kind {
    const char *name;
    int (*check)(const struct gauge_config *config, struct port *ret);
    int (*open)(const struct gauge_config *config, struct port *ret);
};

extern const struct port_kind serial_kind, stream_kind;

/* Sets reason and returns error. */
int port_fail(struct port *port, int error, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* What errno from opening, connecting to or configuring port->node means: sets reason and returns
 * an enum gauge_error, or -errno where there is no better word. */
int port_fail_errno(struct port *port, int error);

/* Puts a tty in canonical mode with every special character off: the kernel wakes a reader once a
 * line and changes no byte. Speed and frame stay. hang_up: whether the last close drops DTR.
 * Returns 0 or -errno.
 *
 * In canonical mode the kernel keeps at most 4095 bytes of a line and throws the rest of it away up
 * to the newline (N_TTY_BUF_SIZE), far above LINE_LENGTH_MAX; and read(2) gives one line a call. */
int port_tty_lines(int fd, bool hang_up);
