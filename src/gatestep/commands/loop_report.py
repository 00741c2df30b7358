"""Results of ``gatestep bench loop`` for people: a text with tables, and a figure."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import FileError, MissingExtraError
from ..timing import FEWEST_ROUNDS, NAMES, QUANTITIES

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from matplotlib.axes import Axes

RULE = (
    "A difference counts where the medians of the rounds lie further apart than the two "
    f"half-ranges of the rounds together (at least {FEWEST_ROUNDS} rounds on both sides)."
)
KINDS = {"tick": "at the tick rate", "flat": "flat out"}
WORDS = {"round_trip_us": "round trip", "jitter_us": "jitter", "service_us": "service time"}
COLOURS = {"quiet": "#1b3a4b", "loaded": "#9a3324"}
_MARGIN_OF_SKIPS = 0.01
_MARGIN_OF_LOAD = 0.5
_BAR = 30
_LABEL = 26


def text(result: dict[str, Any]) -> str:
    """A result as lines to read."""
    parts = [_head(result)]
    for kind, words in KINDS.items():
        parts.append(_percentile_table(result, kind, words))
    parts += [_counts(result), _histogram(result), _cells(result), _notes(result)]
    if "comparison" in result:
        parts.append(_comparison(result["comparison"]))
    return "\n\n".join(part for part in parts if part)


def _head(result: dict[str, Any]) -> str:
    rig, server, host = result["rig"], result["server"], result["host"]
    client, plan = result["client"], result["plan"]
    flows = "at the next tick" if rig["apply"] == "next-tick" else "on arrival"
    whose = "private server" if server["private"] else "running server"
    seconds = plan["seconds"] / plan["rounds"]
    wait = "sleeps" if client["sleeps"] else "asks the socket without pause"
    return "\n".join(
        [
            f"{rig['file']}: tick {rig['interval_us']:g} µs, budget {rig['budget_us']:g} µs, "
            f"answers flow {flows}",
            f"{whose}, {server['state']}, no cell; {server['lane']} lane over "
            f"{server['transport']}; voltage {client['voltage']}",
            f"{plan['rounds']} round(s) of {seconds:g} s each way"
            + (f", quiet and with {plan['burners']} burner(s)" if plan["burners"] else "")
            + f"; the client {wait} until an answer comes"
            + (", at real-time priority" if client["realtime"] else ""),
            f"{host['cpu']}, {host['usable_cores']} of {host['cores']} cores, {host['kernel']}, "
            f"Python {host['python']}, numba {host['numba']}, libzmq {host['libzmq']}, "
            f"gatestep {host['gatestep']}",
        ]
    )


def _series(result: dict[str, Any], kind: str) -> Iterator[tuple[str, dict[str, Any]]]:
    for condition, kinds in result["conditions"].items():
        if kind in kinds:
            yield condition, kinds[kind]


def _number(value: float | None) -> str:
    if value is None:
        return "-"
    digits = max(0, 2 - int(np.floor(np.log10(max(abs(value), 0.1)))))
    return f"{value:.{min(digits, 2)}f}"


def _row(label: str, values: list[str]) -> str:
    return f"{label:<{_LABEL}}" + "".join(f"{v:>10}" for v in values)


def _percentile_table(result: dict[str, Any], kind: str, words: str) -> str:
    lines = []
    for quantity in QUANTITIES:
        label = WORDS[quantity]
        for condition, series in _series(result, kind):
            values = [_number(series[quantity][name]) for name in NAMES]
            lines.append(_row(f"{label:<14}{condition}", values))
            label = ""
    return "\n".join([_row(f"{words}, µs", list(NAMES)), *lines]) if lines else ""


def _counts(result: dict[str, Any]) -> str:
    paced = dict(_series(result, "tick"))
    if not paced:
        return ""

    def share(value: float | None) -> str:
        return "-" if value is None else f"{100 * value:.3f} %"

    rows: dict[str, Callable[[dict[str, Any]], str]] = {
        "samples": lambda s: str(s["samples"]),
        "inside the budget": lambda s: share(s["inside_budget"]),
        "longest run of late ones": lambda s: str(s["longest_late_run"]),
        "never answered": lambda s: str(s["missed"]),
        "old current held on": lambda s: share(s["held"]),
        "not sampled by the client": lambda s: str(s["skipped"]),
        "client late, p99, µs": lambda s: _number(s["send_late_us"]["p99"]),
    }
    lines = [_row("answers, at the tick rate", list(paced))]
    lines += [_row(label, [make(s) for s in paced.values()]) for label, make in rows.items()]
    flat = dict(_series(result, "flat"))
    if flat:
        rates = ["-" if s["a_second"] is None else f"{s['a_second']:.0f}" for s in flat.values()]
        lines.append(_row("a second, flat out", rates))
    return "\n".join(lines)


def _coarse(series: dict[str, Any]) -> dict[int, int]:
    """Counts by thirds of a decade: from 1, 2 and 5 (to 0.3 %) times a power of ten."""
    counts: dict[int, int] = {}
    kept = series["histogram"]
    for place, count in zip(kept["bins"], kept["counts"], strict=True):
        decade, inside = divmod(place, 100)
        third = 3 * decade + (0 if inside < 30 else 1 if inside < 70 else 2)
        counts[third] = counts.get(third, 0) + count
    return counts


def _histogram(result: dict[str, Any]) -> str:
    found = {c: _coarse(s) for c, s in _series(result, "tick") if s["answered"]}
    if not found:
        return ""
    places = [p for counts in found.values() for p in counts]
    head = f"{'round trip from, µs':<{_LABEL}}"
    lines = [head + "".join(f"{c:>10} {'':<{_BAR}}" for c in found)]
    for place in range(min(places), max(places) + 1):
        start = 10.0 ** (place // 3) * (1, 2, 5)[place % 3]
        line = f"{start:<{_LABEL}g}"
        for counts in found.values():
            count, most = counts.get(place, 0), max(counts.values())
            bar = "#" * max(int(count > 0), round(_BAR * count / most))
            line += f"{count:>10} {bar:<{_BAR}}"
        lines.append(line.rstrip())
    return "\n".join(lines)


def _cells(result: dict[str, Any]) -> str:
    lines = []
    for condition, carried in result["carries"].items():
        delay = carried["delay_ticks"]
        if delay is None:
            lines.append(f"{condition}: answers are lacking, so no delay can be stated")
            continue
        for cell in carried["cells"]:
            largest = cell["largest_ns"]
            limit = (
                "its capacitance_pf is not in the rig file"
                if largest is None
                else f"{cell['capacitance_pf']:g} pF: below {_number(largest)} nS"
            )
            lines.append(f"{condition}: delay {delay:.4g} tick(s); cell {cell['name']}, {limit}")
    if not lines:
        return ""
    title = (
        "Largest conductance that a plain loop carries on a pure capacitance at this tick and "
        "the p99.9 of this delay"
    )
    return "\n".join([title, *lines])


def _notes(result: dict[str, Any]) -> str:
    notes = []
    for condition, series in _series(result, "tick"):
        ticks = series["samples"] + series["skipped"]
        if series["skipped"] > _MARGIN_OF_SKIPS * ticks:
            notes.append(
                f"{condition}: the client itself had no processor for {series['skipped']} of "
                f"{ticks} ticks, which a rig outside this machine would have sampled; "
                "--realtime keeps it sampling"
            )
        if result["server"]["private"] and series["live"] < series["answered"]:
            lost = series["answered"] - series["live"]
            notes.append(f"{condition}: {lost} answers were not live; the loop tripped")
    if result["load_average"] > _MARGIN_OF_LOAD * result["host"]["usable_cores"]:
        notes.append(
            f"the machine had other work (load {result['load_average']:.1f} in the minute "
            "before); quiet is quiet only without it"
        )
    if result["server"]["anticipate"]:
        notes.append("the server anticipates; what a plain loop carries is not its limit")
    if not result["complete"]:
        notes.append(f"cut short: {result['fault']}")
    return "\n".join(f"note: {note}" for note in notes)


def _comparison(compared: dict[str, Any]) -> str:
    lines = [f"Compared with {compared['file']} of {compared['date']}", RULE]
    for name, (old, new) in compared["unlike"].items():
        lines.append(f"unlike: {name} was {old}, is {new}")
    groups: dict[tuple[str, str, str], list[dict[str, Any]]] = {}
    for row in compared["rows"]:
        groups.setdefault((row["kind"], row["condition"], row["quantity"]), []).append(row)
    for (kind, condition, quantity), rows in groups.items():
        title = f"{WORDS[quantity]}, {condition}, {KINDS[kind]}, µs"
        lines += ["", title, _row("", [r["percentile"] for r in rows])]
        for label, key in (("before", "before"), ("now", "now"), ("spread ±", "spread")):
            lines.append(_row(f"  {label}", [_number(r[key]) for r in rows]))
        lines.append(_row("  differs", [_verdict(r) for r in rows]))
    return "\n".join(lines)


def _verdict(row: dict[str, Any]) -> str:
    if row["spread"] is None:
        return "?"
    if not row["differs"]:
        return "no"
    return "longer" if row["difference"] > 0 else "shorter"


def draw(result: dict[str, Any], before: dict[str, Any] | None, path: Path) -> None:
    """Draw how often a round trip took longer than so long: PNG or SVG, by the suffix.

    Raises
    ------
    MissingExtraError
        Without matplotlib.
    FileError
        When the file cannot be written.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing the figure") from None
    figure = Figure(figsize=(9, 5.5), layout="constrained")
    axes = figure.subplots()
    if before is not None:
        # Only what matters most: eight curves are too many to tell apart.
        _draw_result(axes, before, "before: ", 0.45, ("tick",))
    _draw_result(axes, result, "now: " if before else "", 1.0, tuple(KINDS))
    _dress(axes, result)
    if axes.get_lines():
        figure.legend(frameon=False, fontsize=9, loc="outside lower center", ncols=3)
    temporary = path.with_name(f".{path.stem}.part{path.suffix}")
    try:
        figure.savefig(temporary, dpi=150)
        temporary.replace(path)
    except OSError as fault:
        temporary.unlink(missing_ok=True)
        raise FileError(f"--figure {path}: cannot be written ({fault.strerror})") from fault


def _draw_result(
    axes: Axes, result: dict[str, Any], prefix: str, alpha: float, kinds: tuple[str, ...]
) -> None:
    for kind in kinds:
        for condition, series in _series(result, kind):
            if not series["answered"]:
                continue
            kept = series["histogram"]
            counts = np.asarray(kept["counts"])
            longer = np.cumsum(counts[::-1])[::-1] / series["samples"]
            starts = 10.0 ** (np.asarray(kept["bins"]) / kept["bins_a_decade"])
            end = 10.0 ** ((kept["bins"][-1] + 1) / kept["bins_a_decade"])
            axes.step(
                [*starts, end],
                [*longer, longer[-1]],
                where="post",
                color=COLOURS[condition],
                linestyle="-" if kind == "tick" else (0, (4, 2)),
                linewidth=1.8 if kind == "tick" else 1.2,
                alpha=alpha,
                label=f"{prefix}{condition}, {KINDS[kind]}",
            )


def _dress(axes: Axes, result: dict[str, Any]) -> None:
    rig = result["rig"]
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlabel("round trip of a sample (µs)")
    axes.set_ylabel("share of answers that took longer")
    axes.axvline(rig["budget_us"], color="#6b6b6b", linewidth=1.2)
    axes.annotate(
        f"budget {rig['budget_us']:g} µs",
        (rig["budget_us"], 0.02),
        xycoords=("data", "axes fraction"),
        xytext=(4, 0),
        textcoords="offset points",
        rotation=90,
        va="bottom",
        color="#4a4a4a",
    )
    for share, name in ((1e-2, "p99"), (1e-3, "p99.9"), (1e-4, "p99.99")):
        axes.axhline(share, color="#d5d5d5", linewidth=0.7, zorder=0)
        axes.annotate(
            name,
            (1.0, share),
            xycoords=("axes fraction", "data"),
            xytext=(4, 0),
            textcoords="offset points",
            va="center",
            fontsize=8,
            color="#6b6b6b",
        )
    axes.set_ylim(top=1.5)
    axes.spines[["top", "right"]].set_visible(False)
    server = result["server"]
    axes.set_title(
        f"{rig['file']}: tick {rig['interval_us']:g} µs, {server['lane']} lane, "
        f"{result['host']['cpu']}",
        fontsize=10,
        loc="left",
    )
