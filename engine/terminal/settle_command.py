"""`polewise settle`."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

from polewise.errors import EXIT_HOLDS, EXIT_NETLIST_WRONG
from polewise.results.settled import Settled
from polewise.terminal.json_form import diagnostics_content
from polewise.terminal.main import print_json, print_lines, read_or_tell, tell
from polewise.terminal.settled_text import settled_lines


def run_settle(file: Path, given: dict[str, str], inner: bool, as_json: bool) -> int:
    """Settle a file; the exit code."""
    system = read_or_tell(file, given, as_json)
    if system is None:
        return EXIT_NETLIST_WRONG
    settled = system.settled()
    if as_json:
        print_json(
            {"exit_code": EXIT_HOLDS, **settled_content(settled), "diagnostics": diagnostics_content((*system.diagnostics, *settled.warnings))}
        )
        return EXIT_HOLDS
    print_lines(lambda style: settled_lines(settled, style, inner=inner))
    tell((*(d for d in system.diagnostics if d.severity.value == "warning"), *settled.warnings))
    return EXIT_HOLDS


def settled_content(settled: Settled) -> dict[str, Any]:
    """An operating point as plain JSON values: every quantity that can be read, with its unit."""
    names = settled.names
    values = settled.values(names)
    balance = settled.power_balance
    return {
        "title": settled.circuit.title,
        "strategy": settled.strategy,
        "iterations": settled.iterations,
        "values": {name: {"value": value, "unit": settled.unit(name)} for name, value in zip(names, values, strict=True)},
        "poles": [asdict(pole) for pole in settled.poles],
        "power": {kind: {**asdict(flow), "residual_w": flow.residual_w} for kind, flow in balance.flows.items()},
        "losses_w": dict(settled.losses),
        "findings": [asdict(finding) for finding in settled.findings],
    }
