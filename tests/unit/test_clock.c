/* Clocks and how a time is written. */
#include "util/clock.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>
#include <time.h>

#include <cmocka.h>

static int64_t us(clockid_t id) {
    struct timespec ts;

    assert_int_equal(clock_gettime(id, &ts), 0);
    return (int64_t)ts.tv_sec * 1000000 + ts.tv_nsec / 1000;
}

static void test_each_is_its_own_clock(void **state) {
    int64_t before = us(CLOCK_BOOTTIME), boot = clock_boot_us(), after = us(CLOCK_BOOTTIME);

    (void)state;
    assert_true(before <= boot && boot <= after);
    before = us(CLOCK_REALTIME);
    int64_t real = clock_real_us();
    assert_true(before <= real && real <= us(CLOCK_REALTIME));
}

static void test_boot_id(void **state) {
    char a[37], b[37];

    (void)state;
    if (clock_boot_id(a) < 0) {
        print_message("skip: no /proc/sys/kernel/random/boot_id here\n");
        skip();
    }
    assert_int_equal(clock_boot_id(b), 0);
    assert_string_equal(a, b);
    assert_int_equal(strlen(a), 36);
    assert_int_equal(strspn(a, "0123456789abcdef-"), 36);
}

static void assert_written(int64_t t_real_us, const char *expected) {
    char text[21];

    clock_rfc3339(t_real_us, text);
    assert_string_equal(text, expected);
}

static void test_rfc3339(void **state) {
    (void)state;
    assert_written(0, "1970-01-01T00:00:00Z");
    assert_written(999999, "1970-01-01T00:00:00Z");
    assert_written(-1, "1969-12-31T23:59:59Z"); /* down, not to zero */
    assert_written(-1000000, "1969-12-31T23:59:59Z");
    assert_written(1000000000000000, "2001-09-09T01:46:40Z"); /* 10^9 s, well known */
    /* RFC 3339 (2002) section 5.8: 1985-04-12T23:20:50.52Z and 1937-01-01T12:00:27.87+00:20 */
    assert_written(482196050520000, "1985-04-12T23:20:50Z");
    assert_written(-1041337172130000, "1937-01-01T11:40:27Z");
    assert_written(951782400000000, "2000-02-29T00:00:00Z");
    assert_written(253402300799999999, "9999-12-31T23:59:59Z");
}

static void test_years_are_held_to_four_digits(void **state) {
    (void)state;
    assert_written(-62135596800000000, "0001-01-01T00:00:00Z");
    assert_written(-30610224000000000, "1000-01-01T00:00:00Z");
    assert_written(-30610224000000001, "0999-12-31T23:59:59Z");
    assert_written(INT64_MAX, "9999-12-31T23:59:59Z");
    assert_written(INT64_MIN, "0000-01-01T00:00:00Z");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_each_is_its_own_clock),
        cmocka_unit_test(test_boot_id),
        cmocka_unit_test(test_rfc3339),
        cmocka_unit_test(test_years_are_held_to_four_digits),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
