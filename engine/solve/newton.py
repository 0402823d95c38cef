"""Newton's method with line search for square systems with kinks: every switch is live, the Jacobian is that of the branch one stands on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np

from polewise.kernels.program import FloatArray
from polewise.solve.linear import Factors, SparseMatrix, factorise

ITERATION_LIMIT = 80
CORRECTION_RELATIVE = 1e-11  # a correction below this part of |z| + scale ends the iteration
ROUNDING_RELATIVE = 1e-8  # below this, a correction that shrinks no more is rounding, not failure
RUNAWAY = 1e9  # scales: an open voltage that constant power has driven this far is no solution, although p/v is nearly zero there
STEP_SMALLEST = 2.0**-9  # shortest step of the line search
FREE_STEPS = 12  # full steps taken although the line search failed: a kink may have to be crossed uphill


class Equations(Protocol):
    """F(z) = 0 with z of shape (n,)."""

    @property
    def scale(self) -> FloatArray:
        """Shape (n,), size of each unknown, > 0."""
        ...

    def residual(self, z: FloatArray) -> FloatArray:
        """F(z), shape (n,); not finite where z is outside a function's domain."""
        ...

    def jacobian(self) -> SparseMatrix:
        """dF/dz at the point of the last `residual`."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class NewtonOutcome:
    """How an iteration ended.

    Args:
        z: the last (best) point.
        reason: "converged"; "stalled": no shorter correction found; "limit": too many iterations; "not finite": a residual that is not a number.
        residual: F(z).
        factors: of the Jacobian at (or one correction before) z.
        iterations: corrections computed.
    """

    z: FloatArray
    reason: Literal["converged", "stalled", "limit", "not finite"]
    residual: FloatArray
    factors: Factors | None
    iterations: int

    @property
    def converged(self) -> bool:
        """Whether F(z) = 0 was reached."""
        return self.reason == "converged"


def solve_newton(equations: Equations, start: FloatArray, *, limit: int = ITERATION_LIMIT, free_steps: int = FREE_STEPS) -> NewtonOutcome:
    """Find z with F(z) = 0 from `start`.

    The line search asks that the simplified correction J(z)^-1 F(z + step) be shorter than the correction itself, a test that no scaling
    of the rows changes.

    Args:
        start: shape (n,).
        limit: most corrections.
        free_steps: most full steps that may be taken against the line search's advice.
    Source: Deuflhard 2011, Newton Methods for Nonlinear Problems, 3.3 (natural monotonicity test, algorithm NLEQ-ERR); semi-smooth case: Qi & Sun,
        Mathematical Programming 58, 1993.
    """
    z = start.copy()
    f = equations.residual(z)
    factors: Factors | None = None
    if not np.all(np.isfinite(f)):
        return NewtonOutcome(z, "not finite", f, None, 0)
    for count in range(1, limit + 1):
        factors = factorise(equations.jacobian(), equations.scale + np.abs(z))
        dz = -factors.solve(f)
        size = _size(dz, factors.column_scale)
        if size <= CORRECTION_RELATIVE and factors.exact:
            return NewtonOutcome(z + dz, "converged", f, factors, count)
        step = _search(equations, z, dz, size, factors)
        if step is None:
            if size <= ROUNDING_RELATIVE and factors.exact:
                equations.residual(z)
                return NewtonOutcome(z, "converged", f, factors, count)
            if not factors.exact and _resting(factors, f) and _size(z, equations.scale) < RUNAWAY:
                equations.residual(z)
                return NewtonOutcome(z, "converged", f, factors, count)
            if free_steps <= 0:
                return NewtonOutcome(z, "stalled", f, factors, count)
            free_steps -= 1
            step = _finite_step(equations, z, dz)
            if step is None:
                return NewtonOutcome(z, "stalled", f, factors, count)
        z, f = step
    return NewtonOutcome(z, "limit", f, factors, limit)


def _size(dz: FloatArray, scale: FloatArray) -> float:
    """Largest correction in parts of |z| + scale."""
    return float(np.max(np.abs(dz) / scale, initial=0.0))


def _resting(factors: Factors, f: FloatArray) -> bool:
    """Whether a singular system's rows all hold to rounding: a solution that is not the only one."""
    return float(np.max(np.abs(f) / factors.row_size, initial=0.0)) <= 1e-12


def _search(equations: Equations, z: FloatArray, dz: FloatArray, size: float, factors: Factors) -> tuple[FloatArray, FloatArray] | None:
    """The longest tried step that shortens the simplified correction, with F there; None where there is none."""
    step = 1.0
    while step >= STEP_SMALLEST:
        trial = z + step * dz
        f = equations.residual(trial)
        if np.all(np.isfinite(f)):
            after = _size(factors.solve(f), factors.column_scale)
            if after <= (1.0 - step / 4.0) * size:
                return trial, f
            # The minimum of the parabola through what is known, kept within a half and a quarter.
            predicted = 0.5 * step * step * size / max(after - (1.0 - step) * size, 1e-300)
            step = min(max(predicted, step / 4.0), step / 2.0)
        else:
            step /= 4.0
    return None


def _finite_step(equations: Equations, z: FloatArray, dz: FloatArray) -> tuple[FloatArray, FloatArray] | None:
    """The longest step with finite residuals."""
    step = 1.0
    while step >= STEP_SMALLEST:
        trial = z + step * dz
        f = equations.residual(trial)
        if np.all(np.isfinite(f)):
            return trial, f
        step /= 4.0
    return None
