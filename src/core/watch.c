/* The pipeline: believe or refuse a sample, track, look ahead, decide, report. */
#include "core/watch.h"

#include "core/remains.h"
#include "core/watch_report.h"
#include "util/real.h"

#include <math.h>
#include <string.h>

/* Program defaults. */
static const double CURRENT_MOST_h = 40.0; /* no reading of a pack: capacities an hour */
static const double TEMP_LOW_C = -50.0, TEMP_HIGH_C = 100.0;
static const double SMOOTH_S = 15.0;                 /* low-pass of the power behind the flow */
static const double FLOW_ON = 0.15, FLOW_OFF = 0.05; /* of the typical load; hysteresis */
static const double STEP_LONGEST_S = 300.0; /* of one prediction, unless the gap is very long: */
static const double STEPS_MOST = 1000.0;
static const double AHEAD_SHARE = 0.01, AHEAD_LEAST_S = 2.0, AHEAD_MOST_S = 60.0;
static const double AHEAD_CHARGE = 0.01, AHEAD_LOAD = 0.05; /* changes that ask for a new look */
static const double AHEAD_IDLE = 0.1; /* of the typical load: under it changes do not matter */
static const int WILD_MOST = 10;
static const int WARMUP = 3; /* a gauge may tell rubbish right after it wakes; inrush passes */
static const int WARMUP_AGAIN = 1;        /* restarted beside a gauge that ran on */
static const double LOAD_SEEN_S = 1800.0; /* what a load of an earlier run is worth at most */
static const double LOAD_SURE = 0.1;      /* known to this share it is worth half of that */
/* Learned over a stop of unknown events (swapped, charged, stood long): spread of the charge. */
static const double AWAY_SD = 0.10, AWAY_SD_h = 0.002;

static double span_s(int64_t from_us, int64_t to_us) {
    return (double)(to_us - from_us) * 1e-6;
}

/* ---- start, memory ---- */

static bool pack_sound(const struct pack_config *p) {
    return p->cell.series >= 1 && p->cell.capacity_Ah > 0.0 && p->cutoff_charge >= 0.0 &&
           p->cutoff_charge < 1.0 && p->cutoff_rest_V >= 0.0 && p->floor_V >= 0.0 &&
           p->carries_W > 0.0 && p->typical_W > 0.0 && p->wiring_ohm >= 0.0;
}

static bool config_sound(const struct watch_config *c) {
    const struct ladder_config *l = &c->ladder;

    if (c->n_packs < 1 || c->n_packs > PACKS_MAX || !(c->silent_s > 0.0) ||
        !isfinite(c->assumed_temp_C))
        return false;
    for (size_t i = 0; i < c->n_packs; i++)
        if (!pack_sound(&c->pack[i]))
            return false;
    return l->reserve_charge >= 0.0 && l->reserve_left_s >= 0.0 && l->keep_s >= 0.0 &&
           l->confirm_s >= 0.0 && l->floor_confirm_s >= 0.0 && l->floor_samples >= LADDER_SAMPLES &&
           l->grace_s >= 0.0 && l->margin_charge >= 0.0 && l->margin_left >= 0.0 &&
           l->margin_V >= 0.0;
}

static void pack_init(struct watch_pack *pack, double assumed_temp_C, int64_t t_boot_us) {
    *pack = (struct watch_pack){
        .prior = {UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN},
        .endurance = {UNKNOWN, UNKNOWN, UNKNOWN, CAUSE_NONE},
        .t_state_us = t_boot_us,
        .t_believed_us = t_boot_us,
        .voltage_V = UNKNOWN,
        .temp_C = assumed_temp_C,
        .warmup = WARMUP,
    };
}

int watch_init(struct watch *ret, const struct watch_config *config, int64_t t_boot_us) {
    if (!config_sound(config))
        return WATCH_E_CONFIG;
    memset(ret, 0, sizeof(*ret));
    ret->config = *config;
    for (size_t i = 0; i < config->n_packs; i++) {
        ret->config.pack[i].cell.wiring_ohm = config->pack[i].wiring_ohm;
        pack_init(&ret->pack[i], config->assumed_temp_C, t_boot_us);
    }
    ladder_init(&ret->ladder, &config->ladder, t_boot_us);
    ret->t_start_us = ret->t_boot_us = ret->t_endurance_us = ret->supply_since_us = t_boot_us;
    ret->losing_since_us = -1;
    ret->reading = ret->rail_V = ret->adapter = ret->plugged = UNKNOWN;
    ret->endurance_charge = ret->endurance_W = UNKNOWN;
    return 0;
}

static void prior_from(struct tracker_prior *prior, const struct pack_memory *m,
                       const struct cell *cell, double gone_s, bool same_boot) {
    const struct cell_table *table = &cell->table;

    prior->scale = m->resistance_scale;
    prior->scale_sd = m->resistance_sd;
    prior->power_W = m->power_W;
    prior->power_sd_W = m->power_sd_W;
    if (!isfinite(gone_s) || !(gone_s >= 0.0))
        return;
    prior->charge = m->charge;
    prior->charge_sd =
        same_boot ? m->charge_sd : hypot(m->charge_sd, AWAY_SD + AWAY_SD_h * gone_s / 3600.0);
    prior->u1_V = m->u1_V * exp(-gone_s / table->tau1_s);
    prior->u2_V = m->u2_V * exp(-gone_s / table->tau2_s);
}

static bool memory_sound(const struct pack_memory *m) {
    return m->charge >= -0.1 && m->charge <= 1.1 && m->charge_sd > 0.0 && m->power_sd_W > 0.0 &&
           isfinite(m->charge_sd) && isfinite(m->power_W) && isfinite(m->power_sd_W) &&
           isfinite(m->u1_V) && isfinite(m->u2_V) && m->resistance_scale > 0.1 &&
           m->resistance_scale < 20.0 && m->resistance_sd > 0.0 && isfinite(m->resistance_sd);
}

void watch_restore(struct watch *watch, const struct watch_memory *memory, double gone_s,
                   bool same_boot) {
    for (size_t i = 0; i < watch->config.n_packs && i < memory->n_packs; i++)
        if (memory_sound(&memory->pack[i]))
            prior_from(&watch->pack[i].prior, &memory->pack[i], &watch->config.pack[i].cell, gone_s,
                       same_boot);
    if (!same_boot)
        return;
    for (size_t i = 0; i < watch->config.n_packs; i++)
        watch->pack[i].warmup = WARMUP_AGAIN;
    ladder_resume(&watch->ladder, memory->stage, memory->stage_since_us, memory->cause);
}

void watch_remember(const struct watch *watch, struct watch_memory *ret) {
    memset(ret, 0, sizeof(*ret));
    ret->t_boot_us = watch->t_boot_us;
    ret->stage = watch->ladder.stage;
    ret->stage_since_us = watch->ladder.stage_since_us;
    ret->cause = watch->ladder.cause;
    ret->n_packs = watch->config.n_packs;
    for (size_t i = 0; i < ret->n_packs; i++) {
        const struct tracker_estimate *now = &watch->pack[i].now;
        const struct tracker_prior *prior = &watch->pack[i].prior;

        ret->pack[i] = (struct pack_memory){prior->charge, prior->charge_sd, prior->u1_V,
                                            prior->u2_V,   prior->power_W,   prior->power_sd_W,
                                            prior->scale,  prior->scale_sd,  watch->pack[i].temp_C};
        if (watch->pack[i].known)
            ret->pack[i] =
                (struct pack_memory){now->charge, now->charge_sd,    now->u1_V,
                                     now->u2_V,   now->power_mean_W, now->power_sd_W,
                                     now->scale,  now->scale_sd,     watch->pack[i].temp_C};
    }
}

/* ---- one pack's reading ---- */

static bool possible_voltage(const struct cell *cell, double voltage_V) {
    return voltage_V >= cell->table.possible_low_V * cell->voltage_factor &&
           voltage_V <= cell->table.possible_high_V * cell->voltage_factor;
}

static void grow_wild(struct watch_pack *pack) {
    if (pack->wild < WILD_MOST)
        pack->wild++;
}

static void predict_to(struct watch_pack *pack, const struct cell *cell, int64_t t_boot_us) {
    double gap_s = span_s(pack->t_state_us, t_boot_us);
    int steps = (int)fmin(ceil(gap_s / STEP_LONGEST_S), STEPS_MOST);

    for (int i = 0; i < steps; i++)
        tracker_predict(&pack->tracker, cell, gap_s / steps);
    pack->t_state_us = t_boot_us;
}

static enum flow flow_of(enum flow before, double smooth_W, double typical_W) {
    double share = smooth_W / typical_W;
    double discharging = before == FLOW_DISCHARGING ? FLOW_OFF : FLOW_ON;
    double charging = before == FLOW_CHARGING ? FLOW_OFF : FLOW_ON;

    if (share > discharging)
        return FLOW_DISCHARGING;
    return share < -charging ? FLOW_CHARGING : FLOW_RESTING;
}

/* While the pack carries the unit, the time to come is like what was seen for long; the tracker's
 * own mean follows each bout. */
static void learn_load(const struct watch *watch, struct watch_pack *pack, double dt_s) {
    double horizon_s = pack->endurance.left_s > 0.0 ? pack->endurance.left_s : 3600.0;

    if (pack->flow == FLOW_CHARGING || watch->supply == SUPPLY_ADAPTER)
        return;
    if (dt_s > 0.0 && !pack->silent)
        load_add(&pack->load, pack->now.power_W, pack->now.power_sd_W, pack->now.drawn_W, dt_s);
    pack->now.power_sd_W = load_sd_W(&pack->load, horizon_s);
    pack->now.power_mean_W = load_mean_W(&pack->load);
    pack->now.burst_W = load_burst_W(&pack->load);
}

static void read_pack(struct watch *watch, size_t i, double dt_s) {
    struct watch_pack *pack = &watch->pack[i];
    const struct pack_config *config = &watch->config.pack[i];

    tracker_read(&pack->tracker, &config->cell, &pack->now);
    if (dt_s < 0.0)
        pack->smooth_W = pack->now.power_W;
    else
        pack->smooth_W += (1.0 - exp(-dt_s / SMOOTH_S)) * (pack->now.power_W - pack->smooth_W);
    pack->flow = flow_of(pack->flow, pack->smooth_W, config->typical_W);
    learn_load(watch, pack, dt_s);
}

/* Channels beside the voltage: what cannot be is treated as not told. */
static void believe_others(struct watch_pack *pack, const struct watch_config *config,
                           const struct cell *cell, struct pack_sample *s) {
    bool temp_told = s->temp_C > TEMP_LOW_C && s->temp_C < TEMP_HIGH_C;

    if (fabs(s->current_A) > CURRENT_MOST_h * cell->capacity_Ah) {
        s->current_A = UNKNOWN;
        grow_wild(pack);
    }
    if (temp_told)
        pack->temp_C = s->temp_C;
    else if (!pack->temp_measured)
        pack->temp_C = config->assumed_temp_C;
    pack->temp_measured = temp_told;
    pack->current_measured = isfinite(s->current_A);
}

/* What was learned of the load before counts by how well it was known. */
static void begin_pack(struct watch_pack *pack, double typical_W) {
    const struct tracker_prior *prior = &pack->prior;
    double power_W = isfinite(prior->power_W) ? prior->power_W : typical_W;
    double off = isfinite(prior->power_W) ? prior->power_sd_W / (LOAD_SURE * typical_W) : 10.0;

    tracker_init(&pack->tracker, typical_W, pack->temp_C, prior);
    load_init(&pack->load, power_W, LOAD_SEEN_S / (1.0 + off * off), typical_W);
}

static enum watch_verdict feed_pack(struct watch *watch, size_t i, struct pack_sample sample,
                                    int64_t t_boot_us) {
    struct watch_pack *pack = &watch->pack[i];
    const struct pack_config *config = &watch->config.pack[i];
    double dt_s = pack->known ? span_s(pack->t_state_us, t_boot_us) : -1.0;

    if (isnan(sample.voltage_V))
        return WATCH_EMPTY;
    if (!possible_voltage(&config->cell, sample.voltage_V)) {
        grow_wild(pack);
        return WATCH_REFUSED;
    }
    if (pack->warmup > 0) {
        pack->warmup--;
        return WATCH_WARMUP;
    }
    believe_others(pack, &watch->config, &config->cell, &sample);
    if (!pack->known)
        begin_pack(pack, config->typical_W);
    else
        predict_to(pack, &config->cell, t_boot_us);
    tracker_update(&pack->tracker, &config->cell, sample.voltage_V, sample.current_A, pack->temp_C);
    pack->known = true;
    pack->silent = false;
    pack->t_state_us = pack->t_believed_us = t_boot_us;
    pack->voltage_V = sample.voltage_V;
    pack->under_floor = sample.voltage_V < config->floor_V;
    pack->wild -= pack->wild > 0;
    read_pack(watch, i, dt_s);
    return WATCH_TAKEN;
}

/* ---- supply ---- */

static double adapter_told(const struct watch *watch) {
    if (isfinite(watch->adapter))
        return watch->adapter;
    if (isfinite(watch->rail_V) && isfinite(watch->config.rail_adapter_V))
        return watch->rail_V >= watch->config.rail_adapter_V ? 1.0 : 0.0;
    return UNKNOWN;
}

static void note_supply(struct watch *watch) {
    double told = adapter_told(watch);
    enum flow flow = report_flow(watch);
    enum supply supply = SUPPLY_UNKNOWN;

    if (told > 0.5)
        supply = flow == FLOW_DISCHARGING ? SUPPLY_BOTH : SUPPLY_ADAPTER;
    else if (told <= 0.5 || flow == FLOW_DISCHARGING)
        supply = SUPPLY_PACK;
    else if (flow == FLOW_CHARGING)
        supply = SUPPLY_ADAPTER;
    if (isfinite(watch->plugged) && isfinite(told) && told != watch->plugged)
        for (size_t i = 0; i < watch->config.n_packs; i++)
            tracker_load_changed(&watch->pack[i].tracker);
    watch->plugged = told;
    if (supply != watch->supply) {
        watch->supply = supply;
        watch->supply_since_us = watch->t_boot_us;
    }
    if (supply != SUPPLY_BOTH)
        watch->losing_since_us = -1;
    else if (watch->losing_since_us < 0)
        watch->losing_since_us = watch->t_boot_us;
}

/* ---- looking ahead ---- */

static bool ahead_due(const struct watch *watch) {
    double age_s = span_s(watch->t_endurance_us, watch->t_boot_us), left_s = ENDLESS;
    double charge = 0.0, power_W = 0.0, usual_W = 0.0;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        if (!watch->pack[i].known)
            continue;
        charge += watch->pack[i].now.charge;
        power_W += watch->pack[i].now.power_mean_W;
        usual_W += watch->config.pack[i].typical_W;
        left_s = fmin(left_s, watch->pack[i].endurance.left_s);
    }
    return !(fabs(charge - watch->endurance_charge) < AHEAD_CHARGE) ||
           !(fabs(power_W - watch->endurance_W) <
             AHEAD_LOAD * fmax(fabs(power_W), AHEAD_IDLE * usual_W)) ||
           age_s >= fmax(AHEAD_LEAST_S, fmin(AHEAD_SHARE * left_s, AHEAD_MOST_S));
}

static void look_ahead(struct watch *watch) {
    if (!ahead_due(watch))
        return;
    watch->endurance_charge = watch->endurance_W = 0.0;
    for (size_t i = 0; i < watch->config.n_packs; i++) {
        struct watch_pack *pack = &watch->pack[i];
        const struct pack_config *config = &watch->config.pack[i];
        struct endurance_goal goal = {config->cutoff_charge, config->cutoff_rest_V,
                                      config->floor_V};

        if (!pack->known)
            continue;
        endurance_compute(&config->cell, &pack->now, pack->temp_C, &goal, &pack->endurance);
        watch->endurance_charge += pack->now.charge;
        watch->endurance_W += pack->now.power_mean_W;
    }
    watch->t_endurance_us = watch->t_boot_us;
}

/* ---- feed and tick ---- */

static void fall_silent(struct watch_pack *pack) {
    pack->silent = true;
    pack->warmup = WARMUP;
    if (pack->known)
        tracker_unseen(&pack->tracker);
}

/* Packs whose gauge is silent go on by the model, and start anew with a look when it returns. */
static void run_blind_packs(struct watch *watch) {
    for (size_t i = 0; i < watch->config.n_packs; i++) {
        struct watch_pack *pack = &watch->pack[i];
        double dt_s = span_s(pack->t_state_us, watch->t_boot_us);

        if (!report_pack_blind(watch, i))
            continue;
        if (!pack->silent)
            fall_silent(pack);
        pack->under_floor = false;
        pack->current_measured = false;
        if (pack->known && dt_s > 0.0) {
            predict_to(pack, &watch->config.pack[i].cell, watch->t_boot_us);
            read_pack(watch, i, dt_s);
        }
    }
}

static void conclude(struct watch *watch, bool new_sample, struct report *ret_report) {
    struct ladder_input input;

    run_blind_packs(watch);
    if (report_blind(watch))
        watch->adapter = watch->rail_V = UNKNOWN;
    note_supply(watch);
    look_ahead(watch);
    report_ladder_input(watch, new_sample, &input);
    ladder_step(&watch->ladder, &input);
    report_fill(watch, ret_report);
}

/* The best that became of any pack's reading. */
static enum watch_verdict feed_packs(struct watch *watch, const struct sample *sample) {
    bool seen[WATCH_EMPTY + 1] = {false};

    for (size_t i = 0; i < watch->config.n_packs; i++)
        seen[feed_pack(watch, i, sample->pack[i], sample->t_boot_us)] = true;
    watch->samples += seen[WATCH_TAKEN];
    watch->refused += seen[WATCH_REFUSED];
    if (seen[WATCH_TAKEN])
        return WATCH_TAKEN;
    if (seen[WATCH_WARMUP])
        return WATCH_WARMUP;
    return seen[WATCH_REFUSED] ? WATCH_REFUSED : WATCH_EMPTY;
}

static void hear_lines(struct watch *watch, const struct sample *sample) {
    if (isfinite(sample->adapter))
        watch->adapter = sample->adapter;
    if (sample->rail_V > 0.0 && isfinite(sample->rail_V))
        watch->rail_V = sample->rail_V;
}

static enum watch_verdict take(struct watch *watch, const struct sample *sample) {
    if (sample->t_boot_us < watch->t_boot_us)
        return WATCH_LATE;
    watch->t_boot_us = sample->t_boot_us;
    if (sample->reading == watch->reading) {
        watch->repeated++;
        watch->repeats_in_row++;
        return WATCH_REPEATED;
    }
    watch->repeats_in_row = 0;
    watch->reading = sample->reading;
    hear_lines(watch, sample);
    return feed_packs(watch, sample);
}

enum watch_verdict watch_feed(struct watch *watch, const struct sample *sample,
                              struct report *ret_report) {
    enum watch_verdict verdict = take(watch, sample);

    conclude(watch, verdict == WATCH_TAKEN, ret_report);
    return verdict;
}

void watch_tick(struct watch *watch, int64_t t_boot_us, struct report *ret_report) {
    if (t_boot_us > watch->t_boot_us)
        watch->t_boot_us = t_boot_us;
    conclude(watch, false, ret_report);
}
