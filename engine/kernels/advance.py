"""Many steps: until the stop time, an event, a full buffer, a used-up budget or a failure.

One turn of the loop: fire clocks that are due, choose the step's size, attempt it until error and switches agree, accept, record.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.clocks import fire_clocks_c, next_rank_c, next_tick_c
from polewise.kernels.history import (
    BREAK_LEVEL_TICK,
    history_room_c,
    load_delayed_c,
    merge_distance_c,
    pop_breaks_c,
    push_breaks_c,
    push_history_c,
)
from polewise.kernels.layout import (
    AT_BREAK_T,
    AT_DELAY_P,
    AT_DELAY_S,
    AT_F_REG,
    AT_F_START,
    AT_FLIPPED,
    AT_P,
    AT_Q_KEEP,
    AT_Q_REG,
    AT_Q_START,
    AT_REG,
    AT_REG3,
    AT_SCALE,
    AT_STAGE,
    AT_STAGE_OLD,
    AT_SWITCH_WATCHED,
    AT_X,
    AT_X_OLD,
    P_REG,
    SIZE_DELAY,
    SIZE_N,
    SIZE_RECORD,
    SIZE_S,
)
from polewise.kernels.locate import LOCATED, LOCATED_AT_START, find_candidates_c, flip_at_event_c, locate_c
from polewise.kernels.opcodes import Status
from polewise.kernels.program import Program
from polewise.kernels.record import record_point_c, record_step_c
from polewise.kernels.restart import note_sizes_c, restart_c
from polewise.kernels.stamp import STAMP
from polewise.kernels.step import START_NOT_FINITE, attempt_step_c
from polewise.kernels.tape import WHOLE, segment_three_c
from polewise.kernels.workspace import (
    FLAG_AFTER,
    FLAG_BEFORE,
    FLAG_STEP,
    N_AFTER_TICK,
    N_BREAKS,
    N_FIRST,
    N_HAVE_STAGES,
    N_JACOBIAN_AGE,
    N_LAST_REJECTED,
    N_MADE_JUMP,
    N_NEEDS_RESTART,
    N_NEWTON_FAILED,
    N_RECORD,
    N_REG_AT_START,
    N_REJECTED,
    N_ROWS,
    N_START_READY,
    N_STEPS,
    N_STOP,
    N_TICKS,
    S_ERROR,
    S_ERROR_ACCEPTED,
    S_H,
    S_H_ACCEPTED,
    S_H_LAST,
    S_H_MAX,
    S_H_MIN,
    S_H_TICK,
    S_NEWTON_ITERATIONS,
    S_RECORD_EVERY,
    S_RECORD_T,
    S_T,
    S_THETA,
    Workspace,
)

DONE = int(Status.DONE)
BUFFER_FULL = int(Status.BUFFER_FULL)
EVENT = int(Status.EVENT)
HISTORY_FULL = int(Status.HISTORY_FULL)
FACTORS_FULL = int(Status.FACTORS_FULL)
STEP_TOO_SMALL = int(Status.STEP_TOO_SMALL)
NO_CONVERGENCE = int(Status.NO_CONVERGENCE)
SINGULAR = int(Status.SINGULAR)
NOT_FINITE = int(Status.NOT_FINITE)
STEP_LIMIT = int(Status.STEP_LIMIT)
STOPPED = int(Status.STOPPED)

# Step control: Hairer & Wanner II, IV.8; Gustafsson, ACM Trans. Math. Softw. 20(4), 1994 (predictive part).
SAFETY = 0.9
GROWTH_MAX = 8.0  # largest and smallest ratio of successive steps
SHRINK_MIN = 0.2
NEWTON_NOMINAL = 7  # slow convergence lowers the safety factor: (2 N + 1) / (2 N + iterations)
KEEP_STEP_BELOW = 1.2  # a wish to grow by less keeps the step and its factors
KEEP_JACOBIAN_RATE = 1e-3  # slower convergence than this renews the Jacobian for the next step
EQUAL_STEPS = 8.0  # what is left to a fixed instant is cut into equal steps when it takes at most so many: they share their factors
STRETCH = 1.08  # and may be this much longer than wished for: less than the safety factor leaves free
NEWTON_SHRINK = 0.25  # after a failed Newton iteration
FIRST_REJECTED_SHRINK = 0.1  # a step just after a jump is a guess: reject boldly
FIRST_REJECTED_ERROR = 1e4  # when its error is beyond this
ATTEMPT_LIMIT = 100  # attempts at one step
FIRST_CHANGE = 0.01  # relative change aimed at in the very first step
FIRST_LIMIT = 8  # attempts at finding its size
ROWS_PER_TURN = 8  # most rows that one turn of the loop records
SMALL_JUMP = 1e-2  # a sample instant that moves no unknown by more, against |x| + scale, counts as small: start values are extrapolated on
DELAY_JUMP = 1e-12  # a relative change of a delayed parameter that counts as a jump


def _build(stamp: int) -> Any:
    @njit(inline="always")
    def next_size(F, W, h):
        """Step size after an attempt of size h with error norm S_ERROR."""
        _ = stamp
        error = F[S_ERROR]
        safety = SAFETY * (2 * NEWTON_NOMINAL + 1) / (2 * NEWTON_NOMINAL + F[S_NEWTON_ITERATIONS])
        factor = safety / max(error, 1e-30) ** 0.25
        if error < 1.0 and W[N_FIRST] == 0 and F[S_H_ACCEPTED] > 0.0:
            predicted = F[S_H_ACCEPTED] / h * (error * error / F[S_ERROR_ACCEPTED]) ** 0.25 / SAFETY
            factor = min(factor, 1.0 / max(predicted, 1.0 / GROWTH_MAX))
        return h * min(GROWTH_MAX, max(SHRINK_MIN, factor))

    @njit(cache=True, **INNER)
    def movement(F, W, change, stride):
        """Largest of |F[change + stride i]| / (|x_i| + scale_i)."""
        _ = stamp
        x, scale = W[AT_X], W[AT_SCALE]
        largest = 0.0
        for i in range(W[SIZE_N]):
            largest = max(largest, abs(F[change + stride * i]) / (abs(F[x + i]) + F[scale + i]))
        return largest

    @njit(inline="always")
    def accept(F, W, K, h, t_new, flag):
        """Make the attempted step the present one and record its end with `flag`."""
        _ = stamp
        n, reg3 = W[SIZE_N], W[AT_REG3]
        if W[SIZE_DELAY] > 0:
            segment_three_c(F, W, K, WHOLE(3))
            push_history_c(F, W, F[S_T], h)
            for d in range(W[SIZE_DELAY]):
                j = W[W[AT_DELAY_P] + d]
                F[W[AT_P] + j] = F[reg3 + 3 * (W[P_REG] + j) + 2]
        if W[N_RECORD] != 0:
            record_step_c(F, W, K, h, t_new, flag)
        x, x_old, z, z_old = W[AT_X], W[AT_X_OLD], W[AT_STAGE], W[AT_STAGE_OLD]
        f_reg, q_reg, f_start, q_start, q_keep = W[AT_F_REG], W[AT_Q_REG], W[AT_F_START], W[AT_Q_START], W[AT_Q_KEEP]
        for i in range(n):
            F[x_old + i] = F[x + i]
            F[x + i] += F[z + 3 * i + 2]
            F[f_start + i] = F[reg3 + 3 * W[f_reg + i] + 2]
            q = F[reg3 + 3 * W[q_reg + i] + 2] if W[q_reg + i] >= 0 else 0.0
            F[q_start + i] = q
            F[q_keep + i] = q
        for k in range(3 * n):
            F[z_old + k] = F[z + k]
        note_sizes_c(F, W)
        F[S_T] = t_new
        F[S_H_LAST] = h
        W[N_STEPS] += 1
        W[N_START_READY] = 1
        W[N_REG_AT_START] = 0
        W[N_HAVE_STAGES] = 1
        W[N_MADE_JUMP] = 0
        W[N_LAST_REJECTED] = 0
        if W[N_JACOBIAN_AGE] == 2:
            W[N_JACOBIAN_AGE] = 1
        if F[S_NEWTON_ITERATIONS] > 1 and F[S_THETA] > KEEP_JACOBIAN_RATE:
            W[N_JACOBIAN_AGE] = 0

    @njit(inline="always")
    def one_step(F, W, C, K, t_target, target_flag):
        """Attempt steps until one is accepted that ends at t_target or before it, or on a located flip of a switch.

        Returns DONE, EVENT (a watched switch flipped) or a failure.
        """
        _ = stamp
        t = F[S_T]
        remaining = t_target - t
        h_limit = F[S_H_MAX]
        for d in range(W[SIZE_DELAY]):
            h_limit = min(h_limit, F[W[AT_DELAY_S] + d])
        h = F[S_H]
        searching = 0
        if not (h > 0.0):  # the very first step: a size in which nothing moves by more than about FIRST_CHANGE of its size
            h = 1e-3 * remaining
            searching = FIRST_LIMIT
        status = DONE
        for _attempt in range(ATTEMPT_LIMIT):
            h = min(h, h_limit)
            free = h
            reaches = STRETCH * h >= remaining
            if reaches:
                h = remaining
            elif h * EQUAL_STEPS > remaining:
                h = remaining / np.ceil(remaining / (STRETCH * h))
            reaches = reaches or h >= remaining
            if not reaches and (h < F[S_H_MIN] or t + h <= t):
                return SINGULAR if status == SINGULAR else STEP_TOO_SMALL
            status = attempt_step_c(F, W, C, K, h)
            if status == FACTORS_FULL:
                return status
            if status == START_NOT_FINITE:
                return NOT_FINITE
            if searching > 0:
                searching -= 1
                change = movement_c(F, W, W[AT_STAGE] + 2, WHOLE(3)) if status == DONE else np.inf
                if not (change <= FIRST_CHANGE):
                    h *= max(1e-3, 0.9 * FIRST_CHANGE / change)
                    continue
                searching = 0
            if status != DONE:
                W[N_NEWTON_FAILED] += 1
                W[N_LAST_REJECTED] = 1
                h *= NEWTON_SHRINK
                continue
            error = F[S_ERROR]
            wish = next_size_c(F, W, h)
            if error >= 1.0:
                W[N_REJECTED] += 1
                bold = W[N_FIRST] == 1 and W[N_LAST_REJECTED] == 0 and error > FIRST_REJECTED_ERROR
                W[N_LAST_REJECTED] = 1
                h = FIRST_REJECTED_SHRINK * h if bold else min(wish, SAFETY * h)
                continue
            if W[N_LAST_REJECTED] == 1:
                wish = min(wish, h)
            if h < 0.999 * free:  # cut to a target: the controller's own size was larger
                wish = max(wish, min(free, h * SAFETY / max(error, 1e-30) ** 0.25))
            size, t_new, flag = h, (t_target if reaches else t + h), (target_flag if reaches else FLAG_STEP)
            flips = W[SIZE_S] > 0 and find_candidates_c(F, W)
            found, reg, lanes = LOCATED, W[AT_REG3] + 2, WHOLE(3)
            if flips:
                found, size = locate_c(F, W, C, K, h)
                if found == FACTORS_FULL:
                    return found
                if found == NO_CONVERGENCE:
                    W[N_NEWTON_FAILED] += 1
                    h *= NEWTON_SHRINK
                    continue
                if found == LOCATED_AT_START:
                    reg, lanes = W[AT_REG], WHOLE(1)
                t_new, flag = t + size, FLAG_BEFORE
                wish = max(wish, free)
            else:
                F[S_H_ACCEPTED] = h
                F[S_ERROR_ACCEPTED] = max(1e-2, error)
                if 1.0 <= wish / h <= KEEP_STEP_BELOW:
                    wish = h
            if found == LOCATED:
                accept_c(F, W, K, size, t_new, flag)
                if W[N_AFTER_TICK] == 1:
                    W[N_AFTER_TICK] = 0
                    F[S_H_TICK] = wish
            F[S_H] = wish
            W[N_FIRST] = 1 if flips else 0
            return flip_at_event_c(F, W, reg, lanes) if flips else DONE
        return SINGULAR if status == SINGULAR else STEP_TOO_SMALL

    @njit(inline="always")
    def restart_here(F, W, K, level):
        """Restart; level >= 0: leave breaking points of that level; record the point after the jump. Returns DONE, EVENT or a failure.

        A jump that moves nothing much and flips nothing (a sample instant at rest) keeps start values, step control and Jacobian.
        """
        _ = stamp
        first, jumped, x, x_old = W[N_FIRST], W[N_MADE_JUMP], W[AT_X], W[AT_X_OLD]
        small = level == BREAK_LEVEL_TICK
        for i in range(W[SIZE_N]):
            F[x_old + i] = F[x + i]
        flips = 0
        for s in range(W[SIZE_S]):
            flips += W[W[AT_FLIPPED] + s]
        status = restart_c(F, W, K)
        if status != DONE:
            return status
        watched = False
        for s in range(W[SIZE_S]):
            flips -= W[W[AT_FLIPPED] + s]
            watched = watched or (W[W[AT_FLIPPED] + s] > 0 and W[W[AT_SWITCH_WATCHED] + s] != 0)
        for i in range(W[SIZE_N]):
            F[x_old + i] = F[x + i] - F[x_old + i]
        W[N_FIRST] = 1
        if small and flips == 0 and movement_c(F, W, x_old, WHOLE(1)) <= SMALL_JUMP:
            W[N_FIRST], W[N_MADE_JUMP] = first, jumped
            W[N_JACOBIAN_AGE] = min(W[N_JACOBIAN_AGE], 1)
            W[N_AFTER_TICK] = 1
            F[S_H_ACCEPTED] = 0.0  # errors before and after the instant have nothing to do with each other: no prediction
            if F[S_H_TICK] > 0.0:
                F[S_H] = min(F[S_H], F[S_H_TICK])
        else:
            W[N_JACOBIAN_AGE] = 0
        push_breaks_c(F, W, F[S_T], level)
        if W[N_RECORD] != 0 and not (small and F[S_RECORD_EVERY] > 0.0 and F[S_RECORD_T] != F[S_T]):
            record_point_c(F, W, K, FLAG_AFTER)
        return EVENT if watched else DONE

    @njit(inline="always")
    def fire_due(F, W, K):
        """Fire every clock that is due at the present time, rank by rank. Returns how many parameters changed."""
        _ = stamp
        W[N_TICKS] += 1
        changed = 0
        rank = next_rank_c(F, W, WHOLE(-1))
        while rank >= 0:
            changed += fire_clocks_c(F, W, K, rank)
            rank = next_rank_c(F, W, rank)
        return changed

    @njit(cache=True, **KERNEL)
    def advance(F, W, C, K, t_stop, step_budget):
        """See advance."""
        _ = stamp
        for s in range(W[SIZE_S]):
            W[W[AT_FLIPPED] + s] = 0
        if W[N_MADE_JUMP] == 1:
            W[N_START_READY] = 0
            W[N_JACOBIAN_AGE] = 0
            W[N_FIRST] = 1
            push_breaks_c(F, W, F[S_T], WHOLE(0))
        jump_level = WHOLE(0)  # of the restart that N_NEEDS_RESTART asks for
        steps = 0
        while True:
            if W[N_STOP] != 0:
                return STOPPED
            if W[N_RECORD] != 0 and W[N_ROWS] > W[SIZE_RECORD] - ROWS_PER_TURN:
                return BUFFER_FULL
            if W[N_NEEDS_RESTART] == 1:
                status = restart_here_c(F, W, K, jump_level)
                jump_level = WHOLE(0)
                if status != DONE:
                    return status
            t = F[S_T]
            edge = merge_distance_c(t_stop)
            if t >= t_stop - edge:
                F[S_T] = t_stop
                return DONE
            if W[SIZE_DELAY] > 0:
                if not history_room_c(F, W):
                    return HISTORY_FULL
                if pop_breaks_c(F, W) > 0 and load_delayed_c(F, W, WHOLE(1)) > DELAY_JUMP:
                    W[N_NEEDS_RESTART] = 1
                    jump_level = WHOLE(BREAK_LEVEL_TICK)  # a jump is followed on for as long as it is one
                    continue
            tick = next_tick_c(F, W)
            if tick <= t + merge_distance_c(t):
                if fire_due_c(F, W, K) > 0:
                    W[N_NEEDS_RESTART] = 1
                    jump_level = BREAK_LEVEL_TICK
                continue
            if steps >= step_budget:
                return STEP_LIMIT
            target, flag = t_stop, FLAG_STEP
            if tick < t_stop - edge:
                target, flag = tick, (FLAG_BEFORE if F[S_RECORD_EVERY] == 0.0 else FLAG_STEP)
            if W[N_BREAKS] > 0 and F[W[AT_BREAK_T]] < target:
                target, flag = F[W[AT_BREAK_T]], FLAG_BEFORE
            status = one_step_c(F, W, C, K, target, flag)
            steps += 1
            if status != DONE:
                return status

    return next_size, movement, accept, one_step, restart_here, fire_due, advance


(next_size_c, movement_c, accept_c, one_step_c, restart_here_c, fire_due_c, advance_c) = _build(STAMP)


def advance(program: Program, work: Workspace, t_stop: float, step_budget: int) -> int:
    """Integrate to t_stop. Every status leaves a valid point from which the next call goes on.

    Args:
        t_stop: s, >= state[S_T]. Clocks due within 1e-12 s of it are not fired.
        step_budget: at most this many steps, then STEP_LIMIT.

    Returns:
        DONE: state[S_T] is t_stop. EVENT: a watched switch flipped (work.flipped) at state[S_T]; with counter[N_NEEDS_RESTART] = 1 x is the point
        just before, else just after and consistent. BUFFER_FULL, HISTORY_FULL, FACTORS_FULL, STEP_LIMIT, STOPPED: do what they say and call again.
        Else a failure: counter[N_WORST], [N_WORST_SWITCH] or [N_SINGULAR] name what failed.
    """
    return int(advance_c(work.F, work.W, work.C, work.K, t_stop, step_budget))
