/* The fit: its bounded solver, what it makes of logs, and whether it finds a made-up cell again. */
#include "bench/bounded.h"
#include "bench/fit.h"
#include "bench/fitwrite.h"
#include "bench/plot.h"
#include "decode/celltable.h"
#include "seeded.h"
#include "util/cleanup.h"
#include "util/real.h"

#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sysexits.h>
#include <unistd.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof(*(array)))

static void between(const char *what, double got, double low, double high) {
    if (!(got >= low && got <= high))
        fail_msg("%s is %g, not between %g and %g", what, got, low, high);
}

/* ---- the solver ------------------------------------------------------------------------------ */

/* min (x-3)^2 + (y+1)^2 + xy within 0..2: without bounds x = 14/3; by hand x = 2, y = 0. */
static void solver_by_hand(void **state) {
    (void)state;
    static const double G[] = {2, 1, 1, 2}, h[] = {6, -2}, low[] = {0, 0}, high[] = {2, 2};
    double x[2] = {1, 1};
    static const double wide_low[] = {-9, -9}, wide_high[] = {9, 9};

    assert_int_equal(bounded_solve(2, G, h, low, high, x), 0);
    between("x", x[0], 2.0, 2.0);
    between("y", x[1], 0.0, 0.0);
    assert_int_equal(bounded_solve(2, G, h, wide_low, wide_high, x), 0);
    between("free x", x[0], 14.0 / 3.0 - 1e-12, 14.0 / 3.0 + 1e-12);
    between("free y", x[1], -10.0 / 3.0 - 1e-12, -10.0 / 3.0 + 1e-12);
}

static void solver_refuses_singular(void **state) {
    (void)state;
    static const double G[] = {1, 1, 1, 1}, h[] = {1, 1}, low[] = {-9, -9}, high[] = {9, 9};
    double x[2] = {0, 0};

    assert_int_equal(bounded_solve(2, G, h, low, high, x), BOUNDED_E_SINGULAR);
}

/* The conditions of Karush, Kuhn and Tucker are enough for a convex problem: the gradient is zero
 * inside, and at a bound it points out. */
static void meets_kkt(size_t n, const double *G, const double *h, const double *low,
                      const double *high, const double *x) {
    for (size_t i = 0; i < n; i++) {
        double gradient = -h[i], scale = fabs(h[i]) + 1.0;

        for (size_t j = 0; j < n; j++) {
            gradient += G[i * n + j] * x[j];
            scale += fabs(G[i * n + j] * x[j]);
        }
        between("x against its bounds", x[i], low[i], high[i]);
        if (x[i] > low[i])
            between("gradient above the lower bound", gradient / scale, -1e300, 1e-7);
        if (x[i] < high[i])
            between("gradient under the upper bound", gradient / scale, -1e-7, 1e300);
    }
}

static void solver_property(void **state) {
    (void)state;
    gsl_rng *random __attribute__((cleanup(seeded_free_p))) = seeded_new("solver");

    for (int round = 0; round < 200; round++) {
        size_t n = 1 + gsl_rng_uniform_int(random, 40);
        double A[40 * 40] = {0}, G[40 * 40] = {0}, h[40], low[40], high[40], x[40] = {0};

        for (size_t i = 0; i < n * n; i++)
            A[i] = gsl_rng_uniform(random) - 0.5;
        for (size_t i = 0; i < n; i++) {
            h[i] = gsl_rng_uniform(random) - 0.5;
            low[i] = -gsl_rng_uniform(random);
            high[i] = low[i] + gsl_rng_uniform(random);
            G[i * n + i] = 1e-4;
            for (size_t j = 0; j < n; j++)
                for (size_t k = 0; k < n; k++)
                    G[i * n + j] += A[k * n + i] * A[k * n + j];
        }
        assert_int_equal(bounded_solve(n, G, h, low, high, x), 0);
        meets_kkt(n, G, h, low, high, x);
    }
}

/* ---- a made-up cell -------------------------------------------------------------------------- */

struct maker {
    FILE *out;
    struct cell cell;
    struct cell_state state;
    double time_s, taken_Ah, temp_C;
};

static void make_begin(struct maker *m, char path[32], double temp_C, const char *columns) {
    struct cell_table table;
    char message[256] = "";
    int fd;

    strcpy(path, "/tmp/fit-XXXXXX");
    fd = mkstemp(path);
    assert_true(fd >= 0);
    assert_int_equal(celltable_load("tests/replay/fen.ini", &table, message, sizeof message), 0);
    *m = (struct maker){.out = fdopen(fd, "w"), .state = {.charge = 1.0}, .temp_C = temp_C};
    assert_int_equal(cell_init(&m->cell, &table, 1, table.capacity_Ah), 0);
    fprintf(m->out, "# made up\n%s\n", columns);
}

/* for_s at current_A, a row each step_s; ends early under 2.5 V. */
static bool make_run(struct maker *m, double current_A, double for_s, double step_s) {
    double end_s = m->time_s + for_s, V = 3.0;

    while (m->time_s < end_s - 1e-9 && V > 2.5) {
        struct cell_point point;

        cell_at(&m->cell, m->state.charge, m->temp_C, &point);
        V = cell_source_V(&point, &m->state) - point.r0_ohm * current_A;
        fprintf(m->out, "%.1f,%.5f,%.4f,%.1f,%.6f\n", m->time_s, V, current_A, m->temp_C,
                m->taken_Ah);
        cell_step(&m->cell, &m->state, &point, current_A, step_s);
        m->taken_Ah += current_A * step_s / 3600.0;
        m->time_s += step_s;
    }
    return V > 2.5;
}

#define COLUMNS "time_s,voltage_V,current_A,temp_C,charge_Ah"

static void make_slow(char path[32]) {
    struct maker m;

    make_begin(&m, path, 25.0, COLUMNS);
    make_run(&m, 0.1444, 1e6, 30.0);
    make_run(&m, 0.0, 3600.0, 30.0);
    assert_int_equal(fclose(m.out), 0);
}

/* Pulses of a minute, C/4 for the way on, an hour of rest. */
static void make_pulses(char path[32], double temp_C, double rest_s) {
    struct maker m;

    make_begin(&m, path, temp_C, COLUMNS);
    make_run(&m, 0.0, 900.0, 30.0);
    for (int i = 0; i < 24 && make_run(&m, 1.444, 60.0, 1.0); i++) {
        make_run(&m, 0.0, 300.0, 2.0);
        if (!make_run(&m, 0.722, 500.0, 5.0))
            break;
        make_run(&m, 0.0, rest_s, 30.0);
    }
    assert_int_equal(fclose(m.out), 0);
}

static void read_into(struct fit *fit, const char *path, enum fit_role role) {
    char message[512] = "";

    if (fitlog_read(&fit->log[fit->n_logs], path, role, 25.0, message, sizeof message))
        fail_msg("%s", message);
    fit->n_logs++;
    unlink(path);
}

static const struct fit_wish WISH = {.capacity_Ah = 2.888,
                                     .spread_V = UNKNOWN,
                                     .activation_J_mol = UNKNOWN,
                                     .name = "made-up",
                                     .limits = {"li-ion", 4.2, 2.5}};

static void free_fit(struct fit **fit) {
    fit_free(*fit);
    free(*fit);
}

#define FIT struct fit *fit __attribute__((cleanup(free_fit))) = calloc(1, sizeof *fit)

static void near_the_maker(const struct fit *fit, const struct cell *cell) {
    struct cell found;
    struct cell_point was, is;

    assert_int_equal(cell_init(&found, &fit->table, 1, 2.888), 0);
    for (int pct = 6; pct <= 94; pct += 4) {
        double z = pct / 100.0, most_mV;

        cell_at(cell, z, 25.0, &was);
        cell_at(&found, z, 25.0, &is);
        most_mV =
            pct < 14 ? 20.0 : 8.0; /* steep, and the sag of the slow discharge is large there */
        between("curve in mV", 1000.0 * (is.ocv_V - was.ocv_V), -most_mV, most_mV);
        if (pct < 14)
            continue; /* where resistances climb, smoothness has its say, and so it has in r0 alone
                       */
        between("r0", is.r0_ohm / was.r0_ohm, 0.75, 1.15);
        between("sum of resistances",
                (is.r0_ohm + is.r1_ohm + is.r2_ohm) / (was.r0_ohm + was.r1_ohm + was.r2_ohm), 0.88,
                1.2);
    }
}

/* The cell of tests/replay/fen.ini comes out again, with its activation energy from a second
 * temperature; the file that is written is a table that says the same. */
static void finds_the_cell(void **state) {
    (void)state;
    char slow[32], warm[32], cold[32], message[512] = "";
    scoped(free_p) char *text = NULL;
    size_t length = 0;
    struct cell_table table;
    struct maker m;
    FILE *out;
    FIT;

    make_slow(slow);
    make_pulses(warm, 25.0, 2400.0);
    make_pulses(cold, 2.0, 2400.0);
    read_into(fit, slow, FIT_OCV);
    read_into(fit, warm, FIT_PULSE);
    read_into(fit, cold, FIT_PULSE);
    assert_int_equal(fit_run(fit, &WISH), 0);
    make_begin(&m, slow, 25.0, "");
    fclose(m.out);
    unlink(slow);
    near_the_maker(fit, &m.cell);
    assert_true(fit->activation_told);
    between("activation", fit->table.arrhenius_J_mol, 23.5e3, 29.5e3);
    between("tau1", fit->table.tau1_s, 5.0, 20.0);
    between("tau2", fit->table.tau2_s, 200.0, 450.0);
    between("residual", fit->residual[1].rms_V, 0.0, 0.012);
    between("rests", fit->rests_rms_V, 0.0, 0.006);
    out = open_memstream(&text, &length);
    fitwrite_table(fit, "made up", "CC BY 4.0", out);
    fclose(out);
    if (celltable_parse(text, length, "made-up", &table, message, sizeof message))
        fail_msg("%s", message);
    for (size_t i = 0; i < table.ocv.n; i++)
        assert_true(fabs(table.ocv.voltage_V[i] - fit->table.ocv.voltage_V[i]) < 1e-9);
    assert_string_equal(table.name, "made-up");
    between("spread", table.voltage_sd_V, 0.010, 0.020);
}

/* Without rests the words say that the curve's sag is a guess; with one temperature, that. */
static void says_what_is_missing(void **state) {
    (void)state;
    char slow[32], drive[32];
    scoped(free_p) char *text = NULL;
    size_t length = 0;
    FILE *out;
    FIT;

    make_slow(slow);
    make_pulses(drive, 25.0, 30.0);
    read_into(fit, slow, FIT_OCV);
    read_into(fit, drive, FIT_DRIVE);
    assert_int_equal(fit_run(fit, &WISH), 0);
    assert_false(fit->activation_told);
    between("activation", fit->table.arrhenius_J_mol, 28e3, 28e3);
    out = open_memstream(&text, &length);
    fitwrite_words(fit, out, "> ");
    fclose(out);
    assert_non_null(strstr(text, "no second temperature"));
    for (char *line = strtok(text, "\n"); line; line = strtok(NULL, "\n")) {
        assert_memory_equal(line, "> ", 2);
        assert_true(strlen(line) < 150);
    }
}

/* A tester that counts too much is found out when it took more than the capacity. */
static void shrinks_amp_hours(void **state) {
    (void)state;
    char slow[32], pulses[32];
    struct fit_wish wish = WISH;
    FIT;

    make_slow(slow);
    make_pulses(pulses, 25.0, 1200.0);
    read_into(fit, slow, FIT_OCV);
    read_into(fit, pulses, FIT_PULSE);
    for (size_t i = 0; i < fit->log[0].n; i++)
        fit->log[0].row[i].charge *= 1.04;
    wish.capacity_Ah = fitlog_most_Ah(&fit->log[0]) / 1.04;
    assert_int_equal(fit_run(fit, &wish), 0);
    between("gain", fit->log[0].gain, 1.0 / 1.0401, 1.0 / 1.0399);
    between("curve at 50 % in V", ocv_voltage(&fit->table.ocv, 0.5), 3.6573, 3.6773);
}

/* Any table that comes out is bounded, positive and rising, whatever the voltages were. */
static void bounded_whatever_comes(void **state) {
    (void)state;
    gsl_rng *random __attribute__((cleanup(seeded_free_p))) = seeded_new("noise");

    for (int round = 0; round < 4; round++) {
        char slow[32], pulses[32];
        const char *what = "";
        int r;
        FIT;

        make_slow(slow);
        make_pulses(pulses, 25.0, 600.0);
        read_into(fit, slow, FIT_OCV);
        read_into(fit, pulses, FIT_PULSE);
        for (size_t i = 0; i < fit->log[1].n; i++) {
            fit->log[1].row[i].voltage_V += 0.8 * (gsl_rng_uniform(random) - 0.5);
            fit->log[1].row[i].current_A *= 2.0 * gsl_rng_uniform(random) - 1.0;
        }
        r = fit_run(fit, &WISH);
        if (r == 0 && cell_table_check(&fit->table, &what))
            fail_msg("round %d: %s", round, what);
        for (size_t j = 0; r == 0 && j < fit->n_res; j++)
            assert_true(fit->table.r0_ohm[j] > 0.0 && fit->table.r0_ohm[j] < 5.0);
    }
}

/* ---- logs ------------------------------------------------------------------------------------ */

static int read_text(const char *text, struct fit_log *ret, char *message, size_t size) {
    char path[] = "/tmp/fit-XXXXXX";
    int fd = mkstemp(path), r;

    assert_true(fd >= 0);
    assert_int_equal(write(fd, text, strlen(text)), (ssize_t)strlen(text));
    close(fd);
    r = fitlog_read(ret, path, FIT_PULSE, 25.0, message, size);
    unlink(path);
    return r;
}

static void bad_logs_are_refused(void **state) {
    (void)state;
    static const struct {
        const char *text;
        int code;
        const char *word;
    } bad[] = {
        {"time_s,voltage_V\n0,4.0\n", EX_DATAERR, "current_A"},
        {"time_s,voltage_V,current_A\n0,4.0,1\n", EX_DATAERR, "20 rows"},
        {"time_s,voltage_V,current_A\n0,4.0,1\n0,4.0,1\n", EX_DATAERR, "time"},
        {"time_s,voltage_V,current_A\n0,12.0,1\n", EX_DATAERR, "one cell"},
    };
    struct fit_log log = {0};
    char message[512];

    for (size_t i = 0; i < COUNT(bad); i++) {
        message[0] = '\0';
        assert_int_equal(read_text(bad[i].text, &log, message, sizeof message), bad[i].code);
        if (!strstr(message, bad[i].word))
            fail_msg("\"%s\" does not say \"%s\"", message, bad[i].word);
    }
    assert_int_equal(fitlog_read(&log, "/nonexistent", FIT_OCV, 25.0, message, sizeof message),
                     EX_NOINPUT);
}

/* Runs begin where time or charge jumps, and rests end where current flows again. */
static void runs_and_rests(void **state) {
    (void)state;
    scoped(free_p) char *text = NULL;
    size_t length = 0, at = 0;
    FILE *out = open_memstream(&text, &length);
    struct fit_rest rest;
    struct fit_log log;
    char message[512] = "";

    fprintf(out, "%s\n", COLUMNS);
    for (int t = 0; t <= 700; t += 10)
        fprintf(out, "%d,4.0,0,25,0.1\n", t);
    for (int t = 701; t <= 720; t++)
        fprintf(out, "%d,3.9,1,25,%.5f\n", t, 0.1 + (t - 700) / 3600.0);
    for (int t = 4000; t <= 4300; t += 10) /* a gap, and a jump of the charge */
        fprintf(out, "%d,3.8,0,25,0.5\n", t);
    fclose(out);
    if (read_text(text, &log, message, sizeof message))
        fail_msg("%s", message);
    fitlog_place(&log, 1.0, 1.0, 1.0);
    assert_int_equal(log.runs, 2);
    assert_int_equal(log.jumps, 1);
    assert_true(fitlog_rest(&log, 1.0, &at, &rest));
    between("rest ends at 4.0 V", rest.voltage_V, 4.0, 4.0);
    between("charge", rest.charge, 0.9 - 1e-9, 0.9 + 1e-9);
    between("length", rest.rest_s, 700.0, 700.0);
    assert_false(fitlog_rest(&log, 1.0, &at, &rest)); /* five minutes are no rest */
    fitlog_free(&log);
}

static void refusals(void **state) {
    (void)state;
    char slow[32], pulses[32];
    struct fit_wish wish = WISH;
    FIT;

    make_pulses(pulses, 25.0, 1200.0);
    make_slow(slow);
    read_into(fit, pulses, FIT_OCV);
    assert_int_equal(fit_run(fit, &wish), FIT_E_LOGS);
    read_into(fit, slow, FIT_PULSE);
    assert_int_equal(fit_run(fit, &wish), FIT_E_CURVE);
    wish.capacity_Ah = 0.0;
    assert_int_equal(fit_run(fit, &wish), FIT_E_CAPACITY);
}

/* The picture is whole: axes with units, three resistances, one circle a rest within. */
static void picture(void **state) {
    (void)state;
    char slow[32], pulses[32];
    scoped(free_p) char *text = NULL;
    size_t length = 0, circles = 0;
    FILE *out;
    FIT;

    make_slow(slow);
    make_pulses(pulses, 25.0, 1200.0);
    read_into(fit, slow, FIT_OCV);
    read_into(fit, pulses, FIT_PULSE);
    assert_int_equal(fit_run(fit, &WISH), 0);
    out = open_memstream(&text, &length);
    plot_fit(fit, out);
    fclose(out);
    for (const char *c = text; (c = strstr(c, "<circle")) != NULL; c++)
        circles++;
    assert_true(circles >= 8 && circles <= fit->n_rests);
    assert_non_null(strstr(text, ">charge in %</text>"));
    assert_non_null(strstr(text, ">V</text>"));
    assert_non_null(strstr(text, ">mohm</text>"));
    assert_null(strstr(text, "nan"));
    assert_string_equal(text + length - strlen("</svg>\n"), "</svg>\n");
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(solver_by_hand),
        cmocka_unit_test(solver_refuses_singular),
        cmocka_unit_test(solver_property),
        cmocka_unit_test(finds_the_cell),
        cmocka_unit_test(says_what_is_missing),
        cmocka_unit_test(shrinks_amp_hours),
        cmocka_unit_test(bounded_whatever_comes),
        cmocka_unit_test(bad_logs_are_refused),
        cmocka_unit_test(runs_and_rests),
        cmocka_unit_test(refusals),
        cmocka_unit_test(picture),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
