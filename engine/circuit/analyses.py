"""Small-signal orders of a study and requirements on their answers: names looked up, ranges and limits checked."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal

from polewise.circuit import event_messages, name_messages, value_messages
from polewise.circuit.asking import Asked, fits, positive_frequency, positive_time
from polewise.circuit.dimensions import CONDITION, FREQUENCY, PLAIN, POISON, TIME, Quality, quality
from polewise.circuit.model import AnalysisOrder, Quantity, Requirement
from polewise.circuit.naming import find_thing
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env
from polewise.expression.graph import Node
from polewise.grammar import syntax, units
from polewise.grammar.layout import reference_text

if TYPE_CHECKING:
    from polewise.circuit.expansion import Expansion

_INDEX = re.compile(r"\{(\d+)\}")


@dataclass(frozen=True, slots=True)
class AnalysisMeasure:
    """What can be required of small-signal answers.

    takes: "signal", "node", or "" for nothing. result: kind of the value. varies: whether the limit may read `frequency` (a mask).
    """

    name: str
    takes: Literal["signal", "node", ""]
    result: Quality
    document: str
    varies: bool = False


_OHM = quality(units.RESISTANCE)
ANALYSIS_MEASURES: Final[Mapping[str, AnalysisMeasure]] = {
    m.name: m
    for m in (
        AnalysisMeasure("phase_margin", "signal", PLAIN, "the smallest phase margin of the loop at a signal, as an angle"),
        AnalysisMeasure("gain_margin", "signal", PLAIN, "the factor by which the loop gain may change, nearest to one"),
        AnalysisMeasure("delay_margin", "signal", TIME, "how much more delay the loop bears"),
        AnalysisMeasure("modulus_margin", "signal", PLAIN, "the smallest distance of the loop gain from -1"),
        AnalysisMeasure("crossover", "signal", FREQUENCY, "the last frequency at which the loop gain is one"),
        AnalysisMeasure("least_damping", "", PLAIN, "the smallest damping ratio of all modes"),
        AnalysisMeasure("peak_impedance", "node", _OHM, "the largest impedance at a node over the range"),
        AnalysisMeasure("impedance", "node", _OHM, "the impedance at a node, against a limit that may vary with `frequency`", varies=True),
    )
}


def spelled(reference: syntax.Reference) -> str:
    """A reference as a name that can be looked up: berth{2}.reg → berth2.reg."""
    return _INDEX.sub(r"\1", reference_text(reference))


def finish_analysis(x: Expansion, order: syntax.Analysis, env: Env) -> AnalysisOrder | None:
    """A small-signal order, None where something in it is wrong."""
    good = True
    for reference in (*order.subjects, *(() if order.other is None else (order.other,)), *order.source, *order.load):
        as_value = order.kind in ("loop", "response")
        if as_value:
            good &= x.lower(reference, env)[1] is not POISON
        else:
            good &= find_thing(x, reference, env) is not None
    low = high = 0.0
    if order.low is not None and order.high is not None:
        first, last = (positive_frequency(x, e, env, "`over`") for e in (order.low, order.high))
        if first is None or last is None:
            return None
        if first >= last:
            x.report.add(value_messages.bounds_swapped(order.low.span.to(order.high.span), "over"))
            return None
        low, high = first, last
    place = None
    if order.place is not None:
        time_s = positive_time(x, order.place.time, env, "`at`", zero=True)
        if order.place.study not in x.studies_by_name:
            x.report.add(event_messages.unknown_study(order.place.study_span, order.place.study, nearest(order.place.study, x.studies_by_name)))
            return None
        if time_s is None:
            return None
        place = (order.place.study, time_s)
    if not good:
        return None
    return AnalysisOrder(
        kind=order.kind,  # type: ignore[arg-type]
        subjects=tuple(spelled(r) for r in order.subjects),
        other="" if order.other is None else spelled(order.other),
        low_hz=low,
        high_hz=high,
        source=tuple(spelled(r) for r in order.source),
        load=tuple(spelled(r) for r in order.load),
        place=place,
        text=" ".join(order.span.text.split()),
        span=order.span,
    )


def is_analysis_measure(x: Expansion, subject: syntax.Expression) -> bool:
    """Whether a requirement's subject is a call of one of these measures."""
    return isinstance(subject, syntax.Call) and subject.name in ANALYSIS_MEASURES and x.top.find(subject.name) is None


def analysis_requirement(x: Expansion, order: syntax.Require, env: Env, name: str, text: str) -> Requirement | None:
    """A requirement on a small-signal answer."""
    call = order.subject
    assert isinstance(call, syntax.Call)
    rule = ANALYSIS_MEASURES[call.name]
    wanted = 1 if rule.takes else 0
    if len(call.arguments) != wanted or call.settings:
        shown = rule.takes or ""
        x.report.add(name_messages.argument_count(call.span, rule.name, len(call.arguments) + len(call.settings), shown, None))
        return None
    subject = Quantity("", x.graph.constant(0.0), units.NONE)
    if rule.takes:
        argument = call.arguments[0]
        if not isinstance(argument, syntax.Reference):
            x.report.add(event_messages.requirement_subject(argument.span, rule.name, rule.takes))
            return None
        if rule.takes == "signal":
            node, kind = x.lower(argument, env)
            if kind is POISON:
                return None
            if kind is CONDITION:
                x.report.add(value_messages.condition_as_number(argument.span, f"`{rule.name}`"))
                return None
            subject = Quantity(spelled(argument), node, kind.dimension)
        else:
            if find_thing(x, argument, env) is None:
                return None
            subject = Quantity(spelled(argument), x.graph.constant(0.0), units.NONE)
    if order.relation is None:
        x.report.add(event_messages.requirement_without_bound(order.span, call.span))
        return None
    place = env.but(parameters={"frequency": (x.graph.symbol("frequency", ""), FREQUENCY)}) if rule.varies else env
    limits: list[Node | None] = []
    for e in (order.low, order.high):
        if e is None:
            limits.append(None)
            continue
        node, kind = x.lower(e, place)
        if kind is POISON or not fits(x, kind, Asked(rule.result, f"`{order.relation}`", call.span), e.span):
            return None
        if not rule.varies and not x.graph.is_constant(node):
            x.report.add(event_messages.requirement_limit_varies(e.span, rule.name))
            return None
        limits.append(node)
    if order.window_start is not None:
        x.report.add(event_messages.requirement_window(order.window_start.span, rule.name))
        return None
    return Requirement(name, rule.name, subject, (), rule.result.dimension, limits[0], limits[1], (0.0, None), text, order.document, order.span)
