/* The health check: one line and the exit code of monitoring plugins (IETF draft "The Monitoring
 * Plugins Interface", 2023): 0 OK, 1 WARNING, 2 CRITICAL, 3 UNKNOWN. */
#pragma once

#include "client/view.h"

enum { CHECK_SIZE = 4096 };
enum check_code { CHECK_OK = 0, CHECK_WARNING = 1, CHECK_CRITICAL = 2, CHECK_UNKNOWN = 3 };

/* Fills ret with the line and its newline, returns the exit code. ample 0, reserve 1, edge and
 * leaving 2; blind, a charge that is not known, or an old status (old says why, NULL = it is not
 * old) 3, but blind at edge or leaving stays 2. */
enum check_code check_write(const struct view *view, const char *old, char ret[CHECK_SIZE]);

/* The line for when there is no status at all. Returns CHECK_UNKNOWN. */
enum check_code check_unknown(const char *words, char ret[CHECK_SIZE]);
