"""Everything that changes during one run, as plain arrays: the state, the stages, the factors, the history, the record buffer.

Free of numba. One Workspace belongs to one run; kernels write into its arrays and never allocate. Numbers that change are entries of two
arrays: `state` (floats, indices S_...) and `counter` (whole numbers, indices N_...). To continue after a "full" status, `grow` gives a
workspace with larger buffers and everything else shared.
"""

from __future__ import annotations

from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

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
S_CHATTER_WINDOW: Final = 16  # in: stretch of time in which at most N_CHATTER_LIMIT flips may happen, s
S_CHATTER_T: Final = 17  # start of the present stretch
S_HISTORY_T0: Final = 18  # in: time before which delayed expressions follow value0 + slope0 * (t - t0)
S_H_FREE: Final = 19  # step the controller wanted before a stop, a tick or an event cut it
S_NEWTON_ITERATIONS: Final = 20  # iterations of the last attempt
S_DRIFT: Final = 21  # unused
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
N_FLIPS: Final = 34  # flips in the present stretch
N_CHATTER_LIMIT: Final = 35  # in
N_FACTORS_JUMPED: Final = 36  # unused
N_RESTART_FACTORS: Final = 37  # 1 while the factors of `restart` may be used again
N_FULL_FACTORS: Final = 38  # which factors were full: 0 real, 1 complex, 2 restart
N_EXPERIMENT: Final = 39  # unused
N_COUNT: Final = 48

# ---- values of the flag column of the record
FLAG_STAGE: Final = 0.0  # inner stage point
FLAG_STEP: Final = 1.0  # end of a step
FLAG_BEFORE: Final = 2.0  # just before a jump
FLAG_AFTER: Final = 3.0  # just after a jump

HISTORY_CAPACITY: Final = 1024
BREAK_CAPACITY: Final = 2048


class Factors(NamedTuple):
    """Sparse factors of one matrix A (rows scaled), columns in a fixed order: A[row, order] = L U with unit L. Format: see lu.py.

    order (n,): column that is eliminated k-th. place (n,): position of row i among the pivots, -1 while unknown.
    l_ptr, u_ptr (n+1,); l_row, u_row: positions; l_val, u_val: values; strictly below and above the diagonal. pivot_inverse (n,).
    dense (n,): zero between calls. mark, stack, pause (n,): work of the pivot search. info (4,): [pattern known, column without pivot, 0, 0].
    """

    order: IntArray
    place: IntArray
    l_ptr: IntArray
    l_row: IntArray
    l_val: NDArray[Any]
    u_ptr: IntArray
    u_row: IntArray
    u_val: NDArray[Any]
    pivot_inverse: NDArray[Any]
    dense: NDArray[Any]
    mark: IntArray
    stack: IntArray
    pause: IntArray
    info: IntArray


class Workspace(NamedTuple):
    """State and scratch of one run. Entries marked "in" may be set from Python between calls of kernels.

    state (S_COUNT,), counter (N_COUNT,): see the index names above.
    code (n_ops, 5) int32: the tape packed by operation. reg (n_reg,): registers of a single evaluation; reg3 (3 n_reg,): of the three stages,
        register r of stage s at 3 r + s.
    x (n,), p (n_p,), mode (n_s,): in. q_keep (n,): in, charges that `restart` keeps; the kernels set it to q(x) after every step.
    flipped (n_s,): how often each switch flipped since the start of the last `advance`.
    f_start, q_start (n,): f and q at the start of the step. stage (n, 3): X_i - x of the last attempt. x_old (n,), stage_old (n, 3): start and stages
        of the last accepted step. weight (n,): 1 / (tol (|x| + scale)). in_error (n,): in, 0 takes an unknown out of the error test.
    jac_f, jac_q (nnz,), row_scale (n,), matrix_real, matrix_complex (nnz,), the factors and right sides.
    restart_*: the same for consistent restarts. x_try, dx, dx_try (n,): scratch.
    switch_now, switch_start (n_s,): violation of each switch (see switches.py) at some point and at the step's start. candidate (n_s,): scratch.
    clock_count (n_clocks,): in, number of the next firing of each clock; clock_offset (n_clocks,): in, instant of firing 0;
        clock_value: new values between reading and writing.
    delay_value0, delay_slope0 (n_delay,): in, history before S_HISTORY_T0. history_t, history_h (capacity,), history_v (capacity, n_delay, 4): accepted steps
        as a ring; values at 0, c1, c2, 1. history_start (n_delay,): delayed expressions at the start of the step.
    break_t, break_level (BREAK_CAPACITY,): pending breaking points, sorted by time.
    record (rows, 2 + n_out): time, flag, outputs.
    """

    state: FloatArray
    counter: IntArray
    code: NDArray[np.int32]
    reg: FloatArray
    reg3: FloatArray
    x: FloatArray
    p: FloatArray
    mode: IntArray
    q_keep: FloatArray
    flipped: IntArray
    f_start: FloatArray
    q_start: FloatArray
    stage: FloatArray
    x_old: FloatArray
    stage_old: FloatArray
    weight: FloatArray
    in_error: FloatArray
    jac_f: FloatArray
    jac_q: FloatArray
    row_scale: FloatArray
    matrix_real: FloatArray
    matrix_complex: NDArray[np.complex128]
    real: Factors
    complex: Factors
    rhs_real: FloatArray
    rhs_complex: NDArray[np.complex128]
    restart_matrix: FloatArray
    restart_scale: FloatArray
    restart_factors: Factors
    x_try: FloatArray
    dx: FloatArray
    dx_try: FloatArray
    switch_now: FloatArray
    switch_start: FloatArray
    candidate: IntArray
    clock_count: IntArray
    clock_offset: FloatArray
    clock_value: FloatArray
    delay_value0: FloatArray
    delay_slope0: FloatArray
    history_t: FloatArray
    history_h: FloatArray
    history_v: FloatArray
    history_start: FloatArray
    break_t: FloatArray
    break_level: IntArray
    record: FloatArray


def kernel_program(program: Program) -> Program:
    """The same program with every array contiguous, writable and of the kernels' types, so that one compiled build serves all."""
    fixed: list[Any] = []
    for name, value in zip(Program._fields, program):
        if isinstance(value, np.ndarray):
            dtype = np.int64 if np.issubdtype(value.dtype, np.integer) or value.dtype == bool else np.float64
            if name in _FLOAT_FIELDS:
                dtype = np.float64
            array = np.ascontiguousarray(value, dtype=dtype)
            if name == "table_coef":
                array = array.reshape(-1, 4)
            fixed.append(array if array.flags.writeable else array.copy())
        else:
            fixed.append(int(value))
    return Program(*fixed)


_FLOAT_FIELDS: Final = frozenset({"constants", "switch_scale", "table_knots", "table_coef", "delay_s", "clock_period", "scale"})


def error_tolerance(rtol: float) -> float:
    """Tolerance of the error test: the estimate is of order 3, the solution of order 5, so a looser test delivers errors of about rtol.

    Source: Hairer & Wanner, Solving Ordinary Differential Equations II, 2nd ed., IV.8 (code's notes); the constant measured here, docs/numerics.md.
    """
    return 0.1 * float(rtol) ** (2.0 / 3.0)


def newton_tolerance(tolerance: float) -> float:
    """When Newton stops, in units of the error weights. Source: Hairer & Wanner II, IV.8, (8.11) and the text below it."""
    return float(max(10 * 2.2e-16 / tolerance, min(0.03, tolerance**0.5)))


def make_workspace(
    program: Program,
    rtol: float = 1e-6,
    *,
    order: IntArray | None = None,
    fill: int | None = None,
    record_rows: int = 4096,
    history: int = HISTORY_CAPACITY,
) -> Workspace:
    """A fresh workspace: x, p, modes zero, t = 0, nothing recorded. Use `kernel_program(program)` for both this and the kernels.

    Args:
        rtol: relative tolerance; each unknown's absolute one is rtol * scale.
        order: shape (n,), order of elimination of the columns (solve.ordering); None: as they stand.
        fill: entries to make room for in L and U together; None: generous guess.
    """
    n, nnz, n_s = program.n, len(program.row_idx), len(program.switch_reg)
    n_delay, n_out, n_clocks = len(program.delay_p), len(program.out_reg), len(program.clock_period)
    f8, i8 = np.float64, np.int64
    column_order = np.arange(n, dtype=i8) if order is None else np.ascontiguousarray(order, dtype=i8).copy()
    room = n * (n - 1) // 2 if n <= 64 else max(4 * nnz + 4 * n, 2 * (fill or 0))
    code = np.empty((len(program.op), 5), dtype=np.int32)
    for column, source in enumerate((program.op, program.dst, program.a, program.b, program.c)):
        code[:, column] = source
    reg = np.zeros(program.n_reg, dtype=f8)
    reg[: program.n_const] = program.constants
    work = Workspace(
        state=np.zeros(S_COUNT, dtype=f8),
        counter=np.zeros(N_COUNT, dtype=i8),
        code=code,
        reg=reg,
        reg3=np.repeat(reg, 3),
        x=np.zeros(n, dtype=f8),
        p=np.zeros(program.n_p, dtype=f8),
        mode=np.zeros(n_s, dtype=i8),
        q_keep=np.zeros(n, dtype=f8),
        flipped=np.zeros(n_s, dtype=i8),
        f_start=np.zeros(n, dtype=f8),
        q_start=np.zeros(n, dtype=f8),
        stage=np.zeros((n, 3), dtype=f8),
        x_old=np.zeros(n, dtype=f8),
        stage_old=np.zeros((n, 3), dtype=f8),
        weight=np.ones(n, dtype=f8),
        in_error=np.ones(n, dtype=f8),
        jac_f=np.zeros(nnz, dtype=f8),
        jac_q=np.zeros(nnz, dtype=f8),
        row_scale=np.ones(n, dtype=f8),
        matrix_real=np.zeros(nnz, dtype=f8),
        matrix_complex=np.zeros(nnz, dtype=np.complex128),
        real=_make_factors(column_order, room, f8),
        complex=_make_factors(column_order, room, np.complex128),
        rhs_real=np.zeros(n, dtype=f8),
        rhs_complex=np.zeros(n, dtype=np.complex128),
        restart_matrix=np.zeros(nnz, dtype=f8),
        restart_scale=np.ones(n, dtype=f8),
        restart_factors=_make_factors(column_order, room, f8),
        x_try=np.zeros(n, dtype=f8),
        dx=np.zeros(n, dtype=f8),
        dx_try=np.zeros(n, dtype=f8),
        switch_now=np.zeros(n_s, dtype=f8),
        switch_start=np.zeros(n_s, dtype=f8),
        candidate=np.zeros(n_s, dtype=i8),
        clock_count=np.zeros(n_clocks, dtype=i8),
        clock_offset=np.zeros(n_clocks, dtype=f8),
        clock_value=np.zeros(len(program.clock_p), dtype=f8),
        delay_value0=np.zeros(n_delay, dtype=f8),
        delay_slope0=np.zeros(n_delay, dtype=f8),
        history_t=np.zeros(history, dtype=f8),
        history_h=np.zeros(history, dtype=f8),
        history_v=np.zeros((history if n_delay else 0, n_delay, 4), dtype=f8),
        history_start=np.zeros(n_delay, dtype=f8),
        break_t=np.zeros(BREAK_CAPACITY, dtype=f8),
        break_level=np.zeros(BREAK_CAPACITY, dtype=i8),
        record=np.zeros((max(record_rows, 16), 2 + n_out), dtype=f8),
    )
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
    work.state[S_NEWTON_TOL] = newton_tolerance(tolerance)


def grow(work: Workspace, status: int) -> Workspace:
    """The workspace with twice the room that a status asked for; all other arrays are shared with the old one, which must not be used again."""
    if status == Status.HISTORY_FULL:
        first, count = int(work.counter[N_HISTORY_FIRST]), int(work.counter[N_HISTORY_COUNT])
        old = len(work.history_t)
        take = (first + np.arange(count)) % old
        t, h = np.zeros(2 * old), np.zeros(2 * old)
        v = np.zeros((2 * old, work.history_v.shape[1], 4))
        t[:count], h[:count], v[:count] = work.history_t[take], work.history_h[take], work.history_v[take]
        work.counter[N_HISTORY_FIRST] = 0
        return work._replace(history_t=t, history_h=h, history_v=v)
    if status == Status.FACTORS_FULL:
        return work._replace(real=_larger(work.real), complex=_larger(work.complex), restart_factors=_larger(work.restart_factors))
    if status == Status.BUFFER_FULL:
        record = np.zeros((2 * len(work.record), work.record.shape[1]))
        record[: len(work.record)] = work.record
        return work._replace(record=record)
    return work


def _make_factors(order: IntArray, room: int, dtype: Any) -> Factors:
    n = len(order)
    i8 = np.int64
    room = max(room, 1)
    return Factors(
        order=order.copy(),
        place=np.full(n, -1, dtype=i8),
        l_ptr=np.zeros(n + 1, dtype=i8),
        l_row=np.zeros(room, dtype=i8),
        l_val=np.zeros(room, dtype=dtype),
        u_ptr=np.zeros(n + 1, dtype=i8),
        u_row=np.zeros(room, dtype=i8),
        u_val=np.zeros(room, dtype=dtype),
        pivot_inverse=np.zeros(n, dtype=dtype),
        dense=np.zeros(n, dtype=dtype),
        mark=np.zeros(n, dtype=i8),
        stack=np.zeros(2 * n, dtype=i8),
        pause=np.zeros(n, dtype=i8),
        info=np.zeros(4, dtype=i8),
    )


def _larger(factors: Factors) -> Factors:
    """Twice the room, the pattern forgotten."""
    return _make_factors(factors.order, 2 * len(factors.l_row), factors.l_val.dtype)
