"""What goes into which panel of a figure: traces by unit, apart where their values are; conditions as lanes; families of many as bands."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np

from polewise.grammar import units
from polewise.grammar.units import Dimension
from polewise.results.curve import FloatArray
from polewise.results.recording import Column, Recording, recorded_curve
from polewise.results.traces import Band, band, families, polyline
from polewise.results.verdict import RequirementVerdict, Verdict

_SEPARATE_MAX: Final = 6  # members of a family drawn as traces of their own; more become a band
_SHOWN_OF_BAND_MAX: Final = 3  # members of a band that fail a requirement and are drawn as well
_OUTLIER: Final = 0.3  # of a band's height: what reaches further from the middle than this has a name worth telling
_TRACES_MAX: Final = 12  # traces and bands of one unit
_LANES_MAX: Final = 16  # conditions
_PANELS_MAX: Final = 10
_SPLITS_MAX: Final = 2  # further panels that one unit may get
_GAP_SPLITS: Final = 2.0  # an empty stretch this many times larger than what lies on either side of it
_SPAN_LEAST: Final = 0.02  # of a value's size: flat traces count as that high


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """A curve or a band, ready to draw; low, high: its range, with the limits it must keep."""

    label: str
    names: frozenset[str]
    times: FloatArray
    values: FloatArray
    band: Band | None
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class Panel:
    """Traces of one unit, or conditions (`lanes`); left_out counts what is not drawn."""

    dimension: Dimension
    traces: tuple[Trace, ...]
    lanes: tuple[Column, ...]
    left_out: int


def panels_of(recording: Recording, verdict: Verdict, reached_s: float) -> list[Panel]:
    """Panels from top to bottom; columns are read one at a time."""
    by_dimension: dict[Dimension, list[str]] = {}
    conditions: list[Column] = []
    for column in recording.columns:
        if column.role == "kept" and column.is_condition:
            conditions.append(column)
        elif column.role == "kept":
            by_dimension.setdefault(column.dimension, []).append(column.name)
    panels: list[Panel] = []
    for dimension, names in by_dimension.items():
        if len(panels) >= _PANELS_MAX:
            break
        traces, left_out = _traces(recording, verdict, names, reached_s)
        for number, group in enumerate(_apart(traces)):
            panels.append(Panel(dimension, tuple(group), (), left_out if number == 0 else 0))
    if conditions:
        panels.append(Panel(units.NONE, (), tuple(conditions[:_LANES_MAX]), max(0, len(conditions) - _LANES_MAX)))
    return panels


def _traces(recording: Recording, verdict: Verdict, names: list[str], reached_s: float) -> tuple[list[Trace], int]:
    traces: list[Trace] = []
    left_out = 0
    for name, members in families(names).items():
        if len(traces) >= _TRACES_MAX:
            left_out += len(members)
            continue
        if len(members) > _SEPARATE_MAX:
            whole = band((recorded_curve(recording, m) for m in members), 0.0, reached_s)
            low, high = _range(np.concatenate([whole.low, whole.high]))
            traces.append(Trace(f"{name} ({len(members)})", frozenset(members), whole.time, whole.middle, whole, low, high))
            members = _worth_showing(verdict, members, whole)
        for member in members:
            times, values = polyline(recorded_curve(recording, member))
            low, high = _range(np.append(values, list(_limits(verdict, member))))
            traces.append(Trace(member, frozenset((member,)), times, values, None, low, high))
    return traces, left_out


def _worth_showing(verdict: Verdict, members: list[str], whole: Band) -> list[str]:
    """Of a family drawn as a band, the members that fail a requirement and those that make it as wide as it is."""
    failing = {r.subject for r in verdict.failed}
    shown = [m for m in members if m in failing][:_SHOWN_OF_BAND_MAX]
    height = float(np.max(whole.high) - np.min(whole.low))
    if float(np.max(whole.high) - np.max(whole.middle)) > _OUTLIER * height:
        shown.append(members[whole.highest])
    if float(np.min(whole.middle) - np.min(whole.low)) > _OUTLIER * height:
        shown.append(members[whole.lowest])
    return list(dict.fromkeys(shown))


def _limits(verdict: Verdict, name: str) -> Iterator[float]:
    """Constant limits drawn with a quantity."""
    for requirement in verdict.requirements:
        if requirement.subject == name and draws_limits(requirement):
            yield from (limit for limit in (requirement.low, requirement.high) if isinstance(limit, float | int))


def draws_limits(requirement: RequirementVerdict) -> bool:
    """Whether a requirement's limits belong on the axis of its quantity."""
    return requirement.measure in ("value", "peak", "lowest", "final", "mean", "rms")


def _range(values: FloatArray) -> tuple[float, float]:
    finite = values[np.isfinite(values)]
    return (float(finite.min()), float(finite.max())) if finite.size else (0.0, 0.0)


def _apart(traces: list[Trace]) -> list[list[Trace]]:
    """Groups of traces whose values lie so far apart that one axis would flatten them, highest group first."""
    if len(traces) < 2:
        return [traces] if traces else []
    ordered = sorted(traces, key=lambda t: t.low)
    tops = np.maximum.accumulate([t.high for t in ordered])
    cuts: list[tuple[float, int]] = []
    for k in range(1, len(ordered)):
        gap = ordered[k].low - tops[k - 1]
        below = _span(ordered[0].low, float(tops[k - 1]))
        above = _span(ordered[k].low, max(t.high for t in ordered[k:]))
        if gap > _GAP_SPLITS * max(min(below, above), _nearest_span(ordered, k)):
            cuts.append((float(gap), k))
    places = sorted(k for _, k in sorted(cuts, reverse=True)[:_SPLITS_MAX])
    groups = [ordered[a:b] for a, b in zip([0, *places], [*places, len(ordered)], strict=True)]
    position = {id(trace): k for k, trace in enumerate(traces)}
    return [sorted(group, key=lambda t: position[id(t)]) for group in reversed(groups)]


def _span(low: float, high: float) -> float:
    return max(high - low, _SPAN_LEAST * max(abs(low), abs(high)))


def _nearest_span(ordered: list[Trace], k: int) -> float:
    """The larger height of the two traces on either side of a gap."""
    return max(_span(ordered[k - 1].low, ordered[k - 1].high), _span(ordered[k].low, ordered[k].high))
