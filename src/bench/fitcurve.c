/* The slow discharge as a curve: local straight lines through the rows around each charge. */
#include "bench/fitcurve.h"

#include <math.h>

#define SLOW_SHARE 0.002 /* C-rate that counts as discharging */

int fitcurve_discharge(const struct fit_log *log, double capacity_Ah, size_t *ret_first,
                       size_t *ret_last) {
    double best = 0.2, taken = 0.0;
    size_t first = 0;
    int r = FITCURVE_E_NONE;

    for (size_t i = 1; i < log->n; i++) {
        const struct fit_row *row = &log->row[i];

        if (!(row->current_A > SLOW_SHARE * capacity_Ah) || row->time_s - row[-1].time_s > 1800.0) {
            first = i + 1;
            taken = 0.0;
            continue;
        }
        if (i > first)
            taken += row->current_A * (row->time_s - row[-1].time_s) / (3600.0 * capacity_Ah);
        if (taken <= best)
            continue;
        best = taken;
        *ret_first = first;
        *ret_last = i;
        r = 0;
    }
    return r;
}

/* Fine where curves bend. Returns how many. */
static size_t axis(double *charge) {
    size_t n = 0;

    for (double z = 0.0; z < 0.0599; z += 0.0025)
        charge[n++] = z;
    for (double z = 0.06; z < 0.9999; z += 0.01)
        charge[n++] = z;
    charge[n++] = 1.0;
    return n;
}

/* The straight line through the rows from a on whose charge lies within half of z, at z. Charge
 * falls from row to row. NaN without two rows. */
static double local(const struct fit_row *row, size_t a, size_t last, double z, double half) {
    double n = 0.0, sx = 0.0, sy = 0.0, sxx = 0.0, sxy = 0.0, spread;

    for (size_t i = a; i <= last && row[i].charge >= z - half; i++) {
        double x = row[i].charge - z, y = row[i].voltage_V;

        if (x > half)
            continue;
        n += 1.0;
        sx += x;
        sy += y;
        sxx += x * x;
        sxy += x * y;
    }
    spread = n * sxx - sx * sx;
    return n >= 2.0 && spread > 0.0 ? (sy * sxx - sx * sxy) / spread : (double)NAN;
}

static double reading(const struct fit_log *log, const struct fit_curve *curve, double z) {
    double half = z < 0.06 ? 0.0015 : z > 0.96 ? 0.003 : 0.006, at;

    z = fmin(fmax(z, curve->low), curve->high);
    do {
        at = local(log->row, curve->first, curve->last, z, half);
        half *= 2.0;
    } while (isnan(at) && half < 1.0);
    return at;
}

/* Beyond the log's ends: on with the slope of the last two percent. */
static double beyond(const struct fit_log *log, const struct fit_curve *curve, double z) {
    double end = z < curve->low ? curve->low : curve->high;
    double in = z < curve->low ? end + 0.02 : end - 0.02;
    double at = reading(log, curve, end);

    return at + (z - end) * (at - reading(log, curve, in)) / (end - in);
}

int fitcurve_make(struct fit_curve *ret, const struct fit_log *log, double capacity_Ah,
                  double least_V, double most_V) {
    struct fit_curve curve = {0};
    double charge[OCV_POINTS_MAX], voltage_V[OCV_POINTS_MAX];
    size_t n = axis(charge);

    if (fitcurve_discharge(log, capacity_Ah, &curve.first, &curve.last))
        return FITCURVE_E_NONE;
    curve.low = log->row[curve.last].charge;
    curve.high = log->row[curve.first].charge;
    for (size_t i = curve.first; i <= curve.last; i++)
        curve.current_A += log->row[i].current_A / (double)(curve.last - curve.first + 1);
    curve.rested = curve.last;
    while (curve.rested + 1 < log->n && !log->row[curve.rested + 1].start &&
           fabs(log->row[curve.rested + 1].current_A) < SLOW_SHARE * capacity_Ah)
        curve.rested++;
    for (size_t i = 0; i < n; i++) {
        double V = charge[i] < curve.low || charge[i] > curve.high
                       ? beyond(log, &curve, charge[i])
                       : reading(log, &curve, charge[i]);

        V = fmin(fmax(V, least_V), most_V);
        voltage_V[i] = i && !(V >= voltage_V[i - 1]) ? voltage_V[i - 1] : V;
    }
    if (ocv_init(&curve.under, charge, voltage_V, n))
        return FITCURVE_E_NONE;
    *ret = curve;
    return 0;
}
