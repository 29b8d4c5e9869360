/* Every key of brink.conf in one table, and how one value is read and written. A key that is not
 * here does not exist; what a key means stands nowhere else in the code. */
#include "daemon/keys.h"

#include "daemon/config.h"
#include "util/real.h"
#include "util/text.h"

#include <ctype.h>
#include <math.h>
#include <stddef.h>
#include <stdio.h>
#include <string.h>

static const char *const kinds[] = {"serial", "stream", NULL};
static const char *const clocks[] = {"boot", "gauge", NULL};
static const char *const actions[] = {"report", "poweroff", NULL};
static const char *const no_yes[] = {"no", "yes", NULL};

#define AT(type, member)               offsetof(struct type, member), sizeof(((struct type *)0)->member)
#define UNIT(member)                   AT(config, unit.member)
#define GAUGE(member)                  AT(config, gauge.member)
#define LADDER(member)                 AT(config, ladder.member)
#define PACK(member)                   AT(config_pack, member)
#define NUMBER(u, lo, hi)              KEY_NUMBER, u, lo, hi, NULL, 0, NULL
#define WORDED(u, lo, hi, word, value) KEY_NUMBER, u, lo, hi, word, value, NULL
#define WHOLE(u, lo, hi)               KEY_WHOLE, u, lo, hi, NULL, 0, NULL
#define CHOICE(list)                   KEY_CHOICE, UNIT_NONE, 0, 0, NULL, 0, list
#define YES                            KEY_YES, UNIT_NONE, 0, 0, NULL, 0, no_yes
#define STRING(type)                   type, UNIT_NONE, 0, 0, NULL, 0, NULL

/* clang-format off */
const struct key keys[] = {
    {"unit", "name", STRING(KEY_NAME), "", UNIT(name),
     "what this unit is called; the host name when left out", NULL},
    {"unit", "rail", STRING(KEY_TOKEN), "", UNIT(rail.token),
     "token of the rail's voltage", NULL},
    {"unit", "rail_scale", NUMBER(UNIT_NONE, -1e6, 1e6), "1", UNIT(rail.scale),
     "trim: rail = token * rail_scale + rail_offset", NULL},
    {"unit", "rail_offset", NUMBER(UNIT_VOLT, -100, 100), "0 V", UNIT(rail.offset),
     "trim, see rail_scale", NULL},
    {"unit", "rail_adapter", WORDED(UNIT_VOLT, 0.5, 100, "none", UNKNOWN), "none", UNIT(rail_adapter_V),
     "a rail at or above this means that the adapter is plugged in", NULL},
    {"unit", "adapter", STRING(KEY_TOKEN), "", UNIT(adapter.token),
     "token that tells whether an adapter is plugged in", NULL},
    {"unit", "adapter_above", NUMBER(UNIT_NONE, -1e6, 1e6), "0.5", UNIT(adapter_above),
     "plugged in when the adapter's token is above this", NULL},
    {"unit", "typical", NUMBER(UNIT_WATT, 0.001, 10000), "3 W", UNIT(typical_W),
     "usual load of the whole unit, until the real one is learned", NULL},
    {"unit", "assumed_temperature", NUMBER(UNIT_CELSIUS, -60, 90), "15 C", UNIT(assumed_temp_C),
     "of packs that have no temperature channel; take a cold day's", NULL},

    {"gauge", "kind", CHOICE(kinds), NULL, GAUGE(kind),
     "serial: a serial port; stream: a pseudo-terminal, FIFO or unix socket", NULL},
    {"gauge", "device", STRING(KEY_TEXT), NULL, GAUGE(device),
     "usb:VID:PID[:SERIAL] or a path", NULL},
    {"gauge", "baud", WHOLE(UNIT_BAUD, 50, 4000000), "115200 baud", GAUGE(baud),
     "speed of a serial port, 8N1", NULL},
    {"gauge", "period", NUMBER(UNIT_SECOND, 0.01, 3600), "1 s", GAUGE(period_s),
     "how often the gauge sends a line", NULL},
    {"gauge", "silent", NUMBER(UNIT_SECOND, 0.1, 86400), "30 s", GAUGE(silent_s),
     "without a believable line for this long the unit is blind; at least 3 periods", NULL},
    {"gauge", "clock", CHOICE(clocks), "boot", GAUGE(clock),
     "boot: a line's time is when it came; gauge: its token t, in seconds", NULL},
    {"gauge", "tell", YES, "no", GAUGE(tell),
     "write stage and charge back to the gauge at each change", NULL},
    {"gauge", "reset_on_open", YES, "no", GAUGE(reset_on_open),
     "pulse DTR of a serial port, which restarts many boards", NULL},

    {"pack", "cells", STRING(KEY_TEXT), NULL, PACK(cells),
     "cell table: a name in the folders of [files] cells, or a path", NULL},
    {"pack", "series", WHOLE(UNIT_NONE, 1, 32), "1", PACK(series),
     "cells in series", NULL},
    {"pack", "capacity", NUMBER(UNIT_AMPERE_HOUR, 0.01, 10000), NULL, PACK(capacity_Ah),
     "of the whole pack: of one cell times the cells in parallel", NULL},
    {"pack", "voltage", STRING(KEY_TOKEN), NULL, PACK(channels.voltage.token),
     "token of the terminal voltage of the whole pack", NULL},
    {"pack", "voltage_scale", NUMBER(UNIT_NONE, -1e6, 1e6), "1", PACK(channels.voltage.scale),
     "trim: voltage = token * voltage_scale + voltage_offset", NULL},
    {"pack", "voltage_offset", NUMBER(UNIT_VOLT, -100, 100), "0 V", PACK(channels.voltage.offset),
     "trim, see voltage_scale", NULL},
    {"pack", "current", STRING(KEY_TOKEN), "", PACK(channels.current.token),
     "token of the current, positive when discharging", NULL},
    {"pack", "current_scale", NUMBER(UNIT_NONE, -1e6, 1e6), "1", PACK(channels.current.scale),
     "trim; -1 for a gauge that counts charging as positive", NULL},
    {"pack", "current_offset", NUMBER(UNIT_AMPERE, -1000, 1000), "0 A",
     PACK(channels.current.offset), "trim, see current_scale", NULL},
    {"pack", "temperature", STRING(KEY_TOKEN), "", PACK(channels.temperature.token),
     "token of the cells' temperature", NULL},
    {"pack", "temperature_scale", NUMBER(UNIT_NONE, -1e6, 1e6), "1",
     PACK(channels.temperature.scale), "trim: C = token * temperature_scale + temperature_offset",
     NULL},
    {"pack", "temperature_offset", NUMBER(UNIT_CELSIUS, -500, 500), "0 C",
     PACK(channels.temperature.offset), "trim, see temperature_scale", NULL},
    {"pack", "wiring", NUMBER(UNIT_OHM, 0, 5), "0 ohm", PACK(wiring_ohm),
     "resistance of leads and switch between the gauge's taps and the cells", NULL},
    {"pack", "carries", WORDED(UNIT_WATT, 0.01, 10000, "unlimited", ENDLESS), "unlimited",
     PACK(carries_W), "most that this pack's converter can give", NULL},
    {"pack", "cutoff_charge", NUMBER(UNIT_SHARE, 0, 0.95), "8 %", PACK(cutoff_charge),
     "at or under this charge the pack is spent", NULL},
    {"pack", "cutoff_rest", NUMBER(UNIT_VOLT, 0.1, 200), "3.3 V", PACK(cutoff_rest_V),
     "at or under this voltage at rest, of one cell, the pack is spent", NULL},
    {"pack", "floor", NUMBER(UNIT_VOLT, 0.1, 200), "3 V", PACK(floor_V),
     "under this terminal voltage, of one cell, the unit goes at once", NULL},
    {"pack", "accept_damage", YES, "no", PACK(accept_damage),
     "yes lets cutoff_rest and floor lie under what the cells bear", NULL},

    {"ladder", "reserve_charge", NUMBER(UNIT_SHARE, 0, 0.99), "25 %", LADDER(reserve_charge),
     "stage reserve at or under this charge", NULL},
    {"ladder", "reserve_left", NUMBER(UNIT_SECOND, 0, 30 * 86400.0), "1 h", LADDER(reserve_left_s),
     "stage reserve with less time left than this; 0 s = not used", NULL},
    {"ladder", "keep", NUMBER(UNIT_SECOND, 0, 86400), "2 min", LADDER(keep_s),
     "run time kept back for a clean stop", NULL},
    {"ladder", "confirm", NUMBER(UNIT_SECOND, 1, 3600), "30 s", LADDER(confirm_s),
     "how long a condition must hold before it counts",
     "with less, one burst of the load could move the stage"},
    {"ladder", "floor_confirm", NUMBER(UNIT_SECOND, 0.1, 600), "3 s", LADDER(floor_confirm_s),
     "how long the voltage must stay under the floor", NULL},
    {"ladder", "floor_samples", WHOLE(UNIT_NONE, 3, 1000), "3", LADDER(floor_samples),
     "how many different samples must lie under the floor",
     "one or two low samples are a burst of the load, not an empty pack"},
    {"ladder", "grace", NUMBER(UNIT_SECOND, 0, 86400), "60 s", LADDER(grace_s),
     "how long stage edge lasts before the stop is ordered", NULL},
    {"ladder", "margin_charge", NUMBER(UNIT_SHARE, 0, 0.5), "3 %", LADDER(margin_charge),
     "above a limit by this before the stage rises again", NULL},
    {"ladder", "margin_left", NUMBER(UNIT_SHARE, 0, 10), "20 %", LADDER(margin_left),
     "the same for time left, as a share of it", NULL},
    {"ladder", "margin_rest", NUMBER(UNIT_VOLT, 0, 1), "0.05 V", LADDER(margin_V),
     "the same for voltages of one cell", NULL},

    {"stop", "action", CHOICE(actions), "report", AT(config, stop.action),
     "report: only say that the unit should stop; poweroff: order it", NULL},
    {"stop", "request", STRING(KEY_PATH), "/run/brink/stop-request", AT(config, stop.request),
     "file that brink-poweroff.path watches", NULL},

    {"files", "status", STRING(KEY_PATH), "/run/brink/status.json", AT(config, files.status),
     "the newest report, for everyone", NULL},
    {"files", "socket", STRING(KEY_PATH), "/run/brink.socket", AT(config, files.socket),
     "where clients ask, when systemd hands over no socket", NULL},
    {"files", "state", STRING(KEY_PATH), "/var/lib/brink/state.json", AT(config, files.state),
     "what was learned, kept over restarts", NULL},
    {"files", "cells", STRING(KEY_TEXT), "/usr/local/share/brink/cells:/usr/share/brink/cells",
     AT(config, files.cells), "folders of cell tables, a colon between", NULL},
};
/* clang-format on */
const size_t n_keys = sizeof(keys) / sizeof(keys[0]);
_Static_assert(sizeof(keys) / sizeof(keys[0]) <= KEYS_MAX, "KEYS_MAX is too small");

const struct key *key_find(const char *section, const char *name) {
    for (size_t i = 0; i < n_keys; i++)
        if (strcmp(keys[i].section, section) == 0 && strcmp(keys[i].name, name) == 0)
            return &keys[i];
    return NULL;
}

/* What a right value looks like: the default, or a usual one of that unit. */
static const char *example(const struct key *key) {
    static const char *const usual[UNIT_COUNT_] = {
        [UNIT_NONE] = "1",         [UNIT_VOLT] = "3.3 V",      [UNIT_AMPERE] = "0.8 A",
        [UNIT_WATT] = "5 W",       [UNIT_OHM] = "20 mohm",     [UNIT_AMPERE_HOUR] = "5.8 Ah",
        [UNIT_SECOND] = "1 s",     [UNIT_SHARE] = "8 %",       [UNIT_CELSIUS] = "15 C",
        [UNIT_BAUD] = "9600 baud", [UNIT_J_MOL] = "20 kJ/mol",
    };

    return key->fallback && isdigit((unsigned char)key->fallback[0]) ? key->fallback
                                                                     : usual[key->unit];
}

static void choices_text(const struct key *key, char *buf, size_t size) {
    size_t length = 0;

    buf[0] = '\0';
    for (size_t i = 0; key->choices[i]; i++)
        text_append(buf, size, &length, "%s%s", i == 0 ? "" : " or ", key->choices[i]);
}

char *key_accepted(const struct key *key, char *buf, size_t size) {
    static const char *const words[] = {
        [KEY_NAME] = "up to 31 letters, digits, _ - or .",
        [KEY_TOKEN] = "a token's name: a letter, then up to 14 letters, digits, _ - or . (t is the "
                      "gauge's clock)",
        [KEY_PATH] = "an absolute path",
        [KEY_TEXT] = "text",
    };
    char least[48], most[48];

    switch (key->type) {
    case KEY_NUMBER:
    case KEY_WHOLE:
        snprintf(buf, size, "%s to %s%s%s",
                 units_format(key->least, key->unit, least, sizeof(least)),
                 units_format(key->most, key->unit, most, sizeof(most)), key->word ? ", or " : "",
                 key->word ? key->word : "");
        break;
    case KEY_CHOICE:
    case KEY_YES:
        choices_text(key, buf, size);
        break;
    default:
        snprintf(buf, size, "%s", words[key->type]);
    }
    return buf;
}

/* Percent typed for volts and the other way about is the costliest slip of all (a unit that halts
 * at "60"), so it gets words of its own. */
static bool crossed_units(const struct key *key, const char *text, char *buf, size_t size) {
    double value;

    if (key->unit == UNIT_VOLT && units_parse(text, UNIT_SHARE, &value) == 0) {
        snprintf(buf, size,
                 "%s = %s is a share, but %s is a voltage; accepted is V or mV, such as %s = %s "
                 "(a limit in percent is cutoff_charge)",
                 key->name, text, key->name, key->name, example(key));
        return true;
    }
    if (key->unit == UNIT_SHARE && units_parse(text, UNIT_VOLT, &value) == 0) {
        snprintf(buf, size,
                 "%s = %s is a voltage, but %s is a share; accepted is %%, such as %s = %s "
                 "(a limit in volts is cutoff_rest)",
                 key->name, text, key->name, key->name, example(key));
        return true;
    }
    return false;
}

static void number_problem(const struct key *key, const char *text, int error, char *buf,
                           size_t size) {
    const char *what = error == UNITS_E_MISSING ? "has no unit"
                       : error == UNITS_E_UNIT  ? "has a unit that does not belong there"
                       : strchr(text, ',')      ? "is no number: decimals stand behind a point"
                                                : "is no number";

    if (crossed_units(key, text, buf, size))
        return;
    snprintf(buf, size, "%s = %s %s; accepted is %s%s, such as %s = %s%s%s", key->name, text, what,
             key->unit == UNIT_NONE ? "" : "a number in ", units_accepted(key->unit), key->name,
             example(key), key->word ? ", or the word " : "", key->word ? key->word : "");
}

static void range_problem(const struct key *key, const char *text, char *buf, size_t size) {
    char accepted[128];

    snprintf(buf, size, "%s = %s is out of range; accepted is %s%s%s", key->name, text,
             key_accepted(key, accepted, sizeof(accepted)), key->why ? ": " : "",
             key->why ? key->why : "");
}

static bool is_scale(const struct key *key) {
    size_t n = strlen(key->name);

    return n > 6 && strcmp(key->name + n - 6, "_scale") == 0;
}

static bool read_number(const struct key *key, const char *text, void *at, char *problem,
                        size_t size) {
    double value;

    if (key->word && strcmp(text, key->word) == 0) {
        memcpy(at, &key->word_value, sizeof(value));
        return true;
    }
    int r = units_parse(text, key->unit, &value);
    if (r != 0) {
        number_problem(key, text, r, problem, size);
        return false;
    }
    if (!(value >= key->least && value <= key->most)) {
        range_problem(key, text, problem, size);
        return false;
    }
    if (is_scale(key) && value == 0) {
        snprintf(problem, size,
                 "%s = %s would turn every reading into the offset; accepted is any "
                 "other number",
                 key->name, text);
        return false;
    }
    if (key->type == KEY_NUMBER) {
        memcpy(at, &value, sizeof(value));
        return true;
    }
    int whole = (int)value;
    if ((double)whole != value) {
        snprintf(problem, size,
                 "%s = %s is no whole number; accepted is a whole number, such as %s", key->name,
                 text, example(key));
        return false;
    }
    memcpy(at, &whole, sizeof(whole));
    return true;
}

static bool read_choice(const struct key *key, const char *text, void *at, char *problem,
                        size_t size) {
    char accepted[96];

    for (int i = 0; key->choices[i]; i++) {
        if (strcmp(text, key->choices[i]) != 0)
            continue;
        if (key->type == KEY_YES)
            *(bool *)at = i == 1;
        else
            memcpy(at, &i, sizeof(i));
        return true;
    }
    snprintf(problem, size, "%s = %s is not known; accepted is %s", key->name, text,
             key_accepted(key, accepted, sizeof(accepted)));
    return false;
}

static bool name_valid(const char *text) {
    static const char allowed[] =
        "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_-.";

    return text[0] && text[strspn(text, allowed)] == '\0';
}

static bool string_valid(const struct key *key, const char *text) {
    switch (key->type) {
    case KEY_NAME:
        return name_valid(text);
    case KEY_TOKEN:
        return channel_token_valid(text) && strcmp(text, "t") != 0;
    case KEY_PATH:
        return text[0] == '/' && text[strlen(text) - 1] != '/';
    default:
        return text[0] != '\0';
    }
}

static bool read_string(const struct key *key, const char *text, char *at, char *problem,
                        size_t size) {
    char accepted[160];

    if (strlen(text) >= key->size) {
        snprintf(problem, size, "%s is too long; accepted are %zu bytes", key->name, key->size - 1);
        return false;
    }
    if (!string_valid(key, text)) {
        snprintf(problem, size, "%s = %s is not good; accepted is %s", key->name, text,
                 key_accepted(key, accepted, sizeof(accepted)));
        return false;
    }
    memcpy(at, text, strlen(text) + 1);
    return true;
}

bool key_read(const struct key *key, const char *text, void *base, char *ret_problem, size_t size) {
    char *at = (char *)base + key->offset;

    switch (key->type) {
    case KEY_NUMBER:
    case KEY_WHOLE:
        return read_number(key, text, at, ret_problem, size);
    case KEY_CHOICE:
    case KEY_YES:
        return read_choice(key, text, at, ret_problem, size);
    default:
        return read_string(key, text, at, ret_problem, size);
    }
}

static bool is_word(const struct key *key, double value) {
    return key->word && (isnan(key->word_value) ? isnan(value) : value == key->word_value);
}

char *key_write(const struct key *key, const void *base, char *buf, size_t size) {
    const char *at = (const char *)base + key->offset;
    double number = 0;
    int whole = 0;

    switch (key->type) {
    case KEY_NUMBER:
        memcpy(&number, at, sizeof(number));
        if (is_word(key, number))
            snprintf(buf, size, "%s", key->word);
        else
            units_format(number, key->unit, buf, size);
        break;
    case KEY_WHOLE:
        memcpy(&whole, at, sizeof(whole));
        units_format(whole, key->unit, buf, size);
        break;
    case KEY_CHOICE:
        memcpy(&whole, at, sizeof(whole));
        snprintf(buf, size, "%s", key->choices[whole]);
        break;
    case KEY_YES:
        snprintf(buf, size, "%s", key->choices[*(const bool *)at ? 1 : 0]);
        break;
    default:
        snprintf(buf, size, "%s", at);
    }
    return buf;
}
