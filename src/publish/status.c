/* The status object, in the order of brink-status(7), and the tables of its names. */
#include "publish/status.h"

#include "publish/jsonw.h"
#include "util/clock.h"

#include <math.h>

#define COUNT(array) (sizeof(array) / sizeof((array)[0]))

static const char *name_of(const char *const *names, size_t n, unsigned value) {
    return value < n ? names[value] : "unknown";
}

const char *status_stage_name(enum stage stage) {
    static const char *const names[] = {"ample", "reserve", "edge", "leaving"};
    return name_of(names, COUNT(names), stage);
}

const char *status_supply_name(enum supply supply) {
    static const char *const names[] = {"unknown", "pack", "adapter", "both"};
    return name_of(names, COUNT(names), supply);
}

const char *status_flow_name(enum flow flow) {
    static const char *const names[] = {"unknown", "charging", "discharging", "resting"};
    return name_of(names, COUNT(names), flow);
}

const char *status_cause_name(enum cause cause) {
    static const char *const names[] = {"none", "charge", "rest", "left", "keep", "floor", "blind"};
    return name_of(names, COUNT(names), cause);
}

const char *status_gauge_state_name(enum status_gauge_state state) {
    static const char *const names[] = {"absent", "open", "lost"};
    return name_of(names, COUNT(names), state);
}

const char *status_action_name(enum status_action action) {
    static const char *const names[] = {"report", "poweroff"};
    return name_of(names, COUNT(names), action);
}

const char *status_request_name(enum status_request request) {
    static const char *const names[] = {"none", "reported", "written", "failed"};
    return name_of(names, COUNT(names), request);
}

struct alert_words {
    unsigned bit;
    const char *name, *text;
};

static const struct alert_words alerts[] = {
    {ALERT_SILENT, "gauge-silent",
     "The gauge has told nothing believable for longer than [gauge] silent allows; Brink goes by "
     "its"
     " model. Check the gauge's power and cable, and that [gauge] device names it."},
    {ALERT_IMPOSSIBLE, "reading-impossible",
     "Readings lie outside what the pack's cells can have and are not used. Check the wiring, then "
     "voltage_scale, voltage_offset and series in the pack's section of brink.conf."},
    {ALERT_LOSING, "adapter-loses",
     "An adapter is plugged in, yet the pack still falls: the unit draws more than the adapter "
     "gives. Use a stronger adapter or a shorter cable, or shed load."},
    {ALERT_SPENT, "pack-spent",
     "A pack is at its cutoff and the others carry the unit. Charge or change it."},
    {ALERT_REPEATED, "reading-repeats",
     "The gauge tells the same reading again and again; repeats do not count as samples. Restart "
     "the gauge, and look at the program that feeds it."},
    {ALERT_OVERLOAD, "overload",
     "The packs that remain cannot carry the present load. Shed load, or charge the spent pack."},
    {ALERT_RESISTANCE, "resistance-high",
     "A pack's resistance is far above its table: bad contact, cold or age. Look at contacts and "
     "wires first; if it stays high in the warm, have the pack changed."},
    {ALERT_GUESS, "charge-uncertain",
     "The charge is hardly known yet: rely on its lower bound. It settles as the pack is used."},
    {STATUS_ALERT_STOP_FAILED, "stop-request-failed",
     "The stop is due but its request file could not be written, so the unit will not power off by "
     "itself. Power it off by hand now; then check [stop] request and the journal of brinkd."},
    {STATUS_ALERT_STATUS_UNWRITABLE, "status-unwritable",
     "The status file cannot be written, what stands there is old. Check room and rights of its "
     "directory ([files] status); the socket still tells the present status."},
    {STATUS_ALERT_STATE_UNWRITABLE, "state-unwritable",
     "The state file cannot be written: a restart would lose what was learned about the packs. "
     "Check room and rights of its directory ([files] state)."},
};

static const struct alert_words *alert_find(unsigned bit) {
    for (size_t i = 0; i < COUNT(alerts); i++)
        if (alerts[i].bit == bit)
            return &alerts[i];
    return NULL;
}

const char *status_alert_name(unsigned bit) {
    const struct alert_words *words = alert_find(bit);
    return words ? words->name : NULL;
}

const char *status_alert_text(unsigned bit) {
    const struct alert_words *words = alert_find(bit);
    return words ? words->text : NULL;
}

/* Decimals by quantity; part of the promise. */
static void put_share(struct jsonw *w, const char *key, double value) {
    jsonw_fixed(w, key, value, 4);
}

static void put_V_A_ohm(struct jsonw *w, const char *key, double value) {
    jsonw_fixed(w, key, value, 4);
}

static void put_watt(struct jsonw *w, const char *key, double value) {
    jsonw_fixed(w, key, value, 3);
}

static void put_duration(struct jsonw *w, const char *key, double seconds) {
    jsonw_fixed(w, key, seconds, 0);
}

static void put_boot_time(struct jsonw *w, const char *key, int64_t t_boot_us, int decimals) {
    jsonw_fixed(w, key, (double)t_boot_us / 1e6, decimals);
}

static void put_charge(struct jsonw *w, double charge, double low, double high) {
    put_share(w, "charge", charge);
    put_share(w, "charge_low", low);
    put_share(w, "charge_high", high);
}

static void put_left(struct jsonw *w, double left_s, double least_s) {
    put_duration(w, "left_s", left_s);
    put_duration(w, "left_least_s", least_s);
    jsonw_bool(w, "endless", isinf(left_s) && left_s > 0);
}

static void put_head(struct jsonw *w, const struct report *report,
                     const struct status_context *context) {
    char written[21];

    clock_rfc3339(context->t_real_us, written);
    jsonw_int(w, "brink", 1);
    jsonw_text(w, "unit", context->unit);
    jsonw_int(w, "pid", context->pid);
    put_boot_time(w, "t_boot_s", report->t_boot_us, 3);
    jsonw_text(w, "written", written);
}

static void put_unit(struct jsonw *w, const struct report *report,
                     const struct watch_config *config) {
    int pack = report->cause_pack;

    jsonw_text(w, "stage", status_stage_name(report->stage));
    put_boot_time(w, "stage_since_s", report->stage_since_us, 1);
    jsonw_text(w, "cause", status_cause_name(report->cause));
    jsonw_text(w, "cause_pack",
               pack >= 0 && (size_t)pack < config->n_packs ? config->pack[pack].name : NULL);
    jsonw_bool(w, "blind", report->blind);
    jsonw_text(w, "supply", status_supply_name(report->supply));
    put_boot_time(w, "supply_since_s", report->supply_since_us, 1);
    jsonw_text(w, "flow", status_flow_name(report->flow));
    put_charge(w, report->charge, report->charge_low, report->charge_high);
    put_left(w, report->left_s, report->left_least_s);
    put_duration(w, "to_reserve_s", report->to_reserve_s);
    put_duration(w, "full_s", report->full_s);
    put_duration(w, "grace_left_s", report->grace_left_s);
    put_watt(w, "power_W", report->power_W);
    put_watt(w, "power_mean_W", report->power_mean_W);
    put_V_A_ohm(w, "rail_V", report->rail_V);
    jsonw_fixed(w, "age_s", report->age_s, 1);
}

static void put_pack_limits(struct jsonw *w, const struct pack_report *pack,
                            const struct pack_config *config) {
    jsonw_text(w, "ends_by", status_cause_name(pack->ends_by));
    put_share(w, "cutoff_charge", config->cutoff_charge);
    put_V_A_ohm(w, "cutoff_rest_V", config->cutoff_rest_V);
    put_V_A_ohm(w, "floor_V", config->floor_V);
    put_V_A_ohm(w, "resistance_ohm", pack->resistance_ohm);
    jsonw_fixed(w, "resistance_scale", pack->resistance_scale, 3);
}

static void put_pack(struct jsonw *w, const struct pack_report *pack,
                     const struct pack_config *config) {
    jsonw_open(w, NULL, '{');
    jsonw_text(w, "name", config->name);
    jsonw_bool(w, "known", pack->known);
    jsonw_bool(w, "spent", pack->spent);
    jsonw_text(w, "cells", config->cell.table.name);
    jsonw_int(w, "series", config->cell.series);
    jsonw_fixed(w, "capacity_Ah", config->cell.capacity_Ah, 3);
    put_charge(w, pack->charge, pack->charge_low, pack->charge_high);
    put_V_A_ohm(w, "terminal_V", pack->terminal_V);
    put_V_A_ohm(w, "rest_V", pack->rest_V);
    put_V_A_ohm(w, "sag_V", pack->sag_V);
    put_V_A_ohm(w, "current_A", pack->current_A);
    jsonw_text(w, "current_from", pack->current_measured ? "gauge" : "model");
    put_watt(w, "power_W", pack->power_W);
    put_watt(w, "power_mean_W", pack->power_mean_W);
    jsonw_fixed(w, "temp_C", pack->temp_C, 1);
    jsonw_text(w, "temp_from", pack->temp_measured ? "gauge" : "assumed");
    put_left(w, pack->left_s, pack->left_least_s);
    put_duration(w, "full_s", pack->full_s);
    put_pack_limits(w, pack, config);
    jsonw_close(w, '}');
}

static void put_packs(struct jsonw *w, const struct report *report,
                      const struct watch_config *config) {
    jsonw_open(w, "packs", '[');
    for (size_t i = 0; i < report->n_packs && i < config->n_packs && i < PACKS_MAX; i++)
        put_pack(w, &report->pack[i], &config->pack[i]);
    jsonw_close(w, ']');
}

static void put_gauge(struct jsonw *w, const struct report *report,
                      const struct status_context *context) {
    const struct status_gauge *gauge = &context->gauge;

    jsonw_open(w, "gauge", '{');
    jsonw_text(w, "kind", gauge->kind);
    jsonw_text(w, "device", gauge->device);
    jsonw_text(w, "state", status_gauge_state_name(gauge->state));
    jsonw_count(w, "lines", gauge->lines);
    jsonw_count(w, "bad_lines", gauge->bad_lines);
    jsonw_count(w, "refused", report->refused);
    jsonw_count(w, "repeated", report->repeated);
    jsonw_fixed(w, "period_s", gauge->period_s, 1);
    jsonw_fixed(w, "silent_s", context->watch->silent_s, 1);
    jsonw_close(w, '}');
}

static void put_ladder(struct jsonw *w, const struct ladder_config *ladder) {
    jsonw_open(w, "ladder", '{');
    put_share(w, "reserve_charge", ladder->reserve_charge);
    put_duration(w, "reserve_left_s", ladder->reserve_left_s);
    put_duration(w, "keep_s", ladder->keep_s);
    put_duration(w, "grace_s", ladder->grace_s);
    jsonw_close(w, '}');
}

static void put_alerts(struct jsonw *w, unsigned set) {
    jsonw_open(w, "alerts", '[');
    for (size_t i = 0; i < COUNT(alerts); i++) {
        if (!(set & alerts[i].bit))
            continue;
        jsonw_open(w, NULL, '{');
        jsonw_text(w, "name", alerts[i].name);
        jsonw_text(w, "text", alerts[i].text);
        jsonw_close(w, '}');
    }
    jsonw_close(w, ']');
}

size_t status_render(const struct report *report, const struct status_context *context, char *buf,
                     size_t size) {
    struct jsonw w;

    jsonw_init(&w, buf, size);
    jsonw_open(&w, NULL, '{');
    put_head(&w, report, context);
    put_unit(&w, report, context->watch);
    put_packs(&w, report, context->watch);
    put_gauge(&w, report, context);
    put_ladder(&w, &context->watch->ladder);
    put_alerts(&w, report->alerts | context->alerts);
    jsonw_text(&w, "action", status_action_name(context->action));
    jsonw_text(&w, "request", status_request_name(context->request));
    jsonw_close(&w, '}');
    return jsonw_finish(&w);
}
