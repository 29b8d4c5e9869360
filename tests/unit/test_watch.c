/* The pipeline with several packs, over silence, and over restarts. */
#include "core/watch_report.h"
#include "fen.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>

#include <cmocka.h>

static struct watch_config two_packs(double carries_W) {
    struct watch_config config = fen_config();

    config.n_packs = 2;
    config.pack[1] = config.pack[0];
    memcpy(config.pack[1].name, "spare", sizeof("spare"));
    config.pack[0].carries_W = config.pack[1].carries_W = carries_W;
    return config;
}

/* Both packs on one sample; a NaN voltage leaves a pack out. */
static void feed_both(struct watch *watch, struct fen *a, struct fen *b, int n, struct report *r) {
    for (int i = 0; i < n; i++) {
        struct sample s = fen_run(a, 1.0), other = fen_run(b, 1.0);

        s.pack[1] = other.pack[0];
        watch_feed(watch, &s, r);
    }
}

static void one_empty_pack_of_two_is_no_end(void **unused) {
    struct watch_config config = two_packs(ENDLESS);
    struct watch watch;
    struct report r;
    struct fen a = fen_pack(&config, 0.05, 1.0), b = fen_pack(&config, 0.8, 1.5);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    feed_both(&watch, &a, &b, 600, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(r.pack[0].spent && !r.pack[1].spent);
    assert_true(r.alerts & ALERT_SPENT);
    assert_true(r.left_s > 3600.0);
}

static void one_empty_pack_is_the_end_when_the_other_cannot_carry(void **unused) {
    struct watch_config config = two_packs(2.0);
    struct watch watch;
    struct report r;
    struct fen a = fen_pack(&config, 0.05, 1.5), b = fen_pack(&config, 0.8, 1.5);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    feed_both(&watch, &a, &b, 600, &r);
    assert_int_equal(r.stage, STAGE_LEAVING);
    assert_int_equal(r.cause_pack, 0);
}

static void unit_time_is_until_the_rest_cannot_carry(void **unused) {
    struct watch_config config = two_packs(ENDLESS);
    struct watch watch;
    struct report r;
    struct fen a = fen_pack(&config, 0.5, 1.5), b = fen_pack(&config, 0.9, 1.5);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    feed_both(&watch, &a, &b, 3600, &r);
    assert_true(r.left_s > r.pack[0].left_s);
    assert_true(r.left_s < r.pack[1].left_s);
    assert_true(r.left_least_s < r.left_s);
    assert_true(fabs(r.charge - 0.5 * (r.pack[0].charge + r.pack[1].charge)) < 1e-9);
}

static void a_pack_never_heard_is_not_relied_on_nor_empty(void **unused) {
    struct watch_config config = two_packs(ENDLESS);
    struct watch watch;
    struct report r;
    struct fen a = fen_pack(&config, 0.6, 2.0), mute = fen_pack(&config, 0.6, 2.0);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    mute.noise_V = UNKNOWN;
    feed_both(&watch, &a, &mute, 600, &r);
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(r.blind);
    assert_true(r.pack[0].known && !r.pack[1].known && isnan(r.pack[1].charge));
    a.state.charge = 0.03;
    feed_both(&watch, &a, &mute, 1500, &r);
    assert_int_equal(r.stage, STAGE_LEAVING);
}

static void floor_of_one_pack_counts_only_when_it_matters(void **unused) {
    struct watch_config config = two_packs(ENDLESS);
    struct watch watch;
    struct report r;
    struct fen a = fen_pack(&config, 0.6, 2.0), b = fen_pack(&config, 0.6, 2.0);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    feed_both(&watch, &a, &b, 120, &r);
    for (int i = 0; i < 10; i++) {
        struct sample s = fen_run(&a, 1.0), other = fen_run(&b, 1.0);

        s.pack[1] = other.pack[0];
        s.pack[0].voltage_V = 2.8;
        watch_feed(&watch, &s, &r);
    }
    assert_int_equal(r.stage, STAGE_AMPLE);
}

static void silence_makes_blind_and_the_model_goes_on_to_the_end(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.6, 3.0);
    double at_reserve = 0.0;
    enum stage before = STAGE_AMPLE;

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 1800, 1.0, &r);
    for (int i = 0; i < 31; i++)
        watch_tick(&watch, f.t_boot_us += 1000000, &r);
    assert_true(r.blind && (r.alerts & ALERT_SILENT));
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(isnan(r.pack[0].terminal_V) && fabs(r.charge - f.state.charge) < 0.05);
    while (r.stage != STAGE_LEAVING && f.t_boot_us < INT64_C(40000) * 1000000) {
        fen_run(&f, 10.0);
        watch_tick(&watch, f.t_boot_us, &r);
        if (r.stage == STAGE_RESERVE && before == STAGE_AMPLE)
            at_reserve = f.state.charge;
        before = r.stage;
    }
    assert_int_equal(r.stage, STAGE_LEAVING);
    assert_int_equal(r.cause, CAUSE_BLIND);
    assert_true(at_reserve > 0.25);     /* cautious: before the real charge is there */
    assert_true(f.state.charge > 0.05); /* and it left while there was charge */
    assert_true(f.state.charge < 0.35); /* but not with a third in the pack */
}

/* The gauge falls silent while the pack charges; then the adapter is pulled, unseen. */
static void a_charger_that_cannot_be_seen_is_not_relied_on(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.4, -6.0);

    (void)unused;
    f.adapter = 1.0;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 1200, 1.0, &r);
    assert_int_equal(r.flow, FLOW_CHARGING);
    f.power_W = 3.0;
    while (f.state.charge > 0.06 && r.stage != STAGE_LEAVING) {
        fen_run(&f, 10.0);
        watch_tick(&watch, f.t_boot_us, &r);
    }
    assert_int_equal(r.stage, STAGE_LEAVING);
    assert_int_not_equal(r.supply, SUPPLY_ADAPTER);
}

/* A converter that is smaller than load and bursts as estimated: said, but no reason to stop. */
static void an_overload_is_no_end(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.7, 3.0);

    (void)unused;
    config.pack[0].carries_W = 2.5;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 1800, 1.0, &r);
    assert_true(r.alerts & ALERT_OVERLOAD);
    assert_int_equal(r.stage, STAGE_AMPLE);
    assert_true(r.left_s > 3600.0);
}

static void the_gauge_returns(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.6, 3.0);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 600, 1.0, &r);
    for (int i = 0; i < 600; i++) {
        fen_run(&f, 1.0);
        watch_tick(&watch, f.t_boot_us, &r);
    }
    assert_true(r.blind);
    fen_feed(&watch, &f, 4, 1.0, &r);
    assert_false(r.blind);
    assert_true(fabs(r.charge - f.state.charge) < 0.05);
    assert_true(r.age_s == 0.0);
}

static void memory_makes_the_next_start_sharp(void **unused) {
    struct watch_config config = fen_config();
    struct watch_memory memory;
    struct watch first, second, fresh;
    struct report r, without;
    struct fen f = fen_pack(&config, 0.9, 3.0), copy;

    (void)unused;
    assert_int_equal(watch_init(&first, &config, 0), 0);
    fen_feed(&first, &f, 7200, 1.0, &r);
    watch_remember(&first, &memory);
    assert_int_equal(watch_init(&second, &config, f.t_boot_us), 0);
    assert_int_equal(watch_init(&fresh, &config, f.t_boot_us), 0);
    watch_restore(&second, &memory, 0.0, true);
    copy = f;
    fen_feed(&second, &f, 5, 1.0, &r);
    fen_feed(&fresh, &copy, 5, 1.0, &without);
    assert_true(fabs(r.charge - f.state.charge) < 0.02);
    assert_true(r.charge_high - r.charge_low < 0.6 * (without.charge_high - without.charge_low));
    assert_true(fabs(r.power_mean_W - 3.0) < 0.4);
}

static void a_broken_memory_is_not_taken(void **unused) {
    static const double wrong[] = {(double)NAN, -3.0, 1e300, (double)INFINITY};
    struct watch_config config = fen_config();
    struct watch_memory memory;
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.7, 3.0);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    watch_remember(&watch, &memory); /* nothing learned yet: all unknown */
    for (size_t i = 0; i < 4; i++) {
        memory.pack[0].charge = memory.pack[0].charge_sd = memory.pack[0].u1_V = wrong[i];
        memory.pack[0].power_W = memory.pack[0].power_sd_W = memory.pack[0].u2_V = wrong[i];
        assert_int_equal(watch_init(&watch, &config, f.t_boot_us), 0);
        watch_restore(&watch, &memory, 10.0, false);
        fen_feed(&watch, &f, 120, 1.0, &r);
        assert_true(fabs(r.charge - f.state.charge) < 0.1);
    }
}

static void a_pack_charged_while_away_is_seen(void **unused) {
    struct watch_config config = fen_config();
    struct watch_memory memory;
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.5, 3.0);

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 3600, 1.0, &r);
    watch_remember(&watch, &memory);
    f.state = (struct cell_state){0.95, 0.0, 0.0};
    assert_int_equal(watch_init(&watch, &config, f.t_boot_us), 0);
    watch_restore(&watch, &memory, 36000.0, false);
    fen_feed(&watch, &f, 900, 1.0, &r);
    assert_true(fabs(r.charge - f.state.charge) < 0.08);
}

static void the_rail_tells_the_adapter(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.6, 3.0);

    (void)unused;
    config.rail_adapter_V = 5.1;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    for (int i = 0; i < 600; i++) {
        struct sample s;

        f.power_W = i < 300 ? 3.0 : -4.0;
        s = fen_run(&f, 1.0);
        s.rail_V = i < 300 ? 4.97 : 5.2;
        watch_feed(&watch, &s, &r);
        if (i == 299)
            assert_int_equal(r.supply, SUPPLY_PACK);
    }
    assert_int_equal(r.supply, SUPPLY_ADAPTER);
    assert_int_equal(r.flow, FLOW_CHARGING);
    assert_true(isfinite(r.full_s) && r.left_s == ENDLESS);
    assert_true(r.rail_V == 5.2);
}

static void a_late_sample_is_not_taken(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;
    struct report r;
    struct fen f = fen_pack(&config, 0.6, 3.0);
    struct sample s;
    double charge;

    (void)unused;
    assert_int_equal(watch_init(&watch, &config, 0), 0);
    fen_feed(&watch, &f, 100, 1.0, &r);
    charge = r.charge;
    s = fen_silence(f.t_boot_us - 1);
    s.pack[0].voltage_V = 3.0;
    assert_int_equal(watch_feed(&watch, &s, &r), WATCH_LATE);
    assert_true(r.charge == charge && r.t_boot_us == f.t_boot_us);
    s = fen_silence(f.t_boot_us + 1000000);
    assert_int_equal(watch_feed(&watch, &s, &r), WATCH_EMPTY);
}

static void a_configuration_out_of_range_is_refused(void **unused) {
    struct watch_config config = fen_config();
    struct watch watch;

    (void)unused;
    config.n_packs = 0;
    assert_int_equal(watch_init(&watch, &config, 0), WATCH_E_CONFIG);
    config.n_packs = PACKS_MAX + 1;
    assert_int_equal(watch_init(&watch, &config, 0), WATCH_E_CONFIG);
    config = fen_config();
    config.ladder.floor_samples = 2;
    assert_int_equal(watch_init(&watch, &config, 0), WATCH_E_CONFIG);
    config = fen_config();
    config.ladder.grace_s = UNKNOWN;
    assert_int_equal(watch_init(&watch, &config, 0), WATCH_E_CONFIG);
    config = fen_config();
    config.pack[0].typical_W = 0.0;
    assert_int_equal(watch_init(&watch, &config, 0), WATCH_E_CONFIG);
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(one_empty_pack_of_two_is_no_end),
        cmocka_unit_test(one_empty_pack_is_the_end_when_the_other_cannot_carry),
        cmocka_unit_test(unit_time_is_until_the_rest_cannot_carry),
        cmocka_unit_test(a_pack_never_heard_is_not_relied_on_nor_empty),
        cmocka_unit_test(floor_of_one_pack_counts_only_when_it_matters),
        cmocka_unit_test(silence_makes_blind_and_the_model_goes_on_to_the_end),
        cmocka_unit_test(a_charger_that_cannot_be_seen_is_not_relied_on),
        cmocka_unit_test(an_overload_is_no_end),
        cmocka_unit_test(the_gauge_returns),
        cmocka_unit_test(memory_makes_the_next_start_sharp),
        cmocka_unit_test(a_broken_memory_is_not_taken),
        cmocka_unit_test(a_pack_charged_while_away_is_seen),
        cmocka_unit_test(the_rail_tells_the_adapter),
        cmocka_unit_test(a_late_sample_is_not_taken),
        cmocka_unit_test(a_configuration_out_of_range_is_refused),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
