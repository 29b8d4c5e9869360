/* What is kept over restarts, as one JSON object in the state file: what the watch has learned, and
 * when it was so by both clocks and the boot's id, because boot time starts anew with each boot and
 * real time may be anything on a board without a clock of its own.
 */
#pragma once

#include "core/watch.h"
#include "daemon/config.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum { STATE_VERSION = 1, STATE_BYTES_MAX = 16384, STATE_ID_SIZE = 37 };

enum state_error { STATE_E_BAD = 1 /* no state of ours, damaged, or of a version to come */ };

/* When it is, or was. */
struct state_time {
    char boot_id[STATE_ID_SIZE];
    int64_t t_boot_us, t_real_us;
    bool real_trusted; /* real time was set by a clock or a time server */
};

struct state_pack {
    char name[NAME_LEN];
    char cells[CELL_NAME_MAX]; /* name of its table */
    int series;
};

struct state {
    struct state_time time;
    struct watch_memory memory; /* times laid on boot time, see state_take */
    struct state_pack pack[PACKS_MAX];
};

void state_now(struct state_time *ret);

/* Takes what is to be kept: t_watch_us is the watch's time now, whose difference to boot time is
 * taken out. */
void state_take(const struct watch *watch, const struct config *config, int64_t t_watch_us,
                struct state *ret);

/* Durable, mode 0640. Returns 0 or -errno. */
int state_save(const char *path, const struct state *state);

/* Returns 0, -errno, or STATE_E_BAD with a word on why; ret is not touched then. */
int state_load(const char *path, struct state *ret, const char **ret_why);

/* Renames a file that state_load refused to PATH.bad. Returns 0 or -errno. */
int state_set_aside(const char *path);

/* Seconds from then to now: exact within one boot; by real time when both ends are trusted; else
 * NaN, as also for what cannot be. */
double state_gone_s(const struct state_time *then, const struct state_time *now,
                    bool *ret_same_boot);

/* The memory in the order of the config's packs. A pack is the same when name, cells and series
 * are; one that is not gets NaN throughout, which the watch passes over. Returns how many are the
 * same.
 */
size_t state_match(const struct state *state, const struct config *config,
                   struct watch_memory *ret);
