/* See notify.h. */
#include "daemon/notify.h"

#include <errno.h>
#include <stddef.h>
#include <stdlib.h>
#include <string.h>
#include <systemd/sd-daemon.h>
#include <unistd.h>

/* That of the timers: a loop that does not come round to them hangs. */
static const int64_t PRIORITY_WATCHDOG = SD_EVENT_PRIORITY_NORMAL;

/* 1 = there is one, 0 = none. */
static int find_manager(struct notify *notify) {
    const char *path = getenv("NOTIFY_SOCKET");
    size_t length = path ? strlen(path) : 0;

    if (length == 0)
        return 0;
    if ((path[0] != '/' && path[0] != '@') || length >= sizeof(notify->address.sun_path))
        return -EINVAL;
    memcpy(notify->address.sun_path, path, length);
    if (path[0] == '@')
        notify->address.sun_path[0] = '\0'; /* the abstract namespace */
    notify->length = (socklen_t)(offsetof(struct sockaddr_un, sun_path) + length);
    return 1;
}

static int on_watchdog(sd_event_source *source, uint64_t due_us, void *userdata) {
    struct notify *notify = userdata;

    (void)due_us;
    notify_send(notify, "WATCHDOG=1");
    sd_event_source_set_time_relative(source, notify->watchdog_us);
    return sd_event_source_set_enabled(source, SD_EVENT_ONESHOT);
}

/* Twice in the time that the manager allows, and early enough to share another wake-up. */
static int begin_watchdog(struct notify *notify, sd_event *event) {
    uint64_t allowed_us = 0;

    if (sd_watchdog_enabled(0, &allowed_us) <= 0)
        return 0;
    notify->watchdog_us = allowed_us / 2;
    int r = sd_event_add_time_relative(event, &notify->watchdog, CLOCK_MONOTONIC,
                                       notify->watchdog_us, allowed_us / 4, on_watchdog, notify);
    return r < 0 ? r : sd_event_source_set_priority(notify->watchdog, PRIORITY_WATCHDOG);
}

void notify_close(struct notify *notify) {
    sd_event_source_disable_unref(notify->watchdog);
    if (notify->fd >= 0)
        close(notify->fd);
    *notify = (struct notify){.fd = -1};
}

int notify_open(struct notify *notify, sd_event *event) {
    *notify = (struct notify){.fd = -1, .address = {.sun_family = AF_UNIX}};
    int r = find_manager(notify);
    if (r <= 0)
        return r;
    notify->fd = socket(AF_UNIX, SOCK_DGRAM | SOCK_CLOEXEC | SOCK_NONBLOCK, 0);
    r = notify->fd < 0 ? -errno : begin_watchdog(notify, event);
    if (r < 0)
        notify_close(notify);
    return r;
}

int notify_send(const struct notify *notify, const char *text) {
    if (notify->fd < 0)
        return 0;
    ssize_t n = sendto(notify->fd, text, strlen(text), MSG_NOSIGNAL,
                       (const struct sockaddr *)&notify->address, notify->length);
    return n < 0 ? -errno : 0;
}
