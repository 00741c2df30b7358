/* Within the library: bytes on their way into a link's outgoing memory. */
#ifndef GSB_QUEUE_H
#define GSB_QUEUE_H

#include "gsb_link.h"

/* Where `size` more bytes may be written, or null; link->out_end moves only when they are. */
uint8_t *gsb_queue_room(struct gsb_link *link, size_t size);

/* Put bytes there: GSB_OK, or GSB_ERROR_ROOM and none are put. */
int gsb_queue_bytes(struct gsb_link *link, const uint8_t *bytes, size_t size);

#endif
