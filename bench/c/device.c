/* A rig on the device library that times round trips, with a plain stream socket.
 *
 *   device ENDPOINT VOLTAGES CELLS [spin]
 *   device pty:LINK VOLTAGES CELLS
 *
 * With pty:LINK it makes a pty, puts a symbolic link to it at LINK, and speaks serial frames
 * to whoever opens that, which it awaits for a minute.
 *
 * Arguments, stdin and stdout as of client.c. A trip is one whole turn of the library: the
 * clock read, the sample made, encoded, framed and sent, the answer received, deframed,
 * decoded, judged, limited and written to a converter that is not there. It sleeps in the
 * system until an answer comes; with `spin` it never does.
 */
#define _XOPEN_SOURCE 700
#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/time.h>
#include <termios.h>
#include <time.h>
#include <unistd.h>

#include "gatestep_bridge.h"
#include "posix_stream.h"

enum { TICK_US = 20, MOST_TRIPS = 1000000, LONGEST = 128, TAKEN = 64, FIRST_SEQ = 100000 };

struct rig {
    struct gsb_device device;
    struct posix_stream stream;
    const double *v_mv;
    long voltages;
    uint64_t tick;
    int spin, asleep, serial;
    float injected_pa[GSB_CELLS_MAX];
    uint8_t in[512], out[1024];
    struct gsb_taken taken[TAKEN];
};

static int fail(const char *what, const char *why)
{
    fprintf(stderr, "device: %s: %s\n", what, why);
    return 1;
}

static int64_t now_nsec(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (int64_t)t.tv_sec * 1000000000 + t.tv_nsec;
}

static int read_voltage(void *context, float *v_mv, uint32_t cells)
{
    struct rig *rig = context;
    for (uint32_t k = 0; k < cells; k++)
        v_mv[k] = (float)rig->v_mv[rig->tick % (uint64_t)rig->voltages];
    return 0;
}

static int write_current(void *context, const float *i_pa, uint32_t cells)
{
    memcpy(((struct rig *)context)->injected_pa, i_pa, cells * sizeof *i_pa);
    return 0;
}

/* A pty's own end as a line, and a link to the other end. */
static int open_pty(struct rig *rig, const char *link)
{
    struct termios raw;
    int fd = posix_openpt(O_RDWR | O_NOCTTY | O_NONBLOCK), other;

    if (fd < 0 || grantpt(fd) || unlockpt(fd) || symlink(ptsname(fd), link))
        return -1;
    /* Held open, so that the line is up before anybody else opens it; raw, as a line is. */
    other = open(ptsname(fd), O_RDWR | O_NOCTTY);
    if (other < 0 || tcgetattr(other, &raw))
        return -1;
    raw.c_iflag = raw.c_oflag = raw.c_lflag = 0;
    rig->stream.fd = fd;
    return tcsetattr(other, TCSANOW, &raw);
}

static int send_line(int fd, const uint8_t *bytes, size_t size)
{
    ssize_t sent = write(fd, bytes, size);
    return sent >= 0 ? (int)sent : errno == EAGAIN ? 0 : -1;
}

static int receive_line(struct rig *rig, uint8_t *bytes, size_t room)
{
    struct pollfd entry = {rig->stream.fd, POLLIN, 0};
    ssize_t got;

    if (rig->asleep && poll(&entry, 1, 60000) <= 0)
        return -1;
    rig->asleep = 0;
    got = read(rig->stream.fd, bytes, room);
    return got >= 0 ? (int)got : errno == EAGAIN ? 0 : -1;
}

static int send_bytes(void *context, const uint8_t *bytes, size_t size)
{
    if (((struct rig *)context)->serial)
        return send_line(((struct rig *)context)->stream.fd, bytes, size);
    return posix_stream_send(&((struct rig *)context)->stream, bytes, size);
}

/* Sleeps at most once a trip, so that the time-out of the socket bounds the wait. */
static int receive_bytes(void *context, uint8_t *bytes, size_t room)
{
    struct rig *rig = context;
    ssize_t got;

    if (rig->serial)
        return receive_line(rig, bytes, room);
    if (!rig->asleep)
        return posix_stream_receive(&rig->stream, bytes, room);
    rig->asleep = 0;
    got = recv(rig->stream.fd, bytes, room, 0);
    return got > 0 ? (int)got : -1;
}

/* Virtual, so that no tick is ever passed over; the true clock is read for its cost. */
static uint32_t now_us(void *context)
{
    (void)now_nsec();
    return (uint32_t)(((struct rig *)context)->tick * TICK_US);
}

static int open_rig(struct rig *rig, const char *endpoint, uint32_t cells)
{
    struct gsb_port port = {0, read_voltage, write_current, send_bytes, receive_bytes, now_us};
    struct timeval patience = {5, 0};
    struct gsb_rig_config config;
    struct gsb_link link;

    memset(&config, 0, sizeof config);
    config.cells = cells;
    config.interval_us = TICK_US;
    config.silence_us = 10000000;
    for (uint32_t k = 0; k < cells; k++) {
        config.cell[k].current_pa = 200000;
        config.cell[k].slew_pa_per_ms = 1e9f;
        config.cell[k].window_low_mv = -200;
        config.cell[k].window_high_mv = 200;
    }
    port.context = rig;
    rig->serial = strncmp(endpoint, "pty:", 4) == 0;
    if (gsb_link_init(&link, rig->serial ? &gsb_serial : &gsb_zmtp, cells, rig->in,
                      sizeof rig->in, rig->out, sizeof rig->out) ||
        gsb_device_init(&rig->device, &config, &port, &link, rig->taken, TAKEN) ||
        (rig->serial ? open_pty(rig, endpoint + 4) : posix_stream_open(&rig->stream, endpoint)))
        return -1;
    if (!rig->serial)
        setsockopt(rig->stream.fd, SOL_SOCKET, SO_RCVTIMEO, &patience, sizeof patience);
    /* As the other clients: from here on a sequence number takes four bytes. */
    rig->device.rig.next_seq = FIRST_SEQ;
    gsb_device_connect(&rig->device);
    while (gsb_rig_state(&rig->device.rig) == GSB_GREETING) {
        rig->asleep = 1;
        gsb_device_poll(&rig->device);
    }
    return gsb_rig_state(&rig->device.rig) == GSB_RUNNING ? 0 : -1;
}

static int trip(struct rig *rig)
{
    uint32_t answers = rig->device.rig.counters.answers;

    rig->tick++;
    gsb_device_tick(&rig->device);
    while (rig->device.rig.counters.answers == answers) {
        if (rig->device.link.broken)
            return -1;
        rig->asleep = !rig->spin;
        gsb_device_poll(&rig->device);
    }
    return 0;
}

static double *read_voltages(const char *path, long *count)
{
    FILE *file = fopen(path, "rb");
    double *v;

    if (!file)
        return NULL;
    fseek(file, 0, SEEK_END);
    *count = ftell(file) / (long)sizeof(double);
    rewind(file);
    v = malloc((size_t)*count * sizeof(double) + 1);
    if (v && fread(v, sizeof(double), (size_t)*count, file) != (size_t)*count)
        *count = 0;
    fclose(file);
    return v;
}

static int turn(struct rig *rig, long count, int64_t *nsec)
{
    int64_t tally[3] = {LONGEST, 0, 0};
    uint8_t answer[LONGEST] = {0};

    for (long k = 0; k < count; k++) {
        int64_t start = now_nsec();
        if (trip(rig))
            return fail("no answer", "the link is gone, or none came");
        nsec[k] = now_nsec() - start;
        tally[2] = (int64_t)rig->device.link.message_size;
        tally[0] = tally[2] < tally[0] ? tally[2] : tally[0];
        tally[1] = tally[2] > tally[1] ? tally[2] : tally[1];
    }
    memcpy(answer, rig->device.link.message, (size_t)tally[2]);
    fwrite(nsec, sizeof *nsec, (size_t)count, stdout);
    fwrite(tally, sizeof *tally, 3, stdout);
    fwrite(answer, 1, LONGEST, stdout);
    fflush(stdout);
    return 0;
}

int main(int argc, char **argv)
{
    static struct rig rig;
    int cells = argc >= 4 ? atoi(argv[3]) : 0, status = 0;
    int64_t *nsec = malloc(MOST_TRIPS * sizeof *nsec);
    double *v = argc >= 4 ? read_voltages(argv[2], &rig.voltages) : NULL;
    char line[64];

    if (cells < 1 || cells > GSB_CELLS_MAX || !v || rig.voltages < 1 || !nsec)
        return fail("usage", "device ENDPOINT VOLTAGES CELLS [spin], 1 to 8 cells");
    rig.v_mv = v;
    rig.spin = argc > 4;
    if (open_rig(&rig, argv[1], (uint32_t)cells))
        return fail(argv[1], "no loop there");
    while (!status && fgets(line, sizeof line, stdin)) {
        long count = strtol(line, NULL, 10);
        if (count < 1 || count > MOST_TRIPS)
            status = fail("count", "give 1 to 1000000");
        else
            status = turn(&rig, count, nsec);
    }
    gsb_device_stop(&rig.device);
    posix_stream_close(&rig.stream);
    free(nsec);
    free(v);
    return status;
}
