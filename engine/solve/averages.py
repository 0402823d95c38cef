"""Keeping the running integrals behind sliding averages small.

x averaged over T is f (Q(t) - Q(t - T)) with Q' = x. Over hours Q grows until its error, which is relative to its size, swamps the difference.
Only differences of Q are ever read, so now and then the present value is taken off Q, its history and its delayed value alike.
"""

from __future__ import annotations

import numpy as np

from polewise.kernels.workspace import N_REG_AT_START, S_T, Workspace
from polewise.solve.problem import DaeProblem

WINDOWS_BETWEEN = 20.0  # windows between two shifts: Q stays within this many times its difference


class Rebase:
    """The integrals of one problem: delay lines whose expression is an unknown of their own with a stated slope before the start."""

    def __init__(self, problem: DaeProblem) -> None:
        system = problem.system
        index_of = {u.symbol: k for k, u in enumerate(system.unknowns)}
        self.lines = [
            (d, index_of[line.expression], line.parameter)
            for d, line in enumerate(system.delays)
            if line.start_slope is not None and line.expression in index_of and system.unknowns[index_of[line.expression]].charge == line.expression
        ]
        windows = [system.delays[d].delay_s for d, _, _ in self.lines]
        self.every_s = WINDOWS_BETWEEN * min(windows) if windows else np.inf
        self.last_s = 0.0

    def next_time(self, t: float) -> float:
        """When the next shift is due, s; inf without averages."""
        return max(self.last_s + self.every_s, t) if self.lines else np.inf

    def apply(self, work: Workspace) -> None:
        """Shift every integral to zero at the present time. The solution of the circuit is unchanged, so this is no jump."""
        for d, i, j in self.lines:
            shift = float(work.x[i])
            for array in (work.x, work.q_keep, work.q_start, work.x_old):
                array[i] -= shift
            work.p[j] -= shift
            work.history_v[:, d, :] -= shift
            work.history_start[d] -= shift
            work.delay_value0[d] -= shift
        work.counter[N_REG_AT_START] = 0
        self.last_s = float(work.state[S_T])
