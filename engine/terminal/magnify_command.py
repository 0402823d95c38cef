"""`polewise magnify`: a stretch of a study, or the periodic state at the operating point, with every switching edge."""

from __future__ import annotations

from pathlib import Path

import click

from polewise.analysis.magnified import EdgeWindow
from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG
from polewise.grammar.units import TIME, read_value
from polewise.results.failures import OutputFailed
from polewise.terminal.main import print_json, print_lines, read_or_tell
from polewise.terminal.progress import StudyProgress, say_first_compile
from polewise.terminal.stress_text import window_content, window_lines
from polewise.terminal.tables import title_line


def run_magnify(
    file: Path,
    study: str | None,
    begin: str | None,
    end: str | None,
    keep: tuple[str, ...],
    given: dict[str, str],
    figure: Path | None,
    as_json: bool,
) -> int:
    """Run a window; the exit code."""
    if study is not None and (begin is None or end is None):
        raise click.UsageError("say which stretch: --from T1 --to T2 (or leave STUDY away for the periodic state at the operating point)")
    system = read_or_tell(file, given, as_json)
    if system is None:
        return EXIT_NETLIST_WRONG
    say_first_compile()
    chosen = keep or None
    if study is None:
        result: EdgeWindow = system.magnify_settled(keep=chosen)
    else:
        assert begin is not None
        assert end is not None
        with StudyProgress(study) as progress:
            result = system.magnify(study, time_of(begin), time_of(end), keep=chosen, progress=progress)
    if figure is not None:
        try:
            result.figure().savefig(figure)
        except OSError as error:
            raise OutputFailed(str(figure), error.strerror or str(error)) from error
    if as_json:
        print_json({"exit_code": EXIT_HOLDS, "study": study, **window_content(result)})
        return EXIT_HOLDS
    print_lines(
        lambda style: [title_line(f"every edge of {study}" if study else "every edge at the operating point", style), *window_lines(result, style)]
    )
    return EXIT_HOLDS


def time_of(text: str) -> float:
    """A time from the command line, s."""
    got = read_value(text)
    if got is None or got[1] != TIME:
        raise click.BadParameter(f"`{text}` is not a time such as 20ms")
    return got[0]
