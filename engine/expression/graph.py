"""Hash-consed expressions: one node per distinct sub-expression, constants folded. A node is an int; children have smaller numbers."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final, TypeAlias

from polewise.kernels import opcodes as op

Node: TypeAlias = int

# Leaves have negative operation numbers: they are never executed.
CONSTANT: Final = -1
SYMBOL: Final = -2

_NONE: Final = -1


@dataclass(frozen=True, slots=True, eq=False)
class PiecewiseCubic:
    """A table as cubics between knots: y = c0 + c1*u + c2*u^2 + c3*u^3 with u = x - knot of the segment.

    Segment 0 is everything left of knots[0] (u counts from knots[0]), segment k covers [knots[k-1], knots[k]), the last one everything
    right of knots[-1] (u counts from knots[-1]).

    Args:
        name: the table's name, for messages.
        knots: shape (n,), increasing.
        coefficients: shape (n + 1, 4).
        closed: whether reading outside [knots[0], knots[-1]] is an error.
    """

    name: str
    knots: tuple[float, ...]
    coefficients: tuple[tuple[float, float, float, float], ...]
    closed: bool

    def segment(self, x: float) -> int:
        """The segment x lies in; both end knots count as inside."""
        from bisect import bisect_right

        if x == self.knots[-1]:
            return len(self.knots) - 1 if len(self.knots) > 1 else 0
        return bisect_right(self.knots, x)

    def value(self, x: float, segment: int | None = None) -> float:
        """Value at x, in its own or a stated segment."""
        k = self.segment(x) if segment is None else segment
        u = x - self.knots[max(k - 1, 0)]
        c0, c1, c2, c3 = self.coefficients[k]
        return c0 + u * (c1 + u * (c2 + u * c3))

    def slope(self, x: float, segment: int | None = None) -> float:
        """Derivative at x, in its own or a stated segment."""
        k = self.segment(x) if segment is None else segment
        u = x - self.knots[max(k - 1, 0)]
        _, c1, c2, c3 = self.coefficients[k]
        return c1 + u * (2 * c2 + u * 3 * c3)


@dataclass(slots=True, eq=False)
class ExpressionGraph:
    """Append-only store of nodes. Equal sub-expressions get the same number.

    Conditions are nodes with value 0 or 1. Every non-smooth function is made of `positive`, `floor` and tables: those are the switches
    that the solver freezes within a step and watches.
    """

    operation: list[int] = field(default_factory=list)
    a: list[Node] = field(default_factory=list)
    b: list[Node] = field(default_factory=list)
    c: list[Node] = field(default_factory=list)
    values: dict[Node, float] = field(default_factory=dict)
    symbols: dict[Node, tuple[str, str]] = field(default_factory=dict)
    tables: list[PiecewiseCubic] = field(default_factory=list)
    usual: dict[Node, int] = field(default_factory=dict)  # switch → its mode in regular operation, where one is known; see `mark_usual`
    _intern: dict[tuple[int, int, int, int] | tuple[str, str] | float, Node] = field(default_factory=dict)

    # ------------------------------------------------------------ leaves

    def constant(self, value: float) -> Node:
        """A number."""
        key = value if value != 0.0 else 0.0
        node = self._intern.get(key)
        if node is None:
            node = self._append(CONSTANT, _NONE, _NONE, _NONE)
            self._intern[key] = node
            self.values[node] = key
        return node

    def symbol(self, kind: str, name: str) -> Node:
        """A leaf known by kind and name, e.g. ("potential", "bus"), ("i", "berth1.choke.l"), ("time", "")."""
        key = (kind, name)
        node = self._intern.get(key)
        if node is None:
            node = self._append(SYMBOL, _NONE, _NONE, _NONE)
            self._intern[key] = node
            self.symbols[node] = key
        return node

    def is_constant(self, node: Node) -> bool:
        """Whether the node is a number."""
        return self.operation[node] == CONSTANT

    def value_of(self, node: Node) -> float | None:
        """The number a node is, or None."""
        return self.values.get(node)

    # ------------------------------------------------------------ arithmetic

    def add(self, x: Node, y: Node) -> Node:
        """x + y."""
        vx, vy = self.values.get(x), self.values.get(y)
        if vx is not None:
            if vy is not None:
                return self.constant(vx + vy)
            if vx == 0.0:
                return y
        elif vy == 0.0:
            return x
        if self.operation[y] == op.NEG:
            return self.subtract(x, self.a[y])
        if self.operation[x] == op.NEG:
            return self.subtract(y, self.a[x])
        return self._make(op.ADD, x, y) if x <= y else self._make(op.ADD, y, x)

    def subtract(self, x: Node, y: Node) -> Node:
        """x - y."""
        if x == y:
            return self.constant(0.0)
        vx, vy = self.values.get(x), self.values.get(y)
        if vy is not None:
            if vx is not None:
                return self.constant(vx - vy)
            if vy == 0.0:
                return x
        elif vx == 0.0:
            return self.negate(y)
        if self.operation[y] == op.NEG:
            return self.add(x, self.a[y])
        return self._make(op.SUB, x, y)

    def negate(self, x: Node) -> Node:
        """-x."""
        v = self.values.get(x)
        if v is not None:
            return self.constant(-v)
        if self.operation[x] == op.NEG:
            return self.a[x]
        if self.operation[x] == op.SUB:
            return self._make(op.SUB, self.b[x], self.a[x])
        return self._make(op.NEG, x)

    def multiply(self, x: Node, y: Node) -> Node:
        """x * y."""
        vx, vy = self.values.get(x), self.values.get(y)
        if vx is not None and vy is not None:
            return self.constant(vx * vy)
        if vy is not None:
            x, y, vx, vy = y, x, vy, vx
        if vx is not None:
            if vx == 0.0:
                return x
            if vx == 1.0:
                return y
            if vx == -1.0:
                return self.negate(y)
            if self.operation[y] == op.NEG:
                return self.multiply(self.constant(-vx), self.a[y])
            if self.operation[y] == op.MUL and self.operation[self.a[y]] == CONSTANT:
                return self.multiply(self.constant(vx * self.values[self.a[y]]), self.b[y])
            return self._make(op.MUL, x, y)
        if self.operation[x] == op.NEG:
            return self.negate(self.multiply(self.a[x], y))
        if self.operation[y] == op.NEG:
            return self.negate(self.multiply(x, self.a[y]))
        return self._make(op.MUL, x, y) if x <= y else self._make(op.MUL, y, x)

    def divide(self, x: Node, y: Node) -> Node:
        """x / y. A division of constants by zero is left to run time, where it is caught as not finite."""
        vx, vy = self.values.get(x), self.values.get(y)
        if vy is not None and vy != 0.0:
            if vx is not None:
                return self.constant(vx / vy)
            return self.multiply(self.constant(1.0 / vy), x) if math.isfinite(1.0 / vy) else self._make(op.DIV, x, y)
        if vx == 0.0:
            return x
        return self._make(op.DIV, x, y)

    def power(self, x: Node, y: Node) -> Node:
        """x ^ y; small whole exponents become products."""
        vx, vy = self.values.get(x), self.values.get(y)
        if vy is not None:
            if vx is not None:
                try:
                    result = vx**vy
                except (OverflowError, ZeroDivisionError):
                    result = math.nan
                if isinstance(result, float) and math.isfinite(result):
                    return self.constant(result)
                return self._make(op.POW, x, y)
            if vy == 0.0:
                return self.constant(1.0)
            if vy == 1.0:
                return x
            if vy == 0.5:
                return self.unary(op.SQRT, x)
            if vy == 2.0:
                return self.multiply(x, x)
            if vy == 3.0:
                return self.multiply(self.multiply(x, x), x)
            if vy == 4.0:
                square = self.multiply(x, x)
                return self.multiply(square, square)
            if vy == -1.0:
                return self.divide(self.constant(1.0), x)
        return self._make(op.POW, x, y)

    def unary(self, operation: int, x: Node) -> Node:
        """A function of one argument: SQRT … TANH of kernels.opcodes."""
        v = self.values.get(x)
        if v is not None:
            try:
                return self.constant(UNARY[operation](v))
            except (ValueError, OverflowError):
                pass
        return self._make(operation, x)

    def atan2(self, y: Node, x: Node) -> Node:
        """The angle of the point (x, y)."""
        vy, vx = self.values.get(y), self.values.get(x)
        if vy is not None and vx is not None:
            return self.constant(math.atan2(vy, vx))
        return self._make(op.ATAN2, y, x)

    def sum(self, terms: Iterable[Node]) -> Node:
        """Sum as a balanced tree, so that derivatives of long sums stay cheap."""
        level = list(terms)
        if not level:
            return self.constant(0.0)
        while len(level) > 1:
            level = [self.add(level[k], level[k + 1]) if k + 1 < len(level) else level[k] for k in range(0, len(level), 2)]
        return level[0]

    # ------------------------------------------------------------ switches and choices

    def positive(self, x: Node) -> Node:
        """1 where x > 0, else 0. A switch."""
        v = self.values.get(x)
        if v is not None:
            return self.constant(1.0 if v > 0.0 else 0.0)
        return self._make(op.POSITIVE, x)

    def mark_usual(self, switch: Node, mode: int) -> Node:
        """Say how a switch stands in regular operation (a limit not reached, a pole in continuous conduction); the switch.

        A search for a point of rest begins there. It changes no value.
        """
        if self.operation[switch] == op.POSITIVE:
            self.usual[switch] = mode
        return switch

    def floor(self, x: Node) -> Node:
        """The largest whole number not above x. A switch."""
        v = self.values.get(x)
        if v is not None:
            return self.constant(float(math.floor(v)))
        return self._make(op.FLOOR, x)

    def mux(self, condition: Node, x: Node, y: Node) -> Node:
        """x where the condition is not 0, else y."""
        v = self.values.get(condition)
        if v is not None:
            return x if v != 0.0 else y
        if x == y:
            return x
        return self._make(op.MUX, condition, x, y)

    def both(self, x: Node, y: Node) -> Node:
        """x and y, of conditions."""
        return self.mux(x, y, self.constant(0.0))

    def either(self, x: Node, y: Node) -> Node:
        """x or y, of conditions."""
        return self.mux(x, self.constant(1.0), y)

    def invert(self, x: Node) -> Node:
        """not x, of conditions."""
        if self.operation[x] == op.SUB and self.values.get(self.a[x]) == 1.0:
            return self.b[x]  # not not y
        return self.subtract(self.constant(1.0), x)

    def greater(self, x: Node, y: Node) -> Node:
        """x > y."""
        return self.positive(self.subtract(x, y))

    def minimum(self, x: Node, y: Node) -> Node:
        """The smaller of two."""
        return self.mux(self.greater(x, y), y, x)

    def maximum(self, x: Node, y: Node) -> Node:
        """The larger of two."""
        return self.mux(self.greater(x, y), x, y)

    def limit(self, x: Node, low: Node, high: Node) -> Node:
        """x held between low and high."""
        above, below = self.mark_usual(self.greater(x, high), 0), self.mark_usual(self.greater(low, x), 0)
        return self.mux(above, high, self.mux(below, low, x))

    def absolute(self, x: Node) -> Node:
        """|x|."""
        return self.mux(self.positive(x), x, self.negate(x))

    def sign(self, x: Node) -> Node:
        """-1, 0 or 1."""
        one = self.constant(1.0)
        return self.subtract(self.mux(self.positive(x), one, self.constant(0.0)), self.positive(self.negate(x)))

    def add_table(self, table: PiecewiseCubic) -> int:
        """Register a table; its number is used in `table`."""
        self.tables.append(table)
        return len(self.tables) - 1

    def table(self, number: int, x: Node) -> Node:
        """A registered table at x. A switch: its segment is frozen within a step."""
        v = self.values.get(x)
        table = self.tables[number]
        if v is not None and not (table.closed and not table.knots[0] <= v <= table.knots[-1]):
            return self.constant(table.value(v))
        return self._make(op.TABLE, x, _NONE, number)

    def table_slope(self, number: int, x: Node) -> Node:
        """The derivative of a registered table at x."""
        v = self.values.get(x)
        if v is not None:
            return self.constant(self.tables[number].slope(v))
        return self._make(op.TABLE_SLOPE, x, _NONE, number)

    # ------------------------------------------------------------ walking

    def children(self, node: Node) -> tuple[Node, ...]:
        """Nodes a node is computed from."""
        operation = self.operation[node]
        if operation < 0:
            return ()
        if operation in (op.TABLE, op.TABLE_SLOPE):
            return (self.a[node],)
        return tuple(k for k in (self.a[node], self.b[node], self.c[node]) if k >= 0)

    def reachable(self, roots: Iterable[Node], known: set[Node] | None = None) -> list[Node]:
        """All nodes under the roots, not in `known`, in an order in which children come first. Adds them to `known`."""
        seen = set() if known is None else known
        fresh: list[Node] = []
        stack = [r for r in roots if r not in seen]
        seen.update(stack)
        fresh.extend(stack)
        operations, a, b, c = self.operation, self.a, self.b, self.c
        while stack:
            node = stack.pop()
            operation = operations[node]
            if operation < 0:
                continue
            for child in (a[node],) if operation in (op.TABLE, op.TABLE_SLOPE) else (a[node], b[node], c[node]):
                if child >= 0 and child not in seen:
                    seen.add(child)
                    fresh.append(child)
                    stack.append(child)
        return sorted(set(fresh))

    def symbols_under(self, roots: Iterable[Node]) -> list[Node]:
        """The symbols that the roots depend on, ascending."""
        return [n for n in self.reachable(roots) if self.operation[n] == SYMBOL]

    def substitute(self, roots: Sequence[Node], mapping: Mapping[Node, Node]) -> list[Node]:
        """The roots with nodes replaced. Replacements are not substituted into again."""
        image: dict[Node, Node] = dict(mapping)
        for node in self.reachable(roots):
            if node in image:
                continue
            if self.operation[node] < 0:
                image[node] = node
                continue
            image[node] = self.rebuild(node, image)
        return [image[r] for r in roots]

    def rebuild(self, node: Node, image: Mapping[Node, Node]) -> Node:
        """The node's operation on the images of its children."""
        operation = self.operation[node]
        x = image[self.a[node]]
        if x == self.a[node]:
            y0, z0 = self.b[node], self.c[node]
            if operation in (op.TABLE, op.TABLE_SLOPE) or ((y0 < 0 or image[y0] == y0) and (z0 < 0 or image[z0] == z0)):
                return node
        if operation == op.TABLE:
            return self.table(self.c[node], x)
        if operation == op.TABLE_SLOPE:
            return self.table_slope(self.c[node], x)
        if operation == op.POSITIVE:
            image_node = self.positive(x)
            return self.mark_usual(image_node, self.usual[node]) if node in self.usual else image_node
        if operation == op.FLOOR:
            return self.floor(x)
        if operation == op.NEG:
            return self.negate(x)
        if self.b[node] < 0:
            return self.unary(operation, x)
        y = image[self.b[node]]
        if operation == op.ADD:
            return self.add(x, y)
        if operation == op.SUB:
            return self.subtract(x, y)
        if operation == op.MUL:
            return self.multiply(x, y)
        if operation == op.DIV:
            return self.divide(x, y)
        if operation == op.POW:
            return self.power(x, y)
        if operation == op.ATAN2:
            return self.atan2(x, y)
        assert operation == op.MUX
        return self.mux(x, y, image[self.c[node]])

    def evaluate(self, roots: Sequence[Node], at: Mapping[Node, float]) -> list[float]:
        """Plain evaluation with every switch live; `at` gives the symbols' values. Slow and obvious: for tests and constants.

        Raises:
            KeyError: a symbol without a value.
        """
        got: dict[Node, float] = {}
        for node in self.reachable(roots):
            operation = self.operation[node]
            if operation == CONSTANT:
                got[node] = self.values[node]
            elif operation == SYMBOL:
                got[node] = at[node]
            else:
                got[node] = self._evaluate_one(node, got)
        return [got[r] for r in roots]

    def _evaluate_one(self, node: Node, got: Mapping[Node, float]) -> float:
        operation = self.operation[node]
        x = got[self.a[node]]
        if operation == op.TABLE:
            return self.tables[self.c[node]].value(x)
        if operation == op.TABLE_SLOPE:
            return self.tables[self.c[node]].slope(x)
        if operation == op.POSITIVE:
            return 1.0 if x > 0 else 0.0
        try:
            if operation == op.FLOOR:
                return float(math.floor(x))
            if self.b[node] < 0:
                return -x if operation == op.NEG else UNARY[operation](x)
            y = got[self.b[node]]
            if operation == op.MUX:
                return y if x != 0.0 else got[self.c[node]]
            return BINARY[operation](x, y)
        except (ValueError, ZeroDivisionError, OverflowError):
            return math.nan

    # ------------------------------------------------------------ text

    def text(self, node: Node) -> str:
        """The expression as text, for listings and tests."""
        operation = self.operation[node]
        if operation == CONSTANT:
            return repr(self.values[node])
        if operation == SYMBOL:
            kind, name = self.symbols[node]
            return f"{kind}({name})" if name else kind
        if operation in (op.TABLE, op.TABLE_SLOPE):
            mark = "'" if operation == op.TABLE_SLOPE else ""
            return f"{self.tables[self.c[node]].name}{mark}({self.text(self.a[node])})"
        parts = [self.text(k) for k in self.children(node)]
        if operation in INFIX:
            return f"({parts[0]} {INFIX[operation]} {parts[1]})"
        return f"{OPERATION_NAMES[operation]}({', '.join(parts)})"

    # ------------------------------------------------------------ inside

    def _append(self, operation: int, a: Node, b: Node, c: Node) -> Node:
        self.operation.append(operation)
        self.a.append(a)
        self.b.append(b)
        self.c.append(c)
        return len(self.operation) - 1

    def _make(self, operation: int, a: Node, b: Node = _NONE, c: Node = _NONE) -> Node:
        key = (operation, a, b, c)
        node = self._intern.get(key)
        if node is None:
            node = self._append(operation, a, b, c)
            self._intern[key] = node
        return node


def _power(x: float, y: float) -> float:
    result = x**y
    return result if isinstance(result, float) else math.nan


UNARY: Final[dict[int, Callable[[float], float]]] = {
    op.SQRT: math.sqrt,
    op.EXP: math.exp,
    op.LOG: math.log,
    op.SIN: math.sin,
    op.COS: math.cos,
    op.TAN: math.tan,
    op.ASIN: math.asin,
    op.ACOS: math.acos,
    op.ATAN: math.atan,
    op.SINH: math.sinh,
    op.COSH: math.cosh,
    op.TANH: math.tanh,
}
BINARY: Final[dict[int, Callable[[float, float], float]]] = {
    op.ADD: lambda x, y: x + y,
    op.SUB: lambda x, y: x - y,
    op.MUL: lambda x, y: x * y,
    op.DIV: lambda x, y: x / y,
    op.POW: _power,
    op.ATAN2: math.atan2,
}
INFIX: Final = {op.ADD: "+", op.SUB: "-", op.MUL: "*", op.DIV: "/", op.POW: "^"}
OPERATION_NAMES: Final = {
    op.NEG: "-",
    op.SQRT: "sqrt",
    op.EXP: "exp",
    op.LOG: "ln",
    op.SIN: "sin",
    op.COS: "cos",
    op.TAN: "tan",
    op.ASIN: "asin",
    op.ACOS: "acos",
    op.ATAN: "atan",
    op.ATAN2: "atan2",
    op.SINH: "sinh",
    op.COSH: "cosh",
    op.TANH: "tanh",
    op.MUX: "choose",
    op.POSITIVE: "positive",
    op.FLOOR: "floor",
}
