"""One attempted step against the dense twin; observed order; reuse of Jacobian and factors; failures."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.kernels import entry
from polewise.kernels.opcodes import Status
from polewise.kernels.workspace import N_FACTORISATIONS, N_FIRST, N_JACOBIANS, N_SOLVES, S_ERROR, S_NEWTON_TOL, S_TOL

from .cases import cos, exp, make, naive, sin, sqrt


def _pendulum(rtol=1e-10):
    """A smooth nonlinear index-1 problem with a nonlinear charge, forcing and an algebraic unknown."""
    return make(
        3,
        lambda t, x, p: [-x[1] + 0.3 * x[0] * x[2], x[2] + 0.2 * x[1] - cos(3.0 * t), x[2] + 0.1 * x[2] ** 3 - sin(x[0]) - 0.5 * x[1]],
        lambda t, x, p: [x[0] + 0.2 * x[0] ** 3, x[1], None],
        rtol=rtol,
    ).start([0.4, -0.2, 0.0])


@pytest.mark.parametrize("h", [1e-3, 0.1, 0.3])
def test_stages_and_error_agree_with_the_dense_twin(h):
    case = _pendulum()
    program, work = case.program, case.work
    assert entry.restart(program, work) == Status.DONE
    work.counter[N_FIRST] = 0
    work.state[S_NEWTON_TOL] = 1e-6
    x = work.x.copy()
    assert entry.attempt_step(program, work, h) == Status.DONE
    z = naive.radau_stages(program, x, 0.0, work.p, work.mode, h)
    np.testing.assert_allclose(work.stage, z, atol=1e-12)
    np.testing.assert_allclose(work.x, x)
    estimate = naive.error_estimate(program, x, 0.0, work.p, work.mode, h, work.stage)
    np.testing.assert_allclose(work.dx, estimate, rtol=1e-6, atol=1e-14)
    weights = 1.0 / (work.state[S_TOL] * (np.abs(x) + program.scale))
    assert work.state[S_ERROR] == pytest.approx(np.max(np.abs(estimate) * weights), rel=1e-6, abs=1e-7)


def _fixed_steps(case, t_stop, steps, rtol=1e-10):
    """End point of equal steps without error control."""
    program, work = case.program, case.work
    work.state[S_TOL], work.state[S_NEWTON_TOL] = 1.0, rtol
    assert entry.restart(program, work) == Status.DONE
    from polewise.kernels.workspace import N_HAVE_STAGES, N_JACOBIAN_AGE, N_MADE_JUMP, N_START_READY

    h = t_stop / steps
    for k in range(steps):
        assert entry.attempt_step(program, work, h) == Status.DONE
        work.x[:] += work.stage[:, 2]
        work.state[0] = (k + 1) * h
        work.counter[N_START_READY] = 0
        work.counter[N_MADE_JUMP] = 1
        work.counter[N_HAVE_STAGES] = 0
        work.counter[N_JACOBIAN_AGE] = 0
    return work.x.copy()


def _observed_orders(build, t_stop, counts):
    reference = _fixed_steps(build(), t_stop, counts[-1] * 4)
    errors = [np.abs(_fixed_steps(build(), t_stop, m) - reference) for m in counts]
    return [np.log2(errors[k] / errors[k + 1]) for k in range(len(counts) - 1)]


def test_order_five_on_a_smooth_nonlinear_dae():
    """All unknowns, the algebraic one included, converge with order 5 (Hairer & Wanner II, VI.1: stiffly accurate, index 1)."""
    orders = _observed_orders(_pendulum, 2.0, [8, 16, 32])
    assert np.all(orders[0] > 4.8)
    assert np.all(orders[1] > 4.6)
    assert np.all(orders[0] < 5.5)


def test_order_on_a_stiff_problem_stays_above_four():
    """Prothero & Robinson 1974: y' = -L (y - cos t) - sin t. Order falls with stiffness, never below the stage order 3."""

    def build(rate):
        return lambda: make(1, lambda t, x, p: [rate * (x[0] - cos(t)) + sin(t)], lambda t, x, p: [x[0]], rtol=1e-12).start([1.0])

    for rate, least in ((1e1, 4.2), (1e4, 2.8)):
        orders = _observed_orders(build(rate), 1.0, [4, 8, 16])
        assert orders[-1][0] > least, (rate, orders)


def test_a_linear_circuit_needs_one_iteration_per_step():
    case = make(2, lambda t, x, p: [x[0] - x[1], x[0] + x[1] - sin(t)], lambda t, x, p: [x[0], x[1]], rtol=1e-8).start([1.0, 0.0])
    assert case.advance(50.0) == Status.DONE
    count = case.work.counter
    attempts = count[0] + count[1]
    assert count[N_SOLVES] < 1.5 * attempts
    assert count[N_JACOBIANS] <= 3
    assert count[N_FACTORISATIONS] < attempts


def test_values_that_are_not_numbers_only_shorten_the_step():
    """x' = -sqrt(x) from 1: the square root of stages below zero is no number; at t = 2 the solution ends."""
    case = make(1, lambda t, x, p: [sqrt(x[0])], lambda t, x, p: [x[0]], rtol=1e-8).start([1.0])
    case.work.state[1] = 5.0
    assert case.advance(1.9) == Status.DONE
    assert case.work.x[0] == pytest.approx(0.05**2, rel=1e-5)
    assert case.advance(3.0) in (Status.STEP_TOO_SMALL, Status.SINGULAR)
    assert case.work.state[0] == pytest.approx(2.0, abs=1e-3)


def test_a_pole_in_time_ends_in_a_diagnosis():
    case = make(2, lambda t, x, p: [-x[0] * x[0], x[1]], lambda t, x, p: [x[0], x[1]], rtol=1e-6).start([1.0, 1.0])
    assert case.advance(2.0) == Status.STEP_TOO_SMALL
    assert case.work.state[0] == pytest.approx(1.0, rel=1e-4)
    from polewise.kernels.workspace import N_WORST

    assert case.work.counter[N_WORST] == 0


def test_singular_pencil_is_said():
    """Two algebraic rows that say the same: no step size helps."""
    case = make(3, lambda t, x, p: [x[0], x[1] + x[2] - x[0], 2.0 * x[1] + 2.0 * x[2] - 2.0 * x[0]], lambda t, x, p: [x[0], None, None]).start(
        [1.0, 0.5, 0.5]
    )
    assert case.advance(1.0) == Status.SINGULAR


@pytest.mark.parametrize(("rtol", "factor"), [(1e-4, 1.0), (1e-6, 1.0), (1e-8, 2.0), (1e-10, 5.0), (1e-11, 8.0)])
def test_errors_are_about_the_tolerance(rtol, factor):
    """Damped oscillator, 10 periods, against its closed form."""
    case = make(2, lambda t, x, p: [-x[1], x[0] + 0.1 * x[1]], lambda t, x, p: [x[0], x[1]], rtol=rtol).start([1.0, 0.0])
    t = 60.0
    assert case.advance(t) == Status.DONE
    w = math.sqrt(1.0 - 0.0025)
    expected = math.exp(-0.05 * t) * (math.cos(w * t) + 0.05 / w * math.sin(w * t))
    assert abs(case.work.x[0] - expected) < factor * rtol


def test_van_der_pol():
    """IVP-2 (test set for IVP solvers, mu = 1000): end values reproduced to 1e-14 by the source."""
    reference = np.array([1.706167732170469, -8.928097010248125e-4])
    for rtol in (1e-6, 1e-9):
        case = make(
            2, lambda t, x, p: [-x[1], x[0] - 1000.0 * (1.0 - x[0] * x[0]) * x[1]], lambda t, x, p: [x[0], x[1]], rtol=rtol, scales=[1.0, 1e-3]
        )
        assert case.start([2.0, 0.0]).advance(2000.0) == Status.DONE
        assert np.max(np.abs(case.work.x / reference - 1.0)) < rtol


def test_robertson():
    """IVP-3 with the conserved sum as an algebraic row: reference values to t = 1e11."""
    short = [(0.4, [0.985172113861, 3.38639537897e-5, 0.0147940221852]), (40.0, [0.715827068719, 9.18553476456e-6, 0.284163745746])]

    def build(scales):
        return make(
            3,
            lambda t, x, p: [0.04 * x[0] - 1e4 * x[1] * x[2], -0.04 * x[0] + 1e4 * x[1] * x[2] + 3e7 * x[1] * x[1], x[0] + x[1] + x[2] - 1.0],
            lambda t, x, p: [x[0], x[1], None],
            rtol=1e-9,
            scales=scales,
        ).start([1.0, 0.0, 0.0])

    for t_stop, reference in short:
        case = build([1.0, 1e-4, 1.0])
        assert case.advance(t_stop) == Status.DONE
        assert np.max(np.abs(case.work.x / np.array(reference) - 1.0)) < 2e-8
        assert case.work.x.sum() == pytest.approx(1.0, abs=1e-14)
    case = build([1e-7, 1e-12, 1.0])
    assert case.advance(1e11) == Status.DONE
    long = np.array([0.2083340149701255e-7, 0.8333360770334713e-13, 0.9999999791665050])
    assert np.max(np.abs(case.work.x / long - 1.0)) < 1e-6


def test_exponential_element():
    """A diode-like law: i = 1e-12 (exp(v / 25 mV) - 1) behind 1 kohm and 1 uF on a sine; the residual must hold at every recorded point."""
    case = make(
        2,
        lambda t, x, p: [x[1] - (5.0 * sin(628.0 * t) - x[0]) / 1e3, x[1] - 1e-12 * (exp(x[0] / 0.025) - 1.0)],
        lambda t, x, p: [1e-6 * x[0], None],
        rtol=1e-6,
        scales=[1.0, 1e-3],
    ).start([0.0, 0.0])
    assert case.advance(0.02) == Status.DONE
    rows = case.rows[case.rows[:, 1] > 0]
    law = 1e-12 * np.expm1(rows[:, 2] / 0.025)
    assert np.max(np.abs(rows[:, 3] - law)) < 1e-7
    assert 0.4 < rows[:, 2].max() < 0.6


def test_factors_grow_when_asked_and_the_run_goes_on():
    """A hub eliminated first fills its factors: far more room than guessed. The run continues where it was."""
    n = 90

    def build(ordered):
        return make(
            n,
            lambda t, x, p: [
                sum((x[0] - x[k] for k in range(1, n)), start=0.0 * t) + x[0] - sin(t),
                *[x[k] - x[0] + 0.01 * k * x[k] for k in range(1, n)],
            ],
            lambda t, x, p: [1.0 * v for v in x],
            rtol=1e-8,
            ordered=ordered,
        ).start([0.0] * n)

    full, sparse = build(False), build(True)
    assert entry.advance(full.program, full.work, 1.0, 10**5) == Status.FACTORS_FULL
    assert full.advance(1.0) == Status.DONE
    assert sparse.advance(1.0) == Status.DONE
    np.testing.assert_allclose(full.work.x, sparse.work.x, rtol=1e-9)
    assert len(full.work.F) > len(sparse.work.F)


def test_runs_side_by_side_do_not_disturb_each_other():
    """The kernels release the interpreter's lock: two threads, two workspaces, the same numbers as one after the other."""
    from concurrent.futures import ThreadPoolExecutor

    def run(seed):
        case = _pendulum(1e-9)
        case.work.x[0] = case.work.q_keep[0] = 0.1 * seed
        assert case.advance(5.0) == Status.DONE
        return case.work.x.copy()

    alone = [run(k) for k in range(4)]
    with ThreadPoolExecutor(2) as pool:
        together = list(pool.map(run, range(4)))
    np.testing.assert_array_equal(np.array(alone), np.array(together))
