/* The line decoder: the first byte says in what pieces the rest comes. Whatever comes, frames are
 * sound, the counts add up, and a good line behind it is decoded.
 */
#include "gauge/channel.h"
#include "gauge/line.h"

#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static void must(int holds) {
    if (!holds)
        abort();
}

static void look_at(const struct frame *frame) {
    struct channel_map map;
    struct sample sample;
    must(frame->n <= FRAME_TOKENS_MAX && !isinf(frame->clock_s));
    for (size_t i = 0; i < frame->n; i++)
        must(isfinite(frame->token[i].value) && channel_token_valid(frame->token[i].name));
    channel_map_init(&map);
    map.n_packs = 1;
    strcpy(map.pack[0].voltage.token, "v");
    channel_map_apply(&map, frame, 0, &sample);
    must(!isinf(sample.pack[0].voltage_V));
}

static uint64_t drain(struct line_decoder *decoder) {
    struct frame frame;
    uint64_t n = 0;
    for (; line_next(decoder, &frame) == 1; n++)
        look_at(&frame);
    return n;
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    if (size == 0)
        return 0;
    struct line_decoder decoder;
    size_t piece = 1 + data[0] % 64;
    uint64_t good = 0;
    line_init(&decoder);
    line_restart(&decoder, data[0] & 128);
    for (size_t at = 1; at < size;) {
        size_t n = size - at < piece ? size - at : piece;
        at += line_push(&decoder, data + at, n);
        good += drain(&decoder);
    }
    line_push(&decoder, "\n", 1);
    good += drain(&decoder);
    line_push(&decoder, "v=3.7\n", 6);
    must(drain(&decoder) == 1);
    must(decoder.counts.lines == good + 1 + decoder.counts.bad_lines);
    must(strlen(decoder.counts.last_excerpt) < LINE_EXCERPT);
    return 0;
}
