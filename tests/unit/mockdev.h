/* A made-up /sys and /dev with USB serial ports, and udev events at will: libumockdev, loaded at
 * run time so that nothing is linked to it. A test calls mockdev_ready() first thing in main: the
 * program starts itself again under the preload library; false = libumockdev is not installed.
 */
#pragma once

#include <dlfcn.h>
#include <fcntl.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

struct mockdev {
    void *library;
    void *testbed;
};

static inline bool mockdev_ready(char **argv) {
    static const char preload[] = "libumockdev-preload.so.0";
    const char *loaded = getenv("LD_PRELOAD");
    if (loaded && strstr(loaded, preload))
        return true;
    void *tried = dlopen(preload, RTLD_LAZY | RTLD_LOCAL);
    if (!tried || !dlopen("libumockdev.so.0", RTLD_LAZY | RTLD_LOCAL))
        return false;
    const char *asan = getenv("ASAN_OPTIONS");
    char options[512];
    snprintf(options, sizeof options, "%s%sverify_asan_link_order=0", asan ? asan : "",
             asan ? ":" : "");
    setenv("ASAN_OPTIONS", options, 1);
    setenv("LD_PRELOAD", preload, 1);
    execv(argv[0], argv);
    return false;
}

/* The address of a function of the library as a pointer of the type wanted. */
#define MOCKDEV_CALL(mock, name, type) (*(type *)&(void *){dlsym((mock)->library, name)})

typedef void *mockdev_new_f(void);
typedef char *mockdev_add_f(void *, const char *, const char *, const char *, char **, char **);
typedef void mockdev_uevent_f(void *, const char *, const char *);
typedef void mockdev_remove_f(void *, const char *);
typedef char *mockdev_root_f(void *);
typedef void mockdev_unref_f(void *);

static inline bool mockdev_start(struct mockdev *mock) {
    mock->library = dlopen("libumockdev.so.0", RTLD_LAZY | RTLD_GLOBAL);
    if (!mock->library)
        return false;
    mock->testbed = MOCKDEV_CALL(mock, "umockdev_testbed_new", mockdev_new_f *)();
    return mock->testbed;
}

static inline void mockdev_stop(struct mockdev *mock) {
    MOCKDEV_CALL(mock, "g_object_unref", mockdev_unref_f *)(mock->testbed);
    mock->testbed = NULL;
}

/* Adds a device below parent (NULL = none); lists are NULL-ended name, value, name, value. Returns
 * its path below /sys, the caller's to free. */
static inline char *mockdev_add(struct mockdev *mock, const char *subsystem, const char *name,
                                const char *parent, const char **attributes,
                                const char **properties) {
    return MOCKDEV_CALL(mock, "umockdev_testbed_add_devicev", mockdev_add_f *)(
        mock->testbed, subsystem, name, parent, (char **)attributes, (char **)properties);
}

/* A USB serial port /dev/NODE on the USB device `usb_port`. serial NULL = it has none. Returns the
 * path of the tty, the caller's to free. */
static inline char *mockdev_add_serial(struct mockdev *mock, const char *usb_port,
                                       const char *vendor, const char *product, const char *serial,
                                       const char *node) {
    char interface[64];
    char device_node[64];
    snprintf(interface, sizeof interface, "%s:1.0", usb_port);
    snprintf(device_node, sizeof device_node, "/dev/%s", node);
    const char *usb[] = {"idVendor", vendor, "idProduct", product, serial ? "serial" : NULL,
                         serial,     NULL};
    const char *usb_properties[] = {"DEVTYPE", "usb_device", NULL};
    const char *interface_attributes[] = {"bInterfaceNumber", "00", NULL};
    const char *interface_properties[] = {"DEVTYPE", "usb_interface", NULL};
    const char *none[] = {NULL};
    const char *tty_properties[] = {"DEVNAME", device_node, NULL};
    char *device = mockdev_add(mock, "usb", usb_port, NULL, usb, usb_properties);
    char *below =
        mockdev_add(mock, "usb", interface, device, interface_attributes, interface_properties);
    char *tty = mockdev_add(mock, "tty", node, below, none, tty_properties);
    free(device);
    free(below);
    return tty;
}

/* Lays a pseudo-terminal under the node of a port that was added. Returns the far end of the cable,
 * the caller's to close, or -1. */
static inline int mockdev_cable(struct mockdev *mock, const char *node) {
    char slave[64];
    char path[512];
    char *root =
        MOCKDEV_CALL(mock, "umockdev_testbed_get_root_dir", mockdev_root_f *)(mock->testbed);
    snprintf(path, sizeof path, "%s/dev", root);
    mkdir(path, 0755);
    snprintf(path, sizeof path, "%s/dev/%s", root, node);
    free(root);
    int fd = posix_openpt(O_RDWR | O_NOCTTY | O_CLOEXEC);
    if (fd < 0 || grantpt(fd) < 0 || unlockpt(fd) < 0 || ptsname_r(fd, slave, sizeof slave) != 0 ||
        symlink(slave, path) < 0)
        return -1;
    return fd;
}

static inline void mockdev_event(struct mockdev *mock, const char *syspath, const char *action) {
    MOCKDEV_CALL(mock, "umockdev_testbed_uevent", mockdev_uevent_f *)
    (mock->testbed, syspath, action);
}

static inline void mockdev_remove(struct mockdev *mock, const char *syspath) {
    MOCKDEV_CALL(mock, "umockdev_testbed_remove_device", mockdev_remove_f *)
    (mock->testbed, syspath);
}
