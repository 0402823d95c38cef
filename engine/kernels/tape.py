"""Runs a tape on a register file: one loop, one switch. For one point (`reg`) or for the three stages of a step at once (`reg3`).

Three stages at once cost far less than three runs: decoding an operation takes longer than doing it.
In this folder, compiled functions end in _c and take the arenas of layout.py: F floats, W whole numbers, C complex numbers, K the tape;
functions for Python take (program, work). Register r of stage s lies at 3 r + s of reg3.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.layout import (
    AT_JAC_F,
    AT_JAC_Q,
    AT_JF_REG,
    AT_JQ_REG,
    AT_MODE,
    AT_P,
    AT_REG,
    AT_REG3,
    AT_SEGMENT_END,
    AT_SWITCH_KIND,
    AT_SWITCH_REG,
    AT_SWITCH_TABLE,
    AT_TABLE_CLOSED,
    AT_TABLE_COEF,
    AT_TABLE_KNOTS,
    AT_TABLE_PTR,
    AT_X,
    P_REG,
    SIZE_N,
    SIZE_NNZ,
    SIZE_P,
    SIZE_S,
    TIME_REG,
    X_REG,
)
from polewise.kernels.opcodes import (
    ACOS,
    ADD,
    ASIN,
    ATAN,
    ATAN2,
    COS,
    COSH,
    DIV,
    EXP,
    FLOOR,
    LOG,
    MUL,
    MUX,
    NEG,
    POSITIVE,
    POW,
    SIN,
    SINH,
    SQRT,
    SUB,
    SWITCH_FLOOR,
    SWITCH_POSITIVE,
    SWITCH_TABLE,
    TABLE,
    TABLE_SLOPE,
    TAN,
    TANH,
)
from polewise.kernels.program import Program
from polewise.kernels.stamp import STAMP
from polewise.kernels.workspace import N_JACOBIANS, N_REG_AT_START, N_RESIDUALS, S_T, Workspace

FLOOR_LIMIT = 4.0e18  # beyond it a floor no longer fits a whole number
WHOLE = np.int64  # a number written out in a call is a type of its own to the compiler, WHOLE(number) is not
U = np.uint64  # an unsigned index needs no test for counting from the end


def _build_parts(stamp: int) -> Any:
    @njit(cache=True, **INNER)
    def table_segment(F, start, end, u):
        """Segment of the table with knots F[start:end] that u lies in; both end knots count as inside. Bisection."""
        _ = stamp
        if end - start > 1 and u == F[end - 1]:
            return end - start - 1
        low, high = start, end
        while low < high:
            middle = (low + high) // 2
            if u < F[middle]:
                high = middle
            else:
                low = middle + 1
        return low - start

    @njit(cache=True, **INNER)
    def function_value(op, u, v):
        """The rarer operations."""
        _ = stamp
        if op == SQRT:
            return math.sqrt(u)
        elif op == EXP:
            return math.exp(u)
        elif op == LOG:
            return math.log(u)
        elif op == SIN:
            return math.sin(u)
        elif op == COS:
            return math.cos(u)
        elif op == POW:
            return u**v
        elif op == TAN:
            return math.tan(u)
        elif op == ASIN:
            return math.asin(u)
        elif op == ACOS:
            return math.acos(u)
        elif op == ATAN:
            return math.atan(u)
        elif op == ATAN2:
            return math.atan2(u, v)
        elif op == SINH:
            return math.sinh(u)
        elif op == COSH:
            return math.cosh(u)
        elif op == TANH:
            return math.tanh(u)
        return math.nan

    return table_segment, function_value


table_segment_c, function_value_c = _build_parts(STAMP)


def _build_tape(lanes: int, stamp: int) -> Any:
    """The interpreter for a number of lanes, a constant of the compiled code."""

    @njit(cache=True, **INNER)
    def run(F, W, K, at_reg, first, last, live):
        """Operations [first, last) on the registers from F[at_reg] on. live 1: switches follow lane 0 and write the modes."""
        _ = stamp
        at_mode, at_table, at_knots, at_coef = W[AT_MODE], W[AT_TABLE_PTR], W[AT_TABLE_KNOTS], W[AT_TABLE_COEF]
        reg = U(at_reg)
        for k in range(5 * first, 5 * last, 5):
            op = K[U(k)]
            d = reg + U(K[U(k + 1)]) * U(lanes)
            a = reg + U(K[U(k + 2)]) * U(lanes)
            b = reg + U(K[U(k + 3)]) * U(lanes)
            if op == MUL:
                for s in range(lanes):
                    F[d + U(s)] = F[a + U(s)] * F[b + U(s)]
            elif op == ADD:
                for s in range(lanes):
                    F[d + U(s)] = F[a + U(s)] + F[b + U(s)]
            elif op == SUB:
                for s in range(lanes):
                    F[d + U(s)] = F[a + U(s)] - F[b + U(s)]
            elif op == DIV:
                for s in range(lanes):
                    F[d + U(s)] = F[a + U(s)] / F[b + U(s)]
            elif op == NEG:
                for s in range(lanes):
                    F[d + U(s)] = -F[a + U(s)]
            elif op == MUX:
                c = reg + U(K[U(k + 4)]) * U(lanes)
                for s in range(lanes):
                    F[d + U(s)] = F[b + U(s)] if F[a + U(s)] != 0.0 else F[c + U(s)]
            elif op in (POSITIVE, FLOOR):
                mode = U(at_mode + K[U(k + 3)])
                if live == 1:
                    u = F[a]
                    if op == POSITIVE:
                        W[mode] = 1 if u > 0.0 else 0
                    else:
                        W[mode] = np.int64(np.floor(u)) if abs(u) < FLOOR_LIMIT else 0
                for s in range(lanes):
                    F[d + U(s)] = W[mode]
            elif op in (TABLE, TABLE_SLOPE):
                table = np.int64(K[U(k + 4)])
                mode = U(at_mode + K[U(k + 3)])
                start = at_knots + W[at_table + table]
                if live == 1:
                    W[mode] = table_segment_c(F, start, at_knots + W[at_table + table + 1], F[a])
                segment = W[mode]
                row = U(at_coef + 4 * (W[at_table + table] + table + segment))
                knot = F[start + max(segment - 1, 0)]
                c0, c1, c2, c3 = F[row], F[row + U(1)], F[row + U(2)], F[row + U(3)]
                if op == TABLE_SLOPE:
                    c0, c1, c2, c3 = c1, 2.0 * c2, 3.0 * c3, 0.0
                for s in range(lanes):
                    u = F[a + U(s)] - knot
                    F[d + U(s)] = c0 + u * (c1 + u * (c2 + u * c3))
            else:
                for s in range(lanes):
                    F[d + U(s)] = function_value_c(op, F[a + U(s)], F[b + U(s)])

    return run


run_one_c = _build_tape(1, STAMP)
run_three_c = _build_tape(3, STAMP)


def _build(stamp: int) -> Any:
    @njit(cache=True, **INNER)
    def load_point(F, W, at_x, t):
        """Put x = F[at_x:], t and the present p into the registers of a single evaluation."""
        _ = stamp
        reg = W[AT_REG]
        W[N_REG_AT_START] = 0
        F[reg + W[TIME_REG]] = t
        at = reg + W[X_REG]
        for i in range(W[SIZE_N]):
            F[at + i] = F[at_x + i]
        at, p = reg + W[P_REG], W[AT_P]
        for j in range(W[SIZE_P]):
            F[at + j] = F[p + j]

    @njit(cache=True, **INNER)
    def live_mode(F, W, s, value):
        """The mode of switch s that belongs to a watched value."""
        _ = stamp
        kind = W[W[AT_SWITCH_KIND] + s]
        if kind == SWITCH_POSITIVE:
            return WHOLE(1 if value > 0.0 else 0)
        if kind == SWITCH_FLOOR:
            return np.int64(np.floor(value)) if abs(value) < FLOOR_LIMIT else WHOLE(0)
        table = W[AT_TABLE_PTR] + W[W[AT_SWITCH_TABLE] + s]
        return table_segment_c(F, W[AT_TABLE_KNOTS] + W[table], W[AT_TABLE_KNOTS] + W[table + 1], value)

    @njit(cache=True, **KERNEL)
    def residual_at(F, W, K, at_x, live):
        """RESIDUAL at (F[at_x:], state[S_T], p) → reg; modes frozen, or live (1): following their values, which sets them."""
        _ = stamp
        load_point_c(F, W, at_x, F[S_T])
        run_one_c(F, W, K, W[AT_REG], WHOLE(0), W[W[AT_SEGMENT_END]], live)
        W[N_RESIDUALS] += 1
        if live == 1:  # also of switches that only later segments use
            for s in range(W[SIZE_S]):
                W[W[AT_MODE] + s] = live_mode_c(F, W, s, F[W[AT_REG] + W[W[AT_SWITCH_REG] + s]])

    @njit(cache=True, **KERNEL)
    def segment(F, W, K, k):
        """Operations of segment k on reg as it stands."""
        _ = stamp
        at = W[AT_SEGMENT_END] + k
        run_one_c(F, W, K, W[AT_REG], W[at - 1], W[at], WHOLE(0))

    @njit(cache=True, **INNER)
    def segment_three(F, W, K, k):
        """Operations of segment k on reg3, the three stages, as it stands."""
        _ = stamp
        at = W[AT_SEGMENT_END] + k
        run_three_c(F, W, K, W[AT_REG3], W[at - 1] if k > 0 else 0, W[at], WHOLE(0))

    @njit(cache=True, **KERNEL)
    def jacobian(F, W, K):
        """JACOBIAN on reg (run a residual first) → jac_f, jac_q."""
        _ = stamp
        segment_c(F, W, K, WHOLE(1))
        reg, jac_f, jac_q, jf_reg, jq_reg = W[AT_REG], W[AT_JAC_F], W[AT_JAC_Q], W[AT_JF_REG], W[AT_JQ_REG]
        for e in range(W[SIZE_NNZ]):
            F[jac_f + e] = F[reg + W[jf_reg + e]]
            F[jac_q + e] = F[reg + W[jq_reg + e]]
        W[N_JACOBIANS] += 1

    return load_point, live_mode, residual_at, segment, segment_three, jacobian


(load_point_c, live_mode_c, residual_at_c, segment_c, segment_three_c, jacobian_c) = _build(STAMP)


def run_residual(program: Program, work: Workspace) -> None:
    """RESIDUAL at (work.x, state[S_T], work.p, work.mode) → work.reg."""
    residual_at_c(work.F, work.W, work.K, work.W[AT_X], 0)


def run_residual_live(program: Program, work: Workspace) -> None:
    """RESIDUAL at work.x with every switch live, written to work.mode. One pass suffices: a switch's input comes before it on the tape."""
    residual_at_c(work.F, work.W, work.K, work.W[AT_X], 1)


live_modes = run_residual_live


def run_segment(program: Program, work: Workspace, k: int) -> None:
    """Operations of segment k on work.reg as it stands (0 RESIDUAL, 1 JACOBIAN, 2 OUTPUT, 3 DELAY, 4 + c CLOCK c)."""
    if k == 0:
        run_residual(program, work)
    else:
        segment_c(work.F, work.W, work.K, k)


def run_jacobian(program: Program, work: Workspace) -> None:
    """JACOBIAN on work.reg (run a residual first) → work.jac_f, work.jac_q, shape (nnz,)."""
    jacobian_c(work.F, work.W, work.K)


def outside_table(program: Program, work: Workspace) -> int:
    """A switch whose closed table is read outside its knots, or -1."""
    head = work.W
    for s in range(head[SIZE_S]):
        if head[head[AT_SWITCH_KIND] + s] == SWITCH_TABLE:
            table = head[head[AT_SWITCH_TABLE] + s]
            last = head[head[AT_TABLE_PTR] + table + 1] - head[head[AT_TABLE_PTR] + table]
            if head[head[AT_TABLE_CLOSED] + table] != 0 and work.mode[s] in (0, last):
                return s
    return -1
