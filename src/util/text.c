/* Text helpers: the near name for "did you mean", and an appending snprintf. */
#include "util/text.h"

#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <strings.h>

enum { WORD_MAX = 63, NEAR_MAX = 2, PREFIX_LEAST = 2 };

static size_t least_of(size_t a, size_t b, size_t c) {
    size_t ab = a < b ? a : b;
    return ab < c ? ab : c;
}

static char lower(char c) {
    return c >= 'A' && c <= 'Z' ? (char)(c - 'A' + 'a') : c;
}

/* Levenshtein's distance without regard to ASCII case, one row at a time. */
static size_t distance(const char *a, size_t n_a, const char *b, size_t n_b) {
    size_t row[WORD_MAX + 1];

    for (size_t j = 0; j <= n_b; j++)
        row[j] = j;
    for (size_t i = 1; i <= n_a; i++) {
        size_t corner = row[0];
        row[0] = i;
        for (size_t j = 1; j <= n_b; j++) {
            size_t above = row[j];
            size_t swap = corner + (lower(a[i - 1]) != lower(b[j - 1]));
            row[j] = least_of(above + 1, row[j - 1] + 1, swap);
            corner = above;
        }
    }
    return row[n_b];
}

/* Smaller is nearer; NEAR_MAX + 2 and above is not near. In a short word two changes leave nothing
 * of it, so a change must leave at least half. */
static size_t remoteness(const char *word, const char *candidate) {
    size_t n_w = strlen(word), n_c = strlen(candidate), n = n_w < n_c ? n_w : n_c;

    if (n_w <= WORD_MAX && n_c <= WORD_MAX) {
        size_t d = distance(word, n_w, candidate, n_c);
        if (d <= NEAR_MAX && 2 * d <= n_w)
            return d;
    }
    if (n >= PREFIX_LEAST && strncasecmp(word, candidate, n) == 0)
        return NEAR_MAX + 1;
    return NEAR_MAX + 2;
}

const char *text_nearest(const char *word, const char *const *candidates, size_t n) {
    const char *best = NULL;
    size_t best_remoteness = NEAR_MAX + 2;

    for (size_t i = 0; i < n; i++) {
        size_t r = remoteness(word, candidates[i]);
        if (r < best_remoteness) {
            best = candidates[i];
            best_remoteness = r;
        }
    }
    return best;
}

bool text_append(char *text, size_t size, size_t *length, const char *format, ...) {
    va_list args;

    if (*length >= size)
        return false;
    va_start(args, format);
    int n = vsnprintf(text + *length, size - *length, format, args);
    va_end(args);
    if (n < 0) {
        text[*length] = '\0';
        return false;
    }
    if ((size_t)n >= size - *length) {
        *length = size - 1;
        return false;
    }
    *length += (size_t)n;
    return true;
}
