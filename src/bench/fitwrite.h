/* What a fit has to say: in words, and as the file of brink-cells(5). */
#pragma once

#include "bench/fit.h"

#include <stdio.h>

/* One line each: what was fitted, how far each log is off, and what the logs could not tell. prefix
 * stands before every line. */
void fitwrite_words(const struct fit *fit, FILE *out, const char *prefix);

/* The cell table with the words as comments. source, licence: for people, or NULL. */
void fitwrite_table(const struct fit *fit, const char *source, const char *licence, FILE *out);

/* A list or text as a value that goes on on indented lines of at most 96 characters. */
void fitwrite_value(FILE *out, const char *key, const char *words);
