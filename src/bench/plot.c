/* SVG by hand: two frames, polylines, ticks. */
#include "bench/plot.h"

#include <math.h>
#include <string.h>

enum { WIDTH = 720, HEIGHT = 760, LEFT = 70, RIGHT = 20, FRAME = 300, GAP = 70, TOP = 40 };

/* One frame: values from low to high upwards, charge 0..1 to the right. */
struct frame {
    double top, low, high, step;
    const char *unit;
    int decimals;
};

static double x_of(double charge) {
    return LEFT + charge * (WIDTH - LEFT - RIGHT);
}

static double y_of(const struct frame *f, double value) {
    return f->top + FRAME - (value - f->low) / (f->high - f->low) * FRAME;
}

/* 1, 2 or 5 times a power of ten, so that about six steps fill the span. */
static double step_for(double span) {
    double ten = pow(10.0, floor(log10(span / 6.0))), share = span / 6.0 / ten;

    return ten * (share < 1.5 ? 1.0 : share < 3.5 ? 2.0 : share < 7.5 ? 5.0 : 10.0);
}

static struct frame frame_for(double top, double low, double high, const char *unit) {
    struct frame f = {.top = top, .unit = unit};

    if (!(high > low))
        high = low + 1.0;
    f.step = step_for(high - low);
    f.low = floor(low / f.step) * f.step;
    f.high = ceil(high / f.step) * f.step;
    f.decimals = f.step < 0.095 ? 2 : f.step < 0.95 ? 1 : 0;
    return f;
}

static void draw_line(FILE *out, double x1, double y1, double x2, double y2) {
    fprintf(out, "<line x1=\"%.1f\" y1=\"%.1f\" x2=\"%.1f\" y2=\"%.1f\" stroke=\"#ccc\"/>\n", x1,
            y1, x2, y2);
}

static void draw_text(FILE *out, double x, double y, const char *anchor, const char *text) {
    fprintf(out, "<text x=\"%.1f\" y=\"%.1f\" text-anchor=\"%s\">", x, y, anchor);
    for (; *text; text++) {
        const char *entity = *text == '<' ? "&lt;" : *text == '&' ? "&amp;" : NULL;

        if (entity)
            fputs(entity, out);
        else
            fputc(*text, out);
    }
    fputs("</text>\n", out);
}

static void draw_frame(FILE *out, const struct frame *f) {
    char text[32];

    for (int k = 0; f->low + k * f->step < f->high + 0.5 * f->step; k++) {
        double value = f->low + k * f->step, y = y_of(f, value);

        draw_line(out, x_of(0.0), y, x_of(1.0), y);
        snprintf(text, sizeof text, "%.*f", f->decimals, value);
        draw_text(out, LEFT - 8, y + 4.0, "end", text);
    }
    for (int pct = 0; pct <= 100; pct += 10) {
        draw_line(out, x_of(pct / 100.0), f->top, x_of(pct / 100.0), f->top + FRAME);
        snprintf(text, sizeof text, "%d", pct);
        draw_text(out, x_of(pct / 100.0), f->top + FRAME + 18, "middle", text);
    }
    draw_text(out, LEFT - 8, f->top - 10, "end", f->unit);
    draw_text(out, x_of(0.5), f->top + FRAME + 38, "middle", "charge in %");
}

static void begin_curve(FILE *out, const char *colour) {
    fprintf(out, "<polyline fill=\"none\" stroke=\"%s\" stroke-width=\"2\" points=\"", colour);
}

static void end_curve(FILE *out, double x, double y, const char *colour, const char *name) {
    fprintf(out, "\"/>\n<text x=\"%.1f\" y=\"%.1f\" fill=\"%s\">%s</text>\n", x, y, colour, name);
}

static void draw_ocv(FILE *out, const struct fit *fit) {
    const struct ocv *ocv = &fit->table.ocv;
    struct frame f = frame_for(TOP, ocv->voltage_V[0], ocv->voltage_V[ocv->n - 1], "V");

    draw_frame(out, &f);
    begin_curve(out, "#0b6");
    for (int i = 0; i <= 400; i++)
        fprintf(out, "%.1f,%.1f ", x_of(i / 400.0), y_of(&f, ocv_voltage(ocv, i / 400.0)));
    end_curve(out, x_of(0.05), f.top + 20, "#083", "voltage at rest");
    for (size_t i = 0; i < fit->n_rests; i++) {
        const struct fit_rest *rest = &fit->rest[i];

        if (rest->charge >= 0.0 && rest->charge <= 1.0 && rest->voltage_V >= f.low &&
            rest->voltage_V <= f.high)
            fprintf(out,
                    "<circle cx=\"%.1f\" cy=\"%.1f\" r=\"3.5\" fill=\"none\" stroke=\"#000\"/>\n",
                    x_of(rest->charge), y_of(&f, rest->voltage_V));
    }
    if (fit->n_rests)
        draw_text(out, x_of(0.05), f.top + 38, "start", "o  rests of the logs");
}

static void draw_resistances(FILE *out, const struct fit *fit) {
    static const char *const colour[3] = {"#06c", "#c60", "#909"};
    const struct cell_table *t = &fit->table;
    const double *r[3] = {t->r0_ohm, t->r1_ohm, t->r2_ohm};
    struct frame f;
    double most = 0.0;
    char name[64];

    for (size_t k = 0; k < 3; k++)
        for (size_t j = 0; j < t->n_res; j++)
            most = fmax(most, 1000.0 * r[k][j]);
    f = frame_for(TOP + FRAME + GAP, 0.0, most, "mohm");
    draw_frame(out, &f);
    for (size_t k = 0; k < 3; k++) {
        begin_curve(out, colour[k]);
        for (size_t j = 0; j < t->n_res; j++)
            fprintf(out, "%.1f,%.1f ", x_of(t->res_charge[j]), y_of(&f, 1000.0 * r[k][j]));
        if (k == 0)
            snprintf(name, sizeof name, "r0, at %.0f C", t->res_temp_C);
        else
            snprintf(name, sizeof name, "r%zu, %.0f s", k, k == 1 ? t->tau1_s : t->tau2_s);
        end_curve(out, x_of(0.7), f.top + 20 + 18.0 * (double)k, colour[k], name);
    }
}

void plot_fit(const struct fit *fit, FILE *out) {
    fprintf(out,
            "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 %d %d\" width=\"%d\" "
            "height=\"%d\" font-family=\"sans-serif\" font-size=\"13\">\n"
            "<rect width=\"100%%\" height=\"100%%\" fill=\"#fff\"/>\n",
            WIDTH, HEIGHT, WIDTH, HEIGHT);
    draw_text(out, x_of(0.5), TOP - 20, "middle", fit->table.name);
    draw_ocv(out, fit);
    draw_resistances(out, fit);
    fputs("</svg>\n", out);
}
