/* A model that runs on the device itself, for loops faster than any link.
 *
 * The device samples, steps the model of model.h and writes the current, tick after tick.
 * A host supervises over framing 1.0 (SPEC.md, "A model on the device"): it sets
 * parameters, arms, disarms, and sees thinned samples. Whoever armed it, every current
 * passes gsb_limit_pa, and anything that is not as it should be takes it to 0 pA.
 *
 *   disarmed -- arm ---------------------------------> armed      current flows
 *   armed ----- disarm, bye, welcome, silence,
 *               a damaged frame, a lost link --------> disarmed   0 pA
 *   armed ----- a fault of voltage, clock, converter
 *               or model ----------------------------> tripped    0 pA
 *   tripped --- disarm ------------------------------> disarmed   0 pA
 *
 * Two functions, in two places:
 *
 *     gsm_device_tick    at every tick: in the sample timer's interrupt
 *     gsm_device_poll    as often as possible: in the main loop
 *
 * The tick may interrupt the poll, never the other way round, on one core. They share
 * memory by volatile words of which each has one writer, but for `releases`, which says
 * why it may have more. The tick alone calls read_voltage_mv and write_current_pa; the
 * poll alone send_bytes and receive_bytes; both call now_us.
 *
 * When ticks end, the last current stays, for nothing writes another. The poll then says
 * GSB_ERROR_CLOCK; a relay that the main loop opens, and a watchdog that is kicked only
 * when tick and poll have both run, are what ends the current.
 */
#ifndef GSM_DEVICE_H
#define GSM_DEVICE_H

#include "gsb_device.h"
#include "gsb_error.h"
#include "model.h"

#ifdef __cplusplus
extern "C" {
#endif

enum gsm_state { GSM_DISARMED = 0, GSM_ARMED = 1, GSM_TRIPPED = 2 };

struct gsm_config {
    float interval_us;    /* the tick; must be GSM_INTERVAL_US */
    float current_pa;     /* largest magnitude of the current, pA; above 0 */
    float slew_pa_per_ms; /* fastest change while armed, pA/ms; above 0 */
    float window_low_mv;  /* a voltage below this trips; not below GSM_LOW_MV */
    float window_high_mv; /* a voltage above this trips; not above GSM_HIGH_MV */
    uint32_t silence_us;  /* nothing from the supervisor for this long disarms; 0: it may
                             be gone for ever, for a device that is armed and unplugged */
    uint32_t gap_ticks;   /* longest gap that the gates are carried over; a longer one
                             trips; from 1 */
};

/* Parameters by their index, as the host sees them: of conductance c, 2c is NAME.gmax_ns
 * and 2c + 1 NAME.reversal_mv; the last is trace.every_ticks: one sample in so many is
 * sent to the host, 0 for none. */
#define GSM_PARAMETERS (2u * GSM_CONDUCTANCES + 1u)
#define GSM_GMAX_MAX_NS 1e6f
#define GSM_REVERSAL_MAX_MV 300.0f
#define GSM_EVERY_MAX 1e6f

/* Thinned samples that can wait for the poll; beyond, they are dropped and counted. */
#define GSM_TRACES 16u

struct gsm_trace {
    volatile uint64_t seq, t_us;
    volatile uint32_t state;
    volatile float v_mv, i_pa; /* the voltage, and the current that flows from this tick on */
};

struct gsm_counters {
    uint32_t ticks;   /* stepped, missed ones among them */
    uint32_t missed;  /* of these, those whose time was over when the next was taken */
    uint32_t clipped; /* currents that a limit changed */
    uint32_t trips;
    uint32_t faults;  /* of any kind, in any state */
    uint32_t traces_lost;
};

/* An order on its way from the poll to the tick. */
struct gsm_order {
    volatile uint32_t kind, index;
    volatile uint32_t releases; /* those before it: one that came since is newer */
    volatile float value;
};

struct gsm_device {
    struct gsm_config config;
    struct gsb_port port;

    /* The tick's own; the poll reads parameters, state and counters. */
    struct gsm_gates gates;
    struct gsm_parameters with;
    struct gsm_counters counters;
    float slew_pa;          /* largest change in a tick */
    float i_pa;             /* what flows */
    float phase_us;         /* how much later the last tick was than the clock would have it */
    float span_us;          /* clock since span_ticks was 0 */
    uint32_t span_ticks;
    uint32_t owed;          /* ticks that the gates are behind */
    uint32_t clock_us;      /* clock at the last tick */
    uint32_t every, until_trace;
    uint64_t seq, t_us;
    uint8_t started;        /* whether a tick has been */
    uint8_t settled;        /* whether the gates have a voltage to begin from */
    uint8_t known;          /* whether the last voltage was good */
    volatile uint32_t state;
    volatile int32_t fault; /* the newest (enum gsb_error), 0 before the first */

    /* From poll to tick. */
    struct gsm_order order;
    volatile uint32_t orders_put;
    volatile uint32_t heard_us;  /* when the supervisor was last heard */
    /* Raised to disarm, whatever else goes on. Where an interrupt raises it while the poll
     * does, one of the two may be lost, but no order can be put in between, and so the
     * other takes all to 0 pA that both could. */
    volatile uint32_t releases;

    /* From tick to poll. */
    volatile uint32_t orders_done;
    volatile int32_t order_result;
    volatile uint32_t beats;     /* calls of the tick */
    volatile uint8_t unwritten;  /* whether the converter did not take what was last written */
    uint32_t released;
    struct gsm_trace trace[GSM_TRACES];
    volatile uint32_t traces_put, traces_sent;

    /* The poll's own. */
    struct gsb_link *link;
    uint32_t greeted_us;
    uint32_t seen_beats, seen_us; /* when the tick was last seen to have run */
    uint8_t watching;             /* whether seen_us counts */
    uint64_t token;        /* of the last order */
    int32_t token_result;  /* what came of it */
    uint8_t token_known;   /* whether there was one */
    uint8_t token_open;    /* whether it is still with the tick */
    uint8_t bytes_at, bytes_size;
    uint8_t bytes[64];     /* received, not yet read */
};

/* Make a device, disarmed, and write 0 pA. `link` is gsb_serial, of one cell, initialised
 * by gsb_link_init; it stays the caller's memory. Sets its features and tick. GSB_OK;
 * GSB_ERROR_ARGUMENT, and then all that it does at a tick is to write 0 pA; or
 * GSB_ERROR_OUTPUT when 0 pA could not be written, which every tick tries again. */
int gsm_device_init(struct gsm_device *device, const struct gsm_config *config,
                    const struct gsb_port *port, struct gsb_link *link);

/* The serial line has just been opened, or opened anew: say hello. Disarms. */
int gsm_device_connect(struct gsm_device *device);

/* A tick. GSB_OK, or the fault it met; see gsb_error.h. */
int gsm_device_tick(struct gsm_device *device);

/* Read orders, answer them, send what waits. GSB_OK; GSB_ERROR_CLOCK, at every call while
 * no tick has run for longer than gap_ticks: disconnect the output, do not kick the
 * watchdog; or GSB_ERROR_LINK: open the line anew and call gsm_device_connect. Other errors
 * are told once and need nothing. */
int gsm_device_poll(struct gsm_device *device);

/* Disarm at the next tick, and refuse an order to arm that was given before; for a stop
 * button. From anywhere on this core. Called before gsm_device_tick in the tick's own
 * interrupt for as long as the button is held, it works with a main loop that hangs, and
 * nothing can arm meanwhile. */
void gsm_device_stop(struct gsm_device *device);

#ifdef __cplusplus
}
#endif

#endif
