/* Reading logs for the fit, and cutting them into runs. */
#include "bench/fitlog.h"

#include "decode/logcsv.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sysexits.h>

enum { ROWS_MAX = 4000000 };

#define GAP_S       100.0 /* a longer step begins a new run */
#define SHORT_GAP_S 20.0  /* so does this one, when the charge jumped in it */
#define JUMP_SHARE  0.0035
#define COARSE_S    5.0   /* steps from here on take their mean current from charge_Ah */
#define REST_SHARE  0.004 /* C-rate under which a cell counts as resting */

static int fail(int code, char *message, size_t size, const char *path, const char *what) {
    snprintf(message, size, "%s: %s", path, what);
    return code;
}

static int grow(struct fit_log *log, size_t *room) {
    struct fit_row *more;

    if (log->n < *room)
        return 0;
    *room = *room ? 2 * *room : 4096;
    more = realloc(log->row, *room * sizeof *more);
    if (!more)
        return -ENOMEM;
    log->row = more;
    return 0;
}

/* charge holds charge_Ah until the log is placed. */
static int read_rows(struct fit_log *log, struct logcsv *csv, double temp_C) {
    struct logcsv_row in;
    size_t room = 0;
    int r;

    while ((r = logcsv_next(csv, &in)) == 0) {
        const double *value = in.value;

        if (isnan(value[LOGCSV_CURRENT]) || (log->told_charge && isnan(value[LOGCSV_CHARGE])))
            continue; /* a row that was not fully told */
        if (log->n == ROWS_MAX)
            return -EFBIG;
        if ((r = grow(log, &room)))
            return r;
        log->row[log->n++] = (struct fit_row){
            .time_s = value[LOGCSV_TIME],
            .voltage_V = value[LOGCSV_VOLTAGE],
            .current_A = value[LOGCSV_CURRENT],
            .temp_C = isnan(value[LOGCSV_TEMP]) ? temp_C : value[LOGCSV_TEMP],
            .charge = value[LOGCSV_CHARGE],
        };
    }
    return r == LOGCSV_END ? 0 : r;
}

static int check_rows(const struct fit_log *log, const char *path, char *message, size_t size) {
    for (size_t i = 0; i < log->n; i++) {
        const struct fit_row *row = &log->row[i];

        if (row->voltage_V > 0.0 && row->voltage_V < 6.0 && fabs(row->current_A) < 1e4 &&
            row->temp_C > -60.0 && row->temp_C < 120.0)
            continue;
        snprintf(message, size,
                 "%s: at %.1f s %g V, %g A, %g C; accepted are readings of one cell: 0 to 6 V, "
                 "-60 to 120 C",
                 path, row->time_s, row->voltage_V, row->current_A, row->temp_C);
        return EX_DATAERR;
    }
    return log->n >= 20 ? 0
                        : fail(EX_DATAERR, message, size, path,
                               "fewer than 20 rows; a fit needs a whole log");
}

static int open_log(struct logcsv **ret, const char *path, char *message, size_t size) {
    int r = logcsv_open(ret, path, message, size);

    if (r < 0)
        return fail(EX_NOINPUT, message, size, path, strerror(-r));
    if (r)
        return EX_DATAERR;
    if (!logcsv_has(*ret, LOGCSV_CURRENT))
        return fail(EX_DATAERR, message, size, path,
                    "no column current_A; resistances cannot be told from voltage alone");
    return 0;
}

int fitlog_read(struct fit_log *ret, const char *path, enum fit_role role, double temp_C,
                char *message, size_t size) {
    struct logcsv *csv __attribute__((cleanup(logcsv_free_p))) = NULL;
    struct fit_log log = {.role = role, .gain = 1.0};
    const char *base = strrchr(path, '/');
    int r = open_log(&csv, path, message, size);

    if (r)
        return r;
    snprintf(log.name, sizeof log.name, "%.60s", base ? base + 1 : path);
    log.hint_Ah = logcsv_capacity_Ah(csv);
    log.told_temp = logcsv_has(csv, LOGCSV_TEMP);
    log.told_charge = logcsv_has(csv, LOGCSV_CHARGE);
    r = read_rows(&log, csv, temp_C);
    if (r == LOGCSV_E_FORMAT)
        r = fail(EX_DATAERR, message, size, "log", logcsv_message(csv));
    else if (r)
        r = fail(EX_IOERR, message, size, path, strerror(-r));
    else
        r = check_rows(&log, path, message, size);
    if (r) {
        fitlog_free(&log);
        return r;
    }
    for (size_t i = 0; i < log.n; i++)
        log.temp_C += log.row[i].temp_C / (double)log.n;
    *ret = log;
    return 0;
}

void fitlog_free(struct fit_log *log) {
    free(log->row);
    *log = (struct fit_log){0};
}

double fitlog_most_Ah(const struct fit_log *log) {
    double most = 0.0;

    for (size_t i = 0; i < log->n; i++)
        most = fmax(most, log->row[i].charge);
    return most;
}

/* Charges of all rows: from charge_Ah, or summed up. */
static void lay(struct fit_log *log, double capacity_Ah, double gain, double start_charge) {
    double charge = start_charge;

    for (size_t i = 0; i < log->n; i++) {
        struct fit_row *row = &log->row[i], *last = i ? row - 1 : row;

        charge -= 0.5 * (row->current_A + last->current_A) * (row->time_s - last->time_s) /
                  (3600.0 * capacity_Ah);
        row->charge = log->told_charge ? 1.0 - gain * row->charge / capacity_Ah : charge;
    }
}

/* Is the row the start of a run, and what flowed since the one before? */
static void join(struct fit_log *log, size_t i, double capacity_Ah) {
    struct fit_row *row = &log->row[i], *last = row - 1;
    double step_s = row->time_s - last->time_s;
    double mean_A = 0.5 * (row->current_A + last->current_A);
    double moved = last->charge - row->charge;
    bool jumped = fabs(moved - mean_A * step_s / (3600.0 * capacity_Ah)) > JUMP_SHARE;

    row->start = step_s > GAP_S || (step_s > SHORT_GAP_S && jumped);
    log->runs += row->start;
    log->jumps += row->start && jumped;
    if (log->told_charge && log->gain == 1.0 && step_s > COARSE_S)
        mean_A = moved * 3600.0 * capacity_Ah / step_s;
    row->mean_A = row->start ? 0.0 : mean_A;
}

void fitlog_place(struct fit_log *log, double capacity_Ah, double gain, double start_charge) {
    log->gain = log->told_charge ? gain : 1.0;
    lay(log, capacity_Ah, gain, start_charge);
    log->runs = 1;
    log->jumps = 0;
    log->low = 1.0;
    log->high = 0.0;
    log->row[0].start = true;
    log->row[0].mean_A = 0.0;
    for (size_t i = 0; i < log->n; i++) {
        const struct fit_row *row = &log->row[i];

        if (i)
            join(log, i, capacity_Ah);
        if (fabs(row->current_A) > REST_SHARE * capacity_Ah) {
            log->low = fmin(log->low, row->charge);
            log->high = fmax(log->high, row->charge);
        }
    }
}

bool fitlog_rest(const struct fit_log *log, double capacity_Ah, size_t *at, struct fit_rest *ret) {
    double since_s = UNKNOWN;

    for (size_t i = *at; i < log->n; i++) {
        const struct fit_row *row = &log->row[i];
        bool last = i + 1 == log->n || log->row[i + 1].start ||
                    fabs(log->row[i + 1].current_A) > REST_SHARE * capacity_Ah;

        if (fabs(row->current_A) > REST_SHARE * capacity_Ah)
            since_s = UNKNOWN;
        else if (isnan(since_s) || row->start)
            since_s = row->time_s;
        if (last && row->time_s - since_s >= FIT_REST_S) {
            *ret = (struct fit_rest){row->charge, row->voltage_V, row->temp_C,
                                     row->time_s - since_s, i};
            *at = i + 1;
            return true;
        }
    }
    *at = log->n;
    return false;
}
