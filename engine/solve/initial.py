"""Where a run begins: cold from stated values, settled at the operating point, or where another run stood."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from polewise.equations.system import EquationSystem
from polewise.grammar.diagnostics import Diagnostic
from polewise.kernels.program import FloatArray
from polewise.kernels.workspace import N_HISTORY_COUNT, N_HISTORY_FIRST, S_HISTORY_T0, S_T, Workspace
from polewise.solve import diagnosis
from polewise.solve.newton import solve_newton
from polewise.solve.operating_point import OperatingPoint, find_operating_point
from polewise.solve.problem import DaeProblem, reader
from polewise.solve.residual_ramp import solve_by_residual_ramp
from polewise.solve.square_system import Row, SquareSystem, kept_at_start, start_rows


@dataclass(frozen=True, slots=True, eq=False)
class DelayPast:
    """What a delayed expression was before the start.

    Args:
        value, slope: value + slope * (t - start) further back than the pieces reach.
        start_s: piece starts against the run's start, s, ascending, all <= 0. size_s: their lengths. values: shape (m, 4), at 0, c1, c2, 1 of each.
        reach_s: the time, against the run's start, at which `value` holds.
    """

    value: float
    slope: float
    start_s: FloatArray
    size_s: FloatArray
    values: FloatArray
    reach_s: float = 0.0


@dataclass(frozen=True, slots=True, eq=False)
class Snapshot:
    """Where a run stood, by name, so that another study of the same circuit can go on from there.

    Args:
        time_s: in the study it was taken from.
        unknowns, parameters: values, SI.
        delays: past of each delayed expression, by the name of its parameter, times against time_s.
        next_ticks: of each clocked parameter, s of that study's time; a tick at time_s itself may be still to come.
        truths, timers: conditions of events as last read, and until when (s) those that must stay true for a while have to, by name.
    """

    time_s: float
    unknowns: Mapping[str, float]
    parameters: Mapping[str, float]
    delays: Mapping[str, DelayPast]
    next_ticks: Mapping[str, float] = field(default_factory=dict)
    truths: Mapping[str, bool] = field(default_factory=dict)
    timers: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class StartState:
    """A consistent point where a run begins.

    Args:
        x: shape (n,). p: shape (n_p,).
        past: of each delay line, in the system's order.
        kind: how it was found. warnings: what the search had to say.
        time_s: of the study. continues: the run that goes on here, with its events and clocks; None at a study's start.
    """

    x: FloatArray
    p: FloatArray
    past: tuple[DelayPast, ...]
    kind: Literal["cold", "settled", "from"]
    warnings: tuple[Diagnostic, ...] = ()
    time_s: float = 0.0
    continues: Snapshot | None = None


def start_settled(problem: DaeProblem, *, guess: FloatArray | None = None, start_latches: Mapping[str, float] | None = None) -> StartState:
    """At the operating point. Raises as find_operating_point does."""
    return settled_at(problem, find_operating_point(problem, guess=guess, start_latches=start_latches))


def settled_at(problem: DaeProblem, point: OperatingPoint) -> StartState:
    """At an operating point that is known."""
    return StartState(point.x, point.p, _past(problem.system, point.x, point.p), "settled", point.warnings)


def start_cold(problem: DaeProblem, *, start_latches: Mapping[str, float] | None = None) -> StartState:
    """From the stated values of states and latches; everything else follows.

    Raises:
        StartFailure, SingularSystem: no consistent values, or an unknown that nothing determines.
    """
    system = problem.system
    square = SquareSystem(system, start_rows(system))
    _set_latches(square, start_latches or {})
    return _solved(problem, square, np.array([u.initial for u in system.unknowns]), "cold")


def start_from(problem: DaeProblem, snapshot: Snapshot, *, start_latches: Mapping[str, float] | None = None) -> StartState:
    """Where another run stood: its states, latches and held values; what is new here starts as in a cold start."""
    system = problem.system
    # Held values that the snapshot knows are not solved for.
    rows = [r for r in start_rows(system) if r.kind == "x" or system.parameters[r.index].name not in snapshot.parameters]
    square = SquareSystem(system, rows)
    for j, parameter in enumerate(system.parameters):
        square.p[j] = snapshot.parameters.get(parameter.name, square.p[j])
    _set_latches(square, start_latches or {})
    start = np.array([snapshot.unknowns.get(u.name, u.initial) for u in system.unknowns])
    state = _solved(problem, square, start, "from")
    past = tuple(snapshot.delays.get(system.parameters[d.parameter].name, own) for d, own in zip(system.delays, state.past, strict=True))
    return StartState(state.x, state.p, past, "from", state.warnings)


def start_within(problem: DaeProblem, snapshot: Snapshot) -> StartState:
    """Go on with the same study in the middle of it, perhaps in another picture of the poles: time, states, latches, clocks, events."""
    system = problem.system
    rows = [r for r in start_rows(system) if r.kind == "x" or system.parameters[r.index].name not in snapshot.parameters]
    square = SquareSystem(system, rows)
    square.at_time(snapshot.time_s)
    for j, parameter in enumerate(system.parameters):
        square.p[j] = snapshot.parameters.get(parameter.name, square.p[j])
    start = np.array([snapshot.unknowns.get(u.name, u.initial) for u in system.unknowns])
    state = _solved(problem, square, start, "from", snapshot.time_s)
    past = tuple(snapshot.delays.get(system.parameters[d.parameter].name, own) for d, own in zip(system.delays, state.past, strict=True))
    return StartState(state.x, state.p, past, "from", state.warnings, snapshot.time_s, snapshot)


def rescue_restart(problem: DaeProblem, work: Workspace) -> bool:
    """Find the consistent point that the kernel's own iterations missed, with charges and fluxes as kept; writes it into work.x.

    Returns whether it was found.
    """
    system = problem.system
    rows = [Row("x", i, u.residual if u.charge is None else u.charge) for i, u in enumerate(system.unknowns)]
    square = SquareSystem(system, rows)
    square.p[:] = work.p
    square.at_time(float(work.state[S_T]))
    square.offset[:] = np.where(problem.program.q_reg >= 0, work.q_keep, 0.0)
    outcome = solve_by_residual_ramp(square, work.x.copy())
    if outcome.converged:
        work.x[:] = outcome.z
    return outcome.converged


def take_snapshot(problem: DaeProblem, work: Workspace) -> Snapshot:
    """Where a run stands now."""
    system = problem.system
    t, first, count, capacity = float(work.state[S_T]), int(work.counter[N_HISTORY_FIRST]), int(work.counter[N_HISTORY_COUNT]), len(work.history_t)
    ring = (first + np.arange(count)) % max(capacity, 1)
    past = {}
    for d, line in enumerate(system.delays):
        reach = float(work.state[S_HISTORY_T0]) - t
        past[system.parameters[line.parameter].name] = DelayPast(
            float(work.delay_value0[d]),
            float(work.delay_slope0[d]),
            work.history_t[ring] - t,
            work.history_h[ring].copy(),
            work.history_v[ring, d, :].copy(),
            reach,
        )
    return Snapshot(
        t,
        {u.name: float(v) for u, v in zip(system.unknowns, work.x, strict=True)},
        {q.name: float(v) for q, v in zip(system.parameters, work.p, strict=True)},
        past,
    )


def _set_latches(square: SquareSystem, start_latches: Mapping[str, float]) -> None:
    index_of = {q.name: j for j, q in enumerate(square.system.parameters)}
    for name, value in start_latches.items():
        square.p[index_of[name]] = value


def _solved(problem: DaeProblem, square: SquareSystem, start: FloatArray, kind: Literal["cold", "from"], time_s: float = 0.0) -> StartState:
    """States as in `start`, the rest from their laws."""
    system = problem.system
    states = [i for i, unknown in enumerate(system.unknowns) if unknown.is_state]
    kept = reader(system, [kept_at_start(system, i) for i in states])(start, time_s, square.p)
    square.offset[states] = kept
    z = np.concatenate([start, square.p[square.solved_p]])
    outcome = solve_newton(square, z)
    if not outcome.converged:
        # A guess far from zero for everything that isn't stated often is better than zero.
        again = np.where(z == 0.0, 1e-2 * square.scale, z)
        outcome = solve_newton(square, again)
    if not outcome.converged:
        outcome = solve_by_residual_ramp(square, z)
    factors = outcome.factors
    if factors is not None and not factors.exact:
        _, right, _ = factors.smallest_singular()
        row = square.rows[int(np.argmax(np.abs(right)))]
        raise diagnosis.start_singular(diagnosis.named_row(system, row.kind, row.index))
    if not outcome.converged:
        f = outcome.residual
        size = factors.row_size if factors is not None else np.ones(square.n)
        row = square.rows[int(np.argmax(np.where(np.isfinite(f), np.abs(f) / size, np.inf)))]
        raise diagnosis.start_failed(diagnosis.named_row(system, row.kind, row.index))
    x, p = outcome.z[: square.n_x].copy(), square.parameters_of(outcome.z)
    return StartState(x, p, _past(system, x, p), kind)


def _past(system: EquationSystem, x: FloatArray, p: FloatArray) -> tuple[DelayPast, ...]:
    """Delayed expressions stood as they are at the start, or moved along their stated slope."""
    zero = system.graph.constant(0.0)
    nodes = [node for d in system.delays for node in (d.expression, zero if d.start_slope is None else d.start_slope)]
    values = reader(system, nodes)(x, 0.0, p)
    nothing = np.zeros(0)
    return tuple(DelayPast(values[2 * k], values[2 * k + 1], nothing, nothing, np.zeros((0, 4))) for k in range(len(system.delays)))
