/* A world drawn at random for test_stops: a pack with its load and adapter, behind a poor gauge. */
#pragma once

#include "decode/celltable.h"
#include "fen.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

#include <cmocka.h>

enum { RUNS = 400, SAMPLES = 6000, TABLES = 7, LATE_SAMPLES = 12 };

static const double SETTLE_S = 900.0;
static const double FALSE_MARGIN = 0.20, MISSED_MARGIN = 0.06;

enum adapter { ADAPTER_NONE, ADAPTER_CHARGES, ADAPTER_CARRIES, ADAPTER_LOSES };

/* What one run is drawn to be. */
struct scene {
    size_t table;
    double charge, capacity_Ah, temp_C, idle_W, burst_W, burst_s, pause_s;
    double step_V, noise_V, gain, resistance, typical, period_s, current_gain;
    double gap_chance, gap_s, junk_chance, adapter_on_s, adapter_off_s;
    int series, bits;
    bool current;
    enum adapter adapter;
};

struct world {
    struct scene scene;
    struct watch_config config;
    struct watch watch;
    struct report report;
    struct cell truth; /* resistances as they really are */
    struct cell_state state;
    uint64_t random;
    double terminal_V, current_A;
    double phase_s;   /* until the burst begins or ends */
    double adapter_s; /* until the adapter comes or goes */
    double gap_s;     /* until the gauge speaks again */
    bool burst, plugged;
    int64_t t_us;
    /* what is judged */
    int floor_samples;
    int64_t floor_since_us, due_since_us;
    bool floor_event;
    enum stage stage;
    uint64_t judged, covered;
};

/* ---- drawing --------------------------------------------------------------------------------- */

static inline double range(uint64_t *r, double low, double high) {
    return low + (high - low) * fen_uniform(r);
}

static double spread(uint64_t *r, double low, double high) {
    return low * pow(high / low, fen_uniform(r));
}

static bool chance(uint64_t *r, double share) {
    return fen_uniform(r) < share;
}

static struct cell_table table_of(size_t i) {
    static const char *const shipped[] = {"generic-li-ion", "nca-18650",  "nmc-18650",
                                          "nmc811-21700",   "lipo-pouch", "lfp"};
    struct cell_table table = fen_table();
    char path[64], message[256] = "";

    if (i == 0)
        return table;
    snprintf(path, sizeof path, "conf/cells/%s.ini", shipped[i - 1]);
    if (celltable_load(path, &table, message, sizeof message) != 0)
        fail_msg("%s", message);
    return table;
}

static void draw_load(struct scene *s, uint64_t *r) {
    double full_W = 3.7 * s->series * s->capacity_Ah; /* 1C */

    s->idle_W = full_W * spread(r, 1.0 / 20.0, 1.0 / 5.0);
    s->burst_W = fmax(full_W * spread(r, 1.0 / 10.0, 1.0 / 2.0), s->idle_W);
    s->burst_s = spread(r, 0.005, 120.0);
    s->pause_s = fmax(s->burst_s / range(r, 0.03, 0.6), 0.5);
}

static void draw_gauge(struct scene *s, uint64_t *r) {
    s->bits = 10 + (int)(7.0 * fen_uniform(r));
    s->step_V = 5.0 * s->series / (double)(1 << s->bits);
    s->noise_V = range(r, 0.0, 0.005) * s->series;
    s->gain = range(r, 0.995, 1.005);
    s->period_s = spread(r, 0.2, 60.0);
    s->current = chance(r, 0.4);
    s->current_gain = range(r, 0.995, 1.005);
    s->gap_chance = chance(r, 0.3) ? spread(r, 2e-4, 4e-3) : 0.0;
    s->gap_s = spread(r, 2.0, 600.0);
    s->junk_chance = chance(r, 0.3) ? spread(r, 1e-3, 5e-2) : 0.0;
}

static struct scene draw(uint64_t *r) {
    struct scene s = {.table = fen_random(r) % TABLES};
    double reach;

    s.series = 1 + (int)(fen_random(r) % 3);
    s.capacity_Ah = spread(r, 1.0, 20.0);
    s.temp_C = range(r, -15.0, 35.0);
    s.resistance = range(r, 0.7, 1.3);
    s.typical = range(r, 0.5, 1.5);
    draw_load(&s, r);
    draw_gauge(&s, r);
    s.adapter = chance(r, 0.3) ? (enum adapter)(fen_random(r) % 4) : ADAPTER_NONE;
    s.adapter_on_s = spread(r, 1.0, 300.0);
    s.adapter_off_s = spread(r, 1.0, 300.0);
    reach = SAMPLES * s.period_s / 3600.0 * 0.1; /* charge that goes within the run, roughly */
    s.charge = range(r, 0.15, 1.0);
    if (chance(r, 0.7))
        s.charge = fmin(s.charge, 0.15 + reach * fen_uniform(r));
    return s;
}

static double mean_W(const struct scene *s) {
    double share = s->burst_s / (s->burst_s + s->pause_s);

    return s->idle_W + share * (s->burst_W - s->idle_W);
}

static void build(struct world *w) {
    struct cell_table table = table_of(w->scene.table);
    struct watch_config *c = &w->config;
    double empty_V = ocv_voltage(&table.ocv, 0.05);
    int series = w->scene.series;

    *c = fen_config();
    c->silent_s = fmax(30.0, 5.0 * w->scene.period_s);
    c->pack[0].cutoff_rest_V = series * empty_V;
    c->pack[0].floor_V = series * (table.damage_V + 0.4 * (empty_V - table.damage_V));
    c->pack[0].typical_W = mean_W(&w->scene) * w->scene.typical;
    assert_int_equal(cell_init(&c->pack[0].cell, &table, series, w->scene.capacity_Ah), 0);
    w->truth = c->pack[0].cell;
    w->truth.ohm_factor *= w->scene.resistance;
    w->state = (struct cell_state){w->scene.charge, 0.0, 0.0};
    w->phase_s = w->scene.pause_s;
    w->adapter_s = w->scene.adapter_off_s;
    w->floor_since_us = w->due_since_us = -1;
    assert_int_equal(watch_init(&w->watch, c, 0), 0);
}

/* ---- the pack and its gauge ------------------------------------------------------------------ */

static double load_W(const struct world *w) {
    double unit_W = w->burst ? w->scene.burst_W : w->scene.idle_W;

    if (!w->plugged)
        return unit_W;
    switch (w->scene.adapter) {
    case ADAPTER_CHARGES:
        return w->state.charge < 0.98 ? -w->scene.burst_W : 0.0;
    case ADAPTER_CARRIES:
        return 0.0;
    default:
        return 0.4 * unit_W;
    }
}

static void run_pack(struct world *w, double dt_s) {
    struct cell_point point;

    cell_at(&w->truth, w->state.charge, w->scene.temp_C, &point);
    if (cell_solve_power(cell_source_V(&point, &w->state), point.r0_ohm, load_W(w), &w->terminal_V,
                         &w->current_A) != 0) {
        w->terminal_V = 0.5 * cell_source_V(&point, &w->state);
        w->current_A = w->terminal_V / point.r0_ohm;
    }
    cell_step(&w->truth, &w->state, &point, w->current_A, dt_s);
}

static double exponential(uint64_t *r, double mean) {
    return -mean * log(1.0 - fen_uniform(r));
}

/* Time goes on by dt_s, in steps between which the load does not change. */
static void pass(struct world *w, double dt_s) {
    const struct scene *s = &w->scene;

    while (dt_s > 0.0) {
        double step_s = fmin(fmin(dt_s, w->phase_s), 5.0);

        if (s->adapter != ADAPTER_NONE)
            step_s = fmin(step_s, w->adapter_s);
        run_pack(w, step_s);
        dt_s -= step_s;
        if ((w->phase_s -= step_s) <= 0.0) {
            w->burst = !w->burst;
            w->phase_s = exponential(&w->random, w->burst ? s->burst_s : s->pause_s) + 1e-4;
        }
        if ((w->adapter_s -= step_s) <= 0.0) {
            w->plugged = !w->plugged && s->adapter != ADAPTER_NONE;
            w->adapter_s =
                exponential(&w->random, w->plugged ? s->adapter_on_s : s->adapter_off_s) + 1e-3;
        }
    }
}

static double converted(struct world *w, double voltage_V) {
    double told_V = voltage_V * w->scene.gain + w->scene.noise_V * fen_normal(&w->random);

    return w->scene.step_V * round(told_V / w->scene.step_V);
}

static struct sample read_gauge(struct world *w, bool *ret_junk) {
    struct sample s = fen_silence(w->t_us);
    double told_A = w->current_A * w->scene.current_gain;

    *ret_junk = w->watch.pack[0].known && chance(&w->random, w->scene.junk_chance);
    s.pack[0].voltage_V = converted(w, w->terminal_V);
    s.pack[0].temp_C = w->scene.temp_C;
    if (w->scene.current)
        s.pack[0].current_A = told_A + 0.001 * w->scene.capacity_Ah * fen_normal(&w->random);
    if (w->scene.adapter != ADAPTER_NONE)
        s.adapter = w->plugged ? 1.0 : 0.0;
    if (*ret_junk)
        s.pack[0].voltage_V = range(&w->random, 0.0, 6.0) * w->scene.series;
    return s;
}
