#include "gsb_message.h"

#include "gsb_bits.h"
#include "gsb_error.h"

#define WHOLE_MAX (UINT64_MAX >> 1)

/* ---- reading ---- */

static uint64_t take(struct gsb_reader *in, uint32_t count)
{
    uint64_t value = 0;
    if (in->bad || in->size - in->at < count) {
        in->bad = 1;
        return 0;
    }
    while (count--)
        value = (value << 8) | in->bytes[in->at++];
    return value;
}

static uint8_t peek(const struct gsb_reader *in)
{
    /* 0xC1 is the one byte that MessagePack never uses. */
    return !in->bad && in->at < in->size ? in->bytes[in->at] : 0xC1;
}

static uint32_t width(uint8_t kind)
{
    return kind < 0xCC ? 4u << (kind - 0xCA) : 1u << ((kind - 0xCC) & 3);
}

/* The bits of an integer or float and what kind it is: 'u' unsigned, 'i' negative, 'f'
 * float64. A float32 is widened. 0 when it is none. */
static char number(struct gsb_reader *in, uint64_t *bits)
{
    uint8_t kind = (uint8_t)take(in, 1);
    uint32_t count;

    *bits = kind;
    if (in->bad)
        return 0;
    if (kind < 0x80)
        return 'u';
    if (kind >= 0xE0) {
        *bits = UINT64_MAX - (0xFFu - kind);
        return 'i';
    }
    if (kind < 0xCA || kind > 0xD3) {
        in->bad = 1;
        return 0;
    }
    count = width(kind);
    *bits = take(in, count);
    if (in->bad)
        return 0;
    if (kind == 0xCA)
        *bits = gsb_widen(gsb_float_of((uint32_t)*bits));
    if (kind <= 0xCB)
        return 'f';
    if (kind <= 0xCF || !((*bits >> (8 * count - 1)) & 1))
        return 'u';
    if (count < 8)
        *bits |= UINT64_MAX << (8 * count);
    return 'i';
}

uint32_t gsb_read_array(struct gsb_reader *in)
{
    uint8_t kind = (uint8_t)take(in, 1);
    if (!in->bad && (kind & 0xF0) == 0x90)
        return kind & 0x0Fu;
    if (!in->bad && kind == 0xDC)
        return (uint32_t)take(in, 2);
    if (!in->bad && kind == 0xDD)
        return (uint32_t)take(in, 4);
    in->bad = 1;
    return 0;
}

uint64_t gsb_read_whole(struct gsb_reader *in)
{
    uint64_t bits;
    if (number(in, &bits) == 'u' && bits <= WHOLE_MAX)
        return bits;
    in->bad = 1;
    return 0;
}

float gsb_read_number(struct gsb_reader *in)
{
    uint64_t bits;
    switch (number(in, &bits)) {
    case 'u':
        return (float)bits;
    case 'i':
        return -(float)(UINT64_MAX - bits + 1);
    case 'f':
        return gsb_narrow(bits);
    default:
        return 0.0f;
    }
}

uint32_t gsb_read_text(struct gsb_reader *in, const uint8_t **text)
{
    uint8_t kind = (uint8_t)take(in, 1);
    uint32_t size = 0;

    if (!in->bad && (kind & 0xE0) == 0xA0)
        size = kind & 0x1Fu;
    else if (!in->bad && kind >= 0xD9 && kind <= 0xDB)
        size = (uint32_t)take(in, 1u << (kind - 0xD9));
    else
        in->bad = 1;
    if (in->bad || in->size - in->at < size) {
        in->bad = 1;
        return 0;
    }
    *text = in->bytes + in->at;
    in->at += size;
    return size;
}

/* A time from 0 as a whole number; fractions are cut. */
static uint64_t read_time(struct gsb_reader *in)
{
    uint64_t bits;
    int ok = 1;
    char kind = number(in, &bits);

    if (kind == 'f')
        bits = gsb_whole_part(bits, &ok);
    if (kind == 'i' || !ok)
        in->bad = 1;
    return in->bad ? 0 : bits;
}

static int nil(struct gsb_reader *in)
{
    if (peek(in) != 0xC0)
        return 0;
    in->at++;
    return 1;
}

static int whole_message(const struct gsb_reader *in)
{
    return !in->bad && in->at == in->size ? GSB_OK : GSB_ERROR_MESSAGE;
}

int gsb_sample_decode(const uint8_t *bytes, size_t size, uint32_t cells,
                      struct gsb_sample *sample)
{
    struct gsb_reader in = {0, 0, 0, 0};
    uint64_t lag_us;
    uint32_t k;

    in.bytes = bytes;
    in.size = size;
    if (cells < 1 || cells > GSB_CELLS_MAX || gsb_read_array(&in) != 4 + cells)
        return GSB_ERROR_MESSAGE;
    sample->cells = cells;
    sample->seq = (int64_t)gsb_read_whole(&in);
    sample->t_us = read_time(&in);
    sample->in_force = nil(&in) ? GSB_NIL : (int64_t)gsb_read_whole(&in);
    sample->lag_us = GSB_NIL;
    if (!nil(&in)) {
        lag_us = read_time(&in);
        sample->lag_us = (int64_t)(lag_us < WHOLE_MAX ? lag_us : WHOLE_MAX);
    }
    for (k = 0; k < cells; k++)
        sample->v_mv[k] = gsb_read_number(&in);
    return whole_message(&in);
}

int gsb_answer_decode(const uint8_t *bytes, size_t size, uint32_t cells,
                      struct gsb_answer *answer)
{
    struct gsb_reader in = {0, 0, 0, 0};
    uint32_t k, length;
    int none;

    in.bytes = bytes;
    in.size = size;
    length = gsb_read_array(&in);
    none = length == 3 && nil(&in);
    if (cells < 1 || cells > GSB_CELLS_MAX || (!none && length != 3 + cells))
        return GSB_ERROR_MESSAGE;
    answer->cells = none ? 0 : cells;
    answer->seq = none ? GSB_NIL : (int64_t)gsb_read_whole(&in);
    answer->flags = gsb_read_whole(&in);
    answer->service_nsec = gsb_read_whole(&in);
    memset(answer->i_pa, 0, sizeof answer->i_pa);
    for (k = 0; k < answer->cells; k++)
        answer->i_pa[k] = gsb_read_number(&in);
    return whole_message(&in);
}

/* ---- writing ---- */

static void put(struct gsb_writer *out, uint8_t kind, uint64_t bits, uint32_t count)
{
    if (out->full || out->room - out->at < 1 + count) {
        out->full = 1;
        return;
    }
    out->bytes[out->at++] = kind;
    while (count--)
        out->bytes[out->at++] = (uint8_t)(bits >> (8 * count));
}

void gsb_write_array(struct gsb_writer *out, uint32_t items)
{
    if (items > 15)
        out->full = 1;
    put(out, (uint8_t)(0x90 + items), 0, 0);
}

void gsb_write_whole(struct gsb_writer *out, uint64_t value)
{
    if (value < 0x80)
        put(out, (uint8_t)value, 0, 0);
    else if (value <= 0xFF)
        put(out, 0xCC, value, 1);
    else if (value <= 0xFFFF)
        put(out, 0xCD, value, 2);
    else if (value <= 0xFFFFFFFFu)
        put(out, 0xCE, value, 4);
    else
        put(out, 0xCF, value, 8);
}

void gsb_write_float(struct gsb_writer *out, float value)
{
    put(out, 0xCA, gsb_bits_of(value), 4);
}

void gsb_write_text(struct gsb_writer *out, const uint8_t *text, uint32_t size)
{
    if (size > 31 || out->full || out->room - out->at < 1 + size) {
        out->full = 1;
        return;
    }
    out->bytes[out->at] = (uint8_t)(0xA0 + size);
    memcpy(out->bytes + out->at + 1, text, size);
    out->at += 1 + size;
}

static void write_optional(struct gsb_writer *out, int64_t value)
{
    if (value < 0)
        put(out, 0xC0, 0, 0);
    else
        gsb_write_whole(out, (uint64_t)value);
}

int gsb_sample_encode(const struct gsb_sample *sample, uint8_t *out, size_t room)
{
    struct gsb_writer to = {0, 0, 0, 0};
    uint32_t k;

    if (sample->cells < 1 || sample->cells > GSB_CELLS_MAX || sample->seq < 0)
        return GSB_ERROR_ARGUMENT;
    to.bytes = out;
    to.room = room;
    gsb_write_array(&to, 4 + sample->cells);
    gsb_write_whole(&to, (uint64_t)sample->seq);
    gsb_write_whole(&to, sample->t_us);
    write_optional(&to, sample->in_force);
    write_optional(&to, sample->lag_us);
    for (k = 0; k < sample->cells; k++)
        gsb_write_float(&to, sample->v_mv[k]);
    return to.full ? GSB_ERROR_ROOM : (int)to.at;
}

int gsb_answer_encode(const struct gsb_answer *answer, uint8_t *out, size_t room)
{
    struct gsb_writer to = {0, 0, 0, 0};
    uint32_t k;

    if (answer->cells > GSB_CELLS_MAX)
        return GSB_ERROR_ARGUMENT;
    to.bytes = out;
    to.room = room;
    gsb_write_array(&to, 3 + answer->cells);
    write_optional(&to, answer->seq);
    gsb_write_whole(&to, answer->flags);
    gsb_write_whole(&to, answer->service_nsec);
    for (k = 0; k < answer->cells; k++)
        put(&to, 0xCB, gsb_widen(answer->i_pa[k]), 8);
    return to.full ? GSB_ERROR_ROOM : (int)to.at;
}
