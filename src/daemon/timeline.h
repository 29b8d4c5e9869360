/* The time that the watch lives in. With `clock = boot` it is CLOCK_BOOTTIME. With `clock = gauge`
 * it is the gauge's clock laid on boot time at the first sample, so that a log can be played faster
 * than life; between samples it goes on with boot time. It never falls.
 */
#pragma once

#include <stdbool.h>
#include <stdint.h>

struct timeline {
    bool by_gauge;
    bool anchored;
    double clock_s;         /* the gauge's clock at the last sample that told it */
    int64_t t_clock_us;     /* the watch's time then */
    int64_t t_last_us;      /* last time handed out */
    int64_t t_last_boot_us; /* boot time then */
};

void timeline_init(struct timeline *timeline, bool by_gauge, int64_t t_boot_us);

/* The time of a sample that came at t_boot_us; clock_s NaN = the line told no time. A gauge's clock
 * that fell, or jumped by more than an hour, says nothing about how much time went by: boot time
 * does then, and the clock is laid anew. */
int64_t timeline_sample_us(struct timeline *timeline, int64_t t_boot_us, double clock_s);

/* The time at t_boot_us without a sample. */
int64_t timeline_now_us(struct timeline *timeline, int64_t t_boot_us);
