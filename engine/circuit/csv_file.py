"""A CSV file that a table reads: its header and its rows as text."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class CsvFile:
    """One file.

    Args:
        header: names of the columns, from the first line.
        rows: (line number, cells) of each further line that is not empty.
    """

    header: tuple[str, ...]
    rows: tuple[tuple[int, tuple[str, ...]], ...]
