#include "gsb_link.h"

#include <string.h>

#include "gsb_error.h"
#include "gsb_queue.h"

int gsb_link_init(struct gsb_link *link, const struct gsb_link_type *type, uint32_t cells,
                  uint8_t *in, size_t in_room, uint8_t *out, size_t out_room)
{
    memset(link, 0, sizeof *link);
    link->broken = 1;
    if (!type || !in || !out || in_room < GSB_LINK_IN_MIN || out_room < GSB_LINK_OUT_MIN ||
        cells < 1 || cells > GSB_CELLS_MAX)
        return GSB_ERROR_ARGUMENT;
    link->type = type;
    link->cells = cells;
    link->in = in;
    link->in_room = in_room;
    link->out = out;
    link->out_room = out_room;
    return GSB_OK;
}

int gsb_link_open(struct gsb_link *link)
{
    if (!link->type)
        return GSB_ERROR_ARGUMENT;
    link->opened = 0;
    link->broken = 0;
    link->message_size = 0;
    link->in_size = 0;
    link->out_start = link->out_end = 0;
    return link->type->open(link);
}

int gsb_link_feed(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used)
{
    int found;

    *used = 0;
    if (!link->type || link->broken) {
        *used = size;
        return GSB_ERROR_PROTOCOL;
    }
    found = link->type->feed(link, bytes, size, used);
    if (link->broken)
        link->opened = 0;
    return found;
}

int gsb_link_put(struct gsb_link *link, const uint8_t *sample, size_t size)
{
    if (!link->opened || size > GSB_PAYLOAD_MAX)
        return GSB_ERROR_ARGUMENT;
    return link->type->put(link, sample, size);
}

int gsb_link_greet(struct gsb_link *link)
{
    if (!link->type || link->broken || !link->type->greet)
        return GSB_OK;
    return link->type->greet(link);
}

size_t gsb_link_pending(const struct gsb_link *link, const uint8_t **bytes)
{
    *bytes = link->out + link->out_start;
    return link->out_end - link->out_start;
}

void gsb_link_sent(struct gsb_link *link, size_t count)
{
    size_t waiting = link->out_end - link->out_start;

    link->out_start += count < waiting ? count : waiting;
    if (link->out_start == link->out_end)
        link->out_start = link->out_end = 0;
}

uint8_t *gsb_queue_room(struct gsb_link *link, size_t size)
{
    size_t k, waiting = link->out_end - link->out_start;

    if (link->out_room - waiting < size)
        return 0;
    if (link->out_room - link->out_end < size) {
        /* The places overlap, which memcpy does not allow. */
        for (k = 0; k < waiting; k++)
            link->out[k] = link->out[link->out_start + k];
        link->out_start = 0;
        link->out_end = waiting;
    }
    return link->out + link->out_end;
}

int gsb_queue_bytes(struct gsb_link *link, const uint8_t *bytes, size_t size)
{
    uint8_t *at = gsb_queue_room(link, size);

    if (!at)
        return GSB_ERROR_ROOM;
    memcpy(at, bytes, size);
    link->out_end += size;
    return GSB_OK;
}
