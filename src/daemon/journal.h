/* The daemon's log lines, each of a kind with a MESSAGE_ID of its own and the figures as journal
 * fields: BRINK_UNIT, BRINK_STAGE, BRINK_CAUSE, BRINK_CHARGE, BRINK_ALERT. The kinds and ids are a
 * promise, see brinkd(8). */
#pragma once

#include "core/report.h"
#include "util/log.h"

enum journal_kind {
    JOURNAL_READY,
    JOURNAL_LEAVES, /* the daemon itself */
    JOURNAL_STAGE,
    JOURNAL_STOP,
    JOURNAL_ALERT,
    JOURNAL_ALERT_OVER,
    JOURNAL_GAUGE_LOST,
    JOURNAL_GAUGE_BACK,
    JOURNAL_LINES_BAD,
    JOURNAL_CONFIG_TAKEN,
    JOURNAL_CONFIG_REFUSED,
    JOURNAL_STATE,
};

/* What the fields are filled from; report NULL and alert NULL = without theirs. */
struct journal_about {
    const char *unit;
    const struct report *report;
    const char *alert;
};

void journal_write(enum journal_kind kind, enum log_level level, const struct journal_about *about,
                   const char *format, ...) __attribute__((format(printf, 4, 5)));
