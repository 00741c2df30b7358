"""The simulated rig: a true client of the server, with a cell that does not exist.

It connects a DEALER to the loop socket, as a rig does, and speaks the same messages.
What it measures, and what becomes of the currents it is answered, is computed by
:mod:`gatestep.simcell`. Use it to try a rig file, a model or a server without a cell.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from math import ceil
from pathlib import Path
from typing import Any

import numpy as np
import zmq
from pydantic import ValidationError

from .closing import Closing
from .control import use_curve
from .errors import FileError, LinkError
from .simcell import make_cells
from .simloop import Columns, fall_silent, make_columns, make_loop, send_sample
from .simpace import Status, run_lockstep, run_real
from .simtrace import Floats, Trace
from .specs import RigSpec, SimCellSpec, SimulatedSpec
from .zmqlane import load_libzmq

CHUNK = 2_000
"""Ticks between two looks at the interpreter in lockstep: progress and Ctrl-C."""
CONNECT_S = 3.0
"""How long a server has to accept the connection, if not told."""
RESEND_MS = 200
"""Lockstep: wait for an answer this long, then send the sample again."""
RESENDS = 10
"""Lockstep: a sample is sent again so many times before the rig gives up."""
TIMEOUT_MS = 50.0
"""The rig's own time-out: without an answer for this long the output goes to 0 pA."""

Progress = Callable[[int, int], None]
"""Called with ticks done and ticks to do."""


class SimRig(Closing):
    """A simulated rig, connected to the server at the rig file's loop endpoint.

    Parameters
    ----------
    spec : RigSpec
        The rig. Without a ``simulated`` part, or without cells in it, each cell is a
        default one with the capacitance that the rig file states.
    folder : Path, optional
        Where relative names of native model files start; the working directory if
        not given.
    pace, seed, delay_us, jitter_us, drop : optional
        In place of the rig file's.
    seconds : float, optional
        How long :meth:`run` lasts when it is not told; the rig file's if not given.
    endpoint : str, optional
        Connect here and not to ``loop.endpoint``.
    curve_secret : Path, optional
        The rig's own secret CURVE certificate, for a server that asks for one.
    curve_server : Path, optional
        The server's public certificate; the rig file's ``network.curve_secret``, of which
        only the public half is used, if not given.
    connect_s : float
        How long the server has to accept the connection and, in lockstep, to give its
        first answer; it may start meanwhile.
    timeout_ms : float
        The rig's own time-out, after which the output goes to 0 pA.
    resend_ms, resends : int
        In lockstep a sample without an answer is sent again after ``resend_ms``, at
        most ``resends`` times.

    Raises
    ------
    LinkError
        When no server accepts the connection within ``connect_s``.
    FileError
        When a native model or an override cannot be used.
    """

    def __init__(
        self,
        spec: RigSpec,
        folder: Path | None = None,
        *,
        pace: str | None = None,
        seconds: float | None = None,
        seed: int | None = None,
        delay_us: float | None = None,
        jitter_us: float | None = None,
        drop: float | None = None,
        endpoint: str | None = None,
        curve_secret: Path | None = None,
        curve_server: Path | None = None,
        connect_s: float = CONNECT_S,
        timeout_ms: float = TIMEOUT_MS,
        resend_ms: int = RESEND_MS,
        resends: int = RESENDS,
    ) -> None:
        changes = {
            "pace": pace,
            "seconds": seconds,
            "seed": seed,
            "delay_us": delay_us,
            "jitter_us": jitter_us,
            "drop": drop,
        }
        self.spec = spec
        self.simulated = with_changes(spec, {k: v for k, v in changes.items() if v is not None})
        self.endpoint = endpoint or spec.loop.endpoint
        self.resends = resends
        self._first_answer_by = time.monotonic() + connect_s
        self._folder = Path() if folder is None else folder
        load_libzmq()
        cells = make_cells(self.simulated.cell, load_native(self.simulated.cell, self._folder))
        self._loop = make_loop(cells, _queue_length(spec, self.simulated))
        self._configure(timeout_ms)
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.DEALER)
        self._socket.setsockopt(zmq.IPV6, int("[" in self.endpoint))
        try:
            self._use_keys(curve_secret, curve_server)
            self._connect(connect_s, resend_ms)
        except BaseException:
            self.close()
            raise

    def _configure(self, timeout_ms: float) -> None:
        loop, simulated, rig = self.spec.loop, self.simulated, self._loop.rig[0]
        rig.interval_us, rig.budget_us = loop.interval_us, loop.budget
        rig.on_arrival = loop.apply == "on-arrival"
        default_us = loop.interval_us / 2 if rig.on_arrival else 0.0
        rig.delay_us = default_us if simulated.delay_us is None else simulated.delay_us
        rig.seed, rig.jitter_us, rig.drop = simulated.seed, simulated.jitter_us, simulated.drop
        rig.timeout_us = timeout_ms * 1000.0

    def _use_keys(self, own: Path | None, server: Path | None) -> None:
        """Give the socket its CURVE keys where the server asks for them."""
        if self.spec.network.curve_secret is None and server is None:
            return
        server = server or self._folder / str(self.spec.network.curve_secret)
        if own is None:
            raise LinkError(
                f"the server asks for CURVE keys ({server}): give the rig's own secret certificate"
            )
        try:
            use_curve(self._socket, server, own)
        except FileError as fault:
            raise LinkError(str(fault)) from fault

    def _connect(self, connect_s: float, resend_ms: int) -> None:
        socket = self._socket
        socket.linger = 0
        socket.rcvtimeo = resend_ms
        monitor = socket.get_monitor_socket(
            zmq.EVENT_HANDSHAKE_SUCCEEDED
            | zmq.EVENT_HANDSHAKE_FAILED_AUTH
            | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
            | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
        )
        socket.connect(self.endpoint)
        event = monitor.poll(int(connect_s * 1000)) and _event(monitor)
        socket.disable_monitor()
        # An open monitor would keep the context from ending.
        monitor.close(linger=0)
        if event != zmq.EVENT_HANDSHAKE_SUCCEEDED:
            found = "refused the handshake" if event else "did not accept a connection"
            raise LinkError(
                f"{self.endpoint}: the server {found} within {connect_s:g} s; "
                "start it with: gatestep serve RIG.toml"
            )
        self._loop.rig[0].socket = socket.underlying

    @property
    def pace(self) -> str:
        """``lockstep`` or ``real``."""
        return self.simulated.pace

    @property
    def interval_us(self) -> float:
        """The tick, in µs."""
        return self.spec.loop.interval_us

    @property
    def cell_names(self) -> list[str]:
        """Names of the cells, in the order of the messages."""
        return [cell.name for cell in self.spec.cell]

    @property
    def counters(self) -> dict[str, int]:
        """What has happened since the rig was made.

        ``sent``, ``resent``, ``answered``, ``dropped`` (lost on the way to the output, as
        ``drop`` says), ``overtaken``, ``late``, ``skipped``, ``garbled``, ``silences``.
        """
        rig = self._loop.rig[0]
        names = ("sent", "resent", "answered", "dropped", "overtaken", "late")
        return {n: int(rig[n]) for n in (*names, "skipped", "garbled", "silences")}

    @property
    def now_pa(self) -> list[float]:
        """The answered current at the output now, per cell."""
        return [float(i) for i in self._loop.rig[0].now_pa[: len(self.spec.cell)]]

    def run(
        self,
        seconds: float | None = None,
        stimulus_pa: Floats | None = None,
        progress: Progress | None = None,
    ) -> Trace:
        """Run on from where the last run ended: same cells, same clock, next ``seq``.

        Between two runs the rig's clock stands still, in real pace as well.

        Parameters
        ----------
        seconds : float, optional
            Rounded to whole ticks.
        stimulus_pa : array (ticks,) or (ticks, cells), optional
            Stimulus of every tick in place of the rig file's steps, pA.
        progress : callable, optional
            Called with ticks done and ticks to do: every ``CHUNK`` ticks in lockstep,
            every 0.1 s in real pace.

        Raises
        ------
        LinkError
            When the server does not answer any more or takes the samples for malformed.
            The output is at 0 pA then.
        """
        rig = self._loop.rig[0]
        seconds = self.simulated.seconds if seconds is None else seconds
        ticks = round(seconds * 1e6 / self.interval_us)
        first = int(rig.seq)
        columns = make_columns(ticks, len(self.spec.cell))
        self._set_stimulus(columns, first, ticks, stimulus_pa)
        rig.waiting, rig.halt = 0, 0
        # Compiles what is still uncompiled before the clock runs.
        runner = run_real if self.pace == "real" else run_lockstep
        runner(self._loop, columns, first, first)
        try:
            if self.pace == "real":
                self._run_real(columns, first, ticks, progress)
            else:
                self._run_lockstep(columns, first, ticks, progress)
        except BaseException:
            self._silence()
            raise
        return self._trace(columns, first, ticks)

    def _silence(self) -> None:
        rig = self._loop.rig[0]
        rig.count = 0
        fall_silent(self._loop)

    def _set_stimulus(
        self, columns: Columns, first: int, ticks: int, stimulus_pa: Floats | None
    ) -> None:
        if stimulus_pa is not None:
            given = np.asarray(stimulus_pa, dtype=np.float64)
            given = given[:, None] if given.ndim == 1 else given
            if given.shape[0] != ticks or not np.isfinite(given).all():
                raise ValueError(f"stimulus_pa needs {ticks} finite rows; found {given.shape[0]}")
            columns.stimulus_pa[:] = given
            return
        t_ms = self._times_ms(first, ticks)
        for c, cell in enumerate(self.simulated.cell):
            for step in cell.step:
                during = (t_ms >= step.start_ms) & (t_ms < step.stop_ms)
                columns.stimulus_pa[during, c] += step.current_pa

    def _times_ms(self, first: int, ticks: int) -> Floats:
        return np.asarray(np.arange(first, first + ticks) * self.interval_us / 1000.0)

    def _run_lockstep(
        self, columns: Columns, first: int, ticks: int, progress: Progress | None
    ) -> None:
        rig, tries = self._loop.rig[0], 0
        done = 0
        while done < ticks:
            status = run_lockstep(
                self._loop, columns, first, min(first + ticks, int(rig.seq) + CHUNK)
            )
            if rig.seq - first > done:
                tries = 0
            done = int(rig.seq) - first
            if status == Status.DONE:
                if progress is not None:
                    progress(done, ticks)
            elif status in (Status.NO_ANSWER, Status.NOT_SENT):
                tries += 1
                self._resend(tries)
            elif status != Status.HALTED:
                raise self._broken(Status(status))

    def _resend(self, tries: int) -> None:
        never = self._loop.rig[0].answered == 0
        if never and tries > self.resends and time.monotonic() < self._first_answer_by:
            # A server accepts connections a little before it is ready to answer.
            return
        if tries > self.resends:
            raise LinkError(
                f"{self.endpoint}: no answer to sample {self._loop.rig[0].seq}, sent "
                f"{self.resends + 1} times; the output is at 0 pA. See whether the server runs "
                "(gatestep status), then start again"
            )
        self._loop.rig[0].resent += 1
        send_sample(self._loop)

    def _broken(self, status: Status) -> LinkError:
        if status == Status.MALFORMED:
            return LinkError(
                f"{self.endpoint}: the server takes the samples of {len(self.spec.cell)} cell(s) "
                "for malformed; use the rig file that the server was started with"
            )
        return LinkError(f"{self.endpoint}: the socket was closed; make a new rig")

    def _run_real(
        self, columns: Columns, first: int, ticks: int, progress: Progress | None
    ) -> None:
        rig = self._loop.rig[0]
        answered = int(rig.answered)
        rig.start_nsec = time.monotonic_ns() + 1_000_000 - int(first * self.interval_us * 1000)
        worker = threading.Thread(
            target=run_real, args=(self._loop, columns, first, first + ticks), name="simulated rig"
        )
        worker.start()
        try:
            while worker.is_alive():
                worker.join(0.1)
                if progress is not None:
                    progress(int(rig.seq) - first, ticks)
        finally:
            rig.halt = 1
            worker.join()
        if ticks and rig.answered == answered:
            raise LinkError(
                f"{self.endpoint}: none of {int(rig.seq) - first} samples was answered; "
                "see whether the server still runs (gatestep status)"
            )

    def _trace(self, columns: Columns, first: int, ticks: int) -> Trace:
        return Trace(
            t_ms=self._times_ms(first, ticks),
            **columns._asdict(),
            interval_us=self.interval_us,
            budget_us=self.spec.loop.budget,
        )

    def close(self) -> None:
        """Leave the server; the rig cannot run afterwards."""
        self._loop.rig[0].socket = 0
        self._socket.close(linger=0)
        self._context.term()


def with_changes(spec: RigSpec, changes: dict[str, Any]) -> SimulatedSpec:
    """The simulated part of a rig with overrides, and one simulated cell per cell."""
    simulated = spec.simulated or SimulatedSpec()
    known = {k: getattr(simulated, k) for k in SimulatedSpec.model_fields}
    if not simulated.cell:
        known["cell"] = tuple(_default_cell(cell.capacitance_pf) for cell in spec.cell)
    try:
        return SimulatedSpec(**{**known, **changes})
    except ValidationError as error:
        faults = "; ".join(f"{e['loc'][0]}: {e['msg']}" for e in error.errors())
        raise FileError(f"simulated rig: {faults}") from error


def _default_cell(capacitance_pf: float | None) -> SimCellSpec:
    return SimCellSpec() if capacitance_pf is None else SimCellSpec(capacitance_pf=capacitance_pf)


def load_native(cells: tuple[SimCellSpec, ...], folder: Path) -> list[list[tuple[Any, Any]]]:
    """Banks and tables of every cell's native models.

    Raises
    ------
    FileError
        When a model file cannot be used.
    """
    if not any(cell.native for cell in cells):
        return [[] for _ in cells]
    from .library import load_model
    from .tables import build_tables

    def made(name: str) -> tuple[Any, Any]:
        tables = build_tables(load_model(name, folder).spec)
        return tables.bank, tables.table

    return [[made(name) for name in cell.native] for cell in cells]


def _queue_length(spec: RigSpec, simulated: SimulatedSpec) -> int:
    """Room for every answer that can be on its way at once."""
    longest_us = (simulated.delay_us or spec.loop.interval_us) + simulated.jitter_us
    return max(1024, ceil(longest_us / spec.loop.interval_us) + 4)


def _event(monitor: zmq.Socket[bytes]) -> int:
    from zmq.utils.monitor import recv_monitor_message

    return int(recv_monitor_message(monitor)["event"])
