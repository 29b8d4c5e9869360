/* udev events of serial ports, and finding a port by its USB identity, on a made-up /sys. */
#include "gauge/gauge.h"
#include "gauge/hotplug.h"
#include "gauge/serial.h"

#include "unit/mockdev.h"

#include <poll.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdint.h>

#include <cmocka.h>

static int setup(void **state) {
    struct mockdev *mock = calloc(1, sizeof *mock);
    *state = mock;
    return mock && mockdev_start(mock) ? 0 : -1;
}

static int teardown(void **state) {
    mockdev_stop(*state);
    free(*state);
    return 0;
}

static void wait_and_take(struct hotplug *hotplug, struct hotplug_event *ret) {
    struct pollfd ready = {.fd = hotplug_fd(hotplug), .events = POLLIN};
    assert_int_equal(poll(&ready, 1, 10000), 1);
    assert_int_equal(hotplug_next(hotplug, ret), 1);
}

static void events_of_serial_ports_only(void **state) {
    struct mockdev *mock = *state;
    struct hotplug *hotplug = NULL;
    struct hotplug_event event;
    const char *none[] = {NULL};
    const char *node[] = {"DEVNAME", "/dev/mem", NULL};
    assert_int_equal(hotplug_new(&hotplug), 0);
    assert_int_equal(hotplug_next(hotplug, &event), 0);
    free(mockdev_add(mock, "mem", "mem", NULL, none, node)); /* adding sends its event */
    char *tty = mockdev_add_serial(mock, "1-1.2", "1209", "00AB", "H7 1", "ttyACM3");
    wait_and_take(hotplug, &event);
    assert_true(event.added);
    assert_string_equal(event.node, "/dev/ttyACM3");
    assert_string_equal(event.vendor, "1209");
    assert_string_equal(event.product, "00AB");
    assert_string_equal(event.serial, "H7 1");
    assert_int_equal(hotplug_next(hotplug, &event), 0);
    mockdev_event(mock, tty, "change");
    mockdev_event(mock, tty, "remove");
    wait_and_take(hotplug, &event);
    assert_false(event.added);
    assert_string_equal(event.node, "/dev/ttyACM3");
    assert_int_equal(hotplug_next(hotplug, &event), 0);
    free(tty);
    hotplug_free(hotplug);
    hotplug_free(NULL);
}

static void built_in_ports_have_no_identity(void **state) {
    struct mockdev *mock = *state;
    struct hotplug *hotplug = NULL;
    struct hotplug_event event;
    struct serial_seen seen[4];
    size_t n = 9;
    const char *none[] = {NULL};
    const char *node[] = {"DEVNAME", "/dev/ttyS5", NULL};
    assert_int_equal(hotplug_new(&hotplug), 0);
    free(mockdev_add(mock, "tty", "ttyS5", NULL, none, node));
    wait_and_take(hotplug, &event);
    assert_string_equal(event.node, "/dev/ttyS5");
    assert_string_equal(event.vendor, "");
    assert_int_equal(serial_list(seen, 4, &n), 0);
    assert_int_equal(n, 0);
    hotplug_free(hotplug);
}

static void list_is_bounded(void **state) {
    struct mockdev *mock = *state;
    struct serial_seen seen[2];
    size_t n = 0;
    free(mockdev_add_serial(mock, "1-1", "1209", "0001", "A", "ttyACM0"));
    free(mockdev_add_serial(mock, "1-2", "1209", "0001", NULL, "ttyACM1"));
    free(mockdev_add_serial(mock, "1-3", "1209", "0002", "C", "ttyUSB0"));
    memset(seen, 'x', sizeof seen);
    assert_int_equal(serial_list(seen, 1, &n), 0);
    assert_int_equal(n, 3);
    assert_string_equal(seen[0].node, "/dev/ttyACM0");
    assert_string_equal(seen[0].usb_port, "1-1");
    assert_string_equal(seen[0].interface, "00");
    assert_int_equal(seen[1].node[0], 'x');
}

static struct gauge *serial_gauge(const char *device) {
    struct gauge_config config = {.kind = GAUGE_SERIAL, .baud = 115200};
    struct gauge *gauge = NULL;
    snprintf(config.device, sizeof config.device, "%s", device);
    assert_int_equal(gauge_new(&gauge, &config), 0);
    return gauge;
}

static void assert_says(struct gauge *gauge, int error, const char *part) {
    const char *text = gauge_error_text(gauge, error);
    if (!strstr(text, part))
        fail_msg("'%s' does not say '%s'", text, part);
}

static void not_found_says_what_is_there(void **state) {
    struct mockdev *mock = *state;
    struct gauge *gauge = serial_gauge("usb:1209:0001");
    assert_int_equal(gauge_open(gauge), GAUGE_E_NOT_FOUND);
    assert_says(gauge, GAUGE_E_NOT_FOUND, "usb:1209:0001 is not plugged in");
    assert_says(gauge, GAUGE_E_NOT_FOUND, "check its cable");
    free(mockdev_add_serial(mock, "1-3", "1209", "0002", "C", "ttyUSB0"));
    assert_int_equal(gauge_open(gauge), GAUGE_E_NOT_FOUND);
    assert_says(gauge, GAUGE_E_NOT_FOUND, "/dev/ttyUSB0 is usb:1209:0002:C at port 1-3");
    gauge_free(gauge);
    gauge = serial_gauge("/dev/ttyACM7");
    assert_int_equal(gauge_open(gauge), GAUGE_E_NOT_FOUND);
    assert_says(gauge, GAUGE_E_NOT_FOUND, "/dev/ttyUSB0 is usb:1209:0002:C at port 1-3");
    gauge_free(gauge);
}

static void two_matches_are_refused_with_both_named(void **state) {
    struct mockdev *mock = *state;
    free(mockdev_add_serial(mock, "1-1", "1209", "0001", "A1", "ttyACM0"));
    free(mockdev_add_serial(mock, "1-2", "1209", "0001", "B2", "ttyACM1"));
    struct gauge *gauge = serial_gauge("usb:1209:0001");
    assert_int_equal(gauge_open(gauge), GAUGE_E_AMBIGUOUS);
    assert_says(gauge, GAUGE_E_AMBIGUOUS, "means 2 ports");
    assert_says(gauge, GAUGE_E_AMBIGUOUS, "/dev/ttyACM0 is usb:1209:0001:A1 at port 1-1");
    assert_says(gauge, GAUGE_E_AMBIGUOUS, "/dev/ttyACM1 is usb:1209:0001:B2 at port 1-2");
    assert_says(gauge, GAUGE_E_AMBIGUOUS, "Add the serial number");
    assert_false(gauge_is_open(gauge));
    gauge_free(gauge);
}

/* Which events make the daemon open again at once. */
static void events_concern_the_gauge_they_speak_of(void **state) {
    (void)state;
    struct hotplug_event event = {
        .added = true, .node = "/dev/ttyACM3", .vendor = "1209", .product = "00ab", .serial = "H7"};
    static const struct {
        const char *device;
        bool concerns;
    } cases[] = {
        {"usb:1209:00AB", true},     {"usb:1209:00ab:H7", true}, {"usb:1209:00ab:h7", false},
        {"usb:1209:00ac", false},    {"/dev/ttyACM3", true},     {"/dev/ttyACM2", false},
        {"usb:120a:00ab:H7", false},
    };
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct gauge *gauge = serial_gauge(cases[i].device);
        assert_int_equal(gauge_concerns(gauge, &event), cases[i].concerns);
        gauge_free(gauge);
    }
}

static void identities(void **state) {
    (void)state;
    struct serial_identity identity;
    static const char *const bad[] = {
        "usb:",           "usb:1209",       "usb:1209:",     "usb:1209:001",
        "usb:1209:0001:", "usb:1209:00012", "usb:12g9:0001", "usb:1209-0001",
        "/dev/ttyACM0",   "USB:1209:0001",  "usb: 209:0001", "usb:1209:0001 "};
    for (size_t i = 0; i < sizeof bad / sizeof bad[0]; i++)
        if (serial_identity_parse(bad[i], &identity))
            fail_msg("'%s' was taken", bad[i]);
    assert_true(serial_identity_parse("usb:1A2b:00FF", &identity));
    assert_string_equal(identity.vendor, "1a2b");
    assert_string_equal(identity.product, "00ff");
    assert_string_equal(identity.serial, "");
    assert_true(serial_identity_parse("usb:1209:0001:AA:BB 3", &identity));
    assert_string_equal(identity.serial, "AA:BB 3");
    char longest[14 + HOTPLUG_SERIAL_MAX + 1];
    memset(longest, 'x', sizeof longest);
    memcpy(longest, "usb:1209:0001:", 14);
    longest[14 + HOTPLUG_SERIAL_MAX] = 0;
    assert_false(serial_identity_parse(longest, &identity));
    longest[14 + HOTPLUG_SERIAL_MAX - 1] = 0;
    assert_true(serial_identity_parse(longest, &identity));
}

int main(int argc, char **argv) {
    (void)argc;
    if (!mockdev_ready(argv)) {
        puts("skip: libumockdev is not installed, so no udev events can be made up");
        return 77;
    }
    const struct CMUnitTest tests[] = {
        cmocka_unit_test_setup_teardown(events_of_serial_ports_only, setup, teardown),
        cmocka_unit_test_setup_teardown(built_in_ports_have_no_identity, setup, teardown),
        cmocka_unit_test_setup_teardown(list_is_bounded, setup, teardown),
        cmocka_unit_test_setup_teardown(not_found_says_what_is_there, setup, teardown),
        cmocka_unit_test_setup_teardown(two_matches_are_refused_with_both_named, setup, teardown),
        cmocka_unit_test_setup_teardown(events_concern_the_gauge_they_speak_of, setup, teardown),
        cmocka_unit_test(identities),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
