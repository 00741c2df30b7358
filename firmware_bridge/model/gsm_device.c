/* The tick: sample, step, limit, write. The poll is in gsm_supervision.c. */
#include "gsm_device.h"

#include <string.h>

#include "gsb_guard.h"

/* What a hello says that this device can do (SPEC.md). */
#define FEATURE_MODEL 2u

/* Ticks over which the clock is held against the tick, and by how much they may differ. */
#define SPAN_TICKS 1024u
#define SPAN_SHARE 0.01f

static int fault(struct gsm_device *device, int error)
{
    device->fault = error;
    device->counters.faults++;
    if (device->state == GSM_ARMED) {
        device->state = GSM_TRIPPED;
        device->counters.trips++;
    }
    return error;
}

/* Put the current on the converter; while that fails, 0 pA is tried at every tick. */
static int put(struct gsm_device *device, float i_pa)
{
    if (device->port.write_current_pa(device->port.context, &i_pa, 1u) < 0) {
        device->i_pa = 0.0f;
        device->unwritten = 1u;
        return fault(device, GSB_ERROR_OUTPUT);
    }
    device->i_pa = i_pa;
    device->unwritten = 0u;
    return GSB_OK;
}

int gsm_device_init(struct gsm_device *device, const struct gsm_config *config,
                    const struct gsb_port *port, struct gsb_link *link)
{
    int outcome;

    memset(device, 0, sizeof *device);
    device->port = *port;
    outcome = put(device, 0.0f);
    device->slew_pa = config->slew_pa_per_ms * (config->interval_us * 1e-3f);
    /* Written so that NaN fails. */
    if (!(config->interval_us >= GSM_INTERVAL_US && config->interval_us <= GSM_INTERVAL_US) ||
        !(config->current_pa > 0.0f && gsb_is_finite(config->current_pa)) ||
        !(device->slew_pa > 0.0f && gsb_is_finite(device->slew_pa)) ||
        !(config->window_low_mv >= GSM_LOW_MV && config->window_high_mv <= GSM_HIGH_MV) ||
        !(config->window_low_mv < config->window_high_mv) || config->silence_us > 0x7fffffffu ||
        config->gap_ticks < 1u || !link || link->type != &gsb_serial || link->cells != 1u) {
        return GSB_ERROR_ARGUMENT;
    }
    device->config = *config;
    device->with = gsm_usual;
    device->link = link;
    link->interval_us = config->interval_us;
    link->features = FEATURE_MODEL;
    return outcome;
}

void gsm_device_stop(struct gsm_device *device)
{
    device->releases = device->releases + 1u;
}

static int32_t arm(struct gsm_device *device)
{
    if (device->state == GSM_TRIPPED) {
        return device->fault;
    }
    if (!device->known) {
        return GSB_ERROR_VOLTAGE;
    }
    device->state = GSM_ARMED;
    return GSB_OK;
}

static int32_t set(struct gsm_device *device, uint32_t index, float value)
{
    const uint32_t conductance = index / 2u;
    const int reversal = (index & 1u) != 0u;
    const float most = reversal ? GSM_REVERSAL_MAX_MV : GSM_GMAX_MAX_NS;

    if (index == GSM_PARAMETERS - 1u) {
        if (!(value >= 0.0f && value <= GSM_EVERY_MAX)) {
            return GSB_ERROR_ARGUMENT;
        }
        device->every = (uint32_t)value;
        device->until_trace = 0u;
        return GSB_OK;
    }
    if (index >= GSM_PARAMETERS || !(value >= -most && value <= most)) {
        return GSB_ERROR_ARGUMENT;
    }
    if (reversal) {
        device->with.reversal_mv[conductance] = value;
    } else {
        device->with.gmax_ns[conductance] = value;
    }
    return GSB_OK;
}

/* Carry out what the poll has put there. */
static void obey(struct gsm_device *device)
{
    const struct gsm_order *order = &device->order;

    if (device->released != device->releases) {
        device->released = device->releases;
        if (device->state == GSM_ARMED) {
            device->state = GSM_DISARMED;
        }
    }
    if (device->orders_done == device->orders_put) {
        return;
    }
    if (order->kind == GSB_KIND_PARAMETER) {
        device->order_result = set(device, order->index, order->value);
    } else if (order->kind == GSB_KIND_ARM) {
        /* A stop, or a line that was lost, since it was given is the last word. */
        device->order_result =
            order->releases == device->released ? arm(device) : GSB_ERROR_STOPPED;
    } else {
        device->state = GSM_DISARMED;
        device->order_result = GSB_OK;
    }
    device->orders_done = device->orders_done + 1u;
}

/* Ticks from the last one to this, by the clock; 0 after a fault that the clock shows.
 *
 * A timer that fired while its interrupt was masked fires once, however often it was due,
 * so the ticks are not counted but taken from the clock. The schedule that they are held
 * against follows the clock by an eighth of what it is off, which forgives jitter and the
 * drift of two oscillators; a tick that is not the model's own is found over SPAN_TICKS. */
static uint32_t elapsed(struct gsm_device *device, uint32_t now_us)
{
    const float interval = device->config.interval_us;
    const float since = (float)(now_us - device->clock_us);
    uint32_t ticks = 1u;

    device->t_us += now_us - device->clock_us;
    device->clock_us = now_us;
    if (!device->started) {
        device->started = 1u;
        device->t_us = 0u;
        return 1u;
    }
    device->phase_us += since - interval;
    if (device->phase_us >= 0.5f * interval) {
        /* At most 2^32 us over 5 us: fits. */
        const uint32_t more = (uint32_t)(device->phase_us / interval + 0.5f);

        ticks += more;
        device->phase_us -= (float)more * interval;
    }
    device->phase_us *= 0.875f;
    device->span_us += since;
    device->span_ticks += ticks;
    return ticks;
}

/* Whether the clock bears out the tick that the tables are for. */
static int rate_is_wrong(struct gsm_device *device)
{
    float off, expected;

    if (device->span_ticks < SPAN_TICKS) {
        return 0;
    }
    expected = (float)device->span_ticks * device->config.interval_us;
    off = device->span_us - expected;
    device->span_us = 0.0f;
    device->span_ticks = 0u;
    return off > SPAN_SHARE * expected || -off > SPAN_SHARE * expected;
}

/* The voltage, or the fault that it is. */
static int measure(struct gsm_device *device, float *v_mv)
{
    if (device->port.read_voltage_mv(device->port.context, v_mv, 1u) < 0) {
        return GSB_ERROR_INPUT;
    }
    if (!(*v_mv >= device->config.window_low_mv && *v_mv <= device->config.window_high_mv)) {
        return GSB_ERROR_VOLTAGE;
    }
    return GSB_OK;
}

/* Step the gates over all ticks that they are behind; what the model would inject, pA. */
static float step(struct gsm_device *device, float v_mv)
{
    float i_pa;

    if (device->settled) {
        i_pa = gsm_model_step(&device->gates, &device->with, v_mv, device->owed);
    } else {
        gsm_model_settle(&device->gates, v_mv);
        i_pa = gsm_model_current(&device->gates, &device->with, v_mv);
        device->settled = 1u;
    }
    device->owed = 0u;
    return i_pa;
}

static void trace(struct gsm_device *device, float v_mv)
{
    struct gsm_trace *to = &device->trace[device->traces_put % GSM_TRACES];

    if (device->every == 0u) {
        return;
    }
    if (device->until_trace > 1u) {
        device->until_trace--;
        return;
    }
    device->until_trace = device->every;
    if (device->traces_put - device->traces_sent >= GSM_TRACES) {
        device->counters.traces_lost++;
        return;
    }
    to->seq = device->seq;
    to->t_us = device->t_us;
    to->state = device->state;
    to->v_mv = v_mv;
    to->i_pa = device->i_pa;
    device->traces_put = device->traces_put + 1u;
}

/* Whether the supervisor has been away for too long. The difference is signed: it may have
 * been heard a moment after this tick's clock was read. */
static int alone(const struct gsm_device *device, uint32_t now_us)
{
    const int32_t away_us = (int32_t)(now_us - device->heard_us);

    return device->config.silence_us != 0u && away_us > (int32_t)device->config.silence_us;
}

int gsm_device_tick(struct gsm_device *device)
{
    float v_mv = 0.0f, model_pa = 0.0f, i_pa = 0.0f;
    uint32_t now_us, ticks;
    int found, clipped = 0;

    device->beats = device->beats + 1u;
    if (!device->link) {
        /* Nothing was started, but what the converter was left with must not stay. */
        if (device->port.write_current_pa && put(device, 0.0f) != GSB_OK) {
            return GSB_ERROR_OUTPUT;
        }
        return GSB_ERROR_ARGUMENT;
    }
    now_us = device->port.now_us(device->port.context);
    ticks = elapsed(device, now_us);
    if (device->counters.ticks != 0u) {
        device->seq += ticks;
    }
    device->counters.ticks += ticks;
    device->counters.missed += ticks - 1u;
    device->owed += ticks;
    found = measure(device, &v_mv);
    device->known = found == GSB_OK;
    obey(device);
    if (found == GSB_OK) {
        model_pa = step(device, v_mv);
        if (!gsb_is_finite(model_pa)) {
            found = GSB_ERROR_NOT_FINITE;
        } else if (ticks > device->config.gap_ticks || rate_is_wrong(device)) {
            found = GSB_ERROR_CLOCK;
        }
    }
    if (found != GSB_OK) {
        fault(device, found);
    } else if (device->state == GSM_ARMED && alone(device, now_us)) {
        device->state = GSM_DISARMED;
        found = device->fault = GSB_ERROR_SILENCE;
        device->counters.faults++;
    }
    if (device->state == GSM_ARMED) {
        i_pa = gsb_limit_pa(model_pa, device->i_pa, device->config.current_pa, device->slew_pa,
                            &clipped);
        device->counters.clipped += (uint32_t)clipped;
    }
    if (put(device, i_pa) != GSB_OK) {
        found = GSB_ERROR_OUTPUT;
    }
    trace(device, v_mv);
    return found;
}
