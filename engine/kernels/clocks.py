"""Sample clocks: clock k fires at offset + j * period, j a whole number, so that instants never drift; all due clocks of one rank fire together."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import KERNEL
from polewise.kernels.history import merge_distance_c
from polewise.kernels.layout import (
    AT_CLOCK_COUNT,
    AT_CLOCK_OFFSET,
    AT_CLOCK_P,
    AT_CLOCK_PERIOD,
    AT_CLOCK_PTR,
    AT_CLOCK_RANK,
    AT_CLOCK_REG,
    AT_CLOCK_VALUE,
    AT_P,
    AT_REG,
    AT_X,
    SIZE_CLOCK,
)
from polewise.kernels.program import Program
from polewise.kernels.stamp import STAMP
from polewise.kernels.tape import WHOLE, residual_at_c, segment_c
from polewise.kernels.workspace import N_REG_AT_START, N_START_READY, S_T, Workspace


def _build(stamp: int) -> Any:
    @njit(inline="always")
    def tick_time(F, W, k):
        """Instant of the next firing of clock k."""
        _ = stamp
        return F[W[AT_CLOCK_OFFSET] + k] + W[W[AT_CLOCK_COUNT] + k] * F[W[AT_CLOCK_PERIOD] + k]

    @njit(cache=True, **KERNEL)
    def next_tick(F, W):
        """The earliest instant at which a clock fires, inf without clocks."""
        _ = stamp
        earliest = np.inf
        for k in range(W[SIZE_CLOCK]):
            earliest = min(earliest, tick_time_c(F, W, k))
        return earliest

    @njit(cache=True, **KERNEL)
    def next_rank(F, W, above):
        """The smallest rank greater than `above` among the clocks due at the present time, -1 if there is none."""
        _ = stamp
        due = F[S_T] + merge_distance_c(F[S_T])
        best = np.int64(-1)
        for k in range(W[SIZE_CLOCK]):
            rank = W[W[AT_CLOCK_RANK] + k]
            if rank > above and (best < 0 or rank < best) and tick_time_c(F, W, k) <= due:
                best = rank
        return best

    @njit(cache=True, **KERNEL)
    def fire_clocks(F, W, K, rank):
        """Fire the due clocks of one rank; see fire_clocks."""
        _ = stamp
        due = F[S_T] + merge_distance_c(F[S_T])
        clock_rank, clock_ptr, clock_p, clock_reg = W[AT_CLOCK_RANK], W[AT_CLOCK_PTR], W[AT_CLOCK_P], W[AT_CLOCK_REG]
        value, p, reg = W[AT_CLOCK_VALUE], W[AT_P], W[AT_REG]
        if W[N_REG_AT_START] == 0:
            residual_at_c(F, W, K, W[AT_X], WHOLE(0))
        for k in range(W[SIZE_CLOCK]):
            if W[clock_rank + k] == rank and tick_time_c(F, W, k) <= due:
                segment_c(F, W, K, 4 + k)
                for m in range(W[clock_ptr + k], W[clock_ptr + k + 1]):
                    F[value + m] = F[reg + W[clock_reg + m]]
        changed = 0
        for k in range(W[SIZE_CLOCK]):
            if W[clock_rank + k] == rank and tick_time_c(F, W, k) <= due:
                for m in range(W[clock_ptr + k], W[clock_ptr + k + 1]):
                    if F[p + W[clock_p + m]] != F[value + m]:
                        F[p + W[clock_p + m]] = F[value + m]
                        changed += 1
                W[W[AT_CLOCK_COUNT] + k] += 1
        if changed > 0:
            W[N_START_READY] = 0
            W[N_REG_AT_START] = 0
        return changed

    return tick_time, next_tick, next_rank, fire_clocks


(tick_time_c, next_tick_c, next_rank_c, fire_clocks_c) = _build(STAMP)


def next_tick(program: Program, work: Workspace) -> float:
    """The earliest instant at which a clock fires next, s; inf without clocks."""
    return float(next_tick_c(work.F, work.W))


def next_rank(program: Program, work: Workspace, above: int) -> int:
    """The smallest rank greater than `above` among the clocks due at the present time, -1 if there is none."""
    return int(next_rank_c(work.F, work.W, above))


def fire_clocks(program: Program, work: Workspace, rank: int) -> int:
    """Fire the clocks of one rank that are due at state[S_T] (within 1e-12 s): run RESIDUAL, read all new values, write them to p, count on.

    Returns the number of parameters that changed. No restart.
    """
    work.counter[N_REG_AT_START] = 0
    return int(fire_clocks_c(work.F, work.W, work.K, rank))
