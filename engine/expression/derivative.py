"""Exact sparse derivatives of expressions: forward through the graph, one small mapping per node."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from typing import TypeAlias

from polewise.expression.graph import ExpressionGraph, Node
from polewise.kernels import opcodes as op

Gradient: TypeAlias = dict[Node, Node]

_EMPTY: Gradient = {}


class Differentiator:
    """Derivatives with respect to a fixed set of symbols, memoised over calls.

    Switches (positive, floor) have derivative zero: their jumps are events, not slopes.
    """

    def __init__(self, graph: ExpressionGraph, symbols: Collection[Node]) -> None:
        self.graph = graph
        self.symbols = frozenset(symbols)
        self.known: dict[Node, Gradient] = {}

    def gradients(self, roots: Sequence[Node]) -> list[Gradient]:
        """One mapping symbol → derivative node per root; structural zeros are absent."""
        known = self.known
        for node in self.graph.reachable([r for r in roots if r not in known]):
            if node not in known:
                known[node] = self._gradient(node)
        return [known[r] for r in roots]

    def _gradient(self, node: Node) -> Gradient:
        graph, known = self.graph, self.known
        operation = graph.operation[node]
        if operation < 0:
            return {node: graph.constant(1.0)} if node in self.symbols else _EMPTY
        a, b, c = graph.a[node], graph.b[node], graph.c[node]
        if operation == op.ADD:
            return _merge(graph, known[a], known[b])
        if operation == op.SUB:
            return _merge_negative(graph, known[a], known[b])
        if operation == op.NEG:
            return {s: graph.negate(d) for s, d in known[a].items()}
        if operation == op.MUL:
            left, right = known[a], known[b]
            if not left and not right:
                return _EMPTY
            return _merge(graph, _scaled(graph, left, b), _scaled(graph, right, a))
        if operation == op.DIV:
            return self._quotient(node, a, b)
        if operation in (op.POSITIVE, op.FLOOR, op.TABLE_SLOPE):
            # TABLE_SLOPE: second derivatives of tables are not needed by any caller that would notice (slopes enter only Jacobians).
            return _EMPTY
        if operation == op.MUX:
            return self._choice(a, known[b], known[c])
        if operation == op.POW:
            return self._power(node, a, b)
        if operation == op.ATAN2:
            return self._atan2(a, b)
        inner = known[a]
        if not inner:
            return _EMPTY
        return _scaled(graph, inner, self._slope(operation, node, a))

    def _slope(self, operation: int, node: Node, x: Node) -> Node:
        """d node / d x for functions of one argument."""
        g = self.graph
        one = g.constant(1.0)
        if operation == op.TABLE:
            return g.table_slope(g.c[node], x)
        if operation == op.SQRT:
            return g.divide(g.constant(0.5), node)
        if operation == op.EXP:
            return node
        if operation == op.LOG:
            return g.divide(one, x)
        if operation == op.SIN:
            return g.unary(op.COS, x)
        if operation == op.COS:
            return g.negate(g.unary(op.SIN, x))
        if operation == op.TAN:
            return g.add(one, g.multiply(node, node))
        if operation == op.ASIN:
            return g.divide(one, g.unary(op.SQRT, g.subtract(one, g.multiply(x, x))))
        if operation == op.ACOS:
            return g.negate(g.divide(one, g.unary(op.SQRT, g.subtract(one, g.multiply(x, x)))))
        if operation == op.ATAN:
            return g.divide(one, g.add(one, g.multiply(x, x)))
        if operation == op.SINH:
            return g.unary(op.COSH, x)
        if operation == op.COSH:
            return g.unary(op.SINH, x)
        assert operation == op.TANH
        return g.subtract(one, g.multiply(node, node))

    def _quotient(self, node: Node, a: Node, b: Node) -> Gradient:
        g, known = self.graph, self.known
        top = {s: g.divide(d, b) for s, d in known[a].items()}
        if not known[b]:
            return top
        return _merge_negative(g, top, _scaled(g, known[b], g.divide(node, b)))

    def _power(self, node: Node, x: Node, y: Node) -> Gradient:
        g, known = self.graph, self.known
        one = g.constant(1.0)
        result = _scaled(g, known[x], g.multiply(y, g.power(x, g.subtract(y, one)))) if known[x] else _EMPTY
        if known[y]:
            result = _merge(g, result, _scaled(g, known[y], g.multiply(node, g.unary(op.LOG, x))))
        return result

    def _atan2(self, y: Node, x: Node) -> Gradient:
        g, known = self.graph, self.known
        square = g.add(g.multiply(x, x), g.multiply(y, y))
        return _merge_negative(g, _scaled(g, known[y], g.divide(x, square)), _scaled(g, known[x], g.divide(y, square)))

    def _choice(self, condition: Node, left: Gradient, right: Gradient) -> Gradient:
        g = self.graph
        zero = g.constant(0.0)
        return {s: g.mux(condition, left.get(s, zero), right.get(s, zero)) for s in {**left, **right}}


def _scaled(graph: ExpressionGraph, gradient: Gradient, factor: Node) -> Gradient:
    multiply = graph.multiply
    return {s: multiply(d, factor) for s, d in gradient.items()}


def _merge(graph: ExpressionGraph, left: Gradient, right: Gradient) -> Gradient:
    if not right:
        return left
    if not left:
        return right
    if len(left) < len(right):
        left, right = right, left
    result = dict(left)
    for s, d in right.items():
        present = result.get(s)
        result[s] = d if present is None else graph.add(present, d)
    return result


def _merge_negative(graph: ExpressionGraph, left: Gradient, right: Gradient) -> Gradient:
    if not right:
        return left
    result = dict(left)
    for s, d in right.items():
        present = result.get(s)
        result[s] = graph.negate(d) if present is None else graph.subtract(present, d)
    return result
