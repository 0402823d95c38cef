"""A disk that fills up while results are written ends in a sentence and exit code 3, never in a traceback or a file that looks whole."""

from __future__ import annotations

import json
import os
from pathlib import Path

import numpy as np
import pytest

from polewise.grammar import units
from polewise.results.csv_file import CsvSink
from polewise.results.failures import OutputFailed
from polewise.results.parquet_file import ParquetSink
from polewise.results.recording import Column, MemorySink, Sink
from polewise.results.summary import read_summary, write_summary
from polewise.terminal.main import run_command_line

FULL = Path("/dev/full")  # every write to it fails as on a full disk
pytestmark = pytest.mark.skipif(not FULL.exists(), reason="needs /dev/full")
COLUMNS = (Column("bus.v", units.VOLTAGE),)
NETLIST = """title "Discharge"
reference gnd
store: top --[c: 1 mF initially 10 V]-- gnd
leak:  top --[1 kohm]-- gnd
study decay {
    start cold
    run for 1 s
    keep top.v, leak.i
    require top.v below 11 V
}
"""


def _rows(count: int) -> np.ndarray:
    time = np.arange(count) * 1e-6
    return np.column_stack([time, np.ones(count), np.random.default_rng(1).normal(size=count)])


def _fill(sink: Sink) -> None:
    for _ in range(100):
        sink.write(_rows(10_000))


def test_parquet() -> None:
    sink = ParquetSink(FULL, COLUMNS, {}, row_group_bytes=24 * 1000)
    with pytest.raises(OutputFailed, match="No space left on device"):
        _fill(sink)
    sink.abandon()


def test_parquet_that_fills_up_at_its_foot() -> None:
    sink = ParquetSink(FULL, COLUMNS, {})
    sink.write(_rows(10))
    with pytest.raises(OutputFailed, match="No space left on device"):
        sink.close(complete=True, end_s=1.0)


def test_csv() -> None:
    sink = CsvSink(FULL, COLUMNS)
    with pytest.raises(OutputFailed, match="No space left on device"):
        sink.write(_rows(100_000))
    sink.abandon()


def test_temporary_file_of_a_long_run(monkeypatch: pytest.MonkeyPatch) -> None:
    import tempfile

    monkeypatch.setattr(tempfile, "TemporaryFile", lambda **_: FULL.open("wb", buffering=0))
    sink = MemorySink(COLUMNS, limit_bytes=1000)
    with pytest.raises(OutputFailed, match="temporary file"):
        _fill(sink)
    assert sink._file is not None
    sink._file.close()


def test_summary_stays_the_old_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "s.json"
    write_summary(path, {"study": "s", "complete": False})

    def full(self: Path, *_: object, **__: object) -> int:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "write_text", full)
    with pytest.raises(OutputFailed):
        write_summary(path, {"study": "s", "complete": True})
    assert read_summary(path) == {"study": "s", "complete": False}


def test_command_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "a.pole").write_text(NETLIST, encoding="utf-8")
    out = tmp_path / "out"
    out.mkdir()
    os.symlink(FULL, out / "decay.parquet")
    assert run_command_line(["run", str(tmp_path / "a.pole"), "--out", str(out)]) == 3
    said = capsys.readouterr()
    assert "could not be written: No space left on device" in said.err
    assert "Traceback" not in said.err + said.out
    summary = json.loads((out / "decay.json").read_text(encoding="utf-8"))
    assert summary["complete"] is False
    assert "No space left on device" in summary["reason"]


def test_a_folder_that_can_not_be_made(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "a.pole").write_text(NETLIST, encoding="utf-8")
    (tmp_path / "file").write_text("", encoding="utf-8")
    assert run_command_line(["run", str(tmp_path / "a.pole"), "--out", str(tmp_path / "file" / "out")]) == 3
    assert "could not be written" in capsys.readouterr().err
