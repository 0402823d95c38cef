"""The register tape: written once, read by a plain interpreter here and compared with plain evaluation of the graph."""

import math

import pytest

from polewise.expression.graph import UNARY, ExpressionGraph, PiecewiseCubic
from polewise.expression.tape import ClockSegment, CompiledProgram, DelaySegment, compile_program, listing
from polewise.kernels import opcodes as op


def run(compiled: CompiledProgram, x: list[float], p: list[float], t: float, segments: tuple[int, ...]) -> list[float]:
    """A slow twin of the kernel with every switch live."""
    program = compiled.program
    reg = [math.nan] * program.n_reg
    reg[: program.n_const] = list(program.constants)
    reg[program.time_reg] = t
    reg[program.x_reg : program.x_reg + program.n] = x
    reg[program.p_reg : program.p_reg + program.n_p] = p
    starts = [0, *program.segment_end]
    for segment in segments:
        for k in range(starts[segment], starts[segment + 1]):
            o, a, b, c = program.op[k], reg[program.a[k]], program.b[k], program.c[k]
            if o == op.POSITIVE:
                value = 1.0 if a > 0 else 0.0
            elif o == op.FLOOR:
                value = float(math.floor(a))
            elif o in (op.ADD, op.SUB, op.MUL, op.DIV, op.POW):
                y = reg[b]
                value = {op.ADD: a + y, op.SUB: a - y, op.MUL: a * y}.get(o, 0.0)
                value = a / y if o == op.DIV else a**y if o == op.POW else value
            elif o == op.MUX:
                value = reg[b] if a != 0.0 else reg[c]
            elif o == op.NEG:
                value = -a
            else:
                value = UNARY[o](a)
            reg[program.dst[k]] = value
    return reg


@pytest.fixture
def graph() -> ExpressionGraph:
    return ExpressionGraph()


def test_residual_and_jacobian_registers(graph: ExpressionGraph) -> None:
    t, x, y, p = graph.symbol("time", ""), graph.symbol("x", "a"), graph.symbol("x", "b"), graph.symbol("p", "k")
    f = [graph.subtract(graph.multiply(p, x), graph.unary(op.SIN, graph.multiply(x, y))), graph.subtract(y, graph.power(x, graph.constant(2.0)))]
    q = graph.multiply(graph.constant(3.0), x)
    compiled = compile_program(graph, time=t, unknowns=[x, y], parameters=[p], residuals=f, charges=[q, None], scales=[1.0, 1.0])
    reg = run(compiled, [0.3, -0.7], [2.0], 0.0, (0, 1))
    program = compiled.program
    assert [reg[k] for k in program.f_reg] == pytest.approx([0.6 - math.sin(-0.21), -0.7 - 0.09], rel=1e-15)
    assert reg[program.q_reg[0]] == pytest.approx(0.9)
    assert program.q_reg[1] == -1
    dense = [[0.0, 0.0], [0.0, 0.0]]
    for column in range(2):
        for k in range(program.col_ptr[column], program.col_ptr[column + 1]):
            dense[program.row_idx[k]][column] = reg[program.jf_reg[k]]
    cosine = math.cos(-0.21)
    assert dense[0] == pytest.approx([2.0 + 0.7 * cosine, -0.3 * cosine])
    assert dense[1] == pytest.approx([-0.6, 1.0])


def test_segments_need_only_the_residual_segment(graph: ExpressionGraph) -> None:
    t, x, p = graph.symbol("time", ""), graph.symbol("x", "a"), graph.symbol("p", "k")
    slope = graph.unary(op.COS, x)  # also the Jacobian's entry: must be computed again where an output needs it
    compiled = compile_program(
        graph,
        time=t,
        unknowns=[x],
        parameters=[p],
        residuals=[graph.unary(op.SIN, x)],
        charges=[x],
        scales=[1.0],
        outputs=[slope],
        delays=[DelaySegment(0, graph.multiply(slope, p), 1e-3)],
        clocks=[ClockSegment(1e-4, 0, ((0, graph.add(slope, t)),))],
    )
    program = compiled.program
    for segment, register, expected in ((2, program.out_reg[0], math.cos(0.4)), (3, program.delay_in_reg[0], 5 * math.cos(0.4))):
        assert run(compiled, [0.4], [5.0], 2.0, (0, segment))[register] == pytest.approx(expected)
    assert run(compiled, [0.4], [5.0], 2.0, (0, 4))[program.clock_reg[0]] == pytest.approx(math.cos(0.4) + 2.0)


def test_every_diagonal_entry_is_in_the_pattern(graph: ExpressionGraph) -> None:
    t, x, y = graph.symbol("time", ""), graph.symbol("x", "a"), graph.symbol("x", "b")
    compiled = compile_program(graph, time=t, unknowns=[x, y], parameters=[], residuals=[y, x], charges=[None, None], scales=[1.0, 1.0])
    program = compiled.program
    assert list(program.row_idx) == [0, 1, 0, 1]


def test_a_table_and_its_slope_share_a_switch(graph: ExpressionGraph) -> None:
    t, x = graph.symbol("time", ""), graph.symbol("x", "a")
    number = graph.add_table(PiecewiseCubic("t", (0.0, 1.0), ((0, 0, 0, 0), (0, 2, 0, 0), (2, 0, 0, 0)), closed=True))
    compiled = compile_program(
        graph, time=t, unknowns=[x], parameters=[], residuals=[graph.table(number, x)], charges=[x], scales=[1.0], watched=[graph.positive(x)]
    )
    program = compiled.program
    assert sorted(program.switch_kind) == [op.SWITCH_POSITIVE, op.SWITCH_TABLE]
    assert list(program.table_closed) == [1]
    slopes = [k for k in range(len(program.op)) if program.op[k] == op.TABLE_SLOPE]
    values = [k for k in range(len(program.op)) if program.op[k] == op.TABLE]
    assert program.b[slopes[0]] == program.b[values[0]]
    assert program.switch_watched[list(program.switch_kind).index(op.SWITCH_POSITIVE)] == 1


def test_the_listing_has_a_line_for_each_operation(graph: ExpressionGraph) -> None:
    t, x = graph.symbol("time", ""), graph.symbol("x", "a")
    compiled = compile_program(graph, time=t, unknowns=[x], parameters=[], residuals=[graph.unary(op.EXP, x)], charges=[x], scales=[1.0])
    lines = listing(compiled)
    assert len(lines) == len(compiled.program.op)
    assert "exp" in lines[0]
