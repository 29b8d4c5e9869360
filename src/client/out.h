/* What the commands share on their way out: stdout, how the terminal is, and when a status counts
 * as old. */
#pragma once

#include "client/page.h"
#include "client/trouble.h"
#include "client/view.h"

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

enum { OUT_OLD_LEAST_S = 10, OUT_OLD_PERIODS = 3, OUT_OLD_TEXT = 128 };

/* All of it. Returns 0 or EX_IOERR. */
int out_write(const char *text, size_t length, struct trouble *trouble);

/* What the environment asks for, by LC_ALL, LC_CTYPE, LANG, TERM and NO_COLOR (no-color.org: set
 * and not empty). terminal: stdout is one. Fills style but for `old`. ret_ascii: see words_clean;
 * what is no terminal is given the text as it is. */
void out_style(bool terminal, struct page_style *style, bool *ret_ascii);

/* brinkd reports at every sample; after three periods without, and at least ten seconds, a status
 * is old. */
double out_old_after_s(const struct view *view);

/* Why the status is old at this boot time, or NULL when it is not. Returns buf. */
const char *out_old(const struct view *view, int64_t now_boot_us, char buf[OUT_OLD_TEXT]);
