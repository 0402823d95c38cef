"""Questions that no average can answer, found in the text of a study: ripple, device stress, windows and pulses shorter than a period."""

from __future__ import annotations

from itertools import pairwise

from polewise.analysis.carriers import Carriers
from polewise.analysis.trust import Finding, Trust
from polewise.circuit.model import Circuit, Requirement, StudyDef, TimeEvent
from polewise.grammar.units import TIME, format_value
from polewise.results.plan import unknowable

_MAGNIFY = "ask it in a study with `magnify STUDY over T1 .. T2`"


def question_findings(circuit: Circuit, study: StudyDef, carriers: Carriers) -> list[Finding]:
    """What the study's requirements and events ask beyond an average."""
    period_s = carriers.longest_s
    period = format_value(period_s, TIME, digits=3)
    found = [_requirement(circuit, r, study, period_s, period) for r in study.requirements]
    for first, second in _pulses((*circuit.time_events, *study.time_events)):
        gap = second.time_s - first.time_s
        if gap < period_s:
            targets = {a.target for a in first.assignments} & {a.target for a in second.assignments}
            length = format_value(gap, TIME, digits=3)
            found.append(
                Finding(
                    "study",
                    study.name,
                    "short event",
                    Trust.NOT_VALID,
                    f"{length} between two events, a period is {period}",
                    period_s / gap,
                    f"`{min(targets)}` is set at {format_value(first.time_s, TIME)} and again {length} later: "
                    "within a switching period the average has no meaning",
                    f"look at it with `magnify {study.name} over …`",
                )
            )
    if study.run_for_s is not None and study.run_for_s < period_s:
        length = format_value(study.run_for_s, TIME, digits=3)
        why = "the whole study is shorter than a switching period"
        found.append(
            Finding(
                "study", study.name, "short study", Trust.NOT_VALID, f"{length} of {period}", period_s / study.run_for_s, why, "run it for longer"
            )
        )
    return [f for f in found if f is not None]


def _requirement(circuit: Circuit, requirement: Requirement, study: StudyDef, period_s: float, period: str) -> Finding | None:
    name = requirement.name
    why = unknowable(circuit.graph, requirement)
    if why:
        return Finding("requirement", name, "question", Trust.NOT_VALID, requirement.measure, 2.0, why.partition(";")[0], _MAGNIFY)
    begin, end = requirement.window_s
    last = end if end is not None else study.run_for_s
    if last is not None and 0.0 < last - begin < period_s:
        length = format_value(last - begin, TIME, digits=3)
        sentence = f"its window of {length} is shorter than a switching period of {period}: there is no average inside a period"
        return Finding("requirement", name, "short window", Trust.NOT_VALID, length, period_s / (last - begin), sentence, _MAGNIFY)
    if requirement.measure == "settling_time" and requirement.high is not None:
        limit = circuit.graph.value_of(requirement.high)
        if limit is not None and 0.0 < limit < period_s:
            length = format_value(limit, TIME, digits=3)
            sentence = f"it asks for {length}, less than a switching period of {period}"
            return Finding("requirement", name, "short window", Trust.NOT_VALID, length, period_s / limit, sentence, _MAGNIFY)
    return None


def _pulses(events: tuple[TimeEvent, ...]) -> list[tuple[TimeEvent, TimeEvent]]:
    """Neighbouring events that set the same thing."""
    by_target: dict[str, list[TimeEvent]] = {}
    for event in sorted(events, key=lambda e: e.time_s):
        for assignment in event.assignments:
            by_target.setdefault(assignment.target, []).append(event)
    return [(a, b) for chain in by_target.values() for a, b in pairwise(chain) if b.time_s > a.time_s]
