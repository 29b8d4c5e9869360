/* The equivalent circuit: worked values, Arrhenius factors, scaling, and its steps against GSL's
 * Runge-Kutta solver of Prince and Dormand (gsl_odeiv2_step_rk8pd). */
#include "core/cell.h"
#include "util/cleanup.h"
#include "util/real.h"

#include "unit/seeded.h"

#include <gsl/gsl_errno.h>
#include <gsl/gsl_odeiv2.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof(*(array)))

static void near(const char *what, double got, double wanted, double most) {
    if (!(fabs(got - wanted) <= most))
        fail_msg("%s: %.15g, wanted %.15g within %g", what, got, wanted, most);
}

/* A straight curve 3.0 to 4.2 V; resistances 50, 30, 20 mohm in the middle, 30 s and 300 s. */
static struct cell_table plain(void) {
    struct cell_table table = {.name = "plain",
                               .chemistry = "li-ion",
                               .capacity_Ah = 2.5,
                               .full_V = 4.2,
                               .damage_V = 2.5,
                               .possible_low_V = 1.5,
                               .possible_high_V = 4.4,
                               .voltage_sd_V = 0.01,
                               .n_res = 3,
                               .res_charge = {0.1, 0.5, 0.9},
                               .r0_ohm = {0.10, 0.05, 0.04},
                               .r1_ohm = {0.05, 0.03, 0.02},
                               .r2_ohm = {0.06, 0.02, 0.01},
                               .tau1_s = 30.0,
                               .tau2_s = 300.0,
                               .res_temp_C = 25.0,
                               .arrhenius_J_mol = 20e3};

    assert_int_equal(ocv_init(&table.ocv, (double[]){0, 1}, (double[]){3.0, 4.2}, 2), 0);
    return table;
}

static struct cell pack(int series, double capacity_Ah) {
    struct cell_table table = plain();
    struct cell cell;

    assert_int_equal(cell_init(&cell, &table, series, capacity_Ah), 0);
    return cell;
}

/* REFERENCES.md section 5, Thevenin: 50 mohm, 30 mohm with 1000 F, 1 A for 30 s. Derived from the
 * closed form U1 = R1 I (1 - exp(-1)). */
static void thevenin(void **state) {
    (void)state;
    struct cell cell = pack(1, 2.5);
    struct cell_state s = {.charge = 0.5};
    struct cell_point point;

    cell_at(&cell, 0.5, 25.0, &point);
    cell_step(&cell, &s, &point, 1.0, 30.0);
    near("u1", s.u1_V, 18.964e-3, 0.5e-6);
    near("sag without the slow pair", point.r0_ohm + s.u1_V, 68.964e-3, 0.5e-6);
    near("u2", s.u2_V, 0.02 * (1.0 - exp(-0.1)), 1e-15);
    near("charge", s.charge, 0.5 - 30.0 / (3600.0 * 2.5), 1e-15);
    near("source", cell_source_V(&point, &s), 3.6 - s.u1_V - s.u2_V, 1e-15);
}

/* REFERENCES.md section 5, constant power; the last ones by hand. */
static void constant_power(void **state) {
    (void)state;
    static const struct {
        double source_V, r_ohm, power_W, voltage_V, current_A;
    } known[] = {
        {3.7, 0.10, 5.0, 3.55953, 1.40468},   {3.7, 0.25, 5.0, 3.32394, 1.50424},
        {3.3, 0.50, 5.0, 2.12170, 2.35660},   {3.6, 0.40, 8.0, 2.00000, 4.00000},
        {3.7, 0.00, 5.0, 3.70000, 1.35135},   {3.7, 0.10, 0.0, 3.70000, 0.00000},
        {3.7, 0.10, -3.8, 3.80000, -1.00000},
    };
    double voltage_V, current_A;

    for (size_t i = 0; i < COUNT(known); i++) {
        assert_int_equal(cell_solve_power(known[i].source_V, known[i].r_ohm, known[i].power_W,
                                          &voltage_V, &current_A),
                         0);
        near("voltage", voltage_V, known[i].voltage_V, 5.1e-6);
        near("current", current_A, known[i].current_A, 5.1e-6);
    }
}

static void no_such_power(void **state) {
    (void)state;
    static const double bad[][3] = {
        {3.6, 0.41, 8.0}, {3.7, 0.1, 34.3}, {0.0, 0.1, 0.0}, {-1.0, 0.1, -1.0}};
    double voltage_V = 7.0, current_A = 8.0;

    for (size_t i = 0; i < COUNT(bad); i++)
        assert_int_equal(cell_solve_power(bad[i][0], bad[i][1], bad[i][2], &voltage_V, &current_A),
                         CELL_E_POWER);
    for (int i = 0; i < 3; i++) {
        double x[] = {3.7, 0.1, 5.0};

        x[i] = UNKNOWN;
        assert_int_equal(cell_solve_power(x[0], x[1], x[2], &voltage_V, &current_A), CELL_E_POWER);
    }
    assert_int_equal(cell_solve_power(3.7, 0.1, ENDLESS, &voltage_V, &current_A), CELL_E_POWER);
    assert_true(voltage_V == 7.0 && current_A == 8.0);
}

/* At E^2 / 4R exactly the voltage is half; a hair above there is no answer; below, V I = P and
 * V = E - R I hold. */
static void power_limit(void **state) {
    (void)state;
    scoped(seeded_free_p) gsl_rng *random = seeded_new("power_limit");

    for (int i = 0; i < 100000; i++) {
        double source_V = 0.5 + 20.0 * gsl_rng_uniform(random);
        double r_ohm = exp(-8.0 * gsl_rng_uniform(random));
        double most_W = source_V * source_V / (4.0 * r_ohm), voltage_V, current_A;
        double power_W = most_W * (2.0 * gsl_rng_uniform(random) - 1.0);

        assert_int_equal(cell_solve_power(source_V, r_ohm, most_W, &voltage_V, &current_A), 0);
        near("half", voltage_V, 0.5 * source_V, 1e-7 * source_V);
        assert_int_equal(
            cell_solve_power(source_V, r_ohm, most_W * (1.0 + 1e-12), &voltage_V, &current_A),
            CELL_E_POWER);
        assert_int_equal(cell_solve_power(source_V, r_ohm, power_W, &voltage_V, &current_A), 0);
        near("power", voltage_V * current_A, power_W, 1e-12 * most_W);
        near("drop", voltage_V, source_V - r_ohm * current_A, 1e-12 * source_V);
    }
}

/* REFERENCES.md section 3.3: factors against 25 C. */
static void arrhenius(void **state) {
    (void)state;
    static const double temp_C[] = {-20, -10, 0, 10, 45};
    static const double factor[][5] = {{4.196, 2.924, 2.093, 1.533, 0.602},
                                       {8.595, 5.001, 3.027, 1.899, 0.467}};
    struct cell_table table = plain();
    struct cell cell;
    struct cell_point warm, cold;

    for (size_t k = 0; k < 2; k++) {
        table.arrhenius_J_mol = k ? 30e3 : 20e3;
        for (size_t i = 0; i < COUNT(temp_C); i++)
            near("factor", cell_arrhenius(&table, temp_C[i]), factor[k][i], 0.00051);
        assert_true(cell_arrhenius(&table, 25.0) == 1.0);
    }
    assert_int_equal(cell_init(&cell, &table, 1, 2.5), 0);
    cell_at(&cell, 0.3, 25.0, &warm);
    cell_at(&cell, 0.3, 0.0, &cold);
    near("r0", cold.r0_ohm / warm.r0_ohm, 3.027, 0.0005);
    near("r1", cold.r1_ohm / warm.r1_ohm, 3.027, 0.0005);
    near("r2", cold.r2_ohm / warm.r2_ohm, 3.027, 0.0005);
    near("curve", cold.ocv_V, warm.ocv_V, 0.0);
}

/* A temperature that is not known is the table's own, not the coldest one there is. */
static void temperature_unknown(void **state) {
    (void)state;
    struct cell_table table = plain();

    assert_true(cell_arrhenius(&table, UNKNOWN) == 1.0);
    assert_true(isfinite(cell_arrhenius(&table, -273.15)));
    assert_true(isfinite(cell_arrhenius(&table, -400.0)));
    near("held", cell_arrhenius(&table, -400.0), cell_arrhenius(&table, -60.0), 0.0);
}

static void resistances_over_charge(void **state) {
    (void)state;
    static const double known[][2] = {{-0.5, 0.10}, {0.0, 0.10},  {0.1, 0.10}, {0.3, 0.075},
                                      {0.5, 0.05},  {0.7, 0.045}, {0.9, 0.04}, {1.2, 0.04}};
    struct cell cell = pack(1, 2.5);
    struct cell_point point;

    for (size_t i = 0; i < COUNT(known); i++) {
        cell_at(&cell, known[i][0], 25.0, &point);
        near("r0", point.r0_ohm, known[i][1], 1e-15);
    }
    cell.table.n_res = 1;
    for (size_t i = 0; i < COUNT(known); i++) {
        cell_at(&cell, known[i][0], 25.0, &point);
        assert_true(point.r0_ohm == 0.10 && point.r1_ohm == 0.05 && point.r2_ohm == 0.06);
    }
    cell_at(&cell, UNKNOWN, 25.0, &point);
    assert_true(isnan(point.ocv_V) && point.r0_ohm > 0.0);
}

/* Two in parallel: half the resistance, half as fast. Three in series: all voltages times three. */
static void series_and_capacity(void **state) {
    (void)state;
    struct cell one = pack(1, 2.5), two = pack(1, 5.0), three = pack(3, 5.0);
    struct cell_point p1, p2, p3;
    struct cell_state s1 = {.charge = 0.6}, s2 = s1, s3 = s1;

    cell_at(&one, 0.6, 5.0, &p1);
    cell_at(&two, 0.6, 5.0, &p2);
    cell_at(&three, 0.6, 5.0, &p3);
    near("parallel", p2.r0_ohm, p1.r0_ohm / 2.0, 1e-15);
    near("series", p3.r1_ohm, 3.0 * p1.r1_ohm / 2.0, 1e-15);
    near("series", p3.r2_ohm, 3.0 * p1.r2_ohm / 2.0, 1e-15);
    near("curve", p3.ocv_V, 3.0 * p1.ocv_V, 1e-15);
    near("slope", p3.ocv_slope_V, 3.0 * 1.2, 1e-12);
    cell_step(&one, &s1, &p1, 1.0, 100.0);
    cell_step(&two, &s2, &p2, 2.0, 100.0);
    cell_step(&three, &s3, &p3, 2.0, 100.0);
    near("charge", s2.charge, s1.charge, 1e-15);
    near("charge", s3.charge, s1.charge, 1e-15);
    near("polarisation", s2.u1_V, s1.u1_V, 1e-15);
    near("polarisation", s3.u2_V, 3.0 * s1.u2_V, 1e-15);
    three.wiring_ohm = 0.02;
    cell_at(&three, 0.6, 5.0, &p2);
    near("wiring", p2.r0_ohm, p3.r0_ohm + 0.02, 1e-15);
    near("wiring", p2.r1_ohm, p3.r1_ohm, 0.0);
}

/* ---- steps against an ODE solver --------------------------------------------------------------
 */

struct load {
    const struct cell *cell;
    const struct cell_point *point;
    double current_A;
};

/* y: u1, u2, charge */
static int derivatives(double t, const double y[], double dydt[], void *data) {
    const struct load *load = data;

    (void)t;
    dydt[0] = (load->point->r1_ohm * load->current_A - y[0]) / load->cell->table.tau1_s;
    dydt[1] = (load->point->r2_ohm * load->current_A - y[1]) / load->cell->table.tau2_s;
    dydt[2] = -load->current_A / (3600.0 * load->cell->capacity_Ah);
    return GSL_SUCCESS;
}

/* One profile: random currents, both signs, held for random times; the resistances move with the
 * charge from hold to hold, for both alike. */
static void one_profile(gsl_rng *random) {
    struct cell cell =
        pack(1 + (int)gsl_rng_uniform_int(random, 4), 0.3 + 20.0 * gsl_rng_uniform(random));
    struct cell_point point;
    struct load load = {&cell, &point, 0.0};
    gsl_odeiv2_system system = {derivatives, NULL, 3, &load};
    struct cell_state s = {.charge = gsl_rng_uniform(random)};
    double y[] = {0.0, 0.0, s.charge};

    cell.table.tau1_s = 2.0 + 28.0 * gsl_rng_uniform(random);
    cell.table.tau2_s = 100.0 + 1100.0 * gsl_rng_uniform(random);
    for (int hold = 0; hold < 60; hold++) {
        gsl_odeiv2_driver *driver =
            gsl_odeiv2_driver_alloc_y_new(&system, gsl_odeiv2_step_rk8pd, 1e-3, 1e-13, 1e-13);
        double t = 0.0, hold_s = exp(9.0 * gsl_rng_uniform(random) - 2.0);
        double temp_C = 60.0 * gsl_rng_uniform(random) - 20.0;
        int parts = 1 + (int)gsl_rng_uniform_int(random, 5);

        cell_at(&cell, s.charge, temp_C, &point);
        load.current_A = cell.capacity_Ah * (2.0 * gsl_rng_uniform(random) - 1.0);
        assert_int_equal(gsl_odeiv2_driver_apply(driver, &t, hold_s, y), GSL_SUCCESS);
        for (int part = 0; part < parts; part++)
            cell_step(&cell, &s, &point, load.current_A, hold_s / parts);
        near("u1", s.u1_V, y[0], 1e-9);
        near("u2", s.u2_V, y[1], 1e-9);
        near("charge", s.charge, y[2], 1e-9);
        gsl_odeiv2_driver_free(driver);
    }
}

static void steps_against_ode_solver(void **state) {
    (void)state;
    scoped(seeded_free_p) gsl_rng *random = seeded_new("steps_against_ode_solver");

    for (int i = 0; i < 100; i++)
        one_profile(random);
}

static void no_time_no_change(void **state) {
    (void)state;
    struct cell cell = pack(1, 2.5);
    struct cell_state s = {0.4, 0.01, 0.02}, before = s;
    struct cell_point point;

    cell_at(&cell, 0.4, 25.0, &point);
    cell_step(&cell, &s, &point, 2.0, 0.0);
    assert_memory_equal(&s, &before, sizeof(s));
    cell_step(&cell, &s, &point, 0.0, 1e7);
    assert_true(s.charge == 0.4 && fabs(s.u1_V) < 1e-12 && fabs(s.u2_V) < 1e-12);
}

/* ---- tables that are none ---------------------------------------------------------------------
 */

struct fault {
    const char *what;
    size_t offset;
    double value;
};

#define AT(field, value)                                                                           \
    { #field, offsetof(struct cell_table, field), value }

static void bad_tables(void **state) {
    (void)state;
    static const double nan = UNKNOWN, inf = ENDLESS;
    const struct fault faults[] = {
        AT(capacity_Ah, 0.0),      AT(capacity_Ah, -1.0),     AT(capacity_Ah, nan),
        AT(capacity_Ah, inf),      AT(full_V, 2.4),           AT(full_V, 4.4),
        AT(full_V, nan),           AT(damage_V, 1.5),         AT(damage_V, 4.2),
        AT(damage_V, nan),         AT(possible_low_V, 0.0),   AT(possible_low_V, -1.0),
        AT(possible_low_V, 2.5),   AT(possible_low_V, nan),   AT(possible_high_V, 4.2),
        AT(possible_high_V, nan),  AT(possible_high_V, inf),  AT(voltage_sd_V, 0.0),
        AT(voltage_sd_V, nan),     AT(res_charge[0], 0.5),    AT(res_charge[1], 0.95),
        AT(res_charge[2], nan),    AT(r0_ohm[0], 0.0),        AT(r0_ohm[2], -0.01),
        AT(r1_ohm[1], nan),        AT(r2_ohm[2], inf),        AT(tau1_s, 0.0),
        AT(tau1_s, 300.0),         AT(tau1_s, nan),           AT(tau2_s, 30.0),
        AT(tau2_s, inf),           AT(res_temp_C, nan),       AT(res_temp_C, -300.0),
        AT(res_temp_C, 200.0),     AT(arrhenius_J_mol, -1.0), AT(arrhenius_J_mol, nan),
        AT(arrhenius_J_mol, 2e6),  AT(ocv.charge[0], -0.5),   AT(ocv.charge[1], 1.5),
        AT(ocv.voltage_V[0], 1.4), AT(ocv.voltage_V[1], 4.5), AT(ocv.voltage_V[1], 4200.0),
    };
    const char *what;

    for (size_t i = 0; i < COUNT(faults); i++) {
        struct cell_table table = plain();
        struct cell cell, before;

        assert_int_equal(cell_table_check(&table, &what), 0);
        memcpy((char *)&table + faults[i].offset, &faults[i].value, sizeof(double));
        what = NULL;
        if (cell_table_check(&table, &what) != CELL_E_TABLE || !what)
            fail_msg("%s = %g was taken", faults[i].what, faults[i].value);
        memset(&cell, 0x5a, sizeof(cell));
        before = cell;
        assert_int_equal(cell_init(&cell, &table, 1, 2.5), CELL_E_TABLE);
        assert_memory_equal(&cell, &before, sizeof(cell));
    }
}

static void bad_counts(void **state) {
    (void)state;
    struct cell_table table = plain();
    const char *what = NULL;

    table.n_res = 0;
    assert_int_equal(cell_table_check(&table, &what), CELL_E_TABLE);
    table.n_res = CELL_RES_MAX + 1;
    assert_int_equal(cell_table_check(&table, &what), CELL_E_TABLE);
    table = plain();
    table.ocv.n = 1;
    assert_int_equal(cell_table_check(&table, &what), CELL_E_TABLE);
    table.ocv.n = OCV_POINTS_MAX + 1;
    assert_int_equal(cell_table_check(&table, &what), CELL_E_TABLE);
}

static void bad_packs(void **state) {
    (void)state;
    static const double capacities[] = {0.0, -1.0, 1e-320};
    struct cell_table table = plain();
    struct cell cell, before;

    memset(&cell, 0x5a, sizeof(cell));
    before = cell;
    for (size_t i = 0; i < COUNT(capacities); i++)
        assert_int_equal(cell_init(&cell, &table, 1, capacities[i]), CELL_E_RANGE);
    assert_int_equal(cell_init(&cell, &table, 1, UNKNOWN), CELL_E_RANGE);
    assert_int_equal(cell_init(&cell, &table, 0, 2.5), CELL_E_RANGE);
    assert_int_equal(cell_init(&cell, &table, -3, 2.5), CELL_E_RANGE);
    assert_memory_equal(&cell, &before, sizeof(cell));
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(thevenin),
        cmocka_unit_test(constant_power),
        cmocka_unit_test(no_such_power),
        cmocka_unit_test(power_limit),
        cmocka_unit_test(arrhenius),
        cmocka_unit_test(temperature_unknown),
        cmocka_unit_test(resistances_over_charge),
        cmocka_unit_test(series_and_capacity),
        cmocka_unit_test(steps_against_ode_solver),
        cmocka_unit_test(no_time_no_change),
        cmocka_unit_test(bad_tables),
        cmocka_unit_test(bad_counts),
        cmocka_unit_test(bad_packs),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
