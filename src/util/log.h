/* Log lines: to the journal with structured fields when stderr is the journal, else to stderr.
 * Only daemon/ calls it: it needs libsystemd, which client and bench do not link, so those write to
 * stderr themselves. The level is the product's one mutable static. A text longer than 1023 bytes
 * ends in "...", more than 16 fields are left out. errno may change. */
#pragma once

enum log_level {
    LOG_L_ERROR = 3,
    LOG_L_WARNING = 4,
    LOG_L_NOTICE = 5,
    LOG_L_INFO = 6,
    LOG_L_DEBUG = 7
};

void log_set_level(enum log_level level);

void log_line(enum log_level level, const char *format, ...) __attribute__((format(printf, 2, 3)));

/* fields: NULL-ended array of "KEY=value" strings for the journal, or NULL. On stderr only the
 * text. */
void log_fields(enum log_level level, const char *const *fields, const char *format, ...)
    __attribute__((format(printf, 3, 4)));

#define log_error(...)   log_line(LOG_L_ERROR, __VA_ARGS__)
#define log_warning(...) log_line(LOG_L_WARNING, __VA_ARGS__)
#define log_notice(...)  log_line(LOG_L_NOTICE, __VA_ARGS__)
#define log_info(...)    log_line(LOG_L_INFO, __VA_ARGS__)
#define log_debug(...)   log_line(LOG_L_DEBUG, __VA_ARGS__)
