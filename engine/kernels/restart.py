"""A consistent state after a jump: charges kept, algebraic rows solved, switches iterated until they agree with the values they watch.

Solves q_i(x) = q_keep_i in differential rows and f_i(x, t, p) = 0 in algebraic ones by damped Newton; the natural monotonicity test damps.
Source: Deuflhard, Newton Methods for Nonlinear Problems, 2004, section 2.1 (affine-invariant damping), section 2.3 (simplified iterations).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.history import load_delayed_c
from polewise.kernels.layout import (
    AT_ALGEBRAIC,
    AT_COL_PTR,
    AT_DELAY_IN_REG,
    AT_DX,
    AT_DX_TRY,
    AT_F_REG,
    AT_F_START,
    AT_HISTORY_START,
    AT_JF_REG,
    AT_JQ_REG,
    AT_MODE,
    AT_Q_KEEP,
    AT_Q_REG,
    AT_Q_START,
    AT_REG,
    AT_RESTART_MATRIX,
    AT_RESTART_SCALE,
    AT_ROW_IDX,
    AT_SCALE,
    AT_SWITCH_KIND,
    AT_SWITCH_REG,
    AT_SWITCH_SCALE,
    AT_WEIGHT,
    AT_X,
    AT_X_TRY,
    LU_COLUMN,
    RESTART,
    SIZE_DELAY,
    SIZE_N,
    SIZE_S,
)
from polewise.kernels.lu import LU_DONE, LU_FULL, lu_factor_c, lu_solve_c
from polewise.kernels.opcodes import SWITCH_POSITIVE, Status
from polewise.kernels.program import Program
from polewise.kernels.stamp import STAMP
from polewise.kernels.switches import set_mode_c, violation_c
from polewise.kernels.tape import WHOLE, U, live_mode_c, residual_at_c, segment_c
from polewise.kernels.workspace import (
    N_FULL_FACTORS,
    N_JACOBIANS,
    N_MADE_JUMP,
    N_NEEDS_RESTART,
    N_REG_AT_START,
    N_RESTART_FACTORS,
    N_RESTARTS,
    N_SINGULAR,
    N_START_READY,
    N_WORST,
    N_WORST_SWITCH,
    S_BAND,
    S_RTOL,
    Workspace,
)

DONE = int(Status.DONE)
FACTORS_FULL = int(Status.FACTORS_FULL)
NO_CONVERGENCE = int(Status.NO_CONVERGENCE)
SINGULAR = int(Status.SINGULAR)
NOT_FINITE = int(Status.NOT_FINITE)
CHATTER = int(Status.CHATTER)

ROUND_LIMIT = 1000  # rounds of flips within one instant
ROUND_ONE_BY_ONE = 30  # from this round on only the first wrong switch flips: many at once can go in circles
ITERATION_LIMIT = 60  # Newton iterations per round
DAMPING_MIN = 1e-4  # smallest damping factor
TOLERANCE_MAX = 1e-10  # of the last correction against |x| + scale; at most this, at best
TOLERANCE_MIN = 1e-14
STALLED = 1e-7  # a correction this small that no longer shrinks, Jacobian fresh, is rounding: small currents from sums of large ones times megohms
SIZE_PART = 0.1  # an algebraic unknown's scale is at least this part of the largest value it has had: it follows from states, which have their own
RATE_REUSE = 0.1  # factors serve on while each correction is at most this part of the one before


def _build(stamp: int) -> Any:
    @njit(cache=True, **INNER)
    def mismatch(F, W, K):
        """RESIDUAL at x; dx = dx_try = kept charges minus charges, or minus f. Returns whether all are finite."""
        _ = stamp
        residual_at_c(F, W, K, W[AT_X], WHOLE(0))
        reg, f_reg, q_reg, q_keep, dx, dx_try = W[AT_REG], W[AT_F_REG], W[AT_Q_REG], W[AT_Q_KEEP], W[AT_DX], W[AT_DX_TRY]
        total = 0.0
        for i in range(W[SIZE_N]):
            value = F[q_keep + i] - F[reg + W[q_reg + i]] if W[q_reg + i] >= 0 else -F[reg + W[f_reg + i]]
            F[dx + i] = value
            F[dx_try + i] = value
            total += value
        return np.isfinite(total)

    @njit(cache=True, **INNER)
    def size(F, W, v):
        """Largest entry of F[v:] against |x_try| + scale, inf if one is not finite."""
        _ = stamp
        x_try, scale = W[AT_X_TRY], W[AT_SCALE]
        norm = 0.0
        for i in range(W[SIZE_N]):
            part = abs(F[v + i]) / (abs(F[x_try + i]) + F[scale + i])
            if not (part <= norm):
                norm = part
                W[N_WORST] = i
                if not np.isfinite(part):
                    return np.inf
        return norm

    @njit(inline="always")
    def correction(F, W):
        """dx_try becomes the Newton correction it is the right side of. Returns its size."""
        _ = stamp
        dx_try, row_scale = W[AT_DX_TRY], W[AT_RESTART_SCALE]
        for i in range(W[SIZE_N]):
            F[dx_try + i] *= F[row_scale + i]
        lu_solve_c(W, F, WHOLE(RESTART), dx_try)
        return size_c(F, W, dx_try)

    @njit(inline="always")
    def restart_factorise(F, W, K):
        """Jacobian of the restart equations at x (RESIDUAL has been run there) and its factors."""
        _ = stamp
        segment_c(F, W, K, WHOLE(1))
        W[N_JACOBIANS] += 1
        n, reg, q_reg, jf_reg, jq_reg = W[SIZE_N], W[AT_REG], W[AT_Q_REG], W[AT_JF_REG], W[AT_JQ_REG]
        col_ptr, row_idx, matrix, row_scale, scale = W[AT_COL_PTR], W[AT_ROW_IDX], W[AT_RESTART_MATRIX], W[AT_RESTART_SCALE], W[AT_SCALE]
        for i in range(n):
            F[row_scale + i] = 0.0
        for j in range(n):
            for e in range(W[col_ptr + j], W[col_ptr + j + 1]):
                i = W[row_idx + e]
                value = F[reg + W[jq_reg + e]] if W[q_reg + i] >= 0 else F[reg + W[jf_reg + e]]
                F[matrix + e] = value
                F[row_scale + i] += abs(value) * F[scale + j]
        for i in range(n):
            F[row_scale + i] = 1.0 / F[row_scale + i] if F[row_scale + i] > 0.0 else 1.0
        for e in range(W[col_ptr + n]):
            F[matrix + e] *= F[row_scale + W[row_idx + e]]
        result = lu_factor_c(W, F, WHOLE(RESTART), matrix)
        W[N_RESTART_FACTORS] = 1 if result == LU_DONE else 0
        if result != LU_DONE:
            W[N_SINGULAR] = W[RESTART + LU_COLUMN]
            W[N_FULL_FACTORS] = 2
            return FACTORS_FULL if result == LU_FULL else SINGULAR
        return DONE

    @njit(inline="always")
    def solve_frozen(F, W, K):
        """Newton with the switches as they are. On DONE, reg holds RESIDUAL at the solution or one negligible correction before it."""
        _ = stamp
        n, x, x_try, dx, dx_try, direction = W[SIZE_N], W[AT_X], W[AT_X_TRY], W[AT_DX], W[AT_DX_TRY], W[AT_WEIGHT]
        tolerance = max(TOLERANCE_MIN, min(TOLERANCE_MAX, 1e-3 * F[S_RTOL]))
        need = W[N_RESTART_FACTORS] == 0  # factors are to be made at x
        fresh = False  # the factors were made at the point the present step starts from
        trying = False  # x is the end of a step of size `damping` from x_try, to be judged
        base, damping = np.inf, 1.0
        for i in range(n):
            F[x_try + i] = F[x + i]
        if not mismatch_c(F, W, K):
            return NOT_FINITE
        for _iteration in range(ITERATION_LIMIT):
            if need:
                status = restart_factorise_c(F, W, K)
                if status != DONE:
                    return status
                need, fresh = False, True
                for i in range(n):
                    F[dx_try + i] = F[dx + i]
            norm = correction_c(F, W)
            if norm <= tolerance:
                for i in range(n):
                    F[x + i] += F[dx_try + i]
                return DONE
            if trying:
                if norm <= (1.0 - 0.25 * damping) * base:
                    trying = False
                    if norm > RATE_REUSE * base:
                        need = True
                        continue
                    fresh = False
                elif fresh:
                    if base <= STALLED:
                        return DONE
                    damping *= 0.5
                    if damping < DAMPING_MIN:
                        for i in range(n):
                            F[x + i] = F[x_try + i]
                        return NO_CONVERGENCE
                else:
                    for i in range(n):
                        F[x + i] = F[x_try + i]
                    mismatch_c(F, W, K)
                    trying, need = False, True
                    continue
            if not trying:
                if norm == np.inf:
                    if fresh:
                        return NOT_FINITE
                    need = True
                    continue
                for i in range(n):
                    F[x_try + i] = F[x + i]
                    F[direction + i] = F[dx_try + i]
                base, damping, trying = size_c(F, W, direction), 1.0, True
            for i in range(n):
                F[x + i] = F[x_try + i] + damping * F[direction + i]
            mismatch_c(F, W, K)
        return NO_CONVERGENCE

    @njit(cache=True, **INNER)
    def note_sizes(F, W):
        """Raise the scales of algebraic unknowns that turn out larger."""
        _ = stamp
        x, scale, algebraic = W[AT_X], W[AT_SCALE], W[AT_ALGEBRAIC]
        for i in range(W[SIZE_N]):
            if W[algebraic + i] == 1:
                F[scale + i] = max(F[scale + i], SIZE_PART * abs(F[x + i]))

    @njit(inline="always")
    def start_from_registers(F, W, K):
        """The next step starts here: f_start from reg, the charges exactly those that were kept."""
        _ = stamp
        reg, f_reg, q_reg, f_start, q_start = W[AT_REG], W[AT_F_REG], W[AT_Q_REG], W[AT_F_START], W[AT_Q_START]
        for i in range(W[SIZE_N]):
            F[f_start + i] = F[reg + W[f_reg + i]]
            F[q_start + i] = F[W[AT_Q_KEEP] + i] if W[q_reg + i] >= 0 else 0.0
        if W[SIZE_DELAY] > 0:
            segment_c(F, W, K, WHOLE(3))
            for d in range(W[SIZE_DELAY]):
                F[W[AT_HISTORY_START] + d] = F[reg + W[W[AT_DELAY_IN_REG] + d]]
        note_sizes_c(F, W)
        W[N_NEEDS_RESTART] = 0
        W[N_START_READY] = 1
        W[N_REG_AT_START] = 1

    @njit(cache=True, **KERNEL)
    def restart(F, W, K):
        """See restart."""
        _ = stamp
        W[N_RESTARTS] += 1
        W[N_START_READY] = 0
        W[N_MADE_JUMP] = 1
        load_delayed_c(F, W, WHOLE(1))
        switch_reg, switch_scale, reg, kind, mode = W[AT_SWITCH_REG], W[AT_SWITCH_SCALE], W[AT_REG], W[AT_SWITCH_KIND], W[AT_MODE]
        for round_number in range(ROUND_LIMIT):
            status = solve_frozen_c(F, W, K)
            if status == FACTORS_FULL:
                return status
            flips = 0
            for s in range(W[SIZE_S]):
                value = F[U(reg + W[U(switch_reg + s)])]
                if W[U(kind + s)] == SWITCH_POSITIVE:  # the many: as violation_c, in place
                    beyond = -value if W[U(mode + s)] != 0 else value
                else:
                    beyond = violation_c(F, W, s, value)
                if beyond > F[U(switch_scale + s)] * F[S_BAND]:
                    flips += 1
                    trouble = set_mode_c(F, W, s, live_mode_c(F, W, s, value))
                    if trouble != DONE:
                        return trouble
                    W[N_WORST_SWITCH] = s
                    if round_number >= ROUND_ONE_BY_ONE:
                        break
            if flips == 0:
                if status == DONE:
                    start_from_registers_c(F, W, K)
                return status
        return CHATTER

    return mismatch, size, correction, restart_factorise, solve_frozen, note_sizes, start_from_registers, restart


(mismatch_c, size_c, correction_c, restart_factorise_c, solve_frozen_c, note_sizes_c, start_from_registers_c, restart_c) = _build(STAMP)


def restart(program: Program, work: Workspace) -> int:
    """Make the present point consistent at fixed time: charges of differential rows as in work.q_keep, algebraic rows solved, switches settled.

    work.x is the guess and the result; delayed parameters are looked up first.

    Returns:
        DONE, NO_CONVERGENCE (counter[N_WORST]: the unknown that moved most), SINGULAR (counter[N_SINGULAR]), NOT_FINITE, CHATTER and
        OUTSIDE_TABLE (counter[N_WORST_SWITCH]) or FACTORS_FULL.
    """
    return int(restart_c(work.F, work.W, work.K))
