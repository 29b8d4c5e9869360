/* Serial ports coming and going, told by udev: an fd to wait on and events to take from it. */
#pragma once

#include <stdbool.h>

enum { HOTPLUG_NODE_MAX = 64, HOTPLUG_USB_ID_MAX = 8, HOTPLUG_SERIAL_MAX = 64 };

struct hotplug_event {
    bool added;                      /* else removed */
    char node[HOTPLUG_NODE_MAX];     /* /dev/ttyACM0 */
    char vendor[HOTPLUG_USB_ID_MAX]; /* "1209", lower case; "" = no USB device or not known */
    char product[HOTPLUG_USB_ID_MAX];
    char serial[HOTPLUG_SERIAL_MAX]; /* "" = has none */
};

struct hotplug;

/* 0 or -errno. Without a running udevd nothing is ever announced; the caller's back-off remains. */
int hotplug_new(struct hotplug **ret);
void hotplug_free(struct hotplug *hotplug);

static inline void hotplug_free_p(struct hotplug **hotplug) {
    hotplug_free(*hotplug);
}

int hotplug_fd(const struct hotplug *hotplug);

/* 1 and the next event, or 0: none waits. Call until 0. */
int hotplug_next(struct hotplug *hotplug, struct hotplug_event *ret);
