/* Log CSV reader: a window over the file, its lines, the header's columns, the rows. */
#include "decode/logcsv.h"

#include "util/cleanup.h"
#include "util/real.h"
#include "util/text.h"
#include "util/units.h"

#include <errno.h>
#include <fcntl.h>
#include <float.h>
#include <math.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdint.h>
#include <string.h>
#include <unistd.h>

enum {
    WINDOW = 128 * 1024,
    LINE_MAX_CHARS = 4096,
    FIELDS_MAX = 64,
    NAME_MAX_CHARS = 128,
};

static const char *const column_names[LOGCSV_COLUMNS] = {"time_s", "voltage_V", "current_A",
                                                         "temp_C", "charge_Ah"};
#define COLUMNS_ACCEPTED                                                                           \
    "accepted are time_s, voltage_V (both required), current_A, temp_C, charge_Ah"

struct logcsv {
    int fd;
    bool eof;
    char name[NAME_MAX_CHARS];
    unsigned long line;
    size_t n_fields;
    int column[FIELDS_MAX]; /* of each field of a row: an enum logcsv_column, or -1 = ignored */
    bool has[LOGCSV_COLUMNS];
    double capacity_Ah;
    double time_s; /* of the last row */
    char message[512];
    char ignored[256];
    size_t start, end; /* unread bytes in the window */
    char window[WINDOW];
};

static int wrong(struct logcsv *log, const char *format, ...) __attribute__((format(printf, 2, 3)));

static int wrong(struct logcsv *log, const char *format, ...) {
    size_t length = 0;
    va_list args;

    text_append(log->message, sizeof log->message, &length, "%s:%lu: ", log->name, log->line);
    va_start(args, format);
    vsnprintf(log->message + length, sizeof log->message - length, format, args);
    va_end(args);
    return LOGCSV_E_FORMAT;
}

/* ---- numbers --------------------------------------------------------------------------------- */

static const double POWERS_OF_TEN[] = {1e0,  1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,
                                       1e8,  1e9,  1e10, 1e11, 1e12, 1e13, 1e14, 1e15,
                                       1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22};

int logcsv_number(const char *text, size_t length, double *ret) {
    const char *p = text, *end = text + length, *digits;
    bool minus = p < end && *p == '-';
    uint64_t mantissa = 0;
    ptrdiff_t whole, places = 0;
    double value;

    if (p < end && (*p == '-' || *p == '+'))
        p++;
    for (digits = p; p < end && *p >= '0' && *p <= '9'; p++)
        mantissa = 10 * mantissa + (uint64_t)(*p - '0');
    whole = p - digits;
    if (whole > 0 && p < end && *p == '.') {
        for (digits = ++p; p < end && *p >= '0' && *p <= '9'; p++)
            mantissa = 10 * mantissa + (uint64_t)(*p - '0');
        places = p - digits;
        if (places == 0)
            return UNITS_E_NUMBER;
    }
    /* Both operands are exact doubles, so one rounding is left: IEEE division's. */
    if (p != end || whole == 0 || whole + places > 15 || FLT_EVAL_METHOD != 0)
        return units_number(text, length, ret);
    value = (double)mantissa / POWERS_OF_TEN[places];
    *ret = minus ? -value : value;
    return 0;
}

/* ---- lines ----------------------------------------------------------------------------------- */

/* Moves what is unread to the front and reads more behind it. */
static int fill(struct logcsv *log) {
    ssize_t n;

    memmove(log->window, log->window + log->start, log->end - log->start);
    log->end -= log->start;
    log->start = 0;
    do
        n = read(log->fd, log->window + log->end, WINDOW - log->end);
    while (n < 0 && errno == EINTR);
    if (n < 0)
        return -errno;
    log->end += (size_t)n;
    log->eof = n == 0;
    return 0;
}

/* The next line without its end. 0, LOGCSV_END, LOGCSV_E_FORMAT or -errno. */
static int next_line(struct logcsv *log, const char **ret, size_t *ret_length) {
    const char *newline;
    size_t length;
    int r;

    for (;;) {
        newline = memchr(log->window + log->start, '\n', log->end - log->start);
        length = newline ? (size_t)(newline - log->window) - log->start : log->end - log->start;
        if (length > LINE_MAX_CHARS) {
            log->line++;
            wrong(log, "the line is longer than %d characters; is this a log CSV?", LINE_MAX_CHARS);
            return LOGCSV_E_FORMAT;
        }
        if (newline || log->eof)
            break;
        r = fill(log);
        if (r < 0)
            return r;
    }
    if (!newline && length == 0)
        return LOGCSV_END;
    *ret = log->window + log->start;
    log->start += length + (newline ? 1 : 0);
    log->line++;
    if (length && (*ret)[length - 1] == '\r')
        length--;
    *ret_length = length;
    return 0;
}

static bool blank(char c) {
    return c == ' ' || c == '\t';
}

static void trim(const char **text, size_t *length) {
    while (*length && blank(**text)) {
        (*text)++;
        (*length)--;
    }
    while (*length && blank((*text)[*length - 1]))
        (*length)--;
}

/* Next line that is neither empty nor a comment; comments go to on_comment, when given. */
static int next_content(struct logcsv *log,
                        void (*on_comment)(struct logcsv *, const char *, size_t), const char **ret,
                        size_t *ret_length) {
    int r;

    for (;;) {
        r = next_line(log, ret, ret_length);
        if (r)
            return r;
        trim(ret, ret_length);
        if (*ret_length == 0)
            continue;
        if (**ret != '#')
            return 0;
        if (on_comment)
            on_comment(log, *ret, *ret_length);
    }
}

/* Cuts the next comma-separated field off the line; false when there is none left. */
static bool next_field(const char **line, const char *end, const char **ret, size_t *ret_length) {
    const char *comma;

    if (!*line)
        return false;
    comma = memchr(*line, ',', (size_t)(end - *line));
    *ret = *line;
    *ret_length = (size_t)((comma ? comma : end) - *line);
    *line = comma ? comma + 1 : NULL;
    trim(ret, ret_length);
    return true;
}

/* ---- header ---------------------------------------------------------------------------------- */

static void take_hint(struct logcsv *log, const char *text, size_t length) {
    static const char word[] = "capacity_Ah";
    const char *end = text + length, *p = memmem(text, length, word, sizeof word - 1);
    size_t n = 0;
    double value;

    if (!p || isfinite(log->capacity_Ah))
        return;
    p += sizeof word - 1;
    while (p < end && (blank(*p) || *p == '='))
        p++;
    while (p + n < end && ((p[n] >= '0' && p[n] <= '9') || p[n] == '.'))
        n++;
    if (logcsv_number(p, n, &value) == 0 && value > 0.0)
        log->capacity_Ah = value;
}

static int column_of(const char *name, size_t length) {
    for (int i = 0; i < LOGCSV_COLUMNS; i++)
        if (strlen(column_names[i]) == length && !memcmp(column_names[i], name, length))
            return i;
    return -1;
}

/* What may stand in a message: printable ASCII, the rest as '?'. */
static const char *shown(const char *text, size_t length, char buf[48]) {
    size_t n = length < 44 ? length : 44;

    for (size_t i = 0; i < n; i++)
        buf[i] = (char)(text[i] >= ' ' && text[i] <= '~' ? text[i] : '?');
    text_append(buf, 48, &n, "%s", n < length ? "..." : "");
    return buf;
}

static int take_column(struct logcsv *log, const char *name, size_t length) {
    size_t at = strlen(log->ignored);
    char buf[48];
    int column = column_of(name, length);

    if (log->n_fields == FIELDS_MAX)
        return wrong(log, "more than %d columns; remove those that are not needed", FIELDS_MAX);
    if (column >= 0 && log->has[column])
        return wrong(log, "column %s stands twice; each name is accepted once",
                     column_names[column]);
    if (column >= 0)
        log->has[column] = true;
    else
        text_append(log->ignored, sizeof log->ignored, &at, "%s%s", at ? ", " : "",
                    shown(name, length, buf));
    log->column[log->n_fields++] = column;
    return 0;
}

static int read_header(struct logcsv *log) {
    const char *line, *end, *name;
    size_t length;
    int r = next_content(log, take_hint, &line, &length);

    if (r == LOGCSV_END)
        return wrong(log, "no header line; %s", COLUMNS_ACCEPTED);
    if (r)
        return r;
    end = line + length;
    while (next_field(&line, end, &name, &length)) {
        r = take_column(log, name, length);
        if (r)
            return r;
    }
    for (int i = LOGCSV_TIME; i <= LOGCSV_VOLTAGE; i++)
        if (!log->has[i])
            return wrong(log, "the header has no column %s; %s", column_names[i], COLUMNS_ACCEPTED);
    return 0;
}

/* ---- rows ------------------------------------------------------------------------------------ */

static int take_field(struct logcsv *log, int column, const char *text, size_t length,
                      double *ret) {
    char buf[48];

    if (length == 0 && column > LOGCSV_VOLTAGE)
        return 0;
    if (length == 0)
        return wrong(log, "%s is empty; accepted is a decimal number like 3.712",
                     column_names[column]);
    if (logcsv_number(text, length, ret) == 0)
        return 0;
    return wrong(log, "%s is \"%s\"; accepted is a decimal number like 3.712", column_names[column],
                 shown(text, length, buf));
}

static int take_row(struct logcsv *log, const char *line, size_t length, struct logcsv_row *row) {
    const char *end = line + length, *text;
    size_t n = 0;
    int r;

    for (; n < log->n_fields && next_field(&line, end, &text, &length); n++) {
        int column = log->column[n];

        if (column < 0)
            continue;
        r = take_field(log, column, text, length, &row->value[column]);
        if (r)
            return r;
    }
    if (n == log->n_fields && !line)
        return 0;
    while (next_field(&line, end, &text, &length))
        n++;
    return wrong(log, "%zu fields; accepted are %zu, as in the header", n, log->n_fields);
}

int logcsv_next(struct logcsv *log, struct logcsv_row *ret) {
    struct logcsv_row row = {{UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN}};
    const char *line;
    size_t length;
    int r;

    if (log->message[0])
        return LOGCSV_E_FORMAT;
    r = next_content(log, NULL, &line, &length);
    if (r == 0)
        r = take_row(log, line, length, &row);
    if (r)
        return r;
    if (!(row.value[LOGCSV_TIME] > log->time_s))
        return wrong(log, "time_s %.15g does not rise after %.15g; accepted is a rising time",
                     row.value[LOGCSV_TIME], log->time_s);
    log->time_s = row.value[LOGCSV_TIME];
    *ret = row;
    return 0;
}

/* ---- life ------------------------------------------------------------------------------------ */

int logcsv_new(struct logcsv **ret, int fd, const char *name, char *ret_message, size_t size) {
    scoped(logcsv_free_p) struct logcsv *log = calloc(1, sizeof *log);
    size_t length = 0;
    int r;

    if (!log) {
        close(fd);
        return -ENOMEM;
    }
    log->fd = fd;
    log->capacity_Ah = UNKNOWN;
    log->time_s = -ENDLESS;
    text_append(log->name, sizeof log->name, &length, "%s", name);
    r = read_header(log);
    if (r) {
        length = 0;
        text_append(ret_message, size, &length, "%s", log->message);
        return r;
    }
    *ret = log;
    log = NULL;
    return 0;
}

int logcsv_open(struct logcsv **ret, const char *path, char *ret_message, size_t size) {
    bool standard = strcmp(path, "-") == 0;
    int fd = standard ? fcntl(STDIN_FILENO, F_DUPFD_CLOEXEC, 3)
                      : open(path, O_RDONLY | O_CLOEXEC | O_NOCTTY);

    if (fd < 0)
        return -errno;
    return logcsv_new(ret, fd, standard ? "standard input" : path, ret_message, size);
}

void logcsv_free(struct logcsv *log) {
    if (!log)
        return;
    close(log->fd);
    free(log);
}

void logcsv_free_p(struct logcsv **log) {
    logcsv_free(*log);
}

const char *logcsv_message(const struct logcsv *log) {
    return log->message;
}

double logcsv_capacity_Ah(const struct logcsv *log) {
    return log->capacity_Ah;
}

int logcsv_has(const struct logcsv *log, enum logcsv_column column) {
    return log->has[column];
}

const char *logcsv_ignored(const struct logcsv *log) {
    return log->ignored;
}
