"""One study from plan to judged result: equations, start, run, verdict."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final, Literal

from polewise.circuit.model import Circuit, Quantity, StudyDef
from polewise.errors import NetlistError, SolverError
from polewise.grammar.diagnostics import Diagnostic, Severity
from polewise.grammar.source import no_span
from polewise.grammar.units import NONE, format_value
from polewise.network.graph import Network
from polewise.results.result import EventEntry, Result, RunFacts

if TYPE_CHECKING:
    from polewise.equations.system import EquationSystem
    from polewise.kernels.program import FloatArray
    from polewise.results.plan import RecordPlan
    from polewise.results.recording import Recording, Sink
    from polewise.solve.initial import Snapshot
    from polewise.solve.operating_point import OperatingPoint
    from polewise.solve.transient import Counters, RunSummary

TOLERANCE: Final = 1e-6  # relative, where neither the study nor the caller states one
COUNTERS_TOLD: Final = ("steps", "rejected", "newton_iterations", "factorisations", "switch_flips", "sample_instants", "restarts")
EVENT_CHANGES_TOLD: Final = 4  # of one event, in the log
_ASKED: Final = "<asked for>"  # source name of instants that only the caller wants
Sampling = Literal["exact", "mean"]


@dataclass(frozen=True, slots=True)
class Progress:
    """How far a run is: study time reached and wanted, s."""

    time_s: float
    end_s: float

    @property
    def share(self) -> float:
        """0 .. 1."""
        return min(1.0, self.time_s / self.end_s) if self.end_s > 0.0 else 1.0


@dataclass(frozen=True, slots=True)
class StudyPlan:
    """A study ready to run: the circuit its givens make, and what is recorded."""

    study: StudyDef
    circuit: Circuit
    network: Network
    record: RecordPlan
    sampling: Sampling | None

    @property
    def length_s(self) -> float:
        """How long it runs, s.

        Raises:
            NetlistError: the study does not say.
        """
        if self.study.magnifies is not None:
            return self.study.magnifies.end_s
        if self.study.run_for_s is None and self.study.asks_analysis:
            return 0.0  # nothing to run: small-signal answers at the operating point
        if self.study.run_for_s is None:
            headline = f"study `{self.study.name}` does not say how long it runs"
            hint = "add a line such as `run for 50 ms`"
            raise NetlistError([Diagnostic("study-without-length", Severity.ERROR, headline, self.study.span, hint=hint)])
        return self.study.run_for_s


@dataclass(frozen=True, slots=True)
class RunWishes:
    """What a caller wants of a run.

    Args:
        tolerance: relative; None: the study's own, else TOLERANCE.
        progress: called now and then. should_stop: asked as often; True ends the run.
        at: times (s) that must be hit exactly.
        stop_s: where to end instead of at the study's own end.
    """

    tolerance: float | None = None
    progress: Callable[[Progress], None] | None = None
    at: Sequence[float] = ()
    should_stop: Callable[[], bool] | None = None
    stop_s: float | None = None


def carry_out(
    plan: StudyPlan, sink: Sink, wishes: RunWishes, inputs: Mapping[str, float], guard: AbstractContextManager[object], before: Snapshot | None
) -> tuple[RunFacts, Snapshot | None]:
    """Run a planned study into a sink.

    Args:
        plan: the study. sink: gets the rows. wishes: of the caller.
        inputs: top-level input -> value, SI.
        guard: held while the circuit's expression graph grows; the run itself needs it no more.
        before: where the study begins that starts from another one.
    Returns:
        What is known of the run, a solver's failure included, and where it stands.
    Raises:
        NoOperatingPoint, StartFailure: there was nothing to begin from.
    """
    from polewise.solve import initial, sampling, transient
    from polewise.solve.problem import build_problem

    began = time.perf_counter()
    definition = plan.study
    end_s = plan.length_s if wishes.stop_s is None else wishes.stop_s
    strategy: str | None = None
    with guard:
        system = equations_of(plan.circuit, plan.network, definition.name, plan.record.outputs, plan.sampling or "exact")
        sampling.require_choice(system, end_s, plan.sampling, study=definition.name, span=definition.span)
        problem = build_problem(_hitting(system, wishes.at, end_s))
        if before is not None:
            start = initial.start_from(problem, before, start_latches=inputs)
        elif definition.start == "settled":
            point = find_point(problem.system, inputs)
            strategy, start = point.strategy, initial.settled_at(problem, point)
        else:
            start = initial.start_cold(problem, start_latches=inputs)
    trouble: SolverError | None = None
    tell = wishes.progress
    try:
        summary: RunSummary = transient.run(
            problem,
            start=start,
            stop_s=end_s,
            tolerance=wishes.tolerance or definition.tolerance or TOLERANCE,
            sink=sink,
            progress=None if tell is None else lambda t, end: tell(Progress(t, end)),
            should_stop=wishes.should_stop,
        )
    except SolverError as error:
        if not isinstance(error.partial, transient.RunSummary):
            raise
        trouble, summary = error, error.partial
    facts = RunFacts(
        title=plan.circuit.title,
        study=definition.name,
        planned_s=end_s,
        reached_s=summary.end_s,
        complete=summary.complete,
        trouble=trouble,
        events=tuple(EventEntry(e.time_s, event_text(plan.circuit, e.text, e.changes)) for e in summary.events if e.span.source.name != _ASKED),
        counters=_counters(summary.counters),
        elapsed_s=time.perf_counter() - began,
        sampling=plan.sampling or "exact",
        strategy=strategy,
        warnings=summary.warnings,
        stand=summary.snapshot,
    )
    return facts, summary.snapshot


def finished(plan: StudyPlan, facts: RunFacts, recording: Recording) -> Result:
    """Judge what a run recorded."""
    from polewise.results.verdict import judge

    verdict = judge(plan.study.name, plan.record.judged, recording, planned_end_s=facts.planned_s, reached_s=facts.reached_s)
    return Result(recording, verdict, facts)


def equations_of(circuit: Circuit, network: Network, study: str | None, outputs: Sequence[Quantity], sampling: Sampling) -> EquationSystem:
    """The equations of a circuit with the events of a study."""
    from polewise.equations.assemble import assemble

    return assemble(circuit, network, study=study, outputs=outputs, sampling=sampling)


def find_point(system: EquationSystem, inputs: Mapping[str, float]) -> OperatingPoint:
    """The operating point of equations."""
    from polewise.solve.operating_point import find_operating_point

    return find_operating_point(system, start_latches=inputs)


def _hitting(system: EquationSystem, times: Sequence[float], end_s: float) -> EquationSystem:
    """The same equations with further instants that a run must hit; nothing happens at them."""
    from polewise.equations.system import Timed

    wanted = sorted({float(t) for t in times if 0.0 < t < end_s})
    if not wanted:
        return system
    return replace(system, timed=(*system.timed, *(Timed(t, (), no_span(_ASKED)) for t in wanted)))


def event_text(circuit: Circuit, text: str, changes: Sequence[tuple[str, float]]) -> str:
    """A line of the event log: what set it off, and what it set."""
    if not changes:
        return text
    shown = ", ".join(f"{target} = {_changed(circuit, target, value)}" for target, value in changes[:EVENT_CHANGES_TOLD])
    rest = len(changes) - EVENT_CHANGES_TOLD
    shown += f" and {rest} more" if rest > 0 else ""
    return f"set {shown}" if text.startswith("at ") else f"{text}: set {shown}"  # the entry has its time already


def _changed(circuit: Circuit, target: str, value: float) -> str:
    latch, state = circuit.latches.get(target), circuit.states.get(target)
    if latch is not None and latch.is_condition:
        return "true" if value > 0.5 else "false"
    dimension = latch.dimension if latch is not None else state.dimension if state is not None else NONE
    return format_value(value, dimension)


def _counters(counters: Counters) -> dict[str, int]:
    return {name.replace("_", " "): getattr(counters, name) for name in COUNTERS_TOLD}


class Nothing:
    """A sink that forgets."""

    def write(self, rows: FloatArray) -> None:
        """Forget."""
