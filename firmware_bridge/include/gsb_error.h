/* What can go wrong, and what each fault has done to the output.
 *
 * Functions return 0 or a positive value when all is well and one of these when not.
 * "0 pA" below means: every cell's current is 0 from this call on, whatever the slew
 * limit, until the answer to a sample that was taken after the fault.
 */
#ifndef GSB_ERROR_H
#define GSB_ERROR_H

enum gsb_error {
    GSB_OK = 0,
    /* Outcome of a call that found an answer it must not use: older than the newest one,
     * a repeat, or to a sample taken before the last fault or longer ago than the silence
     * time-out. Not an error; the output is as it was. */
    GSB_IGNORED = 1,

    /* A configuration or argument that cannot be right. Output: 0 pA, nothing started. */
    GSB_ERROR_ARGUMENT = -1,
    /* A buffer is too small, or the link is so far behind that a sample did not fit. The
     * codecs have no output and write nothing; from a device, the sample was not sent.
     * Output: 0 pA; idle as well where the link can say no more (ZMTP's READY or PONG). */
    GSB_ERROR_ROOM = -2,
    /* What came is no answer, or one for another number of cells. Output: 0 pA. */
    GSB_ERROR_MESSAGE = -3,
    /* A damaged serial frame: wrong check value, broken stuffing, too long. Output: 0 pA. */
    GSB_ERROR_FRAME = -4,
    /* The other end breaks ZMTP. Output: 0 pA; the link is of no use until opened anew. */
    GSB_ERROR_PROTOCOL = -5,
    /* The other end is no ROUTER without CURVE, speaks another major version of the
     * framing, or has another number of cells. Output: 0 pA; with ZMTP as above, on a serial
     * line the handshake begins again. */
    GSB_ERROR_PEER = -6,
    /* The port's send or receive reports that the link is gone. Output: 0 pA, idle. */
    GSB_ERROR_LINK = -7,
    /* An answer to a sample that was never taken. Output: 0 pA. */
    GSB_ERROR_SEQUENCE = -8,
    /* A current that is NaN or infinite. Output: 0 pA. */
    GSB_ERROR_NOT_FINITE = -9,
    /* A measured voltage that is NaN, infinite or outside its window. Output: 0 pA. The
     * sample is sent as it was measured, so that the server trips and records it. */
    GSB_ERROR_VOLTAGE = -10,
    /* The port could not read its converter. Output: 0 pA; NaN is sent for the sample. */
    GSB_ERROR_INPUT = -11,
    /* The port could not write its converter. Output: 0 pA is ordered and the write is
     * tried again at every call; what truly flows only the wiring can bound. */
    GSB_ERROR_OUTPUT = -12,
    /* No valid answer for the silence time-out, by the clock or by the count of ticks.
     * Output: 0 pA, state silent. */
    GSB_ERROR_SILENCE = -13,
    /* The handshake was not finished in time. Output: 0 pA, state idle. */
    GSB_ERROR_GREETING = -14,
    /* The clock went backwards, or stood still from one tick to the next. Output: 0 pA. */
    GSB_ERROR_CLOCK = -15,
    /* The server called a sample malformed ([nil, 128, 0]). Output: 0 pA. */
    GSB_ERROR_REJECTED = -16,
    /* The program stopped the device and has not released it. Output: 0 pA, idle. */
    GSB_ERROR_STOPPED = -17
};

#endif
