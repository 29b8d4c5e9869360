/* The status file's writer. The directory stays open between writes, so that a write costs four
 * system calls; the temporary file is created afresh each time and never followed or shared. */
#include "publish/statusfile.h"

#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/uio.h>
#include <unistd.h>

enum { MODE = 0644 };

struct statusfile {
    char *dir;
    int dir_fd;     /* -1 = to be opened */
    bool mode_kept; /* files made in it get our mode: no umask or default ACL takes of it */
    char name[NAME_MAX + 1], temp[NAME_MAX + 1];
};

static void close_dir(struct statusfile *file) {
    if (file->dir_fd >= 0)
        close(file->dir_fd);
    file->dir_fd = -1;
    file->mode_kept = false;
}

struct statusfile *statusfile_free(struct statusfile *file) {
    if (!file)
        return NULL;
    close_dir(file);
    free(file->dir);
    free(file);
    return NULL;
}

void statusfile_free_p(struct statusfile **file) {
    *file = statusfile_free(*file);
}

int statusfile_new(struct statusfile **ret, const char *path) {
    const char *slash = strrchr(path, '/'), *name = slash ? slash + 1 : path;

    if (!*name || strcmp(name, ".") == 0 || strcmp(name, "..") == 0)
        return -EINVAL;
    if (strlen(name) + strlen("..new") > NAME_MAX)
        return -ENAMETOOLONG;
    struct statusfile *file = calloc(1, sizeof(*file));
    if (!file)
        return -ENOMEM;
    file->dir_fd = -1;
    snprintf(file->name, sizeof(file->name), "%s", name);
    snprintf(file->temp, sizeof(file->temp), ".%s.new", name);
    file->dir = slash ? strndup(path, slash == path ? 1 : (size_t)(slash - path)) : strdup(".");
    if (!file->dir) {
        free(file);
        return -ENOMEM;
    }
    *ret = file;
    return 0;
}

/* Returns a descriptor or -errno. */
static int create(struct statusfile *file) {
    if (file->dir_fd < 0)
        file->dir_fd = open(file->dir, O_PATH | O_DIRECTORY | O_CLOEXEC);
    if (file->dir_fd < 0)
        return -errno;
    int fd = openat(file->dir_fd, file->temp, O_WRONLY | O_CREAT | O_EXCL | O_NOFOLLOW | O_CLOEXEC,
                    MODE);
    return fd < 0 ? -errno : fd;
}

/* The two things that can be mended at once: a temporary file that a killed process left, and a
 * directory that was removed and made again. */
static int create_mending(struct statusfile *file) {
    int fd = create(file);

    for (int tries = 0; tries < 2 && fd < 0; tries++) {
        if (fd == -EEXIST)
            unlinkat(file->dir_fd, file->temp, 0);
        else if (fd == -ENOENT && file->dir_fd >= 0)
            close_dir(file);
        else
            break;
        fd = create(file);
    }
    return fd;
}

static int set_mode(struct statusfile *file, int fd) {
    struct stat st;

    if (file->mode_kept)
        return 0;
    if (fstat(fd, &st) < 0)
        return -errno;
    file->mode_kept = (st.st_mode & 07777) == MODE;
    return file->mode_kept || fchmod(fd, MODE) == 0 ? 0 : -errno;
}

static int fill(struct statusfile *file, int fd, const char *data, size_t length) {
    char newline = '\n';
    const struct iovec parts[] = {{(void *)data, length}, {&newline, 1}};

    int r = set_mode(file, fd);
    if (r < 0)
        return r;
    ssize_t n = writev(fd, parts, 2);
    if (n < 0)
        return -errno;
    return (size_t)n == length + 1 ? 0 : -ENOSPC; /* a file takes less only when no room is left */
}

int statusfile_write(struct statusfile *file, const char *data, size_t length) {
    int fd = create_mending(file);

    if (fd < 0)
        return fd;
    int r = fill(file, fd, data, length);
    if (close(fd) < 0 && r == 0)
        r = -errno;
    if (r == 0 && renameat(file->dir_fd, file->temp, file->dir_fd, file->name) < 0)
        r = -errno;
    if (r < 0)
        unlinkat(file->dir_fd, file->temp, 0);
    return r;
}
