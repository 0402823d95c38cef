"""Curves against closed forms: polynomials up to the third degree are exact, between points too."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from polewise.results.curve import AFTER, BEFORE, END, INTERIOR, Curve, curve, step_grid


def _curve(points: list[tuple[float, int, float]]) -> Curve:
    time, flag, value = (np.array(column) for column in zip(*points, strict=True))
    return curve(step_grid(time.astype(float), flag.astype(np.int64)), value.astype(float))


def _sampled(function, edges) -> Curve:
    points = [(edges[0], END, function(edges[0]))]
    for a, b in pairwise(edges):
        points += [(a + c * (b - a), INTERIOR, function(a + c * (b - a))) for c in (0.155, 0.645)]
        points.append((b, END, function(b)))
    return _curve(points)


def test_a_cubic_is_reproduced_everywhere() -> None:
    def cubic(t: float) -> float:
        return 2.0 - 3.0 * t + 0.5 * t**2 + 4.0 * t**3

    got = _sampled(cubic, [0.0, 0.3, 1.0])
    times = np.linspace(0.0, 1.0, 101)
    assert np.allclose(got.at(times), [cubic(t) for t in times], rtol=1e-13, atol=1e-13)


def test_extreme_between_points() -> None:
    got = _sampled(lambda t: (t - 0.4) ** 2, [0.0, 1.0])
    value, when = got.lowest()
    assert value == pytest.approx(0.0, abs=1e-15)
    assert when == pytest.approx(0.4, rel=1e-12)
    assert got.highest() == (pytest.approx(0.36), pytest.approx(1.0))


def test_integrals_are_exact_for_cubics() -> None:
    got = _sampled(lambda t: t**3, [0.0, 0.5, 2.0])
    assert got.integral() == pytest.approx(4.0, rel=1e-13)  # 2^4 / 4
    assert got.square_integral() == pytest.approx(2.0**7 / 7.0, rel=1e-13)


def test_window_cuts_pieces() -> None:
    got = _sampled(lambda t: t**2, [0.0, 1.0, 3.0]).window(0.5, 2.0)
    assert (got.begin_s, got.end_s) == (0.5, 2.0)
    assert got.integral() == pytest.approx((2.0**3 - 0.5**3) / 3.0, rel=1e-13)
    assert got.first_value == pytest.approx(0.25)
    assert got.last_value == pytest.approx(4.0)


def test_a_window_inside_one_piece() -> None:
    got = _sampled(lambda t: t**3, [0.0, 1.0]).window(0.25, 0.75)
    assert got.integral() == pytest.approx((0.75**4 - 0.25**4) / 4.0, rel=1e-12)


def test_both_sides_of_a_jump_count_and_nothing_is_drawn_across() -> None:
    got = _curve([(0.0, END, 1.0), (1.0, BEFORE, 5.0), (1.0, AFTER, -7.0), (2.0, END, -6.0)])
    assert got.highest() == (5.0, 1.0)
    assert got.lowest() == (-7.0, 1.0)
    assert got.at(np.array([1.0]))[0] == -7.0  # just after
    assert got.integral() == pytest.approx(3.0 - 6.5)
    assert got.start.size == 2


def test_window_that_begins_at_a_jump_sees_only_its_far_side() -> None:
    got = _curve([(0.0, END, 1.0), (1.0, BEFORE, 5.0), (1.0, AFTER, -7.0), (2.0, END, -6.0)])
    assert got.window(1.0, 2.0).highest()[0] == -6.0
    assert got.window(0.0, 1.0).lowest()[0] == 1.0


def test_steps_with_many_inner_points_become_several_pieces() -> None:
    points = [(0.0, END, 0.0)] + [(k / 7, INTERIOR, (k / 7) ** 3) for k in range(1, 7)] + [(1.0, END, 1.0)]
    got = _curve(points)
    assert got.start.size == 3
    assert got.at(np.array([0.5]))[0] == pytest.approx(0.125)


def test_a_step_shorter_than_the_rounding_of_its_times() -> None:
    start = 6e-3
    end = np.nextafter(start, 1.0)
    got = _curve([(0.0, END, 1.0), (start, END, 2.0), (start, INTERIOR, 2.5), (end, INTERIOR, 2.7), (end, END, 3.0), (1.0, END, 3.0)])
    assert got.has_nan() is None
    assert got.highest()[0] == 3.0


def test_last_time_outside_a_band() -> None:
    got = _sampled(lambda t: math.exp(-t), list(np.linspace(0.0, 10.0, 400)))
    assert got.last_outside(-0.01, 0.01) == pytest.approx(math.log(100.0), rel=1e-7)
    assert got.last_outside(-2.0, 2.0) is None
    assert got.last_outside(0.5, 1.0) == 10.0


def test_outside_the_recording_there_is_no_value() -> None:
    got = _sampled(lambda t: t, [0.0, 1.0])
    assert np.isnan(got.at(np.array([-0.1, 1.1]))).all()


def test_empty_recording() -> None:
    got = _curve([(0.0, END, 1.0)])
    assert got.is_empty
    assert np.isnan(got.at(np.array([0.0]))).all()
    assert got.window(0.0, 1.0).is_empty


def test_points_left_open_at_the_end_are_not_read() -> None:
    got = _curve([(0.0, END, 0.0), (1.0, END, 1.0), (1.5, INTERIOR, 99.0)])
    assert got.end_s == 1.0
    assert got.highest()[0] == 1.0


@settings(max_examples=200, deadline=None)
@given(st.lists(st.floats(-1e3, 1e3), min_size=4, max_size=4), st.floats(-3.0, 3.0), st.floats(0.01, 5.0))
def test_extremes_agree_with_a_dense_search(coefficient: list[float], start: float, length: float) -> None:
    got = Curve(np.array([start]), np.array([length]), np.array([coefficient]))
    u = np.linspace(0.0, 1.0, 2001)
    dense = np.polynomial.polynomial.polyval(u, coefficient)
    size = np.abs(coefficient).max() + 1e-300
    low, high = got.lowest()[0], got.highest()[0]
    assert low <= dense.min() + 1e-9 * size
    assert high >= dense.max() - 1e-9 * size
    assert low >= dense.min() - 1e-5 * size  # a dense search misses an extreme by no more than its grid allows
    assert high <= dense.max() + 1e-5 * size
