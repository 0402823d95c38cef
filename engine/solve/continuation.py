"""Following a solution while one parameter goes from 0 to 1: natural steps, then arc length round a fold, whose place it finds."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from polewise.kernels.program import FloatArray
from polewise.solve.linear import Factors, SparseMatrix, factorise
from polewise.solve.newton import NewtonOutcome, solve_newton
from polewise.solve.square_system import SquareSystem

STEP_FIRST = 0.25
STEP_SMALLEST = 2e-3  # natural steps below this hand over to arc length
STEP_TRUSTED = 0.02  # below this a changed sign of the determinant is a kink, not another branch
DISPLACEMENT_LARGEST = 0.5  # a solution further from its prediction, in parts of |z| + scale, is taken for another branch
ARC_STEPS_MOST = 300
ARC_SMALLEST = 1e-9
BISECTIONS = 50  # of the arc between the last point before and the first beyond the limit


@dataclass(frozen=True, slots=True, eq=False)
class RampOutcome:
    """Where a ramp ended.

    Args:
        z: solution at `reached`.
        reached: value of the parameter, 1 for success.
        limit: "none"; "fold": the branch turns back here; "refused": beyond, `refused(z)` is true; "stuck": the iteration found no way on.
        iterations: corrections computed.
        factors: of the Jacobian at z; None where the limit was found along the arc.
    """

    z: FloatArray
    reached: float
    limit: Literal["none", "fold", "refused", "stuck"]
    iterations: int
    factors: Factors | None


def ramp(square: SquareSystem, start: NewtonOutcome, parameter: int, refused: Callable[[FloatArray], bool], *, begin: float = 0.0) -> RampOutcome:
    """Follow the solution `start` at `begin` until the parameter is 1.

    Args:
        square: its `p[parameter]` is set here and left at the value reached.
        start: converged at parameter `begin`.
        refused: solutions that don't count as being on the branch that is wanted.
    """
    z, at, step, iterations = start.z, begin, STEP_FIRST, 0
    factors = start.factors
    while at < 1.0:
        target = min(1.0, at + step)
        guess = z + (target - at) * _slope(square, z, at, parameter, factors)
        square.p[parameter] = target
        outcome = solve_newton(square, guess, limit=15, free_steps=2)
        iterations += outcome.iterations
        if _belongs(outcome, guess, square, factors, target - at) and not refused(outcome.z):
            z, at, factors = outcome.z, target, outcome.factors
            if outcome.iterations <= 5:
                step = min(2.0 * step, 0.5)
            continue
        step = (target - at) / 4.0
        if step < STEP_SMALLEST:
            arc = _Arc(square, parameter, z)
            return arc.follow(z, at, refused, iterations)
    return RampOutcome(z, 1.0, "none", iterations, factors)


def _belongs(outcome: NewtonOutcome, guess: FloatArray, square: SquareSystem, before: Factors | None, step: float) -> bool:
    """Whether a solution lies on the branch it was predicted from."""
    if not outcome.converged:
        return False
    distance = float(np.max(np.abs(outcome.z - guess) / (square.scale + np.abs(outcome.z)), initial=0.0))
    if distance > DISPLACEMENT_LARGEST:
        return False
    signs = {f.sign for f in (before, outcome.factors) if f is not None}
    return step <= STEP_TRUSTED or signs in ({1}, {-1})


def _derivative(square: SquareSystem, z: FloatArray, at: float, parameter: int) -> FloatArray:
    """dF/d parameter by central differences (F is affine in it, or nearly so)."""
    difference = 1e-3
    square.p[parameter] = at + difference
    above = square.residual(z)
    square.p[parameter] = at - difference
    below = square.residual(z)
    square.p[parameter] = at
    value = (above - below) / (2.0 * difference)
    return np.nan_to_num(value, posinf=0.0, neginf=0.0)


def _slope(square: SquareSystem, z: FloatArray, at: float, parameter: int, factors: Factors | None) -> FloatArray:
    """dz/d parameter along the branch; 0 where it isn't known."""
    if factors is None or not factors.exact:
        return np.zeros_like(z)
    return -factors.solve(_derivative(square, z, at, parameter))


class _Arc:
    """Steps of arc length along (z / weight, parameter). Source: Keller 1987, Lectures on Numerical Methods in Bifurcation Problems, 4."""

    def __init__(self, square: SquareSystem, parameter: int, z: FloatArray) -> None:
        self.square, self.parameter = square, parameter
        self.weight = square.scale + np.abs(z)

    def follow(self, z: FloatArray, at: float, refused: Callable[[FloatArray], bool], iterations: int) -> RampOutcome:
        """Along the branch to parameter 1, its fold or its first refused point."""
        tangent = self._tangent(z, at, np.append(np.zeros(len(z)), 1.0))
        if tangent is None:
            return RampOutcome(z, at, "stuck", iterations, None)
        length = 0.02
        for _ in range(ARC_STEPS_MOST):
            found = self._step(z, at, tangent, length)
            if found is None:
                length /= 4.0
                if length < ARC_SMALLEST:
                    return RampOutcome(z, at, "stuck", iterations, None)
                continue
            iterations += 4
            z_next, at_next, tangent_next = found
            if tangent_next[-1] <= 0.0 or refused(z_next):
                return self._limit(z, at, tangent, length, refused, iterations)
            if at_next >= 1.0:
                self.square.p[self.parameter] = 1.0
                outcome = solve_newton(self.square, z_next)
                good = outcome.converged and not refused(outcome.z)
                return RampOutcome(outcome.z if good else z, 1.0 if good else at, "none" if good else "stuck", iterations, outcome.factors)
            z, at, tangent = z_next, at_next, tangent_next
            length = min(1.5 * length, 0.2)
        return RampOutcome(z, at, "stuck", iterations, None)

    def _limit(
        self, z: FloatArray, at: float, tangent: FloatArray, length: float, refused: Callable[[FloatArray], bool], iterations: int
    ) -> RampOutcome:
        """Bisect the arc from a good point to one beyond the limit."""
        low, high = 0.0, length
        best, kind = (z, at), "fold"
        for _ in range(BISECTIONS):
            middle = 0.5 * (low + high)
            found = self._step(z, at, tangent, middle)
            if found is None:
                break
            beyond_fold, is_refused = found[2][-1] <= 0.0, refused(found[0])
            if beyond_fold or is_refused:
                high, kind = middle, "refused" if is_refused and not beyond_fold else "fold"
            else:
                low, best = middle, (found[0], found[1])
            if high - low < 1e-12:
                break
        self.square.p[self.parameter] = best[1]
        return RampOutcome(best[0], best[1], "refused" if kind == "refused" else "fold", iterations, None)

    def _step(self, z: FloatArray, at: float, tangent: FloatArray, length: float) -> tuple[FloatArray, float, FloatArray] | None:
        """The point of the branch in the plane at `length` along the tangent, with the tangent there; None where Newton fails."""
        y = np.append(z / self.weight, at) + length * tangent
        centre = y.copy()
        last = np.inf
        for _ in range(12):
            z_now, at_now = y[:-1] * self.weight, float(y[-1])
            matrix, f = self._bordered(z_now, at_now, tangent)
            if not np.all(np.isfinite(f)):
                return None
            f[-1] = float(tangent @ (y - centre))
            factors = factorise(matrix, np.ones(len(y)))
            if not factors.exact:
                return None
            dy = -factors.solve(f)
            size = float(np.max(np.abs(dy)))
            if not np.isfinite(size) or size > 2.0 * last or size > 10.0 * length + 1e-9:
                return None
            y = y + dy
            if size <= 1e-12 or (size <= 1e-10 and size >= 0.1 * last):
                z_now, at_now = y[:-1] * self.weight, float(y[-1])
                new = self._tangent(z_now, at_now, tangent)
                return None if new is None else (z_now, at_now, new)
            last = size
        return None

    def _tangent(self, z: FloatArray, at: float, previous: FloatArray) -> FloatArray | None:
        """Unit tangent at a point, in the sense of the previous one."""
        matrix, _ = self._bordered(z, at, previous)
        factors = factorise(matrix, np.ones(len(z) + 1))
        if not factors.exact:
            return None
        right = np.zeros(len(z) + 1)
        right[-1] = 1.0
        tangent = factors.solve(right)
        size = float(np.linalg.norm(tangent))
        return tangent / size if np.isfinite(size) and size > 0.0 else None

    def _bordered(self, z: FloatArray, at: float, border: FloatArray) -> tuple[SparseMatrix, FloatArray]:
        """[[J weight, dF/d parameter], [border]] and (F, 0)."""
        square = self.square
        slope = _derivative(square, z, at, self.parameter)
        f = square.residual(z)
        jacobian = square.jacobian()
        n = jacobian.n
        count = np.diff(jacobian.col_ptr)
        ends = jacobian.col_ptr[1:]
        values = np.insert(jacobian.values * self.weight[jacobian.column_of_entry], ends, border[:-1])
        rows = np.insert(jacobian.row_idx, ends, n)
        col_ptr = np.concatenate([[0], np.cumsum(count + 1), [len(rows) + n + 1]]).astype(np.int64)
        matrix = SparseMatrix(col_ptr, np.concatenate([rows, np.arange(n + 1)]).astype(np.int64), np.concatenate([values, slope, [border[-1]]]))
        return matrix, np.append(f, 0.0)
