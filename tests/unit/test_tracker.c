/* The estimator: one step by hand, then over an exact model with unknown start and load, then what
 * no input may do to it. Accuracy on measured logs is the business of the replay tests. */
#include "core/tracker.h"
#include "fen.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>

#include <cmocka.h>

static struct tracker_prior blank(void) {
    return (struct tracker_prior){UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN,
                                  UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN};
}

/* Bursts of 8 W over 2.4 W idle: 45 s of each 300 s. */
static double burst_W(int t_s) {
    return t_s % 300 < 45 ? 8.0 : 2.4;
}

struct trial {
    struct fen fen;
    struct tracker tracker;
    struct tracker_estimate now;
};

static void trial_start(struct trial *t, double charge, const struct tracker_prior *prior,
                        double typical_W) {
    struct watch_config config = fen_config();

    t->fen = fen_pack(&config, charge, 2.4);
    tracker_init(&t->tracker, typical_W, 25.0, prior);
}

static void trial_run(struct trial *t, int from_s, int to_s, bool current) {
    for (int s = from_s; s < to_s && t->fen.state.charge > 0.02; s++) {
        struct sample sample;

        t->fen.power_W = burst_W(s);
        sample = fen_run(&t->fen, 1.0);
        tracker_predict(&t->tracker, &t->fen.cell, 1.0);
        tracker_update(&t->tracker, &t->fen.cell, sample.pack[0].voltage_V,
                       current ? t->fen.current_A : UNKNOWN, 25.0);
    }
    tracker_read(&t->tracker, &t->fen.cell, &t->now);
}

/* Scalar Kalman update with variance 0.01, slope 0.8 V: the worked step of the reference sheet,
 * section 5 (derived there: K = 1.230769 at R = 1e-4), here with the tracker's own noise. A cell of
 * no resistance and one slope leaves only charge and bias in the innovation. */
static void one_step_agrees_with_the_scalar_filter(void **unused) {
    static const double charge[] = {0, 0.5, 1}, ocv_V[] = {3.4, 3.8, 4.2};
    struct cell_table table = fen_table();
    struct tracker_prior prior = blank();
    struct tracker_estimate now;
    struct tracker t;
    struct cell cell;
    double noise_var = 0.004 * 0.004, bias_var = 1e-8, S, gain;

    (void)unused;
    table.voltage_sd_V = 1e-4;
    for (size_t i = 0; i < table.n_res; i++)
        table.r0_ohm[i] = table.r1_ohm[i] = table.r2_ohm[i] = 1e-9;
    assert_int_equal(ocv_init(&table.ocv, charge, ocv_V, 3), 0);
    assert_int_equal(cell_init(&cell, &table, 1, 3.0), 0);
    prior.charge = 0.5;
    prior.charge_sd = 0.1;
    prior.u1_V = prior.u2_V = 0.0;
    tracker_init(&t, 1.0, 25.0, &prior);
    t.age_s = 1e6; /* long awake */
    tracker_update(&t, &cell, 3.81, UNKNOWN, 25.0);
    tracker_read(&t, &cell, &now);
    /* the pairs start with a spread of 1 mV each */
    S = 0.01 * 0.64 + noise_var + bias_var + 2e-6;
    gain = 0.01 * 0.8 / S;
    assert_true(fabs(now.charge - (0.5 + gain * 0.01)) < 1e-9);
    assert_true(fabs(now.charge_sd - sqrt(0.01 - gain * 0.8 * 0.01)) < 1e-9);
}

static void finds_the_charge_from_voltage_alone(void **unused) {
    static const double starts[] = {0.95, 0.7, 0.5}, typical_W[] = {2.3, 3.24, 4.2};

    (void)unused;
    for (size_t s = 0; s < 3; s++)
        for (size_t l = 0; l < 3; l++) {
            struct tracker_prior prior = blank();
            struct trial t;

            prior.charge = starts[s] > 0.6 ? starts[s] - 0.4 : starts[s] + 0.4;
            prior.charge_sd = 0.3;
            trial_start(&t, starts[s], &prior, typical_W[l]);
            trial_run(&t, 0, 900, false);
            assert_true(fabs(t.now.charge - t.fen.state.charge) < 0.05);
            trial_run(&t, 900, 5400, false);
            assert_true(fabs(t.now.charge - t.fen.state.charge) < 0.03);
            assert_true(fabs(t.now.power_mean_W - 3.24) < 0.7);
        }
}

static void finds_it_closer_with_a_current(void **unused) {
    struct tracker_prior prior = blank();
    struct trial t;

    (void)unused;
    prior.charge = 0.3;
    prior.charge_sd = 0.3;
    trial_start(&t, 0.8, &prior, 3.0);
    trial_run(&t, 0, 600, true);
    assert_true(fabs(t.now.charge - t.fen.state.charge) < 0.015);
    trial_run(&t, 600, 7200, true);
    assert_true(fabs(t.now.charge - t.fen.state.charge) < 0.01);
    assert_true(fabs(t.now.current_A - t.fen.current_A) < 0.02);
}

static void learns_an_aged_resistance_with_a_current(void **unused) {
    struct tracker_prior prior = blank();
    struct trial t;

    (void)unused;
    trial_start(&t, 0.9, &prior, 3.0);
    for (size_t i = 0; i < t.fen.cell.table.n_res; i++) {
        t.fen.cell.table.r0_ohm[i] *= 1.5;
        t.fen.cell.table.r1_ohm[i] *= 1.5;
        t.fen.cell.table.r2_ohm[i] *= 1.5;
    }
    for (int s = 0; s < 5400; s++) {
        struct watch_config config = fen_config();
        struct sample sample;

        t.fen.power_W = burst_W(s);
        sample = fen_run(&t.fen, 1.0);
        tracker_predict(&t.tracker, &config.pack[0].cell, 1.0);
        tracker_update(&t.tracker, &config.pack[0].cell, sample.pack[0].voltage_V, t.fen.current_A,
                       25.0);
    }
    tracker_read(&t.tracker, &t.fen.cell, &t.now);
    assert_true(fabs(t.now.scale - 1.5) < 0.15);
}

/* The 95 % band holds the truth: 60 packs with starts, loads and curve errors drawn at random. */
static void the_band_holds_the_truth(void **unused) {
    uint64_t random = 20261201;
    int inside = 0, n = 60;

    (void)unused;
    printf("band seed %llu\n", (unsigned long long)random);
    for (int i = 0; i < n; i++) {
        struct tracker_prior prior = blank();
        double error_V, charge = 0.4 + 0.55 * fen_uniform(&random);
        struct trial t;

        trial_start(&t, charge, &prior, 3.0 * (0.7 + 0.6 * fen_uniform(&random)));
        error_V = t.fen.cell.table.voltage_sd_V * fen_normal(&random);
        for (int s = 0; s < 2400; s++) {
            struct sample sample;

            t.fen.power_W = burst_W(s);
            sample = fen_run(&t.fen, 1.0);
            tracker_predict(&t.tracker, &t.fen.cell, 1.0);
            tracker_update(&t.tracker, &t.fen.cell, sample.pack[0].voltage_V + error_V, UNKNOWN,
                           25.0);
        }
        tracker_read(&t.tracker, &t.fen.cell, &t.now);
        inside += fabs(t.now.charge - t.fen.state.charge) <= 1.96 * t.now.charge_sd;
    }
    assert_in_range(inside, n * 88 / 100, n);
}

static void a_full_pack_stays_at_full(void **unused) {
    struct tracker_prior prior = blank();
    struct trial t;

    (void)unused;
    trial_start(&t, 1.0, &prior, 6.0); /* expects more sag than there is */
    trial_run(&t, 0, 60, false);
    assert_true(t.now.charge > 0.93 && t.now.charge <= 1.0);
}

static void assert_sound(const struct tracker *t) {
    for (int i = 0; i < TRACK_N; i++) {
        assert_true(isfinite(t->x[i]));
        assert_true(t->P[i][i] >= 0.0 && isfinite(t->P[i][i]));
        for (int j = 0; j < i; j++) {
            assert_true(t->P[i][j] == t->P[j][i]);
            assert_true(t->P[i][j] * t->P[i][j] <= t->P[i][i] * t->P[j][j] * (1.0 + 1e-6));
        }
    }
}

/* Near the steep end a wild reading would be fitted best by another charge. */
static void one_wild_reading_moves_no_charge(void **unused) {
    static const double wild_V[] = {2.6, 3.0, 4.2, 4.4};

    (void)unused;
    for (size_t i = 0; i < 4; i++) {
        struct tracker_prior prior = blank();
        struct trial t;
        double before;

        trial_start(&t, 0.35, &prior, 3.0);
        trial_run(&t, 0, 1800, false);
        before = t.now.charge;
        for (int again = 0; again < 3; again++) {
            tracker_predict(&t.tracker, &t.fen.cell, 1.0);
            tracker_update(&t.tracker, &t.fen.cell, wild_V[i], UNKNOWN, 25.0);
        }
        trial_run(&t, 1800, 1860, false);
        assert_true(fabs(t.now.charge - before) < 0.02);
    }
}

/* By voltage alone a charger that nobody sees would explain it as well. */
static void a_charge_that_every_reading_contradicts_is_read_anew(void **unused) {
    struct tracker_prior prior = blank();
    struct trial t;

    (void)unused;
    prior.charge = 0.12;
    prior.charge_sd = 0.004;
    trial_start(&t, 0.7, &prior, 3.0);
    trial_run(&t, 0, 1200, true);
    assert_true(fabs(t.now.charge - t.fen.state.charge) < 0.08);
}

static void property_no_input_breaks_it(void **unused) {
    uint64_t random = 7;

    (void)unused;
    printf("tracker property seed %llu\n", (unsigned long long)random);
    for (int round = 0; round < 60; round++) {
        struct tracker_prior prior = blank();
        struct trial t;

        trial_start(&t, 0.5, &prior, 3.0);
        for (int s = 0; s < 400; s++) {
            double dt_s = pow(10.0, -3.0 + 6.0 * fen_uniform(&random));
            double voltage_V = 1.5 + 3.0 * fen_uniform(&random);
            bool told = fen_uniform(&random) < 0.4;

            tracker_predict(&t.tracker, &t.fen.cell, dt_s);
            tracker_update(&t.tracker, &t.fen.cell, voltage_V,
                           told ? 60.0 * (fen_uniform(&random) - 0.5) : UNKNOWN,
                           -40.0 + 120.0 * fen_uniform(&random));
            assert_sound(&t.tracker);
            tracker_read(&t.tracker, &t.fen.cell, &t.now);
            assert_true(t.now.charge >= 0.0 && t.now.charge <= 1.0);
        }
    }
}

static void spread_grows_while_nothing_is_heard(void **unused) {
    struct tracker_prior prior = blank();
    struct trial t;
    double before;

    (void)unused;
    trial_start(&t, 0.9, &prior, 3.0);
    trial_run(&t, 0, 1800, false);
    before = t.now.charge_sd;
    for (int i = 0; i < 60; i++)
        tracker_predict(&t.tracker, &t.fen.cell, 60.0);
    tracker_read(&t.tracker, &t.fen.cell, &t.now);
    assert_true(t.now.charge_sd > 1.5 * before);
    assert_sound(&t.tracker);
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(one_step_agrees_with_the_scalar_filter),
        cmocka_unit_test(finds_the_charge_from_voltage_alone),
        cmocka_unit_test(finds_it_closer_with_a_current),
        cmocka_unit_test(learns_an_aged_resistance_with_a_current),
        cmocka_unit_test(the_band_holds_the_truth),
        cmocka_unit_test(a_full_pack_stays_at_full),
        cmocka_unit_test(one_wild_reading_moves_no_charge),
        cmocka_unit_test(a_charge_that_every_reading_contradicts_is_read_anew),
        cmocka_unit_test(property_no_input_breaks_it),
        cmocka_unit_test(spread_grows_while_nothing_is_heard),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
