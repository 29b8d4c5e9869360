/* The four kinds of sinks behind one descriptor that does not block. */
#include "bench/sink.h"

#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <stdbool.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <termios.h>

enum { LOOK_AGAIN_MS = 20, NAME_SIZE = 256 };

struct sink {
    enum sink_kind kind;
    int fd;     /* to the reader; -1 = none there */
    int listen; /* of a socket, else -1 */
    int stop_fd;
    bool made; /* something of ours stands at the path */
    char path[NAME_SIZE];
    char name[NAME_SIZE];
};

int sink_kind_of(const char *word) {
    static const char *const words[] = {"stdout", "pty", "fifo", "socket"};

    for (int i = 0; i < (int)(sizeof words / sizeof *words); i++)
        if (strcmp(word, words[i]) == 0)
            return i;
    return -1;
}

/* ---- making ---------------------------------------------------------------------------------- */

static int clear_way(const char *path, mode_t kind) {
    struct stat st;

    if (lstat(path, &st) < 0)
        return errno == ENOENT ? 0 : -errno;
    if ((st.st_mode & S_IFMT) != kind)
        return -EEXIST;
    return unlink(path) < 0 ? -errno : 0;
}

/* The far end is set raw once; the settings last as long as the near end is open. */
static int make_pty(struct sink *sink) {
    scoped(close_p) int far = -1;
    struct termios raw;
    int r;

    sink->fd = posix_openpt(O_RDWR | O_NOCTTY | O_CLOEXEC | O_NONBLOCK);
    if (sink->fd < 0 || grantpt(sink->fd) < 0 || unlockpt(sink->fd) < 0)
        return -errno;
    r = ptsname_r(sink->fd, sink->name, sizeof sink->name);
    if (r)
        return -r;
    far = open(sink->name, O_RDWR | O_NOCTTY | O_CLOEXEC);
    if (far < 0 || tcgetattr(far, &raw) < 0)
        return -errno;
    cfmakeraw(&raw);
    if (tcsetattr(far, TCSANOW, &raw) < 0)
        return -errno;
    if (!sink->path[0])
        return 0;
    r = clear_way(sink->path, S_IFLNK);
    if (r == 0 && symlink(sink->name, sink->path) < 0)
        r = -errno;
    return r;
}

static int make_fifo(struct sink *sink) {
    int r = clear_way(sink->path, S_IFIFO);

    return r == 0 && mkfifo(sink->path, 0600) < 0 ? -errno : r;
}

static int make_socket(struct sink *sink) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    size_t length = strlen(sink->path);
    int r;

    if (length >= sizeof address.sun_path)
        return -ENAMETOOLONG;
    memcpy(address.sun_path, sink->path, length + 1);
    r = clear_way(sink->path, S_IFSOCK);
    if (r)
        return r;
    sink->listen = socket(AF_UNIX, SOCK_STREAM | SOCK_CLOEXEC | SOCK_NONBLOCK, 0);
    if (sink->listen < 0 || bind(sink->listen, (struct sockaddr *)&address, sizeof address) < 0 ||
        listen(sink->listen, 1) < 0)
        return -errno;
    return 0;
}

static int make_stdout(struct sink *sink) {
    sink->fd = fcntl(STDOUT_FILENO, F_DUPFD_CLOEXEC, 3);
    return sink->fd < 0 ? -errno : 0;
}

int sink_new(struct sink **ret, enum sink_kind kind, const char *path, int stop_fd) {
    static int (*const make[])(struct sink *) = {make_stdout, make_pty, make_fifo, make_socket};
    struct sink *sink;
    int r;

    if (path && strlen(path) >= NAME_SIZE)
        return -ENAMETOOLONG;
    if (!path && (kind == SINK_FIFO || kind == SINK_SOCKET))
        return -EINVAL;
    sink = calloc(1, sizeof *sink);
    if (!sink)
        return -ENOMEM;
    sink->kind = kind;
    sink->fd = sink->listen = -1;
    sink->stop_fd = stop_fd;
    memcpy(sink->path, path ? path : "", path ? strlen(path) + 1 : 1);
    r = make[kind](sink);
    sink->made = r == 0 && sink->path[0] && kind != SINK_STDOUT;
    if (r) {
        sink_free(sink);
        return r;
    }
    *ret = sink;
    return 0;
}

void sink_free(struct sink *sink) {
    if (!sink)
        return;
    if (sink->made)
        unlink(sink->path);
    close_p(&sink->fd);
    close_p(&sink->listen);
    free(sink);
}

void sink_free_p(struct sink **sink) {
    sink_free(*sink);
}

const char *sink_name(const struct sink *sink) {
    if (sink->kind == SINK_STDOUT)
        return "standard output";
    return sink->path[0] ? sink->path : sink->name;
}

/* ---- the reader ------------------------------------------------------------------------------ */

/* Polls one descriptor beside stop_fd. Its revents >= 0, or -errno. */
static int watch_fd(const struct sink *sink, int fd, short events, int wait_ms) {
    struct pollfd fds[2] = {{.fd = fd, .events = events}, {.fd = sink->stop_fd, .events = POLLIN}};

    if (poll(fds, 2, wait_ms) < 0)
        return -errno;
    return fds[1].revents ? -EINTR : fds[0].revents;
}

/* 1 = a reader is there, 0 = not yet, -errno. Waits a little in between. */
static int look(struct sink *sink) {
    int r;

    switch (sink->kind) {
    case SINK_STDOUT:
        return 1;
    case SINK_PTY:
        r = watch_fd(sink, sink->fd, 0, 0);
        if (r < 0 || !(r & POLLHUP))
            return r < 0 ? r : 1;
        break;
    case SINK_FIFO:
        sink->fd = open(sink->path, O_WRONLY | O_NONBLOCK | O_CLOEXEC);
        if (sink->fd >= 0 || errno != ENXIO)
            return sink->fd >= 0 ? 1 : -errno;
        break;
    case SINK_SOCKET:
        r = watch_fd(sink, sink->listen, POLLIN, -1);
        if (r < 0)
            return r;
        sink->fd = accept4(sink->listen, NULL, NULL, SOCK_CLOEXEC | SOCK_NONBLOCK);
        return sink->fd >= 0 ? 1 : errno == EAGAIN || errno == ECONNABORTED ? 0 : -errno;
    }
    r = watch_fd(sink, -1, 0, LOOK_AGAIN_MS);
    return r < 0 ? r : 0;
}

int sink_wait(struct sink *sink) {
    int r = sink->fd >= 0 && sink->kind != SINK_PTY ? 1 : 0;

    while (r == 0)
        r = look(sink);
    return r < 0 ? r : 0;
}

static int reader_gone(struct sink *sink) {
    if (sink->kind == SINK_FIFO || sink->kind == SINK_SOCKET) {
        close_p(&sink->fd);
        sink->fd = -1;
    }
    return -EPIPE;
}

/* What the reader tells us is read, or its writes would block some day. */
static void hear_out(struct sink *sink) {
    char heard[256];

    if (sink->kind == SINK_PTY || sink->kind == SINK_SOCKET)
        while (read(sink->fd, heard, sizeof heard) > 0)
            ;
}

int sink_write(struct sink *sink, const void *data, size_t length) {
    const char *p = data;

    while (length > 0) {
        ssize_t n;
        int r = watch_fd(sink, sink->fd, POLLOUT, -1);

        if (r < 0)
            return r;
        if (r & (POLLHUP | POLLERR))
            return reader_gone(sink);
        hear_out(sink);
        n = write(sink->fd, p, length);
        if (n < 0 && (errno == EPIPE || errno == ECONNRESET))
            return reader_gone(sink);
        if (n < 0 && errno != EAGAIN)
            return -errno;
        if (n > 0) {
            p += n;
            length -= (size_t)n;
        }
    }
    return 0;
}
