/* A fen logger's pack for tests: a made-up but plausible cell, a configuration, and a pack that is
 * run by the product's own circuit. Checks against the outside stand in test_cell and test_ocv. */
#pragma once

#include "core/watch.h"
#include "util/real.h"

#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

/* OCV nodes: the equivalent-circuit example set of PyBaMM (BSD-3), tests' REFERENCES section 5. */
static inline struct cell_table fen_table(void) {
    static const double charge[] = {0, .1, .2, .3, .4, .5, .6, .7, .8, .9, 1};
    static const double ocv_V[] = {3.2000, 3.4937, 3.5755, 3.6254, 3.6546, 3.6965,
                                   3.7681, 3.8544, 3.9369, 4.0457, 4.1870};
    struct cell_table t = {.name = "fen",
                           .capacity_Ah = 3.0,
                           .full_V = 4.2,
                           .damage_V = 2.5,
                           .possible_low_V = 1.5,
                           .possible_high_V = 4.5,
                           .voltage_sd_V = 0.010,
                           .n_res = 3,
                           .res_charge = {0.05, 0.2, 1.0},
                           .r0_ohm = {0.06, 0.04, 0.035},
                           .r1_ohm = {0.03, 0.015, 0.012},
                           .r2_ohm = {0.03, 0.020, 0.018},
                           .tau1_s = 12.0,
                           .tau2_s = 300.0,
                           .res_temp_C = 25.0,
                           .arrhenius_J_mol = 20000.0};

    if (ocv_init(&t.ocv, charge, ocv_V, 11) != 0)
        abort();
    return t;
}

static inline struct watch_config fen_config(void) {
    struct cell_table table = fen_table();
    struct watch_config c = {.n_packs = 1,
                             .silent_s = 30.0,
                             .assumed_temp_C = 25.0,
                             .rail_adapter_V = UNKNOWN,
                             .ladder = {.reserve_charge = 0.25,
                                        .reserve_left_s = 0.0,
                                        .keep_s = 120.0,
                                        .confirm_s = 30.0,
                                        .floor_confirm_s = 3.0,
                                        .floor_samples = 3,
                                        .grace_s = 60.0,
                                        .margin_charge = 0.03,
                                        .margin_left = 0.2,
                                        .margin_V = 0.05}};

    c.pack[0] = (struct pack_config){.name = "main",
                                     .cutoff_charge = 0.08,
                                     .cutoff_rest_V = 3.30,
                                     .floor_V = 3.00,
                                     .carries_W = ENDLESS,
                                     .typical_W = 3.0};
    if (cell_init(&c.pack[0].cell, &table, 1, 3.0) != 0)
        abort();
    return c;
}

struct fen {
    struct cell cell;
    struct cell_state state;
    double temp_C, power_W; /* power < 0 charges */
    double noise_V;
    int64_t t_boot_us;
    uint64_t random;
    double adapter; /* told with each sample; UNKNOWN = no such line */
    double terminal_V, current_A;
};

/* splitmix64: S. Vigna's public-domain generator (2015). */
static inline uint64_t fen_random(uint64_t *state) {
    uint64_t z = (*state += 0x9e3779b97f4a7c15u);

    z = (z ^ (z >> 30)) * 0xbf58476d1ce4e5b9u;
    z = (z ^ (z >> 27)) * 0x94d049bb133111ebu;
    return z ^ (z >> 31);
}

static inline double fen_uniform(uint64_t *state) {
    return (double)(fen_random(state) >> 11) * 0x1p-53;
}

static inline double fen_normal(uint64_t *state) {
    double sum = 0.0;

    for (int i = 0; i < 12; i++)
        sum += fen_uniform(state);
    return sum - 6.0;
}

static inline struct fen fen_pack(const struct watch_config *config, double charge,
                                  double power_W) {
    return (struct fen){.cell = config->pack[0].cell,
                        .state = {charge, 0.0, 0.0},
                        .temp_C = 25.0,
                        .power_W = power_W,
                        .noise_V = 0.002,
                        .random = 1,
                        .adapter = UNKNOWN};
}

static inline struct sample fen_silence(int64_t t_boot_us) {
    struct sample s = {
        .t_boot_us = t_boot_us, .reading = UNKNOWN, .rail_V = UNKNOWN, .adapter = UNKNOWN};

    for (int i = 0; i < PACKS_MAX; i++)
        s.pack[i] = (struct pack_sample){UNKNOWN, UNKNOWN, UNKNOWN};
    return s;
}

/* Runs the pack for dt_s and reads it: voltage and temperature, no current. */
static inline struct sample fen_run(struct fen *f, double dt_s) {
    struct cell_point point;
    struct sample s;

    cell_at(&f->cell, f->state.charge, f->temp_C, &point);
    if (cell_solve_power(cell_source_V(&point, &f->state), point.r0_ohm, f->power_W, &f->terminal_V,
                         &f->current_A) != 0) {
        f->terminal_V = 0.5 * cell_source_V(&point, &f->state);
        f->current_A = f->power_W / f->terminal_V;
    }
    cell_step(&f->cell, &f->state, &point, f->current_A, dt_s);
    f->t_boot_us += (int64_t)(dt_s * 1e6);
    s = fen_silence(f->t_boot_us);
    s.pack[0].voltage_V = f->terminal_V + f->noise_V * fen_normal(&f->random);
    s.pack[0].temp_C = f->temp_C;
    s.adapter = f->adapter;
    return s;
}

/* Feeds n samples dt_s apart. */
static inline void fen_feed(struct watch *watch, struct fen *f, int n, double dt_s,
                            struct report *report) {
    for (int i = 0; i < n; i++) {
        struct sample s = fen_run(f, dt_s);
        watch_feed(watch, &s, report);
    }
}

/* One sample of a given voltage, dt_s later; the pack itself stands still. */
static inline enum watch_verdict fen_say(struct watch *watch, struct fen *f, double dt_s,
                                         double voltage_V, struct report *report) {
    struct sample s;

    f->t_boot_us += (int64_t)(dt_s * 1e6);
    s = fen_silence(f->t_boot_us);
    s.pack[0].voltage_V = voltage_V;
    s.adapter = f->adapter;
    return watch_feed(watch, &s, report);
}
