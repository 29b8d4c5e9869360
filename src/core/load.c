/* See load.h. */
#include "core/load.h"

#include "util/real.h"

#include <math.h>

static const double BLOCK_S = 300.0;
static const double LONGEST_S = 4.0 * 3600.0; /* what lies further back fades */
static const double VAR_S = 600.0;            /* what is assumed of the blocks' spread is worth */
static const double VAR_SHARE = 0.15;         /* that, as a share of the typical load */
static const double LEAST_SHARE = 0.08;       /* blocks differ by so much at least */
static const double SLACK = 0.5, ALARM = 5.0; /* of Page's sums: half the shift sought; usual */
static const double BOUT_BLOCKS = 3.0;        /* neighbours are alike: so many count as one */
static const double BURST_S = 2.0 * 3600.0;   /* how long a burst is remembered */
static const double TRUST_SHARE = 0.3;        /* a power so well known counts half */
static const double LEAST_WEIGHT_S = 1.0;
static const double IDLE_SHARE = 0.05; /* of the typical load: an idle one is known so well */
static const double SURE_SHARE = 0.05; /* better than that no mean is known */

static double square(double x) {
    return x * x;
}

void load_init(struct load *load, double mean_W, double weight_s, double typical_W) {
    *load = (struct load){.mean_W = mean_W,
                          .weight_s = weight_s,
                          .typical_W = typical_W,
                          .before_W = {-ENDLESS, -ENDLESS},
                          .drawn_W = UNKNOWN,
                          .peak_W = -ENDLESS,
                          .block_var_W2 = square(VAR_SHARE * typical_W)};
}

static double block_sd_W(const struct load *load) {
    return fmax(sqrt(load->block_var_W2), LEAST_SHARE * fabs(load->mean_W));
}

/* One of Page's sums goes on by a block that lies so many spreads out. */
static double counted(double sum, double step) {
    return fmax(sum + step - SLACK, 0.0);
}

/* After a change the newest block says most: the change may lie within the one before, and an
 * estimate from voltage alone comes after it slowly. */
static void begin_anew(struct load *load, double block_W) {
    load->mean_W = block_W;
    load->weight_s = fmax(0.5 * load->trusted_s, LEAST_WEIGHT_S);
    load->up = load->down = 0.0;
}

/* No longer than it takes to know the mean well, so that a steady load is followed as it drifts. */
static double memory_s(const struct load *load) {
    double blocks = load->block_var_W2 / square(SURE_SHARE * load->mean_W);

    return fmin(fmax(blocks, 1.0) * BLOCK_S, LONGEST_S);
}

static void close_block(struct load *load) {
    double block_W = load->energy_Ws / load->filled_s, off_W = block_W - load->mean_W;
    double step = off_W / block_sd_W(load);

    load->up = counted(load->up, step);
    load->down = counted(load->down, -step);
    if (load->up > ALARM || load->down > ALARM) {
        begin_anew(load, block_W);
    } else {
        load->block_var_W2 +=
            load->filled_s / (load->filled_s + VAR_S) * (square(off_W) - load->block_var_W2);
        load->mean_W += load->trusted_s / (load->weight_s + load->trusted_s) * off_W;
        load->weight_s = fmin(load->weight_s + load->trusted_s, memory_s(load));
    }
    load->energy_Ws = load->filled_s = load->trusted_s = 0.0;
}

/* What holds for three samples can end the run: the ladder's floor asks for as many. It stands
 * above the drawn power's own mean, because both err alike with the charge, and a step that lasts
 * is none. */
static void note_burst(struct load *load, double drawn_W, double dt_s) {
    double held_W = fmin(drawn_W, fmin(load->before_W[0], load->before_W[1]));

    if (isnan(load->drawn_W))
        load->drawn_W = drawn_W;
    load->drawn_W += (1.0 - exp(-dt_s / BLOCK_S)) * (drawn_W - load->drawn_W);
    load->peak_W = load->drawn_W + (load->peak_W - load->drawn_W) * exp(-dt_s / BURST_S);
    load->peak_W = fmax(load->peak_W, held_W);
    load->before_W[1] = load->before_W[0];
    load->before_W[0] = drawn_W;
}

void load_add(struct load *load, double power_W, double sd_W, double drawn_W, double dt_s) {
    double sure_W = TRUST_SHARE * fmax(fabs(load->mean_W), IDLE_SHARE * load->typical_W);

    load->energy_Ws += power_W * dt_s;
    load->filled_s += dt_s;
    load->trusted_s += dt_s * square(sure_W) / (square(sure_W) + square(sd_W));
    note_burst(load, drawn_W, dt_s);
    if (load->filled_s >= BLOCK_S)
        close_block(load);
}

double load_mean_W(const struct load *load) {
    double block_W = load->filled_s > 0.0 ? load->energy_Ws / load->filled_s : 0.0;

    return (load->mean_W * load->weight_s + block_W * load->trusted_s) /
           (load->weight_s + load->trusted_s);
}

double load_burst_W(const struct load *load) {
    return fmax(load->peak_W - load->drawn_W, 0.0);
}

double load_sd_W(const struct load *load, double horizon_s) {
    double past_s = load->weight_s + load->trusted_s, bout_s = BOUT_BLOCKS * BLOCK_S;
    double share = fmin(bout_s / past_s, 1.0) + fmin(bout_s / horizon_s, 1.0);

    return hypot(sqrt(load->block_var_W2 * share), SURE_SHARE * load->mean_W);
}
