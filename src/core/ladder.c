/* The rules of the ladder; their order and their reasons. See ladder.h. */
#include "core/ladder.h"

#include "util/real.h"

#include <math.h>

/* least is trusted only near the end: a wide start must not order a stop with hours to go. */
static const double KEEP_REACH = 5.0;

static const struct ladder_hold NOT_HELD = {-1, 0};

void ladder_init(struct ladder *ladder, const struct ladder_config *config, int64_t t_boot_us) {
    *ladder = (struct ladder){.config = *config,
                              .stage = STAGE_AMPLE,
                              .stage_since_us = t_boot_us,
                              .cause = CAUSE_NONE,
                              .cause_pack = -1,
                              .reserve = NOT_HELD,
                              .edge = NOT_HELD,
                              .floor = NOT_HELD,
                              .up_from_reserve = NOT_HELD,
                              .up_from_edge = NOT_HELD};
}

void ladder_resume(struct ladder *ladder, enum stage stage, int64_t stage_since_us,
                   enum cause cause) {
    ladder->stage = stage;
    ladder->stage_since_us = stage_since_us;
    ladder->cause = cause;
    if (stage == STAGE_EDGE) /* confirmed then: a daemon in a crash loop leaves, too */
        ladder->edge = (struct ladder_hold){stage_since_us, LADDER_SAMPLES};
}

static double since_s(int64_t then_us, int64_t now_us) {
    return (double)(now_us - then_us) * 1e-6;
}

/* Keeps a hold up to date; true when the condition has held for confirm_s over enough samples.
 * Blind there are no samples to count. */
static bool held(struct ladder_hold *hold, bool condition, const struct ladder_input *in,
                 double confirm_s, int samples) {
    if (!condition) {
        *hold = NOT_HELD;
        return false;
    }
    if (hold->since_us < 0 || hold->since_us > in->t_boot_us)
        *hold = (struct ladder_hold){in->t_boot_us, 0};
    if (in->new_sample)
        hold->samples++;
    return since_s(hold->since_us, in->t_boot_us) >= confirm_s &&
           (in->blind || hold->samples >= samples);
}

static void move(struct ladder *ladder, enum stage stage, enum cause cause, int pack,
                 int64_t t_boot_us) {
    ladder->stage = stage;
    ladder->stage_since_us = t_boot_us;
    ladder->cause = cause;
    ladder->cause_pack = pack;
    ladder->up_from_reserve = ladder->up_from_edge = NOT_HELD;
}

static enum cause reserve_rule(const struct ladder_config *config, const struct ladder_input *in) {
    if (in->charge <= config->reserve_charge)
        return CAUSE_CHARGE;
    if (in->left_s < config->reserve_left_s)
        return CAUSE_LEFT;
    return CAUSE_NONE;
}

/* An adapter that lifts the packs takes the cutoff's sting: nothing is drawn from them. */
static enum cause edge_rule(const struct ladder_config *config, const struct ladder_input *in) {
    if (in->lifted)
        return CAUSE_NONE;
    if (in->cutoff != CAUSE_NONE)
        return in->cutoff;
    if (in->left_least_s < config->keep_s && in->left_s < KEEP_REACH * config->keep_s)
        return CAUSE_KEEP;
    return CAUSE_NONE;
}

/* Above the reserve by the margins. What is not known does not lift the ladder. */
static bool above_reserve(const struct ladder_config *config, const struct ladder_input *in) {
    return in->charge > config->reserve_charge + config->margin_charge &&
           in->left_s >= config->reserve_left_s * (1.0 + config->margin_left);
}

static void step_down(struct ladder *ladder, const struct ladder_input *in) {
    const struct ladder_config *config = &ladder->config;
    enum cause reserve = reserve_rule(config, in), edge = edge_rule(config, in);
    int pack = edge == in->cutoff ? in->cutoff_pack : -1;
    bool to_reserve = held(&ladder->reserve, reserve != CAUSE_NONE || edge != CAUSE_NONE, in,
                           config->confirm_s, LADDER_SAMPLES);
    bool to_edge = held(&ladder->edge, edge != CAUSE_NONE, in, config->confirm_s, LADDER_SAMPLES);

    if (ladder->stage == STAGE_AMPLE && to_reserve)
        move(ladder, STAGE_RESERVE, reserve != CAUSE_NONE ? reserve : edge, pack, in->t_boot_us);
    else if (ladder->stage == STAGE_RESERVE && to_edge)
        move(ladder, STAGE_EDGE, edge, pack, in->t_boot_us);
    else if (ladder->stage == STAGE_EDGE && to_edge &&
             since_s(ladder->stage_since_us, in->t_boot_us) >= config->grace_s)
        move(ladder, STAGE_LEAVING, edge, pack, in->t_boot_us);
}

static void step_up(struct ladder *ladder, const struct ladder_input *in) {
    const struct ladder_config *config = &ladder->config;
    bool saved = in->lifted || (in->clear && edge_rule(config, in) == CAUSE_NONE);
    bool from_edge = held(&ladder->up_from_edge, ladder->stage == STAGE_EDGE && saved, in,
                          config->confirm_s, LADDER_SAMPLES);
    bool from_reserve =
        held(&ladder->up_from_reserve,
             ladder->stage == STAGE_RESERVE && !in->blind && above_reserve(config, in), in,
             config->confirm_s, LADDER_SAMPLES);

    if (from_edge)
        move(ladder, STAGE_RESERVE, reserve_rule(config, in), -1, in->t_boot_us);
    else if (from_reserve)
        move(ladder, STAGE_AMPLE, CAUSE_NONE, -1, in->t_boot_us);
}

enum stage ladder_step(struct ladder *ladder, const struct ladder_input *input) {
    const struct ladder_config *config = &ladder->config;
    bool low = input->under_floor && !input->lifted;
    struct ladder_hold *floor = &ladder->floor;

    if (ladder->stage == STAGE_LEAVING)
        return STAGE_LEAVING;
    /* Between samples nothing new is known of the terminal voltage: the hold only waits. */
    if (input->new_sample &&
        held(floor, low, input, config->floor_confirm_s, config->floor_samples))
        move(ladder, STAGE_LEAVING, CAUSE_FLOOR, input->floor_pack, input->t_boot_us);
    else {
        step_up(ladder, input);
        step_down(ladder, input);
    }
    return ladder->stage;
}

double ladder_grace_left_s(const struct ladder *ladder, int64_t t_boot_us) {
    if (ladder->stage != STAGE_EDGE)
        return UNKNOWN;
    return fmax(ladder->config.grace_s - since_s(ladder->stage_since_us, t_boot_us), 0.0);
}
