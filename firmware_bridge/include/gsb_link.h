/* A link to the server, without I/O: bytes in, events out, and bytes to be sent.
 *
 * Two kinds. gsb_zmtp: ZMTP 3.1 with the NULL mechanism as DEALER, straight to the
 * server's loop socket over any stream (TCP, or a serial line that ends in one).
 * gsb_serial: framing 1.0 to a host that runs `gatestep bridge`. A program that names
 * only one of the two has only that one linked in.
 */
#ifndef GSB_LINK_H
#define GSB_LINK_H

#include "gsb_frame.h"
#include "gsb_message.h"

#ifdef __cplusplus
extern "C" {
#endif

/* Least room for what comes in, and for what waits to be sent. */
#define GSB_LINK_IN_MIN 253
#define GSB_LINK_OUT_MIN 256

/* What gsb_link_feed found. */
enum gsb_event {
    GSB_NOTHING = 0, /* all bytes are taken and nothing is whole */
    GSB_OPENED = 1,  /* the handshake is done: samples may be sent */
    GSB_MESSAGE = 2, /* an answer stands in link->message, of link->message_size bytes */
    GSB_CLOSED = 3,  /* the host said goodbye in order; the handshake begins again */
    GSB_CONTROL = 4  /* another frame, of link->kind, stands where an answer would */
};

struct gsb_link;

struct gsb_link_type {
    int (*open)(struct gsb_link *link);
    int (*feed)(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used);
    int (*put)(struct gsb_link *link, const uint8_t *sample, size_t size);
    int (*greet)(struct gsb_link *link);
};

extern const struct gsb_link_type gsb_zmtp;
extern const struct gsb_link_type gsb_serial;

struct gsb_link {
    const struct gsb_link_type *type;
    uint32_t cells;         /* what a hello tells, and an answer must have */
    float interval_us;      /* what a hello tells; gsb_device_init sets it */
    uint8_t features;       /* likewise: 1 samples for a server, 2 a model on the device */
    const uint8_t *message; /* of the event before */
    size_t message_size;
    uint8_t kind;           /* of a frame; serial only */
    uint8_t opened;         /* whether the handshake is done */
    uint8_t broken;         /* whether the link must be opened anew */

    uint8_t *in;            /* the caller's memory */
    uint8_t *out;
    size_t in_room, out_room;
    size_t in_size;         /* of what is being put together */
    size_t out_start, out_end; /* of what waits to be sent */

    /* ZMTP: the frame being read. */
    uint8_t head[9];
    uint8_t head_size;
    uint8_t phase;
    uint8_t frames;         /* of the message so far; 2 stands for more */
    uint8_t unfit;          /* whether the message so far can be no answer */
    uint32_t left;          /* bytes of the frame still to come */
    /* Serial. */
    struct gsb_unframer unframer;
};

/* Give a link its memory. GSB_OK, or GSB_ERROR_ARGUMENT when it is too little (see
 * GSB_LINK_IN_MIN, GSB_LINK_OUT_MIN) or cells are not 1 to GSB_CELLS_MAX. */
int gsb_link_init(struct gsb_link *link, const struct gsb_link_type *type, uint32_t cells,
                  uint8_t *in, size_t in_room, uint8_t *out, size_t out_room);

/* Begin: forget what was, put the greeting where it is sent from. For a stream that has
 * just been opened. */
int gsb_link_open(struct gsb_link *link);

/* Read on in bytes that have come. An event (enum gsb_event) or an error; `used` tells how
 * many bytes it took, and the rest are to be fed again until GSB_NOTHING. After an error
 * with link->broken set the link must be opened anew; else go on. */
int gsb_link_feed(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used);

/* Put a sample's bytes where they are sent from. GSB_OK, GSB_ERROR_ROOM (nothing is put),
 * GSB_ERROR_ARGUMENT before the handshake is done or over GSB_PAYLOAD_MAX bytes. */
int gsb_link_put(struct gsb_link *link, const uint8_t *sample, size_t size);

/* Put a control frame there; serial only. As above. */
int gsb_link_put_frame(struct gsb_link *link, uint8_t kind, const uint8_t *payload, size_t size);

/* Say hello again; call it now and then while the handshake lasts. Nothing with ZMTP. */
int gsb_link_greet(struct gsb_link *link);

/* What waits to be sent: its first byte and how many; after sending, say how many went. */
size_t gsb_link_pending(const struct gsb_link *link, const uint8_t **bytes);
void gsb_link_sent(struct gsb_link *link, size_t count);

#ifdef __cplusplus
}
#endif

#endif
