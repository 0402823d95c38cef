"""From a kernel's failing status to the unknown, the switch or the table that failed."""

from __future__ import annotations

import numpy as np

from polewise.equations.system import EquationSystem
from polewise.errors import SolverError
from polewise.expression.graph import Node
from polewise.grammar.source import Span
from polewise.kernels import opcodes
from polewise.kernels.opcodes import Status
from polewise.kernels.workspace import N_CHATTER_LIMIT, N_REG_AT_START, N_SINGULAR, N_WORST, N_WORST_SWITCH, S_H, S_T, Workspace
from polewise.solve import diagnosis, kernel_calls
from polewise.solve.diagnosis import Named
from polewise.solve.problem import DaeProblem


def explain_failure(problem: DaeProblem, work: Workspace, status: Status, *, in_restart: bool = False) -> SolverError:
    """The exception for a failing status, with its place in the netlist."""
    system, t = problem.system, float(work.state[S_T])
    worst = _unknown(system, int(work.counter[N_WORST]))
    if status == Status.SINGULAR:
        return diagnosis.singular_in_run(t, _unknown(system, int(work.counter[N_SINGULAR])))
    if status in (Status.CHATTER, Status.OUTSIDE_TABLE):
        return _switch_failure(problem, work, status, t)
    kernel_calls.run_residual(problem.program, work)
    work.counter[N_REG_AT_START] = 0
    bad = np.flatnonzero(~np.isfinite(work.reg[problem.program.f_reg]))
    if status == Status.NOT_FINITE or len(bad):
        return diagnosis.not_finite(t, _unknown(system, int(bad[0])) if len(bad) else worst)
    if status == Status.NO_CONVERGENCE or in_restart:
        return diagnosis.restart_failed(t, worst)
    return diagnosis.step_too_small(t, worst, float(work.state[S_H]))


def _unknown(system: EquationSystem, index: int) -> Named:
    return diagnosis.named_unknown(system.unknowns[min(max(index, 0), len(system.unknowns) - 1)])


def _switch_failure(problem: DaeProblem, work: Workspace, status: Status, t: float) -> SolverError:
    system = problem.system
    node = problem.compiled.switches[int(work.counter[N_WORST_SWITCH])]
    what, span, row = _user_of_switch(system, node)
    if status == Status.OUTSIDE_TABLE and system.graph.operation[node] == opcodes.TABLE:
        table = system.graph.tables[system.graph.c[node]]
        above = int(work.mode[int(work.counter[N_WORST_SWITCH])]) > 0
        return diagnosis.outside_table(t, table.name, above, table.knots[0], table.knots[-1], row)
    return diagnosis.chatter(t, what, span, int(work.counter[N_CHATTER_LIMIT]))


def _user_of_switch(system: EquationSystem, node: Node) -> tuple[str, Span | None, Named | None]:
    """What a switch belongs to: a condition, else the first law that contains it."""
    graph = system.graph
    for conditional in system.conditionals:
        if node in graph.reachable([conditional.condition]):
            return f"the condition of `{conditional.text}`", conditional.span, None
    for unknown in system.unknowns:
        roots = [unknown.residual] if unknown.charge is None else [unknown.residual, unknown.charge]
        if node in graph.reachable(roots):
            return f"the law of `{unknown.name}`", unknown.span, diagnosis.named_unknown(unknown)
    return "a condition", None, None
