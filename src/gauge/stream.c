/* The kind `stream`: a pseudo-terminal, character device, FIFO or unix stream socket by path. For
 * gauges behind other programs, for the demo and for tests.
 */
#include "gauge/port.h"
#include "gauge/serial.h"

#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/sysmacros.h>
#include <sys/un.h>

/* The kernel's list of numbers (Documentation/admin-guide/devices.txt): unix98 slaves. */
enum { PTY_MAJOR_FIRST = 136, PTY_MAJOR_LAST = 143 };

static int take_fd(struct port *port, int *fd) {
    port->fd = *fd;
    *fd = -1;
    return 0;
}

static int open_socket(struct port *port) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    size_t length = strlen(port->node);
    if (length >= sizeof address.sun_path)
        return port_fail_errno(port, ENAMETOOLONG);
    memcpy(address.sun_path, port->node, length + 1);
    scoped(close_p) int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);
    if (fd < 0 || connect(fd, (const struct sockaddr *)&address, sizeof address) < 0)
        return port_fail_errno(port, errno);
    port->socket = true;
    return take_fd(port, &fd);
}

static int open_fifo(const struct gauge_config *config, struct port *port) {
    if (config->tell)
        return port_fail(
            port, GAUGE_E_TELL,
            "%s: a FIFO goes one way only, nothing can be told back. Set tell = no, or "
            "use a pseudo-terminal or a socket",
            port->node);
    scoped(close_p) int fd = open(port->node, O_RDONLY | O_NONBLOCK | O_CLOEXEC);
    if (fd < 0)
        return port_fail_errno(port, errno);
    port->fifo = true;
    return take_fd(port, &fd);
}

static int open_character(const struct gauge_config *config, struct port *port, dev_t number) {
    int flags = config->tell ? O_RDWR : O_RDONLY;
    scoped(close_p) int fd = open(port->node, flags | O_NONBLOCK | O_NOCTTY | O_CLOEXEC);
    if (fd < 0)
        return port_fail_errno(port, errno);
    int r = isatty(fd) ? port_tty_lines(fd, false) : 0;
    if (r < 0)
        return port_fail_errno(port, -r);
    port->mid_line = !(major(number) >= PTY_MAJOR_FIRST && major(number) <= PTY_MAJOR_LAST);
    return take_fd(port, &fd);
}

static int stream_open(const struct gauge_config *config, struct port *port) {
    struct stat st;
    snprintf(port->node, sizeof port->node, "%s", config->device);
    if (stat(port->node, &st) < 0)
        return port_fail_errno(port, errno);
    if (S_ISSOCK(st.st_mode))
        return open_socket(port);
    if (S_ISFIFO(st.st_mode))
        return open_fifo(config, port);
    if (S_ISCHR(st.st_mode))
        return open_character(config, port, st.st_rdev);
    return port_fail(port, GAUGE_E_DEVICE,
                     "%s: %s. A stream is a pseudo-terminal, character device, FIFO or unix stream "
                     "socket; write a log into a FIFO, or give it to brink-bench replay",
                     port->node,
                     S_ISREG(st.st_mode)   ? "a regular file is no gauge"
                     : S_ISDIR(st.st_mode) ? "a folder is no gauge"
                                           : "a block device is no gauge");
}

static int stream_check(const struct gauge_config *config, struct port *port) {
    if (config->device[0] && !serial_is_identity(config->device))
        return 0;
    return port_fail(port, GAUGE_E_IDENTITY,
                     "'%s' is no path. A stream is opened by its path; a USB identity needs kind = "
                     "serial",
                     config->device);
}

const struct port_kind stream_kind = {"stream", stream_check, stream_open};
