/* What the commands share. */
#include "bench/bench.h"

#include "decode/celltable.h"

#include <stdarg.h>
#include <stdio.h>
#include <sysexits.h>

int bench_fail(int code, const char *command, const char *format, ...) {
    va_list args;

    fprintf(stderr, "brink-bench %s: ", command);
    va_start(args, format);
    vfprintf(stderr, format, args);
    va_end(args);
    fputc('\n', stderr);
    return code;
}

int bench_table(const char *command, const char *cells, struct cell_table *ret) {
    char path[PATH_MAX], message[1024];

    if (!cells)
        return bench_fail(EX_USAGE, command,
                          "--cells is missing; accepted is a name like nca-18650 or the path of a "
                          "cell table, see brink-cells(5)");
    if (celltable_find(BENCH_CELL_FOLDERS, cells, path, message, sizeof message))
        return bench_fail(EX_NOINPUT, command, "%s", message);
    switch (celltable_load(path, ret, message, sizeof message)) {
    case 0:
        return 0;
    case CELLTABLE_E_REFUSED:
        return bench_fail(EX_CONFIG, command, "%s", message);
    default:
        return bench_fail(EX_NOINPUT, command, "%s", message);
    }
}
