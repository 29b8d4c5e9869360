/* From the tokens of a frame to a sample in SI units: which token is which channel, and its trim.
 *
 *   channel = value * scale + offset
 *
 * Current is positive when discharging: a gauge that counts the other way gets current_scale = -1.
 */
#pragma once

#include "core/sample.h"
#include "gauge/line.h"

#include <stdbool.h>

struct channel {
    char token[FRAME_NAME_MAX]; /* "" = the unit has no such channel */
    double scale;
    double offset; /* in the channel's own unit */
};

struct pack_channels {
    struct channel voltage, current, temperature;
};

struct channel_map {
    size_t n_packs;
    struct pack_channels pack[PACKS_MAX];
    struct channel rail;
    struct channel adapter;
    double adapter_above; /* plugged in when the trimmed value is above this */
};

/* No channels, scales 1, offsets 0, adapter_above 0.5. */
void channel_map_init(struct channel_map *map);

/* Is text a name a frame can carry? */
bool channel_token_valid(const char *text);

/* Fills all of ret: NaN for what the frame does not tell, and for a trimmed value that is not
 * finite. reading = the frame's clock. Returns how many channels were told; 0 = the frame speaks of
 * nothing the map knows. */
size_t channel_map_apply(const struct channel_map *map, const struct frame *frame,
                         int64_t t_boot_us, struct sample *ret);
