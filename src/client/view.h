/* The status object of brink-status(7) as the client's screens use it. All text in it is clean (see
 * words_clean), all numbers are finite or NaN = not known; INFINITY in left_s = no end in sight. */
#pragma once

#include "client/trouble.h"

#include <jansson.h>
#include <stdbool.h>
#include <stddef.h>

enum { VIEW_PACKS = 4, VIEW_ALERTS = 16, VIEW_NAME = 64, VIEW_PATH = 128, VIEW_TEXT = 256 };

struct view_pack {
    char name[VIEW_NAME], cells[VIEW_NAME], current_from[VIEW_NAME], temp_from[VIEW_NAME],
        ends_by[VIEW_NAME];
    bool known, spent, endless;
    double series, capacity_Ah;
    double charge, charge_low, charge_high; /* 0..1 */
    double terminal_V, rest_V, sag_V, current_A, power_W, power_mean_W, temp_C;
    double left_s, left_least_s, full_s;
    double cutoff_charge, cutoff_rest_V, floor_V;
    double resistance_ohm, resistance_scale;
};

struct view_gauge {
    char kind[VIEW_NAME], device[VIEW_PATH], state[VIEW_NAME];
    double lines, bad_lines, refused, repeated, period_s, silent_s;
};

struct view_ladder {
    double reserve_charge, reserve_left_s, keep_s, grace_s;
};

struct view_alert {
    char name[VIEW_NAME], text[VIEW_TEXT];
};

struct view {
    char unit[VIEW_NAME], written[VIEW_NAME], stage[VIEW_NAME], cause[VIEW_NAME],
        cause_pack[VIEW_NAME], supply[VIEW_NAME], flow[VIEW_NAME], action[VIEW_NAME],
        request[VIEW_NAME]; /* cause_pack "" = no single pack */
    bool blind, endless;
    double t_boot_s, stage_since_s, supply_since_s; /* boot time */
    double charge, charge_low, charge_high, left_s, left_least_s, to_reserve_s, full_s;
    double grace_left_s, power_W, power_mean_W, rail_V, age_s;
    size_t n_packs;
    struct view_pack pack[VIEW_PACKS];
    struct view_gauge gauge;
    struct view_ladder ladder;
    size_t n_alerts; /* all of them; alert[] holds the first VIEW_ALERTS */
    struct view_alert alert[VIEW_ALERTS];
};

/* Parses text as JSON into ret, the caller's to json_decref. where names its source in messages.
 * Returns 0 or trouble's code (EX_DATAERR). */
int view_parse(const char *text, size_t length, const char *where, json_t **ret,
               struct trouble *trouble);

/* Reads the status object. ascii: see words_clean. A key that is absent or null is not known; one
 * of another type, or another version than 1, is refused. Returns 0 or trouble's code
 * (EX_DATAERR). */
int view_read(const json_t *status, const char *where, bool ascii, struct view *ret,
              struct trouble *trouble);
