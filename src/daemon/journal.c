/* Log lines with their fields. */
#include "daemon/journal.h"

#include "publish/status.h"

#include <math.h>
#include <stdarg.h>
#include <stdio.h>

enum { FIELDS_MAX = 6, FIELD_SIZE = 96, TEXT_SIZE = 1024 };

static const char *const message_id[] = {
    [JOURNAL_READY] = "MESSAGE_ID=fa9227c7483347bebc05aa58c1374e0a",
    [JOURNAL_LEAVES] = "MESSAGE_ID=913a736540024ef69fa83d642f2af127",
    [JOURNAL_STAGE] = "MESSAGE_ID=96ac96571676461e84b4a32540047ab4",
    [JOURNAL_STOP] = "MESSAGE_ID=856b05e16c874687b6e6a349b4af9166",
    [JOURNAL_ALERT] = "MESSAGE_ID=085100afb50544ee941218ea2d84d422",
    [JOURNAL_ALERT_OVER] = "MESSAGE_ID=17612f34ed674cf78af7e5113711abab",
    [JOURNAL_GAUGE_LOST] = "MESSAGE_ID=a5cd992df18e42818bf583d581f39abd",
    [JOURNAL_GAUGE_BACK] = "MESSAGE_ID=64774a3617524e9eaa6080801a3e308d",
    [JOURNAL_LINES_BAD] = "MESSAGE_ID=57a8e4c66b974a30b7c50388c54f0e11",
    [JOURNAL_CONFIG_TAKEN] = "MESSAGE_ID=ec33616bee6746b6aafc37fd2ca7fdd9",
    [JOURNAL_CONFIG_REFUSED] = "MESSAGE_ID=ea8c41f4ed6b458690cee0ab717c2300",
    [JOURNAL_STATE] = "MESSAGE_ID=188c1d2b91f747119862bee60e20e0f3",
};

struct fields {
    size_t n;
    char text[FIELDS_MAX][FIELD_SIZE];
    const char *list[FIELDS_MAX + 2];
};

static void add(struct fields *fields, const char *name, const char *value) {
    if (!value)
        return;
    snprintf(fields->text[fields->n], FIELD_SIZE, "%s=%s", name, value);
    fields->list[fields->n + 1] = fields->text[fields->n];
    fields->n++;
}

static void fill(struct fields *fields, enum journal_kind kind, const struct journal_about *about) {
    const struct report *report = about->report;
    char charge[16];

    *fields = (struct fields){.list = {message_id[kind]}};
    add(fields, "BRINK_UNIT", about->unit);
    add(fields, "BRINK_ALERT", about->alert);
    if (!report)
        return;
    add(fields, "BRINK_STAGE", status_stage_name(report->stage));
    add(fields, "BRINK_CAUSE", status_cause_name(report->cause));
    if (!isfinite(report->charge))
        return;
    snprintf(charge, sizeof(charge), "%.4f", report->charge);
    add(fields, "BRINK_CHARGE", charge);
}

void journal_write(enum journal_kind kind, enum log_level level, const struct journal_about *about,
                   const char *format, ...) {
    struct fields fields;
    char text[TEXT_SIZE];
    va_list args;

    fill(&fields, kind, about);
    va_start(args, format);
    vsnprintf(text, sizeof(text), format, args);
    va_end(args);
    log_fields(level, fields.list, "%s", text);
}
