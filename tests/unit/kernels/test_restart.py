"""Consistent restarts: charges kept, algebraic rows solved, switches settled; against the undamped dense twin."""

from __future__ import annotations

import numpy as np
import pytest

from polewise.kernels import entry
from polewise.kernels.opcodes import Status
from polewise.kernels.workspace import N_JACOBIANS, N_WORST_SWITCH

from .cases import exp, make, naive, sin, sqrt


def _nonlinear():
    """Charges that depend on two unknowns, an algebraic row with a kink."""
    return make(
        4,
        lambda t, x, p: [
            x[2],
            x[3] - x[0],
            x[2] + x[2] ** 3 - x[0] - p[0],
            x[3] - (x[1] - x[0]).positive().choose(2.0 * (x[1] - x[0]), 0.5 * (x[1] - x[0])),
        ],
        lambda t, x, p: [x[0] + 0.3 * sin(x[1]), x[1] + 0.2 * x[1] ** 3, None, None],
        n_p=1,
    )


@pytest.mark.parametrize("seed", range(6))
def test_agrees_with_the_dense_twin(seed):
    rng = np.random.default_rng(seed)
    case = _nonlinear().start(rng.normal(size=4), [1.0])
    program, work = case.program, case.work
    work.p[0] = rng.normal(scale=5.0)
    work.q_keep[:2] += rng.normal(scale=0.1, size=2)
    modes = list(work.mode)
    expected = naive.restart(program, work.x.copy(), 0.0, work.p, modes, work.q_keep.copy())
    assert entry.restart(program, work) == Status.DONE
    np.testing.assert_allclose(work.x, expected, rtol=1e-9, atol=1e-10)
    assert list(work.mode) == modes
    f, q = naive.residual(program, work.x, 0.0, work.p, work.mode)
    np.testing.assert_allclose(q[:2], work.q_keep[:2], atol=1e-12)
    assert np.max(np.abs(f[2:])) < 1e-10


def test_two_capacitors_joined_keep_their_charge():
    """EV-3 (elementary law): 100 uF at 400 V and 50 uF at 100 V give 300 V. One charge row holds the sum, an algebraic row the joint."""
    case = make(
        2,
        lambda t, x, p: [0.0 * x[0], p[0].positive().choose(x[0] - x[1], x[1] - 100.0)],
        lambda t, x, p: [100e-6 * x[0] + 50e-6 * x[1], None],
        n_p=1,
        scales=[100.0, 100.0],
    ).start([400.0, 100.0], [-1.0])
    assert entry.restart(case.program, case.work) == Status.DONE
    case.work.p[0] = 1.0
    assert entry.restart(case.program, case.work) == Status.DONE
    np.testing.assert_allclose(case.work.x, [300.0, 300.0], rtol=1e-12)


def test_damping_reaches_a_far_solution():
    """i = 1e-14 (exp(v / 26 mV) - 1) from 10 V through 1 ohm, from v = 0: plain Newton overflows, damping must not."""
    case = make(
        2, lambda t, x, p: [x[0], x[0] - (10.0 - x[1]), x[0] - 1e-14 * (exp(x[1] / 0.026) - 1.0)][1:], lambda t, x, p: [None, None], scales=[1.0, 1.0]
    )
    case.work.x[:] = [0.0, 0.0]
    assert entry.restart(case.program, case.work) == Status.DONE
    i, v = case.work.x
    assert i == pytest.approx(1e-14 * np.expm1(v / 0.026), rel=1e-8)
    assert i + v == pytest.approx(10.0)


def test_switches_settle_through_several_rounds():
    """A ladder of comparators, each fed by the one before: n rounds at most."""
    n = 12

    def rows(t, x, p):
        return [x[0] - p[0]] + [x[k] - (x[k - 1] - 0.5).positive().choose(1.0, 0.0) for k in range(1, n)]

    case = make(n, rows, lambda t, x, p: [None] * n, n_p=1).start([0.0] * n, [0.0])
    assert entry.restart(case.program, case.work) == Status.DONE
    case.work.p[0] = 1.0
    assert entry.restart(case.program, case.work) == Status.DONE
    np.testing.assert_allclose(case.work.x, 1.0)
    assert np.all(case.work.mode == 1)


def test_a_contradiction_is_chatter():
    """x = 1 if x < 0.5 otherwise 0 has no solution."""
    case = make(1, lambda t, x, p: [x[0] - (0.5 - x[0]).positive().choose(1.0, 0.0)], lambda t, x, p: [None])
    assert entry.restart(case.program, case.work) == Status.CHATTER
    assert case.work.counter[N_WORST_SWITCH] == 0


def test_no_solution_and_singular():
    case = make(1, lambda t, x, p: [x[0] * x[0] + 1.0], lambda t, x, p: [None])
    case.work.x[0] = 0.7
    assert entry.restart(case.program, case.work) in (Status.NO_CONVERGENCE, Status.SINGULAR)
    case = make(1, lambda t, x, p: [sqrt(x[0]) + 2.0 - t], lambda t, x, p: [None])
    case.work.x[0] = -1.0
    assert entry.restart(case.program, case.work) == Status.NOT_FINITE


def test_restarts_that_change_nothing_renew_nothing():
    case = _nonlinear().start([0.1, 0.2, 0.0, 0.0], [1.0])
    assert entry.restart(case.program, case.work) == Status.DONE
    before, x = int(case.work.counter[N_JACOBIANS]), case.work.x.copy()
    for _ in range(5):
        assert entry.restart(case.program, case.work) == Status.DONE
    assert case.work.counter[N_JACOBIANS] == before
    np.testing.assert_allclose(case.work.x, x, rtol=1e-10)
