"""Load on the machine, made to order: compiled threads that compute and stir memory.

Threads of this process, so that nothing is left behind however it ends; each also
ends by itself at a time set when it starts.
"""

from __future__ import annotations

import os
import threading
import time
from types import TracebackType
from typing import Any, Self

import numpy as np
from numba import types

from .compiling import compiled

WORKING_BYTES = 4 << 20
"""Memory that each burner walks through: more than a core's own cache."""

_MONOTONIC = 1
_STEPS = 20_000
_clock_gettime: Any = types.ExternalFunction("clock_gettime", types.intc(types.intc, types.uintp))


@compiled
def burn(order: Any, clock: Any, clock_at: int, memory: Any) -> Any:
    """Compute until told to stop or until the time is up; rounds done.

    Parameters
    ----------
    order : ndarray (2,) of int64
        Not 0 in the first place stops it; monotonic time, ns, in the second ends it.
    clock : ndarray (2,) of int64
        For the clock, at address ``clock_at``.
    memory : ndarray of float64
        What it walks through; a power of two long.
    """
    place = np.uint64(0)
    mask = np.uint64(memory.size - 1)
    rounds = 0
    while order[0] == 0:
        for _ in range(_STEPS):
            place = (place * np.uint64(6364136223846793005) + np.uint64(1442695040888963407)) & mask
            memory[place] = memory[place] * 0.999 + 1.0
        rounds += 1
        _clock_gettime(_MONOTONIC, np.uint64(clock_at))
        if clock[0] * 1_000_000_000 + clock[1] > order[1]:
            break
    return rounds


def usable_cores() -> int:
    """Cores that this process may run on."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class Burners:
    """So many burners, running inside the ``with`` block and nowhere else.

    Parameters
    ----------
    count : int
        How many threads, from 1.
    seconds : float
        They end by themselves after this long.
    """

    def __init__(self, count: int, seconds: float) -> None:
        self._order = np.zeros(2, np.int64)
        self._seconds = seconds
        self._threads = [
            threading.Thread(target=self._burn, name=f"burner {k}", daemon=True)
            for k in range(count)
        ]

    def _burn(self) -> None:
        clock = np.zeros(2, np.int64)
        burn(self._order, clock, clock.ctypes.data, np.ones(WORKING_BYTES // 8))

    def __enter__(self) -> Self:
        self._order[1] = time.monotonic_ns() + int(self._seconds * 1e9)
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        fault: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._order[0] = 1
        for thread in self._threads:
            thread.join()

    @property
    def running(self) -> int:
        """Burners that run now."""
        return sum(thread.is_alive() for thread in self._threads)
