/* Text made safe, columns, spans and clock times. */
#include "client/words.h"

#include <setjmp.h>
#include <stdarg.h>

#include <cmocka.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#define SIZE 256

static const char *clean(const char *text, char *buf) {
    words_clean(text, strlen(text), false, buf, SIZE);
    return buf;
}

/* RFC 3629 (2003), section 7, examples: well-formed sequences come through. */
static void examples_of_rfc3629_come_through(void **state) {
    static const char *const good[] = {
        "A\xE2\x89\xA2\xCE\x91.",
        "\xED\x95\x9C\xEA\xB5\xAD\xEC\x96\xB4",
        "\xE6\x97\xA5\xE6\x9C\xAC\xE8\xAA\x9E",
        "\xF0\xA3\x8E\xB4",
    };
    char buf[SIZE];

    (void)state;
    for (size_t i = 0; i < sizeof(good) / sizeof(good[0]); i++)
        assert_string_equal(clean(good[i], buf), good[i]);
}

/* RFC 3629, section 3 (surrogates, above U+10FFFF) and section 10 (overlong forms, among them the
 * one of "/../"); The Unicode Standard 15.0, table 3-7: limits of the second byte. */
static void ill_formed_bytes_become_marks(void **state) {
    static const char *const bad[][2] = {
        {"\xC0\x80", "??"},
        {"/\xC0\xAE./", "/??./"},
        {"\xE0\x9F\xBF", "???"},
        {"\xED\xA0\x80", "???"},
        {"\xF0\x8F\xBF\xBF", "????"},
        {"\xF4\x90\x80\x80", "????"},
        {"\xF8\x88\x80\x80\x80", "?????"},
        {"\xE2\x89", "??"},
        {"\xE2\x89z", "??z"},
        {"\x80", "?"},
        {"\xFF\xFE", "??"},
    };
    char buf[SIZE];

    (void)state;
    for (size_t i = 0; i < sizeof(bad) / sizeof(bad[0]); i++)
        assert_string_equal(clean(bad[i][0], buf), bad[i][1]);
}

/* ECMA-48: ESC and the C1 controls (CSI is U+009B) are what drives a terminal. */
static void no_control_gets_through(void **state) {
    char buf[SIZE];

    (void)state;
    assert_string_equal(clean("a\033[31mb\007\r\n\t\177", buf), "a?[31mb?????");
    assert_string_equal(clean("\xC2\x9B"
                              "2J\xC2\x85",
                              buf),
                        "?2J?");
    assert_string_equal(clean("a\xE2\x80\xAE"
                              "b\xE2\x81\xA6\xE2\x80\x8B\xEF\xBB\xBF\xC2\xAD",
                              buf),
                        "a?b????");
    words_clean("a\0b", 3, false, buf, SIZE);
    assert_string_equal(buf, "a?b");
}

static void ascii_means_ascii(void **state) {
    char buf[SIZE];

    (void)state;
    words_clean("Moor-S\xC3\xBC"
                "d",
                9, true, buf, SIZE);
    assert_string_equal(buf, "Moor-S?d");
}

/* A cut falls between characters and keeps the NUL, whatever the size. */
static void cutting_keeps_whole_characters(void **state) {
    static const char text[] = "\xC3\xBC\xE6\x97\xA5\xF0\xA3\x8E\xB4z";
    char buf[16];

    (void)state;
    for (size_t size = 1; size <= sizeof(text); size++) {
        memset(buf, 'x', sizeof(buf));
        words_clean(text, sizeof(text) - 1, false, buf, size);
        size_t n = strlen(buf);
        assert_true(n < size);
        assert_true(n == 0 || n == 2 || n == 5 || n == 9 || n == 10);
    }
}

static void any_bytes_come_out_clean(void **state) {
    unsigned seed = (unsigned)time(NULL);

    (void)state;
    printf("seed %u\n", seed);
    srand(seed);
    for (int round = 0; round < 20000; round++) {
        char bytes[24], once[SIZE], twice[SIZE];
        size_t n = (size_t)rand() % sizeof(bytes);
        for (size_t i = 0; i < n; i++)
            bytes[i] = (char)(rand() % 256);
        words_clean(bytes, n, round % 2, once, SIZE);
        for (const unsigned char *c = (unsigned char *)once; *c; c++)
            assert_true(*c >= 0x20 && *c != 0x7F && (round % 2 == 0 || *c < 0x80));
        words_clean(once, strlen(once), false, twice, SIZE);
        assert_string_equal(once, twice);
    }
}

/* UAX #11: CJK takes two columns, Latin one. */
static void columns_are_never_told_too_few(void **state) {
    (void)state;
    assert_int_equal(words_columns("heron"), 5);
    assert_int_equal(words_columns("S\xC3\xBC"
                                   "d"),
                     3);
    assert_int_equal(words_columns("\xE6\x97\xA5\xE6\x9C\xAC"), 4);
    assert_int_equal(words_fit("\xE6\x97\xA5\xE6\x9C\xAC", 3), 3);
    assert_int_equal(words_fit("heron", 3), 3);
    assert_int_equal(words_fit("heron", 9), 5);
}

static void long_names_lose_their_middle(void **state) {
    char buf[SIZE];

    (void)state;
    words_shorten("starboard-battery-1", 12, false, buf, SIZE);
    assert_string_equal(buf, "starb..ery-1");
    words_shorten("starboard-battery-1", 12, true, buf, SIZE);
    assert_string_equal(buf, "starbo\u2026ery-1");
    words_shorten("main", 12, true, buf, SIZE);
    assert_string_equal(buf, "main");
    words_shorten("\u65e5\u672c\u8a9e\u65e5\u672c\u8a9e\u65e5\u672c\u8a9e", 9, false, buf, SIZE);
    assert_true(words_columns(buf) <= 9);
}

static void values_carry_their_unit(void **state) {
    char buf[SIZE];

    (void)state;
    assert_string_equal(words_value(3.712, "V", 2, 0, buf, SIZE), "3.71 V");
    assert_string_equal(words_value(0.081, "V", 2, 1, buf, SIZE), "81 mV");
    assert_string_equal(words_value(1.2, "V", 2, 1, buf, SIZE), "1.20 V");
    assert_string_equal(words_value(0.35, "W", 1, 1, buf, SIZE), "350 mW");
    assert_string_equal(words_value(-0.0001, "A", 2, 0.1, buf, SIZE), "0.00 A");
}

static void nothing_is_minus_nothing(void **state) {
    char buf[SIZE];

    (void)state;
    for (double v = -1; v <= 1; v += 1.0 / 512) {
        words_value(v, "C", 0, 0, buf, SIZE);
        assert_string_not_equal(buf, "-0 C");
        words_value(v, "A", 2, 0.1, buf, SIZE);
        assert_string_not_equal(buf, "-0.00 A");
        assert_string_not_equal(buf, "-0 mA");
    }
    assert_string_equal(words_value((double)NAN, "V", 2, 0, buf, SIZE), "-");
    assert_string_equal(words_share(0.634, buf, SIZE), "63 %");
    assert_string_equal(words_share((double)NAN, buf, SIZE), "-");
}

static void spans_tell_what_is_worth_telling(void **state) {
    static const struct {
        double s;
        const char *words;
    } rows[] = {{0, "0 s"},
                {42, "42 s"},
                {120, "2 min"},
                {130, "2 min 10 s"},
                {599, "9 min 59 s"},
                {659, "10 min"},
                {3600, "1 h"},
                {20400, "5 h 40"},
                {86400, "1 d"},
                {100000, "1 d 3 h"},
                {(double)NAN, "unknown"},
                {(double)INFINITY, "no end"}};
    char buf[SIZE];

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++)
        assert_string_equal(words_span(rows[i].s, buf, SIZE), rows[i].words);
    assert_string_equal(words_age(0.42, buf, SIZE), "0.4 s");
    assert_string_equal(words_age(190, buf, SIZE), "3 min 10 s");
}

/* The moment against the C library's own way from a date; RFC 3339 (2002), section 5.8, examples
 * are of that form but before 2025, or not in UTC. */
static void moments_are_believed_from_2025_on(void **state) {
    struct tm tm = {.tm_year = 126, .tm_mon = 11, .tm_mday = 1, .tm_hour = 6, .tm_min = 12};

    (void)state;
    assert_int_equal(words_moment("2026-12-01T06:12:00Z"), timegm(&tm));
    assert_int_equal(words_moment("2025-01-01T00:00:00Z"), 1735689600);
    assert_int_equal(words_moment("2024-12-31T23:59:59Z"), -1);
    assert_int_equal(words_moment("1990-12-31T23:59:60Z"), -1);
    assert_int_equal(words_moment("1985-04-12T23:20:50.52Z"), -1);
    assert_int_equal(words_moment("2026-12-19T16:39:57-08:00"), -1);
    assert_int_equal(words_moment(""), -1);
    assert_int_equal(words_moment("2026-12-01T06:12:00Z "), -1);
}

static void clock_times_are_local_and_carry_the_day_when_it_is_another(void **state) {
    int64_t moment = words_moment("2026-12-01T06:12:00Z");
    char buf[SIZE];

    (void)state;
    setenv("TZ", "UTC0", 1);
    tzset();
    assert_string_equal(words_since(moment, 720, buf, SIZE), "since 06:00");
    assert_string_equal(words_since(moment, 7 * 3600, buf, SIZE), "since 30 Nov 23:12");
    assert_string_equal(words_about(moment, 15000, buf, SIZE), "about 10:22");
    assert_string_equal(words_about(moment, 86400, buf, SIZE), "about 2 Dec 06:12");
    setenv("TZ", "FEN-5:30", 1);
    tzset();
    assert_string_equal(words_about(moment, 0, buf, SIZE), "about 11:42");
    setenv("TZ", "UTC0", 1);
    tzset();
}

/* Boards without a clock start in 1970 or at the build date: spans, not times of day. */
static void without_a_believable_clock_spans_are_told(void **state) {
    char buf[SIZE];

    (void)state;
    assert_string_equal(words_since(-1, 20400, buf, SIZE), "for 5 h 40");
    assert_string_equal(words_about(-1, 20400, buf, SIZE), "in 5 h 40");
    assert_string_equal(words_since(-1, (double)NAN, buf, SIZE), "");
    assert_string_equal(words_about(1764569520, 1e12, buf, SIZE), "in over 9999 d");
    assert_string_equal(words_since(1764569520, -5, buf, SIZE), "for 0 s");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(examples_of_rfc3629_come_through),
        cmocka_unit_test(ill_formed_bytes_become_marks),
        cmocka_unit_test(no_control_gets_through),
        cmocka_unit_test(ascii_means_ascii),
        cmocka_unit_test(cutting_keeps_whole_characters),
        cmocka_unit_test(any_bytes_come_out_clean),
        cmocka_unit_test(columns_are_never_told_too_few),
        cmocka_unit_test(long_names_lose_their_middle),
        cmocka_unit_test(values_carry_their_unit),
        cmocka_unit_test(nothing_is_minus_nothing),
        cmocka_unit_test(spans_tell_what_is_worth_telling),
        cmocka_unit_test(moments_are_believed_from_2025_on),
        cmocka_unit_test(clock_times_are_local_and_carry_the_day_when_it_is_another),
        cmocka_unit_test(without_a_believable_clock_spans_are_told),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
