/* Extended Kalman filter of one pack. The state and the measurement are described in tracker.h.
 *
 * The transition matrix is sparse, so prediction works row by row instead of multiplying matrices;
 * measurements are scalar, so nothing is ever inverted.
 */
#include "core/tracker.h"

#include <math.h>
#include <string.h>

/* Program defaults, the same for every cell. Spreads are one standard deviation.
 *
 * Without a current the scale must stay out of gains: its derivative swings with the estimated
 * current, and gains that swing with the bursts turn their noise into a drift of the charge
 * (measured on a made-up load over an exact model: 23 % off after 3 h, 0.1 % without). What the sag
 * may be off is put into the bias instead. */
static const double FAST_TAU_S = 15.0;   /* how long a burst of load lasts */
static const double BIAS_CHARGE = 1.0;   /* the curve is off in one direction over so much charge */
static const double MEAN_DRIFT_h = 0.30; /* the mean load wanders by this share in an hour */
static const double SCALE_DRIFT_h = 0.06;    /* resistance: the same */
static const double POLAR_SHARE = 0.15;      /* error of the RC pairs' final voltage */
static const double VOLTAGE_NOISE_V = 0.004; /* a cell's reading: ADC step and ripple */
static const double MODEL_SHARE = 0.1;       /* error of the modelled sag, as a share of it */
static const double MODEL_TAU_S = 60.0;      /* and for how long it errs in one direction */
static const double WAKING_V = 0.2; /* inrush, a slow supply: the first readings, a cell, */
static const double WAKING_S = 5.0; /* and how fast they come right */
static const double CURRENT_NOISE_h = 0.002; /* current reading, in capacities an hour */
static const double CURRENT_GAIN = 0.005;    /* and as a share of the reading */
static const double FAST_LEARN_S = 900.0;    /* time constant of the bursts' learned variance */
static const double FOLLOW_S = 600.0;        /* the mean follows what the bursts leave over */
static const double CHANGE_SHARE = 2.0;      /* a changed supply changes the load by this share */
static const double SAG_SHARE = 0.20;        /* the mean sag is off by this share */
static const double UNSEEN_SHARE = 0.1;      /* of the typical load: less is not believed unseen */
static const double GATE = 5.0;             /* an innovation beyond this many spreads counts less */
static const double DOUBT_S = 300.0;        /* over so long an innovation is averaged */
static const int SURPRISES = 5;             /* so many of them in a row are no rubbish */
static const double CHARGE_MARGIN = 0.02;   /* how far the state may leave 0..1 */
static const double CHARGE_SD_BLANK = 0.30; /* nothing known */
static const double SHARP_CHARGE_SD = 0.01; /* under this the curve is straight enough */

static double clamp(double x, double low, double high) {
    return fmin(fmax(x, low), high);
}

static double square(double x) {
    return x * x;
}

static double power_W(const struct tracker *t) {
    return t->x[TRACK_MEAN] + t->x[TRACK_FAST];
}

/* ---- start ---- */

static void set_state(struct tracker *t, int i, double value, double sd) {
    t->x[i] = value;
    t->P[i][i] = square(sd);
}

void tracker_init(struct tracker *tracker, double typical_W, double temp_C,
                  const struct tracker_prior *prior) {
    double power = isfinite(prior->power_W) ? prior->power_W : typical_W;
    double power_sd = isfinite(prior->power_sd_W) ? prior->power_sd_W : 0.5 * typical_W;

    memset(tracker, 0, sizeof(*tracker));
    tracker->typical_W = typical_W;
    tracker->temp_C = temp_C;
    tracker->dt_s = MODEL_TAU_S;
    tracker->fast_var_W2 = square(0.7 * typical_W);
    set_state(tracker, TRACK_CHARGE, isfinite(prior->charge) ? prior->charge : 0.5,
              isfinite(prior->charge) ? prior->charge_sd : CHARGE_SD_BLANK);
    set_state(tracker, TRACK_U1, prior->u1_V, 0.0);
    set_state(tracker, TRACK_U2, prior->u2_V, 0.0);
    set_state(tracker, TRACK_MEAN, power, power_sd);
    set_state(tracker, TRACK_FAST, 0.0, 0.7 * typical_W);
    set_state(tracker, TRACK_SCALE, isfinite(prior->scale) ? prior->scale : 1.0,
              isfinite(prior->scale) ? prior->scale_sd : 0.2);
}

/* How far model and cell may lie apart for long: the curve, and the sag of the mean load. */
static double bias_sd_V(const struct tracker *t, const struct cell *cell,
                        const struct cell_point *point) {
    double load_W = fmax(fabs(t->x[TRACK_MEAN]), 0.1 * t->typical_W);
    double sag_V = (point->r0_ohm + point->r1_ohm + point->r2_ohm) * load_W / t->voltage_V;

    return hypot(cell->table.voltage_sd_V * cell->voltage_factor, SAG_SHARE * sag_V);
}

/* The first voltage: where nothing else is known, the curve is read at the voltage behind the sag
 * of the typical load, and the pairs are taken as if that load had run for long. */
static void start(struct tracker *t, const struct cell *cell, double voltage_V) {
    struct cell_point point;
    double current_A = t->x[TRACK_MEAN] / voltage_V;
    double nominal_V = voltage_V / cell->voltage_factor, sag_V;

    cell_at(cell, ocv_charge(&cell->table.ocv, nominal_V), t->temp_C, &point);
    if (!isfinite(t->x[TRACK_U1]) || !isfinite(t->x[TRACK_U2])) {
        set_state(t, TRACK_U1, point.r1_ohm * current_A, 0.7 * point.r1_ohm * fabs(current_A));
        set_state(t, TRACK_U2, point.r2_ohm * current_A, 0.7 * point.r2_ohm * fabs(current_A));
    } else {
        t->P[TRACK_U1][TRACK_U1] = square(0.25 * fabs(t->x[TRACK_U1]) + 1e-3);
        t->P[TRACK_U2][TRACK_U2] = square(0.25 * fabs(t->x[TRACK_U2]) + 1e-3);
    }
    if (t->P[TRACK_CHARGE][TRACK_CHARGE] >= square(0.15)) {
        sag_V = (point.r0_ohm * current_A + t->x[TRACK_U1] + t->x[TRACK_U2]) / cell->voltage_factor;
        t->x[TRACK_CHARGE] = ocv_charge(&cell->table.ocv, nominal_V + sag_V);
    }
    t->voltage_V = voltage_V;
    set_state(t, TRACK_BIAS, 0.0, bias_sd_V(t, cell, &point));
    t->started = true;
}

/* ---- time passes ---- */

struct transition {
    double fade1, fade2, fast, bias;   /* diagonal */
    double follow;                     /* mean row */
    double charge_mean, charge_fast;   /* charge row */
    double u1_mean, u1_fast, u1_scale; /* pair rows */
    double u2_mean, u2_fast, u2_scale;
};

static void add_row(double (*P)[TRACK_N], int row, double keep, int from, double factor) {
    for (int j = 0; j < TRACK_N; j++)
        P[row][j] = keep * P[row][j] + factor * P[from][j];
}

static void transpose(double (*P)[TRACK_N]) {
    for (int i = 0; i < TRACK_N; i++)
        for (int j = 0; j < i; j++) {
            double keep = P[i][j];
            P[i][j] = P[j][i];
            P[j][i] = keep;
        }
}

/* Takes the rounding out of what is symmetric by its nature. */
static void even_out(double (*P)[TRACK_N]) {
    for (int i = 0; i < TRACK_N; i++)
        for (int j = 0; j < i; j++)
            P[i][j] = P[j][i] = 0.5 * (P[i][j] + P[j][i]);
}

/* P = F P, by rows. Rows of the load and the scale are read before they are faded. */
static void apply_left(double (*P)[TRACK_N], const struct transition *f) {
    add_row(P, TRACK_CHARGE, 1.0, TRACK_MEAN, f->charge_mean);
    add_row(P, TRACK_CHARGE, 1.0, TRACK_FAST, f->charge_fast);
    add_row(P, TRACK_U1, f->fade1, TRACK_MEAN, f->u1_mean);
    add_row(P, TRACK_U1, 1.0, TRACK_FAST, f->u1_fast);
    add_row(P, TRACK_U1, 1.0, TRACK_SCALE, f->u1_scale);
    add_row(P, TRACK_U2, f->fade2, TRACK_MEAN, f->u2_mean);
    add_row(P, TRACK_U2, 1.0, TRACK_FAST, f->u2_fast);
    add_row(P, TRACK_U2, 1.0, TRACK_SCALE, f->u2_scale);
    add_row(P, TRACK_MEAN, 1.0, TRACK_FAST, f->follow);
    for (int j = 0; j < TRACK_N; j++) {
        P[TRACK_FAST][j] *= f->fast;
        P[TRACK_BIAS][j] *= f->bias;
    }
}

static void add_noise(struct tracker *t, const struct cell *cell, const struct cell_point *point,
                      const struct transition *f, double dt_s) {
    double hours = dt_s / 3600.0, load_W = fmax(fabs(t->x[TRACK_MEAN]), 0.1 * t->typical_W);
    double current_A = load_W / t->voltage_V;
    /* a burst that came and went between two samples leaves its charge behind */
    double unseen_As = sqrt(2.0 * FAST_TAU_S * dt_s * t->fast_var_W2) / t->voltage_V *
                       (1.0 - exp(-square(dt_s / FAST_TAU_S) / 6.0));

    t->P[TRACK_CHARGE][TRACK_CHARGE] += square(unseen_As / (3600.0 * cell->capacity_Ah));
    t->P[TRACK_U1][TRACK_U1] +=
        (1.0 - square(f->fade1)) * square(POLAR_SHARE * point->r1_ohm * current_A);
    t->P[TRACK_U2][TRACK_U2] +=
        (1.0 - square(f->fade2)) * square(POLAR_SHARE * point->r2_ohm * current_A);
    t->P[TRACK_MEAN][TRACK_MEAN] += square(MEAN_DRIFT_h * load_W) * hours;
    t->P[TRACK_FAST][TRACK_FAST] += (1.0 - square(f->fast)) * t->fast_var_W2;
    t->P[TRACK_SCALE][TRACK_SCALE] += square(SCALE_DRIFT_h) * hours;
    t->P[TRACK_BIAS][TRACK_BIAS] += (1.0 - square(f->bias)) * square(bias_sd_V(t, cell, point));
}

static void fill_transition(const struct tracker *t, const struct cell *cell,
                            const struct cell_point *point, double dt_s, struct transition *f) {
    double per_W = 1.0 / t->voltage_V, charge_A = -dt_s / (3600.0 * cell->capacity_Ah);
    double scale = t->x[TRACK_SCALE], share;
    double current_A;

    f->fade1 = exp(-dt_s / cell->table.tau1_s);
    f->fade2 = exp(-dt_s / cell->table.tau2_s);
    f->fast = exp(-dt_s / FAST_TAU_S);
    f->follow = 1.0 - exp(-dt_s / FOLLOW_S);
    /* the fast part fades within the step; this is its mean over the step */
    share = (1.0 - f->fast) * FAST_TAU_S / dt_s;
    current_A = (t->x[TRACK_MEAN] + share * t->x[TRACK_FAST]) * per_W;
    f->charge_mean = charge_A * per_W;
    f->charge_fast = share * f->charge_mean;
    f->bias = exp(charge_A * fabs(current_A) / BIAS_CHARGE);
    f->u1_mean = scale * point->r1_ohm * (1.0 - f->fade1) * per_W;
    f->u1_fast = share * f->u1_mean;
    f->u1_scale = t->current_told ? point->r1_ohm * (1.0 - f->fade1) * current_A : 0.0;
    f->u2_mean = scale * point->r2_ohm * (1.0 - f->fade2) * per_W;
    f->u2_fast = share * f->u2_mean;
    f->u2_scale = t->current_told ? point->r2_ohm * (1.0 - f->fade2) * current_A : 0.0;
}

/* The bursts' variance is what the filter finds them to be, spread included. */
static void learn_bursts(struct tracker *t, double dt_s) {
    double seen_W2 = square(t->x[TRACK_FAST]) + t->P[TRACK_FAST][TRACK_FAST];

    t->fast_var_W2 += (1.0 - exp(-dt_s / FAST_LEARN_S)) * (seen_W2 - t->fast_var_W2);
    t->fast_var_W2 =
        clamp(t->fast_var_W2, square(0.05 * t->typical_W), square(30.0 * t->typical_W));
}

void tracker_predict(struct tracker *tracker, const struct cell *cell, double dt_s) {
    double *x = tracker->x;
    struct cell_point point;
    struct transition f;

    if (!tracker->started || !(dt_s > 0.0))
        return;
    cell_at(cell, x[TRACK_CHARGE], tracker->temp_C, &point);
    tracker->dt_s = dt_s;
    tracker->age_s += dt_s;
    fill_transition(tracker, cell, &point, dt_s, &f);
    learn_bursts(tracker, dt_s);
    x[TRACK_CHARGE] =
        clamp(x[TRACK_CHARGE] + f.charge_mean * x[TRACK_MEAN] + f.charge_fast * x[TRACK_FAST],
              -CHARGE_MARGIN, 1.0 + CHARGE_MARGIN);
    x[TRACK_U1] = f.fade1 * x[TRACK_U1] + f.u1_mean * x[TRACK_MEAN] + f.u1_fast * x[TRACK_FAST];
    x[TRACK_U2] = f.fade2 * x[TRACK_U2] + f.u2_mean * x[TRACK_MEAN] + f.u2_fast * x[TRACK_FAST];
    x[TRACK_MEAN] += f.follow * x[TRACK_FAST];
    x[TRACK_FAST] *= f.fast;
    x[TRACK_BIAS] *= f.bias;
    apply_left(tracker->P, &f);
    transpose(tracker->P);
    apply_left(tracker->P, &f);
    even_out(tracker->P);
    add_noise(tracker, cell, &point, &f, dt_s);
}

/* ---- a measurement ---- */

/* The curve as a line over the spread of the charge: value at the charge, slope, and the variance
 * of what a line leaves over. Statistical linear regression on three points (Lefebvre, Bruyninckx,
 * De Schutter, IEEE Trans. Autom. Control 47 (2002) 1406-1408), so that a knee within the spread
 * neither hides nor rules. */
struct line {
    double value_V, slope_V, rest_var;
};

static void lay_line(const struct tracker *t, const struct cell *cell, struct line *ret) {
    static const double weight[3] = {1.0 / 6.0, 2.0 / 3.0, 1.0 / 6.0};
    double reach = sqrt(3.0 * t->P[TRACK_CHARGE][TRACK_CHARGE]), charge = t->x[TRACK_CHARGE];
    double x[3] = {fmax(charge - reach, 0.0), clamp(charge, 0.0, 1.0), fmin(charge + reach, 1.0)};
    double y[3], mean_x = 0.0, mean_y = 0.0, xx = 0.0, xy = 0.0;

    for (int i = 0; i < 3; i++) {
        y[i] = ocv_voltage(&cell->table.ocv, x[i]) * cell->voltage_factor;
        mean_x += weight[i] * x[i];
        mean_y += weight[i] * y[i];
    }
    for (int i = 0; i < 3; i++) {
        xx += weight[i] * square(x[i] - mean_x);
        xy += weight[i] * (x[i] - mean_x) * (y[i] - mean_y);
    }
    ret->slope_V = xy / xx;
    ret->value_V = mean_y + ret->slope_V * (charge - mean_x);
    ret->rest_var = 0.0;
    for (int i = 0; i < 3; i++)
        ret->rest_var += weight[i] * square(y[i] - mean_y - ret->slope_V * (x[i] - mean_x));
}

/* Predicted terminal voltage, its derivatives, and the variance that a bent curve adds to it. */
static double model_voltage(const struct tracker *t, const struct cell *cell, double voltage_V,
                            double *H, double *ret_var) {
    const double *x = t->x;
    struct cell_point point;
    struct line curve;
    double current_A = power_W(t) / voltage_V;
    double drop_V;

    cell_at(cell, x[TRACK_CHARGE], t->temp_C, &point);
    if (t->P[TRACK_CHARGE][TRACK_CHARGE] > square(SHARP_CHARGE_SD))
        lay_line(t, cell, &curve);
    else
        curve = (struct line){point.ocv_V, point.ocv_slope_V, 0.0};
    drop_V = point.r0_ohm * current_A;
    H[TRACK_CHARGE] = curve.slope_V;
    H[TRACK_U1] = H[TRACK_U2] = -1.0;
    H[TRACK_MEAN] = H[TRACK_FAST] = -x[TRACK_SCALE] * point.r0_ohm / voltage_V;
    H[TRACK_SCALE] = t->current_told ? -drop_V : 0.0;
    H[TRACK_BIAS] = 1.0;
    *ret_var = curve.rest_var;
    return curve.value_V - x[TRACK_SCALE] * drop_V - x[TRACK_U1] - x[TRACK_U2] + x[TRACK_BIAS];
}

/* gain = P H / S; returns S. */
static double gain(const struct tracker *t, const double *H, double noise_var, double *PH) {
    double S = noise_var;

    for (int i = 0; i < TRACK_N; i++) {
        PH[i] = 0.0;
        for (int j = 0; j < TRACK_N; j++)
            PH[i] += t->P[i][j] * H[j];
    }
    for (int i = 0; i < TRACK_N; i++)
        S += H[i] * PH[i];
    return S;
}

/* What a measurement may teach: states from..to-1. The others are only reckoned with (the consider
 * filter of Schmidt 1966): what is between two of them stays. */
struct lesson {
    int from, to;
};

static bool taught(const struct lesson *lesson, int i) {
    return i >= lesson->from && i < lesson->to;
}

/* P -= PH PH' / S where it is taught, kept symmetric and the diagonal positive. */
static void shrink(struct tracker *t, const double *PH, double S, const struct lesson *lesson) {
    for (int i = 0; i < TRACK_N; i++) {
        double before = t->P[i][i];
        for (int j = 0; j <= i; j++)
            if (taught(lesson, i) || taught(lesson, j))
                t->P[i][j] = t->P[j][i] = t->P[i][j] - PH[i] * PH[j] / S;
        t->P[i][i] = fmax(t->P[i][i], 1e-9 * before);
    }
}

/* A charge outside 0..1 is put on the bound, and what goes along with it by the covariance moves
 * too: a full pack that seems fuller has less sag, hence less load. Projection of D. Simon, "Kalman
 * filtering with state constraints", IET Control Theory Appl. 4 (2010) 1303-1318, section 2.4. */
static void hold_in_range(struct tracker *t, const struct lesson *lesson) {
    double *x = t->x;
    double outside = x[TRACK_CHARGE] - clamp(x[TRACK_CHARGE], 0.0, 1.0);

    if (outside != 0.0)
        for (int i = lesson->to; i-- > 0;)
            x[i] -= t->P[i][TRACK_CHARGE] / t->P[TRACK_CHARGE][TRACK_CHARGE] * outside;
    x[TRACK_SCALE] = clamp(x[TRACK_SCALE], 0.3, 8.0);
}

/* An innovation beyond the gate is given a wider noise, just so that it lies on the gate: one wild
 * reading moves little, a lasting change still comes through. */
static double gated(double S, double innovation) {
    return fmax(S, square(innovation / GATE));
}

/* Noise of the reading plus the model's own error under load. The model errs in one direction for a
 * while, so its variance counts as often as samples fall into that while. */
static double voltage_noise_var(const struct tracker *t, const struct cell *cell,
                                double voltage_V) {
    double load_W = t->current_told ? hypot(power_W(t), 0.3 * t->x[TRACK_MEAN])
                                    : hypot(t->x[TRACK_MEAN], sqrt(t->fast_var_W2));
    double current_A = load_W / voltage_V;
    struct cell_point point;

    cell_at(cell, t->x[TRACK_CHARGE], t->temp_C, &point);
    return square(VOLTAGE_NOISE_V * cell->voltage_factor) +
           square(WAKING_V * cell->voltage_factor * exp(-t->age_s / WAKING_S)) +
           square(MODEL_SHARE * (point.r0_ohm + point.r1_ohm + point.r2_ohm) * current_A) *
               fmax(2.0 * MODEL_TAU_S / t->dt_s, 1.0);
}

/* The readings have contradicted the charge for long: it is read anew, as at the start. */
static void begin_anew(struct tracker *t, const struct cell *cell, double voltage_V) {
    struct cell_point point;
    double sag_V;

    cell_at(cell, t->x[TRACK_CHARGE], t->temp_C, &point);
    sag_V =
        t->x[TRACK_SCALE] * point.r0_ohm * power_W(t) / voltage_V + t->x[TRACK_U1] + t->x[TRACK_U2];
    for (int i = 0; i < TRACK_N; i++)
        t->P[TRACK_CHARGE][i] = t->P[i][TRACK_CHARGE] = 0.0;
    set_state(t, TRACK_CHARGE,
              ocv_charge(&cell->table.ocv, (voltage_V + sag_V) / cell->voltage_factor),
              CHARGE_SD_BLANK);
    t->surprises = 0;
    t->doubt_V = 0.0;
}

/* The mean innovation of some minutes: in it the reading's noise is gone, and what is left must be
 * explained by the state's own spread (the consistency test of Y. Bar-Shalom, X. R. Li,
 * T. Kirubarajan, Estimation with Applications to Tracking and Navigation, 2001, section 5.4). */
static bool doubtful(struct tracker *t, double innovation_V, double S, double noise_var) {
    double most_V = GATE * sqrt(S), share = 1.0 - exp(-t->dt_s / DOUBT_S);

    t->doubt_V += share * (clamp(innovation_V, -most_V, most_V) - t->doubt_V);
    return square(t->doubt_V) > square(GATE) * (S - noise_var + 0.5 * share * noise_var);
}

/* What a reading may teach; nothing: the charge is to be read anew. No voltage jumps by its
 * charge: one beyond the gate is a change of the load, or rubbish; only when they go on does the
 * charge move. */
static struct lesson lesson_of(struct tracker *t, double innovation_V, double S, double noise_var) {
    bool doubted = doubtful(t, innovation_V, S, noise_var);

    t->surprises = square(innovation_V) > square(GATE) * S ? t->surprises + 1 : 0;
    if (doubted || t->surprises >= SURPRISES)
        return (struct lesson){0, 0};
    if (t->surprises > 0)
        return (struct lesson){TRACK_MEAN, TRACK_FAST + 1};
    return (struct lesson){TRACK_CHARGE, t->current_told ? TRACK_BIAS : TRACK_SCALE};
}

static void update_voltage(struct tracker *t, const struct cell *cell, double voltage_V) {
    double H[TRACK_N], PH[TRACK_N], S, curve_var, noise_var = voltage_noise_var(t, cell, voltage_V);
    double innovation_V = voltage_V - model_voltage(t, cell, voltage_V, H, &curve_var);
    struct lesson lesson;

    S = gain(t, H, noise_var + curve_var, PH);
    lesson = lesson_of(t, innovation_V, S, noise_var + curve_var);
    if (lesson.to == 0) {
        begin_anew(t, cell, voltage_V);
        return;
    }
    S = gated(S, innovation_V);
    for (int i = lesson.from; i < lesson.to; i++)
        t->x[i] += PH[i] / S * innovation_V;
    shrink(t, PH, S, &lesson);
    hold_in_range(t, &lesson);
}

static void update_current(struct tracker *t, const struct cell *cell, double voltage_V,
                           double current_A) {
    double H[TRACK_N] = {[TRACK_MEAN] = 1.0 / voltage_V, [TRACK_FAST] = 1.0 / voltage_V};
    static const struct lesson lesson = {TRACK_CHARGE, TRACK_N};
    double PH[TRACK_N], noise_var, S, innovation_A = current_A - power_W(t) / voltage_V;

    noise_var = square(CURRENT_NOISE_h * cell->capacity_Ah) + square(CURRENT_GAIN * current_A);
    S = gain(t, H, noise_var, PH);
    for (int i = 0; i < TRACK_N; i++)
        t->x[i] += PH[i] / S * innovation_A;
    shrink(t, PH, S, &lesson);
    hold_in_range(t, &lesson);
}

void tracker_update(struct tracker *tracker, const struct cell *cell, double voltage_V,
                    double current_A, double temp_C) {
    tracker->temp_C = temp_C;
    if (!tracker->started)
        start(tracker, cell, voltage_V);
    tracker->current_told = isfinite(current_A);
    if (tracker->current_told)
        update_current(tracker, cell, voltage_V, current_A);
    update_voltage(tracker, cell, voltage_V);
    tracker->voltage_V = voltage_V;
}

void tracker_load_changed(struct tracker *tracker) {
    tracker->P[TRACK_MEAN][TRACK_MEAN] += square(CHANGE_SHARE * tracker->typical_W);
}

void tracker_unseen(struct tracker *tracker) {
    if (tracker->x[TRACK_MEAN] > UNSEEN_SHARE * tracker->typical_W)
        return;
    for (int i = 0; i < TRACK_N; i++) {
        tracker->P[TRACK_MEAN][i] = tracker->P[i][TRACK_MEAN] = 0.0;
        tracker->P[TRACK_FAST][i] = tracker->P[i][TRACK_FAST] = 0.0;
    }
    set_state(tracker, TRACK_MEAN, tracker->typical_W, 0.5 * tracker->typical_W);
    set_state(tracker, TRACK_FAST, 0.0, sqrt(tracker->fast_var_W2));
}

/* ---- reading ---- */

static double drawn_W(const struct tracker *t, const struct cell_point *point) {
    const double *x = t->x;
    double source_V = point->ocv_V + x[TRACK_BIAS] - x[TRACK_U1] - x[TRACK_U2];

    return t->voltage_V * (source_V - t->voltage_V) / (x[TRACK_SCALE] * point->r0_ohm);
}

void tracker_read(const struct tracker *tracker, const struct cell *cell,
                  struct tracker_estimate *ret) {
    const double *x = tracker->x;
    struct cell_point point;

    cell_at(cell, x[TRACK_CHARGE], tracker->temp_C, &point);
    ret->charge = clamp(x[TRACK_CHARGE], 0.0, 1.0);
    ret->charge_sd = sqrt(tracker->P[TRACK_CHARGE][TRACK_CHARGE]);
    ret->power_W = power_W(tracker);
    ret->current_A = ret->power_W / tracker->voltage_V;
    ret->rest_V = point.ocv_V + x[TRACK_BIAS];
    ret->sag_V = x[TRACK_SCALE] * point.r0_ohm * ret->current_A + x[TRACK_U1] + x[TRACK_U2];
    ret->drawn_W = tracker->current_told ? ret->power_W : drawn_W(tracker, &point);
    ret->power_mean_W = x[TRACK_MEAN];
    ret->power_sd_W = sqrt(tracker->P[TRACK_MEAN][TRACK_MEAN]);
    ret->fast_sd_W = sqrt(tracker->fast_var_W2);
    ret->burst_W = ret->fast_sd_W;
    ret->scale = x[TRACK_SCALE];
    ret->scale_sd = sqrt(tracker->P[TRACK_SCALE][TRACK_SCALE]);
    ret->u1_V = x[TRACK_U1];
    ret->u2_V = x[TRACK_U2];
}
