/* Sums over the packs, for the ladder and for people. See watch_report.h. */
#include "core/watch_report.h"

#include "core/remains.h"
#include "util/real.h"

#include <math.h>
#include <string.h>

static const double BAND_SPREADS = 1.96;      /* 95 % band of a normal distribution */
static const double CAUTIOUS_SPREADS = 1.645; /* its 5th percentile */
static const double BURST_SPREADS = 1.5;
static const double LOSING_S = 60.0;
static const int WILD_ALERT = 3, REPEATS_ALERT = 5;
static const double SCALE_ALERT = 2.0, GUESS_SD = 0.13; /* band wider than half the pack */

static double span_s(int64_t from_us, int64_t to_us) {
    return (double)(to_us - from_us) * 1e-6;
}

/* ---- packs ---- */

bool report_pack_blind(const struct watch *watch, size_t pack) {
    return span_s(watch->pack[pack].t_believed_us, watch->t_boot_us) > watch->config.silent_s;
}

bool report_blind(const struct watch *watch) {
    for (size_t i = 0; i < watch->config.n_packs; i++)
        if (report_pack_blind(watch, i))
            return true;
    return false;
}

static double cautious_charge(const struct watch *watch, size_t i) {
    const struct tracker_estimate *now = &watch->pack[i].now;

    if (!report_pack_blind(watch, i))
        return now->charge;
    return fmax(now->charge - CAUTIOUS_SPREADS * now->charge_sd, 0.0);
}

/* The rule by which this pack is at its cutoff; with margins on, whether it is not yet clear of it.
 */
static enum cause pack_cutoff(const struct watch *watch, size_t i, double margin_charge,
                              double margin_V) {
    const struct pack_config *config = &watch->config.pack[i];
    bool blind = report_pack_blind(watch, i);

    if (!watch->pack[i].known)
        return CAUSE_NONE;
    if (cautious_charge(watch, i) <= config->cutoff_charge + margin_charge)
        return blind ? CAUSE_BLIND : CAUSE_CHARGE;
    if (!blind &&
        watch->pack[i].now.rest_V <= config->cutoff_rest_V + margin_V * config->cell.voltage_factor)
        return CAUSE_REST;
    return CAUSE_NONE;
}

enum flow report_flow(const struct watch *watch) {
    bool charging = false, known = false;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        if (!watch->pack[i].known)
            continue;
        known = true;
        if (watch->pack[i].flow == FLOW_DISCHARGING)
            return FLOW_DISCHARGING;
        charging = charging || watch->pack[i].flow == FLOW_CHARGING;
    }
    if (!known)
        return FLOW_UNKNOWN;
    return charging ? FLOW_CHARGING : FLOW_RESTING;
}

/* ---- the unit ---- */

/* Mean load and bursts of all known packs. */
static double load_W(const struct watch *watch) {
    double sum_W = 0.0;

    for (size_t i = 0; i < watch->config.n_packs; i++)
        if (watch->pack[i].known)
            sum_W += fmax(watch->pack[i].now.power_mean_W, 0.0) +
                     BURST_SPREADS * watch->pack[i].now.fast_sd_W;
    return sum_W;
}

static double most_W(const struct watch *watch) {
    double sum_W = 0.0;

    for (size_t i = 0; i < watch->config.n_packs; i++)
        if (watch->pack[i].known)
            sum_W += watch->config.pack[i].carries_W;
    return sum_W;
}

/* What those that remain must carry. The unit runs, so its packs together carry it, whatever the
 * estimate of bursts says: an overload is an alert, never an end by itself. */
static double need_W(const struct watch *watch) {
    return fmin(load_W(watch), most_W(watch));
}

/* counts: packs that are known and that the caller does not rule out. */
static void remaining(const struct watch *watch, const bool *out, bool least,
                      struct remains_pack *ret) {
    double age_s = span_s(watch->t_endurance_us, watch->t_boot_us);

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        const struct watch_pack *pack = &watch->pack[i];
        double left_s = least ? pack->endurance.left_least_s : pack->endurance.left_s;

        ret[i] = (struct remains_pack){.counts = pack->known && !out[i],
                                       .carries_W = watch->config.pack[i].carries_W,
                                       .power_W = fmax(pack->now.power_mean_W, 0.0),
                                       .left_s = fmax(left_s - age_s, 0.0)};
    }
}

static bool carried_without(const struct watch *watch, const bool *out) {
    struct remains_pack packs[PACKS_MAX];

    remaining(watch, out, false, packs);
    return remains_carry(packs, watch->config.n_packs, need_W(watch));
}

static double unit_left_s(const struct watch *watch, bool least) {
    struct remains_pack packs[PACKS_MAX];
    bool out[PACKS_MAX], any = false;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        out[i] = pack_cutoff(watch, i, 0.0, 0.0) != CAUSE_NONE;
        any = any || watch->pack[i].known;
    }
    if (!any)
        return UNKNOWN;
    remaining(watch, out, least, packs);
    return remains_left_s(packs, watch->config.n_packs, need_W(watch));
}

/* Mean over the known packs by what they hold; spreads: so many standard deviations off. */
static double unit_charge(const struct watch *watch, double spreads) {
    double sum = 0.0, weights = 0.0;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        const struct cell *cell = &watch->config.pack[i].cell;
        double weight = cell->capacity_Ah * cell->voltage_factor;
        const struct tracker_estimate *now = &watch->pack[i].now;

        if (!watch->pack[i].known)
            continue;
        sum += weight * fmin(fmax(now->charge + spreads * now->charge_sd, 0.0), 1.0);
        weights += weight;
    }
    return weights > 0.0 ? sum / weights : UNKNOWN;
}

/* ---- for the ladder ---- */

static void sum_cutoffs(const struct watch *watch, struct ladder_input *in) {
    const struct ladder_config *ladder = &watch->config.ladder;
    bool low[PACKS_MAX], near[PACKS_MAX], floor[PACKS_MAX];
    enum cause cause = CAUSE_NONE;

    for (size_t i = watch->config.n_packs; i-- > 0;) {
        enum cause own = pack_cutoff(watch, i, 0.0, 0.0);

        low[i] = own != CAUSE_NONE;
        near[i] = pack_cutoff(watch, i, ladder->margin_charge, ladder->margin_V) != CAUSE_NONE;
        floor[i] = watch->pack[i].under_floor;
        if (low[i]) {
            cause = own;
            in->cutoff_pack = (int)i;
        }
        if (floor[i])
            in->floor_pack = (int)i;
    }
    in->clear = carried_without(watch, near);
    in->cutoff = carried_without(watch, low) ? CAUSE_NONE : cause;
    in->under_floor = in->floor_pack >= 0 && !carried_without(watch, floor);
}

void report_ladder_input(const struct watch *watch, bool new_sample, struct ladder_input *ret) {
    *ret = (struct ladder_input){
        .t_boot_us = watch->t_boot_us,
        .charge = unit_charge(watch, report_blind(watch) ? -CAUTIOUS_SPREADS : 0.0),
        .left_s = unit_left_s(watch, false),
        .left_least_s = unit_left_s(watch, true),
        .cutoff_pack = -1,
        .floor_pack = -1,
        .new_sample = new_sample,
        .lifted = watch->supply == SUPPLY_ADAPTER && !report_blind(watch),
        .blind = report_blind(watch),
    };
    sum_cutoffs(watch, ret);
}

/* ---- for people ---- */

static unsigned alerts_of(const struct watch *watch) {
    unsigned alerts = report_blind(watch) ? ALERT_SILENT : 0;
    bool any = false;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        const struct watch_pack *pack = &watch->pack[i];

        if (pack->wild >= WILD_ALERT)
            alerts |= ALERT_IMPOSSIBLE;
        if (!pack->known)
            continue;
        any = true;
        if (pack->spent)
            alerts |= ALERT_SPENT;
        if (pack->now.scale - pack->now.scale_sd > SCALE_ALERT)
            alerts |= ALERT_RESISTANCE;
        if (pack->now.charge_sd > GUESS_SD)
            alerts |= ALERT_GUESS;
    }
    if (watch->losing_since_us >= 0 && span_s(watch->losing_since_us, watch->t_boot_us) >= LOSING_S)
        alerts |= ALERT_LOSING;
    if (watch->repeats_in_row >= REPEATS_ALERT)
        alerts |= ALERT_REPEATED;
    if (any && load_W(watch) > most_W(watch))
        alerts |= ALERT_OVERLOAD;
    return alerts;
}

/* A time that was worked out age_s ago. ENDLESS and UNKNOWN stay what they are. */
static double aged(double then_s, double age_s) {
    return isnan(then_s) ? UNKNOWN : fmax(then_s - age_s, 0.0);
}

static const struct pack_report NOT_KNOWN = {
    .charge = UNKNOWN,
    .charge_low = UNKNOWN,
    .charge_high = UNKNOWN,
    .terminal_V = UNKNOWN,
    .rest_V = UNKNOWN,
    .sag_V = UNKNOWN,
    .current_A = UNKNOWN,
    .power_W = UNKNOWN,
    .power_mean_W = UNKNOWN,
    .left_s = UNKNOWN,
    .left_least_s = UNKNOWN,
    .full_s = UNKNOWN,
    .resistance_ohm = UNKNOWN,
    .resistance_scale = UNKNOWN,
};

static void fill_pack(struct watch *watch, size_t i, struct pack_report *ret) {
    const struct pack_config *config = &watch->config.pack[i];
    struct watch_pack *pack = &watch->pack[i];
    const struct tracker_estimate *now = &pack->now;
    double age_s = span_s(watch->t_endurance_us, watch->t_boot_us);
    struct cell_point point;

    *ret = NOT_KNOWN;
    ret->temp_C = pack->temp_C;
    ret->temp_measured = pack->temp_measured;
    if (!pack->known)
        return;
    cell_at(&config->cell, now->charge, pack->temp_C, &point);
    ret->known = true;
    ret->spent = pack->spent;
    ret->charge = now->charge;
    ret->charge_low = fmax(now->charge - BAND_SPREADS * now->charge_sd, 0.0);
    ret->charge_high = fmin(now->charge + BAND_SPREADS * now->charge_sd, 1.0);
    ret->terminal_V = report_pack_blind(watch, i) ? UNKNOWN : pack->voltage_V;
    ret->rest_V = now->rest_V;
    ret->sag_V = now->sag_V;
    ret->current_A = now->current_A;
    ret->power_W = now->power_W;
    ret->power_mean_W = now->power_mean_W;
    ret->current_measured = pack->current_measured;
    ret->left_s = aged(pack->endurance.left_s, age_s);
    ret->left_least_s = aged(pack->endurance.left_least_s, age_s);
    ret->full_s = aged(pack->endurance.full_s, age_s);
    ret->ends_by = pack->endurance.ends_by;
    ret->resistance_ohm = now->scale * point.r0_ohm;
    ret->resistance_scale = now->scale;
}

/* Time to the reserve: by charge at today's current, or by time left, whichever comes first. */
static double to_reserve_s(const struct watch *watch, const struct report *report) {
    const struct ladder_config *ladder = &watch->config.ladder;
    double rate_h = 0.0, weights = 0.0, by_charge_s, by_left_s;

    if (report->stage != STAGE_AMPLE)
        return 0.0;
    for (size_t i = 0; i < watch->config.n_packs; i++) {
        const struct watch_pack *pack = &watch->pack[i];
        const struct cell *cell = &watch->config.pack[i].cell;

        if (!pack->known)
            continue;
        rate_h += pack->now.power_mean_W / pack->now.rest_V * cell->voltage_factor;
        weights += cell->capacity_Ah * cell->voltage_factor;
    }
    if (!(weights > 0.0))
        return UNKNOWN;
    by_charge_s = rate_h > 0.0
                      ? 3600.0 * (report->charge - ladder->reserve_charge) * weights / rate_h
                      : ENDLESS;
    by_left_s = report->left_s - ladder->reserve_left_s;
    return fmax(fmin(by_charge_s, by_left_s), 0.0);
}

static void sum_packs(const struct watch *watch, struct report *ret) {
    int64_t believed_us = -1;
    bool any = false;

    ret->power_W = ret->power_mean_W = ret->age_s = ret->full_s = UNKNOWN;
    for (size_t i = 0; i < watch->config.n_packs; i++) {
        const struct watch_pack *pack = &watch->pack[i];

        if (!pack->known)
            continue;
        ret->power_W = (any ? ret->power_W : 0.0) + pack->now.power_W;
        ret->power_mean_W = (any ? ret->power_mean_W : 0.0) + pack->now.power_mean_W;
        if (!isnan(pack->endurance.full_s))
            ret->full_s = fmax(isnan(ret->full_s) ? 0.0 : ret->full_s, ret->pack[i].full_s);
        if (pack->t_believed_us > believed_us)
            believed_us = pack->t_believed_us;
        any = true;
    }
    if (any)
        ret->age_s = span_s(believed_us, watch->t_boot_us);
}

static void note_spent(struct watch *watch) {
    const struct ladder_config *ladder = &watch->config.ladder;

    for (size_t i = 0; i < watch->config.n_packs; i++) {
        if (pack_cutoff(watch, i, 0.0, 0.0) != CAUSE_NONE)
            watch->pack[i].spent = true;
        else if (pack_cutoff(watch, i, ladder->margin_charge, ladder->margin_V) == CAUSE_NONE)
            watch->pack[i].spent = false;
    }
}

void report_fill(struct watch *watch, struct report *ret) {
    memset(ret, 0, sizeof(*ret));
    note_spent(watch);
    ret->t_boot_us = watch->t_boot_us;
    ret->stage = watch->ladder.stage;
    ret->stage_since_us = watch->ladder.stage_since_us;
    ret->cause = watch->ladder.cause;
    ret->cause_pack = watch->ladder.cause_pack;
    ret->blind = report_blind(watch);
    ret->supply = watch->supply;
    ret->supply_since_us = watch->supply_since_us;
    ret->flow = report_flow(watch);
    ret->alerts = alerts_of(watch);
    ret->charge = unit_charge(watch, 0.0);
    ret->charge_low = unit_charge(watch, -BAND_SPREADS);
    ret->charge_high = unit_charge(watch, BAND_SPREADS);
    ret->left_s = unit_left_s(watch, false);
    ret->left_least_s = unit_left_s(watch, true);
    ret->to_reserve_s = to_reserve_s(watch, ret);
    ret->grace_left_s = ladder_grace_left_s(&watch->ladder, watch->t_boot_us);
    ret->rail_V = watch->rail_V;
    ret->samples = watch->samples;
    ret->refused = watch->refused;
    ret->repeated = watch->repeated;
    ret->n_packs = watch->config.n_packs;
    for (size_t i = 0; i < ret->n_packs; i++)
        fill_pack(watch, i, &ret->pack[i]);
    sum_packs(watch, ret);
}
