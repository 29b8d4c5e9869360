/* brink-bench fit: the command line, and the files it writes. */
#include "bench/args.h"
#include "bench/bench.h"
#include "bench/fit.h"
#include "bench/fitwrite.h"
#include "bench/plot.h"
#include "decode/celltable.h"
#include "util/cleanup.h"
#include "util/files.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sysexits.h>

struct fit_args {
    const char *ocv, *name, *chemistry, *source, *licence, *svg, *output;
    struct arg_texts pulse, drive;
    double capacity_Ah, full_V, damage_V, spread_V, temp_C, activation_J_mol;
    bool help;
};

#define AT(member) offsetof(struct fit_args, member)
static const struct arg_spec specs[] = {
    {"ocv", ARG_TEXT, UNIT_NONE, 0, 0, AT(ocv),
     "LOG  a slow discharge from full to empty, C/20 or less (required)"},
    {"pulse", ARG_TEXTS, UNIT_NONE, 0, 0, AT(pulse), "LOG  pulses and rests; up to 7 times"},
    {"drive", ARG_TEXTS, UNIT_NONE, 0, 0, AT(drive), "LOG  a changing load; up to 7 times"},
    {"capacity", ARG_VALUE, UNIT_AMPERE_HOUR, 0.001, 1000, AT(capacity_Ah),
     "\"2.9 Ah\"  of the cell; else the slow discharge's own"},
    {"name", ARG_TEXT, UNIT_NONE, 0, 0, AT(name), "NAME  of the table; else the file's"},
    {"chemistry", ARG_TEXT, UNIT_NONE, 0, 0, AT(chemistry),
     "li-ion|li-ion-hv|lifepo4  gives the limits (li-ion)"},
    {"full", ARG_VALUE, UNIT_VOLT, 1, 6, AT(full_V), "\"4.20 V\"  end of charge"},
    {"damage", ARG_VALUE, UNIT_VOLT, 0.5, 5, AT(damage_V), "\"2.50 V\"  published least voltage"},
    {"spread", ARG_VALUE, UNIT_VOLT, 0.001, 1, AT(spread_V),
     "\"20 mV\"  how far the curve may be off; else from the residual"},
    {"temperature", ARG_VALUE, UNIT_CELSIUS, -40, 80, AT(temp_C),
     "\"25 C\"  where a log has none (25 C)"},
    {"activation", ARG_VALUE, UNIT_J_MOL, 0, 100e3, AT(activation_J_mol),
     "\"28 kJ/mol\"  else from logs of several temperatures"},
    {"source", ARG_TEXT, UNIT_NONE, 0, 0, AT(source), "TEXT  where the logs come from"},
    {"licence", ARG_TEXT, UNIT_NONE, 0, 0, AT(licence), "TEXT  their terms"},
    {"svg", ARG_TEXT, UNIT_NONE, 0, 0, AT(svg), "FILE  a plot of the table"},
    {"output", ARG_TEXT, UNIT_NONE, 0, 0, AT(output), "FILE.ini  the table, also -o (required)"},
    {"help", ARG_FLAG, UNIT_NONE, 0, 0, AT(help), "this list"},
};
enum { SPECS = sizeof specs / sizeof *specs };

/* Limits of the kinds. li-ion and lifepo4 from cell specifications (2.50 V is the upper of the
 * published least voltages of lifepo4), li-ion-hv from the Linux kernel's tables of such cells. */
static const struct fit_limits limits[] = {
    {"li-ion", 4.20, 2.50},
    {"li-ion-hv", 4.35, 3.30},
    {"lifepo4", 3.65, 2.50},
};

/* ---- options --------------------------------------------------------------------------------- */

static int refuse_text(const char *option, const char *text) {
    bool ok = true;

    for (const char *c = text ? text : ""; *c; c++)
        ok = ok && (unsigned char)*c >= ' ' && *c != '=' && *c != ';';
    if (ok && (!text || strlen(text) < 500))
        return 0;
    return bench_fail(EX_USAGE, "fit",
                      "--%s is no text a table can hold; accepted is one line of under 500 bytes "
                      "without \"=\" and \";\"",
                      option);
}

static int name_of(const struct fit_args *args, char ret[CELL_NAME_MAX]) {
    const char *base = strrchr(args->output, '/');
    const char *name = args->name ? args->name : base ? base + 1 : args->output;
    size_t length = strlen(name);

    if (!args->name && length > 4 && strcmp(name + length - 4, ".ini") == 0)
        length -= 4;
    if (length == 0 || length >= CELL_NAME_MAX ||
        strspn(name, "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789._-") < length)
        return bench_fail(EX_USAGE, "fit",
                          "\"%s\" is no name for a table; accepted with --name are letters, "
                          "digits, \".\", \"_\" and \"-\", at most 47",
                          name);
    snprintf(ret, CELL_NAME_MAX, "%.*s", (int)length, name);
    return 0;
}

static int limits_of(const struct fit_args *args, struct fit_limits *ret) {
    size_t i = 0;

    while (i < sizeof limits / sizeof *limits && strcmp(limits[i].chemistry, args->chemistry) != 0)
        i++;
    if (i == sizeof limits / sizeof *limits)
        return bench_fail(EX_USAGE, "fit",
                          "--chemistry \"%s\" is not known; accepted are li-ion, li-ion-hv and "
                          "lifepo4",
                          args->chemistry);
    *ret = limits[i];
    if (isfinite(args->full_V))
        ret->full_V = args->full_V;
    if (isfinite(args->damage_V))
        ret->damage_V = args->damage_V;
    if (!(ret->damage_V < ret->full_V))
        return bench_fail(EX_USAGE, "fit", "--damage must lie under --full");
    return 0;
}

static int check(const struct fit_args *args, struct fit_wish *wish, char name[CELL_NAME_MAX]) {
    int r;

    if (!args->ocv || !args->output)
        return bench_fail(EX_USAGE, "fit",
                          "--ocv LOG and -o FILE.ini are needed; brink-bench fit --help lists all");
    if (args->pulse.n + args->drive.n == 0)
        return bench_fail(EX_USAGE, "fit",
                          "no --pulse and no --drive: a slow discharge alone tells no resistance");
    if ((r = refuse_text("source", args->source)) || (r = refuse_text("licence", args->licence)) ||
        (r = name_of(args, name)) || (r = limits_of(args, &wish->limits)))
        return r;
    wish->name = name;
    wish->capacity_Ah = args->capacity_Ah;
    wish->spread_V = args->spread_V;
    wish->activation_J_mol = args->activation_J_mol;
    return 0;
}

/* ---- reading and fitting --------------------------------------------------------------------- */

static int read_log(struct fit *fit, const char *path, enum fit_role role, double temp_C) {
    char message[1024];
    int r = fitlog_read(&fit->log[fit->n_logs], path, role, temp_C, message, sizeof message);

    if (r)
        return bench_fail(r, "fit", "%s", message);
    fit->n_logs++;
    return 0;
}

static int read_logs(struct fit *fit, const struct fit_args *args) {
    int r = read_log(fit, args->ocv, FIT_OCV, args->temp_C);

    for (size_t i = 0; r == 0 && i < args->pulse.n; i++)
        r = read_log(fit, args->pulse.text[i], FIT_PULSE, args->temp_C);
    for (size_t i = 0; r == 0 && i < args->drive.n; i++)
        r = read_log(fit, args->drive.text[i], FIT_DRIVE, args->temp_C);
    return r;
}

static int refuse(const struct fit_args *args, int trouble) {
    switch (trouble) {
    case FIT_E_CAPACITY:
        return bench_fail(EX_USAGE, "fit", "%s tells no capacity; give --capacity \"2.9 Ah\"",
                          args->ocv);
    case FIT_E_CURVE:
        return bench_fail(
            EX_DATAERR, "fit",
            "%s holds no discharge over a fifth of the charge or more; --ocv wants one "
            "from full to empty at C/20 or less",
            args->ocv);
    case FIT_E_LOGS:
        return bench_fail(EX_DATAERR, "fit",
                          "the --pulse and --drive logs hold no current that tells a resistance");
    default:
        return bench_fail(EX_DATAERR, "fit",
                          "the logs do not determine a table; add a pulse log with rests, or one "
                          "that covers more of the charge");
    }
}

/* ---- writing --------------------------------------------------------------------------------- */

static int keep(const char *path, const char *text, size_t length) {
    int r = files_replace(path, text, length, 0644, false);

    return r ? bench_fail(EX_CANTCREAT, "fit", "%s: %s", path, strerror(-r)) : 0;
}

/* The file must be a table before it is one on the disk. */
static int write_table(const struct fit *fit, const struct fit_args *args) {
    scoped(free_p) char *text = NULL;
    size_t length = 0;
    FILE *out = open_memstream(&text, &length);
    struct cell_table table;
    char message[1024];

    if (!out)
        return bench_fail(EX_OSERR, "fit", "no memory for the table");
    fitwrite_table(fit, args->source, args->licence, out);
    if (fclose(out))
        return bench_fail(EX_OSERR, "fit", "no memory for the table");
    if (celltable_parse(text, length, args->output, &table, message, sizeof message))
        return bench_fail(EX_DATAERR, "fit",
                          "what came out is no good table: %s; check --full, --damage and the logs",
                          message);
    return keep(args->output, text, length);
}

static int write_plot(const struct fit *fit, const char *path) {
    scoped(free_p) char *text = NULL;
    size_t length = 0;
    FILE *out = open_memstream(&text, &length);

    if (!out)
        return bench_fail(EX_OSERR, "fit", "no memory for the plot");
    plot_fit(fit, out);
    if (fclose(out))
        return bench_fail(EX_OSERR, "fit", "no memory for the plot");
    return keep(path, text, length);
}

static void free_fit(struct fit **fit) {
    if (*fit)
        fit_free(*fit);
    free(*fit);
}

static int make(const struct fit_args *args, const struct fit_wish *wish) {
    struct fit *fit __attribute__((cleanup(free_fit))) = calloc(1, sizeof *fit);
    int r, trouble;

    if (!fit)
        return bench_fail(EX_OSERR, "fit", "no memory");
    if ((r = read_logs(fit, args)))
        return r;
    if ((trouble = fit_run(fit, wish)))
        return refuse(args, trouble);
    r = write_table(fit, args);
    if (r == 0 && args->svg)
        r = write_plot(fit, args->svg);
    if (r)
        return r;
    fitwrite_words(fit, stdout, "");
    printf("spread %.0f mV%s; the table is in %s\n", 1000.0 * fit->table.voltage_sd_V,
           isnan(wish->spread_V) ? ", from the residual and 10 mV for the next cell" : " as given",
           args->output);
    return fflush(stdout) ? bench_fail(EX_IOERR, "fit", "standard output: %s", strerror(errno)) : 0;
}

int bench_fit(int argc, char **argv) {
    struct fit_args args = {.chemistry = "li-ion",
                            .capacity_Ah = UNKNOWN,
                            .full_V = UNKNOWN,
                            .damage_V = UNKNOWN,
                            .spread_V = UNKNOWN,
                            .temp_C = 25.0,
                            .activation_J_mol = UNKNOWN};
    char output[] = "--output";
    struct fit_wish wish = {0};
    char name[CELL_NAME_MAX];
    int r;

    for (int i = 1; i < argc; i++)
        if (strcmp(argv[i], "-o") == 0)
            argv[i] = output;
    r = args_parse("fit", specs, SPECS, argc, argv, &args, NULL);
    if (r)
        return r;
    if (args.help) {
        printf("usage: brink-bench fit --ocv LOG [--pulse LOG]... [--drive LOG]... "
               "[OPTION]... -o FILE.ini\n\n");
        args_help(specs, SPECS);
        return 0;
    }
    r = check(&args, &wish, name);
    return r ? r : make(&args, &wish);
}
