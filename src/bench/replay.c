/* Playing a log: rows to samples, reports to errors. */
#include "bench/replay.h"

#include "util/real.h"

#include <math.h>

static const int FLOOR_ROWS = 3;
static const double LAST_S = 60.0; /* least is not judged so near the end */
static const double RESISTANCE_SD = 0.2;
static const int RUN_PCT[REPLAY_LEFTS] = {20, 50, 80, 90};

int replay_measure(struct logcsv *log, double floor_V, struct replay_span *ret) {
    struct replay_span span = {UNKNOWN, UNKNOWN, 0};
    double under_since_s = UNKNOWN;
    struct logcsv_row row;
    int under = 0, r;

    while ((r = logcsv_next(log, &row)) == 0) {
        double time_s = row.value[LOGCSV_TIME];

        if (span.rows++ == 0)
            span.first_s = time_s;
        if (under >= FLOOR_ROWS)
            continue;
        span.end_s = time_s;
        if (!(row.value[LOGCSV_VOLTAGE] < floor_V))
            under = 0;
        else if (under++ == 0)
            under_since_s = time_s;
    }
    if (r != LOGCSV_END)
        return r;
    if (under >= FLOOR_ROWS)
        span.end_s = under_since_s;
    *ret = span;
    return 0;
}

/* ---- the run --------------------------------------------------------------------------------- */

struct run {
    const struct replay_config *config;
    double settled_s, end_s;
    double sum, sum_squares;
    uint64_t covered, least_n, least_held;
    double least_sum;
    int next_left;
    struct replay_result result;
};

static void row_to_sample(const struct replay_config *config, const struct logcsv_row *row,
                          struct sample *ret) {
    for (size_t k = 1; k < PACKS_MAX; k++)
        ret->pack[k] = (struct pack_sample){UNKNOWN, UNKNOWN, UNKNOWN};
    ret->t_boot_us = llround(row->value[LOGCSV_TIME] * 1e6);
    ret->reading = row->value[LOGCSV_TIME];
    ret->pack[0] = (struct pack_sample){row->value[LOGCSV_VOLTAGE],
                                        config->voltage_only ? UNKNOWN : row->value[LOGCSV_CURRENT],
                                        row->value[LOGCSV_TEMP]};
    ret->rail_V = ret->adapter = UNKNOWN;
}

static void judge_charge(struct run *run, const struct logcsv_row *row,
                         const struct report *report) {
    double truth = 1.0 - row->value[LOGCSV_CHARGE] / run->config->capacity_Ah;
    double error = fabs(report->charge - truth);

    if (!(row->value[LOGCSV_TIME] >= run->settled_s) || !isfinite(error))
        return;
    run->result.judged++;
    run->sum += error;
    run->sum_squares += error * error;
    run->result.charge_max = fmax(run->result.charge_max, error);
    run->covered += truth >= report->charge_low && truth <= report->charge_high;
}

static void note_left(struct run *run, double time_s, const struct report *report) {
    while (run->next_left < REPLAY_LEFTS && time_s >= run->result.left[run->next_left].time_s) {
        struct replay_left *left = &run->result.left[run->next_left++];

        left->truth_s -= time_s - left->time_s;
        left->time_s = time_s;
        left->left_s = report->left_s;
        left->least_s = report->left_least_s;
    }
}

static void judge_least(struct run *run, double time_s, const struct report *report) {
    double truth_s = run->end_s - time_s;

    if (time_s < run->settled_s || truth_s < LAST_S || !isfinite(report->left_least_s))
        return;
    run->least_n++;
    run->least_held += report->left_least_s <= truth_s;
    run->least_sum += report->left_least_s / truth_s;
}

static void start_at(struct watch *watch, const struct replay_config *config) {
    struct watch_memory memory = {.n_packs = 1};
    double typical_W = config->watch.pack[0].typical_W;

    if (!isfinite(config->start_charge))
        return;
    memory.pack[0] = (struct pack_memory){.charge = config->start_charge,
                                          .charge_sd = config->start_sd,
                                          .power_W = typical_W,
                                          .power_sd_W = typical_W,
                                          .resistance_scale = 1.0,
                                          .resistance_sd = RESISTANCE_SD,
                                          .temp_C = config->watch.assumed_temp_C};
    watch_restore(watch, &memory, 0.0, false);
}

static struct run run_start(const struct replay_config *config, const struct replay_span *span) {
    struct run run = {
        .config = config, .settled_s = span->first_s + config->settle_s, .end_s = span->end_s};

    for (int i = 0; i < REPLAY_LEFTS; i++) {
        double truth_s = (1.0 - RUN_PCT[i] / 100.0) * (span->end_s - span->first_s);

        run.result.left[i] =
            (struct replay_left){RUN_PCT[i], span->end_s - truth_s, truth_s, UNKNOWN, UNKNOWN};
    }
    return run;
}

static void run_end(const struct run *run, struct replay_result *ret) {
    double n = (double)run->result.judged;

    *ret = run->result;
    ret->charge_rmse = sqrt(run->sum_squares / n); /* 0 / 0: nothing was judged */
    ret->charge_mae = run->sum / n;
    ret->band95_cover = (double)run->covered / n;
    ret->least_cover = (double)run->least_held / (double)run->least_n;
    ret->least_share = run->least_sum / (double)run->least_n;
    if (!run->result.judged)
        ret->charge_max = UNKNOWN;
}

int replay_run(struct logcsv *log, const struct replay_config *config,
               const struct replay_span *span, replay_seen *seen, void *userdata,
               struct replay_result *ret) {
    struct run run = run_start(config, span);
    struct watch watch;
    struct report report;
    struct sample sample;
    struct logcsv_row row;
    int r;

    if (watch_init(&watch, &config->watch, llround(span->first_s * 1e6)))
        return REPLAY_E_CONFIG;
    start_at(&watch, config);
    while ((r = logcsv_next(log, &row)) == 0) {
        row_to_sample(config, &row, &sample);
        watch_feed(&watch, &sample, &report);
        run.result.samples++;
        judge_charge(&run, &row, &report);
        note_left(&run, row.value[LOGCSV_TIME], &report);
        judge_least(&run, row.value[LOGCSV_TIME], &report);
        if (seen)
            seen(userdata, row.value[LOGCSV_TIME], &report);
    }
    if (r != LOGCSV_END)
        return r;
    run_end(&run, ret);
    return 0;
}

double replay_left_error(const struct replay_left *left) {
    if (!isfinite(left->left_s) || !(left->truth_s > 0.0))
        return UNKNOWN;
    return (left->left_s - left->truth_s) / left->truth_s;
}
