/* ZMTP 3.1 with the NULL mechanism, as DEALER: a link without I/O.
 *
 * Source: ZMTP 3.1, ZeroMQ RFC 37. A frame's head and body are put together as they come,
 * so that no more than one message is ever kept.
 */
#include <string.h>

#include "gsb_error.h"
#include "gsb_queue.h"

enum { PHASE_GREETING, PHASE_READY, PHASE_OPEN };
enum { MORE = 1, LONG = 2, COMMAND = 4 };
enum { GREETING_SIZE = 64, MECHANISM_AT = 12, MECHANISM_END = 32, READY_SIZE = 43 };
enum { CONTEXT_MAX = 16, LONGEST_FRAME = 1 << 20 };

static const uint8_t greeting[MECHANISM_AT + 4] = {
    0xFF, 0, 0, 0, 0, 0, 0, 0, 0, 0x7F, 3, 1, 'N', 'U', 'L', 'L'};

static const uint8_t ready[READY_SIZE] = {
    COMMAND, 41,  5,   'R', 'E', 'A', 'D', 'Y', 11,  'S', 'o', 'c', 'k', 'e', 't',
    '-',     'T', 'y', 'p', 'e', 0,   0,   0,   6,   'D', 'E', 'A', 'L', 'E', 'R',
    8,       'I', 'd', 'e', 'n', 't', 'i', 't', 'y', 0,   0,   0,   0};

static int fail(struct gsb_link *link, int error)
{
    link->broken = 1;
    return error;
}

static int zmtp_open(struct gsb_link *link)
{
    uint8_t *at = gsb_queue_room(link, GREETING_SIZE);

    link->phase = PHASE_GREETING;
    link->head_size = 0;
    link->frames = 0;
    link->unfit = 0;
    link->left = 0;
    if (!at)
        return GSB_ERROR_ROOM;
    memset(at, 0, GREETING_SIZE);
    memcpy(at, greeting, sizeof greeting);
    link->out_end += GREETING_SIZE;
    return GSB_OK;
}

/* One byte of the other end's greeting, judged as it comes. */
static int greeting_byte(struct gsb_link *link, uint8_t byte)
{
    size_t at = link->in_size++;

    if ((at == 0 && byte != 0xFF) || (at == 9 && byte != 0x7F) || (at == 10 && byte < 3))
        return fail(link, GSB_ERROR_PROTOCOL);
    if (at >= MECHANISM_AT && at < MECHANISM_END &&
        byte != (at < sizeof greeting ? greeting[at] : 0))
        return fail(link, GSB_ERROR_PEER);
    if (link->in_size < GREETING_SIZE)
        return GSB_NOTHING;
    link->in_size = 0;
    link->phase = PHASE_READY;
    if (gsb_queue_bytes(link, ready, sizeof ready))
        return fail(link, GSB_ERROR_ROOM);
    return GSB_NOTHING;
}

/* Whether a command's body begins with a name, its length before it. */
static int named(const struct gsb_link *link, const char *name, size_t size)
{
    return link->in_size >= size && memcmp(link->in, name, size) == 0;
}

/* Whether bytes are a word, whatever the case of their letters. */
static int same_letters(const uint8_t *bytes, const char *word, size_t size)
{
    while (size--) {
        uint8_t letter = bytes[size];
        if (letter >= 'A' && letter <= 'Z')
            letter = (uint8_t)(letter + 32);
        if (letter != (uint8_t)word[size])
            return 0;
    }
    return 1;
}

/* READY's properties must be whole and name a ROUTER. */
static int router(const uint8_t *at, size_t size)
{
    int found = 0;

    while (size) {
        size_t name = at[0], value;
        if (name == 0 || size < 5 + name)
            return 0;
        value = (size_t)at[1 + name] << 24 | (size_t)at[2 + name] << 16 |
                (size_t)at[3 + name] << 8 | at[4 + name];
        if (size - 5 - name < value)
            return 0;
        if (name == 11 && same_letters(at + 1, "socket-type", 11)) {
            if (value != 6 || memcmp(at + 16, "ROUTER", 6) != 0)
                return 0;
            found = 1;
        }
        at += 5 + name + value;
        size -= 5 + name + value;
    }
    return found;
}

static int ready_command(struct gsb_link *link)
{
    if (!named(link, "\5READY", 6) || !router(link->in + 6, link->in_size - 6))
        return fail(link, GSB_ERROR_PEER);
    link->phase = PHASE_OPEN;
    link->opened = 1;
    return GSB_OPENED;
}

static int ping(struct gsb_link *link)
{
    uint8_t pong[2 + 5 + CONTEXT_MAX] = {COMMAND, 0, 4, 'P', 'O', 'N', 'G'};
    size_t context = link->in_size - 7;

    if (link->in_size < 7 || context > CONTEXT_MAX)
        return fail(link, GSB_ERROR_PROTOCOL);
    pong[1] = (uint8_t)(5 + context);
    memcpy(pong + 7, link->in + 7, context);
    if (gsb_queue_bytes(link, pong, 7 + context))
        return fail(link, GSB_ERROR_ROOM);
    return GSB_NOTHING;
}

static int command(struct gsb_link *link)
{
    size_t name = link->in_size ? link->in[0] : 0;

    if (link->phase == PHASE_READY)
        return ready_command(link);
    if (name == 0 || name >= link->in_size || named(link, "\5ERROR", 6))
        return fail(link, GSB_ERROR_PROTOCOL);
    return named(link, "\4PING", 5) ? ping(link) : GSB_NOTHING;
}

/* A message's frame is whole: an envelope, the body, or one too many. */
static int message_frame(struct gsb_link *link)
{
    uint8_t more = link->head[0] & MORE, unfit = link->unfit;

    if (link->frames == 0 && more && link->in_size == 0)
        return GSB_NOTHING; /* an envelope says nothing: the body is still to come */
    if (more) {
        link->frames = 2;
        return GSB_NOTHING;
    }
    unfit = unfit || link->frames;
    link->frames = 0;
    link->unfit = 0;
    if (unfit)
        return GSB_ERROR_MESSAGE;
    link->message = link->in;
    link->message_size = link->in_size;
    return GSB_MESSAGE;
}

static int frame_done(struct gsb_link *link)
{
    int found = link->head[0] & COMMAND ? command(link) : message_frame(link);

    link->head_size = 0;
    link->in_size = 0;
    return found;
}

/* A frame's head is whole: how much follows, and whether it may. */
static int frame_begun(struct gsb_link *link)
{
    uint8_t flags = link->head[0];
    uint64_t size = link->head[1];
    int k, is_command = flags & COMMAND;

    if (flags & LONG)
        for (k = 2; k < 9; k++)
            size = size >> 48 ? size : size << 8 | link->head[k];
    if (flags > 7 || (is_command && flags & MORE) || (!is_command && link->phase == PHASE_READY))
        return fail(link, GSB_ERROR_PROTOCOL);
    if (size > LONGEST_FRAME || (is_command && (size == 0 || size > link->in_room)))
        return fail(link, GSB_ERROR_PROTOCOL);
    if (size > link->in_room)
        link->unfit = 1;
    link->left = (uint32_t)size;
    return size ? GSB_NOTHING : frame_done(link);
}

static int head_byte(struct gsb_link *link, uint8_t byte)
{
    link->head[link->head_size++] = byte;
    if (link->head_size < (link->head[0] & LONG ? 9 : 2))
        return GSB_NOTHING;
    return frame_begun(link);
}

/* Bytes of a frame's body: all that have come and belong to it. */
static int body_bytes(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used)
{
    size_t count = size < link->left ? size : link->left;
    size_t room = link->in_room - link->in_size;
    size_t kept = count < room ? count : room;

    memcpy(link->in + link->in_size, bytes, kept);
    link->in_size += kept;
    link->left -= (uint32_t)count;
    *used += count;
    return link->left ? GSB_NOTHING : frame_done(link);
}

static int zmtp_feed(struct gsb_link *link, const uint8_t *bytes, size_t size, size_t *used)
{
    int found = GSB_NOTHING;

    while (*used < size && found == GSB_NOTHING) {
        if (link->phase == PHASE_GREETING)
            found = greeting_byte(link, bytes[(*used)++]);
        else if (link->left == 0)
            found = head_byte(link, bytes[(*used)++]);
        else
            found = body_bytes(link, bytes + *used, size - *used, used);
    }
    return found;
}

static int zmtp_put(struct gsb_link *link, const uint8_t *sample, size_t size)
{
    uint8_t *at = gsb_queue_room(link, 2 + size);

    if (!at)
        return GSB_ERROR_ROOM;
    at[0] = 0;
    at[1] = (uint8_t)size;
    memcpy(at + 2, sample, size);
    link->out_end += 2 + size;
    return GSB_OK;
}

const struct gsb_link_type gsb_zmtp = {zmtp_open, zmtp_feed, zmtp_put, 0};
