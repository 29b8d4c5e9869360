/* What comes out of the core: one plain struct from which every screen, file and answer is made.
 * UNKNOWN (NaN) = not known. ENDLESS (INFINITY) in a time = no end in sight (charging, or resting
 * without load). */
#pragma once

#include "core/sample.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum stage { STAGE_AMPLE, STAGE_RESERVE, STAGE_EDGE, STAGE_LEAVING };
enum supply { SUPPLY_UNKNOWN, SUPPLY_PACK, SUPPLY_ADAPTER, SUPPLY_BOTH };
enum flow { FLOW_UNKNOWN, FLOW_CHARGING, FLOW_DISCHARGING, FLOW_RESTING };

/* Which rule holds the ladder where it is; also what a pack runs into first. */
enum cause {
    CAUSE_NONE,
    CAUSE_CHARGE, /* charge at or under its limit */
    CAUSE_REST,   /* rest voltage at or under its limit */
    CAUSE_LEFT,   /* time left under its limit (reserve) */
    CAUSE_KEEP,   /* least under keep */
    CAUSE_FLOOR,  /* terminal voltage under the floor */
    CAUSE_BLIND,  /* gauge silent and the cautious end of the model under the cutoff */
};

/* Alerts are bits; their words stand in publish/status. */
enum alert {
    ALERT_SILENT = 1 << 0,     /* no believable sample for longer than allowed */
    ALERT_IMPOSSIBLE = 1 << 1, /* samples refused as impossible for the pack, lately */
    ALERT_LOSING = 1 << 2,     /* adapter present, yet the pack falls */
    ALERT_SPENT = 1 << 3,      /* a pack is at its cutoff, others carry on */
    ALERT_REPEATED = 1 << 4,   /* the gauge tells the same reading again and again */
    ALERT_OVERLOAD = 1 << 5,   /* the packs that remain cannot carry the load */
    ALERT_RESISTANCE = 1 << 6, /* resistance far above the table: aged, cold or a bad contact */
    ALERT_GUESS = 1 << 7,      /* the charge is hardly known yet (band wider than half) */
};

struct pack_report {
    bool known; /* at least one believable sample since start or restore */
    bool spent; /* at its cutoff */
    double charge, charge_low, charge_high; /* 0..1; 2.5th and 97.5th percentile */
    double terminal_V, rest_V, sag_V;       /* now; by the model at rest; the difference */
    double current_A, power_W;              /* positive = discharging */
    double power_mean_W;                    /* learned load on this pack */
    double temp_C;
    bool current_measured, temp_measured;
    double left_s, left_least_s; /* to this pack's cutoff; least = 5th percentile */
    double full_s;               /* to full while charging */
    enum cause ends_by;          /* what it runs into first */
    double resistance_ohm;       /* R0 now, with the learned scale */
    double resistance_scale;     /* learned, 1 = as the table */
};

struct report {
    int64_t t_boot_us;
    enum stage stage;
    int64_t stage_since_us; /* boot time */
    enum cause cause;
    int cause_pack; /* which pack's figure decided, -1 = the unit's */
    bool blind;
    enum supply supply;
    int64_t supply_since_us;
    enum flow flow;
    unsigned alerts;
    double charge, charge_low, charge_high; /* over all packs, by capacity */
    double left_s, left_least_s;            /* until what remains cannot carry the unit */
    double to_reserve_s;                    /* 0 when there already */
    double full_s;
    double grace_left_s; /* edge: until power-off is ordered; else NaN */
    double power_W, power_mean_W;
    double rail_V;
    double age_s; /* since the last believable sample */
    uint64_t samples, refused, repeated;
    size_t n_packs;
    struct pack_report pack[PACKS_MAX];
};
