/* The status object: its exact bytes, its null rules, its names, and that all of it always fits. */
#include "publish/status.h"

#include "util/files.h"
#include "util/real.h"

#include <jansson.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))

static const unsigned all_alerts[] = {
    ALERT_SILENT,
    ALERT_IMPOSSIBLE,
    ALERT_LOSING,
    ALERT_SPENT,
    ALERT_REPEATED,
    ALERT_OVERLOAD,
    ALERT_RESISTANCE,
    ALERT_GUESS,
    STATUS_ALERT_STOP_FAILED,
    STATUS_ALERT_STATUS_UNWRITABLE,
    STATUS_ALERT_STATE_UNWRITABLE,
};

static struct watch_config heron_config(void) {
    struct watch_config config = {
        .n_packs = 1,
        .pack[0] = {.name = "main",
                    .cell = {.table = {.name = "nca-18650"}, .series = 1, .capacity_Ah = 5.8},
                    .cutoff_charge = 0.08,
                    .cutoff_rest_V = 3.30,
                    .floor_V = 3.00},
        .ladder = {.reserve_charge = 0.25, .reserve_left_s = 3600, .keep_s = 120, .grace_s = 60},
        .silent_s = 30,
    };
    return config;
}

static struct pack_report heron_pack(void) {
    return (struct pack_report){
        .known = true,
        .charge = 0.634,
        .charge_low = 0.601,
        .charge_high = 0.662,
        .terminal_V = 3.712,
        .rest_V = 3.793,
        .sag_V = 0.081,
        .current_A = 0.84,
        .power_W = 3.1,
        .power_mean_W = 3.05,
        .temp_C = 11,
        .temp_measured = true,
        .left_s = 20400,
        .left_least_s = 17700,
        .full_s = UNKNOWN,
        .ends_by = CAUSE_CHARGE,
        .resistance_ohm = 0.096,
        .resistance_scale = 1.07,
    };
}

static struct report heron_report(void) {
    return (struct report){
        .t_boot_us = 1234567000,
        .stage = STAGE_AMPLE,
        .stage_since_us = 1100000000,
        .cause_pack = -1,
        .supply = SUPPLY_PACK,
        .supply_since_us = 12000000,
        .flow = FLOW_DISCHARGING,
        .charge = 0.634,
        .charge_low = 0.601,
        .charge_high = 0.662,
        .left_s = 20400,
        .left_least_s = 17700,
        .to_reserve_s = 15000,
        .full_s = UNKNOWN,
        .grace_left_s = UNKNOWN,
        .power_W = 3.1,
        .power_mean_W = 3.05,
        .rail_V = 4.97,
        .age_s = 0.4,
        .n_packs = 1,
        .pack[0] = heron_pack(),
    };
}

static struct status_context heron_context(const struct watch_config *config) {
    return (struct status_context){
        .unit = "heron",
        .pid = 812,
        .t_real_us = 1796105520000000, /* 2026-12-01T06:12:00Z: date -u -d @1796105520 */
        .watch = config,
        .gauge = {.kind = "serial",
                  .device = "usb:1209:0001",
                  .state = STATUS_GAUGE_OPEN,
                  .lines = 29114,
                  .bad_lines = 3,
                  .period_s = 1},
    };
}

static void test_golden(void **state) {
    static const char want[] =
        "{\"brink\":1,\"unit\":\"heron\",\"pid\":812,\"t_boot_s\":1234.567,"
        "\"written\":\"2026-12-01T06:12:00Z\",\"stage\":\"ample\",\"stage_since_s\":1100.0,"
        "\"cause\":\"none\",\"cause_pack\":null,\"blind\":false,\"supply\":\"pack\","
        "\"supply_since_s\":12.0,\"flow\":\"discharging\",\"charge\":0.6340,\"charge_low\":0.6010,"
        "\"charge_high\":0.6620,\"left_s\":20400,\"left_least_s\":17700,\"endless\":false,"
        "\"to_reserve_s\":15000,\"full_s\":null,\"grace_left_s\":null,\"power_W\":3.100,"
        "\"power_mean_W\":3.050,\"rail_V\":4.9700,\"age_s\":0.4,"
        "\"packs\":[{\"name\":\"main\",\"known\":true,\"spent\":false,\"cells\":\"nca-18650\","
        "\"series\":1,\"capacity_Ah\":5.800,\"charge\":0.6340,\"charge_low\":0.6010,"
        "\"charge_high\":0.6620,\"terminal_V\":3.7120,\"rest_V\":3.7930,\"sag_V\":0.0810,"
        "\"current_A\":0.8400,\"current_from\":\"model\",\"power_W\":3.100,\"power_mean_W\":3.050,"
        "\"temp_C\":11.0,\"temp_from\":\"gauge\",\"left_s\":20400,\"left_least_s\":17700,"
        "\"endless\":false,\"full_s\":null,\"ends_by\":\"charge\",\"cutoff_charge\":0.0800,"
        "\"cutoff_rest_V\":3.3000,\"floor_V\":3.0000,\"resistance_ohm\":0.0960,"
        "\"resistance_scale\":1.070}],"
        "\"gauge\":{\"kind\":\"serial\",\"device\":\"usb:1209:0001\",\"state\":\"open\","
        "\"lines\":29114,\"bad_lines\":3,\"refused\":0,\"repeated\":0,\"period_s\":1.0,"
        "\"silent_s\":30.0},"
        "\"ladder\":{\"reserve_charge\":0.2500,\"reserve_left_s\":3600,\"keep_s\":120,"
        "\"grace_s\":60},\"alerts\":[],\"action\":\"report\",\"request\":\"none\"}";
    const struct watch_config config = heron_config();
    const struct report report = heron_report();
    const struct status_context context = heron_context(&config);
    char buf[STATUS_SIZE_MAX];

    (void)state;
    assert_int_equal(status_render(&report, &context, buf, sizeof(buf)), sizeof(want) - 1);
    assert_string_equal(buf, want);
}

static json_t *render(const struct report *report, const struct status_context *context) {
    char buf[STATUS_SIZE_MAX];
    size_t length = status_render(report, context, buf, sizeof(buf));

    assert_true(length > 0);
    assert_int_equal(length, strlen(buf));
    assert_null(strchr(buf, '\n'));
    json_t *root = json_loadb(buf, length, JSON_REJECT_DUPLICATES, NULL);
    assert_non_null(root);
    return root;
}

static void assert_null_at(const json_t *object, const char *key) {
    if (!json_is_null(json_object_get(object, key)))
        fail_msg("%s is not null", key);
}

static void assert_text_at(const json_t *object, const char *key, const char *want) {
    assert_string_equal(json_string_value(json_object_get(object, key)), want);
}

/* A daemon that has just started knows nothing, and says null, never 0. */
static void test_not_known_is_null(void **state) {
    static const char *const unit_keys[] = {
        "charge", "charge_low",   "charge_high", "left_s",       "left_least_s", "to_reserve_s",
        "full_s", "grace_left_s", "power_W",     "power_mean_W", "rail_V",       "age_s"};
    static const char *const pack_keys[] = {
        "charge", "charge_low",   "charge_high", "terminal_V",     "rest_V",
        "sag_V",  "current_A",    "power_W",     "power_mean_W",   "temp_C",
        "left_s", "left_least_s", "full_s",      "resistance_ohm", "resistance_scale"};
    const struct watch_config config = heron_config();
    const struct status_context context = heron_context(&config);
    struct report report = heron_report();
    struct pack_report *pack = &report.pack[0];

    (void)state;
    report.charge = report.charge_low = report.charge_high = UNKNOWN;
    report.left_s = report.left_least_s = report.to_reserve_s = UNKNOWN;
    report.power_W = report.power_mean_W = report.rail_V = report.age_s = UNKNOWN;
    pack->charge = pack->charge_low = pack->charge_high = UNKNOWN;
    pack->terminal_V = pack->rest_V = pack->sag_V = pack->current_A = UNKNOWN;
    pack->power_W = pack->power_mean_W = pack->temp_C = pack->left_s = pack->left_least_s = UNKNOWN;
    pack->resistance_ohm = pack->resistance_scale = UNKNOWN;
    json_t *root = render(&report, &context);
    json_t *first = json_array_get(json_object_get(root, "packs"), 0);
    for (size_t i = 0; i < COUNT(unit_keys); i++)
        assert_null_at(root, unit_keys[i]);
    for (size_t i = 0; i < COUNT(pack_keys); i++)
        assert_null_at(first, pack_keys[i]);
    assert_true(json_is_false(json_object_get(root, "endless")));
    assert_true(json_is_false(json_object_get(first, "endless")));
    json_decref(root);
}

static void test_no_end_is_null_and_endless(void **state) {
    const struct watch_config config = heron_config();
    const struct status_context context = heron_context(&config);
    struct report report = heron_report();

    (void)state;
    report.left_s = ENDLESS;
    report.pack[0].left_s = report.pack[0].left_least_s = ENDLESS;
    json_t *root = render(&report, &context);
    json_t *first = json_array_get(json_object_get(root, "packs"), 0);
    assert_null_at(root, "left_s");
    assert_int_equal(json_integer_value(json_object_get(root, "left_least_s")), 17700);
    assert_true(json_is_true(json_object_get(root, "endless")));
    assert_null_at(first, "left_s");
    assert_null_at(first, "left_least_s");
    assert_true(json_is_true(json_object_get(first, "endless")));
    json_decref(root);
}

static void test_cause_names_its_pack(void **state) {
    const struct watch_config config = heron_config();
    const struct status_context context = heron_context(&config);
    struct report report = heron_report();

    (void)state;
    report.stage = STAGE_EDGE;
    report.cause = CAUSE_REST;
    report.cause_pack = 0;
    report.grace_left_s = 41.6;
    json_t *root = render(&report, &context);
    assert_text_at(root, "stage", "edge");
    assert_text_at(root, "cause", "rest");
    assert_text_at(root, "cause_pack", "main");
    assert_int_equal(json_integer_value(json_object_get(root, "grace_left_s")), 42);
    json_decref(root);
    report.cause_pack = 3; /* no such pack */
    root = render(&report, &context);
    assert_null_at(root, "cause_pack");
    json_decref(root);
}

static void test_alerts_of_core_and_daemon(void **state) {
    const struct watch_config config = heron_config();
    struct status_context context = heron_context(&config);
    struct report report = heron_report();

    (void)state;
    report.alerts = ALERT_SILENT | ALERT_SPENT;
    context.alerts = STATUS_ALERT_STOP_FAILED;
    context.action = STATUS_ACTION_POWEROFF;
    context.request = STATUS_REQUEST_FAILED;
    context.gauge.state = STATUS_GAUGE_LOST;
    json_t *root = render(&report, &context);
    const json_t *set = json_object_get(root, "alerts");
    assert_int_equal(json_array_size(set), 3);
    assert_text_at(json_array_get(set, 0), "name", "gauge-silent");
    assert_text_at(json_array_get(set, 1), "name", "pack-spent");
    assert_text_at(json_array_get(set, 2), "name", "stop-request-failed");
    assert_text_at(json_array_get(set, 2), "text", status_alert_text(STATUS_ALERT_STOP_FAILED));
    assert_text_at(root, "action", "poweroff");
    assert_text_at(root, "request", "failed");
    assert_text_at(json_object_get(root, "gauge"), "state", "lost");
    json_decref(root);
}

/* Each alert says what is wrong and, in a sentence of its own or behind a colon, what to do. */
static void test_alert_words(void **state) {
    unsigned seen = 0;

    (void)state;
    for (size_t i = 0; i < COUNT(all_alerts); i++) {
        const char *name = status_alert_name(all_alerts[i]);
        const char *text = status_alert_text(all_alerts[i]);
        assert_non_null(name);
        assert_true(strspn(name, "abcdefghijklmnopqrstuvwxyz-") == strlen(name));
        assert_true(text[strlen(text) - 1] == '.');
        assert_true(strstr(text, ". ") || strstr(text, ": "));
        assert_false(seen & all_alerts[i]);
        seen |= all_alerts[i];
    }
    assert_null(status_alert_name(1U << 31));
    assert_null(status_alert_text(0));
}

static void test_names(void **state) {
    (void)state;
    assert_string_equal(status_stage_name(STAGE_AMPLE), "ample");
    assert_string_equal(status_stage_name(STAGE_RESERVE), "reserve");
    assert_string_equal(status_stage_name(STAGE_EDGE), "edge");
    assert_string_equal(status_stage_name(STAGE_LEAVING), "leaving");
    assert_string_equal(status_stage_name((enum stage)99), "unknown");
    assert_string_equal(status_supply_name(SUPPLY_UNKNOWN), "unknown");
    assert_string_equal(status_supply_name(SUPPLY_PACK), "pack");
    assert_string_equal(status_supply_name(SUPPLY_ADAPTER), "adapter");
    assert_string_equal(status_supply_name(SUPPLY_BOTH), "both");
    assert_string_equal(status_flow_name(FLOW_UNKNOWN), "unknown");
    assert_string_equal(status_flow_name(FLOW_CHARGING), "charging");
    assert_string_equal(status_flow_name(FLOW_DISCHARGING), "discharging");
    assert_string_equal(status_flow_name(FLOW_RESTING), "resting");
    assert_string_equal(status_cause_name(CAUSE_NONE), "none");
    assert_string_equal(status_cause_name(CAUSE_CHARGE), "charge");
    assert_string_equal(status_cause_name(CAUSE_REST), "rest");
    assert_string_equal(status_cause_name(CAUSE_LEFT), "left");
    assert_string_equal(status_cause_name(CAUSE_KEEP), "keep");
    assert_string_equal(status_cause_name(CAUSE_FLOOR), "floor");
    assert_string_equal(status_cause_name(CAUSE_BLIND), "blind");
    assert_string_equal(status_gauge_state_name(STATUS_GAUGE_ABSENT), "absent");
    assert_string_equal(status_gauge_state_name(STATUS_GAUGE_OPEN), "open");
    assert_string_equal(status_gauge_state_name(STATUS_GAUGE_LOST), "lost");
    assert_string_equal(status_action_name(STATUS_ACTION_REPORT), "report");
    assert_string_equal(status_action_name(STATUS_ACTION_POWEROFF), "poweroff");
    assert_string_equal(status_request_name(STATUS_REQUEST_NONE), "none");
    assert_string_equal(status_request_name(STATUS_REQUEST_REPORTED), "reported");
    assert_string_equal(status_request_name(STATUS_REQUEST_WRITTEN), "written");
    assert_string_equal(status_request_name(STATUS_REQUEST_FAILED), "failed");
}

/* The widest there is: every pack, every alert, long names, all numbers at their widest. */
static void test_the_widest_fits(void **state) {
    struct watch_config config = heron_config();
    struct report report = heron_report();
    struct status_context context = heron_context(&config);
    char device[256], buf[STATUS_SIZE_MAX];

    (void)state;
    memset(device, 'd', sizeof(device) - 1);
    device[sizeof(device) - 1] = '\0';
    context.unit = device;
    context.gauge.device = device;
    context.gauge.lines = context.gauge.bad_lines = report.refused = report.repeated = UINT64_MAX;
    context.pid = 4194304;
    config.n_packs = report.n_packs = PACKS_MAX;
    memset(config.pack[0].name, 'n', NAME_LEN - 1);
    memset(config.pack[0].cell.table.name, 'c', CELL_NAME_MAX - 1);
    report.pack[0].current_A = report.pack[0].power_W = report.pack[0].power_mean_W = -99999.99;
    report.pack[0].left_s = report.pack[0].left_least_s = report.pack[0].full_s = 99999999;
    for (size_t i = 1; i < PACKS_MAX; i++) {
        config.pack[i] = config.pack[0];
        report.pack[i] = report.pack[0];
    }
    report.alerts = context.alerts = ~0U;
    size_t length = status_render(&report, &context, buf, sizeof(buf));
    print_message("widest status: %zu of %d bytes\n", length, STATUS_SIZE_MAX);
    assert_true(length > 0);
    assert_int_equal(status_render(&report, &context, buf, length), 0);
    assert_string_equal(buf, "");
}

/* ---- the manual page ---- */

static char *manual;

static void assert_in_manual(const char *word) {
    const size_t n = strlen(word);
    const char *at = manual;

    /* As a word of its own on a line of markup, not somewhere in the text. */
    for (; (at = strstr(at, word)); at += n) {
        const char *line = at;
        while (line > manual && line[-1] != '\n')
            line--;
        bool begins = at[-1] == ' ', ends = strchr(" \n", at[n]) != NULL;
        if (begins && ends && (strncmp(line, ".It Li ", 7) == 0 || strncmp(line, ".Li ", 4) == 0))
            return;
    }
    fail_msg("man/brink-status.7 does not tell of %s", word);
}

static void assert_keys_in_manual(const json_t *value) {
    const char *key;
    json_t *member;

    json_object_foreach((json_t *)value, key, member) {
        assert_in_manual(key);
        assert_keys_in_manual(member);
    }
    for (size_t i = 0; i < json_array_size(value); i++)
        assert_keys_in_manual(json_array_get(value, i));
}

/* Every key and every name that can stand as a value is told of in brink-status(7). */
static void test_the_manual_tells_all(void **state) {
    const struct watch_config config = heron_config();
    const struct status_context context = heron_context(&config);
    struct report report = heron_report();
    size_t length;

    (void)state;
    assert_int_equal(files_read("man/brink-status.7", 1 << 20, &manual, &length), 0);
    report.alerts = ALERT_GUESS;
    json_t *root = render(&report, &context);
    assert_keys_in_manual(root);
    json_decref(root);
    for (size_t i = 0; i < COUNT(all_alerts); i++)
        assert_in_manual(status_alert_name(all_alerts[i]));
    for (unsigned i = 0; i <= STAGE_LEAVING; i++)
        assert_in_manual(status_stage_name((enum stage)i));
    for (unsigned i = 0; i <= SUPPLY_BOTH; i++)
        assert_in_manual(status_supply_name((enum supply)i));
    for (unsigned i = 0; i <= FLOW_RESTING; i++)
        assert_in_manual(status_flow_name((enum flow)i));
    for (unsigned i = 0; i <= CAUSE_BLIND; i++)
        assert_in_manual(status_cause_name((enum cause)i));
    for (unsigned i = 0; i <= STATUS_GAUGE_LOST; i++)
        assert_in_manual(status_gauge_state_name((enum status_gauge_state)i));
    for (unsigned i = 0; i <= STATUS_REQUEST_FAILED; i++)
        assert_in_manual(status_request_name((enum status_request)i));
    free(manual);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_golden),
        cmocka_unit_test(test_not_known_is_null),
        cmocka_unit_test(test_no_end_is_null_and_endless),
        cmocka_unit_test(test_cause_names_its_pack),
        cmocka_unit_test(test_alerts_of_core_and_daemon),
        cmocka_unit_test(test_alert_words),
        cmocka_unit_test(test_names),
        cmocka_unit_test(test_the_widest_fits),
        cmocka_unit_test(test_the_manual_tells_all),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
