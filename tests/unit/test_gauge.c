/* Gauges over what a machine without hardware has: pseudo-terminals, FIFOs and sockets. */
#include "gauge/gauge.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <grp.h>
#include <math.h>
#include <poll.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>

#include <cmocka.h>

/* A folder of its own for each test, and the path of a device in it. */
struct place {
    char folder[64];
    char device[96];
};

static int setup(void **state) {
    struct place *place = calloc(1, sizeof *place);
    *state = place;
    if (!place)
        return -1;
    snprintf(place->folder, sizeof place->folder, "/tmp/brink-gauge-XXXXXX");
    if (!mkdtemp(place->folder))
        return -1;
    snprintf(place->device, sizeof place->device, "%s/gauge", place->folder);
    return 0;
}

static int teardown(void **state) {
    struct place *place = *state;
    unlink(place->device);
    int r = rmdir(place->folder);
    free(place);
    return r;
}

static struct gauge *stream_at(const char *device, bool tell) {
    struct gauge_config config = {.kind = GAUGE_STREAM, .tell = tell};
    struct gauge *gauge = NULL;
    snprintf(config.device, sizeof config.device, "%s", device);
    assert_int_equal(gauge_new(&gauge, &config), 0);
    assert_false(gauge_is_open(gauge));
    return gauge;
}

static void open_it(struct gauge *gauge) {
    int r = gauge_open(gauge);
    if (r != 0)
        fail_msg("open: %d %s", r, gauge_error_text(gauge, r));
    assert_true(gauge_is_open(gauge));
}

static void assert_refused(struct gauge *gauge, int error, const char *part) {
    int r = gauge_open(gauge);
    const char *text = gauge_error_text(gauge, r);
    if (r != error || !strstr(text, part))
        fail_msg("%d: '%s' and not %d with '%s'", r, text, error, part);
    assert_false(gauge_is_open(gauge));
    assert_int_equal(gauge_fd(gauge), -1);
}

/* The far end of a new pseudo-terminal; place->device is a link to the near one. */
static int pty_at(const struct place *place) {
    char path[64];
    int fd = posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK | O_CLOEXEC);
    assert_true(fd >= 0);
    assert_int_equal(grantpt(fd), 0);
    assert_int_equal(unlockpt(fd), 0);
    assert_int_equal(ptsname_r(fd, path, sizeof path), 0);
    unlink(place->device);
    assert_int_equal(symlink(path, place->device), 0);
    return fd;
}

static int listen_at(const struct place *place, int type, int backlog) {
    struct sockaddr_un address = {.sun_family = AF_UNIX};
    int fd = socket(AF_UNIX, type | SOCK_CLOEXEC, 0);
    assert_true(fd >= 0);
    memcpy(address.sun_path, place->device, strlen(place->device));
    unlink(place->device);
    assert_int_equal(bind(fd, (const struct sockaddr *)&address, sizeof address), 0);
    if (type == SOCK_STREAM)
        assert_int_equal(listen(fd, backlog), 0);
    return fd;
}

static void put(int fd, const char *text) {
    assert_int_equal(write(fd, text, strlen(text)), strlen(text));
}

static void wait_readable(int fd) {
    struct pollfd ready = {.fd = fd, .events = POLLIN};
    assert_true(poll(&ready, 1, 10000) == 1);
}

static int take(struct gauge *gauge, struct frame *frame) {
    for (;;) {
        if (gauge_next(gauge, frame) == 1)
            return 0;
        if (!gauge_is_open(gauge))
            return GAUGE_E_GONE;
        wait_readable(gauge_fd(gauge));
        gauge_read(gauge);
    }
}

static void expect(struct gauge *gauge, double value) {
    struct frame frame;
    assert_int_equal(take(gauge, &frame), 0);
    assert_true(fabs(frame.token[0].value - value) < 1e-12);
}

static void expect_gone(struct gauge *gauge) {
    struct frame frame;
    assert_int_equal(take(gauge, &frame), GAUGE_E_GONE);
    assert_int_equal(gauge_fd(gauge), -1);
    assert_int_equal(gauge_read(gauge), GAUGE_E_GONE);
}

/* ---- pseudo-terminal ---------------------------------------------------------------------- */

static void pty_lines(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, false);
    assert_string_equal(gauge_describe(gauge), place->device);
    put(far, "v=3.71\n"); /* said before anybody listened: not lost */
    open_it(gauge);
    expect(gauge, 3.71);
    put(far, "v=3.72 i=0.1\r\nv=3.73\n");
    expect(gauge, 3.72);
    expect(gauge, 3.73);
    assert_int_equal(gauge_read(gauge), 0); /* nothing there, and not gone */
    assert_true(gauge_is_open(gauge));
    assert_int_equal(gauge_counts(gauge)->lines, 3);
    assert_int_equal(gauge_counts(gauge)->bad_lines, 0);
    assert_int_equal(gauge_tell(gauge, "stage=ample"), GAUGE_E_TELL);
    close(far);
    expect_gone(gauge);
    gauge_free(gauge);
}

/* One line, one wake-up, one read: measured by count, with bytes trickling in one by one. */
static void pty_wakes_once_a_line(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, false);
    open_it(gauge);
    static const char line[] = "v=3.712 i=0.84 c=11\n";
    int wakes = 0;
    for (int i = 0; i < 20; i++)
        for (const char *c = line; *c; c++) {
            assert_int_equal(write(far, c, 1), 1);
            struct pollfd ready = {.fd = gauge_fd(gauge), .events = POLLIN};
            struct frame frame;
            if (poll(&ready, 1, *c == '\n' ? 10000 : 0) == 0)
                continue;
            wakes++;
            assert_int_equal(gauge_read(gauge), 0);
            assert_int_equal(gauge_next(gauge, &frame), 1);
        }
    assert_int_equal(wakes, 20);
    gauge_free(gauge);
    close(far);
}

/* The kernel cuts a line that is too long for it; ours is refused long before, the next counts. */
static void pty_overlong_line(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, false);
    struct frame frame;
    open_it(gauge);
    put(far, "v=3.5\n");
    expect(gauge, 3.5);
    for (int i = 0; i < 1000; i++) {
        struct pollfd room = {.fd = far, .events = POLLOUT};
        assert_int_equal(poll(&room, 1, 10000), 1);
        put(far, "v=3.71 i=0.84 ");
        gauge_read(gauge);
        assert_int_equal(gauge_next(gauge, &frame), 0);
    }
    put(far, "\nv=3.6\n");
    expect(gauge, 3.6);
    assert_int_equal(gauge_counts(gauge)->fault[LINE_F_LONG], 1);
    gauge_free(gauge);
    close(far);
}

/* Lines that came before the hang-up are still had after it. */
static void lines_in_hand_outlive_the_device(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 4);
    struct gauge *gauge = stream_at(place->device, false);
    struct frame frame;
    open_it(gauge);
    int peer = accept(listener, NULL, NULL);
    put(peer, "v=3.7\nv=3.8\nv=3.9 i=");
    close(peer);
    close(listener);
    assert_int_equal(gauge_read(gauge), 0);
    assert_int_equal(gauge_read(gauge), GAUGE_E_GONE);
    assert_false(gauge_is_open(gauge));
    assert_int_equal(gauge_next(gauge, &frame), 1);
    assert_int_equal(gauge_next(gauge, &frame), 1);
    assert_int_equal(gauge_next(gauge, &frame), 0);
    assert_int_equal(gauge_counts(gauge)->lines, 2);
    gauge_free(gauge);
}

/* ---- FIFO --------------------------------------------------------------------------------- */

static void fifo_waits_for_its_writer_and_sees_it_leave(void **state) {
    struct place *place = *state;
    assert_int_equal(mkfifo(place->device, 0600), 0);
    struct gauge *gauge = stream_at(place->device, false);
    open_it(gauge);
    struct pollfd ready = {.fd = gauge_fd(gauge), .events = POLLIN};
    assert_int_equal(poll(&ready, 1, 0), 0);
    assert_int_equal(gauge_read(gauge), 0); /* nobody writes yet: not gone */
    assert_true(gauge_is_open(gauge));
    for (int i = 0; i < 3; i++) {
        int writer = open(place->device, O_WRONLY | O_NONBLOCK);
        assert_true(writer >= 0);
        put(writer, "v=3.7\n");
        expect(gauge, 3.7);
        close(writer);
        expect_gone(gauge);
        open_it(gauge);
    }
    gauge_free(gauge);
}

static void fifo_cannot_be_told(void **state) {
    struct place *place = *state;
    assert_int_equal(mkfifo(place->device, 0600), 0);
    struct gauge *gauge = stream_at(place->device, true);
    assert_refused(gauge, GAUGE_E_TELL, "a FIFO goes one way only");
    gauge_free(gauge);
}

/* ---- socket ------------------------------------------------------------------------------- */

static void socket_both_ways(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 4);
    struct gauge *gauge = stream_at(place->device, true);
    char heard[64];
    open_it(gauge);
    int peer = accept(listener, NULL, NULL);
    put(peer, "v=3.71 i=0");
    assert_int_equal(gauge_read(gauge), 0);
    put(peer, ".84\n");
    expect(gauge, 3.71);
    assert_int_equal(gauge_tell(gauge, "stage=reserve charge=0.249"), 0);
    assert_int_equal(read(peer, heard, sizeof heard), 27);
    assert_memory_equal(heard, "stage=reserve charge=0.249\n", 27);
    close(peer);
    assert_int_equal(gauge_tell(gauge, "stage=edge"), GAUGE_E_GONE); /* and no SIGPIPE */
    expect_gone(gauge);
    assert_non_null(strstr(gauge_error_text(gauge, GAUGE_E_GONE), "has vanished"));
    close(listener);
    assert_refused(gauge, GAUGE_E_NOT_FOUND, "nobody listens");
    gauge_free(gauge);
}

static void socket_with_a_full_queue_is_busy(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 0);
    struct gauge *gauges[8];
    int r = 0;
    int n = 0;
    while (n < 8 && r == 0) {
        gauges[n] = stream_at(place->device, false);
        r = gauge_open(gauges[n++]);
    }
    assert_int_equal(r, GAUGE_E_BUSY);
    while (n > 0)
        gauge_free(gauges[--n]);
    close(listener);
}

static void socket_of_datagrams_is_refused(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_DGRAM, 0);
    struct gauge *gauge = stream_at(place->device, false);
    assert_refused(gauge, GAUGE_E_DEVICE, "no stream socket");
    gauge_free(gauge);
    close(listener);
}

/* ---- telling ------------------------------------------------------------------------------ */

/* A gauge that never reads must not hold us up; when it reads again, lines are whole, but for the
 * one that was cut, which a newline ends. */
static void full_device_drops_lines_and_never_waits(int far, struct gauge *gauge) {
    static const char line[] = "stage=reserve charge=0.2491";
    char heard[4096];
    char text[64] = "";
    size_t length = 0;
    int whole = 0;
    int sent = 0;
    int r = 0;
    for (int i = 0; i < 200000 && r == 0; i++)
        sent += (r = gauge_tell(gauge, line)) == 0;
    assert_int_equal(r, GAUGE_E_FULL);
    assert_true(gauge_is_open(gauge));
    for (int round = 0; round < 2; round++) {
        struct pollfd ready = {.fd = far, .events = POLLIN};
        while (poll(&ready, 1, 50) == 1) {
            ssize_t n = read(far, heard, sizeof heard);
            assert_true(n > 0);
            for (ssize_t i = 0; i < n; i++) {
                if (heard[i] != '\n') {
                    assert_true(length < sizeof text - 1);
                    text[length++] = heard[i];
                    continue;
                }
                whole += length == sizeof line - 1 && memcmp(text, line, length) == 0;
                assert_memory_equal(text, line, length); /* a line or its beginning */
                length = 0;
            }
        }
        if (round == 0)
            assert_int_equal(gauge_tell(gauge, line), 0);
    }
    assert_int_equal(length, 0);
    assert_int_equal(whole, sent + 1);
}

static void pty_that_does_not_read(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, true);
    open_it(gauge);
    full_device_drops_lines_and_never_waits(far, gauge);
    gauge_free(gauge);
    close(far);
}

static void socket_that_does_not_read(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 4);
    struct gauge *gauge = stream_at(place->device, true);
    open_it(gauge);
    int peer = accept(listener, NULL, NULL);
    full_device_drops_lines_and_never_waits(peer, gauge);
    gauge_free(gauge);
    close(peer);
    close(listener);
}

static void what_cannot_be_told(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, true);
    char longest[GAUGE_TELL_MAX];
    memset(longest, 'x', sizeof longest);
    assert_int_equal(gauge_tell(gauge, "stage=edge"), GAUGE_E_GONE);
    open_it(gauge);
    longest[GAUGE_TELL_MAX - 1] = 0;
    assert_int_equal(gauge_tell(gauge, longest), -EINVAL);
    longest[GAUGE_TELL_MAX - 2] = 0;
    assert_int_equal(gauge_tell(gauge, longest), 0);
    assert_int_equal(gauge_tell(gauge, "two\nlines"), -EINVAL);
    gauge_free(gauge);
    close(far);
}

/* ---- what is refused ---------------------------------------------------------------------- */

static void what_is_no_gauge(void **state) {
    struct place *place = *state;
    struct gauge *gauge = stream_at(place->device, false);
    assert_refused(gauge, GAUGE_E_NOT_FOUND, place->device);
    int fd = open(place->device, O_CREAT | O_WRONLY | O_CLOEXEC, 0600);
    close(fd);
    assert_refused(gauge, GAUGE_E_DEVICE, "a regular file is no gauge");
    gauge_free(gauge);
    gauge = stream_at(place->folder, false);
    assert_refused(gauge, GAUGE_E_DEVICE, "a folder is no gauge");
    gauge_free(gauge);
    unlink(place->device);
    assert_int_equal(symlink(place->device, place->device), 0);
    gauge = stream_at(place->device, false);
    assert_refused(gauge, GAUGE_E_NOT_FOUND, "circle");
    gauge_free(gauge);
}

static void serial_refuses_what_is_no_serial_port(void **state) {
    struct place *place = *state;
    struct gauge_config config = {.kind = GAUGE_SERIAL, .baud = 115200};
    struct gauge *gauge = NULL;
    int far = pty_at(place);
    snprintf(config.device, sizeof config.device, "%s", place->device);
    assert_int_equal(gauge_new(&gauge, &config), 0);
    assert_refused(gauge, GAUGE_E_DEVICE, "kind = stream");
    close(far);
    unlink(place->device);
    assert_int_equal(mkfifo(place->device, 0600), 0);
    assert_refused(gauge, GAUGE_E_DEVICE, "kind = stream");
    gauge_free(gauge);
}

/* Says which group and which command; tried as another user, so only root can try. */
static void permission_names_group_and_command(void **state) {
    struct place *place = *state;
    const struct group *group = getgrnam("dialout");
    if (geteuid() != 0 || !group) {
        print_message("skip: refused permission needs root and a group dialout to try\n");
        skip();
    }
    assert_int_equal(mkfifo(place->device, 0600), 0);
    assert_int_equal(chown(place->device, 0, group->gr_gid), 0);
    assert_int_equal(chmod(place->device, 0660), 0);
    assert_int_equal(chmod(place->folder, 0711), 0);
    struct gauge *gauge = stream_at(place->device, false);
    assert_int_equal(seteuid(65534), 0);
    int r = gauge_open(gauge);
    assert_int_equal(seteuid(0), 0);
    assert_int_equal(r, GAUGE_E_PERMISSION);
    const char *text = gauge_error_text(gauge, r);
    assert_non_null(strstr(text, place->device));
    assert_non_null(strstr(text, "belongs to the group dialout (mode 0660)"));
    assert_non_null(strstr(text, "usermod -aG dialout nobody"));
    assert_int_equal(chmod(place->device, 0600), 0);
    assert_int_equal(seteuid(65534), 0);
    r = gauge_open(gauge);
    assert_int_equal(seteuid(0), 0);
    assert_int_equal(r, GAUGE_E_PERMISSION);
    assert_non_null(strstr(gauge_error_text(gauge, r), "udev rule"));
    gauge_free(gauge);
}

static void configs_that_are_refused(void **state) {
    (void)state;
    static const struct {
        struct gauge_config config;
        int error;
        const char *part;
    } cases[] = {
        {{.kind = GAUGE_SERIAL, .device = "usb:12", .baud = 9600}, GAUGE_E_IDENTITY, "usb:1209:"},
        {{.kind = GAUGE_SERIAL, .device = "ttyACM0", .baud = 9600}, GAUGE_E_IDENTITY, "path"},
        {{.kind = GAUGE_SERIAL, .device = "", .baud = 9600}, GAUGE_E_IDENTITY, "path"},
        {{.kind = GAUGE_SERIAL, .device = "/dev/ttyACM0"}, GAUGE_E_SETTINGS, "115200"},
        {{.kind = GAUGE_STREAM, .device = ""}, GAUGE_E_IDENTITY, "path"},
        {{.kind = GAUGE_STREAM, .device = "usb:1209:0001"}, GAUGE_E_IDENTITY, "kind = serial"},
    };
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct gauge *gauge = NULL;
        char text[256];
        assert_int_equal(gauge_new(&gauge, &cases[i].config), cases[i].error);
        assert_null(gauge);
        gauge_config_error_text(&cases[i].config, cases[i].error, text, sizeof text);
        if (!strstr(text, cases[i].part))
            fail_msg("'%s' does not say '%s'", text, cases[i].part);
    }
    gauge_free(NULL);
}

/* ---- coming and going --------------------------------------------------------------------- */

static int open_files(void) {
    DIR *folder = opendir("/proc/self/fd");
    assert_non_null(folder);
    int n = 0;
    while (readdir(folder))
        n++;
    closedir(folder);
    return n;
}

/* Complaint 25 of the field: a stale descriptor keeps a dead node alive, and the adapter returns
 * under another number. A thousand times, each with another pseudo-terminal. */
static void complaint_25_vanishes_and_returns_a_thousand_times(void **state) {
    struct place *place = *state;
    int far = pty_at(place);
    struct gauge *gauge = stream_at(place->device, true);
    int before = open_files();
    for (int i = 0; i < 1000; i++) {
        char line[32];
        open_it(gauge);
        snprintf(line, sizeof line, "v=%d\nv=3", i);
        put(far, line);
        expect(gauge, i);
        assert_int_equal(gauge_tell(gauge, "stage=ample charge=0.9"), 0);
        close(far);
        if (i % 2) /* noticed by reading, or closed and opened without */
            expect_gone(gauge);
        far = pty_at(place);
    }
    gauge_close(gauge);
    assert_int_equal(open_files(), before);
    close(far);
    for (int i = 0; i < 100; i++)
        assert_refused(gauge, GAUGE_E_NOT_FOUND, place->device);
    assert_int_equal(open_files(), before - 1);
    assert_int_equal(gauge_counts(gauge)->lines, 1000);
    assert_int_equal(gauge_counts(gauge)->bad_lines, 0);
    gauge_free(gauge);
}

static void socket_comes_and_goes(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 4);
    struct gauge *gauge = stream_at(place->device, false);
    int before = open_files();
    for (int i = 0; i < 1000; i++) {
        open_it(gauge);
        int peer = accept(listener, NULL, NULL);
        put(peer, "v=3.7\n");
        expect(gauge, 3.7);
        close(peer);
        expect_gone(gauge);
    }
    assert_int_equal(open_files(), before);
    close(listener);
    gauge_free(gauge);
}

static void rubbish_is_never_fatal(void **state) {
    struct place *place = *state;
    int listener = listen_at(place, SOCK_STREAM, 4);
    struct gauge *gauge = stream_at(place->device, false);
    struct frame frame;
    char bytes[5000];
    open_it(gauge);
    int peer = accept(listener, NULL, NULL);
    srand(7);
    for (int i = 0; i < 200; i++) {
        for (size_t j = 0; j < sizeof bytes; j++)
            bytes[j] = (char)(rand() & 0xff);
        assert_int_equal(write(peer, bytes, sizeof bytes), sizeof bytes);
        for (int j = 0; j < 2; j++) {
            assert_int_equal(gauge_read(gauge), 0);
            while (gauge_next(gauge, &frame) == 1)
                ;
        }
    }
    put(peer, "\nv=3.7\n");
    expect(gauge, 3.7);
    assert_true(gauge_counts(gauge)->fault[LINE_F_BINARY] > 1000);
    close(peer);
    close(listener);
    gauge_free(gauge);
}

#define EACH(test) cmocka_unit_test_setup_teardown(test, setup, teardown)

int main(void) {
    const struct CMUnitTest tests[] = {
        EACH(pty_lines),
        EACH(pty_wakes_once_a_line),
        EACH(pty_overlong_line),
        EACH(lines_in_hand_outlive_the_device),
        EACH(fifo_waits_for_its_writer_and_sees_it_leave),
        EACH(fifo_cannot_be_told),
        EACH(socket_both_ways),
        EACH(socket_with_a_full_queue_is_busy),
        EACH(socket_of_datagrams_is_refused),
        EACH(pty_that_does_not_read),
        EACH(socket_that_does_not_read),
        EACH(what_cannot_be_told),
        EACH(what_is_no_gauge),
        EACH(serial_refuses_what_is_no_serial_port),
        EACH(permission_names_group_and_command),
        EACH(configs_that_are_refused),
        EACH(complaint_25_vanishes_and_returns_a_thousand_times),
        EACH(socket_comes_and_goes),
        EACH(rubbish_is_never_fatal),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
