/* The fit as a whole: charge axis, search, table, residuals. */
#include "bench/fit.h"

#include "bench/fitsolve.h"
#include "util/real.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

#define APART_K     6.0 /* further from the reference than this, a log has its own curve */
#define OVER_SHARE  0.002
#define MODEL_V     0.010 /* what one cell cannot tell of the next; common practice, no source */
#define USUAL_J_MOL 28e3

static const double res_charge[FIT_RES] = {0.0,  0.03, 0.06, 0.10, 0.14, 0.18, 0.24,
                                           0.32, 0.42, 0.52, 0.62, 0.72, 0.84, 0.95};
static const double move_charge[FIT_MOVES] = {0.0,  0.02, 0.04, 0.07, 0.10, 0.14, 0.18, 0.24,
                                              0.32, 0.42, 0.52, 0.62, 0.72, 0.84, 1.0};
/* Of the table's curve, in percent: close where it bends. */
static const double curve_pct[] = {0,  0.5,  1,  2,  3,  4,  5,  6,    8,  10, 12.5,
                                   15, 17.5, 20, 25, 30, 35, 40, 45,   50, 55, 60,
                                   65, 70,   75, 80, 85, 90, 95, 97.5, 100};
enum { CURVE_POINTS = sizeof curve_pct / sizeof *curve_pct };

bool fit_is_apart(const struct fit *fit, const struct fit_log *log) {
    return log->role != FIT_OCV && fabs(log->temp_C - fit->temp_C) > APART_K;
}

void fit_free(struct fit *fit) {
    for (size_t k = 0; k < fit->n_logs; k++)
        fitlog_free(&fit->log[k]);
    fit->n_logs = 0;
}

/* ---- the charge axis ------------------------------------------------------------------------- */

static int find_capacity(struct fit *fit, const struct fit_wish *wish) {
    struct fit_log *ocv = &fit->log[0];
    double Ah = wish->capacity_Ah;

    if (isnan(Ah))
        Ah = ocv->hint_Ah;
    if (isnan(Ah) && ocv->told_charge)
        Ah = fitlog_most_Ah(ocv);
    if (!(Ah > 0.001 && Ah < 1000.0))
        return FIT_E_CAPACITY;
    fit->table.capacity_Ah = Ah;
    return 0;
}

/* The slow discharge gives the curve. Its tester may count off: when it took out more than the
 * capacity, its amp-hours are shrunk to it. */
static int place_ocv(struct fit *fit, const struct fit_wish *wish) {
    struct fit_log *ocv = &fit->log[0];
    double Ah = fit->table.capacity_Ah, gain = 1.0;

    if (ocv->told_charge && fitlog_most_Ah(ocv) > Ah * (1.0 + OVER_SHARE))
        gain = Ah / fitlog_most_Ah(ocv);
    fitlog_place(ocv, Ah, gain, 1.0);
    if (fitcurve_make(&fit->curve, ocv, Ah, wish->limits.damage_V - 0.5,
                      wish->limits.full_V + 0.05))
        return FIT_E_CURVE;
    return 0;
}

static void place_others(struct fit *fit) {
    double low = 1.0, high = 0.0;

    for (size_t k = 1; k < fit->n_logs; k++) {
        struct fit_log *log = &fit->log[k];

        fitlog_place(log, fit->table.capacity_Ah, 1.0,
                     ocv_charge(&fit->curve.under, log->row[0].voltage_V));
        low = fmin(low, log->low);
        high = fmax(high, log->high);
    }
    for (size_t i = 0; i < FIT_RES; i++)
        if (res_charge[i] >= low - 0.04 && res_charge[i] <= high + 0.04)
            fit->res_charge[fit->n_res++] = res_charge[i];
    memcpy(fit->move_charge, move_charge, sizeof move_charge);
    fit->n_moves = FIT_MOVES;
}

/* That of the log nearest to the slow discharge; near enough to 25 C, called that. */
static void find_temperature(struct fit *fit, const struct fit_wish *wish) {
    double near_C = fit->log[1].temp_C;

    for (size_t k = 2; k < fit->n_logs; k++)
        if (fabs(fit->log[k].temp_C - fit->log[0].temp_C) < fabs(near_C - fit->log[0].temp_C))
            near_C = fit->log[k].temp_C;
    fit->temp_C = fabs(near_C - 25.0) <= 5.0 ? 25.0 : round(near_C);
    for (size_t k = 1; k < fit->n_logs; k++)
        if (isnan(wish->activation_J_mol) && fit_is_apart(fit, &fit->log[k]))
            fit->activation_told = true;
}

/* ---- the search ------------------------------------------------------------------------------ */

typedef int cost_at(struct fit *fit, const double *at, double *ret_cost);

enum { AXES = 2 };

struct search {
    struct fit *fit;
    cost_at *cost_at;
    int axes;
    double at[AXES], low[AXES], high[AXES], step[AXES];
    double cost;
};

static int cost_of_taus(struct fit *fit, const double *at, double *ret_cost) {
    const struct fit_slow slow = {exp(at[0]), exp(at[1]), fit->table.arrhenius_J_mol};

    return fitsolve(fit, &slow, ret_cost);
}

static int cost_of_activation(struct fit *fit, const double *at, double *ret_cost) {
    const struct fit_slow slow = {fit->table.tau1_s, fit->table.tau2_s, at[0]};

    return fitsolve_apart(fit, &slow, ret_cost);
}

/* Tries one step along one axis, either way. True when it got better. */
static bool try_axis(struct search *s, int axis) {
    for (int way = -1; way <= 1; way += 2) {
        double at[AXES], cost;

        memcpy(at, s->at, sizeof at);
        at[axis] = fmin(fmax(at[axis] + way * s->step[axis], s->low[axis]), s->high[axis]);
        if (at[axis] == s->at[axis] || s->cost_at(s->fit, at, &cost) || !(cost < s->cost))
            continue;
        memcpy(s->at, at, sizeof at);
        s->cost = cost;
        return true;
    }
    return false;
}

/* Leaves the best place in s->at, to a sixteenth of the first steps. */
static int search(struct search *s) {
    int r = s->cost_at(s->fit, s->at, &s->cost);

    for (int halved = 0; r == 0 && halved < 5;) {
        bool better = false;

        for (int axis = 0; axis < s->axes; axis++)
            better |= try_axis(s, axis);
        if (better)
            continue;
        for (int axis = 0; axis < s->axes; axis++)
            s->step[axis] /= 2.0;
        halved++;
    }
    return r;
}

/* Both searches; the numbers rounded as the file will have them. */
static int search_slow(struct fit *fit, double activation_J_mol) {
    struct search taus = {.fit = fit,
                          .cost_at = cost_of_taus,
                          .axes = 2,
                          .at = {log(12.0), log(400.0)},
                          .low = {log(5.0), log(150.0)},
                          .high = {log(30.0), log(1200.0)},
                          .step = {0.4, 0.4}};
    struct search activation = {.fit = fit,
                                .cost_at = cost_of_activation,
                                .axes = 1,
                                .at = {activation_J_mol},
                                .low = {10e3},
                                .high = {60e3},
                                .step = {8e3}};
    struct fit_slow slow;
    double cost;
    int r;

    fit->table.arrhenius_J_mol = activation_J_mol;
    if ((r = search(&taus)))
        return r;
    fit->table.tau1_s = round(exp(taus.at[0]));
    fit->table.tau2_s = round(exp(taus.at[1]) / 5.0) * 5.0;
    slow = (struct fit_slow){fit->table.tau1_s, fit->table.tau2_s, activation_J_mol};
    r = fitsolve(fit, &slow, &cost);
    if (r == 0 && fit->activation_told && (r = search(&activation)) == 0)
        fit->table.arrhenius_J_mol = round(activation.at[0] / 100.0) * 100.0;
    return r;
}

/* ---- the table ------------------------------------------------------------------------------- */

static double between(const double *axis, const double *value, size_t n, double z) {
    size_t i = 0;

    if (z <= axis[0] || n == 1)
        return value[0];
    while (i + 2 < n && z >= axis[i + 1])
        i++;
    return value[i] +
           (value[i + 1] - value[i]) * fmin((z - axis[i]) / (axis[i + 1] - axis[i]), 1.0);
}

static double rounded(double value, double step) {
    return round(value / step) * step;
}

static int make_table(struct fit *fit, const struct fit_wish *wish) {
    struct cell_table *t = &fit->table;
    double charge[CURVE_POINTS], voltage_V[CURVE_POINTS];

    snprintf(t->name, sizeof t->name, "%s", wish->name);
    snprintf(t->chemistry, sizeof t->chemistry, "%s", wish->limits.chemistry);
    t->full_V = wish->limits.full_V;
    t->damage_V = wish->limits.damage_V;
    t->possible_low_V = fmax(t->damage_V - 1.0, 0.1);
    t->possible_high_V = t->full_V + 0.2;
    t->res_temp_C = fit->temp_C;
    t->voltage_sd_V = MODEL_V; /* until the residual is known */
    t->n_res = fit->n_res;
    for (size_t j = 0; j < fit->n_res; j++) {
        t->res_charge[j] = fit->res_charge[j];
        t->r0_ohm[j] = rounded(fit->r_ohm[0][j], 1e-5);
        t->r1_ohm[j] = rounded(fit->r_ohm[1][j], 1e-5);
        t->r2_ohm[j] = rounded(fit->r_ohm[2][j], 1e-5);
    }
    for (size_t i = 0; i < CURVE_POINTS; i++) {
        double z = charge[i] = curve_pct[i] / 100.0, R_ohm = 0.0;

        for (size_t k = 0; k < 3; k++)
            R_ohm += between(fit->res_charge, fit->r_ohm[k], fit->n_res, z);
        voltage_V[i] = rounded(ocv_voltage(&fit->curve.under, z) + R_ohm * fit->curve.current_A +
                                   between(fit->move_charge, fit->move_V, fit->n_moves, z),
                               1e-4);
        if (i && voltage_V[i] < voltage_V[i - 1])
            voltage_V[i] = voltage_V[i - 1];
    }
    return ocv_init(&t->ocv, charge, voltage_V, CURVE_POINTS) ? FIT_E_SOLVE : 0;
}

/* ---- what it is worth ------------------------------------------------------------------------ */

enum { BINS = 50 };

static double slow_rms(const double *sum, const double *count) {
    double square = 0.0, n = 0.0;

    for (int b = 2; b < BINS; b++) /* the lowest 4 % are too steep to say anything in volts */
        if (count[b] > 0.0) {
            square += sum[b] * sum[b] / (count[b] * count[b]);
            n += 1.0;
        }
    return n > 0.0 ? sqrt(square / n) : UNKNOWN;
}

/* The table in the product's own circuit against the log. */
static struct fit_residual residual_of(const struct cell *cell, const struct fit_log *log,
                                       size_t first, size_t last) {
    struct cell_state state = {0};
    double sum = 0.0, square = 0.0, n = 0.0, bin_sum[BINS] = {0}, bin_n[BINS] = {0};

    for (size_t i = first; i <= last; i++) {
        const struct fit_row *row = &log->row[i];
        struct cell_point point;
        double off_V;
        int bin;

        if (row->start || i == first)
            state = (struct cell_state){0};
        cell_at(cell, row->charge, row->temp_C, &point);
        if (!row->start && i > first)
            cell_step(cell, &state, &point, row->mean_A, row->time_s - row[-1].time_s);
        if (!(row->charge >= 0.0 && row->charge <= 1.0))
            continue;
        state.charge = row->charge;
        off_V = row->voltage_V - (cell_source_V(&point, &state) - point.r0_ohm * row->current_A);
        bin = (int)fmin(row->charge * BINS, BINS - 1);
        bin_sum[bin] += off_V;
        bin_n[bin] += 1.0;
        sum += off_V;
        square += off_V * off_V;
        n += 1.0;
    }
    if (n == 0.0)
        return (struct fit_residual){UNKNOWN, UNKNOWN, UNKNOWN};
    return (struct fit_residual){sqrt(square / n), sum / n, slow_rms(bin_sum, bin_n)};
}

static void collect_rests(struct fit *fit) {
    double square = 0.0, n = 0.0;

    for (size_t k = 0; k < fit->n_logs; k++) {
        const struct fit_log *log = &fit->log[k];
        struct fit_rest rest;
        size_t at = 0;

        if (fit_is_apart(fit, log) || k == 0)
            continue;
        while (fit->n_rests < FIT_RESTS_MAX &&
               fitlog_rest(log, fit->table.capacity_Ah, &at, &rest)) {
            double off_V = rest.voltage_V - ocv_voltage(&fit->table.ocv, rest.charge);

            fit->rest[fit->n_rests++] = rest;
            if (!(rest.charge > 0.04 && rest.charge <= 1.0))
                continue;
            square += off_V * off_V;
            n += 1.0;
        }
    }
    fit->rests_rms_V = n > 0.0 ? sqrt(square / n) : UNKNOWN;
}

static int judge(struct fit *fit, const struct fit_wish *wish) {
    struct cell cell;
    double worst_V = 0.0;

    if (cell_init(&cell, &fit->table, 1, fit->table.capacity_Ah))
        return FIT_E_SOLVE;
    for (size_t k = 0; k < fit->n_logs; k++) {
        fit->residual[k] = residual_of(&cell, &fit->log[k], k ? 0 : fit->curve.first,
                                       k ? fit->log[k].n - 1 : fit->curve.rested);
        if (k && !fit_is_apart(fit, &fit->log[k]) && isfinite(fit->residual[k].slow_rms_V))
            worst_V = fmax(worst_V, fit->residual[k].slow_rms_V);
    }
    collect_rests(fit);
    fit->table.voltage_sd_V =
        isnan(wish->spread_V) ? ceil(1000.0 * hypot(worst_V, MODEL_V)) / 1000.0 : wish->spread_V;
    return 0;
}

int fit_run(struct fit *fit, const struct fit_wish *wish) {
    int r = fit->n_logs < 2 ? FIT_E_LOGS : find_capacity(fit, wish);

    if (r == 0)
        r = place_ocv(fit, wish);
    if (r)
        return r;
    find_temperature(fit, wish);
    place_others(fit);
    if (fit->n_res < 2)
        return FIT_E_LOGS;
    fitsolve_weigh(fit);
    r = search_slow(fit, isnan(wish->activation_J_mol) ? USUAL_J_MOL : wish->activation_J_mol);
    if (r == 0)
        r = make_table(fit, wish);
    return r ? r : judge(fit, wish);
}
