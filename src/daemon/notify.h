/* Words to the service manager: the protocol of sd_notify(3), whose own function waits while the
 * manager's queue is full. A daemon that must stop the machine waits for nobody. */
#pragma once

#include <stdint.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <systemd/sd-event.h>

struct notify {
    int fd; /* -1 = there is no service manager that listens */
    struct sockaddr_un address;
    socklen_t length;
    sd_event_source *watchdog;
    uint64_t watchdog_us; /* WATCHDOG=1 so often; 0 = not wanted */
};

/* Reads NOTIFY_SOCKET and WATCHDOG_USEC. Returns 0 or -errno; without a manager 0, and sending does
 * nothing. What the manager's watchdog wants to hear is sent from the loop from then on; notify
 * must stay where it is. */
int notify_open(struct notify *notify, sd_event *event);
void notify_close(struct notify *notify);

/* Sends text ("READY=1", ...). Returns 0, or -errno: -EAGAIN = the queue is full and the text lost.
 */
int notify_send(const struct notify *notify, const char *text);
