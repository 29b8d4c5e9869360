/* Serial ports: USB identities and what is plugged in. The kind itself is serial_kind in port.h. */
#pragma once

#include "gauge/hotplug.h"

#include <stddef.h>

enum { SERIAL_SEEN_MAX = 32, SERIAL_USB_PORT_MAX = 32 };

/* "usb:1209:0001" or "usb:1209:0001:SERIAL"; hexadecimal digits come out in lower case. */
struct serial_identity {
    char vendor[HOTPLUG_USB_ID_MAX];
    char product[HOTPLUG_USB_ID_MAX];
    char serial[HOTPLUG_SERIAL_MAX]; /* "" = any */
};

/* A serial port behind USB. */
struct serial_seen {
    char node[HOTPLUG_NODE_MAX];
    struct serial_identity identity;
    char usb_port[SERIAL_USB_PORT_MAX]; /* where it is plugged in, "1-1.2" */
    char interface[4];                  /* "00"; "" = not known */
};

/* Does the text mean an identity and not a path? */
bool serial_is_identity(const char *text);

/* False when text is malformed; ret is untouched then. */
bool serial_identity_parse(const char *text, struct serial_identity *ret);

bool serial_identity_matches(const struct serial_identity *wanted, const char *vendor,
                             const char *product, const char *serial);

/* Fills at most size of what is plugged in, by node name. *ret_n is how many there are, which may
 * be more. 0 or -errno. */
int serial_list(struct serial_seen *ret, size_t size, size_t *ret_n);
