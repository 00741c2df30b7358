"""Replay: every recorded sample through the same kernel again, every current compared.

A journal holds what the loop was given: its settings, the models' tables, each sample as
it was decoded, each order where it was carried out. The functions that the hot loop runs
(:func:`gatestep.tick.take_sample`, :func:`gatestep.orders.obey`) run here on the same
input, so that their answers must be the recorded ones, bit for bit. Nothing random and no
time of the machine enters them, and the kernel uses plain IEEE arithmetic alone.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled
from .errors import JournalError
from .files import parse
from .journalfile import Event, JournalFile
from .kernel import power, records
from .loop import make_memory
from .orders import ORDER, Order, Outcome, obey
from .shelf import Shelf, make_room
from .specs import RigSpec
from .states import Fault
from .tick import ANSWERED, begin_session, settle_answer, take_sample, trip
from .wire import LIVE, NIL, REPEAT
from .zmqlane import ZMQ_LANE

CHUNK = 1 << 15
"""Samples taken through the kernel at once."""

_KINDS = {
    "arm": Order.ARM,
    "disarm": Order.DISARM,
    "reset": Order.RESET,
    "stop": Order.STOP,
    "swap": Order.SWAP,
    "foresee": Order.FORESEE,
    "cancel": Order.CANCEL,
}
_FROM_OUTSIDE = {int(Fault.SILENCE), int(Fault.DISCONNECTED)}
"""Faults that no sample shows."""
_NOT_CARRIED_OUT = {"dropped", "no_room"}
"""Outcomes of what was planned and never came to its sample."""
_CHANGES = {*_KINDS, "set", "in_force", "hold", "release", "trip"}


class Stretch(NamedTuple):
    """Samples as recorded, and what the kernel made of them.

    ``i_pa`` is (samples, cells) and ``flags`` (samples,), both computed. ``by_conductance``
    is (samples, conductances) of the cell that was asked for, pA, or empty.
    """

    position: int
    recorded: np.ndarray
    i_pa: np.ndarray
    flags: np.ndarray
    by_conductance: np.ndarray


class _Given(NamedTuple):
    """What the compiled loop reads: columns of recorded samples."""

    seq: Any
    t_us: Any
    in_force: Any
    lag_us: Any
    service_nsec: Any
    v_mv: Any
    stimulus_pa: Any


class _Found(NamedTuple):
    """What it writes."""

    i_pa: Any
    flags: Any
    by_conductance: Any


@compiled
def _run(m: Any, given: _Given, found: _Found, cell: int) -> None:
    """[hot] Take recorded samples through the loop's own functions."""
    loop, sample, answer = m.loop[0], m.sample[0], m.answer[0]
    cells = np.uint64(loop.cells)
    for row in range(np.uint64(given.seq.size)):
        sample.seq = given.seq[row]
        sample.t_us = given.t_us[row]
        sample.in_force = given.in_force[row]
        sample.lag_us = given.lag_us[row]
        for k in range(cells):
            sample.v_mv[k] = given.v_mv[row, k]
            m.cells[k].stimulus_pa = given.stimulus_pa[row, k]
        kind = take_sample(loop, m.cells, m.banks, m.table, m.past, sample, answer)
        if kind == ANSWERED:
            settle_answer(loop, answer, m.past, given.service_nsec[row])
        found.flags[row] = answer.flags
        for k in range(cells):
            found.i_pa[row, k] = answer.i_pa[k]
        if cell >= 0 and (answer.flags & (LIVE | REPEAT)) == LIVE:
            _share(m, np.uint64(cell), found.by_conductance, row)


@compiled
def _share(m: Any, k: Any, by_conductance: Any, row: Any) -> None:
    """[hot] Each conductance's own current at the newest voltage, pA."""
    cell = m.cells[k]
    bank = m.banks[np.uint64(cell.bank)]
    gate = np.uint64(0)
    for c in range(np.uint64(bank.conductances)):
        g = bank.gmax_ns[c]
        for _ in range(bank.gates[c]):
            g *= power(cell.x[np.uint64(bank.state[gate])], bank.power[gate])
            gate += np.uint64(1)
        by_conductance[row, c] = g * (bank.reversal_mv[c] - cell.v_mv)


@compiled
def _carry_out(m: Any, order: Any) -> int:
    """[hot] Carry out an order as the loop did; its outcome."""
    return obey(m, order, m.loop[0].seq + 1, np.int64(0))


class Replay:
    """The loop of a journal, run again from its first sample; forward only.

    Parameters
    ----------
    journal : JournalFile

    Attributes
    ----------
    position : int
        The sample that comes next.
    unlike : str or None
        What an event says that the kernel does not agree with.

    Raises
    ------
    JournalError
        When the journal's rig or a model of it cannot be read.
    """

    def __init__(self, journal: JournalFile) -> None:
        self.journal = journal
        self.position = 0
        self.unlike: str | None = None
        self._rig = parse(RigSpec, journal.header["rig_spec"], journal.path)
        table = make_room()
        lane = records(ZMQ_LANE)
        self._m = make_memory(self._rig, lane, 0, 0, table, np.zeros((2, 1)))
        self._shelf = Shelf(self._m.banks, table)
        self._events = [e for e in journal.events if e.kind in _CHANGES]
        self._next = 0

    def run(self, stop: int | None = None, cell: int | None = None) -> Iterator[Stretch]:
        """Go on until ``stop``, stretch by stretch.

        Parameters
        ----------
        stop : int, optional
            The sample to stop before; the journal's last when left out.
        cell : int, optional
            Compute this cell's current by conductance as well.

        Raises
        ------
        JournalError
            When samples are damaged or missing: what follows them cannot be computed.
        """
        end = len(self.journal.samples) if stop is None else min(stop, len(self.journal.samples))
        while self.position < end:
            self._change()
            until = min(end, self.position + CHUNK)
            if self._next < len(self._events):
                until = min(until, self._events[self._next].position)
            yield self._stretch(self._read(until), -1 if cell is None else cell)

    def _read(self, stop: int) -> np.ndarray:
        """The samples up to ``stop``, or to where they are damaged."""
        try:
            return self.journal.samples[self.position : stop]
        except JournalError:
            whole, at = [], self.position
            for piece in self.journal.samples.pieces(self.position, stop):
                if piece.position != at:
                    break
                whole.append(piece.samples)
                at += len(piece.samples)
            if not whole:
                raise
            return np.concatenate(whole)

    def _stretch(self, samples: np.ndarray, cell: int) -> Stretch:
        given = _Given(*(np.ascontiguousarray(samples[name]) for name in _Given._fields))
        shape = samples["v_mv"].shape
        width = self._conductances(cell) if cell >= 0 else 0
        found = _Found(np.empty(shape), np.empty(shape[0], np.int64), np.zeros((shape[0], width)))
        _run(self._m, given, found, cell)
        first, self.position = self.position, self.position + len(samples)
        return Stretch(first, samples, *found)

    def _conductances(self, cell: int) -> int:
        return int(self._m.banks[int(self._m.cells[cell].bank)].conductances)

    def _change(self) -> None:
        """Carry out what was done before the sample that comes next."""
        while self._next < len(self._events):
            event = self._events[self._next]
            if event.position > self.position:
                return
            self._next += 1
            self._take(event)

    def _take(self, event: Event) -> None:
        loop = self._m.loop[0]
        if event.kind == "hold":
            begin_session(loop, self._m.cells, self._m.past)
        elif event.kind == "release":
            loop.running = 0
            loop.tick_wrong = 0
        elif event.kind == "trip":
            self._trip(event)
        elif event.kind == "in_force":
            self._m.cells[self._cell(event)].bank = self._fill(event)
        else:
            self._order(event)

    def _trip(self, event: Event) -> None:
        """A fault that came from outside; any other the samples must have shown."""
        loop, fault = self._m.loop[0], int(event.fields["fault"])
        if fault in _FROM_OUTSIDE:
            trip(loop, fault, NIL)
        elif int(loop.fault) != fault:
            self._differs(event, f"the loop tripped ({event.fields['text']}); the replay did not")

    def _order(self, event: Event) -> None:
        outcome = event.fields.get("outcome", "done")
        if outcome in _NOT_CARRIED_OUT:
            return
        order = records(ORDER)[0]
        order.kind, order.at = self._kind(event), NIL
        if event.kind in {"swap", "set", "foresee"}:
            order.cell = self._cell(event)
        if event.kind == "swap":
            order.index = self._fill(event)
            order.value = float(bool(event.fields.get("goes_on")))
            order.ramp_ticks = event.fields.get("ramp_ticks", 0)
            order.from_zero = bool(event.fields.get("from_zero"))
        elif event.kind == "set":
            order.index, order.value = event.fields["index"], event.fields["value"]
        anticipation = event.fields.get("anticipation")
        if anticipation:
            for name in ("on", "substeps", "alpha", "beta"):
                order[name] = anticipation[name]
        found = Outcome(int(_carry_out(self._m, order))).name.lower()
        if found != outcome:
            self._differs(event, f"{event.kind} was {outcome}; in the replay it is {found}")

    def _differs(self, event: Event, text: str) -> None:
        if self.unlike is None:
            self.unlike = f"before sample {event.position}: {text}"

    def _kind(self, event: Event) -> Order:
        if event.kind == "set":
            gmax = event.fields["which"] == "gmax_ns"
            return Order.SET_GMAX if gmax else Order.SET_REVERSAL
        return _KINDS[event.kind]

    def _fill(self, event: Event) -> int:
        """Write a model into the bank that it was in; the bank's index."""
        cell, number = self._cell(event), event.fields.get("model")
        model = self.journal.models.get(number) if isinstance(number, int) else None
        if model is None:
            raise JournalError(
                f"{self.journal.path}: the model of event {event.kind!r} before sample "
                f"{event.position} is not in the journal, or damaged"
            )
        choice: Any = None
        ready = self._shelf.prepare(cell, model.loaded(), model.tables(), choice)
        bank = self._m.banks[ready.bank]
        for name in ("gmax_ns", "reversal_mv"):
            values = event.fields[name]
            bank[name][: len(values)] = values
        self._shelf.put_in_force(cell)
        return ready.bank

    def _cell(self, event: Event) -> int:
        cell = event.fields.get("cell")
        if isinstance(cell, int) and 0 <= cell < len(self._rig.cell):
            return cell
        raise JournalError(
            f"{self.journal.path}: event {event.kind!r} before sample {event.position} names no "
            "cell of its rig"
        )


def conductance_currents(
    journal: JournalFile, start: int, stop: int, cell: int = 0
) -> dict[str, np.ndarray]:
    """The current of each conductance that a cell was given, as if it stood alone.

    Computed from the gates as the loop had them at each sample and the voltage measured
    then, ``-g (V - E)``: with anticipation the answer is the mean over the hold to come, so
    the sum differs from it by what the voltage does in that time. 0 where the loop was not
    live. For several stretches of one journal use :class:`Replay` and go on.

    Parameters
    ----------
    journal : JournalFile
    start, stop : int
        From this sample on and before that one; one model must be in force throughout.
    cell : int

    Returns
    -------
    dict of str to array (stop - start,)
        pA, by the conductance's name.

    Raises
    ------
    JournalError
        When samples before ``stop`` cannot be read.
    """
    return currents_between(Replay(journal), start, stop, cell)


def currents_between(replay: Replay, start: int, stop: int, cell: int) -> dict[str, np.ndarray]:
    """As :func:`conductance_currents`, going on with a replay that has not passed ``start``."""
    if replay.position > start:
        raise ValueError(f"the replay is at {replay.position}, beyond {start}")
    for _ in replay.run(start):
        pass
    parts = [stretch.by_conductance for stretch in replay.run(stop, cell)]
    model = replay.journal.in_force(start)[cell].model
    names = replay.journal.models[model].conductances if model is not None else ()
    if not parts:
        return {name: np.empty(0) for name in names}
    width = min(part.shape[1] for part in parts)
    whole = np.concatenate([part[:, :width] for part in parts])
    return {name: whole[:, c] for c, name in enumerate(names[:width])}
