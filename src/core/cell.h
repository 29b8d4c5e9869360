/* The pack as an equivalent circuit: open-circuit voltage, a series resistance and two RC pairs,
 * all over charge, resistances over temperature by Arrhenius' law.
 *
 *   V = OCV(charge) - R0 I - u1 - u2,   du/dt = (R I - u) / tau,   dcharge/dt = -I / (3600 Q)
 *
 * A cell table speaks of one cell. A pack of `series` cells with `capacity_Ah` (all parallel cells
 * together) has voltages times series, and resistances times series * table capacity / pack
 * capacity. Sign: current_A and power_W are positive when discharging. Equivalent circuit: G. L.
 * Plett, J. Power Sources 134 (2004) 262-276.
 */
#pragma once

#include "core/ocv.h"

#include <stdbool.h>
#include <stddef.h>

enum { CELL_RES_MAX = 24, CELL_NAME_MAX = 48 };

/* One cell's table, as a file in conf/cells describes it (brink-cells(5)). */
struct cell_table {
    char name[CELL_NAME_MAX];
    char chemistry[CELL_NAME_MAX]; /* li-ion, li-ion-hv, lifepo4: for people; limits stand below */
    double capacity_Ah;            /* of the cell the table was made from */
    double full_V;                 /* end of charge */
    double damage_V;               /* published least voltage; a cutoff under it harms the cell */
    double possible_low_V;         /* a reading outside low..high is no reading of such a cell; the
                                    * curve lies inside */
    double possible_high_V;
    double voltage_sd_V; /* how far the curve may be off, one standard deviation */
    struct ocv ocv;
    size_t n_res;                    /* >= 1 points over charge, strictly rising */
    double res_charge[CELL_RES_MAX]; /* between them linear, outside held */
    double r0_ohm[CELL_RES_MAX];     /* all > 0, at res_temp_C */
    double r1_ohm[CELL_RES_MAX];
    double r2_ohm[CELL_RES_MAX];
    double tau1_s, tau2_s;  /* > 0, tau1 < tau2 */
    double res_temp_C;      /* temperature of the resistance columns */
    double arrhenius_J_mol; /* activation energy of the resistances, >= 0 */
};

struct cell {
    struct cell_table table;
    int series;
    double capacity_Ah;
    double voltage_factor; /* series */
    double ohm_factor;     /* series * table capacity / pack capacity */
    double wiring_ohm;     /* wire and switch between cells and gauge, added to R0; 0 after init */
};

/* Pack quantities at one charge and temperature. */
struct cell_point {
    double ocv_V, ocv_slope_V; /* slope per unit charge */
    double r0_ohm, r1_ohm, r2_ohm;
};

struct cell_state {
    double charge;     /* may leave 0..1 by a little */
    double u1_V, u2_V; /* polarisation of the RC pairs, positive after discharging */
};

enum cell_error {
    CELL_E_RANGE = 1, /* series < 1, capacity not > 0 or out of all proportion to the table's */
    CELL_E_TABLE,     /* the table breaks one of the rules above */
    CELL_E_POWER,     /* the pack cannot give that power: above OCV^2 / 4R */
};

/* Checks the table against the rules above: 0, or CELL_E_TABLE with a word on what is wrong. */
int cell_table_check(const struct cell_table *table, const char **ret_what);

/* Returns 0 or CELL_E_RANGE, CELL_E_TABLE; ret is not touched then. */
int cell_init(struct cell *ret, const struct cell_table *table, int series, double capacity_Ah);

/* exp(Ea/R (1/T - 1/T_res)): what resistances are multiplied by at temp_C, held under -60 C. NaN =
 * not known counts as the table's temperature: 1. */
double cell_arrhenius(const struct cell_table *table, double temp_C);

void cell_at(const struct cell *cell, double charge, double temp_C, struct cell_point *ret);

/* Source voltage behind R0: OCV - u1 - u2. */
double cell_source_V(const struct cell_point *point, const struct cell_state *state);

/* Terminal voltage and current at constant power from a source of source_V behind r_ohm:
 * V = (E + sqrt(E^2 - 4 r P)) / 2. power_W < 0 charges. Returns 0, or CELL_E_POWER and nothing set.
 */
int cell_solve_power(double source_V, double r_ohm, double power_W, double *ret_voltage_V,
                     double *ret_current_A);

/* One step of dt_s at constant current, exact for the RC pairs. */
void cell_step(const struct cell *cell, struct cell_state *state, const struct cell_point *point,
               double current_A, double dt_s);
