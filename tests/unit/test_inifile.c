/* INI files: what is understood, and each kind of fault with the words it is refused in. */
#include "decode/inifile.h"

#include "unit/seeded.h"
#include "util/cleanup.h"
#include "util/files.h"

#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

enum { MESSAGE_SIZE = 512 };

/* text without its NUL, in a block of its own size, so that a sanitizer sees every step past it. */
static int parse(struct inifile **ret, const char *text, size_t length, char *message) {
    scoped(free_p) char *exact = malloc(length ? length : 1);

    assert_non_null(exact);
    memcpy(exact, text, length);
    memset(message, 0, MESSAGE_SIZE);
    return inifile_parse(ret, exact, length, "t.ini", message, MESSAGE_SIZE);
}

static struct inifile *good(const char *text) {
    struct inifile *ini = NULL;
    char message[MESSAGE_SIZE];
    int r = parse(&ini, text, strlen(text), message);

    if (r != 0)
        fail_msg("refused: %s", message);
    return ini;
}

static void bad_bytes(const char *text, size_t length, const char *const *parts) {
    struct inifile *ini = NULL;
    char message[MESSAGE_SIZE];

    assert_int_equal(parse(&ini, text, length, message), INIFILE_E_SYNTAX);
    assert_null(ini);
    for (; *parts; parts++)
        if (!strstr(message, *parts))
            fail_msg("'%s' lacks '%s'", message, *parts);
}

#define bad(text, ...) bad_bytes(text, strlen(text), (const char *const[]){__VA_ARGS__, NULL})

static void assert_entry(const struct inifile *ini, size_t i, const char *section, const char *key,
                         const char *value, int line) {
    const struct inifile_entry *e = inifile_entry(ini, i);

    assert_non_null(e);
    assert_string_equal(e->section, section);
    assert_string_equal(e->key, key);
    assert_string_equal(e->value, value);
    assert_int_equal(e->line, line);
}

static void test_reads_sections_keys_lines(void **state) {
    (void)state;
    scoped(inifile_free_p) struct inifile *ini = good("\xef\xbb\xbf# fen loggers\n"
                                                      "[unit]\r\n"
                                                      "name = heron ; by the sluice\n"
                                                      "\n"
                                                      "empty =\n"
                                                      "  ; indented comment\n"
                                                      "[ pack main ] ; the first\n"
                                                      "device=usb:1209:0001=x\n"
                                                      "[bare]");
    assert_entry(ini, 0, "unit", "name", "heron", 3);
    assert_entry(ini, 1, "unit", "empty", "", 5);
    assert_entry(ini, 2, "pack main", "device", "usb:1209:0001=x", 8);
    assert_null(inifile_entry(ini, 3));
    assert_string_equal(inifile_section(ini, 1)->name, "pack main");
    assert_string_equal(inifile_section(ini, 2)->name, "bare");
    assert_int_equal(inifile_section(ini, 2)->line, 9);
    assert_null(inifile_section(ini, 3));
    assert_ptr_equal(inifile_find(ini, "unit", "name"), inifile_entry(ini, 0));
    assert_null(inifile_find(ini, "unit", "device"));
    assert_string_equal(inifile_name(ini), "t.ini");
}

static void test_joins_indented_lines(void **state) {
    (void)state;
    scoped(inifile_free_p) struct inifile *ini = good("[curve]\n"
                                                      "charge =\n"
                                                      "   0 1 2 ; flat here\n"
                                                      "\t# between\n"
                                                      "\n"
                                                      "\t5 10\n"
                                                      "voltage = 2.5\n"
                                                      " 4.2 V\n"
                                                      "last = x");
    assert_entry(ini, 0, "curve", "charge", "0 1 2 5 10", 2);
    assert_entry(ini, 1, "curve", "voltage", "2.5 4.2 V", 7);
    assert_entry(ini, 2, "curve", "last", "x", 9);
}

static void test_accepts_nothing_at_all(void **state) {
    (void)state;
    scoped(inifile_free_p) struct inifile *ini = good("");
    assert_null(inifile_section(ini, 0));
    assert_null(inifile_entry(ini, 0));
}

/* inih keeps 49 bytes of a section's name; two long names must not become one. */
static void test_keeps_long_names_whole(void **state) {
    (void)state;
    scoped(inifile_free_p) struct inifile *ini =
        good("[aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa1]\nk=1\n"
             "[aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa2]\nk=2\n");
    assert_string_not_equal(inifile_entry(ini, 0)->section, inifile_entry(ini, 1)->section);
    assert_int_equal(strlen(inifile_entry(ini, 1)->section), 57);
}

static void test_refuses_lines_that_are_nothing(void **state) {
    (void)state;
    bad("[a]\nseries 1\n", "t.ini:2: ", "'series 1' is neither a section nor a key", "KEY = VALUE");
    bad("[a]\nseries: 1\n", "t.ini:2: ", "neither a section nor a key");
    bad("[a]\n\n= 1\n", "t.ini:3: ", "the key before '=' is missing");
    bad("[a]\nmy key = 1\n", "t.ini:2: ", "'my key' is no key", "letters, digits");
    bad("k = 1\n[a]\n", "t.ini:1: ", "before the first section", "[NAME]");
    bad("[a]\nk ; = 1\n", "t.ini:2: ", "'k' is neither");
}

static void test_refuses_broken_sections(void **state) {
    (void)state;
    bad("# x\n[a\nk = 1\n", "t.ini:2: ", "'[a' is no section", "[NAME]");
    bad("[a] k = 1\n", "t.ini:1: ", "'[a] k = 1' is no section");
    bad("[a]]\n", "t.ini:1: ", "is no section");
    bad("[  ]\n", "t.ini:1: ", "the section has no name");
}

/* Merging the two would hide which of them counts. */
static void test_refuses_duplicates(void **state) {
    (void)state;
    bad("[a]\nk = 1\nl = 2\nk = 3\n", "t.ini:4: ", "'k' stands a second time in [a]",
        "first in line 2");
    bad("[a]\nk = 1\n[b]\nk = 2\n[a]\n", "t.ini:5: ", "section [a] stands here a second time",
        "first in line 1");
    scoped(inifile_free_p) struct inifile *ini = good("[a]\nk = 1\n[b]\nk = 2\n");
    assert_entry(ini, 1, "b", "k", "2", 4);
}

/* inih would make `series = 1` a part of the value of `cells`. */
static void test_refuses_keys_lost_by_indenting(void **state) {
    (void)state;
    bad("[pack main]\ncells = nca-18650\n  series = 1\n", "t.ini:3: ", "'series = 1' is indented",
        "start of the line");
    bad("[a]\nk = 1\n [b]\n", "t.ini:3: ", "'[b]' is indented");
    bad("[a]\n  1 2 3\n", "t.ini:2: ", "'1 2 3' is indented", "none stands above it");
    bad("[a]\nk = 1\n[b]\n 2\n", "t.ini:4: ", "none stands above it in this section");
}

static void test_refuses_what_is_no_text(void **state) {
    static const char nul[] = "[a]\nk = 1\0002\n";

    (void)state;
    bad_bytes(nul, sizeof(nul) - 1, (const char *const[]){"t.ini:2: ", "byte 6 is NUL", NULL});
    bad("[a]\nk = \033[31m\n", "t.ini:2: ", "byte 5", "control character 0x1b");
    bad("[a]\rk = 1\n", "t.ini:1: ", "control character 0x0d");
    bad("[a]\nk = caf\xe9\n", "t.ini:2: ", "not UTF-8");
    bad("[a]\nk = \xc0\xaf\n", "t.ini:2: ", "not UTF-8");
    bad("\xff\xfe[\n", "t.ini:1: ", "not UTF-8");
    scoped(inifile_free_p) struct inifile *ini = good("[a]\nk = caf\xc3\xa9\n");
    assert_entry(ini, 0, "a", "k", "caf\xc3\xa9", 2);
}

static void test_line_of_199_bytes_is_the_longest(void **state) {
    char text[256] = "[a]\nk = ";

    (void)state;
    memset(text + 8, 'x', 195);
    scoped(inifile_free_p) struct inifile *ini = good(text);
    assert_int_equal(strlen(inifile_entry(ini, 0)->value), 195);
    text[203] = 'x';
    bad(text, "t.ini:2: ", "the line has 200 bytes", "at most 199", "indented line");
    /* a long comment is no better: it would be read as a comment and a line */
    text[4] = '#';
    bad(text, "t.ini:2: ", "the line has 200 bytes");
}

static void test_quotes_are_cut_between_characters(void **state) {
    (void)state;
    bad("[a]\nxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx\xc3\xa9 and more\n",
        "'xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx' is neither");
}

static void test_refuses_too_many(void **state) {
    enum { SIZE = 16384 };
    scoped(free_p) char *text = calloc(1, SIZE);
    size_t n = 0;

    (void)state;
    assert_non_null(text);
    for (int i = 0; i <= INIFILE_SECTIONS_MAX; i++)
        n += (size_t)snprintf(text + n, SIZE - n, "[s%d]\n", i);
    bad(text, "t.ini:65: ", "more than 64 sections");
    n = (size_t)snprintf(text, SIZE, "[a]\n");
    for (int i = 0; i <= INIFILE_ENTRIES_MAX; i++)
        n += (size_t)snprintf(text + n, SIZE - n, "k%d=\n", i);
    bad(text, "t.ini:514: ", "more than 512 keys");
    scoped(free_p) char *long_text = malloc(INIFILE_BYTES_MAX + 1);
    assert_non_null(long_text);
    memset(long_text, '\n', INIFILE_BYTES_MAX + 1);
    bad_bytes(long_text, INIFILE_BYTES_MAX + 1,
              (const char *const[]){"t.ini: ", "longer than 64 KiB", NULL});
}

static void test_first_fault_is_the_one_told(void **state) {
    (void)state;
    bad("[a]\nnothing\n[b\nk = \xff\n", "t.ini:2: ");
    bad("[a]\nk = 1\nk = 2\nnothing\n", "t.ini:3: ");
}

static void test_refuse_says_file_and_line(void **state) {
    char message[64];
    scoped(inifile_free_p) struct inifile *ini = good("[a]\nk = 1\n");

    (void)state;
    assert_int_equal(inifile_refuse(ini, 2, message, sizeof(message), "%s is wrong", "k"),
                     INIFILE_E_SYNTAX);
    assert_string_equal(message, "t.ini:2: k is wrong");
    inifile_refuse(ini, 0, message, sizeof(message), "no pack");
    assert_string_equal(message, "t.ini: no pack");
    inifile_refuse(ini, 2, message, 12, "cut");
    assert_string_equal(message, "t.ini:2: cu");
}

static void test_load(void **state) {
    static const char path[] = "/tmp/brink-test-inifile.ini";
    struct inifile *none = NULL;
    char message[MESSAGE_SIZE];

    (void)state;
    assert_int_equal(files_replace(path, "[a]\nk=1", 7, 0600, false), 0);
    scoped(inifile_free_p) struct inifile *ini = NULL;
    assert_int_equal(inifile_load(&ini, path, message, sizeof(message)), 0);
    unlink(path);
    assert_entry(ini, 0, "a", "k", "1", 2);
    assert_string_equal(inifile_name(ini), path);
    assert_int_equal(inifile_load(&none, path, message, sizeof(message)), -ENOENT);
    assert_string_equal(message,
                        "/tmp/brink-test-inifile.ini: cannot be read: No such file or directory");
    assert_int_equal(inifile_load(&none, "/tmp", message, sizeof(message)), -EISDIR);
    assert_non_null(strstr(message, "/tmp: cannot be read: Is a directory"));
    assert_null(none);
}

/* Any bytes at all: never a crash, and always a message when refused. */
static void test_rubbish(void **state) {
    static const char alphabet[] = "[]=;:# \t\n\r\nak1\"\xc3\xa9";
    scoped(seeded_free_p) gsl_rng *random = seeded_new("test_rubbish");

    (void)state;
    for (int round = 0; round < 20000; round++) {
        char text[64], message[MESSAGE_SIZE];
        scoped(inifile_free_p) struct inifile *ini = NULL;
        size_t n = 0;
        while (n < sizeof(text)) {
            text[n++] = alphabet[gsl_rng_uniform_int(random, sizeof(alphabet) - 1)];
        }
        int r = parse(&ini, text, n, message);
        assert_true(r == 0 ? ini != NULL
                           : r == INIFILE_E_SYNTAX && strncmp(message, "t.ini:", 6) == 0);
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_reads_sections_keys_lines),
        cmocka_unit_test(test_joins_indented_lines),
        cmocka_unit_test(test_accepts_nothing_at_all),
        cmocka_unit_test(test_keeps_long_names_whole),
        cmocka_unit_test(test_refuses_lines_that_are_nothing),
        cmocka_unit_test(test_refuses_broken_sections),
        cmocka_unit_test(test_refuses_duplicates),
        cmocka_unit_test(test_refuses_keys_lost_by_indenting),
        cmocka_unit_test(test_refuses_what_is_no_text),
        cmocka_unit_test(test_line_of_199_bytes_is_the_longest),
        cmocka_unit_test(test_quotes_are_cut_between_characters),
        cmocka_unit_test(test_refuses_too_many),
        cmocka_unit_test(test_first_fault_is_the_one_told),
        cmocka_unit_test(test_refuse_says_file_and_line),
        cmocka_unit_test(test_load),
        cmocka_unit_test(test_rubbish),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
