"""`polewise trust`: where the averages of a file may be believed."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from polewise.analysis.trust import Trust
from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG, EXIT_REQUIREMENT_FAILS
from polewise.terminal.main import print_json, print_lines, read_or_tell
from polewise.terminal.progress import say_first_compile
from polewise.terminal.trust_text import trust_content, trust_lines


def run_trust(file: Path, studies: Sequence[str], given: dict[str, str], as_json: bool) -> int:
    """Report on the operating point, or on studies (each is run for it); the exit code: 1 where something is not valid."""
    system = read_or_tell(file, given, as_json)
    if system is None:
        return EXIT_NETLIST_WRONG
    say_first_compile()
    reports = [system.trust(study) for study in studies] if studies else [system.trust()]
    code = EXIT_REQUIREMENT_FAILS if any(r.trust is Trust.NOT_VALID for r in reports) else EXIT_HOLDS
    if as_json:
        print_json({"exit_code": code, "title": system.title, "reports": [trust_content(r) for r in reports]})
        return code
    for report in reports:
        print_lines(lambda style, r=report: [*trust_lines(r, style), ""])  # type: ignore[misc]
    return code
