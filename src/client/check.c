/* The line of the health check: words, a bar, figures with their limits. */
#include "client/check.h"

#include "client/words.h"
#include "util/text.h"

#include <math.h>
#include <string.h>

static const double not_set = (double)NAN;

static const char *const code_words[] = {"OK", "WARNING", "CRITICAL", "UNKNOWN"};

static enum check_code judge(const struct view *v, const char *old) {
    static const struct {
        const char *stage;
        enum check_code code;
    } stages[] = {
        {"ample", CHECK_OK},
        {"reserve", CHECK_WARNING},
        {"edge", CHECK_CRITICAL},
        {"leaving", CHECK_CRITICAL},
    };
    enum check_code code = CHECK_UNKNOWN;

    for (size_t i = 0; i < sizeof(stages) / sizeof(stages[0]); i++)
        if (strcmp(v->stage, stages[i].stage) == 0)
            code = stages[i].code;
    if (old || (code != CHECK_CRITICAL && (v->blind || isnan(v->charge))))
        return CHECK_UNKNOWN;
    return code;
}

/* The bar parts words from figures: none may stand in the words. One line, whatever comes. */
static void no_bars(char *text) {
    for (; *text; text++)
        if (*text == '|' || *text == '\n')
            *text = '/';
}

static void add_words(const struct view *v, const char *old, char *ret, size_t *n) {
    char word[64];

    if (*v->unit)
        text_append(ret, CHECK_SIZE, n, "%s ", v->unit);
    text_append(ret, CHECK_SIZE, n, "%s", v->stage);
    if (v->blind && isnan(v->age_s))
        text_append(ret, CHECK_SIZE, n, ", blind");
    else if (v->blind)
        text_append(ret, CHECK_SIZE, n, ", blind for %s", words_age(v->age_s, word, sizeof(word)));
    if (isnan(v->charge))
        text_append(ret, CHECK_SIZE, n, ", charge not known");
    else
        text_append(ret, CHECK_SIZE, n, ", charge %s", words_share(v->charge, word, sizeof(word)));
    if (!isnan(v->left_s)) /* "no end" for an endless one */
        text_append(ret, CHECK_SIZE, n, ", left %s", words_span(v->left_s, word, sizeof(word)));
    if (isfinite(v->left_least_s))
        text_append(ret, CHECK_SIZE, n, ", at least %s",
                    words_span(v->left_least_s, word, sizeof(word)));
    for (size_t i = 0; i < v->n_alerts && i < VIEW_ALERTS; i++)
        text_append(ret, CHECK_SIZE, n, "%s%s", i ? ", " : ", alerts: ", v->alert[i].name);
    if (old)
        text_append(ret, CHECK_SIZE, n, "; %s", old);
}

/* The charge under which the unit goes: of the pack that goes lowest. */
static double cutoff_charge(const struct view *v) {
    double least = not_set;

    for (size_t i = 0; i < v->n_packs; i++)
        least = fmin(least, v->pack[i].cutoff_charge);
    return least;
}

/* label=value[unit];warn;crit;min;max. A limit "25:" is met below 25. What is not known is left
 * out. */
static void add_figure(char *ret, size_t *n, const char *label, double value, const char *unit,
                       int decimals, double warn, double crit, const char *range) {
    text_append(ret, CHECK_SIZE, n, " %s=%.*f%s;", label, decimals, value, unit);
    if (!isnan(warn))
        text_append(ret, CHECK_SIZE, n, "%.*f:", decimals, warn);
    text_append(ret, CHECK_SIZE, n, ";");
    if (!isnan(crit))
        text_append(ret, CHECK_SIZE, n, "%.*f:", decimals, crit);
    text_append(ret, CHECK_SIZE, n, ";%s", range);
}

static void add_figures(const struct view *v, char *ret, size_t *n) {
    double warn_left = v->ladder.reserve_left_s > 0 ? v->ladder.reserve_left_s : not_set;

    if (isnan(v->charge) && !isfinite(v->left_s))
        return;
    text_append(ret, CHECK_SIZE, n, " |");
    if (!isnan(v->charge))
        add_figure(ret, n, "charge", v->charge * 100, "%", 1, v->ladder.reserve_charge * 100,
                   cutoff_charge(v) * 100, "0;100");
    if (isfinite(v->left_s))
        add_figure(ret, n, "left", v->left_s, "s", 0, warn_left, not_set, "0;");
    if (isfinite(v->left_least_s))
        add_figure(ret, n, "least", v->left_least_s, "s", 0, not_set, v->ladder.keep_s, "0;");
}

enum check_code check_write(const struct view *v, const char *old, char ret[CHECK_SIZE]) {
    enum check_code code = judge(v, old);
    size_t n = 0;

    text_append(ret, CHECK_SIZE, &n, "%s - ", code_words[code]);
    add_words(v, old, ret, &n);
    no_bars(ret);
    add_figures(v, ret, &n);
    text_append(ret, CHECK_SIZE, &n, "\n");
    return code;
}

enum check_code check_unknown(const char *words, char ret[CHECK_SIZE]) {
    size_t n = 0;

    text_append(ret, CHECK_SIZE - 1, &n, "%s - %s", code_words[CHECK_UNKNOWN], words);
    no_bars(ret);
    text_append(ret, CHECK_SIZE, &n, "\n");
    return CHECK_UNKNOWN;
}
