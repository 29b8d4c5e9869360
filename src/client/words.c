/* Text, values and times as people read them. */
#include "client/words.h"

#include "util/units.h"

#include <math.h>
#include <stdio.h>
#include <string.h>
#include <time.h>

enum { WIDE_FROM = 0x1100, ELLIPSIS = 0x2026, NOT_A_CHARACTER = 0x7FFFFFFF };

static size_t columns_of(uint32_t c) {
    return c >= WIDE_FROM && c != ELLIPSIS ? 2 : 1;
}

/* One character of UTF-8 (RFC 3629: shortest form, no surrogates, up to U+10FFFF). Returns its
 * bytes; what is none is one byte and NOT_A_CHARACTER. */
static size_t next_character(const unsigned char *text, size_t length, uint32_t *ret) {
    static const uint32_t least[] = {0, 0, 0x80, 0x800, 0x10000};
    size_t n = text[0] < 0x80   ? 1
               : text[0] < 0xC2 ? 0
               : text[0] < 0xE0 ? 2
               : text[0] < 0xF0 ? 3
                                : 4;

    *ret = NOT_A_CHARACTER;
    if (n == 0 || n > length || text[0] > 0xF4)
        return 1;
    uint32_t c = n == 1 ? text[0] : text[0] & (0x7FU >> n);
    for (size_t i = 1; i < n; i++) {
        if ((text[i] & 0xC0) != 0x80)
            return 1;
        c = c << 6 | (text[i] & 0x3F);
    }
    if (c < least[n] || c > 0x10FFFF || (c >= 0xD800 && c <= 0xDFFF))
        return 1;
    *ret = c;
    return n;
}

/* Controls, the format characters of Unicode 15 that could mislead (categories Cf, Zl, Zp), and
 * what no font is sure to have (surrogates, private use). */
static bool harmful(uint32_t c) {
    static const struct {
        uint32_t first, last;
    } range[] = {
        {0x00, 0x1F},       {0x7F, 0x9F},       {0xAD, 0xAD},
        {0x600, 0x605},     {0x61C, 0x61C},     {0x6DD, 0x6DD},
        {0x70F, 0x70F},     {0x180E, 0x180E},   {0x200B, 0x200F},
        {0x2028, 0x202E},   {0x2060, 0x206F},   {0xD800, 0xF8FF},
        {0xFEFF, 0xFEFF},   {0xFFF0, 0xFFFB},   {0x13430, 0x1343F},
        {0x1BCA0, 0x1BCA3}, {0x1D173, 0x1D17A}, {0xE0000, NOT_A_CHARACTER},
    };

    for (size_t i = 0; i < sizeof(range) / sizeof(range[0]); i++)
        if (c >= range[i].first && c <= range[i].last)
            return true;
    return false;
}

void words_clean(const char *text, size_t length, bool ascii, char *ret, size_t size) {
    size_t out = 0;

    for (size_t i = 0, n; i < length; i += n) {
        uint32_t c;
        n = next_character((const unsigned char *)text + i, length - i, &c);
        bool bad = harmful(c) || (ascii && c >= 0x80);
        if (out + (bad ? 1 : n) >= size)
            break;
        if (bad)
            ret[out++] = '?';
        else
            memcpy(ret + out, text + i, n), out += n;
    }
    ret[out] = '\0';
}

size_t words_fit(const char *text, size_t columns) {
    size_t length = strlen(text), i = 0, used = 0;

    while (i < length) {
        uint32_t c;
        size_t n = next_character((const unsigned char *)text + i, length - i, &c);
        used += columns_of(c);
        if (used > columns)
            break;
        i += n;
    }
    return i;
}

size_t words_columns(const char *text) {
    size_t length = strlen(text), used = 0;

    for (size_t i = 0; i < length;) {
        uint32_t c;
        i += next_character((const unsigned char *)text + i, length - i, &c);
        used += columns_of(c);
    }
    return used;
}

void words_shorten(const char *text, size_t columns, bool unicode, char *ret, size_t size) {
    const char *gap = unicode ? "\u2026" : "..";
    size_t room = columns - words_columns(gap);
    const char *tail = text;

    if (words_columns(text) <= columns) {
        snprintf(ret, size, "%s", text);
        return;
    }
    while (words_columns(tail) > room / 2) {
        uint32_t c;
        tail += next_character((const unsigned char *)tail, strlen(tail), &c);
    }
    snprintf(ret, size, "%.*s%s%s", (int)words_fit(text, room - room / 2), text, gap, tail);
}

char *words_value(double value, const char *unit, int decimals, double milli_below, char *buf,
                  size_t size) {
    bool milli = fabs(value) < milli_below && fabs(value) * 1000 >= 0.5;
    double shown = milli ? value * 1000 : value;
    int d = milli ? 0 : decimals;
    char number[400]; /* the largest double has 309 digits */

    if (isnan(value)) {
        snprintf(buf, size, "-");
        return buf;
    }
    int n = snprintf(number, sizeof(number), "%.*f", d, shown);
    bool minus_nothing = number[0] == '-' && (int)strspn(number + 1, "0.") == n - 1;
    snprintf(buf, size, "%s %s%s", number + minus_nothing, milli ? "m" : "", unit);
    return buf;
}

char *words_share(double share, char *buf, size_t size) {
    return words_value(share * 100, "%", 0, 0, buf, size);
}

char *words_span(double seconds, char *buf, size_t size) {
    static const char *const zeros[] = {" 00 s", " 00", " 0 h"};

    units_duration(seconds >= 600 ? floor(seconds / 60) * 60 : seconds, buf, size);
    size_t n = strlen(buf);
    for (size_t i = 0; i < sizeof(zeros) / sizeof(zeros[0]); i++) {
        size_t z = strlen(zeros[i]);
        if (n > z && strcmp(buf + n - z, zeros[i]) == 0) {
            buf[n - z] = '\0';
            break;
        }
    }
    return buf;
}

char *words_age(double seconds, char *buf, size_t size) {
    if (!(seconds >= 0 && seconds < 10))
        return words_span(seconds, buf, size);
    snprintf(buf, size, "%.1f s", seconds);
    return buf;
}

int64_t words_moment(const char *written) {
    static const char shape[] = "dddd-dd-ddTdd:dd:ddZ";
    struct tm tm = {0};

    for (size_t i = 0; i < sizeof(shape); i++)
        if (shape[i] == 'd' ? !(written[i] >= '0' && written[i] <= '9') : written[i] != shape[i])
            return -1;
    if (sscanf(written, "%4d-%2d-%2dT%2d:%2d:%2dZ", &tm.tm_year, &tm.tm_mon, &tm.tm_mday,
               &tm.tm_hour, &tm.tm_min, &tm.tm_sec) != 6)
        return -1;
    if (tm.tm_year < 2025)
        return -1;
    tm.tm_year -= 1900;
    tm.tm_mon -= 1;
    return (int64_t)timegm(&tm);
}

/* The local time of the moment plus s, to the minute; with the date when that is another day. */
static bool clock_words(int64_t moment, double s, char *buf, size_t size) {
    static const char month[12][4] = {"Jan", "Feb", "Mar", "Apr", "May", "Jun",
                                      "Jul", "Aug", "Sep", "Oct", "Nov", "Dec"};
    time_t now = (time_t)moment, then = (time_t)(moment + (int64_t)floor(s));
    struct tm a, b;

    if (!localtime_r(&now, &a) || !localtime_r(&then, &b))
        return false;
    if (a.tm_year == b.tm_year && a.tm_yday == b.tm_yday)
        snprintf(buf, size, "%02d:%02d", b.tm_hour, b.tm_min);
    else
        snprintf(buf, size, "%d %s %02d:%02d", b.tm_mday, month[b.tm_mon], b.tm_hour, b.tm_min);
    return true;
}

/* Further off than this a time of day tells nothing. */
static const double clock_reach_s = 300 * 86400.0;

static char *when(const char *clock_word, const char *span_word, int64_t moment, double sign,
                  double s, char *buf, size_t size) {
    char text[64];

    *buf = '\0';
    if (isnan(s))
        return buf;
    if (moment >= 0 && s >= 0 && s < clock_reach_s &&
        clock_words(moment, sign * s, text, sizeof(text)))
        snprintf(buf, size, "%s %s", clock_word, text);
    else
        snprintf(buf, size, "%s %s", span_word, words_span(s, (char[64]){0}, 64));
    return buf;
}

char *words_since(int64_t moment, double ago_s, char *buf, size_t size) {
    return when("since", "for", moment, -1, ago_s, buf, size);
}

char *words_about(int64_t moment, double in_s, char *buf, size_t size) {
    return when("about", "in", moment, 1, in_s, buf, size);
}
