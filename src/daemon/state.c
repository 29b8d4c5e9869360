/* The state file. Written with the product's own JSON writer, read with jansson; everything that is
 * read is checked before anything is believed. */
#include "daemon/state.h"

#include "publish/jsonw.h"
#include "util/cleanup.h"
#include "util/clock.h"
#include "util/files.h"
#include "util/real.h"

#include <errno.h>
#include <fcntl.h>
#include <jansson.h>
#include <limits.h>
#include <math.h>
#include <string.h>

static const double GONE_MOST_s = 10 * 365 * 86400.0;

/* ---- time ----------------------------------------------------------------------------------- */

/* Real time is worth something when the kernel set it from a hardware clock, or when a time server
 * was heard in this boot (systemd-timesyncd's mark). After a boot without either it is whatever was
 * saved last, and counts nothing of the time without power. */
static bool real_time_trusted(void) {
    enum { CLOCKS = 4 };
    char path[64], answer = '0';

    for (int i = 0; i < CLOCKS && answer != '1'; i++) {
        snprintf(path, sizeof(path), "/sys/class/rtc/rtc%d/hctosys", i);
        scoped(close_p) int fd = open(path, O_RDONLY | O_CLOEXEC);
        if (fd >= 0 && read(fd, &answer, 1) != 1)
            answer = '0';
    }
    return answer == '1' || access("/run/systemd/timesync/synchronized", F_OK) == 0;
}

void state_now(struct state_time *ret) {
    *ret = (struct state_time){.t_boot_us = clock_boot_us(),
                               .t_real_us = clock_real_us(),
                               .real_trusted = real_time_trusted()};
    if (clock_boot_id(ret->boot_id) < 0)
        ret->boot_id[0] = '\0'; /* equals no other boot */
}

double state_gone_s(const struct state_time *then, const struct state_time *now,
                    bool *ret_same_boot) {
    double gone_s;

    *ret_same_boot = now->boot_id[0] && strcmp(then->boot_id, now->boot_id) == 0;
    if (*ret_same_boot)
        gone_s = (double)(now->t_boot_us - then->t_boot_us) * 1e-6;
    else if (then->real_trusted && now->real_trusted)
        gone_s = (double)(now->t_real_us - then->t_real_us) * 1e-6;
    else
        return UNKNOWN;
    if (gone_s >= 0 && gone_s <= GONE_MOST_s)
        return gone_s;
    *ret_same_boot = false; /* boot time that falls is another boot, whatever the id says */
    return UNKNOWN;
}

/* ---- take and match ------------------------------------------------------------------------- */

void state_take(const struct watch *watch, const struct config *config, int64_t t_watch_us,
                struct state *ret) {
    memset(ret, 0, sizeof(*ret));
    state_now(&ret->time);
    watch_remember(watch, &ret->memory);
    ret->memory.t_boot_us += ret->time.t_boot_us - t_watch_us;
    ret->memory.stage_since_us += ret->time.t_boot_us - t_watch_us;
    for (size_t i = 0; i < config->n_packs; i++) {
        memcpy(ret->pack[i].name, config->pack[i].name, sizeof(ret->pack[i].name));
        memcpy(ret->pack[i].cells, config->pack[i].table.name, sizeof(ret->pack[i].cells));
        ret->pack[i].series = config->pack[i].series;
    }
}

static const struct pack_memory nothing = {UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN,
                                           UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN};

size_t state_match(const struct state *state, const struct config *config,
                   struct watch_memory *ret) {
    size_t same = 0;

    *ret = state->memory;
    ret->n_packs = config->n_packs;
    for (size_t i = 0; i < config->n_packs; i++) {
        const struct config_pack *pack = &config->pack[i];
        ret->pack[i] = nothing;
        for (size_t j = 0; j < state->memory.n_packs; j++) {
            const struct state_pack *kept = &state->pack[j];
            if (strcmp(kept->name, pack->name) != 0 || kept->series != pack->series ||
                strcmp(kept->cells, pack->table.name) != 0)
                continue;
            ret->pack[i] = state->memory.pack[j];
            same++;
            break;
        }
    }
    return same;
}

/* ---- figures of a pack ---------------------------------------------------------------------- */

static const struct figure {
    const char *key;
    size_t offset;
    double least, most;
} figures[] = {
    {"charge", offsetof(struct pack_memory, charge), -0.1, 1.1},
    {"charge_sd", offsetof(struct pack_memory, charge_sd), 0, 10},
    {"u1_V", offsetof(struct pack_memory, u1_V), -100, 100},
    {"u2_V", offsetof(struct pack_memory, u2_V), -100, 100},
    {"power_W", offsetof(struct pack_memory, power_W), -1e6, 1e6},
    {"power_sd_W", offsetof(struct pack_memory, power_sd_W), 0, 1e6},
    {"resistance_scale", offsetof(struct pack_memory, resistance_scale), 0, 1000},
    {"resistance_sd", offsetof(struct pack_memory, resistance_sd), 0, 1000},
    {"temp_C", offsetof(struct pack_memory, temp_C), -100, 200},
};
enum { FIGURES = sizeof(figures) / sizeof(figures[0]) };

/* ---- save ----------------------------------------------------------------------------------- */

static void save_pack(struct jsonw *w, const struct state_pack *pack,
                      const struct pack_memory *memory) {
    jsonw_open(w, NULL, '{');
    jsonw_text(w, "name", pack->name);
    jsonw_text(w, "cells", pack->cells);
    jsonw_int(w, "series", pack->series);
    for (size_t i = 0; i < FIGURES; i++) {
        double value;
        memcpy(&value, (const char *)memory + figures[i].offset, sizeof(value));
        jsonw_fixed(w, figures[i].key, value, 6);
    }
    jsonw_close(w, '}');
}

int state_save(const char *path, const struct state *state) {
    char buf[STATE_BYTES_MAX];
    struct jsonw w;

    jsonw_init(&w, buf, sizeof(buf) - 1);
    jsonw_open(&w, NULL, '{');
    jsonw_int(&w, "brink_state", STATE_VERSION);
    jsonw_text(&w, "boot_id", state->time.boot_id);
    jsonw_int(&w, "t_boot_us", state->time.t_boot_us);
    jsonw_int(&w, "t_real_us", state->time.t_real_us);
    jsonw_bool(&w, "real_trusted", state->time.real_trusted);
    jsonw_int(&w, "memory_t_boot_us", state->memory.t_boot_us);
    jsonw_int(&w, "stage", state->memory.stage);
    jsonw_int(&w, "stage_since_us", state->memory.stage_since_us);
    jsonw_int(&w, "cause", state->memory.cause);
    jsonw_open(&w, "packs", '[');
    for (size_t i = 0; i < state->memory.n_packs; i++)
        save_pack(&w, &state->pack[i], &state->memory.pack[i]);
    jsonw_close(&w, ']');
    jsonw_close(&w, '}');
    size_t length = jsonw_finish(&w);
    if (length == 0)
        return -EMSGSIZE;
    buf[length++] = '\n';
    return files_replace(path, buf, length, 0640, true);
}

/* ---- load ----------------------------------------------------------------------------------- */

static bool get_int(const json_t *object, const char *key, int64_t least, int64_t most,
                    int64_t *ret) {
    const json_t *value = json_object_get(object, key);

    if (!json_is_integer(value) || json_integer_value(value) < least ||
        json_integer_value(value) > most)
        return false;
    *ret = json_integer_value(value);
    return true;
}

static bool get_text(const json_t *object, const char *key, char *ret, size_t size) {
    const char *text = json_string_value(json_object_get(object, key));

    if (!text || strlen(text) >= size)
        return false;
    memcpy(ret, text, strlen(text) + 1);
    return true;
}

static bool load_pack(const json_t *object, struct state_pack *ret, struct pack_memory *memory) {
    int64_t series;

    if (!get_text(object, "name", ret->name, sizeof(ret->name)) ||
        !get_text(object, "cells", ret->cells, sizeof(ret->cells)) ||
        !get_int(object, "series", 1, 1000, &series))
        return false;
    ret->series = (int)series;
    for (size_t i = 0; i < FIGURES; i++) {
        const json_t *value = json_object_get(object, figures[i].key);
        double number = json_is_null(value) ? UNKNOWN : json_number_value(value);
        if (!json_is_null(value) &&
            (!json_is_number(value) || !(number >= figures[i].least && number <= figures[i].most)))
            return false;
        memcpy((char *)memory + figures[i].offset, &number, sizeof(number));
    }
    return true;
}

static bool load_packs(const json_t *packs, struct state *ret) {
    size_t n = json_array_size(packs); /* 0 for what is no array */

    if (n < 1 || n > PACKS_MAX)
        return false;
    ret->memory.n_packs = n;
    for (size_t i = 0; i < n; i++)
        if (!load_pack(json_array_get(packs, i), &ret->pack[i], &ret->memory.pack[i]))
            return false;
    return true;
}

static bool load_times(const json_t *root, struct state *ret) {
    const json_t *trusted = json_object_get(root, "real_trusted");
    int64_t stage, cause;

    if (!json_is_boolean(trusted) ||
        !get_text(root, "boot_id", ret->time.boot_id, sizeof(ret->time.boot_id)) ||
        !get_int(root, "t_boot_us", 0, INT64_MAX / 4, &ret->time.t_boot_us) ||
        !get_int(root, "t_real_us", 0, INT64_MAX / 4, &ret->time.t_real_us) ||
        !get_int(root, "memory_t_boot_us", INT64_MIN / 4, INT64_MAX / 4, &ret->memory.t_boot_us) ||
        !get_int(root, "stage_since_us", INT64_MIN / 4, INT64_MAX / 4,
                 &ret->memory.stage_since_us) ||
        !get_int(root, "stage", STAGE_AMPLE, STAGE_LEAVING, &stage) ||
        !get_int(root, "cause", CAUSE_NONE, CAUSE_BLIND, &cause))
        return false;
    ret->time.real_trusted = json_is_true(trusted);
    ret->memory.stage = (enum stage)stage;
    ret->memory.cause = (enum cause)cause;
    return true;
}

static const char *load_root(const json_t *root, struct state *ret) {
    int64_t version;

    if (!get_int(root, "brink_state", 1, INT64_MAX, &version))
        return "it is no state file of Brink";
    if (version > STATE_VERSION)
        return "it was written by a later version";
    if (!load_times(root, ret))
        return "its times or stage cannot be";
    return load_packs(json_object_get(root, "packs"), ret) ? NULL : "its packs cannot be";
}

int state_load(const char *path, struct state *ret, const char **ret_why) {
    scoped(free_p) char *text = NULL;
    struct state state = {0};
    size_t length = 0;

    int r = files_read(path, STATE_BYTES_MAX, &text, &length);
    if (r == -EFBIG || r == -EISDIR) {
        *ret_why = "it is no state file of Brink";
        return STATE_E_BAD;
    }
    if (r < 0)
        return r;
    json_t *root = json_loadb(text, length, JSON_REJECT_DUPLICATES, NULL);
    *ret_why = root ? load_root(root, &state) : "it is cut off or no JSON";
    json_decref(root);
    if (*ret_why)
        return STATE_E_BAD;
    *ret = state;
    return 0;
}

int state_set_aside(const char *path) {
    char aside[PATH_MAX];
    int n = snprintf(aside, sizeof(aside), "%s.bad", path);

    if (n < 0 || (size_t)n >= sizeof(aside))
        return -ENAMETOOLONG;
    return rename(path, aside) < 0 ? -errno : 0;
}
