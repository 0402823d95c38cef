"""Rows F(z) = 0 for all unknowns x and some parameters at once: what a state of rest and a consistent start must satisfy."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from polewise.equations.system import EquationSystem
from polewise.expression.graph import Node
from polewise.expression.tape import compile_program
from polewise.kernels.program import FloatArray, IntArray, Program
from polewise.kernels.workspace import S_T, Workspace, kernel_program, make_workspace
from polewise.solve import kernel_calls
from polewise.solve.linear import SparseMatrix


@dataclass(frozen=True, slots=True)
class Row:
    """One row and the unknown that belongs to it.

    Args:
        kind, index: ("x", i) or ("p", j), the unknown and its place in the system.
        residual: the expression that must vanish.
    """

    kind: Literal["x", "p"]
    index: int
    residual: Node


class SquareSystem:
    """z = (x, some of p): evaluation with live switches. Not to be shared between threads.

    Attributes:
        rows: in the order of z: all x first, then the parameters that are solved for.
        p: shape (n_p,), values of the parameters; entries that are solved for are ignored.
        offset: shape (n,), taken from the rows: F(z) = row - offset.
        assume_usual: whether switches with a usual mode (ExpressionGraph.usual) are held in it.
    """

    def __init__(self, system: EquationSystem, rows: Sequence[Row]) -> None:
        self.system = system
        self.rows = tuple(rows)
        graph = system.graph
        self.solved_p: IntArray = np.array([r.index for r in rows if r.kind == "p"], dtype=np.int64)
        self.other_p: IntArray = np.setdiff1d(np.arange(len(system.parameters)), self.solved_p)
        symbols = [system.unknowns[r.index].symbol if r.kind == "x" else system.parameters[r.index].symbol for r in rows]
        self.scale: FloatArray = np.array([row_scale(system, r) for r in rows], dtype=float)
        # Charges only serve pseudo-time; a parameter that is solved for relaxes like a state of time constant one.
        charges = [system.unknowns[r.index].charge if r.kind == "x" else system.parameters[r.index].symbol for r in rows]
        self.compiled = compile_program(
            graph,
            time=system.time,
            unknowns=symbols,
            parameters=[system.parameters[j].symbol for j in self.other_p],
            residuals=[r.residual for r in rows],
            charges=charges,
            scales=list(self.scale),
        )
        self.program: Program = kernel_program(self.compiled.program)
        self.work: Workspace = make_workspace(self.program, record_rows=16, history=1)
        self.p: FloatArray = np.array([0.0 if q.initial is None else q.initial for q in system.parameters], dtype=float)
        self.offset: FloatArray = np.zeros(len(rows))
        self.has_charge = self.program.q_reg >= 0
        known = [(k, graph.usual[node]) for k, node in enumerate(self.compiled.switches) if node in graph.usual]
        self.usual_switch: IntArray = np.array([k for k, _ in known], dtype=np.int64)
        self.usual_mode: IntArray = np.array([mode for _, mode in known], dtype=np.int64)
        self.assume_usual = False

    @property
    def n(self) -> int:
        """Number of rows."""
        return len(self.rows)

    @property
    def n_x(self) -> int:
        """Number of unknowns of the system itself; the rest of z are parameters."""
        return len(self.system.unknowns)

    def at_time(self, t: float) -> None:
        """Set the study time at which the rows are read."""
        self.work.state[S_T] = t

    def residual(self, z: FloatArray) -> FloatArray:
        """F(z), every switch live, or with `assume_usual` those that have a usual mode in it."""
        self.work.x[:] = z
        self.work.p[:] = self.p[self.other_p]
        kernel_calls.run_residual_live(self.program, self.work)
        if self.assume_usual:
            self.work.mode[self.usual_switch] = self.usual_mode
            kernel_calls.run_residual(self.program, self.work)
        value: FloatArray = self.work.reg[self.program.f_reg] - self.offset
        return value

    def charges(self) -> FloatArray:
        """q at the point of the last `residual`, 0 in rows without."""
        value: FloatArray = np.where(self.has_charge, self.work.reg[self.program.q_reg], 0.0)
        return value

    def jacobian(self) -> SparseMatrix:
        """dF/dz at the point of the last `residual`."""
        kernel_calls.run_jacobian(self.program, self.work)
        return SparseMatrix(self.program.col_ptr, self.program.row_idx, self.work.jac_f.copy())

    def charge_jacobian(self) -> FloatArray:
        """Values of dq/dz on the Jacobian's pattern, at the point of the last `jacobian`."""
        return self.work.jac_q.copy()

    def parameters_of(self, z: FloatArray) -> FloatArray:
        """Shape (n_p,): all parameters, those solved for taken from z."""
        p = self.p.copy()
        p[self.solved_p] = z[self.n_x :]
        return p


def row_scale(system: EquationSystem, row: Row) -> float:
    """Size of a row's unknown; a parameter's is that of the unknowns of its dimension."""
    if row.kind == "x":
        return system.unknowns[row.index].scale
    dimension = system.parameters[row.index].dimension
    alike = [u.scale for u in system.unknowns if u.dimension == dimension]
    return float(np.median(alike)) if alike else 1.0


def rest_rows(system: EquationSystem) -> list[Row]:
    """Rows of a state of rest: `rest` of every unknown, p - rest of every parameter that follows the circuit."""
    graph = system.graph
    rows = [Row("x", i, u.rest) for i, u in enumerate(system.unknowns)]
    rows += [Row("p", j, graph.subtract(q.symbol, q.rest)) for j, q in enumerate(system.parameters) if q.rest is not None]
    return rows


def start_rows(system: EquationSystem) -> list[Row]:
    """Rows of a consistent start: states as stated, algebraic rows as they are, held values that start from their expressions.

    A state's row is x_i - offset_i. A charge that does not read its own unknown (the unknown is then its rate) is kept itself: q_i(x) - offset_i.
    """
    graph = system.graph
    rows = [Row("x", i, u.residual if u.charge is None else kept_at_start(system, i)) for i, u in enumerate(system.unknowns)]
    for j, q in enumerate(system.parameters):
        if q.rest is not None and q.initial is None:
            rows.append(Row("p", j, graph.subtract(q.symbol, q.rest)))
    return rows


def kept_at_start(system: EquationSystem, i: int) -> Node:
    """What a state's start value fixes: the unknown itself, or its charge where that does not read the unknown."""
    unknown = system.unknowns[i]
    assert unknown.charge is not None
    return unknown.symbol if unknown.symbol in system.graph.symbols_under([unknown.charge]) else unknown.charge
