/* Reading the file is one read. The socket speaks JSON-RPC 2.0, one object a line, see
 * brink-status(7): `status` is asked with id 1, `follow` with id 2. */
#include "client/source.h"

#include "client/span.h"
#include "client/view.h"
#include "client/words.h"
#include "util/cleanup.h"
#include "util/files.h"

#include <errno.h>
#include <math.h>
#include <poll.h>
#include <stdbool.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <sysexits.h>

enum { ID_STATUS = 1, ID_FOLLOW = 2, RPC_BUSY = -32000, RPC_EARLY = -32001 };
static const double answer_wait_s = 5;
static const char ask_status[] = "{\"jsonrpc\":\"2.0\",\"id\":1,\"method\":\"status\"}\n";
static const char ask_follow[] = "{\"jsonrpc\":\"2.0\",\"id\":1,\"method\":\"status\"}\n"
                                 "{\"jsonrpc\":\"2.0\",\"id\":2,\"method\":\"follow\"}\n";

struct follower {
    int fd;
    const char *path;
    bool follows; /* else it is one question */
    size_t used;  /* bytes in buf */
    size_t line;  /* of which the first so many are a line handed out */
    char buf[SOURCE_MOST];
};

/* ---- file -------------------------------------------------------------------------------------
 */

static int file_trouble(const char *path, int error, struct trouble *trouble) {
    if (error == ENOENT || error == ENOTDIR)
        return trouble_set(trouble, EX_NOINPUT,
                           "there is no status file %s: brinkd does not run, or writes to another "
                           "place. See `systemctl status brinkd` and `status` under [files] in "
                           "/etc/brink.conf, or name the file with --status",
                           path);
    if (error == EACCES || error == EPERM)
        return trouble_set(trouble, EX_NOPERM,
                           "%s may not be read by you: brinkd writes it for everyone, so look at "
                           "the mode of its folder",
                           path);
    if (error == EFBIG)
        return trouble_set(trouble, EX_DATAERR,
                           "%s is larger than any status (%d bytes): name the right file with "
                           "--status",
                           path, SOURCE_MOST);
    if (error == EISDIR)
        return trouble_set(trouble, EX_NOINPUT, "%s is a folder: name the file in it with --status",
                           path);
    return trouble_set(trouble, EX_IOERR, "%s cannot be read: %s", path, strerror(error));
}

int source_file(const char *path, struct source *ret, struct trouble *trouble) {
    struct source s = {.where = path};
    size_t length;
    int r = files_read(path, SOURCE_MOST, &s.text, &length);

    if (r < 0)
        return file_trouble(path, -r, trouble);
    if (view_parse(s.text, length, path, &s.envelope, trouble) != 0) {
        source_done(&s);
        return trouble->code;
    }
    while (length > 0 && s.text[length - 1] != '}') /* what follows is white space */
        length--;
    s.object = s.envelope;
    s.object_text = s.text;
    s.object_length = length;
    *ret = s;
    return 0;
}

void source_done(struct source *source) {
    json_decref(source->envelope);
    free(source->text);
    *source = (struct source){0};
}

/* ---- socket -----------------------------------------------------------------------------------
 */

static int connect_trouble(const char *path, int error, struct trouble *trouble) {
    switch (error) {
    case ENOENT:
    case ENOTDIR:
        return trouble_set(trouble, EX_UNAVAILABLE,
                           "there is no socket %s: brinkd does not run, or listens elsewhere. See "
                           "`systemctl status brinkd`, or name the socket with --socket",
                           path);
    case ECONNREFUSED:
        return trouble_set(
            trouble, EX_UNAVAILABLE,
            "nobody answers at %s: brinkd has stopped. See `systemctl status brinkd` "
            "and `journalctl -u brinkd`",
            path);
    case EACCES:
    case EPERM:
        return trouble_set(trouble, EX_NOPERM,
                           "%s may not be used by you: see its mode and group, or read the status "
                           "file instead (leave --socket and --follow out)",
                           path);
    case EAGAIN:
        return trouble_set(trouble, EX_TEMPFAIL,
                           "brinkd does not take the connection at %s: too many ask at once, or it "
                           "hangs. Try again in a moment, then see `systemctl status brinkd`",
                           path);
    default:
        return trouble_set(trouble, EX_UNAVAILABLE, "%s cannot be connected to: %s", path,
                           strerror(error));
    }
}

static int open_socket(const char *path, struct trouble *trouble, int *ret) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    struct timeval wait = {.tv_sec = (time_t)answer_wait_s};

    if (strlen(path) >= sizeof(address.sun_path))
        return trouble_set(trouble, EX_USAGE, "--socket: a socket's path has at most %zu bytes",
                           sizeof(address.sun_path) - 1);
    memcpy(address.sun_path, path, strlen(path) + 1);
    scoped(close_p) int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_CLOEXEC, 0);
    if (fd < 0)
        return trouble_set(trouble, EX_OSERR, "no socket to be had: %s", strerror(errno));
    /* Also bounds connect while the listener's queue is full. */
    setsockopt(fd, SOL_SOCKET, SO_SNDTIMEO, &wait, sizeof(wait));
    if (connect(fd, (struct sockaddr *)&address, sizeof(address)) < 0)
        return connect_trouble(path, errno, trouble);
    *ret = fd;
    fd = -1;
    return 0;
}

/* A peer that has closed may have said why before: what it said is read next, so a failure to send
 * is told there. */
static void ask(const struct follower *f, const char *request, size_t length) {
    while (length > 0) {
        ssize_t n = send(f->fd, request, length, MSG_NOSIGNAL);
        if (n < 0 && errno != EINTR)
            return;
        request += n > 0 ? n : 0;
        length -= n > 0 ? (size_t)n : 0;
    }
}

static int open_follower(const char *path, const char *request, size_t length,
                         struct follower **ret, struct trouble *trouble) {
    struct follower *f = calloc(1, sizeof(*f));

    if (!f)
        return trouble_set(trouble, EX_OSERR, "out of memory");
    f->fd = -1;
    f->path = path;
    int code = open_socket(path, trouble, &f->fd);
    if (code) {
        follower_free(f);
        return code;
    }
    ask(f, request, length);
    *ret = f;
    return 0;
}

void follower_free(struct follower *follower) {
    if (!follower)
        return;
    close_p(&follower->fd);
    free(follower);
}

static int wait_readable(const struct follower *f, double wait_s, struct trouble *trouble) {
    struct pollfd p = {.fd = f->fd, .events = POLLIN};
    double ms = fmin(fmax(wait_s, 0) * 1000, 1e9);
    int r;

    do
        r = poll(&p, 1, (int)ms);
    while (r < 0 && errno == EINTR);
    if (r == 0)
        return trouble_set(trouble, EX_UNAVAILABLE,
                           "brinkd has told nothing for %.0f s at %s: it hangs, or is stopped. See "
                           "`systemctl status brinkd`",
                           wait_s, f->path);
    return 0;
}

/* Reads until buf holds a whole line; f->line is then its length with the newline. */
static int next_line(struct follower *f, double wait_s, struct trouble *trouble) {
    const char *end;

    memmove(f->buf, f->buf + f->line, f->used - f->line);
    f->used -= f->line;
    f->line = 0;
    while (!(end = memchr(f->buf, '\n', f->used))) {
        if (f->used == sizeof(f->buf))
            return trouble_set(trouble, EX_PROTOCOL,
                               "what answers at %s is no brinkd: a line of over %d bytes. Name the "
                               "right socket with --socket",
                               f->path, SOURCE_MOST);
        if (wait_readable(f, wait_s, trouble) != 0)
            return trouble->code;
        ssize_t n = recv(f->fd, f->buf + f->used, sizeof(f->buf) - f->used, 0);
        if (n < 0 && errno == EINTR)
            continue;
        if (n <= 0)
            return trouble_set(trouble, EX_UNAVAILABLE,
                               "brinkd has gone: it closed the connection at %s. See `systemctl "
                               "status brinkd`",
                               f->path);
        f->used += (size_t)n;
    }
    f->line = (size_t)(end - f->buf) + 1;
    return 0;
}

static int error_trouble(const json_t *error, const char *path, struct trouble *trouble) {
    const char *message = json_string_value(json_object_get(error, "message"));
    json_int_t code = json_integer_value(json_object_get(error, "code"));
    char clean[VIEW_TEXT];

    if (code == RPC_EARLY)
        return trouble_set(trouble, EX_UNAVAILABLE,
                           "brinkd has no report yet: it has just started. Try again in a moment");
    if (code == RPC_BUSY)
        return trouble_set(trouble, EX_TEMPFAIL,
                           "brinkd at %s has as many clients as it takes. Close some, or read the "
                           "status file instead",
                           path);
    words_clean(message ? message : "", message ? strlen(message) : 0, false, clean, sizeof(clean));
    return trouble_set(trouble, EX_PROTOCOL,
                       "brinkd at %s refuses: %s (%" JSON_INTEGER_FORMAT "). Use a brink and a "
                       "brinkd of one version",
                       path, clean, code);
}

/* What one line from brinkd is. */
enum meaning { MEANS_STATUS, MEANS_NOTHING, MEANS_ERROR };

/* Finds the status in an answer or a notification. */
static enum meaning understand(struct source *s, size_t length, bool follows,
                               struct trouble *trouble) {
    const json_t *version = json_object_get(s->envelope, "jsonrpc");
    const json_t *error = json_object_get(s->envelope, "error");
    const char *method = json_string_value(json_object_get(s->envelope, "method"));
    json_int_t id = json_integer_value(json_object_get(s->envelope, "id"));
    const char *key = method ? "params" : "result";

    if (!json_is_string(version) || strcmp(json_string_value(version), "2.0") != 0) {
        trouble_fill(trouble, EX_PROTOCOL,
                     "what answers at %s is no brinkd: no JSON-RPC 2.0. Name "
                     "the right socket with --socket",
                     s->where);
        return MEANS_ERROR;
    }
    if (error && !json_is_null(error)) {
        if (follows && json_integer_value(json_object_get(error, "code")) == RPC_EARLY)
            return MEANS_NOTHING; /* the first report is about to come */
        error_trouble(error, s->where, trouble);
        return MEANS_ERROR;
    }
    if (method ? strcmp(method, "report") != 0 : id != ID_STATUS)
        return MEANS_NOTHING;
    s->object = json_object_get(s->envelope, key);
    s->object_text = span_member(s->text, length, key, &s->object_length);
    if (s->object && s->object_text)
        return MEANS_STATUS;
    trouble_fill(trouble, EX_PROTOCOL,
                 "what answers at %s is no brinkd: no \"%s\" in its answer. "
                 "Name the right socket with --socket",
                 s->where, key);
    return MEANS_ERROR;
}

/* The line in f as a source of its own. */
static enum meaning read_line(const struct follower *f, struct source *ret,
                              struct trouble *trouble) {
    struct source s = {.where = f->path, .text = malloc(f->line + 1)};
    enum meaning meaning = MEANS_ERROR;

    if (!s.text) {
        trouble_fill(trouble, EX_OSERR, "out of memory");
        return MEANS_ERROR;
    }
    memcpy(s.text, f->buf, f->line);
    s.text[f->line] = '\0';
    if (view_parse(s.text, f->line, f->path, &s.envelope, trouble) == 0)
        meaning = understand(&s, f->line, f->follows, trouble);
    else
        trouble->code = EX_PROTOCOL;
    if (meaning == MEANS_STATUS)
        *ret = s;
    else
        source_done(&s);
    return meaning;
}

int follower_next(struct follower *follower, double wait_s, struct source *ret,
                  struct trouble *trouble) {
    for (;;) {
        if (next_line(follower, wait_s, trouble) != 0)
            return trouble->code;
        enum meaning meaning = read_line(follower, ret, trouble);
        if (meaning != MEANS_NOTHING)
            return meaning == MEANS_STATUS ? 0 : trouble->code;
    }
}

int follower_open(const char *path, struct follower **ret, struct trouble *trouble) {
    int code = open_follower(path, ask_follow, sizeof(ask_follow) - 1, ret, trouble);

    if (!code)
        (*ret)->follows = true;
    return code;
}

int source_socket(const char *path, struct source *ret, struct trouble *trouble) {
    struct follower *f = NULL;

    int code = open_follower(path, ask_status, sizeof(ask_status) - 1, &f, trouble);
    if (code)
        return code;
    code = follower_next(f, answer_wait_s, ret, trouble);
    follower_free(f);
    return code;
}
