"""Random expressions as plain trees, with two slow evaluators that share nothing with the expression graph: real and complex.

A tree is a tuple (operation, operand, …) of our own words, ("x", k) a variable, ("number", value) a constant. `build` writes it into an
ExpressionGraph; `real_value` and `complex_value` evaluate it by the standard library. A complex step of 1e-30 in one variable gives that
derivative to rounding, because nothing is subtracted (Squire & Trapp 1998, SIAM Review 40(1)). Choices follow the real part.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable, Sequence
from typing import Any

from hypothesis import strategies as st

from polewise.expression.graph import ExpressionGraph, Node, PiecewiseCubic
from polewise.kernels import opcodes as op

Tree = tuple[Any, ...]

# Smooth pieces with kinks at the knots: y and its slope jump, so that a wrong segment shows.
_PIECES = ((0.3, 0.1, 0.0, 0.0), (0.3, -0.4, 0.25, 0.125), (1.0, 2.0, -0.5, 0.25), (-0.5, 0.75, 0.0, 0.0))
TABLE = PiecewiseCubic("bent", (-1.0, 0.5, 2.0), _PIECES, False)

UNARY = {
    "sqrt": (op.SQRT, cmath.sqrt),
    "exp": (op.EXP, cmath.exp),
    "ln": (op.LOG, cmath.log),
    "sin": (op.SIN, cmath.sin),
    "cos": (op.COS, cmath.cos),
    "tan": (op.TAN, cmath.tan),
    "asin": (op.ASIN, cmath.asin),
    "acos": (op.ACOS, cmath.acos),
    "atan": (op.ATAN, cmath.atan),
    "sinh": (op.SINH, cmath.sinh),
    "cosh": (op.COSH, cmath.cosh),
    "tanh": (op.TANH, cmath.tanh),
}
BINARY = ("+", "-", "*", "/", "^", "atan2", "min", "max")

numbers = st.sampled_from([-2.5, -1.0, -0.5, 0.0, 0.25, 0.5, 1.0, 2.0, 3.0, 4.0, 7.0])


def trees(variables: int, *, size: int = 14) -> st.SearchStrategy[Tree]:
    """Random trees of `variables` variables, every operation of the tape in them."""
    leaves = st.one_of(
        st.integers(0, variables - 1).map(lambda k: ("x", k)),
        st.integers(0, variables - 1).map(lambda k: ("x", k)),
        numbers.map(lambda value: ("number", value)),
    )

    def grown(inner: st.SearchStrategy[Tree]) -> st.SearchStrategy[Tree]:
        one = st.tuples(st.sampled_from(sorted(UNARY)), inner)
        two = st.tuples(st.sampled_from(BINARY), inner, inner)
        own = st.tuples(st.sampled_from(("negate", "abs", "sign", "floor", "table", "square")), inner)
        choice = st.tuples(st.just("choose"), inner, inner, inner)
        held = st.tuples(st.just("limit"), inner, inner, inner)
        return st.one_of(two, two, one, own, choice, held)

    return st.recursive(leaves, grown, max_leaves=size)


def build(graph: ExpressionGraph, tree: Tree, variables: Sequence[Node], table: int) -> Node:
    """The tree as a node; `variables` are the nodes of ("x", k), `table` the number of TABLE in the graph."""
    kind = tree[0]
    if kind == "x":
        return variables[tree[1]]
    if kind == "number":
        return graph.constant(tree[1])
    a, *more = (build(graph, part, variables, table) for part in tree[1:])
    if kind in UNARY:
        return graph.unary(UNARY[kind][0], a)
    if kind == "choose":
        return graph.mux(graph.greater(a, graph.constant(0.0)), more[0], more[1])
    if kind == "limit":
        return graph.limit(a, more[0], more[1])
    make: dict[str, Callable[..., Node]] = {
        "+": graph.add,
        "-": graph.subtract,
        "*": graph.multiply,
        "/": graph.divide,
        "^": graph.power,
        "atan2": graph.atan2,
        "min": graph.minimum,
        "max": graph.maximum,
        "negate": graph.negate,
        "abs": graph.absolute,
        "sign": graph.sign,
        "floor": graph.floor,
        "table": lambda x: graph.table(table, x),
        "square": lambda x: graph.power(x, graph.constant(2.0)),
    }
    return make[kind](a, *more)


def _cubic(x: complex) -> complex:
    """TABLE at x, in the segment of the real part: written out from the numbers above."""
    r = x.real
    if r < -1.0:
        return 0.3 + 0.1 * (x + 1.0)
    if r < 0.5:
        u = x + 1.0
        return 0.3 - 0.4 * u + 0.25 * u**2 + 0.125 * u**3
    if r <= 2.0:
        u = x - 0.5
        return 1.0 + 2.0 * u - 0.5 * u**2 + 0.25 * u**3
    return -0.5 + 0.75 * (x - 2.0)


def _atan2(y: complex, x: complex) -> complex:
    """atan2 of complex numbers near real ones: the real angle plus a small turn, atan((y x0 - x y0)/(x x0 + y y0)), an identity."""
    y0, x0 = y.real, x.real
    return math.atan2(y0, x0) + cmath.atan((y * x0 - x * y0) / (x * x0 + y * y0))


def complex_value(tree: Tree, x: Sequence[complex]) -> complex:
    """The tree at complex variables.

    Raises:
        ArithmeticError, ValueError: outside a function's range.
    """
    kind = tree[0]
    if kind == "x":
        return x[tree[1]]
    if kind == "number":
        return complex(tree[1])
    if kind in ("choose", "limit", "min", "max"):
        return _choice(kind, [complex_value(part, x) for part in tree[1:]])
    a, *more = (complex_value(part, x) for part in tree[1:])
    if kind in UNARY:
        _in_real_range(kind, a.real)
        return complex(UNARY[kind][1](a))
    if kind == "^":
        return _power(a, more[0])
    plain: dict[str, Callable[..., complex]] = {
        "+": lambda: a + more[0],
        "-": lambda: a - more[0],
        "*": lambda: a * more[0],
        "/": lambda: a / more[0],
        "atan2": lambda: _atan2(a, more[0]),
        "negate": lambda: -a,
        "abs": lambda: a if a.real > 0 else -a,
        "sign": lambda: complex(0.0 if a.real == 0.0 else math.copysign(1.0, a.real)),
        "floor": lambda: complex(math.floor(a.real)),
        "table": lambda: _cubic(a),
        "square": lambda: a * a,
    }
    return plain[kind]()


def _choice(kind: str, parts: list[complex]) -> complex:
    a, b, *c = parts
    if kind == "choose":
        return b if a.real > 0 else c[0]
    if kind == "limit":
        return c[0] if a.real > c[0].real else b if a.real < b.real else a
    if kind == "min":
        return b if a.real > b.real else a
    return a if a.real > b.real else b


def _in_real_range(kind: str, x: float) -> None:
    if (kind == "sqrt" and x < 0.0) or (kind == "ln" and x <= 0.0) or (kind in ("asin", "acos") and abs(x) > 1.0):
        raise ValueError(kind)


def _power(x: complex, y: complex) -> complex:
    """x^y with a real result for real operands: a negative base only to a whole constant."""
    if x.real <= 0.0:
        if y.imag != 0.0 or y.real != int(y.real) or (x.real == 0.0 and y.real < 1.0):
            raise ValueError("power")
        n, result = int(abs(y.real)), complex(1.0)
        if n > 64:
            raise ValueError("power")
        for _ in range(n):
            result *= x
        return result if y.real >= 0 else 1.0 / result
    return complex(cmath.exp(y * cmath.log(x)))


def slope_margins(tree: Tree, x: Sequence[float]) -> list[float]:
    """How far the tree is, at real variables, from every place where it has no slope: choices that flip, vertical tangents."""
    margins: list[float] = []
    points = [complex(value) for value in x]

    def walk(part: Tree) -> None:
        kind = part[0]
        if kind in ("x", "number"):
            return
        for inner in part[1:]:
            walk(inner)
        a, *more = (complex_value(inner, points).real for inner in part[1:])
        if kind in ("abs", "sign", "choose"):
            margins.append(abs(a))
        elif kind in ("min", "max"):
            margins.append(abs(a - more[0]))
        elif kind == "limit":
            margins.extend((abs(a - more[0]), abs(a - more[1])))
        elif kind == "floor":
            margins.append(min(a - math.floor(a), math.ceil(a) - a) if a != math.floor(a) else 0.0)
        elif kind in ("asin", "acos"):
            margins.append(1.0 - abs(a))
        elif kind == "sqrt" or (kind == "^" and part[2][0] != "number"):
            margins.append(a)
        elif kind == "table":
            margins.extend(abs(a - knot) for knot in TABLE.knots)

    walk(tree)
    return margins
