"""A diagnostic: what is wrong or doubtful in a netlist, where, and what may help. Data only; faces render it."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from polewise.grammar.source import Span


class Severity(Enum):
    """How much a diagnostic matters."""

    ERROR = "error"
    WARNING = "warning"
    NOTE = "note"


@dataclass(frozen=True, slots=True)
class Label:
    """A further place that belongs to a diagnostic, with what it has to do with it."""

    span: Span
    text: str


@dataclass(frozen=True, slots=True)
class Edit:
    """A replacement that would mend the text."""

    span: Span
    replacement: str


@dataclass(frozen=True, slots=True)
class Diagnostic:
    """One finding.

    Args:
        code: stable, e.g. "unit-mismatch"; docs/errors/CODE.md explains it.
        severity: error, warning or note.
        headline: one sentence in the user's words, no full stop at its end.
        span: the shortest place that shows the problem.
        labels: other places, e.g. where the expectation comes from.
        hint: at most one likely repair, as a sentence.
        edit: the repair as an edit, where it is certain enough for an editor to offer.
    """

    code: str
    severity: Severity
    headline: str
    span: Span
    labels: tuple[Label, ...] = ()
    hint: str | None = None
    edit: Edit | None = None

    @property
    def is_error(self) -> bool:
        """Whether it stops the netlist from being used."""
        return self.severity is Severity.ERROR
