/* Command line options from a table: long names, values with their units as in brink.conf. */
#pragma once

#include "util/units.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum { ARG_LIST_MAX = 8, ARG_TEXTS_MAX = 7 };

enum arg_kind {
    ARG_FLAG,    /* bool */
    ARG_TEXT,    /* const char *, into argv */
    ARG_VALUE,   /* double in SI, range least..most */
    ARG_LIST,    /* struct arg_list: may be given several times */
    ARG_TEXTS,   /* struct arg_texts: may be given several times */
    ARG_INTEGER, /* int64_t, range least..most */
};

struct arg_list {
    size_t n;
    double value[ARG_LIST_MAX];
};

struct arg_texts {
    size_t n;
    const char *text[ARG_TEXTS_MAX]; /* into argv */
};

struct arg_spec {
    const char *name; /* without the dashes */
    enum arg_kind kind;
    enum unit unit; /* of values and lists */
    double least, most;
    size_t offset;    /* of the member in the caller's struct */
    const char *help; /* one line; begins with what stands in place of the value, if one does */
};

/* Fills the caller's struct, which holds the defaults. One bare argument is taken as *ret_operand
 * when that is not NULL, else refused. 0, or EX_USAGE after saying on standard error what is wrong.
 */
int args_parse(const char *command, const struct arg_spec *specs, size_t n, int argc, char **argv,
               void *ret, const char **ret_operand);

/* The table as help lines on standard output. */
void args_help(const struct arg_spec *specs, size_t n);
