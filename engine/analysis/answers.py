"""Answers to a study's small-signal orders, and the verdict on requirements that rest on them."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from polewise.analysis.impedance import Impedance, find_impedance
from polewise.analysis.large_modes import Region, modes_in_region
from polewise.analysis.loop import Loop, open_loops
from polewise.analysis.margins import Margins
from polewise.analysis.modes import Modes, find_modes
from polewise.analysis.point import ComplexArray
from polewise.analysis.response import response
from polewise.analysis.standpoint import Standpoint
from polewise.circuit.model import AnalysisOrder, Requirement, StudyDef
from polewise.grammar.units import Dimension
from polewise.kernels.opcodes import TABLE
from polewise.kernels.program import FloatArray
from polewise.results.verdict import RequirementVerdict
from polewise.results.wording import preferred_unit

POINTS_PER_DECADE = 60  # of curves that a study asks for
POINTS_MIN = 61
LARGE_BRANCHES = 1500  # a circuit with more is asked for its least damped modes in this region only
LARGE_REGION = Region(1.0, 1e5, 0.5)
LARGE_COUNT = 20
DEFAULT_RANGE_HZ = (0.1, 1e6)  # of a requirement whose loop or impedance no order of its study gives a range

Place = tuple[str, float]


@dataclass(frozen=True, slots=True, eq=False)
class ResponseCurve:
    """Answer to `response of Y to U`: values (m,), SI unit of the output over that of the input."""

    output: str
    input: str
    frequencies: FloatArray
    values: ComplexArray
    dimension: Dimension


@dataclass(frozen=True, slots=True, eq=False)
class Answer:
    """What one order found; `found` holds several loops where several signals were named."""

    order: AnalysisOrder
    found: Modes | ResponseCurve | Impedance | tuple[Loop, ...]


def frequencies_of(low_hz: float, high_hz: float) -> FloatArray:
    """A logarithmic grid."""
    count = max(POINTS_MIN, math.ceil(POINTS_PER_DECADE * math.log10(high_hz / low_hz)) + 1)
    return np.geomspace(low_hz, high_hz, count)


def answer_study(study: StudyDef, stand_at: Callable[[Place | None], Standpoint]) -> tuple[Answer, ...]:
    """Carry out the orders.

    Args:
        stand_at: gives the operating point, or where a run stood.
    """
    stands: dict[Place | None, Standpoint] = {}
    answers = []
    for order in study.analyses:
        if order.place not in stands:
            stands[order.place] = stand_at(order.place)
        answers.append(Answer(order, _answer(order, stands[order.place])))
    return tuple(answers)


def _answer(order: AnalysisOrder, stand: Standpoint) -> Modes | ResponseCurve | Impedance | tuple[Loop, ...]:
    if order.kind == "modes":
        if len(stand.circuit.branches) > LARGE_BRANCHES:
            return modes_in_region(stand, LARGE_REGION, LARGE_COUNT)
        return find_modes(stand)
    f = frequencies_of(order.low_hz, order.high_hz)
    if order.kind == "loop":
        return open_loops(stand, order.subjects, f)
    if order.kind == "response":
        linear = stand.between([order.other], [order.subjects[0]])
        dimension = linear.output_dimensions[0] / linear.input_dimensions[0]
        return ResponseCurve(order.subjects[0], order.other, f, response(linear, f)[:, 0, 0], dimension)
    ports = [f"{order.subjects[0]} to {order.other}"] if order.other else list(order.subjects)
    return find_impedance(stand, ports, f, order.source, order.load)


# ---------------------------------------------------------------- requirements


def judge_answers(study: StudyDef, answers: Sequence[Answer], stand_at: Callable[[Place | None], Standpoint]) -> tuple[RequirementVerdict, ...]:
    """Judge the requirements on small-signal answers; what no order of the study answers is asked at the operating point."""
    if not study.analysis_requirements:
        return ()
    judge = _Judge(answers, stand_at)
    return tuple(judge.one(r) for r in study.analysis_requirements)


class _Judge:
    """Keeps what several requirements ask for."""

    def __init__(self, answers: Sequence[Answer], stand_at: Callable[[Place | None], Standpoint]) -> None:
        self.answers, self.stand_at = answers, stand_at
        self.stand: Standpoint | None = None
        self.loops: dict[str, Loop] = {loop.signal: loop for a in answers if isinstance(a.found, tuple) and not a.order.place for loop in a.found}
        self.modes: Modes | None = next((a.found for a in answers if isinstance(a.found, Modes) and not a.order.place), None)
        self.ranges = {a.order.subjects[0]: (a.order.low_hz, a.order.high_hz) for a in answers if a.order.kind == "impedance"}

    def _here(self) -> Standpoint:
        if self.stand is None:
            self.stand = self.stand_at(None)
        return self.stand

    def one(self, requirement: Requirement) -> RequirementVerdict:
        """One row."""
        if requirement.measure == "impedance":
            return self._against_mask(requirement)
        value, where = self._value(requirement)
        graph = self._here().circuit.graph
        low = None if requirement.low is None else graph.value_of(requirement.low)
        high = None if requirement.high is None else graph.value_of(requirement.high)
        return _verdict(requirement, value, low, high, where)

    def _value(self, requirement: Requirement) -> tuple[float, str]:
        measure = requirement.measure
        if measure == "least_damping":
            if self.modes is None:
                self.modes = find_modes(self._here(), sensitivities=False)
            if not len(self.modes):
                return math.inf, "there is no mode"
            worst = self.modes.least_damped
            return worst.damping, f"the mode at {worst.frequency_hz:.5g} Hz"
        if measure == "peak_impedance":
            z, f = self._impedance(requirement.subject.name)
            k = int(np.argmax(z))
            return float(z[k]), f"at {f[k]:.5g} Hz"
        loop = self._loop(requirement.subject.name)
        return _margin(measure, loop.margins)

    def _loop(self, signal: str) -> Loop:
        if signal not in self.loops:
            self.loops[signal] = open_loops(self._here(), [signal], frequencies_of(*DEFAULT_RANGE_HZ))[0]
        return self.loops[signal]

    def _impedance(self, node: str, knots: Sequence[float] = ()) -> tuple[FloatArray, FloatArray]:
        """|Z| over the range of the study's order for the node, else over the limit's knots, else over a wide range."""
        default = (min(knots), max(knots)) if len(knots) > 1 and min(knots) > 0.0 else DEFAULT_RANGE_HZ
        f = frequencies_of(*self.ranges.get(node, default))
        size: FloatArray = np.abs(find_impedance(self._here(), [node], f).total).astype(np.float64)
        return size, f

    def _against_mask(self, requirement: Requirement) -> RequirementVerdict:
        """The worst frequency: where |Z| over its upper limit (or its lower limit over |Z|) is largest."""
        graph = self._here().circuit.graph
        symbol = graph.symbol("frequency", "")
        roots = [node for node in (requirement.low, requirement.high) if node is not None]
        tables = {graph.c[k] for k in graph.reachable(roots) if graph.operation[k] == TABLE}
        z, f = self._impedance(requirement.subject.name, [knot for t in tables for knot in graph.tables[t].knots])
        worst: tuple[float, float, float | None, float | None, float] | None = None
        for size, frequency in zip(z, f, strict=True):
            got = dict(zip(roots, graph.evaluate(roots, {symbol: float(frequency)}), strict=True))
            low = None if requirement.low is None else got[requirement.low]
            high = None if requirement.high is None else got[requirement.high]
            use = max(size / high if high else -math.inf, low / size if low is not None and size > 0 else -math.inf)
            if worst is None or use > worst[0]:
                worst = (float(use), float(size), low, high, float(frequency))
        assert worst is not None
        _, size, low, high, frequency = worst
        return _verdict(requirement, size, low, high, f"at {frequency:.5g} Hz, the worst of the range")


def _margin(measure: str, margins: Margins) -> tuple[float, str]:
    """A margin and where it is taken."""
    if measure == "modulus_margin":
        return margins.modulus, f"at {margins.modulus_frequency_hz:.5g} Hz"
    if measure == "gain_margin":
        nearest = min(margins.gain_crossings, key=lambda g: abs(math.log(g.factor)), default=None)
        return (math.inf, "the loop gain is never real and negative") if nearest is None else (nearest.factor, f"at {nearest.frequency_hz:.5g} Hz")
    if not margins.crossovers:
        return (math.nan if measure == "crossover" else math.inf), "the loop gain never crosses one"
    if measure == "crossover":
        return margins.crossover_hz, "the last crossover"
    if measure == "delay_margin":
        worst = min(margins.crossovers, key=lambda c: c.delay_margin_s)
        return worst.delay_margin_s, f"at {worst.frequency_hz:.5g} Hz"
    worst = min(margins.crossovers, key=lambda c: abs(c.phase_margin_deg))
    return math.radians(worst.phase_margin_deg), f"at {worst.frequency_hz:.5g} Hz"


def _verdict(requirement: Requirement, value: float, low: float | None, high: float | None, where: str) -> RequirementVerdict:
    """A row: the limit that is nearer, and by how much."""
    sides = [(value - low, low, "above")] if low is not None else []
    if high is not None:
        sides.append((high - value, high, "below"))
    margin, limit, side = min(sides, key=lambda s: s[0] if not math.isnan(s[0]) else -math.inf)
    seen = not math.isnan(value)
    passed = seen and margin >= 0.0
    unlimited = math.isinf(value)
    percent = None if limit == 0.0 or unlimited or not seen else 100.0 * margin / abs(limit)
    return RequirementVerdict(
        name=requirement.name,
        text=requirement.text,
        document=requirement.document,
        measure=requirement.measure,
        passed=passed,
        value=None if unlimited or not seen else value,
        limit=limit,
        side=side,
        margin=None if unlimited or not seen else margin,
        margin_percent=percent,
        time_s=None,
        evaluated=seen,
        why=where,
        dimension=requirement.dimension,
        window_s=(0.0, None),
        subject=requirement.subject.name,
        low=low,
        high=high,
        span=requirement.span,
        prefer=preferred_unit(requirement.text, requirement.dimension),
    )
