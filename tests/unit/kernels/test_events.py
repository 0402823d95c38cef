"""Located flips of switches: times against closed forms, simultaneous and tangential ones, rest on a boundary, tables, chatter."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.expression.graph import PiecewiseCubic
from polewise.kernels.opcodes import Status
from polewise.kernels.workspace import FLAG_AFTER, FLAG_BEFORE, N_EVENTS, N_NEEDS_RESTART, N_WORST_SWITCH

from .cases import make, sin


@pytest.mark.parametrize("rtol", [1e-6, 1e-9])
def test_rc_threshold(rtol):
    """EV-1 (elementary law): 1 kohm, 1 uF to 10 V passes 5 V at 0.6931471806 ms, 7 V at 1.2039728043 ms."""
    case = make(
        2,
        lambda t, x, p: [-x[1], x[1] - (10.0 - x[0]) / 1e3],
        lambda t, x, p: [1e-6 * x[0], None],
        rtol=rtol,
        scales=[10.0, 1e-2],
        watched=lambda t, x, p: [(x[0] - 5.0).positive(), (x[0] - 7.0).positive()],
    ).start([0.0, 0.0])
    times = []
    while (status := case.advance(5e-3)) == Status.EVENT:
        times.append(case.work.state[0])
        assert case.work.counter[N_NEEDS_RESTART] == 1
        assert case.rows[-1, 1] == FLAG_BEFORE
        assert case.rows[-1, 0] == times[-1]
    assert status == Status.DONE
    assert case.work.state[0] == 5e-3
    expected = [1e-3 * math.log(2.0), 1e-3 * math.log(10.0 / 3.0)]
    np.testing.assert_allclose(times, expected, rtol=max(1e-9, rtol))


def test_bouncing_mass_keeps_its_times():
    """Ball from 1 m, g 9.81, restitution 0.5, state set by Python at each event: impacts at closed-form times, through many bounces."""
    case = make(
        2,
        lambda t, x, p: [-x[1], 9.81 + 0.0 * x[0]],
        lambda t, x, p: [x[0], x[1]],
        rtol=1e-10,
        watched=lambda t, x, p: [(-x[0]).positive()],
    ).start([1.0, 0.0])
    t_fall = math.sqrt(2.0 / 9.81)
    expected, speed, t = [], 9.81 * t_fall, t_fall
    for _ in range(10):
        expected.append(t)
        speed *= 0.5
        t += 2.0 * speed / 9.81
    times = []
    for _ in range(10):
        assert case.advance(3.0) == Status.EVENT
        times.append(case.work.state[0])
        case.work.x[0], case.work.x[1] = 0.0, -0.5 * case.work.x[1]
        case.work.q_keep[:] = case.work.x
        case.work.mode[:] = 0
        case.work.counter[N_NEEDS_RESTART] = 1
    np.testing.assert_allclose(times, expected, rtol=1e-9)


def test_several_flips_in_one_step_come_in_order():
    """A ramp through 50 thresholds with steps far longer than their spacing."""
    levels = np.linspace(0.011, 0.99, 50)
    case = make(
        1, lambda t, x, p: [-1.0 + 0.0 * x[0]], lambda t, x, p: [x[0]], watched=lambda t, x, p: [(x[0] - level).positive() for level in levels]
    ).start([0.0])
    times = []
    while case.advance(2.0) == Status.EVENT:
        times.append(case.work.state[0])
    np.testing.assert_allclose(times, levels, rtol=1e-10)


def test_flips_at_the_same_instant_come_together():
    case = make(
        2,
        lambda t, x, p: [-1.0 + 0.0 * x[0], -2.0 + 0.0 * x[0]],
        lambda t, x, p: [x[0], x[1]],
        watched=lambda t, x, p: [(x[0] - 0.5).positive(), (x[1] - 1.0).positive()],
    ).start([0.0, 0.0])
    assert case.advance(2.0) == Status.EVENT
    assert list(case.work.flipped) == [1, 1]
    assert case.work.state[0] == pytest.approx(0.5, rel=1e-12)
    assert case.advance(2.0) == Status.DONE


def test_a_short_excursion_inside_a_step_is_seen_at_the_stages():
    """sin(t) above 0.9 for 0.9 s: seen although no step end lies in it when steps are long, because stages do."""
    case = make(
        1, lambda t, x, p: [-1.0 + 0.0 * x[0]], lambda t, x, p: [x[0]], watched=lambda t, x, p: [(sin(x[0]) - 0.9).positive()], rtol=1e-6
    ).start([0.0])
    case.work.state[3] = 1.2
    times = []
    while case.advance(6.0) == Status.EVENT:
        times.append(case.work.state[0])
    np.testing.assert_allclose(times, [math.asin(0.9), math.pi - math.asin(0.9)], rtol=1e-9)


def test_touching_does_not_loop():
    """sin(t) - 1 touches zero at pi/2 and never rises above."""
    case = make(2, lambda t, x, p: [-x[1], x[0]], lambda t, x, p: [x[0], x[1]], watched=lambda t, x, p: [(x[0] - 1.0).positive()], rtol=1e-8).start(
        [0.0, 1.0]
    )
    events = 0
    while (status := case.advance(20.0)) == Status.EVENT:
        events += 1
        assert events < 20
    assert status == Status.DONE


def test_rest_on_a_boundary_costs_no_flips():
    """A state held at its bound by anti-windup: rate 0 at the bound while it points outward, forever."""

    def rate(t, x, p):
        outward = (x[0] - 1.0).positive()
        return outward.choose((2.0 - t).positive().choose(0.0, 2.0 - t), 2.0 - t)

    case = make(1, lambda t, x, p: [-rate(t, x, p)], lambda t, x, p: [x[0]], rtol=1e-6).start([0.0])
    assert case.advance(6.0) == Status.DONE
    t_bound = 2.0 - math.sqrt(2.0)
    assert case.rows[case.rows[:, 0] < 1.99, 2].max() == pytest.approx(1.0, abs=1e-7)
    # from t = 2 on the rate points inward: x = 1 - (t - 2)^2 / 2
    assert case.work.x[0] == pytest.approx(1.0 - 8.0, rel=1e-6)
    assert case.work.counter[N_EVENTS] <= 8
    held = case.rows[(case.rows[:, 0] > t_bound + 1e-6) & (case.rows[:, 0] < 1.99)]
    assert np.ptp(held[:, 2]) < 1e-9


def test_kinks_are_located_so_that_accuracy_is_kept():
    """x' = |sin(pi t)|, x(10) = 20/pi."""
    case = make(
        1,
        lambda t, x, p: [-(sin(math.pi * t)).positive().choose(sin(math.pi * t), -sin(math.pi * t))],
        lambda t, x, p: [x[0]],
        rtol=1e-10,
    ).start([0.0])
    case.work.state[3] = 0.3
    assert case.advance(10.0) == Status.DONE
    assert case.work.x[0] == pytest.approx(20.0 / math.pi, rel=1e-9)


def test_floor_counts_up_and_down():
    """x' = 1 + 0.1 floor(5 sin t): exact integral from the crossing times."""
    case = make(1, lambda t, x, p: [-(5.0 * sin(t)).floor()], lambda t, x, p: [x[0]], rtol=1e-10).start([0.0])
    case.work.state[3] = 0.2
    assert case.advance(2.0 * math.pi) == Status.DONE
    # in the first half period floor adds pi - 2 asin(k/5) for k = 1..4; in the second it is -(1 + the same), reflected
    upper = sum(math.pi - 2.0 * math.asin(k / 5.0) for k in range(1, 5))
    assert case.work.x[0] == pytest.approx(upper - (math.pi + upper), rel=1e-9)


def test_table_segments_follow_the_value():
    """x' = table(t), a triangle with knots; integral exact."""
    triangle = PiecewiseCubic("triangle", (0.0, 1.0, 2.0), ((0, 0, 0, 0), (0, 1, 0, 0), (1, -1, 0, 0), (0, 0, 0, 0)), False)
    case = make(1, lambda t, x, p: [-t.table(0)], lambda t, x, p: [x[0]], rtol=1e-10, tables=[triangle]).start([0.0], t=-1.0)
    assert case.advance(4.0) == Status.DONE
    assert case.work.x[0] == pytest.approx(1.0, rel=1e-12)
    assert case.work.mode[0] == 3


def test_leaving_a_closed_table_is_said_with_its_switch():
    closed = PiecewiseCubic("c", (0.0, 1.0), ((0, 1, 0, 0), (0, 1, 0, 0), (1, 1, 0, 0)), True)
    case = make(1, lambda t, x, p: [-x[0].table(0) - 0.5], lambda t, x, p: [x[0]], tables=[closed]).start([0.2])
    assert case.advance(4.0) == Status.OUTSIDE_TABLE
    assert case.work.counter[N_WORST_SWITCH] == 0
    assert case.work.x[0] == pytest.approx(1.0, rel=1e-9)
    assert case.work.state[0] == pytest.approx(math.log(1.5 / 0.7), rel=1e-8)


def test_a_relay_that_drives_back_is_chatter():
    case = make(1, lambda t, x, p: [x[0].positive().choose(1.0, -1.0)], lambda t, x, p: [x[0]], rtol=1e-6).start([-0.5])
    assert case.advance(5.0) == Status.CHATTER
    assert case.work.state[0] == pytest.approx(0.5, rel=1e-6)
    assert case.work.counter[N_WORST_SWITCH] == 0


def test_algebraic_unknowns_jump_and_are_recorded_on_both_sides():
    """An algebraic signal switches at x = 0.5: rows just before and just after, at one time."""
    case = make(2, lambda t, x, p: [-1.0 + 0.0 * x[0], x[1] - (x[0] - 0.5).positive().choose(3.0, -1.0)], lambda t, x, p: [x[0], None]).start(
        [0.0, 0.0]
    )
    assert case.advance(1.0) == Status.DONE
    rows = case.rows
    before = rows[(rows[:, 1] == FLAG_BEFORE)]
    after = rows[(rows[:, 1] == FLAG_AFTER) & (rows[:, 0] > 0)]
    assert before[0, 0] == after[0, 0] == pytest.approx(0.5)
    assert before[0, 3] == pytest.approx(-1.0)
    assert after[0, 3] == pytest.approx(3.0)


@pytest.mark.parametrize("blocking_ohm", [1e3, 1e6, 1e8])
def test_a_law_with_very_different_slopes_turns_over_cleanly(blocking_ohm):
    """A diode of 1 mohm and many ohm behind 1 mH and 1 ohm on a 50 Hz sine: its switch watches its own voltage, whose slopes differ 1e11-fold."""
    case = make(
        2,
        lambda t, x, p: [x[1] + x[0] - 100.0 * sin(100.0 * math.pi * t), x[1] - x[1].positive().choose(1e-3 * x[0], blocking_ohm * x[0])],
        lambda t, x, p: [1e-3 * x[0], None],
        rtol=1e-7,
        scales=[10.0, 10.0],
    ).start([0.0, 0.0])
    assert case.advance(0.1) == Status.DONE
    rows = case.rows[case.rows[:, 1] > 0]
    assert rows[:, 2].min() > -110.0 / blocking_ohm
    assert rows[:, 2].max() == pytest.approx(95.9, rel=1e-2)
    assert case.work.counter[N_EVENTS] <= 24


@pytest.mark.parametrize("duty", [0.3, 0.5, 0.999])
def test_edges_of_a_carrier_are_hit_one_by_one(duty):
    """x' = (s - x), s = 1 while the saw-tooth t f - floor(t f) is below the duty: exact recurrence over 200 periods; edges at k/f and (k + d)/f."""
    rate = 50.0
    case = make(
        1,
        lambda t, x, p: [x[0] - (duty - (rate * t - (rate * t).floor())).positive().choose(1.0, 0.0)],
        lambda t, x, p: [x[0]],
        rtol=1e-9,
    ).start([0.0])
    periods = 200
    assert case.advance(periods / rate) == Status.DONE
    x, on, off = 0.0, math.exp(-duty / rate), math.exp(-(1.0 - duty) / rate)
    for _ in range(periods):
        x = (1.0 - (1.0 - x) * on) * off
    assert case.work.x[0] == pytest.approx(x, rel=1e-8)
    edges = np.unique(case.rows[case.rows[:, 1] == FLAG_BEFORE, 0]) * rate
    expected = np.sort(np.concatenate([np.arange(1.0, periods), np.arange(periods) + duty]))
    np.testing.assert_allclose(edges, expected, rtol=0, atol=1e-8)
