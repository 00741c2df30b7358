"""A real server in this process, on free ports, for tests of what it does."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from gatestep.config import LoadedRig
from gatestep.control import Control
from gatestep.server import Server
from gatestep.specs import RigSpec


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


class Running:
    """A server attended on a thread, and a control client of it."""

    def __init__(self, rig: LoadedRig) -> None:
        self.rig, self.said, self.result = rig, [], None  # type: ignore[var-annotated]
        self.server = Server(rig, self.said.append)
        self.server.start()
        self.thread = threading.Thread(target=self._attend)
        self.thread.start()
        self.control = Control(self.server.endpoints()["control"], timeout_s=20)

    def _attend(self) -> None:
        self.result = self.server.attend()

    def close(self) -> None:
        if self.thread.is_alive():
            self.server.order_stop()
            self.thread.join(20)
        self.control.close()
        self.server.close()


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
