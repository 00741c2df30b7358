"""The control client: what the command line and scripts use to steer a server."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import msgpack
import zmq

from .closing import Closing
from .errors import ControlError, FileError, LinkError

DEFAULT_ENDPOINT = "tcp://127.0.0.1:5791"


class Control(Closing):
    """A connection to a server's control socket.

    Parameters
    ----------
    endpoint : str
        The server's ``control.endpoint``.
    timeout_s : float
        How long to wait for each answer; ``load`` waits ten times as long.
    curve_server, curve_client : path, optional
        For a server with CURVE keys: its public certificate and our secret one.

    Raises
    ------
    LinkError
        From any verb, when no server answers in time.
    ControlError
        From any verb, when the server refuses; the message is the server's.
    """

    def __init__(
        self,
        endpoint: str = DEFAULT_ENDPOINT,
        timeout_s: float = 3.0,
        curve_server: Path | None = None,
        curve_client: Path | None = None,
    ) -> None:
        self.endpoint, self.timeout_s = endpoint, timeout_s
        self._curve = (curve_server, curve_client) if curve_server and curve_client else None
        self._context = zmq.Context()
        try:
            self._socket = self._connected()
        except BaseException:
            self.close()
            raise

    def close(self) -> None:
        """Close the connection."""
        self._context.destroy(linger=0)

    def _connected(self) -> zmq.Socket[bytes]:
        socket: zmq.Socket[bytes] = self._context.socket(zmq.DEALER)
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.IPV6, int("[" in self.endpoint))
        if self._curve:
            use_curve(socket, *self._curve)
        try:
            socket.connect(self.endpoint)
        except (zmq.ZMQError, ValueError) as fault:
            raise LinkError(
                f"control endpoint {self.endpoint!r}: {fault}; give the server's control.endpoint, "
                f"such as {DEFAULT_ENDPOINT}"
            ) from fault
        return socket

    def ask(self, verb: str, timeout_s: float | None = None, **arguments: Any) -> dict[str, Any]:
        """Send any verb with its arguments; returns the server's answer."""
        request = {"verb": verb, **{k: v for k, v in arguments.items() if v is not None}}
        try:
            message = msgpack.packb(request)
        except (TypeError, ValueError, OverflowError) as fault:
            raise ControlError(f"{verb}: an argument cannot be sent: {fault}") from fault
        answer = self._read(self._exchange(message, timeout_s or self.timeout_s))
        if not answer.get("ok"):
            raise ControlError(str(answer.get("error", "the server refused without a reason")))
        return answer

    def _exchange(self, message: bytes, timeout_s: float) -> bytes:
        """Send a request and wait for what answers; neither takes longer than the time-out."""
        wait_ms = int(1000 * timeout_s)
        while self._socket.poll(0):
            self._socket.recv_multipart()
        # A socket of another kind, or one that refuses our keys, takes nothing at all.
        if self._socket.poll(wait_ms, zmq.POLLOUT):
            self._socket.send(message, zmq.DONTWAIT)
            if self._socket.poll(wait_ms):
                return self._socket.recv_multipart()[-1]
        # A new connection, so that an answer that comes late is not the next one's.
        self._socket.close(0)
        self._socket = self._connected()
        raise LinkError(
            f"no gatestep server answers at {self.endpoint}; start one with "
            "'gatestep serve RIG.toml', or name its control endpoint with --control"
        )

    def _read(self, message: bytes) -> dict[str, Any]:
        try:
            answer = msgpack.unpackb(message)
        except (ValueError, msgpack.exceptions.UnpackException):
            answer = None
        if not isinstance(answer, dict):
            raise LinkError(
                f"what answers at {self.endpoint} is no gatestep control socket; "
                "give the server's control.endpoint"
            )
        return answer

    def status(self) -> dict[str, Any]:
        """State, counters, percentiles and cells."""
        return self.ask("status")

    def arm(self, force: bool = False) -> dict[str, Any]:
        """Let the model's current flow."""
        return self.ask("arm", force=force or None)

    def disarm(self) -> dict[str, Any]:
        """Go to 0 pA."""
        return self.ask("disarm")

    def reset(self) -> dict[str, Any]:
        """Clear a trip."""
        return self.ask("reset")

    def load(self, model: str, cell: str | None = None) -> dict[str, Any]:
        """Prepare a model, a shipped one's name or a file, in the cell's other bank."""
        # Tables may take their time; that there is no server should show as soon as ever.
        self.status()
        path = Path(model)
        if path.suffix == ".toml" and path.exists():
            model = str(path.resolve())
        return self.ask("load", timeout_s=10 * self.timeout_s, model=model, cell=cell)

    def swap(self, cell: str | None = None, force: bool = False) -> dict[str, Any]:
        """Put the prepared model in force; while armed not one that would ring, unless forced."""
        return self.ask("swap", cell=cell, force=force or None)

    def set(self, key: str, value: float, cell: str | None = None) -> dict[str, Any]:
        """Change a parameter of the model in force, such as ``K.gmax_ns``."""
        return self.ask("set", key=key, value=value, cell=cell)

    def mark(self, text: str) -> dict[str, Any]:
        """Put a note into the record."""
        return self.ask("mark", text=text)

    def run(
        self,
        text: str,
        path: Path,
        seed: int | None = None,
        force: bool = False,
        timeout_s: float | None = None,
    ) -> dict[str, Any]:
        """Begin a plan: the text of its file, and the file's path for what it names beside it."""
        self.status()
        wait_s = timeout_s or 10 * self.timeout_s
        whole = str(path.resolve())
        return self.ask(
            "run", timeout_s=wait_s, text=text, path=whole, seed=seed, force=force or None
        )

    def halt(self) -> dict[str, Any]:
        """End the plan under way, at 0 pA."""
        return self.ask("halt")

    def stop(self) -> dict[str, Any]:
        """Stop the server, with 0 pA as its last answer."""
        return self.ask("stop")


def use_curve(socket: zmq.Socket[bytes], server: Path, client: Path) -> None:
    """Give a client's socket its CURVE keys, before it connects.

    Raises
    ------
    FileError
        When a certificate cannot be read, holds no secret key, or keys that are none.
    """
    import zmq.auth

    try:
        server_public, _ = zmq.auth.load_certificate(server)
        public, secret = zmq.auth.load_certificate(client)
    except (OSError, ValueError) as fault:
        raise FileError(f"CURVE certificate: {fault}") from fault
    if secret is None:
        raise FileError(f"{client}: holds no secret key; give the client's secret certificate")
    try:
        socket.curve_serverkey = server_public
        socket.curve_publickey, socket.curve_secretkey = public, secret
    except zmq.ZMQError as fault:
        raise FileError(f"CURVE certificates {server} and {client}: no valid keys") from fault
