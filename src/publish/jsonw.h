/* JSON written into the caller's buffer (RFC 8259): no heap, no locale, byte-stable. The daemon
 * writes its status at every report and must not allocate then; jansson serves for parsing.
 *
 * Keys are given as plain ASCII literals that need no escaping; NULL inside an array. What does not
 * fit sets `overflow` once and for all: nothing more is written, and jsonw_finish says so.
 */
#pragma once

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum { JSONW_DECIMALS_MAX = 6 };

struct jsonw {
    char *buf;
    size_t size, length;
    bool comma; /* the next member needs one before it */
    bool overflow;
};

void jsonw_init(struct jsonw *w, char *buf, size_t size);

/* bracket: '{' or '[' to open, '}' or ']' to close. */
void jsonw_open(struct jsonw *w, const char *key, char bracket);
void jsonw_close(struct jsonw *w, char bracket);

/* NULL is written as null. Quote, backslash and control characters are escaped, each byte that is
 * not part of well-formed UTF-8 becomes U+FFFD. */
void jsonw_text(struct jsonw *w, const char *key, const char *text);
void jsonw_bool(struct jsonw *w, const char *key, bool value);
void jsonw_null(struct jsonw *w, const char *key);
void jsonw_int(struct jsonw *w, const char *key, int64_t value);
void jsonw_count(struct jsonw *w, const char *key, uint64_t value);

/* With 0..JSONW_DECIMALS_MAX decimals, rounded as printf("%.*f") does: the exact binary value to
 * the nearest, ties to even; but a zero never carries a minus. null for NaN, infinities, and where
 * value * 10^decimals reaches 2^52, beyond which a double has no such decimals. */
void jsonw_fixed(struct jsonw *w, const char *key, double value, int decimals);

/* A value that is JSON already. */
void jsonw_raw(struct jsonw *w, const char *key, const char *json, size_t length);

/* Ends the text with a NUL. Returns its length, or 0 after an overflow (buf is then "" if it has
 * room for it). */
size_t jsonw_finish(struct jsonw *w);
