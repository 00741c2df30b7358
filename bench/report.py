"""The round-trip benchmark's result as JSON, text and figure."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

from experiments import DIRECT, ECHO, LIBZMQ, PLAIN, REAL_TIME, SWAPPED, Group
from rigs import INTERVAL_US, MODEL

TARGETS = {
    "lanes": {DIRECT: (0.70, 0.80), LIBZMQ: (1.08, None)},
    "plain": 1.5,
    "compiled": 0.30,
    "host": 0.15,
    "swaps": 1.2,
}
"""The most of a ratio, the least for ``plain``: of p50 and p99 for the lanes, of p50 for
``compiled``, of p99.9 for ``host`` and ``swaps``."""


def targets(groups: list[Group]) -> dict[str, bool]:
    """Whether each target holds in each group it is for."""
    found: dict[str, bool] = {}
    for group in groups:
        if group.load and REAL_TIME not in group.costs:
            continue
        found |= {f"{group.title}: {what}": holds for what, holds in _targets(group)}
    return found


def _targets(group: Group) -> list[tuple[str, bool]]:
    """Each target of one group in words, and whether it holds there."""
    if ECHO in group.costs and group.client in {"compiled", "spinning"}:
        most = TARGETS["compiled"]
        holds = group.ratios[f"{DIRECT} / {ECHO}"].p50.median <= most
        return [(f"{DIRECT} p50 at most {most:.2f} of the {ECHO} with its C client", holds)]
    if PLAIN in group.costs:
        found = []
        for lane, most in TARGETS["lanes"].items():
            of_echo = group.ratios[f"{lane} / {ECHO}"]
            for name, spread, limit in zip(
                ("p50", "p99"), (of_echo.p50, of_echo.p99), most, strict=True
            ):
                if limit is not None:
                    what = f"{lane} {name} at most {limit:.2f} of the {ECHO}"
                    found.append((what, spread.median <= limit))
        least = TARGETS["plain"]
        slow = group.ratios[f"{PLAIN} / {DIRECT}"].p50.median >= least
        return [*found, (f"{PLAIN} p50 at least {least} times the {DIRECT}", slow)]
    if REAL_TIME in group.costs:
        [of] = group.ratios.values()
        most = TARGETS["host"]
        return [(f"p99.9 at most {most} of the same without", of.p999.median <= most)]
    if SWAPPED in group.costs:
        [of] = group.ratios.values()
        most = TARGETS["swaps"]
        lost = any(group.facts["counted"].values())
        return [
            (f"p99.9 at most {most} of the turns without", of.p999.median <= most),
            ("nothing missed, repeated, clipped or lost", not lost),
        ]
    return [
        (f"{name} grows by no more than the step", grown.median <= grown.step_us)
        for name, grown in group.growths.items()
    ]


def as_json(groups: list[Group], at: dict[str, str]) -> dict[str, Any]:
    """The result for programs; round trips in µs."""
    return {
        "host": at,
        "model": MODEL,
        "interval_us": INTERVAL_US,
        "groups": [asdict(group) for group in groups],
        "targets": targets(groups),
    }


def as_text(result: dict[str, Any], groups: list[Group]) -> str:
    """The result for a person."""
    h = result["host"]
    lines = [
        f"gatestep {h['gatestep']}, numba {h['numba']}, {h['libzmq']}; {h['cpu']}, "
        f"load {h['load']}; {h['date']}",
        "round trips in µs: median of the rounds' medians [10 %, 90 %], then percentiles of all; "
        "ratios of paired blocks",
    ]
    for group in groups:
        lines += ["", f"{group.title}: {group.rounds} rounds of {group.trips} trips"]
        for name, cost in group.costs.items():
            tail = f"p50 {cost.p50:.1f}  p99 {cost.p99:.0f}  p99.9 {cost.p999:.0f}"
            lines.append(f"  {name:<28}{cost.round_median:.1f}  {tail}  max {cost.largest:.0f}")
        for name, of in group.ratios.items():
            lines.append(f"  {name}: p50 {of.p50:.3f}  p99 {of.p99:.2f}  p99.9 {of.p999:.2f}")
        for name, grown in group.growths.items():
            lines.append(
                f"  {name}: {grown.median:+.2f} µs ({grown.low95:+.2f} to {grown.high95:+.2f}); "
                f"the steps {grown.step_us:+.2f} µs"
            )
        lines += [f"  {name}: {value}" for name, value in group.facts.items()]
    lines.append("")
    lines += [f"{'met' if met else 'NOT met'}: {t}" for t, met in result["targets"].items()]
    return "\n".join(lines)


def draw(groups: list[Group], path: Path, title: str) -> None:
    """Draw every group: medians and their spreads as dots with bars, p99 and p99.9 as marks.

    All panels have one scale, so that lengths may be compared.
    """
    from matplotlib.figure import Figure

    rows = (len(groups) + 1) // 2
    figure = Figure(figsize=(11, 1.2 + 1.9 * rows), layout="constrained")
    panels = figure.subplots(rows, 2, squeeze=False, sharex=True).ravel()
    for axes in panels[len(groups) :]:
        axes.set_visible(False)
    for axes, group in zip(panels, groups, strict=False):
        names, costs = list(group.costs), list(group.costs.values())
        spreads = [cost.round_median for cost in costs]
        sides = [[s.median - s.low for s in spreads], [s.high - s.median for s in spreads]]
        middle = [s.median for s in spreads]
        axes.errorbar(middle, names, xerr=sides, fmt="o", color="#1b6ca8", capsize=3, label="p50")
        axes.plot([cost.p99 for cost in costs], names, "k|", markersize=11, label="p99")
        axes.plot([cost.p999 for cost in costs], names, "kx", markersize=5, label="p99.9")
        axes.set_xscale("log")
        axes.set_ylim(len(names) - 0.5, -0.5)
        axes.grid(axis="x", alpha=0.3)
        axes.set_title(group.title, fontsize=9)
        axes.spines[["top", "right"]].set_visible(False)
        axes.set_xlabel("round trip (µs): median of the rounds, p99 and p99.9 of all trips")
        axes.xaxis.label.set_fontsize(8)
    figure.legend(*panels[0].get_legend_handles_labels(), loc="outside lower center", ncols=3)
    figure.suptitle(title, fontsize=10.5)
    figure.savefig(path, dpi=130)
