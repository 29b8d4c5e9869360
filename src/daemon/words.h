/* Sentences about a report, for the log and the service manager's status line. */
#pragma once

#include "core/report.h"
#include "core/watch.h"

#include <stddef.h>

/* "the charge is at its limit": which rule decided, as a part of a sentence. */
const char *words_rule(enum cause cause);

/* "ample, on pack, charge 63 % (60 to 66), left 5 h 40, at least 4 h 55". Returns buf. */
char *words_status(const struct report *report, char *buf, size_t size);

/* "the charge is at its limit (pack main): charge 8 % (5 to 11); main 3.420 V now, 3.510 V at rest;
 * left 12 min 10 s, at least 3 min 05 s": why the stage is what it is. Returns buf. */
char *words_reason(const struct report *report, const struct watch_config *watch, char *buf,
                   size_t size);
