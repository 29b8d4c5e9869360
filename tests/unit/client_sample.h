/* A status as brink-status(7) has it, for the client's tests: heron on one pack. */
#pragma once

#include "client/view.h"

#include <jansson.h>
#include <stdio.h>
#include <stdlib.h>

static const char sample_text[] =
    "{\"brink\":1,\"unit\":\"heron\",\"pid\":812,\"t_boot_s\":22334.567,"
    "\"written\":\"2026-12-01T06:12:00Z\",\"stage\":\"ample\",\"stage_since_s\":21134.5,"
    "\"cause\":\"none\",\"cause_pack\":null,\"blind\":false,\"supply\":\"pack\","
    "\"supply_since_s\":21614.5,\"flow\":\"discharging\",\"charge\":0.634,\"charge_low\":0.601,"
    "\"charge_high\":0.662,\"left_s\":20400,\"left_least_s\":17700,\"endless\":false,"
    "\"to_reserve_s\":15000,\"full_s\":null,\"grace_left_s\":null,\"power_W\":3.1,"
    "\"power_mean_W\":3.08,\"rail_V\":4.97,\"age_s\":0.4,\"packs\":[{\"name\":\"main\","
    "\"known\":true,\"spent\":false,\"cells\":\"nca-18650\",\"series\":1,\"capacity_Ah\":5.8,"
    "\"charge\":0.634,\"charge_low\":0.601,\"charge_high\":0.662,\"terminal_V\":3.712,"
    "\"rest_V\":3.793,\"sag_V\":0.081,\"current_A\":0.84,\"current_from\":\"model\","
    "\"power_W\":3.1,\"power_mean_W\":3.05,\"temp_C\":11.0,\"temp_from\":\"gauge\","
    "\"left_s\":20400,\"left_least_s\":17700,\"endless\":false,\"full_s\":null,"
    "\"ends_by\":\"charge\",\"cutoff_charge\":0.08,\"cutoff_rest_V\":3.30,\"floor_V\":3.00,"
    "\"resistance_ohm\":0.096,\"resistance_scale\":1.07}],\"gauge\":{\"kind\":\"serial\","
    "\"device\":\"usb:1209:0001\",\"state\":\"open\",\"lines\":29114,\"bad_lines\":3,"
    "\"refused\":0,\"repeated\":0,\"period_s\":1.0,\"silent_s\":30.0},\"ladder\":{"
    "\"reserve_charge\":0.25,\"reserve_left_s\":3600,\"keep_s\":120,\"grace_s\":60},"
    "\"alerts\":[],\"action\":\"report\",\"request\":\"none\"}";

static inline json_t *sample_json(void) {
    json_error_t error;
    json_t *json = json_loads(sample_text, 0, &error);

    if (!json) {
        fprintf(stderr, "sample: %s\n", error.text);
        abort();
    }
    return json;
}

static inline json_t *sample_pack(json_t *status, size_t i) {
    return json_array_get(json_object_get(status, "packs"), i);
}

/* Frees json. */
static inline struct view sample_view(json_t *json) {
    struct trouble trouble = {0};
    struct view view;

    if (view_read(json, "sample", false, &view, &trouble) != 0) {
        fprintf(stderr, "sample: %s\n", trouble.text);
        abort();
    }
    json_decref(json);
    return view;
}
