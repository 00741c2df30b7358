"""The simulated rig between its clock and its socket: sample, queue, let current flow.

A sample is taken first, then the command may change; so what a sample reports as in
force is what flowed just before it. Answers on their way to the output wait in a queue
that is always in order of both arrival and sequence: an answer that a newer one
overtakes, or meets, is never seen by the cell and is taken out at once.

Times on the way to the output are kept as a tick and an offset into it, so that an
answer due at a tick's edge is never a rounding error early or late.

What calls these functions, and when, is in :mod:`gatestep.simpace`.
"""

from __future__ import annotations

from math import isfinite
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .kernel import records
from .lanebase import now_nsec
from .simcell import SUBSTEP_US, SimCells, carry, measured, output
from .specs import MAX_CELLS
from .wire import ANSWER, MAX_MESSAGE, NIL, SAMPLE, read_answer, write_sample
from .zmqlane import send

SIMLOOP = np.dtype(
    [
        # Set before the loop runs.
        ("interval_us", "f8"),
        ("on_arrival", "i8"),
        ("seed", "u8"),
        ("delay_us", "f8"),
        ("jitter_us", "f8"),
        ("drop", "f8"),
        ("budget_us", "f8"),
        ("timeout_us", "f8"),  # silence after which the output goes to 0 pA
        ("socket", "u8"),  # libzmq's address of it
        ("message_at", "u8"),  # addresses of the buffers below
        ("out_at", "u8"),
        ("time_at", "u8"),
        ("start_nsec", "i8"),  # real pace: the monotonic clock at tick 0
        ("halt", "i8"),  # set by another thread to stop the loop
        ("sent_nsec", "i8"),  # the monotonic clock at the last sending
        # The state.
        ("seq", "i8"),  # next sample
        ("played", "i8"),  # ticks that the cells have lived through
        ("waiting", "i8"),  # lockstep: sample ``seq`` has been sent
        ("in_force", "i8"),  # answer that flows, NIL if none does
        ("lag_us", "f8"),
        ("heard", "i8"),  # newest answer received
        ("queued", "i8"),  # newest answer ever in the queue
        ("reached", "i8"),  # tick in which an answer last reached the output
        ("head", "i8"),  # of the queue
        ("count", "i8"),
        # Counters, from the start of the rig.
        ("sent", "i8"),
        ("resent", "i8"),
        ("answered", "i8"),
        ("dropped", "i8"),  # lost on the way to the output, by the simulation
        ("overtaken", "i8"),
        ("late", "i8"),  # reached the output over the budget after their sample
        ("skipped", "i8"),  # ticks without a sample
        ("garbled", "i8"),  # messages that are not an answer
        ("silences", "i8"),  # times that the output went to 0 pA by itself
        ("now_pa", "f8", (MAX_CELLS,)),  # the answer that flows
        ("message", "u1", (MAX_MESSAGE,)),
        ("out", "u1", (MAX_MESSAGE,)),
        ("time", "i8", (2,)),
    ],
    align=True,
)
"""The rig: constants, state, counters and buffers."""

PENDING = np.dtype(
    [
        ("seq", "i8"),
        ("tick", "i8"),  # reaches the output in this tick of the rig ...
        ("offset_us", "f8"),  # ... this long after the tick's start
        ("lag_us", "f8"),
        ("i_pa", "f8", (MAX_CELLS,)),
    ],
    align=True,
)
"""An answer on its way to the output."""

SENT = 1 << 16
"""Length of the ring of sending times."""


class SimLoop(NamedTuple):
    """Everything the rig's loops touch, allocated before they start."""

    rig: Any
    cells: SimCells
    sample: Any
    answer: Any
    pending: Any
    sent_nsec: Any


class Columns(NamedTuple):
    """A trace in the making: one row per tick, and one column per cell where it says so.

    ``v_mv``, ``measured_mv``, ``i_pa``, ``answered_pa``, ``stimulus_pa`` (rows, cells);
    ``flags``, ``round_trip_nsec``, ``in_force`` int64 and ``lag_us`` float64 (rows,).
    """

    v_mv: Any
    measured_mv: Any
    i_pa: Any
    answered_pa: Any
    stimulus_pa: Any
    flags: Any
    round_trip_nsec: Any
    in_force: Any
    lag_us: Any


NO_FLAGS = -1
"""Flags of a sample that has no answer."""
NOT_SAMPLED = -2
"""Flags of a tick in which no sample was taken."""

_SENT = SENT
_MAX_MESSAGE = MAX_MESSAGE


def make_columns(ticks: int, cells: int) -> Columns:
    """Columns for so many ticks, nothing answered yet."""
    shape = ticks, cells
    return Columns(
        v_mv=np.full(shape, np.nan),
        measured_mv=np.full(shape, np.nan),
        i_pa=np.full(shape, np.nan),
        answered_pa=np.full(shape, np.nan),
        stimulus_pa=np.zeros(shape),
        flags=np.full(ticks, NOT_SAMPLED, dtype=np.int64),
        round_trip_nsec=np.full(ticks, -1, dtype=np.int64),
        in_force=np.full(ticks, NIL, dtype=np.int64),
        lag_us=np.full(ticks, np.nan),
    )


def make_loop(cells: SimCells, queue: int) -> SimLoop:
    """A rig's memory, with room for ``queue`` answers on their way."""
    rig = records(SIMLOOP)
    base = int(rig.ctypes.data)
    fields = SIMLOOP.fields
    assert fields is not None
    for name in ("message", "out", "time"):
        rig[0][f"{name}_at"] = base + fields[name][1]
    for name in ("in_force", "lag_us", "heard", "queued"):
        rig[0][name] = NIL
    return SimLoop(
        rig,
        cells,
        records(SAMPLE),
        records(ANSWER),
        records(PENDING, queue),
        np.zeros(SENT, dtype=np.int64),
    )


@inner
def measure(loop: Any, columns: Any, row: int) -> None:
    """[hot] Read every cell's voltage and make the sample message's contents."""
    rig, sample = loop.rig[0], loop.sample[0]
    r = np.uint64(row)
    sample.seq = rig.seq
    sample.t_us = rig.seq * rig.interval_us
    sample.in_force = rig.in_force
    sample.lag_us = rig.lag_us
    for c in range(np.uint64(loop.cells.cells.size)):
        sample.v_mv[c] = measured(loop.cells, c, rig.seed, rig.seq)
        columns.measured_mv[r, c] = sample.v_mv[c]
    columns.flags[r] = NO_FLAGS
    columns.in_force[r] = rig.in_force
    if rig.lag_us >= 0.0:
        columns.lag_us[r] = rig.lag_us


@compiled
def send_sample(loop: Any) -> bool:
    """[hot] Send the sample last taken, for the first time or again."""
    rig = loop.rig[0]
    size = write_sample(rig.out, loop.sample[0], loop.cells.cells.size)
    rig.sent_nsec = now_nsec(rig)
    return send(rig.socket, rig.out_at, size)


@inner
def take_and_send(loop: Any, columns: Any, row: int) -> bool:
    """[hot] Take the sample that is due and send it; False when it could not be sent."""
    rig = loop.rig[0]
    measure(loop, columns, row)
    sent = send_sample(loop)
    loop.sent_nsec[np.uint64(rig.seq % _SENT)] = rig.sent_nsec
    if sent:
        rig.sent += 1
    return sent


@inner
def decode(loop: Any, size: Any) -> bool:
    """[hot] Decode the message just received; False (and counted) when it is no answer."""
    rig, answer = loop.rig[0], loop.answer[0]
    cells = loop.cells.cells.size
    sound = size <= _MAX_MESSAGE and read_answer(rig.message, size, cells, answer)
    sound = sound and answer.seq <= rig.seq
    for c in range(np.uint64(cells)):
        sound = sound and isfinite(answer.i_pa[c])
    if not sound:
        rig.garbled += 1
    return sound


@inner
def note(loop: Any, columns: Any, first: int, nsec: int) -> bool:
    """[hot] Put the answer into its sample's row; whether it is newer than all before."""
    rig, answer = loop.rig[0], loop.answer[0]
    row = answer.seq - first
    newer = answer.seq > rig.heard
    if row < 0:
        rig.answered += newer
    elif columns.flags[np.uint64(row)] == NO_FLAGS:
        r = np.uint64(row)
        rig.answered += 1
        columns.flags[r] = answer.flags
        columns.round_trip_nsec[r] = nsec - loop.sent_nsec[np.uint64(answer.seq % _SENT)]
        for c in range(np.uint64(loop.cells.cells.size)):
            columns.answered_pa[r, c] = answer.i_pa[c]
    if newer:
        rig.heard = answer.seq
    return newer


@inner
def enqueue(loop: Any, tick: Any, offset_us: float, lag_us: float) -> None:
    """[hot] Send the answer on its way to the output; those it overtakes are taken out."""
    rig, answer = loop.rig[0], loop.answer[0]
    length = loop.pending.size
    while rig.count > 0:
        last = loop.pending[np.uint64((rig.head + rig.count - 1) % length)]
        if last.tick < tick or (last.tick == tick and last.offset_us < offset_us):
            break
        rig.count -= 1
        rig.overtaken += 1
    if rig.count == length:
        rig.head = (rig.head + 1) % length
        rig.count -= 1
        rig.overtaken += 1
    place = loop.pending[np.uint64((rig.head + rig.count) % length)]
    place.seq, place.tick, place.offset_us, place.lag_us = answer.seq, tick, offset_us, lag_us
    for c in range(np.uint64(loop.cells.cells.size)):
        place.i_pa[c] = answer.i_pa[c]
    rig.count += 1


@inner
def let_flow(loop: Any, columns: Any, row: int, span_us: float) -> None:
    """[hot] Carry every cell over a span in which the command does not change."""
    rig = loop.rig[0]
    r = np.uint64(row)
    weight = span_us / rig.interval_us
    for c in range(np.uint64(loop.cells.cells.size)):
        i_pa = output(loop.cells, c, rig.now_pa[c] + columns.stimulus_pa[r, c])
        columns.i_pa[r, c] += i_pa * weight
        carry(loop.cells, c, i_pa, span_us / 1000.0, SUBSTEP_US)


@inner
def put_in_force(loop: Any) -> None:
    """[hot] Let the answer at the head of the queue flow from now on."""
    rig = loop.rig[0]
    head = loop.pending[np.uint64(rig.head)]
    for c in range(np.uint64(loop.cells.cells.size)):
        rig.now_pa[c] = head.i_pa[c]
    rig.in_force, rig.lag_us, rig.reached = head.seq, head.lag_us, rig.played
    if head.lag_us > rig.budget_us:
        rig.late += 1
    rig.head = (rig.head + 1) % loop.pending.size
    rig.count -= 1


@compiled
def fall_silent(loop: Any) -> None:
    """[hot] Put the output to 0 pA, because no answer has reached it for too long."""
    rig = loop.rig[0]
    rig.silences += rig.in_force >= 0
    rig.in_force, rig.lag_us = NIL, NIL
    for c in range(np.uint64(loop.cells.cells.size)):
        rig.now_pa[c] = 0.0


@inner
def play(loop: Any, columns: Any, first: int) -> None:
    """[hot] Let the next tick pass: currents switch when due, the cells live through it."""
    rig = loop.rig[0]
    row = rig.played - first
    for c in range(np.uint64(loop.cells.cells.size)):
        columns.v_mv[np.uint64(row), c] = loop.cells.cells[c].v_mv
        columns.i_pa[np.uint64(row), c] = 0.0
    if rig.in_force >= 0 and (rig.played - rig.reached) * rig.interval_us > rig.timeout_us:
        fall_silent(loop)
    start_us = 0.0
    while rig.count > 0 and loop.pending[np.uint64(rig.head)].tick <= rig.played:
        head = loop.pending[np.uint64(rig.head)]
        at_us = min(head.offset_us, rig.interval_us) if head.tick == rig.played else 0.0
        if at_us > start_us:
            let_flow(loop, columns, row, at_us - start_us)
            start_us = at_us
        put_in_force(loop)
    if start_us < rig.interval_us:
        let_flow(loop, columns, row, rig.interval_us - start_us)
    rig.played += 1
