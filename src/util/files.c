/* Whole files: a bounded read, and a write that a reader sees wholly or not at all. */
#include "util/files.h"

#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>

/* Opened without waiting (a FIFO nobody writes to would hold us), then read with waiting (a pipe
 * from another program may be slow). */
static int open_to_read(const char *path, size_t *ret_guess) {
    struct stat st;
    scoped(close_p) int fd = open(path, O_RDONLY | O_CLOEXEC | O_NONBLOCK | O_NOCTTY);

    if (fd < 0 || fstat(fd, &st) < 0)
        return -errno;
    if (S_ISDIR(st.st_mode))
        return -EISDIR;
    int flags = fcntl(fd, F_GETFL);
    if (flags < 0 || fcntl(fd, F_SETFL, flags & ~O_NONBLOCK) < 0)
        return -errno;
    *ret_guess = st.st_size > 0 ? (size_t)st.st_size : 0;
    int out = fd;
    fd = -1;
    return out;
}

/* Room for n more bytes and the NUL, never for more than most + 1 bytes and the NUL. */
static int grow(char **text, size_t *room, size_t most) {
    size_t wanted = *room * 2 < most + 1 ? *room * 2 : most + 1;
    char *more = realloc(*text, wanted + 1);

    if (!more)
        return -ENOMEM;
    *text = more;
    *room = wanted;
    return 0;
}

int files_read(const char *path, size_t most, char **ret_text, size_t *ret_length) {
    size_t guess = 0, length = 0;
    scoped(close_p) int fd = open_to_read(path, &guess);

    if (fd < 0)
        return fd;
    if (guess > most || most >= SSIZE_MAX)
        return -EFBIG;
    size_t room = guess + 1 > 4096 ? guess + 1 : most + 1 < 4096 ? most + 1 : 4096;
    scoped(free_p) char *text = malloc(room + 1);
    if (!text)
        return -ENOMEM;
    for (;;) {
        if (length == room) {
            int r = grow(&text, &room, most);
            if (r < 0)
                return r;
        }
        ssize_t n = read(fd, text + length, room - length);
        if (n == 0)
            break;
        if (n < 0 && errno == EINTR)
            continue;
        if (n < 0)
            return -errno;
        length += (size_t)n;
        if (length > most)
            return -EFBIG;
    }
    text[length] = '\0';
    *ret_text = text;
    *ret_length = length;
    text = NULL;
    return 0;
}

static int write_all(int fd, const char *data, size_t length) {
    while (length > 0) {
        ssize_t n = write(fd, data, length);
        if (n < 0 && errno == EINTR)
            continue;
        if (n < 0)
            return -errno;
        data += n;
        length -= (size_t)n;
    }
    return 0;
}

static int write_new(const char *path, const void *data, size_t length, mode_t mode, bool durable) {
    int fd = open(path, O_WRONLY | O_CREAT | O_EXCL | O_NOFOLLOW | O_CLOEXEC, 0600);

    if (fd < 0)
        return -errno;
    int r = write_all(fd, data, length);
    if (r == 0 && fchmod(fd, mode) < 0)
        r = -errno;
    if (r == 0 && durable && fsync(fd) < 0)
        r = -errno;
    if (close(fd) < 0 && r == 0)
        r = -errno;
    return r;
}

/* The folder of path, so that the rename itself survives a power cut. */
static int sync_folder(const char *path) {
    char folder[PATH_MAX];
    const char *slash = strrchr(path, '/');
    size_t n = slash ? (size_t)(slash - path) : 0;

    memcpy(folder, path, n);
    folder[n] = '\0';
    if (n == 0)
        memcpy(folder, slash ? "/" : ".", 2);
    scoped(close_p) int fd = open(folder, O_RDONLY | O_DIRECTORY | O_CLOEXEC);
    if (fd < 0 || fsync(fd) < 0)
        return -errno;
    return 0;
}

int files_replace(const char *path, const void *data, size_t length, mode_t mode, bool durable) {
    char beside[PATH_MAX];
    int n = snprintf(beside, sizeof(beside), "%s.new", path);

    if (n < 0 || (size_t)n >= sizeof(beside))
        return -ENAMETOOLONG;
    /* One fixed name: what a killed writer left behind is taken away by the next. */
    if (unlink(beside) < 0 && errno != ENOENT)
        return -errno;
    int r = write_new(beside, data, length, mode, durable);
    if (r == 0 && rename(beside, path) < 0)
        r = -errno;
    if (r < 0) {
        if (r != -EEXIST)
            unlink(beside);
        return r;
    }
    return durable ? sync_folder(path) : 0;
}
