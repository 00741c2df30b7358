"""A control client that loads and swaps models while a loop is measured."""

from __future__ import annotations

import statistics
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from gatestep.control import Control
from gatestep.errors import GatestepError


class Swapper:
    """Loads a model and swaps to it, one after the other, every ``every_ms``.

    Parameters
    ----------
    endpoint : str
        The server's control endpoint.
    models : tuple of str
        Taken in turn; names or absolute paths.
    every_ms : float
        From the start of one to the start of the next; a load that takes longer delays
        the next.
    """

    def __init__(self, endpoint: str, models: tuple[str, ...], every_ms: float) -> None:
        self._loads_s: list[float] = []
        self._swaps_s: list[float] = []
        self._worked_s = 0.0
        self._control = Control(endpoint)
        self._models, self._every_s = models, every_ms / 1e3
        self._done = threading.Event()
        self._fault: GatestepError | None = None

    @contextmanager
    def working(self) -> Iterator[None]:
        """Swap inside the block."""
        self._done.clear()
        began_s = time.monotonic()
        thread = threading.Thread(target=self._work, name="swapper")
        thread.start()
        try:
            yield
        finally:
            self._done.set()
            thread.join()
            self._worked_s += time.monotonic() - began_s
        if self._fault:
            raise self._fault

    def _work(self) -> None:
        due_s = time.monotonic()
        try:
            while not self._done.is_set():
                self._once()
                due_s = max(due_s + self._every_s, time.monotonic())
                self._done.wait(due_s - time.monotonic())
        except GatestepError as fault:
            self._fault = fault

    def _once(self) -> None:
        """One load and one swap, each timed until its answer."""
        before_s = time.monotonic()
        self._control.load(self._models[len(self._swaps_s) % len(self._models)])
        loaded_s = time.monotonic()
        self._control.swap()
        self._loads_s.append(loaded_s - before_s)
        self._swaps_s.append(time.monotonic() - loaded_s)

    def facts(self) -> dict[str, Any]:
        """How many swaps there were, how far apart, and how long load and swap took."""
        load_ms, swap_ms = (1e3 * statistics.median(s) for s in (self._loads_s, self._swaps_s))
        return {
            "swaps": len(self._swaps_s),
            "ms_for_each_swap": round(1e3 * self._worked_s / len(self._swaps_s), 1),
            "median_load_ms": round(load_ms, 1),
            "median_swap_ms": round(swap_ms, 2),
        }

    def counters(self) -> dict[str, int]:
        """The server's counters of what must not happen."""
        status = self._control.status()
        names = ("missed", "repeats", "malformed", "clipped", "trips", "records_lost")
        return {name: int(status[name]) for name in names}

    def close(self) -> None:
        """Let go of the server."""
        self._control.close()
