/* Replay: how a log is judged; and golden replays, raw gauge lines through decoder, channels and
 * watch, compared with what is kept in tests/replay.
 *
 * A golden that must change because the core got better is written again with
 *   REPLAY_WRITE=1 build/gcc/unit/test_replay
 * and the difference read before it is committed. tests/replay/make says where the lines are from.
 */
#include "bench/replay.h"
#include "decode/celltable.h"
#include "gauge/channel.h"
#include "gauge/line.h"
#include "util/files.h"
#include "util/real.h"
#include "util/text.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <unistd.h>

#include <cmocka.h>

static const struct ladder_config LADDER = {0.25, 3600.0, 120.0, 30.0, 3.0,
                                            3,    60.0,   0.03,  0.2,  0.05};

static struct watch_config watch_of(size_t n_packs, double capacity_Ah, double typical_W) {
    struct watch_config config = {.n_packs = n_packs,
                                  .ladder = LADDER,
                                  .silent_s = 30.0,
                                  .assumed_temp_C = 15.0,
                                  .rail_adapter_V = UNKNOWN};
    struct cell_table table;
    char message[256] = "";

    assert_int_equal(celltable_load("tests/replay/fen.ini", &table, message, sizeof message), 0);
    for (size_t k = 0; k < n_packs; k++) {
        config.pack[k] = (struct pack_config){.cutoff_charge = 0.08,
                                              .cutoff_rest_V = 3.2,
                                              .floor_V = 3.0,
                                              .carries_W = ENDLESS,
                                              .typical_W = typical_W / (double)n_packs};
        snprintf(config.pack[k].name, NAME_LEN, "p%zu", k + 1);
        assert_int_equal(cell_init(&config.pack[k].cell, &table, 1, capacity_Ah), 0);
    }
    return config;
}

/* ---- judging --------------------------------------------------------------------------------- */

static struct logcsv *log_of(const char *text) {
    int fd = memfd_create("log", MFD_CLOEXEC);
    struct logcsv *log = NULL;
    char message[256];

    assert_true(fd >= 0);
    assert_int_equal(write(fd, text, strlen(text)), (ssize_t)strlen(text));
    assert_int_equal(lseek(fd, 0, SEEK_SET), 0);
    assert_int_equal(logcsv_new(&log, fd, "log", message, sizeof message), 0);
    return log;
}

static void the_run_ends_at_three_rows_under_the_floor(void **state) {
    (void)state;
    static const struct {
        const char *rows;
        double end_s;
    } cases[] = {
        {"0,4\n10,3.5\n20,3.1\n", 20.0},                           /* never: the log's end */
        {"0,4\n10,2.9\n20,2.9\n30,3.1\n40,2.9\n50,2.9\n", 50.0},   /* never three in a row */
        {"0,4\n10,2.9\n20,3\n30,2.9\n40,2.9\n50,2.9\n60,4\n", 30}, /* 3.0 is not under 3.0 */
        {"0,2.9\n1,2.9\n2,2.9\n3,2.9\n", 0.0},
    };

    for (size_t i = 0; i < sizeof cases / sizeof *cases; i++) {
        char text[256];
        struct replay_span span;

        snprintf(text, sizeof text, "time_s,voltage_V\n%s", cases[i].rows);
        struct logcsv *log = log_of(text);
        assert_int_equal(replay_measure(log, 3.0, &span), 0);
        assert_true(span.first_s == 0.0 && span.end_s == cases[i].end_s);
        logcsv_free(log);
    }
}

/* A log of one second rows at constant charge, resting: what was taken out is what the caller says,
 * so that the error is known. */
static char *resting_log(const struct watch_config *config, double charge, double taken_Ah) {
    size_t size = 1 << 16, length = 0;
    char *text = malloc(size);

    assert_non_null(text);
    text_append(text, size, &length, "# capacity_Ah 2.888\ncharge_Ah,voltage_V,time_s\n");
    for (int t = 0; t < 1000; t++)
        text_append(text, size, &length, "%.5f,%.4f,%d\n", taken_Ah,
                    ocv_voltage(&config->pack[0].cell.table.ocv, charge), t + 500);
    return text;
}

static void run_text(const char *text, struct replay_config *config, struct replay_result *result) {
    struct logcsv *log = log_of(text);
    struct replay_span span;

    assert_int_equal(replay_measure(log, config->floor_V, &span), 0);
    logcsv_free(log);
    log = log_of(text);
    assert_int_equal(replay_run(log, config, &span, NULL, NULL, result), 0);
    logcsv_free(log);
}

static struct replay_config config_of(void) {
    return (struct replay_config){.watch = watch_of(1, 2.888, 0.02),
                                  .start_charge = UNKNOWN,
                                  .capacity_Ah = 2.888,
                                  .floor_V = 3.0,
                                  .settle_s = 600.0};
}

static void charge_errors_are_against_the_log(void **state) {
    (void)state;
    struct replay_config config = config_of();
    struct replay_result at, off;
    char *text = resting_log(&config.watch, 0.5, 0.5 * 2.888);

    run_text(text, &config, &at);
    free(text);
    assert_int_equal(at.samples, 1000);
    assert_int_equal(at.judged, 400);
    assert_true(at.charge_rmse < 0.02 && at.charge_max < 0.03 && at.band95_cover == 1.0);
    assert_true(at.charge_mae <= at.charge_rmse && at.charge_rmse <= at.charge_max);

    text = resting_log(&config.watch, 0.5, 0.3 * 2.888); /* the log says 70 % */
    run_text(text, &config, &off);
    free(text);
    assert_true(fabs(off.charge_mae - 0.2) < 0.03 && off.band95_cover == 0.0);
}

static void without_charge_nothing_is_judged(void **state) {
    (void)state;
    struct replay_config config = config_of();
    struct replay_result result;

    run_text("time_s,voltage_V\n0,3.7\n1,3.7\n2,3.7\n", &config, &result);
    assert_int_equal(result.samples, 3);
    assert_int_equal(result.judged, 0);
    assert_true(isnan(result.charge_rmse) && isnan(result.charge_mae));
    assert_true(isnan(result.charge_max) && isnan(result.band95_cover));
}

static void left_is_taken_at_shares_of_the_run(void **state) {
    (void)state;
    static const int pct[REPLAY_LEFTS] = {20, 50, 80, 90};
    struct replay_config config = config_of();
    struct replay_result result;
    char *text = resting_log(&config.watch, 0.5, 1.0);

    run_text(text, &config, &result); /* 500 s to 1499 s */
    free(text);
    for (int i = 0; i < REPLAY_LEFTS; i++) {
        const struct replay_left *left = &result.left[i];

        assert_int_equal(left->run_pct, pct[i]);
        assert_true(left->time_s == ceil(500.0 + 9.99 * pct[i]));
        assert_true(fabs(left->truth_s - (1499.0 - left->time_s)) < 1e-9);
    }
}

static void the_error_of_left_is_a_share_of_the_truth(void **state) {
    (void)state;
    struct replay_left left = {50, 0.0, 1000.0, 1100.0, 900.0};

    assert_true(fabs(replay_left_error(&left) - 0.1) < 1e-12);
    left.left_s = 750.0;
    assert_true(fabs(replay_left_error(&left) + 0.25) < 1e-12);
    left.left_s = ENDLESS;
    assert_true(isnan(replay_left_error(&left)));
    left = (struct replay_left){90, 0.0, 0.0, 10.0, 0.0};
    assert_true(isnan(replay_left_error(&left)));
}

static void a_bad_row_ends_the_replay(void **state) {
    (void)state;
    struct logcsv *log = log_of("time_s,voltage_V\n0,3.7\n1,x\n");
    struct replay_span span = {1.0, 2.0, 3};

    assert_int_equal(replay_measure(log, 3.0, &span), LOGCSV_E_FORMAT);
    assert_true(span.rows == 3);
    logcsv_free(log);
}

/* Voltage only: another current in the log changes nothing. */
static void voltage_only_leaves_the_current_out(void **state) {
    (void)state;
    struct replay_config config = config_of();
    struct replay_result with, without, only;
    char rows[2][4096];

    for (int k = 0; k < 2; k++) {
        size_t length = 0;

        text_append(rows[k], 4096, &length, "time_s,voltage_V,current_A,charge_Ah\n");
        for (int t = 0; t < 100; t++)
            text_append(rows[k], 4096, &length, "%d,%.3f,%.1f,1.4\n", t, 3.6 + 0.01 * (t % 3),
                        k ? 0.1 : 3.0);
    }
    config.settle_s = 0.0;
    run_text(rows[0], &config, &with);
    run_text(rows[1], &config, &without);
    assert_true(with.charge_rmse != without.charge_rmse);
    config.voltage_only = true;
    run_text(rows[0], &config, &with);
    run_text(rows[1], &config, &only);
    assert_true(with.charge_rmse == only.charge_rmse);
}

/* ---- golden replays -------------------------------------------------------------------------- */

static const double EVERY_S = 300.0; /* a line at least this often, and at every change */

static const struct golden {
    const char *name;
    size_t n_packs;
    double capacity_Ah, typical_W;
    bool current;
} goldens[] = {
    {"heron", 1, 2.888, 3.0, false},
    {"bittern", 1, 2.888, 3.0, false},
    {"curlew", 2, 2.0, 3.0, true},
};

static void channels(const struct golden *golden, struct channel_map *map) {
    static const char *const tokens[2][2] = {{"v", "i"}, {"v2", "i2"}};

    channel_map_init(map);
    map->n_packs = golden->n_packs;
    for (size_t k = 0; k < golden->n_packs; k++) {
        strcpy(map->pack[k].voltage.token, tokens[k][0]);
        strcpy(map->pack[k].current.token, golden->current ? tokens[k][1] : "");
        strcpy(map->pack[k].temperature.token, "c");
    }
    strcpy(map->rail.token, "r");
    strcpy(map->adapter.token, "ext");
}

struct play {
    const struct golden *golden;
    struct watch watch;
    struct channel_map map;
    struct report report;
    double next_s;
    enum stage stage;
    enum supply supply;
    unsigned alerts;
    char *text;
    size_t size, length;
};

static void put(struct play *play, const char *before, double value, int decimals) {
    if (isfinite(value))
        text_append(play->text, play->size, &play->length, "%s%.*f", before, decimals, value + 0.0);
    else
        text_append(play->text, play->size, &play->length, "%s%s", before,
                    isnan(value) ? "?" : "endless");
}

static void write_pack(struct play *play, const struct pack_report *pack) {
    put(play, " | charge ", pack->charge, 4);
    put(play, " ", pack->charge_low, 4);
    put(play, "..", pack->charge_high, 4);
    put(play, ", V ", pack->terminal_V, 3);
    put(play, ", rest V ", pack->rest_V, 3);
    put(play, ", A ", pack->current_A, 3);
}

static void write_report(struct play *play, double time_s) {
    static const char *const stages[] = {"ample", "reserve", "edge", "leaving"};
    static const char *const causes[] = {"none", "charge", "rest", "left",
                                         "keep", "floor",  "blind"};
    static const char *const supplies[] = {"unknown", "pack", "adapter", "both"};
    const struct report *r = &play->report;

    text_append(play->text, play->size, &play->length, "%.0f s %s by %s, supply %s, alerts %x",
                time_s, stages[r->stage], causes[r->cause], supplies[r->supply], r->alerts);
    put(play, ", left s ", r->left_s, 0);
    put(play, ", at least ", r->left_least_s, 0);
    for (size_t k = 0; k < r->n_packs; k++)
        write_pack(play, &r->pack[k]);
    text_append(play->text, play->size, &play->length, "\n");
}

static void play_frame(struct play *play, const struct frame *frame) {
    const struct report *r = &play->report;
    struct sample sample;

    if (!channel_map_apply(&play->map, frame, llround(frame->clock_s * 1e6), &sample))
        return;
    watch_feed(&play->watch, &sample, &play->report);
    if (r->stage == play->stage && r->supply == play->supply && r->alerts == play->alerts &&
        !(frame->clock_s >= play->next_s))
        return;
    play->stage = r->stage;
    play->supply = r->supply;
    play->alerts = r->alerts;
    while (play->next_s <= frame->clock_s)
        play->next_s += EVERY_S;
    write_report(play, frame->clock_s);
}

static void play_bytes(struct play *play, const char *bytes, size_t n) {
    struct line_decoder decoder;
    struct frame frame;

    line_init(&decoder);
    while (n > 0) {
        size_t took = line_push(&decoder, bytes, n);

        bytes += took;
        n -= took;
        while (line_next(&decoder, &frame))
            if (isfinite(frame.clock_s))
                play_frame(play, &frame);
    }
    text_append(play->text, play->size, &play->length,
                "lines %llu, bad %llu; samples %llu, refused %llu, repeated %llu\n",
                (unsigned long long)decoder.counts.lines,
                (unsigned long long)decoder.counts.bad_lines,
                (unsigned long long)play->report.samples, (unsigned long long)play->report.refused,
                (unsigned long long)play->report.repeated);
}

static void golden_replay(const struct golden *golden) {
    struct watch_config config = watch_of(golden->n_packs, golden->capacity_Ah, golden->typical_W);
    struct play *play = calloc(1, sizeof *play);
    char path[128], *bytes, *kept;
    size_t n, kept_length;

    assert_non_null(play);
    play->golden = golden;
    play->size = 1 << 18;
    play->text = calloc(1, play->size);
    assert_non_null(play->text);
    assert_int_equal(watch_init(&play->watch, &config, 0), 0);
    channels(golden, &play->map);
    snprintf(path, sizeof path, "tests/replay/%s.lines", golden->name);
    assert_int_equal(files_read(path, 1 << 20, &bytes, &n), 0);
    play_bytes(play, bytes, n);

    snprintf(path, sizeof path, "tests/replay/%s.golden", golden->name);
    if (getenv("REPLAY_WRITE"))
        assert_int_equal(files_replace(path, play->text, play->length, 0644, false), 0);
    assert_int_equal(files_read(path, 1 << 20, &kept, &kept_length), 0);
    assert_string_equal(play->text, kept);
    assert_int_equal(play->report.stage, STAGE_LEAVING);
    free(kept), free(bytes), free(play->text), free(play);
}

static void golden_heron(void **state) {
    (void)state;
    golden_replay(&goldens[0]);
}

static void golden_bittern(void **state) {
    (void)state;
    golden_replay(&goldens[1]);
}

static void golden_curlew(void **state) {
    (void)state;
    golden_replay(&goldens[2]);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_run_ends_at_three_rows_under_the_floor),
        cmocka_unit_test(charge_errors_are_against_the_log),
        cmocka_unit_test(without_charge_nothing_is_judged),
        cmocka_unit_test(left_is_taken_at_shares_of_the_run),
        cmocka_unit_test(the_error_of_left_is_a_share_of_the_truth),
        cmocka_unit_test(a_bad_row_ends_the_replay),
        cmocka_unit_test(voltage_only_leaves_the_current_out),
        cmocka_unit_test(golden_heron),
        cmocka_unit_test(golden_bittern),
        cmocka_unit_test(golden_curlew),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
