/* The linear part of the fit: resistances and curve moves for given time constants. */
#pragma once

#include "bench/fit.h"

struct fit_slow {
    double tau1_s, tau2_s, arrhenius_J_mol;
};

/* Sets the weights of all rows. */
void fitsolve_weigh(struct fit *fit);

/* Fills r_ohm and move_V from the logs near the reference temperature; *ret_cost is what was made
 * least, in V^2 a log. 0 or FIT_E_SOLVE. */
int fitsolve(struct fit *fit, const struct fit_slow *slow, double *ret_cost);

/* How far the other logs are off r_ohm and move_V under an activation energy, each with the curve
 * it likes best; V^2 a log. 0 or FIT_E_SOLVE. */
int fitsolve_apart(const struct fit *fit, const struct fit_slow *slow, double *ret_cost);
