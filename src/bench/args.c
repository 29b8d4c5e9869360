/* Table-driven command line: getopt_long cuts it up, the table says what each value may be. */
#include "bench/args.h"

#include "bench/bench.h"
#include "util/text.h"

#include <getopt.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <sysexits.h>

enum { SPECS_MAX = 48 };

static int refuse_unknown(const char *command, const struct arg_spec *specs, size_t n,
                          const char *word) {
    const char *names[SPECS_MAX], *near;

    for (size_t i = 0; i < n; i++)
        names[i] = specs[i].name;
    near = text_nearest(word + strspn(word, "-"), names, n);
    if (near)
        return bench_fail(EX_USAGE, command, "no option \"%s\"; did you mean --%s?", word, near);
    return bench_fail(EX_USAGE, command, "no option \"%s\"; brink-bench %s --help lists them", word,
                      command);
}

static int refuse_range(const char *command, const struct arg_spec *spec, const char *text) {
    char least[32], most[32];

    units_format(spec->least, spec->unit, least, sizeof least);
    units_format(spec->most, spec->unit, most, sizeof most);
    return bench_fail(EX_USAGE, command, "--%s \"%s\" is out of range; accepted is %s to %s",
                      spec->name, text, least, most);
}

static int take_number(const char *command, const struct arg_spec *spec, const char *text,
                       double *ret) {
    double value;

    switch (units_parse(text, spec->unit, &value)) {
    case 0:
        break;
    case UNITS_E_MISSING:
        return bench_fail(
            EX_USAGE, command, "--%s \"%s\" lacks its unit; accepted are %s, as in \"%s %.3s\"",
            spec->name, text, units_accepted(spec->unit), text, units_accepted(spec->unit));
    case UNITS_E_UNIT:
        return bench_fail(EX_USAGE, command, "--%s \"%s\" has a wrong unit; accepted is %s",
                          spec->name, text,
                          spec->unit == UNIT_NONE ? "a bare number" : units_accepted(spec->unit));
    default:
        return bench_fail(
            EX_USAGE, command, "--%s \"%s\" is no decimal number; accepted is a number and %s",
            spec->name, text, spec->unit == UNIT_NONE ? "no unit" : units_accepted(spec->unit));
    }
    if (!(value >= spec->least && value <= spec->most))
        return refuse_range(command, spec, text);
    *ret = value;
    return 0;
}

static int take_list(const char *command, const struct arg_spec *spec, const char *text,
                     struct arg_list *list) {
    int r;

    if (list->n == ARG_LIST_MAX)
        return bench_fail(EX_USAGE, command, "--%s stands more than %d times", spec->name,
                          ARG_LIST_MAX);
    r = take_number(command, spec, text, &list->value[list->n]);
    if (r == 0)
        list->n++;
    return r;
}

static int take_text(const char *command, const struct arg_spec *spec, const char *text,
                     struct arg_texts *texts) {
    if (texts->n == ARG_TEXTS_MAX)
        return bench_fail(EX_USAGE, command, "--%s stands more than %d times", spec->name,
                          ARG_TEXTS_MAX);
    texts->text[texts->n++] = text;
    return 0;
}

static int take_integer(const char *command, const struct arg_spec *spec, const char *text,
                        int64_t *ret) {
    double value = 0.0;
    int r = take_number(command, spec, text, &value);

    if (r)
        return r;
    if (value != floor(value))
        return bench_fail(EX_USAGE, command, "--%s \"%s\" is no whole number", spec->name, text);
    *ret = (int64_t)value;
    return 0;
}

static int take(const char *command, const struct arg_spec *spec, const char *text, void *ret) {
    void *member = (char *)ret + spec->offset;

    switch (spec->kind) {
    case ARG_FLAG:
        *(bool *)member = true;
        return 0;
    case ARG_TEXT:
        *(const char **)member = text;
        return 0;
    case ARG_VALUE:
        return take_number(command, spec, text, member);
    case ARG_LIST:
        return take_list(command, spec, text, member);
    case ARG_TEXTS:
        return take_text(command, spec, text, member);
    case ARG_INTEGER:
        return take_integer(command, spec, text, member);
    }
    return EX_USAGE;
}

int args_parse(const char *command, const struct arg_spec *specs, size_t n, int argc, char **argv,
               void *ret, const char **ret_operand) {
    struct option longs[SPECS_MAX + 1] = {0};
    int r, at;

    for (size_t i = 0; i < n && i < SPECS_MAX; i++)
        longs[i] = (struct option){
            specs[i].name, specs[i].kind == ARG_FLAG ? no_argument : required_argument, NULL, 0};
    optind = 0; /* glibc: start afresh */
    for (;;) {
        const char *word = argv[optind ? optind : 1];

        r = getopt_long(argc, argv, "-:", longs, &at);
        if (r == -1)
            return 0;
        if (r == 1 && ret_operand && !*ret_operand)
            *ret_operand = optarg;
        else if (r == 1)
            return bench_fail(EX_USAGE, command, "\"%s\" is one argument too many", optarg);
        else if (r == ':')
            return bench_fail(EX_USAGE, command, "%s needs a value", argv[optind - 1]);
        else if (r)
            return refuse_unknown(command, specs, n, word);
        else if ((r = take(command, &specs[at], optarg, ret)))
            return r;
    }
}

void args_help(const struct arg_spec *specs, size_t n) {
    for (size_t i = 0; i < n; i++)
        printf("  --%-18s %s\n", specs[i].name, specs[i].help);
}
