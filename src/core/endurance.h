/* Time left: the pack run forward to its end under constant power, and time to full.
 *
 * The end is the charge cutoff, the rest voltage's cutoff or the floor, whichever comes first. The
 * floor is met in a burst, so it is tested under mean plus burst power. `least` is the 5th
 * percentile: the runs are repeated with charge, load and resistance each one spread worse, and the
 * differences are added in squares (first-order propagation of uncertainty, JCGM 100:2008, 5.1.2).
 */
#pragma once

#include "core/report.h"
#include "core/tracker.h"

struct endurance_goal {
    double cutoff_charge;
    double cutoff_rest_V; /* whole pack */
    double floor_V;       /* whole pack */
};

struct endurance {
    double left_s;       /* expected; INFINITY = no load */
    double left_least_s; /* 5th percentile, 0 <= least <= left */
    double full_s;       /* NaN unless charging */
    enum cause ends_by;  /* CAUSE_CHARGE, CAUSE_REST, CAUSE_FLOOR; CAUSE_NONE without an end */
};

void endurance_compute(const struct cell *cell, const struct tracker_estimate *now, double temp_C,
                       const struct endurance_goal *goal, struct endurance *ret);
