"""EquationSystem → DaeProblem: the compiled run program with names and the registers of conditions; and workspaces for it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from polewise.equations.system import EquationSystem
from polewise.expression.derivative import Differentiator
from polewise.expression.graph import SYMBOL, ExpressionGraph, Node
from polewise.expression.tape import ClockSegment, CompiledProgram, DelaySegment, compile_program
from polewise.kernels import opcodes as op
from polewise.kernels.program import RANK_EVENTS, FloatArray, IntArray, Program
from polewise.kernels.workspace import Workspace, kernel_program, make_workspace

ORDERED_FROM = 12  # unknowns; below, any order will do


@dataclass(frozen=True, slots=True, eq=False)
class DaeProblem:
    """A circuit's equations ready to run.

    Args:
        system: where they come from: names, spans, events, flags.
        compiled: the program with the way back to expressions.
        program: the same program in the kernels' own array types.
        scale: shape (n,), natural size of each unknown, SI.
        condition_register: shape (number of conditionals,), register of each conditional's condition (RESIDUAL segment).
        sampling_ranks: ranks of the clocks that update sampled signals, ascending; `every` events have rank RANK_EVENTS and are not in it.
        wave_period_s: period of the fastest sine of time, inf without one; the error test sees states only, so steps must follow waves by themselves.
        order: shape (n,), order of elimination of the columns, or None for small systems. fill: entries of the factors in that order.
    """

    system: EquationSystem
    compiled: CompiledProgram
    program: Program
    scale: FloatArray
    condition_register: IntArray
    sampling_ranks: tuple[int, ...]
    wave_period_s: float
    order: IntArray | None
    fill: int | None

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return len(self.system.unknowns)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the unknowns in the netlist's spelling."""
        return tuple(u.name for u in self.system.unknowns)

    @property
    def output_names(self) -> tuple[str, ...]:
        """Names of the recorded outputs, in the order of the record's columns (after time and flag)."""
        return tuple(o.name for o in self.system.outputs)


def build_problem(system: EquationSystem) -> DaeProblem:
    """Compile the run program: f, q, Jacobians, outputs, delays, clocks, watched conditions.

    Args:
        system: index 1, one row per unknown.
    """
    unknowns = system.unknowns
    conditions = [c.condition for c in system.conditionals]
    compiled = compile_program(
        system.graph,
        time=system.time,
        unknowns=[u.symbol for u in unknowns],
        parameters=[p.symbol for p in system.parameters],
        residuals=[u.residual for u in unknowns],
        charges=[u.charge for u in unknowns],
        scales=[u.scale for u in unknowns],
        outputs=[o.expression for o in system.outputs],
        delays=[DelaySegment(d.parameter, d.expression, d.delay_s) for d in system.delays],
        clocks=[ClockSegment(c.period_s, c.rank, c.updates) for c in system.clocks],
        watched=conditions,
        also=conditions,
    )
    program = kernel_program(compiled.program)
    order, fill = _elimination_order(program)
    return DaeProblem(
        system=system,
        compiled=compiled,
        program=program,
        scale=program.scale,
        condition_register=np.array([compiled.registers[node] for node in conditions], dtype=np.int64),
        sampling_ranks=tuple(sorted({c.rank for c in system.clocks if c.rank < RANK_EVENTS})),
        wave_period_s=_shortest_period(system),
        order=order,
        fill=fill,
    )


def _shortest_period(system: EquationSystem) -> float:
    """Period of the fastest sine or cosine of time in the laws, conditions and outputs, s; inf without one.

    The error test sees states only: a law without states, or an output, could be stepped over.
    """
    graph = system.graph
    roots = [*(u.residual for u in system.unknowns), *(c.condition for c in system.conditionals), *(o.expression for o in system.outputs)]
    roots += [d.expression for d in system.delays]
    waves = [graph.a[k] for k in graph.reachable(roots) if graph.operation[k] in (op.SIN, op.COS)]
    slopes = Differentiator(graph, [system.time]).gradients(waves)
    rates = [graph.value_of(slope[system.time]) for slope in slopes if system.time in slope]
    fastest = max((abs(rate) for rate in rates if rate is not None), default=0.0)
    return 2.0 * math.pi / fastest if fastest > 0.0 else math.inf


def _elimination_order(program: Program) -> tuple[IntArray | None, int | None]:
    """A column order that keeps the factors sparse; small systems need none."""
    if program.n <= ORDERED_FROM:
        return None, None
    from polewise.solve.ordering import elimination_order

    return elimination_order(program)


def new_workspace(problem: DaeProblem, tolerance: float, *, record_rows: int = 4096) -> Workspace:
    """A fresh workspace for one run.

    Args:
        tolerance: relative tolerance of the unknowns; absolute ones are tolerance * scale.
        record_rows: rows that the record holds before it must be emptied.
    """
    return make_workspace(problem.program, tolerance, order=problem.order, fill=problem.fill, record_rows=record_rows)


@dataclass(frozen=True, slots=True)
class Reader:
    """Plain evaluation of a few expressions of x, t, p with every switch live: right sides of events, flags, rates for messages.

    Slow and obvious; it is used at events, never per step.
    """

    graph: ExpressionGraph
    roots: tuple[Node, ...]
    sources: tuple[tuple[Node, str, int], ...]  # symbol, "x" | "p" | "time", index

    def __call__(self, x: FloatArray, t: float, p: FloatArray) -> list[float]:
        """The values at a point; nan where one is undefined."""
        at = {symbol: float(x[k]) if kind == "x" else float(p[k]) if kind == "p" else t for symbol, kind, k in self.sources}
        return self.graph.evaluate(self.roots, at)


def reader(system: EquationSystem, roots: Sequence[Node]) -> Reader:
    """A Reader of these expressions.

    Raises:
        KeyError: an expression reads a symbol that is no unknown, parameter or time (a fault of ours).
    """
    graph = system.graph
    places: dict[Node, tuple[str, int]] = {u.symbol: ("x", k) for k, u in enumerate(system.unknowns)}
    places.update({p.symbol: ("p", k) for k, p in enumerate(system.parameters)})
    places[system.time] = ("time", 0)
    symbols = [k for k in graph.reachable(roots) if graph.operation[k] == SYMBOL]
    return Reader(graph, tuple(roots), tuple((s, *places[s]) for s in symbols))
