"""What can't be analysed, in words: names that are no input, circuits that never rest, clocks that have no common period."""

from __future__ import annotations

from collections.abc import Iterable

from polewise.circuit.model import Circuit
from polewise.circuit.quantities import all_quantities
from polewise.errors import EXIT_NETLIST_WRONG, EXIT_NOT_FINISHED, PolewiseError
from polewise.grammar.diagnostics import Diagnostic, Severity
from polewise.grammar.source import Span, no_span
from polewise.results.failures import UnknownName, nearest_names


class AnalysisRefused(PolewiseError):
    """A small-signal question that has no answer for this circuit; the headline says why."""

    exit_code = EXIT_NOT_FINISHED


class NotAnInput(PolewiseError):
    """A quantity that follows from others and can't be disturbed by itself."""

    exit_code = EXIT_NETLIST_WRONG


def refused(code: str, headline: str, hint: str | None = None, span: Span | None = None) -> AnalysisRefused:
    """An AnalysisRefused with one diagnostic."""
    return AnalysisRefused([Diagnostic(code, Severity.ERROR, headline, span or no_span(), hint=hint)])


def unknown_input(circuit: Circuit, name: str, found: Diagnostic) -> UnknownName:
    """A name that stands for nothing."""
    return UnknownName(name, found.headline, nearest_names(name, (q.name for q in all_quantities(circuit))), found.hint)


def unknown_node(name: str, known: Iterable[str]) -> UnknownName:
    """A node that there is not."""
    return UnknownName(name, f"there is no node `{name}`", nearest_names(name, known))


def not_an_input(name: str) -> NotAnInput:
    """A quantity that can't be disturbed."""
    hint = "inputs are signals, states, latches, `input`s, the v or i of a source, the p of a constant power and the duty of a pole"
    return NotAnInput(
        [Diagnostic("not-an-input", Severity.ERROR, f"`{name}` follows from other quantities and can't be an input", no_span(), hint=hint)]
    )


def no_constant_point(cause: Diagnostic, hint: str) -> AnalysisRefused:
    """A circuit that reads `time`: no constant operating point."""
    headline = f"the circuit has no constant operating point: {cause.headline}"
    return AnalysisRefused([Diagnostic("no-constant-point", Severity.ERROR, headline, cause.span, hint=hint)])


class WaveformRefused(PolewiseError):
    """A waveform that can't be averaged as it stands; the headline says why."""

    exit_code = EXIT_NETLIST_WRONG


def waveform_refused(headline: str, hint: str | None = None) -> WaveformRefused:
    """A WaveformRefused with one diagnostic."""
    return WaveformRefused([Diagnostic("waveform", Severity.ERROR, headline, no_span(), hint=hint)])


class EdgesRefused(PolewiseError):
    """An edge-by-edge window that can't be made; the headline says why."""

    exit_code = EXIT_NETLIST_WRONG


def edges_refused(headline: str, hint: str | None = None, span: Span | None = None) -> EdgesRefused:
    """An EdgesRefused with one diagnostic."""
    return EdgesRefused([Diagnostic("no-edges", Severity.ERROR, headline, span or no_span(), hint=hint)])
