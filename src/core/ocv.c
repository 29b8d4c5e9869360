/* Monotone cubic interpolation; see ocv.h for the source of the slopes. */
#include "core/ocv.h"

#include <math.h>
#include <string.h>

/* One-sided three-point slope at an end, held so that the end stays monotone. */
static double end_slope(double h0, double h1, double d0, double d1) {
    double slope = ((2.0 * h0 + h1) * d0 - h0 * d1) / (h0 + h1);

    if (slope * d0 <= 0.0)
        return 0.0;
    if (d0 * d1 <= 0.0 && fabs(slope) > 3.0 * fabs(d0))
        return 3.0 * d0;
    return slope;
}

static double inner_slope(double h0, double h1, double d0, double d1) {
    double w0 = 2.0 * h1 + h0, w1 = h1 + 2.0 * h0;

    if (d0 <= 0.0 || d1 <= 0.0)
        return 0.0;
    return (w0 + w1) / (w0 / d0 + w1 / d1);
}

static double secant(const double *x, const double *y, size_t i) {
    return (y[i + 1] - y[i]) / (x[i + 1] - x[i]);
}

static void fill_slopes(struct ocv *ocv) {
    const double *x = ocv->charge, *y = ocv->voltage_V;
    size_t n = ocv->n;

    if (n == 2) {
        ocv->slope_V[0] = ocv->slope_V[1] = secant(x, y, 0);
        return;
    }
    for (size_t i = 1; i + 1 < n; i++)
        ocv->slope_V[i] =
            inner_slope(x[i] - x[i - 1], x[i + 1] - x[i], secant(x, y, i - 1), secant(x, y, i));
    ocv->slope_V[0] = end_slope(x[1] - x[0], x[2] - x[1], secant(x, y, 0), secant(x, y, 1));
    ocv->slope_V[n - 1] = end_slope(x[n - 1] - x[n - 2], x[n - 2] - x[n - 3], secant(x, y, n - 2),
                                    secant(x, y, n - 3));
}

int ocv_init(struct ocv *ret, const double *charge, const double *voltage_V, size_t n) {
    if (n < 2 || n > OCV_POINTS_MAX)
        return OCV_E_SIZE;
    for (size_t i = 0; i < n; i++)
        if (!isfinite(charge[i]) || !isfinite(voltage_V[i]))
            return OCV_E_NUMBER;
    for (size_t i = 1; i < n; i++) {
        if (!(charge[i] > charge[i - 1]) || voltage_V[i] < voltage_V[i - 1])
            return OCV_E_ORDER;
        if (!isfinite(secant(charge, voltage_V, i - 1)))
            return OCV_E_NUMBER;
    }
    memset(ret, 0, sizeof(*ret));
    ret->n = n;
    memcpy(ret->charge, charge, n * sizeof(*charge));
    memcpy(ret->voltage_V, voltage_V, n * sizeof(*voltage_V));
    fill_slopes(ret);
    return 0;
}

/* The interval [i, i + 1] that holds value; key rises. */
static size_t interval(const double *key, size_t n, double value) {
    size_t low = 0, high = n - 1;

    while (high - low > 1) {
        size_t middle = (low + high) / 2;
        if (key[middle] <= value)
            low = middle;
        else
            high = middle;
    }
    return low;
}

static void hermite(const struct ocv *ocv, size_t i, double charge, double *ret_V,
                    double *ret_slope) {
    double h = ocv->charge[i + 1] - ocv->charge[i], t = (charge - ocv->charge[i]) / h;
    double d = (ocv->voltage_V[i + 1] - ocv->voltage_V[i]) / h;
    double m0 = ocv->slope_V[i], m1 = ocv->slope_V[i + 1];
    double c2 = 3.0 * d - 2.0 * m0 - m1, c3 = m0 + m1 - 2.0 * d;

    *ret_V = ocv->voltage_V[i] + h * t * (m0 + t * (c2 + t * c3));
    *ret_slope = m0 + t * (2.0 * c2 + 3.0 * t * c3);
}

void ocv_at(const struct ocv *ocv, double charge, double *ret_voltage_V, double *ret_slope_V) {
    size_t last = ocv->n - 1;

    if (charge <= ocv->charge[0]) {
        *ret_slope_V = ocv->slope_V[0];
        *ret_voltage_V = ocv->voltage_V[0] + *ret_slope_V * (charge - ocv->charge[0]);
    } else if (charge >= ocv->charge[last]) {
        *ret_slope_V = ocv->slope_V[last];
        *ret_voltage_V = ocv->voltage_V[last] + *ret_slope_V * (charge - ocv->charge[last]);
    } else {
        hermite(ocv, interval(ocv->charge, ocv->n, charge), charge, ret_voltage_V, ret_slope_V);
        if (*ret_slope_V < 0.0) /* by rounding; NaN stays */
            *ret_slope_V = 0.0;
    }
}

double ocv_voltage(const struct ocv *ocv, double charge) {
    double voltage_V, slope_V;

    ocv_at(ocv, charge, &voltage_V, &slope_V);
    return voltage_V;
}

double ocv_slope(const struct ocv *ocv, double charge) {
    double voltage_V, slope_V;

    ocv_at(ocv, charge, &voltage_V, &slope_V);
    return slope_V;
}

/* Bisection inside one interval: the cubic is monotone there, so it always ends. */
static double invert(const struct ocv *ocv, size_t i, double voltage_V) {
    double low = ocv->charge[i], high = ocv->charge[i + 1];

    for (int step = 0; step < 60; step++) {
        double middle = 0.5 * (low + high), value, slope;
        hermite(ocv, i, middle, &value, &slope);
        if (value < voltage_V)
            low = middle;
        else
            high = middle;
    }
    return 0.5 * (low + high);
}

double ocv_charge(const struct ocv *ocv, double voltage_V) {
    size_t last = ocv->n - 1, first = 0, end;

    if (isnan(voltage_V))
        return voltage_V;
    if (voltage_V < ocv->voltage_V[0])
        return ocv->charge[0];
    if (voltage_V > ocv->voltage_V[last])
        return ocv->charge[last];
    while (ocv->voltage_V[first] < voltage_V)
        first++;
    for (end = first; end < last && ocv->voltage_V[end + 1] <= voltage_V;)
        end++;
    if (ocv->voltage_V[first] == voltage_V)
        return 0.5 * (ocv->charge[first] + ocv->charge[end]);
    return invert(ocv, first - 1, voltage_V);
}
