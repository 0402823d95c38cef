"""Everything that one run needs and changes, as named arrays that are views of the kernels' few flat arenas (layout.py). Free of numba.

One Workspace belongs to one run; kernels write into its arrays and never allocate. Numbers that change are entries of two
arrays: `state` (floats, indices S_...) and `counter` (whole numbers, indices N_...). To continue after a "full" status, `grow` gives a
workspace with larger buffers and the same contents.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from polewise.kernels import layout
from polewise.kernels.opcodes import Status
from polewise.kernels.program import FloatArray, IntArray, Program

# ---- indices of Workspace.state (float64). "in": set from Python before a run or between calls; others belong to the kernels
S_T: Final = 0  # in: present time, s
S_H: Final = 1  # in: step size proposed for the next step, s; 0 lets the kernel choose
S_H_LAST: Final = 2  # size of the last accepted step, s
S_H_MAX: Final = 3  # in: largest step, s
S_H_MIN: Final = 4  # in: smallest step, s; 0 means some units in the last place of t
S_RTOL: Final = 5  # relative tolerance as asked for
S_TOL: Final = 6  # tolerance of the error test, made from rtol (method.py); weights are tol * (|x| + scale)
S_NEWTON_TOL: Final = 7  # Newton stops when the estimated error of the stages is below this, in error weights
S_ERROR: Final = 8  # error norm of the last attempt, 1 is the limit
S_ERROR_ACCEPTED: Final = 9  # error norm and size of the last accepted full step, for the predictive controller
S_H_ACCEPTED: Final = 10
S_ETA: Final = 11  # theta / (1 - theta) of the last Newton iteration, carried over to the next step
S_THETA: Final = 12  # convergence rate of the last Newton iteration
S_H_FACTORS: Final = 13  # step size of the present factors, s
S_RECORD_EVERY: Final = 14  # in: smallest distance of recorded step ends, s; 0 records all
S_RECORD_T: Final = 15  # time of the last recorded row
S_CHATTER_WINDOW: Final = 16  # in: stretch of time in which at most N_CHATTER_LIMIT flips may be located, s
S_CHATTER_T: Final = 17  # start of the present stretch
S_HISTORY_T0: Final = 18  # in: time before which delayed expressions follow value0 + slope0 * (t - t0)
S_H_FREE: Final = 19  # step the controller wanted before a stop, a tick or an event cut it
S_NEWTON_ITERATIONS: Final = 20  # iterations of the last attempt
S_H_TICK: Final = 22  # size wished for after the first step of the last sample interval, 0 unknown
S_BAND: Final = 21  # factor on switch_scale: a mode is violated only beyond switch_scale * S_BAND
S_COUNT: Final = 32

# ---- indices of Workspace.counter (int64): counts first, then flags and positions
N_STEPS: Final = 0  # accepted steps
N_REJECTED: Final = 1  # attempts rejected by the error test
N_NEWTON_FAILED: Final = 2  # attempts in which Newton did not converge or met a value that is not finite
N_RESIDUALS: Final = 3  # residual evaluations, a stage counting one
N_JACOBIANS: Final = 4
N_FACTORISATIONS: Final = 5  # pairs of real and complex factorisations
N_PIVOT_SEARCHES: Final = 6
N_SOLVES: Final = 7  # Newton iterations in steps
N_EVENTS: Final = 8  # located flips of switches
N_TICKS: Final = 9  # instants at which clocks fired
N_RESTARTS: Final = 10
N_RELOCATIONS: Final = 11  # steps attempted again to locate a flip
N_WORST: Final = 16  # unknown with the largest error or Newton correction in the last attempt
N_WORST_SWITCH: Final = 17  # switch of CHATTER and OUTSIDE_TABLE
N_SINGULAR: Final = 18  # unknown (column) in which the last factorisation found no pivot
N_MADE_JUMP: Final = 19  # in: 1 after x, p or a mode changed otherwise than by a step: start values are not extrapolated
N_NEEDS_RESTART: Final = 20  # in: 1 makes advance call restart first
N_START_READY: Final = 21  # 1 while f_start, q_start belong to the present x, t, p, mode; set 0 after changing any of them
N_HAVE_STAGES: Final = 22  # 1 while `stage` is the last accepted step, for extrapolation and dense output
N_JACOBIAN_AGE: Final = 23  # 0 none, 1 from an earlier point, 2 of the present point
N_FACTORS_READY: Final = 24  # 1 while the factors belong to the present Jacobian and to S_H_FACTORS
N_FIRST: Final = 25  # 1 until a step is accepted after a jump
N_LAST_REJECTED: Final = 26
N_ROWS: Final = 27  # in: rows in the record buffer; Python sets 0 after emptying it
N_RECORD_STAGES: Final = 28  # in: 1 records the two inner stage points of each step too
N_RECORD: Final = 29  # in: 0 switches recording off
N_HISTORY_FIRST: Final = 30  # ring of history pieces: oldest piece and number of pieces
N_HISTORY_COUNT: Final = 31
N_BREAKS: Final = 32  # number of pending breaking points
N_STOP: Final = 33  # in: set to 1 from outside (another thread, a signal handler) to stop
N_FLIPS: Final = 34  # unused
N_CHATTER_LIMIT: Final = 35  # in
N_REG_AT_START: Final = 36  # 1 while work.reg holds RESIDUAL at the step's start
N_RESTART_FACTORS: Final = 37  # 1 while the factors of `restart` may be used again
N_AFTER_TICK: Final = 40  # 1 until the first step after a sample instant is accepted
N_LOCATED: Final = 39  # located instants of flips in the present stretch
N_FULL_FACTORS: Final = 38  # which factors were full: 0 real, 1 complex, 2 restart
N_COUNT: Final = 48

# ---- values of the flag column of the record
FLAG_STAGE: Final = 0.0  # inner stage point
FLAG_STEP: Final = 1.0  # end of a step
FLAG_BEFORE: Final = 2.0  # just before a jump
FLAG_AFTER: Final = 3.0  # just after a jump

ERROR_FACTOR: Final = 0.3  # measured so that runs end with errors of about rtol, docs/numerics.md
NEWTON_PART: Final = 0.01  # of rtol: error that Newton may leave in a step
NEWTON_LOOSEST: Final = 0.03  # of the error weights, whatever rtol
NEWTON_FLOOR: Final = 10 * 2.2e-16  # rounding
BAND_RELATIVE: Final = 1e-12  # what Program.switch_scale is of a watched value's size; S_BAND widens it to the error Newton leaves
HISTORY_CAPACITY: Final = 1024
BREAK_CAPACITY: Final = 2048


class Workspace(NamedTuple):
    """State and scratch of one run. "in": may be set from Python between calls of kernels; the others are for reading.

    program: what it was made for. F, W, C, K: the arenas (layout.py) that all the other arrays are views of.
    state (S_COUNT,), counter (N_COUNT,): see the index names above.
    x (n,), p (n_p,), mode (n_s,): in. q_keep (n,): in, charges that `restart` keeps; the kernels set it to q(x) after every step.
    reg (n_reg,): registers of a single evaluation. reg3 (n_reg, 3): of the three stages.
    in_error (n,): in, 0 takes an unknown out of the error test.
    flipped (n_s,): how often each switch flipped since the start of the last `advance`.
    f_start, q_start (n,): f and q at the start of the step. stage (n, 3): X_i - x of the last attempt. x_old (n,), stage_old (n, 3): start and stages
        of the last accepted step. jac_f, jac_q (nnz,): Jacobians. dx (n,): last error estimate.
    clock_count (n_clocks,): in, number of the next firing of each clock; clock_offset (n_clocks,): in, instant of firing 0.
    delay_value0, delay_slope0 (n_delay,): in, history before S_HISTORY_T0. history_t, history_h (capacity,), history_v (capacity, n_delay, 4):
        accepted steps as a ring; values at 0, c1, c2, 1. history_start (n_delay,): delayed expressions at the start of the next step.
    break_t (BREAK_CAPACITY,): pending breaking points, sorted. record (rows, 2 + n_out): time, flag, outputs.
    """

    program: Program
    F: FloatArray
    W: IntArray
    C: NDArray[np.complex128]
    K: NDArray[np.int32]
    state: FloatArray
    counter: IntArray
    x: FloatArray
    p: FloatArray
    mode: IntArray
    q_keep: FloatArray
    reg: FloatArray
    reg3: FloatArray
    in_error: FloatArray
    flipped: IntArray
    f_start: FloatArray
    q_start: FloatArray
    stage: FloatArray
    x_old: FloatArray
    stage_old: FloatArray
    jac_f: FloatArray
    jac_q: FloatArray
    dx: FloatArray
    clock_count: IntArray
    clock_offset: FloatArray
    delay_value0: FloatArray
    delay_slope0: FloatArray
    history_t: FloatArray
    history_h: FloatArray
    history_v: FloatArray
    history_start: FloatArray
    break_t: FloatArray
    record: FloatArray


_VIEWS: Final = tuple(name for name in Workspace._fields if name not in ("program", "F", "W", "C", "K", "state", "counter"))


def kernel_program(program: Program) -> Program:
    """The program as the kernels take it. They run a copy kept in the workspace, so this is the program itself."""
    return program


def error_tolerance(rtol: float) -> float:
    """Tolerance of the error test. The estimate falls as h^4, the error of a run as h^5: its tolerance^(5/4) is proportional to rtol."""
    return float(ERROR_FACTOR * rtol**0.8)


def newton_tolerance(rtol: float) -> float:
    """When Newton stops, in units of the error weights: what is left must be a small part of rtol, not of the looser error test."""
    tolerance = error_tolerance(rtol)
    return max(NEWTON_FLOOR / tolerance, min(NEWTON_LOOSEST, NEWTON_PART * float(rtol) / tolerance))


class _Sizes(NamedTuple):
    """Capacities of the parts that can grow."""

    record: int
    history: int
    factors: int


def make_workspace(
    program: Program,
    rtol: float = 1e-6,
    *,
    order: IntArray | None = None,
    fill: int | None = None,
    record_rows: int = 4096,
    history: int = HISTORY_CAPACITY,
) -> Workspace:
    """A fresh workspace: x, p, modes zero, t = 0, nothing recorded.

    Args:
        rtol: relative tolerance; each unknown's absolute one is rtol * scale.
        order: shape (n,), order of elimination of the columns (solve.ordering); None: as they stand.
        fill: entries to make room for in L and U together; None: generous guess.
    """
    n, nnz = program.n, len(program.row_idx)
    room = n * (n - 1) // 2 if n <= 64 else max(4 * nnz + 4 * n, 2 * (fill or 0))
    sizes = _Sizes(record=max(record_rows, 16), history=history if len(program.delay_p) else 1, factors=max(room, 1))
    column_order = np.arange(n, dtype=np.int64) if order is None else np.asarray(order, dtype=np.int64)
    work = _allocate(program, sizes, column_order)
    work.reg[: program.n_const] = program.constants
    work.reg3[: program.n_const] = program.constants[:, None]
    work.in_error[:] = 1.0
    set_tolerance(work, rtol)
    work.state[S_H_MAX] = np.inf
    work.state[S_CHATTER_WINDOW] = 1e-6
    work.state[S_CHATTER_T] = -np.inf
    work.state[S_RECORD_T] = -np.inf
    work.state[S_ETA] = 1.0
    work.counter[N_CHATTER_LIMIT] = 1000
    work.counter[N_MADE_JUMP] = 1
    work.counter[N_FIRST] = 1
    work.counter[N_RECORD] = 1
    work.counter[N_RECORD_STAGES] = 1
    return work


def set_tolerance(work: Workspace, rtol: float) -> None:
    """Set the relative tolerance of the coming steps."""
    tolerance = error_tolerance(rtol)
    work.state[S_RTOL] = rtol
    work.state[S_TOL] = tolerance
    work.state[S_NEWTON_TOL] = newton_tolerance(rtol)
    work.state[S_BAND] = max(1.0, tolerance * work.state[S_NEWTON_TOL] / BAND_RELATIVE)


def grow(program: Program, work: Workspace, status: int) -> Workspace:
    """A workspace with twice the room that a status asked for and the same contents; the old one must not be used again."""
    head = work.W
    sizes = _Sizes(int(head[layout.SIZE_RECORD]), int(head[layout.SIZE_HISTORY]), int(head[layout.SIZE_FACTORS]))
    if status == Status.HISTORY_FULL:
        sizes = sizes._replace(history=2 * sizes.history)
    elif status == Status.FACTORS_FULL:
        sizes = sizes._replace(factors=2 * sizes.factors)
    elif status == Status.BUFFER_FULL:
        sizes = sizes._replace(record=2 * sizes.record)
    at = int(head[layout.REAL + layout.LU_ORDER])
    new = _allocate(program, sizes, head[at : at + program.n].copy())
    new.state[:], new.counter[:] = work.state, work.counter
    for name in _VIEWS:
        if not name.startswith("history_") or name == "history_start":
            old = getattr(work, name)
            getattr(new, name)[: len(old)] = old
    first, count = int(work.counter[N_HISTORY_FIRST]), int(work.counter[N_HISTORY_COUNT])
    take = (first + np.arange(count)) % len(work.history_t)
    for name in ("history_t", "history_h", "history_v"):
        getattr(new, name)[:count] = getattr(work, name)[take]
    new.counter[N_HISTORY_FIRST] = 0
    at_level = (head[layout.AT_BREAK_LEVEL], new.W[layout.AT_BREAK_LEVEL])
    new.W[at_level[1] : at_level[1] + BREAK_CAPACITY] = work.W[at_level[0] : at_level[0] + BREAK_CAPACITY]
    at_scale = (head[layout.AT_SCALE], new.W[layout.AT_SCALE])
    new.F[at_scale[1] : at_scale[1] + program.n] = work.F[at_scale[0] : at_scale[0] + program.n]
    new.counter[N_FACTORS_READY] = 0
    new.counter[N_RESTART_FACTORS] = 0
    new.counter[N_JACOBIAN_AGE] = 0
    return new


def _allocate(program: Program, sizes: _Sizes, order: IntArray) -> Workspace:
    """Lay out the arenas, copy the program in, make the views."""
    n, nnz, n_s = program.n, len(program.row_idx), len(program.switch_reg)
    n_delay, n_out, n_clock, n_reg = len(program.delay_p), len(program.out_reg), len(program.clock_period), program.n_reg
    whole: dict[int, Any] = {  # blocks of W: contents, or a length to be zero
        layout.AT_SEGMENT_END: program.segment_end,
        layout.AT_F_REG: program.f_reg,
        layout.AT_Q_REG: program.q_reg,
        layout.AT_COL_PTR: program.col_ptr,
        layout.AT_ROW_IDX: program.row_idx,
        layout.AT_JF_REG: program.jf_reg,
        layout.AT_JQ_REG: program.jq_reg,
        layout.AT_SWITCH_KIND: program.switch_kind,
        layout.AT_SWITCH_REG: program.switch_reg,
        layout.AT_SWITCH_TABLE: program.switch_table,
        layout.AT_SWITCH_WATCHED: program.switch_watched,
        layout.AT_TABLE_PTR: program.table_ptr,
        layout.AT_TABLE_CLOSED: program.table_closed,
        layout.AT_OUT_REG: program.out_reg,
        layout.AT_DELAY_IN_REG: program.delay_in_reg,
        layout.AT_DELAY_P: program.delay_p,
        layout.AT_CLOCK_PTR: program.clock_ptr,
        layout.AT_CLOCK_P: program.clock_p,
        layout.AT_CLOCK_REG: program.clock_reg,
        layout.AT_CLOCK_RANK: program.clock_rank,
        layout.AT_ALGEBRAIC: _algebraic(program),
        layout.AT_MODE: n_s,
        layout.AT_FLIPPED: n_s,
        layout.AT_CANDIDATE: n_s,
        layout.AT_CLOCK_COUNT: n_clock,
        layout.AT_BREAK_LEVEL: BREAK_CAPACITY,
    }
    real: dict[int, Any] = {  # blocks of F
        layout.AT_SWITCH_SCALE: program.switch_scale,
        layout.AT_TABLE_KNOTS: program.table_knots,
        layout.AT_TABLE_COEF: program.table_coef,
        layout.AT_DELAY_S: program.delay_s,
        layout.AT_CLOCK_PERIOD: program.clock_period,
        layout.AT_SCALE: program.scale,
        layout.AT_REG: n_reg,
        layout.AT_REG3: 3 * n_reg,
        layout.AT_P: program.n_p,
        layout.AT_SWITCH_NOW: n_s,
        layout.AT_CLOCK_OFFSET: n_clock,
        layout.AT_CLOCK_VALUE: len(program.clock_p),
        layout.AT_DELAY_VALUE0: n_delay,
        layout.AT_DELAY_SLOPE0: n_delay,
        layout.AT_HISTORY_T: sizes.history,
        layout.AT_HISTORY_H: sizes.history,
        layout.AT_HISTORY_V: sizes.history * n_delay * 4,
        layout.AT_HISTORY_START: n_delay,
        layout.AT_BREAK_T: BREAK_CAPACITY,
        layout.AT_RECORD: sizes.record * (2 + n_out),
    }
    for at in (layout.AT_JAC_F, layout.AT_JAC_Q, layout.AT_MATRIX, layout.AT_RESTART_MATRIX):
        real[at] = nnz
    for at in (layout.AT_STAGE, layout.AT_STAGE_OLD):
        real[at] = 3 * n
    for at in _FLOAT_VECTORS:
        real[at] = n
    twin: dict[int, Any] = {layout.AT_MATRIX_COMPLEX: nnz, layout.AT_RHS_COMPLEX: n}  # blocks of C
    for base, values in ((layout.REAL, real), (layout.COMPLEX, twin), (layout.RESTART, real)):
        whole[base + layout.LU_ORDER] = order
        for part in (layout.LU_PLACE, layout.LU_MARK, layout.LU_PAUSE):
            whole[base + part] = n
        whole[base + layout.LU_STACK] = 2 * n
        for part in (layout.LU_L_PTR, layout.LU_U_PTR):
            whole[base + part] = n + 1
        for part in (layout.LU_L_ROW, layout.LU_U_ROW):
            whole[base + part] = sizes.factors
        for part in (layout.LU_L_VAL, layout.LU_U_VAL):
            values[base + part] = sizes.factors
        for part in (layout.LU_PIVOT_INVERSE, layout.LU_DENSE):
            values[base + part] = n

    offsets: dict[int, int] = {}
    arena_f = _fill(real, S_COUNT, offsets, np.float64)
    arena_c = _fill(twin, 0, offsets, np.complex128)
    arena_w = _fill(whole, layout.BLOCKS, offsets, np.int64)
    for index, offset in offsets.items():
        arena_w[index] = offset
    for index, size in (
        (layout.SIZE_N, n),
        (layout.SIZE_NNZ, nnz),
        (layout.SIZE_P, program.n_p),
        (layout.SIZE_REG, n_reg),
        (layout.SIZE_S, n_s),
        (layout.SIZE_OUT, n_out),
        (layout.SIZE_DELAY, n_delay),
        (layout.SIZE_CLOCK, n_clock),
        (layout.TIME_REG, program.time_reg),
        (layout.X_REG, program.x_reg),
        (layout.P_REG, program.p_reg),
        (layout.SIZE_HISTORY, sizes.history),
        (layout.SIZE_RECORD, sizes.record),
        (layout.SIZE_FACTORS, sizes.factors),
        (layout.SIZE_BREAK, BREAK_CAPACITY),
    ):
        arena_w[index] = size
    tape = np.stack([program.op, program.dst, program.a, program.b, program.c], axis=1).astype(np.int32).reshape(-1)

    def f(at: int, *shape: int) -> FloatArray:
        size = int(np.prod(shape))
        return arena_f[offsets[at] : offsets[at] + size].reshape(shape)

    def i(at: int, size: int) -> IntArray:
        return arena_w[offsets[at] : offsets[at] + size]

    return Workspace(
        program=program,
        F=arena_f,
        W=arena_w,
        C=arena_c,
        K=tape,
        state=arena_f[:S_COUNT],
        counter=arena_w[:N_COUNT],
        x=f(layout.AT_X, n),
        p=f(layout.AT_P, program.n_p),
        mode=i(layout.AT_MODE, n_s),
        q_keep=f(layout.AT_Q_KEEP, n),
        reg=f(layout.AT_REG, n_reg),
        reg3=f(layout.AT_REG3, n_reg, 3),
        in_error=f(layout.AT_IN_ERROR, n),
        flipped=i(layout.AT_FLIPPED, n_s),
        f_start=f(layout.AT_F_START, n),
        q_start=f(layout.AT_Q_START, n),
        stage=f(layout.AT_STAGE, n, 3),
        x_old=f(layout.AT_X_OLD, n),
        stage_old=f(layout.AT_STAGE_OLD, n, 3),
        jac_f=f(layout.AT_JAC_F, nnz),
        jac_q=f(layout.AT_JAC_Q, nnz),
        dx=f(layout.AT_DX, n),
        clock_count=i(layout.AT_CLOCK_COUNT, n_clock),
        clock_offset=f(layout.AT_CLOCK_OFFSET, n_clock),
        delay_value0=f(layout.AT_DELAY_VALUE0, n_delay),
        delay_slope0=f(layout.AT_DELAY_SLOPE0, n_delay),
        history_t=f(layout.AT_HISTORY_T, sizes.history),
        history_h=f(layout.AT_HISTORY_H, sizes.history),
        history_v=f(layout.AT_HISTORY_V, sizes.history, n_delay, 4),
        history_start=f(layout.AT_HISTORY_START, n_delay),
        break_t=f(layout.AT_BREAK_T, BREAK_CAPACITY),
        record=f(layout.AT_RECORD, sizes.record, 2 + n_out),
    )


def _algebraic(program: Program) -> IntArray:
    """1 for each unknown that no charge depends on."""
    zero = program.constants == 0.0
    is_zero = np.zeros(program.n_reg, dtype=bool)
    is_zero[: program.n_const] = zero
    moves = ~is_zero[program.jq_reg] & (program.q_reg[program.row_idx] >= 0)
    column = np.repeat(np.arange(program.n), np.diff(program.col_ptr))
    algebraic: IntArray = (np.bincount(column[moves], minlength=program.n) == 0).astype(np.int64)
    return algebraic


_FLOAT_VECTORS: Final = (
    layout.AT_X,
    layout.AT_Q_KEEP,
    layout.AT_F_START,
    layout.AT_Q_START,
    layout.AT_X_OLD,
    layout.AT_WEIGHT,
    layout.AT_IN_ERROR,
    layout.AT_ROW_SCALE,
    layout.AT_RHS,
    layout.AT_RESTART_SCALE,
    layout.AT_X_TRY,
    layout.AT_DX,
    layout.AT_DX_TRY,
)


def _fill(blocks: Mapping[int, Any], first: int, offsets: dict[int, int], dtype: Any) -> NDArray[Any]:
    """One arena with the blocks in it from `first` on; their places go to `offsets`."""
    contents = {at: np.ravel(np.asarray(block)) if isinstance(block, np.ndarray) else block for at, block in blocks.items()}
    place = first
    for at, block in contents.items():
        offsets[at] = place
        place += block if isinstance(block, int) else len(block)
    arena = np.zeros(place, dtype=dtype)
    for at, block in contents.items():
        if not isinstance(block, int):
            arena[offsets[at] : offsets[at] + len(block)] = block
    return arena
