"""Values of expressions at one point with every switch on a chosen side, and exact derivatives of weighted sums by one backward sweep."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from polewise.expression.graph import BINARY, CONSTANT, SYMBOL, UNARY, ExpressionGraph, Node
from polewise.kernels import opcodes as op

ComplexArray: TypeAlias = NDArray[np.complexfloating[Any, Any]]
BoolArray: TypeAlias = NDArray[np.bool_]

# A switch whose input lies within this part of the largest term in it stands at its kink.
KINK_RELATIVE = 1e-9


class PointValues:
    """Expressions evaluated at one point; grows as more are asked for.

    Args:
        at: value of every symbol that may be met.
        sides: switch (a `positive` node) → the side to stand on, 0 or 1, instead of the side its input says.
    """

    def __init__(self, graph: ExpressionGraph, at: Mapping[Node, float], sides: Mapping[Node, int] | None = None) -> None:
        self.graph = graph
        self.at = at
        self.sides = dict(sides or {})
        self.known: dict[Node, float] = {}
        self.seen: set[Node] = set()

    def values(self, nodes: Sequence[Node]) -> list[float]:
        """Their values; nan where one is undefined.

        Raises:
            KeyError: a symbol without a value.
        """
        graph, known = self.graph, self.known
        operations, a, b, c = graph.operation, graph.a, graph.b, graph.c
        for node in graph.reachable(nodes, self.seen):
            operation = operations[node]
            if operation == CONSTANT:
                known[node] = graph.values[node]
            elif operation == SYMBOL:
                known[node] = self.at[node]
            elif operation == op.MUL:
                known[node] = known[a[node]] * known[b[node]]
            elif operation == op.ADD:
                known[node] = known[a[node]] + known[b[node]]
            elif operation == op.SUB:
                known[node] = known[a[node]] - known[b[node]]
            elif operation == op.NEG:
                known[node] = -known[a[node]]
            elif operation == op.MUX:
                known[node] = known[b[node]] if known[a[node]] != 0.0 else known[c[node]]
            elif operation == op.POSITIVE:
                side = self.sides.get(node)
                known[node] = (1.0 if known[a[node]] > 0.0 else 0.0) if side is None else float(side)
            else:
                known[node] = self._other(node, operation)
        return [known[n] for n in nodes]

    def _other(self, node: Node, operation: int) -> float:
        graph, known = self.graph, self.known
        x = known[graph.a[node]]
        try:
            if operation == op.TABLE:
                return graph.tables[graph.c[node]].value(x)
            if operation == op.TABLE_SLOPE:
                return graph.tables[graph.c[node]].slope(x)
            if operation == op.FLOOR:
                return float(math.floor(x))
            if graph.b[node] < 0:
                return float(UNARY[operation](x))
            return float(BINARY[operation](x, known[graph.b[node]]))
        except (ValueError, ZeroDivisionError, OverflowError):
            return math.nan

    # ------------------------------------------------------------ kinks

    def kinks(self, nodes: Sequence[Node]) -> list[Node]:
        """`positive` switches that matter under the nodes and whose input is zero within rounding."""
        self.values(nodes)
        graph = self.graph
        found = []
        for node in self._alive(nodes):
            if graph.operation[node] == op.POSITIVE and node not in self.sides:
                size = self._size(graph.a[node])
                if abs(self.known[graph.a[node]]) <= KINK_RELATIVE * size:
                    found.append(node)
        return found

    def _alive(self, nodes: Sequence[Node]) -> list[Node]:
        """Nodes that the present sides let through: of a choice only the chosen branch and the condition."""
        graph, known = self.graph, self.known
        seen: set[Node] = set()
        stack = list(nodes)
        while stack:
            node = stack.pop()
            if node in seen:
                continue
            seen.add(node)
            if graph.operation[node] == op.MUX:
                stack += [graph.a[node], graph.b[node] if known[graph.a[node]] != 0.0 else graph.c[node]]
            else:
                stack += graph.children(node)
        return sorted(seen)

    def _size(self, node: Node) -> float:
        """Size of the terms that add up to a node."""
        graph, known = self.graph, self.known
        operation = graph.operation[node]
        if operation in (op.ADD, op.SUB):
            return max(self._size(graph.a[node]), self._size(graph.b[node]))
        if operation == op.NEG:
            return self._size(graph.a[node])
        return abs(known[node])

    # ------------------------------------------------------------ backward

    def gradient_of_sum(self, weights: Mapping[Node, ComplexArray]) -> dict[Node, ComplexArray]:
        """d/d(symbol) of sum over nodes of weight * value, for every symbol under them, by one backward sweep.

        Args:
            weights: node → shape (m,), m sums at once.
        Returns:
            symbol → shape (m,); symbols without influence are absent.
        Source: Griewank & Walther 2008, Evaluating Derivatives, ch. 3 (reverse mode). Second derivatives of tables are exact here.
        """
        roots = list(weights)
        self.values(roots)
        graph = self.graph
        order = graph.reachable(roots)
        bar: dict[Node, Any] = {n: np.array(w, dtype=complex) for n, w in weights.items()}
        result: dict[Node, ComplexArray] = {}
        for node in reversed(order):
            weight = bar.pop(node, None)
            if weight is None:
                continue
            operation = graph.operation[node]
            if operation == SYMBOL:
                result[node] = weight
            if operation < 0:
                continue
            for child, slope in self._slopes(node, operation):
                if slope != 0.0:
                    present = bar.get(child)
                    bar[child] = slope * weight if present is None else present + slope * weight
        return result

    def _slopes(self, node: Node, operation: int) -> list[tuple[Node, float]]:
        """Local derivatives of a node with respect to its children."""
        graph, known = self.graph, self.known
        a, b = graph.a[node], graph.b[node]
        x = known[a]
        if operation == op.MUL:
            return [(a, known[b]), (b, x)]
        if operation == op.ADD:
            return [(a, 1.0), (b, 1.0)]
        if operation == op.SUB:
            return [(a, 1.0), (b, -1.0)]
        if operation == op.NEG:
            return [(a, -1.0)]
        if operation == op.DIV:
            y = known[b]
            return [(a, 1.0 / y), (b, -x / (y * y))] if y != 0.0 else []
        if operation == op.MUX:
            return [(b if x != 0.0 else graph.c[node], 1.0)]
        if operation in (op.POSITIVE, op.FLOOR):
            return []
        if operation == op.TABLE:
            return [(a, graph.tables[graph.c[node]].slope(x))]
        if operation == op.TABLE_SLOPE:
            return [(a, _table_curvature(graph, graph.c[node], x))]
        if operation == op.POW:
            y = known[b]
            slopes = [(a, y * x ** (y - 1.0))] if x != 0.0 or y >= 1.0 else []
            return slopes if x <= 0.0 or graph.operation[b] == CONSTANT else [*slopes, (b, known[node] * math.log(x))]
        if operation == op.ATAN2:
            y = known[b]
            square = x * x + y * y
            return [(a, y / square), (b, -x / square)] if square else []
        return [(a, _unary_slope(operation, x, known[node]))]


def _table_curvature(graph: ExpressionGraph, number: int, x: float) -> float:
    """Second derivative of a table."""
    table = graph.tables[number]
    k = table.segment(x)
    u = x - table.knots[max(k - 1, 0)]
    _, _, c2, c3 = table.coefficients[k]
    return 2.0 * c2 + 6.0 * c3 * u


def _unary_slope(operation: int, x: float, y: float) -> float:
    """d y / d x for functions of one argument."""
    try:
        if operation == op.SQRT:
            return 0.5 / y
        if operation == op.EXP:
            return y
        if operation == op.LOG:
            return 1.0 / x
        if operation == op.SIN:
            return math.cos(x)
        if operation == op.COS:
            return -math.sin(x)
        if operation == op.TAN:
            return 1.0 + y * y
        if operation == op.ASIN:
            return 1.0 / math.sqrt(1.0 - x * x)
        if operation == op.ACOS:
            return -1.0 / math.sqrt(1.0 - x * x)
        if operation == op.ATAN:
            return 1.0 / (1.0 + x * x)
        if operation == op.SINH:
            return math.cosh(x)
        if operation == op.COSH:
            return math.sinh(x)
        assert operation == op.TANH
        return 1.0 - y * y
    except (ValueError, ZeroDivisionError, OverflowError):
        return math.nan
