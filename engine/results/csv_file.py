"""CSV recordings: one line per step's end, written as the run goes; the header names each quantity with its unit."""

from __future__ import annotations

import contextlib
import csv
import os
from io import TextIOWrapper
from pathlib import Path
from typing import Final

from polewise.results.curve import INTERIOR, FloatArray
from polewise.results.failures import OutputFailed
from polewise.results.recording import ROWS_BEFORE, Column, Recording, row_blocks

DIGITS: Final = 12  # of every number: more than any solver tolerance, fewer than a double's noise


def header(columns: tuple[Column, ...]) -> list[str]:
    """The first line's fields: "time (s)", "bus.v (V)", "start_up.run (0 or 1)"."""
    return ["time (s)", *(f"{c.name} ({'0 or 1' if c.is_condition else c.unit})" for c in columns)]


class CsvSink:
    """Streams rows to a CSV file. At a jump two lines have the same time: just before it and just after."""

    def __init__(self, path: Path, columns: tuple[Column, ...]) -> None:
        self.path = path
        self._columns = tuple(k for k, column in enumerate(columns) if column.role == "kept")
        try:
            self._file: TextIOWrapper = open(path, "w", encoding="utf-8", newline="")  # noqa: SIM115 (closed by close)
            csv.writer(self._file, lineterminator="\n").writerow(header(tuple(columns[k] for k in self._columns)))
        except OSError as error:
            raise _failed(path, error) from error

    def write(self, rows: FloatArray) -> None:
        """Take a block of rows."""
        fields = [0, *(ROWS_BEFORE + k for k in self._columns)]
        ends = rows[rows[:, 1] != INTERIOR]
        try:
            self._file.writelines(",".join([f"{value:.{DIGITS}g}" for value in row]) + "\n" for row in ends[:, fields].tolist())
        except OSError as error:
            raise _failed(self.path, error) from error

    def close(self) -> None:
        """Finish the file."""
        try:
            self._file.close()
        except OSError as error:
            raise _failed(self.path, error) from error

    def abandon(self) -> None:
        """Let go of the file after a failure."""
        with contextlib.suppress(OSError):
            self._file.close()


def write_csv(path: Path, recording: Recording) -> None:
    """Write a finished recording's kept quantities."""
    kept = tuple(column for column in recording.columns if column.role == "kept")
    sink = CsvSink(path, kept)
    for rows in row_blocks(recording, kept):
        sink.write(rows)
    sink.close()


def _failed(path: Path, error: OSError) -> OutputFailed:
    return OutputFailed(str(path), os.strerror(error.errno) if error.errno else str(error))
