/* A cell table from logs.
 *
 * For given time constants the terminal voltage is linear in the resistances at their charges and
 * in what the curve has to be moved by:
 *
 *   V = curve(z) + move(z) + R(z) I0 - R0(z) f I - L1[R1(z) f I] - L2[R2(z) f I]
 *
 * curve is a slow discharge, I0 its current and R = R0 + R1 + R2, so that what the cell sagged by
 * then is added back; move and resistances are linear between their points, f is Arrhenius' factor
 * at the row's temperature, L a first-order low-pass. So all but the two time constants comes out
 * of one bounded linear fit with smoothness wanted, and a search within bounds finds those two
 * (variable projection: G. H. Golub and V. Pereyra, SIAM J. Numer. Anal. 10 (1973) 413-432; pattern
 * search: R. Hooke and T. A. Jeeves, J. ACM 8 (1961) 212-229).
 *
 * Logs further from the reference temperature have no say in that. They give the activation energy
 * alone, each with a curve shifted as it likes: in the cold the curve moves, and the cell has aged.
 *
 * What a row counts: the time it stands for; less under more than 1C, which no small computer
 * draws; less where the curve is steep, as a little charge is many millivolts there. A log
 * with rests counts five times what another does, as rests are the curve.
 */
#pragma once

#include "bench/fitcurve.h"
#include "bench/fitlog.h"
#include "core/cell.h"

enum { FIT_LOGS_MAX = 15, FIT_RES = 14, FIT_MOVES = 15, FIT_SHIFTS = 9, FIT_RESTS_MAX = 256 };

struct fit_limits {
    const char *chemistry;
    double full_V, damage_V;
};

struct fit_wish {
    double capacity_Ah;      /* NaN = as the logs have it */
    double spread_V;         /* NaN = from the residual */
    double activation_J_mol; /* NaN = from logs of several temperatures, else a fair guess */
    const char *name;
    struct fit_limits limits;
};

struct fit_residual {
    double rms_V, mean_V; /* the table's voltage against the log's, as it lies, nothing shifted */
    double slow_rms_V; /* of the means over each 2 % of charge: what is left of a curve's error */
};

struct fit {
    struct fit_log log[FIT_LOGS_MAX]; /* the first is the slow discharge */
    size_t n_logs;
    struct fit_curve curve;
    double temp_C;        /* reference */
    bool activation_told; /* by the logs */
    size_t n_res, n_moves;
    double res_charge[FIT_RES], move_charge[FIT_MOVES];
    double r_ohm[3][FIT_RES], move_V[FIT_MOVES];
    struct cell_table table;
    struct fit_residual residual[FIT_LOGS_MAX];
    size_t n_rests;
    struct fit_rest rest[FIT_RESTS_MAX]; /* near the reference temperature */
    double rests_rms_V;                  /* against the table's curve; NaN without rests */
};

enum fit_error {
    FIT_E_CAPACITY = 1, /* neither told nor in the logs */
    FIT_E_CURVE,        /* the first log holds no slow discharge */
    FIT_E_LOGS,         /* no log with pulses or changing load */
    FIT_E_SOLVE,        /* the logs do not determine a table */
};

/* Is the log so far from the reference temperature that its curve is its own? */
bool fit_is_apart(const struct fit *fit, const struct fit_log *log);

/* Fits fit->log[0..n_logs) and fills the rest. 0 or an enum fit_error. */
int fit_run(struct fit *fit, const struct fit_wish *wish);
void fit_free(struct fit *fit);
