"""The progress line of a run: study time, share, time remaining; only where a person looks."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any

import click

from polewise.api import Progress
from polewise.grammar.units import TIME, format_value

if TYPE_CHECKING:
    from rich.progress import Progress as Bar


class StudyProgress:
    """Shows how far a study is on the error stream; on anything but a terminal it shows nothing."""

    def __init__(self, study: str) -> None:
        self._study = study
        self._bar: Bar | None = None
        self._task: Any = None

    def __enter__(self) -> StudyProgress:
        if sys.stderr.isatty():
            from rich.console import Console
            from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
            from rich.progress import Progress as Bar

            self._bar = Bar(
                TextColumn("{task.description}"),
                BarColumn(bar_width=30),
                TextColumn("{task.percentage:>3.0f} %  {task.fields[at]}  about"),
                TimeRemainingColumn(compact=True),
                TextColumn("left"),
                console=Console(stderr=True),
                transient=True,
            )
            self._bar.start()
            self._task = self._bar.add_task(self._study, total=1.0, at="")
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        if self._bar is not None:
            self._bar.stop()

    def __call__(self, progress: Progress) -> None:
        """Take note of how far the run is."""
        if self._bar is not None:
            at = f"{format_value(progress.time_s, TIME, digits=3)} of {format_value(progress.end_s, TIME, digits=3)}"
            self._bar.update(self._task, completed=progress.share, at=at)


def say_first_compile() -> None:
    """Where the compiled kernels are not cached yet, say why the first run takes some seconds."""
    if os.environ.get("NUMBA_CACHE_DIR"):
        return
    from polewise.kernels import opcodes

    cache = Path(opcodes.__file__).parent / "__pycache__"
    if not any(cache.glob("*.nbi")):
        click.echo("first run on this machine: compiling the solver, once, some seconds …", err=True)
