/* Runs the equivalent circuit forward in steps of charge; see endurance.h. */
#include "core/endurance.h"

#include "util/real.h"

#include <math.h>

static const double STEP_CHARGE = 0.01; /* longest step, in charge */
static const double FINE_S = 1.0;       /* how exactly the end is found, and as a share: */
static const double FINE_SHARE = 0.002;
static const double LONGEST_S = 400.0 * 86400.0; /* beyond this there is no end in sight */
static const int BURST_HALVINGS = 6;
static const double LOAD_AHEAD = 0.08;     /* the mean load of the time to come, as a share */
static const double IDLE_h = 1e-4;         /* a load under this many capacities an hour is none */
static const double LEAST_SPREADS = 1.645; /* 5th percentile of the normal distribution */
static const double TAPER_h = 0.05; /* charging ends at this current, common practice, no source */
static const double FULL_CHARGE = 0.995;

struct run {
    const struct cell *cell;
    const struct endurance_goal *goal;
    struct cell_state state;
    double power_W, burst_W, scale, bias_V, temp_C;
};

static void point_at(const struct run *run, double charge, struct cell_point *ret) {
    cell_at(run->cell, charge, run->temp_C, ret);
    ret->ocv_V += run->bias_V;
    ret->r0_ohm *= run->scale;
    ret->r1_ohm *= run->scale;
    ret->r2_ohm *= run->scale;
}

/* What stands at its end in this state, if anything; current_A under the mean load. */
static enum cause at_end(const struct run *run, const struct cell_point *point, double *ret_A) {
    double source_V = cell_source_V(point, &run->state), voltage_V, burst_V, burst_A;

    if (run->state.charge <= run->goal->cutoff_charge)
        return CAUSE_CHARGE;
    if (point->ocv_V <= run->goal->cutoff_rest_V)
        return CAUSE_REST;
    if (cell_solve_power(source_V, point->r0_ohm, run->power_W, &voltage_V, ret_A) ||
        cell_solve_power(source_V, point->r0_ohm, run->power_W + run->burst_W, &burst_V, &burst_A))
        return CAUSE_FLOOR;
    return burst_V < run->goal->floor_V ? CAUSE_FLOOR : CAUSE_NONE;
}

/* Runs to the end; a step that passes it is taken back and made smaller. */
static double run_down(struct run run, enum cause *ret_cause) {
    struct cell_state before = run.state;
    double t_s = 0.0, dt_s = 0.0, current_A = 0.0, longest_s = LONGEST_S;
    struct cell_point point;

    while (t_s < LONGEST_S) {
        enum cause cause;

        point_at(&run, run.state.charge, &point);
        cause = at_end(&run, &point, &current_A);
        if (cause != CAUSE_NONE && dt_s <= fmax(FINE_S, FINE_SHARE * t_s)) {
            *ret_cause = cause;
            return fmax(t_s - 0.5 * dt_s, 0.0);
        }
        if (cause != CAUSE_NONE) {
            t_s -= dt_s;
            longest_s = dt_s / 8.0;
            run.state = before;
            point_at(&run, run.state.charge, &point);
            at_end(&run, &point, &current_A);
        }
        dt_s = fmin(STEP_CHARGE * 3600.0 * run.cell->capacity_Ah / current_A, longest_s);
        before = run.state;
        cell_step(run.cell, &run.state, &point, current_A, dt_s);
        t_s += dt_s;
    }
    *ret_cause = CAUSE_NONE;
    return ENDLESS;
}

/* Constant power until the terminal voltage is at full, then constant voltage until the current
 * has faded. power_W < 0. */
static double run_up(struct run run) {
    double full_V = run.cell->table.full_V * run.cell->voltage_factor, t_s = 0.0;
    double taper_A = TAPER_h * run.cell->capacity_Ah;

    while (run.state.charge < FULL_CHARGE && t_s < LONGEST_S) {
        double voltage_V, current_A, held_A, dt_s;
        struct cell_point point;

        point_at(&run, run.state.charge, &point);
        cell_solve_power(cell_source_V(&point, &run.state), point.r0_ohm, run.power_W, &voltage_V,
                         &current_A);
        held_A = (cell_source_V(&point, &run.state) - full_V) / point.r0_ohm;
        if (held_A > current_A) {
            if (held_A > -taper_A)
                break;
            current_A = held_A;
        }
        dt_s = -STEP_CHARGE * 3600.0 * run.cell->capacity_Ah / current_A;
        cell_step(run.cell, &run.state, &point, current_A, dt_s);
        t_s += dt_s;
    }
    return t_s < LONGEST_S ? t_s : ENDLESS;
}

/* The unit runs in this state, bursts and all: a burst that could not be is estimated too high. */
static void hold_burst(struct run *run) {
    struct cell_point point;
    double current_A;

    point_at(run, run->state.charge, &point);
    for (int i = 0; i < BURST_HALVINGS && at_end(run, &point, &current_A) == CAUSE_FLOOR; i++)
        run->burst_W *= 0.5;
}

static double worse(struct run run, double left_s, double *spread_s2) {
    enum cause cause;
    double less_s;

    hold_burst(&run);
    less_s = fmax(left_s - run_down(run, &cause), 0.0);

    return *spread_s2 += less_s * less_s;
}

static double least_of(const struct run *run, const struct tracker_estimate *now, double left_s) {
    double spread_s2 = 0.0;
    struct run other = *run;

    other.state.charge -= now->charge_sd;
    worse(other, left_s, &spread_s2);
    other = *run;
    other.power_W += hypot(now->power_sd_W, LOAD_AHEAD * run->power_W);
    worse(other, left_s, &spread_s2);
    other = *run;
    other.scale += now->scale_sd;
    worse(other, left_s, &spread_s2);
    return fmax(left_s - LEAST_SPREADS * sqrt(spread_s2), 0.0);
}

void endurance_compute(const struct cell *cell, const struct tracker_estimate *now, double temp_C,
                       const struct endurance_goal *goal, struct endurance *ret) {
    double idle_W = IDLE_h * cell->capacity_Ah * cell->table.full_V * cell->voltage_factor;
    struct cell_point point;
    struct run run = {.cell = cell,
                      .goal = goal,
                      .state = {now->charge, now->u1_V, now->u2_V},
                      .power_W = now->power_mean_W,
                      .burst_W = now->burst_W,
                      .scale = now->scale,
                      .temp_C = temp_C};

    cell_at(cell, now->charge, temp_C, &point);
    run.bias_V = now->rest_V - point.ocv_V;
    *ret = (struct endurance){ENDLESS, ENDLESS, UNKNOWN, CAUSE_NONE};
    if (run.power_W < -idle_W) {
        ret->full_s = run_up(run);
    } else if (run.power_W > idle_W) {
        hold_burst(&run);
        ret->left_s = run_down(run, &ret->ends_by);
        ret->left_least_s = least_of(&run, now, ret->left_s);
    }
}
