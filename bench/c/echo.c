/* The least that a libzmq server can do: a ROUTER that answers every message at once.
 *
 *   echo ENDPOINT SIZE
 *
 * Each message is answered with SIZE bytes, as many as a real answer has. Prints a line
 * when it is bound, and runs until it is killed.
 */
#include <stdio.h>
#include <stdlib.h>

#include "zmq_calls.h"

enum { LONGEST_ID = 255, LONGEST = 512 };

static int fail(const char *what, const char *why)
{
    fprintf(stderr, "echo: %s: %s\n", what, why);
    return 1;
}

int main(int argc, char **argv)
{
    static unsigned char peer[LONGEST_ID], message[LONGEST], answer[LONGEST];
    long size = argc == 3 ? strtol(argv[2], NULL, 10) : 0;
    if (size < 1 || size > LONGEST)
        return fail("usage", "echo ENDPOINT SIZE, 1 to 512 bytes");
    void *context = zmq_ctx_new();
    void *socket = context ? zmq_socket(context, ZMQ_ROUTER) : NULL;
    if (!socket)
        return fail("start", "no memory");
    if (zmq_bind(socket, argv[1]) < 0)
        return fail(argv[1], zmq_strerror(zmq_errno()));
    puts("ready");
    fflush(stdout);
    for (;;) {
        int id = zmq_recv(socket, peer, sizeof peer, 0);
        if (id < 0 || zmq_recv(socket, message, sizeof message, 0) < 0)
            return fail("receive", zmq_strerror(zmq_errno()));
        if (zmq_send(socket, peer, (size_t)id, ZMQ_SNDMORE) < 0 ||
            zmq_send(socket, answer, (size_t)size, 0) < 0)
            return fail("send", zmq_strerror(zmq_errno()));
    }
}
