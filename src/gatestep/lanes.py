"""The loop's way in and out, whichever lane it takes.

Above this module there is one code path. The lane is known by the type of its record,
so each loop is compiled with the lane it uses and carries nothing of the other:

- *libzmq lane* (:mod:`gatestep.zmqlane`): libzmq's own threads do the sockets.
- *direct lane* (:mod:`gatestep.direct`): the loop speaks ZMTP at the socket itself.

A lane's record has, whatever else: ``message`` and ``out``, ``peer`` with
``peer_size`` (who sent the last message), ``peer_serial`` (its connection, 0 where the
lane is not told when connections end), ``gone`` (serial of a connection that has just
ended), ``undelivered``, and ``time`` with ``time_at``.
"""

from __future__ import annotations

from typing import Any

from numba.extending import overload

from .direct import close_direct, receive_direct, reply_direct
from .zmqlane import receive_zmq, reply_zmq

_OPTIONS = {"nogil": True, "error_model": "numpy", "_nrt": False}


def _is_direct(lane: Any) -> bool:
    """Whether a record, or numba's type of one, is the direct lane's."""
    fields = getattr(lane, "fields", None) or lane.dtype.fields
    return "listen" in fields


def receive(lane: Any) -> int:
    """[hot] Wait for a message, a few ms at most.

    Returns the message's size in ``lane.message``; a size over ``MAX_MESSAGE`` means
    that it was too long or came in too many frames. ``NOTHING`` when none came,
    ``CLOSED`` when the lane can no longer be used.
    """
    return int(receive_direct(lane) if _is_direct(lane) else receive_zmq(lane))


def reply(lane: Any, size: int) -> int:
    """[hot] Answer the last message's peer with ``lane.out``: SENT, STALLED or GONE."""
    return int(reply_direct(lane, size) if _is_direct(lane) else reply_zmq(lane, size))


def close_lane(lane: Any) -> None:
    """[hot] End what connections the loop itself has."""
    if _is_direct(lane):
        close_direct(lane)


@overload(receive, strict=False, jit_options=_OPTIONS)
def _receive(lane: Any) -> Any:
    if _is_direct(lane):
        return lambda lane: receive_direct(lane)
    return lambda lane: receive_zmq(lane)


@overload(reply, strict=False, jit_options=_OPTIONS)
def _reply(lane: Any, size: Any) -> Any:
    if _is_direct(lane):
        return lambda lane, size: reply_direct(lane, size)
    return lambda lane, size: reply_zmq(lane, size)


@overload(close_lane, strict=False, jit_options=_OPTIONS)
def _close_lane(lane: Any) -> Any:
    if _is_direct(lane):
        return lambda lane: close_direct(lane)
    return lambda lane: None
