#include "decoders.h"

#include <stdlib.h>
#include <string.h>

#include "gatestep_bridge.h"

enum { CELLS = 2, TAKEN = 16, LIMIT_PA = 500 };

static void must(int true_here)
{
    if (!true_here)
        abort();
}

static int same(const float *a, const float *b, uint32_t count)
{
    for (uint32_t k = 0; k < count; k++)
        if (!(a[k] <= b[k] && a[k] >= b[k]) && !(a[k] != a[k] && b[k] != b[k]))
            return 0;
    return 1;
}

/* What was read, written and read again is the same. */
static void messages(const uint8_t *bytes, size_t size, uint32_t cells)
{
    struct gsb_sample sample, again;
    struct gsb_answer answer, twice;
    uint8_t out[GSB_MESSAGE_MAX];
    int written;

    if (gsb_sample_decode(bytes, size, cells, &sample) == GSB_OK) {
        written = gsb_sample_encode(&sample, out, sizeof out);
        must(written > 0);
        must(gsb_sample_decode(out, (size_t)written, cells, &again) == GSB_OK);
        must(again.seq == sample.seq && again.t_us == sample.t_us &&
             again.in_force == sample.in_force && again.lag_us == sample.lag_us &&
             same(again.v_mv, sample.v_mv, cells));
    }
    if (gsb_answer_decode(bytes, size, cells, &answer) == GSB_OK) {
        must(answer.cells == cells || (answer.cells == 0 && answer.seq == GSB_NIL));
        written = gsb_answer_encode(&answer, out, sizeof out);
        must(written > 0);
        must(gsb_answer_decode(out, (size_t)written, cells, &twice) == GSB_OK);
        must(twice.seq == answer.seq && twice.flags == answer.flags &&
             same(twice.i_pa, answer.i_pa, answer.cells));
    }
}

/* A stream in pieces of so many bytes: everything stays inside its memory. */
static void stream(const struct gsb_link_type *type, const uint8_t *bytes, size_t size,
                   size_t piece)
{
    /* From the heap, so that a sanitizer sees the first byte beyond. */
    uint8_t *in = malloc(GSB_LINK_IN_MIN), *out = malloc(GSB_LINK_OUT_MIN);
    const uint8_t *pending;
    struct gsb_link link;
    size_t at = 0, used;

    must(in && out);
    must(gsb_link_init(&link, type, 1, in, GSB_LINK_IN_MIN, out, GSB_LINK_OUT_MIN) == GSB_OK);
    must(gsb_link_open(&link) == GSB_OK);
    while (at < size && !link.broken) {
        size_t now = size - at < piece ? size - at : piece;
        int found = gsb_link_feed(&link, bytes + at, now, &used);
        must(used > 0 && used <= now);
        must(!link.broken || found < 0);
        at += used;
        if (found == GSB_MESSAGE) {
            must(link.message >= in && link.message + link.message_size <= in + GSB_LINK_IN_MIN);
            messages(link.message, link.message_size, 1);
        }
        must(gsb_link_pending(&link, &pending) <= GSB_LINK_OUT_MIN);
        if (at % 3 == 0)
            gsb_link_sent(&link, gsb_link_pending(&link, &pending) / 2);
    }
    free(in);
    free(out);
}

/* ---- a whole device on a port that takes its bytes, and its time, from the input ---- */

struct input {
    const uint8_t *bytes;
    size_t size, at;
    uint32_t now_us;
};

static uint8_t next(struct input *input)
{
    return input->at < input->size ? input->bytes[input->at++] : 0;
}

static int read_voltage(void *context, float *v_mv, uint32_t cells)
{
    struct input *input = context;
    uint8_t what = next(input);
    uint32_t bits = 0x7FC00000u;

    for (uint32_t k = 0; k < cells; k++)
        v_mv[k] = (float)(what & 0x7F) - 100.0f;
    if (what == 0xFE)
        memcpy(v_mv, &bits, sizeof bits);
    return what == 0xFF ? -1 : 0;
}

static int write_current(void *context, const float *i_pa, uint32_t cells)
{
    for (uint32_t k = 0; k < cells; k++)
        must(i_pa[k] >= -LIMIT_PA && i_pa[k] <= LIMIT_PA);
    return next(context) == 0xFF ? -1 : 0;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    uint8_t what = next(context);

    (void)bytes;
    return what == 0xFF ? -1 : what & 1 ? (int)size : (int)(size / 2);
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    struct input *input = context;
    size_t left = input->size - input->at;
    size_t count = next(input) % 64u;

    left -= left > 0;
    count = count < left ? count : left;
    count = count < room ? count : room;
    memcpy(bytes, input->bytes + input->at, count);
    input->at += count;
    return (int)count;
}

static uint32_t now_us(void *context)
{
    struct input *input = context;
    uint8_t what = next(input);

    input->now_us += what == 0xFF ? 0x90000000u : what;
    return input->now_us;
}

static void device(const struct gsb_link_type *type, const uint8_t *bytes, size_t size)
{
    static uint8_t in[GSB_LINK_IN_MIN], out[GSB_LINK_OUT_MIN];
    struct gsb_taken taken[TAKEN];
    struct input input = {0, 0, 0, 0};
    struct gsb_port port = {0, read_voltage, write_current, send_bytes, receive_bytes, now_us};
    struct gsb_rig_config config;
    struct gsb_device made;
    struct gsb_link link;

    input.bytes = bytes;
    input.size = size;
    port.context = &input;
    memset(&config, 0, sizeof config);
    config.cells = CELLS;
    config.interval_us = 50;
    config.on_arrival = size & 1;
    config.silence_us = 400;
    config.greeting_us = size & 2 ? 3000 : 0;
    for (int k = 0; k < CELLS; k++) {
        config.cell[k].current_pa = LIMIT_PA;
        config.cell[k].slew_pa_per_ms = 4000;
        config.cell[k].window_low_mv = -120;
        config.cell[k].window_high_mv = 60;
    }
    must(gsb_link_init(&link, type, CELLS, in, sizeof in, out, sizeof out) == GSB_OK);
    gsb_device_init(&made, &config, &port, &link, taken, TAKEN);
    gsb_device_connect(&made);
    while (input.at < input.size) {
        gsb_device_poll(&made);
        gsb_device_tick(&made);
        if (made.link.broken)
            gsb_device_connect(&made);
        if (gsb_rig_state(&made.rig) != GSB_RUNNING)
            for (int k = 0; k < CELLS; k++)
                must(gsb_rig_current_pa(&made.rig)[k] == 0.0f);
    }
}

void gsb_fuzz_one(const uint8_t *bytes, size_t size)
{
    size_t piece = size ? 1 + bytes[size - 1] % 61u : 1;

    for (uint32_t cells = 1; cells <= GSB_CELLS_MAX; cells += 7)
        messages(bytes, size, cells);
    messages(bytes, size, CELLS);
    stream(&gsb_zmtp, bytes, size, piece);
    stream(&gsb_serial, bytes, size, piece);
    device(&gsb_zmtp, bytes, size);
    device(&gsb_serial, bytes, size);
}
