/* One gauge: its config, the device it has open, and the decoder of its lines. */
#include "gauge/gauge.h"

#include "gauge/port.h"
#include "gauge/serial.h"
#include "util/cleanup.h"

#include <errno.h>
#include <limits.h>
#include <poll.h>
#include <stdio.h>
#include <string.h>
#include <sys/socket.h>
#include <termios.h>

struct gauge {
    const struct port_kind *kind;
    struct gauge_config config;
    struct port port; /* port.fd is -1 when nothing is open; node and reason of the last opening */
    bool torn;        /* the last told line went out in part */
    char described[GAUGE_DEVICE_MAX + PORT_NODE_MAX + 8];
    char text[PORT_REASON_MAX];
    struct line_decoder decoder;
};

static const struct port_kind *const kinds[GAUGE_KINDS] = {
    [GAUGE_SERIAL] = &serial_kind,
    [GAUGE_STREAM] = &stream_kind,
};

const char *gauge_kind_name(enum gauge_kind kind) {
    return kinds[kind]->name;
}

/* "usb:1209:0001" reads "usb 1209:0001" to people. */
static void describe(struct gauge *gauge) {
    const char *device = gauge->config.device;
    if (!serial_is_identity(device)) {
        snprintf(gauge->described, sizeof gauge->described, "%s", device);
        return;
    }
    const char *rest = strchr(device, ':') + 1;
    if (gauge_is_open(gauge))
        snprintf(gauge->described, sizeof gauge->described, "usb %s (%s)", rest, gauge->port.node);
    else
        snprintf(gauge->described, sizeof gauge->described, "usb %s", rest);
}

int gauge_new(struct gauge **ret, const struct gauge_config *config) {
    struct port checked = {.fd = -1};
    int r = kinds[config->kind]->check(config, &checked);
    if (r != 0)
        return r;
    struct gauge *gauge = calloc(1, sizeof *gauge);
    if (!gauge)
        return -ENOMEM;
    gauge->kind = kinds[config->kind];
    gauge->config = *config;
    gauge->port = checked;
    line_init(&gauge->decoder);
    describe(gauge);
    *ret = gauge;
    return 0;
}

void gauge_free(struct gauge *gauge) {
    if (!gauge)
        return;
    gauge_close(gauge);
    free(gauge);
}

int gauge_open(struct gauge *gauge) {
    gauge_close(gauge);
    gauge->port = (struct port){.fd = -1};
    int r = gauge->kind->open(&gauge->config, &gauge->port);
    if (r != 0)
        return r;
    gauge->torn = false;
    line_restart(&gauge->decoder, gauge->port.mid_line);
    describe(gauge);
    return 0;
}

/* What was told and is still on its way is dropped first: closing a serial port waits for it. */
void gauge_close(struct gauge *gauge) {
    if (!gauge_is_open(gauge))
        return;
    tcflush(gauge->port.fd, TCOFLUSH);
    close(gauge->port.fd);
    gauge->port.fd = -1;
    describe(gauge);
}

bool gauge_is_open(const struct gauge *gauge) {
    return gauge->port.fd >= 0;
}

int gauge_fd(const struct gauge *gauge) {
    return gauge->port.fd;
}

/* A FIFO that nobody has opened for writing yet reads as ended, but is not hung up. */
static bool waits_for_writer(const struct gauge *gauge) {
    struct pollfd state = {.fd = gauge->port.fd, .events = POLLIN};
    return gauge->port.fifo && poll(&state, 1, 0) >= 0 && !(state.revents & POLLHUP);
}

int gauge_read(struct gauge *gauge) {
    char bytes[LINE_BUFFER];
    if (!gauge_is_open(gauge))
        return GAUGE_E_GONE;
    size_t room = line_room(&gauge->decoder);
    if (room == 0)
        return 0;
    ssize_t n = read(gauge->port.fd, bytes, room);
    if (n > 0)
        line_push(&gauge->decoder, bytes, (size_t)n);
    else if (n < 0 ? errno != EAGAIN && errno != EINTR : !waits_for_writer(gauge)) {
        gauge_close(gauge);
        return GAUGE_E_GONE;
    }
    return 0;
}

int gauge_next(struct gauge *gauge, struct frame *ret) {
    return line_next(&gauge->decoder, ret);
}

static bool is_one_line(const char *text) {
    for (const char *c = text; *c; c++)
        if (*c < ' ' || *c > '~')
            return false;
    return strlen(text) <= GAUGE_TELL_MAX - 2;
}

int gauge_tell(struct gauge *gauge, const char *text) {
    char line[GAUGE_TELL_MAX + 1];
    if (!gauge->config.tell)
        return GAUGE_E_TELL;
    if (!is_one_line(text))
        return -EINVAL;
    if (!gauge_is_open(gauge))
        return GAUGE_E_GONE;
    /* A newline first ends what was left unfinished. */
    int length = snprintf(line, sizeof line, "%s%s\n", gauge->torn ? "\n" : "", text);
    ssize_t n = gauge->port.socket
                    ? send(gauge->port.fd, line, (size_t)length, MSG_NOSIGNAL | MSG_DONTWAIT)
                    : write(gauge->port.fd, line, (size_t)length);
    if (n < 0)
        return errno == EAGAIN || errno == EINTR ? GAUGE_E_FULL : GAUGE_E_GONE;
    if (n > 0)
        gauge->torn = n < length;
    return n == length ? 0 : GAUGE_E_FULL;
}

/* Links such as those in /dev/serial/by-id lead to the node. */
static bool leads_to(const char *path, const char *node) {
    char target[PATH_MAX];
    return strcmp(path, node) == 0 || (realpath(path, target) && strcmp(target, node) == 0);
}

bool gauge_concerns(const struct gauge *gauge, const struct hotplug_event *event) {
    struct serial_identity wanted;
    if (gauge_is_open(gauge))
        return strcmp(gauge->port.node, event->node) == 0;
    if (serial_identity_parse(gauge->config.device, &wanted))
        return serial_identity_matches(&wanted, event->vendor, event->product, event->serial);
    return leads_to(gauge->config.device, event->node);
}

const struct line_counts *gauge_counts(const struct gauge *gauge) {
    return &gauge->decoder.counts;
}

const char *gauge_describe(const struct gauge *gauge) {
    return gauge->described;
}

const char *gauge_error_text(struct gauge *gauge, int error) {
    static const char *const later[GAUGE_E_COUNT] = {
        [GAUGE_E_GONE] = "the gauge has vanished. It is opened again as soon as it is back",
        [GAUGE_E_TELL] = "nothing is told to this gauge. Set tell = yes to do so",
        [GAUGE_E_FULL] = "the gauge does not read what it is told; the line was dropped",
    };
    const char *text = error > 0 && error < GAUGE_E_COUNT ? later[error] : NULL;
    if (error < 0)
        text = strerrordesc_np(-error);
    if (gauge->port.reason[0])
        return gauge->port.reason;
    snprintf(gauge->text, sizeof gauge->text, "%s: %s", gauge->described, text ? text : "failed");
    return gauge->text;
}

const char *gauge_config_error_text(const struct gauge_config *config, int error, char *buf,
                                    size_t size) {
    struct port port = {.fd = -1};
    if (error > 0 && kinds[config->kind]->check(config, &port) != 0)
        snprintf(buf, size, "%s", port.reason);
    else
        snprintf(buf, size, "%s: %s", config->device, error < 0 ? strerrordesc_np(-error) : "?");
    return buf;
}
