/* The load of the time to come: its mean, a lasting change, bouts, bursts. Seconds of one sample.
 */
#include "core/load.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>

#include <cmocka.h>

#include "seeded.h"

static const double TYPED_S = 20.0;

typedef double power_at(int t_s);

static void run(struct load *load, power_at *power_W, int from_s, int to_s, double sd_W) {
    for (int t_s = from_s; t_s < to_s; t_s++)
        load_add(load, power_W(t_s), sd_W, power_W(t_s), 1.0);
}

static double steady(int t_s) {
    (void)t_s;
    return 3.0;
}

/* The logger of the demo: 45 s of each 300 s. */
static double logger(int t_s) {
    return t_s % 300 < 45 ? 5.2 : 2.4;
}

static double doubled(int t_s) {
    return (t_s < 7200 ? 1.0 : 2.0) * logger(t_s);
}

/* A quarter of an hour at 6 W, then as long at 2 W. */
static double bouts(int t_s) {
    return t_s % 1800 < 900 ? 6.0 : 2.0;
}

static double spike(int t_s) {
    return t_s % 100 < 2 ? 30.0 : 2.0;
}

static void what_was_typed_gives_way(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 2.0, TYPED_S, 2.0);
    assert_true(fabs(load_mean_W(&load) - 2.0) < 1e-9);
    run(&load, steady, 0, 600, 0.1);
    assert_true(fabs(load_mean_W(&load) - 3.0) < 0.1);
    run(&load, steady, 600, 7200, 0.1);
    assert_true(fabs(load_mean_W(&load) - 3.0) < 0.01);
}

static void a_lasting_change_is_followed(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 3.0, TYPED_S, 3.0);
    run(&load, doubled, 0, 7200, 0.3);
    assert_true(fabs(load_mean_W(&load) - 2.82) < 0.03);
    run(&load, doubled, 7200, 7200 + 1200, 0.3);
    assert_true(fabs(load_mean_W(&load) - 5.64) < 0.28);
}

/* The first bout may look like a change; after some of them they are how this load is. */
static void bouts_are_part_of_the_mean(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 4.0, TYPED_S, 4.0);
    run(&load, bouts, 0, 3 * 3600, 0.3);
    for (int t_s = 3 * 3600; t_s < 6 * 3600; t_s += 300) {
        run(&load, bouts, t_s, t_s + 300, 0.3);
        assert_true(fabs(load_mean_W(&load) - 4.0) < 1.0);
    }
    assert_true(load_sd_W(&load, 900.0) > 1.5);       /* the next bout is anybody's guess */
    assert_true(load_sd_W(&load, 12 * 3600.0) < 0.8); /* the mean of many is not */
}

static void a_burst_is_what_holds_for_three_samples(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 2.0, TYPED_S, 2.0);
    run(&load, spike, 0, 3600, 0.1);
    assert_true(load_burst_W(&load) < 1.0);
    load_init(&load, 3.0, TYPED_S, 3.0);
    run(&load, logger, 0, 3600, 0.1);
    assert_true(load_burst_W(&load) > 1.8 && load_burst_W(&load) < 2.9);
    run(&load, steady, 3600, 3600 + 6 * 3600, 0.1);
    assert_true(load_burst_W(&load) < 0.2);
}

/* The charge is off, so all drawn power is: a burst is not. */
static void a_burst_is_reckoned_from_its_own_mean(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 3.0, TYPED_S, 3.0);
    for (int t_s = 0; t_s < 3600; t_s++)
        load_add(&load, logger(t_s), 0.1, logger(t_s) + 4.0, 1.0);
    assert_true(load_burst_W(&load) > 1.8 && load_burst_W(&load) < 4.5);
    assert_true(fabs(load_mean_W(&load) - 2.82) < 0.05);
}

static void a_long_gap_is_one_block(void **unused) {
    struct load load;

    (void)unused;
    load_init(&load, 3.0, TYPED_S, 3.0);
    run(&load, steady, 0, 3600, 0.1);
    load_add(&load, 3.2, 0.1, 3.2, 36000.0);
    assert_true(load_mean_W(&load) > 3.0 && load_mean_W(&load) <= 3.2);
    assert_true(isfinite(load_sd_W(&load, 1.0)) && load.weight_s <= 4.0 * 3600.0);
}

static void property_figures_stay_figures(void **unused) {
    gsl_rng *random __attribute__((cleanup(seeded_free_p))) = seeded_new("load");

    (void)unused;
    for (int trial = 0; trial < 200; trial++) {
        struct load load;

        load_init(&load, gsl_rng_uniform(random) < 0.2 ? 0.0 : 3.0, 1.0, 3.0);
        for (int i = 0; i < 500; i++) {
            double power_W =
                gsl_rng_uniform(random) < 0.3 ? 0.0 : 40 * gsl_rng_uniform(random) - 10;
            double sd_W = pow(10.0, 12.0 * gsl_rng_uniform(random) - 6.0);

            load_add(&load, power_W, sd_W, power_W, pow(10.0, 6.0 * gsl_rng_uniform(random) - 2.0));
            assert_true(fabs(load_mean_W(&load)) <= 40.0);
            assert_true(load_sd_W(&load, 1.0) >= 0.0 && load_sd_W(&load, 1e6) < 100.0);
            assert_true(load_burst_W(&load) >= 0.0 && load_burst_W(&load) <= 60.0);
        }
    }
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(what_was_typed_gives_way),
        cmocka_unit_test(a_lasting_change_is_followed),
        cmocka_unit_test(bouts_are_part_of_the_mean),
        cmocka_unit_test(a_burst_is_what_holds_for_three_samples),
        cmocka_unit_test(a_burst_is_reckoned_from_its_own_mean),
        cmocka_unit_test(a_long_gap_is_one_block),
        cmocka_unit_test(property_figures_stay_figures),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
