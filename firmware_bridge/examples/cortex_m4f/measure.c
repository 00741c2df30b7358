/* A model on a Cortex-M4F: its self-test, its cost, and 20,000 steps with a simulated cell.
 *
 * Prints to the console: figures by name, then one line a step, voltage and current as the
 * bits of float32 numbers. Run QEMU with -icount shift=0, or the counts mean nothing.
 */
#include "board.h"
#include "gsm_device.h"

#include <string.h>

#ifndef STEPS
#define STEPS 20000u
#endif
#define COUNTED 1000u
#define COUNT_NSEC 40u /* of the clock; an instruction is 1 ns */

/* The simulated cell: capacitance, leak and a constant drive. */
#define LEAK_NS 9.0f
#define LEAK_MV (-54.387f)
#define DRIVE_PA 300.0f
#define PER_PF (1.0f / 32.0f)

static struct gsm_gates gates;
static float next_mv = -65.0f;
static float written_pa;
static uint32_t now_us;

static float nothing(struct gsm_gates *of, const struct gsm_parameters *with, float v_mv,
                     uint32_t ticks)
{
    (void)of, (void)with, (void)ticks;
    return v_mv;
}

typedef float (*stepped)(struct gsm_gates *, const struct gsm_parameters *, float, uint32_t);

/* Instructions of so many calls along a ramp through the voltages at which gates move. */
static uint32_t counts_of(stepped volatile function)
{
    uint32_t k, before;
    float v_mv = -80.0f;

    gsm_model_settle(&gates, v_mv);
    before = board_counts();
    for (k = 0u; k < COUNTED; k++) {
        function(&gates, &gsm_usual, v_mv, 1u);
        v_mv += 0.125f;
    }
    return (before - board_counts()) & 0xFFFFFFu;
}

static int read_voltage_mv(void *context, float *v_mv, uint32_t cells)
{
    (void)context, (void)cells;
    *v_mv = next_mv;
    return 0;
}

static int write_current_pa(void *context, const float *i_pa, uint32_t cells)
{
    (void)context, (void)cells;
    written_pa = *i_pa;
    return 0;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    (void)context, (void)bytes;
    return (int)size;
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    (void)context, (void)bytes, (void)room;
    return 0;
}

static uint32_t clock_us(void *context)
{
    (void)context;
    return now_us;
}

/* The guarded tick: its counts over so many, armed by hand for want of a host. */
static uint32_t counts_of_ticks(struct gsm_device *device)
{
    static const struct gsb_port port = {0, read_voltage_mv, write_current_pa, send_bytes,
                                         receive_bytes, clock_us};
    static const struct gsm_config config = {GSM_INTERVAL_US, 1e5f, 1e7f, -150.0f, 100.0f, 0u,
                                             20u};
    static uint8_t in[GSB_LINK_IN_MIN], out[GSB_LINK_OUT_MIN];
    static struct gsb_link link;
    uint32_t k, before;

    if (gsb_link_init(&link, &gsb_serial, 1u, in, sizeof in, out, sizeof out) != 0 ||
        gsm_device_init(device, &config, &port, &link) != 0) {
        board_exit(3);
    }
    gsm_device_tick(device);
    device->state = GSM_ARMED;
    next_mv = -80.0f;
    before = board_counts();
    for (k = 0u; k < COUNTED; k++) {
        now_us += (uint32_t)GSM_INTERVAL_US;
        gsm_device_tick(device);
        next_mv += 0.125f;
    }
    before = (before - board_counts()) & 0xFFFFFFu;
    board_figure("clipped", device->counters.clipped);
    return before;
}

static void costs(void)
{
    static struct gsm_device device;
    const uint32_t base = counts_of(nothing), step = counts_of(gsm_model_step);
    uint32_t ticks;

    board_figure("step_instructions", (step - base) * COUNT_NSEC / COUNTED);
    ticks = counts_of_ticks(&device);
    board_figure("tick_instructions", ticks * COUNT_NSEC / COUNTED);
    board_figure("faults", device.counters.faults);
    board_figure("device_bytes", sizeof device);
    board_stack_mark(board_stack());
    gsm_model_step(&gates, &gsm_usual, -65.0f, 1u);
    board_figure("step_stack", board_stack_used());
    board_stack_mark(board_stack());
    gsm_model_step(&gates, &gsm_usual, -65.0f, 7u);
    board_figure("leap_stack", board_stack_used());
    board_stack_mark(board_stack());
    now_us += (uint32_t)GSM_INTERVAL_US;
    gsm_device_tick(&device);
    board_figure("tick_stack", board_stack_used());
}

static uint32_t bits_of(float value)
{
    uint32_t bits;

    memcpy(&bits, &value, sizeof bits);
    return bits;
}

/* The cell in a loop with the model: forward Euler, every operation rounded once. */
static void loop(void)
{
    const float share = GSM_INTERVAL_US * 1e-3f * PER_PF;
    float v_mv = -65.0f, i_pa;
    uint32_t k;

    board_figure("steps", STEPS);
    gsm_model_settle(&gates, v_mv);
    i_pa = gsm_model_current(&gates, &gsm_usual, v_mv);
    for (k = 0u; k < STEPS; k++) {
        if (k != 0u) {
            i_pa = gsm_model_step(&gates, &gsm_usual, v_mv, 1u);
        }
        board_hex(bits_of(v_mv));
        board_hex(bits_of(i_pa));
        board_text("\n");
        v_mv = v_mv + ((LEAK_NS * (LEAK_MV - v_mv) + i_pa) + DRIVE_PA) * share;
    }
}

int main(void)
{
    const uint32_t failed = gsm_selftest();

    board_start();
    board_text("model " GSM_MODEL_NAME " " GSM_MODEL_SHA256 "\n");
    board_figure("selftest", failed);
    costs();
    loop();
    board_text("end\n");
    return failed != 0u ? 1 : 0;
}
