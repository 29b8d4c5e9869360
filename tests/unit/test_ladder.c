/* The ladder alone: every rule, its confirmation, its way back. Times in seconds of boot time. */
#include "core/ladder.h"
#include "util/real.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>

#include <cmocka.h>

static const struct ladder_config CONFIG = {.reserve_charge = 0.25,
                                            .reserve_left_s = 3600.0,
                                            .keep_s = 120.0,
                                            .confirm_s = 30.0,
                                            .floor_confirm_s = 3.0,
                                            .floor_samples = 3,
                                            .grace_s = 60.0,
                                            .margin_charge = 0.03,
                                            .margin_left = 0.2,
                                            .margin_V = 0.05};

/* A pack with half its charge and hours to go. */
static struct ladder_input well(void) {
    return (struct ladder_input){.charge = 0.5,
                                 .left_s = 20000.0,
                                 .left_least_s = 15000.0,
                                 .cutoff = CAUSE_NONE,
                                 .cutoff_pack = -1,
                                 .clear = true,
                                 .new_sample = true,
                                 .floor_pack = -1};
}

static struct ladder_input at_cutoff(enum cause cause) {
    struct ladder_input in = well();

    in.charge = 0.07;
    in.left_s = in.left_least_s = 0.0;
    in.cutoff = cause;
    in.cutoff_pack = 0;
    in.clear = false;
    return in;
}

/* Steps once a second from *t_s for so many seconds. */
static enum stage run(struct ladder *ladder, struct ladder_input in, int *t_s, int seconds) {
    for (int i = 0; i < seconds; i++) {
        in.t_boot_us = (int64_t)++ * t_s * 1000000;
        ladder_step(ladder, &in);
    }
    return ladder->stage;
}

static void nothing_happens_while_all_is_well(void **unused) {
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, well(), &t_s, 10000), STAGE_AMPLE);
    assert_int_equal(l.cause, CAUSE_NONE);
    assert_true(isnan(ladder_grace_left_s(&l, 10000000)));
}

static void unknown_figures_move_nothing(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    in.charge = in.left_s = in.left_least_s = UNKNOWN;
    in.clear = false;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, in, &t_s, 100000), STAGE_AMPLE);
    in.blind = true;
    in.new_sample = false;
    assert_int_equal(run(&l, in, &t_s, 100000), STAGE_AMPLE);
}

static void unknown_figures_do_not_lift_either(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    in.charge = 0.2;
    assert_int_equal(run(&l, in, &t_s, 40), STAGE_RESERVE);
    in.charge = in.left_s = UNKNOWN;
    assert_int_equal(run(&l, in, &t_s, 1000), STAGE_RESERVE);
}

static void reserve_by_charge_and_by_time(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    in.charge = 0.25;
    assert_int_equal(run(&l, in, &t_s, 30), STAGE_AMPLE);
    assert_int_equal(run(&l, in, &t_s, 1), STAGE_RESERVE);
    assert_int_equal(l.cause, CAUSE_CHARGE);
    t_s = 0;
    ladder_init(&l, &CONFIG, 0);
    in = well();
    in.left_s = 3599.0;
    assert_int_equal(run(&l, in, &t_s, 31), STAGE_RESERVE);
    assert_int_equal(l.cause, CAUSE_LEFT);
}

static void a_condition_must_hold_without_a_break(void **unused) {
    struct ladder_input low = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    low.charge = 0.2;
    ladder_init(&l, &CONFIG, 0);
    for (int i = 0; i < 50; i++) {
        run(&l, low, &t_s, 29);
        assert_int_equal(run(&l, well(), &t_s, 1), STAGE_AMPLE);
    }
}

static void time_alone_confirms_nothing(void **unused) {
    struct ladder_input low = at_cutoff(CAUSE_CHARGE);
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    run(&l, low, &t_s, 2); /* two samples */
    low.new_sample = false;
    assert_int_equal(run(&l, low, &t_s, 10000), STAGE_AMPLE);
    low.new_sample = true;
    assert_int_equal(run(&l, low, &t_s, 1), STAGE_RESERVE);
}

static void a_time_that_stands_confirms_nothing(void **unused) {
    struct ladder_input low = at_cutoff(CAUSE_CHARGE);
    struct ladder l;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    low.t_boot_us = 1000000;
    for (int i = 0; i < 1000; i++)
        assert_int_equal(ladder_step(&l, &low), STAGE_AMPLE);
}

static void down_one_stage_at_a_time_and_leaving_is_final(void **unused) {
    static const enum cause causes[] = {CAUSE_CHARGE, CAUSE_REST, CAUSE_BLIND};

    (void)unused;
    for (size_t i = 0; i < 3; i++) {
        struct ladder_input low = at_cutoff(causes[i]);
        struct ladder l;
        int t_s = 0;

        ladder_init(&l, &CONFIG, 0);
        assert_int_equal(run(&l, low, &t_s, 31), STAGE_RESERVE);
        assert_int_equal(run(&l, low, &t_s, 1), STAGE_EDGE);
        assert_int_equal(l.cause, causes[i]);
        assert_int_equal(l.cause_pack, 0);
        assert_true(ladder_grace_left_s(&l, (int64_t)t_s * 1000000) == 60.0);
        assert_int_equal(run(&l, low, &t_s, 59), STAGE_EDGE);
        assert_true(ladder_grace_left_s(&l, (int64_t)t_s * 1000000) == 1.0);
        assert_int_equal(run(&l, low, &t_s, 1), STAGE_LEAVING);
        assert_int_equal(run(&l, well(), &t_s, 10000), STAGE_LEAVING);
    }
}

static void keep_needs_least_and_a_near_end(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    in.left_least_s = 0.0; /* a wide start: hours expected, nothing sure */
    assert_int_equal(run(&l, in, &t_s, 1000), STAGE_AMPLE);
    in.left_s = 500.0;
    in.left_least_s = 119.0;
    assert_int_equal(run(&l, in, &t_s, 32), STAGE_EDGE);
    assert_int_equal(l.cause, CAUSE_KEEP);
}

static void blind_needs_no_samples(void **unused) {
    struct ladder_input in = at_cutoff(CAUSE_BLIND);
    struct ladder l;
    int t_s = 0;

    (void)unused;
    in.blind = true;
    in.new_sample = false;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, in, &t_s, 32), STAGE_EDGE);
    assert_int_equal(run(&l, in, &t_s, 60), STAGE_LEAVING);
}

static void floor_goes_at_once_from_any_stage(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    in.under_floor = true;
    in.floor_pack = 1;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, in, &t_s, 3), STAGE_AMPLE);
    assert_int_equal(run(&l, in, &t_s, 1), STAGE_LEAVING);
    assert_int_equal(l.cause, CAUSE_FLOOR);
    assert_int_equal(l.cause_pack, 1);
}

static void floor_needs_distinct_samples_in_a_row(void **unused) {
    struct ladder_input under = well(), tick = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    under.under_floor = tick.under_floor = true;
    tick.new_sample = false;
    ladder_init(&l, &CONFIG, 0);
    run(&l, under, &t_s, 2);
    assert_int_equal(run(&l, tick, &t_s, 1000), STAGE_AMPLE);
    run(&l, well(), &t_s, 1);
    for (int i = 0; i < 200; i++) {
        run(&l, under, &t_s, 3);
        assert_int_equal(run(&l, well(), &t_s, 1), STAGE_AMPLE);
    }
}

static void an_adapter_that_lifts_rescues_from_edge(void **unused) {
    struct ladder_input low = at_cutoff(CAUSE_CHARGE), lifted;
    struct ladder l;
    int t_s = 0;

    (void)unused;
    lifted = low;
    lifted.lifted = true;
    lifted.left_s = lifted.left_least_s = ENDLESS;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, low, &t_s, 32), STAGE_EDGE);
    assert_int_equal(run(&l, lifted, &t_s, 30), STAGE_EDGE);
    assert_int_equal(run(&l, lifted, &t_s, 1), STAGE_RESERVE);
    assert_int_equal(run(&l, lifted, &t_s, 10000), STAGE_RESERVE); /* charge is still low */
    assert_int_equal(run(&l, low, &t_s, 31), STAGE_EDGE);          /* it is gone: all anew */
}

static void an_adapter_late_in_the_grace_holds_the_order_back(void **unused) {
    struct ladder_input low = at_cutoff(CAUSE_CHARGE), lifted;
    struct ladder l;
    int t_s = 0;

    (void)unused;
    lifted = low;
    lifted.lifted = true;
    ladder_init(&l, &CONFIG, 0);
    run(&l, low, &t_s, 32 + 59);
    assert_int_equal(l.stage, STAGE_EDGE);
    assert_int_equal(run(&l, lifted, &t_s, 40), STAGE_RESERVE);
}

/* A condition that shows in one of many samples holds the stage in edge, and orders nothing. */
static void a_flicker_after_the_grace_orders_nothing(void **unused) {
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    assert_int_equal(run(&l, at_cutoff(CAUSE_REST), &t_s, 70), STAGE_EDGE);
    for (int i = 0; i < 20; i++) {
        struct ladder_input near = well();

        near.clear = false;
        assert_int_equal(run(&l, near, &t_s, 9), STAGE_EDGE);
        assert_int_equal(run(&l, at_cutoff(CAUSE_REST), &t_s, 1), STAGE_EDGE);
    }
    assert_int_equal(run(&l, at_cutoff(CAUSE_REST), &t_s, 31), STAGE_LEAVING);
}

static void a_resumed_countdown_is_not_confirmed_anew(void **unused) {
    struct ladder l;
    int t_s = 100;

    (void)unused;
    ladder_init(&l, &CONFIG, 100000000);
    ladder_resume(&l, STAGE_EDGE, 50000000, CAUSE_CHARGE);
    assert_int_equal(run(&l, at_cutoff(CAUSE_CHARGE), &t_s, 9), STAGE_EDGE);
    assert_int_equal(run(&l, at_cutoff(CAUSE_CHARGE), &t_s, 1), STAGE_LEAVING);
}

static void the_way_up_has_a_margin(void **unused) {
    struct ladder_input in = well();
    struct ladder l;
    int t_s = 0;

    (void)unused;
    ladder_init(&l, &CONFIG, 0);
    in.charge = 0.2;
    run(&l, in, &t_s, 31);
    in.charge = 0.28;
    assert_int_equal(run(&l, in, &t_s, 1000), STAGE_RESERVE);
    in.charge = 0.2801;
    assert_int_equal(run(&l, in, &t_s, 31), STAGE_AMPLE);
    in.left_s = 3000.0;
    run(&l, in, &t_s, 31);
    in.left_s = 4319.0;
    assert_int_equal(run(&l, in, &t_s, 1000), STAGE_RESERVE);
    in.left_s = 4320.0;
    assert_int_equal(run(&l, in, &t_s, 31), STAGE_AMPLE);
}

/* Whatever comes in, the ladder goes down one stage a step (but for the floor), never leaves
 * `leaving`, and orders nothing while only unknowns and plenty were seen. */
static void property_no_jump_and_no_return(void **unused) {
    const char *given = getenv("SEED");
    unsigned seed = given ? (unsigned)atoi(given) : 20261201u;

    (void)unused;
    printf("ladder property seed %u\n", seed);
    srand(seed);
    for (int run_no = 0; run_no < 300; run_no++) {
        struct ladder l;
        int64_t t_us = 0;

        ladder_init(&l, &CONFIG, 0);
        for (int step = 0; step < 500; step++) {
            struct ladder_input in = rand() % 3 ? well() : at_cutoff(CAUSE_CHARGE);
            enum stage before = l.stage, after;

            in.t_boot_us = t_us += rand() % 20 * 1000000;
            in.new_sample = rand() % 4 != 0;
            in.lifted = rand() % 5 == 0;
            in.blind = rand() % 9 == 0;
            in.under_floor = rand() % 6 == 0;
            if (rand() % 7 == 0)
                in.charge = in.left_s = UNKNOWN;
            after = ladder_step(&l, &in);
            if (before == STAGE_LEAVING)
                assert_int_equal(after, STAGE_LEAVING);
            else if (l.cause != CAUSE_FLOOR)
                assert_in_range(after + 1, before, before + 2);
        }
    }
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(nothing_happens_while_all_is_well),
        cmocka_unit_test(unknown_figures_move_nothing),
        cmocka_unit_test(unknown_figures_do_not_lift_either),
        cmocka_unit_test(reserve_by_charge_and_by_time),
        cmocka_unit_test(a_condition_must_hold_without_a_break),
        cmocka_unit_test(time_alone_confirms_nothing),
        cmocka_unit_test(a_time_that_stands_confirms_nothing),
        cmocka_unit_test(down_one_stage_at_a_time_and_leaving_is_final),
        cmocka_unit_test(keep_needs_least_and_a_near_end),
        cmocka_unit_test(blind_needs_no_samples),
        cmocka_unit_test(floor_goes_at_once_from_any_stage),
        cmocka_unit_test(floor_needs_distinct_samples_in_a_row),
        cmocka_unit_test(an_adapter_that_lifts_rescues_from_edge),
        cmocka_unit_test(an_adapter_late_in_the_grace_holds_the_order_back),
        cmocka_unit_test(a_flicker_after_the_grace_orders_nothing),
        cmocka_unit_test(a_resumed_countdown_is_not_confirmed_anew),
        cmocka_unit_test(the_way_up_has_a_margin),
        cmocka_unit_test(property_no_jump_and_no_return),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
