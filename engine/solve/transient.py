"""The driver of a run: calls the kernels, acts on their status, feeds a sink, reports progress, stops when asked to."""

from __future__ import annotations

import math
import time as clock
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from polewise.errors import SolverError
from polewise.grammar.diagnostics import Diagnostic
from polewise.kernels.opcodes import Status
from polewise.kernels.program import FloatArray, IntArray
from polewise.kernels.workspace import (
    FLAG_AFTER,
    N_EVENTS,
    N_FACTORISATIONS,
    N_JACOBIANS,
    N_LOCATED,
    N_MADE_JUMP,
    N_NEEDS_RESTART,
    N_NEWTON_FAILED,
    N_REG_AT_START,
    N_REJECTED,
    N_RESIDUALS,
    N_RESTARTS,
    N_ROWS,
    N_SOLVES,
    N_STEPS,
    N_TICKS,
    S_BAND,
    S_H_MAX,
    S_RTOL,
    S_T,
    Workspace,
)
from polewise.solve import diagnosis, kernel_calls
from polewise.solve.averages import Rebase
from polewise.solve.events import EventEntry, Events, merge_distance
from polewise.solve.initial import Snapshot, StartState, rescue_restart, take_snapshot
from polewise.solve.problem import DaeProblem, new_workspace
from polewise.solve.run_failure import explain_failure
from polewise.solve.trajectory import Sink

STEPS_FIRST_CALL = 200  # of the first call of the kernel; later ones follow the clock
STEPS_PER_PERIOD_LEAST = 12  # of the fastest sine of time
STEPS_FEWEST = 50  # of a run: what only outputs show is drawn with at least so many points
CALL_AIM_S = 0.1  # wall time of a call: how often progress is told and a stop is heeded
STEPS_LARGEST_CALL = 1_000_000
GROWN_MOST = 40  # times that buffers may double
BAND_WIDENING = 100.0  # how much wider the band of values that count as zero becomes where switches flip to and fro
BAND_WIDEST = 1e6  # times the band of the program: a millionth of what a switch compares
ROWS_KEPT_FREE = 64  # of the record buffer, before events write to it


@dataclass(frozen=True, slots=True)
class Counters:
    """What a run cost.

    Args:
        wall_s: time on the clock. Others: counts as named.
    """

    steps: int
    rejected: int
    newton_failures: int
    residuals: int
    jacobians: int
    factorisations: int
    newton_iterations: int
    switch_flips: int
    sample_instants: int
    restarts: int
    wall_s: float


@dataclass(frozen=True, slots=True, eq=False)
class RunSummary:
    """How a run ended.

    Args:
        complete: whether it reached its stop time.
        reason: "" for a complete one, else "stopped", "step limit" or "failed".
        end_s: time reached, s.
        events: what happened, in order.
        warnings: of the start and of events that were never reached.
        snapshot: where it stands; None after a failure.
    """

    complete: bool
    reason: str
    end_s: float
    events: tuple[EventEntry, ...]
    warnings: tuple[Diagnostic, ...]
    counters: Counters
    snapshot: Snapshot | None


Progress = Callable[[float, float], None]


def run(
    problem: DaeProblem,
    *,
    start: StartState,
    stop_s: float,
    tolerance: float,
    sink: Sink,
    progress: Progress | None = None,
    should_stop: Callable[[], bool] | None = None,
    max_steps: int | None = None,
    record_rows: int = 4096,
) -> RunSummary:
    """Integrate from `start` at its time (0 but for a run that goes on) to stop_s.

    Args:
        start: consistent, see solve.initial.
        stop_s: s, > 0.
        tolerance: relative tolerance of every unknown; absolute: tolerance times its scale.
        sink: gets every recorded row, in order, the last ones before this returns or raises.
        progress: called with (time reached, stop_s) about ten times a second.
        should_stop: asked as often; True ends the run, what is done is kept. So does a KeyboardInterrupt.
        max_steps: most accepted steps.
        record_rows: rows held before the sink gets them.
    Raises:
        SolverError: with what failed, where and when; `partial` holds the RunSummary until then.
    """
    return _Run(problem, start, stop_s, tolerance, sink, progress, should_stop, max_steps, record_rows).go()


class _Run:
    """One run and its workspace."""

    def __init__(
        self,
        problem: DaeProblem,
        start: StartState,
        stop_s: float,
        tolerance: float,
        sink: Sink,
        progress: Progress | None,
        should_stop: Callable[[], bool] | None,
        max_steps: int | None,
        record_rows: int,
    ) -> None:
        self.problem, self.stop_s, self.sink = problem, stop_s, sink
        self.progress, self.should_stop, self.max_steps = progress, should_stop, max_steps
        self.began = clock.perf_counter()
        self.work = new_workspace(problem, tolerance, record_rows=record_rows)
        self.start = start
        self.events = Events(problem, self.work, self._restart)
        self.rebase = Rebase(problem)
        late = [diagnosis.late_event(t, stop_s, span) for t, span in self.events.late(stop_s)]
        self.warnings = (*start.warnings, *late)
        self.grown = 0

    def go(self) -> RunSummary:
        """The whole run."""
        reason = "failed"
        try:
            self._begin()
            reason = self._loop()
        except KeyboardInterrupt:
            reason = "stopped"
        except SolverError as error:
            self._flush()
            error.partial = self._summary("failed")
            raise
        self._flush()
        return self._summary(reason)

    def _begin(self) -> None:
        """Put the start into the workspace, make it consistent, record it, and do all that is due there."""
        work, program = self.work, self.problem.program
        work.x[:] = self.start.x
        work.p[:] = self.start.p
        wave_step_s = _wave_step(self.problem.wave_period_s, float(work.state[S_RTOL]))
        work.state[S_H_MAX] = min((self.stop_s - self.start.time_s) / STEPS_FEWEST, wave_step_s)
        work.clock_offset[:] = [c.offset_s for c in self.problem.system.clocks]
        work.state[S_T] = self.start.time_s
        work.clock_count[:] = _first_ticks(self.problem, self.start)
        self.rebase.last_s = self.start.time_s
        if len(program.delay_p):
            _load_past(work, self.start)
        kernel_calls.run_residual_live(program, work)
        work.q_keep[:] = np.where(program.q_reg >= 0, work.reg[program.q_reg], 0.0)
        self.events.work = self._restart(work)
        kernel_calls.record_point(program, self.work, FLAG_AFTER)
        self.events.begin(self.start.continues)

    def _loop(self) -> str:
        """Advance from instant to instant. Returns "" at the stop time, else why it ended before."""
        budget, told = STEPS_FIRST_CALL, self.began
        while True:
            t = float(self.work.state[S_T])
            if t >= self.stop_s - merge_distance(self.stop_s):
                return ""
            target = min(self.stop_s, self.events.next_time(), self.rebase.next_time(t))
            if self.max_steps is not None:
                budget = min(budget, self.max_steps - int(self.work.counter[N_STEPS]))
                if budget <= 0:
                    return "step limit"
            before, steps = clock.perf_counter(), int(self.work.counter[N_STEPS])
            status = kernel_calls.advance(self.problem.program, self.work, target, budget)
            now = clock.perf_counter()
            self._act_on(status, target)
            done = int(self.work.counter[N_STEPS]) - steps
            if done and now > before:
                budget = int(min(STEPS_LARGEST_CALL, max(STEPS_FIRST_CALL, done * CALL_AIM_S / (now - before))))
            if now - told >= CALL_AIM_S:
                told = now
                if self.progress is not None:
                    self.progress(float(self.work.state[S_T]), self.stop_s)
                if self.should_stop is not None and self.should_stop():
                    return "stopped"
            if status == Status.STOPPED:
                return "stopped"

    def _act_on(self, status: Status, target: float) -> None:
        """What a status of advance asks for."""
        work = self.work
        if status in (Status.STEP_LIMIT, Status.STOPPED):
            return
        if status == Status.BUFFER_FULL:
            self._flush()
        elif status in (Status.HISTORY_FULL, Status.FACTORS_FULL):
            self._grow(status)
        elif status == Status.EVENT or (status == Status.DONE and target < self.stop_s) or self._due(target):
            if work.counter[N_ROWS] > len(work.record) - ROWS_KEPT_FREE:
                self._flush()
            if status == Status.DONE and self.rebase.next_time(float(work.state[S_T])) <= float(work.state[S_T]) + merge_distance(target):
                self.rebase.apply(work)
            self.events.instant()
            self.work = self.events.work
        elif status in (Status.NO_CONVERGENCE, Status.NOT_FINITE) and work.counter[N_NEEDS_RESTART] == 1:
            self._restart(work)
        elif status == Status.CHATTER and work.state[S_BAND] < BAND_WIDEST:
            # Flips without end are often rounding: a voltage that only leakage holds is known to few digits. Let more of it count as zero.
            work.state[S_BAND] *= BAND_WIDENING
            work.counter[N_LOCATED] = 0
            self._restart(work)
        elif status != Status.DONE:
            raise explain_failure(self.problem, work, status)

    def _due(self, target: float) -> bool:
        """Whether the stop time is itself an instant with events."""
        t = float(self.work.state[S_T])
        return t >= target - merge_distance(target) and self.events.next_time() <= t + merge_distance(t)

    def _restart(self, work: Workspace) -> Workspace:
        """A consistent point at the present time; the workspace may be replaced by a larger one."""
        self.work = work
        rescued = False
        while True:
            guess = self.work.x.copy()
            status = kernel_calls.restart(self.problem.program, self.work)
            if status in (Status.NO_CONVERGENCE, Status.NOT_FINITE, Status.CHATTER) and not rescued:
                rescued = True
                if status == Status.CHATTER:
                    self.work.state[S_BAND] = max(self.work.state[S_BAND], BAND_WIDEST)
                self.work.x[:] = guess
                if rescue_restart(self.problem, self.work):
                    kernel_calls.run_residual_live(self.problem.program, self.work)
                    continue
            if status == Status.DONE:
                self.work.counter[N_NEEDS_RESTART] = 0
                self.work.counter[N_MADE_JUMP] = 1
                self.events.work = self.work
                return self.work
            if status != Status.FACTORS_FULL:
                raise explain_failure(self.problem, self.work, status, in_restart=True)
            self._grow(status)

    def _grow(self, status: Status) -> None:
        self.grown += 1
        if self.grown > GROWN_MOST:
            raise explain_failure(self.problem, self.work, status)
        self.work = kernel_calls.larger(self.problem.program, self.work, status)
        self.events.work = self.work

    def _flush(self) -> None:
        """Empty the record buffer into the sink."""
        rows = int(self.work.counter[N_ROWS])
        if rows:
            self.sink.write(self.work.record[:rows])
            self.work.counter[N_ROWS] = 0

    def _summary(self, reason: str) -> RunSummary:
        work, count = self.work, self.work.counter
        counters = Counters(
            steps=int(count[N_STEPS]),
            rejected=int(count[N_REJECTED]),
            newton_failures=int(count[N_NEWTON_FAILED]),
            residuals=int(count[N_RESIDUALS]),
            jacobians=int(count[N_JACOBIANS]),
            factorisations=int(count[N_FACTORISATIONS]),
            newton_iterations=int(count[N_SOLVES]),
            switch_flips=int(count[N_EVENTS]),
            sample_instants=int(count[N_TICKS]),
            restarts=int(count[N_RESTARTS]),
            wall_s=clock.perf_counter() - self.began,
        )
        snapshot = self.events.noted(take_snapshot(self.problem, work)) if reason != "failed" else None
        return RunSummary(reason == "", reason, float(work.state[S_T]), tuple(self.events.state.log), self.warnings, counters, snapshot)


def _first_ticks(problem: DaeProblem, start: StartState) -> IntArray:
    """Number of each clock's first firing at or after the start; a run that goes on does not fire again what has fired at that very instant."""
    t, counts = start.time_s, np.zeros(len(problem.system.clocks), dtype=np.int64)
    if start.continues is None and t == 0.0:
        return counts
    known = start.continues.next_ticks if start.continues is not None else {}
    distance = merge_distance(t)
    for k, ticking in enumerate(problem.system.clocks):
        names = [problem.system.parameters[j].name for j, _ in ticking.updates]
        fired = any(known.get(name, t) > t + distance for name in names)
        least = t + distance if fired else t - distance
        counts[k] = max(0, int(np.ceil((least - ticking.offset_s) / ticking.period_s)))
    return counts


def _wave_step(period_s: float, tolerance: float) -> float:
    """Step in which the cubic of a step follows a sine to the tolerance: its error is (w h)^4/384 of the amplitude.

    Source: remainder of cubic interpolation, here with the constant of Hermite's; e.g. Stoer & Bulirsch, Introduction to Numerical Analysis, 2.1.
    """
    steps = max(STEPS_PER_PERIOD_LEAST, 2.0 * math.pi / math.sqrt(math.sqrt(384.0 * tolerance)))
    return period_s / steps


def _load_past(work: Workspace, start: StartState) -> None:
    """History before time 0: pieces of an earlier run where all delays have the same, else values and slopes."""
    from polewise.kernels.workspace import N_HISTORY_COUNT, N_HISTORY_FIRST, S_HISTORY_T0

    past = start.past
    pieces: FloatArray = past[0].start_s
    shared = len(pieces) > 0 and all(np.array_equal(p.start_s, pieces) for p in past) and len(pieces) < len(work.history_t)
    for d, line in enumerate(past):
        work.delay_value0[d], work.delay_slope0[d] = line.value, line.slope
        if shared:
            work.history_v[: len(pieces), d, :] = line.values
        elif len(line.start_s):
            work.delay_value0[d], work.delay_slope0[d] = float(line.values[-1, 3]), 0.0
    work.state[S_HISTORY_T0] = start.time_s + (past[0].reach_s if shared else 0.0)
    work.counter[N_HISTORY_FIRST] = 0
    work.counter[N_HISTORY_COUNT] = len(pieces) if shared else 0
    if shared:
        work.history_t[: len(pieces)] = start.time_s + pieces
        work.history_h[: len(pieces)] = past[0].size_s
    work.counter[N_REG_AT_START] = 0
