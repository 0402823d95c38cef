"""The façade: read a netlist, check it, settle it, run its studies. Everything else in the package may change; this stays."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from polewise.circuit.event_messages import magnify_twice
from polewise.circuit.expand import expand
from polewise.circuit.load import Sources, load_files, load_text
from polewise.circuit.model import Circuit, Quantity, StudyDef
from polewise.circuit.quantities import all_quantities
from polewise.errors import NetlistError
from polewise.grammar.diagnostics import Diagnostic
from polewise.network.graph import Network
from polewise.results.failures import Interrupted, UnknownName, nearest_names
from polewise.results.lookup import Value, default_quantities, found_quantity, input_value, selected_quantities, whole_network
from polewise.results.overview import Overview, overview
from polewise.results.result import Result, RunFacts
from polewise.results.study_run import Nothing, Progress, RunWishes, Sampling, StudyPlan, carry_out, equations_of, find_point, finished

if TYPE_CHECKING:
    from polewise.analysis.edge_window import WindowTask
    from polewise.analysis.handover import StateSpace
    from polewise.analysis.impedance import Impedance
    from polewise.analysis.limits import StabilityLimit
    from polewise.analysis.loop import Loop
    from polewise.analysis.magnified import EdgeWindow
    from polewise.analysis.modes import Modes
    from polewise.analysis.orbit import Orbit
    from polewise.analysis.point import ComplexArray
    from polewise.analysis.standpoint import Standpoint
    from polewise.analysis.trust import TrustLimits, TrustReport
    from polewise.analysis.tune import Shape, Tuned
    from polewise.equations.system import EquationSystem
    from polewise.expression.graph import Node
    from polewise.kernels.program import FloatArray
    from polewise.results.recording import Sink
    from polewise.results.settled import Settled
    from polewise.solve.initial import Snapshot
    from polewise.solve.operating_point import OperatingPoint

Place = tuple[str, float]  # a study and a time in it, s


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
            system = equations_of(prepared.circuit, prepared.network, None, (), "exact")
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
        inputs = {**self._inputs, **{name: input_value(self.circuit, name, value) for name, value in values.items()}}
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
            system = equations_of(prepared.circuit, prepared.network, None, whole_network(prepared.circuit), "exact")
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
        if plan.study.magnifies is not None:
            from polewise.analysis.magnified import edge_window

            window = self._magnified(plan, sink, RunWishes(tolerance, progress, at, should_stop))
            if window.trouble is not None and on_failure == "raise":
                raise window.trouble
            return edge_window(plan, window, sink.finish())
        outcome = self.carry_out(plan, sink, tolerance=tolerance, progress=progress, at=at, should_stop=should_stop)
        if outcome.trouble is not None and on_failure == "raise":
            raise outcome.trouble
        return self.answered(plan, finished(plan, outcome, sink.finish()))

    # ------------------------------------------------------------ every edge

    def magnify(
        self,
        study: str,
        begin: float,
        end: float,
        *,
        keep: Sequence[str] | None = None,
        tolerance: float | None = None,
        preroll_periods: int | None = None,
        progress: Callable[[Progress], None] | None = None,
        should_stop: Callable[[], bool] | None = None,
    ) -> EdgeWindow:
        """Run a stretch of a study with every switching edge, from its averaged state with the ripple in phase.

        Args:
            study: its name. begin, end: of the window, s of its time.
            keep: names or selections to record instead of the study's own.
            tolerance: relative; None: the study's own, else 1e-7.
            preroll_periods: of the slowest pole, run before the window; None: three.
        Returns:
            A result like a run's, with `.stress`, `.averaged`, `.cycle_average(name)` and `.overlay()`.
        Raises:
            UnknownName: no such study or quantity.
            EdgesRefused: nothing switches, or the window is outside the study.
            SolverError: the solver could not finish.
        """
        from dataclasses import replace

        from polewise.analysis.edge_window import PREROLL_PERIODS, WindowTask, carry_out_window
        from polewise.analysis.magnified import check_window, edge_window, with_stress
        from polewise.results.recording import MemorySink

        plan = self.plan(study, keep=keep)
        if plan.study.magnifies is not None:
            raise NetlistError([magnify_twice(plan.study.span, study)])
        check_window(begin, end, plan.study.run_for_s, study)
        plan = with_stress(replace(plan, record=replace(plan.record, judged=())))
        task = WindowTask(plan, study, begin, end, PREROLL_PERIODS if preroll_periods is None else preroll_periods)
        wishes = RunWishes(tolerance, progress, (), should_stop)
        until, cold = self._averaged_until(task, wishes)
        sink = MemorySink(plan.record.columns)
        run = carry_out_window(task, sink, wishes, self._lock, until, cold=cold)
        if run.trouble is not None:
            raise run.trouble
        return edge_window(plan, run, sink.finish())

    def magnify_settled(self, *, keep: Sequence[str] | None = None, periods: int = 1, tolerance: float = 1e-10) -> EdgeWindow:
        """The periodic steady state with every edge at the operating point, by shooting.

        Args:
            keep: names or selections; None: nodes and paths at top level. periods: how many to show.
        Raises:
            NoOperatingPoint, EdgesRefused.
        """
        from polewise.analysis.magnified import magnify_settled

        prepared = self._prepared[""]
        with self._lock:
            kept = [q for name in keep for q in selected_quantities(prepared.circuit, name)] if keep else default_quantities(prepared.circuit)
        return magnify_settled(prepared.circuit, prepared.network, kept, self._inputs, periods=periods, tolerance=tolerance, guard=self._lock)

    def trust(self, study: str | None = None, *, limits: TrustLimits | None = None, tolerance: float | None = None) -> TrustReport:
        """Where the averages may be believed: for every pole, kept quantity and requirement, with the number that decided it.

        Args:
            study: run for the report; None: the operating point alone. limits: thresholds; None: the documented ones.
            tolerance: relative, of the run.
        Raises:
            UnknownName: no such study. SolverError: the study could not be run.
        """
        from polewise.analysis.trust_of import trust_of, watching
        from polewise.results.recording import MemorySink

        if study is None:
            prepared = self._prepared[""]
            return trust_of(prepared.circuit, prepared.network, self._inputs, self._lock, limits=limits)
        plan = watching(self.plan(study))
        sink = MemorySink(plan.record.columns)
        facts = self.carry_out(plan, sink, tolerance=tolerance)
        if facts.trouble is not None:
            raise facts.trouble
        return self.trust_in(plan, finished(plan, facts, sink.finish()), limits=limits)

    def trust_in(self, plan: StudyPlan, result: Result, *, limits: TrustLimits | None = None) -> TrustReport:
        """The trust report of a study that has been run; see `trust`.

        Args:
            plan: as `analysis.trust_of.watching` makes it. result: of it.
        """
        from polewise.analysis.trust_of import trust_of

        return trust_of(plan.circuit, plan.network, self._inputs, self._lock, plan=plan, result=result, end=result.facts.stand, limits=limits)

    def _averaged_until(self, task: WindowTask, wishes: RunWishes) -> tuple[Callable[[float], Snapshot | None], bool]:
        """How the magnified study gets to a time, and whether it starts from stated values."""
        plan = self.plan(task.study, keep=())

        def until(t: float) -> Snapshot | None:
            until = RunWishes(None, None, (), wishes.should_stop, t)
            facts, snapshot = carry_out(plan, Nothing(), until, self._inputs, self._lock, self._before(plan.study, until))
            if facts.trouble is not None:
                raise facts.trouble
            return snapshot if facts.complete else None

        return until, plan.study.start == "cold"

    # ------------------------------------------------------------ small-signal

    def modes(
        self,
        *,
        at: Place | None = None,
        sensitivities: bool = True,
        region: tuple[float, float, float] | None = None,
        count: int = 20,
    ) -> Modes:
        """Modes with participation, and the elements that move their damping.

        Args:
            at: (study, time in s); None: the operating point.
            sensitivities: whether elements are ranked.
            region: for large systems: oscillations from one frequency (Hz) to another with a damping ratio below the third value; of these the
                `count` least damped ones, clusters with their sizes, without a ranking of elements.

        >>> tank = from_text('''
        ... title "Tank"
        ... reference gnd
        ... feed: a --[1 V]-- gnd
        ... tank: a --[r: 0.2 ohm]--[l: 100 uH]-- b
        ... store: b --[200 uF]-- gnd
        ... ''')
        >>> tank.modes()[0].eigenvalue.imag.__round__(6)
        7000.0
        """
        from polewise.analysis.large_modes import Region, modes_in_region
        from polewise.analysis.modes import find_modes

        with self._lock:
            if region is not None:
                return modes_in_region(self._stand(at), Region(*region), count)
            return find_modes(self._stand(at), sensitivities=sensitivities)

    def response(
        self, y: str | Sequence[str], u: str | Sequence[str], frequencies: Sequence[float] | FloatArray, *, at: Place | None = None
    ) -> ComplexArray:
        """Frequency response of y to u, exact delays and holds included.

        Args:
            y, u: names, or sequences of them.
            frequencies: shape (m,), Hz.
        Returns:
            shape (m,) for two names, else (m, n_y, n_u); SI units of y over those of u.
        """
        from polewise.analysis.response import response

        outputs, inputs = ([y] if isinstance(y, str) else list(y)), ([u] if isinstance(u, str) else list(u))
        with self._lock:
            linear = self._stand(at).between(inputs, outputs)
        values = response(linear, frequencies)
        return values[:, 0, 0] if isinstance(y, str) and isinstance(u, str) else values

    def loop(self, signal: str, frequencies: Sequence[float] | FloatArray, *, at: Place | None = None) -> Loop:
        """Loop gain at a signal, opened there without changing the operating point; margins and Nyquist verdict. See also loops."""
        return self.loops([signal], frequencies, at=at)[0]

    def loops(self, signals: Sequence[str], frequencies: Sequence[float] | FloatArray, *, at: Place | None = None) -> tuple[Loop, ...]:
        """Loop gains at several signals, each with the others closed."""
        from polewise.analysis.loop import open_loops

        with self._lock:
            return open_loops(self._stand(at), signals, frequencies)

    def impedance(
        self,
        node: str | Sequence[str],
        frequencies: Sequence[float] | FloatArray,
        *,
        source: Sequence[str] = (),
        load: Sequence[str] = (),
        at: Place | None = None,
    ) -> Impedance:
        """Impedance at a node ("bus"), between two ("a to b"), at a port ("berth2.inp"), or the matrix at a pair of them (d and q).

        Args:
            source, load: elements or assemblies on either side of the node; what is on neither belongs to the side that is not named.
        """
        from polewise.analysis.impedance import find_impedance

        with self._lock:
            return find_impedance(self._stand(at), [node] if isinstance(node, str) else node, frequencies, source, load)

    def linear(self, inputs: Sequence[str], outputs: Sequence[str], *, at: Place | None = None, pade_order: int = 8) -> StateSpace:
        """State space (E, A, B, C, D) with names and units. Delays become rational forms of `pade_order` here, and only here."""
        from polewise.analysis.handover import hand_over

        with self._lock:
            return hand_over(self._stand(at), inputs, outputs, pade_order=pade_order)

    def tune(
        self,
        signal: str,
        *,
        crossover: float,
        phase_margin: float,
        shape: Shape = "pi",
        error: str | None = None,
        at: Sequence[Place | None] = (None,),
    ) -> Tuned:
        """Gains for a crossover (Hz) and a phase margin (degrees); the netlist is not rewritten, the result holds text to paste.

        Args:
            signal: output of the compensator. error: its input; None: the block's own `error`.
            shape: "pi", "lead", "one zero", "two zeros".
            at: operating points; the first sets the crossover.
        """
        from polewise.analysis.tune import tune

        with self._lock:
            places = [self._stand(place) for place in at]
            return tune(places, signal, error=error, crossover_hz=crossover, phase_margin_deg=phase_margin, shape=shape)

    def stability_limit(self, name: str, low: float, high: float) -> StabilityLimit:
        """Value (SI) of an element, a constant power, a latch or an input at which the circuit stops being stable."""
        from polewise.analysis.limits import stability_limit

        with self._lock:
            return stability_limit(self._stand(None), name, low, high)

    def orbit(self, period: float) -> Orbit:
        """The periodic state of a circuit in phase quantities, and its Floquet multipliers: stable if all lie inside the unit circle.

        Args:
            period: common period of everything that drives the circuit, s.
        """
        from polewise.analysis.orbit import find_orbit

        with self._lock:
            return find_orbit(self._stand(None), period)

    def answered(self, plan: StudyPlan, result: Result) -> Result:
        """A run's result with answers to the study's small-signal orders and the verdict on requirements that rest on them."""
        if not plan.study.asks_analysis or result.trouble is not None:
            return result
        from polewise.analysis.answers import answer_study, judge_answers
        from polewise.analysis.standpoint import Standpoint

        def stand_at(place: Place | None) -> Standpoint:
            return self._stand(place) if place is not None else Standpoint(plan.circuit, plan.network, self._inputs)

        with self._lock:
            answers = answer_study(plan.study, stand_at)
            return result.with_answers(answers, judge_answers(plan.study, answers, stand_at))

    def _stand(self, at: Place | None) -> Standpoint:
        from polewise.analysis.standpoint import Standpoint

        if at is None:
            prepared = self._prepared[""]
            return Standpoint(prepared.circuit, prepared.network, self._inputs)
        study, time_s = at
        plan = self.plan(study, keep=())
        until = RunWishes(None, None, (), None, time_s)
        facts, snapshot = carry_out(plan, Nothing(), until, self._inputs, self._lock, self._before(plan.study, until))
        if facts.trouble is not None:
            raise facts.trouble
        if snapshot is None or not facts.complete:
            raise Interrupted(study)
        return Standpoint(plan.circuit, plan.network, self._inputs, study, snapshot)

    # ------------------------------------------------------------ for faces that record elsewhere than in memory

    def plan(self, study: str, *, keep: Sequence[str] | None = None, sampling: Sampling | None = None) -> StudyPlan:
        """What a run of a study will do and record; `carry_out` does it.

        Raises:
            UnknownName: no such study or quantity.
        """
        from polewise.results.plan import plan_recording

        prepared = self._prepared_for(study)
        definition = prepared.circuit.studies[study]
        stretch, period_s = definition.magnifies, None
        if stretch is not None:
            prepared = self._prepared_for(stretch.study)
            definition = prepared.circuit.studies[study]
            from polewise.analysis.magnified import ripple_period_s, with_stress

            period_s = ripple_period_s(prepared.circuit)
        with self._lock:
            kept: Sequence[Quantity] = definition.keep if keep is None else [q for name in keep for q in selected_quantities(prepared.circuit, name)]
            kept = kept or default_quantities(prepared.circuit)
            record = plan_recording(prepared.circuit.graph, kept, definition.requirements, ripple_period_s=period_s)
            plan = StudyPlan(definition, prepared.circuit, prepared.network, record, sampling or definition.sampling)
            return plan if stretch is None else with_stress(plan)

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
        wishes = RunWishes(tolerance, progress, at, should_stop)
        if plan.study.magnifies is not None:
            return self._magnified(plan, sink, wishes)
        return carry_out(plan, sink, wishes, self._inputs, self._lock, self._before(plan.study, wishes))[0]

    def _magnified(self, plan: StudyPlan, sink: Sink, wishes: RunWishes) -> RunFacts:
        """Carry out a study that magnifies another one."""
        from polewise.analysis.edge_window import WindowTask, carry_out_window
        from polewise.analysis.magnified import check_window

        stretch = plan.study.magnifies
        assert stretch is not None
        check_window(stretch.begin_s, stretch.end_s, plan.circuit.studies[stretch.study].run_for_s, stretch.study, stretch.span)
        task = WindowTask(plan, stretch.study, stretch.begin_s, stretch.end_s)
        until, cold = self._averaged_until(task, wishes)
        return carry_out_window(task, sink, wishes, self._lock, until, cold=cold)

    def _before(self, study: StudyDef, wishes: RunWishes) -> Snapshot | None:
        """Where the study that this one starts from stands at its time. Reading has made sure that no study starts from itself."""
        if study.start != "from":
            return None
        plan = self.plan(study.start_study or "", keep=())
        until = RunWishes(wishes.tolerance, None, (), wishes.should_stop, study.start_time_s)
        facts, snapshot = carry_out(plan, Nothing(), until, self._inputs, self._lock, self._before(plan.study, wishes))
        if facts.trouble is not None:
            raise facts.trouble
        if snapshot is None or not facts.complete:
            raise Interrupted(plan.study.name)
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
                return found_quantity(circuit, name)

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
