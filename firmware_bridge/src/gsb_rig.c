#include "gsb_rig.h"

#include <string.h>

#include "gsb_bits.h"
#include "gsb_error.h"
#include "gsb_guard.h"

#define NSEC_PER_US 1000
/* The schedule of ticks follows the clock by this part of what a tick is off. */
#define SCHEDULE_SHARE 8
/* A longer gap between ticks, us, begins the schedule anew. */
#define GAP_MAX_US 2000000000u
#define INTERVAL_MAX_US 1e6f
#define SILENCE_MAX_US 10000000u

/* ---- making one ---- */

static int positive(float value)
{
    return gsb_is_finite(value) && value > 0.0f;
}

static int sound_limits(const struct gsb_cell_limits *limits)
{
    return positive(limits->current_pa) && positive(limits->slew_pa_per_ms) &&
           gsb_is_finite(limits->window_low_mv) && gsb_is_finite(limits->window_high_mv) &&
           limits->window_low_mv < limits->window_high_mv;
}

static int sound(const struct gsb_rig_config *config, const struct gsb_taken *taken,
                 uint32_t count)
{
    uint32_t k;

    if (config->cells < 1 || config->cells > GSB_CELLS_MAX || !taken || count < 2 ||
        (count & (count - 1)))
        return 0;
    if (!(config->interval_us >= 1.0f) || config->interval_us > INTERVAL_MAX_US ||
        config->silence_us < 1 || config->silence_us > SILENCE_MAX_US)
        return 0;
    for (k = 0; k < config->cells; k++)
        if (!sound_limits(&config->cell[k]))
            return 0;
    return 1;
}

static uint32_t interval_nsec(const struct gsb_rig_config *config)
{
    return (uint32_t)(config->interval_us * 1000.0f + 0.5f);
}

/* The silence time-out in ticks, rounded up, and one that may begin just before it. */
static uint32_t ticks_of(const struct gsb_rig_config *config)
{
    uint64_t tick = interval_nsec(config);
    return (uint32_t)((config->silence_us * (uint64_t)NSEC_PER_US + tick - 1) / tick + 1);
}

int gsb_rig_init(struct gsb_rig *rig, const struct gsb_rig_config *config,
                 struct gsb_taken *taken, uint32_t count)
{
    memset(rig, 0, sizeof *rig);
    rig->write_due = 1;
    rig->newest = rig->in_force = rig->lag_us = rig->applied = GSB_NIL;
    if (!sound(config, taken, count)) {
        /* As many zeros as the port was told of, so that it can write them. */
        rig->config.cells = config->cells <= GSB_CELLS_MAX ? config->cells : 1;
        rig->last_error = GSB_ERROR_ARGUMENT;
        return GSB_ERROR_ARGUMENT;
    }
    memcpy(&rig->config, config, sizeof rig->config);
    rig->silence_ticks = ticks_of(config);
    rig->taken = taken;
    rig->taken_mask = count - 1;
    memset(taken, 0, count * sizeof *taken);
    return GSB_OK;
}

/* ---- the output ---- */

static void to_zero(struct gsb_rig *rig)
{
    memset(rig->i_pa, 0, sizeof rig->i_pa);
    rig->waiting = 0;
    rig->write_due = 1;
    rig->shaped = 0;
    rig->applied = rig->in_force = rig->lag_us = GSB_NIL;
    rig->changed_us = rig->now_us;
    rig->valid_from = rig->next_seq;
}

static void enter(struct gsb_rig *rig, enum gsb_state state)
{
    rig->state = (uint8_t)state;
    rig->since_us = rig->now_us;
}

static int fault(struct gsb_rig *rig, int error)
{
    to_zero(rig);
    rig->last_error = error;
    rig->counters.faults++;
    if (error == GSB_ERROR_LINK || error == GSB_ERROR_PROTOCOL || error == GSB_ERROR_PEER ||
        error == GSB_ERROR_GREETING)
        enter(rig, GSB_IDLE);
    return error;
}

/* Let time pass; a clock that goes back is a fault, and its new time is taken for true. */
static int pass(struct gsb_rig *rig, uint64_t now_us)
{
    int back = now_us < rig->now_us;

    rig->now_us = now_us;
    if (!back)
        return GSB_OK;
    rig->since_us = rig->heard_us = rig->changed_us = now_us;
    rig->due_us = now_us;
    rig->due_nsec = 0;
    return fault(rig, GSB_ERROR_CLOCK);
}

/* The currents of an answer, through the guard, on their way to the converter. */
static void apply(struct gsb_rig *rig, const struct gsb_answer *answer, uint32_t t_us)
{
    const struct gsb_rig_config *config = &rig->config;
    uint64_t since_us = rig->now_us - rig->changed_us;
    float span_us = config->interval_us;
    int clipped = 0;
    uint32_t k;

    /* No more than one tick's change, however long ago the last one was. */
    if ((float)since_us < span_us)
        span_us = (float)since_us;
    for (k = 0; k < config->cells; k++) {
        const struct gsb_cell_limits *limits = &config->cell[k];
        float step_pa = limits->slew_pa_per_ms * span_us * 1e-3f;
        if (answer->flags & GSB_LIVE)
            rig->i_pa[k] = gsb_limit_pa(answer->i_pa[k], rig->i_pa[k], limits->current_pa,
                                        step_pa, &clipped);
        else
            rig->i_pa[k] = 0.0f;
    }
    rig->counters.clipped += (uint32_t)clipped;
    rig->changed_us = rig->now_us;
    rig->applied = answer->seq;
    rig->applied_t_us = t_us;
    rig->shaped = !clipped;
    rig->waiting = 0;
    rig->write_due = 1;
}

int gsb_rig_write_due(const struct gsb_rig *rig)
{
    return rig->write_due;
}

const float *gsb_rig_current_pa(const struct gsb_rig *rig)
{
    return rig->i_pa;
}

void gsb_rig_wrote(struct gsb_rig *rig, uint64_t now_us)
{
    int whole = rig->shaped && rig->applied >= 0;

    if (!rig->write_due)
        return;
    rig->write_due = 0;
    rig->in_force = whole ? rig->applied : GSB_NIL;
    rig->lag_us = whole ? (int64_t)(uint32_t)((uint32_t)now_us - rig->applied_t_us) : GSB_NIL;
}

/* ---- states ---- */

int gsb_rig_greet(struct gsb_rig *rig, uint64_t now_us)
{
    int clock = pass(rig, now_us);

    if (!rig->taken)
        return GSB_ERROR_ARGUMENT;
    to_zero(rig);
    enter(rig, GSB_GREETING);
    return clock;
}

int gsb_rig_run(struct gsb_rig *rig, uint64_t now_us)
{
    int clock = pass(rig, now_us);

    if (!rig->taken)
        return GSB_ERROR_ARGUMENT;
    to_zero(rig);
    rig->heard_us = rig->now_us;
    rig->unanswered = 0;
    enter(rig, GSB_RUNNING);
    return clock;
}

int gsb_rig_fault(struct gsb_rig *rig, uint64_t now_us, int error)
{
    pass(rig, now_us);
    return fault(rig, error);
}

int gsb_rig_lose(struct gsb_rig *rig, uint64_t now_us, int error)
{
    gsb_rig_fault(rig, now_us, error);
    enter(rig, GSB_IDLE);
    return error;
}

/* By the clock, or by the ticks where the clock is slower than they are. */
static int silent(const struct gsb_rig *rig)
{
    return rig->now_us - rig->heard_us >= rig->config.silence_us ||
           rig->unanswered > rig->silence_ticks;
}

int gsb_rig_poll(struct gsb_rig *rig, uint64_t now_us)
{
    int clock = pass(rig, now_us);

    if (clock)
        return clock;
    if (rig->state == GSB_RUNNING && silent(rig)) {
        rig->counters.silences++;
        enter(rig, GSB_SILENT);
        return fault(rig, GSB_ERROR_SILENCE);
    }
    if (rig->state == GSB_GREETING && rig->config.greeting_us &&
        rig->now_us - rig->since_us >= rig->config.greeting_us)
        return fault(rig, GSB_ERROR_GREETING);
    return GSB_OK;
}

enum gsb_state gsb_rig_state(const struct gsb_rig *rig)
{
    return (enum gsb_state)rig->state;
}

const char *gsb_state_name(enum gsb_state state)
{
    static const char *const names[] = {"idle", "greeting", "running", "silent"};

    return (unsigned)state < 4 ? names[state] : "?";
}

/* ---- ticks ---- */

/* Move the sample clock on by one tick and by those it has wholly gone past; how many. */
static uint32_t count_ticks(struct gsb_rig *rig)
{
    int64_t interval = interval_nsec(&rig->config), late, nsec, ticks = 1;

    if (!rig->started || rig->now_us > rig->due_us + GAP_MAX_US) {
        rig->started = 1;
        rig->due_us = rig->now_us;
        rig->due_nsec = 0;
    }
    late = (int64_t)(rig->now_us - rig->due_us) * NSEC_PER_US - rig->due_nsec;
    /* Nearest tick: half an interval late belongs to the next one. */
    if (2 * late >= interval)
        ticks += (late + interval / 2) / interval;
    late -= (ticks - 1) * interval;
    nsec = rig->due_nsec + ticks * interval + late / SCHEDULE_SHARE;
    rig->due_us += (uint64_t)(nsec / NSEC_PER_US);
    rig->due_nsec = (uint32_t)(nsec % NSEC_PER_US);
    return (uint32_t)ticks;
}

static int voltages_sound(const struct gsb_rig *rig, const float *v_mv)
{
    const struct gsb_cell_limits *limits = rig->config.cell;
    uint32_t k;

    for (k = 0; k < rig->config.cells; k++)
        if (!gsb_is_finite(v_mv[k]) || v_mv[k] < limits[k].window_low_mv ||
            v_mv[k] > limits[k].window_high_mv)
            return 0;
    return 1;
}

static void take_sample(struct gsb_rig *rig, const float *v_mv, struct gsb_sample *sample)
{
    uint32_t ticks = count_ticks(rig);
    struct gsb_taken *taken;

    rig->counters.skipped += ticks - 1;
    rig->counters.samples++;
    rig->next_seq += ticks;
    sample->seq = rig->next_seq - 1;
    sample->t_us = rig->now_us;
    sample->cells = rig->config.cells;
    memcpy(sample->v_mv, v_mv, sample->cells * sizeof *v_mv);
    taken = &rig->taken[(uint32_t)sample->seq & rig->taken_mask];
    taken->seq = (uint32_t)sample->seq;
    taken->t_us = (uint32_t)rig->now_us;
}

int gsb_rig_tick(struct gsb_rig *rig, uint64_t now_us, const float *v_mv,
                 struct gsb_sample *sample)
{
    /* Before time passes: a silence found now ends a current that flowed until now. */
    int64_t in_force = rig->in_force, lag_us = rig->lag_us;
    int still = rig->started && now_us == rig->ticked_us, outcome;

    if (!rig->taken)
        return GSB_ERROR_ARGUMENT;
    rig->unanswered += rig->unanswered <= rig->silence_ticks;
    outcome = gsb_rig_poll(rig, now_us);
    rig->ticked_us = now_us;
    take_sample(rig, v_mv, sample);
    sample->in_force = in_force;
    sample->lag_us = lag_us;
    if (still)
        return fault(rig, GSB_ERROR_CLOCK);
    if (!voltages_sound(rig, v_mv))
        return fault(rig, GSB_ERROR_VOLTAGE);
    if (rig->waiting && rig->state == GSB_RUNNING)
        apply(rig, &rig->next, rig->next_t_us);
    return outcome;
}

/* ---- answers ---- */

static int all_finite(const struct gsb_answer *answer)
{
    uint32_t k;

    for (k = 0; k < answer->cells; k++)
        if (!gsb_is_finite(answer->i_pa[k]))
            return 0;
    return 1;
}

/* Whether an answer is to a sample from too long ago, by the clock or by the ticks. */
static int stale(const struct gsb_rig *rig, int64_t seq, uint32_t t_us)
{
    return (uint32_t)rig->now_us - t_us >= rig->config.silence_us ||
           rig->next_seq - seq > (int64_t)rig->silence_ticks;
}

/* What an answer is worth: GSB_OK, GSB_IGNORED or an error. */
static int judge(const struct gsb_rig *rig, const struct gsb_answer *answer)
{
    const struct gsb_taken *taken;

    if (answer->seq < 0)
        return GSB_ERROR_REJECTED;
    if (answer->cells != rig->config.cells)
        return GSB_ERROR_MESSAGE;
    if (answer->flags & GSB_LIVE && !all_finite(answer))
        return GSB_ERROR_NOT_FINITE;
    if (answer->seq >= rig->next_seq)
        return GSB_ERROR_SEQUENCE;
    if (answer->seq <= rig->newest || answer->seq < rig->valid_from)
        return GSB_IGNORED;
    if (rig->next_seq - answer->seq > (int64_t)rig->taken_mask + 1)
        return GSB_IGNORED;
    taken = &rig->taken[(uint32_t)answer->seq & rig->taken_mask];
    if (taken->seq != (uint32_t)answer->seq)
        return GSB_ERROR_SEQUENCE; /* of a tick that the clock went past */
    return stale(rig, answer->seq, taken->t_us) ? GSB_IGNORED : GSB_OK;
}

/* Whether any current is on its way out. */
static int flowing(const struct gsb_rig *rig)
{
    uint32_t k;

    for (k = 0; k < rig->config.cells; k++)
        if (rig->i_pa[k] > 0.0f || rig->i_pa[k] < 0.0f)
            return 1;
    return 0;
}

/* Let a valid answer flow, now or from the next tick. */
static void take_answer(struct gsb_rig *rig, const struct gsb_answer *answer)
{
    uint32_t t_us = rig->taken[(uint32_t)answer->seq & rig->taken_mask].t_us;

    rig->counters.answers++;
    rig->counters.overtaken += rig->waiting;
    rig->newest = answer->seq;
    rig->heard_us = rig->now_us;
    rig->unanswered = 0;
    if (rig->state == GSB_SILENT)
        enter(rig, GSB_RUNNING);
    if (rig->config.on_arrival || (!(answer->flags & GSB_LIVE) && flowing(rig))) {
        apply(rig, answer, t_us);
        return;
    }
    memcpy(&rig->next, answer, sizeof rig->next);
    rig->next_t_us = t_us;
    rig->waiting = 1;
}

int gsb_rig_answer(struct gsb_rig *rig, uint64_t now_us, const struct gsb_answer *answer)
{
    int outcome = gsb_rig_poll(rig, now_us), worth;

    if (rig->state != GSB_RUNNING && rig->state != GSB_SILENT)
        return outcome ? outcome : GSB_IGNORED;
    if (outcome == GSB_ERROR_CLOCK)
        return outcome;
    worth = judge(rig, answer);
    if (worth < 0)
        return fault(rig, worth);
    if (worth == GSB_IGNORED) {
        rig->counters.ignored++;
        return outcome ? outcome : worth;
    }
    take_answer(rig, answer);
    return GSB_OK;
}
