"""Delayed expressions: a ring of cubic pieces, one per accepted step, looked up at t - delay; and the breaking points that jumps leave behind.

A jump at t shows again, one order smoother each time it passes through an integration, at t + delay, t + 2 delay, …; steps end on those instants.
Source: Bellen & Zennaro, Numerical Methods for Delay Differential Equations, 2003, chapters 2 and 4.
"""

from __future__ import annotations

from typing import Any

from numba import njit

from polewise.kernels.build import KERNEL
from polewise.kernels.layout import (
    AT_BREAK_LEVEL,
    AT_BREAK_T,
    AT_DELAY_IN_REG,
    AT_DELAY_P,
    AT_DELAY_S,
    AT_DELAY_SLOPE0,
    AT_DELAY_VALUE0,
    AT_HISTORY_H,
    AT_HISTORY_START,
    AT_HISTORY_T,
    AT_HISTORY_V,
    AT_P,
    AT_REG3,
    SIZE_BREAK,
    SIZE_DELAY,
    SIZE_HISTORY,
)
from polewise.kernels.program import Program
from polewise.kernels.radau import C1, C2
from polewise.kernels.stamp import STAMP
from polewise.kernels.workspace import N_BREAKS, N_HISTORY_COUNT, N_HISTORY_FIRST, N_START_READY, S_HISTORY_T0, S_T, Workspace

MERGE_S = 1e-12  # instants this close are one
MERGE_ULP = 4 * 2.220446049250313e-16  # or this close relative to the time
BREAK_LEVEL_MAX = 6  # a jump is followed through this many delays: then it is smoother than the method can see
BREAK_LEVEL_TICK = 5  # level that a sample instant's jump starts with: followed through one delay


def _build(stamp: int) -> Any:
    @njit(cache=True, **KERNEL)
    def merge_distance(t):
        """Instants closer than this are one."""
        _ = stamp
        return max(MERGE_S, MERGE_ULP * abs(t))

    @njit(cache=True, **KERNEL)
    def cubic(s, v0, v1, v2, v3):
        """Value at s of the cubic through (0, v0), (c1, v1), (c2, v2), (1, v3)."""
        _ = stamp
        a, b, c = s - C1, s - C2, s - 1.0
        return (
            v0 * a * b * c / (-C1 * C2)
            + v1 * s * b * c / (C1 * (C1 - C2) * (C1 - 1.0))
            + v2 * s * a * c / (C2 * (C2 - C1) * (C2 - 1.0))
            + v3 * s * a * b / ((1.0 - C1) * (1.0 - C2))
        )

    @njit(cache=True, **KERNEL)
    def delayed_value(F, W, d, t, right):
        """Delayed expression d at time t minus its delay; at a jump the value before it, or after it if right is 1."""
        _ = stamp
        t_past = t - F[W[AT_DELAY_S] + d]
        edge = merge_distance_c(t)
        capacity, first, history_t = W[SIZE_HISTORY], W[N_HISTORY_FIRST], W[AT_HISTORY_T]
        limit = t_past + edge if right == 1 else t_past - edge
        # bisection: the last piece that starts at or before the limit
        low, high = 0, W[N_HISTORY_COUNT]
        while low < high:
            middle = (low + high) // 2
            if F[history_t + (first + middle) % capacity] <= limit:
                low = middle + 1
            else:
                high = middle
        if low == 0:
            return F[W[AT_DELAY_VALUE0] + d] + F[W[AT_DELAY_SLOPE0] + d] * (t_past - F[S_HISTORY_T0])
        piece = (first + low - 1) % capacity
        v = W[AT_HISTORY_V] + 4 * (piece * W[SIZE_DELAY] + d)
        s = (t_past - F[history_t + piece]) / F[W[AT_HISTORY_H] + piece]
        return cubic_c(s, F[v], F[v + 1], F[v + 2], F[v + 3])

    @njit(cache=True, **KERNEL)
    def load_delayed(F, W, right):
        """Set the delayed parameters for the present time. Returns the largest change relative to the values' size."""
        _ = stamp
        change = 0.0
        for d in range(W[SIZE_DELAY]):
            j = W[AT_P] + W[W[AT_DELAY_P] + d]
            value = delayed_value_c(F, W, d, F[S_T], right)
            size = max(abs(value), abs(F[j]))
            if size > 0.0:
                change = max(change, abs(value - F[j]) / size)
            F[j] = value
        return change

    @njit(inline="always")
    def history_room(F, W):
        """Forget pieces that no delay reaches any more; whether there is room for another."""
        _ = stamp
        longest = 0.0
        for d in range(W[SIZE_DELAY]):
            longest = max(longest, F[W[AT_DELAY_S] + d])
        capacity, history_t = W[SIZE_HISTORY], W[AT_HISTORY_T]
        needed = F[S_T] - longest - 2.0 * merge_distance_c(F[S_T])
        while W[N_HISTORY_COUNT] >= 2 and F[history_t + (W[N_HISTORY_FIRST] + 1) % capacity] < needed:
            W[N_HISTORY_FIRST] = (W[N_HISTORY_FIRST] + 1) % capacity
            W[N_HISTORY_COUNT] -= 1
        return W[N_HISTORY_COUNT] < capacity

    @njit(inline="always")
    def push_history(F, W, t, h):
        """Keep the step from t of size h. DELAY must have been run on the three stages; history_start becomes the value at its end."""
        _ = stamp
        piece = (W[N_HISTORY_FIRST] + W[N_HISTORY_COUNT]) % W[SIZE_HISTORY]
        W[N_HISTORY_COUNT] += 1
        F[W[AT_HISTORY_T] + piece] = t
        F[W[AT_HISTORY_H] + piece] = h
        for d in range(W[SIZE_DELAY]):
            v = W[AT_HISTORY_V] + 4 * (piece * W[SIZE_DELAY] + d)
            r = W[AT_REG3] + 3 * W[W[AT_DELAY_IN_REG] + d]
            start = W[AT_HISTORY_START] + d
            F[v], F[v + 1], F[v + 2], F[v + 3] = F[start], F[r], F[r + 1], F[r + 2]
            F[start] = F[r + 2]

    @njit(cache=True, **KERNEL)
    def push_breaks(F, W, t, level):
        """Queue the instants at which a jump at t comes back. A full queue drops the latest: the error test still sees them."""
        _ = stamp
        if level >= BREAK_LEVEL_MAX:
            return
        times, levels = W[AT_BREAK_T], W[AT_BREAK_LEVEL]
        for d in range(W[SIZE_DELAY]):
            t_break = t + F[W[AT_DELAY_S] + d]
            count = W[N_BREAKS]
            k = count
            while k > 0 and F[times + k - 1] > t_break:
                k -= 1
            edge = merge_distance_c(t_break)
            if k > 0 and t_break - F[times + k - 1] <= edge:
                W[levels + k - 1] = min(W[levels + k - 1], level + 1)
            elif k < count and F[times + k] - t_break <= edge:
                W[levels + k] = min(W[levels + k], level + 1)
            elif k < W[SIZE_BREAK]:
                count = min(count, W[SIZE_BREAK] - 1)
                for m in range(count, k, -1):
                    F[times + m], W[levels + m] = F[times + m - 1], W[levels + m - 1]
                F[times + k], W[levels + k] = t_break, level + 1
                W[N_BREAKS] = count + 1

    @njit(inline="always")
    def pop_breaks(F, W):
        """Take breaking points up to the present time off the queue and queue their successors. Returns how many there were."""
        _ = stamp
        times, levels = W[AT_BREAK_T], W[AT_BREAK_LEVEL]
        taken = 0
        while W[N_BREAKS] > 0 and F[times] <= F[S_T] + merge_distance_c(F[S_T]):
            t, level = F[times], W[levels]
            W[N_BREAKS] -= 1
            for m in range(W[N_BREAKS]):
                F[times + m], W[levels + m] = F[times + m + 1], W[levels + m + 1]
            push_breaks_c(F, W, t, level)
            taken += 1
        return taken

    return merge_distance, cubic, delayed_value, load_delayed, history_room, push_history, push_breaks, pop_breaks


(merge_distance_c, cubic_c, delayed_value_c, load_delayed_c, history_room_c, push_history_c, push_breaks_c, pop_breaks_c) = _build(STAMP)


def start_history(program: Program, work: Workspace) -> None:
    """Empty the history at the present time and load the delayed parameters; delay_value0, delay_slope0 hold what was before."""
    work.counter[N_HISTORY_FIRST] = 0
    work.counter[N_HISTORY_COUNT] = 0
    work.counter[N_BREAKS] = 0
    work.counter[N_START_READY] = 0
    work.state[S_HISTORY_T0] = work.state[S_T]
    load_delayed_c(work.F, work.W, 1)
    push_breaks_c(work.F, work.W, work.state[S_T], 0)


def delayed_value(program: Program, work: Workspace, delay: int, t: float, right: bool = True) -> float:
    """Delayed expression number `delay` as seen at time t, s; at a jump the value after it, or before it."""
    return float(delayed_value_c(work.F, work.W, delay, t, int(right)))
