"""An edge-by-edge window as a user reads it: a result like a run's, with its stress table, the averaged run beside it and cycle averages."""

from __future__ import annotations

import threading
from collections.abc import Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from polewise.analysis.carriers import Carriers, carriers_of
from polewise.analysis.cycle_average import Window, average_curve
from polewise.analysis.edge_window import BesideWindow, OnlyWindow, Stretch, WindowFacts
from polewise.analysis.failures import edges_refused
from polewise.analysis.overlay import Overlay, overlay
from polewise.analysis.periodic import find_periodic, resting_snapshot
from polewise.analysis.point import ComplexArray
from polewise.analysis.stress import StressTable, stress_columns, stress_quantities, stress_table
from polewise.circuit.model import Circuit, Quantity
from polewise.equations.assemble import assemble
from polewise.errors import Chatter
from polewise.grammar.source import Span
from polewise.grammar.units import TIME, format_value
from polewise.network.graph import Network
from polewise.results.curve import Curve
from polewise.results.plan import RecordPlan
from polewise.results.recording import Column, MemorySink, Recording, recorded_curve
from polewise.results.result import Record, Result, RunFacts
from polewise.results.study_run import COUNTERS_TOLD, StudyPlan
from polewise.results.verdict import Verdict, judge
from polewise.solve import transient
from polewise.solve.operating_point import find_operating_point
from polewise.solve.problem import build_problem

if TYPE_CHECKING:
    from matplotlib.figure import Figure

AVERAGE_COMMON_MOST = 4.0  # times the slowest pole's period: a longer common period would smear what an average is to show


class EdgeWindow(Result):
    """A result with every edge: quantities, verdict, events as of any run; and what only edges tell."""

    __slots__ = ("_averaged", "_carriers", "_circuit", "_multipliers", "_stress", "_window")

    def __init__(
        self,
        recording: Recording,
        verdict: Verdict,
        facts: RunFacts,
        window: WindowFacts,
        averaged: Recording | None,
        circuit: Circuit,
        multipliers: ComplexArray | None = None,
    ) -> None:
        super().__init__(recording, verdict, facts)
        carriers = carriers_of(circuit)
        assert carriers is not None
        self._window, self._averaged, self._circuit, self._carriers = window, averaged, circuit, carriers
        self._stress: StressTable | None = None
        self._multipliers = np.zeros(0, dtype=complex) if multipliers is None else multipliers

    @property
    def window(self) -> WindowFacts:
        """From when to when, and how the ripple found its phase."""
        return self._window

    @property
    def carriers(self) -> Carriers:
        """Rates and phases of the poles."""
        return self._carriers

    @property
    def multipliers(self) -> ComplexArray:
        """Of a periodic steady state found by shooting: beyond 1 in size it is not stable. Empty for other windows."""
        return self._multipliers

    @property
    def stress(self) -> StressTable:
        """Ripple, extremes, averages, RMS and losses of every pole's devices and every passive element."""
        if self._stress is None:
            self._stress = stress_table(self._circuit, self._carriers, self.recording)
        return self._stress

    @property
    def has_averaged(self) -> bool:
        """Whether there is an averaged run beside it."""
        return self._averaged is not None

    @property
    def averaged(self) -> Record:
        """The averaged run over the same stretch (a little beyond it at both ends).

        Raises:
            EdgesRefused: a periodic steady state has none.
        """
        if self._averaged is None:
            raise edges_refused("a periodic steady state has no averaged run beside it; `settled` is its averaged picture")
        return Record(self._averaged)

    @property
    def average_period_s(self) -> float:
        """The period that cycle averages are taken over: the common one of all poles where it is short, else the slowest pole's."""
        common, longest = self._window.common_period_s, self._carriers.longest_s
        return common if common is not None and common <= AVERAGE_COMMON_MOST * longest else longest

    def curve(self, name: str) -> Curve:
        """A quantity as polynomials between its points."""
        return recorded_curve(self.recording, name)

    def cycle_average(self, name: str, *, period: float | None = None, window: Window = "centred") -> Curve:
        """The cycle average of a quantity as a curve: `.at(times)` gives values.

        Args:
            period: s; None: average_period_s. window: "centred" or "trailing".
        """
        return average_curve(self.curve(name), self.average_period_s if period is None else period, window=window)

    def overlay(self) -> Overlay:
        """Averaged run, edges and cycle average of every kept quantity, with the error between the first and the last."""
        names = tuple(name for name in self.names if not self.recording.columns[_place(self.recording, name)].is_condition)
        return overlay(self.recording, self.averaged.recording, names, self.average_period_s, self._facts.title, self._facts.study)

    def figure(self) -> Figure:
        """The overlay as a figure; the edges alone for a periodic steady state."""
        return super().figure() if self._averaged is None else self.overlay().figure()

    def __repr__(self) -> str:
        state = "complete" if self.complete else "incomplete"
        begin, end = format_value(self.window.begin_s, TIME), format_value(self.window.end_s, TIME)
        return f"<EdgeWindow of {self.study}, {begin} .. {end}: {len(self.names)} quantities, {self.time.size} points, {state}>"


def _place(recording: Recording, name: str) -> int:
    return next(k for k, c in enumerate(recording.columns) if c.name == name)


def with_stress(plan: StudyPlan) -> StudyPlan:
    """The same plan that also records what the stress table needs."""
    record = plan.record
    more = [q for q in stress_quantities(plan.circuit) if q.name not in {c.name for c in record.columns}]
    columns = stress_columns(plan.circuit)
    return replace(plan, record=RecordPlan((*record.outputs, *more), (*record.columns, *columns), record.judged))


def check_window(begin_s: float, end_s: float, length_s: float | None, study: str, span: Span | None = None) -> None:
    """Refuse a window that is none or lies outside its study.

    Raises:
        EdgesRefused: says why.
    """
    if not 0.0 <= begin_s < end_s:
        raise edges_refused(f"a window from {format_value(begin_s, TIME)} to {format_value(end_s, TIME)} is empty")
    if length_s is not None and end_s > length_s * (1.0 + 1e-9):
        raise edges_refused(
            f"the window ends at {format_value(end_s, TIME)}, after the end of `{study}` at {format_value(length_s, TIME)}", span=span
        )


def ripple_period_s(circuit: Circuit) -> float:
    """The period that a requirement's ripple is looked for in: of the slowest pole.

    Raises:
        EdgesRefused: nothing switches.
    """
    carriers = carriers_of(circuit)
    if carriers is None:
        raise edges_refused("the circuit has no pole, so nothing in it switches", "an ordinary run shows all there is")
    return carriers.longest_s


def edge_window(plan: StudyPlan, facts: RunFacts, recording: Recording) -> EdgeWindow:
    """Put a window's result together and judge its requirements.

    Args:
        facts: of carry_out_window, with the window in `beside`.
    """
    beside = facts.beside
    assert isinstance(beside, BesideWindow)
    verdict = judge(plan.study.name, plan.record.judged, recording, planned_end_s=facts.planned_s, reached_s=facts.reached_s)
    return EdgeWindow(recording, verdict, facts, beside.window, beside.averaged, plan.circuit)


def magnify_settled(
    circuit: Circuit,
    network: Network,
    kept: Sequence[Quantity],
    latches: Mapping[str, float],
    *,
    periods: int = 1,
    tolerance: float = 1e-10,
    guard: AbstractContextManager[object] | None = None,
) -> EdgeWindow:
    """The periodic steady state at the operating point.

    Args:
        kept: what to record. latches: inputs that differ from their start values. periods: common periods to show.
        tolerance: relative.
    """
    guard = threading.RLock() if guard is None else guard
    carriers = carriers_of(circuit)
    if carriers is None:
        raise edges_refused("the circuit has no pole, so nothing in it switches", "`settle` shows all there is")
    with guard:
        averaged = assemble(circuit, network)
        problem = build_problem(averaged)
        snapshot = resting_snapshot(averaged, problem, find_operating_point(averaged, start_latches=latches))
    stretch = Stretch(circuit, network, None, carriers, tolerance, guard)
    more = stress_quantities(circuit)
    columns = (*(Column(q.name, q.dimension, q.is_condition, "kept") for q in kept), *stress_columns(circuit))
    try:
        found = find_periodic(stretch, stretch.edges((*kept, *more)), snapshot)
    except Chatter:
        stretch.latched = True
        found = find_periodic(stretch, stretch.edges((*kept, *more)), snapshot)
    sink = MemorySink(columns)
    # One period is run ahead, so that the edge with which the shown one begins is seen from both sides.
    begin = found.start.time_s + stretch.span_s
    end = begin + periods * stretch.span_s
    edges = stretch.edges((*kept, *more), hit=(begin,))
    summary = transient.run(edges, start=found.start, stop_s=end, tolerance=tolerance, sink=OnlyWindow(sink, begin, end))
    counters = {name.replace("_", " "): getattr(summary.counters, name) for name in COUNTERS_TOLD}
    facts = RunFacts(circuit.title, "settled", end, summary.end_s, summary.complete, None, (), counters, summary.counters.wall_s)
    window = WindowFacts(begin, end, begin, stretch.common_period_s, found.found, found.residual, found.note)
    return EdgeWindow(sink.finish(), Verdict("settled", ()), facts, window, None, circuit, found.multipliers)
