"""The periodic steady state of the edge-by-edge picture by shooting: the state that one common period leads back to itself.

Newton's method on r(z) = state after one period - z, z = the states and the held sampled values just before the period's start; the
derivative by differences, one run of a period per entry. Its eigenvalues are the multipliers of the periodic state: one beyond the unit circle
means that the true circuit leaves it (subharmonic oscillation, an unstable loop).

Source: Aprille & Trick, Proc. IEEE 60(1), 1972 (recalled from memory).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from polewise.analysis.edge_window import Stretch, moved_states
from polewise.analysis.point import ComplexArray
from polewise.equations.system import EquationSystem
from polewise.errors import Chatter, SolverError
from polewise.kernels.program import FloatArray
from polewise.results.study_run import Nothing
from polewise.solve import transient
from polewise.solve.initial import Snapshot, StartState, settled_at
from polewise.solve.operating_point import OperatingPoint
from polewise.solve.problem import DaeProblem

ROUNDS_MOST = 25  # of Newton's method
REACH_MOST = 20.0  # sizes of a state that a step may move it
SHARE_LEAST = 1e-3  # of a step, where the whole one makes things worse
STATES_MOST = 300  # more would take too many runs of a period; periods are run instead
DIFFERENCE_RELATIVE = 1e-5  # of a state's size, to differentiate
SIZE_LEAST = 1e-3  # smallest size of a state for that, SI
RESIDUAL_RELATIVE = 1e-10  # of a state's size: closer returns are rounding
PERIODS_RUN = 400  # of the slowest pole, where shooting can't be used or fails
SHOOTING_TOLERANCE = 1e-10


@dataclass(frozen=True, slots=True, eq=False)
class PeriodicStart:
    """Where a periodic steady state begins.

    Args:
        start: at time 0. found: whether it repeats itself within rounding. residual: largest difference after a period, parts of a size.
        multipliers: of the period map; empty where periods were run instead. note: how it was found, a sentence.
    """

    start: StartState
    found: bool
    residual: float
    multipliers: ComplexArray
    note: str


def resting_snapshot(system: EquationSystem, problem: DaeProblem, point: OperatingPoint) -> Snapshot:
    """An averaged operating point as a place from which a run may go on."""
    start = settled_at(problem, point)
    return Snapshot(
        0.0,
        {u.name: float(v) for u, v in zip(system.unknowns, start.x, strict=True)},
        {q.name: float(v) for q, v in zip(system.parameters, start.p, strict=True)},
        {system.parameters[d.parameter].name: past for d, past in zip(system.delays, start.past, strict=True)},
    )


def find_periodic(stretch: Stretch, problem: DaeProblem, snapshot: Snapshot) -> PeriodicStart:
    """The periodic steady state near an averaged operating point.

    Args:
        stretch: the circuit in both pictures. problem: with every edge. snapshot: the operating point.
    """
    start = stretch.start(problem, snapshot)
    period = stretch.common_period_s
    start, _ = stretch.matched(problem, start, snapshot.unknowns, stretch.span_s)
    count = len(_Shooting(problem, 1.0, 1.0, snapshot.unknowns).states)
    if period is None:
        return _run_on(stretch, problem, start, "the poles' rates have no common period, so there is no periodic state")
    if problem.system.delays:
        return _run_on(stretch, problem, start, "delays and sliding averages remember more than a state, so it was not shot for")
    if count > STATES_MOST:
        return _run_on(stretch, problem, start, f"{count} states are too many to shoot for")
    shooting = _Shooting(problem, period, SHOOTING_TOLERANCE, snapshot.unknowns)
    try:
        return shooting.solve(start)
    except Chatter:
        raise
    except SolverError:
        return _run_on(stretch, problem, start, "shooting failed")


def _run_on(stretch: Stretch, problem: DaeProblem, start: StartState, why: str) -> PeriodicStart:
    """Run periods until the ripple has its phase; the run's end becomes the start."""
    periods = PERIODS_RUN
    end = periods * stretch.carriers.longest_s
    summary = transient.run(problem, start=start, stop_s=end, tolerance=SHOOTING_TOLERANCE * 100, sink=Nothing())
    assert summary.snapshot is not None
    from polewise.solve.initial import start_within

    later = start_within(problem, summary.snapshot)
    return PeriodicStart(later, False, float("nan"), np.zeros(0, dtype=complex), f"{why}; {periods} periods of the slowest pole were run instead")


class _Shooting:
    """The map over one period of one problem."""

    def __init__(self, problem: DaeProblem, period_s: float, tolerance: float, known: Mapping[str, float]) -> None:
        self.problem, self.period_s, self.tolerance = problem, period_s, tolerance
        self.states = moved_states(problem, known)
        starts = {q.name for q in problem.system.parameters if q.name.endswith(".period_start")}
        clocked = {j for c in problem.system.clocks for j, _ in c.updates}
        parameters = problem.system.parameters
        self.held = [j for j in sorted(clocked) if parameters[j].name not in starts and not parameters[j].is_condition]
        names = {u.name: k for k, u in enumerate(problem.system.unknowns)}
        self._end_of = [problem.system.unknowns[k].name for k in self.states]
        self._held_names = [parameters[j].name for j in self.held]
        assert all(name in names for name in self._end_of)

    def place(self, start: StartState) -> FloatArray:
        """z of a start."""
        return np.concatenate([start.x[self.states], start.p[self.held]])

    def at(self, start: StartState, z: FloatArray) -> StartState:
        """The start with another z."""
        x, p = start.x.copy(), start.p.copy()
        x[self.states] = z[: len(self.states)]
        p[self.held] = z[len(self.states) :]
        return replace(start, x=x, p=p)

    def after(self, start: StartState, z: FloatArray) -> FloatArray:
        """z one period later."""
        stop = start.time_s + self.period_s
        summary = transient.run(self.problem, start=self.at(start, z), stop_s=stop, tolerance=self.tolerance, sink=Nothing())
        snapshot = summary.snapshot
        assert snapshot is not None
        return np.array([*(snapshot.unknowns[n] for n in self._end_of), *(snapshot.parameters[n] for n in self._held_names)])

    def solve(self, start: StartState) -> PeriodicStart:
        """Newton's method with its derivative renewed while it pays."""
        z = self.place(start)
        slope = np.zeros((z.size, z.size))
        best, best_residual = z, np.inf
        rounds, share = 0, 1.0
        whole: FloatArray = np.zeros(z.size)
        for rounds in range(1, ROUNDS_MOST + 1):  # noqa: B007 (told in the note)
            end = self.after(start, z)
            size = np.maximum(np.abs(z), SIZE_LEAST)
            residual = float(np.max(np.abs(end - z) / size, initial=0.0))
            if not np.isfinite(residual) or residual > best_residual:
                share *= 0.25  # too far: back to the best one, a shorter step
                if share < SHARE_LEAST:
                    break
                z = best + share * whole
                continue
            settled = best_residual < 1e3 * RESIDUAL_RELATIVE and residual > 0.5 * best_residual
            best, best_residual = z, residual
            if residual < RESIDUAL_RELATIVE or settled:
                break
            slope = self._slope(start, z, end)
            share = 1.0
            whole = np.asarray(np.linalg.lstsq(np.eye(z.size) - slope, end - z, rcond=1e-13)[0], dtype=np.float64)
            if float(np.max(np.abs(whole) / size, initial=0.0)) > REACH_MOST:  # a period in which nothing switched tells no slope: run on
                whole, best_residual = end - z, np.inf
            z = z + whole
        found = best_residual < 1e3 * RESIDUAL_RELATIVE
        multipliers = np.linalg.eigvals(slope).astype(complex) if slope.any() else np.zeros(0, dtype=complex)
        note = f"periodic steady state by shooting in {rounds} rounds, repeating to {best_residual:.1g}"
        largest = float(np.max(np.abs(multipliers), initial=0.0))
        if largest > 1.0 + 1e-6:
            note += f"; it is not stable: a disturbance grows {largest:.3g} times per period"
        if not found:
            note += "; no repeating state was found to better than that"
        return PeriodicStart(self.at(start, best), found, best_residual, multipliers, note)

    def _slope(self, start: StartState, z: FloatArray, end: FloatArray) -> FloatArray:
        columns = []
        for k in range(z.size):
            step = DIFFERENCE_RELATIVE * max(abs(z[k]), SIZE_LEAST)
            moved = z.copy()
            moved[k] += step
            columns.append((self.after(start, moved) - end) / step)
        return np.column_stack(columns) if columns else np.zeros((0, 0))
