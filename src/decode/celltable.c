/* Cell tables: one static table of keys says what each value must be; what values must be to each
 * other is checked after, key by key, so that every message has its line. */
#include "decode/celltable.h"

#include "decode/inifile.h"
#include "util/cleanup.h"
#include "util/text.h"
#include "util/units.h"

#include <dirent.h>
#include <errno.h>
#include <limits.h>
#include <math.h>
#include <stdbool.h>
#include <stdio.h>
#include <string.h>

enum { QUOTE_MAX = 32, TOKEN_MAX = 160, VALUE_TEXT = 40 };

enum key_id {
    K_NAME,
    K_CHEMISTRY,
    K_CAPACITY,
    K_FULL,
    K_DAMAGE,
    K_LOW,
    K_HIGH,
    K_SPREAD,
    K_SOURCE,
    K_LICENCE,
    K_CURVE_CHARGE,
    K_CURVE_VOLTAGE,
    K_RES_CHARGE,
    K_R0,
    K_R1,
    K_R2,
    K_TAU1,
    K_TAU2,
    K_TEMPERATURE,
    K_ACTIVATION,
    KEYS
};

/* What is being read, before it is known to be good. */
struct draft {
    const struct inifile *ini;
    char *message;
    size_t size;
    int line[KEYS]; /* 0 = not given */
    size_t count[KEYS];
    double curve_charge[OCV_POINTS_MAX], curve_V[OCV_POINTS_MAX];
    struct cell_table table;
};

enum kind { FREE_TEXT, TEXT, NUMBER, LIST };

#define AT(field) offsetof(struct draft, field)

/* Ranges are wide: they catch a slip of the decimal point or of the unit, not an unusual cell. */
static const struct key {
    const char *section, *name;
    enum kind kind;
    bool may_lack;
    enum unit unit;
    size_t offset;
    double least, most; /* of each number, both accepted */
    size_t count;       /* of a list, at most */
} keys[KEYS] = {
    [K_NAME] = {"cell", "name", TEXT, false, UNIT_NONE, AT(table.name), 0, 0, 0},
    [K_CHEMISTRY] = {"cell", "chemistry", TEXT, false, UNIT_NONE, AT(table.chemistry), 0, 0, 0},
    [K_CAPACITY] = {"cell", "capacity", NUMBER, false, UNIT_AMPERE_HOUR, AT(table.capacity_Ah),
                    0.001, 1000, 0},
    [K_FULL] = {"cell", "full", NUMBER, false, UNIT_VOLT, AT(table.full_V), 1, 5, 0},
    [K_DAMAGE] = {"cell", "damage", NUMBER, false, UNIT_VOLT, AT(table.damage_V), 0.5, 5, 0},
    [K_LOW] = {"cell", "possible_low", NUMBER, true, UNIT_VOLT, AT(table.possible_low_V), 0.1, 5,
               0},
    [K_HIGH] = {"cell", "possible_high", NUMBER, true, UNIT_VOLT, AT(table.possible_high_V), 1, 6,
                0},
    [K_SPREAD] = {"cell", "spread", NUMBER, true, UNIT_VOLT, AT(table.voltage_sd_V), 1e-4, 0.5, 0},
    [K_SOURCE] = {"cell", "source", FREE_TEXT, true, UNIT_NONE, 0, 0, 0, 0},
    [K_LICENCE] = {"cell", "licence", FREE_TEXT, true, UNIT_NONE, 0, 0, 0, 0},
    [K_CURVE_CHARGE] = {"curve", "charge", LIST, false, UNIT_SHARE, AT(curve_charge), 0, 1,
                        OCV_POINTS_MAX},
    [K_CURVE_VOLTAGE] = {"curve", "voltage", LIST, false, UNIT_VOLT, AT(curve_V), 0.5, 5,
                         OCV_POINTS_MAX},
    [K_RES_CHARGE] = {"resistance", "charge", LIST, false, UNIT_SHARE, AT(table.res_charge), 0, 1,
                      CELL_RES_MAX},
    [K_R0] = {"resistance", "r0", LIST, false, UNIT_OHM, AT(table.r0_ohm), 1e-6, 100, CELL_RES_MAX},
    [K_R1] = {"resistance", "r1", LIST, false, UNIT_OHM, AT(table.r1_ohm), 1e-6, 100, CELL_RES_MAX},
    [K_R2] = {"resistance", "r2", LIST, false, UNIT_OHM, AT(table.r2_ohm), 1e-6, 100, CELL_RES_MAX},
    [K_TAU1] = {"resistance", "tau1", NUMBER, false, UNIT_SECOND, AT(table.tau1_s), 0.01, 1e5, 0},
    [K_TAU2] = {"resistance", "tau2", NUMBER, false, UNIT_SECOND, AT(table.tau2_s), 0.01, 1e5, 0},
    [K_TEMPERATURE] = {"resistance", "temperature", NUMBER, false, UNIT_CELSIUS,
                       AT(table.res_temp_C), -40, 80, 0},
    [K_ACTIVATION] = {"resistance", "activation", NUMBER, false, UNIT_J_MOL,
                      AT(table.arrhenius_J_mol), 0, 150e3, 0},
};

static const char *const sections[] = {"cell", "curve", "resistance"};
enum { SECTIONS = sizeof(sections) / sizeof(sections[0]) };

#define refuse(draft, line, ...)                                                                   \
    (inifile_refuse((draft)->ini, line, (draft)->message, (draft)->size, __VA_ARGS__),             \
     CELLTABLE_E_REFUSED)

static void *place(struct draft *draft, enum key_id id) {
    return (char *)draft + keys[id].offset;
}

/* ---- one value ----------------------------------------------------------------------------- */

/* Why text, a number with its unit, is not taken for a key. */
static int refuse_value(struct draft *d, enum key_id id, const char *text, int error) {
    static const char *const why[] = {
        [UNITS_E_NUMBER] = "is no decimal number with a unit",
        [UNITS_E_MISSING] = "has no unit",
        [UNITS_E_UNIT] = "has not the unit it needs",
    };
    const struct key *key = &keys[id];

    return refuse(d, d->line[id], "%s: '%.*s' %s; the unit %s is accepted", key->name,
                  text_cut(text, QUOTE_MAX), text, why[error], units_accepted(key->unit));
}

static int refuse_range(struct draft *d, enum key_id id, const char *text) {
    const struct key *key = &keys[id];
    char least[VALUE_TEXT], most[VALUE_TEXT];

    return refuse(d, d->line[id], "%s: '%.*s' is out of range; %s to %s is accepted", key->name,
                  text_cut(text, QUOTE_MAX), text,
                  units_format(key->least, key->unit, least, sizeof(least)),
                  units_format(key->most, key->unit, most, sizeof(most)));
}

static int read_number(struct draft *d, enum key_id id, const char *text, double *ret) {
    double value;
    int r = units_parse(text, keys[id].unit, &value);

    if (r != 0)
        return refuse_value(d, id, text, r);
    if (!(value >= keys[id].least && value <= keys[id].most))
        return refuse_range(d, id, text);
    *ret = value;
    return 0;
}

static int read_text(struct draft *d, enum key_id id, const char *text) {
    size_t n = strlen(text);

    if (n >= CELL_NAME_MAX)
        return refuse(d, d->line[id], "%s: '%.*s...' is longer than %d bytes", keys[id].name,
                      text_cut(text, QUOTE_MAX), text, CELL_NAME_MAX - 1);
    memcpy(place(d, id), text, n + 1);
    return 0;
}

/* Where the unit of a list begins: behind its last number, whether or not a space is between. */
static const char *list_unit(const char *text) {
    const char *last = text + strlen(text);

    while (last > text && last[-1] != ' ' && last[-1] != '\t')
        last--;
    return last + strspn(last, "+-0123456789.eE,xX");
}

static int read_list_number(struct draft *d, enum key_id id, const char *number, size_t length,
                            const char *unit) {
    char text[TOKEN_MAX];
    double *list = place(d, id), value;

    if (d->count[id] == keys[id].count)
        return refuse(d, d->line[id], "%s: more than %zu numbers", keys[id].name, keys[id].count);
    if (units_number(number, length, &value) != 0)
        return refuse(d, d->line[id],
                      "%s: number %zu, '%.*s', is no decimal number; numbers with spaces between "
                      "and one unit at the end are accepted",
                      keys[id].name, d->count[id] + 1,
                      length < QUOTE_MAX ? (int)length : text_cut(number, QUOTE_MAX), number);
    snprintf(text, sizeof(text), "%.*s%s%s", (int)length, number, *unit ? " " : "", unit);
    int r = read_number(d, id, text, &list[d->count[id]]);
    d->count[id] += r == 0;
    return r;
}

static int read_list(struct draft *d, enum key_id id, const char *text) {
    const char *unit = list_unit(text), *at = text;

    if (unit == text)
        return refuse(d, d->line[id], "%s: '%.*s' has no number; numbers and one unit are accepted",
                      keys[id].name, text_cut(text, QUOTE_MAX), text);
    while (at < unit) {
        size_t n = strcspn(at, " \t");
        if (n > (size_t)(unit - at))
            n = (size_t)(unit - at);
        int r = n > 0 ? read_list_number(d, id, at, n, unit) : 0;
        if (r != 0)
            return r;
        at += n;
        at += at < unit && (*at == ' ' || *at == '\t');
    }
    return 0;
}

/* ---- all of them ---------------------------------------------------------------------------- */

static int check_sections(struct draft *d) {
    const struct inifile_section *s;

    for (size_t i = 0; (s = inifile_section(d->ini, i)); i++) {
        size_t k = 0;
        while (k < SECTIONS && strcmp(s->name, sections[k]) != 0)
            k++;
        if (k < SECTIONS)
            continue;
        const char *near = text_nearest(s->name, sections, SECTIONS);
        return refuse(d, s->line,
                      "section [%.*s] is not known%s%s%s; [cell], [curve] and [resistance] are "
                      "accepted",
                      text_cut(s->name, QUOTE_MAX), s->name, near ? ", did you mean [" : "",
                      near ? near : "", near ? "]?" : "");
    }
    return 0;
}

static int refuse_key(struct draft *d, const struct inifile_entry *e) {
    const char *names[KEYS];
    char list[256] = "";
    size_t n = 0, length = 0;

    for (size_t id = 0; id < KEYS; id++)
        if (strcmp(keys[id].section, e->section) == 0)
            names[n++] = keys[id].name;
    for (size_t i = 0; i < n; i++)
        text_append(list, sizeof(list), &length, "%s%s", i ? ", " : "", names[i]);
    const char *near = text_nearest(e->key, names, n);
    return refuse(d, e->line, "'%.*s' is no key of [%s]%s%s%s; accepted are %s",
                  text_cut(e->key, QUOTE_MAX), e->key, e->section, near ? ", did you mean '" : "",
                  near ? near : "", near ? "'?" : "", list);
}

static int read_entry(struct draft *d, const struct inifile_entry *e) {
    size_t id = 0;

    while (id < KEYS &&
           (strcmp(keys[id].section, e->section) != 0 || strcmp(keys[id].name, e->key) != 0))
        id++;
    if (id == KEYS)
        return refuse_key(d, e);
    d->line[id] = e->line;
    if (!*e->value)
        return refuse(d, e->line, "%s: the value is missing", e->key);
    switch (keys[id].kind) {
    case FREE_TEXT:
        return 0;
    case TEXT:
        return read_text(d, (enum key_id)id, e->value);
    case NUMBER:
        return read_number(d, (enum key_id)id, e->value, place(d, (enum key_id)id));
    case LIST:
        return read_list(d, (enum key_id)id, e->value);
    }
    return 0;
}

/* The line of a section, 0 when the file has none. */
static int section_line(const struct inifile *ini, const char *name) {
    const struct inifile_section *s;

    for (size_t i = 0; (s = inifile_section(ini, i)); i++)
        if (strcmp(s->name, name) == 0)
            return s->line;
    return 0;
}

static int check_lacking(struct draft *d) {
    for (size_t id = 0; id < KEYS; id++)
        if (d->line[id] == 0 && !keys[id].may_lack)
            return refuse(d, section_line(d->ini, keys[id].section),
                          "'%s' is missing; [%s] needs it", keys[id].name, keys[id].section);
    return 0;
}

static void fill_defaults(struct draft *d) {
    struct cell_table *t = &d->table;

    if (!d->line[K_LOW])
        t->possible_low_V = fmax(t->damage_V - 1.0, 0.1);
    if (!d->line[K_HIGH])
        t->possible_high_V = t->full_V + 0.2;
    if (!d->line[K_SPREAD])
        t->voltage_sd_V = 0.02;
}

/* ---- what values must be to each other ------------------------------------------------------ */

static int check_voltages(struct draft *d) {
    static const enum key_id order[] = {K_LOW, K_DAMAGE, K_FULL, K_HIGH};

    for (size_t i = 1; i < sizeof(order) / sizeof(order[0]); i++) {
        enum key_id below = order[i - 1], above = order[i];
        double low_V = *(double *)place(d, below), high_V = *(double *)place(d, above);
        char low[VALUE_TEXT], high[VALUE_TEXT];
        if (low_V < high_V)
            continue;
        return refuse(d, d->line[above] ? d->line[above] : d->line[below],
                      "%s (%s) is not above %s (%s); possible_low, damage, full and possible_high "
                      "must rise in this order",
                      keys[above].name, units_format(high_V, UNIT_VOLT, high, sizeof(high)),
                      keys[below].name, units_format(low_V, UNIT_VOLT, low, sizeof(low)));
    }
    return 0;
}

/* A list against the one that tells its points. */
static int check_count(struct draft *d, enum key_id points, enum key_id list) {
    if (d->count[list] == d->count[points])
        return 0;
    return refuse(d, d->line[list],
                  "%s has %zu numbers, but %s in line %d has %zu; give one for "
                  "each",
                  keys[list].name, d->count[list], keys[points].name, d->line[points],
                  d->count[points]);
}

/* equal: a number may be as large as the one before it. */
static int check_rising(struct draft *d, enum key_id id, bool equal) {
    const double *list = place(d, id);

    for (size_t i = 1; i < d->count[id]; i++) {
        char low[VALUE_TEXT], high[VALUE_TEXT];
        if (list[i] > list[i - 1] || (equal && list[i] == list[i - 1]))
            continue;
        return refuse(
            d, d->line[id], "%s: number %zu (%s) is %s number %zu (%s); %s", keys[id].name, i + 1,
            units_format(list[i], keys[id].unit, high, sizeof(high)), equal ? "under" : "not above",
            i, units_format(list[i - 1], keys[id].unit, low, sizeof(low)),
            equal ? "from empty to full it must never fall" : "the list must rise");
    }
    return 0;
}

static int check_curve_ends(struct draft *d) {
    const struct cell_table *t = &d->table;
    size_t last = d->count[K_CURVE_CHARGE] - 1;
    char a[VALUE_TEXT], b[VALUE_TEXT];

    if (last < 1 || d->curve_charge[0] != 0.0 || d->curve_charge[last] != 1.0)
        return refuse(d, d->line[K_CURVE_CHARGE],
                      "charge: the curve goes from %s to %s; it must go from 0 %% to 100 %%",
                      units_format(d->curve_charge[0], UNIT_SHARE, a, sizeof(a)),
                      units_format(d->curve_charge[last], UNIT_SHARE, b, sizeof(b)));
    if (!(d->curve_V[0] >= t->possible_low_V && d->curve_V[last] <= t->possible_high_V))
        return refuse(d, d->line[K_CURVE_VOLTAGE],
                      "voltage: the curve leaves what is possible, %s to %s (possible_low, "
                      "possible_high)",
                      units_format(t->possible_low_V, UNIT_VOLT, a, sizeof(a)),
                      units_format(t->possible_high_V, UNIT_VOLT, b, sizeof(b)));
    if (!(d->curve_V[last] > d->curve_V[0] && d->curve_V[last] > t->damage_V))
        return refuse(d, d->line[K_CURVE_VOLTAGE],
                      "voltage: the curve ends at %s; it must end above where it begins and above "
                      "damage (%s)",
                      units_format(d->curve_V[last], UNIT_VOLT, a, sizeof(a)),
                      units_format(t->damage_V, UNIT_VOLT, b, sizeof(b)));
    return 0;
}

static int check_curve(struct draft *d) {
    int r = check_count(d, K_CURVE_CHARGE, K_CURVE_VOLTAGE);

    if (r == 0)
        r = check_rising(d, K_CURVE_CHARGE, false);
    if (r == 0)
        r = check_rising(d, K_CURVE_VOLTAGE, true);
    if (r == 0)
        r = check_curve_ends(d);
    if (r == 0 && ocv_init(&d->table.ocv, d->curve_charge, d->curve_V, d->count[K_CURVE_CHARGE]))
        r = refuse(d, d->line[K_CURVE_CHARGE], "the curve is no curve");
    return r;
}

static int check_resistance(struct draft *d) {
    int r = check_rising(d, K_RES_CHARGE, false);

    for (enum key_id id = K_R0; r == 0 && id <= K_R2; id++)
        r = check_count(d, K_RES_CHARGE, id);
    if (r == 0 && !(d->table.tau1_s < d->table.tau2_s))
        r = refuse(d, d->line[K_TAU2], "tau2 is not above tau1 in line %d; the slow one is tau2",
                   d->line[K_TAU1]);
    d->table.n_res = d->count[K_RES_CHARGE];
    return r;
}

static int check_whole(struct draft *d) {
    const char *what;

    if (cell_table_check(&d->table, &what) != 0)
        return refuse(d, 0, "%s", what);
    return 0;
}

/* ---- the file -------------------------------------------------------------------------------- */

static int read_draft(struct draft *d) {
    static int (*const checks[])(struct draft *) = {check_lacking, check_voltages, check_curve,
                                                    check_resistance, check_whole};
    const struct inifile_entry *e;
    int r = check_sections(d);

    for (size_t i = 0; r == 0 && (e = inifile_entry(d->ini, i)); i++)
        r = read_entry(d, e);
    for (size_t i = 0; r == 0 && i < sizeof(checks) / sizeof(checks[0]); i++) {
        r = checks[i](d);
        if (i == 0 && r == 0)
            fill_defaults(d);
    }
    return r;
}

static int from_ini(const struct inifile *ini, struct cell_table *ret, char *message, size_t size) {
    struct draft d = {.ini = ini, .message = message, .size = size};
    int r = read_draft(&d);

    if (r == 0)
        *ret = d.table;
    return r;
}

int celltable_parse(const char *text, size_t length, const char *name, struct cell_table *ret,
                    char *message, size_t size) {
    scoped(inifile_free_p) struct inifile *ini = NULL;
    int r = inifile_parse(&ini, text, length, name, message, size);

    if (r != 0)
        return r < 0 ? r : CELLTABLE_E_REFUSED;
    return from_ini(ini, ret, message, size);
}

int celltable_load(const char *path, struct cell_table *ret, char *message, size_t size) {
    scoped(inifile_free_p) struct inifile *ini = NULL;
    int r = inifile_load(&ini, path, message, size);

    if (r != 0)
        return r < 0 ? r : CELLTABLE_E_REFUSED;
    return from_ini(ini, ret, message, size);
}

/* ---- finding it ------------------------------------------------------------------------------ */

static const char suffix[] = ".ini";
enum { SUFFIX = sizeof(suffix) - 1 };

static bool has_suffix(const char *name) {
    size_t n = strlen(name);

    return n > SUFFIX && strcmp(name + n - SUFFIX, suffix) == 0;
}

/* Takes the next folder off a colon list. Returns false at its end. */
static bool next_folder(const char **list, char folder[PATH_MAX]) {
    while (**list) {
        size_t n = strcspn(*list, ":");
        const char *from = *list;
        *list += n + (from[n] == ':');
        if (n == 0 || n >= PATH_MAX)
            continue;
        memcpy(folder, from, n);
        folder[n] = '\0';
        return true;
    }
    return false;
}

/* Keeps in best whichever of it and the folder's tables is nearest to name. */
static void nearest_in(const char *folder, const char *name, char best[NAME_MAX + 1]) {
    DIR *dir = opendir(folder);
    const struct dirent *entry;

    if (!dir)
        return;
    while ((entry = readdir(dir))) {
        char stem[NAME_MAX + 1];
        if (!has_suffix(entry->d_name))
            continue;
        snprintf(stem, sizeof(stem), "%.*s", (int)(strlen(entry->d_name) - SUFFIX), entry->d_name);
        const char *near = text_nearest(name, (const char *const[]){best, stem}, 2);
        if (near == stem)
            memcpy(best, stem, sizeof(stem));
    }
    closedir(dir);
}

static int refuse_name(const char *folders, const char *name, char *message, size_t size) {
    char folder[PATH_MAX], best[NAME_MAX + 1] = "";

    for (const char *list = folders; next_folder(&list, folder);)
        nearest_in(folder, name, best);
    snprintf(
        message, size,
        "there is no cell table '%.*s' in %s%s%s%s; the name of a table there or a path with a "
        "/ is accepted",
        text_cut(name, QUOTE_MAX), name, folders, *best ? ", did you mean '" : "", best,
        *best ? "'?" : "");
    return CELLTABLE_E_UNKNOWN;
}

static int find_path(const char *path, char ret_path[PATH_MAX], char *message, size_t size) {
    size_t n = strlen(path);
    int r = n >= PATH_MAX ? -ENAMETOOLONG : access(path, F_OK) < 0 ? -errno : 0;

    if (r < 0)
        snprintf(message, size, "the cell table %s cannot be read: %s", path, strerror(-r));
    else
        memcpy(ret_path, path, n + 1);
    return r;
}

int celltable_find(const char *folders, const char *name_or_path, char ret_path[PATH_MAX],
                   char *message, size_t size) {
    char folder[PATH_MAX], path[PATH_MAX];

    if (strchr(name_or_path, '/') || has_suffix(name_or_path))
        return find_path(name_or_path, ret_path, message, size);
    for (const char *list = folders; next_folder(&list, folder);) {
        int n = snprintf(path, sizeof(path), "%s/%s%s", folder, name_or_path, suffix);
        if (n < 0 || (size_t)n >= sizeof(path) || access(path, F_OK) < 0)
            continue;
        memcpy(ret_path, path, (size_t)n + 1);
        return 0;
    }
    return refuse_name(folders, name_or_path, message, size);
}
