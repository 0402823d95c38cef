"""Runs that are stopped: Ctrl-C keeps what is done and says so; a killed run leaves a summary that says it is not complete."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pyarrow.parquet as parquet
import pytest

from polewise.results.failures import DamagedRecording
from polewise.results.result import open_recorded

# A lightly damped circuit driven without end: the run takes minutes if it is let.
NETLIST = """title "Long hum"
reference gnd
source: top --[10 V * sin(2*pi * 1 kHz * time)]-- gnd
tank:   top --[r: 1 ohm]--[l: 1 mH]-- mid
store:  mid --[c: 10 uF]-- gnd
study hum {
    start cold
    run for 2000 s
    keep mid.v, tank.i
    calm: require mid.v within -100 V .. 100 V
    late: require mid.v within -100 V .. 100 V after 1999 s
}
study next_one {
    start cold
    run for 2000 s
}
"""
PATIENCE_S = 120.0


def _start(folder: Path) -> subprocess.Popen[str]:
    (folder / "hum.pole").write_text(NETLIST, encoding="utf-8")
    command = [sys.executable, "-m", "polewise", "run", str(folder / "hum.pole"), "--out", str(folder / "out"), "--no-figure"]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, "NO_COLOR": "1"})


def _wait_for_rows(process: subprocess.Popen[str], file: Path, least_bytes: int) -> None:
    deadline = time.monotonic() + PATIENCE_S
    while not (file.exists() and file.stat().st_size >= least_bytes):
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline, "the run wrote nothing"
        time.sleep(0.05)
    time.sleep(0.5)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_interrupted_run_keeps_what_is_done(tmp_path: Path, number: signal.Signals) -> None:
    process = _start(tmp_path)
    _wait_for_rows(process, tmp_path / "out" / "hum.parquet", 4)
    process.send_signal(number)
    said, complained = process.communicate(timeout=PATIENCE_S)
    assert process.returncode == 3
    assert "Traceback" not in said + complained
    assert "INCOMPLETE: stopped at" in said
    assert "NOT SEEN" in said
    assert "next_one" not in said
    recorded = open_recorded(tmp_path / "out" / "hum.parquet")
    assert not recorded.complete
    assert recorded.time.size > 100
    assert recorded["mid.v"].size == recorded.time.size
    summary = json.loads((tmp_path / "out" / "hum.json").read_text(encoding="utf-8"))
    assert summary["complete"] is False
    assert summary["reached_s"] == pytest.approx(recorded.time[-1])
    assert [r["evaluated"] for r in summary["verdict"]["requirements"]] == [False, False]


def test_killed_run_is_known_as_such(tmp_path: Path) -> None:
    process = _start(tmp_path)
    _wait_for_rows(process, tmp_path / "out" / "hum.parquet", 4)
    process.kill()
    process.communicate(timeout=PATIENCE_S)
    summary = json.loads((tmp_path / "out" / "hum.json").read_text(encoding="utf-8"))
    assert summary["complete"] is False
    assert "killed" in summary["reason"]
    with pytest.raises(DamagedRecording, match="cut off"):
        open_recorded(tmp_path / "out" / "hum.parquet")


def test_memory_stays_bounded_while_rows_stream(tmp_path: Path) -> None:
    """Row groups reach the disk while the run goes on, and the process does not grow with them."""
    process = _start(tmp_path)
    file = tmp_path / "out" / "hum.parquet"
    try:
        _wait_for_rows(process, file, 4_000_000)
        first = _resident_bytes(process.pid)
        _wait_for_rows(process, file, 30_000_000)
        second = _resident_bytes(process.pid)
    finally:
        process.send_signal(signal.SIGINT)
        process.communicate(timeout=PATIENCE_S)
    assert parquet.ParquetFile(file).metadata.num_row_groups >= 2
    assert second - first < 60_000_000


def _resident_bytes(pid: int) -> int:
    pages = int(Path(f"/proc/{pid}/statm").read_text(encoding="ascii").split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE")
