"""The last thing between the model and the cell.

Every current passes :func:`limited` on its way into an answer; there is no path
around it. What it returns is finite and inside the cell's limits whatever goes in.
"""

from __future__ import annotations

from math import isfinite
from typing import Any

from .compiling import compiled
from .states import Fault

_NON_FINITE = int(Fault.NON_FINITE_VOLTAGE)
_OUT_OF_WINDOW = int(Fault.VOLTAGE_OUT_OF_WINDOW)
_NONE = int(Fault.NONE)


@compiled
def voltage_fault(v_mv: float, low_mv: float, high_mv: float) -> int:
    """[hot] The fault that a measured voltage is, or ``Fault.NONE``."""
    if not isfinite(v_mv):
        return _NON_FINITE
    if not low_mv <= v_mv <= high_mv:
        return _OUT_OF_WINDOW
    return _NONE


@compiled
def limited(i_pa: float, last_pa: float, limit_pa: float, slew_pa: float) -> Any:
    """[hot] ``(current, clipped)``: within ±limit and within ±slew of the last current.

    Parameters
    ----------
    i_pa : float
        The current asked for, pA; a non-finite one gives 0 and counts as clipped.
    last_pa : float
        The current last answered, itself within the limit.
    limit_pa, slew_pa : float
        Largest magnitude, and largest change in one answer, pA. Both above 0.
    """
    if not isfinite(i_pa):
        return 0.0, True
    allowed = min(max(i_pa, last_pa - slew_pa), last_pa + slew_pa)
    allowed = min(max(allowed, -limit_pa), limit_pa)
    return allowed, allowed != i_pa
