/* The simulated unit: what it draws, what it tells, and that a seed is all there is to it. */
#include "bench/random.h"
#include "bench/sim.h"
#include "decode/celltable.h"
#include "gauge/line.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include <cmocka.h>

static struct sim_config unit(void) {
    struct sim_config config = {.n_packs = 1,
                                .charge = {0.6, 0.6, 0.6, 0.6},
                                .idle_W = 2.4,
                                .burst_W = 5.2,
                                .burst_every_s = 300.0,
                                .burst_for_s = 45.0,
                                .temp_C = 15.0,
                                .period_s = 1.0,
                                .noise_V = 0.003,
                                .bits = 10,
                                .reference_V = 5.0,
                                .gain = 1.0,
                                .seed = 7};
    struct cell_table table;
    char message[256] = "";

    assert_int_equal(celltable_load("tests/replay/fen.ini", &table, message, sizeof message), 0);
    for (size_t k = 0; k < PACKS_MAX; k++)
        assert_int_equal(cell_init(&config.cell[k], &table, 1, 2.888), 0);
    return config;
}

static struct sim *start(const struct sim_config *config) {
    struct sim *sim = malloc(sizeof *sim);

    assert_non_null(sim);
    assert_int_equal(sim_init(sim, config), 0);
    return sim;
}

/* Check values of splitmix64 for the start 1234567 (Rosetta Code, "Pseudo-random
 * numbers/Splitmix64"). */
static void the_generator_is_splitmix64(void **state) {
    (void)state;
    static const uint64_t expected[] = {6457827717110365317u, 3203168211198807973u,
                                        9817491932198370423u, 4593380528125082431u,
                                        16408922859458223821u};
    struct random random = random_start(1234567, 0);

    for (size_t i = 0; i < sizeof expected / sizeof *expected; i++)
        assert_true(random_next(&random) == expected[i]);
}

static void noise_is_near_normal(void **state) {
    (void)state;
    enum { N = 200000 };
    struct random random = random_start(1, 1);
    double sum = 0.0, squares = 0.0;
    int within = 0;

    for (int i = 0; i < N; i++) {
        double x = random_normal(&random);

        sum += x;
        squares += x * x;
        within += fabs(x) < 1.0;
    }
    assert_true(fabs(sum / N) < 0.01);
    assert_true(fabs(squares / N - 1.0) < 0.02);
    assert_true(fabs((double)within / N - 0.6827) < 0.01); /* of the normal distribution */
}

static void same_seed_same_lines(void **state) {
    (void)state;
    struct sim_config config = unit(), other = config;
    char line[3][SIM_LINE_MAX];
    int differ = 0;

    config.faults = other.faults = true;
    other.seed = 8;
    struct sim *a = start(&config), *b = start(&config), *c = start(&other);
    for (int i = 0; i < 2000; i++) {
        size_t n;

        assert_int_equal(sim_step(a) + sim_step(b) + sim_step(c), 0);
        n = sim_tell(a, line[0]);
        assert_int_equal(sim_tell(b, line[1]), n);
        assert_memory_equal(line[0], line[1], n);
        differ += sim_tell(c, line[2]) != n || memcmp(line[0], line[2], n) != 0;
    }
    assert_true(differ > 500);
    free(a), free(b), free(c);
}

static void faults_do_not_change_the_life(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct sim *plain = start(&config), *faulty;
    char line[SIM_LINE_MAX];

    config.faults = true;
    faulty = start(&config);
    for (int i = 0; i < 2000; i++) {
        assert_int_equal(sim_step(plain) + sim_step(faulty), 0);
        sim_tell(plain, line);
        sim_tell(faulty, line);
        assert_true(plain->pack[0].told_V == faulty->pack[0].told_V);
        assert_true(plain->pack[0].taken_Ah == faulty->pack[0].taken_Ah);
    }
    free(plain), free(faulty);
}

static void bursts_come_on_time(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct sim *sim = start(&config);

    for (int t = 0; t < 1200; t++) {
        bool burst = t >= 300 && (t % 300) < 45;

        assert_int_equal(sim_step(sim), 0);
        assert_true(sim->time_s == t);
        assert_true(sim->load_W == (burst ? 5.2 : 2.4));
    }
    free(sim);
}

static void power_and_charge_add_up(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct sim *sim = start(&config);
    double taken_Ah = 0.4 * 2.888, energy = 0.0;

    for (int t = 0; t < 3000; t++) {
        const struct sim_pack *pack = &sim->pack[0];

        assert_int_equal(sim_step(sim), 0);
        assert_true(fabs(pack->voltage_V * pack->current_A - sim->load_W) < 1e-9);
        assert_true(fabs(pack->taken_Ah - taken_Ah) < 1e-5);
        assert_true(fabs(pack->state.charge - (1.0 - pack->taken_Ah / 2.888)) < 1e-9);
        taken_Ah += pack->current_A / 3600.0;
        energy += sim->load_W;
    }
    assert_true(energy > 2.4 * 3000);
    free(sim);
}

static void goes_dark_at_the_end(void **state) {
    (void)state;
    struct sim_config config = unit();
    int steps = 0, r;

    config.charge[0] = 0.3;
    struct sim *sim = start(&config);
    while ((r = sim_step(sim)) == 0 && steps < 100000) {
        assert_true(sim->pack[0].voltage_V >= config.cell[0].table.damage_V);
        steps++;
    }
    assert_int_equal(r, SIM_E_SPENT);
    assert_int_equal(sim_step(sim), SIM_E_SPENT);
    assert_true(sim->pack[0].state.charge < 0.08);
    free(sim);
}

/* Longer periods only look less often. */
static void the_period_does_not_matter(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct sim *fine = start(&config), *coarse;

    config.period_s = 60.0;
    coarse = start(&config);
    for (int minute = 0; minute <= 30; minute++) {
        assert_int_equal(sim_step(coarse), 0);
        for (int i = 0; i < 60 && fine->time_s < coarse->time_s; i++)
            assert_int_equal(sim_step(fine), 0);
        if (minute == 0)
            assert_int_equal(sim_step(fine), 0);
        assert_true(fabs(fine->pack[0].voltage_V - coarse->pack[0].voltage_V) < 1e-9);
        assert_true(fabs(fine->pack[0].taken_Ah - coarse->pack[0].taken_Ah) < 1e-12);
    }
    free(fine), free(coarse);
}

/* The converter steps, the trim error and nothing else stand between the volts and the reading. */
static void the_adc_has_steps_and_a_trim_error(void **state) {
    (void)state;
    struct sim_config config = unit();

    config.noise_V = 0.0;
    config.gain = 1.02;
    config.offset_V = 0.010;
    struct sim *sim = start(&config);
    for (int t = 0; t < 1000; t++) {
        double seen_V, steps;

        assert_int_equal(sim_step(sim), 0);
        seen_V = sim->pack[0].voltage_V * 1.02 + 0.010;
        steps = sim->pack[0].told_V / (5.0 / 1024.0);
        assert_true(fabs(steps - round(steps)) < 1e-9);
        assert_true(sim->pack[0].told_V <= seen_V && sim->pack[0].told_V > seen_V - 5.0 / 1024.0);
    }
    free(sim);

    config.reference_V = 3.3; /* above full scale it stays at full scale */
    sim = start(&config);
    assert_int_equal(sim_step(sim), 0);
    assert_true(fabs(sim->pack[0].told_V - 3.3 * 1023.0 / 1024.0) < 1e-9);
    free(sim);
}

/* Diodes: no pack ever charges another, those that carry stand at one voltage, and all of the power
 * is there. */
static void packs_share_behind_diodes(void **state) {
    (void)state;
    struct sim_config config = unit();
    bool alone = false, together = false;

    config.n_packs = 3;
    config.charge[0] = 0.5;
    config.charge[1] = 0.3;
    config.charge[2] = 0.3;
    struct sim *sim = start(&config);
    while (sim_step(sim) == 0) {
        double power_W = 0.0, high_V = 0.0;
        int carrying = 0;

        for (int k = 0; k < 3; k++) {
            assert_true(sim->pack[k].current_A >= 0.0);
            power_W += sim->pack[k].voltage_V * sim->pack[k].current_A;
            high_V = fmax(high_V, sim->pack[k].voltage_V);
            carrying += sim->pack[k].current_A > 0.0;
        }
        for (int k = 0; k < 3; k++)
            if (sim->pack[k].current_A > 0.0)
                assert_true(fabs(sim->pack[k].voltage_V - high_V) < 1e-12);
        assert_true(fabs(power_W - sim->load_W) < 1e-9);
        alone = alone || carrying == 1;
        together = together || carrying == 3;
    }
    assert_true(alone && together);
    for (int k = 0; k < 3; k++)
        assert_true(sim->pack[k].state.charge < 0.1);
    free(sim);
}

static void an_adapter_charges(void **state) {
    (void)state;
    struct sim_config config = unit();

    config.n_plugs = 1;
    config.plug[0] = (struct sim_plug){600.0, 10800.0, 12.0};
    struct sim *sim = start(&config);
    for (int t = 0; t < 600; t++)
        assert_int_equal(sim_step(sim), 0);
    assert_true(sim->adapter_W == 0.0 && sim->rail_V < 5.0);
    for (int t = 0; t < 10800; t++) {
        assert_int_equal(sim_step(sim), 0);
        assert_true(sim->rail_V > 5.1 && sim->adapter_W == 12.0);
        assert_true(sim->pack[0].current_A <= 0.0);
        assert_true(sim->pack[0].voltage_V <= 4.2 + 1e-9);
    }
    assert_true(sim->pack[0].state.charge > 0.97 && sim->pack[0].state.charge < 1.001);
    assert_int_equal(sim_step(sim), 0);
    assert_true(sim->adapter_W == 0.0 && sim->pack[0].current_A > 0.0);
    free(sim);
}

static void a_weak_adapter_loses(void **state) {
    (void)state;
    struct sim_config config = unit();

    config.n_plugs = 1;
    config.plug[0] = (struct sim_plug){0.0, 1e6, 1.0};
    struct sim *sim = start(&config);
    for (int t = 0; t < 600; t++) {
        assert_int_equal(sim_step(sim), 0);
        assert_true(fabs(sim->pack[0].voltage_V * sim->pack[0].current_A - (sim->load_W - 1.0)) <
                    1e-9);
    }
    assert_true(sim->pack[0].state.charge < 0.6);
    free(sim);
}

/* What is told is what the line decoder of the daemon understands. */
static void lines_are_gauge_lines(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct frame frame;
    char line[SIM_LINE_MAX];
    bool checked;

    config.n_packs = PACKS_MAX;
    config.tell_current = config.check = true;
    struct sim *sim = start(&config);
    for (int t = 0; t < 400; t++) {
        size_t n;

        assert_int_equal(sim_step(sim), 0);
        n = sim_tell(sim, line);
        assert_true(n > 1 && line[n - 1] == '\n');
        assert_int_equal(line_decode(line, n - 1, &frame, &checked), 0);
        assert_true(checked && frame.clock_s == t);
        assert_int_equal(frame.n, 2 * PACKS_MAX + 3);
        assert_string_equal(frame.token[0].name, "v");
        assert_true(fabs(frame.token[0].value - sim->pack[0].told_V) <= 0.5e-4 + 1e-12);
    }
    free(sim);
}

static void feed(struct line_decoder *decoder, const char *bytes, size_t n, double *last_s,
                 int *good) {
    struct frame frame;

    while (n > 0) {
        size_t took = line_push(decoder, bytes, n);

        bytes += took;
        n -= took;
        while (line_next(decoder, &frame)) {
            if (isfinite(frame.clock_s) && frame.clock_s >= *last_s)
                *last_s = frame.clock_s;
            (*good)++;
        }
    }
}

static void faults_are_faults_and_pass(void **state) {
    (void)state;
    struct sim_config config = unit();
    struct line_decoder decoder;
    char line[SIM_LINE_MAX];
    uint64_t seed = (uint64_t)time(NULL);
    double last_s = 0.0;
    int good = 0, silent = 0;

    print_message("seed %llu\n", (unsigned long long)seed);
    config.faults = config.check = true;
    config.seed = seed;
    struct sim *sim = start(&config);
    line_init(&decoder);
    for (int t = 0; t < 3000; t++) {
        size_t n;

        assert_int_equal(sim_step(sim), 0);
        n = sim_tell(sim, line);
        assert_true(n <= SIM_LINE_MAX);
        silent += n == 0;
        feed(&decoder, line, n, &last_s, &good);
    }
    assert_true(decoder.counts.bad_lines > 5);
    assert_true(silent > 5);
    assert_true(good > 2000 && last_s > 2900.0);
    free(sim);
}

static void refuses_nonsense(void **state) {
    (void)state;
    static struct sim sim;
    struct sim_config config = unit();

    config.n_packs = 0;
    assert_int_equal(sim_init(&sim, &config), SIM_E_CONFIG);
    config = unit();
    config.period_s = 0.0;
    assert_int_equal(sim_init(&sim, &config), SIM_E_CONFIG);
    config = unit();
    config.charge[0] = nan("");
    assert_int_equal(sim_init(&sim, &config), SIM_E_CONFIG);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_generator_is_splitmix64),
        cmocka_unit_test(noise_is_near_normal),
        cmocka_unit_test(same_seed_same_lines),
        cmocka_unit_test(faults_do_not_change_the_life),
        cmocka_unit_test(bursts_come_on_time),
        cmocka_unit_test(power_and_charge_add_up),
        cmocka_unit_test(goes_dark_at_the_end),
        cmocka_unit_test(the_period_does_not_matter),
        cmocka_unit_test(the_adc_has_steps_and_a_trim_error),
        cmocka_unit_test(packs_share_behind_diodes),
        cmocka_unit_test(an_adapter_charges),
        cmocka_unit_test(a_weak_adapter_loses),
        cmocka_unit_test(lines_are_gauge_lines),
        cmocka_unit_test(faults_are_faults_and_pass),
        cmocka_unit_test(refuses_nonsense),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
