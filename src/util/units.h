/* Numbers and units as people write them. Reading goes by the C locale whatever is set; writing
 * relies on no program of ours calling setlocale(3).
 * Config values are "NUMBER UNIT" with spaces or none between: "3.30 V", "250 mA", "90 s", "8 %".
 * Units are spelt as SI and the trade spell them, upper and lower case told apart. */
#pragma once

#include <stddef.h>

enum unit {
    UNIT_NONE,        /* a bare number; a unit behind it is refused */
    UNIT_VOLT,        /* V mV */
    UNIT_AMPERE,      /* A mA */
    UNIT_AMPERE_HOUR, /* Ah mAh */
    UNIT_WATT,        /* W mW */
    UNIT_OHM,         /* ohm mohm */
    UNIT_SECOND,      /* s ms min h d */
    UNIT_SHARE,       /* %, comes out as 0..1 */
    UNIT_CELSIUS,     /* C */
    UNIT_BAUD,        /* baud */
    UNIT_J_MOL,       /* J/mol kJ/mol */
    UNIT_COUNT_
};

enum units_error {
    UNITS_E_NUMBER = 1, /* no decimal number: also nan, inf, hex, comma, more than 120 characters or
                       than a double holds */
    UNITS_E_MISSING,    /* the unit is missing */
    UNITS_E_UNIT,       /* a unit of another kind, or rubbish behind the number */
};

/* A plain decimal number, all of the length: [+-]digits[.digits][e[+-]digits]. 0 or UNITS_E_NUMBER.
 */
int units_number(const char *text, size_t length, double *ret);

/* 0 or an enum units_error; ret in SI (share 0..1, Ah, C) untouched on error. */
int units_parse(const char *text, enum unit unit, double *ret);

/* "V or mV": for messages. */
const char *units_accepted(enum unit unit);

/* A value as a config line would hold it, in as few decimals as read back the same: "3.3 V",
 * "90 s", "8 %"; "unknown" for NaN, "unlimited" for infinity. 32 bytes hold every sensible value.
 * Returns buf. */
char *units_format(double value, enum unit unit, char *buf, size_t size);

/* A duration for people, cut and not rounded: "45 s", "2 min 10 s", "5 h 40", "3 d 4 h"; "unknown"
 * for NaN, "no end" for INFINITY, "0 s" for negative ones. 24 bytes hold all. Returns buf. */
char *units_duration(double seconds, char *buf, size_t size);
