"""The periodic orbit of a circuit that never rests, by shooting, with its Floquet multipliers as the verdict on stability.

One period is run from a guess of the states; Newton's method makes its end equal its beginning, each linear step solved by GMRES on differences
of runs. The multipliers are the eigenvalues of the period map's derivative at the orbit. Sources: Aprille & Trick 1972, Proc. IEEE 60(1)
(shooting); Knoll & Keyes 2004, J. Comput. Phys. 193 (Newton–Krylov); both recalled from memory.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from polewise.analysis import failures
from polewise.analysis.point import ComplexArray
from polewise.analysis.standpoint import Standpoint
from polewise.circuit.model import Quantity
from polewise.kernels.program import FloatArray
from polewise.solve import initial, transient
from polewise.solve.initial import DelayPast, Snapshot
from polewise.solve.problem import build_problem

TOLERANCE = 1e-11  # of the runs: differences of them are taken
STEP_RELATIVE = 1e-5  # of a difference, against the sizes of the states
NEWTON_LIMIT = 25
CLOSED_RELATIVE = 1e-8  # how well end and beginning must agree, against the sizes of the states over the period
STATES_MAX = 400
UNSTABLE_ABOVE = 1.0 + 1e-4  # a multiplier's size; differences of runs leave about that much doubt


@dataclass(frozen=True, slots=True, eq=False)
class Orbit:
    """A periodic state.

    Args:
        period_s: of the orbit.
        states: name → value at the period's beginning, SI.
        multipliers: Floquet multipliers, largest first; 0 for what is forgotten within a period.
        iterations: of Newton's method.
        names: states that the multipliers belong to.
    """

    period_s: float
    states: Mapping[str, float]
    multipliers: ComplexArray
    iterations: int
    names: tuple[str, ...]

    @property
    def stable(self) -> bool:
        """Whether small deviations from the orbit die out: every multiplier inside the unit circle."""
        return bool(np.all(np.abs(self.multipliers) < UNSTABLE_ABOVE)) if len(self.multipliers) else True

    @property
    def exponents(self) -> ComplexArray:
        """ln(multiplier)/period, 1/s, of multipliers that are not zero."""
        lasting = self.multipliers[np.abs(self.multipliers) > 1e-12]
        value: ComplexArray = np.log(lasting.astype(complex)) / self.period_s
        return value


class _Nothing:
    """A sink that forgets."""

    def write(self, rows: FloatArray) -> None:
        """Forget."""


class _PeriodMap:
    """States at the beginning → states a period later."""

    def __init__(self, stand: Standpoint, period_s: float) -> None:
        quantities: list[Quantity] = []
        self.stand, self.period_s = stand, period_s
        system = stand.equations(quantities)
        if system.delays:
            raise failures.refused(
                "orbit-with-delays", "the orbit of a circuit with delays or sliding averages needs their whole past and is not offered"
            )
        self.problem = build_problem(system)
        self.places = [k for k, u in enumerate(system.unknowns) if u.is_state and not u.held]
        self.names = tuple(system.unknowns[k].name for k in self.places)
        cold = initial.start_cold(self.problem, start_latches=stand.latches)
        self.parameters = {q.name: float(v) for q, v in zip(system.parameters, cold.p, strict=True) if q.rest is None}
        self.base = {u.name: float(v) for u, v in zip(system.unknowns, cold.x, strict=True)}
        self.start = cold.x[self.places].astype(float)
        self.past: dict[str, DelayPast] = {}

    def __call__(self, z: FloatArray) -> FloatArray:
        """Run one period."""
        unknowns = {**self.base, **dict(zip(self.names, (float(v) for v in z), strict=True))}
        begin = initial.start_from(self.problem, Snapshot(0.0, unknowns, self.parameters, self.past), start_latches=self.stand.latches)
        summary = transient.run(self.problem, start=begin, stop_s=self.period_s, tolerance=TOLERANCE, sink=_Nothing())
        assert summary.snapshot is not None
        end = summary.snapshot.unknowns
        return np.array([end[name] for name in self.names], dtype=float)


def find_orbit(stand: Standpoint, period_s: float, *, periods_first: int = 3) -> Orbit:
    """Find the orbit of a stated period.

    Args:
        period_s: of everything that drives the circuit, s.
        periods_first: run freely from the stated start values before Newton's method begins.
    Raises:
        AnalysisRefused: no orbit found, delays, or too many states.
        SolverError: a period could not be run.
    """
    from scipy.sparse.linalg import LinearOperator, gmres

    if period_s <= 0.0:
        raise failures.refused("orbit-period", "the period of an orbit must be positive")
    period_map = _PeriodMap(stand, period_s)
    n = len(period_map.places)
    if n > STATES_MAX:
        raise failures.refused("orbit-too-large", f"{n} states are more than an orbit is searched for ({STATES_MAX})")
    z = period_map.start
    seen = [np.abs(z)]
    for _ in range(periods_first):
        z = period_map(z)
        seen.append(np.abs(z))
    for count in range(1, NEWTON_LIMIT + 1):
        end = period_map(z)
        seen.append(np.abs(end))
        size = np.maximum.reduce(seen)
        size = np.where(size > 0.0, size, max(float(np.max(size, initial=0.0)), 1.0))
        gap = end - z
        if np.max(np.abs(gap) / size, initial=0.0) <= CLOSED_RELATIVE:
            return Orbit(
                period_s, dict(zip(period_map.names, map(float, z), strict=True)), _multipliers(period_map, z, end, size), count, period_map.names
            )

        def closing(y: FloatArray, z: FloatArray = z, end: FloatArray = end, size: FloatArray = size) -> FloatArray:
            return y - _turned(period_map, z, end, size, y)

        step, _ = gmres(LinearOperator((n, n), matvec=closing, dtype=float), gap / size, rtol=1e-6, atol=0.0, restart=min(n, 60), maxiter=3)
        z = z + step * size
    raise failures.refused(
        "no-orbit", f"no orbit of period {period_s:.6g} s was found", "is it the common period of everything that drives the circuit?"
    )


def _turned(period_map: _PeriodMap, z: FloatArray, end: FloatArray, size: FloatArray, y: FloatArray) -> FloatArray:
    """The period map's derivative times y, in units of the states' sizes, by a central difference."""
    norm = float(np.max(np.abs(y), initial=0.0))
    if norm == 0.0:
        return np.zeros_like(y)
    h = STEP_RELATIVE / norm
    value: FloatArray = (period_map(z + h * y * size) - period_map(z - h * y * size)) / (2.0 * h) / size
    return value


def _multipliers(period_map: _PeriodMap, z: FloatArray, end: FloatArray, size: FloatArray) -> ComplexArray:
    n = len(z)
    if n == 0:
        return np.zeros(0, dtype=complex)
    columns = [_turned(period_map, z, end, size, np.eye(n)[k]) for k in range(n)]
    found = np.linalg.eigvals(np.stack(columns, axis=1)).astype(complex)
    order: ComplexArray = found[np.argsort(-np.abs(found))]
    return order
