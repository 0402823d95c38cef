"""The verdict: each requirement of a study with its value, limit, margin and the time of the worst point; pass or fail, and why."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from polewise.circuit.model import Requirement
from polewise.grammar.source import Span
from polewise.grammar.units import TIME, Dimension, format_value
from polewise.results.curve import AFTER, BEFORE, Curve
from polewise.results.measures import MEASURES, Measured, MeasureInput
from polewise.results.plan import Judged, Limit
from polewise.results.recording import Recording, recorded_curve
from polewise.results.wording import difference_text, preferred_unit, value_text

# A limit counts as touched, not crossed, within this share of its size: far below any solver tolerance, above the rounding of an interpolated
# value that rests at its bound.
ROUNDING: Final = 1e-9


@dataclass(frozen=True, slots=True)
class RequirementVerdict:
    """One requirement, judged.

    Args:
        name, text, document: as in the netlist.
        passed: whether it holds.
        value: the measured value, SI: for a plain value the one at the worst point. None for a condition or where nothing could be measured.
        limit: the limit it comes closest to or crosses, SI; None for a condition.
        side: "above" where the value must stay above the limit, "below", or "" for a condition.
        margin: how far it stays inside the limit, SI; negative where it fails.
        margin_percent: the margin as a share of the limit's size, %; None for a limit of zero.
        time_s: when the worst point is reached, s from the study's start; None where the measure belongs to the whole window.
        evaluated: whether all of the window was seen; False counts as fail.
        why: one sentence.
        dimension: of value, limit and margin.
        window_s: what was asked for; its end is None for the study's end.
        subject: column that was judged. low, high: its limits, SI, or the columns of limits that vary.
        prefer: unit to print values in, from the requirement's own text.
        span: where the requirement stands.
    """

    name: str
    text: str
    document: str | None
    measure: str
    passed: bool
    value: float | None
    limit: float | None
    side: str
    margin: float | None
    margin_percent: float | None
    time_s: float | None
    evaluated: bool
    why: str
    dimension: Dimension
    window_s: tuple[float, float | None]
    subject: str
    low: Limit
    high: Limit
    span: Span
    prefer: str | None = None

    @property
    def value_text(self) -> str:
        """The value with its unit, "" where there is none."""
        return "" if self.value is None else value_text(self.value, self.dimension, prefer=self.prefer)

    @property
    def limit_text(self) -> str:
        """The limit with its unit, "" where there is none."""
        return "" if self.limit is None else value_text(self.limit, self.dimension, prefer=self.prefer)

    @property
    def margin_text(self) -> str:
        """The margin with its unit, "" where there is none."""
        return "" if self.margin is None else difference_text(self.margin, self.dimension, prefer=self.prefer, digits=3)


@dataclass(frozen=True, slots=True)
class Verdict:
    """All requirements of one study, in the order of the text."""

    study: str
    requirements: tuple[RequirementVerdict, ...]

    @property
    def passed(self) -> bool:
        """Whether all hold (true for a study without requirements)."""
        return all(r.passed for r in self.requirements)

    @property
    def failed(self) -> tuple[RequirementVerdict, ...]:
        """Those that don't hold."""
        return tuple(r for r in self.requirements if not r.passed)

    @property
    def sentence(self) -> str:
        """ "all 6 requirements hold", "2 of 6 requirements fail" and the like."""
        total, failed = len(self.requirements), len(self.failed)
        if not total:
            return "nothing was required"
        if not failed:
            return {1: "the requirement holds", 2: "both requirements hold"}.get(total, f"all {total} requirements hold")
        if failed == total:
            return {1: "the requirement fails", 2: "both requirements fail"}.get(total, f"all {total} requirements fail")
        return f"{failed} of {total} requirements fail{'s' if failed == 1 else ''}"

    def __getitem__(self, name: str) -> RequirementVerdict:
        """A requirement by name.

        Raises:
            UnknownName: there is none of that name.
        """
        from polewise.results.failures import UnknownName, nearest_names

        for requirement in self.requirements:
            if requirement.name == name:
                return requirement
        names = [r.name for r in self.requirements]
        raise UnknownName(name, f"study `{self.study}` has no requirement `{name}`", nearest_names(name, names))


@dataclass(frozen=True, slots=True)
class _Finding:
    """What judging gives before it is put together with the requirement."""

    passed: bool
    why: str
    value: float | None = None
    limit: float | None = None
    side: str = ""
    margin: float | None = None
    time_s: float | None = None
    evaluated: bool = True


def judge(study: str, judged: tuple[Judged, ...], recording: Recording, *, planned_end_s: float, reached_s: float) -> Verdict:
    """Judge every requirement.

    Args:
        study: its name.
        judged: requirements with their columns.
        recording: read one column at a time.
        planned_end_s: where the study was to end.
        reached_s: where it did end.
    """
    return Verdict(study, tuple(_judge_one(one, recording, planned_end_s, reached_s) for one in judged))


def _judge_one(one: Judged, recording: Recording, planned_end_s: float, reached_s: float) -> RequirementVerdict:
    requirement = one.requirement
    begin_s = requirement.window_s[0]
    wanted_end_s = planned_end_s if requirement.window_s[1] is None else requirement.window_s[1]
    seen_s = min(wanted_end_s, reached_s)
    whole = reached_s >= wanted_end_s * (1.0 - 1e-12)
    if one.unknowable:
        finding = _unseen(one.unknowable)
    elif begin_s > wanted_end_s or begin_s > planned_end_s:
        finding = _unseen(f"its window opens at {_time(begin_s)}, after the study's end at {_time(planned_end_s)}")
    elif begin_s > seen_s or (begin_s == seen_s and not whole):
        finding = _unseen(f"the study stopped at {_time(reached_s)}, before the window opened at {_time(begin_s)}")
    else:
        finding = _judge_window(one, recording, begin_s, seen_s)
        broken_already = not finding.passed and requirement.measure in ("value", "condition")
        if not whole and not broken_already:
            finding = _unseen(_why_cut(wanted_end_s, planned_end_s, reached_s))
    return _put_together(one, finding)


def _why_cut(wanted_end_s: float, planned_end_s: float, reached_s: float) -> str:
    if reached_s >= planned_end_s * (1.0 - 1e-12):
        return f"its window ends at {_time(wanted_end_s)}, after the study's end at {_time(planned_end_s)}"
    return f"the study stopped at {_time(reached_s)}, before the window's end at {_time(wanted_end_s)}"


def _judge_window(one: Judged, recording: Recording, begin_s: float, end_s: float) -> _Finding:
    if one.requirement.measure == "condition":
        return _judge_condition(recording, one.subject, begin_s, end_s)
    whole = recorded_curve(recording, one.subject)
    part = whole.window(begin_s, end_s) if end_s > begin_s else _instant(whole, begin_s)
    if part.is_empty:
        return _unseen("nothing was recorded in its window")
    bad_s = part.has_nan()
    if bad_s is not None:
        return _unseen(f"`{one.subject}` is not a number at {_time(bad_s)}")
    if one.requirement.measure == "value":
        return _judge_value(one, recording, part, begin_s, end_s)
    return _judge_measure(one, recording, whole, part, begin_s)


def _judge_condition(recording: Recording, subject: str, begin_s: float, end_s: float) -> _Finding:
    time, flag = recording.grid.time, recording.grid.flag
    inside = (time >= begin_s) & (time <= end_s)
    inside &= ~((time == begin_s) & (flag == BEFORE)) & ~((time == end_s) & (flag == AFTER) & (end_s > begin_s))
    index = np.flatnonzero(inside)
    earlier = np.flatnonzero(time <= begin_s)
    if earlier.size and (not index.size or time[index[0]] > begin_s):
        index = np.concatenate([earlier[-1:], index])  # what was in force when the window opened
    if not index.size:
        return _unseen("nothing was recorded in its window")
    held = recording.values(subject)[index] > 0.5  # NaN is not greater: it never passes
    if held.all():
        return _Finding(True, "held throughout")
    first_s = max(begin_s, float(time[index[int(np.argmin(held))]]))
    if not held.any():
        return _Finding(False, "never held in its window", time_s=first_s)
    return _Finding(False, f"not true at {_time(first_s)}", time_s=first_s)


def _judge_value(one: Judged, recording: Recording, part: Curve, begin_s: float, end_s: float) -> _Finding:
    found: list[_Finding] = []
    for side, limit in (("above", one.low), ("below", one.high)):
        if limit is None:
            continue
        if isinstance(limit, str):
            edge = recorded_curve(recording, limit)
            edge = edge.window(begin_s, end_s) if end_s > begin_s else _instant(edge, begin_s)
            bad_s = edge.has_nan()
            if bad_s is not None:
                return _unseen(f"its limit is not a number at {_time(bad_s)}")
            inside = part.minus(edge)
        else:
            inside = part.shifted(-limit)
        inside = inside if side == "above" else inside.negated()
        place = inside.lowest_place()
        margin, value = inside.value_in(*place), part.value_in(*place)
        at_limit = value - margin if side == "above" else value + margin
        at_limit = at_limit if isinstance(limit, str) else limit
        found.append(_within_limit(one.requirement, side, value, at_limit, margin, inside.time_in(*place)))
    return min(found, key=lambda f: (f.passed, f.margin))


def _judge_measure(one: Judged, recording: Recording, whole: Curve, part: Curve, begin_s: float) -> _Finding:
    requirement = one.requirement
    measure = MEASURES.get(requirement.measure)
    if measure is None:
        return _unseen(f"there is no measure `{requirement.measure}`")
    before = _value_before(whole, part, begin_s)
    measured: Measured = measure.find(MeasureInput(part, before, begin_s, requirement.parameters))
    if measured.value is None:
        return _unseen(f"`{one.subject}` has no {requirement.measure} here: {measured.why}")
    if not np.isfinite(measured.value):
        return _unseen(f"its {requirement.measure} is not a number")
    found = []
    for side, limit in (("above", one.low), ("below", one.high)):
        if limit is None:
            continue
        edge = limit if isinstance(limit, float | int) else float(recorded_curve(recording, limit).window(begin_s, part.end_s).last_value)
        if not np.isfinite(edge):
            return _unseen("its limit is not a number")
        margin = measured.value - edge if side == "above" else edge - measured.value
        found.append(_within_limit(requirement, side, measured.value, float(edge), margin, measured.time_s))
    return min(found, key=lambda f: (f.passed, f.margin))


def _within_limit(requirement: Requirement, side: str, value: float, limit: float, margin: float, time_s: float | None) -> _Finding:
    passed = margin >= -ROUNDING * max(abs(limit), abs(value))
    margin = max(margin, 0.0) if passed else margin
    when = "" if time_s is None else f" at {_time(time_s)}"
    prefer = preferred_unit(requirement.text, requirement.dimension)
    size = difference_text(abs(margin), requirement.dimension, prefer=prefer)
    edge = value_text(limit, requirement.dimension, prefer=prefer)
    if passed:
        why = f"nearest to its limit of {edge}{when}, {size} inside"
    else:
        why = (
            f"{value_text(value, requirement.dimension, prefer=prefer)}{when} is {size} {'below' if side == 'above' else 'above'} its limit of {edge}"
        )
    return _Finding(passed, why, value, limit, side, margin, time_s)


def _instant(whole: Curve, at_s: float) -> Curve:
    """A curve of no duration: one constant piece."""
    value = float(whole.at(np.array([at_s]))[0])
    return Curve(np.array([at_s]), np.array([1e-300]), np.array([[value, 0.0, 0.0, 0.0]]))


def _value_before(whole: Curve, part: Curve, begin_s: float) -> float:
    """Value just before the window opens, on the far side of a jump there."""
    earlier = whole.window(whole.begin_s, begin_s)
    return part.first_value if earlier.is_empty else earlier.last_value


def _unseen(why: str) -> _Finding:
    return _Finding(False, f"not evaluated: {why}", evaluated=False)


def _time(time_s: float) -> str:
    return format_value(time_s, TIME, digits=5)


def _put_together(one: Judged, found: _Finding) -> RequirementVerdict:
    requirement = one.requirement
    percent = None if found.margin is None or not found.limit else 100.0 * found.margin / abs(found.limit)
    return RequirementVerdict(
        requirement.name,
        requirement.text,
        requirement.document,
        requirement.measure,
        found.passed,
        found.value,
        found.limit,
        found.side,
        found.margin,
        percent,
        found.time_s,
        found.evaluated,
        found.why,
        requirement.dimension,
        requirement.window_s,
        one.subject,
        one.low,
        one.high,
        requirement.span,
        preferred_unit(requirement.text, requirement.dimension),
    )
