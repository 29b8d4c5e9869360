/* The whole pipeline, sample in, report out: trackers, endurance and ladder of one unit. The same
 * object works in the daemon, in `brink-bench replay` and in the tests. Pure: no I/O, clock or
 * heap.
 */
#pragma once

#include "core/cell.h"
#include "core/endurance.h"
#include "core/ladder.h"
#include "core/load.h"
#include "core/report.h"
#include "core/sample.h"
#include "core/tracker.h"

struct pack_config {
    char name[NAME_LEN];
    struct cell cell;
    double cutoff_charge; /* 0..1 */
    double cutoff_rest_V; /* whole pack */
    double floor_V;       /* whole pack */
    double carries_W;     /* most its converter can carry; ENDLESS = not limited */
    double typical_W;     /* this pack's share of the load before anything is learned */
    double wiring_ohm;    /* wire and switch between cells and gauge */
};

struct watch_config {
    size_t n_packs; /* 1..PACKS_MAX */
    struct pack_config pack[PACKS_MAX];
    struct ladder_config ladder;
    double silent_s;       /* blind after this long without a believable sample */
    double assumed_temp_C; /* where no temperature channel is */
    double rail_adapter_V; /* rail at or above this means adapter; NaN = not used */
};

/* What is kept over a restart. Written by the daemon, which also knows the boot it came from. */
struct pack_memory {
    double charge, charge_sd;
    double u1_V, u2_V;
    double power_W, power_sd_W;
    double resistance_scale, resistance_sd;
    double temp_C;
};

struct watch_memory {
    int64_t t_boot_us; /* when it was taken */
    enum stage stage;
    int64_t stage_since_us;
    enum cause cause;
    size_t n_packs;
    struct pack_memory pack[PACKS_MAX];
};

enum watch_verdict {
    WATCH_TAKEN = 0,
    WATCH_REFUSED,  /* no channel of it was possible for its pack */
    WATCH_REPEATED, /* the same reading as before */
    WATCH_LATE,     /* its time lies before the last one */
    WATCH_WARMUP,   /* only looked at: the first readings after the start or a silence */
    WATCH_EMPTY,    /* no pack's voltage in it */
};

enum watch_error { WATCH_E_CONFIG = 1 };

struct watch_pack {
    struct tracker tracker;
    struct tracker_prior prior; /* what is known before the first sample */
    struct load load;
    struct tracker_estimate now; /* its load is that of the time to come */
    struct endurance endurance;
    bool known, spent;
    bool silent;           /* went blind and has not been believed since */
    int64_t t_state_us;    /* what time the tracker stands at */
    int64_t t_believed_us; /* last believable sample, or the start */
    double voltage_V, temp_C;
    bool current_measured, temp_measured, under_floor;
    double smooth_W; /* power, low-passed: which way does it flow? */
    enum flow flow;
    int wild;   /* impossible readings of late, fades with good ones */
    int warmup; /* readings still only looked at */
};

struct watch {
    struct watch_config config;
    struct watch_pack pack[PACKS_MAX];
    struct ladder ladder;
    int64_t t_start_us, t_boot_us; /* init; last feed or tick */
    int64_t t_endurance_us;
    double endurance_charge, endurance_W; /* what the last endurance was computed from */
    double reading, rail_V, adapter;      /* last told */
    double plugged;                       /* 1 or 0 by line or rail; UNKNOWN */
    enum supply supply;
    int64_t supply_since_us;
    int64_t losing_since_us; /* adapter there, packs fall; -1 = not so */
    uint64_t samples, refused, repeated;
    int repeats_in_row;
};

/* Returns 0, or WATCH_E_CONFIG when a figure of the configuration is out of its range: no packs or
 * too many, a cell that was not set up, a typical load not above zero, times below zero, NaN. */
int watch_init(struct watch *ret, const struct watch_config *config, int64_t t_boot_us);

/* Lays a memory over a fresh watch. gone_s: time since it was taken, NaN = not known. same_boot:
 * the stage and its countdown go on; else only what was learned about the packs is taken. */
void watch_restore(struct watch *watch, const struct watch_memory *memory, double gone_s,
                   bool same_boot);
void watch_remember(const struct watch *watch, struct watch_memory *ret);

/* One sample. Always fills ret_report, also when the sample is refused. Returns a watch_verdict. */
enum watch_verdict watch_feed(struct watch *watch, const struct sample *sample,
                              struct report *ret_report);

/* Time goes on without a sample. */
void watch_tick(struct watch *watch, int64_t t_boot_us, struct report *ret_report);
