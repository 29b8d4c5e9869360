/* What the watch knows, summed up: for the ladder and for the report. No state of its own. */
#pragma once

#include "core/watch.h"

/* No believable sample of this pack for longer than silent_s, or never one since as long. */
bool report_pack_blind(const struct watch *watch, size_t pack);
/* One pack or more is blind. */
bool report_blind(const struct watch *watch);

enum flow report_flow(const struct watch *watch);

void report_ladder_input(const struct watch *watch, bool new_sample, struct ladder_input *ret);

/* Fills the report from the watch as it stands. */
void report_fill(struct watch *watch, struct report *ret);
