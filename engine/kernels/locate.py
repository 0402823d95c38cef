"""Flips of switches within a step: which switches, when first, and the step attempted again to end exactly there.

The first crossing is bracketed on the dense output, which is too coarse for the time itself; the time is then refined by attempting the step anew
with its end on the root (secant steps inside the bracket). Only switches that end beyond their band somewhere in the step take part.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER
from polewise.kernels.layout import (
    AT_CANDIDATE,
    AT_MODE,
    AT_REG,
    AT_REG3,
    AT_SWITCH_KIND,
    AT_SWITCH_NOW,
    AT_SWITCH_REG,
    AT_SWITCH_SCALE,
    AT_SWITCH_WATCHED,
    SIZE_S,
)
from polewise.kernels.opcodes import SWITCH_POSITIVE, Status
from polewise.kernels.radau import C1, C2
from polewise.kernels.stamp import STAMP
from polewise.kernels.step import attempt_step_c, run_inside_c
from polewise.kernels.switches import next_mode_c, set_mode_c, violation_c
from polewise.kernels.tape import WHOLE, U
from polewise.kernels.workspace import (
    N_CHATTER_LIMIT,
    N_LOCATED,
    N_NEEDS_RESTART,
    N_RELOCATIONS,
    N_WORST_SWITCH,
    S_BAND,
    S_CHATTER_T,
    S_CHATTER_WINDOW,
    S_T,
)

DONE = int(Status.DONE)
EVENT = int(Status.EVENT)
CHATTER = int(Status.CHATTER)
FACTORS_FULL = int(Status.FACTORS_FULL)
NO_CONVERGENCE = int(Status.NO_CONVERGENCE)
NOT_LOCATED = -1
LOCATED = 0
LOCATED_AT_START = -2

DENSE_TOLERANCE = 1e-6  # of the step: how far the bracket on the dense output is narrowed
DENSE_LIMIT = 40  # evaluations for that
REFINE_LIMIT = 12  # steps attempted again
TIME_TOLERANCE = 2e-13  # of the time, and of the step: when the root counts as located
INWARD = 1e-3  # a switch inside its band at the start is looked at again this far into the step
SLOPE_DISTANCE = 1e-3  # of the step: for the slope at the root


def _build(stamp: int) -> Any:
    @njit(inline="always")
    def find_candidates(F, W):
        """Mark the switches that are beyond their band at a stage of the attempted step; switch_now: by how much at most. Whether there are any."""
        _ = stamp
        band, switch_reg, switch_scale = F[S_BAND], W[AT_SWITCH_REG], W[AT_SWITCH_SCALE]
        candidate, switch_now = W[AT_CANDIDATE], W[AT_SWITCH_NOW]
        kind, mode, reg3 = W[AT_SWITCH_KIND], W[AT_MODE], W[AT_REG3]
        found = False
        for s in range(W[SIZE_S]):
            at = U(reg3 + 3 * W[U(switch_reg + s)])
            u, v, w = F[at], F[at + U(1)], F[at + U(2)]
            if W[U(kind + s)] == SWITCH_POSITIVE:  # the many: as violation_c, in place
                worst = max(-u, -v, -w) if W[U(mode + s)] != 0 else max(u, v, w)
            else:
                worst = max(violation_c(F, W, s, u), violation_c(F, W, s, v), violation_c(F, W, s, w))
            W[U(candidate + s)] = 0
            if worst > band * F[U(switch_scale + s)]:
                W[candidate + s] = 1
                F[switch_now + s] = worst
                found = True
        return found

    @njit(cache=True, **INNER)
    def worst_of(F, W, reg, lanes):
        """Largest violation of the candidates, each against its largest in the step, from the registers at F[reg:], `lanes` apart.

        Violations count from switch_scale on: a flip is put just beyond its boundary, so that rounding cannot leave it on the near side, where a law
        of very different slopes (a diode's) would at once flip back.
        """
        _ = stamp
        switch_reg, candidate, switch_now, switch_scale = W[AT_SWITCH_REG], W[AT_CANDIDATE], W[AT_SWITCH_NOW], W[AT_SWITCH_SCALE]
        worst = -np.inf
        for s in range(W[SIZE_S]):
            if W[candidate + s] == 1:
                beyond = violation_c(F, W, s, F[reg + lanes * W[switch_reg + s]]) - F[switch_scale + s]
                worst = max(worst, beyond / F[switch_now + s])
        return worst

    @njit(cache=True, **INNER)
    def inside(F, W, K, h, s):
        """worst_of_c on the dense output at the part s of the step."""
        _ = stamp
        run_inside_c(F, W, K, h, s)
        return worst_of_c(F, W, W[AT_REG], WHOLE(1))

    @njit(inline="always")
    def bracket_first(F, W, K, h):
        """Part of the step at which the first candidate crosses, on the dense output, and the slope there per second; (0, 0): across at the start."""
        _ = stamp
        low, value_low = 0.0, inside_c(F, W, K, h, 0.0)
        if value_low > 0.0:
            low, value_low = INWARD, inside_c(F, W, K, h, INWARD)
            if value_low > 0.0:
                inside_c(F, W, K, h, 0.0)
                return 0.0, 0.0
        high, value_high = 1.0, 1.0
        for lane in range(3):
            part = C1 if lane == 0 else (C2 if lane == 1 else 1.0)
            value = worst_of_c(F, W, W[AT_REG3] + lane, WHOLE(3))
            if value > 0.0:
                high, value_high = part, value
                break
            low, value_low = part, value
        side = 0
        for k in range(DENSE_LIMIT):
            if high - low <= DENSE_TOLERANCE:
                break
            # Illinois: false position, the stale end's value halved; bisection every fourth time
            s = 0.5 * (low + high)
            if k % 4 != 3 and value_high > value_low:
                s = (low * value_high - high * value_low) / (value_high - value_low)
                s = min(max(s, low + 0.1 * DENSE_TOLERANCE), high - 0.1 * DENSE_TOLERANCE)
            value = inside_c(F, W, K, h, s)
            if value > 0.0:
                high, value_high = s, value
                if side == 1:
                    value_low *= 0.5
                side = 1
            else:
                low, value_low = s, value
                if side == -1:
                    value_high *= 0.5
                side = -1
        s = 0.5 * (low + high)
        before, after = max(0.0, s - SLOPE_DISTANCE), min(1.0, s + SLOPE_DISTANCE)
        slope = inside_c(F, W, K, h, after) - inside_c(F, W, K, h, before)
        return s, slope / ((after - before) * h)

    @njit(cache=True, **INNER)
    def locate(F, W, C, K, h):
        """Shorten the attempted step to the first flip in it. Returns (kind, size).

        kind: LOCATED: the last attempt is the step of this size that ends on the flip. LOCATED_AT_START: a switch is across at the step's start,
        where reg holds RESIDUAL. NO_CONVERGENCE, FACTORS_FULL: as attempt_step. `candidate` marks the switches that took part.
        """
        _ = stamp
        part, slope = bracket_first_c(F, W, K, h)
        if part == 0.0:
            return LOCATED_AT_START, 0.0
        low, high = 0.0, h
        size, size_old, value_old = part * h, 0.0, 0.0
        tolerance = TIME_TOLERANCE * max(abs(F[S_T] + size), size)
        for k in range(REFINE_LIMIT):
            status = attempt_step_c(F, W, C, K, size)
            W[N_RELOCATIONS] += 1
            if status != DONE:
                return (FACTORS_FULL if status == FACTORS_FULL else NO_CONVERGENCE), 0.0
            value = worst_of_c(F, W, W[AT_REG3] + 2, WHOLE(3))
            if value > 0.0:
                high = size
            else:
                low = size
            if k > 0 and (value - value_old) / (size - size_old) > 0.0:
                slope = (value - value_old) / (size - size_old)
            change = -value / slope if slope > 0.0 else 0.0
            if abs(change) <= tolerance or high - low <= tolerance:
                break
            size_old, value_old = size, value
            new = size + change
            if not (low < new < high):
                new = 0.5 * (low + high)
            if k == REFINE_LIMIT - 1:
                break
            size = new
        return LOCATED, size

    @njit(cache=True, **INNER)
    def flip_at_event(F, W, reg, lanes):
        """Flip the candidates that are at their boundary at the located point, whose registers are at F[reg:]; sets NEEDS_RESTART.

        Returns DONE, EVENT (a watched one flipped), CHATTER or OUTSIDE_TABLE.
        """
        _ = stamp
        band, switch_reg, switch_scale = F[S_BAND], W[AT_SWITCH_REG], W[AT_SWITCH_SCALE]
        candidate, switch_now = W[AT_CANDIDATE], W[AT_SWITCH_NOW]
        nearest = worst_of_c(F, W, reg, lanes)
        W[N_NEEDS_RESTART] = 1
        watched = False
        if not (abs(F[S_T] - F[S_CHATTER_T]) <= F[S_CHATTER_WINDOW]):
            F[S_CHATTER_T] = F[S_T]
            W[N_LOCATED] = 0
        W[N_LOCATED] += 1
        for s in range(W[SIZE_S]):
            if W[candidate + s] == 1:
                value = F[reg + lanes * W[switch_reg + s]]
                beyond = violation_c(F, W, s, value)
                if (beyond - F[switch_scale + s]) / F[switch_now + s] >= nearest or beyond >= -band * F[switch_scale + s]:
                    status = set_mode_c(F, W, s, next_mode_c(F, W, s, value))
                    if W[N_LOCATED] > W[N_CHATTER_LIMIT]:
                        W[N_WORST_SWITCH] = s
                        return CHATTER
                    if status != DONE:
                        return status
                    watched = watched or W[W[AT_SWITCH_WATCHED] + s] != 0
        return EVENT if watched else DONE

    return find_candidates, worst_of, inside, bracket_first, locate, flip_at_event


(find_candidates_c, worst_of_c, inside_c, bracket_first_c, locate_c, flip_at_event_c) = _build(STAMP)
