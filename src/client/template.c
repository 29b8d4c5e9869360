/* FORMAT: one table of names, walked by the check, the writing and the help. */
#include "client/template.h"

#include "client/words.h"
#include "util/text.h"

#include <math.h>
#include <string.h>
#include <sysexits.h>

const char template_default[] = "{unit}: {standing}, charge {charge}, left {left}, least {least}";

/* How a value is written. */
enum shape {
    SHAPE_TEXT,     /* as it is */
    SHAPE_FLAG,     /* the name itself, or "-" */
    SHAPE_SHARE,    /* 63 % */
    SHAPE_PERCENT,  /* 63.4 */
    SHAPE_DURATION, /* 5 h 40 */
    SHAPE_AGE,      /* 0.4 s */
    SHAPE_SECONDS,  /* 20400 */
    SHAPE_TENTHS,   /* 0.4 */
    SHAPE_VOLT,     /* 3.71 V */
    SHAPE_SAG,      /* 81 mV */
    SHAPE_AMPERE,   /* 0.84 A */
    SHAPE_WATT,     /* 3.1 W */
    SHAPE_CELSIUS,  /* 11 C */
    SHAPE_OHM,      /* 96 mohm */
    SHAPE_BARE,     /* 3.712 */
    SHAPE_COUNT,    /* 29114 */
    SHAPE_STANDING, /* the rest is worked out, see special() */
    SHAPE_HELD,
    SHAPE_HELD_S,
    SHAPE_ALERTS,
    SHAPE_ALERT,
};

struct name {
    const char *name;
    enum shape shape;
    bool of_pack;
    size_t offset;
    const char *help; /* NULL: the bare number of the one before */
};

#define UNIT(name, shape, key, help)                                                               \
    { name, SHAPE_##shape, false, offsetof(struct view, key), help }
#define PACK(name, shape, key, help)                                                               \
    { name, SHAPE_##shape, true, offsetof(struct view_pack, key), help }

static const struct name names[] = {
    UNIT("unit", TEXT, unit, "name of the unit"),
    UNIT("stage", TEXT, stage, "ample, reserve, edge or leaving"),
    UNIT("standing", STANDING, stage, "the stage, and whether blind or charging"),
    UNIT("held", HELD, stage_since_s, "how long the stage holds"),
    UNIT("held_s", HELD_S, stage_since_s, NULL),
    UNIT("cause", TEXT, cause, "which rule holds the stage"),
    UNIT("blind", FLAG, blind, "\"blind\" while the gauge is not to be believed"),
    UNIT("supply", TEXT, supply, "pack, adapter, both or unknown"),
    UNIT("flow", TEXT, flow, "charging, discharging, resting or unknown"),
    UNIT("charge", SHARE, charge, "charge over all packs"),
    UNIT("charge_pct", PERCENT, charge, NULL),
    UNIT("low", SHARE, charge_low, "its lower bound"),
    UNIT("low_pct", PERCENT, charge_low, NULL),
    UNIT("high", SHARE, charge_high, "its upper bound"),
    UNIT("high_pct", PERCENT, charge_high, NULL),
    UNIT("left", DURATION, left_s, "time left, as expected"),
    UNIT("left_s", SECONDS, left_s, NULL),
    UNIT("least", DURATION, left_least_s, "time left at least"),
    UNIT("least_s", SECONDS, left_least_s, NULL),
    UNIT("to_reserve", DURATION, to_reserve_s, "time to the stage reserve"),
    UNIT("to_reserve_s", SECONDS, to_reserve_s, NULL),
    UNIT("to_full", DURATION, full_s, "time to full while charging"),
    UNIT("to_full_s", SECONDS, full_s, NULL),
    UNIT("grace", DURATION, grace_left_s, "time until edge becomes leaving"),
    UNIT("grace_s", SECONDS, grace_left_s, NULL),
    UNIT("power", WATT, power_W, "load now"),
    UNIT("power_W", BARE, power_W, NULL),
    UNIT("mean", WATT, power_mean_W, "load as learned"),
    UNIT("mean_W", BARE, power_mean_W, NULL),
    UNIT("rail", VOLT, rail_V, "voltage of the rail"),
    UNIT("rail_V", BARE, rail_V, NULL),
    UNIT("age", AGE, age_s, "age of the last believable reading"),
    UNIT("age_s", TENTHS, age_s, NULL),
    UNIT("gauge", TEXT, gauge.state, "open, lost or absent"),
    UNIT("device", TEXT, gauge.device, "the gauge's device"),
    UNIT("lines", COUNT, gauge.lines, "lines from the gauge"),
    UNIT("bad_lines", COUNT, gauge.bad_lines, "of these not readable"),
    UNIT("alerts", ALERTS, n_alerts, "how many alerts"),
    UNIT("alert", ALERT, alert, "name of the first alert"),
    UNIT("action", TEXT, action, "report or poweroff"),
    UNIT("request", TEXT, request, "none, reported, written or failed"),
    UNIT("written", TEXT, written, "when the status was written, UTC"),
    PACK("pack", TEXT, name, "name of the pack"),
    PACK("cells", TEXT, cells, "its cell table"),
    PACK("terminal", VOLT, terminal_V, "voltage at its terminals"),
    PACK("terminal_V", BARE, terminal_V, NULL),
    PACK("rest", VOLT, rest_V, "voltage at rest, by the model"),
    PACK("rest_V", BARE, rest_V, NULL),
    PACK("sag", SAG, sag_V, "the difference"),
    PACK("sag_V", BARE, sag_V, NULL),
    PACK("current", AMPERE, current_A, "current; below zero it charges"),
    PACK("current_A", BARE, current_A, NULL),
    PACK("current_from", TEXT, current_from, "gauge or model"),
    PACK("temp", CELSIUS, temp_C, "temperature"),
    PACK("temp_C", BARE, temp_C, NULL),
    PACK("temp_from", TEXT, temp_from, "gauge or assumed"),
    PACK("ends_by", TEXT, ends_by, "which cutoff comes first"),
    PACK("spent", FLAG, spent, "\"spent\" at its cutoff"),
    PACK("resistance", OHM, resistance_ohm, "internal resistance now"),
    PACK("resistance_ohm", BARE, resistance_ohm, NULL),
};
enum { NAMES = sizeof(names) / sizeof(names[0]) };

/* Names of the unit that a pack has too, behind PACK. only. */
static const struct name pack_names[] = {
    PACK("charge", SHARE, charge, ""),         PACK("charge_pct", PERCENT, charge, ""),
    PACK("low", SHARE, charge_low, ""),        PACK("low_pct", PERCENT, charge_low, ""),
    PACK("high", SHARE, charge_high, ""),      PACK("high_pct", PERCENT, charge_high, ""),
    PACK("left", DURATION, left_s, ""),        PACK("left_s", SECONDS, left_s, ""),
    PACK("least", DURATION, left_least_s, ""), PACK("least_s", SECONDS, left_least_s, ""),
    PACK("to_full", DURATION, full_s, ""),     PACK("to_full_s", SECONDS, full_s, ""),
    PACK("power", WATT, power_W, ""),          PACK("power_W", BARE, power_W, ""),
    PACK("mean", WATT, power_mean_W, ""),      PACK("mean_W", BARE, power_mean_W, ""),
};
enum { PACK_NAMES = sizeof(pack_names) / sizeof(pack_names[0]), WORD = 96 };

/* What stands between two braces. */
struct placeholder {
    const struct name *name;
    char pack[VIEW_NAME]; /* "" = not told */
};

struct line {
    char *s;
    size_t n;
    bool full;
};

static void put(struct line *line, const char *text, size_t n) {
    if (!text_append(line->s, TEMPLATE_SIZE - 1, &line->n, "%.*s", (int)n, text))
        line->full = true;
}

static const struct name *find(const struct name *table, int n, const char *word) {
    for (int i = 0; i < n; i++)
        if (strcmp(table[i].name, word) == 0)
            return &table[i];
    return NULL;
}

static int unknown(const char *word, struct trouble *trouble) {
    const char *list[NAMES];
    char clean[WORD], all[1024];
    size_t n = 0;

    for (int i = 0; i < NAMES; i++) {
        list[i] = names[i].name;
        text_append(all, sizeof(all), &n, " %s", names[i].name);
    }
    const char *near = text_nearest(word, list, NAMES);
    words_clean(word, strlen(word), false, clean, sizeof(clean));
    return trouble_set(trouble, EX_USAGE, "FORMAT: nothing is called {%s}%s%s%s; the names are%s",
                       clean, near ? "; did you mean {" : "", near ? near : "", near ? "}" : "",
                       all);
}

/* word is "name" or "pack.name"; a pack's name may hold full stops itself. */
static int resolve(const char *word, struct placeholder *ret, struct trouble *trouble) {
    const char *stop = strrchr(word, '.');

    *ret = (struct placeholder){0};
    if (!stop) {
        ret->name = find(names, NAMES, word);
        return ret->name ? 0 : unknown(word, trouble);
    }
    words_clean(word, (size_t)(stop - word), false, ret->pack, sizeof(ret->pack));
    ret->name = find(pack_names, PACK_NAMES, stop + 1);
    if (!ret->name)
        ret->name = find(names, NAMES, stop + 1);
    if (!ret->name)
        return unknown(stop + 1, trouble);
    if (!ret->name->of_pack)
        return trouble_set(trouble, EX_USAGE,
                           "FORMAT: {%s} belongs to the unit, not to a pack: write {%s}",
                           ret->name->name, ret->name->name);
    return 0;
}

/* The placeholder at *at, which is behind its brace; *at moves behind the closing one. */
static int next_placeholder(const char *format, const char **at, struct placeholder *ret,
                            struct trouble *trouble) {
    char word[WORD];
    size_t n = strcspn(*at, "{}");

    if ((*at)[n] != '}')
        return trouble_set(trouble, EX_USAGE,
                           "FORMAT: the brace at character %zu is not closed; write {{ for a brace "
                           "that is to be printed",
                           (size_t)(*at - format));
    if (n >= sizeof(word))
        n = sizeof(word) - 1; /* no name is that long: told as unknown */
    memcpy(word, *at, n);
    word[n] = '\0';
    *at += strcspn(*at, "}") + 1;
    return resolve(word, ret, trouble);
}

static bool special(const struct name *name, const struct view *v, char *buf, size_t size) {
    size_t n = 0;
    double held_s = v->t_boot_s - v->stage_since_s;

    switch (name->shape) {
    case SHAPE_STANDING:
        text_append(buf, size, &n, "%s%s%s", v->stage, v->blind ? ", blind" : "",
                    strcmp(v->flow, "charging") == 0 ? ", charging" : "");
        return true;
    case SHAPE_HELD:
        if (!isnan(held_s))
            words_span(held_s, buf, size);
        return true;
    case SHAPE_HELD_S:
        if (!isnan(held_s))
            text_append(buf, size, &n, "%.0f", held_s);
        return true;
    case SHAPE_ALERTS:
        text_append(buf, size, &n, "%zu", v->n_alerts);
        return true;
    case SHAPE_ALERT:
        if (v->n_alerts > 0)
            text_append(buf, size, &n, "%s", v->alert[0].name);
        return true;
    default:
        return false;
    }
}

static void number(enum shape shape, double value, char *buf, size_t size) {
    size_t n = 0;

    switch (shape) {
    case SHAPE_SHARE:
        words_share(value, buf, size);
        break;
    case SHAPE_DURATION:
        words_span(value, buf, size);
        break;
    case SHAPE_AGE:
        words_age(value, buf, size);
        break;
    case SHAPE_VOLT:
        words_value(value, "V", 2, 0, buf, size);
        break;
    case SHAPE_SAG:
        words_value(value, "V", 2, 1, buf, size);
        break;
    case SHAPE_AMPERE:
        words_value(value, "A", 2, 0.1, buf, size);
        break;
    case SHAPE_WATT:
        words_value(value, "W", 1, 1, buf, size);
        break;
    case SHAPE_CELSIUS:
        words_value(value, "C", 0, 0, buf, size);
        break;
    case SHAPE_OHM:
        words_value(value, "ohm", 2, 1, buf, size);
        break;
    default: /* bare */
        if (isfinite(value))
            text_append(buf, size, &n, "%.*f",
                        shape == SHAPE_BARE                               ? 3
                        : shape == SHAPE_PERCENT || shape == SHAPE_TENTHS ? 1
                                                                          : 0,
                        shape == SHAPE_PERCENT ? value * 100 : value);
    }
}

static void value(const struct name *name, const struct view *v, const struct view_pack *pack,
                  char *buf, size_t size) {
    const char *base = name->of_pack ? (const char *)pack : (const char *)v;
    size_t n = 0;

    *buf = '\0';
    if (!base || special(name, v, buf, size))
        return;
    const void *at = base + name->offset;
    if (name->shape == SHAPE_TEXT)
        text_append(buf, size, &n, "%s", (const char *)at);
    else if (name->shape == SHAPE_FLAG)
        text_append(buf, size, &n, "%s", *(const bool *)at ? name->name : "");
    else if (!isnan(*(const double *)at))
        number(name->shape, *(const double *)at, buf, size);
}

static int find_pack(const char *name, const struct view *v, const struct view_pack **ret,
                     struct trouble *trouble) {
    char all[VIEW_PACKS * VIEW_NAME] = "";
    size_t n = 0;

    *ret = v->n_packs ? &v->pack[0] : NULL;
    if (!*name)
        return 0;
    for (size_t i = 0; i < v->n_packs; i++) {
        if (strcmp(v->pack[i].name, name) == 0) {
            *ret = &v->pack[i];
            return 0;
        }
        text_append(all, sizeof(all), &n, " %s", v->pack[i].name);
    }
    return trouble_set(trouble, EX_USAGE, "FORMAT: no pack is called '%s'; the packs are%s", name,
                       n ? all : " none");
}

static int put_placeholder(const struct placeholder *p, const struct view *v, struct line *line,
                           struct trouble *trouble) {
    const struct view_pack *pack = NULL;
    char text[VIEW_TEXT];
    int code = find_pack(p->pack, v, &pack, trouble);

    if (code)
        return code;
    value(p->name, v, pack, text, sizeof(text));
    put(line, *text ? text : "-", *text ? strlen(text) : 1);
    return 0;
}

/* line NULL: check only. */
static int walk(const char *format, const struct view *v, struct line *line,
                struct trouble *trouble) {
    const char *at = format;

    while (*at) {
        size_t plain = strcspn(at, "{");
        struct placeholder p = {0};
        if (plain == 0 && at[1] != '{') {
            at++;
            int code = next_placeholder(format, &at, &p, trouble);
            if (!code && line)
                code = put_placeholder(&p, v, line, trouble);
            if (code)
                return code;
            continue;
        }
        if (line)
            put(line, at, plain ? plain : 1);
        at += plain ? plain : 2;
    }
    return 0;
}

int template_check(const char *format, struct trouble *trouble) {
    return walk(format, NULL, NULL, trouble);
}

int template_write(const char *format, const struct view *view, char ret[TEMPLATE_SIZE],
                   struct trouble *trouble) {
    struct line line = {.s = ret};

    *ret = '\0';
    int code = walk(format, view, &line, trouble);
    if (code)
        return code;
    if (line.full)
        return trouble_set(trouble, EX_USAGE, "FORMAT makes a line of more than %d characters",
                           TEMPLATE_SIZE - 2);
    memcpy(ret + line.n, "\n", 2);
    return 0;
}

void template_help(char *ret, size_t size) {
    size_t n = 0;

    text_append(ret, size, &n,
                "FORMAT of `brink line` is text with names in braces; {{ is a brace. A name alone "
                "is\nwritten for people, with its unit behind it (after the bar) it is a bare "
                "number;\nwhat is not known is \"-\". Default:\n  %s\n\n",
                template_default);
    for (int i = 0; i < NAMES; i++) {
        bool bare = i + 1 < NAMES && !names[i + 1].help;
        char both[48];
        size_t b = 0;
        if (!names[i].help)
            continue;
        text_append(both, sizeof(both), &b, "%s%s%s", names[i].name, bare ? " | " : "",
                    bare ? names[i + 1].name : "");
        text_append(ret, size, &n, "  %-29s %s%s\n", both, names[i].of_pack ? "pack: " : "",
                    names[i].help);
    }
    text_append(
        ret, size, &n,
        "\nA pack's own: {PACK.NAME}, with NAME one of \"pack:\" above or charge, low, high, "
        "left,\nleast, to_full, power, mean. Without PACK the first one is meant.\n");
}
