"""The demo's two processes, a server and a simulated rig, over free local ports."""

from __future__ import annotations

import json
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError

if TYPE_CHECKING:
    from ..control import Control

STATEMENT = "Simulated cell and simulated data: no recording from a real cell."

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
def processes(rig_file: Path, trace: Path, *options: str) -> Iterator[tuple[Any, Any, Control]]:
    """A server, with options, and a simulated rig for it; both have ended afterwards."""
    from ..config import load_rig
    from ..control import Control

    command = [sys.executable, "-m", "gatestep"]
    endpoint = load_rig(rig_file).spec.control.endpoint
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    server = subprocess.Popen([*command, "serve", str(rig_file), "--json", *options], **pipes)  # type: ignore[call-overload]
    rig = subprocess.Popen(
        [*command, "simrig", str(rig_file), "--json", "--wait", "120", "--out", str(trace)], **pipes
    )  # type: ignore[call-overload]
    try:
        with Control(endpoint) as control:
            yield server, rig, control
    finally:
        for process in (rig, server):
            if process.poll() is None:
                process.send_signal(signal.SIGINT)
                try:
                    process.wait(5)
                except subprocess.TimeoutExpired:
                    process.kill()
                    process.wait()


def check_alive(process: Any, name: str) -> None:
    """Raise LinkError, with what it said, when a process has ended."""
    if process.poll() is not None:
        raise LinkError(
            f"the {name} ended with status {process.returncode}: {process.stderr.read()}"
        )


def finish(rig: Any) -> dict[str, Any]:
    """The simulated rig's figures once it is through; LinkError when it failed."""
    printed, said = rig.communicate(timeout=120)
    if rig.returncode:
        raise LinkError(f"the simulated rig ended with status {rig.returncode}: {said.strip()}")
    figures: dict[str, Any] = json.loads(printed)
    return figures
