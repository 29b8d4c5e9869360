/* The log CSV reader: what it takes, what it refuses and in which words, and its number reader
 * against the C library's strtod. */
#include "bench/random.h"
#include "decode/logcsv.h"

#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <time.h>
#include <unistd.h>

#include <cmocka.h>

static int fd_of(const void *data, size_t length) {
    int fd = memfd_create("log", MFD_CLOEXEC);

    assert_true(fd >= 0);
    assert_int_equal(write(fd, data, length), (ssize_t)length);
    assert_int_equal(lseek(fd, 0, SEEK_SET), 0);
    return fd;
}

static struct logcsv *good(const char *text) {
    struct logcsv *log = NULL;
    char message[256] = "";
    int r = logcsv_new(&log, fd_of(text, strlen(text)), "a.csv", message, sizeof message);

    assert_string_equal(message, "");
    assert_int_equal(r, 0);
    return log;
}

static void columns_in_any_order(void **state) {
    (void)state;
    struct logcsv *log = good("# cell: fen logger; capacity_Ah 2.888; made by hand\n"
                              "# capacity_Ah 9\n"
                              "\n"
                              "charge_Ah, voltage_V ,humidity,time_s,site\n"
                              "0.25,4.125,81,0,fen\n"
                              "# a remark\n"
                              ",4.0,,1.5,\n");
    struct logcsv_row row;

    assert_true(logcsv_capacity_Ah(log) == 2.888);
    assert_string_equal(logcsv_ignored(log), "humidity, site");
    assert_true(logcsv_has(log, LOGCSV_CHARGE));
    assert_false(logcsv_has(log, LOGCSV_CURRENT));
    assert_int_equal(logcsv_next(log, &row), 0);
    assert_true(row.value[LOGCSV_TIME] == 0.0 && row.value[LOGCSV_VOLTAGE] == 4.125);
    assert_true(row.value[LOGCSV_CHARGE] == 0.25 && isnan(row.value[LOGCSV_CURRENT]));
    assert_int_equal(logcsv_next(log, &row), 0);
    assert_true(row.value[LOGCSV_TIME] == 1.5 && isnan(row.value[LOGCSV_CHARGE]));
    assert_int_equal(logcsv_next(log, &row), LOGCSV_END);
    assert_int_equal(logcsv_next(log, &row), LOGCSV_END);
    assert_string_equal(logcsv_message(log), "");
    logcsv_free(log);
}

static void line_ends(void **state) {
    (void)state;
    static const char *const texts[] = {
        "time_s,voltage_V\n0,4\n1,-0\n", "time_s,voltage_V\r\n0,4\r\n1,-0\r\n",
        "time_s,voltage_V\n0,4\n1,-0", "\r\n \t\r\n time_s\t, voltage_V \r\n\r\n 0 , 4\n1,-0\r\n"};

    for (size_t i = 0; i < sizeof texts / sizeof *texts; i++) {
        struct logcsv *log = good(texts[i]);
        struct logcsv_row row;

        assert_int_equal(logcsv_next(log, &row), 0);
        assert_int_equal(logcsv_next(log, &row), 0);
        assert_true(row.value[LOGCSV_TIME] == 1.0 && row.value[LOGCSV_VOLTAGE] == 0.0);
        assert_int_equal(logcsv_next(log, &row), LOGCSV_END);
        logcsv_free(log);
    }
}

static const struct refusal {
    const char *text, *message;
} refusals[] = {
#define ACCEPTED "accepted are time_s, voltage_V (both required), current_A, temp_C, charge_Ah"
    {"", "a.csv:0: no header line; " ACCEPTED},
    {"# only\n", "a.csv:1: no header line; " ACCEPTED},
    {"time_s,current_A\n0,1\n", "a.csv:1: the header has no column voltage_V; " ACCEPTED},
    {"time,voltage_V\n0,1\n", "a.csv:1: the header has no column time_s; " ACCEPTED},
    {"time_s,voltage_mV\n0,1\n", "a.csv:1: the header has no column voltage_V; " ACCEPTED},
    {"time_s,voltage_V,time_s\n0,1,1\n",
     "a.csv:1: column time_s stands twice; each name is accepted once"},
#define HEAD "time_s,voltage_V,temp_C\n0,4,9\n"
    {HEAD "1,3.9\n", "a.csv:3: 2 fields; accepted are 3, as in the header"},
    {HEAD "1,3.9,9,8\n", "a.csv:3: 4 fields; accepted are 3, as in the header"},
    {HEAD "#\n\n1,nan,9\n",
     "a.csv:5: voltage_V is \"nan\"; accepted is a decimal number like 3.712"},
    {HEAD "1,inf,9\n", "a.csv:3: voltage_V is \"inf\"; accepted is a decimal number like 3.712"},
    {HEAD "1,1e999,9\n",
     "a.csv:3: voltage_V is \"1e999\"; accepted is a decimal number like 3.712"},
    {HEAD "1,0x10,9\n", "a.csv:3: voltage_V is \"0x10\"; accepted is a decimal number like 3.712"},
    {HEAD "1,,9\n", "a.csv:3: voltage_V is empty; accepted is a decimal number like 3.712"},
    {HEAD "1,3.7 V,9\n",
     "a.csv:3: voltage_V is \"3.7 V\"; accepted is a decimal number like 3.712"},
    {HEAD "1,3.7,\x01\xff\n", "a.csv:3: temp_C is \"??\"; accepted is a decimal number like 3.712"},
    {HEAD "0,3.7,9\n", "a.csv:3: time_s 0 does not rise after 0; accepted is a rising time"},
    {HEAD "1,3.7,9\n0.5,3.7,9\n",
     "a.csv:4: time_s 0.5 does not rise after 1; accepted is a rising time"},
};

/* Opens and reads to the end; the last message. */
static void read_all(const void *data, size_t length, char *message, size_t size) {
    struct logcsv *log = NULL;
    struct logcsv_row row;
    int r = logcsv_new(&log, fd_of(data, length), "a.csv", message, size);

    if (r) {
        assert_int_equal(r, LOGCSV_E_FORMAT);
        assert_null(log);
        return;
    }
    do
        r = logcsv_next(log, &row);
    while (r == 0);
    snprintf(message, size, "%s", logcsv_message(log));
    assert_int_equal(r, message[0] ? LOGCSV_E_FORMAT : LOGCSV_END);
    assert_int_equal(logcsv_next(log, &row), r); /* and stays so */
    logcsv_free(log);
}

static void says_where_and_what(void **state) {
    (void)state;
    char message[512];

    for (size_t i = 0; i < sizeof refusals / sizeof *refusals; i++) {
        message[0] = '\0';
        read_all(refusals[i].text, strlen(refusals[i].text), message, sizeof message);
        assert_string_equal(message, refusals[i].message);
    }
}

static void refuses_what_is_no_text(void **state) {
    (void)state;
    static char zeros[1 << 20];
    char message[512] = "";

    read_all(zeros, sizeof zeros, message, sizeof message);
    assert_string_equal(message,
                        "a.csv:1: the line is longer than 4096 characters; is this a log CSV?");
}

static void a_missing_file_is_an_errno(void **state) {
    (void)state;
    struct logcsv *log = NULL;
    char message[64];

    assert_int_equal(logcsv_open(&log, "/nonexistent/a.csv", message, sizeof message), -ENOENT);
    assert_int_equal(logcsv_open(&log, "/", message, sizeof message), -EISDIR);
    assert_null(log);
}

/* Longer than the reader's window, with lines across its borders. */
static void long_files(void **state) {
    (void)state;
    enum { ROWS = 100000 };
    char *text = malloc(ROWS * 24 + 64);
    size_t n = (size_t)sprintf(text, "time_s,voltage_V\n");
    struct logcsv_row row;
    int rows = 0;

    assert_non_null(text);
    for (int i = 0; i < ROWS; i++)
        n += (size_t)sprintf(text + n, "%d,%d.%03d\n", i, i % 5, i % 997);
    struct logcsv *log = good(text);
    while (logcsv_next(log, &row) == 0) {
        assert_true(row.value[LOGCSV_TIME] == rows);
        assert_true(fabs(row.value[LOGCSV_VOLTAGE] - rows % 5 - rows % 997 / 1000.0) < 1e-12);
        rows++;
    }
    assert_int_equal(rows, ROWS);
    logcsv_free(log);
    free(text);
}

/* A random decimal number, from short and plain to long and odd. */
static void write_number(struct random *random, char *text) {
    int whole = (int)(random_next(random) % 20) + 1, places = (int)(random_next(random) % 20);
    char *p = text;

    if (random_next(random) % 3 == 0)
        *p++ = random_next(random) % 2 ? '-' : '+';
    for (int i = 0; i < whole; i++)
        *p++ = (char)('0' + random_next(random) % 10);
    if (places)
        *p++ = '.';
    for (int i = 0; i < places; i++)
        *p++ = (char)('0' + random_next(random) % 10);
    if (random_next(random) % 8 == 0)
        p += sprintf(p, "e%d", (int)(random_next(random) % 40) - 20);
    *p = '\0';
}

static void numbers_as_strtod_reads_them(void **state) {
    (void)state;
    uint64_t seed = (uint64_t)time(NULL);
    struct random random = random_start(seed, 0);
    char text[64];
    double value;

    print_message("seed %llu\n", (unsigned long long)seed);
    for (int i = 0; i < 200000; i++) {
        write_number(&random, text);
        assert_int_equal(logcsv_number(text, strlen(text), &value), 0);
        if (value != strtod(text, NULL))
            fail_msg("%s: %.17g, strtod has %.17g", text, value, strtod(text, NULL));
        if (signbit(value) != (text[0] == '-'))
            fail_msg("%s: sign", text);
    }
}

static void no_numbers(void **state) {
    (void)state;
    static const char *const texts[] = {"",    "-",     "+",    ".",   "1.",   ".5", "1,5", "--1",
                                        "1e",  "1e+",   "0x1p", "nan", "inf",  "1 ", " 1",  "1e999",
                                        "1_0", "1.2.3", "e5",   "-.5", "1.e5", "١"};
    double value = 7.0;

    for (size_t i = 0; i < sizeof texts / sizeof *texts; i++) {
        assert_int_not_equal(logcsv_number(texts[i], strlen(texts[i]), &value), 0);
        assert_true(value == 7.0);
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(columns_in_any_order),         cmocka_unit_test(line_ends),
        cmocka_unit_test(says_where_and_what),          cmocka_unit_test(refuses_what_is_no_text),
        cmocka_unit_test(a_missing_file_is_an_errno),   cmocka_unit_test(long_files),
        cmocka_unit_test(numbers_as_strtod_reads_them), cmocka_unit_test(no_numbers),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
