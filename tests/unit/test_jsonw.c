/* The JSON writer, against printf, jansson, RFC 8259 and the Unicode standard. */
#include "publish/jsonw.h"

#include "util/real.h"

#include <jansson.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))

static const char *text_of(const char *text, char *buf, size_t size) {
    struct jsonw w;

    jsonw_init(&w, buf, size);
    jsonw_text(&w, NULL, text);
    assert_true(jsonw_finish(&w) > 0);
    return buf;
}

static const char *fixed_of(double value, int decimals, char *buf, size_t size) {
    struct jsonw w;

    jsonw_init(&w, buf, size);
    jsonw_fixed(&w, NULL, value, decimals);
    assert_true(jsonw_finish(&w) > 0);
    return buf;
}

static void test_objects_and_arrays(void **state) {
    char buf[256];
    struct jsonw w;

    (void)state;
    jsonw_init(&w, buf, sizeof(buf));
    jsonw_open(&w, NULL, '{');
    jsonw_int(&w, "a", -7);
    jsonw_open(&w, "b", '[');
    jsonw_close(&w, ']');
    jsonw_open(&w, "c", '[');
    jsonw_bool(&w, NULL, true);
    jsonw_open(&w, NULL, '{');
    jsonw_null(&w, "d");
    jsonw_close(&w, '}');
    jsonw_text(&w, NULL, NULL);
    jsonw_raw(&w, NULL, "{\"r\":1}", 7);
    jsonw_close(&w, ']');
    jsonw_bool(&w, "e", false);
    jsonw_close(&w, '}');
    size_t length = jsonw_finish(&w);
    assert_int_equal(length, strlen(buf));
    assert_string_equal(buf,
                        "{\"a\":-7,\"b\":[],\"c\":[true,{\"d\":null},null,{\"r\":1}],\"e\":false}");
}

static void test_integers(void **state) {
    char buf[128];
    struct jsonw w;

    (void)state;
    jsonw_init(&w, buf, sizeof(buf));
    jsonw_int(&w, NULL, INT64_MIN);
    jsonw_int(&w, NULL, INT64_MAX);
    jsonw_int(&w, NULL, 0);
    jsonw_count(&w, NULL, UINT64_MAX);
    assert_true(jsonw_finish(&w) > 0);
    assert_string_equal(buf, "-9223372036854775808,9223372036854775807,0,18446744073709551615");
}

/* RFC 8259, "The JavaScript Object Notation (JSON) Data Interchange Format", section 7, 2017. */
static void test_escapes(void **state) {
    static const struct {
        const char *text, *json;
    } cases[] = {
        {"", "\"\""},
        {"plain / text", "\"plain / text\""},
        {"\"\\", "\"\\\"\\\\\""},
        {"\b\f\n\r\t", "\"\\b\\f\\n\\r\\t\""},
        {"\x01\x1f\x7f", "\"\\u0001\\u001f\x7f\""},
        {"a\"b\x02"
         "c",
         "\"a\\\"b\\u0002c\""},
        {"\xf0\x9d\x84\x9e", "\"\xf0\x9d\x84\x9e\""}, /* U+1D11E, the RFC's own example */
    };
    char buf[128];

    (void)state;
    for (size_t i = 0; i < COUNT(cases); i++)
        assert_string_equal(text_of(cases[i].text, buf, sizeof(buf)), cases[i].json);
}

#define FFFD "\xef\xbf\xbd"

/* The Unicode Standard, version 13.0, section 3.9: tables 3-7 (what is well-formed) and 3-8 to 3-10
 * (byte sequences that are not), from memory. Each bad byte is replaced by itself. */
static void test_utf8(void **state) {
    static const struct {
        const char *text, *json;
    } cases[] = {
        {"\xc2\x80\xdf\xbf", "\"\xc2\x80\xdf\xbf\""},
        {"\xe0\xa0\x80\xed\x9f\xbf\xee\x80\x80", "\"\xe0\xa0\x80\xed\x9f\xbf\xee\x80\x80\""},
        {"\xf0\x90\x80\x80\xf4\x8f\xbf\xbf", "\"\xf0\x90\x80\x80\xf4\x8f\xbf\xbf\""},
        {"\xc0\xaf\xe0\x80\xbf\x41", "\"" FFFD FFFD FFFD FFFD FFFD "A\""},
        {"\xed\xa0\x80\x41", "\"" FFFD FFFD FFFD "A\""},          /* a surrogate */
        {"\xf4\x91\x92\x93\x41", "\"" FFFD FFFD FFFD FFFD "A\""}, /* above U+10FFFF */
        {"\xff\x41\x80\xbf\x42", "\"" FFFD "A" FFFD FFFD "B\""},
        {"\xe2\x82", "\"" FFFD FFFD "\""}, /* cut off */
        {"\xf0\x9f\x98\"", "\"" FFFD FFFD FFFD "\\\"\""},
    };
    char buf[128];

    (void)state;
    for (size_t i = 0; i < COUNT(cases); i++)
        assert_string_equal(text_of(cases[i].text, buf, sizeof(buf)), cases[i].json);
}

/* Every string of two bytes comes out as JSON that jansson, which checks UTF-8, takes. */
static void test_every_pair_of_bytes_is_valid_json(void **state) {
    char text[3] = "", buf[64];

    (void)state;
    for (int a = 1; a < 256; a++) {
        for (int b = 1; b < 256; b++) {
            text[0] = (char)a;
            text[1] = (char)b;
            text_of(text, buf, sizeof(buf));
            json_t *value = json_loads(buf, JSON_DECODE_ANY, NULL);
            assert_non_null(value);
            if (a < 0x80 && b < 0x80)
                assert_string_equal(json_string_value(value), text);
            json_decref(value);
        }
    }
}

static void test_fixed_values(void **state) {
    static const struct {
        double value;
        int decimals;
        const char *json;
    } cases[] = {
        {3.712, 3, "3.712"},
        {0.0, 4, "0.0000"},
        {-0.0, 2, "0.00"},
        {-0.0004, 3, "0.000"}, /* printf says -0.000 */
        {-0.0006, 3, "-0.001"},
        {20400.4, 0, "20400"},
        {0.5, 0, "0"}, /* ties to even */
        {1.5, 0, "2"},
        {2.5, 0, "2"},
        {0.125, 2, "0.12"},
        {0.375, 2, "0.38"},
        {1.005, 2, "1.00"}, /* the double lies under 1.005 */
        {0.9999999, 3, "1.000"},
        {99.9996, 3, "100.000"},
        {1e-300, 6, "0.000000"},
        {5e-324, 0, "0"},
        {4503599627370495.0, 0, "4503599627370495"},
        {4503599627370496.0, 0, "null"},
        {4503599627.5, 6, "null"},
        {1e308, 6, "null"},
        {UNKNOWN, 3, "null"},
        {ENDLESS, 0, "null"},
        {-ENDLESS, 0, "null"},
        {7, -3, "7"},
        {7, 9, "7.000000"},
    };
    char buf[64];

    (void)state;
    for (size_t i = 0; i < COUNT(cases); i++)
        assert_string_equal(fixed_of(cases[i].value, cases[i].decimals, buf, sizeof(buf)),
                            cases[i].json);
}

static uint64_t next_random(uint64_t *seed) { /* splitmix64 */
    uint64_t z = *seed += 0x9e3779b97f4a7c15U;

    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9U;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebU;
    return z ^ (z >> 31);
}

/* Values of every magnitude that the writer takes, many of them on a tie or one step beside it. */
static double next_value(uint64_t *seed, double scale) {
    uint64_t bits = next_random(seed);
    double value;

    switch (next_random(seed) % 4) {
    case 0: /* anything, from 2^-60 on */
        value = ldexp((double)(bits >> 11), (int)(bits % 60) - 113);
        break;
    case 1: /* near a decimal that ends in 5 */
        value = ((double)(bits % 2000000000) + 0.5) / scale;
        break;
    case 2: /* a true tie: an odd number of halves, quarters, eighths, ... */
        value = ldexp((double)(bits % 100000) * 2 + 1, -(int)(next_random(seed) % 8));
        break;
    default: /* just under the limit */
        value = ldexp((double)(bits >> 12), 0) / scale;
    }
    switch (next_random(seed) % 3) {
    case 0:
        value = nextafter(value, ENDLESS);
        break;
    case 1:
        value = nextafter(value, -ENDLESS);
        break;
    default:
        break;
    }
    return next_random(seed) % 2 ? value : -value;
}

/* Reference: the C library's printf, which rounds the exact binary value. */
static void test_fixed_is_what_printf_says(void **state) {
    uint64_t seed =
        getenv("BRINK_SEED") ? strtoull(getenv("BRINK_SEED"), NULL, 10) : (uint64_t)time(NULL);
    uint64_t told = 0;

    (void)state;
    print_message("seed %llu (BRINK_SEED=%llu repeats it)\n", (unsigned long long)seed,
                  (unsigned long long)seed);
    for (int i = 0; i < 280000; i++) {
        int decimals = i % (JSONW_DECIMALS_MAX + 1);
        double scale = pow(10, decimals), value = next_value(&seed, scale);
        char buf[64], want[400];

        if (!(fabs(value) * scale < 4503599627370496.0))
            continue;
        snprintf(want, sizeof(want), "%.*f", decimals, value);
        if (want[0] == '-' && strspn(want + 1, "0.") == strlen(want + 1))
            memmove(want, want + 1, strlen(want));
        assert_string_equal(fixed_of(value, decimals, buf, sizeof(buf)), want);
        told++;
    }
    assert_true(told > 200000);
}

static size_t write_all(char *buf, size_t size) {
    struct jsonw w;

    jsonw_init(&w, buf, size);
    jsonw_open(&w, NULL, '{');
    jsonw_text(&w, "text", "a\x01\"\xff\xc3\xa9");
    jsonw_fixed(&w, "fixed", -12.25, 3);
    jsonw_int(&w, "int", 42);
    jsonw_bool(&w, "bool", true);
    jsonw_open(&w, "array", '[');
    jsonw_null(&w, NULL);
    jsonw_close(&w, ']');
    jsonw_close(&w, '}');
    return jsonw_finish(&w);
}

/* With every size too small: 0, an empty text, and not a byte behind the buffer. */
static void test_overflow(void **state) {
    char whole[256];
    size_t length = write_all(whole, sizeof(whole));

    (void)state;
    assert_int_equal(length, strlen(whole));
    for (size_t size = 0; size <= length + 1; size++) {
        char buf[256];
        memset(buf, '#', sizeof(buf));
        assert_int_equal(write_all(buf, size), size > length ? length : 0);
        for (size_t i = size; i < sizeof(buf); i++)
            assert_int_equal(buf[i], '#');
        if (size > 0)
            assert_string_equal(buf, size > length ? whole : "");
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_objects_and_arrays),
        cmocka_unit_test(test_integers),
        cmocka_unit_test(test_escapes),
        cmocka_unit_test(test_utf8),
        cmocka_unit_test(test_every_pair_of_bytes_is_valid_json),
        cmocka_unit_test(test_fixed_values),
        cmocka_unit_test(test_fixed_is_what_printf_says),
        cmocka_unit_test(test_overflow),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
