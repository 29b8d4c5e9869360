/* Small text helpers without locale. */
#pragma once

#include <stdbool.h>
#include <stddef.h>

/* The candidate nearest to word (edit distance at most 2, or a prefix), or NULL: for "did you
 * mean". */
const char *text_nearest(const char *word, const char *const *candidates, size_t n);

/* snprintf that appends: writes at text + *length, never past size, keeps the NUL, and says whether
 * all of it fitted. */
bool text_append(char *text, size_t size, size_t *length, const char *format, ...)
    __attribute__((format(printf, 4, 5)));

/* Whether text is well-formed UTF-8 (The Unicode Standard 15.0, table 3-7; NUL is a character). */
bool text_is_utf8(const char *text, size_t length);

/* Length of text cut to at most most bytes and at no place within a character: for "%.*s". */
int text_cut(const char *text, int most);
