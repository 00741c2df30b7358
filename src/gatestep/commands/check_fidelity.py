"""What a rig file's loop would do to spikes, foretold on the simulated cell."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from ..choosing import Choice
from ..config import LoadedRig
from ..library import load_model
from ..lockstep import Conditions, LockstepRun, run_lockstep_loop
from ..simrig import with_changes
from ..specs import CellSpec, LoopSpec, SimCellSpec
from ..stability import Settings
from ..tables import Tables, build_tables
from ..units import US_PER_MS

SPAN_MS = 100.0
"""How long the cell is followed once it is driven."""
DRIVES_PA_PER_PF = (0.0, 3.0, 10.0, 30.0)
"""Constant stimuli tried where the rig file gives the simulated cell none."""


@dataclass(frozen=True)
class Fate:
    """What a loop makes of the spikes.

    ``error_us`` is how late the last spike is, in µs, and None where their number is
    wrong; ``peak_error_mv`` how much higher the highest voltage is.
    """

    spikes: int
    error_us: float | None
    peak_error_mv: float

    def __str__(self) -> str:
        if self.error_us is None:
            return f"{self.spikes} spikes"
        return f"{self.error_us:+.0f} µs at the last, {self.peak_error_mv:+.1f} mV at the peak"


@dataclass(frozen=True)
class Foretold:
    """Spikes of a cell that has the conductances itself, and what either loop makes of them."""

    spikes: int
    stimulus: str
    plain: Fate
    anticipating: Fate

    def __str__(self) -> str:
        return (
            f"simulated, {self.spikes} spikes of the continuous membrane under {self.stimulus}: "
            f"plain {self.plain}; anticipating {self.anticipating}"
        )

    def data(self) -> dict[str, Any]:
        """The same for JSON."""
        return {
            "spikes": self.spikes,
            "stimulus": self.stimulus,
            "plain": vars(self.plain),
            "anticipating": vars(self.anticipating),
        }


@dataclass(frozen=True)
class _Bench:
    """A simulated cell, what it has of its own, what it is given, and how it is driven."""

    cell: SimCellSpec
    own: tuple[Tables, ...]
    given: Tables
    stimulus_pa: float | None
    span_ms: float

    def run(self, conditions: Conditions, **more: Any) -> LockstepRun:
        """Let the cell live in a loop."""
        native = more.pop("native", self.own)
        return run_lockstep_loop(
            conditions,
            self.cell,
            self.given,
            self.span_ms,
            stimulus_pa=self.stimulus_pa,
            native=native,
            **more,
        )

    def continuous(self) -> LockstepRun:
        """The conductances as the cell's own, stepped by 1 µs; the server never armed."""
        return self.run(Conditions(), native=(*self.own, self.given), arm_ms=10.0 * self.span_ms)


def foretell(rig: LoadedRig, index: int, given: Tables, choice: Choice) -> Foretold | None:
    """Run a cell's two loops in virtual time; None where the cell does not fire.

    The cell is the rig file's simulated one, or a passive one of the stated capacitance.
    """
    cell = rig.spec.cell[index]
    found = _firing(rig, index, given)
    if found is None:
        return None
    bench, reference = found
    fates = [
        _fate(bench.run(_conditions(cell, rig.spec.loop, bench.cell, choice, settings)), reference)
        for settings in (None, Settings(choice.substeps, choice.alpha, choice.beta))
    ]
    driven = f"{bench.stimulus_pa:g} pA" if bench.stimulus_pa is not None else "its own steps"
    return Foretold(reference.spikes_ms.size, driven, *fates)


def _firing(rig: LoadedRig, index: int, given: Tables) -> tuple[_Bench, LockstepRun] | None:
    """The first stimulus that makes the cell fire, with the run in which it does."""
    best: tuple[_Bench, LockstepRun] | None = None
    for bench in _benches(rig, index, given):
        run = bench.continuous()
        count = run.spikes_ms.size if _comes_back(run) else 0
        if count and run.spikes_ms[-1] > run.fine_ms[-1] - 0.5 * SPAN_MS:
            return bench, run
        if count and (best is None or count > best[1].spikes_ms.size):
            best = bench, run
    return best


def _comes_back(run: LockstepRun) -> bool:
    """Whether the first rise through 0 mV is a spike's: a charged membrane stays there."""
    if run.spikes_ms.size == 0:
        return False
    return bool(run.fine_mv[run.fine_ms >= run.spikes_ms[0]].min() < 0.0)


def _benches(rig: LoadedRig, index: int, given: Tables) -> Iterator[_Bench]:
    cell = with_changes(rig.spec, {}).cell[index]
    own = tuple(build_tables(load_model(name, rig.folder).spec) for name in cell.native)
    if cell.step:
        start_ms = min(step.start_ms for step in cell.step)
        yield _Bench(cell, own, given, None, start_ms + SPAN_MS)
        return
    for drive in DRIVES_PA_PER_PF:
        yield _Bench(cell, own, given, drive * cell.capacitance_pf, SPAN_MS)


def _conditions(
    cell: CellSpec,
    loop: LoopSpec,
    simulated: SimCellSpec,
    choice: Choice,
    settings: Settings | None,
) -> Conditions:
    """The rig file's loop, without noise or faults; what is stated of C may be wrong."""
    assert cell.capacitance_pf is not None
    return Conditions(
        tick_us=loop.interval_us,
        delay_ticks=choice.delay_ms * US_PER_MS / loop.interval_us,
        next_tick=loop.apply == "next-tick",
        capacitance_error=min(cell.capacitance_pf / simulated.capacitance_pf - 1.0, 10.0),
        residue_mohm=max(simulated.electrode_mohm - simulated.bridge_mohm, 0.0),
        input_ns=cell.input_ns or 0.0,
        input_mv=cell.input_mv or 0.0,
        settings=settings,
    )


def _fate(run: LockstepRun, reference: LockstepRun) -> Fate:
    spikes, wanted = run.spikes_ms, reference.spikes_ms
    same = spikes.size == wanted.size
    return Fate(
        int(spikes.size),
        float(spikes[-1] - wanted[-1]) * US_PER_MS if same else None,
        float(run.fine_mv.max() - reference.fine_mv.max()),
    )
