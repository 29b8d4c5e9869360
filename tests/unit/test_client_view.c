/* The status object as the client reads it: types, absent keys, other versions, dirty text. */
#include "client/view.h"

#include <setjmp.h>
#include <stdarg.h>

#include "unit/client_sample.h"

#include <cmocka.h>
#include <math.h>
#include <string.h>
#include <sysexits.h>

static int read_it(json_t *json, struct view *view, struct trouble *trouble) {
    *trouble = (struct trouble){0};
    int code = view_read(json, "here", false, view, trouble);
    json_decref(json);
    return code;
}

static void every_key_lands_where_it_belongs(void **state) {
    struct view v = sample_view(sample_json());

    (void)state;
    assert_string_equal(v.unit, "heron");
    assert_string_equal(v.stage, "ample");
    assert_string_equal(v.cause_pack, "");
    assert_true(v.t_boot_s == 22334.567 && v.charge == 0.634 && v.left_least_s == 17700);
    assert_true(isnan(v.full_s) && isnan(v.grace_left_s));
    assert_false(v.blind);
    assert_int_equal(v.n_packs, 1);
    assert_string_equal(v.pack[0].name, "main");
    assert_true(v.pack[0].known && v.pack[0].terminal_V == 3.712);
    assert_true(v.pack[0].cutoff_rest_V == 3.30 && v.pack[0].resistance_ohm == 0.096);
    assert_string_equal(v.gauge.device, "usb:1209:0001");
    assert_true(v.gauge.lines == 29114 && v.ladder.grace_s == 60);
}

/* Unknown is never empty and never full: null and absent are NaN, not 0. */
static void null_and_absent_are_not_known(void **state) {
    static const char *const keys[] = {"charge", "left_s", "packs", "gauge", "ladder", "alerts"};
    struct trouble trouble;
    struct view v;

    (void)state;
    json_t *nulls = sample_json();
    json_object_set_new(nulls, "charge", json_null());
    assert_int_equal(read_it(nulls, &v, &trouble), 0);
    assert_true(isnan(v.charge));
    json_t *bare = sample_json();
    for (size_t i = 0; i < sizeof(keys) / sizeof(keys[0]); i++)
        json_object_del(bare, keys[i]);
    assert_int_equal(read_it(bare, &v, &trouble), 0);
    assert_true(isnan(v.charge) && isnan(v.left_s) && isnan(v.gauge.lines));
    assert_true(isnan(v.ladder.keep_s));
    assert_int_equal(v.n_packs, 0);
}

static void endless_is_no_end_in_sight(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "left_s", json_null());
    json_object_set_new(json, "endless", json_true());
    json_object_set_new(sample_pack(json, 0), "left_s", json_null());
    json_object_set_new(sample_pack(json, 0), "endless", json_true());
    struct view v = sample_view(json);
    assert_true(isinf(v.left_s) && v.left_s > 0);
    assert_true(isinf(v.pack[0].left_s));
}

static void another_type_is_refused_by_its_key(void **state) {
    static const struct {
        const char *key, *json;
    } rows[] = {
        {"charge", "\"0.6\""},
        {"unit", "7"},
        {"blind", "0"},
        {"packs", "{}"},
        {"packs", "[1]"},
        {"alerts", "\"x\""},
        {"gauge", "[]"},
        {"stage", "null"},
        {"ladder", "true"},
        {"endless", "\"\""},
        {"packs", "[[],[],[],[],[]]"},
    };
    struct trouble trouble;
    struct view v;

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        json_t *json = sample_json();
        json_object_set_new(json, rows[i].key, json_loads(rows[i].json, JSON_DECODE_ANY, NULL));
        assert_int_equal(read_it(json, &v, &trouble), EX_DATAERR);
        assert_non_null(strstr(trouble.text, rows[i].key));
        assert_non_null(strstr(trouble.text, "here"));
    }
}

static void another_version_is_refused(void **state) {
    struct trouble trouble;
    struct view v;

    (void)state;
    json_t *json = sample_json();
    json_object_set_new(json, "brink", json_integer(2));
    assert_int_equal(read_it(json, &v, &trouble), EX_DATAERR);
    assert_non_null(strstr(trouble.text, "version"));
    json = sample_json();
    json_object_del(json, "brink");
    assert_int_equal(read_it(json, &v, &trouble), EX_DATAERR);
    assert_int_equal(read_it(json_array(), &v, &trouble), EX_DATAERR);
    assert_int_equal(read_it(json_object(), &v, &trouble), EX_DATAERR);
}

static void text_is_clean_and_bounded(void **state) {
    json_t *json = sample_json();
    char longer[2 * VIEW_TEXT + 1];

    (void)state;
    memset(longer, 'x', sizeof(longer) - 1);
    longer[sizeof(longer) - 1] = '\0';
    json_object_set_new(json, "unit", json_string("he\033[31mron"));
    json_object_set_new(sample_pack(json, 0), "name", json_string(longer));
    json_array_append_new(json_object_get(json, "alerts"),
                          json_pack("{s:s,s:s}", "name", "a\nb", "text", longer));
    struct view v = sample_view(json);
    assert_string_equal(v.unit, "he?[31mron");
    assert_string_equal(v.alert[0].name, "a?b");
    assert_int_equal(strlen(v.alert[0].text), VIEW_TEXT - 1);
    assert_int_equal(strlen(v.pack[0].name), VIEW_NAME - 1);
}

static void numbers_beyond_belief_are_not_known(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "left_s", json_real(1e300));
    json_object_set_new(json, "charge", json_real(-1e13));
    struct view v = sample_view(json);
    assert_true(isnan(v.left_s) && isnan(v.charge));
}

static void more_alerts_than_fit_are_counted(void **state) {
    json_t *json = sample_json();

    (void)state;
    for (int i = 0; i < VIEW_ALERTS + 5; i++)
        json_array_append_new(json_object_get(json, "alerts"),
                              json_pack("{s:s,s:s}", "name", "overload", "text", "words"));
    struct view v = sample_view(json);
    assert_int_equal(v.n_alerts, VIEW_ALERTS + 5);
}

static void damaged_json_is_told_by_its_place(void **state) {
    static const char *const bad[] = {
        "",
        "{",
        "{\"brink\":1,}",
        "{\"brink\":1}{",
        "{\"brink\":01}",
        "{\"brink\":1,\"brink\":1}",
        "{\"a\":\"\xFF\"}",
        "{\"charge\":NaN}",
        "{\"charge\":1e999}",
        "{\"a\":\"\033[2J\"}",
    };
    struct trouble trouble;
    json_t *json;

    (void)state;
    for (size_t i = 0; i < sizeof(bad) / sizeof(bad[0]); i++) {
        trouble = (struct trouble){0};
        assert_int_equal(view_parse(bad[i], strlen(bad[i]), "here", &json, &trouble), EX_DATAERR);
        assert_int_equal(trouble.code, EX_DATAERR);
        assert_non_null(strstr(trouble.text, "here"));
        assert_null(strchr(trouble.text, '\033'));
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(every_key_lands_where_it_belongs),
        cmocka_unit_test(null_and_absent_are_not_known),
        cmocka_unit_test(endless_is_no_end_in_sight),
        cmocka_unit_test(another_type_is_refused_by_its_key),
        cmocka_unit_test(another_version_is_refused),
        cmocka_unit_test(text_is_clean_and_bounded),
        cmocka_unit_test(numbers_beyond_belief_are_not_known),
        cmocka_unit_test(more_alerts_than_fit_are_counted),
        cmocka_unit_test(damaged_json_is_told_by_its_place),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
