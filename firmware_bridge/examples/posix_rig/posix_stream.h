/* A stream socket, TCP or UNIX, as a port's send and receive callbacks want it. */
#ifndef POSIX_STREAM_H
#define POSIX_STREAM_H

#include <stddef.h>
#include <stdint.h>

struct posix_stream {
    int fd; /* -1: none */
};

/* Connect to tcp://ADDRESS:PORT or ipc://PATH. 0, or -1 with errno set. */
int posix_stream_open(struct posix_stream *stream, const char *endpoint);
void posix_stream_close(struct posix_stream *stream);

/* Bytes taken or come, 0 when there is no room or nothing, -1 when the link is gone. */
int posix_stream_send(struct posix_stream *stream, const uint8_t *bytes, size_t size);
int posix_stream_receive(struct posix_stream *stream, uint8_t *bytes, size_t room);

/* Sleep until something has come, at most so long; 1 when it has. */
int posix_stream_wait(struct posix_stream *stream, int timeout_ms);

/* The monotonic clock, us. */
uint64_t posix_now_us(void);

#endif
