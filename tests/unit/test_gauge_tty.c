/* What port_tty_lines makes of a real tty of the kernel, seen from both ends of a pseudo-terminal:
 * one wake-up a line, no byte changed, no echo, speed kept.
 */
#include "gauge/port.h"

#include <asm/ioctls.h>
#include <asm/termbits.h>
#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/ioctl.h>
#include <unistd.h>

#include <cmocka.h>

struct cable {
    int far, near;
};

static struct cable cable_new(void) {
    char path[64];
    struct cable cable = {.far = posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK)};
    assert_true(cable.far >= 0);
    assert_int_equal(grantpt(cable.far), 0);
    assert_int_equal(unlockpt(cable.far), 0);
    assert_int_equal(ptsname_r(cable.far, path, sizeof path), 0);
    cable.near = open(path, O_RDWR | O_NOCTTY | O_NONBLOCK);
    assert_true(cable.near >= 0);
    return cable;
}

static void cable_free(struct cable cable) {
    close(cable.near);
    close(cable.far);
}

static void wait_readable(int fd) {
    struct pollfd ready = {.fd = fd, .events = POLLIN};
    assert_int_equal(poll(&ready, 1, 10000), 1);
}

static bool stays_quiet(int fd) {
    struct pollfd ready = {.fd = fd, .events = POLLIN};
    return poll(&ready, 1, 50) == 0;
}

static void wakes_once_a_line(void **state) {
    (void)state;
    struct cable cable = cable_new();
    char bytes[256];
    assert_int_equal(port_tty_lines(cable.near, false), 0);
    assert_int_equal(write(cable.far, "v=3.7", 5), 5);
    assert_true(stays_quiet(cable.near));
    assert_int_equal(write(cable.far, "12 i=0.8\nv=", 11), 11);
    wait_readable(cable.near);
    assert_int_equal(read(cable.near, bytes, sizeof bytes), 14);
    assert_memory_equal(bytes, "v=3.712 i=0.8\n", 14);
    assert_true(stays_quiet(cable.near));
    assert_int_equal(read(cable.near, bytes, sizeof bytes), -1);
    assert_int_equal(errno, EAGAIN);
    assert_true(stays_quiet(cable.far)); /* no echo */
    cable_free(cable);
}

/* Interrupt, end of file, erase, flow control, a carriage return, 0 and 0xff: all are only bytes.
 */
static void no_byte_is_changed(void **state) {
    (void)state;
    struct cable cable = cable_new();
    unsigned char sent[256];
    unsigned char got[512];
    assert_int_equal(port_tty_lines(cable.near, false), 0);
    for (int i = 0; i < 256; i++)
        sent[i] = (unsigned char)i;
    sent['\n'] = 'x';
    sent[255] = '\n';
    sent[0] = 255;
    sent['x'] = 0;
    assert_int_equal(write(cable.far, sent, sizeof sent), sizeof sent);
    wait_readable(cable.near);
    assert_int_equal(read(cable.near, got, sizeof got), sizeof sent);
    assert_memory_equal(got, sent, sizeof sent);
    assert_int_equal(write(cable.near, "a\nb", 3), 3); /* nothing is put before the newline */
    wait_readable(cable.far);
    assert_int_equal(read(cable.far, got, sizeof got), 3);
    cable_free(cable);
}

/* What was waiting before the mode was set must not be lost. */
static void bytes_from_before_are_kept(void **state) {
    (void)state;
    struct cable cable = cable_new();
    char bytes[64];
    assert_int_equal(write(cable.far, "v=3.7\nv=", 8), 8);
    wait_readable(cable.near);
    assert_int_equal(port_tty_lines(cable.near, false), 0);
    assert_int_equal(read(cable.near, bytes, sizeof bytes), 6);
    assert_int_equal(write(cable.far, "3.8\n", 4), 4);
    wait_readable(cable.near);
    assert_int_equal(read(cable.near, bytes, sizeof bytes), 6);
    assert_memory_equal(bytes, "v=3.8\n", 6);
    cable_free(cable);
}

/* A speed that has no name goes through BOTHER; taking up the line mode must not lose it. */
static void speed_and_frame_stay_and_hang_up_follows(void **state) {
    (void)state;
    struct cable cable = cable_new();
    struct termios2 mode;
    assert_int_equal(ioctl(cable.near, TCGETS2, &mode), 0);
    mode.c_cflag = (mode.c_cflag & ~(tcflag_t)(CBAUD | HUPCL)) | BOTHER | CSTOPB;
    mode.c_ispeed = mode.c_ospeed = 250000;
    assert_int_equal(ioctl(cable.near, TCSETS2, &mode), 0);
    assert_int_equal(port_tty_lines(cable.near, true), 0);
    assert_int_equal(ioctl(cable.near, TCGETS2, &mode), 0);
    assert_int_equal(mode.c_ospeed, 250000);
    assert_true(mode.c_cflag & CSTOPB);
    assert_true(mode.c_cflag & HUPCL);
    assert_int_equal(port_tty_lines(cable.near, false), 0);
    assert_int_equal(ioctl(cable.near, TCGETS2, &mode), 0);
    assert_int_equal(mode.c_ospeed, 250000);
    assert_false(mode.c_cflag & HUPCL);
    cable_free(cable);
}

static void no_tty_is_refused(void **state) {
    (void)state;
    int ends[2];
    assert_int_equal(pipe(ends), 0);
    assert_int_equal(port_tty_lines(ends[0], false), -ENOTTY);
    close(ends[0]);
    close(ends[1]);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(wakes_once_a_line),
        cmocka_unit_test(no_byte_is_changed),
        cmocka_unit_test(bytes_from_before_are_kept),
        cmocka_unit_test(speed_and_frame_stay_and_hang_up_follows),
        cmocka_unit_test(no_tty_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
