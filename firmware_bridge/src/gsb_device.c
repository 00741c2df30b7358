#include "gsb_device.h"

#include <string.h>

#include "gsb_bits.h"
#include "gsb_error.h"
#include "gsb_guard.h"

enum { CHUNK = 64, CHUNKS = 16 };

/* The port's clock without its wrap. A step of over half its range is one backwards. */
static uint64_t now(struct gsb_device *device)
{
    uint32_t clock_us = device->port.now_us(device->port.context);
    uint32_t step_us = clock_us - device->clock_us;

    device->clock_us = clock_us;
    if (step_us <= UINT32_MAX / 2)
        device->now_us += step_us;
    else if (device->now_us >= 0u - step_us)
        device->now_us -= 0u - step_us;
    else
        device->now_us = 0;
    return device->now_us;
}

/* Bring what the rig has decided to the converter; twice, when the first try makes it 0 pA. */
static int write_out(struct gsb_device *device)
{
    struct gsb_rig *rig = &device->rig;
    const struct gsb_port *port = &device->port;
    int outcome = GSB_OK, tries;

    for (tries = 0; tries < 2 && gsb_rig_write_due(rig); tries++) {
        if (port->write_current_pa(port->context, gsb_rig_current_pa(rig), rig->config.cells) < 0)
            outcome = gsb_rig_fault(rig, now(device), GSB_ERROR_OUTPUT);
        else
            gsb_rig_wrote(rig, now(device));
    }
    return outcome;
}

static int fail(struct gsb_device *device, int error)
{
    gsb_rig_fault(&device->rig, now(device), error);
    write_out(device);
    return error;
}

/* A link that is gone is of no use until the stream is opened anew. */
static void shut(struct gsb_device *device)
{
    device->link.opened = 0;
    device->link.broken = 1;
}

static int lose(struct gsb_device *device, int error)
{
    shut(device);
    gsb_rig_lose(&device->rig, now(device), error);
    write_out(device);
    return error;
}

static int send_out(struct gsb_device *device)
{
    const struct gsb_port *port = &device->port;
    const uint8_t *bytes;
    size_t size = gsb_link_pending(&device->link, &bytes);
    int sent;

    if (!size || device->link.broken)
        return GSB_OK;
    sent = port->send_bytes(port->context, bytes, size);
    if (sent < 0)
        return lose(device, GSB_ERROR_LINK);
    gsb_link_sent(&device->link, (size_t)sent);
    return GSB_OK;
}

int gsb_device_init(struct gsb_device *device, const struct gsb_rig_config *config,
                    const struct gsb_port *port, const struct gsb_link *link,
                    struct gsb_taken *taken, uint32_t count)
{
    int outcome;

    memset(device, 0, sizeof *device);
    memcpy(&device->port, port, sizeof device->port);
    memcpy(&device->link, link, sizeof device->link);
    device->link.opened = 0;
    device->link.broken = 1;
    device->link.interval_us = config->interval_us;
    device->link.features = 1;
    device->clock_us = port->now_us(port->context);
    outcome = gsb_rig_init(&device->rig, config, taken, count);
    if (outcome == GSB_OK && (!link->type || link->cells != config->cells)) {
        device->rig.taken = 0; /* without which a rig stays idle */
        outcome = GSB_ERROR_ARGUMENT;
    }
    if (write_out(device) && outcome == GSB_OK)
        outcome = GSB_ERROR_OUTPUT;
    return outcome;
}

int gsb_device_connect(struct gsb_device *device)
{
    int outcome;

    if (device->stopped) {
        write_out(device);
        return GSB_ERROR_STOPPED;
    }
    outcome = gsb_rig_greet(&device->rig, now(device));
    if (outcome == GSB_OK)
        outcome = gsb_link_open(&device->link);
    device->greeted_us = device->now_us;
    if (outcome)
        return lose(device, outcome);
    outcome = write_out(device);
    return send_out(device) ? GSB_ERROR_LINK : outcome;
}

int gsb_device_stop(struct gsb_device *device)
{
    device->stopped = 1;
    lose(device, GSB_ERROR_STOPPED);
    return gsb_rig_write_due(&device->rig) ? GSB_ERROR_OUTPUT : GSB_OK;
}

void gsb_device_release(struct gsb_device *device)
{
    device->stopped = 0;
}

/* Whether the rig has given up the handshake, of which the link cannot know. */
static int timed_out(const struct gsb_device *device)
{
    return gsb_rig_state(&device->rig) == GSB_IDLE && !device->link.broken;
}

static int send_sample(struct gsb_device *device, const struct gsb_sample *sample)
{
    uint8_t bytes[GSB_MESSAGE_MAX];
    int size = gsb_sample_encode(sample, bytes, sizeof bytes);

    if (size > 0)
        size = gsb_link_put(&device->link, bytes, (size_t)size);
    if (size < 0)
        return fail(device, size);
    return send_out(device);
}

int gsb_device_tick(struct gsb_device *device)
{
    const struct gsb_port *port = &device->port;
    uint32_t k, cells = device->rig.config.cells;
    float v_mv[GSB_CELLS_MAX];
    struct gsb_sample sample;
    int outcome, written, sent = GSB_OK;
    uint64_t taken_us = now(device);
    int read = port->read_voltage_mv(port->context, v_mv, cells);

    for (k = 0; k < cells; k++)
        if (read < 0)
            v_mv[k] = gsb_float_of(GSB_NAN_BITS);
    outcome = gsb_rig_tick(&device->rig, taken_us, v_mv, &sample);
    if (read < 0 && outcome == GSB_ERROR_VOLTAGE) {
        device->rig.last_error = GSB_ERROR_INPUT;
        outcome = GSB_ERROR_INPUT;
    }
    if (timed_out(device))
        shut(device);
    written = write_out(device);
    if (device->link.opened)
        sent = send_sample(device, &sample);
    return sent ? sent : written ? written : outcome;
}

static int heard(struct gsb_device *device)
{
    struct gsb_link *link = &device->link;
    struct gsb_answer answer;
    int outcome = gsb_answer_decode(link->message, link->message_size, link->cells, &answer);

    if (outcome)
        return fail(device, outcome);
    outcome = gsb_rig_answer(&device->rig, now(device), &answer);
    return outcome < 0 ? outcome : GSB_OK;
}

static void tell_control(struct gsb_device *device)
{
    if (device->control && device->link.type == &gsb_serial)
        device->control(device->control_context, device, device->link.kind,
                        device->link.message, device->link.message_size);
}

static int act(struct gsb_device *device, int found)
{
    switch (found) {
    case GSB_NOTHING:
        return GSB_OK;
    case GSB_OPENED:
        tell_control(device);
        return gsb_rig_run(&device->rig, now(device));
    case GSB_CLOSED:
        tell_control(device);
        return gsb_rig_greet(&device->rig, now(device));
    case GSB_CONTROL:
        tell_control(device);
        return GSB_OK;
    case GSB_MESSAGE:
        return heard(device);
    case GSB_ERROR_PEER:
        if (device->link.broken)
            return lose(device, found);
        /* A serial line stays open for a host of the right kind. */
        gsb_rig_fault(&device->rig, now(device), found);
        gsb_rig_greet(&device->rig, now(device));
        return found;
    default:
        return device->link.broken ? lose(device, found) : fail(device, found);
    }
}

/* What has come, up to a bound, so that a flood cannot keep a tick from its time. */
static int receive(struct gsb_device *device)
{
    const struct gsb_port *port = &device->port;
    uint8_t bytes[CHUNK];
    int outcome = GSB_OK, got, found, chunks;
    size_t at, used;

    for (chunks = 0; chunks < CHUNKS && !device->link.broken; chunks++) {
        got = port->receive_bytes(port->context, bytes, sizeof bytes);
        if (got < 0 || got > CHUNK)
            return lose(device, GSB_ERROR_LINK);
        for (at = 0; at < (size_t)got && !device->link.broken; at += used) {
            found = gsb_link_feed(&device->link, bytes + at, (size_t)got - at, &used);
            found = act(device, found);
            outcome = found ? found : outcome;
            /* At once: an answer flows from its arrival, and a fault waits for nothing. */
            found = write_out(device);
            outcome = found ? found : outcome;
        }
        if (got < CHUNK)
            break;
    }
    return outcome;
}

static void greet_again(struct gsb_device *device)
{
    if (gsb_rig_state(&device->rig) == GSB_GREETING &&
        device->now_us - device->greeted_us >= GSB_HELLO_US) {
        device->greeted_us = device->now_us;
        gsb_link_greet(&device->link);
    }
}

int gsb_device_poll(struct gsb_device *device)
{
    int timely = gsb_rig_poll(&device->rig, now(device));
    int came, written, sent;

    if (timed_out(device))
        shut(device);
    written = write_out(device);
    came = receive(device);
    greet_again(device);
    sent = send_out(device);
    return sent ? sent : written ? written : came ? came : timely;
}
