/* The stop request: there wholly or not at all, and taken away when stale. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include "act/poweroff.h"
#include "util/cleanup.h"
#include "util/files.h"
#include "util/real.h"

#include <errno.h>
#include <jansson.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

static char folder[] = "/tmp/brink-stop-XXXXXX";
static char path[64];

static int set_up(void **state) {
    (void)state;
    snprintf(path, sizeof(path), "%s/stop-request", mkdtemp(folder));
    return 0;
}

static int tear_down(void **state) {
    (void)state;
    unlink(path);
    return rmdir(folder);
}

static const struct poweroff_order order = {.unit = "heron",
                                            .stage = "leaving",
                                            .cause = "charge",
                                            .pack = "main",
                                            .t_boot_us = 1234567890,
                                            .t_real_us = 1796104400741864,
                                            .charge = 0.0799,
                                            .charge_low = 0.05,
                                            .terminal_V = 3.21,
                                            .rest_V = 3.314,
                                            .left_s = 59.6,
                                            .left_least_s = 0};

static void an_order_is_one_line_of_json(void **state) {
    scoped(free_p) char *text = NULL;
    size_t length;
    struct stat st;

    (void)state;
    assert_int_equal(poweroff_request(path, &order), 0);
    assert_int_equal(files_read(path, 4096, &text, &length), 0);
    assert_string_equal(
        text, "{\"brink\":1,\"action\":\"poweroff\",\"unit\":\"heron\",\"t_boot_s\":1234.568,"
              "\"written\":\"2026-12-01T05:53:20Z\",\"stage\":\"leaving\",\"cause\":\"charge\","
              "\"cause_pack\":\"main\",\"charge\":0.0799,\"charge_low\":0.0500,"
              "\"terminal_V\":3.210,\"rest_V\":3.314,\"left_s\":60,\"left_least_s\":0}\n");
    assert_int_equal(stat(path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0644);
}

static void what_is_not_known_is_null(void **state) {
    struct poweroff_order blind = order;
    json_t *root;

    (void)state;
    blind.pack = NULL;
    blind.charge = blind.charge_low = blind.terminal_V = blind.rest_V = UNKNOWN;
    blind.left_s = blind.left_least_s = ENDLESS;
    assert_int_equal(poweroff_request(path, &blind), 0);
    root = json_load_file(path, JSON_REJECT_DUPLICATES, NULL);
    assert_non_null(root);
    assert_true(json_is_null(json_object_get(root, "cause_pack")));
    assert_true(json_is_null(json_object_get(root, "charge")));
    assert_true(json_is_null(json_object_get(root, "left_s")));
    json_decref(root);
}

static void a_stale_order_is_taken_away(void **state) {
    (void)state;
    assert_int_equal(poweroff_request(path, &order), 0);
    assert_int_equal(poweroff_withdraw(path), 1);
    assert_int_equal(access(path, F_OK), -1);
    assert_int_equal(poweroff_withdraw(path), 0);
    assert_int_equal(poweroff_withdraw("/nowhere/at/all"), 0);
}

static void what_cannot_be_written_is_told(void **state) {
    (void)state;
    assert_int_equal(poweroff_request("/nowhere/stop-request", &order), -ENOENT);
    assert_int_equal(poweroff_request("/dev/null/stop-request", &order), -ENOTDIR);
    assert_int_equal(mkdir(path, 0700), 0);
    assert_true(poweroff_request(path, &order) < 0);
    assert_true(poweroff_withdraw(path) < 0);
    assert_int_equal(rmdir(path), 0);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(an_order_is_one_line_of_json),
        cmocka_unit_test(what_is_not_known_is_null),
        cmocka_unit_test(a_stale_order_is_taken_away),
        cmocka_unit_test(what_cannot_be_written_is_told),
    };

    return cmocka_run_group_tests(tests, set_up, tear_down);
}
