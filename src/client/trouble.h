/* What went wrong, for the person who asked: the words and the exit code of sysexits.h. One is
 * filled where the fault is found and told in main.c. */
#pragma once

enum { TROUBLE_TEXT = 2048 };

struct trouble {
    int code; /* EX_USAGE, EX_DATAERR, ...; 0 = none */
    char text[TROUBLE_TEXT];
};

/* Fills trouble. */
void trouble_fill(struct trouble *trouble, int code, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* Fills trouble and is code, a constant other than 0: for `return trouble_set(...)`. */
#define trouble_set(trouble, code, ...) (trouble_fill(trouble, code, __VA_ARGS__), (code))
