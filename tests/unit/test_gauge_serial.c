/* The kind `serial` as far as it goes without hardware: a made-up USB serial port whose node is a
 * pseudo-terminal. Those have no modem lines, so the calls for them end in this file's ioctl(),
 * which also writes down what was done to DTR.
 */
#include "gauge/gauge.h"

#include "unit/mockdev.h"

#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <poll.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdint.h>
#include <sys/file.h>
#include <sys/ioctl.h>
#include <sys/stat.h>
#include <sys/syscall.h>
#include <termios.h>

#include <cmocka.h>

struct world {
    struct mockdev mock;
    int raised, dropped; /* times DTR was set and cleared */
    bool exclusive;
};

/* What ioctl() below has no other way to reach. */
static struct world *world;

int ioctl(int fd, unsigned long request, ...) {
    va_list args;
    va_start(args, request);
    void *argument = va_arg(args, void *);
    va_end(args);
    bool dtr = (request == TIOCMBIS || request == TIOCMBIC) && (*(int *)argument & TIOCM_DTR);
    if (world && dtr)
        ++*(request == TIOCMBIS ? &world->raised : &world->dropped);
    if (world && request == TIOCEXCL)
        world->exclusive = true;
    if (request == TIOCMBIS || request == TIOCMBIC)
        return 0;
    if (request == TIOCMGET) {
        *(int *)argument = TIOCM_DTR | TIOCM_RTS;
        return 0;
    }
    return (int)syscall(SYS_ioctl, fd, request, argument);
}

static int setup(void **state) {
    *state = world = calloc(1, sizeof *world);
    return world && mockdev_start(&world->mock) ? 0 : -1;
}

static int teardown(void **state) {
    (void)state;
    mockdev_stop(&world->mock);
    free(world);
    world = NULL;
    return 0;
}

/* Plugs in usb:1209:0001:A1 as /dev/NODE; returns the far end of its cable. */
static int plug_in(const char *node, const char *usb_port) {
    char *tty = mockdev_add_serial(&world->mock, usb_port, "1209", "0001", "A1", node);
    int fd = mockdev_cable(&world->mock, node);
    assert_true(fd >= 0);
    free(tty);
    return fd;
}

static struct gauge *gauge_on(const char *device, bool tell, bool reset) {
    struct gauge_config config = {
        .kind = GAUGE_SERIAL, .baud = 57600, .tell = tell, .reset_on_open = reset};
    struct gauge *gauge = NULL;
    snprintf(config.device, sizeof config.device, "%s", device);
    assert_int_equal(gauge_new(&gauge, &config), 0);
    return gauge;
}

static void open_it(struct gauge *gauge) {
    int r = gauge_open(gauge);
    if (r != 0)
        fail_msg("open: %d %s", r, gauge_error_text(gauge, r));
}

static void send_line(int fd, const char *line) {
    assert_int_equal(write(fd, line, strlen(line)), strlen(line));
}

static void expect_voltage(struct gauge *gauge, double voltage_V) {
    struct pollfd ready = {.fd = gauge_fd(gauge), .events = POLLIN};
    struct frame frame;
    do
        assert_int_equal(poll(&ready, 1, 10000), 1);
    while (gauge_read(gauge) == 0 && gauge_next(gauge, &frame) == 0);
    assert_true(fabs(frame.token[0].value - voltage_V) < 1e-12);
}

static void by_identity_8n1_and_lines(void **state) {
    (void)state;
    free(mockdev_add_serial(&world->mock, "1-3", "1209", "0002", "C", "ttyUSB0"));
    int far = plug_in("ttyACM4", "1-1");
    struct gauge *gauge = gauge_on("usb:1209:0001:A1", true, false);
    assert_string_equal(gauge_describe(gauge), "usb 1209:0001:A1");
    open_it(gauge);
    assert_string_equal(gauge_describe(gauge), "usb 1209:0001:A1 (/dev/ttyACM4)");
    struct termios mode;
    assert_int_equal(tcgetattr(gauge_fd(gauge), &mode), 0);
    assert_int_equal(cfgetispeed(&mode), B57600);
    assert_int_equal(mode.c_cflag & (CSIZE | CSTOPB | PARENB | CRTSCTS | HUPCL), CS8);
    assert_int_equal(mode.c_iflag, IGNBRK);
    assert_int_equal(mode.c_lflag, ICANON);
    assert_int_equal(fcntl(gauge_fd(gauge), F_GETFD) & FD_CLOEXEC, FD_CLOEXEC);
    assert_int_equal(fcntl(gauge_fd(gauge), F_GETFL) & O_NONBLOCK, O_NONBLOCK);
    send_line(far, "t=1 v=9 half of\nv=3.71\n");
    expect_voltage(gauge, 3.71);
    assert_int_equal(gauge_counts(gauge)->fault[LINE_F_PARTIAL], 1);
    assert_int_equal(gauge_tell(gauge, "stage=ample charge=0.634"), 0);
    char heard[64];
    ssize_t n = read(far, heard, sizeof heard);
    assert_int_equal(n, 25);
    assert_memory_equal(heard, "stage=ample charge=0.634\n", 25);
    gauge_free(gauge);
    close(far);
}

/* The kernel and libserialport raise DTR at open; nothing of ours may make it fall. */
static void dtr_never_falls_unless_asked(void **state) {
    (void)state;
    int far = plug_in("ttyACM4", "1-1");
    struct gauge *gauge = gauge_on("/dev/ttyACM4", false, false);
    open_it(gauge);
    gauge_close(gauge);
    assert_int_equal(world->dropped, 0);
    assert_true(world->exclusive);
    gauge_free(gauge);
    world->raised = 0;
    gauge = gauge_on("/dev/ttyACM4", false, true);
    open_it(gauge);
    struct termios mode;
    assert_int_equal(tcgetattr(gauge_fd(gauge), &mode), 0);
    assert_true(mode.c_cflag & HUPCL);
    assert_int_equal(world->dropped, 1);
    assert_true(world->raised >= 1);
    gauge_free(gauge);
    close(far);
}

static void another_holder_is_busy(void **state) {
    (void)state;
    int far = plug_in("ttyACM4", "1-1");
    struct gauge *one = gauge_on("/dev/ttyACM4", false, false);
    struct gauge *two = gauge_on("usb:1209:0001", false, false);
    open_it(one);
    assert_int_equal(gauge_open(two), GAUGE_E_BUSY);
    assert_non_null(strstr(gauge_error_text(two, GAUGE_E_BUSY), "/dev/ttyACM4: another program"));
    gauge_close(one);
    open_it(two);
    gauge_free(one);
    gauge_free(two);
    close(far);
}

/* Complaint 25 of the field: the adapter came back under another number. */
static void complaint_25_returns_under_another_number(void **state) {
    (void)state;
    int far = plug_in("ttyACM0", "1-1");
    struct gauge *gauge = gauge_on("usb:1209:0001", false, false);
    open_it(gauge);
    struct hotplug_event gone = {.added = false, .node = "/dev/ttyACM0"};
    struct hotplug_event other = {.added = false, .node = "/dev/ttyACM1"};
    assert_true(gauge_concerns(gauge, &gone));
    assert_false(gauge_concerns(gauge, &other));
    close(far);
    assert_int_equal(gauge_read(gauge), GAUGE_E_GONE);
    assert_int_equal(gauge_fd(gauge), -1);
    mockdev_remove(&world->mock, "/sys/devices/1-1");
    assert_int_equal(gauge_open(gauge), GAUGE_E_NOT_FOUND);
    far = plug_in("ttyACM1", "1-2");
    open_it(gauge);
    assert_string_equal(gauge_describe(gauge), "usb 1209:0001 (/dev/ttyACM1)");
    send_line(far, "\nv=3.9\n");
    expect_voltage(gauge, 3.9);
    gauge_free(gauge);
    close(far);
}

int main(int argc, char **argv) {
    (void)argc;
    if (!mockdev_ready(argv)) {
        puts("skip: libumockdev is not installed, so no serial port can be made up");
        return 77;
    }
    const struct CMUnitTest tests[] = {
        cmocka_unit_test_setup_teardown(by_identity_8n1_and_lines, setup, teardown),
        cmocka_unit_test_setup_teardown(dtr_never_falls_unless_asked, setup, teardown),
        cmocka_unit_test_setup_teardown(another_holder_is_busy, setup, teardown),
        cmocka_unit_test_setup_teardown(complaint_25_returns_under_another_number, setup, teardown),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
