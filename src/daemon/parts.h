/* The manager's inside, shared by its three parts: manager.c (start, signals, reload, end),
 * intake.c (from the gauge to the watch, and time that passes without one) and outlet.c (what a
 * report sets going). */
#pragma once

#include "core/watch.h"
#include "daemon/config.h"
#include "daemon/journal.h"
#include "daemon/notify.h"
#include "daemon/state.h"
#include "daemon/timeline.h"
#include "gauge/channel.h"
#include "gauge/gauge.h"
#include "gauge/hotplug.h"
#include "publish/server.h"
#include "publish/status.h"
#include "publish/statusfile.h"

#include <stdbool.h>
#include <stdint.h>
#include <systemd/sd-event.h>

enum {
    /* Signals above the gauge, so that a gauge which floods us cannot keep us from leaving. */
    PRIORITY_SIGNAL = SD_EVENT_PRIORITY_IMPORTANT - 10,
    PRIORITY_GAUGE = SD_EVENT_PRIORITY_IMPORTANT,
    PRIORITY_TIMER = SD_EVENT_PRIORITY_NORMAL,
    PRIORITY_CLIENT = SD_EVENT_PRIORITY_IDLE,
    WORDS_SIZE = 512,
};

struct intake {
    struct gauge *gauge;
    struct hotplug *hotplug; /* NULL for a gauge that udev does not know */
    struct channel_map channels;
    sd_event_source *gauge_io, *hotplug_io, *open_timer, *tick_timer;
    enum status_gauge_state state;
    int64_t wait_us;       /* before the next try to open */
    int64_t t_open_us;     /* when it was opened last */
    int64_t t_fed_us;      /* boot time when the watch was last fed or, silent, ticked */
    int64_t t_line_us;     /* boot time of the last line, or of the start */
    int64_t t_tick_due_us; /* when the tick timer expires */
    int64_t silence_us;    /* an open serial port silent for this long is opened anew */
    bool ticked;           /* the watch's last step was a tick */
    bool told_lost;        /* the loss was logged, its return not yet */
    uint32_t told_why;     /* reasons logged since, one bit each */
    uint64_t bad_told;     /* bad lines as last logged */
    int64_t t_bad_told_us; /* -1 = never */
    uint64_t bad_shown;    /* bad lines as last published for their own sake */
    int64_t t_bad_shown_us;
};

struct outlet {
    struct server *server; /* NULL when no socket could be had */
    struct statusfile *file;
    sd_event_source *stop_timer;
    pid_t pid; /* ours; glibc asks the kernel each time */
    enum status_request request;
    enum stage stage;       /* as last logged */
    unsigned alerts;        /* enum status_alert: the daemon's own, now */
    unsigned alerts_seen;   /* all alerts, as last looked at */
    int64_t t_alert_us[32]; /* when each was logged last, 0 = never */
    int64_t t_state_us;     /* when the state was last written, or is counted from */
    bool state_known;       /* a believable sample was seen, so there is something to keep */
    int64_t t_words_us;     /* when STATUS= was last sent */
    unsigned words_key;     /* stage, supply, blind as last sent */
    int told_stage;         /* as last told to the gauge, -1 = not yet */
    double told_percent;    /* UNKNOWN = not told */
    char words[WORDS_SIZE]; /* STATUS= as last sent */
    char status[STATUS_SIZE_MAX];
};

struct manager {
    const char *config_path;
    sd_event *event;
    struct config config;
    struct watch watch;
    struct timeline timeline;
    struct report report; /* the newest, in the watch's time */
    struct intake intake;
    struct outlet outlet;
    struct notify notify;
};

/* ---- intake --------------------------------------------------------------------------------- */

/* Sets up the gauge, its timers and udev; opens nothing. Returns 0, -errno or enum gauge_error. */
int intake_init(struct manager *m);
void intake_start(struct manager *m); /* opens the gauge, starts the clock of silence */
void intake_done(struct manager *m);

/* Changes over to the gauge of a new config; gauge (may be NULL: the same one stays) is taken. */
void intake_change(struct manager *m, struct gauge *gauge);

/* Time passed: the watch is told so and the report goes out. */
void intake_tick(struct manager *m, int64_t t_boot_us);

/* The tick timer is due when the rules of silence.. say; called when they may have changed. */
void intake_rearm(struct manager *m);

const char *intake_describe(const struct manager *m);

/* ---- outlet --------------------------------------------------------------------------------- */

int outlet_init(struct manager *m); /* 0 or an exit code; what is wrong is logged */
void outlet_done(struct manager *m);

/* After every step of the watch: what a change sets going, at once. */
void outlet_step(struct manager *m);

/* After a turn's last step: status file, followers, service manager, gauge, state file. */
void outlet_publish(struct manager *m);

void outlet_save_state(struct manager *m);

/* Figures for log lines. */
struct journal_about outlet_about(const struct manager *m);
