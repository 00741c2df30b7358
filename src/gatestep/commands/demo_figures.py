"""The demo's figures."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import MissingExtraError
from .demo_rigs import STATEMENT

if TYPE_CHECKING:
    from ..journalfile import JournalFile
    from ..simtrace import Trace

INK, CURRENT, STIMULUS, MARK = "#1b3a4b", "#9a3324", "#444444", "#8a8a8a"


def _figure(height: float) -> Any:
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing the demo's figures") from None
    return Figure(figsize=(10, height), layout="constrained")


def _save(figure: Any, path: Path) -> Path:
    for axes in figure.axes:
        axes.spines[["top", "right"]].set_visible(False)
    temporary = path.with_suffix(".part.png")
    figure.savefig(temporary, dpi=130)
    temporary.replace(path)
    return path


def draw_scenario(journal: JournalFile, path: Path) -> Path:
    """Voltage, the model's current and the stimulus over the plan's sweeps, each named.

    Raises
    ------
    MissingExtraError
        Without matplotlib.
    """
    figure = _figure(6.0)
    top, middle, bottom = panels = figure.subplots(3, 1, sharex=True, height_ratios=[3, 2, 1])
    first = journal.sweeps[0].start
    tick_s = journal.interval_us * 1e-6
    samples = journal.samples[first : journal.sweeps[-1].stop]
    t_s = np.arange(len(samples)) * tick_s
    stimulus_pa = samples["stimulus_pa"][:, 0]
    top.plot(t_s, samples["v_mv"][:, 0], color=INK, linewidth=0.8)
    top.set_ylabel("membrane (mV)")
    middle.plot(t_s, (samples["i_pa"][:, 0] - stimulus_pa) / 1000.0, color=CURRENT, linewidth=0.6)
    middle.set_ylabel("model's current (nA)")
    bottom.plot(t_s, stimulus_pa, color=STIMULUS, linewidth=1.0)
    bottom.set_ylabel("step (pA)")
    bottom.set_xlabel("time in the simulated rig (s)")
    for sweep in journal.sweeps:
        start_s, stop_s = (sweep.start - first) * tick_s, (sweep.stop - first) * tick_s
        where = (0.5 * (start_s + stop_s), 1.02)
        name = sweep.fields["condition"]
        top.annotate(name, where, xycoords=("data", "axes fraction"), ha="center")
        for axes in panels:
            axes.axvline(start_s, color=MARK, linewidth=0.8, linestyle=":")
    figure.suptitle(f"A conductance given through the loop. {STATEMENT}", fontsize=10)
    return _save(figure, path)


def draw_proof(trace: Trace, interval_us: float, path: Path) -> Path:
    """The plain loop above the anticipating one, the same cell, model and tick.

    Raises
    ------
    MissingExtraError
        Without matplotlib.
    """
    figure = _figure(5.5)
    panels = figure.subplots(2, 1, sharex=True, sharey=True)
    names = ("plain loop: each current is stale", "anticipating: the delay taken out")
    for c, (axes, name) in enumerate(zip(panels, names, strict=True)):
        axes.plot(trace.t_ms, trace.v_mv[:, c], color=INK, linewidth=0.7)
        axes.set_title(name, fontsize=10, loc="left")
        axes.set_ylabel("membrane (mV)")
    panels[-1].set_xlabel("time in the simulated rig (ms)")
    title = f"One model at a tick and a delay of {interval_us:g} µs. {STATEMENT}"
    figure.suptitle(title, fontsize=10)
    return _save(figure, path)
