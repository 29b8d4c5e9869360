/* The logs a cell table is fitted to, whole in memory: rows with the charge they were taken at, cut
 * into runs where the log has gaps. Current is positive when discharging. */
#pragma once

#include <stdbool.h>
#include <stddef.h>

enum fit_role { FIT_OCV, FIT_PULSE, FIT_DRIVE };

struct fit_row {
    double time_s, voltage_V, current_A;
    double mean_A; /* from the row before to this one; 0 at the start of a run */
    double temp_C;
    double charge; /* 0..1, from charge_Ah and the capacity */
    double weight; /* in the fit; 0 = left out */
    bool start;    /* of a run: nothing is known of what went before, it is taken as rested */
};

struct fit_log {
    char name[64]; /* of the file, without its folder */
    enum fit_role role;
    struct fit_row *row;
    size_t n;
    double temp_C;      /* mean */
    bool told_temp;     /* by the log, not assumed */
    bool told_charge;   /* charge_Ah by the log, not summed up from the current */
    double hint_Ah;     /* capacity named in the log's head, or NaN */
    double gain;        /* what charge_Ah was multiplied by, 1 = taken as it is */
    size_t runs, jumps; /* jumps: runs that begin at a charge the current does not explain */
    double low, high;   /* charges met with current flowing */
};

/* A rest in a log: its last row, after at least FIT_REST_S without current. */
#define FIT_REST_S 590.0

struct fit_rest {
    double charge, voltage_V, temp_C, rest_s;
    size_t row;
};

/* Reads a log; temp_C is taken where it tells none. charge is left NaN. 0, or an exit code of
 * sysexits.h with the reason in message. */
int fitlog_read(struct fit_log *ret, const char *path, enum fit_role role, double temp_C,
                char *message, size_t size);
void fitlog_free(struct fit_log *log);

/* Greatest charge_Ah of the log. */
double fitlog_most_Ah(const struct fit_log *log);

/* Lays the log on the charge axis of a cell of capacity_Ah, charge_Ah counting gain times, and cuts
 * it into runs. A log without charge_Ah is summed up from start_charge. */
void fitlog_place(struct fit_log *log, double capacity_Ah, double gain, double start_charge);

/* The next rest that ends behind row *at; advances *at. capacity_Ah says what is no current. */
bool fitlog_rest(const struct fit_log *log, double capacity_Ah, size_t *at, struct fit_rest *ret);
