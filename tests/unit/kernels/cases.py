"""Small problems straight for the kernels: written as Python arithmetic, compiled to a Program, started consistently."""

from __future__ import annotations

import importlib.util
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np

from polewise.expression.graph import ExpressionGraph, Node
from polewise.expression.tape import ClockSegment, DelaySegment, compile_program
from polewise.kernels import entry
from polewise.kernels import opcodes as op
from polewise.kernels.program import Program
from polewise.kernels.workspace import N_NEEDS_RESTART, N_ROWS, Workspace, grow, make_workspace
from polewise.solve.ordering import elimination_order


def _load_naive() -> ModuleType:
    path = Path(__file__).resolve().parents[2] / "naive.py"
    spec = importlib.util.spec_from_file_location("naive", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


naive = _load_naive()


@dataclass(frozen=True, slots=True)
class E:
    """A node with Python's operators."""

    g: ExpressionGraph
    node: Node

    def _other(self, value: Any) -> Node:
        return value.node if isinstance(value, E) else self.g.constant(float(value))

    def __add__(self, other: Any) -> E:
        return E(self.g, self.g.add(self.node, self._other(other)))

    def __sub__(self, other: Any) -> E:
        return E(self.g, self.g.subtract(self.node, self._other(other)))

    def __mul__(self, other: Any) -> E:
        return E(self.g, self.g.multiply(self.node, self._other(other)))

    def __truediv__(self, other: Any) -> E:
        return E(self.g, self.g.divide(self.node, self._other(other)))

    def __pow__(self, other: Any) -> E:
        return E(self.g, self.g.power(self.node, self._other(other)))

    def __neg__(self) -> E:
        return E(self.g, self.g.negate(self.node))

    def __radd__(self, other: Any) -> E:
        return E(self.g, self._other(other)) + self

    def __rsub__(self, other: Any) -> E:
        return E(self.g, self._other(other)) - self

    def __rmul__(self, other: Any) -> E:
        return E(self.g, self._other(other)) * self

    def __rtruediv__(self, other: Any) -> E:
        return E(self.g, self._other(other)) / self

    def positive(self) -> E:
        return E(self.g, self.g.positive(self.node))

    def floor(self) -> E:
        return E(self.g, self.g.floor(self.node))

    def choose(self, yes: Any, no: Any) -> E:
        return E(self.g, self.g.mux(self.node, self._other(yes), self._other(no)))

    def clip(self, low: float, high: float) -> E:
        return E(self.g, self.g.limit(self.node, self.g.constant(low), self.g.constant(high)))

    def table(self, number: int) -> E:
        return E(self.g, self.g.table(number, self.node))


def sin(x: E) -> E:
    return E(x.g, x.g.unary(op.SIN, x.node))


def cos(x: E) -> E:
    return E(x.g, x.g.unary(op.COS, x.node))


def exp(x: E) -> E:
    return E(x.g, x.g.unary(op.EXP, x.node))


def sqrt(x: E) -> E:
    return E(x.g, x.g.unary(op.SQRT, x.node))


@dataclass(slots=True)
class Case:
    """A program with its workspace; `work` is replaced when it grows."""

    program: Program
    work: Workspace

    def start(self, x: Sequence[float], p: Sequence[float] = (), t: float = 0.0) -> Case:
        """A consistent start; x of the differential rows fixes their charges."""
        self.work.x[:], self.work.p[:], self.work.state[0] = x, p, t
        entry.run_residual_live(self.program, self.work)
        self.work.q_keep[:] = np.where(self.program.q_reg >= 0, self.work.reg[self.program.q_reg], 0.0)
        self.work.counter[N_NEEDS_RESTART] = 1
        return self

    def advance(self, t_stop: float, budget: int = 10**6) -> op.Status:
        """advance, with more room whenever it is asked for."""
        while True:
            status = op.Status(entry.advance(self.program, self.work, t_stop, budget))
            if status not in (op.Status.HISTORY_FULL, op.Status.FACTORS_FULL, op.Status.BUFFER_FULL):
                return status
            self.work = grow(self.program, self.work, status)

    @property
    def rows(self) -> np.ndarray:  # type: ignore[type-arg]
        """The record so far: time, flag, outputs."""
        return self.work.record[: self.work.counter[N_ROWS]]


Rows = Callable[[E, list[E], list[E]], Sequence[Any]]


def make(
    n: int,
    f: Rows,
    q: Rows,
    *,
    n_p: int = 0,
    rtol: float = 1e-8,
    scales: Sequence[float] | None = None,
    outputs: Rows | None = None,
    watched: Rows | None = None,
    clocks: Callable[[E, list[E], list[E]], Sequence[tuple[float, int, dict[int, E]]]] | None = None,
    delays: Callable[[E, list[E], list[E]], Sequence[tuple[int, E, float]]] | None = None,
    tables: Sequence[Any] = (),
    history: int = 1024,
    ordered: bool = False,
) -> Case:
    """The problem d/dt q(x) + f = 0; q rows of None are algebraic. clocks: (period, rank, {parameter: new value}); delays: (parameter, of, s)."""
    g = ExpressionGraph()
    for table in tables:
        g.add_table(table)
    t = E(g, g.symbol("time", ""))
    x = [E(g, g.symbol("x", str(i))) for i in range(n)]
    p = [E(g, g.symbol("p", str(i))) for i in range(n_p)]

    def nodes(rows: Rows | None) -> list[Node]:
        return [] if rows is None else [r.node if isinstance(r, E) else g.constant(float(r)) for r in rows(t, x, p)]

    compiled = compile_program(
        g,
        time=t.node,
        unknowns=[v.node for v in x],
        parameters=[v.node for v in p],
        residuals=nodes(f),
        charges=[None if r is None else r.node for r in q(t, x, p)],
        scales=scales if scales is not None else [1.0] * n,
        outputs=nodes(outputs) if outputs is not None else [v.node for v in x],
        watched=nodes(watched),
        clocks=[ClockSegment(period, rank, tuple((j, v.node) for j, v in new.items())) for period, rank, new in (clocks(t, x, p) if clocks else ())],
        delays=[DelaySegment(j, v.node, d) for j, v, d in (delays(t, x, p) if delays else ())],
    )
    program = compiled.program
    order, fill = elimination_order(program) if ordered else (None, None)
    return Case(program, make_workspace(program, rtol, order=order, fill=fill, record_rows=20_000, history=history))
