/* A walk over sound JSON that knows strings and depth only. */
#include "client/span.h"

#include <stdbool.h>
#include <string.h>

static bool is_space(char c) {
    return c == ' ' || c == '\t' || c == '\r' || c == '\n';
}

static size_t skip_space(const char *text, size_t length, size_t i) {
    while (i < length && is_space(text[i]))
        i++;
    return i;
}

static size_t skip_string(const char *text, size_t length, size_t i) {
    for (i++; i < length && text[i] != '"'; i++)
        if (text[i] == '\\')
            i++;
    return i < length ? i + 1 : length;
}

static size_t skip_value(const char *text, size_t length, size_t i) {
    int depth = 0;

    while (i < length) {
        char c = text[i];
        if (depth == 0 && (c == ',' || c == '}' || c == ']' || is_space(c)))
            return i;
        if (c == '"') {
            i = skip_string(text, length, i);
            continue;
        }
        if (c == '{' || c == '[')
            depth++;
        else if (c == '}' || c == ']')
            depth--;
        i++;
    }
    return length;
}

const char *span_member(const char *text, size_t length, const char *key, size_t *ret_length) {
    size_t i = skip_space(text, length, 0), n = strlen(key);

    if (i >= length || text[i] != '{')
        return NULL;
    i = skip_space(text, length, i + 1);
    while (i < length && text[i] == '"') {
        size_t begin = i + 1, end = skip_string(text, length, i) - 1;
        bool found = end - begin == n && memcmp(text + begin, key, n) == 0;
        i = skip_space(text, length, end + 1); /* the colon */
        i = skip_space(text, length, i + 1);
        size_t after = skip_value(text, length, i);
        if (found) {
            *ret_length = after - i;
            return text + i;
        }
        i = skip_space(text, length, after);
        if (i >= length || text[i] != ',')
            return NULL;
        i = skip_space(text, length, i + 1);
    }
    return NULL;
}
