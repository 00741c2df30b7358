/* Mutated streams through the decoders, reproducibly and without a fuzzer.
 *
 *   mutate COUNT SEED VECTORS.txt ...     streams from the golden vectors, mutated
 *   mutate --corpus FOLDER VECTORS.txt ...    those streams as files, to start a fuzzer from
 *
 * Prints how many streams went through. Build it with sanitizers: that is the test.
 */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "decoders.h"

enum { SEEDS = 512, LONGEST = 1024, LINE = 16384 };

struct seed {
    uint8_t bytes[LONGEST];
    size_t size;
};

static struct seed seeds[SEEDS];
static size_t count;
static uint64_t state;

/* xorshift64* (Vigna 2016). */
static uint32_t draw(uint32_t below)
{
    state ^= state >> 12;
    state ^= state << 25;
    state ^= state >> 27;
    return (uint32_t)((state * 0x2545F4914F6CDD1Du) >> 33) % below;
}

static void read_seeds(const char *path)
{
    static char line[LINE], hex[LINE];
    FILE *file = fopen(path, "r");
    unsigned byte;

    if (!file) {
        perror(path);
        exit(2);
    }
    while (fgets(line, sizeof line, file) && count < SEEDS) {
        struct seed *seed = &seeds[count];
        if (line[0] == '#' || sscanf(line, "%*s %*s %16000s", hex) != 1)
            continue;
        seed->size = 0;
        while (seed->size < LONGEST && sscanf(hex + 2 * seed->size, "%2x", &byte) == 1)
            seed->bytes[seed->size++] = (uint8_t)byte;
        count++;
    }
    fclose(file);
}

/* One of: a byte changed, a bit flipped, bytes left out, doubled, or those of another. */
static void mutate(struct seed *stream)
{
    size_t at, span;
    const struct seed *other = &seeds[draw((uint32_t)count)];

    if (stream->size == 0)
        return;
    at = draw((uint32_t)stream->size);
    span = 1 + draw(16);
    if (span > stream->size - at)
        span = stream->size - at;
    switch (draw(6)) {
    case 0:
        stream->bytes[at] = (uint8_t)draw(256);
        break;
    case 1:
        stream->bytes[at] ^= (uint8_t)(1u << draw(8));
        break;
    case 2:
        memmove(stream->bytes + at, stream->bytes + at + span, stream->size - at - span);
        stream->size -= span;
        break;
    case 3:
        if (stream->size + span <= LONGEST) {
            memmove(stream->bytes + at + span, stream->bytes + at, stream->size - at);
            stream->size += span;
        }
        break;
    case 4:
        if (stream->size + other->size <= LONGEST) {
            memcpy(stream->bytes + stream->size, other->bytes, other->size);
            stream->size += other->size;
        }
        break;
    default:
        stream->bytes[at] = draw(2) ? 0xFF : 0x00;
    }
}

static int write_corpus(const char *folder)
{
    char path[512];

    for (size_t k = 0; k < count; k++) {
        FILE *file;
        snprintf(path, sizeof path, "%s/%03u", folder, (unsigned)k);
        file = fopen(path, "wb");
        if (!file || fwrite(seeds[k].bytes, 1, seeds[k].size, file) != seeds[k].size)
            return 1;
        fclose(file);
    }
    return 0;
}

int main(int argc, char **argv)
{
    static struct seed stream;
    unsigned long total;

    if (argc < 4)
        return 2;
    for (int k = 3; k < argc; k++)
        read_seeds(argv[k]);
    if (strcmp(argv[1], "--corpus") == 0)
        return write_corpus(argv[2]);
    total = strtoul(argv[1], 0, 10);
    state = strtoul(argv[2], 0, 10) * 2 + 1;
    for (unsigned long k = 0; k < total; k++) {
        uint8_t *exact;
        memcpy(&stream, &seeds[draw((uint32_t)count)], sizeof stream);
        for (uint32_t n = 1 + draw(4); n; n--)
            mutate(&stream);
        /* Of its exact size, so that a sanitizer sees the first byte beyond. */
        exact = malloc(stream.size ? stream.size : 1);
        memcpy(exact, stream.bytes, stream.size);
        gsb_fuzz_one(exact, stream.size);
        free(exact);
    }
    printf("streams %lu\n", total);
    return 0;
}
