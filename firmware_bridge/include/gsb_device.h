/* A whole device: rig, link and the five callbacks by which they reach one's own board.
 *
 * Two functions are called, both from the same place (the main loop, or the sample
 * interrupt), so that one never interrupts the other:
 *
 *     gsb_device_tick    at every tick of the sample clock
 *     gsb_device_poll    between ticks, as often as possible
 *
 * Every current reaches the converter through gsb_limit_pa and from nowhere else.
 */
#ifndef GSB_DEVICE_H
#define GSB_DEVICE_H

#include "gsb_link.h"
#include "gsb_rig.h"

#ifdef __cplusplus
extern "C" {
#endif

/* The five callbacks. None may wait. `context` is passed through. */
struct gsb_port {
    void *context;
    /* Measure every cell's voltage, mV. 0, or below 0 when the converter failed. */
    int (*read_voltage_mv)(void *context, float *v_mv, uint32_t cells);
    /* Put every cell's current on the converter, pA. 0, or below 0 when it failed. */
    int (*write_current_pa)(void *context, const float *i_pa, uint32_t cells);
    /* Send bytes: how many were taken, 0 to size; below 0 when the link is gone. */
    int (*send_bytes)(void *context, const uint8_t *bytes, size_t size);
    /* Bytes that have come: how many, 0 to room; below 0 when the link is gone. */
    int (*receive_bytes)(void *context, uint8_t *bytes, size_t room);
    /* A clock in microseconds that wraps at 2**32. Read at least every 30 minutes. */
    uint32_t (*now_us)(void *context);
};

/* A frame of a kind that a rig has no use for, handed to whoever has (a model on the
 * device). It may answer with gsb_link_put_frame(&device->link, ...). */
struct gsb_device;
typedef void (*gsb_control)(void *context, struct gsb_device *device, uint8_t kind,
                            const uint8_t *payload, size_t size);

struct gsb_device {
    struct gsb_rig rig;
    struct gsb_link link;
    struct gsb_port port;
    gsb_control control;     /* null: such frames are passed over */
    void *control_context;
    uint64_t now_us;
    uint32_t clock_us;       /* the port's clock when last read */
    uint64_t greeted_us;     /* when hello was last said */
    uint8_t stopped;         /* whether it was stopped and has not been released */
};

/* How often a hello is repeated, us. */
#define GSB_HELLO_US 100000u

/* Make a device, idle, and write 0 pA. The link must have been initialised (gsb_link_init);
 * it is copied. GSB_OK; GSB_ERROR_ARGUMENT, and then it stays idle for ever; or
 * GSB_ERROR_OUTPUT when that write failed, which is tried again at every call. */
int gsb_device_init(struct gsb_device *device, const struct gsb_rig_config *config,
                    const struct gsb_port *port, const struct gsb_link *link,
                    struct gsb_taken *taken, uint32_t count);

/* The stream under the callbacks has just been opened: greet. Call again after it was lost.
 * GSB_OK, or an error; GSB_ERROR_STOPPED from a stop to its release, and nothing is sent. */
int gsb_device_connect(struct gsb_device *device);

/* A tick: measure, write what now flows, send the sample. GSB_OK, or the last fault. */
int gsb_device_tick(struct gsb_device *device);

/* Receive, send what waits, watch the time. GSB_OK, or the last fault. After either call,
 * device->link.broken tells that the device is idle: open the stream anew and call
 * gsb_device_connect. */
int gsb_device_poll(struct gsb_device *device);

/* Take everything to 0 pA and go idle, for a stop button or an alarm of one's own. It holds
 * until the release: a program that connects again whenever the link is gone does not undo
 * it. Call it from where tick and poll are called. GSB_OK, or GSB_ERROR_OUTPUT when the
 * converter did not take the 0 pA, which is tried again at every call. */
int gsb_device_stop(struct gsb_device *device);

/* Let gsb_device_connect work again, by a deliberate act of whoever stopped the device. */
void gsb_device_release(struct gsb_device *device);

#ifdef __cplusplus
}
#endif

#endif
