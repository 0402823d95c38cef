"""Random expressions: the graph's values, its exact derivatives and the compiled tape against plain evaluation by the standard library."""

from __future__ import annotations

import math
import warnings

import numpy as np
import pytest
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st

from polewise.expression.derivative import Differentiator
from polewise.expression.graph import ExpressionGraph
from polewise.expression.tape import compile_program

from .expressions import TABLE, Tree, build, complex_value, slope_margins, trees

VARIABLES = 3
STEP = 1e-30
# Larger values and slopes say nothing about rules of differentiation, only about rounding of exp(exp(x)).
LARGE = 1e6

values = st.floats(-3.0, 3.0, allow_subnormal=False).map(lambda x: round(x, 6))
points = st.lists(values, min_size=VARIABLES, max_size=VARIABLES)


def plain(tree: Tree, at: list[float]) -> float | None:
    """The value, or None where it has none or is too large to compare."""
    try:
        value = complex_value(tree, [complex(x) for x in at]).real
    except (ArithmeticError, ValueError):
        return None
    return value if math.isfinite(value) and abs(value) < LARGE else None


def slopes(tree: Tree, at: list[float]) -> list[float] | None:
    """d tree / d x_k by complex steps; None where something is out of range or too near a place without a slope."""
    try:
        if min(slope_margins(tree, at), default=1.0) < 1e-9:
            return None
        found = []
        for k in range(VARIABLES):
            shifted = [complex(x, STEP if j == k else 0.0) for j, x in enumerate(at)]
            found.append(complex_value(tree, shifted).imag / STEP)
    except (ArithmeticError, ValueError):
        return None
    return found if all(math.isfinite(d) and abs(d) < LARGE for d in found) else None


def graph_of(forest: list[Tree]) -> tuple[ExpressionGraph, list[int], list[int]]:
    graph = ExpressionGraph()
    table = graph.add_table(TABLE)
    x = [graph.symbol("x", f"x{k}") for k in range(VARIABLES)]
    return graph, x, [build(graph, tree, x, table) for tree in forest]


def agree(got: float, wanted: float, tree: Tree) -> None:
    # Folding and reordering may lose a few last places, more where large terms cancel: the intermediate sizes are bounded by LARGE.
    assert got == pytest.approx(wanted, rel=1e-9, abs=1e-8), tree


@settings(max_examples=300, deadline=None)
@given(tree=trees(VARIABLES), at=points)
def test_the_graph_evaluates_what_was_built(tree: Tree, at: list[float]) -> None:
    wanted = plain(tree, at)
    assume(wanted is not None)
    graph, x, (root,) = graph_of([tree])
    agree(graph.evaluate([root], dict(zip(x, at, strict=True)))[0], wanted, tree)


@settings(max_examples=400, deadline=None)
@given(tree=trees(VARIABLES), at=points)
@example(tree=("^", ("x", 0), ("x", 1)), at=[0.7, -1.3, 0.0])
@example(tree=("atan2", ("x", 0), ("x", 1)), at=[-0.4, -0.9, 0.0])
@example(tree=("/", ("x", 0), ("*", ("x", 0), ("x", 1))), at=[0.3, 2.0, 0.0])
@example(tree=("table", ("*", ("x", 0), ("x", 1))), at=[0.9, 1.5, 0.0])
def test_exact_derivatives_equal_complex_steps(tree: Tree, at: list[float]) -> None:
    wanted = slopes(tree, at)
    assume(wanted is not None and plain(tree, at) is not None)
    graph, x, (root,) = graph_of([tree])
    gradient = Differentiator(graph, x).gradients([root])[0]
    symbols = dict(zip(x, at, strict=True))
    for k, symbol in enumerate(x):
        got = graph.evaluate([gradient[symbol]], symbols)[0] if symbol in gradient else 0.0
        agree(got, wanted[k], tree)


@settings(max_examples=60, deadline=None)
@given(forest=st.lists(trees(VARIABLES), min_size=VARIABLES, max_size=VARIABLES), at=points)
def test_the_compiled_tape_equals_the_graph(forest: list[Tree], at: list[float]) -> None:
    from polewise.kernels.tape import run_jacobian, run_residual_live
    from polewise.kernels.workspace import kernel_program, make_workspace

    assume(all(plain(tree, at) is not None for tree in forest))
    graph, x, roots = graph_of(forest)
    program = kernel_program(
        compile_program(
            graph, time=graph.symbol("time", ""), unknowns=x, parameters=(), residuals=roots, charges=[*x[:-1], None], scales=[1.0] * VARIABLES
        ).program
    )
    work = make_workspace(program)
    work.x[:] = at
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # branches that are not taken may be out of range
        run_residual_live(program, work)
        run_jacobian(program, work)
    symbols = dict(zip(x, at, strict=True))
    # The kernel's elementary functions may differ from the standard library's in the last places; a tape that mixes up a register does not.
    np.testing.assert_allclose(work.reg[program.f_reg], graph.evaluate(roots, symbols), rtol=1e-12, atol=1e-12)
    if any(slopes(tree, at) is None for tree in forest):
        return  # a vertical slope, as of acos at 1
    gradients = Differentiator(graph, x).gradients(roots)
    dense = np.zeros((VARIABLES, VARIABLES))
    for column in range(VARIABLES):
        for k in range(program.col_ptr[column], program.col_ptr[column + 1]):
            dense[program.row_idx[k], column] = work.jac_f[k]
    wanted = [[graph.evaluate([row[s]], symbols)[0] if s in row else 0.0 for s in x] for row in gradients]
    np.testing.assert_allclose(dense, wanted, rtol=1e-9, atol=1e-9)
