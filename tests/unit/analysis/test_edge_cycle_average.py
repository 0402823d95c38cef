"""The cycle average: exact on piecewise polynomials, its response, its derivative, changing periods, refused input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from polewise.analysis.cycle_average import (
    Antiderivative,
    average_curve,
    average_slope,
    averaging_response,
    curve_through,
    cycle_average,
    period_averages,
    sliding_average,
)
from polewise.analysis.failures import WaveformRefused
from polewise.results.curve import Curve

# AV-1 of the reference file: sin(pi x)/(pi x), and the phase of the trailing window in degrees.
AV_1 = [(0.1, 0.983631643, -18.0), (0.25, 0.900316316, -45.0), (1 / 3, 0.826993343, -60.0), (0.5, 0.636619772, -90.0)]


def naive_average(t: np.ndarray, x: np.ndarray, begin: float, end: float) -> float:
    """The same by walking through the segments one after the other."""
    total = 0.0
    for t0, t1, x0, x1 in zip(t[:-1], t[1:], x[:-1], x[1:]):
        a, b = max(t0, begin), min(t1, end)
        if b > a and t1 > t0:
            at = lambda s, t0=t0, t1=t1, x0=x0, x1=x1: x0 + (x1 - x0) * (s - t0) / (t1 - t0)
            total += 0.5 * (at(a) + at(b)) * (b - a)
    return total / (end - begin)


@st.composite
def waveforms(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray]:
    """Steps of very different lengths, jumps among them."""
    steps = draw(st.lists(st.sampled_from([0.0, 1e-6, 1e-3, 0.1, 0.7, 3.0]), min_size=4, max_size=25).filter(lambda s: sum(s) > 2.0))
    values = draw(st.lists(st.integers(-50, 50), min_size=len(steps) + 1, max_size=len(steps) + 1))
    return np.concatenate([[0.0], np.cumsum(steps)]), np.array(values, dtype=float)


@settings(deadline=None)
@given(waveforms(), st.floats(0.05, 1.9), st.floats(0.0, 1.0))
def test_against_a_walk_through_the_segments(waveform: tuple[np.ndarray, np.ndarray], period: float, place: float) -> None:
    t, x = waveform
    middle = 0.5 * period + place * (t[-1] - period)
    _, mean = cycle_average(t, x, period, times=[middle])
    assert mean[0] == pytest.approx(naive_average(t, x, middle - 0.5 * period, middle + 0.5 * period), abs=1e-9)


@settings(deadline=None)
@given(waveforms(), st.floats(0.05, 1.0))
def test_derivative_property(waveform: tuple[np.ndarray, np.ndarray], period: float) -> None:
    """AV-2: d mean/dt = (x(t) - x(t - T))/T, by the exact integral of both sides over a stretch."""
    t, x = waveform
    curve = curve_through(t, x)
    a, b = period, t[-1]
    mean = sliding_average(curve, period, [a, b], window="trailing")
    integral = Antiderivative(curve)
    right = (integral.at(np.array([b])) - integral.at(np.array([a])) - integral.at(np.array([b - period])) + integral.at(np.array([0.0]))) / period
    assert mean[1] - mean[0] == pytest.approx(float(right[0]), abs=1e-8)


def test_slope_is_the_difference_over_the_period() -> None:
    t = np.linspace(0.0, 1.0, 2001)
    curve = curve_through(t, np.sin(40.0 * t) + 3.0 * t)
    at, h, period = np.linspace(0.3, 0.8, 11), 1e-6, 0.137
    for window in ("centred", "trailing"):
        near = (sliding_average(curve, period, at + h, window=window) - sliding_average(curve, period, at - h, window=window)) / (2.0 * h)
        assert average_slope(curve, period, at, window=window) == pytest.approx(near, rel=1e-3)


def sine(part: float, periods: int = 40, points: int = 400) -> tuple[np.ndarray, np.ndarray]:
    """A sine of `part` times the averaging rate, as plain samples; the averaging period is 1 s."""
    t = np.linspace(0.0, periods, periods * points + 1)
    return t, np.cos(2.0 * np.pi * part * t)


@pytest.mark.parametrize(("part", "size", "phase_deg"), AV_1)
@pytest.mark.parametrize("window", ["centred", "trailing"])
def test_response_of_av_1(part: float, size: float, phase_deg: float, window: str) -> None:
    t, x = sine(part)
    at = np.linspace(2.0, 38.0, 3001)
    _, mean = cycle_average(t, x, 1.0, times=at, window=window)
    lines = np.column_stack([np.cos(2 * np.pi * part * at), np.sin(2 * np.pi * part * at)])
    (a, b), *_ = np.linalg.lstsq(lines, mean, rcond=None)
    found = complex(a, -b)
    expected = size * np.exp(1j * np.radians(phase_deg if window == "trailing" else 0.0))
    assert found == pytest.approx(expected, abs=4e-6)  # straight lines between 400 points of a period of the average
    assert complex(averaging_response(part, 1.0, window=window)) == pytest.approx(expected, abs=2e-9)


def test_no_response_at_the_rate_itself() -> None:
    t, x = sine(1.0)
    _, mean = cycle_average(t, x, 1.0)
    assert np.max(np.abs(mean)) < 1e-12


def test_period_that_changes() -> None:
    """A sawtooth that runs from 0 to 1 in each period has the mean 1/2 over each of them, however long; the same as a sliding window."""
    starts = np.concatenate([[0.0], np.cumsum([1.0, 1.1, 0.7, 2.0, 0.3, 0.9])])
    t = np.repeat(starts, 2)[1:-1]
    x = np.tile([0.0, 1.0], starts.size - 1)
    middles, means = period_averages(curve_through(t, x), starts)
    assert means == pytest.approx(np.full(6, 0.5), abs=1e-14)
    lengths = np.diff(starts)
    _, sliding = cycle_average(t, x, lambda at: lengths[np.searchsorted(starts, at) - 1], times=middles)
    assert sliding == pytest.approx(means, abs=1e-14)


def test_exact_on_cubics() -> None:
    """x = t^3 in one piece: its mean over T around t is t^3 + t T^2/4."""
    curve = Curve(np.array([0.0]), np.array([4.0]), np.array([[0.0, 0.0, 0.0, 64.0]]))
    at = np.array([1.0, 2.0, 3.5])
    assert sliding_average(curve, 0.5, at) == pytest.approx(at**3 + at * 0.5**2 / 4, rel=1e-14)
    assert np.isnan(sliding_average(curve, 0.5, [0.1, 3.9])).all()


def test_average_as_a_curve() -> None:
    t, x = sine(0.1, periods=10)
    curve = curve_through(t, x)
    mean = average_curve(curve, 1.0)
    at = np.linspace(mean.begin_s, mean.end_s, 777)
    assert mean.at(at) == pytest.approx(sliding_average(curve, 1.0, at), abs=1e-12)
    assert (mean.begin_s, mean.end_s) == pytest.approx((0.5, 9.5))


@pytest.mark.parametrize(
    ("time", "value", "said"),
    [
        ([0.0], [1.0], "two or more points"),
        ([0.0, 1.0, 0.5], [1.0, 2.0, 3.0], "run backwards"),
        ([0.0, 1.0], [1.0, np.nan], "not a number"),
        ([0.0, 0.0], [1.0, 2.0], "same time"),
        ([0.0, 1.0], [1.0, 2.0, 3.0], "as many values"),
    ],
)
def test_refused(time: list[float], value: list[float], said: str) -> None:
    with pytest.raises(WaveformRefused, match=said):
        cycle_average(time, value, 0.1)


def test_refused_periods() -> None:
    with pytest.raises(WaveformRefused, match="above zero"):
        cycle_average([0.0, 1.0], [0.0, 1.0], 0.0)
    with pytest.raises(WaveformRefused, match="increasing"):
        period_averages(curve_through([0.0, 1.0], [0.0, 1.0]), [0.5, 0.2])
    with pytest.raises(WaveformRefused, match="shorter than one period"):
        average_curve(curve_through([0.0, 1.0], [0.0, 1.0]), 2.0)
