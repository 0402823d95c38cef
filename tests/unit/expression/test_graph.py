"""The expression graph: sharing, folding, substitution, plain evaluation."""

import math

import pytest

from polewise.expression.graph import ExpressionGraph, PiecewiseCubic
from polewise.kernels import opcodes as op


@pytest.fixture
def graph() -> ExpressionGraph:
    return ExpressionGraph()


def test_equal_expressions_are_one_node(graph: ExpressionGraph) -> None:
    x, y = graph.symbol("x", "a"), graph.symbol("x", "b")
    assert graph.add(x, y) == graph.add(y, x)
    assert graph.multiply(x, y) == graph.multiply(y, x)
    assert graph.subtract(x, y) != graph.subtract(y, x)


def test_constants_fold(graph: ExpressionGraph) -> None:
    x = graph.symbol("x", "a")
    two, three = graph.constant(2.0), graph.constant(3.0)
    assert graph.value_of(graph.power(two, three)) == 8.0
    assert graph.add(x, graph.constant(0.0)) == x
    assert graph.multiply(x, graph.constant(1.0)) == x
    assert graph.value_of(graph.multiply(x, graph.constant(0.0))) == 0.0
    assert graph.multiply(two, graph.multiply(three, x)) == graph.multiply(graph.constant(6.0), x)
    assert graph.value_of(graph.subtract(x, x)) == 0.0


def test_division_by_a_constant_zero_is_left_to_run_time(graph: ExpressionGraph) -> None:
    node = graph.divide(graph.constant(1.0), graph.constant(0.0))
    assert graph.value_of(node) is None
    assert math.isnan(graph.evaluate([node], {})[0])


def test_double_negation_of_a_condition(graph: ExpressionGraph) -> None:
    c = graph.positive(graph.symbol("x", "a"))
    assert graph.invert(graph.invert(c)) == c


@pytest.mark.parametrize(("x", "expected"), [(-2.0, -1.0), (0.5, 0.5), (7.0, 3.0)])
def test_limit(graph: ExpressionGraph, x: float, expected: float) -> None:
    s = graph.symbol("x", "a")
    node = graph.limit(s, graph.constant(-1.0), graph.constant(3.0))
    assert graph.evaluate([node], {s: x}) == [expected]


@pytest.mark.parametrize(("x", "expected"), [(-2.0, -1.0), (0.0, 0.0), (7.0, 1.0)])
def test_sign(graph: ExpressionGraph, x: float, expected: float) -> None:
    s = graph.symbol("x", "a")
    assert graph.evaluate([graph.sign(s)], {s: x}) == [expected]


def test_substitute_rebuilds_and_folds(graph: ExpressionGraph) -> None:
    x, y = graph.symbol("x", "a"), graph.symbol("x", "b")
    node = graph.add(graph.multiply(x, y), graph.unary(op.SIN, x))
    (result,) = graph.substitute([node], {x: graph.constant(0.0)})
    assert graph.value_of(result) == 0.0


def test_long_sum_is_shallow(graph: ExpressionGraph) -> None:
    symbols = [graph.symbol("x", str(k)) for k in range(1000)]
    node = graph.sum(symbols)
    depth = dict.fromkeys(symbols, 0)
    for n in graph.reachable([node]):
        if n not in depth:
            depth[n] = 1 + max(depth[c] for c in graph.children(n))
    assert depth[node] == 10
    assert graph.evaluate([node], dict.fromkeys(symbols, 1.0)) == [1000.0]


def test_piecewise_cubic_segments() -> None:
    table = PiecewiseCubic("t", (0.0, 1.0), ((0, 0, 0, 0), (0, 2, 0, 0), (2, 0, 0, 0)), closed=False)
    assert table.value(-3.0) == 0.0
    assert table.value(0.5) == 1.0
    assert table.value(1.0) == 2.0
    assert table.value(9.0) == 2.0
    assert table.slope(0.5) == 2.0
