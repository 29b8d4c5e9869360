/* Words for people: text made safe for a terminal, columns, times of day, values with units. No
 * locale: what depends on it (UTF-8 or not, the time zone) is told or read from TZ. */
#pragma once

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* Copies text so that it can stand on a terminal: control characters (C0, C1, DEL), format
 * characters that turn or hide text (Unicode category Cf, line and paragraph separators) and bytes
 * that are not UTF-8 become '?' each. ascii: everything beyond ASCII too. Cuts at a whole
 * character. size >= 1. */
void words_clean(const char *text, size_t length, bool ascii, char *ret, size_t size);

/* The columns that clean text takes on a terminal, at most: characters from U+1100 on count two
 * (UAX #11 has wide ones from there) but for the ellipsis, all before count one. */
size_t words_columns(const char *text);

/* The bytes of the longest beginning of clean text that takes at most so many columns. */
size_t words_fit(const char *text, size_t columns);

/* Clean text in at most so many columns (at least 6): the middle makes way, since names in a row
 * differ at their ends. unicode: one character for the gap, else two full stops. */
void words_shorten(const char *text, size_t columns, bool unicode, char *ret, size_t size);

/* "3.71 V", "81 mV", "350 mW": two decimals, and in thousandths below the given limit. "-" for NaN.
 * Never "-0". All of these return buf. */
char *words_value(double value, const char *unit, int decimals, double milli_below, char *buf,
                  size_t size);

/* "63 %" of a share; whole percent. "-" for NaN. */
char *words_share(double share, char *buf, size_t size);

/* Below ten seconds with one decimal ("0.4 s"), else words_span. */
char *words_age(double seconds, char *buf, size_t size);

/* units_duration as far as it is worth telling: no seconds from ten minutes on, no zeros of a whole
 * span: "1 h", "50 min", "2 min 10 s". */
char *words_span(double seconds, char *buf, size_t size);

/* The moment `written` (RFC 3339, UTC, seconds) as seconds since 1970, or -1 when it is not to be
 * believed: not of that form, or before 2025, which is a board without a clock. */
int64_t words_moment(const char *written);

/* When something began, ago_s before the moment: "since 06:12" today, "since 28 Nov 06:12" before,
 * "for 5 h 40" without a moment. Local time. "" for NaN. */
char *words_since(int64_t moment, double ago_s, char *buf, size_t size);

/* When something comes: "about 18:20", "about 2 Dec 18:20", "in 5 h 40" without a moment. */
char *words_about(int64_t moment, double in_s, char *buf, size_t size);
