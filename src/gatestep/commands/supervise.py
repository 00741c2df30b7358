"""``gatestep supervise DEVICE``: a model on a device, its parameters, its state, its samples."""

from __future__ import annotations

import json
import queue
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, TextIO

from ..errors import ControlError, FileError
from .serve import CAUTION
from .steer import split_assignment

if TYPE_CHECKING:
    from ..bridgemodel import Supervisor, Trace

_LOOK_S = 0.05
_FLUSH_S = 1.0
_USUAL_US = 100_000.0
"""Between samples of a device that sent none: how soon a trip is known of."""


def supervise(
    device: str,
    baud: int,
    assignments: list[str],
    every: int | None,
    arm: bool,
    trace_file: Path | None,
    seconds: float | None,
    json_output: bool,
) -> int:
    """Supervise until SIGINT, SIGTERM, ``stop`` or the time is over; returns the exit status.

    The device is disarmed at the end. Lines on stdin are orders: ``arm``, ``disarm``,
    ``set NAME=VALUE``, ``show``, ``stop``.

    Parameters
    ----------
    device, baud
        The serial line.
    assignments : list of str
        Parameters to set first, as ``K.gmax_ns=120``.
    every : int, optional
        One sample in so many ticks is sent; 0 for none, and then nothing tells of a trip. If
        not given, as it is, or one in about 100 ms where it is 0.
    arm : bool
        Arm at once.
    trace_file : Path, optional
        Where samples go, as CSV.
    seconds : float, optional
        End after so long.
    json_output : bool
        Report as JSON.

    Raises
    ------
    ControlError
        When the device refuses what it is told at the start.
    FileError
        When the trace cannot be written.
    LinkError, MissingExtraError
        When the device cannot be reached, or is lost: then it disarms itself when its own
        silence time-out is over, if it has one.
    """
    from ..bridgeline import Line
    from ..bridgemodel import EVERY, Supervisor

    sets = [split_assignment(text) for text in assignments]
    if every is not None:
        sets.append((EVERY, float(every)))
    _say(CAUTION)
    orders, asked = _listen()
    with (
        _written(trace_file) as log,
        Line(device, baud) as line,
        Supervisor(line, log) as supervisor,
    ):
        for name, value in sets:
            supervisor.set(name, value)
        if EVERY not in dict(sets):
            _have_samples(supervisor)
        print(_shown(supervisor), file=sys.stderr, flush=True)
        if arm and not asked:
            supervisor.arm()
            _say("armed")
        _attend(supervisor, orders, asked, seconds)
    found = _figures(device, supervisor, log, trace_file)
    print(json.dumps(found) if json_output else _report(found), flush=True)
    return 0


def _say(text: str) -> None:
    print(f"gatestep: {text}", file=sys.stderr, flush=True)


class _Log:
    """Samples to CSV, one line each; counts them with or without a file."""

    def __init__(self, file: TextIO | None) -> None:
        self._file, self._flushed_s = file, time.monotonic()
        self.count = 0
        self.first: Trace | None = None
        self.last: Trace | None = None

    def __call__(self, trace: Trace) -> None:
        if self.last is not None and trace.state != self.last.state:
            from ..bridgemodel import STATES

            _say(f"{STATES[trace.state] if trace.state < len(STATES) else trace.state}")
        if self._file is not None:
            self._write(self._file, trace)
        self.first = self.first or trace
        self.last = trace
        self.count += 1

    def _write(self, file: TextIO, trace: Trace) -> None:
        pairs = list(zip(trace.v_mv, trace.i_pa, strict=True))
        if not self.count:
            names = [f"v_mv_{k},i_pa_{k}" for k in range(1, len(pairs) + 1)]
            file.write(",".join(["seq,t_us,state", *names]) + "\n")
        values = [f"{v:.9g},{i:.9g}" for v, i in pairs]
        file.write(",".join([f"{trace.seq},{trace.t_us},{trace.state}", *values]) + "\n")
        if time.monotonic() - self._flushed_s > _FLUSH_S:
            file.flush()
            self._flushed_s = time.monotonic()


@contextmanager
def _written(path: Path | None) -> Iterator[_Log]:
    """The log, on a file of its own where there is one to be."""
    if path is None:
        yield _Log(None)
        return
    try:
        file = path.open("x", encoding="ascii")
    except FileExistsError as fault:
        raise FileError(f"{path}: exists; choose another name for --trace") from fault
    except OSError as fault:
        raise FileError(f"{path}: cannot be written ({fault.strerror})") from fault
    log = _Log(file)
    with file:
        try:
            yield log
        except BaseException:
            # A device that could not be reached leaves no empty file in the next one's way.
            if not log.count:
                path.unlink(missing_ok=True)
            raise


def _listen() -> tuple[queue.SimpleQueue[str], list[int]]:
    """Orders from stdin, and signals that ask for the end, both as they come."""
    orders: queue.SimpleQueue[str] = queue.SimpleQueue()
    asked: list[int] = []

    def read() -> None:
        for text in sys.stdin or ():
            orders.put(text.strip())

    def ask(number: int, _frame: FrameType | None) -> None:
        asked.append(number)

    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, ask)
    threading.Thread(target=read, daemon=True, name="orders").start()
    return orders, asked


def _attend(
    supervisor: Supervisor,
    orders: queue.SimpleQueue[str],
    asked: list[int],
    seconds: float | None,
) -> None:
    """Be there, and carry out what is ordered, to the end."""
    end = time.monotonic() + seconds if seconds is not None else float("inf")
    while not asked and time.monotonic() < end:
        supervisor.attend(min(_LOOK_S, max(0.0, end - time.monotonic())))
        while not asked and not orders.empty():
            order = orders.get()
            if order == "stop":
                return
            try:
                _carry_out(supervisor, order)
            except ControlError as fault:
                _say(str(fault))


def _have_samples(supervisor: Supervisor) -> None:
    """Only samples tell of a trip: ask for a few where the device sends none."""
    from ..bridgemodel import EVERY

    every = supervisor.parameters.get(EVERY)
    if every is not None and every.value == 0.0:
        supervisor.set(EVERY, max(1.0, round(_USUAL_US / supervisor.hello.interval_us)))


def _carry_out(supervisor: Supervisor, order: str) -> None:
    """One line of stdin."""
    word, _, rest = order.partition(" ")
    plain: dict[str, Callable[[], None]] = {"arm": supervisor.arm, "disarm": supervisor.disarm}
    if word in plain and not rest:
        plain[word]()
        _say(f"{word}ed")
    elif word == "set":
        name, value = split_assignment(rest)
        supervisor.set(name, value)
        _say(f"{name} is {supervisor.parameters[name].value:g}")
    elif word == "show" and not rest:
        print(_shown(supervisor), file=sys.stderr, flush=True)
    elif order:
        _say(f"{order!r} is no order; there are arm, disarm, set NAME=VALUE, show and stop")


def _shown(supervisor: Supervisor) -> str:
    hello = supervisor.hello
    values = (f"{p.name} {p.value:g}" for p in supervisor.parameters.values())
    state = f", {supervisor.state}" if supervisor.state else ""
    return f"a model with a tick of {hello.interval_us:g} µs{state}: {', '.join(values)}"


def _figures(
    device: str, supervisor: Supervisor, log: _Log, trace_file: Path | None
) -> dict[str, Any]:
    last = log.last
    return {
        "device": device,
        "interval_us": supervisor.hello.interval_us,
        "parameters": {p.name: p.value for p in supervisor.parameters.values()},
        "samples": log.count,
        "seq": [log.first.seq, last.seq] if log.first is not None and last is not None else None,
        "state": supervisor.state,
        "damaged": supervisor.damaged,
        "trace": str(trace_file) if trace_file is not None else None,
    }


def _report(figures: dict[str, Any]) -> str:
    """The figures as a few lines to read."""
    values = ", ".join(f"{name} {value:g}" for name, value in figures["parameters"].items())
    lines = [f"model          {values}"]
    spread = f", ticks {figures['seq'][0]} to {figures['seq'][1]}" if figures["seq"] else ""
    lines.append(
        f"samples        {figures['samples']}{spread}; {figures['damaged']} damaged frames"
    )
    if figures["trace"]:
        lines.append(f"trace          {figures['trace']}")
    lines.append("disarmed at the end")
    return "\n".join(lines)
