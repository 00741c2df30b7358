"""The figures of ``gatestep report``: sweeps laid over each other, rates against current."""

from __future__ import annotations

import re
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import FileError, MissingExtraError
from .report_rates import in_order

if TYPE_CHECKING:
    from ..sweepmeasures import Floats, Measured, Stretch

COLOURS = ("#0a0a4d", "#c56246", "#3bc7bc", "#54262e", "#d0b30a", "#5258d3")
"""Of conditions: as far apart as they can be for eyes that lack one of the three cones, too."""
MARKERS = ("o", "s", "^", "D", "v", "P")
RAMP = ("#e3b04b", "#8fae6e", "#36898c", "#234a76", "#1a1a33")
"""Of rising currents, from light to dark."""
INK = "#16365c"
COLUMNS = 2000
"""Places along a figure; a longer trace is drawn by its extremes in each."""
_LISTED = 8
_ROWS = 20


@dataclass(frozen=True)
class Line:
    """One sweep as it is drawn: time in ms, voltage, all injected current, the stimulus."""

    current_pa: float | None
    fires: bool
    voltage: tuple[Floats, Floats]
    injected: tuple[Floats, Floats]
    stimulus: tuple[Floats, Floats]


@dataclass
class Drawing:
    """Gathers sweeps, thinned, and draws them: a figure for each condition, and the rates."""

    title: str
    lines: dict[tuple[str, str, int], list[Line]] = field(default_factory=dict)

    def add(self, made: Measured, stretch: Stretch) -> None:
        """Take in one sweep."""
        task = made.task
        columns = (stretch.v_mv, stretch.i_pa, stretch.stimulus_pa)
        line = Line(
            task.current_pa, bool(made.firing.spikes), *(thinned(stretch.t_ms, y) for y in columns)
        )
        self.lines.setdefault((task.name, task.condition, task.cell), []).append(line)

    def save(self, folder: Path, result: dict[str, Any]) -> list[Path]:
        """Draw everything into a folder; the files.

        Parameters
        ----------
        folder : Path
            Made when missing.
        result : dict
            The report's ``cells``, ``conditions`` and ``ladders``.

        Raises
        ------
        MissingExtraError
            Without matplotlib.
        FileError
            When a file cannot be written.
        """
        try:
            folder.mkdir(parents=True, exist_ok=True)
        except OSError as fault:
            raise FileError(f"--figure {folder}: {fault.strerror or fault}") from None
        cells = result["cells"]
        made = []
        order = in_order(condition for _, condition, _ in self.lines)
        ordered = sorted(self.lines.items(), key=lambda item: order.index(item[0][1]))
        for k, ((name, condition, cell), lines) in enumerate(ordered, 1):
            label = f"{name}, {condition}" + f", {cells[cell]}" * (len(cells) > 1)
            figure = draw_sweeps(lines, label, self.title)
            made.append(_save(figure, folder / f"sweeps-{k}-{slug(label)}.png"))
        return made + self._save_rates(folder, result)

    def _save_rates(self, folder: Path, result: dict[str, Any]) -> list[Path]:
        """Rates against current, and against each key that was stepped through."""
        several = len(result["cells"]) > 1
        named = [
            Series(c["condition"] + f", {c['cell']}" * several, c["current_pa"], *_rates(c))
            for c in result["conditions"]
            if c["current_pa"]
        ]
        made = []
        if any(len(one.values) > 1 for one in named):
            figure = draw_rates(named, "step current (pA)", "Rate against current", self.title)
            made.append(_save(figure, folder / "rates.png"))
        for key in dict.fromkeys(ladder["key"] for ladder in result["ladders"]):
            mine = [one for one in result["ladders"] if one["key"] == key]
            steps = [Series(one["at"], one["values"], *_rates(one)) for one in mine]
            figure = draw_rates(steps, _axis_of(key), f"Rate against {key}", self.title)
            made.append(_save(figure, folder / f"rates-{slug(key)}.png"))
        return made


@dataclass(frozen=True)
class Series:
    """One line of a figure of rates: values, the rates at each, and their means."""

    label: str
    values: list[float]
    rates_hz: list[list[float]]
    mean_hz: list[float]


def _rates(row: dict[str, Any]) -> tuple[list[list[float]], list[float]]:
    return row["rates_hz"], row["mean_hz"]


def _axis_of(key: str) -> str:
    """What stands at the axis of a key: the conductance's name, the quantity, the unit."""
    name, _, quantity = key.rpartition(".")
    if quantity == "gmax_ns":
        return f"gmax of {name} (nS)"
    if quantity == "reversal_mv":
        return f"reversal potential of {name} (mV)"
    return "factor on every gmax of the model"


def slug(text: str) -> str:
    """A label as part of a file's name."""
    return re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")[:60] or "condition"


def thinned(t_ms: Floats, y: Floats, columns: int = COLUMNS) -> tuple[Floats, Floats]:
    """The trace, or where it is long the lowest and highest sample of each of its columns."""
    if y.size <= 4 * columns:
        return t_ms, y
    width = -(-y.size // columns)
    whole = y.size // width * width
    folded = y[:whole].reshape(-1, width)
    starts = np.arange(0, whole, width)
    ends = np.stack([starts + folded.argmin(axis=1), starts + folded.argmax(axis=1)], axis=1)
    places = np.append(np.sort(ends, axis=1).ravel(), np.arange(whole, y.size))
    return t_ms[places], y[places]


def draw_sweeps(lines: list[Line], condition: str, title: str) -> Any:
    """Voltage above, injected current and stimulus below, all sweeps of a condition.

    Where several currents make the cell fire, the voltages of each have a row of their own.
    """
    currents = sorted({line.current_pa for line in lines if line.current_pa is not None})
    shade = dict(zip(currents, shades(len(currents)), strict=True))
    firing = {line.current_pa for line in lines if line.fires} - {None}
    apart = len(firing) > 2 and len(currents) <= _ROWS
    groups: list[Any] = list(reversed(currents)) if apart else [None]
    row = max(3.2 / len(groups), 0.75 if len(groups) < 9 else 0.6)
    figure = _figure(8.5, 3.4 + row * len(groups))
    heights = [*([row] * len(groups)), 1.7, 1.0]
    *tops, middle, bottom = figure.subplots(len(groups) + 2, 1, sharex=True, height_ratios=heights)
    factor = 1e-3 if _largest(lines) >= 2000.0 else 1.0
    # Larger steps first: their dense firing would hide the others.
    for line in sorted(lines, key=lambda line: -(line.current_pa or 0.0)):
        colour = INK if line.current_pa is None else shade[line.current_pa]
        look = {"color": colour, "linewidth": 0.8}
        tops[groups.index(line.current_pa) if apart else 0].plot(*line.voltage, **look)
        middle.plot(line.injected[0], factor * line.injected[1], **look)
        bottom.plot(*line.stimulus, **look)
    _label(figure, tops, middle, bottom, "nA" if factor < 1.0 else "pA")
    if apart:
        _name_rows(tops, groups, shade)
    else:
        _key(figure, (*tops, middle, bottom), shade)
    plural = "s" if len(lines) > 1 else ""
    tops[0].set_title(f"{condition}: {len(lines)} sweep{plural}", loc="left", fontsize=11)
    _sign(figure, title)
    return figure


def _label(figure: Any, tops: list[Any], middle: Any, bottom: Any, unit: str) -> None:
    tops[len(tops) // 2].set_ylabel("membrane potential (mV)")
    middle.set_ylabel(f"injected ({unit})")
    bottom.set_ylabel("stimulus (pA)")
    bottom.set_xlabel("time from the sweep's start (ms)")
    for axes in (*tops, middle, bottom):
        axes.margins(x=0.01)
    figure.align_ylabels()


def _name_rows(tops: list[Any], groups: list[float], shade: dict[float, str]) -> None:
    """One voltage scale for all rows, and each row's current beside it."""
    low = min(axes.get_ylim()[0] for axes in tops)
    high = max(axes.get_ylim()[1] for axes in tops)
    for axes, current in zip(tops, groups, strict=True):
        axes.set_ylim(low, high)
        axes.locator_params(axis="y", nbins=3)
        axes.annotate(
            f"{_signed(current)} pA", (1.01, 0.5), xycoords="axes fraction", va="center",
            color=shade[current], fontweight="bold",
        )  # fmt: skip


def _key(figure: Any, axes: Sequence[Any], shade: dict[float, str]) -> None:
    """What the shades mean: a legend beside the axes, or a scale where there are many."""
    from matplotlib.cm import ScalarMappable
    from matplotlib.colors import BoundaryNorm, ListedColormap
    from matplotlib.lines import Line2D

    if len(shade) < 2:
        return
    if len(shade) <= _LISTED:
        handles = [Line2D([], [], color=c, linewidth=2.2) for c in reversed(shade.values())]
        labels = [_signed(current) for current in reversed(shade)]
        figure.legend(handles, labels, title="step (pA)", loc="outside right upper", frameon=False)
        return
    values = np.array(list(shade))
    edges = np.concatenate(
        [[1.5 * values[0] - 0.5 * values[1]], 0.5 * (values[1:] + values[:-1]),
         [1.5 * values[-1] - 0.5 * values[-2]]]
    )  # fmt: skip
    scale = ScalarMappable(BoundaryNorm(edges, len(values)), ListedColormap(list(shade.values())))
    every = -(-len(values) // 10)
    bar = figure.colorbar(scale, ax=list(axes), pad=0.02, aspect=40, spacing="proportional")
    bar.set_label("step (pA)")
    bar.set_ticks(values[::every])
    bar.ax.minorticks_off()
    bar.outline.set_visible(False)


def draw_rates(series: list[Series], axis: str, heading: str, title: str) -> Any:
    """Rates against what was stepped through: each sweep a faint mark, the means joined."""
    figure = _figure(7.5, 5.0)
    axes = figure.subplots()
    for k, one in enumerate(series):
        colour, marker = COLOURS[k % len(COLOURS)], MARKERS[k % len(MARKERS)]
        style = ("-", "--", ":")[k // len(COLOURS) % 3]
        for value, rates in zip(one.values, one.rates_hz, strict=True):
            if len(rates) > 1:
                axes.plot([value] * len(rates), rates, marker, color=colour, alpha=0.35,
                          markersize=4, markeredgewidth=0)  # fmt: skip
        axes.plot(one.values, one.mean_hz, style, marker=marker, color=colour,
                  markersize=6, linewidth=1.6, label=one.label)  # fmt: skip
    axes.set_xlabel(axis)
    axes.set_ylabel("spikes during the step / its length (Hz)")
    low, high = axes.get_ylim()
    axes.set_ylim(min(0.0, low), max(high, 1.0))
    axes.grid(alpha=0.25, linewidth=0.6)
    key = figure.legend(
        loc="outside upper left", ncols=min(2, len(series)), frameon=False, alignment="left"
    )
    key.set_title(heading, {"size": 11})
    _sign(figure, title)
    return figure


def shades(count: int) -> list[str]:
    """So many colours along ``RAMP``."""
    if count == 0:
        return []
    ramp = np.array([[int(c[k : k + 2], 16) for k in (1, 3, 5)] for c in RAMP], dtype=float)
    places = np.linspace(0.0, len(RAMP) - 1.0, count) if count > 1 else np.array([2.0])
    mixed = [np.interp(places, np.arange(len(RAMP)), ramp[:, k]) for k in range(3)]
    return ["#{:02x}{:02x}{:02x}".format(*map(round, rgb)) for rgb in zip(*mixed, strict=True)]


def _signed(value: float) -> str:
    """A number with the minus sign that the axes have."""
    return f"{value:g}".replace("-", "\u2212")


def _largest(lines: list[Line]) -> float:
    return max((float(np.abs(i).max()) for line in lines for i in line.injected[1:] if i.size),
               default=0.0)  # fmt: skip


_LONGEST_TITLE = 110  # characters that fit below a figure


def _sign(figure: Any, title: str) -> None:
    short = title if len(title) <= _LONGEST_TITLE else f"… {title[-_LONGEST_TITLE:]}"
    figure.supxlabel(short, fontsize=8, color="#555555", x=0.99, ha="right")


def _figure(width: float, height: float) -> Any:
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing a report's figures") from None
    return Figure(figsize=(width, height), layout="constrained")


def _save(figure: Any, path: Path) -> Path:
    for axes in figure.axes:
        axes.spines[["top", "right"]].set_visible(False)
    part = path.with_name(f".{path.name}.part")
    try:
        figure.savefig(part, format="png", dpi=150)
        part.replace(path)
    except OSError as fault:
        with suppress(OSError):
            part.unlink(missing_ok=True)
        raise FileError(f"{path}: cannot be written ({fault.strerror or fault})") from None
    return path
