/* The health check. Exit codes and the shape of the line after the IETF draft "The Monitoring
 * Plugins Interface" (2023): 0 OK, 1 WARNING, 2 CRITICAL, 3 UNKNOWN; text | label=value[unit];
 * warn;crit;min;max; a range "10:" alerts below 10. */
#include "client/check.h"

#include <setjmp.h>
#include <stdarg.h>

#include "unit/client_sample.h"

#include <cmocka.h>
#include <string.h>

static char line[CHECK_SIZE];

static void the_usual_line_as_a_whole(void **state) {
    struct view v = sample_view(sample_json());

    (void)state;
    assert_int_equal(check_write(&v, NULL, line), 0);
    assert_string_equal(line, "OK - heron ample, charge 63 %, left 5 h 40, at least 4 h 55 | "
                              "charge=63.4%;25.0:;8.0:;0;100 left=20400s;3600:;;0; "
                              "least=17700s;;120:;0;\n");
}

static void each_stage_has_its_code(void **state) {
    static const struct {
        const char *stage;
        bool blind, old;
        int code;
        const char *word;
    } rows[] = {
        {"ample", false, false, 0, "OK - "},          {"reserve", false, false, 1, "WARNING - "},
        {"edge", false, false, 2, "CRITICAL - "},     {"leaving", false, false, 2, "CRITICAL - "},
        {"ample", true, false, 3, "UNKNOWN - "},      {"reserve", true, false, 3, "UNKNOWN - "},
        {"edge", true, false, 2, "CRITICAL - "},      {"leaving", true, false, 2, "CRITICAL - "},
        {"ample", false, true, 3, "UNKNOWN - "},      {"edge", false, true, 3, "UNKNOWN - "},
        {"somewhere", false, false, 3, "UNKNOWN - "},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        json_t *json = sample_json();
        json_object_set_new(json, "stage", json_string(rows[i].stage));
        json_object_set_new(json, "blind", json_boolean(rows[i].blind));
        struct view v = sample_view(json);
        assert_int_equal(check_write(&v, rows[i].old ? "written 3 min ago" : NULL, line),
                         rows[i].code);
        assert_memory_equal(line, rows[i].word, strlen(rows[i].word));
        assert_int_equal(strstr(line, "; written 3 min ago |") != NULL, rows[i].old);
    }
}

/* Unknown is never empty: no figure stands for it. */
static void an_unknown_charge_is_unknown(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "charge", json_null());
    json_object_set_new(json, "left_s", json_null());
    struct view v = sample_view(json);
    assert_int_equal(check_write(&v, NULL, line), 3);
    assert_non_null(strstr(line, "charge not known"));
    assert_null(strchr(line, '|'));
}

static void no_end_has_no_figure(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "left_s", json_null());
    json_object_set_new(json, "left_least_s", json_null());
    json_object_set_new(json, "endless", json_true());
    struct view v = sample_view(json);
    assert_int_equal(check_write(&v, NULL, line), 0);
    assert_non_null(strstr(line, ", left no end | charge=63.4%;25.0:;8.0:;0;100\n"));
}

static void only_one_bar_and_one_line(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "unit", json_string("he|ron\n"));
    json_array_append_new(json_object_get(json, "alerts"),
                          json_pack("{s:s,s:s}", "name", "a|b", "text", "x"));
    struct view v = sample_view(json);
    check_write(&v, NULL, line);
    assert_ptr_equal(strchr(line, '|'), strrchr(line, '|'));
    assert_ptr_equal(strchr(line, '\n'), line + strlen(line) - 1);
    assert_non_null(strstr(line, ", alerts: a/b |"));
}

static void the_longest_line_fits(void **state) {
    json_t *json = sample_json();
    char name[VIEW_NAME];

    (void)state;
    memset(name, 'n', sizeof(name));
    name[sizeof(name) - 1] = '\0';
    for (int i = 0; i < VIEW_ALERTS + 4; i++)
        json_array_append_new(json_object_get(json, "alerts"),
                              json_pack("{s:s,s:s}", "name", name, "text", "x"));
    struct view v = sample_view(json);
    check_write(&v, "old", line);
    assert_int_equal(line[strlen(line) - 1], '\n');
    assert_non_null(strstr(line, " least=17700s"));
}

static void no_status_is_unknown(void **state) {
    (void)state;
    assert_int_equal(check_unknown("there is | nothing", line), 3);
    assert_string_equal(line, "UNKNOWN - there is / nothing\n");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_usual_line_as_a_whole),    cmocka_unit_test(each_stage_has_its_code),
        cmocka_unit_test(an_unknown_charge_is_unknown), cmocka_unit_test(no_end_has_no_figure),
        cmocka_unit_test(only_one_bar_and_one_line),    cmocka_unit_test(the_longest_line_fits),
        cmocka_unit_test(no_status_is_unknown),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
