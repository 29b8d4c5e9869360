/* A gauge: where lines come from. Pull style: the caller owns the event loop, waits for
 * gauge_fd() to be readable, calls gauge_read() once and then gauge_next() until it says 0.
 *
 *   kind     device                      what it opens
 *   serial   /dev/ttyACM0, a link to it, or usb:VID:PID[:SERIAL]   a serial port, 8N1, no flow
 *                                        control
 *   stream   a path                      a pseudo-terminal, character device, FIFO or unix stream
 *                                        socket
 *
 * Nothing here blocks. A gauge that vanished is a state: gauge_read says GAUGE_E_GONE and has let
 * go of the device already; the caller opens again, with back-off or when hotplug says so. Opening
 * allocates (libudev, libserialport); reading does not.
 */
#pragma once

#include "gauge/hotplug.h"
#include "gauge/line.h"

enum { GAUGE_DEVICE_MAX = 108, GAUGE_TELL_MAX = 128 };

enum gauge_kind { GAUGE_SERIAL, GAUGE_STREAM, GAUGE_KINDS };

struct gauge_config {
    enum gauge_kind kind;
    char device[GAUGE_DEVICE_MAX];
    int baud;           /* serial only */
    bool tell;          /* gauge_tell is wanted */
    bool reset_on_open; /* serial only: pulse DTR, which restarts many microcontroller boards */
};

enum gauge_error {
    GAUGE_E_GONE = 1,   /* it was open and has vanished */
    GAUGE_E_NOT_FOUND,  /* no such device now */
    GAUGE_E_AMBIGUOUS,  /* several devices answer to that USB identity */
    GAUGE_E_BUSY,       /* another program holds it, or the listener's queue is full */
    GAUGE_E_PERMISSION, /* we may not open it */
    GAUGE_E_DEVICE,     /* it is nothing this kind can read: a regular file, a directory, no tty */
    GAUGE_E_SETTINGS,   /* the port refuses the baud rate or mode */
    GAUGE_E_IDENTITY,   /* `device` is malformed: gauge_new and gauge_open, config error */
    GAUGE_E_TELL,       /* it cannot be told anything: a FIFO, or `tell = no` */
    GAUGE_E_FULL,       /* told line dropped, the device takes no more now */
    GAUGE_E_COUNT
};

struct gauge;

const char *gauge_kind_name(enum gauge_kind kind); /* "serial" */

/* Checks the config and allocates. 0, -ENOMEM, or GAUGE_E_IDENTITY, GAUGE_E_SETTINGS. */
int gauge_new(struct gauge **ret, const struct gauge_config *config);
void gauge_free(struct gauge *gauge);

static inline void gauge_free_p(struct gauge **gauge) {
    gauge_free(*gauge);
}

/* 0, -errno or an enum gauge_error; the reason in words is gauge_error_text(). Closes first when it
 * is open. */
int gauge_open(struct gauge *gauge);

/* Lets go of the device; counts stay. */
void gauge_close(struct gauge *gauge);

bool gauge_is_open(const struct gauge *gauge);

/* -1 when it is not open. Wait for readable; level-triggered. */
int gauge_fd(const struct gauge *gauge);

/* Reads once, without blocking. 0, or GAUGE_E_GONE: closed, but lines in hand can still be had. */
int gauge_read(struct gauge *gauge);

/* 1 and the next frame, or 0. */
int gauge_next(struct gauge *gauge, struct frame *ret);

/* Writes text and a newline back, never waiting. text: one line of at most GAUGE_TELL_MAX - 2
 * characters, such as "stage=reserve charge=25". 0, or GAUGE_E_TELL, GAUGE_E_FULL, GAUGE_E_GONE.
 * GAUGE_E_GONE does not close; the next gauge_read does. */
int gauge_tell(struct gauge *gauge, const char *text);

/* Does the event speak of this gauge: of the device it has open, or of one it would open? */
bool gauge_concerns(const struct gauge *gauge, const struct hotplug_event *event);

const struct line_counts *gauge_counts(const struct gauge *gauge);

/* "usb 1209:0001 (/dev/ttyACM0)" when open, "usb 1209:0001" when not; or the path. */
const char *gauge_describe(const struct gauge *gauge);

/* A sentence or two on error (as returned by gauge_open, gauge_read or gauge_tell, < 0 or > 0):
 * which device, what is wrong, what was found, what to do. Valid until the next call on gauge. */
const char *gauge_error_text(struct gauge *gauge, int error);

/* The same for an error of gauge_new, where there is no gauge. Returns buf. */
const char *gauge_config_error_text(const struct gauge_config *config, int error, char *buf,
                                    size_t size);
