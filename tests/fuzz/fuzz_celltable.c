/* Any bytes as a cell table: a table that is taken keeps every rule, a refusal names the file. */
#include "decode/celltable.h"

#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static void must(int holds) {
    if (!holds)
        abort();
}

static void check_table(const struct cell_table *table) {
    const char *what;
    struct cell cell;
    struct cell_point point;

    must(cell_table_check(table, &what) == 0);
    must(cell_init(&cell, table, 1, table->capacity_Ah) == 0);
    must(table->ocv.charge[0] == 0.0 && table->ocv.charge[table->ocv.n - 1] == 1.0);
    for (double charge = -0.1; charge < 1.1; charge += 0.05) {
        cell_at(&cell, charge, 10.0, &point);
        must(isfinite(point.ocv_V) && point.ocv_slope_V >= 0.0 && point.r0_ohm > 0.0);
    }
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    struct cell_table table;
    char message[256] = "";
    int r = celltable_parse((const char *)data, size, "f.ini", &table, message, sizeof(message));

    if (r == 0) {
        check_table(&table);
        return 0;
    }
    must(r == CELLTABLE_E_REFUSED);
    must(strncmp(message, "f.ini:", 6) == 0 && strlen(message) > 12);
    return 0;
}
