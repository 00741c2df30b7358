"""The squid axon's step in plain C, built where it is run, for ``gatestep bench step``."""

from __future__ import annotations

import ctypes
import os
import shlex
import shutil
import subprocess
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from ..kernel import STATES, settle

if TYPE_CHECKING:
    from .bench import Stepped

Floats = NDArray[np.float64]

SOURCE = Path(__file__).with_name("squid_step.c")
C_PLAIN = "C, -O3"
FLAGS = {C_PLAIN: ("-O3",), "C, -O3 -march=native": ("-O3", "-march=native")}
_LONGEST_S = 120


class SquidInC:
    """The C step along the kernel's voltages; a call does so, filling ``i_pa``.

    It starts from the steady state that the kernel starts from and goes on, call
    after call, from where it is.
    """

    def __init__(self, library: Path, squid: Stepped, tick_ms: float) -> None:
        self._run = ctypes.CDLL(str(library)).squid_run
        self._run.restype = None
        self.i_pa = np.zeros_like(squid.v_mv)
        start = np.zeros(STATES)
        settle(squid.bank, squid.table, start, squid.v_mv[0])
        self._arrays = (
            start[:3].copy(),
            squid.bank.gmax_ns[:3].copy(),
            squid.bank.reversal_mv[:3].copy(),
            squid.v_mv,
        )
        # Converted once: what a call converts would count in its time.
        pointers = [ctypes.c_void_p(a.ctypes.data) for a in self._arrays]
        count, tick = ctypes.c_long(squid.v_mv.size), ctypes.c_double(tick_ms)
        self._arguments = (*pointers, count, tick, ctypes.c_void_p(self.i_pa.ctypes.data))

    def __call__(self) -> None:
        """Step once along the voltages."""
        self._run(*self._arguments)


def compiler() -> list[str] | None:
    """The command of the C compiler, from ``CC`` or ``cc`` on the path; None without one."""
    named = shlex.split(os.environ.get("CC", ""))
    if named:
        return named
    found = shutil.which("cc")
    return [found] if found else None


def compiler_name() -> str | None:
    """First line of what the compiler says of itself."""
    command = compiler()
    if command is None:
        return None
    try:
        done = subprocess.run(
            [*command, "--version"], capture_output=True, text=True, timeout=20, check=False
        )
    except (OSError, subprocess.TimeoutExpired):
        return None
    return done.stdout.partition("\n")[0] or None


def build_squid_step(
    folder: Path, squid: Stepped, tick_ms: float
) -> tuple[dict[str, SquidInC], str | None]:
    """Build the C step with each set of flags.

    Parameters
    ----------
    folder : Path
        Where the libraries are written.
    squid : Stepped
        The same model for the kernel: conductances, voltages and starting state.
    tick_ms : float
        The tick.

    Returns
    -------
    runs, why_not
        The C by the name of its flags; and why some or all could not be built, None
        if all were.
    """
    command = compiler()
    if command is None:
        return {}, "no C compiler: there is no cc on the path"
    runs, faults = {}, []
    for number, (name, flags) in enumerate(FLAGS.items()):
        library = folder / f"squid_step_{number}.so"
        output = ["-std=c99", "-shared", "-fPIC", "-o", str(library), str(SOURCE), "-lm"]
        fault = _compile([*command, *flags, *output])
        if fault:
            faults.append(f"{name}: {fault}")
        else:
            runs[name] = SquidInC(library, squid, tick_ms)
    return runs, "; ".join(faults) or None


def _compile(command: list[str]) -> str | None:
    """Run a compiler; what went wrong, if anything."""
    try:
        done = subprocess.run(
            command, capture_output=True, text=True, timeout=_LONGEST_S, check=False
        )
    except (OSError, subprocess.TimeoutExpired) as fault:
        return f"{command[0]}: {fault}"
    return None if done.returncode == 0 else f"{command[0]}: {done.stderr.strip()[-300:]}"
