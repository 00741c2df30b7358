"""``gatestep bench fidelity``: how true a loop is, over ticks, delays and faults."""

from __future__ import annotations

import json
import os
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor
from contextlib import contextmanager, suppress
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import FileError, LinkError, MissingExtraError
from ..fidelity import QUICK, SWEPT, Fidelity, Measured, Plan, measure_all, points
from ..reference import RTOL, solve
from ..scenarios import NAMES, Scenario, scenario_named
from .bench import host

_CONNECT_S = 10

Progress = Callable[[int, int], None]
"""Called with points done and points to do."""


def bench_fidelity(
    quick: bool,
    names: Sequence[str],
    figure: Path | None,
    save: Path | None,
    scheduler: str | None,
    json_output: bool,
) -> int:
    """Measure, save, draw and print; returns the exit status.

    Raises
    ------
    GatestepError
        When an option cannot be used, or an extra is missing that it needs.
    """
    from .fidelity_report import draw, text
    from .step_report import check_figure

    scenarios = [scenario_named(name) for name in dict.fromkeys(names or NAMES)]
    if figure is not None:
        check_figure(figure)
    if save is not None:
        _check_save(save)
    plan = QUICK if quick else Plan()
    with _executor(scheduler) as executor, _bar() as progress:
        result = measure(scenarios, plan, executor, progress)
    if save is not None:
        _write(save, json.dumps(result, indent=1).encode())
    if figure is not None:
        draw(result, figure)
        result["figure"] = str(figure)
    print(json.dumps(result) if json_output else text(result))
    return 0


def measure(
    scenarios: Sequence[Scenario],
    plan: Plan,
    executor: Executor | None = None,
    progress: Progress | None = None,
) -> dict[str, Any]:
    """Measure scenarios; the result as ``--json`` prints it.

    Parameters
    ----------
    scenarios : sequence of Scenario
    plan : Plan
    executor : concurrent.futures.Executor, optional
        What runs the points; threads on every core if not given.
    progress : callable, optional
        Called with points done and points to do.
    """
    started = time.monotonic()
    asked = [point for scenario in scenarios for point in points(scenario, plan)]
    found = measure_all(asked, executor, progress)
    return {
        "host": host(),
        "seconds": round(time.monotonic() - started, 1),
        "plan": asdict(plan),
        "scenarios": [
            _scenario_data(s, [m for m in found if m.point.scenario is s]) for s in scenarios
        ],
    }


def _scenario_data(scenario: Scenario, found: list[Measured]) -> dict[str, Any]:
    reference = solve(scenario)
    spikes = reference.spikes_ms[reference.spikes_ms >= scenario.act_ms]
    return {
        "name": scenario.name,
        "title": scenario.title,
        "unit": "µs" if spikes.size else "µV",
        "error": "mean distance of a spike from its time"
        if spikes.size
        else "rms distance of the voltage",
        "reference": {"solver": "scipy LSODA", "rtol": RTOL, "spikes_ms": spikes.tolist()},
        "points": [_point_data(m) for m in found],
    }


def _point_data(measured: Measured) -> dict[str, Any]:
    """A point and the means of its runs; what one of them does not have is None."""
    point, first = measured.point, measured.point.conditions[0]

    def mean(name: str) -> float | None:
        values = [getattr(run, name) for run in measured.runs]
        return None if None in values else float(np.mean(values))

    kept = ("tick_us", "delay_ticks", *SWEPT)
    means = ("spike_error_us", "last_spike_us", "peak_error_mv", "rate_error", "rms_mv")
    return {
        "part": point.part,
        "mode": point.mode,
        **{name: getattr(first, name) for name in kept},
        "settings": None if first.settings is None else asdict(first.settings),
        "outcome": measured.outcome,
        "error": measured.error,
        "spread": _spread(measured.runs),
        "runs": len(measured.runs),
        "spikes": [run.spikes for run in measured.runs],
        "expected": measured.runs[0].expected,
        **{name: mean(name) for name in means},
    }


def _spread(runs: Sequence[Fidelity]) -> float | None:
    """Standard deviation of the runs' errors."""
    errors = [run.error for run in runs if run.error is not None]
    return float(np.std(errors)) if len(errors) == len(runs) > 1 else None


@contextmanager
def _executor(scheduler: str | None) -> Iterator[Executor | None]:
    """The workers of a dask scheduler, or None for threads of this process."""
    if scheduler is None:
        yield None
        return
    try:
        from distributed import Client
    except ImportError:
        raise MissingExtraError("distributed", "dask", "--scheduler") from None
    try:
        client = Client(scheduler, timeout=f"{_CONNECT_S}s", set_as_default=False)
    except (OSError, ValueError) as fault:
        raise LinkError(
            f"--scheduler {scheduler}: no scheduler answers there within {_CONNECT_S} s "
            f"({fault}); start one with: dask scheduler"
        ) from None
    with client:
        yield client.get_executor()


@contextmanager
def _bar() -> Iterator[Progress]:
    """A progress bar on stderr, where there is someone to see it."""
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    bar = Bar(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
        disable=not sys.stderr.isatty(),
    )
    with bar:
        task = bar.add_task("points", total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)


def _beside(path: Path) -> Path:
    return path.with_name(f".{path.name}.{os.getpid()}.part")


def _check_save(path: Path) -> None:
    """See before the work that its result can be written."""
    trial = _beside(path)
    try:
        if path.is_dir():
            raise IsADirectoryError(None, "is a folder")
        trial.touch()
        trial.unlink()
    except OSError as fault:
        raise FileError(
            f"--save {path}: cannot be written ({fault.strerror}); choose another place"
        ) from fault


def _write(path: Path, content: bytes) -> None:
    """Write a file, whole or not at all."""
    temporary = _beside(path)
    try:
        temporary.write_bytes(content)
        temporary.replace(path)
    except OSError as fault:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)
        raise FileError(f"--save {path}: cannot be written ({fault.strerror})") from fault
