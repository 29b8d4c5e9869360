/* The command line, the environment's wishes, a status' age, and members cut out of JSON. */
#include "client/options.h"

#include <setjmp.h>
#include <stdarg.h>

#include "client/out.h"
#include "client/span.h"
#include "unit/client_sample.h"

#include <cmocka.h>
#include <math.h>
#include <string.h>
#include <sysexits.h>
#include <time.h>

static struct options options;
static struct trouble trouble;

#define READ(...) read_words((const char *const[]){"brink", __VA_ARGS__, NULL})

static int read_words(const char *const *words) {
    char *argv[16];
    int argc = 0;

    for (; words[argc]; argc++)
        argv[argc] = (char *)(uintptr_t)words[argc];
    argv[argc] = NULL;
    trouble = (struct trouble){0};
    return options_read(argc, argv, &options, &trouble);
}

static void commands_and_their_defaults(void **state) {
    (void)state;
    assert_int_equal(read_words((const char *const[]){"brink", NULL}), 0);
    assert_int_equal(options.command, COMMAND_PAGE);
    assert_string_equal(options.status, "/run/brink/status.json");
    assert_string_equal(options.socket, "/run/brink.socket");
    assert_false(options.from_socket);
    assert_int_equal(READ("line"), 0);
    assert_int_equal(options.command, COMMAND_LINE);
    assert_null(options.format);
    assert_int_equal(READ("check"), 0);
    assert_int_equal(options.command, COMMAND_CHECK);
    assert_int_equal(READ("raw"), 0);
    assert_int_equal(options.command, COMMAND_RAW);
}

static void options_stand_anywhere(void **state) {
    (void)state;
    assert_int_equal(READ("--status", "/a", "line", "{unit}"), 0);
    assert_string_equal(options.status, "/a");
    assert_string_equal(options.format, "{unit}");
    assert_int_equal(READ("line", "--follow", "{unit}", "--socket=/b"), 0);
    assert_true(options.follow && options.from_socket);
    assert_string_equal(options.socket, "/b");
    assert_int_equal(READ("line", "--", "--{unit}"), 0);
    assert_string_equal(options.format, "--{unit}");
    assert_int_equal(READ("line", ""), 0);
    assert_string_equal(options.format, "");
    assert_int_equal(READ("raw", "--socket", "/b"), 0);
    assert_true(options.from_socket);
    assert_int_equal(READ("--help"), 0);
    assert_true(options.help);
    assert_int_equal(READ("--version", "check"), 0);
    assert_true(options.version && options.command == COMMAND_CHECK);
}

static void what_is_wrong_is_said_with_what_to_do(void **state) {
    static const struct {
        const char *words[5];
        const char *said;
    } rows[] = {
        {{"brink", "chek"}, "did you mean 'check'"},
        {{"brink", "qqqqqqq"}, "there are line, check and raw"},
        {{"brink", ""}, "no command"},
        {{"brink", "--statsu", "/a"}, "did you mean '--status'"},
        {{"brink", "-x"}, "no option is called '-x'"},
        {{"brink", "--status"}, "--status needs a path"},
        {{"brink", "--socket="}, "--socket needs a path"},
        {{"brink", "--follow=1", "line"}, "--follow takes no value"},
        {{"brink", "--follow"}, "brink line --follow"},
        {{"brink", "raw", "--follow"}, "brink line --follow"},
        {{"brink", "raw", "x"}, "`brink raw` takes no further word"},
        {{"brink", "line", "{unit}", "{stage}"}, "put quotes around it"},
        {{"brink", "--status=/a", "--socket=/b"}, "leave one of them out"},
        {{"brink", "line", "--follow", "--status=/a"}, "leave one of them out"},
        {{"brink", "\033[2J"}, "'?[2J'"},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        assert_int_equal(read_words(rows[i].words), EX_USAGE);
        if (!strstr(trouble.text, rows[i].said))
            fail_msg("said: %s, wanted: %s", trouble.text, rows[i].said);
    }
}

/* ---- environment ------------------------------------------------------------------------------
 */

static void wishes(const char *const *env, bool terminal, struct page_style *style, bool *ascii) {
    static const char *const names[] = {"LC_ALL", "LC_CTYPE", "LANG", "TERM", "NO_COLOR"};

    for (size_t i = 0; i < 5; i++)
        if (env[i])
            setenv(names[i], env[i], 1);
        else
            unsetenv(names[i]);
    *style = (struct page_style){0};
    out_style(terminal, style, ascii);
}

static void the_environment_is_obeyed(void **state) {
    static const struct {
        const char *env[5]; /* LC_ALL LC_CTYPE LANG TERM NO_COLOR */
        bool terminal, bar, unicode, colour, ascii;
    } rows[] = {
        {{NULL, NULL, "de_DE.UTF-8", "xterm", NULL}, true, true, true, true, false},
        {{NULL, NULL, "de_DE.UTF-8", "xterm", NULL}, false, false, false, false, false},
        {{"C", NULL, "de_DE.UTF-8", "xterm", NULL}, true, true, false, true, true},
        {{"", "C.utf8", "C", "xterm", NULL}, true, true, true, true, false},
        {{NULL, NULL, NULL, "xterm", NULL}, true, true, false, true, true},
        {{NULL, NULL, "C.UTF-8", "dumb", NULL}, true, true, true, false, false},
        {{NULL, NULL, "C.UTF-8", NULL, NULL}, true, true, true, false, false},
        {{NULL, NULL, "C.UTF-8", "xterm", "1"}, true, true, true, false, false},
        {{NULL, NULL, "C.UTF-8", "xterm", ""}, true, true, true, true, false},
    };
    struct page_style style;
    bool ascii;

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        wishes(rows[i].env, rows[i].terminal, &style, &ascii);
        assert_int_equal(style.bar, rows[i].bar);
        assert_int_equal(style.unicode, rows[i].unicode);
        assert_int_equal(style.colour, rows[i].colour);
        assert_int_equal(ascii, rows[i].ascii);
    }
}

static void a_status_grows_old_after_three_periods_and_ten_seconds(void **state) {
    struct view v = sample_view(sample_json());
    char buf[OUT_OLD_TEXT];

    (void)state;
    v.t_boot_s = 1000;
    assert_null(out_old(&v, 1000000000, buf));
    assert_null(out_old(&v, 1010000000, buf));
    assert_string_equal(out_old(&v, 1190000000, buf),
                        "written 3 min 10 s ago: brinkd has stopped or hangs");
    v.gauge.period_s = 60;
    assert_null(out_old(&v, 1180000000, buf));
    assert_non_null(out_old(&v, 1180100000, buf));
    v.gauge.period_s = (double)NAN;
    assert_null(out_old(&v, 1010000000, buf));
    assert_non_null(out_old(&v, 1010100000, buf));
    assert_non_null(strstr(out_old(&v, 900000000, buf), "another boot"));
    v.t_boot_s = (double)NAN;
    assert_non_null(out_old(&v, 900000000, buf));
}

/* ---- spans ------------------------------------------------------------------------------------
 */

static void members_come_out_byte_for_byte(void **state) {
    static const char *const rows[][3] = {
        {"{\"result\":{\"a\":1.50}}", "result", "{\"a\":1.50}"},
        {" { \"x\" : [1,{\"result\":2}] , \"result\" : 7e0 } ", "result", "7e0"},
        {"{\"x\":\"\\\"result\\\":1,}\",\"result\":\"}\\\\\"}", "result", "\"}\\\\\""},
        {"{\"result\":[]}", "result", "[]"},
        {"{\"x\":{\"result\":1}}", "result", NULL},
        {"{}", "result", NULL},
        {"[\"result\"]", "result", NULL},
        {"{\"results\":1,\"resul\":2}", "result", NULL},
        {"", "result", NULL},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        size_t n = 0;
        const char *at = span_member(rows[i][0], strlen(rows[i][0]), rows[i][1], &n);
        assert_int_equal(at != NULL, rows[i][2] != NULL);
        if (at) {
            assert_int_equal(n, strlen(rows[i][2]));
            assert_memory_equal(at, rows[i][2], n);
        }
    }
}

/* The reference is jansson: what it finds under the key equals what our span parses to. */
static void spans_agree_with_the_parser(void **state) {
    static const char *const values[] = {
        "1",   "-0.5e3", "\"a\\\"}{\"", "[]", "[1, {\"k\":[]}]", "{}", "{\"k\" : {\"z\":null}}",
        "true"};
    unsigned seed = (unsigned)time(NULL);

    (void)state;
    printf("seed %u\n", seed);
    srand(seed);
    for (int round = 0; round < 3000; round++) {
        char text[1024] = "{";
        int members = 1 + rand() % 5;
        for (int m = 0; m < members; m++)
            snprintf(text + strlen(text), sizeof(text) - strlen(text), "%s%s\"%c\"%s:%s%s%s",
                     m ? "," : "", rand() % 2 ? " " : "", 'a' + m, rand() % 2 ? "\n" : "",
                     rand() % 2 ? "\t" : "", values[(size_t)rand() % 8], rand() % 2 ? " " : "");
        strcat(text, "}");
        json_t *json = json_loads(text, 0, NULL);
        assert_non_null(json);
        for (int m = 0; m < members + 1; m++) {
            char key[2] = {(char)('a' + m), '\0'};
            size_t n = 0;
            const char *at = span_member(text, strlen(text), key, &n);
            json_t *cut = at ? json_loadb(at, n, JSON_DECODE_ANY, NULL) : NULL;
            assert_int_equal(at != NULL, json_object_get(json, key) != NULL);
            assert_true(!at || json_equal(cut, json_object_get(json, key)));
            json_decref(cut);
        }
        json_decref(json);
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(commands_and_their_defaults),
        cmocka_unit_test(options_stand_anywhere),
        cmocka_unit_test(what_is_wrong_is_said_with_what_to_do),
        cmocka_unit_test(the_environment_is_obeyed),
        cmocka_unit_test(a_status_grows_old_after_three_periods_and_ten_seconds),
        cmocka_unit_test(members_come_out_byte_for_byte),
        cmocka_unit_test(spans_agree_with_the_parser),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
