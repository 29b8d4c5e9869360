/* Text helpers: the near name for "did you mean", an appending snprintf, UTF-8. */
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

/* By the first byte: how many follow, and the range of the first of them. All others are 80..BF. */
static const struct lead {
    unsigned char first, last, follow, low, high;
} leads[] = {
    {0x00, 0x7f, 0, 0, 0},       {0xc2, 0xdf, 1, 0x80, 0xbf}, {0xe0, 0xe0, 2, 0xa0, 0xbf},
    {0xe1, 0xec, 2, 0x80, 0xbf}, {0xed, 0xed, 2, 0x80, 0x9f}, {0xee, 0xef, 2, 0x80, 0xbf},
    {0xf0, 0xf0, 3, 0x90, 0xbf}, {0xf1, 0xf3, 3, 0x80, 0xbf}, {0xf4, 0xf4, 3, 0x80, 0x8f},
};

/* Bytes of the character at p, 0 = none. */
static size_t character(const unsigned char *p, size_t length) {
    for (size_t k = 0; k < sizeof(leads) / sizeof(leads[0]); k++) {
        const struct lead *lead = &leads[k];
        if (p[0] < lead->first || p[0] > lead->last)
            continue;
        if (lead->follow >= length)
            return 0;
        for (size_t i = 1; i <= lead->follow; i++)
            if (p[i] < (i == 1 ? lead->low : 0x80) || p[i] > (i == 1 ? lead->high : 0xbf))
                return 0;
        return 1U + lead->follow;
    }
    return 0;
}

bool text_is_utf8(const char *text, size_t length) {
    const unsigned char *p = (const unsigned char *)text;

    for (size_t i = 0; i < length;) {
        size_t n = character(p + i, length - i);
        if (n == 0)
            return false;
        i += n;
    }
    return true;
}

int text_cut(const char *text, int most) {
    size_t n = strnlen(text, (size_t)most + 1);

    if (n <= (size_t)most)
        return (int)n;
    n = (size_t)most;
    while (n > 0 && ((unsigned char)text[n] & 0xc0) == 0x80)
        n--;
    return (int)n;
}
