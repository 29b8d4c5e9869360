/* The status object of brink-status(7): a report and what the daemon knows beside it, as one line
 * of JSON. The same bytes are the status file, the answer of `status` and the params of each
 * `report` notification. Keys, their order, units and names are a promise: see the manual page.
 */
#pragma once

#include "core/report.h"
#include "core/watch.h"

#include <stddef.h>
#include <stdint.h>
#include <sys/types.h>

/* Enough for PACKS_MAX packs with every alert set, names and paths of usual length. */
enum { STATUS_SIZE_MAX = 8192 };

enum status_gauge_state { STATUS_GAUGE_ABSENT, STATUS_GAUGE_OPEN, STATUS_GAUGE_LOST };
enum status_action { STATUS_ACTION_REPORT, STATUS_ACTION_POWEROFF };
enum status_request {
    STATUS_REQUEST_NONE,
    STATUS_REQUEST_REPORTED, /* action=report: the stop was told, not ordered */
    STATUS_REQUEST_WRITTEN,
    STATUS_REQUEST_FAILED
};

/* Alerts of the daemon's own, beside enum alert of the core; the bits do not meet. */
enum status_alert {
    STATUS_ALERT_STOP_FAILED = 1 << 16,       /* the stop request could not be written */
    STATUS_ALERT_STATUS_UNWRITABLE = 1 << 17, /* the status file could not be written */
    STATUS_ALERT_STATE_UNWRITABLE = 1 << 18,  /* the state file could not be written */
};

struct status_gauge {
    const char *kind;   /* serial, stream */
    const char *device; /* as configured */
    enum status_gauge_state state;
    uint64_t lines;     /* all that came, good or bad */
    uint64_t bad_lines; /* those that could not be read */
    double period_s;    /* as configured */
};

/* All pointers are borrowed for the call. */
struct status_context {
    const char *unit;
    pid_t pid;
    int64_t t_real_us; /* shown as `written` */
    const struct watch_config *watch;
    struct status_gauge gauge;
    enum status_action action;
    enum status_request request;
    unsigned alerts; /* enum status_alert */
};

/* One line without its newline, NUL-ended. Returns the length, or 0 when it does not fit. */
size_t status_render(const struct report *report, const struct status_context *context, char *buf,
                     size_t size);

/* The names of the status object; "unknown" for a value that is none of the enum. */
const char *status_stage_name(enum stage stage);
const char *status_supply_name(enum supply supply);
const char *status_flow_name(enum flow flow);
const char *status_cause_name(enum cause cause);
const char *status_gauge_state_name(enum status_gauge_state state);
const char *status_action_name(enum status_action action);
const char *status_request_name(enum status_request request);

/* One alert bit (enum alert or enum status_alert): its name, and the words for people that say what
 * is wrong and what to do next. NULL for a bit that is none. */
const char *status_alert_name(unsigned bit);
const char *status_alert_text(unsigned bit);
