"""The record buffer: rows of time, flag and outputs."""

from __future__ import annotations

from typing import Any

from numba import njit

from polewise.kernels.build import INNER, KERNEL
from polewise.kernels.layout import AT_OUT_REG, AT_RECORD, AT_REG, AT_REG3, AT_X, SIZE_OUT, SIZE_RECORD
from polewise.kernels.program import Program
from polewise.kernels.radau import C1, C2
from polewise.kernels.stamp import STAMP
from polewise.kernels.tape import WHOLE, residual_at_c, segment_c, segment_three_c
from polewise.kernels.workspace import (
    FLAG_BEFORE,
    FLAG_STAGE,
    N_RECORD_STAGES,
    N_REG_AT_START,
    N_ROWS,
    S_RECORD_EVERY,
    S_RECORD_T,
    S_T,
    Workspace,
)


def _build(stamp: int) -> Any:
    @njit(cache=True, **INNER)
    def write_row(F, W, t, flag, reg, lanes):
        """Append a row from the registers at F[reg:], `lanes` apart. Without room the row is dropped: callers keep some."""
        _ = stamp
        n_out, out_reg = W[SIZE_OUT], W[AT_OUT_REG]
        if W[N_ROWS] >= W[SIZE_RECORD]:
            return
        row = W[AT_RECORD] + W[N_ROWS] * (2 + n_out)
        W[N_ROWS] += 1
        F[row] = t
        F[row + 1] = flag
        for k in range(n_out):
            F[row + 2 + k] = F[reg + lanes * W[out_reg + k]]
        F[S_RECORD_T] = t

    @njit(cache=True, **KERNEL)
    def record_point(F, W, K, flag):
        """Append a row at the present point (runs RESIDUAL, OUTPUT)."""
        _ = stamp
        if W[N_REG_AT_START] == 0:
            residual_at_c(F, W, K, W[AT_X], WHOLE(0))
        segment_c(F, W, K, WHOLE(2))
        write_row_c(F, W, F[S_T], flag, W[AT_REG], WHOLE(1))

    @njit(inline="always")
    def record_step(F, W, K, h, t_new, flag):
        """Append the attempted step's end, and its inner stage points if asked for, from reg3 (runs OUTPUT)."""
        _ = stamp
        if F[S_RECORD_EVERY] > 0.0 and t_new - F[S_RECORD_T] < F[S_RECORD_EVERY] and flag != FLAG_BEFORE:
            return
        segment_three_c(F, W, K, WHOLE(2))
        if W[N_RECORD_STAGES] != 0:
            write_row_c(F, W, F[S_T] + C1 * h, FLAG_STAGE, W[AT_REG3], WHOLE(3))
            write_row_c(F, W, F[S_T] + C2 * h, FLAG_STAGE, W[AT_REG3] + 1, WHOLE(3))
        write_row_c(F, W, t_new, flag, W[AT_REG3] + 2, WHOLE(3))

    return write_row, record_point, record_step


(write_row_c, record_point_c, record_step_c) = _build(STAMP)


def record_point(program: Program, work: Workspace, flag: float) -> None:
    """Append a row with `flag` (workspace.FLAG_...) at the present point. Without room in the buffer it is dropped."""
    work.counter[N_REG_AT_START] = 0
    record_point_c(work.F, work.W, work.K, flag)
