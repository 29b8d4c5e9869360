/* The socket server. What goes out to followers is written once into a slot that all of them share;
 * a slot is free again when the last of them has sent it. A client that waits for room through
 * `missed` reports is dropped, so no begun message is older than that, and missed + 2 slots are
 * enough for ever: one for each age, the newest report, and the one being written.
 *
 * A client is served only while nothing waits to go out to it. Its event mask says what it waits
 * for: room to send (also when lines are left over from a turn), else bytes to read.
 */
#include "publish/server.h"

#include "publish/rpc.h"
#include "publish/status.h"
#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <stdbool.h>
#include <string.h>
#include <sys/epoll.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <systemd/sd-daemon.h>

enum { ACCEPTS_A_TURN = 16 };

static const char slot_head[] = "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":";
static const char slot_tail[] = "}\n";

struct slot {
    unsigned refs;
    size_t length;
    char *bytes; /* a whole notification line */
};

struct client {
    struct server *server;
    struct client *next, **link; /* link: what points at this client */
    sd_event_source *source;
    int fd;
    uint32_t events;
    bool follows;
    bool ended;      /* the peer sends no more */
    bool skipping;   /* inside a line that is too long */
    unsigned missed; /* reports while it waited for room to send */
    const char *out; /* what waits, of out_slot or out_heap; NULL = nothing */
    size_t out_length, out_sent;
    struct slot *out_slot;
    char *out_heap;
    struct slot *pending; /* the newest report, behind out */
    size_t in_length;
    char in[]; /* limits.line + 1 */
};

struct server {
    sd_event *event;
    sd_event_source *listener;
    int listen_fd;
    int spare_fd; /* given up for a moment to turn somebody away when there are no more */
    bool resting; /* the listener is off until the next report */
    struct server_limits limits;
    struct server_counts counts;
    struct client *clients;
    struct slot *slots, *newest;
    char *slot_bytes, *answer;
    size_t queued;
};

const struct server_limits server_limits_default = {
    .clients = 1024,
    .line = 4096,
    .report = STATUS_SIZE_MAX,
    .answer = 32768,
    .queued = 1048576,
    .missed = 32,
    .turn = 4,
    .priority = SD_EVENT_PRIORITY_IDLE,
};

/* ---- slots ---- */

static size_t slot_count(const struct server_limits *limits) {
    return limits->missed + 2;
}

static size_t slot_size(const struct server_limits *limits) {
    return limits->report + sizeof(slot_head) + sizeof(slot_tail);
}

static struct slot *slot_ref(struct slot *slot) {
    if (slot)
        slot->refs++;
    return slot;
}

static struct slot *slot_unref(struct slot *slot) {
    if (slot)
        slot->refs--;
    return NULL;
}

static struct slot *slot_find_free(struct server *server) {
    for (size_t i = 0; i < slot_count(&server->limits); i++)
        if (server->slots[i].refs == 0)
            return &server->slots[i];
    return NULL;
}

static void slot_fill(struct slot *slot, const char *json, size_t length) {
    const size_t head = sizeof(slot_head) - 1, tail = sizeof(slot_tail) - 1;

    memcpy(slot->bytes, slot_head, head);
    memcpy(slot->bytes + head, json, length);
    memcpy(slot->bytes + head + length, slot_tail, tail);
    slot->length = head + length + tail;
}

/* ---- one client: going out. All return 0, or -errno when the client is to leave. ---- */

static void out_clear(struct client *client) {
    if (client->out_heap)
        client->server->queued -= client->out_length;
    free(client->out_heap);
    client->out_heap = NULL;
    client->out_slot = slot_unref(client->out_slot);
    client->out = NULL;
}

static void out_set(struct client *client, const char *bytes, size_t length) {
    client->out = bytes;
    client->out_length = length;
    client->out_sent = 0;
}

static void out_set_slot(struct client *client, struct slot *slot) {
    slot_unref(client->out_slot);
    client->out_slot = slot_ref(slot);
    out_set(client, slot->bytes, slot->length);
}

static int out_set_rest(struct client *client, const char *rest, size_t length) {
    struct server *server = client->server;

    if (server->queued + length > server->limits.queued)
        return -ENOBUFS;
    client->out_heap = malloc(length);
    if (!client->out_heap)
        return -ENOMEM;
    memcpy(client->out_heap, rest, length);
    server->queued += length;
    out_set(client, client->out_heap, length);
    return 0;
}

/* Returns how many bytes went out: 0 when there is no room now. */
static ssize_t send_some(int fd, const char *bytes, size_t length) {
    ssize_t n = send(fd, bytes, length, MSG_DONTWAIT | MSG_NOSIGNAL);

    if (n >= 0)
        return n;
    return errno == EAGAIN || errno == EINTR ? 0 : -errno;
}

static int out_flush(struct client *client) {
    while (client->out) {
        ssize_t n = send_some(client->fd, client->out + client->out_sent,
                              client->out_length - client->out_sent);
        if (n < 0)
            return (int)n;
        client->out_sent += (size_t)n;
        if (client->out_sent < client->out_length)
            return 0;
        out_clear(client);
        client->missed = 0;
        if (client->pending)
            out_set_slot(client, client->pending);
        client->pending = slot_unref(client->pending);
    }
    return 0;
}

static int out_answer(struct client *client, const char *answer, size_t length) {
    ssize_t n = length > 0 ? send_some(client->fd, answer, length) : 0;

    if (n < 0)
        return (int)n;
    return (size_t)n == length ? 0 : out_set_rest(client, answer + n, length - (size_t)n);
}

/* A report for one client. One that waits for room to send, follower or not, grows older by it. */
static int out_report(struct client *client, struct slot *slot) {
    if (client->follows && client->out && (client->out_heap || client->out_sent > 0)) {
        slot_unref(client->pending);
        client->pending = slot_ref(slot);
    } else if (client->follows) {
        out_set_slot(client, slot); /* also in place of one that was not begun */
    }
    int r = out_flush(client);
    if (r == 0 && (client->out || client->events == EPOLLOUT) &&
        ++client->missed >= client->server->limits.missed)
        return -ETIMEDOUT;
    return r;
}

/* ---- one client: coming in. Returns as above. ---- */

static bool is_blank(const char *line, size_t length) {
    size_t i = 0;

    while (i < length && (line[i] == ' ' || line[i] == '\t' || line[i] == '\r'))
        i++;
    return i == length;
}

static int serve_line(struct client *client, const char *line, size_t length) {
    struct server *server = client->server;
    const struct slot *newest = server->newest;
    const size_t around = sizeof(slot_head) - 1 + sizeof(slot_tail) - 1;

    if (is_blank(line, length))
        return 0;
    struct rpc_answer answer =
        rpc_answer(line, length, newest ? newest->bytes + sizeof(slot_head) - 1 : NULL,
                   newest ? newest->length - around : 0, server->answer, server->limits.answer);
    if (answer.follow && !client->follows) {
        client->follows = true;
        server->counts.followers++;
    }
    return out_answer(client, server->answer, answer.length);
}

static bool has_line(const struct client *client) {
    return memchr(client->in, '\n', client->in_length) != NULL;
}

static int serve_lines(struct client *client, unsigned *budget) {
    size_t start = 0;
    int r = 0;

    while (r == 0 && *budget > 0 && !client->out) {
        char *line = client->in + start;
        const char *end = memchr(line, '\n', client->in_length - start);
        if (!end)
            break;
        r = serve_line(client, line, (size_t)(end - line));
        start += (size_t)(end - line) + 1;
        (*budget)--;
    }
    client->in_length -= start;
    memmove(client->in, client->in + start, client->in_length);
    return r;
}

static void skip_long_line(struct client *client) {
    const char *end = memchr(client->in, '\n', client->in_length);
    size_t skipped = end ? (size_t)(end - client->in) + 1 : client->in_length;

    client->skipping = !end;
    client->in_length -= skipped;
    memmove(client->in, client->in + skipped, client->in_length);
}

/* Reads once. There is room: a full buffer without a whole line in it never stays. */
static int read_some(struct client *client) {
    struct server *server = client->server;
    const size_t size = server->limits.line + 1;
    ssize_t n =
        recv(client->fd, client->in + client->in_length, size - client->in_length, MSG_DONTWAIT);

    if (n < 0)
        return errno == EAGAIN || errno == EINTR ? 0 : -errno;
    client->in_length += (size_t)n;
    client->ended = n == 0;
    if (client->ended && client->in_length > 0)
        client->in[client->in_length++] = '\n';
    if (client->skipping)
        skip_long_line(client);
    if (client->in_length < size || has_line(client))
        return 0;
    client->skipping = true;
    client->in_length = 0;
    return out_answer(client, server->answer,
                      rpc_error(RPC_LENGTH, server->answer, server->limits.answer));
}

static int update_events(struct client *client) {
    uint32_t want = client->out || has_line(client) ? EPOLLOUT : client->ended ? 0 : EPOLLIN;
    int r = want == client->events ? 0 : sd_event_source_set_io_events(client->source, want);

    if (r >= 0)
        client->events = want;
    return r;
}

/* One turn of the loop for one client. */
static int client_turn(struct client *client, uint32_t revents) {
    unsigned budget = client->server->limits.turn;

    if (revents & (EPOLLHUP | EPOLLERR))
        return -EPIPE; /* both directions are gone, nobody would read an answer */
    int r = out_flush(client);
    if (!client->out)
        client->missed = 0;
    if (r == 0)
        r = serve_lines(client, &budget);
    if (r == 0 && budget > 0 && !client->out && !client->ended && !has_line(client)) {
        r = read_some(client);
        if (r == 0)
            r = serve_lines(client, &budget);
    }
    if (r < 0)
        return r;
    if (client->ended && !client->out && !client->follows && !has_line(client))
        return -EPIPE;
    return update_events(client);
}

/* ---- clients come and go ---- */

static void client_free(struct client *client) {
    struct server *server = client->server;

    out_clear(client);
    slot_unref(client->pending);
    *client->link = client->next;
    if (client->next)
        client->next->link = client->link;
    server->counts.clients--;
    if (client->follows)
        server->counts.followers--;
    sd_event_source_disable_unref(client->source);
    close(client->fd);
    free(client);
}

/* why: what one of the functions above returned. */
static void client_leave(struct client *client, int why) {
    if (why == -ETIMEDOUT || why == -ENOBUFS || why == -ENOMEM)
        client->server->counts.dropped++;
    client_free(client);
}

static int on_client(sd_event_source *source, int fd, uint32_t revents, void *userdata) {
    struct client *client = userdata;
    int r = client_turn(client, revents);

    (void)source;
    (void)fd;
    if (r < 0)
        client_leave(client, r);
    return 0;
}

static void turn_away(struct server *server, int fd) {
    char text[RPC_ERROR_MAX];

    send_some(fd, text, rpc_error(RPC_BUSY, text, sizeof(text)));
    close(fd);
    server->counts.refused++;
}

/* Returns 0, or -errno: fd is still the caller's then. */
static int client_new(struct server *server, int fd) {
    scoped(free_p) struct client *client = calloc(1, sizeof(*client) + server->limits.line + 1);
    const int room = (int)(2 * server->limits.report); /* few old reports lie in the kernel then */
    int r;

    if (!client)
        return -ENOMEM;
    r = sd_event_add_io(server->event, &client->source, fd, EPOLLIN, on_client, client);
    if (r < 0)
        return r;
    r = sd_event_source_set_priority(client->source, server->limits.priority);
    if (r < 0 || setsockopt(fd, SOL_SOCKET, SO_SNDBUF, &room, sizeof(room)) < 0) {
        sd_event_source_disable_unref(client->source);
        return r < 0 ? r : -errno;
    }
    client->server = server;
    client->fd = fd;
    client->events = EPOLLIN;
    client->next = server->clients;
    client->link = &server->clients;
    if (client->next)
        client->next->link = &client->next;
    server->clients = client;
    server->counts.clients++;
    server->counts.accepted++;
    client = NULL;
    return 0;
}

static int accept_one(const struct server *server) {
    int fd = accept4(server->listen_fd, NULL, NULL, SOCK_NONBLOCK | SOCK_CLOEXEC);

    return fd < 0 ? -errno : fd;
}

static void spare_open(struct server *server) {
    if (server->spare_fd < 0)
        server->spare_fd = fcntl(server->listen_fd, F_DUPFD_CLOEXEC, 3);
}

/* Without descriptors the spare one serves to tell the newest comer so. Returns 0 or -errno. */
static int turn_away_with_spare(struct server *server) {
    if (server->spare_fd < 0)
        return -EMFILE;
    close(server->spare_fd);
    server->spare_fd = -1;
    int fd = accept_one(server);
    if (fd >= 0)
        turn_away(server, fd);
    spare_open(server);
    return fd < 0 ? fd : 0;
}

/* Returns 0 when there may be more to accept, else -errno. */
static int greet(struct server *server) {
    int fd = accept_one(server);

    if (fd == -EMFILE || fd == -ENFILE)
        return turn_away_with_spare(server);
    if (fd == -EINTR || fd == -ECONNABORTED)
        return 0;
    if (fd < 0)
        return fd;
    if (server->counts.clients >= server->limits.clients || client_new(server, fd) < 0)
        turn_away(server, fd);
    return 0;
}

static void rest(struct server *server, bool resting) {
    if (sd_event_source_set_enabled(server->listener, resting ? SD_EVENT_OFF : SD_EVENT_ON) >= 0)
        server->resting = resting;
}

static int on_listener(sd_event_source *source, int fd, uint32_t revents, void *userdata) {
    struct server *server = userdata;
    int r = 0;

    (void)source;
    (void)fd;
    (void)revents;
    for (int i = 0; i < ACCEPTS_A_TURN && r == 0; i++)
        r = greet(server);
    if (r < 0 && r != -EAGAIN)
        rest(server, true); /* the socket stays readable: do not spin */
    return 0;
}

/* ---- the server ---- */

struct server *server_free(struct server *server) {
    if (!server)
        return NULL;
    for (struct client *next, *client = server->clients; client; client = next) {
        next = client->next;
        client_free(client);
    }
    sd_event_source_disable_unref(server->listener);
    sd_event_unref(server->event);
    if (server->spare_fd >= 0)
        close(server->spare_fd);
    if (server->listen_fd >= 0)
        close(server->listen_fd);
    free(server->slots);
    free(server->slot_bytes);
    free(server->answer);
    free(server);
    return NULL;
}

void server_free_p(struct server **server) {
    *server = server_free(*server);
}

static int allocate(struct server *server) {
    const size_t n = slot_count(&server->limits), size = slot_size(&server->limits);

    server->slots = calloc(n, sizeof(*server->slots));
    server->slot_bytes = calloc(n, size);
    server->answer = malloc(server->limits.answer);
    if (!server->slots || !server->slot_bytes || !server->answer)
        return -ENOMEM;
    for (size_t i = 0; i < n; i++)
        server->slots[i].bytes = server->slot_bytes + i * size;
    return 0;
}

static bool limits_are_sane(const struct server_limits *limits) {
    return limits->clients > 0 && limits->line > 0 && limits->report > 0 &&
           limits->report < INT32_MAX / 2 && limits->answer >= RPC_ERROR_MAX &&
           limits->missed >= 1 && limits->missed <= 255 && limits->turn >= 1;
}

int server_new(struct server **ret, sd_event *event, int listen_fd,
               const struct server_limits *limits) {
    const struct server_limits chosen = limits ? *limits : server_limits_default;
    int flags = fcntl(listen_fd, F_GETFL), r;

    if (!limits_are_sane(&chosen))
        return -EINVAL;
    if (flags < 0 || fcntl(listen_fd, F_SETFL, flags | O_NONBLOCK) < 0)
        return -errno;
    scoped(server_free_p) struct server *server = calloc(1, sizeof(*server));
    if (!server)
        return -ENOMEM;
    server->listen_fd = server->spare_fd = -1; /* the caller's until all went well */
    server->limits = chosen;
    server->event = sd_event_ref(event);
    r = allocate(server);
    if (r >= 0)
        r = sd_event_add_io(event, &server->listener, listen_fd, EPOLLIN, on_listener, server);
    if (r >= 0)
        r = sd_event_source_set_priority(server->listener, chosen.priority);
    if (r < 0)
        return r;
    server->listen_fd = listen_fd;
    spare_open(server);
    *ret = server;
    server = NULL;
    return 0;
}

int server_publish(struct server *server, const char *json, size_t length) {
    if (length > server->limits.report)
        return -EMSGSIZE;
    struct slot *slot = slot_find_free(server);
    if (!slot)
        return -ENOBUFS; /* cannot happen: see the head of this file */
    slot_fill(slot, json, length);
    slot_unref(server->newest);
    server->newest = slot_ref(slot);
    for (struct client *next, *client = server->clients; client; client = next) {
        next = client->next;
        int r = out_report(client, slot);
        if (r == 0)
            r = update_events(client);
        if (r < 0)
            client_leave(client, r);
    }
    if (server->resting) {
        spare_open(server);
        rest(server, false);
    }
    return 0;
}

void server_counts(const struct server *server, struct server_counts *ret) {
    *ret = server->counts;
}

/* ---- the listening socket ---- */

static int unix_socket(void) {
    int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);

    return fd < 0 ? -errno : fd;
}

/* Returns 0 when the path is free (or has been made so), -errno or an enum server_error. */
static int make_way(const struct sockaddr_un *address) {
    struct stat st;

    if (lstat(address->sun_path, &st) < 0)
        return errno == ENOENT ? 0 : -errno;
    if (!S_ISSOCK(st.st_mode))
        return SERVER_E_OTHER;
    scoped(close_p) int fd = unix_socket();
    if (fd < 0)
        return fd;
    if (connect(fd, (const struct sockaddr *)address, sizeof(*address)) == 0 || errno == EAGAIN)
        return SERVER_E_TAKEN;
    if (errno != ECONNREFUSED)
        return errno == ENOENT ? 0 : -errno;
    return unlink(address->sun_path) < 0 && errno != ENOENT ? -errno : 0;
}

int server_listen(const char *path, mode_t mode, int *ret_fd) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    size_t length = strlen(path);

    if (length == 0 || length >= sizeof(address.sun_path))
        return length == 0 ? -EINVAL : -ENAMETOOLONG;
    memcpy(address.sun_path, path, length);
    int r = make_way(&address);
    if (r != 0)
        return r;
    scoped(close_p) int fd = unix_socket();
    if (fd < 0)
        return fd;
    if (bind(fd, (struct sockaddr *)&address, sizeof(address)) < 0)
        return -errno;
    /* Nobody can connect before listen, so the mode is right from the first moment. */
    if (chmod(path, mode) < 0 || listen(fd, SOMAXCONN) < 0) {
        r = -errno;
        unlink(path);
        return r;
    }
    *ret_fd = fd;
    fd = -1;
    return 0;
}

int server_activated(int *ret_fd) {
    int n = sd_listen_fds(1);

    if (n <= 0)
        return n < 0 ? n : SERVER_E_ABSENT;
    if (n > 1 || sd_is_socket_unix(SD_LISTEN_FDS_START, SOCK_STREAM, 1, NULL, 0) <= 0)
        return -EINVAL;
    *ret_fd = SD_LISTEN_FDS_START;
    return 0;
}
