/* The line decoder: finds newlines in a fixed buffer and turns each line into a frame, in place and
 * without allocating.
 */
#include "gauge/line.h"

#include "util/crc8.h"
#include "util/real.h"
#include "util/units.h"

#include <math.h>
#include <string.h>

/* line_decode's fault, shifted by one so that 0 stays "good". */
enum { OK = 0, BAD = 1 };

static const struct {
    const char *name;
    const char *text;
} faults[LINE_F_COUNT] = {
    [LINE_F_LONG] = {"long", "the line is longer than 512 bytes; end each line with a newline, "
                             "and check the baud rate"},
    [LINE_F_BINARY] = {"binary", "the line holds bytes that are no text; check the baud rate, the "
                                 "ground wire and the levels"},
    [LINE_F_CHECK] = {"check", "the check behind the star is wrong: bytes were lost or changed, or "
                               "the gauge counts its CRC-8 another way than brink-gauge(7)"},
    [LINE_F_TOKEN] = {"token", "something in the line is no name=value; print only such tokens, "
                               "names of at most 15 letters and digits"},
    [LINE_F_COMMA] = {"comma", "the number has a decimal comma; print it with a point"},
    [LINE_F_NUMBER] = {"number", "a value is no plain decimal number; leave a token out when there "
                                 "is no value for it"},
    [LINE_F_DUPLICATE] = {"duplicate", "one name stands twice: two lines ran into each other, or "
                                       "the gauge prints it twice"},
    [LINE_F_CROWDED] = {"crowded", "the line has more than 24 tokens; print fewer"},
    [LINE_F_PARTIAL] = {"partial", "half a line at the start or end of a connection was thrown "
                                   "away; this is usual"},
};

const char *line_fault_name(enum line_fault fault) {
    return faults[fault].name;
}

const char *line_fault_text(enum line_fault fault) {
    return faults[fault].text;
}

static bool is_digit(char c) {
    return c >= '0' && c <= '9';
}

static bool is_letter(char c) {
    return (c >= 'a' && c <= 'z') || (c >= 'A' && c <= 'Z');
}

static bool is_gap(char c) {
    return c == ' ' || c == ',' || c == '\t';
}

static int hex_value(char c) {
    if (is_digit(c))
        return c - '0';
    char lower = (char)(c | 0x20);
    return lower >= 'a' && lower <= 'f' ? lower - 'a' + 10 : -1;
}

size_t line_name_length(const char *text, size_t length) {
    if (length == 0 || !is_letter(text[0]))
        return 0;
    size_t n = 1;
    while (n < length && (is_letter(text[n]) || is_digit(text[n]) || text[n] == '_' ||
                          text[n] == '-' || text[n] == '.'))
        n++;
    return n;
}

static bool is_text(const char *text, size_t length) {
    for (size_t i = 0; i < length; i++)
        if ((text[i] < ' ' || text[i] > '~') && text[i] != '\t')
            return false;
    return true;
}

/* Splits the check off. Returns false when it is there and not right. */
static bool take_check(const char *text, size_t *length, bool *ret_checked) {
    const char *star = memrchr(text, '*', *length);
    *ret_checked = false;
    if (!star)
        return true;
    size_t stands_before = (size_t)(star - text);
    if (*length - stands_before != 3)
        return false;
    int high = hex_value(star[1]);
    int low = hex_value(star[2]);
    if (high < 0 || low < 0 || crc8(text, stands_before) != (high << 4 | low))
        return false;
    *length = stands_before;
    *ret_checked = true;
    return true;
}

/* "v=3,71" splits at the comma into "v=3" and "71": a digit on both sides of it. */
static bool after_decimal_comma(const char *line, const char *token) {
    return is_digit(*token) && token - line >= 2 && token[-1] == ',' && is_digit(token[-2]);
}

static int add_token(struct frame *frame, const char *name, size_t length, double value) {
    if (length == 1 && *name == 't') {
        if (!isnan(frame->clock_s))
            return BAD + LINE_F_DUPLICATE;
        frame->clock_s = value;
        return OK;
    }
    if (frame->n == FRAME_TOKENS_MAX)
        return BAD + LINE_F_CROWDED;
    struct frame_token *token = &frame->token[frame->n];
    memset(token->name, 0, sizeof token->name);
    memcpy(token->name, name, length);
    for (size_t i = 0; i < frame->n; i++)
        if (memcmp(frame->token[i].name, token->name, sizeof token->name) == 0)
            return BAD + LINE_F_DUPLICATE;
    token->value = value;
    frame->n++;
    return OK;
}

static int take_token(const char *line, const char *token, size_t length, struct frame *frame) {
    size_t name = line_name_length(token, length);
    if (after_decimal_comma(line, token))
        return BAD + LINE_F_COMMA;
    if (name == 0 || name >= FRAME_NAME_MAX || name == length || token[name] != '=')
        return BAD + LINE_F_TOKEN;
    double value;
    if (units_number(token + name + 1, length - name - 1, &value) != 0 || !isfinite(value))
        return BAD + LINE_F_NUMBER;
    return add_token(frame, token, name, value);
}

/* One carriage return, and blanks that the check does not cover. */
static size_t trimmed_length(const char *text, size_t length) {
    if (length > 0 && text[length - 1] == '\r')
        length--;
    while (length > 0 && is_gap(text[length - 1]))
        length--;
    return length;
}

int line_decode(const char *text, size_t length, struct frame *ret, bool *ret_checked) {
    bool checked;
    ret->n = 0;
    ret->clock_s = UNKNOWN;
    length = trimmed_length(text, length);
    if (length > LINE_LENGTH_MAX)
        return BAD + LINE_F_LONG;
    if (!is_text(text, length))
        return BAD + LINE_F_BINARY;
    if (!take_check(text, &length, &checked))
        return BAD + LINE_F_CHECK;
    for (size_t i = 0; i < length;) {
        if (is_gap(text[i])) {
            i++;
            continue;
        }
        size_t end = i + 1;
        while (end < length && !is_gap(text[end]))
            end++;
        int fault = take_token(text, text + i, end - i, ret);
        if (fault != OK)
            return fault;
        i = end;
    }
    if (ret_checked)
        *ret_checked = checked;
    return OK;
}

void line_init(struct line_decoder *decoder) {
    memset(decoder, 0, sizeof *decoder);
    decoder->first = true;
}

void line_restart(struct line_decoder *decoder, bool mid_line) {
    if (decoder->tail > decoder->head)
        decoder->counts.fault[LINE_F_PARTIAL]++;
    decoder->head = decoder->tail = decoder->scanned = 0;
    decoder->skipping = false;
    decoder->first = true;
    decoder->mid_line = mid_line;
}

size_t line_room(const struct line_decoder *decoder) {
    return LINE_BUFFER - (decoder->tail - decoder->head);
}

size_t line_push(struct line_decoder *decoder, const void *bytes, size_t n) {
    if (n > line_room(decoder))
        n = line_room(decoder);
    if (n > LINE_BUFFER - decoder->tail || decoder->head == decoder->tail) {
        memmove(decoder->data, decoder->data + decoder->head, decoder->tail - decoder->head);
        decoder->tail -= decoder->head;
        decoder->scanned -= decoder->head;
        decoder->head = 0;
    }
    memcpy(decoder->data + decoder->tail, bytes, n);
    decoder->tail += n;
    return n;
}

static void count_fault(struct line_counts *counts, enum line_fault fault, const char *text,
                        size_t length) {
    counts->fault[fault]++;
    if (fault == LINE_F_PARTIAL)
        return;
    counts->lines++;
    counts->bad_lines++;
    counts->last_fault = fault;
    size_t n = length < LINE_EXCERPT - 1 ? length : LINE_EXCERPT - 1;
    for (size_t i = 0; i < n; i++)
        counts->last_excerpt[i] = (char)(text[i] >= ' ' && text[i] <= '~' ? text[i] : '.');
    counts->last_excerpt[n] = 0;
}

/* A whole line: true and the frame when it counts. */
static bool take_line(struct line_decoder *decoder, const char *text, size_t length,
                      struct frame *ret) {
    bool first = decoder->first;
    bool checked = false;
    decoder->first = false;
    if (trimmed_length(text, length) == 0)
        return false;
    int fault = line_decode(text, length, ret, &checked);
    if (first && (fault != OK || (decoder->mid_line && !checked)) && fault != BAD + LINE_F_LONG)
        fault = BAD + LINE_F_PARTIAL;
    if (fault != OK) {
        count_fault(&decoder->counts, (enum line_fault)(fault - BAD), text, length);
        return false;
    }
    decoder->counts.lines++;
    return true;
}

/* No newline in hand: waits for more, or gives up a line that has grown too long. */
static void without_newline(struct line_decoder *decoder) {
    size_t length = decoder->tail - decoder->head;
    decoder->scanned = decoder->tail;
    if (length > LINE_LENGTH_MAX + 1 && !decoder->skipping) {
        count_fault(&decoder->counts, LINE_F_LONG, decoder->data + decoder->head, length);
        decoder->skipping = true;
        decoder->first = false;
    }
    if (decoder->skipping)
        decoder->head = decoder->tail = decoder->scanned = 0;
}

int line_next(struct line_decoder *decoder, struct frame *ret) {
    for (;;) {
        const char *end =
            memchr(decoder->data + decoder->scanned, '\n', decoder->tail - decoder->scanned);
        if (!end) {
            without_newline(decoder);
            return 0;
        }
        const char *text = decoder->data + decoder->head;
        size_t length = (size_t)(end - text);
        bool whole = !decoder->skipping;
        decoder->head += length + 1;
        decoder->scanned = decoder->head;
        decoder->skipping = false;
        if (whole && take_line(decoder, text, length, ret))
            return 1;
    }
}
