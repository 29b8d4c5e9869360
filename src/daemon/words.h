/* Sentences about a report, for the log and the service manager's status line. */
#pragma once

#include "core/report.h"
#include "core/watch.h"

#include <stddef.h>

/* "ample, on pack, charge 63 % (60 to 66), left 5 h 40, at least 4 h 55". Returns buf. */
char *words_status(const struct report *report, char *buf, size_t size);

/* "by charge of main: charge 8 % (5 to 11); main 3.42 V, 3.51 V at rest; left 12 min, at least 3
 * min": why the stage is what it is. Returns buf. */
char *words_reason(const struct report *report, const struct watch_config *watch, char *buf,
                   size_t size);
