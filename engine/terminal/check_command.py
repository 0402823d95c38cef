"""`polewise check`."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG
from polewise.results.overview import Overview
from polewise.terminal.json_form import diagnostics_content
from polewise.terminal.main import print_json, print_lines, read_or_tell, tell
from polewise.terminal.overview_text import overview_lines


def run_check(file: Path, given: dict[str, str], as_json: bool) -> int:
    """Check a file; the exit code."""
    system = read_or_tell(file, given, as_json)
    if system is None:
        return EXIT_NETLIST_WRONG
    facts = system.check()
    if as_json:
        print_json({"exit_code": EXIT_HOLDS, "overview": overview_content(facts), "diagnostics": diagnostics_content(facts.diagnostics)})
        return EXIT_HOLDS
    print_lines(lambda style: overview_lines(facts, style))
    tell(facts.diagnostics)
    return EXIT_HOLDS


def overview_content(facts: Overview) -> dict[str, Any]:
    """An overview as plain JSON values."""
    return {
        "title": facts.title,
        "files": list(facts.files),
        "counts": dict(facts.counts),
        "islands": [asdict(island) for island in facts.islands],
        "assemblies": dict(facts.assemblies),
        "chokes": {pole: list(chokes) for pole, chokes in facts.chokes.items()},
        "dependent": list(facts.dependent),
        "studies": [asdict(study) for study in facts.studies],
    }
