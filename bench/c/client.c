/* A rig as a plain C program: a libzmq DEALER that times round trips.
 *
 *   client ENDPOINT VOLTAGES CELLS
 *
 * VOLTAGES is a file of doubles in mV, played over and over, the same for each of 1 to 8
 * cells. Each line on stdin is a
 * count; that many samples are sent, each as soon as the answer to the one before is
 * there, and to stdout go (native byte order): one int64 a trip, from before the send to
 * after the receive, in ns; then the smallest and largest answer and the size of the
 * last, as int64; then the last answer in 128 bytes. Ends at the end of stdin; status 1
 * when an answer does not come within five seconds.
 */
#define _POSIX_C_SOURCE 199309L
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

#include "zmq_calls.h"

/* From here on a sequence number takes four bytes, so that every sample is as long. */
enum { FIRST_SEQ = 100000, TICK_US = 20, MOST_TRIPS = 1000000, LONGEST = 128, MOST_CELLS = 8 };

static int fail(const char *what, const char *why)
{
    fprintf(stderr, "client: %s: %s\n", what, why);
    return 1;
}

static unsigned char *put_u32(unsigned char *out, uint32_t value)
{
    *out++ = 0xce;
    for (int shift = 24; shift >= 0; shift -= 8)
        *out++ = (unsigned char)(value >> shift);
    return out;
}

static unsigned char *put_f64(unsigned char *out, double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    *out++ = 0xcb;
    for (int shift = 56; shift >= 0; shift -= 8)
        *out++ = (unsigned char)(bits >> shift);
    return out;
}

/* [seq, t_us, in_force, lag_us, v, ...]: the answer two ticks back is in force, its lag not known. */
static size_t sample(unsigned char *out, uint32_t seq, double v_mv, int cells)
{
    unsigned char *at = out;
    *at++ = (unsigned char)(0x94 + cells);
    at = put_u32(at, seq);
    at = put_u32(at, (seq - FIRST_SEQ) * TICK_US + FIRST_SEQ);
    at = put_u32(at, seq - 2);
    *at++ = 0xc0;
    for (int k = 0; k < cells; k++)
        at = put_f64(at, v_mv);
    return (size_t)(at - out);
}

static int64_t now_nsec(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (int64_t)t.tv_sec * 1000000000 + t.tv_nsec;
}

static double *read_voltages(const char *path, long *count)
{
    FILE *file = fopen(path, "rb");
    if (!file)
        return NULL;
    fseek(file, 0, SEEK_END);
    *count = ftell(file) / (long)sizeof(double);
    rewind(file);
    double *v = malloc((size_t)*count * sizeof(double) + 1);
    if (v && fread(v, sizeof(double), (size_t)*count, file) != (size_t)*count)
        *count = 0;
    fclose(file);
    return v;
}

struct tally {
    int64_t smallest, largest, last;
    unsigned char answer[LONGEST];
};

static int trips(void *socket, long count, uint32_t *seq, const double *v, long voltages,
                 int cells, int64_t *nsec, struct tally *tally)
{
    unsigned char out[LONGEST];
    tally->smallest = LONGEST;
    tally->largest = 0;
    for (long k = 0; k < count; k++, ++*seq) {
        size_t size = sample(out, *seq, v[*seq % voltages], cells);
        int64_t start = now_nsec();
        if (zmq_send(socket, out, size, 0) < 0)
            return fail("send", zmq_strerror(zmq_errno()));
        int got = zmq_recv(socket, tally->answer, LONGEST, 0);
        nsec[k] = now_nsec() - start;
        if (got < 0 || got > LONGEST)
            return fail("no answer", zmq_strerror(zmq_errno()));
        tally->last = got;
        if (got < tally->smallest)
            tally->smallest = got;
        if (got > tally->largest)
            tally->largest = got;
    }
    return 0;
}

int main(int argc, char **argv)
{
    int cells = argc == 4 ? atoi(argv[3]) : 0;
    if (cells < 1 || cells > MOST_CELLS)
        return fail("usage", "client ENDPOINT VOLTAGES CELLS, 1 to 8 cells");
    long voltages = 0;
    double *v = read_voltages(argv[2], &voltages);
    if (!v || voltages < 1)
        return fail(argv[2], "holds no voltages");
    int64_t *nsec = malloc(MOST_TRIPS * sizeof *nsec);
    void *context = zmq_ctx_new();
    void *socket = context ? zmq_socket(context, ZMQ_DEALER) : NULL;
    if (!nsec || !socket)
        return fail("start", "no memory");
    int patience_ms = 5000, linger_ms = 0;
    zmq_setsockopt(socket, ZMQ_RCVTIMEO, &patience_ms, sizeof patience_ms);
    zmq_setsockopt(socket, ZMQ_LINGER, &linger_ms, sizeof linger_ms);
    if (zmq_connect(socket, argv[1]) < 0)
        return fail(argv[1], zmq_strerror(zmq_errno()));

    char line[64];
    uint32_t seq = FIRST_SEQ;
    int status = 0;
    while (!status && fgets(line, sizeof line, stdin)) {
        long count = strtol(line, NULL, 10);
        struct tally tally;
        if (count < 1 || count > MOST_TRIPS)
            status = fail("count", "give 1 to 1000000");
        else
            status = trips(socket, count, &seq, v, voltages, cells, nsec, &tally);
        if (!status) {
            fwrite(nsec, sizeof *nsec, (size_t)count, stdout);
            fwrite(&tally.smallest, sizeof(int64_t), 3, stdout);
            fwrite(tally.answer, 1, LONGEST, stdout);
            fflush(stdout);
        }
    }
    zmq_close(socket);
    zmq_ctx_term(context);
    free(nsec);
    free(v);
    return status;
}
