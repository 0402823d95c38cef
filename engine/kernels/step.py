"""One attempted step of the three-stage Radau IIA method for d/dt q(x) + f(x, t, p) = 0: stages by simplified Newton, error estimate, dense output.

Stage equations, row i, stage j, with X_j = x + z_j, Q = q(X), F = f(X, t + c_j h, p_j), V = A^-1:
    G_ij = sum_k V_jk (Q_ik - q_i) / h + F_ij = 0        (q = 0 in algebraic rows, so these hold F_ij = 0)
Newton with the Jacobians Cq = dq/dx, Jf = df/dx of one earlier point; T^-1 V T = diag(gamma, [[alpha, -beta], [beta, alpha]]) splits it into
    (gamma/h Cq + Jf) dw_1 = -(T^-1 G)_1,   ((alpha + i beta)/h Cq + Jf) (dw_2 + i dw_3) = -((T^-1 G)_2 + i (T^-1 G)_3),   dz = T dw.
Error estimate: (gamma/h Cq + Jf) e = -f(x_n) + sum_j E_j (Q_j - q_n) / h in differential rows, 0 in algebraic ones (they hold exactly).
Source: Hairer & Wanner, Solving Ordinary Differential Equations II, 2nd ed., IV.8; here with charges, for index 1.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.history import cubic_c, delayed_value_c
from polewise.kernels.layout import (
    AT_COL_PTR,
    AT_DELAY_IN_REG,
    AT_DELAY_P,
    AT_DX,
    AT_F_REG,
    AT_F_START,
    AT_HISTORY_START,
    AT_IN_ERROR,
    AT_JAC_F,
    AT_JAC_Q,
    AT_MATRIX,
    AT_MATRIX_COMPLEX,
    AT_P,
    AT_Q_REG,
    AT_Q_START,
    AT_REG,
    AT_REG3,
    AT_RHS,
    AT_RHS_COMPLEX,
    AT_ROW_IDX,
    AT_ROW_SCALE,
    AT_SCALE,
    AT_SEGMENT_END,
    AT_STAGE,
    AT_STAGE_OLD,
    AT_WEIGHT,
    AT_X,
    AT_X_TRY,
    COMPLEX,
    LU_COLUMN,
    LU_SEARCHES,
    P_REG,
    REAL,
    RESTART,
    SIZE_DELAY,
    SIZE_N,
    SIZE_NNZ,
    SIZE_P,
    TIME_REG,
    X_REG,
)
from polewise.kernels.lu import LU_DONE, LU_FULL, lu_factor_c, lu_solve_c
from polewise.kernels.opcodes import Status
from polewise.kernels.program import Program
from polewise.kernels.radau import (
    ALPHA,
    BETA,
    C1,
    C2,
    E1,
    E2,
    E3,
    GAMMA,
    I11,
    I12,
    I13,
    I21,
    I22,
    I23,
    I31,
    I32,
    I33,
    T11,
    T12,
    T13,
    T21,
    T22,
    T23,
    V11,
    V12,
    V13,
    V21,
    V22,
    V23,
    V31,
    V32,
    V33,
)
from polewise.kernels.stamp import STAMP
from polewise.kernels.tape import WHOLE, jacobian_c, load_point_c, residual_at_c, run_one_c, segment_c, segment_three_c
from polewise.kernels.workspace import (
    N_FACTORISATIONS,
    N_FACTORS_READY,
    N_FIRST,
    N_FULL_FACTORS,
    N_HAVE_STAGES,
    N_JACOBIAN_AGE,
    N_LAST_REJECTED,
    N_MADE_JUMP,
    N_PIVOT_SEARCHES,
    N_REG_AT_START,
    N_RESIDUALS,
    N_SINGULAR,
    N_SOLVES,
    N_START_READY,
    N_WORST,
    S_ERROR,
    S_ETA,
    S_H_FACTORS,
    S_H_LAST,
    S_NEWTON_ITERATIONS,
    S_NEWTON_TOL,
    S_T,
    S_THETA,
    S_TOL,
    Workspace,
)

DONE = int(Status.DONE)
FACTORS_FULL = int(Status.FACTORS_FULL)
NO_CONVERGENCE = int(Status.NO_CONVERGENCE)
SINGULAR = int(Status.SINGULAR)
NOT_FINITE = int(Status.NOT_FINITE)

START_NOT_FINITE = -3  # of attempt_step: the point the step starts from is no good, whatever its size

NEWTON_LIMIT = 8  # iterations per attempt
STEP_RATIO_SAME = 1e-7  # factors serve a step size this close to theirs as if it were the same (clock periods differ by rounding)
ROUND_OFF = 40 * 2.220446049250313e-16  # corrections this small against |x| + scale are rounding
DIVERGED = 0.99  # convergence rate from which Newton has failed
STALLED = 0.1  # Newton may give up its own tolerance when what is left is this small in error weights: rounding of sums of large numbers


def _build(stamp: int) -> Any:
    @njit(inline="always")
    def prepare_start(F, W, K):
        """f_start, q_start and history_start at the present point. Returns DONE or NOT_FINITE."""
        _ = stamp
        residual_at_c(F, W, K, W[AT_X], WHOLE(0))
        reg, f_reg, q_reg, f_start, q_start = W[AT_REG], W[AT_F_REG], W[AT_Q_REG], W[AT_F_START], W[AT_Q_START]
        total = 0.0
        for i in range(W[SIZE_N]):
            F[f_start + i] = F[reg + W[f_reg + i]]
            F[q_start + i] = F[reg + W[q_reg + i]] if W[q_reg + i] >= 0 else 0.0
            total += F[f_start + i] + F[q_start + i]
        if W[SIZE_DELAY] > 0:
            segment_c(F, W, K, WHOLE(3))
            for d in range(W[SIZE_DELAY]):
                F[W[AT_HISTORY_START] + d] = F[reg + W[W[AT_DELAY_IN_REG] + d]]
        W[N_START_READY] = 1
        W[N_REG_AT_START] = 1
        return DONE if np.isfinite(total) else NOT_FINITE

    @njit(inline="always")
    def factorise(F, W, C, h):
        """Both iteration matrices for step size h, rows scaled to size 1 in units of the unknowns' scales."""
        _ = stamp
        n, col_ptr, row_idx, scale = W[SIZE_N], W[AT_COL_PTR], W[AT_ROW_IDX], W[AT_SCALE]
        row_scale, jac_f, jac_q = W[AT_ROW_SCALE], W[AT_JAC_F], W[AT_JAC_Q]
        for i in range(n):
            F[row_scale + i] = 0.0
        real_factor = GAMMA / h
        complex_factor = complex(ALPHA / h, BETA / h)
        for j in range(n):
            for e in range(W[col_ptr + j], W[col_ptr + j + 1]):
                F[row_scale + W[row_idx + e]] += abs(real_factor * F[jac_q + e] + F[jac_f + e]) * F[scale + j]
        for i in range(n):
            F[row_scale + i] = 1.0 / F[row_scale + i] if F[row_scale + i] > 0.0 else 1.0
        matrix, matrix_complex = W[AT_MATRIX], W[AT_MATRIX_COMPLEX]
        for e in range(W[SIZE_NNZ]):
            r = F[row_scale + W[row_idx + e]]
            F[matrix + e] = r * (real_factor * F[jac_q + e] + F[jac_f + e])
            C[matrix_complex + e] = r * (complex_factor * F[jac_q + e] + F[jac_f + e])
        W[N_FACTORISATIONS] += 1
        W[N_FULL_FACTORS] = 0
        result = lu_factor_c(W, F, WHOLE(REAL), matrix)
        column = W[REAL + LU_COLUMN]
        if result == LU_DONE:
            W[N_FULL_FACTORS] = 1
            result = lu_factor_c(W, C, WHOLE(COMPLEX), matrix_complex)
            column = W[COMPLEX + LU_COLUMN]
        W[N_PIVOT_SEARCHES] = W[REAL + LU_SEARCHES] + W[COMPLEX + LU_SEARCHES] + W[RESTART + LU_SEARCHES]
        if result != LU_DONE:
            W[N_FACTORS_READY] = 0
            W[N_SINGULAR] = column
            return FACTORS_FULL if result == LU_FULL else SINGULAR
        F[S_H_FACTORS] = h
        W[N_FACTORS_READY] = 1
        return DONE

    @njit(inline="always")
    def predict(F, W, h):
        """Start values of the stages: the last collocation polynomial continued, or zero after a jump."""
        _ = stamp
        n, z, old = W[SIZE_N], W[AT_STAGE], W[AT_STAGE_OLD]
        if W[N_HAVE_STAGES] == 0 or W[N_MADE_JUMP] == 1:
            for k in range(z, z + 3 * n):
                F[k] = 0.0
            return
        ratio = h / F[S_H_LAST]
        for stage in range(3):
            s = 1.0 + ratio * (C1 if stage == 0 else (C2 if stage == 1 else 1.0))
            a1, a2, a3 = cubic_c(s, 0.0, 1.0, 0.0, 0.0), cubic_c(s, 0.0, 0.0, 1.0, 0.0), cubic_c(s, 0.0, 0.0, 0.0, 1.0) - 1.0
            for k in range(0, 3 * n, 3):
                F[z + k + stage] = a1 * F[old + k] + a2 * F[old + k + 1] + a3 * F[old + k + 2]

    @njit(inline="always")
    def load_stage_parameters(F, W, h):
        """Times and parameters of the three stages; delayed parameters differ from stage to stage."""
        _ = stamp
        t, times = F[S_T], W[AT_REG3] + 3 * W[TIME_REG]
        F[times], F[times + 1], F[times + 2] = t + C1 * h, t + C2 * h, t + h
        base, p = W[AT_REG3] + 3 * W[P_REG], W[AT_P]
        for j in range(W[SIZE_P]):
            value = F[p + j]
            F[base + 3 * j] = value
            F[base + 3 * j + 1] = value
            F[base + 3 * j + 2] = value
        for d in range(W[SIZE_DELAY]):
            for s in range(3):
                F[base + 3 * W[W[AT_DELAY_P] + d] + s] = delayed_value_c(F, W, d, F[times + s], WHOLE(0))

    @njit(cache=True, **INNER)
    def run_stages(F, W, K):
        """RESIDUAL at the three stages."""
        _ = stamp
        base, z, x = W[AT_REG3] + 3 * W[X_REG], W[AT_STAGE], W[AT_X]
        for i in range(W[SIZE_N]):
            value = F[x + i]
            for s in range(3):
                F[base + 3 * i + s] = value + F[z + 3 * i + s]
        segment_three_c(F, W, K, WHOLE(0))
        W[N_RESIDUALS] += 3

    @njit(inline="always")
    def correct_stages(F, W, C, K, h):
        """One Newton iteration: residual of the stages, two solutions, new stages. Returns the correction's size in error weights."""
        _ = stamp
        run_stages_c(F, W, K)
        n, reg3, f_reg, q_reg, q_start = W[SIZE_N], W[AT_REG3], W[AT_F_REG], W[AT_Q_REG], W[AT_Q_START]
        z, b, bc, row_scale, weight = W[AT_STAGE], W[AT_RHS], W[AT_RHS_COMPLEX], W[AT_ROW_SCALE], W[AT_WEIGHT]
        inverse_h = 1.0 / h
        for i in range(n):
            at = reg3 + 3 * W[f_reg + i]
            g1, g2, g3 = F[at], F[at + 1], F[at + 2]
            if W[q_reg + i] >= 0:
                at = reg3 + 3 * W[q_reg + i]
                q = F[q_start + i]
                q1, q2, q3 = (F[at] - q) * inverse_h, (F[at + 1] - q) * inverse_h, (F[at + 2] - q) * inverse_h
                g1 += V11 * q1 + V12 * q2 + V13 * q3
                g2 += V21 * q1 + V22 * q2 + V23 * q3
                g3 += V31 * q1 + V32 * q2 + V33 * q3
            r = -F[row_scale + i]
            F[b + i] = r * (I11 * g1 + I12 * g2 + I13 * g3)
            C[bc + i] = complex(r * (I21 * g1 + I22 * g2 + I23 * g3), r * (I31 * g1 + I32 * g2 + I33 * g3))
        lu_solve_c(W, F, WHOLE(REAL), b)
        lu_solve_c(W, C, WHOLE(COMPLEX), bc)
        W[N_SOLVES] += 1
        norm = 0.0
        for i in range(n):
            w1, w2, w3 = F[b + i], C[bc + i].real, C[bc + i].imag
            d1 = T11 * w1 + T12 * w2 + T13 * w3
            d2 = T21 * w1 + T22 * w2 + T23 * w3
            d3 = w1 + w2
            F[z + 3 * i] += d1
            F[z + 3 * i + 1] += d2
            F[z + 3 * i + 2] += d3
            size = max(abs(d1), abs(d2), abs(d3)) * F[weight + i]
            if not (size <= norm):  # also when it is not a number
                norm = size
                W[N_WORST] = i
                if not np.isfinite(size):
                    return np.inf
        return norm

    @njit(inline="always")
    def solve_stages(F, W, C, K, h):
        """Newton iterations until the stages' estimated error is below S_NEWTON_TOL. Returns DONE, NO_CONVERGENCE or NOT_FINITE.

        eta = theta / (1 - theta) turns the size of a correction into that of the error left; the last step's eta serves the first iteration,
        so that a linear circuit needs a single one.
        """
        _ = stamp
        tolerance = F[S_NEWTON_TOL]
        round_off = ROUND_OFF / F[S_TOL]
        eta = max(F[S_ETA], 2.2e-16) ** 0.8
        norm_old, rate_old = 0.0, 0.0
        for iteration in range(1, NEWTON_LIMIT + 1):
            norm = correct_stages_c(F, W, C, K, h)
            F[S_NEWTON_ITERATIONS] = iteration
            if norm == np.inf:
                return NOT_FINITE
            if iteration > 1:
                rate = norm / norm_old
                theta = rate if iteration == 2 else np.sqrt(rate * rate_old)
                rate_old = rate
                F[S_THETA] = theta
                if norm <= round_off:
                    F[S_ETA] = min(theta, 0.1)
                    return DONE
                if rate >= DIVERGED and max(norm, norm_old) <= STALLED:
                    return DONE
                if theta >= DIVERGED:
                    return NO_CONVERGENCE
                eta = theta / (1.0 - theta)
                if eta * norm * theta ** (NEWTON_LIMIT - 1 - iteration) > tolerance:
                    return DONE if eta * norm <= STALLED else NO_CONVERGENCE
            norm_old = norm
            F[S_ETA] = eta
            if eta * norm <= tolerance:
                return DONE
        return NO_CONVERGENCE

    @njit(inline="always")
    def estimate_error(F, W, K, h):
        """Size of the filtered embedded estimate in error weights; dx holds the estimate."""
        _ = stamp
        n, reg3, f_reg, q_reg, q_start = W[SIZE_N], W[AT_REG3], W[AT_F_REG], W[AT_Q_REG], W[AT_Q_START]
        dx, x, x_try, row_scale, weight, in_error = W[AT_DX], W[AT_X], W[AT_X_TRY], W[AT_ROW_SCALE], W[AT_WEIGHT], W[AT_IN_ERROR]
        inverse_h = 1.0 / h
        norm = 0.0
        for attempt in range(2):
            if attempt == 1:
                residual_at_c(F, W, K, x_try, WHOLE(0))
            for i in range(n):
                F[dx + i] = 0.0
                if W[q_reg + i] >= 0:
                    f = F[W[AT_F_START] + i] if attempt == 0 else F[W[AT_REG] + W[f_reg + i]]
                    at = reg3 + 3 * W[q_reg + i]
                    q = F[q_start + i]
                    F[dx + i] = F[row_scale + i] * ((E1 * (F[at] - q) + E2 * (F[at + 1] - q) + E3 * (F[at + 2] - q)) * inverse_h - f)
            lu_solve_c(W, F, WHOLE(REAL), dx)
            norm = 0.0
            for i in range(n):
                size = abs(F[dx + i]) * F[weight + i] * F[in_error + i]
                if not (size <= norm):
                    norm = size
                    W[N_WORST] = i
                F[x_try + i] = F[x + i] + F[dx + i]
            if norm < 1.0 or (W[N_FIRST] == 0 and W[N_LAST_REJECTED] == 0):
                break
        F[S_ERROR] = norm
        return norm

    @njit(cache=True, **KERNEL)
    def attempt_step(F, W, C, K, h):
        """See attempt_step."""
        _ = stamp
        if W[N_START_READY] == 0 and prepare_start_c(F, W, K) != DONE:
            return START_NOT_FINITE
        weight, x, scale = W[AT_WEIGHT], W[AT_X], W[AT_SCALE]
        for i in range(W[SIZE_N]):
            F[weight + i] = 1.0 / (F[S_TOL] * (abs(F[x + i]) + F[scale + i]))
        load_stage_parameters_c(F, W, h)
        while True:
            if W[N_JACOBIAN_AGE] == 0:
                if W[N_REG_AT_START] == 0:
                    residual_at_c(F, W, K, x, WHOLE(0))
                    W[N_REG_AT_START] = 1
                jacobian_c(F, W, K)
                W[N_JACOBIAN_AGE] = 2
                W[N_FACTORS_READY] = 0
                F[S_ETA] = 1.0
            if W[N_FACTORS_READY] == 0 or abs(h - F[S_H_FACTORS]) > STEP_RATIO_SAME * h:
                status = factorise_c(F, W, C, h)
                if status != DONE:
                    return status
            predict_c(F, W, h)
            status = solve_stages_c(F, W, C, K, h)
            if status == DONE:
                break
            if W[N_JACOBIAN_AGE] == 2:
                F[S_ETA] = 1.0
                return status
            W[N_JACOBIAN_AGE] = 0
        run_stages_c(F, W, K)
        return DONE if np.isfinite(estimate_error_c(F, W, K, h)) else NOT_FINITE

    @njit(inline="always")
    def run_inside(F, W, K, h, s):
        """RESIDUAL on the dense output of the last attempt at the part s of its step → reg."""
        _ = stamp
        z, x, x_try, reg = W[AT_STAGE], W[AT_X], W[AT_X_TRY], W[AT_REG]
        a1, a2, a3 = cubic_c(s, 0.0, 1.0, 0.0, 0.0), cubic_c(s, 0.0, 0.0, 1.0, 0.0), cubic_c(s, 0.0, 0.0, 0.0, 1.0)
        for i in range(W[SIZE_N]):
            F[x_try + i] = F[x + i] + a1 * F[z + 3 * i] + a2 * F[z + 3 * i + 1] + a3 * F[z + 3 * i + 2]
        t = F[S_T] + s * h
        load_point_c(F, W, x_try, t)
        for d in range(W[SIZE_DELAY]):
            F[reg + W[P_REG] + W[W[AT_DELAY_P] + d]] = delayed_value_c(F, W, d, t, WHOLE(1 if s <= 0.0 else 0))
        run_one_c(F, W, K, reg, WHOLE(0), W[W[AT_SEGMENT_END]], WHOLE(0))
        W[N_RESIDUALS] += 1

    return (
        prepare_start,
        factorise,
        predict,
        load_stage_parameters,
        run_stages,
        correct_stages,
        solve_stages,
        estimate_error,
        attempt_step,
        run_inside,
    )


(
    prepare_start_c,
    factorise_c,
    predict_c,
    load_stage_parameters_c,
    run_stages_c,
    correct_stages_c,
    solve_stages_c,
    estimate_error_c,
    attempt_step_c,
    run_inside_c,
) = _build(STAMP)


def attempt_step(program: Program, work: Workspace, h: float) -> int:
    """Try a step of size h from the present point; nothing of the present point changes.

    Afterwards work.stage holds the stages, reg3 RESIDUAL at them, state[S_ERROR] the error norm.

    Returns:
        DONE (whatever the error), NO_CONVERGENCE, NOT_FINITE, START_NOT_FINITE, SINGULAR or FACTORS_FULL.
    """
    return int(attempt_step_c(work.F, work.W, work.C, work.K, h))
