/* The kind `serial`: a serial port by path or USB identity, opened and set up by libserialport.
 *
 * libserialport refuses pseudo-terminals, and after an unplug its reads return 0 without an error.
 * So it only opens and configures; a duplicate of its descriptor goes on alone.
 *
 * On DTR: the kernel raises DTR and RTS when a port is opened, libserialport does so again, and no
 * call can open a port without it. What can be avoided is the fall at close (HUPCL), which makes
 * the rise at the next open an edge; so a board with an auto-reset circuit starts again when the
 * port is opened first after plugging in, and not each time brinkd starts.
 */
#include "gauge/serial.h"

#include "gauge/port.h"
#include "util/cleanup.h"
#include "util/text.h"

#include <errno.h>
#include <fcntl.h>
#include <libserialport.h>
#include <libudev.h>
#include <limits.h>
#include <stdio.h>
#include <string.h>
#include <sys/file.h>
#include <sys/ioctl.h>
#include <sys/stat.h>

static const char identity_prefix[] = "usb:";

bool serial_is_identity(const char *text) {
    return strncmp(text, identity_prefix, sizeof identity_prefix - 1) == 0;
}

/* Four hexadecimal digits, in lower case to ret. */
static bool take_hex4(const char *text, char *ret) {
    for (size_t i = 0; i < 4; i++) {
        bool upper = text[i] >= 'A' && text[i] <= 'F';
        if (!text[i] || !strchr("0123456789abcdefABCDEF", text[i]))
            return false;
        ret[i] = (char)(upper ? text[i] | 0x20 : text[i]);
    }
    ret[4] = 0;
    return true;
}

bool serial_identity_parse(const char *text, struct serial_identity *ret) {
    struct serial_identity identity = {0};
    if (!serial_is_identity(text))
        return false;
    text += sizeof identity_prefix - 1;
    if (!take_hex4(text, identity.vendor) || text[4] != ':' ||
        !take_hex4(text + 5, identity.product))
        return false;
    text += 9;
    size_t length = strlen(text);
    if (length > 0) {
        if (*text != ':' || length < 2 || length > sizeof identity.serial)
            return false;
        memcpy(identity.serial, text + 1, length);
    }
    *ret = identity;
    return true;
}

bool serial_identity_matches(const struct serial_identity *wanted, const char *vendor,
                             const char *product, const char *serial) {
    return strcasecmp(wanted->vendor, vendor) == 0 && strcasecmp(wanted->product, product) == 0 &&
           (!wanted->serial[0] || strcmp(wanted->serial, serial) == 0);
}

/* ---- what is plugged in ----------------------------------------------------------------- */

static void udev_unref_p(struct udev **udev) {
    udev_unref(*udev);
}

static void enumerate_unref_p(struct udev_enumerate **enumerate) {
    udev_enumerate_unref(*enumerate);
}

static void device_unref_p(struct udev_device **device) {
    udev_device_unref(*device);
}

static void copy_text(char *to, size_t size, const char *text) {
    snprintf(to, size, "%s", text ? text : "");
}

static bool look_at(struct udev *udev, const char *syspath, struct serial_seen *ret) {
    scoped(device_unref_p) struct udev_device *port = udev_device_new_from_syspath(udev, syspath);
    if (!port || !udev_device_get_devnode(port))
        return false;
    struct udev_device *usb =
        udev_device_get_parent_with_subsystem_devtype(port, "usb", "usb_device");
    if (!usb)
        return false;
    struct udev_device *interface =
        udev_device_get_parent_with_subsystem_devtype(port, "usb", "usb_interface");
    struct serial_identity *identity = &ret->identity;
    copy_text(ret->node, sizeof ret->node, udev_device_get_devnode(port));
    copy_text(identity->vendor, sizeof identity->vendor,
              udev_device_get_sysattr_value(usb, "idVendor"));
    copy_text(identity->product, sizeof identity->product,
              udev_device_get_sysattr_value(usb, "idProduct"));
    copy_text(identity->serial, sizeof identity->serial,
              udev_device_get_sysattr_value(usb, "serial"));
    copy_text(ret->usb_port, sizeof ret->usb_port, udev_device_get_sysname(usb));
    copy_text(ret->interface, sizeof ret->interface,
              interface ? udev_device_get_sysattr_value(interface, "bInterfaceNumber") : NULL);
    return true;
}

int serial_list(struct serial_seen *ret, size_t size, size_t *ret_n) {
    scoped(udev_unref_p) struct udev *udev = udev_new();
    if (!udev)
        return -ENOMEM;
    scoped(enumerate_unref_p) struct udev_enumerate *enumerate = udev_enumerate_new(udev);
    if (!enumerate)
        return -ENOMEM;
    int r = udev_enumerate_add_match_subsystem(enumerate, "tty");
    if (r >= 0)
        r = udev_enumerate_scan_devices(enumerate);
    if (r < 0)
        return r;
    size_t n = 0;
    struct udev_list_entry *entry;
    udev_list_entry_foreach(entry, udev_enumerate_get_list_entry(enumerate)) {
        struct serial_seen seen;
        if (!look_at(udev, udev_list_entry_get_name(entry), &seen))
            continue;
        if (n < size)
            ret[n] = seen;
        n++;
    }
    *ret_n = n;
    return 0;
}

/* ---- from config to node ---------------------------------------------------------------- */

static void append_seen(char *text, size_t size, size_t *length, const struct serial_seen *seen) {
    const struct serial_identity *identity = &seen->identity;
    text_append(text, size, length, "; %s is usb:%s:%s%s%s at port %s", seen->node,
                identity->vendor, identity->product, identity->serial[0] ? ":" : "",
                identity->serial, seen->usb_port);
    if (seen->interface[0])
        text_append(text, size, length, " interface %s", seen->interface);
}

static int fail_listing(struct port *port, int error, const struct serial_seen *seen, size_t n,
                        const char *what, const char *what_to_do) {
    size_t length = 0;
    text_append(port->reason, sizeof port->reason, &length, "%s", what);
    for (size_t i = 0; i < n; i++)
        append_seen(port->reason, sizeof port->reason, &length, &seen[i]);
    text_append(port->reason, sizeof port->reason, &length, ". %s", what_to_do);
    return error;
}

static int fail_not_found(struct port *port, const char *device, const struct serial_seen *seen,
                          size_t n) {
    char what[GAUGE_DEVICE_MAX + 64];
    snprintf(what, sizeof what, "%s is not plugged in", device);
    return fail_listing(port, GAUGE_E_NOT_FOUND, seen, n, what,
                        n > 0 ? "Plug the gauge in, or set device to one of these"
                              : "No USB serial port is. Plug the gauge in, or check its cable");
}

/* Several ports: told apart by serial number, else only by where they are plugged in. */
static int fail_ambiguous(struct port *port, const char *device, const struct serial_seen *match,
                          size_t n) {
    char what[GAUGE_DEVICE_MAX + 64];
    snprintf(what, sizeof what, "%s means %zu ports", device, n);
    return fail_listing(port, GAUGE_E_AMBIGUOUS, match, n, what,
                        "Add the serial number, usb:VID:PID:SERIAL; where that does not tell them "
                        "apart, set device to a link below /dev/serial/by-path");
}

static int find_identity(const struct gauge_config *config, struct port *port) {
    struct serial_identity wanted;
    struct serial_seen seen[SERIAL_SEEN_MAX];
    struct serial_seen match[SERIAL_SEEN_MAX];
    size_t n = 0;
    size_t n_match = 0;
    if (!serial_identity_parse(config->device, &wanted))
        return port_fail(port, GAUGE_E_IDENTITY, "'%s' is no USB identity", config->device);
    int r = serial_list(seen, SERIAL_SEEN_MAX, &n);
    if (r < 0)
        return port_fail(port, r, "%s: the list of serial ports cannot be read: %s", config->device,
                         strerrordesc_np(-r));
    if (n > SERIAL_SEEN_MAX)
        n = SERIAL_SEEN_MAX;
    for (size_t i = 0; i < n; i++)
        if (serial_identity_matches(&wanted, seen[i].identity.vendor, seen[i].identity.product,
                                    seen[i].identity.serial))
            match[n_match++] = seen[i];
    if (n_match == 0)
        return fail_not_found(port, config->device, seen, n);
    if (n_match > 1)
        return fail_ambiguous(port, config->device, match, n_match);
    snprintf(port->node, sizeof port->node, "%s", match[0].node);
    return 0;
}

/* libserialport wants the kernel's own name, not a link to it. */
static int find_path(const struct gauge_config *config, struct port *port) {
    struct stat st;
    char name[PATH_MAX];
    snprintf(port->node, sizeof port->node, "%s", config->device);
    if (stat(port->node, &st) < 0) {
        if (errno != ENOENT)
            return port_fail_errno(port, errno);
        struct serial_seen seen[SERIAL_SEEN_MAX];
        size_t n = 0;
        if (serial_list(seen, SERIAL_SEEN_MAX, &n) < 0)
            n = 0;
        return fail_not_found(port, config->device, seen,
                              n < SERIAL_SEEN_MAX ? n : SERIAL_SEEN_MAX);
    }
    if (!S_ISCHR(st.st_mode))
        return port_fail(port, GAUGE_E_DEVICE,
                         "%s is no serial port. A FIFO, socket or pseudo-terminal needs kind = "
                         "stream",
                         port->node);
    snprintf(name, sizeof name, "/sys/class/tty/%s", strrchr(port->node, '/') + 1);
    if (lstat(name, &st) == 0 && strrchr(port->node, '/') == port->node + 4)
        return 0;
    if (realpath(config->device, name) && strlen(name) < sizeof port->node)
        memcpy(port->node, name, strlen(name) + 1);
    return 0;
}

/* ---- opening ---------------------------------------------------------------------------- */

struct handle {
    struct sp_port *port;
    bool open;
};

static void handle_close_p(struct handle *handle) {
    if (handle->open)
        sp_close(handle->port);
    sp_free_port(handle->port);
}

static void sp_config_free_p(struct sp_port_config **config) {
    sp_free_config(*config);
}

static int fail_sp(struct port *port, enum sp_return r, int error) {
    if (r == SP_ERR_FAIL && sp_last_error_code() > 0)
        return port_fail_errno(port, sp_last_error_code());
    if (r == SP_ERR_MEM)
        return port_fail_errno(port, ENOMEM);
    return port_fail(port, error, "%s: %s", port->node,
                     error == GAUGE_E_SETTINGS
                         ? "the port refuses this baud rate. Try another one"
                         : "it is no serial port. A pseudo-terminal needs kind = stream");
}

/* 8N1 without flow control; DTR is left as the kernel set it. */
static enum sp_return set_mode(struct sp_port *port, int baud) {
    scoped(sp_config_free_p) struct sp_port_config *mode = NULL;
    enum sp_return r = sp_new_config(&mode);
    if (r == SP_OK)
        r = sp_set_config_baudrate(mode, baud);
    if (r == SP_OK)
        r = sp_set_config_bits(mode, 8);
    if (r == SP_OK)
        r = sp_set_config_parity(mode, SP_PARITY_NONE);
    if (r == SP_OK)
        r = sp_set_config_stopbits(mode, 1);
    if (r == SP_OK)
        r = sp_set_config_xon_xoff(mode, SP_XONXOFF_DISABLED);
    if (r == SP_OK)
        r = sp_set_config_cts(mode, SP_CTS_IGNORE);
    if (r == SP_OK)
        r = sp_set_config_dsr(mode, SP_DSR_IGNORE);
    return r == SP_OK ? sp_set_config(port, mode) : r;
}

static int open_handle(const struct gauge_config *config, struct port *port, int *ret_fd) {
    scoped(handle_close_p) struct handle handle = {NULL, false};
    enum sp_return r = sp_get_port_by_name(port->node, &handle.port);
    if (r != SP_OK)
        return fail_sp(port, r, GAUGE_E_DEVICE);
    r = sp_open(handle.port, config->tell ? SP_MODE_READ_WRITE : SP_MODE_READ);
    if (r != SP_OK)
        return fail_sp(port, r, GAUGE_E_DEVICE);
    handle.open = true;
    r = set_mode(handle.port, config->baud);
    if (r != SP_OK)
        return fail_sp(port, r, GAUGE_E_SETTINGS);
    int fd;
    if (sp_get_port_handle(handle.port, &fd) != SP_OK)
        return port_fail_errno(port, EIO);
    fd = fcntl(fd, F_DUPFD_CLOEXEC, 3);
    if (fd < 0)
        return port_fail_errno(port, errno);
    *ret_fd = fd;
    return 0;
}

/* Falls and rises again at once: over USB that is a pulse of a millisecond or so, and auto-reset
 * circuits act on the edge. */
static void pulse_dtr(int fd) {
    int line = TIOCM_DTR;
    ioctl(fd, TIOCMBIC, &line);
    ioctl(fd, TIOCMBIS, &line);
}

static int serial_open(const struct gauge_config *config, struct port *port) {
    int r =
        serial_is_identity(config->device) ? find_identity(config, port) : find_path(config, port);
    if (r != 0)
        return r;
    scoped(close_p) int fd = -1;
    r = open_handle(config, port, &fd);
    if (r != 0)
        return r;
    if (flock(fd, LOCK_EX | LOCK_NB) < 0 || ioctl(fd, TIOCEXCL) < 0)
        return port_fail_errno(port, errno);
    r = port_tty_lines(fd, config->reset_on_open);
    if (r < 0)
        return port_fail_errno(port, -r);
    if (config->reset_on_open)
        pulse_dtr(fd);
    port->mid_line = true;
    port->fd = fd;
    fd = -1;
    return 0;
}

static int serial_check(const struct gauge_config *config, struct port *port) {
    struct serial_identity identity;
    if (serial_is_identity(config->device) && !serial_identity_parse(config->device, &identity))
        return port_fail(port, GAUGE_E_IDENTITY,
                         "'%s' is no USB identity; write usb:VID:PID or usb:VID:PID:SERIAL with "
                         "four hexadecimal digits each, as in usb:1209:0001",
                         config->device);
    if (!serial_is_identity(config->device) && config->device[0] != '/')
        return port_fail(port, GAUGE_E_IDENTITY,
                         "'%s' is neither a path that begins with / nor a USB identity "
                         "usb:VID:PID[:SERIAL]",
                         config->device);
    if (config->baud < 50 || config->baud > 4000000)
        return port_fail(port, GAUGE_E_SETTINGS,
                         "%d baud is no speed of a serial port; use 50 to 4000000, often 115200",
                         config->baud);
    return 0;
}

const struct port_kind serial_kind = {"serial", serial_check, serial_open};
