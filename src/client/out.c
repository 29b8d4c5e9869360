/* stdout, the environment, the age of a status. */
#include "client/out.h"

#include "client/words.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sysexits.h>
#include <unistd.h>

int out_write(const char *text, size_t length, struct trouble *trouble) {
    while (length > 0) {
        ssize_t n = write(STDOUT_FILENO, text, length);
        if (n < 0 && errno == EINTR)
            continue;
        if (n < 0)
            return trouble_set(trouble, EX_IOERR, "standard output cannot be written: %s",
                               strerror(errno));
        text += n;
        length -= (size_t)n;
    }
    return 0;
}

static const char *set(const char *name) {
    const char *value = getenv(name);

    return value && *value ? value : NULL;
}

/* The first of the three that is set decides (POSIX.1-2017, Base Definitions 8.2). */
static bool says_utf8(void) {
    const char *locale = set("LC_ALL");

    if (!locale)
        locale = set("LC_CTYPE");
    if (!locale)
        locale = set("LANG");
    return locale && (strcasestr(locale, "UTF-8") || strcasestr(locale, "UTF8"));
}

void out_style(bool terminal, struct page_style *style, bool *ret_ascii) {
    const char *term = set("TERM");

    style->bar = terminal;
    style->unicode = terminal && says_utf8();
    style->colour = terminal && term && strcmp(term, "dumb") != 0 && !set("NO_COLOR");
    *ret_ascii = terminal && !style->unicode;
}

double out_old_after_s(const struct view *view) {
    return fmax(OUT_OLD_PERIODS * view->gauge.period_s, OUT_OLD_LEAST_S);
}

const char *out_old(const struct view *view, int64_t now_boot_us, char buf[OUT_OLD_TEXT]) {
    double age_s = (double)now_boot_us / 1e6 - view->t_boot_s;

    if (age_s <= out_old_after_s(view) && age_s > -1)
        return NULL;
    if (age_s > 0)
        snprintf(buf, OUT_OLD_TEXT, "written %s ago: brinkd has stopped or hangs",
                 words_span(age_s, (char[64]){0}, 64));
    else
        snprintf(buf, OUT_OLD_TEXT, "written in another boot or on another machine: age not known");
    return buf;
}
