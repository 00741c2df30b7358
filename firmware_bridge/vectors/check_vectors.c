/* Holds the library to the golden vectors: check_vectors FILE.txt ...
 *
 * Prints how many vectors were checked and every one that failed; status 1 if any did.
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "gatestep_bridge.h"

enum { BYTES = 4096, LINE = 4 * BYTES };

struct vector {
    const char *name, *kind, *fields;
    uint8_t bytes[BYTES];
    size_t size;
};

/* ---- reading ---- */

static size_t unhex(const char *text, uint8_t *out)
{
    size_t size = 0;
    unsigned byte;

    while (text[0] != '-' && sscanf(text + 2 * size, "%2x", &byte) == 1 && size < BYTES)
        out[size++] = (uint8_t)byte;
    return size;
}

/* A field's value, cut off at its end; empty when there is no such field. */
static const char *field(const struct vector *vector, const char *key)
{
    static char value[8][LINE];
    static unsigned turn;
    char *out = value[turn++ % 8], pattern[40];
    const char *at;

    sprintf(pattern, " %s=", key);
    at = strstr(vector->fields, pattern);
    out[0] = 0;
    if (at)
        sscanf(at + strlen(pattern), "%16000s", out);
    return out;
}

static uint64_t whole(const struct vector *vector, const char *key)
{
    return strtoull(field(vector, key), 0, 10);
}

static int64_t optional(const struct vector *vector, const char *key)
{
    return strcmp(field(vector, key), "nil") ? (int64_t)whole(vector, key) : GSB_NIL;
}

/* Numbers with commas between; how many. `exact` is cleared when float32 rounds one. */
static uint32_t numbers(const char *text, float *out, int *exact)
{
    uint32_t count = 0;
    char *end;

    if (strcmp(text, "-") == 0)
        return 0;
    for (;;) {
        double value = strtod(text, &end);
        out[count] = (float)value;
        *exact = *exact && !(out[count] < value || out[count] > value);
        count++;
        if (*end != ',')
            break;
        text = end + 1;
    }
    return count;
}

static int same(float a, float b)
{
    return (a != a && b != b) || memcmp(&a, &b, sizeof a) == 0;
}

static int all_same(const float *a, const float *b, uint32_t count)
{
    while (count--)
        if (!same(a[count], b[count]))
            return 0;
    return 1;
}

/* ---- one check for each kind ---- */

static int check_sample(const struct vector *vector)
{
    struct gsb_sample want, got;
    uint8_t out[GSB_MESSAGE_MAX];
    int exact = 1, size;

    memset(&want, 0, sizeof want);
    want.seq = (int64_t)whole(vector, "seq");
    want.t_us = whole(vector, "t_us");
    want.in_force = optional(vector, "in_force");
    want.lag_us = optional(vector, "lag_us");
    want.cells = numbers(field(vector, "v_mv"), want.v_mv, &exact);
    if (gsb_sample_decode(vector->bytes, vector->size, want.cells, &got))
        return 0;
    if (got.seq != want.seq || got.t_us != want.t_us || got.in_force != want.in_force ||
        got.lag_us != want.lag_us || !all_same(got.v_mv, want.v_mv, want.cells))
        return 0;
    if (strcmp(vector->kind, "sample"))
        return 1;
    size = gsb_sample_encode(&want, out, sizeof out);
    return size == (int)vector->size && memcmp(out, vector->bytes, vector->size) == 0 &&
           gsb_sample_encode(&want, out, vector->size - 1) == GSB_ERROR_ROOM;
}

static int check_answer(const struct vector *vector)
{
    struct gsb_answer want, got;
    uint8_t out[GSB_MESSAGE_MAX];
    int exact = 1, size;

    memset(&want, 0, sizeof want);
    want.seq = optional(vector, "seq");
    want.flags = whole(vector, "flags");
    want.service_nsec = whole(vector, "service_nsec");
    want.cells = numbers(field(vector, "i_pa"), want.i_pa, &exact);
    if (gsb_answer_decode(vector->bytes, vector->size, (uint32_t)whole(vector, "cells"), &got))
        return 0;
    if (got.seq != want.seq || got.flags != want.flags || got.cells != want.cells ||
        got.service_nsec != want.service_nsec || !all_same(got.i_pa, want.i_pa, want.cells))
        return 0;
    if (strcmp(vector->kind, "answer") || !exact)
        return 1;
    size = gsb_answer_encode(&want, out, sizeof out);
    return size == (int)vector->size && memcmp(out, vector->bytes, vector->size) == 0 &&
           gsb_answer_encode(&want, out, vector->size - 1) == GSB_ERROR_ROOM;
}

static int check_sample_bad(const struct vector *vector)
{
    struct gsb_sample got;
    return gsb_sample_decode(vector->bytes, vector->size, (uint32_t)whole(vector, "cells"),
                             &got) == GSB_ERROR_MESSAGE;
}

static int check_answer_bad(const struct vector *vector)
{
    struct gsb_answer got;
    return gsb_answer_decode(vector->bytes, vector->size, (uint32_t)whole(vector, "cells"),
                             &got) == GSB_ERROR_MESSAGE;
}

static int check_crc(const struct vector *vector)
{
    return gsb_crc16(GSB_CRC_INITIAL, vector->bytes, vector->size) ==
           strtoul(field(vector, "check"), 0, 16);
}

static int check_cobs(const struct vector *vector)
{
    static uint8_t data[BYTES], out[BYTES];
    size_t size = unhex(field(vector, "data"), data);

    return gsb_cobs_encode(data, size, out, sizeof out) == (int)vector->size &&
           memcmp(out, vector->bytes, vector->size) == 0 &&
           gsb_cobs_encode(data, size, out, vector->size - 1) == GSB_ERROR_ROOM;
}

static int check_frame(const struct vector *vector)
{
    static uint8_t payload[BYTES], out[BYTES], room[GSB_PAYLOAD_MAX + 3];
    size_t k, size = unhex(field(vector, "payload"), payload);
    uint8_t kind = (uint8_t)strtoul(field(vector, "kind"), 0, 16);
    struct gsb_unframer unframer;

    if (gsb_frame_encode(kind, payload, size, out, sizeof out) != (int)vector->size ||
        memcmp(out, vector->bytes, vector->size))
        return 0;
    gsb_unframe_begin(&unframer, room, sizeof room);
    for (k = 0; k + 1 < vector->size; k++)
        if (gsb_unframe(&unframer, vector->bytes[k]))
            return 0;
    return gsb_unframe(&unframer, 0) == 1 && unframer.size == size + 3 && room[0] == kind &&
           memcmp(room + 1, payload, size) == 0 && gsb_unframe(&unframer, 0) == 0;
}

/* Dropped at its end, and a sound frame behind it is taken. */
static int check_frame_bad(const struct vector *vector)
{
    uint8_t room[GSB_PAYLOAD_MAX + 3], sound[GSB_FRAME_MAX];
    struct gsb_unframer unframer;
    int size, found = 0;
    size_t k;

    gsb_unframe_begin(&unframer, room, sizeof room);
    for (k = 0; k < vector->size; k++)
        found = gsb_unframe(&unframer, vector->bytes[k]);
    if (found != GSB_ERROR_FRAME)
        return 0;
    size = gsb_frame_encode(GSB_KIND_ALIVE, 0, 0, sound, sizeof sound);
    for (k = 0; k < (size_t)size; k++)
        found = gsb_unframe(&unframer, sound[k]);
    return found == 1;
}

static const uint8_t zmtp_opening[] = {
    0xFF, 0, 0, 0, 0, 0, 0, 0, 0, 0x7F, 3, 1, 'N', 'U', 'L', 'L', 0, 0, 0, 0, 0, 0, 0, 0, 0, 0,
    0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0,
    0, 0, 0, 0, 0, 0, 0, 4, 28, 5, 'R', 'E', 'A', 'D', 'Y', 11, 'S', 'o', 'c', 'k', 'e', 't',
    '-', 'T', 'y', 'p', 'e', 0, 0, 0, 6, 'R', 'O', 'U', 'T', 'E', 'R'};

static int pending_is(struct gsb_link *link, const struct vector *vector)
{
    const uint8_t *bytes;
    size_t size = gsb_link_pending(link, &bytes);
    return size == vector->size && memcmp(bytes, vector->bytes, size) == 0;
}

static void drain(struct gsb_link *link)
{
    const uint8_t *bytes;
    gsb_link_sent(link, gsb_link_pending(link, &bytes));
}

static int check_zmtp_send(const struct vector *vector)
{
    static uint8_t in[GSB_LINK_IN_MIN], out[GSB_LINK_OUT_MIN], more[BYTES], ping[64];
    const char *at = field(vector, "at");
    struct gsb_link link;
    size_t used, size;

    gsb_link_init(&link, &gsb_zmtp, 1, in, sizeof in, out, sizeof out);
    gsb_link_open(&link);
    if (strcmp(at, "open") == 0)
        return pending_is(&link, vector);
    drain(&link);
    if (gsb_link_feed(&link, zmtp_opening, 64, &used) != GSB_NOTHING || used != 64)
        return 0;
    if (strcmp(at, "greeted") == 0)
        return pending_is(&link, vector);
    drain(&link);
    if (gsb_link_feed(&link, zmtp_opening + 64, sizeof zmtp_opening - 64, &used) != GSB_OPENED)
        return 0;
    if (strcmp(at, "put") == 0) {
        size = unhex(field(vector, "payload"), more);
        return gsb_link_put(&link, more, size) == GSB_OK && pending_is(&link, vector);
    }
    size = unhex(field(vector, "context"), more);
    memcpy(ping, "\4\0\4PING\0\12", 9);
    ping[1] = (uint8_t)(7 + size);
    memcpy(ping + 9, more, size);
    return gsb_link_feed(&link, ping, 9 + size, &used) == GSB_NOTHING && pending_is(&link, vector);
}

/* What a stream means, as text like the field; fed in pieces of so many bytes. */
static void hear(const struct vector *vector, size_t piece, char *events)
{
    static uint8_t in[GSB_LINK_IN_MIN], out[1024];
    struct gsb_link link;
    size_t at = 0, used, k;
    char *end = events;

    gsb_link_init(&link, &gsb_zmtp, 1, in, sizeof in, out, sizeof out);
    gsb_link_open(&link);
    while (at < vector->size && !link.broken) {
        size_t size = vector->size - at < piece ? vector->size - at : piece;
        int found = gsb_link_feed(&link, vector->bytes + at, size, &used);
        at += used;
        if (found == GSB_MESSAGE) {
            end += sprintf(end, ",message:");
            for (k = 0; k < link.message_size; k++)
                end += sprintf(end, "%02x", link.message[k]);
        } else if (found) {
            end += sprintf(end, found == GSB_OPENED           ? ",opened"
                                : found == GSB_ERROR_MESSAGE  ? ",unfit"
                                : found == GSB_ERROR_PROTOCOL ? ",broken"
                                : found == GSB_ERROR_PEER     ? ",peer"
                                                              : ",?");
        }
    }
    if (end == events)
        sprintf(end, ",-");
}

static int check_zmtp_in(const struct vector *vector)
{
    static char events[LINE];
    const char *want = field(vector, "events");
    size_t piece;

    for (piece = 1; piece <= vector->size + 1; piece = piece < 4 ? piece + 1 : piece * 2) {
        hear(vector, piece, events);
        if (strcmp(events + 1, want))
            return 0;
    }
    return 1;
}

static const struct {
    const char *kind;
    int (*check)(const struct vector *);
} checks[] = {
    {"sample", check_sample},         {"sample-read", check_sample},
    {"sample-bad", check_sample_bad}, {"answer", check_answer},
    {"answer-read", check_answer},    {"answer-bad", check_answer_bad},
    {"crc", check_crc},               {"cobs", check_cobs},
    {"frame", check_frame},           {"frame-bad", check_frame_bad},
    {"zmtp-send", check_zmtp_send},   {"zmtp-in", check_zmtp_in},
};

static int check(const struct vector *vector)
{
    size_t k;

    for (k = 0; k < sizeof checks / sizeof *checks; k++)
        if (strcmp(vector->kind, checks[k].kind) == 0)
            return checks[k].check(vector);
    return 0;
}

static int check_file(const char *path, unsigned *checked)
{
    static char line[LINE], name[64], kind[64], hex[LINE];
    static struct vector vector;
    FILE *file = fopen(path, "r");
    int failed = 0, end;

    if (!file)
        return 1;
    while (fgets(line, sizeof line, file)) {
        if (line[0] == '#' || sscanf(line, "%63s %63s %16000s%n", name, kind, hex, &end) != 3)
            continue;
        vector.name = name;
        vector.kind = kind;
        vector.fields = line + end;
        vector.size = unhex(hex, vector.bytes);
        ++*checked;
        if (!check(&vector)) {
            printf("%s: %s (%s) failed\n", path, name, kind);
            failed = 1;
        }
    }
    fclose(file);
    return failed;
}

int main(int argc, char **argv)
{
    unsigned checked = 0;
    int k, failed = argc < 2;

    for (k = 1; k < argc; k++)
        failed |= check_file(argv[k], &checked);
    printf("checked %u\n", checked);
    return failed;
}
