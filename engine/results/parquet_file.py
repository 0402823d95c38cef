"""Parquet recordings: row groups written as they come, units in the column metadata, a mark in the file that says whether it is whole."""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Mapping
from pathlib import Path
from types import ModuleType
from typing import Any, Final

import numpy as np

from polewise.grammar.units import Dimension
from polewise.results.curve import FloatArray, StepGrid
from polewise.results.failures import DamagedRecording, MissingExtra, OutputFailed
from polewise.results.recording import ROWS_BEFORE, Column, column_index, grid_of

ROW_GROUP_BYTES: Final = 16 * 1024 * 1024  # held in memory before a row group goes to disk
ROW_GROUP_ROWS_MIN: Final = 256
TIME_COLUMN: Final = "time"
POINT_COLUMN: Final = "step point"  # with a blank, so that no name of a netlist can collide with it
POINT_MEANING: Final = "0 inside a step, 1 end of a step, 2 just before a jump, 3 just after it"
_PREFIX: Final = "polewise."


def require_pyarrow() -> tuple[ModuleType, ModuleType]:
    """pyarrow and pyarrow.parquet.

    Raises:
        MissingExtra: not installed.
    """
    try:
        import pyarrow
        import pyarrow.parquet
    except ImportError as error:
        raise MissingExtra("pyarrow", "parquet", "writing or reading Parquet") from error
    return pyarrow, pyarrow.parquet


def dimension_text(dimension: Dimension) -> str:
    """A dimension by its base units: "kg m^2 s^-3 A^-1", "1" for a plain number."""
    parts = zip(("kg", "m", "s", "A", "K"), dimension.exponents, strict=True)
    return " ".join(symbol if x == 1 else f"{symbol}^{x}" for symbol, x in parts if x != 0) or "1"


def dimension_from_text(text: str) -> Dimension:
    """The inverse of dimension_text."""
    from fractions import Fraction

    if text == "1":
        return Dimension()
    exponents = {symbol: Fraction(power or "1") for symbol, _, power in (part.partition("^") for part in text.split())}
    return Dimension(**{symbol: int(x) if x.denominator == 1 else x for symbol, x in exponents.items()})


class ParquetSink:
    """Streams rows to a Parquet file. `close` must be called, with whether the run came to its end; it writes the file's foot."""

    def __init__(self, path: Path, columns: tuple[Column, ...], about: Mapping[str, str], *, row_group_bytes: int = ROW_GROUP_BYTES) -> None:
        """Open the file.

        Args:
            path: to write, replaced where it exists.
            columns: the quantities that follow time and flag in each row.
            about: facts for the file's metadata (title, study).
            row_group_bytes: memory to use.
        """
        self._arrow, parquet = require_pyarrow()
        self.path = path
        self.columns = columns
        width = ROWS_BEFORE + len(columns)
        self._buffer = np.empty((width, max(ROW_GROUP_ROWS_MIN, row_group_bytes // (8 * width))))
        self._filled = 0
        self.rows = 0
        self._schema = self._arrow.schema(self._fields(), metadata={_PREFIX + key: value for key, value in about.items()})
        self._file: Any = None
        self._writer: Any = None
        try:
            self._file = open(path, "wb")  # noqa: SIM115 (closed by close)
            self._writer = parquet.ParquetWriter(self._file, self._schema, compression="zstd")
        except OSError as error:
            raise _failed(path, error) from error

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows."""
        taken = 0
        while taken < rows.shape[0]:
            free = self._buffer.shape[1] - self._filled
            part = rows[taken : taken + free]
            self._buffer[:, self._filled : self._filled + part.shape[0]] = part.T
            self._filled += part.shape[0]
            taken += part.shape[0]
            if self._filled == self._buffer.shape[1]:
                self.flush()

    def flush(self) -> None:
        """Write what is held as one row group."""
        if not self._filled:
            return
        block = self._buffer[:, : self._filled]
        arrays = [self._arrow.array(block[0]), self._arrow.array(block[1].astype(np.int8))]
        for column, values in zip(self.columns, block[ROWS_BEFORE:], strict=True):
            arrays.append(self._arrow.array(values > 0.5 if column.is_condition else values))
        try:
            self._writer.write_table(self._arrow.Table.from_arrays(arrays, schema=self._schema))
            self._file.flush()
        except OSError as error:
            raise _failed(self.path, error) from error
        self.rows += self._filled
        self._filled = 0

    def close(self, *, complete: bool, end_s: float) -> None:
        """Write the last rows and the foot.

        Args:
            complete: whether the run reached its end.
            end_s: study time reached.
        """
        try:
            self.flush()
        except OutputFailed:
            self.abandon()
            raise
        try:
            self._writer.add_key_value_metadata({f"{_PREFIX}complete": json.dumps(complete), f"{_PREFIX}end_s": repr(end_s)})
            self._writer.close()
            self._file.close()
        except OSError as error:
            self.abandon()
            raise _failed(self.path, error) from error

    def abandon(self) -> None:
        """Let go of the file after a failure, without a foot."""
        for closing in (self._writer, self._file):
            with contextlib.suppress(OSError, ValueError):
                closing.close()

    def _fields(self) -> list[Any]:
        arrow = self._arrow
        fields = [
            arrow.field(TIME_COLUMN, arrow.float64(), nullable=False, metadata={"unit": "s", "dimension": "s"}),
            arrow.field(POINT_COLUMN, arrow.int8(), nullable=False, metadata={"unit": "1", "dimension": "1", "meaning": POINT_MEANING}),
        ]
        for column in self.columns:
            kind = arrow.bool_() if column.is_condition else arrow.float64()
            about = {"unit": column.unit, "dimension": dimension_text(column.dimension), "role": column.role}
            fields.append(arrow.field(column.name, kind, nullable=False, metadata=about))
        return fields


def _failed(path: Path, error: OSError) -> OutputFailed:
    reason = os.strerror(error.errno) if error.errno else str(error)
    return OutputFailed(str(path), reason)


class ParquetRecording:
    """A finished Parquet file, one column in memory at a time."""

    def __init__(self, path: Path) -> None:
        """Open a file.

        Raises:
            DamagedRecording: cut off, or not one of ours.
        """
        arrow, parquet = require_pyarrow()
        self.path = path
        self._lookup = arrow
        try:
            self._file = parquet.ParquetFile(path)
        except FileNotFoundError as error:
            raise DamagedRecording(str(path), "there is no such file") from error
        except (arrow.ArrowInvalid, OSError) as error:
            hint = "a run that was killed leaves such a file; the summary beside it says how far it came; run the study again"
            raise DamagedRecording(str(path), "this is no whole Parquet file: it was cut off before its foot was written", hint) from error
        schema = self._file.schema_arrow
        if schema.names[:ROWS_BEFORE] != [TIME_COLUMN, POINT_COLUMN]:
            raise DamagedRecording(str(path), f"its first columns are not `{TIME_COLUMN}` and `{POINT_COLUMN}`: it was not written by a run")
        self._columns = tuple(_column(field) for field in list(schema)[ROWS_BEFORE:])
        self.about = {
            key.decode().removeprefix(_PREFIX): value.decode()
            for key, value in (self._file.metadata.metadata or {}).items()
            if key.decode(errors="replace").startswith(_PREFIX)
        }
        self._grid: StepGrid | None = None

    @property
    def complete(self) -> bool:
        """Whether the run reached its end."""
        return self.about.get("complete") == "true"

    @property
    def columns(self) -> tuple[Column, ...]:
        """Its quantities, in order."""
        return self._columns

    @property
    def grid(self) -> StepGrid:
        """Its points in time and how they are joined."""
        if self._grid is None:
            self._grid = grid_of(self._read(TIME_COLUMN), self._read(POINT_COLUMN).astype(np.int64))
        return self._grid

    def values(self, name: str) -> FloatArray:
        """The values of one column, shape (m,), read-only."""
        column_index(self._columns, name)
        return self._read(name)

    def _read(self, name: str) -> FloatArray:
        arrow = self._lookup
        try:
            values = self._file.read(columns=[name]).column(name).to_numpy().astype(np.float64)
        except (arrow.ArrowInvalid, OSError) as error:
            raise DamagedRecording(str(self.path), f"the column `{name}` can't be read: the file is damaged") from error
        values.setflags(write=False)
        return np.asarray(values)


def _column(field: Any) -> Column:
    about = {key.decode(): value.decode() for key, value in (field.metadata or {}).items()}
    role = "judged" if about.get("role") == "judged" else "kept"
    return Column(field.name, dimension_from_text(about.get("dimension", "1")), str(field.type) == "bool", "judged" if role == "judged" else "kept")
