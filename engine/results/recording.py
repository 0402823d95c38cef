"""Recordings: rows as they come from a run, kept in memory or on disk and read back one quantity at a time.

A sink takes blocks of rows, shape (m, 2 + n): time (s), flag (see curve.py), then one value per column. `finish` turns it into a Recording.
"""

from __future__ import annotations

import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import IO, Literal, Protocol

import numpy as np

from polewise.grammar.units import Dimension, unit_text
from polewise.results.curve import Curve, FloatArray, IntArray, StepGrid, curve, step_grid
from polewise.results.failures import OutputFailed, UnknownName, nearest_names

MEMORY_LIMIT_BYTES = 512 * 1024 * 1024  # rows beyond this go to a temporary file, so that an hours-long run can't exhaust memory
_ROWS_AT_ONCE = 8192
ROWS_BEFORE = 2  # time and flag stand before the values


@dataclass(frozen=True, slots=True)
class Column:
    """One recorded quantity.

    Args:
        name: by the netlist's spelling.
        dimension: of its SI value.
        is_condition: 0 or 1.
        role: "kept" was asked for, "judged" was recorded for a requirement only.
    """

    name: str
    dimension: Dimension
    is_condition: bool = False
    role: Literal["kept", "judged"] = "kept"

    @property
    def unit(self) -> str:
        """Name of its SI unit, "1" for a plain number."""
        return unit_text(self.dimension)


class Sink(Protocol):
    """What a run writes to."""

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows; the array may be reused by the caller."""
        ...


class Recording(Protocol):
    """A finished recording."""

    @property
    def columns(self) -> tuple[Column, ...]:
        """Its quantities, in order."""
        ...

    @property
    def grid(self) -> StepGrid:
        """Its points in time and how they are joined."""
        ...

    def values(self, name: str) -> FloatArray:
        """The values of one column, shape (m,), read-only.

        Raises:
            UnknownName: no such column.
        """
        ...


def recorded_curve(recording: Recording, name: str) -> Curve:
    """A column as a curve; a condition keeps through each step what it was at its start."""
    whole = curve(recording.grid, recording.values(name))
    if recording.columns[column_index(recording.columns, name)].is_condition:
        whole.coefficient[:, 1:] = 0.0
    return whole


def row_blocks(recording: Recording, columns: Sequence[Column]) -> Iterator[FloatArray]:
    """The rows of a recording again, in blocks of shape (m, 2 + n)."""
    values = [recording.values(column.name) for column in columns]
    time, flag = recording.grid.time, recording.grid.flag
    for start in range(0, time.size, _ROWS_AT_ONCE):
        part = slice(start, start + _ROWS_AT_ONCE)
        block = np.empty((time[part].size, ROWS_BEFORE + len(values)))
        block[:, 0], block[:, 1] = time[part], flag[part]
        for k, column in enumerate(values):
            block[:, ROWS_BEFORE + k] = column[part]
        yield block


def column_index(columns: Sequence[Column], name: str) -> int:
    """Where a column stands.

    Raises:
        UnknownName: no such column.
    """
    for k, column in enumerate(columns):
        if column.name == name:
            return k
    raise UnknownName(name, f"`{name}` was not recorded", nearest_names(name, (c.name for c in columns)))


@dataclass(slots=True)
class MemorySink:
    """Keeps rows in memory; beyond a limit in an unnamed temporary file that vanishes with the recording."""

    columns: tuple[Column, ...]
    limit_bytes: int = MEMORY_LIMIT_BYTES
    _blocks: list[FloatArray] = field(default_factory=list)
    _bytes: int = 0
    _spilled_rows: int = 0
    _file: IO[bytes] | None = None

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows."""
        if not rows.shape[0]:
            return
        self._blocks.append(np.array(rows, dtype=np.float64))
        self._bytes += rows.shape[0] * rows.shape[1] * 8
        if self._bytes > self.limit_bytes:
            self._spill()

    def finish(self) -> MemoryRecording:
        """The recording of everything written so far."""
        if self._file is None:
            return MemoryRecording(self.columns, tuple(self._blocks))
        self._spill()
        self._file.flush()
        width = ROWS_BEFORE + len(self.columns)
        rows = np.memmap(self._file, dtype=np.float64, mode="r", shape=(self._spilled_rows, width))
        self._file.close()  # the map keeps the rows, the file itself has no name already
        return MemoryRecording(self.columns, (rows,), keep_columns=False)

    def _spill(self) -> None:
        try:
            if self._file is None:
                self._file = tempfile.TemporaryFile(prefix="polewise-")  # noqa: SIM115 (lives as long as the recording)
            for block in self._blocks:
                self._file.write(block.tobytes())
                self._spilled_rows += block.shape[0]
        except OSError as error:
            raise OutputFailed("the temporary file for a long run", error.strerror or str(error)) from error
        self._blocks.clear()
        self._bytes = 0


class MemoryRecording:
    """Rows in memory (or in a mapped file), read by column."""

    __slots__ = ("_blocks", "_columns", "_got", "_grid", "_keep_columns", "_position")

    def __init__(self, columns: tuple[Column, ...], blocks: tuple[FloatArray, ...], *, keep_columns: bool = True) -> None:
        self._columns = columns
        self._blocks = blocks
        self._keep_columns = keep_columns
        self._position = {column.name: k for k, column in enumerate(columns)}
        self._got: dict[int, FloatArray] = {}
        self._grid = step_grid(self._read(0), self._read(1).astype(np.int64))

    @property
    def columns(self) -> tuple[Column, ...]:
        """Its quantities, in order."""
        return self._columns

    @property
    def grid(self) -> StepGrid:
        """Its points in time and how they are joined."""
        return self._grid

    def values(self, name: str) -> FloatArray:
        """The values of one column, shape (m,), read-only."""
        k = self._position.get(name)
        if k is None:
            k = column_index(self._columns, name)
        got = self._got.get(k)
        if got is None:
            got = self._read(ROWS_BEFORE + k)
            if self._keep_columns:
                self._got[k] = got
        return got

    def _read(self, k: int) -> FloatArray:
        if not self._blocks:
            return np.zeros(0)
        values = np.concatenate([block[:, k] for block in self._blocks])
        values.setflags(write=False)
        return np.asarray(values)


@dataclass(frozen=True, slots=True)
class SeveralSinks:
    """Hands each block to several sinks."""

    sinks: tuple[Sink, ...]

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows."""
        for sink in self.sinks:
            sink.write(rows)


def grid_of(time: FloatArray, flag: IntArray) -> StepGrid:
    """The step grid of read-only arrays."""
    time.setflags(write=False)
    flag.setflags(write=False)
    return step_grid(time, flag)
