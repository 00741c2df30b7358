/* The few calls and constants of libzmq's stable C interface that are used here, so that
 * no header need be installed. Values as in the libzmq 4 reference.
 */
#ifndef ZMQ_CALLS_H
#define ZMQ_CALLS_H

#include <stddef.h>

void *zmq_ctx_new(void);
int zmq_ctx_term(void *context);
void *zmq_socket(void *context, int type);
int zmq_close(void *socket);
int zmq_bind(void *socket, const char *endpoint);
int zmq_connect(void *socket, const char *endpoint);
int zmq_setsockopt(void *socket, int option, const void *value, size_t size);
int zmq_send(void *socket, const void *bytes, size_t size, int flags);
int zmq_recv(void *socket, void *bytes, size_t size, int flags);
int zmq_errno(void);
const char *zmq_strerror(int error);

enum { ZMQ_DEALER = 5, ZMQ_ROUTER = 6 };
enum { ZMQ_LINGER = 17, ZMQ_RCVTIMEO = 27 };
enum { ZMQ_SNDMORE = 2 };

#endif
