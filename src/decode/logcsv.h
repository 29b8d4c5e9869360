/* Reader of a log CSV, row by row, in constant memory however long the file is.
 *
 *   # any number of comment lines; "capacity_Ah 2.888" in one before the header is taken as a hint
 *   time_s,voltage_V,current_A,temp_C,charge_Ah
 *   0,4.1459,1.8129,21.8,0.00000
 *
 * The header names the columns, in any order; time_s and voltage_V are required, columns of other
 * names are ignored and listed in logcsv_ignored. current_A is positive when discharging, charge_Ah
 * is what was taken out since full. Lines end in LF or CR LF, the last one may lack its end. Blanks
 * around a field and empty lines are allowed. Numbers are plain decimals with a point; an empty
 * field of an optional column is "not told" (NaN); nan and inf are no numbers. Time must rise from
 * row to row. The first thing that is wrong ends the reading.
 */
#pragma once

#include <stddef.h>

enum logcsv_column {
    LOGCSV_TIME,
    LOGCSV_VOLTAGE,
    LOGCSV_CURRENT,
    LOGCSV_TEMP,
    LOGCSV_CHARGE,
    LOGCSV_COLUMNS
};

enum logcsv_result {
    LOGCSV_END = 1, /* no more rows */
    LOGCSV_E_FORMAT /* the file breaks a rule above; logcsv_message says which */
};

struct logcsv_row {
    double value[LOGCSV_COLUMNS]; /* NaN = column missing or field empty */
};

struct logcsv;

/* Opens path ("-" is standard input) and reads it up to the header. 0, -errno, or LOGCSV_E_FORMAT
 * with the message in ret_message, cut to size. */
int logcsv_open(struct logcsv **ret, const char *path, char *ret_message, size_t size);

/* The same on an open file descriptor, which it takes over also on failure; name is for messages.
 */
int logcsv_new(struct logcsv **ret, int fd, const char *name, char *ret_message, size_t size);
void logcsv_free(struct logcsv *log);
void logcsv_free_p(struct logcsv **log);

/* 0 and a row, LOGCSV_END, LOGCSV_E_FORMAT, or -errno. ret is not touched unless 0. */
int logcsv_next(struct logcsv *log, struct logcsv_row *ret);

/* "file:line: what is wrong; what is accepted"; empty while nothing is wrong. */
const char *logcsv_message(const struct logcsv *log);

/* The hint's value, or NaN. */
double logcsv_capacity_Ah(const struct logcsv *log);

/* Does the header name this column? */
int logcsv_has(const struct logcsv *log, enum logcsv_column column);

/* Names of ignored columns, separated by ", "; empty when there is none. */
const char *logcsv_ignored(const struct logcsv *log);

/* A decimal number as units_number takes it, but quick: exact for up to 15 digits with a power of
 * ten within 22 (W. D. Clinger, "How to read floating point numbers accurately", PLDI 1990,
 * 92-101), units_number for the rest. 0 or a positive value. */
int logcsv_number(const char *text, size_t length, double *ret);
