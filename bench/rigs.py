"""Rig files and model files that the round-trip benchmark writes for itself."""

from __future__ import annotations

import json
import sys
from dataclasses import dataclass
from pathlib import Path

from gatestep.commands.bench import sized_model
from gatestep.specs import USUAL_PRIORITY, ModelSpec

MODEL = "squid-axon"
INTERVAL_US = 20.0
GATES_EACH = 2
TINY_NS = 1e-3
"""Of each copy: 64 of them in a cell stay far from its limits."""

_RIG = """\
# Written by bench/roundtrip.py.
[loop]
endpoint = "{loop}"
interval_us = {interval_us}
budget_us = 1000000                     # how late an answer is, is measured, not judged
lane = "{lane}"

[control]
endpoint = "{control}"

[feed]
endpoint = "{feed}"

[record]
on = false                              # what it costs is measured by journal_kill.py

[limits]
silence_ms = 600000                     # a rig is silent while others have their turn
late_run = 1000000
"""

_CELL = """
[[cell]]
name = "cell{number}"
model = "{model}"
[cell.limits]
current_pa = 200000
"""

_HOST = """
[host]
policy = "fifo"
priority = {priority}
lock_memory = true
"""


@dataclass(frozen=True)
class Rig:
    """A server to be measured.

    Attributes
    ----------
    lane : str
    cells : int
    conductances : int
        Copies of a conductance of two gates in every cell; 0 for the squid axon.
    real_time : bool
        Whether ``[host]`` asks for SCHED_FIFO and locked memory.
    """

    lane: str = "direct"
    cells: int = 1
    conductances: int = 0
    real_time: bool = False

    def control_endpoint(self, folder: Path) -> str:
        """Where the server is steered."""
        return f"ipc://{folder}/control"

    def command(self, endpoint: str, folder: Path) -> list[str]:
        """Write the files into a folder of the server's own; what serves them, armed."""
        model = MODEL
        if self.conductances:
            model = str(write_model(copies(self.conductances), folder / "copies.toml"))
        text = _RIG.format(
            loop=endpoint,
            lane=self.lane,
            control=self.control_endpoint(folder),
            feed=f"ipc://{folder}/feed",
            interval_us=INTERVAL_US,
        )
        text += _HOST.format(priority=USUAL_PRIORITY) if self.real_time else ""
        text += "".join(_CELL.format(number=k, model=model) for k in range(self.cells))
        path = folder / "rig.toml"
        path.write_text(text)
        return [sys.executable, "-m", "gatestep", "serve", str(path), "--arm", "--json"]


def copies(count: int) -> ModelSpec:
    """The model that ``gatestep bench step`` sizes, each copy with a tiny conductance."""
    model = sized_model(count, GATES_EACH)
    tiny = [c.model_copy(update={"gmax_ns": TINY_NS}) for c in model.conductance]
    return model.model_copy(update={"conductance": tuple(tiny)})


def write_model(model: ModelSpec, path: Path) -> Path:
    """Write a model of conductances with a fixed reversal and rates as formulas."""
    lines = [f"{key} = {json.dumps(getattr(model, key))}" for key in ("title", "source")]
    lines.append(f"temperature_c = {model.temperature_c}")
    for one in model.conductance:
        lines += ["", "[[conductance]]", f'name = "{one.name}"', f"gmax_ns = {one.gmax_ns}"]
        lines += [f"reversal_mv = {one.reversal_mv}"]
        for gate in one.gate:
            lines += ["", "[[conductance.gate]]", f'name = "{gate.name}"']
            lines += [f"instances = {gate.instances}"]
            lines += [f'alpha = "{gate.alpha}"', f'beta = "{gate.beta}"']
    path.write_text("\n".join(lines) + "\n")
    return path
