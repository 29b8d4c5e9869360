/* The ladder of decisions: ample -> reserve -> edge -> leaving.
 *
 * It sees estimates, never raw samples, except for the floor. Every rule must hold through its
 * confirmation time before it counts, so no single sample, burst or gap moves the stage. Climbing
 * back needs a margin held as long. `leaving` is final.
 */
#pragma once

#include "core/report.h"

struct ladder_config {
    double reserve_charge; /* `reserve` at or under this charge */
    double reserve_left_s; /* or with less time left than this; 0 = not used */
    double keep_s;         /* `edge` when least falls under this */
    double confirm_s;      /* how long a rule must hold */
    double floor_confirm_s;
    int floor_samples;    /* distinct samples under the floor, at least 3 */
    double grace_s;       /* how long `edge` lasts before `leaving` */
    double margin_charge; /* hysteresis upward, in charge */
    double margin_left;   /* hysteresis upward in time, as a share: 0.2 = 20 % longer */
    double margin_V;      /* hysteresis upward of rest voltage and floor, volts a cell */
};

/* What decides now, over all packs. Booleans are the watch's sums over what remains. */
struct ladder_input {
    int64_t t_boot_us;
    double charge; /* NaN = not known */
    double left_s; /* expected */
    double left_least_s;
    bool cutoff; /* what remains is at its cutoff charge or rest voltage: cause says which */
    enum cause cutoff_cause;
    int cutoff_pack;
    bool clear;       /* above cutoff by the margin */
    bool new_sample;  /* this call carries a believable, distinct sample */
    bool under_floor; /* that sample lies under the floor */
    bool lifted;      /* an adapter is present and the pack really rises or no longer falls */
    bool blind;
};

struct ladder {
    struct ladder_config config;
    enum stage stage;
    int64_t stage_since_us;
    enum cause cause;
    int cause_pack;
    int64_t reserve_held_us, edge_held_us, floor_held_us, clear_held_us, up_held_us; /* -1 = not */
    int floor_count;
};

void ladder_init(struct ladder *ladder, const struct ladder_config *config, int64_t t_boot_us);

/* Takes one step, returns the stage. Time that stands still or falls changes nothing. */
enum stage ladder_step(struct ladder *ladder, const struct ladder_input *input);

/* Seconds until `edge` becomes `leaving`; NaN in other stages. */
double ladder_grace_left_s(const struct ladder *ladder, int64_t t_boot_us);
