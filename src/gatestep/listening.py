"""Binding and listening for the direct lane: TCP, UNIX socket files, abstract names."""

from __future__ import annotations

import os
import socket
from pathlib import Path

from .errors import LinkError

_PROBE_S = 1.0
_QUEUE = 512


def listen(endpoint: str) -> socket.socket:
    """Bind and listen at ``tcp://ADDRESS:PORT`` or ``ipc://PATH``; the file is mode 0600.

    ``ipc://@NAME`` is a name without a file, as in libzmq.

    Raises
    ------
    LinkError
        When the endpoint cannot be bound.
    """
    unix = endpoint.startswith("ipc://")
    listener = socket.socket(
        socket.AF_UNIX if unix else _family(endpoint), socket.SOCK_STREAM | socket.SOCK_CLOEXEC
    )
    try:
        if unix:
            _bind_unix(listener, endpoint.removeprefix("ipc://"))
        else:
            _bind_tcp(listener, endpoint)
        listener.listen(_QUEUE)
    except (OSError, OverflowError) as fault:
        listener.close()
        raise LinkError(f"{endpoint}: {getattr(fault, 'strerror', None) or fault}") from fault
    return listener


def is_taken(endpoint: str) -> bool:
    """Whether somebody listens at an ``ipc://PATH``, which libzmq would take from them."""
    name = endpoint.removeprefix("ipc://")
    a_file = endpoint.startswith("ipc://") and not name.startswith("@")
    return a_file and Path(name).is_socket() and not _is_stale(name)


def _host_and_port(endpoint: str) -> tuple[str, int]:
    host, _, port = endpoint.removeprefix("tcp://").rpartition(":")
    return host.strip("[]"), int(port)


def _family(endpoint: str) -> socket.AddressFamily:
    return socket.AF_INET6 if ":" in _host_and_port(endpoint)[0] else socket.AF_INET


def _bind_tcp(listener: socket.socket, endpoint: str) -> None:
    host, port = _host_and_port(endpoint)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    listener.bind(("" if host == "*" else host, port))


def _bind_unix(listener: socket.socket, name: str) -> None:
    """A stale socket file is replaced; one that a server may listen at is not."""
    if name.startswith("@"):
        listener.bind(f"\0{name[1:]}")
        return
    if name == "*":
        raise OSError("the direct lane needs a path")
    if Path(name).is_socket():
        if not _is_stale(name):
            raise OSError("another server listens there")
        Path(name).unlink()
    mask = os.umask(0o177)
    try:
        listener.bind(name)
    finally:
        os.umask(mask)


def _is_stale(name: str) -> bool:
    """Whether nobody listens at a UNIX socket; one that is not ours to ask is not stale."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as probe:
        probe.settimeout(_PROBE_S)
        try:
            probe.connect(name)
        except ConnectionRefusedError:
            return True
        except OSError:
            return False
    return False
