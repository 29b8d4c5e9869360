/* The page: rows of a label and text that is broken into lines; each row has a bound of lines, and
 * the alerts get what is left of the page. The bounds add up to PAGE_LINES at the worst: unit 2,
 * old 1, why 1, blind 1, charge 1, left 1, next 1, what changes the stage 1 (2 with one pack), four
 * packs of 2, rail 1, gauge 1, alerts 1. */
#include "client/page.h"

#include "client/words.h"
#include "util/text.h"

#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>

enum {
    LABEL_LEAST = 8,
    LABEL_MOST = 12,
    GAP = 2,
    VALUE = 30, /* columns before the bar, and before what the time left is based on */
    BAR_MOST = 32,
    BAR_LEAST = 12,
    ALERT_LINES = 3,
    TEXT = 1024
};

/* Select graphic rendition, ECMA-48: bold, inverse. Colours proper are left to the
 * person's terminal. */
#define BOLD    "\033[1m"
#define INVERSE "\033[1;7m"
#define PLAIN   "\033[0m"

enum breaks { AT_COMMAS, AT_SPACES };

struct page {
    const struct view *view;
    const struct page_style *style;
    int64_t moment; /* see words_moment */
    size_t label;   /* columns of the labels with the gap behind */
    char *out;
    size_t length;
    int lines;
};

struct row {
    const char *label, *text;
    const char *label_sgr; /* NULL = plain */
    const char *sgr;       /* for the first marked bytes of text */
    size_t marked;
    int most; /* lines */
    enum breaks breaks;
};

struct text {
    char s[TEXT];
    size_t n;
};

static void add(struct text *t, const char *format, ...) __attribute__((format(printf, 2, 3)));
static void item(struct text *t, const char *format, ...) __attribute__((format(printf, 2, 3)));

static void add(struct text *t, const char *format, ...) {
    char words[TEXT];
    va_list args;

    va_start(args, format);
    vsnprintf(words, sizeof(words), format, args);
    va_end(args);
    text_append(t->s, sizeof(t->s), &t->n, "%s", words);
}

/* One more of a list with commas; nothing for an empty one. */
static void item(struct text *t, const char *format, ...) {
    char words[TEXT];
    va_list args;

    va_start(args, format);
    vsnprintf(words, sizeof(words), format, args);
    va_end(args);
    if (*words)
        text_append(t->s, sizeof(t->s), &t->n, "%s%s", t->n ? ", " : "", words);
}

/* ---- rows ----------------------------------------------------------------------------------- */

static void put(struct page *page, const char *format, ...) __attribute__((format(printf, 2, 3)));

static void put(struct page *page, const char *format, ...) {
    va_list args;

    va_start(args, format);
    int n = vsnprintf(page->out + page->length, PAGE_SIZE - page->length, format, args);
    va_end(args);
    if (n > 0 && (size_t)n < PAGE_SIZE - page->length)
        page->length += (size_t)n;
}

/* The bytes of the next line of text in so many columns. */
static size_t line_span(const char *text, size_t columns, enum breaks breaks) {
    size_t n = words_fit(text, columns), cut = 0;

    if (!text[n])
        return n;
    if (breaks == AT_COMMAS)
        for (size_t i = 1; i <= n; i++)
            if (text[i] == ' ' && text[i - 1] == ',')
                cut = i;
    if (cut == 0)
        for (size_t i = 1; i <= n; i++)
            if (text[i] == ' ')
                cut = i;
    return cut ? cut : n;
}

static int line_count(const char *text, size_t columns, enum breaks breaks) {
    int lines = 0;

    do {
        text += line_span(text, columns, breaks);
        text += strspn(text, " ");
        lines++;
    } while (*text);
    return lines;
}

static const char *sgr(const struct page *page, const char *code) {
    return page->style->colour && code ? code : "";
}

/* One line: its text is n bytes, of which the first marked ones carry a rendition. */
static void put_line(struct page *page, const struct row *row, const char *text, size_t n,
                     const char *gap) {
    bool first = text == row->text;
    size_t marked = !first ? 0 : row->marked < n ? row->marked : n;
    const char *label = first ? row->label : "";
    size_t used = words_columns(label);
    size_t space = used + GAP > page->label ? GAP : page->label - used;

    put(page, "%s%s%s%*s", sgr(page, first ? row->label_sgr : NULL), label,
        sgr(page, first && row->label_sgr ? PLAIN : NULL), (int)space, "");
    if (marked)
        put(page, "%s%.*s%s", sgr(page, row->sgr), (int)marked, text, sgr(page, PLAIN));
    put(page, "%.*s%s", (int)(n - marked), text + marked, gap);
    while (page->length > 0 && page->out[page->length - 1] == ' ')
        page->length--;
    put(page, "\n");
    page->lines++;
}

static void put_row(struct page *page, const struct row *row) {
    const char *text = row->text;

    for (int line = 1; line == 1 || *text; line++) {
        size_t label = line == 1 ? words_columns(row->label) + GAP : 0;
        size_t room = PAGE_COLUMNS - (label > page->label ? label : page->label);
        size_t n = line_span(text, room, row->breaks);
        const char *gap = "";
        if (line == row->most && text[n]) {
            gap = page->style->unicode ? " \u2026" : " ..";
            n = words_fit(text, room - 3);
        }
        while (n > 0 && text[n - 1] == ' ')
            n--;
        put_line(page, row, text, n, gap);
        if (line == row->most)
            return;
        text += n;
        text += strspn(text, " ");
    }
}

static void put_text(struct page *page, const char *label, const char *text, int most) {
    put_row(page, &(struct row){.label = label, .text = text, .most = most});
}

/* ---- words of the view ------------------------------------------------------------------------
 */

static bool is(const char *a, const char *b) {
    return strcmp(a, b) == 0;
}

static bool alerted(const struct view *view, const char *name) {
    for (size_t i = 0; i < view->n_alerts && i < VIEW_ALERTS; i++)
        if (is(view->alert[i].name, name))
            return true;
    return false;
}

/* The words for a name of the status object; the name itself when it is none of the table. */
static const char *say(const char *const table[][2], size_t n, const char *name) {
    for (size_t i = 0; i < n; i++)
        if (is(table[i][0], name))
            return table[i][1];
    return name;
}
#define SAY(table, name) say(table, sizeof(table) / sizeof((table)[0]), name)

static const char *volts(double value, char *buf) {
    return words_value(value, "V", 2, 0, buf, 32);
}

/* ---- the unit ---------------------------------------------------------------------------------
 */

static void put_unit(struct page *page) {
    static const char *const supplies[][2] = {
        {"pack", "on pack"},
        {"adapter", "on adapter"},
        {"both", "on adapter and pack"},
        {"unknown", "supply not known"},
    };
    const struct view *v = page->view;
    char label[VIEW_NAME], since[80];
    struct text t = {0};

    words_shorten(v->unit, PAGE_COLUMNS / 2, page->style->unicode, label, sizeof(label));
    item(&t, "%s", v->stage);
    size_t marked = t.n;
    words_since(page->moment, v->t_boot_s - v->stage_since_s, since, sizeof(since));
    add(&t, "%s%s", *since ? " " : "", since);
    if (*v->supply) {
        item(&t, "%s",
             is(v->supply, "pack") && v->n_packs > 1 ? "on packs" : SAY(supplies, v->supply));
        words_since(page->moment, v->t_boot_s - v->supply_since_s, since, sizeof(since));
        if (!is(v->supply, "unknown"))
            add(&t, "%s%s", *since ? " " : "", since);
    }
    if (is(v->flow, "charging") || is(v->flow, "resting") ||
        (is(v->flow, "discharging") && !is(v->supply, "pack")))
        item(&t, "%s", v->flow);
    const char *code = is(v->stage, "reserve") ? BOLD : is(v->stage, "ample") ? NULL : INVERSE;
    put_row(page,
            &(struct row){
                .label = label, .text = t.s, .sgr = code, .marked = code ? marked : 0, .most = 2});
}

static void put_why(struct page *page) {
    static const char *const causes[][2] = {
        {"charge", "charge at its limit"},
        {"rest", "voltage at rest at its limit"},
        {"left", "time left at its limit"},
        {"keep", "time left at what a clean stop needs"},
        {"floor", "terminal voltage under the floor"},
        {"blind", "gauge silent, and the model's cautious end at the cutoff"},
    };
    const struct view *v = page->view;
    struct text t = {0};
    char name[VIEW_NAME];

    if (is(v->stage, "ample") || is(v->cause, "none") || !*v->cause)
        return;
    item(&t, "%s", SAY(causes, v->cause));
    if (*v->cause_pack && v->n_packs > 1) {
        words_shorten(v->cause_pack, LABEL_MOST, page->style->unicode, name, sizeof(name));
        item(&t, "%s", name);
    }
    put_text(page, "why", t.s, 1);
}

static void put_blind(struct page *page) {
    const struct view *v = page->view;
    struct text t = {0};
    char age[64];

    if (!v->blind)
        return;
    words_age(v->age_s, age, sizeof(age));
    if (isnan(v->age_s))
        add(&t, "no believable reading yet");
    else if (is(v->gauge.state, "lost") || is(v->gauge.state, "absent"))
        add(&t, "gauge gone, last reading %s ago", age);
    else if (alerted(v, "reading-impossible"))
        add(&t, "nothing believable for %s", age);
    else
        add(&t, "gauge silent for %s", age);
    add(&t, "%s", isnan(v->charge) ? "" : ": going by the model");
    put_row(page, &(struct row){.label = "blind", .label_sgr = BOLD, .text = t.s, .most = 1});
}

/* Filled up to the low bound, half filled up to the high one. */
static void add_bar(struct text *t, const struct view *v, bool unicode, int width) {
    static const char *const marks[2][3] = {{"#", ":", "-"}, {"\u2588", "\u2592", "\u2591"}};
    double low = isnan(v->charge_low) ? v->charge : v->charge_low;
    double high = isnan(v->charge_high) ? v->charge : v->charge_high;

    add(t, "[");
    for (int i = 0; i < width - 2; i++) {
        double middle = (i + 0.5) / (width - 2);
        add(t, "%s", marks[unicode][middle <= low ? 0 : middle <= high ? 1 : 2]);
    }
    add(t, "]");
}

static void put_charge(struct page *page) {
    const struct view *v = page->view;
    struct text t = {0};
    char share[32];
    int room = (int)(PAGE_COLUMNS - page->label) - VALUE;

    if (isnan(v->charge)) {
        put_text(page, "charge", "not known yet: waiting for the first believable reading", 1);
        return;
    }
    add(&t, "%-6s", words_share(v->charge, share, sizeof(share)));
    if (!isnan(v->charge_low) && !isnan(v->charge_high))
        add(&t, " between %.0f and %.0f", v->charge_low * 100, v->charge_high * 100);
    if (page->style->bar && room >= BAR_LEAST && t.n < VALUE) {
        add(&t, "%*s", (int)(VALUE - t.n), "");
        add_bar(&t, v, page->style->unicode, room < BAR_MOST ? room : BAR_MOST);
        /* A row would count the bar's characters as wide ones. */
        put(page, "%-*s%s\n", (int)page->label, "charge", t.s);
        page->lines++;
        return;
    }
    put_text(page, "charge", t.s, 1);
}

/* The pack that lasts longest: its end is the unit's. */
static const struct view_pack *last_pack(const struct view *v) {
    const struct view_pack *last = NULL;

    for (size_t i = 0; i < v->n_packs; i++)
        if (!isnan(v->pack[i].left_s) && (!last || v->pack[i].left_s > last->left_s))
            last = &v->pack[i];
    return last;
}

/* "at 3.1 W, to 8 % charge": what the time left is based on. */
static void basis(const struct page *page, struct text *t) {
    const struct view_pack *last = last_pack(page->view);
    char value[32], name[VIEW_NAME];

    if (!isnan(page->view->power_mean_W))
        item(t, "at %s", words_value(page->view->power_mean_W, "W", 1, 1, value, sizeof(value)));
    if (!last)
        return;
    if (is(last->ends_by, "charge") && !isnan(last->cutoff_charge))
        item(t, "to %s charge", words_share(last->cutoff_charge, value, sizeof(value)));
    else if (is(last->ends_by, "rest") && !isnan(last->cutoff_rest_V))
        item(t, "to %s at rest", volts(last->cutoff_rest_V, value));
    else if (is(last->ends_by, "floor") && !isnan(last->floor_V))
        item(t, "to the floor, %s", volts(last->floor_V, value));
    else
        return;
    if (page->view->n_packs > 1) {
        words_shorten(last->name, LABEL_LEAST, page->style->unicode, name, sizeof(name));
        add(t, " of %s", name);
    }
}

static void put_left(struct page *page) {
    const struct view *v = page->view;
    struct text t = {0}, based = {0};
    char left[64];

    if (isnan(v->left_s)) {
        put_text(page, "left", "not known yet", 1);
        return;
    }
    if (isinf(v->left_s)) {
        put_text(page, "left",
                 is(v->flow, "charging") ? "no end in sight while charging" : "no end in sight", 1);
        return;
    }
    add(&t, "%s, ", words_span(v->left_s, left, sizeof(left)));
    if (isnan(v->left_least_s))
        add(&t, "least not known");
    else
        add(&t, "at least %s", words_span(v->left_least_s, left, sizeof(left)));
    basis(page, &based);
    if (based.n)
        add(&t, "%*s%s", t.n + 2 < VALUE ? (int)(VALUE - t.n) : 2, "", based.s);
    put_text(page, "left", t.s, 1);
}

/* ---- what comes next --------------------------------------------------------------------------
 */

static void next_item(const struct page *page, struct text *t, const char *what, double in_s) {
    char when[80];

    if (isfinite(in_s))
        item(t, "%s %s", what, words_about(page->moment, in_s, when, sizeof(when)));
}

static const char *leaving_words(const char *request) {
    static const char *const requests[][2] = {
        {"none", "power-off is ordered"},
        {"reported", "stop told, not ordered (action = report): nothing is powered off"},
        {"written", "power-off is ordered"},
        {"failed", "the power-off could not be ordered: power off by hand, now"},
        {"", "power-off is ordered"},
    };

    return SAY(requests, request);
}

static void put_next(struct page *page) {
    const struct view *v = page->view;
    struct text t = {0};
    char left[64];

    if (is(v->stage, "leaving"))
        item(&t, "%s", leaving_words(v->request));
    else if (is(v->stage, "edge") && !isnan(v->grace_left_s))
        item(&t, "leaving in %s", words_span(v->grace_left_s, left, sizeof(left)));
    else if (is(v->stage, "edge"))
        item(&t, "leaving when the grace time is over");
    else {
        if (is(v->stage, "ample") && v->to_reserve_s > 0)
            next_item(page, &t, "reserve", v->to_reserve_s);
        next_item(page, &t, "stop", v->left_s);
        next_item(page, &t, "full", v->full_s);
    }
    if (!t.n)
        item(&t, "%s", isinf(v->left_s) ? "no stop in sight" : "not known yet");
    put_text(page, "next", t.s, 1);
}

static void reserve_words(const struct view *v, struct text *t, const char *between) {
    char value[64];
    double charge = v->ladder.reserve_charge, left = v->ladder.reserve_left_s;

    if (!isnan(charge))
        add(t, " %s charge", words_share(charge, value, sizeof(value)));
    if (left > 0)
        add(t, "%s%s left", isnan(charge) ? " " : between, words_span(left, value, sizeof(value)));
}

static void edge_words(const struct view *v, struct text *t) {
    const struct view_pack *pack = v->n_packs == 1 ? &v->pack[0] : NULL;
    char value[64];

    if (!pack)
        add(t, "edge when the last pack is at its cutoff");
    else if (!isnan(pack->cutoff_charge) && !isnan(pack->cutoff_rest_V))
        add(t, "edge at %s charge, %s at rest", words_share(pack->cutoff_charge, value, 32),
            volts(pack->cutoff_rest_V, (char[32]){0}));
    else
        add(t, "edge at the pack's cutoff");
    if (!isnan(v->ladder.keep_s))
        add(t, ", or under %s left", words_span(v->ladder.keep_s, value, sizeof(value)));
    if (pack && !isnan(pack->floor_V))
        add(t, ", at once under %s", volts(pack->floor_V, value));
}

/* What would change the stage. */
static void put_change(struct page *page) {
    const struct view *v = page->view;
    struct text t = {0};

    if (is(v->stage, "leaving"))
        add(&t, "nothing takes this stage back");
    else if (is(v->stage, "edge"))
        add(&t, "unless an adapter lifts the pack before");
    else if (is(v->stage, "reserve") && is(v->flow, "charging")) {
        add(&t, "ample again well above");
        reserve_words(v, &t, " and ");
    } else if (is(v->stage, "reserve"))
        edge_words(v, &t);
    else {
        add(&t, "reserve at");
        reserve_words(v, &t, " or under ");
    }
    put_text(page, "", t.s, v->n_packs == 1 ? 2 : 1);
}

/* ---- packs, rail, gauge -----------------------------------------------------------------------
 */

static void pack_label(const struct page *page, const struct view_pack *pack, char *ret) {
    words_shorten(pack->name, LABEL_MOST, page->style->unicode, ret, VIEW_NAME);
}

static void current_item(struct text *t, const struct view_pack *pack) {
    char value[32];

    if (isnan(pack->current_A))
        return;
    words_value(fabs(pack->current_A), "A", 2, 0.1, value, sizeof(value));
    item(t, "%s%s%s", value, pack->current_A < 0 ? " in" : "",
         is(pack->current_from, "model")   ? " by model"
         : is(pack->current_from, "gauge") ? " measured"
                                           : "");
}

static void put_pack(struct page *page, const struct view_pack *pack) {
    struct text t = {0};
    char label[VIEW_NAME], value[32];

    if (page->view->n_packs > 1 && !isnan(pack->charge))
        item(&t, "%s", words_share(pack->charge, value, sizeof(value)));
    if (pack->spent)
        item(&t, "spent");
    if (!pack->known)
        item(&t, "no believable reading yet");
    if (!isnan(pack->terminal_V))
        item(&t, "%s %s", volts(pack->terminal_V, value), page->view->blind ? "last" : "now");
    if (!isnan(pack->rest_V))
        item(&t, "%s at rest", volts(pack->rest_V, value));
    if (!isnan(pack->sag_V))
        item(&t, "%s %s", pack->sag_V < 0 ? "lift" : "sag",
             words_value(fabs(pack->sag_V), "V", 2, 1, value, sizeof(value)));
    current_item(&t, pack);
    if (!isnan(pack->temp_C))
        item(&t, "%s%s", words_value(pack->temp_C, "C", 0, 0, value, sizeof(value)),
             is(pack->temp_from, "assumed") ? " assumed" : "");
    pack_label(page, pack, label);
    put_text(page, label, t.s, 2);
}

static void counted(struct text *t, double n, const char *one, const char *many) {
    if (n >= 1)
        item(t, "%.0f %s", n, n < 2 ? one : many);
}

static void put_gauge(struct page *page) {
    const struct view_gauge *g = &page->view->gauge;
    struct text t = {0};
    char device[VIEW_PATH], age[64];

    words_shorten(g->device, 24, page->style->unicode, device, sizeof(device));
    item(&t, "%s", device);
    if (is(g->state, "lost"))
        item(&t, "gone");
    else if (is(g->state, "absent"))
        item(&t, "not found");
    if (!isnan(page->view->age_s))
        item(&t, "%s ago", words_age(page->view->age_s, age, sizeof(age)));
    if (g->bad_lines >= 1 && !isnan(g->lines))
        item(&t, "%.0f bad %s of %.0f", g->bad_lines, g->bad_lines < 2 ? "line" : "lines",
             g->lines);
    else
        counted(&t, g->lines, "line", "lines");
    counted(&t, g->refused, "impossible", "impossible");
    counted(&t, g->repeated, "repeated", "repeated");
    put_text(page, "gauge", t.s, page->view->n_packs > 2 ? 1 : 2);
}

/* ---- alerts -----------------------------------------------------------------------------------
 */

/* The rest in one line: how many, and their names as far as they fit. */
static void put_more_alerts(struct page *page, size_t from) {
    const struct view *v = page->view;
    struct text t = {0};

    add(&t, "%s%zu %s, see `brink raw`: ", from ? "and " : "", v->n_alerts - from,
        from ? "more" : "alerts");
    for (size_t i = from; i < v->n_alerts && i < VIEW_ALERTS; i++)
        add(&t, "%s%s", i > from ? ", " : "", v->alert[i].name);
    put_row(page, &(struct row){.label = from ? "" : "alert",
                                .label_sgr = from ? NULL : BOLD,
                                .text = t.s,
                                .most = 1,
                                .breaks = AT_SPACES});
}

static void put_alerts(struct page *page) {
    const struct view *v = page->view;

    for (size_t i = 0; i < v->n_alerts; i++) {
        struct row row = {.label = "alert", .label_sgr = BOLD, .breaks = AT_SPACES};
        int room = PAGE_LINES - page->lines;
        if (i >= VIEW_ALERTS || (room == 1 && i + 1 < v->n_alerts)) {
            put_more_alerts(page, i);
            return;
        }
        int spare = i + 1 < v->n_alerts ? room - 1 : room; /* a line for "and more" */
        row.text = *v->alert[i].text ? v->alert[i].text : v->alert[i].name;
        int wanted = line_count(row.text, PAGE_COLUMNS - page->label, AT_SPACES);
        row.most = wanted < ALERT_LINES ? wanted : ALERT_LINES;
        row.most = row.most < spare ? row.most : spare;
        put_row(page, &row);
    }
}

size_t page_write(const struct view *view, const struct page_style *style, char ret[PAGE_SIZE]) {
    struct page page = {.view = view, .style = style, .out = ret, .label = LABEL_LEAST + GAP};
    char label[VIEW_NAME], value[32];

    *ret = '\0';
    page.moment = words_moment(view->written);
    for (size_t i = 0; i < view->n_packs; i++) {
        pack_label(&page, &view->pack[i], label);
        if (words_columns(label) + GAP > page.label)
            page.label = words_columns(label) + GAP;
    }
    put_unit(&page);
    if (style->old)
        put_row(&page,
                &(struct row){.label = "old", .label_sgr = BOLD, .text = style->old, .most = 1});
    put_why(&page);
    put_blind(&page);
    put_charge(&page);
    put_left(&page);
    put_next(&page);
    put_change(&page);
    for (size_t i = 0; i < view->n_packs; i++)
        put_pack(&page, &view->pack[i]);
    if (!isnan(view->rail_V))
        put_text(&page, "rail", volts(view->rail_V, value), 1);
    put_gauge(&page);
    put_alerts(&page);
    return page.length;
}
