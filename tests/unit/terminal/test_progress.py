"""The progress line: shown to people only, wiped at the end, honest about what it does not know yet."""

from __future__ import annotations

import io

import pytest

from polewise.results.study_run import Progress
from polewise.terminal.progress import StudyProgress, progress_text


class _Terminal(io.StringIO):
    encoding = "utf-8"

    def isatty(self) -> bool:
        return True


def test_text() -> None:
    assert progress_text("load_step", Progress(0.02, 0.08), 1.0) == "load_step  [######..................]  25 %  20 ms of 80 ms, about 3 s left"
    assert progress_text("s", Progress(0.0, 1.0), 5.0) == "s  [........................]  0 %  0 s of 1 s"
    assert progress_text("s", Progress(36.0, 3600.0), 60.0).endswith("36 s of 3600 s, about 99 min left")
    assert progress_text("s", Progress(36.0, 3600.0), 600.0).endswith("about 16 h 30 min left")
    assert progress_text("s", Progress(2.0, 1.0), 1.0).startswith("s  [########################]  100 %")


def test_a_terminal_sees_a_line_that_goes_away(monkeypatch: pytest.MonkeyPatch) -> None:
    clock = iter(float(t) for t in range(100))
    monkeypatch.setattr("polewise.terminal.progress.time.monotonic", lambda: next(clock))
    stream = _Terminal()
    with StudyProgress("hum", stream) as progress:
        progress(Progress(0.5, 1.0))
    shown = stream.getvalue()
    assert "hum: begins" in shown
    assert "50 %" in shown
    assert "\n" not in shown
    assert shown.endswith("\r\033[K")


def test_a_pipe_sees_nothing() -> None:
    stream = io.StringIO()
    with StudyProgress("hum", stream) as progress:
        progress(Progress(0.5, 1.0))
    assert stream.getvalue() == ""
