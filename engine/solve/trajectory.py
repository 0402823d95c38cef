"""A run in memory: the recorded rows, growing, and values at any time from the polynomial of each step."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import numpy as np

from polewise.kernels.program import FloatArray
from polewise.kernels.workspace import FLAG_AFTER, FLAG_STAGE

ROOM_FIRST = 1024  # rows


class Sink(Protocol):
    """What a run writes its record to."""

    def write(self, rows: FloatArray) -> None:
        """Take rows of shape (m, 2 + n_out): time (s), flag (kernels.workspace.FLAG_*), outputs (SI). The array is reused by the caller."""
        ...


class MemorySink:
    """Keeps everything.

    Args:
        names: of the outputs, in the order of the columns.
    """

    def __init__(self, names: Sequence[str]) -> None:
        self.names = tuple(names)
        self._column = {name: 2 + k for k, name in enumerate(self.names)}
        self._rows: FloatArray = np.empty((ROOM_FIRST, 2 + len(self.names)))
        self._count = 0

    def write(self, rows: FloatArray) -> None:
        """Append rows."""
        needed = self._count + len(rows)
        if needed > len(self._rows):
            larger = np.empty((max(needed, 2 * len(self._rows)), self._rows.shape[1]))
            larger[: self._count] = self._rows[: self._count]
            self._rows = larger
        self._rows[self._count : needed] = rows
        self._count = needed

    @property
    def rows(self) -> FloatArray:
        """All rows, shape (m, 2 + n_out): stage points, ends of steps, both sides of jumps."""
        return self._rows[: self._count]

    @property
    def ends(self) -> FloatArray:
        """Rows without the stage points inside steps."""
        closed: FloatArray = self.rows[self.rows[:, 1] != FLAG_STAGE]
        return closed

    @property
    def time(self) -> FloatArray:
        """Times of `ends`, s."""
        return self.ends[:, 0]

    def __getitem__(self, name: str) -> FloatArray:
        """Values of one output at `time`, SI."""
        return self.ends[:, self._column[name]]

    def value(self, name: str, t: float, *, before: bool = False) -> float:
        """An output at any recorded time, s: the polynomial through its step's start, stage points and end.

        Args:
            before: at a jump, the value just before it instead of just after.
        Raises:
            ValueError: t is outside what was recorded.
        """
        rows = self.rows
        time, flag, values = rows[:, 0], rows[:, 1], rows[:, self._column[name]]
        if self._count == 0 or not time[0] <= t <= time[-1]:
            raise ValueError(f"{t} s was not recorded")
        closed = np.flatnonzero(flag != FLAG_STAGE)
        at = time[closed]
        exact = np.flatnonzero(at == t)
        if len(exact):
            return float(values[closed[exact[0] if before else exact[-1]]])
        k = int(np.searchsorted(at, t))
        first, last = int(closed[k - 1]), int(closed[k])
        if flag[last] == FLAG_AFTER or time[last] <= time[first]:
            return float(values[first])
        u = (time[first : last + 1] - time[first]) / (time[last] - time[first])
        return _interpolated(u, values[first : last + 1], (t - time[first]) / (time[last] - time[first]))


def _interpolated(u: FloatArray, y: FloatArray, at: float) -> float:
    """Lagrange's polynomial through (u, y)."""
    total = 0.0
    for j in range(len(u)):
        others = np.delete(u, j)
        total += float(y[j]) * float(np.prod((at - others) / (u[j] - others)))
    return total
