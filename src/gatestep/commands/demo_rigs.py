"""The demo's two processes, a server and a simulated rig, over free local ports."""

from __future__ import annotations

import signal
import socket
import subprocess
import sys
import threading
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError

if TYPE_CHECKING:
    from ..control import Control

STATEMENT = "Simulated cell and simulated data: no recording from a real cell."

_PIECE_S = 0.05
_PATIENCE_S = 120.0

_SOCKETS = """\
# Written by gatestep demo. {statement}
[loop]
endpoint = "tcp://127.0.0.1:{0}"
interval_us = {interval_us}

[control]
endpoint = "tcp://127.0.0.1:{1}"

[feed]
endpoint = "tcp://127.0.0.1:{2}"

[limits]
silence_ms = 20000          # the simulated rig waits while the server compiles

"""


def write_rig(path: Path, interval_us: float, cells: str) -> Path:
    """Write a rig file with sockets on free ports; ``cells`` is the rest of it.

    Raises
    ------
    FileError
        When it cannot be written.
    """
    text = _SOCKETS.format(*_free_ports(3), statement=STATEMENT, interval_us=interval_us) + cells
    return write_file(path, text)


def write_file(path: Path, text: str) -> Path:
    """Write a text file, its folder made when missing.

    Raises
    ------
    FileError
        When it cannot be written.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")
    except OSError as fault:
        folder, reason = path.parent, fault.strerror or fault
        raise FileError(f"--out {folder}: {reason}; choose another folder") from fault
    return path


def _free_ports(count: int) -> list[int]:
    sockets = [socket.socket() for _ in range(count)]
    try:
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        return [each.getsockname()[1] for each in sockets]
    finally:
        for each in sockets:
            each.close()


@contextmanager
def served(rig_file: Path, *options: str) -> Iterator[tuple[Any, Control]]:
    """A server in a process of its own, with options; it has ended afterwards."""
    from ..config import load_rig
    from ..control import Control

    command = [sys.executable, "-m", "gatestep", "serve", str(rig_file), "--json", *options]
    endpoint = load_rig(rig_file).spec.control.endpoint
    server = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        with Control(endpoint) as control:
            yield server, control
    finally:
        if server.poll() is None:
            server.send_signal(signal.SIGINT)
            try:
                server.wait(5)
            except subprocess.TimeoutExpired:
                server.kill()
                server.wait()


@contextmanager
def living(rig_file: Path) -> Iterator[SimulatedLife]:
    """The simulated rig of a file, in this process, sampling until the block ends."""
    over = threading.Event()
    with ThreadPoolExecutor(1, thread_name_prefix="rig") as pool:
        life = SimulatedLife(rig_file, over, pool)
        try:
            yield life
        finally:
            over.set()


class SimulatedLife:
    """A simulated rig at work on a thread, and what its round trips took."""

    def __init__(self, rig_file: Path, over: threading.Event, pool: ThreadPoolExecutor) -> None:
        self._rig_file, self._over = rig_file, over
        self._trips: list[Any] = []
        self._work = pool.submit(self._live)

    def check(self) -> None:
        """Raise what ended the rig, if anything has."""
        if self._work.done():
            self._work.result()

    def end(self) -> dict[str, float]:
        """End it; percentiles of its round trips, µs."""
        import numpy as np

        self._over.set()
        self._work.result()
        trips = np.concatenate(self._trips) / 1000.0
        return {name: float(np.percentile(trips, q)) for name, q in (("p50", 50), ("p99", 99))}

    def _live(self) -> None:
        from ..config import load_rig
        from ..simrig import SimRig

        rig = load_rig(self._rig_file)
        with SimRig(rig.spec, rig.folder, connect_s=_PATIENCE_S) as there:
            while not self._over.is_set():
                trace = there.run(_PIECE_S)
                self._trips.append(trace.round_trip_nsec[trace.round_trip_nsec >= 0])


def check_alive(process: Any, name: str) -> None:
    """Raise LinkError, with what it said, when a process has ended."""
    if process.poll() is not None:
        raise LinkError(
            f"the {name} ended with status {process.returncode}: {process.stderr.read()}"
        )
