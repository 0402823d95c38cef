"""`polewise format`: the canonical layout of one file."""

from __future__ import annotations

from pathlib import Path

import click

from polewise.circuit.load import load_files
from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG
from polewise.grammar.layout import to_text
from polewise.terminal.main import tell


def run_format(file: Path) -> int:
    """Print a file in canonical layout."""
    sources, found = load_files(file)
    if any(d.is_error for d in found):
        tell(found)
        return EXIT_NETLIST_WRONG
    click.echo(to_text(sources.netlists[-1]), nl=False)
    return EXIT_HOLDS
