"""The loop socket from the outside: which lane it takes, binding it and giving it up."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any, Literal

import zmq

from .config import LoadedRig
from .direct import attach_direct, make_direct
from .errors import LinkError
from .listening import is_taken, listen
from .network import Gatekeeper
from .zmqlane import make_zmq_lane

WAIT_MS = 5
"""Longest that the loop waits for a message before it looks at its orders again."""
MAX_INCOMING = 1 << 20
"""A longer message ends the connection that it comes from."""


def choose_lane(rig: LoadedRig) -> Literal["direct", "libzmq"]:
    """The lane that a rig file asks for; ``auto`` is direct wherever that can serve."""
    asked = rig.spec.loop.lane
    if asked == "auto":
        able = sys.platform == "linux" and rig.spec.network.curve_secret is None
        return "direct" if able else "libzmq"
    if asked == "direct" and sys.platform != "linux":
        raise LinkError(f"{rig.path}: loop.lane = 'direct' needs Linux; use 'auto' or 'libzmq'")
    return asked


class LoopPort:
    """The loop socket of one server.

    ``lane`` is the record that the compiled loop takes; it is there before
    :meth:`bind`, so that the loop can be compiled first.
    """

    def __init__(
        self, rig: LoadedRig, context: zmq.Context[zmq.Socket[bytes]], gatekeeper: Gatekeeper
    ) -> None:
        self._rig, self._context, self._gatekeeper = rig, context, gatekeeper
        self.kind = choose_lane(rig)
        self.endpoint = rig.spec.loop.endpoint
        self._listener: Any = None
        self._file = (0, 0)
        direct = self.kind == "direct"
        peers = gatekeeper.loop_peers(self.endpoint)
        self.lane = make_direct(WAIT_MS, peers) if direct else make_zmq_lane()

    def bind(self) -> None:
        """Bind and listen.

        Raises
        ------
        LinkError
            When the endpoint is taken or cannot be bound.
        """
        if self.kind == "direct":
            self._listener = listen(self.endpoint)
            attach_direct(self.lane, self._listener)
            if self.endpoint.startswith("tcp://"):
                host = self.endpoint.rpartition(":")[0]
                self.endpoint = f"{host}:{self._listener.getsockname()[1]}"
            self._file = _identity(self.endpoint)
            return
        socket = bound_socket(self._context, zmq.ROUTER, self.endpoint, self._gatekeeper)
        socket.setsockopt(zmq.ROUTER_MANDATORY, 1)
        socket.setsockopt(zmq.RCVTIMEO, WAIT_MS)
        self._socket = socket  # a socket that nobody holds is closed
        self.lane[0].socket = socket.underlying
        self.endpoint = bound_endpoint(socket)

    def close(self) -> None:
        """Stop listening; a socket file is taken away."""
        if self._listener is not None:
            self._listener.close()
            if self._file != (0, 0) and self._file == _identity(self.endpoint):
                Path(self.endpoint[6:]).unlink(missing_ok=True)


def _identity(endpoint: str) -> tuple[int, int]:
    """Device and number of an endpoint's socket file; zeros when it has none."""
    if not endpoint.startswith("ipc://") or endpoint.startswith("ipc://@"):
        return (0, 0)
    try:
        found = Path(endpoint[6:]).stat()
    except OSError:
        return (0, 0)
    return (found.st_dev, found.st_ino)


def bound_socket(
    context: zmq.Context[zmq.Socket[bytes]], kind: int, endpoint: str, gatekeeper: Gatekeeper
) -> zmq.Socket[bytes]:
    """A guarded libzmq socket, bound.

    Raises
    ------
    LinkError
        When the endpoint is taken or cannot be bound.
    """
    if is_taken(endpoint):
        raise LinkError(f"{endpoint}: another server listens there")
    socket: zmq.Socket[bytes] = context.socket(kind)
    socket.setsockopt(zmq.LINGER, 200)
    socket.setsockopt(zmq.MAXMSGSIZE, MAX_INCOMING)
    socket.setsockopt(zmq.IPV6, int("[" in endpoint))
    gatekeeper.guard(socket, endpoint)
    try:
        socket.bind(endpoint)
    except zmq.ZMQError as fault:
        raise LinkError(f"{endpoint}: {fault}") from fault
    if endpoint.startswith("ipc://") and not endpoint.startswith("ipc://@"):
        Path(endpoint[6:]).chmod(0o600)
    return socket


def bound_endpoint(socket: zmq.Socket[bytes]) -> str:
    """Where a socket is bound, with the port the system chose."""
    return bytes(socket.getsockopt(zmq.LAST_ENDPOINT)).decode().rstrip("\0")
