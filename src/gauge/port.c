/* Shared by serial and stream: the tty mode and the words for errno. */
#include "gauge/port.h"

#include <errno.h>
#include <grp.h>
#include <pwd.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <termios.h>
#include <unistd.h>

int port_fail(struct port *port, int error, const char *format, ...) {
    va_list args;
    va_start(args, format);
    vsnprintf(port->reason, sizeof port->reason, format, args);
    va_end(args);
    return error;
}

/* Names the group that may open the node and how to get into it. */
static int fail_permission(struct port *port) {
    struct stat st;
    if (stat(port->node, &st) < 0)
        return port_fail(port, GAUGE_E_PERMISSION,
                         "%s: permission denied, already for a folder above it. Let the user of "
                         "brinkd enter those folders",
                         port->node);
    const struct group *group = getgrgid(st.st_gid);
    const struct passwd *user = getpwuid(geteuid());
    const char *who = user ? user->pw_name : "USER";
    if (!group || st.st_gid == 0 || !(st.st_mode & S_IRGRP))
        return port_fail(
            port, GAUGE_E_PERMISSION,
            "%s: permission denied (owner id %u, mode %04o), and it belongs to no group "
            "that one could join. Give it a group with a udev rule, or with chgrp and "
            "chmod",
            port->node, st.st_uid, st.st_mode & 07777);
    return port_fail(port, GAUGE_E_PERMISSION,
                     "%s: permission denied; it belongs to the group %s (mode %04o). Run: usermod "
                     "-aG %s %s, then start again (a service gets it by SupplementaryGroups=%s)",
                     port->node, group->gr_name, st.st_mode & 07777, group->gr_name, who,
                     group->gr_name);
}

int port_fail_errno(struct port *port, int error) {
    static const struct {
        int number;
        int error;
        const char *text;
    } words[] = {
        {ENOENT, GAUGE_E_NOT_FOUND, "no such device. Plug the gauge in or start what makes it"},
        {ENOTDIR, GAUGE_E_NOT_FOUND, "no such device; a part of the path is no folder"},
        {ELOOP, GAUGE_E_NOT_FOUND, "the link leads nowhere but in a circle"},
        {ENXIO, GAUGE_E_NOT_FOUND, "the node is there but no device behind it"},
        {ENODEV, GAUGE_E_NOT_FOUND, "the node is there but no device behind it"},
        {EIO, GAUGE_E_NOT_FOUND, "its other end is closed, or the port has no hardware"},
        {ECONNREFUSED, GAUGE_E_NOT_FOUND,
         "nobody listens on this socket. Start the program that serves it"},
        {EBUSY, GAUGE_E_BUSY, "another program holds it. Find it with: fuser -v, and stop it"},
        {EWOULDBLOCK, GAUGE_E_BUSY,
         "another program holds it, or takes no more connections. Find it with: fuser -v"},
        {EPERM, GAUGE_E_PERMISSION,
         "not permitted. A service must list the device in DeviceAllow="},
        {EPROTOTYPE, GAUGE_E_DEVICE, "the socket is no stream socket"},
        {ENOTTY, GAUGE_E_DEVICE, "it is no serial port"},
        {EINVAL, GAUGE_E_SETTINGS, "the port refuses these settings. Try another baud rate"},
    };
    if (error == EACCES)
        return fail_permission(port);
    for (size_t i = 0; i < sizeof words / sizeof words[0]; i++)
        if (words[i].number == error)
            return port_fail(port, words[i].error, "%s: %s", port->node, words[i].text);
    return port_fail(port, -error, "%s: %s", port->node, strerrordesc_np(error));
}

int port_tty_lines(int fd, bool hang_up) {
    struct termios mode;
    if (tcgetattr(fd, &mode) < 0)
        return -errno;
    mode.c_iflag = IGNBRK;
    mode.c_oflag &= ~(tcflag_t)OPOST;
    mode.c_lflag = ICANON;
    mode.c_cflag |= CREAD | CLOCAL;
    if (hang_up)
        mode.c_cflag |= HUPCL;
    else
        mode.c_cflag &= ~(tcflag_t)HUPCL;
    memset(mode.c_cc, _POSIX_VDISABLE, sizeof mode.c_cc);
    return tcsetattr(fd, TCSANOW, &mode) < 0 ? -errno : 0;
}
