"""The loop's memory and its functions without a loop or sockets, for tests of a tick."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit

from gatestep.kernel import records
from gatestep.library import load_model
from gatestep.loop import make_memory
from gatestep.orders import Order, Outcome
from gatestep.orders import obey as carry_out
from gatestep.specs import RigSpec
from gatestep.tables import build_tables, fill_bank
from gatestep.tick import (
    ANSWERED,
    WAS_MALFORMED,
    begin_session,
    decode,
    settle_answer,
    take_sample,
)
from gatestep.wire import (
    MAX_MESSAGE,
    pack_sample,
)
from gatestep.zmqlane import ZMQ_LANE as LANE

ROOM = 1 << 18
TICK_US = 20.0


@njit(nogil=True, error_model="numpy", _nrt=False)
def obey(m: Any, now: int) -> int:
    """Carry out the order in ``m.order`` as the hot loop does."""
    return carry_out(m, m.order[0], m.loop[0].seq + 1, now)


class Tick(NamedTuple):
    """What came of one message."""

    kind: int
    seq: int
    flags: int
    i_pa: list[float]


class Bench:
    """The loop's memory and its functions, without the loop."""

    def __init__(self, cells: int = 1, bounds: dict[str, Any] | None = None, **rig: Any) -> None:
        spec = RigSpec.model_validate(
            {
                "loop": {"interval_us": TICK_US, **rig.pop("loop", {})},
                "cell": [
                    {"name": f"c{k}", "model": "x", "limits": bounds or {}} for k in range(cells)
                ],
                **rig,
            }
        )
        self.spec = spec
        self.m = make_memory(spec, records(LANE), 0, 0, np.zeros(ROOM), np.zeros((2, 8)))
        self.loop, self.cells = self.m.loop[0], self.m.cells
        self.sample, self.answer = self.m.sample[0], self.m.answer[0]
        self.message = np.zeros(MAX_MESSAGE, np.uint8)
        begin_session(self.loop, self.cells, self.m.past)

    def give_model(self, cell: int, bank: int, model: Any) -> None:
        """Fill a bank of a cell; ``model`` makes it as ``fill(bank record, table) -> None``."""
        base = (2 * cell + bank) * (ROOM // 16)
        model(self.m.banks[2 * cell + bank], self.m.table[base:])
        self.m.banks[2 * cell + bank].start = base

    def order(self, kind: Order, cell: int = 0, index: int = 0, value: float = 0.0) -> Outcome:
        """Carry out an order."""
        order = self.m.order[0]
        order.kind, order.cell, order.index, order.value = kind, cell, index, value
        return Outcome(obey(self.m, 1))

    def put(self, message: bytes) -> Tick:
        """Take a message's bytes as the rig's that holds the loop."""
        self.message[: len(message)] = np.frombuffer(message, np.uint8)
        m = self.m
        kind = WAS_MALFORMED
        if decode(self.loop, self.message, len(message), self.sample):
            kind = take_sample(
                self.loop, self.cells, m.banks, m.table, m.past, self.sample, self.answer
            )
        if kind == ANSWERED:
            settle_answer(self.loop, self.answer, m.past, 1)
        a = self.answer
        return Tick(kind, int(a.seq), int(a["flags"]), a.i_pa[: len(self.cells)].tolist())

    def take(self, seq: int, *v_mv: float, t_us=None, in_force=None, lag_us=None) -> Tick:
        """Take a sample; its clock shows ``TICK_US`` a tick unless told otherwise."""
        t_us = seq * TICK_US if t_us is None else t_us
        return self.put(pack_sample(seq, t_us, in_force, lag_us, list(v_mv)))

    def gates(self, cell: int = 0) -> np.ndarray:
        """A copy of a cell's gates in use."""
        bank = self.m.banks[int(self.cells[cell].bank)]
        return self.cells[cell].x[: int(bank.dynamic + bank.instant)].copy()


def shipped(name: str):
    """Filler of a bank with a shipped model."""
    tables = build_tables(load_model(name).spec)
    return lambda bank, table: fill_bank(tables, bank, table)


SQUID = shipped("squid-axon")


def random_model(seed: int):
    """Filler of a bank with random valid tables and absurd conductances.

    Steady states anywhere in [0, 1], ends included; rates from 0 to the largest
    float; gmax and reversals to their allowed extremes, of both signs.
    """

    def fill(bank: Any, table: Any) -> None:
        draw = np.random.default_rng(seed)
        rows, dynamic = int(draw.integers(2, 12)), 4 * int(draw.integers(0, 4))
        instant, count = int(draw.integers(0, 4)), int(draw.integers(1, 6))
        stride = 2 * dynamic + instant
        inf = draw.choice([0.0, 1.0, 0.5, draw.random(), 5e-324], (rows, dynamic + instant))
        rate = draw.choice([0.0, 1e-3, 1.0, 1e6, 1e300, 1.7e308], (rows, dynamic))
        values = np.hstack([inf[:, :dynamic], rate, inf[:, dynamic:]]).ravel()
        table[: values.size] = values
        bank.v_low_mv, bank.rows_per_mv = (
            float(draw.uniform(-300, 0)),
            float(draw.uniform(0.01, 64)),
        )
        bank.rows, bank.stride, bank.dynamic, bank.instant = rows, stride, dynamic, instant
        bank.conductances = count
        gates = dynamic + instant
        bank.gates[:count] = draw.integers(0, 4, count) if gates else 0
        bank.state[:20] = draw.integers(0, max(gates, 1), 20)
        bank.power[:20] = draw.integers(1, 16, 20)
        bank.gmax_ns[:count] = draw.choice([1e6, -1e6, 1.0, -3.0, 0.0, 5e-324], count)
        bank.reversal_mv[:count] = draw.choice([300.0, -300.0, 0.0, -65.0], count)

    return fill
