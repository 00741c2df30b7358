#define _POSIX_C_SOURCE 200809L
#include "posix_stream.h"

#include <errno.h>
#include <netdb.h>
#include <netinet/in.h>
#include <netinet/tcp.h>
#include <poll.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <time.h>
#include <unistd.h>

static int dial(struct posix_stream *stream, int family, const struct sockaddr *address,
                socklen_t size)
{
    int one = 1;

    stream->fd = socket(family, SOCK_STREAM, 0);
    if (stream->fd < 0)
        return -1;
    if (family != AF_UNIX)
        setsockopt(stream->fd, IPPROTO_TCP, TCP_NODELAY, &one, sizeof one);
    if (connect(stream->fd, address, size) == 0)
        return 0;
    posix_stream_close(stream);
    return -1;
}

static int open_unix(struct posix_stream *stream, const char *path)
{
    struct sockaddr_un address;

    memset(&address, 0, sizeof address);
    address.sun_family = AF_UNIX;
    if (strlen(path) >= sizeof address.sun_path) {
        errno = ENAMETOOLONG;
        return -1;
    }
    memcpy(address.sun_path, path, strlen(path));
    return dial(stream, AF_UNIX, (struct sockaddr *)&address, sizeof address);
}

static int open_tcp(struct posix_stream *stream, const char *place)
{
    struct addrinfo hints, *found = 0, *at;
    char host[256];
    const char *colon = strrchr(place, ':');

    if (!colon || (size_t)(colon - place) >= sizeof host) {
        errno = EINVAL;
        return -1;
    }
    memcpy(host, place, (size_t)(colon - place));
    host[colon - place] = 0;
    memset(&hints, 0, sizeof hints);
    hints.ai_socktype = SOCK_STREAM;
    if (getaddrinfo(host, colon + 1, &hints, &found)) {
        errno = EHOSTUNREACH;
        return -1;
    }
    for (at = found; at && stream->fd < 0; at = at->ai_next)
        dial(stream, at->ai_family, at->ai_addr, at->ai_addrlen);
    freeaddrinfo(found);
    return stream->fd < 0 ? -1 : 0;
}

int posix_stream_open(struct posix_stream *stream, const char *endpoint)
{
    stream->fd = -1;
    if (strncmp(endpoint, "ipc://", 6) == 0)
        return open_unix(stream, endpoint + 6);
    if (strncmp(endpoint, "tcp://", 6) == 0)
        return open_tcp(stream, endpoint + 6);
    errno = EINVAL;
    return -1;
}

void posix_stream_close(struct posix_stream *stream)
{
    if (stream->fd >= 0)
        close(stream->fd);
    stream->fd = -1;
}

static int would_wait(void)
{
    return errno == EAGAIN || errno == EWOULDBLOCK || errno == EINTR;
}

int posix_stream_send(struct posix_stream *stream, const uint8_t *bytes, size_t size)
{
    ssize_t sent = send(stream->fd, bytes, size, MSG_NOSIGNAL | MSG_DONTWAIT);

    return sent >= 0 ? (int)sent : would_wait() ? 0 : -1;
}

int posix_stream_receive(struct posix_stream *stream, uint8_t *bytes, size_t room)
{
    ssize_t got = recv(stream->fd, bytes, room, MSG_DONTWAIT);

    if (got == 0)
        return -1; /* the other end has closed */
    return got > 0 ? (int)got : would_wait() ? 0 : -1;
}

int posix_stream_wait(struct posix_stream *stream, int timeout_ms)
{
    struct pollfd entry;

    entry.fd = stream->fd;
    entry.events = POLLIN;
    entry.revents = 0;
    return poll(&entry, 1, timeout_ms) > 0;
}

uint64_t posix_now_us(void)
{
    struct timespec t;

    clock_gettime(CLOCK_MONOTONIC, &t);
    return (uint64_t)t.tv_sec * 1000000u + (uint64_t)t.tv_nsec / 1000u;
}
