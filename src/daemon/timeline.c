/* Boot time, or the gauge's clock laid on it. */
#include "daemon/timeline.h"

#include "util/real.h"

static const double JUMP_MOST_s = 3600.0;

void timeline_init(struct timeline *timeline, bool by_gauge, int64_t t_boot_us) {
    *timeline = (struct timeline){.by_gauge = by_gauge,
                                  .clock_s = UNKNOWN,
                                  .t_clock_us = t_boot_us,
                                  .t_last_us = t_boot_us,
                                  .t_last_boot_us = t_boot_us};
}

static int64_t hand_out(struct timeline *timeline, int64_t t_us, int64_t t_boot_us) {
    if (t_us > timeline->t_last_us)
        timeline->t_last_us = t_us;
    timeline->t_last_boot_us = t_boot_us;
    return timeline->t_last_us;
}

int64_t timeline_now_us(struct timeline *timeline, int64_t t_boot_us) {
    int64_t gone_us = t_boot_us - timeline->t_last_boot_us;

    return hand_out(timeline, timeline->t_last_us + (gone_us > 0 ? gone_us : 0), t_boot_us);
}

int64_t timeline_sample_us(struct timeline *timeline, int64_t t_boot_us, double clock_s) {
    if (!timeline->by_gauge || !isfinite(clock_s))
        return timeline_now_us(timeline, t_boot_us);
    double gone_s = clock_s - timeline->clock_s;
    if (timeline->anchored && gone_s >= 0 && gone_s <= JUMP_MOST_s)
        timeline->t_clock_us += (int64_t)(gone_s * 1e6 + 0.5);
    else
        timeline->t_clock_us = timeline_now_us(timeline, t_boot_us);
    timeline->anchored = true;
    timeline->clock_s = clock_s;
    return hand_out(timeline, timeline->t_clock_us, t_boot_us);
}
