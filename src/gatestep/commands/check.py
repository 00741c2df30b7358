"""``gatestep check RIG.toml``: files, host and stability, before anything is armed."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, replace
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

_TABLES_MATTER = "The loop follows a model's tables, not its formulas."
_LOOKS = {"ok": "green", "weak": "yellow", "missing": "bold red"}


@dataclass(frozen=True)
class Checked:
    """A rig file, and the model of each cell, with its tables, where it could be used."""

    rig: LoadedRig
    models: list[LoadedModel | None]
    tables: list[Tables | None]
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
        When the rig file itself cannot be used, or asks for what cannot be.
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
    models, tables = [], []
    for cell in rig.spec.cell:
        model, table, finding = _read_model(cell, rig)
        models.append(model)
        tables.append(table)
        findings.append(finding)
    return Checked(rig, models, tables, findings)


def _read_model(
    cell: CellSpec, rig: LoadedRig
) -> tuple[LoadedModel | None, Tables | None, Finding]:
    """A cell's model, its tables, and what there is to say of them."""
    from ..library import load_model
    from ..tables import build_tables

    try:
        model = load_model(cell.model, relative_to=rig.folder)
        tables = build_tables(model.spec)
    except GatestepError as fault:
        remedy = f"mend it, or choose another (gatestep models): [[cell]] {cell.name}, model"
        name = f"model of {cell.name}"
        return None, None, Finding(name, "missing", str(fault), _TABLES_MATTER, remedy)
    return model, tables, _describe(cell, model, tables)


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


def record_section(checked: Checked) -> Section:
    """The journal that a server will keep."""
    from .check_record import record_finding

    return Section("record", "Record", [record_finding(checked.rig)])


def host_section(checked: Checked) -> Section:
    """The host, a real-time policy tried on a thread included."""
    from .. import hosttune

    asked = checked.rig.spec.host
    refused = None
    if hosttune.LINUX:
        policy = asked.policy if asked.real_time else "fifo"
        refused = hosttune.try_policy(policy, asked.priority)
    return Section("host", "Host", host_findings(Host(SYSTEM, asked, refused)))


def stability_section(checked: Checked) -> Section:
    """How much conductance each cell's loop carries, and what becomes of spikes."""
    found = [
        _stability(checked.rig, index, tables)
        for index, tables in enumerate(checked.tables)
        if tables is not None
    ]
    return Section("stability", "Stability and fidelity of the loop", found)


def _stability(rig: LoadedRig, index: int, tables: Tables) -> Finding:
    """One cell's limits and margins, with what is foretold where that can be."""
    from ..choosing import choose
    from .check_fidelity import foretell
    from .check_margin import margin_finding

    cell = rig.spec.cell[index]
    choice = choose(cell, tables, rig.spec.loop)
    finding = margin_finding(cell, tables, rig.spec.loop, choice)
    if cell.capacitance_pf is None:
        return finding
    try:
        foretold = foretell(rig, index, tables, choice)
    except GatestepError as fault:
        return replace(finding, found=f"{finding.found}\nspikes cannot be foretold: {fault}")
    if foretold is None:
        return finding
    more = {**finding.more, "foretold": foretold.data()}
    return replace(finding, found=f"{finding.found}\n{foretold}", more=more)


SECTIONS: tuple[Callable[[Checked], Section], ...] = (
    files_section,
    record_section,
    host_section,
    stability_section,
)
"""The parts of the check, in order; each makes its findings from what was read."""


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
