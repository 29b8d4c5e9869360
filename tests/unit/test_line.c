/* The line decoder: rules of brink-gauge(7) one by one, then a property test that spoils good lines
 * in every way a wire can.
 */
#include "gauge/line.h"

#include "util/crc8.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include <cmocka.h>

static struct line_decoder *decoder_new(bool mid_line) {
    struct line_decoder *decoder = malloc(sizeof *decoder);
    assert_non_null(decoder);
    line_init(decoder);
    line_restart(decoder, mid_line);
    return decoder;
}

static void feed(struct line_decoder *decoder, const char *text) {
    assert_int_equal(line_push(decoder, text, strlen(text)), strlen(text));
}

static double value_of(const struct frame *frame, const char *name) {
    for (size_t i = 0; i < frame->n; i++)
        if (strcmp(frame->token[i].name, name) == 0)
            return frame->token[i].value;
    fail_msg("no token %s", name);
    return 0;
}

static void assert_same(double a, double b) {
    assert_memory_equal(&a, &b, sizeof a);
}

static void plain_line(void **state) {
    (void)state;
    struct frame frame;
    static const char text[] = "v=3.712 i=-0.84,c=11,\trail=4.97 , ext=0 t=1234.5\r";
    assert_int_equal(line_decode(text, sizeof text - 1, &frame, NULL), 0);
    assert_int_equal(frame.n, 5);
    assert_same(value_of(&frame, "v"), 3.712);
    assert_same(value_of(&frame, "i"), -0.84);
    assert_same(value_of(&frame, "c"), 11);
    assert_same(value_of(&frame, "rail"), 4.97);
    assert_same(value_of(&frame, "ext"), 0);
    assert_same(frame.clock_s, 1234.5);
    assert_int_equal(line_decode("v=1e-3", 6, &frame, NULL), 0);
    assert_same(value_of(&frame, "v"), 0.001);
    assert_true(isnan(frame.clock_s));
}

/* The check value of CRC-8 with polynomial 0x07 over "123456789" is 0xF4 (System Management Bus
 * Specification 2.0, 2000, section 5.4, gives the polynomial; the value is from memory and agrees
 * with crc8's own test). A line cannot be those digits, so its check is worked out here bit by bit.
 */
static unsigned crc_by_bits(const char *text, size_t length) {
    unsigned crc = 0;
    for (size_t i = 0; i < length; i++)
        for (int bit = 7; bit >= 0; bit--) {
            unsigned top = (crc >> 7 ^ (unsigned char)text[i] >> bit) & 1U;
            crc = (crc << 1 & 0xFFU) ^ (top ? 0x07U : 0);
        }
    return crc;
}

static void check_matches_or_line_is_refused(void **state) {
    (void)state;
    char text[64];
    struct frame frame;
    bool checked;
    assert_int_equal(crc_by_bits("123456789", 9), 0xF4);
    unsigned right = crc_by_bits("v=3.71 ", 7);
    for (unsigned crc = 0; crc < 256; crc++)
        for (int upper = 0; upper < 2; upper++) {
            int n = snprintf(text, sizeof text, upper ? "v=3.71 *%02X \r" : "v=3.71 *%02x", crc);
            int r = line_decode(text, (size_t)n, &frame, &checked);
            assert_int_equal(r, crc == right ? 0 : 1 + LINE_F_CHECK);
            assert_true(crc != right || checked);
        }
    assert_int_equal(line_decode("v=3.71", 6, &frame, &checked), 0);
    assert_false(checked);
}

/* The example of brink-gauge(7), word for word but for where it prints to. */
static int say(char *to, size_t size, unsigned code, unsigned long t_s) {
    char line[48];
    unsigned long mV = code * 5264UL / 1000; /* 1100 mV / 1024 * 4.9 */
    snprintf(line, sizeof line, "v=%lu.%03lu t=%lu", mV / 1000, mV % 1000, t_s);
    unsigned char crc = 0;
    for (const char *c = line; *c; c++)
        for (int bit = (crc ^= (unsigned char)*c, 8); bit > 0; bit--)
            crc = (unsigned char)(crc << 1 ^ (crc & 0x80 ? 0x07 : 0));
    return snprintf(to, size, "%s*%02X\n", line, crc);
}

static void example_of_the_manual(void **state) {
    (void)state;
    static const char shown[] = "v=3.712 i=0.84 c=11 t=1234*ED";
    struct frame frame;
    bool checked = false;
    assert_int_equal(line_decode(shown, sizeof shown - 1, &frame, &checked), 0);
    assert_true(checked);
    for (unsigned code = 0; code < 1024; code++) {
        char text[64];
        int n = say(text, sizeof text, code, 100000UL * code);
        assert_int_equal(line_decode(text, (size_t)n - 1, &frame, &checked), 0);
        assert_true(checked);
        double volts = code * 1.1 / 1024 * 4.9;
        assert_true(fabs(value_of(&frame, "v") - volts) < 0.0015);
        assert_same(frame.clock_s, 100000.0 * code);
    }
}

static const struct {
    const char *text;
    enum line_fault fault;
} bad_lines[] = {
    {"v=3.71 i", LINE_F_TOKEN},
    {"v=3.71 =4", LINE_F_TOKEN},
    {"v = 3.71", LINE_F_TOKEN},
    {"3.71", LINE_F_TOKEN},
    {"v3=3.71 _x=1", LINE_F_TOKEN},
    {"boot ok", LINE_F_TOKEN},
    {"a234567890123456=1", LINE_F_TOKEN},
    {"v=3,71", LINE_F_COMMA},
    {"v=3,71,i=0,5", LINE_F_COMMA},
    {"v=", LINE_F_NUMBER},
    {"v=nan", LINE_F_NUMBER},
    {"v=3.7 c=NaN", LINE_F_NUMBER},
    {"v=inf", LINE_F_NUMBER},
    {"v=1e999", LINE_F_NUMBER},
    {"v=-1e999", LINE_F_NUMBER},
    {"v=0x10", LINE_F_NUMBER},
    {"v=3.71V", LINE_F_NUMBER},
    {"v=3.7.1", LINE_F_NUMBER},
    {"v=--3", LINE_F_NUMBER},
    {"v=3.71i=0.2", LINE_F_NUMBER},
    {"v=3.71 v=3.72", LINE_F_DUPLICATE},
    {"t=1 v=3 t=1", LINE_F_DUPLICATE},
    {"v=3.71*", LINE_F_CHECK},
    {"v=3.71*4", LINE_F_CHECK},
    {"v=3.71*zz", LINE_F_CHECK},
    {"v=3.71*00 i=3", LINE_F_CHECK},
    {"v=3.71\x01", LINE_F_BINARY},
    {"v=3.71\xc2\xb0", LINE_F_BINARY},
    {"v=3.71\ri=2", LINE_F_BINARY},
    {"v=3.71\x7f", LINE_F_BINARY},
};

enum { BAD_LINES = sizeof bad_lines / sizeof bad_lines[0] };

/* Each bad line stands between good ones: counted by its kind, and the next good line counts. */
static void bad_lines_are_counted_by_kind_and_the_next_counts(void **state) {
    (void)state;
    for (size_t i = 0; i < BAD_LINES; i++) {
        struct line_decoder *decoder = decoder_new(true);
        struct frame frame;
        feed(decoder, "\n");
        feed(decoder, bad_lines[i].text);
        feed(decoder, "\r\nv=3.9 i=0.1\n");
        assert_int_equal(line_next(decoder, &frame), 1);
        assert_same(value_of(&frame, "v"), 3.9);
        assert_int_equal(line_next(decoder, &frame), 0);
        const struct line_counts *counts = &decoder->counts;
        if (counts->fault[bad_lines[i].fault] != 1)
            fail_msg("'%s' was not counted as %s", bad_lines[i].text,
                     line_fault_name(bad_lines[i].fault));
        assert_int_equal(counts->lines, 2);
        assert_int_equal(counts->bad_lines, 1);
        assert_int_equal(counts->last_fault, bad_lines[i].fault);
        assert_int_equal(counts->last_excerpt[0], bad_lines[i].text[0]);
        free(decoder);
    }
}

static void nul_is_binary_and_excerpt_stays_printable(void **state) {
    (void)state;
    static const char text[] = "\nv=3.71\0\x1b[31m i=0.1\nv=4\n";
    struct line_decoder *decoder = decoder_new(false);
    struct frame frame;
    assert_int_equal(line_push(decoder, text, sizeof text - 1), sizeof text - 1);
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_same(value_of(&frame, "v"), 4);
    assert_int_equal(decoder->counts.fault[LINE_F_BINARY], 1);
    assert_string_equal(decoder->counts.last_excerpt, "v=3.71..[31m i=0.1");
    free(decoder);
}

static void token_limits(void **state) {
    (void)state;
    char text[LINE_LENGTH_MAX];
    struct frame frame;
    size_t n = 0;
    for (int i = 0; i < FRAME_TOKENS_MAX; i++)
        n += (size_t)snprintf(text + n, sizeof text - n, "token-name.%04d=%d ", i, i);
    assert_int_equal(line_decode(text, n, &frame, NULL), 0);
    assert_int_equal(frame.n, FRAME_TOKENS_MAX);
    assert_same(value_of(&frame, "token-name.0023"), 23);
    n += (size_t)snprintf(text + n, sizeof text - n, "t=5");
    assert_int_equal(line_decode(text, n, &frame, NULL), 0); /* the clock takes no place */
    n += (size_t)snprintf(text + n, sizeof text - n, " one=2");
    assert_int_equal(line_decode(text, n, &frame, NULL), 1 + LINE_F_CROWDED);
}

/* Pads with blanks, which mean nothing, so that only the length can matter. */
static void longest_line_counts_and_one_more_does_not(void **state) {
    (void)state;
    char text[LINE_LENGTH_MAX + 8];
    struct frame frame;
    memset(text, ' ', sizeof text);
    memcpy(text, "v=3", 3);
    memcpy(text + LINE_LENGTH_MAX - 3, "i=1\r\n", 5);
    struct line_decoder *decoder = decoder_new(false);
    line_push(decoder, text, LINE_LENGTH_MAX + 1);
    assert_int_equal(line_next(decoder, &frame), 0); /* newline still on its way */
    line_push(decoder, text + LINE_LENGTH_MAX + 1, 1);
    assert_int_equal(line_next(decoder, &frame), 1);
    memcpy(text + LINE_LENGTH_MAX - 3, " i=1\r\n", 6);
    line_push(decoder, text, LINE_LENGTH_MAX + 3);
    assert_int_equal(line_next(decoder, &frame), 0);
    assert_int_equal(decoder->counts.fault[LINE_F_LONG], 1);
    assert_int_equal(decoder->counts.lines, 2);
    free(decoder);
}

/* A gauge that forgot its newlines, or the wrong baud rate: megabytes of one line. */
static void endless_line_is_one_fault_and_the_next_counts(void **state) {
    (void)state;
    struct line_decoder *decoder = decoder_new(false);
    struct frame frame;
    feed(decoder, "v=3\n");
    assert_int_equal(line_next(decoder, &frame), 1);
    for (int i = 0; i < 100000; i++) {
        feed(decoder, "v=3.71 i=0.84 ");
        assert_int_equal(line_next(decoder, &frame), 0);
    }
    feed(decoder, "tail\nv=3.5\n");
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_same(value_of(&frame, "v"), 3.5);
    assert_int_equal(decoder->counts.fault[LINE_F_LONG], 1);
    assert_int_equal(decoder->counts.lines, 3);
    free(decoder);
}

static void blank_lines_say_nothing(void **state) {
    (void)state;
    struct line_decoder *decoder = decoder_new(false);
    struct frame frame;
    feed(decoder, "\n\r\n   \n, \r\n");
    assert_int_equal(line_next(decoder, &frame), 0);
    assert_int_equal(decoder->counts.lines, 0);
    feed(decoder, "t=7\n");
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_int_equal(frame.n, 0);
    assert_same(frame.clock_s, 7);
    free(decoder);
}

/* Complaint 25 of the field, its part about half lines: what was being said as we came in is no
 * reading and no fault either. */
static void complaint_25_partial_line_discard(void **state) {
    (void)state;
    struct frame frame;
    struct line_decoder *decoder = decoder_new(false);
    feed(decoder, "71 i=0.5\nv=3.7\n");
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_same(value_of(&frame, "v"), 3.7);
    assert_int_equal(decoder->counts.fault[LINE_F_PARTIAL], 1);
    assert_int_equal(decoder->counts.bad_lines, 0);
    assert_int_equal(decoder->counts.lines, 1);
    line_restart(decoder, false);
    feed(decoder, "v=3.8\n"); /* decodes: a line, not a half one */
    assert_int_equal(line_next(decoder, &frame), 1);
    feed(decoder, "v=3.9 i=0."); /* the connection ends within it */
    assert_int_equal(line_next(decoder, &frame), 0);
    line_restart(decoder, false);
    assert_int_equal(decoder->counts.fault[LINE_F_PARTIAL], 2);
    feed(decoder, "2 v=4\n"); /* must not be joined to the half above */
    assert_int_equal(line_next(decoder, &frame), 0);
    assert_int_equal(decoder->counts.fault[LINE_F_PARTIAL], 3);
    free(decoder);
}

/* On a serial port the half of "ext=1" is "t=1": by chance a good line, so it needs a check. */
static void half_line_that_decodes_needs_a_check(void **state) {
    (void)state;
    struct frame frame;
    struct line_decoder *decoder = decoder_new(true);
    feed(decoder, "t=1 v=3.7\nv=3.8\n");
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_same(value_of(&frame, "v"), 3.8);
    assert_int_equal(decoder->counts.fault[LINE_F_PARTIAL], 1);
    line_restart(decoder, true);
    char text[32];
    snprintf(text, sizeof text, "v=3.9*%02x\n", crc_by_bits("v=3.9", 5));
    feed(decoder, text);
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_same(value_of(&frame, "v"), 3.9);
    free(decoder);
}

/* However the bytes are cut up on their way, the same frames come out. */
static void pieces_of_any_size_decode_alike(void **state) {
    (void)state;
    static const char text[] = "v=3.71 t=1\r\nv=3,7\n\nbad\nv=3.72 i=1 t=2\nv=3.73 t=3\n";
    for (size_t piece = 1; piece < sizeof text; piece++) {
        struct line_decoder *decoder = decoder_new(false);
        struct frame frame;
        double clock_s = 0;
        for (size_t at = 0; at < sizeof text - 1;) {
            size_t n = sizeof text - 1 - at < piece ? sizeof text - 1 - at : piece;
            at += line_push(decoder, text + at, n);
            while (line_next(decoder, &frame) == 1)
                assert_same(frame.clock_s, clock_s += 1);
        }
        assert_same(clock_s, 3);
        assert_int_equal(decoder->counts.lines, 5);
        assert_int_equal(decoder->counts.bad_lines, 2);
        free(decoder);
    }
}

static void full_buffer_takes_no_more_than_fits(void **state) {
    (void)state;
    struct line_decoder *decoder = decoder_new(false);
    struct frame frame;
    size_t taken = 0;
    while (line_room(decoder) > 0)
        taken += line_push(decoder, "v=1\n", 4);
    assert_int_equal(taken, LINE_BUFFER);
    assert_int_equal(line_push(decoder, "v=1\n", 4), 0);
    assert_int_equal(line_next(decoder, &frame), 1);
    assert_int_equal(line_push(decoder, "v=1\n", 4), 4);
    size_t n = 1;
    while (line_next(decoder, &frame) == 1)
        n++;
    assert_int_equal(n, LINE_BUFFER / 4 + 1);
    assert_int_equal(decoder->counts.bad_lines, 0);
    free(decoder);
}

/* ---- property: spoiled lines ------------------------------------------------------------------
 */

static unsigned long long random_state;

static unsigned random_below(unsigned n) {
    random_state = random_state * 6364136223846793005ULL + 1442695040888963407ULL;
    return (unsigned)(random_state >> 33) % n;
}

static size_t good_line(char *text, size_t size, unsigned millivolts, bool with_check) {
    int n =
        snprintf(text, size, "v=%u.%03u i=%u.%02u c=-%u t=%u", millivolts / 1000, millivolts % 1000,
                 random_below(9), random_below(100), random_below(30), random_below(100000));
    if (with_check)
        n += snprintf(text + n, size - (size_t)n, "*%02X", crc8(text, (size_t)n));
    return (size_t)n;
}

/* One to three injuries: a bit turned, a byte lost, put in, changed or doubled, the rest cut off.
 * Never a newline. */
static size_t spoil(char *text, size_t length) {
    for (unsigned times = 1 + random_below(3); times > 0 && length > 1; times--) {
        size_t at = random_below((unsigned)length);
        switch (random_below(5)) {
        case 0:
            text[at] = (char)(text[at] ^ 1 << random_below(8));
            break;
        case 1:
            memmove(text + at, text + at + 1, length-- - at - 1);
            break;
        case 2:
            memmove(text + at + 1, text + at, length++ - at);
            text[at] = (char)random_below(256);
            break;
        case 3:
            text[at] = (char)random_below(256);
            break;
        default:
            length = at + 1;
        }
    }
    for (size_t i = 0; i < length; i++)
        if (text[i] == '\n')
            text[i] = ' ';
    return length;
}

static void assert_sound(const struct frame *frame) {
    assert_true(frame->n <= FRAME_TOKENS_MAX);
    for (size_t i = 0; i < frame->n; i++) {
        const char *name = frame->token[i].name;
        size_t length = strnlen(name, FRAME_NAME_MAX);
        assert_true(length > 0 && length < FRAME_NAME_MAX);
        assert_int_equal(line_name_length(name, length), length);
        assert_true(isfinite(frame->token[i].value));
        for (size_t j = 0; j < i; j++)
            assert_string_not_equal(name, frame->token[j].name);
    }
    assert_true(!isinf(frame->clock_s));
}

/* With a check, hardly a spoiled line passes (an 8-bit check lets about 1 in 256 by; a cut before
 * the star leaves an unchecked line, which is why it is left out of that count); and whatever was
 * spoiled, the good line behind it is decoded with its own values. */
static void spoiled_lines_never_hurt_the_next(void **state) {
    (void)state;
    const char *given = getenv("BRINK_TEST_SEED");
    unsigned long long seed = given ? strtoull(given, NULL, 10) : (unsigned long long)time(NULL);
    print_message("seed %llu (BRINK_TEST_SEED)\n", seed);
    random_state = seed;
    struct line_decoder *decoder = decoder_new(true);
    unsigned passed = 0;
    unsigned tried = 0;
    feed(decoder, "\n");
    for (unsigned round = 0; round < 20000; round++) {
        char text[256];
        struct frame frame;
        unsigned millivolts = 2500 + random_below(1700);
        size_t length = good_line(text, sizeof text, millivolts - 1, true);
        length = spoil(text, length);
        bool checked_still = memchr(text, '*', length) != NULL;
        text[length++] = '\n';
        length += good_line(text + length, sizeof text - length, millivolts, round & 1);
        text[length++] = '\n';
        assert_int_equal(line_push(decoder, text, length), length);
        assert_int_equal(line_next(decoder, &frame), 1);
        assert_sound(&frame);
        tried += checked_still;
        struct frame second;
        if (line_next(decoder, &second) == 1) {
            passed += checked_still;
            frame = second;
        }
        assert_sound(&frame);
        assert_true(fabs(value_of(&frame, "v") - millivolts / 1000.0) < 1e-9);
        assert_int_equal(line_next(decoder, &second), 0);
    }
    print_message("%u of %u spoiled lines with a check passed\n", passed, tried);
    assert_true(passed < tried / 50);
    const struct line_counts *counts = &decoder->counts;
    unsigned long long sum = 0;
    for (int i = 0; i < LINE_F_COUNT; i++)
        sum += i == LINE_F_PARTIAL ? 0 : counts->fault[i];
    assert_int_equal(sum, counts->bad_lines);
    free(decoder);
}

static void every_fault_has_its_words(void **state) {
    (void)state;
    for (int i = 0; i < LINE_F_COUNT; i++) {
        assert_non_null(line_fault_name((enum line_fault)i));
        assert_non_null(line_fault_text((enum line_fault)i));
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(plain_line),
        cmocka_unit_test(check_matches_or_line_is_refused),
        cmocka_unit_test(example_of_the_manual),
        cmocka_unit_test(bad_lines_are_counted_by_kind_and_the_next_counts),
        cmocka_unit_test(nul_is_binary_and_excerpt_stays_printable),
        cmocka_unit_test(token_limits),
        cmocka_unit_test(longest_line_counts_and_one_more_does_not),
        cmocka_unit_test(endless_line_is_one_fault_and_the_next_counts),
        cmocka_unit_test(blank_lines_say_nothing),
        cmocka_unit_test(complaint_25_partial_line_discard),
        cmocka_unit_test(half_line_that_decodes_needs_a_check),
        cmocka_unit_test(pieces_of_any_size_decode_alike),
        cmocka_unit_test(full_buffer_takes_no_more_than_fits),
        cmocka_unit_test(spoiled_lines_never_hurt_the_next),
        cmocka_unit_test(every_fault_has_its_words),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
