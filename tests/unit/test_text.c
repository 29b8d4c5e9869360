/* Near names, appending, UTF-8. */
#include "util/text.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

static const char *const names[] = {"cells", "capacity", "cutoff_charge", "cutoff_rest", "floor",
                                    "keep",  "r0",       "voltage"};

static void assert_nearest(const char *word, const char *expected) {
    const char *near = text_nearest(word, names, sizeof(names) / sizeof(names[0]));

    if (!expected) {
        if (near)
            fail_msg("'%s' is said to be near '%s'", word, near);
        return;
    }
    if (!near || strcmp(near, expected) != 0)
        fail_msg("'%s' is near '%s', not '%s'", word, near ? near : "nothing", expected);
}

static void test_nearest(void **state) {
    (void)state;
    assert_nearest("cell", "cells");
    assert_nearest("capasity", "capacity");
    assert_nearest("CAPACITY", "capacity");
    assert_nearest("flor", "floor");
    assert_nearest("kepe", "keep");
    assert_nearest("r1", "r0");
    assert_nearest("volt", "voltage");          /* a beginning */
    assert_nearest("voltage_of_it", "voltage"); /* a beginning the other way round */
    assert_nearest("cutof_rest", "cutoff_rest");
    assert_nearest("cutoff_", "cutoff_charge"); /* both begin so: the first counts */
}

static void test_far_names_are_not_suggested(void **state) {
    (void)state;
    assert_nearest("", NULL);
    assert_nearest("x", NULL);
    assert_nearest("ab", NULL); /* two changes make "r0" of anything this short */
    assert_nearest("brightness", NULL);
    assert_nearest("0123456789012345678901234567890123456789012345678901234567890123456789", NULL);
    assert_null(text_nearest("cells", NULL, 0));
}

/* A word of 63 letters is the longest that is compared letter by letter. */
static void test_nearest_of_long_names(void **state) {
    char word[80], candidate[80];
    const char *const candidates[] = {candidate};

    (void)state;
    memset(word, 'a', 79);
    memset(candidate, 'a', 79);
    word[63] = candidate[63] = '\0';
    word[0] = 'b';
    assert_ptr_equal(text_nearest(word, candidates, 1), candidate);
    word[63] = candidate[63] = 'a';
    word[64] = candidate[64] = '\0';
    assert_null(text_nearest(word, candidates, 1));
}

static void test_append(void **state) {
    char text[12];
    size_t n = 0;

    (void)state;
    memset(text, '#', sizeof(text));
    assert_true(text_append(text, 10, &n, "%d;", 12));
    assert_true(text_append(text, 10, &n, "%s", "abcdef"));
    assert_string_equal(text, "12;abcdef");
    assert_int_equal(n, 9);
    assert_true(text_append(text, 10, &n, "%s", ""));
    assert_false(text_append(text, 10, &n, "g"));
    assert_string_equal(text, "12;abcdef");
    assert_int_equal(n, 9);
    assert_memory_equal(text + 10, "##", 2);
    n = 3;
    assert_false(text_append(text, 10, &n, "%s", "uvwxyz!"));
    assert_string_equal(text, "12;uvwxyz");
    assert_int_equal(n, 9);
    n = 10;
    assert_false(text_append(text, 10, &n, "x"));
    assert_int_equal(n, 10);
    n = 0;
    assert_false(text_append(text, 0, &n, "x"));
    assert_int_equal(n, 0);
}

static void assert_utf8(const char *text, bool expected) {
    if (text_is_utf8(text, strlen(text)) != expected)
        fail_msg("\\x%02x\\x%02x... is %s UTF-8", (unsigned char)text[0], (unsigned char)text[1],
                 expected ? "" : "no");
}

/* The ends of each row of table 3-7 of The Unicode Standard 15.0, and what lies just outside. */
static void test_utf8(void **state) {
    static const char *const good[] = {"",
                                       "a\x7f",
                                       "\xc2\x80",
                                       "\xdf\xbf",
                                       "\xe0\xa0\x80",
                                       "\xe0\xbf\xbf",
                                       "\xe1\x80\x80",
                                       "\xec\xbf\xbf",
                                       "\xed\x80\x80",
                                       "\xed\x9f\xbf",
                                       "\xee\x80\x80",
                                       "\xef\xbf\xbf",
                                       "\xf0\x90\x80\x80",
                                       "\xf0\xbf\xbf\xbf",
                                       "\xf1\x80\x80\x80",
                                       "\xf3\xbf\xbf\xbf",
                                       "\xf4\x80\x80\x80",
                                       "\xf4\x8f\xbf\xbf"};
    static const char *const bad[] = {"\x80",
                                      "\xbf",
                                      "\xc0\x80",
                                      "\xc1\xbf",
                                      "\xc2",
                                      "\xc2\x7f",
                                      "\xc2\xc0",
                                      "a\xdf",
                                      "\xe0\x9f\xbf",
                                      "\xe0\xa0",
                                      "\xe1\x80",
                                      "\xed\xa0\x80",
                                      "\xed\xbf\xbf",
                                      "\xef\xbf\x7f",
                                      "\xf0\x8f\xbf\xbf",
                                      "\xf0\x90\x80",
                                      "\xf4\x90\x80\x80",
                                      "\xf5\x80\x80\x80",
                                      "\xff",
                                      "\xfe"};

    (void)state;
    for (size_t i = 0; i < sizeof(good) / sizeof(good[0]); i++)
        assert_utf8(good[i], true);
    for (size_t i = 0; i < sizeof(bad) / sizeof(bad[0]); i++)
        assert_utf8(bad[i], false);
    assert_true(text_is_utf8("a\0b", 3));
    /* cut by the length, though what lies behind would make it whole */
    assert_false(text_is_utf8("\xc3\xa9", 1));
    assert_false(text_is_utf8("a\xe2\x82\xac", 3));
}

static void test_cut(void **state) {
    (void)state;
    assert_int_equal(text_cut("abc", 5), 3);
    assert_int_equal(text_cut("abcde", 5), 5);
    assert_int_equal(text_cut("abcdef", 5), 5);
    assert_int_equal(text_cut("abcd\xc3\xa9", 5), 4);
    assert_int_equal(text_cut("abcd\xc3\xa9", 6), 6);
    assert_int_equal(text_cut("a\xf0\x9f\x90\xa6", 4), 1);
    assert_int_equal(text_cut("\x80\x80\x80", 2), 0);
    assert_int_equal(text_cut("", 0), 0);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_nearest),
        cmocka_unit_test(test_far_names_are_not_suggested),
        cmocka_unit_test(test_nearest_of_long_names),
        cmocka_unit_test(test_append),
        cmocka_unit_test(test_utf8),
        cmocka_unit_test(test_cut),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
