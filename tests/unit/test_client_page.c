/* The page: what it says in each state, and that it never leaves 20 lines of 80 columns. */
#include "client/page.h"

#include <setjmp.h>
#include <stdarg.h>

#include "client/words.h"
#include "unit/client_sample.h"

#include <cmocka.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

static char page[PAGE_SIZE];

static const char *plain(const struct view *view) {
    struct page_style style = {0};

    setenv("TZ", "UTC0", 1);
    tzset();
    page_write(view, &style, page);
    return page;
}

/* Frees json. */
static const char *plain_json(json_t *json) {
    struct view view = sample_view(json);

    return plain(&view);
}

static void says(const char *text, const char *words) {
    if (strstr(text, words))
        return;
    fprintf(stderr, "not on the page: %s\n%s", words, text);
    fail();
}

static void says_not(const char *text, const char *words) {
    if (!strstr(text, words))
        return;
    fprintf(stderr, "on the page: %s\n%s", words, text);
    fail();
}

static void the_usual_page_as_a_whole(void **state) {
    (void)state;
    assert_string_equal(plain_json(sample_json()),
                        "heron     ample since 05:51, on pack since 05:59\n"
                        "charge    63 %   between 60 and 66\n"
                        "left      5 h 40, at least 4 h 55       at 3.1 W, to 8 % charge\n"
                        "next      reserve about 10:22, stop about 11:52\n"
                        "          reserve at 25 % charge or under 1 h left\n"
                        "main      3.71 V now, 3.79 V at rest, sag 81 mV, 0.84 A by model, 11 C\n"
                        "rail      4.97 V\n"
                        "gauge     usb:1209:0001, 0.4 s ago, 3 bad lines of 29114\n");
}

static void a_bar_only_where_asked_for(void **state) {
    struct page_style style = {.bar = true};
    struct view v = sample_view(sample_json());

    (void)state;
    page_write(&v, &style, page);
    says(page, "charge    63 %   between 60 and 66      [##################::----------]\n");
    style.unicode = true;
    page_write(&v, &style, page);
    says(page, "[\u2588");
    says_not(page, "#");
    says_not(plain(&v), "[");
}

static void colour_only_where_asked_for(void **state) {
    struct page_style style = {.colour = true};
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "stage", json_string("edge"));
    json_array_append_new(json_object_get(json, "alerts"),
                          json_pack("{s:s,s:s}", "name", "overload", "text", "Words."));
    struct view v = sample_view(json);
    page_write(&v, &style, page);
    says(page, "\033[1;7medge\033[0m since");
    says(page, "\033[1malert\033[0m     Words.");
    says_not(plain(&v), "\033");
}

static void unknown_is_neither_empty_nor_full(void **state) {
    static const char *const keys[] = {"charge",       "charge_low",   "charge_high", "left_s",
                                       "left_least_s", "to_reserve_s", "age_s",       "rail_V"};
    json_t *json = sample_json();

    (void)state;
    for (size_t i = 0; i < sizeof(keys) / sizeof(keys[0]); i++)
        json_object_set_new(json, keys[i], json_null());
    json_object_set_new(json, "blind", json_true());
    json_object_set_new(json, "supply", json_string("unknown"));
    json_object_clear(sample_pack(json, 0));
    json_object_set_new(sample_pack(json, 0), "name", json_string("main"));
    const char *text = plain_json(json);
    says(text, "supply not known, discharging\n");
    says(text, "blind     no believable reading yet\n");
    says(text, "charge    not known yet");
    says(text, "left      not known yet\n");
    says(text, "next      not known yet\n");
    says(text, "main      no believable reading yet\n");
    says_not(text, "0 %\n");
    says_not(text, "rail");
}

static void blind_is_said_plainly(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "blind", json_true());
    json_object_set_new(json, "age_s", json_real(190));
    struct view v = sample_view(json);
    says(plain(&v), "blind     gauge silent for 3 min 10 s: going by the model\n");
    says(plain(&v), "3.71 V last"); /* not "now" */
    strcpy(v.gauge.state, "lost");
    says(plain(&v), "blind     gauge gone, last reading 3 min 10 s ago: going by the model\n");
    strcpy(v.gauge.state, "open");
    v.n_alerts = 1;
    strcpy(v.alert[0].name, "reading-impossible");
    says(plain(&v), "blind     nothing believable for 3 min 10 s: going by the model\n");
}

static void each_stage_says_what_changes_it(void **state) {
    static const struct {
        const char *stage, *cause, *request, *words[3];
    } rows[] = {
        {"reserve",
         "left",
         "none",
         {"why       time left at its limit\n", "stop about 11:52\n",
          "edge at 8 % charge, 3.30 V at rest, or under 2 min left,\n          at once under 3.00 "
          "V"}},
        {"edge",
         "keep",
         "none",
         {"why       time left at what a clean stop needs\n", "next      leaving in 42 s\n",
          "          unless an adapter lifts the pack before\n"}},
        {"leaving",
         "floor",
         "reported",
         {"why       terminal voltage under the floor\n", "nothing is powered off\n",
          "          nothing takes this stage back\n"}},
        {"leaving",
         "charge",
         "written",
         {"why       charge at its limit\n", "next      power-off is ordered\n", "nothing takes"}},
        {"leaving",
         "rest",
         "failed",
         {"why       voltage at rest at its limit\n", "power off by hand, now\n", "nothing takes"}},
        {"edge",
         "blind",
         "none",
         {"why       gauge silent, and the model's cautious end at the cutoff\n", "leaving in",
          "unless"}},
    };

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        json_t *json = sample_json();
        json_object_set_new(json, "stage", json_string(rows[i].stage));
        json_object_set_new(json, "cause", json_string(rows[i].cause));
        json_object_set_new(json, "request", json_string(rows[i].request));
        json_object_set_new(json, "to_reserve_s", json_integer(0));
        if (strcmp(rows[i].stage, "edge") == 0)
            json_object_set_new(json, "grace_left_s", json_integer(42));
        const char *text = plain_json(json);
        for (size_t w = 0; w < 3; w++)
            says(text, rows[i].words[w]);
    }
}

static void charging_has_no_end_and_a_time_to_full(void **state) {
    json_t *json = sample_json(), *pack = sample_pack(json, 0);

    (void)state;
    json_object_set_new(json, "stage", json_string("reserve"));
    json_object_set_new(json, "flow", json_string("charging"));
    json_object_set_new(json, "supply", json_string("both"));
    json_object_set_new(json, "left_s", json_null());
    json_object_set_new(json, "endless", json_true());
    json_object_set_new(json, "full_s", json_integer(9000));
    json_object_set_new(pack, "current_A", json_real(-1.2));
    json_object_set_new(pack, "sag_V", json_real(-0.09));
    json_object_set_new(pack, "temp_from", json_string("assumed"));
    json_object_set_new(pack, "current_from", json_string("gauge"));
    const char *text = plain_json(json);
    says(text, "on adapter and pack since 05:59, charging\n");
    says(text, "left      no end in sight while charging\n");
    says(text, "next      full about 08:42\n");
    says(text, "ample again well above 25 % charge and 1 h left\n");
    says(text, "lift 90 mV, 1.20 A in measured,\n          11 C assumed\n");
}

static void without_a_clock_spans_stand_for_times(void **state) {
    json_t *json = sample_json();

    (void)state;
    json_object_set_new(json, "written", json_string("1970-01-01T06:12:14Z"));
    const char *text = plain_json(json);
    says(text, "heron     ample for 20 min, on pack for 12 min\n");
    says(text, "next      reserve in 4 h 10, stop in 5 h 40\n");
}

static void the_end_names_the_cutoff_that_comes_first(void **state) {
    static const char *const rows[][2] = {{"charge", "to 8 % charge\n"},
                                          {"rest", "to 3.30 V at rest\n"},
                                          {"floor", "to the floor, 3.00 V\n"},
                                          {"none", "at 3.1 W\n"}};

    (void)state;
    for (size_t i = 0; i < sizeof(rows) / sizeof(rows[0]); i++) {
        json_t *json = sample_json();
        json_object_set_new(sample_pack(json, 0), "ends_by", json_string(rows[i][0]));
        says(plain_json(json), rows[i][1]);
    }
}

static void several_packs_each_tell_their_charge(void **state) {
    json_t *json = sample_json();
    json_t *other = json_deep_copy(sample_pack(json, 0));

    (void)state;
    json_object_set_new(other, "name", json_string("spare"));
    json_object_set_new(other, "charge", json_real(0.08));
    json_object_set_new(other, "spent", json_true());
    json_object_set_new(other, "left_s", json_integer(0));
    json_array_append_new(json_object_get(json, "packs"), other);
    const char *text = plain_json(json);
    says(text, "on packs since");
    says(text, "to 8 % charge of main\n");
    says(text, "main      63 %, 3.71 V now");
    says(text, "spare     8 %, spent, 3.71 V now");
}

static void an_old_status_is_marked(void **state) {
    struct page_style style = {.old = "written 3 min ago: brinkd has stopped or hangs"};
    struct view v = sample_view(sample_json());

    (void)state;
    page_write(&v, &style, page);
    says(page, "\nold       written 3 min ago: brinkd has stopped or hangs\n");
}

static void alerts_that_do_not_fit_are_counted(void **state) {
    json_t *json = sample_json(), *alerts = json_object_get(json, "alerts");
    struct view v;

    (void)state;
    for (int i = 0; i < 12; i++)
        json_array_append_new(alerts, json_pack("{s:s,s:s}", "name", "overload", "text",
                                                "The pack cannot carry the load."));
    v = sample_view(json);
    says(plain(&v), "alert     The pack cannot carry the load.\n");
    v.n_alerts = 40;
    says(plain(&v), "and 29 more, see `brink raw`: overload");
}

/* ---- bounds -----------------------------------------------------------------------------------
 */

/* Escape sequences take no column; a bar's marks take one each. */
static size_t columns_of(const char *line) {
    char bare[PAGE_SIZE];
    size_t n = 0;

    for (const char *c = line; *c; c++) {
        if (*c == '\033')
            c = strchr(c, 'm');
        else if (strncmp(c, "\xE2\x96", 2) == 0) {
            bare[n++] = '#';
            c += 2;
        } else
            bare[n++] = *c;
    }
    bare[n] = '\0';
    return words_columns(bare);
}

static void assert_bounds(const struct view *v, unsigned variant) {
    struct page_style style = {.bar = variant & 1,
                               .colour = variant & 2,
                               .unicode = variant & 4,
                               .old = variant & 8 ? "written 9999 d ago: it hangs" : NULL};
    int lines = 0;

    size_t n = page_write(v, &style, page);
    assert_int_equal(n, strlen(page));
    assert_int_equal(page[n - 1], '\n');
    for (char *line = strtok(page, "\n"); line; line = strtok(NULL, "\n"), lines++) {
        if (columns_of(line) > PAGE_COLUMNS)
            fprintf(stderr, "%zu columns: %s\n", columns_of(line), line);
        assert_true(columns_of(line) <= PAGE_COLUMNS);
        assert_int_not_equal(line[strlen(line) - 1], ' ');
    }
    assert_true(lines <= PAGE_LINES);
}

static void random_text(char *ret, size_t size, const char *const *words, size_t n_words) {
    static const char *const pieces[] = {"a",      "longer-name", " ",    ", ",        "\u00fc",
                                         "\u65e5", "x.y",         "`z` ", "starboard", ";"};
    char raw[512] = "";

    if (n_words && rand() % 8) {
        snprintf(ret, size, "%s", words[(size_t)rand() % n_words]);
        return;
    }
    for (int i = rand() % 40; i > 0 && strlen(raw) < sizeof(raw) - 16; i--)
        strcat(raw, pieces[(size_t)rand() % (sizeof(pieces) / sizeof(pieces[0]))]);
    words_clean(raw, strlen(raw), false, ret, size);
}
#define RANDOM(field, ...)                                                                         \
    random_text(field, sizeof(field), (const char *const[]){__VA_ARGS__},                          \
                sizeof((const char *const[]){__VA_ARGS__}) / sizeof(char *))

static double random_number(void) {
    static const double odd[] = {0, -0.0, 1, 0.5, -1, 1e-9, 1e12, -1e12, 59, 3600, 86399};

    if (rand() % 6 == 0)
        return (double)NAN;
    if (rand() % 3 == 0)
        return odd[(size_t)rand() % (sizeof(odd) / sizeof(odd[0]))];
    return rand() % 2 ? rand() / (double)RAND_MAX : rand() % 200000;
}

static void random_pack(struct view_pack *p) {
    double *figures[] = {&p->charge,  &p->charge_low,   &p->charge_high,   &p->terminal_V,
                         &p->rest_V,  &p->sag_V,        &p->current_A,     &p->temp_C,
                         &p->left_s,  &p->left_least_s, &p->cutoff_charge, &p->cutoff_rest_V,
                         &p->floor_V, &p->power_W};

    for (size_t i = 0; i < sizeof(figures) / sizeof(figures[0]); i++)
        *figures[i] = random_number();
    random_text(p->name, sizeof(p->name), NULL, 0);
    RANDOM(p->current_from, "model", "gauge");
    RANDOM(p->temp_from, "assumed", "gauge");
    RANDOM(p->ends_by, "charge", "rest", "floor", "none");
    p->known = rand() % 4;
    p->spent = rand() % 2;
}

static void random_view(struct view *v) {
    double *figures[] = {&v->charge,        &v->charge_low,      &v->charge_high,
                         &v->left_s,        &v->left_least_s,    &v->to_reserve_s,
                         &v->full_s,        &v->grace_left_s,    &v->power_mean_W,
                         &v->rail_V,        &v->age_s,           &v->t_boot_s,
                         &v->gauge.lines,   &v->gauge.bad_lines, &v->gauge.refused,
                         &v->stage_since_s, &v->gauge.repeated,  &v->ladder.reserve_charge,
                         &v->ladder.keep_s, &v->supply_since_s,  &v->ladder.reserve_left_s};

    *v = (struct view){.blind = rand() % 2, .n_packs = (size_t)rand() % 5};
    for (size_t i = 0; i < sizeof(figures) / sizeof(figures[0]); i++)
        *figures[i] = random_number();
    if (rand() % 4 == 0)
        v->left_s = (double)INFINITY;
    random_text(v->unit, sizeof(v->unit), NULL, 0);
    RANDOM(v->written, "2026-12-01T06:12:00Z", "9999-99-99T99:99:99Z", "1970-01-01T00:00:09Z");
    RANDOM(v->stage, "ample", "reserve", "edge", "leaving");
    RANDOM(v->cause, "none", "charge", "rest", "left", "keep", "floor", "blind");
    RANDOM(v->supply, "pack", "adapter", "both", "unknown");
    RANDOM(v->flow, "charging", "discharging", "resting", "unknown");
    RANDOM(v->request, "none", "reported", "written", "failed");
    RANDOM(v->gauge.state, "open", "lost", "absent");
    RANDOM(v->cause_pack, "", "main");
    random_text(v->gauge.device, sizeof(v->gauge.device), NULL, 0);
    for (size_t i = 0; i < v->n_packs; i++)
        random_pack(&v->pack[i]);
    v->n_alerts = (size_t)rand() % 20;
    for (size_t i = 0; i < v->n_alerts && i < VIEW_ALERTS; i++) {
        random_text(v->alert[i].text, sizeof(v->alert[i].text), NULL, 0);
        RANDOM(v->alert[i].name, "gauge-silent", "pack-spent", "reading-impossible");
    }
}

static void no_status_leaves_20_lines_of_80_columns(void **state) {
    unsigned seed = (unsigned)time(NULL);
    struct view v;

    (void)state;
    printf("seed %u\n", seed);
    srand(seed);
    for (unsigned i = 0; i < 20000; i++) {
        random_view(&v);
        assert_bounds(&v, i);
    }
}

static void four_packs_long_names_many_alerts_fill_the_page(void **state) {
    json_t *json = sample_json(), *packs = json_object_get(json, "packs");

    (void)state;
    json_object_set_new(json, "unit", json_string("bittern-at-the-far-end-of-the-northern-drain"));
    json_object_set_new(json, "stage", json_string("edge"));
    json_object_set_new(json, "cause", json_string("blind"));
    json_object_set_new(json, "blind", json_true());
    json_object_set_new(json, "supply", json_string("both"));
    json_object_set_new(json, "stage_since_s", json_real(-100000));
    json_object_set_new(json, "supply_since_s", json_real(-200000));
    json_object_set_new(sample_pack(json, 0), "temp_from", json_string("assumed"));
    json_object_set_new(sample_pack(json, 0), "name", json_string("starboard-battery-box-1"));
    for (int i = 0; i < 3; i++)
        json_array_append_new(packs, json_deep_copy(sample_pack(json, 0)));
    for (int i = 0; i < 11; i++)
        json_array_append_new(json_object_get(json, "alerts"),
                              json_pack("{s:s,s:s}", "name", "gauge-silent", "text", "Words."));
    struct view v = sample_view(json);
    for (unsigned variant = 0; variant < 16; variant++)
        assert_bounds(&v, variant);
    says(plain(&v), "              and 10 more, see `brink raw`: gauge-silent");
    struct page_style style = {.old = "written 3 min ago: brinkd has stopped or hangs"};
    page_write(&v, &style, page);
    says(page, "alert         11 alerts, see `brink raw`: gauge-silent");
    says(plain(&v), "starb..box-1");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_usual_page_as_a_whole),
        cmocka_unit_test(a_bar_only_where_asked_for),
        cmocka_unit_test(colour_only_where_asked_for),
        cmocka_unit_test(unknown_is_neither_empty_nor_full),
        cmocka_unit_test(blind_is_said_plainly),
        cmocka_unit_test(each_stage_says_what_changes_it),
        cmocka_unit_test(charging_has_no_end_and_a_time_to_full),
        cmocka_unit_test(without_a_clock_spans_stand_for_times),
        cmocka_unit_test(the_end_names_the_cutoff_that_comes_first),
        cmocka_unit_test(several_packs_each_tell_their_charge),
        cmocka_unit_test(an_old_status_is_marked),
        cmocka_unit_test(alerts_that_do_not_fit_are_counted),
        cmocka_unit_test(no_status_leaves_20_lines_of_80_columns),
        cmocka_unit_test(four_packs_long_names_many_alerts_fill_the_page),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
