/* Serial framing 1.0: COBS and CRC-16, bytes to frames and back. SPEC.md has the bytes.
 *
 * A frame is COBS(kind, payload, check) and then a byte 0. COBS: Cheshire and Baker 1999.
 * The check is CRC-16 with polynomial 0x1021, initial value 0xFFFF, not reflected, nothing
 * added at the end (catalogues: CRC-16/CCITT-FALSE, check value 0x29B1), high byte first.
 */
#ifndef GSB_FRAME_H
#define GSB_FRAME_H

#include <stddef.h>
#include <stdint.h>

#ifdef __cplusplus
extern "C" {
#endif

#define GSB_FRAMING_MAJOR 1
#define GSB_FRAMING_MINOR 0

/* Longest payload of a frame, bytes; with kind and check it is one COBS group. */
#define GSB_PAYLOAD_MAX 250
/* Bytes on the line for a payload: kind, check, one code byte, the 0 at the end. */
#define GSB_FRAME_SIZE(payload) ((payload) + 5)
#define GSB_FRAME_MAX GSB_FRAME_SIZE(GSB_PAYLOAD_MAX)

/* Kinds of frames. A receiver passes over any it does not know. */
enum gsb_kind {
    GSB_KIND_HELLO = 0x01,     /* device: who I am */
    GSB_KIND_WELCOME = 0x02,   /* host: the loop is open */
    GSB_KIND_BYE = 0x03,       /* either: the loop is closed; the device says hello anew */
    GSB_KIND_SAMPLE = 0x10,    /* device */
    GSB_KIND_ANSWER = 0x11,    /* host */
    GSB_KIND_PARAMETER = 0x20, /* host: set a parameter of the model on the device */
    GSB_KIND_ARM = 0x21,       /* host */
    GSB_KIND_DISARM = 0x22,    /* host */
    GSB_KIND_ALIVE = 0x23,     /* host: the supervisor is still there */
    GSB_KIND_ASK = 0x24,       /* host: which parameter has this index? */
    GSB_KIND_DONE = 0x28,      /* device: what came of an order */
    GSB_KIND_IS = 0x29,        /* device: a parameter's name and value */
    GSB_KIND_TRACE = 0x2A      /* device: one decimated sample of the model on it */
};

/* CRC-16 as above, of `size` bytes, going on from `crc`; begin with GSB_CRC_INITIAL. */
#define GSB_CRC_INITIAL 0xFFFFu
uint16_t gsb_crc16(uint16_t crc, const uint8_t *bytes, size_t size);

/* COBS of any length, without the 0 at the end. `out` must not overlap and needs
 * size + size / 254 + 1 bytes. Size written, or GSB_ERROR_ROOM. */
int gsb_cobs_encode(const uint8_t *bytes, size_t size, uint8_t *out, size_t room);

/* One frame with its 0 at the end. Size written, GSB_ERROR_ROOM, or GSB_ERROR_ARGUMENT
 * for a payload over GSB_PAYLOAD_MAX. */
int gsb_frame_encode(uint8_t kind, const uint8_t *payload, size_t size, uint8_t *out,
                     size_t room);

/* A frame in the making. Memory for `bytes` is the caller's, GSB_PAYLOAD_MAX + 3 bytes. */
struct gsb_unframer {
    uint8_t *bytes;  /* kind, payload and check as far as they have come */
    uint16_t room;   /* of `bytes` */
    uint16_t size;   /* of what has come */
    uint8_t left;    /* bytes of the present COBS group that are still to come */
    uint8_t zero;    /* whether a 0 stands after the present group */
    uint8_t begun;   /* whether anything has come since the last 0 */
    uint8_t spoilt;  /* whether the frame is past saving; it is dropped at its 0 */
};

void gsb_unframe_begin(struct gsb_unframer *unframer, uint8_t *bytes, size_t room);

/* Take one byte. 0: nothing whole yet. 1: a frame is whole; its kind is bytes[0], its
 * payload bytes + 1, of size - 3, until the next call. GSB_ERROR_FRAME: a damaged frame
 * has ended; the next byte begins another. */
int gsb_unframe(struct gsb_unframer *unframer, uint8_t byte);

#ifdef __cplusplus
}
#endif

#endif
