/* The two messages as MessagePack bytes, both ways. No link, no state.
 *
 * Currents and voltages are float32 here. On the wire an answer's currents are float64,
 * rounded to nearest when decoded; no double arithmetic is used. Decoders take every
 * width that a conforming encoder may choose, and read nothing beyond the size given.
 */
#ifndef GSB_MESSAGE_H
#define GSB_MESSAGE_H

#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

/* Most cells of one rig. */
#define GSB_CELLS_MAX 8
/* Room that always takes a sample or an answer of GSB_CELLS_MAX cells as encoded here. */
#define GSB_MESSAGE_MAX 112
/* Stands for nil in a sample's in_force and lag_us and in an answer's seq. */
#define GSB_NIL (-1)

/* Bits of an answer's flags. */
#define GSB_LIVE 1
#define GSB_CLIPPED 2
#define GSB_LATE 4
#define GSB_TRIPPED 8
#define GSB_GAP 16
#define GSB_REPEAT 32
#define GSB_REFUSED 64
#define GSB_MALFORMED 128

struct gsb_sample {
    int64_t seq;       /* number of the tick, from 0 */
    uint64_t t_us;     /* the rig's clock at the sample, us; fractions are cut when decoded */
    int64_t in_force;  /* seq of the answer whose current flowed just before, or GSB_NIL */
    int64_t lag_us;    /* from that answer's sample to its current at the output, or GSB_NIL */
    uint32_t cells;    /* 1 to GSB_CELLS_MAX */
    float v_mv[GSB_CELLS_MAX]; /* measured voltages; may be NaN or infinite */
};

struct gsb_answer {
    int64_t seq;          /* of the sample answered, or GSB_NIL in [nil, 128, 0] */
    uint64_t flags;       /* the bits above; others are to be ignored */
    uint64_t service_nsec; /* how long the server took, ns */
    uint32_t cells;       /* 0 in [nil, 128, 0] */
    float i_pa[GSB_CELLS_MAX]; /* may come out infinite where float32 cannot hold it */
};

/* Encode a sample: whole numbers in their shortest form, voltages as float32.
 * Returns the size in bytes, GSB_ERROR_ROOM, or GSB_ERROR_ARGUMENT (cells, negative seq). */
int gsb_sample_encode(const struct gsb_sample *sample, uint8_t *out, size_t room);

/* Decode a sample of so many cells. GSB_OK or GSB_ERROR_MESSAGE, which may leave the
 * sample partly written. For servers and tests; a rig does not need it. */
int gsb_sample_decode(const uint8_t *bytes, size_t size, uint32_t cells,
                      struct gsb_sample *sample);

/* Encode an answer, currents as float64. For servers and tests. Returns as above; with
 * cells 0, [nil, flags, service_nsec]. */
int gsb_answer_encode(const struct gsb_answer *answer, uint8_t *out, size_t room);

/* Decode an answer of so many cells, or the short malformed one. GSB_OK or
 * GSB_ERROR_MESSAGE, which may leave the answer partly written. */
int gsb_answer_decode(const uint8_t *bytes, size_t size, uint32_t cells,
                      struct gsb_answer *answer);

/* The pieces, for control frames with payloads of their own (SPEC.md). The first failure
 * sets a flag and everything after it does nothing, so a chain of calls is checked once;
 * a reader's values are 0 from then on. */
struct gsb_reader {
    const uint8_t *bytes;
    size_t size, at;
    int bad; /* set by the first failure; nothing is read after it */
};
struct gsb_writer {
    uint8_t *bytes;
    size_t room, at;
    int full; /* set by the first failure; nothing is written after it */
};

uint32_t gsb_read_array(struct gsb_reader *in);            /* number of items */
uint64_t gsb_read_whole(struct gsb_reader *in);            /* 0 to 2**63 - 1 */
float gsb_read_number(struct gsb_reader *in);              /* any integer or float */
uint32_t gsb_read_text(struct gsb_reader *in, const uint8_t **text); /* its bytes; not ended by 0 */
void gsb_write_array(struct gsb_writer *out, uint32_t items);        /* 0 to 15 */
void gsb_write_whole(struct gsb_writer *out, uint64_t value);
void gsb_write_float(struct gsb_writer *out, float value);           /* as float32 */
void gsb_write_text(struct gsb_writer *out, const uint8_t *text, uint32_t size); /* 0 to 31 */

#ifdef __cplusplus
}
#endif

#endif
