"""Recordings in memory, spilled to disk, as Parquet and as CSV: what goes in comes out, with bounded memory and clear words about damage."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pyarrow.parquet as parquet
import pytest

from polewise.grammar import units
from polewise.results import parquet_file
from polewise.results.csv_file import CsvSink
from polewise.results.curve import AFTER, BEFORE, END, INTERIOR
from polewise.results.failures import DamagedRecording, UnknownName
from polewise.results.parquet_file import ParquetRecording, ParquetSink, dimension_from_text, dimension_text
from polewise.results.recording import Column, MemorySink, row_blocks
from polewise.results.result import open_recorded

COLUMNS = (
    Column("bus.v", units.VOLTAGE),
    Column("bus", units.NONE),
    Column("k.closed", units.NONE, True),
    Column("r.limit", units.CURRENT, role="judged"),
)


def _rows(first: int, count: int) -> np.ndarray:
    index = np.arange(first, first + count, dtype=float)
    flag = np.where(index % 3 == 0, END, INTERIOR).astype(float)
    return np.column_stack([index * 1e-3, flag, index * 2.0, -index, index % 2.0, np.sqrt(index)])


@pytest.mark.parametrize("limit_bytes", [10**9, 5000])
def test_memory_and_spilled_rows_read_the_same(limit_bytes: int) -> None:
    sink = MemorySink(COLUMNS, limit_bytes=limit_bytes)
    buffer = np.empty((100, 6))
    for first in range(0, 1000, 100):
        buffer[:] = _rows(first, 100)  # the caller uses its buffer again
        sink.write(buffer)
    record = sink.finish()
    whole = _rows(0, 1000)
    assert np.array_equal(record.grid.time, whole[:, 0])
    assert np.array_equal(record.values("bus.v"), whole[:, 2])
    assert np.array_equal(record.values("r.limit"), whole[:, 5])
    assert not record.values("bus.v").flags.writeable


def test_unknown_column_lists_near_names() -> None:
    sink = MemorySink(COLUMNS)
    sink.write(_rows(0, 3))
    with pytest.raises(UnknownName) as caught:
        sink.finish().values("buss.v")
    assert "bus.v" in caught.value.nearest
    assert isinstance(caught.value, KeyError)
    assert "`buss.v`" in str(caught.value)


def test_parquet_round_trip_with_units(tmp_path: Path) -> None:
    path = tmp_path / "a.parquet"
    sink = ParquetSink(path, COLUMNS, {"study": "s", "title": "T"}, row_group_bytes=8 * 6 * 300)
    sink.write(_rows(0, 1000))
    sink.write(_rows(1000, 1))
    sink.close(complete=True, end_s=1.0)
    record = ParquetRecording(path)
    assert record.complete
    assert record.about["study"] == "s"
    assert record.columns == COLUMNS
    whole = _rows(0, 1001)
    for k, column in enumerate(COLUMNS):
        assert np.array_equal(record.values(column.name), whole[:, 2 + k])
    file = parquet.ParquetFile(path)
    assert file.metadata.num_row_groups == 4
    field = file.schema_arrow.field("bus.v")
    assert field.metadata == {b"unit": b"V", b"dimension": b"kg m^2 s^-3 A^-1", b"role": b"kept"}
    assert str(file.schema_arrow.field("k.closed").type) == "bool"
    assert json.loads(file.metadata.metadata[b"polewise.complete"]) is True


def test_incomplete_run_is_marked(tmp_path: Path) -> None:
    sink = ParquetSink(tmp_path / "a.parquet", COLUMNS, {})
    sink.write(_rows(0, 10))
    sink.close(complete=False, end_s=0.009)
    got = open_recorded(tmp_path / "a.parquet")
    assert not got.complete
    assert got.about["end_s"] == "0.009"
    assert got.names == ("bus.v", "bus", "k.closed")


def test_memory_of_the_parquet_sink_is_bounded(tmp_path: Path) -> None:
    sink = ParquetSink(tmp_path / "a.parquet", COLUMNS, {}, row_group_bytes=8 * 6 * 500)
    for first in range(0, 20_000, 1000):
        sink.write(_rows(first, 1000))
        assert sink.rows >= first + 500  # everything but the last partial row group is on disk
    sink.close(complete=True, end_s=1.0)
    assert sink._buffer.nbytes == 8 * 6 * 500


@pytest.mark.parametrize("kept", [0.0, 0.3, 0.98])
def test_cut_off_file_says_so(tmp_path: Path, kept: float) -> None:
    path = tmp_path / "a.parquet"
    sink = ParquetSink(path, COLUMNS, {})
    sink.write(_rows(0, 2000))
    sink.close(complete=True, end_s=1.0)
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * kept)])
    with pytest.raises(DamagedRecording, match="cut off") as caught:
        open_recorded(path)
    assert "run the study again" in str(caught.value)


def test_foreign_and_missing_files(tmp_path: Path) -> None:
    with pytest.raises(DamagedRecording, match="no such file"):
        open_recorded(tmp_path / "nothing.parquet")
    import pyarrow

    parquet.write_table(pyarrow.table({"x": [1.0]}), tmp_path / "x.parquet")
    with pytest.raises(DamagedRecording, match="not written by a run"):
        open_recorded(tmp_path / "x.parquet")


def test_dimensions_survive_as_text() -> None:
    for dimension in (units.NONE, units.VOLTAGE, units.CAPACITANCE, units.VOLTAGE ** units.Fraction(1, 2)):
        assert dimension_from_text(dimension_text(dimension)) == dimension


def test_csv_has_units_and_step_ends(tmp_path: Path) -> None:
    sink = CsvSink(tmp_path / "a.csv", COLUMNS)
    rows = np.array(
        [
            [0.0, AFTER, 1.0, 2.0, 1.0, 9.0],
            [0.5, INTERIOR, 3.0, 3.0, 1.0, 9.0],
            [1.0, BEFORE, 1.0 / 3.0, 2.0, 1.0, 9.0],
            [1.0, AFTER, 5.0, 2.0, 0.0, 9.0],
        ]
    )
    sink.write(rows)
    sink.close()
    lines = list(csv.reader((tmp_path / "a.csv").read_text(encoding="utf-8").splitlines()))
    assert lines[0] == ["time (s)", "bus.v (V)", "bus (1)", "k.closed (0 or 1)"]
    assert lines[1:] == [["0", "1", "2", "1"], ["1", "0.333333333333", "2", "1"], ["1", "5", "2", "0"]]


def test_row_blocks_give_the_rows_again() -> None:
    sink = MemorySink(COLUMNS)
    sink.write(_rows(0, 50))
    assert np.array_equal(np.vstack(list(row_blocks(sink.finish(), COLUMNS))), _rows(0, 50))


def test_missing_pyarrow_names_the_extra(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    import builtins

    from polewise.results.failures import MissingExtra

    real = builtins.__import__

    def without(name: str, *args: object, **more: object) -> object:
        if name.startswith("pyarrow"):
            raise ImportError(name)
        return real(name, *args, **more)  # type: ignore[arg-type]

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(MissingExtra) as caught:
        parquet_file.ParquetSink(tmp_path / "a.parquet", COLUMNS, {})
    assert 'pip install "polewise[parquet]"' in str(caught.value)
    assert caught.value.exit_code == 2
