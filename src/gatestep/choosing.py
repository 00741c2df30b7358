"""Choosing how a cell's loop anticipates, and whether it does.

Candidates, in order of fidelity (the error of a spike's time follows how far I_rest is
extrapolated). ``lead = d / dt + 1`` ticks reach from the middle of the last tick to the
middle of the hold. A smoothed estimate lags by ``(1 - alpha) / alpha`` ticks, so with
``beta = lead + (1 - alpha) / alpha`` it leads as far as an unsmoothed one and answers a
new raw estimate with the gain ``1 + alpha * lead`` in place of ``1 + lead``: the same
error, and more conductance carried. First come the whole lead and 3/4, 1/2 and 1/4 of it,
each at alpha from 1 down; then no lead (alpha 1, beta 0); then smoothing alone.

The first candidate is taken whose limit, the worst over C as far off as stated and over
no residue and all of it, is at least ``KEPT`` times the operating conductance and not
below the plain loop's, of which no more than ``AMPLE`` times the operating conductance is
asked; where there is none, the one with the largest limit.

Tried on the squid membrane (30 pF, 9 nS of its own, 300 pA, 3600 + 1080 nS virtual, which
open 1080 nS in repetitive spikes and 2230 nS by :mod:`gatestep.operating`), all gates
moving. Error of the 14th spike in µs at (tick in µs, delay in ticks), and the limit in nS
with C 10 % off and 0.1 MΩ; 4 sub-steps::

    lead, alpha    (20, 1)        (50, 1)       (100, 1)      (50, 0.5)
    whole, 1       -3 / 633       18 / 454      125 / 311     -6 / 1330
    whole, 0.25    -3 / 1718      8 / 1839      55 / none     -10 / none
    half, 1        7 / 1031       67 / 787      286 / 599     21 / 18000
    half, 0.15     7 / 2398       59 / none     260 / none    18 / none
    none, 1        16 / 2907      116 / none    451 / none    48 / none
    plain loop     1132 / 1326    explodes      explodes      1888 / 1080

0.1 mV rms noise spreads the spikes of all these alike (30 µs at 20 µs, 53 at 50 µs), and
half or nine tenths of the conductances virtual and the rest the cell's own gives the same
order. Spikes are lost or added where the limit of the case at hand falls below some 600 nS
at 20 µs, 750 to 930 nS at 50 µs and 400 to 800 nS at 100 µs: 0.4 to 0.85 of what the
spikes open. ``KEPT`` times 2230 nS is 2.3 of it; the rest is for stimuli that open more
and for a C and an R further off than stated. Over peak conductance times R from 0 to 2
and ticks of 10 to 100 µs, the loop taken never lost spikes that the other kept; where R
rules (beyond a product of 1) both limits tend to 1 / R, which is why ``EQUAL`` is not 1.

Sub-steps do not change the limit. With the gates crossing along the path of the voltage
(:func:`gatestep.anticipate.cross`), 3 are as true as 4 or 8: 9 µs against 24 and 64 at
(100, 0.5), and cost less.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from .anticipate import MOST_SEGMENTS
from .errors import FileError
from .operating import largest_ns, operating_ns
from .specs import CellSpec, LoopSpec
from .stability import Circuit, Settings, corners, worst_limit_ns
from .tables import Tables
from .units import US_PER_MS

KEPT = 1.1
"""Margin that a candidate is to keep."""
AMPLE = 4.0
"""Margin from which on fidelity alone decides, even where the plain loop's is larger."""
EQUAL = 0.95
"""A limit not below this share of the plain loop's counts as no smaller."""
SUBSTEPS = 3
"""Sub-steps across the hold, unless the rig file says otherwise."""
LEADS = (1.0, 0.75, 0.5, 0.25)
"""Shares of the whole lead."""
ALPHAS = (1.0, 0.7, 0.5, 0.35, 0.25, 0.15)
"""Smoothing under a lead."""
SMOOTHING = (0.7, 0.5, 0.35, 0.25, 0.2, 0.15, 0.1, 0.05)
"""Smoothing without one."""
DELAY_TICKS = {"next-tick": 1.0, "on-arrival": 0.5}
"""From a sample to its current, in ticks, as ``loop.apply`` lets it be expected."""


@dataclass(frozen=True)
class Choice:
    """How a cell's loop is to run, and how much conductance it then carries.

    Limits are in nS, the worst over what is uncertain, inf where the loop is stable
    whatever the conductance; margins are limits over ``operating_ns``. All four are None
    where the cell's capacitance is not known. ``reason`` is one sentence.
    """

    cell: str
    on: bool
    substeps: int
    alpha: float
    beta: float
    delay_ms: float
    operating_ns: float
    largest_ns: float
    plain_limit_ns: float | None
    anticipating_limit_ns: float | None
    reason: str

    @property
    def plain_margin(self) -> float | None:
        """The plain loop's limit over the operating conductance."""
        return self._margin(self.plain_limit_ns)

    @property
    def anticipating_margin(self) -> float | None:
        """The anticipating loop's limit over the operating conductance."""
        return self._margin(self.anticipating_limit_ns)

    @property
    def limit_ns(self) -> float | None:
        """The limit of the loop as it will run."""
        return self.anticipating_limit_ns if self.on else self.plain_limit_ns

    @property
    def margin(self) -> float | None:
        """The margin of the loop as it will run."""
        return self._margin(self.limit_ns)

    def _margin(self, limit_ns: float | None) -> float | None:
        if limit_ns is None:
            return None
        return limit_ns / self.operating_ns if self.operating_ns > 0.0 else math.inf

    def plain_data(self) -> dict[str, Any]:
        """The choice for JSON, margins included; what is infinite or not known is None."""
        data = dict(vars(self))
        for key in ("plain_margin", "anticipating_margin", "margin"):
            data[key] = getattr(self, key)
        return {k: None if v == math.inf else v for k, v in data.items()}


def delay_of(loop: LoopSpec, delay_ms: float | None = None) -> float:
    """From a sample to its current in ms: a tick, or on arrival as given or half a tick."""
    if loop.apply == "next-tick" or delay_ms is None:
        return DELAY_TICKS[loop.apply] * loop.interval_us / US_PER_MS
    return delay_ms


def choose(cell: CellSpec, tables: Tables, loop: LoopSpec, delay_ms: float | None = None) -> Choice:
    """Choose a cell's settings.

    Parameters
    ----------
    cell, tables, loop
        The cell, its model and the loop's clock.
    delay_ms : float, optional
        From a sample to its current, where ``loop.apply`` is ``on-arrival``; half a tick
        when not given. With ``next-tick`` it is one tick.

    Raises
    ------
    FileError
        If ``loop.anticipate`` is true and the cell's capacitance is not given.
    """
    delay_ms = delay_of(loop, delay_ms)
    opened_ns = operating_ns(tables)
    if cell.capacitance_pf is None:
        return _unknown(cell, tables, loop, delay_ms, opened_ns)
    circuit = Circuit(cell.capacitance_pf, loop.interval_us / US_PER_MS, delay_ms)
    allowed = corners(circuit, cell.capacitance_uncertainty, cell.electrode.residue_mohm)
    plain_ns = worst_limit_ns(allowed, None)
    enough_ns = min(max(KEPT * opened_ns, plain_ns), max(AMPLE * opened_ns, 1e-6))
    settings = _best(allowed, list(candidates(cell, circuit)), enough_ns)
    limit_ns = worst_limit_ns(allowed, settings)
    on, reason = _verdict(loop, circuit, plain_ns, limit_ns, enough_ns)
    return Choice(
        cell=cell.name,
        on=on,
        **vars(settings),
        delay_ms=delay_ms,
        operating_ns=opened_ns,
        largest_ns=largest_ns(tables),
        plain_limit_ns=plain_ns,
        anticipating_limit_ns=limit_ns,
        reason=reason,
    )


def advice(choices: Sequence[Choice]) -> str | None:
    """Why arming is advised against, in one sentence for each cell at fault; None if it is not."""
    said = [
        f"cell {choice.cell}: the loop carries {choice.limit_ns:.4g} nS and the model opens "
        f"{choice.operating_ns:.4g} nS, so it may ring by itself; see 'gatestep check', "
        "or arm with force"
        for choice in choices
        if choice.margin is not None and choice.margin < 1.0
    ]
    return "; ".join(said) or None


def candidates(cell: CellSpec, circuit: Circuit) -> Iterator[Settings]:
    """Settings to try in order of fidelity, those that a rig file gives in their place."""
    given = cell.anticipate
    substeps = given.substeps or SUBSTEPS
    whole = circuit.delay_ms / circuit.interval_ms + 1.0
    pairs = [(a, share * whole + (1.0 - a) / a) for share in LEADS for a in ALPHAS]
    pairs += [(1.0, 0.0)] + [(a, 0.0) for a in SMOOTHING]
    for alpha, beta in pairs:
        yield Settings(
            substeps,
            alpha if given.alpha is None else given.alpha,
            beta if given.beta is None else given.beta,
        )


def _best(allowed: list[Circuit], tried: list[Settings], enough_ns: float) -> Settings:
    """The first of the candidates that carries enough, or the one that carries most."""
    tried = list(dict.fromkeys(tried))
    for settings in tried:
        if _carries(allowed, settings, enough_ns):
            return settings
    # The last ones mostly carry most: from there, few others need their limit found.
    best, best_ns = tried[-1], worst_limit_ns(allowed, tried[-1])
    for settings in reversed(tried[:-1]):
        if _carries(allowed, settings, best_ns):
            best, best_ns = settings, worst_limit_ns(allowed, settings)
    return best


def _carries(allowed: list[Circuit], settings: Settings, g_ns: float) -> bool:
    return all(worst_limit_ns([circuit], settings, g_ns) == math.inf for circuit in allowed)


def _verdict(
    loop: LoopSpec, circuit: Circuit, plain_ns: float, limit_ns: float, enough_ns: float
) -> tuple[bool, str]:
    """Whether to anticipate, and why."""
    carried = f"it carries {_shown(limit_ns)}, the plain loop {_shown(plain_ns)}"
    if loop.anticipate != "auto":
        return loop.anticipate, f"loop.anticipate = {str(loop.anticipate).lower()}; {carried}"
    if circuit.delay_ms > MOST_SEGMENTS * circuit.interval_ms:
        return False, f"the delay is over {MOST_SEGMENTS} ticks, too long to see across"
    on = limit_ns >= enough_ns or limit_ns > EQUAL * plain_ns
    return on, f"auto: {carried}"


def _shown(limit_ns: float) -> str:
    return "any conductance" if limit_ns == math.inf else f"{limit_ns:.4g} nS"


def _unknown(
    cell: CellSpec, tables: Tables, loop: LoopSpec, delay_ms: float, opened_ns: float
) -> Choice:
    """The plain loop, where nothing can be said of its limit."""
    if loop.anticipate is True:
        raise FileError(
            f"loop.anticipate = true needs the capacitance of cell {cell.name!r}: give "
            'capacitance_pf in its [[cell]], or loop.anticipate = "auto"'
        )
    reason = "the cell's capacitance is not given: [[cell]] capacitance_pf"
    return Choice(
        cell=cell.name,
        on=False,
        substeps=SUBSTEPS,
        alpha=1.0,
        beta=0.0,
        delay_ms=delay_ms,
        operating_ns=opened_ns,
        largest_ns=largest_ns(tables),
        plain_limit_ns=None,
        anticipating_limit_ns=None,
        reason=reason,
    )
