/* Log lines: what reaches stderr, and what is handed to the journal when stderr is the journal. */
#include "util/log.h"

#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/uio.h>
#include <unistd.h>

#include <cmocka.h>

enum { CAUGHT = 8192 };

/* Stands before libsystemd's in the link, so that the test sees what the journal would. */
int sd_journal_sendv(const struct iovec *parts, int n);

static struct {
    int calls, result;
    char text[CAUGHT]; /* the fields, one a line */
} journal;

int sd_journal_sendv(const struct iovec *parts, int n) {
    size_t length = 0;

    journal.calls++;
    for (int i = 0; i < n; i++)
        length += (size_t)snprintf(journal.text + length, CAUGHT - length, "%.*s\n",
                                   (int)parts[i].iov_len, (const char *)parts[i].iov_base);
    return journal.result;
}

/* stderr goes into a pipe while a line is logged; JOURNAL_STREAM names that pipe, or is wrong. */
struct catch {
    int saved, ends[2];
};

static void begin(struct catch *c) {
    fflush(stderr);
    assert_int_equal(pipe2(c->ends, O_CLOEXEC | O_NONBLOCK), 0);
    c->saved = dup(STDERR_FILENO);
    assert_true(c->saved >= 0 && dup2(c->ends[1], STDERR_FILENO) >= 0);
    memset(&journal, 0, sizeof(journal));
}

static void end(struct catch *c, char caught[CAUGHT]) {
    assert_true(dup2(c->saved, STDERR_FILENO) >= 0);
    ssize_t n = read(c->ends[0], caught, CAUGHT - 1);
    caught[n > 0 ? n : 0] = '\0';
    close(c->saved);
    close(c->ends[0]);
    close(c->ends[1]);
}

static void name_stream(unsigned long long add, const char *behind) {
    struct stat st;
    char stream[64];

    assert_int_equal(fstat(STDERR_FILENO, &st), 0);
    snprintf(stream, sizeof(stream), "%llu:%llu%s", (unsigned long long)st.st_dev,
             (unsigned long long)st.st_ino + add, behind);
    assert_int_equal(setenv("JOURNAL_STREAM", stream, 1), 0);
}

static int plain(void **state) {
    (void)state;
    unsetenv("JOURNAL_STREAM");
    log_set_level(LOG_L_INFO);
    return 0;
}

static void test_plain_lines(void **state) {
    static const char *const fields[] = {"BRINK_STAGE=edge", NULL};
    struct catch c;
    char caught[CAUGHT];

    (void)state;
    begin(&c);
    log_error("gauge %s vanished", "usb:1209:0001");
    log_fields(LOG_L_INFO, fields, "stage %d", 2);
    end(&c, caught);
    assert_string_equal(caught, "gauge usb:1209:0001 vanished\nstage 2\n");
    assert_int_equal(journal.calls, 0);
}

static void test_level(void **state) {
    struct catch c;
    char caught[CAUGHT];

    (void)state;
    begin(&c);
    log_debug("unheard");
    log_set_level(LOG_L_DEBUG);
    log_debug("heard");
    log_set_level(LOG_L_ERROR);
    log_warning("unheard");
    log_notice("unheard");
    log_error("heard, too");
    end(&c, caught);
    assert_string_equal(caught, "heard\nheard, too\n");
}

/* Text from a gauge may be in a line: it must not begin lines or colour a terminal. */
static void test_control_characters_do_not_reach_the_terminal(void **state) {
    struct catch c;
    char caught[CAUGHT];

    (void)state;
    begin(&c);
    log_info("a\nerror: forged\r\033[31mb\x7f caf\xc3\xa9");
    end(&c, caught);
    assert_string_equal(caught, "a?error: forged??[31mb? caf\xc3\xa9\n");
}

static void test_long_lines_are_cut(void **state) {
    struct catch c;
    char caught[CAUGHT], text[2000];

    (void)state;
    memset(text, 'x', sizeof(text) - 1);
    text[1023] = '\0';
    begin(&c);
    log_info("%s", text);
    end(&c, caught);
    assert_int_equal(strlen(caught), 1024);
    assert_string_equal(caught + 1020, "xxx\n");
    text[1023] = 'x';
    text[1024] = '\0';
    begin(&c);
    log_info("%s", text);
    end(&c, caught);
    assert_int_equal(strlen(caught), 1024);
    assert_string_equal(caught + 1019, "x...\n");
}

static void test_journal_fields(void **state) {
    static const char *const fields[] = {"BRINK_STAGE=edge", "BRINK_CHARGE=0.081", NULL};
    struct catch c;
    char caught[CAUGHT], expected[256];

    (void)state;
    begin(&c);
    name_stream(0, "");
    log_fields(LOG_L_WARNING, fields, "stage %s", "edge");
    end(&c, caught);
    snprintf(expected, sizeof(expected),
             "MESSAGE=stage edge\nPRIORITY=4\nSYSLOG_IDENTIFIER=%s\nBRINK_STAGE=edge\n"
             "BRINK_CHARGE=0.081\n",
             program_invocation_short_name);
    assert_string_equal(journal.text, expected);
    assert_string_equal(caught, ""); /* once is enough */
    assert_int_equal(journal.calls, 1);
}

static void test_no_more_fields_than_fit(void **state) {
    const char *fields[41];
    struct catch c;
    char caught[CAUGHT];
    size_t lines = 0;

    (void)state;
    for (size_t i = 0; i < 40; i++)
        fields[i] = "K=v";
    fields[40] = NULL;
    begin(&c);
    name_stream(0, "");
    log_fields(LOG_L_INFO, fields, "x");
    end(&c, caught);
    for (const char *p = journal.text; (p = strchr(p, '\n')); p++)
        lines++;
    assert_int_equal(lines, 3 + 16);
}

static void test_another_stream_is_not_the_journal(void **state) {
    static const char *const wrong[] = {"", "x", "8", "8:", ":8", "8:x"};
    struct catch c;
    char caught[CAUGHT];

    (void)state;
    begin(&c);
    name_stream(1, "");
    log_info("a");
    name_stream(0, "0x");
    log_info("b");
    for (size_t i = 0; i < sizeof(wrong) / sizeof(wrong[0]); i++) {
        assert_int_equal(setenv("JOURNAL_STREAM", wrong[i], 1), 0);
        log_info("c");
    }
    end(&c, caught);
    assert_string_equal(caught, "a\nb\nc\nc\nc\nc\nc\nc\n");
    assert_int_equal(journal.calls, 0);
}

/* The journal refuses: the line still gets out. */
static void test_journal_that_fails(void **state) {
    struct catch c;
    char caught[CAUGHT];

    (void)state;
    begin(&c);
    name_stream(0, "");
    journal.result = -1;
    log_info("still here");
    end(&c, caught);
    assert_string_equal(caught, "still here\n");
    assert_int_equal(journal.calls, 1);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test_setup(test_plain_lines, plain),
        cmocka_unit_test_setup(test_level, plain),
        cmocka_unit_test_setup(test_control_characters_do_not_reach_the_terminal, plain),
        cmocka_unit_test_setup(test_long_lines_are_cut, plain),
        cmocka_unit_test_setup(test_journal_fields, plain),
        cmocka_unit_test_setup(test_no_more_fields_than_fit, plain),
        cmocka_unit_test_setup(test_another_stream_is_not_the_journal, plain),
        cmocka_unit_test_setup(test_journal_that_fails, plain),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
