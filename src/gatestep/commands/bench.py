"""``gatestep bench step``: what a tick of the model costs, beside the same step in C.

Everything is measured inside compiled loops over one prepared series of voltages, a
spike train of the squid axon, so that a call's own cost, some microseconds, hardly
counts. Rounds alternate between the contestants, and ratios are taken within a round:
a machine that slows down slows both sides.
"""

from __future__ import annotations

import json
import os
import platform
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import numba
import numpy as np
from numpy.typing import NDArray

from .. import __version__
from ..compiling import compiled
from ..errors import GatestepError
from ..kernel import BANK, STATES, conductance, records, settle, step
from ..library import load_model
from ..simd import WIDTH
from ..specs import ModelSpec
from ..tables import build_tables
from .squid_c import SquidInC, build_squid_step, compiler_name

Floats = NDArray[np.float64]
Run = Callable[[], None]

TICK_MS = 0.02
CAPACITANCE_PF = 30.0
DRIVE_PA = 300.0
SIZES = ((1, 2), (2, 2), (8, 2), (32, 2), (64, 2), (64, 4))
"""Conductances and the gates of each."""
SIZES_TAKE = 5
"""The large sizes are slow: they get a fifth of the rounds."""
MOST_ROUNDS, MOST_TICKS = 10_000, 1_000_000
AGREEMENT = 1e-5
"""Largest difference between the kernel's and the C's current, as a share of the peak."""

KERNEL = "gatestep kernel"


@compiled
def record_spikes(bank: Any, table: Any, x: Any, v: Any, dt: float, c: float, i: float) -> None:
    """Let a cell of ``c`` pF, given the model and ``i`` pA, run from ``v[0]`` mV."""
    settle(bank, table, x, v[0])
    old = v[0]
    for k in range(np.uint64(1), np.uint64(v.size)):
        last = v[k - np.uint64(1)]
        injected = step(bank, table, x, old, last, dt)
        g = conductance(bank, x)
        v[k] = last + (injected + i) / g * (1.0 - np.exp(-dt * g / c))
        old = last


@compiled
def step_along(bank: Any, table: Any, x: Any, v: Any, dt: float, i_pa: Any) -> None:
    """Step a model along a series of voltages."""
    for k in range(np.uint64(1), np.uint64(v.size)):
        i_pa[k] = step(bank, table, x, v[k - np.uint64(1)], v[k], dt)


class Stepped:
    """A model to be stepped along voltages; a call does so, filling ``i_pa``.

    Parameters
    ----------
    model : ModelSpec
    v_mv : array (n,)
        Voltages in mV, one a tick.
    """

    def __init__(self, model: ModelSpec, v_mv: Floats) -> None:
        tables = build_tables(model)
        bank = records(BANK)
        bank[0] = tables.bank
        self.bank, self.table = bank[0], tables.table.copy()
        self.v_mv, self.i_pa = v_mv, np.zeros_like(v_mv)
        self.x = np.zeros(STATES)
        self.restart()

    def restart(self) -> None:
        """Put the gates at steady state for the first voltage."""
        settle(self.bank, self.table, self.x, self.v_mv[0])

    def __call__(self) -> None:
        """Step once along the voltages, from where the gates are."""
        step_along(self.bank, self.table, self.x, self.v_mv, TICK_MS, self.i_pa)


@dataclass(frozen=True)
class Spread:
    """Median and the 10th and 90th percentile over the rounds."""

    median: float
    low: float
    high: float

    @classmethod
    def over(cls, values: list[float]) -> Spread:
        """Summarise one value a round."""
        low, high = np.percentile(values, [10, 90])
        return cls(statistics.median(values), float(low), float(high))

    def __format__(self, form: str) -> str:
        return f"{self.median:{form}} [{self.low:{form}}, {self.high:{form}}]"


@dataclass(frozen=True)
class Sized:
    """What one tick of a model of this size costs."""

    conductances: int
    gates: int
    nsec: Spread


@dataclass(frozen=True)
class Line:
    """A cost linear in gates and conductances, and its largest distance from a measured one.

    ``base_nsec + gate_nsec * gates + conductance_nsec * conductances``, the gates
    counted in the blocks of four that the kernel steps; fitted to relative errors.
    ``worst`` is relative too.
    """

    base_nsec: float
    gate_nsec: float
    conductance_nsec: float
    worst: float

    @classmethod
    def through(cls, sizes: list[Sized]) -> Line:
        """Fit the medians of all sizes."""
        nsec = np.array([s.nsec.median for s in sizes])
        terms = np.array([[1.0, -(-s.gates // WIDTH) * WIDTH, s.conductances] for s in sizes])
        terms /= nsec[:, None]
        fitted, *_ = np.linalg.lstsq(terms, np.ones_like(nsec), rcond=None)
        worst = float(np.abs(terms @ fitted - 1.0).max())
        base, gate, each = (float(value) for value in fitted)
        return cls(base, gate, each, worst)

    def at(self, conductances: float, gates: float) -> float:
        """Cost in ns of a size whose gates fill their blocks."""
        return self.base_nsec + self.gate_nsec * gates + self.conductance_nsec * conductances


@dataclass(frozen=True)
class Result:
    """Everything ``bench step`` measured; costs are in nanoseconds a tick."""

    rounds: int
    size_rounds: int
    ticks: int
    squid: dict[str, Spread]
    ratios: dict[str, Spread]
    c_unavailable: str | None
    sizes: list[Sized]
    line: Line
    host: dict[str, str]


def bench_step(rounds: int, ticks: int, figure: Path | None, json_output: bool) -> int:
    """Measure the step and print what it costs; returns the exit status.

    Parameters
    ----------
    rounds : int
        Alternating rounds of the squid axon, at least 3; a fifth as many of the sizes.
    ticks : int
        Ticks that each contestant steps in a round, at least 1000.
    figure : Path or None
        PNG or SVG file to draw to.
    json_output : bool
        Print JSON instead of text.

    Raises
    ------
    GatestepError
        If a count is out of range, the figure cannot be drawn, or the C computes
        other currents than the kernel.
    """
    from .step_report import as_json, as_text, check_figure, draw

    for name, count, least, most in (
        ("--rounds", rounds, 3, MOST_ROUNDS),
        ("--ticks", ticks, 1000, MOST_TICKS),
    ):
        if not least <= count <= most:
            raise GatestepError(f"{name} {count}: give {least} to {most}")
    if figure is not None:
        check_figure(figure)
    result = measure(rounds, ticks, Progress())
    if figure is not None:
        draw(result, figure)
    if json_output:
        print(json.dumps(as_json(result, figure), ensure_ascii=False))
    else:
        print(as_text(result, figure))
    return 0


class Progress:
    """Tells on stderr how far the work is, once it has taken more than a second."""

    def __init__(self) -> None:
        self._next_s = time.monotonic() + 1.0

    def __call__(self, what: str) -> None:
        """Say what is being done, at most twice a second."""
        now = time.monotonic()
        if now >= self._next_s:
            self._next_s = now + 0.5
            print(f"bench step: {what}", file=sys.stderr, flush=True)


def measure(rounds: int, ticks: int, say: Callable[[str], None]) -> Result:
    """Run all rounds: first the squid axon, the kernel and the C in turn, then the sizes."""
    before = host()  # the load of others, not of the benchmark itself
    say("preparing tables and voltages")
    squid_model = load_model("squid-axon").spec
    squid = Stepped(squid_model, spike_train(squid_model, ticks))
    with tempfile.TemporaryDirectory(prefix="gatestep-bench-") as folder:
        builds, why_not = build_squid_step(Path(folder), squid, TICK_MS)
        _check_agreement(squid, builds)
        costs = alternate({KERNEL: squid, **builds}, rounds, ticks, say)
    ratios = {
        name: Spread.over([k / c for k, c in zip(costs[KERNEL], costs[name], strict=True)])
        for name in builds
    }
    runs = {}
    for n, each in SIZES:
        say(f"preparing {n} conductances")
        runs[n, each] = Stepped(sized_model(n, each), squid.v_mv)
    size_rounds = max(3, rounds // SIZES_TAKE)
    by_size = alternate(runs, size_rounds, ticks, say)
    sizes = [Sized(n, n * each, Spread.over(by_size[n, each])) for n, each in SIZES]
    spreads = {name: Spread.over(values) for name, values in costs.items()}
    line = Line.through(sizes)
    return Result(rounds, size_rounds, ticks, spreads, ratios, why_not, sizes, line, before)


def spike_train(model: ModelSpec, ticks: int) -> Floats:
    """Voltages in mV of a 30 pF cell that fires on the model's conductances."""
    v_mv = np.full(ticks + 1, -65.0)
    cell = Stepped(model, v_mv)
    record_spikes(cell.bank, cell.table, cell.x, v_mv, TICK_MS, CAPACITANCE_PF, DRIVE_PA)
    return v_mv


def sized_model(conductances: int, gates: int) -> ModelSpec:
    """Copies of the squid axon's Na conductance, of two gates, or of two such pairs."""
    na = load_model("na-squid").spec.conductance[0]
    pairs = (g.model_copy(update={"name": f"{g.name}{k // 2}"}) for k, g in _cycle(na.gate, gates))
    one = na.model_copy(update={"gate": tuple(pairs)})
    copies = [one.model_copy(update={"name": f"Na{k}"}) for k in range(conductances)]
    return ModelSpec(
        title=f"{conductances} copies",
        source="Hodgkin & Huxley 1952, J Physiol 117:500-544",
        temperature_c=6.3,
        conductance=tuple(copies),
    )


def _cycle(gates: tuple[Any, ...], count: int) -> Iterator[tuple[int, Any]]:
    return ((k, gates[k % len(gates)]) for k in range(count))


def alternate(
    runs: Mapping[Any, Run], rounds: int, ticks: int, say: Callable[[str], None]
) -> dict[Any, list[float]]:
    """Nanoseconds a tick, one value a round; each round begins with another contestant."""
    costs: dict[Any, list[float]] = {name: [] for name in runs}
    names = list(runs)
    for run in runs.values():
        run()
    for k in range(rounds):
        say(f"round {k + 1} of {rounds}")
        turn = k % len(names)
        for name in names[turn:] + names[:turn]:
            run = runs[name]
            start = time.perf_counter_ns()
            run()
            costs[name].append((time.perf_counter_ns() - start) / ticks)
    return costs


def _check_agreement(squid: Stepped, builds: Mapping[str, SquidInC]) -> None:
    """Refuse to compare the cost of two different results."""
    squid.restart()
    squid()
    for name, c in builds.items():
        c()
        off = float(np.abs(squid.i_pa - c.i_pa).max() / np.abs(squid.i_pa).max())
        if not off <= AGREEMENT:
            raise GatestepError(
                f"{name}: its current differs from the kernel's by {off:.2g} of the peak; "
                "their costs cannot be compared"
            )


def host() -> dict[str, str]:
    """Processor, its load, versions and date, to stand with every result."""
    return {
        "cpu": cpu_name(),
        "load": f"{os.getloadavg()[0]:.1f} on {os.cpu_count()} CPUs",
        "system": f"{platform.system()} {platform.release()} {platform.machine()}",
        "python": platform.python_version(),
        "numpy": np.__version__,
        "numba": numba.__version__,
        "compiler": compiler_name() or "none",
        "gatestep": __version__,
        "date": datetime.now().astimezone().isoformat(timespec="seconds"),
    }


def cpu_name() -> str:
    """The processor's name as the system gives it."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
    except OSError:
        lines = []
    for line in lines:
        if line.startswith(("model name", "Model")):
            return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()
