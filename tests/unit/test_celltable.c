/* Cell tables: the whole is understood, and each kind of fault is refused in its place. */
#include "decode/celltable.h"

#include "unit/seeded.h"
#include "util/cleanup.h"
#include "util/files.h"

#include <errno.h>
#include <glob.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>
#include <sys/stat.h>

#include <cmocka.h>

enum { MESSAGE_SIZE = 512, TEXT_SIZE = 8192 };

static const char whole[] = "[cell]\n"                        /* 1 */
                            "name = fen-18650\n"              /* 2 */
                            "chemistry = li-ion\n"            /* 3 */
                            "capacity = 2888 mAh\n"           /* 4 */
                            "full = 4.20 V\n"                 /* 5 */
                            "damage = 2.50 V\n"               /* 6 */
                            "possible_low = 1.40 V\n"         /* 7 */
                            "possible_high = 4.45 V\n"        /* 8 */
                            "spread = 12 mV\n"                /* 9 */
                            "source = measured; C/20\n"       /* 10 */
                            "licence = CC BY 4.0\n"           /* 11 */
                            "[curve]\n"                       /* 12 */
                            "charge = 0 5 10 50\n"            /* 13 */
                            "    90 100 %\n"                  /* 14 */
                            "voltage = 2.6 3.2 3.4 3.7 3.7\n" /* 15 */
                            "    4.18 V\n"                    /* 16 */
                            "[resistance]\n"                  /* 17 */
                            "charge = 5 50 95%\n"             /* 18 */
                            "r0 = 40 30 28.5 mohm\n"          /* 19 */
                            "r1 = 0.02\t0.01 0.01 ohm\n"      /* 20 */
                            "r2 = 50 40 30mohm\n"             /* 21 */
                            "tau1 = 12 s\n"                   /* 22 */
                            "tau2 = 4 min\n"                  /* 23 */
                            "temperature = 25 C\n"            /* 24 */
                            "activation = 20 kJ/mol\n";       /* 25 */

static int parse(const char *text, struct cell_table *ret, char *message) {
    memset(message, 0, MESSAGE_SIZE);
    return celltable_parse(text, strlen(text), "t.ini", ret, message, MESSAGE_SIZE);
}

/* The whole table with one line of it replaced ("" takes it away). */
static void replaced(char text[TEXT_SIZE], const char *line, const char *by) {
    const char *at = strstr(whole, line);

    if (!at || !(at == whole || at[-1] == '\n'))
        fail_msg("the table has no line '%s'", line);
    const char *end = strchr(at, '\n') + 1;
    snprintf(text, TEXT_SIZE, "%.*s%s%s%s", (int)(at - whole), whole, by, *by ? "\n" : "", end);
}

static void bad_text(const char *text, const char *const *parts) {
    struct cell_table table, untouched;
    char message[MESSAGE_SIZE];

    memset(&table, 0x5a, sizeof(table));
    memset(&untouched, 0x5a, sizeof(untouched));
    if (parse(text, &table, message) != CELLTABLE_E_REFUSED)
        fail_msg("taken for a good table; it should say '%s'", parts[1]);
    assert_memory_equal(&table, &untouched, sizeof(table));
    for (; *parts; parts++)
        if (!strstr(message, *parts))
            fail_msg("'%s' lacks '%s'", message, *parts);
}

static void bad_line(const char *line, const char *by, const char *const *parts) {
    char text[TEXT_SIZE];

    replaced(text, line, by);
    bad_text(text, parts);
}

#define bad(line, by, ...) bad_line(line, by, (const char *const[]){__VA_ARGS__, NULL})

static struct cell_table good(const char *text) {
    struct cell_table table;
    char message[MESSAGE_SIZE];

    if (parse(text, &table, message) != 0)
        fail_msg("refused: %s", message);
    return table;
}

static void assert_near(double value, double expected) {
    if (!(fabs(value - expected) <= 1e-12 * fabs(expected)))
        fail_msg("%.17g is not %.17g", value, expected);
}

static void test_reads_the_whole_table(void **state) {
    struct cell_table t = good(whole);

    (void)state;
    assert_string_equal(t.name, "fen-18650");
    assert_string_equal(t.chemistry, "li-ion");
    assert_near(t.capacity_Ah, 2.888);
    assert_near(t.full_V, 4.2);
    assert_near(t.damage_V, 2.5);
    assert_near(t.possible_low_V, 1.4);
    assert_near(t.possible_high_V, 4.45);
    assert_near(t.voltage_sd_V, 0.012);
    assert_int_equal(t.ocv.n, 6);
    assert_near(t.ocv.charge[4], 0.9);
    assert_near(t.ocv.voltage_V[5], 4.18);
    assert_near(ocv_voltage(&t.ocv, 0.5), 3.7);
    assert_int_equal(t.n_res, 3);
    assert_near(t.res_charge[2], 0.95);
    assert_near(t.r0_ohm[2], 0.0285);
    assert_near(t.r1_ohm[0], 0.02);
    assert_near(t.r2_ohm[1], 0.04);
    assert_near(t.tau1_s, 12);
    assert_near(t.tau2_s, 240);
    assert_near(t.res_temp_C, 25);
    assert_near(t.arrhenius_J_mol, 20000);
}

static void test_defaults_are_the_cautious_ones(void **state) {
    char text[TEXT_SIZE];

    (void)state;
    replaced(text, "possible_low", "");
    assert_near(good(text).possible_low_V, 1.5);
    replaced(text, "possible_high", "");
    assert_near(good(text).possible_high_V, 4.4);
    replaced(text, "spread", "");
    assert_near(good(text).voltage_sd_V, 0.02);
    replaced(text, "source", "");
    good(text);
    replaced(text, "licence", "");
    good(text);
}

static void test_lacking(void **state) {
    static const char *const needed[] = {"name",   "chemistry", "capacity",    "full",
                                         "damage", "r0",        "r1",          "r2",
                                         "tau1",   "tau2",      "temperature", "activation"};

    (void)state;
    for (size_t i = 0; i < sizeof(needed) / sizeof(needed[0]); i++) {
        char word[64];
        snprintf(word, sizeof(word), "'%s' is missing", needed[i]);
        bad(needed[i], "", i < 5 ? "t.ini:1: " : "t.ini:", word,
            i < 5 ? "[cell] needs it" : "[resistance] needs it");
    }
    bad_text("", (const char *const[]){"t.ini: ", "'name' is missing; [cell] needs it", NULL});
    bad_text("[curve]\n[cell]\n", (const char *const[]){"t.ini:2: ", "'name' is missing", NULL});
    bad("name", "name =", "t.ini:2: ", "name: the value is missing");
    bad("licence", "licence = ; none", "t.ini:11: ", "licence: the value is missing");
}

static void test_unknown_names(void **state) {
    (void)state;
    bad("capacity", "capasity = 2.9 Ah", "t.ini:4: ", "'capasity' is no key of [cell]",
        "did you mean 'capacity'?", "accepted are name, chemistry, capacity, full");
    bad("tau1", "tau3 = 12 s", "t.ini:22: ", "'tau3' is no key of [resistance]",
        "did you mean 'tau1'?");
    bad("tau1", "colour = red",
        "t.ini:22: ", "'colour' is no key of [resistance]; accepted are charge, r0, r1, r2, tau1");
    bad("[curve]", "[curves]", "t.ini:12: ", "section [curves] is not known",
        "did you mean [curve]?", "[cell], [curve] and [resistance] are accepted");
    bad("[curve]", "[pack main]", "t.ini:12: ", "section [pack main] is not known; [cell]");
    /* a key in a section where it does not belong */
    bad("spread", "tau1 = 12 s", "t.ini:9: ", "'tau1' is no key of [cell]");
}

static void test_units(void **state) {
    (void)state;
    bad("capacity", "capacity = 2.888", "t.ini:4: ", "capacity: '2.888' has no unit",
        "the unit Ah or mAh is accepted");
    bad("full", "full = 80 %", "t.ini:5: ", "full: '80 %' has not the unit it needs",
        "the unit V or mV is accepted");
    bad("full", "full = 4,20 V", "t.ini:5: ", "full: '4,20 V' is no decimal number");
    bad("full", "full = nan V", "t.ini:5: ", "full: 'nan V' is no decimal number");
    bad("tau1", "tau1 = 12 C", "t.ini:22: ", "'12 C' has not the unit", "s, ms, min, h or d");
    bad("temperature", "temperature = 25", "t.ini:24: ", "'25' has no unit", "unit C is");
    bad("activation", "activation = 20 kJ", "t.ini:25: ", "'20 kJ' has not the unit",
        "J/mol or kJ/mol");
    bad("r0", "r0 = 40 30 28.5", "t.ini:19: ", "r0: '40' has no unit", "ohm or mohm");
    bad("r0", "r0 = 40 30 28.5 mV", "t.ini:19: ", "r0: '40 mV' has not the unit");
    bad("charge = 5", "charge = 5 50 95", "t.ini:18: ", "charge: '5' has no unit", "unit % is");
}

static void test_ranges(void **state) {
    (void)state;
    bad("full", "full = 4200 V", "t.ini:5: ", "full: '4200 V' is out of range; 1 V to 5 V");
    bad("full", "full = 4.2 mV", "t.ini:5: ", "full: '4.2 mV' is out of range");
    bad("capacity", "capacity = 0 Ah", "t.ini:4: ", "'0 Ah' is out of range; 0.001 Ah to 1000 Ah");
    bad("capacity", "capacity = 2888 Ah", "t.ini:4: ", "'2888 Ah' is out of range");
    bad("spread", "spread = 12 V", "t.ini:9: ", "'12 V' is out of range; 0.0001 V to 0.5 V");
    bad("spread", "spread = -1 mV", "t.ini:9: ", "'-1 mV' is out of range");
    bad("possible_low", "possible_low = 0 V", "t.ini:7: ", "'0 V' is out of range");
    bad("r0", "r0 = 40 0 28.5 mohm", "t.ini:19: ", "r0: '0 mohm' is out of range");
    bad("r0", "r0 = 40 -3 28.5 mohm", "t.ini:19: ", "r0: '-3 mohm' is out of range");
    bad("r1", "r1 = 200 10 10 ohm", "t.ini:20: ", "r1: '200 ohm' is out of range",
        "0.000001 ohm to 100 ohm");
    bad("charge = 5", "charge = 5 50 105 %", "t.ini:18: ", "'105 %' is out of range; 0 % to 100 %");
    bad("    90", "    90 100.5 %", "t.ini:13: ", "'100.5 %' is out of range");
    bad("tau1", "tau1 = 0 s", "t.ini:22: ", "'0 s' is out of range");
    bad("tau2", "tau2 = 40 d", "t.ini:23: ", "'40 d' is out of range");
    bad("temperature", "temperature = 298 C",
        "t.ini:24: ", "'298 C' is out of range; -40 C to 80 C");
    bad("activation", "activation = 20000 kJ/mol", "t.ini:25: ", "out of range",
        "0 J/mol to 150000 J/mol");
}

static void test_lists(void **state) {
    (void)state;
    bad("r0", "r0 = 40 3O 28.5 mohm", "t.ini:19: ", "r0: number 2, '3O', is no decimal number",
        "one unit at the end");
    bad("r0", "r0 = 40, 30, 28.5 mohm", "t.ini:19: ", "number 1, '40,', is no decimal");
    bad("r0", "r0 = 40 mohm 30 mohm 28 mohm", "t.ini:19: ", "number 2, 'mohm', is no decimal");
    bad("r0", "r0 = 40 inf 28 mohm", "t.ini:19: ", "number 2, 'inf', is no decimal");
    bad("r0", "r0 = 40 1e999 28 mohm", "t.ini:19: ", "number 2, '1e999', is no decimal");
    bad("r0", "r0 = mohm", "t.ini:19: ", "r0: 'mohm' has no number");
    bad("r0", "r0 = 40 30 mohm", "t.ini:19: ", "r0 has 2 numbers, but charge in line 18 has 3");
    bad("r2", "r2 = 50 40 30 30 mohm", "t.ini:21: ", "r2 has 4 numbers");
    bad("    4.18", "    3.9 4.18 V",
        "t.ini:15: ", "voltage has 7 numbers, but charge in line 13 has 6");
    bad("r0", "r0 = 1 2 3 4 5 6 7 8 9 10 11 12 13 14 15 16 17 18 19 20 21 22 23 24 25 mohm",
        "t.ini:19: ", "r0: more than 24 numbers");
}

/* "key = first, first + step, ... unit" over lines of 16 numbers. */
static size_t add_list(char *text, size_t size, const char *key, int n, double step,
                       const char *unit) {
    size_t length = (size_t)snprintf(text, size, "%s =", key);

    for (int i = 0; i < n; i++)
        length += (size_t)snprintf(text + length, size - length, "%s%.6f", i % 16 ? " " : "\n  ",
                                   i * step);
    return length + (size_t)snprintf(text + length, size - length, " %s\n", unit);
}

static void long_curve(char text[TEXT_SIZE], int n) {
    const char *curve = strstr(whole, "charge = 0"), *rest = strstr(whole, "[resistance]");
    size_t length = (size_t)snprintf(text, TEXT_SIZE, "%.*s", (int)(curve - whole), whole);

    length += add_list(text + length, TEXT_SIZE - length, "voltage", n, 0.001, "V");
    for (char *p = strstr(text, "voltage ="); (p = strstr(p, "0.")); p++)
        *p = '3';
    length += add_list(text + length, TEXT_SIZE - length, "charge", n, 0.5, "%");
    char *end = strrchr(text, ' '); /* the last point is full */
    while (end[-1] != ' ')
        end--;
    length = (size_t)(end - text);
    snprintf(text + length, TEXT_SIZE - length, "100 %%\n%s", rest);
}

static void test_curve_of_128_points_is_the_longest(void **state) {
    char text[TEXT_SIZE];

    (void)state;
    long_curve(text, 128);
    struct cell_table t = good(text);
    assert_int_equal(t.ocv.n, 128);
    assert_near(t.ocv.voltage_V[127], 3.127);
    assert_near(t.ocv.charge[126], 0.63);
    long_curve(text, 129);
    bad_text(text, (const char *const[]){"t.ini:13: ", "voltage: more than 128 numbers", NULL});
}

static void test_order(void **state) {
    (void)state;
    bad("charge = 0", "charge = 0 10 5 50",
        "t.ini:13: ", "charge: number 3 (5 %) is not above number 2 (10 %)", "the list must rise");
    bad("charge = 0", "charge = 0 5 5 50", "t.ini:13: ", "number 3 (5 %) is not above");
    bad("charge = 5", "charge = 50 5 95 %", "t.ini:18: ", "number 2 (5 %) is not above");
    bad("voltage", "voltage = 2.6 3.2 3.1 3.7 3.7",
        "t.ini:15: ", "voltage: number 3 (3.1 V) is under number 2 (3.2 V)", "never fall");
    bad("    90", "    80 90 %", "t.ini:13: ", "goes from 0 % to 90 %", "from 0 % to 100 %");
    bad("charge = 0", "charge = 1 5 10 50", "t.ini:13: ", "goes from 1 % to 100 %");
    bad("tau2", "tau2 = 12 s", "t.ini:23: ", "tau2 is not above tau1 in line 22");
}

static void test_voltages_against_each_other(void **state) {
    (void)state;
    bad("damage", "damage = 4.3 V", "t.ini:5: ", "full (4.2 V) is not above damage (4.3 V)",
        "must rise in this order");
    bad("possible_low", "possible_low = 2.5 V",
        "t.ini:6: ", "damage (2.5 V) is not above possible_low (2.5 V)");
    bad("possible_high", "possible_high = 4.1 V",
        "t.ini:8: ", "possible_high (4.1 V) is not above full (4.2 V)");
    bad("voltage", "voltage = 1.1 3.2 3.4 3.7 3.7",
        "t.ini:15: ", "the curve leaves what is possible, 1.4 V to 4.45 V");
    bad("    4.18", "    4.5 V", "t.ini:15: ", "the curve leaves what is possible");
}

/* A curve that ends under the damage voltage, or is flat, tells nothing about the charge. */
static void test_useless_curves(void **state) {
    static const char *const lines[] = {"voltage = 2.0 2.1 2.2 2.2 2.2", "voltage = 3 3 3 3 3"};
    static const char *const ends[] = {"2.4 V", "3 V"};

    (void)state;
    for (size_t i = 0; i < 2; i++) {
        char text[TEXT_SIZE], piece[128];
        replaced(text, "voltage", lines[i]);
        char *end = strstr(text, "    4.18 V");
        assert_non_null(end);
        snprintf(piece, sizeof(piece), "    %-6s", ends[i]);
        memcpy(end, piece, 10);
        bad_text(text, (const char *const[]){"t.ini:15: ", "voltage: the curve ends at ", ends[i],
                                             "above damage (2.5 V)", NULL});
    }
}

static void test_long_texts(void **state) {
    (void)state;
    bad("name", "name = 123456789-123456789-123456789-123456789-12345678",
        "t.ini:2: ", "name: '123456789-123456789-123456789-12...' is longer than 47 bytes");
    char text[TEXT_SIZE];
    replaced(text, "name", "name = 123456789-123456789-123456789-123456789-1234567");
    assert_int_equal(strlen(good(text).name), 47);
}

/* What inifile refuses comes through with its message. */
static void test_faults_of_the_file(void **state) {
    (void)state;
    bad("full", "full 4.20 V", "t.ini:5: ", "'full 4.20 V' is neither a section nor a key");
    bad("full", "capacity = 1 Ah", "t.ini:5: ", "'capacity' stands a second time in [cell]",
        "first in line 4");
    bad("full", "full = 4.20 V\x01", "t.ini:5: ", "control character 0x01");
    bad("full", "full = 4.20\xc2 V", "t.ini:5: ", "not UTF-8");
}

static void test_load(void **state) {
    static const char path[] = "/tmp/brink-test-celltable.ini";
    struct cell_table table;
    char message[MESSAGE_SIZE];

    (void)state;
    assert_int_equal(files_replace(path, whole, sizeof(whole) - 1, 0600, false), 0);
    assert_int_equal(celltable_load(path, &table, message, sizeof(message)), 0);
    assert_string_equal(table.name, "fen-18650");
    assert_int_equal(files_replace(path, "[cell]\nx", 8, 0600, false), 0);
    assert_int_equal(celltable_load(path, &table, message, sizeof(message)), CELLTABLE_E_REFUSED);
    assert_non_null(strstr(message, "/tmp/brink-test-celltable.ini:2: "));
    unlink(path);
    assert_int_equal(celltable_load(path, &table, message, sizeof(message)), -ENOENT);
    assert_non_null(strstr(message, "No such file"));
}

/* Two folders, one table of the same name in both: the first counts. */
struct folders {
    char root[32], list[128];
};

static int make_folders(void **state) {
    static struct folders f;
    char path[128];

    snprintf(f.root, sizeof(f.root), "/tmp/brink-cells-XXXXXX");
    assert_non_null(mkdtemp(f.root));
    snprintf(f.list, sizeof(f.list), "%s/none::%s/a:%s/b", f.root, f.root, f.root);
    for (const char *dir = "ab"; *dir; dir++) {
        snprintf(path, sizeof(path), "%s/%c", f.root, *dir);
        assert_int_equal(mkdir(path, 0700), 0);
        snprintf(path, sizeof(path), "%s/%c/fen-18650.ini", f.root, *dir);
        assert_int_equal(files_replace(path, whole, sizeof(whole) - 1, 0600, false), 0);
    }
    snprintf(path, sizeof(path), "%s/b/fen-21700.ini", f.root);
    assert_int_equal(files_replace(path, whole, sizeof(whole) - 1, 0600, false), 0);
    *state = &f;
    return 0;
}

static int remove_folders(void **state) {
    static const char *const names[] = {
        "a/fen-18650.ini", "b/fen-18650.ini", "b/fen-21700.ini", "a", "b", ""};
    const struct folders *f = *state;
    char path[128];

    for (size_t i = 0; i < sizeof(names) / sizeof(names[0]); i++) {
        snprintf(path, sizeof(path), "%s/%s", f->root, names[i]);
        remove(path);
    }
    return 0;
}

static void test_find_by_name(void **state) {
    const struct folders *f = *state;
    char path[PATH_MAX], expected[128], message[MESSAGE_SIZE];

    assert_int_equal(celltable_find(f->list, "fen-18650", path, message, sizeof(message)), 0);
    snprintf(expected, sizeof(expected), "%s/a/fen-18650.ini", f->root);
    assert_string_equal(path, expected);
    assert_int_equal(celltable_find(f->list, "fen-21700", path, message, sizeof(message)), 0);
    snprintf(expected, sizeof(expected), "%s/b/fen-21700.ini", f->root);
    assert_string_equal(path, expected);
}

static void test_find_says_where_and_what_is_near(void **state) {
    const struct folders *f = *state;
    char path[PATH_MAX] = "untouched", message[MESSAGE_SIZE];

    assert_int_equal(celltable_find(f->list, "fen-21770", path, message, sizeof(message)),
                     CELLTABLE_E_UNKNOWN);
    assert_non_null(strstr(message, "there is no cell table 'fen-21770' in "));
    assert_non_null(strstr(message, f->list));
    assert_non_null(strstr(message, "did you mean 'fen-21700'?"));
    assert_int_equal(celltable_find(f->list, "peat", path, message, sizeof(message)),
                     CELLTABLE_E_UNKNOWN);
    assert_null(strstr(message, "did you mean"));
    assert_int_equal(celltable_find("", "", path, message, sizeof(message)), CELLTABLE_E_UNKNOWN);
    assert_string_equal(path, "untouched");
}

static void test_find_by_path(void **state) {
    const struct folders *f = *state;
    char path[PATH_MAX] = "untouched", wanted[128], message[MESSAGE_SIZE], *longer;

    snprintf(wanted, sizeof(wanted), "%s/a/../b/fen-21700.ini", f->root);
    assert_int_equal(celltable_find("", wanted, path, message, sizeof(message)), 0);
    assert_string_equal(path, wanted);
    snprintf(wanted, sizeof(wanted), "%s/a/fen-21700.ini", f->root);
    assert_int_equal(celltable_find(f->list, wanted, path, message, sizeof(message)), -ENOENT);
    assert_non_null(strstr(message, wanted));
    assert_non_null(strstr(message, "No such file"));
    /* a file here, not a name in the folders */
    assert_int_equal(celltable_find(f->list, "fen-21700.ini", path, message, sizeof(message)),
                     -ENOENT);
    longer = malloc(PATH_MAX + 2);
    assert_non_null(longer);
    memset(longer, '/', PATH_MAX + 1);
    longer[PATH_MAX + 1] = '\0';
    assert_int_equal(celltable_find("", longer, path, message, sizeof(message)), -ENAMETOOLONG);
    memset(longer, 'n', PATH_MAX + 1);
    assert_int_equal(celltable_find("/tmp", longer, path, message, sizeof(message)),
                     CELLTABLE_E_UNKNOWN);
    free(longer);
}

/* Every table that is shipped is good, and stands under its own name. */
static void test_shipped_tables(void **state) {
    glob_t found;

    (void)state;
    if (glob("conf/cells/*.ini", 0, NULL, &found) != 0) {
        print_message("skip: no conf/cells below the working folder\n");
        skip();
    }
    for (size_t i = 0; i < found.gl_pathc; i++) {
        struct cell_table table;
        char message[MESSAGE_SIZE], path[128];
        if (celltable_load(found.gl_pathv[i], &table, message, sizeof(message)) != 0)
            fail_msg("%s", message);
        snprintf(path, sizeof(path), "conf/cells/%s.ini", table.name);
        assert_string_equal(path, found.gl_pathv[i]);
    }
    globfree(&found);
}

/* One byte changed anywhere: never a crash, and what is taken still keeps the rules of a table. */
static void test_one_byte_changed(void **state) {
    scoped(seeded_free_p) gsl_rng *random = seeded_new("test_one_byte_changed");

    (void)state;
    for (size_t i = 0; i < 20 * (sizeof(whole) - 1); i++) {
        char text[sizeof(whole)], message[MESSAGE_SIZE];
        struct cell_table table;
        const char *what;
        memcpy(text, whole, sizeof(whole));
        text[i % (sizeof(whole) - 1)] = (char)gsl_rng_uniform_int(random, 256);
        int r = celltable_parse(text, sizeof(whole) - 1, "t.ini", &table, message, sizeof(message));
        if (r == 0)
            assert_int_equal(cell_table_check(&table, &what), 0);
        else
            assert_true(r == CELLTABLE_E_REFUSED && strncmp(message, "t.ini:", 6) == 0);
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_reads_the_whole_table),
        cmocka_unit_test(test_defaults_are_the_cautious_ones),
        cmocka_unit_test(test_lacking),
        cmocka_unit_test(test_unknown_names),
        cmocka_unit_test(test_units),
        cmocka_unit_test(test_ranges),
        cmocka_unit_test(test_lists),
        cmocka_unit_test(test_curve_of_128_points_is_the_longest),
        cmocka_unit_test(test_order),
        cmocka_unit_test(test_voltages_against_each_other),
        cmocka_unit_test(test_useless_curves),
        cmocka_unit_test(test_long_texts),
        cmocka_unit_test(test_faults_of_the_file),
        cmocka_unit_test(test_load),
        cmocka_unit_test_setup_teardown(test_find_by_name, make_folders, remove_folders),
        cmocka_unit_test_setup_teardown(test_find_says_where_and_what_is_near, make_folders,
                                        remove_folders),
        cmocka_unit_test_setup_teardown(test_find_by_path, make_folders, remove_folders),
        cmocka_unit_test(test_shipped_tables),
        cmocka_unit_test(test_one_byte_changed),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
