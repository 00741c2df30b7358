"""Body of ``gatestep firmware``: a model as a folder of C that compiles as it is."""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path
from typing import Any

from ..errors import FileError
from ..firmware import ROWS, DeviceTables, device_tables
from ..firmware_c import code_bytes, digest, header, instructions, ram_bytes, selftest, source
from ..firmware_errors import STEPS, USUAL_MV, RowsError, rows_error
from ..library import LoadedModel, load_model
from ..tables import build_tables

_MADE = "model.h"
_MARK = "Made by `gatestep firmware`"
_README = Path(__file__).with_name("firmware_readme.md")
_PARTS = ("include", "src", "model")


def write_firmware(model: str, out: Path, rows: int, interval_us: float, json_output: bool) -> int:
    """Write a model's C, what it needs, and what it misses; returns the exit status.

    Parameters
    ----------
    model : str
        A shipped model's name or a file.
    out : Path
        The folder: a new or empty one, or one that this command made.
    rows : int
        Rows of the table, one of :data:`gatestep.firmware.ROWS`.
    interval_us : float
        The device's tick, µs.
    json_output : bool
        Print JSON instead of text.

    Raises
    ------
    FileError
        If the model cannot be read or the folder cannot be written.
    FirmwareError, FormulaError, TableError
        If there is no such grid or tick, or the model cannot be tabulated.
    """
    loaded = load_model(model)
    tables = device_tables(loaded.spec, rows, interval_us)
    server = build_tables(loaded.spec)
    choices = [rows_error(loaded.spec, server, count, interval_us) for count in ROWS]
    files = {
        "model.h": header(tables, loaded.name),
        "model.c": source(tables),
        "selftest.c": selftest(tables),
        "README.md": readme(loaded, tables, choices),
        **library_files(),
    }
    _write(out, files)
    if json_output:
        print(json.dumps(_as_json(loaded, tables, choices, out, list(files)), ensure_ascii=False))
    else:
        print(_as_text(loaded, tables, choices, out))
    return 0


def device_folder() -> Path:
    """Folder of the device library and the model's step, in a wheel or a checkout."""
    package = Path(__file__).resolve().parents[1]
    installed = package / "firmware_bridge"
    return installed if installed.is_dir() else package.parents[1] / "firmware_bridge"


def library_files() -> dict[str, str]:
    """Text of every C file that a model needs beside its own, by its place in the folder.

    Raises
    ------
    FileError
        If they were not installed.
    """
    found = {}
    for part in _PARTS:
        for path in sorted((device_folder() / part).glob("*.[ch]")):
            place = path.name if part == "model" else f"library/{path.name}"
            found[place] = path.read_text("utf-8")
    if "gsm_step.h" not in found or "library/gsb_guard.c" not in found:
        raise FileError(f"{device_folder()}: the device library is not there; install anew")
    return found


def _write(out: Path, files: dict[str, str]) -> None:
    try:
        if out.exists() and not out.is_dir():
            raise FileError(f"{out}: not a folder; give a new one")
        if out.is_dir() and any(out.iterdir()) and not _ours(out / _MADE):
            raise FileError(f"{out}: holds other files; give a new folder")
        for name, text in files.items():
            path = out / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text, "utf-8")
    except OSError as error:
        raise FileError(f"{out}: cannot be written: {error.strerror or error}") from None


def _ours(path: Path) -> bool:
    return path.is_file() and _MARK in path.read_text("utf-8", errors="replace")


def _facts(tables: DeviceTables) -> dict[str, Any]:
    return {
        "rows": tables.rows,
        "interval_us": tables.interval_us,
        "table_bytes": tables.table_bytes,
        "code_bytes": code_bytes(tables),
        "ram_bytes": ram_bytes(tables),
        "instructions": instructions(tables),
        "sha256": digest(tables),
    }


def _as_json(
    loaded: LoadedModel,
    tables: DeviceTables,
    choices: list[RowsError],
    out: Path,
    files: list[str],
) -> dict[str, Any]:
    return {
        "model": loaded.name,
        "out": str(out),
        **_facts(tables),
        "parameters": list(parameters(tables)),
        "choices": [asdict(choice) for choice in choices],
        "files": sorted(files),
    }


def parameters(tables: DeviceTables) -> Iterator[str]:
    """Names of what may change without a rebuild, in the order of their indices."""
    for conductance in tables.spec.conductance:
        yield f"{conductance.name}.gmax_ns"
        yield f"{conductance.name}.reversal_mv"
    yield "trace.every_ticks"


def _as_text(loaded: LoadedModel, tables: DeviceTables, choices: list[RowsError], out: Path) -> str:
    code = code_bytes(tables)
    lines = [
        f"{loaded.name}: {loaded.spec.title}",
        f"tick           {tables.interval_us:g} µs, built in",
        f"flash          {tables.table_bytes:,} bytes of tables, about {code:,} of code",
        f"RAM            {ram_bytes(tables)} bytes of gates and parameters",
        f"step           about {instructions(tables)} instructions on a Cortex-M4F, estimated",
        "",
        *_rows(choices, tables.rows),
        "",
        f"written to {out}; its README.md goes on",
    ]
    return "\n".join(lines)


def _rows(choices: list[RowsError], chosen: int) -> Iterator[str]:
    yield "  rows   step mV    flash B  steady state       gain    current"
    for c in choices:
        mark = "  <" if c.rows == chosen else ""
        yield (
            f"{c.rows:6} {c.step_mv:9g} {c.table_bytes:10,} {c.inf_error:13.1e} "
            f"{c.gain_error:10.1e} {c.current_error:10.1e}{mark}"
        )
    jumps = next(c.jumps for c in choices if c.rows == chosen)
    if jumps:
        yield f"{jumps} cells hold a switch of a piecewise formula; gates' errors leave them out"


def readme(loaded: LoadedModel, tables: DeviceTables, choices: list[RowsError]) -> str:
    """``README.md`` of the folder."""
    low, high = USUAL_MV
    names = "\n".join(f"| {k} | `{name}` |" for k, name in enumerate(parameters(tables)))
    return _README.read_text("utf-8").format(
        name=loaded.name,
        title=loaded.spec.title,
        source=loaded.spec.source,
        interval=f"{tables.interval_us:g}",
        table="\n".join("    " + line for line in _rows(choices, tables.rows)),
        low=f"{low:g}",
        high=f"{high:g}",
        steps=f"{STEPS:,}",
        table_bytes=f"{tables.table_bytes:,}",
        code_bytes=code_bytes(tables),
        ram_bytes=ram_bytes(tables),
        instructions=instructions(tables),
        names=names,
        made=_MARK,
    )
