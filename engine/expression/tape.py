"""Expressions → the flat register program that the kernels run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from polewise.expression.collection import no_collection
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import CONSTANT, OPERATION_NAMES, SYMBOL, ExpressionGraph, Node
from polewise.kernels import opcodes as op
from polewise.kernels.program import IntArray, Program

# A switch's watched value counts as zero within this part of its scale: far above rounding, far below any tolerance in use.
SWITCH_BAND_RELATIVE = 1e-12


@dataclass(frozen=True, slots=True)
class ClockSegment:
    """What a clock does: parameter index → new value."""

    period_s: float
    rank: int
    updates: tuple[tuple[int, Node], ...]


@dataclass(frozen=True, slots=True)
class DelaySegment:
    """A delayed expression and the parameter that receives it."""

    parameter: int
    expression: Node
    delay_s: float


@dataclass(frozen=True, slots=True)
class CompiledProgram:
    """A Program with the way back to expressions.

    switches: the node of each switch (a POSITIVE or FLOOR node, or a TABLE node) in the program's order.
    """

    program: Program
    switches: tuple[Node, ...]
    registers: dict[Node, int]

    def switch_of(self, node: Node) -> int | None:
        """The switch number of a POSITIVE, FLOOR or TABLE node, or None."""
        try:
            return self.switches.index(node)
        except ValueError:
            return None


def compile_program(
    graph: ExpressionGraph,
    *,
    time: Node,
    unknowns: Sequence[Node],
    parameters: Sequence[Node],
    residuals: Sequence[Node],
    charges: Sequence[Node | None],
    scales: Sequence[float],
    outputs: Sequence[Node] = (),
    delays: Sequence[DelaySegment] = (),
    clocks: Sequence[ClockSegment] = (),
    watched: Sequence[Node] = (),
    also: Sequence[Node] = (),
) -> CompiledProgram:
    """Write the register program of d/dt q(x) + f(x, t, p) = 0.

    Args:
        unknowns, parameters: leaf nodes x_i and p_j.
        residuals, charges: f_i and q_i (None: algebraic), one per unknown.
        scales: natural size of each unknown.
        watched: condition expressions of events; every switch under one of them is reported to Python when it flips.
        also: further nodes to be computed in the RESIDUAL segment (conditions of events, right sides).
    """
    if len(residuals) != len(unknowns) or len(charges) != len(unknowns):
        raise ValueError("one residual and one charge (or None) for each unknown")
    with no_collection():
        return _Writer(graph, time, unknowns, parameters).write(residuals, charges, scales, outputs, delays, clocks, watched, also)


class _Writer:
    """Collects registers and operations of one program."""

    def __init__(self, graph: ExpressionGraph, time: Node, unknowns: Sequence[Node], parameters: Sequence[Node]) -> None:
        self.graph = graph
        self.time, self.unknowns, self.parameters = time, unknowns, parameters
        self.seen: set[Node] = set()
        self.order: list[Node] = []  # operations in tape order
        self.constants: list[Node] = []
        self.segment_end: list[int] = []

    def write(
        self,
        residuals: Sequence[Node],
        charges: Sequence[Node | None],
        scales: Sequence[float],
        outputs: Sequence[Node],
        delays: Sequence[DelaySegment],
        clocks: Sequence[ClockSegment],
        watched: Sequence[Node],
        also: Sequence[Node],
    ) -> CompiledProgram:
        graph, n = self.graph, len(self.unknowns)
        zero = graph.constant(0.0)
        differentiator = Differentiator(graph, self.unknowns)
        charge_nodes = [q for q in charges if q is not None]
        slopes_f = differentiator.gradients(residuals)
        slopes_q = dict(zip((i for i, q in enumerate(charges) if q is not None), differentiator.gradients(charge_nodes), strict=True))

        # Every switch's input must be known at the end of RESIDUAL, whoever uses the switch.
        later = [*outputs, *(d.expression for d in delays), *(node for c in clocks for _, node in c.updates)]
        switch_nodes = [
            k
            for k in graph.reachable([*residuals, *charge_nodes, *watched, *also, *later])
            if graph.operation[k] in (op.POSITIVE, op.FLOOR, op.TABLE)
        ]
        self._segment([zero, *residuals, *charge_nodes, *(graph.a[k] for k in switch_nodes), *watched, *also])
        rows_of_column: list[dict[int, tuple[Node, Node]]] = [{j: (zero, zero)} for j in range(n)]
        column_of = {symbol: j for j, symbol in enumerate(self.unknowns)}
        for i, gradient in enumerate(slopes_f):
            for symbol, d in gradient.items():
                rows_of_column[column_of[symbol]][i] = (d, zero)
        for i, gradient in slopes_q.items():
            for symbol, d in gradient.items():
                column = rows_of_column[column_of[symbol]]
                column[i] = (column.get(i, (zero, zero))[0], d)
        entries = [(i, *column[i]) for column in rows_of_column for i in sorted(column)]
        self._segment([node for _, df, dq in entries for node in (df, dq)])
        after_jacobian = set(self.seen)
        # OUTPUT, DELAY and CLOCK segments are each self-contained after RESIDUAL.
        residual_nodes = set(self.order[: self.segment_end[0]]) | {k for k in self.seen if graph.operation[k] < 0}
        del after_jacobian
        self._free_segment(outputs, residual_nodes)
        self._free_segment([d.expression for d in delays], residual_nodes)
        for clock in clocks:
            self._free_segment([node for _, node in clock.updates], residual_nodes)
        return self._finish(residuals, charges, scales, outputs, delays, clocks, watched, entries, rows_of_column, switch_nodes)

    def _segment(self, roots: Sequence[Node]) -> None:
        self._append(self.graph.reachable(roots, self.seen))

    def _free_segment(self, roots: Sequence[Node], residual_nodes: set[Node]) -> None:
        """A segment that may rely on RESIDUAL only; what other segments computed is computed again into the same registers."""
        known = set(residual_nodes)
        self._append(self.graph.reachable(roots, known))
        self.seen |= known

    def _append(self, nodes: Sequence[Node]) -> None:
        for node in nodes:
            operation = self.graph.operation[node]
            if operation == CONSTANT:
                self.constants.append(node)
            elif operation != SYMBOL:
                self.order.append(node)
        self.segment_end.append(len(self.order))

    def _finish(
        self,
        residuals: Sequence[Node],
        charges: Sequence[Node | None],
        scales: Sequence[float],
        outputs: Sequence[Node],
        delays: Sequence[DelaySegment],
        clocks: Sequence[ClockSegment],
        watched: Sequence[Node],
        entries: Sequence[tuple[int, Node, Node]],
        rows_of_column: Sequence[dict[int, tuple[Node, Node]]],
        switch_nodes: Sequence[Node],
    ) -> CompiledProgram:
        graph, n = self.graph, len(self.unknowns)
        register: dict[Node, int] = {}
        for node in self.constants:
            register.setdefault(node, len(register))
        n_const = len(register)
        time_reg, x_reg = n_const, n_const + 1
        p_reg = x_reg + n
        register[self.time] = time_reg
        register.update({symbol: x_reg + j for j, symbol in enumerate(self.unknowns)})
        register.update({symbol: p_reg + j for j, symbol in enumerate(self.parameters)})
        next_reg = p_reg + len(self.parameters)
        for node in self.order:
            if node not in register:
                register[node] = next_reg
                next_reg += 1

        # TABLE nodes of one argument and table share one switch, as do their slopes.
        switch_of: dict[Node, int] = {}
        of_table: dict[tuple[Node, int], int] = {}
        for k, node in enumerate(switch_nodes):
            switch_of[node] = k
            if graph.operation[node] == op.TABLE:
                of_table[graph.a[node], graph.c[node]] = k
        ops = np.empty((5, len(self.order)), dtype=np.int64)
        for k, node in enumerate(self.order):
            operation = graph.operation[node]
            a, b, c = graph.a[node], graph.b[node], graph.c[node]
            if operation in (op.POSITIVE, op.FLOOR):
                ops[:, k] = operation, register[node], register[a], switch_of[node], 0
            elif operation in (op.TABLE, op.TABLE_SLOPE):
                ops[:, k] = operation, register[node], register[a], of_table[a, c], c
            else:
                ops[:, k] = operation, register[node], register[a], register[b] if b >= 0 else 0, register[c] if c >= 0 else 0

        watched_switches = {k for k in graph.reachable(watched) if k in switch_of}
        kinds = {op.POSITIVE: op.SWITCH_POSITIVE, op.FLOOR: op.SWITCH_FLOOR, op.TABLE: op.SWITCH_TABLE}
        knots: list[float] = []
        coefficients: list[tuple[float, float, float, float]] = []
        table_ptr = [0]
        for table in graph.tables:
            knots.extend(table.knots)
            coefficients.extend(table.coefficients)
            table_ptr.append(len(knots))
        clock_ptr = np.cumsum([0, *(len(c.updates) for c in clocks)])
        size_of = dict(zip(self.unknowns, scales, strict=True))
        program = Program(
            n=n,
            n_const=n_const,
            n_reg=next_reg,
            time_reg=time_reg,
            x_reg=x_reg,
            p_reg=p_reg,
            n_p=len(self.parameters),
            constants=np.array([graph.values[k] for k in list(register)[:n_const]], dtype=np.float64),
            op=ops[0].copy(),
            dst=ops[1].copy(),
            a=ops[2].copy(),
            b=ops[3].copy(),
            c=ops[4].copy(),
            segment_end=_ints(self.segment_end),
            f_reg=_ints([register[k] for k in residuals]),
            q_reg=_ints([-1 if q is None else register[q] for q in charges]),
            col_ptr=_ints(np.cumsum([0, *(len(column) for column in rows_of_column)])),
            row_idx=_ints([i for i, _, _ in entries]),
            jf_reg=_ints([register[df] for _, df, _ in entries]),
            jq_reg=_ints([register[dq] for _, _, dq in entries]),
            switch_kind=_ints([kinds[graph.operation[k]] for k in switch_nodes]),
            switch_reg=_ints([register[graph.a[k]] for k in switch_nodes]),
            switch_table=_ints([graph.c[k] if graph.operation[k] == op.TABLE else -1 for k in switch_nodes]),
            switch_scale=np.array([self._band(k, size_of) for k in switch_nodes], dtype=np.float64),
            switch_watched=_ints([1 if k in watched_switches else 0 for k in switch_nodes]),
            table_ptr=_ints(table_ptr),
            table_knots=np.array(knots, dtype=np.float64),
            table_coef=np.array(coefficients, dtype=np.float64).reshape(-1, 4),
            table_closed=_ints([1 if t.closed else 0 for t in graph.tables]),
            out_reg=_ints([register[k] for k in outputs]),
            delay_in_reg=_ints([register[d.expression] for d in delays]),
            delay_p=_ints([d.parameter for d in delays]),
            delay_s=np.array([d.delay_s for d in delays], dtype=np.float64),
            clock_period=np.array([c.period_s for c in clocks], dtype=np.float64),
            clock_ptr=_ints(clock_ptr),
            clock_p=_ints([j for c in clocks for j, _ in c.updates]),
            clock_reg=_ints([register[node] for c in clocks for _, node in c.updates]),
            clock_rank=_ints([c.rank for c in clocks]),
            scale=np.array(scales, dtype=np.float64),
            is_algebraic=_ints([1 if q is None else 0 for q in charges]),
        )
        return CompiledProgram(program, tuple(switch_nodes), register)

    def _band(self, switch: Node, size_of: Mapping[Node, float]) -> float:
        """A size for "zero" of a switch's input from the sizes of what it is made of: the largest constant or scale that is added in it."""
        graph = self.graph
        size = 0.0
        stack = [graph.a[switch]]
        while stack:
            node = stack.pop()
            operation = graph.operation[node]
            if operation in (op.ADD, op.SUB):
                stack.extend((graph.a[node], graph.b[node]))
            elif operation == op.NEG:
                stack.append(graph.a[node])
            elif operation == CONSTANT:
                size = max(size, abs(graph.values[node]))
            elif operation == op.MUL and graph.operation[graph.a[node]] == CONSTANT and graph.b[node] in size_of:
                size = max(size, abs(graph.values[graph.a[node]]) * size_of[graph.b[node]])
            else:
                size = max(size, size_of.get(node, 0.0))
        return SWITCH_BAND_RELATIVE * (size if size > 0.0 else 1.0)


def _ints(values: object) -> IntArray:
    return np.asarray(values, dtype=np.int64).reshape(-1)


def listing(compiled: CompiledProgram) -> list[str]:
    """The tape as numbered lines, for people and tests."""
    program = compiled.program
    names = {**OPERATION_NAMES, op.ADD: "+", op.SUB: "-", op.MUL: "*", op.DIV: "/", op.POW: "^", op.TABLE: "table", op.TABLE_SLOPE: "slope"}
    lines = []
    for k in range(len(program.op)):
        operands = f"r{program.a[k]}, {program.b[k]}, {program.c[k]}"
        lines.append(f"{k:5d}  r{program.dst[k]} = {names[int(program.op[k])]}({operands})")
    return lines
