/* The state file: what is kept comes back, what cannot be is refused, and time between is what the
 * clocks allow to be said. And the time that the watch lives in. */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>

#include <cmocka.h>

#include "daemon/state.h"
#include "daemon/timeline.h"
#include "util/cleanup.h"
#include "util/files.h"
#include "util/real.h"

#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <time.h>
#include <unistd.h>

static const char text[] = "[gauge]\nkind = stream\ndevice = /nowhere/gauge\n"
                           "[pack main]\ncells = nca-18650\ncapacity = 5.8 Ah\nvoltage = v\n"
                           "[pack spare]\ncells = lipo-pouch\nseries = 2\ncapacity = 5 Ah\n"
                           "voltage = w\n[files]\ncells = conf/cells\n";
static struct config config;
static char folder[] = "/tmp/brink-state-XXXXXX";
static char path[64];

static int set_up(void **state) {
    struct config_problems problems;

    (void)state;
    if (!mkdtemp(folder))
        return -1;
    snprintf(path, sizeof(path), "%s/state.json", folder);
    return config_parse(text, strlen(text), "brink.conf", &config, &problems);
}

static int tear_down(void **state) {
    char aside[80];

    (void)state;
    snprintf(aside, sizeof(aside), "%s.bad", path);
    unlink(path);
    unlink(aside);
    return rmdir(folder);
}

static struct state example(void) {
    struct state s = {.time = {.boot_id = "95b1fbde-85a4-4356-8b6f-6e020f3e7ffa",
                               .t_boot_us = 5000000000,
                               .t_real_us = 1796104400741864,
                               .real_trusted = true},
                      .memory = {.t_boot_us = 4999000000,
                                 .stage = STAGE_EDGE,
                                 .stage_since_us = 4990000000,
                                 .cause = CAUSE_REST,
                                 .n_packs = 2},
                      .pack = {{"main", "nca-18650", 1}, {"spare", "lipo-pouch", 2}}};

    s.memory.pack[0] = (struct pack_memory){0.634, 0.02, 0.011, 0.025, 3.1, 0.2, 1.07, 0.1, 11.0};
    s.memory.pack[1] = (struct pack_memory){UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN, UNKNOWN,
                                            UNKNOWN, UNKNOWN, UNKNOWN, 15.0};
    return s;
}

static void what_is_kept_comes_back(void **state) {
    struct state kept = example(), back;
    const char *why;
    struct stat st;

    (void)state;
    assert_int_equal(state_save(path, &kept), 0);
    assert_int_equal(stat(path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0640);
    assert_int_equal(state_load(path, &back, &why), 0);
    assert_string_equal(back.time.boot_id, kept.time.boot_id);
    assert_true(back.time.t_boot_us == kept.time.t_boot_us);
    assert_true(back.time.t_real_us == kept.time.t_real_us);
    assert_true(back.time.real_trusted);
    assert_int_equal(back.memory.stage, STAGE_EDGE);
    assert_int_equal(back.memory.cause, CAUSE_REST);
    assert_true(back.memory.stage_since_us == kept.memory.stage_since_us);
    assert_int_equal(back.memory.n_packs, 2);
    assert_true(fabs(back.memory.pack[0].charge - 0.634) < 1e-9);
    assert_true(fabs(back.memory.pack[0].resistance_scale - 1.07) < 1e-9);
    assert_true(isnan(back.memory.pack[1].charge));
    assert_true(back.memory.pack[1].temp_C == 15.0);
}

static void refused(const char *content, size_t length, const char *words) {
    struct state back = {.memory = {.n_packs = 77}};
    const char *why = "";

    assert_int_equal(files_replace(path, content, length, 0640, false), 0);
    int r = state_load(path, &back, &why);
    if (r != STATE_E_BAD || !strstr(why, words))
        fail_msg("%.*s: %d \"%s\" where \"%s\" was expected", (int)length, content, r, why, words);
    assert_int_equal(back.memory.n_packs, 77);
}

static void damaged_foreign_and_future_files_are_refused(void **state) {
    struct state kept = example(), back;
    scoped(free_p) char *good = NULL;
    const char *why;
    size_t length;

    (void)state;
    refused("", 0, "no JSON");
    refused("{\"brink_state\":1", 16, "no JSON");
    refused("[]", 2, "no state file");
    refused("{\"brink\":1}", 11, "no state file");
    refused("{\"brink_state\":2}", 17, "later version");
    refused("{\"brink_state\":1}", 17, "times or stage");
    assert_int_equal(state_save(path, &kept), 0);
    assert_int_equal(files_read(path, 65536, &good, &length), 0);
    for (size_t cut = 0; cut < length - 2; cut++) /* at every byte */
        refused(good, cut, "no JSON");
    char *charge = strstr(good, "0.634000");
    assert_non_null(charge);
    memcpy(charge, "9.634000", 8);
    refused(good, length, "packs cannot be");
    memcpy(charge, "\"0.6340\"", 8);
    refused(good, length, "packs cannot be");
    unlink(path);
    assert_int_equal(state_load(path, &back, &why), -ENOENT);
}

/* Property: a file with any one byte changed is refused, or what it says is within bounds. */
static void spoiled_bytes_never_give_the_impossible(void **state) {
    struct state kept = example(), back;
    scoped(free_p) char *good = NULL;
    const char *why;
    size_t length;
    long seed = time(NULL);

    (void)state;
    print_message("seed %ld\n", seed);
    srand48(seed);
    assert_int_equal(state_save(path, &kept), 0);
    assert_int_equal(files_read(path, 65536, &good, &length), 0);
    for (int i = 0; i < 1000; i++) {
        size_t at = (size_t)(drand48() * (double)length);
        char was = good[at];
        good[at] = (char)lrand48();
        assert_int_equal(files_replace(path, good, length, 0640, false), 0);
        good[at] = was;
        if (state_load(path, &back, &why) != 0)
            continue;
        assert_true(back.memory.stage <= STAGE_LEAVING && back.memory.n_packs <= PACKS_MAX);
        assert_false(back.memory.pack[0].charge > 1.1 || back.memory.pack[0].charge < -0.1);
        assert_false(back.memory.pack[0].charge_sd < 0);
    }
}

static void a_bad_file_is_set_aside(void **state) {
    char aside[80];
    struct stat st;

    (void)state;
    snprintf(aside, sizeof(aside), "%s.bad", path);
    assert_int_equal(files_replace(path, "x", 1, 0640, false), 0);
    assert_int_equal(state_set_aside(path), 0);
    assert_int_equal(stat(aside, &st), 0);
    assert_int_equal(stat(path, &st), -1);
    assert_int_equal(state_set_aside(path), -ENOENT);
}

static void packs_are_matched_by_what_they_are(void **state) {
    struct state kept = example();
    struct watch_memory memory;

    (void)state;
    assert_int_equal(state_match(&kept, &config, &memory), 2);
    struct state_pack swap = kept.pack[0];
    struct pack_memory swap_memory = kept.memory.pack[0];
    kept.pack[0] = kept.pack[1];
    kept.pack[1] = swap;
    kept.memory.pack[0] = kept.memory.pack[1];
    kept.memory.pack[1] = swap_memory;
    assert_int_equal(state_match(&kept, &config, &memory), 2); /* order does not matter */
    assert_true(memory.pack[0].charge == 0.634);
    kept.pack[1].series = 2; /* rebuilt: another pack under the same name */
    assert_int_equal(state_match(&kept, &config, &memory), 1);
    assert_true(isnan(memory.pack[0].charge));
    strcpy(kept.pack[0].name, "old");
    assert_int_equal(state_match(&kept, &config, &memory), 0);
}

/* Complaint 19: monotonic time alone cannot be mapped later. Boot id and both clocks are kept. */
static void complaint_19_time_between_runs(void **state) {
    struct state_time then = example().time, now = then;
    bool same;

    (void)state;
    now.t_boot_us += 90 * 1000000LL;
    now.t_real_us += 20LL * 365 * 86400 * 1000000; /* a first time sync in between: no matter */
    assert_true(state_gone_s(&then, &now, &same) == 90.0 && same);
    now.t_boot_us = then.t_boot_us - 1;
    assert_true(isnan(state_gone_s(&then, &now, &same)) && !same);
    now = then;
    now.boot_id[0] = 'f';
    now.t_boot_us = 3000000;
    now.t_real_us = then.t_real_us + 7200 * 1000000LL;
    assert_true(state_gone_s(&then, &now, &same) == 7200.0 && !same);
}

/* Complaint 18: a board without a clock steps by hours or years; such a time is no time. */
static void complaint_18_untrusted_real_time_says_nothing(void **state) {
    struct state_time then = example().time, now = then;
    bool same;

    (void)state;
    now.boot_id[0] = 'f';
    now.t_real_us += 60 * 1000000LL;
    now.real_trusted = false;
    assert_true(isnan(state_gone_s(&then, &now, &same)) && !same);
    now.real_trusted = true;
    then.real_trusted = false;
    assert_true(isnan(state_gone_s(&then, &now, &same)));
    then.real_trusted = true;
    now.t_real_us = then.t_real_us - 1000000;
    assert_true(isnan(state_gone_s(&then, &now, &same)));
    now.t_real_us = then.t_real_us + 30LL * 365 * 86400 * 1000000;
    assert_true(isnan(state_gone_s(&then, &now, &same)));
    now.boot_id[0] = '\0'; /* not known: the same as none */
    then.boot_id[0] = '\0';
    now.t_real_us = then.t_real_us + 1000000;
    assert_true(state_gone_s(&then, &now, &same) == 1.0 && !same);
}

static void boot_time_is_handed_through(void **state) {
    struct timeline t;

    (void)state;
    timeline_init(&t, false, 100);
    assert_int_equal(timeline_sample_us(&t, 150, 12345.0),
                     150); /* the gauge's clock is not asked */
    assert_int_equal(timeline_now_us(&t, 160), 160);
    assert_int_equal(timeline_now_us(&t, 155), 160); /* and it never falls */
}

static void the_gauges_clock_is_laid_on_boot_time(void **state) {
    struct timeline t;
    const int64_t s = 1000000;

    (void)state;
    timeline_init(&t, true, 100 * s);
    assert_int_equal(timeline_sample_us(&t, 101 * s, 5000.0), 101 * s);
    assert_int_equal(timeline_sample_us(&t, 101 * s, 5060.0), 161 * s); /* faster than life */
    assert_int_equal(timeline_now_us(&t, 103 * s), 163 * s); /* between, boot time goes on */
    assert_int_equal(timeline_sample_us(&t, 104 * s, 5061.0), 163 * s); /* never back */
    assert_int_equal(timeline_sample_us(&t, 104 * s, 5070.0), 171 * s);
    assert_int_equal(timeline_sample_us(&t, 106 * s, UNKNOWN), 173 * s); /* a line without t */
    assert_int_equal(timeline_sample_us(&t, 106 * s, 5080.0), 181 * s);
}

static void a_gauges_clock_that_jumps_is_laid_anew(void **state) {
    struct timeline t;
    const int64_t s = 1000000;

    (void)state;
    timeline_init(&t, true, 0);
    timeline_sample_us(&t, 10 * s, 1000.0);
    assert_int_equal(timeline_sample_us(&t, 12 * s, 3.0), 12 * s); /* the gauge was reset */
    assert_int_equal(timeline_sample_us(&t, 12 * s, 4.0), 13 * s);
    assert_int_equal(timeline_sample_us(&t, 13 * s, 4.0 + 3601.0), 14 * s);
    assert_int_equal(timeline_sample_us(&t, 13 * s, 3605.0 + 3600.0),
                     3614 * s); /* one hour is time */
}

/* Property: whatever the clocks tell, the watch's time never falls. */
static void time_never_falls(void **state) {
    long seed = time(NULL);
    struct timeline t;
    int64_t boot_us = 0, last_us = 0;

    (void)state;
    print_message("seed %ld\n", seed);
    srand48(seed);
    timeline_init(&t, true, 0);
    for (int i = 0; i < 100000; i++) {
        boot_us += (int64_t)(drand48() * 2e6);
        double clock_s = (drand48() - 0.3) * 1e4 * (drand48() < 0.01 ? 1e12 : 1.0);
        int64_t t_us = drand48() < 0.3 ? timeline_now_us(&t, boot_us)
                                       : timeline_sample_us(&t, boot_us, clock_s);
        assert_true(t_us >= last_us);
        last_us = t_us;
    }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(what_is_kept_comes_back),
        cmocka_unit_test(damaged_foreign_and_future_files_are_refused),
        cmocka_unit_test(spoiled_bytes_never_give_the_impossible),
        cmocka_unit_test(a_bad_file_is_set_aside),
        cmocka_unit_test(packs_are_matched_by_what_they_are),
        cmocka_unit_test(complaint_19_time_between_runs),
        cmocka_unit_test(complaint_18_untrusted_real_time_says_nothing),
        cmocka_unit_test(boot_time_is_handed_through),
        cmocka_unit_test(the_gauges_clock_is_laid_on_boot_time),
        cmocka_unit_test(a_gauges_clock_that_jumps_is_laid_anew),
        cmocka_unit_test(time_never_falls),
    };

    return cmocka_run_group_tests(tests, set_up, tear_down);
}
