/* Stops, drawn at random: many packs are run down through the whole watch behind a poor gauge, and
 * the stage is judged by what is true inside the pack. TEST_SEED=number has a failure again,
 * TEST_RUNS=number runs so many of them, TEST_RUN=number only that one. */
#include "stops_world.h"

#include <time.h>

/* ---- judging --------------------------------------------------------------------------------- */

static void tell(const struct world *w, const char *what) {
    const struct scene *s = &w->scene;

    print_message(
        "  %s: t %.0f s, stage %d by %d, charge %.3f (%.3f to %.3f), true %.3f; terminal %.3f V, "
        "floor %.3f V; rest %.3f V, cutoff %.3f V; left %.0f s, least %.0f s\n",
        what, (double)w->t_us * 1e-6, (int)w->report.stage, (int)w->report.cause, w->report.charge,
        w->report.charge_low, w->report.charge_high, w->state.charge, w->terminal_V,
        w->config.pack[0].floor_V, w->report.pack[0].rest_V, w->config.pack[0].cutoff_rest_V,
        w->report.left_s, w->report.left_least_s);
    print_message(
        "    table %zu, %d in series, %.2f Ah, %.1f C, resistance %.2f, idle %.2f W, bursts "
        "%.2f W for %.3f s each %.1f s, typical %.2f; %d bits, noise %.4f V, gain %.4f, "
        "a line each %.2f s, current %d, gaps %.5f of %.0f s, junk %.4f, adapter %d\n",
        s->table, s->series, s->capacity_Ah, s->temp_C, s->resistance, s->idle_W, s->burst_W,
        s->burst_s, s->pause_s, s->typical, s->bits, s->noise_V, s->gain, s->period_s, s->current,
        s->gap_chance, s->gap_s, s->junk_chance, (int)s->adapter);
}

static void note_floor(struct world *w, const struct sample *s) {
    if (!(s->pack[0].voltage_V < w->config.pack[0].floor_V)) {
        w->floor_samples = 0;
        w->floor_since_us = -1;
        return;
    }
    if (w->floor_samples++ == 0)
        w->floor_since_us = w->t_us;
    if (w->floor_samples >= w->config.ladder.floor_samples &&
        (double)(w->t_us - w->floor_since_us) * 1e-6 >= w->config.ladder.floor_confirm_s)
        w->floor_event = true;
}

static bool too_early(const struct world *w) {
    const struct pack_config *p = &w->config.pack[0];
    double rest_V = ocv_voltage(&w->truth.table.ocv, w->state.charge) * w->scene.series;

    /* blind it goes by the cautious end, and that may be far */
    return w->report.stage == STAGE_LEAVING && !w->floor_event && w->report.cause != CAUSE_BLIND &&
           w->state.charge > p->cutoff_charge + FALSE_MARGIN &&
           rest_V > p->cutoff_rest_V + 0.03 * w->scene.series;
}

/* Really empty, or long under the floor, and nothing lifts the pack. */
static bool too_late(struct world *w) {
    const struct ladder_config *l = &w->config.ladder;
    bool due = w->state.charge < w->config.pack[0].cutoff_charge - MISSED_MARGIN || w->floor_event;
    bool lifted = w->plugged && w->scene.adapter != ADAPTER_LOSES;

    if (!due || lifted)
        w->due_since_us = -1;
    else if (w->due_since_us < 0)
        w->due_since_us = w->t_us;
    return w->due_since_us >= 0 && w->report.stage != STAGE_LEAVING &&
           (double)(w->t_us - w->due_since_us) * 1e-6 >
               l->confirm_s + l->grace_s + LATE_SAMPLES * w->scene.period_s + w->config.silent_s;
}

/* 0, or what is wrong. */
static const char *judge(struct world *w) {
    const struct report *r = &w->report;
    double charge = fmin(fmax(w->state.charge, 0.0), 1.0);
    const char *wrong = NULL;

    if ((int)r->stage > (int)w->stage + 1 && r->cause != CAUSE_FLOOR)
        wrong = "a stage was passed over";
    if ((int)r->stage < (int)w->stage - 1 || (w->stage == STAGE_LEAVING && r->stage != w->stage))
        wrong = "the stage rose by more than one";
    if (w->watch.pack[0].known && !(r->charge >= 0.0 && r->charge <= 1.0))
        wrong = "the charge is no charge";
    if (too_early(w))
        wrong = "left too early";
    if (too_late(w))
        wrong = "did not leave";
    w->stage = r->stage;
    if ((double)w->t_us * 1e-6 > SETTLE_S && w->watch.pack[0].known) {
        w->judged++;
        w->covered += charge >= r->charge_low && charge <= r->charge_high;
    }
    return wrong;
}

/* ---- runs ------------------------------------------------------------------------------------ */

static void one_period(struct world *w) {
    struct sample s;
    bool junk;

    pass(w, w->scene.period_s);
    w->t_us += (int64_t)(w->scene.period_s * 1e6);
    if (w->gap_s > 0.0) {
        w->gap_s -= w->scene.period_s;
        watch_tick(&w->watch, w->t_us, &w->report);
        return;
    }
    if ((double)w->t_us * 1e-6 > SETTLE_S && chance(&w->random, w->scene.gap_chance))
        w->gap_s = exponential(&w->random, w->scene.gap_s);
    s = read_gauge(w, &junk);
    if (!junk)
        note_floor(w, &s);
    watch_feed(&w->watch, &s, &w->report);
}

static const char *run(struct world *w, uint64_t seed) {
    memset(w, 0, sizeof *w);
    w->random = seed;
    w->scene = draw(&w->random);
    build(w);
    for (int i = 0; i < SAMPLES; i++) {
        const char *wrong;

        one_period(w);
        wrong = judge(w);
        if (wrong)
            return wrong;
        if (w->stage == STAGE_LEAVING || w->state.charge < -0.02)
            break;
    }
    return NULL;
}

static uint64_t number(const char *name, uint64_t otherwise) {
    const char *text = getenv(name);

    return text ? strtoull(text, NULL, 10) : otherwise;
}

struct totals {
    uint64_t left, faults, judged;
    double cover;
};

static void count(const struct world *w, uint64_t i, const char *wrong, struct totals *t) {
    t->left += w->stage == STAGE_LEAVING;
    if (wrong) {
        t->faults++;
        print_message("TEST_RUN=%llu\n", (unsigned long long)i);
        tell(w, wrong);
    }
    if (w->judged) {
        t->cover += (double)w->covered / (double)w->judged;
        t->judged++;
    }
}

/* TEST_SEED 11 to 14 with 2500 runs each: 3 of 10000 went wrong when this was written, 2 of them
 * with lithium iron phosphate. A stop while blind is not judged as early. */
static void stops_come_neither_early_nor_late(void **unused) {
    uint64_t seed = number("TEST_SEED", (uint64_t)time(NULL)), runs = number("TEST_RUNS", RUNS);
    uint64_t first = number("TEST_RUN", 0), last = getenv("TEST_RUN") ? first : runs - 1;
    struct totals totals = {0};
    static struct world w;

    (void)unused;
    print_message("stops: TEST_SEED=%llu\n", (unsigned long long)seed);
    for (uint64_t i = first; i <= last; i++) {
        const char *wrong = run(&w, seed + 1000003u * i);

        count(&w, i, wrong, &totals);
    }
    print_message("stops: %llu runs, %llu left, %llu wrong, band95 holds the truth %.1f %%\n",
                  (unsigned long long)(last - first + 1), (unsigned long long)totals.left,
                  (unsigned long long)totals.faults, 100.0 * totals.cover / (double)totals.judged);
    assert_true(totals.faults <= (last - first + 1) / 200);
    if (last - first + 1 < RUNS)
        return; /* too few for a share */
    assert_true(totals.cover / (double)totals.judged >= 0.92);
    assert_true(totals.cover / (double)totals.judged <= 0.995);
}

int main(void) {
    static const struct CMUnitTest tests[] = {
        cmocka_unit_test(stops_come_neither_early_nor_late),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
