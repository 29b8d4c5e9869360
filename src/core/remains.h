/* Several packs on one unit: what those that remain can carry, and for how long. */
#pragma once

#include <stdbool.h>
#include <stddef.h>

struct remains_pack {
    bool counts;      /* known and not at its cutoff */
    double carries_W; /* most that its converter can carry; ENDLESS = not limited */
    double power_W;   /* its share of the load now */
    double left_s;    /* until its cutoff under that share */
};

/* Can the packs that count carry need_W together? */
bool remains_carry(const struct remains_pack *packs, size_t n, double need_W);

/* Seconds until those that are left cannot carry need_W. When a pack ends the others take over its
 * share in proportion to theirs; their energy is taken as independent of that (a little hopeful
 * when shares grow much, as resistance then costs more). ENDLESS when a pack has no end. */
double remains_left_s(const struct remains_pack *packs, size_t n, double need_W);
