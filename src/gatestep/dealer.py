"""The handshake of a ZMTP client, by hand: a stream socket that is then a DEALER.

Source: ZMTP 3.1, ZeroMQ RFC 37; the NULL mechanism.
"""

from __future__ import annotations

import socket

from .errors import LinkError
from .zmtp import GREETING_BYTES

CONNECT_S = 3.0
_UP_TO_VERSION = 12
_READY = b"\x05READY" + b"\x0bSocket-Type\x00\x00\x00\x06DEALER" + b"\x08Identity" + bytes(4)


def connect(endpoint: str, timeout_s: float = CONNECT_S) -> socket.socket:
    """A stream socket with ZMTP's NULL handshake done, as DEALER (ZMTP 3.1, RFC 37).

    Raises
    ------
    LinkError
        When nobody listens there or what listens is no ROUTER without CURVE.
    """
    try:
        link = _dial(endpoint, timeout_s)
    except OSError as fault:
        raise LinkError(
            f"loop endpoint {endpoint}: {fault.strerror or fault}; is the server running?"
        ) from fault
    try:
        _shake_hands(link, endpoint)
    except OSError as fault:
        link.close()
        raise LinkError(
            f"loop endpoint {endpoint}: no ZMTP handshake ({fault.strerror or fault}); "
            "is it a gatestep server's loop.endpoint?"
        ) from fault
    except BaseException:
        link.close()
        raise
    link.setblocking(False)
    return link


def _dial(endpoint: str, timeout_s: float) -> socket.socket:
    if endpoint.startswith("ipc://"):
        link = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        link.settimeout(timeout_s)
        name = endpoint.removeprefix("ipc://")
        try:
            link.connect(f"\0{name[1:]}" if name.startswith("@") else name)
        except OSError:
            link.close()
            raise
        return link
    host, _, port = endpoint.removeprefix("tcp://").rpartition(":")
    host = host.strip("[]")
    link = socket.create_connection(("127.0.0.1" if host == "*" else host, int(port)), timeout_s)
    link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    return link


def _shake_hands(link: socket.socket, endpoint: str) -> None:
    # Our mechanism goes last: a server that has another hangs up on it without a word.
    link.sendall(GREETING_BYTES[:_UP_TO_VERSION])
    theirs = _read(link, len(GREETING_BYTES))
    if theirs[0] != 0xFF or theirs[9] != 0x7F or theirs[10] < 3:
        raise LinkError(f"loop endpoint {endpoint}: what listens there does not speak ZMTP 3")
    mechanism = theirs[12:32].rstrip(b"\0").decode("ascii", "replace")
    if mechanism != "NULL":
        raise LinkError(
            f"loop endpoint {endpoint}: the server asks for {mechanism}; this client speaks NULL "
            "only, as a server without CURVE keys does: on loopback, ipc or by a list of peers"
        )
    link.sendall(GREETING_BYTES[_UP_TO_VERSION:] + bytes([4, len(_READY)]) + _READY)
    flags, size = _read(link, 2)
    body = _read(link, size)
    if flags != 4 or not body.startswith(b"\x05READY"):
        reason = (
            body[7:].decode("ascii", "replace") if body.startswith(b"\x05ERROR") else "no READY"
        )
        raise LinkError(f"loop endpoint {endpoint}: the server refused the handshake ({reason})")
    if b"ROUTER" not in body:
        raise LinkError(f"loop endpoint {endpoint}: is no ROUTER, hence no loop socket")


def _read(link: socket.socket, size: int) -> bytes:
    data = b""
    while len(data) < size:
        part = link.recv(size - len(data))
        if not part:
            raise ConnectionError("closed by the other end")
        data += part
    return data
