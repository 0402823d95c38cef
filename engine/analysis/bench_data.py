"""Waveforms from a bench: CSV as oscilloscopes write it, read into SI, with a clear word on everything that is odd about it.

Lines before the numbers are a header: names from the last line of as many fields as the numbers have, units from brackets in the names or from a
line of unit words below them. Fields are separated by commas, semicolons or tabs (with semicolons a comma may be the decimal mark). The first
column is time, of any spacing.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np

from polewise.analysis.failures import waveform_refused
from polewise.grammar import units
from polewise.grammar.units import Dimension, format_value, parse_unit
from polewise.results.curve import Curve, FloatArray

ROWS_MOST: Final = 20_000_000
BYTES_MOST: Final = 4 * 1024**3
GAP_STEPS: Final = 10.0  # times the median step: a longer one is a gap, no average is taken across it
_SEPARATORS: Final = ("\t", ";", ",")
_UNIT_WORDS: Final = {
    "second": "s", "seconds": "s", "sec": "s", "volt": "V", "volts": "V", "ampere": "A", "amperes": "A", "amp": "A", "amps": "A", "watt": "W",
}  # fmt: skip
_BRACKETS: Final = re.compile(r"^(.*?)\s*[\(\[/]\s*([^\)\]]*?)\s*[\)\]]?\s*$")


@dataclass(frozen=True, slots=True, eq=False)
class Channel:
    """One column: values in SI where its unit was stated, else as written.

    Args:
        values: shape (m,), NaN where the file had none. unit: as stated, "" where it was not.
    """

    name: str
    values: FloatArray
    unit: str
    dimension: Dimension


@dataclass(frozen=True, slots=True, eq=False)
class BenchRecord:
    """A file of waveforms.

    Args:
        time: shape (m,), s, increasing. channels: at least one. line: of the file, one per row. remarks: what was odd, sentences.
    """

    path: str
    time: FloatArray
    channels: tuple[Channel, ...]
    remarks: tuple[str, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Of the channels."""
        return tuple(c.name for c in self.channels)

    def channel(self, name: str) -> Channel:
        """A channel by name.

        Raises:
            UnknownName: there is none.
        """
        from polewise.results.failures import UnknownName, nearest_names

        for one in self.channels:
            if one.name == name:
                return one
        raise UnknownName(name, f"{self.path} has no channel `{name}`", nearest_names(name, self.names), f"its channels: {', '.join(self.names)}")

    @property
    def step_s(self) -> float:
        """Median distance of two samples, s."""
        return float(np.median(np.diff(self.time)))

    def segments(self, name: str) -> list[tuple[FloatArray, FloatArray]]:
        """(time, values) of a channel, cut at gaps, without missing values."""
        values = self.channel(name).values
        good = np.isfinite(values)
        t, x = self.time[good], values[good]
        cuts = np.flatnonzero(np.diff(t) > GAP_STEPS * self.step_s) + 1
        return [(a, b) for a, b in zip(np.split(t, cuts), np.split(x, cuts), strict=True) if a.size >= 2]

    def curves(self, name: str) -> list[Curve]:
        """The segments as straight lines between samples."""
        from polewise.analysis.cycle_average import curve_through

        return [curve_through(t, x) for t, x in self.segments(name)]

    def corrected(self, name: str, *, offset: float = 0.0, delay_s: float = 0.0) -> BenchRecord:
        """The same record with a probe's offset taken off one channel, and its delay: the channel is moved earlier by it."""
        changed = []
        for one in self.channels:
            values = one.values
            if one.name == name:
                values = values - offset
                if delay_s:
                    good = np.isfinite(values)
                    values = np.interp(self.time + delay_s, self.time[good], values[good], left=np.nan, right=np.nan)
            changed.append(replace(one, values=values))
        return replace(self, channels=tuple(changed))


def read_waveforms(path: str | Path) -> BenchRecord:
    """Read a file of waveforms.

    Raises:
        WaveformRefused: no such file, no numbers in it, times that run backwards.
    """
    file = Path(path)
    try:
        if file.stat().st_size > BYTES_MOST:
            raise waveform_refused(f"{file} is larger than {BYTES_MOST // 1024**3} GiB", "cut it into parts")
        text = file.read_text(encoding="utf-8-sig", errors="replace")
    except OSError as error:
        raise waveform_refused(f"{file} could not be read: {error.strerror or error}") from error
    return parse_waveforms(text, str(file))


def parse_waveforms(text: str, path: str = "<text>") -> BenchRecord:
    """As read_waveforms, of a text."""
    lines = text.splitlines()
    separator, first, width = _layout(lines, path)
    names, unit_names = _header(lines[:first], separator, width)
    table, numbers, odd = _numbers(lines, first, separator, width)
    if len(numbers) < 2:
        raise waveform_refused(f"{path} holds fewer than two rows of numbers")
    remarks: list[str] = []
    if odd:
        remarks.append(f"{_rows(len(odd))} without a readable time or with another number of fields left out, the first in line {odd[0]}")
    factors, dimensions, said = _units(names, unit_names)
    remarks += said
    table = table * np.array(factors)
    time = table[:, 0]
    table, time, more = _ordered(table, time, numbers, path)
    remarks += more
    channels = tuple(Channel(n, table[:, k + 1], u, d) for k, (n, u, d) in enumerate(zip(names[1:], unit_names[1:], dimensions[1:], strict=True)))
    remarks += _missing(channels, numbers)
    remarks += _gaps(time)
    return BenchRecord(path, time, channels, tuple(remarks))


def _rows(count: int) -> str:
    return "one row" if count == 1 else f"{count} rows"


# ---------------------------------------------------------------- the text


def _layout(lines: Sequence[str], path: str) -> tuple[str, int, int]:
    """Separator, index of the first line of numbers, number of fields."""
    for k, line in enumerate(lines):
        for separator in _SEPARATORS:
            fields = line.split(separator)
            if len(fields) >= 2 and sum(_number(f, separator) is not None for f in fields) >= 2 and _number(fields[0], separator) is not None:
                later = next((other for other in lines[k + 1 : k + 4] if other.strip()), None)
                if later is None or _number(later.split(separator)[0], separator) is not None:
                    return separator, k, len(_trimmed(fields))
    hint = "wanted: a column of times and one or more columns of values, separated by commas, semicolons or tabs"
    raise waveform_refused(f"{path} holds no rows of numbers", hint)


def _trimmed(fields: list[str]) -> list[str]:
    """Without empty fields at the end (a separator at the end of each line)."""
    while len(fields) > 2 and not fields[-1].strip():
        fields = fields[:-1]
    return fields


def _number(field: str, separator: str) -> float | None:
    text = field.strip().strip('"')
    if separator == ";" and "," in text and "." not in text:
        text = text.replace(",", ".")
    try:
        return float(text)
    except ValueError:
        return None


def _header(lines: Sequence[str], separator: str, width: int) -> tuple[list[str], list[str]]:
    """Names and units of the columns."""
    rows = [[f.strip().strip('"') for f in _trimmed(line.split(separator))] for line in lines if line.strip()]
    rows = [r for r in rows if len(r) == width]
    names = [f"column {k + 1}" for k in range(width)]
    stated = [""] * width
    if rows and len(rows) > 1 and all(_unit_of(f) is not None for f in rows[-1] if f):
        stated = [_unit_of(f) or "" for f in rows[-1]]
        names = [f or n for f, n in zip(rows[-2], names, strict=True)]
    elif rows:
        names = [f or n for f, n in zip(rows[-1], names, strict=True)]
    for k, name in enumerate(names):
        match = _BRACKETS.match(name)
        if match and _unit_of(match[2]) is not None and match[1].strip():
            names[k], stated[k] = match[1].strip(), stated[k] or _unit_of(match[2]) or ""
    return _distinct(names), stated


def _distinct(names: list[str]) -> list[str]:
    seen: dict[str, int] = {}
    found = []
    for name in names:
        seen[name] = seen.get(name, 0) + 1
        found.append(name if seen[name] == 1 else f"{name} ({seen[name]})")
    return found


def _unit_of(text: str) -> str | None:
    """A unit's symbol, from a symbol or a word; None for anything else."""
    word = text.strip().strip("()[]")
    symbol = _UNIT_WORDS.get(word.lower(), word)
    return symbol if symbol and parse_unit(symbol) is not None else None


def _numbers(lines: Sequence[str], first: int, separator: str, width: int) -> tuple[FloatArray, list[int], list[int]]:
    """Rows of numbers (NaN for a missing value), their line numbers, and the lines left out."""
    rows, numbers, odd = [], [], []
    for k in range(first, len(lines)):
        line = lines[k]
        if not line.strip():
            continue
        fields = _trimmed(line.split(separator))
        time = _number(fields[0], separator)
        if time is None or not np.isfinite(time) or len(fields) > width:
            odd.append(k + 1)
            continue
        values = [_number(f, separator) for f in fields[1:]] + [None] * (width - len(fields))
        rows.append([time, *(np.nan if v is None else v for v in values)])
        numbers.append(k + 1)
        if len(rows) > ROWS_MOST:
            raise waveform_refused(f"more than {ROWS_MOST} rows", "cut the record into parts")
    return np.array(rows, dtype=np.float64).reshape(-1, width), numbers, odd


def _units(names: Sequence[str], unit_names: Sequence[str]) -> tuple[list[float], list[Dimension], list[str]]:
    """Factor to SI and dimension of each column."""
    factors, dimensions = [], []
    for name in unit_names:
        unit = parse_unit(name) if name else None
        factors.append(1.0 if unit is None else float(unit.factor))
        dimensions.append(units.NONE if unit is None else unit.dimension)
    if unit_names[0] and dimensions[0] != units.TIME:
        raise waveform_refused(f"the first column, `{names[0]}`, is in {unit_names[0]}, not in a unit of time", "put the times into the first column")
    said = [] if unit_names[0] else ["the unit of time is not stated; taken as seconds"]
    return factors, dimensions, said


# ---------------------------------------------------------------- what is odd


def _ordered(table: FloatArray, time: FloatArray, numbers: list[int], path: str) -> tuple[FloatArray, FloatArray, list[str]]:
    step = np.diff(time)
    if np.any(step < 0.0):
        k = int(np.argmax(step < 0.0)) + 1
        at = format_value(float(time[k]), units.TIME, digits=6)
        raise waveform_refused(
            f"{path}: the times run backwards in line {numbers[k]} (to {at})", "sort the rows, or cut the file where a new record begins"
        )
    same = np.flatnonzero(step == 0.0)
    if not same.size:
        return table, time, []
    unique, inverse, count = np.unique(time, return_inverse=True, return_counts=True)
    if unique.size < 2:
        raise waveform_refused(f"{path}: all rows have the same time")
    merged = np.empty((unique.size, table.shape[1]))
    for k in range(table.shape[1]):
        good = np.isfinite(table[:, k])
        total = np.bincount(inverse[good], weights=table[good, k], minlength=unique.size)
        number = np.bincount(inverse[good], minlength=unique.size)
        with np.errstate(all="ignore"):
            merged[:, k] = np.where(number > 0, total / number, np.nan)
    line = numbers[int(same[0]) + 1]
    doubled = int(np.sum(count > 1))
    return merged, unique, [f"{doubled} times stand more than once, the first in line {line}; their values are averaged"]


def _missing(channels: Sequence[Channel], numbers: list[int]) -> list[str]:
    said = []
    for channel in channels:
        bad = np.flatnonzero(~np.isfinite(channel.values))
        if bad.size == channel.values.size:
            raise waveform_refused(f"channel `{channel.name}` holds no number at all")
        if bad.size:
            line = numbers[min(int(bad[0]), len(numbers) - 1)]
            said.append(f"channel `{channel.name}` has {bad.size} values that are no number, the first in line {line}; left out")
    return said


def _gaps(time: FloatArray) -> list[str]:
    step = np.diff(time)
    wide = np.flatnonzero(step > GAP_STEPS * float(np.median(step)))
    if not wide.size:
        return []
    k = int(wide[0])
    at, size = format_value(float(time[k]), units.TIME, digits=5), format_value(float(step[k]), units.TIME, digits=3)
    count = "a gap" if wide.size == 1 else f"{wide.size} gaps"
    return [f"{count} in the record, the first of {size} after {at}; no average is taken across"]
