/* A simulated unit: packs, load, adapter and the microcontroller that measures them.
 *
 * Packs are the equivalent circuit of core/cell behind ideal diodes: the ones with the highest
 * voltage carry the load, which draws constant power. An adapter takes over what it can give; what
 * it has left charges the packs, at constant power and then at constant full voltage. A protection
 * circuit opens at the table's damage voltage. The microcontroller reads every pack through an ADC
 * with noise, steps, a trim error and, if wanted, faults, and tells gauge lines.
 * The same seed gives the same lines; load, noise and faults draw from streams of their own, so
 * that faults do not change the life they are told about.
 */
#pragma once

#include "bench/random.h"
#include "core/cell.h"
#include "core/sample.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum { SIM_LINE_MAX = 1024, SIM_PLUGS_MAX = 8 };

struct sim_config {
    size_t n_packs; /* 1..PACKS_MAX */
    struct cell cell[PACKS_MAX];
    double charge[PACKS_MAX]; /* at the start, rested */
    double idle_W, burst_W;
    double burst_every_s, burst_for_s; /* burst_every_s 0 = no bursts */
    double jitter;                     /* each burst starts late by up to this share of the gap */
    double temp_C;
    double period_s;    /* between gauge lines, > 0 */
    double noise_V;     /* one standard deviation */
    int bits;           /* of the ADC; 0 = no steps */
    double reference_V; /* the pack voltage that gives the ADC's full scale */
    double gain;        /* the trim error: reading = gain * voltage + offset_V */
    double offset_V;
    size_t n_plugs; /* adapter events, by time */
    struct sim_plug {
        double at_s, for_s, power_W;
    } plug[SIM_PLUGS_MAX];
    bool tell_current; /* with tokens i, i2, ... */
    bool check;        /* with *hh at the end of lines */
    bool faults;
    uint64_t seed;
};

struct sim_pack {
    struct cell_state state;
    double voltage_V, current_A; /* true, at the terminals */
    double told_V;               /* as the microcontroller read it */
    double taken_Ah;             /* since full */
};

struct sim {
    struct sim_config config;
    struct sim_pack pack[PACKS_MAX];
    uint64_t step; /* lines so far; time is step * period_s */
    double time_s;
    double load_W, adapter_W; /* adapter_W: what the adapter could give now, 0 = unplugged */
    double rail_V;
    double burst_from_s, burst_to_s; /* the burst that runs or comes next */
    struct random load_random, noise_random, fault_random;
    int gap, repeats; /* lines still to be swallowed, told again */
    char last[SIM_LINE_MAX];
    size_t last_length;
};

enum sim_error {
    SIM_E_CONFIG = 1,
    SIM_E_SPENT, /* the packs cannot give the power: the unit goes dark */
};

/* 0 or SIM_E_CONFIG. */
int sim_init(struct sim *ret, const struct sim_config *config);

/* Measures at the present time, then lets one period pass. 0 or SIM_E_SPENT. */
int sim_step(struct sim *sim);

/* What the microcontroller sends for the last step: at most SIM_LINE_MAX bytes, with faults also
 * none or rubbish. Returns the length. Call once a step. */
size_t sim_tell(struct sim *sim, char ret[SIM_LINE_MAX]);
