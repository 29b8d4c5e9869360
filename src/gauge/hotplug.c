/* The udev monitor over serial ports. It listens to udevd and not to the kernel, so that an added
 * node has its group and mode by the time the event comes.
 */
#include "gauge/hotplug.h"

#include "util/cleanup.h"

#include <errno.h>
#include <libudev.h>
#include <stdio.h>
#include <string.h>

struct hotplug {
    struct udev *udev;
    struct udev_monitor *monitor;
};

static void device_unref_p(struct udev_device **device) {
    udev_device_unref(*device);
}

void hotplug_free(struct hotplug *hotplug) {
    if (!hotplug)
        return;
    udev_monitor_unref(hotplug->monitor);
    udev_unref(hotplug->udev);
    free(hotplug);
}

static int start(struct hotplug *hotplug) {
    hotplug->udev = udev_new();
    if (!hotplug->udev)
        return -ENOMEM;
    errno = 0;
    hotplug->monitor = udev_monitor_new_from_netlink(hotplug->udev, "udev");
    if (!hotplug->monitor)
        return errno > 0 ? -errno : -ENOMEM;
    int r = udev_monitor_filter_add_match_subsystem_devtype(hotplug->monitor, "tty", NULL);
    return r < 0 ? r : udev_monitor_enable_receiving(hotplug->monitor);
}

int hotplug_new(struct hotplug **ret) {
    struct hotplug *hotplug = calloc(1, sizeof *hotplug);
    int r = hotplug ? start(hotplug) : -ENOMEM;
    if (r < 0) {
        hotplug_free(hotplug);
        return r;
    }
    *ret = hotplug;
    return 0;
}

int hotplug_fd(const struct hotplug *hotplug) {
    return udev_monitor_get_fd(hotplug->monitor);
}

static void copy_text(char *to, size_t size, const char *text) {
    snprintf(to, size, "%s", text ? text : "");
}

/* The USB device above the port says it best; of a removed port only udev's properties are left. */
static void fill_identity(struct udev_device *device, struct hotplug_event *event) {
    struct udev_device *usb =
        udev_device_get_parent_with_subsystem_devtype(device, "usb", "usb_device");
    const char *vendor = usb ? udev_device_get_sysattr_value(usb, "idVendor") : NULL;
    if (vendor) {
        copy_text(event->vendor, sizeof event->vendor, vendor);
        copy_text(event->product, sizeof event->product,
                  udev_device_get_sysattr_value(usb, "idProduct"));
        copy_text(event->serial, sizeof event->serial,
                  udev_device_get_sysattr_value(usb, "serial"));
        return;
    }
    copy_text(event->vendor, sizeof event->vendor,
              udev_device_get_property_value(device, "ID_VENDOR_ID"));
    copy_text(event->product, sizeof event->product,
              udev_device_get_property_value(device, "ID_MODEL_ID"));
    copy_text(event->serial, sizeof event->serial,
              udev_device_get_property_value(device, "ID_SERIAL_SHORT"));
}

static bool fill_event(struct udev_device *device, struct hotplug_event *ret) {
    const char *action = udev_device_get_action(device);
    const char *node = udev_device_get_devnode(device);
    bool added = action && strcmp(action, "add") == 0;
    bool removed = action && strcmp(action, "remove") == 0;
    if (!node || !(added || removed))
        return false;
    memset(ret, 0, sizeof *ret);
    ret->added = added;
    copy_text(ret->node, sizeof ret->node, node);
    fill_identity(device, ret);
    return true;
}

int hotplug_next(struct hotplug *hotplug, struct hotplug_event *ret) {
    for (;;) {
        scoped(device_unref_p) struct udev_device *device =
            udev_monitor_receive_device(hotplug->monitor);
        if (!device)
            return 0;
        if (fill_event(device, ret))
            return 1;
    }
}
