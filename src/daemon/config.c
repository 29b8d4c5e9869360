/* From the text of brink.conf to struct config: sections and keys are looked up in the table of
 * keys.c, near names suggested, defaults laid first. What keys mean together is check.c's. */
#include "daemon/config.h"

#include "daemon/keys.h"
#include "daemon/reading.h"
#include "decode/celltable.h"
#include "decode/inifile.h"
#include "util/cleanup.h"
#include "util/files.h"
#include "util/text.h"

#include <errno.h>
#include <math.h>
#include <stdarg.h>
#include <string.h>
#include <unistd.h>

enum { MESSAGE_MAX = 768 };

static const char *const sections[] = {"unit", "gauge", "pack", "ladder", "stop", "files"};
enum { SECTIONS = sizeof(sections) / sizeof(sections[0]) };

void reading_problem(struct reading *reading, int line, const char *format, ...) {
    struct config_problems *problems = reading->problems;
    char message[MESSAGE_MAX];
    va_list args;

    va_start(args, format);
    vsnprintf(message, sizeof(message), format, args);
    va_end(args);
    problems->n++;
    size_t before = problems->length;
    bool fits = line > 0 ? text_append(problems->text, sizeof(problems->text), &problems->length,
                                       "%s:%d: %s\n", reading->file, line, message)
                         : text_append(problems->text, sizeof(problems->text), &problems->length,
                                       "%s: %s\n", reading->file, message);
    if (!fits) { /* whole lines only */
        problems->length = before;
        problems->text[before] = '\0';
    }
}

static int line_of(const struct reading *reading, int pack, const char *section, const char *name) {
    const struct key *key = key_find(section, name);
    ptrdiff_t i = key - keys;

    return pack >= 0 ? reading->pack_line[pack][i] : reading->line[i];
}

int reading_line(const struct reading *reading, int pack, const char *section, const char *key) {
    int line = line_of(reading, pack, section, key);

    return line > 0 ? line : pack >= 0 ? reading->pack_section[pack] : 0;
}

bool reading_good(const struct reading *reading, int pack, const char *section, const char *key) {
    return line_of(reading, pack, section, key) != READING_BAD;
}

const char *reading_default(const struct reading *reading, int pack, const char *section,
                            const char *key) {
    return line_of(reading, pack, section, key) == READING_NOT_GIVEN ? " (the default)" : "";
}

/* ---- defaults ------------------------------------------------------------------------------- */

static void lay_defaults(const char *section, void *base) {
    char problem[MESSAGE_MAX];

    for (size_t i = 0; i < n_keys; i++)
        if (strcmp(keys[i].section, section) == 0 && keys[i].fallback && keys[i].fallback[0])
            key_read(&keys[i], keys[i].fallback, base, problem, sizeof(problem));
}

/* A unit without a name is called what the network calls it. */
static void name_after_host(struct config *config) {
    char host[CONFIG_NAME_MAX];
    char problem[MESSAGE_MAX];
    const struct key *key = key_find("unit", "name");

    if (config->unit.name[0])
        return;
    if (gethostname(host, sizeof(host)) < 0)
        host[0] = '\0';
    host[sizeof(host) - 1] = '\0';
    if (!key_read(key, host, config, problem, sizeof(problem)))
        key_read(key, "unit", config, problem, sizeof(problem));
}

/* ---- sections ------------------------------------------------------------------------------- */

static bool is_pack(const char *section) {
    return strncmp(section, "pack", 4) == 0 &&
           (section[4] == '\0' || section[4] == ' ' || section[4] == '\t');
}

static const char *pack_name(const char *section) {
    return section + 4 + strspn(section + 4, " \t");
}

static int pack_index(const struct config *config, const char *section) {
    for (size_t i = 0; is_pack(section) && i < config->n_packs; i++)
        if (strcmp(config->pack[i].name, pack_name(section)) == 0)
            return (int)i;
    return -1;
}

static void add_pack(struct reading *reading, const struct inifile_section *section) {
    static const struct key name = {.section = "pack",
                                    .name = "NAME",
                                    .type = KEY_NAME,
                                    .offset = offsetof(struct config_pack, name),
                                    .size = NAME_LEN};
    struct config *config = reading->config;
    char problem[MESSAGE_MAX];

    if (!*pack_name(section->name)) {
        reading_problem(reading, section->line,
                        "a pack needs a name; accepted is [pack NAME], "
                        "such as [pack main]");
        return;
    }
    if (pack_index(config, section->name) >= 0) {
        reading_problem(reading, section->line, "[%s] is there twice; accepted is each pack once",
                        section->name);
        return;
    }
    if (config->n_packs == PACKS_MAX) {
        reading_problem(reading, section->line, "[%s] is one pack too many; accepted are 1 to %d",
                        section->name, PACKS_MAX);
        return;
    }
    struct config_pack *pack = &config->pack[config->n_packs];
    if (!key_read(&name, pack_name(section->name), pack, problem, sizeof(problem))) {
        reading_problem(reading, section->line, "the pack's %s", problem);
        return;
    }
    reading->pack_section[config->n_packs++] = section->line;
    lay_defaults("pack", pack);
}

static bool known_section(const char *name) {
    for (size_t i = 0; i < SECTIONS; i++)
        if (strcmp(sections[i], name) == 0)
            return true;
    return is_pack(name);
}

static void read_sections(struct reading *reading, const struct inifile *ini) {
    const struct inifile_section *section;

    for (size_t i = 0; (section = inifile_section(ini, i)); i++) {
        if (is_pack(section->name)) {
            add_pack(reading, section);
            continue;
        }
        if (known_section(section->name))
            continue;
        const char *near = text_nearest(section->name, sections, SECTIONS);
        reading_problem(reading, section->line,
                        "unknown section [%s]%s%s%s; accepted are [unit], [gauge], [pack NAME], "
                        "[ladder], [stop] and [files]",
                        section->name, near ? " (did you mean [" : "", near ? near : "",
                        near ? "]?)" : "");
    }
}

/* ---- keys ----------------------------------------------------------------------------------- */

/* The keys of a section, as candidates for a near name and as a list for people. */
static size_t keys_of(const char *section, const char *ret[KEYS_MAX]) {
    size_t n = 0;

    for (size_t i = 0; i < n_keys; i++)
        if (strcmp(keys[i].section, section) == 0)
            ret[n++] = keys[i].name;
    return n;
}

static const char *section_with(const char *name) {
    for (size_t i = 0; i < n_keys; i++)
        if (strcmp(keys[i].name, name) == 0)
            return keys[i].section;
    return NULL;
}

static void unknown_key(struct reading *reading, const char *section,
                        const struct inifile_entry *entry) {
    const char *candidates[KEYS_MAX];
    size_t n = keys_of(section, candidates), length = 0;
    const char *near = text_nearest(entry->key, candidates, n);
    const char *elsewhere = section_with(entry->key);
    char list[512] = "";

    for (size_t i = 0; i < n; i++)
        text_append(list, sizeof(list), &length, "%s%s", i == 0 ? "" : ", ", candidates[i]);
    if (elsewhere)
        reading_problem(reading, entry->line, "%s does not belong in [%s]; accepted is in [%s%s]",
                        entry->key, entry->section, elsewhere,
                        strcmp(elsewhere, "pack") == 0 ? " NAME" : "");
    else if (near)
        reading_problem(reading, entry->line,
                        "unknown key %s in [%s] (did you mean %s?); accepted "
                        "are %s",
                        entry->key, entry->section, near, list);
    else
        reading_problem(reading, entry->line, "unknown key %s in [%s]; accepted are %s", entry->key,
                        entry->section, list);
}

static void read_entry(struct reading *reading, const struct inifile_entry *entry) {
    int pack = pack_index(reading->config, entry->section);
    const char *section = pack >= 0 ? "pack" : entry->section;
    char problem[MESSAGE_MAX];

    if (!*section) {
        reading_problem(reading, entry->line,
                        "%s stands before the first section; accepted is a "
                        "[section] above each key",
                        entry->key);
        return;
    }
    if (!known_section(section) || (pack < 0 && is_pack(section)))
        return; /* the section's own problem says it */
    const struct key *key = key_find(section, entry->key);
    if (!key) {
        unknown_key(reading, section, entry);
        return;
    }
    void *base = pack >= 0 ? (void *)&reading->config->pack[pack] : (void *)reading->config;
    int *line = pack >= 0 ? &reading->pack_line[pack][key - keys] : &reading->line[key - keys];
    *line = entry->line;
    if (key_read(key, entry->value, base, problem, sizeof(problem)))
        return;
    *line = READING_BAD;
    reading_problem(reading, entry->line, "%s", problem);
}

static void require(struct reading *reading, int pack, const struct key *key) {
    char accepted[128];
    int line = pack >= 0 ? reading->pack_section[pack] : 0;

    if (key->fallback || line_of(reading, pack, key->section, key->name) != READING_NOT_GIVEN)
        return;
    reading_problem(reading, line, "[%s%s%s] needs %s: %s; accepted is %s", key->section,
                    pack >= 0 ? " " : "", pack >= 0 ? reading->config->pack[pack].name : "",
                    key->name, key->help, key_accepted(key, accepted, sizeof(accepted)));
}

static void require_all(struct reading *reading) {
    for (size_t i = 0; i < n_keys; i++) {
        if (strcmp(keys[i].section, "pack") != 0)
            require(reading, -1, &keys[i]);
        for (int p = 0; strcmp(keys[i].section, "pack") == 0 && p < (int)reading->config->n_packs;
             p++)
            require(reading, p, &keys[i]);
    }
    if (reading->config->n_packs == 0)
        reading_problem(reading, 0,
                        "there is no good [pack NAME] section; accepted are 1 to %d, "
                        "each with at least cells, capacity and voltage",
                        PACKS_MAX);
}

static void read_tables(struct reading *reading) {
    struct config *config = reading->config;
    char message[MESSAGE_MAX / 2], path[PATH_MAX];

    for (size_t p = 0; p < config->n_packs; p++) {
        int line = line_of(reading, (int)p, "pack", "cells");
        if (line <= 0)
            continue;
        int r = celltable_find(config->files.cells, config->pack[p].cells, path, message,
                               sizeof(message));
        if (r == 0)
            r = celltable_load(path, &config->pack[p].table, message, sizeof(message));
        reading->table[p] = r == 0;
        if (r != 0)
            reading_problem(reading, line, "cells = %s: %s", config->pack[p].cells, message);
    }
}

/* ---- the whole ------------------------------------------------------------------------------ */

static int read_ini(const struct inifile *ini, struct config *config,
                    struct config_problems *problems) {
    struct reading reading = {.file = inifile_name(ini), .config = config, .problems = problems};
    const struct inifile_entry *entry;

    for (size_t i = 0; i < SECTIONS; i++)
        if (strcmp(sections[i], "pack") != 0)
            lay_defaults(sections[i], config);
    read_sections(&reading, ini);
    for (size_t i = 0; (entry = inifile_entry(ini, i)); i++)
        read_entry(&reading, entry);
    require_all(&reading);
    name_after_host(config);
    read_tables(&reading);
    reading_check(&reading);
    return problems->n == 0 ? 0 : CONFIG_E_REFUSED;
}

int config_parse(const char *text, size_t length, const char *name, struct config *ret,
                 struct config_problems *ret_problems) {
    scoped(inifile_free_p) struct inifile *ini = NULL;
    scoped(free_p) struct config *config = calloc(1, sizeof(*config));
    char message[MESSAGE_MAX];

    *ret_problems = (struct config_problems){0};
    if (!config)
        return -ENOMEM;
    int r = inifile_parse(&ini, text, length, name, message, sizeof(message));
    if (r != 0) {
        ret_problems->n = 1;
        text_append(ret_problems->text, sizeof(ret_problems->text), &ret_problems->length, "%s\n",
                    message);
        return r < 0 ? r : CONFIG_E_REFUSED;
    }
    r = read_ini(ini, config, ret_problems);
    if (r == 0)
        *ret = *config;
    return r;
}

int config_load(const char *path, struct config *ret, struct config_problems *ret_problems) {
    scoped(free_p) char *text = NULL;
    size_t length = 0;

    int r = files_read(path, INIFILE_BYTES_MAX, &text, &length);
    if (r == 0)
        return config_parse(text, length, path, ret, ret_problems);
    *ret_problems = (struct config_problems){.n = 1};
    text_append(ret_problems->text, sizeof(ret_problems->text), &ret_problems->length,
                "%s: cannot be read: %s; accepted is a file of at most %d bytes as brink.conf(5) "
                "describes it\n",
                path, strerror(-r), INIFILE_BYTES_MAX);
    return r;
}

bool config_key(size_t i, struct config_key_text *ret) {
    if (i >= n_keys)
        return false;
    *ret = (struct config_key_text){keys[i].section, keys[i].name, keys[i].fallback};
    return true;
}

/* ---- for the other parts -------------------------------------------------------------------- */

static void watch_pack(const struct config *config, size_t i, struct pack_config *ret) {
    const struct config_pack *pack = &config->pack[i];
    double total_Wh = 0, own_Wh = pack->capacity_Ah * pack->series;

    for (size_t p = 0; p < config->n_packs; p++)
        total_Wh += config->pack[p].capacity_Ah * config->pack[p].series;
    memcpy(ret->name, pack->name, sizeof(ret->name));
    /* Cannot fail: the table was checked when it was read, series and capacity by their range. */
    (void)cell_init(&ret->cell, &pack->table, pack->series, pack->capacity_Ah);
    ret->cutoff_charge = pack->cutoff_charge;
    ret->cutoff_rest_V = pack->cutoff_rest_V * pack->series;
    ret->floor_V = pack->floor_V * pack->series;
    ret->carries_W = pack->carries_W;
    ret->typical_W = config->unit.typical_W * own_Wh / total_Wh;
    ret->wiring_ohm = pack->wiring_ohm;
}

void config_watch(const struct config *config, struct watch_config *ret) {
    *ret = (struct watch_config){.n_packs = config->n_packs,
                                 .ladder = config->ladder,
                                 .silent_s = config->gauge.silent_s,
                                 .assumed_temp_C = config->unit.assumed_temp_C,
                                 .rail_adapter_V = config->unit.rail_adapter_V};
    for (size_t i = 0; i < config->n_packs; i++)
        watch_pack(config, i, &ret->pack[i]);
}

void config_gauge(const struct config *config, struct gauge_config *ret) {
    const struct config_gauge *gauge = &config->gauge;

    *ret = (struct gauge_config){.kind = (enum gauge_kind)gauge->kind,
                                 .baud = gauge->baud,
                                 .tell = gauge->tell,
                                 .reset_on_open = gauge->reset_on_open};
    memcpy(ret->device, gauge->device, sizeof(ret->device));
}

void config_channels(const struct config *config, struct channel_map *ret) {
    channel_map_init(ret);
    ret->n_packs = config->n_packs;
    for (size_t i = 0; i < config->n_packs; i++)
        ret->pack[i] = config->pack[i].channels;
    ret->rail = config->unit.rail;
    ret->adapter = config->unit.adapter;
    ret->adapter.scale = 1; /* it has no trim */
    ret->adapter_above = config->unit.adapter_above;
}
