/* From the gauge to the watch: opening with back-off, reading, loss and return, silence. */
#include "daemon/parts.h"

#include "util/clock.h"

#include <math.h>
#include <string.h>

static const int64_t SECOND_us = 1000000;
static const int64_t WAIT_FIRST_us = 500000, WAIT_MOST_us = 30000000;
static const int64_t TICK_LEAST_us = 1000000, TICK_MOST_us = 5000000;
static const int64_t SILENCE_MOST_us = 600 * 1000000LL;
static const int64_t BAD_LINES_us = 3600 * 1000000LL; /* between two log lines about them */
static const double EDGE_PERIODS = 2.5;
static const uint64_t ACCURACY_us = 50000;

/* A gauge that floods gets this many turns in this time; the rest of the loop gets what is left. */
enum { FLOOD_us = 100000, FLOOD_TURNS = 50 };

static int64_t us(double seconds) {
    return (int64_t)(seconds * 1e6);
}

static int64_t held(int64_t value, int64_t least, int64_t most) {
    return value < least ? least : value > most ? most : value;
}

static int64_t earlier(int64_t a, int64_t b) {
    return a < b ? a : b;
}

static void arm(sd_event_source *timer, int64_t due_us) {
    sd_event_source_set_time(timer, (uint64_t)due_us);
    sd_event_source_set_enabled(timer, SD_EVENT_ONESHOT);
}

const char *intake_describe(const struct manager *m) {
    return gauge_describe(m->intake.gauge);
}

/* ---- silence -------------------------------------------------------------------------------- */

/* How long the watch may go without a step. In `edge` a countdown runs, so it is shorter there. */
static int64_t allowance_us(const struct manager *m) {
    const struct config_gauge *gauge = &m->config.gauge;
    int64_t silent_us = us(gauge->silent_s);

    if (m->report.stage != STAGE_EDGE)
        return silent_us;
    return earlier(silent_us, held(us(EDGE_PERIODS * gauge->period_s), SECOND_us, silent_us));
}

static int64_t next_tick_us(const struct manager *m) {
    const struct intake *in = &m->intake;
    int64_t every_us = held(us(m->config.gauge.period_s), TICK_LEAST_us, TICK_MOST_us);

    return in->t_fed_us + (in->ticked ? every_us : allowance_us(m));
}

void intake_rearm(struct manager *m) {
    m->intake.t_tick_due_us = next_tick_us(m);
    arm(m->intake.tick_timer, m->intake.t_tick_due_us);
}

/* While samples come the timer must never expire, yet it is moved only now and then: when half of
 * what it had is used up. */
static void put_off_tick(struct manager *m) {
    struct intake *in = &m->intake;

    if (in->t_tick_due_us - in->t_fed_us < allowance_us(m) / 2)
        intake_rearm(m);
}

void intake_tick(struct manager *m, int64_t t_boot_us) {
    watch_tick(&m->watch, timeline_now_us(&m->timeline, t_boot_us), &m->report);
    m->intake.t_fed_us = t_boot_us;
    m->intake.ticked = true;
    outlet_step(m);
    outlet_publish(m);
}

/* ---- opening, losing ------------------------------------------------------------------------ */

static int on_gauge(sd_event_source *source, int fd, uint32_t revents, void *userdata);

static void drop_io(struct intake *in) {
    in->gauge_io = sd_event_source_disable_unref(in->gauge_io);
}

/* Each reason once between two returns. */
static void tell_why(struct manager *m, int error) {
    struct intake *in = &m->intake;
    uint32_t bit = 1u << (error > 0 && error < 31 ? error : 31);
    struct journal_about about = outlet_about(m);

    if (in->told_why & bit)
        return;
    in->told_why |= bit;
    in->told_lost = true;
    journal_write(JOURNAL_GAUGE_LOST, LOG_L_WARNING, &about, "gauge: %s",
                  gauge_error_text(in->gauge, error));
}

static void try_later(struct intake *in) {
    arm(in->open_timer, clock_boot_us() + in->wait_us);
    in->wait_us = earlier(2 * in->wait_us, WAIT_MOST_us);
}

static void lose(struct manager *m, int error) {
    struct intake *in = &m->intake;

    drop_io(in);
    tell_why(m, error);
    gauge_close(in->gauge);
    if (in->state == STATUS_GAUGE_OPEN)
        in->state = STATUS_GAUGE_LOST;
    try_later(in);
}

static int watch_fd(struct manager *m) {
    struct intake *in = &m->intake;

    int r = sd_event_add_io(m->event, &in->gauge_io, gauge_fd(in->gauge), EPOLLIN, on_gauge, m);
    if (r < 0)
        return r;
    r = sd_event_source_set_priority(in->gauge_io, PRIORITY_GAUGE);
    if (r < 0)
        return r;
    return sd_event_source_set_ratelimit(in->gauge_io, FLOOD_us, FLOOD_TURNS);
}

static void open_now(struct manager *m) {
    struct intake *in = &m->intake;

    drop_io(in);
    int r = gauge_open(in->gauge);
    if (r == 0)
        r = watch_fd(m);
    if (r != 0) {
        lose(m, r);
        return;
    }
    sd_event_source_set_enabled(in->open_timer, SD_EVENT_OFF);
    in->state = STATUS_GAUGE_OPEN;
    in->t_open_us = clock_boot_us();
    m->outlet.told_stage = -1;
    outlet_publish(m);
}

/* Only a line proves that the gauge is back: a port that opens and dies again is not. */
static void note_line(struct manager *m, int64_t t_boot_us) {
    struct intake *in = &m->intake;
    struct journal_about about = outlet_about(m);

    in->t_line_us = t_boot_us;
    if (!in->told_lost && in->wait_us == WAIT_FIRST_us)
        return;
    in->wait_us = WAIT_FIRST_us;
    in->silence_us = us(m->config.gauge.silent_s);
    if (in->told_lost)
        journal_write(JOURNAL_GAUGE_BACK, LOG_L_NOTICE, &about, "gauge: %s is back",
                      gauge_describe(in->gauge));
    in->told_lost = false;
    in->told_why = 0;
}

static int on_open_timer(sd_event_source *source, uint64_t due_us, void *userdata) {
    (void)source;
    (void)due_us;
    open_now(userdata);
    return 0;
}

static int on_hotplug(sd_event_source *source, int fd, uint32_t revents, void *userdata) {
    struct manager *m = userdata;
    struct intake *in = &m->intake;
    struct hotplug_event event;

    (void)source;
    (void)fd;
    (void)revents;
    while (hotplug_next(in->hotplug, &event) == 1) {
        if (!gauge_concerns(in->gauge, &event))
            continue;
        if (event.added && !gauge_is_open(in->gauge)) {
            in->wait_us = WAIT_FIRST_us;
            open_now(m);
        } else if (!event.added && gauge_is_open(in->gauge)) {
            lose(m, GAUGE_E_GONE);
        }
    }
    return 0;
}

/* ---- reading -------------------------------------------------------------------------------- */

static bool feed(struct manager *m, const struct frame *frame, int64_t t_boot_us) {
    struct sample sample;
    int64_t t_us = timeline_sample_us(&m->timeline, t_boot_us, frame->clock_s);

    if (channel_map_apply(&m->intake.channels, frame, t_us, &sample) == 0)
        return false;
    watch_feed(&m->watch, &sample, &m->report);
    m->intake.t_fed_us = t_boot_us;
    m->intake.ticked = false;
    outlet_step(m);
    return true;
}

static void tell_bad_lines(struct manager *m, int64_t t_boot_us) {
    struct intake *in = &m->intake;
    const struct line_counts *counts = gauge_counts(in->gauge);
    struct journal_about about = outlet_about(m);

    if (counts->bad_lines == in->bad_told ||
        (in->t_bad_told_us >= 0 && t_boot_us - in->t_bad_told_us < BAD_LINES_us))
        return;
    journal_write(JOURNAL_LINES_BAD, LOG_L_NOTICE, &about,
                  "gauge: %llu lines could not be read, the last one began \"%s\": %s",
                  (unsigned long long)(counts->bad_lines - in->bad_told), counts->last_excerpt,
                  line_fault_text(counts->last_fault));
    in->bad_told = counts->bad_lines;
    in->t_bad_told_us = t_boot_us;
}

/* A gauge that tells nothing but rubbish shall be seen doing so before it counts as silent. */
static bool bad_lines_due(struct manager *m, int64_t t_boot_us) {
    struct intake *in = &m->intake;
    uint64_t bad_lines = gauge_counts(in->gauge)->bad_lines;

    if (bad_lines == in->bad_shown || t_boot_us - in->t_bad_shown_us < SECOND_us)
        return false;
    in->bad_shown = bad_lines;
    in->t_bad_shown_us = t_boot_us;
    return true;
}

static int on_gauge(sd_event_source *source, int fd, uint32_t revents, void *userdata) {
    struct manager *m = userdata;
    struct frame frame;
    bool fed = false;

    (void)source;
    (void)fd;
    (void)revents;
    int r = gauge_read(m->intake.gauge);
    int64_t t_boot_us = clock_boot_us();
    while (gauge_next(m->intake.gauge, &frame) == 1) {
        note_line(m, t_boot_us);
        if (feed(m, &frame, t_boot_us))
            fed = true;
    }
    tell_bad_lines(m, t_boot_us);
    if (fed)
        put_off_tick(m);
    if (r != 0)
        lose(m, r);
    if (fed || r != 0 || bad_lines_due(m, t_boot_us))
        outlet_publish(m);
    return 0;
}

/* A serial port may stay open and dead, as when its node was renumbered under us. */
static void revive_silent_port(struct manager *m, int64_t t_boot_us) {
    struct intake *in = &m->intake;
    struct journal_about about = outlet_about(m);
    int64_t heard_us = in->t_line_us > in->t_open_us ? in->t_line_us : in->t_open_us;

    if (m->config.gauge.kind != GAUGE_SERIAL || !gauge_is_open(in->gauge) ||
        t_boot_us - heard_us < in->silence_us)
        return;
    if (!in->told_lost)
        journal_write(JOURNAL_GAUGE_LOST, LOG_L_WARNING, &about,
                      "gauge: %s is open but silent; it is opened anew", gauge_describe(in->gauge));
    in->told_lost = true;
    in->silence_us = earlier(2 * in->silence_us, SILENCE_MOST_us);
    gauge_close(in->gauge);
    open_now(m);
}

static int on_tick_timer(sd_event_source *source, uint64_t due_us, void *userdata) {
    struct manager *m = userdata;
    int64_t t_boot_us = clock_boot_us();

    (void)source;
    (void)due_us;
    if (t_boot_us >= next_tick_us(m)) {
        revive_silent_port(m, t_boot_us);
        intake_tick(m, t_boot_us);
    }
    intake_rearm(m);
    return 0;
}

/* ---- set up --------------------------------------------------------------------------------- */

static int add_timer(struct manager *m, sd_event_source **ret, sd_event_time_handler_t handler) {
    int r = sd_event_add_time(m->event, ret, CLOCK_BOOTTIME, 0, ACCURACY_us, handler, m);

    if (r < 0)
        return r;
    r = sd_event_source_set_priority(*ret, PRIORITY_TIMER);
    return r < 0 ? r : sd_event_source_set_enabled(*ret, SD_EVENT_OFF);
}

/* Without udev the gauge is found by trying again. */
static void add_hotplug(struct manager *m) {
    struct intake *in = &m->intake;

    if (m->config.gauge.kind != GAUGE_SERIAL || in->hotplug)
        return;
    int r = hotplug_new(&in->hotplug);
    if (r == 0)
        r = sd_event_add_io(m->event, &in->hotplug_io, hotplug_fd(in->hotplug), EPOLLIN, on_hotplug,
                            m);
    if (r >= 0)
        r = sd_event_source_set_priority(in->hotplug_io, PRIORITY_TIMER);
    if (r < 0)
        log_warning("udev cannot be listened to (%s); a gauge that comes back is found within %d s",
                    strerrordesc_np(-r), (int)(WAIT_MOST_us / SECOND_us));
}

int intake_init(struct manager *m) {
    struct intake *in = &m->intake;
    struct gauge_config config;

    *in = (struct intake){
        .wait_us = WAIT_FIRST_us, .t_bad_told_us = -1, .silence_us = us(m->config.gauge.silent_s)};
    config_channels(&m->config, &in->channels);
    config_gauge(&m->config, &config);
    int r = gauge_new(&in->gauge, &config);
    if (r != 0)
        return r;
    r = add_timer(m, &in->open_timer, on_open_timer);
    if (r < 0)
        return r;
    r = add_timer(m, &in->tick_timer, on_tick_timer);
    if (r < 0)
        return r;
    add_hotplug(m);
    return 0;
}

void intake_start(struct manager *m) {
    m->intake.t_fed_us = m->intake.t_line_us = clock_boot_us();
    open_now(m);
    intake_rearm(m);
}

void intake_change(struct manager *m, struct gauge *gauge) {
    struct intake *in = &m->intake;

    config_channels(&m->config, &in->channels);
    in->silence_us = us(m->config.gauge.silent_s);
    if (gauge) {
        drop_io(in);
        gauge_free(in->gauge);
        in->gauge = gauge;
        in->state = STATUS_GAUGE_ABSENT;
        in->wait_us = WAIT_FIRST_us;
        in->told_lost = false;
        in->told_why = 0;
        in->bad_told = in->bad_shown = 0;
        add_hotplug(m);
        open_now(m);
    }
    intake_rearm(m);
}

void intake_done(struct manager *m) {
    struct intake *in = &m->intake;

    drop_io(in);
    sd_event_source_disable_unref(in->hotplug_io);
    sd_event_source_disable_unref(in->open_timer);
    sd_event_source_disable_unref(in->tick_timer);
    hotplug_free(in->hotplug);
    gauge_free(in->gauge);
}
