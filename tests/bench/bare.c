/* The floor under the daemon's cost: the system calls that a sample cannot do without and nothing
 * else. bare PORT FOLDER wakes up, reads, and replaces a file of a status object's size. */
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <sys/epoll.h>
#include <unistd.h>

enum { STATUS_SIZE = 1400 };

static int replace(int folder) {
    char status[STATUS_SIZE];
    int fd = openat(folder, ".bare.new", O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0644);

    memset(status, ' ', sizeof(status));
    if (fd < 0 || write(fd, status, sizeof(status)) != STATUS_SIZE || close(fd) < 0)
        return -1;
    return renameat(folder, ".bare.new", folder, "bare");
}

int main(int argc, char **argv) {
    struct epoll_event event = {.events = EPOLLIN};
    char bytes[512];

    if (argc != 3)
        return 64;
    int port = open(argv[1], O_RDONLY | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    int folder = open(argv[2], O_PATH | O_DIRECTORY | O_CLOEXEC);
    int epoll = epoll_create1(EPOLL_CLOEXEC);
    if (port < 0 || folder < 0 || epoll < 0 || epoll_ctl(epoll, EPOLL_CTL_ADD, port, &event) < 0) {
        perror("bare");
        return 71;
    }
    while (epoll_wait(epoll, &event, 1, -1) == 1 && read(port, bytes, sizeof(bytes)) > 0)
        if (replace(folder) < 0) {
            perror("bare");
            return 74;
        }
    return 0;
}
