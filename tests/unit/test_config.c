/* brink.conf: what is accepted, what is refused and in which words, and that --effective reads
 * back. Uses the cell tables of conf/cells. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include "daemon/config.h"
#include "daemon/keys.h"
#include "util/cleanup.h"
#include "util/files.h"
#include "util/real.h"

#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <time.h>

#define UNIT_  "[unit]\nname = heron\n"
#define GAUGE_ "[gauge]\nkind = stream\ndevice = /nowhere/gauge\n"
#define PACK_  "[pack main]\ncells = nca-18650\ncapacity = 5.8 Ah\nvoltage = v\n"
#define FILES_ "[files]\ncells = conf/cells\n"
#define GOOD   UNIT_ GAUGE_ PACK_ FILES_

static struct config config;
static struct config_problems problems;

static int parse(const char *text) {
    return config_parse(text, strlen(text), "brink.conf", &config, &problems);
}

static void accepted(const char *text) {
    if (parse(text) != 0)
        fail_msg("refused, though it is good:\n%s%s", text, problems.text);
    assert_int_equal(problems.n, 0);
}

static void refused(const char *text, size_t n, const char *const *expected) {
    assert_int_equal(parse(text), CONFIG_E_REFUSED);
    for (size_t i = 0; i < n; i++)
        if (!strstr(problems.text, expected[i]))
            fail_msg("the problems of\n%s\nlack \"%s\":\n%s", text, expected[i], problems.text);
}

/* One problem and only one, at that line, with these words. */
static void one_problem(const char *text, int line, const char *words) {
    char place[32];

    snprintf(place, sizeof(place), line > 0 ? "brink.conf:%d: " : "brink.conf: ", line);
    refused(text, 2, (const char *const[]){place, words});
    if (problems.n != 1)
        fail_msg("%zu problems where one was made:\n%s", problems.n, problems.text);
    assert_non_null(strstr(problems.text, "accepted"));
}

static void defaults_are_those_of_the_manual(void **state) {
    (void)state;
    accepted(GOOD);
    assert_string_equal(config.unit.name, "heron");
    assert_int_equal(config.gauge.kind, GAUGE_STREAM);
    assert_int_equal(config.gauge.baud, 115200);
    assert_true(config.gauge.period_s == 1.0 && config.gauge.silent_s == 30.0);
    assert_false(config.gauge.tell);
    assert_int_equal(config.n_packs, 1);
    assert_string_equal(config.pack[0].name, "main");
    assert_int_equal(config.pack[0].series, 1);
    assert_true(config.pack[0].capacity_Ah == 5.8);
    assert_true(config.pack[0].cutoff_charge == 0.08);
    assert_true(config.pack[0].cutoff_rest_V == 3.3 && config.pack[0].floor_V == 3.0);
    assert_true(isinf(config.pack[0].carries_W));
    assert_true(isnan(config.unit.rail_adapter_V));
    assert_true(config.pack[0].channels.voltage.scale == 1.0);
    assert_true(config.pack[0].table.capacity_Ah == 2.888);
    assert_true(config.ladder.reserve_charge == 0.25 && config.ladder.reserve_left_s == 3600);
    assert_true(config.ladder.keep_s == 120 && config.ladder.grace_s == 60);
    assert_int_equal(config.ladder.floor_samples, 3);
    assert_int_equal(config.stop.action, CONFIG_ACTION_REPORT);
    assert_string_equal(config.stop.request, "/run/brink/stop-request");
}

static void every_unit_of_its_kind_is_accepted(void **state) {
    (void)state;
    accepted(UNIT_ "typical = 3100 mW\n" GAUGE_ "period = 500ms\nsilent = 1 min\n"
                   "[pack main]\ncells = conf/cells/nca-18650.ini\ncapacity = 5800 mAh\n"
                   "voltage = v\nfloor = 3050 mV\nwiring = 20 mohm\n"
                   "[ladder]\nreserve_left = 1.5 h\nkeep = 2 min\n" FILES_);
    assert_true(config.unit.typical_W == 3.1);
    assert_true(config.gauge.period_s == 0.5 && config.gauge.silent_s == 60);
    assert_true(config.pack[0].capacity_Ah == 5.8 && config.pack[0].floor_V == 3.05);
    assert_true(config.pack[0].wiring_ohm == 0.02);
    assert_true(config.ladder.reserve_left_s == 5400);
}

static void unknown_names_are_refused_and_near_ones_suggested(void **state) {
    (void)state;
    one_problem(GOOD "[lader]\nkeep = 2 min\n", 12, "did you mean [ladder]?");
    one_problem(GOOD "[weather]\nwind = 3 W\n", 12, "unknown section [weather]");
    one_problem(GAUGE_ PACK_ "cutof_charge = 8 %\n" FILES_, 8, "did you mean cutoff_charge?");
    one_problem(GOOD "bananas = 3\n", 12, "unknown key bananas in [files]");
    one_problem(GAUGE_ "keep = 2 min\n" PACK_ FILES_, 4,
                "belong in [gauge]; accepted is in [ladder]");
    one_problem(GAUGE_ "floor = 3 V\n" PACK_ FILES_, 4, "accepted is in [pack NAME]");
}

static void units_are_demanded(void **state) {
    (void)state;
    one_problem(GAUGE_ PACK_ "floor = 3.0\n" FILES_, 8,
                "has no unit; accepted is a number in V or mV");
    one_problem(GAUGE_ PACK_ "floor = 3.0 A\n" FILES_, 8, "has a unit that does not belong there");
    one_problem(GAUGE_ PACK_ "floor = 3,0 V\n" FILES_, 8, "decimals stand behind a point");
    one_problem(GAUGE_ PACK_ "floor = nan V\n" FILES_, 8, "is no number");
    one_problem(GAUGE_ PACK_ "floor = 1e999 V\n" FILES_, 8, "is no number");
    one_problem(GAUGE_ PACK_ "series = 1 V\n" FILES_, 8, "accepted is a bare number");
    one_problem(GAUGE_ PACK_ "series = 1.5\n" FILES_, 8, "no whole number");
    one_problem(GAUGE_ "baud = 9600\n" PACK_ FILES_, 4, "accepted is a number in baud");
}

/* Complaint 12 of the field: a minimum meant in volts was typed as percent, and the unit started
 * and halted for ever. */
static void complaint_12_percent_typed_for_volts(void **state) {
    (void)state;
    one_problem(GAUGE_ PACK_ "cutoff_rest = 30 %\n" FILES_, 8,
                "is a share, but cutoff_rest is a voltage");
    one_problem(GAUGE_ PACK_ "cutoff_rest = 60\n" FILES_, 8, "has no unit");
    one_problem(GAUGE_ PACK_ "cutoff_rest = 60 V\n" FILES_, 8, "where a cell of nca-18650 is full");
    one_problem(GAUGE_ PACK_ "cutoff_charge = 3.3 V\n" FILES_, 8,
                "is a voltage, but cutoff_charge is a share");
    one_problem(GAUGE_ PACK_ "cutoff_charge = 60 %\n" FILES_, 8,
                "cutoff_charge = 60 % is not under reserve_charge = 25 % (the default)");
    one_problem(GAUGE_ PACK_ "cutoff_charge = 0.08\n" FILES_, 8,
                "has no unit; accepted is a number in %");
}

static void a_packs_voltage_where_a_cells_is_meant(void **state) {
    (void)state;
    one_problem(
        GAUGE_ PACK_ "series = 3\ncutoff_rest = 9.9 V\n" FILES_, 9,
        "looks like the whole pack's voltage; accepted is that of one cell: over 3 in series "
        "it is cutoff_rest = 3.300 V");
    one_problem(GAUGE_ PACK_ "series = 3\nfloor = 9 V\n" FILES_, 9, "it is floor = 3.000 V");
}

static void cutoffs_stand_in_order(void **state) {
    (void)state;
    one_problem(GAUGE_ PACK_ "floor = 3.35 V\n" FILES_, 8,
                "is not under cutoff_rest = 3.3 V (the default)");
    one_problem(GAUGE_ PACK_ "cutoff_rest = 3.0 V\n" FILES_, 8,
                "floor = 3 V (the default) is not under");
    one_problem(GOOD "[ladder]\nreserve_charge = 8 %\n", 6, "cutoff_charge = 8 % (the default)");
    one_problem(GAUGE_ PACK_ "cutoff_rest = 3.6 V\n" FILES_, 8, "not under reserve_charge (25 %)");
    accepted(GAUGE_ PACK_ "cutoff_rest = 3.45 V\n" FILES_);
}

static void harm_to_the_cells_needs_consent(void **state) {
    (void)state;
    one_problem(GAUGE_ PACK_ "floor = 2.4 V\n" FILES_, 8, "lithium cell loses capacity for good");
    refused(GAUGE_ PACK_ "floor = 2.3 V\ncutoff_rest = 2.4 V\n" FILES_, 3,
            (const char *const[]){"brink.conf:8: floor = 2.3 V lies under 2.5 V",
                                  "brink.conf:9: cutoff_rest = 2.4 V lies under 2.5 V",
                                  "accept_damage = yes"});
    assert_int_equal(problems.n, 2);
    accepted(GAUGE_ PACK_ "floor = 2.5 V\n" FILES_);
    accepted(GAUGE_ PACK_ "floor = 2.4 V\naccept_damage = yes\n" FILES_);
}

static void one_low_sample_never_decides(void **state) {
    (void)state;
    one_problem(GOOD "[ladder]\nfloor_samples = 2\n", 13,
                "accepted is 3 to 1000: one or two low samples");
    one_problem(GOOD "[ladder]\nconfirm = 0 s\n", 13, "one burst of the load could move the stage");
}

static void silence_lasts_three_periods(void **state) {
    (void)state;
    one_problem(GAUGE_ "period = 20 s\n" PACK_ FILES_, 4,
                "silent = 30 s (the default) is less than 3 periods");
    one_problem(GAUGE_ "silent = 2 s\n" PACK_ FILES_, 4, "accepted is 3 s or more");
    accepted(GAUGE_ "period = 20 s\nsilent = 60 s\n" PACK_ FILES_);
}

static void tell_wants_something_that_can_be_written(void **state) {
    char text[512], path[] = "/tmp/brink-test-XXXXXX", fifo[64];

    (void)state;
    assert_non_null(mkdtemp(path));
    snprintf(fifo, sizeof(fifo), "%s/gauge", path);
    assert_int_equal(mkfifo(fifo, 0600), 0);
    snprintf(text, sizeof(text), "[gauge]\nkind = stream\ndevice = %s\ntell = yes\n" PACK_ FILES_,
             fifo);
    one_problem(text, 4, "which is a FIFO");
    unlink(fifo);
    rmdir(path);
    accepted(GAUGE_ "tell = yes\n" PACK_ FILES_); /* not there yet: known when it is opened */
}

static void required_keys_are_named(void **state) {
    (void)state;
    one_problem("[gauge]\ndevice = /dev/ttyACM0\n" PACK_ FILES_, 0, "[gauge] needs kind");
    one_problem("[gauge]\nkind = stream\n" PACK_ FILES_, 0, "[gauge] needs device");
    one_problem(GAUGE_ FILES_, 0, "there is no good [pack NAME] section");
    one_problem(GAUGE_ "[pack main]\ncells = nca-18650\nvoltage = v\n" FILES_, 4,
                "[pack main] needs capacity");
    one_problem(GAUGE_ "[pack main]\ncapacity = 2 Ah\nvoltage = v\n" FILES_, 4,
                "[pack main] needs cells");
    one_problem(GAUGE_ "[pack main]\ncells = nca-18650\ncapacity = 2 Ah\n" FILES_, 4,
                "needs voltage");
    refused("", 2, (const char *const[]){"needs kind", "needs device"});
}

static void duplicates_are_refused(void **state) {
    (void)state;
    refused(GAUGE_ "baud = 9600 baud\nbaud = 9600 baud\n" PACK_ FILES_, 1,
            (const char *const[]){"brink.conf:5: "});
    refused(GOOD "[unit]\nadapter = ext\n", 1, (const char *const[]){"brink.conf:12: "});
    one_problem(GAUGE_ PACK_ "[pack  main]\ncells = nca-18650\n" FILES_, 8, "there twice");
}

static void packs_are_one_to_four_and_named(void **state) {
    static const char more[] = "cells = nca-18650\ncapacity = 2.9 Ah\n";
    char text[2048];
    size_t n = 0;

    (void)state;
    n += (size_t)snprintf(text, sizeof(text), GAUGE_ FILES_);
    for (int i = 0; i < 4; i++)
        n += (size_t)snprintf(text + n, sizeof(text) - n, "[pack p%d]\n%svoltage = v%d\n", i, more,
                              i);
    accepted(text);
    assert_int_equal(config.n_packs, 4);
    snprintf(text + n, sizeof(text) - n, "[pack p4]\n%svoltage = v4\n", more);
    one_problem(text, 22, "one pack too many");
    one_problem(GOOD "[pack]\ncells = nca-18650\n", 12, "such as [pack main]");
    one_problem(GOOD "[pack a/b]\ncells = nca-18650\n", 12, "the pack's NAME = a/b is not good");
}

static void tokens_have_one_meaning(void **state) {
    (void)state;
    one_problem(GAUGE_ PACK_ "current = v\n" FILES_, 8,
                "reads the same token as voltage in [pack main]");
    one_problem(GAUGE_ PACK_ "current = t\n" FILES_, 8, "t is the gauge's clock");
    one_problem(GAUGE_ PACK_ "current = 9a\n" FILES_, 8, "accepted is a token's name");
    one_problem(GOOD "[pack spare]\ncells = nca-18650\ncapacity = 2 Ah\nvoltage = v\n", 15,
                "reads the same token as voltage in [pack main]");
    accepted(GAUGE_ PACK_ "temperature = c\n[pack spare]\ncells = nca-18650\ncapacity = 2 Ah\n"
                          "voltage = v2\ntemperature = c\n" FILES_);
    one_problem(GAUGE_ PACK_ "voltage_scale = 0\n" FILES_, 8, "accepted is any other number");
}

static void files_are_apart_and_absolute(void **state) {
    (void)state;
    one_problem(GOOD "status = status.json\n", 12, "accepted is an absolute path");
    one_problem(GOOD "state = /run/brink/status.json\n", 12, "the same file as status in [files]");
}

static void cell_tables_are_found_or_named(void **state) {
    (void)state;
    refused(GAUGE_ "[pack main]\ncells = nca-18651\ncapacity = 2 Ah\nvoltage = v\n" FILES_, 2,
            (const char *const[]){"brink.conf:5: cells = nca-18651", "nca-18650"});
    assert_int_equal(problems.n, 1);
}

static void all_problems_are_listed(void **state) {
    (void)state;
    refused("[unit]\nnam = heron\n[gauge]\nkind = telepathy\ndevice = /x\nperiod = 1\n"
            "[pack main]\ncells = nca-18650\ncapacity = 5.8 V\nvoltage = v\nfloor = 30 %\n" FILES_,
            5,
            (const char *const[]){"brink.conf:2: unknown key nam", "brink.conf:4: kind = telepathy",
                                  "brink.conf:6: period = 1 has no unit",
                                  "brink.conf:9: capacity = 5.8 V", "brink.conf:11: floor = 30 %"});
    assert_int_equal(problems.n, 5);
}

static void many_problems_are_counted_and_cut_at_a_line(void **state) {
    enum { LINES = 400 };
    char *text = calloc(LINES, 64);
    size_t n = 0;

    (void)state;
    for (int i = 0; i < LINES; i++)
        n += (size_t)sprintf(text + n, i == 0 ? "[ladder]\nkey%d = 1\n" : "key%d = 1\n", i);
    assert_int_equal(config_parse(text, n, "brink.conf", &config, &problems), CONFIG_E_REFUSED);
    assert_true(problems.n >= LINES);
    assert_true(problems.length < sizeof(problems.text));
    assert_int_equal(problems.text[problems.length - 1], '\n');
    free(text);
}

static char *printed(const struct config *of) {
    char *text = NULL;
    size_t length = 0;
    FILE *out = open_memstream(&text, &length);

    assert_non_null(out);
    config_print(of, out);
    fclose(out);
    return text;
}

static void effective_reads_back(const char *text) {
    accepted(text);
    char *first = printed(&config);
    accepted(first);
    char *second = printed(&config);
    assert_string_equal(first, second);
    free(first);
    free(second);
}

static void effective_is_a_config_again(void **state) {
    (void)state;
    effective_reads_back(GOOD);
    effective_reads_back(UNIT_
                         "rail = r\nadapter = ext\nrail_adapter = 5.10 V\ntypical = 3.1 W\n" GAUGE_
                         "tell = yes\nclock = gauge\nsilent = 1.5 min\n" PACK_
                         "carries = 5 W\ntemperature = c\nwiring = 0.3333333 ohm\n"
                         "[pack spare]\ncells = lipo-pouch\nseries = 2\ncapacity = 5450 mAh\n"
                         "voltage = v2\nvoltage_scale = 0.00322265625\nvoltage_offset = -12 mV\n"
                         "[stop]\naction = poweroff\n" FILES_);
    char *text = printed(&config);
    assert_non_null(strstr(text, "# cutoff_rest: 6.600 V of the pack at rest"));
    assert_non_null(strstr(text, "# floor: 6.000 V of the pack under load"));
    free(text);
}

static double within(const struct key *key) {
    double share = drand48();

    return key->least + share * (key->most - key->least);
}

/* Property: whatever number a config file gives a key, what --effective writes for it reads back as
 * the same. (A double that no decimal of a few digits gives is not meant: 0.9086... as percent.) */
static double through_text(const struct key *key, double value) {
    char text[KEY_VALUE_MAX], problem[512];
    double back = UNKNOWN;

    key_write(key, &value, text, sizeof(text));
    if (!key_read(key, text, &back, problem, sizeof(problem)))
        fail_msg("%s = %s: %s", key->name, text, problem);
    return back;
}

static void written_values_read_back(void **state) {
    long seed = time(NULL);

    (void)state;
    print_message("seed %ld\n", seed);
    srand48(seed);
    for (int round = 0; round < 200; round++)
        for (size_t i = 0; i < n_keys; i++) {
            struct key key = keys[i];
            if (key.type != KEY_NUMBER)
                continue;
            key.offset = 0;
            double read = through_text(&key, within(&key)), again = through_text(&key, read);
            if (again != read)
                fail_msg("%s: %.17g became %.17g", key.name, read, again);
        }
}

/* Every key stands in the manual with its default, and in the annotated brink.conf. */
static void is_in(const char *path, const char *text, const char *wanted, const char *section) {
    if (!strstr(text, wanted))
        fail_msg("%s lacks \"%s\" of [%s]", path, wanted, section);
}

static void every_key_is_documented(void **state) {
    scoped(free_p) char *manual = NULL, *annotated = NULL;
    struct config_key_text key;
    size_t length;
    char wanted[256];

    (void)state;
    assert_int_equal(files_read("man/brink.conf.5", 65536, &manual, &length), 0);
    assert_int_equal(files_read("conf/brink.conf", 65536, &annotated, &length), 0);
    for (size_t i = 0; config_key(i, &key); i++) {
        bool told = key.fallback && key.fallback[0];
        snprintf(wanted, sizeof(wanted), ".It Cm %s%s%s\n", key.key, told ? " No = Ar " : "",
                 told ? key.fallback : "");
        is_in("man/brink.conf.5", manual, wanted, key.section);
        snprintf(wanted, sizeof(wanted), "%s =%s%s%s", key.key, told ? " " : "",
                 told ? key.fallback : "", told ? "\n" : "");
        is_in("conf/brink.conf", annotated, wanted, key.section);
    }
}

static void the_installed_config_is_good(void **state) {
    scoped(free_p) char *text = NULL;
    size_t length;

    (void)state;
    assert_int_equal(files_read("conf/brink.conf", 65536, &text, &length), 0);
    char *folders = strstr(text, "#cells = /usr/local/share/brink/cells");
    assert_non_null(folders);
    memset(folders, ' ', strcspn(folders, "\n"));
    memcpy(folders, "cells = conf/cells", strlen("cells = conf/cells"));
    accepted(text);
}

static void unreadable_files_are_named(void **state) {
    (void)state;
    assert_true(config_load("/nowhere/brink.conf", &config, &problems) < 0);
    assert_non_null(strstr(problems.text, "/nowhere/brink.conf: cannot be read: No such file"));
    assert_true(config_load("/tmp", &config, &problems) < 0);
}

static void the_core_is_told_pack_volts(void **state) {
    struct watch_config watch;
    struct channel_map map;

    (void)state;
    accepted(UNIT_ "typical = 3 W\nadapter = ext\n" GAUGE_ PACK_
                   "[pack spare]\ncells = nca-18650\nseries = 2\ncapacity = 5.8 Ah\nvoltage = v2\n"
                   "wiring = 20 mohm\n" FILES_);
    config_watch(&config, &watch);
    assert_int_equal(watch.n_packs, 2);
    assert_string_equal(watch.pack[1].name, "spare");
    assert_true(fabs(watch.pack[1].cutoff_rest_V - 6.6) < 1e-12);
    assert_true(fabs(watch.pack[1].floor_V - 6.0) < 1e-12);
    assert_true(watch.pack[1].wiring_ohm == 0.02);
    assert_true(fabs(watch.pack[0].typical_W - 1.0) < 1e-12); /* shares go by energy */
    assert_true(fabs(watch.pack[1].typical_W - 2.0) < 1e-12);
    assert_int_equal(watch.pack[1].cell.series, 2);
    config_channels(&config, &map);
    assert_string_equal(map.pack[1].voltage.token, "v2");
    assert_string_equal(map.adapter.token, "ext");
    assert_true(map.adapter.scale == 1.0);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(defaults_are_those_of_the_manual),
        cmocka_unit_test(every_unit_of_its_kind_is_accepted),
        cmocka_unit_test(unknown_names_are_refused_and_near_ones_suggested),
        cmocka_unit_test(units_are_demanded),
        cmocka_unit_test(complaint_12_percent_typed_for_volts),
        cmocka_unit_test(a_packs_voltage_where_a_cells_is_meant),
        cmocka_unit_test(cutoffs_stand_in_order),
        cmocka_unit_test(harm_to_the_cells_needs_consent),
        cmocka_unit_test(one_low_sample_never_decides),
        cmocka_unit_test(silence_lasts_three_periods),
        cmocka_unit_test(tell_wants_something_that_can_be_written),
        cmocka_unit_test(required_keys_are_named),
        cmocka_unit_test(duplicates_are_refused),
        cmocka_unit_test(packs_are_one_to_four_and_named),
        cmocka_unit_test(tokens_have_one_meaning),
        cmocka_unit_test(files_are_apart_and_absolute),
        cmocka_unit_test(cell_tables_are_found_or_named),
        cmocka_unit_test(all_problems_are_listed),
        cmocka_unit_test(many_problems_are_counted_and_cut_at_a_line),
        cmocka_unit_test(effective_is_a_config_again),
        cmocka_unit_test(written_values_read_back),
        cmocka_unit_test(every_key_is_documented),
        cmocka_unit_test(the_installed_config_is_good),
        cmocka_unit_test(unreadable_files_are_named),
        cmocka_unit_test(the_core_is_told_pack_volts),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
