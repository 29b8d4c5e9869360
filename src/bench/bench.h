/* The commands of brink-bench: each gets its own arguments, argv[0] being its name, and returns an
 * exit code of sysexits.h. */
#pragma once

#include "core/cell.h"

int bench_sim(int argc, char **argv);
int bench_replay(int argc, char **argv);
int bench_fit(int argc, char **argv);

/* Where cell tables are looked for by name, as in brink.conf. */
#define BENCH_CELL_FOLDERS "/usr/local/share/brink/cells:/usr/share/brink/cells"

/* "brink-bench COMMAND: ..." on standard error; returns code. */
int bench_fail(int code, const char *command, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

/* The table by name or path. 0, or an exit code after saying what is wrong. */
int bench_table(const char *command, const char *cells, struct cell_table *ret);
