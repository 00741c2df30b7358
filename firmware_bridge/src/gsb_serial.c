/* Framing 1.0 to a host that carries the messages on: a link without I/O. */
#include <string.h>

#include "gsb_error.h"
#include "gsb_queue.h"

static int put_frame(struct gsb_link *link, uint8_t kind, const uint8_t *payload, size_t size)
{
    uint8_t *at = gsb_queue_room(link, GSB_FRAME_SIZE(size));

    if (!at)
        return GSB_ERROR_ROOM;
    link->out_end += (size_t)gsb_frame_encode(kind, payload, size, at, GSB_FRAME_SIZE(size));
    return GSB_OK;
}

static int serial_greet(struct gsb_link *link)
{
    uint8_t payload[16];
    struct gsb_writer to = {0, sizeof payload, 0, 0};

    to.bytes = payload;
    gsb_write_array(&to, 5);
    gsb_write_whole(&to, GSB_FRAMING_MAJOR);
    gsb_write_whole(&to, GSB_FRAMING_MINOR);
    gsb_write_whole(&to, link->cells);
    gsb_write_float(&to, link->interval_us);
    gsb_write_whole(&to, link->features);
    return put_frame(link, GSB_KIND_HELLO, payload, to.at);
}

static int serial_open(struct gsb_link *link)
{
    static const uint8_t end = 0;

    gsb_unframe_begin(&link->unframer, link->in, link->in_room);
    if (gsb_queue_bytes(link, &end, 1))
        return GSB_ERROR_ROOM;
    return serial_greet(link);
}

/* The host's welcome: of this major version and this number of cells, or of no use. */
static int welcome(struct gsb_link *link)
{
    struct gsb_reader in = {0, 0, 0, 0};
    uint64_t major, cells;
    uint32_t items;

    in.bytes = link->message;
    in.size = link->message_size;
    items = gsb_read_array(&in);
    major = gsb_read_whole(&in);
    gsb_read_whole(&in);
    cells = gsb_read_whole(&in);
    if (items < 3 || in.bad)
        return GSB_ERROR_MESSAGE;
    link->opened = major == GSB_FRAMING_MAJOR && cells == link->cells;
    if (!link->opened)
        return GSB_ERROR_PEER;
    return GSB_OPENED;
}

static int frame(struct gsb_link *link)
{
    link->kind = link->unframer.bytes[0];
    link->message = link->unframer.bytes + 1;
    link->message_size = (size_t)(link->unframer.size - 3);
    switch (link->kind) {
    case GSB_KIND_ANSWER:
        /* Before the handshake is done it is one to samples of another time. */
        return link->opened ? GSB_MESSAGE : GSB_NOTHING;
    case GSB_KIND_WELCOME:
        return welcome(link);
    case GSB_KIND_BYE:
        link->opened = 0;
        serial_greet(link);
        return GSB_CLOSED;
    default:
        return GSB_CONTROL;
    }
}

static int serial_feed(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used)
{
    int found = GSB_NOTHING;

    while (*used < size && found == GSB_NOTHING) {
        found = gsb_unframe(&link->unframer, bytes[(*used)++]);
        if (found == 1)
            found = frame(link);
    }
    return found;
}

static int serial_put(struct gsb_link *link, const uint8_t *sample, size_t size)
{
    return put_frame(link, GSB_KIND_SAMPLE, sample, size);
}

int gsb_link_put_frame(struct gsb_link *link, uint8_t kind, const uint8_t *payload, size_t size)
{
    if (link->type != &gsb_serial || link->broken || size > GSB_PAYLOAD_MAX)
        return GSB_ERROR_ARGUMENT;
    return put_frame(link, kind, payload, size);
}

const struct gsb_link_type gsb_serial = {serial_open, serial_feed, serial_put, serial_greet};
