"""Studies: how they start, what they run and keep, their events, and requirements with the measures they may ask for."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

from polewise.circuit import box_messages, event_messages, file_messages, name_messages, value_messages
from polewise.circuit.analyses import ANALYSIS_MEASURES, analysis_requirement, finish_analysis, is_analysis_measure
from polewise.circuit.asking import Asked, constant_number, fits, positive_time
from polewise.circuit.declare import declare_path_given
from polewise.circuit.dimensions import CONDITION, PLAIN, POISON, TIME, Quality, settled
from polewise.circuit.events import finish_event
from polewise.circuit.expansion import Expansion
from polewise.circuit.functions import BUILT_IN
from polewise.circuit.model import AnalysisOrder, ClockEvent, ConditionEvent, MagnifiedStretch, Quantity, Requirement, StudyDef, TimeEvent
from polewise.circuit.naming import find_thing, has_star, selected
from polewise.circuit.near import nearest
from polewise.circuit.scope import Env
from polewise.circuit.things import GivenThing, StudyThing, Thing
from polewise.expression.graph import Node
from polewise.grammar import syntax
from polewise.grammar.source import Span

# The loosest and the tightest relative tolerance that means something in double precision.
TOLERANCE_LOOSEST: Final = 0.1
TOLERANCE_TIGHTEST: Final = 1e-13
STARTS: Final = ("settled", "cold", "from")
# Orders of a study that runs; one that magnifies another has none of them.
_OF_A_RUN: Final = (syntax.Start, syntax.RunFor, syntax.At, syntax.Every, syntax.Whenever, syntax.Given, syntax.Sampling, syntax.Analysis)


@dataclass(frozen=True, slots=True)
class MeasureRule:
    """What a requirement's measure takes and gives.

    parameters: names of constants after the subject; all plain numbers. result: kind of the measured value from the subject's.
    """

    name: str
    parameters: tuple[str, ...]
    result: Callable[[Quality], Quality]
    document: str


MEASURES: Final[Mapping[str, MeasureRule]] = {
    m.name: m
    for m in (
        MeasureRule("settling_time", ("band",), lambda q: TIME, "time until x stays within +- band of its value at the window's end"),
        MeasureRule("overshoot", (), lambda q: PLAIN, "how far x goes beyond its final value, as a share of its whole change"),
        MeasureRule("peak", (), lambda q: q, "the largest value"),
        MeasureRule("lowest", (), lambda q: q, "the smallest value"),
        MeasureRule("ripple", (), lambda q: q, "the largest peak-to-peak value within a switching period; of a study that magnifies"),
        MeasureRule("swing", (), lambda q: q, "largest minus smallest value"),
        MeasureRule("mean", (), lambda q: q, "the average over time"),
        MeasureRule("rms", (), lambda q: q, "the root of the average square over time"),
        MeasureRule("final", (), lambda q: q, "the value at the window's end"),
        MeasureRule("integral", (), lambda q: q.times(TIME) or POISON, "the integral over time"),
    )
}


def declare_study_givens(x: Expansion, name: str) -> None:
    """Let the givens of one study count before all that the files say. Called before anything is worked out."""
    thing = x.studies_by_name.get(name)
    if thing is None:
        return
    for order in thing.written.orders:
        if isinstance(order, syntax.Given):
            declare_path_given(x, x.top, order, Env(x.top, {}, f"{name}.given"), -1)


def check_study_givens(x: Expansion, thing: StudyThing) -> None:
    """Givens of a study that this expansion is not made for: their targets and units, all the same."""
    for order in thing.written.orders:
        if not isinstance(order, syntax.Given) or order.value is None:
            continue
        env = Env(x.top, {}, f"{thing.flat}.given", memory="it must not vary")
        node, quality = x.lower(order.value, env)
        if has_star(order.target):
            continue
        target = _quiet_find(x, order.target, env)
        if not isinstance(target, GivenThing):
            known = list(x.givens)
            x.report.add(
                value_messages.unknown_given(
                    order.target.span, order.target.span.text, nearest(order.target.span.text, known), None if target is None else target.word
                )
            )
            continue
        if quality is POISON:
            continue
        if not x.graph.is_constant(node):
            kind, leaf = x.graph.symbols[x.graph.symbols_under([node])[0]] if x.graph.symbols_under([node]) else ("", "")
            x.report.add(value_messages.varying_given(order.value.span, f"the given `{target.flat}`", leaf or kind, target.span))
            continue
        fits(x, quality, Asked(target.quality, f"the given `{target.flat}`", target.span), order.value.span)


def _quiet_find(x: Expansion, reference: syntax.Reference, env: Env) -> Thing | None:
    x.report.mute += 1
    try:
        return find_thing(x, reference, env)
    finally:
        x.report.mute -= 1


def finish_study(x: Expansion, thing: StudyThing) -> StudyDef:
    """A study as read."""
    written = thing.written
    start = "settled"
    start_study: str | None = None
    start_time: float | None = None
    run_for = tolerance = None
    sampling = None
    keep: list[Quantity] = []
    requirements: list[Requirement] = []
    analyses: list[AnalysisOrder] = []
    magnifies: MagnifiedStretch | None = None
    analysis_requirements: list[Requirement] = []
    times: list[TimeEvent] = []
    clocks: list[ClockEvent] = []
    conditions: list[ConditionEvent] = []
    for position, order in enumerate(written.orders):
        env = Env(x.top, {}, f"{written.name}#{position + 1}")
        if isinstance(order, syntax.Start):
            start = order.how if order.how in STARTS else "settled"  # another word is reported by the parser
            if order.how == "from":
                start_study, start_time = order.study, _start_time(x, written, order, env)
        elif isinstance(order, syntax.RunFor):
            run_for = positive_time(x, order.time, env, "`run for`", zero=False)
        elif isinstance(order, syntax.Keep):
            for item in order.items:
                keep += [q for q in _kept(x, item, env) if q.name not in {k.name for k in keep}]
        elif isinstance(order, syntax.StudyTolerance):
            tolerance = _study_tolerance(x, order, env)
        elif isinstance(order, syntax.Sampling):
            sampling = order.how
        elif isinstance(order, syntax.Require):
            made = _requirement(x, order, env, len(requirements) + len(analysis_requirements) + 1)
            if made is not None:
                _check_requirement_name(x, made, [*requirements, *analysis_requirements])
                (analysis_requirements if made.measure in ANALYSIS_MEASURES else requirements).append(made)
        elif isinstance(order, syntax.Analysis):
            asked = finish_analysis(x, order, env)
            if asked is not None:
                analyses.append(asked)
        elif isinstance(order, syntax.Magnify):
            magnifies = _stretch(x, written, order, env) or magnifies
        elif isinstance(order, syntax.At | syntax.Every | syntax.Whenever):
            finish_event(x, order, env, (times, clocks, conditions))
        elif not isinstance(order, syntax.Given):
            x.report.add(file_messages.not_yet(order.span, f"`{order.span.text.split()[0]}`"))
    if not any(isinstance(order, syntax.Magnify) for order in written.orders):
        _check_times(x, written, run_for, times, requirements)
    return StudyDef(
        written.name,
        written.document,
        start,  # type: ignore[arg-type]
        start_study,
        start_time,
        run_for,
        tuple(keep),
        tuple(requirements),
        tuple(times),
        tuple(clocks),
        tuple(conditions),
        tolerance,
        sampling if sampling in ("exact", "mean") else None,  # type: ignore[arg-type]
        any(isinstance(order, syntax.Given) for order in written.orders),
        thing.span,
        tuple(analyses),
        tuple(analysis_requirements),
        magnifies,
    )


def _stretch(x: Expansion, study: syntax.Study, order: syntax.Magnify, env: Env) -> MagnifiedStretch | None:
    """A stretch to be magnified. The study that asks for it runs nothing of its own."""
    own = next((o for o in study.orders if isinstance(o, _OF_A_RUN)), None)
    target = x.studies_by_name.get(order.study)
    if own is not None:
        x.report.add(event_messages.magnify_with(own.span, order.span, order.study))
    if target is None:
        x.report.add(event_messages.unknown_study(order.study_span, order.study, nearest(order.study, x.studies_by_name)))
        return None
    if any(isinstance(o, syntax.Magnify) for o in target.written.orders):
        x.report.add(event_messages.magnify_twice(order.study_span, order.study))
        return None
    begin, end = positive_time(x, order.low, env, "`over`", zero=True), positive_time(x, order.high, env, "`over`", zero=False)
    if begin is None or end is None:
        return None
    if begin >= end:
        x.report.add(value_messages.bounds_swapped(order.low.span.to(order.high.span), "over"))
        return None
    return MagnifiedStretch(order.study, begin, end, order.span)


def _start_time(x: Expansion, study: syntax.Study, order: syntax.Start, env: Env) -> float | None:
    assert order.study is not None
    if order.study == study.name:
        x.report.add(event_messages.study_from_itself(order.span, study.name))
    elif order.study not in x.studies_by_name:
        x.report.add(event_messages.unknown_study(order.span, order.study, nearest(order.study, x.studies_by_name)))
    elif any(isinstance(o, syntax.Magnify) for o in x.studies_by_name[order.study].written.orders):
        x.report.add(event_messages.magnify_twice(order.span, order.study))
    elif _study_circle(x, study.name):
        x.report.add(event_messages.study_from_itself(order.span, study.name))
    return None if order.time is None else positive_time(x, order.time, env, "`at`", zero=True)


def _study_circle(x: Expansion, name: str) -> bool:
    """Whether a study starts, through others, from itself."""
    at: str | None = name
    for _ in range(len(x.studies_by_name) + 1):
        thing = x.studies_by_name.get(at) if at is not None else None
        if thing is None:
            return False
        at = next((o.study for o in thing.written.orders if isinstance(o, syntax.Start)), None)
        if at == name:
            return True
    return False


def _study_tolerance(x: Expansion, order: syntax.StudyTolerance, env: Env) -> float | None:
    value = constant_number(x, order.value, env, Asked(PLAIN, "`tolerance`"))
    if value is not None and not TOLERANCE_TIGHTEST <= value <= TOLERANCE_LOOSEST:
        x.report.add(event_messages.tolerance_range(order.value.span, TOLERANCE_TIGHTEST, TOLERANCE_LOOSEST))
        return None
    return value


def _kept(x: Expansion, item: syntax.Reference, env: Env) -> list[Quantity]:
    if has_star(item):
        return [quantity(x, name, value) for name, value in selected(x, item, env) if value[1] is not POISON]
    value = x.lower(item, env)
    return [] if value[1] is POISON else [quantity(x, item.span.text.replace(" ", ""), value)]


def quantity(x: Expansion, name: str, value: tuple[Node, Quality]) -> Quantity:
    """A value as something to read."""
    node, kind = value
    return Quantity(name, node, kind.dimension, kind is CONDITION)


def _check_times(x: Expansion, study: syntax.Study, run_for: float | None, times: list[TimeEvent], requirements: list[Requirement]) -> None:
    if run_for is None:
        if (requirements or times) and not any(isinstance(o, syntax.RunFor) for o in study.orders):
            x.report.add(event_messages.study_without_run(study.name_span, study.name))
        return
    for event in times:
        if event.time_s > run_for:
            x.report.add(event_messages.event_after_end(event.span, event.time_s, run_for, study.name))
    for requirement in requirements:
        if requirement.window_s[0] >= run_for:
            x.report.add(event_messages.window_after_end(requirement.span, requirement.window_s[0], run_for, study.name))


# ---------------------------------------------------------------- requirements


def _check_requirement_name(x: Expansion, made: Requirement, others: list[Requirement]) -> None:
    other = next((r for r in others if r.name == made.name), None)
    if other is not None:
        x.report.add(name_messages.declared_twice(made.span, made.name, "requirement", "requirement", other.span))


def _requirement(x: Expansion, order: syntax.Require, env: Env, number: int) -> Requirement | None:
    subject = order.subject
    measure = "value"
    parameters: tuple[float, ...] = ()
    document = order.document
    text = " ".join(_text_of(order).split())
    name = order.name if order.name is not None else f"requirement {number}"
    if is_analysis_measure(x, subject):
        return analysis_requirement(x, order, env, name, text)
    window = _window(x, order, env)
    if isinstance(subject, syntax.Call) and subject.name in MEASURES and subject.name not in BUILT_IN and x.top.find(subject.name) is None:
        rule = MEASURES[subject.name]
        got = _measured(x, subject, rule, env)
        if got is None:
            return None
        node, kind, parameters, result, subject_span = *got[0], got[1], got[2], got[3]
        measure = rule.name
    else:
        if isinstance(subject, syntax.Call) and x.top.find(subject.name) is None and subject.name not in BUILT_IN:
            close = nearest(subject.name, [*MEASURES, *ANALYSIS_MEASURES, *BUILT_IN])
            x.report.add(event_messages.unknown_measure(subject.name_span, subject.name, close, list(MEASURES)))
            return None
        node, kind = x.lower(subject, env)
        result, subject_span = settled(kind), subject.span
    if kind is POISON or window is None:
        return None
    if order.relation is None:
        if measure != "value":
            x.report.add(event_messages.requirement_without_bound(order.span, subject.span))
            return None
        if kind is not CONDITION:
            x.report.add(event_messages.requirement_without_bound(order.span, subject.span))
            return None
        measure = "condition"
        low = high = None
    elif kind is CONDITION and measure == "value":
        x.report.add(event_messages.condition_with_bound(subject.span, order.relation))
        return None
    else:
        bounds = _bounds(x, order, env, result, subject.span)
        if bounds is None:
            return None
        low, high = bounds
    read = Quantity(" ".join(subject_span.text.split()), node, kind.dimension, kind is CONDITION)
    return Requirement(name, measure, read, parameters, result.dimension, low, high, window, text, document, order.span)


def _text_of(order: syntax.Require) -> str:
    """The requirement as written, without its name and its reason."""
    end = order.subject.span
    for part in (order.low, order.high, order.window_start, order.window_end):
        if part is not None and part.span.end > end.end:
            end = part.span
    return order.subject.span.to(end).text


def _measured(x: Expansion, call: syntax.Call, rule: MeasureRule, env: Env) -> tuple[tuple[Node, Quality], tuple[float, ...], Quality, Span] | None:
    wanted_count = 1 + len(rule.parameters)
    by_name = {s.name: s for s in call.settings}
    extra = [s for s in call.settings if s.name not in rule.parameters]
    if extra:
        x.report.add(
            box_messages.unknown_setting(
                extra[0].name_span, extra[0].name, rule.name, nearest(extra[0].name, rule.parameters), list(rule.parameters), None
            )
        )
        return None
    if len(call.arguments) + len(by_name) != wanted_count or not call.arguments:
        x.report.add(name_messages.argument_count(call.span, rule.name, len(call.arguments), ", ".join(("x", *rule.parameters)), None))
        return None
    value = x.lower(call.arguments[0], env)
    if value[1] is CONDITION:
        x.report.add(value_messages.condition_as_number(call.arguments[0].span, f"`{rule.name}`"))
        return None
    parameters = []
    for k, name in enumerate(rule.parameters):
        e = by_name[name].value if name in by_name else call.arguments[1 + k]
        number = constant_number(x, e, env, Asked(PLAIN, f"`{name}` of `{rule.name}`"))
        if number is None:
            return None
        if number <= 0.0:
            x.report.add(event_messages.band_not_positive(e.span, name, rule.name))
            return None
        parameters.append(number)
    return value, tuple(parameters), rule.result(settled(value[1])), call.arguments[0].span


def _bounds(x: Expansion, order: syntax.Require, env: Env, result: Quality, span: Span) -> tuple[Node | None, Node | None] | None:
    reason = f"`{order.relation}`"
    nodes: list[Node | None] = []
    for e in (order.low, order.high):
        if e is None:
            nodes.append(None)
            continue
        node, quality = x.lower(e, env)
        if quality is POISON or not fits(x, quality, Asked(result, reason, span), e.span):
            return None
        nodes.append(node)
    low, high = nodes
    if low is not None and high is not None:
        a, b = x.graph.value_of(low), x.graph.value_of(high)
        if a is not None and b is not None and a > b:
            assert order.low is not None
            assert order.high is not None
            x.report.add(value_messages.bounds_swapped(order.low.span.to(order.high.span), "within"))
            return None
    return low, high


def _window(x: Expansion, order: syntax.Require, env: Env) -> tuple[float, float | None] | None:
    start: float | None = 0.0
    end: float | None = None
    word = "`after`" if order.window_end is None else "`during`"
    if order.window_start is not None:
        start = positive_time(x, order.window_start, env, word, zero=True)
    if order.window_end is not None:
        end = positive_time(x, order.window_end, env, word, zero=True)
        if end is None:
            return None
        if start is not None and end <= start:
            assert order.window_start is not None
            x.report.add(value_messages.bounds_swapped(order.window_start.span.to(order.window_end.span), "during"))
            return None
    return None if start is None else (start, end)
