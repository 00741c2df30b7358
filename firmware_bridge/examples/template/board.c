/* A rig of one's own: copy this file, fill in what is marked BOARD, and link it with
 * ../../src. README.md in firmware_bridge/ goes through it line by line.
 *
 * Nothing here runs as it stands: the functions at the end are stand-ins that a board
 * replaces. Until it does, the voltage is not a number, and so the current is 0 pA.
 */
#include "gatestep_bridge.h"

/* ---- what the board must give ---- */

uint32_t board_adc_code(void);               /* BOARD: the newest conversion */
int board_dac_code(uint32_t code);           /* BOARD: write it; below 0 when that failed */
void board_output_relay(int connected);      /* BOARD: off at reset, by hardware */
void board_watchdog_kick(void);              /* BOARD: resets the board when not kicked */
uint32_t board_micros(void);                 /* BOARD: a free-running 1 MHz timer */
int board_tick_due(void);                    /* BOARD: 1 once for every sample-clock tick */
int board_link_send(const uint8_t *bytes, int size);  /* BOARD: bytes taken, 0 when full,
                                                below 0 when USB says that the host is gone */
int board_link_receive(uint8_t *bytes, int room);     /* BOARD: bytes that have come */
int board_stop_pressed(void);                /* BOARD: the stop button */
int board_release_pressed(void);             /* BOARD: the button that undoes it */
void board_show_error(int error);            /* BOARD: an LED, a display; 0: no fault yet */
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
    return board_dac_code(gsb_dac_code(&dac, i_pa[0]));
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    (void)context;
    return board_link_send(bytes, (int)size);
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    (void)context;
    return board_link_receive(bytes, (int)room);
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
    /* The server's loop.interval_us. A sample and its answer must fit in it: 1,000 us for a
     * UART at 921,600 baud, 500 for high-speed USB, 50 to 100 for TCP (README.md). */
    config->interval_us = 1000.0f;
    config->on_arrival = 0;       /* the server's loop.apply: 0 next-tick, 1 on-arrival */
    config->silence_us = 10000;   /* 0 pA when no answer has come for 10 ms */
    config->greeting_us = 0;      /* a serial line may wait for its host for ever */
    config->cell[0].current_pa = 1000.0f;
    config->cell[0].slew_pa_per_ms = 2000.0f; /* see README.md, Slew */
    config->cell[0].window_low_mv = -150.0f;
    config->cell[0].window_high_mv = 100.0f;
}

/* All memory, here and nowhere else. 32 samples at 1,000 us are 32 ms, over silence_us. */
enum { TAKEN = 32 };
static uint8_t in[GSB_LINK_IN_MIN], out[512];
static struct gsb_taken taken[TAKEN];
static struct gsb_device device;

/* Make the device, or say what cannot be. Nothing is connected to the output yet. */
static int start(void)
{
    struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes, receive_bytes,
                            now_us};
    struct gsb_rig_config config = {0, 0, 0, 0, 0, {{0, 0, 0, 0}}};
    struct gsb_link link;
    int outcome;

    configure(&config);
    outcome = gsb_converter_check(&adc);
    if (outcome == GSB_OK)
        outcome = gsb_dac_check(&dac, config.cell[0].current_pa);
    /* gsb_serial for a line to `gatestep bridge`; gsb_zmtp for TCP straight to the server. */
    if (outcome == GSB_OK)
        outcome = gsb_link_init(&link, &gsb_serial, config.cells, in, sizeof in, out, sizeof out);
    if (outcome == GSB_OK)
        outcome = gsb_device_init(&device, &config, &port, &link, taken, TAKEN);
    return outcome;
}

int main(void)
{
    int outcome;

    board_setup();
    board_output_relay(0);
    outcome = start();
    board_show_error(outcome);
    if (outcome)
        return 1; /* the relay stays open */
    gsb_device_connect(&device);
    for (;;) {
        if (board_stop_pressed())
            gsb_device_stop(&device);
        if (board_release_pressed())
            gsb_device_release(&device);
        /* What either returns is kept as the rig's last_error, and the output is at 0 pA. */
        if (board_tick_due())
            gsb_device_tick(&device);
        gsb_device_poll(&device);
        /* The cell sees the converter only while the loop runs and the converter obeys. */
        board_output_relay(gsb_rig_state(&device.rig) == GSB_RUNNING &&
                           !gsb_rig_write_due(&device.rig));
        board_show_error(device.rig.last_error);
        /* Refused from a stop to its release. */
        if (device.link.broken)
            gsb_device_connect(&device);
        board_watchdog_kick();
    }
}

/* ---- BOARD: stand-ins, to be replaced ---- */

uint32_t board_adc_code(void) { return 0; }
int board_dac_code(uint32_t code) { (void)code; return 0; }
void board_output_relay(int connected) { (void)connected; }
void board_watchdog_kick(void) {}
uint32_t board_micros(void) { return 0; }
int board_tick_due(void) { return 0; }
int board_link_send(const uint8_t *bytes, int size) { (void)bytes; return size; }
int board_link_receive(uint8_t *bytes, int room) { (void)bytes; (void)room; return 0; }
int board_stop_pressed(void) { return 0; }
int board_release_pressed(void) { return 0; }
void board_show_error(int error) { (void)error; }
void board_setup(void) {}
