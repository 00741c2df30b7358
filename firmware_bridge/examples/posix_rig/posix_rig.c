/* A complete software rig: the device library, a socket, and a simulated cell in the place
 * of the converters. Cell and data are made up; no cell was recorded.
 *
 *   posix_rig ENDPOINT [KEY=VALUE ...]
 *
 * The cell is a capacitance and a leak, solved exactly over each tick. By default time is
 * virtual: each tick passes when the answer to its sample has come, so a run is the same on
 * every machine. With real=1 ticks follow the machine's clock.
 *
 * Keys, with their defaults, are in `settings` below. step=FROM,TO,PA (ms, pA) and hold=MS
 * may be given several times; at a hold the rig writes "hold MS" and goes on when a line
 * comes on stdin, so that orders can be given to the server at a known time. Spikes go to
 * stdout as "spike MS", and at the end one line of counters. Exit status 1 when the loop
 * did not hold to the end.
 */
#define _POSIX_C_SOURCE 200809L
#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "gatestep_bridge.h"
#include "posix_stream.h"

enum { STEPS = 16, HOLDS = 16, TAKEN = 4096, PATIENCE_MS = 10000 };

struct step {
    double from_ms, to_ms, pa;
};

struct settings {
    double seconds, interval_us, capacitance_pf, leak_ns, leak_mv, start_mv;
    double limit_pa, slew_pa_per_ms, silence_ms, on_arrival, real;
    struct step step[STEPS];
    double hold_ms[HOLDS];
    int steps, holds;
};

struct software_rig {
    struct settings settings;
    struct gsb_device device;
    struct posix_stream stream;
    double v_mv, decay, injected_pa, command_pa;
    double t_ms;
    uint64_t tick, start_us, ticked_us;
    double opened_us; /* virtual: the handshake took a tick, so that time has passed by then */
    uint8_t in[512], out[2048];
    struct gsb_taken taken[TAKEN];
};

/* ---- the five callbacks ---- */

static int read_voltage(void *context, float *v_mv, uint32_t cells)
{
    struct software_rig *rig = context;

    (void)cells;
    v_mv[0] = (float)rig->v_mv;
    return 0;
}

static int write_current(void *context, const float *i_pa, uint32_t cells)
{
    struct software_rig *rig = context;

    (void)cells;
    rig->injected_pa = i_pa[0];
    return 0;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    return posix_stream_send(&((struct software_rig *)context)->stream, bytes, size);
}

static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    return posix_stream_receive(&((struct software_rig *)context)->stream, bytes, room);
}

static uint32_t now_us(void *context)
{
    struct software_rig *rig = context;

    if (rig->settings.real > 0)
        return (uint32_t)posix_now_us();
    return (uint32_t)(uint64_t)(rig->opened_us + (double)rig->tick * rig->settings.interval_us +
                                0.5);
}

/* ---- the cell ---- */

static double command_pa(const struct settings *settings, double t_ms)
{
    double pa = 0.0;

    for (int k = 0; k < settings->steps; k++)
        if (t_ms >= settings->step[k].from_ms && t_ms < settings->step[k].to_ms)
            pa += settings->step[k].pa;
    return pa;
}

/* One tick of the membrane under a constant current: C dV/dt = g (E - V) + I, exactly. */
static void live(struct software_rig *rig)
{
    const struct settings *s = &rig->settings;
    double total_pa = rig->injected_pa + command_pa(s, rig->t_ms);
    double before_mv = rig->v_mv;

    if (s->leak_ns > 0) {
        double rest_mv = s->leak_mv + total_pa / s->leak_ns;
        rig->v_mv = rest_mv + (rig->v_mv - rest_mv) * rig->decay;
    } else {
        rig->v_mv += total_pa * s->interval_us * 1e-3 / s->capacitance_pf;
    }
    if (before_mv < 0.0 && rig->v_mv >= 0.0) {
        double part = before_mv / (before_mv - rig->v_mv);
        printf("spike %.4f\n", rig->t_ms + part * s->interval_us * 1e-3);
    }
    rig->tick++;
    rig->t_ms = (double)rig->tick * s->interval_us * 1e-3;
}

/* ---- settings ---- */

static int set(struct settings *s, const char *key, const char *value)
{
    const struct {
        const char *key;
        double *place;
    } numbers[] = {
        {"seconds", &s->seconds},           {"interval_us", &s->interval_us},
        {"capacitance_pf", &s->capacitance_pf}, {"leak_ns", &s->leak_ns},
        {"leak_mv", &s->leak_mv},           {"start_mv", &s->start_mv},
        {"limit_pa", &s->limit_pa},         {"slew_pa_per_ms", &s->slew_pa_per_ms},
        {"silence_ms", &s->silence_ms},     {"on_arrival", &s->on_arrival},
        {"real", &s->real},
    };
    struct step step;
    char rest;

    if (strcmp(key, "step") == 0 && s->steps < STEPS &&
        sscanf(value, "%lf,%lf,%lf%c", &step.from_ms, &step.to_ms, &step.pa, &rest) == 3) {
        s->step[s->steps++] = step;
        return 0;
    }
    if (strcmp(key, "hold") == 0 && s->holds < HOLDS)
        return sscanf(value, "%lf%c", &s->hold_ms[s->holds++], &rest) == 1 ? 0 : -1;
    for (size_t k = 0; k < sizeof numbers / sizeof *numbers; k++)
        if (strcmp(key, numbers[k].key) == 0)
            return sscanf(value, "%lf%c", numbers[k].place, &rest) == 1 ? 0 : -1;
    return -1;
}

static int settle(struct settings *s, int argc, char **argv)
{
    static const struct settings defaults = {
        .seconds = 0.5, .interval_us = 20, .capacitance_pf = 30, .leak_ns = 9,
        .leak_mv = -54.387, .start_mv = -65, .limit_pa = 40000, .slew_pa_per_ms = 4e6,
        .silence_ms = 50};

    *s = defaults;
    for (int k = 2; k < argc; k++) {
        char *equals = strchr(argv[k], '=');
        if (equals)
            *equals = 0;
        if (!equals || set(s, argv[k], equals + 1)) {
            fprintf(stderr, "posix_rig: %s: no such key, or not its value\n", argv[k]);
            return -1;
        }
    }
    return 0;
}

static int make(struct software_rig *rig, const char *endpoint)
{
    const struct settings *s = &rig->settings;
    struct gsb_port port = {0, read_voltage, write_current, send_bytes, receive_bytes, now_us};
    struct gsb_rig_config config;
    struct gsb_link link;

    memset(&config, 0, sizeof config);
    config.cells = 1;
    config.interval_us = (float)s->interval_us;
    config.on_arrival = s->on_arrival > 0;
    config.silence_us = (uint32_t)(s->silence_ms * 1000);
    config.cell[0].current_pa = (float)s->limit_pa;
    config.cell[0].slew_pa_per_ms = (float)s->slew_pa_per_ms;
    config.cell[0].window_low_mv = -150;
    config.cell[0].window_high_mv = 100;
    rig->v_mv = s->start_mv;
    rig->decay = exp(-s->interval_us * 1e-3 * s->leak_ns / s->capacitance_pf);
    port.context = rig;
    if (gsb_link_init(&link, &gsb_zmtp, 1, rig->in, sizeof rig->in, rig->out, sizeof rig->out) ||
        gsb_device_init(&rig->device, &config, &port, &link, rig->taken, TAKEN)) {
        fprintf(stderr, "posix_rig: these settings cannot be\n");
        return -1;
    }
    if (posix_stream_open(&rig->stream, endpoint)) {
        fprintf(stderr, "posix_rig: %s: %s\n", endpoint, strerror(errno));
        return -1;
    }
    return gsb_device_connect(&rig->device);
}

/* ---- running ---- */

/* Poll until something is true; 0 when it never came. In virtual time no time passes. */
static int await_answers(struct software_rig *rig, uint32_t answers)
{
    const struct gsb_rig *inner = &rig->device.rig;

    while (inner->counters.answers < answers && !rig->device.link.broken) {
        if (!posix_stream_wait(&rig->stream, PATIENCE_MS))
            return 0;
        gsb_device_poll(&rig->device);
    }
    return inner->counters.answers >= answers;
}

static int open_loop(struct software_rig *rig)
{
    while (gsb_rig_state(&rig->device.rig) == GSB_GREETING) {
        if (!posix_stream_wait(&rig->stream, PATIENCE_MS))
            break;
        gsb_device_poll(&rig->device);
    }
    return gsb_rig_state(&rig->device.rig) == GSB_RUNNING;
}

static void hold(struct software_rig *rig, int *held)
{
    char line[16];

    while (*held < rig->settings.holds && rig->t_ms >= rig->settings.hold_ms[*held]) {
        printf("hold %g\n", rig->settings.hold_ms[(*held)++]);
        fflush(stdout);
        if (!fgets(line, sizeof line, stdin))
            return;
    }
}

/* With the machine's clock: the tick is due when the clock says so, answered or not. */
static void wait_for_tick(struct software_rig *rig)
{
    double due_us = (double)rig->tick * rig->settings.interval_us;
    uint64_t now_us = posix_now_us();

    /* Ticks that are made up for follow one another, but never in the same microsecond. */
    while ((double)(now_us - rig->start_us) < due_us || now_us == rig->ticked_us) {
        gsb_device_poll(&rig->device);
        now_us = posix_now_us();
    }
}

static int run(struct software_rig *rig)
{
    const struct settings *s = &rig->settings;
    uint64_t ticks = (uint64_t)(s->seconds * 1e6 / s->interval_us + 0.5);
    int held = 0;

    rig->start_us = posix_now_us();
    rig->opened_us = s->interval_us;
    while (rig->tick < ticks) {
        hold(rig, &held);
        if (s->real > 0)
            wait_for_tick(rig);
        gsb_device_tick(&rig->device);
        rig->ticked_us = posix_now_us();
        if (rig->device.link.broken ||
            (s->real <= 0 && !await_answers(rig, (uint32_t)rig->tick + 1)))
            return 0;
        live(rig);
    }
    return 1;
}

int main(int argc, char **argv)
{
    static struct software_rig rig;
    const struct gsb_counters *n = &rig.device.rig.counters;
    int whole, error;

    if (argc < 2 || settle(&rig.settings, argc, argv)) {
        fprintf(stderr, "usage: posix_rig ENDPOINT [KEY=VALUE ...]; see posix_rig.c\n");
        return 2;
    }
    if (make(&rig, argv[1]))
        return 2;
    whole = open_loop(&rig) && run(&rig);
    error = whole ? 0 : rig.device.rig.last_error;
    gsb_device_stop(&rig.device);
    posix_stream_close(&rig.stream);
    printf("end samples %u answers %u skipped %u ignored %u clipped %u faults %u error %d\n",
           n->samples, n->answers, n->skipped, n->ignored, n->clipped, n->faults - 1, error);
    return whole ? 0 : 1;
}
