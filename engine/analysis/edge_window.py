"""The edge-by-edge window: a stretch of a study with every switching edge, begun from the averaged state with its ripple in phase.

1. The study runs averaged to t0, some periods before the window, and stands there with states, latches, sampled values, clocks and events.
2. The same equations with gates in place of duties go on from there. Carriers keep their absolute phase: period k of a pole starts at
   k/f + phase/(2 pi f) of the study's time.
3. The ripple's phase: an averaged state is a mean, not a point of the ripple. The state at t0 is moved until the mean of the edge-by-edge run
   over a common period equals that of the averaged run (`matched`): x0 <- x0 + (mean averaged - mean edge by edge), a few times.
4. It runs on through the window; what was before the window is dropped.
"""

from __future__ import annotations

import time as clock
from collections.abc import Callable, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace

import numpy as np

from polewise.analysis.carriers import Carriers, carriers_of
from polewise.analysis.failures import edges_refused
from polewise.circuit.model import Circuit, Quantity
from polewise.equations.assemble import assemble
from polewise.equations.modulators import HIDDEN
from polewise.equations.system import EquationSystem, Output, Timed
from polewise.errors import Chatter, SolverError
from polewise.grammar.source import no_span
from polewise.grammar.units import TIME, format_value
from polewise.kernels.program import FloatArray
from polewise.network.graph import Network
from polewise.results.curve import AFTER
from polewise.results.recording import Column, MemorySink, Recording, Sink, recorded_curve, row_blocks
from polewise.results.result import EventEntry, RunFacts
from polewise.results.study_run import COUNTERS_TOLD, TOLERANCE, Progress, RunWishes, StudyPlan, event_text
from polewise.solve import initial, transient
from polewise.solve.events import merge_distance
from polewise.solve.initial import Snapshot, StartState
from polewise.solve.problem import DaeProblem, build_problem

PREROLL_PERIODS = 3  # of the slowest pole, run before the window begins
MATCH_ROUNDS = 12  # of moving the start until the means agree
MATCH_REACH = 1.5  # swings of a state that its start may be moved: control that follows peaks leaves no start with the wanted mean
MATCH_RELATIVE = 1e-5  # of a state's swing: closer agreement of the means is not looked for
NO_COMMON_PERIODS = 20  # periods of the slowest pole over which means are compared where there is no common period
TOLERANCE_EDGES = 1e-7  # relative, where neither the study nor the caller states one


@dataclass(frozen=True, slots=True)
class WindowFacts:
    """How an edge-by-edge window came about.

    Args:
        begin_s, end_s: of the window, study time. began_s: where the edge-by-edge run began.
        common_period_s: of all poles and clocks; None where there is none.
        periodic: whether it shows a periodic steady state.
        mismatch: largest difference between a state's means over the first period, as a share of its swing; 0 where nothing was matched.
        note: how the ripple found its phase, a sentence.
    """

    begin_s: float
    end_s: float
    began_s: float
    common_period_s: float | None
    periodic: bool
    mismatch: float
    note: str


@dataclass(frozen=True, slots=True, eq=False)
class BesideWindow:
    """What belongs to a window's run beside its rows: facts of the window, and the averaged run over the same stretch (and a little beyond it)."""

    window: WindowFacts
    averaged: Recording


def edge_system(circuit: Circuit, network: Network, study: str | None, outputs: Sequence[Quantity], *, latched: bool = False) -> EquationSystem:
    """The equations with every edge.

    Raises:
        EdgesRefused: there is no pole that switches.
    """
    if carriers_of(circuit) is None:
        raise edges_refused("the circuit has no pole, so nothing in it switches", "an ordinary run shows all there is")
    return assemble(circuit, network, study=study, outputs=outputs, picture="latched edges" if latched else "edges")


class OnlyWindow:
    """A sink that passes on a window: from an instant that the run hits exactly, its jump included, up to the end, what jumps there left out."""

    def __init__(self, sink: Sink, begin_s: float, end_s: float) -> None:
        self.sink, self.begin_s, self.end_s = sink, begin_s - merge_distance(begin_s), end_s - merge_distance(end_s)
        self.open = False

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows."""
        rows = rows[(rows[:, 0] < self.end_s) | (rows[:, 1] != AFTER)]
        if not self.open:
            # The row that ends a step at the instant belongs to the part before it unless nothing follows a jump.
            at = np.flatnonzero((rows[:, 0] >= self.begin_s) & (rows[:, 1] != 0))
            if not at.size:
                return
            rows, self.open = rows[at[0] :], True
        self.sink.write(rows)


@dataclass(frozen=True, slots=True, eq=False)
class WindowTask:
    """A window to be carried out.

    Args:
        plan: what to record; its circuit is the one the magnified study's givens make.
        study: the magnified study's name; begin_s, end_s: the window.
        preroll_periods: of the slowest pole before the window.
    """

    plan: StudyPlan
    study: str
    begin_s: float
    end_s: float
    preroll_periods: int = PREROLL_PERIODS


def carry_out_window(
    task: WindowTask,
    sink: Sink,
    wishes: RunWishes,
    guard: AbstractContextManager[object],
    averaged_until: Callable[[float], Snapshot | None],
    *,
    cold: bool,
) -> RunFacts:
    """Run a window into a sink; the facts hold the window and the averaged run in `beside`.

    Args:
        task: which. sink: gets its rows. wishes: tolerance, progress, stop, instants.
        guard: held while the expression graph grows.
        averaged_until: runs the study averaged to a time and tells where it stands; None where it was stopped.
        cold: whether the study starts from stated values: its start is then a point of the ripple itself.
    """
    began = clock.perf_counter()
    circuit = task.plan.circuit
    carriers = carriers_of(circuit)
    if carriers is None:
        raise edges_refused("the circuit has no pole, so nothing in it switches", "an ordinary run shows all there is")
    t0 = max(0.0, task.begin_s - task.preroll_periods * carriers.longest_s)
    tolerance = wishes.tolerance or task.plan.study.tolerance or TOLERANCE_EDGES
    snapshot = averaged_until(t0)
    if snapshot is None:
        raise edges_refused(f"the averaged run of `{task.study}` was stopped before the window", None)
    stretch = Stretch(circuit, task.plan.network, task.study, carriers, tolerance, guard)
    common, span_s = stretch.common_period_s, stretch.span_s
    length_s = circuit.studies[task.study].run_for_s
    averaged_end = max(task.end_s, t0 + span_s) + 0.5 * span_s
    averaged_end = averaged_end if length_s is None else max(task.end_s, min(averaged_end, length_s))
    averaged = stretch.averaged(snapshot, task.plan.record.outputs, task.plan.record.columns, averaged_end)
    from_start = cold and t0 == 0.0

    def attempt(into: Sink) -> tuple[transient.RunSummary, SolverError | None, float]:
        problem = stretch.edges(task.plan.record.outputs, hit=(task.begin_s, *wishes.at))
        start, mismatch = stretch.start(problem, snapshot), 0.0
        if not from_start:
            wanted = averaged.means(t0, min(t0 + span_s, averaged_end))
            start, mismatch = stretch.matched(problem, start, wanted, span_s)
        tell = wishes.progress
        try:
            summary = transient.run(
                problem,
                start=start,
                stop_s=task.end_s,
                tolerance=tolerance,
                sink=OnlyWindow(into, task.begin_s, task.end_s),
                progress=None if tell is None else lambda t, end: tell(Progress(t, end)),
                should_stop=wishes.should_stop,
            )
        except SolverError as error:
            if not isinstance(error.partial, transient.RunSummary):
                raise
            return error.partial, error, mismatch
        return summary, None, mismatch

    summary, trouble, mismatch = _latched_if_needed(stretch, task.plan.record.columns, sink, attempt)
    note = _note(task, t0, stretch, from_start, mismatch)
    window = WindowFacts(task.begin_s, task.end_s, t0, common, False, mismatch, note)
    counters = {name.replace("_", " "): getattr(summary.counters, name) for name in COUNTERS_TOLD}
    return RunFacts(
        title=circuit.title,
        study=task.plan.study.name,
        planned_s=task.end_s,
        reached_s=summary.end_s,
        complete=summary.complete,
        trouble=trouble,
        events=tuple(EventEntry(e.time_s, event_text(circuit, e.text, e.changes)) for e in summary.events if e.span.source.name != HIDDEN),
        counters=counters,
        elapsed_s=clock.perf_counter() - began,
        warnings=tuple(w for w in summary.warnings if w.code != "event-after-end"),  # the study goes on behind the window
        remarks=(note,),
        beside=BesideWindow(window, averaged.recording),
    )


def _latched_if_needed(
    stretch: Stretch, columns: Sequence[Column], sink: Sink, attempt: Callable[[Sink], tuple[transient.RunSummary, SolverError | None, float]]
) -> tuple[transient.RunSummary, SolverError | None, float]:
    """Run with plain comparators; where they switch to and fro without end, with modulators that let each edge pass once a period."""
    buffer = MemorySink(tuple(columns))
    try:
        outcome = attempt(buffer)
        chattered = isinstance(outcome[1], Chatter)
    except Chatter:
        chattered = True
    if chattered:
        stretch.latched = True
        buffer = MemorySink(tuple(columns))
        outcome = attempt(buffer)
    recording = buffer.finish()
    for rows in row_blocks(recording, recording.columns):
        sink.write(rows)
    return outcome


def _note(task: WindowTask, t0: float, stretch: Stretch, from_start: bool, mismatch: float) -> str:
    latched = "; a duty jumps back at its own edge, so modulators let each edge pass once a period" if stretch.latched else ""
    if from_start:
        return f"run from the study's cold start with every edge{latched}"
    lead, common = round((task.begin_s - t0) / stretch.carriers.longest_s, 2), stretch.common_period_s
    over = f"{NO_COMMON_PERIODS} periods of the slowest pole (the poles' rates have no common period)"
    if common is not None:
        over = f"a common period of {format_value(common, TIME)}"
    return (
        f"begun {lead:g} periods before the window, the state moved until its mean over {over} "
        f"equals the averaged run's (to {mismatch:.1g} of the swing){latched}"
    )


@dataclass(frozen=True, slots=True, eq=False)
class AveragedStretch:
    """The averaged run over a stretch, with its states."""

    recording: Recording
    state_names: tuple[str, ...]

    def means(self, begin_s: float, end_s: float) -> dict[str, float]:
        """Mean of each state over a stretch."""
        found = {}
        for name in self.state_names:
            part = recorded_curve(self.recording, _state_column(name)).window(begin_s, end_s)
            found[name] = part.integral() / part.duration_s() if not part.is_empty else np.nan
        return found


def _state_column(name: str) -> str:
    return f"state {name}"


class Stretch:
    """A stretch of a study in both pictures."""

    def __init__(
        self, circuit: Circuit, network: Network, study: str | None, carriers: Carriers, tolerance: float, guard: AbstractContextManager[object]
    ) -> None:
        self.circuit, self.network, self.study, self.carriers, self.tolerance, self.guard = circuit, network, study, carriers, tolerance, guard
        self.common_period_s = self.carriers.common_period_s(self._other_clocks())
        self.latched = False  # whether modulators let each edge pass once a period only

    @property
    def span_s(self) -> float:
        """The common period, or the stretch that stands for it where there is none."""
        return self.common_period_s if self.common_period_s is not None else NO_COMMON_PERIODS * self.carriers.longest_s

    def _other_clocks(self) -> list[float]:
        periods = [s.period_s for s in self.circuit.samplers]
        events = (*self.circuit.clock_events, *(self.circuit.studies[self.study].clock_events if self.study else ()))
        return periods + [e.period_s for e in events]

    def edges(self, outputs: Sequence[Quantity], *, hit: Sequence[float] = ()) -> DaeProblem:
        """The problem with every edge; outputs are those asked for, then every state."""
        with self.guard:
            system = edge_system(self.circuit, self.network, self.study, outputs, latched=self.latched)
            timed = tuple(Timed(float(t), (), no_span(HIDDEN)) for t in hit)
            return build_problem(replace(system, timed=(*system.timed, *timed)))

    def with_states(self, problem: DaeProblem) -> DaeProblem:
        """The same problem recording its states only."""
        with self.guard:
            return build_problem(replace(problem.system, outputs=state_outputs(problem.system)))

    def averaged(self, snapshot: Snapshot, outputs: Sequence[Quantity], columns: Sequence[Column], end_s: float) -> AveragedStretch:
        """Go on averaged from a snapshot."""
        with self.guard:
            system = assemble(self.circuit, self.network, study=self.study, outputs=outputs)
            states = state_outputs(system)
            problem = build_problem(replace(system, outputs=(*system.outputs, *states)))
            start = initial.start_within(problem, snapshot)
        kept = [replace(c, role="kept") for c in columns]
        sink = MemorySink((*kept, *(Column(o.name, o.dimension, False, "judged") for o in states)))
        transient.run(problem, start=start, stop_s=end_s, tolerance=min(self.tolerance, TOLERANCE), sink=sink)
        return AveragedStretch(sink.finish(), tuple(u.name for u in system.unknowns if u.is_state))

    def start(self, problem: DaeProblem, snapshot: Snapshot) -> StartState:
        """Where the edge-by-edge run begins before its ripple has a phase: the averaged state, carriers in their absolute phase."""
        parameters = {**snapshot.parameters, **self.carriers.period_starts(snapshot.time_s)}
        with self.guard:
            return initial.start_within(problem, replace(snapshot, parameters=parameters))

    def matched(self, problem: DaeProblem, start: StartState, wanted: Mapping[str, float], span_s: float) -> tuple[StartState, float]:
        """Move the start until the means over a stretch are the wanted ones; (start, largest remaining difference in parts of the swing)."""
        probe = self.with_states(problem)
        index = moved_states(problem, wanted)
        one_way = self.carriers.one_way(problem)
        best, best_off = start, np.inf
        names = [problem.system.unknowns[k].name for k in index]
        target = np.array([wanted[name] for name in names])
        slope = np.eye(len(index))  # d mean/d start, learnt on the way
        x_before = off_before = np.zeros(0)
        first, room = start.x[index].copy(), None
        for _ in range(MATCH_ROUNDS):
            mean, swing = self._means(probe, start, span_s, names)
            off = target - mean
            share = float(np.max(np.abs(off) / np.maximum(swing, 1e-12 * np.maximum(1.0, np.abs(target))), initial=0.0))
            if share < best_off:
                best, best_off = start, share
            if best_off < MATCH_RELATIVE:
                break
            if x_before.size:  # Broyden's update; Dennis & Schnabel 1983, ch. 8
                moved = start.x[index] - x_before
                length = float(moved @ moved)
                if length > 0.0:
                    slope += np.outer((off_before - off) - slope @ moved, moved) / length
            x_before, off_before = start.x[index].copy(), off
            room = MATCH_REACH * swing if room is None else room
            x = start.x.copy()
            x[index] += np.linalg.lstsq(slope, off, rcond=1e-6)[0]
            x[index] = np.clip(x[index], first - room, first + room)
            for k, sign in one_way:
                x[k] = max(sign * x[k], 0.0) * sign  # a diode's choke never carries current backwards
            start = replace(start, x=x)
        return best, best_off

    def _means(self, probe: DaeProblem, start: StartState, span_s: float, names: Sequence[str]) -> tuple[FloatArray, FloatArray]:
        sink = MemorySink(tuple(Column(o.name, o.dimension) for o in probe.system.outputs))
        begin = start.time_s
        transient.run(probe, start=start, stop_s=begin + span_s, tolerance=min(self.tolerance, TOLERANCE_EDGES), sink=sink)
        recording = sink.finish()
        mean, swing = np.zeros(len(names)), np.zeros(len(names))
        for k, name in enumerate(names):
            curve = recorded_curve(recording, _state_column(name))
            mean[k] = curve.integral() / curve.duration_s()
            low, high = curve.piece_ranges()
            swing[k] = float(np.max(high) - np.min(low))
        return mean, swing


def state_outputs(system: EquationSystem) -> tuple[Output, ...]:
    """An output per state."""
    return tuple(Output(_state_column(u.name), u.symbol, u.dimension, False) for u in system.unknowns if u.is_state)


def moved_states(problem: DaeProblem, known: Mapping[str, float]) -> list[int]:
    """Indices of states whose start may be moved: not those that are held on purpose, nor those unknown to the averaged run."""
    return [k for k, u in enumerate(problem.system.unknowns) if u.is_state and not u.held and np.isfinite(known.get(u.name, np.nan))]
