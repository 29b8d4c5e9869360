/* A config file while it is being read: where each key stood, and the problems so far. Between
 * config.c, which reads, and check.c, which looks at what keys mean together. */
#pragma once

#include "daemon/config.h"
#include "daemon/keys.h"

enum { READING_NOT_GIVEN = 0, READING_BAD = -1 };

struct reading {
    const char *file;
    struct config *config;
    struct config_problems *problems;
    int line[KEYS_MAX]; /* > 0 where it stands; or one of the above */
    int pack_line[PACKS_MAX][KEYS_MAX];
    int pack_section[PACKS_MAX]; /* line of [pack NAME] */
    bool table[PACKS_MAX];       /* the pack's cell table could be read */
};

/* Adds "file:line: text", or "file: text" for line 0. */
void reading_problem(struct reading *reading, int line, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* The line of a key, for pack >= 0 that of the pack's; the section's line when it is a default. */
int reading_line(const struct reading *reading, int pack, const char *section, const char *key);

/* False when the key's value could not be read, so that nothing can be said about it. */
bool reading_good(const struct reading *reading, int pack, const char *section, const char *key);

/* " (the default)" when the key was left out, else "". */
const char *reading_default(const struct reading *reading, int pack, const char *section,
                            const char *key);

/* What keys mean together: order of cutoffs, what the cells bear, tokens used twice, and so on. */
void reading_check(struct reading *reading);
