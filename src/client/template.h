/* FORMAT of `brink line`: text with names in braces, `{{` for a brace.
 *
 * A name alone is written for people, with its unit ({left} = "5 h 40"); with its unit behind it it
 * is a bare number ({left_s} = "20400"). {PACK.NAME} asks a certain pack; without it pack names
 * mean the first one. What is not known is "-".
 */
#pragma once

#include "client/view.h"

enum { TEMPLATE_SIZE = 8192 };

extern const char template_default[];

/* Refuses what no status could fill: unknown names, an open brace. Returns 0 or EX_USAGE. */
int template_check(const char *format, struct trouble *trouble);

/* Fills ret with the line and its newline. Returns 0 or EX_USAGE (no such pack, or too long). */
int template_write(const char *format, const struct view *view, char ret[TEMPLATE_SIZE],
                   struct trouble *trouble);

/* The list of names with a word on each, for `brink line --help`. */
void template_help(char *ret, size_t size);
