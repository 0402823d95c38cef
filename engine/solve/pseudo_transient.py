"""Letting the circuit settle in pseudo-time: implicit Euler with growing steps until Newton's method takes over."""

from __future__ import annotations

import math

import numpy as np

from polewise.kernels.program import FloatArray
from polewise.solve.linear import SparseMatrix
from polewise.solve.newton import NewtonOutcome, solve_newton
from polewise.solve.square_system import SquareSystem

STEP_FIRST_S = 1e-7
STEP_SMALLEST_S = 1e-14
STEP_LARGEST_S = 1e8
STEPS_MOST = 400
GROWTH, SHRINKING = 3.0, 4.0


class _Euler:
    """(q(z) - q_last) / dt + F(z) = 0."""

    def __init__(self, square: SquareSystem) -> None:
        self.square = square
        self.scale: FloatArray = square.scale
        self.dt = STEP_FIRST_S
        self.q_last: FloatArray = np.zeros(square.n)

    def residual(self, z: FloatArray) -> FloatArray:
        f = self.square.residual(z)
        return (self.square.charges() - self.q_last) / self.dt + f

    def jacobian(self) -> SparseMatrix:
        matrix = self.square.jacobian()
        return SparseMatrix(matrix.col_ptr, matrix.row_idx, matrix.values + self.square.charge_jacobian() / self.dt)


def settle_in_pseudo_time(square: SquareSystem, start: FloatArray) -> tuple[NewtonOutcome, FloatArray]:
    """Steps of pseudo-time from `start`, trying Newton's method on the state of rest once per decade.

    Returns: the last outcome of Newton's method on F(z) = 0, and the point that pseudo-time reached.
    Source: Kelley & Keyes, SIAM J. Numer. Anal. 35(2), 1998.
    """
    euler = _Euler(square)
    z, iterations, decade = start.copy(), 0, -4
    best: NewtonOutcome | None = None
    for _ in range(STEPS_MOST):
        square.residual(z)
        euler.q_last = square.charges()
        outcome = solve_newton(euler, z, limit=25, free_steps=12)
        iterations += outcome.iterations
        if not outcome.converged:
            euler.dt /= SHRINKING
            if euler.dt < STEP_SMALLEST_S:
                break
            continue
        z = outcome.z
        euler.dt *= GROWTH
        if math.log10(euler.dt) > decade or euler.dt > STEP_LARGEST_S:
            decade += 1
            trial = solve_newton(square, z, limit=25, free_steps=4)
            iterations += trial.iterations
            best = trial
            if trial.converged:
                break
        if euler.dt > STEP_LARGEST_S:
            break
    if best is None:
        best = NewtonOutcome(z, "stalled", square.residual(z), None, 0)
    return NewtonOutcome(best.z, best.reason, best.residual, best.factors, iterations), z
