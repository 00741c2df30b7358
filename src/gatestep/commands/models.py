"""Bodies of ``gatestep models`` and ``gatestep curves``."""

from __future__ import annotations

import json
import os
import textwrap
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, GatestepError, MissingExtraError

if TYPE_CHECKING:
    from ..kinetics import GateCurves
    from ..library import LoadedModel

GRID_MV = (-200.0, 200.0)
USUAL_AT_MV = tuple(float(v) for v in range(-100, 41, 10))
DRAWN_MV = (-120.0, 60.0)
_COLOURS = ("#1b6ca8", "#c8553d", "#3c8d5a", "#7a5195", "#b8860b", "#4d4d4d")
_STYLES = ("-", "--", ":", "-.")


def list_models(json_output: bool) -> int:
    """List the models that come with gatestep."""
    from ..library import shipped_models

    models = shipped_models()
    if json_output:
        print(json.dumps({"models": [_described(m) for m in models]}, ensure_ascii=False))
        return 0
    from rich import box
    from rich.console import Console
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, leading=1)
    table.add_column("name", no_wrap=True)
    table.add_column("title and source", overflow="fold")
    table.add_column("°C", justify="right", no_wrap=True)
    table.add_column("confidence", no_wrap=True)
    for m in models:
        s = m.spec
        table.add_row(m.name, f"{s.title}\n{s.source}", f"{s.temperature_c:g}", s.confidence)
    Console(highlight=False, markup=False).print(table)
    return 0


def _described(model: LoadedModel) -> dict[str, Any]:
    spec = model.spec
    return {
        "name": model.name,
        "title": spec.title,
        "source": spec.source,
        "version": spec.version,
        "temperature_c": spec.temperature_c,
        "confidence": spec.confidence,
        "caveats": list(spec.caveats),
        "conductances": [
            {
                "name": c.name,
                "gmax_ns": c.gmax_ns,
                "reversal_mv": c.reversal_at(spec.temperature_c),
                "gates": [g.name for g in c.gate],
            }
            for c in spec.conductance
        ],
        "path": str(model.path),
    }


def show_curves(model: str, at: str | None, figure: Path | None, json_output: bool) -> int:
    """Print a model's steady states and time constants, or draw them to a file.

    Parameters
    ----------
    model : str
        A shipped model's name or a file.
    at : str or None
        Voltages in mV, separated by commas; default -100 to 40 in steps of 10.
    figure : Path or None
        A PNG or SVG file to draw to, instead of a table unless ``at`` is given too.
    json_output : bool
        Print JSON instead of a table.

    Raises
    ------
    GatestepError
        If the voltages, the model or the figure's file cannot be used.
    """
    from ..kinetics import curves_of
    from ..library import load_model

    voltages = USUAL_AT_MV if at is None else parse_voltages(at)
    loaded = load_model(model)
    curves = curves_of(loaded.spec, voltages)
    if figure is not None:
        span = DRAWN_MV if at is None or len(set(voltages)) < 2 else (min(voltages), max(voltages))
        draw(loaded, figure, span)
    if json_output:
        print(json.dumps(_as_json(loaded, curves, figure), ensure_ascii=False))
    elif figure is None or at is not None:
        _print_curves(loaded, curves)
    if figure is not None and not json_output:
        print(f"drawn to {figure}")
    return 0


def parse_voltages(at: str) -> tuple[float, ...]:
    """Voltages in mV from text such as ``-65,-40``.

    Raises
    ------
    GatestepError
        If a piece is not a number, or off the grid that the tables cover.
    """
    voltages = []
    for piece in at.split(","):
        try:
            v_mv = float(piece)
        except ValueError:
            raise GatestepError(
                f"--at: {piece.strip()!r} is not a voltage; write numbers in mV with commas "
                "between them, such as --at -65,-40"
            ) from None
        if not GRID_MV[0] <= v_mv <= GRID_MV[1]:
            raise GatestepError(
                f"--at: {v_mv:g} mV is outside {GRID_MV[0]:g} to {GRID_MV[1]:g} mV, "
                "the range of the tables"
            )
        voltages.append(v_mv)
    return tuple(voltages)


def _as_json(loaded: LoadedModel, curves: list[GateCurves], figure: Path | None) -> dict[str, Any]:
    spec = loaded.spec
    return {
        "model": loaded.name,
        "title": spec.title,
        "source": spec.source,
        "temperature_c": spec.temperature_c,
        **({"figure": str(figure)} if figure else {}),
        "gates": [
            {
                "name": c.name,
                "instances": c.instances,
                "v_mv": c.v_mv.tolist(),
                "inf": c.inf.tolist(),
                "tau_ms": c.tau_ms.tolist(),
            }
            for c in curves
        ],
    }


def _print_curves(loaded: LoadedModel, curves: list[GateCurves]) -> None:
    from rich.console import Console
    from rich.table import Table

    spec = loaded.spec
    console = Console(highlight=False, markup=False)
    console.print(f"{loaded.name}: {spec.title}")
    console.print(f"{spec.source}; {spec.temperature_c:g} °C; {spec.confidence}")
    for caveat in spec.caveats:
        console.print(f"- {caveat}")
    if not curves:
        console.print("no gates: a leak")
    for gate in curves:
        table = Table("V (mV)", "steady state", "time constant (ms)", box=None, pad_edge=False)
        for column in table.columns:
            column.justify = "right"
        for v_mv, inf, tau in zip(gate.v_mv, gate.inf, gate.tau_ms, strict=True):
            table.add_row(f"{v_mv:g}", f"{inf:.6g}", f"{tau:.5g}" if tau else "instantaneous")
        plural = "s" if gate.instances > 1 else ""
        console.print(f"\n{gate.name}, {gate.instances} instance{plural}")
        console.print(table)


def draw(loaded: LoadedModel, path: Path, span_mv: tuple[float, float]) -> None:
    """Draw a model's steady states and time constants to a PNG or SVG file.

    Raises
    ------
    MissingExtraError
        Without matplotlib.
    GatestepError
        If the file's suffix is another, the model has no gates, or the file cannot
        be written.
    """
    suffix = path.suffix.lower()
    if suffix not in (".png", ".svg"):
        raise GatestepError(f"--figure: {path} ends in neither .png nor .svg")
    if not any(c.gate for c in loaded.spec.conductance):
        raise GatestepError(f"{loaded.name} has no gates, so there is nothing to draw")
    figure = _figure(loaded, span_mv)
    part = path.with_name(f".{path.name}.part")
    try:
        figure.savefig(part, format=suffix[1:], dpi=150)
        os.replace(part, path)
    except OSError as error:
        raise FileError(f"{path}: cannot be written: {error.strerror or error}") from None
    finally:
        with suppress(OSError):
            part.unlink(missing_ok=True)


def _figure(loaded: LoadedModel, span_mv: tuple[float, float]) -> Any:
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing curves") from None
    import numpy as np

    from ..kinetics import curves_of

    curves = curves_of(loaded.spec, np.linspace(*span_mv, 721))
    figure = Figure(figsize=(10, 5.4), layout="constrained")
    left, right = figure.subplots(1, 2)
    for k, gate in enumerate(curves):
        look = {"color": _COLOURS[k % 6], "linestyle": _STYLES[k // 6 % 4], "linewidth": 1.8}
        moving = gate.tau_ms.any()
        notes = [f"{gate.instances} instances"] * (gate.instances > 1)
        notes += ["instantaneous"] * (not moving)
        label = gate.name + (f" ({', '.join(notes)})" if notes else "")
        left.plot(gate.v_mv, gate.inf, label=label, **look)
        if moving:
            right.plot(gate.v_mv, gate.tau_ms, **look)
    _dress(left, right, curves, span_mv)
    spec = loaded.spec
    title = textwrap.fill(spec.title, 100)
    source = textwrap.fill(f"{spec.source}; {spec.temperature_c:g} °C", 110)
    figure.suptitle(f"{title}\n{source}", fontsize=10.5)
    figure.legend(loc="outside lower center", ncols=min(len(curves), 3), frameon=False)
    return figure


def _dress(left: Any, right: Any, curves: list[GateCurves], span_mv: tuple[float, float]) -> None:
    left.set_ylabel("steady state")
    left.set_ylim(-0.02, 1.02)
    right.set_ylabel("time constant (ms)")
    if any(gate.tau_ms.any() for gate in curves):
        right.set_yscale("log")
        right.yaxis.set_major_formatter(lambda value, _place: f"{value:g}")
    else:
        right.set_yticks([])
        right.text(0.5, 0.5, "all gates are instantaneous", ha="center", transform=right.transAxes)
    for axes in (left, right):
        axes.set_xlabel("membrane potential (mV)")
        axes.set_xlim(*span_mv)
        axes.grid(alpha=0.3, linewidth=0.6)
        axes.spines[["top", "right"]].set_visible(False)
