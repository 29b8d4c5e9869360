/* What the keys of a config mean together. Each check looks only at values that could be read, so
 * that one slip gives one problem. */
#include "daemon/reading.h"

#include <math.h>
#include <string.h>
#include <sys/stat.h>

enum { SILENT_PERIODS = 3, SOCKET_PATH_MAX = 108 };

/* Tables are made with a few millivolts of spread; an equal limit written as 2.5 V must pass. */
static const double SAME_V = 1e-6;

static bool good(const struct reading *r, int p, const char *a, const char *b) {
    return reading_good(r, p, p >= 0 ? "pack" : "ladder", a) &&
           reading_good(r, p, p >= 0 ? "pack" : "ladder", b);
}

/* The line of whichever of two keys was written, the first one first. */
static int line_of_either(const struct reading *r, int p, const char *a, const char *b) {
    int line = reading_line(r, p, "pack", a);

    return line != r->pack_section[p] ? line : reading_line(r, p, "pack", b);
}

/* ---- volts ---------------------------------------------------------------------------------- */

/* Volts of a cell, or of the pack by mistake? True when a problem was said. */
static bool too_high(struct reading *r, int p, const char *name, double volt) {
    const struct config_pack *pack = &r->config->pack[p];
    int line = reading_line(r, p, "pack", name);
    double a_cell = volt / pack->series;

    if (volt < pack->table.full_V)
        return false;
    if (pack->series > 1 && a_cell >= pack->table.possible_low_V && a_cell < pack->table.full_V)
        reading_problem(r, line,
                        "%s = %.4g V looks like the whole pack's voltage; accepted is that of one "
                        "cell: over %d in series it is %s = %.3f V",
                        name, volt, pack->series, name, a_cell);
    else
        reading_problem(r, line,
                        "%s = %.4g V lies at or above %.4g V, where a cell of %s is full; accepted "
                        "is the voltage of one cell, under %.4g V",
                        name, volt, pack->table.full_V, pack->table.name, pack->table.full_V);
    return true;
}

static void check_damage(struct reading *r, int p, const char *name, double volt) {
    const struct config_pack *pack = &r->config->pack[p];

    if (volt >= pack->table.damage_V - SAME_V || pack->accept_damage)
        return;
    reading_problem(
        r, reading_line(r, p, "pack", name),
        "%s = %.4g V lies under %.4g V, the least voltage published for cells of %s: run lower, a "
        "lithium cell loses capacity for good, may short inside and can burn when charged again; "
        "accepted is %.4g V or more, or accept_damage = yes for cells that are given up (the cell "
        "maker's data sheet has the last word)",
        name, volt, pack->table.damage_V, pack->table.name, pack->table.damage_V);
}

/* The stop must come after the warning: both are limits of one falling charge. */
static void check_rest_after_reserve(struct reading *r, int p) {
    const struct config_pack *pack = &r->config->pack[p];
    double reserve = r->config->ladder.reserve_charge;
    double reserve_V = ocv_voltage(&pack->table.ocv, reserve);

    if (!reading_good(r, -1, "ladder", "reserve_charge") || pack->cutoff_rest_V < reserve_V)
        return;
    reading_problem(r, reading_line(r, p, "pack", "cutoff_rest"),
                    "cutoff_rest = %.4g V%s is a charge of %.0f %% in cells of %s, not under "
                    "reserve_charge (%.4g %%); accepted is less than %.3f V, or a higher "
                    "reserve_charge",
                    pack->cutoff_rest_V, reading_default(r, p, "pack", "cutoff_rest"),
                    100 * ocv_charge(&pack->table.ocv, pack->cutoff_rest_V), pack->table.name,
                    100 * reserve, reserve_V);
}

static void check_pack_volts(struct reading *r, int p) {
    const struct config_pack *pack = &r->config->pack[p];
    bool rest = reading_good(r, p, "pack", "cutoff_rest");
    bool floor = reading_good(r, p, "pack", "floor");

    if (!good(r, p, "series", "accept_damage"))
        return;
    if (rest)
        rest = !r->table[p] || !too_high(r, p, "cutoff_rest", pack->cutoff_rest_V);
    if (floor)
        floor = !r->table[p] || !too_high(r, p, "floor", pack->floor_V);
    if (rest && r->table[p]) {
        check_damage(r, p, "cutoff_rest", pack->cutoff_rest_V);
        check_rest_after_reserve(r, p);
    }
    if (floor && r->table[p])
        check_damage(r, p, "floor", pack->floor_V);
    if (rest && floor && !(pack->floor_V < pack->cutoff_rest_V))
        reading_problem(r, line_of_either(r, p, "floor", "cutoff_rest"),
                        "floor = %.4g V%s is not under cutoff_rest = %.4g V%s; accepted is a floor "
                        "under cutoff_rest, because under load a cell sags below its voltage at "
                        "rest",
                        pack->floor_V, reading_default(r, p, "pack", "floor"), pack->cutoff_rest_V,
                        reading_default(r, p, "pack", "cutoff_rest"));
}

static void check_pack_charge(struct reading *r, int p) {
    const struct config_pack *pack = &r->config->pack[p];
    double reserve = r->config->ladder.reserve_charge;

    if (!reading_good(r, p, "pack", "cutoff_charge") ||
        !reading_good(r, -1, "ladder", "reserve_charge") || pack->cutoff_charge < reserve)
        return;
    reading_problem(
        r, reading_line(r, p, "pack", "cutoff_charge"),
        "cutoff_charge = %.4g %%%s is not under reserve_charge = %.4g %%%s; accepted is "
        "less, so that the warning comes before the stop",
        100 * pack->cutoff_charge, reading_default(r, p, "pack", "cutoff_charge"), 100 * reserve,
        reading_default(r, -1, "ladder", "reserve_charge"));
}

/* ---- tokens --------------------------------------------------------------------------------- */

struct use {
    const char *token, *key;
    int pack; /* -1 = the unit's */
};

static size_t token_uses(const struct config *config, struct use ret[2 + 2 * PACKS_MAX]) {
    size_t n = 0;

    ret[n++] = (struct use){config->unit.rail.token, "rail", -1};
    ret[n++] = (struct use){config->unit.adapter.token, "adapter", -1};
    for (size_t p = 0; p < config->n_packs; p++) {
        const struct pack_channels *channels = &config->pack[p].channels;
        ret[n++] = (struct use){channels->voltage.token, "voltage", (int)p};
        ret[n++] = (struct use){channels->current.token, "current", (int)p};
    }
    return n;
}

/* One number cannot be two quantities. One thermometer may well serve several packs. */
static void check_tokens(struct reading *r) {
    struct use use[2 + 2 * PACKS_MAX];
    size_t n = token_uses(r->config, use);

    for (size_t i = 0; i < n; i++)
        for (size_t j = i + 1; j < n; j++) {
            if (!use[i].token[0] || strcmp(use[i].token, use[j].token) != 0)
                continue;
            reading_problem(
                r, reading_line(r, use[j].pack, use[j].pack < 0 ? "unit" : "pack", use[j].key),
                "%s = %s reads the same token as %s in [%s%s]; accepted is a token of "
                "its own for each voltage and current",
                use[j].key, use[j].token, use[i].key, use[i].pack < 0 ? "unit" : "pack ",
                use[i].pack < 0 ? "" : r->config->pack[use[i].pack].name);
        }
}

/* ---- gauge ---------------------------------------------------------------------------------- */

static void check_silent(struct reading *r) {
    const struct config_gauge *gauge = &r->config->gauge;
    int line = reading_line(r, -1, "gauge", "silent");

    if (!reading_good(r, -1, "gauge", "silent") || !reading_good(r, -1, "gauge", "period") ||
        gauge->silent_s >= SILENT_PERIODS * gauge->period_s)
        return;
    reading_problem(r, line > 0 ? line : reading_line(r, -1, "gauge", "period"),
                    "silent = %.4g s%s is less than %d periods of %.4g s; accepted is %.4g s or "
                    "more, so that one lost line does not make the unit blind",
                    gauge->silent_s, reading_default(r, -1, "gauge", "silent"), SILENT_PERIODS,
                    gauge->period_s, SILENT_PERIODS * gauge->period_s);
}

static void check_device(struct reading *r) {
    struct gauge_config config;
    struct gauge *gauge = NULL;
    char message[512];

    if (reading_line(r, -1, "gauge", "device") <= 0 || reading_line(r, -1, "gauge", "kind") <= 0)
        return;
    config_gauge(r->config, &config);
    int error = gauge_new(&gauge, &config);
    gauge_free(gauge);
    if (error > 0)
        reading_problem(r, reading_line(r, -1, "gauge", "device"), "%s",
                        gauge_config_error_text(&config, error, message, sizeof(message)));
}

/* A FIFO carries one way. What is not there now is looked at again when it is opened. */
static void check_tell(struct reading *r) {
    const struct config_gauge *gauge = &r->config->gauge;
    struct stat st;

    if (!gauge->tell || !reading_good(r, -1, "gauge", "device") || stat(gauge->device, &st) < 0 ||
        !(S_ISFIFO(st.st_mode) || S_ISREG(st.st_mode)))
        return;
    reading_problem(r, reading_line(r, -1, "gauge", "tell"),
                    "tell = yes, but nothing can be written back to %s, which is a %s; accepted is "
                    "tell = no, or a serial port, pseudo-terminal or unix socket",
                    gauge->device, S_ISFIFO(st.st_mode) ? "FIFO" : "file");
}

/* ---- files ---------------------------------------------------------------------------------- */

static void check_files(struct reading *r) {
    const struct config *config = r->config;
    const struct {
        const char *section, *key, *path;
    } file[] = {{"files", "status", config->files.status},
                {"files", "socket", config->files.socket},
                {"files", "state", config->files.state},
                {"stop", "request", config->stop.request}};
    enum { FILES = sizeof(file) / sizeof(file[0]) };

    for (size_t i = 0; i < FILES; i++)
        for (size_t j = i + 1; j < FILES; j++)
            if (strcmp(file[i].path, file[j].path) == 0)
                reading_problem(r, reading_line(r, -1, file[j].section, file[j].key),
                                "%s = %s is the same file as %s in [%s]; accepted is a file of its "
                                "own",
                                file[j].key, file[j].path, file[i].key, file[i].section);
    if (strlen(config->files.socket) >= SOCKET_PATH_MAX)
        reading_problem(r, reading_line(r, -1, "files", "socket"),
                        "socket has %zu bytes; accepted are %d, the most a unix socket's path may "
                        "have",
                        strlen(config->files.socket), SOCKET_PATH_MAX - 1);
}

void reading_check(struct reading *reading) {
    for (int p = 0; p < (int)reading->config->n_packs; p++) {
        check_pack_charge(reading, p);
        check_pack_volts(reading, p);
    }
    check_tokens(reading);
    check_silent(reading);
    check_device(reading);
    check_tell(reading);
    check_files(reading);
}
