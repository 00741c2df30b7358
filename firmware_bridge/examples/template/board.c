/* A rig of one's own: copy this file, fill in what is marked BOARD, and link it with
 * ../../src. README.md in firmware_bridge/ goes through it line by line.
 *
 * Nothing here runs as it stands: the functions at the end are stand-ins that a board
 * replaces. Until it does, the voltage is not a number, and so the current is 0 pA.
 */
#include "gatestep_bridge.h"

/* ---- what the board must give ---- */

uint32_t board_adc_code(void);               /* BOARD: the newest conversion */
void board_dac_code(uint32_t code);          /* BOARD: start a conversion */
void board_output_relay(int connected);      /* BOARD: off at reset, by hardware */
void board_watchdog_kick(void);              /* BOARD: resets the board when not kicked */
uint32_t board_micros(void);                 /* BOARD: a free-running 1 MHz timer */
int board_tick_due(void);                    /* BOARD: 1 once for every sample-clock tick */
int board_uart_send(const uint8_t *bytes, int size);  /* BOARD: bytes taken, 0 when full */
int board_uart_receive(uint8_t *bytes, int room);     /* BOARD: bytes that have come */
void board_setup(void);                      /* BOARD: clocks, pins, converters, timers */

/* ---- calibration, measured and not taken from a data sheet (README.md) ---- */

static const struct gsb_converter adc = {
    12,        /* bits */
    0.09766f,  /* mV of membrane a code: reference / amplifier gain / 4096 */
    2048.0f    /* code at 0 mV */
};
static const struct gsb_converter dac = {
    12,        /* bits */
    0.9766f,   /* pA a code */
    2048.0f    /* code at 0 pA */
};

/* ---- the five callbacks ---- */

static int read_voltage_mv(void *context, float *v_mv, uint32_t cells)
{
    (void)context;
    (void)cells;
    /* NaN at either end of the range, which takes the output to 0 pA. */
    v_mv[0] = gsb_adc_mv(&adc, board_adc_code());
    return 0;
}

static int write_current_pa(void *context, const float *i_pa, uint32_t cells)
{
    (void)context;
    (void)cells;
    board_dac_code(gsb_dac_code(&dac, i_pa[0]));
    return 0; /* below 0 when the converter reports a fault */
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    (void)context;
    return board_uart_send(bytes, (int)size);
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    (void)context;
    return board_uart_receive(bytes, (int)room);
}

static uint32_t now_us(void *context)
{
    (void)context;
    return board_micros();
}

/* ---- limits: narrower than what amplifier, electrode and cell stand ---- */

static void configure(struct gsb_rig_config *config)
{
    config->cells = 1;
    config->interval_us = 50.0f;  /* the server's loop.interval_us */
    config->on_arrival = 0;       /* the server's loop.apply: 0 next-tick, 1 on-arrival */
    config->silence_us = 5000;    /* 0 pA when no answer has come for 5 ms */
    config->greeting_us = 0;      /* a serial line may wait for its host for ever */
    config->cell[0].current_pa = 1000.0f;
    config->cell[0].slew_pa_per_ms = 40000.0f;
    config->cell[0].window_low_mv = -150.0f;
    config->cell[0].window_high_mv = 100.0f;
}

/* All memory, here and nowhere else. 128 samples at 50 us are 6.4 ms, over silence_us. */
static uint8_t in[GSB_LINK_IN_MIN], out[512];
static struct gsb_taken taken[128];
static struct gsb_device device;

int main(void)
{
    struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes, receive_bytes,
                            now_us};
    struct gsb_rig_config config = {0, 0, 0, 0, 0, {{0, 0, 0, 0}}};
    struct gsb_link link;

    board_setup();
    board_output_relay(0);
    configure(&config);
    /* gsb_serial for a line to `gatestep bridge`; gsb_zmtp for TCP straight to the server. */
    if (gsb_link_init(&link, &gsb_serial, config.cells, in, sizeof in, out, sizeof out) ||
        gsb_device_init(&device, &config, &port, &link, taken, 128))
        return 1; /* the relay stays open */
    gsb_device_connect(&device);
    for (;;) {
        if (board_tick_due())
            gsb_device_tick(&device);
        gsb_device_poll(&device);
        /* The cell sees the converter only while the loop runs. */
        board_output_relay(gsb_rig_state(&device.rig) == GSB_RUNNING);
        if (device.link.broken)
            gsb_device_connect(&device);
        board_watchdog_kick();
    }
}

/* ---- BOARD: stand-ins, to be replaced ---- */

uint32_t board_adc_code(void) { return 0; }
void board_dac_code(uint32_t code) { (void)code; }
void board_output_relay(int connected) { (void)connected; }
void board_watchdog_kick(void) {}
uint32_t board_micros(void) { return 0; }
int board_tick_due(void) { return 0; }
int board_uart_send(const uint8_t *bytes, int size) { (void)bytes; return size; }
int board_uart_receive(uint8_t *bytes, int room) { (void)bytes; (void)room; return 0; }
void board_setup(void) {}
