"""The compiled tape against the plain interpreter, on random programs and awkward values."""

from __future__ import annotations

import math

import numpy as np
import pytest

from polewise.expression.graph import ExpressionGraph, PiecewiseCubic
from polewise.expression.tape import compile_program
from polewise.kernels import entry
from polewise.kernels import opcodes as op
from polewise.kernels.workspace import make_workspace

from .cases import naive

UNARY = [op.SQRT, op.EXP, op.LOG, op.SIN, op.COS, op.TAN, op.ASIN, op.ACOS, op.ATAN, op.SINH, op.COSH, op.TANH]
KNOTS = PiecewiseCubic("k", (-1.0, 0.0, 0.5, 2.0), tuple((0.3 * k, 1.0 - k, 0.2, 0.1 * k) for k in range(5)), False)


def _random_program(seed: int):
    rng = np.random.default_rng(seed)
    g = ExpressionGraph()
    table = g.add_table(KNOTS)
    x = [g.symbol("x", str(k)) for k in range(4)]
    p = [g.symbol("p", str(k)) for k in range(2)]
    pool = [*x, *p, g.symbol("time", ""), g.constant(0.7), g.constant(-2.0)]
    for _ in range(60):
        a, b, c = (pool[k] for k in rng.integers(0, len(pool), 3))
        kind = rng.integers(0, 9)
        if kind < 4:
            node = (g.add, g.subtract, g.multiply, g.divide)[kind](a, b)
        elif kind == 4:
            node = g.unary(int(rng.choice(UNARY)), a)
        elif kind == 5:
            node = g.mux(g.positive(a), b, c)
        elif kind == 6:
            node = g.floor(a)
        elif kind == 7:
            node = g.table(table, a)
        else:
            node = g.atan2(a, b) if rng.random() < 0.5 else g.power(a, g.constant(float(rng.choice([0.5, 2.5, -1.5]))))
        pool.append(node)
    rows = pool[-8:]
    return compile_program(
        g, time=pool[6], unknowns=x, parameters=p, residuals=rows[:4], charges=[rows[4], None, rows[5], None], scales=[1.0] * 4, outputs=pool[-12:-8]
    ).program


@pytest.mark.parametrize("seed", range(12))
def test_registers_agree_with_the_plain_interpreter(seed):
    program = _random_program(seed)
    work = make_workspace(program)
    rng = np.random.default_rng(seed + 100)
    for values in ([0.0] * 6, [1e-300, -1e-300, 1e300, -1e300, 1.0, -1.0], *rng.normal(scale=2.0, size=(20, 6))):
        work.x[:], work.p[:], work.state[0] = values[:4], values[4:], 0.25
        entry.run_residual_live(program, work)
        live = work.mode.copy()
        for switch, value in enumerate(work.reg[program.switch_reg]):
            if np.isfinite(value) and abs(value) < 4e18:
                assert naive.violation(program, live, switch, value) <= 0.0
        entry.run_jacobian(program, work)
        entry.run_segment(program, work, 2)
        for k in range(program.segment_end[2]):
            a, b, c = (int(v[k]) for v in (program.a, program.b, program.c))
            expected = naive.operate(program, int(program.op[k]), a, b, c, work.reg, live, False)
            got = work.reg[program.dst[k]]
            if np.isfinite(expected):
                assert got == pytest.approx(expected, rel=1e-13, abs=1e-300), program.op[k]
            else:
                assert not np.isfinite(got)


def test_frozen_modes_stay():
    program = _random_program(3)
    work = make_workspace(program)
    rng = np.random.default_rng(5)
    work.x[:] = rng.normal(size=4)
    entry.run_residual_live(program, work)
    before = work.mode.copy()
    work.x[:] = -10.0 * work.x
    entry.run_residual(program, work)
    assert np.array_equal(work.mode, before)
    expected = naive.registers(program, work.x, 0.0, work.p, before)
    fine = np.isfinite(expected)
    last = program.dst[: program.segment_end[0]]
    np.testing.assert_allclose(work.reg[last][fine[last]], expected[last][fine[last]], rtol=1e-13)


@pytest.mark.parametrize("u", [-5.0, -1.0, -1e-300, 0.0, 0.25, 0.5, 1.999999, 2.0, 2.0000001, 1e9])
def test_table_segments_at_and_between_knots(u):
    g = ExpressionGraph()
    table = g.add_table(KNOTS)
    x, t = g.symbol("x", "0"), g.symbol("time", "")
    program = compile_program(g, time=t, unknowns=[x], parameters=[], residuals=[g.table(table, x)], charges=[None], scales=[1.0]).program
    work = make_workspace(program)
    work.x[0] = u
    entry.run_residual_live(program, work)
    assert work.mode[0] == naive.table_segment(KNOTS.knots, u) == KNOTS.segment(u)
    assert work.reg[program.f_reg[0]] == pytest.approx(KNOTS.value(u), rel=1e-14)
    entry.run_jacobian(program, work)
    assert work.jac_f[0] == pytest.approx(KNOTS.slope(u), rel=1e-14)


def test_functions_outside_their_range_are_not_numbers():
    g = ExpressionGraph()
    x, t = g.symbol("x", "0"), g.symbol("time", "")
    for operation, value in ((op.SQRT, -1.0), (op.LOG, -1.0), (op.ASIN, 2.0), (op.ACOS, -2.0)):
        program = compile_program(g, time=t, unknowns=[x], parameters=[], residuals=[g.unary(operation, x)], charges=[None], scales=[1.0]).program
        work = make_workspace(program)
        work.x[0] = value
        entry.run_residual(program, work)
        assert math.isnan(work.reg[program.f_reg[0]])
