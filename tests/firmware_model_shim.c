/* A generated model for tests: the step along arrays, and the guarded device tick by tick. */
#include <string.h>

#include "gsm_device.h"

/* Settle at the first voltage, then step. x has room for all gates of every step. */
void shim_walk(uint32_t count, const float *v_mv, const uint32_t *ticks, const float *gmax_ns,
               const float *reversal_mv, float *i_pa, float *x)
{
    struct gsm_parameters with;
    struct gsm_gates gates;
    const size_t size = sizeof gates.x;
    uint32_t k;

    memset(&gates, 0, sizeof gates);
    memcpy(with.gmax_ns, gmax_ns, sizeof with.gmax_ns);
    memcpy(with.reversal_mv, reversal_mv, sizeof with.reversal_mv);
    for (k = 0u; k < count; k++) {
        if (k == 0u) {
            gsm_model_settle(&gates, v_mv[k]);
            i_pa[k] = gsm_model_current(&gates, &with, v_mv[k]);
        } else {
            i_pa[k] = gsm_model_step(&gates, &with, v_mv[k], ticks[k]);
        }
        memcpy(x + k * (size / sizeof(float)), gates.x, size);
    }
}

/* What the device's callbacks see and do. */
static struct {
    float v_mv, i_pa;
    int read, write;
    uint32_t now_us;
    const uint8_t *in;
    uint32_t in_size;
    uint8_t out[4096];
    uint32_t out_size;
} board;

static struct gsm_device device;
static struct gsb_link line;
static uint8_t line_in[GSB_LINK_IN_MIN], line_out[GSB_LINK_OUT_MIN];

static int read_voltage_mv(void *context, float *v_mv, uint32_t cells)
{
    (void)context, (void)cells;
    *v_mv = board.v_mv;
    return board.read;
}

static int write_current_pa(void *context, const float *i_pa, uint32_t cells)
{
    (void)context, (void)cells;
    if (board.write == 0) {
        board.i_pa = *i_pa;
    }
    return board.write;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    const size_t room = sizeof board.out - board.out_size;
    const size_t sent = size < room ? size : room;

    (void)context;
    memcpy(board.out + board.out_size, bytes, sent);
    board.out_size += (uint32_t)sent;
    return (int)sent;
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    const size_t got = board.in_size < room ? board.in_size : room;

    (void)context;
    memcpy(bytes, board.in, got);
    board.in += got;
    board.in_size -= (uint32_t)got;
    return (int)got;
}

static uint32_t clock_us(void *context)
{
    (void)context;
    return board.now_us;
}

static const struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes,
                                     receive_bytes, clock_us};

/* A device whose converter holds 99 pA from before, and takes no write or has no line. */
int shim_start_badly(int write, int linked)
{
    const struct gsm_config config = {GSM_INTERVAL_US, 800.0f, 2e4f, -150.0f, 100.0f, 5000u, 20u};

    memset(&board, 0, sizeof board);
    board.i_pa = 99.0f;
    board.write = write;
    gsb_link_init(&line, &gsb_serial, 1u, line_in, sizeof line_in, line_out, sizeof line_out);
    return gsm_device_init(&device, &config, &port, linked ? &line : 0);
}

int shim_start(float interval_us, float current_pa, float slew_pa_per_ms, float low_mv,
               float high_mv, uint32_t silence_us, uint32_t gap_ticks)
{
    struct gsm_config config;
    int outcome;

    memset(&board, 0, sizeof board);
    config.interval_us = interval_us;
    config.current_pa = current_pa;
    config.slew_pa_per_ms = slew_pa_per_ms;
    config.window_low_mv = low_mv;
    config.window_high_mv = high_mv;
    config.silence_us = silence_us;
    config.gap_ticks = gap_ticks;
    outcome = gsb_link_init(&line, &gsb_serial, 1u, line_in, sizeof line_in, line_out,
                            sizeof line_out);
    if (outcome == 0) {
        outcome = gsm_device_init(&device, &config, &port, &line);
    }
    return outcome != 0 ? outcome : gsm_device_connect(&device);
}

int shim_tick(float v_mv, int read, int write, uint32_t now_us)
{
    board.v_mv = v_mv;
    board.read = read;
    board.write = write;
    board.now_us = now_us;
    return gsm_device_tick(&device);
}

static int polled;

/* Bytes in; what was sent stands in out, and its size is returned. */
uint32_t shim_poll(const uint8_t *bytes, uint32_t size, uint8_t *out)
{
    board.in = bytes;
    board.in_size = size;
    board.out_size = 0u;
    do {
        gsm_device_poll(&device);
    } while (board.in_size != 0u && !device.token_open);
    polled = gsm_device_poll(&device);
    memcpy(out, board.out, board.out_size);
    return board.out_size;
}

/* What the last poll returned. */
int shim_polled(void)
{
    return polled;
}

/* Time passes without a tick. */
void shim_wait(uint32_t now_us)
{
    board.now_us = now_us;
}

int shim_connect(void)
{
    return gsm_device_connect(&device);
}

void shim_stop(void)
{
    gsm_device_stop(&device);
}

float shim_current_pa(void)
{
    return board.i_pa;
}

int shim_state(void)
{
    return (int)device.state;
}

int shim_fault(void)
{
    return device.fault;
}

/* Counters in the order of struct gsm_counters. */
const uint32_t *shim_counters(void)
{
    return &device.counters.ticks;
}

float shim_gate(uint32_t k)
{
    return device.gates.x[k];
}
