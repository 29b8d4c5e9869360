/* Start, signals, reload and end of the daemon. */
#include "daemon/manager.h"

#include "act/poweroff.h"
#include "daemon/parts.h"
#include "daemon/words.h"
#include "util/cleanup.h"
#include "util/clock.h"
#include "util/version.h"

#include <errno.h>
#include <signal.h>
#include <string.h>
#include <sysexits.h>

/* ---- config --------------------------------------------------------------------------------- */

static void log_problems(const struct config_problems *problems) {
    const char *line = problems->text;
    size_t told = 0;

    for (const char *end; (end = strchr(line, '\n')); line = end + 1, told++)
        log_error("%.*s", (int)(end - line), line);
    if (told < problems->n)
        log_error("and %zu problems more", problems->n - told);
}

static int load(const char *path, struct config *ret) {
    scoped(free_p) struct config_problems *problems = malloc(sizeof(*problems));

    if (!problems)
        return -ENOMEM;
    int r = config_load(path, ret, problems);
    if (r != 0)
        log_problems(problems);
    return r;
}

/* ---- what was learned ----------------------------------------------------------------------- */

static void restore(struct manager *m, const struct state *state, double gone_s, bool same_boot) {
    struct watch_memory memory;

    if (state_match(state, &m->config, &memory) == 0)
        return; /* other packs altogether: their stage says nothing about these */
    watch_restore(&m->watch, &memory, gone_s, same_boot);
}

static void set_aside(struct manager *m, const char *why) {
    const char *path = m->config.files.state;
    struct journal_about about = {.unit = m->config.unit.name};

    int r = state_set_aside(path);
    journal_write(
        JOURNAL_STATE, LOG_L_WARNING, &about,
        "state file %s is not used: %s; it is %s%s, and the packs are learned anew", path, why,
        r == 0 ? "kept as .bad" : "left where it is: ", r == 0 ? "" : strerrordesc_np(-r));
}

/* A unit that went down looks like one that failed: the run before says why it ended. */
static void tell_how_it_ended(const struct manager *m, const struct watch_memory *memory) {
    struct journal_about about = {.unit = m->config.unit.name};

    if (memory->stage >= STAGE_EDGE)
        journal_write(JOURNAL_STATE, LOG_L_NOTICE, &about,
                      "the run before ended in stage %s, because %s",
                      status_stage_name(memory->stage), words_rule(memory->cause));
}

/* What an earlier run has learned. A reported stop (action = report) is not gone on with: nothing
 * was under way, and starting the daemon anew is how a person clears it. */
static void recall(struct manager *m) {
    struct state state;
    struct state_time now;
    const char *why;
    bool same_boot;

    int r = state_load(m->config.files.state, &state, &why);
    if (r == STATE_E_BAD)
        set_aside(m, why);
    else if (r < 0 && r != -ENOENT)
        log_warning("state file %s cannot be read: %s; the packs are learned anew",
                    m->config.files.state, strerrordesc_np(-r));
    if (r != 0)
        return;
    tell_how_it_ended(m, &state.memory);
    state_now(&now);
    double gone_s = state_gone_s(&state.time, &now, &same_boot);
    if (state.memory.stage == STAGE_LEAVING && m->config.stop.action == CONFIG_ACTION_REPORT) {
        state.memory.stage = STAGE_AMPLE;
        state.memory.stage_since_us = now.t_boot_us;
        state.memory.cause = CAUSE_NONE;
    }
    restore(m, &state, gone_s, same_boot);
}

/* An order of an earlier run would take down a unit that may be well by now. One that was given in
 * this boot is given again by the stage that was restored. */
static void withdraw_stale_order(const struct manager *m) {
    int r = poweroff_withdraw(m->config.stop.request);

    if (r == 1)
        log_notice("an old stop request %s was taken away", m->config.stop.request);
    else if (r < 0)
        log_error("the old stop request %s cannot be taken away: %s; remove it by hand",
                  m->config.stop.request, strerrordesc_np(-r));
}

static int begin_watch(struct manager *m) {
    struct watch_config config;
    int64_t t_boot_us = clock_boot_us();

    config_watch(&m->config, &config);
    timeline_init(&m->timeline, m->config.gauge.clock == CONFIG_CLOCK_GAUGE, t_boot_us);
    return watch_init(&m->watch, &config, t_boot_us);
}

/* ---- reload --------------------------------------------------------------------------------- */

static bool same_gauge(const struct config_gauge *a, const struct config_gauge *b) {
    return a->kind == b->kind && strcmp(a->device, b->device) == 0 && a->baud == b->baud &&
           a->tell == b->tell && a->reset_on_open == b->reset_on_open;
}

/* What may fail is made first, so that a reload happens wholly or not at all. */
struct change {
    struct config config;
    struct gauge *gauge; /* NULL = the same one stays */
    struct statusfile *file;
};

static int prepare(const struct manager *m, struct change *change) {
    struct gauge_config gauge;

    int r = load(m->config_path, &change->config);
    if (r != 0)
        return r;
    r = statusfile_new(&change->file, change->config.files.status);
    if (r != 0 || same_gauge(&change->config.gauge, &m->config.gauge))
        return r;
    config_gauge(&change->config, &gauge);
    r = gauge_new(&change->gauge, &gauge);
    if (r != 0)
        change->file = statusfile_free(change->file);
    return r;
}

static void change_stop(struct manager *m, const struct config_stop *before) {
    const struct config_stop *now = &m->config.stop;

    if (before->action != now->action || strcmp(before->request, now->request) != 0)
        m->outlet.request = STATUS_REQUEST_NONE; /* a stage `leaving` orders it anew */
}

/* Takes the new config; what was learned of packs of the same name, cells and series goes on. */
static void commit(struct manager *m, struct change *change) {
    struct config_stop stop = m->config.stop;
    struct state learned;

    state_take(&m->watch, &m->config, timeline_now_us(&m->timeline, clock_boot_us()), &learned);
    if (strcmp(change->config.files.socket, m->config.files.socket) != 0)
        log_notice("[files] socket changes at the next start");
    m->config = change->config;
    begin_watch(m); /* cannot fail: the config was checked */
    restore(m, &learned, 0, true);
    statusfile_free(m->outlet.file);
    m->outlet.file = change->file;
    change_stop(m, &stop);
    intake_change(m, change->gauge);
    intake_tick(m, clock_boot_us());
}

static void reload(struct manager *m) {
    scoped(free_p) struct change *change = calloc(1, sizeof(*change));
    struct journal_about about = outlet_about(m);

    notify_send(&m->notify, "RELOADING=1");
    int r = change ? prepare(m, change) : -ENOMEM;
    if (r == 0) {
        commit(m, change);
        journal_write(JOURNAL_CONFIG_TAKEN, LOG_L_NOTICE, &about, "config %s is taken anew",
                      m->config_path);
    } else {
        journal_write(JOURNAL_CONFIG_REFUSED, LOG_L_ERROR, &about,
                      "config %s is refused%s%s; the one before stays in force", m->config_path,
                      r < 0 ? ": " : "", r < 0 ? strerrordesc_np(-r) : "");
    }
    notify_send(&m->notify, "READY=1");
}

static int on_reload(sd_event_source *source, const struct signalfd_siginfo *info, void *userdata) {
    (void)source;
    (void)info;
    reload(userdata);
    return 0;
}

static int on_leave(sd_event_source *source, const struct signalfd_siginfo *info, void *userdata) {
    struct manager *m = userdata;

    (void)source;
    (void)info;
    return sd_event_exit(m->event, EX_OK);
}

/* ---- start and end -------------------------------------------------------------------------- */

static int add_signals(struct manager *m) {
    static const struct {
        int number;
        sd_event_signal_handler_t handler;
    } signals[] = {{SIGHUP, on_reload}, {SIGTERM, on_leave}, {SIGINT, on_leave}};
    sigset_t all;

    signal(SIGPIPE, SIG_IGN);
    sigemptyset(&all);
    for (size_t i = 0; i < sizeof(signals) / sizeof(signals[0]); i++)
        sigaddset(&all, signals[i].number);
    if (sigprocmask(SIG_BLOCK, &all, NULL) < 0)
        return -errno;
    for (size_t i = 0; i < sizeof(signals) / sizeof(signals[0]); i++) {
        sd_event_source *source = NULL;
        int r = sd_event_add_signal(m->event, &source, signals[i].number, signals[i].handler, m);
        if (r < 0)
            return r;
        sd_event_source_set_priority(source, PRIORITY_SIGNAL);
        sd_event_source_set_floating(source, true);
        sd_event_source_unref(source);
    }
    return 0;
}

static int set_up(struct manager *m) {
    int r = load(m->config_path, &m->config);
    if (r != 0)
        return r == -ENOENT || r == -EACCES ? EX_NOINPUT : r == -ENOMEM ? EX_OSERR : EX_CONFIG;
    if (begin_watch(m) != 0) {
        log_error("%s: the watch refuses these figures; report it with the config", m->config_path);
        return EX_CONFIG;
    }
    r = sd_event_new(&m->event);
    if (r >= 0)
        r = add_signals(m);
    if (r < 0) {
        log_error("event loop: %s", strerrordesc_np(-r));
        return EX_OSERR;
    }
    r = notify_open(&m->notify, m->event);
    if (r < 0)
        log_warning("NOTIFY_SOCKET cannot be used (%s); the service manager is told nothing",
                    strerrordesc_np(-r));
    r = outlet_init(m);
    if (r != 0)
        return r;
    r = intake_init(m);
    if (r != 0)
        log_error("gauge %s cannot be set up%s%s", m->config.gauge.device, r < 0 ? ": " : "",
                  r < 0 ? strerrordesc_np(-r) : "");
    return r == 0 ? 0 : EX_OSERR;
}

int manager_new(struct manager **ret, const char *config_path) {
    scoped(manager_free_p) struct manager *m = calloc(1, sizeof(*m));

    if (!m)
        return EX_OSERR;
    m->notify.fd = -1;
    m->config_path = config_path;
    int r = set_up(m);
    if (r != 0)
        return r;
    withdraw_stale_order(m);
    recall(m);
    *ret = m;
    m = NULL;
    return 0;
}

int manager_run(struct manager *m) {
    struct journal_about about = {.unit = m->config.unit.name};

    intake_tick(m, clock_boot_us());
    intake_start(m);
    journal_write(JOURNAL_READY, LOG_L_NOTICE, &about,
                  "brinkd " BRINK_VERSION " watches %s by gauge %s, action = %s",
                  m->config.unit.name, intake_describe(m),
                  m->config.stop.action == CONFIG_ACTION_POWEROFF ? "poweroff" : "report");
    notify_send(&m->notify, "READY=1");
    int r = sd_event_loop(m->event);
    notify_send(&m->notify, "STOPPING=1");
    if (r < 0)
        log_error("event loop: %s", strerrordesc_np(-r));
    outlet_save_state(m);
    about.report = &m->report;
    journal_write(JOURNAL_LEAVES, LOG_L_NOTICE, &about, "brinkd leaves");
    return r < 0 ? EX_SOFTWARE : r;
}

void manager_free(struct manager *m) {
    if (!m)
        return;
    intake_done(m);
    outlet_done(m);
    notify_close(&m->notify);
    sd_event_unref(m->event);
    free(m);
}
