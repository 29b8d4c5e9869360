/* Plain words for reports. */
#include "daemon/words.h"

#include "publish/status.h"
#include "util/text.h"
#include "util/units.h"

#include <math.h>
#include <stdio.h>

enum { DURATION_SIZE = 32 };

const char *words_rule(enum cause cause) {
    static const char *const rules[] = {
        [CAUSE_NONE] = "no limit is reached",
        [CAUSE_CHARGE] = "the charge is at its limit",
        [CAUSE_REST] = "the voltage at rest is at its limit",
        [CAUSE_LEFT] = "the time left is at its limit",
        [CAUSE_KEEP] = "what is left is needed for a clean stop",
        [CAUSE_FLOOR] = "the voltage is under the floor",
        [CAUSE_BLIND] = "the gauge is silent and by the model the pack may be at its limit",
    };

    return (size_t)cause < sizeof(rules) / sizeof(rules[0]) ? rules[cause] : "unknown rule";
}

static void add_charge(const struct report *report, char *buf, size_t size, size_t *length) {
    if (isfinite(report->charge))
        text_append(buf, size, length, "charge %.0f %% (%.0f to %.0f)", 100 * report->charge,
                    100 * report->charge_low, 100 * report->charge_high);
    else
        text_append(buf, size, length, "charge not known yet");
}

static void add_left(const struct report *report, char *buf, size_t size, size_t *length) {
    char left[DURATION_SIZE], least[DURATION_SIZE];

    if (isinf(report->left_s))
        text_append(buf, size, length, "no end in sight");
    else if (isfinite(report->left_s))
        text_append(buf, size, length, "left %s, at least %s",
                    units_duration(report->left_s, left, sizeof(left)),
                    units_duration(report->left_least_s, least, sizeof(least)));
    else
        text_append(buf, size, length, "time left not known");
}

char *words_status(const struct report *report, char *buf, size_t size) {
    static const char *const supplies[] = {[SUPPLY_UNKNOWN] = "supply not known",
                                           [SUPPLY_PACK] = "on pack",
                                           [SUPPLY_ADAPTER] = "on adapter",
                                           [SUPPLY_BOTH] = "on adapter and pack"};
    size_t length = 0;

    buf[0] = '\0';
    text_append(buf, size, &length, "%s, %s%s, ", status_stage_name(report->stage),
                supplies[report->supply], report->blind ? ", gauge silent" : "");
    add_charge(report, buf, size, &length);
    text_append(buf, size, &length, ", ");
    add_left(report, buf, size, &length);
    return buf;
}

static void add_pack(const char *name, const struct pack_report *pack, char *buf, size_t size,
                     size_t *length) {
    text_append(buf, size, length, "; %s", name);
    if (isfinite(pack->terminal_V))
        text_append(buf, size, length, " %.3f V now,", pack->terminal_V);
    if (isfinite(pack->rest_V))
        text_append(buf, size, length, " %.3f V at rest", pack->rest_V);
    else
        text_append(buf, size, length, " not known yet");
}

char *words_reason(const struct report *report, const struct watch_config *watch, char *buf,
                   size_t size) {
    size_t length = 0;
    int decided = report->cause_pack;

    buf[0] = '\0';
    text_append(buf, size, &length, "%s", words_rule(report->cause));
    if (decided >= 0 && (size_t)decided < watch->n_packs)
        text_append(buf, size, &length, " (pack %s)", watch->pack[decided].name);
    text_append(buf, size, &length, ": ");
    add_charge(report, buf, size, &length);
    for (size_t i = 0; i < report->n_packs; i++)
        add_pack(watch->pack[i].name, &report->pack[i], buf, size, &length);
    text_append(buf, size, &length, "; ");
    add_left(report, buf, size, &length);
    return buf;
}
