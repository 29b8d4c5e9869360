/* Numbers with units, read strictly and written back. A number's syntax is checked here, its value
 * comes from strtod_l in the C locale, so rounding is the C library's and a comma never counts. */
#include "util/units.h"

#include <locale.h>
#include <math.h>
#include <stdbool.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { NUMBER_MAX = 120, DECIMALS_MAX = 17 };

/* A multiple is exact both ways: times / per is one rounding where 0.001 would be two. */
static const struct scale {
    enum unit unit;
    const char *name; /* the first of a unit is the one written back */
    double times, per;
} scales[] = {
    {UNIT_VOLT, "V", 1, 1},         {UNIT_VOLT, "mV", 1, 1000},
    {UNIT_AMPERE, "A", 1, 1},       {UNIT_AMPERE, "mA", 1, 1000},
    {UNIT_AMPERE_HOUR, "Ah", 1, 1}, {UNIT_AMPERE_HOUR, "mAh", 1, 1000},
    {UNIT_WATT, "W", 1, 1},         {UNIT_WATT, "mW", 1, 1000},
    {UNIT_OHM, "ohm", 1, 1},        {UNIT_OHM, "mohm", 1, 1000},
    {UNIT_SECOND, "s", 1, 1},       {UNIT_SECOND, "ms", 1, 1000},
    {UNIT_SECOND, "min", 60, 1},    {UNIT_SECOND, "h", 3600, 1},
    {UNIT_SECOND, "d", 86400, 1},   {UNIT_SHARE, "%", 1, 100},
    {UNIT_CELSIUS, "C", 1, 1},      {UNIT_BAUD, "baud", 1, 1},
    {UNIT_J_MOL, "J/mol", 1, 1},    {UNIT_J_MOL, "kJ/mol", 1000, 1},
};
enum { SCALES = sizeof(scales) / sizeof(scales[0]) };

static const char *const accepted[UNIT_COUNT_] = {
    [UNIT_NONE] = "a bare number",
    [UNIT_VOLT] = "V or mV",
    [UNIT_AMPERE] = "A or mA",
    [UNIT_AMPERE_HOUR] = "Ah or mAh",
    [UNIT_WATT] = "W or mW",
    [UNIT_OHM] = "ohm or mohm",
    [UNIT_SECOND] = "s, ms, min, h or d",
    [UNIT_SHARE] = "%",
    [UNIT_CELSIUS] = "C",
    [UNIT_BAUD] = "baud",
    [UNIT_J_MOL] = "J/mol or kJ/mol",
};

static size_t digits(const char *text, size_t from, size_t length) {
    size_t i = from;

    while (i < length && text[i] >= '0' && text[i] <= '9')
        i++;
    return i - from;
}

/* Length of the longest decimal number that text begins with, 0 = none. */
static size_t number_span(const char *text, size_t length) {
    size_t i = length > 0 && (text[0] == '+' || text[0] == '-');
    size_t n = digits(text, i, length);

    if (n == 0)
        return 0;
    i += n;
    if (i < length && text[i] == '.' && (n = digits(text, i + 1, length)) > 0)
        i += 1 + n;
    if (i < length && (text[i] == 'e' || text[i] == 'E')) {
        size_t sign = i + 1 < length && (text[i + 1] == '+' || text[i + 1] == '-');
        if ((n = digits(text, i + 1 + sign, length)) > 0)
            i += 1 + sign + n;
    }
    return i;
}

int units_number(const char *text, size_t length, double *ret) {
    char copy[NUMBER_MAX + 1];

    if (length == 0 || length > NUMBER_MAX || number_span(text, length) != length)
        return UNITS_E_NUMBER;
    memcpy(copy, text, length);
    copy[length] = '\0';
    locale_t c = newlocale(LC_ALL_MASK, "C", (locale_t)0);
    if (!c)
        return UNITS_E_NUMBER;
    double value = strtod_l(copy, NULL, c);
    freelocale(c);
    if (!isfinite(value))
        return UNITS_E_NUMBER;
    *ret = value;
    return 0;
}

static const struct scale *find_scale(enum unit unit, const char *name) {
    for (size_t i = 0; i < SCALES; i++)
        if (scales[i].unit == unit && strcmp(scales[i].name, name) == 0)
            return &scales[i];
    return NULL;
}

int units_parse(const char *text, enum unit unit, double *ret) {
    size_t n = number_span(text, strlen(text));
    double value;

    /* What is glued to a number and begins no unit belongs to it: 3,30 and 0x10 and 1.2.3 */
    if (n == 0 || (text[n] != '\0' && strchr("0123456789.,'+-_eExX", text[n])))
        return UNITS_E_NUMBER;
    if (units_number(text, n, &value) != 0)
        return UNITS_E_NUMBER;
    const char *name = text + n + strspn(text + n, " \t");
    if (unit == UNIT_NONE) {
        if (*name)
            return UNITS_E_UNIT;
        *ret = value;
        return 0;
    }
    if (!*name)
        return UNITS_E_MISSING;
    const struct scale *scale = find_scale(unit, name);
    if (!scale)
        return UNITS_E_UNIT;
    value = value * scale->times / scale->per;
    if (!isfinite(value))
        return UNITS_E_NUMBER;
    *ret = value;
    return 0;
}

const char *units_accepted(enum unit unit) {
    return unit < UNIT_COUNT_ ? accepted[unit] : accepted[UNIT_NONE];
}

static const struct scale *written_scale(enum unit unit) {
    static const struct scale bare = {UNIT_NONE, "", 1, 1};

    for (size_t i = 0; i < SCALES; i++)
        if (scales[i].unit == unit)
            return &scales[i];
    return &bare;
}

char *units_format(double value, enum unit unit, char *buf, size_t size) {
    const struct scale *scale = written_scale(unit);
    const char *space = *scale->name ? " " : "";
    double shown = value / scale->times * scale->per + 0.0; /* + 0.0 turns -0 into 0 */
    char number[64];
    double back;

    if (!isfinite(value)) {
        snprintf(buf, size, "%s", isnan(value) ? "unknown" : "unlimited");
        return buf;
    }
    bool whole = false; /* as few decimals as read back as the same value */
    for (int d = 0; !whole && d <= DECIMALS_MAX && fabs(shown) < 1e15; d++) {
        int n = snprintf(number, sizeof(number), "%.*f", d, shown);
        whole = units_number(number, (size_t)n, &back) == 0 &&
                back * scale->times / scale->per == value + 0.0;
    }
    if (!whole)
        snprintf(number, sizeof(number), "%.17g", shown);
    snprintf(buf, size, "%s%s%s", number, space, scale->name);
    return buf;
}

/* Cut, not rounded: time left is never said to be more than it is. */
char *units_duration(double seconds, char *buf, size_t size) {
    static const double day_s = 86400, days_max = 9999;

    if (isnan(seconds)) {
        snprintf(buf, size, "unknown");
        return buf;
    }
    if (isinf(seconds) && seconds > 0) {
        snprintf(buf, size, "no end");
        return buf;
    }
    if (seconds >= (days_max + 1) * day_s) {
        snprintf(buf, size, "over %.0f d", days_max);
        return buf;
    }
    int64_t s = seconds > 0 ? (int64_t)seconds : 0;
    int d = (int)(s / 86400), h = (int)(s / 3600 % 24), min = (int)(s / 60 % 60);
    if (d > 0)
        snprintf(buf, size, "%d d %d h", d, h);
    else if (h > 0)
        snprintf(buf, size, "%d h %02d", h, min);
    else if (min > 0)
        snprintf(buf, size, "%d min %02d s", min, (int)(s % 60));
    else
        snprintf(buf, size, "%d s", (int)s);
    return buf;
}
