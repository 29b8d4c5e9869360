/* From JSON to struct view, by one table of keys for each kind of object. */
#include "client/view.h"

#include "client/words.h"

#include <math.h>
#include <string.h>
#include <sysexits.h>

enum { STATUS_VERSION = 1 };

enum kind { KIND_NUMBER, KIND_BOOL, KIND_NAME, KIND_PATH, KIND_TEXT };
static const size_t text_size[] = {
    [KIND_NAME] = VIEW_NAME, [KIND_PATH] = VIEW_PATH, [KIND_TEXT] = VIEW_TEXT};

struct field {
    const char *key;
    enum kind kind;
    size_t offset;
};

#define NUMBER(type, key)                                                                          \
    { #key, KIND_NUMBER, offsetof(struct type, key) }
#define BOOL(type, key)                                                                            \
    { #key, KIND_BOOL, offsetof(struct type, key) }
#define NAME(type, key)                                                                            \
    { #key, KIND_NAME, offsetof(struct type, key) }

static const struct field unit_fields[] = {
    NAME(view, unit),
    NAME(view, written),
    NAME(view, stage),
    NAME(view, cause),
    NAME(view, cause_pack),
    NAME(view, supply),
    NAME(view, flow),
    NAME(view, action),
    NAME(view, request),
    BOOL(view, blind),
    BOOL(view, endless),
    NUMBER(view, t_boot_s),
    NUMBER(view, stage_since_s),
    NUMBER(view, supply_since_s),
    NUMBER(view, charge),
    NUMBER(view, charge_low),
    NUMBER(view, charge_high),
    NUMBER(view, left_s),
    NUMBER(view, left_least_s),
    NUMBER(view, to_reserve_s),
    NUMBER(view, full_s),
    NUMBER(view, grace_left_s),
    NUMBER(view, power_W),
    NUMBER(view, power_mean_W),
    NUMBER(view, rail_V),
    NUMBER(view, age_s),
};

static const struct field pack_fields[] = {
    NAME(view_pack, name),
    NAME(view_pack, cells),
    NAME(view_pack, current_from),
    NAME(view_pack, temp_from),
    NAME(view_pack, ends_by),
    BOOL(view_pack, known),
    BOOL(view_pack, spent),
    BOOL(view_pack, endless),
    NUMBER(view_pack, series),
    NUMBER(view_pack, capacity_Ah),
    NUMBER(view_pack, charge),
    NUMBER(view_pack, charge_low),
    NUMBER(view_pack, charge_high),
    NUMBER(view_pack, terminal_V),
    NUMBER(view_pack, rest_V),
    NUMBER(view_pack, sag_V),
    NUMBER(view_pack, current_A),
    NUMBER(view_pack, power_W),
    NUMBER(view_pack, power_mean_W),
    NUMBER(view_pack, temp_C),
    NUMBER(view_pack, left_s),
    NUMBER(view_pack, left_least_s),
    NUMBER(view_pack, full_s),
    NUMBER(view_pack, cutoff_charge),
    NUMBER(view_pack, cutoff_rest_V),
    NUMBER(view_pack, floor_V),
    NUMBER(view_pack, resistance_ohm),
    NUMBER(view_pack, resistance_scale),
};

static const struct field gauge_fields[] = {
    NAME(view_gauge, kind),        {"device", KIND_PATH, offsetof(struct view_gauge, device)},
    NAME(view_gauge, state),       NUMBER(view_gauge, lines),
    NUMBER(view_gauge, bad_lines), NUMBER(view_gauge, refused),
    NUMBER(view_gauge, repeated),  NUMBER(view_gauge, period_s),
    NUMBER(view_gauge, silent_s),
};

static const struct field ladder_fields[] = {
    NUMBER(view_ladder, reserve_charge),
    NUMBER(view_ladder, reserve_left_s),
    NUMBER(view_ladder, keep_s),
    NUMBER(view_ladder, grace_s),
};

static const struct field alert_fields[] = {
    NAME(view_alert, name),
    {"text", KIND_TEXT, offsetof(struct view_alert, text)},
};

#define COUNT(fields) (sizeof(fields) / sizeof((fields)[0]))

/* What one reading of an object needs everywhere. */
struct reader {
    const char *where;
    bool ascii;
    struct trouble *trouble;
};

static int refuse(const struct reader *r, const char *key, const char *expected) {
    return trouble_set(r->trouble, EX_DATAERR,
                       "%s is no status of brinkd: \"%s\" is not %s. Use a brink and a brinkd of "
                       "one version, and look at the object itself with any text viewer",
                       r->where, key, expected);
}

/* Nothing in a status is that large; and what is printed stays in its columns. */
static double believable(double value) {
    return fabs(value) <= 1e12 ? value : (double)NAN;
}

static int read_field(const struct reader *r, const struct field *f, const json_t *value,
                      void *base) {
    void *to = (char *)base + f->offset;
    bool absent = !value || json_is_null(value);

    if (f->kind == KIND_NUMBER) {
        if (!absent && !json_is_number(value))
            return refuse(r, f->key, "a number");
        *(double *)to = absent ? (double)NAN : believable(json_number_value(value));
    } else if (f->kind == KIND_BOOL) {
        if (!absent && !json_is_boolean(value))
            return refuse(r, f->key, "true or false");
        *(bool *)to = json_is_true(value);
    } else {
        if (!absent && !json_is_string(value))
            return refuse(r, f->key, "a text");
        words_clean(absent ? "" : json_string_value(value), absent ? 0 : json_string_length(value),
                    r->ascii, to, text_size[f->kind]);
    }
    return 0;
}

/* An absent object leaves everything in it not known. */
static int read_object(const struct reader *r, const char *key, const json_t *object,
                       const struct field *fields, size_t n, void *base) {
    if (object && !json_is_null(object) && !json_is_object(object))
        return refuse(r, key, "an object");
    for (size_t i = 0; i < n; i++) {
        int code = read_field(r, &fields[i], json_object_get(object, fields[i].key), base);
        if (code)
            return code;
    }
    return 0;
}

/* null with `endless` beside it is no end in sight, see brink-status(7). */
static double with_end(double left_s, bool endless) {
    return endless && isnan(left_s) ? (double)INFINITY : left_s;
}

static int read_packs(const struct reader *r, const json_t *packs, struct view *ret) {
    if (packs && !json_is_array(packs))
        return refuse(r, "packs", "a list");
    ret->n_packs = json_array_size(packs);
    if (ret->n_packs > VIEW_PACKS)
        return refuse(r, "packs", "a list of at most four");
    for (size_t i = 0; i < ret->n_packs; i++) {
        struct view_pack *pack = &ret->pack[i];
        int code = read_object(r, "packs", json_array_get(packs, i), pack_fields,
                               COUNT(pack_fields), pack);
        if (code)
            return code;
        pack->left_s = with_end(pack->left_s, pack->endless);
    }
    return 0;
}

static int read_alerts(const struct reader *r, const json_t *alerts, struct view *ret) {
    if (alerts && !json_is_array(alerts))
        return refuse(r, "alerts", "a list");
    ret->n_alerts = json_array_size(alerts);
    for (size_t i = 0; i < ret->n_alerts && i < VIEW_ALERTS; i++) {
        int code = read_object(r, "alerts", json_array_get(alerts, i), alert_fields,
                               COUNT(alert_fields), &ret->alert[i]);
        if (code)
            return code;
    }
    return 0;
}

static int read_all(const struct reader *r, const json_t *status, struct view *ret) {
    int code = read_object(r, "status", status, unit_fields, COUNT(unit_fields), ret);

    if (!code)
        code = read_packs(r, json_object_get(status, "packs"), ret);
    if (!code)
        code = read_alerts(r, json_object_get(status, "alerts"), ret);
    if (!code)
        code = read_object(r, "gauge", json_object_get(status, "gauge"), gauge_fields,
                           COUNT(gauge_fields), &ret->gauge);
    if (!code)
        code = read_object(r, "ladder", json_object_get(status, "ladder"), ladder_fields,
                           COUNT(ladder_fields), &ret->ladder);
    ret->left_s = with_end(ret->left_s, ret->endless);
    return code;
}

int view_parse(const char *text, size_t length, const char *where, json_t **ret,
               struct trouble *trouble) {
    json_error_t error;
    char clean[128];

    json_object_seed(1); /* the objects are small and few: no need to ask the kernel for chance */
    json_t *json = json_loadb(text, length, JSON_REJECT_DUPLICATES | JSON_ALLOW_NUL, &error);
    if (json) {
        *ret = json;
        return 0;
    }
    words_clean(error.text, strlen(error.text), true, clean, sizeof(clean));
    if (length == 0)
        return trouble_set(trouble, EX_DATAERR,
                           "%s is empty: wait for brinkd's next report, or see "
                           "`systemctl status brinkd`",
                           where);
    return trouble_set(trouble, EX_DATAERR,
                       "%s is damaged or no status of brinkd: at byte %d, %s. If brinkd runs it "
                       "writes a sound one at its next report; else start it",
                       where, error.position, clean);
}

int view_read(const json_t *status, const char *where, bool ascii, struct view *ret,
              struct trouble *trouble) {
    struct reader r = {.where = where, .ascii = ascii, .trouble = trouble};
    const json_t *version = json_object_get(status, "brink");

    *ret = (struct view){0};
    if (!version)
        return trouble_set(trouble, EX_DATAERR,
                           "%s is no status of brinkd: the key \"brink\" is "
                           "not in it. Name the right one with --status or --socket",
                           where);
    if (!json_is_integer(version) || json_integer_value(version) != STATUS_VERSION)
        return trouble_set(trouble, EX_DATAERR,
                           "%s is of another version (this brink reads "
                           "\"brink\":%d): use the brink that came with its brinkd",
                           where, STATUS_VERSION);
    if (read_all(&r, status, ret) != 0)
        return trouble->code;
    if (!*ret->stage)
        return refuse(&r, "stage", "there");
    return 0;
}
