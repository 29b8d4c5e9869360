/* brink-bench replay: the command line, and the result for people and as JSON. */
#include "bench/args.h"
#include "bench/bench.h"
#include "bench/replay.h"
#include "util/clock.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <sysexits.h>

struct replay_args {
    const char *log, *cells;
    double capacity_Ah, start_charge, start_sd, typical_W, floor_V, settle_s, temp_C;
    double cutoff_charge, cutoff_rest_V;
    int64_t series;
    bool voltage_only, stages, json, help;
};

#define AT(member) offsetof(struct replay_args, member)
static const struct arg_spec specs[] = {
    {"cells", ARG_TEXT, UNIT_NONE, 0, 0, AT(cells), "FILE|NAME  the cell table (required)"},
    {"capacity", ARG_VALUE, UNIT_AMPERE_HOUR, 0.001, 1e5, AT(capacity_Ah),
     "\"2.9 Ah\"  of the pack; else the log's own hint, else the table's"},
    {"series", ARG_INTEGER, UNIT_NONE, 1, 64, AT(series), "N  cells in series (1)"},
    {"voltage-only", ARG_FLAG, UNIT_NONE, 0, 0, AT(voltage_only), "leave the current out"},
    {"start", ARG_VALUE, UNIT_SHARE, 0, 1, AT(start_charge),
     "\"60 %\"  what the estimator is told before the first row; else nothing"},
    {"start-spread", ARG_VALUE, UNIT_SHARE, 0.001, 1, AT(start_sd),
     "\"25 %\"  one standard deviation of that; 2 % for a rested pack"},
    {"typical", ARG_VALUE, UNIT_WATT, 0.001, 1e5, AT(typical_W),
     "\"3 W\"  the load before anything is learned"},
    {"floor", ARG_VALUE, UNIT_VOLT, 0.1, 100, AT(floor_V),
     "\"3.0 V\"  a cell; the run ends when the voltage stays under it"},
    {"settle", ARG_VALUE, UNIT_SECOND, 0, 1e9, AT(settle_s),
     "\"900 s\"  charge errors count from then on"},
    {"temperature", ARG_VALUE, UNIT_CELSIUS, -40, 90, AT(temp_C),
     "\"15 C\"  where the log has none"},
    {"cutoff-charge", ARG_VALUE, UNIT_SHARE, 0, 0.9, AT(cutoff_charge),
     "\"0 %\"  stop at this charge"},
    {"cutoff-rest", ARG_VALUE, UNIT_VOLT, 0, 100, AT(cutoff_rest_V),
     "\"0 V\"  a cell; stop at this rest voltage"},
    {"stages", ARG_FLAG, UNIT_NONE, 0, 0, AT(stages), "show every change of stage as it comes"},
    {"json", ARG_FLAG, UNIT_NONE, 0, 0, AT(json), "the result as one line of JSON"},
    {"help", ARG_FLAG, UNIT_NONE, 0, 0, AT(help), "this list"},
};
enum { SPECS = sizeof specs / sizeof *specs };

static const char *const stage_words[] = {"ample", "reserve", "edge", "leaving"};
static const char *const cause_words[] = {"none", "charge", "rest", "left",
                                          "keep", "floor",  "blind"};

/* ---- setting up ------------------------------------------------------------------------------ */

/* The ladder as brink.conf has it when it says nothing. */
static const struct ladder_config LADDER = {
    .reserve_charge = 0.25,
    .reserve_left_s = 3600.0,
    .keep_s = 120.0,
    .confirm_s = 30.0,
    .floor_confirm_s = 3.0,
    .floor_samples = 3,
    .grace_s = 60.0,
    .margin_charge = 0.03,
    .margin_left = 0.2,
    .margin_V = 0.05,
};

static int configure(const struct replay_args *args, const struct logcsv *log,
                     struct replay_config *ret) {
    struct cell_table table;
    struct pack_config *pack = &ret->watch.pack[0];
    double series = (double)args->series, hint_Ah = logcsv_capacity_Ah(log);
    int r = bench_table("replay", args->cells, &table);

    if (r)
        return r;
    *ret = (struct replay_config){
        .voltage_only = args->voltage_only,
        .start_charge = args->start_charge,
        .start_sd = args->start_sd,
        .capacity_Ah = isfinite(args->capacity_Ah) ? args->capacity_Ah
                       : isfinite(hint_Ah)         ? hint_Ah
                                                   : table.capacity_Ah,
        .floor_V = args->floor_V * series,
        .settle_s = args->settle_s,
        .watch = {.n_packs = 1,
                  .ladder = LADDER,
                  .silent_s = 30.0,
                  .assumed_temp_C = args->temp_C,
                  .rail_adapter_V = UNKNOWN},
    };
    *pack = (struct pack_config){.name = "log",
                                 .cutoff_charge = args->cutoff_charge,
                                 .cutoff_rest_V = args->cutoff_rest_V * series,
                                 .floor_V = ret->floor_V,
                                 .carries_W = ENDLESS,
                                 .typical_W = args->typical_W};
    if (cell_init(&pack->cell, &table, (int)args->series, ret->capacity_Ah))
        return bench_fail(EX_CONFIG, "replay", "--series and --capacity do not make a pack of %s",
                          table.name);
    return 0;
}

static int open_log(const char *path, struct logcsv **ret) {
    char message[512];
    int r = logcsv_open(ret, path, message, sizeof message);

    if (r < 0)
        return bench_fail(EX_NOINPUT, "replay", "%s: %s", path, strerror(-r));
    return r ? bench_fail(EX_DATAERR, "replay", "%s", message) : 0;
}

/* The exit code for what replay_measure or replay_run returned. */
static int read_trouble(const struct logcsv *log, const char *path, int r) {
    if (r == LOGCSV_E_FORMAT)
        return bench_fail(EX_DATAERR, "replay", "%s", logcsv_message(log));
    if (r == REPLAY_E_CONFIG)
        return bench_fail(EX_CONFIG, "replay", "these options do not make a pack to watch");
    return r ? bench_fail(EX_IOERR, "replay", "%s: %s", path, strerror(-r)) : 0;
}

/* ---- stages ---------------------------------------------------------------------------------- */

struct stages {
    bool json;
    enum stage last;
};

static void print_number(const char *key, double value, int decimals) {
    if (isfinite(value))
        printf("\"%s\":%.*f", key, decimals, value + 0.0);
    else
        printf("\"%s\":null", key);
}

static void stage_json(double time_s, const struct report *report) {
    printf("{");
    print_number("time_s", time_s, 3);
    printf(",\"stage\":\"%s\",\"cause\":\"%s\",", stage_words[report->stage],
           cause_words[report->cause]);
    print_number("charge", report->charge, 4);
    printf(",");
    print_number("left_s", report->left_s, 0);
    printf(",");
    print_number("left_least_s", report->left_least_s, 0);
    printf(",");
    print_number("terminal_V", report->pack[0].terminal_V, 3);
    printf(",");
    print_number("rest_V", report->pack[0].rest_V, 3);
    printf("}\n");
}

static void stage_seen(void *userdata, double time_s, const struct report *report) {
    struct stages *stages = userdata;
    char left[32], least[32];

    if (report->stage == stages->last)
        return;
    stages->last = report->stage;
    if (stages->json) {
        stage_json(time_s, report);
        return;
    }
    printf("%10.0f s  %-8s by %-7s charge %5.1f %%, left %s, at least %s, %.3f V, %.3f V at rest\n",
           time_s, stage_words[report->stage], cause_words[report->cause], report->charge * 100.0,
           units_duration(report->left_s, left, sizeof left),
           units_duration(report->left_least_s, least, sizeof least), report->pack[0].terminal_V,
           report->pack[0].rest_V);
}

/* ---- result ---------------------------------------------------------------------------------- */

static void print_json(const struct replay_result *result, double per_s) {
    printf("{\"samples\":%llu,", (unsigned long long)result->samples);
    print_number("charge_rmse_pct", 100.0 * result->charge_rmse, 3);
    printf(",");
    print_number("charge_mae_pct", 100.0 * result->charge_mae, 3);
    printf(",");
    print_number("charge_max_pct", 100.0 * result->charge_max, 3);
    printf(",");
    print_number("band95_cover", result->band95_cover, 4);
    printf(",\"left\":[");
    for (int i = 0; i < REPLAY_LEFTS; i++) {
        const struct replay_left *left = &result->left[i];

        printf("%s{\"run_pct\":%d,", i ? "," : "", left->run_pct);
        print_number("error_pct", 100.0 * replay_left_error(left), 2);
        printf(",\"least_held\":%s}", isnan(left->least_s)             ? "null"
                                      : left->least_s <= left->truth_s ? "true"
                                                                       : "false");
    }
    printf("],");
    print_number("least_cover", result->least_cover, 4);
    printf(",");
    print_number("least_share", result->least_share, 4);
    printf(",\"samples_per_s\":%.0f}\n", per_s);
}

static void print_left(const struct replay_left *left) {
    char truth[32], told[32], least[32], off[32] = "-";
    double error = replay_left_error(left);

    if (isfinite(error))
        snprintf(off, sizeof off, "%+.1f %%", 100.0 * error);
    printf("  %5d %%    %-12s %-12s %-12s %-9s %s\n", left->run_pct,
           units_duration(left->truth_s, truth, sizeof truth),
           units_duration(left->left_s, told, sizeof told),
           units_duration(left->least_s, least, sizeof least), off,
           left->least_s <= left->truth_s ? "held"
           : isnan(left->least_s)         ? "not known"
                                          : "broken");
}

static void print_table(const struct replay_result *result, const struct replay_span *span,
                        const struct replay_config *config, double per_s) {
    char run[32];

    printf("run       %llu samples, %s to %.2f V or the log's end\n",
           (unsigned long long)result->samples,
           units_duration(span->end_s - span->first_s, run, sizeof run), config->floor_V);
    if (result->judged)
        printf("charge    off by %.2f %% RMSE, %.2f %% on average, %.2f %% at most; "
               "within its bounds %.1f %% of the time\n",
               100.0 * result->charge_rmse, 100.0 * result->charge_mae, 100.0 * result->charge_max,
               100.0 * result->band95_cover);
    else
        printf("charge    not judged: no charge_Ah in the log after --settle\n");
    printf("left\n  of the run   true         told         at least     off       at least\n");
    for (int i = 0; i < REPLAY_LEFTS; i++)
        print_left(&result->left[i]);
    if (isfinite(result->least_cover))
        printf("least     held %.1f %% of the time, and was %.0f %% of the truth on average\n",
               100.0 * result->least_cover, 100.0 * result->least_share);
    printf("speed     %.0f samples a second\n", per_s);
}

/* ---- the command ----------------------------------------------------------------------------- */

static int measure(const struct replay_args *args, struct replay_config *ret_config,
                   struct replay_span *ret_span) {
    struct logcsv *log __attribute__((cleanup(logcsv_free_p))) = NULL;
    int r = open_log(args->log, &log);

    if (r == 0)
        r = configure(args, log, ret_config);
    if (r)
        return r;
    if (logcsv_ignored(log)[0])
        fprintf(stderr, "brink-bench replay: %s: ignored columns: %s\n", args->log,
                logcsv_ignored(log));
    r = read_trouble(log, args->log, replay_measure(log, ret_config->floor_V, ret_span));
    if (r == 0 && ret_span->rows == 0)
        r = bench_fail(EX_DATAERR, "replay", "%s: no rows under the header", args->log);
    return r;
}

static int play(const struct replay_args *args, const struct replay_config *config,
                const struct replay_span *span) {
    struct logcsv *log __attribute__((cleanup(logcsv_free_p))) = NULL;
    struct stages stages = {args->json, STAGE_AMPLE};
    struct replay_result result;
    int64_t start_us = clock_boot_us();
    double per_s;
    int r = open_log(args->log, &log);

    if (r == 0)
        r = read_trouble(
            log, args->log,
            replay_run(log, config, span, args->stages ? stage_seen : NULL, &stages, &result));
    if (r)
        return r;
    per_s = (double)result.samples * 1e6 / fmax((double)(clock_boot_us() - start_us), 1.0);
    if (args->json)
        print_json(&result, per_s);
    else
        print_table(&result, span, config, per_s);
    return fflush(stdout) ? bench_fail(EX_IOERR, "replay", "standard output: %s", strerror(errno))
                          : 0;
}

int bench_replay(int argc, char **argv) {
    struct replay_args args = {.capacity_Ah = UNKNOWN,
                               .start_charge = UNKNOWN,
                               .start_sd = 0.25,
                               .typical_W = 3.0,
                               .floor_V = 3.0,
                               .settle_s = 900.0,
                               .temp_C = 15.0,
                               .series = 1};
    struct replay_config config;
    struct replay_span span;
    int r = args_parse("replay", specs, SPECS, argc, argv, &args, &args.log);

    if (r)
        return r;
    if (args.help) {
        printf("usage: brink-bench replay LOG.csv --cells FILE|NAME [OPTION]...\n\n");
        args_help(specs, SPECS);
        return 0;
    }
    if (!args.log || strcmp(args.log, "-") == 0)
        return bench_fail(
            EX_USAGE, "replay",
            "no log; accepted is the path of a log CSV (it is read twice, so no pipe)");
    r = measure(&args, &config, &span);
    return r ? r : play(&args, &config, &span);
}
