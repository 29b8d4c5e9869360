/* Row by row into normal equations, smoothness on top, then the bounded solve. */
#include "bench/fitsolve.h"

#include "bench/bounded.h"
#include "util/cleanup.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

/* All common practice, no source: chosen by hand for what the tables of three measured cells did in
 * replays of other logs of the same cells. They matter: a third of SMOOTH doubles one error at -10
 * C. What speaks for them is that one set serves all three cells, not that a fourth was tried. */
#define SMOOTH      1.0  /* a bend of all of a resistance counts like its sag */
#define MOVE_SHARE  0.07 /* moving the curve counts like a residual of this share of it */
#define MOVE_BEND   0.1  /* and a bend of the move like a residual of this share of it */
#define SHIFT_SHARE 1.0  /* the same for one log's own curve */
#define STEEP_V     2.0 /* where the curve is as steep as this, in V of all charge, rows count half */
#define LOAD_C      1.0   /* under a load of this C-rate, rows count half */
#define APART_C     0.3   /* the same in logs of other temperatures: small loads tell best there */
#define APART_LOAD  30.0  /* and there rows under load count so many times what rests count */
#define PULSE_LOG   5.0   /* what a log with rests counts: they are the curve */
#define OHM_AH      0.06  /* a usual resistance times capacity */
#define LOW_SHARE   0.2   /* of the median: no resistance lies under */
#define MOST_V      0.3   /* no curve moves further */
#define LOADED_S    300.0 /* of a run that starts under load, left out */
#define OCV_LOG     0.3   /* what the rest behind the slow discharge counts, as a share of a log */
#define USUAL_J_MOL 28e3

static const double shift_charge[FIT_SHIFTS] = {0.0, 0.05, 0.1, 0.2, 0.35, 0.5, 0.65, 0.8, 1.0};

/* ---- weights --------------------------------------------------------------------------------- */

static double half_at(double x, double half) {
    return 1.0 / (1.0 + (x / half) * (x / half));
}

static double row_weight(const struct fit *fit, const struct fit_log *log, size_t i) {
    const struct fit_row *row = &log->row[i];
    bool apart = fit_is_apart(fit, log);
    double load = row->current_A / fit->table.capacity_Ah;
    double from_s = i && !row->start ? row[-1].time_s : row->time_s;
    double to_s = i + 1 < log->n && !row[1].start ? row[1].time_s : row->time_s;
    double weight = fmin(fmax(0.5 * (to_s - from_s), 0.5), 60.0);

    if (!(row->charge > -0.02 && row->charge < 1.02))
        return 0.0;
    if (apart && fabs(load) > 0.02)
        weight *= APART_LOAD;
    return weight * half_at(ocv_slope(&fit->curve.under, row->charge), STEEP_V) *
           half_at(load, apart ? APART_C : LOAD_C);
}

static void weigh_log(const struct fit *fit, struct fit_log *log) {
    static const double share[] = {[FIT_OCV] = OCV_LOG, [FIT_PULSE] = PULSE_LOG, [FIT_DRIVE] = 1.0};
    struct cell_table usual = {.res_temp_C = fit->temp_C, .arrhenius_J_mol = USUAL_J_MOL};
    double sum = 0.0, loaded_until_s = -1e300, whole;

    for (size_t i = 0; i < log->n; i++) {
        struct fit_row *row = &log->row[i];
        bool out = log->role == FIT_OCV && (i <= fit->curve.last || i > fit->curve.rested);

        if (row->start && fabs(row->current_A) > 0.02 * fit->table.capacity_Ah)
            loaded_until_s = row->time_s + LOADED_S;
        row->weight = out || row->time_s < loaded_until_s ? 0.0 : row_weight(fit, log, i);
        sum += row->weight;
    }
    whole = pow(cell_arrhenius(&usual, log->temp_C), -2.0) *
            (fit_is_apart(fit, log) ? 1.0 : share[log->role]);
    for (size_t i = 0; i < log->n && sum > 0.0; i++)
        log->row[i].weight *= whole / sum;
}

void fitsolve_weigh(struct fit *fit) {
    for (size_t k = 0; k < fit->n_logs; k++)
        weigh_log(fit, &fit->log[k]);
}

/* ---- normal equations ------------------------------------------------------------------------ */

struct system {
    size_t n; /* unknowns: r0, r1, r2, moves, and the shifts of one log */
    double G[BOUNDED_MAX * BOUNDED_MAX], h[BOUNDED_MAX], square;
    double total; /* of the weights */
    double load;  /* the same, times current squared */
};

/* One equation: coefficients of few unknowns. */
struct line {
    size_t n, at[3 * FIT_RES + 4];
    double value[3 * FIT_RES + 4];
};

static void put(struct line *line, size_t at, double value) {
    line->at[line->n] = at;
    line->value[line->n++] = value;
}

static void add(struct system *s, const struct line *line, double target, double weight) {
    for (size_t a = 0; a < line->n; a++) {
        double *row = &s->G[line->at[a] * s->n], w = weight * line->value[a];

        if (w == 0.0)
            continue;
        for (size_t b = 0; b < line->n; b++)
            row[line->at[b]] += w * line->value[b];
        s->h[line->at[a]] += w * target;
    }
    s->square += weight * target * target;
}

/* Where z lies on an axis: *ret_i and its neighbour, *ret_share of the neighbour; held outside. */
static void place(const double *axis, size_t n, double z, size_t *ret_i, double *ret_share) {
    size_t i = 0;

    while (i + 2 < n && z >= axis[i + 1])
        i++;
    *ret_i = i;
    *ret_share = fmin(fmax((z - axis[i]) / (axis[i + 1] - axis[i]), 0.0), 1.0);
}

static void put_between(struct line *line, size_t base, const double *axis, size_t n, double z) {
    double share;
    size_t i;

    place(axis, n, z, &i, &share);
    put(line, base + i, 1.0 - share);
    put(line, base + i + 1, share);
}

/* What the loads of a log left behind in the two slow parts, for every point of resistance. */
struct slow_state {
    double u[2][FIT_RES];
};

static void relax(struct slow_state *state, const struct fit *fit, const struct fit_row *row,
                  const double *tau_s, double factor) {
    size_t i;
    double share, step_s = row->time_s - row[-1].time_s;

    place(fit->res_charge, fit->n_res, 0.5 * (row->charge + row[-1].charge), &i, &share);
    for (int k = 0; k < 2; k++) {
        double fade = exp(-step_s / tau_s[k]), come = (1.0 - fade) * factor * row->mean_A;

        for (size_t j = 0; j < fit->n_res; j++)
            state->u[k][j] *= fade;
        state->u[k][i] += (1.0 - share) * come;
        state->u[k][i + 1] += share * come;
    }
}

static void resistance_part(struct line *line, const struct fit *fit, const struct fit_row *row,
                            const struct slow_state *state, double factor) {
    size_t i, n = fit->n_res;
    double share, hat[FIT_RES] = {0};

    place(fit->res_charge, n, row->charge, &i, &share);
    hat[i] = 1.0 - share;
    hat[i + 1] = share;
    for (size_t j = 0; j < n; j++) {
        double under = hat[j] * fit->curve.current_A;

        put(line, j, under - hat[j] * factor * row->current_A);
        put(line, n + j, under - state->u[0][j]);
        put(line, 2 * n + j, under - state->u[1][j]);
    }
}

/* shift_at: where this log's own shifts begin; 0 = it has none. */
static void add_log(struct system *s, const struct fit *fit, const struct fit_log *log,
                    const struct fit_slow *slow, size_t shift_at) {
    struct cell_table law = {.res_temp_C = fit->temp_C, .arrhenius_J_mol = slow->arrhenius_J_mol};
    const double tau_s[2] = {slow->tau1_s, slow->tau2_s};
    struct slow_state state = {0};
    double told_C = 1e300, factor = 1.0;

    for (size_t i = 0; i < log->n; i++) {
        const struct fit_row *row = &log->row[i];
        struct line line = {0};

        if (row->temp_C != told_C)
            factor = cell_arrhenius(&law, told_C = row->temp_C);
        if (row->start)
            state = (struct slow_state){0};
        else
            relax(&state, fit, row, tau_s, factor);
        if (row->weight == 0.0)
            continue;
        resistance_part(&line, fit, row, &state, factor);
        put_between(&line, 3 * fit->n_res, fit->move_charge, fit->n_moves, row->charge);
        if (shift_at)
            put_between(&line, shift_at, shift_charge, FIT_SHIFTS, row->charge);
        add(s, &line, row->voltage_V - ocv_voltage(&fit->curve.under, row->charge), row->weight);
        s->total += row->weight;
        s->load += row->weight * row->current_A * row->current_A;
    }
}

/* ---- smoothness ------------------------------------------------------------------------------ */

/* Second differences over an axis, each as a share of its own scale. */
static void add_bends(struct system *s, size_t base, const double *axis, size_t n,
                      const double *scale, double weight) {
    for (size_t j = 1; j + 1 < n; j++) {
        double left = axis[j] - axis[j - 1], right = axis[j + 1] - axis[j];
        struct line line = {0};

        put(&line, base + j - 1, right / (left + right));
        put(&line, base + j, -1.0);
        put(&line, base + j + 1, left / (left + right));
        add(s, &line, 0.0, weight / (scale[j] * scale[j]));
    }
}

static void add_pulls(struct system *s, size_t base, size_t n, double weight) {
    for (size_t j = 0; j < n; j++) {
        struct line line = {0};

        put(&line, base + j, 1.0);
        add(s, &line, 0.0, weight);
    }
}

static void add_wishes(struct system *s, const struct fit *fit, const double *scale) {
    size_t n = fit->n_res, moves = 3 * n;
    double one[FIT_MOVES] = {0}, sag = SMOOTH * OHM_AH / fit->table.capacity_Ah;

    for (size_t k = 0; k < 3; k++)
        add_bends(s, k * n, fit->res_charge, n, scale + k * n, s->load * sag * sag);
    for (size_t j = 0; j < fit->n_moves; j++)
        one[j] = 1.0;
    add_bends(s, moves, fit->move_charge, fit->n_moves, one, s->total * MOVE_BEND * MOVE_BEND);
    add_pulls(s, moves, fit->n_moves, s->total * MOVE_SHARE * MOVE_SHARE);
}

/* ---- the solve ------------------------------------------------------------------------------- */

static double median(const double *value, size_t n) {
    double sorted[FIT_RES];

    memcpy(sorted, value, n * sizeof *value);
    for (size_t i = 1; i < n; i++)
        for (size_t j = i; j > 0 && sorted[j] < sorted[j - 1]; j--) {
            double t = sorted[j];

            sorted[j] = sorted[j - 1];
            sorted[j - 1] = t;
        }
    return sorted[n / 2];
}

static double cost_of(const struct system *s, const double *x) {
    double cost = s->square;

    for (size_t i = 0; i < s->n; i++) {
        cost -= 2.0 * s->h[i] * x[i];
        for (size_t j = 0; j < s->n; j++)
            cost += x[i] * s->G[i * s->n + j] * x[j];
    }
    return cost;
}

/* Bounds and the scale of smoothness follow the resistances found the time before. */
static void follow(const struct fit *fit, const double *x, double *scale, double *low) {
    for (size_t k = 0; k < 3; k++) {
        const double *r = x + k * fit->n_res;
        double usual = median(r, fit->n_res);

        for (size_t j = 0; j < fit->n_res; j++) {
            scale[k * fit->n_res + j] = fmax(r[j], 0.3 * usual);
            low[k * fit->n_res + j] =
                fmax(LOW_SHARE * usual, 0.01 * OHM_AH / fit->table.capacity_Ah);
        }
    }
}

static int solve(const struct system *s, struct system *wished, const struct fit *fit, double *x,
                 double *ret_cost) {
    double low[BOUNDED_MAX], high[BOUNDED_MAX], scale[3 * FIT_RES] = {0};
    double usual = OHM_AH / fit->table.capacity_Ah;

    for (size_t i = 0; i < s->n; i++) {
        bool ohm = i < 3 * fit->n_res;

        low[i] = ohm ? 0.01 * usual : -MOST_V;
        high[i] = ohm ? 100.0 * usual : MOST_V;
        x[i] = ohm ? usual : 0.0;
        if (ohm)
            scale[i] = usual;
    }
    for (int turn = 0; turn < 4; turn++) {
        *wished = *s;
        add_wishes(wished, fit, scale);
        if (bounded_solve(s->n, wished->G, wished->h, low, high, x))
            return FIT_E_SOLVE;
        *ret_cost = cost_of(wished, x);
        follow(fit, x, scale, low);
    }
    return 0;
}

int fitsolve(struct fit *fit, const struct fit_slow *slow, double *ret_cost) {
    scoped(free_p) struct system *s = calloc(2, sizeof *s);
    double x[BOUNDED_MAX], cost;
    int r;

    if (!s)
        return FIT_E_SOLVE;
    s->n = 3 * fit->n_res + fit->n_moves;
    for (size_t k = 0; k < fit->n_logs; k++)
        if (!fit_is_apart(fit, &fit->log[k]))
            add_log(s, fit, &fit->log[k], slow, 0);
    r = s->total > 0.0 ? solve(s, s + 1, fit, x, &cost) : FIT_E_SOLVE;
    if (r)
        return r;
    for (size_t k = 0; k < 3; k++)
        memcpy(fit->r_ohm[k], x + k * fit->n_res, fit->n_res * sizeof *x);
    memcpy(fit->move_V, x + 3 * fit->n_res, fit->n_moves * sizeof *x);
    *ret_cost = cost / s->total;
    return 0;
}

/* ---- logs of other temperatures -------------------------------------------------------------- */

/* The system with all but the last FIT_SHIFTS unknowns given as x: what is left in the shifts, and
 * the cost without them. */
static void give(const struct system *s, const double *x, struct system *ret) {
    size_t known = s->n - FIT_SHIFTS;

    ret->n = FIT_SHIFTS;
    ret->total = s->total;
    ret->square = s->square;
    memset(ret->G, 0, sizeof ret->G);
    for (size_t i = 0; i < known; i++) {
        ret->square -= 2.0 * s->h[i] * x[i];
        for (size_t j = 0; j < known; j++)
            ret->square += x[i] * s->G[i * s->n + j] * x[j];
    }
    for (size_t a = 0; a < FIT_SHIFTS; a++) {
        const double *row = &s->G[(known + a) * s->n];

        ret->h[a] = s->h[known + a];
        for (size_t j = 0; j < known; j++)
            ret->h[a] -= row[j] * x[j];
        memcpy(&ret->G[a * FIT_SHIFTS], row + known, FIT_SHIFTS * sizeof *row);
    }
}

int fitsolve_apart(const struct fit *fit, const struct fit_slow *slow, double *ret_cost) {
    scoped(free_p) struct system *s = calloc(2, sizeof *s);
    double x[BOUNDED_MAX], shift[FIT_SHIFTS], low[FIT_SHIFTS], high[FIT_SHIFTS], cost = 0.0;
    size_t known = 3 * fit->n_res + fit->n_moves;

    if (!s)
        return FIT_E_SOLVE;
    for (size_t k = 0; k < 3; k++)
        memcpy(x + k * fit->n_res, fit->r_ohm[k], fit->n_res * sizeof *x);
    memcpy(x + 3 * fit->n_res, fit->move_V, fit->n_moves * sizeof *x);
    for (size_t k = 0; k < fit->n_logs; k++) {
        if (!fit_is_apart(fit, &fit->log[k]))
            continue;
        memset(s, 0, sizeof *s);
        s->n = known + FIT_SHIFTS;
        add_log(s, fit, &fit->log[k], slow, known);
        give(s, x, s + 1);
        add_pulls(s + 1, 0, FIT_SHIFTS, s->total * SHIFT_SHARE * SHIFT_SHARE / FIT_SHIFTS);
        for (size_t a = 0; a < FIT_SHIFTS; a++) {
            low[a] = -MOST_V;
            high[a] = MOST_V;
            shift[a] = 0.0;
        }
        if (s->total > 0.0 && bounded_solve(FIT_SHIFTS, s[1].G, s[1].h, low, high, shift))
            return FIT_E_SOLVE;
        cost += cost_of(s + 1, shift);
    }
    *ret_cost = cost;
    return 0;
}
