/* The cell tables that are shipped (conf/cells): each loads, and says of its cell what is published
 * about such cells. Run from the root of the repository. */
#include "core/cell.h"
#include "decode/celltable.h"
#include "decode/inifile.h"
#include "util/cleanup.h"
#include "util/files.h"

#include <glob.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

#define COUNT(array) (sizeof(array) / sizeof(*(array)))

static void between(const char *name, const char *what, double got, double low, double high) {
    if (!(got >= low && got <= high))
        fail_msg("%s: %s is %g, not between %g and %g", name, what, got, low, high);
}

static struct cell_table shipped(const char *name) {
    struct cell_table table;
    char path[256], message[512] = "";

    (void)snprintf(path, sizeof(path), "conf/cells/%s.ini", name);
    if (celltable_load(path, &table, message, sizeof(message)))
        fail_msg("%s", message);
    return table;
}

/* Calls check for every file in conf/cells. */
static void for_each(void (*check)(const char *path, const char *name)) {
    glob_t files = {0};

    assert_int_equal(glob("conf/cells/*.ini", 0, NULL, &files), 0);
    assert_true(files.gl_pathc >= 6);
    for (size_t i = 0; i < files.gl_pathc; i++) {
        char name[CELL_NAME_MAX];
        const char *base = strrchr(files.gl_pathv[i], '/') + 1;

        (void)snprintf(name, sizeof(name), "%.*s", (int)(strlen(base) - strlen(".ini")), base);
        check(files.gl_pathv[i], name);
    }
    globfree(&files);
}

static void loads_under_its_name(const char *path, const char *name) {
    struct cell_table table = shipped(name);
    struct cell cell;
    const char *what = "";

    (void)path;
    assert_string_equal(table.name, name);
    assert_int_equal(cell_table_check(&table, &what), 0);
    assert_int_equal(cell_init(&cell, &table, 1, table.capacity_Ah), 0);
    assert_int_equal(cell_init(&cell, &table, 4, 0.1 * table.capacity_Ah), 0);
}

static void all_load(void **state) {
    (void)state;
    for_each(loads_under_its_name);
}

static void has_source_and_licence(const char *path, const char *name) {
    static const char *const free_ones[] = {"CC BY 4.0", "MIT", "Apache-2.0", "BSD-3-Clause"};
    struct inifile *ini = NULL;
    const struct inifile_entry *source, *licence;
    char message[512] = "";
    bool known = false;

    assert_int_equal(inifile_load(&ini, path, message, sizeof(message)), 0);
    source = inifile_find(ini, "cell", "source");
    licence = inifile_find(ini, "cell", "licence");
    if (!source || !licence || strlen(source->value) < 10)
        fail_msg("%s: no source or no licence", name);
    for (size_t i = 0; i < COUNT(free_ones); i++)
        known = known || !strncmp(licence->value, free_ones[i], strlen(free_ones[i]));
    if (!known || strstr(licence->value, "SA"))
        fail_msg("%s: licence %s", name, licence->value);
    inifile_free(ini);
}

static void all_are_free(void **state) {
    (void)state;
    for_each(has_source_and_licence);
}

/* Specifications of li-ion cells: full at 4.20 +- 0.05 V, empty at 2.50 to 2.75 V, sensible cut-off
 * 3.0 V; of LiFePO4 cells: 3.60 to 3.65 V and 2.0 to 2.5 V (REFERENCES.md section 3.1, read). */
static void limits_as_published(const char *path, const char *name) {
    struct cell_table t = shipped(name);

    (void)path;
    if (!strcmp(t.chemistry, "li-ion")) {
        between(name, "full", t.full_V, 4.15, 4.25);
        between(name, "damage", t.damage_V, 2.50, 3.00);
        between(name, "voltage at 100 %", ocv_voltage(&t.ocv, 1.0), 4.15, t.full_V);
        between(name, "voltage at 50 %", ocv_voltage(&t.ocv, 0.5), 3.60, 3.90);
        between(name, "voltage at 0 %", ocv_voltage(&t.ocv, 0.0), 2.45, 3.30);
        between(name, "possible_high", t.possible_high_V, 4.30, 4.50);
    } else {
        assert_string_equal(t.chemistry, "lifepo4");
        between(name, "full", t.full_V, 3.60, 3.65);
        between(name, "damage", t.damage_V, 2.00, 2.50);
        between(name, "possible_high", t.possible_high_V, 3.75, 4.00);
    }
    between(name, "possible_low", t.possible_low_V, 0.5, t.damage_V - 0.5);
    between(name, "spread", t.voltage_sd_V, 0.005, 0.100);
}

static void all_limits(void **state) {
    (void)state;
    for_each(limits_as_published);
}

/* Published resistances: 98 mohm of a 2100 mAh cell at 50 % and 23 to 25 C with the factors 2050,
 * 442, 123, 73 % at -20, 0, 25, 40 C; 673, 294, 100, 77 % of a 1500 mAh cell at -20, 0, 20, 40 C
 * (REFERENCES.md section 3.3, read from kernel tables); that is 0.25 ohm Ah, and activation
 * energies of 33 to 36 kJ/mol; another published set has 20. */
static void resistance_as_published(const char *path, const char *name) {
    struct cell_table t = shipped(name);
    struct cell cell;
    struct cell_point warm, cold, low;

    (void)path;
    assert_int_equal(cell_init(&cell, &t, 1, t.capacity_Ah), 0);
    cell_at(&cell, 0.5, 25.0, &warm);
    cell_at(&cell, 0.5, 0.0, &cold);
    cell_at(&cell, 0.05, 25.0, &low);
    between(name, "ohm Ah", (warm.r0_ohm + warm.r1_ohm + warm.r2_ohm) * t.capacity_Ah, 0.05, 0.40);
    between(name, "R0 in ohm Ah", warm.r0_ohm * t.capacity_Ah, 0.02, 0.20);
    between(name, "0 C against 25 C", cold.r0_ohm / warm.r0_ohm, 2.0, 3.9);
    between(name, "5 % against 50 %",
            (low.r0_ohm + low.r1_ohm + low.r2_ohm) / (warm.r0_ohm + warm.r1_ohm + warm.r2_ohm), 0.9,
            6.0);
    between(name, "tau1", t.tau1_s, 5.0, 30.0);
    between(name, "tau2", t.tau2_s, 150.0, 1200.0);
}

static void all_resistances(void **state) {
    (void)state;
    for_each(resistance_as_published);
}

struct point {
    double charge, voltage_V;
};

static void close_to(const char *name, const struct point *known, size_t n, double most_V) {
    struct cell_table t = shipped(name);

    for (size_t i = 0; i < n; i++)
        between(name, "distance from a published curve",
                fabs(ocv_voltage(&t.ocv, known[i].charge) - known[i].voltage_V), 0.0, most_V);
}

/* The same chemistry in other hands: C.-H. Chen et al. 2020, J. Electrochem. Soc. 167 080534, and
 * the LFP curve with parameters of E. Prada et al. 2013 (REFERENCES.md section 3.2, read). Cells of
 * a kind differ by tens of millivolts, and by more at the steep end, whose place on the charge axis
 * is a matter of where 0 % was drawn. */
static void like_published_curves(void **state) {
    (void)state;
    static const struct point nmc[] = {{0.2, 3.494}, {0.3, 3.591}, {0.4, 3.673},
                                       {0.5, 3.757}, {0.6, 3.845}, {0.7, 3.952},
                                       {0.8, 4.045}, {0.9, 4.097}, {1.0, 4.200}};
    static const struct point lfp[] = {{0.1, 3.221}, {0.2, 3.256}, {0.3, 3.261},
                                       {0.4, 3.263}, {0.5, 3.271}, {0.6, 3.302},
                                       {0.7, 3.310}, {0.8, 3.312}, {0.9, 3.314}};
    struct cell_table t = shipped("lfp");

    close_to("nmc811-21700", nmc, COUNT(nmc), 0.060);
    close_to("nmc-18650", nmc, COUNT(nmc), 0.060);
    close_to("lfp", lfp, COUNT(lfp), 0.040);
    /* the plateau is flat, and the table says so */
    between("lfp", "rise from 30 to 90 %", ocv_voltage(&t.ocv, 0.9) - ocv_voltage(&t.ocv, 0.3),
            0.02, 0.10);
}

/* The rested points of the pulse test at 25 C of the very cell (P. Kollmeyer 2018; charge on the
 * scale of 2.8881 Ah). */
static void nca_at_rest(void **state) {
    (void)state;
    static const struct point rested[] = {
        {1.0 - 2.4651 / 2.8881, 3.3907}, {1.0 - 2.0301 / 2.8881, 3.5499},
        {1.0 - 1.4501 / 2.8881, 3.6635}, {1.0 - 0.8700 / 2.8881, 3.8623},
        {1.0 - 0.2900 / 2.8881, 4.0585}, {1.0, 4.1750}};

    close_to("nca-18650", rested, COUNT(rested), 0.012);
}

/* The generic table's spread is honest: the kinds it stands for lie within it, in the mean. */
static void generic_spread_is_honest(void **state) {
    (void)state;
    static const char *const kinds[] = {"nca-18650", "nmc-18650", "nmc811-21700", "lipo-pouch"};
    struct cell_table generic = shipped("generic-li-ion");
    double sum = 0.0;

    for (size_t k = 0; k < COUNT(kinds); k++) {
        struct cell_table t = shipped(kinds[k]);

        for (int i = 20; i <= 100; i++) {
            double off_V = ocv_voltage(&t.ocv, i / 100.0) - ocv_voltage(&generic.ocv, i / 100.0);

            sum += off_V * off_V / (81.0 * COUNT(kinds));
            between(kinds[k], "in spreads of generic-li-ion", fabs(off_V) / generic.voltage_sd_V,
                    0.0, 4.0);
        }
        assert_true(generic.voltage_sd_V > t.voltage_sd_V);
        assert_true(generic.damage_V >= t.damage_V);
    }
    between("generic-li-ion", "rms distance", sqrt(sum) / generic.voltage_sd_V, 0.3, 1.2);
}

/* The example of brink-cells(5) is a table. */
static void example_of_the_manual(void **state) {
    (void)state;
    scoped(free_p) char *page = NULL;
    const char *begin, *end;
    struct cell_table table;
    char message[512] = "";
    size_t length;

    assert_int_equal(files_read("man/brink-cells.5", 65536, &page, &length), 0);
    begin = strstr(page, ".Sh EXAMPLES\n.Bd -literal\n");
    assert_non_null(begin);
    begin = strchr(strchr(begin, '\n') + 1, '\n') + 1;
    end = strstr(begin, ".Ed\n");
    assert_non_null(end);
    if (celltable_parse(begin, (size_t)(end - begin), "example", &table, message, sizeof(message)))
        fail_msg("%s", message);
    assert_int_equal(table.ocv.n, 12);
    assert_int_equal(table.n_res, 4);
}

/* Every shipped table stands in brink-cells(5). */
static void is_in_the_manual(const char *path, const char *name) {
    scoped(free_p) char *page = NULL;
    char item[64];
    size_t length;

    (void)path;
    (void)snprintf(item, sizeof(item), "\n.It %s\n", name);
    assert_int_equal(files_read("man/brink-cells.5", 65536, &page, &length), 0);
    if (!strstr(page, item))
        fail_msg("%s is not named in man/brink-cells.5", name);
}

static void all_in_the_manual(void **state) {
    (void)state;
    for_each(is_in_the_manual);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(all_load),
        cmocka_unit_test(all_are_free),
        cmocka_unit_test(all_limits),
        cmocka_unit_test(all_resistances),
        cmocka_unit_test(nca_at_rest),
        cmocka_unit_test(like_published_curves),
        cmocka_unit_test(generic_spread_is_honest),
        cmocka_unit_test(example_of_the_manual),
        cmocka_unit_test(all_in_the_manual),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
