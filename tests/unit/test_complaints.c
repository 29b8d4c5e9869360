/* What operators complain of in the field, each as a test of the whole pipeline. The numbers are
 * those of section 8 of the project's reference sheet: issue threads about devices that shut down
 * falsely, late or never, in general words. Those that concern files, clocks and devices stand in
 * tests/system. */
#include "fen.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

static void start(struct watch *watch, struct fen *fen, double charge, double power_W) {
    struct watch_config config = fen_config();

    assert_int_equal(watch_init(watch, &config, 0), 0);
    *fen = fen_pack(&config, charge, power_W);
}

/* 1: one low sample during a burst shut a half-full device down; three in a row were the cure. */
static void complaint_01_one_dip_is_no_empty_pack(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.5, 3.0);
    fen_feed(&watch, &fen, 600, 1.0, &r);
    for (int dips = 1; dips <= 2; dips++) {
        for (int i = 0; i < dips; i++)
            assert_int_equal(fen_say(&watch, &fen, 1.0, 2.7, &r), WATCH_TAKEN);
        fen_feed(&watch, &fen, 8, 1.0, &r);
        assert_int_equal(r.stage, STAGE_AMPLE);
    }
    for (int i = 0; i < 3; i++)
        fen_say(&watch, &fen, 1.0, 2.7, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
    fen_say(&watch, &fen, 1.0, 2.7, &r); /* three seconds and four samples under the floor */
    assert_int_equal(r.stage, STAGE_LEAVING);
    assert_int_equal(r.cause, CAUSE_FLOOR);
}

/* 2: the "debounce" counted one cached reading fifty times. */
static void complaint_02_a_cached_reading_counts_once(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    struct sample s;

    (void)unused;
    start(&watch, &fen, 0.5, 3.0);
    fen_feed(&watch, &fen, 63, 1.0, &r);
    s = fen_run(&fen, 1.0);
    s.reading = 60.0;
    s.pack[0].voltage_V = 2.7;
    assert_int_equal(watch_feed(&watch, &s, &r), WATCH_TAKEN);
    for (int i = 0; i < 50; i++) {
        s.t_boot_us += 600000;
        assert_int_equal(watch_feed(&watch, &s, &r), WATCH_REPEATED);
    }
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_int_equal(r.repeated, 50);
    assert_true(r.alerts & ALERT_REPEATED);
}

/* 3: eight readings within one millisecond all lie in the same burst. */
static void complaint_03_many_readings_in_one_burst_are_one(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.5, 3.0);
    fen_feed(&watch, &fen, 60, 1.0, &r);
    for (int i = 0; i < 30; i++)
        fen_say(&watch, &fen, 0.001, 2.7, &r);
    fen_feed(&watch, &fen, 5, 1.0, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
}

/* 4: the figure bounced, and read zero while the device ran. */
static void complaint_04_charge_does_not_bounce(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    double before = 2.0, highest_rise = 0.0;

    (void)unused;
    start(&watch, &fen, 0.9, 3.0);
    fen.noise_V = 0.005;
    fen_feed(&watch, &fen, 1200, 1.0, &r);
    while (fen.state.charge > 0.3) {
        fen.power_W = fen_uniform(&fen.random) < 0.1 ? 8.0 : 2.4;
        fen_feed(&watch, &fen, 5, 1.0, &r);
        highest_rise = fmax(highest_rise, r.charge - before);
        before = r.charge;
        assert_true(r.charge > 0.2);
    }
    assert_true(highest_rise < 0.005);
}

/* 5: the warning stayed although the voltage came back; 200 mV up and down are normal. */
static void complaint_05_reserve_clears_when_charge_is_back(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.24, 3.0);
    fen_feed(&watch, &fen, 600, 1.0, &r);
    assert_int_equal(r.stage, STAGE_RESERVE);
    fen.adapter = 1.0;
    fen.power_W = -6.0;
    fen_feed(&watch, &fen, 2400, 1.0, &r);
    assert_true(fen.state.charge > 0.45);
    assert_int_equal(r.stage, STAGE_AMPLE);
}

/* 6: a pack that was cut off recovers at rest, boots the board, browns out, again and again. The
 * decision must fall on what the pack holds, before a burst finds out. */
static void complaint_06_recovered_empty_pack_leaves_again(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    int samples = 0;

    (void)unused;
    start(&watch, &fen, 0.03, 1.0);
    do {
        fen_feed(&watch, &fen, 1, 1.0, &r);
        assert_true(++samples < 300);
    } while (r.stage != STAGE_LEAVING);
    assert_true(fen.terminal_V > 3.1); /* the floor was never near */
    assert_int_not_equal(r.cause, CAUSE_FLOOR);
}

/* 7: the decision was lost at each reset and counted anew. */
static void complaint_07_the_countdown_survives_a_restart(void **unused) {
    struct watch watch, after;
    struct watch_memory memory;
    struct watch_config config = fen_config();
    struct report r;
    struct fen fen;
    double grace_s;

    (void)unused;
    start(&watch, &fen, 0.06, 2.0);
    while (watch.ladder.stage != STAGE_EDGE)
        fen_feed(&watch, &fen, 1, 1.0, &r);
    fen_feed(&watch, &fen, 20, 1.0, &r);
    grace_s = r.grace_left_s;
    watch_remember(&watch, &memory);
    assert_int_equal(watch_init(&after, &config, fen.t_boot_us + 2000000), 0);
    watch_restore(&after, &memory, 2.0, true);
    fen.t_boot_us += 2000000;
    fen_feed(&after, &fen, 2, 1.0, &r);
    assert_int_equal(r.stage, STAGE_EDGE);
    assert_true(fabs(r.grace_left_s - (grace_s - 4.0)) < 0.01);
    fen_feed(&after, &fen, 40, 1.0, &r);
    assert_int_equal(r.stage, STAGE_LEAVING);
}

/* 8: one sample at boot tripped on a cold cell, on inrush, on a supply that rises slowly. */
static void complaint_08_one_low_sample_at_boot(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.6, 3.0);
    fen_say(&watch, &fen, 1.0, 2.6, &r);
    fen_say(&watch, &fen, 1.0, 3.1, &r);
    fen_say(&watch, &fen, 1.0, 3.4, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
    fen_feed(&watch, &fen, 300, 1.0, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(fabs(r.charge - fen.state.charge) < 0.1);
}

/* 8, the other half: two low samples after the warm-up and then silence. */
static void complaint_08_two_low_samples_then_nothing(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.6, 3.0);
    for (int i = 0; i < 5; i++)
        fen_say(&watch, &fen, 1.0, 3.2, &r);
    for (int i = 0; i < 28; i++) {
        fen.t_boot_us += 1000000;
        watch_tick(&watch, fen.t_boot_us, &r);
    }
    assert_int_equal(r.stage, STAGE_AMPLE);
}

/* 9: an unanswered sensor was read as 0 % and the device went down at once. */
static void complaint_09_unknown_is_not_empty(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.6, 3.0);
    for (int i = 0; i < 600; i++)
        assert_int_equal(fen_say(&watch, &fen, 1.0, 0.0, &r), WATCH_REFUSED);
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(r.blind);
    assert_true(isnan(r.charge) && isnan(r.left_s));
    assert_true(r.alerts & ALERT_IMPOSSIBLE);
    for (int i = 0; i < 600; i++) {
        fen.t_boot_us += 60000000;
        watch_tick(&watch, fen.t_boot_us, &r);
    }
    assert_int_equal(r.stage, STAGE_AMPLE);
}

/* 10: external power was back, yet it shut down, or noticed only when a timer fired. */
static void complaint_10_an_adapter_rescues_from_the_edge(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.06, 2.0);
    fen.adapter = 0.0;
    do
        fen_feed(&watch, &fen, 1, 1.0, &r);
    while (r.stage != STAGE_EDGE);
    fen.adapter = 1.0;
    fen.power_W = -5.0;
    fen_feed(&watch, &fen, 240, 1.0, &r);
    assert_int_equal(r.stage, STAGE_RESERVE);
    assert_int_equal(r.supply, SUPPLY_ADAPTER);
}

/* 10, the other side: an adapter that is there but loses does not hold the ladder up. */
static void complaint_10_an_adapter_that_loses_does_not(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    int samples = 0;

    (void)unused;
    start(&watch, &fen, 0.10, 3.0);
    fen.adapter = 1.0;
    do {
        fen_feed(&watch, &fen, 1, 1.0, &r);
        assert_true(++samples < 3600);
    } while (r.stage != STAGE_LEAVING);
    assert_int_equal(r.supply, SUPPLY_BOTH);
    assert_true(r.alerts & ALERT_LOSING);
    assert_true(fen.state.charge > 0.03);
}

/* 11: charging voltage was read as charge, 50 to 90 % in minutes, and back at unplugging. */
static void complaint_11_charging_voltage_is_not_charge(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    double worst = 0.0;

    (void)unused;
    start(&watch, &fen, 0.5, 3.0);
    fen.adapter = 0.0;
    fen_feed(&watch, &fen, 3600, 1.0, &r);
    for (int phase = 0; phase < 2; phase++) {
        fen.adapter = phase ? 0.0 : 1.0;
        fen.power_W = phase ? 3.0 : -6.0;
        for (int i = 0; i < 900; i++) {
            fen_feed(&watch, &fen, 1, 1.0, &r);
            worst = fmax(worst, fabs(r.charge - fen.state.charge));
        }
        assert_int_equal(r.flow, phase ? FLOW_DISCHARGING : FLOW_CHARGING);
    }
    assert_true(worst < 0.08);
}

/* 13: on and off around the threshold. */
static void complaint_13_no_swinging_about_a_threshold(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    enum stage before = STAGE_AMPLE;
    int moves = 0;

    (void)unused;
    start(&watch, &fen, 0.30, 3.0);
    fen.noise_V = 0.02;
    while (fen.state.charge > 0.13) {
        fen.power_W = fen_uniform(&fen.random) < 0.5 ? 6.0 : 0.5;
        fen_feed(&watch, &fen, 20, 1.0, &r);
        moves += r.stage != before;
        before = r.stage;
    }
    assert_int_equal(r.stage, STAGE_RESERVE);
    assert_int_equal(moves, 1);
}

/* 17: the critical stage should shed load before it powers off. */
static void complaint_17_reserve_comes_before_edge_before_leaving(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;
    enum stage before = STAGE_AMPLE;

    (void)unused;
    start(&watch, &fen, 0.03, 2.0); /* low at once: still one stage after the other */
    while (before != STAGE_LEAVING) {
        fen_feed(&watch, &fen, 1, 1.0, &r);
        assert_true(r.stage == before || r.stage == before + 1);
        before = r.stage;
        assert_true(fen.t_boot_us < 600000000);
    }
}

/* 19: time in suspend was not counted. Boot time goes on, and the pack drains. */
static void complaint_19_suspend_counts(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.9, 3.0);
    fen_feed(&watch, &fen, 1800, 1.0, &r);
    fen.t_boot_us += INT64_C(3600000000);
    watch_tick(&watch, fen.t_boot_us, &r);
    assert_true(r.blind);
    assert_true(fabs(r.charge - (fen.state.charge - 3.0 / 3.95 / 3.0)) < 0.05);
}

/* 20: a device that holds the bus reads 0xFF or 0xFFFF. 21: an error code was published as 256 %.
 */
static void complaint_20_21_error_codes_are_no_voltages(void **unused) {
    static const double codes_V[] = {0.0, -1.0, 0.255, 6.5535, 65.535, 255.0, 256.0, 1e300};
    struct watch watch;
    struct report r;
    struct fen fen;
    double charge;

    (void)unused;
    start(&watch, &fen, 0.6, 3.0);
    fen_feed(&watch, &fen, 600, 1.0, &r);
    charge = r.charge;
    for (size_t i = 0; i < sizeof(codes_V) / sizeof(codes_V[0]); i++)
        assert_int_equal(fen_say(&watch, &fen, 1.0, codes_V[i], &r), WATCH_REFUSED);
    assert_int_equal(fen_say(&watch, &fen, 1.0, ENDLESS, &r), WATCH_REFUSED);
    assert_true(r.charge == charge);
    assert_int_equal(r.refused, 9);
    assert_int_equal(r.stage, STAGE_AMPLE);
}

/* 22: a gauge returned junk right after it woke. */
static void complaint_22_the_first_readings_are_only_looked_at(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.8, 3.0);
    assert_int_equal(fen_say(&watch, &fen, 1.0, 3.25, &r), WATCH_WARMUP);
    assert_true(isnan(r.charge));
    fen_feed(&watch, &fen, 300, 1.0, &r);
    assert_true(fabs(r.charge - fen.state.charge) < 0.06);
}

/* 23: one disturbance on a line switched a device off. 24: inrush at power-on tripped it. */
static void complaint_23_24_a_flicker_of_the_adapter_line(void **unused) {
    struct watch watch;
    struct report r;
    struct fen fen;

    (void)unused;
    start(&watch, &fen, 0.6, 3.0);
    for (int i = 0; i < 600; i++) {
        fen.adapter = i % 2;
        fen_feed(&watch, &fen, 1, 1.0, &r);
        assert_int_equal(r.stage, STAGE_AMPLE);
    }
    assert_true(fabs(r.charge - fen.state.charge) < 0.08);
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(complaint_01_one_dip_is_no_empty_pack),
        cmocka_unit_test(complaint_02_a_cached_reading_counts_once),
        cmocka_unit_test(complaint_03_many_readings_in_one_burst_are_one),
        cmocka_unit_test(complaint_04_charge_does_not_bounce),
        cmocka_unit_test(complaint_05_reserve_clears_when_charge_is_back),
        cmocka_unit_test(complaint_06_recovered_empty_pack_leaves_again),
        cmocka_unit_test(complaint_07_the_countdown_survives_a_restart),
        cmocka_unit_test(complaint_08_one_low_sample_at_boot),
        cmocka_unit_test(complaint_08_two_low_samples_then_nothing),
        cmocka_unit_test(complaint_09_unknown_is_not_empty),
        cmocka_unit_test(complaint_10_an_adapter_rescues_from_the_edge),
        cmocka_unit_test(complaint_10_an_adapter_that_loses_does_not),
        cmocka_unit_test(complaint_11_charging_voltage_is_not_charge),
        cmocka_unit_test(complaint_13_no_swinging_about_a_threshold),
        cmocka_unit_test(complaint_17_reserve_comes_before_edge_before_leaving),
        cmocka_unit_test(complaint_19_suspend_counts),
        cmocka_unit_test(complaint_20_21_error_codes_are_no_voltages),
        cmocka_unit_test(complaint_22_the_first_readings_are_only_looked_at),
        cmocka_unit_test(complaint_23_24_a_flicker_of_the_adapter_line),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
