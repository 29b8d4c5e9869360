/* What a report sets going: log lines, the stop, the status file and its followers, the service
 * manager's line, the words told to the gauge, the state file. */
#include "daemon/parts.h"

#include "act/poweroff.h"
#include "daemon/words.h"
#include "util/clock.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <string.h>
#include <sysexits.h>

static const int64_t STOP_RETRY_us = 5 * 1000000LL;
static const int64_t STATE_FIRST_us = 60 * 1000000LL, STATE_EVERY_us = 900 * 1000000LL;
static const int64_t WORDS_EVERY_us = 60 * 1000000LL;
static const int64_t ALERT_AGAIN_us =
    600 * 1000000LL;                    /* an alert that flickers is logged so often */
static const double PERCENT_STEP = 0.6; /* above a half, so that a charge between two is quiet */

struct journal_about outlet_about(const struct manager *m) {
    return (struct journal_about){.unit = m->config.unit.name, .report = &m->report};
}

/* ---- a failure that lasts is an alert, and logged once --------------------------------------- */

static void note_failure(struct manager *m, unsigned bit, int error, const char *what,
                         const char *path) {
    struct journal_about about = outlet_about(m);
    bool failing = m->outlet.alerts & bit;

    about.alert = status_alert_name(bit);
    if (error < 0 && !failing)
        journal_write(JOURNAL_ALERT, LOG_L_ERROR, &about, "%s %s cannot be written: %s. %s", what,
                      path, strerrordesc_np(-error), status_alert_text(bit));
    else if (error == 0 && failing)
        journal_write(JOURNAL_ALERT_OVER, LOG_L_NOTICE, &about, "%s %s is written again", what,
                      path);
    if (error < 0)
        m->outlet.alerts |= bit;
    else
        m->outlet.alerts &= ~bit;
    m->outlet.alerts_seen = (m->outlet.alerts_seen & ~bit) | (m->outlet.alerts & bit);
}

/* ---- the stop ------------------------------------------------------------------------------- */

static int order(const struct manager *m) {
    const struct report *report = &m->report;
    int decided = report->cause_pack >= 0 ? report->cause_pack : 0;
    struct poweroff_order order = {
        .unit = m->config.unit.name,
        .stage = status_stage_name(report->stage),
        .cause = status_cause_name(report->cause),
        .pack = report->cause_pack >= 0 ? m->config.pack[decided].name : NULL,
        .t_boot_us = clock_boot_us(),
        .t_real_us = clock_real_us(),
        .charge = report->charge,
        .charge_low = report->charge_low,
        .terminal_V = report->pack[decided].terminal_V,
        .rest_V = report->pack[decided].rest_V,
        .left_s = report->left_s,
        .left_least_s = report->left_least_s,
    };

    return poweroff_request(m->config.stop.request, &order);
}

static void retry_stop(struct outlet *out) {
    sd_event_source_set_time(out->stop_timer, (uint64_t)(clock_boot_us() + STOP_RETRY_us));
    sd_event_source_set_enabled(out->stop_timer, SD_EVENT_ONESHOT);
}

/* Says nothing, because saying may take time. Returns 0 or -errno. */
static int give_order(struct manager *m) {
    struct outlet *out = &m->outlet;

    if (m->config.stop.action == CONFIG_ACTION_REPORT) {
        out->request = STATUS_REQUEST_REPORTED;
        return 0;
    }
    int r = order(m);
    out->request = r < 0 ? STATUS_REQUEST_FAILED : STATUS_REQUEST_WRITTEN;
    if (r < 0)
        retry_stop(out);
    return r;
}

static void tell_order(struct manager *m, int r) {
    struct journal_about about = outlet_about(m);
    char why[WORDS_SIZE];

    words_reason(&m->report, &m->watch.config, why, sizeof(why));
    if (m->outlet.request == STATUS_REQUEST_REPORTED) {
        journal_write(JOURNAL_STOP, LOG_L_WARNING, &about,
                      "the unit should stop now, but action = report, so nothing is ordered: %s",
                      why);
        return;
    }
    note_failure(m, STATUS_ALERT_STOP_FAILED, r, "the stop request", m->config.stop.request);
    if (r == 0)
        journal_write(JOURNAL_STOP, LOG_L_WARNING, &about, "power-off is ordered: %s", why);
}

static int on_stop_timer(sd_event_source *source, uint64_t due_us, void *userdata) {
    struct manager *m = userdata;

    (void)source;
    (void)due_us;
    if (m->outlet.request != STATUS_REQUEST_FAILED)
        return 0; /* a reload has changed what is to be ordered */
    tell_order(m, give_order(m));
    outlet_publish(m);
    return 0;
}

/* ---- changes -------------------------------------------------------------------------------- */

static void log_stage(struct manager *m) {
    struct journal_about about = outlet_about(m);
    enum log_level level = m->report.stage > m->outlet.stage ? LOG_L_WARNING : LOG_L_NOTICE;
    char why[WORDS_SIZE];

    journal_write(JOURNAL_STAGE, level, &about, "stage %s, was %s: %s",
                  status_stage_name(m->report.stage), status_stage_name(m->outlet.stage),
                  words_reason(&m->report, &m->watch.config, why, sizeof(why)));
}

void outlet_step(struct manager *m) {
    struct outlet *out = &m->outlet;
    bool changed = m->report.stage != out->stage;
    bool due = m->report.stage == STAGE_LEAVING && out->request == STATUS_REQUEST_NONE;
    int r = due ? give_order(m) : 0;

    if (changed)
        log_stage(m);
    if (due)
        tell_order(m, r);
    out->stage = m->report.stage;
    if (!changed)
        return;
    outlet_publish(m);
    outlet_save_state(m);
    intake_rearm(m);
}

static void log_alert(struct manager *m, int i, bool raised, int64_t t_boot_us) {
    struct journal_about about = outlet_about(m);
    unsigned bit = 1u << i;

    about.alert = status_alert_name(bit);
    if (!about.alert)
        return;
    if (raised && m->outlet.t_alert_us[i] != 0 &&
        t_boot_us - m->outlet.t_alert_us[i] < ALERT_AGAIN_us)
        return;
    if (raised) {
        m->outlet.t_alert_us[i] = t_boot_us;
        journal_write(JOURNAL_ALERT, LOG_L_WARNING, &about, "alert %s: %s", about.alert,
                      status_alert_text(bit));
    } else {
        journal_write(JOURNAL_ALERT_OVER, LOG_L_INFO, &about, "alert %s is over", about.alert);
    }
}

static void look_at_alerts(struct manager *m) {
    struct outlet *out = &m->outlet;
    unsigned now = m->report.alerts | out->alerts, changed = now ^ out->alerts_seen;
    int64_t t_boot_us = clock_boot_us();

    for (int i = 0; changed; i++, changed >>= 1)
        if (changed & 1)
            log_alert(m, i, now >> i & 1, t_boot_us);
    out->alerts_seen = now;
}

/* ---- the status object ---------------------------------------------------------------------- */

/* With `clock = gauge` the watch lives ahead of boot time or behind it; readers know boot time. */
static void lay_on_boot_time(struct report *report, int64_t t_boot_us) {
    int64_t shift_us = t_boot_us - report->t_boot_us;

    report->t_boot_us += shift_us;
    report->stage_since_us += shift_us;
    report->supply_since_us += shift_us;
}

static size_t render(struct manager *m) {
    const struct line_counts *counts = gauge_counts(m->intake.gauge);
    struct report shown = m->report;
    struct status_context context = {
        .unit = m->config.unit.name,
        .pid = m->outlet.pid,
        .t_real_us = clock_real_us(),
        .watch = &m->watch.config,
        .gauge = {.kind = gauge_kind_name((enum gauge_kind)m->config.gauge.kind),
                  .device = m->config.gauge.device,
                  .state = m->intake.state,
                  .lines = counts->lines,
                  .bad_lines = counts->bad_lines,
                  .period_s = m->config.gauge.period_s},
        .action = m->config.stop.action == CONFIG_ACTION_POWEROFF ? STATUS_ACTION_POWEROFF
                                                                  : STATUS_ACTION_REPORT,
        .request = m->outlet.request,
        .alerts = m->outlet.alerts,
    };

    if (m->timeline.by_gauge)
        lay_on_boot_time(&shown, clock_boot_us());
    return status_render(&shown, &context, m->outlet.status, sizeof(m->outlet.status));
}

static void publish_status(struct manager *m) {
    struct outlet *out = &m->outlet;
    size_t length = render(m);

    int r = length > 0 ? statusfile_write(out->file, out->status, length) : -EMSGSIZE;
    note_failure(m, STATUS_ALERT_STATUS_UNWRITABLE, r, "the status file", m->config.files.status);
    if (out->server && length > 0)
        server_publish(out->server, out->status, length);
}

/* ---- words for the service manager and the gauge --------------------------------------------- */

/* At once when its gist changes, else once a minute when its figures have. */
static void send_words(struct manager *m) {
    static const char key_word[] = "STATUS=";
    struct outlet *out = &m->outlet;
    const struct report *report = &m->report;
    unsigned key = 1u << 16 | (unsigned)report->stage | (unsigned)report->supply << 4 |
                   (unsigned)report->blind << 8 | (unsigned)m->intake.state << 10 |
                   (unsigned)(report->samples > 0) << 12;
    char words[WORDS_SIZE];

    if (key == out->words_key && clock_boot_us() - out->t_words_us < WORDS_EVERY_us)
        return;
    memcpy(words, key_word, sizeof(key_word));
    if (report->samples > 0 || m->intake.state == STATUS_GAUGE_OPEN)
        words_status(report, words + sizeof(key_word) - 1, sizeof(words) - sizeof(key_word));
    else
        snprintf(words, sizeof(words), "STATUS=%s, waiting for gauge %s",
                 status_stage_name(report->stage), intake_describe(m));
    out->words_key = key;
    out->t_words_us = clock_boot_us();
    if (strcmp(words, out->words) == 0)
        return;
    memcpy(out->words, words, sizeof(words));
    notify_send(&m->notify, words);
}

/* One that does not take the line now is told again with the next report. */
static void tell_gauge(struct manager *m) {
    struct outlet *out = &m->outlet;
    double percent = 100 * m->report.charge;
    char line[GAUGE_TELL_MAX];

    if (!m->config.gauge.tell || !gauge_is_open(m->intake.gauge))
        return;
    bool moved = isfinite(percent) != isfinite(out->told_percent) ||
                 fabs(percent - out->told_percent) > PERCENT_STEP;
    if ((int)m->report.stage == out->told_stage && !moved)
        return;
    int n = snprintf(line, sizeof(line), "stage=%s", status_stage_name(m->report.stage));
    percent = round(percent);
    if (isfinite(percent))
        snprintf(line + n, sizeof(line) - (size_t)n, " charge=%.0f", percent);
    if (gauge_tell(m->intake.gauge, line) != 0)
        return;
    out->told_stage = (int)m->report.stage;
    out->told_percent = percent;
}

/* ---- the state file ------------------------------------------------------------------------- */

void outlet_save_state(struct manager *m) {
    int64_t t_boot_us = clock_boot_us();
    struct state state;

    if (!m->outlet.state_known)
        return;
    state_take(&m->watch, &m->config, timeline_now_us(&m->timeline, t_boot_us), &state);
    int r = state_save(m->config.files.state, &state);
    m->outlet.t_state_us = t_boot_us;
    note_failure(m, STATUS_ALERT_STATE_UNWRITABLE, r, "the state file", m->config.files.state);
}

/* Soon after the first figures, so that a unit which falls over early has something to go on. */
static void save_state_when_due(struct manager *m) {
    struct outlet *out = &m->outlet;
    int64_t t_boot_us = clock_boot_us();

    if (!out->state_known && m->report.samples > 0) {
        out->state_known = true;
        out->t_state_us = t_boot_us - STATE_EVERY_us + STATE_FIRST_us;
    }
    if (out->state_known && t_boot_us - out->t_state_us >= STATE_EVERY_us)
        outlet_save_state(m);
}

void outlet_publish(struct manager *m) {
    look_at_alerts(m);
    publish_status(m);
    tell_gauge(m);
    send_words(m);
    save_state_when_due(m);
}

/* ---- set up --------------------------------------------------------------------------------- */

/* Another daemon on the same socket would fight over the same files and gauge. Without a socket for
 * any other reason the daemon does its job all the same. */
static int open_server(struct manager *m) {
    const char *path = m->config.files.socket;
    struct server_limits limits = server_limits_default;
    int fd = -1;

    limits.priority = PRIORITY_CLIENT;
    int r = server_activated(&fd);
    if (r == SERVER_E_ABSENT)
        r = server_listen(path, 0666, &fd);
    if (r == SERVER_E_TAKEN) {
        log_error("another daemon answers on %s; stop it, or give this one a [files] socket of its "
                  "own",
                  path);
        return EX_UNAVAILABLE;
    }
    if (r == 0)
        r = server_new(&m->outlet.server, m->event, fd, &limits);
    if (r != 0)
        log_error("socket %s cannot be used: %s; clients have the status file only", path,
                  r == SERVER_E_OTHER ? "something that is no socket stands there"
                                      : strerrordesc_np(-r));
    return 0;
}

int outlet_init(struct manager *m) {
    struct outlet *out = &m->outlet;

    *out = (struct outlet){.pid = getpid(), .told_stage = -1, .told_percent = UNKNOWN};
    int r = statusfile_new(&out->file, m->config.files.status);
    if (r < 0) {
        log_error("status file %s: %s", m->config.files.status, strerrordesc_np(-r));
        return EX_OSERR;
    }
    r = sd_event_add_time(m->event, &out->stop_timer, CLOCK_BOOTTIME, 0, 0, on_stop_timer, m);
    if (r >= 0)
        r = sd_event_source_set_enabled(out->stop_timer, SD_EVENT_OFF);
    if (r < 0) {
        log_error("event loop: %s", strerrordesc_np(-r));
        return EX_OSERR;
    }
    return open_server(m);
}

void outlet_done(struct manager *m) {
    sd_event_source_disable_unref(m->outlet.stop_timer);
    server_free(m->outlet.server);
    statusfile_free(m->outlet.file);
}
