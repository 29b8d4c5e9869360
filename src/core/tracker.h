/* The charge estimator of one pack: an extended Kalman filter over the equivalent circuit, the same
 * with and without a current channel.
 *
 * State: charge, the two polarisation voltages, the load's power as a slowly learned mean and a
 * fast part around it, the resistance scale and a voltage bias. Measurements, each a scalar update:
 *   V = OCV(charge) - scale R0 I - u1 - u2 + bias,   I = (mean + fast) / V
 * and, where it is told, the current itself. A converter draws constant power, hence I = P / V.
 * The bias is reckoned with but not learned (it would drink the signal), and so is the resistance
 * scale without a current: S. F. Schmidt's consider filter, Advances in Control Systems 3 (1966)
 * 293-340 (from memory). The curve counts as a line over the spread of the charge (statistical
 * linear regression), because a wide charge crosses its bends. Readings beyond the gate move the
 * load only; where they go on, or where the mean innovation contradicts the spread, the charge is
 * read anew from the voltage. Method: G. L. Plett, J. Power Sources 134 (2004) 277-292.
 */
#pragma once

#include "core/cell.h"

enum { TRACK_CHARGE, TRACK_U1, TRACK_U2, TRACK_MEAN, TRACK_FAST, TRACK_SCALE, TRACK_BIAS, TRACK_N };

/* What is known before the first sample; NaN in charge = nothing, the first voltage decides. */
struct tracker_prior {
    double charge, charge_sd;
    double u1_V, u2_V; /* NaN = as under the typical load for long */
    double power_W, power_sd_W;
    double scale, scale_sd;
};

struct tracker {
    double x[TRACK_N];
    double P[TRACK_N][TRACK_N];
    double fast_var_W2; /* learned variance of the fast part */
    double typical_W;   /* scale of what is a usual power, > 0 */
    double voltage_V;   /* last measured */
    double temp_C;
    double dt_s;    /* last step */
    double age_s;   /* since the first sample */
    double doubt_V; /* mean innovation of late */
    int surprises;  /* readings in a row that contradict the state */
    bool started, current_told;
};

struct tracker_estimate {
    double charge, charge_sd;
    double rest_V; /* OCV at the charge, with the bias */
    double sag_V;  /* rest_V minus terminal voltage of the model */
    double current_A, power_W;
    double drawn_W; /* by the last voltage alone: follows each burst, errs with the charge */
    double power_mean_W, power_sd_W;
    double fast_sd_W; /* spread of the bursts */
    double burst_W;   /* what bursts reach above the mean */
    double scale, scale_sd;
    double u1_V, u2_V;
};

/* typical_W > 0: the load before anything is known. */
void tracker_init(struct tracker *tracker, double typical_W, double temp_C,
                  const struct tracker_prior *prior);

/* Time passes: dt_s > 0 under the learned load. Spread grows. */
void tracker_predict(struct tracker *tracker, const struct cell *cell, double dt_s);

/* A sample: pack voltage, current or NaN, temperature. Call tracker_predict before it. */
void tracker_update(struct tracker *tracker, const struct cell *cell, double voltage_V,
                    double current_A, double temp_C);

/* The load may be quite another from now on (an adapter came or went): its spread grows. */
void tracker_load_changed(struct tracker *tracker);

/* From now on nothing is heard: a charger that cannot be seen is not relied on, so a load that was
 * none or negative is taken as the typical one. */
void tracker_unseen(struct tracker *tracker);

void tracker_read(const struct tracker *tracker, const struct cell *cell,
                  struct tracker_estimate *ret);
