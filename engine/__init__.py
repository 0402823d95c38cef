"""Averaged-netlist solver for power-conversion systems: many switching converters on common buses, from one plain-text netlist.

Names are imported when first used, so that `import polewise` itself costs next to nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from polewise.api import System, from_text, load, read, read_text
    from polewise.errors import NetlistError, NoOperatingPoint, PolewiseError, SolverError
    from polewise.grammar.diagnostics import Diagnostic, Severity
    from polewise.results.balance import PowerBalance
    from polewise.results.failures import DamagedRecording, MissingExtra, OutputFailed, UnknownName
    from polewise.results.overview import Overview
    from polewise.results.result import EventEntry, RecordedFile, Result, open_recorded
    from polewise.results.settled import PoleState, Settled
    from polewise.results.study_run import Progress
    from polewise.results.verdict import RequirementVerdict, Verdict

__version__: str  # of the installed package; pyproject.toml is its one source

_HOMES = {
    "DamagedRecording": "polewise.results.failures",
    "Diagnostic": "polewise.grammar.diagnostics",
    "EventEntry": "polewise.results.result",
    "MissingExtra": "polewise.results.failures",
    "NetlistError": "polewise.errors",
    "NoOperatingPoint": "polewise.errors",
    "OutputFailed": "polewise.results.failures",
    "Overview": "polewise.results.overview",
    "PoleState": "polewise.results.settled",
    "PolewiseError": "polewise.errors",
    "PowerBalance": "polewise.results.balance",
    "Progress": "polewise.results.study_run",
    "RecordedFile": "polewise.results.result",
    "RequirementVerdict": "polewise.results.verdict",
    "Result": "polewise.results.result",
    "Settled": "polewise.results.settled",
    "Severity": "polewise.grammar.diagnostics",
    "SolverError": "polewise.errors",
    "System": "polewise.api",
    "UnknownName": "polewise.results.failures",
    "Verdict": "polewise.results.verdict",
    "from_text": "polewise.api",
    "load": "polewise.api",
    "open_recorded": "polewise.results.result",
    "read": "polewise.api",
    "read_text": "polewise.api",
}

__all__ = [
    "DamagedRecording",
    "Diagnostic",
    "EventEntry",
    "MissingExtra",
    "NetlistError",
    "NoOperatingPoint",
    "OutputFailed",
    "Overview",
    "PoleState",
    "PolewiseError",
    "PowerBalance",
    "Progress",
    "RecordedFile",
    "RequirementVerdict",
    "Result",
    "Settled",
    "Severity",
    "SolverError",
    "System",
    "UnknownName",
    "Verdict",
    "__version__",
    "from_text",
    "load",
    "open_recorded",
    "read",
    "read_text",
]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("polewise")
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
