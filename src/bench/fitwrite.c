/* The words and the file of a fit. */
#include "bench/fitwrite.h"

#include "util/text.h"

#include <math.h>
#include <string.h>

enum { LINE_MAX_CHARS = 96 };

/* ---- words ----------------------------------------------------------------------------------- */

static const char *const role_words[] = {"slow discharge", "pulses", "load"};

static double mV(double volt) {
    return 1000.0 * volt;
}

static void say_logs(const struct fit *fit, FILE *out, const char *prefix) {
    for (size_t k = 0; k < fit->n_logs; k++) {
        const struct fit_log *log = &fit->log[k];

        fprintf(out, "%s%s: %s, %.0f C%s, %.0f to %.0f %% of charge;\n", prefix, log->name,
                role_words[log->role], round(log->temp_C) + 0.0, log->told_temp ? "" : " assumed",
                100.0 * (k ? log->low : fit->curve.low), 100.0 * (k ? log->high : fit->curve.high));
        fprintf(out, "%s  the table's terminal voltage is %.1f mV RMS off, %+.1f mV in the mean\n",
                prefix, mV(fit->residual[k].rms_V), mV(-fit->residual[k].mean_V));
    }
}

static void say_axis(const struct fit *fit, FILE *out, const char *prefix) {
    for (size_t k = 0; k < fit->n_logs; k++) {
        const struct fit_log *log = &fit->log[k];

        if (log->gain != 1.0)
            fprintf(out,
                    "%s%s took out %.1f %% more than the capacity, so its amp-hours are off;\n"
                    "%s  they were shrunk to it\n",
                    prefix, log->name, 100.0 / log->gain - 100.0, prefix);
        if (!log->told_charge)
            fprintf(out,
                    "%s%s has no charge_Ah: its current was summed up from the charge its first\n"
                    "%s  voltage means on the curve\n",
                    prefix, log->name, prefix);
        if (log->jumps)
            fprintf(out,
                    "%s%s: charge_Ah jumps over %zu gaps; each piece was taken by itself, as\n"
                    "%s  rested at its start\n",
                    prefix, log->name, log->jumps, prefix);
    }
}

static void say_rests(const struct fit *fit, FILE *out, const char *prefix) {
    double low = 1.0, high = 0.0;

    for (size_t i = 0; i < fit->n_rests; i++) {
        low = fmin(low, fit->rest[i].charge);
        high = fmax(high, fit->rest[i].charge);
    }
    if (fit->n_rests == 0)
        fprintf(out,
                "%sno log rests for ten minutes near %.0f C: the curve is the slow discharge with\n"
                "%s  its own sag added back, and that sag is a guess; in the flat parts 10 mV are\n"
                "%s  one to two percent of charge and more\n",
                prefix, fit->temp_C, prefix, prefix);
    else
        fprintf(out,
                "%s%zu rest%s between %.0f and %.0f %% moved the curve; %.1f mV RMS are left\n",
                prefix, fit->n_rests, fit->n_rests == 1 ? "" : "s", 100.0 * low, 100.0 * high,
                mV(fit->rests_rms_V));
    if (fit->n_rests && low > 0.1)
        fprintf(out, "%sno rest under %.0f %%: the end that stops are decided at is not proved\n",
                prefix, 100.0 * low);
}

static void say_range(const struct fit *fit, FILE *out, const char *prefix) {
    double low = fit->res_charge[0], high = fit->res_charge[fit->n_res - 1];

    if (fit->curve.low > 0.02 || fit->curve.high < 0.98)
        fprintf(out,
                "%sthe slow discharge covers %.0f to %.0f %% of charge; beyond, the curve goes on\n"
                "%s  straight, which is a guess\n",
                prefix, 100.0 * fit->curve.low, 100.0 * fit->curve.high, prefix);
    if (low > 0.05 || high < 0.85)
        fprintf(out, "%sresistances are known from %.0f to %.0f %% and held beyond\n", prefix,
                100.0 * low, 100.0 * high);
}

static void say_temperature(const struct fit *fit, FILE *out, const char *prefix) {
    double low_C = fit->log[0].temp_C, high_C = low_C;

    for (size_t k = 1; k < fit->n_logs; k++) {
        low_C = fmin(low_C, fit->log[k].temp_C);
        high_C = fmax(high_C, fit->log[k].temp_C);
    }
    if (fit->activation_told)
        fprintf(out, "%sactivation energy from logs of %.0f to %.0f C; further out is a guess\n",
                prefix, low_C, high_C);
    else
        fprintf(out,
                "%sno second temperature was fitted: the activation energy was given, not found;\n"
                "%s  away from %.0f C the resistances are a guess\n",
                prefix, prefix, fit->temp_C);
}

void fitwrite_words(const struct fit *fit, FILE *out, const char *prefix) {
    fprintf(out, "%scapacity %.4g Ah, tau %.0f and %.0f s, activation energy %.1f kJ/mol\n", prefix,
            fit->table.capacity_Ah, fit->table.tau1_s, fit->table.tau2_s,
            fit->table.arrhenius_J_mol / 1000.0);
    say_logs(fit, out, prefix);
    say_axis(fit, out, prefix);
    say_rests(fit, out, prefix);
    say_range(fit, out, prefix);
    say_temperature(fit, out, prefix);
    fprintf(
        out,
        "%sone cell, as old as it was then: other cells, age and hysteresis were not measured\n",
        prefix);
}

/* ---- the file -------------------------------------------------------------------------------- */

void fitwrite_value(FILE *out, const char *key, const char *words) {
    int column = fprintf(out, "%s =", key);

    while (*(words += strspn(words, " ")) != '\0') {
        size_t length = strcspn(words, " ");

        if (column > 5 && (size_t)column + 1 + length > LINE_MAX_CHARS)
            column = fprintf(out, "\n   ") - 1;
        column += fprintf(out, " %.*s", (int)length, words);
        words += length;
    }
    fputc('\n', out);
}

static void list(FILE *out, const char *key, const double *value, size_t n, double factor,
                 int decimals, const char *unit) {
    char words[4096];
    size_t length = 0;

    words[0] = '\0';
    for (size_t i = 0; i < n; i++) {
        if (decimals >= 0)
            text_append(words, sizeof words, &length, "%.*f ", decimals, factor * value[i]);
        else
            text_append(words, sizeof words, &length, "%.4g ", factor * value[i]);
    }
    text_append(words, sizeof words, &length, "%s", unit);
    fitwrite_value(out, key, words);
}

void fitwrite_table(const struct fit *fit, const char *source, const char *licence, FILE *out) {
    const struct cell_table *t = &fit->table;

    fprintf(out, "# Fitted by brink-bench fit. What the logs told and what they could not:\n#\n");
    fitwrite_words(fit, out, "# ");
    fprintf(out, "\n[cell]\nname = %s\nchemistry = %s\ncapacity = %.4g Ah\n", t->name, t->chemistry,
            t->capacity_Ah);
    fprintf(out, "full = %.2f V\ndamage = %.2f V\npossible_low = %.2f V\npossible_high = %.2f V\n",
            t->full_V, t->damage_V, t->possible_low_V, t->possible_high_V);
    fprintf(out, "spread = %.0f mV\n", mV(t->voltage_sd_V));
    if (source)
        fitwrite_value(out, "source", source);
    if (licence)
        fitwrite_value(out, "licence", licence);
    fprintf(out, "\n[curve]\n");
    list(out, "charge", t->ocv.charge, t->ocv.n, 100.0, -1, "%");
    list(out, "voltage", t->ocv.voltage_V, t->ocv.n, 1.0, 4, "V");
    fprintf(out, "\n[resistance]\n");
    list(out, "charge", t->res_charge, t->n_res, 100.0, -1, "%");
    list(out, "r0", t->r0_ohm, t->n_res, 1000.0, 2, "mohm");
    list(out, "r1", t->r1_ohm, t->n_res, 1000.0, 2, "mohm");
    list(out, "r2", t->r2_ohm, t->n_res, 1000.0, 2, "mohm");
    fprintf(out, "tau1 = %.0f s\ntau2 = %.0f s\ntemperature = %.0f C\nactivation = %.1f kJ/mol\n",
            t->tau1_s, t->tau2_s, t->res_temp_C, t->arrhenius_J_mol / 1000.0);
}
