"""The façade: read a netlist, check it, settle it, run its studies. Everything else in the package may change; this stays."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Final, Literal

from polewise.circuit.expand import expand
from polewise.circuit.load import Sources, load_files, load_text
from polewise.circuit.model import Circuit, Quantity, StudyDef
from polewise.circuit.quantities import all_quantities, find, select
from polewise.errors import NetlistError, SolverError
from polewise.grammar.diagnostics import Diagnostic, Label, Severity
from polewise.grammar.source import no_span
from polewise.grammar.units import NONE, format_value, read_value, unit_text
from polewise.network.graph import Network
from polewise.results.failures import Interrupted, UnknownName, nearest_names
from polewise.results.overview import Overview, overview
from polewise.results.result import EventEntry, Result, RunFacts

if TYPE_CHECKING:
    from polewise.equations.system import EquationSystem
    from polewise.expression.graph import Node
    from polewise.kernels.program import FloatArray
    from polewise.results.plan import RecordPlan
    from polewise.results.recording import Recording, Sink
    from polewise.results.settled import Settled
    from polewise.solve.initial import Snapshot
    from polewise.solve.operating_point import OperatingPoint
    from polewise.solve.transient import Counters, RunSummary

TOLERANCE: Final = 1e-6  # relative, where neither the study nor the caller states one
DEFAULT_KEPT_MAX: Final = 60  # nodes, and paths, that a study without `keep` records
COUNTERS_TOLD: Final = ("steps", "rejected", "newton_iterations", "factorisations", "switch_flips", "sample_instants", "restarts")
EVENT_CHANGES_TOLD: Final = 4  # of one event, in the log
_ASKED: Final = "<asked for>"  # source name of instants that only the caller wants
Sampling = Literal["exact", "mean"]
Value = str | float | int | bool


@dataclass(frozen=True, slots=True)
class Progress:
    """How far a run is: study time reached and wanted, s."""

    time_s: float
    end_s: float

    @property
    def share(self) -> float:
        """0 .. 1."""
        return min(1.0, self.time_s / self.end_s) if self.end_s > 0.0 else 1.0


def load(path: str | Path, *, given: Mapping[str, Value] | None = None) -> System:
    """Read a netlist file and everything it uses.

    Args:
        path: of the `.pole` file.
        given: values from outside, as for System.with_given.
    Raises:
        NetlistError: carries every error found, each with its place.
    """
    return _checked(*read(path, given=given))


def from_text(text: str, *, name: str = "<text>", given: Mapping[str, Value] | None = None) -> System:
    """Read a netlist from a string.

    Args:
        text: the netlist.
        name: what messages call it.
        given: values from outside, as for System.with_given.
    Raises:
        NetlistError: carries every error found, each with its place.

    >>> system = from_text('''
    ... title "Divider"
    ... reference gnd
    ... supply: top --[12 V]-- gnd
    ... upper:  top --[2 kohm]-- mid
    ... lower:  mid --[1 kohm]-- gnd
    ... ''')
    >>> round(system.settled()["mid.v"], 6)
    4.0
    """
    return _checked(*read_text(text, name=name, given=given))


def read(path: str | Path, *, given: Mapping[str, Value] | None = None) -> tuple[System | None, tuple[Diagnostic, ...]]:
    """As load, but never raises for a wrong netlist: (system or None, everything found)."""
    sources, found = load_files(Path(path))
    return _read(sources, found, given)


def read_text(text: str, *, name: str = "<text>", given: Mapping[str, Value] | None = None) -> tuple[System | None, tuple[Diagnostic, ...]]:
    """As from_text, but never raises for a wrong netlist: (system or None, everything found)."""
    sources, found = load_text(text, name=name)
    return _read(sources, found, given)


def _read(sources: Sources, found: Sequence[Diagnostic], given: Mapping[str, Value] | None) -> tuple[System | None, tuple[Diagnostic, ...]]:
    overrides = {name: _outside(value) for name, value in (given or {}).items()}
    prepared, more = _prepare(sources, overrides, None)
    found = _joined(found, more)
    if prepared is None:
        return None, found
    for study in prepared.circuit.studies.values():
        if study.has_givens:
            found = _joined(found, _prepare(sources, overrides, study.name)[1])
    if any(d.is_error for d in found):
        return None, found
    return System(sources, overrides, prepared, found), found


def _joined(found: Sequence[Diagnostic], more: Sequence[Diagnostic]) -> tuple[Diagnostic, ...]:
    """Findings without those that are there already."""
    known = {(d.code, d.span.source.name, d.span.start, d.span.end, d.headline) for d in found}
    return (*found, *(d for d in more if (d.code, d.span.source.name, d.span.start, d.span.end, d.headline) not in known))


def _checked(system: System | None, found: Sequence[Diagnostic]) -> System:
    if system is None:
        raise NetlistError([d for d in found if d.is_error] + [d for d in found if not d.is_error])
    return system


def _outside(value: Value) -> str | float:
    """A value from outside as the circuit stage takes it: a text as in a netlist ("200 uH", "true"), or a number in SI."""
    if isinstance(value, bool):
        return "true" if value else "false"
    return value if isinstance(value, str) else float(value)


@dataclass(frozen=True, slots=True)
class _Prepared:
    """A circuit with its graph, ready for equations."""

    circuit: Circuit
    network: Network


def _prepare(sources: Sources, overrides: Mapping[str, str | float], study: str | None) -> tuple[_Prepared | None, tuple[Diagnostic, ...]]:
    """Expand and check the structure."""
    from polewise.network.structure import check_structure

    circuit, found = expand(sources, overrides=overrides, study=study)
    if circuit is None or any(d.is_error for d in found):
        return None, tuple(found)
    network, more = check_structure(circuit)
    found = _joined(found, more)
    return (None if network is None else _Prepared(circuit, network)), found


class System:
    """A netlist that was read and found right. It never changes; runs may go on in several threads at once.

    >>> system = from_text('''
    ... title "Discharge"
    ... reference gnd
    ... store: top --[1 mF initially 10 V]-- gnd
    ... leak:  top --[1 kohm]-- gnd
    ... study decay {
    ...     start cold
    ...     run for 1 s
    ...     keep top.v
    ...     require top.v below 5 V after 700 ms
    ... }
    ... ''')
    >>> result = system.run("decay")
    >>> result.unit("top.v"), result.verdict.passed
    ('V', True)
    """

    __slots__ = ("_diagnostics", "_inputs", "_lock", "_overrides", "_prepared", "_sources")

    def __init__(
        self,
        sources: Sources,
        overrides: Mapping[str, str | float],
        prepared: _Prepared,
        diagnostics: tuple[Diagnostic, ...],
        inputs: Mapping[str, float] | None = None,
    ) -> None:
        self._sources = sources
        self._inputs = dict(inputs or {})
        self._overrides = dict(overrides)
        self._diagnostics = diagnostics
        self._prepared: dict[str, _Prepared] = {"": prepared}
        self._lock = threading.RLock()  # the expression graph grows while equations are written; solving itself needs no lock

    @property
    def circuit(self) -> Circuit:
        """The expanded circuit."""
        return self._prepared[""].circuit

    @property
    def title(self) -> str:
        """As stated in the netlist."""
        return self.circuit.title

    @property
    def studies(self) -> tuple[str, ...]:
        """Names of the studies, in the order of the text."""
        return tuple(self.circuit.studies)

    @property
    def diagnostics(self) -> tuple[Diagnostic, ...]:
        """Warnings and notes of reading."""
        return self._diagnostics

    @property
    def names(self) -> tuple[str, ...]:
        """Every quantity that can be kept or read."""
        with self._lock:
            return tuple(q.name for q in all_quantities(self.circuit))

    def check(self) -> Overview:
        """What was read: counts, islands, assemblies, warnings.

        Raises:
            NetlistError: the equations can't be written.
        """
        prepared = self._prepared[""]
        with self._lock:
            system = _assemble(prepared.circuit, prepared.network, None, (), "exact")
        return overview(prepared.circuit, prepared.network, len(system.unknowns), self._diagnostics)

    def with_given(self, values: Mapping[str, Value]) -> System:
        """The same netlist with other givens.

        Args:
            values: path of a given → value: a text as in a netlist ("200 uH"), or a number in SI.
        Raises:
            NetlistError: no such given, or a value that doesn't fit it.

        >>> divider = from_text('''
        ... title "Divider"
        ... reference gnd
        ... given r = 1 kohm
        ... supply: top --[12 V]-- gnd
        ... upper:  top --[2 kohm]-- mid
        ... lower:  mid --[r]-- gnd
        ... ''')
        >>> round(divider.with_given({"r": "6 kohm"}).settled()["mid.v"], 6)
        9.0
        """
        overrides = {**self._overrides, **{name: _outside(value) for name, value in values.items()}}
        other = _checked(*_read(self._sources, (), overrides))
        other._inputs = {name: value for name, value in self._inputs.items() if name in other.circuit.inputs}
        return other

    def with_input(self, values: Mapping[str, Value]) -> System:
        """The same netlist with top-level inputs held at other values.

        Args:
            values: name of a top-level input → value: a text with its unit, or a number in SI.
        Raises:
            UnknownName: no such input.
            NetlistError: a value that doesn't fit it.

        >>> lamp = from_text('''
        ... title "Lamp"
        ... reference gnd
        ... input level = 12 V
        ... supply: top --[level]-- gnd
        ... lamp:   top --[6 ohm]-- gnd
        ... ''')
        >>> round(lamp.with_input({"level": "24 V"}).settled()["lamp.i"], 6)
        4.0
        """
        inputs = {**self._inputs, **{name: _input_value(self.circuit, name, value) for name, value in values.items()}}
        other = System(self._sources, self._overrides, self._prepared[""], self._diagnostics, inputs)
        other._prepared, other._lock = self._prepared, self._lock  # the circuit is shared, and so is what guards its graph
        return other

    def settled(self) -> Settled:
        """Find the operating point.

        Raises:
            NoOperatingPoint: says what can't rest, or the limiting figure.
        """
        prepared = self._prepared[""]
        with self._lock:
            system = _assemble(prepared.circuit, prepared.network, None, _whole_network(prepared.circuit), "exact")
            point = find_point(system, self._inputs)
        return self._settled(prepared, system, point)

    def run(
        self,
        study: str,
        *,
        tolerance: float | None = None,
        keep: Sequence[str] | None = None,
        sampling: Sampling | None = None,
        progress: Callable[[Progress], None] | None = None,
        at: Sequence[float] = (),
        should_stop: Callable[[], bool] | None = None,
        on_failure: Literal["raise", "keep"] = "raise",
    ) -> Result:
        """Run one study.

        Args:
            study: its name.
            tolerance: relative, of every unknown; None: the study's own, else 1e-6.
            keep: names or selections ("berth{*}.choke.i") to record instead of the study's own.
            sampling: "exact" or "mean"; None: the study's own, else exact.
            progress: called now and then.
            at: times (s) that the run must hit exactly, beside the study's own.
            should_stop: asked now and then; True ends the run, its result is marked incomplete.
            on_failure: "raise" a solver's failure, or "keep" what was done until then as an incomplete result with `trouble`.
        Raises:
            UnknownName: no such study or quantity.
            SolverError: the solver could not finish.
        """
        from polewise.results.recording import MemorySink

        plan = self.plan(study, keep=keep, sampling=sampling)
        sink = MemorySink(plan.record.columns)
        outcome = self.carry_out(plan, sink, tolerance=tolerance, progress=progress, at=at, should_stop=should_stop)
        if outcome.trouble is not None and on_failure == "raise":
            raise outcome.trouble
        return finished(plan, outcome, sink.finish())

    # ------------------------------------------------------------ for faces that record elsewhere than in memory

    def plan(self, study: str, *, keep: Sequence[str] | None = None, sampling: Sampling | None = None) -> StudyPlan:
        """What a run of a study will do and record; `carry_out` does it.

        Raises:
            UnknownName: no such study or quantity.
        """
        from polewise.results.plan import plan_recording

        prepared = self._prepared_for(study)
        definition = prepared.circuit.studies[study]
        with self._lock:
            kept: Sequence[Quantity] = definition.keep if keep is None else [q for name in keep for q in _selected(prepared.circuit, name)]
            record = plan_recording(prepared.circuit.graph, kept or default_quantities(prepared.circuit), definition.requirements)
        return StudyPlan(definition, prepared.circuit, prepared.network, record, sampling or definition.sampling)

    def carry_out(
        self,
        plan: StudyPlan,
        sink: Sink,
        *,
        tolerance: float | None = None,
        progress: Callable[[Progress], None] | None = None,
        at: Sequence[float] = (),
        should_stop: Callable[[], bool] | None = None,
    ) -> RunFacts:
        """Run a planned study into a sink. A solver's failure is in the facts' `trouble`; `finished` judges what was recorded.

        Args:
            plan: from `plan` of this system.
            sink: gets the rows.
            tolerance, progress, at, should_stop: see run.
        Raises:
            NoOperatingPoint, StartFailure: there was nothing to begin from.
        """
        return self._carry_out(plan, sink, tolerance, progress, at, should_stop)[0]

    def _carry_out(
        self,
        plan: StudyPlan,
        sink: Sink,
        tolerance: float | None,
        progress: Callable[[Progress], None] | None,
        at: Sequence[float],
        should_stop: Callable[[], bool] | None,
        stop_s: float | None = None,
    ) -> tuple[RunFacts, Snapshot | None]:
        from polewise.solve import initial, sampling, transient
        from polewise.solve.problem import build_problem

        began = time.perf_counter()
        definition = plan.study
        end_s = _length_s(definition) if stop_s is None else stop_s
        before = self._snapshot(definition, tolerance, should_stop) if definition.start == "from" else None
        strategy: str | None = None
        with self._lock:
            system = _assemble(plan.circuit, plan.network, definition.name, plan.record.outputs, plan.sampling or "exact")
            sampling.require_choice(system, end_s, plan.sampling, study=definition.name, span=definition.span)
            problem = build_problem(_hitting(system, at, end_s))
            if before is not None:
                start = initial.start_from(problem, before, start_latches=self._inputs)
            elif definition.start == "settled":
                point = find_point(problem.system, self._inputs)
                strategy, start = point.strategy, initial.settled_at(problem, point)
            else:
                start = initial.start_cold(problem, start_latches=self._inputs)
        trouble: SolverError | None = None
        try:
            summary: RunSummary = transient.run(
                problem,
                start=start,
                stop_s=end_s,
                tolerance=tolerance or definition.tolerance or TOLERANCE,
                sink=sink,
                progress=None if progress is None else lambda t, end: progress(Progress(t, end)),
                should_stop=should_stop,
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
        )
        return facts, summary.snapshot

    def _snapshot(self, definition: StudyDef, tolerance: float | None, should_stop: Callable[[], bool] | None) -> Snapshot:
        """Where the study that another one starts from stands at its time. Reading has made sure that no study starts from itself."""
        other = definition.start_study or ""
        facts, snapshot = self._carry_out(self.plan(other, keep=()), _Nothing(), tolerance, None, (), should_stop, definition.start_time_s)
        if facts.trouble is not None:
            raise facts.trouble
        if snapshot is None or not facts.complete:
            raise Interrupted(other)
        return snapshot

    def _prepared_for(self, study: str) -> _Prepared:
        """The circuit as the givens of a study make it."""
        definition = self.circuit.studies.get(study)
        if definition is None:
            nearest = nearest_names(study, self.studies)
            known = ", ".join(self.studies) or "none"
            hint = None if nearest else f"the studies are: {known}"
            raise UnknownName(study, f"there is no study `{study}`", nearest, hint)
        key = study if definition.has_givens else ""
        with self._lock:
            prepared = self._prepared.get(key)
            if prepared is None:
                prepared, found = _prepare(self._sources, self._overrides, study)
                if prepared is None:
                    raise NetlistError([d for d in found if d.is_error])
                self._prepared[key] = prepared
        return prepared

    def _settled(self, prepared: _Prepared, system: EquationSystem, point: OperatingPoint) -> Settled:
        from polewise.results.balance import power_balance
        from polewise.results.settled import Finding, Settled, pole_states
        from polewise.solve.problem import reader

        circuit = prepared.circuit

        def evaluate(expressions: Sequence[Node]) -> list[float]:
            with self._lock:
                return reader(system, system.resolve(expressions))(point.x, 0.0, point.p)

        def quantity(name: str) -> Quantity:
            with self._lock:
                return _found(circuit, name)

        with self._lock:
            balance, poles = power_balance(circuit, evaluate), pole_states(circuit, evaluate)
        return Settled(
            circuit,
            point.strategy,
            point.iterations,
            balance,
            poles,
            tuple(Finding(flag.kind, flag.subject) for flag in point.flags),
            point.warnings,
            quantity,
            evaluate,
            lambda: self.names,
        )


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
        """How long it runs, s."""
        return _length_s(self.study)


def finished(plan: StudyPlan, facts: RunFacts, recording: Recording) -> Result:
    """Judge what a run recorded."""
    from polewise.results.result import Result
    from polewise.results.verdict import judge

    verdict = judge(plan.study.name, plan.record.judged, recording, planned_end_s=facts.planned_s, reached_s=facts.reached_s)
    return Result(recording, verdict, facts)


def default_quantities(circuit: Circuit) -> list[Quantity]:
    """What a study without `keep` records: named nodes and paths at top level, at most DEFAULT_KEPT_MAX of each."""
    nodes = [n for n in circuit.nodes.values() if n.named and not n.is_reference and not n.owner][:DEFAULT_KEPT_MAX]
    names = [f"{n.name}.{n.domain.across}" for n in nodes]
    for path in [p for p in circuit.paths.values() if not p.owner][:DEFAULT_KEPT_MAX]:
        branches = [b for item in path.items for b in item]
        if branches:
            names.append(f"{path.name}.{circuit.branches[branches[0]].domain.through}")
    found = [find(circuit, name) for name in names]
    return [q for q in found if isinstance(q, Quantity)]


def _whole_network(circuit: Circuit) -> list[Quantity]:
    """Every voltage, current and potential: equations that can tell them can tell everything else afterwards."""
    g = circuit.graph
    outputs = [Quantity(n.name, g.symbol("potential", n.name), n.domain.across_dimension) for n in circuit.nodes.values()]
    for b in circuit.branches.values():
        outputs.append(Quantity(f"{b.name}.{b.domain.across}", g.symbol("v", b.name), b.domain.across_dimension))
        outputs.append(Quantity(f"{b.name}.{b.domain.through}", g.symbol("i", b.name), b.domain.through_dimension))
    return outputs


def _length_s(study: StudyDef) -> float:
    if study.run_for_s is None:
        headline = f"study `{study.name}` does not say how long it runs"
        raise NetlistError([Diagnostic("study-without-length", Severity.ERROR, headline, study.span, hint="add a line such as `run for 50 ms`")])
    return study.run_for_s


def _assemble(circuit: Circuit, network: Network, study: str | None, outputs: Sequence[Quantity], sampling: Sampling) -> EquationSystem:
    from polewise.equations.assemble import assemble

    return assemble(circuit, network, study=study, outputs=outputs, sampling=sampling)


def _hitting(system: EquationSystem, times: Sequence[float], end_s: float) -> EquationSystem:
    """The same equations with further instants that a run must hit; nothing happens at them."""
    from polewise.equations.system import Timed

    wanted = sorted({float(t) for t in times if 0.0 < t < end_s})
    if not wanted:
        return system
    return replace(system, timed=(*system.timed, *(Timed(t, (), no_span(_ASKED)) for t in wanted)))


def find_point(system: EquationSystem, inputs: Mapping[str, float]) -> OperatingPoint:
    """The operating point of equations."""
    from polewise.solve.operating_point import find_operating_point

    return find_operating_point(system, start_latches=inputs)


def _input_value(circuit: Circuit, name: str, value: Value) -> float:
    """An input's value in SI."""
    if name not in circuit.inputs:
        raise UnknownName(name, f"there is no top-level input `{name}`", nearest_names(name, circuit.inputs))
    latch = circuit.latches[name]
    if isinstance(value, bool) or value in ("true", "false"):
        if latch.is_condition:
            return float(value in (True, "true"))
    elif not isinstance(value, str):
        return float(value)
    elif not latch.is_condition:
        got = read_value(value)
        if got is not None and got[1] == latch.dimension:
            return got[0]
    wanted = "true or false" if latch.is_condition else f"a value in {unit_text(latch.dimension)}"
    headline = f"the input `{name}` asks for {wanted}, not `{value}`"
    raise NetlistError([Diagnostic("input-value", Severity.ERROR, headline, no_span("input"), (Label(latch.span, "the input stands here"),))])


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


def _found(circuit: Circuit, name: str) -> Quantity:
    """A quantity by name."""
    quantity = find(circuit, name)
    if isinstance(quantity, Quantity):
        return quantity
    raise UnknownName(name, quantity.headline, nearest_names(name, (q.name for q in all_quantities(circuit))), quantity.hint)


def _selected(circuit: Circuit, name: str) -> list[Quantity]:
    """The quantities that a name or selection stands for."""
    if "{" not in name:
        return [_found(circuit, name)]
    chosen = select(circuit, name)
    if isinstance(chosen, Diagnostic):
        raise UnknownName(name, chosen.headline, (), chosen.hint)
    return list(chosen)


class _Nothing:
    """A sink that forgets."""

    def write(self, rows: FloatArray) -> None:
        """Forget."""
