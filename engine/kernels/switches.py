"""Frozen switches: how far a watched value is beyond what its mode allows, and which mode comes next.

Violation of a switch: signed distance of the watched value beyond the boundary of its mode, positive when the mode is wrong. Only a violation
above band = switch_scale * S_BAND counts, so that a value at rest on a boundary does not flip its switch with every rounding error.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.layout import (
    AT_FLIPPED,
    AT_MODE,
    AT_SWITCH_KIND,
    AT_SWITCH_TABLE,
    AT_TABLE_CLOSED,
    AT_TABLE_KNOTS,
    AT_TABLE_PTR,
)
from polewise.kernels.opcodes import SWITCH_FLOOR, SWITCH_POSITIVE, SWITCH_TABLE, Status
from polewise.kernels.stamp import STAMP
from polewise.kernels.workspace import (
    N_EVENTS,
    N_FACTORS_READY,
    N_JACOBIAN_AGE,
    N_RESTART_FACTORS,
    N_START_READY,
    N_WORST_SWITCH,
)

DONE = int(Status.DONE)
OUTSIDE_TABLE = int(Status.OUTSIDE_TABLE)


def _build(stamp: int) -> Any:
    @njit(cache=True, **KERNEL)
    def violation(F, W, s, value):
        """Signed distance of the watched value beyond the boundary of the mode of switch s."""
        _ = stamp
        kind, m = W[W[AT_SWITCH_KIND] + s], W[W[AT_MODE] + s]
        if kind == SWITCH_POSITIVE:
            return -value if m != 0 else value
        if kind == SWITCH_FLOOR:
            return max(m - value, value - (m + 1))
        table = W[W[AT_SWITCH_TABLE] + s]
        first, last = W[W[AT_TABLE_PTR] + table], W[W[AT_TABLE_PTR] + table + 1]
        knots = W[AT_TABLE_KNOTS] + first
        beyond = -np.inf
        if m > 0:
            beyond = F[knots + m - 1] - value
        if m < last - first:
            beyond = max(beyond, value - F[knots + m])
        return beyond

    @njit(cache=True, **INNER)
    def next_mode(F, W, s, value):
        """The mode on the other side of the boundary that the value is at or just beyond."""
        _ = stamp
        kind, m = W[W[AT_SWITCH_KIND] + s], W[W[AT_MODE] + s]
        if kind == SWITCH_POSITIVE:
            return 1 - m
        if kind == SWITCH_FLOOR:
            return m + 1 if value - m > 0.5 else m - 1
        table = W[W[AT_SWITCH_TABLE] + s]
        first, last = W[W[AT_TABLE_PTR] + table], W[W[AT_TABLE_PTR] + table + 1]
        knots = W[AT_TABLE_KNOTS] + first
        below = F[knots + m - 1] - value if m > 0 else -np.inf
        above = value - F[knots + m] if m < last - first else -np.inf
        return m + 1 if above > below else m - 1

    @njit(cache=True, **INNER)
    def set_mode(F, W, s, m):
        """Flip switch s to mode m. Returns DONE or OUTSIDE_TABLE."""
        _ = stamp
        W[W[AT_MODE] + s] = m
        W[W[AT_FLIPPED] + s] += 1
        W[N_EVENTS] += 1
        W[N_START_READY] = 0
        W[N_JACOBIAN_AGE] = 0
        W[N_FACTORS_READY] = 0
        W[N_RESTART_FACTORS] = 0
        if W[W[AT_SWITCH_KIND] + s] == SWITCH_TABLE:
            table = W[W[AT_SWITCH_TABLE] + s]
            segments = W[W[AT_TABLE_PTR] + table + 1] - W[W[AT_TABLE_PTR] + table]
            if W[W[AT_TABLE_CLOSED] + table] != 0 and (m == 0 or m == segments):
                W[N_WORST_SWITCH] = s
                return OUTSIDE_TABLE
        return DONE

    return violation, next_mode, set_mode


(violation_c, next_mode_c, set_mode_c) = _build(STAMP)
