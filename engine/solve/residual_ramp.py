"""Newton homotopy: what a first guess violates is let go little by little, F(z) = (1 - part)*F(guess), part from 0 to 1.

For points that plain Newton iterations cannot reach because a law is almost flat at the guess and steep at the solution: an arrester that
has to take over a current, a solar cell behind an open breaker. The path is followed in parts that grow and shrink by themselves, from
parts so small that the flat law is left gently.
Source: Allgower & Georg, Introduction to Numerical Continuation Methods (2003), the global (Newton) homotopy.
"""

from __future__ import annotations

import numpy as np

from polewise.kernels.program import FloatArray
from polewise.solve.newton import NewtonOutcome, solve_newton
from polewise.solve.square_system import SquareSystem

FIRST_PART = 1e-9
SMALLEST_STEP = 1e-14
GROWTH, SHRINK = 8.0, 0.1
CORRECTIONS_MOST = 12  # of Newton at one part: more means the step was too long
PARTS_MOST = 400


def solve_by_residual_ramp(square: SquareSystem, start: FloatArray) -> NewtonOutcome:
    """A solution of F(z) = 0 on the path that begins at `start`; `converged` says whether the path got there.

    Args:
        start: shape (n,), a point at which F is finite.
    """
    offset = square.offset.copy()
    violation = square.residual(start)
    plain = solve_newton(square, start, limit=1)
    if not np.all(np.isfinite(violation)):
        return plain
    reached, z, step = 0.0, start.copy(), FIRST_PART
    outcome = plain
    try:
        for _ in range(PARTS_MOST):
            part = min(1.0, reached + step)
            square.offset[:] = offset + (1.0 - part) * violation
            trial = solve_newton(square, z, limit=CORRECTIONS_MOST, free_steps=2)
            if trial.converged:
                reached, z, outcome = part, trial.z, trial
                if reached >= 1.0:
                    break
                step *= GROWTH
            else:
                step *= SHRINK
                if step < max(SMALLEST_STEP, 1e-3 * reached * np.finfo(float).eps):
                    break
    finally:
        square.offset[:] = offset
    if reached >= 1.0:
        return outcome
    return NewtonOutcome(z, "stalled", square.residual(z), outcome.factors, outcome.iterations)
