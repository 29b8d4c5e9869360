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
