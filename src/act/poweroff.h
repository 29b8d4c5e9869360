/* The order to power off, as a file that a systemd path unit of ours watches: the daemon needs no
 * right but to write one file, and a test needs only to look at it.
 *
 * The file is one line of JSON, replaced by rename. Its content is for people who look for the
 * reason; that it is there is the order.
 */
#pragma once

#include <stdint.h>

/* Texts are plain ASCII names that need no escaping; NaN = not known. */
struct poweroff_order {
    const char *unit, *stage, *cause;
    const char *pack; /* whose figure decided; NULL = no single one's */
    int64_t t_boot_us, t_real_us;
    double charge, charge_low;   /* 0..1, of the unit */
    double terminal_V, rest_V;   /* of that pack */
    double left_s, left_least_s; /* of the unit */
};

/* Puts the order in place, mode 0644. Returns 0 or -errno; nothing is there then that was not there
 * before. */
int poweroff_request(const char *path, const struct poweroff_order *order);

/* Takes away an order that stands there, as from the run before. Returns 1 when there was one, 0
 * when not, or -errno. */
int poweroff_withdraw(const char *path);
