/* The table of config keys, and one value's way between text and struct config. Inside the config
 * only: config.h is what the rest of the daemon sees. */
#pragma once

#include "util/units.h"

#include <stdbool.h>
#include <stddef.h>

enum key_type {
    KEY_NUMBER, /* double, SI; NaN or INFINITY where `word` stands for it */
    KEY_WHOLE,  /* int */
    KEY_CHOICE, /* int: which of `choices` */
    KEY_YES,    /* bool */
    KEY_NAME,   /* char[]: letters, digits, _ - . */
    KEY_TOKEN,  /* char[]: a token of the gauge's line; may be left out: "" */
    KEY_PATH,   /* char[]: an absolute path */
    KEY_TEXT,   /* char[]: anything but nothing */
};

struct key {
    const char *section; /* "pack" stands for every [pack NAME] */
    const char *name;
    enum key_type type;
    enum unit unit;
    double least, most;
    const char *word; /* accepted instead of a number */
    double word_value;
    const char *const *choices; /* NULL-ended */
    const char *fallback;       /* NULL = required, "" = may be left out */
    size_t offset, size;        /* in struct config, or in struct config_pack */
    const char *help;
    const char *why; /* why the range ends where it does; may be NULL */
};

enum { KEYS_MAX = 64, KEY_VALUE_MAX = 256 };

extern const struct key keys[];
extern const size_t n_keys;

/* The key of that name in that section, or NULL. */
const struct key *key_find(const char *section, const char *name);

/* Lays text over base (the struct its offset speaks of). True, or false and ret_problem says what
 * is wrong and what is accepted; base is not touched then. */
bool key_read(const struct key *key, const char *text, void *base, char *ret_problem, size_t size);

/* The value as key_read takes it, "" when there is none. Returns buf. */
char *key_write(const struct key *key, const void *base, char *buf, size_t size);

/* "3 to 1000", "0.5 V to 10 V, or unlimited": for messages and --effective. Returns buf. */
char *key_accepted(const struct key *key, char *buf, size_t size);
