/* Tokens to a sample: names, trim, and what is not told. */
#include "gauge/channel.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

static struct frame decode(const char *text) {
    struct frame frame;
    assert_int_equal(line_decode(text, strlen(text), &frame, NULL), 0);
    return frame;
}

static struct channel channel(const char *token, double scale, double offset) {
    struct channel made = {.scale = scale, .offset = offset};
    strncpy(made.token, token, sizeof made.token - 1);
    return made;
}

static struct channel_map one_pack(void) {
    struct channel_map map;
    channel_map_init(&map);
    map.n_packs = 1;
    map.pack[0].voltage = channel("v", 1, 0);
    map.pack[0].current = channel("i", 1, 0);
    map.pack[0].temperature = channel("c", 1, 0);
    map.rail = channel("r", 1, 0);
    map.adapter = channel("ext", 1, 0);
    return map;
}

static void assert_close(double a, double b) {
    assert_true(fabs(a - b) < 1e-12);
}

static void all_channels(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    struct frame frame = decode("r=4.97 ext=1 v=3.712 i=0.84 c=-11.5 other=9 t=77.25");
    struct sample sample;
    assert_int_equal(channel_map_apply(&map, &frame, 123456, &sample), 5);
    assert_int_equal(sample.t_boot_us, 123456);
    assert_close(sample.reading, 77.25);
    assert_close(sample.pack[0].voltage_V, 3.712);
    assert_close(sample.pack[0].current_A, 0.84);
    assert_close(sample.pack[0].temp_C, -11.5);
    assert_close(sample.rail_V, 4.97);
    assert_close(sample.adapter, 1);
    for (size_t i = 1; i < PACKS_MAX; i++)
        assert_true(isnan(sample.pack[i].voltage_V) && isnan(sample.pack[i].current_A) &&
                    isnan(sample.pack[i].temp_C));
}

/* Complaints 9 and 21 of the field: what is not told is not known; never 0, never a leftover. */
static void complaint_9_absent_is_unknown_not_zero(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    struct frame frame = decode("other=1");
    struct sample sample;
    memset(&sample, 0, sizeof sample);
    assert_int_equal(channel_map_apply(&map, &frame, 1, &sample), 0);
    assert_true(isnan(sample.pack[0].voltage_V));
    assert_true(isnan(sample.pack[0].current_A));
    assert_true(isnan(sample.pack[0].temp_C));
    assert_true(isnan(sample.rail_V));
    assert_true(isnan(sample.adapter));
    assert_true(isnan(sample.reading));
}

/* A divider of 100k over 27k before a 10-bit converter with a 3.3 V reference: 1 count is
 * 3.3 V / 1024 * 127 / 27 = 15.158 mV at the pack. */
static void trim_scale_then_offset(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    map.pack[0].voltage = channel("adc", 3.3 / 1024 * 127 / 27, -0.02);
    map.pack[0].current = channel("i", -0.001, 0.005); /* counts mA, charging positive */
    struct frame frame = decode("adc=243 i=-840");
    struct sample sample;
    channel_map_apply(&map, &frame, 1, &sample);
    assert_close(sample.pack[0].voltage_V, 243 * (3.3 / 1024 * 127 / 27) - 0.02);
    assert_close(sample.pack[0].current_A, 0.845);
}

static void two_packs_on_one_frame(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    map.n_packs = 2;
    map.pack[1].voltage = channel("v2", 2, 0.1);
    struct frame frame = decode("v2=3.9 v=3.5 c=20");
    struct sample sample;
    assert_int_equal(channel_map_apply(&map, &frame, 1, &sample), 3);
    assert_close(sample.pack[0].voltage_V, 3.5);
    assert_close(sample.pack[1].voltage_V, 7.9);
    assert_true(isnan(sample.pack[1].temp_C));
}

static void pack_beyond_n_packs_is_not_filled(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    map.pack[1].voltage = channel("v", 1, 0);
    struct frame frame = decode("v=3.5");
    struct sample sample;
    assert_int_equal(channel_map_apply(&map, &frame, 1, &sample), 1);
    assert_true(isnan(sample.pack[1].voltage_V));
}

static void adapter_is_above_the_threshold_after_trim(void **state) {
    (void)state;
    static const struct {
        const char *text;
        double adapter;
    } cases[] = {{"ext=0", 0}, {"ext=0.49", 0}, {"ext=0.5", 0}, {"ext=0.51", 1}, {"ext=1", 1}};
    struct channel_map map = one_pack();
    struct sample sample;
    for (size_t i = 0; i < sizeof cases / sizeof cases[0]; i++) {
        struct frame frame = decode(cases[i].text);
        channel_map_apply(&map, &frame, 1, &sample);
        assert_close(sample.adapter, cases[i].adapter);
    }
    map.adapter = channel("ext", 2, 0);
    map.adapter_above = 4.5; /* the adapter's volts through a divider by two */
    struct frame frame = decode("ext=2.4");
    channel_map_apply(&map, &frame, 1, &sample);
    assert_close(sample.adapter, 1);
}

static void trim_beyond_a_double_is_unknown(void **state) {
    (void)state;
    struct channel_map map = one_pack();
    map.pack[0].voltage.scale = 1e10;
    struct frame frame = decode("v=1e300 ext=1");
    struct sample sample;
    assert_int_equal(channel_map_apply(&map, &frame, 1, &sample), 1);
    assert_true(isnan(sample.pack[0].voltage_V));
}

static void token_names(void **state) {
    (void)state;
    assert_true(channel_token_valid("v"));
    assert_true(channel_token_valid("pack-2.v_raw"));
    assert_true(channel_token_valid("a23456789012345"));
    assert_false(channel_token_valid("a234567890123456"));
    assert_false(channel_token_valid(""));
    assert_false(channel_token_valid("2v"));
    assert_false(channel_token_valid("v=1"));
    assert_false(channel_token_valid("v "));
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(all_channels),
        cmocka_unit_test(complaint_9_absent_is_unknown_not_zero),
        cmocka_unit_test(trim_scale_then_offset),
        cmocka_unit_test(two_packs_on_one_frame),
        cmocka_unit_test(pack_beyond_n_packs_is_not_filled),
        cmocka_unit_test(adapter_is_above_the_threshold_after_trim),
        cmocka_unit_test(trim_beyond_a_double_is_unknown),
        cmocka_unit_test(token_names),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
