"""A real server in this process, on free ports, for tests of what it does."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, NamedTuple

import msgpack
import pytest
import zmq
from hypothesis import HealthCheck, settings

from gatestep.config import LoadedRig
from gatestep.control import Control
from gatestep.server import Server
from gatestep.specs import RigSpec

# The same examples in every run; no deadline, for a first call may compile.
_SEEDED: dict[str, Any] = {
    "derandomize": True,
    "deadline": None,
    "suppress_health_check": [HealthCheck.too_slow, HealthCheck.data_too_large],
}
settings.register_profile("seeded", **_SEEDED)
settings.register_profile("few", max_examples=25, **_SEEDED)
settings.load_profile("seeded")

PATIENCE_S = 30.0
"""How long a test waits for what must come; only a failing test waits so long."""


def make_rig(folder: Path, **changes: Any) -> LoadedRig:
    """A rig of one cell with the squid axon model, on sockets in ``folder``.

    ``changes`` replace whole sections; ``cell`` may be a list.
    """
    sections: dict[str, Any] = {
        "loop": {"interval_us": 20.0},
        "cell": [
            {
                "name": "a",
                "model": "squid-axon",
                "capacitance_pf": 30.0,
                "limits": {"current_pa": 200_000.0},
            }
        ],
        "limits": {"silence_ms": 60_000.0},
        **changes,
    }
    for name in ("loop", "control", "feed"):
        endpoint = {"endpoint": f"ipc://{folder}/{name}"}
        sections[name] = {**endpoint, **sections.get(name, {})}
    return LoadedRig(folder / "rig.toml", "", RigSpec.model_validate(sections))


class Attended:
    """A server attended on a thread of its own, which is the only one to touch its sockets."""

    def __init__(self, rig: LoadedRig) -> None:
        self.rig, self.said, self.result = rig, [], None  # type: ignore[var-annotated]
        self.server = Server(rig, self.said.append)
        try:
            self.server.start()
        except BaseException:
            self.server.close()
            raise
        self._over = threading.Event()
        self.thread = threading.Thread(target=self._attend)
        self.thread.start()

    def _attend(self) -> None:
        self.result = self.server.attend(until=self._over.is_set)

    def close(self) -> None:
        self._over.set()
        self.thread.join(PATIENCE_S)
        self.server.close()


class Running(Attended):
    """A server attended on a thread, and a control client of it."""

    def __init__(self, rig: LoadedRig) -> None:
        super().__init__(rig)
        self.control = Control(self.server.endpoints()["control"], timeout_s=20)

    def close(self) -> None:
        self.control.close()
        super().close()


@contextmanager
def running(folder: Path, **changes: Any) -> Iterator[Running]:
    """A running server with the rig of :func:`make_rig`."""
    server = Running(make_rig(folder, **changes))
    try:
        yield server
    finally:
        server.close()


@pytest.fixture
def serving(tmp_path: Path) -> Iterator[Callable[..., Running]]:
    """Start servers that end with the test: ``serving(loop={...}, cell=[...])``."""
    started: list[Running] = []

    def start(**changes: Any) -> Running:
        folder = tmp_path / str(len(started))
        folder.mkdir()
        started.append(Running(make_rig(folder, **changes)))
        return started[-1]

    yield start
    for server in started:
        server.close()


class Reply(NamedTuple):
    """An answer as the reference MessagePack implementation reads it."""

    seq: int | None
    flags: int
    service_nsec: int
    i_pa: list[float]


def read_reply(message: bytes) -> Reply:
    """Bytes of an answer as a :class:`Reply`."""
    seq, flags, service_nsec, *i_pa = msgpack.unpackb(message)
    return Reply(seq, flags, service_nsec, i_pa)


class RawRig:
    """A rig in plain pyzmq and msgpack: a DEALER, or a REQ where ``kind`` says so."""

    def __init__(self, endpoint: str, kind: int = zmq.DEALER, **options: Any) -> None:
        self.context = zmq.Context()
        self.socket: zmq.Socket[bytes] = self.context.socket(kind)
        self.socket.setsockopt(zmq.LINGER, 0)
        # A refused handshake leaves a socket that takes nothing: a fault must not be a hang.
        for option in (zmq.SNDTIMEO, zmq.RCVTIMEO):
            self.socket.setsockopt(option, int(1000 * PATIENCE_S))
        for name, value in options.items():
            setattr(self.socket, name, value)
        self.socket.connect(endpoint)

    def __enter__(self) -> RawRig:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        self.context.destroy(linger=0)

    def send(
        self, seq: Any, *v_mv: Any, t_us: Any = None, in_force: Any = None, lag_us: Any = None
    ):
        """Send a sample; its clock shows 20 us a tick unless told otherwise."""
        clock = 20 * seq if t_us is None else t_us
        self.socket.send(msgpack.packb([seq, clock, in_force, lag_us, *v_mv]))

    def receive(self, timeout_s: float = PATIENCE_S) -> Reply | None:
        """The next answer, or None when none comes."""
        if not self.socket.poll(int(1000 * timeout_s)):
            return None
        return read_reply(self.socket.recv_multipart()[-1])

    def ask(self, seq: Any, *v_mv: Any, **known: Any) -> Reply:
        """Send a sample and wait for its answer."""
        self.send(seq, *v_mv, **known)
        return self.hear()

    def tell(self, *frames: bytes) -> Reply:
        """Send frames as they are and wait for the answer."""
        self.socket.send_multipart(frames)
        return self.hear()

    def hear(self) -> Reply:
        """The next answer, which must come."""
        reply = self.receive()
        assert reply is not None, "no answer came"
        return reply


def wait_until(true: Callable[[], Any], what: str) -> Any:
    """Wait for something that must become true; returns it."""
    deadline = time.monotonic() + PATIENCE_S
    while not (found := true()):
        assert time.monotonic() < deadline, f"never came: {what}"
        time.sleep(0.01)
    return found
