"""Operation and status numbers shared by the tape's writer and the compiled kernels. Free of numba."""

from __future__ import annotations

from enum import IntEnum
from typing import Final

# ---- operations of a tape: reg[dst] = OP(reg[a], reg[b], reg[c]) unless noted
ADD: Final = 0
SUB: Final = 1
MUL: Final = 2
DIV: Final = 3
NEG: Final = 4
POW: Final = 5  # reg[a] ** reg[b]
SQRT: Final = 6
EXP: Final = 7
LOG: Final = 8
SIN: Final = 9
COS: Final = 10
TAN: Final = 11
ASIN: Final = 12
ACOS: Final = 13
ATAN: Final = 14
ATAN2: Final = 15  # angle of the point (reg[b], reg[a])
SINH: Final = 16
COSH: Final = 17
TANH: Final = 18
MUX: Final = 19  # reg[b] if reg[a] != 0 else reg[c]; only the chosen value may be finite
POSITIVE: Final = 20  # mode[b] (0 or 1), frozen; live value is reg[a] > 0
FLOOR: Final = 21  # mode[b], frozen; live value is floor(reg[a])
TABLE: Final = 22  # piecewise cubic number c at reg[a], in the segment mode[b], frozen
TABLE_SLOPE: Final = 23  # its derivative in the same segment
OPERATION_COUNT: Final = 24

# ---- kinds of switches: what makes a frozen mode disagree with the register it watches
SWITCH_POSITIVE: Final = 0
SWITCH_FLOOR: Final = 1
SWITCH_TABLE: Final = 2


class Status(IntEnum):
    """How a call of a kernel ended. Sentences for users are made in Python."""

    DONE = 0  # reached the stop time
    BUFFER_FULL = 1  # record buffer full: empty it and call again
    EVENT = 2  # a watched switch flipped at the present time
    TICK_AT_STOP = 3  # unused by kernels that stop before shared instants
    HISTORY_FULL = 4  # the ring of history pieces is too small for the longest delay: workspace.grow, then call again
    FACTORS_FULL = 5  # the factors need more room: workspace.grow, then call again
    STEP_TOO_SMALL = 10  # error control or Newton drove the step below its limit
    NO_CONVERGENCE = 11  # Newton did not converge in a restart
    SINGULAR = 12  # the iteration matrix is singular
    NOT_FINITE = 13  # a value that is not a number where none was to be expected
    CHATTER = 14  # too many flips of switches within one instant or a tiny stretch of time
    OUTSIDE_TABLE = 15  # a table was read outside its range
    STEP_LIMIT = 16  # the number of steps allowed for one call is used up; call again (progress)
    STOPPED = 17  # the stop flag was set from outside
