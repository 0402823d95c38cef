"""The measures a requirement may ask for: settling time, overshoot, extremes, averages; each reads one curve over the requirement's window."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from polewise.results.curve import Curve


@dataclass(frozen=True, slots=True)
class Measured:
    """What a measure found.

    Args:
        value: in SI, or None where the question has no answer here; then `why` says so.
        time_s: when it was reached, or None where it belongs to the whole window.
        why: a sentence without a full stop; "" where there is nothing to say.
    """

    value: float | None
    time_s: float | None = None
    why: str = ""


@dataclass(frozen=True, slots=True)
class MeasureInput:
    """What a measure may read.

    Args:
        curve: the subject inside the window; not empty, all numbers finite.
        before: the subject's value just before the window opens (at a study's start, its first value).
        begin_s: where the window opens, s from the study's start.
        parameters: the requirement's constants, SI.
    """

    curve: Curve
    before: float
    begin_s: float
    parameters: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Measure:
    """One measure: how it is called, what it means, how it is found."""

    name: str
    parameters: tuple[str, ...]
    document: str
    find: Callable[[MeasureInput], Measured]


def _settling_time(given: MeasureInput) -> Measured:
    """Time from the window's start until x stays for good within +- band of its value at the window's end."""
    (band,) = given.parameters
    final = given.curve.last_value
    reach = abs(band * final)
    if reach == 0.0:
        return Measured(None, None, "it ends at zero, and a share of zero is no band to settle into")
    left = given.curve.last_outside(final - reach, final + reach)
    if left is None:
        return Measured(0.0, given.begin_s)
    return Measured(left - given.begin_s, left)


def _overshoot(given: MeasureInput) -> Measured:
    """How far x goes beyond its final value, as a share of its whole change, in the direction of that change."""
    final = given.curve.last_value
    change = final - given.before
    if abs(change) <= 1e-6 * max(abs(final), abs(given.before)):
        return Measured(None, None, "it ends where it began, so there is no change of which an overshoot could be a share")
    furthest, when = given.curve.highest() if change > 0.0 else given.curve.lowest()
    return Measured(max(0.0, (furthest - final) / change), when)


def _peak(given: MeasureInput) -> Measured:
    """The largest value."""
    return Measured(*given.curve.highest())


def _lowest(given: MeasureInput) -> Measured:
    """The smallest value."""
    return Measured(*given.curve.lowest())


def _swing(given: MeasureInput) -> Measured:
    """Largest minus smallest value."""
    (high, high_s), (low, low_s) = given.curve.highest(), given.curve.lowest()
    return Measured(high - low, max(high_s, low_s))


def _ripple(given: MeasureInput) -> Measured:
    """Largest minus smallest value within a switching period, the largest of all periods."""
    (period_s,) = given.parameters
    value, when = given.curve.ripple(period_s)
    return Measured(value, when)


def _mean(given: MeasureInput) -> Measured:
    """The average over time."""
    return Measured(given.curve.integral() / given.curve.duration_s())


def _rms(given: MeasureInput) -> Measured:
    """The root of the average square over time."""
    return Measured(math.sqrt(max(0.0, given.curve.square_integral() / given.curve.duration_s())))


def _final(given: MeasureInput) -> Measured:
    """The value at the window's end."""
    return Measured(given.curve.last_value, given.curve.end_s)


def _integral(given: MeasureInput) -> Measured:
    """The integral over time."""
    return Measured(given.curve.integral())


def _measure(name: str, find: Callable[[MeasureInput], Measured], *parameters: str) -> Measure:
    return Measure(name, parameters, (find.__doc__ or "").strip(), find)


MEASURES: Mapping[str, Measure] = {
    measure.name: measure
    for measure in (
        _measure("settling_time", _settling_time, "band"),
        _measure("overshoot", _overshoot),
        _measure("peak", _peak),
        _measure("lowest", _lowest),
        _measure("ripple", _ripple),
        _measure("swing", _swing),
        _measure("mean", _mean),
        _measure("rms", _rms),
        _measure("final", _final),
        _measure("integral", _integral),
    )
}
