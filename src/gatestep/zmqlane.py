"""The libzmq lane: compiled code on the very libzmq that pyzmq has loaded.

It works on sockets that pyzmq made: ``Socket.underlying`` is the address libzmq knows
them by. The functions are declared as external symbols rather than pointers, so
numba's on-disk cache keeps working. This lane does CURVE and all else that libzmq
does, and runs wherever libzmq runs. The loop's inproc sockets are served from here in
either lane.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import llvmlite.binding as llvm
import numpy as np
import zmq
from numba import types

from .compiling import compiled, inner
from .errors import LinkError
from .kernel import records
from .lanebase import CLOSED, GONE, MAX_PEER, NOTHING, SENT, STALLED
from .wire import MAX_MESSAGE

ZMQ_LANE = np.dtype(
    [
        ("socket", "u8"),  # libzmq's address of the loop socket
        ("message_at", "u8"),  # addresses and contents of the buffers below
        ("peer_at", "u8"),
        ("out_at", "u8"),
        ("more_at", "u8"),
        ("size_at", "u8"),
        ("time_at", "u8"),
        ("peer_size", "i8"),  # of the peer that sent the last message
        ("peer_serial", "i8"),  # 0: this lane is not told of connections that end
        ("gone", "i8"),
        ("enveloped", "i8"),  # whether an empty frame stood before the message (REQ)
        ("undelivered", "i8"),  # answers whose peer had gone or did not read
        ("message", "u1", (MAX_MESSAGE,)),
        ("peer", "u1", (MAX_PEER,)),
        ("out", "u1", (MAX_MESSAGE,)),
        ("more", "i4", (2,)),
        ("size", "u8"),
        ("time", "i8", (2,)),
    ],
    align=True,
)

_DONT_WAIT = int(zmq.DONTWAIT)
_SEND_MORE = int(zmq.SNDMORE) | _DONT_WAIT
_RCVMORE = int(zmq.RCVMORE)
_EAGAIN = int(zmq.EAGAIN)
_EHOSTUNREACH = int(zmq.EHOSTUNREACH)
_EINTR = 4
_MAX_MESSAGE = MAX_MESSAGE
_MAX_PEER = MAX_PEER

_pointer = types.uintp
_zmq_recv: Any = types.ExternalFunction(
    "zmq_recv", types.intc(_pointer, _pointer, _pointer, types.intc)
)
_zmq_send: Any = types.ExternalFunction(
    "zmq_send", types.intc(_pointer, _pointer, _pointer, types.intc)
)
_zmq_getsockopt: Any = types.ExternalFunction(
    "zmq_getsockopt", types.intc(_pointer, types.intc, _pointer, _pointer)
)
_zmq_errno: Any = types.ExternalFunction("zmq_errno", types.intc())


def load_libzmq() -> Path:
    """Make the libzmq that pyzmq uses known to compiled code; returns its path.

    Raises
    ------
    LinkError
        When the library cannot be found.
    """
    for path in _libzmq_candidates():
        if path.exists():
            llvm.load_library_permanently(str(path))
            return path
    raise LinkError(
        "libzmq: the library that pyzmq carries was not found; "
        "reinstall it with: pip install --force-reinstall pyzmq"
    )


def _libzmq_candidates() -> list[Path]:
    """Where libzmq may be: what this process has mapped, then beside pyzmq."""
    maps = Path("/proc/self/maps")
    mapped = re.findall(r"(/\S*libzmq\S*)", maps.read_text()) if maps.exists() else []
    site = Path(zmq.__file__).resolve().parent
    beside = [*site.parent.glob("pyzmq.libs/libzmq*"), *site.glob(".dylibs/libzmq*")]
    extension = sorted(site.glob("backend/cython/_zmq*"))
    return [Path(p) for p in dict.fromkeys(mapped)] + beside + extension


def make_zmq_lane() -> Any:
    """A ``ZMQ_LANE`` record array of length 1; set its ``socket`` to ``Socket.underlying``.

    The array must outlive every use: the record holds addresses into itself.
    """
    lane = records(ZMQ_LANE)
    base = int(lane.ctypes.data)
    offsets = {name: base + field[1] for name, field in ZMQ_LANE.fields.items()}  # type: ignore[union-attr]
    record = lane[0]
    for name in ("message", "peer", "out", "more", "size", "time"):
        record[f"{name}_at"] = offsets[name]
    return lane


@compiled
def send(socket: Any, address: Any, size: int) -> bool:
    """[hot] Send one single-frame message without waiting; False when it cannot be."""
    return _zmq_send(socket, address, np.uint64(size), _DONT_WAIT) >= 0


@compiled
def take(socket: Any, address: Any, capacity: int) -> int:
    """[hot] Size of a single-frame message if one is there, else ``NOTHING``."""
    return np.int64(_zmq_recv(socket, address, np.uint64(capacity), _DONT_WAIT))


@inner
def _more(lane: Any) -> bool:
    """[hot] Whether the message goes on in a further frame."""
    lane.size = 8
    lane.more[0] = 0
    _zmq_getsockopt(lane.socket, _RCVMORE, lane.more_at, lane.size_at)
    return lane.more[0] != 0


@inner
def _frame(lane: Any) -> int:
    """[hot] Read the message's next frame into ``lane.message``; its full size."""
    return np.int64(_zmq_recv(lane.socket, lane.message_at, np.uint64(_MAX_MESSAGE), _DONT_WAIT))


@compiled
def receive_zmq(lane: Any) -> int:
    """[hot] Wait for a message, at most the socket's receive time-out.

    Returns the message's size in ``lane.message``; a size over ``MAX_MESSAGE``
    means that it was too long or came in too many frames. ``NOTHING`` when none came,
    ``CLOSED`` when the socket is gone. The peer's id is left in ``lane.peer``.
    """
    size = np.int64(_zmq_recv(lane.socket, lane.peer_at, np.uint64(_MAX_PEER), 0))
    if size < 0:
        error = _zmq_errno()
        return NOTHING if error == _EAGAIN or error == _EINTR else CLOSED
    lane.peer_size = size
    lane.enveloped = 0
    size = 0
    if _more(lane):
        size = _frame(lane)
        if size == 0 and _more(lane):
            lane.enveloped = 1
            size = _frame(lane)
    while _more(lane):
        _frame(lane)
        size = _MAX_MESSAGE + 1
    return size


@compiled
def reply_zmq(lane: Any, size: int) -> int:
    """[hot] Answer the last message's peer with ``lane.out``: SENT, STALLED or GONE."""
    peer_size = np.uint64(lane.peer_size)
    if _zmq_send(lane.socket, lane.peer_at, peer_size, _SEND_MORE) < 0:
        lane.undelivered += 1
        return GONE if _zmq_errno() == _EHOSTUNREACH else STALLED
    if lane.enveloped:
        _zmq_send(lane.socket, lane.peer_at, np.uint64(0), _SEND_MORE)
    _zmq_send(lane.socket, lane.out_at, np.uint64(size), _DONT_WAIT)
    return SENT
