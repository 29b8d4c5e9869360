/* See remains.h: packs end one after the other, their load goes to the rest. */
#include "core/remains.h"

#include "core/sample.h"
#include "util/real.h"

#include <string.h>

bool remains_carry(const struct remains_pack *packs, size_t n, double need_W) {
    double carried_W = 0.0;

    for (size_t i = 0; i < n; i++)
        if (packs[i].counts)
            carried_W += packs[i].carries_W;
    return carried_W > 0.0 && carried_W >= need_W;
}

static size_t first_to_end(const struct remains_pack *packs, size_t n) {
    size_t first = n;

    for (size_t i = 0; i < n; i++)
        if (packs[i].counts && (first == n || packs[i].left_s < packs[first].left_s))
            first = i;
    return first;
}

/* Time goes on to the end of one pack; the others take its load. */
static void end_pack(struct remains_pack *packs, size_t n, size_t ended) {
    double gone_s = packs[ended].left_s, freed_W = packs[ended].power_W, carried_W = 0.0;

    packs[ended].counts = false;
    for (size_t i = 0; i < n; i++)
        if (packs[i].counts)
            carried_W += packs[i].power_W;
    for (size_t i = 0; i < n; i++)
        if (packs[i].counts && carried_W > 0.0)
            packs[i].left_s = (packs[i].left_s - gone_s) * carried_W / (carried_W + freed_W);
}

double remains_left_s(const struct remains_pack *packs, size_t n, double need_W) {
    struct remains_pack left[PACKS_MAX];
    double t_s = 0.0;

    memcpy(left, packs, n * sizeof(*packs));
    while (remains_carry(left, n, need_W)) {
        size_t next = first_to_end(left, n);

        if (left[next].left_s == ENDLESS)
            return ENDLESS;
        t_s += left[next].left_s;
        end_pack(left, n, next);
    }
    return t_s;
}
