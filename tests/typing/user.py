"""A user's file: every public name as a caller would use it. mypy must accept it in strict mode; the suite also runs it."""

from __future__ import annotations

from pathlib import Path
from typing import assert_type

import numpy as np
from numpy.typing import NDArray

import polewise

NETLIST = """
title "Discharge"
reference gnd
given r = 1 kohm
store: top --[c: 1 mF initially 10 V]-- gnd
leak:  top --[r]-- gnd
study decay {
    start cold
    run for 1 s
    keep top.v
    low: require top.v below 5 V after 700 ms
}
"""


def read() -> polewise.System:
    """Read, or report what is wrong."""
    try:
        return polewise.from_text(NETLIST, given={"r": "900 ohm"})
    except polewise.NetlistError as error:
        for diagnostic in error.diagnostics:
            assert_type(diagnostic, polewise.Diagnostic)
            assert_type(diagnostic.severity, polewise.Severity)
        raise


def use(system: polewise.System) -> float:
    """Run and read."""
    assert_type(system.studies, tuple[str, ...])
    assert_type(system.check(), polewise.Overview)
    steps: list[float] = []

    def note(progress: polewise.Progress) -> None:
        steps.append(progress.share)

    result = system.with_given({"r": 1000.0}).run("decay", tolerance=1e-8, keep=["top.v", "leak.i"], progress=note, at=[0.1, 0.2])
    assert_type(result, polewise.Result)
    assert_type(result["top.v"], NDArray[np.float64])
    assert_type(result.time, NDArray[np.float64])
    assert_type(result.unit("top.v"), str)
    assert_type(result.verdict, polewise.Verdict)
    for requirement in result.verdict.requirements:
        assert_type(requirement, polewise.RequirementVerdict)
        assert_type(requirement.margin, float | None)
    for event in result.events:
        assert_type(event.time_s, float)
    assert_type(result.counters["steps"], int)
    assert_type(result.complete, bool)
    return float(result.at("top.v", [0.5])[0])


def rest(system: polewise.System) -> float:
    """Read the operating point."""
    settled = system.settled()
    assert_type(settled, polewise.Settled)
    assert_type(settled["top.v"], float)
    assert_type(settled.power_balance, polewise.PowerBalance)
    assert_type(settled.losses[""], float)
    try:
        settled["topp.v"]
    except polewise.UnknownName as error:
        assert_type(error.nearest, tuple[str, ...])
    return settled["top.v"]


def reopen(path: Path) -> polewise.RecordedFile:
    """Read a recorded file again."""
    recorded = polewise.open_recorded(path)
    assert_type(recorded.names, tuple[str, ...])
    return recorded


def load(path: str) -> polewise.System | None:
    """Read a file without exceptions for what is wrong in it."""
    system, found = polewise.read(path)
    assert_type(found, tuple[polewise.Diagnostic, ...])
    return system
