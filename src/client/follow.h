/* `brink line --follow`: the line again at each change, until brinkd goes. */
#pragma once

#include "client/options.h"

/* Writes lines to stdout. Returns trouble's code, never 0: it ends only when something ends it. */
int follow_run(const struct options *options, bool ascii, struct trouble *trouble);
