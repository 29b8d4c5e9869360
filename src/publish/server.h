/* The socket server: hands the newest report to whoever asks, and every report to followers.
 *
 * It lives on the caller's event loop with one source for the listening socket and one for each
 * client, and never calls up: the caller hands it each report. Nothing a client does holds it up:
 *  - sockets never block; of each client it takes a few requests a turn, and none while an answer
 *    to it waits, so a flood fills only the flooder's own socket;
 *  - a follower that does not read has at most one begun message and the newest report waiting;
 *    after `missed` reports in a row without taking a whole message a client is dropped;
 *  - past `clients` connections, or without file descriptors or memory, the newest comer is told
 *    so and closed, and nobody else notices;
 *  - a line over `line` bytes is answered with an error and skipped up to its newline.
 * A peer that shuts down its sending side still gets its answers; a last line without newline
 * counts then. After server_new a report costs no heap: its bytes are shared by all followers.
 */
#pragma once

#include <stddef.h>
#include <stdint.h>
#include <sys/types.h>
#include <systemd/sd-event.h>

struct server;

enum server_error {
    SERVER_E_TAKEN = 1, /* somebody answers on that path: another daemon runs */
    SERVER_E_OTHER,     /* something that is no socket stands at that path */
    SERVER_E_ABSENT,    /* the service manager handed over no socket */
};

struct server_limits {
    size_t clients;   /* connections at once */
    size_t line;      /* bytes of a request line without its newline */
    size_t report;    /* bytes of a report */
    size_t answer;    /* bytes of an answer, batches included */
    size_t queued;    /* bytes of unfinished answers over all clients */
    unsigned missed;  /* reports in a row; 1..255 */
    unsigned turn;    /* requests of one client handled in one turn of the loop */
    int64_t priority; /* of all its event sources; the gauge's must stand above (be less) */
};

struct server_counts {
    size_t clients, followers;
    uint64_t accepted;
    uint64_t refused; /* told that there is no room */
    uint64_t dropped; /* for not reading, or for want of memory */
};

/* 1024 clients, 4096 bytes a line, 32 missed, and so on. */
extern const struct server_limits server_limits_default;

/* Makes the listening socket at path with that mode whatever the umask. A socket left behind is
 * removed, but only when nobody answers on it. Returns 0, -errno or SERVER_E_TAKEN,
 * SERVER_E_OTHER. */
int server_listen(const char *path, mode_t mode, int *ret_fd);

/* The listening socket of socket activation. Returns 0, -errno (-EINVAL: more than one, or none
 * that is a listening unix stream socket) or SERVER_E_ABSENT. */
int server_activated(int *ret_fd);

/* Takes listen_fd over (closed by server_free) when it succeeds. limits NULL = the defaults.
 * Returns 0 or -errno. */
int server_new(struct server **ret, sd_event *event, int listen_fd,
               const struct server_limits *limits);

/* The newest report: one JSON value without newline, copied. Returns 0, or -EMSGSIZE when it is
 * longer than limits.report (the one before stays the newest). */
int server_publish(struct server *server, const char *json, size_t length);

void server_counts(const struct server *server, struct server_counts *ret);

/* Closes every connection. Returns NULL. */
struct server *server_free(struct server *server);
void server_free_p(struct server **server);
