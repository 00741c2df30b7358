"""``gatestep check RIG.toml``: files, host and the loop's bound, before anything is armed."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import GatestepError
from ..hostfacts import Finding, Host, Verdict, host_findings
from ..remedies import SYSTEM

if TYPE_CHECKING:
    from ..config import LoadedRig
    from ..library import LoadedModel
    from ..specs import CellSpec
    from ..tables import Tables

DELAY_TICKS = {"next-tick": 1.0, "on-arrival": 0.5}
"""From a sample to its current's start, in ticks, as ``loop.apply`` lets it be."""

SHORTEST_TICK_US = 5.0
"""The shortest ``loop.interval_us`` that a rig file may have."""

_TABLES_MATTER = "The loop follows a model's tables, not its formulas."
_BOUND_MATTERS = (
    "Beyond the bound the loop itself rings, on a cell that is a capacitance alone; "
    "gates seldom all open at once, so this is the worst case."
)
_LOOKS = {"ok": "green", "weak": "yellow", "missing": "bold red"}


@dataclass(frozen=True)
class Checked:
    """A rig file, and the model of each cell where it could be used."""

    rig: LoadedRig
    models: list[LoadedModel | None]
    files: list[Finding]


@dataclass(frozen=True)
class Section:
    """One part of the check: its key in JSON, its heading, what was found."""

    key: str
    heading: str
    findings: list[Finding]


def check(rig_file: Path, json_output: bool) -> int:
    """Check a rig file, its models and the host; the exit status is 1 for faulty files.

    Raises
    ------
    FileError
        When the rig file itself cannot be used.
    """
    checked = read_files(rig_file)
    sections = [make(checked) for make in SECTIONS]
    if json_output:
        print(json.dumps(_as_json(checked.rig, sections), ensure_ascii=False))
    else:
        _print(checked.rig, [section for section in sections if section.findings])
    return int(any(model is None for model in checked.models))


def read_files(rig_file: Path) -> Checked:
    """Read a rig file and its models, tables included.

    Raises
    ------
    FileError
        When the rig file itself cannot be used.
    """
    from ..config import load_rig

    rig = load_rig(rig_file)
    loop = rig.spec.loop
    shown = (
        f"{rig.path}: tick {loop.interval_us:g} µs, budget {loop.budget:g} µs, "
        f"{loop.apply}, {len(rig.spec.cell)} cell{'s' * (len(rig.spec.cell) > 1)}"
    )
    findings = [Finding("rig file", "ok", shown, "It says what the loop does, and its limits.")]
    models = []
    for cell in rig.spec.cell:
        model, finding = _read_model(cell, rig)
        models.append(model)
        findings.append(finding)
    return Checked(rig, models, findings)


def _read_model(cell: CellSpec, rig: LoadedRig) -> tuple[LoadedModel | None, Finding]:
    """A cell's model with its tables built, and what there is to say of it."""
    from ..library import load_model
    from ..tables import build_tables

    try:
        model = load_model(cell.model, relative_to=rig.folder)
        tables = build_tables(model.spec)
    except GatestepError as fault:
        remedy = f"mend it, or choose another (gatestep models): [[cell]] {cell.name}, model"
        name = f"model of {cell.name}"
        return None, Finding(name, "missing", str(fault), _TABLES_MATTER, remedy)
    return model, _describe(cell, model, tables)


def _describe(cell: CellSpec, model: LoadedModel, tables: Tables) -> Finding:
    """Where a cell's model comes from, how sure it is, and how well its tables hold."""
    from ..library import shipped_folder

    error = max((max(r.inf_error, r.rate_error) for r in tables.reports), default=0.0)
    shipped = model.path.parent == shipped_folder()
    gates = len(tables.reports)
    shown = (
        f"{model.name} ({'shipped' if shipped else 'own file'}, {model.path}): "
        f"{gates} gate{'s' * (gates != 1)}, largest table error {error:.1e} of full scale, "
        f"confidence {model.spec.confidence}"
    )
    more = {
        "cell": cell.name,
        "model": model.name,
        "path": str(model.path),
        "shipped": shipped,
        "sha256": model.sha256,
        "table_error": error,
        "table_sha256": tables.sha256,
    }
    unsure = model.spec.confidence == "uncertain"
    remedy = f"read its caveats: {model.path}" if unsure else None
    verdict: Verdict = "weak" if unsure else "ok"
    return Finding(f"model of {cell.name}", verdict, shown, _TABLES_MATTER, remedy, more)


def files_section(checked: Checked) -> Section:
    """The rig file and the models."""
    return Section("files", "Files", checked.files)


def host_section(checked: Checked) -> Section:
    """The host, a real-time policy tried on a thread included."""
    from .. import hosttune

    asked = checked.rig.spec.host
    refused = None
    if hosttune.LINUX:
        policy = asked.policy if asked.real_time else "fifo"
        refused = hosttune.try_policy(policy, asked.priority)
    return Section("host", "Host", host_findings(Host(SYSTEM, asked, refused)))


def bound_section(checked: Checked) -> Section:
    """How much conductance the plain loop carries, for each cell of known capacitance."""
    loop = checked.rig.spec.loop
    found = [
        bound_finding(cell, model, loop.interval_us, loop.apply)
        for cell, model in zip(checked.rig.spec.cell, checked.models, strict=True)
        if model is not None and cell.capacitance_pf is not None
    ]
    return Section("bound", "Conductance that the plain loop carries", found)


SECTIONS: tuple[Callable[[Checked], Section], ...] = (files_section, host_section, bound_section)
"""The parts of the check, in order; each makes its findings from what was read."""


def plain_bound_ns(capacitance_pf: float, interval_us: float, delay_ticks: float) -> float:
    """Largest conductance in nS that a loop without anticipation holds on a capacitance.

    The current of a sample starts ``delay_ticks`` after it, in [0, 1], and is held for
    one tick. With a = g·dt/C the voltage from tick to tick follows
    z**2 - (1 - a·(1 - d))·z + a·d, stable (Jury's test) while a < 1/d and, for
    d < 1/2, a < 2/(1 - 2·d).
    """
    largest = math.inf if delay_ticks == 0 else 1.0 / delay_ticks
    if delay_ticks < 0.5:
        largest = min(largest, 2.0 / (1.0 - 2.0 * delay_ticks))
    return largest * capacitance_pf / (interval_us * 1e-3)


def bound_finding(cell: CellSpec, model: LoadedModel, interval_us: float, apply: str) -> Finding:
    """A model's largest possible conductance beside what the loop carries on its cell."""
    assert cell.capacitance_pf is not None
    delay = DELAY_TICKS[apply]
    bound_ns = plain_bound_ns(cell.capacitance_pf, interval_us, delay)
    largest_ns = sum(abs(c.gmax_ns) for c in model.spec.conductance)
    share = largest_ns / bound_ns
    verdict: Verdict = "ok" if share <= 0.5 else "weak" if share <= 1.0 else "missing"
    assumed = "" if apply == "next-tick" else ", taking on-arrival for half a tick of delay"
    shown = (
        f"{model.name} with every gate open {largest_ns:.4g} nS; the loop carries "
        f"{bound_ns:.4g} nS on {cell.capacitance_pf:g} pF at {interval_us:g} µs{assumed}"
    )
    more = {
        "cell": cell.name,
        "bound_ns": bound_ns,
        "largest_ns": largest_ns,
        "delay_ticks": delay,
    }
    remedy = None if verdict == "ok" else _smaller_share(interval_us, share)
    return Finding(f"cell {cell.name}", verdict, shown, _BOUND_MATTERS, remedy, more)


def _smaller_share(interval_us: float, share: float) -> str:
    """What brings a model's largest conductance to half the bound."""
    half_us = interval_us * 0.5 / share
    smaller = f"smaller gmax_ns in the model, {0.5 / share:.2g} times what they are"
    if half_us < SHORTEST_TICK_US:
        return smaller
    return f"loop.interval_us = {half_us:.3g}, and the rig's clock with it; or {smaller}"


def _as_json(rig: LoadedRig, sections: list[Section]) -> dict[str, Any]:
    plain = {
        section.key: [
            {
                "name": f.name,
                "verdict": f.verdict,
                "found": f.found,
                "why": f.why,
                "remedy": f.remedy,
                **f.more,
            }
            for f in section.findings
        ]
        for section in sections
    }
    return {"rig": str(rig.path), **plain}


def _print(rig: LoadedRig, sections: list[Section]) -> None:
    """A table for each section; remedies below, on lines of their own to copy from."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False, markup=False)
    for section in sections:
        table = Table(box=None, pad_edge=False, title=section.heading, title_justify="left")
        table.add_column("verdict", no_wrap=True)
        table.add_column("what", overflow="fold")
        table.add_column("found, and why it matters", overflow="fold")
        for f in section.findings:
            found = Text.assemble(f.found, "\n", (f.why, "dim"))
            table.add_row(Text(f.verdict, _LOOKS[f.verdict]), f.name, found)
        console.print(table)
        console.print()
    remedies = [f for section in sections for f in section.findings if f.remedy]
    if remedies:
        console.print("What would better it:")
    for f in remedies:
        console.print(f"  {f.name}: {f.remedy}", soft_wrap=True)
