/* The open-circuit curve as a slow discharge has it: the voltage under its small current, smoothed,
 * on a fine charge axis. */
#pragma once

#include "bench/fitlog.h"
#include "core/ocv.h"

struct fit_curve {
    struct ocv under;   /* voltage under current_A */
    double current_A;   /* mean */
    double low, high;   /* charges the log covered; beyond, the tangent goes on */
    size_t first, last; /* rows of the discharge in the log */
    size_t rested;      /* last row of the rest behind it; last when there is none */
};

enum fitcurve_error {
    FITCURVE_E_NONE = 1, /* no discharge that spans a fifth of the charge */
};

/* The log's longest discharge, in rows: first and last. charge still holds charge_Ah or the placed
 * charge. 0 or FITCURVE_E_NONE. */
int fitcurve_discharge(const struct fit_log *log, double capacity_Ah, size_t *ret_first,
                       size_t *ret_last);

/* Of a placed log. least_V and most_V bound what lies beyond its ends. 0 or FITCURVE_E_NONE. */
int fitcurve_make(struct fit_curve *ret, const struct fit_log *log, double capacity_Ah,
                  double least_V, double most_V);
