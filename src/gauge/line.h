/* The line protocol of a gauge, bytes to frames: brink-gauge(7).
 *
 *   name=value[ name=value...][*hh] NEWLINE
 *
 * Tokens stand apart by spaces, tabs or commas; a carriage return before the newline is tolerated.
 * A name begins with a letter, goes on with letters, digits, '_', '-' or '.', and has at most 15
 * characters. A value is a plain decimal number (units_number). `*hh` is the CRC-8 (crc8.h) of all
 * bytes that stand before the star, in two hexadecimal digits; when it is there it must match. The
 * token `t` is the gauge's own clock in seconds. Blank lines say nothing and are not counted.
 *
 * A line that breaks a rule is refused whole and counted by its kind; the next good line counts.
 * Nothing allocates, nothing is fatal.
 */
#pragma once

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum {
    FRAME_TOKENS_MAX = 24,
    FRAME_NAME_MAX = 16,   /* with the NUL */
    LINE_LENGTH_MAX = 512, /* longest line, without its newline */
    LINE_BUFFER = 4096,
    LINE_EXCERPT = 48,
};

struct frame_token {
    char name[FRAME_NAME_MAX];
    double value; /* finite, as told: neither scaled nor shifted */
};

struct frame {
    size_t n; /* tokens but `t`; may be 0 when the line told only its clock */
    struct frame_token token[FRAME_TOKENS_MAX];
    double clock_s; /* token t, NaN = not told */
};

enum line_fault {
    LINE_F_LONG,      /* more than LINE_LENGTH_MAX bytes without a newline */
    LINE_F_BINARY,    /* NUL, control characters, bytes outside ASCII */
    LINE_F_CHECK,     /* the check is wrong or no two hexadecimal digits */
    LINE_F_TOKEN,     /* something that is no name=value */
    LINE_F_COMMA,     /* a decimal comma: v=3,71 */
    LINE_F_NUMBER,    /* no decimal number, or more than a double holds: nan, inf, 1e999, 0x10 */
    LINE_F_DUPLICATE, /* one name twice: two lines that ran into each other */
    LINE_F_CROWDED,   /* more than FRAME_TOKENS_MAX tokens */
    LINE_F_PARTIAL,   /* a half line at the start or end of a connection: thrown away, not bad */
    LINE_F_COUNT
};

struct line_counts {
    uint64_t lines;     /* good and bad ones, half lines left out */
    uint64_t bad_lines; /* refused */
    uint64_t fault[LINE_F_COUNT];
    enum line_fault last_fault; /* of the last refused line; nothing yet while bad_lines is 0 */
    char last_excerpt[LINE_EXCERPT]; /* its beginning, unprintable bytes as '.' */
};

struct line_decoder {
    char data[LINE_BUFFER];
    size_t head, tail; /* data[head..tail) is not decoded yet */
    size_t scanned;    /* data[head..scanned) holds no newline */
    bool first;        /* no newline seen yet on this connection */
    bool mid_line;     /* the connection may have begun in the middle of a line */
    bool skipping;     /* inside an overlong line */
    struct line_counts counts;
};

void line_init(struct line_decoder *decoder);

/* A connection begins (or ended): bytes in hand are thrown away, counts go on. What comes before
 * the first newline may be half a line: when it does not decode it is counted as LINE_F_PARTIAL
 * and not as bad. mid_line: the sender did not wait for us, as on a serial port; then the half of a
 * line might decode by chance ("ext=1" as "t=1"), so it counts only with a right check. */
void line_restart(struct line_decoder *decoder, bool mid_line);

/* Takes at most n bytes and returns how many: fewer when lines wait for line_next. */
size_t line_push(struct line_decoder *decoder, const void *bytes, size_t n);

/* How many bytes line_push would take now. */
size_t line_room(const struct line_decoder *decoder);

/* 1 and the next frame, or 0: no whole good line is in hand, push more. */
int line_next(struct line_decoder *decoder, struct frame *ret);

/* Decodes one line without its newline. Returns 0, or 1 + enum line_fault; ret is undefined then.
 * ret_checked (may be NULL): the line had a check, and it was right. */
int line_decode(const char *text, size_t length, struct frame *ret, bool *ret_checked);

/* How many characters at the start of text make a token's name; 0 when none can begin there. */
size_t line_name_length(const char *text, size_t length);

/* "duplicate": one word, for logs and metrics. */
const char *line_fault_name(enum line_fault fault);

/* What is wrong and what to do at the gauge: one sentence. */
const char *line_fault_text(enum line_fault fault);
