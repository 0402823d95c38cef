"""The few calls into compiled code that the control plane makes, imported when first needed: importing this package must not load numba."""

from __future__ import annotations

import numpy as np

from polewise.kernels.opcodes import SWITCH_FLOOR, SWITCH_POSITIVE, Status
from polewise.kernels.program import FloatArray, Program
from polewise.kernels.workspace import N_REG_AT_START, Workspace, grow


def run_residual(program: Program, work: Workspace) -> None:
    """RESIDUAL at (work.x, time, work.p) with the modes as they are → work.reg."""
    from polewise.kernels import entry

    entry.run_residual(program, work)


def run_residual_live(program: Program, work: Workspace) -> None:
    """RESIDUAL with every switch live → work.reg, work.mode."""
    from polewise.kernels import entry

    entry.run_residual_live(program, work)


def run_jacobian(program: Program, work: Workspace) -> None:
    """JACOBIAN after a residual → work.jac_f, work.jac_q."""
    from polewise.kernels import entry

    entry.run_jacobian(program, work)


def restart(program: Program, work: Workspace) -> Status:
    """A consistent point at the present time with the charges in work.q_keep."""
    from polewise.kernels import entry

    return Status(entry.restart(program, work))


def advance(program: Program, work: Workspace, t_stop: float, step_budget: int) -> Status:
    """Many steps, see kernels.advance."""
    from polewise.kernels import entry

    return Status(entry.advance(program, work, t_stop, step_budget))


def next_rank(program: Program, work: Workspace, above: int) -> int:
    """The smallest rank above `above` among the clocks due now, -1 if there is none."""
    from polewise.kernels import entry

    return int(entry.next_rank(program, work, above))


def fire_clocks(program: Program, work: Workspace, rank: int) -> int:
    """Fire the due clocks of one rank from the values as they stand. Returns how many parameters changed. Nothing is solved again."""
    from polewise.kernels import entry

    work.counter[N_REG_AT_START] = 0
    return int(entry.fire_clocks(program, work, rank))


def record_point(program: Program, work: Workspace, flag: float) -> None:
    """Append a row at the present point; without room it is dropped."""
    from polewise.kernels import entry

    entry.record_point(program, work, flag)


def larger(program: Program, work: Workspace, status: Status) -> Workspace:
    """The workspace with more room for what was full; the old one must not be used again."""
    return grow(program, work, status)


def live_mode(program: Program, switch: int, value: float) -> int:
    """The mode that belongs to a watched value (slow twin of kernels.switches, for the few switches of conditions)."""
    kind = int(program.switch_kind[switch])
    if kind == SWITCH_POSITIVE:
        return int(value > 0.0)
    if kind == SWITCH_FLOOR:
        return int(np.floor(value)) if abs(value) < 4e18 else 0
    knots = _knots(program, switch)
    if len(knots) > 1 and value == knots[-1]:
        return len(knots) - 1
    return int(np.searchsorted(knots, value, side="right"))


def violation(program: Program, work: Workspace, switch: int, value: float) -> float:
    """Signed distance of a watched value beyond the boundary of its switch's mode (slow twin of kernels.switches)."""
    kind, mode = int(program.switch_kind[switch]), int(work.mode[switch])
    if kind == SWITCH_POSITIVE:
        return -value if mode else value
    if kind == SWITCH_FLOOR:
        return max(mode - value, value - (mode + 1))
    knots = _knots(program, switch)
    beyond = -np.inf
    if mode > 0:
        beyond = knots[mode - 1] - value
    if mode < len(knots):
        beyond = max(beyond, value - knots[mode])
    return float(beyond)


def _knots(program: Program, switch: int) -> FloatArray:
    table = int(program.switch_table[switch])
    return program.table_knots[program.table_ptr[table] : program.table_ptr[table + 1]]
