"""The simulated cell: membrane, electrode, amplifier and converters. Compiled.

The membrane follows ``C dV/dt = -g_leak (V - E_leak) + I_native + I_electrode``; the
native conductances are model files, stepped through the tables of
:mod:`gatestep.kernel`. Between the amplifier and the cell stands a series resistance
``R`` with a capacitance ``Ce`` to ground at the amplifier's side::

    Ce dVe/dt = I_command - (Ve - V) / R        I_electrode = (Ve - V) / R

With ``Ce = 0`` the drop is ``Ve = V + R I``; with ``R = 0`` there is no electrode and
``Ce`` lies in parallel with the membrane.

Membrane and electrode are linear while the conductances are held, and that linear
system is solved exactly, in the functions ``phi1(z) = (exp(z) - 1) / z`` of its (one
or two, real) eigenvalues: it cannot become unstable, however fast the electrode. A
passive cell under a constant command is therefore exact to rounding over any time.
With native conductances the tick is cut into sub-steps of at most ``SUBSTEP_US``, and
the gates cross each on a grid staggered by half of it, which is second order
(Strang splitting). On the squid membrane firing at 68 Hz (10 uA/cm2, 6.3 °C) the
error at 1 µs is at most 0.006 mV, on the steepest upstroke, and 6 ns of spike time a
spike; both grow with the square of the sub-step.

Every draw is counter-based, so noise depends on seed, cell and tick alone and on
nothing that happened before. Differences between processors are those of their
``exp``, ``log`` and ``cos``: the last bit.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import ceil, cos, expm1, floor, log, pi, sqrt
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .kernel import BANK, STATES, advance, conductance, current, follow, records, settle
from .specs import SimCellSpec
from .units import MV_PER_MOHM_PA

SUBSTEP_US = 1.0
"""Longest sub-step of a cell with native conductances, in µs."""
V_LIMIT_MV = 1000.0
"""The membrane is held within this: a real one breaks down well before 1 V."""
ELECTRODE_LIMIT_MV = 1e9
"""Bound on the electrode's voltage; no command that specs allow comes near it."""

SIMCELL = np.dtype(
    [
        ("capacitance_pf", "f8"),
        ("leak_ns", "f8"),
        ("leak_mv", "f8"),
        ("electrode_mohm", "f8"),
        ("electrode_ns", "f8"),  # 1 / R
        ("electrode_pf", "f8"),  # 0: the electrode charges at once, or there is none
        ("bridge_mohm", "f8"),
        ("noise_mv", "f8"),
        ("adc_low_mv", "f8"),
        ("adc_step_mv", "f8"),  # 0: ideal
        ("adc_top", "f8"),  # highest code
        ("dac_low_pa", "f8"),
        ("dac_step_pa", "f8"),
        ("dac_top", "f8"),
        ("first_bank", "i8"),
        ("banks", "i8"),
        ("instant", "i8"),  # instantaneous gates in all banks
        ("v_mv", "f8"),  # membrane
        ("electrode_mv", "f8"),  # amplifier's side of the electrode, when electrode_pf > 0
        ("command_pa", "f8"),  # flowing now
        ("owed_ms", "f8"),  # the gates lag the membrane by this
    ],
    align=True,
)
"""One simulated cell: constants, then its state."""


class SimCells(NamedTuple):
    """Simulated cells with the models of their native conductances.

    ``cells`` are ``SIMCELL`` records; ``banks`` the native models of all cells in
    order, ``gates`` their states, one row each; ``tables`` holds their tables end to
    end, model ``k`` from ``starts[k]`` to ``starts[k + 1]``.
    """

    cells: Any
    banks: Any
    tables: Any
    starts: Any
    gates: Any


def make_cells(specs: Sequence[SimCellSpec], native: Sequence[Sequence[Any]]) -> SimCells:
    """Cells at their starting voltages, gates at their steady states.

    Parameters
    ----------
    specs : sequence of SimCellSpec
        One per cell.
    native : sequence of sequences
        For each cell its native models as ``(bank, table)`` pairs: a ``BANK`` record
        and its flat table.
    """
    flat = [pair for models in native for pair in models]
    starts = np.zeros(len(flat) + 1, dtype=np.uint64)
    starts[1:] = np.cumsum([table.size for _, table in flat])
    made = SimCells(
        records(SIMCELL, len(specs)),
        records(BANK, max(1, len(flat))),
        np.concatenate([table for _, table in flat]) if flat else np.zeros(1),
        starts,
        np.zeros((max(1, len(flat)), STATES)),
    )
    for k, (bank, _) in enumerate(flat):
        made.banks[k] = bank
    first = 0
    for cell, spec, models in zip(made.cells, specs, native, strict=True):
        cell.first_bank, cell.banks = first, len(models)
        cell.instant = sum(int(bank["instant"]) for bank, _ in models)
        first += len(models)
        fill_cell(cell, spec)
    start_cells(made)
    return made


def fill_cell(cell: Any, spec: SimCellSpec) -> None:
    """Write a description's constants and starting voltage into a ``SIMCELL`` record."""
    cell.capacitance_pf = spec.capacitance_pf
    cell.leak_ns, cell.leak_mv = spec.leak_ns, spec.leak_mv
    if spec.electrode_mohm > 0:
        cell.electrode_mohm, cell.electrode_pf = spec.electrode_mohm, spec.electrode_pf
        cell.electrode_ns = 1.0 / (spec.electrode_mohm * MV_PER_MOHM_PA)
    else:
        cell.capacitance_pf += spec.electrode_pf
    cell.bridge_mohm, cell.noise_mv = spec.bridge_mohm, spec.noise_mv
    cell.adc_low_mv, cell.adc_step_mv, cell.adc_top = _codes(spec.adc_bits, spec.adc_range_mv)
    cell.dac_low_pa, cell.dac_step_pa, cell.dac_top = _codes(spec.dac_bits, spec.dac_range_pa)
    cell.v_mv = spec.leak_mv if spec.start_mv is None else spec.start_mv
    cell.electrode_mv = cell.v_mv


def _codes(bits: int, span: tuple[float, float]) -> tuple[float, float, float]:
    """Lowest value, step (0 when ideal) and highest code of a converter."""
    if bits == 0:
        return span[0], 0.0, 0.0
    return span[0], (span[1] - span[0]) / 2**bits, float(2**bits - 1)


@compiled
def start_cells(sim: Any) -> None:
    """Put every native gate at its steady state for its cell's voltage."""
    for c in range(np.uint64(sim.cells.size)):
        cell = sim.cells[c]
        for k in range(np.uint64(cell.banks)):
            b = np.uint64(cell.first_bank) + k
            table = sim.tables[sim.starts[b] : sim.starts[b + np.uint64(1)]]
            settle(sim.banks[b], table, sim.gates[b], cell.v_mv)


@inner
def phi1(z: float) -> float:
    """[hot] ``(exp(z) - 1) / z``, 1 at 0; larger z count as 50, so it stays finite."""
    z = min(z, 50.0)
    return expm1(z) / z if z != 0.0 else 1.0


@inner
def change(cell: Any, g_ns: float, ion_pa: float, i_pa: float, h_ms: float) -> Any:
    """[hot] Exact changes ``(membrane, electrode)`` in mV over ``h_ms``.

    Parameters
    ----------
    g_ns, ion_pa : float
        Conductance of the membrane, held, and the current through it at the start.
    i_pa : float
        The command, held.

    With ``f`` the slope at the start and A the system's matrix, the change is
    ``h phi1(h A) f``; phi1 of the 2 x 2 matrix is written by Newton's divided
    difference on its two eigenvalues, which are real and never coincide.
    """
    leak = g_ns / cell.capacitance_pf
    if cell.electrode_pf == 0.0:
        return h_ms * phi1(-h_ms * leak) * (ion_pa + i_pa) / cell.capacitance_pf, 0.0
    a = cell.electrode_ns / cell.capacitance_pf
    c = cell.electrode_ns / cell.electrode_pf
    drop_mv = cell.electrode_mv - cell.v_mv
    slope_v = ion_pa / cell.capacitance_pf + a * drop_mv
    slope_e = i_pa / cell.electrode_pf - c * drop_mv
    spread = sqrt((leak + a - c) ** 2 + 4.0 * a * c)
    # The eigenvalue that does not cancel comes first, the other from the determinant.
    far = -0.5 * (leak + a + c + spread) if leak + a + c >= 0.0 else 0.5 * (spread - leak - a - c)
    near = leak * c / far
    fast, slow = min(far, near), max(far, near)
    q = phi1(h_ms * fast)
    r = (phi1(h_ms * slow) - q) / spread
    dv = q * slope_v + r * ((-leak - a - fast) * slope_v + a * slope_e)
    de = q * slope_e + r * (c * slope_v + (-c - fast) * slope_e)
    return h_ms * dv, h_ms * de


@inner
def _follow_native(sim: Any, cell: Any, v_mv: float) -> None:
    """[hot] Put the instantaneous native gates at their steady state for ``v_mv``."""
    for k in range(np.uint64(cell.banks)):
        b = np.uint64(cell.first_bank) + k
        table = sim.tables[sim.starts[b] : sim.starts[b + np.uint64(1)]]
        follow(sim.banks[b], table, sim.gates[b], v_mv)


@inner
def _advance_native(sim: Any, cell: Any, dt_ms: float) -> None:
    """[hot] Carry the dynamic native gates over ``dt_ms`` at the present voltage."""
    for k in range(np.uint64(cell.banks)):
        b = np.uint64(cell.first_bank) + k
        table = sim.tables[sim.starts[b] : sim.starts[b + np.uint64(1)]]
        advance(sim.banks[b], table, sim.gates[b], cell.v_mv, dt_ms)


@inner
def _membrane(sim: Any, cell: Any) -> Any:
    """[hot] Total conductance in nS and ionic current in pA at the present voltage."""
    g_ns = cell.leak_ns
    ion_pa = cell.leak_ns * (cell.leak_mv - cell.v_mv)
    for k in range(np.uint64(cell.banks)):
        b = np.uint64(cell.first_bank) + k
        g_ns += conductance(sim.banks[b], sim.gates[b])
        ion_pa += current(sim.banks[b], sim.gates[b], cell.v_mv)
    return g_ns, ion_pa


@inner
def _substep(sim: Any, cell: Any, i_pa: float, h_ms: float) -> None:
    """[hot] One sub-step: gates to its middle, then membrane and electrode across it."""
    if cell.banks > 0:
        _advance_native(sim, cell, cell.owed_ms + 0.5 * h_ms)
        cell.owed_ms = 0.5 * h_ms
    if cell.instant > 0:
        _follow_native(sim, cell, cell.v_mv)
        g_ns, ion_pa = _membrane(sim, cell)
        half_mv, _ = change(cell, g_ns, ion_pa, i_pa, 0.5 * h_ms)
        _follow_native(sim, cell, cell.v_mv + half_mv)
    g_ns, ion_pa = _membrane(sim, cell)
    dv, de = change(cell, g_ns, ion_pa, i_pa, h_ms)
    cell.v_mv = min(max(cell.v_mv + dv, -V_LIMIT_MV), V_LIMIT_MV)
    electrode_mv = cell.electrode_mv + de
    cell.electrode_mv = min(max(electrode_mv, -ELECTRODE_LIMIT_MV), ELECTRODE_LIMIT_MV)


@compiled
def carry(sim: Any, index: int, i_pa: float, dt_ms: float, substep_us: float) -> None:
    """[hot] Carry one cell over ``dt_ms`` with the command held at ``i_pa``.

    A cell without native conductances takes one exact step; any other takes equal
    sub-steps of at most ``substep_us``.
    """
    cell = sim.cells[np.uint64(index)]
    cell.command_pa = i_pa
    if dt_ms <= 0.0:
        return
    count = 1
    if cell.banks > 0:
        # The allowance keeps a tick of 20 µs at 20 sub-steps when 20.000000000000004 comes.
        count = max(1, ceil(dt_ms * 1000.0 / substep_us - 1e-9))
    h_ms = dt_ms / count
    for _ in range(count):
        _substep(sim, cell, i_pa, h_ms)


@compiled
def quantised(value: float, low: float, step: float, top: float) -> float:
    """[hot] What a converter makes of a value: the nearest code, saturating at the ends.

    ``low`` is the value of code 0, ``top`` the highest code; a step of 0 is an ideal
    converter, which passes everything.
    """
    if step == 0.0:
        return value
    return low + step * min(max(floor((value - low) / step + 0.5), 0.0), top)


@compiled
def output(sim: Any, index: int, i_pa: float) -> float:
    """[hot] The current that flows when ``i_pa`` is commanded, in pA."""
    cell = sim.cells[np.uint64(index)]
    return quantised(i_pa, cell.dac_low_pa, cell.dac_step_pa, cell.dac_top)


_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
_MIX_2 = np.uint64(0x94D049BB133111EB)
_STREAMS = np.uint64(32)
JITTER_STREAM = 16
"""Stream of draws for the delay of answers; cells draw noise from streams 0 to 15."""
DROP_STREAM = 17
"""Stream of draws for answers that are lost."""


@inner
def _scrambled(z: Any) -> Any:
    """[hot] The splitmix64 finaliser (Steele, Lea and Flood 2014), uint64 to uint64."""
    z = (z ^ (z >> np.uint64(30))) * _MIX_1
    z = (z ^ (z >> np.uint64(27))) * _MIX_2
    return z ^ (z >> np.uint64(31))


@compiled
def uniform(seed: Any, stream: int, tick: int) -> float:
    """[hot] A draw in (0, 1] that depends on its three arguments alone."""
    counter = np.uint64(tick) * _STREAMS + np.uint64(stream) + np.uint64(1)
    bits = _scrambled(_scrambled(np.uint64(seed) + _GOLDEN) + counter * _GOLDEN)
    return (np.float64(bits >> np.uint64(11)) + 1.0) * 2.0**-53


@compiled
def gaussian(seed: Any, stream: int, tick: int) -> float:
    """[hot] A standard normal draw (Box and Muller 1958) from streams n and n + 8."""
    radius = sqrt(-2.0 * log(uniform(seed, stream, tick)))
    return radius * cos(2.0 * pi * uniform(seed, stream + 8, tick))


@compiled
def electrode_voltage(cell: Any) -> float:
    """[hot] The voltage at the amplifier's side of the electrode, in mV."""
    if cell.electrode_pf > 0.0:
        return cell.electrode_mv
    return cell.v_mv + cell.electrode_mohm * cell.command_pa * MV_PER_MOHM_PA


@compiled
def measured(sim: Any, index: int, seed: Any, tick: int) -> float:
    """[hot] The voltage that the rig reads now, in mV: bridge, noise, then converter."""
    cell = sim.cells[np.uint64(index)]
    v_mv = electrode_voltage(cell) - cell.bridge_mohm * cell.command_pa * MV_PER_MOHM_PA
    if cell.noise_mv > 0.0:
        v_mv += cell.noise_mv * gaussian(seed, index, tick)
    return quantised(v_mv, cell.adc_low_mv, cell.adc_step_mv, cell.adc_top)
