/* A cell table from its file, brink-cells(5). Every value carries its unit.
 *
 *   [cell]        name, chemistry, capacity, full, damage; may: possible_low, possible_high,
 *                 spread, source, licence
 *   [curve]       charge, voltage: lists of 2 to 128 numbers with one unit at the end; charge
 *                 strictly rising from 0 % to 100 %, voltage never falling
 *   [resistance]  charge, r0, r1, r2: lists of 1 to 24; tau1, tau2, temperature, activation
 *
 * Left out, possible_low is 1 V under damage (0.1 V at least), possible_high 0.2 V above full, and
 * spread 20 mV. These are safe: a reading refused too early makes the unit blind, and blind goes by
 * the cautious end; a spread too wide only widens the bounds. Common practice, no source.
 */
#pragma once

#include "core/cell.h"

#include <limits.h>
#include <stddef.h>

enum celltable_error {
    CELLTABLE_E_REFUSED = 1, /* the text is no good cell table */
    CELLTABLE_E_UNKNOWN,     /* no such table in the folders */
};

/* name stands for the file in messages. 0; CELLTABLE_E_REFUSED or -errno with a message for people,
 * "name:line: what is wrong; what is accepted". ret is not touched then. */
int celltable_parse(const char *text, size_t length, const char *name, struct cell_table *ret,
                    char *message, size_t size);
int celltable_load(const char *path, struct cell_table *ret, char *message, size_t size);

/* The file of a table: what holds a "/" or ends in ".ini" is a path and taken as it is; anything
 * else is looked for as FOLDER/NAME.ini in the colon-separated folders, first one first. 0;
 * CELLTABLE_E_UNKNOWN or -errno with a message that says where it looked and names a near one. */
int celltable_find(const char *folders, const char *name_or_path, char ret_path[PATH_MAX],
                   char *message, size_t size);
