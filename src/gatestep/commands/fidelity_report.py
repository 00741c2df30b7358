"""Results of ``gatestep bench fidelity`` for people: a text with tables, and a figure."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import FileError
from ..fidelity import ANTICIPATING, MAP, MISCOUNTS, MODES, PLAIN, RINGS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

SWEEPS = {
    "jitter_ticks": "jitter, ± ticks",
    "drop": "answers lost, %",
    "noise_mv": "noise, mV rms",
    "capacitance_error": "capacitance taken for, %",
    "residue_mohm": "series resistance left, MΩ",
}
"""What is swept, and what its axis says."""
_PERCENT = ("drop", "capacitance_error")
_COLOURS = {PLAIN: "#b4552d", ANTICIPATING: "#1f5f7a"}
_MARKERS = {PLAIN: "s", ANTICIPATING: "o"}
_KEY = "maps: dark is true\nhatched: the loop rings\ngrey: spikes fired/expected"
_BAND_INCH = 4.8
_COLUMN = 10

Point = dict[str, Any]


def text(result: dict[str, Any]) -> str:
    """A result as lines to read."""
    h = result["host"]
    parts = [
        f"gatestep {h['gatestep']}, numba {h['numba']}; {h['cpu']}, load {h['load']}; {h['date']}\n"
        f"measured in {result['seconds']:.1f} s; answers flow on arrival"
    ]
    for scenario in result["scenarios"]:
        title = f"{scenario['name']}: {scenario['title']}"
        what = f"{scenario['error']}, {scenario['unit']}, from a continuous solution"
        parts.append(f"{title}\n{'-' * len(title)}\n{what}")
        parts += [_map_text(scenario, mode) for mode in MODES]
        parts += [_sweep_text(scenario, name) for name in SWEEPS]
    if "figure" in result:
        parts.append(f"drawn to {result['figure']}")
    return "\n\n".join(parts)


def _said(point: Point) -> str:
    """A point's error, or what became of it."""
    if point["outcome"] == RINGS:
        return RINGS
    if point["outcome"] == MISCOUNTS:
        return f"{point['spikes'][0]}/{point['expected']} sp"
    return _number(point["error"])


def _number(error: float | None) -> str:
    if error is None:
        return "-"
    if error < 0.05:
        return "<0.1"
    return f"{error:.0f}" if error >= 10 else f"{error:.1f}"


def _map_of(scenario: dict[str, Any], mode: str) -> dict[tuple[float, float], Point]:
    """Points of a map by tick and delay."""
    chosen = [p for p in scenario["points"] if p["part"] == MAP and p["mode"] == mode]
    return {(p["tick_us"], p["delay_ticks"]): p for p in chosen}


def _sweep_of(scenario: dict[str, Any], name: str, mode: str) -> list[Point]:
    return [p for p in scenario["points"] if p["part"] == name and p["mode"] == mode]


def _axes_of(found: dict[tuple[float, float], Point]) -> tuple[list[float], list[float]]:
    """Ticks and delays of a map."""
    return sorted({tick for tick, _ in found}), sorted({delay for _, delay in found})


def _map_text(scenario: dict[str, Any], mode: str) -> str:
    found = _map_of(scenario, mode)
    ticks, delays = _axes_of(found)
    head = f"{mode + '; delay, ticks':<24}" + "".join(f"{d:>{_COLUMN}g}" for d in delays)
    rows = [
        f"{'tick, µs' if tick == ticks[0] else '':<16}{tick:<8g}"
        + "".join(f"{_said(found[tick, d]):>{_COLUMN}}" for d in delays)
        for tick in ticks
    ]
    return "\n".join([head, *rows])


def _sweep_text(scenario: dict[str, Any], name: str) -> str:
    series = {mode: _sweep_of(scenario, name, mode) for mode in MODES}
    base = series[PLAIN][0]
    head = f"{SWEEPS[name]} (tick {base['tick_us']:g} µs, delay {base['delay_ticks']:g} ticks)"
    scale = 100.0 if name in _PERCENT else 1.0
    values = "".join(f"{scale * p[name]:>{_COLUMN}g}" for p in series[PLAIN])
    lines = [
        f"{mode:<16}" + "".join(f"{_said(p):>{_COLUMN}}" for p in series[mode]) for mode in MODES
    ]
    return "\n".join([head, " " * 16 + values, *lines])


def draw(result: dict[str, Any], path: Path) -> None:
    """Draw a band for each scenario: two maps on one colour scale, and the sweeps.

    Raises
    ------
    FileError
        When the file cannot be written.
    """
    from matplotlib.figure import Figure

    scenarios = result["scenarios"]
    height = _BAND_INCH * len(scenarios)
    figure = Figure(figsize=(16, height))
    grid = figure.add_gridspec(
        len(scenarios), 2, width_ratios=(1.1, 1.0), wspace=0.2, hspace=0.42,
        left=0.04, right=0.99, top=1.0 - 0.75 / height, bottom=0.65 / height,
    )  # fmt: skip
    for row, scenario in enumerate(scenarios):
        _draw_band(figure, grid[row, 0], grid[row, 1], scenario)
    try:
        figure.savefig(path, format=path.suffix.lower()[1:], dpi=110)
    except OSError as error:
        raise FileError(f"--figure {path}: cannot be written ({error.strerror or error})") from None


def _draw_band(figure: Figure, left: Any, right: Any, scenario: dict[str, Any]) -> None:
    from matplotlib.colors import LogNorm

    frame = left.get_position(figure)
    title = f"{scenario['name']}: {scenario['title']}"
    above = frame.y1 + 0.42 / figure.get_figheight()
    figure.text(frame.x0, above, title, fontsize=12, fontweight="bold")
    errors = [p["error"] for p in scenario["points"] if p["part"] == MAP and p["error"]]
    norm = LogNorm(max(min(errors, default=1.0), 0.05), max(max(errors, default=10.0), 1.0))
    inside = left.subgridspec(1, 3, width_ratios=(1, 1, 0.05), wspace=0.07)
    for column, mode in enumerate(MODES):
        place = figure.add_subplot(inside[column])
        image = _draw_map(place, _map_of(scenario, mode), norm)
        place.set_title(mode, fontsize=10.5, color=_COLOURS[mode])
        if column == 0:
            place.set_ylabel("tick, µs")
        else:
            place.set_yticklabels([])
    bar = figure.colorbar(image, cax=figure.add_subplot(inside[2]))
    bar.set_label(f"{scenario['error']}, {scenario['unit']}", fontsize=8.5)
    inside = right.subgridspec(2, 3, hspace=0.62, wspace=0.16)
    places = [figure.add_subplot(inside[k]) for k in range(6)]
    for place, name in zip(places, SWEEPS, strict=False):
        if place is not places[0]:
            place.sharey(places[0])
        _draw_sweep(place, scenario, name)
    for k, place in enumerate(places):
        place.tick_params(labelleft=k % 3 == 0)
    for place in places[::3]:
        place.set_ylabel(scenario["unit"], fontsize=9)
    _draw_legend(places[5], scenario)


def _draw_map(axes: Axes, found: dict[tuple[float, float], Point], norm: Any) -> Any:
    ticks, delays = _axes_of(found)
    errors = np.array(
        [[found[t, d]["error"] or np.nan for d in delays] for t in ticks], dtype=np.float64
    )
    image = axes.imshow(
        np.clip(errors, norm.vmin, None), norm=norm, cmap="cividis", aspect="auto", origin="lower"
    )
    for row, tick in enumerate(ticks):
        for column, delay in enumerate(delays):
            _draw_cell(axes, column, row, found[tick, delay], norm)
    axes.set_xticks(range(len(delays)), [f"{d:g}" for d in delays])
    axes.set_yticks(range(len(ticks)), [f"{t:g}" for t in ticks])
    axes.set_xlabel("delay, ticks")
    axes.tick_params(length=0)
    axes.spines[:].set_visible(False)
    return image


def _draw_cell(axes: Axes, column: int, row: int, point: Point, norm: Any) -> None:
    """A map's number; a cell without one is hatched where it rings and grey where it miscounts."""
    from matplotlib.patches import Rectangle

    colour = "black"
    if point["error"] is None:
        rings = point["outcome"] == RINGS
        look: dict[str, Any] = {"facecolor": "#f4ded6" if rings else "#dddddd", "linewidth": 0}
        if rings:
            look |= {"hatch": "////", "edgecolor": "#c0604a"}
        axes.add_patch(Rectangle((column - 0.5, row - 0.5), 1, 1, **look))
    elif norm(max(point["error"], norm.vmin)) < 0.55:
        colour = "white"
    said = _said(point).removesuffix(" sp")
    boxed: dict[str, Any] = {}
    if point["outcome"] == RINGS:
        boxed["bbox"] = {"facecolor": "white", "edgecolor": "none", "pad": 1.0}
    axes.text(column, row, said, ha="center", va="center", fontsize=8.5, color=colour, **boxed)


def _draw_sweep(axes: Axes, scenario: dict[str, Any], name: str) -> None:
    """Both modes' errors over a quantity; a ringing or miscounting point stands at the top."""
    scale = 100.0 if name in _PERCENT else 1.0
    for mode in MODES:
        series = _sweep_of(scenario, name, mode)
        x = np.arange(len(series))
        y = np.array([p["error"] or np.nan for p in series], dtype=np.float64)
        axes.plot(x, y, color=_COLOURS[mode], marker=_MARKERS[mode], markersize=3.5, linewidth=1.4)
        lost = np.flatnonzero(np.isnan(y))
        top = 0.95 if mode == PLAIN else 0.87
        axes.plot(
            x[lost], np.full(lost.size, top), "x", color=_COLOURS[mode], markersize=6,
            transform=axes.get_xaxis_transform(), clip_on=False,
        )  # fmt: skip
    labels = [f"{scale * p[name]:g}" for p in _sweep_of(scenario, name, PLAIN)]
    axes.set_xticks(range(len(labels)), labels, fontsize=7, rotation=45)
    axes.set_yscale("log")
    axes.set_xlabel(SWEEPS[name], fontsize=8.5)
    axes.tick_params(axis="y", labelsize=7.5)
    axes.spines[["top", "right"]].set_visible(False)
    axes.grid(axis="y", alpha=0.25)


def _draw_legend(axes: Axes, scenario: dict[str, Any]) -> None:
    base = _sweep_of(scenario, "drop", PLAIN)[0]
    for mode in MODES:
        axes.plot([], [], color=_COLOURS[mode], marker=_MARKERS[mode], label=mode)
    axes.plot([], [], "x", color="black", linestyle="none", label="rings or miscounts")
    where = f"sweeps at {base['tick_us']:g} µs, {base['delay_ticks']:g} ticks"
    axes.legend(loc="upper left", frameon=False, fontsize=9, title=where, title_fontsize=9)
    axes.text(0.02, 0.0, _KEY, transform=axes.transAxes, fontsize=8, va="bottom")
    axes.set_axis_off()
