/* The clocks, each with its name: boot time for computing, real time for showing and storing only.
 */
#pragma once

#include <stddef.h>
#include <stdint.h>

int64_t clock_boot_us(void); /* CLOCK_BOOTTIME: goes on in suspend, never jumps */
int64_t clock_real_us(void); /* CLOCK_REALTIME: may jump by years */

/* The kernel's id of this boot as 36 characters and a NUL. Returns 0 or -errno: -ENOENT also where
 * /proc/sys is hidden (systemd's ProcSubset=pid). */
int clock_boot_id(char ret[37]);

/* RFC 3339 in UTC with seconds, "2026-12-01T06:12:00Z"; 21 characters with the NUL. Years
 * outside 0000..9999 are held to those ends. */
void clock_rfc3339(int64_t t_real_us, char ret[21]);
