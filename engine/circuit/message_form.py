"""The form all messages of this stage have: severity, labels, hints, lists of names."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Final

from polewise.grammar.diagnostics import Diagnostic, Edit, Label, Severity
from polewise.grammar.source import Span

# Lists in headlines stop here.
LISTED_MAX: Final = 6


def error(code: str, headline: str, span: Span, *, labels: Sequence[Label] = (), hint: str | None = None, replace: str | None = None) -> Diagnostic:
    """Something that stops the netlist from being used."""
    edit = None if replace is None else Edit(span, replace)
    return Diagnostic(code, Severity.ERROR, headline, span, tuple(labels), hint, edit)


def warning(code: str, headline: str, span: Span, *, labels: Sequence[Label] = (), hint: str | None = None) -> Diagnostic:
    """Something doubtful."""
    return Diagnostic(code, Severity.WARNING, headline, span, tuple(labels), hint)


def at(span: Span | None, text: str) -> tuple[Label, ...]:
    """A further place, where there is one."""
    return () if span is None else (Label(span, text),)


def declared_at(span: Span | None) -> tuple[Label, ...]:
    """The place of a declaration."""
    return at(span, "declared here")


def meant(nearest: str | None) -> str | None:
    """The hint for a near name."""
    return None if nearest is None else f"Did you mean `{nearest}`?"


def listed(names: Iterable[str]) -> str:
    """Names for a sentence, the first few of many."""
    names = list(names)
    shown = ", ".join(f"`{name}`" for name in names[:LISTED_MAX])
    return shown + (", …" if len(names) > LISTED_MAX else "")


def article(word: str) -> str:
    """A word with its article."""
    return f"an {word}" if word[0] in "aeiou" else f"a {word}"


def number_text(value: float) -> str:
    """A number for a sentence."""
    return f"{value:.6g}"


def plural(count: int, word: str) -> str:
    """A count with its word."""
    return f"{count} {word}" if count == 1 else f"{count} {word}s"
