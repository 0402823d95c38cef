"""Finding why there is no state of rest: rows that read time, integrators that can't rest or that fight, unknowns that nothing determines."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from polewise.equations.system import EquationSystem, Unknown
from polewise.expression.derivative import Differentiator
from polewise.kernels.program import FloatArray
from polewise.solve.linear import SparseMatrix, null_spaces, row_sizes
from polewise.solve.newton import solve_newton
from polewise.solve.square_system import Row, SquareSystem, rest_rows

# Shares of a null vector's largest entry from which on a row or an unknown takes part. Unknowns have scales of their own: a thousandth in a duty may
# stand beside a hundred amperes; what takes no part at all is rounding.
ROW_SHARE, UNKNOWN_SHARE = 1e-3, 1e-8
PERTURBATION = 1e-4  # of |z| + scale: beside a point, all the same
GENERIC = 0.2  # of |z| + scale: far enough for no value to be special
RESIDUAL_ZERO = 1e-9  # of a row's size: below this the row holds


@dataclass(frozen=True, slots=True)
class RestFailure:
    """What was found.

    Args:
        kind: "integrator": each of `rows` is an integrator whose input can't vanish; "fight": `rows` are integrators that want different
            values of one quantity; "share": integrators that want the same and leave open who does what; "singular": `rows` belong to unknowns
            that the equations leave open; "unknown": none of these, `rows` are those that hold least.
        rates: of each row, what stays of its rate (1/s times the unknown's unit), for integrators.
    """

    kind: Literal["integrator", "fight", "share", "singular", "unknown"]
    rows: tuple[Row, ...]
    rates: tuple[float, ...]


def rows_that_read_time(system: EquationSystem) -> list[Row]:
    """Rows of the state of rest that change with time by themselves. A step in time (`a if time > 1 s otherwise b`) is none."""
    rows = rest_rows(system)
    gradients = Differentiator(system.graph, [system.time]).gradients([r.residual for r in rows])
    return [row for row, gradient in zip(rows, gradients, strict=True) if gradient]


def explain(square: SquareSystem, ends: list[FloatArray], start: FloatArray) -> RestFailure:
    """Why F(z) = 0 was not solved.

    Args:
        ends: where the searches ended; the first at which the Jacobian is singular is explained.
        start: where they began: there limits seldom hide that integrators fight.
    """
    found = [one for one in (explain_singular(square, z) for z in ends) if one is not None]
    generic = explain_singular(square, _beside(square, start, GENERIC))
    fights = [one for one in (*found, generic) if one is not None and one.kind in ("fight", "share")]
    if fights:
        return fights[0]
    if found:
        return found[0]
    violation = _violation(square, ends[0])
    worst = np.argsort(-violation)[:3]
    rows = tuple(square.rows[k] for k in worst if violation[k] > RESIDUAL_ZERO) or (square.rows[int(worst[0])],)
    return RestFailure("unknown", rows, tuple(0.0 for _ in rows))


def explain_singular(square: SquareSystem, z: FloatArray) -> RestFailure | None:
    """What a singular Jacobian at z means; None where it is regular."""
    # A Jacobian that is singular at one point only (the turning point of a square) says nothing: look a little beside it too.
    for point in (_beside(square, z, PERTURBATION), z):
        if not np.all(np.isfinite(square.residual(point))):
            return None
        matrix = square.jacobian()
        right, left = null_spaces(matrix, square.scale)
        if right.shape[1] == 0:
            return None
    moves, bound = _taking_part(right, UNKNOWN_SHARE), _taking_part(left, ROW_SHARE)
    integrators = [k for k in np.flatnonzero(moves & bound).tolist() if _is_integrator(square, k)]
    if not integrators:
        # Rows without any unknown have no right vector of their own.
        empty = np.bincount(matrix.row_idx, np.abs(matrix.values), minlength=matrix.n) == 0.0
        integrators = [k for k in np.flatnonzero(bound & empty).tolist() if _is_integrator(square, k)]
    if integrators:
        rows = tuple(square.rows[k] for k in integrators)
        f = square.residual(_rest_of_circuit(square, z, integrators))
        rates = tuple(_rate(square, k, f) for k in integrators)
        if len(integrators) > right.shape[1]:
            scaled = f / row_sizes(square.jacobian(), square.scale)
            return RestFailure("share" if _agree(left, scaled) else "fight", rows, rates)
        return RestFailure("integrator", rows, rates)
    size = np.max(np.abs(right), axis=1)
    order = np.argsort(-size)
    named = tuple(square.rows[int(k)] for k in order[:3] if size[k] > 0.5 * size[order[0]])
    return RestFailure("singular", named, tuple(0.0 for _ in named))


def _beside(square: SquareSystem, z: FloatArray, distance: float) -> FloatArray:
    """A point beside z in no special direction."""
    beside: FloatArray = z + distance * (square.scale + np.abs(z)) * np.random.default_rng(1).uniform(-1.0, 1.0, square.n)
    return beside


def _agree(left: FloatArray, scaled: FloatArray) -> bool:
    """Whether rows that no unknown can change against each other already agree: u F = 0 for every left null vector u."""
    against, together = np.abs(left.T @ scaled), np.abs(left).T @ np.abs(scaled)
    return bool(np.all(against <= RESIDUAL_ZERO * together + 1e-300))


class _Pinned:
    """F(z) = 0 with some unknowns held where they are."""

    def __init__(self, square: SquareSystem, z: FloatArray, pinned: list[int]) -> None:
        self.square, self.pinned = square, np.array(pinned, dtype=np.int64)
        self.value = z[self.pinned]
        self.scale: FloatArray = square.scale

    def residual(self, z: FloatArray) -> FloatArray:
        f = self.square.residual(z)
        f[self.pinned] = z[self.pinned] - self.value
        return f

    def jacobian(self) -> SparseMatrix:
        matrix = self.square.jacobian()
        values = matrix.values.copy()
        row = np.isin(matrix.row_idx, self.pinned)
        values[row] = np.where(matrix.row_idx == matrix.column_of_entry, 1.0, 0.0)[row]
        return SparseMatrix(matrix.col_ptr, matrix.row_idx, values)


def _rest_of_circuit(square: SquareSystem, z: FloatArray, integrators: list[int]) -> FloatArray:
    """z with everything but the integrators at rest; z itself where that isn't found."""
    outcome = solve_newton(_Pinned(square, z, integrators), z, limit=40)
    return outcome.z if outcome.converged else z


def _taking_part(vectors: FloatArray, share: float) -> NDArray[np.bool_]:
    size = np.sqrt(np.sum(vectors**2, axis=1))
    taking: NDArray[np.bool_] = size > share * float(np.max(size, initial=0.0))
    return taking


def _unknown(square: SquareSystem, k: int) -> Unknown | None:
    row = square.rows[k]
    return square.system.unknowns[row.index] if row.kind == "x" else None


def _is_integrator(square: SquareSystem, k: int) -> bool:
    """States marked so, and sampled values whose update only adds to them (p - (p + input) does not depend on p)."""
    unknown = _unknown(square, k)
    if unknown is not None:
        return unknown.integrator
    matrix = square.jacobian()
    return not np.any(matrix.values[(matrix.row_idx == k) & (matrix.column_of_entry == k)])


def _rate(square: SquareSystem, k: int, f: FloatArray) -> float:
    """-f/(dq/dx) of an integrator's own row."""
    matrix = square.jacobian()
    own = (matrix.row_idx == k) & (matrix.column_of_entry == k)
    slope = float(np.sum(square.charge_jacobian()[own]))
    return -float(f[k]) / slope if slope != 0.0 else -float(f[k])


def _violation(square: SquareSystem, z: FloatArray) -> FloatArray:
    f = np.nan_to_num(square.residual(z), nan=np.inf)
    return np.abs(f) / row_sizes(square.jacobian(), square.scale)
