/* FORMAT of `brink line`. */
#include "client/template.h"

#include <setjmp.h>
#include <stdarg.h>

#include "unit/client_sample.h"

#include <cmocka.h>
#include <stdlib.h>
#include <string.h>
#include <sysexits.h>
#include <time.h>

static char line[TEMPLATE_SIZE];
static struct trouble trouble;

static const char *made(const char *format, const struct view *view) {
    trouble = (struct trouble){0};
    assert_int_equal(template_check(format, &trouble), 0);
    assert_int_equal(template_write(format, view, line, &trouble), 0);
    return line;
}

static const char *refused(const char *format) {
    trouble = (struct trouble){0};
    assert_int_equal(template_check(format, &trouble), EX_USAGE);
    assert_int_equal(trouble.code, EX_USAGE);
    return trouble.text;
}

static void names_are_filled_in(void **state) {
    static const char *const rows[][2] = {
        {"", "\n"},
        {"plain } text", "plain } text\n"},
        {"{unit} {stage} {supply} {flow} {cause}", "heron ample pack discharging none\n"},
        {"{standing} since {held} ({held_s})", "ample since 20 min (1200)\n"},
        {"{charge} {charge_pct} {low} {high_pct}", "63 % 63.4 60 % 66.2\n"},
        {"{left} {left_s} {least} {least_s}", "5 h 40 20400 4 h 55 17700\n"},
        {"{to_reserve} {to_reserve_s}", "4 h 10 15000\n"},
        {"{power} {power_W} {mean} {mean_W}", "3.1 W 3.100 3.1 W 3.080\n"},
        {"{rail} {rail_V} {age} {age_s}", "4.97 V 4.970 0.4 s 0.4\n"},
        {"{gauge} {device} {lines} {bad_lines}", "open usb:1209:0001 29114 3\n"},
        {"{alerts} {alert} {action} {request}", "0 - report none\n"},
        {"{written}", "2026-12-01T06:12:00Z\n"},
        {"{pack} {cells}", "main nca-18650\n"},
        {"{terminal} {terminal_V} {rest} {rest_V}", "3.71 V 3.712 3.79 V 3.793\n"},
        {"{sag} {sag_V} {current} {current_A}", "81 mV 0.081 0.84 A 0.840\n"},
        {"{current_from} {temp} {temp_C} {temp_from}", "model 11 C 11.000 gauge\n"},
        {"{ends_by} {resistance} {resistance_ohm}", "charge 96 mohm 0.096\n"},
    };
    struct view v = sample_view(sample_json());

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++)
        assert_string_equal(made(rows[i][0], &v), rows[i][1]);
    assert_string_equal(made(template_default, &v),
                        "heron: ample, charge 63 %, left 5 h 40, least 4 h 55\n");
}

static void two_braces_are_one(void **state) {
    struct view v = sample_view(sample_json());

    (void)state;
    assert_string_equal(made("{{", &v), "{\n");
    assert_string_equal(made("{{{{", &v), "{{\n");
    assert_string_equal(made("{{unit}", &v), "{unit}\n");
    assert_string_equal(made("{{{unit}}", &v), "{heron}\n");
    assert_string_equal(made("a{{b{unit}c", &v), "a{bheronc\n");
}

static void what_is_not_known_is_a_dash(void **state) {
    static const char *const keys[] = {"charge", "left_s", "left_least_s",  "power_W",
                                       "rail_V", "age_s",  "stage_since_s", "unit"};
    json_t *json = sample_json();

    (void)state;
    for (size_t i = 0; i < sizeof(keys) / sizeof(keys[0]); i++)
        json_object_del(json, keys[i]);
    json_array_clear(json_object_get(json, "packs"));
    struct view v = sample_view(json);
    assert_string_equal(made("{unit} {charge} {charge_pct} {left} {left_s} {least}", &v),
                        "- - - - - -\n");
    assert_string_equal(made("{power} {rail_V} {age} {held} {held_s} {blind} {spent}", &v),
                        "- - - - - - -\n");
    assert_string_equal(made("{pack} {terminal} {terminal_V} {temp}", &v), "- - - -\n");
}

static void flags_and_endless(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "blind", json_true());
    json_object_set_new(json, "flow", json_string("charging"));
    json_object_set_new(json, "left_s", json_null());
    json_object_set_new(json, "endless", json_true());
    json_object_set_new(sample_pack(json, 0), "spent", json_true());
    json_array_append_new(json_object_get(json, "alerts"),
                          json_pack("{s:s,s:s}", "name", "overload", "text", "words"));
    struct view v = sample_view(json);
    assert_string_equal(made("{blind} {spent} {standing}", &v),
                        "blind spent ample, blind, charging\n");
    assert_string_equal(made("{left} {left_s} {alerts} {alert}", &v), "no end - 1 overload\n");
}

static void packs_are_asked_by_name(void **state) {
    json_t *json = sample_json();
    json_t *other = json_deep_copy(sample_pack(json, 0));

    (void)state;
    json_object_set_new(other, "name", json_string("box.2"));
    json_object_set_new(other, "charge", json_real(0.5));
    json_object_set_new(other, "terminal_V", json_real(3.5));
    json_array_append_new(json_object_get(json, "packs"), other);
    struct view v = sample_view(json);
    assert_string_equal(made("{terminal} {main.terminal} {box.2.terminal}", &v),
                        "3.71 V 3.71 V 3.50 V\n");
    assert_string_equal(made("{charge} {main.charge} {box.2.charge_pct}", &v), "63 % 63 % 50.0\n");
    assert_int_equal(template_check("{spare.charge}", &trouble), 0);
    assert_int_equal(template_write("{spare.charge}", &v, line, &trouble), EX_USAGE);
    assert_non_null(strstr(trouble.text, "main box.2"));
}

static void unknown_names_are_refused_with_the_near_one_and_all(void **state) {
    (void)state;
    assert_non_null(strstr(refused("{chrage}"), "did you mean {charge}"));
    assert_non_null(strstr(refused("x {stag} y"), "did you mean {stage}"));
    assert_non_null(strstr(trouble.text, " unit stage standing "));
    assert_non_null(strstr(trouble.text, " resistance_ohm"));
    assert_null(strstr(refused("{qqqqqqqq}"), "did you mean"));
    assert_non_null(strstr(refused("{main.chrage}"), "{chrage}"));
    assert_non_null(strstr(refused("{main.stage}"), "belongs to the unit"));
    assert_non_null(strstr(refused("{}"), "names are"));
    assert_non_null(strstr(refused("{ charge}"), "names are"));
    assert_null(strchr(refused("{\033[2J}"), '\033'));
}

static void an_open_brace_is_refused_by_its_place(void **state) {
    (void)state;
    assert_non_null(strstr(refused("{charge"), "character 1 "));
    assert_non_null(strstr(refused("ab{"), "character 3 "));
    assert_non_null(strstr(refused("ab{char{unit}"), "character 3 "));
    assert_non_null(strstr(trouble.text, "{{"));
}

static void a_line_has_a_bound(void **state) {
    struct view v = sample_view(sample_json());
    char format[2 * TEMPLATE_SIZE];

    (void)state;
    memset(format, 'x', sizeof(format));
    format[TEMPLATE_SIZE - 2] = '\0';
    assert_int_equal(template_write(format, &v, line, &trouble), 0);
    assert_int_equal(strlen(line), TEMPLATE_SIZE - 1);
    format[TEMPLATE_SIZE - 2] = 'x';
    format[TEMPLATE_SIZE - 1] = '\0';
    assert_int_equal(template_write(format, &v, line, &trouble), EX_USAGE);
}

/* Every name of the help can be asked for, and its bare number too. */
static void the_help_lists_what_works(void **state) {
    struct view v = sample_view(sample_json());
    char help[8192], format[80], name[32], bare[32];
    int asked = 0;

    (void)state;
    template_help(help, sizeof(help));
    assert_int_equal(help[strlen(help) - 1], '\n');
    for (char *row = strtok(help, "\n"); row; row = strtok(NULL, "\n")) {
        assert_true(strlen(row) <= 90);
        if (strncmp(row, "  ", 2) != 0 || row[2] == '{')
            continue;
        int n = sscanf(row, " %31[a-z_A-Z] | %31[a-z_A-Z]", name, bare);
        assert_true(n >= 1);
        snprintf(format, sizeof(format), "{%s}{%s}", name, n == 2 ? bare : name);
        assert_string_not_equal(made(format, &v), "\n");
        asked += n;
    }
    assert_true(asked > 50);
}

static void any_format_is_filled_or_refused(void **state) {
    static const char *const pieces[] = {"{",    "}", "{{",     "unit",       "charge", ".",
                                         "main", " ", "{left}", "{main.low}", "x",      "{a"};
    struct view v = sample_view(sample_json());
    unsigned seed = (unsigned)time(NULL);

    (void)state;
    printf("seed %u\n", seed);
    srand(seed);
    for (int round = 0; round < 20000; round++) {
        char format[256] = "";
        for (int i = rand() % 12; i > 0; i--)
            strcat(format, pieces[(size_t)rand() % (sizeof(pieces) / sizeof(pieces[0]))]);
        trouble = (struct trouble){0};
        if (template_check(format, &trouble) == 0) {
            template_write(format, &v, line, &trouble);
            assert_true(trouble.code == EX_USAGE || line[strlen(line) - 1] == '\n');
        } else
            assert_true(trouble.code == EX_USAGE && *trouble.text);
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(names_are_filled_in),
        cmocka_unit_test(two_braces_are_one),
        cmocka_unit_test(what_is_not_known_is_a_dash),
        cmocka_unit_test(flags_and_endless),
        cmocka_unit_test(packs_are_asked_by_name),
        cmocka_unit_test(unknown_names_are_refused_with_the_near_one_and_all),
        cmocka_unit_test(an_open_brace_is_refused_by_its_place),
        cmocka_unit_test(a_line_has_a_bound),
        cmocka_unit_test(the_help_lists_what_works),
        cmocka_unit_test(any_format_is_filled_or_refused),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
