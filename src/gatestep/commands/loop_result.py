"""What ``gatestep bench loop`` is to measure, and the result it prints, saves and compares."""

from __future__ import annotations

import hashlib
import json
import os
import platform
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError

if TYPE_CHECKING:
    from ..config import LoadedRig
    from ..measuring import Run
    from .loop_target import Target

KIND, FORMAT = "gatestep bench loop", 1
SHORTEST_S, LONGEST_S = 0.05, 600.0
MOST_ROUNDS, MOST_BURNERS = 50, 256
MOST_TICKS = 20_000_000
"""Ticks in one round: 640 MB."""


@dataclass(frozen=True)
class Plan:
    """What to measure, and how long: every figure is checked when it is made.

    Raises
    ------
    FileError
        When a figure is out of its range.
    """

    seconds: float
    rounds: int
    burners: int
    sleep: bool
    realtime: bool

    def __post_init__(self) -> None:
        if not SHORTEST_S <= self.seconds <= LONGEST_S:
            raise FileError(
                f"--seconds {self.seconds:g}: give {SHORTEST_S:g} to {LONGEST_S:g} seconds for "
                "each way of sending"
            )
        if not 1 <= self.rounds <= MOST_ROUNDS:
            raise FileError(f"--rounds {self.rounds}: give 1 to {MOST_ROUNDS}")
        if not 0 <= self.burners <= MOST_BURNERS:
            raise FileError(f"--burners {self.burners}: give 1 to {MOST_BURNERS}")

    @property
    def conditions(self) -> list[str]:
        """Names of the conditions, in the order of each round."""
        return ["quiet", "loaded"] if self.burners else ["quiet"]

    def ticks(self, interval_us: float) -> int:
        """Ticks in one round.

        Raises
        ------
        FileError
            When there are none, or too many to keep.
        """
        ticks = int(self.seconds / self.rounds * 1e6 / interval_us + 1e-9)
        if not 1 <= ticks <= MOST_TICKS:
            raise FileError(
                f"--seconds {self.seconds:g} in {self.rounds} round(s) makes {ticks} ticks of "
                f"{interval_us:g} µs a round; 1 to {MOST_TICKS} are possible"
            )
        return ticks


@dataclass
class Measured:
    """Every round that was measured, and what ended the measurement early, if anything."""

    runs: dict[tuple[str, str], list[Run]] = field(default_factory=dict)
    fault: str | None = None
    interrupted: bool = False
    load_average: float = field(default_factory=lambda: os.getloadavg()[0])
    """Of the minute before, when this is made: what else the machine did."""


def make_result(
    rig: LoadedRig, plan: Plan, target: Target, client: dict[str, Any], measured: Measured
) -> dict[str, Any]:
    """Everything that is known of a measurement, as plain numbers and words."""
    from ..timing import carried, series_figures

    loop = rig.spec.loop
    conditions: dict[str, dict[str, Any]] = {}
    for (condition, kind), runs in measured.runs.items():
        conditions.setdefault(condition, {})[kind] = series_figures(runs, loop)
    return {
        "kind": KIND,
        "format": FORMAT,
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
        "complete": measured.fault is None,
        "fault": measured.fault,
        "host": host_facts(),
        "rig": {
            "file": rig.path.name,
            "sha256": hashlib.sha256(rig.text.encode()).hexdigest(),
            "interval_us": loop.interval_us,
            "budget_us": loop.budget,
            "apply": loop.apply,
            "cells": [
                {"name": c.name, "model": c.model, "capacitance_pf": c.capacitance_pf}
                for c in rig.spec.cell
            ],
        },
        "server": target.facts,
        "client": client,
        "load_average": measured.load_average,
        "plan": {"seconds": plan.seconds, "rounds": plan.rounds, "burners": plan.burners},
        "conditions": conditions,
        "carries": {
            condition: carried(kinds["tick"], rig.spec)
            for condition, kinds in conditions.items()
            if "tick" in kinds
        },
    }


def host_facts() -> dict[str, Any]:
    """What the machine is, without its name."""
    import numba
    import zmq

    from .. import __version__
    from ..burners import usable_cores

    return {
        "cpu": _cpu_model(),
        "cores": os.cpu_count(),
        "usable_cores": usable_cores(),
        "kernel": f"{platform.system()} {platform.release()}",
        "realtime_kernel": Path("/sys/kernel/realtime").exists(),
        "nice": os.getpriority(os.PRIO_PROCESS, 0),
        "python": platform.python_version(),
        "numba": numba.__version__,
        "libzmq": zmq.zmq_version(),
        "gatestep": __version__,
    }


def _cpu_model() -> str:
    try:
        for line in Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines():
            if line.lower().startswith("model name"):
                return line.partition(":")[2].strip()
    except OSError:
        pass
    return platform.processor() or platform.machine()


def read_result(path: Path) -> dict[str, Any]:
    """A result that ``--save`` wrote.

    Raises
    ------
    FileError
        When the file is missing or holds something else.
    """
    try:
        result = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as fault:
        raise FileError(f"--compare {path}: cannot be read ({fault})") from fault
    if not isinstance(result, dict) or result.get("kind") != KIND:
        raise FileError(f"--compare {path}: holds no result of 'gatestep bench loop --save'")
    if result.get("format") != FORMAT:
        raise FileError(
            f"--compare {path}: has format {result.get('format')!r}; this version reads {FORMAT}"
        )
    # Compared with itself: what is not whole must show before minutes of measuring.
    compare_results(result, result, path)
    return result


def compare_results(before: dict[str, Any], now: dict[str, Any], path: Path) -> dict[str, Any]:
    """The comparison part of a result, and what besides the times is not the same.

    Raises
    ------
    FileError
        When the older result lacks what the comparison reads.
    """
    from ..timing import comparison

    try:
        unlike = {
            f"{part}.{key}": [before[part][key], value]
            for part in ("host", "rig", "server", "client", "plan")
            for key, value in now[part].items()
            if before[part].get(key) != value and key != "file"
        }
        rows = comparison(before, now)
    except (KeyError, TypeError, AttributeError) as fault:
        raise FileError(f"--compare {path}: is not whole ({fault!r} in it)") from fault
    return {"file": str(path), "date": before["date"], "unlike": unlike, "rows": rows}
