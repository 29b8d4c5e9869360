/* brink.conf(5) as the daemon understands it: read, checked, written back.
 *
 * One static table (config.c) of section, key, type, unit, range, default and help is all there is
 * to know of a key; reading, messages, `brinkd --effective` and the checks of the manual page come
 * from it. Every problem of a file is listed, not only the first.
 */
#pragma once

#include "core/watch.h"
#include "gauge/channel.h"
#include "gauge/gauge.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdio.h>

enum { CONFIG_NAME_MAX = 32, CONFIG_PATH_MAX = 256, CONFIG_PROBLEMS_SIZE = 16384 };

enum config_clock { CONFIG_CLOCK_BOOT, CONFIG_CLOCK_GAUGE };
enum config_action { CONFIG_ACTION_REPORT, CONFIG_ACTION_POWEROFF };

enum config_error { CONFIG_E_REFUSED = 1 };

struct config_unit {
    char name[CONFIG_NAME_MAX];
    struct channel rail, adapter;
    double adapter_above;
    double rail_adapter_V; /* UNKNOWN = not used */
    double typical_W;      /* of the whole unit */
    double assumed_temp_C;
};

struct config_gauge {
    int kind; /* enum gauge_kind */
    char device[GAUGE_DEVICE_MAX];
    int baud;
    double period_s, silent_s;
    int clock; /* enum config_clock */
    bool tell, reset_on_open;
};

struct config_pack {
    char name[NAME_LEN];
    char cells[CONFIG_PATH_MAX]; /* as written: a name or a path */
    int series;
    double capacity_Ah; /* of the whole pack */
    struct pack_channels channels;
    double wiring_ohm;
    double carries_W; /* ENDLESS = not limited */
    double cutoff_charge;
    double cutoff_rest_V, floor_V; /* a cell */
    bool accept_damage;
    struct cell_table table;
};

struct config_stop {
    int action; /* enum config_action */
    char request[CONFIG_PATH_MAX];
};

struct config_files {
    char status[CONFIG_PATH_MAX], socket[CONFIG_PATH_MAX], state[CONFIG_PATH_MAX];
    char cells[CONFIG_PATH_MAX]; /* folders, colon between */
};

struct config {
    struct config_unit unit;
    struct config_gauge gauge;
    struct ladder_config ladder;
    struct config_stop stop;
    struct config_files files;
    size_t n_packs;
    struct config_pack pack[PACKS_MAX];
};

/* Problems found, one a line: "file:line: what is wrong; what is accepted". Those that no longer
 * fit are counted only. */
struct config_problems {
    size_t n;
    size_t length;
    char text[CONFIG_PROBLEMS_SIZE];
};

/* Reads and checks path, cell tables included. Returns 0; CONFIG_E_REFUSED or -errno (file not
 * readable, no memory) with the problems in words; ret is not touched then. */
int config_load(const char *path, struct config *ret, struct config_problems *ret_problems);

/* The same for a text; name stands for the file in messages. */
int config_parse(const char *text, size_t length, const char *name, struct config *ret,
                 struct config_problems *ret_problems);

/* Writes the config as understood: every key with its value in the first unit of its kind, what it
 * means and, for packs, what a cell's figure is for the pack. The text is a config file again that
 * reads back as the same config. */
void config_print(const struct config *config, FILE *out);

/* One key's line in the table, for the checks of the manual page; NULL from the last on.
 * fallback: the default as text, "" = the key may be left out, NULL = required. */
struct config_key_text {
    const char *section, *key, *fallback;
};
bool config_key(size_t i, struct config_key_text *ret);

/* What the core, the gauge and the channels want to know of it. */
void config_watch(const struct config *config, struct watch_config *ret);
void config_gauge(const struct config *config, struct gauge_config *ret);
void config_channels(const struct config *config, struct channel_map *ret);
