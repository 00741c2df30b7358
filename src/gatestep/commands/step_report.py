"""What ``gatestep bench step`` found: as text, as JSON, as a figure."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from ..errors import FileError, GatestepError, MissingExtraError
from .bench import KERNEL, Result
from .squid_c import C_PLAIN

TARGET_RATIO = 0.5
"""Most that the kernel's step may cost of the plain C's."""


def as_json(result: Result, figure: Path | None) -> dict[str, Any]:
    """The result for programs; every cost is in nanoseconds a tick."""
    ratio = result.ratios.get(C_PLAIN)
    return {
        "host": result.host,
        "rounds": result.rounds,
        "size_rounds": result.size_rounds,
        "ticks": result.ticks,
        "squid_nsec": {name: vars(spread) for name, spread in result.squid.items()},
        "ratio_to_c": {name: vars(spread) for name, spread in result.ratios.items()},
        "c_unavailable": result.c_unavailable,
        "target_ratio": TARGET_RATIO,
        "within_target": None if ratio is None else ratio.median <= TARGET_RATIO,
        "sizes": [
            {
                "conductances": s.conductances,
                "gates": s.gates,
                "nsec": vars(s.nsec),
                "nsec_per_gate": s.nsec.median / s.gates,
            }
            for s in result.sizes
        ],
        "line": vars(result.line),
        **({"figure": str(figure)} if figure else {}),
    }


def as_text(result: Result, figure: Path | None) -> str:
    """The result for a person."""
    h = result.host
    lines = [
        f"gatestep {h['gatestep']}, numba {h['numba']}; {h['cpu']}, load {h['load']}; {h['date']}",
        f"median of {result.rounds} alternating rounds of {result.ticks} ticks [10 %, 90 %]",
        "",
        "squid axon (Na, K, leak; 3 gates), ns a tick",
        *(f"  {name:<24}{spread:.1f}" for name, spread in result.squid.items()),
        *(f"  {KERNEL} / {name}: {spread:.2f}" for name, spread in result.ratios.items()),
    ]
    if C_PLAIN in result.ratios:
        verdict = "within" if result.ratios[C_PLAIN].median <= TARGET_RATIO else "above"
        lines.append(f"  {verdict} the target, {TARGET_RATIO:g} of {C_PLAIN}")
    if result.c_unavailable:
        lines.append(f"  not compared: {result.c_unavailable}")
    lines += [
        "",
        f"cost by size, {result.size_rounds} rounds",
        "conductances  gates  ns a gate  ns a tick",
    ]
    for s in result.sizes:
        each = s.nsec.median / s.gates
        lines.append(f"{s.conductances:>12}  {s.gates:>5}  {each:>9.2f}  {s.nsec:.1f}")
    fit = result.line
    lines.append(
        f"linear: {fit.base_nsec:.1f} ns + {fit.gate_nsec:.2f} ns a gate (in fours) + "
        f"{fit.conductance_nsec:.2f} ns a conductance, at most {fit.worst:.0%} from a measured size"
    )
    if figure:
        lines.append(f"drawn to {figure}")
    return "\n".join(lines)


def check_figure(path: Path) -> None:
    """See before the work that a figure can be drawn to this file.

    Raises
    ------
    GatestepError
        If the suffix is neither .png nor .svg or the folder does not exist.
    MissingExtraError
        Without matplotlib.
    """
    if path.suffix.lower() not in (".png", ".svg"):
        raise GatestepError(f"--figure: {path} ends in neither .png nor .svg")
    if not path.absolute().parent.is_dir():
        raise FileError(f"--figure: {path}: its folder does not exist; make it first")
    try:
        import matplotlib.figure  # noqa: F401  # only to see whether it is there
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing the benchmark") from None


def draw(result: Result, path: Path) -> None:
    """Draw the squid step beside the C, and cost against gates."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10, 4.2), layout="constrained")
    left, right = figure.subplots(1, 2)
    names = list(result.squid)[::-1]
    spreads = [result.squid[name] for name in names]
    middle = [s.median for s in spreads]
    errors = [[s.median - s.low for s in spreads], [s.high - s.median for s in spreads]]
    left.barh(names, middle, xerr=errors, color="#1b6ca8", height=0.6, capsize=3)
    left.set_xlabel("squid axon, ns a tick")
    for each, look in ((2, "-"), (4, "--")):
        counts = (4 // each, 64)
        fitted = [result.line.at(n, n * each) for n in counts]
        ends = [n * each for n in counts]
        label = f"linear fit, {each} gates a conductance"
        right.plot(ends, fitted, look, color="#c8553d", linewidth=1.4, label=label)
    gates = [s.gates for s in result.sizes]
    right.plot(gates, [s.nsec.median for s in result.sizes], "o", color="#1b6ca8", label="measured")
    right.legend(frameon=False)
    right.set_xlabel("gates")
    right.set_ylabel("ns a tick")
    right.set_ylim(bottom=0)
    for axes in (left, right):
        axes.spines[["top", "right"]].set_visible(False)
    figure.suptitle(f"{result.host['cpu']}; {result.host['date'][:10]}", fontsize=10.5)
    try:
        figure.savefig(path, format=path.suffix.lower()[1:], dpi=150)
    except OSError as error:
        raise FileError(f"{path}: cannot be written: {error.strerror or error}") from None
