"""The Nyquist count: encirclements of -1 on the curve, unstable poles of the open and of the closed loop, and whether they agree."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from polewise.analysis.margins import Gain, frequency_grid
from polewise.analysis.point import ComplexArray
from polewise.kernels.program import FloatArray

# A pole is unstable if its real part exceeds this part of the largest pole's size (rounding of the eigenvalues) or its own.
UNSTABLE_RELATIVE = 1e-10
# The curve is followed this far beyond the slowest and fastest pole.
BEYOND = 1e4
TURN_MAX_RAD = 0.5  # largest turn between neighbouring points
REFINEMENTS_MAX = 24
POINTS_MAX = 60_000


@dataclass(frozen=True, slots=True)
class NyquistCount:
    """Counts.

    Args:
        open_unstable: unstable poles of the open loop; None where too many unknowns forbid finding them all.
        closed_unstable: unstable modes of the closed loop, found as eigenvalues.
        encirclements: clockwise turns round -1 from -infinity to +infinity, as measured on the curve; None where the curve does not decide.
    """

    open_unstable: int | None
    closed_unstable: int | None
    encirclements: float | None

    @property
    def stable(self) -> bool | None:
        """Whether the closed loop is stable: by its eigenvalues, or by the count where they were not found; None where neither decides."""
        if self.closed_unstable is not None:
            return self.closed_unstable == 0
        if self.open_unstable is None or self.encirclements is None:
            return None
        return round(self.encirclements) + self.open_unstable == 0

    @property
    def agrees(self) -> bool | None:
        """Whether the curve and the eigenvalues say the same; None where one of them is missing."""
        if self.open_unstable is None or self.closed_unstable is None or self.encirclements is None:
            return None
        return round(self.encirclements) == self.closed_unstable - self.open_unstable


def unstable_count(values: ComplexArray) -> int:
    """How many lie in the right half plane, those within rounding of the axis not counted."""
    if len(values) == 0:
        return 0
    noise = UNSTABLE_RELATIVE * np.maximum(np.abs(values), 1e-3 * np.median(np.abs(values)))
    return int(np.count_nonzero(values.real > noise))


def on_axis_count(values: ComplexArray) -> tuple[int, int]:
    """Poles at the origin, and other poles on the imaginary axis, within rounding."""
    if len(values) == 0:
        return 0, 0
    typical = float(np.median(np.abs(values)))
    origin = np.abs(values) <= 1e-9 * typical
    axis = ~origin & (np.abs(values.real) <= UNSTABLE_RELATIVE * np.abs(values))
    return int(np.count_nonzero(origin)), int(np.count_nonzero(axis))


def count_encirclements(gain: Gain, open_poles: ComplexArray | None, closed_modes: ComplexArray | None) -> NyquistCount:
    """Follow 1 + T along the positive imaginary axis and compare with the poles."""
    closed = None if closed_modes is None else unstable_count(closed_modes)
    if open_poles is None:
        return NyquistCount(None, closed, None)
    unstable = unstable_count(open_poles)
    origin, axis = on_axis_count(open_poles)
    turns = None if axis else winding(lambda f: 1.0 + gain(f), open_poles, origin)
    return NyquistCount(unstable, closed, turns)


def winding(curve: Callable[[FloatArray], ComplexArray], poles: ComplexArray, at_origin: int, *, end_hz: float = math.inf) -> float | None:
    """Clockwise turns of a curve round 0, from its angle along the positive axis.

    With k poles at the origin the indentation adds k/2: turns = k/2 - (change of angle from 0+ to infinity)/pi. For a sampled loop the
    curve ends at half the clock's frequency, the same holds on the unit circle.
    None where the curve can't be followed.
    """
    sizes = np.abs(poles)[np.abs(poles) > 0.0]
    typical = float(np.median(sizes)) if len(sizes) else 1.0
    sizes = sizes[sizes > 1e-9 * typical]
    slow, fast = (float(np.min(sizes)), float(np.max(sizes))) if len(sizes) else (1.0, 1.0)
    low, high = slow / BEYOND / (2 * math.pi), fast * BEYOND / (2 * math.pi)
    if math.isfinite(end_hz):
        low, high = min(low, 1e-3 * end_hz), end_hz
    grid = frequency_grid(low, high, poles)
    values = curve(grid)
    for _ in range(REFINEMENTS_MAX):
        turn = np.abs(np.angle(values[1:] / values[:-1]))
        wide = np.flatnonzero(turn > TURN_MAX_RAD)
        if len(wide) == 0:
            break
        if len(grid) + len(wide) > POINTS_MAX:
            return None
        middle = np.sqrt(grid[wide] * grid[wide + 1])
        grid = np.insert(grid, wide + 1, middle)
        values = np.insert(values, wide + 1, curve(middle))
    else:
        return None
    angle = float(np.sum(np.angle(values[1:] / values[:-1])))
    turns = 0.5 * at_origin - angle / math.pi
    return None if abs(turns - round(turns)) > 0.1 else turns
