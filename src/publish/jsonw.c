/* The JSON writer. Numbers are turned into digits here because printf costs a microsecond a number
 * and the status has a hundred of them. */
#include "publish/jsonw.h"

#include <math.h>
#include <string.h>

enum { DIGITS_MAX = 20 }; /* of a uint64_t */

void jsonw_init(struct jsonw *w, char *buf, size_t size) {
    *w = (struct jsonw){.buf = buf, .size = size, .overflow = size == 0};
}

/* Room for n bytes and the closing NUL, or NULL from the first lack of it on. */
static char *reserve(struct jsonw *w, size_t n) {
    if (w->overflow || w->size - w->length <= n) {
        w->overflow = true;
        return NULL;
    }
    w->length += n;
    return w->buf + w->length - n;
}

static void put(struct jsonw *w, const char *text, size_t n) {
    char *at = reserve(w, n);

    if (at)
        memcpy(at, text, n);
}

static void put_key(struct jsonw *w, const char *key) {
    size_t n = key ? strlen(key) : 0;
    char *at = reserve(w, (size_t)w->comma + (key ? n + 3 : 0));

    if (at && w->comma)
        *at++ = ',';
    w->comma = true;
    if (!at || !key)
        return;
    *at++ = '"';
    memcpy(at, key, n);
    memcpy(at + n, "\":", 2);
}

void jsonw_open(struct jsonw *w, const char *key, char bracket) {
    put_key(w, key);
    put(w, &bracket, 1);
    w->comma = false;
}

void jsonw_close(struct jsonw *w, char bracket) {
    put(w, &bracket, 1);
    w->comma = true;
}

/* Length of the well-formed UTF-8 sequence at s, 0 if there is none: table 3-7 of the Unicode
 * standard. The NUL at the end stops every sequence. */
static size_t utf8_length(const unsigned char *s) {
    static const struct {
        unsigned char first, last, low, high; /* lead bytes, range of the second byte */
        size_t n;
    } forms[] = {
        {0x00, 0x7f, 0x00, 0x00, 1}, {0xc2, 0xdf, 0x80, 0xbf, 2}, {0xe0, 0xe0, 0xa0, 0xbf, 3},
        {0xe1, 0xec, 0x80, 0xbf, 3}, {0xed, 0xed, 0x80, 0x9f, 3}, {0xee, 0xef, 0x80, 0xbf, 3},
        {0xf0, 0xf0, 0x90, 0xbf, 4}, {0xf1, 0xf3, 0x80, 0xbf, 4}, {0xf4, 0xf4, 0x80, 0x8f, 4},
    };

    for (size_t i = 0; i < sizeof(forms) / sizeof(forms[0]); i++) {
        if (s[0] < forms[i].first || s[0] > forms[i].last)
            continue;
        if (forms[i].n > 1 && (s[1] < forms[i].low || s[1] > forms[i].high))
            return 0;
        for (size_t k = 2; k < forms[i].n; k++)
            if ((s[k] & 0xc0) != 0x80)
                return 0;
        return forms[i].n;
    }
    return 0;
}

static void put_control(struct jsonw *w, unsigned char c) {
    static const char hex[] = "0123456789abcdef";
    static const char from[] = "\b\t\n\f\r", to[] = "btnfr";
    const char *named = memchr(from, c, sizeof(from) - 1);

    if (named)
        put(w, (char[]){'\\', to[named - from]}, 2);
    else
        put(w, (char[]){'\\', 'u', '0', '0', hex[c >> 4], hex[c & 15]}, 6);
}

static void put_escaped(struct jsonw *w, const char *text) {
    const unsigned char *s = (const unsigned char *)text;

    while (*s && !w->overflow) {
        size_t plain = 0;
        while (s[plain] >= 0x20 && s[plain] < 0x80 && s[plain] != '"' && s[plain] != '\\')
            plain++;
        put(w, (const char *)s, plain);
        s += plain;
        if (*s >= 0x80) {
            size_t n = utf8_length(s);
            put(w, n ? (const char *)s : "\xef\xbf\xbd", n ? n : 3);
            s += n ? n : 1;
        } else if (*s == '"' || *s == '\\') {
            put(w, (char[]){'\\', (char)*s++}, 2);
        } else if (*s) {
            put_control(w, *s++);
        }
    }
}

void jsonw_text(struct jsonw *w, const char *key, const char *text) {
    if (!text) {
        jsonw_null(w, key);
        return;
    }
    put_key(w, key);
    put(w, "\"", 1);
    put_escaped(w, text);
    put(w, "\"", 1);
}

void jsonw_bool(struct jsonw *w, const char *key, bool value) {
    jsonw_raw(w, key, value ? "true" : "false", value ? 4 : 5);
}

void jsonw_null(struct jsonw *w, const char *key) {
    jsonw_raw(w, key, "null", 4);
}

void jsonw_raw(struct jsonw *w, const char *key, const char *json, size_t length) {
    put_key(w, key);
    put(w, json, length);
}

/* Digits of value, at least `least` of them, written backwards from end. Returns their start. */
static char *digits_before(char *end, uint64_t value, int least) {
    for (; value || least > 0; value /= 10, least--)
        *--end = (char)('0' + value % 10);
    return end;
}

static void put_integer(struct jsonw *w, const char *key, bool minus, uint64_t magnitude) {
    char buf[DIGITS_MAX + 1], *end = buf + sizeof(buf);
    char *at = digits_before(end, magnitude, 1);

    if (minus)
        *--at = '-';
    jsonw_raw(w, key, at, (size_t)(end - at));
}

void jsonw_int(struct jsonw *w, const char *key, int64_t value) {
    put_integer(w, key, value < 0, value < 0 ? 0 - (uint64_t)value : (uint64_t)value);
}

void jsonw_count(struct jsonw *w, const char *key, uint64_t value) {
    put_integer(w, key, false, value);
}

/* value * scale to the nearest integer, ties to even, of the exact product: product + error is it
 * without rounding, because fma rounds but once. Good for 0 <= value * scale < 2^52. */
static uint64_t scaled(double value, double scale) {
    double product = value * scale, error = fma(value, scale, -product);
    double whole = floor(product), above_half = (product - whole - 0.5) + error;
    uint64_t n = (uint64_t)whole;

    return n + (above_half > 0 || (above_half == 0 && n % 2 != 0));
}

void jsonw_fixed(struct jsonw *w, const char *key, double value, int decimals) {
    static const double scales[JSONW_DECIMALS_MAX + 1] = {1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6};
    static const double limit = 4503599627370496.0; /* 2^52 */
    int places = decimals < 0 ? 0 : decimals > JSONW_DECIMALS_MAX ? JSONW_DECIMALS_MAX : decimals;
    double scale = scales[places];

    if (!(fabs(value) * scale < limit)) {
        jsonw_null(w, key);
        return;
    }
    char buf[DIGITS_MAX + 2], *end = buf + sizeof(buf), *at = end;
    uint64_t n = scaled(fabs(value), scale), unit = (uint64_t)scale;
    if (places > 0) {
        at = digits_before(at, n % unit, places);
        *--at = '.';
    }
    at = digits_before(at, n / unit, 1);
    if (value < 0 && n > 0)
        *--at = '-';
    jsonw_raw(w, key, at, (size_t)(end - at));
}

size_t jsonw_finish(struct jsonw *w) {
    if (w->size > 0)
        w->buf[w->overflow ? 0 : w->length] = '\0';
    return w->overflow ? 0 : w->length;
}
