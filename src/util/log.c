/* Log lines. Whether stderr is the journal is asked anew each time: lines are rare, and so the
 * level stays the only thing kept. */
#include "util/log.h"

#include <errno.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/uio.h>
#include <unistd.h>

/* Else each line would carry this file as its place in the code. */
#define SD_JOURNAL_SUPPRESS_LOCATION
#include <systemd/sd-journal.h>

enum { TEXT_MAX = 1024, FIELDS_MAX = 16 };

static enum log_level level_max = LOG_L_INFO;

void log_set_level(enum log_level level) {
    level_max = level;
}

/* JOURNAL_STREAM is "device:inode" of the stream that the service manager connected, see
 * systemd.exec(5). */
static bool stderr_is_journal(void) {
    const char *stream = getenv("JOURNAL_STREAM");
    unsigned long long device, inode;
    char rest;
    struct stat st;

    if (!stream || sscanf(stream, "%llu:%llu%c", &device, &inode, &rest) != 2)
        return false;
    return fstat(STDERR_FILENO, &st) == 0 && st.st_dev == (dev_t)device &&
           st.st_ino == (ino_t)inode;
}

static struct iovec part(const char *text) {
    return (struct iovec){.iov_base = (void *)text, .iov_len = strlen(text)};
}

static bool send_journal(enum log_level level, const char *const *fields, const char *message) {
    char priority[16], identifier[80];
    struct iovec parts[3 + FIELDS_MAX];
    int n = 0;

    snprintf(priority, sizeof(priority), "PRIORITY=%d", (int)level);
    snprintf(identifier, sizeof(identifier), "SYSLOG_IDENTIFIER=%s", program_invocation_short_name);
    parts[n++] = part(message);
    parts[n++] = part(priority);
    parts[n++] = part(identifier);
    for (size_t i = 0; fields && fields[i] && i < FIELDS_MAX; i++)
        parts[n++] = part(fields[i]);
    return sd_journal_sendv(parts, n) >= 0;
}

/* One write, so that lines of several processes do not mix; no control characters, because text
 * from outside may be in it. */
static void send_stderr(const char *text) {
    char line[TEXT_MAX + 1];
    size_t n = strnlen(text, TEXT_MAX);

    for (size_t i = 0; i < n; i++)
        line[i] = (unsigned char)text[i] < 0x20 || text[i] == 0x7f ? '?' : text[i];
    line[n++] = '\n';
    if (write(STDERR_FILENO, line, n) < 0)
        return; /* nobody left to tell */
}

static void send(enum log_level level, const char *const *fields, const char *format, va_list args)
    __attribute__((format(printf, 3, 0)));

static void send(enum log_level level, const char *const *fields, const char *format,
                 va_list args) {
    static const char key[] = "MESSAGE=";
    char message[sizeof(key) - 1 + TEXT_MAX];
    char *text = message + sizeof(key) - 1;

    if (level > level_max)
        return;
    memcpy(message, key, sizeof(key) - 1);
    int n = vsnprintf(text, TEXT_MAX, format, args);
    if (n < 0)
        return;
    if (n >= TEXT_MAX)
        memcpy(text + TEXT_MAX - 4, "...", 4);
    if (!stderr_is_journal() || !send_journal(level, fields, message))
        send_stderr(text);
}

void log_line(enum log_level level, const char *format, ...) {
    va_list args;

    va_start(args, format);
    send(level, NULL, format, args);
    va_end(args);
}

void log_fields(enum log_level level, const char *const *fields, const char *format, ...) {
    va_list args;

    va_start(args, format);
    send(level, fields, format, args);
    va_end(args);
}
