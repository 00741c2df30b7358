#include "gsb_frame.h"

#include <string.h>

#include "gsb_error.h"

uint16_t gsb_crc16(uint16_t crc, const uint8_t *bytes, size_t size)
{
    while (size--) {
        /* A byte at once without a table: the polynomial's terms x^12, x^5 and 1. */
        uint16_t x = (uint16_t)((crc >> 8) ^ *bytes++);
        x = (uint16_t)(x ^ (x >> 4));
        crc = (uint16_t)((crc << 8) ^ (x << 12) ^ (x << 5) ^ x);
    }
    return crc;
}

/* COBS as it is written: where the present group's code goes, and where the next byte. */
struct stuffing {
    uint8_t *out;
    size_t room, code, at;
    int full;
};

static void stuff(struct stuffing *to, const uint8_t *bytes, size_t size)
{
    while (size--) {
        uint8_t byte = *bytes++;
        /* A full group is closed only when more follows: COBS ends without an empty one. */
        if (to->at - to->code == 255) {
            to->out[to->code] = 255;
            to->code = to->at++;
        }
        if (to->at >= to->room) {
            to->full = 1;
            return;
        }
        if (byte) {
            to->out[to->at++] = byte;
        } else {
            to->out[to->code] = (uint8_t)(to->at - to->code);
            to->code = to->at++;
        }
    }
}

static int stuffed(struct stuffing *to)
{
    if (to->full || to->at > to->room)
        return GSB_ERROR_ROOM;
    to->out[to->code] = (uint8_t)(to->at - to->code);
    return (int)to->at;
}

int gsb_cobs_encode(const uint8_t *bytes, size_t size, uint8_t *out, size_t room)
{
    struct stuffing to = {0, 0, 0, 1, 0};

    if (room < 1)
        return GSB_ERROR_ROOM;
    to.out = out;
    to.room = room;
    stuff(&to, bytes, size);
    return stuffed(&to);
}

int gsb_frame_encode(uint8_t kind, const uint8_t *payload, size_t size, uint8_t *out,
                     size_t room)
{
    struct stuffing to = {0, 0, 0, 1, 0};
    uint16_t crc = gsb_crc16(GSB_CRC_INITIAL, &kind, 1);
    uint8_t check[2];

    if (size > GSB_PAYLOAD_MAX)
        return GSB_ERROR_ARGUMENT;
    if (room < GSB_FRAME_SIZE(size))
        return GSB_ERROR_ROOM;
    crc = gsb_crc16(crc, payload, size);
    check[0] = (uint8_t)(crc >> 8);
    check[1] = (uint8_t)crc;
    to.out = out;
    to.room = room - 1;
    stuff(&to, &kind, 1);
    stuff(&to, payload, size);
    stuff(&to, check, 2);
    size = (size_t)stuffed(&to);
    out[size] = 0;
    return (int)size + 1;
}

void gsb_unframe_begin(struct gsb_unframer *unframer, uint8_t *bytes, size_t room)
{
    memset(unframer, 0, sizeof *unframer);
    unframer->bytes = bytes;
    unframer->room = (uint16_t)(room > GSB_PAYLOAD_MAX + 3 ? GSB_PAYLOAD_MAX + 3 : room);
}

static void keep(struct gsb_unframer *unframer, uint8_t byte)
{
    if (unframer->size < unframer->room)
        unframer->bytes[unframer->size++] = byte;
    else
        unframer->spoilt = 1;
}

static int ended(struct gsb_unframer *unframer)
{
    uint8_t begun = unframer->begun;
    int sound = !unframer->spoilt && unframer->left == 0 && unframer->size >= 3;

    /* The check of a message with its own check behind it is 0. */
    sound = sound && gsb_crc16(GSB_CRC_INITIAL, unframer->bytes, unframer->size) == 0;
    unframer->begun = unframer->left = unframer->zero = unframer->spoilt = 0;
    if (!begun)
        return 0;
    return sound ? 1 : GSB_ERROR_FRAME;
}

int gsb_unframe(struct gsb_unframer *unframer, uint8_t byte)
{
    if (byte == 0)
        return ended(unframer);
    if (!unframer->begun) {
        unframer->begun = 1;
        unframer->size = 0;
    }
    if (unframer->left) {
        unframer->left--;
        keep(unframer, byte);
        return 0;
    }
    if (unframer->zero)
        keep(unframer, 0);
    unframer->left = (uint8_t)(byte - 1);
    unframer->zero = byte != 255;
    return 0;
}
