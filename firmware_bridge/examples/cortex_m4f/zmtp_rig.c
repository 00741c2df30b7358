/* A rig on a Cortex-M4F: a simulated cell in a loop with the server, over the link's line.
 *
 * Speaks ZMTP, for a line that ends in a TCP connection to the server's loop socket; with
 * SERIAL defined, framing 1.0 to `gatestep bridge`. Prints to the console one line for each
 * of 2,000 samples: its number, its voltage and the current of its answer as the bits of
 * float32 numbers, and the answer's flags.
 *
 * Time is the cell's own: the clock stands still while an answer is awaited, so the run is
 * the same on every machine, and an answer always comes in the tick of its sample.
 */
#include "board.h"
#include "gatestep_bridge.h"
#include "model.h"

#include <string.h>

#define SAMPLES 2000u
#define TAKEN 256u
/* How long the answer takes by the cell's clock, us. */
#define LAG_US 10u
/* Between polls, us, by the processor's clock; and polls until the other end counts as gone. */
#define POLL_US 300u
#define PATIENCE 200000u

#define LEAK_NS 9.0f
#define LEAK_MV (-54.387f)
#define DRIVE_PA 300.0f
#define PER_PF (1.0f / 32.0f)

#ifdef SERIAL
#define LINK gsb_serial
#else
#define LINK gsb_zmtp
#endif

struct sample {
    float v_mv, answer_pa;
    uint32_t flags;
};

static struct sample samples[SAMPLES];
static struct gsb_device device;
static struct gsb_taken taken[TAKEN];
static uint8_t in[GSB_LINK_IN_MIN], out[GSB_LINK_OUT_MIN];
static uint32_t now_us;
static float v_mv = -65.0f, i_pa;

static int read_voltage_mv(void *context, float *into_mv, uint32_t cells)
{
    (void)context, (void)cells;
    *into_mv = v_mv;
    return 0;
}

static int write_current_pa(void *context, const float *from_pa, uint32_t cells)
{
    (void)context, (void)cells;
    i_pa = *from_pa;
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
    return now_us;
}

/* A poll is due: the interrupt ends board_rest, and that is all it is for. */
static void wake(void)
{
}

static void give_up(const char *why)
{
    board_text(why);
    board_figure(" error", (uint32_t)-device.rig.last_error);
    board_exit(2);
}

static void start(void)
{
    static const struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes,
                                         receive_bytes, clock_us};
    static struct gsb_rig_config config = {
        1u, GSM_INTERVAL_US, 0u, 5000u, 0u, {{1e5f, 1e9f, -150.0f, 100.0f}}};
    struct gsb_link link;
    uint32_t polls;

    if (gsb_link_init(&link, &LINK, 1u, in, sizeof in, out, sizeof out) != 0 ||
        gsb_device_init(&device, &config, &port, &link, taken, TAKEN) != 0 ||
        gsb_device_connect(&device) != 0) {
        give_up("start");
    }
    for (polls = 0u; gsb_rig_state(&device.rig) != GSB_RUNNING; polls++) {
        if (gsb_device_poll(&device) != 0 || polls > PATIENCE) {
            give_up("greeting");
        }
        board_rest();
    }
}

/* Take a sample and wait for its answer, then let the cell run to the next tick. */
static void sample(struct sample *kept, uint32_t k)
{
    const float share = GSM_INTERVAL_US * 1e-3f * PER_PF;
    uint32_t polls = 0u;

    kept->v_mv = v_mv;
    if (gsb_device_tick(&device) != 0) {
        give_up("tick");
    }
    now_us += LAG_US;
    while (device.rig.newest != (int64_t)k) {
        board_rest();
        if (gsb_device_poll(&device) != 0 || polls++ > PATIENCE) {
            give_up("answer");
        }
    }
    kept->answer_pa = device.rig.next.i_pa[0];
    kept->flags = (uint32_t)device.rig.next.flags;
    now_us += (uint32_t)GSM_INTERVAL_US - LAG_US;
    v_mv = v_mv + ((LEAK_NS * (LEAK_MV - v_mv) + i_pa) + DRIVE_PA) * share;
}

static uint32_t bits_of(float value)
{
    uint32_t bits;

    memcpy(&bits, &value, sizeof bits);
    return bits;
}

int main(void)
{
    uint32_t k;

    board_start();
    board_tick_every(POLL_US * (BOARD_HZ / 1000000u), wake);
    start();
    for (k = 0u; k < SAMPLES; k++) {
        sample(&samples[k], k);
    }
    for (k = 0u; k < SAMPLES; k++) {
        board_hex(bits_of(samples[k].v_mv));
        board_hex(bits_of(samples[k].answer_pa));
        board_hex(samples[k].flags);
        board_text("\n");
    }
    board_figure("samples", device.rig.counters.samples);
    board_figure("answers", device.rig.counters.answers);
    board_figure("ignored", device.rig.counters.ignored);
    board_figure("clipped", device.rig.counters.clipped);
    board_figure("faults", device.rig.counters.faults);
    board_text("end\n");
    return 0;
}
