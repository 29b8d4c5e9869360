/* The socket server with clients of every kind in one process: the loop is turned by hand, so that
 * each test sees exactly what was done at which point. Allocations of the server are wrapped. */
#include "publish/server.h"

#include "publish/rpc.h"

#include <errno.h>
#include <fcntl.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/epoll.h>
#include <sys/eventfd.h>
#include <sys/resource.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <sys/wait.h>
#include <unistd.h>

#include <cmocka.h>

#define STATUS_REQUEST "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}\n"
#define FOLLOW_REQUEST "{\"jsonrpc\":\"2.0\",\"method\":\"follow\",\"id\":2}\n"
#define ONE_OF_BATCH   "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}"
#define FOUR_OF_BATCH  ONE_OF_BATCH "," ONE_OF_BATCH "," ONE_OF_BATCH "," ONE_OF_BATCH
/* Its answer is larger than what the kernel takes at once beside another of its kind. */
#define BATCH_REQUEST "[" FOUR_OF_BATCH "," FOUR_OF_BATCH "," FOUR_OF_BATCH "]\n"
#define FOLLOW_ANSWER "{\"jsonrpc\":\"2.0\",\"result\":{\"following\":true},\"id\":2}\n"

/* ---- allocations: counted, and failing on request ---- */

void *__real_malloc(size_t size);
void *__real_calloc(size_t n, size_t size);
void *__wrap_malloc(size_t size);
void *__wrap_calloc(size_t n, size_t size);

static unsigned allocations;
static bool no_memory;

void *__wrap_malloc(size_t size) {
    allocations++;
    return no_memory ? NULL : __real_malloc(size);
}

void *__wrap_calloc(size_t n, size_t size) {
    allocations++;
    return no_memory ? NULL : __real_calloc(n, size);
}

/* ---- a server on a socket in a folder of its own ---- */

struct bench {
    char dir[64], path[96];
    sd_event *event;
    struct server *server;
};

static void bench_open(struct bench *bench, const struct server_limits *limits) {
    int fd = -1;

    strcpy(bench->dir, "/tmp/brink-server-XXXXXX");
    assert_non_null(mkdtemp(bench->dir));
    snprintf(bench->path, sizeof(bench->path), "%s/socket", bench->dir);
    assert_int_equal(server_listen(bench->path, 0666, &fd), 0);
    assert_true(sd_event_new(&bench->event) >= 0);
    assert_int_equal(server_new(&bench->server, bench->event, fd, limits), 0);
}

static void bench_close(struct bench *bench) {
    server_free(bench->server);
    sd_event_unref(bench->event);
    unlink(bench->path);
    rmdir(bench->dir);
}

/* Turns the loop until nothing is left to do. A loop that spins never gets there. */
static void spin(struct bench *bench) {
    for (int i = 0; i < 200000; i++) {
        int r = sd_event_run(bench->event, 0);
        assert_true(r >= 0);
        if (r == 0)
            return;
    }
    fail_msg("the loop spins");
}

static struct server_counts counts(const struct bench *bench) {
    struct server_counts ret;

    server_counts(bench->server, &ret);
    return ret;
}

static void publish(struct bench *bench, const char *json) {
    assert_int_equal(server_publish(bench->server, json, strlen(json)), 0);
}

/* A report of about the usual length that carries a number. */
static void publish_number(struct bench *bench, unsigned number) {
    char json[1700];

    snprintf(json, sizeof(json), "{\"n\":%u,\"filler\":\"%01600u\"}", number, 0U);
    publish(bench, json);
}

static int connect_client(const struct bench *bench) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);

    assert_true(fd >= 0);
    strcpy(address.sun_path, bench->path);
    assert_int_equal(connect(fd, (struct sockaddr *)&address, sizeof(address)), 0);
    return fd;
}

static void say(int fd, const char *text) {
    assert_int_equal(send(fd, text, strlen(text), MSG_NOSIGNAL), strlen(text));
}

/* What has come, NUL-ended; *ret_ended when the server closed. */
static size_t hear(int fd, char *buf, size_t size, bool *ret_ended) {
    size_t length = 0;
    ssize_t n;

    while ((n = recv(fd, buf + length, size - 1 - length, 0)) > 0)
        length += (size_t)n;
    buf[length] = '\0';
    if (ret_ended)
        *ret_ended = n == 0 || errno == ECONNRESET;
    return length;
}

/* Everything there is for a client, also what goes out only once it reads. */
static size_t hear_all(struct bench *bench, int fd, char *buf, size_t size) {
    size_t length = 0, n;

    do {
        n = hear(fd, buf + length, size - length, NULL);
        length += n;
        spin(bench);
    } while (n > 0);
    return length;
}

static void assert_hears(int fd, const char *want) {
    char buf[65536];
    bool ended;

    hear(fd, buf, sizeof(buf), &ended);
    assert_string_equal(buf, want);
    assert_false(ended);
}

static void assert_hears_code(int fd, const char *code) {
    char buf[65536];

    hear(fd, buf, sizeof(buf), NULL);
    if (!strstr(buf, code) || strchr(buf, '\n') != buf + strlen(buf) - 1)
        fail_msg("want one line with %s, got %s", code, buf);
}

static void assert_ended(int fd) {
    char buf[4096];
    bool ended;

    hear(fd, buf, sizeof(buf), &ended);
    assert_true(ended);
}

static int follower(struct bench *bench) {
    int fd = connect_client(bench);

    say(fd, FOLLOW_REQUEST);
    spin(bench);
    assert_hears(fd, FOLLOW_ANSWER);
    return fd;
}

static void assert_served(struct bench *bench) {
    int fd = connect_client(bench);
    char buf[65536];

    say(fd, STATUS_REQUEST);
    spin(bench);
    hear(fd, buf, sizeof(buf), NULL);
    assert_non_null(strstr(buf, "\"result\":{"));
    close(fd);
    spin(bench);
}

/* ---- asking and following ---- */

static void test_status(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    int fd = connect_client(&bench);
    say(fd, STATUS_REQUEST);
    spin(&bench);
    assert_hears_code(fd, "\"code\":-32001,");
    publish(&bench, "{\"a\":1}");
    say(fd, STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{\"a\":1},\"id\":1}\n");
    publish(&bench, "{\"a\":22}");
    say(fd, "\n \r\n" STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{\"a\":22},\"id\":1}\n");
    close(fd);
    spin(&bench);
    assert_int_equal(counts(&bench).clients, 0);
    bench_close(&bench);
}

static void test_follow(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{\"a\":0}");
    int fd = follower(&bench), other = connect_client(&bench);
    spin(&bench);
    assert_int_equal(counts(&bench).followers, 1);
    publish(&bench, "{\"a\":1}");
    publish(&bench, "{\"a\":2}");
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":{\"a\":1}}\n"
                     "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":{\"a\":2}}\n");
    say(fd, STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{\"a\":2},\"id\":1}\n");
    assert_hears(other, "");
    close(fd);
    publish(&bench, "{\"a\":3}");
    spin(&bench);
    assert_int_equal(counts(&bench).followers, 0);
    assert_int_equal(counts(&bench).clients, 1);
    close(other);
    bench_close(&bench);
}

static void test_report_too_long(void **state) {
    struct server_limits limits = server_limits_default;
    struct bench bench;

    (void)state;
    limits.report = 8;
    bench_open(&bench, &limits);
    publish(&bench, "12345678");
    assert_int_equal(server_publish(bench.server, "123456789", 9), -EMSGSIZE);
    int fd = connect_client(&bench);
    say(fd, STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":12345678,\"id\":1}\n");
    close(fd);
    bench_close(&bench);
}

/* ---- odd ways of sending ---- */

static void test_a_byte_at_a_time(void **state) {
    static const char request[] = STATUS_REQUEST;
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "[]");
    int fd = connect_client(&bench);
    for (size_t i = 0; i < sizeof(request) - 1; i++) {
        assert_hears(fd, "");
        assert_int_equal(send(fd, request + i, 1, 0), 1);
        spin(&bench);
    }
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":[],\"id\":1}\n");
    close(fd);
    bench_close(&bench);
}

/* More requests in one write than one turn serves: all are answered, in their order. */
static void test_many_requests_in_one_write(void **state) {
    enum { N = 60 };
    struct bench bench;
    char text[4096] = "", want[8192] = "";

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    for (int i = 0; i < N; i++) {
        snprintf(text + strlen(text), sizeof(text) - strlen(text),
                 "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":%d}\n", i);
        snprintf(want + strlen(want), sizeof(want) - strlen(want),
                 "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":%d}\n", i);
    }
    char buf[8192];
    int fd = connect_client(&bench);
    say(fd, text);
    spin(&bench);
    hear_all(&bench, fd, buf, sizeof(buf));
    assert_string_equal(buf, want);
    /* The same from a peer that has gone quiet before it was served. */
    say(fd, text);
    shutdown(fd, SHUT_WR);
    spin(&bench);
    hear_all(&bench, fd, buf, sizeof(buf));
    assert_string_equal(buf, want);
    assert_ended(fd);
    close(fd);
    bench_close(&bench);
}

/* What `printf REQUEST | socat - UNIX-CONNECT:...` does: no newline, end of sending, then reading.
 */
static void test_half_closed(void **state) {
    struct bench bench;
    char buf[1024];
    bool ended;

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = connect_client(&bench);
    say(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"status\",\"id\":1}");
    shutdown(fd, SHUT_WR);
    spin(&bench);
    hear(fd, buf, sizeof(buf), &ended);
    assert_string_equal(buf, "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":1}\n");
    assert_true(ended);
    close(fd);
    assert_int_equal(counts(&bench).clients, 0);
    bench_close(&bench);
}

static void test_half_closed_follower(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    int fd = follower(&bench);
    shutdown(fd, SHUT_WR);
    spin(&bench);
    publish(&bench, "7");
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":7}\n");
    spin(&bench);
    assert_int_equal(counts(&bench).followers, 1);
    close(fd);
    spin(&bench);
    assert_int_equal(counts(&bench).clients, 0);
    bench_close(&bench);
}

/* Connected and silent, or silent in the middle of a line: it costs its place and nothing else. */
static void test_half_open(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int silent = connect_client(&bench), half = connect_client(&bench);
    say(half, "{\"jsonrpc\":");
    spin(&bench);
    for (int i = 0; i < 100; i++)
        publish(&bench, "{}");
    assert_served(&bench);
    assert_int_equal(counts(&bench).clients, 2);
    close(silent);
    close(half);
    spin(&bench);
    assert_int_equal(counts(&bench).clients, 0);
    assert_int_equal(counts(&bench).dropped, 0);
    bench_close(&bench);
}

/* ---- long lines ---- */

static void fill_line(char *line, size_t length) {
    const size_t n = strlen(STATUS_REQUEST) - 1;

    memset(line, ' ', length - n);
    memcpy(line + length - n, STATUS_REQUEST, n);
    strcpy(line + length, "\n");
}

static void test_line_of_the_longest_kind(void **state) {
    struct bench bench;
    char line[8192];

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = connect_client(&bench);
    fill_line(line, 4096);
    say(fd, line);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":1}\n");
    fill_line(line, 4097);
    say(fd, line);
    spin(&bench);
    assert_hears_code(fd, "\"code\":-32002,");
    say(fd, STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":1}\n");
    close(fd);
    bench_close(&bench);
}

/* One error for a line of any length, then the next line counts again. */
static void test_endless_line(void **state) {
    struct bench bench;
    char piece[1001];

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = connect_client(&bench);
    memset(piece, '[', sizeof(piece) - 1);
    piece[sizeof(piece) - 1] = '\0';
    for (int i = 0; i < 50; i++) {
        say(fd, piece);
        spin(&bench);
    }
    assert_hears_code(fd, "\"code\":-32002,");
    say(fd, "still the same line\n" STATUS_REQUEST);
    spin(&bench);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":1}\n");
    for (int i = 0; i < 6; i++)
        say(fd, piece);
    shutdown(fd, SHUT_WR);
    spin(&bench);
    assert_hears_code(fd, "\"code\":-32002,");
    assert_ended(fd);
    close(fd);
    bench_close(&bench);
}

/* ---- clients that do not read ---- */

/* Whole notifications with rising numbers only. Returns the last number, 0 for none. */
static unsigned check_numbers(const char *text, unsigned *ret_lines) {
    unsigned last = 0, lines = 0;

    for (const char *end; *text; text = end + 1, lines++) {
        unsigned number = 0;
        int head = 0;
        end = strchr(text, '\n');
        assert_non_null(end);
        sscanf(text,
               "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":{\"n\":%u,\"filler\":%n",
               &number, &head);
        assert_true(head > 0 && end - text == head + 1602 + 2);
        assert_true(number > last);
        last = number;
    }
    *ret_lines = lines;
    return last;
}

/* Publishes until a report finds no room in the follower's socket. Returns the last number. */
static unsigned fill_up(struct bench *bench, int fd) {
    char byte;
    unsigned number = 0;
    struct server_counts before = counts(bench);

    for (size_t queued = 0, last = 1; queued != last || number < 8;) {
        char peek[65536];
        last = queued;
        publish_number(bench, ++number);
        ssize_t n = recv(fd, peek, sizeof(peek), MSG_PEEK);
        queued = n > 0 ? (size_t)n : 0;
        assert_true(number < 200);
    }
    assert_int_equal(counts(bench).clients, before.clients);
    assert_int_equal(recv(fd, &byte, 1, MSG_PEEK), 1);
    return number;
}

/* Whole messages that the kernel holds for a client. */
static unsigned count_waiting(int fd) {
    static char buf[1024 * 1024];
    ssize_t length = recv(fd, buf, sizeof(buf), MSG_PEEK);
    unsigned n = 0;

    for (ssize_t i = 0; i < length; i++)
        n += buf[i] == '\n';
    return n;
}

static void test_slow_follower_gets_the_newest(void **state) {
    static char buf[1024 * 1024];
    struct bench bench;
    unsigned lines;

    (void)state;
    bench_open(&bench, NULL);
    int fd = follower(&bench);
    unsigned number = fill_up(&bench, fd), waiting = count_waiting(fd);
    for (int i = 0; i < 20; i++)
        publish_number(&bench, ++number);
    spin(&bench);
    hear_all(&bench, fd, buf, sizeof(buf));
    assert_int_equal(check_numbers(buf, &lines), number);
    assert_int_equal(lines, waiting + 1); /* those between were left out */
    assert_int_equal(counts(&bench).dropped, 0);
    /* It keeps up again: nothing is left out any more. */
    for (int i = 0; i < 50; i++) {
        publish_number(&bench, ++number);
        hear_all(&bench, fd, buf, sizeof(buf));
        assert_int_equal(check_numbers(buf, &lines), number);
        assert_int_equal(lines, 1);
    }
    close(fd);
    bench_close(&bench);
}

static void test_follower_that_never_reads_is_dropped(void **state) {
    struct bench bench;
    unsigned published = 0;

    (void)state;
    bench_open(&bench, NULL);
    int fd = follower(&bench);
    unsigned number = fill_up(&bench, fd);
    while (counts(&bench).clients > 0) {
        publish_number(&bench, ++number);
        spin(&bench);
        assert_true(++published <= server_limits_default.missed);
    }
    /* fill_up's last one or two were missed already. */
    assert_true(published >= server_limits_default.missed - 3);
    assert_int_equal(counts(&bench).dropped, 1);
    assert_int_equal(counts(&bench).followers, 0);
    close(fd);
    bench_close(&bench);
}

/* The kernel takes a usual report whole or not at all, so half-sent ones need larger ones. */
enum { LARGE = 220000 };

static void publish_large(struct bench *bench, char filler) {
    static char json[LARGE];

    memset(json, filler, sizeof(json));
    json[0] = json[LARGE - 1] = '"';
    assert_int_equal(server_publish(bench->server, json, sizeof(json)), 0);
}

/* Takes one whole line off the text. Returns the letter that fills it. */
static char take_large(char **text) {
    static const char head[] = "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":\"";
    char *at = *text + sizeof(head) - 1, filler = *at;

    assert_memory_equal(*text, head, sizeof(head) - 1);
    while (*at == filler)
        at++;
    assert_int_equal(at - *text, sizeof(head) - 1 + LARGE - 2);
    assert_memory_equal(at, "\"}\n", 3);
    *text = at + 3;
    return filler;
}

/* What is begun is finished, then comes the newest; what was published between is left out. */
static void test_half_sent_report(void **state) {
    static char buf[26 * (LARGE + 100)];
    struct server_limits limits = server_limits_default;
    struct bench bench;

    (void)state;
    limits.report = LARGE;
    bench_open(&bench, &limits);
    int fd = follower(&bench);
    for (int round = 0; round < 40; round++) {
        char *text = buf, last = '\0';
        int lines = 0;
        for (char letter = 'a'; letter <= 'j'; letter++)
            publish_large(&bench, letter);
        hear_all(&bench, fd, buf, sizeof(buf));
        for (; *text; lines++) {
            last = take_large(&text);
            assert_true(last == 'a' + lines || last == 'j');
        }
        assert_int_equal(last, 'j');
        assert_true(lines < 10);
    }
    assert_int_equal(counts(&bench).dropped, 0);
    close(fd);
    bench_close(&bench);
}

/* One more follower stuck with each report: some at every age, and the slots never run out. */
static void test_slots_never_run_out(void **state) {
    enum { N = 40, BUFFERED = 5 }; /* reports that the kernel takes before one is stuck */
    struct server_limits limits = server_limits_default;
    struct bench bench;
    int fds[N];

    (void)state;
    limits.report = LARGE;
    limits.missed = 5;
    bench_open(&bench, &limits);
    for (int i = 0; i < N; i++) {
        fds[i] = follower(&bench);
        publish_large(&bench, 'x');
        assert_true(counts(&bench).followers <= limits.missed + BUFFERED);
    }
    assert_true(counts(&bench).dropped >= N - limits.missed - BUFFERED);
    for (int i = 0; i < N; i++)
        close(fds[i]);
    bench_close(&bench);
}

/* Writes requests until its own socket takes no more. Returns how many whole ones went in. */
static unsigned flood(int fd, const char *request) {
    const size_t n = strlen(request);
    unsigned sent = 0;

    while (send(fd, request, n, MSG_NOSIGNAL) == (ssize_t)n)
        sent++;
    assert_int_equal(errno, EAGAIN);
    return sent;
}

/* A flooder that does not read is no longer read from; others are served as before. */
static void test_flood_fills_only_its_own_socket(void **state) {
    static char buf[8 * 1024 * 1024];
    struct bench bench;
    unsigned asked = 0, answered = 0;

    (void)state;
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    int fd = connect_client(&bench);
    for (int i = 0; i < 20; i++) {
        asked += flood(fd, STATUS_REQUEST);
        spin(&bench);
    }
    assert_true(asked > 100);
    assert_served(&bench);
    for (size_t n; answered < asked; answered += (unsigned)n) {
        size_t length = hear_all(&bench, fd, buf, sizeof(buf));
        n = 0;
        for (size_t i = 0; i < length; i++)
            n += buf[i] == '\n';
        assert_true(n > 0);
    }
    assert_int_equal(answered, asked);
    close(fd);
    bench_close(&bench);
}

/* One that asks and never reads does not stay for ever either. */
static void test_asker_that_never_reads_is_dropped(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    int fd = connect_client(&bench);
    for (int i = 0; i < 20; i++) {
        flood(fd, STATUS_REQUEST);
        spin(&bench);
    }
    for (unsigned i = 0; i < server_limits_default.missed; i++) {
        assert_int_equal(counts(&bench).clients, 1);
        publish_number(&bench, i + 2);
        spin(&bench);
    }
    assert_int_equal(counts(&bench).clients, 0);
    assert_int_equal(counts(&bench).dropped, 1);
    close(fd);
    bench_close(&bench);
}

/* But one that reads, if slowly, stays; it may wait for nothing but its turn. */
static void test_slow_asker_stays(void **state) {
    struct bench bench;
    char buf[2000];

    (void)state;
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    int fd = connect_client(&bench);
    for (unsigned i = 0; i < 4 * server_limits_default.missed; i++) {
        while (send(fd, STATUS_REQUEST, strlen(STATUS_REQUEST), MSG_NOSIGNAL) > 0)
            continue;
        spin(&bench);
        assert_true(hear(fd, buf, sizeof(buf), NULL) > 0);
        spin(&bench);
        publish_number(&bench, i + 2);
    }
    assert_int_equal(counts(&bench).clients, 1);
    close(fd);
    bench_close(&bench);
}

static void test_queued_bytes_are_bounded(void **state) {
    struct server_limits limits = server_limits_default;
    struct bench bench;
    int fds[8];

    (void)state;
    limits.queued = 10000; /* room for the rest of a few answers */
    bench_open(&bench, &limits);
    publish_number(&bench, 1);
    for (int i = 0; i < 8; i++) {
        fds[i] = connect_client(&bench);
        flood(fds[i], BATCH_REQUEST);
        spin(&bench);
    }
    struct server_counts now = counts(&bench);
    print_message("%llu of 8 dropped\n", (unsigned long long)now.dropped);
    assert_true(now.dropped >= 4 && now.dropped < 8);
    assert_int_equal(now.clients, 8 - now.dropped);
    assert_served(&bench);
    for (int i = 0; i < 8; i++)
        close(fds[i]);
    spin(&bench);
    /* Their bytes are given back. */
    int fd = connect_client(&bench);
    flood(fd, BATCH_REQUEST);
    spin(&bench);
    assert_int_equal(counts(&bench).clients, 1);
    close(fd);
    bench_close(&bench);
}

/* ---- want of places, memory and descriptors ---- */

static void test_the_newest_comer_is_told(void **state) {
    struct server_limits limits = server_limits_default;
    struct bench bench;
    int fds[5];

    (void)state;
    limits.clients = 4;
    bench_open(&bench, &limits);
    publish(&bench, "{}");
    for (int i = 0; i < 5; i++)
        fds[i] = connect_client(&bench);
    spin(&bench);
    assert_hears_code(fds[4], "\"code\":-32000,");
    assert_ended(fds[4]);
    for (int i = 0; i < 4; i++) {
        say(fds[i], STATUS_REQUEST);
        spin(&bench);
        assert_hears(fds[i], "{\"jsonrpc\":\"2.0\",\"result\":{},\"id\":1}\n");
    }
    assert_int_equal(counts(&bench).refused, 1);
    close(fds[0]);
    spin(&bench);
    assert_served(&bench);
    for (int i = 1; i < 5; i++)
        close(fds[i]);
    bench_close(&bench);
}

static void test_no_memory_for_a_newcomer(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = follower(&bench), late = connect_client(&bench);
    no_memory = true;
    spin(&bench);
    no_memory = false;
    assert_hears_code(late, "\"code\":-32000,");
    assert_ended(late);
    publish(&bench, "{}");
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":{}}\n");
    assert_served(&bench);
    close(fd);
    close(late);
    bench_close(&bench);
}

static void test_no_memory_drops_one_client(void **state) {
    struct bench bench;

    (void)state;
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    int fd = follower(&bench), flooder = connect_client(&bench);
    spin(&bench);
    flood(flooder, BATCH_REQUEST);
    no_memory = true;
    spin(&bench);
    no_memory = false;
    assert_int_equal(counts(&bench).dropped, 1);
    assert_int_equal(counts(&bench).clients, 1);
    publish(&bench, "1");
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":1}\n");
    close(fd);
    close(flooder);
    bench_close(&bench);
}

static void test_no_heap_for_a_report(void **state) {
    struct bench bench;
    int fds[8];

    (void)state;
    bench_open(&bench, NULL);
    for (int i = 0; i < 8; i++)
        fds[i] = follower(&bench);
    allocations = 0;
    for (unsigned i = 1; i <= 60; i++) { /* some read, some do not and are dropped in the end */
        char buf[8192];
        publish_number(&bench, i);
        spin(&bench);
        for (int k = 0; k < 4; k++)
            assert_true(hear(fds[k], buf, sizeof(buf), NULL) > 1600);
    }
    assert_int_equal(allocations, 0);
    assert_int_equal(counts(&bench).dropped, 4);
    for (int i = 0; i < 8; i++)
        close(fds[i]);
    bench_close(&bench);
}

static void limit_descriptors(rlim_t most) {
    struct rlimit limit;

    assert_int_equal(getrlimit(RLIMIT_NOFILE, &limit), 0);
    limit.rlim_cur = most;
    assert_int_equal(setrlimit(RLIMIT_NOFILE, &limit), 0);
}

static rlim_t descriptor_limit(void) {
    struct rlimit limit;

    assert_int_equal(getrlimit(RLIMIT_NOFILE, &limit), 0);
    return limit.rlim_cur;
}

/* valgrind closes what it accepted beyond the limit by itself, which no kernel does. */
static void skip_under_valgrind(void) {
    const char *preload = getenv("LD_PRELOAD");

    if (preload && strstr(preload, "vgpreload")) {
        print_message("skip: limits of descriptors cannot be tried under valgrind\n");
        skip();
    }
}

/* EMFILE: the newcomer is told with the help of the spare descriptor, and the loop does not spin.
 */
static void test_no_descriptor_for_a_newcomer(void **state) {
    const rlim_t before = descriptor_limit();
    struct bench bench;

    (void)state;
    skip_under_valgrind();
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = follower(&bench), late[3];
    for (int i = 0; i < 3; i++)
        late[i] = connect_client(&bench);
    limit_descriptors((rlim_t)late[2] + 1);
    spin(&bench);
    limit_descriptors(before);
    for (int i = 0; i < 3; i++) {
        assert_hears_code(late[i], "\"code\":-32000,");
        assert_ended(late[i]);
        close(late[i]);
    }
    assert_int_equal(counts(&bench).refused, 3);
    assert_served(&bench);
    close(fd);
    bench_close(&bench);
}

/* Not even the spare one helps: newcomers wait for the next report, and the loop does not spin. */
static void test_listener_rests_until_the_next_report(void **state) {
    const rlim_t before = descriptor_limit();
    struct bench bench;

    (void)state;
    skip_under_valgrind();
    bench_open(&bench, NULL);
    publish(&bench, "{}");
    int fd = follower(&bench), late = connect_client(&bench);
    limit_descriptors(0);
    spin(&bench);
    publish(&bench, "1"); /* still none: it tries and rests again */
    spin(&bench);
    limit_descriptors(before);
    assert_hears(fd, "{\"jsonrpc\":\"2.0\",\"method\":\"report\",\"params\":1}\n");
    assert_int_equal(counts(&bench).clients, 1);
    publish(&bench, "2");
    say(late, STATUS_REQUEST);
    spin(&bench);
    assert_hears(late, "{\"jsonrpc\":\"2.0\",\"result\":2,\"id\":1}\n");
    /* It has its spare one again. */
    int later = connect_client(&bench);
    limit_descriptors((rlim_t)later + 1);
    spin(&bench);
    limit_descriptors(before);
    assert_hears_code(later, "\"code\":-32000,");
    close(later);
    close(fd);
    close(late);
    bench_close(&bench);
}

/* ---- the gauge comes first ---- */

static int on_gauge(sd_event_source *source, int fd, uint32_t revents, void *userdata) {
    uint64_t value;

    (void)source;
    (void)revents;
    assert_int_equal(read(fd, &value, sizeof(value)), sizeof(value));
    (*(int *)userdata)++;
    return 0;
}

/* With fifty flooders ready, a sample is handled in the very next turn of the loop. */
static void test_gauge_is_not_starved(void **state) {
    enum { N = 50 };
    struct bench bench;
    sd_event_source *source = NULL;
    int fds[N], samples = 0, gauge = eventfd(0, EFD_CLOEXEC | EFD_NONBLOCK);
    const uint64_t one = 1;
    static char buf[1024 * 1024];

    (void)state;
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    assert_true(sd_event_add_io(bench.event, &source, gauge, EPOLLIN, on_gauge, &samples) >= 0);
    for (int i = 0; i < N; i++)
        fds[i] = connect_client(&bench);
    spin(&bench);
    for (int round = 1; round <= 100; round++) {
        for (int i = 0; i < N; i++)
            flood(fds[i], STATUS_REQUEST);
        assert_true(sd_event_run(bench.event, 0) > 0);
        assert_int_equal(write(gauge, &one, sizeof(one)), sizeof(one));
        assert_true(sd_event_run(bench.event, 0) > 0);
        assert_int_equal(samples, round);
        for (int i = 0; i < N; i++)
            hear(fds[i], buf, sizeof(buf), NULL);
    }
    for (int i = 0; i < N; i++)
        close(fds[i]);
    sd_event_source_disable_unref(source);
    close(gauge);
    bench_close(&bench);
}

/* ---- a thousand of all kinds ---- */

enum kind { PROMPT, SLOW, NEVER, FLOODING, SILENT, HALF_LINE, HALF_CLOSED, GONE, KINDS };

static void start_client(int fd, enum kind kind) {
    if (kind == SILENT)
        return;
    if (kind == HALF_LINE) {
        say(fd, "{\"jsonrpc\"");
        return;
    }
    say(fd, FOLLOW_REQUEST);
    if (kind == HALF_CLOSED)
        shutdown(fd, SHUT_WR);
}

static void live_a_round(int *fds, int n, unsigned round) {
    static char buf[1024 * 1024];

    for (int i = 0; i < n; i++) {
        char want[64];
        switch ((enum kind)(i % KINDS)) {
        case PROMPT:
        case HALF_CLOSED:
            snprintf(want, sizeof(want), "\"params\":{\"n\":%u,", round);
            hear(fds[i], buf, sizeof(buf), NULL);
            assert_non_null(strstr(buf, want));
            break;
        case SLOW:
            if (round % 8 == 0)
                hear(fds[i], buf, 3000, NULL);
            break;
        case FLOODING:
            (void)!send(fds[i], "[1]\n[]\n{\n\n" STATUS_REQUEST, 52, MSG_NOSIGNAL);
            break;
        case GONE:
            if (fds[i] >= 0 && round == (unsigned)i % 40) {
                close(fds[i]);
                fds[i] = -1;
            }
            break;
        default:
            break;
        }
    }
}

static int raise_descriptors(int want) {
    struct rlimit limit;

    getrlimit(RLIMIT_NOFILE, &limit);
    if (limit.rlim_cur < (rlim_t)want)
        limit.rlim_cur = limit.rlim_max < (rlim_t)want ? limit.rlim_max : (rlim_t)want;
    setrlimit(RLIMIT_NOFILE, &limit);
    return limit.rlim_cur > (rlim_t)want ? want : (int)limit.rlim_cur;
}

static void test_a_thousand_clients(void **state) {
    static int fds[1000];
    static char buf[65536];
    int n = (raise_descriptors(2100) - 100) / 2;
    struct bench bench;

    (void)state;
    n = n > 1000 ? 1000 : n;
    print_message("%d clients\n", n);
    bench_open(&bench, NULL);
    publish_number(&bench, 1);
    for (int i = 0; i < n; i++) {
        fds[i] = connect_client(&bench);
        start_client(fds[i], (enum kind)(i % KINDS));
    }
    spin(&bench);
    for (int i = 0; i < n; i++)
        if (i % KINDS == PROMPT || i % KINDS == HALF_CLOSED)
            assert_hears(fds[i], FOLLOW_ANSWER);
    for (unsigned round = 2; round < 48; round++) {
        publish_number(&bench, round);
        live_a_round(fds, n, round);
        spin(&bench);
    }
    const uint64_t share = (uint64_t)(n / KINDS);
    struct server_counts now = counts(&bench);
    print_message("%zu left, %zu follow, %llu dropped\n", now.clients, now.followers,
                  (unsigned long long)now.dropped);
    /* Who never reads is dropped; who is slow stays, and so does who reads without sending. */
    assert_true(now.dropped >= 2 * share && now.dropped <= 2 * share + 2);
    assert_true(now.followers >= 3 * share);
    assert_served(&bench);
    for (int i = 0; i < n; i++) {
        hear(fds[i], buf, sizeof(buf), NULL);
        close(fds[i]);
    }
    spin(&bench);
    assert_int_equal(counts(&bench).clients, 0);
    bench_close(&bench);
}

/* ---- the listening socket ---- */

static void test_listen(void **state) {
    char dir[] = "/tmp/brink-listen-XXXXXX", path[64], longer[200];
    int fd = -1, again = -1;
    struct stat st;
    mode_t old = umask(0077);

    (void)state;
    assert_non_null(mkdtemp(dir));
    snprintf(path, sizeof(path), "%s/socket", dir);
    assert_int_equal(server_listen(path, 0666, &fd), 0);
    assert_int_equal(stat(path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0666);
    assert_int_equal(server_listen(path, 0666, &again), SERVER_E_TAKEN);
    assert_int_equal(again, -1);
    close(fd); /* the daemon was killed: its socket stays behind */
    assert_int_equal(server_listen(path, 0660, &fd), 0);
    assert_int_equal(stat(path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0660);
    close(fd);
    unlink(path);
    int file = open(path, O_WRONLY | O_CREAT | O_CLOEXEC, 0600);
    assert_int_equal(server_listen(path, 0666, &again), SERVER_E_OTHER);
    close(file);
    assert_int_equal(unlink(path), 0); /* and it was left alone */
    memset(longer, 'x', sizeof(longer) - 1);
    longer[sizeof(longer) - 1] = '\0';
    assert_int_equal(server_listen(longer, 0666, &again), -ENAMETOOLONG);
    assert_int_equal(server_listen("", 0666, &again), -EINVAL);
    snprintf(longer, sizeof(longer), "%s/nowhere/socket", dir);
    assert_int_equal(server_listen(longer, 0666, &again), -ENOENT);
    rmdir(dir);
    umask(old);
}

/* sd_listen_fds(3): LISTEN_PID, LISTEN_FDS, descriptors from 3 on. In a process of its own. */
static int activated_with(int fd, const char *n) {
    char pid[16];
    int got = -1;

    snprintf(pid, sizeof(pid), "%d", (int)getpid());
    if (fd >= 0)
        dup2(fd, 3);
    if (n) {
        setenv("LISTEN_PID", pid, 1);
        setenv("LISTEN_FDS", n, 1);
    }
    int r = server_activated(&got);
    return r == 0 ? got == 3 ? 0 : 100 : r > 0 ? r : -r;
}

static int in_a_child(int fd, const char *n) {
    pid_t child = fork();
    int status = 0;

    if (child == 0)
        _exit(activated_with(fd, n));
    waitpid(child, &status, 0);
    return WIFEXITED(status) ? WEXITSTATUS(status) : -1;
}

static void test_activated(void **state) {
    char dir[] = "/tmp/brink-listen-XXXXXX", path[64];
    int fd = -1, pair[2];

    (void)state;
    assert_non_null(mkdtemp(dir));
    snprintf(path, sizeof(path), "%s/socket", dir);
    assert_int_equal(server_listen(path, 0666, &fd), 0);
    assert_int_equal(socketpair(AF_UNIX, SOCK_STREAM, 0, pair), 0);
    assert_int_equal(in_a_child(-1, NULL), SERVER_E_ABSENT);
    assert_int_equal(in_a_child(fd, "1"), 0);
    assert_int_equal(in_a_child(pair[0], "1"), EINVAL); /* does not listen */
    dup2(pair[0], 4);
    assert_int_equal(in_a_child(fd, "2"), EINVAL);
    close(4);
    close(fd);
    close(pair[0]);
    close(pair[1]);
    unlink(path);
    rmdir(dir);
}

static void test_bad_limits(void **state) {
    struct server_limits limits = server_limits_default;
    struct server *server = NULL;
    sd_event *event = NULL;
    int pair[2];

    (void)state;
    assert_true(sd_event_new(&event) >= 0);
    assert_int_equal(socketpair(AF_UNIX, SOCK_STREAM, 0, pair), 0);
    limits.answer = 10;
    assert_int_equal(server_new(&server, event, pair[0], &limits), -EINVAL);
    assert_int_equal(server_new(&server, event, -1, NULL), -EBADF);
    no_memory = true;
    assert_int_equal(server_new(&server, event, pair[0], NULL), -ENOMEM);
    no_memory = false;
    assert_null(server);
    assert_int_equal(close(pair[0]), 0); /* still ours */
    close(pair[1]);
    assert_null(server_free(NULL));
    sd_event_unref(event);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_status),
        cmocka_unit_test(test_follow),
        cmocka_unit_test(test_report_too_long),
        cmocka_unit_test(test_a_byte_at_a_time),
        cmocka_unit_test(test_many_requests_in_one_write),
        cmocka_unit_test(test_half_closed),
        cmocka_unit_test(test_half_closed_follower),
        cmocka_unit_test(test_half_open),
        cmocka_unit_test(test_line_of_the_longest_kind),
        cmocka_unit_test(test_endless_line),
        cmocka_unit_test(test_slow_follower_gets_the_newest),
        cmocka_unit_test(test_follower_that_never_reads_is_dropped),
        cmocka_unit_test(test_half_sent_report),
        cmocka_unit_test(test_slots_never_run_out),
        cmocka_unit_test(test_flood_fills_only_its_own_socket),
        cmocka_unit_test(test_asker_that_never_reads_is_dropped),
        cmocka_unit_test(test_slow_asker_stays),
        cmocka_unit_test(test_queued_bytes_are_bounded),
        cmocka_unit_test(test_the_newest_comer_is_told),
        cmocka_unit_test(test_no_memory_for_a_newcomer),
        cmocka_unit_test(test_no_memory_drops_one_client),
        cmocka_unit_test(test_no_heap_for_a_report),
        cmocka_unit_test(test_no_descriptor_for_a_newcomer),
        cmocka_unit_test(test_listener_rests_until_the_next_report),
        cmocka_unit_test(test_gauge_is_not_starved),
        cmocka_unit_test(test_a_thousand_clients),
        cmocka_unit_test(test_listen),
        cmocka_unit_test(test_activated),
        cmocka_unit_test(test_bad_limits),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
