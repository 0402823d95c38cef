"""Sample instants and delays against exact recurrences, the method of steps and the plain twins."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.kernels import entry
from polewise.kernels.opcodes import Status
from polewise.kernels.workspace import (
    FLAG_AFTER,
    FLAG_BEFORE,
    N_FACTORISATIONS,
    N_JACOBIANS,
    N_ROWS,
    N_STOP,
    N_TICKS,
    S_HISTORY_T0,
    S_RECORD_EVERY,
    S_T,
)

from .cases import make, naive, sin


def _sampled(rtol=1e-9, period=0.25):
    """x' = -x + u, u = -0.8 x sampled; exact: x_(k+1) = e^-T x_k + (1 - e^-T) u_k."""
    return make(
        1,
        lambda t, x, p: [x[0] - p[0]],
        lambda t, x, p: [x[0]],
        n_p=1,
        rtol=rtol,
        clocks=lambda t, x, p: [(period, 0, {0: -0.8 * x[0] + 0.1 * p[0]})],
    ).start([1.0], [0.0])


def test_sampled_control_follows_the_exact_recurrence():
    case = _sampled()
    assert case.advance(40 * 0.25) == Status.DONE
    x, u, decay = 1.0, 0.0, math.exp(-0.25)
    for _ in range(40):
        u = -0.8 * x + 0.1 * u
        x = decay * x + (1.0 - decay) * u
    assert case.work.x[0] == pytest.approx(x, rel=1e-8)
    assert case.work.counter[N_TICKS] == 40
    ticks = case.rows[case.rows[:, 1] == FLAG_BEFORE][:, 0]
    np.testing.assert_array_equal(ticks, 0.25 * np.arange(1, 40))
    assert case.work.clock_count[0] == 40


def test_an_instant_costs_no_new_jacobian():
    case = _sampled(rtol=1e-6)
    assert case.advance(200 * 0.25) == Status.DONE
    assert case.work.counter[N_JACOBIANS] <= 4
    assert case.work.counter[N_FACTORISATIONS] < 60


def test_instants_do_not_drift():
    """A 30 us clock in exact arithmetic after 100000 periods; a clock of 10 us beside it meets every third instant."""
    case = make(
        1,
        lambda t, x, p: [x[0]],
        lambda t, x, p: [x[0]],
        n_p=2,
        rtol=1e-3,
        clocks=lambda t, x, p: [(30e-6, 0, {0: p[0] + 1.0}), (10e-6, 1, {1: p[1] + p[0]})],
    ).start([0.0], [0.0, 0.0])
    case.work.counter[29] = 0
    assert case.advance(0.03, 10**7) == Status.DONE
    expected = naive.instants([30e-6, 10e-6], [0.0, 0.0], [0, 1], 0.03)
    p = [0.0, 0.0]
    for _, groups in expected:
        for group in groups:
            new = {k: (p[0] + 1.0 if k == 0 else p[1] + p[0]) for k in group}
            for k, value in new.items():
                p[k] = value
    assert case.work.counter[N_TICKS] == len(expected) == 3000
    np.testing.assert_array_equal(case.work.p, p)


def test_equal_ranks_read_before_they_write_and_later_ranks_see_earlier_ones():
    case = make(
        1,
        lambda t, x, p: [x[0]],
        lambda t, x, p: [x[0]],
        n_p=3,
        clocks=lambda t, x, p: [(1.0, 0, {0: p[1]}), (1.0, 0, {1: p[0]}), (1.0, 5, {2: p[0]})],
    ).start([0.0], [1.0, 2.0, 0.0])
    assert case.advance(0.5) == Status.DONE
    assert list(case.work.p) == [2.0, 1.0, 2.0]


def test_instants_at_the_stop_time_are_left_to_python():
    case = _sampled()
    assert case.advance(0.5) == Status.DONE
    assert case.work.clock_count[0] == 2
    assert entry.next_tick(case.program, case.work) == 0.5
    rank = entry.next_rank(case.program, case.work, -1)
    assert rank == 0
    before = case.work.p[0]
    assert entry.fire_clocks(case.program, case.work, rank) == 1
    assert case.work.p[0] == pytest.approx(-0.8 * case.work.x[0] + 0.1 * before)
    assert entry.next_rank(case.program, case.work, -1) == -1
    case.work.counter[20] = 1
    assert case.advance(1.0) == Status.DONE
    assert case.work.counter[N_TICKS] == 3


def test_a_condition_of_an_instant_is_reported():
    """The sampled value passes a threshold: the watched switch flips in the restart, and the event carries consistent values."""
    case = make(
        1,
        lambda t, x, p: [-1.0 + 0.0 * x[0]],
        lambda t, x, p: [x[0]],
        n_p=1,
        clocks=lambda t, x, p: [(0.25, 0, {0: x[0]})],
        watched=lambda t, x, p: [(p[0] - 0.6).positive()],
    ).start([0.0], [0.0])
    assert case.advance(2.0) == Status.EVENT
    assert case.work.state[S_T] == 0.75
    assert case.work.mode[0] == 1
    assert case.work.counter[20] == 0
    assert case.advance(2.0) == Status.DONE


def test_recording_options():
    case = _sampled()
    case.work.counter[28] = 0  # no inner stage points
    case.work.state[S_RECORD_EVERY] = 1.0
    assert case.advance(10.0) == Status.DONE
    times = case.rows[:, 0]
    assert np.all(np.diff(times[times > 0]) >= 0)
    assert len(case.rows) <= 2 * 12
    small = _sampled()
    small.work.counter[N_ROWS] = len(small.work.record) - 4
    assert entry.advance(small.program, small.work, 1.0, 100) == Status.BUFFER_FULL
    small.work.counter[N_ROWS] = 0
    assert entry.advance(small.program, small.work, 1.0, 1) == Status.STEP_LIMIT
    small.work.counter[N_STOP] = 1
    assert entry.advance(small.program, small.work, 1.0, 100) == Status.STOPPED
    small.work.counter[N_STOP] = 0
    assert entry.advance(small.program, small.work, 1.0, 10**6) == Status.DONE


def test_rows_on_both_sides_of_an_instant():
    case = _sampled()
    case.advance(1.1)
    rows = case.rows
    before, after = rows[rows[:, 1] == FLAG_BEFORE], rows[(rows[:, 1] == FLAG_AFTER) & (rows[:, 0] > 0)]
    np.testing.assert_array_equal(before[:, 0], after[:, 0])
    np.testing.assert_allclose(before[:, 2], after[:, 2], rtol=1e-12)


# ------------------------------------------------------------ delays


def _delayed(rtol=1e-9, delay=1.0, history=1024):
    """x' = -x(t - 1), x = 1 before 0."""
    case = make(
        1, lambda t, x, p: [p[0]], lambda t, x, p: [x[0]], n_p=1, rtol=rtol, delays=lambda t, x, p: [(0, x[0], delay)], history=history
    ).start([1.0], [1.0])
    case.work.delay_value0[0] = 1.0
    entry.start_history(case.program, case.work)
    return case


def _by_steps(t):
    """Method of steps: x(t) = sum (-1)^k (t - k + 1)^k / k! over k with t - k + 1 >= 0."""
    return sum((-1) ** k * (t - k + 1) ** k / math.factorial(k) for k in range(0, math.floor(t) + 2))


def test_delay_equation_by_the_method_of_steps():
    case = _delayed()
    assert case.advance(6.5) == Status.DONE
    assert case.work.x[0] == pytest.approx(_by_steps(6.5), rel=1e-7)
    ends = case.rows[case.rows[:, 1] > 0, 0]
    for k in range(1, 6):
        assert np.min(np.abs(ends - k)) == 0.0
    steps = np.diff(np.unique(ends))
    assert steps.max() <= 1.0 + 1e-12


def test_history_grows_when_asked():
    case = _delayed(history=4)
    case.work.state[3] = 0.02
    assert case.advance(3.0) == Status.DONE
    assert len(case.work.history_t) > 50
    assert case.work.x[0] == pytest.approx(_by_steps(3.0), rel=1e-7)


def test_history_lookups_agree_with_the_plain_twin():
    case = _delayed(rtol=1e-5)
    assert case.advance(4.0) == Status.DONE
    work = case.work
    first, count = int(work.counter[30]), int(work.counter[31])
    take = [(first + k) % len(work.history_t) for k in range(count)]
    pieces = [(work.history_t[k], work.history_h[k], work.history_v[k, 0]) for k in take]
    for t in (*np.linspace(4.0, 5.0, 37), *(work.history_t[k] + 1.0 for k in take if work.history_t[k] >= 3.0)):
        for right in (False, True):
            expected = naive.delayed(pieces, t - 1.0, 1.0, 0.0, work.state[S_HISTORY_T0], right=right)
            assert entry.delayed_value(case.program, work, 0, t, right) == pytest.approx(expected, rel=1e-12)


def test_past_before_the_start_may_slope():
    case = _delayed()
    case.work.delay_value0[0], case.work.delay_slope0[0] = 2.0, 0.5
    assert entry.delayed_value(case.program, case.work, 0, 0.4) == pytest.approx(2.0 + 0.5 * -0.6)


def test_sliding_average_of_a_sine_over_its_period_is_zero():
    """Q' = sin, average f (Q(t) - Q(t - T)), T the period."""
    period = 2.0 * math.pi
    case = make(
        2,
        lambda t, x, p: [-sin(t), x[1] - (x[0] - p[0]) / period],
        lambda t, x, p: [x[0], None],
        n_p=1,
        rtol=1e-8,
        delays=lambda t, x, p: [(0, x[0], period)],
    ).start([0.0, 0.0], [0.0])
    case.work.delay_value0[0] = 0.0
    entry.start_history(case.program, case.work)
    assert case.advance(4.0 * period) == Status.DONE
    late = case.rows[case.rows[:, 0] > period]
    assert np.max(np.abs(late[:, 3])) < 1e-6


def test_a_jump_comes_back_after_the_delay_on_the_instant():
    """y = p + 0.5 y(t - 0.3) algebraic, p stepped by a clock at 0.1: y jumps at 0.1 + 0.3 k, rows on both sides."""
    case = make(
        2,
        lambda t, x, p: [-x[1], x[1] - p[0] - 0.5 * p[1]],
        lambda t, x, p: [x[0], None],
        n_p=2,
        clocks=lambda t, x, p: [(100.0, 0, {0: 1.0 + 0.0 * p[0]})],
        delays=lambda t, x, p: [(1, x[1], 0.3)],
    ).start([0.0, 0.0], [0.0, 0.0])
    case.work.clock_offset[0] = 0.1
    entry.start_history(case.program, case.work)
    assert case.advance(1.15) == Status.DONE
    # 0 to 0.1: 0; then 1, 1.5, 1.75, 1.875 in pieces of 0.3
    assert case.work.x[0] == pytest.approx(0.3 * (1.0 + 1.5 + 1.75) + 0.15 * 1.875, rel=1e-10)
    assert case.work.x[1] == pytest.approx(1.875)
    after = case.rows[case.rows[:, 1] == FLAG_AFTER]
    jumps = after[after[:, 0] > 0]
    np.testing.assert_allclose(jumps[:, 0][:4], [0.1, 0.4, 0.7, 1.0], atol=1e-12)
