/* The load of the time to come, learned from the power that has been drawn.
 *
 * The mean is taken over blocks of five minutes, the older the longer, up to some hours. A lasting
 * change is found by Page's cumulative sums over the blocks (E. S. Page, "Continuous inspection
 * schemes", Biometrika 41 (1954) 100-115) in units of how much blocks usually differ: the mean then
 * begins anew with the newest block. Bouts that come and go are part of the mean.
 */
#pragma once

struct load {
    double typical_W;
    double mean_W, weight_s;    /* of whole blocks, and how much time it stands for */
    double block_var_W2;        /* of one block around the mean */
    double energy_Ws, filled_s; /* the block that fills */
    double trusted_s;           /* and how much of that counts */
    double before_W[2];         /* drawn at the last samples */
    double drawn_W;             /* the mean of that over a block's time */
    double peak_W;              /* reached by it for three samples; forgotten slowly */
    double up, down;            /* Page's sums, in spreads of a block */
};

/* mean_W: what is known before, worth weight_s > 0 of having seen it. typical_W > 0. */
void load_init(struct load *load, double mean_W, double weight_s, double typical_W);

/* Power drawn for dt_s > 0, its mean known to sd_W; drawn_W: in this very moment. Negative where
 * braking or sun give back. Not while a charger feeds. */
void load_add(struct load *load, double power_W, double sd_W, double drawn_W, double dt_s);

/* Mean of the time to come, and how far the mean over horizon_s > 0 of it may be off (one spread).
 */
double load_mean_W(const struct load *load);

/* What bursts reach above the mean; >= 0. */
double load_burst_W(const struct load *load);
double load_sd_W(const struct load *load, double horizon_s);
