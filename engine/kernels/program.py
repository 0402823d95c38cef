"""What the kernels run: a tape and its register map as plain arrays. Free of numba."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]


class Program(NamedTuple):
    """d/dt q(x) + f(x, t, p) = 0 and everything that is computed with it, as one register tape in segments.

    Register file: reg has n_reg entries; [0, n_const) hold constants (`constants`), then time at `scalars[TIME_REG]`, unknowns x at
    x_reg .. x_reg+n, parameters p at p_reg .. p_reg+n_p, then temporaries. Registers are written once per evaluation; a later segment may
    read what an earlier one wrote at the same point, so a segment is always run after RESIDUAL at the same (x, t, p, mode).

    op, dst, a, b, c: shape (n_ops,). Operation numbers and operand meaning as in opcodes.py. For POSITIVE, FLOOR: b is the switch
        number. For TABLE, TABLE_SLOPE: b is the switch number, c the table number.
    segment_end: shape (4 + n_clocks,): operations [0, segment_end[0]) are RESIDUAL (f, q and all switch inputs), [segment_end[0], segment_end[1])
        JACOBIAN, [.., segment_end[2]) OUTPUT, [.., segment_end[3]) DELAY inputs (delayed expressions), then one segment per clock: the new
        values it assigns. JACOBIAN, OUTPUT, DELAY and each CLOCK segment need RESIDUAL only, never each other.
    f_reg: shape (n,), register of f_i. q_reg: shape (n,), register of q_i, -1 for an algebraic row.
    col_ptr (n+1,), row_idx (nnz,): CSC pattern of the union of df/dx and dq/dx (every diagonal entry present).
    jf_reg, jq_reg: shape (nnz,), register of each entry of df/dx, dq/dx (the constant-0 register where none).
    switch_kind (n_s,), switch_reg (n_s,): kind (SWITCH_*) and watched register of each switch; switch_table (n_s,) table number or -1.
    switch_scale (n_s,): size of the watched register that counts as zero: a mode is violated only when the value is beyond it.
    switch_watched (n_s,): 1 where a flip must be reported to Python (conditions of events).
    table_ptr (n_tables+1,): table k has knots table_knots[table_ptr[k]:table_ptr[k+1]]; its coefficient rows start at table_ptr[k] + k in
        table_coef, shape (n_knots_total + n_tables, 4); table_closed (n_tables,). Segments as in expression.graph.PiecewiseCubic.
    out_reg: shape (n_out,), registers of the recorded outputs.
    delay_in_reg (n_delay,): register (DELAY segment) of each delayed expression; delay_p (n_delay,): parameter index that receives its
        delayed value; delay_s (n_delay,): delay in seconds.
    clock_period (n_clocks,), clock_ptr (n_clocks+1,): clock k assigns p[clock_p[j]] = reg[clock_reg[j]] for j in clock_ptr[k]:clock_ptr[k+1].
        clock_rank (n_clocks,): clocks due at one instant fire in ascending rank; clocks of equal rank read first, then write together; after
        each rank the RESIDUAL segment must be run again before the next rank's segments (samplers see earlier samplers' new values).
        Clocks of one instant with rank >= RANK_EVENTS are `every` events: all of one rank.
    scale: shape (n,), absolute size of each unknown (error weights: |x| * rtol + scale * atol_factor).
    is_algebraic: shape (n,), 1 where q_reg < 0.
    """

    n: int
    n_const: int
    n_reg: int
    time_reg: int
    x_reg: int
    p_reg: int
    n_p: int
    constants: FloatArray
    op: IntArray
    dst: IntArray
    a: IntArray
    b: IntArray
    c: IntArray
    segment_end: IntArray
    f_reg: IntArray
    q_reg: IntArray
    col_ptr: IntArray
    row_idx: IntArray
    jf_reg: IntArray
    jq_reg: IntArray
    switch_kind: IntArray
    switch_reg: IntArray
    switch_table: IntArray
    switch_scale: FloatArray
    switch_watched: IntArray
    table_ptr: IntArray
    table_knots: FloatArray
    table_coef: FloatArray
    table_closed: IntArray
    out_reg: IntArray
    delay_in_reg: IntArray
    delay_p: IntArray
    delay_s: FloatArray
    clock_period: FloatArray
    clock_ptr: IntArray
    clock_p: IntArray
    clock_reg: IntArray
    clock_rank: IntArray
    scale: FloatArray
    is_algebraic: IntArray


RANK_EVENTS = 1_000_000
