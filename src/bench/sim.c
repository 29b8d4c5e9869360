/* The simulated unit: what happens in one period, and the line that tells of it. */
#include "bench/sim.h"

#include "util/crc8.h"
#include "util/real.h"
#include "util/text.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

static const double STEP_MAX_S = 1.0; /* longer periods are simulated in steps of this */

/* A 5 V converter that droops with its load, and an adapter that sits a little above it. */
static const double RAIL_PACK_V = 5.0, RAIL_DROOP_V_W = 0.006, RAIL_ADAPTER_V = 5.2;

/* ---- life ------------------------------------------------------------------------------------ */

static bool config_good(const struct sim_config *c) {
    bool good = c->n_packs >= 1 && c->n_packs <= PACKS_MAX && c->n_plugs <= SIM_PLUGS_MAX &&
                c->period_s > 0.0 && c->idle_W >= 0.0 && c->burst_W >= 0.0 && c->bits >= 0 &&
                c->bits <= 24 && c->reference_V > 0.0 && c->noise_V >= 0.0 &&
                c->burst_every_s >= 0.0 && c->burst_for_s >= 0.0 && c->jitter >= 0.0;

    for (size_t k = 0; good && k < c->n_packs; k++)
        good = c->charge[k] >= 0.0 && c->charge[k] <= 1.0 && c->cell[k].series == c->cell[0].series;
    return good;
}

static void plan_burst(struct sim *sim, double after_s) {
    const struct sim_config *c = &sim->config;
    double late_s = random_unit(&sim->load_random) * c->jitter * c->burst_every_s;

    sim->burst_from_s = after_s + c->burst_every_s + late_s;
    sim->burst_to_s = sim->burst_from_s + c->burst_for_s;
}

int sim_init(struct sim *ret, const struct sim_config *config) {
    if (!config_good(config))
        return SIM_E_CONFIG;
    *ret = (struct sim){.config = *config,
                        .load_random = random_start(config->seed, 0),
                        .noise_random = random_start(config->seed, 1),
                        .fault_random = random_start(config->seed, 2)};
    for (size_t k = 0; k < config->n_packs; k++) {
        ret->pack[k].state.charge = config->charge[k];
        ret->pack[k].taken_Ah = (1.0 - config->charge[k]) * config->cell[k].capacity_Ah;
    }
    plan_burst(ret, 0.0);
    return 0;
}

/* ---- power ----------------------------------------------------------------------------------- */

static double load_at(struct sim *sim, double time_s) {
    const struct sim_config *c = &sim->config;

    if (!(c->burst_every_s > 0.0))
        return c->idle_W;
    if (time_s >= sim->burst_to_s)
        plan_burst(sim, sim->burst_from_s);
    return time_s >= sim->burst_from_s && time_s < sim->burst_to_s ? c->burst_W : c->idle_W;
}

static double adapter_at(const struct sim_config *c, double time_s) {
    double power_W = 0.0;

    for (size_t i = 0; i < c->n_plugs; i++)
        if (time_s >= c->plug[i].at_s && time_s < c->plug[i].at_s + c->plug[i].for_s)
            power_W = fmax(power_W, c->plug[i].power_W);
    return power_W;
}

static size_t highest_outside(const double *source_V, const bool *in, size_t n) {
    size_t top = n;

    for (size_t k = 0; k < n; k++)
        if (!in[k] && (top == n || source_V[k] > source_V[top]))
            top = k;
    return top;
}

/* Ideal diodes: packs join from the highest source voltage down until none that stands outside is
 * above the common voltage; those inside are one source behind one resistance. */
static int carry(struct sim *sim, const double *source_V, const double *ohm, double power_W) {
    const struct cell *cell = &sim->config.cell[0];
    double conductance = 0.0, weighted = 0.0, voltage_V = UNKNOWN, current_A;
    bool in[PACKS_MAX] = {false};
    size_t n = sim->config.n_packs;

    for (size_t joined = 0; joined < n; joined++) {
        size_t top = highest_outside(source_V, in, n);

        if (voltage_V >= source_V[top])
            break;
        in[top] = true;
        conductance += 1.0 / ohm[top];
        weighted += source_V[top] / ohm[top];
        if (cell_solve_power(weighted / conductance, 1.0 / conductance, power_W, &voltage_V,
                             &current_A))
            voltage_V = UNKNOWN; /* these alone cannot give it */
    }
    if (!(voltage_V >= cell->table.damage_V * cell->series))
        return SIM_E_SPENT;
    for (size_t k = 0; k < n; k++) {
        sim->pack[k].current_A = in[k] ? (source_V[k] - voltage_V) / ohm[k] : 0.0;
        sim->pack[k].voltage_V = in[k] ? voltage_V : source_V[k];
    }
    return 0;
}

/* Each pack takes its share of the power by capacity, and less once it has the voltage of a full
 * pack at rest, so that it fills up to 100 % of the table. */
static void take_in(struct sim *sim, const double *source_V, const double *ohm, double power_W) {
    double all_Ah = 0.0;

    for (size_t k = 0; k < sim->config.n_packs; k++)
        all_Ah += sim->config.cell[k].capacity_Ah;
    for (size_t k = 0; k < sim->config.n_packs; k++) {
        const struct cell *cell = &sim->config.cell[k];
        struct sim_pack *pack = &sim->pack[k];
        double rest_V = fmin(cell->table.full_V, ocv_voltage(&cell->table.ocv, 1.0));
        double full_V = fmax(rest_V * cell->series, source_V[k]);

        cell_solve_power(source_V[k], ohm[k], -power_W * cell->capacity_Ah / all_Ah,
                         &pack->voltage_V, &pack->current_A);
        if (pack->voltage_V > full_V) {
            pack->voltage_V = full_V;
            pack->current_A = (source_V[k] - full_V) / ohm[k];
        }
    }
}

static int flow(struct sim *sim, double time_s, double dt_s) {
    const struct sim_config *c = &sim->config;
    struct cell_point point[PACKS_MAX];
    double source_V[PACKS_MAX] = {0.0}, ohm[PACKS_MAX] = {0.0};

    sim->load_W = load_at(sim, time_s);
    sim->adapter_W = adapter_at(c, time_s);
    for (size_t k = 0; k < c->n_packs; k++) {
        cell_at(&c->cell[k], sim->pack[k].state.charge, c->temp_C, &point[k]);
        source_V[k] = cell_source_V(&point[k], &sim->pack[k].state);
        ohm[k] = point[k].r0_ohm;
    }
    if (sim->adapter_W >= sim->load_W && sim->adapter_W > 0.0)
        take_in(sim, source_V, ohm, sim->adapter_W - sim->load_W);
    else if (carry(sim, source_V, ohm, sim->load_W - sim->adapter_W))
        return SIM_E_SPENT;
    for (size_t k = 0; k < c->n_packs && dt_s > 0.0; k++) {
        cell_step(&c->cell[k], &sim->pack[k].state, &point[k], sim->pack[k].current_A, dt_s);
        sim->pack[k].taken_Ah += sim->pack[k].current_A * dt_s / 3600.0;
    }
    return 0;
}

static double measure(struct sim *sim, double voltage_V) {
    const struct sim_config *c = &sim->config;
    double seen_V =
        voltage_V * c->gain + c->offset_V + c->noise_V * random_normal(&sim->noise_random);
    double steps = ldexp(1.0, c->bits);

    if (c->bits == 0)
        return seen_V;
    return fmin(fmax(floor(seen_V / c->reference_V * steps), 0.0), steps - 1.0) * c->reference_V /
           steps;
}

int sim_step(struct sim *sim) {
    const struct sim_config *c = &sim->config;
    double now_s = (double)sim->step * c->period_s;
    double parts = ceil(c->period_s / STEP_MAX_S), dt_s = c->period_s / parts;

    for (double i = 0.0; sim->step > 0 && i < parts; i++)
        if (flow(sim, now_s - c->period_s + i * dt_s, dt_s))
            return SIM_E_SPENT;
    if (flow(sim, now_s, 0.0))
        return SIM_E_SPENT;
    sim->step++;
    sim->time_s = now_s;
    sim->rail_V =
        sim->adapter_W > 0.0 ? RAIL_ADAPTER_V : RAIL_PACK_V - RAIL_DROOP_V_W * sim->load_W;
    for (size_t k = 0; k < c->n_packs; k++)
        sim->pack[k].told_V = measure(sim, sim->pack[k].voltage_V);
    return 0;
}

/* ---- lines ----------------------------------------------------------------------------------- */

static void add_pack(const struct sim *sim, size_t k, char *line, size_t *length) {
    static const char *const suffixes[PACKS_MAX] = {"", "2", "3", "4"};
    const char *suffix = suffixes[k];

    text_append(line, SIM_LINE_MAX, length, " v%s=%.4f", suffix, sim->pack[k].told_V);
    if (sim->config.tell_current)
        text_append(line, SIM_LINE_MAX, length, " i%s=%.4f", suffix, sim->pack[k].current_A);
}

static size_t good_line(const struct sim *sim, char *line) {
    size_t length = 0;

    text_append(line, SIM_LINE_MAX, &length, "t=%.3f", sim->time_s);
    for (size_t k = 0; k < sim->config.n_packs; k++)
        add_pack(sim, k, line, &length);
    text_append(line, SIM_LINE_MAX, &length, " c=%.1f r=%.3f ext=%d", sim->config.temp_C,
                sim->rail_V, sim->adapter_W > 0.0);
    if (sim->config.check)
        text_append(line, SIM_LINE_MAX, &length, "*%02x", crc8(line, length));
    text_append(line, SIM_LINE_MAX, &length, "\n");
    return length;
}

static int draw(struct sim *sim, int least, int most) {
    return least + (int)(random_unit(&sim->fault_random) * (most - least + 1));
}

/* Random bytes before the line, NUL and newline among them. */
static size_t fault_rubbish(struct sim *sim, char *line, size_t length) {
    size_t n = (size_t)draw(sim, 1, 60);

    memmove(line + n, line, length);
    for (size_t i = 0; i < n; i++)
        line[i] = (char)(random_next(&sim->fault_random) & 0xff);
    return n + length;
}

/* The line breaks off, its end is lost. */
static size_t fault_half(struct sim *sim, char *line, size_t length) {
    (void)line;
    return (size_t)draw(sim, 1, (int)length - 1);
}

static size_t fault_gap(struct sim *sim, char *line, size_t length) {
    (void)line, (void)length;
    sim->gap = draw(sim, 1, 20);
    return 0;
}

static size_t fault_repeat(struct sim *sim, char *line, size_t length) {
    memcpy(sim->last, line, length);
    sim->last_length = length;
    sim->repeats = draw(sim, 1, 20);
    return length;
}

/* A wire came off for one reading. */
static size_t fault_wire(struct sim *sim, char *line, size_t length) {
    (void)length;
    length = (size_t)snprintf(line, SIM_LINE_MAX, "t=%.3f v=0.0000", sim->time_s);
    if (sim->config.check)
        text_append(line, SIM_LINE_MAX, &length, "*%02x", crc8(line, length));
    text_append(line, SIM_LINE_MAX, &length, "\n");
    return length;
}

static size_t (*const faults[])(struct sim *, char *, size_t) = {
    fault_rubbish, fault_half, fault_gap, fault_repeat, fault_wire};
enum { FAULTS = sizeof faults / sizeof *faults, FAULT_ONE_IN = 50 };

size_t sim_tell(struct sim *sim, char ret[SIM_LINE_MAX]) {
    size_t length = good_line(sim, ret);

    if (!sim->config.faults)
        return length;
    if (sim->gap > 0) {
        sim->gap--;
        return 0;
    }
    if (sim->repeats > 0) {
        sim->repeats--;
        memcpy(ret, sim->last, sim->last_length);
        return sim->last_length;
    }
    if (draw(sim, 1, FAULT_ONE_IN) > 1)
        return length;
    return faults[draw(sim, 0, FAULTS - 1)](sim, ret, length);
}
