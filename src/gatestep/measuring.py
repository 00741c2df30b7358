"""Measure a loop: connect the compiled client, run it by the clock and flat out.

The client takes the place of a rig on its loop socket and reports a made-up voltage
with spikes in it; there is no cell. What comes back is kept sample by sample in a
:class:`Run`; :mod:`gatestep.timing` makes figures of it.
"""

from __future__ import annotations

import ctypes
import os
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .burners import usable_cores
from .closing import Closing
from .dealer import connect
from .errors import LinkError
from .probe import (
    Columns,
    Status,
    make_columns,
    make_memory,
    run_flat,
    run_paced,
    sleep_overshoot,
)
from .specs import RigSpec
from .wire import LIVE, NIL

Floats = npt.NDArray[np.float64]
Whole = npt.NDArray[np.int64]
Progress = Callable[[float], None]
"""Called with the share of a run that is done, 0 to 1."""

REALTIME_PRIORITY = 10
PATIENCE_S = 2.0
"""How long a missing answer is waited for at the end of a run, and flat out at all."""
WAVEFORM = "made up: a cell at rest at -65 mV that spikes at 50 Hz"
_PERIOD_MS = 20.0
_FLAT_ROWS_A_SECOND = 250_000
_LOOK_S = 0.1
_START_NSEC = 200_000
_PR_SET_TIMERSLACK = 29


@dataclass(frozen=True)
class Run:
    """What one run of the client saw; row n is its n-th tick.

    Attributes
    ----------
    status : Status
        ``DONE``, or what ended it early (``NO_ANSWER`` at the end of a paced run means
        that some answers never came).
    interval_us : float
    start_nsec : int
        The monotonic clock at row 0 of a paced run; 0 flat out.
    seconds : float
        How long it took.
    sent_nsec, arrived_nsec : array (n,)
        The monotonic clock just before a sample was sent (0: none was) and when its
        answer was read (0: never).
    service_nsec, flags : array (n,)
        The answer's own; -1 where none came.
    garbled, strays, unsent : int
        Messages that are no answer; answers to no sample; samples that found no room.
    """

    status: Status
    interval_us: float
    start_nsec: int
    seconds: float
    sent_nsec: Whole
    arrived_nsec: Whole
    service_nsec: Whole
    flags: Whole
    garbled: int
    strays: int
    unsent: int

    @property
    def sent(self) -> npt.NDArray[np.bool_]:
        """Rows whose sample went out."""
        return np.asarray(self.sent_nsec > 0)

    @property
    def answered(self) -> npt.NDArray[np.bool_]:
        """Rows whose answer came."""
        return np.asarray(self.arrived_nsec > 0)

    @property
    def round_trip_us(self) -> Floats:
        """From sending to having the answer, for the rows that were answered, in order."""
        found = self.answered
        return np.asarray((self.arrived_nsec[found] - self.sent_nsec[found]) / 1000.0)

    @property
    def service_us(self) -> Floats:
        """The server's own part of it, as each answer states."""
        return np.asarray(self.service_nsec[self.answered] / 1000.0)

    @property
    def send_late_us(self) -> Floats:
        """How long after its tick's start each sample of a paced run was sent."""
        due = self.start_nsec + np.arange(self.sent_nsec.size) * self.interval_us * 1000.0
        return np.asarray((self.sent_nsec[self.sent] - due[self.sent]) / 1000.0)

    @property
    def live(self) -> int:
        """Answers that came from an armed loop."""
        return int(np.sum((self.flags > 0) & (self.flags & LIVE != 0)))


class Probe(Closing):
    """A measuring client, connected to a loop socket.

    Parameters
    ----------
    endpoint : str
        ``tcp://ADDRESS:PORT`` or ``ipc://PATH``, without CURVE.
    spec : RigSpec
        Tick, cells and how the rig applies an answer.
    may_be_live : bool
        Whether the loop may be armed; if not, a live answer ends a run at once.
    sleep : bool
        Sleep until an answer comes, instead of asking the socket again and again. A
        machine with one usable core always sleeps.
    realtime : bool
        Give the client's thread real-time priority, as a rig that is no program of this
        machine has: no load here can then keep it from sampling.
    patience_s : float
        How long a missing answer is waited for.

    Raises
    ------
    LinkError
        When nobody speaks ZMTP there, or only with CURVE, or real-time priority is not
        allowed.
    """

    def __init__(
        self,
        endpoint: str,
        spec: RigSpec,
        *,
        may_be_live: bool = True,
        sleep: bool = True,
        realtime: bool = False,
        patience_s: float = PATIENCE_S,
    ) -> None:
        self.endpoint, self.realtime = endpoint, realtime
        if realtime:
            _check_realtime()
        self.sleeps = sleep or usable_cores() < 2
        self._interval_us = spec.loop.interval_us
        self._memory = make_memory(spike_wave_mv(spec))
        probe = self._memory.probe[0]
        probe.interval_nsec = spec.loop.interval_us * 1000.0
        probe.on_arrival = spec.loop.apply == "on-arrival"
        probe.may_be_live, probe.spin = may_be_live, not self.sleeps
        probe.patience_nsec = int(patience_s * 1e9)
        self._seq = 0
        self._socket = connect(endpoint)
        probe.fd = self._socket.fileno()
        self._prepare()

    def _prepare(self) -> None:
        """Compile, and learn how well this machine's sleeps keep to the time."""
        none = make_columns(0)
        run_paced(self._memory, none)
        run_flat(self._memory, none, 0)
        late_nsec = np.zeros(100, np.int64)
        self._in_thread(lambda: sleep_overshoot(self._memory, 100_000, late_nsec) or 0)
        margin_nsec = 1.2 * float(np.percentile(late_nsec, 90))
        self._memory.probe[0].margin_nsec = int(min(max(margin_nsec, 10_000), 200_000))

    @property
    def facts(self) -> dict[str, str | bool]:
        """What a result says of the client."""
        return {"sleeps": self.sleeps, "realtime": self.realtime, "voltage": WAVEFORM}

    def paced(self, ticks: int, progress: Progress | None = None) -> Run:
        """Send a sample at each of so many ticks of the monotonic clock."""
        columns = make_columns(ticks)
        self._begin()

        def body() -> int:
            # Set on the client's own thread: the thread may have been slow to start.
            self._memory.probe[0].start_nsec = time.monotonic_ns() + _START_NSEC
            return int(run_paced(self._memory, columns))

        return self._run(body, columns, ticks * self._interval_us * 1e-6, progress)

    def flat(self, seconds: float, progress: Progress | None = None) -> Run:
        """Send, wait for the answer, send the next, for so long."""
        columns = make_columns(max(1, int(seconds * _FLAT_ROWS_A_SECOND)))
        self._begin()
        until = time.monotonic_ns() + int(seconds * 1e9)
        return self._run(lambda: run_flat(self._memory, columns, until), columns, seconds, progress)

    def _begin(self) -> None:
        """A fresh run; between runs a rig's output goes to 0 pA by itself."""
        probe = self._memory.probe[0]
        probe.start_nsec, probe.first = 0, self._seq
        probe.halt = probe.row = probe.outstanding = probe.settled = 0
        probe.in_force = probe.coming = NIL
        probe.garbled = probe.strays = probe.unsent = 0

    def _run(
        self, body: Callable[[], int], columns: Columns, seconds: float, progress: Progress | None
    ) -> Run:
        probe = self._memory.probe[0]
        began = time.monotonic()

        def look() -> None:
            if progress is not None:
                progress(min(1.0, (time.monotonic() - began) / seconds))

        status = Status(self._in_thread(body, look))
        done = int(probe.row)
        self._seq += done
        return Run(
            status,
            self._interval_us,
            int(probe.start_nsec),
            time.monotonic() - began,
            columns.sent_nsec[:done],
            columns.arrived_nsec[:done],
            columns.service_nsec[:done],
            columns.flags[:done],
            int(probe.garbled),
            int(probe.strays),
            int(probe.unsent),
        )

    def _in_thread(self, body: Callable[[], int], look: Callable[[], None] = lambda: None) -> int:
        """Run compiled code beside this thread, which stays free for Ctrl-C and progress."""
        found: list[int] = []

        def work() -> None:
            _keep_exact_time()
            if self.realtime:
                os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(REALTIME_PRIORITY))
            found.append(int(body()))

        thread = threading.Thread(target=work, name="measuring client")
        thread.start()
        try:
            while thread.is_alive():
                thread.join(_LOOK_S)
                look()
        finally:
            self._memory.probe[0].halt = 1
            thread.join()
        return found[0]

    def close(self) -> None:
        """End the connection; the loop is then free for another rig."""
        self._socket.close()


def _keep_exact_time() -> None:
    """Let this thread's sleeps end when they should: the system may round them by 50 us."""
    prctl = getattr(ctypes.CDLL(None), "prctl", None)
    if prctl is not None:
        prctl(_PR_SET_TIMERSLACK, 1, 0, 0, 0)


def _check_realtime() -> None:
    """Try the priority, on a thread that ends at once."""
    faults: list[str] = []

    def attempt() -> None:
        try:
            os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(REALTIME_PRIORITY))
        except (OSError, AttributeError) as fault:
            faults.append(str(fault))

    thread = threading.Thread(target=attempt)
    thread.start()
    thread.join()
    if faults:
        raise LinkError(
            f"real-time priority is not allowed here ({faults[0]}); raise the user's rtprio "
            "limit, or measure without it"
        )


def spike_wave_mv(spec: RigSpec) -> Floats:
    """One second of the made-up voltage at the rig's tick, (ticks, cells), in mV.

    Rest at -65 mV and, every 20 ms, a spike to about +30 mV with a trough after it; each
    cell is a third of a period later than the one before. Where a cell's window is
    too narrow, the whole is shrunk into its middle.
    """
    interval_ms = spec.loop.interval_us / 1000.0
    ticks = max(8, round(1000.0 / interval_ms))
    t_ms = np.arange(ticks) * interval_ms
    columns = []
    for k, cell in enumerate(spec.cell):
        since_ms = (t_ms + (1 - k / 3) * _PERIOD_MS) % _PERIOD_MS - 5.0
        rise = np.exp(-np.maximum(-since_ms, 0.0) / 0.15) * (since_ms <= 0)
        fall = np.exp(-np.maximum(since_ms, 0.0) / 0.4) * (since_ms > 0)
        trough = np.maximum(since_ms, 0.0) / 2.0 * np.exp(1.0 - np.maximum(since_ms, 0.0) / 2.0)
        wave = -65.0 + 95.0 * (rise + fall) - 8.0 * trough
        low, high = cell.limits.window_mv
        if wave.min() <= low or wave.max() >= high:
            share = (wave - wave.min()) / (wave.max() - wave.min())
            wave = low + (high - low) * (0.1 + 0.8 * share)
        columns.append(wave)
    return np.ascontiguousarray(np.stack(columns, axis=1))
