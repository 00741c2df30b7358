/* A model on a Cortex-M4F that gives a simulated cell its conductances, tick by tick, while
 * a host supervises over the link's line with framing 1.0.
 *
 * The tick runs in the timer's interrupt, the poll in the main loop. The cell is a
 * capacitance and a leak; on a board, the two callbacks at the top reach the converters.
 *
 * What ends the current when either stops: with the main loop hung, the tick goes on, obeys
 * the stop button, and disarms after silence_us; with the ticks gone, the poll says so and
 * the relay opens; and without both of them the watchdog opens it and resets the board.
 */
#include "board.h"
#include "gsm_device.h"

#define LEAK_NS 9.0f
#define LEAK_MV (-54.387f)
#define PER_PF (1.0f / 32.0f)
/* 10 ms: many ticks, and short beside what a cell can stand. */
#define WATCHDOG_COUNTS (BOARD_HZ / 100u)

static struct gsm_device device;
static struct gsb_link link;
static uint8_t in[GSB_LINK_IN_MIN], out[GSB_LINK_OUT_MIN];
static float v_mv = LEAK_MV;
static volatile uint32_t ticked;

static int read_voltage_mv(void *context, float *into_mv, uint32_t cells)
{
    (void)context, (void)cells;
    *into_mv = v_mv;
    return 0;
}

static int write_current_pa(void *context, const float *i_pa, uint32_t cells)
{
    (void)context, (void)cells;
    v_mv = v_mv + (LEAK_NS * (LEAK_MV - v_mv) + *i_pa) * (GSM_INTERVAL_US * 1e-3f * PER_PF);
    return 0;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    size_t sent = 0u;

    (void)context;
    while (sent < size && board_give(BOARD_LINK, bytes[sent])) {
        sent++;
    }
    return (int)sent;
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    size_t got = 0u;

    (void)context;
    while (got < room && board_take(BOARD_LINK, &bytes[got])) {
        got++;
    }
    return (int)got;
}

static uint32_t clock_us(void *context)
{
    (void)context;
    return board_now_us();
}

static void tick(void)
{
    /* Here, so that it works with a main loop that hangs. */
    if (board_stop_is_held()) {
        gsm_device_stop(&device);
    }
    gsm_device_tick(&device);
    ticked = 1u;
}

/* A turn of the main loop: serve the line, and let current out only while all is well. */
static void turn(void)
{
    const int outcome = gsm_device_poll(&device);

    board_relay(outcome != GSB_ERROR_CLOCK && device.state == GSM_ARMED && !device.unwritten);
    if (outcome == GSB_ERROR_LINK) {
        gsm_device_connect(&device);
    }
    if (ticked != 0u) {
        ticked = 0u;
        board_watchdog_kick();
    }
}

int main(void)
{
    static const struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes,
                                         receive_bytes, clock_us};
    static const struct gsm_config config = {
        GSM_INTERVAL_US, /* the tick */
        20000.0f,        /* current_pa: below what amplifier and cell can take */
        1e7f,            /* slew_pa_per_ms */
        -150.0f, 90.0f,  /* the window of voltages that a cell can have */
        500000u,         /* silence_us */
        20u};            /* gap_ticks */

    board_start();
    /* Before anything is connected to the output: does this build compute what it should? */
    if (gsm_selftest() != 0u) {
        board_exit(1);
    }
    if (gsb_link_init(&link, &gsb_serial, 1u, in, sizeof in, out, sizeof out) != GSB_OK ||
        gsm_device_init(&device, &config, &port, &link) != GSB_OK ||
        gsm_device_connect(&device) != GSB_OK) {
        board_exit(3);
    }
    board_text("model " GSM_MODEL_NAME " " GSM_MODEL_SHA256 "\n");
    board_tick_every((uint32_t)(GSM_INTERVAL_US * (BOARD_HZ / 1000000u)), tick);
    board_watchdog_start(WATCHDOG_COUNTS);
    for (;;) {
        turn();
        board_rest(); /* until the next tick; when none comes, until the watchdog's reset */
    }
}
