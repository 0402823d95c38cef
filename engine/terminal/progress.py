"""The progress line of a run: share done, study time, time remaining; only where a person looks."""

from __future__ import annotations

import os
import sys
import time
from pathlib import Path
from types import TracebackType
from typing import Final, TextIO

import click

from polewise.grammar.units import TIME, format_value
from polewise.results.study_run import Progress
from polewise.terminal.style import style_of

_CELLS: Final = 24
_DRAWN_EVERY_S: Final = 0.2
_ESTIMATE_FROM_SHARE: Final = 0.005  # before, the time remaining is anyone's guess


class StudyProgress:
    """Shows how far a study is on a stream; on anything but a terminal it shows nothing."""

    def __init__(self, study: str, stream: TextIO | None = None) -> None:
        self._study = study
        self._stream = sys.stderr if stream is None else stream
        self._shown = False
        self._began_s = time.monotonic()
        self._drawn_s = -1.0

    def __enter__(self) -> StudyProgress:
        self._began_s = time.monotonic()
        if self._stream.isatty():
            self._draw(f"{self._study}: begins")
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        if self._shown:
            self._stream.write("\r\033[K")
            self._stream.flush()

    def __call__(self, progress: Progress) -> None:
        """Take note of how far the run is."""
        now_s = time.monotonic()
        if not self._shown or now_s - self._drawn_s < _DRAWN_EVERY_S:
            return
        self._drawn_s = now_s
        self._draw(progress_text(self._study, progress, now_s - self._began_s))

    def _draw(self, text: str) -> None:
        self._shown = True
        self._stream.write("\r" + style_of(self._stream).paint(text, "faint") + "\033[K")
        self._stream.flush()


def progress_text(study: str, progress: Progress, elapsed_s: float) -> str:
    """ "load_step  [######..................]  25 %  20 ms of 80 ms, about 3 s left"."""
    share = progress.share
    full = int(share * _CELLS)
    bar = "#" * full + "." * (_CELLS - full)
    at = f"{format_value(progress.time_s, TIME, digits=3)} of {format_value(progress.end_s, TIME, digits=3)}"
    left = "" if share < _ESTIMATE_FROM_SHARE else f", about {_duration(elapsed_s * (1.0 - share) / share)} left"
    return f"{study}  [{bar}]  {100.0 * share:.0f} %  {at}{left}"


def _duration(seconds: float) -> str:
    if seconds < 100.0:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60.0)
    return f"{minutes} min" if minutes < 100 else f"{minutes // 60} h {minutes % 60} min"


def say_first_compile() -> None:
    """Where the compiled kernels are not cached yet, say why the first run takes some seconds."""
    if os.environ.get("NUMBA_CACHE_DIR"):
        return
    from polewise.kernels import opcodes

    cache = Path(opcodes.__file__).parent / "__pycache__"
    if not any(cache.glob("*.nbi")):
        click.echo("first run on this machine: compiling the solver, once, some seconds …", err=True)
