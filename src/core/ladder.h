/* The ladder of decisions: ample -> reserve -> edge -> leaving.
 *
 * It sees estimates, never raw samples, except for the floor. Every rule must hold through its
 * confirmation time and over several distinct samples before it counts, so no single sample, burst
 * or gap moves the stage. Down it goes one stage a step; only the floor goes to `leaving` at once.
 * Up it goes when a margin has been held as long, or when an adapter really lifts the pack.
 * `leaving` is final.
 */
#pragma once

#include "core/report.h"

enum { LADDER_SAMPLES = 3 }; /* least distinct samples behind any decision made while seeing */

struct ladder_config {
    double reserve_charge; /* `reserve` at or under this charge */
    double reserve_left_s; /* or with less time left than this; 0 = not used */
    double keep_s;         /* `edge` when least falls under this */
    double confirm_s;      /* how long a rule must hold */
    double floor_confirm_s;
    int floor_samples;    /* distinct samples under the floor, at least LADDER_SAMPLES */
    double grace_s;       /* how long `edge` lasts before `leaving` */
    double margin_charge; /* hysteresis upward, in charge */
    double margin_left;   /* hysteresis upward in time, as a share: 0.2 = 20 % longer */
    double margin_V;      /* hysteresis upward of the rest voltage, volts a cell */
};

/* What decides now, summed up by the watch over the packs that remain. NaN = not known. */
struct ladder_input {
    int64_t t_boot_us;
    double charge; /* the cautious end when blind */
    double left_s, left_least_s;
    enum cause
        cutoff;       /* what remains is at its cutoff, and by which rule; CAUSE_NONE = it is not */
    int cutoff_pack;  /* whose figure it is, -1 = not one pack's */
    bool clear;       /* above every cutoff by the margin */
    bool new_sample;  /* this step carries a believable, distinct sample */
    bool under_floor; /* the newest samples of the packs that carry lie under their floors */
    int floor_pack;
    bool lifted; /* an adapter is there and the packs do not discharge */
    bool blind;
};

/* A rule's condition, held since when and over how many samples. */
struct ladder_hold {
    int64_t since_us; /* -1 = it does not hold */
    int samples;
};

struct ladder {
    struct ladder_config config;
    enum stage stage;
    int64_t stage_since_us;
    enum cause cause;
    int cause_pack;
    struct ladder_hold reserve, edge, floor, up_from_reserve, up_from_edge;
};

void ladder_init(struct ladder *ladder, const struct ladder_config *config, int64_t t_boot_us);

/* Takes one step, returns the stage. */
enum stage ladder_step(struct ladder *ladder, const struct ladder_input *input);

/* Puts the ladder back where it was before a restart in the same boot. */
void ladder_resume(struct ladder *ladder, enum stage stage, int64_t stage_since_us,
                   enum cause cause);

/* Seconds until `edge` becomes `leaving`; NaN in other stages. */
double ladder_grace_left_s(const struct ladder *ladder, int64_t t_boot_us);
