/* Equivalent circuit of a pack; formulas and their sources stand in cell.h. */
#include "core/cell.h"

#include <math.h>

static const double GAS_J_mol_K = 8.314462618; /* CODATA 2018 */
static const double ZERO_C_K = 273.15;

static bool positive(double x) {
    return x > 0.0 && isfinite(x);
}

static const char *limits_wrong(const struct cell_table *t) {
    if (!positive(t->capacity_Ah))
        return "the capacity is not above zero";
    if (!(t->possible_low_V < t->damage_V && t->damage_V < t->full_V &&
          t->full_V < t->possible_high_V && isfinite(t->possible_high_V)))
        return "the voltages must rise: possible_low, damage, full, possible_high";
    if (!(t->possible_low_V > 0.0))
        return "possible_low must be above zero: a dead wire reads zero";
    if (!positive(t->voltage_sd_V))
        return "the curve's spread is not above zero";
    return NULL;
}

static const char *resistance_wrong(const struct cell_table *t) {
    if (t->n_res < 1 || t->n_res > CELL_RES_MAX)
        return "too few or too many resistance points";
    for (size_t i = 0; i < t->n_res; i++) {
        if (!positive(t->r0_ohm[i]) || !positive(t->r1_ohm[i]) || !positive(t->r2_ohm[i]))
            return "a resistance is not above zero";
        if (!isfinite(t->res_charge[i]) || (i && !(t->res_charge[i] > t->res_charge[i - 1])))
            return "the charge of the resistance points does not rise";
    }
    if (!positive(t->tau1_s) || !(t->tau2_s > t->tau1_s) || !isfinite(t->tau2_s))
        return "the time constants must be above zero and rise";
    if (!(t->arrhenius_J_mol >= 0.0 && t->arrhenius_J_mol < 2e5))
        return "the activation energy is out of range";
    if (!(t->res_temp_C > -60.0 && t->res_temp_C < 100.0))
        return "the resistances' temperature is out of range";
    return NULL;
}

static const char *curve_wrong(const struct cell_table *t) {
    size_t last = t->ocv.n - 1;

    if (t->ocv.n < 2 || t->ocv.n > OCV_POINTS_MAX)
        return "the open-circuit curve has too few or too many points";
    if (!(t->ocv.charge[0] >= 0.0 && t->ocv.charge[last] <= 1.0))
        return "the open-circuit curve leaves 0 to 100 %";
    if (!(t->ocv.voltage_V[0] >= t->possible_low_V && t->ocv.voltage_V[last] <= t->possible_high_V))
        return "the open-circuit curve leaves possible_low to possible_high";
    return NULL;
}

int cell_table_check(const struct cell_table *table, const char **ret_what) {
    const char *what = limits_wrong(table);

    if (!what)
        what = resistance_wrong(table);
    if (!what)
        what = curve_wrong(table);
    if (!what)
        return 0;
    *ret_what = what;
    return CELL_E_TABLE;
}

int cell_init(struct cell *ret, const struct cell_table *table, int series, double capacity_Ah) {
    const char *what;

    if (series < 1 || !positive(capacity_Ah))
        return CELL_E_RANGE;
    if (cell_table_check(table, &what))
        return CELL_E_TABLE;
    if (!positive(series * table->capacity_Ah / capacity_Ah))
        return CELL_E_RANGE;
    ret->table = *table;
    ret->series = series;
    ret->capacity_Ah = capacity_Ah;
    ret->voltage_factor = series;
    ret->wiring_ohm = 0.0;
    ret->ohm_factor = series * table->capacity_Ah / capacity_Ah;
    return 0;
}

double cell_arrhenius(const struct cell_table *table, double temp_C) {
    double t_K = fmax(temp_C, -60.0) + ZERO_C_K, ref_K = table->res_temp_C + ZERO_C_K;

    if (isnan(temp_C))
        return 1.0;
    return exp(table->arrhenius_J_mol / GAS_J_mol_K * (1.0 / t_K - 1.0 / ref_K));
}

static double between(const double *y, size_t i, double share) {
    return y[i] + share * (y[i + 1] - y[i]);
}

static void resistance_at(const struct cell_table *t, double charge, double *r0, double *r1,
                          double *r2) {
    size_t last = t->n_res - 1, i = 0;
    double share;

    if (last == 0 || charge <= t->res_charge[0] || charge >= t->res_charge[last]) {
        i = charge <= t->res_charge[0] ? 0 : last;
        *r0 = t->r0_ohm[i];
        *r1 = t->r1_ohm[i];
        *r2 = t->r2_ohm[i];
        return;
    }
    while (charge >= t->res_charge[i + 1])
        i++;
    share = (charge - t->res_charge[i]) / (t->res_charge[i + 1] - t->res_charge[i]);
    *r0 = between(t->r0_ohm, i, share);
    *r1 = between(t->r1_ohm, i, share);
    *r2 = between(t->r2_ohm, i, share);
}

void cell_at(const struct cell *cell, double charge, double temp_C, struct cell_point *ret) {
    double factor = cell->ohm_factor * cell_arrhenius(&cell->table, temp_C);
    double r0, r1, r2;

    ocv_at(&cell->table.ocv, charge, &ret->ocv_V, &ret->ocv_slope_V);
    ret->ocv_V *= cell->voltage_factor;
    ret->ocv_slope_V *= cell->voltage_factor;
    resistance_at(&cell->table, charge, &r0, &r1, &r2);
    ret->r0_ohm = r0 * factor + cell->wiring_ohm;
    ret->r1_ohm = r1 * factor;
    ret->r2_ohm = r2 * factor;
}

double cell_source_V(const struct cell_point *point, const struct cell_state *state) {
    return point->ocv_V - state->u1_V - state->u2_V;
}

int cell_solve_power(double source_V, double r_ohm, double power_W, double *ret_voltage_V,
                     double *ret_current_A) {
    double voltage_V;

    if (!(source_V > 0.0) || !(r_ohm >= 0.0) || !(power_W <= source_V * source_V / (4.0 * r_ohm)))
        return CELL_E_POWER;
    voltage_V = 0.5 * (source_V + sqrt(fmax(source_V * source_V - 4.0 * r_ohm * power_W, 0.0)));
    *ret_voltage_V = voltage_V;
    *ret_current_A = power_W / voltage_V;
    return 0;
}

void cell_step(const struct cell *cell, struct cell_state *state, const struct cell_point *point,
               double current_A, double dt_s) {
    double fade1 = exp(-dt_s / cell->table.tau1_s), fade2 = exp(-dt_s / cell->table.tau2_s);

    state->charge -= current_A * dt_s / (3600.0 * cell->capacity_Ah);
    state->u1_V = fade1 * state->u1_V + (1.0 - fade1) * point->r1_ohm * current_A;
    state->u2_V = fade2 * state->u2_V + (1.0 - fade2) * point->r2_ohm * current_A;
}
