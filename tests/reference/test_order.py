"""Order of the integrator: errors against step size at fixed steps, and against steps and tolerance as users run it."""

from __future__ import annotations

import math

import numpy as np
import pytest

import polewise
from polewise.expression.graph import ExpressionGraph
from polewise.expression.tape import compile_program
from polewise.kernels import opcodes as op


def forced_program():
    """x' = v, v' = -x - x^3/50 + 40 cos 20t, and an algebraic z = x - 2 v, written as rows of d/dt q + f = 0."""
    g = ExpressionGraph()
    t, x, v, z = g.symbol("time", ""), g.symbol("x", "x"), g.symbol("x", "v"), g.symbol("x", "z")
    push = g.multiply(g.constant(40.0), g.unary(op.COS, g.multiply(g.constant(20.0), t)))
    spring = g.add(x, g.multiply(g.constant(0.02), g.power(x, g.constant(3.0))))
    residuals = [
        g.negate(v),
        g.subtract(spring, push),
        g.subtract(z, g.subtract(x, g.multiply(g.constant(2.0), v))),
    ]
    return compile_program(g, time=t, unknowns=[x, v, z], parameters=(), residuals=residuals, charges=[x, v, None], scales=[1.0, 1.0, 1.0]).program


def at_fixed_steps(h: float, end: float) -> np.ndarray:
    """The kernels' own step, h seconds each time: the error test is switched off by a huge tolerance, Newton's is tight."""
    from polewise.kernels.advance import advance
    from polewise.kernels.opcodes import Status
    from polewise.kernels.restart import restart
    from polewise.kernels.workspace import N_STEPS, S_H, S_H_MAX, S_NEWTON_TOL, S_TOL, kernel_program, make_workspace

    program = kernel_program(forced_program())
    work = make_workspace(program)
    work.state[S_TOL], work.state[S_NEWTON_TOL] = 1.0, 1e-11
    work.x[:2] = 1.0, 0.5
    work.q_keep[:2] = 1.0, 0.5
    assert restart(program, work) == Status.DONE
    work.state[S_H] = work.state[S_H_MAX] = h
    assert advance(program, work, end, 10_000_000) == Status.DONE
    assert work.counter[N_STEPS] == pytest.approx(end / h, abs=1.5)
    return work.x.copy()


def test_order_at_fixed_steps() -> None:
    # Radau IIA with three stages has order 5 in states and, being stiffly accurate, in algebraic unknowns of index 1
    # (Hairer & Wanner, Solving Ordinary Differential Equations II, VI.1).
    from scipy.integrate import solve_ivp

    end = 2.0
    reference = solve_ivp(
        lambda t, y: [y[1], -y[0] - y[0] ** 3 / 50 + 40 * math.cos(20 * t)], (0, end), [1.0, 0.5], method="DOP853", rtol=1e-13, atol=1e-14
    )
    x, v = reference.y[:, -1]
    steps = np.array([0.05, 0.025, 0.0125, 0.00625])
    errors = np.array([np.abs(at_fixed_steps(h, end) - [x, v, x - 2 * v]) for h in steps])
    order = np.log2(errors[:-1] / errors[1:])
    assert np.all(order > 4.8), errors
    assert np.all(order < 5.3), errors


RING = """
reference gnd
store: a --[c: i = d/dt (10 uF * (1 + (v / 40 V)^2) * v) initially 20 V]-- gnd
coil: a --[r: 0.5 ohm]--[l: 1 mH]-- gnd
hum: gnd --[0.3 A * sin(2*pi * 700 Hz * time)]-- a
study go {
    start cold
    run for 5 ms
    keep a.v, coil.i
}
"""


def test_error_follows_tolerance_and_steps() -> None:
    # the same nonlinear ring at tolerances from 1e-4 to 1e-11 against itself at 1e-13: errors stay within 50 times the tolerance, and
    # fall with at least the fourth power of the number of steps (order 5 asymptotically)
    system = polewise.from_text(RING)
    at = np.linspace(1e-3, 5e-3, 9)
    best = system.run("go", tolerance=1e-13, at=list(at[:-1])).at("a.v", at)
    tolerances = 10.0 ** -np.arange(4, 12)
    errors, steps = [], []
    for tolerance in tolerances:
        result = system.run("go", tolerance=tolerance, at=list(at[:-1]))
        errors.append(np.max(np.abs(result.at("a.v", at) - best)) / np.max(np.abs(best)))
        steps.append(result.counters["steps"])
    assert np.all(np.array(errors) < 50 * tolerances), list(zip(tolerances, errors))
    assert np.all(np.diff(np.log(errors)) < 0)
    fall = -np.polyfit(np.log(steps[2:]), np.log(errors[2:]), 1)[0]
    assert fall > 4.0, (fall, steps, errors)


def test_dependent_states_keep_the_order() -> None:
    # A capacitor across a sine source through a small loop of capacitors: with the loop reduced to index 1 the drop of the error with the
    # steps is as steep as without it (integrated unreduced, a fourth-order pair falls to order 1 here).
    # Exactly: C2 across the source carries C2 w V cos(w t); the RC branch beside it has a closed response.
    text = """
        reference gnd
        supply: a --[10 V * sin(2*pi * 1 kHz * time)]-- gnd
        shunt: a --[c: 2 uF]-- gnd
        top: a --[c: 1 uF]-- m
        low: m --[c: 1 uF]-- gnd
        leak: m --[r: 1 kohm]-- gnd
        study go {
            start cold
            run for 3 ms
            keep m.v, shunt.i, low.i
        }
    """
    # 2 uF v' = 1 uF vs' - v/1k: v = A sin + B cos - B e^(-t/2ms); tau = 2 ms, drive (1/2) w 10 V cos
    w, tau, drive = 2 * math.pi * 1e3, 2e-3, 5.0
    # v' = drive w cos(w t) - v/tau; particular p cos + q sin
    p = drive * w / tau / (1 / tau**2 + w * w)
    q = drive * w * w / (1 / tau**2 + w * w)
    errors, steps = [], []
    tolerances = np.array([1e-4, 1e-5, 1e-6, 1e-7])
    for tolerance in tolerances:
        result = polewise.from_text(text).run("go", tolerance=tolerance)
        t = result.time
        v = p * np.cos(w * t) + q * np.sin(w * t) - p * np.exp(-t / tau)
        slope = -p * w * np.sin(w * t) + q * w * np.cos(w * t) + p / tau * np.exp(-t / tau)
        errors.append(float(np.max(np.abs(result["m.v"] - v)) / 5))
        steps.append(result.counters["steps"])
        np.testing.assert_allclose(result["low.i"], 1e-6 * slope, rtol=0, atol=1e-6 * 5 * w * max(30 * tolerance, 1e-11))
        np.testing.assert_allclose(result["shunt.i"], 2e-6 * 10 * w * np.cos(w * t), rtol=0, atol=1e-12)
    assert np.all(np.array(errors) < 30 * tolerances), errors
    assert -np.polyfit(np.log(steps), np.log(errors), 1)[0] > 4.0, (steps, errors)
