/* What goes into the core: one sample of one unit, after trim, in SI units. NaN = not told. */
#pragma once

#include <stdint.h>

enum { PACKS_MAX = 4, NAME_LEN = 32 };

struct pack_sample {
    double voltage_V; /* terminal voltage of the whole pack */
    double current_A; /* positive = discharging */
    double temp_C;
};

struct sample {
    int64_t t_boot_us; /* CLOCK_BOOTTIME, or the gauge's clock laid on it; never falls */
    double reading;    /* the gauge's own mark of this reading (its clock): equal marks are one
                        * reading told twice; NaN = the gauge has none */
    struct pack_sample pack[PACKS_MAX];
    double rail_V;
    double adapter; /* 1 plugged in, 0 not, NaN not told */
};
