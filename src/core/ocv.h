/* Open-circuit voltage of one cell over its charge: a monotone cubic through a table.
 *
 * Piecewise cubic Hermite interpolation with the weighted harmonic-mean slopes of
 * F. N. Fritsch and J. Butland, "A method for constructing local monotone piecewise cubic
 * interpolants", SIAM J. Sci. Stat. Comput. 5 (1984) 300-304, and one-sided three-point slopes at
 * the ends: what SLATEC's PCHIM and SciPy's PchipInterpolator compute. It never overshoots, so a
 * monotone table gives a monotone curve, and a flat step stays flat.
 */
#pragma once

#include <stddef.h>

enum { OCV_POINTS_MAX = 128 };

enum ocv_error {
    OCV_E_SIZE = 1, /* fewer than 2 or more than OCV_POINTS_MAX points */
    OCV_E_ORDER,  /* charge does not strictly rise, or voltage falls, from one point to the next */
    OCV_E_NUMBER, /* a value, or the slope between two points, is not finite */
};

struct ocv {
    size_t n;
    double charge[OCV_POINTS_MAX];    /* 0..1, strictly rising */
    double voltage_V[OCV_POINTS_MAX]; /* never falling; equal neighbours are allowed */
    double slope_V[OCV_POINTS_MAX];   /* dV/dcharge at the points, >= 0 */
};

/* Takes n points. Returns 0, or a positive enum ocv_error; ret is not touched then. */
int ocv_init(struct ocv *ret, const double *charge, const double *voltage_V, size_t n);

/* Voltage at a charge. Outside the table the end's tangent goes on. */
double ocv_voltage(const struct ocv *ocv, double charge);

/* dV/dcharge in volts per unit charge, >= 0. Outside the table the end's slope. */
double ocv_slope(const struct ocv *ocv, double charge);

/* Value and slope in one look-up. */
void ocv_at(const struct ocv *ocv, double charge, double *ret_voltage_V, double *ret_slope_V);

/* Inverse: the charge whose voltage this is, held to the table's ends; on a flat step its middle.
 * NaN for NaN. */
double ocv_charge(const struct ocv *ocv, double voltage_V);
