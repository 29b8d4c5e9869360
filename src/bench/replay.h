/* A log played through the watch, and what its estimates were worth.
 *
 * One pack, the log's voltage, temperature and (unless voltage_only) current; every row is one
 * sample. Two passes over the file, both in constant memory: the first finds where the run ends,
 * the second plays it.
 */
#pragma once

#include "core/watch.h"
#include "decode/logcsv.h"

#include <stdbool.h>
#include <stdint.h>

enum { REPLAY_LEFTS = 4 };

struct replay_config {
    struct watch_config watch;
    bool voltage_only;
    double start_charge; /* NaN = nothing is known at the start */
    double start_sd;     /* and how well it is known, one standard deviation */
    double capacity_Ah;  /* of the reference charge: 1 - charge_Ah / capacity_Ah */
    double floor_V;      /* whole pack: the run ends when the voltage stays under it */
    double settle_s;     /* charge errors count from here on */
};

/* Where a run begins and ends: at the first row, and at the first of three rows in a row under the
 * floor, or at the last row. */
struct replay_span {
    double first_s, end_s;
    uint64_t rows;
};

/* The time left as the watch foresaw it at a share of the run. NaN where it was not known. */
struct replay_left {
    int run_pct;
    double time_s, truth_s, left_s, least_s;
};

struct replay_result {
    uint64_t samples;                           /* fed */
    uint64_t judged;                            /* with a reference charge, after settling */
    double charge_rmse, charge_mae, charge_max; /* 0..1; NaN when nothing was judged */
    double band95_cover; /* share of the judged within charge_low..charge_high */
    struct replay_left left[REPLAY_LEFTS];
    /* Over all samples from settling to a minute before the end: share at which the truth was at or
     * above least, and least over the truth in the mean. NaN = never known. */
    double least_cover, least_share;
};

/* Called after every row, with the log's time. */
typedef void replay_seen(void *userdata, double time_s, const struct report *report);

/* Both return 0, LOGCSV_E_FORMAT (see logcsv_message) or -errno; replay_run also REPLAY_E_CONFIG,
 * when the watch refuses its config. */
enum replay_error { REPLAY_E_CONFIG = 16 };

int replay_measure(struct logcsv *log, double floor_V, struct replay_span *ret);
int replay_run(struct logcsv *log, const struct replay_config *config,
               const struct replay_span *span, replay_seen *seen, void *userdata,
               struct replay_result *ret);

/* (left - truth) / truth; NaN where one of them is not a time. */
double replay_left_error(const struct replay_left *left);
