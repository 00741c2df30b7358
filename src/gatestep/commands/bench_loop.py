"""``gatestep bench loop``: measure the loop of a rig file on this machine."""

from __future__ import annotations

import json
import os
import signal
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext, suppress
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError, MissingExtraError
from .loop_result import Measured, Plan, compare_results, make_result, read_result

if TYPE_CHECKING:
    from ..config import LoadedRig
    from ..measuring import Probe, Run
    from ..specs import RigSpec

_WARM_UP_S = 0.2
_LOAD_MARGIN_S = 30.0

Show = Callable[[str, float | None], None]
"""Called with what is being done and the share of it that is done, None if not known."""


def bench_loop(
    rig_file: Path,
    seconds: float,
    rounds: int,
    load: bool,
    burners: int | None,
    spin: bool,
    realtime: bool,
    figure: Path | None,
    save: Path | None,
    compare: Path | None,
    json_output: bool,
) -> int:
    """Measure, print, save, draw and compare; returns the exit status.

    Raises
    ------
    GatestepError
        When an option cannot be used, a running server must not be disturbed, or the
        measurement was cut short; what was measured until then is printed and saved.
    """
    from ..burners import usable_cores
    from ..config import load_rig
    from . import loop_report

    if burners is not None and burners < 1:
        raise FileError(f"--burners {burners}: give 1 or more")
    count = burners or (usable_cores() if load else 0)
    plan = Plan(seconds, rounds, count, not spin, realtime)
    rig = load_rig(rig_file)
    plan.ticks(rig.spec.loop.interval_us)
    before = read_result(compare) if compare else None
    _check_outputs(save, figure)
    with _bar() as show, _ending_in_order():
        result, measured = measure(rig, plan, show)
    if before is not None and compare is not None:
        result["comparison"] = compare_results(before, result, compare)
    if save is not None:
        _write(save, json.dumps(result, indent=1).encode())
    if figure is not None:
        loop_report.draw(result, before, figure)
    print(json.dumps(result) if json_output else loop_report.text(result))
    if measured.interrupted:
        raise KeyboardInterrupt
    if measured.fault is not None:
        kept = f"saved in {save}" if save else "printed"
        raise LinkError(f"{measured.fault}; what was measured until then is {kept}")
    return 0


def measure(rig: LoadedRig, plan: Plan, show: Show) -> tuple[dict[str, Any], Measured]:
    """Measure a rig file's loop; the result as ``--json`` prints it, and every round.

    Raises
    ------
    GatestepError
        When there is no server that may be measured.
    """
    from ..measuring import Probe
    from .loop_target import choose_target

    with choose_target(rig, lambda text: show(text, None)) as target:
        show("connecting; the first time on a machine compiles", None)
        with Probe(
            target.endpoint,
            rig.spec,
            may_be_live=target.private,
            sleep=plan.sleep,
            realtime=plan.realtime,
        ) as probe:
            measured = run_rounds(probe, plan, rig.spec, show)
            client = probe.facts
    return make_result(rig, plan, target, client, measured), measured


def run_rounds(probe: Probe, plan: Plan, spec: RigSpec, show: Show) -> Measured:
    """All rounds: in each, every condition, and in each of those both ways of sending."""
    measured = Measured()
    parts = [(number, condition) for number in range(plan.rounds) for condition in plan.conditions]
    try:
        measured.fault = fault_of(probe.flat(_WARM_UP_S), probe.endpoint)
        for done, (number, condition) in enumerate(parts):

            def progress(share: float, done: int = done, number: int = number) -> None:
                show(f"round {number + 1} of {plan.rounds}", (done + share) / len(parts))

            if measured.fault is None:
                _measure_condition(probe, plan, condition, spec, measured, progress)
    except KeyboardInterrupt:
        measured.interrupted = True
        measured.fault = "interrupted"
    return measured


def _measure_condition(
    probe: Probe,
    plan: Plan,
    condition: str,
    spec: RigSpec,
    measured: Measured,
    progress: Callable[[float], None],
) -> None:
    """One condition in one round: by the clock, then flat out."""
    from ..burners import Burners

    each_s = plan.seconds / plan.rounds
    loaded = condition == "loaded"
    with Burners(plan.burners, 2 * each_s + _LOAD_MARGIN_S) if loaded else nullcontext():
        for kind in ("tick", "flat"):
            if kind == "tick":
                ticks = plan.ticks(spec.loop.interval_us)
                run = probe.paced(ticks, lambda share: progress(share / 2))
            else:
                run = probe.flat(each_s, lambda share: progress((1 + share) / 2))
            measured.runs.setdefault((condition, kind), []).append(run)
            measured.fault = fault_of(run, probe.endpoint)
            if measured.fault is not None:
                return


def fault_of(run: Run, endpoint: str) -> str | None:
    """What in a run ends the measurement, in words; None when nothing does."""
    from ..probe import Status

    reasons = {
        Status.CLOSED: "the server ended the connection; see whether it still runs",
        Status.HALTED: "stopped",
        Status.SILENT: "no answer comes any more; see whether the server still runs",
        Status.BROKEN: "what came is not ZMTP; see what listens there",
        Status.REFUSED: "another rig holds the loop now; measure when it is free",
        Status.ARMED: "the server was armed while it was measured; measuring has stopped at once",
        Status.MALFORMED: "the server takes the samples for malformed; give the rig file that "
        "it was started with",
    }
    if run.status == Status.NO_ANSWER and not (run.start_nsec and run.answered.any()):
        return f"loop endpoint {endpoint}: no answer came to {int(run.sent.sum())} sample(s)"
    reason = reasons.get(run.status)
    return f"loop endpoint {endpoint}: {reason}" if reason else None


def _check_outputs(save: Path | None, figure: Path | None) -> None:
    """Find out before the measurement what would fail after it."""
    for option, path in (("--save", save), ("--figure", figure)):
        if path is None:
            continue
        trial = _beside(path)
        try:
            if path.is_dir():
                raise IsADirectoryError(None, "is a folder")
            trial.touch()
            trial.unlink()
        except OSError as fault:
            raise FileError(
                f"{option} {path}: cannot be written ({fault.strerror}); choose another place"
            ) from fault
    if figure is not None:
        if figure.suffix.lower() not in {".png", ".svg"}:
            raise FileError(f"--figure {figure}: give a name that ends in .png or .svg")
        try:
            import matplotlib  # noqa: F401  only whether it is there, before minutes of measuring
        except ImportError:
            raise MissingExtraError("matplotlib", "figure", "Drawing the figure") from None


def _beside(path: Path) -> Path:
    return path.with_name(f".{path.name}.{os.getpid()}.part")


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


@contextmanager
def _ending_in_order() -> Iterator[None]:
    """Let SIGTERM end a measurement as Ctrl-C does, so that server and load end with it."""

    def interrupt(_number: int, _frame: FrameType | None) -> None:
        raise KeyboardInterrupt

    earlier = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, earlier)


@contextmanager
def _bar() -> Iterator[Show]:
    """A progress bar on stderr, where there is someone to see it."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    console = Console(stderr=True)
    columns = (TextColumn("{task.description}"), BarColumn(), TimeRemainingColumn())
    # Drawn seldom: the bar is work on the machine that is measured.
    bar = Progress(
        *columns,
        console=console,
        transient=True,
        refresh_per_second=2,
        disable=not sys.stderr.isatty(),
    )
    with bar:
        task = bar.add_task("starting", total=None)

        def show(doing: str, share: float | None) -> None:
            if share is None:
                bar.update(task, description=doing)
            else:
                bar.update(task, description=doing, total=1.0, completed=share)

        yield show
