/* Frame to sample: looks each channel's token up and trims it. */
#include "gauge/channel.h"

#include "util/real.h"

#include <math.h>
#include <string.h>

static const struct channel none = {.token = "", .scale = 1, .offset = 0};

void channel_map_init(struct channel_map *map) {
    map->n_packs = 0;
    for (size_t i = 0; i < PACKS_MAX; i++)
        map->pack[i] = (struct pack_channels){none, none, none};
    map->rail = none;
    map->adapter = none;
    map->adapter_above = 0.5;
}

bool channel_token_valid(const char *text) {
    size_t length = strlen(text);
    return length > 0 && length < FRAME_NAME_MAX && line_name_length(text, length) == length;
}

/* A channel may be wired to the gauge's clock too, though little speaks for it. */
static double told(const struct frame *frame, const char *token) {
    if (strcmp(token, "t") == 0)
        return frame->clock_s;
    for (size_t i = 0; i < frame->n; i++)
        if (strcmp(frame->token[i].name, token) == 0)
            return frame->token[i].value;
    return UNKNOWN;
}

static double trimmed(const struct channel *channel, const struct frame *frame, size_t *n_told) {
    if (!channel->token[0])
        return UNKNOWN;
    double value = told(frame, channel->token) * channel->scale + channel->offset;
    if (!isfinite(value))
        return UNKNOWN;
    ++*n_told;
    return value;
}

size_t channel_map_apply(const struct channel_map *map, const struct frame *frame,
                         int64_t t_boot_us, struct sample *ret) {
    size_t n_told = 0;
    ret->t_boot_us = t_boot_us;
    ret->reading = frame->clock_s;
    for (size_t i = 0; i < PACKS_MAX; i++) {
        const struct pack_channels *from = &map->pack[i];
        struct pack_sample *to = &ret->pack[i];
        *to = (struct pack_sample){UNKNOWN, UNKNOWN, UNKNOWN};
        if (i >= map->n_packs)
            continue;
        to->voltage_V = trimmed(&from->voltage, frame, &n_told);
        to->current_A = trimmed(&from->current, frame, &n_told);
        to->temp_C = trimmed(&from->temperature, frame, &n_told);
    }
    ret->rail_V = trimmed(&map->rail, frame, &n_told);
    double adapter = trimmed(&map->adapter, frame, &n_told);
    ret->adapter = isnan(adapter) ? UNKNOWN : adapter > map->adapter_above ? 1 : 0;
    return n_told;
}
