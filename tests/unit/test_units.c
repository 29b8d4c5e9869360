/* Numbers with units: what is read, what is refused as what, and that writing is read back. */
#include "unit/seeded.h"
#include "util/cleanup.h"
#include "util/units.h"

#include <float.h>
#include <locale.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

static void assert_number(const char *text, double expected) {
    double value = -77;

    if (units_number(text, strlen(text), &value) != 0)
        fail_msg("'%s' is refused", text);
    if (memcmp(&value, &expected, sizeof(value)) != 0)
        fail_msg("'%s' is read as %.17g, not %.17g", text, value, expected);
}

static void assert_no_number(const char *text) {
    double value = -77;

    if (units_number(text, strlen(text), &value) != UNITS_E_NUMBER)
        fail_msg("'%s' is taken for a number", text);
    assert_true(value == -77);
}

static void test_numbers(void **state) {
    (void)state;
    assert_number("0", 0.0);
    assert_number("-0", -0.0);
    assert_number("+3", 3.0);
    assert_number("003.30", 3.3);
    assert_number("1e3", 1000.0);
    assert_number("1E+3", 1000.0);
    assert_number("12.5e-1", 1.25);
    assert_number("1e-999", 0.0);
    assert_number("1.7976931348623157e308", DBL_MAX);
}

/* Rounding to nearest, ties to even: IEEE 754-2019, 5.12.2. The halfway case is 1 + 2^-53, the
 * subnormal one was published by R. Regan, "PHP hangs on numeric value 2.2250738585072011e-308",
 * 2011. */
static void test_numbers_are_rounded_correctly(void **state) {
    (void)state;
    assert_number("1.00000000000000011102230246251565404236316680908203125", 1.0);
    assert_number("1.00000000000000011102230246251565404236316680908203126", 0x1.0000000000001p0);
    assert_number("9007199254740993", 9007199254740992.0);
    assert_number("9007199254740995", 9007199254740996.0);
    assert_number("2.2250738585072011e-308", 0x0.fffffffffffffp-1022);
    assert_number("2.2250738585072014e-308", DBL_MIN);
}

static void test_no_numbers(void **state) {
    static const char *const texts[] = {"",      " ",        " 1",       "1 ",
                                        "+",     "-",        "--1",      "+-1",
                                        ".5",    "5.",       ".",        "1e",
                                        "1e+",   "e3",       "1.e3",     "nan",
                                        "-nan",  "inf",      "infinity", "0x10",
                                        "0x1p3", "1,5",      "1.5.2",    "1_000",
                                        "1'000", "1e999",    "-1e999",   "1d3",
                                        "1f",    "\xd9\xa3", "1.8e308",  "1e99999999999999999999"};
    char digits[122];

    (void)state;
    for (size_t i = 0; i < sizeof(texts) / sizeof(texts[0]); i++)
        assert_no_number(texts[i]);
    memset(digits, '1', 121);
    digits[121] = '\0';
    assert_no_number(digits);
    digits[120] = '\0';
    assert_number(digits, 1.1111111111111112e119);
}

/* Only the length counts, not what lies behind it. */
static void test_number_ends_with_its_length(void **state) {
    double value;

    (void)state;
    assert_int_equal(units_number("12345", 2, &value), 0);
    assert_true(value == 12.0);
    assert_int_equal(units_number("1\0002", 3, &value), UNITS_E_NUMBER);
}

static void assert_parses(const char *text, enum unit unit, double expected) {
    double value = -77;
    int r = units_parse(text, unit, &value);

    if (r != 0)
        fail_msg("'%s' is refused with %d", text, r);
    if (value != expected)
        fail_msg("'%s' is read as %.17g, not %.17g", text, value, expected);
}

static void assert_refused(const char *text, enum unit unit, int error) {
    double value = -77;
    int r = units_parse(text, unit, &value);

    if (r != error)
        fail_msg("'%s' gives %d, not %d", text, r, error);
    assert_true(value == -77);
}

static void test_units(void **state) {
    static const struct {
        const char *text;
        enum unit unit;
        double value;
    } good[] = {
        {"115200", UNIT_NONE, 115200},      {"-1.5", UNIT_NONE, -1.5},
        {"3.30 V", UNIT_VOLT, 3.30},        {"3.30V", UNIT_VOLT, 3.30},
        {"3.30   V", UNIT_VOLT, 3.30},      {"3.30\tV", UNIT_VOLT, 3.30},
        {"3 mV", UNIT_VOLT, 0.003},         {"250 mA", UNIT_AMPERE, 0.250},
        {"-2 A", UNIT_AMPERE, -2},          {"2888 mAh", UNIT_AMPERE_HOUR, 2.888},
        {"5.8 Ah", UNIT_AMPERE_HOUR, 5.8},  {"3.1 W", UNIT_WATT, 3.1},
        {"80 mW", UNIT_WATT, 0.080},        {"20 mohm", UNIT_OHM, 0.020},
        {"1.5 ohm", UNIT_OHM, 1.5},         {"90 s", UNIT_SECOND, 90},
        {"1500 ms", UNIT_SECOND, 1.5},      {"2 min", UNIT_SECOND, 120},
        {"1.5 h", UNIT_SECOND, 5400},       {"2 d", UNIT_SECOND, 172800},
        {"8 %", UNIT_SHARE, 0.08},          {"100%", UNIT_SHARE, 1.0},
        {"7 %", UNIT_SHARE, 0.07},          {"-10 C", UNIT_CELSIUS, -10},
        {"115200 baud", UNIT_BAUD, 115200}, {"20 kJ/mol", UNIT_J_MOL, 20000},
        {"500 J/mol", UNIT_J_MOL, 500},     {"1e3 mV", UNIT_VOLT, 1.0},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(good) / sizeof(good[0]); i++)
        assert_parses(good[i].text, good[i].unit, good[i].value);
}

static void test_missing_unit_is_told_apart(void **state) {
    (void)state;
    for (int unit = UNIT_NONE + 1; unit < UNIT_COUNT_; unit++) {
        assert_refused("3.30", (enum unit)unit, UNITS_E_MISSING);
        assert_refused("3.30 ", (enum unit)unit, UNITS_E_MISSING);
    }
}

/* A complaint from the field: a share typed where volts are meant, and the other way round. */
static void test_percent_typed_for_volts(void **state) {
    (void)state;
    assert_refused("20 %", UNIT_VOLT, UNITS_E_UNIT);
    assert_refused("3.3 V", UNIT_SHARE, UNITS_E_UNIT);
    assert_refused("20", UNIT_VOLT, UNITS_E_MISSING);
}

static void test_wrong_units(void **state) {
    static const struct {
        const char *text;
        enum unit unit;
    } bad[] = {
        {"3.3 v", UNIT_VOLT},
        {"3.3 MV", UNIT_VOLT},
        {"3.3 kV", UNIT_VOLT},
        {"3.3 volt", UNIT_VOLT},
        {"3.3 A", UNIT_VOLT},
        {"2.9 A", UNIT_AMPERE_HOUR},
        {"2.9 Ah", UNIT_AMPERE},
        {"20 Ohm", UNIT_OHM},
        {"20 m ohm", UNIT_OHM},
        {"5 sec", UNIT_SECOND},
        {"5 m", UNIT_SECOND},
        {"1 h 30 min", UNIT_SECOND},
        {"5 K", UNIT_CELSIUS},
        {"5 \xc2\xb0"
         "C",
         UNIT_CELSIUS},
        {"5 %%", UNIT_SHARE},
        {"5 % # note", UNIT_SHARE},
        {"5 V", UNIT_NONE},
        {"5 %", UNIT_NONE},
        {"5 x", UNIT_VOLT},
        {"20 kJ", UNIT_J_MOL},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(bad) / sizeof(bad[0]); i++)
        assert_refused(bad[i].text, bad[i].unit, UNITS_E_UNIT);
}

static void test_what_is_no_number_whatever_unit(void **state) {
    static const char *const bad[] = {"",       "V",     " 3 V",  "3,30 V",  "3.3.0 V", "0x10 V",
                                      "0X10 V", "nan V", "inf V", "1e999 V", ".5 V",    "5. V",
                                      "-V",     "1_0 V", "1'0 V", "5-6 V",   "1e V",    "+-3 V"};

    (void)state;
    for (size_t i = 0; i < sizeof(bad) / sizeof(bad[0]); i++)
        assert_refused(bad[i], UNIT_VOLT, UNITS_E_NUMBER);
    assert_refused("1e308 kJ/mol", UNIT_J_MOL, UNITS_E_NUMBER); /* too large in J/mol */
    assert_refused("3,3", UNIT_NONE, UNITS_E_NUMBER);
}

/* One rounding for milli: 0.3 mV must be the double nearest to 0.0003 and so on. */
static void test_milli_costs_no_rounding(void **state) {
    (void)state;
    for (int i = 1; i < 10000; i++) {
        char milli[32], base[32];
        double a = -1, b = -2;
        snprintf(milli, sizeof(milli), "%d mohm", i);
        snprintf(base, sizeof(base), "%d.%03d ohm", i / 1000, i % 1000);
        assert_int_equal(units_parse(milli, UNIT_OHM, &a) | units_parse(base, UNIT_OHM, &b), 0);
        if (a != b)
            fail_msg("%s is %.17g, %s is %.17g", milli, a, base, b);
    }
}

static void test_accepted(void **state) {
    (void)state;
    assert_string_equal(units_accepted(UNIT_VOLT), "V or mV");
    assert_string_equal(units_accepted(UNIT_SECOND), "s, ms, min, h or d");
    assert_string_equal(units_accepted(UNIT_SHARE), "%");
    for (int unit = 0; unit < UNIT_COUNT_; unit++)
        assert_true(strlen(units_accepted((enum unit)unit)) > 0);
}

static void assert_formats(double value, enum unit unit, const char *expected) {
    char text[64];

    assert_ptr_equal(units_format(value, unit, text, sizeof(text)), text);
    assert_string_equal(text, expected);
}

static void test_format(void **state) {
    char small[5];

    (void)state;
    assert_formats(3.3, UNIT_VOLT, "3.3 V");
    assert_formats(90, UNIT_SECOND, "90 s");
    assert_formats(0.08, UNIT_SHARE, "8 %");
    assert_formats(0.07, UNIT_SHARE, "7 %");
    assert_formats(0.125, UNIT_SHARE, "12.5 %");
    assert_formats(115200, UNIT_BAUD, "115200 baud");
    assert_formats(0.1 + 0.2, UNIT_NONE, "0.30000000000000004");
    assert_formats(-0.0, UNIT_AMPERE, "0 A");
    assert_formats(1e-6, UNIT_OHM, "0.000001 ohm");
    assert_formats((double)NAN, UNIT_VOLT, "unknown");
    assert_formats((double)INFINITY, UNIT_WATT, "unlimited");
    units_format(12.345, UNIT_VOLT, small, sizeof(small));
    assert_string_equal(small, "12.3");
}

/* The effective config must be a config: what is written reads back as the same value. */
static void test_format_reads_back(void **state) {
    scoped(seeded_free_p) gsl_rng *random = seeded_new("test_format_reads_back");

    (void)state;
    for (int i = 0; i < 20000; i++) {
        enum unit unit = (enum unit)gsl_rng_uniform_int(random, UNIT_COUNT_);
        double size = pow(10, gsl_rng_uniform(random) * 30 - 15);
        double value = (gsl_rng_uniform(random) - 0.5) * size, back = 0;
        char text[64];
        units_format(value, unit, text, sizeof(text));
        int r = units_parse(text, unit, &back);
        /* a share is written as hundredths, where no last digit may hit the value */
        double slack = unit == UNIT_SHARE ? 2 * DBL_EPSILON * fabs(value) : 0;
        if (r != 0 || !(fabs(back - value) <= slack))
            fail_msg("%.17g is written '%s' and read %.17g (%d)", value, text, back, r);
    }
}

static void test_duration(void **state) {
    static const struct {
        double seconds;
        const char *text;
    } cases[] = {
        {0, "0 s"},
        {-5, "0 s"},
        {0.99, "0 s"},
        {59.999, "59 s"},
        {60, "1 min 00 s"},
        {130, "2 min 10 s"},
        {3599.9, "59 min 59 s"},
        {3600, "1 h 00"},
        {20400, "5 h 40"},
        {86399, "23 h 59"},
        {86400, "1 d 0 h"},
        {273600, "3 d 4 h"},
        {863999999, "9999 d 23 h"},
        {864000000, "over 9999 d"},
        {1e300, "over 9999 d"},
        {(double)INFINITY, "no end"},
        {(double)-INFINITY, "0 s"},
        {(double)NAN, "unknown"},
    };
    char text[24];

    (void)state;
    for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++) {
        assert_ptr_equal(units_duration(cases[i].seconds, text, sizeof(text)), text);
        assert_string_equal(text, cases[i].text);
    }
}

/* A locale that writes a comma: one that is installed, or one made for this test. */
static bool set_comma_locale(void) {
    static const char *const installed[] = {"de_DE.UTF-8", "fr_FR.UTF-8", "nl_NL.UTF-8"};
    char folder[] = "/tmp/brink-locale-XXXXXX", command[256];

    for (size_t i = 0; i < sizeof(installed) / sizeof(installed[0]); i++)
        if (setlocale(LC_ALL, installed[i]))
            return true;
    if (!mkdtemp(folder))
        return false;
    snprintf(command, sizeof(command), "localedef -i de_DE -f UTF-8 %s/de_DE.UTF-8 >%s.log 2>&1",
             folder, folder);
    bool set = system(command) == 0 && setenv("LOCPATH", folder, 1) == 0 &&
               setlocale(LC_ALL, "de_DE.UTF-8");
    snprintf(command, sizeof(command), "rm -rf %s %s.log", folder, folder);
    return system(command) == 0 && set;
}

/* Another complaint: "3.30" read as 3 because somebody's desktop writes a comma. */
static void test_comma_locale(void **state) {
    (void)state;
    if (!set_comma_locale()) {
        print_message("skip: no locale with a decimal comma, and localedef makes none\n");
        skip();
    }
    assert_string_equal(localeconv()->decimal_point, ",");
    assert_parses("3.30 V", UNIT_VOLT, 3.30);
    assert_refused("3,30 V", UNIT_VOLT, UNITS_E_NUMBER);
    assert_number("-12.5e-1", -1.25);
    setlocale(LC_ALL, "C");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_numbers),
        cmocka_unit_test(test_numbers_are_rounded_correctly),
        cmocka_unit_test(test_no_numbers),
        cmocka_unit_test(test_number_ends_with_its_length),
        cmocka_unit_test(test_units),
        cmocka_unit_test(test_missing_unit_is_told_apart),
        cmocka_unit_test(test_percent_typed_for_volts),
        cmocka_unit_test(test_wrong_units),
        cmocka_unit_test(test_what_is_no_number_whatever_unit),
        cmocka_unit_test(test_milli_costs_no_rounding),
        cmocka_unit_test(test_accepted),
        cmocka_unit_test(test_format),
        cmocka_unit_test(test_format_reads_back),
        cmocka_unit_test(test_duration),
        cmocka_unit_test(test_comma_locale),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
