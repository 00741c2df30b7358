/* The rig: which current flows, and what a sample may say of it. No link, no converter.
 *
 *   state       what ends it                    the next      output while in the state
 *   idle        the stream is open              greeting      0 pA
 *   greeting    the handshake is done           running       0 pA
 *   running     no valid answer: silence_us     silent        the answers' current
 *   silent      a valid answer                  running       0 pA
 *   any         the link is lost                idle
 *   any         the host says goodbye           greeting
 *
 * Current flows in `running` alone. Whatever a fault is, it takes every cell to 0 pA at
 * once, and only the answer to a sample taken after the fault brings current back. An
 * answer that is not live takes every cell to 0 pA at once as well.
 *
 * Time is the caller's microseconds. It must not go backwards, nor stand still from one
 * tick to the next: either is a fault. A clock that is slow is held against the ticks.
 */
#ifndef GSB_RIG_H
#define GSB_RIG_H

#include "gsb_message.h"

#ifdef __cplusplus
extern "C" {
#endif

enum gsb_state { GSB_IDLE = 0, GSB_GREETING = 1, GSB_RUNNING = 2, GSB_SILENT = 3 };

/* Limits of one cell's output and input. */
struct gsb_cell_limits {
    float current_pa;     /* largest magnitude, pA; above 0, finite */
    float slew_pa_per_ms; /* fastest change, pA/ms; above 0, finite. A tick that is late, or
                             answers that are missing, allow no more than one tick's change.
                             It slows live answers only; everything else is at 0 at once */
    float window_low_mv;  /* a voltage below this is a fault; inside the converter's range */
    float window_high_mv; /* a voltage above this is a fault */
};

struct gsb_rig_config {
    uint32_t cells;       /* 1 to GSB_CELLS_MAX; as many as the server's rig file has */
    float interval_us;    /* tick of the sample clock, us; 1 to 1e6, the server's interval_us */
    uint32_t on_arrival;  /* 0: an answer flows from the next tick; 1: from its arrival */
    uint32_t silence_us;  /* no valid answer for this long, or for as many ticks as it has and
                             one more, whatever the clock says: 0 pA; 1 to 1e7 us */
    uint32_t greeting_us; /* a handshake longer than this fails; 0: it may take for ever */
    struct gsb_cell_limits cell[GSB_CELLS_MAX];
};

/* When a sample was taken. A rig keeps as many as the caller gives it room for. */
struct gsb_taken {
    uint32_t seq; /* low bits */
    uint32_t t_us;
};

/* Counters from the start; they wrap. */
struct gsb_counters {
    uint32_t samples;  /* taken */
    uint32_t skipped;  /* ticks for which none was, because the clock had gone past them */
    uint32_t answers;  /* valid ones */
    uint32_t ignored;  /* old, repeated, or from before a fault */
    uint32_t overtaken; /* valid ones that a newer one replaced before their tick */
    uint32_t clipped;  /* currents that this rig's own limits changed */
    uint32_t faults;   /* everything that took the output to 0 pA */
    uint32_t silences; /* of these, silences */
};

struct gsb_rig {
    struct gsb_rig_config config;
    struct gsb_taken *taken;
    uint32_t taken_mask;
    uint32_t silence_ticks; /* ticks without a valid answer that are no silence yet */
    uint32_t unanswered;    /* ticks since the last valid answer */
    int32_t last_error;     /* the newest fault (enum gsb_error), 0 before the first */
    uint8_t state;          /* enum gsb_state */
    uint8_t started;        /* whether a tick has been */
    uint8_t waiting;        /* whether an answer waits for its tick */
    uint8_t write_due;      /* whether i_pa has not been confirmed as written */
    uint8_t shaped;         /* whether i_pa is what an answer asked for, unclipped */
    uint64_t now_us;
    uint64_t since_us;      /* when the state was entered */
    uint64_t heard_us;      /* the last valid answer */
    uint64_t changed_us;    /* when i_pa was last decided */
    uint64_t ticked_us;     /* the last tick */
    uint64_t due_us;        /* the next tick by the sample clock */
    uint32_t due_nsec;      /* and its fraction, 0 to 999 */
    int64_t next_seq;
    int64_t valid_from;     /* first sample after the last fault */
    int64_t newest;         /* newest valid answer, or GSB_NIL */
    int64_t in_force;       /* what flows, confirmed; or GSB_NIL */
    int64_t lag_us;
    int64_t applied;        /* answer that i_pa is from, or GSB_NIL */
    uint32_t applied_t_us;  /* when its sample was taken, low bits */
    struct gsb_answer next; /* waits for its tick */
    uint32_t next_t_us;     /* when its sample was taken, low bits */
    float i_pa[GSB_CELLS_MAX];
    struct gsb_counters counters;
};

/* Make a rig, idle, 0 pA. `taken` is the caller's memory for the times of `count` samples:
 * a power of two from 2; an answer to a sample longer ago than that is ignored, so take
 * silence_us / interval_us or more. GSB_OK or GSB_ERROR_ARGUMENT, and then the rig stays
 * idle for ever. */
int gsb_rig_init(struct gsb_rig *rig, const struct gsb_rig_config *config,
                 struct gsb_taken *taken, uint32_t count);

/* The stream has been opened; the handshake is done; something failed, and the rig goes on;
 * the link has ended, whatever the error, and the rig is idle. */
int gsb_rig_greet(struct gsb_rig *rig, uint64_t now_us);
int gsb_rig_run(struct gsb_rig *rig, uint64_t now_us);
int gsb_rig_fault(struct gsb_rig *rig, uint64_t now_us, int error);
int gsb_rig_lose(struct gsb_rig *rig, uint64_t now_us, int error);

/* A tick of the sample clock: makes the sample to send from the voltages just measured,
 * and with next-tick lets the waiting answer flow from now on. What the sample says of the
 * current is what flowed when the voltages were measured.
 *
 * seq follows the clock: ticks that it went past are counted and left out. The schedule
 * that a tick is held against moves by an eighth of what each is off, so that neither
 * jitter nor the drift of two oscillators ever adds up to a tick.
 *
 * GSB_OK, or a fault; GSB_ERROR_CLOCK when no time has passed since the tick before. The
 * sample is to be sent in either case while the rig is running or silent. */
int gsb_rig_tick(struct gsb_rig *rig, uint64_t now_us, const float *v_mv,
                 struct gsb_sample *sample);

/* An answer has come. GSB_OK, GSB_IGNORED or a fault, among them those of gsb_rig_poll. One
 * that is not live is obeyed at once, by a rig with next-tick also, where a current flows. */
int gsb_rig_answer(struct gsb_rig *rig, uint64_t now_us, const struct gsb_answer *answer);

/* Nothing has come: call it as often as possible. GSB_OK, or GSB_ERROR_SILENCE or
 * GSB_ERROR_GREETING when the time has just run out. */
int gsb_rig_poll(struct gsb_rig *rig, uint64_t now_us);

/* After every call above: while this is 1, write gsb_rig_current_pa to the converter and
 * say when that was done. Only then is it in force, and the lag is up to then. An answer
 * of which any cell's current had to be limited here is not reported as in force. */
int gsb_rig_write_due(const struct gsb_rig *rig);
const float *gsb_rig_current_pa(const struct gsb_rig *rig);
void gsb_rig_wrote(struct gsb_rig *rig, uint64_t now_us);

enum gsb_state gsb_rig_state(const struct gsb_rig *rig);

/* A state's name, for a display. */
const char *gsb_state_name(enum gsb_state state);

#ifdef __cplusplus
}
#endif

#endif
