/* The open-circuit curve against SciPy's PchipInterpolator (vectors/make_ocv.py), against published
 * worked values, and against what must hold for any table. */
#include "core/ocv.h"
#include "util/cleanup.h"
#include "util/real.h"

#include "unit/seeded.h"
#include "unit/vectors/ocv_vectors.h"

#include <glob.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof(*(array)))

static void near(const char *what, double got, double wanted, double most) {
    if (!(fabs(got - wanted) <= most))
        fail_msg("%s: %.15g, wanted %.15g within %g", what, got, wanted, most);
}

static struct ocv made(const double *charge, const double *voltage_V, size_t n) {
    struct ocv ocv;

    assert_int_equal(ocv_init(&ocv, charge, voltage_V, n), 0);
    return ocv;
}

static void same_as_scipy(void **state) {
    (void)state;
    for (size_t k = 0; k < COUNT(OCV_VECTORS); k++) {
        const struct ocv_vector *v = &OCV_VECTORS[k];
        struct ocv ocv = made(v->charge, v->voltage_V, v->n);
        double voltage_V, slope_V;

        for (size_t i = 0; i < v->n; i++) {
            near(v->name, ocv.slope_V[i], v->slope_V[i], 1e-9);
            near(v->name, ocv_voltage(&ocv, v->charge[i]), v->voltage_V[i], 1e-12);
        }
        for (size_t i = 0; i < v->n_at; i++) {
            near(v->name, ocv_voltage(&ocv, v->at[i]), v->at_V[i], 1e-9);
            near(v->name, ocv_slope(&ocv, v->at[i]), v->at_slope_V[i], 1e-9);
            ocv_at(&ocv, v->at[i], &voltage_V, &slope_V);
            near(v->name, voltage_V, v->at_V[i], 1e-9);
            near(v->name, slope_V, v->at_slope_V[i], 1e-9);
        }
        for (size_t i = 0; i < v->n_back; i++)
            near(v->name, ocv_charge(&ocv, v->back_V[i]), v->back[i], 1e-9);
    }
}

/* Fritsch and Carlson, SIAM J. Numer. Anal. 17 (1980) 238-246: data set RPN 14. The figures are
 * those of the weighted harmonic mean (Fritsch and Butland 1984), not of the 1980 rule. */
static void published_data_set(void **state) {
    (void)state;
    static const double x[] = {7.99, 8.09, 8.19, 8.7, 9.2, 10, 12, 15, 20};
    static const double y[] = {0,        2.76429e-5, 4.37498e-2, 0.169183, 0.469428,
                               0.943740, 0.998636,   0.999919,   0.999994};
    static const double slopes[] = {0,          5.5250868e-4, .33587683,    .34944917, .59695824,
                                    .060321846, 9.0039538e-4, 3.1424684e-5, 0};
    static const double at[][2] = {{8.0, 2.7674339e-7}, {8.14, .017697167}, {8.5, .11663258},
                                   {9, .33753433},      {9.5, .68521795},   {11, .98604336},
                                   {13, .99936182},     {18, .99998268}};
    struct ocv ocv = made(x, y, COUNT(x));

    for (size_t i = 0; i < COUNT(x); i++)
        near("RPN 14, slope", ocv.slope_V[i], slopes[i], 6e-9);
    for (size_t i = 0; i < COUNT(at); i++)
        near("RPN 14, value", ocv_voltage(&ocv, at[i][0]), at[i][1], 6e-9);
}

static void plateau(void **state) {
    (void)state;
    static const double x[] = {0, 1, 2, 3}, y[] = {0, 1, 1, 2}, slopes[] = {1.5, 0, 0, 1.5};
    struct ocv ocv = made(x, y, 4);

    for (size_t i = 0; i < 4; i++)
        assert_true(ocv.slope_V[i] == slopes[i]);
    near("before", ocv_voltage(&ocv, 0.5), 0.6875, 1e-15);
    for (double z = 1.0; z <= 2.0; z += 0.125) {
        assert_true(ocv_voltage(&ocv, z) == 1.0);
        assert_true(ocv_slope(&ocv, z) == 0.0);
    }
    near("after", ocv_voltage(&ocv, 2.5), 1.3125, 1e-15);
    assert_true(ocv_charge(&ocv, 1.0) == 1.5);
}

/* The kernel's table with 3684 mV at both 12 and 13 %: the middle, and nothing skipped beside. */
static void flat_step_of_a_published_table(void **state) {
    (void)state;
    const struct ocv_vector *v = NULL;
    struct ocv ocv;

    for (size_t k = 0; k < COUNT(OCV_VECTORS); k++)
        if (!strcmp(OCV_VECTORS[k].name, "flat step"))
            v = &OCV_VECTORS[k];
    assert_non_null(v);
    ocv = made(v->charge, v->voltage_V, v->n);
    near("step", ocv_charge(&ocv, 3.684), 0.125, 1e-15);
    assert_true(ocv_charge(&ocv, 3.684 - 1e-6) < 0.12);
    assert_true(ocv_charge(&ocv, 3.684 + 1e-6) > 0.13);
    near("under the step", ocv_voltage(&ocv, ocv_charge(&ocv, 3.6835)), 3.6835, 1e-9);
}

static void flat_at_the_ends(void **state) {
    (void)state;
    static const double x[] = {0, 0.2, 0.8, 1}, y[] = {3.0, 3.0, 4.0, 4.0};
    struct ocv ocv = made(x, y, 4);

    near("low end", ocv_charge(&ocv, 3.0), 0.1, 1e-15);
    near("high end", ocv_charge(&ocv, 4.0), 0.9, 1e-15);
    assert_true(ocv_charge(&ocv, 2.9) == 0.0);
    assert_true(ocv_charge(&ocv, 4.1) == 1.0);
    assert_true(ocv_voltage(&ocv, -1.0) == 3.0);
    assert_true(ocv_voltage(&ocv, 2.0) == 4.0);
}

static void beyond_the_table(void **state) {
    (void)state;
    static const double x[] = {0, 0.1, 1}, y[] = {3.0, 3.6, 4.2};
    struct ocv ocv = made(x, y, 3);

    near("below", ocv_voltage(&ocv, -0.02), 3.0 - 0.02 * ocv.slope_V[0], 1e-15);
    near("above", ocv_voltage(&ocv, 1.05), 4.2 + 0.05 * ocv.slope_V[2], 1e-15);
    assert_true(ocv_slope(&ocv, -5.0) == ocv.slope_V[0]);
    assert_true(ocv_slope(&ocv, 5.0) == ocv.slope_V[2]);
    assert_true(ocv_charge(&ocv, 2.0) == 0.0);
    assert_true(ocv_charge(&ocv, 5.0) == 1.0);
}

/* Unknown is never empty: a voltage that is no number has no charge. */
static void unknown_stays_unknown(void **state) {
    (void)state;
    static const double x[] = {0, 0.1, 1};
    static const double rising[] = {3.0, 3.6, 4.2}, flat[] = {3.0, 3.0, 4.2};
    struct ocv a = made(x, rising, 3), b = made(x, flat, 3);

    assert_true(isnan(ocv_charge(&a, UNKNOWN)));
    assert_true(isnan(ocv_charge(&b, UNKNOWN)));
    assert_true(isnan(ocv_voltage(&a, UNKNOWN)));
    assert_true(isnan(ocv_slope(&a, UNKNOWN)));
    assert_true(ocv_charge(&b, ENDLESS) == 1.0);
    assert_true(ocv_charge(&b, -ENDLESS) == 0.0);
}

static void refused(size_t n, const double *x, const double *y, int error) {
    struct ocv ocv, before;

    memset(&ocv, 0x5a, sizeof(ocv));
    before = ocv;
    assert_int_equal(ocv_init(&ocv, x, y, n), error);
    assert_memory_equal(&ocv, &before, sizeof(ocv));
}

static void bad_tables(void **state) {
    (void)state;
    static double many[OCV_POINTS_MAX + 1], volts[OCV_POINTS_MAX + 1];
    const double x[] = {0, 0.5, 1}, y[] = {3, 3.7, 4.2};

    for (size_t i = 0; i < COUNT(many); i++)
        many[i] = volts[i] = (double)i / OCV_POINTS_MAX;
    refused(0, x, y, OCV_E_SIZE);
    refused(1, x, y, OCV_E_SIZE);
    refused(OCV_POINTS_MAX + 1, many, volts, OCV_E_SIZE);
    refused(SIZE_MAX, x, y, OCV_E_SIZE);
    refused(3, (double[]){0, 0.5, 0.5}, y, OCV_E_ORDER);
    refused(3, (double[]){0, 0.7, 0.5}, y, OCV_E_ORDER);
    refused(3, x, (double[]){3, 2.9999, 4.2}, OCV_E_ORDER);
    refused(3, (double[]){0, UNKNOWN, 1}, y, OCV_E_NUMBER);
    refused(3, x, (double[]){3, 3.7, UNKNOWN}, OCV_E_NUMBER);
    refused(3, x, (double[]){3, 3.7, ENDLESS}, OCV_E_NUMBER);
    refused(3, (double[]){-ENDLESS, 0.5, 1}, y, OCV_E_NUMBER);
    /* finite numbers between which the slope is not */
    refused(3, (double[]){0, 1e-320, 1}, y, OCV_E_NUMBER);
    refused(2, x, (double[]){-1.7e308, 1.7e308}, OCV_E_NUMBER);
}

/* ---- properties -------------------------------------------------------------------------------
 */

/* A table of n points; a share of the steps is flat. */
static struct ocv any_table(gsl_rng *random, size_t n, double flat) {
    double x[OCV_POINTS_MAX], y[OCV_POINTS_MAX], width = 0.0;

    for (size_t i = 0; i < n; i++) {
        double rise = exp(8.0 * gsl_rng_uniform(random) - 8.0);

        x[i] = i ? x[i - 1] + exp(6.0 * gsl_rng_uniform(random) - 6.0) : 0.0;
        y[i] = i ? y[i - 1] + (gsl_rng_uniform(random) < flat ? 0.0 : rise) : 2.0;
        width = x[i];
    }
    for (size_t i = 0; i < n; i++)
        x[i] /= width;
    return made(x, y, n);
}

static void never_falls_never_overshoots(void **state) {
    (void)state;
    scoped(seeded_free_p) gsl_rng *random = seeded_new("never_falls_never_overshoots");

    for (int round = 0; round < 400; round++) {
        size_t n = 2 + gsl_rng_uniform_int(random, OCV_POINTS_MAX - 1);
        struct ocv ocv = any_table(random, n, 0.2);
        double before = ocv.voltage_V[0];

        for (size_t i = 0; i + 1 < n; i++)
            for (int part = 0; part <= 16; part++) {
                double z = ocv.charge[i] + part / 16.0 * (ocv.charge[i + 1] - ocv.charge[i]);
                double v = ocv_voltage(&ocv, z), ulp = 1e-13 * ocv.voltage_V[n - 1];

                assert_true(ocv_slope(&ocv, z) >= 0.0);
                assert_true(v >= before - ulp);
                assert_true(v >= ocv.voltage_V[i] - ulp && v <= ocv.voltage_V[i + 1] + ulp);
                before = v;
            }
    }
}

static void slope_is_the_derivative(void **state) {
    (void)state;
    scoped(seeded_free_p) gsl_rng *random = seeded_new("slope_is_the_derivative");

    for (int round = 0; round < 400; round++) {
        struct ocv ocv = any_table(random, 2 + gsl_rng_uniform_int(random, 30), 0.2);
        size_t i = gsl_rng_uniform_int(random, ocv.n - 1);
        double width = ocv.charge[i + 1] - ocv.charge[i], h = 1e-4 * width;
        double z = ocv.charge[i] + width * (0.01 + 0.98 * gsl_rng_uniform(random));
        double difference = (ocv_voltage(&ocv, z + h) - ocv_voltage(&ocv, z - h)) / (2.0 * h);

        near("slope", ocv_slope(&ocv, z) * width, difference * width,
             1e-7 * (ocv.voltage_V[i + 1] - ocv.voltage_V[i]) + 1e-10);
    }
}

static void inverse_undoes_value(void **state) {
    (void)state;
    scoped(seeded_free_p) gsl_rng *random = seeded_new("inverse_undoes_value");

    for (int round = 0; round < 2000; round++) {
        struct ocv ocv = any_table(random, 2 + gsl_rng_uniform_int(random, 60), 0.0);
        double z = gsl_rng_uniform(random), v = ocv_voltage(&ocv, z), back = ocv_charge(&ocv, v);

        /* the voltage to its last bits; the charge as sharply as the slope allows */
        near("voltage", ocv_voltage(&ocv, back), v, 1e-13 * ocv.voltage_V[ocv.n - 1]);
        near("charge", back, z, 1e-9 + 1e-12 / fmax(ocv_slope(&ocv, z), 1e-12));
        assert_true(ocv_charge(&ocv, v + 1e-6) >= back);
    }
}

/* ---- published curves -------------------------------------------------------------------------
 */

static size_t read_curve(const char *path, double *charge, double *voltage_V) {
    scoped(fclose_p) FILE *file = fopen(path, "re");
    char line[512];
    size_t n = 0;

    assert_non_null(file);
    while (fgets(line, sizeof(line), file) && n < OCV_POINTS_MAX)
        if (sscanf(line, "%lf,%lf", &charge[n], &voltage_V[n]) == 2)
            n++;
    return n;
}

static void there_and_back(const char *path) {
    double charge[OCV_POINTS_MAX], voltage_V[OCV_POINTS_MAX];
    size_t n = read_curve(path, charge, voltage_V);
    struct ocv ocv;

    /* on the plateau of an iron phosphate cell the measured voltage dips by its noise */
    if (ocv_init(&ocv, charge, voltage_V, n) == OCV_E_ORDER)
        for (size_t i = 1; i < n; i++) {
            assert_true(voltage_V[i] > voltage_V[i - 1] - 0.005);
            voltage_V[i] = fmax(voltage_V[i], voltage_V[i - 1]);
        }
    if (n < 2 || ocv_init(&ocv, charge, voltage_V, n))
        fail_msg("%s: %zu points that are no curve", path, n);
    for (int i = 0; i <= 1000; i++) {
        double z = charge[0] + i / 1000.0 * (charge[n - 1] - charge[0]), v = ocv_voltage(&ocv, z);
        double back = ocv_charge(&ocv, v);

        near(path, ocv_voltage(&ocv, back), v, 1e-12);
        if (ocv_slope(&ocv, z) > 0.001)
            near(path, back, z, 1e-9);
    }
}

static void published_curves(void **state) {
    (void)state;
    const char *roots[] = {getenv("BRINK_SHARED"), "../shared", "/work/shared"};
    glob_t files = {0};

    for (size_t i = 0; i < COUNT(roots) && files.gl_pathc == 0; i++) {
        char pattern[512];

        if (!roots[i])
            continue;
        (void)snprintf(pattern, sizeof(pattern), "%s/data/tables/ocv_model/*.csv", roots[i]);
        (void)glob(pattern, 0, NULL, &files);
        (void)snprintf(pattern, sizeof(pattern), "%s/data/tables/ocv_measured/*[0-9n].csv",
                       roots[i]);
        (void)glob(pattern, GLOB_APPEND, NULL, &files);
    }
    if (files.gl_pathc == 0) {
        printf("skip: published curves: no data/tables in BRINK_SHARED or ../shared\n");
        skip();
    }
    for (size_t i = 0; i < files.gl_pathc; i++)
        there_and_back(files.gl_pathv[i]);
    printf("%zu published curves there and back\n", files.gl_pathc);
    globfree(&files);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(same_as_scipy),
        cmocka_unit_test(published_data_set),
        cmocka_unit_test(plateau),
        cmocka_unit_test(flat_step_of_a_published_table),
        cmocka_unit_test(flat_at_the_ends),
        cmocka_unit_test(beyond_the_table),
        cmocka_unit_test(unknown_stays_unknown),
        cmocka_unit_test(bad_tables),
        cmocka_unit_test(never_falls_never_overshoots),
        cmocka_unit_test(slope_is_the_derivative),
        cmocka_unit_test(inverse_undoes_value),
        cmocka_unit_test(published_curves),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
