"""Where things lie in the kernels' memory: three arenas, F (float64), W (int64), C (complex128) and the tape K (int32), each one flat array.

A compiled function that takes a hundred arrays takes a second to compile, whatever it does; with four flat arrays all kernels together take seconds.
W starts with the counters (workspace.N_...), then sizes (SIZE_...), then the offsets of all blocks (AT_...); F starts with the state
(workspace.S_...).
In kernels `x = W[AT_X]` is the place of x in F, so x_i is F[x + i]. Python sees every block as a named array (Workspace).
"""

from __future__ import annotations

from typing import Final

HEADER: Final = 48  # first SIZE_ entry; before it the counters

SIZE_N: Final = HEADER + 0  # unknowns
SIZE_NNZ: Final = HEADER + 1  # entries of the Jacobians' pattern
SIZE_P: Final = HEADER + 2  # parameters
SIZE_REG: Final = HEADER + 3  # registers
SIZE_S: Final = HEADER + 4  # switches
SIZE_OUT: Final = HEADER + 5  # outputs
SIZE_DELAY: Final = HEADER + 6  # delayed expressions
SIZE_CLOCK: Final = HEADER + 7  # clocks
TIME_REG: Final = HEADER + 8
X_REG: Final = HEADER + 9
P_REG: Final = HEADER + 10
SIZE_HISTORY: Final = HEADER + 11  # capacity of the ring of history pieces
SIZE_RECORD: Final = HEADER + 12  # capacity of the record buffer, rows
SIZE_FACTORS: Final = HEADER + 13  # capacity of each of L and U
SIZE_BREAK: Final = HEADER + 14  # capacity of the queue of breaking points

OFFSETS: Final = HEADER + 16  # first AT_ entry

# ---- in W: the program
AT_SEGMENT_END: Final = OFFSETS + 0
AT_F_REG: Final = OFFSETS + 1
AT_Q_REG: Final = OFFSETS + 2
AT_COL_PTR: Final = OFFSETS + 3
AT_ROW_IDX: Final = OFFSETS + 4
AT_JF_REG: Final = OFFSETS + 5
AT_JQ_REG: Final = OFFSETS + 6
AT_SWITCH_KIND: Final = OFFSETS + 7
AT_SWITCH_REG: Final = OFFSETS + 8
AT_SWITCH_TABLE: Final = OFFSETS + 9
AT_SWITCH_WATCHED: Final = OFFSETS + 10
AT_TABLE_PTR: Final = OFFSETS + 11
AT_TABLE_CLOSED: Final = OFFSETS + 12
AT_OUT_REG: Final = OFFSETS + 13
AT_DELAY_IN_REG: Final = OFFSETS + 14
AT_DELAY_P: Final = OFFSETS + 15
AT_CLOCK_PTR: Final = OFFSETS + 16
AT_CLOCK_P: Final = OFFSETS + 17
AT_CLOCK_REG: Final = OFFSETS + 18
AT_CLOCK_RANK: Final = OFFSETS + 19
# ---- in W: what changes
AT_MODE: Final = OFFSETS + 20
AT_FLIPPED: Final = OFFSETS + 21
AT_CANDIDATE: Final = OFFSETS + 22
AT_CLOCK_COUNT: Final = OFFSETS + 23
AT_BREAK_LEVEL: Final = OFFSETS + 24
# ---- in F: the program
AT_SWITCH_SCALE: Final = OFFSETS + 25
AT_TABLE_KNOTS: Final = OFFSETS + 26
AT_TABLE_COEF: Final = OFFSETS + 27
AT_DELAY_S: Final = OFFSETS + 28
AT_CLOCK_PERIOD: Final = OFFSETS + 29
AT_SCALE: Final = OFFSETS + 30
# ---- in F: what changes
AT_REG: Final = OFFSETS + 31
AT_REG3: Final = OFFSETS + 32
AT_X: Final = OFFSETS + 33
AT_P: Final = OFFSETS + 34
AT_Q_KEEP: Final = OFFSETS + 35
AT_F_START: Final = OFFSETS + 36
AT_Q_START: Final = OFFSETS + 37
AT_STAGE: Final = OFFSETS + 38
AT_STAGE_OLD: Final = OFFSETS + 39
AT_X_OLD: Final = OFFSETS + 40
AT_WEIGHT: Final = OFFSETS + 41
AT_IN_ERROR: Final = OFFSETS + 42
AT_JAC_F: Final = OFFSETS + 43
AT_JAC_Q: Final = OFFSETS + 44
AT_ROW_SCALE: Final = OFFSETS + 45
AT_MATRIX: Final = OFFSETS + 46
AT_RHS: Final = OFFSETS + 47
AT_RESTART_MATRIX: Final = OFFSETS + 48
AT_RESTART_SCALE: Final = OFFSETS + 49
AT_X_TRY: Final = OFFSETS + 50
AT_DX: Final = OFFSETS + 51
AT_DX_TRY: Final = OFFSETS + 52
AT_SWITCH_NOW: Final = OFFSETS + 53
AT_CLOCK_OFFSET: Final = OFFSETS + 54
AT_CLOCK_VALUE: Final = OFFSETS + 55
AT_DELAY_VALUE0: Final = OFFSETS + 56
AT_DELAY_SLOPE0: Final = OFFSETS + 57
AT_HISTORY_T: Final = OFFSETS + 58
AT_HISTORY_H: Final = OFFSETS + 59
AT_HISTORY_V: Final = OFFSETS + 60
AT_HISTORY_START: Final = OFFSETS + 61
AT_BREAK_T: Final = OFFSETS + 62
AT_RECORD: Final = OFFSETS + 63
# ---- in C
AT_MATRIX_COMPLEX: Final = OFFSETS + 64
AT_RHS_COMPLEX: Final = OFFSETS + 65

# ---- factors: a group of entries each, see lu.py. L and U by columns, values in F or C, all else in W
LU_ORDER: Final = 0  # (n,) column that is eliminated k-th
LU_PLACE: Final = 1  # (n,) position of each row among the pivots, -1 while unknown
LU_L_PTR: Final = 2  # (n + 1,)
LU_L_ROW: Final = 3
LU_U_PTR: Final = 4  # (n + 1,)
LU_U_ROW: Final = 5
LU_MARK: Final = 6  # (n,) work of the pivot search, as the next two
LU_STACK: Final = 7  # (2 n,)
LU_PAUSE: Final = 8  # (n,)
LU_L_VAL: Final = 9
LU_U_VAL: Final = 10
LU_PIVOT_INVERSE: Final = 11  # (n,)
LU_DENSE: Final = 12  # (n,) zero between calls
LU_KNOWN: Final = 13  # not an offset: 1 while the pattern is known
LU_COLUMN: Final = 14  # not an offset: column in which no pivot was found
LU_SEARCHES: Final = 15  # not an offset: number of pivot searches
AT_ALGEBRAIC: Final = OFFSETS + 66  # in W: (n,) 1 for an unknown that no charge depends on
REAL: Final = OFFSETS + 68
COMPLEX: Final = OFFSETS + 84
RESTART: Final = OFFSETS + 100
BLOCKS: Final = OFFSETS + 116  # first entry after the header
